"""Peaks that are no line of the sample: named and measured."""

from __future__ import annotations

import itertools

import numpy as np

from xrfid.fit.model import Fit, Ingredients
from xrfid.identify.result import Artefact, ArtefactKind, Unexplained
from xrfid.response.detector import escape_fraction, escape_lines
from xrfid.response.series import SeriesKey

_WORTH_NAMING = 3.0
"""An artefact is listed if it stands this many sigma above what is counted in its place."""
_CERTAIN_PEAK = 6.0
_DIFFRACTION_ADVICE = (
    "turn or shift the sample, or change the voltage or filter: a diffraction peak moves or changes, a line stays"
)


def artefacts(ingredients: Ingredients, fit: Fit, live_time_s: float | None) -> tuple[Artefact, ...]:
    """Escape, sum and scattered peaks and argon that the model holds, by energy."""
    found = [*_escapes(ingredients, fit), *_sums(ingredients, fit, live_time_s), *_scatter(ingredients, fit)]
    argon = SeriesKey(18, "K")
    path = ingredients.columns.prediction.instrument.path
    if argon in fit.areas and path.atmosphere == "air" and fit.areas[argon] > _WORTH_NAMING * fit.sigmas[argon]:
        found.append(Artefact(ArtefactKind.AIR, 2.957, fit.areas[argon], fit.sigmas[argon], "argon of the air path"))
    return tuple(sorted(found, key=lambda a: a.energy_kev))


def _noise(ingredients: Ingredients, fit: Fit, energy_kev: float) -> float:
    """Standard deviation of the counts under a peak at this energy."""
    grouping = ingredients.columns.grouping
    width = float(ingredients.columns.shape.resolution.fwhm_kev(max(energy_kev, 0.3)))
    inside = np.abs(grouping.centres_kev - energy_kev) < 0.6 * width
    return float(np.sqrt(max(float(fit.model[inside].sum()), 1.0)))


def _strong_groups(ingredients: Ingredients, fit: Fit) -> list[tuple[SeriesKey, str, float, float]]:
    """(series, group, keV, counts) of the strong line groups, strongest first."""
    found = [
        (key, g.name, g.energy_kev, fit.areas[key] * g.share)
        for key in fit.keys if fit.areas[key] > 300.0
        for g in ingredients.groups(key)
    ]  # fmt: skip
    return sorted(found, key=lambda g: -g[3])[:8]


def _escapes(ingredients: Ingredients, fit: Fit) -> list[Artefact]:
    material = ingredients.columns.prediction.instrument.detector.material
    scale = 1.0 + fit.coefficient("escape")
    found = []
    for key, group, energy, counts in _strong_groups(ingredients, fit):
        for line in escape_lines(material):
            area = counts * scale * float(escape_fraction(material, line, np.array([energy]))[0])
            at = energy - line.loss_kev
            if at > ingredients.columns.grouping.edges_kev[0] and area > _WORTH_NAMING * _noise(ingredients, fit, at):
                found.append(Artefact(ArtefactKind.ESCAPE, at, area, 0.2 * area, f"{key} {group}"))
    return found


def _sums(ingredients: Ingredients, fit: Fit, live_time_s: float | None) -> list[Artefact]:
    """Sum peaks of the strong groups, from the pulse-pair time found."""
    pair = fit.coefficient("sum")
    if pair <= 0:
        return []
    total = float(ingredients.counts.sum())
    unit = pair * 1e-9 / live_time_s if live_time_s else pair / max(total, 1.0)
    spread = float(np.sqrt(max(fit.solution.covariance[(i := fit.labels.index(("sum",))), i], 0.0))) / pair
    found = []
    groups = _strong_groups(ingredients, fit)
    for (i, a), (j, b) in itertools.combinations_with_replacement(enumerate(groups), 2):
        area = unit * a[3] * b[3] * (1.0 if i == j else 2.0)
        at = a[2] + b[2]
        if at < ingredients.columns.grouping.edges_kev[-1] and area > _WORTH_NAMING * _noise(ingredients, fit, at):
            found.append(Artefact(ArtefactKind.SUM, at, area, spread * area, f"{a[0]} {a[1]} + {b[0]} {b[1]}"))
    return found


def _scatter(ingredients: Ingredients, fit: Fit) -> list[Artefact]:
    """Scattered source lines, the parts of one peak taken together."""
    sums: dict[tuple[str, str], list[float]] = {}
    for i, column in enumerate(ingredients.scatter):
        area = fit.coefficient("scatter", str(i))
        at = fit.labels.index(("scatter", str(i)))
        entry = sums.setdefault((column.kind, column.of), [column.energy_kev, 0.0, 0.0])
        entry[1] += area
        entry[2] += float(fit.solution.covariance[at, at])
    return [
        Artefact(ArtefactKind(kind), energy, area, float(np.sqrt(max(variance, area))), f"{of} lines of the source")
        for (kind, of), (energy, area, variance) in sums.items()
        if area > _WORTH_NAMING * float(np.sqrt(max(variance, 1.0)))
    ]


def loose_peaks(ingredients: Ingredients, fit: Fit) -> tuple[tuple[Artefact, ...], tuple[Unexplained, ...]]:
    """Peaks on no line: those that look like diffraction, and those that nothing explains."""
    diffraction, unexplained = [], []
    series = fit.part("series")
    for peak in ingredients.peaks:
        i = fit.labels.index(peak.label)
        area = float(fit.solution.coefficients[i])
        sigma = float(np.sqrt(max(fit.solution.covariance[i, i], 0.0)))
        if area < 3.0 * max(sigma, 1e-9):
            continue
        weight = peak.column / peak.column.sum()
        alone = area * float(np.sum(weight * peak.column)) > float(np.sum(weight * series))
        if alone and area > _CERTAIN_PEAK * sigma and 1.5 < peak.energy_kev < 25.0:
            diffraction.append(
                Artefact(ArtefactKind.DIFFRACTION, peak.energy_kev, area, sigma, "a peak on no line of any element",
                         _DIFFRACTION_ADVICE)
            )  # fmt: skip
        else:
            unexplained.append(Unexplained(peak.energy_kev, area, sigma))
    return tuple(diffraction), tuple(unexplained)
