"""The linear Poisson fit: bounds, constraints, weights, covariance."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.optimize import minimize, nnls

from xrfid.fit.solve import LinearProblem, bounded_solve, covariance_of, poisson_deviance, solve


def plain(columns, bounded=True):
    n = len(columns)
    return LinearProblem(np.asarray(columns, float), np.full(n, bounded), np.zeros(n), np.zeros(n))


def gaussian(n, centre, sigma):
    made = np.exp(-0.5 * ((np.arange(n) - centre) / sigma) ** 2)
    return made / made.sum()


def random_problem(seed, kind):
    """Mixed signs, all positive, or peaks in many channels that overlap: what a fit meets."""
    rng = np.random.default_rng(seed)
    n = int(rng.integers(1, 24))
    m = n + int(rng.integers(0, 30))
    if kind == "peaks":
        a = np.exp(-0.5 * ((np.arange(m)[:, None] - rng.uniform(0, m, n)) / 3.0) ** 2)
    else:
        a = rng.normal(size=(m, n))
        a = np.abs(a) if kind == "positive" else a
    return a, a @ np.maximum(rng.normal(size=n), 0.0) + 3.0 * rng.normal(size=m)


@pytest.mark.reference
@settings(max_examples=150, deadline=None)
@given(seed=st.integers(0, 10**6), kind=st.sampled_from(["mixed", "positive", "peaks"]), warm=st.booleans())
def test_bounded_solve_reaches_the_minimum_of_nnls(seed, kind, warm):
    """scipy.optimize.nnls on the same normal equations.

    Once the search stopped after its first step to a bound, up to three times above the minimum.
    """
    a, b = random_problem(seed, kind)
    n = a.shape[1]
    start = np.random.default_rng(seed).random(n) < 0.5 if warm else np.ones(n, bool)
    x, free = bounded_solve(a.T @ a, a.T @ b, np.ones(n, bool), start)
    best = np.sum((a @ nnls(a, b, maxiter=1000)[0] - b) ** 2)
    assert x.min() >= 0.0
    assert np.all(x[~free] == 0.0)
    assert np.sum((a @ x - b) ** 2) == pytest.approx(best, rel=1e-6, abs=1e-6)


def test_unbounded_coefficients_may_be_negative_whatever_the_start():
    a = np.eye(3)
    x, free = bounded_solve(a, np.array([-1.0, -2.0, 3.0]), np.array([False, True, True]), np.zeros(3, bool))
    assert x == pytest.approx([-1.0, 0.0, 3.0])
    assert list(free) == [True, False, True]


def test_columns_that_coincide_share_without_failing():
    a = np.ones((10, 1)) @ np.ones((1, 2))
    x, _ = bounded_solve(a.T @ a, a.T @ np.full(10, 4.0), np.ones(2, bool), np.ones(2, bool))
    assert x.sum() == pytest.approx(4.0, rel=1e-5)


@settings(max_examples=30, deadline=None)
@given(seed=st.integers(0, 10**6))
def test_solve_finds_the_maximum_of_the_likelihood(seed):
    """scipy.optimize.minimize (L-BFGS-B) on the Poisson deviance itself."""
    rng = np.random.default_rng(seed)
    columns = np.array([gaussian(60, 20, 3), gaussian(60, 26, 3), np.full(60, 1 / 60)])
    # well above the floor under expected counts, where both minimise the same function
    counts = rng.poisson(rng.uniform(30, 300, 3) @ columns).astype(float)
    found = solve(plain(columns), counts, iterations=60, tolerance=1e-10)

    def objective(c):
        return poisson_deviance(counts, c @ columns)

    best = min(minimize(objective, s, bounds=[(0, None)] * 3, method="L-BFGS-B", options={"maxiter": 500}).fun
               for s in (found.coefficients + 1.0, np.full(3, counts.sum() / 3 + 1.0)))  # fmt: skip
    assert found.deviance <= best + 0.02


def test_deviance_is_zero_for_a_perfect_model_and_two_m_for_no_counts():
    counts = np.array([3.0, 10.0, 200.0])
    assert poisson_deviance(counts, counts) == pytest.approx(0.0, abs=1e-12)
    assert poisson_deviance(np.zeros(4), np.full(4, 1.5)) == pytest.approx(2 * 4 * 1.5)


def test_the_fit_is_unbiased_at_two_counts_a_channel():
    """Baker & Cousins 1984: the likelihood has no bias to first order; weights 1/counts lose a count per channel."""
    rng = np.random.default_rng(8)
    columns = np.array([gaussian(60, 30, 4), np.ones(60)])
    truth = np.array([120.0, 2.0])
    found, sigma = [], []
    for counts in rng.poisson(truth @ columns, (300, 60)).astype(float):
        made = solve(plain(columns, bounded=False), counts, iterations=12)
        found.append(made.coefficients[0])
        sigma.append(np.sqrt(made.covariance[0, 0]))
    assert np.mean(found) == pytest.approx(120.0, abs=3.0 * np.std(found) / np.sqrt(300))
    assert np.std(found) == pytest.approx(np.mean(sigma), rel=0.12)  # the covariance tells the truth


def test_a_constraint_pulls_towards_its_mean_by_its_weight():
    columns = np.eye(2)
    counts = np.array([100.0, 100.0])
    problem = LinearProblem(columns, np.ones(2, bool), np.array([120.0, 0.0]), np.array([1 / 25.0, 0.0]))
    found = solve(problem, counts, iterations=30, tolerance=1e-9)
    # weights 1/variance: counts 100 +- sqrt(model), constraint 120 +- 5
    w = 1.0 / found.model[0]
    assert found.coefficients[0] == pytest.approx((100 * w + 120 / 25) / (w + 1 / 25), rel=1e-4)
    assert found.coefficients[1] == pytest.approx(100.0, rel=1e-4)
    assert found.penalty == pytest.approx((found.coefficients[0] - 120) ** 2 / 25)
    assert found.objective == pytest.approx(found.deviance + found.penalty)


def test_coupling_makes_neighbours_alike():
    counts = np.array([50.0, 150.0])
    stiff = LinearProblem(np.eye(2), np.ones(2, bool), np.zeros(2), np.zeros(2), 1e3 * np.array([[1.0, -1], [-1, 1.0]]))
    found = solve(stiff, counts, iterations=20)
    assert abs(found.coefficients[0] - found.coefficients[1]) < 0.05
    assert found.coefficients.sum() == pytest.approx(200.0, rel=0.01)


def test_inflation_widens_the_uncertainty_by_its_root():
    counts = np.full(40, 100.0)
    column = np.ones((1, 40))
    usual = solve(plain(column), counts).covariance[0, 0]
    wide = solve(plain(column), counts, inflation=np.full(40, 4.0)).covariance[0, 0]
    assert wide == pytest.approx(4.0 * usual)


def test_a_coefficient_at_its_bound_has_no_covariance():
    columns = np.array([gaussian(60, 30, 3), np.ones(60)])
    dip = np.full(60, 40.0)
    dip[27:34] = 10.0
    found = solve(plain(columns), dip)
    assert found.coefficients[0] == 0.0
    assert not found.free[0]
    assert np.all(found.covariance[0] == 0.0)


def test_covariance_is_the_inverse_also_of_badly_scaled_information():
    rng = np.random.default_rng(4)
    a = rng.normal(size=(30, 5)) * np.array([1e-6, 1.0, 1e6, 1e3, 1e-3])
    gram = a.T @ a
    scale = np.sqrt(np.diag(gram))
    product = covariance_of(gram) @ gram * scale[:, None] / scale[None, :]
    assert np.allclose(product, np.eye(5), atol=1e-6)


def test_covariance_of_a_singular_information_is_finite():
    assert np.all(np.isfinite(covariance_of(np.ones((3, 3)))))
