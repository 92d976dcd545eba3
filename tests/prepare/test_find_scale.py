import numpy as np
import pytest
from synthetic import made, tube

from xrfid.errors import Untrustworthy
from xrfid.instrument import Instrument
from xrfid.prepare.establish import establish
from xrfid.prepare.find_scale import find_scale
from xrfid.spectrum import EnergyScale

STEEL = {"Fe": 0.70, "Cr": 0.20, "Ni": 0.10}


@pytest.mark.parametrize(
    ("composition", "scale", "n_channels"),
    [
        (STEEL, EnergyScale(0.02, 0.02), 2048),
        ({"Cu": 0.6, "Zn": 0.38, "Pb": 0.02}, EnergyScale(-0.4, 0.01), 4096),
        ({"Pb": 0.6, "Sn": 0.4}, EnergyScale(0.8, 0.04), 1024),
        ({"Fe": 0.02, "Ca": 0.05, "C": 0.5, "O": 0.43}, EnergyScale(0.0, 0.0025), 16384),
        ({"Cu": 0.6, "Zn": 0.4}, EnergyScale(0.1, 0.1), 512),
    ],
)
def test_gain_is_found_from_counts_anode_and_voltage(composition, scale, n_channels):
    found = find_scale(made(composition, scale, n_channels).counts, tube())
    assert found.best.scale.gain_kev == pytest.approx(scale.gain_kev, rel=0.002)
    assert found.best.scale.offset_kev == pytest.approx(scale.offset_kev, abs=0.03)
    assert found.best.polished.resolution.fwhm_mn_ka_ev == pytest.approx(145, abs=6)
    assert abs(found.best.scale.gain_kev - scale.gain_kev) < 5 * found.best.polished.gain_sigma_kev


def test_nothing_known_but_the_counts():
    spectrum = made(STEEL, EnergyScale(-0.03, 0.015), 2048)
    calibration, end = establish(spectrum, Instrument())
    assert calibration.origin == "found"
    assert calibration.scale.gain_kev == pytest.approx(0.015, rel=0.002)
    assert calibration.lead is not None
    assert calibration.lead > 60
    assert {r[0] for r in calibration.residuals} >= {"Fe Ka", "Cr Ka", "Ni Ka"}
    assert end == pytest.approx(0.015 * 2048, rel=0.15)  # the range ends before the tube's 40 kV


def test_one_peak_is_too_little():
    counts = np.random.default_rng(0).poisson(5.0, 1024).astype(float)
    counts[500:520] += 4000 * np.exp(-0.5 * ((np.arange(20) - 10) / 3.0) ** 2)
    with pytest.raises(Untrustworthy, match="only one peak stands out"):
        find_scale(np.round(counts), tube())
    with pytest.raises(Untrustworthy, match="no peak stands out"):
        find_scale(np.ones(1024), tube())


def test_two_bare_peaks_are_refused_not_guessed():
    # two lines of equal height without K-beta and without tube lines: many pairs of elements do as well
    rng, x = np.random.default_rng(5), np.arange(1024)
    mean = 3.0 + sum(3000 / 7.5 * np.exp(-0.5 * ((x - c) / 3.0) ** 2) for c in (300, 470))
    with pytest.raises(Untrustworthy, match="no energy scale"):
        find_scale(rng.poisson(mean).astype(float), tube())


def test_a_refusal_ends_with_status_4():
    assert Untrustworthy("x").exit_status == 4
