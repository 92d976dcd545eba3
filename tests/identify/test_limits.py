"""Characteristic limits through the same path as in an identification, against figures worked by hand."""

import numpy as np
import pytest

from xrfid.fit.model import Fit, Sizing
from xrfid.fit.solve import LinearProblem, solve
from xrfid.identify.limits import K_95, characteristic_limits, limits_in_fit


def fitted(columns, labels, counts):
    """A fit of free columns without tolerances."""
    n = len(columns)
    problem = LinearProblem(np.asarray(columns, float), np.ones(n, bool), np.zeros(n), np.zeros(n))
    solution = solve(problem, counts, iterations=20)
    return Fit((), {}, {}, solution, problem, tuple(labels), np.eye(n), solution.model, Sizing({}, ()))


PEAK = np.zeros((1, 60))
PEAK[0, 20:40] = 1.0 / 20  # peak window of 20 channels, 20 side channels on either side


@pytest.mark.reference
def test_side_background_of_iso_11929():
    """20 peak and 40 side channels with 2000 counts: b = 1000, y* = 63.7, y# = 2 y* + k^2 = 130.1; worked by hand.

    ISO 11929 in the form of Currie, Anal. Chem. 40 (1968) 586, u^2(0) = b + (n_p / n_b)^2 B.
    """
    counts = np.full(60, 50.0)
    null = fitted(np.ones((1, 60)), [("continuum", "0")], counts)
    found = characteristic_limits(null, PEAK, counts, null.variance)
    assert found.sigma[0] == pytest.approx(np.sqrt(1000 + 0.25 * 2000), rel=1e-3)
    assert found.decision_threshold[0] == pytest.approx(63.7, abs=0.1)
    assert found.detection_limit[0] == pytest.approx(130.1, abs=0.2)
    assert found.estimate[0] == pytest.approx(0.0, abs=1e-6)
    assert found.upper_limit[0] == pytest.approx(K_95 * found.sigma[0])


@pytest.mark.reference
@pytest.mark.parametrize(
    ("background", "threshold", "limit"), [(100.0, 23.3, 49.2), (64.0, 18.6, 39.9), (1000.0, 73.6, 149.8)]
)
def test_paired_blank_of_currie(background, threshold, limit):
    """Currie 1968: L_C = 2.33 sqrt(B), L_D = 2.71 + 4.65 sqrt(B), for a blank measured as long as the sample."""
    counts = np.full(2, background)
    null = fitted(np.ones((1, 2)), [("continuum", "0")], counts)
    found = characteristic_limits(null, np.array([[1.0, 0.0]]), counts, null.variance)
    assert found.decision_threshold[0] == pytest.approx(threshold, abs=0.1)
    assert found.detection_limit[0] == pytest.approx(limit, abs=0.15)


def test_the_estimate_is_what_stands_above_the_background():
    counts = np.full(60, 50.0)
    counts[20:40] += 12.0
    null = fitted(np.ones((1, 60)), [("continuum", "0")], counts)
    found = characteristic_limits(null, PEAK, counts, null.variance)
    assert found.estimate[0] == pytest.approx(240.0, rel=0.02)
    assert found.upper_limit[0] == pytest.approx(found.estimate[0] + K_95 * found.sigma[0])


def test_the_threshold_is_crossed_by_chance_in_five_of_a_hundred():
    """What the definition says, over 10,000 blanks: 5 % +- 1 %; and the limit is missed in 5 %."""
    rng = np.random.default_rng(6)
    blank = np.full(60, 50.0)
    null = fitted(np.ones((1, 60)), [("continuum", "0")], blank)
    limits = characteristic_limits(null, PEAK, blank, null.variance)
    threshold, limit = float(limits.decision_threshold[0]), float(limits.detection_limit[0])

    def net(counts):
        return counts[:, 20:40].sum(axis=1) - 0.5 * (counts[:, :20].sum(axis=1) + counts[:, 40:].sum(axis=1))

    false = np.mean(net(rng.poisson(blank, (10_000, 60))) > threshold)
    missed = np.mean(net(rng.poisson(blank + limit * PEAK[0], (10_000, 60))) < threshold)
    assert false == pytest.approx(0.05, abs=0.01)
    assert missed == pytest.approx(0.05, abs=0.01)


def test_an_overlap_raises_the_limits():
    def gaussian(centre):
        made = np.exp(-0.5 * ((np.arange(80) - centre) / 4.0) ** 2)
        return made / made.sum()

    counts = 20.0 + 4000.0 * gaussian(36)
    apart, beside = (
        fitted([gaussian(36), np.ones(80)], [("series", "A K"), ("continuum", "0")], counts) for _ in range(2)
    )
    far = characteristic_limits(apart, gaussian(62)[None], counts, apart.variance)
    near = characteristic_limits(beside, gaussian(40)[None], counts, beside.variance)
    assert near.detection_limit[0] > 3.0 * far.detection_limit[0]


def test_a_fitted_series_is_judged_without_its_own_counts():
    """The limits of what is there are those of the same spectrum without it."""
    peak, flat = PEAK[0], np.ones(60)
    full = 50.0 + 3000.0 * peak
    fit = fitted([peak, flat], [("series", "A K"), ("continuum", "0")], full)
    null = fitted([flat], [("continuum", "0")], np.full(60, 50.0))
    inside = limits_in_fit(fit, ["A K"], PEAK, 3000.0 * peak, np.ones(60))
    blank = characteristic_limits(null, PEAK, np.full(60, 50.0), null.variance)
    assert inside.decision_threshold == pytest.approx(blank.decision_threshold, rel=0.01)
    assert inside.detection_limit == pytest.approx(blank.detection_limit, rel=0.01)
