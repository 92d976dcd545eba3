"""Cross sections, vacancies and lines of the elements, from the Chantler and Elam tables of xraydb.

Photo-absorption is Chantler's, scatter Elam's; a subshell's part of it follows from jump ratios, its
vacancies move by Coster-Kronig transitions and cascades, and yields and line shares are Elam's except
where `tables` overrules them. Energies in keV, cross sections in cm2/g.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache

import numpy as np
import xraydb
from numpy.typing import NDArray

from . import tables

Array = NDArray[np.float64]
Composition = dict[int, float]
"""Mass fractions by atomic number."""

GRID_KEV: Array = np.geomspace(0.35, 72.0, 5401)
"""Energies at which cross sections are tabulated: steps of 0.1 per cent."""
SHELLS = ("K", "L1", "L2", "L3", "M1", "M2", "M3", "M4", "M5")
LOWEST_LINE_KEV = 0.85
_L1_GROWTH = 0.75
"""Jump ratios keep L1's part of the absorption constant; calculated partial cross sections let it grow
as the excitation rises above the L1 edge, about as this power (a factor 2.8 at four times the edge)."""
_LIGHT_OF_M = 57


@cache
def _table(kind: str, z: int) -> Array:
    """Logarithm of a cross section on `GRID_KEV`; kinds: photo, coherent, incoherent, total."""
    ev = GRID_KEV * 1e3
    if kind == "photo":
        return np.log(np.maximum(xraydb.mu_chantler(z, ev, photo=True), 1e-12))
    if kind in ("coherent", "incoherent"):  # smooth, so that few points do
        elam = getattr(xraydb, f"{kind}_cross_section_elam")
        return np.interp(np.log(ev), np.log(ev[::27]), np.log(elam(z, ev[::27])))
    return np.log(sum(np.exp(_table(k, z)) for k in ("photo", "coherent", "incoherent")))


def cross_section(kind: str, z: int, energy_kev: Array) -> Array:
    """Mass cross section of an element, cm2/g; kinds: photo, coherent, incoherent, total."""
    return np.exp(np.interp(np.log(energy_kev), np.log(GRID_KEV), _table(kind, z)))


def attenuation(composition: Composition, energy_kev: Array) -> Array:
    """Total mass attenuation of a mixture, cm2/g."""
    energy = np.asarray(energy_kev, dtype=float)
    return sum((w * cross_section("total", z, energy) for z, w in composition.items()), np.zeros(energy.shape))


@cache
def _edges(z: int) -> dict[str, tuple[float, float, float]]:
    """Per subshell: edge in keV, jump ratio, fluorescence yield."""
    return {n: (e.energy / 1e3, e.jump_ratio, e.fyield) for n, e in xraydb.xray_edges(z).items() if n in SHELLS}


@cache
def _levels(z: int) -> dict[str, float]:
    """Binding energies in keV of all levels that the table holds."""
    return {n: e.energy / 1e3 for n, e in xraydb.xray_edges(z).items()}


def _primary_vacancies(z: int, energy_kev: Array) -> dict[str, Array]:
    """Vacancies per gram and photon made directly by absorption, by jump ratios."""
    left = cross_section("photo", z, energy_kev)
    made = {}
    for name in SHELLS:  # deepest first: what is left over goes to the next subshell
        if name not in _edges(z):
            continue
        edge, jump, _ = _edges(z)[name]
        share = np.where(energy_kev > edge, 1.0 - 1.0 / max(jump, 1.0), 0.0)
        made[name] = left * share
        left = left - made[name]
        if name == "L1":
            made[name] = made[name] * np.maximum(energy_kev / edge, 1.0) ** _L1_GROWTH
    return made


def vacancies(z: int, energy_kev: Array) -> dict[str, Array]:
    """Vacancies per gram and photon in each subshell, with cascades and Coster-Kronig moves.

    Returns
    -------
    dict of ndarray
        By subshell, in the shape of `energy_kev`.
    """
    energy = np.asarray(energy_kev, dtype=float)
    n = {s: np.zeros(energy.shape) for s in SHELLS} | _primary_vacancies(z, energy)
    omega_k = _edges(z)["K"][2]
    to_l = {"L2": 0.29 * omega_k, "L3": 0.55 * omega_k}  # K-alpha 2 and 1 leave their hole there
    for name, auger in tables.AUGER_TO_L.items():
        n[name] = n[name] + n["K"] * (to_l.get(name, 0.0) + (1.0 - omega_k) * auger)
    before = n["L1"] + n["L2"] + n["L3"]
    for a, b in (("L1", "L2"), ("L1", "L3"), ("L2", "L3")):
        n[b] = n[b] + n[a] * _coster_kronig(z, a, b)
    if z >= _LIGHT_OF_M:
        for name, per_vacancy in tables.L_TO_M.items():
            n[name] = n[name] + per_vacancy * before
        for a, b, probability in tables.COSTER_KRONIG_M:
            n[b] = n[b] + n[a] * probability
    return n


@cache
def _coster_kronig(z: int, a: str, b: str) -> float:
    return float(xraydb.ck_probability(z, a, b, total=False) or 0.0) if z >= 12 else 0.0


@dataclass(frozen=True, eq=False)
class Lines:
    """Lines of one series of an element; arrays and tuples of shape (n_lines,).

    `emission` is photons per vacancy in `subshell`; `width_kev` the natural FWHM.
    """

    z: int
    series: str
    energy_kev: Array
    emission: Array
    subshell: tuple[str, ...]
    group: tuple[str, ...]
    width_kev: Array


def production(lines: Lines, energy_kev: Array) -> Array:
    """Photons per gram of the element and incident photon, shape (n_lines, n_energies)."""
    made = vacancies(lines.z, energy_kev)
    return lines.emission[:, None] * np.array([made[s] for s in lines.subshell])


@cache
def series_of(z: int) -> tuple[Lines, ...]:
    """All series of an element that have a line above `LOWEST_LINE_KEV`."""
    found = (_k_lines(z), _l_lines(z), _m_lines(z))
    return tuple(s for rows, name in zip(found, "KLM", strict=True) if (s := _collect(z, name, rows)) is not None)


Row = tuple[float, float, str, str, str]
"""Energy (keV), photons per vacancy, subshell, filling level, group."""


def _collect(z: int, series: str, rows: list[Row]) -> Lines | None:
    rows = [r for r in rows if r[0] > LOWEST_LINE_KEV and r[1] > 0]
    if not rows:
        return None
    energy, emission, subshell, level, group = zip(*rows, strict=True)
    width = [_core_width(z, s) + _core_width(z, f) for s, f in zip(subshell, level, strict=True)]
    return Lines(z, series, np.array(energy), np.array(emission), subshell, group, np.array(width))


@cache
def _core_width(z: int, level: str) -> float:
    """Natural width of a level, keV; 0 where the table has none."""
    return float(_core_widths(z).get(level) or 0.0) / 1e3


@cache
def _core_widths(z: int) -> dict[str, float]:
    return dict(xraydb.core_width(z))


def _k_lines(z: int) -> list[Row]:
    if z < 11:
        return []
    omega = _edges(z)["K"][2]
    listed = {n: li for n, li in xraydb.xray_lines(z).items() if li.initial_level == "K" and n != "Ka3"}
    alpha = sum(li.intensity for n, li in listed.items() if n.startswith("Ka"))
    beta = sum(li.intensity for n, li in listed.items() if n.startswith("Kb"))
    wanted = tables.KB_TO_KA.get(z, beta / alpha if alpha else 0.0)
    fix = wanted * alpha / beta if beta else 0.0
    own = dict(zip(("Ka1", "Ka2", "Kb1"), tables.K_ENERGIES_EV.get(z, ()), strict=False))
    own["Kb3"] = own["Kb1"] - 0.1 * (z > 30) if "Kb1" in own else None
    total = alpha * (1.0 + wanted)
    rows = []
    for name, line in listed.items():
        share = line.intensity * (fix if name.startswith("Kb") else 1.0) / total
        group = "Ka" if name.startswith("Ka") else "Kb2" if name in ("Kb2", "Kb4") else "Kb"
        energy = (own.get(name) or line.energy) / 1e3
        rows.append((energy, omega * share, "K", line.final_level.split(",")[0], group))
    return rows


_L_GROUPS = {"La1": "La", "La2": "La", "Ll": "Ll", "Lb2,15": "Lb2", "Lb6": "Lb2", "Lb5": "Lb2", "Lb1": "Lb1",
             "Ln": "Lb1", "Lg1": "Lg1", "Lg6": "Lg1"}  # fmt: skip


def _l_lines(z: int) -> list[Row]:
    rows = []
    levels = _levels(z)
    for name, line in xraydb.xray_lines(z).items():
        s = line.initial_level
        if s not in ("L1", "L2", "L3") or line.energy < 1e3 * LOWEST_LINE_KEV:
            continue
        energy = line.energy / 1e3
        if name == "Lb2,15" and levels.get("N5", 0.0) > 0:
            energy = levels["L3"] - levels["N5"]  # the table has it at L3-N4, the weaker partner
        level = line.final_level.split(",")[0]
        rows.append((energy, _edges(z)[s][2] * line.intensity, s, level, _L_GROUPS.get(name, "L1")))
    return rows


def _m_lines(z: int) -> list[Row]:
    if z < _LIGHT_OF_M:
        return []
    rows = []
    levels = _levels(z)
    for s, level, group, share in tables.M_LINES:
        anchors = tables.M_YIELDS[s]
        omega = float(np.interp(z, list(anchors), list(anchors.values())))
        rows.append((levels[s] - levels.get(level, 0.0), omega * share, s, level, group))
    return rows
