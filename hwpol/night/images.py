"""The frames of one visit as calibrated pixels, frame and beam at a time."""

from __future__ import annotations

from collections import OrderedDict
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from hwpol.frames import Calibrator, FrameSet
from hwpol.pixels import Box, Pixels

#: Whole images kept at once: both beams of a frame and of its neighbour.
KEPT = 4


@dataclass(frozen=True)
class VisitImages:
    """Callable (frame, beam, box or None) -> `Pixels`; whole images are kept for a while."""

    frames: FrameSet
    calibrator: Calibrator
    _kept: OrderedDict[tuple[int, int], Pixels] = field(default_factory=OrderedDict, repr=False, compare=False)

    def __call__(self, k: int, b: int, box: Box | None = None) -> Pixels:
        """Pixels of beam b in frame k, the whole array or a box of it."""
        key = (k, self.hdu_of_beam[b])
        if key in self._kept:
            self._kept.move_to_end(key)
            return self._kept[key] if box is None else self._kept[key].cut(box)
        pixels = self._read(k, b, box)
        if box is None:
            self._kept[key] = pixels
            while len(self._kept) > KEPT:
                self._kept.popitem(last=False)
        return pixels

    @property
    def hdu_of_beam(self) -> list[int]:
        """Number of the image each beam lies on; beams with strips of their own count as images of their own."""
        instrument = self.frames.instrument
        seen: dict[Any, int] = {}
        return [
            seen.setdefault(
                (instrument.extension_of(b), beam.section, beam.trim, beam.gain, beam.read_noise), len(seen)
            )
            for b, beam in enumerate(instrument.beams)
        ]

    def _read(self, k: int, b: int, box: Box | None) -> Pixels:
        row = self.frames.table[k]
        gain = float(row["gain"])
        return self.calibrator.pixels(
            row["file"],
            b,
            box,
            filter=str(row["filter"]),
            exposure=float(row["exposure"]),
            gain=gain if np.isfinite(gain) else None,
            psi=float(row["psi"]),
        )
