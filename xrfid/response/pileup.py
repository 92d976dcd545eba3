"""Photons that arrive too close together are counted as one: sum peaks and partial overlaps.

For random arrivals at true rates the pairs follow from the recorded spectrum's own convolution on
the energy axis; one pulse-pair time serves all sums (common practice; derivation in the docs).
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy.signal import fftconvolve

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
    both = np.maximum(fftconvolve(seen, seen), 0.0)
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


def partial_overlap_spectrum(pairs: NDArray[np.float64], counts: NDArray[np.float64], scale: EnergyScale,
                             n_steps: int = 12) -> NDArray[np.float64]:  # fmt: skip
    """Spectrum of pairs of which the second pulse adds only a part of its height.

    Simple electronics take the maximum of two shaped pulses that overlap on their flanks: the
    recorded sum lies anywhere between the larger pulse and the full sum. Taken as flat in the part
    added, which gives the broad humps between E and 2E that such set-ups show.

    Returns
    -------
    ndarray, shape (n_channels,)
        Same units as `pair_spectrum`, the part added uniform between 0 and 1.
    """
    n = counts.size
    energy = scale.energy_kev(np.arange(n))
    seen = np.where(energy > 0, counts, 0.0)
    out = np.zeros(n)
    edges = scale.edges_kev(n)
    cumulative = np.concatenate([[0.0], np.cumsum(seen)])
    for part in (np.arange(n_steps) + 0.5) / n_steps:
        # the second pulse's spectrum squeezed to `part` of its energy
        squeezed = np.diff(np.interp(edges / part, edges, cumulative))
        out += pair_like(seen, squeezed, scale)
    return np.asarray(out / n_steps * (pairs.sum() / max(out.sum() / n_steps, 1e-300)))


def pair_like(first: NDArray[np.float64], second: NDArray[np.float64], scale: EnergyScale) -> NDArray[np.float64]:
    """Convolution of two spectra on the energy axis, shape (n_channels,)."""
    n = first.size
    both = np.maximum(fftconvolve(first, second), 0.0)
    start = int(round(scale.offset_kev / scale.gain_kev))
    out = np.zeros(n)
    index = np.arange(both.size) + start
    ok = (index >= 0) & (index < n)
    out[index[ok]] = both[ok]
    return out
