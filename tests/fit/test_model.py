"""One spectrum against a set of series: areas, uncertainties, and what the tolerances are for."""

from dataclasses import replace

import numpy as np
import pytest

from xrfid.fit.design import SeriesColumns
from xrfid.fit.model import FreePeak, Ingredients, fit_series
from xrfid.fit.nuisance import Tolerances
from xrfid.fit.refine import refined
from xrfid.fit.setup import Setting, fitted_channels, ingredients
from xrfid.fit.simulate import Recipe, simulate
from xrfid.instrument import Instrument
from xrfid.response.detector import LineShape
from xrfid.response.sample import mass_fractions
from xrfid.response.series import Prediction, SeriesKey
from xrfid.spectrum import EnergyScale, Spectrum

INSTRUMENT = Instrument.from_table({"tube": {"anode": "Rh", "voltage_kv": 40}, "path": {"atmosphere": "helium"},
                                    "detector": {"fwhm_mn_ka_ev": 140}})  # fmt: skip
SAMPLE = {"Fe": 66, "Cr": 18, "Ni": 12, "Mo": 3, "Mn": 1}
KEYS = [SeriesKey(z, "K") for z in (24, 25, 26, 28, 42)] + [SeriesKey(42, "L")]


@pytest.fixture(scope="module")
def made():
    return simulate(Recipe(sample=SAMPLE, total_counts=1e6, seed=11, pulse_pair_ns=200), INSTRUMENT)


@pytest.fixture(scope="module")
def prediction():
    return Prediction(INSTRUMENT)


def drawn(made, prediction, scale=None, tolerances=None, spectrum=None) -> Ingredients:
    setting = Setting(scale or made.spectrum.scale, LineShape.of(INSTRUMENT.detector))
    return ingredients(spectrum or made.spectrum, prediction, mass_fractions(SAMPLE), setting,
                       tolerances or Tolerances())  # fmt: skip


@pytest.fixture(scope="module")
def fit(made, prediction):
    return fit_series(drawn(made, prediction), KEYS)


def test_areas_are_those_of_the_simulation(made, fit):
    for key in KEYS:
        truth = made.areas[str(key)]
        assert abs(fit.areas[key] - truth) < 3.5 * fit.sigmas[key], str(key)
        assert fit.sigmas[key] > 0.8 * np.sqrt(truth)


def test_uncertainties_hold_over_many_spectra(made, prediction):
    """Twelve spectra of the same sample: deviations in units of sigma scatter by about one, and not by more."""
    pulls = []
    for seed in range(12):
        counts = np.random.default_rng(seed).poisson(made.expected).astype(float)
        found = fit_series(drawn(made, prediction, spectrum=replace(made.spectrum, counts=counts)), KEYS)
        pulls += [(found.areas[k] - made.areas[str(k)]) / found.sigmas[k] for k in KEYS[:5]]
    assert 0.3 < np.sqrt(np.mean(np.square(pulls))) < 1.4


def test_the_model_is_the_sum_of_its_parts(fit):
    total = fit.part("series", "scatter", "continuum", "sum", "partial", "peak")
    tolerances = {label[0] for label in fit.labels} - {"series", "scatter", "continuum", "sum", "partial", "peak"}
    assert total + fit.part(*tolerances) == pytest.approx(fit.model, abs=0.03)
    assert len(fit.labels) == fit.solution.coefficients.size == fit.problem.columns.shape[0]


def test_a_shift_within_the_tolerance_costs_no_area_and_is_found(made, prediction):
    """The scale handed in is 12 eV off and 0.1 % steep: the fit says so, and one redrawing takes it out."""
    wrong = EnergyScale(0.012, made.spectrum.scale.gain_kev * 1.001)
    start = drawn(made, prediction, scale=wrong)
    shifted = fit_series(start, KEYS)
    for key in KEYS[:5]:
        assert shifted.areas[key] == pytest.approx(made.areas[str(key)], rel=0.03, abs=4 * shifted.sigmas[key])
    again = refined(Setting(wrong, start.columns.shape), shifted)
    for kev in (5.4, 6.4, 7.5):
        off = float(again.scale.energy_kev(made.spectrum.scale.channel(kev))) - kev
        assert abs(off) < 0.002
    assert again.pair_time == shifted.coefficient("sum")


