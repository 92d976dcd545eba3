"""A spectrum summed into about three bins per FWHM, its continuum clipped off: what scales are tried on."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from xrfid.prepare.end_point import without_overflow
from xrfid.prepare.peaks import Widths
from xrfid.prepare.snip import smoothed, snip

BINS_PER_FWHM = 3.0
SYSTEMATIC = 0.04
"""Relative misfit to expect of patterns drawn without tails, matrix and exact widths."""
_CLIP_BINS = 5
_HAT_BINS = 30.0
_MOST_BINS = 1200
_STRONG = 0.06
"""Share of the strongest channel from which channels take part in sum peaks."""


@dataclass(frozen=True, eq=False)
class Reduced:
    """Net counts in bins.

    Attributes
    ----------
    edges : ndarray, shape (n + 1,)
        Bin boundaries in channels (fractional: ``first - 0.5``).
    counts, net, variance : ndarray, shape (n,)
        Counts, counts less the clipped continuum, and the variance of the net counts.
    hats : ndarray, shape (n_hats, n)
        Smooth functions that mend the clipped continuum.
    pile_up : ndarray, shape (2 n_pile - 1,)
        Net counts folded with themselves, on the even grid of `pile_step` channels.
    """

    edges: NDArray[np.float64]
    counts: NDArray[np.float64]
    net: NDArray[np.float64]
    variance: NDArray[np.float64]
    hats: NDArray[np.float64]
    pile_up: NDArray[np.float64]
    pile_step: int

    @property
    def centres(self) -> NDArray[np.float64]:
        """Bin centres in channels."""
        return 0.5 * (self.edges[1:] + self.edges[:-1])

    def pile_column(self, offset_in_channels: float) -> NDArray[np.float64]:
        """Sum peaks for an energy of channel 0 of so many channels, shape (n,), greatest value 1.

        Two photons in channels a and b add up to channel ``a + b + offset / gain``.
        """
        at = (self.centres - offset_in_channels + 1 - self.pile_step) / self.pile_step
        density = np.interp(at, np.arange(self.pile_up.size), self.pile_up, left=0.0, right=0.0)
        column = density * np.diff(self.edges)
        return np.asarray(column / max(float(column.max()), 1e-12))


def reduce(counts: NDArray[np.float64], widths: Widths) -> Reduced:
    """Sum a spectrum into bins and clip its continuum off."""
    starts = _starts(counts, widths)
    in_bin = np.add.reduceat(counts[: starts[-1]], starts[:-1])
    per_channel = in_bin / np.diff(starts)
    clipped = snip(smoothed(per_channel, 3.0), np.full(per_channel.size, _CLIP_BINS)) * np.diff(starts)
    net = in_bin - clipped
    level = smoothed(in_bin, 3.0)
    variance = np.maximum(level, 1.0) + (SYSTEMATIC * np.maximum(net, 0.0)) ** 2
    step = max(int(np.min(np.diff(starts)) / 3), 1)
    whole = starts[-1] // step
    base = np.interp((np.arange(whole) + 0.5) * step, 0.5 * (starts[1:] + starts[:-1]), clipped / np.diff(starts))
    fine = counts[: whole * step].reshape(-1, step).mean(axis=1) - base
    # weak channels may be sum peaks already; folded once more they would promise triple sums
    fine = np.where(fine > _STRONG * fine.max(initial=0.0), fine, 0.0)
    edges = starts.astype(np.float64) - 0.5
    return Reduced(edges, in_bin, net, variance, hats(in_bin.size, _HAT_BINS), _self_folded(fine), step)


def _starts(counts: NDArray[np.float64], widths: Widths) -> NDArray[np.intp]:
    """Boundaries of the bins: to a fifth beyond the last counts, the overflow channel left out."""
    n = without_overflow(counts)
    total = np.cumsum(counts[:n])
    last = int(np.searchsorted(total, total[-1] - max(3.0, 2e-5 * total[-1]))) + 1
    last = min(int(1.2 * last) + 16, n)
    starts, least = [0], last / _MOST_BINS
    while starts[-1] < last:
        step = max(int(max(float(widths.fwhm(starts[-1])) / BINS_PER_FWHM, least)), 1)
        starts.append(min(starts[-1] + step, last))
    return np.array(starts, dtype=np.intp)


def hats(n: int, spacing: float) -> NDArray[np.float64]:
    """Triangles `spacing` bins apart that add up to 1, shape (n_hats, n)."""
    knots = np.linspace(0, n - 1, max(int(n / spacing), 2) + 1)
    distance = np.abs(np.arange(n)[None, :] - knots[:, None]) / (knots[1] - knots[0])
    return np.asarray(np.maximum(1.0 - distance, 0.0))


def _self_folded(values: NDArray[np.float64]) -> NDArray[np.float64]:
    size = 1 << int(math.ceil(math.log2(2 * values.size)))
    spectrum = np.fft.rfft(values, size)
    return np.maximum(np.fft.irfft(spectrum * spectrum, size)[: 2 * values.size - 1], 0.0)
