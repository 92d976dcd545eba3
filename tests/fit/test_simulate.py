"""Simulation: the truth it states is the truth it drew, and a wrong recipe is one clear line."""

import json

import numpy as np
import pytest
from shell import refused, xrfid

from xrfid.errors import InputError
from xrfid.fit.simulate import Coating, Recipe, load_recipe, recipe_instrument, simulate
from xrfid.formats import read_spectra
from xrfid.instrument import Instrument

TUBE = Instrument.from_table({"tube": {"anode": "Rh", "voltage_kv": 40}, "path": {"atmosphere": "helium"}})
BRASS = Recipe(sample={"Cu": 63, "Zn": 37}, total_counts=3e5, seed=3)


def near(spectrum, kev, half=0.25):
    return float(spectrum.counts[np.abs(spectrum.energy_kev - kev) < half].sum())


def test_same_seed_same_spectrum_other_seed_another():
    first, again = simulate(BRASS, TUBE), simulate(BRASS, TUBE)
    other = simulate(BRASS.model_copy(update={"seed": 4}), TUBE)
    assert np.array_equal(first.spectrum.counts, again.spectrum.counts)
    assert not np.array_equal(first.spectrum.counts, other.spectrum.counts)
    assert np.array_equal(first.expected, other.expected)


def test_counts_are_poisson_about_the_expectation():
    """Pearson's chi-squared over channels with at least 20 expected counts stays within 4 standard deviations."""
    made = simulate(BRASS, TUBE)
    well = made.expected > 20
    chi2 = float(np.sum((made.spectrum.counts - made.expected)[well] ** 2 / made.expected[well]))
    assert abs(chi2 - well.sum()) < 4.0 * np.sqrt(2.0 * well.sum())
    assert made.spectrum.total_counts == pytest.approx(3e5, abs=5 * np.sqrt(3e5))


def test_stated_areas_are_in_the_spectrum():
    """Zn K-alpha and Cu K-beta overlap; all K lines of both together stand in 7.7 to 9.9 keV, tails aside."""
    made = simulate(BRASS.model_copy(update={"total_counts": 1e7}), TUBE)
    inside = (made.spectrum.energy_kev > 7.7) & (made.spectrum.energy_kev < 9.9)
    assert made.expected[inside].sum() == pytest.approx(made.areas["Cu K"] + made.areas["Zn K"], rel=0.02)


def test_more_of_an_element_gives_more_of_its_counts():
    shares = [simulate(BRASS.model_copy(update={"sample": {"Cu": 100 - w, "Zn": w}}), TUBE).areas["Zn K"]
              for w in (5, 10, 20)]  # fmt: skip
    assert shares[0] < shares[1] < shares[2]


def test_weights_need_not_add_up_to_anything():
    percent, parts = (simulate(BRASS.model_copy(update={"sample": s}), TUBE).areas
                      for s in ({"Cu": 50, "Zn": 50}, {"Cu": 2, "Zn": 2}))  # fmt: skip
    assert percent == parts


def test_argon_comes_from_air_only():
    air = Instrument.from_table({"tube": {"anode": "Rh", "voltage_kv": 40}, "path": {"length_mm": 20}})
    short = Instrument.from_table({"tube": {"anode": "Rh", "voltage_kv": 40}, "path": {"length_mm": 5}})
    assert "Ar K" not in simulate(BRASS, TUBE).areas
    assert simulate(BRASS, air).areas["Ar K"] > 2.0 * simulate(BRASS, short).areas["Ar K"] > 0


def test_escape_peaks_and_scattered_tube_lines_are_drawn():
    made = simulate(Recipe(sample={"Ca": 10, "C": 90}, total_counts=1e7), TUBE)
    assert near(made.spectrum, 1.952, 0.1) > 10 * near(made.spectrum, 1.55, 0.1)  # Ca K-alpha less 1.740 keV
    assert near(made.spectrum, 20.2) > 3 * near(made.spectrum, 24.5)  # Rh K-alpha
    assert near(made.spectrum, 19.45) > 5 * near(made.spectrum, 24.5)  # and its Compton peak at 90 degrees


def test_pile_up_makes_sum_peaks_of_the_expected_size():
    """N_ii = tau r^2 T: sum of 2 Cu K-alpha (16.1 keV) against the same spectrum without pile-up."""
    recipe = Recipe(sample={"Cu": 100}, total_counts=5e6, live_time_s=100, channels=2048)
    plain, piled = simulate(recipe, TUBE), simulate(recipe.model_copy(update={"pulse_pair_ns": 400}), TUBE)
    energy = plain.spectrum.energy_kev
    added = (piled.expected - plain.expected)[(energy > 15.0) & (energy < 18.6)].sum()
    # both K lines with themselves and each other; scatter there is taken away at the same rate
    assert added == pytest.approx(400e-9 / 100 * plain.areas["Cu K"] ** 2, rel=0.1)
    assert piled.areas["Cu K"] < plain.areas["Cu K"]
    events = piled.expected.sum() + 400e-9 / 100 * 5e6**2
    assert events == pytest.approx(5e6, rel=2e-3)  # each sum takes two events and is one


