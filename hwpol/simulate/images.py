"""Light on the detector: where sources fall in every beam, and how many electrons a pixel expects."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from hwpol.instrument import Section
from hwpol.simulate.plan import FIELDS, Exposure, child
from hwpol.simulate.scenario import Block, Scenario, Target, in_filter

STAMP_RADIUS = 12.0  # fwhm; beyond it lies (1 + 150)^-2 = 4e-5 of a Moffat disc of beta 3
CORE_RADIUS = 2.0  # fwhm; inside, five-point Gauss-Legendre per axis and pixel
_NODES, _WEIGHTS = np.polynomial.legendre.leggauss(5)

Image = NDArray[np.float64]


@dataclass(frozen=True)
class Layout:
    """Where the beams lie: for each beam its HDU (position in `extensions`) and its lit area."""

    extensions: tuple[int | str, ...]
    hdu: tuple[int, ...]
    area: tuple[Section, ...]
    lit: tuple[Section, ...]

    @staticmethod
    def of(scenario: Scenario) -> Layout:
        """Lay out the beams of the scenario's instrument."""
        instrument = scenario.instrument
        nx, ny = scenario.array.shape
        extensions = tuple(dict.fromkeys(instrument.extension_of(b) for b in range(len(instrument.beams))))
        hdu = tuple(extensions.index(instrument.extension_of(b)) for b in range(len(instrument.beams)))
        lit = [Section(0, nx, 0, ny)] * len(extensions)
        for beam, where in zip(instrument.beams, hdu, strict=True):
            trim = beam.trim or instrument.detector.trim
            if trim is not None:
                lit[where] = Section(trim.x0, min(trim.x1, nx), trim.y0, min(trim.y1, ny))
        area = []
        for beam, where in zip(instrument.beams, hdu, strict=True):
            own, all_ = beam.section or lit[where], lit[where]
            area.append(Section(max(own.x0, all_.x0), min(own.x1, all_.x1), max(own.y0, all_.y0), min(own.y1, all_.y1)))
        return Layout(extensions, hdu, tuple(area), tuple(lit))

    def middle(self) -> tuple[float, float]:
        """Middle of the first beam's area."""
        area = self.area[0]
        return (area.x0 + area.x1 - 1) / 2, (area.y0 + area.y1 - 1) / 2


@dataclass(frozen=True)
class Stars:
    """The target (first) and the stars of its field: arcsec east and north, rates and q, u, v by filter.

    `p_rate`, `theta_rate` (deg) per hour are the target's own.
    """

    east: NDArray[np.float64]
    north: NDArray[np.float64]
    rate: dict[str, NDArray[np.float64]]
    polarisation: dict[str, NDArray[np.float64]]
    p_rate: float = 0.0
    theta_rate: float = 0.0

    def light(self, filter_name: str, hours: float) -> NDArray[np.float64]:
        """q, u, v on the sky `hours` after the start of the night, shape (source, 3)."""
        light = self.polarisation[filter_name].copy()
        z = complex(*light[0, :2])
        turned = (abs(z) + self.p_rate * hours) * np.exp(1j * (np.angle(z) + 2 * np.deg2rad(self.theta_rate * hours)))
        light[0, :2] = turned.real, turned.imag
        return light

    def stokes(self, filter_name: str, hours: float) -> NDArray[np.float64]:
        """I, Q, U, V on the sky, shape (source, 4), electrons per second."""
        rate = self.rate[filter_name][:, None]
        return np.concatenate([rate, rate * self.light(filter_name, hours)], axis=1)


