"""From the finished search to the result: findings, limits, artefacts, curves, cautions."""

from __future__ import annotations

import platform
from dataclasses import replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from xrfid.atoms.elements import symbol
from xrfid.atoms.lines import line_name
from xrfid.fit.model import Fit
from xrfid.identify.artefacts import artefacts, loose_peaks
from xrfid.identify.cautions import assumptions, cautions
from xrfid.identify.evidence import ElementEvidence, gather
from xrfid.identify.limits import K_95, CharacteristicLimits, characteristic_limits, limits_in_fit
from xrfid.identify.result import (
    Curves,
    Evidence,
    Finding,
    Identification,
    Limit,
    SeriesResult,
    Source,
    Verdict,
)
from xrfid.identify.select import local_misfit
from xrfid.identify.verdict import decide
from xrfid.identify.work import Work
from xrfid.prepare.calibration import Calibration
from xrfid.response.sample import LIGHT_MATRIX, composition_of
from xrfid.response.series import SeriesKey

AREA_PRECISION = 0.005
"""Relative uncertainty of any area: where a line's tail and shelf end is a matter of the model."""


def assemble(work: Work) -> Identification:
    """Turn a finished search into the result."""
    fit, drawn = work.fit, work.ingredients
    elements = sorted({k.z for k in fit.keys}, key=lambda z: -max(_strength(fit, k) for k in fit.keys if k.z == z))
    evidence = [gather(drawn, fit, z, work.candidates, work.threshold) for z in elements]
    findings = [_finding(work, e) for e in evidence]
    shown = [f for f in findings if f.verdict is not Verdict.NOT_DETECTED]
    instrument_own = _anode_finding(work)
    diffraction, unexplained = loose_peaks(drawn, fit)
    everything = tuple(shown) + ((instrument_own,) if instrument_own else ())
    return Identification(
        source=_source(work),
        calibration=_calibration(work),
        findings=everything,
        limits=_limits(work, {f.element for f in everything}),
        artefacts=tuple(
            sorted((*artefacts(drawn, fit, work.spectrum.live_time_s), *diffraction), key=lambda a: a.energy_kev)
        ),
        unexplained=unexplained,
        assumptions=assumptions(work),
        cautions=cautions(work, everything),
        provenance=provenance(),
        curves=_curves(work, evidence),
        reduced_deviance=fit.solution.deviance / max(drawn.counts.size - int(fit.solution.free.sum()), 1),
        false_identification_level=work.settings.false_identification_level,
        composition=_named(work.composition.fractions, work.composition.light),
    )


def _strength(fit: Fit, key: SeriesKey) -> float:
    return fit.areas[key] / max(fit.sigmas[key], 1e-300)


def _finding(work: Work, found: ElementEvidence) -> Finding:
    name = symbol(found.z)
    verdict, reason = decide(found)
    if name == work.prediction.source.anode and verdict is Verdict.IDENTIFIED:
        reason = (
            f"The {name} lines are {work.anode.excess:.0f} times larger than the tube's own scattered lines can be: "
            f"the sample itself holds {name}."
        )
    if name in work.instrument.stray.elements:
        verdict = Verdict.INSTRUMENT
        reason = f"{name} lines come from the instrument itself, as its file says; the sample may hold {name} as well."
    elif name == "Ar" and work.instrument.path.atmosphere == "air" and verdict is not Verdict.NOT_DETECTED:
        verdict, reason = Verdict.INSTRUMENT, "Argon of the air between sample and detector."
    return Finding(name, verdict, reason, _series(work, found), found.evidence, found.rivals)


