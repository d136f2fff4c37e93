"""The n-th call of the user's function fails, for every n: the chain is as it was, or the transition completes.

Every transition of a short run (its whole settling, with a window and the search of a step size, and some kept
draws) is attempted once with the fault at its first call, once at its second, and so on, and then without a fault.
The same chain object goes through all of it, so damage outside the exported state would show up later as well.
"""

import traceback
from dataclasses import dataclass
from functools import cache
from itertools import pairwise

import numpy as np
import pytest
from compiled_densities import Boom, Curved

import fellwalk as fw
from fellwalk import errors

SETTLE, KEEP = 36, 3
START = (0.731, 0.468, 1.117)

MOTIONS = {
    "leapfrog": fw.Leapfrog(),
    "leapfrog halved": fw.Leapfrog(halvings=2),
    **{
        f"{curvature} {scheme}{' halved' if halvings else ''}": fw.Lagrangian(
            bend=0.83, curvature=curvature, scheme=scheme, halvings=halvings
        )
        for curvature in ("surrogate", "difference", "product")
        for scheme in ("split", "semi-explicit")
        for halvings in (0, 2)
    },
}
PATHS = {
    "jittered": fw.Jittered(3),
    "no-u-turn": fw.NoUTurn(doublings=2),
    "no-u-turn metric": fw.NoUTurn(doublings=2, turn="metric"),
}
FORMS = ("pair", "in place", "compiled")


def make(form, motion, path, dimension=2):
    user = Curved(form, dimension)
    chain = fw.Chain(user.density, START[:dimension], motion=MOTIONS[motion], path=PATHS[path], seed=1123,
                     settle=SETTLE, step_size=1.1)
    return user, chain


@dataclass
class Run:
    """A run that never fails: states (one more than transitions), draws, calls, facts; walked: does the transition
    follow a path (settling begins with a climb, whose iterations have no step size)?"""

    states: list
    draws: list
    calls: list
    facts: list
    walked: list

    @property
    def total(self):
        return len(self.draws)

    def kept(self, k):
        return k >= self.total - KEEP


@cache
def undisturbed(form, motion, path):
    user, chain = make(form, motion, path)
    run = Run([chain.state], [], [], [], [])
    left = KEEP
    while left:
        left -= chain.phase == "keep"
        before = user.plan.calls
        block = chain.block(1)
        assert block.error is None
        run.walked.append(bool(block.facts["step_size"][0] > 0.0))
        run.states.append(chain.state)
        run.draws.append(block.draws[0])
        run.facts.append(block.facts[0])
        run.calls.append(user.plan.calls - before)
    assert chain.phase == "keep"
    assert chain.counts["transitions"] == run.total == SETTLE + KEEP
    climbed = run.walked.index(True)
    assert 0 < climbed <= SETTLE // 2  # of a fixed plan at most half
    assert all(run.walked[climbed:])
    return run


def attempt(chain):
    """The exception that one transition ended with, as a caller of block or advance gets it."""
    if chain.phase == "settle":
        return chain.block(1).error
    try:
        chain.advance(1)
    except BaseException as error:
        return error
    return None


def faults_everywhere(form, motion, path, act, check):
    """`check(user, error)` after each fault; states compared before, between and after."""
    run = undisturbed(form, motion, path)
    user, chain = make(form, motion, path)
    tried = 0
    for (before, after), draw, count in zip(pairwise(run.states), run.draws, run.calls, strict=True):
        for n in range(1, count + 1):
            user.fail(n, act)
            error = attempt(chain)
            assert user.failed, "the abandoned attempts must not change which calls come"
            check(user, error)
            del error
            assert chain.state == before
            tried += 1
        user.fail(0, act)
        block = chain.block(1)
        assert block.error is None
        np.testing.assert_array_equal(block.draws[0], draw)
        assert chain.state == after
    assert tried == sum(run.calls)


@pytest.mark.parametrize("path", PATHS)
@pytest.mark.parametrize("motion", MOTIONS)
@pytest.mark.parametrize("form", ["pair", "in place"])
def test_an_exception_undoes_the_transition_and_comes_out_as_it_is(form, motion, path):
    def check(user, error):
        assert error is user.error is not None
        codes = {frame.f_code for frame, _ in traceback.walk_tb(error.__traceback__)}
        assert codes & {Curved.pair.__code__, Curved.in_place.__code__, Curved.product.__code__}
        last = list(traceback.walk_tb(error.__traceback__))[-1][0]
        assert last.f_code is Curved._act.__code__

    faults_everywhere(form, motion, path, "raise", check)