def stars_of(scenario: Scenario, target: Target, chi: float) -> Stars:
    """Everything point-like about a target, brightest first after the target itself.

    `chi` (deg) is the angle at which the random stars fill the first beam's area.
    """
    lights = [target, *target.companion]
    east = np.array([0.0] + [star.east for star in target.companion])
    north = np.array([0.0] + [star.north for star in target.companion])
    rate = {name: np.array([in_filter(one.rate, name) for one in lights]) for name in scenario.filters}
    light = {name: np.array([one.stokes(name) for one in lights]) for name in scenario.filters}
    if target.field is not None:
        more_east, more_north, more_rate, more_light = _scattered(scenario, target, chi)
        east, north = np.append(east, more_east), np.append(north, more_north)
        for name in scenario.filters:
            rate[name] = np.append(rate[name], more_rate)
            light[name] = np.concatenate([light[name], more_light])
    total = sum(rate.values())
    order = np.append(0, 1 + np.argsort(-np.asarray(total)[1:], kind="stable"))
    return Stars(
        east[order],
        north[order],
        {n: r[order] for n, r in rate.items()},
        {n: z[order] for n, z in light.items()},
        target.p_rate,
        target.theta_rate,
    )


def _scattered(scenario: Scenario, target: Target, chi: float) -> tuple[Image, Image, Image, Image]:
    field = target.field
    assert field is not None
    rng = child(scenario.seed, FIELDS, scenario.targets.index(target))
    area, home = Layout.of(scenario).area[0], place_of(scenario, target)
    chosen = [np.array(home)]
    for _ in range(1000 * field.stars):
        spot = rng.uniform([area.x0, area.y0], [area.x1 - 1, area.y1 - 1])
        if min(np.hypot(*(spot - other)) for other in chosen) >= field.separation:
            chosen.append(spot)
        if len(chosen) > field.stars:
            break
    offset = np.array(chosen[1:]).reshape(-1, 2) - home
    east, north = _to_sky(scenario, offset[:, 0], offset[:, 1], chi)
    rate = np.exp(rng.uniform(np.log(field.faintest), np.log(field.brightest), len(offset)))
    twice = np.deg2rad(2 * field.theta)
    mean = [field.p * np.cos(twice), field.p * np.sin(twice)]
    light = np.zeros((len(offset), 3))
    light[:, :2] = mean + field.p_scatter * rng.standard_normal((len(offset), 2))
    return east, north, rate, light


def place_of(scenario: Scenario, target: Target) -> tuple[float, float]:
    """Pixel of the first beam to which a target is pointed."""
    return Layout.of(scenario).middle() if target.xy is None else target.xy


def _to_sky(scenario: Scenario, dx: Image, dy: Image, chi: float) -> tuple[Image, Image]:
    """Arcsec east and north of a pixel offset; instrument angle 0 is +y, 90 deg is -x."""
    scale, sense = scenario.instrument.detector.pixel_scale or 1.0, scenario.instrument.orientation.sense
    angle = np.deg2rad(chi) + sense * np.arctan2(-dx, dy)
    radius = scale * np.hypot(dx, dy)
    return radius * np.sin(angle), radius * np.cos(angle)


def sky_to_pixels(scenario: Scenario, east: Image, north: Image, chi: float) -> tuple[Image, Image]:
    """Pixel offset of arcsec east and north; the instrument's +Q axis is +y, its angles grow towards -x."""
    scale, sense = scenario.instrument.detector.pixel_scale or 1.0, scenario.instrument.orientation.sense
    angle = sense * (np.arctan2(east, north) - np.deg2rad(chi))
    radius = np.hypot(east, north) / scale
    return -radius * np.sin(angle), radius * np.cos(angle)


def positions(scenario: Scenario, layout: Layout, one: Exposure, stars: Stars, elapsed: float) -> tuple[Image, Image]:
    """x, y of all stars in all beams, shape (source, beam); `elapsed` hours since the target's first frame."""
    target = scenario.target(one.target)
    x0, y0 = place_of(scenario, target)
    east, north = stars.east.copy(), stars.north.copy()
    east[0] += target.motion[0] * elapsed
    north[0] += target.motion[1] * elapsed
    dx, dy = sky_to_pixels(scenario, east, north, one.chi)
    x, y = x0 + dx + one.shift[0], y0 + dy + one.shift[1]
    return beam_map(scenario, layout, x, y)


