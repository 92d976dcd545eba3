"""The scorer of the benchmark of honesty, on outcomes whose figures can be counted by hand."""

from __future__ import annotations

import json
import math

import pytest
from honesty.score import Area, Outcome, Share, Trial, mistakes, summarise, table


def outcome(index: int = 0, **changes: object) -> Outcome:
    known = {
        "index": index, "material": "brass", "kind": "alloy", "detector": "drift", "anode": "Rh", "total": 1e6,
        "seconds": 0.2, "best_z": {"Cu": 300.0, "Zn": 200.0, "Pb": 8.0, "Fe": 3.0, "Ni": 0.4, "Rh": 50.0, "Ar": 20.0},
        "identified": {"default": ["Cu", "Zn", "Pb", "Rh", "Ar"]},
    }  # fmt: skip
    return Outcome(**{**known, **changes})  # type: ignore[arg-type]


def test_right_when_all_due_are_found_and_nothing_else() -> None:
    assert outcome().missed == set()
    assert outcome().false() == set()
    assert summarise([outcome()], 0.01).wholly_right.value == 1.0


def test_weak_elements_may_be_found_or_not() -> None:
    assert outcome(identified={"default": ["Cu", "Zn", "Pb", "Fe"]}).false() == set()


@pytest.mark.parametrize("named", ["As", "Ni"])
def test_absent_and_invisible_elements_are_false(named: str) -> None:
    wrong = outcome(identified={"default": ["Cu", "Zn", "Pb", named]})
    assert wrong.false() == {named}
    assert summarise([wrong, outcome()], 0.01).false_per_spectrum == 0.5
    assert f"false {named}" in mistakes([wrong])


def test_missed_elements_lower_recall_in_their_bin() -> None:
    scores = summarise([outcome(identified={"default": ["Cu", "Zn"]}), outcome()], 0.01)
    assert (scores.recall.hits, scores.recall.of) == (5, 6)
    assert (scores.recall_clear.hits, scores.recall_clear.of) == (4, 4)
    bins = {(lo, hi): s for lo, hi, s in scores.by_significance}
    assert (bins[6.0, 8.0].hits, bins[6.0, 8.0].of) == (1, 2)
    assert sum(s.of for s in bins.values()) == 8  # three due and one weak element in each; anode and argon left out


def test_failure_counts_as_nothing_found() -> None:
    scores = summarise([outcome(failure="no scale", identified={"default": []})], 0.01)
    assert scores.failed == 1
    assert scores.recall.value == 0.0
    assert scores.wholly_right.value == 0.0


def test_coverage_counts_clear_series_only() -> None:
    areas = [Area("Cu", "K", 1005.0, 10.0, 1000.0, 100.0), Area("Zn", "K", 1015.0, 10.0, 1000.0, 100.0),
             Area("Pb", "L", 1030.0, 10.0, 1000.0, 100.0), Area("Fe", "K", 90.0, 10.0, 30.0, 3.0)]  # fmt: skip
    scores = summarise([outcome(areas=areas)], 0.01)
    assert (scores.within_1.hits, scores.within_2.hits, scores.within_2.of) == (1, 2, 3)
    assert scores.area_median == pytest.approx(0.015)


def test_levels_are_set_against_what_was_asked() -> None:
    rows = [outcome(identified={"default": ["Cu"], "0.1": ["As", "Tl"]}), outcome(identified={"default": ["As"]})]
    assert summarise(rows, 0.01).false_by_level == ((0.01, 1, 2), (0.1, 2, 1))


def test_trials_compare_with_the_threshold_stated_beforehand() -> None:
    trials = [Trial("As", "K", 100.0, 50.0, 51.0), Trial("Tl", "L", 100.0, 50.0, 49.0)]
    scores = summarise([outcome(trials=trials)], 0.01)
    assert (scores.at_limit.hits, scores.at_limit.of) == (1, 2)


def test_wilson_interval() -> None:
    """Centre and half width of Wilson 1927 for 8 of 10 and z = 1, worked by hand: (8.5 +- sqrt(1.6 + .25)) / 11."""
    low, high = Share(8, 10).interval
    assert low == pytest.approx((8.5 - math.sqrt(1.85)) / 11)
    assert high == pytest.approx((8.5 + math.sqrt(1.85)) / 11)
    assert math.isnan(Share(0, 0).value)


def test_outcomes_survive_json() -> None:
    full = outcome(areas=[Area("Cu", "K", 1.0, 1.0, 1.0, 20.0)], trials=[Trial("As", "K", 1.0, 0.5, 0.7)])
    assert Outcome.from_dict(json.loads(json.dumps(full.to_dict()))) == full


def test_table_and_figure_show_a_panel(tmp_path) -> None:
    from honesty.figure import save

    rows = [outcome(i, areas=[Area("Cu", "K", 1005.0, 10.0, 1000.0, 100.0)], trials=[Trial("As", "K", 9.0, 4.0, 8.0)])
            for i in range(3)]  # fmt: skip
    scores = summarise(rows, 0.01)
    assert "spectra wholly right" in table(scores, rows)
    save(tmp_path / "panel.png", scores, rows)
    assert (tmp_path / "panel.png").stat().st_size > 10_000