@pytest.mark.parametrize("kind", [KeyboardInterrupt, SystemExit, GeneratorExit, MemoryError, StopIteration])
def test_every_class_of_exception_comes_out_as_it_is(kind):
    user, chain = make("pair", "leapfrog", "no-u-turn")
    user.kind = kind
    before = chain.state
    user.fail(2, "raise")
    block = chain.block(5)
    assert block.error is user.error
    assert type(block.error) is kind
    assert len(block) == 0
    assert chain.state == before
    chain = fw.Chain(user.density, START[:2], seed=5, step_size=0.4)
    before = chain.state
    user.fail(2, "raise")
    with pytest.raises(kind) as caught:
        chain.advance(3)
    assert caught.value is user.error
    assert chain.state == before


@pytest.mark.parametrize("path", PATHS)
@pytest.mark.parametrize("motion", MOTIONS)
def test_a_negative_code_undoes_the_transition(motion, path):
    def check(user, error):
        assert type(error) is errors.CallbackStop

    faults_everywhere("compiled", motion, path, "raise", check)


@pytest.mark.parametrize("path", ["jittered", "no-u-turn"])
@pytest.mark.parametrize("motion", MOTIONS)
def test_results_that_were_not_written_undo_the_transition(motion, path):
    def check(user, error):
        assert type(error) is errors.NotWrittenError

    faults_everywhere("compiled", motion, path, "unwritten", check)


@pytest.mark.parametrize("motion", ["leapfrog", "surrogate split", "difference semi-explicit halved"])
def test_an_in_place_gradient_that_was_not_written_undoes_the_transition(motion):
    def check(user, error):
        assert type(error) is errors.NotWrittenError

    faults_everywhere("in place", motion, "no-u-turn", "unwritten", check)


@pytest.mark.parametrize("form", FORMS)
@pytest.mark.parametrize("motion", [name for name in MOTIONS if "product" not in name])
def test_plus_infinity_undoes_the_transition(form, motion):
    def check(user, error):
        assert type(error) is errors.InfiniteDensityError

    faults_everywhere(form, motion, "no-u-turn", "infinite", check)


def test_an_interrupt_between_any_two_calls_undoes_the_transition_in_hand():
    """Interrupted inside the n-th call, which itself ends well: the chain stops at the next call or transition."""
    run = undisturbed("pair", "leapfrog", "no-u-turn")
    user, _ = make("pair", "leapfrog", "no-u-turn")
    function = user.density.function
    state = {"left": 0}

    def interrupting(x):
        state["left"] -= 1
        if state["left"] == 0:
            chain.interrupt()
        return function(x)

    density = fw.Density(interrupting, 2)
    for n in range(1, sum(run.calls) + 1):
        chain = fw.Chain(density, START[:2], motion=MOTIONS["leapfrog"], path=PATHS["no-u-turn"], seed=1123,
                         settle=SETTLE, step_size=1.1)
        state["left"] = n
        done = 0
        block = None
        while done < run.total and not (block and block.error):
            block = chain.block(run.total - done)
            done += len(block)
        if done < run.total:
            assert type(block.error) is errors.Interrupted
        assert chain.state == run.states[done], f"call {n}, {done} transitions done"


# ---- what ends a path only ------------------------------------------------------------------------------------------
CODES = {"outside": {"compiled": 1, "pair": 2, "in place": 2}, "zero": 2, "nan": 3, "bad gradient": 4}
PRODUCT_BAD = 5


def code_of(act, form):
    code = CODES[act]
    return code[form] if isinstance(code, dict) else code


def single_failure(chain, block):
    assert block.error is None
    assert len(block) == 1
    assert np.isfinite(block.draws).all()
    assert np.isfinite(chain.log_density)
    failure = int(block.facts["failure"][0])
    index, codes, positions = block.failures
    assert list(index) == ([0] if failure else [])
    assert list(codes) == ([failure] if failure else [])
    assert positions.shape == (len(index), chain.density.dimension)
    return failure, positions[0] if failure else None


def ends_everywhere(form, motion, path, act, check):
    run = undisturbed(form, motion, path)
    user, chain = make(form, motion, path)
    for k, count in enumerate(run.calls):
        for n in range(1, count + 1):
            chain.state = run.states[k]
            user.fail(n, act)
            block = chain.block(1)
            assert user.failed
            assert chain.counts["transitions"] == k + 1
            failure, position = single_failure(chain, block)
            check(run, k, n, failure, position, user)


