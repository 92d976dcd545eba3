"""What a perfect analyst could know: the Cramer-Rao uncertainty of each series' area.

The analyst knows the shape of every true component, but neither the amplitudes, nor a smooth continuum
(13 hats), nor scale and width exactly; line-group shares are known to their published spread, offset and
gain to 10 eV and 0.1 per cent, the width to 5 per cent.
"""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np

from .atomic import Array

_HATS = 13


def scale_freedom(peaks: Array, energy_kev: Array, sigma_kev: Array) -> list[Array]:
    """Change of the peaks' counts by one standard deviation of offset, gain and width, each shape (n,)."""
    slope = np.gradient(peaks, energy_kev)
    bend = np.gradient(slope, energy_kev)
    return [0.010 * slope, 0.001 * energy_kev * slope, 0.05 * sigma_kev**2 * bend]


def cramer_rao(
    components: Mapping[str, Array], others: list[Array], loose: list[Array], mean: Array
) -> dict[str, float]:
    """Smallest possible standard uncertainty of each component's sum, counts.

    Parameters
    ----------
    components : mapping of ndarray, shape (n,)
        Mean counts of each series.
    others : list of ndarray, shape (n,)
        Further components with free amplitude (scatter).
    loose : list of ndarray, shape (n,)
        Changes of the mean by one standard deviation of what is known only so well (line-group shares,
        see `scale_freedom`).
    mean : ndarray, shape (n,)
    """
    n = mean.size
    names = [k for k, v in components.items() if v.sum() > 1e-3]
    columns = [components[k] / components[k].sum() for k in names]
    columns += [v / v.sum() for v in others if v.sum() > 1.0]
    columns += list(np.array([np.interp(np.arange(n), np.linspace(0, n - 1, _HATS), row) for row in np.eye(_HATS)]))
    known = np.concatenate([np.zeros(len(columns)), np.ones(len(loose))])
    design = np.array(columns + loose)
    information = (design / np.maximum(mean, 0.5)) @ design.T + np.diag(known)
    scale = 1.0 / np.sqrt(np.maximum(np.diag(information), 1e-30))
    covariance = np.linalg.pinv(information * scale[:, None] * scale, rcond=1e-12, hermitian=True)
    sigma = np.sqrt(np.maximum(np.diag(covariance), 0.0)) * scale
    return {k: float(sigma[i]) for i, k in enumerate(names)}
