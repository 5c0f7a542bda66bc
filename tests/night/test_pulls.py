"""The stated errors are true: pulls over many nights, each with standards and catalogue errors of its own."""

import pytest

#: Nights; the science targets of each give two values apiece.
NIGHTS = 17
TARGETS = 3


@pytest.mark.slow
def test_rms_of_pulls_over_a_hundred_values(judge, night_of, tiny_tree):
    """Science targets alone: standards take part in the fit. One run in a thousand fails with errors that are right."""
    names = [f"Fern {number}" for number in range(TARGETS)]
    tree = tiny_tree
    fern = tree["target"].pop()
    tree["target"] += [
        {**fern, "name": name, "rate": rate, "p": p}
        for name, rate, p in zip(names, (50000.0, 20000.0, 5000.0), (0.05, 0.12, 0.005), strict=True)
    ]
    tree["block"][-1]["targets"] = names
    compared = []
    for seed in range(NIGHTS):
        _, answer, truth = night_of({**tree, "seed": 100 + seed}, name=f"night{seed}")
        compared.append(judge.compare(answer.results, truth).science())
        assert compared[-1].worst() < 5
    assert sum(night.pull.size for night in compared) >= 100
    judge.check_rms(compared)


def test_the_bound_can_fail(judge, reduced_night, tiny_night):
    from dataclasses import replace

    night = judge.compare(reduced_night[1].results, tiny_night.truth).science()
    many = [replace(night, pull=night.pull * 0 + size) for size in (1.4,) * 60]
    with pytest.raises(AssertionError, match=r"rms 1\.400"):
        judge.check_rms(many)
    judge.check_rms([replace(night, pull=night.pull * 0 + 1.0)] * 60)
