"""Photons that arrive too close together are counted as one: sum peaks and partial overlaps.

For random arrivals at true rates the pairs follow from the recorded spectrum's own convolution on
the energy axis; one pulse-pair time serves all sums (common practice; derivation in the docs).
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy.fft import irfft, next_fast_len, rfft

from xrfid.spectrum import EnergyScale


def pair_spectrum(counts: NDArray[np.float64], scale: EnergyScale) -> NDArray[np.float64]:
    """Spectrum of all ordered pairs: the counts convolved with themselves on the energy axis.

    Parameters
    ----------
    counts : ndarray, shape (n_channels,)
    scale : EnergyScale
        A quadratic term is neglected over the width of a peak.

    Returns
    -------
    ndarray, shape (n_channels,)
        Times ``tau / live_time`` this is the expected number of piled-up events per channel.
    """
    n = counts.size
    positive = scale.energy_kev(np.arange(n)) > 0
    seen = np.where(positive, counts, 0.0)
    both = _convolved(seen, seen)
    index = np.arange(both.size)
    # the pair of channels (i, j) has energy E_i + E_j; with a linear scale that is one sum of indices
    energy = 2.0 * scale.offset_kev + scale.gain_kev * index
    if scale.quadratic_kev:
        half = index / 2.0
        energy = 2.0 * scale.energy_kev(half)
    place = scale.channel(energy)
    lower = np.floor(place).astype(int)
    share = place - lower
    out = np.zeros(n)
    for shift, weight in ((0, 1.0 - share), (1, share)):
        at = lower + shift
        ok = (at >= 0) & (at < n)
        out += np.bincount(at[ok], both[ok] * weight[ok], minlength=n)[:n]
    return out


def primary_spectrum(counts: NDArray[np.float64], scale: EnergyScale, per_pair: float) -> NDArray[np.float64]:
    """The recorded counts less the pairs among them, so that pairs of pairs are not counted twice.

    Parameters
    ----------
    per_pair : float
        Pulse-pair time over live time, as found so far; 0 leaves the counts as they are.
    """
    if per_pair <= 0:
        return counts
    return np.asarray(np.maximum(counts - per_pair * pair_spectrum(counts, scale), 0.0))


PARTS = np.array([0.1, 0.25, 0.4, 0.55, 0.7, 0.85])
"""Shares of the second pulse's height at which partial overlaps are described."""
_FINE = 3


def partial_overlaps(counts: NDArray[np.float64], scale: EnergyScale) -> NDArray[np.float64]:
    """Spectra of pairs of which the second pulse adds only a part of its height.

    Simple electronics take the maximum of two shaped pulses that overlap on their flanks: what is
    recorded lies anywhere between the larger pulse and the full sum, as humps between E and 2E. How
    often each part occurs depends on the electronics; it is described by triangular weights around
    `PARTS`.

    Returns
    -------
    ndarray, shape (6, n_channels)
        Same units as `pair_spectrum`; one row a part.
    """
    n = counts.size
    edges = scale.edges_kev(n)
    seen = np.where(scale.energy_kev(np.arange(n)) > 0, counts, 0.0)
    cumulative = np.concatenate([[0.0], np.cumsum(seen)])
    step = float(PARTS[1] - PARTS[0])
    squeezed = np.zeros((PARTS.size, n))
    for i, middle in enumerate(PARTS):
        for k in range(-_FINE + 1, _FINE):
            part, weight = middle + step * k / _FINE, (1.0 - abs(k) / _FINE) / _FINE
            if part > 0.02:
                squeezed[i] += weight * np.diff(np.interp(edges / part, edges, cumulative, left=0.0))
    both = _convolved(squeezed, seen)
    start = round(scale.offset_kev / scale.gain_kev)
    out = np.zeros((PARTS.size, n))
    index = np.arange(both.shape[1]) + start
    inside = (index >= 0) & (index < n)
    out[:, index[inside]] = both[:, inside]
    return out


def _convolved(first: NDArray[np.float64], second: NDArray[np.float64]) -> NDArray[np.float64]:
    """Convolution along the last axis, by Fourier transforms; never negative."""
    n = first.shape[-1] + second.shape[-1] - 1
    size = next_fast_len(n, real=True)
    both = irfft(rfft(first, size) * rfft(second, size), size)[..., :n]
    return np.asarray(np.maximum(both, 0.0))
