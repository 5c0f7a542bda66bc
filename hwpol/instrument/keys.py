"""Every key of the instrument file: what is allowed, its default and one sentence of help."""

from __future__ import annotations

import re
import warnings
from typing import Any

from hwpol.instrument.description import Band, Detector, Keyword, Orientation, Section, Site, WavePlate
from hwpol.instrument.toml_check import Either, FilePath, Key, Kind, ListOf, Problems, Single, Table, Then, Unfit, into
from hwpol.instrument.toml_kinds import choice, integer, number, words

_SECTION = re.compile(r"\[\s*(\d{1,9})\s*:\s*(\d{1,9})\s*,\s*(\d{1,9})\s*:\s*(\d{1,9})\s*\]")
KIND_VALUES = {
    "bias": ["bias", "zero"],
    "dark": ["dark"],
    "flat": ["flat", "skyflat"],
    "science": ["object", "science", "light"],
}


def _parse_section(value: Any) -> Section:
    found = _SECTION.fullmatch(value.strip()) if isinstance(value, str) else None
    if found is None:
        raise Unfit
    x0, x1, y0, y1 = map(int, found.groups())
    if not (1 <= x0 <= x1 and 1 <= y0 <= y1):
        raise Unfit
    return Section(x0 - 1, x1, y0 - 1, y1)


section = Single('a FITS section "[x1:x2,y1:y2]" counted from 1, x1 <= x2, y1 <= y2', _parse_section)
extension = Either((integer(at_least=0, what="an HDU number"), words("an HDU name")))
gain = number(above=0, what="a number (electron/adu)")
read_noise = number(at_least=0, what="a number (electron)")
saturation = number(above=0, what="a number (adu)")


def _detector_rule(values: dict[str, Any], place: str, problems: Problems) -> None:
    linearity = values.get("linearity")
    if linearity is not None and linearity[0] <= 0:
        problems.add(f"{place}.linearity", list(linearity), "coefficients with c0 > 0")


DETECTOR = Table(
    keys=(
        Key("gain", gain, "Electrons for each adu; the keyword `gain` and a beam's own gain go before it."),
        Key("read_noise", read_noise, "Read noise of one pixel; without it the errors of faint sources are too small."),
        Key("saturation", saturation, "Raw level from which a pixel counts as saturated; without it none does."),
        Key("pixel_scale", number(above=0, what="a number (arcsec/pixel)"), "Size of a pixel on the sky."),
        Key("trim", section, "Part of the array that sees light; the whole array where absent."),
        Key("overscan", section, "Part of the array whose level is taken off row by row."),
        Key("extension", extension, "HDU that holds the image.", 0),
        Key("bad_pixels", FilePath("an existing mask image"), "Mask image; where it is not zero a pixel is bad."),
        Key(
            "linearity",
            ListOf(number(), "a list of at least one number", at_least=1),
            "Coefficients c0, c1, ... of true = raw x (c0 + c1 raw + ...), raw in adu after bias.",
            [1.0],
        ),
    ),
    text="a table with gain, read_noise, ...",
    rule=_detector_rule,
    build=into(Detector),
)


def _parse_pattern(value: Any) -> str:
    if not isinstance(value, str):
        raise Unfit
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            groups = re.compile(value).groups
    except (re.error, RecursionError, OverflowError, ValueError):
        raise Unfit from None
    if groups != 1:
        raise Unfit
    return value


_pattern = Single("a regular expression with exactly one group", _parse_pattern)


def _unit(target: str, example: str) -> Single:
    text = f'a unit that converts to {target}, such as "{example}"'

    def parse(value: Any) -> str:
        if not isinstance(value, str) or not value.strip():
            raise Unfit
        from astropy import units

        try:
            with warnings.catch_warnings():
                warnings.simplefilter("ignore")
                fits = units.Unit(value).is_equivalent(units.Unit(target))
        except (ValueError, TypeError, ArithmeticError, RecursionError):
            raise Unfit from None
        if not fits:
            raise Unfit
        return value

    return Single(text, parse)


def _parse_equinox(value: Any) -> float | str:
    if not isinstance(value, str):
        return float(number(at_least=1800, at_most=2200).parse(value))
    if not value.strip():
        raise Unfit
    return value.strip()


_equinox = Single('a year such as 2000.0, "J2000", "B1950", "ICRS" or the keyword that holds it', _parse_equinox)


def _keyword(found: Any) -> Keyword:
    """Make a `Keyword` of a name, a tuple of names or the values of a table."""
    if isinstance(found, str):
        return Keyword((found,))
    if isinstance(found, tuple):
        return Keyword(found)
    names = found.pop("keyword")
    return Keyword((names,) if isinstance(names, str) else names, **found)


