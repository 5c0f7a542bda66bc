"""The flags a measurement can carry: one bit a doubt, one sentence a bit."""

from __future__ import annotations

from enum import IntFlag


class Flag(IntFlag):
    """Bits of the ``flags`` column of every result table and of `Fluxes.flags`."""

    SATURATED = 1 << 0
    COSMIC_RAY = 1 << 1
    BAD_PIXELS = 1 << 2
    EDGE = 1 << 3
    NEIGHBOUR = 1 << 4
    SKY_DOUBTFUL = 1 << 5
    INCOMPLETE_CYCLE = 1 << 6
    UNDETERMINED = 1 << 7
    UNCALIBRATED = 1 << 8
    ANGLE_UNCALIBRATED = 1 << 9
    IP_UNCALIBRATED = 1 << 10
    EFFICIENCY_ASSUMED = 1 << 11
    OUTSIDE_CALIBRATION = 1 << 12
    ROTATION = 1 << 13
    EXCESS_SCATTER = 1 << 14
    CYCLE_SET_ASIDE = 1 << 15
    PLATE_SUSPECT = 1 << 16
    NULL_FAILED = 1 << 17
    POSITION_GUESSED = 1 << 18
    NOT_FOUND = 1 << 19
    NO_PLATEAU = 1 << 20
    LOW_SIGNAL = 1 << 21
    NOISE_DOUBTFUL = 1 << 22
    FROM_MEMORY = 1 << 23
    FOREGROUND_DOMINATES = 1 << 24
    CYCLE_VARIABLE = 1 << 25
    NO_REPEATS = 1 << 26


FLAG_TEXT: dict[Flag, str] = {
    Flag.SATURATED: "a pixel in an aperture reached saturation; that frame was left out for this source",
    Flag.COSMIC_RAY: "a cosmic-ray hit lay in an aperture; that frame was left out for this source",
    Flag.BAD_PIXELS: "bad pixels lay in an aperture; where they spoilt its sum, that frame was left out",
    Flag.EDGE: "an aperture reached the edge of the detector or of the beam's strip; those frames were left out",
    Flag.NEIGHBOUR: "light of another star, or of another star's beam, reaches the aperture and can change q or u by "
    "more than the error",
    Flag.SKY_DOUBTFUL: "the sky annulus is incomplete, crowded or steep",
    Flag.INCOMPLETE_CYCLE: "a wave-plate position is missing from a cycle",
    Flag.UNDETERMINED: "the wave-plate angles at hand do not determine q and u",
    Flag.UNCALIBRATED: "no calibration was applied: q and u are in the instrument frame",
    Flag.ANGLE_UNCALIBRATED: "no polarised standard fixed the zero angle: the position angle is not on the sky",
    Flag.IP_UNCALIBRATED: "no zero-polarisation standard fixed the instrumental polarisation",
    Flag.EFFICIENCY_ASSUMED: "the efficiency was taken, not measured",
    Flag.OUTSIDE_CALIBRATION: "the calibration comes from another epoch or lies outside its stated range",
    Flag.ROTATION: "the field turned by more than 1 deg within what was calibrated as one measurement",
    Flag.EXCESS_SCATTER: "repeats scatter more than their counts allow; the larger error is given",
    Flag.CYCLE_SET_ASIDE: "one or more cycles disagreed with the others and were set aside",
    Flag.PLATE_SUSPECT: "a frame does not fit its wave-plate angle",
    Flag.NULL_FAILED: "a null test of this measurement failed",
    Flag.POSITION_GUESSED: "the target's position was guessed from the brightest source",
    Flag.NOT_FOUND: "the source was not seen at its place in some frames; its aperture was placed by the field",
    Flag.NO_PLATEAU: "no plateau of q and u against radius was found",
    Flag.LOW_SIGNAL: "p is below three times its error: use the upper limit",
    Flag.NOISE_DOUBTFUL: "the noise model lacks a piece (bias, gain or read noise unknown), or the sky scatters "
    "otherwise than it says: check gain and read noise",
    Flag.FROM_MEMORY: "the calibration rests on catalogue values recalled from memory: check their source",
    Flag.FOREGROUND_DOMINATES: "the foreground removed is more than three times the error that remains",
    Flag.CYCLE_VARIABLE: "q and u changed from the first half of the cycles to the second",
    Flag.NO_REPEATS: "a single cycle: the scatter of repeats could not test the errors",
}


def flag_names(value: int) -> list[str]:
    """Return the lower-case names of the bits set in `value`, lowest bit first."""
    return [flag.name.lower() for flag in Flag if int(value) & flag and flag.name]
