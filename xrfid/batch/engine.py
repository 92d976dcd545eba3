"""The fit of one block of points: two matrix products, a goodness of fit, and care for what does not fit.

Spectra are turned into 32-bit numbers a few hundred at a time, so that each stays in the processor's
cache while everything that needs it is done: bands, sum, maximum, areas, variances.
"""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from xrfid.batch.drift import Drift, block_drift
from xrfid.batch.plan import Plan
from xrfid.fit.solve import bounded_solve

_ROWS = 256
_OWN_SHAPE_COUNTS = np.float32(100.0)
"""A point of so many counts is trusted as much as the mean spectrum to say where its counts lie."""
NEGATIVE_SIGMA = -5.0
"""An area this far below zero is no noise: the point is solved again with areas >= 0."""

GOOD, NOT_FINITE, NEGATIVE, UNREADABLE = 0, 1, 2, 3
STATUS = {GOOD: "good", NOT_FINITE: "not finite", NEGATIVE: "negative counts", UNREADABLE: "unreadable"}
"""What can be the matter with a point; its results are NaN unless it is good."""


@dataclass(eq=False)
class BlockResult:
    """Everything one block contributes; arrays are filled row by row.

    Attributes
    ----------
    area, sigma : ndarray, shape (n_series, n)
    chi2, residual, residual_kev : ndarray, shape (n,)
        Reduced chi-square; largest excess over the model in standard deviations, and where.
    status : ndarray, shape (n,)
    summed, highest : ndarray, shape (n_channels,)
        Sum and maximum over the block's good points.
    holder : ndarray of int, shape (n_channels,)
        Row that holds the maximum, where it exceeds what was known before; else -1.
    drift : Drift
    """

    area: NDArray[np.float32]
    sigma: NDArray[np.float32]
    chi2: NDArray[np.float32]
    residual: NDArray[np.float32]
    residual_kev: NDArray[np.float32]
    status: NDArray[np.uint8]
    summed: NDArray[np.float64]
    highest: NDArray[np.float32]
    holder: NDArray[np.int64]
    drift: Drift = field(default_factory=Drift)

    @classmethod
    def empty(cls, n: int, plan: Plan, known: NDArray[np.float32]) -> BlockResult:
        """Return a result to be filled."""
        area, sigma = np.full((2, plan.n_series, n), np.nan, np.float32)
        chi2, residual, residual_kev = np.full((3, n), np.nan, np.float32)
        status, summed = np.zeros(n, np.uint8), np.zeros(plan.n_channels)
        nobody = np.full(plan.n_channels, -1, np.int64)
        return cls(area, sigma, chi2, residual, residual_kev, status, summed, known.copy(), nobody)


@contextmanager
def one_blas_thread() -> Iterator[None]:
    """Blocks are what runs in parallel; inside a block the matrix library keeps to one thread."""
    from threadpoolctl import threadpool_limits

    with threadpool_limits(limits=1, user_api="blas"):
        yield


def fit_block(
    plan: Plan, layers: list[NDArray[Any]], lost: NDArray[np.bool_], known: NDArray[np.float32], signed: bool
) -> BlockResult:
    """Fit the points of one block.

    Parameters
    ----------
    plan : Plan
    layers : list of ndarray, each of shape (n, n_channels)
        Counts, to be added up.
    lost : ndarray of bool, shape (n,)
        Points that could not be read.
    known : ndarray, shape (n_channels,)
        Maximum over other points as far as it is known; saves looking for who holds it.
    signed : bool
        Whether counts could be negative or not finite.
    """
    result = BlockResult.empty(lost.size, plan, known)
    result.status[lost] = UNREADABLE
    for rows, y, bands in _portions(plan, layers, result, signed):
        _accumulate(y, rows, result)
        _fit_rows(plan, y, bands, rows, result)
    good = result.status == GOOD
    result.drift, moved = block_drift(plan, result.summed, int(good.sum()))
    if moved is not plan:
        for rows, y, bands in _portions(plan, layers, result, signed):
            _fit_rows(moved, y, bands, rows, result)
    for values in (result.area.T, result.sigma.T, result.chi2, result.residual, result.residual_kev):
        values[~good] = np.nan
    return result


def add_up(layers: list[NDArray[Any]], lost: NDArray[np.bool_], signed: bool) -> tuple[NDArray[np.float64], int]:
    """Sum of a block's good spectra, shape (n_channels,), and their number."""
    status = np.where(lost, UNREADABLE, GOOD).astype(np.uint8)
    buffer = np.zeros((_ROWS, layers[0].shape[1]), np.float32)
    summed = np.zeros(layers[0].shape[1])
    for start in range(0, lost.size, _ROWS):
        rows = slice(start, min(start + _ROWS, lost.size))
        y = buffer[: rows.stop - start]
        _load(layers, rows, y, status[rows], signed)
        summed += np.ones(len(y), np.float32) @ y
    return summed, int((status == GOOD).sum())


