"""The no-U-turn path: what it allocates, how much it needs, how far it goes, and where it stops.

That a path allocates nothing is seen twice: the core compiled with its calloc and free renamed to counting ones (it
calls no other allocator: see test_core_builds), and the installed package by the C library's own count of its heap.
"""

import ctypes
import gc

import numpy as np
import pytest
import targets
from test_core_builds import FLOATS, HARNESS, INCLUDES, SOURCES, Case, compile_

import fellwalk as fw
from fellwalk.facts import FACTS

LARGE = 100_000
DOUBLINGS = 10
# A normal so wide that 2^10 steps of half the base metric's unit go a twentieth of its sd: nothing turns.
WIDE = 1e4
LAGRANGIAN = fw.Lagrangian(bend=0.3)
PRODUCT = fw.Lagrangian(bend=0.3, curvature="product")


def wide(d):
    return targets.independent_normal(np.zeros(d), np.full(d, WIDE))


def density_of(target):
    return fw.Density(target.density, target.dimension, hessian_product=target.hessian_product)


def unsettled(target, start, motion=None, path=None, **named):
    """A chain that keeps at once, over unit scales."""
    named = {"step_size": 0.5, "beta": 0.1, **named}
    return fw.Chain(density_of(target), start, motion=motion, path=path, settle=0, scale=np.ones(target.dimension),
                    **named)


# ---- allocation -----------------------------------------------------------------------------------------------------


@pytest.fixture(scope="module")
def counted(tmp_path_factory):
    """The core with the harness of test_core_builds; only the core's own calloc and free are counted."""
    folder = tmp_path_factory.mktemp("counted")
    names = ["-Dcalloc=harness_calloc", "-Dfree=harness_free"]
    flags = ["-fPIC", "-fvisibility=hidden", *INCLUDES, *FLOATS, "-O2", "-DFW_NO_CLONES"]
    objects = [folder / f"{source.stem}.o" for source in SOURCES]
    for source, to in zip(SOURCES, objects, strict=True):
        compile_("-c", *flags, *names, source, "-o", to)
    compile_("-shared", *flags, "-DHARNESS_ALLOCATIONS", HARNESS, *objects, "-o", folder / "counted.so", "-lm")
    library = ctypes.CDLL(str(folder / "counted.so"))
    library.harness_run.argtypes = [ctypes.POINTER(Case), *[ctypes.c_void_p] * 6, ctypes.c_size_t, ctypes.c_void_p]
    library.harness_made.restype = library.harness_live.restype = ctypes.c_size_t
    return library


@pytest.mark.parametrize("way", [
    {"motion": b"leapfrog"},
    {"motion": b"leapfrog", "turn": 1},
])
def test_paths_of_two_to_the_tenth_steps_allocate_nothing(counted, way):
    """Two chains of two blocks of memory each, made before they move; a path of 1023 steps in each asks for no more."""
    target = wide(LARGE)
    function = ctypes.cast(target._density, ctypes.c_void_p).value
    case = Case(d=LARGE, density=function, density_context=target._context, path=b"no-u-turn", doublings=DOUBLINGS,
                steps=1, keep=2, seed=3, **way)
    x = WIDE * np.random.default_rng(4).standard_normal(LARGE)
    draws, gradients = np.empty((2, 2, LARGE))
    found, state = np.zeros(2, FACTS), np.empty(64 * LARGE * 8, np.uint8)
    rows, size = ctypes.c_size_t(2), ctypes.c_size_t()
    counted.harness_fail(ctypes.c_size_t(0))
    status = counted.harness_run(case, x.ctypes.data, draws.ctypes.data, gradients.ctypes.data, found.ctypes.data,
                                 ctypes.byref(rows), state.ctypes.data, state.size, ctypes.byref(size))
    assert status == 0
    assert found["steps"].tolist() == [2**DOUBLINGS - 1] * 2
    assert (np.linalg.norm(draws[1] - draws[0]) > 0.5 * np.sqrt(LARGE)), "the path went nowhere"
    assert counted.harness_made() == 4
    assert counted.harness_live() == 0