def test_a_width_within_the_tolerance_is_found(made, prediction):
    setting = Setting(
        made.spectrum.scale, LineShape.of(INSTRUMENT.detector.model_copy(update={"fwhm_mn_ka_ev": 150.0}))
    )
    found = fit_series(ingredients(made.spectrum, prediction, mass_fractions(SAMPLE), setting, Tolerances()), KEYS)
    resolution = refined(setting, found).shape.resolution
    assert resolution.fwhm_mn_ka_ev == pytest.approx(140.0, abs=2.0)


def test_a_k_beta_of_another_share_is_followed_and_its_area_counted(made, prediction):
    """Ten per cent more K-beta of iron than the data set says: two tolerances, no trace element."""
    start = drawn(made, prediction)
    groups = {g.name: g for g in start.columns.groups(SeriesKey(26, "K"))}
    extra = 0.10 * made.areas["Fe K"] * groups["Kb"].share
    changed = replace(start, counts=start.counts + extra * groups["Kb"].column)
    found = fit_series(changed, KEYS)
    assert found.coefficient("share", "Fe K", "Kb") == pytest.approx(0.10, abs=0.04)
    assert found.areas[SeriesKey(26, "K")] == pytest.approx(made.areas["Fe K"] + extra, rel=0.01)


def test_sigma_contains_the_overlap(fit, made, prediction):
    """Manganese between chromium's and iron's lines is known worse than its counting statistics."""
    manganese = SeriesKey(25, "K")
    assert fit.sigmas[manganese] > 2.0 * np.sqrt(made.areas["Mn K"])


def test_a_series_that_is_not_there_stays_near_nothing(made, prediction):
    lead = SeriesKey(82, "L")
    found = fit_series(drawn(made, prediction), [*KEYS, lead])
    assert 0.0 <= found.areas[lead] < 4.0 * max(found.sigmas[lead], 20.0)


def test_the_pulse_pair_time_is_found(fit):
    """Simulated with 200 ns; the instrument file states none, so 300 +- 300 ns are known beforehand."""
    assert fit.coefficient("sum") == pytest.approx(200.0, abs=60.0)
    assert fit.coefficient("nothing of the kind") == 0.0


def test_a_free_peak_takes_what_no_line_explains(made, prediction):
    start = drawn(made, prediction)
    column = np.exp(-0.5 * ((start.columns.grouping.centres_kev - 11.6) / 0.08) ** 2)
    peak = FreePeak(11.6, 1.0, column / column.sum())
    found = fit_series(replace(start, counts=start.counts + 800.0 * peak.column).with_peaks((peak,)), KEYS)
    assert found.coefficient(*peak.label) == pytest.approx(800.0, abs=150.0)


def test_tolerances_of_a_series_leave_with_it(fit):
    kept = fit.sizing.only([k for k in KEYS if k.z != 26])
    assert any(n.label[1:2] == ("Fe K",) for n in fit.sizing.nuisances)
    assert not any(n.label[1:2] == ("Fe K",) for n in kept.nuisances)
    assert any(n.label == ("offset",) for n in kept.nuisances)


def test_scatter_expected_beforehand_pulls(made, prediction):
    free = drawn(made, prediction)
    index = next(i for i, c in enumerate(free.scatter) if c.kind == "coherent scatter" and c.of == "Rh K")
    held = fit_series(replace(free, scatter_expected={index: (5e4, 10.0)}), KEYS)
    assert held.coefficient("scatter", str(index)) == pytest.approx(5e4, rel=0.01)


def test_empty_spectra_and_missing_live_time_are_no_trouble(prediction):
    blank = Spectrum(np.zeros(2048), EnergyScale(0.0, 0.02))
    setting = Setting(blank.scale, LineShape.of(INSTRUMENT.detector))
    start = ingredients(blank, prediction, mass_fractions(SAMPLE), setting, Tolerances())
    assert start.pair_time is None
    assert not start.pairs.any()
    found = fit_series(start, KEYS)
    assert all(np.isfinite(a) and a < 5.0 for a in found.areas.values())
    assert isinstance(start.columns, SeriesColumns)


@pytest.mark.parametrize(("change", "expected"), [({}, (43, 2048)), ({"overflow": True}, (43, 2047))])
def test_channels_worth_fitting(change, expected):
    counts = np.full(2048, 10.0)
    if change:
        counts[-1] = 1e5
    assert fitted_channels(Spectrum(counts), EnergyScale(0.0, 0.02), 40.0) == expected


def test_the_threshold_and_the_end_point_bound_the_fit():
    counts = np.full(4096, 10.0)
    counts[:80] = 0.0
    first, last = fitted_channels(Spectrum(counts), EnergyScale(0.0, 0.02), 40.0)
    assert first == 80
    assert last == 2300  # 1.15 x 40 keV