def _series(work: Work, found: ElementEvidence) -> tuple[SeriesResult, ...]:
    """Areas with limits; those of each series follow from the fit without the element."""
    unit = work.ingredients.columns.unit[[work.ingredients.columns.index(k) for k in found.keys]]
    own = np.sum([work.fit.areas[k] * u for k, u in zip(found.keys, unit, strict=True)], axis=0)
    names = [str(k) for k in found.keys]
    limits = limits_in_fit(work.fit, names, unit, own, local_misfit(work.fit, work.ingredients.counts))
    misfit = float(np.sqrt(found.evidence.local_misfit))
    results = []
    for i, k in enumerate(found.keys):
        area = work.fit.areas[k]
        sigma = float(np.hypot(work.fit.sigmas[k] * misfit, AREA_PRECISION * area))
        threshold, limit = float(limits.decision_threshold[i]), float(limits.detection_limit[i])
        results.append(SeriesResult(k.series, area, sigma, threshold, limit, max(area, 0.0) + K_95 * sigma))
    return tuple(results)


def _anode_finding(work: Work) -> Finding | None:
    """The tube's own element: its scattered lines are the instrument's."""
    anode = work.prediction.source.anode
    if anode is None:
        return None
    series: dict[str, list[float]] = {}
    for i, column in enumerate(work.ingredients.scatter):
        if column.kind == "coherent scatter":
            at = work.fit.labels.index(("scatter", str(i)))
            variance = float(work.fit.solution.covariance[at, at])
            entry = series.setdefault(column.of.split()[-1], [0.0, 0.0])
            entry[0] += float(work.fit.solution.coefficients[at])
            entry[1] += variance
    results = tuple(SeriesResult(s, a, float(np.sqrt(v)), float(K_95 * np.sqrt(v)), float(3.29 * np.sqrt(v) + 2.71),
                                 float(a + K_95 * np.sqrt(v))) for s, (a, v) in series.items())  # fmt: skip
    significance = max((r.area / max(r.sigma, 1e-9) for r in results), default=0.0)
    if any(k.element == anode for k in work.fit.keys):
        return None
    reason = (
        f"{anode} is the tube's own target: its scattered lines are in every spectrum; the sample may hold {anode} too."
    )
    return Finding(anode, Verdict.INSTRUMENT, reason, results,
                   Evidence(significance, significance**2, work.threshold, 1.0))  # fmt: skip


def _limits(work: Work, named: set[str]) -> tuple[Limit, ...]:
    """What could have been missed, for every series in reach of elements that are not among the findings."""
    columns = work.ingredients.columns
    keys = [k for k in columns.keys if k in work.candidates and k.element not in named and k not in work.fit.areas]
    if not keys:
        return ()
    unit = columns.unit[[columns.index(k) for k in keys]]
    variance = work.fit.variance * local_misfit(work.fit, work.ingredients.counts)
    found = characteristic_limits(work.fit, unit, work.ingredients.counts, variance)
    pure = _counts_if_pure(work, keys)
    return tuple(_limit(k, i, found, pure[i]) for i, k in enumerate(keys))


def _limit(key: SeriesKey, i: int, found: CharacteristicLimits, pure: float) -> Limit:
    limit = float(found.detection_limit[i])
    common = (float(found.decision_threshold[i]), limit, float(found.upper_limit[i]))
    if pure < limit:
        reason = "even a sample made of it would stay below the detection limit here"
        return Limit(key.element, key.series, Verdict.OUT_OF_REACH, *common, reason)
    return Limit(key.element, key.series, Verdict.NOT_DETECTED, *common)


def _counts_if_pure(work: Work, keys: list[SeriesKey]) -> NDArray[np.float64]:
    """Counts each series would have if the whole sample were its element, in the present matrix."""
    columns, fit = work.ingredients.columns, work.fit
    sample = [k for k in fit.keys if work.composition.fractions[k.z - 1] > 0 and fit.areas[k] > 0]
    made = sum(work.composition.fractions[k.z - 1] * columns.intensity[columns.index(k)] for k in sample)
    counted = sum(fit.areas[k] for k in sample)
    unit = counted / made if made > 0 else 0.0
    return np.array([unit * columns.intensity[columns.index(k)] for k in keys])


