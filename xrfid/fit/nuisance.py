"""What is known only to a tolerance: extra columns with a Gaussian constraint each.

A column is the change of the expected counts when its quantity is off by one standard uncertainty
(one unit for quantities given in natural units), so that every small misfit of a strong peak has a
name other than "trace element".
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from xrfid.fit.design import GroupColumn, ScatterColumn, SeriesColumns
from xrfid.response.detector import (
    SHELF_NODES_KEV,
    TAIL_NODES_KEV,
    DrawnLines,
    draw_core,
    draw_shelf,
    draw_tail,
    draw_wings,
    joined,
)
from xrfid.response.series import SeriesKey

_WORTH_A_COLUMN = 0.25
"""A tolerance whose full size would change the fit by less than this many sigma gets no column."""


GAIN_PIVOT_KEV = 6.0
"""Energy that a change of gain leaves where it is."""


@dataclass(frozen=True, slots=True)
class Tolerances:
    """Standard uncertainties of what all lines share.

    `offset_kev` and `gain` (relative) are those of the energy scale handed in, `width` (relative) that
    of the resolution, `tail` and `shelf` relative to their starting fractions, `slope` of the tail's
    decay length in sigma, `escape` of the escape probability, `wings` of the natural widths.
    """

    offset_kev: float = 0.010
    gain: float = 1.0e-3
    width: float = 0.08
    fano: float = 0.08
    tail: float = 1.0
    shelf: float = 1.0
    slope: float = 1.0
    escape: float = 0.2
    wings: float = 0.5
    scatter_share: float = 0.4
    matrix_known: bool = True


@dataclass(frozen=True, eq=False)
class Nuisance:
    """One tolerance: its name, the column (n,) of one unit, and the prior mean and sigma in that unit."""

    label: tuple[str, ...]
    column: NDArray[np.float64]
    sigma: float
    mean: float = 0.0


def group_nuisances(
    key: SeriesKey, groups: list[GroupColumn], area: float, background: NDArray[np.float64], tolerances: Tolerances,
    widths: NDArray[np.float64],
) -> list[Nuisance]:  # fmt: skip
    """Shares and energies of the line groups of one series.

    Parameters
    ----------
    area : float
        Current estimate of the series' counts.
    background : ndarray, shape (n,)
        Expected counts, for judging which tolerances matter.
    widths : ndarray, shape (n,)
        Widths of the groups of channels, keV.
    """
    found: list[Nuisance] = []
    for group in groups:
        column = area * group.share * group.column
        weight = float(np.sum(column**2 / np.maximum(background, 1.0)))
        tolerance = group.tolerance
        if not tolerances.matrix_known and tolerance > 0:
            tolerance = max(tolerance, 0.3)
        if tolerance > 0 and tolerance**2 * weight > _WORTH_A_COLUMN**2:
            found.append(Nuisance(("share", str(key), group.name), column, tolerance))
        moved = -np.gradient(column / widths) * 1e-3  # counts per eV of shift
        if group.shift_ev**2 * float(np.sum(moved**2 / np.maximum(background, 1.0))) > _WORTH_A_COLUMN**2:
            found.append(Nuisance(("shift", str(key), group.name), moved, group.shift_ev))
    return found


def shared_nuisances(
    columns: SeriesColumns, areas: Mapping[SeriesKey, float], scatter: list[tuple[ScatterColumn, float]],
    tolerances: Tolerances,
) -> list[Nuisance]:  # fmt: skip
    """Scale, width, tail, shelf, natural widths and escape probability of all lines together."""
    fluorescence, natural, _ = columns.lines({k: a for k, a in areas.items() if a > 0})
    coherent = [
        DrawnLines(c.lines.energy_kev, a * c.lines.weight, c.lines.column)
        for c, a in scatter if c.lines is not None and a > 0
    ]  # fmt: skip
    lines = joined(fluorescence, *coherent)
    shape, edges = columns.shape, columns.grouping.edges_kev
    if not lines.weight.size:
        return []
    found: list[Nuisance] = []
    core = draw_core(lines, shape.resolution, edges, 1)[0]
    widths = np.diff(edges)
    slope = np.gradient(core / widths, columns.grouping.centres_kev) * widths
    found.append(Nuisance(("offset",), -slope, tolerances.offset_kev))
    distance = columns.grouping.centres_kev - GAIN_PIVOT_KEV
    found.append(Nuisance(("gain",), -slope * distance, tolerances.gain))
    wider = replace(shape.resolution, noise_ev=float(np.hypot(shape.resolution.noise_ev, 40.0)))
    second = (draw_core(lines, wider, edges, 1)[0] - core) / 40.0**2  # per eV^2 of FWHM^2
    mn = shape.resolution.fwhm_mn_ka_ev
    found.append(Nuisance(("noise",), second, 2.0 * tolerances.width * mn**2))
    by_energy = second * columns.grouping.centres_kev / 5.9
    found.append(Nuisance(("fano",), by_energy, tolerances.fano * mn**2))
    found += _tail_nuisances(lines, columns, core, tolerances)
    wings = draw_wings(fluorescence, natural, shape.resolution, edges, 1)[0]
    found.append(Nuisance(("wings",), wings, tolerances.wings, mean=1.0 - tolerances.wings))
    escapes = lines.escapes(columns.prediction.instrument.detector.material)
    if escapes.weight.size:
        found.append(Nuisance(("escape",), draw_core(escapes, shape.resolution, edges, 1)[0], tolerances.escape))
    return found


def _tail_nuisances(
    lines: DrawnLines, columns: SeriesColumns, core: NDArray[np.float64], tolerances: Tolerances
) -> list[Nuisance]:
    """Tail and shelf fractions at their nodes, and the tail's slope; each change is taken from the core."""
    shape, edges = columns.shape, columns.grouping.edges_kev
    found = []
    nodes = _on_nodes(lines, TAIL_NODES_KEV)
    moved = draw_tail(nodes, shape, edges, TAIL_NODES_KEV.size) - draw_core(
        nodes, shape.resolution, edges, TAIL_NODES_KEV.size
    )
    for i, fraction in enumerate(shape.tail):
        if np.any(moved[i]):
            found.append(Nuisance(("tail", str(i)), moved[i], tolerances.tail * max(fraction, 0.003)))
    at = DrawnLines(lines.energy_kev, lines.weight * shape.tail_at(lines.energy_kev), lines.column)
    longer = draw_tail(at, replace(shape, tail_slope=shape.tail_slope * 1.25), edges, 1)[0]
    found.append(
        Nuisance(("slope",), (longer - draw_tail(at, shape, edges, 1)[0]) / (0.25 * shape.tail_slope), tolerances.slope)
    )
    nodes = _on_nodes(lines, SHELF_NODES_KEV)
    moved = draw_shelf(nodes, edges, SHELF_NODES_KEV.size) - draw_core(
        nodes, shape.resolution, edges, SHELF_NODES_KEV.size
    )
    for i, fraction in enumerate(shape.shelf):
        if np.any(moved[i]):
            found.append(Nuisance(("shelf", str(i)), moved[i], tolerances.shelf * max(fraction, 0.001)))
    return found


