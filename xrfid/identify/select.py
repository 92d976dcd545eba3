"""Which series belong in the model: forward, backward and exchange steps by likelihood.

A series is scored by how much the fit would gain from it with everything else, tolerances included,
free to give way (Rao's score test in the linear Poisson model); it stays only if, once in, its area
stands clear of its uncertainty.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.ndimage import gaussian_filter1d, uniform_filter1d
from scipy.special import ndtr

from xrfid.fit.grouping import CHANNELS_PER_FWHM, Grouping
from xrfid.fit.model import Fit, FreePeak, Ingredients, fit_series
from xrfid.response.series import SeriesKey
from xrfid.spectrum import FWHM_PER_SIGMA, Resolution

_MISFIT_WINDOW = 55
"""Groups of channels (about eleven FWHM) over which the local misfit is averaged."""
_PEAK_SIGMA = CHANNELS_PER_FWHM / FWHM_PER_SIGMA
"""A peak's standard deviation in groups of channels."""


@dataclass(frozen=True, eq=False)
class Scores:
    """Score test of columns that are not in the fit; arrays of shape (n_columns,)."""

    amplitude: NDArray[np.float64]
    sigma: NDArray[np.float64]
    z: NDArray[np.float64]


def score(fit: Fit, columns: NDArray[np.float64], counts: NDArray[np.float64], variance: NDArray[np.float64]) -> Scores:
    """Score columns, shape (n_columns, n), against a fit.

    Parameters
    ----------
    variance : ndarray, shape (n,)
        Variance of each group's counts under the hypothesis tested.
    """
    x, covariance = fit.problem.columns, fit.solution.covariance
    weighted = columns / variance
    raised = weighted @ (counts - fit.model)
    cross = weighted @ x.T
    information = np.einsum("ij,ij->i", weighted, columns) - np.einsum("ij,jk,ik->i", cross, covariance, cross)
    information = np.maximum(information, 1e-9 * np.einsum("ij,ij->i", weighted, columns) + 1e-300)
    return Scores(raised / information, 1.0 / np.sqrt(information), raised / np.sqrt(information))


def local_misfit(fit: Fit, counts: NDArray[np.float64]) -> NDArray[np.float64]:
    """How much larger than chance the misfit near each group of channels is, as a factor on the variance.

    The residual is first weighed with a peak's own width, because misfit comes in waves that look
    like peaks: what matters is how often the neighbourhood shows "peaks" of either sign. At least 1.
    """
    root = np.sqrt(fit.variance)
    like_a_peak = gaussian_filter1d((counts - fit.model) / root, _PEAK_SIGMA, mode="nearest")
    squared = like_a_peak**2 * (2.0 * np.sqrt(np.pi) * _PEAK_SIGMA)
    return np.asarray(np.maximum(uniform_filter1d(np.minimum(squared, 36.0), _MISFIT_WINDOW, mode="nearest"), 1.0))


def forward(
    ingredients: Ingredients,
    start: Sequence[SeriesKey],
    candidates: Sequence[SeriesKey],
    enter: float,
    *,
    near: Fit | None = None,
    handicap: Callable[[SeriesKey], float] = lambda key: 1.0,
    most: int = 45,
) -> Fit:
    """Add series while the best of them scores above `enter`.

    Parameters
    ----------
    start : sequence of SeriesKey
        Series that are in from the beginning and stay.
    candidates : sequence of SeriesKey
    enter : float
        Significance a series must reach.
    near : Fit, optional
        Starts the weights.
    handicap : callable
        Divides a candidate's significance (elements that hardly ever occur).
    """
    counts = ingredients.counts
    keys = list(start)
    fit = fit_series(ingredients, keys, near, rounds=2 if near is None else 1)
    pool = [k for k in candidates if k in ingredients.columns and k not in keys]
    rejected: set[SeriesKey] = set()
    divide = np.array([handicap(k) for k in pool])
    unit = ingredients.columns.unit[[ingredients.columns.index(k) for k in pool]]
    while len(keys) < most and pool:
        partners = [k for k in companions(ingredients, fit) if k in pool and k not in rejected]
        if partners:
            keys += partners
            fit = fit_series(ingredients, keys, fit, rounds=1, iterations=3)
        variance = np.maximum(fit.variance, counts)
        scored = score(fit, unit, counts, variance)
        z = scored.z / divide
        open_ = np.array([k not in keys and k not in rejected for k in pool])
        z = np.where(open_, z, -np.inf)

        def vetoed(i: int, fit: Fit = fit, scored: Scores = scored) -> bool:
            return contradicted(ingredients, fit, pool[i], float(scored.amplitude[i]))

        added = _pick(z, unit, variance, enter, vetoed)
        if not added:
            break
        keys += [pool[i] for i in added]
        fit = fit_series(ingredients, keys, fit, rounds=1, iterations=3)
        expected = _elements(fit)
        weak = [k for k in keys if k not in start and fit.areas[k] < 2.0 * fit.sigmas[k] and k.z not in expected]
        if weak:
            rejected |= {k for k in weak if k in {pool[i] for i in added}}
            keys = [k for k in keys if k not in weak]
            fit = fit_series(ingredients, keys, fit, rounds=1, iterations=3)
    return fit


