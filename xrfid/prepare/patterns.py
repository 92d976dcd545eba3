"""Patterns of lines: each series of each element with its lines' relative intensities, whatever the sample.

Finding a scale asks only which lines stand together; so a pattern needs the source's end, the path and the
detector, but no composition. What a matrix can do to the lines of one series is left open by `free`.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from xrfid.atoms.absorption import gas_transmission
from xrfid.atoms.elements import NOBLE_GASES, UNSTABLE
from xrfid.atoms.ionisation import subshell_emission
from xrfid.atoms.lines import GROUPS, line_table
from xrfid.instrument import Instrument, Tube
from xrfid.response.detector import efficiency
from xrfid.response.excitation import excitation
from xrfid.response.scatter import compton_energy
from xrfid.response.series import SeriesKey

LOWEST_Z = 12
_RARE = UNSTABLE | (NOBLE_GASES - {"Ar"}) | set(
    "Sc Ga Ge Ru Rh In Te Cs Pr Sm Eu Gd Tb Dy Ho Er Tm Yb Lu Re Os Ir Tl".split()
)
"""Elements seldom met as main parts of a sample (common practice, no source): they must explain more."""
SMALLEST_SHARE = 4e-3
_COMMON_ANODES = ("Rh", "Ag", "Mo", "W", "Cu", "Pd", "Au", "Cr")


@dataclass(frozen=True, eq=False)
class Patterns:
    """Lines of every candidate, sorted by candidate.

    Attributes
    ----------
    names : tuple of str
        "Fe K", "Rh K incoherent", ...
    keys : tuple of SeriesKey or None
        None for incoherent scatter.
    rare : ndarray of float, shape (n_candidates,)
        0 for a usual element, 1 for a rare one.
    energy_kev, share, free : ndarray, shape (n_lines,)
        Line energy; share of the candidate's area; relative latitude of that share (0 for the main group).
    extra_kev : ndarray, shape (n_lines,)
        Width beyond the detector's, FWHM in keV: Doppler for incoherent scatter, natural width else.
    of : ndarray of int, shape (n_lines,)
        The candidate each line belongs to.
    group : ndarray of int, shape (n_lines,)
        Index into `GROUPS`.
    """

    names: tuple[str, ...]
    keys: tuple[SeriesKey | None, ...]
    rare: NDArray[np.float64]
    energy_kev: NDArray[np.float64]
    share: NDArray[np.float64]
    free: NDArray[np.float64]
    extra_kev: NDArray[np.float64]
    of: NDArray[np.intp]
    group: NDArray[np.intp]
    end_kev: float


def only(patterns: Patterns, elements: frozenset[str]) -> Patterns:
    """Return the candidates of some elements alone, scatter of the source included."""
    keep = np.array([k is None or k.element in elements for k in patterns.keys])
    new = np.cumsum(keep) - 1
    lines = keep[patterns.of]
    chosen = np.flatnonzero(keep)
    return Patterns(
        tuple(patterns.names[i] for i in chosen), tuple(patterns.keys[i] for i in chosen), np.zeros(chosen.size),
        patterns.energy_kev[lines], patterns.share[lines], patterns.free[lines], patterns.extra_kev[lines],
        new[patterns.of[lines]], patterns.group[lines], patterns.end_kev,
    )  # fmt: skip


def patterns_of(instrument: Instrument, end_kev: float | None, known_anode: bool) -> Patterns:
    """Return all candidates in reach.

    Parameters
    ----------
    instrument : Instrument
    end_kev : float or None
        The source's end point; 60 keV if unknown, so that no line is left out.
    known_anode : bool
        False to try the scatter of all common anodes.
    """
    end = end_kev or 60.0
    series = _series(instrument, end)
    scatter = _incoherent(instrument, end, series, known_anode)
    return _joined(series, scatter, end)


_Part = tuple[str, SeriesKey | None, float, NDArray[np.float64], NDArray[np.float64], NDArray[np.float64],
              NDArray[np.float64], NDArray[np.intp]]  # fmt: skip


def _joined(series: list[_Part], scatter: list[_Part], end: float) -> Patterns:
    parts = series + scatter
    sizes = [p[3].size for p in parts]
    cat = [np.concatenate([p[i] for p in parts]) for i in range(3, 8)]
    return Patterns(
        tuple(p[0] for p in parts), tuple(p[1] for p in parts), np.array([p[2] for p in parts]),
        cat[0], cat[1], cat[2], cat[3], np.repeat(np.arange(len(parts)), sizes), cat[4], end,
    )  # fmt: skip


def _series(instrument: Instrument, end: float) -> list[_Part]:
    """Every element's series with intensities from sub-shell ionisation, path and detector."""
    table = line_table()
    source = instrument.source
    photons = np.array(source.lines_kev) if source is not None else end * np.array([0.35, 0.5, 0.7, 0.97])
    emission = _emission(tuple(float(e) for e in photons))
    weight = np.ones(photons.size) if source is not None else np.array([1.0, 1.0, 0.7, 0.1])
    made = (emission @ weight)[table.z, table.subshell] * table.rate
    path = instrument.path
    passed = gas_transmission(path.atmosphere, path.length_mm, table.energy_kev)
    made = made * passed * efficiency(instrument.detector, table.energy_kev)
    order = np.argsort(table.series, kind="stable")
    by_series = np.split(order, np.searchsorted(table.series[order], np.arange(1, len(table.series_keys))))
    tolerance = np.array([g.tolerance for g in GROUPS])
    # K-beta of an element whose K edge lies between it and K-alpha of another: 0.2 to 1.3 (Sherman's equation)
    latitude = np.where(tolerance > 0, np.maximum(tolerance, 0.25), 0.0)
    parts: list[_Part] = []
    for i, (z, letter) in enumerate(table.series_keys):
        rows = by_series[i]
        total = float(made[rows].sum())
        if z < LOWEST_Z or total <= 0 or float(made[rows].max()) <= 0:
            continue
        share = made[rows] / total
        keep = (share > SMALLEST_SHARE) & (table.energy_kev[rows] < end)
        rows, share = rows[keep], share[keep]
        if not rows.size or share.sum() < 0.5:
            continue
        key = SeriesKey(z, letter)
        if key.element in UNSTABLE:
            continue
        rare = 1.0 if key.element in _RARE else 0.0
        parts.append((str(key), key, rare, table.energy_kev[rows], share / share.sum(), latitude[table.group[rows]],
                      table.width_kev[rows], table.group[rows]))  # fmt: skip
    return parts


