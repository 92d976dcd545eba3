"""Elements put to the test: against other elements, and against a plain peak on no particular line."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from xrfid.fit.model import Fit, Ingredients, fit_series
from xrfid.identify.evidence import free_peak_instead
from xrfid.identify.select import score, significances
from xrfid.response.series import SeriesKey

_SAFE = 45.0
"""An element this significant is not put to the test."""
_FIRM = 80.0
"""An element this significant is not offered for exchange."""
_SWAP_GAIN = 2.0
"""Deviance that an exchange must gain."""
_PEAK_COST = 9.0
"""Deviance a free peak must gain beyond the element's, for the freedom of its position and width."""


def unmask_peaks(ingredients: Ingredients, fit: Fit, keep: Sequence[SeriesKey]) -> tuple[Ingredients, Fit]:
    """Replace elements by free peaks where the peak does better.

    A diffraction peak, or an artefact outside the model, falls on no element's pattern: the element
    nearest to it gains something, but misplaced, or with partner lines that are not there.
    """
    z_of = significances(ingredients, fit)
    weakest_first = sorted({k.z for k in fit.keys if k not in keep}, key=lambda z: max(v for k, v in z_of.items() if k.z == z))
    for z in weakest_first:
        keys = [k for k in fit.keys if k.z == z]
        if not keys or max(z_of.get(k, 0.0) for k in keys) > _SAFE:
            continue
        without = fit_series(ingredients, [k for k in fit.keys if k.z != z], fit, rounds=1, iterations=3)
        peak, gain = free_peak_instead(ingredients, without, keys)
        if gain < without.objective - fit.objective + 0.5 * _PEAK_COST:
            continue
        changed = ingredients.with_peaks((*ingredients.peaks, peak))
        trial = fit_series(changed, without.keys, without, rounds=1, iterations=4)
        if trial.objective < fit.objective - _PEAK_COST:
            ingredients, fit = changed, trial
    return ingredients, fit


def exchange(
    ingredients: Ingredients, fit: Fit, keep: Sequence[SeriesKey], candidates: Sequence[SeriesKey]
) -> Fit:
    """Swap an element for another wherever the other explains the counts better.

    The order in which elements entered must not decide who stays.
    """
    z_of = significances(ingredients, fit)
    columns = ingredients.columns
    for z in sorted({k.z for k in fit.keys if k not in keep}, key=lambda z: max(v for k, v in z_of.items() if k.z == z)):
        keys = [k for k in fit.keys if k.z == z]
        if not keys or max(z_of.get(k, 0.0) for k in keys) > _FIRM:
            continue
        without = fit_series(ingredients, [k for k in fit.keys if k.z != z], fit, rounds=1, iterations=3)
        loss = without.objective - fit.objective
        pool = [k for k in candidates if k in columns and k.z != z and k not in without.areas]
        variance = np.maximum(without.variance, ingredients.counts)
        scored = score(without, columns.unit[[columns.index(k) for k in pool]], ingredients.counts, variance)
        best = int(np.argmax(scored.z))
        if scored.z[best] < 3.0 or scored.z[best] ** 2 < 0.7 * loss:
            continue
        trial = fit_series(ingredients, (*without.keys, pool[best]), without, rounds=2, iterations=3)
        if trial.objective < fit.objective - _SWAP_GAIN:
            fit = trial
    return fit
