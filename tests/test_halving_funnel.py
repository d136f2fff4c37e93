"""Halved steps reach the neck of Neal's funnel, at the price of the same number of gradients.

Measures and the check of the tail are those of benchmarks/halving.py. Seeds are fixed; the stated false-alarm rates say
how often other seeds would fail although nothing is wrong.
"""

import importlib.util
from functools import cache
from pathlib import Path

import numpy as np
import pytest
from scipy.signal import lfilter
from scipy.stats import binom

SOURCE = Path(__file__).resolve().parent.parent / "benchmarks" / "halving.py"
SPEC = importlib.util.spec_from_file_location("halving_benchmark", SOURCE)
halving = importlib.util.module_from_spec(SPEC)
SPEC.loader.exec_module(halving)

# Runs and gradients. With 100,000 gradients and d = 11 both chains still depend on chance too much for a few runs.
CASES = {2: (16, 100_000), 11: (8, 300_000)}


@cache
def runs(d, name):
    n, gradients = CASES[d]
    return np.array([halving.measured(d, name, seed, gradients) for seed in range(n)])


@pytest.mark.parametrize("d", CASES)
def test_halving_brings_the_axis_closer_to_its_law(d):
    """The mean distance is at most 0.6 of that without halving. If it is just that, other seeds fail in about 1% of
    cases: 2.33 standard errors of the difference, a normal approximation."""
    plain, halved = runs(d, "plain")[:, 0], runs(d, "halved")[:, 0]
    over = halved.mean() - 0.6 * plain.mean()
    error = np.sqrt((halved.var(ddof=1) + 0.36 * plain.var(ddof=1)) / len(plain))
    print(f"d = {d}: {halved.mean():.3f} / {plain.mean():.3f}, {over / error:.1f} standard errors over 0.6")
    assert over < 2.33 * error
    assert halved.mean() < plain.mean()


@pytest.mark.parametrize("d", CASES)
def test_only_halved_runs_have_the_lower_tail(d):
    """If 90% of halved and 20% of plain runs pass the check of the tail, other seeds fail in at most 1% of cases."""
    n = CASES[d][0]
    plain, halved = runs(d, "plain")[:, 1].sum(), runs(d, "halved")[:, 1].sum()
    print(f"d = {d}: {halved:.0f} halved and {plain:.0f} plain runs of {n} pass")
    assert binom.cdf(halved, n, 0.9) > 0.01
    assert binom.sf(plain - 1, n, 0.2) > 0.01


@pytest.mark.parametrize("relaxation", [3, 40])
def test_exact_chains_pass_the_check_of_the_tail(relaxation):
    """First-order autoregressions with the exact law, 60 relaxation times long: failures are binomial with the rate of
    the check, doubled for the length being estimated; other random numbers fail here in at most 0.1% of cases."""
    rng, r, n = np.random.default_rng(relaxation), np.exp(-1 / relaxation), 60 * relaxation
    failed = 0
    for _ in range(200):
        noise = 3.0 * rng.standard_normal(n)
        noise[1:] *= np.sqrt(1 - r * r)
        failed += not halving.tail_passes(lfilter([1.0], [1.0, -r], noise))
    print(f"{failed} of 200 fail")
    assert binom.sf(failed - 1, 200, 2 * halving.FALSE_ALARM) > 0.001


def test_chains_without_the_tail_fail_the_check():
    r, n = np.exp(-1 / 20), 1200
    for seed in range(20):
        noise = 3.0 * np.random.default_rng(seed).standard_normal(n)
        noise[1:] *= np.sqrt(1 - r * r)
        assert not halving.tail_passes(np.abs(lfilter([1.0], [1.0, -r], noise) + 3.0) - 3.0)
