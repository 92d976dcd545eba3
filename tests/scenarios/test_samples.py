"""Every sample spectrum, from the shell to named elements, against what it was made of."""

from __future__ import annotations

import functools
import json
import math

import pytest
from shell import SAMPLES, xrfid

TRUTH = json.loads((SAMPLES / "truth.json").read_text(encoding="utf-8"))
SINGLE = {name: made for name, made in TRUTH.items() if "composition" in made}
WITH_SCALE = [n for n in SINGLE if n not in ("casting_no_scale.txt", "reference_sheet.txt")]
SEEN = ("identified", "tentative", "unresolved")


@functools.cache
def document(name: str) -> dict:
    """The JSON document of a sample, as the command line gives it."""
    said = xrfid(
        "identify", SAMPLES / name, "--instrument", SAMPLES / f"{SINGLE[name]['instrument']}.toml", "--json", "-"
    )
    assert said.status == 0, said.err
    return json.loads(said.out)


def elements(name: str, *verdicts: str) -> set[str]:
    return {f["element"] for f in document(name)["findings"] if f["verdict"] in verdicts}


@pytest.mark.parametrize("name", SINGLE)
def test_the_elements_are_named(name):
    made = SINGLE[name]
    identified = elements(name, "identified")
    assert set(made["named"]) <= identified
    assert identified <= {*made["named"], *made["maybe"]}, "a false element"


@pytest.mark.parametrize("name", WITH_SCALE)
def test_the_areas_are_right(name):
    """Strong series within 4 standard uncertainties, or 4 per cent: the tables are off by some per cent on purpose."""
    for found in document(name)["findings"]:
        for series in found["series"]:
            true = SINGLE[name]["areas"].get(f"{found['element']} {series['series']}")
            if found["verdict"] == "identified" and true and true > 1000 and series["series"] != "M":
                assert math.isclose(series["area"], true, rel_tol=0.04, abs_tol=4 * series["sigma"]), found["element"]


@pytest.mark.parametrize("name", SINGLE)
def test_the_tube_is_not_taken_for_the_sample(name):
    anode = {"workshop": "Rh", "museum": "Mo"}[SINGLE[name]["instrument"]]
    if anode not in SINGLE[name]["composition"]:
        assert anode not in elements(name, *SEEN)


@pytest.mark.parametrize("name", ["casting_no_scale.txt", "reference_sheet.txt"])
def test_a_missing_scale_is_found(name):
    true, used = SINGLE[name]["scale"], document(name)["calibration"]
    assert used["origin"] == "found"
    assert used["gain_kev"] == pytest.approx(true["gain_kev"], rel=1e-3)
    assert used["offset_kev"] == pytest.approx(true["offset_kev"], abs=0.01)


def test_arsenic_is_not_lost_beside_lead():
    """As K-alpha and Pb L-alpha coincide within 10 eV (10.54 and 10.55 keV); the other lines tell."""
    assert {"As", "Pb"} <= elements("panel_green.msa", "identified")
    assert "As" not in elements("panel_red.msa", *SEEN)


def test_harmful_pigments_are_pointed_out():
    said = " ".join(document("panel_green.msa")["cautions"])
    assert "As, Pb may be harmful" in said


def test_several_inputs_fill_a_folder(tmp_path):
    names = ["coupon.msa", "tool_steel.txt"]
    said = xrfid("identify", *(SAMPLES / n for n in names), "--instrument", SAMPLES / "workshop.toml", "--json",
                 tmp_path / "out", "--figure", tmp_path / "figures")  # fmt: skip
    assert said.status == 0, said.err
    assert {p.name for p in (tmp_path / "out").iterdir()} == {"coupon.json", "tool_steel.json"}
    assert {p.name for p in (tmp_path / "figures").iterdir()} == {"coupon.png", "tool_steel.png"}
    alone = document("coupon.msa")
    among = json.loads((tmp_path / "out" / "coupon.json").read_text())
    assert among["findings"] == alone["findings"], "the order or company of inputs must not matter"


def test_without_an_instrument_file_the_assumptions_are_listed():
    said = xrfid("identify", SAMPLES / "coupon.msa", "--json", "-")
    result = json.loads(said.out)
    assert {"Fe", "Cr", "Ni", "Mo"} <= {f["element"] for f in result["findings"] if f["verdict"] == "identified"}
    assert any("no source is stated" in a for a in result["assumptions"])