class _Heap(ctypes.Structure):
    _fields_ = tuple((name, ctypes.c_size_t) for name in (
        "arena", "ordblks", "smblks", "hblks", "hblkhd", "usmblks", "fsmblks", "uordblks", "fordblks", "keepcost"))


def heap():
    """Bytes in use of the C heap, mapped blocks included."""
    call = getattr(ctypes.CDLL(None), "mallinfo2", None)
    if call is None:
        pytest.skip("this C library does not count its heap with mallinfo2")
    call.restype = _Heap
    found = call()
    return found.uordblks + found.hblkhd


def test_the_workspace_is_what_the_summary_says_and_a_long_path_leaves_the_heap_as_it_was():
    target = wide(LARGE)
    density, start, scale = density_of(target), np.zeros(LARGE), np.ones(LARGE)
    vector = 8 * LARGE
    fw.Chain(density_of(wide(10)), np.zeros(10), settle=0, step_size=0.5, seed=1).advance(1)  # what comes but once
    gc.collect()
    before = heap()
    chain = fw.Chain(density, start, settle=0, step_size=0.5, scale=scale, seed=1)
    made = heap() - before
    workspace = chain.summary["workspace_bytes"]
    assert workspace - chain.summary["workspace_vectors"] * vector < 65536
    # Beside the workspace: the point and the gradient that other threads may read, and two vectors at most for more.
    assert workspace <= made <= workspace + 4 * vector
    chain.advance(1)
    before = heap()
    block = chain.advance(1)
    assert block.facts["steps"][0] == 2**DOUBLINGS - 1
    # What the block holds: its draw, and the room for the position of one failed step.
    assert heap() - before <= 2 * vector + 65536


# ---- workspace ------------------------------------------------------------------------------------------------------

# c of "c + 4 vectors a doubling" for the plain path without learned directions: current point and gradient 2, scale 1,
# place of a failure 1, both ends of the orbit 8, moments of a window 4, points of the climb 16; candidates 4, sums 3,
# the piece in hand and one more level 5.
PLAIN = 44
# More for: H c at both ends and three vectors of products; two spare ends; G v at every level.
CURVED, HALVED, METRIC = 5, 8, 2


def rows(d):
    """Pairs of draws and gradients kept for learning directions."""
    return 64 if d <= 2000 else 40 if d <= 20_000 else 24


@pytest.mark.parametrize(("motion", "turn", "more", "slope"), [
    (fw.Leapfrog(), "base", 0, 3),
    (fw.Leapfrog(halvings=3), "base", HALVED, 3),
    (LAGRANGIAN, "base", 0, 3),
    (LAGRANGIAN, "metric", METRIC, 4),
    (PRODUCT, "base", CURVED, 3),
    (PRODUCT, "metric", CURVED + METRIC, 4),
])
@pytest.mark.parametrize("rank", [0, 1, 5, "auto"])
@pytest.mark.parametrize("d", [2, 20_000, LARGE])
def test_the_workspace_grows_by_at_most_four_vectors_a_doubling(d, rank, motion, turn, more, slope):
    """c = 44 + the motion's own for rank 0; with k directions 16 less, and 2 rows + 3 k more: 124 for "auto" at 1e5."""
    k = 16 if rank == "auto" else rank
    c = PLAIN + more + (2 * rows(d) + 3 * k - 16 if k else 0)
    target = targets.standard_normal(d)
    for doublings in (1, 2, 10, 19) if d < LARGE else (10,):
        path = fw.NoUTurn(doublings=doublings, turn=turn)
        chain = fw.Chain(density_of(target), np.zeros(d), motion=motion, path=path, rank=rank)
        assert chain.summary["workspace_vectors"] <= c + slope * doublings
    assert slope <= 4


