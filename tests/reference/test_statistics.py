"""SNIP, areas, limits and the likelihood ratio against other libraries and published figures."""

import lmfit
import numpy as np
import pybaselines
import pytest
from scipy import stats

from xrfid.fit.solve import LinearProblem, solve
from xrfid.identify.limits import K_95, _limits
from xrfid.identify.settings import Settings
from xrfid.prepare.snip import inverse_lls, lls, snip

pytestmark = pytest.mark.reference


def hump_with_peaks(n=600, seed=3):
    x = np.arange(n)
    mean = 400 * np.exp(-0.5 * ((x - 220) / 160) ** 2) + 20
    for at, area in ((150, 4e4), (300, 2e4), (330, 8e3)):
        mean = mean + area / (6 * np.sqrt(2 * np.pi)) * np.exp(-0.5 * ((x - at) / 6) ** 2)
    return np.random.default_rng(seed).poisson(mean).astype(float)


def test_snip_equals_pybaselines():
    """pybaselines.smooth.snip, decreasing window, second order, on the same LLS-transformed data."""
    counts, half = hump_with_peaks(), 20
    theirs = inverse_lls(pybaselines.smooth.snip(lls(counts), max_half_window=half, decreasing=True)[0])
    ours = snip(counts, half)
    reach = half * (half + 1) // 2  # the ends are padded there and left alone here; a pass carries that inwards
    inner = slice(reach, -reach)
    assert np.allclose(ours[inner], theirs[inner], rtol=1e-6, atol=1e-6)


def test_areas_equal_an_lmfit_fit_of_separate_gaussians():
    """lmfit (Levenberg-Marquardt, weights from the expected counts): areas within 0.1 sigma, errors within 3 %."""
    rng, x, sigma = np.random.default_rng(5), np.arange(300), 5.0
    shapes = np.array([np.exp(-0.5 * ((x - c) / sigma) ** 2) / (sigma * np.sqrt(2 * np.pi)) for c in (80, 150, 220)])
    counts = rng.poisson(np.array([3e4, 8e3, 1.5e4]) @ shapes + 50).astype(float)
    columns = np.concatenate([shapes, np.ones((1, 300))])
    none = np.zeros(4)
    ours = solve(LinearProblem(columns, np.ones(4, bool), none, none), counts, iterations=12)
    parameters = lmfit.Parameters()
    for i, start in enumerate((2e4, 2e4, 2e4, 40)):
        parameters.add(f"a{i}", value=start, min=0)

    def residual(p):
        return (np.array([p[f"a{i}"].value for i in range(4)]) @ columns - counts) / np.sqrt(ours.model)

    theirs = lmfit.minimize(residual, parameters, scale_covar=False)
    for i in range(4):
        assert ours.coefficients[i] == pytest.approx(
            theirs.params[f"a{i}"].value, abs=0.1 * theirs.params[f"a{i}"].stderr
        )
        assert np.sqrt(ours.covariance[i, i]) == pytest.approx(theirs.params[f"a{i}"].stderr, rel=0.03)


@pytest.mark.parametrize(("background", "threshold", "limit"), [(100.0, 16.5, 35.6), (64.0, 13.2, 29.0)])
def test_limits_of_a_well_known_blank(background, threshold, limit):
    """Currie, Anal. Chem. 40 (1968) 586: L_C = 1.645 sqrt(B), L_D = 2.71 + 3.29 sqrt(B)."""
    column, variance = np.ones((1, 1)), np.array([background])
    found = _limits(np.zeros(1), np.sqrt(variance), column, variance)
    assert float(found.decision_threshold[0]) == pytest.approx(threshold, abs=0.1)
    assert float(found.detection_limit[0]) == pytest.approx(limit, abs=0.1)
    assert float(found.detection_limit[0]) == pytest.approx(K_95**2 + 2 * K_95 * np.sqrt(background), rel=1e-6)


def test_limits_of_a_side_background():
    """ISO 11929 form, 20 peak and 40 side channels with 2000 counts: y* = 63.7, y# = 130.1, worked by hand."""
    sigma = np.array([np.sqrt(1000 + 0.25 * 2000)])
    found = _limits(np.zeros(1), sigma, np.ones((1, 1)), np.array([1000.0]))
    assert float(found.decision_threshold[0]) == pytest.approx(63.7, abs=0.1)
    assert float(found.detection_limit[0]) == pytest.approx(130.1, abs=0.2)


def test_likelihood_ratio_under_the_null():
    """Chernoff, Ann. Math. Stat. 25 (1954) 573: for one non-negative amplitude half chi-squared(1), half zero."""
    rng, x = np.random.default_rng(11), np.arange(80)
    peak = np.exp(-0.5 * ((x - 40) / 4) ** 2)
    peak /= peak.sum()
    flat = np.ones((1, 80))
    none = np.zeros(2)
    gains = []
    for counts in rng.poisson(30.0, (400, 80)).astype(float):
        null = solve(LinearProblem(flat, np.ones(1, bool), none[:1], none[:1]), counts, iterations=8)
        full = solve(LinearProblem(np.vstack([peak, flat]), np.ones(2, bool), none, none), counts, iterations=8)
        gains.append(max(null.deviance - full.deviance, 0.0))
    gains = np.array(gains)
    assert np.mean(gains > 1e-6) == pytest.approx(0.5, abs=0.08)
    expected = 0.5 * stats.chi2(1).sf(2.706)
    assert np.mean(gains > 2.706) == pytest.approx(expected, abs=0.03)


def test_threshold_allows_for_the_number_of_candidates():
    """Bonferroni: one false element in a hundred spectra among 80 candidates asks for 3.66 sigma."""
    assert Settings().threshold(80) == pytest.approx(stats.norm.isf(0.01 / 80))
    assert Settings(false_identification_level=1e-4).threshold(80) > Settings().threshold(80)


def test_poisson_fit_is_unbiased_where_least_squares_is_not():
    """Mighell, Astrophys. J. 518 (1999) 380: weights from the counts lose a count per channel, the likelihood none."""
    rng = np.random.default_rng(2)
    none = np.zeros(1)
    problem = LinearProblem(np.ones((1, 200)), np.ones(1, bool), none, none)
    found, neyman = [], []
    for counts in rng.poisson(5.0, (60, 200)).astype(float):
        found.append(solve(problem, counts, iterations=10).coefficients[0])
        w = 1.0 / np.maximum(counts, 1.0)
        neyman.append(np.sum(w * counts) / np.sum(w))
    assert np.mean(found) == pytest.approx(5.0, abs=0.06)
    assert np.mean(neyman) < 4.3
