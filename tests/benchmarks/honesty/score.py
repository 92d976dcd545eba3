"""Verdicts against truth.

An element counts as found when it is called identified, and as false when it is called identified although
its best series stands less than one standard uncertainty out of the noise (`FALSE_BELOW`). Between that
and `MUST_ABOVE` nothing is asked. The anode's element and the argon of the air are left out: what is
said of them is a statement about the instrument.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence
from dataclasses import asdict, dataclass, field
from itertools import pairwise
from typing import Any

import numpy as np

FALSE_BELOW = 1.0
MUST_ABOVE, CLEAR_ABOVE = 6.0, 10.0
AREA_ABOVE = 10.0
"""Areas are compared for series above this significance."""
SIGNIFICANCE_EDGES = (1.0, 2.0, 3.0, 4.0, 5.0, 6.0, 8.0, 10.0, 15.0, 30.0, 100.0, math.inf)


@dataclass(frozen=True)
class Area:
    """A stated area beside the true one, counts; `z` is the true significance."""

    element: str
    series: str
    area: float
    sigma: float
    true_area: float
    z: float

    @property
    def pull(self) -> float:
        """Error in units of the stated standard uncertainty."""
        return (self.area - self.true_area) / self.sigma if self.sigma > 0 else math.inf


@dataclass(frozen=True)
class Trial:
    """An element added exactly at the stated detection limit, and the area then stated; all in counts."""

    element: str
    series: str
    limit: float
    threshold: float
    area: float

    @property
    def detected(self) -> bool:
        """Whether the area found lies above the decision threshold stated beforehand."""
        return self.area > self.threshold


@dataclass(frozen=True)
class Outcome:
    """What one identification said, with what was true.

    `best_z` is the significance of each element's best series; `identified` by false-identification
    level asked for (as text), the default level under ``"default"``.
    """

    index: int
    material: str
    kind: str
    detector: str
    anode: str
    total: float
    seconds: float
    best_z: dict[str, float]
    identified: dict[str, list[str]]
    areas: list[Area] = field(default_factory=list)
    trials: list[Trial] = field(default_factory=list)
    failure: str = ""

    @property
    def ignored(self) -> set[str]:
        """Elements that are not scored."""
        return {self.anode, "Ar"}

    def found(self, level: str = "default") -> set[str]:
        """Elements called identified."""
        return set(self.identified.get(level, ())) - self.ignored

    def false(self, level: str = "default") -> set[str]:
        """Elements called identified that cannot be seen."""
        return {e for e in self.found(level) if self.best_z.get(e, 0.0) < FALSE_BELOW}

    def due(self, above: float = MUST_ABOVE) -> set[str]:
        """Elements that have to be found."""
        return {e for e, z in self.best_z.items() if z > above} - self.ignored

    @property
    def missed(self) -> set[str]:
        """Elements that had to be found and were not."""
        return self.due() - self.found()

    def to_dict(self) -> dict[str, Any]:
        """Return plain data for JSON."""
        return asdict(self)

    @classmethod
    def from_dict(cls, data: dict[str, Any]) -> Outcome:
        """Return the outcome that `to_dict` wrote."""
        areas = [Area(**a) for a in data["areas"]]
        return cls(**{**data, "areas": areas, "trials": [Trial(**t) for t in data["trials"]]})


@dataclass(frozen=True)
class Share:
    """So many of so many, with Wilson's 68 per cent interval (J. Am. Stat. Assoc. 22 (1927) 209)."""

    hits: int
    of: int

    @property
    def value(self) -> float:
        """The share itself; nan of nothing."""
        return self.hits / self.of if self.of else math.nan

    @property
    def interval(self) -> tuple[float, float]:
        """Lower and upper end."""
        if not self.of:
            return math.nan, math.nan
        n, p = self.of, self.value
        half = math.sqrt(p * (1.0 - p) / n + 0.25 / n**2)
        return (p + 0.5 / n - half) / (1.0 + 1.0 / n), (p + 0.5 / n + half) / (1.0 + 1.0 / n)

    def __str__(self) -> str:
        return f"{self.value:.3f} ({self.hits}/{self.of})"


@dataclass(frozen=True)
class Scores:
    """All figures of a panel."""

    spectra: int
    failed: int
    recall: Share
    recall_clear: Share
    by_significance: tuple[tuple[float, float, Share], ...]
    false_per_spectrum: float
    wholly_right: Share
    false_by_level: tuple[tuple[float, int, int], ...]
    within_1: Share
    within_2: Share
    area_median: float
    area_p90: float
    at_limit: Share
    area_at_limit: float
    seconds_median: float