# ---- length ---------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("turn", ["base", "metric"])
@pytest.mark.parametrize("motion", [fw.Leapfrog(), LAGRANGIAN, PRODUCT, fw.Leapfrog(halvings=2)])
def test_at_most_two_to_the_doublings_steps(motion, turn):
    """Where nothing turns a path of k doublings has the start and 2^k - 1 new states."""
    target, start = wide(3), np.array([0.3, -1.1, 0.7])
    for doublings in range(1, 11):
        path = fw.NoUTurn(doublings=doublings, turn=turn)
        facts = unsettled(target, start, motion, path, seed=doublings).advance(5).facts
        assert facts["steps"].tolist() == [2**doublings - 1] * 5
        assert facts["failure"].tolist() == [0] * 5


@pytest.mark.parametrize("motion", [fw.Leapfrog(), LAGRANGIAN, PRODUCT])
def test_both_turn_tests_end_paths_on_a_normal(motion):
    """A period of a standard normal is 2 pi / 0.2 = 31 steps long, so no path of more than 63 steps may be needed."""
    for turn in ("base", "metric"):
        chain = unsettled(targets.standard_normal(5), np.ones(5), motion, fw.NoUTurn(turn=turn), step_size=0.2, seed=8)
        facts = chain.advance(200).facts
        assert facts["steps"].max() <= 63
        assert np.median(facts["steps"]) >= 7


def test_the_metric_turn_test_asks_less_where_the_metrics_agree():
    """With beta 0 both momenta are the same, and turn="metric" leaves out two tests at a seam: from the same point and
    stream its paths are at least as long, and some are longer."""
    target, longer = targets.ring(2, 3.0, 0.5), 0
    for seed in range(200):
        steps = []
        for turn in ("base", "metric"):
            path = fw.NoUTurn(turn=turn)
            chain = unsettled(target, [2.1, -1.9], LAGRANGIAN, path, beta=0.0, seed=seed, step_size=0.3)
            steps.append(int(chain.advance(1).facts["steps"][0]))
        assert steps[0] <= steps[1]
        longer += steps[0] < steps[1]
    assert longer > 0


# ---- where it stops -------------------------------------------------------------------------------------------------


class Watched:
    """A normal with sds `sd`, cut off where x0 > `edge`, that writes down where it was called."""

    def __init__(self, sd, edge=np.inf):
        self.sd, self.edge, self.calls = np.array(sd), edge, []

    def __call__(self, x):
        self.calls.append(x.copy())
        if x[0] > self.edge:
            return -np.inf, np.zeros(len(x))
        z = x / self.sd
        return -0.5 * float(z @ z), -z / self.sd

    def gradient(self, x):
        return -x / self.sd**2

    def transitions(self, chain, count):
        """Yields (start, positions called, draw, facts) of one transition after another."""
        for _ in range(count):
            start = chain.position
            self.calls.clear()
            block = chain.advance(1)
            yield start, list(self.calls), block.draws[0], block.facts[0]


@pytest.mark.parametrize("turn", ["base", "metric"])
@pytest.mark.parametrize("motion", [fw.Leapfrog(), LAGRANGIAN])
def test_a_failed_step_ends_the_doubling_and_its_half_is_dropped(motion, turn):
    watched = Watched([30.0, 30.0], edge=2.0)
    chain = fw.Chain(fw.Density(watched, 2), [0.3, 0.1], motion=motion, path=fw.NoUTurn(turn=turn), settle=0,
                     step_size=0.21, scale=np.ones(2), beta=0.1, seed=15)
    failed = 0
    for start, calls, draw, facts in watched.transitions(chain, 400):
        assert len(calls) == facts["steps"] == facts["gradients"]
        if not facts["failure"]:
            continue
        failed += 1
        assert [x[0] > 2.0 for x in calls].index(True) == len(calls) - 1, "went on after the failure"
        old = 2 ** (len(calls).bit_length() - 1) - 1  # new states of the halves completed before
        assert any(np.array_equal(draw, x) for x in [start, *calls[:old]])
    assert failed > 100


