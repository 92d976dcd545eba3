"""Energies, shares of line groups and attenuation against a second data set, over the whole range.

The product reads xraylib; the second set is xraydb (Elam, Ravel & Sieber, Radiat. Phys. Chem. 63 (2002)
121), with yields and Coster-Kronig probabilities of its own and jump ratios for the vacancies.
"""

import math

import numpy as np
import pytest
import xraydb

from xrfid.atoms.absorption import mass_attenuation
from xrfid.atoms.elements import ATOMIC_NUMBER, SYMBOLS
from xrfid.atoms.ionisation import subshell_emission
from xrfid.atoms.lines import GROUPS, edge_energies, line_table

pytestmark = pytest.mark.reference

TOLERANCE = {g.name: g.tolerance for g in GROUPS}


def energy(z, name):
    table = line_table()
    rows = np.flatnonzero(table.z == z)
    return next((float(table.energy_kev[r]) for r in rows if table.names[r] == name), None)


# Where the two differ by more than 3 eV below 60 keV. The third figure, keV, is the measured one of the X-ray Data
# Booklet (after Bearden 1967; typed from memory); it sides with ours. Krypton and xenon are measured as gas and solid.
EXCEPTIONS = {
    ("Kr", "Ka1"): 12.649, ("Xe", "Ka1"): 29.779, ("Cl", "Kb1"): 2.8156, ("Sc", "Kb1"): 4.4605, ("Tc", "Kb1"): 20.619,
    ("Xe", "Kb1"): 33.624, ("Cs", "Kb1"): 34.987, ("La", "Kb1"): 37.801, ("La", "La1"): 4.6510, ("Sm", "La1"): 5.6361,
    ("Eu", "La1"): 5.8457, ("Gd", "La1"): 6.0572, ("La", "Lb1"): 5.0421, ("Sm", "Lb1"): 6.2051, ("Gd", "Lb1"): 6.7132,
    ("Xe", "Lb1"): None,  # not in the booklet; 3.7 eV between the two
}  # fmt: skip


@pytest.mark.parametrize("name", ["Ka1", "Kb1", "La1", "Lb1"])
def test_energies_agree_within_3_ev(name):
    seen, off = 0, []
    for z in range(11, 93):
        ours, theirs = energy(z, name), xraydb.xray_lines(z).get(name)
        if ours is None or theirs is None or ours > 60.0:
            continue
        seen += 1
        if abs(1e3 * ours - theirs.energy) > 3.0:
            off.append((SYMBOLS[z - 1], name))
    assert seen >= 58
    assert set(off) == {key for key in EXCEPTIONS if key[1] == name}


@pytest.mark.parametrize(("element", "name"), [key for key, known in EXCEPTIONS.items() if known])
def test_where_they_disagree_the_measured_value_sides_with_ours(element, name):
    z = ATOMIC_NUMBER[element]
    ours, known = energy(z, name), EXCEPTIONS[element, name]
    assert ours == pytest.approx(known, abs=0.0018)
    assert abs(ours - known) <= abs(xraydb.xray_lines(z)[name].energy * 1e-3 - known) + 5e-4


# From memory: X-ray Data Booklet, table 1-2. xraylib alone would put these 2 to 5 eV elsewhere.
@pytest.mark.parametrize(("element", "name", "kev"), [
    ("P", "Kb1", 2.1391), ("U", "La1", 13.6147), ("U", "La2", 13.4388), ("U", "Lb1", 17.2200), ("U", "Lb2", 16.4283),
    ("Pa", "Lb1", 16.702), ("Kr", "La1", 1.5860), ("Xe", "La1", 4.1099), ("Xe", "Ka1", 29.779),
])  # fmt: skip
def test_energies_that_were_put_right(element, name, kev):
    assert energy(ATOMIC_NUMBER[element], name) == pytest.approx(kev, abs=1e-4)


# From memory: X-ray Data Booklet, table 1-2; heavy elements' weaker lines and M lines
@pytest.mark.parametrize(("element", "name", "kev"), [
    ("W", "Lb2", 9.9615), ("W", "Lg1", 11.2859), ("Au", "Lb1", 11.4423), ("Au", "Lb2", 11.5847), ("Hg", "Lb2", 11.9241),
    ("Pb", "Lb2", 12.6226), ("Pb", "Lg1", 14.7644), ("Bi", "Lb1", 13.0235), ("Th", "Lb1", 16.2022),
    ("Au", "Ma1", 2.1229), ("Hg", "Ma1", 2.1953), ("Bi", "Ma1", 2.4226), ("Pb", "Ma1", 2.3455), ("W", "Ma1", 1.7754),
])  # fmt: skip
def test_heavy_elements_weaker_lines(element, name, kev):
    assert energy(ATOMIC_NUMBER[element], name) == pytest.approx(kev, abs=0.0025)


GROUP_OF = {"Ka1": "Ka", "Ka2": "Ka", "Kb1": "Kb", "Kb2": "Kb", "Kb3": "Kb", "Kb4": "Kb", "Kb5": "Kb", "La1": "La",
            "La2": "La", "Ll": "Ll", "Lb2,15": "Lb2", "Lb6": "Lb6", "Lb5": "Lb5", "Lb1": "Lb1", "Ln": "Le",
            "Lg1": "Lg1", "Lg6": "Lg6", "Lb3": "Lb3", "Lb4": "Lb3", "Lg2": "Lg3", "Lg3": "Lg3"}  # fmt: skip


