"""Nature is no data base: energies and line shares of each element stray from the tables, drawn per case.

The spreads are the disagreement of published sources (Elam against Scofield, EADL and measured tables):
K-beta a few per cent, more where chemistry shapes it; L subshells 8 to 30 per cent; M lines 20 to 35 per
cent. K energies move by chemical shifts below Z = 20 and by rounding of the tables above.
"""

from __future__ import annotations

from dataclasses import dataclass, field, replace

import numpy as np

from .atomic import Lines, series_of

SHARE_SPREAD: dict[str, float] = {
    "Ka": 0.0, "Kb": 0.04, "Kb2": 0.08,
    "La": 0.0, "Ll": 0.10, "Lb2": 0.12, "Lb1": 0.08, "Lg1": 0.10, "L1": 0.25,
    "Ma": 0.0, "Mb": 0.15, "Mg": 0.30, "Mz": 0.35, "M3O": 0.4, "M2N": 0.4, "M2O": 0.5,
}  # fmt: skip
"""One standard deviation of the logarithm of a group's share."""
LIGHT_KB_SPREAD = 0.10
_ENERGY_SPREAD_EV = {"Ka": 0.2, "Kb": 0.5, "Kb2": 1.0, "La": 0.6, "Lb1": 0.8}
_OTHER_L_EV, _M_EV, _LIGHT_K_EV = 1.5, 3.0, 0.6
_HEAVY_K_EV = 1.0


def share_spread(z: int, group: str) -> float:
    """Spread of a group's share of its series, as the standard deviation of its logarithm."""
    return LIGHT_KB_SPREAD if group == "Kb" and z < 20 else SHARE_SPREAD[group]


def _energy_spread_ev(z: int, group: str) -> float:
    if group[0] == "K" and z < 20:
        return _LIGHT_K_EV
    if group[0] == "K" and z > 42:
        return _HEAVY_K_EV
    if group[0] == "M":
        return _M_EV
    return _ENERGY_SPREAD_EV.get(group, _OTHER_L_EV)


@dataclass(frozen=True)
class Nature:
    """One realisation of all elements' lines; the same seed gives the same nature.

    Attributes
    ----------
    seed : tuple of int
    """

    seed: tuple[int, ...]
    _drawn: dict[int, tuple[Lines, ...]] = field(default_factory=dict, repr=False, compare=False)

    def lines(self, z: int) -> tuple[Lines, ...]:
        """The true lines of an element: one `Lines` per series."""
        if z not in self._drawn:
            self._drawn[z] = tuple(self._strayed(s) for s in series_of(z))
        return self._drawn[z]

    def _strayed(self, lines: Lines) -> Lines:
        rng = np.random.default_rng([*self.seed, lines.z, ord(lines.series)])
        share = {g: np.exp(rng.normal(0.0, share_spread(lines.z, g))) for g in sorted(set(lines.group))}
        shift = {g: rng.normal(0.0, _energy_spread_ev(lines.z, g)) * 1e-3 for g in sorted(set(lines.group))}
        return replace(
            lines,
            energy_kev=lines.energy_kev + np.array([shift[g] for g in lines.group]),
            emission=lines.emission * np.array([share[g] for g in lines.group]),
        )
