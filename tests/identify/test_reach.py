"""What an instrument can show: common knowledge of the trade, the JSON document, the command."""

import json

import pytest
from shell import refused, xrfid

from xrfid.identify.reach import GOOD, WEAK, reach
from xrfid.instrument import Instrument


def instrument(**tables):
    return Instrument.from_table({"tube": {"anode": "Rh", "voltage_kv": 40}, **tables})


@pytest.fixture(scope="module")
def usual():
    return reach(instrument())


def by_key(report):
    return {(r.element, r.series): r for r in report.series}


def test_light_elements_are_out_of_reach(usual):
    """Common practice, no source: behind a window and a centimetre of air nothing up to neon is seen."""
    assert usual.beyond[:10] == ("H", "He", "Li", "Be", "B", "C", "N", "O", "F", "Ne")
    assert {"Fe", "Cu", "Pb"}.isdisjoint(usual.beyond)
    found = by_key(usual)
    assert found["Na", "K"].grade == "hardly"
    assert found["Fe", "K"].grade == found["Pb", "L"].grade == "within reach"


def test_helium_helps_light_elements(usual):
    helium = by_key(reach(instrument(path={"atmosphere": "helium"})))
    for element in ("Na", "Mg", "Al"):
        assert helium[element, "K"].best_limit < 0.7 * by_key(usual)[element, "K"].best_limit


def test_a_matrix_of_its_own_kind_is_worse(usual):
    """Light matter absorbs less and gives no lines: every limit is lower there, manganese's beside iron by far."""
    limits = {k: dict(r.limits) for k, r in by_key(usual).items()}
    assert all(v["light"] < v["steel"] for k, v in limits.items() if k not in {("Fe", "L"), ("Fe", "K")})
    assert limits["Co", "K"]["steel"] > 2 * limits["Ni", "K"]["steel"]  # Co K-alpha under Fe K-beta


def test_limits_fall_with_the_root_of_the_counts(usual):
    """Currie 1968: far from zero counts the limit goes with the root of the background."""
    more = by_key(reach(instrument(), counts=1e8))
    ratio = by_key(usual)["Zr", "K"].best_limit / more["Zr", "K"].best_limit
    assert ratio == pytest.approx(10.0, rel=0.05)


def test_voltage_decides_what_is_excited():
    low = by_key(reach(instrument(tube={"anode": "Rh", "voltage_kv": 15})))
    assert ("Mo", "K") not in low  # edge at 20.0 keV
    assert ("Mo", "L") in low
    assert "Sr" not in {e for e, s in low if s == "K"}  # edge at 16.1 keV


def test_grades_follow_the_limits(usual):
    for r in usual.series:
        best = r.best_limit
        expected = (
            "within reach" if best < GOOD else "weak" if best < WEAK else "hardly" if best < 1 else "out of reach"
        )
        assert r.grade == expected


def test_pairs_that_coincide_are_named(usual):
    """Classic overlaps of the trade: P K / Ir M, S K / Mo L and Zr L / Pt M hardly differ; Fe K and Cu K do."""
    pairs = {frozenset((p.a, p.b)): p for p in usual.pairs}
    assert pairs[frozenset(("Zr L", "Pt M"))].growth > 4
    assert frozenset(("S K", "Mo L")) in pairs
    assert frozenset(("Fe K", "Cu K")) not in pairs
    assert all(p.a.split()[0] != p.b.split()[0] for p in usual.pairs)
    growth = [p.growth for p in usual.pairs]
    assert growth == sorted(growth, reverse=True)


def test_a_better_detector_separates_more(usual):
    worse = reach(instrument(detector={"fwhm_mn_ka_ev": 250}))
    assert len(worse.pairs) > len(usual.pairs)


def test_the_command_writes_table_and_document(tmp_path):
    target = tmp_path / "reach.json"
    said = xrfid("reach", "--json", target)
    assert said.status == 0
    assert "Out of reach: H He" in said.out
    document = json.loads(target.read_text())
    assert document["schema"] == "xrfid.reach/1"
    assert document["counts"] == 1e6
    iron = next(s for s in document["series"] if s["element"] == "Fe" and s["series"] == "K")
    assert iron["main_line_kev"] == pytest.approx(6.404, abs=0.002)
    assert set(iron["detection_limit_mass_fraction"]) == {"light", "steel"}
    assert document["out_of_reach"][0] == "H"
    assert all(p["uncertainty_growth"] > 5 for p in document["inseparable"])
    assert document["hard_to_separate"]
    assert any("10 mm of air" in said for said in document["assumptions"])
    assert "exists" in refused(xrfid("reach", "--json", target))
    assert xrfid("reach", "--json", target, "--overwrite").status == 0
