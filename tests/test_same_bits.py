"""Identical draws whatever the build, the threads and the executor: function clones on or off, vectors on or off, whole
processor levels, other optimisation, one thread or two, this process or others. test_core_builds.py does the same for
more motions and paths with the clones alone."""

import functools
from concurrent.futures import ThreadPoolExecutor

import numpy as np
import pytest
import targets
from test_core_builds import (
    FLOATS,
    HARNESS,
    INCLUDES,
    SOURCES,
    STRICT,
    Library,
    compile_,
    processor_levels,
    spread_start,
)

import fellwalk as fw
from fellwalk._core import Stream

BUILDS = {
    "as it ships": ["-O3", *STRICT],
    "no clones": ["-O3", "-DFW_NO_CLONES", *STRICT],
    "no vectors": ["-O3", "-DFW_NO_VECTORS", *STRICT],
    "neither": ["-O2", "-DFW_NO_CLONES", "-DFW_NO_VECTORS", *STRICT],
    "neither, not optimised": ["-O0", "-DFW_NO_CLONES", "-DFW_NO_VECTORS"],
}
CASES = {
    "leapfrog": {"motion": b"leapfrog", "path": b"no-u-turn", "rank": 3},
    "surrogate": {"motion": b"lagrangian", "bend": 0.7, "path": b"jittered", "rank": 0},
    "product": {"motion": b"lagrangian", "bend": 0.7, "curvature": 2, "path": b"no-u-turn", "turn": 1, "rank": 0},
    "semi-explicit difference": {"motion": b"lagrangian", "bend": 0.7, "scheme": 1, "curvature": 1,
                                 "path": b"jittered", "rank": 2},
}


@pytest.fixture(scope="module")
def builds(tmp_path_factory):
    if not SOURCES:
        pytest.skip("the sources of the core are not beside the tests")
    folder = tmp_path_factory.mktemp("same-bits")
    options = {**BUILDS, **{level: ["-O3", "-DFW_NO_VECTORS", "-DFW_NO_CLONES", f"-march=x86-64-{level}"]
                            for level in processor_levels()}}

    def build(name):
        out = folder / f"{name.replace(' ', '-').replace(',', '')}.so"
        shared = ["-shared", "-fPIC", "-fvisibility=hidden", *INCLUDES, *FLOATS]
        compile_(*shared, *options[name], HARNESS, *SOURCES, "-o", out, "-lm")
        return Library(out)

    with ThreadPoolExecutor(2) as pool:
        return dict(zip(options, pool.map(build, options), strict=True))


def test_the_builds_differ(builds):
    """Else comparing their bits says nothing."""
    code = {name: library.path.read_bytes() for name, library in builds.items()}
    assert len(set(code.values())) == len(code)


@pytest.mark.parametrize("case", CASES)
@pytest.mark.parametrize("d", [2, 3, 5, 7, 8, 9, 12, 15, 130])
def test_every_build_gives_the_same_bytes(builds, d, case):
    """All ends of a group of eight: the last elements of a vector are where builds could differ."""
    target = targets.log_spaced_normal(d, 1e-3, 1e3)
    named = {"steps": 5, "doublings": 5, "settle": 40, "keep": 12, "seed": 23, **CASES[case]}
    results = {name: build.run(target, spread_start(d, 5), **named) for name, build in builds.items()}
    status, draws, *_ = results["as it ships"]
    assert status == 0
    assert len(np.unique(draws[:, 0])) > 10, "the chain hardly moved"
    for name, other in results.items():
        assert [part.tobytes() if isinstance(part, np.ndarray) else part for part in other] == [
            part.tobytes() if isinstance(part, np.ndarray) else part for part in results["as it ships"]], name


def normal(scale, x):
    """A normal in Python, which other processes can import."""
    z = x / scale
    return -0.5 * float(z @ z), -z / scale


@pytest.mark.parametrize("motion", [fw.Leapfrog(), fw.Lagrangian(bend=0.4)])
@pytest.mark.parametrize("d", [10, 1003])
def test_threads_and_executors_do_not_matter(d, motion):
    target = targets.log_spaced_normal(d, 1e-2, 1e2)
    start = np.full(d, 0.01)
    compiled = fw.Density(target.density, d, start=start)
    python = fw.Density(functools.partial(normal, np.geomspace(1e-2, 1e2, d)), d, start=start)
    run = functools.partial(fw.run, motion=motion, chains=3, seed=6, settle=60, keep=30, progress="off")
    with ThreadPoolExecutor(1) as one, ThreadPoolExecutor(2) as two:
        for density, executors in ((compiled, ("here", one, two)), (python, ("here", one, two, "processes"))):
            found = [run(density, executor=executor) for executor in executors]
            for other in found[1:]:
                assert other.draws.tobytes() == found[0].draws.tobytes()
                assert other.facts.tobytes() == found[0].facts.tobytes()
                assert [a.tobytes() for a in other.settling] == [a.tobytes() for a in found[0].settling]
            assert len(np.unique(found[0].draws[0, :, 0])) > 20


@pytest.mark.parametrize("seed", [0, 1, 77, 2**127 + 5])
def test_the_stream_is_that_of_numpy(seed):
    """PCG64DXSM written again must give NumPy's numbers, normal and uniform, and its states."""
    theirs = np.random.Generator(np.random.PCG64DXSM(np.random.SeedSequence(seed)))
    ours = Stream(np.random.SeedSequence(seed))
    for count in (1, 2, 997, 5000):
        np.testing.assert_array_equal(ours.normals(count), theirs.standard_normal(count))
        np.testing.assert_array_equal(ours.uniforms(count), theirs.random(count))
    inner = theirs.bit_generator.state["state"]
    assert ours.state == inner["state"].to_bytes(16, "little") + inner["inc"].to_bytes(16, "little")
    again = Stream(np.random.SeedSequence(3))
    again.state = ours.state
    expected = ours.normals(10)
    np.testing.assert_array_equal(again.normals(10), expected)
    again.rewind()
    np.testing.assert_array_equal(again.normals(10), expected)
