"""Peak search on bare counts: where, how large, how wide, how sure, with no energy scale needed.

Smoothed second difference after Mariscotti, Nucl. Instrum. Methods 50 (1967) 309, at a ladder of widths, because
the width is not known either; where counts are few, the significance is the likelihood ratio for two Poisson
counts (Li & Ma, Astrophys. J. 272 (1983) 317, eq. 17) of the peak's middle against its two flanks.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from xrfid.spectrum import FWHM_PER_SIGMA

THRESHOLD = 4.5
"""Significance asked of a peak: one false one in about a hundred spectra of 2048 channels (Gaussian tails)."""
FEW_COUNTS = 10.0
"""Below this many counts a channel the likelihood ratio replaces the Gaussian significance."""
_PLAIN = 8.0
"""Significance of a peak whose own width is measured to about a tenth."""
_LADDER_STEP = 1.35
_FINEST_FWHM, _WIDEST_FWHM = 1.5, 260.0
_TAPS_FWHM = 8.0
"""Spectra are summed into runs so that the filter's FWHM stays below this many entries."""
CHANNEL_VARIANCE = FWHM_PER_SIGMA**2 / 12.0
"""What a channel's own width adds to a measured FWHM squared, channels squared."""


@dataclass(frozen=True, slots=True)
class Peak:
    """A peak: position and FWHM in channels, area and its standard uncertainty in counts, significance in sigma."""

    channel: float
    area: float
    sigma: float
    significance: float
    fwhm: float
    channel_sigma: float


@dataclass(frozen=True, slots=True)
class Widths:
    """FWHM along the spectrum, ``fwhm**2 = square + slope * channel`` in channels, as in any Fano-limited detector."""

    square: float
    slope: float

    def fwhm(self, channel: NDArray[np.float64] | float) -> NDArray[np.float64]:
        """FWHM in channels at (fractional) channels, any shape."""
        return np.sqrt(np.maximum(self.square + self.slope * np.asarray(channel, dtype=float), 0.35))


def find_peaks(counts: NDArray[np.float64], threshold: float = THRESHOLD) -> tuple[list[Peak], Widths]:
    """Find the peaks of a spectrum, the most significant first, and how wide they are along it.

    First the few peaks whose curvature is plain at some width tell the width; then the whole spectrum
    is searched once more with a filter that follows it.

    Parameters
    ----------
    counts : ndarray, shape (n_channels,)
    threshold : float, optional
        Least significance, standard deviations.

    Returns
    -------
    peaks : list of Peak
    widths : Widths
    """
    plain = [p for p in _plain_peaks(counts) if p.area > 0]
    widths = width_model(plain)
    found: list[Peak] = []
    edges = _zones(counts.size, widths)
    for low, high, fwhm in edges:
        step = max(int(fwhm / _TAPS_FWHM), 1)
        margin = int(5 * fwhm) + 3
        first, last = max(low - margin, 0), min(high + margin, counts.size)
        for place, z in _maxima(_in_runs(counts[first:last], step), fwhm / step, threshold):
            channel = first + (place + 0.5) * step - 0.5
            if low - 0.5 <= channel < high - 0.5:
                found.append(_fitted(counts, channel, float(widths.fwhm(channel)), z))
    return sorted(found, key=lambda p: -p.significance), widths


def _plain_peaks(counts: NDArray[np.float64]) -> list[Peak]:
    """Peaks with plain curvature, each at the narrowest width that shows it, with their own widths."""
    kept: list[Peak] = []
    for fwhm in _ladder(counts.size):
        step = max(int(fwhm / _TAPS_FWHM), 1)
        for place, z in _maxima(_in_runs(counts, step), fwhm / step, _PLAIN):
            channel = (place + 0.5) * step - 0.5
            if any(abs(channel - k.channel) < 0.9 * max(fwhm, k.fwhm) for k in kept):
                continue
            peak = _fitted(counts, channel, fwhm, z)
            for _ in range(5):
                if peak.area <= 0 or peak.fwhm < 1.15 * fwhm:
                    break
                fwhm_now = peak.fwhm
                peak = _fitted(counts, peak.channel, fwhm_now, z)
                if peak.fwhm < 1.15 * fwhm_now:
                    break
            if all(abs(peak.channel - k.channel) > 0.6 * max(peak.fwhm, k.fwhm) for k in kept):
                kept.append(peak)
    return sorted(kept, key=lambda p: -p.area / max(p.sigma, 1e-9))


