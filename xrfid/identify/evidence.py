"""What a verdict rests on: line by line, what was expected, what the counts show, and who else could have made it."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from xrfid.atoms.lines import GROUP_INDEX, GROUPS
from xrfid.fit.model import Fit, FreePeak, Ingredients, fit_series
from xrfid.identify.result import Evidence, LineEvidence, Rival
from xrfid.identify.select import PEAK_WIDTHS, contradicted, draw_peak, local_misfit, score
from xrfid.identify.settings import Settings
from xrfid.response.series import SeriesKey

_VISIBLE = 3.5
"""A line group predicted this many sigma strong must show itself."""
RIVAL_MARGIN = 6.0
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
    without = fit_series(ingredients, [k for k in fit.keys if k.z != z], fit, rounds=1, iterations=4, resize=False)
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
    rivals = _rivals(ingredients, fit, without, keys, candidates)
    return ElementEvidence(z, keys, without, evidence, rivals)


def _misfit_at(ingredients: Ingredients, fit: Fit, keys: Sequence[SeriesKey]) -> float:
    misfit = local_misfit(fit, ingredients.counts)
    column = sum(fit.areas[k] * ingredients.columns.unit[ingredients.columns.index(k)] for k in keys)
    weight = np.asarray(column) ** 2 / fit.variance
    total = float(np.sum(weight))
    return float(np.sum(weight * misfit) / total) if total > 0 else 1.0


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
        mine = float(np.sum(column * column)) * max(area * group.share, in_model)
        others = max(float(np.sum(column * series)) - float(np.sum(column * column)) * area * group.share, 0.0)
        found.append(
            LineEvidence(key.series, group.name, group.energy_kev, area * group.share, observed,
                         float(information**-0.5), mine / max(mine + others, 1e-300))
        )  # fmt: skip
    return found


def _missing(line: LineEvidence) -> bool:
    """Whether a line that must show itself does not."""
    known_to = max(GROUPS[GROUP_INDEX[line.group]].tolerance, 0.15)
    short = line.predicted - line.observed
    return (
        line.own > 0.5
        and line.observed < 0.5 * line.predicted
        and short > _VISIBLE * float(np.hypot(line.sigma, known_to * line.predicted))
    )


def _rivals(
    ingredients: Ingredients, fit: Fit, without: Fit, keys: Sequence[SeriesKey], candidates: Sequence[SeriesKey],
) -> tuple[Rival, ...]:  # fmt: skip
    """Other explanations of the counts that `keys` explain, the best first."""
    columns = ingredients.columns
    rare = {k for k in candidates if Settings.handicap(k) > 1.0}
    pool = [k for k in candidates if k in columns and k.z != keys[0].z and k not in without.areas and k not in rare]
    if not pool:
        return ()
    unit = columns.unit[[columns.index(k) for k in pool]]
    mine = columns.unit[[columns.index(k) for k in keys]]
    variance = np.maximum(without.variance, ingredients.counts)
    scored = score(without, unit, ingredients.counts, variance)
    z = scored.z
    own = float(np.max(np.maximum(score(without, mine, ingredients.counts, variance).z, 0.0)) ** 2)
    found = []
    for i in np.argsort(-z)[:3]:
        if z[i] <= 0 or z[i] ** 2 < 0.5 * own or not _share_channels(unit[i], mine, variance):
            continue
        if contradicted(ingredients, without, pool[i], float(scored.amplitude[i])):
            continue
        trial = fit_series(ingredients, (*without.keys, pool[i]), without, rounds=1, iterations=3, resize=False)
        found.append(Rival(str(pool[i]), "element", float(trial.objective - fit.objective)))
    return tuple(sorted(found, key=lambda r: r.deviance_worse))


def _share_channels(column: NDArray[np.float64], mine: NDArray[np.float64], variance: NDArray[np.float64]) -> bool:
    cosines = (
        (mine / variance)
        @ column
        / np.sqrt(np.einsum("ij,ij->i", mine / variance, mine) * float(np.sum(column**2 / variance)))
    )
    return bool(np.max(cosines) > 0.3)


def free_peak_instead(ingredients: Ingredients, without: Fit, keys: Sequence[SeriesKey]) -> tuple[FreePeak, float]:
    """One peak of free position and width in place of the element's strongest line group.

    Returns
    -------
    peak : FreePeak
    gain : float
        Deviance that the peak gains over the fit without the element.
    """
    columns = ingredients.columns
    grouping, resolution = columns.grouping, columns.shape.resolution
    best: tuple[float, FreePeak] | None = None
    for key in keys:
        group = max(ingredients.groups(key), key=lambda g: g.share)
        width = float(resolution.fwhm_kev(group.energy_kev))
        trials = [(float(e), w) for e in group.energy_kev + width * np.linspace(-1.0, 1.0, 21) for w in PEAK_WIDTHS]
        drawn = np.array([draw_peak(e, w, resolution, grouping) for e, w in trials])
        z = score(without, drawn, ingredients.counts, np.maximum(without.variance, ingredients.counts)).z
        i = int(np.argmax(z))
        if best is None or z[i] > best[0]:
            best = (float(z[i]), FreePeak(*trials[i], drawn[i]))
    assert best is not None
    return best[1], max(best[0], 0.0) ** 2
