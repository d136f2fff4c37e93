"""Do intervals of sharpened estimates cover, and are they never worse? A part of what `benchmarks/sharpened.py`
measures with 400 runs of each target; here so few runs that only gross faults would show, with limits from the
binomial law.
"""

import numpy as np
import pytest
import sharpened_runs
from scipy import stats
from sharpened_runs import study

RUNS = {"Norris": 40, "mcmc01": 24, "eight schools": 16, "Pima": 16, "Australian": 10, "Student t5": 24, "ring": 30,
        "Rosenbrock": 16, "funnel": 12}
FALSE_ALARM = 1e-4  # of one target, all its estimates together, if every interval covers with the least rate allowed
LEAST_RATE = 0.92
# Errors that were called unreliable in more than half of the runs are not held to their word.
IN_DOUBT = 0.5


@pytest.mark.parametrize("name", list(RUNS))
def test_intervals_cover_and_nothing_gets_worse(name, capsys):
    runs = RUNS[name]
    s = study(name, runs, seed=7000)
    there = np.isfinite(s.true) & (s.in_doubt.mean(axis=0) <= IN_DOUBT)
    least = stats.binom.ppf(FALSE_ALARM / (2 * there.sum()), runs, LEAST_RATE)
    sharp, raw = s.covered(True), s.covered(False)
    with capsys.disabled():
        print(f"\n{name}: {runs} runs, sharpened cover {100 * sharp[there].mean() / runs:.1f}% on average, plain "
              f"{100 * raw[there].mean() / runs:.1f}%; at least {least:.0f} of {runs} each: {sharp[there].min()}, "
              f"{raw[there].min()}")
    assert sharp[there].min() >= least
    assert raw[there].min() >= least
    assert s.broken <= stats.binom.isf(1e-4, runs, 0.01)
    # Squared errors at most 1.05 times the plain ones: the mean difference is not above that by four of its own errors.
    worse = s.squared(True) - 1.05 * s.squared(False)
    bar = worse.std(axis=0, ddof=1) / np.sqrt(runs)
    assert (worse.mean(axis=0) <= 4 * bar)[there].all()


def test_sharpened_errors_are_not_larger_than_plain_ones():
    result = sharpened_runs.draw("Rosenbrock", 3)
    e = result.estimate(quantiles=[0.05, 0.95])
    assert (e.error <= e.raw.error).all()
    assert (e.spread_error <= e.raw.spread_error).all()
