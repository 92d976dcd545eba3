"""One spectrum against one set of series: assemble the columns, fit them, read off areas with covariance."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace

import numpy as np
from numpy.typing import NDArray

from xrfid.fit.design import GroupColumn, ScatterColumn, SeriesColumns
from xrfid.fit.nuisance import (
    Nuisance,
    Tolerances,
    group_nuisances,
    scatter_nuisances,
    shared_nuisances,
    sum_nuisance,
)
from xrfid.fit.solve import LinearProblem, Solution, solve
from xrfid.response.series import SeriesKey

PARTIAL_SHARE = 0.3
"""Standard uncertainty of each partial overlap's pulse-pair time, in units of the full overlap's."""
MODEL_PRECISION = 0.002
"""Relative precision to which a strong line's shape can be known at all; adds to the variance per channel."""


@dataclass(frozen=True, eq=False)
class FreePeak:
    """A peak at no known line: its energy, its width in units of the detector's, its unit column (n,)."""

    energy_kev: float
    width: float
    column: NDArray[np.float64]

    @property
    def label(self) -> tuple[str, str]:
        """Label of its coefficient."""
        return ("peak", f"{self.energy_kev:.4f}")


@dataclass(frozen=True, eq=False)
class Ingredients:
    """Everything a fit needs that does not depend on which series are in.

    Attributes
    ----------
    counts : ndarray, shape (n,)
        Counts per group of channels.
    columns : SeriesColumns
    scatter : list of ScatterColumn
    continuum : ndarray, shape (n_knots, n)
        The continuum's shape times its smooth functions.
    curvature : float
        Standard uncertainty of the second difference of neighbouring continuum coefficients.
    pairs : ndarray, shape (n,)
        Piled-up counts per nanosecond of pulse-pair time (or per unit, if the live time is unknown).
    pair_time : tuple of (mean, sigma), or None
        What is known of that time.
    partial : ndarray, shape (n_parts, n)
        The same for partial overlaps.
    tolerances : Tolerances
    peaks : tuple of FreePeak
        Peaks that no line explains.
    scatter_expected : mapping from index of `scatter` to (counts, standard uncertainty)
        What is known beforehand of a scattered line group's size.
    """

    counts: NDArray[np.float64]
    columns: SeriesColumns
    scatter: list[ScatterColumn]
    continuum: NDArray[np.float64]
    curvature: float
    pairs: NDArray[np.float64]
    pair_time: tuple[float, float] | None
    partial: NDArray[np.float64]
    tolerances: Tolerances
    peaks: tuple[FreePeak, ...] = ()
    scatter_expected: Mapping[int, tuple[float, float]] = field(default_factory=dict)
    _groups: dict[SeriesKey, list[GroupColumn]] = field(default_factory=dict)

    def with_peaks(self, peaks: tuple[FreePeak, ...]) -> Ingredients:
        """Return the same ingredients with other free peaks."""
        return replace(self, peaks=peaks)

    def groups(self, key: SeriesKey) -> list[GroupColumn]:
        """Line groups of a series, drawn once."""
        if key not in self._groups:
            self._groups[key] = self.columns.groups(key)
        return self._groups[key]


@dataclass(frozen=True, eq=False)
class Sizing:
    """The tolerances' columns, and the areas from which they were sized."""

    areas: Mapping[SeriesKey, float]
    nuisances: tuple[Nuisance, ...]

    def only(self, keys: Sequence[SeriesKey]) -> Sizing:
        """Return the same columns without those of series that are not in `keys`."""
        names = {str(k) for k in keys}
        gone = {str(k) for k in self.areas} - names
        kept = tuple(n for n in self.nuisances if len(n.label) < 2 or n.label[1] not in gone)
        return Sizing({k: self.areas.get(k, 0.0) for k in keys}, kept)


