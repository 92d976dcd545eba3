"""Characteristic lines: energies, shares, sub-shells and how far each share may be trusted.

Which source for which quantity, and why (no single compilation is right for all):

====================  =====================================================================
quantity              source
====================  =====================================================================
line energies         xraylib (Bearden 1967 / Deslattes et al. 2003), less a few that two other
                      sources contradict, `_MEASURED_KEV`. xraydb's K energies are differences of
                      edges (Fe K-alpha1 1.4 eV high), its L-beta2 is 20 to 43 eV low above Z = 72.
rates in a sub-shell  xraylib (Scofield 1974, exchange-corrected where published). xraydb's
                      K-beta/K-alpha is an extrapolation below Z = 20 and its M-zeta nearly zero.
edges, yields,        xraylib (Krause 1979 and later, Kissel partial cross sections), including
Coster-Kronig         cascades; see `xrfid.atoms.ionisation`.
absorption            Elam, Ravel & Sieber 2002: the same data in xraylib and xraydb; read from
                      xraylib, which is faster. See `xrfid.atoms.absorption`.
natural widths        xraylib (Campbell & Papp 2001).
tolerances            the disagreement of the compilations, `GROUPS` below.
====================  =====================================================================

`tests/reference` compares each with a second source.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from xrfid.atoms.elements import CANDIDATE_Z
from xrfid.atoms.library import xraylib, xraylib_np

SERIES = ("K", "L", "M")
SUBSHELLS = ("K", "L1", "L2", "L3", "M1", "M2", "M3", "M4", "M5")


@dataclass(frozen=True, slots=True)
class Group:
    """Lines of a series that stand or fall together.

    `tolerance` is the relative standard uncertainty of the group's share against the series' main
    group (tolerance 0); `shift_ev` the standard uncertainty of its energy, chemistry included.
    """

    name: str
    series: str
    tolerance: float
    shift_ev: float


# Spread of published ratios to the main group: K-beta after Scofield 1974 against photon-excited
# measurements and Elam 2002; L and M from the disagreement of xraydb and xraylib, over both rates
# and sub-shell yields (M-zeta: nearly zero in one of them; M-gamma: a factor of two). Outer-shell and
# quadrupole lines (Lb5, Lb9) are weak, and the sources hardly agree on them.
GROUPS: tuple[Group, ...] = (
    Group("Ka", "K", 0.0, 1.0),
    Group("Kb", "K", 0.05, 1.5),
    Group("La", "L", 0.0, 1.5),
    Group("Ll", "L", 0.15, 2.0),
    Group("Lb2", "L", 0.15, 2.0),
    Group("Lb6", "L", 0.30, 2.0),
    Group("Lb5", "L", 0.60, 3.0),
    Group("Lb1", "L", 0.10, 1.5),
    Group("Le", "L", 0.25, 2.0),
    Group("Lg1", "L", 0.12, 2.0),
    Group("Lg6", "L", 0.30, 2.0),
    Group("Lb3", "L", 0.30, 2.0),
    Group("Lb9", "L", 1.00, 3.0),
    Group("Lg3", "L", 0.30, 2.0),
    Group("Ma", "M", 0.0, 2.0),
    Group("Mb", "M", 0.25, 2.0),
    Group("Mz", "M", 1.00, 3.0),
    Group("Mg", "M", 0.60, 3.0),
    Group("M2", "M", 0.80, 3.0),
    Group("M1", "M", 0.80, 3.0),
)
GROUP_INDEX = {g.name: i for i, g in enumerate(GROUPS)}

# transition -> (line name, group); transitions in the notation initial-final sub-shell
_TRANSITIONS: dict[str, tuple[str, str]] = {
    "KL3": ("Ka1", "Ka"), "KL2": ("Ka2", "Ka"),
    "KM3": ("Kb1", "Kb"), "KM2": ("Kb3", "Kb"), "KN3": ("Kb2", "Kb"), "KN2": ("Kb2", "Kb"),
    "KM4": ("Kb5", "Kb"), "KM5": ("Kb5", "Kb"), "KO3": ("Kb2", "Kb"), "KO2": ("Kb2", "Kb"),
    "L3M5": ("La1", "La"), "L3M4": ("La2", "La"), "L3M1": ("Ll", "Ll"),
    "L3N5": ("Lb2", "Lb2"), "L3N4": ("Lb15", "Lb2"), "L3N1": ("Lb6", "Lb6"), "L3O45": ("Lb5", "Lb5"),
    "L3O4": ("Lb5", "Lb5"), "L3O5": ("Lb5", "Lb5"), "L3O1": ("Lb7", "Lb5"), "L3N7": ("Lu", "Lb5"),
    "L2M4": ("Lb1", "Lb1"), "L2M1": ("Ln", "Le"), "L2M3": ("Lb17", "Le"),
    "L2N4": ("Lg1", "Lg1"), "L2N1": ("Lg5", "Lg1"), "L2O4": ("Lg6", "Lg6"), "L2O1": ("Lg8", "Lg6"),
    "L2N6": ("Lv", "Lg6"),
    "L1M3": ("Lb3", "Lb3"), "L1M2": ("Lb4", "Lb3"), "L1M5": ("Lb9", "Lb9"), "L1M4": ("Lb10", "Lb9"),
    "L1L3": ("L1-L3", "Lb9"),
    "L1N2": ("Lg2", "Lg3"), "L1N3": ("Lg3", "Lg3"), "L1N5": ("Lg11", "Lb9"), "L1N4": ("Lg11", "Lb9"),
    "L1O2": ("Lg4", "Lg3"), "L1O3": ("Lg4", "Lg3"), "L1O45": ("Lg4", "Lg3"), "L1P23": ("Lg13", "Lg3"),
    "M5N7": ("Ma1", "Ma"), "M5N6": ("Ma2", "Ma"), "M4N6": ("Mb", "Mb"),
    "M5N3": ("Mz1", "Mz"), "M4N2": ("Mz2", "Mz"), "M4N3": ("M4-N3", "Mz"), "M4O2": ("M4-O2", "Mz"),
    "M5O3": ("M5-O3", "Mz"),
    "M3N5": ("Mg1", "Mg"), "M3N4": ("Mg2", "Mg"), "M3N1": ("M3-N1", "Mg"), "M3O1": ("M3-O1", "Mg"),
    "M3O4": ("M3-O4", "Mg"), "M3O5": ("M3-O5", "Mg"),
    "M2N4": ("M2-N4", "M2"), "M2N1": ("M2-N1", "M2"), "M2O1": ("M2-O1", "M2"), "M2O4": ("M2-O4", "M2"),
    "M1N2": ("M1-N2", "M1"), "M1N3": ("M1-N3", "M1"), "M1O2": ("M1-O2", "M1"), "M1O3": ("M1-O3", "M1"),
}  # fmt: skip

# Lines that xraylib places 2 to 5 eV off both the measured value and xraydb's: Bearden 1967 (P, Kr, Pa, U) and
# Deslattes et al. 2003 (Xe K) as in the X-ray Data Booklet, from memory, each within 4 eV of xraydb, most within 1;
# Xe L-alpha2 is xraydb's
_MEASURED_KEV: dict[tuple[int, str], float] = {
    (15, "KM3"): 2.1391, (36, "L3M5"): 1.5860, (36, "L3M4"): 1.5860, (36, "L2M4"): 1.6366,
    (54, "KL3"): 29.779, (54, "KL2"): 29.458, (54, "L3M5"): 4.1099, (54, "L3M4"): 4.0970,
    (91, "L3M4"): 13.1222, (91, "L2M4"): 16.702,
    (92, "L3M5"): 13.6147, (92, "L3M4"): 13.4388, (92, "L2M4"): 17.2200, (92, "L3N5"): 16.4283,
}  # fmt: skip

LOWEST_LINE_KEV = 0.55
"""Lines below this are left out: windows and thresholds leave nothing of them."""
_SMALLEST_RATE = 3e-4


@dataclass(frozen=True, eq=False)
class LineTable:
    """All lines of all candidate series, one array entry a line.

    Attributes
    ----------
    z, subshell, group : ndarray of int, shape (n_lines,)
        Atomic number; index into `SUBSHELLS`; index into `GROUPS`.
    series : ndarray of int, shape (n_lines,)
        Index into `series_keys`.
    energy_kev, rate, width_kev : ndarray of float, shape (n_lines,)
        Line energy; share of the sub-shell's radiative decays; natural width (Lorentzian FWHM).
    names : tuple of str
        Siegbahn name where there is one, else the transition.
    series_keys : tuple of (int, str)
        Atomic number and series letter, e.g. ``(26, "K")``.
    """

    z: NDArray[np.intp]
    subshell: NDArray[np.intp]
    group: NDArray[np.intp]
    series: NDArray[np.intp]
    energy_kev: NDArray[np.float64]
    rate: NDArray[np.float64]
    width_kev: NDArray[np.float64]
    names: tuple[str, ...]
    series_keys: tuple[tuple[int, str], ...]

    def of(self, z: int, series: str) -> NDArray[np.intp]:
        """Indices of the lines of one series (empty if there are none)."""
        try:
            return np.flatnonzero(self.series == self.series_keys.index((z, series)))
        except ValueError:
            return np.empty(0, dtype=np.intp)


@lru_cache(maxsize=1)
def line_table() -> LineTable:
    """Return the table of all lines of Z = 9 to 92 above `LOWEST_LINE_KEV`."""
    z_all = np.array(CANDIDATE_Z, dtype=np.int64)
    macros = np.array([getattr(xraylib, f"{t}_LINE") for t in _TRANSITIONS], dtype=np.int64)
    energy = xraylib_np.LineEnergy(z_all, macros)
    for (z, transition), measured in _MEASURED_KEV.items():
        energy[z - CANDIDATE_Z[0], list(_TRANSITIONS).index(transition)] = measured
    rate = xraylib_np.RadRate(z_all, macros)
    iz, it = np.nonzero((energy >= LOWEST_LINE_KEV) & (rate >= _SMALLEST_RATE))
    transitions = list(_TRANSITIONS)
    initial = [next(s for s in SUBSHELLS if t.startswith(s)) for t in transitions]
    final = [t.removeprefix(i) for t, i in zip(transitions, initial, strict=True)]
    group = np.array([GROUP_INDEX[_TRANSITIONS[t][1]] for t in transitions])[it]
    keys = [(int(z_all[a]), transitions[b][0]) for a, b in zip(iz, it, strict=True)]
    series_keys = tuple(sorted(set(keys), key=lambda k: (k[0], SERIES.index(k[1]))))
    number = {k: i for i, k in enumerate(series_keys)}
    width = _level_widths(z_all)
    upper = np.array([SUBSHELLS.index(i) for i in initial])[it]
    lower = np.array([SUBSHELLS.index(f) if f in SUBSHELLS else -1 for f in final])[it]
    natural = width[iz, upper] + np.where(lower >= 0, width[iz, lower], 0.0)
    return LineTable(
        z=z_all[iz].astype(np.intp),
        subshell=upper,
        group=group,
        series=np.array([number[k] for k in keys], dtype=np.intp),
        energy_kev=energy[iz, it],
        rate=rate[iz, it],
        width_kev=natural,
        names=tuple(_TRANSITIONS[transitions[b]][0] for b in it),
        series_keys=series_keys,
    )


def _level_widths(z_all: NDArray[np.int64]) -> NDArray[np.float64]:
    """Natural widths of the sub-shells, keV, shape (n_elements, 9)."""
    shells = np.array([getattr(xraylib, f"{s}_SHELL") for s in SUBSHELLS], dtype=np.int64)
    widths: NDArray[np.float64] = xraylib_np.AtomicLevelWidth(z_all, shells)
    return widths


@lru_cache(maxsize=1)
def edge_energies() -> NDArray[np.float64]:
    """Absorption edges in keV of Z = 0 to 92 (row) and `SUBSHELLS` (column); 0 where there is none."""
    z_all = np.arange(1, 93, dtype=np.int64)
    shells = np.array([getattr(xraylib, f"{s}_SHELL") for s in SUBSHELLS], dtype=np.int64)
    return np.vstack([np.zeros((1, len(SUBSHELLS))), xraylib_np.EdgeEnergy(z_all, shells)])


_GREEK = {"a": "α", "b": "β", "g": "γ", "l": "ℓ", "n": "η", "z": "ζ", "e": "η"}


def line_name(name: str) -> str:
    """Return a line's name in the usual Greek: ``Ka1`` becomes ``Kα1``, ``Lb2`` ``Lβ2``."""
    if len(name) >= 2 and name[0] in "KLM" and name[1] in _GREEK:
        return name[0] + _GREEK[name[1]] + name[2:]
    return name
