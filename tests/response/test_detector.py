import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.integrate import quad

from xrfid.instrument import Detector, Instrument
from xrfid.response.detector import (
    DrawnLines,
    LineShape,
    draw,
    draw_core,
    draw_shelf,
    draw_tail,
    draw_wings,
    efficiency,
)
from xrfid.response.series import Prediction, SeriesKey
from xrfid.spectrum import EnergyScale, Resolution

EDGES = EnergyScale(0.0, 0.01).edges_kev(4096)


def one(energy, weight=1.0):
    return DrawnLines(np.array([energy]), np.array([weight]), np.zeros(1, dtype=np.intp))


@settings(max_examples=25, deadline=None)
@given(energy=st.floats(5.0, 30.0), noise=st.floats(30.0, 150.0), slope=st.floats(1.0, 5.0))
def test_every_part_of_a_line_has_unit_area(energy, noise, slope):
    shape = LineShape(Resolution(noise), tail_slope=slope)
    assert draw_core(one(energy), shape.resolution, EDGES, 1).sum() == pytest.approx(1.0, abs=1e-6)
    assert draw_tail(one(energy), shape, EDGES, 1).sum() == pytest.approx(1.0, abs=2e-3)
    assert draw_shelf(one(energy), EDGES, 1).sum() == pytest.approx(1.0, abs=1e-9)
    assert draw(one(energy), shape, EDGES, 1).sum() == pytest.approx(1.0, abs=1e-3)


def test_core_equals_numerical_integration():
    sigma = float(Resolution(60.0).sigma_kev(6.4))
    drawn = draw_core(one(6.4), Resolution(60.0), EDGES, 1)[0]
    for channel in (630, 640, 645, 655):
        low, high = EDGES[channel], EDGES[channel + 1]
        area = quad(lambda e: np.exp(-0.5 * ((e - 6.4) / sigma) ** 2) / (sigma * np.sqrt(2 * np.pi)), low, high)[0]
        assert drawn[channel] == pytest.approx(area, rel=1e-6)


def test_wings_make_a_voigt_profile():
    """scipy.special.voigt_profile: the first-order wings are right to a few per cent for a narrow natural width."""
    from scipy.special import voigt_profile

    width, resolution = 0.008, Resolution(100.0)
    sigma = float(resolution.sigma_kev(10.0))
    lines = one(10.0)
    drawn = draw_core(lines, resolution, EDGES, 1)[0] + draw_wings(lines, np.array([width]), resolution, EDGES, 1)[0]
    centres = 0.5 * (EDGES[1:] + EDGES[:-1])
    exact = voigt_profile(centres - 10.0, sigma, width / 2) * 0.01
    near = np.abs(centres - 10.0) < 15 * sigma
    assert np.abs(drawn - exact)[near].max() < 0.01 * exact.max()
    wing = near & (np.abs(centres - 10.0) > 6 * sigma)
    assert drawn[wing] == pytest.approx(exact[wing], rel=0.08)


def test_a_line_beyond_the_range_leaves_only_its_tail_and_shelf():
    edges = EnergyScale(0.0, 0.01).edges_kev(500)
    shape = LineShape(Resolution(60.0))
    assert draw(one(8.0), shape, edges, 1).sum() < 0.03


def test_escape_peak_stands_one_silicon_line_below():
    lines = one(6.4).escapes("Si")
    assert lines.energy_kev[0] == pytest.approx(6.4 - 1.740, abs=0.002)
    assert one(1.5).escapes("Si").energy_kev.size == 0


def test_efficiency_falls_at_both_ends():
    e = efficiency(Detector(), np.array([0.9, 6.0, 40.0]))
    assert e[1] > 0.95
    assert e[0] < 0.9
    assert e[2] < 0.1


def test_nothing_is_predicted_above_the_voltage():
    prediction = Prediction(Instrument.from_table({"tube": {"anode": "Rh", "voltage_kv": 15.0}}))
    assert SeriesKey(26, "K") in prediction.keys
    assert SeriesKey(42, "K") not in prediction.keys
    assert SeriesKey(42, "L") in prediction.keys
    assert prediction.line_energy_kev.max() < 15.0


@pytest.mark.parametrize("material", ["Ge", "CdTe"])
def test_other_detector_materials_have_their_own_escapes(material):
    lines = one(40.0).escapes(material)
    assert lines.energy_kev.size >= 2
    assert 0.01 < lines.weight.sum() < 0.4
