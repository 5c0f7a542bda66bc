"""The page: numbers equal cells, nothing unescaped, nothing from outside, the same twice, usable with 500 targets."""

from __future__ import annotations

import re
import shutil
import subprocess
import time
import tomllib
from collections import Counter
from collections.abc import Callable
from html.parser import HTMLParser
from pathlib import Path

import numpy as np
import pytest

from hwpol.errors import InputError
from hwpol.flags import Flag
from hwpol.products import read_table, write_table
from hwpol.report import write_report
from hwpol.report.drawing import utc
from hwpol.report.numbers import UNKNOWN
from hwpol.report.page import important
from hwpol.report.stored import read_stored

MakeNight = Callable[..., Path]


class Page(HTMLParser):
    """Collects elements, ids, links and the cells shown."""

    def __init__(self, text: str) -> None:
        super().__init__()
        self.tags: Counter[str] = Counter()
        self.ids: Counter[str] = Counter()
        self.links: list[str] = []
        self.cells: list[tuple[str, float, str]] = []
        self.plots: list[dict[str, str]] = []
        self._cell: tuple[str, float] | None = None
        self.feed(text)

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        own = {key: value or "" for key, value in attrs}
        self.tags[tag] += 1
        if "id" in own:
            self.ids[own["id"]] += 1
        self.links += [own[key] for key in ("href", "src", "xlink:href") if key in own]
        if "data-cell" in own:
            self._cell = own["data-cell"], float(own["data-value"])
        if tag == "svg":
            self.plots.append(own)

    def handle_data(self, data: str) -> None:
        if self._cell is not None:
            self.cells.append((*self._cell, data))
            self._cell = None


def page_of(folder: Path, visits: int = 0) -> tuple[str, Page]:
    text = write_report(folder, visits=visits).read_text(encoding="utf-8")
    return text, Page(text)


@pytest.fixture(scope="module")
def rich(make_night: MakeNight) -> tuple[Path, str, Page]:
    """A night with all that a page can show, names from hostile headers among it."""
    folder = make_night(2, field=6)
    return folder, *page_of(folder, 40)


def test_every_number_equals_its_cell(rich: tuple[Path, str, Page]) -> None:
    folder, _, page = rich
    tables = {name: read_table(folder / f"{name}.ecsv") for name in ("results", "standards")}
    calibration = tomllib.loads((folder / "calibration.toml").read_text())["filters"]
    assert len(page.cells) > 200
    in_degrees = {"theta", "theta_err", "cat_theta", "zero_angle", "zero_angle_err"}
    plain = {"x", "y", "cycles", "frames", "exposure", "airmass", "radius", "fwhm", "flux", "chi2", "dof", "sigma"}
    for place, value, text in page.cells:
        sheet, row, column = place.split("/")
        stored = float(calibration[row][column] if sheet == "calibration" else tables[sheet][column][int(row)])
        assert np.array_equal(value, stored, equal_nan=True), place
        if not np.isfinite(stored):
            assert text == UNKNOWN
            continue
        if column == "mjd":
            assert text in utc(stored), place
            continue
        factor = 1.0 if column in in_degrees | plain else 100.0
        decimals = len(text.partition(".")[2])
        # What is shown is the cell rounded to the decimals shown; fluxes to three digits.
        step = 0.5 * 10.0**-decimals if column != "flux" else 0.005 * abs(stored)
        assert abs(float(text) - factor * stored) <= step * (1 + 1e-9), place


def test_errors_and_intervals_of_all_targets_are_shown(rich: tuple[Path, str, Page]) -> None:
    shown = {place for place, _, _ in rich[2].cells}
    for row in range(10):
        assert {f"results/{row}/{c}" for c in ("p_debiased", "p_low", "p_high", "theta", "theta_err")} <= shown


def test_header_text_is_escaped_everywhere(rich: tuple[Path, str, Page]) -> None:
    _, text, page = rich
    assert page.tags["script"] == 0
    assert page.tags["b"] == text.count("<b>")
    assert "<b>imager" not in text
    assert "&lt;script&gt;" in text
    assert "$q_1$" in text


def test_nothing_is_fetched_and_every_link_leads_somewhere(rich: tuple[Path, str, Page]) -> None:
    _, text, page = rich
    assert not re.search(r"https?:|[\"'(]//|@import|url\((?!#)", text)
    for link in page.links:
        assert link.startswith(("#", "data:"))
        if link.startswith("#"):
            assert page.ids[link[1:]] == 1, link
    for name in re.findall(r"url\(#([^)]*)\)", text):
        assert page.ids[name] == 1
    assert max(page.ids.values()) == 1


def test_every_figure_has_words_for_it(rich: tuple[Path, str, Page]) -> None:
    page = rich[2]
    # Five a visit, four of the calibration, two of the checks, the field and the error budget.
    assert len(page.plots) == 4 * 5 + 4 + 2 + 1 + 1
    assert all(plot.get("role") == "img" and plot.get("aria-label") for plot in page.plots)
    assert page.tags["figcaption"] == len(page.plots)


def test_the_same_products_give_the_same_page(make_night: MakeNight) -> None:
    folder = make_night(1, field=4)
    assert page_of(folder, 1)[0] == page_of(folder, 1)[0]


@pytest.mark.parametrize("beams", [1, 2, 4])
def test_any_number_of_beams(make_night: MakeNight, beams: int) -> None:
    text, _ = page_of(make_night(1, beams=beams), 1)
    assert text.count("<article") == 1
    assert f"in {beams} beams" in text


