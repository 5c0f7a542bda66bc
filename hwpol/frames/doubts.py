"""What a set of frames lacks for its calibration, told from its table alone, each with its consequence."""

from __future__ import annotations

from collections.abc import Iterator

from hwpol.frames.masters import read_noise_of, readout_of, saturation_of
from hwpol.frames.recipes import Recipes


def gain_unknown(recipes: Recipes) -> bool:
    """Whether some science frame has no gain from beam, header or detector."""
    instrument = recipes.instrument
    if instrument.detector.gain is not None or all(beam.gain is not None for beam in instrument.beams):
        return False
    return any(row.gain is None for row in recipes.rows("science"))


def has_overscan(recipes: Recipes) -> bool:
    """Whether every beam has an overscan section."""
    return all(
        readout_of(recipes.instrument, beam).overscan is not None for beam in range(len(recipes.instrument.beams))
    )


def pedestal_unknown(recipes: Recipes) -> bool:
    """Whether some science frame has neither bias, overscan nor a dark of its exposure."""
    if recipes.rows("bias") or has_overscan(recipes):
        return False
    return any(not recipes.dark_exposure(row.exposure) for row in recipes.rows("science"))


def missing(recipes: Recipes) -> Iterator[str]:
    """Yield a sentence for each piece that is missing."""
    instrument = recipes.instrument
    beams = range(len(instrument.beams))
    science = recipes.rows("science")
    if pedestal_unknown(recipes):
        yield (
            "no bias frames, no overscan and no darks of the science exposure: the zero level is unknown, flats are "
            "not applied, and the noise is taken from the background of each frame"
        )
    elif not recipes.rows("bias"):
        yield "no bias frames: the fixed pattern of the bias stays in the data, unless same-exposure darks hold it"
    if not recipes.rows("dark"):
        yield "no dark frames: dark current counts as sky, and hot pixels are not removed"
    if recipes.flat_choice != "off":
        with_flats = {row.filter for row in recipes.rows("flat")}
        for name in sorted({row.filter for row in science} - with_flats):
            yield (
                f"filter {name or '(none)'}: no flats: where the image moves between wave-plate positions, "
                "pixel-to-pixel response enters q and u"
            )
    if recipes.flat_choice == "per-angle":
        yield (
            'detector.flat = "per-angle": a polarised lamp imprints minus its own polarisation on q and u: over each '
            "beam's strip what differs from the strip's mean, and all of it where beams have no section of their own; "
            '"pooled" is free of this'
        )
    if gain_unknown(recipes):
        yield "gain unknown: 1 electron/adu assumed, so photon noise is wrong; set detector.gain"
    if any(read_noise_of(instrument, beam) is None for beam in beams):
        if len(recipes.rows("bias")) > 1:
            yield "read noise not given: measured from pairs of bias frames"
        elif has_overscan(recipes):
            yield "read noise not given: measured from the overscan"
    if any(saturation_of(instrument, beam) is None for beam in beams):
        yield "saturation level not given: only the end of the integer scale is marked as saturated"