def test_a_thick_coating_hides_the_substrate_and_a_thin_one_does_not():
    nickel = {"sample": {"Fe": 100}, "total_counts": 1e5}
    thin, thick, none = (
        simulate(Recipe(coating=Coating(composition={"Ni": 1}, g_cm2=g), **nickel), TUBE).areas
        for g in (1e-3, 0.5, 1e-9)
    )
    assert none["Fe K"] > thin["Fe K"] > 0
    assert thick.get("Fe K", 0.0) < 1e-3 * thick["Ni K"]
    assert none.get("Ni K", 0.0) < 1.0


def test_a_coating_by_thickness_equals_one_by_mass():
    def coated(**how):
        return simulate(Recipe(sample={"Fe": 1}, coating=Coating(composition={"Ni": 1}, **how)), TUBE).areas

    assert coated(thickness_um=10, density_g_cm3=8.9) == pytest.approx(coated(g_cm2=8.9e-3))


def test_a_coating_without_its_mass_is_refused():
    recipe = Recipe(sample={"Fe": 1}, coating=Coating(composition={"Ni": 1}, thickness_um=3))
    with pytest.raises(InputError, match="mass per area is not stated"):
        simulate(recipe, TUBE)


@pytest.mark.parametrize(("sample", "said"), [
    ({"Xx": 1.0}, r"\[sample\]: \"Xx\" is no element symbol"), ({"Fe": -1.0}, "must be >= 0"),
    ({}, "at least one element"),
])  # fmt: skip
def test_a_wrong_composition_is_refused(sample, said):
    with pytest.raises(InputError, match=said):
        simulate(Recipe(sample=sample), TUBE)


def test_a_range_that_shows_nothing_is_refused():
    recipe = Recipe(sample={"C": 1}, channels=64, gain_kev=0.02, offset_kev=-1.5)
    with pytest.raises(InputError, match="show nothing"):
        simulate(recipe, TUBE)


RECIPE = """
title = "coupon"
total_counts = 2e4
channels = 1024
seed = 5
pulse_pair_ns = 300

[sample]
Fe = 70
Cr = 18
Ni = 12

[coating]
composition = { Au = 1 }
thickness_um = 0.2
density_g_cm3 = 19.3

[instrument.tube]
anode = "Rh"
voltage_kv = 30
"""


def test_the_command_writes_spectrum_and_truth(tmp_path):
    (tmp_path / "recipe.toml").write_text(RECIPE)
    said = xrfid("simulate", tmp_path / "recipe.toml", "--out", tmp_path / "coupon.msa")
    assert said.status == 0, said
    assert "coupon.msa.truth.json" in said.err
    (spectrum,) = read_spectra(tmp_path / "coupon.msa")
    truth = json.loads((tmp_path / "coupon.msa.truth.json").read_text())
    assert spectrum.title == truth["title"] == "coupon"
    assert spectrum.n_channels == 1024
    assert truth["schema"] == "xrfid.truth/1"
    assert truth["sample"] == {"Fe": 70, "Cr": 18, "Ni": 12}
    assert truth["areas"]["Fe K"] > truth["areas"]["Cr K"] > truth["areas"]["Ni K"] > 0 < truth["areas"]["Au L"]
    line = refused(xrfid("simulate", tmp_path / "recipe.toml", "--out", tmp_path / "coupon.msa"))
    assert "exists" in line
    assert xrfid("simulate", tmp_path / "recipe.toml", "--out", tmp_path / "coupon.msa", "--overwrite").status == 0


def test_the_instrument_may_be_a_file_beside_the_recipe(tmp_path):
    (tmp_path / "bench.toml").write_text("[tube]\nanode = 'W'\nvoltage_kv = 25\n")
    path = tmp_path / "recipe.toml"
    path.write_text("instrument = 'bench.toml'\n[sample]\nFe = 1\n")
    assert recipe_instrument(load_recipe(path), tmp_path, str(path)).tube.anode == "W"


@pytest.mark.parametrize(("text", "said"), [
    ("[sample\n", "not valid TOML"), ("title = 'x'\n", '"sample" is missing'),
    ("sampel = 1\n[sample]\nFe = 1\n", 'did you mean "sample"'),
    ("[sample]\nFe = 1\n[coating]\ncomposition = {Ni = 1}\nthickness = 3\n",
     'unknown key "coating.thickness".*did you mean "thickness_um"'),
    ("channels = 8\n[sample]\nFe = 1\n", r"channels: .*\(got 8\)"),
    ("instrument = 'none.toml'\n[sample]\nFe = 1\n", "none.toml: cannot be read"),
    ("[sample]\nFe = 1\n[instrument.tube]\nanod = 'Rh'\n", r"\[instrument\].*did you mean \"anode\""),
])  # fmt: skip
def test_a_wrong_recipe_is_one_clear_line(tmp_path, text, said):
    path = tmp_path / "recipe.toml"
    path.write_text(text)
    line = refused(xrfid("simulate", path, "--out", tmp_path / "x.msa"))
    with pytest.raises(InputError, match=said):
        recipe_instrument(load_recipe(path), tmp_path, str(path))
    assert "recipe.toml" in line or "none.toml" in line
    assert not (tmp_path / "x.msa").exists()


def test_a_recipe_that_cannot_be_read_says_so(tmp_path):
    with pytest.raises(InputError, match=r"cannot be read \(No such file"):
        load_recipe(tmp_path / "none.toml")
    (tmp_path / "binary.toml").write_bytes(b"\xff\xfe\x00")
    with pytest.raises(InputError, match="not a text file"):
        load_recipe(tmp_path / "binary.toml")
