"""Line energies and shares against handbook values and a second data set."""

import math

import numpy as np
import pytest
import xraydb

from xrfid.atoms.elements import ATOMIC_NUMBER, SYMBOLS
from xrfid.atoms.lines import GROUPS, line_table

pytestmark = pytest.mark.reference

# keV. X-ray Data Booklet (Lawrence Berkeley National Laboratory), table 1-2, after Bearden 1967; typed from memory.
HANDBOOK = {
    ("Na", "Ka1"): 1.0410, ("Al", "Ka1"): 1.4867, ("Si", "Ka1"): 1.7400, ("S", "Ka1"): 2.3078, ("K", "Ka1"): 3.3138,
    ("Ca", "Ka1"): 3.6917, ("Ti", "Ka1"): 4.5108, ("V", "Ka1"): 4.9522, ("Cr", "Ka1"): 5.4147, ("Mn", "Ka1"): 5.8988,
    ("Fe", "Ka1"): 6.4038, ("Fe", "Ka2"): 6.3908, ("Fe", "Kb1"): 7.0580, ("Co", "Ka1"): 6.9303, ("Ni", "Ka1"): 7.4782,
    ("Cu", "Ka1"): 8.0478, ("Cu", "Ka2"): 8.0278, ("Cu", "Kb1"): 8.9053, ("Zn", "Ka1"): 8.6389, ("As", "Ka1"): 10.5437,
    ("Br", "Ka1"): 11.9242, ("Zr", "Ka1"): 15.7751, ("Mo", "Ka1"): 17.4793, ("Rh", "Ka1"): 20.2161,
    ("Ag", "Ka1"): 22.1629, ("Sn", "Ka1"): 25.2713, ("Ba", "La1"): 4.4663, ("W", "La1"): 8.3976, ("W", "Lb1"): 9.6724,
    ("Au", "La1"): 9.7133, ("Hg", "La1"): 9.9888, ("Pb", "La1"): 10.5515, ("Pb", "Lb1"): 12.6137,
}  # fmt: skip


def energy(element: str, name: str) -> float:
    table = line_table()
    rows = np.flatnonzero(table.z == ATOMIC_NUMBER[element])
    return next(float(table.energy_kev[r]) for r in rows if table.names[r] == name)


@pytest.mark.parametrize(("element", "name"), HANDBOOK)
def test_energies_of_the_handbook(element, name):
    assert energy(element, name) == pytest.approx(HANDBOOK[element, name], abs=0.0012)


def test_moseleys_law():
    """Moseley, Phil. Mag. 26 (1913) 1024: the root of the K-alpha energy is linear in Z, as 10.2 eV (Z - 1)^2."""
    z = np.array([ATOMIC_NUMBER[s] for s in "Ca Ti V Cr Mn Fe Co Ni Cu Zn".split()])
    root = np.sqrt([1e3 * energy(SYMBOLS[i - 1], "Ka1") for i in z])
    slope, _ = np.polyfit(z, root, 1)
    assert slope**2 == pytest.approx(10.2, rel=0.05)
    assert np.abs(root - np.polyval(np.polyfit(z, root, 1), z)).max() < 0.1


# Exceptions: Pm, Po, At, Fr are not measured and interpolated in both; Xe is a gas, its values of other origin; for the
# light lanthanides, La, U and Pa the compilations differ by up to 5 eV.
_DIFFERENT = {"Pm", "Po", "At", "Fr", "Xe"}
_WORSE = {"La", "Nd", "Sm", "Eu", "Gd", "U", "Pa"}


@pytest.mark.parametrize(("name", "first", "last"), [("Ka1", "Na", "Ba"), ("La1", "Zr", "U"), ("Lb1", "Zr", "U")])
def test_energies_of_the_second_data_set(name, first, last):
    """xraydb (Elam, Ravel & Sieber 2002); its K energies are differences of its own edges."""
    off = {}
    for z in range(ATOMIC_NUMBER[first], ATOMIC_NUMBER[last] + 1):
        known = xraydb.xray_lines(z)
        if name in known and SYMBOLS[z - 1] not in _DIFFERENT:
            off[SYMBOLS[z - 1]] = abs(1e3 * energy(SYMBOLS[z - 1], name) - known[name].energy)
    assert len(off) >= 40
    assert max(v for k, v in off.items() if k not in _WORSE) < 3.2
    assert max(off.values()) < 5.1


def group_share(element: str, group: str, series: str) -> float:
    table = line_table()
    rows = table.of(ATOMIC_NUMBER[element], series)
    names = np.array([GROUPS[g].name for g in table.group[rows]])
    return float(table.rate[rows][names == group].sum())


def test_k_beta_shares_within_the_tolerance_of_the_second_data_set():
    """Elam 2002 (xraydb) against Scofield (xraylib): within 2.5 tolerances from Ti to Ba, and Scofield 1974 between."""
    tolerance = next(g.tolerance for g in GROUPS if g.name == "Kb")
    off = []
    for z in range(22, 57):
        known = xraydb.xray_lines(z, "K")
        alpha = sum(v.intensity for k, v in known.items() if k.startswith("Ka"))
        beta = sum(v.intensity for k, v in known.items() if k.startswith("Kb"))
        ours = group_share(SYMBOLS[z - 1], "Kb", "K") / group_share(SYMBOLS[z - 1], "Ka", "K")
        off.append(math.log(ours / (beta / alpha)) / tolerance)
    assert np.max(np.abs(off)) < 2.5
    # Scofield, Phys. Rev. A 9 (1974) 1041, exchange-corrected K-beta / K-alpha; from memory
    for element, ratio in {"Ti": 0.1355, "Cr": 0.1337, "Mn": 0.1385, "Fe": 0.1391, "Ni": 0.1401, "Cu": 0.1379}.items():
        ours = group_share(element, "Kb", "K") / group_share(element, "Ka", "K")
        assert abs(math.log(ours / ratio)) < 1.2 * tolerance


def test_a_line_depends_on_element_and_shell_only():
    """Common practice, no source: excitation changes how strong a line is, never where it lies."""
    from xrfid.instrument import Instrument
    from xrfid.response.series import Prediction

    def lines(voltage):
        p = Prediction(Instrument.from_table({"tube": {"anode": "Rh", "voltage_kv": voltage}}))
        return {(int(z), n): float(e) for z, n, e in zip(p.line_z, p.line_names, p.line_energy_kev, strict=True)}

    low, high = lines(20.0), lines(50.0)
    assert set(low) < set(high)
    assert all(high[k] == v for k, v in low.items())
