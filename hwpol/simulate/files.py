"""Writing the files of a simulated night, each whole or not at all."""

from __future__ import annotations

import json
import os
import re
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import numpy as np
from astropy.io import fits
from astropy.table import Table
from numpy.typing import NDArray

_BARE = re.compile(r"[A-Za-z0-9_-]+")


@contextmanager
def whole(path: Path) -> Iterator[Path]:
    """Give a temporary path beside `path`; rename it when the block ends well, remove it otherwise."""
    temporary = path.with_name(f".{path.name}.{os.getpid()}")
    try:
        yield temporary
        os.replace(temporary, path)
    finally:
        temporary.unlink(missing_ok=True)


def write_text(path: Path, text: str) -> None:
    """Write a text file."""
    with whole(path) as temporary:
        temporary.write_text(text, encoding="utf-8")


def write_table(path: Path, table: Table) -> None:
    """Write an ECSV table."""
    with whole(path) as temporary:
        table.write(temporary, format="ascii.ecsv", overwrite=True)


def write_mask(path: Path, masks: list[NDArray[np.uint8]]) -> None:
    """Write a mask image, one HDU for each array."""
    hdus = fits.HDUList([fits.PrimaryHDU(masks[0]), *(fits.ImageHDU(mask) for mask in masks[1:])])
    with whole(path) as temporary:
        hdus.writeto(temporary, overwrite=True)


def hdus_of(extensions: tuple[int | str, ...], images: list[NDArray[np.uint16]], header: fits.Header) -> fits.HDUList:
    """Arrange arrays as the instrument file says: by number or by name, the header in the first HDU."""
    placed = dict(zip(extensions, images, strict=True))
    primary = fits.PrimaryHDU(placed.pop(0, None))
    primary.header.update(header)
    hdus = fits.HDUList([primary])
    last = max((key for key in placed if isinstance(key, int)), default=0)
    hdus.extend(fits.ImageHDU(placed.pop(number, None)) for number in range(1, last + 1))
    hdus.extend(fits.ImageHDU(image, name=str(name)) for name, image in placed.items())
    return hdus


def toml_text(tree: Mapping[str, Any]) -> str:
    """Write a tree of tables, lists, texts and numbers as TOML."""
    return "\n".join(_table(tree, ())).lstrip("\n") + "\n"


def _table(tree: Mapping[str, Any], place: tuple[str, ...]) -> list[str]:
    lines, later = [], []
    for key, value in tree.items():
        if isinstance(value, Mapping):
            inner = _table(value, (*place, key))
            later += ["", f"[{_dotted((*place, key))}]", *inner]
        elif isinstance(value, list | tuple) and value and all(isinstance(item, Mapping) for item in value):
            for item in value:
                later += ["", f"[[{_dotted((*place, key))}]]", *_table(item, (*place, key))]
        else:
            lines.append(f"{_key(key)} = {_value(value)}")
    return lines + later


def _dotted(names: tuple[str, ...]) -> str:
    return ".".join(_key(name) for name in names)


def _key(name: str) -> str:
    return name if _BARE.fullmatch(name) else json.dumps(name, ensure_ascii=False)


def _value(value: Any) -> str:
    if isinstance(value, bool):
        return str(value).lower()
    if isinstance(value, list | tuple):
        return "[" + ", ".join(_value(item) for item in value) + "]"
    if isinstance(value, Mapping):
        return "{" + ", ".join(f"{_key(key)} = {_value(item)}" for key, item in value.items()) + "}"
    return json.dumps(value, ensure_ascii=False) if isinstance(value, str) else repr(value)
