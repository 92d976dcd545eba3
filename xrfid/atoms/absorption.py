"""How matter weakens and scatters X-rays: mass attenuation, densities, named materials."""

from __future__ import annotations

import math
from collections.abc import Mapping
from functools import lru_cache

import numpy as np
from numpy.typing import ArrayLike, NDArray

from xrfid.atoms.elements import ATOMIC_NUMBER
from xrfid.atoms.library import xraylib, xraylib_np
from xrfid.atoms.lines import edge_energies
from xrfid.errors import InputError

ALL_Z = np.arange(1, 93, dtype=np.int64)

AIR = {7: 0.755, 8: 0.232, 18: 0.013}
"""Dry air, mass fractions by atomic number (handbook value)."""
HELIUM = {2: 1.0}
GAS_DENSITY_G_CM3 = {"air": 1.205e-3, "helium": 1.66e-4, "vacuum": 0.0}
"""At 20 degrees Celsius and 1013 hPa (handbook values)."""


_LOWEST_KEV, _HIGHEST_KEV = 0.11, 700.0
_PER_DECADE = 150
# the library's absorption edges lie up to half a per cent off its edge energies: look closely around them
_AROUND_EDGE = np.concatenate([np.linspace(-6e-3, 6e-3, 49), [-1e-2, 1e-2]])


@lru_cache(maxsize=1)
def _curves() -> tuple[tuple[NDArray[np.float64], NDArray[np.float64]], ...]:
    """Logarithms of energy and attenuation of each element, with both sides of every edge.

    Asked from the library once: between its points a log-log interpolation is good to 1e-4, and much
    faster than asking again.
    """
    decades = np.log10(_HIGHEST_KEV / _LOWEST_KEV)
    grid = np.geomspace(_LOWEST_KEV, _HIGHEST_KEV, int(decades * _PER_DECADE))
    edges = edge_energies()
    found = []
    for z in ALL_Z:
        own = edges[z][(edges[z] > _LOWEST_KEV * 1.01) & (edges[z] < _HIGHEST_KEV * 0.99)]
        near = np.outer(own, 1.0 + _AROUND_EDGE).ravel()
        energy = np.unique(np.concatenate([grid, near]))
        total = xraylib_np.CS_Total(np.array([z], dtype=np.int64), energy)[0]
        found.append((np.log(energy), np.log(total)))
    return tuple(found)


def _interpolated(z: int, log_energy: NDArray[np.float64]) -> NDArray[np.float64]:
    known_energy, known = _curves()[z - 1]
    return np.asarray(np.exp(np.interp(log_energy, known_energy, known)))


def attenuation_table(energy_kev: ArrayLike) -> NDArray[np.float64]:
    """Mass attenuation of all elements.

    Photo-absorption plus coherent and incoherent scatter after Elam, Ravel & Sieber,
    Radiat. Phys. Chem. 63 (2002) 121; 0.11 to 700 keV.

    Parameters
    ----------
    energy_kev : array_like, shape (n,)
        Energies, keV.

    Returns
    -------
    ndarray, shape (92, n)
        cm2/g; row ``z - 1``.
    """
    log_energy = np.log(np.clip(np.atleast_1d(energy_kev), _LOWEST_KEV, _HIGHEST_KEV))
    return np.array([_interpolated(int(z), log_energy) for z in ALL_Z])


def mass_attenuation(composition: Mapping[int, float], energy_kev: ArrayLike) -> NDArray[np.float64]:
    """Mass attenuation, cm2/g, of a mixture {Z: mass fraction}, shape of `energy_kev`."""
    energy = np.atleast_1d(np.asarray(energy_kev, dtype=float))
    log_energy = np.log(np.clip(energy, _LOWEST_KEV, _HIGHEST_KEV))
    total = np.zeros(energy.shape)
    for z, w in composition.items():
        total += w * _interpolated(z, log_energy)
    return total


