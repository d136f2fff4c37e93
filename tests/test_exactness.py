"""Every combination the core offers leaves its target as it found it, and planted errors are seen.

20,000 independent starts from a target's exact law make ten transitions each, with fixed step, bend and base metric.
The ends are independent draws of the same law if the kernel is exact, so plain tests apply: Kolmogorov-Smirnov and two
moments of normal scores, for several summaries. One p value below `limit()` is a failure; all of them together give a
false alarm at most once in 1000 choices of the random numbers, which are fixed.
"""

from itertools import product

import pytest
from exactness import build
from exactness.combinations import (
    STARTS,
    Combination,
    combinations,
    limit,
    motions,
    p_values,
    paths,
    result,
    starts,
    table,
)
from exactness.known import known
from exactness.planted import ORBIT, PLANTED
from exactness.settled import settle_and_keep

COMBINATIONS = combinations()


@pytest.mark.parametrize("c", COMBINATIONS, ids=str)
def test_ends_have_the_law_of_the_starts(c):
    found = result(c)
    bad = {name: p for name, p in found.p.items() if not p >= limit()}
    assert not bad, f"{c}: p values below {limit():.2g}: {bad}\n{table([c])}"
    # A chain that stays put, or never rejects, would pass and show nothing.
    assert 0.2 < found.acceptance < 0.97
    assert found.moved > 0.8
    assert found.steps > 1.5
    if c.target == "edge":
        assert found.failures > 0.2, "paths have to meet the edge of the support"


def test_the_list_holds_every_product_of_choices():
    assert {name for name, _, _ in motions()} >= {"leapfrog", "lagrangian", "isokinetic"}
    assert {name for name, _ in paths()} >= {"jittered", "no-u-turn"}
    # Surrogate, differences and products, in two schemes; a turn test in two metrics.
    assert len([m for m in motions() if m[0] == "lagrangian"]) == 6
    assert len([p for p in paths() if p[0] == "no-u-turn"]) == 2
    assert len(COMBINATIONS) == len(set(COMBINATIONS)) == len(motions()) * len(paths()) * 2 * 3
    for motion in motions():
        for path in paths():
            kind = (*motion, *path)
            met = {c.target for c in COMBINATIONS if (c.motion, c.scheme, c.curvature, c.path, c.turn) == kind}
            assert met == set(known()), f"{motion} with {path} meets only {met}"


def test_no_combination_was_left_out():
    # Results are remembered, so this costs nothing after the tests above and runs whatever they did not.
    assert len([result(c) for c in COMBINATIONS]) == len(COMBINATIONS)


def test_halvings_were_used():
    plain = {(c.motion, c.scheme, c.curvature): result(c).gradients for c in COMBINATIONS if c.halvings == 0}
    for c in COMBINATIONS:
        if c.halvings:
            # Trials and reverse rules are counted, so a halved step costs more gradients than a plain one.
            assert result(c).gradients > 1.05 * plain[c.motion, c.scheme, c.curvature], str(c)


@pytest.mark.parametrize("name", known())
def test_the_exact_draws_have_the_law(name):
    c = next(c for c in COMBINATIONS if c.target == name)
    assert starts(name).shape == (STARTS, known()[name].target.dimension)
    assert min(p_values(c, starts(name)).values()) >= limit()


@pytest.mark.parametrize("planted", PLANTED, ids=lambda planted: planted.what)
def test_planted_errors_are_seen(planted):
    assert planted.seen
    for c in planted.seen:
        right, wrong = result(c), result(c, planted.mutation)
        print(f"{planted.what}: {c}: least p {right.least:.2g} -> {wrong.least:.2g}")
        assert right.least >= limit(), f"{c} fails without any error planted"
        assert wrong.least < limit(), f"{c} does not show: {planted.what} (least p {wrong.least:.2g})"


def test_an_error_that_cannot_be_planted_is_a_failure():
    with pytest.raises(AssertionError, match="0 places to plant"):
        build.harness(build.Mutation(ORBIT, "no such line in the core", ""))
    with pytest.raises(AssertionError, match="places to plant this error in, not 1"):
        build.harness(build.Mutation(ORBIT, "return", "return "))


KEEPING = [
    Combination(*motion, *path, halvings, 2, "student")
    for motion, path, halvings in product(motions(), paths(), (0, 2))
]


@pytest.mark.parametrize("c", KEEPING, ids=str)
def test_keeping_changes_nothing_that_settling_has_learned(c):
    found = settle_and_keep(c, settle=150, keep=150)
    assert found.status == 0
    assert found.step_size > 0.0
    # The point moves, and the counters; with halvings there is one more counter, which the summary does not show.
    assert found.of_point >= known()[c.target].target.dimension
    assert found.others <= (1 if c.halvings else 0)


def test_adapting_while_keeping_is_seen():
    c = Combination("leapfrog", 0, 0, "jittered", 0, 0, 0, "student")
    still_learning = build.Mutation("chain.c", "else if (settling) fw_learn_update(", "else fw_learn_update(")
    assert settle_and_keep(c, 150, 150).status == 0
    wrong = settle_and_keep(c, 150, 150, still_learning)
    assert wrong.status != 0 or wrong.others > 0
