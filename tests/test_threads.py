"""Chains and threads: the same bits on any number, one thread a chain, no GIL in compiled calls, no memory left."""

import gc
import subprocess
import sys
import threading
import tracemalloc
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path

import numpy as np
import pytest
import targets
from compiled_densities import DENSITY_SIGNATURE, Curved, Plan, ctypes_function

import fellwalk as fw
from fellwalk import errors

START = (0.731, 0.468, 1.117)
MOTIONS = [fw.Leapfrog(halvings=2), fw.Lagrangian(), fw.Lagrangian(curvature="product", scheme="semi-explicit")]


def normal(x):
    return -0.5 * float(x @ x), -x


def in_thread(function):
    """(thread, list that receives what the function returned or raised)."""
    found = []

    def body():
        try:
            found.append(function())
        except BaseException as error:
            found.append(error)

    thread = threading.Thread(target=body, daemon=True)
    thread.start()
    return thread, found


@pytest.mark.parametrize("form", ["pair", "in place", "compiled"])
@pytest.mark.parametrize("motion", MOTIONS, ids=lambda m: f"{m.name}")
def test_one_and_two_threads_give_the_same_bits(form, motion):
    def one(seed):
        chain = fw.Chain(Curved(form, 3).density, START, motion=motion, seed=seed)
        chain.settle(90)
        return chain.advance(60).draws, chain.state

    expected = [one(seed) for seed in range(4)]
    with ThreadPoolExecutor(2) as pool:
        found = list(pool.map(one, range(4)))
    for (a, state_a), (b, state_b) in zip(expected, found, strict=True):
        np.testing.assert_array_equal(a, b)
        assert state_a == state_b


@pytest.mark.parametrize("in_place", [False, True])
def test_chains_in_two_threads_share_one_density(in_place):
    """Each chain has arrays of its own to call the function with."""

    def function(x, gradient=None):
        if gradient is None:
            return normal(x)
        np.negative(x, out=gradient)
        return -0.5 * float(x @ x)

    density = fw.Density(function, 3, in_place=in_place)

    def one(seed):
        return fw.Chain(density, START, seed=seed, step_size=0.5).advance(150).draws

    expected = [one(seed) for seed in range(6)]
    with ThreadPoolExecutor(2) as pool:
        np.testing.assert_array_equal(list(pool.map(one, range(6))), expected)


@pytest.mark.parametrize("compiled", [True, False])
def test_no_call_is_missing_from_the_counts_of_a_shared_density(compiled):
    """Without a lock of the interpreter additions that threads make at once get mixed up; with it that is rare."""
    density = fw.Density(targets.standard_normal(3).density if compiled else normal, 3)

    def one(seed):
        chain = fw.Chain(density, START, seed=seed, step_size=0.5)
        for _ in range(400):
            chain.advance(1)
        return chain.counts["gradients"]

    with ThreadPoolExecutor(4) as pool:
        assert sum(pool.map(one, range(4))) == density.gradients


@pytest.mark.skipif(getattr(sys, "_is_gil_enabled", lambda: True)(), reason="this interpreter has a lock of its own")
def test_importing_leaves_the_lock_of_the_interpreter_off():
    """A module that does not promise to do without it turns it on, with a warning."""
    code = "import sys, fellwalk; print(sys._is_gil_enabled())"
    said = subprocess.run([sys.executable, "-W", "error", "-c", code], capture_output=True, text=True, check=True)
    assert said.stdout == "False\n"


def held_chain():
    """A chain whose compiled density waits from its fourth call on, until the plan's gate is opened."""
    plan = Plan()
    chain = fw.Chain(fw.Density(ctypes_function("waiting", plan, DENSITY_SIGNATURE), 3), START, seed=6, step_size=0.4)
    plan.fail_at = 4
    return plan, chain


def wait_until(condition):
    """Waits, without burning the processor, for at most 20 s."""
    pause = threading.Event()
    for _ in range(20_000):
        if condition():
            return
        pause.wait(0.001)
    raise AssertionError("waited for 20 s")


