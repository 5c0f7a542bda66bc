"""The command line: one file a verb, nothing heavy loaded before a verb is chosen."""

from __future__ import annotations

import argparse
import sys
from collections.abc import Sequence
from importlib import import_module

#: Verb, one line of help, one example.
VERBS: dict[str, tuple[str, str]] = {
    "setup": (
        "propose an instrument and a night file from the headers in a folder",
        "hwpol setup raw/",
    ),
    "plan": (
        "show how frames group into visits and cycles, and what is missing; opens no pixels",
        "hwpol plan night.toml",
    ),
    "reduce": ("reduce a night: frames to calibrated results", "hwpol reduce night.toml --jobs 2"),
    "standards": (
        "standards against catalogue values, and the calibration fitted from them",
        "hwpol standards night1.toml night2.toml",
    ),
    "measure": (
        "one sequence, one source, on screen",
        "hwpol measure raw/blazar_*.fits --instrument instrument.toml --at 512 498",
    ),
    "inject": ("add artificial stars of known polarisation, reduce, compare", "hwpol inject night.toml"),
    "report": ("redraw the page from stored products", "hwpol report night.toml"),
    "explain": ("what a column, flag or setting means", "hwpol explain p_debiased"),
    "simulate": ("make a night of frames with a known truth", "hwpol simulate demo simulated/"),
    "demo": ("simulate a small night, reduce it, print result beside truth", "hwpol demo demo-night"),
}

DONE, ASIDE, FAILED = 0, 1, 2


def main(arguments: Sequence[str] | None = None) -> int:
    """Run one command; return its exit status (0 done; 1 done, with something set aside; 2 could not run)."""
    parser = _parser()
    words = list(sys.argv[1:] if arguments is None else arguments)
    options, rest = parser.parse_known_args(words[:1] if words and words[0] in VERBS else words)
    if options.verb is None:
        parser.print_help()
        return FAILED if words and rest else DONE
    module = import_module(f"hwpol.commands.{options.verb}")
    what, example = VERBS[options.verb]
    own = argparse.ArgumentParser(
        prog=f"hwpol {options.verb}",
        description=what[0].upper() + what[1:] + ".",
        epilog=f"example: {example}",
        formatter_class=argparse.RawDescriptionHelpFormatter,
    )
    module.add_arguments(own)
    own.add_argument("--quiet", action="store_true", help="print results and errors only")
    own.add_argument("--debug", action="store_true", help="show the traceback of an error")
    chosen = own.parse_args(words[1:])
    return _guarded(module.run, chosen)


def _parser() -> argparse.ArgumentParser:
    width = max(len(verb) for verb in VERBS)
    listing = "\n".join(f"  {verb:{width}}  {what}" for verb, (what, _) in VERBS.items())
    parser = argparse.ArgumentParser(
        prog="hwpol",
        description="Imaging polarimetry behind a rotating half-wave plate: raw frames to calibrated results.\n\n"
        f"commands:\n{listing}\n\n`hwpol COMMAND --help` tells more of each.",
        epilog="exit status: 0 done; 1 done, but something was set aside or a check failed; 2 could not run\n"
        "example: hwpol reduce night.toml",
        formatter_class=argparse.RawDescriptionHelpFormatter,
        usage="hwpol COMMAND ...",
    )
    parser.add_argument("--version", action=_Version, nargs=0, help="print the version")
    parser.add_argument(
        "--completion", action=_Completion, metavar="SHELL", help="print a completion script for bash, zsh or fish"
    )
    parser.add_argument("verb", nargs="?", choices=VERBS, metavar="COMMAND", help=argparse.SUPPRESS)
    return parser


class _Completion(argparse.Action):
    """Prints a completion script; a shell that is not known is an error of the command line."""

    def __call__(self, parser: argparse.ArgumentParser, _: object, shell: object, *__: object) -> None:
        from hwpol.commands.completion import completion
        from hwpol.errors import ConfigError

        try:
            print(completion(str(shell)), end="")
        except ConfigError as problem:
            parser.error(str(problem))
        parser.exit()


class _Version(argparse.Action):
    """Prints the version, looked up only then."""

    def __call__(self, parser: argparse.ArgumentParser, *_: object) -> None:
        from importlib.metadata import version

        print(f"hwpol {version('hwpol')}")
        parser.exit()


def _guarded(run: object, options: argparse.Namespace) -> int:
    import warnings

    from hwpol.errors import HwpolError, HwpolWarning

    try:
        with warnings.catch_warnings():
            if not options.debug:
                warnings.simplefilter("ignore")
            warnings.simplefilter("default", HwpolWarning)
            warnings.showwarning = _show
            status = run(options)  # type: ignore[operator]
            sys.stdout.flush()
            return int(status)
    except HwpolError as problem:
        if options.debug:
            raise
        print(f"hwpol: {problem}", file=sys.stderr)
        return FAILED
    except KeyboardInterrupt:
        print("hwpol: stopped; what was finished is kept, run the same command to go on", file=sys.stderr)
        return FAILED
    except BrokenPipeError:
        sys.stderr.close()
        return FAILED
    except Exception as problem:
        if options.debug:
            raise
        print(
            f"hwpol: something went wrong that was not foreseen ({type(problem).__name__}: {problem}); "
            "run again with --debug to see where, and please report it",
            file=sys.stderr,
        )
        return FAILED


def _show(message: object, category: type, *_: object, **__: object) -> None:
    print(f"warning: {message}", file=sys.stderr)
