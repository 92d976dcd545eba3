import numpy as np
import pytest

import xrfid
from xrfid.errors import InputError
from xrfid.fit.simulate import Recipe, simulate
from xrfid.identify.result import ArtefactKind, Verdict
from xrfid.identify.settings import Settings
from xrfid.instrument import Instrument

TUBE = Instrument.from_table({"tube": {"anode": "Rh", "voltage_kv": 40}, "detector": {"fwhm_mn_ka_ev": 140}})
BRASS = Recipe(sample={"Cu": 62, "Zn": 36, "Pb": 2}, total_counts=4e5, seed=4, pulse_pair_ns=300)


@pytest.fixture(scope="module")
def brass():
    made = simulate(BRASS, TUBE)
    return made, xrfid.identify(made.spectrum, TUBE)


def test_the_alloy_is_named(brass):
    assert set(brass[1].identified) == {"Cu", "Zn", "Pb"}


def test_areas_lie_within_their_uncertainty(brass):
    made, found = brass
    for finding in found:
        for s in finding.series if finding.verdict is Verdict.IDENTIFIED else ():
            truth = made.areas[f"{finding.element} {s.series}"]
            assert abs(s.area - truth) < 4 * s.sigma + 0.01 * truth
            assert 0 < s.decision_threshold < s.detection_limit


def test_every_verdict_has_its_reason_and_evidence(brass):
    for finding in brass[1]:
        assert finding.reason.endswith(".")
        assert finding.element in finding.reason or finding.element == "Ar"
    copper = brass[1]["Cu"]
    assert copper.evidence.deviance_loss > 1e4
    assert {line.group for line in copper.evidence.lines} >= {"Ka", "Kb"}


def test_the_anode_belongs_to_the_instrument(brass):
    assert brass[1]["Rh"].verdict is Verdict.INSTRUMENT


def test_artefacts_are_named(brass):
    kinds = {a.kind for a in brass[1].artefacts}
    assert ArtefactKind.ESCAPE in kinds
    assert ArtefactKind.SUM in kinds
    escape = next(a for a in brass[1].artefacts if a.of == "Cu K Ka" and a.kind is ArtefactKind.ESCAPE)
    assert escape.energy_kev == pytest.approx(8.04 - 1.74, abs=0.02)


def test_what_was_not_seen_has_a_limit(brass):
    limits = {(x.element, x.series): x for x in brass[1].limits}
    arsenic = limits["As", "K"]
    assert arsenic.verdict is Verdict.NOT_DETECTED
    assert arsenic.detection_limit > arsenic.decision_threshold > 0
    cleaner = limits["Sr", "K"]
    assert arsenic.detection_limit > cleaner.detection_limit  # Pb La hides As Ka


def test_parts_and_continuum_add_up_to_the_model(brass):
    curves = brass[1].curves
    total = curves.continuum + sum(curves.parts.values())
    assert np.allclose(total, curves.model, atol=1e-6 * curves.model.max())
    assert set(curves.without) >= {"Cu", "Zn", "Pb"}


def test_known_absent_elements_are_never_offered(brass):
    found = xrfid.identify(brass[0].spectrum, TUBE, settings=Settings(absent=("Pb",)))
    assert "Pb" not in {f.element for f in found}
    assert "Pb" not in {x.element for x in found.limits}


def test_known_present_elements_are_always_fitted(brass):
    found = xrfid.identify(brass[0].spectrum, TUBE, settings=Settings(present=("Cu", "Sn")))
    named = {f.element: f.verdict for f in found}
    assert named["Cu"] is Verdict.IDENTIFIED
    assert named.get("Sn") is not Verdict.IDENTIFIED


def test_results_do_not_depend_on_what_ran_before(brass):
    again = xrfid.identify(brass[0].spectrum, TUBE)
    assert [(f.element, f.series) for f in again] == [(f.element, f.series) for f in brass[1]]


def test_a_sample_of_the_anodes_element_is_recognised():
    copper_tube = Instrument.from_table({"tube": {"anode": "Cu", "voltage_kv": 35}})
    made = simulate(Recipe(sample={"Cu": 85, "Zn": 15}, total_counts=3e5), copper_tube)
    found = xrfid.identify(made.spectrum, copper_tube)
    assert found["Cu"].verdict is Verdict.IDENTIFIED
    assert "times larger" in found["Cu"].reason
    assert found["Zn"].verdict is Verdict.IDENTIFIED


def test_stray_elements_belong_to_the_instrument():
    stray = TUBE.model_copy(update={"stray": TUBE.stray.model_copy(update={"elements": ("Zn",)})})
    found = xrfid.identify(simulate(BRASS, TUBE).spectrum, stray)
    assert found["Zn"].verdict is Verdict.INSTRUMENT


@pytest.mark.parametrize(("settings", "message"), [
    ({"present": ("Xx",)}, "no element symbol"), ({"present": ("Fe",), "absent": ("Fe",)}, "present and absent"),
    ({"series": "KX"}, "not made of K, L and M"), ({"false_identification_level": 2.0}, "out of range"),
])  # fmt: skip
def test_wrong_settings_are_refused(settings, message):
    with pytest.raises(InputError, match=message):
        Settings(**settings)


def test_an_unknown_element_is_a_key_error(brass):
    with pytest.raises(KeyError):
        brass[1]["Xx"]


def test_the_result_becomes_a_table(brass):
    pytest.importorskip("pandas")
    frame = brass[1].to_dataframe()
    assert {"element", "series", "area", "sigma", "verdict"} <= set(frame.columns)
    assert "Cu" in set(frame.element)
