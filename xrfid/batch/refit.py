"""Points that the shared weights do not suit, fitted again one by one with everything the sum's fit has."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from xrfid.fit.model import Fit, fit_series
from xrfid.identify.work import Work
from xrfid.response.series import SeriesKey


@dataclass(frozen=True, eq=False)
class Refits:
    """Single fits.

    Attributes
    ----------
    points : ndarray of int, shape (n,)
        Indices among all points.
    area, sigma : ndarray, shape (n_series, n)
        `sigma` is NaN where an area stands at zero, for then the shared fit's uncertainty remains.
    before, after : ndarray, shape (n,)
        Reduced chi-square of the shared fit; reduced deviance of the single one.
    listed : int
        How many points fitted badly; only the worst of them are refitted.
    """

    points: NDArray[np.int64]
    area: NDArray[np.float32]
    sigma: NDArray[np.float32]
    before: NDArray[np.float32]
    after: NDArray[np.float32]
    listed: int


def fit_point(work: Work, keys: tuple[SeriesKey, ...], counts: NDArray[np.float64]) -> Fit:
    """Fit one point's counts, shape (n_channels,): Poisson likelihood, areas >= 0, all tolerances."""
    drawn = work.ingredients
    grouped = drawn.columns.grouping.sum(counts)
    share = grouped.sum() / max(float(drawn.counts.sum()), 1e-300)
    own = replace(drawn, counts=grouped, continuum=drawn.continuum * share, pairs=drawn.pairs * share)
    return fit_series(own, keys, rounds=2, iterations=6)


def refit(work: Work, keys: tuple[SeriesKey, ...], points: NDArray[np.int64], spectra: NDArray[np.float64],
          chi2: NDArray[np.float32], listed: int) -> Refits:  # fmt: skip
    """Fit some points singly.

    Parameters
    ----------
    points : ndarray of int, shape (n,)
    spectra : ndarray, shape (n, n_channels)
    chi2 : ndarray, shape (n,)
        What the shared fit had.
    listed : int
        How many points fitted badly in all.
    """
    area, sigma = np.zeros((2, len(keys), len(points)), np.float32)
    after = np.zeros(len(points), np.float32)
    for i, counts in enumerate(spectra):
        fit = fit_point(work, keys, counts)
        area[:, i] = [fit.areas[k] for k in keys]
        sigma[:, i] = [fit.sigmas[k] or np.nan for k in keys]
        after[i] = fit.solution.deviance / max(fit.model.size - int(fit.solution.free.sum()), 1)
    return Refits(points, area, sigma, chi2, after, listed)