def _keyword_rule(values: dict[str, Any], place: str, problems: Problems) -> None:
    form = values.get("format")
    if form not in (None, "isot") and isinstance(values.get("keyword"), tuple) and len(values["keyword"]) > 1:
        problems.add(f"{place}.format", form, '"isot" where date and time stand in two keywords')


def _quantity(*extra: Key, several: int = 1) -> Kind:
    """Return the kind of one entry of [keywords]; `several`: as many keywords may be listed."""
    names: list[Kind] = [words("a keyword")]
    if several > 1:
        what = "a list [date keyword, time keyword]" if several == 2 else "a list of keywords"
        names.append(ListOf(names[0], what, at_least=1, at_most=several))
    pattern = Key("pattern", _pattern, "Regular expression whose one group is the value, for values hidden in text.")
    keyword = Key("keyword", Either(tuple(names)), "FITS keyword that holds the quantity.", required=True)
    inside = ", ".join(f"{key.name} = ..." for key in (keyword, pattern, *extra))
    table = Table((keyword, pattern, *extra), text=f"a table {{{inside}}}", rule=_keyword_rule)
    return Then(Either((*names, table)), _keyword)


def _parse_scale(value: Any) -> float:
    scale = float(number().parse(value))
    if scale == 0:
        raise Unfit
    return scale


_scale = Single("a number other than 0", _parse_scale)
_SCALED = (
    Key("scale", _scale, "Factor of the formula.", 1.0),
    Key("zero", number(), "Header value that stands for 0: value = scale x (header - zero).", 0.0),
)


def _unit_key(target: str, example: str) -> Key:
    return Key("unit", _unit(target, example), f"Unit of the header's value; {target} where absent.")


_ANGLE = (*_SCALED, _unit_key("deg", "rad"))
_equinox_key = Key("equinox", _equinox, "Equinox of the header's coordinates; ICRS where absent.")
_direction = _quantity(*_SCALED, _unit_key("deg", "hourangle"), _equinox_key)
_time = _quantity(
    *_SCALED,
    Key("unit", _unit("s", "h"), "Unit of a time of day that is a number, where date and time are two keywords."),
    Key("format", choice("isot", "mjd", "jd"), "How the time is written.", "isot"),
    Key("marks", choice("start", "middle", "end"), "The moment of the exposure that the time marks.", "start"),
    several=2,
)
KEYWORDS = Table(
    keys=(
        Key("kind", _quantity(), "Keyword of the kind of frame; without it every frame is science."),
        Key("object", _quantity(), "Keyword of the name of the target.", required=True),
        Key("filter", _quantity(several=20), "Keyword of the filter, or a list of keywords, one per wheel."),
        Key("exposure", _quantity(*_SCALED, _unit_key("s", "ms")), "Keyword of the exposure time.", required=True),
        Key("time", _time, "Keyword of the start of exposure (UTC), or two, date and time.", required=True),
        Key("wave_plate", _quantity(*_ANGLE), "Keyword of the angle or position of the wave plate."),
        Key("position_angle", _quantity(*_ANGLE), "Keyword of chi, the position angle of the instrument's +Q axis."),
        Key("ra", _direction, "Keyword of the right ascension, sexagesimal hours or decimal degrees."),
        Key("dec", _direction, "Keyword of the declination, sexagesimal or decimal degrees."),
        Key("airmass", _quantity(*_SCALED), "Keyword of the airmass; computed from [site] where absent."),
        Key("gain", _quantity(*_SCALED), "Keyword of the gain, electron/adu; goes before that of [detector]."),
    ),
    text="a table of FITS keywords",
    build=lambda values: {name: keyword for name, keyword in values.items() if keyword is not None},
)

_any_case = Then(
    ListOf(words("a text", empty=True), "a list of texts"),
    lambda values: tuple(value.strip().lower() for value in values),
)
KINDS = Table(
    keys=tuple(
        Key(
            name,
            _any_case,
            f"Values of the kind keyword that mean {name}, any case.",
            values,
        )
        for name, values in KIND_VALUES.items()
    ),
    text="a table with bias, dark, flat, science",
)

FILTERS = Table(
    keys=(
        Key(
            "clear",
            _any_case,
            "Header values, any case, that mean no filter.",
            ["clear", "open", ""],
        ),
    ),
    others=Table(
        keys=(
            Key("band", words("the name of a band"), "Band of the standard-star tables that the filter stands for."),
            Key("wavelength", number(at_least=0.1, at_most=30, what="a number (micron)"), "Effective wavelength."),
        ),
        text="a table {band = ..., wavelength = ...}",
        build=into(Band),
    ),
    others_help="What a filter, named as in the header, stands for.",
    text="a table of filters",
)

