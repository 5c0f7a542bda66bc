"""What the figures of a visit are drawn from: modulation of one, two and four beams, and transparency."""

from __future__ import annotations

from types import SimpleNamespace
from typing import Any

import numpy as np
import pytest

from hwpol.demodulation import fit_counts
from hwpol.fluxes import Fluxes
from hwpol.night.diagnosis import transparency, visit_file
from hwpol.products import read_visit, write_visit

Q, U = 0.06, -0.03
ANALYSERS = {1: [0.0], 2: [0.0, 90.0], 4: [0.0, 90.0, 45.0, 135.0]}


def counts_of(beams: int, *, sources: int = 1, noise: float = 0.0, clouds: Any = None, chi: Any = 0.0) -> Fluxes:
    """Eight frames of sources of one polarisation: S g [1 + q cos(4 psi - 2 alpha) + u sin(4 psi - 2 alpha)] / 2."""
    rng = np.random.default_rng(2)
    psi = np.tile([0.0, 22.5, 45.0, 67.5], 2)
    angle = np.radians(4 * psi[:, None] - 2 * np.asarray(ANALYSERS[beams]))
    gain = np.array([1.0, 0.9, 1.1, 0.95])[:beams]
    level = np.ones(8) if clouds is None else np.asarray(clouds)
    bright = 1e6 / np.arange(1, sources + 1)
    mean = 0.5 * bright[:, None, None] * level[:, None] * gain * (1 + Q * np.cos(angle) + U * np.sin(angle))
    flux = mean + noise * rng.normal(size=mean.shape) * np.sqrt(mean)
    return Fluxes.from_arrays(
        flux, mean, wave_plate=psi, analyser=ANALYSERS[beams], cycle=np.repeat([1, 2], 4), position_angle=chi,
        mjd=61000 + 0.001 * np.arange(8), exposure=10.0, filter="V",
    )  # fmt: skip


def file_of(fluxes: Fluxes, gain: str = "visit") -> Any:
    beams = fluxes.shape[2]
    config = SimpleNamespace(
        demodulation=SimpleNamespace(gain=gain),
        instrument=SimpleNamespace(
            detector=SimpleNamespace(pixel_scale=None), beams=[SimpleNamespace(name=f"b{b}") for b in range(beams)]
        ),
    )
    visit = SimpleNamespace(
        fluxes=fluxes, choice=None, picture=None, radii=np.arange(3.0), growth=np.ones(3), shift=np.zeros((8, 2)),
        stamps=np.zeros((beams, 5, 5)), stamp_corner=np.zeros((beams, 2)), stamp_place=None, task_number=3,
        names=("Star",), filter="V", radius=5.0, annulus=(8.0, 12.0), fwhm=np.full((8, beams), 4.0),
        ellipticity=np.zeros((8, beams)),
    )  # fmt: skip
    return visit_file(config, visit, fluxes.frames)


@pytest.mark.parametrize("beams", [1, 2, 4])
def test_modulation_without_noise_is_the_law(beams: int) -> None:
    visit = file_of(counts_of(beams))
    angle = np.radians(4 * visit.frames["psi"][:, None] - 2 * np.asarray(ANALYSERS[beams]))
    law = Q * np.cos(angle) + U * np.sin(angle)
    # Perpendicular beams: (f1 - f2) / (f1 + f2) is the law of the first.
    expected = law[:, :1] if beams == 2 else law
    # The fit's own convergence, 1e-12, and rounding of 1e6 counts.
    for name in ("value", "model"):
        np.testing.assert_allclose(visit.modulation[name], expected, atol=1e-9)
    grid = np.radians(4 * visit.curve_psi[:, None] - 2 * np.asarray(ANALYSERS[beams]))
    curve = Q * np.cos(grid) + U * np.sin(grid)
    np.testing.assert_allclose(visit.curve_model, curve[:, :1] if beams == 2 else curve, atol=1e-9)


@pytest.mark.parametrize("beams", [1, 2, 4])
@pytest.mark.parametrize("gain", ["visit", "cycle", "night", "fixed"])
def test_residuals_have_the_size_of_their_errors(beams: int, gain: str) -> None:
    fluxes = counts_of(beams, noise=1.0)
    if gain in {"fixed", "night"}:
        fluxes = Fluxes.from_arrays(
            fluxes.flux, fluxes.variance, wave_plate=fluxes.wave_plate, analyser=ANALYSERS[beams], cycle=fluxes.cycle,
            throughput=np.array([1.0, 0.9, 1.1, 0.95])[:beams], filter="V",
        )  # fmt: skip
    part = file_of(fluxes, gain).modulation
    pulls = (part["value"] - part["model"]) / part["error"]
    # At most 8 x 4 data; chi2 of 32 degrees of freedom above 80 less than once in 1e5.
    assert 0.5 < np.sum(pulls**2) < 80
    # Photon errors: sqrt(2 / counts of both beams) for a difference of two near-equal beams, 1 / sqrt(counts) for one.
    assert np.median(part["error"]) == pytest.approx(1e-3 if beams == 2 else 1.4e-3, rel=0.1)


def test_turning_field_has_no_single_curve() -> None:
    assert len(file_of(counts_of(2, chi=np.linspace(0, 10, 8))).curve_psi) == 0
    assert len(file_of(counts_of(2, chi=30.0)).curve_psi) > 20


@pytest.mark.parametrize("sources", [1, 30])
def test_transparency_is_the_clouds(sources: int) -> None:
    clouds = np.array([1.0, 0.9, 0.7, 0.8, 1.0, 1.0, 0.5, 0.6])
    fluxes = counts_of(2, sources=sources, clouds=clouds)
    found = transparency(fluxes, fit_counts(fluxes).fit.scale)
    np.testing.assert_allclose(found, clouds / np.median(clouds), rtol=1e-9)


def test_one_beam_and_one_source_do_not_tell_it() -> None:
    fluxes = counts_of(1)
    assert np.isnan(transparency(fluxes, None)).all()


def test_lost_frames_are_not_numbers() -> None:
    fluxes = counts_of(2)
    flux = fluxes.flux.copy()
    flux[0, 3] = np.nan
    lost = Fluxes.from_arrays(
        flux, fluxes.variance, wave_plate=fluxes.wave_plate, analyser=ANALYSERS[2], cycle=fluxes.cycle, filter="V"
    )
    visit = file_of(lost)
    assert list(np.flatnonzero(np.isnan(visit.modulation["value"][:, 0]))) == [3]
    assert np.isnan(visit.frames["transparency"][3])


def test_long_and_odd_names_survive(tmp_path: Any) -> None:
    from dataclasses import replace

    visit = replace(file_of(counts_of(2)), target="O'Neill's \"long\" name " * 12, filter="")
    back = read_visit(write_visit(visit, tmp_path / "v.fits"))
    assert back.target == visit.target.rstrip()
    assert back.filter == ""
