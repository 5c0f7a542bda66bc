"""The calibration of an instrument: from standards, to and from a file, and onto measurements."""

from __future__ import annotations

import warnings
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import ArrayLike

from hwpol.correction.model import Array, Complex, FilterModel
from hwpol.correction.standard import Solver, Standard
from hwpol.errors import HwpolWarning, InputError, MissingError
from hwpol.flags import Flag
from hwpol.stokes import (
    ROTATION_LIMIT,
    Stokes,
    carry,
    instrument_from_observed,
    instrument_from_sky,
    observed_slopes,
    real_slopes,
    sky_from_instrument,
    sky_slopes,
)

#: Days around the standards' times within which a calibration counts as of the same night.
SAME_NIGHT = 0.5
#: Part of the field's half width by which a position may lie outside the range of the field terms.
FIELD_MARGIN = 0.05


@dataclass(frozen=True)
class Calibration:
    """Instrumental polarisation, efficiency and zero angle of every filter, with their covariance.

    Make one with `fit` or `read`.

    Parameters
    ----------
    filters : mapping of str to FilterModel
        By the header's filter value.
    instrument : str
    nights : tuple of str
    rows : tuple of dict
        One row per standard and visit of the fit, see `standards_table`; empty for a calibration read from a file.
    source : str
        Where it was read from; empty for a fit.
    """

    filters: Mapping[str, FilterModel]
    instrument: str = ""
    nights: tuple[str, ...] = ()
    rows: tuple[dict[str, Any], ...] = field(default=(), repr=False)
    source: str = ""

    @staticmethod
    def fit(
        standards: Iterable[Standard],
        *,
        frame: str = "instrument",
        field_order: int | str = 0,
        efficiency: float | str | Mapping[str, float] = "fit",
        instrument: str = "",
        nights: Sequence[str] = (),
        field_range: ArrayLike | None = None,
        solver: Solver | None = None,
    ) -> Calibration:
        """Fit the calibration of every filter to standards of one or many nights at once.

        Parameters
        ----------
        standards : iterable of Standard
        frame : {"instrument", "telescope", "both"}
            Whether the instrumental polarisation is constant in the instrument frame, turns with the telescope, or
            has a part of each kind.
        field_order : int or "best"
            Order of the polynomial in detector position; "best" by cross-validation.
        efficiency : "fit", float or mapping of filter to float
            Fixed where a number is given.
        instrument, nights : str, sequence of str
            Names kept in the calibration.
        field_range : array_like, shape (2, 2), optional
            Pixels ``[[x0, x1], [y0, y1]]`` that -1 and 1 stand for; default the range of the standards' positions.
        solver : callable, optional
            ``solver(fluxes, calibration or None) -> Stokes`` for standards measured as Fluxes.

        Returns
        -------
        Calibration
            Parameters the standards do not determine stand at their default (ip 0, A 1) and are listed as held.
            Standards that disagree with the others are left out and named, at most one in four.

        Raises
        ------
        InputError
            Without standards, or where one of them cannot be used.

        Notes
        -----
        Weights hold the measurement, the catalogue's errors (one per star, common to its visits) and an intrinsic
        scatter of the stars where they demand it. chi2 scales the covariance only where it is significantly large.
        """
        from hwpol.correction.fitting.assemble import fit_calibration

        return fit_calibration(
            list(standards),
            frame=frame,
            field_order=field_order,
            efficiency=efficiency,
            instrument=instrument,
            nights=tuple(nights),
            field_range=field_range,
            solver=solver,
        )

    @staticmethod
    def read(path: str | Path) -> Calibration:
        """Read ``calibration.toml``; ConfigError lists what is wrong with it."""
        from hwpol.correction.calibration_file import read_calibration

        return read_calibration(path)

    def write(self, path: str | Path) -> None:
        """Write ``calibration.toml``, whole or not at all; `read` gives the same numbers back."""
        from hwpol.correction.calibration_file import write_calibration

        write_calibration(self, path)

    @property
    def mjd(self) -> tuple[float, float]:
        """First and last time of the standards, all filters; NaN where not known."""
        times = np.array([m.mjd for m in self.filters.values()], dtype=float).reshape(-1, 2)
        known = times[np.isfinite(times).all(axis=1)]
        return (float(known[:, 0].min()), float(known[:, 1].max())) if len(known) else (float("nan"),) * 2

    def model(self, filter: str) -> FilterModel:
        """Model of a filter; MissingError with the known ones otherwise."""
        if filter not in self.filters:
            known = ", ".join(map(repr, self.filters)) or "none"
            raise MissingError(
                f"no calibration for filter {filter!r}{f' in {self.source}' if self.source else ''}: it has {known}; "
                f"observe standards in that filter, or leave it uncalibrated"
            )
        return self.filters[filter]

    def check_instrument(self, name: str) -> None:
        """Refuse a calibration of another instrument (InputError); an unnamed one passes."""
        if self.instrument and name and self.instrument != name:
            raise InputError(
                f"{self.source or 'calibration'}: made for instrument {self.instrument!r}, not {name!r}; give the "
                f"calibration of this instrument, or fit one from standards"
            )

    def warn_outside(self, mjd: float, place: str = "") -> bool:
        """Warn (HwpolWarning) where a time lies more than half a day outside the standards' times; True if so."""
        low, high = self.mjd
        outside = bool(np.isfinite([low, high, mjd]).all() and not low - SAME_NIGHT <= mjd <= high + SAME_NIGHT)
        if outside:
            nights = f" ({', '.join(self.nights)})" if self.nights else ""
            warnings.warn(
                f"{place + ': ' if place else ''}the calibration {self.source or ''}{nights} rests on standards of MJD "
                f"{low:.2f} to {high:.2f}, these data are of MJD {mjd:.2f}; fit one from standards of the same night",
                HwpolWarning,
                stacklevel=2,
            )
        return outside

    def terms(
        self,
        filter: str,
        x: ArrayLike | None,
        y: ArrayLike | None,
        chi: ArrayLike,
        eta: ArrayLike | None,
        sense: int,
        mjd: ArrayLike | None = None,
    ) -> tuple[Complex, Complex]:
        """Instrumental polarisation and A of every source and frame.

        Parameters
        ----------
        filter : str
        x, y : array_like, shape (source,) or (source, frame), optional
            Pixels; None for the field centre.
        chi, eta : array_like, shape (frame,)
            deg; eta may be None or NaN where nothing turns with the telescope.
        sense : {1, -1}
        mjd : array_like, shape (frame,), optional
            Needed for the drift alone; the middle of the standards without it.

        Returns
        -------
        ip : ndarray, shape (source, frame), complex
            Instrument frame.
        amplitude : ndarray, shape (1, 1), complex
        """
        model = self.model(filter)
        frames = np.size(chi)
        sources = max([np.shape(v)[0] for v in (x, y) if v is not None and np.ndim(v) > 0], default=1)
        where = model.setting((sources, frames), chi, eta, sense, x, y, mjd)
        return model.ip(where), np.full((1, 1), model.amplitude)

    def apply(self, stokes: Stokes) -> Stokes:
        """Bring observed q, u from the instrument frame to the sky.

        The random covariance is carried along; what the calibration adds goes to `calibration_covariance`. A spread of
        chi above 1 deg within a value is flagged (of eta - chi too, where a part turns with the telescope), and so are
        values outside the calibration's times or field.
        v is not calibrated; it changes its sign in a mirrored image.

        Raises
        ------
        InputError
            When `stokes` is on the sky already or eta is needed and not known.
        MissingError
            When the calibration lacks the filter.
        """
        if stokes.frame != "instrument":
            raise InputError(
                "Calibration.apply: these Stokes parameters are on the sky already; give the observed ones, "
                'frame = "instrument"'
            )
        model, where = self._place(stokes)
        ip, gain = model.ip(where), model.amplitude
        z = instrument_from_observed(stokes.z, ip, gain)
        sky = sky_from_instrument(z, where.chi, where.sense)
        back = np.linalg.inv(real_slopes(*observed_slopes(z, ip, gain)))
        slopes = real_slopes(*sky_slopes(where.chi, where.sense)) @ back
        jacobian = model.sky_jacobian(z, where)
        return replace(
            stokes,
            q=sky.real,
            u=sky.imag,
            v=None if stokes.v is None else stokes.v * where.sense,
            covariance=_carry_with_v(stokes.covariance, slopes, where.sense),
            calibration_covariance=jacobian @ model.covariance @ np.swapaxes(jacobian, -1, -2),
            frame="sky",
            flags=self._flags(stokes, model),
        )

    def _place(self, stokes: Stokes) -> tuple[FilterModel, Any]:
        model = self.model(stokes.filter)
        return model, model.setting(
            stokes.shape, stokes.position_angle, stokes.parallactic, stokes.sense, stokes.x, stokes.y, stokes.mjd
        )

    def _flags(self, stokes: Stokes, model: FilterModel) -> Any:
        flags = (np.asarray(stokes.flags) & ~int(Flag.UNCALIBRATED)) | model.flags
        where = model.setting(stokes.shape, 0.0, None, 1, stokes.x, stokes.y)
        outside = np.zeros(stokes.shape, dtype=bool)
        if any(n.count("_") == 2 and not n.endswith("_t") for n in model.names):
            outside |= np.maximum(np.abs(where.x), np.abs(where.y)) > 1 + FIELD_MARGIN
        if stokes.mjd is not None and np.isfinite(model.mjd).all():
            mjd = np.broadcast_to(stokes.mjd, stokes.shape)
            outside |= (mjd < model.mjd[0] - SAME_NIGHT) | (mjd > model.mjd[1] + SAME_NIGHT)
        turned = np.asarray(stokes.spread) > ROTATION_LIMIT
        if model.frame != "instrument":
            turned = turned | (np.asarray(stokes.turn) > ROTATION_LIMIT)
        turned = np.broadcast_to(turned, stokes.shape)
        return flags | np.where(outside, int(Flag.OUTSIDE_CALIBRATION), 0) | np.where(turned, int(Flag.ROTATION), 0)

    def sky_jacobian(self, stokes: Stokes) -> Array:
        """Slopes of the calibrated q, u on the sky with the parameters of the filter, shape S + (2, parameters).

        `stokes` may be the observed values or the calibrated ones (from `apply` or a solve with `terms`); chi and eta
        are its means.
        """
        model, where = self._place(stokes)
        if stokes.frame == "sky":
            z = instrument_from_sky(stokes.z, where.chi, where.sense)
        else:
            z = instrument_from_observed(stokes.z, model.ip(where), model.amplitude)
        return model.sky_jacobian(z, where)

    def calibration_covariance(self, stokes: Stokes) -> Array:
        """Covariance (S + (2, 2)) that the calibration adds to values on the sky; for results solved with `terms`."""
        jacobian = self.sky_jacobian(stokes)
        return np.asarray(jacobian @ self.model(stokes.filter).covariance @ np.swapaxes(jacobian, -1, -2))

    def with_error(self, stokes: Stokes) -> Stokes:
        """Return values on the sky, solved with `terms`, with what the calibration adds to error and flags.

        Rotation within a value was part of that solve and is not flagged.
        """
        covariance = self.calibration_covariance(stokes)
        flags = self._flags(replace(stokes, spread=0.0, turn=0.0), self.model(stokes.filter))
        return replace(stokes, calibration_covariance=covariance, flags=flags)

    def shared_covariance(self, stokes: Sequence[Stokes]) -> Array:
        """Calibration covariance of all values with one another, shape (N, 2, N, 2).

        N counts the values of all items in order, flattened. Values of different filters share nothing.
        """
        blocks = [(s.filter, self.sky_jacobian(s).reshape(-1, 2, len(self.model(s.filter).names))) for s in stokes]
        sizes = np.cumsum([0, *(len(block) for _, block in blocks)])
        out = np.zeros((sizes[-1], 2, sizes[-1], 2))
        for i, (name, left) in enumerate(blocks):
            for j, (other, right) in enumerate(blocks):
                if name == other:
                    part = np.einsum("nap,pq,mbq->namb", left, self.model(name).covariance, right)
                    out[sizes[i] : sizes[i + 1], :, sizes[j] : sizes[j + 1], :] = part
        return out

    def standards_table(self) -> list[dict[str, Any]]:
        """One row per standard, filter and visit with the columns of ``standards.ecsv``; empty unless fitted."""
        return [dict(row) for row in self.rows]


def _carry_with_v(covariance: Array, slopes: Array, sense: int) -> Array:
    if covariance.shape[-1] == 2:
        return np.asarray(carry(covariance, slopes))
    wide = np.zeros((*slopes.shape[:-2], 3, 3))
    wide[..., :2, :2] = slopes
    wide[..., 2, 2] = sense
    return np.asarray(wide @ covariance @ np.swapaxes(wide, -1, -2))
