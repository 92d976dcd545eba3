"""Columns: what a count of each series, of each scattered line and of the continuum looks like.

Everything here has unit area (or unit coefficient) and is drawn for one estimate of the sample, one
line shape and one grouping of the channels.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import cached_property

import numpy as np
from numpy.typing import NDArray
from scipy.interpolate import BSpline
from scipy.ndimage import gaussian_filter1d

from xrfid.atoms.lines import GROUPS
from xrfid.fit.grouping import Grouping
from xrfid.response.detector import DrawnLines, LineShape, draw, draw_core
from xrfid.response.scatter import Scattered, compton_profile
from xrfid.response.series import Prediction, SeriesKey
from xrfid.spectrum import FWHM_PER_SIGMA

SMALLEST_SHARE = 2e-4
"""Lines with a smaller share of their series are not drawn."""


@dataclass(frozen=True, eq=False)
class GroupColumn:
    """One line group of a series: its share of the series' area and its unit column (n,)."""

    name: str
    share: float
    tolerance: float
    shift_ev: float
    energy_kev: float
    column: NDArray[np.float64]


class SeriesColumns:
    """Unit columns of every series in reach.

    Attributes
    ----------
    keys : tuple of SeriesKey
        Series with lines inside the channels.
    unit : ndarray, shape (n_keys, n)
        Columns with unit area in their full-energy peaks, escape peaks added.
    intensity : ndarray, shape (n_keys,)
        Predicted counts per unit mass fraction, in the prediction's relative unit.
    """

    def __init__(
        self, prediction: Prediction, fractions: NDArray[np.float64], shape: LineShape, grouping: Grouping
    ) -> None:
        self.prediction, self.fractions, self.shape, self.grouping = prediction, fractions, shape, grouping
        self._material = prediction.instrument.detector.material
        low, high = grouping.edges_kev[0], grouping.edges_kev[-1]
        made = prediction.line_intensities(fractions, enhanced=False)
        inside = (prediction.line_energy_kev > low) & (prediction.line_energy_kev < high)
        made = np.where(inside, made, 0.0)
        total = np.bincount(prediction.line_series, made, minlength=len(prediction.keys))
        share = np.divide(made, total[prediction.line_series], out=np.zeros_like(made),
                          where=total[prediction.line_series] > 0)  # fmt: skip
        seen = np.flatnonzero(total > 0)
        self.keys: tuple[SeriesKey, ...] = tuple(prediction.keys[i] for i in seen)
        self.intensity = total[seen]
        column = np.full(len(prediction.keys), -1)
        column[seen] = np.arange(seen.size)
        self._rows = np.flatnonzero(share > SMALLEST_SHARE)
        self._column = column[prediction.line_series[self._rows]]
        kept = np.bincount(self._column, share[self._rows], minlength=seen.size)
        self._share = share[self._rows] / kept[self._column]
        self._index = {k: i for i, k in enumerate(self.keys)}

    def __contains__(self, key: SeriesKey) -> bool:
        return key in self._index

    def index(self, key: SeriesKey) -> int:
        """Row of `unit` and `intensity` that belongs to `key`."""
        return self._index[key]

    @cached_property
    def unit(self) -> NDArray[np.float64]:
        """Unit columns, shape (n_keys, n)."""
        lines = DrawnLines(self.prediction.line_energy_kev[self._rows], self._share, self._column)
        return draw(lines.with_escapes(self._material), self.shape, self.grouping.edges_kev, len(self.keys))

    def lines(self, weights: dict[SeriesKey, float]) -> tuple[DrawnLines, NDArray[np.float64], NDArray[np.intp]]:
        """All lines of several series, each series weighted by its area.

        Returns
        -------
        lines : DrawnLines
            Weights in counts; column 0.
        width_kev : ndarray, shape (n_lines,)
            Natural widths.
        rows : ndarray of int, shape (n_lines,)
            Index of each line in the prediction.
        """
        area = np.zeros(len(self.keys))
        for key, value in weights.items():
            area[self._index[key]] = value
        on = np.flatnonzero(area[self._column] > 0)
        rows = self._rows[on]
        weight = self._share[on] * area[self._column[on]]
        drawn = DrawnLines(self.prediction.line_energy_kev[rows], weight, np.zeros(on.size, dtype=np.intp))
        return drawn, self.prediction.line_width_kev[rows], rows

    def line_list(self, key: SeriesKey) -> list[tuple[str, float, float]]:
        """(name, keV, share) of each line of a series, strongest first."""
        on = np.flatnonzero(self._column == self._index[key])
        rows = self._rows[on]
        found = [
            (self.prediction.line_names[r], float(self.prediction.line_energy_kev[r]), float(s))
            for r, s in zip(rows, self._share[on], strict=True)
        ]
        return sorted(found, key=lambda x: -x[2])

    def groups(self, key: SeriesKey) -> list[GroupColumn]:
        """Line groups of a series, the main one (tolerance 0) first."""
        on = np.flatnonzero(self._column == self._index[key])
        rows, share = self._rows[on], self._share[on]
        kinds, place = np.unique(self.prediction.line_group[rows], return_inverse=True)
        lines = DrawnLines(self.prediction.line_energy_kev[rows], share, place)
        drawn = draw(lines.with_escapes(self._material), self.shape, self.grouping.edges_kev, kinds.size)
        total = np.bincount(place, share)
        energy = np.bincount(place, share * self.prediction.line_energy_kev[rows]) / total
        found = [
            GroupColumn(GROUPS[g].name, float(total[i]), GROUPS[g].tolerance, GROUPS[g].shift_ev, float(energy[i]),
                        drawn[i] / total[i])
            for i, g in enumerate(kinds)
        ]  # fmt: skip
        return sorted(found, key=lambda g: (g.tolerance > 0, -g.share))


