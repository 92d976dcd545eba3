"""What if it is not there, what if this one is: the fit once more with one element less or more."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from xrfid.atoms.elements import ATOMIC_NUMBER, symbol
from xrfid.errors import InputError
from xrfid.fit.model import Fit, fit_series
from xrfid.fit.threads import one_blas_thread
from xrfid.identify.evidence import gather
from xrfid.identify.result import Finding, Identification, SeriesResult, Verdict
from xrfid.identify.verdict import decide
from xrfid.identify.work import Work
from xrfid.report.wording import grouped
from xrfid.response.series import SeriesKey

_PLAIN_SIGMAS = 5.0
_TOLD_SIGMAS = 2.0
"""Another series is named if its area changes by more than so many of its standard uncertainties."""


@dataclass(frozen=True, slots=True)
class Change:
    """How the area of another series changes in the trial, counts."""

    series: str
    before: float
    after: float
    sigma: float


@dataclass(frozen=True, eq=False)
class Trial:
    """One trial: the fit redone without an element that was in, or with one that was not.

    Attributes
    ----------
    element : str
    added : bool
        True: the element was put in; False: it was taken out.
    deviance_change : float
        Deviance (constraints included) of the trial minus that of the fit as it stands.
    significance : float
        Signed root of the deviance the element is worth over the local misfit; that of the finding.
    finding : Finding
        What would be said of the element if it were in the model.
    changes : tuple of Change
        Who takes over the counts, or gives them; the largest first.
    model : ndarray, shape (n_channels,)
        Counts that the trial expects.
    shown : Identification
        The identification with the element in it, to draw its proof from.
    """

    element: str
    added: bool
    deviance_change: float
    significance: float
    finding: Finding
    changes: tuple[Change, ...]
    model: NDArray[np.float64]
    shown: Identification


def try_element(work: Work, identification: Identification, element: str) -> Trial:
    """Take an element out of the fit if it is in, put it in if it is not, and refit at once.

    Raises
    ------
    InputError
        If the element has no line in the range that was fitted, or is the tube's own target.
    """
    if element not in ATOMIC_NUMBER:
        raise InputError("what if", f'"{element}" is no element symbol', "choose one from the list")
    with one_blas_thread():
        if any(k.element == element for k in work.fit.keys):
            return _taken_out(work, identification, element)
        return _put_in(work, identification, element)


def elements_to_try(work: Work) -> tuple[str, ...]:
    """Return the elements that are not in the fit but could be, by symbol."""
    inside = {k.element for k in work.fit.keys}
    return tuple(sorted({k.element for k in _offered(work)} - inside))


def _offered(work: Work) -> list[SeriesKey]:
    columns = work.ingredients.columns
    return [k for k in work.candidates if k in columns]


def _taken_out(work: Work, identification: Identification, element: str) -> Trial:
    """Refit without the element, as its verdict did."""
    kept = [k for k in work.fit.keys if k.element != element]
    fit = fit_series(work.ingredients, kept, work.fit, rounds=1, resize=False)
    try:
        finding = identification[element]
    except KeyError:  # in the fit, but too weak to be among the findings
        finding = _judged(work, work.fit, element)
    model = _spread(work, fit)
    shown = _with_finding(work, work.fit, identification, finding, without=model)
    change = fit.objective - work.fit.objective
    return Trial(element, False, change, finding.evidence.significance, finding, _changes(work.fit, fit), model, shown)


def _put_in(work: Work, identification: Identification, element: str) -> Trial:
    """Refit with the element, and judge it as a search that had chosen it would."""
    keys = [k for k in _offered(work) if k.element == element]
    if element == work.prediction.source.anode and not keys:
        raise InputError("what if", f"{element} is the tube's own target: its scattered lines are in the model already",
                         "the sample's own cannot be told from them here")  # fmt: skip
    if not keys:
        raise InputError("what if", f"{element} has no line in the range that was fitted", "choose another")
    fit = fit_series(work.ingredients, (*work.fit.keys, *keys), work.fit, rounds=1, resize=False)
    finding = _judged(work, fit, element)
    shown = _with_finding(work, fit, identification, finding, without=_spread(work, work.fit))
    change = fit.objective - work.fit.objective
    return Trial(element, True, change, finding.evidence.significance, finding, _changes(work.fit, fit),
                 _spread(work, fit), shown)  # fmt: skip


def _judged(work: Work, fit: Fit, element: str) -> Finding:
    """What the rules would say of an element of a fit."""
    found = gather(work.ingredients, fit, ATOMIC_NUMBER[element], work.candidates, work.threshold)
    verdict, reason = decide(found)
    misfit = float(np.sqrt(found.evidence.local_misfit))
    nan = float("nan")
    series = tuple(
        SeriesResult(k.series, fit.areas[k], fit.sigmas[k] * misfit, nan, nan, fit.areas[k] + 1.645 * fit.sigmas[k])
        for k in found.keys
    )
    return Finding(symbol(found.z), verdict, reason, series, found.evidence, found.rivals)


def _with_finding(
    work: Work, fit: Fit, identification: Identification, finding: Finding, without: NDArray[np.float64]
) -> Identification:
    """Return the identification with the element and its curves in it, so that its proof can be drawn."""
    element, curves = finding.element, identification.curves
    own = [k for k in fit.keys if k.element == element]
    columns = work.ingredients.columns
    drawn = {str(k): columns.grouping.spread(fit.areas[k] * columns.unit[columns.index(k)], curves.counts.size)
             for k in own}  # fmt: skip
    known = {x[0] for x in curves.lines}
    lines = tuple((str(k), *line) for k in own if str(k) not in known for line in columns.line_list(k))
    changed = replace(
        curves, model=_spread(work, fit), parts={**curves.parts, **drawn},
        without={**curves.without, element: without}, lines=(*curves.lines, *lines),
    )  # fmt: skip
    others = tuple(f for f in identification.findings if f.element != element)
    return replace(identification, findings=(*others, finding), curves=changed)


def _changes(before: Fit, after: Fit) -> tuple[Change, ...]:
    common = [k for k in after.keys if k in before.areas]
    found = [Change(str(k), before.areas[k], after.areas[k], before.sigmas[k]) for k in common]
    told = [c for c in found if abs(c.after - c.before) > _TOLD_SIGMAS * max(c.sigma, 1.0)]
    return tuple(sorted(told, key=lambda c: -abs(c.after - c.before) / max(c.sigma, 1.0)))[:4]


def _spread(work: Work, fit: Fit) -> NDArray[np.float64]:
    return np.asarray(work.ingredients.columns.grouping.spread(fit.model, work.spectrum.n_channels))


def said(trial: Trial) -> str:
    """Return the answer in one sentence or two."""
    name, sigmas = trial.element, f"{abs(trial.significance):.1f} sigma"
    change = f"{'+' if trial.deviance_change > 0 else '−'}{grouped(abs(trial.deviance_change), 1)}"
    if trial.added:
        fall = f"With {name} in the model the deviance changes by {change} ({sigmas})"
        return f"{fall}: the counts do not need it." if trial.finding.verdict is Verdict.NOT_DETECTED else f"{fall}."
    worse = f"Without {name} the deviance changes by {change} ({sigmas})"
    return f"{worse}: nothing else makes up for it." if abs(trial.significance) >= _PLAIN_SIGMAS else f"{worse}."
