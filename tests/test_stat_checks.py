"""The statistical helpers of the tests on series whose errors are known exactly."""

import numpy as np
import pytest
import stat_checks as sc
import targets
from scipy import stats

FALSE_ALARM = 1e-6
REPLICATES = 300


def autoregression(rho, chains, n, rng):
    """Stationary AR(1) with unit variance, shape (chains, n)."""
    x = np.empty((chains, n))
    x[:, 0] = rng.standard_normal(chains)
    noise = np.sqrt(1.0 - rho**2) * rng.standard_normal((chains, n))
    for t in range(1, n):
        x[:, t] = rho * x[:, t - 1] + noise[:, t]
    return x


def exact_variance(rho, n):
    """Variance of the mean of n draws of that AR(1) (textbook)."""
    k = np.arange(1, n)
    return (n + 2.0 * ((n - k) * rho**k).sum()) / n**2


def test_exact_variance_formula():
    # n var(mean) at rho = 0.9 for n = 10, 100, 1000: textbook sums, evaluated to 18 digits
    for n, expected in ((10, 7.27621192180000000), (100, 17.2000478105179977), (1000, 18.82)):
        assert n * exact_variance(0.9, n) == pytest.approx(expected, rel=1e-13)


@pytest.fixture(scope="module")
def replicates():
    return autoregression(0.9, REPLICATES * 4, 2000, np.random.default_rng(19)).reshape(REPLICATES, 4, 2000)


def test_batch_means_have_their_exact_expectation(replicates):
    batch, n, chains = 40, 2000, 4
    found = np.array([sc.batch_means_error(x, batch)[0] ** 2 for x in replicates])
    count = n // batch * chains
    # E sum of squares about the common mean = count var(batch mean) - count var(mean of all).
    expected = (exact_variance(0.9, batch) - exact_variance(0.9, n) / chains) * count / (count - 1)
    expected *= batch / (n * chains)
    sc.assert_all([sc.compare_independent_mean(found, expected)], FALSE_ALARM)


def test_geyer_error_is_near_the_exact_error(replicates):
    found = np.array([sc.geyer_error(x) ** 2 for x in replicates])
    exact = exact_variance(0.9, 2000) / 4
    # The monotone sequence keeps a little positive noise of the tail and loses what it cuts off: both small here.
    assert found.mean() == pytest.approx(exact, rel=0.05)
    assert sc.effective_draws(replicates[0]) == pytest.approx(8000 / 19.0, rel=0.5)


def test_geyer_error_sees_chains_that_disagree():
    x = np.random.default_rng(4).standard_normal((4, 1000))
    stuck = x + np.array([[-3.0], [3.0], [-3.0], [3.0]])
    assert sc.geyer_error(stuck) > 20.0 * sc.geyer_error(x)


def test_autocovariance_of_one_to_six():
    # Exact rational arithmetic, divisor n.
    found = sc.autocovariance(np.arange(1.0, 7.0))
    np.testing.assert_allclose(found, [35 / 12, 35 / 24, 1 / 6, -19 / 24, -5 / 4, -25 / 24], rtol=0, atol=1e-14)


def test_false_alarms_of_dependent_comparisons_stay_near_their_rate(replicates):
    """At a rate of 5% each, 300 comparisons alarm 15 times on average; 40 or more has probability below 1e-7."""
    for compare in (
        lambda x: sc.compare_mean(x, 0.0),
        lambda x: sc.compare_sd(x, 0.0, 1.0),
        lambda x: sc.compare_quantile(x, float(stats.norm.ppf(0.25)), 0.25),
    ):
        alarms = sum(abs(compare(x).z) > sc.z_limit(1, 0.05) for x in replicates)
        assert 1 <= alarms < 40
    assert stats.binom.sf(39, REPLICATES, 0.05) < 1e-7