@lru_cache(maxsize=8)
def _emission(photons: tuple[float, ...]) -> NDArray[np.float64]:
    """Sub-shell emission of every element (row: Z) for photons of some energies."""
    z = np.arange(1, 93)
    out = subshell_emission(z, np.array(photons))
    return np.concatenate([np.zeros((1, *out.shape[1:])), out])


def _incoherent(instrument: Instrument, end: float, series: list[_Part], known_anode: bool) -> list[_Part]:
    """Incoherent peaks of the source's K or hard L lines (the coherent ones are the anode's own series)."""
    angles: tuple[float, ...] = (instrument.geometry.scatter_deg,)
    if "geometry" not in instrument.model_fields_set:
        angles = (90.0, 120.0, 150.0)
    if instrument.source is not None:
        made = excitation(instrument)
        none = np.zeros(made.energy_kev.size)
        share = made.photons / made.photons.sum()
        coherent: _Part = ("source coherent", None, 0.0, made.energy_kev, share, none + 0.3, none, none.astype(np.intp))
        return [coherent, *(_shifted(coherent, "source", a) for a in angles)]
    anodes = ((instrument.tube or Tube()).anode,) if known_anode else _COMMON_ANODES
    parts = []
    for part in series:
        key = part[1]
        if key is not None and key.element in anodes and float(part[3][0]) > 7.0:
            parts += [_shifted(part, str(key), a) for a in angles]
    return parts


def _shifted(part: _Part, name: str, angle: float) -> _Part:
    energy = compton_energy(part[3], angle)
    doppler = 0.026 * energy  # FWHM of a light matrix (Biggs et al. 1975), as in the fit's columns
    return (f"{name} incoherent {angle:g}", None, 0.0, energy, part[4], np.maximum(part[5], 0.1), doppler, part[7])
