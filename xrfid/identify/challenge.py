"""Elements put to the test: against other elements, and against a plain peak on no particular line."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from xrfid.fit.model import Fit, FreePeak, Ingredients, fit_series
from xrfid.identify.evidence import free_peak_instead
from xrfid.identify.select import contradicted, score, significances
from xrfid.identify.settings import Settings
from xrfid.response.series import SeriesKey

_SAFE = 45.0
"""An element this significant is not tried against a plain peak."""
_FIRM = 80.0
"""An element this significant is not offered for exchange."""
_SWAP_GAIN = 2.0
"""Deviance that an exchange must gain."""
ELEMENT_COST = 13.0
PEAK_COST = 22.0
"""Deviance that an element, or a peak of free position and width, must be worth (one false in a hundred spectra)."""


def _weakest_first(ingredients: Ingredients, fit: Fit, keep: Sequence[SeriesKey], below: float) -> list[int]:
    """Atomic numbers of the elements less significant than `below`, weakest first."""
    best: dict[int, float] = {}
    for key, z in significances(ingredients, fit).items():
        if key not in keep:
            best[key.z] = max(best.get(key.z, 0.0), z)
    return sorted((z for z, v in best.items() if v < below), key=lambda z: best[z])


def unmask_peaks(ingredients: Ingredients, fit: Fit, keep: Sequence[SeriesKey]) -> tuple[Ingredients, Fit]:
    """Replace elements by free peaks where the peak does better.

    A diffraction peak, or an artefact outside the model, falls on no element's pattern: the element
    nearest to it gains something, but misplaced, or with partner lines that are not there.
    """
    for z in _weakest_first(ingredients, fit, keep, _SAFE):
        keys = [k for k in fit.keys if k.z == z]
        if not keys:
            continue
        near = [p for p in ingredients.peaks if _beside(ingredients, keys, p)]
        bare = ingredients.with_peaks(tuple(p for p in ingredients.peaks if p not in near))
        without = fit_series(bare, [k for k in fit.keys if k.z != z], fit, rounds=1, iterations=3, resize=False)
        peak, gain = free_peak_instead(bare, without, keys)
        if gain < 0.5 * _own_gain(bare, without, keys):
            continue
        saved = ELEMENT_COST + PEAK_COST * (len(near) - 1)
        if _on_its_line(bare, keys, peak):
            continue  # that would be the element by another name; its missing lines are the verdict's business
        changed = bare.with_peaks((*bare.peaks, peak))
        trial = fit_series(changed, without.keys, without, rounds=1, iterations=4, resize=False)
        if trial.objective < fit.objective + saved:
            ingredients, fit = changed, trial
    return ingredients, fit


def _on_its_line(ingredients: Ingredients, keys: Sequence[SeriesKey], peak: FreePeak) -> bool:
    """Whether the peak merely copies the element's main line."""
    width = float(ingredients.columns.shape.resolution.fwhm_kev(peak.energy_kev))
    main = [max(ingredients.groups(k), key=lambda g: g.share).energy_kev for k in keys]
    return any(abs(e - peak.energy_kev) < 0.25 * width for e in main)


def _own_gain(ingredients: Ingredients, without: Fit, keys: Sequence[SeriesKey]) -> float:
    """Score (deviance-like) of an element's best series in the fit without it, to compare other columns with."""
    columns = ingredients.columns
    unit = columns.unit[[columns.index(k) for k in keys]]
    scored = score(without, unit, ingredients.counts, np.maximum(without.variance, ingredients.counts))
    return float(np.max(np.maximum(scored.z, 0.0)) ** 2)


def _beside(ingredients: Ingredients, keys: Sequence[SeriesKey], peak: FreePeak) -> bool:
    """Whether a free peak stands within one and a half widths of a series' main line group."""
    width = float(ingredients.columns.shape.resolution.fwhm_kev(peak.energy_kev))
    main = [max(ingredients.groups(k), key=lambda g: g.share).energy_kev for k in keys]
    return any(abs(e - peak.energy_kev) < 1.5 * width for e in main)


def exchange(ingredients: Ingredients, fit: Fit, keep: Sequence[SeriesKey], candidates: Sequence[SeriesKey]) -> Fit:
    """Swap an element for another wherever the other explains the counts better.

    The order in which elements entered must not decide who stays.
    """
    columns = ingredients.columns
    for z in _weakest_first(ingredients, fit, keep, _FIRM):
        keys = [k for k in fit.keys if k.z == z]
        if not keys:
            continue
        without = fit_series(ingredients, [k for k in fit.keys if k.z != z], fit, rounds=1, iterations=3, resize=False)
        own = _own_gain(ingredients, without, keys)
        pool = [
            k for k in candidates
            if k in columns and k.z != z and k not in without.areas and Settings.handicap(k) == 1.0
        ]  # fmt: skip
        variance = np.maximum(without.variance, ingredients.counts)
        scored = score(without, columns.unit[[columns.index(k) for k in pool]], ingredients.counts, variance)
        for i in np.argsort(-scored.z)[:3]:
            if scored.z[i] < 3.0 or scored.z[i] ** 2 < 0.5 * own:
                break
            if contradicted(ingredients, without, pool[i], float(scored.amplitude[i])):
                continue
            trial = fit_series(ingredients, (*without.keys, pool[i]), without, rounds=2, iterations=3, resize=False)
            if trial.objective < fit.objective - _SWAP_GAIN:
                fit = trial
    return fit