@dataclass(frozen=True, eq=False)
class Fit:
    """A fitted set of series.

    Attributes
    ----------
    keys : tuple of SeriesKey
    areas, sigmas : mapping from SeriesKey to float
        Counts in the full-energy peaks; standard uncertainty, all tolerances included.
    solution : Solution
    problem : LinearProblem
    labels : tuple of tuple
        What each coefficient is: ("series", "Fe K"), ("continuum", "3"), ("share", "Fe K", "Kb"), ...
    functionals : ndarray, shape (n_keys, n_coefficients)
        Each series' area as a linear function of the coefficients.
    variance : ndarray, shape (n,)
        Expected variance per group of channels.
    sizing : Sizing
    """

    keys: tuple[SeriesKey, ...]
    areas: Mapping[SeriesKey, float]
    sigmas: Mapping[SeriesKey, float]
    solution: Solution
    problem: LinearProblem
    labels: tuple[tuple[str, ...], ...]
    functionals: NDArray[np.float64]
    variance: NDArray[np.float64]
    sizing: Sizing

    @property
    def model(self) -> NDArray[np.float64]:
        """Expected counts, shape (n,)."""
        return self.solution.model

    @property
    def objective(self) -> float:
        """Deviance plus constraints."""
        return self.solution.objective

    def coefficient(self, *label: str) -> float:
        """Value of a coefficient; 0 if the fit has none of that name."""
        return float(self.solution.coefficients[self.labels.index(label)]) if label in self.labels else 0.0

    def part(self, *kinds: str) -> NDArray[np.float64]:
        """Counts of all columns whose label begins with one of `kinds`, shape (n,)."""
        on = [i for i, label in enumerate(self.labels) if label[0] in kinds]
        return np.asarray(self.solution.coefficients[on] @ self.problem.columns[on])


def fit_series(ingredients: Ingredients, keys: Sequence[SeriesKey], near: Fit | None = None, *, rounds: int = 2,
               iterations: int = 4, resize: bool = True) -> Fit:  # fmt: skip
    """Fit a set of series with all tolerances.

    Parameters
    ----------
    ingredients : Ingredients
    keys : sequence of SeriesKey
    near : Fit, optional
        A fit of a similar set; its areas size the tolerances' columns and its model starts the weights.
    rounds : int
        How often the tolerances' columns are sized anew from the areas found.
    iterations : int
        Re-weightings per round.
    resize : bool
        False: the first round takes the columns of `near` as they are, which saves drawing them when
        only a series or two have come or gone.
    """
    keys = tuple(keys)
    fit = near
    for i in range(rounds):
        if fit is not None and (i > 0 or resize):
            sizing = _sized(ingredients, keys, fit)
        else:
            sizing = Sizing({}, ()) if fit is None else fit.sizing.only(keys)
        fit = _fit_once(ingredients, keys, sizing, None if fit is None else fit.model, iterations)
    assert fit is not None
    return fit


def _fit_once(ingredients: Ingredients, keys: tuple[SeriesKey, ...], sizing: Sizing,
              model: NDArray[np.float64] | None, iterations: int) -> Fit:  # fmt: skip
    """Assemble and solve one linear problem."""
    problem, labels = _assemble(ingredients, keys, sizing)
    functionals = _functionals(ingredients, keys, sizing.areas, labels)
    inflation = 1.0 + MODEL_PRECISION**2 * (ingredients.counts if model is None else model)
    solution = solve(problem, ingredients.counts, model, inflation=inflation, iterations=iterations)
    found = functionals @ solution.coefficients
    spread = np.sqrt(np.maximum(np.einsum("ij,jk,ik->i", functionals, solution.covariance, functionals), 0.0))
    return Fit(
        keys=keys,
        areas=dict(zip(keys, map(float, found), strict=True)),
        sigmas=dict(zip(keys, map(float, spread), strict=True)),
        solution=solution,
        problem=problem,
        labels=labels,
        functionals=functionals,
        variance=solution.model * inflation,
        sizing=sizing,
    )


