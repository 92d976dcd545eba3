"""What a review keeps, tries and saves, without any browser."""

from __future__ import annotations

import json
import time
from pathlib import Path

import numpy as np
import pytest

from xrfid.errors import InputError, OutputError
from xrfid.formats import read_spectrum
from xrfid.identify.pipeline import identify
from xrfid.identify.result import Verdict
from xrfid.instrument import Instrument
from xrfid.report.document import from_document, to_document
from xrfid.review import session
from xrfid.review.decisions import Choice, Decision, from_plain, to_plain
from xrfid.review.facts import Facts, facts_of, with_facts
from xrfid.review.journal import checked_name, journal_path, plain_name, read_journal
from xrfid.review.session import Desk
from xrfid.review.whatif import elements_to_try, said

NAME = "A. Reader"
SAMPLES = Path(__file__).parents[2] / "sample_spectra"


# ---------------------------------------------------------------- decisions and the journal
def test_a_decision_is_kept_beside_the_automatic_verdict(desk, case):
    made = desk.decide(case, "Mo", Choice.QUESTIONED, " plated? ", f" {NAME} ")
    assert (made.element, made.choice, made.remark, made.by) == ("Mo", Choice.QUESTIONED, "plated?", NAME)
    assert made.automatic == "identified"
    assert made.significance == case.identification["Mo"].evidence.significance
    assert case.decisions == {"Mo": made}


def test_the_last_decision_counts_and_may_be_taken_back(desk, case):
    desk.decide(case, "Mo", Choice.QUESTIONED, "plated?", NAME)
    last = desk.decide(case, "Mo", Choice.ACCEPTED, "", NAME)
    assert case.decisions == {"Mo": last}
    desk.decide(case, "Mo", Choice.OPEN, "", NAME)
    assert case.decisions == {}
    assert len(case.journal.history) == 3


def test_an_element_that_was_not_found_can_be_decided_upon(desk, case):
    assert desk.decide(case, "Cu", Choice.QUESTIONED, "should be there", NAME).automatic == "not detected"
    assert desk.decide(case, "Li", Choice.QUESTIONED, "cannot be seen", NAME).automatic == "out of reach"


@pytest.mark.parametrize(
    ("element", "choice", "remark", "by", "says"),
    [
        ("Mo", Choice.ACCEPTED, "", "  ", "nobody signs it"),
        ("Mo", Choice.QUESTIONED, " ", NAME, "questioned without a reason"),
        ("Xx", Choice.ACCEPTED, "", NAME, "no element symbol"),
        ("Mo", Choice.ACCEPTED, "x" * 2001, NAME, "too long"),
        ("Mo", Choice.ACCEPTED, "", "x" * 81, "too long"),
    ],
)
def test_a_decision_that_makes_no_sense_is_refused(desk, case, element, choice, remark, by, says):
    with pytest.raises(InputError, match=says):
        desk.decide(case, element, choice, remark, by)
    assert case.journal.history == []
    assert not journal_path(desk.folder, case.spectrum).exists()


def test_nothing_is_decided_before_it_is_identified(desk, identified):
    case = desk.add(identified.spectrum)
    for act in (
        lambda: desk.decide(case, "Mo", Choice.ACCEPTED, "", NAME),
        lambda: desk.what_if(case, "Mo"),
        lambda: desk.save(case, "coupon", NAME),
    ):
        with pytest.raises(InputError, match="is not identified"):
            act()


def test_another_desk_goes_on_where_the_first_stopped(desk, case):
    desk.decide(case, "Mo", Choice.QUESTIONED, "plated?", NAME)
    desk.what_if(case, "Mo", NAME)
    desk.set_facts(case, Facts("Rh", "35", "Al 20", "air", "140"))
    again = Desk(desk.folder).add(case.spectrum)
    assert again.journal == case.journal
    assert again.decisions["Mo"].remark == "plated?"
    assert facts_of(again.journal.instrument) == Facts("Rh", "35", "Al 20", "air", "140")


def test_the_journal_is_written_before_the_decision_counts(desk, case, monkeypatch):
    def full(*_):
        raise OutputError("journal", "could not be written (no space left on device)")

    monkeypatch.setattr(session, "write_journal", full)
    with pytest.raises(OutputError, match="no space left"):
        desk.decide(case, "Mo", Choice.ACCEPTED, "", NAME)
    assert case.decisions == {}


@pytest.mark.parametrize(
    ("text", "says"),
    [
        ("", "is no journal"),
        ("[" * 100000, "is no journal"),
        ('{"schema": "something else"}', "is no journal"),
        ('{"schema": "xrfid.review-journal/1", "sha256": "0"}', "journal of another spectrum"),
        ('{"schema": "xrfid.review-journal/1", "sha256": "SHA"}', "no whole journal"),
        (
            '{"schema": "xrfid.review-journal/1", "sha256": "SHA", "history": [], "trials": [], "instrument": "["}',
            "not valid TOML",
        ),
        (
            '{"schema": "xrfid.review-journal/1", "sha256": "SHA", "history": [3], "trials": [], "instrument": ""}',
            "no decision",
        ),
    ],
)
def test_a_journal_that_makes_no_sense_is_named_and_left_alone(tmp_path, identified, text, says):
    from xrfid.review.journal import fingerprint

    path = journal_path(tmp_path, identified.spectrum)
    path.write_text(text.replace("SHA", fingerprint(identified.spectrum)), "utf-8")
    before = path.read_bytes()
    with pytest.raises(InputError, match=says):
        read_journal(tmp_path, identified.spectrum)
    assert path.read_bytes() == before


