"""Files are written whole or not at all."""

import os
import stat

import numpy as np
import pytest
from astropy.io import fits

from hwpol.errors import InputError
from hwpol.products import whole, write_text
from hwpol.products.writing import write_fits


def test_the_file_appears_when_the_block_ends(tmp_path):
    path = tmp_path / "new" / "deep" / "table.txt"
    with whole(path) as temporary:
        temporary.write_text("one")
        assert not path.exists()
        assert temporary.parent == path.parent
    assert path.read_text() == "one"
    assert list(path.parent.iterdir()) == [path]


@pytest.mark.parametrize("raised", [ValueError("no"), KeyboardInterrupt()])
def test_a_failure_leaves_the_old_file_and_nothing_else(tmp_path, raised):
    path = tmp_path / "table.txt"
    path.write_text("old")
    with pytest.raises(type(raised)), whole(path) as temporary:  # noqa: PT012
        temporary.write_text("half of ")
        raise raised
    assert path.read_text() == "old"
    assert list(tmp_path.iterdir()) == [path]


def test_a_full_disk_is_told_with_the_name_of_the_file(tmp_path):
    full = pytest.raises(InputError, match=r"table\.txt: cannot be written \(No space left on device\)")
    with full, whole(tmp_path / "table.txt"):
        raise OSError(28, os.strerror(28))
    assert list(tmp_path.iterdir()) == []


def test_a_folder_that_cannot_be(tmp_path):
    (tmp_path / "file").touch()
    with pytest.raises(InputError, match="expected a writable folder"), whole(tmp_path / "file" / "table.txt"):
        pass


def test_a_folder_stands_in_the_way(tmp_path):
    (tmp_path / "table.txt").mkdir()
    with pytest.raises(InputError, match=r"table\.txt: cannot be written"):
        write_text(tmp_path / "table.txt", "text")
    assert [path.name for path in tmp_path.iterdir()] == ["table.txt"]


def test_rights_follow_the_umask(tmp_path):
    before = os.umask(0o027)
    try:
        write_text(tmp_path / "table.txt", "Ångström")
    finally:
        os.umask(before)
    assert stat.S_IMODE((tmp_path / "table.txt").stat().st_mode) == 0o640
    assert (tmp_path / "table.txt").read_text(encoding="utf-8") == "Ångström"


def test_two_writers_do_not_meet(tmp_path):
    with whole(tmp_path / "a") as first, whole(tmp_path / "a") as second:
        assert first != second


def test_fits_is_sealed_and_tells_no_time(tmp_path, monkeypatch):
    def make():
        return fits.HDUList([fits.PrimaryHDU(np.arange(6.0)), fits.ImageHDU(np.ones((3, 2), np.float32))])

    write_fits(make(), tmp_path / "one.fits")
    monkeypatch.setattr(fits.PrimaryHDU, "_get_timestamp", lambda *_: "2001-01-01T00:00:00", raising=True)
    write_fits(make(), tmp_path / "two.fits")
    assert (tmp_path / "one.fits").read_bytes() == (tmp_path / "two.fits").read_bytes()
    with fits.open(tmp_path / "one.fits") as hdus:
        assert [(hdu.verify_checksum(), hdu.verify_datasum()) for hdu in hdus] == [(1, 1), (1, 1)]
