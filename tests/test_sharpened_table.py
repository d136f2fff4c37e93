"""How sharpened estimates show in the judgement: marks, worth, raw numbers on demand, draws that are still needed."""

import json

import numpy as np
import pytest
import sharpened_runs
import targets
from scipy.signal import lfilter

import fellwalk as fw
from fellwalk import table
from fellwalk.judge import judge
from fellwalk.sharpen import CANDIDATES


@pytest.fixture(scope="module")
def pima() -> fw.Result:
    return sharpened_runs.draw("Pima", 11)


def test_the_table_marks_what_is_sharpened(pima):
    j = pima.judgement
    assert set(j.by["estimate"]) <= set(CANDIDATES)
    assert "none" not in j.by["estimate"]
    text = str(j)
    assert max(map(len, text.splitlines())) <= table.WIDTH
    rows = [line.split() for line in text.partition("Textbook")[0].splitlines() if line.startswith("x[")]
    assert len(rows) == 8
    assert all(row[1].endswith("*") for row in rows)
    assert "* sharpened by the gradients at the draws" in text
    assert "*" not in str(j.raw)
    assert j.raw.verdict is j.verdict
    np.testing.assert_array_equal(j.raw.estimate, judge(pima.draws).estimate)
    said = json.loads(json.dumps(j.to_dict()))
    assert said["parameters"][0]["by"]["estimate"] == j.by["estimate"][0]
    assert said["raw"][0]["estimate"] == j.raw.estimate[0]
    assert said["identities"] == {"checked": 360, "broken": 0, "why_not": ""}


def test_worth_is_of_the_sharpened_estimate(pima):
    j = pima.judgement
    np.testing.assert_allclose(j.worth, (j.spread / j.error) ** 2)
    assert j.worth.min() > 100 * j.raw.worth.max()


def test_exact_estimates_keep_the_table_narrow():
    target = targets.equicorrelated_normal(5, 0.6, 2.385)
    density = fw.Density(target.density, 5)
    text = str(fw.run(density, [0.0] * 5, keep=500, seed=3, executor="here", progress="off").judgement)
    assert max(map(len, text.splitlines())) <= table.WIDTH
    assert "*" in text


def test_draws_needed_follow_the_sharpened_error():
    # r = 0.6: 4 x 300 draws are worth 300 for the mean where 400 are asked. Sharpened the mean is exact; credited with
    # twice its draws' worth it is enough, and only what is not sharpened so well still asks for more.
    rng = np.random.default_rng(5)
    x = lfilter([0.8], [1.0, -0.6], rng.standard_normal((4, 340, 2)), axis=1)[:, 40:]
    sharpened, plain = judge(x, gradients=-x).verdict, judge(x).verdict
    assert any("in its centre" in reason for reason in plain.reasons)
    assert any("for its mean" in reason for reason in plain.reasons)
    assert not any("in its centre" in reason or "for its mean" in reason for reason in sharpened.reasons)
    assert (sharpened.draws_needed or 300) < plain.draws_needed
    # Draws of which a chain holds less than half of what is asked do not pass on the strength of an exact mean.
    few = judge(x[:, :120], gradients=-x[:, :120]).verdict
    assert any("in its centre" in reason for reason in few.reasons)