def _curves(work: Work, evidence: list[ElementEvidence]) -> Curves:
    """Model, parts and models without each element, channel by channel."""
    fit, drawn, n = work.fit, work.ingredients, work.spectrum.n_channels
    grouping = drawn.columns.grouping
    scale = work.setting.scale
    parts = {str(k): fit.areas[k] * drawn.columns.unit[drawn.columns.index(k)] for k in fit.keys}
    scattered: dict[str, NDArray[np.float64]] = {}
    for i, column in enumerate(drawn.scatter):
        name = f"{column.kind}"
        scattered[name] = scattered.get(name, 0.0) + fit.coefficient("scatter", str(i)) * column.column
    parts |= scattered
    parts["sum"] = fit.part("sum", "partial")
    parts["unassigned peaks"] = fit.part("peak")
    continuum = fit.part("continuum")
    parts["shape corrections"] = fit.model - continuum - sum(parts.values())
    lines = tuple((str(k), name, energy, share) for k in fit.keys for name, energy, share in drawn.columns.line_list(k))
    return Curves(
        energy_kev=scale.energy_kev(np.arange(n)),
        counts=work.spectrum.counts,
        model=grouping.spread(fit.model, n),
        continuum=grouping.spread(continuum, n),
        parts={name: grouping.spread(values, n) for name, values in parts.items() if np.any(values)},
        without={symbol(e.z): grouping.spread(e.without.model, n) for e in evidence},
        lines=lines,
        fitted=(int(grouping.starts[0]), int(grouping.starts[-1])),
    )


def _source(work: Work) -> Source:
    s = work.spectrum
    return Source(s.path, s.dataset, s.title, s.n_channels, s.total_counts, s.live_time_s, s.real_time_s)


def _calibration(work: Work) -> Calibration:
    """The calibration in force, with what the strong lines say of it."""
    residuals = _line_residuals(work)
    weight = np.array([sigma**-2 for *_, sigma in residuals])
    squares = np.array([residual**2 for _, _, residual, _ in residuals])
    rms = float(np.sqrt(np.sum(weight * squares) / np.sum(weight))) if residuals else work.calibration.rms_ev
    return replace(
        work.calibration,
        scale=work.setting.scale,
        resolution=work.setting.shape.resolution,
        rms_ev=rms,
        residuals=residuals,
    )


def _line_residuals(work: Work) -> tuple[tuple[str, float, float, float], ...]:
    """Name, energy (keV), residual and its standard uncertainty (eV) of the line groups that fix the scale."""
    fit, found = work.fit, []
    for key in fit.keys:
        for group in work.ingredients.groups(key) if fit.areas[key] > 30.0 else ():
            label = ("shift", str(key), group.name)
            if label not in fit.labels:
                continue
            i = fit.labels.index(label)
            sigma = float(np.sqrt(max(fit.solution.covariance[i, i], 0.0)))
            if 0.0 < sigma < 0.5 * group.shift_ev:  # the counts say more than the tolerance
                residual = float(fit.solution.coefficients[i])
                found.append((f"{key.element} {line_name(group.name)}", group.energy_kev, residual, sigma))
    return tuple(sorted(found, key=lambda r: r[1]))


def _named(fractions: NDArray[np.float64], light: float) -> dict[str, float]:
    """Mass fractions by symbol, the light matrix taken together."""
    own = fractions.copy()
    for z, w in LIGHT_MATRIX.items():
        own[z - 1] = max(own[z - 1] - light * w, 0.0)
    named = {k: v for k, v in composition_of(own).items() if v > 1e-6}
    return named | ({"light matrix": light} if light > 0 else {})


def provenance() -> dict[str, Any]:
    """Versions that the result depends on."""
    from importlib.metadata import PackageNotFoundError, version

    out: dict[str, Any] = {}
    for name in ("xrfid", "numpy", "scipy", "xraylib"):
        try:
            out[name] = version(name)
        except PackageNotFoundError:
            from xrfid import __version__

            out[name] = __version__ if name == "xrfid" else "unknown"
    return out | {"python": platform.python_version()}
