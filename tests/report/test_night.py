"""From a reduced night to its page: visit files that agree with the tables, the command, the switch that skips it."""

from __future__ import annotations

import re
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from hwpol import Night
from hwpol.commands import main
from hwpol.commands.reduce import draw_page
from hwpol.night.picture import LARGEST, field_picture
from hwpol.pixels import Pixels
from hwpol.products import read_table, read_visit


@pytest.fixture
def output(reduced_path: Path) -> Path:
    return reduced_path.parent / "reduced"


def test_visit_files_agree_with_the_tables(output: Path) -> None:
    results, frames = read_table(output / "results.ecsv"), read_table(output / "frames.ecsv")
    for row in results:
        visit = read_visit(output / "visits" / f"visit_{int(row['visit']):03d}.fits")
        assert (visit.target, visit.filter) == (row["target"], row["filter"])
        assert visit.radius == row["radius"]
        assert list(visit.files) == list(frames["file"][frames["visit"] == row["visit"]])
        np.testing.assert_allclose(visit.stamp_place[0], [row["x"], row["y"]])
        assert visit.growth[-1] == 1.0
        assert np.nanmedian(visit.frames["transparency"]) == pytest.approx(1.0)


def test_stamps_are_centred_on_the_star(output: Path) -> None:
    visit = read_visit(output / "visits" / "visit_002.fits")
    for stamp, corner, place in zip(visit.stamps, visit.stamp_corner, visit.stamp_place, strict=True):
        peak = np.unravel_index(np.nanargmax(stamp), stamp.shape)
        # Within a pixel of the peak, and one for noise on a round top.
        assert np.hypot(corner[0] + peak[1] - place[0], corner[1] + peak[0] - place[1]) < 2


def test_modulation_is_the_truth_within_its_errors(output: Path, tiny_night: Any) -> None:
    row = read_table(output / "results.ecsv")[1]
    visit = read_visit(output / "visits" / f"visit_{int(row['visit']):03d}.fits")
    psi = np.radians(visit.frames["psi"])
    # Two perpendicular beams behind a perfect half-wave plate: (f1 - f2) / (f1 + f2) = q cos 4 psi + u sin 4 psi.
    expected = row["q_inst"] * np.cos(4 * psi) + row["u_inst"] * np.sin(4 * psi)
    assert visit.curves == ("difference",)
    np.testing.assert_allclose(visit.modulation["model"][:, 0], expected, atol=1e-5)
    pulls = (visit.modulation["value"][:, 0] - expected) / visit.modulation["error"][:, 0]
    # Eight frames, two parameters and a gain: chi2 of 5 degrees of freedom above 27.9 once in 1e5.
    assert np.sum(pulls**2) < 27.9
    np.testing.assert_allclose(
        visit.curve_model[:, 0],
        row["q_inst"] * np.cos(4 * np.radians(visit.curve_psi))
        + row["u_inst"] * np.sin(4 * np.radians(visit.curve_psi)),
        atol=1e-5,
    )


def test_report_redraws_the_page(reduced_path: Path, output: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert not (output / "report.html").exists()
    assert main(["report", str(reduced_path), "--visits", "1"]) == 0
    first = (output / "report.html").read_bytes()
    assert str(output / "report.html") in capsys.readouterr().out
    assert main(["report", str(output), "--visits", "0"]) == 0
    assert len((output / "report.html").read_bytes()) < len(first)
    assert main(["report", str(reduced_path), "--visits", "1"]) == 0
    assert (output / "report.html").read_bytes() == first
    assert len(re.findall("<article", first.decode())) == 1


def test_report_of_a_night_that_was_not_reduced(
    night_path: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    assert main(["report", str(night_path)]) == 2
    assert "hwpol reduce" in capsys.readouterr().err
    assert main(["report", str(night_path), "--visits", "-1"]) == 2
    assert "-1" in capsys.readouterr().err


def test_reduce_draws_it_unless_told_not_to_and_drops_old_visits(reduced_path: Path, output: Path, edit: Any) -> None:
    stale = output / "visits" / "visit_099.fits"
    stale.write_bytes(b"")
    edit(reduced_path, "report = false", "report = true")
    assert main(["reduce", str(reduced_path), "--jobs", "1", "--quiet"]) in {0, 1}
    assert (output / "report.html").is_file()
    assert not stale.exists()
    assert (output / "visits" / "visit_001.fits").is_file()
    edit(reduced_path, "report = true", "report = false")
    draw_page(Night.read(reduced_path))
    assert not (output / "report.html").exists()


def test_field_picture_averages_blocks_without_bad_pixels() -> None:
    y, x = np.mgrid[: LARGEST + 5, : 2 * LARGEST + 7]
    data = (x + 10.0 * y).astype(np.float32)
    mask = np.zeros(data.shape, dtype=np.uint8)
    mask[0, 0] = 1
    picture = field_picture(lambda k, b, box: Pixels(data, data, mask, 3, 4), None)
    assert picture.step == 3
    assert max(picture.data.shape) <= LARGEST
    # A plane averages to its value at the block's centre.
    ny, nx = picture.data.shape
    row, column = np.mgrid[:ny, :nx]
    centre = (column * 3 + 1) + 10.0 * (row * 3 + 1)
    np.testing.assert_allclose(picture.data.ravel()[1:], centre.ravel()[1:], rtol=1e-6)
    assert picture.data[0, 0] == pytest.approx((9 * 11.0 - 0.0) / 8)
    assert picture.corner == (4.0, 5.0)
