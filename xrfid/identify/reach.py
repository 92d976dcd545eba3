"""What an instrument can show at all: series within reach, those it shows only weakly, pairs it cannot separate.

For a stated number of counts in a light and in a steel-like sample the expected spectrum is drawn, and
the detection limit (ISO 11929, 5 % errors) of every series follows from its information in the fit. Two
series are hard to separate if, each in small amounts in the light sample, the uncertainty of one grows
much when the other may be there as well.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from xrfid.atoms.elements import SYMBOLS, UNSTABLE
from xrfid.fit.design import SeriesColumns, scatter_columns, scattered_continuum, smooth_functions
from xrfid.fit.grouping import Grouping
from xrfid.fit.setup import KNOT_LEAST_KEV, KNOT_SPACING_FWHM, LOWEST_FITTED_KEV
from xrfid.fit.solve import covariance_of
from xrfid.identify.limits import K_95
from xrfid.instrument import Instrument
from xrfid.response.detector import LineShape
from xrfid.response.sample import mass_fractions
from xrfid.response.series import Prediction, SeriesKey
from xrfid.spectrum import EnergyScale

COUNTS = 1.0e6
MATRICES: dict[str, dict[str, float]] = {
    "light": {"C": 0.40, "O": 0.55, "H": 0.05},
    "steel": {"Fe": 0.98, "Mn": 0.01, "C": 0.01},
}
GOOD, WEAK = 0.001, 0.02
"""Mass fractions: a series is within reach if it can be detected below the first, weak below the second."""
HARD, INSEPARABLE = 2.0, 5.0
"""Growth of the uncertainty from which a pair is hard to separate, and from which it cannot be separated."""
LIGHTEST = 11
"""No lighter element is judged: windows and thresholds differ too much below sodium."""
_CHANNELS = 2048


@dataclass(frozen=True, slots=True)
class Reach:
    """One series: what fraction by mass can be detected in each matrix, and how well that is."""

    element: str
    series: str
    main_line_kev: float
    limits: tuple[tuple[str, float], ...]
    grade: str

    @property
    def best_limit(self) -> float:
        """Smallest of the limits."""
        return min(v for _, v in self.limits)


@dataclass(frozen=True, slots=True)
class Pair:
    """Two series that overlap: `growth` is the factor on either's uncertainty if both may be there."""

    a: str
    b: str
    growth: float

    @property
    def inseparable(self) -> bool:
        """Whether the pair cannot be separated, rather than with difficulty."""
        return self.growth > INSEPARABLE


@dataclass(frozen=True)
class ReachReport:
    """All series of an instrument, the pairs that it separates badly or not, and the elements beyond it."""

    counts: float
    series: tuple[Reach, ...]
    pairs: tuple[Pair, ...]
    assumptions: tuple[str, ...]

    @property
    def beyond(self) -> tuple[str, ...]:
        """Elements of which this instrument shows no series."""
        shown = {r.element for r in self.series if r.grade != "out of reach"}
        return tuple(s for s in SYMBOLS if s not in shown)

    def best(self) -> tuple[Reach, ...]:
        """Return the best series of each element."""
        found: dict[str, Reach] = {}
        for r in self.series:
            if r.element not in found or r.best_limit < found[r.element].best_limit:
                found[r.element] = r
        return tuple(found.values())

    def to_document(self) -> dict[str, Any]:
        """Return the JSON document, schema "xrfid.reach/1"."""
        return {
            "schema": "xrfid.reach/1",
            "counts": self.counts,
            "series": [
                {"element": r.element, "series": r.series, "main_line_kev": round(r.main_line_kev, 4), "grade": r.grade,
                 "detection_limit_mass_fraction": {m: float(f"{v:.3g}") for m, v in r.limits}}
                for r in self.series
            ],
            "inseparable": [_pair(p) for p in self.pairs if p.inseparable],
            "hard_to_separate": [_pair(p) for p in self.pairs if not p.inseparable],
            "out_of_reach": list(self.beyond),
            "assumptions": list(self.assumptions),
        }  # fmt: skip


def _pair(pair: Pair) -> dict[str, Any]:
    return {"a": pair.a, "b": pair.b, "uncertainty_growth": float(f"{pair.growth:.3g}")}


@dataclass(frozen=True, eq=False)
class _Expected:
    """The expected spectrum of a matrix: its columns, variance (n,), the matrix's own columns, counts per unit."""

    columns: SeriesColumns
    own: NDArray[np.float64]
    variance: NDArray[np.float64]
    others: NDArray[np.float64]
    per_unit: float


