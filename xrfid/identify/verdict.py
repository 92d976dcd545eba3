"""Who decides that arsenic is there: from the evidence to one of six verdicts, with its reason in plain words."""

from __future__ import annotations

from xrfid.atoms.elements import NOBLE_GASES, UNSTABLE, symbol
from xrfid.atoms.lines import line_name
from xrfid.identify.evidence import RIVAL_MARGIN, ElementEvidence
from xrfid.identify.limits import K_95
from xrfid.identify.result import Evidence, Rival, Verdict
from xrfid.identify.settings import RARE_HANDICAP


def decide(found: ElementEvidence) -> tuple[Verdict, str]:
    """Return the verdict on one element and the sentence that gives its reason."""
    name, evidence = symbol(found.z), found.evidence
    rare = name in UNSTABLE or name in NOBLE_GASES
    asked = evidence.threshold * (RARE_HANDICAP if rare else 1.0)
    close = [r for r in found.rivals if r.deviance_worse < RIVAL_MARGIN]
    if evidence.significance < K_95:
        return Verdict.NOT_DETECTED, f"The counts do not need {name}: {evidence.significance:.1f} sigma."
    if evidence.significance < asked:
        return Verdict.TENTATIVE, _weak(name, evidence, asked, rare)
    if close:
        return Verdict.UNRESOLVED, _rivalled(name, evidence, close)
    if evidence.missing_lines and _much_is_missing(evidence):
        return Verdict.TENTATIVE, (
            f"{name} would explain counts worth {evidence.significance:.1f} sigma, but its "
            f"{_listed(tuple(line_name(m.split()[1]) for m in evidence.missing_lines))} should be visible and is not."
        )
    return Verdict.IDENTIFIED, _firm(name, evidence, rare)


_TOO_MUCH = 0.35
_OVERWHELMING = 60.0
"""Above this significance a line or two may be drowned in a neighbour's tolerances."""


def _much_is_missing(evidence: Evidence) -> bool:
    """Whether the lines that do not show carry a good part of the element, or nothing else is its own."""
    if evidence.significance < _OVERWHELMING:
        return True
    predicted = sum(line.predicted for line in evidence.lines)
    missing = sum(x.predicted for x in evidence.lines if f"{x.series} {x.group}" in evidence.missing_lines)
    return missing > _TOO_MUCH * predicted or not evidence.strongest_own_line


def _weak(name: str, evidence: Evidence, asked: float, rare: bool) -> str:
    extra = " (more than usual, because hardly any sample holds it)" if rare else ""
    return (
        f"Counts where {name} has its lines stand {evidence.significance:.1f} sigma clear; "
        f"{asked:.1f} sigma are asked for before it is named{extra}."
    )


def _rivalled(name: str, evidence: Evidence, close: list[Rival]) -> str:
    others = _listed(tuple(r.explanation for r in close))
    return (
        f"Something is there ({evidence.significance:.1f} sigma), but {others} would explain the same counts "
        f"about as well as {name}."
    )


def _firm(name: str, evidence: Evidence, rare: bool) -> str:
    seen = [line for line in evidence.lines if line.observed > 3.0 * line.sigma and line.own > 0.2]
    lines = _listed(
        tuple(f"{line_name(x.group)} ({x.energy_kev:.2f} keV)" for x in sorted(seen, key=lambda x: -x.observed)[:3])
    )
    where = f"at {lines}" if lines else "under its neighbours' lines"
    text = (
        f"Without {name} the fit loses {evidence.significance:.1f} sigma {where}; nothing else explains these counts."
    )
    return text + (" It hardly ever occurs: check the sample's history." if rare else "")


def _listed(names: tuple[str, ...]) -> str:
    return names[0] if len(names) == 1 else ", ".join(names[:-1]) + " and " + names[-1] if names else ""