@pytest.mark.parametrize("act", CODES)
@pytest.mark.parametrize("path", PATHS)
@pytest.mark.parametrize("motion", ["leapfrog", "surrogate split", "surrogate semi-explicit"])
@pytest.mark.parametrize("form", FORMS)
def test_a_failed_step_ends_the_path_and_is_counted_where_it_happened(form, motion, path, act):
    """One gradient a step here, so gradients - steps are the calls that look for a step size, before the path (one
    more where the undisturbed path ended at a pole, which costs a step and no call)."""

    def check(run, k, n, failure, position, user):
        facts = run.facts[k]
        if not run.walked[k]:
            assert failure == 0  # a trial of the climb is no step of a path: a shorter one follows
            return
        if n <= facts["gradients"] - facts["steps"] + (facts["failure"] != 0):
            return  # the path that follows, with another step size, may end in any way
        assert failure == code_of(act, form)
        np.testing.assert_array_equal(position, user.at)

    ends_everywhere(form, motion, path, act, check)


@pytest.mark.parametrize("act", CODES)
@pytest.mark.parametrize("scheme", ["split", "semi-explicit"])
@pytest.mark.parametrize("curvature", ["difference", "product"])
@pytest.mark.parametrize("form", ["pair", "compiled"])
def test_a_failed_curvature_ends_the_path_and_is_counted(form, curvature, scheme, act):
    """Kept draws, where every call belongs to the path (settling transitions need only complete). The point
    beside a difference is reported as the point itself."""
    seen = set()

    def check(run, k, n, failure, position, user):
        if not run.kept(k):
            return
        seen.add(failure)
        if failure == code_of(act, form):
            np.testing.assert_array_equal(position, user.at)
        else:
            assert failure == PRODUCT_BAD
            # a difference reaches sqrt(macheps) = 1.5e-8 base units, and these are units of order 1
            np.testing.assert_allclose(position, user.at, rtol=0.0, atol=1e-6 if curvature == "difference" else 0.0)

    for path in PATHS:
        ends_everywhere(form, f"{curvature} {scheme}", path, act, check)
    assert seen == {code_of(act, form), PRODUCT_BAD}


@pytest.mark.parametrize("act", CODES)
@pytest.mark.parametrize("motion", [name for name in MOTIONS if "halved" in name])
def test_with_halving_a_failed_call_is_tried_finer_or_counted(motion, act):
    """A failed micro step counts as too long: the step is halved (0), with no halving left (10), or its way back would
    differ (11). At the start of a path nothing can be halved: the curvature is missing (5)."""
    seen = set()
    for path in PATHS:

        def check(run, k, n, failure, position, user):
            if run.kept(k):
                assert failure in (0, PRODUCT_BAD, 10, 11)
            seen.add(failure)

        ends_everywhere("compiled", motion, path, act, check)
    assert 11 in seen


@pytest.mark.parametrize("form", FORMS)
@pytest.mark.parametrize("motion", ["leapfrog", "leapfrog halved"])
def test_a_density_cut_off_is_counted_with_positions_beyond_the_cut(form, motion):
    """x0 < 1 only, by a fault that is a function of the position: codes, and positions outside the support."""
    inner = Curved("pair" if form == "compiled" else form)

    def pair(x):
        return (-np.inf, None) if x[0] >= 1.0 else inner.pair(x)

    def in_place(x, gradient):
        return -np.inf if x[0] >= 1.0 else inner.in_place(x, gradient)

    density = fw.Density(in_place if form == "in place" else pair, 2, in_place=form == "in place")
    chain = fw.Chain(density, START[:2], motion=MOTIONS[motion], path=fw.Jittered(5), seed=4, step_size=0.9)
    block = chain.advance(300)
    assert block.draws[:, 0].max() < 1.0
    failed = block.facts["failure"]
    assert np.count_nonzero(failed) > 30
    assert set(failed.tolist()) <= ({0, 2} if motion == "leapfrog" else {0, 10, 11})
    index, code, position = block.failures
    assert len(index) == 32  # positions of the first failures; the facts count all
    np.testing.assert_array_equal(index, np.flatnonzero(failed)[:32])
    np.testing.assert_array_equal(code, failed[index])
    if motion == "leapfrog":
        assert position[:, 0].min() >= 1.0


def test_the_exception_is_not_kept_by_the_chain():
    user, chain = make("pair", "leapfrog", "jittered")
    user.fail(1, "raise")
    assert isinstance(chain.block(1).error, Boom)
    user.fail(0, "raise")
    assert chain.block(3).error is None
