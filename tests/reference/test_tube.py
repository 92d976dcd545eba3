"""The tube's output against a second published model and the old laws."""

import math
from itertools import pairwise

import numpy as np
import pytest

from xrfid.atoms.elements import ATOMIC_NUMBER
from xrfid.atoms.lines import edge_energies, line_table
from xrfid.response.excitation import braking_continuum, continuum_bins, target_lines

pytestmark = pytest.mark.reference
TAKEOFF = 20.0


def pella(anode, kv, line_kev):
    """K-alpha photons per photon of continuum and keV at the line.

    Pella, Feng & Small, X-Ray Spectrom. 14 (1985) 125, fitted to measured tubes; formula and constants from memory.
    """
    z = ATOMIC_NUMBER[anode]
    u = kv / edge_energies()[z][0]
    depth = math.exp(-0.5 * ((u - 1.0) / (1.17 * u + 3.2)) ** 2)
    per_angstrom = depth * (3.22e6 / (9.76e4 + z**4) - 0.39) * (u * math.log(u) / (u - 1.0) - 1.0)
    return per_angstrom * line_kev**2 / 12.3984  # dE / d(lambda) = E / lambda


@pytest.mark.parametrize("kv", [30, 40, 50])
@pytest.mark.parametrize("anode", ["Cr", "Cu", "Mo", "Rh", "Ag"])
def test_lines_to_continuum_as_in_a_second_model(anode, kv):
    """Two models fitted to different measurements: within 30 %, as such models are (common practice, no source)."""
    energy, photons, _, group = target_lines(ATOMIC_NUMBER[anode], kv, TAKEOFF)
    alpha = np.array([g == "Ka" for g in group])
    line = float(np.average(energy[alpha], weights=photons[alpha]))
    beside = float(braking_continuum(ATOMIC_NUMBER[anode], kv, np.array([line]), TAKEOFF)[0])
    assert photons[alpha].sum() / beside == pytest.approx(pella(anode, kv, line), rel=0.3)


@pytest.mark.parametrize(("anode", "kv"), [("Rh", 40.0), ("W", 50.0), ("Mo", 30.0)])
def test_the_continuum_follows_kramers_law(anode, kv):
    """Kramers, Phil. Mag. 46 (1923) 836: E0/E - 1 per keV, within 25 % where the target absorbs little."""
    energy = np.linspace(0.5 * kv, 0.9 * kv, 9)
    edges = edge_energies()[ATOMIC_NUMBER[anode]]
    energy = energy[np.abs(energy[:, None] / np.maximum(edges, 0.01) - 1.0).min(axis=1) > 0.1]
    made = braking_continuum(ATOMIC_NUMBER[anode], kv, energy, TAKEOFF)
    relative = made / (kv / energy - 1.0)
    assert relative / relative.mean() == pytest.approx(np.ones(energy.size), abs=0.25)


def continuum_energy(anode, kv):
    energy, width = continuum_bins(kv)
    return float(np.sum(energy * width * braking_continuum(ATOMIC_NUMBER[anode], kv, energy, 90.0)))


@pytest.mark.parametrize("anode", ["Cr", "Rh", "W"])
def test_radiated_energy_goes_with_the_voltage_squared(anode):
    """Compton & Allison 1935: efficiency 1.1e-9 Z V, so energy as Z V^2; the target's absorption takes a little."""
    exponent = math.log(continuum_energy(anode, 50.0) / continuum_energy(anode, 25.0)) / math.log(2.0)
    assert exponent == pytest.approx(2.0, abs=0.25)


def test_radiated_energy_rises_with_the_targets_atomic_number():
    found = [continuum_energy(a, 40.0) for a in ("Ti", "Cu", "Mo", "W")]
    assert all(a < b for a, b in pairwise(found))


def test_efficiency_of_a_tungsten_tube():
    """1.1e-9 Z V (Compton & Allison 1935, from memory): 0.33 % at 40 kV, into all directions.

    Photons/(s sr mA) times 4 pi against 40 kV x 1 mA; within a factor of two, for absorption in the target.
    """
    watts = 4.0 * math.pi * continuum_energy("W", 40.0) * 1.602e-16
    assert watts / 40.0 == pytest.approx(1.1e-9 * 74 * 40e3, rel=0.5)


@pytest.mark.parametrize("kv", [20.0, 40.0, 60.0])
def test_a_tungsten_tube_sends_out_mostly_braking_radiation(kv):
    """Common practice, no source: the L lines are a third at most (counted above 3 keV, unfiltered)."""
    energy, width = continuum_bins(kv)
    braking = braking_continuum(74, kv, energy, TAKEOFF) * width
    line_kev, photons, _, _ = target_lines(74, kv, TAKEOFF)
    assert photons[line_kev > 3.0].sum() < 0.5 * braking[energy > 3.0].sum()


def test_lines_need_the_edge():
    """Duane & Hunt, in the other direction: Mo K (20.0 keV) at 19 kV never, at 22 kV weakly."""
    _, _, series, _ = target_lines(42, 19.0, TAKEOFF)
    assert "K" not in series
    _, low, at_22, _ = target_lines(42, 22.0, TAKEOFF)
    _, high, at_40, _ = target_lines(42, 40.0, TAKEOFF)
    weak, strong = (
        sum(p for p, s in zip(n, names, strict=True) if s == "K") for n, names in ((low, at_22), (high, at_40))
    )
    assert 0 < weak < 0.1 * strong


def test_tube_lines_have_the_fluorescence_shares_within_a_sub_shell():
    energy, photons, _, group = target_lines(45, 40.0, 90.0)
    rows = line_table().of(45, "K")
    rate = {g: line_table().rate[rows][line_table().group[rows] == i].sum() for i, g in ((0, "Ka"), (1, "Kb"))}
    made = {g: sum(p for p, n in zip(photons, group, strict=True) if n == g) for g in ("Ka", "Kb")}
    assert made["Kb"] / made["Ka"] == pytest.approx(rate["Kb"] / rate["Ka"], rel=0.03)
    assert energy.max() < 23.3