@lru_cache(maxsize=256)
def material(name: str) -> tuple[tuple[tuple[int, float], ...], float]:
    """Composition and density of an element, a named material or a compound formula.

    Returns
    -------
    composition : tuple of (Z, mass fraction)
    density : float
        g/cm3; NaN for a compound whose density is not known.

    Raises
    ------
    InputError
        If `name` is none of these.
    """
    if name in ATOMIC_NUMBER:
        z = ATOMIC_NUMBER[name]
        return ((z, 1.0),), float(xraylib.ElementDensity(z))
    import xraydb  # its import takes as long as everything else here together; few instruments need it

    known = xraydb.get_material(name.lower())
    formula, density = known if known is not None else (name, math.nan)
    try:
        parsed = xraylib.CompoundParser(formula)
    except ValueError:
        raise InputError(f'material "{name}"', "is no element, compound formula or named material",
                         'write "Al", "SiO2" or "kapton"') from None  # fmt: skip
    pairs = zip(parsed["Elements"], parsed["massFractions"], strict=True)
    return tuple((int(z), float(w)) for z, w in pairs), float(density)


def layer_transmission(
    name: str, thickness_um: float, energy_kev: ArrayLike, density_g_cm3: float | None = None
) -> NDArray[np.float64]:
    """Share of photons that passes a sheet at normal incidence, shape of `energy_kev`.

    Raises
    ------
    InputError
        If the material or its density is not known.
    """
    composition, density = material(name)
    density = density_g_cm3 if density_g_cm3 is not None else density
    if math.isnan(density):
        raise InputError(f'material "{name}"', "has no known density", "add density_g_cm3 to this layer")
    return np.exp(-mass_attenuation(dict(composition), energy_kev) * density * thickness_um * 1e-4)


def gas_transmission(atmosphere: str, length_mm: float, energy_kev: ArrayLike) -> NDArray[np.float64]:
    """Share of photons that passes `length_mm` of air, helium or vacuum, shape of `energy_kev`."""
    energy = np.atleast_1d(np.asarray(energy_kev, dtype=float))
    if atmosphere == "vacuum" or length_mm == 0:
        return np.ones(energy.shape)
    gas = AIR if atmosphere == "air" else HELIUM
    return np.exp(-mass_attenuation(gas, energy) * GAS_DENSITY_G_CM3[atmosphere] * length_mm * 0.1)


def scatter_tables(
    energy_kev: NDArray[np.float64], scatter_deg: float
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Coherent and incoherent differential cross sections of all elements, cm2/g/sr.

    Form factors and incoherent scattering functions after Hubbell et al. 1975 (in xraylib).

    Returns
    -------
    coherent, incoherent : ndarray, shape (92, n)
    """
    energy = np.ascontiguousarray(energy_kev, dtype=float)
    theta = np.array([math.radians(scatter_deg)])
    coherent = xraylib_np.DCS_Rayl(ALL_Z, energy, theta)[:, :, 0]
    incoherent = xraylib_np.DCS_Compt(ALL_Z, energy, theta)[:, :, 0]
    return coherent, incoherent


@lru_cache(maxsize=1)
def _compton_profiles() -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Momenta (atomic units) and each element's Compton profile per electron system, shape (92, n)."""
    momentum = np.concatenate([np.linspace(0.0, 10.0, 201), np.geomspace(10.3, 99.0, 60)])
    return momentum, xraylib_np.ComptonProfile(ALL_Z, momentum)


def compton_momentum_profile(fractions: NDArray[np.float64], momentum: NDArray[np.float64]) -> NDArray[np.float64]:
    """Compton profile per gram of a mixture, relative, at momenta in atomic units.

    Biggs, Mendelsohn & Mann, At. Data Nucl. Data Tables 16 (1975) 201 (in xraylib).

    Parameters
    ----------
    fractions : ndarray, shape (92,)
        Mass fractions.
    momentum : ndarray, shape (n,)
        Projected electron momentum; its sign does not matter.
    """
    known, profiles = _compton_profiles()
    moles = fractions / np.array([xraylib.AtomicWeight(int(z)) for z in ALL_Z])
    return np.asarray(np.interp(np.abs(momentum), known, moles @ profiles, right=0.0))
