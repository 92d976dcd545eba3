"""From a spectrum, an instrument and an estimate of the sample to the ingredients of a fit."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from xrfid.fit.design import SeriesColumns, scatter_columns, scattered_continuum, smooth_functions
from xrfid.fit.grouping import Grouping
from xrfid.fit.model import Ingredients
from xrfid.fit.nuisance import Tolerances
from xrfid.prepare.snip import continuum, smoothed
from xrfid.response.detector import LineShape
from xrfid.response.pileup import pair_spectrum, partial_overlaps, primary_spectrum
from xrfid.response.series import Prediction
from xrfid.spectrum import EnergyScale, Spectrum

LOWEST_FITTED_KEV = 0.85
KNOT_SPACING_FWHM = 7.0
KNOT_LEAST_KEV = 0.7
CURVATURE = 0.3
USUAL_PULSE_PAIR_NS = 300.0


@dataclass(frozen=True, eq=False)
class Setting:
    """Scale, line shape and pulse-pair time in force; they improve while the work goes on."""

    scale: EnergyScale
    shape: LineShape
    pair_time: float = 0.0


def fitted_channels(spectrum: Spectrum, scale: EnergyScale, end_kev: float) -> tuple[int, int]:
    """First and last-plus-one channel worth fitting: above the threshold, up to a little over the end point."""
    n = spectrum.n_channels
    counts = spectrum.counts
    first = int(np.clip(np.ceil(scale.channel(LOWEST_FITTED_KEV)), 0, n - 16))
    last = int(np.clip(np.ceil(scale.channel(1.15 * end_kev)), first + 16, n))
    filled = np.flatnonzero(counts[first:last] > 0)
    if filled.size:
        first += int(filled[0])
    if last == n and n > 64 and counts[n - 1] > 5.0 * (counts[n - 8 : n - 1].max() + 3.0):
        last = n - 1  # overflow counts pile up in the last channel
    return first, last


def ingredients(
    spectrum: Spectrum, prediction: Prediction, fractions: NDArray[np.float64], setting: Setting,
    tolerances: Tolerances,
    scatter_expected: Mapping[int, tuple[float, float]] | None = None,
) -> Ingredients:  # fmt: skip
    """Draw all columns for one estimate of the sample."""
    first, last = fitted_channels(spectrum, setting.scale, prediction.source.end_kev)
    grouping = Grouping.of(setting.scale, setting.shape.resolution, first, last)
    columns = SeriesColumns(prediction, fractions, setting.shape, grouping)
    counts = grouping.sum(spectrum.counts)
    base = _continuum_base(spectrum, prediction, fractions, setting, grouping)
    live = spectrum.live_time_s
    unit = 1e-9 / live if live else 1.0 / max(spectrum.total_counts, 1.0)
    primary = primary_spectrum(spectrum.counts, setting.scale, setting.pair_time * unit)
    pairs = grouping.sum(pair_spectrum(primary, setting.scale)) * unit
    stated = prediction.instrument.detector.pulse_pair_ns or USUAL_PULSE_PAIR_NS
    pair_time = (stated, stated) if live else None
    return Ingredients(
        counts=counts,
        columns=columns,
        scatter=scatter_columns(prediction, fractions, setting.shape, grouping),
        continuum=base * smooth_functions(grouping, setting.shape, KNOT_SPACING_FWHM, KNOT_LEAST_KEV),
        curvature=CURVATURE,
        pairs=pairs,
        pair_time=pair_time,
        partial=grouping.sum(partial_overlaps(primary, setting.scale)) * unit,
        tolerances=tolerances,
        scatter_expected=scatter_expected or {},
    )


def _continuum_base(
    spectrum: Spectrum, prediction: Prediction, fractions: NDArray[np.float64], setting: Setting, grouping: Grouping
) -> NDArray[np.float64]:
    """The continuum's shape in counts: scattered braking radiation brought to the level SNIP finds."""
    clipped = continuum(spectrum.counts, setting.scale, setting.shape.resolution)
    per_group = np.diff(grouping.starts)
    level = np.maximum(grouping.sum(clipped), 0.0) / per_group
    floor = 0.02
    shape = scattered_continuum(prediction, fractions, setting.shape, grouping) / per_group
    if not shape.any():
        return np.asarray(np.maximum(smoothed(level, 9), floor) * per_group)
    # the ratio of the two, followed slowly, keeps the physical edges and takes the level from the data
    window = max(grouping.n // 12, 5)
    ratio = smoothed(level + floor, window) / smoothed(shape + 1e-6 * shape.max(), window)
    return np.asarray(np.maximum(shape * smoothed(ratio, window), floor) * per_group)
