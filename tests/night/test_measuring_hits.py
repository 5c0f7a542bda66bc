"""Hits through the whole chain, in seeing that changes by half and clouds that take a third of the light."""

import numpy as np
import pytest
from astropy.table import Table

from hwpol import FrameSet, Instrument, photometer
from hwpol.flags import Flag
from hwpol.night.images import VisitImages
from hwpol.pixels import Pixels

CHARGE = 12.0  # sigma of the aperture: what is at the edge of it loses a part


def dropped(fluxes):
    """Which frames a hit cost, (K,)."""
    return ((np.asarray(fluxes.flags[0]) & int(Flag.COSMIC_RAY)) != 0).reshape(len(fluxes.frames), -1).any(axis=1)


@pytest.mark.slow
def test_hits_and_nothing_else(night_of, shipped, monkeypatch):
    """Every third frame is hit, within 4 pixels of the star, on one to three pixels: 63 of 64 are found, and none of
    320 clean ones is dropped (at 2 in 1000 one or more is in half of the runs; the seeds are fixed)."""
    rng = np.random.default_rng(12)
    found, struck, false = 0, 0, 0
    for seed in (1, 2):
        tree = shipped("rough") | {"seed": seed}
        tree["target"] = [one for one in tree["target"] if one["name"] == "Thorn 1"]
        del tree["target"][0]["companion"]
        tree["block"] = [one for one in tree["block"] if "kind" in one or "Thorn 1" in one["targets"]]
        tree["block"][-1]["cycles"] = 24
        tree["array"]["cosmic_rays"] = 0.0
        tree["night"] = {"correction": {"calibration": "off"}}
        path, _, truth = night_of(tree, name=f"night{seed}")
        instrument = Instrument.read(path.parent / "instrument.toml")
        frames = FrameSet.read(sorted((path.parent / "raw").glob("*.fits")), instrument)
        clean = photometer(frames, [(110.0, 65.0)])
        false += int(dropped(clean).sum())
        true = Table.read(path.parent / "truth_frames.ecsv")
        true = true[true["kind"] == "science"]
        assert list(true["file"]) == list(clean.frames)
        x = truth["x"][0] + true["shift_x"] - true["shift_x"][0]
        y = truth["y"][0] + true["shift_y"] - true["shift_y"][0]
        charge = CHARGE * np.sqrt(np.asarray(clean.variance[0][:, 0]))
        hits = {k: (*rng.uniform(-2.8, 2.8, 2), int(rng.integers(1, 4))) for k in range(0, len(x), 3)}
        read = VisitImages._read

        def hit(self, k, b, box, x=x, y=y, charge=charge, hits=hits, read=read):
            pixels = read(self, k, b, box)
            if b or k not in hits:
                return pixels
            dx, dy, length = hits[k]
            data = pixels.data.copy()
            column, row = round(x[k] + dx) - pixels.x0, round(y[k] + dy) - pixels.y0
            if 0 <= row < data.shape[0] and 0 <= column < data.shape[1] - 2:
                data[row, column : column + length] += charge[k] / length
            return Pixels(data, pixels.variance, pixels.mask, pixels.x0, pixels.y0)

        with monkeypatch.context() as patch:
            patch.setattr(VisitImages, "_read", hit)
            lost = dropped(photometer(frames, [(110.0, 65.0)]))
        mine = np.isin(np.arange(len(x)), list(hits))
        found, struck, false = found + int(lost[mine].sum()), struck + int(mine.sum()), false + int(lost[~mine].sum())
    assert struck == 64
    assert found >= 63
    assert false == 0
