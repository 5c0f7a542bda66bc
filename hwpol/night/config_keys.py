"""Every key of the night file: what is allowed, its default and one sentence of help."""

from __future__ import annotations

import re
from typing import Any

from hwpol.instrument.names import normal_name
from hwpol.instrument.toml_check import Either, FilePath, Key, Kind, ListOf, Problems, Single, Table, Then, Unfit, into
from hwpol.instrument.toml_kinds import choice, integer, number, truth, words
from hwpol.night import config_objects as objects
from hwpol.night.config_objects import Extent

_FWHM = re.compile(r"\s*(\d{1,9}(?:\.\d{0,9})?|\.\d{1,9})\s*fwhm\s*", re.IGNORECASE)
ESTIMATORS = ("modified-asymptotic", "mode", "mean", "median", "maximum-likelihood", "asymptotic")


def _extent(best: bool) -> Single:
    text = ('pixels > 0, "best", or' if best else "pixels > 0, or") + ' a multiple of fwhm such as "2.0 fwhm"'

    def parse(value: Any) -> Extent:
        if not isinstance(value, str):
            return Extent(number(above=0).parse(value))
        if best and value.strip().lower() == "best":
            return Extent(0.0, "best")
        found = _FWHM.fullmatch(value)
        if found is None or float(found[1]) <= 0:
            raise Unfit
        return Extent(float(found[1]), "fwhm")

    return Single(text, parse)


def _pair(item: Kind, text: str) -> ListOf:
    return ListOf(item, text, length=2)


GROUPING = Table(
    keys=(Key("gap", number(above=0, what="a number (minutes)"), "Time without a frame that ends a visit.", 60.0),),
    text="a table with gap",
    build=into(objects.GroupingConfig),
)

DETECTOR = Table(
    keys=(
        Key(
            "flat",
            choice("pooled", "per-angle", "off"),
            "Whether flats are pooled over wave-plate angles, made per angle, or not used.",
            "pooled",
        ),
        Key(
            "cosmic_rays",
            choice("apertures", "frames", "off"),
            "Where cosmic-ray hits are looked for: in apertures by comparing frames, in whole frames, or nowhere.",
            "apertures",
        ),
    ),
    text="a table with flat, cosmic_rays",
    build=into(objects.DetectorConfig),
)

REGISTRATION = Table(
    keys=(
        Key(
            "method",
            choice("stars", "correlation", "header", "off"),
            "How frames are aligned: by stars, by correlation of images, by their headers, or not.",
            "stars",
        ),
    ),
    text="a table with method",
    build=into(objects.RegistrationConfig),
)


def _photometry_rule(values: dict[str, Any], place: str, problems: Problems) -> None:
    radius, annulus = values.get("radius"), values.get("annulus")
    if annulus is None:
        return
    inner, outer = annulus
    written = [extent.value if extent.unit == "pixel" else str(extent) for extent in annulus]
    if inner.unit == outer.unit and inner.value >= outer.value:
        problems.add(f"{place}.annulus", written, "an inner radius below the outer one")
    elif radius is not None and radius.unit == inner.unit and radius.value > inner.value:
        problems.add(f"{place}.annulus", written, f"an inner radius of at least photometry.radius, {radius}")


PHOTOMETRY = Table(
    keys=(
        Key(
            "radius",
            _extent(best=True),
            'Aperture radius; "best" is the smallest on the plateau of q and u against radius.',
            "best",
        ),
        Key(
            "annulus",
            _pair(_extent(best=False), 'two radii [inner, outer], each in pixels or such as "4 fwhm"'),
            "Inner and outer radius of the sky annulus.",
            ["4 fwhm", "6 fwhm"],
        ),
        Key(
            "sources",
            choice("target", "field"),
            "What is measured: the target that the header or [[target]] names, or all stars of the field.",
            "target",
        ),
    ),
    text="a table with radius, annulus, sources",
    rule=_photometry_rule,
    build=into(objects.PhotometryConfig),
)

DEMODULATION = Table(
    keys=(
        Key(
            "method",
            choice("least-squares", "double-difference", "double-ratio"),
            "How q and u are found; the difference and ratio methods need positions 45 deg apart.",
            "least-squares",
        ),
        Key(
            "gain",
            choice("visit", "cycle", "night", "fixed"),
            "Over what the throughput of the beams is fitted; fixed takes that of the instrument file.",
            "visit",
        ),
        Key("circular", truth(), "Whether circular polarisation is solved for; it is taken as 0 otherwise.", False),
    ),
    text="a table with method, gain, circular",
    build=into(objects.DemodulationConfig),
)


