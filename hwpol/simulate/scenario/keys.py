"""Every key of a scenario file: what is allowed, its default and one sentence of help.

Angles in degrees, positions in 0-based pixels of the first beam, rates in
electrons per second: a source of rate I gives each beam I g/2 before
polarisation, so two beams together count I. "Per filter" values are a number
or a table of one number per filter.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from hwpol.errors import ConfigError
from hwpol.instrument.reading import instrument_from_dict
from hwpol.instrument.toml_check import (
    BAD,
    Either,
    Key,
    Kind,
    ListOf,
    Problems,
    Single,
    Table,
    Unfit,
    into,
    read_toml,
)
from hwpol.instrument.toml_kinds import choice, integer, number, truth, words
from hwpol.simulate.scenario.scene import (
    Array,
    Atmosphere,
    BeamTruth,
    Block,
    Fault,
    Field,
    FilterTruth,
    Guiding,
    Headers,
    Nebula,
    Optics,
    Sky,
    Source,
    Target,
)

FAULTS = (
    "missing", "truncated", "empty", "not-fits", "copy", "shape", "no-angle", "nonsense-angle", "stuck",
    "mislabelled", "hit", "cloud",
)  # fmt: skip


@dataclass(frozen=True)
class InstrumentContent:
    """An instrument file by its path, or its content as a table; read as (Instrument, tree)."""

    text: str = "a path to an instrument file, or its content as a table"

    def read(self, value: Any, place: str, problems: Problems) -> Any:
        """Check the instrument; its problems are problems of the scenario."""
        folder, named = problems.folder, f"{place}."
        try:
            if isinstance(value, str):
                named = f'{place} = "{value}": '
                path = folder / value
                value, folder = read_toml(path), path.absolute().parent
            if not isinstance(value, Mapping):
                problems.add(place, value, self.text)
                return BAD
            return instrument_from_dict(value, folder=folder), dict(value)
        except ConfigError as error:
            problems.lines += [named + line for line in error.problems]
            return BAD


def _keep(value: Any) -> Any:
    return value


def _complex(value: Any) -> complex:
    pair = _pair.parse(value)
    return complex(pair[0], pair[1])


def _parse_pair(value: Any) -> tuple[float, float]:
    if not isinstance(value, list | tuple) or len(value) != 2:
        raise Unfit
    return number().parse(value[0]), number().parse(value[1])


def _parse_start(value: Any) -> str:
    from astropy.time import Time

    try:
        return str(Time(str(value).replace(" ", "T"), format="isot", scale="utc").isot)
    except ValueError:
        raise Unfit from None


_anything = Single("any value", _keep)
_pair = Single("two numbers [x, y]", _parse_pair)
_stokes_pair = Single("two numbers [q, u]", _complex)
_positive = number(above=0)
_not_negative = number(at_least=0)
_fraction = number(at_least=0, at_most=1)
_shape = ListOf(integer(at_least=8), "two whole numbers [nx, ny]", at_least=2, at_most=2)
_numbers = ListOf(number(), "a list of numbers")
_texts = ListOf(words(), "a list of texts")
_field_terms = Table(others=_stokes_pair, others_help="Coefficient [q, u]; the name is a product of x and y.")


def _per_filter(kind: Single) -> Kind:
    return Either((kind, Table(others=kind, others_help="The value in one filter.", text="a table per filter")))


def _light(values: dict[str, Any], place: str, problems: Problems) -> None:
    """Polarisation is given as q, u or as p, theta, not both."""
    if any(values.get(n) is not None for n in ("q", "u")) and any(values.get(n) is not None for n in ("p", "theta")):
        problems.add(f"{place}.p", values.get("p"), "either q and u, or p and theta")


_POLARISATION = (
    Key("q", _per_filter(number(at_least=-1, at_most=1)), "Q/I on the sky."),
    Key("u", _per_filter(number(at_least=-1, at_most=1)), "U/I on the sky."),
    Key("p", _per_filter(_fraction), "Degree of linear polarisation."),
    Key("theta", _per_filter(number()), "Position angle on the sky, north through east."),
    Key("v", _per_filter(number(at_least=-1, at_most=1)), "V/I on the sky.", 0.0),
)

SOURCE = Table(
    keys=(
        Key("rate", _per_filter(_not_negative), "Electrons per second, both beams together.", required=True),
        *_POLARISATION,
        Key("east", number(), "Arcsec east of the target.", 0.0),
        Key("north", number(), "Arcsec north of the target.", 0.0),
    ),
    rule=_light,
    build=into(Source),
)

FIELD = Table(
    keys=(
        Key("stars", integer(at_least=1), "Number of stars scattered over the first beam's area.", required=True),
        Key("brightest", _positive, "Rate of the brightest, every filter.", required=True),
        Key("faintest", _positive, "Rate of the faintest; the logarithm is uniform between.", required=True),
        Key("p", _fraction, "Mean degree of polarisation (foreground).", 0.0),
        Key("theta", number(), "Mean position angle.", 0.0),
        Key("p_scatter", _fraction, "Gaussian scatter of q and of u about the mean.", 0.0),
        Key("separation", _not_negative, "Smallest distance between stars and from the target, pixels.", 0.0),
    ),
    build=into(Field),
)

NEBULA = Table(
    keys=(
        Key("surface", _per_filter(_positive), "Electrons per second and pixel at 10 pixels from its centre.",
            required=True),
        Key("core", _positive, "Softening radius, pixels.", 2.0),
        Key("extent", _positive, "Radius of the Gaussian cut-off, pixels.", 60.0),
        Key("p", _fraction, "Degree of polarisation well outside the core.", 0.1),
        Key("pattern", choice("tangential", "radial", "uniform"), "Run of the position angle.", "tangential"),
        Key("theta", number(), "Position angle of the uniform pattern.", 0.0),
    ),
    build=into(Nebula),
)  # fmt: skip

TARGET = Table(
    keys=(
        Key("name", words(), "Name, as written to headers.", required=True),
        Key("ra", number(at_least=0, below=360), "ICRS, degrees.", required=True),
        Key("dec", number(at_least=-90, at_most=90), "ICRS, degrees.", required=True),
        Key("role", choice("science", "zero-polarised", "polarised"), "What it is for.", "science"),
        Key("rate", _per_filter(_not_negative), "Electrons per second, both beams together.", 0.0),
        *_POLARISATION,
        Key("vmag", number(), "V magnitude for the catalogue.", 12.0),
        Key("p_err", _positive, "Error of p in the catalogue; the catalogue value is drawn with it.", 0.0003),
        Key("theta_err", _positive, "Error of theta in the catalogue; the catalogue value is drawn with it.", 0.2),
        Key("catalogue_shift", _pair, "What the catalogue is wrong by beyond its errors: p, theta.", [0.0, 0.0]),
        Key("p_rate", number(), "Change of p per hour, from the start of the night.", 0.0),
        Key("theta_rate", number(), "Change of theta per hour, from the start of the night, deg.", 0.0),
        Key("xy", _pair, "Pixel it is pointed to; default the middle of the first beam's area."),
        Key("motion", _pair, "Arcsec per hour east and north, against the telescope's tracking.", [0.0, 0.0]),
        Key("companion", ListOf(SOURCE, "tables [[target.companion]]"), "Stars of its field.", []),
        Key("field", FIELD, "Stars scattered at random."),
        Key("nebula", NEBULA, "A smooth polarised nebula about it."),
    ),
    rule=_light,
    build=into(Target),
)

BLOCK = Table(
    keys=(
        Key("kind", choice("bias", "dark", "flat", "science"), "Kind of frames.", "science"),
        Key("frames", integer(at_least=1), "Frames (at each angle for flats).", 1),
        Key("targets", _texts, "Targets, alternating cycle by cycle.", []),
        Key("filters", _texts, "Filters, one after the other.", []),
        Key("angles", _numbers, "Plate angles psi of a cycle; empty without a plate.", []),
        Key("cycles", integer(at_least=1), "Passes through the angles.", 1),
        Key("exposure", _per_filter(_not_negative), "Seconds.", 0.0),
        Key("order", choice("filters", "cycles"), '"cycles": change the filter after every cycle.', "filters"),
        Key("at", number(), "Not before this many hours after the start."),
        Key("position_angle", number(), "chi, where the instrument can turn; default as the instrument says."),
        Key("level", _positive, "Flat: electrons per pixel in each beam.", 30000.0),
        Key("p", _fraction, "Flat: polarisation of the lamp.", 0.0),
        Key("theta", number(), "Flat: angle of the lamp's polarisation, instrument frame.", 0.0),
    ),
    build=into(Block),
)

FAULT = Table(
    keys=(
        Key("kind", choice(*FAULTS), "What goes wrong.", required=True),
        Key("frames", ListOf(integer(at_least=1), "frame numbers from 1"), "Frames, as numbered in file names.",
            required=True),
        Key("amount", number(), "mislabelled: deg added; hit: electrons; cloud: transparency.", 0.0),
        Key("beam", integer(at_least=0), "hit: number of the beam, from 0.", 0),
    ),
    build=into(Fault),
)  # fmt: skip

ARRAY = Table(
    keys=(
        Key("gain", _positive, "Electrons per adu; default the instrument file's."),
        Key("read_noise", _not_negative, "Electrons; default the instrument file's, else 4."),
        Key("shape", _shape, "Pixels of every image.", required=True),
        Key("bias", _not_negative, "Level, adu.", 1000.0),
        Key("bias_drift", _not_negative, "Change of the level from frame to frame, adu rms.", 0.0),
        Key("bias_columns", _not_negative, "Fixed column pattern, adu rms.", 0.0),
        Key("dark", _not_negative, "Electrons per second and pixel.", 0.0),
        Key("pixel_response", _fraction, "Scatter of the pixels' response, rms.", 0.0),
        Key("vignetting", _fraction, "Loss of response in the corners.", 0.0),
        Key("dust", integer(at_least=0), "Dust rings in the response, of a few percent.", 0),
        Key("bad_pixels", integer(at_least=0), "Dead or hot pixels; a mask image is written for them.", 0),
        Key("bad_columns", ListOf(integer(at_least=0), "column numbers"), "Dead columns, in the mask too.", []),
        Key("cosmic_rays", _not_negative, "Hits per minute and million pixels.", 0.0),
    ),
    build=into(Array),
)  # fmt: skip

OPTICS = Table(
    keys=(
        Key("plate_diattenuation", _fraction, "Of the wave plate, along its fast axis.", 0.0),
        Key("setting_noise", _not_negative, "Scatter of psi about the header's value, deg rms.", 0.0),
        Key("wobble", _not_negative, "Radius of the circle the image runs on with psi, pixels.", 0.0),
        Key("wobble_phase", number(), "Angle of the shift at psi = 0, from x to y.", 0.0),
    ),
    build=into(Optics),
)

BEAM_TRUTH = Table(
    keys=(
        Key("shift", _pair, "True offset minus the instrument file's, pixels.", [0.0, 0.0]),
        Key("scale", number(), "Scale relative to the first beam, minus 1.", 0.0),
        Key("quadratic", number(), "Quadratic distortion at the edge, pixels.", 0.0),
        Key("fwhm", _positive, "Seeing disc relative to the atmosphere's.", 1.0),
        Key("throughput", _positive, "True throughput; default the instrument file's."),
    ),
    build=into(BeamTruth),
)

FILTER = Table(
    keys=(
        Key("ip", _stokes_pair, "Instrumental polarisation fixed in the instrument, as observed.", [0.0, 0.0]),
        Key("ip_tel", _stokes_pair, "The part turning with the telescope.", [0.0, 0.0]),
        Key("ip_drift", _stokes_pair, "Change of ip per hour, from the start of the night.", [0.0, 0.0]),
        Key("ip_field", _field_terms, "Field-dependent part, x and y scaled to [-1, 1].", {}),
        Key("efficiency", number(above=0, at_most=1), "What remains beside the retardance.", 1.0),
        Key("zero_angle", number(above=-90, at_most=90), "Zero angle.", 0.0),
        Key("retardance", number(), "True retardance; default the instrument file's."),
        Key("sky", _not_negative, "Electrons per second and pixel, both beams together.", 0.0),
    ),
    build=into(FilterTruth),
)

ATMOSPHERE = Table(
    keys=(
        Key("seeing", _positive, "Full width at half maximum, pixels.", 4.0),
        Key("seeing_change", _not_negative, "Relative rms change of it.", 0.0),
        Key("seeing_time", _positive, "Minutes over which it changes.", 10.0),
        Key("beta", number(above=1), "Moffat exponent.", 3.0),
        Key("ellipticity", number(at_least=0, below=1), "1 - minor/major axis of the images.", 0.0),
        Key("clouds", number(at_least=0, below=1), "Largest loss of light by clouds.", 0.0),
        Key("cloud_time", _positive, "Minutes over which they change.", 3.0),
        Key("scintillation", _not_negative, "Relative rms from frame to frame, common to sources and beams.", 0.0),
    ),
    build=into(Atmosphere),
)

GUIDING = Table(
    keys=(
        Key("drift", _pair, "Pixels per frame within a block.", [0.0, 0.0]),
        Key("jitter", _not_negative, "Pixels rms from frame to frame.", 0.0),
        Key("pointing", _not_negative, "Error of every new pointing, pixels rms.", 0.0),
    ),
    build=into(Guiding),
)

SKY = Table(
    keys=(
        Key("p", _fraction, "Degree of polarisation.", 0.0),
        Key("theta", number(), "Position angle on the sky.", 0.0),
        Key("gradient", _pair, "Relative change from the middle to the right and upper edge.", [0.0, 0.0]),
        Key("change", _not_negative, "Relative rms change from frame to frame.", 0.0),
    ),
    build=into(Sky),
)

HEADERS = Table(
    keys=(
        Key("format", Table(others=words(), others_help="Python format, such as '{:.1f} deg'."),
            "Quantities written as text, by name of the instrument file's keyword.", {}),
        Key("extra", Table(others=_anything, others_help="A keyword written as it is."), "Further keywords.", {}),
        Key("sexagesimal", truth(), "Write ra and dec as hours and degrees.", True),
        Key("wcs", truth(), "Write a WCS.", False),
    ),
    build=into(Headers),
)  # fmt: skip


SCENARIO = Table(
    keys=(
        Key("name", words(), "Name of the night.", required=True),
        Key("seed", integer(at_least=0), "Seed of everything random.", required=True),
        Key("catalogue_seed", integer(at_least=0), "Seed of the errors of catalogue values, where several nights "
            "share a catalogue; default the seed."),
        Key("start", Single("a date and time, UTC", _parse_start), "Start of the night, UTC.", required=True),
        Key("overhead", _not_negative, "Seconds between frames.", 15.0),
        Key("slew", _not_negative, "Seconds to another target.", 60.0),
        Key("instrument", InstrumentContent(), "The instrument file or its content.", required=True),
        Key("array", ARRAY, "The detector's truth.", required=True),
        Key("optics", OPTICS, "The plate's truth.", {}),
        Key("beam", ListOf(BEAM_TRUTH, "tables [[beam]]"), "The beams' truth, in the instrument's order.", []),
        Key("filters", Table(others=FILTER, others_help="Truth of one filter."), "By header value.", required=True),
        Key("atmosphere", ATMOSPHERE, "Seeing and clouds.", {}),
        Key("guiding", GUIDING, "Motion of the image.", {}),
        Key("sky", SKY, "Light of the sky.", {}),
        Key("target", ListOf(TARGET, "tables [[target]]"), "Targets.", []),
        Key("block", ListOf(BLOCK, "at least one table [[block]]", at_least=1), "Exposures, in order.",
            required=True),
        Key("fault", ListOf(FAULT, "tables [[fault]]"), "What goes wrong.", []),
        Key("headers", HEADERS, "Habits of the headers.", {}),
        Key("night", Table(others=_anything, others_help="Any section of the night file."), "Added to the night "
            "file.", {}),
    ),
)  # fmt: skip
