"""What an identification says: plain immutable records, from the verdict down to each line's counts.

The JSON document (`xrfid.report.document`) is a faithful copy of these.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field
from enum import StrEnum
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from xrfid.prepare.calibration import Calibration

if TYPE_CHECKING:
    import pandas as pd


class Verdict(StrEnum):
    """What is said of an element."""

    IDENTIFIED = "identified"
    TENTATIVE = "tentative"
    UNRESOLVED = "unresolved"
    NOT_DETECTED = "not detected"
    INSTRUMENT = "instrument"
    OUT_OF_REACH = "out of reach"


class ArtefactKind(StrEnum):
    """What a peak is when it is no line of the sample."""

    ESCAPE = "escape"
    SUM = "sum"
    COHERENT = "coherent scatter"
    INCOHERENT = "incoherent scatter"
    DIFFRACTION = "diffraction"
    STRAY = "stray"
    AIR = "air"


@dataclass(frozen=True, slots=True)
class SeriesResult:
    """Net counts in the full-energy peaks of one series, with limits after ISO 11929."""

    series: str
    area: float
    sigma: float
    decision_threshold: float
    detection_limit: float
    upper_limit: float


@dataclass(frozen=True, slots=True)
class LineEvidence:
    """One group of lines: what the model expects there and what the counts show.

    `predicted` follows from the whole series with its nominal shares; `observed` is what the counts
    leave for this group once everything else in the model is taken away; both in counts. `own` is
    the share of the peak region's net counts that the model gives to this series.
    """

    series: str
    group: str
    energy_kev: float
    predicted: float
    observed: float
    sigma: float
    own: float


@dataclass(frozen=True, slots=True)
class Evidence:
    """What a verdict rests on.

    `significance` is the signed square root of the deviance that the fit loses without the
    element, all else refitted, divided by the local misfit; `deviance_loss` the raw loss;
    `threshold` the significance asked for.
    """

    significance: float
    deviance_loss: float
    threshold: float
    local_misfit: float
    lines: tuple[LineEvidence, ...] = ()
    strongest_own_line: str = ""
    missing_lines: tuple[str, ...] = ()
    artefact: str = ""


@dataclass(frozen=True, slots=True)
class Rival:
    """Another explanation of the same counts, and how much worse (deviance) it does."""

    explanation: str
    kind: str
    deviance_worse: float


@dataclass(frozen=True, slots=True)
class Finding:
    """One element and what is said of it."""

    element: str
    verdict: Verdict
    reason: str
    series: tuple[SeriesResult, ...]
    evidence: Evidence
    rivals: tuple[Rival, ...] = ()


@dataclass(frozen=True, slots=True)
class Limit:
    """A series that was not detected or is out of reach, and what could have been missed (counts)."""

    element: str
    series: str
    verdict: Verdict
    decision_threshold: float | None = None
    detection_limit: float | None = None
    upper_limit: float | None = None
    reason: str = ""


@dataclass(frozen=True, slots=True)
class Artefact:
    """A peak that is no line of the sample."""

    kind: ArtefactKind
    energy_kev: float
    area: float
    sigma: float
    of: str
    advice: str = ""


@dataclass(frozen=True, slots=True)
class Unexplained:
    """A peak that nothing in the model explains."""

    energy_kev: float
    area: float
    sigma: float


@dataclass(frozen=True, slots=True)
class Source:
    """Which measurement this is about."""

    path: str | None
    dataset: str | None
    title: str
    channels: int
    total_counts: float
    live_time_s: float | None
    real_time_s: float | None


@dataclass(frozen=True, eq=False)
class Curves:
    """The spectrum and its model, channel by channel; every array has shape (n_channels,).

    `parts` maps a series ("Fe K"), "sum", "escape of Fe K", "coherent scatter", ... to its counts;
    the parts and the continuum add up to `model`. `without` maps an element to the best model that
    lacks it. `variance` is the variance expected per channel, the model's own uncertainty included.
    """

    energy_kev: NDArray[np.float64]
    counts: NDArray[np.float64]
    model: NDArray[np.float64]
    continuum: NDArray[np.float64]
    parts: Mapping[str, NDArray[np.float64]]
    without: Mapping[str, NDArray[np.float64]] = field(default_factory=dict)
    lines: tuple[tuple[str, str, float, float], ...] = ()
    """Per line of an identified series: series name ("Fe K"), line name ("Ka1"), keV, share of the series."""
    fitted: tuple[int, int] = (0, 0)
    """First and last-plus-one channel that the fit used."""

    @property
    def residual(self) -> NDArray[np.float64]:
        """(counts - model) / sqrt(model), in standard deviations."""
        return (self.counts - self.model) / np.sqrt(np.maximum(self.model, 1.0))


@dataclass(frozen=True, eq=False)
class Identification:
    """The whole answer for one spectrum."""

    source: Source
    calibration: Calibration
    findings: tuple[Finding, ...]
    limits: tuple[Limit, ...]
    artefacts: tuple[Artefact, ...]
    unexplained: tuple[Unexplained, ...]
    assumptions: tuple[str, ...]
    cautions: tuple[str, ...]
    provenance: Mapping[str, Any]
    curves: Curves
    reduced_deviance: float
    false_identification_level: float
    composition: Mapping[str, float] = field(default_factory=dict)
    """The rough mass fractions that shaped the prediction; no analysis. "light matrix" is what X-rays do not show."""

    def __iter__(self) -> Iterator[Finding]:
        return iter(self.findings)

    def __getitem__(self, element: str) -> Finding:
        for finding in self.findings:
            if finding.element == element:
                return finding
        raise KeyError(element)

    @property
    def identified(self) -> tuple[str, ...]:
        """Symbols of the elements that are identified, strongest evidence first."""
        return tuple(f.element for f in self.findings if f.verdict is Verdict.IDENTIFIED)

    def to_dataframe(self) -> pd.DataFrame:
        """Return one row per element and series of the findings (needs pandas)."""
        import pandas as pd

        rows = [
            {"element": f.element, "verdict": str(f.verdict), "series": s.series, "area": s.area, "sigma": s.sigma,
             "decision_threshold": s.decision_threshold, "detection_limit": s.detection_limit,
             "significance": f.evidence.significance, "reason": f.reason}
            for f in self.findings for s in f.series
        ]  # fmt: skip
        return pd.DataFrame(rows)

    def __repr__(self) -> str:
        names = ", ".join(self.identified) or "nothing"
        return f"<Identification of {self.source.path or self.source.title or 'spectrum'}: {names}>"