class Orbit:
    """An orbit put together again from the positions called, in the order they were called, under leapfrog steps."""

    def __init__(self, start, watched, scale, step):
        self.watched, self.scale, self.step = watched, scale, step
        self.first = np.array(start)
        self.states = []  # (position, velocity), from the earliest to the latest

    def half(self, points):
        """Adds the points beyond the end from which the first of them is one step away; returns +1 or -1, the side."""
        h, s = self.step, self.scale
        if not self.states:  # time has no direction yet: the first step counts as forward
            v = (points[0] - self.first) / h - 0.5 * h * s * self.watched.gradient(self.first)
            self.states = [(self.first, v)]
        misses = {side: np.abs(self.next(side)[0] - points[0]).max() for side in (1, -1)}
        side = min(misses, key=misses.get)
        for x in points:
            expected, v = self.next(side)
            np.testing.assert_allclose(x, expected, rtol=0, atol=1e-9 * np.abs(x).max())
            self.states.insert(len(self.states) if side > 0 else 0, (x, v))
        return side

    def next(self, side):
        h, s = side * self.step, self.scale
        x, v = self.states[-1 if side > 0 else 0]
        v = v + 0.5 * h * s * self.watched.gradient(x)
        x = x + h * v
        return x, v + 0.5 * h * s * self.watched.gradient(x)

    def turns(self, a, b):
        """Does the piece made of the states a and b turn, as a whole or across its seam?"""
        v, w = ([state[1] for state in piece] for piece in (a, b))
        pairs = [(sum(v) + sum(w), (v[0], w[-1])), (sum(v) + w[0], (v[0], w[0])), (v[-1] + sum(w), (v[-1], w[-1]))]
        return any(np.sum(rho / self.scale * u) <= 0.0 for rho, ends in pairs for u in ends)


def stops_at(orbit, calls, doublings):
    """(steps after which the doubling ends, whether the last half is dropped) by the rule written out in full: every
    piece of 2, 4, 8 ... states of the new half as soon as it is complete, then the old orbit with the new half."""
    done = 0
    for depth in range(doublings):
        size = 2**depth
        old = list(orbit.states)
        points = calls[done : done + size]
        side = orbit.half(points)
        if not old:
            old = orbit.states[:1]
        fresh = orbit.states[len(old) :] if side > 0 else orbit.states[: len(points)][::-1]
        for i in range(1, len(points) + 1):
            width = 2
            while i % width == 0:
                a, b = fresh[i - width : i - width // 2], fresh[i - width // 2 : i]
                if orbit.turns(a, b) if side > 0 else orbit.turns(b[::-1], a[::-1]):
                    return done + i, True
                width *= 2
        if len(points) < size:
            return None, None
        done += size
        if orbit.turns(old, fresh) if side > 0 else orbit.turns(fresh[::-1], old):
            return done, False
    return done, False


@pytest.mark.parametrize("step", [0.13, 0.3, 0.6])
def test_paths_end_exactly_where_the_written_out_rule_ends_them(step):
    """The whole orbit is put together again and every test made on it; the draw is never of a half that was dropped."""
    scale, watched = np.array([0.7, 2.0, 1.4]), Watched([0.9, 3.0, 0.4])
    chain = fw.Chain(fw.Density(watched, 3), [0.3, 1.1, 0.2], path=fw.NoUTurn(doublings=6), settle=0, step_size=step,
                     scale=scale, seed=23)
    ends = {True: 0, False: 0}
    for start, calls, draw, _ in watched.transitions(chain, 150):
        steps, dropped = stops_at(Orbit(start, watched, scale, step), calls, 6)
        assert steps == len(calls)
        kept = [start, *calls[: 2 ** (len(calls).bit_length() - 1) - 1]] if dropped else [start, *calls]
        assert any(np.array_equal(draw, x) for x in kept)
        ends[dropped] += 1
    assert min(ends.values()) > 5, f"only one way of stopping was seen: {ends}"