def test_a_wrong_mean_is_caught_and_named(replicates):
    x = replicates[0]
    shift = 8.0 * np.sqrt(exact_variance(0.9, 2000) / 4)
    good, bad = sc.compare_mean(x, 0.0), sc.compare_mean(x + shift, 0.0, what="third coordinate")
    sc.assert_all([good], FALSE_ALARM)
    with pytest.raises(AssertionError, match=r"1 of 2 comparisons.*\n.*third coordinate"):
        sc.assert_all([good, bad], FALSE_ALARM)
    with pytest.raises(AssertionError, match="1 of 1"):
        sc.assert_all([sc.compare_mean(np.full((2, 50), np.nan), 0.0)], FALSE_ALARM)
    with pytest.raises(AssertionError, match="nothing to compare"):
        sc.assert_all([], FALSE_ALARM)


def test_constant_draws_have_no_error():
    assert sc.compare_mean(np.full((2, 100), 2.5), 2.5).z == 0.0
    assert np.isinf(sc.compare_mean(np.full((2, 100), 2.5), 2.4).z)


def test_errors_of_the_reference_widen_the_comparison():
    x = np.random.default_rng(8).standard_normal((4, 1000))
    assert sc.compare_mean(x, 0.0, expected_error=1.0).error == pytest.approx(1.0, abs=1e-3)


def test_bonferroni_limit():
    assert sc.z_limit(1, 0.05) == pytest.approx(1.959963984540054, abs=1e-12)
    assert sc.z_limit(10, 0.05) == pytest.approx(stats.norm.isf(0.0025), abs=1e-12)


def test_kolmogorov_accepts_the_law_and_rejects_a_shift():
    x = np.random.default_rng(15).standard_normal(20_000)
    sc.assert_laws({"normal": (x, stats.norm.cdf)}, FALSE_ALARM)
    with pytest.raises(AssertionError, match="shifted: p = "):
        sc.assert_laws({"normal": (x, stats.norm.cdf), "shifted": (x + 0.05, stats.norm.cdf)}, FALSE_ALARM)


def test_uniform_ranks():
    rng = np.random.default_rng(16)
    assert sc.uniform_rank_p(rng.integers(0, 100, 4000), 100, 20) > FALSE_ALARM
    assert sc.uniform_rank_p(rng.binomial(99, 0.5, 4000), 100, 20) < FALSE_ALARM
    with pytest.raises(ValueError, match="7 bins do not divide 100 levels"):
        sc.uniform_rank_p([1, 2], 100, 7)
    with pytest.raises(ValueError, match="Ranks run from 0 to 99"):
        sc.uniform_rank_p([1, 100], 100, 20)


def test_wasserstein_of_a_shift_and_of_a_stretch():
    points = 4096
    x = stats.norm.ppf((np.arange(points) + 0.5) / points)
    shuffled = np.random.default_rng(17).permutation(x)
    assert sc.wasserstein(shuffled, stats.norm.ppf) == 0.0
    assert sc.wasserstein(shuffled + 0.3, stats.norm.ppf) == pytest.approx(0.3, abs=1e-12)
    # E|Z| = sqrt(2/pi); the midpoint rule loses 1e-4 of it in the tails.
    assert sc.wasserstein(2.0 * shuffled, stats.norm.ppf) == pytest.approx(np.sqrt(2.0 / np.pi), rel=2e-4)


def test_a_known_marginal_is_compared_in_mean_sd_and_quantiles():
    target = targets.winding_ridge()
    draws = target.exact_draws(8000, np.random.default_rng(18)).reshape(4, 2000, 2)
    family = [c for name in ("x1", "x2") for c in sc.compare_marginal(draws, target.marginals[name], name)]
    assert len(family) == 2 * (2 + 5)
    sc.assert_all(family, FALSE_ALARM)
    with pytest.raises(AssertionError, match="x2 sd: "):
        sc.assert_all(sc.compare_marginal(1.2 * draws, target.marginals["x2"], "x2"), FALSE_ALARM)


def test_shapes_are_checked():
    with pytest.raises(ValueError, match=r"\(chains, draws\)"):
        sc.geyer_error(np.zeros((2, 3, 4)))
    with pytest.raises(ValueError, match="only 1 batch"):
        sc.batch_means_error(np.zeros((1, 5)), 4)
