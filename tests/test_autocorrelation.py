"""Autocovariances, effective sizes and R-hat against closed forms, exact worked examples and plain loops.

The values and their sources are in tests/checks/judge_values.json.
"""

import json
from fractions import Fraction
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import stats
from scipy.signal import lfilter

from fellwalk import autocorrelation as ac

ENTRIES = {
    entry["id"]: entry["values"]
    for entry in json.loads((Path(__file__).parent / "checks" / "judge_values.json").read_text())["entries"]
}
IACT, RHAT = ENTRIES["iact"], ENTRIES["rhat"]
EXAMPLE = np.array(RHAT["rhat_example"]["chains"], dtype=float)
# A few roundings of numbers of order one.
ROUNDING = 1e-14


def values(key_start: str) -> dict[str, float]:
    (table,) = (table for key, table in IACT.items() if key.startswith(key_start))
    return {key: float(value) for key, value in table.items()}


def test_autocovariance_of_one_to_six_is_exact():
    covariance = ac.autocovariance(np.arange(1.0, 7.0))
    expected = np.array([float(Fraction(value)) for value in IACT["biased_autocov_of_1..6 (divide by N)"]])
    np.testing.assert_allclose(covariance, expected, rtol=0, atol=ROUNDING)
    correlation = [float(Fraction(value)) for value in IACT["autocorr_of_1..6"]]
    np.testing.assert_allclose(covariance / covariance[0], correlation, rtol=0, atol=ROUNDING)


@given(st.lists(st.floats(-100, 100), min_size=1, max_size=40))
def test_autocovariance_equals_the_direct_sum(numbers):
    x = np.array(numbers)
    n = len(x)
    centred = x - x.mean()
    direct = [np.dot(centred[: n - lag], centred[lag:]) / n for lag in range(n)]
    np.testing.assert_allclose(ac.autocovariance(x), direct, rtol=0, atol=1e-13 * max(1.0, float(np.max(x**2))))


def test_r_hat_of_the_worked_examples():
    assert ac.potential_scale_reduction(EXAMPLE) == pytest.approx(float(RHAT["rhat_example"]["rhat"]), rel=ROUNDING)
    halves = ac.split(EXAMPLE)
    assert ac.potential_scale_reduction(halves) == pytest.approx(
        float(RHAT["split_rhat_example"]["rhat"]), rel=ROUNDING
    )


def test_rank_normalised_and_folded_r_hat_of_the_worked_example():
    expected = RHAT["rank_split_rhat_example"]
    # The example lists the first halves of all chains, then the second halves.
    split = ac.split(EXAMPLE)
    halves = np.concatenate([split[0::2], split[1::2]])
    ranks = [float(Fraction(rank)) for rank in expected["ranks"]]
    np.testing.assert_array_equal(ac.average_ranks(halves.reshape(-1)), ranks)
    scores = ac.rank_normalise(halves)
    np.testing.assert_allclose(scores.reshape(-1), [float(z) for z in expected["z"]], rtol=1e-14)
    assert ac.potential_scale_reduction(scores) == pytest.approx(float(expected["rhat_bulk"]), rel=ROUNDING)
    folded = ac.potential_scale_reduction(ac.rank_normalise(ac.fold(halves)))
    assert folded == pytest.approx(float(expected["rhat_tail_folded"]), rel=ROUNDING)


@given(st.lists(st.integers(-5, 5), min_size=1, max_size=60))
def test_average_ranks_equal_those_of_scipy(numbers):
    np.testing.assert_array_equal(ac.average_ranks(np.array(numbers)), stats.rankdata(numbers))


def filtered(ma: list[float], ar: list[float], seed: int, runs: int, n: int) -> np.ndarray:
    """(runs, 4, n) of a linear filter of white noise, the first 2000 left out so that no start shows."""
    noise = np.random.default_rng(seed).standard_normal((runs, 4, n + 2000))
    return lfilter(ma, ar, noise, axis=-1)[..., 2000:]


# Complex roots: no reversible chain behaves so, and Geyer's sequence, made for reversible ones, ends too early.
OSCILLATING = "1.2,-0.5"

LINEAR = (
    [(f"AR(1) {key}", [1.0], [1.0, -float(key)], time) for key, time in values("AR1_iact").items()]
    + [
        (f"AR(2) {key}", [1.0], [1.0, *(-float(part) for part in key.split(","))], time)
        for key, time in values("AR2_iact").items()
        if key != OSCILLATING
    ]
    + [(f"MA(1) {key}", [1.0, float(key)], [1.0], time) for key, time in values("MA1_iact").items()]
)


@pytest.mark.parametrize(("ma", "ar", "time"), [case[1:] for case in LINEAR], ids=[case[0] for case in LINEAR])
def test_integrated_time_of_linear_processes(ma, ar, time):
    # 12 runs of 4 chains, each chain at least 2000 and about 400 integrated times long; the cut-off is lifted. The mean
    # of 12 is held to 4.5 of its own standard errors, estimated from the 12 (Student t with 11 degrees of freedom, two-
    # sided chance 0.0009 a case, 1.1% over all 12), plus 3% for the bias of the initial monotone sequence, which counts
    # the noise of the last pairs only where it is positive, and of the estimated means, 1 / n for each lag summed.
    n = int(max(8000, 400 * time))
    x = filtered(ma, ar, seed=int(1000 * time), runs=12, n=n)
    estimates = 4 * n / ac.effective_size(ac.split(x), largest_gain=np.inf)
    margin = 4.5 * estimates.std(ddof=1) / np.sqrt(12) + 0.03 * max(time, 0.3)
    assert abs(estimates.mean() - time) < margin


