"""What failed steps say about draws. All draws are made here; nothing runs a chain."""

import numpy as np
import pytest

from fellwalk.facts import FACTS
from fellwalk.judge import judge
from fellwalk.motions import MAX_HALVINGS
from fellwalk.verdict import FIT, NOT_TRUSTED

CHAINS, DRAWS = 4, 1000


def draws(seed: int) -> np.ndarray:
    """Independent standard normal draws of three parameters."""
    return np.random.default_rng(seed).standard_normal((CHAINS, DRAWS, 3))


def facts(where: np.ndarray, code: int) -> np.ndarray:
    """Facts of transitions of which those at `where` (flat) met a failed step."""
    made = np.zeros(CHAINS * DRAWS, FACTS)
    made["energy"] = np.random.default_rng(1).standard_normal(len(made))
    made["failure"][where] = code
    return made.reshape(CHAINS, DRAWS)


def test_failures_at_one_end_of_a_parameter_are_named():
    x = draws(2)
    lowest = np.argsort(x[:, :, 1].ravel())[:12]
    verdict = judge(x, ["a", "b", "c"], facts=facts(lowest, 9)).verdict
    assert verdict.kind == NOT_TRUSTED
    assert any("where b is smallest" in reason for reason in verdict.reasons)
    highest = np.argsort(x[:, :, 2].ravel())[-12:]
    verdict = judge(x, ["a", "b", "c"], facts=facts(highest, 9)).verdict
    assert any("where c is largest" in reason for reason in verdict.reasons)


@pytest.mark.parametrize("seed", range(20))
def test_scattered_failures_are_not_held_against_the_draws(seed):
    # 30 failures at random places; a false alarm has probability below 2 C(30, 15) 0.02^15 * 3 parameters = 3e-17
    where = np.random.default_rng(seed).choice(CHAINS * DRAWS, 30, replace=False)
    assert judge(draws(seed + 100), facts=facts(where, 9)).verdict.kind == FIT


@pytest.mark.parametrize("code", [1, 2, 11])
def test_harmless_codes_may_stand_anywhere(code):
    x = draws(3)
    lowest = np.argsort(x[:, :, 0].ravel())[:200]
    assert judge(x, facts=facts(lowest, code)).verdict.kind == FIT


def test_too_few_failures_say_nothing_of_a_place():
    x = draws(4)
    lowest = np.argsort(x[:, :, 0].ravel())[:7]
    assert judge(x, facts=facts(lowest, 9)).verdict.kind == FIT


@pytest.mark.parametrize(
    ("settings", "rate", "halved"),
    [
        (None, "acceptance=0.95", "halvings=5"),
        ({"acceptance": 0.8, "motion": {"name": "leapfrog", "halvings": 0}}, "acceptance=0.95", "halvings=5"),
        ({"acceptance": 0.95, "motion": {"name": "leapfrog", "halvings": 6}}, "acceptance=0.975", "halvings=9"),
        ({"acceptance": 0.99, "motion": {"halvings": MAX_HALVINGS}}, "acceptance=0.995", ""),
    ],
)
def test_what_is_suggested_goes_further_than_the_run(settings, rate, halved):
    x = draws(2)
    lowest = np.argsort(x[:, :, 1].ravel())[:12]
    text = " ".join(judge(x, facts=facts(lowest, 9), settings=settings).verdict.reasons)
    assert f"smaller steps ({rate})" in text
    assert ("halved" in text, halved in text) == (bool(halved), True)