def test_the_gil_is_released_while_a_compiled_density_runs():
    """The compiled function waits for a Python thread to open the gate, and gives up after 20 s: were the GIL held,
    that thread could not run and the call would stop with an error."""
    plan, chain = held_chain()
    thread, found = in_thread(lambda: chain.advance(5))
    wait_until(lambda: plan.entered)
    counted = sum(1 for _ in range(100_000))
    plan.gate = 1
    thread.join(30)
    assert counted == 100_000
    assert len(found[0]) == 5


@pytest.mark.parametrize("call", [
    lambda chain: chain.advance(1), lambda chain: chain.settle(5), lambda chain: chain.block(1),
    lambda chain: chain.settle(0), lambda chain: setattr(chain, "state", chain.state),
], ids=["advance", "settle", "block", "settle none", "state"])  # fmt: skip
def test_two_threads_on_one_chain_are_refused_and_the_first_is_not_disturbed(call):
    plan, chain = held_chain()
    expected = fw.Chain(fw.Density(ctypes_function("plain", None, DENSITY_SIGNATURE), 3), START, seed=6, step_size=0.4)
    thread, found = in_thread(lambda: chain.advance(5))
    wait_until(lambda: plan.entered)
    try:
        with pytest.raises(errors.BusyError, match="one chain per thread"):
            call(chain)
    finally:
        plan.gate = 1
        thread.join(30)
    np.testing.assert_array_equal(found[0].draws, expected.advance(5).draws)
    assert chain.state == expected.state


@pytest.mark.parametrize("call", ["advance", "block", "settle", "state"])
def test_a_density_that_moves_its_own_chain_is_refused(call):
    """The error comes out of the outer call as one of the density's own, and nothing has moved."""
    chain = None

    def function(x):
        if chain is not None:
            if call == "state":
                chain.state = before
            else:
                getattr(chain, call)(1)
        return normal(x)

    made = fw.Chain(fw.Density(function, 3), START, seed=2, step_size=0.4)
    before = made.state
    chain = made
    with pytest.raises(errors.BusyError):
        made.advance(1)
    assert made.state == before


def test_an_inner_chain_inside_a_callback_works():
    """A density that runs a chain of its own, over the same Density object's function, draws as without."""
    inner_density = fw.Density(normal, 3)
    inner_draws = []

    def function(x):
        inner = fw.Chain(inner_density, x, seed=5, step_size=0.5)
        inner_draws.append(inner.advance(2).draws)
        return normal(x)

    outer = fw.Chain(fw.Density(function, 3), START, seed=7, step_size=0.5).advance(15)
    plain = fw.Chain(fw.Density(normal, 3), START, seed=7, step_size=0.5).advance(15)
    np.testing.assert_array_equal(outer.draws, plain.draws)
    assert len(inner_draws) > 15
    alone = fw.Chain(inner_density, START, seed=5, step_size=0.5).advance(2).draws
    np.testing.assert_array_equal(inner_draws[0], alone)


def test_an_exception_of_an_inner_chain_is_not_lost_in_the_outer_one():
    def broken(x):
        raise KeyError("inner")

    def function(x):
        if armed:
            fw.Chain(fw.Density(broken, 3), x)
        return normal(x)

    armed = []
    outer = fw.Chain(fw.Density(function, 3), START, seed=7, step_size=0.5)
    before = outer.state
    armed.append(True)
    with pytest.raises(KeyError, match="inner"):
        outer.advance(1)
    assert outer.state == before


@pytest.mark.parametrize("settling", [False, True])
@pytest.mark.parametrize("call_number", [1, 2, 5, 16, 31, 53])
def test_an_interrupt_from_another_thread_abandons_the_transition(call_number, settling):
    """The density waits at a given call until the main thread has interrupted; the chain is as before the transition
    in hand, and goes on as if nothing had been."""
    inside, go_on = threading.Event(), threading.Event()
    left = [10**9]

    def function(x):
        left[0] -= 1
        if left[0] == 0:
            inside.set()
            assert go_on.wait(20)
        return normal(x)

    def make():
        return fw.Chain(fw.Density(function, 3), START, seed=12, path=fw.NoUTurn(doublings=3), settle=60 * settling,
                        step_size=0.15)

    chain, expected = make(), make()
    left[0] = call_number
    thread, found = in_thread(lambda: chain.block(60))
    assert inside.wait(20)
    chain.interrupt()
    go_on.set()
    thread.join(20)
    assert not thread.is_alive()
    (block,) = found
    assert isinstance(block.error, errors.Interrupted)
    np.testing.assert_array_equal(block.draws, expected.block(len(block)).draws)
    assert chain.state == expected.state
    np.testing.assert_array_equal(chain.block(20).draws, expected.block(20).draws)
    assert chain.state == expected.state


