"""The linear Poisson fit: non-negative where it must be, constrained where something is known beforehand.

Minimises the Poisson deviance (Cash, Astrophys. J. 228 (1979) 939; Baker & Cousins, Nucl. Instrum.
Methods 221 (1984) 437) plus a Gaussian constraint on each coefficient that has one. For a model that
is linear in its coefficients, re-weighted least squares with the *expected* variance as weight
converges to the maximum of the likelihood in a few steps.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import LinAlgError, cho_factor, cho_solve

_FLOOR = 0.02
"""Smallest expected count per channel; keeps empty regions from weighing infinitely much."""


@dataclass(frozen=True, eq=False)
class LinearProblem:
    """Columns and what is known of their coefficients.

    Attributes
    ----------
    columns : ndarray, shape (n_columns, n)
    bounded : ndarray of bool, shape (n_columns,)
        True where the coefficient must not be negative.
    prior, precision : ndarray, shape (n_columns,)
        Mean and 1/variance of the Gaussian constraint; precision 0 where there is none.
    coupling : ndarray, shape (n_columns, n_columns), or None
        Further quadratic penalty ``x @ coupling @ x / 2`` (smoothness of the continuum).
    """

    columns: NDArray[np.float64]
    bounded: NDArray[np.bool_]
    prior: NDArray[np.float64]
    precision: NDArray[np.float64]
    coupling: NDArray[np.float64] | None = None


@dataclass(frozen=True, eq=False)
class Solution:
    """Coefficients, expected counts and the inverse of the information of a linear Poisson fit."""

    coefficients: NDArray[np.float64]
    model: NDArray[np.float64]
    covariance: NDArray[np.float64]
    free: NDArray[np.bool_]
    deviance: float
    penalty: float

    @property
    def objective(self) -> float:
        """Deviance plus the constraints' share, the quantity that is compared between fits."""
        return self.deviance + self.penalty


def poisson_deviance(counts: NDArray[np.float64], model: NDArray[np.float64]) -> float:
    """``2 sum(m - n + n ln(n / m))``, with ``2 m`` where n is 0 (Baker & Cousins 1984)."""
    m = np.maximum(model, _FLOOR)
    seen = counts > 0
    logs = np.zeros_like(m)
    np.log(np.divide(counts, m, out=np.ones_like(m), where=seen), out=logs, where=seen)
    return float(2.0 * np.sum(m - counts + counts * logs))


def solve(
    problem: LinearProblem,
    counts: NDArray[np.float64],
    start: NDArray[np.float64] | None = None,
    *,
    inflation: NDArray[np.float64] | None = None,
    iterations: int = 6,
    tolerance: float = 1e-3,
) -> Solution:
    """Fit non-negative, constrained columns to Poisson counts.

    Parameters
    ----------
    problem : LinearProblem
    counts : ndarray, shape (n,)
    start : ndarray, shape (n,), optional
        Expected counts to start from; the counts themselves, lightly floored, if not given.
    inflation : ndarray, shape (n,), optional
        Factor >= 1 on the variance of each channel where the model is known to misfit.
    iterations : int
        At most so many re-weightings.
    tolerance : float
        Stop when the objective changes by less.

    Returns
    -------
    Solution
    """
    x = problem.columns
    model = np.maximum(counts if start is None else start, 1.0 if start is None else _FLOOR)
    extra = 1.0 if inflation is None else inflation
    last = np.inf
    coefficients = np.zeros(x.shape[0])
    free = np.ones(x.shape[0], dtype=bool)
    gram = np.empty((0, 0))
    for _ in range(iterations):
        weighted = x / (model * extra)
        gram = weighted @ x.T + np.diag(problem.precision)
        if problem.coupling is not None:
            gram += problem.coupling
        target = weighted @ counts + problem.precision * problem.prior
        coefficients, free = bounded_solve(gram, target, problem.bounded, free)
        model = np.maximum(coefficients @ x, _FLOOR)
        now = poisson_deviance(counts, model) + _penalty(problem, coefficients)
        if abs(last - now) < tolerance:
            break
        last = now
    return Solution(coefficients, model, _covariance(gram, free), free, poisson_deviance(counts, model),
                    _penalty(problem, coefficients))  # fmt: skip


def _penalty(problem: LinearProblem, x: NDArray[np.float64]) -> float:
    value = float(np.sum(problem.precision * (x - problem.prior) ** 2))
    return value if problem.coupling is None else value + float(x @ problem.coupling @ x)