def beam_map(scenario: Scenario, layout: Layout, x: Image, y: Image) -> tuple[Image, Image]:
    """Where a place of the first beam falls in every beam, shape (..., beam): offset, scale and quadratic terms."""
    area, (xc, yc) = layout.area[0], layout.middle()
    half_x, half_y = (area.x1 - area.x0) / 2, (area.y1 - area.y0) / 2
    xs, ys = (x - xc) / half_x, (y - yc) / half_y
    columns, rows = [], []
    for beam, own in zip(scenario.instrument.beams, scenario.beams, strict=True):
        columns.append(x + beam.offset[0] + own.shift[0] + own.scale * (x - xc) + own.quadratic * xs * xs)
        rows.append(y + beam.offset[1] + own.shift[1] + own.scale * (y - yc) + own.quadratic * xs * ys)
    return np.stack(columns, axis=-1), np.stack(rows, axis=-1)


def scaled(scenario: Scenario, x: Image, y: Image) -> tuple[Image, Image]:
    """Pixels scaled to [-1, 1] over the raw array."""
    nx, ny = scenario.array.shape
    return 2 * x / (nx - 1) - 1, 2 * y / (ny - 1) - 1


def add_star(
    image: Image, x: float, y: float, electrons: float, fwhm: float, beta: float, ellipticity: float = 0.0,
    elongation: float = 0.0,
) -> None:  # fmt: skip
    """Add one Moffat disc, integrated over every pixel, in place.

    Normalised over the whole plane, so that what falls off the image or
    beyond `STAMP_RADIUS` is lost. Inside `CORE_RADIUS` each pixel is
    integrated by Gauss-Legendre quadrature; outside, its middle is corrected
    by the Laplacian, whose neglected next term is below 1e-6 of the star.

    Parameters
    ----------
    image : ndarray, shape (ny, nx)
        Electrons.
    x, y : float
        Centre, 0-based pixels.
    fwhm : float
        Of the mean radius, pixels.
    ellipticity : float
        1 - minor/major axis at constant area.
    elongation : float
        Angle of the major axis from x to y (deg).
    """
    ny, nx = image.shape
    reach = STAMP_RADIUS * fwhm
    x0, x1 = max(int(np.ceil(x - reach)), 0), min(int(np.floor(x + reach)) + 1, nx)
    y0, y1 = max(int(np.ceil(y - reach)), 0), min(int(np.floor(y + reach)) + 1, ny)
    if x0 >= x1 or y0 >= y1 or electrons == 0:
        return
    a = fwhm / (2 * np.sqrt(2 ** (1 / beta) - 1))
    c, s = np.cos(np.deg2rad(elongation)), np.sin(np.deg2rad(elongation))
    major, minor = a / np.sqrt(1 - ellipticity), a * np.sqrt(1 - ellipticity)
    xx = (c / major) ** 2 + (s / minor) ** 2
    yy = (s / major) ** 2 + (c / minor) ** 2
    xy = c * s * (major**-2 - minor**-2)
    peak = electrons * (beta - 1) / (np.pi * a * a)

    dx, dy = np.arange(x0, x1) - x, np.arange(y0, y1)[:, None] - y
    base = 1 + xx * dx * dx + yy * dy * dy + 2 * xy * dx * dy
    value = base**-beta
    slope = (xx * dx + xy * dy) ** 2 + (yy * dy + xy * dx) ** 2
    stamp = value * (1 + beta / (12 * base) * (2 * (beta + 1) * slope / base - (xx + yy)))

    core = CORE_RADIUS * fwhm + 1
    i0, i1 = np.searchsorted(dx, [-core, core])
    j0, j1 = np.searchsorted(dy[:, 0], [-core, core])
    if i1 > i0 and j1 > j0:
        fine_x = (dx[i0:i1, None] + _NODES / 2).ravel()
        fine_y = (dy[j0:j1, 0, None] + _NODES / 2).ravel()[:, None]
        fine = (1 + xx * fine_x * fine_x + yy * fine_y * fine_y + 2 * xy * fine_x * fine_y) ** -beta
        fine = fine.reshape(j1 - j0, 5, i1 - i0, 5)
        stamp[j0:j1, i0:i1] = np.einsum("jaib,a,b->ji", fine, _WEIGHTS / 2, _WEIGHTS / 2)
    image[y0:y1, x0:x1] += peak * stamp


