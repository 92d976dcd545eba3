"""Line data of our own, where the data set used (Elam, Ravel & Sieber 2002) is known to be wrong.

Sources. Energies of K lines: Bearden, Rev. Mod. Phys. 39 (1967) 78, as reprinted in the X-ray Data
Booklet; typed from memory and compared with differences of absorption edges, from which they stray by
less than 3 eV. K-beta/K-alpha: Scofield, Phys. Rev. A 9 (1974) 1041, exchange-corrected (Ti to Zn), and,
from memory, the trend of measured values below. M lines: shares as they appear in published
wavelength-dispersive spectra of heavy metals, from memory and good to 20 to 30 per cent.
"""

from __future__ import annotations

K_ENERGIES_EV: dict[int, tuple[float, float, float]] = {
    # Z: K-alpha 1, K-alpha 2, K-beta 1,3
    11: (1040.98, 1040.98, 1071.1), 12: (1253.60, 1253.60, 1302.2), 13: (1486.70, 1486.27, 1557.45),
    14: (1739.98, 1739.38, 1835.94), 15: (2013.7, 2012.7, 2139.1), 16: (2307.84, 2306.64, 2464.04),
    17: (2622.39, 2620.78, 2815.6), 18: (2957.70, 2955.63, 3190.5), 19: (3313.8, 3311.1, 3589.6),
    20: (3691.68, 3688.09, 4012.7), 21: (4090.6, 4086.1, 4460.5), 22: (4510.84, 4504.86, 4931.81),
    23: (4952.20, 4944.64, 5427.29), 24: (5414.72, 5405.51, 5946.71), 25: (5898.75, 5887.65, 6490.45),
    26: (6403.84, 6390.84, 7057.98), 27: (6930.32, 6915.30, 7649.43), 28: (7478.15, 7460.89, 8264.66),
    29: (8047.78, 8027.83, 8905.29), 30: (8638.86, 8615.78, 9572.0), 31: (9251.74, 9224.82, 10264.2),
    32: (9886.42, 9855.32, 10982.1), 33: (10543.72, 10507.99, 11726.2), 34: (11222.4, 11181.4, 12495.9),
    35: (11924.2, 11877.6, 13291.4), 36: (12649.0, 12598.0, 14112.0), 37: (13395.3, 13335.8, 14961.3),
    38: (14165.0, 14097.9, 15835.7), 39: (14958.4, 14882.9, 16737.8), 40: (15775.1, 15690.9, 17667.8),
    41: (16615.1, 16521.0, 18622.5), 42: (17479.34, 17374.3, 19608.3),
}  # fmt: skip
"""Above molybdenum the tables' own energies agree with these to a few eV, a thirtieth of a line's width."""

KB_TO_KA: dict[int, float] = {
    # below argon: trend of measured ratios, from memory; Ti to Zn: Scofield 1974 with exchange
    11: 0.003, 12: 0.008, 13: 0.0134, 14: 0.0294, 15: 0.0474, 16: 0.0659, 17: 0.0862, 18: 0.1088,
    19: 0.1211, 20: 0.1315, 21: 0.1330, 22: 0.1355, 23: 0.1346, 24: 0.1337, 25: 0.1385, 26: 0.1391,
    27: 0.1396, 28: 0.1401, 29: 0.1379, 30: 0.1410,
}  # fmt: skip
"""Photons in all K-beta lines per photon in all K-alpha lines."""

M_LINES: tuple[tuple[str, str, str, float], ...] = (
    # subshell of the vacancy, level that fills it, group, share of the subshell's photons
    ("M5", "N7", "Ma", 0.90), ("M5", "N6", "Ma", 0.05), ("M5", "N3", "Mz", 0.05),
    ("M4", "N6", "Mb", 0.95), ("M4", "N2", "Mz", 0.05),
    ("M3", "N5", "Mg", 0.83), ("M3", "N4", "Mg", 0.09), ("M3", "O5", "M3O", 0.08),
    ("M2", "N4", "M2N", 0.90), ("M2", "O4", "M2O", 0.10),
)  # fmt: skip

M_YIELDS: dict[str, dict[int, float]] = {
    # anchors from Elam's table where it has them (Au, Pb, U); falling towards the lanthanides as the
    # average M yields of Hubbell et al., J. Phys. Chem. Ref. Data 23 (1994) 339 (from memory) do
    "M5": {57: 0.0028, 64: 0.0085, 72: 0.0160, 79: 0.0256, 82: 0.0308, 92: 0.0560},
    "M4": {57: 0.0027, 64: 0.0083, 72: 0.0160, 79: 0.0264, 82: 0.0314, 92: 0.0540},
    "M3": {57: 0.0010, 72: 0.0030, 79: 0.0048, 82: 0.0055, 92: 0.0090},
    "M2": {57: 0.0010, 72: 0.0028, 79: 0.0045, 82: 0.0052, 92: 0.0085},
}

COSTER_KRONIG_M: tuple[tuple[str, str, float], ...] = (
    # from, to, probability; order of magnitude for Z of 70 to 92, from memory
    ("M1", "M3", 0.45), ("M1", "M4", 0.12), ("M1", "M5", 0.18), ("M2", "M4", 0.62), ("M2", "M5", 0.08),
    ("M3", "M4", 0.09), ("M3", "M5", 0.66), ("M4", "M5", 0.30),
)  # fmt: skip

AUGER_TO_L: dict[str, float] = {"L1": 0.35, "L2": 0.45, "L3": 0.75}
"""Vacancies left in each L subshell by one radiationless K transition (KLL and KLX; from memory)."""
L_TO_M: dict[str, float] = {"M1": 0.06, "M2": 0.09, "M3": 0.20, "M4": 0.38, "M5": 0.55}
"""M vacancies left by one L vacancy (from memory; sums of 0.9 to 1.4 occur in calculated tables)."""

COMPTON_MOMENTUM: dict[int, float] = {1: 0.85, 6: 1.36, 8: 2.00, 13: 1.04, 26: 1.85, 50: 1.9, 82: 2.3}
"""FWHM of the Compton profile in atomic units of momentum; C, O, Al, Fe after Biggs, Mendelsohn & Mann,
At. Data Nucl. Data Tables 16 (1975) 201; H, Sn, Pb from memory."""
