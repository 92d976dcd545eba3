import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from xrfid.atoms.absorption import (
    ALL_Z,
    GAS_DENSITY_G_CM3,
    attenuation_table,
    compton_momentum_profile,
    gas_transmission,
    layer_transmission,
    mass_attenuation,
    material,
    scatter_tables,
)
from xrfid.errors import InputError

kev = st.floats(0.2, 200.0)


@settings(max_examples=40, deadline=None)
@given(energy=kev, w=st.floats(0.0, 1.0))
def test_mixtures_add_by_mass(energy, w):
    mixed = mass_attenuation({8: w, 82: 1.0 - w}, energy)[0]
    parts = w * mass_attenuation({8: 1.0}, energy)[0] + (1.0 - w) * mass_attenuation({82: 1.0}, energy)[0]
    assert mixed == pytest.approx(parts)


def test_the_table_holds_every_element_alone():
    energy = np.array([1.3, 5.9, 17.4, 60.0])
    table = attenuation_table(energy)
    assert table.shape == (92, 4)
    for z in (1, 14, 26, 92):
        assert table[z - 1] == pytest.approx(mass_attenuation({z: 1.0}, energy))


@pytest.mark.parametrize(("z", "edge", "jump"), [(26, 7.112, 7.5), (47, 25.514, 6.2), (82, 13.035, 2.4)])
def test_absorption_jumps_at_the_edge(z, edge, jump):
    """Jump ratios of Fe K, Ag K and Pb L3; from memory, within 15 %."""
    below, above = mass_attenuation({z: 1.0}, [0.985 * edge, 1.015 * edge])
    assert above / below == pytest.approx(jump, rel=0.15)


@settings(max_examples=30, deadline=None)
@given(energy=kev, thickness=st.floats(0.0, 500.0))
def test_two_sheets_pass_what_one_of_both_thicknesses_passes(energy, thickness):
    one, two = (float(layer_transmission("Al", t, energy)[0]) for t in (thickness, 2.0 * thickness))
    assert 0.0 <= two <= one <= 1.0
    assert two == pytest.approx(one**2, abs=1e-12)


def test_beryllium_window_of_the_trade():
    """12.5 um Be pass about a third of Na K and nine tenths of S K (common practice, no source)."""
    na, s = layer_transmission("Be", 12.5, [1.041, 2.308])
    assert 0.2 < na < 0.5
    assert s > 0.85


def test_a_stated_density_takes_the_place_of_the_known_one():
    assert layer_transmission("Al", 10.0, 5.0, 5.4) == pytest.approx(layer_transmission("Al", 20.0, 5.0, 2.7))


def test_gases():
    assert np.all(gas_transmission("vacuum", 50.0, [1.0, 5.0]) == 1.0)
    assert np.all(gas_transmission("air", 0.0, [1.0, 5.0]) == 1.0)
    air, helium = (gas_transmission(g, 10.0, [1.74])[0] for g in ("air", "helium"))
    assert helium > 0.99
    expected = math.exp(-float(mass_attenuation({7: 0.755, 8: 0.232, 18: 0.013}, 1.74)[0]) * GAS_DENSITY_G_CM3["air"])
    assert air == pytest.approx(expected)  # 10 mm are 1 cm


def test_materials_by_symbol_formula_and_name():
    assert material("Fe") == (((26, 1.0),), pytest.approx(7.87, abs=0.02))
    assert sum(w for _, w in material("Al2O3")[0]) == pytest.approx(1.0)
    assert dict(material("Al2O3")[0])[13] == pytest.approx(2 * 26.982 / 101.961, rel=1e-3)
    assert math.isnan(material("Al2O3")[1]) or material("Al2O3")[1] > 3
    assert material("water")[1] == pytest.approx(1.0)


def test_wrong_materials_are_refused():
    with pytest.raises(InputError, match=r"Unobtainium.*is no element"):
        material("Unobtainium")
    with pytest.raises(InputError, match="has no known density; add density_g_cm3"):
        layer_transmission("Fe3C", 1.0, 5.0)


def test_incoherent_scatter_of_light_atoms_is_klein_nishina():
    """Klein & Nishina 1929: at 60 keV and 120 degrees the electrons of carbon are all but free."""
    _, incoherent = scatter_tables(np.array([60.0]), 120.0)
    ratio = 1.0 / (1.0 + 60.0 / 511.0 * (1.0 - math.cos(math.radians(120.0))))
    per_electron = 0.5 * 7.9408e-26 * ratio**2 * (ratio + 1.0 / ratio - math.sin(math.radians(120.0)) ** 2)
    assert incoherent[5, 0] == pytest.approx(6 * per_electron * 6.02214e23 / 12.011, rel=0.03)


# Coherent / incoherent at 20.216 keV and 135 degrees, worked from Hubbell's form factors and scattering functions
@pytest.mark.parametrize(("formula", "ratio"), [("CH2", 0.06), ("SiO2", 0.19), ("Al", 0.21), ("CaCO3", 0.31),
                                                ("Fe", 1.2), ("Cu", 1.4), ("Sn", 3.7), ("Pb", 8.4)])  # fmt: skip
def test_coherent_scatter_grows_with_the_mean_atomic_number(formula, ratio):
    coherent, incoherent = scatter_tables(np.array([20.216]), 135.0)
    w = np.zeros(ALL_Z.size)
    for z, share in material(formula)[0]:
        w[z - 1] = share
    assert (w @ coherent[:, 0]) / (w @ incoherent[:, 0]) == pytest.approx(ratio, rel=0.09)


def test_the_compton_profile_holds_every_electron():
    """Biggs et al. 1975: the profile integrates to the number of electrons, here per gram over Avogadro."""
    p = np.linspace(-98.0, 98.0, 20_001)
    for z, mass in ((6, 12.011), (26, 55.845)):
        w = np.zeros(ALL_Z.size)
        w[z - 1] = 1.0
        area = float(np.trapezoid(compton_momentum_profile(w, p), p))
        assert area == pytest.approx(z / mass, rel=0.01)
    assert compton_momentum_profile(w, np.array([500.0]))[0] == 0.0
