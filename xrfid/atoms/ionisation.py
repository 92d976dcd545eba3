"""How many photons each sub-shell sends out per incident photon: photo-ionisation, transfer, yield."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from xrfid.atoms.library import xraylib, xraylib_np
from xrfid.atoms.lines import SUBSHELLS, edge_energies

# A line that every element with that sub-shell in reach has; production / its rate = the whole sub-shell.
_PROBES = {
    "K": ("KL3", "KL2"),
    "L1": ("L1M3", "L1M2"),
    "L2": ("L2M4", "L2M1"),
    "L3": ("L3M5", "L3M1"),
    "M1": ("M1N2", "M1N3"),
    "M2": ("M2N4", "M2N1"),
    "M3": ("M3N5", "M3N1"),
    "M4": ("M4N6", "M4N2"),
    "M5": ("M5N7", "M5N3"),
}


def subshell_emission(z: NDArray[np.intp], energy_kev: NDArray[np.float64]) -> NDArray[np.float64]:
    """Photons per incident photon and g/cm2 that each sub-shell emits.

    Photo-ionisation cross section of the sub-shell (Kissel; Scofield 1973 renormalised), vacancies
    received by Coster-Kronig transfer and by radiative and Auger cascades from deeper shells,
    times the fluorescence yield.

    Parameters
    ----------
    z : ndarray of int, shape (n_elements,)
        Atomic numbers.
    energy_kev : ndarray, shape (n_energies,)
        Energies of the incident photons, keV.

    Returns
    -------
    ndarray, shape (n_elements, 9, n_energies)
        cm2/g, sub-shells in the order of `SUBSHELLS`; 0 below the edge.
    """
    zc = np.asarray(z, dtype=np.int64)
    energy = np.ascontiguousarray(energy_kev, dtype=float)
    out = np.zeros((zc.size, len(SUBSHELLS), energy.size))
    edges = edge_energies()[zc]
    top = float(energy.max(initial=0.0))
    for s, name in enumerate(SUBSHELLS):
        within = np.flatnonzero((edges[:, s] > 0.3) & (edges[:, s] < top))
        for probe in _PROBES[name]:
            if not within.size:
                break
            macro = np.array([getattr(xraylib, f"{probe}_LINE")], dtype=np.int64)
            rate = xraylib_np.RadRate(zc[within], macro)[:, 0]
            good = within[rate > 1e-3]
            if good.size:
                made = xraylib_np.CS_FluorLine_Kissel_Cascade(zc[good], macro, energy)[:, 0]
                out[good, s] = made / rate[rate > 1e-3, None]
            within = within[rate <= 1e-3]
    return out