def _foreground_rule(values: dict[str, Any], place: str, problems: Problems) -> None:
    method = values.get("method")
    for name in ("q", "u", "q_err", "u_err"):
        if name not in values:
            continue
        if method == "value" and values[name] is None:
            problems.missing(f"{place}.{name}", 'a number (fraction), as the method is "value"')
        elif method not in (None, "value") and values[name] is not None:
            problems.add(f"{place}.{name}", values[name], f'method = "value" with it, not "{method}"')


_fraction = number(above=-1, below=1, what="a number (fraction)")
_fraction_error = number(at_least=0, below=1, what="a number (fraction)")
FOREGROUND = Table(
    keys=(
        Key(
            "method",
            choice("off", "field", "value"),
            "Interstellar polarisation to take off: none, the weighted mean of the field's stars, or a given value.",
            "off",
        ),
        Key("q", _fraction, "Foreground Q/I on the sky."),
        Key("u", _fraction, "Foreground U/I on the sky."),
        Key("q_err", _fraction_error, "Error of the foreground q."),
        Key("u_err", _fraction_error, "Error of the foreground u."),
        Key(
            "wavelength",
            number(above=0, what="a number (micron)"),
            "Wavelength of the q and u given: they are carried to each filter's by the Serkowski law. Without it they "
            "serve every filter as they stand.",
        ),
        Key(
            "reddening",
            number(at_least=0, what="a number (magnitudes)"),
            "E(B-V) in front of the targets: a note is made where the foreground exceeds 9 percent of it.",
        ),
    ),
    text="a table with method, q, u, q_err, u_err, ...",
    rule=_foreground_rule,
    build=into(objects.ForegroundConfig),
)

_efficiency = number(above=0, at_most=1.2)  # a little above 1: the retardance given may be off
CORRECTION = Table(
    keys=(
        Key(
            "calibration",
            Either((choice("fit", "off"), FilePath("an existing calibration file"))),
            "The calibration: fitted from this night's standards, a file of another one, or none.",
            "fit",
        ),
        Key(
            "catalogues",
            ListOf(FilePath("an existing table"), "a list of files"),
            "Standard-star tables of your own, asked before those of the program.",
            [],
        ),
        Key(
            "efficiency",
            Either(
                (
                    choice("fit"),
                    _efficiency,
                    Table(others=_efficiency, others_help="Efficiency in one filter.", text="a table per filter"),
                )
            ),
            "Efficiency of the polarimeter: fitted from polarised standards, or given.",
            "fit",
        ),
        Key(
            "field_order",
            Either((integer(at_least=0, at_most=6), choice("best"))),
            "Order of the polynomial of the instrumental polarisation in detector position.",
            0,
        ),
        Key("foreground", FOREGROUND, "Interstellar polarisation in front of the targets.", {}),
    ),
    text="a table with calibration, catalogues, ...",
    build=into(objects.CorrectionConfig),
)

STATISTICS = Table(
    keys=(
        Key("estimator", choice(*ESTIMATORS), "Estimator of the de-biased degree of polarisation.", ESTIMATORS[0]),
        Key("level", number(above=0, below=1, what="a probability"), "Probability that intervals hold.", 0.6827),
    ),
    text="a table with estimator, level",
    build=into(objects.StatisticsConfig),
)

PRODUCTS = Table(
    keys=(
        Key(
            "formats",
            Then(
                ListOf(choice("ecsv", "fits", "votable"), 'a list of "ecsv", "fits", "votable"', at_least=1),
                lambda formats: tuple(dict.fromkeys(formats)),
            ),
            "Formats of the result tables.",
            ["ecsv"],
        ),
        Key("report", truth(), "Whether report.html is drawn.", True),
    ),
    text="a table with formats, report",
    build=into(objects.ProductsConfig),
)


def _target_rule(values: dict[str, Any], place: str, problems: Problems) -> None:
    for one, other in (("ra", "dec"), ("dec", "ra")):
        if values.get(one) is not None and other in values and values[other] is None:
            problems.missing(f"{place}.{other}", f"a number (deg), as there is {one}")


TARGET = Table(
    keys=(
        Key(
            "name",
            words("a name", pattern=r"(?s).*[^\s_\-].*"),
            "Name as in the header; case, blanks, hyphens and underscores are ignored.",
            required=True,
        ),
        Key("object", words(), "Header value, where one field holds several targets."),
        Key(
            "role",
            choice("science", "zero-polarised", "polarised"),
            "What the target is for; told by the catalogues where absent, else science.",
        ),
        Key("catalogue", words("a name"), "Name in the standard-star tables, where it differs from the header's."),
        Key("ra", number(at_least=0, below=360, what="a number (deg)"), "Right ascension, ICRS."),
        Key("dec", number(at_least=-90, at_most=90, what="a number (deg)"), "Declination, ICRS."),
        Key(
            "xy",
            _pair(number(at_least=0), "two numbers >= 0 (pixels) [x, y]"),
            "Pixel of the target in the first beam and first frame of the visit, good to about 10 pixels.",
        ),
        Key("moving", truth(), "Whether the target itself is followed between frames.", False),
    ),
    text="a table [[target]]",
    rule=_target_rule,
    build=into(objects.TargetConfig),
)


