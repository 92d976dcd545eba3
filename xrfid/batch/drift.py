"""Whether the energy scale has moved since the run's mean, estimated for one block of points.

The block's summed residual is fitted with the derivative of its own lines with respect to a shift at
6 keV and to a stretch around it; a shift that is significant and matters is taken over and the block
fitted again with columns drawn where its lines are.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from xrfid.batch.plan import Plan
from xrfid.fit.nuisance import GAIN_PIVOT_KEV

_SIGNIFICANT = 4.0
_MATTERS_KEV = 0.002
"""Shifts below 2 eV change no area that a point could show."""
_STEPS = 4
_MOST_KEV, _MOST_GAIN = 0.2, 0.02


@dataclass(frozen=True, slots=True)
class Drift:
    """Shift of a block's lines at 6 keV (keV) and per keV of distance from there, with uncertainties."""

    offset_kev: float = 0.0
    gain: float = 0.0
    offset_sigma_kev: float = np.inf
    gain_sigma: float = np.inf

    @property
    def matters(self) -> bool:
        """Whether a correction is called for."""
        offset = abs(self.offset_kev) > max(_SIGNIFICANT * self.offset_sigma_kev, _MATTERS_KEV)
        far = abs(self.gain) * GAIN_PIVOT_KEV
        return offset or far > max(_SIGNIFICANT * self.gain_sigma * GAIN_PIVOT_KEV, _MATTERS_KEV)

    @property
    def credible(self) -> bool:
        """Whether it is small enough to be a drift rather than a model that does not fit."""
        return abs(self.offset_kev) < _MOST_KEV and abs(self.gain) < _MOST_GAIN


def block_drift(plan: Plan, summed: NDArray[np.float64], n_points: int) -> tuple[Drift, Plan]:
    """Estimate the drift of a block.

    Parameters
    ----------
    plan : Plan
    summed : ndarray, shape (n_channels,)
        Sum of the block's spectra.
    n_points : int
        How many there are.

    Returns
    -------
    drift : Drift
    corrected : Plan
        The plan to fit the block with; `plan` itself if nothing moved.
    """
    if n_points == 0:
        return Drift(), plan
    mean = plan.grouping.sum(summed) / n_points
    found = _estimate(plan, mean, n_points)
    if not found.matters or not found.credible:
        return found, plan
    moved = plan
    for _ in range(_STEPS):
        moved = plan.shifted(found.offset_kev, found.gain)
        step = _estimate(moved, mean, n_points)
        found = Drift(
            found.offset_kev + step.offset_kev, found.gain + step.gain, step.offset_sigma_kev, step.gain_sigma
        )
        if not found.credible:
            return found, plan
        if abs(step.offset_kev) < 0.25 * _MATTERS_KEV:
            break
    return found, plan.shifted(found.offset_kev, found.gain)


def _estimate(plan: Plan, mean: NDArray[np.float64], n_points: int) -> Drift:
    """One linear step: the residual against the lines' derivatives, with all areas refitted."""
    areas = plan.grouped_projection @ mean
    n_lines = plan.columns.shape[0] - plan.n_continuum
    lines = np.maximum(areas[:n_lines], 0.0) @ plan.columns[:n_lines]
    centres = plan.grouping.centres_kev
    slope = -np.gradient(lines / np.diff(plan.edges_kev), centres) * np.diff(plan.edges_kev)
    moves = np.array([slope, slope * (centres - GAIN_PIVOT_KEV)])
    weighted = moves / plan.mean
    cross = weighted @ plan.columns.T
    information = weighted @ moves.T - cross @ plan.covariance @ cross.T
    scale = np.sqrt(np.maximum(np.diag(information), 1e-300))
    if not np.all(np.diag(information) > 1e-9 * np.einsum("ij,ij->i", weighted, moves)) or not lines.any():
        return Drift()
    raised = weighted @ (mean - areas @ plan.columns)
    inverse = np.linalg.inv(information / scale[:, None] / scale + 1e-9 * np.eye(2)) / scale[:, None] / scale
    offset, gain = inverse @ raised
    sigma = np.sqrt(np.diag(inverse) / n_points)
    return Drift(float(offset), float(gain), float(sigma[0]), float(sigma[1]))
