"""Excitation, sample and series: limiting cases that hold whatever the numbers are."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from xrfid.atoms.absorption import mass_attenuation
from xrfid.atoms.elements import ATOMIC_NUMBER
from xrfid.errors import InputError
from xrfid.instrument import Geometry, Instrument
from xrfid.response.excitation import continuum_bins, excitation
from xrfid.response.sample import Layer, composition_of, enhancement, escape_depth, mass_fractions, sines
from xrfid.response.series import Prediction, SeriesKey


def tube(**more):
    return Instrument.from_table({"tube": {"anode": "Rh", "voltage_kv": 40, **more}})


@pytest.fixture(scope="module")
def prediction():
    return Prediction(tube())


def rows(prediction, key):
    return np.flatnonzero(prediction.line_series == prediction.keys.index(key))


IRON, NICKEL = SeriesKey(26, "K"), SeriesKey(28, "K")
STEEL = mass_fractions({"Fe": 0.7, "Cr": 0.18, "Ni": 0.12})


def test_bins_reach_from_the_lowest_energy_to_the_end_without_gaps():
    centre, width = continuum_bins(40.0)
    assert centre[-1] + 0.5 * width[-1] == pytest.approx(40.0)
    assert np.allclose(centre[1:] - 0.5 * width[1:], centre[:-1] + 0.5 * width[:-1])


def test_a_filter_takes_its_transmission_from_every_energy():
    plain, filtered = excitation(tube()), excitation(tube(filters=[{"material": "Al", "thickness_um": 200}]))
    passed = np.exp(-mass_attenuation({13: 1.0}, plain.energy_kev) * 2.70 * 0.02)
    seen = passed > 1e-3
    assert filtered.photons[seen] == pytest.approx((plain.photons * passed)[seen], rel=5e-3)
    assert np.all(filtered.photons[~seen] <= 1.1e-3 * plain.photons[~seen])


def test_a_source_is_its_stated_lines():
    made = excitation(Instrument.from_table({"source": {"lines_kev": [22.163, 24.942, 3.0], "weights": [1.0, 0.2, 0]}}))
    assert made.energy_kev == pytest.approx([22.163, 24.942])
    assert made.photons == pytest.approx([1 / 1.2, 0.2 / 1.2])
    assert made.end_kev == 24.942
    assert made.anode is None
    assert made.n_continuum == 0


def test_without_a_source_a_rhodium_tube_of_the_assumed_voltage_is_taken():
    made = excitation(Instrument(), 28.0)
    assert (made.anode, made.end_kev) == ("Rh", 28.0)


@pytest.mark.parametrize("anode", ["Xx", "C", "U"])
def test_an_anode_that_is_none_is_refused(anode):
    with pytest.raises(InputError, match=r"tube\.anode.*no target element"):
        excitation(tube(anode=anode))


def test_a_stray_element_that_is_none_is_refused():
    with pytest.raises(InputError, match=r'stray\.elements.*"Qq"'):
        Prediction(Instrument.from_table({"stray": {"elements": ["Qq"]}}))


@pytest.mark.parametrize(("anode", "voltage", "series"), [
    ("Rh", 40, {"K", "L"}), ("Rh", 20, {"L"}), ("W", 40, {"L", "M"}), ("Cr", 30, {"K"}),
])  # fmt: skip
def test_the_target_shows_the_series_its_voltage_allows(anode, voltage, series):
    made = excitation(tube(anode=anode, voltage_kv=voltage))
    assert set(made.line_series) == series
    assert len(made.line_series) == len(made.line_group) == made.energy_kev.size - made.n_continuum


def test_mass_fractions_and_back():
    assert composition_of(mass_fractions({"Cu": 60, "Zn": 40})) == pytest.approx({"Cu": 0.6, "Zn": 0.4})


@pytest.mark.parametrize(("composition", "said"), [
    ({"Xx": 1}, "no element symbol"), ({"Fe": -1}, "must be >= 0"), ({"Fe": float("nan")}, "must be >= 0"),
    ({"Fe": 0}, "at least one"),
])  # fmt: skip
def test_wrong_compositions_are_refused(composition, said):
    with pytest.raises(ValueError, match=said):
        mass_fractions(composition)


def test_angles_are_sines_to_the_surface():
    assert sines(Geometry(incidence_deg=30, takeoff_deg=90)) == pytest.approx((0.5, 1.0))


@settings(max_examples=40, deadline=None)
@given(a=st.floats(0.1, 1e4), b=st.floats(0.1, 1e4), mass=st.floats(1e-8, 10.0))
def test_the_depth_seen_is_the_layer_if_thin_and_the_absorption_length_if_thick(a, b, mass):
    depth = float(escape_depth(np.array([a]), np.array([b]), mass)[0, 0])
    assert depth <= min(mass, 1.0 / (a + b)) * (1 + 1e-9)
    assert float(escape_depth(np.array([a]), np.array([b]), 1e-12)[0, 0]) == pytest.approx(1e-12, rel=1e-6)
    assert float(escape_depth(np.array([a]), np.array([b]), np.inf)[0, 0]) == pytest.approx(1.0 / (a + b))


def test_enhancement_equals_its_double_integral():
    """Shiraiwa & Fujino 1966: secondary photons from depth x excited at depth x', integrated on a grid."""
    a, b, mu = 80.0, 150.0, 60.0
    closed = enhancement(np.ones((1, 1)), np.ones((1, 1)), np.array([a]), np.array([mu]), np.array([b]))[0]
    x = np.linspace(0, 0.25, 1201)[1:] - 0.25 / 2400
    step = x[1] - x[0]
    distance = np.abs(x[:, None] - x[None, :])
    from scipy.special import exp1

    off = distance > 0
    kernel = np.zeros_like(distance)
    kernel[off] = exp1(mu * distance[off])
    inner = -np.log(mu * step / 2) - 0.5772 + 1.0  # mean of E1 over the cell that holds the singularity
    kernel[~off] = inner
    integral = 0.5 * step**2 * np.exp(-b * x) @ kernel @ np.exp(-a * x)
    assert closed == pytest.approx(integral, rel=0.01)