def our_shares(z, kev, series):
    """Emission of each line group when excited at `kev`, relative to the main group's."""
    table, emission = line_table(), subshell_emission(np.array([z]), np.array([kev]))[0, :, 0]
    made = {}
    for r in table.of(z, series):
        name = GROUPS[table.group[r]].name
        made[name] = made.get(name, 0.0) + emission[table.subshell[r]] * table.rate[r]
    return {g: v / made[series + "a"] for g, v in made.items()}


def their_shares(z, kev, series):
    """The same from jump ratios, Coster-Kronig transfer, yields and line strengths of the second set."""
    edges, vacancies, left = xraydb.xray_edges(z), {}, 1.0
    for shell in ("K", "L1", "L2", "L3"):
        vacancies[shell] = 0.0
        if shell in edges and kev * 1e3 > edges[shell].energy:
            vacancies[shell] = left * (1.0 - 1.0 / edges[shell].jump_ratio)
            left /= edges[shell].jump_ratio
    for to, origins in {"L2": ("L1",), "L3": ("L1", "L2")}.items():
        for origin in origins:
            vacancies[to] += vacancies[origin] * (xraydb.ck_probability(z, origin, to, total=False) or 0.0)
    made = {}
    for name, line in xraydb.xray_lines(z).items():
        group, shell = GROUP_OF.get(name, ""), line.initial_level
        if group.startswith(series) and shell in vacancies:
            made[group] = made.get(group, 0.0) + vacancies[shell] * edges[shell].fyield * line.intensity
    return {g: v / made[series + "a"] for g, v in made.items()}


def deviations(z, series, shells=1.3):
    """ln(ours / theirs) of each group in units of its tolerance, excited at 1.3 times the highest edge."""
    kev = shells * xraydb.xray_edges(z)["K" if series == "K" else "L1"].energy * 1e-3
    ours, theirs = our_shares(z, kev, series), their_shares(z, kev, series)
    return {g: (math.log(ours[g] / theirs[g]) / TOLERANCE[g], ours[g])
            for g in ours if TOLERANCE[g] > 0 and theirs.get(g, 0.0) > 0}  # fmt: skip


L_ELEMENTS = range(40, 93)


def test_shares_of_the_l_groups_agree_within_their_tolerances():
    """A tolerance is one standard uncertainty: its deviations scatter by about one, and no strong group by three."""
    by_group, wholly = {}, 0
    for z in L_ELEMENTS:
        found = deviations(z, "L")
        for group, (d, _) in found.items():
            by_group.setdefault(group, []).append(d)
        wholly += all(abs(d) < 2.0 for d, share in found.values() if share > 0.03)
    assert {"Lb1", "Lb2", "Lb3", "Lg1", "Ll", "Le", "Lb6", "Lg3"} <= set(by_group)
    for group, found in by_group.items():
        assert np.sqrt(np.mean(np.square(found))) < 1.25, group
    assert wholly >= 50  # of 53 elements every group above 3 per cent of L-alpha agrees within two


def test_shares_of_k_beta_agree_within_their_tolerance():
    """Ti to La; below titanium the second set's K-beta is an extrapolation of no use (Al 0.126 for 0.013)."""
    found = np.array([deviations(z, "K")["Kb"][0] for z in range(22, 58)])
    assert np.sqrt(np.mean(found**2)) < 1.25
    assert np.abs(found).max() < 2.5


def test_l1_lines_grow_with_the_excitation_energy():
    """Kissel's partial cross sections: L-beta3 of silver doubles from 1.1 to 2.5 times the L1 edge; of lead as well.

    .046 to .089 and .051 to .121 at 4 x, worked out with xraylib; jump ratios would keep it constant.
    """
    silver = edge_energies()[47][1]
    low, high = (our_shares(47, f * silver, "L")["Lb3"] for f in (1.1, 2.5))
    assert high / low == pytest.approx(0.089 / 0.046, rel=0.1)


def away_from_edges(z, kev, margin=0.06):
    edges = np.array([e.energy for e in xraydb.xray_edges(z).values()]) * 1e-3
    return kev[np.abs(kev[:, None] / edges - 1.0).min(axis=1) > margin]


@pytest.mark.parametrize("z", [*range(3, 93)])
def test_attenuation_agrees_within_3_per_cent(z):
    """Elam 2002 as another library holds it: checks our interpolation, units and edges from 1 to 60 keV."""
    kev = away_from_edges(z, np.geomspace(1.0, 60.0, 120))
    ours, theirs = mass_attenuation({z: 1.0}, kev), xraydb.mu_elam(z, kev * 1e3)
    assert np.abs(ours / theirs - 1.0).max() < 0.03


# cm2/g. NIST XAAMDI (Hubbell & Seltzer), from memory; air: dry, near sea level
@pytest.mark.parametrize(("mixture", "kev", "mu"), [
    ({7: 0.755, 8: 0.232, 18: 0.013}, 10.0, 5.120), ({7: 0.755, 8: 0.232, 18: 0.013}, 5.0, 40.27),
    ({1: 0.1119, 8: 0.8881}, 10.0, 5.329), ({1: 0.1119, 8: 0.8881}, 20.0, 0.8096),
    ({82: 1.0}, 10.0, 130.6), ({82: 1.0}, 50.0, 8.041), ({13: 1.0}, 30.0, 1.128), ({26: 1.0}, 20.0, 25.68),
])  # fmt: skip
def test_attenuation_of_handbook_materials(mixture, kev, mu):
    assert float(mass_attenuation(mixture, kev)[0]) == pytest.approx(mu, rel=0.03)
