"""What was assumed, and what a reader must not forget, in words."""

from __future__ import annotations

from collections.abc import Sequence

from xrfid.identify.result import Finding, Verdict
from xrfid.identify.work import Work

HAZARDOUS = ("As", "Hg", "Pb", "Cd", "Tl", "U", "Th", "Be", "Br")
_STANDING = (
    "Elements lighter than sodium (carbon, nitrogen, oxygen, ...) are invisible to this measurement.",
    "A screening result is no clearance for handling, food contact, pressure parts or disposal.",
    "X-ray equipment is used only by licensed and trained people under the local rules.",
)


def assumptions(work: Work) -> tuple[str, ...]:
    """What the result takes for granted because nobody stated it."""
    said = [*work.spectrum.assumptions, *work.instrument.assumed]
    if not work.spectrum.live_time_s:
        said.append("no live time is stated: sum peaks are fitted without an expected size")
    said.append("the sample is taken as thick, flat and homogeneous where the lines of one series are weighed")
    if work.composition.light > 0:
        share = 100.0 * work.composition.light
        said.append(
            f"about {share:.0f} % by mass of the sample shows no lines and is taken as a light matrix, "
            "judged by the scattered radiation"
        )
    return tuple(said)


def cautions(work: Work, findings: Sequence[Finding]) -> tuple[str, ...]:
    """What a reader must not forget about this result."""
    said: list[str] = []
    seen = (Verdict.IDENTIFIED, Verdict.TENTATIVE, Verdict.UNRESOLVED)
    toxic = [f.element for f in findings if f.element in HAZARDOUS and f.verdict in seen]
    if toxic:
        said.append(
            f"{', '.join(toxic)} may be harmful: handle the object as contaminated until a competent person has "
            "judged it under the local rules."
        )
    spectrum = work.spectrum
    if spectrum.total_counts < 2000:
        said.append(f"Only {spectrum.total_counts:.0f} counts: weak elements cannot show.")
    if spectrum.live_time_s and spectrum.real_time_s and spectrum.real_time_s > 0:
        dead = 1.0 - spectrum.live_time_s / spectrum.real_time_s
        if dead > 0.3:
            said.append(f"Dead time {100 * dead:.0f} %: sum peaks and line shapes suffer; lower the current.")
    reduced = work.fit.solution.deviance / max(work.ingredients.counts.size, 1)
    if reduced > 3.0:
        said.append(f"The model leaves {reduced:.1f} times the expected scatter: weak findings deserve a second look.")
    return (*said, *_STANDING)
