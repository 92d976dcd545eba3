"""What every point is fitted with: the sum's model boiled down to a few columns and two matrices.

The summed spectrum settles scale, widths, tails, line shares and the continuum's shape far better
than one point could. With these taken over, a point's counts are ``areas @ columns`` with a few
dozen columns. With weights shared by all points (one over the mean spectrum) the least-squares
areas are a matrix times the counts, ``P y``. They are unbiased for any composition and at any
number of counts, because the weights do not depend on the point; their Poisson variance is
``(P * P) y``.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from xrfid.fit.grouping import Grouping
from xrfid.fit.model import Fit, Ingredients, fit_series
from xrfid.fit.nuisance import GAIN_PIVOT_KEV, shared_nuisances
from xrfid.fit.solve import covariance_of
from xrfid.identify.work import Work
from xrfid.response.series import SeriesKey

_CONTINUUM_KNOT_KEV = 4.0
_MOST_KNOTS = 8
_BAND_FWHM = 0.7
"""Width of the bands of channels over which a point's fit is judged."""
_SOLID = 10.0
"""A series this many sigma strong in the sum has its own shape taken from there."""


@dataclass(frozen=True, eq=False)
class Plan:
    """Columns that every point is fitted with; grouped channels, per point.

    Attributes
    ----------
    names : tuple of str
        The series, ``"Fe K"``; the first rows of `columns`.
    columns : ndarray, shape (n_columns, n_groups)
        Series, scatter, pile-up and unassigned peaks, then the continuum's.
    n_continuum : int
        How many of the last columns are the continuum's.
    mean : ndarray, shape (n_groups,)
        Expected counts of the mean point.
    systematic : ndarray, shape (n_series,)
        Relative uncertainty of each area that more counts do not improve.
    starts, edges_kev : ndarray, shape (n_groups + 1,)
        The groups of channels.
    n_channels : int
    band : int
        Channels per band.
    """

    names: tuple[str, ...]
    columns: NDArray[np.float64]
    n_continuum: int
    mean: NDArray[np.float64]
    systematic: NDArray[np.float64]
    starts: NDArray[np.intp]
    edges_kev: NDArray[np.float64]
    n_channels: int
    band: int

    @property
    def n_series(self) -> int:
        """Number of series whose areas are wanted."""
        return len(self.names)

    @property
    def grouping(self) -> Grouping:
        """The groups of channels."""
        return Grouping(self.starts, self.edges_kev)

    @property
    def n_padded(self) -> int:
        """Channels, rounded up to whole bands."""
        return -(-self.n_channels // self.band) * self.band

    @cached_property
    def gram(self) -> NDArray[np.float64]:
        """Information of one mean point, shape (n_columns, n_columns)."""
        return np.asarray((self.columns / self.mean) @ self.columns.T)

    @cached_property
    def covariance(self) -> NDArray[np.float64]:
        """Inverse of `gram`."""
        return covariance_of(self.gram)

    @cached_property
    def grouped_projection(self) -> NDArray[np.float64]:
        """Coefficients from grouped counts, shape (n_columns, n_groups)."""
        return np.asarray(self.covariance @ (self.columns / self.mean))

    @cached_property
    def projection(self) -> NDArray[np.float32]:
        """Coefficients from channels, shape (n_padded, n_columns): the grouping folded in."""
        out = np.zeros((self.n_padded, self.columns.shape[0]), dtype=np.float32)
        out[self.starts[0] : self.starts[-1]] = np.repeat(self.grouped_projection, np.diff(self.starts), axis=1).T
        return out

    @cached_property
    def variances(self) -> NDArray[np.float32]:
        """Poisson variances of the areas from coefficients, shape (n_columns, n_series).

        ``(P * P) mu`` with the fitted expectation ``mu``: the same on average as ``(P * P) y``, but it
        does not swing with the very counts that make an area come out high or low, and costs next to
        nothing.
        """
        return np.asarray(self.columns @ self.grouped_projection[: self.n_series].T ** 2, dtype=np.float32)

    @cached_property
    def variance_per_count(self) -> NDArray[np.float32]:
        """Variance that each count brings if it is spread like the mean spectrum, shape (n_series,)."""
        share = self.mean / self.mean.sum()
        return np.asarray(self.grouped_projection[: self.n_series] ** 2 @ share, dtype=np.float32)

    @cached_property
    def bands(self) -> tuple[int, int]:
        """First and last-plus-one band inside the fitted channels."""
        return -(-int(self.starts[0]) // self.band), int(self.starts[-1]) // self.band

    @cached_property
    def band_columns(self) -> NDArray[np.float32]:
        """Columns summed over bands, shape (n_columns, n_bands)."""
        return np.asarray(self._banded(self.columns), dtype=np.float32)

    @cached_property
    def band_mean(self) -> NDArray[np.float32]:
        """Mean point summed over bands, shape (n_bands,)."""
        return np.asarray(self._banded(self.mean[None])[0], dtype=np.float32)

    @cached_property
    def band_kev(self) -> NDArray[np.float32]:
        """Energies between neighbouring bands, keV, shape (n_bands - 1,)."""
        inner = np.arange(self.bands[0] + 1, self.bands[1]) * self.band
        return np.asarray(np.interp(inner, self.starts, self.edges_kev), dtype=np.float32)

    @cached_property
    def freedom(self) -> float:
        """Expected sum of squared band residuals over their variance; divides the chi-square."""
        first, last = self.bands
        per_channel = np.repeat(self.grouped_projection, np.diff(self.starts), axis=1)
        size = np.repeat(np.diff(self.starts), np.diff(self.starts))
        variance = np.repeat(self.mean, np.diff(self.starts)) / size
        member = np.arange(self.starts[0], self.starts[-1]) // self.band - first
        left = -self._banded(self.columns).T @ per_channel
        inside = np.flatnonzero((member >= 0) & (member < last - first))
        left[member[inside], inside] += 1.0
        return float(np.sum(left**2 @ variance / np.maximum(self._banded(self.mean[None])[0], 1e-12)))

    def _banded(self, per_group: NDArray[np.float64]) -> NDArray[np.float64]:
        """Sum grouped curves over bands, shape (n, n_bands)."""
        first, last = self.bands
        spread = np.array([self.grouping.spread(row, self.n_channels) for row in per_group])
        inside = spread[:, first * self.band : last * self.band]
        return np.asarray(inside.reshape(len(spread), last - first, self.band).sum(axis=2))

    def shifted(self, offset_kev: float, gain: float) -> Plan:
        """Return the plan for an energy scale on which every line stands higher.

        Parameters
        ----------
        offset_kev : float
            Shift at 6 keV, keV.
        gain : float
            Further relative shift per keV of distance from there.
        """
        n_lines = self.columns.shape[0] - self.n_continuum
        moved = self.columns.copy()
        moved[:n_lines] = [moved_lines(c, self.edges_kev, offset_kev, gain) for c in self.columns[:n_lines]]
        # the mean only serves as weight; it moves by what its lines move
        level = self.grouped_projection[:n_lines] @ self.mean
        mean = self.mean + level @ (moved[:n_lines] - self.columns[:n_lines])
        return replace(self, columns=moved, mean=np.maximum(mean, 0.2 * self.mean))


def moved_lines(
    column: NDArray[np.float64], edges_kev: NDArray[np.float64], offset_kev: float, gain: float
) -> NDArray[np.float64]:
    """Shift a column's content to higher energy by ``offset + gain * (E - pivot)``, shape (n_groups,)."""
    from scipy.interpolate import CubicSpline

    cumulative = CubicSpline(edges_kev, np.concatenate([[0.0], np.cumsum(column)]))
    source = np.clip(edges_kev - offset_kev - gain * (edges_kev - GAIN_PIVOT_KEV), edges_kev[0], edges_kev[-1])
    return np.diff(cumulative(source))


def make_plan(work: Work, n_points: int, extra: tuple[SeriesKey, ...] = ()) -> Plan:
    """Boil a finished search of the summed spectrum down to the plan for its points.

    Parameters
    ----------
    work : Work
        The search on the sum of `n_points` spectra.
    extra : tuple of SeriesKey
        Series found elsewhere, in few points, that the sum does not show.
    """
    drawn = work.ingredients
    keys = (*work.fit.keys, *(k for k in extra if k in drawn.columns and k not in work.fit.areas))
    fit = fit_series(drawn, keys, work.fit, rounds=2)
    series = _series_columns(drawn, fit)
    continuum = _continuum_columns(drawn, fit)
    others = _other_columns(fit, series, continuum.sum(axis=0))
    columns = np.concatenate([series, others, continuum])
    grouping = drawn.columns.grouping
    n_channels = work.spectrum.n_channels
    fwhm = float(work.setting.shape.resolution.fwhm_kev(6.0)) / work.setting.scale.gain_kev
    floor = 1e-4 * float(fit.model.mean())
    plan = Plan(
        names=tuple(str(k) for k in keys),
        columns=columns,
        n_continuum=continuum.shape[0],
        mean=np.maximum(fit.model, floor) / n_points,
        systematic=np.zeros(len(keys)),
        starts=grouping.starts,
        edges_kev=grouping.edges_kev,
        n_channels=n_channels,
        band=max(round(_BAND_FWHM * fwhm), 1),
    )
    return replace(plan, systematic=_systematic(plan, fit, n_points))


def _series_columns(drawn: Ingredients, fit: Fit) -> NDArray[np.float64]:
    """Return unit columns of the series with the tolerances at the values the sum gave them."""
    x, solution = fit.problem.columns, fit.solution.coefficients
    out = []
    for i, key in enumerate(fit.keys):
        column, area = x[i], 1.0
        if fit.areas[key] > _SOLID * fit.sigmas[key]:
            own = [j for j, label in enumerate(fit.labels) if label[0] in ("share", "shift") and label[1] == str(key)]
            column = (solution[i] * x[i] + solution[own] @ x[own]) / fit.areas[key]
        shared = shared_nuisances(drawn.columns, {key: area}, [], drawn.tolerances)
        out.append(column + sum(fit.coefficient(*n.label) * n.column for n in shared))
    return np.array(out).reshape(len(fit.keys), x.shape[1])


def _continuum_columns(drawn: Ingredients, fit: Fit) -> NDArray[np.float64]:
    """Return the sum's continuum times a few hat functions, so that each point may bend it."""
    centres = drawn.columns.grouping.centres_kev
    span = float(centres[-1] - centres[0])
    n = int(np.clip(round(span / _CONTINUUM_KNOT_KEV) + 1, 2, _MOST_KNOTS))
    knots = np.linspace(centres[0], centres[-1], n)
    hats = np.array([np.interp(centres, knots, unit) for unit in np.eye(n)])
    shape = np.maximum(fit.part("continuum"), 1e-6 * fit.model.max())
    return np.asarray(hats * shape)


def _other_columns(fit: Fit, series: NDArray[np.float64], continuum: NDArray[np.float64]) -> NDArray[np.float64]:
    """Scatter of each kind, pile-up and unassigned peaks as the sum shows them; in counts of the sum.

    What the tolerances of the scattered lines add goes with the strongest of the scatter columns.
    """
    parts = {name: fit.part(name) for name in ("sum", "partial")}
    peaks = [
        fit.coefficient(*label) * fit.problem.columns[i] for i, label in enumerate(fit.labels) if label[0] == "peak"
    ]
    areas = np.array([fit.areas[k] for k in fit.keys])
    named = areas @ series + continuum + sum(parts.values()) + sum(peaks, np.zeros_like(continuum))
    scatter = [fit.coefficient(*label) * fit.problem.columns[i]
               for i, label in enumerate(fit.labels) if label[0] == "scatter"]  # fmt: skip
    if scatter:
        strongest = max(range(len(scatter)), key=lambda i: float(scatter[i].sum()))
        scatter[strongest] = np.maximum(scatter[strongest] + fit.model - named - np.sum(scatter, axis=0), 0.0)
    seen = [
        c
        for c in (*scatter, *parts.values(), *peaks)
        if c.sum() > 3.0 * np.sqrt(float(np.sum(c * fit.model)) / max(c.sum(), 1e-300))
    ]
    return np.array(seen).reshape(len(seen), continuum.size)


def _systematic(plan: Plan, fit: Fit, n_points: int) -> NDArray[np.float64]:
    """Relative uncertainty of each area of the sum that its counting statistics do not explain."""
    counting = np.diag(plan.covariance)[: plan.n_series] * n_points
    areas = np.array([fit.areas[k] for k in fit.keys])
    sigmas = np.array([fit.sigmas[k] for k in fit.keys])
    beyond = np.sqrt(np.maximum(sigmas**2 - counting, 0.0))
    return np.where(areas > _SOLID * sigmas, beyond / np.maximum(areas, 1e-300), 0.0)