_SURE = 8.0
"""A series this significant brings its element's other series into the model."""


def _elements(fit: Fit) -> set[int]:
    """Atomic numbers of which one series at least is beyond doubt."""
    return {k.z for k in fit.keys if fit.areas[k] > _SURE * fit.sigmas[k]}


def companions(ingredients: Ingredients, fit: Fit) -> list[SeriesKey]:
    """Further series that an element in the fit must show as well.

    A series counts if the prediction from the element's best series would change the fit by more
    than one standard uncertainty, so that no stranger is called in to explain its counts.
    """
    columns = ingredients.columns
    found = []
    sure = _elements(fit)
    for key in columns.keys:
        if key.z not in sure or key in fit.areas:
            continue
        best = max((k for k in fit.keys if k.z == key.z), key=lambda k: fit.areas[k] / max(fit.sigmas[k], 1e-300))
        predicted = fit.areas[best] * columns.intensity[columns.index(key)] / columns.intensity[columns.index(best)]
        column = columns.unit[columns.index(key)]
        if predicted**2 * float(np.sum(column**2 / fit.variance)) > 1.0:
            found.append(key)
    return found


_UNRELIABLE = 4.0
"""Predicted ratios of an element's series may be off by this factor (excitation, filters, matrix)."""


def contradicted(ingredients: Ingredients, fit: Fit, key: SeriesKey, amplitude: float) -> bool:
    """Whether an element's other series speak against `amplitude` counts in `key`.

    Another series that the excitation must bring out, by the prediction less a generous factor,
    and that the counts do not show, is a contradiction.
    """
    columns = ingredients.columns
    others = [k for k in columns.keys if k.z == key.z and k != key and k not in fit.areas]
    if not others or amplitude <= 0:
        return False
    unit = columns.unit[[columns.index(k) for k in others]]
    found = score(fit, unit, ingredients.counts, np.maximum(fit.variance, ingredients.counts))
    intensity = columns.intensity
    predicted = amplitude * np.array([intensity[columns.index(k)] for k in others]) / intensity[columns.index(key)]
    return bool(np.any(predicted / _UNRELIABLE > np.maximum(found.amplitude, 0.0) + 3.0 * found.sigma))


def _pick(
    z: NDArray[np.float64], unit: NDArray[np.float64], variance: NDArray[np.float64], enter: float,
    vetoed: Callable[[int], bool],
) -> list[int]:  # fmt: skip
    """Return the best candidate and others nearly as good that share no channels with it."""
    picked: list[int] = []
    order = np.argsort(-z)
    for i in order[:40]:
        if not z[i] > enter or (picked and z[i] < max(0.25 * z[picked[0]], 2.0 * enter)):
            break
        if vetoed(int(i)):
            continue
        overlap = [_overlap(unit[i], unit[j], variance) for j in picked]
        if all(o < 0.05 for o in overlap):
            picked.append(int(i))
        if len(picked) >= 4:
            break
    return picked


def _overlap(a: NDArray[np.float64], b: NDArray[np.float64], variance: NDArray[np.float64]) -> float:
    """Cosine of the angle between two columns in the metric of the variance."""
    return float(np.sum(a * b / variance) / np.sqrt(np.sum(a * a / variance) * np.sum(b * b / variance)))


def backward(ingredients: Ingredients, fit: Fit, keep: Sequence[SeriesKey], stay: float) -> Fit:
    """Take out, weakest first, every series whose area does not stand `stay` sigma clear of zero.

    The uncertainty includes the local misfit.
    """
    while True:
        z = significances(ingredients, fit)
        sure = _elements(fit)
        free = {k: v for k, v in z.items() if k not in keep and k.z not in sure}
        if not free or min(free.values()) >= stay:
            return fit
        worst = min(free, key=lambda k: free[k])
        fit = fit_series(ingredients, [k for k in fit.keys if k != worst], fit, rounds=1, iterations=3)