def _zones(n_channels: int, widths: Widths) -> list[tuple[int, int, float]]:
    """Cut the spectrum into zones within which the FWHM changes by less than a tenth."""
    zones, low = [], 0
    while low < n_channels:
        fwhm = float(widths.fwhm(low))
        high = n_channels
        if widths.slope > 0:
            high = min(n_channels, low + max(int(0.2 * fwhm**2 / widths.slope), 16))
        zones.append((low, high, 1.05 * fwhm))
        low = high
    return zones


def width_model(peaks: list[Peak]) -> Widths:
    """Return how the FWHM grows along the spectrum, from the strong peaks' own widths.

    Blends are wider than lines, never narrower, so that the narrower peaks decide.
    """
    good = [p for p in peaks if p.area > 8.0 * p.sigma][:12] or peaks[:3]
    if not good:
        return Widths(16.0, 0.0)
    square = np.array([max(p.fwhm**2 - CHANNEL_VARIANCE, 0.3) for p in good])
    at = np.array([p.channel for p in good])
    weight = np.array([math.sqrt(p.area / p.sigma) for p in good])
    best, best_loss = Widths(float(np.median(square)), 0.0), np.inf
    for i in range(len(good)):
        for j in range(i):
            if abs(at[i] - at[j]) < 4.0 * math.sqrt(max(square[i], square[j])):
                continue
            slope = (square[i] - square[j]) / (at[i] - at[j])
            if slope < 0 or square[i] - slope * at[i] < 0:
                continue
            ratio = np.log(square / np.maximum(square[i] + slope * (at - at[i]), 0.1))
            loss = float(np.sum(weight * np.where(ratio > 0, np.minimum(ratio, 0.5), -3.0 * ratio)))
            if loss < best_loss:
                best, best_loss = Widths(float(square[i] - slope * at[i]), float(slope)), loss
    if not np.isfinite(best_loss):
        return Widths(float(np.average(square, weights=weight)), 0.0)
    return best


def _ladder(n_channels: int) -> NDArray[np.float64]:
    widest = min(_WIDEST_FWHM, n_channels / 12.0)
    n = max(int(math.log(max(widest, 3.0) / _FINEST_FWHM) / math.log(_LADDER_STEP)) + 1, 2)
    return np.asarray(_FINEST_FWHM * _LADDER_STEP ** np.arange(n))


def _in_runs(counts: NDArray[np.float64], step: int) -> NDArray[np.float64]:
    whole = counts.size // step * step
    return np.asarray(counts[:whole].reshape(-1, step).sum(axis=1))


def _kernel(fwhm: float) -> NDArray[np.float64]:
    """Minus a Gaussian's second derivative, zero in sum: what a smoothed second difference tends to."""
    sigma = fwhm / FWHM_PER_SIGMA
    half = max(int(math.ceil(3.2 * sigma)), 2)
    x = np.arange(-half, half + 1) / sigma
    kernel = (1.0 - x * x) * np.exp(-0.5 * x * x)
    return np.asarray(kernel - kernel.mean())


def _maxima(counts: NDArray[np.float64], fwhm: float, threshold: float) -> list[tuple[float, float]]:
    """Places and significances of the maxima of the second difference."""
    kernel = _kernel(fwhm)
    half = kernel.size // 2
    padded = np.pad(counts, half, mode="edge")
    signal = np.convolve(padded, kernel, mode="valid")
    variance = np.convolve(padded, kernel**2, mode="valid")
    ratio = signal / np.sqrt(np.maximum(variance, np.sum(kernel**2) * 0.3))
    ratio[:half] = ratio[-half:] = 0.0  # edges are no peaks
    inner = ratio[1:-1]
    top = np.flatnonzero((inner > threshold) & (inner >= ratio[:-2]) & (inner > ratio[2:])) + 1
    sums = np.concatenate([[0.0], np.cumsum(counts)])
    out = []
    for i in top:
        z = float(ratio[i])
        if counts[max(i - half, 0) : i + half + 1].mean() < FEW_COUNTS:
            z = min(z, _few_counts(sums, int(i), fwhm))
            if z < threshold:
                continue
        a, b, c = ratio[i - 1], ratio[i], ratio[i + 1]
        bend = a - 2.0 * b + c
        out.append((float(i + (0.5 * (a - c) / bend if bend < 0 else 0.0)), z))
    return out


