"""The source's end point read off the spectrum, when nobody states the voltage.

At the Duane-Hunt limit the scattered continuum stops; beyond it only sum events remain.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

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
    for k in range(2 * _SIDE, level.size - 2):
        if above[k] >= _BEYOND * float(level.sum()):
            continue
        width = min(_SIDE, level.size - k)
        below, beyond = float(level[k - _SIDE : k].sum()) * width / _SIDE, float(level[k : k + width].sum())
        if below <= beyond:
            continue
        gain = _poisson_step(below, beyond)
        if gain > clearest:
            best, clearest = float(edges[k]), gain
    return float(np.clip(best, _LOWEST_KEV, _HIGHEST_KEV))


def _poisson_step(a: float, b: float) -> float:
    """Log likelihood ratio of two levels against one."""
    mean = 0.5 * (a + b)
    return a * float(np.log(a / mean)) + (b * float(np.log(b / mean)) if b > 0 else 0.0)
