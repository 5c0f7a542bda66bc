"""Writing whole or not at all: a temporary file beside the target, then a rename."""

from __future__ import annotations

import contextlib
import os
import tempfile
from collections.abc import Iterator
from pathlib import Path
from typing import Any

from hwpol.errors import InputError


@contextlib.contextmanager
def whole(path: str | Path) -> Iterator[Path]:
    """Yield a temporary path that becomes `path` when the block ends well, and vanishes when it does not.

    Raises
    ------
    InputError
        When the folder cannot be made or written.
    """
    target = Path(path)
    try:
        target.parent.mkdir(parents=True, exist_ok=True)
        handle, name = tempfile.mkstemp(prefix=f".{target.name}.", suffix=".part", dir=target.parent)
        os.close(handle)
    except OSError as problem:
        raise InputError(f"{target}: cannot be written ({problem.strerror}); expected a writable folder") from None
    temporary = Path(name)
    try:
        yield temporary
        umask = os.umask(0)
        os.umask(umask)
        temporary.chmod(0o666 & ~umask)
        temporary.replace(target)
    except OSError as problem:
        raise InputError(f"{target}: cannot be written ({problem.strerror or problem})") from None
    finally:
        temporary.unlink(missing_ok=True)


def write_fits(hdus: Any, path: Path) -> None:
    """Write an astropy HDUList with checksums; the same content makes the same bytes, whatever the hour."""
    for hdu in hdus:
        hdu.add_checksum(when="checksum of the HDU")
    hdus.writeto(path, overwrite=True)


def write_text(path: str | Path, text: str) -> None:
    """Write text (UTF-8) whole or not at all."""
    with whole(path) as temporary:
        temporary.write_text(text, encoding="utf-8")