@dataclass(frozen=True, eq=False)
class ScatterColumn:
    """One scattered group of source lines: a unit column and its line groups' shares."""

    kind: str
    of: str
    energy_kev: float
    column: NDArray[np.float64]
    predicted: float
    groups: tuple[tuple[str, float, NDArray[np.float64]], ...]
    """Name, share and unit column of each line group; empty where they are not told apart."""
    lines: DrawnLines | None = None
    """The lines of a coherent column, weights adding up to 1."""


_COMPTON_STEP_KEV = 0.01
_UNSHIFTED_KEV = 5.0
"""Below, the Compton shift is a small part of the width: one column does for both kinds of scatter."""
_MULTIPLE_DECAY = 0.025
"""Mean energy lost by multiple incoherent scatter, as a share of the line's energy (common practice, no source)."""
_GAUSSIAN_DOPPLER = 0.011
"""Doppler sigma of a light matrix as a share of the line's energy, near 90 to 135 degrees (Biggs et al. 1975)."""


def scatter_columns(
    prediction: Prediction, fractions: NDArray[np.float64], shape: LineShape, grouping: Grouping
) -> list[ScatterColumn]:
    """Columns of the source's scattered lines.

    Per series of the source: one coherent column and, for the incoherent peak, its Doppler profile,
    a Gaussian of typical Doppler width (an angle spread makes the peak rounder than the profile), and
    a low-energy flank from multiple scatter.
    """
    source = prediction.source
    scattered = prediction.scattered(fractions)
    edges = grouping.edges_kev
    columns: list[ScatterColumn] = []
    for series in dict.fromkeys(source.line_series):
        rows = source.n_continuum + np.flatnonzero([s == series for s in source.line_series])
        names = [source.line_group[i - source.n_continuum] for i in rows]
        of = f"{source.anode} {series}" if source.anode else "source"
        inside = (scattered.coherent_kev[rows] > edges[0]) & (scattered.coherent_kev[rows] < edges[-1])
        inside &= scattered.coherent[rows] > 1e-4 * scattered.coherent[rows].max(initial=0.0)
        rows, names = rows[inside], [n for n, ok in zip(names, inside, strict=True) if ok]
        if not rows.size or scattered.coherent[rows].sum() <= 0:
            continue
        columns.append(_coherent(of, rows, names, scattered, shape, grouping))
        columns.extend(_incoherent(of, rows, names, prediction, fractions, scattered, shape, grouping))
    return columns


