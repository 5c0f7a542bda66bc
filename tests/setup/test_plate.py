"""The wave plate among other keywords, by what its values do, whatever its name."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from hwpol.setup import Finding
from hwpol.setup.plate import find_plate
from hwpol.setup.survey import Survey


def table(columns: dict[str, list[Any]], comments: dict[str, str] | None = None) -> Survey:
    """Headers of science frames in order of time."""
    count = len(next(iter(columns.values())))
    files = tuple(Path(f"{i}.fits") for i in range(count))
    return Survey(
        Path(), files, columns, comments or {}, ((),) * count, (), ("science",) * count, tuple(range(count))
    )  # fmt: skip


def others(targets: int, cycles: int, length: int) -> dict[str, list[Any]]:
    """Columns of a night without a plate: every one regular or repeated in its own way."""
    count = targets * cycles * length
    target = [i // (cycles * length) for i in range(count)]
    cycle = [i // length for i in range(count)]
    return {
        "OBJECT": [f"Star {t}" for t in target],
        "A1": [45.0 * t for t in target],  # a rotator set for each target
        "A2": [22.5 * t for t in target],
        "A3": [1 + t % 4 for t in target],  # a wheel
        "A4": [float(i) for i in range(count)],  # a counter
        "A5": [1.0 + 0.01 * i for i in range(count)],  # airmass
        "A6": [(0.0, 15.0, -15.0)[c % 3] for c in cycle],  # a dither between cycles
        "A7": [-110.0 + 0.1 * ((7 * i) % 5) for i in range(count)],  # a temperature
        "A8": [f"{i // 60:02d}:{i % 60:02d}:00" for i in range(count)],  # a clock
        "A9": [30.0 * (1 + t % 3) for t in target],  # an exposure time
    }


def found(survey: Survey) -> dict[str, Finding]:
    return {finding.key: finding for finding in find_plate(survey, "OBJECT")[0]}


# Steps of the header, numbers of positions that a night may use, and the scale that makes psi of them.
SETS = [
    (22.5, 4, 1.0),
    (22.5, 8, 1.0),
    (22.5, 16, 1.0),
    (45.0, 4, 0.5),
    (45.0, 8, 0.5),
    (11.25, 8, 1.0),
    (90.0, 4, 0.25),
]


@settings(deadline=None, max_examples=60)
@given(
    st.sampled_from(SETS), st.floats(0, 359), st.booleans(), st.integers(2, 5), st.integers(1, 3), st.integers(0, 2**31)
)
def test_a_plate_is_found_under_a_name_that_says_nothing(
    steps: tuple[float, int, float], offset: float, shuffled: bool, targets: int, cycles: int, seed: int
) -> None:
    step, count, scale = steps
    rng = np.random.default_rng(seed)
    columns = others(targets, cycles, count)
    values: list[float] = []
    for _ in range(targets * cycles):
        order = rng.permutation(count) if shuffled else np.arange(count)
        values += [float((offset + step * k) % 360) for k in order]
    columns["Z9"] = list(values)
    answer = found(table(columns))
    assert answer["keywords.wave_plate"].value == "Z9"
    assert answer["wave_plate.scale"].value == scale
    zero = answer["wave_plate.zero"].value
    # The zero proposed is 0 or one of the positions: psi lands on multiples of the plate's step either way.
    away = (np.array(values) - (zero if zero else offset)) % step
    assert np.all(np.minimum(away, step - away) < 0.1 + 0.01)  # 0.1: offsets counted as none; zeros are rounded to 0.01


@settings(deadline=None, max_examples=30)
@given(st.integers(3, 5), st.integers(0, 2**31))
def test_lost_frames_do_not_hide_the_plate(targets: int, seed: int) -> None:
    columns = others(targets, 3, 4)
    columns["Z9"] = [22.5 * (i % 4) for i in range(targets * 12)]
    kept = np.flatnonzero(np.random.default_rng(seed).random(targets * 12) > 0.2)
    answer = found(table({key: [column[i] for i in kept] for key, column in columns.items()}))
    assert answer["keywords.wave_plate"].value == "Z9"


@pytest.mark.parametrize("targets", [1, 2, 4])
@pytest.mark.parametrize("length", [4, 8])
def test_no_plate_is_made_up(targets: int, length: int) -> None:
    answer = found(table(others(targets, 3, length)))
    assert answer["keywords.wave_plate"].value is None
    assert answer["keywords.wave_plate"].how == "to fill in"
    assert list(answer) == ["keywords.wave_plate"]


def test_a_dither_from_frame_to_frame_is_no_plate() -> None:
    columns = others(3, 3, 4)
    columns["DX1"] = [(0.0, 15.0, 30.0, 45.0)[i % 4] for i in range(36)]
    answer = found(table(columns))
    assert answer["keywords.wave_plate"].value is None
    assert "DX1 comes nearest" in answer["keywords.wave_plate"].why


def test_two_keywords_alike_are_a_guess_that_names_both() -> None:
    columns = others(3, 2, 4)
    columns["HWPCMD"] = [22.5 * (i % 4) for i in range(24)]
    columns["HWPENC"] = list(columns["HWPCMD"])
    finding = found(table(columns))["keywords.wave_plate"]
    assert finding.how == "guessed"
    assert {"HWPCMD", "HWPENC"} <= {finding.value, *finding.why.replace(",", " ").split()}


def test_a_sequence_counter_does_not_beat_the_angle() -> None:
    columns = others(3, 2, 4)
    columns["NSUB"] = [1 + i % 4 for i in range(24)]
    columns["Z9"] = [22.5 * (i % 4) for i in range(24)]
    assert found(table(columns))["keywords.wave_plate"].value == "Z9"


@pytest.mark.parametrize("step", [30.0, 60.0])
def test_three_positions_need_a_name(step: float) -> None:
    columns = others(3, 2, 3)
    columns["HWPROT"] = [step * (i % 3) for i in range(18)]
    answer = found(table(columns))
    assert answer["keywords.wave_plate"].value == "HWPROT"
    assert answer["wave_plate.scale"].value == 1.0
    assert "2 psi" in answer["wave_plate.scale"].why


def test_a_comment_is_worth_a_name() -> None:
    columns = others(2, 2, 4)
    columns["M12"] = [i % 4 for i in range(16)]
    answer = found(table(columns, {"M12": "half-wave plate position"}))
    assert answer["keywords.wave_plate"].value == "M12"
    assert answer["wave_plate.values"].value == {"0": 0.0, "1": 22.5, "2": 45.0, "3": 67.5}
    assert answer["wave_plate.values"].how == "guessed"


def test_jitter_widens_the_tolerance() -> None:
    columns = others(3, 4, 4)
    jitter = [-0.4, 0.0, 0.4]
    columns["HWPANG"] = [22.5 * (i % 4) + jitter[(i // 4) % 3] for i in range(48)]
    answer = found(table(columns))
    assert answer["keywords.wave_plate"].value == "HWPANG"
    assert answer["wave_plate.tolerance"].value == pytest.approx(1.5 * 0.8)


def test_acquisition_images_without_the_keyword_do_not_hide_it() -> None:
    columns = others(3, 2, 4)
    columns["Z9"] = [22.5 * ((i // 2) % 4) if i % 2 else None for i in range(24)]
    assert found(table(columns))["keywords.wave_plate"].value == "Z9"


def test_a_telling_name_is_not_enough() -> None:
    columns = others(4, 2, 4)
    columns["WPROT"] = [22.5 * (i // 8) for i in range(32)]  # set once for each target
    assert found(table(columns))["keywords.wave_plate"].value is None
