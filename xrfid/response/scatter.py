"""What the sample scatters into the detector: the source's lines, coherently and incoherently, and its continuum.

Compton, Phys. Rev. 21 (1923) 483 for the shift; Doppler width from Compton profiles in the impulse
approximation.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from xrfid.atoms.absorption import attenuation_table, compton_momentum_profile, scatter_tables
from xrfid.response.excitation import Excitation

ELECTRON_REST_KEV = 510.999
_MOMENTUM_UNITS = 137.036
"""m c in atomic units of momentum."""


def compton_energy(energy_kev: NDArray[np.float64] | float, scatter_deg: float) -> NDArray[np.float64]:
    """Energy after incoherent scatter through `scatter_deg` by an electron at rest, keV."""
    e = np.asarray(energy_kev, dtype=float)
    return np.asarray(e / (1.0 + e / ELECTRON_REST_KEV * (1.0 - math.cos(math.radians(scatter_deg)))))


@dataclass(frozen=True, eq=False)
class Scattered:
    """Photons scattered towards the detector, in the units of the fluorescence prediction.

    All arrays follow the excitation's entries: continuum bins, then lines.
    """

    coherent_kev: NDArray[np.float64]
    coherent: NDArray[np.float64]
    incoherent_kev: NDArray[np.float64]
    incoherent: NDArray[np.float64]


class ScatterModel:
    """Scatter of one excitation at one angle; holds what does not depend on the sample."""

    def __init__(self, source: Excitation, scatter_deg: float, sines: tuple[float, float]) -> None:
        self._source = source
        self._sines = sines
        self._mu_in = attenuation_table(source.energy_kev)
        self._shifted = compton_energy(source.energy_kev, scatter_deg)
        self._mu_shifted = attenuation_table(self._shifted)
        self._coherent, self._incoherent = scatter_tables(source.energy_kev, scatter_deg)

    def __call__(self, fractions: NDArray[np.float64]) -> Scattered:
        """Scatter of a thick sample with mass fractions (92,); per steradian like the lines."""
        s1, s2 = self._sines
        mu_in = fractions @ self._mu_in
        mu_out = fractions @ self._mu_shifted
        coherent = self._source.photons * (fractions @ self._coherent) / (mu_in / s1 + mu_in / s2)
        incoherent = self._source.photons * (fractions @ self._incoherent) / (mu_in / s1 + mu_out / s2)
        return Scattered(self._source.energy_kev, coherent, self._shifted, incoherent)


def compton_profile(
    fractions: NDArray[np.float64], energy_kev: float, scatter_deg: float, at_kev: NDArray[np.float64]
) -> NDArray[np.float64]:
    """Doppler-broadened incoherent peak of a line of `energy_kev`, unit area per keV, at energies (n,)."""
    cos = math.cos(math.radians(scatter_deg))
    e2 = np.maximum(at_kev, 1e-3)
    transfer = energy_kev - e2 - energy_kev * e2 * (1.0 - cos) / ELECTRON_REST_KEV
    momentum = _MOMENTUM_UNITS * transfer / np.sqrt(energy_kev**2 + e2**2 - 2.0 * energy_kev * e2 * cos)
    profile = np.where(at_kev < energy_kev, compton_momentum_profile(fractions, momentum), 0.0)
    area = float(np.sum(0.5 * (profile[1:] + profile[:-1]) * np.diff(at_kev)))
    return np.asarray(profile / area) if area > 0 else profile
