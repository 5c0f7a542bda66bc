"""How names of objects are compared, in headers, night files and catalogues alike."""

from __future__ import annotations

import re

_IGNORED = re.compile(r"[\s_\-\u2010-\u2015\u2212]+")


def normal_name(name: str) -> str:
    """Return `name` without case, blanks, hyphens (of any length) and underscores.

    A plus sign stays, so that ``BD +25 727`` and ``BD -25 727`` remain two stars.
    """
    return _IGNORED.sub("", name).casefold()


def same_name(first: str, second: str) -> bool:
    """Whether two names are the same but for case, blanks, hyphens and underscores."""
    return normal_name(first) == normal_name(second)
