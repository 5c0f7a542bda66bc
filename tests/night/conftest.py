"""Nights that are simulated, reduced and laid beside their truth."""

from dataclasses import dataclass
from types import SimpleNamespace

import numpy as np
import pytest
from scipy.stats import chi2

#: Two-sided chance that a sound set of errors fails the bound on the rms of its pulls.
FALSE_ALARM = 1e-3
#: How near a row and a source of the truth must lie, pixels.
SAME = 2.0


@dataclass(frozen=True)
class Compared:
    """Results and truth, row by row; `pull` (N, 2) is (measured - true) / error of q and u, `shared` (N, 2) the
    calibration's part of the error."""

    results: object
    truth: object
    pull: np.ndarray
    shared: np.ndarray

    def take(self, mask):
        """The rows of a mask."""
        return Compared(self.results[mask], self.truth[mask], self.pull[mask], self.shared[mask])

    def science(self):
        """The targets and field stars that took no part in the calibration."""
        return self.take(np.asarray(self.results["role"]) == "science")

    def known(self):
        """The rows with a value."""
        return self.take(np.isfinite(self.pull).all(axis=1))

    def worst(self):
        """The largest pull."""
        return float(np.max(np.abs(self.pull)))


def compare(results, truth):
    """Lay results beside the truth of the same target, filter, visit and place."""
    rows = []
    for row in results:
        same = np.asarray(
            (truth["target"] == row["target"]) & (truth["filter"] == row["filter"]) & (truth["visit"] == row["visit"])
        )
        if row["source"] == 0:
            same &= np.asarray(truth["source"] == 0)
        (index,) = np.nonzero(same)
        distance = np.hypot(truth["x"][index] - row["x"], truth["y"][index] - row["y"])
        nearest = int(np.argmin(distance))
        assert row["source"] == 0 or distance[nearest] < SAME, f"no such source in the truth: {row}"
        rows.append(index[nearest])
    true = truth[rows]
    pull, shared = [], []
    for name in "qu":
        random, common = (np.nan_to_num(np.asarray(results[f"{name}_{kind}"], float)) for kind in ("err", "cal_err"))
        total = np.where(np.isfinite(results[f"{name}_err"]), np.hypot(random, common), np.nan)
        pull.append((np.asarray(results[name], float) - np.asarray(true[name], float)) / total)
        shared.append(common / total)
    return Compared(results, true, np.stack(pull, axis=1), np.stack(shared, axis=1))


def degrees_of_freedom(nights):
    """Independent values that many nights' pulls are worth: N^2 / sum of squared correlations (Satterthwaite 1946).

    Sums of squares of correlated normal values scatter as a chi square with that many degrees of freedom, to second
    moments. Rows of one night and filter share a calibration: their correlation is at most the product of the
    calibration's shares of their errors, and is taken as that.
    """
    values, squares = 0, 0.0
    for night in nights:
        for name in np.unique(night.results["filter"]):
            part = night.take(np.asarray(night.results["filter"]) == name)
            share = part.shared.ravel()
            correlation = np.outer(share, share)
            np.fill_diagonal(correlation, 1.0)
            values += share.size
            squares += float(np.sum(correlation**2))
    return values**2 / squares


def check_rms(nights):
    """The rms of all pulls lies within the bounds that sound errors miss once in 1 / FALSE_ALARM times."""
    pulls = np.concatenate([night.pull.ravel() for night in nights])
    dof = degrees_of_freedom(nights)
    low, high = np.sqrt(chi2.ppf([FALSE_ALARM / 2, 1 - FALSE_ALARM / 2], dof) / dof)
    rms = float(np.sqrt(np.mean(pulls**2)))
    assert low < rms < high, f"rms {rms:.3f} of {pulls.size} pulls, expected {low:.3f} to {high:.3f}"
    return rms


def check_calibration(calibration, truth):
    """Zero angle, instrumental polarisation and efficiency within what is asked, or four stated errors if larger."""
    for name, model in calibration.filters.items():
        true = truth[truth["filter"] == name][0]
        turn = (model.zero_angle - true["zero_angle"] + 90) % 180 - 90
        assert abs(turn) < max(0.3, 4 * model.zero_angle_err)
        assert abs(model.efficiency - true["efficiency"]) < max(0.01, 4 * model.efficiency_err)
        if "tel_q" not in model.names:
            for part in ("ip_q", "ip_u"):
                assert abs(model.value(part) - true[part]) < max(5e-4, 4 * model.error(part))


@pytest.fixture
def judge():
    """The functions of this file that tests call."""
    return SimpleNamespace(compare=compare, check_rms=check_rms, check_calibration=check_calibration)


@pytest.fixture
def night_of(tmp_path):
    """A function: scenario tree to (night file, answer, truth), reduced without a page in this process."""
    from hwpol import Night
    from hwpol.simulate import Scenario, simulate

    def make(tree, name="night", **options):
        tree = {**tree, "night": {**tree.get("night", {}), "products": {"report": False}}}
        night = simulate(Scenario.from_dict(tree), tmp_path / name)
        return night.night_path, Night.read(night.night_path).reduce(**options), night.truth

    return make


@pytest.fixture
def shipped():
    """A function: name of a shipped scenario to its tree."""
    import tomllib

    from hwpol.simulate import shipped_scenarios

    return lambda name: tomllib.loads(shipped_scenarios()[name].read_text(encoding="utf-8"))


@pytest.fixture
def variant(reduced_night):
    """A function: reduce the reduced night once more with changes (old text, new text) to its night file.

    Nothing is written; visits that the changes leave alone are taken up.
    """
    from hwpol import Night

    path, _ = reduced_night

    def reduce(*changes):
        text = path.read_text(encoding="utf-8")
        for old, new in changes:
            assert old in text
            text = text.replace(old, new)
        other = path.with_name("variant.toml")
        other.write_text(text, encoding="utf-8")
        return Night.read(other).reduce(write=False)

    return reduce
