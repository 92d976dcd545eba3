"""Names that do not cover each other, and which peaks get one."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.optimize import minimize

from xrfid.identify.result import Verdict
from xrfid.report.document import no_curves
from xrfid.report.marks import line_groups, marks, shown_range, spread, strongest


@given(st.lists(st.floats(0, 1), max_size=60), st.floats(1e-3, 0.05))
def test_spread_keeps_the_gap_the_order_and_the_bounds(wanted, gap):
    wanted = sorted(wanted)
    moved = spread(wanted, gap, 0.0, 1.0)
    assert moved.shape == (len(wanted),)
    assert np.all(moved >= -1e-12)
    assert np.all(moved <= 1 + 1e-12)
    room = min(gap, 1.0 / max(len(wanted) - 1, 1))
    assert np.all(np.diff(moved) >= room - 1e-9)


def test_spread_leaves_alone_what_has_room():
    np.testing.assert_allclose(spread([0.1, 0.5, 0.9], 0.2, 0.0, 1.0), [0.1, 0.5, 0.9])


def test_spread_moves_as_little_as_possible():
    """The optimum after a general constrained minimiser (SLSQP)."""
    wanted, gap = np.array([0.30, 0.31, 0.33, 0.5, 0.52]), 0.06
    fences = [{"type": "ineq", "fun": lambda x, i=i: x[i + 1] - x[i] - gap} for i in range(4)]
    start, exact = np.linspace(0, 1, 5), {"ftol": 1e-13}
    best = minimize(
        lambda x: np.sum((x - wanted) ** 2), start, method="SLSQP", constraints=fences, options=exact
    )
    np.testing.assert_allclose(spread(wanted, gap, 0.0, 1.0), best.x, atol=1e-4)


def test_every_visible_peak_has_a_name(steel):
    found = {m.text: m for m in marks(steel)}
    assert {"Fe Kα", "Fe Kβ", "Mo Lα", "Si Kα", "Ar Kα", "escape", "sum", "diffraction", "? 11.31"} <= set(
        found
    )
    assert found["Fe Kα"].kind == "sample"
    assert found["Ar Kα"].kind == "instrument"
    assert found["Fe Kβ"].detail == "13% of the Fe K series"
    assert found["escape"].detail == "escape: Fe K Ka"
    energies = [m.energy_kev for m in marks(steel)]
    assert energies == sorted(energies)


def test_an_open_finding_is_marked_as_such(steel):
    doubted = replace(steel, findings=tuple(replace(f, verdict=Verdict.TENTATIVE) for f in steel.findings))
    assert {m.kind for m in marks(doubted)} == {"open", "artefact", "unexplained"}


def test_without_curves_there_are_no_marks(steel):
    assert marks(replace(steel, curves=no_curves())) == []


def test_the_first_name_of_each_element_comes_before_second_names(steel):
    few = strongest(marks(steel), 7)
    assert len(few) == 7
    assert {m.text.split()[0] for m in few} >= {"Fe", "Cr", "Ni", "Mo", "Mn", "Si"}


def test_line_groups_weigh_their_lines(steel):
    groups = {
        (name, group): (energy, share) for name, group, energy, share in line_groups(steel.curves, "Fe")
    }
    energy, share = groups["Fe K", "Ka"]
    assert share == pytest.approx(0.87)
    assert energy == pytest.approx((0.58 * 6.404 + 0.29 * 6.391) / 0.87)


def test_the_shown_range_ends_where_the_counts_do(steel):
    low, high = shown_range(steel.curves)
    assert low == pytest.approx(0.8)
    assert 30.0 < high < 40.0
