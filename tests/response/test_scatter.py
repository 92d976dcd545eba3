import numpy as np
import pytest

from xrfid.atoms.absorption import material
from xrfid.instrument import Instrument
from xrfid.response.sample import mass_fractions
from xrfid.response.scatter import compton_energy, compton_profile
from xrfid.response.series import Prediction


def fractions(formula):
    out = np.zeros(92)
    for z, w in material(formula)[0]:
        out[z - 1] = w
    return out


def full_width(x, y):
    above = x[y > 0.5 * y.max()]
    return above[-1] - above[0]


@pytest.mark.parametrize("formula", ["C", "SiO2", "Fe"])
def test_the_compton_peak_has_unit_area_near_its_energy(formula):
    grid = np.arange(14.0, 20.2, 0.005)
    profile = compton_profile(fractions(formula), 20.216, 120.0, grid)
    assert np.trapezoid(profile, grid) == pytest.approx(1.0)
    assert grid[np.argmax(profile)] == pytest.approx(float(compton_energy(20.216, 120.0)), abs=0.03)
    assert np.all(profile >= 0)


# FWHM in eV at 20.216 keV, 90 and 135 degrees, worked from the profiles of Biggs et al. 1975
@pytest.mark.parametrize(("element", "at_90", "at_135"), [("C", 283, 355), ("O", 417, 523), ("Al", 216, 271),
                                                          ("Fe", 385, 484)])  # fmt: skip
def test_doppler_widths(element, at_90, at_135):
    grid = np.arange(16.0, 20.2, 0.001)
    for angle, expected in ((90.0, at_90), (135.0, at_135)):
        width = 1e3 * full_width(grid, compton_profile(fractions(element), 20.216, angle, grid))
        assert width == pytest.approx(expected, rel=0.1)


def test_nothing_is_scattered_above_the_line():
    grid = np.arange(19.0, 22.0, 0.01)
    assert not compton_profile(fractions("C"), 20.216, 30.0, grid)[grid >= 20.216].any()


def test_no_grid_no_peak():
    assert not compton_profile(fractions("C"), 20.216, 120.0, np.array([30.0, 31.0])).any()


def test_light_matter_scatters_more_and_more_incoherently():
    """Common practice, no source: plastics give the tube's Compton peak, metals hardly scatter."""
    prediction = Prediction(Instrument.from_table({"tube": {"anode": "Rh", "voltage_kv": 40}}))
    light, heavy = (prediction.scattered(mass_fractions(c)) for c in ({"C": 1, "H": 0.1}, {"Fe": 1}))
    assert light.incoherent.sum() > 10 * heavy.incoherent.sum()
    assert light.incoherent.sum() / light.coherent.sum() > 3 * heavy.incoherent.sum() / heavy.coherent.sum()
    assert np.all(light.incoherent_kev < light.coherent_kev)


def test_a_larger_angle_loses_more_energy():
    assert np.all(np.diff([float(compton_energy(20.0, a)) for a in (30, 60, 90, 135, 180)]) < 0)
    assert float(compton_energy(20.0, 1e-6)) == pytest.approx(20.0)