def bounded_solve(
    gram: NDArray[np.float64], target: NDArray[np.float64], bounded: NDArray[np.bool_], free: NDArray[np.bool_]
) -> tuple[NDArray[np.float64], NDArray[np.bool_]]:
    """Minimise ``x G x / 2 - t x`` with ``x >= 0`` where `bounded`.

    Active-set method of Lawson & Hanson, Solving Least Squares Problems (1974), chapter 23, started
    from the set `free`.

    Returns
    -------
    x : ndarray, shape (n,)
    free : ndarray of bool, shape (n,)
        False where the bound holds.
    """
    scale = 1.0 / np.sqrt(np.maximum(np.diag(gram), 1e-300))
    g = gram * scale[:, None] * scale
    t = target * scale
    x, free = _feasible(g, t, bounded, free | ~bounded)
    stuck = np.zeros(t.size, dtype=bool)
    for _ in range(5 * t.size):
        push = t - g @ x
        wants = bounded & ~free & ~stuck & (push > 1e-7)
        if not wants.any():
            break
        released = int(np.argmax(np.where(wants, push, -np.inf)))
        free[released] = True
        x, free = _step_to_bound(x, free, bounded, g, t)
        if free[released]:
            stuck[:] = False
        else:  # its push was rounding noise
            stuck[released] = True
    return x * scale, free


def _feasible(
    g: NDArray[np.float64], t: NDArray[np.float64], bounded: NDArray[np.bool_], free: NDArray[np.bool_]
) -> tuple[NDArray[np.float64], NDArray[np.bool_]]:
    """Fix all that turn out negative, and repeat, until nothing bounded is negative."""
    while True:
        x = _restricted(g, t, free)
        negative = free & bounded & (x < 0)
        if not negative.any():
            return x, free
        free = free & ~negative


def _step_to_bound(
    x: NDArray[np.float64], free: NDArray[np.bool_], bounded: NDArray[np.bool_], g: NDArray[np.float64],
    t: NDArray[np.float64],
) -> tuple[NDArray[np.float64], NDArray[np.bool_]]:  # fmt: skip
    """Lawson & Hanson's inner loop: move towards the minimum of the free until a bound is met, fix it, and repeat."""
    while True:
        trial = _restricted(g, t, free)
        hit = free & bounded & (trial < 0)
        if not hit.any():
            return trial, free
        step = np.full(x.size, np.inf)
        step[hit] = x[hit] / np.maximum(x[hit] - trial[hit], 1e-300)
        x = x + float(step.min()) * (trial - x)
        free = free & ~(hit & ((step <= step.min()) | (x <= 1e-12)))
        x = np.where(free, x, 0.0)


def _restricted(g: NDArray[np.float64], t: NDArray[np.float64], free: NDArray[np.bool_]) -> NDArray[np.float64]:
    """Minimum with everything that is not free at 0."""
    x = np.zeros(t.size)
    index = np.flatnonzero(free)
    x[index] = _spd_solve(g[np.ix_(index, index)], t[index])
    return x


def _spd_solve(g: NDArray[np.float64], t: NDArray[np.float64]) -> NDArray[np.float64]:
    """Solve a symmetric positive system scaled to unit diagonal; a hair of ridge if it is singular."""
    for ridge in (1e-12, 1e-9, 1e-6):
        try:
            return np.asarray(cho_solve(cho_factor(g + ridge * np.eye(t.size), check_finite=False), t))
        except LinAlgError:
            continue
    return np.asarray(np.linalg.lstsq(g, t, rcond=1e-10)[0])


def _covariance(gram: NDArray[np.float64], free: NDArray[np.bool_]) -> NDArray[np.float64]:
    """Inverse information of the free coefficients, zero elsewhere."""
    index = np.flatnonzero(free)
    out = np.zeros_like(gram)
    out[np.ix_(index, index)] = covariance_of(gram[np.ix_(index, index)])
    return out


def covariance_of(gram: NDArray[np.float64]) -> NDArray[np.float64]:
    """Inverse of an information matrix, scaled to unit diagonal first."""
    scale = 1.0 / np.sqrt(np.maximum(np.diag(gram), 1e-300))
    g = gram * scale[:, None] * scale
    eye = np.eye(g.shape[0])
    for ridge in (1e-12, 1e-9, 1e-6):
        try:
            inverse = cho_solve(cho_factor(g + ridge * eye, check_finite=False), eye)
            return np.asarray(inverse * scale[:, None] * scale)
        except LinAlgError:
            continue
    return np.asarray(np.linalg.pinv(g, rcond=1e-10) * scale[:, None] * scale)