def _coherent(of: str, rows: NDArray[np.intp], names: list[str], scattered: Scattered, shape: LineShape,
              grouping: Grouping) -> ScatterColumn:  # fmt: skip
    weight = scattered.coherent[rows] / scattered.coherent[rows].sum()
    kinds = list(dict.fromkeys(names))
    place = np.array([kinds.index(n) for n in names])
    lines = DrawnLines(scattered.coherent_kev[rows], weight, place)
    drawn = draw(lines, shape, grouping.edges_kev, len(kinds))
    share = np.bincount(place, weight)
    strongest = int(np.argmax(weight))
    groups = tuple((kinds[i], float(share[i]), drawn[i] / share[i]) for i in range(len(kinds)))
    predicted = float(scattered.coherent[rows].sum())
    if lines.energy_kev[strongest] < _UNSHIFTED_KEV:  # this column stands for both
        predicted += float(scattered.incoherent[rows].sum())
    return ScatterColumn("coherent scatter", of, float(lines.energy_kev[strongest]), drawn.sum(axis=0),
                         predicted, groups,
                         DrawnLines(lines.energy_kev, weight, np.zeros(weight.size, dtype=np.intp)))  # fmt: skip


def _incoherent(of: str, rows: NDArray[np.intp], names: list[str], prediction: Prediction,
                fractions: NDArray[np.float64], scattered: Scattered, shape: LineShape, grouping: Grouping
                ) -> list[ScatterColumn]:  # fmt: skip
    total = float(scattered.incoherent[rows].sum())
    if total <= 0:
        return []
    weight = scattered.incoherent[rows] / total
    peak = scattered.incoherent_kev[rows]
    strongest = float(peak[np.argmax(weight)])
    if strongest < _UNSHIFTED_KEV:
        return []
    angle = prediction.instrument.geometry.scatter_deg
    low = max(0.75 * float(peak.min()) - 0.5, 0.3)
    grid = np.arange(low, 1.12 * float(peak.max()) + 0.3, _COMPTON_STEP_KEV)
    kinds = list(dict.fromkeys(names))
    shapes = {"doppler": [], "gaussian": [], "flank": []}  # type: dict[str, list[tuple[str, float, NDArray[np.float64]]]]
    for kind in kinds:
        on = [i for i, n in enumerate(names) if n == kind]
        doppler, flank = np.zeros(grid.size), np.zeros(grid.size)
        for i in on:
            profile = weight[i] * compton_profile(fractions, float(scattered.coherent_kev[rows[i]]), angle, grid)
            doppler += profile
            flank += _lagged(profile, _MULTIPLE_DECAY * float(peak[i]))
        share = float(weight[on].sum())
        lines = DrawnLines(peak[on], weight[on] / share, np.zeros(len(on), dtype=np.intp))
        shapes["doppler"].append((kind, share, _recorded(doppler, grid, shape, grouping) / share))
        shapes["gaussian"].append((kind, share, _widened(lines, shape, grouping)))
        shapes["flank"].append((kind, share, _recorded(flank, grid, shape, grouping) / share))
    if strongest < 8.0:  # the flank merges with the continuum
        del shapes["flank"]
    return [
        ScatterColumn("incoherent scatter", of, strongest, np.sum([g[1] * g[2] for g in groups], axis=0),
                      total if name == "doppler" else 0.0, tuple(groups) if name == "gaussian" else ())
        for name, groups in shapes.items()
    ]  # fmt: skip


