"""Checks TOML trees against a declared set of keys and lists every problem at once.

A file is declared as a `Table` of `Key`. Each key has a kind (what is allowed), one sentence of help and a
default in the form in which it would stand in the file. `read_tree` returns the parsed values or raises one
`ConfigError` with a line for each problem: ``section.key = value: expected ...``. Nothing is coerced, except that
an integer may stand for a number. Items of lists and arrays of tables are counted from 1 in messages.
"""

from __future__ import annotations

import difflib
import json
import math
import os
import re
import tomllib
from collections.abc import Callable, Iterable, Iterator, Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, Final, Protocol

from hwpol.errors import ConfigError

_BARE_KEY = re.compile(r"[A-Za-z0-9_-]+")
_SHOWN_LENGTH = 60


class _Bad:
    """The value of a key that has a problem."""


BAD: Final = _Bad()


class Unfit(Exception):
    """Raised by a parser for a value that is not allowed; `expected` replaces the text of the kind."""

    def __init__(self, expected: str = "", near: str = "") -> None:
        super().__init__(expected, near)
        self.expected = expected
        self.near = near


def shown(value: Any) -> str:
    """Return `value` on one line, as it would stand in a TOML file, shortened where long."""
    text = _written(value)
    return text if len(text) <= _SHOWN_LENGTH else text[: _SHOWN_LENGTH - 3] + "..."


def _written(value: Any, depth: int = 5) -> str:
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, str):
        return json.dumps(value, ensure_ascii=False)
    if isinstance(value, Mapping | list | tuple) and depth == 0:
        return "..."
    if isinstance(value, Mapping):
        return "{" + ", ".join(f"{_quoted(key)} = {_written(item, depth - 1)}" for key, item in value.items()) + "}"
    if isinstance(value, list | tuple):
        return "[" + ", ".join(_written(item, depth - 1) for item in value) + "]"
    if isinstance(value, int) and abs(value) >= 10**30:
        return "a number of more than 30 digits"
    return " ".join(str(value).split())


def _quoted(name: Any) -> str:
    text = str(name)
    return text if _BARE_KEY.fullmatch(text) else json.dumps(text, ensure_ascii=False)


def joined(place: str, name: Any) -> str:
    """Return the dotted place of key `name` inside the table at `place`."""
    return f"{place}.{_quoted(name)}" if place else _quoted(name)


def nearest(name: str, known: Iterable[str]) -> str:
    """Return the known name most like `name`, or an empty text."""
    by_case = {text.lower(): text for text in known if text != "*"}
    found = difflib.get_close_matches(name.lower(), by_case, n=1, cutoff=0.6)
    return by_case[found[0]] if found else ""


@dataclass
class Problems:
    """The problems of one file, gathered; `folder` is where its relative paths start, `known` its dotted keys."""

    folder: Path = Path()
    known: tuple[str, ...] = ()
    lines: list[str] = field(default_factory=list)

    def add(self, place: str, value: Any, expected: str, near: str = "") -> None:
        """Note that the value found at `place` is not what is expected."""
        self._line(f"{place} = {shown(value)}: expected {expected}", near)

    def missing(self, place: str, expected: str) -> None:
        """Note that a needed key is absent."""
        self._line(f"{place}: missing, expected {expected}", "")

    def unknown(self, place: str, name: Any, value: Any, allowed: tuple[str, ...]) -> None:
        """Note a key that does not exist, with the nearest one here, else the one of that name elsewhere."""
        near = nearest(str(name), allowed)
        if not near:
            elsewhere = {key.rpartition(".")[2]: key for key in reversed(self.known)}
            near = elsewhere.get(nearest(str(name), elsewhere), "")
        expected = f"one of {', '.join(allowed)}" if len(allowed) > 1 else f"only {allowed[0]}"
        self._line(f"{joined(place, name)} = {shown(value)}: unknown key, expected {expected}", near)

    def _line(self, text: str, near: str) -> None:
        self.lines.append(text + (f"; did you mean {json.dumps(near, ensure_ascii=False)}?" if near else ""))

    def apart(self) -> Problems:
        """Return an empty list of problems of the same file, for trying an alternative."""
        return Problems(self.folder, self.known)


class Kind(Protocol):
    """What a value may be: `text` says it in words; `read` parses or notes problems and returns `BAD`."""

    @property
    def text(self) -> str: ...

    def read(self, value: Any, place: str, problems: Problems) -> Any: ...


