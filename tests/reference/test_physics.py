"""Absorption, excitation, scatter, escape, pile-up and Sherman's equation against published laws and figures."""

import math

import numpy as np
import pytest
import xraydb

from xrfid.atoms.absorption import mass_attenuation, material
from xrfid.atoms.elements import ATOMIC_NUMBER
from xrfid.instrument import Instrument
from xrfid.response.detector import escape_fraction, escape_lines
from xrfid.response.excitation import braking_continuum, continuum_bins, excitation
from xrfid.response.pileup import pair_spectrum
from xrfid.response.sample import mass_fractions
from xrfid.response.scatter import compton_energy
from xrfid.response.series import Prediction
from xrfid.spectrum import EnergyScale, Resolution

pytestmark = pytest.mark.reference


# cm2/g. NIST XCOM / Hubbell & Seltzer tables; from memory
@pytest.mark.parametrize(("z", "kev", "mu"), [
    (13, 10.0, 26.2), (13, 20.0, 3.44), (26, 10.0, 170.7), (29, 10.0, 215.9), (29, 20.0, 33.8), (82, 20.0, 86.4),
    (6, 10.0, 2.37), (14, 5.0, 245.0),
])  # fmt: skip
def test_attenuation_of_the_handbook(z, kev, mu):
    assert float(mass_attenuation({z: 1.0}, kev)[0]) == pytest.approx(mu, rel=0.03)


def test_attenuation_against_an_independent_calculation():
    """Chantler, J. Phys. Chem. Ref. Data 24 (1995) 71, in xraydb; 3 % away from edges, median over elements."""
    off = []
    for z in (13, 14, 20, 22, 26, 29, 30, 34, 40, 42, 47, 50, 56, 74, 79, 82):
        edges = np.array([e.energy for e in xraydb.xray_edges(z).values()]) * 1e-3
        for kev in (5.0, 8.0, 12.0, 18.0, 25.0, 40.0):
            if np.abs(edges / kev - 1.0).min() > 0.1:
                second = float(xraydb.mu_chantler(z, kev * 1e3, incoh=False, photo=False))
                off.append(float(mass_attenuation({z: 1.0}, kev)[0]) / second - 1.0)
    assert np.median(np.abs(off)) < 0.03
    assert np.quantile(np.abs(off), 0.9) < 0.08


def test_named_materials():
    composition, density = material("kapton")
    assert density == pytest.approx(1.42, abs=0.02)  # common practice, no source
    assert sum(w for _, w in composition) == pytest.approx(1.0)
    assert dict(material("SiO2")[0]) == pytest.approx({8: 0.5326, 14: 0.4674}, abs=1e-3)


@pytest.mark.parametrize(("kev", "angle", "shifted"), [
    (20.216, 90.0, 19.447), (20.216, 135.0, 18.937), (17.479, 90.0, 16.901), (22.163, 150.0, 20.504),
])  # fmt: skip
def test_compton_shift(kev, angle, shifted):
    """Compton, Phys. Rev. 21 (1923) 483: E / (1 + E (1 - cos theta) / 511 keV), worked by hand."""
    assert float(compton_energy(kev, angle)) == pytest.approx(shifted, abs=0.001)


def tube(anode="Rh", kv=40.0, ma=0.1, **more):
    return excitation(Instrument.from_table({"tube": {"anode": anode, "voltage_kv": kv, "current_ma": ma, **more}}))


def test_duane_hunt_limit():
    """Duane & Hunt 1915: no photon has more energy than the electrons, lambda_min[nm] = 1.23984 / kV."""
    made = tube(kv=35.0)
    edge = made.energy_kev[: made.n_continuum] + 0.5 * made.bin_kev
    assert edge[-1] == pytest.approx(35.0)
    assert 1.23984 / made.end_kev == pytest.approx(1.23984 / 35.0)
    assert made.photons[made.n_continuum - 1] < 0.01 * made.photons[: made.n_continuum].max()


def test_continuum_rises_with_voltage_squared_and_lines_with_current():
    """Kramers 1923: total braking energy goes with Z V^2 (unfiltered, absorption in the target aside)."""

    def energy(kv):
        e, width = continuum_bins(kv)
        return float(np.sum(e * braking_continuum(42, kv, e, 20.0) * width))

    assert math.log(energy(40.0) / energy(20.0)) / math.log(2.0) == pytest.approx(2.0, abs=0.3)
    assert tube(ma=0.3).photons.sum() == pytest.approx(3.0 * tube(ma=0.1).photons.sum())


def test_a_heavier_target_radiates_more_and_tungsten_mostly_continuum():
    """Kramers 1923 (proportional to Z); a W tube sends out mostly braking radiation (common practice, no source)."""
    e, width = continuum_bins(40.0)
    light, heavy = (float(np.sum(braking_continuum(z, 40.0, e, 20.0) * width)) for z in (24, 74))
    assert heavy > light
    w = tube("W", 60.0, filters=[{"material": "Al", "thickness_um": 1000.0}])
    assert w.photons[: w.n_continuum].sum() > 0.6 * w.photons.sum()