def test_uncalibrated_night_says_so_first(make_night: MakeNight) -> None:
    text, _ = page_of(make_night(1, calibrated=False))
    head = text[: text.index("<nav")]
    assert "None was applied" in head
    assert "uncalibrated" in head
    assert "all measurements" in head


def test_clean_night_finds_nothing_to_distrust(make_night: MakeNight) -> None:
    text, _ = page_of(make_night(1))
    assert "Nothing that the checks could find" in text


def test_flags_are_told_in_the_verdict_and_explained(make_night: MakeNight) -> None:
    folder = make_night(2, name="Willow")
    table = read_table(folder / "results.ecsv")
    table["flags"][2] = int(Flag.PLATE_SUSPECT | Flag.COSMIC_RAY)
    write_table(table, folder / "results.ecsv")
    text, page = page_of(folder)
    head = text[: text.index("<nav")]
    assert "plate suspect</a> (Willow V)" in head
    assert "cosmic ray" not in head
    assert {"flag-plate_suspect", "flag-cosmic_ray"} <= set(page.ids)


def test_values_that_are_not_known_are_not_numbers(make_night: MakeNight) -> None:
    folder = make_night(1, name="Faint")
    table = read_table(folder / "results.ecsv")
    for column in ("q", "u", "p", "p_debiased", "p_low", "p_high", "p_upper95", "theta", "theta_err", "chi2"):
        table[column][2] = np.nan
    table["flags"][2] = int(Flag.UNDETERMINED)
    write_table(table, folder / "results.ecsv")
    text, _ = page_of(folder)
    assert "not determined" in text
    assert not re.search(r">\s*nan\s*<", text)


def test_without_visit_files_the_tables_remain(make_night: MakeNight) -> None:
    folder = make_night(1)
    shutil.rmtree(folder / "visits")
    text, _ = page_of(folder, 3)
    assert "No figures" in text


def test_no_target_at_all(make_night: MakeNight) -> None:
    folder = make_night(1)
    for name in ("results", "cycles", "standards"):
        write_table(read_table(folder / f"{name}.ecsv")[:0], folder / f"{name}.ecsv")
    assert "No target was measured" in page_of(folder)[0]


def test_missing_products_are_named(tmp_path: Path) -> None:
    with pytest.raises(InputError, match=r"results\.ecsv.*hwpol reduce"):
        write_report(tmp_path)


def test_a_page_that_fails_leaves_the_old_one(make_night: MakeNight) -> None:
    folder = make_night(1)
    old = write_report(folder, visits=0).read_bytes()
    (folder / "visits" / "visit_001.fits").write_bytes(b"not a FITS file")
    with pytest.raises(InputError, match=r"visit_001\.fits"):
        write_report(folder)
    assert (folder / "report.html").read_bytes() == old


def test_important_visits_come_first(make_night: MakeNight) -> None:
    folder = make_night(12, name="T")
    table = read_table(folder / "results.ecsv")
    table["flags"][9] |= int(Flag.NULL_FAILED)
    write_table(table, folder / "results.ecsv")
    chosen = important(read_stored(folder), 6)
    assert len(chosen) == 6
    assert {1, 2, 10} <= set(chosen)
    strength = np.asarray(table["p_debiased"] / table["p_err"])
    rest = [n for n in range(3, 15) if n != 10]
    assert set(chosen) - {1, 2, 10} == set(sorted(rest, key=lambda n: -strength[n - 1])[:3])
    assert "draws them all" in page_of(folder, 1)[0]


CHROMIUM = next(
    (path for name in ("chromium", "chromium-browser", "google-chrome") if (path := shutil.which(name))), None
)


@pytest.mark.slow
@pytest.mark.skipif(CHROMIUM is None, reason="no Chromium on this machine")
@pytest.mark.parametrize("width", [390, 1200])
def test_browser_has_no_complaint(make_night: MakeNight, tmp_path: Path, width: int) -> None:
    path = write_report(make_night(1, field=5))
    done = subprocess.run(
        [str(CHROMIUM), "--headless", "--no-sandbox", "--disable-gpu", "--disable-quic", "--no-first-run",
         "--disable-background-networking", "--disable-component-update", "--disable-sync", "--enable-logging=stderr",
         "--v=0", f"--user-data-dir={tmp_path / 'browser'}", f"--window-size={width},2000", "--dump-dom",
         path.as_uri()],
        capture_output=True, text=True, timeout=100, check=True,
    )  # fmt: skip
    assert "CONSOLE" not in done.stderr
    seen, written = Page(done.stdout), Page(path.read_text(encoding="utf-8"))
    # The browser repaired nothing: it has every element, cell and figure that was written.
    assert seen.cells == written.cells
    assert seen.tags == written.tags


@pytest.mark.slow
def test_five_hundred_targets(make_night: MakeNight) -> None:
    folder = make_night(498, name="Star")
    begun = time.process_time()
    path = write_report(folder)
    # 40 visits of 5 figures at 0.1 s each, twice over for a slow machine, and the tables.
    assert time.process_time() - begun < 60
    assert path.stat().st_size < 15e6
    text = path.read_text(encoding="utf-8")
    assert "40 of 500 visits" in text
    assert text.count("<article") == 40
    assert all(f"results/{row}/p_debiased" in text for row in range(500))