@dataclass(frozen=True)
class Single:
    """A value checked by one function that returns it parsed or raises `Unfit`."""

    text: str
    parse: Callable[[Any], Any]

    def read(self, value: Any, place: str, problems: Problems) -> Any:
        """Parse `value`, or note the problem."""
        try:
            return self.parse(value)
        except Unfit as unfit:
            problems.add(place, value, unfit.expected or self.text, unfit.near)
            return BAD


@dataclass(frozen=True)
class ListOf:
    """A list of values of one kind, returned as a tuple: exactly `length` of them, or `at_least` to `at_most`."""

    item: Kind
    text: str
    at_least: int = 0
    at_most: float = math.inf
    length: int | None = None

    def read(self, value: Any, place: str, problems: Problems) -> Any:
        """Parse every item; each bad one is a problem of its own."""
        low, high = (self.at_least, self.at_most) if self.length is None else (self.length, self.length)
        if not isinstance(value, list | tuple) or not low <= len(value) <= high:
            problems.add(place, value, self.text)
            return BAD
        items = tuple(self.item.read(item, f"{place}[{number}]", problems) for number, item in enumerate(value, 1))
        return BAD if any(item is BAD for item in items) else items


@dataclass(frozen=True)
class Either:
    """A value of any of several kinds, the first that fits."""

    options: tuple[Kind, ...]

    @property
    def text(self) -> str:
        """What is allowed."""
        *first, last = [option.text for option in self.options]
        return f"{', '.join(first)} or {last}" if first else last

    def read(self, value: Any, place: str, problems: Problems) -> Any:
        """Return the first reading without a problem; else the problems of the option meant, where that is clear."""
        meant: Problems | None = None
        near = ""
        for option in self.options:
            if isinstance(option, Single):
                try:
                    return option.parse(value)
                except Unfit as unfit:
                    near = near or unfit.near
                continue
            trial = problems.apart()
            found = option.read(value, place, trial)
            if found is not BAD:
                return found
            if isinstance(option, Table) and isinstance(value, Mapping):
                meant = trial
        if meant is None:
            problems.add(place, value, self.text, near)
        else:
            problems.lines += meant.lines
        return BAD


@dataclass(frozen=True)
class Then:
    """A kind whose parsed value is turned into something else by a function that cannot fail."""

    kind: Kind
    make: Callable[[Any], Any]

    @property
    def text(self) -> str:
        """What is allowed."""
        return self.kind.text

    def read(self, value: Any, place: str, problems: Problems) -> Any:
        """Read as the kind does, then make."""
        found = self.kind.read(value, place, problems)
        return BAD if found is BAD else self.make(found)


@dataclass(frozen=True)
class FilePath:
    """A path, relative to the file that names it; `exists` asks for a file that is there."""

    text: str
    exists: bool = True

    def read(self, value: Any, place: str, problems: Problems) -> Any:
        """Return the absolute path."""
        if not isinstance(value, str) or not value.strip():
            problems.add(place, value, self.text)
            return BAD
        path = os.path.abspath(problems.folder / os.path.expanduser(value))
        if self.exists and not os.path.isfile(path):
            what = "is a folder" if os.path.isdir(path) else "does not exist"
            problems.add(place, value, f"{self.text}; {path} {what}")
            return BAD
        return Path(path)


@dataclass(frozen=True)
class Key:
    """One key of a table: `default` in the form of the file (None: no default), `help` one sentence."""

    name: str
    kind: Kind
    help: str
    default: Any = None
    required: bool = False


@dataclass(frozen=True)
class Table:
    """A table of known keys and, where `others` is set, of keys of the user's own choice.

    `rule(values, place, problems)` notes contradictions between keys (those with a problem are absent from `values`).
    `build(values)` makes the result, called only where the table has no problem.
    """

    keys: tuple[Key, ...] = ()
    others: Kind | None = None
    others_help: str = ""
    text: str = "a table"
    rule: Callable[[dict[str, Any], str, Problems], None] | None = None
    build: Callable[[dict[str, Any]], Any] = dict

    def read(self, value: Any, place: str, problems: Problems) -> Any:
        """Read all keys, note all problems."""
        if not isinstance(value, Mapping):
            problems.add(place or "file", value, self.text)
            return BAD
        before = len(problems.lines)
        names = tuple(key.name for key in self.keys)
        values = {}
        for name, item in value.items():
            if name in names:
                continue
            if self.others is None:
                problems.unknown(place, name, item, names)
            else:
                values[str(name)] = self.others.read(item, joined(place, name), problems)
        for key in self.keys:
            if key.name in value:
                values[key.name] = key.kind.read(value[key.name], joined(place, key.name), problems)
            elif key.required:
                problems.missing(joined(place, key.name), key.kind.text)
            else:
                default = key.default
                values[key.name] = (
                    None if default is None else key.kind.read(default, joined(place, key.name), problems)
                )
        values = {name: item for name, item in values.items() if item is not BAD}
        if self.rule is not None:
            self.rule(values, place, problems)
        return self.build(values) if len(problems.lines) == before else BAD


