import numpy as np
import pytest

from xrfid.atoms.elements import ATOMIC_NUMBER, CANDIDATE_Z, SYMBOLS, symbol
from xrfid.atoms.ionisation import subshell_emission
from xrfid.atoms.library import xraylib
from xrfid.atoms.lines import GROUPS, LOWEST_LINE_KEV, SUBSHELLS, edge_energies, line_name, line_table


def test_symbols_and_numbers_are_inverse():
    assert all(symbol(ATOMIC_NUMBER[s]) == s for s in SYMBOLS)
    assert (symbol(1), symbol(26), symbol(92)) == ("H", "Fe", "U")


def test_every_line_is_below_its_sub_shells_edge():
    t = line_table()
    edge = edge_energies()[t.z, t.subshell]
    assert np.all(t.energy_kev < edge + 1e-3)
    assert t.energy_kev.min() >= LOWEST_LINE_KEV


def test_rates_of_a_sub_shell_add_up_to_one():
    """All lines together are the sub-shell's radiative decays; weak and soft ones are left out."""
    t = line_table()
    total = np.zeros((93, len(SUBSHELLS)))
    np.add.at(total, (t.z, t.subshell), t.rate)
    assert total.max() < 1.0 + 1e-4
    k = total[CANDIDATE_Z[4] :, 0]
    assert k.min() > 0.97
    assert total[50:, 1:4].min() > 0.9  # L1 to L3 from tin on


def test_each_series_has_a_main_group_that_is_its_strongest():
    t = line_table()
    for series in ("K", "L", "M"):
        assert sum(g.tolerance == 0 for g in GROUPS if g.series == series) == 1
    for z, series in (("Fe", "K"), ("Pb", "L"), ("Au", "M")):
        rows = t.of(ATOMIC_NUMBER[z], series)
        emission = subshell_emission(np.array([ATOMIC_NUMBER[z]]), np.array([30.0]))[0, :, 0]
        strength = np.bincount(t.group[rows], emission[t.subshell[rows]] * t.rate[rows], minlength=len(GROUPS))
        assert GROUPS[int(np.argmax(strength))].tolerance == 0


def test_groups_belong_to_the_series_of_their_lines():
    t = line_table()
    letters = np.array([g.series for g in GROUPS])[t.group]
    assert np.all(letters == np.array([t.series_keys[i][1] for i in t.series]))
    assert np.all(np.array([SUBSHELLS[s][0] for s in t.subshell]) == letters)


def test_a_series_that_does_not_exist_has_no_lines():
    assert line_table().of(12, "M").size == 0


@pytest.mark.parametrize(("plain", "greek"), [("Ka1", "Kα1"), ("Lb2", "Lβ2"), ("Lg1", "Lγ1"), ("Ln", "Lη"),
                                              ("M4-N3", "M4-N3"), ("Ma1", "Mα1")])  # fmt: skip
def test_line_names_in_greek(plain, greek):
    assert line_name(plain) == greek


def test_natural_widths_grow_with_the_atomic_number():
    """Campbell & Papp 2001 (from memory): Fe K-alpha about 1.6 eV, Mo 6 eV, W 43 eV."""
    t = line_table()
    width = [1e3 * t.width_kev[next(r for r in t.of(z, "K") if t.names[r] == "Ka1")] for z in (26, 42, 74)]
    assert width == pytest.approx([1.6, 6.3, 43.0], rel=0.15)


@pytest.mark.parametrize(("element", "shell"), [("Fe", 0), ("Pb", 3), ("Pb", 1), ("Au", 8)])
def test_nothing_is_emitted_below_the_edge(element, shell):
    edge = edge_energies()[ATOMIC_NUMBER[element]][shell]
    below, above = subshell_emission(np.array([ATOMIC_NUMBER[element]]), edge * np.array([0.99, 1.01]))[0, shell]
    assert below == 0.0
    assert above > 0.0


# Krause, J. Phys. Chem. Ref. Data 8 (1979) 307, K fluorescence yields; from memory
@pytest.mark.reference
@pytest.mark.parametrize(("element", "omega"), [
    ("Ca", 0.163), ("Ti", 0.214), ("Cr", 0.275), ("Fe", 0.340), ("Cu", 0.440), ("Zn", 0.474), ("Mo", 0.765),
    ("Ag", 0.831),
])  # fmt: skip
def test_k_emission_is_ionisation_times_yield(element, omega):
    z, kev = ATOMIC_NUMBER[element], 1.3 * edge_energies()[ATOMIC_NUMBER[element]][0]
    ionised = xraylib.CS_Photo_Partial(z, xraylib.K_SHELL, kev)
    assert subshell_emission(np.array([z]), np.array([kev]))[0, 0, 0] / ionised == pytest.approx(omega, rel=0.06)


def test_emission_of_several_elements_equals_that_of_each():
    z, kev = np.array([26, 50, 82]), np.array([9.0, 20.0, 35.0])
    together = subshell_emission(z, kev)
    for i, one in enumerate(z):
        assert np.allclose(together[i], subshell_emission(np.array([one]), kev)[0])
