"""What an X-ray tube sends to the sample: braking continuum, characteristic lines, window and filters.

Continuum: Kramers' law with the absorption in the target after Pella, Feng & Small, X-Ray Spectrom. 14
(1985) 125 (formula from memory). Lines: Green & Cosslett's (U - 1)**1.67 law, J. Phys. D 1 (1968) 425,
scaled so that the K lines of Rh at 40 kV hold as many photons as 1.7 keV of the continuum there.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
import xraydb

from .atomic import Array, Composition, attenuation, vacancies
from .nature import Nature

HC_KEV_ANGSTROM = 12.398420
LOWEST_KEV = 0.9
_COARSE_FROM_KEV, _FINE_KEV, _COARSE_KEV = 10.0, 0.1, 0.25
_LINE_SCALE_KEV = {"K": 3.6, "L3": 15.0, "L2": 7.5, "L1": 4.0, "M": 12.0}
_LINE_POWER = 1.67


@dataclass(frozen=True)
class Tube:
    """A tube as it truly is. `filters` holds (element symbol, micrometres)."""

    anode: str
    voltage_kv: float
    window_um: float
    filters: tuple[tuple[str, float], ...]
    takeoff_deg: float = 20.0
    line_scale: float = 1.0


@dataclass(frozen=True, eq=False)
class Beam:
    """Photons that reach the sample, relative: continuum in bins of width `bin_kev`, then the lines."""

    energy_kev: Array
    photons: Array
    bin_kev: Array

    @property
    def n_continuum(self) -> int:
        """The first so many entries are the continuum's bins."""
        return self.bin_kev.size


def sheet(symbol: str, thickness_um: float, energy_kev: Array) -> Array:
    """Transmission of an elemental sheet."""
    z = xraydb.atomic_number(symbol)
    mass = thickness_um * 1e-4 * xraydb.atomic_density(symbol)
    return np.exp(-attenuation({z: 1.0}, energy_kev) * mass)


def beam(tube: Tube, nature: Nature) -> Beam:
    """Spectrum of a tube behind its window and filters."""
    z = xraydb.atomic_number(tube.anode)
    fine = np.arange(LOWEST_KEV, _COARSE_FROM_KEV, _FINE_KEV)
    edges = np.append(fine, np.arange(_COARSE_FROM_KEV, tube.voltage_kv, _COARSE_KEV))
    energy, width = 0.5 * (edges[1:] + edges[:-1]), np.diff(edges)
    braking = z * (tube.voltage_kv / energy - 1.0) * _target(z, tube, energy) * width
    line_energy, line_photons = _characteristic(z, tube, nature)
    energies = np.concatenate([energy, line_energy])
    photons = np.concatenate([braking, tube.line_scale * line_photons])
    photons = photons * sheet("Be", tube.window_um, energies)
    for symbol, um in tube.filters:
        photons = photons * sheet(symbol, um, energies)
    return Beam(energies, photons, width)


def _target(z: int, tube: Tube, energy_kev: Array) -> Array:
    """Share of the photons made in the target that leave it (Pella, Feng & Small)."""
    shortest = HC_KEV_ANGSTROM / tube.voltage_kv
    wavelength = HC_KEV_ANGSTROM / energy_kev
    mu = attenuation({z: 1.0}, energy_kev) / math.sin(math.radians(tube.takeoff_deg))
    xi = np.maximum(shortest**-1.65 - wavelength**-1.65, 0.0) * mu
    c = (1.0 + 1.0 / (1.0 + 2.56e-3 * z**2)) / ((1.0 + 2.56e3 * shortest / z**2) * (0.25 * xi + 1e4))
    return (1.0 + c * xi) ** -2


def _characteristic(z: int, tube: Tube, nature: Nature) -> tuple[Array, Array]:
    """Energies and photons of the target's lines; each subshell is ionised by electrons."""
    energy, photons = [np.empty(0)], [np.empty(0)]
    edges = {n: e.energy / 1e3 for n, e in xraydb.xray_edges(z).items()}
    absorbed = vacancies(z, np.array([0.9 * tube.voltage_kv]))
    for lines in nature.lines(z):
        made = np.zeros(lines.energy_kev.size)
        for i, name in enumerate(lines.subshell):
            u = tube.voltage_kv / edges[name]
            scale = _LINE_SCALE_KEV.get(name, _LINE_SCALE_KEV["M"])
            if u > 1.02 and absorbed[name][0] > 0:
                made[i] = z * scale * min(u - 1.0, 12.0) ** _LINE_POWER * lines.emission[i]
        deep = _target(z, tube, lines.energy_kev)
        energy.append(lines.energy_kev)
        photons.append(made * deep)
    e, n = np.concatenate(energy), np.concatenate(photons)
    keep = (n > 0) & (e > LOWEST_KEV)
    return e[keep], n[keep]


AIR: Composition = {7: 0.755, 8: 0.232, 18: 0.013}
"""Dry air by mass (from memory)."""
AIR_G_CM3 = 1.205e-3


def air(length_mm: float, energy_kev: Array) -> Array:
    """Transmission of air at 20 degrees Celsius."""
    return np.exp(-attenuation(AIR, energy_kev) * AIR_G_CM3 * 0.1 * length_mm)