def starlight(
    scenario: Scenario, layout: Layout, one: Exposure, stars: Stars, elapsed: float
) -> tuple[list[Image], Image, Image, Image]:
    """Expected electrons on every HDU of one science frame, before the detector's response.

    Returns
    -------
    images : list of ndarray, shape (ny, nx)
    electrons : ndarray, shape (source, beam)
        Expected of each star, all its light.
    x, y : ndarray, shape (source, beam)
    """
    nx, ny = scenario.array.shape
    images = [np.zeros((ny, nx)) for _ in layout.extensions]
    train, air = scenario.train(one.filter, one.hours), scenario.atmosphere
    x, y = positions(scenario, layout, one, stars, elapsed)
    eta = 0.0 if np.isnan(one.eta) else one.eta
    xs, ys = scaled(scenario, x[:, 0], y[:, 0])
    gain = 0.5 * np.asarray(train.throughput)
    rows = train.rows(one.psi, one.chi, eta, xs, ys)
    seconds = one.seconds * one.transparency
    electrons = seconds * gain * np.einsum("sbi,si->sb", rows, stars.stokes(one.filter, one.hours))
    centre = train.rows(one.psi, one.chi, eta)
    for b, area in enumerate(layout.area):
        window = images[layout.hdu[b]][area.y0 : area.y1, area.x0 : area.x1]
        for s in range(len(stars.east)):
            add_star(
                window, x[s, b] - area.x0, y[s, b] - area.y0, electrons[s, b], one.fwhm * scenario.beams[b].fwhm,
                air.beta, air.ellipticity, one.elongation,
            )  # fmt: skip
        window += one.seconds * gain[b] * _background(scenario, one, centre[b], area)
        nebula = scenario.target(one.target).nebula
        if nebula is not None:
            dx = np.arange(area.x0, area.x1) - x[0, b]
            dy = np.arange(area.y0, area.y1)[:, None] - y[0, b]
            east, north = _to_sky(scenario, dx, dy, one.chi)
            i, q, u = nebula.stokes(np.hypot(dx, dy), np.rad2deg(np.arctan2(east, north)), one.filter)
            window += seconds * gain[b] * (centre[b, 0] * i + centre[b, 1] * q + centre[b, 2] * u)
    return images, electrons, x, y


def _background(scenario: Scenario, one: Exposure, row: Image, area: Section) -> Image:
    """Sky per second and pixel in one beam, throughput and its half left out."""
    sky = scenario.sky
    twice = np.deg2rad(2 * sky.theta)
    level = scenario.filters[one.filter].sky * one.sky
    level *= float(row[0] + sky.p * (row[1] * np.cos(twice) + row[2] * np.sin(twice)))
    xs = np.linspace(-1, 1, area.x1 - area.x0)
    ys = np.linspace(-1, 1, area.y1 - area.y0)[:, None]
    return np.asarray(level * (1 + sky.gradient[0] * xs + sky.gradient[1] * ys))


def lamplight(scenario: Scenario, layout: Layout, one: Exposure, block: Block) -> list[Image]:
    """Expected electrons of a flat-field frame: an even lamp, polarised in the instrument frame."""
    nx, ny = scenario.array.shape
    images = [np.zeros((ny, nx)) for _ in layout.extensions]
    train = scenario.train(one.filter, one.hours)
    # The lamp turns with the instrument: seen from the sky side at chi = 0 it is (p, sense theta).
    twice = np.deg2rad(2 * train.sense * block.theta)
    light = np.array([1.0, block.p * np.cos(twice), block.p * np.sin(twice), 0.0])
    signal = train.rows(one.psi) @ light
    for b, area in enumerate(layout.area):
        images[layout.hdu[b]][area.y0 : area.y1, area.x0 : area.x1] += block.level * train.throughput[b] * signal[b]
    return images
