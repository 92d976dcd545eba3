"""Decision thresholds and detection limits of every series in reach.

ISO 11929 (characteristic limits) in the form of Currie, Anal. Chem. 40 (1968) 586: decision
threshold ``y* = k u(0)``, detection limit ``y# = y* + k u(y#)``, with errors of the first and second
kind of 5 % (k = 1.645). The uncertainties come from the full covariance of the final model, so that
an overlap or a tolerance raises them.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from xrfid.fit.model import Fit
from xrfid.identify.select import score

K_95 = 1.6448536269514722
"""95 % quantile of the standard normal distribution."""


@dataclass(frozen=True, eq=False)
class CharacteristicLimits:
    """Limits of columns that a fit does not hold, counts, arrays of shape (n_columns,)."""

    estimate: NDArray[np.float64]
    sigma: NDArray[np.float64]
    decision_threshold: NDArray[np.float64]
    detection_limit: NDArray[np.float64]
    upper_limit: NDArray[np.float64]


def characteristic_limits(
    null: Fit, columns: NDArray[np.float64], counts: NDArray[np.float64], variance: NDArray[np.float64]
) -> CharacteristicLimits:
    """Limits of unit columns, shape (n_columns, n), against a fit without them.

    Parameters
    ----------
    variance : ndarray, shape (n,)
        Expected variance per group of channels without the columns, local misfit included.
    """
    found = score(null, columns, counts, variance)
    threshold = K_95 * found.sigma
    weight = columns / variance
    # variance that one count of the series itself adds to its own estimate
    own = np.einsum("ij,ij,ij->i", weight, weight, columns) * found.sigma**4
    # y# = y* + k sqrt(u0^2 + own y#), solved for y#
    limit = threshold + 0.5 * K_95**2 * own + K_95 * np.sqrt(
        (0.5 * K_95 * own) ** 2 + found.sigma**2 + own * threshold
    )
    upper = np.maximum(found.amplitude, 0.0) + K_95 * found.sigma
    return CharacteristicLimits(found.amplitude, found.sigma, threshold, limit, upper)