def _on_nodes(lines: DrawnLines, nodes_kev: NDArray[np.float64]) -> DrawnLines:
    """Share each line's weight between the two energy nodes that enclose it; column = node."""
    place = np.interp(np.log(lines.energy_kev), np.log(nodes_kev), np.arange(nodes_kev.size))
    lower = np.minimum(place.astype(int), nodes_kev.size - 2)
    upper_share = place - lower
    return DrawnLines(
        np.concatenate([lines.energy_kev, lines.energy_kev]),
        np.concatenate([lines.weight * (1.0 - upper_share), lines.weight * upper_share]),
        np.concatenate([lower, lower + 1]),
    )


def scatter_nuisances(scatter: list[tuple[ScatterColumn, float]], background: NDArray[np.float64],
                      widths: NDArray[np.float64], tolerances: Tolerances) -> list[Nuisance]:  # fmt: skip
    """Shares of the source's scattered line groups, and position and width of its incoherent peaks."""
    found: list[Nuisance] = []
    for column, area in scatter:
        if area <= 0:
            continue
        strongest = max((g[1] for g in column.groups), default=0.0)
        for name, share, drawn in column.groups:
            part = area * share * drawn
            if share < strongest and float(np.sum(part**2 / np.maximum(background, 1.0))) > 1.0:
                # how often a target's L1 shell is ionised is known worst of all
                tolerance = 1.0 if name in ("Lb3", "Lg3") else tolerances.scatter_share
                found.append(Nuisance(("scatter share", f"{column.kind} {column.of}", name), part, tolerance))
        if column.kind == "incoherent scatter":
            density = area * column.column / widths
            found.append(Nuisance(("compton shift", column.of), -np.gradient(density) * 1e-2, 3.0))  # 10 eV units
            bend = np.gradient(np.gradient(density) / widths)
            found.append(Nuisance(("compton width", column.of), bend * 1e-2, 2.0))  # 0.01 keV^2 units
    return found


def sum_nuisance(pairs: NDArray[np.float64], pair_time: float, widths: NDArray[np.float64]) -> list[Nuisance]:
    """Position of the sum peaks: they stand up to some 30 eV off the sum of energies (common practice, no source)."""
    if pair_time <= 0:
        return []
    moved = -np.gradient(pair_time * pairs / widths) * 1e-2  # counts per 10 eV
    return [Nuisance(("sum shift",), moved, 2.0)]
