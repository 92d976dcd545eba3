"""The continuum's first shape: statistics-sensitive non-linear iterative peak clipping (SNIP).

Ryan, Clayton, Griffin, Sie & Cousens, Nucl. Instrum. Methods B 34 (1988) 396; decreasing window
after Morhac, Kliman, Matousek, Veselsky & Turzo, Nucl. Instrum. Methods A 401 (1997) 113.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

from xrfid.spectrum import EnergyScale, Resolution

HALF_WIDTH_IN_FWHM = 1.3
"""Clipping half-width: below 0.75 FWHM it eats peaks, above 1.5 it undercuts a curved continuum."""


def lls(counts: ArrayLike) -> NDArray[np.float64]:
    """Log-log-square-root transform ``ln(ln(sqrt(y + 1) + 1) + 1)``, for counts >= 0."""
    return np.asarray(np.log(np.log(np.sqrt(np.asarray(counts, dtype=float) + 1.0) + 1.0) + 1.0))


def inverse_lls(transformed: ArrayLike) -> NDArray[np.float64]:
    """Inverse of `lls`."""
    inner = np.exp(np.exp(np.asarray(transformed, dtype=float)) - 1.0) - 1.0
    return np.asarray(inner * inner - 1.0)


def snip(counts: ArrayLike, half_width: ArrayLike) -> NDArray[np.float64]:
    """Clip peaks off a spectrum.

    Parameters
    ----------
    counts : array_like, shape (n_channels,)
        Counts; smooth noisy spectra first (`smoothed`), or the result sits below their mean.
    half_width : int or array_like of int, shape (n_channels,)
        Largest half-width of the clipping window in channels, for each channel.

    Returns
    -------
    ndarray, shape (n_channels,)
        The continuum; never above the counts.
    """
    v = lls(np.maximum(np.asarray(counts, dtype=float), 0.0))
    widths = np.broadcast_to(np.asarray(half_width, dtype=int), v.shape)
    n = v.size
    for p in range(int(min(widths.max(initial=0), (n - 1) // 2)), 0, -1):
        middle = slice(p, n - p)
        mean = 0.5 * (v[: n - 2 * p] + v[2 * p :])
        clipped = np.minimum(v[middle], mean)
        v = np.concatenate([v[:p], np.where(widths[middle] >= p, clipped, v[middle]), v[n - p :]])
    return inverse_lls(v)


def smoothed(counts: NDArray[np.float64], width_channels: float) -> NDArray[np.float64]:
    """Running mean over an odd number of channels near `width_channels`, shape kept."""
    half = max(int(round((width_channels - 1.0) / 2.0)), 0)
    if half == 0:
        return counts
    total = np.concatenate([[0.0], np.cumsum(np.pad(counts, half, mode="edge"))])
    return np.asarray((total[2 * half + 1 :] - total[: -2 * half - 1]) / (2 * half + 1))


def continuum(counts: NDArray[np.float64], scale: EnergyScale, resolution: Resolution) -> NDArray[np.float64]:
    """SNIP continuum whose window follows the resolution along the spectrum.

    Parameters
    ----------
    counts : ndarray, shape (n_channels,)
    scale : EnergyScale
    resolution : Resolution

    Returns
    -------
    ndarray, shape (n_channels,)
    """
    energy = scale.energy_kev(np.arange(counts.size))
    fwhm = resolution.fwhm_kev(np.maximum(energy, 0.3)) / scale.gain_kev
    smooth = smoothed(counts, 0.5 * float(np.median(fwhm)))
    return snip(smooth, np.maximum(np.ceil(HALF_WIDTH_IN_FWHM * fwhm), 1).astype(int))