_retardance = number(above=0, below=360, what="a number (deg)")
WAVE_PLATE = Table(
    keys=(
        Key(
            "retardance",
            Either(
                (
                    _retardance,
                    Table(others=_retardance, others_help="Retardance in one filter.", text="a table per filter"),
                )
            ),
            "Retardance of the plate, 180 for a perfect half-wave plate.",
            180.0,
        ),
        Key(
            "scale",
            _scale,
            "Factor in psi = sense x scale x (value - zero); 0.5 where the header holds 2 psi.",
            1.0,
        ),
        Key("zero", number(), "Header value at which the fast axis lies along the instrument's +Q axis.", 0.0),
        Key("sense", choice(1, -1), "-1 where the header's angle grows against the sense of instrument angles.", 1),
        Key(
            "values",
            Table(others=number(), others_help="Value that one header text stands for.", text="a table of numbers"),
            "What header texts stand for, before the formula, for encoders that count positions.",
            {},
        ),
        Key(
            "tolerance",
            number(above=0, at_most=45, what="a number (deg)"),
            "Readings of the plate within it belong to the same position.",
            1.0,
        ),
    ),
    text="a table with retardance, scale, zero, ...",
    build=into(WavePlate),
)

BEAM = Table(
    keys=(
        Key("name", words(), "Name of the beam.", required=True),
        Key("analyser", number(what="a number (deg)"), "Angle of the analyser that feeds the beam.", required=True),
        Key(
            "offset",
            ListOf(number(), "two numbers (pixels) [x, y]", length=2),
            "Pixels from the first beam, a start value; where absent that between the corners of the beams' sections, "
            "else [0.0, 0.0].",
        ),
        Key("section", section, "Strip of the array that the beam lies in."),
        Key("extension", extension, "HDU of the beam, where it differs from that of [detector]."),
        Key("throughput", number(above=0), "Throughput relative to the first beam.", 1.0),
        Key("throughput_err", number(at_least=0), "Error of the throughput."),
        Key("gain", gain, "Electrons for each adu, where it differs from [detector]."),
        Key("read_noise", read_noise, "Read noise of one pixel, where it differs from [detector]."),
        Key("saturation", saturation, "Raw level of saturation, where it differs from [detector]."),
        Key("trim", section, "Part of the array that sees light, where it differs from [detector]."),
        Key("overscan", section, "Overscan, where it differs from [detector]."),
    ),
    text="a table [[beam]]",
)

ORIENTATION = Table(
    keys=(
        Key("mount", choice("equatorial", "altaz"), "Mount of the telescope.", "equatorial"),
        Key(
            "position_angle",
            Either((number(what="a number (deg)"), choice("parallactic"))),
            'chi where no keyword gives it; "parallactic": chi = eta + altitude x (elevation).',
            0.0,
        ),
        Key("altitude", choice(0, 1, -1), "0 for Cassegrain without rotator, 1 or -1 for Nasmyth.", 0),
        Key("sense", choice(1, -1), "1 where instrument angles grow as sky angles do, -1 where mirrored.", 1),
        Key(
            "frame",
            choice("instrument", "telescope", "both"),
            "With what the instrumental polarisation turns.",
            "instrument",
        ),
    ),
    text="a table with mount, position_angle, ...",
    build=into(Orientation),
)

SITE = Table(
    keys=(
        Key(
            "longitude",
            number(at_least=-180, at_most=360, what="a number (deg)"),
            "Longitude of the telescope, east positive.",
            required=True,
        ),
        Key("latitude", number(at_least=-90, at_most=90, what="a number (deg)"), "Latitude.", required=True),
        Key("height", number(at_least=-500, at_most=60000, what="a number (m)"), "Height above sea level.", 0.0),
    ),
    text="a table with longitude, latitude, height",
    build=into(Site),
)

INSTRUMENT = Table(
    keys=(
        Key("name", words(), "Name of the instrument.", required=True),
        Key("detector", DETECTOR, "The detector.", {}),
        Key(
            "keywords",
            KEYWORDS,
            "FITS keyword that holds each quantity, or a table that says how to read it.",
            required=True,
        ),
        Key("kinds", KINDS, "Values of the kind keyword.", {}),
        Key("filters", FILTERS, "What the header's filters stand for in the standard-star tables.", {}),
        Key(
            "wave_plate",
            WAVE_PLATE,
            "The wave plate: as by default where only its keyword is given, none where that is absent too.",
        ),
        Key("beam", ListOf(BEAM, "at least one table [[beam]]", at_least=1), "The beams, in order.", required=True),
        Key("orientation", ORIENTATION, "How the instrument sits on the sky.", {}),
        Key("site", SITE, "Where the telescope stands; needed for the parallactic angle."),
    ),
    text="a table",
)
