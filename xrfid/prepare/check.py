"""Does a stated scale agree with the peaks? A look that costs a few milliseconds.

With a scale and a usual width at hand no search is needed: bins, the maxima in them, and the series that reach
these, moved by a straight line. What that cannot settle is left to the full search.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from xrfid.prepare.end_point import end_cost, stop_channel
from xrfid.prepare.patterns import Patterns
from xrfid.prepare.peaks import CHANNEL_VARIANCE, Peak, Widths, refit
from xrfid.prepare.reduced import BINS_PER_FWHM, reduce
from xrfid.prepare.sieve import Sieve
from xrfid.prepare.snip import smoothed
from xrfid.spectrum import FWHM_PER_SIGMA, EnergyScale, Resolution

PLAUSIBLE_GAIN_KEV = (0.001, 0.2)
_LEAST_Z = 8.0
_MOST_PEAKS = 10
_FITTED = 4
MOST_END_COST = 15.0
"""A spectrum that stops where the voltage does not explain it is looked into."""
MOST_SHIFT_KEV = 0.009
"""Larger shifts are looked into; smaller ones are the fit's own business."""
ENOUGH_COVERED = 0.58
"""Share of the peaks' weight that series must reach on a right scale."""


@dataclass(frozen=True, slots=True)
class Look:
    """What a quick look at a stated scale says."""

    peaks: int
    covered: float
    """Share of the peaks that some series reaches, weighted by how clear they are, 0 to 1."""
    shift_kev: float
    """Median distance of the strongest peaks from their lines, keV."""
    second_kev: float
    """Second smallest distance among the strongest peaks: on a right scale two of them lie on their lines."""
    end_cost: float
    """What the place where the spectrum stops costs on this scale, in deviance."""
    noise_kev: float | None
    """Electronic FWHM that the strongest peaks show, keV; None if they are no cleaner than the Fano limit."""

    @property
    def agrees(self) -> bool:
        """Whether nothing speaks against the scale."""
        near = max(abs(self.shift_kev), self.second_kev) < MOST_SHIFT_KEV
        return self.peaks < 2 or (self.covered > ENOUGH_COVERED and near and self.end_cost < MOST_END_COST)


def look(counts: NDArray[np.float64], scale: EnergyScale, resolution: Resolution, patterns: Patterns,
         escape_kev: float, end_kev: float | None) -> Look:  # fmt: skip
    """Compare a stated scale with the peaks."""
    resolution = _as_wide_as_the_tallest(counts, scale, resolution)
    widths = widths_on(scale, resolution)
    reduced = reduce(counts, widths)
    peaks = _maxima(reduced.net, reduced.variance, reduced.centres, widths)
    fits = [refit(counts, p) for p in peaks[:_FITTED]]
    peaks = [f if f.area > 0 else p for f, p in zip(fits, peaks, strict=False)] + peaks[_FITTED:]
    if len(peaks) < 2:
        return Look(len(peaks), 1.0, 0.0, 0.0, 0.0, None)
    covered, value, energy = Sieve(reduced, patterns, peaks, escape_kev).one(scale, 0.35)
    at = np.array([p.channel for p in peaks])[: value.size]
    sure = np.flatnonzero(value[:_FITTED] > 0.4)
    shift = float(np.median(energy[sure] - scale.energy_kev(at[sure]))) if sure.size else 0.0
    away = np.where(value[:_FITTED] > 0, np.abs(energy[:_FITTED] - scale.energy_kev(at[:_FITTED])), 1.0)
    stop, visible = stop_channel(counts)
    cost = float(end_cost(scale.energy_kev(stop), visible, end_kev))
    noise = _noise([f for f in fits if f.area > 0], scale, resolution)
    return Look(len(peaks), covered, shift, float(np.sort(away)[1]), cost, noise)


def _as_wide_as_the_tallest(counts: NDArray[np.float64], scale: EnergyScale, resolution: Resolution) -> Resolution:
    """The resolution, widened if the tallest peak is much wider at half its height."""
    low = int(np.clip(scale.channel(1.0), 0, counts.size - 16))
    fwhm = float(widths_on(scale, resolution).fwhm(0.5 * counts.size))
    smooth = smoothed(counts, 0.6 * fwhm)
    top = low + int(np.argmax(smooth[low : counts.size - 2]))
    half = 0.5 * smooth[top]
    left = np.flatnonzero(smooth[:top] < half)
    right = np.flatnonzero(smooth[top:] < half)
    if half < 10.0 or not left.size or not right.size:
        return resolution
    seen = 2.0 * min(top - float(left[-1]), float(right[0])) * scale.gain_kev
    usual = float(resolution.fwhm_kev(max(float(scale.energy_kev(top)), 0.5)))
    if not 1.25 * usual < seen < 1.0:
        return resolution
    noise = math.sqrt((resolution.noise_ev * 1e-3) ** 2 + seen**2 - usual**2)
    return Resolution(noise * 1e3, resolution.fano, resolution.pair_energy_ev)


def _noise(peaks: list[Peak], scale: EnergyScale, resolution: Resolution) -> float | None:
    """Median electronic FWHM of the three strongest peaks."""
    slope = FWHM_PER_SIGMA**2 * resolution.fano * resolution.pair_energy_ev * 1e-3
    g2 = scale.gain_kev**2
    square = [(p.fwhm**2 - CHANNEL_VARIANCE) * g2 - slope * float(scale.energy_kev(p.channel)) for p in peaks]
    positive = [s for s in square if s > 0]
    return float(np.sqrt(np.median(positive[:3]))) if positive else None


def widths_on(scale: EnergyScale, resolution: Resolution) -> Widths:
    """A resolution as FWHM in channels on a scale."""
    slope = FWHM_PER_SIGMA**2 * resolution.fano * resolution.pair_energy_ev * 1e-3
    g2 = scale.gain_kev**2
    square = ((resolution.noise_ev * 1e-3) ** 2 + slope * max(scale.offset_kev, -1.0)) / g2
    return Widths(max(square, 0.3), slope / scale.gain_kev)


def _maxima(net: NDArray[np.float64], variance: NDArray[np.float64], centres: NDArray[np.float64], widths: Widths
            ) -> list[Peak]:  # fmt: skip
    """Maxima of a matched filter over the bins, strongest first."""
    kernel = np.exp(-0.5 * (np.arange(-4, 5) * FWHM_PER_SIGMA / BINS_PER_FWHM) ** 2)
    kernel /= kernel.sum()
    area = np.convolve(net, kernel, mode="same") / np.sum(kernel**2)
    sd = np.sqrt(np.convolve(variance, kernel**2, mode="same")) / np.sum(kernel**2)
    z = area / sd
    top = np.flatnonzero((z[1:-1] > _LEAST_Z) & (area[1:-1] >= area[:-2]) & (area[1:-1] > area[2:])) + 1
    top = top[np.argsort(-area[top])][:_MOST_PEAKS]
    out = []
    for i in top:
        a, b, c = np.log(np.maximum(net[i - 1 : i + 2], 1.0))
        bend = a - 2 * b + c
        part = float(np.clip(0.5 * (a - c) / bend, -0.7, 0.7)) if bend < 0 else 0.0
        channel = float(np.interp(i + part, np.arange(centres.size), centres))
        fwhm = float(widths.fwhm(channel))
        out.append(Peak(channel, float(area[i]), float(sd[i]), float(z[i]), fwhm, 0.1 * fwhm))
    return out