def test_a_journal_that_cannot_be_read_is_named(tmp_path, identified):
    journal_path(tmp_path, identified.spectrum).mkdir()
    with pytest.raises(InputError, match="cannot be read"):
        read_journal(tmp_path, identified.spectrum)


def test_decisions_survive_json():
    made = Decision("Fe", Choice.ACCEPTED, "", NAME, "2024-05-01T10:00:00+00:00", "identified", 12.5)
    assert from_plain(json.loads(json.dumps(to_plain(made))), "here") == made


@pytest.mark.parametrize("change", [{"choice": "perhaps"}, {"significance": None}, {"significance": True}])
def test_a_decision_changed_by_hand_is_refused(change):
    plain = to_plain(Decision("Fe", Choice.ACCEPTED, "", NAME, "2024-05-01", "identified", 12.5))
    with pytest.raises(InputError, match="makes no sense"):
        from_plain(plain | change, "here")


# ---------------------------------------------------------------- what if
def test_taking_an_element_out_costs_what_its_verdict_says(desk, case):
    trial = desk.what_if(case, "Mo")
    evidence = case.identification["Mo"].evidence
    assert not trial.added
    assert trial.deviance_change == pytest.approx(evidence.deviance_loss, rel=1e-6)
    np.testing.assert_allclose(trial.model, case.identification.curves.without["Mo"], rtol=1e-6, atol=1e-6)
    assert "Without Mo" in said(trial)
    assert "nothing else makes up for it" in said(trial)


def test_putting_in_what_is_not_there_gains_nothing(desk, case):
    trial = desk.what_if(case, "Cu")
    assert trial.added
    assert trial.finding.verdict is Verdict.NOT_DETECTED
    assert abs(trial.deviance_change) < 9.0
    assert "do not need it" in said(trial)
    assert "Cu" in trial.shown.curves.without
    with pytest.raises(KeyError, match="Cu"):
        case.identification["Cu"]


def test_an_element_that_was_excluded_comes_back_by_asking(tmp_path, instrument, identified):
    """The search is told that molybdenum is not there; asking what if it were finds all its counts again."""
    from xrfid.identify.settings import Settings

    desk = Desk(tmp_path, instrument, Settings(absent=("Mn",)))
    case = desk.add(identified.spectrum)
    desk.identify(case)
    assert "Mn" not in case.identification.identified
    assert "Mn" not in elements_to_try(case.work)  # excluded is excluded, also here
    with pytest.raises(InputError, match="no line in the range"):
        desk.what_if(case, "Mn")


def test_every_trial_is_answered_within_half_a_second(desk, case):
    for element in (*case.identification.identified, *elements_to_try(case.work)[:6]):
        start = time.perf_counter()
        desk.what_if(case, element)
        assert time.perf_counter() - start < 0.5, element


def test_the_journal_keeps_what_was_asked_and_answered(desk, case):
    desk.what_if(case, "Si", NAME)
    kept = read_journal(desk.folder, case.spectrum).trials
    assert [(t["element"], t["question"], t["by"]) for t in kept] == [("Si", "if it is not there", NAME)]
    assert kept[0]["answer"].startswith("Without Si")


@pytest.mark.parametrize(("element", "says"), [("Xx", "no element symbol"), ("H", "no line"), ("Rh", "own target")])
def test_what_cannot_be_tried_is_said(desk, case, element, says):
    with pytest.raises(InputError, match=says):
        desk.what_if(case, element)
    assert case.journal.trials == []


# ---------------------------------------------------------------- saving
def test_the_record_says_who_decided_what(desk, case):
    desk.decide(case, "Fe", Choice.ACCEPTED, "", NAME)
    desk.decide(case, "Cu", Choice.QUESTIONED, "<b>traces</b>", NAME)
    record, page = desk.save(case, "coupon reviewed", NAME)
    found = json.loads(record.read_text("utf-8"))
    assert found["schema"] == "xrfid.review/1"
    assert found["saved_by"] == NAME
    by_element = {e["element"]: e for e in found["elements"]}
    assert by_element["Fe"]["automatic"] == "identified"
    assert by_element["Fe"]["decision"]["choice"] == "accepted"
    assert by_element["Cr"]["decision"] is None
    assert by_element["Cu"]["automatic"] == "not detected"
    assert found["identification"] == json.loads(json.dumps(to_document(case.identification)))
    assert from_document(found["identification"]).identified == case.identification.identified
    assert Instrument.from_table(__import__("tomllib").loads(found["instrument"])) == case.journal.instrument
    text = page.read_text("utf-8")
    assert NAME in text
    assert "&lt;b&gt;traces" in text
    assert "<b>traces" not in text


