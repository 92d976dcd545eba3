"""The pieces of HTML that the review shows; everything that came from a file or a person is escaped."""

from __future__ import annotations

from functools import lru_cache
from importlib.resources import files
from typing import TYPE_CHECKING, Any

from xrfid.identify.result import Finding, Identification
from xrfid.report import style, wording
from xrfid.report.proof import proof_panels
from xrfid.report.svg import proof_key, proof_svg, spectrum_key
from xrfid.review.session import Case
from xrfid.review.whatif import Trial, said

if TYPE_CHECKING:
    from jinja2 import Environment

_THIN = wording.GROUP_SPACE
_TRIAL_KEY = (
    '<li><svg viewBox="0 0 30 14" width="30" height="14" aria-hidden="true">'
    f'<path d="M2 7h26" {style.WITHOUT.svg()}/></svg> model of a what-if</li>'
)
_DECIDED = {"accepted": "✓ accepted", "questioned": "? questioned"}


@lru_cache
def asset(name: str) -> str:
    """Return a file of the templates."""
    return files("xrfid.review").joinpath("templates", name).read_text("utf-8")


@lru_cache
def _environment() -> Environment:
    from jinja2 import Environment, PackageLoader, StrictUndefined

    made = Environment(
        loader=PackageLoader("xrfid.review"), autoescape=True, undefined=StrictUndefined, trim_blocks=True,
        lstrip_blocks=True,
    )  # fmt: skip
    made.filters["with_sigma"] = lambda x: wording.with_sigma(x.area, x.sigma, _THIN)
    made.filters["significance"] = wording.significance
    made.filters["line_name"] = wording.line_name
    made.filters["grouped"] = lambda value: wording.grouped(value, 0, _THIN)
    made.filters["grouped1"] = lambda value: wording.grouped(value, 1, _THIN)
    made.globals["rivals_line"] = wording.rivals_line
    return made


def colours() -> str:
    """Return the colours of the house as custom properties of a style sheet."""
    names = ("INK", "PAPER", "ACCENT", "SOFT", "FAINT", "WASH", "ACCENT_WASH")
    said_ = "".join(f"--{n.lower().replace('_', '-')}: {getattr(style, n)}; " for n in names)
    return f":root {{ {said_}}}"


def head(case: Case | None) -> str:
    """Return name, counts and scale of the spectrum in work."""
    result = None if case is None else case.identification
    return _environment().get_template("head.html.j2").render(
        case=case, result=result,
        source_line=wording.source_line(result, _THIN) if result else "",
        scale_line=wording.scale_line(result) if result else "",
        key=spectrum_key() + _TRIAL_KEY,
    )  # fmt: skip


def proof(case: Case, element: str, trial: Trial | None) -> str:
    """Return what speaks for an element: verdict, reason, panels, and the answer to a what-if."""
    result, finding = _shown(case, element, trial)
    panels = [proof_svg(p) for p in proof_panels(result, element)] if finding is not None else []
    limits = [x for x in (case.identification.limits if case.identification else ()) if x.element == element]
    return _environment().get_template("proof.html.j2").render(
        element=element, finding=finding, trial=trial, answer=said(trial) if trial else "",
        panels=panels, key=proof_key(), limits=limits, decision=case.decisions.get(element),
        history=[d for d in case.journal.history if d.element == element],
    )  # fmt: skip


def _shown(case: Case, element: str, trial: Trial | None) -> tuple[Identification, Finding | None]:
    assert case.identification is not None
    result = case.identification if trial is None else trial.shown
    return result, next((f for f in result.findings if f.element == element), None)


def choices(case: Case, looked_at: str = "") -> dict[str, str]:
    """Return the list of findings and of what is looked at besides: what each line says, and its element."""
    if case.identification is None:
        return {}
    decided = case.decisions
    lines: dict[str, str] = {}
    for f in case.identification.findings:
        mark = f"  {_DECIDED[decided[f.element].choice]}" if f.element in decided else ""
        lines[f"{f.element}: {f.verdict}, {wording.significance(f.evidence.significance)} σ{mark}"] = f.element
    for element, d in decided.items():
        if element not in lines.values():
            lines[f"{element}: no finding  {_DECIDED[d.choice]}"] = element
    if looked_at and looked_at not in lines.values():
        lines[f"{looked_at}: no finding"] = looked_at
    return lines


def status(text: str, kind: str = "note") -> str:
    """Return one line for the status, read out by screen readers."""
    return _environment().from_string(
        '<p class="status {{ kind }}" role="status" aria-live="polite">{{ text }}</p>'
    ).render(text=text, kind=kind)  # fmt: skip


def page_variables(scan: Any) -> dict[str, Any]:
    """Return what the page's template is filled with."""
    return {
        "colours": colours(),
        "css": asset("review.css"),
        "script": asset("review.js"),
        "has_scan": scan is not None,
    }
