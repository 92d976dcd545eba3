"""How a sample turns incident photons into lines: absorption and enhancement.

Sherman, Spectrochim. Acta 7 (1955) 283; Shiraiwa & Fujino, Jpn. J. Appl. Phys. 5 (1966) 886: a flat,
homogeneous sample, photons in at angle psi1 and out at psi2 to its surface.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from xrfid.atoms.absorption import ALL_Z, attenuation_table
from xrfid.atoms.elements import ATOMIC_NUMBER, SYMBOLS
from xrfid.instrument import Geometry

LIGHT_MATRIX = {1: 0.05, 6: 0.40, 8: 0.55}
"""What X-rays do not show of a sample, taken as an organic or oxide-like mixture of H, C and O."""


def mass_fractions(composition: Mapping[str, float]) -> NDArray[np.float64]:
    """Return mass fractions by atomic number, shape (92,), normalised to 1.

    Raises
    ------
    ValueError
        If a symbol is unknown or a fraction negative, or nothing is positive.
    """
    out = np.zeros(ALL_Z.size)
    for symbol, amount in composition.items():
        if symbol not in ATOMIC_NUMBER:
            raise ValueError(f'"{symbol}" is no element symbol')
        if not amount >= 0 or not math.isfinite(amount):
            raise ValueError(f"the amount of {symbol} must be >= 0; got {amount!r}")
        out[ATOMIC_NUMBER[symbol] - 1] += amount
    if not out.sum() > 0:
        raise ValueError("a composition needs at least one element with an amount > 0")
    return np.asarray(out / out.sum())


def composition_of(fractions: NDArray[np.float64]) -> dict[str, float]:
    """Return {symbol: mass fraction} of the elements present."""
    return {SYMBOLS[i]: float(w) for i, w in enumerate(fractions) if w > 0}


@dataclass(frozen=True, eq=False)
class Layer:
    """A homogeneous layer: mass fractions (92,) and mass per area; infinite for a thick sample."""

    fractions: NDArray[np.float64]
    g_cm2: float = math.inf


def sines(geometry: Geometry) -> tuple[float, float]:
    """Sines of the angles between surface and incident beam, and surface and detector axis."""
    return math.sin(math.radians(geometry.incidence_deg)), math.sin(math.radians(geometry.takeoff_deg))


def escape_depth(a: NDArray[np.float64], b: NDArray[np.float64], g_cm2: float) -> NDArray[np.float64]:
    """Integral of ``exp(-(a + b) t) dt`` over the layer, shape (n_lines, n_energies).

    `a` (n_energies,) and `b` (n_lines,) are the attenuations along the way in and out, cm2/g.
    """
    s = a[None, :] + b[:, None]
    if math.isinf(g_cm2):
        return np.asarray(1.0 / s)
    return np.asarray(-np.expm1(-s * g_cm2) / s)


def enhancement(
    production_by_line: NDArray[np.float64],
    exciting_flux: NDArray[np.float64],
    a: NDArray[np.float64],
    mu_exciting: NDArray[np.float64],
    b: NDArray[np.float64],
) -> NDArray[np.float64]:
    """Secondary fluorescence of a thick sample, per unit geometry (Shiraiwa & Fujino 1966).

    Parameters
    ----------
    production_by_line : ndarray, shape (n_lines, n_exciting)
        Photons of each line per photon of each exciting line and g/cm2 (mass fraction included).
    exciting_flux : ndarray, shape (n_exciting, n_energies)
        Photons of each exciting line per incident photon bin and g/cm2 (mass fraction included).
    a : ndarray, shape (n_energies,)
        Attenuation along the way in, ``mu(E) / sin psi1``.
    mu_exciting : ndarray, shape (n_exciting,)
        The sample's mass attenuation for the exciting lines.
    b : ndarray, shape (n_lines,)
        Attenuation along the way out, ``mu(E_line) / sin psi2``.

    Returns
    -------
    ndarray, shape (n_lines,)
        In the units in which the primary term is ``sum(production * escape_depth)``.
    """
    la = np.log1p(a[None, :] / mu_exciting[:, None]) / a[None, :]  # (n_exciting, n_energies)
    lb = np.log1p(b[:, None] / mu_exciting[None, :]) / b[:, None]  # (n_lines, n_exciting)
    depth = 1.0 / (a[None, :] + b[:, None])  # (n_lines, n_energies)
    with_a = depth @ (exciting_flux * la).T
    with_b = lb * (depth @ exciting_flux.T)
    return np.asarray(0.5 * np.sum(production_by_line * (with_a + with_b), axis=1))


def sample_attenuation(fractions: NDArray[np.float64], energy_kev: NDArray[np.float64]) -> NDArray[np.float64]:
    """Mass attenuation, cm2/g, of mass fractions (92,) at energies (n,)."""
    present = np.flatnonzero(fractions)
    return np.asarray(fractions[present] @ attenuation_table(energy_kev)[present])