def test_an_interrupt_of_a_compiled_chain_from_another_thread():
    plan, chain = held_chain()
    before = chain.state
    thread, found = in_thread(lambda: chain.block(5))
    wait_until(lambda: plan.entered)
    chain.interrupt()
    plan.gate = 1
    thread.join(30)
    (block,) = found
    assert isinstance(block.error, errors.Interrupted)
    if len(block) == 0:
        assert chain.state == before
    assert chain.counts["transitions"] == len(block)


@pytest.mark.parametrize("done", [0, 3])
def test_an_interrupt_while_nothing_runs_stops_the_next_call(done):
    """It cannot be lost between two blocks; the call after the stopped one goes on as if nothing had been."""
    chain = fw.Chain(fw.Density(normal, 3), START, seed=3, step_size=0.5)
    expected = fw.Chain(fw.Density(normal, 3), START, seed=3, step_size=0.5)
    chain.advance(done)
    expected.advance(done)
    before = chain.state
    chain.interrupt()
    with pytest.raises(errors.Interrupted):
        chain.advance(3)
    assert chain.state == before
    np.testing.assert_array_equal(chain.advance(3).draws, expected.advance(3).draws)


# ---- memory ---------------------------------------------------------------------------------------------------------
def one_short_life(density, seed):
    chain = fw.Chain(density, np.full(density.dimension, 0.4), seed=seed, path=fw.NoUTurn(doublings=2))
    chain.settle(3)
    chain.advance(1)
    chain.state = chain.state


@pytest.mark.parametrize("compiled", [False, True])
def test_a_thousand_chains_leave_no_python_memory_behind(compiled):
    """Less than 64 bytes a chain remain (measured: 0.3); a leak of one array would be 800 bytes."""
    density = fw.Density(ctypes_function("plain", None, DENSITY_SIGNATURE) if compiled else normal, 100)
    for seed in range(20):
        one_short_life(density, seed)
    gc.collect()
    tracemalloc.start()
    try:
        before = tracemalloc.get_traced_memory()[0]
        for seed in range(1000):
            one_short_life(density, seed)
        gc.collect()
        grown = tracemalloc.get_traced_memory()[0] - before
    finally:
        tracemalloc.stop()
    assert grown < 64 * 1000


@pytest.mark.skipif(not Path("/proc/self/statm").exists(), reason="resident memory is read from /proc")
def test_a_thousand_chains_leave_resident_memory_flat():
    """A workspace here is dozens of vectors of 16 kB, so one vector leaked a chain would add 16 MB. Allowed: 8 MB, for
    the allocator's own noise (measured: 0.2 MB)."""
    density = fw.Density(ctypes_function("plain", None, DENSITY_SIGNATURE), 2000)

    def resident():
        gc.collect()
        return int(Path("/proc/self/statm").read_text(encoding="ascii").split()[1]) * 4096

    for seed in range(100):
        one_short_life(density, seed)
    before = resident()
    for seed in range(1000):
        one_short_life(density, seed)
    assert resident() - before < 8e6


def test_failures_leave_no_memory_behind():
    """1,000 exceptions and 1,000 refused states: less than 100 bytes each remain."""

    class Fails:
        armed = False

        def __call__(self, x):
            if self.armed:
                raise ValueError("always")
            return normal(x)

    function = Fails()
    chain = fw.Chain(fw.Density(function, 100), np.zeros(100), seed=1, step_size=0.3)
    function.armed = True
    state = chain.state

    def fail():
        assert isinstance(chain.block(1).error, ValueError)
        with pytest.raises(errors.StateError):
            chain.state = state[:-3]

    for _ in range(20):
        fail()
    gc.collect()
    tracemalloc.start()
    try:
        before = tracemalloc.get_traced_memory()[0]
        for _ in range(1000):
            fail()
        gc.collect()
        grown = tracemalloc.get_traced_memory()[0] - before
    finally:
        tracemalloc.stop()
    assert grown < 100 * 1000