def test_saving_replaces_only_when_told(desk, case):
    record, page = desk.save(case, "coupon", NAME)
    before = record.read_bytes(), page.read_bytes()
    desk.decide(case, "Fe", Choice.ACCEPTED, "", NAME)
    with pytest.raises(OutputError, match="exists"):
        desk.save(case, "coupon", NAME)
    assert (record.read_bytes(), page.read_bytes()) == before
    desk.save(case, "coupon", NAME, replace_existing=True)
    assert json.loads(record.read_text("utf-8"))["history"][0]["element"] == "Fe"


@pytest.mark.parametrize(
    "name",
    ["", "..", "../x", "a/b", "/etc/x", "a\\b", ".hidden", "x\0", "x\n", "a" * 81, "~", "-rf", "x.", "x ", "C:x", "_x"],
)
def test_a_name_that_leads_elsewhere_is_refused(desk, case, name):
    before = sorted(desk.folder.parent.rglob("*"))
    with pytest.raises(InputError, match="cannot be used for a file"):
        desk.save(case, name, NAME)
    assert sorted(desk.folder.parent.rglob("*")) == before


@pytest.mark.parametrize("text", ["../../etc/passwd", "a b/c:d.msa", "", "...", "ünï-3.h5:/entry[3,7]", "x" * 300])
def test_suggested_names_can_be_used(text):
    assert checked_name(plain_name(text))


def test_the_folder_must_be_there(tmp_path):
    with pytest.raises(OutputError, match="is no folder"):
        Desk(tmp_path / "nowhere")


# ---------------------------------------------------------------- the desk
def test_the_same_spectrum_lies_there_once(desk):
    first = read_spectrum(SAMPLES / "coupon.msa")
    assert desk.add(first) is desk.add(read_spectrum(SAMPLES / "coupon.msa"))
    assert len(desk.cases) == 1


def test_equal_names_are_told_apart(desk, identified):
    from dataclasses import replace

    desk.add(identified.spectrum)
    other = desk.add(replace(identified.spectrum, counts=identified.spectrum.counts + 1.0))
    assert other.name == f"{identified.spectrum.name} (2)"


def test_the_desk_is_bounded(desk, identified, monkeypatch):
    from dataclasses import replace

    monkeypatch.setattr(session, "MOST_CASES", 1)
    desk.add(identified.spectrum)
    with pytest.raises(InputError, match="holds 1 spectra already"):
        desk.add(replace(identified.spectrum, title="x", path="y"))


def test_what_cannot_be_identified_says_why(desk, identified):
    from dataclasses import replace

    case = desk.add(replace(identified.spectrum, counts=np.full(2048, 1.0), scale=None))
    desk.identify(case)
    assert case.identification is None
    assert case.failure


def test_the_answer_is_that_of_the_command_line(identified, instrument):
    assert to_document(identified.identification) == to_document(identify(identified.spectrum, instrument))


# ---------------------------------------------------------------- the instrument's facts
def test_facts_come_back_as_they_were(instrument):
    assert with_facts(instrument, facts_of(instrument)) == instrument


def test_facts_replace_only_themselves(instrument):
    changed = with_facts(instrument, Facts("Mo", "50", "Al 50; Cu 10 µm", "vacuum", "130"))
    assert [(f.material, f.thickness_um) for f in changed.tube.filters] == [("Al", 50.0), ("Cu", 10.0)]
    assert (changed.tube.anode, changed.tube.voltage_kv, changed.path.atmosphere) == ("Mo", 50.0, "vacuum")
    assert changed.detector.fwhm_mn_ka_ev == 130.0
    assert changed.tube.window == instrument.tube.window
    assert changed.path.length_mm == instrument.path.length_mm
    assert changed.detector.thickness_um == instrument.detector.thickness_um


def test_empty_facts_are_not_stated():
    assert with_facts(Instrument(), Facts()) == Instrument()
    assert facts_of(with_facts(Instrument(), Facts(voltage_kv="30,5"))).voltage_kv == "30.5"


@pytest.mark.parametrize(
    ("facts", "says"),
    [
        (Facts(anode="Rhodium"), "no element symbol"),
        (Facts(voltage_kv="forty"), "voltage.*no number"),
        (Facts(voltage_kv="1e9"), "voltage_kv"),
        (Facts(filters="Al"), "no material with a thickness"),
        (Facts(filters="Al fifty"), "filter.*no number"),
        (Facts(fwhm_ev="-3"), "fwhm_mn_ka_ev"),
        (Facts(fwhm_ev="nan"), "fwhm_mn_ka_ev"),
        (Facts(atmosphere="argon"), "atmosphere"),
    ],
)
def test_facts_that_make_no_sense_are_named(facts, says):
    with pytest.raises(InputError, match=says):
        with_facts(Instrument(), facts)
