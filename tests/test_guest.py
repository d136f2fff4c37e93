"""A chain as a guest in another program: it leaves no trace, can be read at any time, goes as far as it is told to,
and takes changed data. Threads and memory are in test_threads.py, states in test_state.py."""

import gc
import os
import signal
import sqlite3
import sys
import threading
import time
import warnings
import weakref
from pathlib import Path

import numpy as np
import pytest
from compiled_densities import DENSITY_SIGNATURE, Curved, Plan, ctypes_function

import fellwalk as fw
from fellwalk import errors

START = (0.731, 0.468, 1.117)


def normal(x):
    return -0.5 * float(x @ x), -x


def compiled_normal(dimension=3):
    return fw.Density(ctypes_function("plain", None, DENSITY_SIGNATURE), dimension)


# ---- no trace -------------------------------------------------------------------------------------------------------


def whole_life(density, start):
    chain = fw.Chain(density, start, seed=4)
    chain.settle(40)
    chain.advance(10)
    chain.advance(gradients=50)
    chain.advance(seconds=1e-6)
    chain.density_changed()
    fw.Chain.from_state(density, chain.state).advance(3)
    return chain


def host():
    """What a chain must leave alone in the process around it."""
    handlers = [signal.getsignal(number) for number in sorted(signal.valid_signals())]
    tasks = Path("/proc/self/task")
    kernel_threads = len(list(tasks.iterdir())) if tasks.exists() else None
    modules = {name: {key: id(value) for key, value in vars(module).items()}
               for name, module in sys.modules.items() if name.split(".")[0] == "fellwalk"}
    held = {f"{name}.{key}": repr(value) for name, module in list(sys.modules.items()) if name in modules
            for key, value in vars(module).items() if isinstance(value, list | dict | set) and not key.startswith("__")}
    return {
        "handlers": handlers, "threads": threading.active_count(), "kernel threads": kernel_threads,
        "environment": dict(os.environ), "folder": Path.cwd(), "numpy errors": np.geterr(),
        "print options": np.get_printoptions(), "random": np.random.get_state()[1].tolist(),  # noqa: NPY002
        "warnings": list(warnings.filters), "switch": sys.getswitchinterval(), "modules": modules, "held": held,
        "hooks": (sys.excepthook, threading.excepthook, sys.unraisablehook, sys.gettrace(), sys.getprofile()),
    }


@pytest.mark.parametrize("form", ["pair", "in place", "compiled"])
def test_a_chain_leaves_the_process_around_it_as_it_was(form, capfd):
    """Standard output and error (of C too), handlers, threads, the environment, NumPy's settings and random numbers,
    and every name and container in fellwalk's own modules."""
    whole_life(Curved(form, 3).density, START)  # so that what is imported at the first use is there
    capfd.readouterr()
    before = host()
    whole_life(Curved(form, 3).density, START)
    after = host()
    for what, value in before.items():
        assert after[what] == value, what
    assert capfd.readouterr() == ("", "")


def test_a_dropped_chain_is_gone_at_once():
    """Without the collector of cycles: its workspace may be large."""
    gc.collect()
    gc.disable()
    try:
        for density in (Curved("pair", 3).density, Curved("compiled", 3).density,
                        fw.Density(lambda x: (-0.5 * float(x @ x), -x), fw.Parameters(a=fw.free(2), b=fw.positive()))):
            chain = whole_life(density, START)
            engine = weakref.ref(chain)
            del chain
            assert engine() is None
    finally:
        gc.enable()


# ---- reading --------------------------------------------------------------------------------------------------------


def reading(chain):
    return chain.position.tolist(), chain.gradient.tolist(), chain.log_density, chain.counts