def _few_counts(sums: NDArray[np.float64], i: int, fwhm: float) -> float:
    """Li & Ma's significance of the window of one FWHM around `i` over its two flanks."""
    half = max(int(round(0.5 * fwhm)), 0)
    low, high = max(i - half, 0), min(i + half + 1, sums.size - 1)
    far_low, far_high = max(low - 2 * half - 1, 0), min(high + 2 * half + 1, sums.size - 1)
    on = sums[high] - sums[low]
    off = sums[low] - sums[far_low] + sums[far_high] - sums[high]
    off_width = (low - far_low) + (far_high - high)
    if on <= 0 or off_width <= 0:
        return 0.0
    share = (high - low) / off_width
    if on <= share * off:
        return 0.0
    term = on * math.log((1 + share) / share * on / (on + off))
    if off > 0:
        term += off * math.log((1 + share) * off / (on + off))
    return math.sqrt(max(2.0 * term, 0.0))


def refit(counts: NDArray[np.float64], peak: Peak) -> Peak:
    """Return a peak with position, area and width from a fit; area 0 if it does not hold."""
    first = _fitted(counts, peak.channel, peak.fwhm, peak.significance)
    if first.area > 0 and first.fwhm > 1.15 * peak.fwhm:  # the window was too narrow
        return _fitted(counts, first.channel, first.fwhm, peak.significance)
    return first


def _fitted(counts: NDArray[np.float64], channel: float, fwhm: float, significance: float) -> Peak:
    """Fit a Gaussian on a straight line around a peak (Gauss-Newton, weights from the counts).

    A peak that the fit cannot hold has area 0.
    """
    lost = Peak(channel, 0.0, 0.0, significance, fwhm, fwhm)
    reach = max(1.15 * fwhm, 2.5)
    low, high = max(int(channel - reach), 0), min(int(channel + reach) + 2, counts.size)
    step = max((high - low) // 30, 1)
    y = _in_runs(counts[low:high], step)
    x = low - channel + (np.arange(y.size) + 0.5) * step - 0.5
    if y.size < 5:
        return lost
    weight = 1.0 / (_box(y) + 1.0)
    centre, sigma, area = 0.0, fwhm / FWHM_PER_SIGMA, 0.0
    for turn in range(7):
        u = (x - centre) / sigma
        g = step * np.exp(-0.5 * u * u) / (sigma * math.sqrt(2.0 * math.pi))
        design = np.stack([g, np.ones_like(x), x, area * g * u / sigma, area * g * (u * u - 1.0) / sigma])
        if turn == 0:
            design = design[:3]
        normal = (design * weight) @ design.T
        normal[np.diag_indices_from(normal)] *= 1.0 + 1e-9
        covariance = np.linalg.pinv(normal, hermitian=True)
        solved = covariance @ (design @ (weight * y))
        area = float(solved[0])
        if area <= 0:
            return lost
        if turn:
            limit = 0.3 * sigma
            centre += float(np.clip(solved[3], -limit, limit))
            sigma = float(np.clip(sigma + np.clip(solved[4], -limit, limit), 0.3, 2.2 * fwhm / FWHM_PER_SIGMA))
    if abs(centre) > 0.8 * fwhm:
        return lost
    return Peak(channel + centre, area, math.sqrt(covariance[0, 0]), significance,
                sigma * FWHM_PER_SIGMA, math.sqrt(covariance[3, 3]))  # fmt: skip


def _box(y: NDArray[np.float64]) -> NDArray[np.float64]:
    """Mean of three neighbours, so that an empty channel does not get all the weight."""
    padded = np.pad(y, 1, mode="edge")
    return np.asarray((padded[:-2] + padded[1:-1] + padded[2:]) / 3.0)
