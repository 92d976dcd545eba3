"""What an instrument can show at all: series within reach, those it shows only weakly, pairs it cannot separate.

For a stated number of counts in a light and in a steel-like sample the expected spectrum is drawn, and
the detection limit (ISO 11929, 5 % errors) of every series follows from its information in the fit.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

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
INSEPARABLE = 0.98
"""Pairs of columns with a larger cosine cannot be told apart."""
_CHANNELS = 2048


@dataclass(frozen=True, slots=True)
class Reach:
    """One series: what fraction by mass can be detected in each matrix, and how well that is."""

    element: str
    series: str
    main_line_kev: float
    limits: tuple[tuple[str, float], ...]
    grade: str


@dataclass(frozen=True)
class ReachReport:
    """All series of an instrument, and the pairs that it cannot separate."""

    series: tuple[Reach, ...]
    inseparable: tuple[tuple[str, str, float], ...]
    assumptions: tuple[str, ...]

    def to_document(self) -> dict[str, Any]:
        """Return the JSON document, schema "xrfid.reach/1"."""
        return {
            "schema": "xrfid.reach/1",
            "counts": COUNTS,
            "series": [
                {"element": r.element, "series": r.series, "main_line_kev": round(r.main_line_kev, 4), "grade": r.grade,
                 "detection_limit_mass_fraction": {m: float(f"{v:.3g}") for m, v in r.limits}}
                for r in self.series
            ],
            "inseparable": [{"a": a, "b": b, "cosine": round(c, 4)} for a, b, c in self.inseparable],
            "assumptions": list(self.assumptions),
        }  # fmt: skip


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
    found: dict[SeriesKey, list[tuple[str, float]]] = {}
    columns: SeriesColumns | None = None
    for name, composition in MATRICES.items():
        columns = SeriesColumns(prediction, mass_fractions(composition), shape, grouping)
        for key, limit in zip(columns.keys, _limits(columns, composition, counts), strict=True):
            found.setdefault(key, []).append((name, limit))
    assert columns is not None
    made = tuple(
        Reach(k.element, k.series, columns.line_list(k)[0][1], tuple(v), _grade(v))
        for k, v in found.items()
        if k.z >= 11
    )
    return ReachReport(made, _inseparable(columns), instrument.assumed)


def _grade(limits: list[tuple[str, float]]) -> str:
    best = min(v for _, v in limits)
    return "within reach" if best < GOOD else "weak" if best < WEAK else "hardly" if best < 1.0 else "out of reach"


def _limits(columns: SeriesColumns, composition: dict[str, float], counts: float) -> NDArray[np.float64]:
    """Detection limit of each series as a mass fraction, in the expected spectrum of a matrix."""
    prediction, grouping, shape = columns.prediction, columns.grouping, columns.shape
    fractions = mass_fractions(composition)
    scatter = scatter_columns(prediction, fractions, shape, grouping)
    continuum = scattered_continuum(prediction, fractions, shape, grouping)
    own = np.array([fractions[k.z - 1] * i for k, i in zip(columns.keys, columns.intensity, strict=True)])
    expected = own @ columns.unit + continuum + sum(c.predicted * c.column for c in scatter)
    per_unit = counts / float(np.sum(expected))
    variance = np.maximum(expected * per_unit, 0.1)
    smooth = continuum * per_unit * smooth_functions(grouping, shape, KNOT_SPACING_FWHM, KNOT_LEAST_KEV)
    source_lines = [c.column[None] for c in scatter if c.predicted > 0]
    others = np.concatenate([columns.unit[own > 0], *source_lines, smooth[smooth.sum(axis=1) > 0]])
    covariance = covariance_of((others / variance) @ others.T)
    weighted = columns.unit / variance
    plain = np.einsum("ij,ij->i", weighted, columns.unit)
    cross = weighted @ others.T
    lost = np.einsum("ij,jk,ik->i", cross, covariance, cross)
    information = np.where(own > 0, plain, np.maximum(plain - lost, 1e-6 * plain))
    detection = K_95**2 + 2.0 * K_95 / np.sqrt(np.maximum(information, 1e-300))
    return np.asarray(detection / np.maximum(columns.intensity * per_unit, 1e-300))


def _inseparable(columns: SeriesColumns) -> tuple[tuple[str, str, float], ...]:
    """Pairs of series of different elements whose columns all but coincide."""
    norm = columns.unit / np.linalg.norm(columns.unit, axis=1, keepdims=True)
    cosine = norm @ norm.T
    a, b = np.nonzero(np.triu(cosine > INSEPARABLE, 1))
    pairs = [(columns.keys[i], columns.keys[j], float(cosine[i, j])) for i, j in zip(a, b, strict=True)]
    kept = [(str(x), str(y), c) for x, y, c in pairs if x.z != y.z and min(x.z, y.z) >= 11]
    return tuple(sorted(kept, key=lambda p: -p[2]))