@pytest.mark.parametrize("settle", [0, 200])
def test_another_thread_reads_a_running_chain_as_its_last_transition_left_it(settle):
    """The density waits inside the transition in hand; the expected chain has made those before it, and no more."""
    plan = Plan()
    density = fw.Density(ctypes_function("waiting", plan, DENSITY_SIGNATURE), 3)
    chain = fw.Chain(density, START, seed=6, step_size=0.4, settle=settle)
    expected = fw.Chain(compiled_normal(), START, seed=6, step_size=0.4, settle=settle)
    plan.fail_at = 60
    thread = threading.Thread(target=chain.block, args=(40,), daemon=True)
    thread.start()
    pause = threading.Event()
    for _ in range(20_000):
        if plan.entered:
            break
        pause.wait(0.001)
    assert plan.entered
    try:
        found = reading(chain)
        with pytest.raises(errors.BusyError, match="between calls"):
            _ = chain.scale
    finally:
        plan.gate = 1
        thread.join(30)
    made = found[3]["transitions"]
    assert 3 < made < 40
    expected.block(made)
    assert found == reading(expected)
    expected.block(40 - made)
    assert reading(chain) == reading(expected)


def test_readings_from_another_thread_are_never_torn():
    """x and gradient belong together in each reading while a compiled chain runs without the GIL: each pair satisfies
    gradient = -x and log density = -x.x / 2, summed in order, bit for bit. Until 100 positions have been seen."""
    chain = fw.Chain(compiled_normal(64), np.full(64, 0.3), seed=1, step_size=0.1, path=fw.Jittered(1))
    stop, failed = threading.Event(), []

    def run():
        try:
            while not stop.is_set():
                chain.advance(20_000)
        except BaseException as error:
            failed.append(error)

    thread = threading.Thread(target=run, daemon=True)
    thread.start()
    seen = set()
    try:
        end = time.monotonic() + 60
        while len(seen) < 100 and not failed and time.monotonic() < end:
            x, gradient, value = chain._engine.point()
            assert np.array_equal(gradient, -x)
            total = 0.0
            for one in x.tolist():
                total -= 0.5 * one * one
            assert value == total
            seen.add(value)
    finally:
        stop.set()
        thread.join(30)
    assert not failed
    assert len(seen) == 100, "the chain hardly moved while it was read"


@pytest.mark.parametrize("form", ["pair", "in place"])
def test_a_density_reads_its_own_chain(form):
    """Inside the callback all readings are those of the last completed transition."""
    curved, seen = Curved(form, 3), []

    def function(*arguments):
        if chain is not None:
            seen.append(reading(chain))
            assert chain.scale.tolist() == [1.0, 1.0, 1.0]
        return getattr(curved, form.replace(" ", "_"))(*arguments)

    chain = None
    made = fw.Chain(fw.Density(function, 3, in_place=form == "in place"), START, seed=3, step_size=0.3)
    first = reading(made)
    chain = made
    block = made.advance(6)
    positions = [list(START), *block.draws.tolist()]
    assert first[0] == list(START)
    assert {tuple(found[0]) for found in seen} <= {tuple(x) for x in positions}
    assert [found[3]["transitions"] for found in seen] == sorted(found[3]["transitions"] for found in seen)
    for position, *_, counts in seen:
        assert position == positions[counts["transitions"]]
    assert {found[3]["transitions"] for found in seen} == set(range(6))


