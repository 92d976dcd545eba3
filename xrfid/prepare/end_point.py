"""The source's end point read off the spectrum, when nobody states the voltage.

At the Duane-Hunt limit the scattered continuum stops; beyond it only sum events remain.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from xrfid.response.scatter import ELECTRON_REST_KEV
from xrfid.spectrum import EnergyScale

_STEP_KEV = 0.5
_SIDE = 4
_BEYOND = 2e-3
"""Share of all counts that may lie beyond the end (sum events)."""
_CLEAR = 4.0
_LOWEST_KEV, _HIGHEST_KEV = 5.0, 150.0


def end_point(counts: NDArray[np.float64], scale: EnergyScale) -> float:
    """Estimate the highest photon energy of the source, keV.

    The steepest step of the continuum's upper end; where the recorded range ends before the continuum does, or no
    step is clear, a little more than the highest energy that still holds counts.

    Parameters
    ----------
    counts : ndarray, shape (n_channels,)
    scale : EnergyScale

    Returns
    -------
    float
        Between 5 and 150 keV; good to 10 per cent for spectra with a visible end.
    """
    energy = scale.energy_kev(np.arange(counts.size))
    edges = np.arange(1.0, max(float(energy[-1]), 4.0), _STEP_KEV)
    level = np.histogram(energy, edges, weights=counts)[0]
    above = np.cumsum(level[::-1])[::-1]
    filled = np.flatnonzero(above > max(3.0, 1e-4 * float(level.sum())))
    highest = float(edges[filled[-1] + 1]) if filled.size else _LOWEST_KEV
    best, clearest = 1.05 * highest, _CLEAR
    if not stop_channel(counts)[1]:  # the recorded range ends before the continuum does
        return float(np.clip(best, _LOWEST_KEV, _HIGHEST_KEV))
    for k in range(2 * _SIDE, level.size - 2):
        if above[k] >= _BEYOND * float(level.sum()):
            continue
        width = min(_SIDE, level.size - k)
        below, beyond = float(level[k - _SIDE : k].sum()) * width / _SIDE, float(level[k : k + width].sum())
        if below <= beyond:
            continue
        gain = _poisson_step(below, beyond)
        if gain > clearest:
            # between the edge of coherent scatter and that of incoherent scatter through 90 degrees
            edge = float(edges[k])
            best, clearest = edge / (1.0 - 0.5 * edge / ELECTRON_REST_KEV), gain
    return float(np.clip(best, _LOWEST_KEV, _HIGHEST_KEV))


def stop_channel(counts: NDArray[np.float64]) -> tuple[float, bool]:
    """Channel above which next to nothing lies, and whether the recorded range goes visibly beyond it."""
    n = without_overflow(counts)
    above = np.cumsum(counts[:n][::-1])[::-1]
    filled = np.flatnonzero(above > max(3.0, 1e-4 * float(above[0])))
    stop = int(filled[-1]) if filled.size else n - 1
    return float(stop), stop < 0.96 * n


def without_overflow(counts: NDArray[np.float64]) -> int:
    """Number of channels less the last one if overflow counts pile up in it."""
    n = counts.size
    return n - 1 if n > 64 and counts[n - 1] > 5.0 * (counts[n - 8 : n - 1].max() + 3.0) else n


def end_cost(stop_kev: NDArray[np.float64], visible: bool, end_kev: float | None) -> NDArray[np.float64]:
    """What it costs, in deviance, if the spectrum stops at an energy that the source's end does not explain.

    At usual numbers of counts spectra stop at 0.8 to 1.2 times the end point: earlier where counts are few, later
    where sum events reach beyond it. Without a stated end point, below 8 keV is unusual.

    Parameters
    ----------
    stop_kev : ndarray
        Energies at which the spectrum stops, any shape.
    visible : bool
        Whether the recorded range goes on beyond; if not, stopping early means nothing.
    end_kev : float or None
    """
    stop = np.log(np.maximum(stop_kev, 0.1))
    if end_kev is None:
        early = np.maximum(np.log(8.0) - stop, 0.0) / 0.3 if visible else np.zeros_like(stop)
        return np.asarray(np.minimum(15.0 * early, 60.0))
    early = np.maximum(np.log(0.75 * end_kev) - stop, 0.0) if visible else np.zeros_like(stop)
    late = np.maximum(stop - np.log(1.3 * end_kev), 0.0)
    return np.asarray(np.minimum(20.0 * (early / 0.15) ** 2 + 20.0 * (late / 0.2) ** 2, 200.0))


def _poisson_step(a: float, b: float) -> float:
    """Log likelihood ratio of two levels against one."""
    mean = 0.5 * (a + b)
    return a * float(np.log(a / mean)) + (b * float(np.log(b / mean)) if b > 0 else 0.0)