def reach(instrument: Instrument, counts: float = COUNTS) -> ReachReport:
    """Judge every series of every element for an instrument.

    Parameters
    ----------
    instrument : Instrument
    counts : float
        Counts of the spectra for which limits are given.
    """
    prediction = Prediction(instrument)
    shape = LineShape.of(instrument.detector)
    end = prediction.source.end_kev
    scale = instrument.energy_scale or EnergyScale(0.0, 1.1 * end / _CHANNELS)
    first = max(math.ceil(float(scale.channel(LOWEST_FITTED_KEV))), 0)
    last = int(np.clip(scale.channel(1.1 * end), first + 64, 65_536))
    grouping = Grouping.of(scale, shape.resolution, first, last)
    limits: dict[SeriesKey, list[tuple[str, float]]] = {}
    expected = {name: _expected(prediction, c, shape, grouping, counts) for name, c in MATRICES.items()}
    for name, e in expected.items():
        for key, limit in zip(e.columns.keys, _limits(e), strict=True):
            limits.setdefault(key, []).append((name, float(limit)))
    judged = {
        k: Reach(k.element, k.series, expected["light"].columns.line_list(k)[0][1], tuple(v), _grade(v))
        for k, v in limits.items() if k.z >= LIGHTEST
    }  # fmt: skip
    seen = [k for k, r in judged.items() if r.best_limit < WEAK and k.element not in UNSTABLE]
    return ReachReport(counts, tuple(judged.values()), _pairs(expected["light"], seen), instrument.assumed)


def _grade(limits: list[tuple[str, float]]) -> str:
    best = min(v for _, v in limits)
    return "within reach" if best < GOOD else "weak" if best < WEAK else "hardly" if best < 1.0 else "out of reach"


def _expected(
    prediction: Prediction, composition: dict[str, float], shape: LineShape, grouping: Grouping, counts: float
) -> _Expected:
    """Draw the spectrum of a matrix, scatter and continuum included, with so many counts."""
    fractions = mass_fractions(composition)
    columns = SeriesColumns(prediction, fractions, shape, grouping)
    scatter = scatter_columns(prediction, fractions, shape, grouping)
    continuum = scattered_continuum(prediction, fractions, shape, grouping)
    own = np.array([fractions[k.z - 1] * i for k, i in zip(columns.keys, columns.intensity, strict=True)])
    total = own @ columns.unit + continuum + sum(c.predicted * c.column for c in scatter)
    per_unit = counts / float(np.sum(total))
    smooth = continuum * per_unit * smooth_functions(grouping, shape, KNOT_SPACING_FWHM, KNOT_LEAST_KEV)
    source_lines = [c.column[None] for c in scatter if c.predicted > 0]
    others = np.concatenate([columns.unit[own > 0], *source_lines, smooth[smooth.sum(axis=1) > 0]])
    return _Expected(columns, own, np.maximum(total * per_unit, 0.1), others, per_unit)


def _limits(e: _Expected) -> NDArray[np.float64]:
    """Detection limit of each series as a mass fraction."""
    covariance = covariance_of((e.others / e.variance) @ e.others.T)
    weighted = e.columns.unit / e.variance
    plain = np.einsum("ij,ij->i", weighted, e.columns.unit)
    cross = weighted @ e.others.T
    lost = np.einsum("ij,jk,ik->i", cross, covariance, cross)
    information = np.where(e.own > 0, plain, np.maximum(plain - lost, 1e-6 * plain))
    detection = K_95**2 + 2.0 * K_95 / np.sqrt(np.maximum(information, 1e-300))
    return np.asarray(detection / np.maximum(e.columns.intensity * e.per_unit, 1e-300))


def _pairs(e: _Expected, seen: list[SeriesKey]) -> tuple[Pair, ...]:
    """Pairs of series of different elements that overlap, the worst first.

    With a correlation c of two columns, weighed by the information of each channel, fitting both
    multiplies each one's standard uncertainty by ``1 / sqrt(1 - c^2)``.
    """
    if not seen:
        return ()
    weighed = e.columns.unit[[e.columns.index(k) for k in seen]] / np.sqrt(e.variance)
    weighed /= np.linalg.norm(weighed, axis=1, keepdims=True)
    growth = 1.0 / np.sqrt(np.maximum(1.0 - (weighed @ weighed.T) ** 2, 1e-6))
    a, b = np.nonzero(np.triu(growth > HARD, 1))
    found = [Pair(str(seen[i]), str(seen[j]), float(growth[i, j])) for i, j in zip(a, b, strict=True)
             if seen[i].z != seen[j].z]  # fmt: skip
    return tuple(sorted(found, key=lambda p: -p.growth))