def _sky_of(found: Any) -> objects.MapSky:
    if isinstance(found, tuple):
        x, y, radius = found
        return objects.MapSky("circle", circle=(x, y, radius))
    return objects.MapSky() if found == "border" else objects.MapSky("object", object=found["object"])


def _parse_box(value: Any) -> tuple[int, int, int, int]:
    if not isinstance(value, list | tuple) or len(value) != 4:
        raise Unfit
    x0, x1, y0, y1 = (integer(at_least=0).parse(item) for item in value)
    if not (x0 < x1 and y0 < y1):
        raise Unfit
    return x0, x1, y0, y1


def _parse_circle(value: Any) -> tuple[float, float, float]:
    if not isinstance(value, list | tuple) or len(value) != 3:
        raise Unfit
    x, y = (number(at_least=0).parse(item) for item in value[:2])
    return x, y, number(above=0).parse(value[2])


def _map_rule(values: dict[str, Any], place: str, problems: Problems) -> None:
    for one, other, default in (("box", "size", 200), ("snr", "bin", 4)):
        if values.get(one) is not None and values.get(other) is not None:
            value = list(values[one]) if one == "box" else values[one]
            problems.add(f"{place}.{one}", value, f"either {other} or {one}, not both")
        elif one in values and values[one] is None and other in values and values[other] is None:
            values[other] = default


MAP = Table(
    keys=(
        Key("target", words("the name of a target"), "Target that the map is of.", required=True),
        Key("size", integer(at_least=1, what="a whole number (pixels)"), "Side of the map; 200 where no box is given."),
        Key(
            "box",
            Single("whole numbers >= 0 (pixels) [x0, x1, y0, y1], x0 < x1, y0 < y1", _parse_box),
            "Part of the array that is mapped, instead of size.",
        ),
        Key("bin", integer(at_least=1, what="a whole number (pixels)"), "Side of a bin; 4 where no snr is given."),
        Key("snr", number(above=0), "Signal-to-noise ratio that adaptive bins reach, instead of bin."),
        Key(
            "sky",
            Then(
                Either(
                    (
                        choice("border"),
                        Single("pixels [x, y, r]", _parse_circle),
                        Table(
                            keys=(Key("object", words(), "Header name of an offset exposure.", required=True),),
                            text='a table {object = "..."}',
                        ),
                    )
                ),
                _sky_of,
            ),
            "Where the sky of the map is measured: its border, a circle, or an offset exposure.",
            "border",
        ),
    ),
    text="a table [[map]]",
    rule=_map_rule,
    build=into(objects.MapConfig),
)


def _targets_rule(values: dict[str, Any], place: str, problems: Problems) -> None:
    seen: dict[tuple[Any, ...], int] = {}
    for count, target in enumerate(values.get("target") or (), 1):
        key = (normal_name(target.name), normal_name(target.object or ""), target.xy)
        if key in seen:
            problems.add(f"target[{count}].name", target.name, f"a target of its own: target[{seen[key]}] is the same")
        seen.setdefault(key, count)


NIGHT = Table(
    keys=(
        Key("instrument", FilePath("an existing instrument file"), "The instrument file.", required=True),
        Key(
            "frames",
            ListOf(words("a file name or pattern"), 'a list of patterns such as ["raw/*.fits"]', at_least=1),
            "Names or patterns of the raw frames; ** stands for any folders.",
            required=True,
        ),
        Key(
            "exclude",
            ListOf(words("a file name or pattern"), "a list of file names or patterns"),
            "File names or patterns to leave out, listed as set aside.",
            [],
        ),
        Key("output", FilePath("the path of a folder", exists=False), "Folder of the products.", required=True),
        Key("grouping", GROUPING, "How frames are grouped into visits.", {}),
        Key("detector", DETECTOR, "Calibration of the pixels.", {}),
        Key("registration", REGISTRATION, "Alignment of the frames.", {}),
        Key("photometry", PHOTOMETRY, "How sources are measured.", {}),
        Key("demodulation", DEMODULATION, "From fluxes to Stokes parameters in the instrument frame.", {}),
        Key("correction", CORRECTION, "From the instrument frame to the sky.", {}),
        Key("statistics", STATISTICS, "De-biasing and intervals.", {}),
        Key("products", PRODUCTS, "What is written.", {}),
        Key("target", ListOf(TARGET, "tables [[target]]"), "Targets, where the header does not say enough.", []),
        Key("map", ListOf(MAP, "tables [[map]]"), "Stokes maps of extended objects.", []),
    ),
    rule=_targets_rule,
)
