"""What a run says when settling ends before a chain has come home.

The rule has no stated rate of false alarms; they are counted for series of known correlation, with fixed seeds.
"""

import re

import numpy as np
import pytest

import fellwalk as fw
from fellwalk.facts import FACTS
from fellwalk.settling import settling_remarks


def valley(x):
    """A long bent valley, from far up its arm."""
    a, b = x
    return -0.5 * (1 - a) ** 2 - 50 * (b - a * a) ** 2, np.array([(1 - a) + 200 * a * (b - a * a), -100 * (b - a * a)])


def pinned(x):
    """The sd of the first coordinate is a two-thousandth of the spacing of numbers at its mean."""
    z = np.array([(x[0] - 1e16) / 1e-3, x[1]])
    return -0.5 * float(z @ z), np.array([-z[0] / 1e-3, -z[1]])


def without_top(x):
    return float(x[0] - 0.5 * x[1] ** 2), np.array([1.0, -x[1]])


def normal(x):
    return -0.5 * float(x @ x), -x


def heading(f, start, **named):
    result = fw.run(fw.Density(f, 2), start, keep=20, chains=2, progress="off", executor="here", **named)
    return " ".join(result.heading().split())


def test_a_start_too_far_out_for_the_plan_is_named():
    """From there the valley is half a million sds long, and even the open plan does not see its end."""
    said = heading(valley, [1e3, 1e3], settle=150, seed=1)
    for chain in (1, 2):
        assert re.search(rf"When settling of chain {chain} ended, the log density still rose, by [\d.e+]+ within its "
                         r"last 75 transitions.* Tried: 150 transitions, [\d,]+ gradients, \d windows of scales, step "
                         r"sizes from [\d.e-]+ to [\d.]+\.", said)
    assert "the log density still rose" in heading(valley, [1e3, 1e3], settle="auto", seed=1)
    assert "When settling" not in heading(valley, [20.0, 20.0], settle="auto", seed=1)


@pytest.mark.parametrize("seed", range(1, 4))
def test_a_density_without_a_top_is_named(seed):
    assert "When settling" in heading(without_top, [0.0, 0.0], settle="auto", seed=seed)


@pytest.mark.parametrize("settle", ["auto", 300])
def test_a_coordinate_finer_than_its_numbers_is_named(settle):
    said = heading(pinned, [1e16 + 2, 0.0], settle=settle, seed=1)
    assert said.count("known more finely than its numbers are spaced") == 2


def facts(n, **columns):
    found = np.zeros(n, FACTS)
    found["acceptance"], found["step_size"] = 0.8, 0.5
    for name, values in columns.items():
        found[name] = values
    return found


def test_refused_steps_are_named():
    said = settling_remarks([facts(200, acceptance=0.05)], [{"step_size": 0.5, "windows": 0}], 0.8)
    assert ["steps were still refused (acceptance 0.05, asked for 0.8)" in line for line in said] == [True]


@pytest.mark.parametrize(("correlation", "sd"), [(0.0, 100.0), (0.9, 100.0), (0.99, 2.0)])
def test_steady_chains_are_left_alone(correlation, sd):
    """400 series of 150 values each. With a correlation of 0.99 150 values look like a trend, so only size tells."""
    rng = np.random.default_rng(5)
    for _ in range(400):
        noise = rng.standard_normal(300)
        for i in range(1, 300):
            noise[i] = correlation * noise[i - 1] + np.sqrt(1 - correlation**2) * noise[i]
        assert settling_remarks([facts(300, log_density=sd * noise)], [{"step_size": 0.5}], 0.8) == []


@pytest.mark.parametrize("settle", ["auto", 100, 20, 0])
def test_ordinary_runs_say_nothing(settle):
    named = {"step_size": 1.0} if settle == 0 else {}
    for seed in range(4):
        assert "When settling" not in heading(normal, [0.0, 0.0], settle=settle, seed=seed, **named)