def summarise(outcomes: Sequence[Outcome], default_level: float) -> Scores:
    """Work out all figures; failed identifications count as having found nothing."""
    errors = [abs(a.area / a.true_area - 1.0) for a in _areas(outcomes)]
    trials = [t for o in outcomes for t in o.trials]
    return Scores(
        spectra=len(outcomes),
        failed=sum(bool(o.failure) for o in outcomes),
        recall=_recall(outcomes, MUST_ABOVE, math.inf),
        recall_clear=_recall(outcomes, CLEAR_ABOVE, math.inf),
        by_significance=tuple((lo, hi, _recall(outcomes, lo, hi)) for lo, hi in pairwise(SIGNIFICANCE_EDGES)),
        false_per_spectrum=sum(len(o.false()) for o in outcomes) / max(len(outcomes), 1),
        wholly_right=Share(sum(not o.missed and not o.false() for o in outcomes), len(outcomes)),
        false_by_level=_false_by_level(outcomes, default_level),
        within_1=coverage(outcomes, 1.0),
        within_2=coverage(outcomes, 2.0),
        area_median=float(np.median(errors)) if errors else math.nan,
        area_p90=float(np.quantile(errors, 0.9)) if errors else math.nan,
        at_limit=Share(sum(t.detected for t in trials), len(trials)),
        area_at_limit=float(np.median([t.area / t.limit for t in trials])) if trials else math.nan,
        seconds_median=float(np.median([o.seconds for o in outcomes])) if outcomes else math.nan,
    )


def _areas(outcomes: Iterable[Outcome]) -> list[Area]:
    return [a for o in outcomes for a in o.areas if a.z > AREA_ABOVE]


def pulls(outcomes: Iterable[Outcome]) -> list[float]:
    """Errors of clear series in units of their stated uncertainty."""
    return [a.pull for a in _areas(outcomes)]


def coverage(outcomes: Iterable[Outcome], k: float) -> Share:
    """Share of true areas inside the stated area plus or minus `k` standard uncertainties."""
    values = pulls(outcomes)
    return Share(sum(abs(p) <= k for p in values), len(values))


def _recall(outcomes: Iterable[Outcome], above: float, up_to: float) -> Share:
    hits = of = 0
    for o in outcomes:
        due = {e for e in o.due(above) if o.best_z[e] <= up_to}
        hits, of = hits + len(due & o.found()), of + len(due)
    return Share(hits, of)


def _false_by_level(outcomes: Sequence[Outcome], default_level: float) -> tuple[tuple[float, int, int], ...]:
    """Per level asked for: the level, false elements, spectra."""
    names = sorted({level for o in outcomes for level in o.identified})
    rows = []
    for name in names:
        tried = [o for o in outcomes if name in o.identified]
        level = default_level if name == "default" else float(name)
        rows.append((level, sum(len(o.false(name)) for o in tried), len(tried)))
    return tuple(sorted(rows))


def table(scores: Scores, outcomes: Sequence[Outcome]) -> str:
    """Return the figures as text."""
    rows = [
        ("spectra", f"{scores.spectra}, of which failed {scores.failed}"),
        ("found, significance above 6", str(scores.recall)),
        ("found, significance above 10", str(scores.recall_clear)),
        ("false elements per spectrum", f"{scores.false_per_spectrum:.3f}"),
        ("spectra wholly right", str(scores.wholly_right)),
        ("true area within 1 sigma (0.683 expected)", str(scores.within_1)),
        ("true area within 2 sigma (0.954 expected)", str(scores.within_2)),
        ("area error, median and 90th percentile", f"{scores.area_median:.1%}, {scores.area_p90:.1%}"),
        ("detected at the stated limit (0.95 expected)", str(scores.at_limit)),
        ("    median of area found / area added", f"{scores.area_at_limit:.2f}"),
        ("seconds per spectrum, median", f"{scores.seconds_median:.2f}"),
    ]
    text = "".join(f"{name:<46s} {value}\n" for name, value in rows)
    text += "\nfalse elements per spectrum, against the level asked for\n"
    for level, false, n in scores.false_by_level:
        text += f"    {level:<10g} {false / n:.3f}  ({false} in {n} spectra)\n"
    text += "\nfound, against true significance\n"
    for lo, hi, share in scores.by_significance:
        text += f"    {lo:>5g} to {hi:<5g} {share}\n"
    return text + _by_group(outcomes)


def _by_group(outcomes: Sequence[Outcome]) -> str:
    text = "\nby material, detector and anode: found above 6, false per spectrum, wholly right\n"
    for attribute in ("kind", "detector", "anode"):
        for value in sorted({getattr(o, attribute) for o in outcomes}):
            some = [o for o in outcomes if getattr(o, attribute) == value]
            right = Share(sum(not o.missed and not o.false() for o in some), len(some))
            false = sum(len(o.false()) for o in some) / len(some)
            text += f"    {value:<14s} {_recall(some, MUST_ABOVE, math.inf)!s:<18s} {false:5.2f}   {right}\n"
    return text


def mistakes(outcomes: Sequence[Outcome]) -> str:
    """Return one line for every spectrum that is not wholly right."""
    text = ""
    for o in outcomes:
        if o.failure:
            text += f"{o.index:03d} {o.material}: failed, {o.failure}\n"
        elif o.missed or o.false():
            missed = " ".join(f"{e}({o.best_z[e]:.0f})" for e in sorted(o.missed)) or "-"
            text += (
                f"{o.index:03d} {o.material} ({o.anode}, {o.detector}, {o.total:.1e} counts): "
                f"missed {missed}, false {' '.join(sorted(o.false())) or '-'}\n"
            )
    return text