def test_many_threads_on_one_chain_do_each_transition_once():
    """Eight threads try at the same moments; each try is done or refused, and what was done, in turn, is one chain."""
    chain, expected = (fw.Chain(compiled_normal(), START, seed=9, step_size=0.4) for _ in range(2))
    assert chain.density.gradients == 1
    rounds, done, refused = 30, [], []
    gate = threading.Barrier(8)

    def body():
        for _ in range(rounds):
            gate.wait(30)
            try:
                done.append(chain.advance(40).draws)
            except errors.BusyError:
                refused.append(1)

    threads = [threading.Thread(target=body, daemon=True) for _ in range(8)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join(60)
    assert len(done) + len(refused) == 8 * rounds
    assert chain.counts["transitions"] == 40 * len(done)
    draws = expected.advance(40 * len(done)).draws.reshape(len(done), 40, 3)
    assert {block.tobytes() for block in done} == {block.tobytes() for block in draws}
    assert chain.state == expected.state
    assert chain.density.gradients == chain.counts["gradients"]


def test_chains_in_threads_count_the_calls_of_the_density_they_share():
    """No call is lost when two of them end their blocks together."""
    density = compiled_normal()
    chains = [fw.Chain(density, START, seed=seed, step_size=0.4) for seed in range(4)]

    def body(chain):
        for _ in range(300):
            chain.advance(1)

    threads = [threading.Thread(target=body, args=(chain,)) for chain in chains]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join(60)
    assert density.gradients == sum(chain.counts["gradients"] for chain in chains)


# ---- how far --------------------------------------------------------------------------------------------------------


def walking(seed=5, path=None, density=None):
    return fw.Chain(density or Curved("compiled", 3).density, START, seed=seed, step_size=0.2,
                    path=path or fw.NoUTurn(doublings=6))


@pytest.mark.parametrize("gradients", [1, 2, 37, 1000, 60_000])
def test_advance_by_gradients_ends_with_the_transition_that_reaches_them(gradients):
    chain, whole = walking(), walking()
    block = chain.advance(gradients=gradients)
    spent = np.cumsum(block.facts["gradients"])
    assert spent[-1] >= gradients
    assert len(block) == 1 or spent[-2] < gradients
    same = whole.advance(len(block))
    np.testing.assert_array_equal(block.draws, same.draws)
    assert block.facts.tobytes() == same.facts.tobytes()
    assert chain.state == whole.state


def test_blocks_by_gradients_know_which_transitions_failed():
    """Half the space is forbidden, so many steps fail; index, code and position equal those of one block by draws."""
    def half(x):
        return (-np.inf, x) if x[0] < 0 else normal(x)

    chain, whole = (fw.Chain(fw.Density(half, 3), START, seed=2, step_size=0.7, path=fw.Jittered(4)) for _ in range(2))
    block = chain.advance(gradients=200)
    same = whole.advance(len(block))
    assert 5 < len(block.failures[0]) <= 32
    for found, expected in zip(block.failures, same.failures, strict=True):
        np.testing.assert_array_equal(found, expected)
    np.testing.assert_array_equal(np.flatnonzero(block.facts["failure"])[: len(block.failures[0])], block.failures[0])


class Clock:
    """Stands for the clock of the chain's module; it goes on by 10 ms a call of the density."""

    def __init__(self):
        self.now = 0.0

    def density(self, x):
        self.now += 0.01
        return normal(x)

    def perf_counter(self):
        return self.now


@pytest.mark.parametrize("seconds", [0.001, 1.0, 30.0])
def test_advance_by_seconds_ends_soon_after_them(monkeypatch, seconds):
    """By a clock that the density drives, so that the test cannot depend on the machine: the block ends after the
    deadline, by no more than one transition, or 0.1 s and one transition where small ones come in pieces."""
    clock = Clock()
    monkeypatch.setattr("fellwalk.chain.time", clock)
    chain, whole = (walking(density=fw.Density(clock.density, 3)) for _ in range(2))
    begun = clock.now
    block = chain.advance(seconds=seconds)
    longest = 0.01 * int(block.facts["gradients"].max())
    assert seconds <= clock.now - begun <= seconds + 0.1 + longest
    same = whole.advance(len(block))
    np.testing.assert_array_equal(block.draws, same.draws)
    assert chain.state == whole.state


def test_advance_by_seconds_of_the_real_clock():
    block = walking().advance(seconds=0.05)
    assert len(block) > 0


@pytest.mark.parametrize(("bounds", "first"), [
    ({"draws": 5, "gradients": 10**6}, "draws"), ({"draws": 10**6, "gradients": 50}, "gradients"),
    ({"draws": 5, "seconds": 1e6}, "draws"), ({"gradients": 50, "seconds": 1e6}, "gradients"),
    ({"draws": 10**6, "gradients": 10**6, "seconds": 1e-9}, "seconds"),
])  # fmt: skip
def test_of_several_bounds_the_first_reached_ends_the_block(bounds, first):
    chain = walking()
    block = chain.advance(**bounds)
    spent = int(block.facts["gradients"].sum())
    if first == "draws":
        assert len(block) == 5
    elif first == "gradients":
        assert 50 <= spent < 50 + block.facts["gradients"].max()
    else:
        assert len(block) <= 1
    assert chain.counts["transitions"] == len(block)


def test_a_chain_that_cannot_move_is_not_asked_for_ever():
    """Where no path can leave, transitions take no gradient; each then counts as one."""
    def edge(x):
        return normal(x)

    chain = fw.Chain(fw.Density(edge, 3), START, seed=1, step_size=0.4, motion=fw.Lagrangian(bend=1.0), beta=1e300)
    block = chain.advance(gradients=25)
    assert len(block) <= 25
    assert max(int(block.facts["gradients"].sum()), len(block)) >= 25


@pytest.mark.parametrize(("bounds", "words"), [
    ({}, "say how far"), ({"gradients": 0}, "gradients must be from 1"), ({"gradients": 2.5}, "whole number"),
    ({"seconds": 0}, "seconds must be above 0"), ({"seconds": "a while"}, "seconds must be a number"),
    ({"seconds": np.nan}, "seconds"), ({"draws": -1}, "draws must be from 0"),
])  # fmt: skip
def test_bounds_that_are_none(bounds, words):
    with pytest.raises(errors.ArgumentError, match=words):
        walking().advance(**bounds)


@pytest.mark.parametrize("bounds", [{"gradients": 10}, {"seconds": 1.0}])
def test_bounded_blocks_need_a_settled_chain_with_a_step(bounds):
    with pytest.raises(errors.SettleError, match="has not settled"):
        fw.Chain(compiled_normal(), START, settle=50).advance(**bounds)
    with pytest.raises(errors.ArgumentError, match="no step size"):
        fw.Chain(compiled_normal(), START).advance(**bounds)


@pytest.mark.parametrize("bounds", [{"gradients": 10**5}, {"seconds": 1e6}])
def test_an_exception_comes_out_of_a_bounded_block_and_the_chain_stands(bounds):
    curved = Curved("pair", 3)
    chain, whole = walking(density=curved.density), walking()
    curved.fail(100, "raise")
    with pytest.raises(type(curved.kind("x"))):
        chain.advance(**bounds)
    whole.advance(chain.counts["transitions"])
    assert chain.position.tolist() == whole.position.tolist()
    assert chain.counts == whole.counts


# ---- changed data ---------------------------------------------------------------------------------------------------


class Moved:
    """A normal about a centre that the host moves."""

    def __init__(self, centre=0.0):
        self.centre = centre

    def __call__(self, x):
        if self.centre is None:
            return -np.inf, x
        return -0.5 * float((x - self.centre) @ (x - self.centre)), self.centre - x


def test_after_changed_data_the_chain_is_that_of_the_new_density():
    """Bit for bit a chain made over the new density; without a word of the change it would go on from the old value."""
    model = Moved()
    told, untold = (fw.Chain(fw.Density(model, 3), START, seed=8, step_size=0.4) for _ in range(2))
    model.centre = 2.0
    told.density_changed()
    fresh = fw.Chain(fw.Density(Moved(2.0), 3), START, seed=8, step_size=0.4)
    assert reading(told)[:3] == reading(fresh)[:3]
    assert untold.log_density != fresh.log_density
    expected = fresh.advance(50)
    found = told.advance(50)
    np.testing.assert_array_equal(found.draws, expected.draws)
    assert found.facts.tobytes() == expected.facts.tobytes()
    assert told.counts["gradients"] == fresh.counts["gradients"] + 1
    assert not np.array_equal(untold.advance(50).draws, expected.draws)


def test_unchanged_data_change_nothing():
    chain, other = walking(), walking()
    for each in (chain, other):
        each.settle(120)
        each.advance(20)
    chain.density_changed()
    np.testing.assert_array_equal(chain.advance(40).draws, other.advance(40).draws)


def test_a_host_that_changes_data_between_blocks_gets_the_law_of_each():
    """Blocks of 400 draws about centres 0, 3, -5 by turns: the mean of each, its first 30 draws left out, is within 5
    standard errors of its centre. The draws of a normal over its own base metric are at most as dependent as an
    autoregression of 0.5 (measured: less), so a standard error is below sqrt(3 / 370) = 0.09 a coordinate."""
    model = Moved()
    chain = fw.Chain(fw.Density(model, 3), np.zeros(3), seed=3, settle=200)
    chain.settle(200)
    for centre in (0.0, 3.0, -5.0, 0.0):
        model.centre = centre
        chain.density_changed()
        draws = chain.advance(400).draws[30:]
        assert np.all(np.abs(draws.mean(axis=0) - centre) < 5 * 0.09)


def test_a_refused_change_leaves_the_chain_as_it_was():
    model = Moved()
    chain = fw.Chain(fw.Density(model, 3), START, seed=8, step_size=0.4)
    before = reading(chain)
    model.centre = None
    with pytest.raises(errors.StartError, match="the log density is -inf"):
        chain.density_changed()
    assert reading(chain)[:3] == before[:3]

    def raises(x):
        raise KeyError("gone")

    chain.density.function = raises  # not seen: a chain calls what it was made with
    model.centre = 1.0
    chain.density_changed(position=[1.0, 1.0, 1.0])
    assert chain.log_density == 0.0
    assert chain.position.tolist() == [1.0, 1.0, 1.0]
    with pytest.raises(errors.StartError, match="finite"):
        chain.density_changed(position=[1.0, np.inf, 1.0])
    with pytest.raises(errors.ShapeError):
        chain.density_changed(position=[1.0])


def test_a_position_of_named_parameters_is_natural():
    density = fw.Density(lambda x: (-0.5 * float(x @ x), -x), fw.Parameters(a=fw.free(), b=fw.positive()))
    chain = fw.Chain(density, {"a": 0.5, "b": 2.0}, seed=1, step_size=0.3)
    np.testing.assert_allclose(density.parameters.natural(chain.position), [0.5, 2.0], rtol=1e-15)
    chain.density_changed({"a": -1.0, "b": 3.0})
    np.testing.assert_allclose(density.parameters.natural(chain.position), [-1.0, 3.0], rtol=1e-15)


@pytest.mark.parametrize("made", [3, 60])
def test_a_change_while_settling_begins_the_plan_anew(made):
    """After 3 transitions the chain still climbs from its far start, after 60 it is inside a window. From the change on
    it takes the whole plan, and ends about the new centre."""
    model = Moved(0.0)
    chain = fw.Chain(fw.Density(model, 8), np.full(8, 40.0), seed=2, settle=200)
    chain.block(made)
    model.centre = 25.0
    chain.density_changed()
    assert chain.summary["settled_transitions"] == 0
    assert len(chain.block(10**6)) == 200
    assert chain.settled
    draws = chain.advance(300).draws
    # 2,400 numbers of variance 1, at most as dependent as an autoregression of 0.5: standard error below 0.04
    assert abs(draws.mean() - 25.0) < 5 * 0.04
    np.testing.assert_array_less(chain.scale, 4.0)
    np.testing.assert_array_less(0.25, chain.scale)


# ---- the state in the host's own format -----------------------------------------------------------------------------


def test_the_state_in_a_file_of_the_host(tmp_path):
    """As a blob of a database, as bytes of an array file, inside other bytes; each goes on with the same bits."""
    chain = walking()
    chain.advance(20)
    state = chain.state
    expected = chain.advance(30).draws
    with sqlite3.connect(tmp_path / "host.db") as base:
        base.execute("create table walks (name text, state blob)")
        base.execute("insert into walks values ('first', ?)", (state,))
        blob = base.execute("select state from walks").fetchone()[0]
    base.close()
    np.savez(tmp_path / "host.npz", state=np.frombuffer(state, np.uint8))
    with np.load(tmp_path / "host.npz") as stored:
        array = stored["state"]
    message = b"header" + state
    for kept in (blob, array.tobytes(), memoryview(message)[6:], bytearray(state)):
        other = fw.Chain.from_state(Curved("compiled", 3).density, kept)
        np.testing.assert_array_equal(other.advance(30).draws, expected)
        other.state = kept
        np.testing.assert_array_equal(other.advance(30).draws, expected)


@pytest.mark.parametrize("given", [None, "text", 3, [1, 2]])
def test_what_is_no_state_at_all(given):
    with pytest.raises(errors.StateError):
        fw.Chain.from_state(Curved("compiled", 3).density, given)
