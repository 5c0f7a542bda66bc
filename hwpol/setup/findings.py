"""What was found out about one key, how sure it is, and the commented TOML text made of it."""

from __future__ import annotations

import json
import math
import re
import textwrap
from collections.abc import Iterable, Mapping
from typing import Any, NamedTuple

RECOGNISED, GUESSED, OPEN = "recognised", "guessed", "to fill in"
_WIDTH = 110
_BARE = re.compile(r"[A-Za-z0-9_-]+")


class Finding(NamedTuple):
    """One key of a proposed file.

    `key` is dotted (``keywords.wave_plate``, ``beam[2].offset``); `value` what was written, None where nothing could
    be; `how` "recognised", "guessed" or "to fill in" (then `value`, if any, is a stand-in); `why` says it in words.
    """

    key: str
    value: Any
    how: str
    why: str


def render(findings: Iterable[Finding], titles: Mapping[str, str]) -> str:
    """Text of a TOML file with every finding in its section, each under a comment that says how it was found.

    A key without value is written as a comment. `titles` hold a remark for the head of a section.
    """
    sections: dict[str, list[Finding]] = {}
    for finding in findings:
        section, dot, _ = finding.key.partition(".")
        sections.setdefault(section if dot else "", []).append(finding)
    lines: list[str] = []
    for section, entries in sections.items():
        if section:
            name = section.partition("[")[0]
            head = f"[[{name}]]" if section.endswith("]") else f"[{name}]"
            # A section without any value is left out as a whole: an empty one may be incomplete.
            head = head if any(entry.value is not None for entry in entries) else f"# {head}"
            lines += ["", *(comment(titles[section]) if section in titles else ()), head]
        for entry in entries:
            leaf = entry.key[len(section) + 1 :] if section else entry.key
            lines += comment(f"{entry.how}: {entry.why}")
            lines.append(f"# {bare(leaf)} = ..." if entry.value is None else f"{bare(leaf)} = {toml(entry.value)}")
    return "\n".join(lines).strip() + "\n"


def comment(text: str) -> list[str]:
    """Lines of a TOML comment; what must not stand in one is replaced."""
    clean = "".join(c if c.isprintable() else "?" for c in " ".join(text.split()))
    return textwrap.wrap(
        clean, _WIDTH, initial_indent="# ", subsequent_indent="#   ", break_long_words=False, break_on_hyphens=False
    )


def bare(name: str) -> str:
    """A TOML key, quoted where it has to be."""
    return name if _BARE.fullmatch(name) else quoted(name)


def quoted(text: str) -> str:
    """A TOML basic string."""
    return json.dumps(text, ensure_ascii=False).replace("\x7f", "\\u007f")


def toml(value: Any) -> str:
    """A value on one line."""
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, float):
        if not math.isfinite(value):
            raise ValueError(f"{value}: a setting must be finite")
        return repr(value)
    if isinstance(value, int):
        return str(value)
    if isinstance(value, Mapping):
        return "{" + ", ".join(f"{bare(str(name))} = {toml(item)}" for name, item in value.items()) + "}"
    if isinstance(value, list | tuple):
        return "[" + ", ".join(map(toml, value)) + "]"
    return quoted(str(value))
