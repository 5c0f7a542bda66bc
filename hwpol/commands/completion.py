"""Completion of commands, options and files for the usual shells."""

from __future__ import annotations

import argparse
from importlib import import_module

from hwpol.commands import VERBS
from hwpol.errors import ConfigError

_BASH = """_hwpol() {{
  local word="${{COMP_WORDS[COMP_CWORD]}}" words
  if [ "$COMP_CWORD" -eq 1 ]; then
    words="{verbs} --help --version"
  else
    case "${{COMP_WORDS[1]}}" in
{cases}
    esac
  fi
  COMPREPLY=($(compgen -W "$words" -- "$word") $(compgen -f -- "$word"))
}}
complete -o filenames -F _hwpol hwpol
"""
SHELLS = ("bash", "zsh", "fish")


def completion(shell: str) -> str:
    """Script that teaches a shell to complete ``hwpol``; to be evaluated when the shell starts.

    Raises
    ------
    ConfigError
        For a shell not known.
    """
    if shell not in SHELLS:
        raise ConfigError(f"--completion {shell}: expected one of {', '.join(SHELLS)}")
    options = {verb: _options(verb) for verb in VERBS}
    if shell == "fish":
        lines = [
            f"complete -c hwpol -n __fish_use_subcommand -a {verb} -d '{what}'" for verb, (what, _) in VERBS.items()
        ]
        lines += [
            f"complete -c hwpol -n '__fish_seen_subcommand_from {verb}' -l {option.removeprefix('--')}"
            for verb, listed in options.items()
            for option in listed
        ]
        return "\n".join(lines) + "\n"
    cases = "\n".join(f'      {verb}) words="{" ".join(listed)}" ;;' for verb, listed in options.items())
    script = _BASH.format(verbs=" ".join(VERBS), cases=cases)
    return script if shell == "bash" else f"autoload -U +X bashcompinit && bashcompinit\n{script}"


def _options(verb: str) -> list[str]:
    parser = argparse.ArgumentParser(add_help=False)
    import_module(f"hwpol.commands.{verb}").add_arguments(parser)
    own = [name for action in parser._actions for name in action.option_strings if name.startswith("--")]
    return [*own, "--quiet", "--debug", "--help"]