def test_oscillating_process_errs_on_the_safe_side_by_the_known_amount():
    time = values("AR2_iact")[OSCILLATING]
    rho = [1.0, 0.8]
    while len(rho) < 4:
        rho.append(1.2 * rho[-1] - 0.5 * rho[-2])
    # The pairs are 1.8, 0.612, -0.18: the sum ends before the third.
    ended = -1 + 2 * sum(rho)
    assert ended > time
    x = filtered([1.0], [1.0, -1.2, 0.5], seed=3, runs=12, n=8000)
    estimates = 4 * 8000 / ac.effective_size(ac.split(x))
    assert abs(estimates.mean() - ended) < 4.5 * estimates.std(ddof=1) / np.sqrt(12) + 0.01 * ended


@pytest.mark.parametrize(("key", "time"), values("AR1_square_iact").items())
def test_integrated_time_of_squares(key, time):
    x = filtered([1.0], [1.0, -float(key)], seed=77, runs=12, n=8000)
    estimates = 4 * 8000 / ac.effective_size(ac.split(x**2), largest_gain=np.inf)
    # Same margin as for the linear processes; here the chance is 0.3% over the three cases.
    assert abs(estimates.mean() - time) < 4.5 * estimates.std(ddof=1) / np.sqrt(12) + 0.03 * time


@pytest.mark.parametrize(("key", "time"), values("AR1_indicator_below_median_iact").items())
def test_integrated_time_of_an_indicator(key, time):
    x = filtered([1.0], [1.0, -float(key)], seed=78, runs=12, n=8000)
    estimates = 4 * 8000 / ac.effective_size(ac.split((x <= 0).astype(float)), largest_gain=np.inf)
    assert abs(estimates.mean() - time) < 4.5 * estimates.std(ddof=1) / np.sqrt(12) + 0.03 * time


@pytest.mark.parametrize(("key", "expected"), values("AR1_exact_N_var_mean_over_sigma2").items())
def test_effective_size_foretells_the_variance_of_a_short_mean(key, expected):
    # Not the estimate but the closed form that it aims at: N var(mean) / sigma^2 from the biased sum over true lags.
    r, n = (float(part.split("=")[-1]) for part in key.split(","))
    lags = np.arange(1, int(n))
    assert 1 + 2 * np.sum((1 - lags / n) * r**lags) == pytest.approx(expected, rel=1e-12)


def plain_effective_size(x: np.ndarray) -> float:
    """The definition in Vehtari et al. (2021) with Geyer's (1992) initial monotone sequence, in loops over lags."""
    m, n = x.shape
    within = np.mean([np.var(chain, ddof=1) for chain in x])
    pooled = (n - 1) / n * within + np.var(x.mean(axis=1), ddof=1) if m > 1 else within
    rho = []
    for lag in range(n):
        products = [np.sum((c - c.mean())[: n - lag] * (c - c.mean())[lag:]) / (n - 1) for c in x]
        rho.append(1 - (within - np.mean(products)) / pooled)
    time, least = -1.0, np.inf
    for k in range(n // 2):
        pair = rho[2 * k] + rho[2 * k + 1]
        if pair <= 0:
            break
        least = min(least, pair)
        time += 2 * least
    return m * n / max(time, 1 / ac.LARGEST_GAIN)


@settings(max_examples=200, deadline=None)
@given(st.integers(0, 10**6), st.integers(1, 4), st.integers(4, 60), st.floats(0, 0.99))
def test_effective_size_equals_its_definition(seed, chains, n, r):
    x = lfilter([1.0], [1.0, -r], np.random.default_rng(seed).standard_normal((chains, n)), axis=-1)
    expected = plain_effective_size(x)
    # The time is a sum of up to n terms of order one, each good to 1e-15 or so.
    assert chains * n / ac.effective_size(x) == pytest.approx(chains * n / expected, abs=1e-11)


def test_effective_size_is_cut_off_for_opposed_draws():
    x = filtered([1.0], [1.0, 0.95], seed=5, runs=1, n=500)
    assert ac.effective_size(x)[0] == ac.LARGEST_GAIN * 4 * 500


def test_frozen_and_constant_chains_have_exact_limits():
    x = np.full((4, 10), 0.1)
    assert np.isnan(ac.effective_size(x))
    assert np.isnan(ac.potential_scale_reduction(x))
    x[1] = 0.7
    assert np.isinf(ac.potential_scale_reduction(x))
    # Every lag correlates fully: 2n - 1 draws of each chain count as one.
    assert ac.effective_size(x) == pytest.approx(4 * 10 / 19, rel=ROUNDING)


def test_split_leaves_out_the_middle_of_an_odd_number():
    np.testing.assert_array_equal(ac.split(np.arange(10.0).reshape(2, 5)), [[0, 1], [3, 4], [5, 6], [8, 9]])


def test_quantile_error_of_independent_uniform_draws():
    # The k-th of s ordered uniforms is Beta(k, s + 1 - k), of known standard deviation; the mean estimate over 400 sets
    # of 1000 spreads by 1.3% at most (25% a set), so 4% is three of those. Both ends are rounded outwards to a draw,
    # which adds less than one step of 1 / 1000 in all.
    x = np.sort(np.random.default_rng(9).random((400, 1000)), axis=-1)
    for level in (0.05, 0.5, 0.95):
        exact = stats.beta(1000 * level, 1001 - 1000 * level).std()
        estimate = ac.quantile_error(x, level, np.full(400, 1000.0)).mean()
        assert 0.96 * exact < estimate < 1.04 * exact + 1 / 1000


def test_longest_stand():
    x = np.array([[1, 1, 2, 2, 2, 1], [0, 1, 2, 3, 4, 5], [7, 7, 7, 7, 7, 7]], dtype=float)
    assert ac.longest_stand(x).tolist() == [3, 1, 6]
