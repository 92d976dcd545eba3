"""Decision thresholds and detection limits of every series in reach.

ISO 11929 (characteristic limits) in the form of Currie, Anal. Chem. 40 (1968) 586: decision
threshold ``y* = k u(0)``, detection limit ``y# = y* + k u(y#)``, with errors of the first and second
kind of 5 % (k = 1.645). The uncertainties come from the full covariance of the final model, so that
an overlap or a tolerance raises them.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from xrfid.fit.model import Fit
from xrfid.fit.solve import covariance_of
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
    return _limits(found.amplitude, found.sigma, columns, variance)


def limits_in_fit(
    fit: Fit, keys: Sequence[str], columns: NDArray[np.float64], own_counts: NDArray[np.float64],
    misfit: NDArray[np.float64],
) -> CharacteristicLimits:  # fmt: skip
    """Limits of series that the fit holds: uncertainties with their own counts taken away.

    Parameters
    ----------
    keys : sequence of str
        Names of the series, as in the fit's labels; they and their tolerances leave the model.
    columns : ndarray, shape (n_keys, n)
        Their unit columns.
    own_counts : ndarray, shape (n,)
        Counts that the fit gives them.
    misfit : ndarray, shape (n,)
        Factor on the variance.
    """
    stay = np.array([not (len(label) > 1 and label[1] in keys) for label in fit.labels])
    stay &= fit.solution.free
    variance = np.maximum(fit.variance - own_counts, 0.02) * misfit
    x = fit.problem.columns[stay]
    gram = (x / variance) @ x.T + np.diag(fit.problem.precision[stay])
    if fit.problem.coupling is not None:
        gram += fit.problem.coupling[np.ix_(stay, stay)]
    weighted = columns / variance
    cross = weighted @ x.T
    plain = np.einsum("ij,ij->i", weighted, columns)
    lost = np.einsum("ij,jk,ik->i", cross, covariance_of(gram), cross)
    sigma = 1.0 / np.sqrt(np.maximum(plain - lost, 1e-9 * plain))
    return _limits(np.zeros(sigma.size), sigma, columns, variance)


def _limits(
    estimate: NDArray[np.float64], sigma: NDArray[np.float64], columns: NDArray[np.float64],
    variance: NDArray[np.float64],
) -> CharacteristicLimits:  # fmt: skip
    threshold = K_95 * sigma
    weight = columns / variance
    # variance that one count of the series itself adds to its own estimate
    plain = np.einsum("ij,ij->i", weight, columns)
    own = np.einsum("ij,ij,ij->i", weight, weight, columns) / plain**2
    # y# = y* + k sqrt(u0^2 + own y#), solved for y#
    limit = threshold + 0.5 * K_95**2 * own + K_95 * np.sqrt((0.5 * K_95 * own) ** 2 + sigma**2 + own * threshold)
    upper = np.maximum(estimate, 0.0) + K_95 * sigma
    return CharacteristicLimits(estimate, sigma, threshold, limit, upper)