def into(cls: Callable[..., Any]) -> Callable[[dict[str, Any]], Any]:
    """Return a `Table.build` that makes a dataclass whose fields are the keys."""
    return lambda values: cls(**values)


@dataclass(frozen=True)
class KeyInfo:
    """What is known of a key: where it stands, what is allowed, its default ("none" where it has none)."""

    name: str
    expected: str
    default: str
    required: bool
    help: str


def known_keys_of(table: Table) -> dict[str, KeyInfo]:
    """Return all keys under a table by dotted name; ``*`` stands for a name of the user's choice."""
    return {info.name: info for info in _walk(table, "")}


def _walk(kind: Kind, place: str) -> Iterator[KeyInfo]:
    if isinstance(kind, ListOf):
        yield from _walk(kind.item, place)
    elif isinstance(kind, Then):
        yield from _walk(kind.kind, place)
    elif isinstance(kind, Either):
        for option in kind.options:
            yield from _walk(option, place)
    elif isinstance(kind, Table):
        for key in kind.keys:
            name = f"{place}.{key.name}" if place else key.name
            default = "none" if key.default is None else _written(key.default)
            yield KeyInfo(name, key.kind.text, default, key.required, key.help)
            yield from _walk(key.kind, name)
        if kind.others is not None:
            name = f"{place}.*"
            yield KeyInfo(name, kind.others.text, "none", False, kind.others_help)
            yield from _walk(kind.others, name)


def read_toml(path: str | Path) -> dict[str, Any]:
    """Return the tree of a TOML file (UTF-8, with or without byte-order mark).

    Raises
    ------
    ConfigError
        Where the file is absent, a folder, unreadable, not UTF-8 or not TOML (with line and column).
    """
    source = str(path)
    try:
        raw = Path(path).read_bytes()
    except FileNotFoundError:
        raise ConfigError("no such file", source) from None
    except IsADirectoryError:
        raise ConfigError("is a folder, expected a TOML file", source) from None
    except PermissionError:
        raise ConfigError("cannot be read: no permission", source) from None
    except (OSError, ValueError) as error:
        raise ConfigError(f"cannot be read: {error}", source) from None
    try:
        text = raw.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        line = raw.count(b"\n", 0, error.start) + 1
        byte = raw[error.start]
        raise ConfigError(f"line {line}: not UTF-8 text (byte 0x{byte:02x}); save it as UTF-8", source) from None
    try:
        return tomllib.loads(text)
    except RecursionError:
        raise ConfigError("not valid TOML: nested too deeply", source) from None
    except ValueError as error:
        raise ConfigError(_syntax(str(error), text), source) from None


def _syntax(message: str, text: str) -> str:
    found = re.fullmatch(r"(?s)(.*) \(at (?:line (\d+), column (\d+)|end of document)\)", message)
    if not found:
        return f"not valid TOML: {message}"
    lines = text.splitlines() or [""]
    line = int(found[2] or len(lines))
    column = int(found[3] or len(lines[-1]) + 1)
    return f"line {line}, column {column}: not valid TOML: {found[1]}"


def read_tree(table: Table, tree: Mapping[str, Any], *, source: str = "", folder: Path | None = None) -> Any:
    """Check a tree against a table and return what `table.build` makes of it.

    Parameters
    ----------
    table : Table
        The declared keys.
    tree : mapping
        As `read_toml` gives it; left as it is.
    source : str
        Named in the message.
    folder : Path, optional
        Where relative paths start; the working folder by default.

    Raises
    ------
    ConfigError
        With a line for each problem.
    """
    problems = Problems(folder or Path(), tuple(known_keys_of(table)))
    found = table.read(tree, "", problems)
    if problems.lines:
        raise ConfigError(problems.lines, source)
    return found
