"""A rough composition from the areas, good enough to predict how the sample absorbs its own lines.

This is no quantitative analysis: it has no standard, it takes the sample as thick, flat and
homogeneous, and what X-rays do not show is lumped into one light matrix. That matrix is found from
the strength of the scattered radiation relative to the fluorescence.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from xrfid.response.series import Prediction, SeriesKey

_ITERATIONS = 14


@dataclass(frozen=True, eq=False)
class Composition:
    """Rough mass fractions (92,), light matrix included, and the share of that matrix."""

    fractions: NDArray[np.float64]
    light: float
    from_scatter: bool


def estimate(
    prediction: Prediction, areas: Mapping[SeriesKey, float], sigmas: Mapping[SeriesKey, float],
    scattered_counts: float, window_kev: tuple[float, float],
) -> Composition:  # fmt: skip
    """Estimate mass fractions from areas.

    Parameters
    ----------
    areas, sigmas : mapping from SeriesKey to float
        Counts of the sample's series and their uncertainty.
    scattered_counts : float
        Counts of scattered source radiation (lines and continuum) inside `window_kev`; 0 if unknown.

    Returns
    -------
    Composition
    """
    best = _best_series(areas, sigmas)
    light_only = prediction.light_matrix_only()
    if not best:
        return Composition(light_only, 1.0, False)
    rows = np.flatnonzero(np.isin(prediction.line_series, [prediction.keys.index(k) for k in best]))
    place = {k: prediction.keys.index(k) for k in best}
    z = np.array([k.z for k in best])
    area = np.array([areas[k] for k in best])
    w = area / area.sum()
    light = 0.5 if scattered_counts > 0 else 0.0
    for _ in range(_ITERATIONS):
        fractions = light_only * light
        np.add.at(fractions, z - 1, w * (1.0 - light))
        made = prediction.line_intensities(fractions, rows=rows)
        by_series = np.bincount(prediction.line_series[rows], made, minlength=len(prediction.keys))
        amount = area / np.maximum([by_series[place[k]] for k in best], 1e-300)
        w = amount / amount.sum()
        if scattered_counts > 0:
            expected = _scattered_inside(prediction, fractions, window_kev) * amount.sum() / max(1.0 - light, 1e-6)
            ratio = scattered_counts / max(expected, 1e-300)
            # more scatter than predicted means more light matrix; damped step in the odds
            odds = light / max(1.0 - light, 1e-9) * np.clip(ratio, 0.2, 5.0) ** 0.8
            light = float(np.clip(odds / (1.0 + odds), 0.002, 0.9998))
    if light < 0.05:
        light = 0.0
    fractions = light_only * light
    np.add.at(fractions, z - 1, w * (1.0 - light))
    return Composition(fractions, light, scattered_counts > 0)


def _best_series(areas: Mapping[SeriesKey, float], sigmas: Mapping[SeriesKey, float]) -> list[SeriesKey]:
    """For each element the series whose area is known best."""
    best: dict[int, SeriesKey] = {}
    for key, area in areas.items():
        if area <= 0 or area < 2.0 * sigmas[key]:
            continue
        old = best.get(key.z)
        if old is None or sigmas[key] / area < sigmas[old] / areas[old]:
            best[key.z] = key
    return list(best.values())


def _scattered_inside(prediction: Prediction, fractions: NDArray[np.float64], window_kev: tuple[float, float]) -> float:
    s = prediction.scattered(fractions)
    low, high = window_kev
    coherent = s.coherent[(s.coherent_kev > low) & (s.coherent_kev < high)].sum()
    return float(coherent + s.incoherent[(s.incoherent_kev > low) & (s.incoherent_kev < high)].sum())