def test_lines_of_a_subset_are_those_of_the_whole(prediction):
    some = rows(prediction, IRON)
    assert np.allclose(prediction.line_intensities(STEEL, rows=some), prediction.line_intensities(STEEL)[some])


def test_enhancement_only_adds_and_only_below_the_exciting_lines(prediction):
    plain, full = (prediction.line_intensities(STEEL, enhanced=e) for e in (False, True))
    assert np.all(full >= plain * (1 - 1e-12))
    gain = full / np.maximum(plain, 1e-300)
    assert gain[rows(prediction, SeriesKey(24, "K"))].min() > 1.2  # Cr, below Fe K and Ni K
    assert gain[rows(prediction, SeriesKey(42, "K"))].max() == 1.0  # Mo, above all of them


def test_a_thick_coating_is_a_thick_sample(prediction):
    coating, below = prediction.layered_intensities(Layer(STEEL, 10.0), Layer(mass_fractions({"Pb": 1})))
    assert coating == pytest.approx(prediction.line_intensities(STEEL, enhanced=False), rel=1e-6, abs=1e-300)
    assert below.max() < 1e-6 * coating.max()


def test_no_coating_is_the_bare_substrate(prediction):
    coating, below = prediction.layered_intensities(Layer(mass_fractions({"Ni": 1}), 1e-12), Layer(STEEL))
    assert below == pytest.approx(prediction.line_intensities(STEEL, enhanced=False), rel=1e-6, abs=1e-300)
    assert coating.max() < 1e-6 * below.max()


def test_a_thin_layer_grows_with_its_mass_and_one_without_substrate_shows_none(prediction):
    nickel = mass_fractions({"Ni": 1})
    thin, double = (prediction.layered_intensities(Layer(nickel, g), None) for g in (1e-6, 2e-6))
    on = rows(prediction, NICKEL)
    assert double[0][on] == pytest.approx(2 * thin[0][on], rel=1e-3)
    assert not thin[1].any()


def test_deeper_coatings_dim_the_substrate(prediction):
    nickel = mass_fractions({"Ni": 1})
    seen = [prediction.layered_intensities(Layer(nickel, g), Layer(STEEL))[1][rows(prediction, IRON)].sum()
            for g in (1e-4, 1e-3, 1e-2)]  # fmt: skip
    assert seen[0] > seen[1] > seen[2] > 0


def test_cobalt_in_iron_loses_most_of_its_k_beta():
    """Iron's edge (7.112 keV) lies between cobalt's K-alpha and K-beta: 0.22 of the free atom's are left."""
    prediction = Prediction(Instrument.from_table({"source": {"lines_kev": [20.216]}, "path": {"length_mm": 0}}))

    def beta(composition):
        made = prediction.line_intensities(mass_fractions(composition), enhanced=False)
        on = rows(prediction, SeriesKey(27, "K"))
        kb = [i for i in on if prediction.line_names[i].startswith("Kb")]
        return made[kb].sum() / made[on].sum()

    # worked by hand: [mu(E0) + mu(Ka)] / [mu(E0) + mu(Kb)] in iron; shares of the series, so a little more
    assert beta({"Fe": 0.98, "Co": 0.02}) / beta({"C": 0.98, "Co": 0.02}) == pytest.approx(0.22, abs=0.03)


def test_argon_and_light_elements_lose_on_the_way():
    air, vacuum = (Prediction(Instrument.from_table({"path": {"atmosphere": a}})) for a in ("air", "vacuum"))
    gain = vacuum.line_efficiency / np.maximum(air.line_efficiency, 1e-300)
    of = {ATOMIC_NUMBER["Na"]: 5.0, ATOMIC_NUMBER["S"]: 1.15}
    for z, least in of.items():
        on = np.flatnonzero((air.line_z == z) & (air.line_group == 0))
        assert gain[on].min() > least
    assert np.all(gain >= 1.0)


def test_the_light_matrix_is_a_composition(prediction):
    assert prediction.light_matrix_only().sum() == pytest.approx(1.0)
    assert str(IRON) == "Fe K"
