"""Visits and cycles from orders of exposures as observers make them."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from hwpol.frames.grouping import cycles, positions, regular_positions, summarise, visits

DAY = 86400.0
QUICK = settings(deadline=None, max_examples=60)


def cut(passes: str) -> list[str]:
    """Group the positions written in `passes` (hexadecimal digits, blanks ignored) one minute apart."""
    digits = passes.replace(" ", "")
    number = cycles([int(digit, 16) + 1 for digit in digits], np.arange(len(digits)) / 1440)
    return ["".join(d for d, n in zip(digits, number, strict=True) if n == k) for k in range(1, number.max() + 1)]


@pytest.mark.parametrize(
    "passes",
    [
        "0123 0123 0123",
        "0213 0213",
        "01 01 01",
        "0123456789abcdef",
        "0123456789abcdef 0123456789abcdef",
        "01234567 01234567",
        # to and fro
        "0123 3210 0123 3210",
        "01 10 01 10",
        "3210 3210",
        "1230 1230 1230",
        # several exposures at each position
        "00112233 00112233",
        "0011 0011 0011 0011 0011",
        "000111222333 000111222333 00011122",
        "00112233 33221100",
        "0000111122223333 3333222211110000",
        # an exposure more or less in a row
        "001122333 00112233",
        "0012233 00112233 00112233",
        "00112233 001122 00112233",
        # a spoilt exposure taken again at once, or at the end of the pass
        "01223 0123",
        "01231 0123 0123",
        "0123 01231 0123",
        "01234 0123 0123 0123",
        # positions missing, passes broken off
        "012 0123 0123",
        "0123 023 0123 013 0123",
        "0123 01 0123",
        "0123 012 0123",
        "0123 012",
        "0123 01",
        "0123 0",
        "23 0123 0123",
        "0123456789abcdef 0123",
        "01234567 0123567 01234567",
        "01234567 01234567 0134567 1234567 01234567",
        "0123 123 0123 012 0123",
        "012",
        # a single position: nothing tells one pass from the next but the frame
        "0 0 0 0",
    ],
)
def test_passes(passes: str) -> None:
    assert cut(passes) == passes.split()


def test_a_position_taken_twice_in_a_row_stays_in_its_pass() -> None:
    assert cut("0123 00123") == ["0123", "00123"]


@QUICK
@given(st.integers(0, 2**32 - 1), st.sampled_from([2, 4, 8, 16]), st.integers(1, 6), st.integers(1, 3))
def test_regular_passes_in_a_fixed_order(seed: int, number: int, passes: int, repeats: int) -> None:
    rng = np.random.default_rng(seed)
    order = np.concatenate([[1], 2 + rng.permutation(number - 1)])
    sequence = np.tile(np.repeat(order, repeats), passes)
    wanted = np.repeat(np.arange(1, passes + 1), number * repeats)
    assert cycles(sequence, np.arange(sequence.size) / 1440).tolist() == wanted.tolist()


@QUICK
@given(st.lists(st.integers(1, 6), min_size=1, max_size=60))
def test_any_sequence_is_cut_into_stretches_of_time(sequence: list[int]) -> None:
    number = cycles(sequence, np.arange(len(sequence)) / 1440)
    assert number[0] == 1
    assert set(np.diff(number).tolist()) <= {0, 1}


@QUICK
@given(st.randoms(use_true_random=False))
def test_the_order_of_the_rows_does_not_matter(random: object) -> None:
    digits = [1, 2, 3, 4, 1, 2, 2, 3, 4, 1, 2, 3, 1, 2, 3, 4]
    time = np.arange(len(digits)) / 1440
    shuffled = list(range(len(digits)))
    random.shuffle(shuffled)  # type: ignore[attr-defined]
    there = cycles(np.array(digits)[shuffled], time[shuffled])
    assert there.tolist() == cycles(digits, time)[shuffled].tolist()


def test_a_pause_decides_where_the_order_does_not() -> None:
    sequence = [1, 2, 3, 4, 2]
    assert cycles(sequence, np.array([0, 1, 2, 3, 4]) / 1440).tolist() == [1, 1, 1, 1, 1]
    assert cycles(sequence, np.array([0, 1, 2, 3, 44]) / 1440).tolist() == [1, 1, 1, 1, 2]


def test_frames_without_a_position_have_no_cycle() -> None:
    assert cycles([1, -1, 2], [0.0, 0.1, 0.2]).tolist() == [1, -1, 1]
    assert cycles([-1, -1], [0.0, 0.1]).tolist() == [-1, -1]
    assert cycles([], []).tolist() == []


def test_frames_without_times_are_cut_in_the_order_given() -> None:
    assert cycles([1, 2, 1, 2], np.full(4, np.nan)).tolist() == [1, 1, 2, 2]


def test_positions_wrap_at_a_full_turn() -> None:
    assert positions([359.8, 22.4, 0.3, 22.6, 45.0, 720.1], 1.0).tolist() == [1, 2, 1, 2, 3, 1]
    assert positions([90.0, 0.0, 180.0, 270.0], 1.0).tolist() == [2, 1, 3, 4]
    assert positions([np.nan, 10.0], 1.0).tolist() == [-1, 1]


def test_positions_do_not_chain() -> None:
    # Steps of 0.9 deg, below the tolerance, over 9 deg: no position is wider than twice the tolerance.
    numbers = positions(np.arange(11) * 0.9, 1.0)
    assert numbers.tolist() == [1, 1, 1, 2, 2, 2, 3, 3, 3, 4, 4]


@QUICK
@given(
    st.integers(2, 16),
    st.floats(0.0, 360.0),
    st.lists(st.floats(-0.4, 0.4), min_size=32, max_size=32),
    st.integers(-2, 2),
)
def test_positions_of_a_jittering_encoder(number: int, zero: float, jitter: list[float], turns: int) -> None:
    index = np.arange(32) % number
    psi = zero + index * 22.5 + np.array(jitter) + 360.0 * turns
    found = positions(psi, 1.0)
    assert len(set(found.tolist())) == number
    for which in range(number):
        assert len(set(found[index == which].tolist())) == 1


def test_two_targets_alternating_and_filters_changing() -> None:
    names = ["Star A", "star_b", "STAR-A", "Star B", "Star A", "Star A"]
    bands = ["V", "V", "V", "V", "R", "V"]
    time = np.arange(6) * 300.0 / DAY
    assert visits(names, bands, time, np.full(6, 60.0), 60.0).tolist() == [1, 2, 1, 2, 3, 1]


def test_a_visit_ends_after_a_gap_between_exposures() -> None:
    # Middles 70 min apart, exposures of 20 min: the pause between them is 50 min.
    time = np.array([0.0, 70.0, 140.0]) / 1440
    assert visits(["A"] * 3, ["V"] * 3, time, np.full(3, 1200.0), 60.0).tolist() == [1, 1, 1]
    assert visits(["A"] * 3, ["V"] * 3, time, np.full(3, 1200.0), 49.0).tolist() == [1, 2, 3]
    assert visits(["A"] * 3, ["V"] * 3, time, np.full(3, 60.0), 60.0).tolist() == [1, 2, 3]


def test_visits_are_numbered_in_time_whatever_the_order_of_the_rows() -> None:
    assert visits(["A", "B"], ["V", "V"], [0.5, 0.1], [1.0, 1.0], 60.0).tolist() == [2, 1]


def test_visits_without_times_or_exposures() -> None:
    nan = np.nan
    assert visits(["A", "B", "A"], ["V"] * 3, [nan] * 3, [nan] * 3, 60.0).tolist() == [1, 2, 1]
    assert visits([], [], [], [], 60.0).tolist() == []


def test_summary_of_cycles() -> None:
    psi = np.array([359.9, 22.5, 45.0, 67.5, 0.1, 45.0, 45.2])
    place = positions(psi, 1.0)
    rows = summarise([1, 1, 1, 1, 2, 2, 2], place, psi, 1.0)
    assert [row.frames for row in rows] == [4, 3]
    assert [row.complete for row in rows] == [True, False]
    assert rows[1].missing == pytest.approx((22.5, 67.5), abs=1e-12)
    # Means of 359.9 and 0.1, and of 45, 45 and 45.2 (45.0667, to the second order of 0.2 deg: 1e-6).
    assert rows[1].present == pytest.approx((0.0, 45 + 0.2 / 3), abs=1e-6)


def test_a_stray_position_is_no_part_of_the_pass() -> None:
    assert regular_positions([1, 2, 3, 4] * 5 + [5]) == {1, 2, 3, 4}
    assert regular_positions([-1]) == set()