def significances(ingredients: Ingredients, fit: Fit) -> dict[SeriesKey, float]:
    """Area over uncertainty of each series, the local misfit included in the uncertainty."""
    misfit = local_misfit(fit, ingredients.counts)
    out = {}
    for key in fit.keys:
        column = ingredients.columns.unit[ingredients.columns.index(key)]
        weight = column**2 / fit.variance
        factor = float(np.sqrt(np.sum(weight * misfit) / max(float(weight.sum()), 1e-300)))
        out[key] = fit.areas[key] / max(fit.sigmas[key] * factor, 1e-300)
    return out


PEAK_WIDTHS = (1.0, 1.5)
_LINE_MARGIN = 10.0
"""On a fitted line, a free peak must be so many times larger than the line, else it is the line."""
_PEAK_MARGIN = 0.05
"""A free peak must hold at least this share of the line counts around it, else it is shape misfit."""


def free_peaks(ingredients: Ingredients, fit: Fit, enter: float, most: int = 6) -> tuple[FreePeak, ...]:
    """Find peaks in the residual that no series of the fit explains.

    A matched filter of one and one and a half detector widths is run along the residual; what
    exceeds `enter` after the fit's other columns had their say becomes a free peak.
    """
    grouping, resolution = ingredients.columns.grouping, ingredients.columns.shape.resolution
    found = list(ingredients.peaks)
    for _ in range(most):
        residual = ingredients.counts - fit.model
        best: tuple[float, FreePeak] | None = None
        for width in PEAK_WIDTHS:
            energy = _strongest_residual(residual, fit.variance, grouping, resolution, width)
            peak = FreePeak(energy, width, draw_peak(energy, width, resolution, grouping))
            scored = score(fit, peak.column[None], ingredients.counts, np.maximum(fit.variance, ingredients.counts))
            known = _on_a_known_line(ingredients, fit, peak, float(scored.amplitude[0]))
            if not known and (best is None or scored.z[0] > best[0]):
                best = (float(scored.z[0]), peak)
        if best is None or best[0] < enter:
            break
        found.append(best[1])
        fit = fit_series(ingredients.with_peaks(tuple(found)), fit.keys, fit, rounds=1, iterations=3)
    return tuple(found)


def _on_a_known_line(ingredients: Ingredients, fit: Fit, peak: FreePeak, amplitude: float) -> bool:
    """Whether a peak only adds to a line that the fit holds, or sits in the wing of a much stronger one.

    What is off there is the line's share, energy or shape, and the tolerances are the place for it.
    """
    beside = float(np.sum(peak.column * fit.part("series"))) / float(np.sum(peak.column**2))
    if amplitude < _PEAK_MARGIN * beside:
        return True
    width = float(ingredients.columns.shape.resolution.fwhm_kev(peak.energy_kev))
    return any(
        abs(group.energy_kev - peak.energy_kev) < 0.6 * width
        and amplitude < _LINE_MARGIN * fit.areas[key] * group.share
        for key in fit.keys if fit.areas[key] > 30.0
        for group in ingredients.groups(key)
    )  # fmt: skip


def draw_peak(energy_kev: float, width: float, resolution: Resolution, grouping: Grouping) -> NDArray[np.float64]:
    """Unit Gaussian of `width` times the detector's width, shape (n,)."""
    edges = (grouping.edges_kev - energy_kev) / (width * float(resolution.sigma_kev(energy_kev)))
    return np.diff(ndtr(edges))


def _strongest_residual(residual: NDArray[np.float64], variance: NDArray[np.float64], grouping: Grouping,
                        resolution: Resolution, width: float) -> float:  # fmt: skip
    """Energy at which a peak of the given width would gain most."""
    centres, sizes = grouping.centres_kev, np.diff(grouping.edges_kev)
    reach = 12
    offset = np.arange(-reach, reach + 1)
    place = np.clip(np.arange(centres.size)[:, None] + offset, 0, centres.size - 1)
    sigma = width * resolution.sigma_kev(centres)[:, None]
    kernel = np.exp(-0.5 * ((centres[place] - centres[:, None]) / sigma) ** 2) * sizes[place]
    kernel[(np.arange(centres.size)[:, None] + offset != place)] = 0.0
    gain = (kernel * (residual / variance)[place]).sum(axis=1) / np.sqrt((kernel**2 / variance[place]).sum(axis=1))
    return float(centres[int(np.argmax(gain))])