def _portions(plan: Plan, layers: list[NDArray[Any]], result: BlockResult, signed: bool
              ) -> Iterator[tuple[slice, NDArray[np.float32], NDArray[np.float32]]]:  # fmt: skip
    """Yield a few hundred spectra at a time, as 32-bit numbers, with their bands."""
    buffer = np.zeros((_ROWS, plan.n_padded), np.float32)
    ones = np.ones(plan.band, np.float32)
    n, inside = result.status.size, slice(*plan.bands)
    for start in range(0, n, _ROWS):
        rows = slice(start, min(start + _ROWS, n))
        y = buffer[: rows.stop - start]
        _load(layers, rows, y[:, : plan.n_channels], result.status[rows], signed)
        bands = (y.reshape(-1, plan.band) @ ones).reshape(y.shape[0], -1)
        yield rows, y, bands[:, inside]


def _load(layers: list[NDArray[Any]], rows: slice, y: NDArray[np.float32], status: NDArray[np.uint8],
          signed: bool) -> None:  # fmt: skip
    """Add the layers up as 32-bit numbers; bad spectra are marked and zero."""
    with np.errstate(over="ignore", invalid="ignore"):
        np.copyto(y, layers[0][rows], casting="unsafe")
        for layer in layers[1:]:
            y += layer[rows]
    if signed:
        _mark(y, status)
    if status.any():
        y[status != GOOD] = 0.0


def _mark(y: NDArray[np.float32], status: NDArray[np.uint8]) -> None:
    """Find spectra with counts that are not finite or negative."""
    lowest, highest = y.min(axis=1), y.max(axis=1)
    good = status == GOOD
    status[good & (lowest < 0)] = NEGATIVE
    status[good & ~(np.isfinite(lowest) & np.isfinite(highest))] = NOT_FINITE


def _accumulate(y: NDArray[np.float32], rows: slice, result: BlockResult) -> None:
    """Add to sum and maximum."""
    inner = y[:, : result.summed.size]
    result.summed += np.ones(len(y), np.float32) @ inner
    highest = inner.max(axis=0)
    raised = np.flatnonzero(highest > result.highest)
    result.highest[raised] = highest[raised]
    result.holder[raised] = rows.start + np.argmax(inner[:, raised], axis=0)


def _fit_rows(plan: Plan, y: NDArray[np.float32], bands: NDArray[np.float32], rows: slice, result: BlockResult) -> None:
    """Areas, uncertainties and goodness of fit of some spectra."""
    coefficients = y @ plan.projection
    area = coefficients[:, : plan.n_series]
    variance = _variances(plan, coefficients, bands.sum(axis=1, keepdims=True))
    below = (area < NEGATIVE_SIGMA * np.sqrt(variance)).any(axis=1)
    for i in np.flatnonzero(below):
        coefficients[i] = _not_negative(plan, coefficients[i])
    result.area[:, rows] = area.T
    result.sigma[:, rows] = np.sqrt(variance + (plan.systematic.astype(np.float32) * area) ** 2).T
    _judge(plan, coefficients, bands, rows, result)


def _variances(plan: Plan, coefficients: NDArray[np.float32], counts: NDArray[np.float32]) -> NDArray[np.float32]:
    """Poisson variances of the areas, shape (n, n_series), from counts per point, shape (n, 1).

    The point's own expectation and that of the mean spectrum's shape are averaged with the weights of
    `_OWN_SHAPE_COUNTS`, and one count is added, so that few counts do not look like certainty.
    """
    k = plan.n_series
    series = np.maximum(coefficients[:, :k], 0.0)
    own = np.maximum(series @ plan.variances[:k] + coefficients[:, k:] @ plan.variances[k:], 0.0)
    usual = plan.variance_per_count * counts
    mixed = (counts * own + _OWN_SHAPE_COUNTS * usual) / (counts + _OWN_SHAPE_COUNTS)
    return np.asarray(mixed + plan.variance_per_count)


def _not_negative(plan: Plan, coefficients: NDArray[np.float32]) -> NDArray[np.float64]:
    """Solve one point again with areas >= 0; its counts enter through the free solution alone."""
    bounded = np.arange(coefficients.size) < plan.n_series
    free = ~(bounded & (coefficients < 0))
    target = plan.gram @ coefficients.astype(float)
    return bounded_solve(plan.gram, target, bounded, free)[0]


def _judge(plan: Plan, coefficients: NDArray[np.float32], bands: NDArray[np.float32], rows: slice,
           result: BlockResult) -> None:  # fmt: skip
    """Reduced chi-square over bands, and the largest excess of two neighbouring bands."""
    model = coefficients @ plan.band_columns
    total = bands.sum(axis=1, keepdims=True)
    least = (0.1 * plan.band_mean / plan.band_mean.sum()) * total + np.float32(0.02)
    expected = np.maximum(model, least)
    result.chi2[rows] = ((bands - model) ** 2 / expected).sum(axis=1) / np.float32(plan.freedom)
    # Anscombe's square root makes the spread of small counts nearly 1
    seen = np.sqrt(bands[:, 1:] + bands[:, :-1] + np.float32(0.375))
    z = 2.0 * (seen - np.sqrt(expected[:, 1:] + expected[:, :-1] + np.float32(0.375)))
    at = z.argmax(axis=1)
    result.residual[rows] = z[np.arange(len(z)), at]
    result.residual_kev[rows] = plan.band_kev[at]
