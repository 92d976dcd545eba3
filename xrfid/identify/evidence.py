"""What a verdict rests on: line by line, what was expected, what the counts show, and who else could have made it."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from xrfid.fit.model import Fit, Ingredients, fit_series
from xrfid.identify.result import Evidence, LineEvidence, Rival
from xrfid.identify.select import draw_peak, local_misfit, score
from xrfid.response.series import SeriesKey

_VISIBLE = 3.5
"""A line group predicted this many sigma strong must show itself."""
RIVAL_MARGIN = 12.0
"""A rival counts as doing equally well if the fit loses no more deviance with it than this."""


@dataclass(frozen=True, eq=False)
class ElementEvidence:
    """Evidence for one element together with the fit that lacks it."""

    z: int
    keys: tuple[SeriesKey, ...]
    without: Fit
    evidence: Evidence
    rivals: tuple[Rival, ...]


def gather(
    ingredients: Ingredients, fit: Fit, z: int, candidates: Sequence[SeriesKey], threshold: float
) -> ElementEvidence:
    """Collect the evidence for element `z`: refit without it, look at its lines, try its rivals."""
    keys = tuple(k for k in fit.keys if k.z == z)
    without = fit_series(ingredients, [k for k in fit.keys if k.z != z], fit, rounds=1, iterations=4)
    loss = max(without.objective - fit.objective, 0.0)
    misfit = _misfit_at(ingredients, fit, keys)
    lines = tuple(line for key in keys for line in _lines(ingredients, fit, key))
    own = [line for line in lines if line.own > 0.5 and line.predicted > _VISIBLE * line.sigma]
    strongest = max(own, key=lambda line: line.observed / max(line.sigma, 1e-9), default=None)
    evidence = Evidence(
        significance=float(np.sqrt(loss / misfit)),
        deviance_loss=float(loss),
        threshold=threshold,
        local_misfit=misfit,
        lines=lines,
        strongest_own_line="" if strongest is None else f"{strongest.series} {strongest.group}",
        missing_lines=tuple(f"{line.series} {line.group}" for line in lines if _missing(line)),
    )
    rivals = _rivals(ingredients, fit, without, keys, candidates, loss)
    return ElementEvidence(z, keys, without, evidence, rivals)


def _misfit_at(ingredients: Ingredients, fit: Fit, keys: Sequence[SeriesKey]) -> float:
    misfit = local_misfit(fit, ingredients.counts)
    column = sum(fit.areas[k] * ingredients.columns.unit[ingredients.columns.index(k)] for k in keys)
    weight = np.asarray(column) ** 2 / fit.variance
    return float(np.sum(weight * misfit) / max(float(np.sum(weight)), 1e-300))


def _lines(ingredients: Ingredients, fit: Fit, key: SeriesKey) -> list[LineEvidence]:
    """Predicted and observed counts of each line group of a series."""
    residual = ingredients.counts - fit.model
    series = fit.part("series")
    found = []
    area = fit.coefficient("series", str(key))
    for group in ingredients.groups(key):
        column = group.column
        information = float(np.sum(column**2 / fit.variance))
        deviates = fit.coefficient("share", str(key), group.name)
        in_model = area * group.share * (1.0 + deviates)
        observed = in_model + float(np.sum(column * residual / fit.variance)) / max(information, 1e-300)
        around = float(np.sum(column * series))
        mine = float(np.sum(column * column)) * in_model
        found.append(
            LineEvidence(key.series, group.name, group.energy_kev, area * group.share, observed,
                         float(information**-0.5), float(np.clip(mine / max(around, 1e-300), 0.0, 1.0)))
        )  # fmt: skip
    return found


def _missing(line: LineEvidence) -> bool:
    """Whether a line that must show itself does not."""
    tolerance = 0.3 * line.predicted
    short = line.predicted - line.observed
    return (
        line.predicted > _VISIBLE * line.sigma
        and line.observed < 0.5 * line.predicted
        and short > _VISIBLE * float(np.hypot(line.sigma, tolerance if line.predicted > 0 else 0.0))
    )


def _rivals(
    ingredients: Ingredients, fit: Fit, without: Fit, keys: Sequence[SeriesKey], candidates: Sequence[SeriesKey],
    loss: float,
) -> tuple[Rival, ...]:  # fmt: skip
    """Other explanations of the counts that `keys` explain, the best first."""
    columns = ingredients.columns
    pool = [k for k in candidates if k.z != keys[0].z and k not in without.areas]
    unit = columns.unit[[columns.index(k) for k in pool]]
    variance = np.maximum(without.variance, fit.variance)
    z = score(without, unit, ingredients.counts, variance).z if pool else np.empty(0)
    mine = columns.unit[[columns.index(k) for k in keys]]
    found = []
    for i in np.argsort(-z)[:3]:
        if z[i] <= 0 or z[i] ** 2 < 0.5 * loss or not _share_channels(unit[i], mine, variance):
            continue
        trial = fit_series(ingredients, (*without.keys, pool[i]), without, rounds=1, iterations=3)
        found.append(Rival(str(pool[i]), "element", float(trial.objective - fit.objective)))
    return tuple(sorted(found, key=lambda r: r.deviance_worse))


def _share_channels(column: NDArray[np.float64], mine: NDArray[np.float64], variance: NDArray[np.float64]) -> bool:
    cosines = (mine / variance) @ column / np.sqrt(
        np.einsum("ij,ij->i", mine / variance, mine) * float(np.sum(column**2 / variance))
    )
    return bool(np.max(cosines) > 0.3)


def free_peak_rival(ingredients: Ingredients, fit: Fit, without: Fit, keys: Sequence[SeriesKey]) -> Rival | None:
    """Try one peak of free position in place of the element's strongest line group.

    Returns
    -------
    Rival or None
        None if no such peak comes near.
    """
    key = max(keys, key=lambda k: fit.areas[k])
    group = max(ingredients.groups(key), key=lambda g: g.share)
    grouping, resolution = ingredients.columns.grouping, ingredients.columns.shape.resolution
    width = float(resolution.fwhm_kev(group.energy_kev))
    energies = group.energy_kev + width * np.linspace(-0.8, 0.8, 17)
    trials = [(e, w) for e in energies for w in (1.0, 1.5)]
    drawn = np.array([draw_peak(e, w, resolution, grouping) for e, w in trials])
    z = score(without, drawn, ingredients.counts, np.maximum(without.variance, fit.variance)).z
    best = int(np.argmax(z))
    loss = without.objective - fit.objective
    return Rival(f"an unassigned peak at {trials[best][0]:.3f} keV", "peak", float(loss - max(z[best], 0.0) ** 2))
