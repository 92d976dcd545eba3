"""The JSON document: valid after its published schema, faithful, and honest about what it cannot read."""

from __future__ import annotations

import copy
import json
import math
from dataclasses import replace

import jsonschema
import numpy as np
import pytest

from xrfid.errors import InputError
from xrfid.identify.result import Verdict
from xrfid.report.document import SCHEMA, from_document, schema, to_document, to_json
from xrfid.spectrum import EnergyScale


def valid(document):
    jsonschema.Draft202012Validator(schema()).validate(document)


def test_the_schema_itself_is_valid():
    jsonschema.Draft202012Validator.check_schema(schema())


def test_a_document_follows_the_schema(steel):
    document = json.loads(to_json(steel))
    valid(document)
    assert document["schema"] == SCHEMA
    assert document["identified"] == ["Fe", "Cr", "Ni", "Mo", "Mn", "Si"]


def test_the_names_other_programs_rely_on(steel):
    document = to_document(steel)
    assert document["source"]["path"] == "coupon.msa"
    assert document["source"]["dataset"] is None
    assert document["calibration"]["gain_kev"] == 0.02
    assert document["calibration"]["fwhm_mn_ka_ev"] == pytest.approx(145.0)
    assert document["calibration"]["origin"] == "file"
    iron = document["findings"][0]
    assert (iron["element"], iron["verdict"], iron["series"][0]["series"]) == ("Fe", "identified", "K")
    assert set(iron["series"][0]) >= {"area", "sigma", "decision_threshold", "detection_limit"}
    assert document["artefacts"][0]["of"] == "Fe K Ka"
    assert document["unexplained"] == [{"energy_kev": 11.31, "area": 154.0, "sigma": 31.0}]
    assert "curves" not in document


@pytest.mark.parametrize(
    "damage",
    [
        lambda d: d["calibration"].update(origin="guessed"),
        lambda d: d["findings"][0].update(verdict="maybe"),
        lambda d: d["findings"][0]["series"][0].pop("sigma"),
        lambda d: d["source"].update(channels=-1),
        lambda d: d.pop("artefacts"),
    ],
)
def test_the_schema_refuses(steel, damage):
    document = copy.deepcopy(to_document(steel))
    damage(document)
    with pytest.raises(jsonschema.ValidationError):
        valid(document)


def test_what_is_not_finite_becomes_null(steel):
    iron = steel["Fe"]
    lame = replace(iron.series[0], sigma=math.nan, upper_limit=math.inf)
    odd = replace(
        steel,
        findings=(replace(iron, series=(lame,)),),
        calibration=replace(steel.calibration, rms_ev=math.nan, lead=-math.inf),
        provenance={"xrfid": "0.1.0", "deep": [np.float64("nan"), {"x": np.int64(3)}]},
    )
    text = to_json(odd)
    assert "NaN" not in text
    assert "Infinity" not in text
    document = json.loads(text)
    valid(document)
    assert document["findings"][0]["series"][0]["sigma"] is None
    assert document["calibration"]["lead"] is None
    assert document["provenance"]["deep"] == [None, {"x": 3}]


def test_round_trip(steel):
    moved = replace(
        steel,
        calibration=replace(
            steel.calibration, stated=EnergyScale(0.1, 0.021), runner_up=EnergyScale(0, 1), lead=9.5
        ),
    )
    back = from_document(json.loads(to_json(moved)))
    assert to_document(back) == to_document(moved)
    assert back.findings == moved.findings
    assert back.limits == moved.limits
    assert back.calibration == moved.calibration
    assert back["Cu"].verdict is Verdict.TENTATIVE
    assert back.curves.counts.size == 0


def put(*path, value):
    def change(document):
        for step in path[:-1]:
            document = document[step]
        document[path[-1]] = value

    return change


@pytest.mark.parametrize(
    ("change", "message"),
    [
        (put("schema", value="else/2"), r"r.json: its schema is 'else/2'; a document of schema"),
        (put("findings", value={}), r"r.json, findings: {} is not a list"),
        (
            put("findings", 0, "series", 0, "area", value="many"),
            r"findings\[0\], series\[0\], area: 'many' is not a number",
        ),
        (
            put("findings", 0, "verdict", value="maybe"),
            r"findings\[0\], verdict: 'maybe' is none of identified, ",
        ),
        (put("source", "channels", value=2.5), r"r.json, source, channels: 2.5 is not a whole number"),
        (put("source", "title", value=7), r"source, title: 7 is not text"),
        (put("calibration", value=[]), r"calibration: \[\] is not a table"),
        (put("calibration", "residuals", value=[{"line": "Fe Ka"}]), r"calibration: 1 values where 4 belong"),
        (put("calibration", "gain_kev", value=0.0), r"calibration: .*gain_kev must be > 0"),
        (lambda d: d.pop("limits"), r'r.json: "limits" is missing'),
    ],
)
def test_a_damaged_document_says_where(steel, change, message):
    document = copy.deepcopy(to_document(steel))
    change(document)
    with pytest.raises(InputError, match=message):
        from_document(document, "r.json")
