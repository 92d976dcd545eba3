"""Which lines of a spectrum get a name in a picture, and where the names go so that none covers another."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from xrfid.identify.result import Curves, Identification, Verdict
from xrfid.report import wording

_VISIBLE = 3.0
"""A line group is named if its part stands so many standard deviations out of everything."""
_SMALLEST_SHARE = 0.03
_KINDS = {Verdict.IDENTIFIED: "sample", Verdict.INSTRUMENT: "instrument"}


@dataclass(frozen=True, slots=True)
class Mark:
    """A name for a peak.

    `kind` is "sample", "open" (tentative or unresolved), "instrument", "artefact" or "unexplained";
    `height` the counts at the peak's top; `prominence` how far it stands out, in standard deviations;
    `detail` what more there is to say.
    """

    text: str
    energy_kev: float
    height: float
    prominence: float
    kind: str
    detail: str = ""


def marks(identification: Identification) -> list[Mark]:
    """Return a mark for every visible line group, artefact and unexplained peak, by energy."""
    curves = identification.curves
    if curves.counts.size == 0:
        return []
    found = [*_line_marks(identification), *_other_marks(identification)]
    inside = (float(curves.energy_kev[0]), float(curves.energy_kev[-1]))
    return sorted((m for m in found if inside[0] < m.energy_kev < inside[1]), key=lambda m: m.energy_kev)


def ranked(found: Sequence[Mark]) -> list[Mark]:
    """Return the marks in the order of their importance: the first of every element, then by prominence."""
    by_prominence = sorted(found, key=lambda m: -m.prominence)
    named: set[str] = set()
    firsts: list[Mark] = []
    others: list[Mark] = []
    for mark in by_prominence:
        leads = mark.kind in ("sample", "open", "unexplained") and (mark.text.split()[0] not in named)
        named.add(mark.text.split()[0])
        (firsts if leads else others).append(mark)
    return [*firsts, *others]


def strongest(found: Sequence[Mark], at_most: int) -> list[Mark]:
    """Return at most so many marks, the most important ones, by energy."""
    return sorted(ranked(found)[:at_most], key=lambda m: m.energy_kev)


def spread(wanted: Sequence[float], gap: float, low: float, high: float) -> NDArray[np.float64]:
    """Move positions as little as possible (least squares) until they are `gap` apart and inside.

    Parameters
    ----------
    wanted : sequence of float
        Positions in rising order.
    gap : float
        Smallest distance between neighbours.
    low, high : float
        Bounds; if there is not room enough, the positions divide it evenly.

    Returns
    -------
    ndarray, shape (len(wanted),)
    """
    n = len(wanted)
    if n == 0:
        return np.zeros(0)
    if (n - 1) * gap >= high - low:
        return np.linspace(low, high, n) if n > 1 else np.array([0.5 * (low + high)])
    # with the gaps taken out, the task is an isotonic regression: pool adjacent violators
    steps = gap * np.arange(n)
    blocks: list[tuple[float, int]] = []
    for value in np.asarray(wanted, dtype=float) - steps:
        mean, size = float(value), 1
        while blocks and blocks[-1][0] > mean:
            before, count = blocks.pop()
            mean, size = (mean * size + before * count) / (size + count), size + count
        blocks.append((mean, size))
    pooled = np.repeat([b[0] for b in blocks], [b[1] for b in blocks])
    return np.asarray(np.clip(pooled, low, high - steps[-1]) + steps)


def shown_range(curves: Curves) -> tuple[float, float]:
    """Return the energies (keV) between which there is something to see."""
    first, last = curves.fitted
    if last <= first:
        first, last = 0, curves.counts.size
    from_above = np.cumsum(curves.counts[first:last][::-1])[::-1]
    busy = np.flatnonzero(from_above > max(50.0, 1e-4 * float(curves.counts.sum())))
    end = first + (int(busy[-1]) if busy.size else last - first - 1)
    low = max(float(curves.energy_kev[first]), 0.0)
    high = float(curves.energy_kev[min(end, curves.counts.size - 1)])
    return low, high + 0.02 * (high - low)


def _line_marks(identification: Identification) -> list[Mark]:
    curves = identification.curves
    found = []
    for finding in identification.findings:
        kind = _KINDS.get(finding.verdict, "open")
        for name, group, energy, share in line_groups(curves, finding.element):
            if share < _SMALLEST_SHARE or name not in curves.parts:
                continue
            i = int(np.argmin(np.abs(curves.energy_kev - energy)))
            prominence = float(curves.parts[name][i] / np.sqrt(max(float(curves.model[i]), 1.0)))
            if prominence >= _VISIBLE or (kind == "sample" and group.endswith("a")):
                text = f"{finding.element} {wording.line_name(group)}" + (" ?" if kind == "open" else "")
                said = f"{share:.0%} of the {name} series"
                found.append(Mark(text, energy, _top(curves, energy), prominence, kind, said))
    return found


def line_groups(curves: Curves, element: str) -> list[tuple[str, str, float, float]]:
    """Return (series "Fe K", group "Ka", mean keV, share of the series) of an element's line groups."""
    sums: dict[tuple[str, str], tuple[float, float]] = {}
    for name, line, energy, share in curves.lines:
        if name.split()[0] == element:
            weight, moment = sums.get((name, line[:2]), (0.0, 0.0))
            sums[name, line[:2]] = (weight + share, moment + share * energy)
    return [(name, group, m / w, w) for (name, group), (w, m) in sums.items() if w > 0]


def _other_marks(identification: Identification) -> list[Mark]:
    curves = identification.curves
    found = []
    for peak in identification.artefacts:
        short = str(peak.kind).removesuffix(" scatter")
        far = peak.area / peak.sigma if peak.sigma > 0 else 0.0
        found.append(
            Mark(
                short,
                peak.energy_kev,
                _top(curves, peak.energy_kev),
                far,
                "artefact",
                f"{peak.kind}: {peak.of}",
            )
        )
    for loose in identification.unexplained:
        far = loose.area / loose.sigma if loose.sigma > 0 else 0.0
        text = f"? {loose.energy_kev:.2f}"
        found.append(
            Mark(text, loose.energy_kev, _top(curves, loose.energy_kev), far, "unexplained", "unexplained")
        )
    return found


def _top(curves: Curves, energy_kev: float) -> float:
    """Return the counts at a peak's top, model or data, whichever is higher."""
    i = int(np.argmin(np.abs(curves.energy_kev - energy_kev)))
    near = slice(max(i - 2, 0), i + 3)
    return float(max(curves.counts[near].max(), curves.model[near].max(), 1.0))