# per cent of parent plus escape: Reed & Ware 1972 with a K yield of 0.050
@pytest.mark.parametrize(
    ("kev", "percent"), [(2.308, 1.51), (3.692, 0.91), (5.895, 0.38), (6.399, 0.32), (8.041, 0.18)]
)
def test_escape_from_silicon(kev, percent):
    line = escape_lines("Si")
    total = sum(float(escape_fraction("Si", x, np.array([kev]))[0]) for x in line)
    assert 100 * total / (1 + total) == pytest.approx(percent, rel=0.06)
    assert line[0].loss_kev == pytest.approx(1.740, abs=0.002)


def test_escape_from_germanium():
    """Reed & Ware 1972: 12 % near Br K-alpha for the K-alpha escape."""
    fraction = float(escape_fraction("Ge", escape_lines("Ge")[0], np.array([11.9]))[0])
    assert fraction / (1 + fraction) == pytest.approx(0.12, abs=0.02)


@pytest.mark.parametrize(
    ("noise", "kev", "fwhm"), [(50, 5.899, 127), (80, 8.048, 159), (30, 22.16, 229), (120, 1.487, 134)]
)
def test_resolution_of_silicon(noise, kev, fwhm):
    """FWHM^2 = N^2 + 2.355^2 F eps E with F = 0.115, eps = 3.65 eV, worked by hand."""
    assert float(Resolution(float(noise)).fwhm_kev(kev)) * 1e3 == pytest.approx(fwhm, abs=1.0)


def test_sum_peaks_of_random_arrivals():
    """N_ii = t r^2 T and N_ij = 2 t r_i r_j T: the pair spectrum times t / T gives both."""
    counts = np.zeros(512)
    counts[100], counts[150] = 4e5, 1e5
    pairs = pair_spectrum(counts, EnergyScale(0.0, 0.02)) * 200e-9 / 50.0
    assert pairs[200] == pytest.approx(200e-9 * (4e5 / 50) ** 2 * 50, rel=1e-6)
    assert pairs[250] == pytest.approx(2 * 200e-9 * (4e5 / 50) * (1e5 / 50) * 50, rel=1e-6)


def test_sum_peaks_respect_the_channel_offset():
    scale = EnergyScale(0.5, 0.02)
    counts = np.zeros(1024)
    counts[int(scale.channel(3.0))] = 1e5
    pairs = pair_spectrum(counts, scale)
    assert float(scale.energy_kev(int(np.argmax(pairs)))) == pytest.approx(6.0, abs=0.021)


# Relative intensity alloy / pure metal at 45/45 degrees, worked from Sherman 1955 with secondary fluorescence
# (Shiraiwa & Fujino 1966), 20.216 keV
SHERMAN = [
    ({"Fe": 0.72, "Cr": 0.185, "Ni": 0.095}, {"Fe": 0.4098, "Cr": 0.2567, "Ni": 0.0247}),
    ({"Fe": 0.63, "Cr": 0.21, "Ni": 0.16}, {"Fe": 0.3455, "Cr": 0.2726, "Ni": 0.0443}),
    ({"Fe": 0.5, "Ni": 0.5}, {"Fe": 0.5836, "Ni": 0.1905}),
    ({"Cu": 0.7, "Zn": 0.3}, {"Cu": 0.6909, "Zn": 0.3224}),
]


@pytest.mark.parametrize(("alloy", "expected"), SHERMAN)
def test_shermans_equation(alloy, expected):
    prediction = Prediction(Instrument.from_table({"source": {"lines_kev": [20.216]}}))

    def alpha(composition, element):
        made = prediction.line_intensities(mass_fractions(composition))
        row = next(
            i for i, n in enumerate(prediction.line_names)
            if n == "Ka1" and prediction.line_z[i] == ATOMIC_NUMBER[element]
        )  # fmt: skip
        return float(made[row]) * composition[element]

    for element, ratio in expected.items():
        assert alpha(alloy, element) / alpha({element: 1.0}, element) == pytest.approx(ratio, rel=0.045)


def test_thick_samples_change_k_beta():
    """Factor on K-beta/K-alpha = [mu(E0) + mu(Ka)] / [mu(E0) + mu(Kb)], 45/45 degrees, 20.216 keV: by hand."""
    prediction = Prediction(
        Instrument.from_table({"source": {"lines_kev": [20.216]}, "path": {"atmosphere": "vacuum"}})
    )

    def factor(composition, element):
        z = ATOMIC_NUMBER[element]
        mu = {k: float(mass_attenuation({ATOMIC_NUMBER[s]: w for s, w in composition.items()}, e)[0])
              for k, e in (("0", 20.216), ("a", line(z, "Ka1")), ("b", line(z, "Kb1")))}  # fmt: skip
        return (mu["0"] + mu["a"]) / (mu["0"] + mu["b"])

    def line(z, name):
        return next(float(e) for e, n, i in zip(prediction.line_energy_kev, prediction.line_names, prediction.line_z,
                                                strict=True) if n == name and i == z)  # fmt: skip

    assert factor({"Fe": 1.0}, "Fe") == pytest.approx(1.21, abs=0.02)
    assert factor({"Fe": 0.98, "Co": 0.02}, "Co") == pytest.approx(0.22, abs=0.02)
    assert factor({"Ni": 1.0}, "Cu") == pytest.approx(0.26, abs=0.02)