def _assemble(
    ingredients: Ingredients, keys: tuple[SeriesKey, ...], sizing: Sizing
) -> tuple[LinearProblem, tuple[tuple[str, ...], ...]]:
    """Put series, scatter, continuum, pile-up, free peaks and tolerances into one linear problem."""
    c = ingredients.columns
    parts: list[NDArray[np.float64]] = [c.unit[[c.index(k) for k in keys]]]
    labels: list[tuple[str, ...]] = [("series", str(k)) for k in keys]
    parts += [s.column[None] for s in ingredients.scatter]
    labels += [("scatter", str(i)) for i in range(len(ingredients.scatter))]
    parts.append(ingredients.continuum)
    labels += [("continuum", str(i)) for i in range(ingredients.continuum.shape[0])]
    prior = {len(keys) + i: known for i, known in ingredients.scatter_expected.items()}
    if ingredients.pairs.any():
        if ingredients.pair_time is not None:
            prior[len(labels)] = ingredients.pair_time
        parts.append(ingredients.pairs[None])
        labels.append(("sum",))
        for i, _ in enumerate(ingredients.partial):
            if ingredients.pair_time is not None:
                prior[len(labels) + i] = (0.0, PARTIAL_SHARE * ingredients.pair_time[1])
        parts.append(ingredients.partial)
        labels += [("partial", str(i)) for i in range(ingredients.partial.shape[0])]
    parts += [p.column[None] for p in ingredients.peaks]
    labels += [p.label for p in ingredients.peaks]
    bounded = len(labels)
    parts += [n.column[None] for n in sizing.nuisances]
    labels += [n.label for n in sizing.nuisances]
    mean, precision = np.zeros(len(labels)), np.zeros(len(labels))
    for i, (m, s) in prior.items():
        mean[i], precision[i] = m, s**-2
    for i, n in enumerate(sizing.nuisances, start=bounded):
        mean[i], precision[i] = n.mean, n.sigma**-2
    coupling = _smoothness(labels, ingredients.curvature)
    columns = np.concatenate(parts)
    return LinearProblem(columns, np.arange(len(labels)) < bounded, mean, precision, coupling), tuple(labels)


def _sized(ingredients: Ingredients, keys: tuple[SeriesKey, ...], near: Fit) -> Sizing:
    """Draw the tolerances' columns anew for the areas of a fit nearby."""
    areas = {k: near.areas.get(k, 0.0) for k in keys}
    scatter = [near.coefficient("scatter", str(i)) for i in range(len(ingredients.scatter))]
    return Sizing(areas, tuple(_nuisances(ingredients, areas, scatter, near.coefficient("sum"), near.model)))


def _nuisances(ingredients: Ingredients, areas: Mapping[SeriesKey, float], scatter: list[float],
               pair_time: float, background: NDArray[np.float64]) -> list[Nuisance]:  # fmt: skip
    widths = np.diff(ingredients.columns.grouping.edges_kev)
    found: list[Nuisance] = []
    for key, area in areas.items():
        if area > 30.0:
            found += group_nuisances(key, ingredients.groups(key), area, background, ingredients.tolerances, widths)
    weighed = list(zip(ingredients.scatter, scatter, strict=True))
    found += sum_nuisance(ingredients.pairs, pair_time, widths)
    found += shared_nuisances(ingredients.columns, areas, weighed, ingredients.tolerances)
    return found + scatter_nuisances(weighed, background, widths, ingredients.tolerances)


def _functionals(ingredients: Ingredients, keys: tuple[SeriesKey, ...], areas: Mapping[SeriesKey, float],
                 labels: tuple[tuple[str, ...], ...]) -> NDArray[np.float64]:  # fmt: skip
    """Each series' area: its own coefficient plus what the deviating line groups add."""
    out = np.zeros((len(keys), len(labels)))
    for i, key in enumerate(keys):
        out[i, i] = 1.0
        shares = {g.name: g.share for g in ingredients.groups(key)} if areas.get(key, 0.0) > 30.0 else {}
        for j, label in enumerate(labels):
            if label[0] == "share" and label[1] == str(key):
                out[i, j] = areas[key] * shares[label[2]]
    return out


def _smoothness(labels: list[tuple[str, ...]], curvature: float) -> NDArray[np.float64]:
    """Penalty on second differences of neighbouring continuum coefficients."""
    on = [i for i, label in enumerate(labels) if label[0] == "continuum"]
    second = np.diff(np.eye(len(on)), n=2, axis=0) / curvature
    out = np.zeros((len(labels), len(labels)))
    if len(on) > 2:
        out[np.ix_(on, on)] = second.T @ second
    return out
