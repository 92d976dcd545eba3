"""The fit of a block: equal to plain least squares, honest about noise, unharmed by bad points."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
import simulated

from xrfid.batch.drift import block_drift
from xrfid.batch.engine import GOOD, NEGATIVE, NOT_FINITE, UNREADABLE, BlockResult, fit_block
from xrfid.batch.plan import Plan, moved_lines

COUNTS = 1000.0


def block(model: simulated.Model, n: int = 600, counts: float = COUNTS, seed: int = 0) -> tuple[np.ndarray, np.ndarray]:
    rng = np.random.default_rng(seed)
    mean, areas = model.expected(rng.dirichlet(np.ones(3), n), counts)
    return rng.poisson(mean).astype(np.uint16), areas


def fit(plan: Plan, *layers: np.ndarray, lost: np.ndarray | None = None, signed: bool = False) -> BlockResult:
    lost = np.zeros(len(layers[0]), bool) if lost is None else lost
    return fit_block(plan, list(layers), lost, np.full(plan.n_channels, -1.0, np.float32), signed)


def test_areas_are_those_of_weighted_least_squares(plan: Plan, model: simulated.Model) -> None:
    counts, _ = block(model)
    found = fit(plan, counts)
    grouped = counts[:, plan.starts[0] :].astype(float)
    weighted = plan.columns / np.sqrt(plan.mean)
    exact = np.linalg.lstsq(weighted.T, (grouped / np.sqrt(plan.mean)).T, rcond=None)[0][: plan.n_series]
    np.testing.assert_allclose(found.area, exact, atol=2e-3 * np.sqrt(COUNTS))


def test_expected_counts_give_back_the_areas_for_any_composition(plan: Plan, model: simulated.Model) -> None:
    mean, areas = model.expected(np.eye(3), 5e4)
    np.testing.assert_allclose(fit(plan, mean.astype(np.float32)).area, areas.T, atol=2.0)


@pytest.mark.parametrize("counts", [20.0, 200.0, 2000.0])
def test_uncertainties_cover_and_areas_are_unbiased(plan: Plan, model: simulated.Model, counts: float) -> None:
    data, areas = block(model, 6000, counts)
    found = fit(plan, data)
    pull = (found.area - areas.T) / found.sigma
    for name, p, a in zip(plan.names, pull, areas.T, strict=True):
        if a.mean() > 1.0:
            assert 0.85 < p.std() < 1.15, name
    off = (found.area - areas.T).mean(axis=1) / (found.area.std(axis=1) / np.sqrt(6000))
    assert np.abs(off).max() < 4.5


def test_chi_square_is_one_on_average(plan: Plan, model: simulated.Model) -> None:
    assert fit(plan, block(model)[0]).chi2.mean() == pytest.approx(1.0, abs=0.04)


def test_an_unknown_peak_stands_out(plan: Plan, model: simulated.Model) -> None:
    counts, _ = block(model)
    counts[17] += np.random.default_rng(1).poisson(40 * simulated.series_column("Br", "K", 1024)).astype(np.uint16)
    found = fit(plan, counts)
    assert found.residual.argmax() == 17
    assert found.residual_kev[17] == pytest.approx(11.92, abs=0.2)  # Br K-alpha, xraylib 11.924 keV


def test_bad_points_cost_themselves_only(plan: Plan, model: simulated.Model) -> None:
    counts, _ = block(model)
    clean = fit(plan, counts)
    spoilt = counts.astype(np.float64)
    spoilt[3, 100], spoilt[4, 5], spoilt[5, 900], spoilt[6, 7] = np.nan, np.inf, -1.0, 1e300
    lost = np.zeros(len(counts), bool)
    lost[8] = True
    found = fit(plan, spoilt, lost=lost, signed=True)
    bad = [3, 4, 5, 6, 8]
    assert list(found.status[bad]) == [NOT_FINITE, NOT_FINITE, NEGATIVE, NOT_FINITE, UNREADABLE]
    assert np.isnan(found.area[:, bad]).all()
    assert np.isnan(found.chi2[bad]).all()
    good = np.delete(np.arange(len(counts)), bad)
    assert (found.status[good] == GOOD).all()
    np.testing.assert_allclose(found.area[:, good], clean.area[:, good], atol=1e-2)
    np.testing.assert_array_equal(found.summed, counts[good].sum(axis=0))


def test_layers_are_added_up(plan: Plan, model: simulated.Model) -> None:
    a, b = block(model, seed=1)[0], block(model, seed=2)[0]
    np.testing.assert_array_equal(fit(plan, a, b).area, fit(plan, a + b).area)


def test_sum_maximum_and_who_holds_it(plan: Plan, model: simulated.Model) -> None:
    counts, _ = block(model)
    found = fit(plan, counts)
    np.testing.assert_array_equal(found.summed, counts.sum(axis=0))
    np.testing.assert_array_equal(found.highest, counts.max(axis=0))
    np.testing.assert_array_equal(found.holder, counts.argmax(axis=0))


def test_an_area_far_below_zero_is_solved_again(plan: Plan, model: simulated.Model) -> None:
    """A dip under zinc that no columns describe: free least squares answers with negative zinc."""
    mean, _ = model.expected(np.array([[1.0, 0.0, 0.0]]), 2e4)
    zinc = simulated.series_column("Zn", "K", 1024)
    dipped = np.maximum(mean - 600.0 * zinc, 0.0).astype(np.float32)
    found = fit(plan, dipped)
    free = (plan.grouped_projection @ dipped[0, plan.starts[0] :])[: plan.n_series]
    at = plan.names.index("Zn K")
    assert free[at] < -50.0
    assert found.area[at, 0] == 0.0
    assert (found.area[:, 0] >= 0.0).all()


@pytest.mark.parametrize("shift_ev", [-25.0, -6.0, 6.0, 25.0])
def test_a_moved_block_is_recognised_and_corrected(plan: Plan, shift_ev: float) -> None:
    moved = simulated.model(1024, shift_kev=1e-3 * shift_ev)
    counts, areas = block(moved, 2000, 2000.0)
    found = fit(plan, counts)
    assert 1e3 * found.drift.offset_kev == pytest.approx(shift_ev, abs=0.5)
    off = found.area.mean(axis=1) - areas.mean(axis=0)
    assert np.abs(off).max() < 0.02 * areas.mean(axis=0).max()
    assert found.chi2.mean() == pytest.approx(1.0, abs=0.06)


def test_a_still_block_is_left_alone(plan: Plan, model: simulated.Model) -> None:
    counts, _ = block(model, 2000)
    drift, corrected = block_drift(plan, counts.sum(axis=0).astype(float), 2000)
    assert corrected is plan
    assert abs(drift.offset_kev) < 4.0 * drift.offset_sigma_kev


def test_no_points_no_drift(plan: Plan) -> None:
    drift, corrected = block_drift(plan, np.zeros(1024), 0)
    assert corrected is plan
    assert not drift.matters


def test_moved_lines_keep_their_counts() -> None:
    edges = np.linspace(1.0, 20.0, 951)
    centres = 0.5 * (edges[1:] + edges[:-1])
    column = np.exp(-0.5 * ((centres - 8.0) / 0.06) ** 2)
    moved = moved_lines(column, edges, 0.030, 0.001)
    assert moved.sum() == pytest.approx(column.sum(), rel=1e-6)
    assert np.average(centres, weights=moved) == pytest.approx(8.0 + 0.030 + 0.001 * 2.0, abs=2e-4)


def test_grouped_channels_are_folded_into_the_projection(plan: Plan, model: simulated.Model) -> None:
    """Two channels to a group give nearly the same areas, with raw channels multiplied once."""
    starts = plan.starts[::2]
    starts = np.append(starts, plan.starts[-1]) if starts[-1] != plan.starts[-1] else starts
    coarse = replace(
        plan, starts=starts, edges_kev=np.interp(starts, plan.starts, plan.edges_kev),
        columns=np.add.reduceat(plan.columns, starts[:-1] - starts[0], axis=1),
        mean=np.add.reduceat(plan.mean, starts[:-1] - starts[0]),
    )  # fmt: skip
    counts, _ = block(model)
    fine, grouped = fit(plan, counts), fit(coarse, counts)
    strong = plan.names.index("Fe K")
    assert np.abs((fine.area - grouped.area) / fine.sigma)[strong].mean() < 0.1