def _lagged(profile: NDArray[np.float64], decay_kev: float) -> NDArray[np.float64]:
    """Fold a profile with an exponential towards low energy."""
    n = int(8 * decay_kev / _COMPTON_STEP_KEV) + 1
    kernel = np.exp(-np.arange(n) * _COMPTON_STEP_KEV / decay_kev)
    return np.convolve(profile[::-1], kernel / kernel.sum())[: profile.size][::-1]


def _recorded(profile: NDArray[np.float64], grid: NDArray[np.float64], shape: LineShape, grouping: Grouping
              ) -> NDArray[np.float64]:  # fmt: skip
    """Fold a profile on a fine grid with the detector's width and sum it into groups, unit area in all."""
    middle = float(np.average(grid, weights=np.maximum(profile, 0.0) + 1e-12))
    sigma = float(shape.resolution.sigma_kev(middle)) / _COMPTON_STEP_KEV
    folded = gaussian_filter1d(profile, sigma) * _COMPTON_STEP_KEV
    cumulative = np.concatenate([[0.0], np.cumsum(folded)])
    bounds = np.concatenate([grid - 0.5 * _COMPTON_STEP_KEV, [grid[-1] + 0.5 * _COMPTON_STEP_KEV]])
    return np.diff(np.interp(grouping.edges_kev, bounds, cumulative))


def _widened(lines: DrawnLines, shape: LineShape, grouping: Grouping) -> NDArray[np.float64]:
    """Gaussian incoherent peaks of typical Doppler width."""
    out = np.zeros(grouping.n)
    for e, w in zip(lines.energy_kev, lines.weight, strict=True):
        doppler_ev = FWHM_PER_SIGMA * _GAUSSIAN_DOPPLER * e * 1e3
        wide = replace(shape.resolution, noise_ev=float(np.hypot(shape.resolution.noise_ev, doppler_ev)))
        one = DrawnLines(np.array([e]), np.array([w]), np.zeros(1, dtype=np.intp))
        out += draw_core(one, wide, grouping.edges_kev, 1)[0]
    return out


def scattered_continuum(
    prediction: Prediction, fractions: NDArray[np.float64], shape: LineShape, grouping: Grouping
) -> NDArray[np.float64]:
    """The scattered braking continuum's shape, shape (n,), in the prediction's relative unit."""
    source = prediction.source
    n = source.n_continuum
    if n == 0:
        return np.zeros(grouping.n)
    scattered = prediction.scattered(fractions)
    edges = grouping.edges_kev
    density = np.interp(grouping.centres_kev, scattered.coherent_kev[:n], scattered.coherent[:n] / source.bin_kev,
                        left=0.0, right=0.0)  # fmt: skip
    squeeze = np.gradient(scattered.incoherent_kev[:n], source.energy_kev[:n])
    density += np.interp(grouping.centres_kev, scattered.incoherent_kev[:n],
                         scattered.incoherent[:n] / source.bin_kev / squeeze, left=0.0, right=0.0)  # fmt: skip
    width = float(np.median(shape.resolution.sigma_kev(grouping.centres_kev) / np.diff(edges)))
    return np.asarray(gaussian_filter1d(density, width) * np.diff(edges))


def smooth_functions(
    grouping: Grouping, shape: LineShape, spacing_fwhm: float, least_kev: float
) -> NDArray[np.float64]:
    """Cubic B-splines that add up to 1, knots `spacing_fwhm` FWHM apart, shape (n_functions, n)."""
    centres = grouping.centres_kev
    knots = [float(centres[0])]
    while knots[-1] < centres[-1]:
        step = max(spacing_fwhm * float(shape.resolution.fwhm_kev(max(knots[-1], 0.5))), least_kev)
        knots.append(knots[-1] + step)
    stretch = (centres[-1] - centres[0]) / (knots[-1] - knots[0])
    inner = centres[0] + (np.array(knots) - knots[0]) * stretch
    padded = np.concatenate([[inner[0]] * 3, inner, [inner[-1]] * 3])
    return np.asarray(BSpline.design_matrix(np.clip(centres, inner[0], inner[-1]), padded, 3).toarray().T)
