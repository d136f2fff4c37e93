"""What the package adds to the user's function: small d, Python functions, memory traffic, growth with d.

    python benchmarks/speed.py            all of it, six minutes of one processor
    python benchmarks/speed.py --quick    d up to 1e5, shorter repeats, half a minute

Every line has its bound beside it and says whether it was kept. Net times leave out the density's own calls, timed
alone in turn with the rest, and are medians of the repeats; processor time, of the thread that works.
"""

import argparse
import ctypes
import importlib.util
import subprocess
import sys
import sysconfig
import tempfile
import time
from collections.abc import Callable
from functools import cache
from pathlib import Path

import numpy as np
from common import (
    HERE,
    Callback,
    _build,
    _repeat,
    busy,
    fw,
    interleaved,
    machine,
    rounds_for,
    short_time,
    table,
    targets,
    timer,
)
from scipy import LowLevelCallable

# Vectors read and written in one step: the table in csrc/src/kernels.h, which tests/test_speed_counts.py checks.
# Last: how many different vectors that are, which decides the memory level they come from. Steps are those of one path,
# where leapfrog and surrogate steps are in a row.
MOVED = {
    "leapfrog": (fw.Leapfrog(), 6, 4),
    "surrogate": (fw.Lagrangian(curvature="surrogate"), 12, 4),
    "product, split": (fw.Lagrangian(curvature="product"), 27, 8),
    "product, semi-explicit": (fw.Lagrangian(curvature="product", scheme="semi-explicit"), 35, 8),
    "difference, split": (fw.Lagrangian(curvature="difference"), 33, 8),
    "difference, semi-explicit": (fw.Lagrangian(curvature="difference", scheme="semi-explicit"), 40, 8),
}


# ---- compiled densities in three makes -------------------------------------------------------------------------------


@cache
def cython_normal() -> LowLevelCallable:
    """The capsule of cython_normal.pyx, built now."""
    folder = Path(tempfile.mkdtemp(prefix="fellwalk-benchmarks-"))
    source, out = folder / "cython_normal.c", folder / "cython_normal.so"
    make = [sys.executable, "-m", "cython", "-3", str(HERE / "cython_normal.pyx"), "-o", str(source)]
    subprocess.run(make, check=True)
    flags = ["-O3", "-fPIC", "-shared", f"-I{sysconfig.get_paths()['include']}"]
    subprocess.run([*_build.compiler(), *flags, str(source), "-o", str(out)], check=True)
    spec = importlib.util.spec_from_file_location("cython_normal", out)
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return LowLevelCallable(module.capsule)


@cache
def numba_normal() -> LowLevelCallable:
    """A cfunc."""
    import numba
    from numba import carray, cfunc, types

    @cfunc(types.intc(types.uintp, *[types.CPointer(types.float64)] * 3, types.voidptr))
    def normal(d, x, value, gradient, context):
        total, at, out = 0.0, carray(x, (d,)), carray(gradient, (d,))
        for i in range(d):
            total += at[i] * at[i]
            out[i] = -at[i]
        carray(value, (1,))[0] = -0.5 * total
        return 0

    assert numba
    return LowLevelCallable(normal.ctypes, signature="int (size_t, double *, double *, double *, void *)")


def calls_of(function: LowLevelCallable, d: int) -> Callable[[int], None]:
    """A function of n that makes n bare calls from C."""
    api = ctypes.pythonapi
    api.PyCapsule_GetName.restype = ctypes.c_char_p
    api.PyCapsule_GetName.argtypes = [ctypes.py_object]
    api.PyCapsule_GetPointer.restype = ctypes.c_void_p
    api.PyCapsule_GetPointer.argtypes = [ctypes.py_object, ctypes.c_char_p]
    capsule = tuple.__getitem__(function, 0)
    pointer = ctypes.c_void_p(api.PyCapsule_GetPointer(capsule, api.PyCapsule_GetName(capsule)))
    x, value, gradient = np.full(d, 0.3), np.empty(1), np.empty(d)
    arrays = [ctypes.c_void_p(array.ctypes.data) for array in (x, value, gradient)]

    def calls(n: int) -> None:
        _repeat().repeat_density(pointer, ctypes.c_long(n), ctypes.c_size_t(d), *arrays, None)

    calls.held = (function, x, value, gradient)
    return calls


def kept(value: float, bound: float) -> str:
    """Was it?"""
    return "yes" if value <= bound else "NO"


def ns(value: float) -> str:
    """Nanoseconds, whole."""
    return f"{1e9 * value:.0f}"


# ---- small d ---------------------------------------------------------------------------------------------------------

KINDS = [(motion, bound, path) for motion, bound in ((fw.Leapfrog(), 100), (fw.Lagrangian(bend=0.5), 200))
         for path in (fw.Jittered(16), fw.NoUTurn())]


def small(seconds: float, repeats: int) -> str:
    """d = 10: everything included, per step, while keeping and while settling."""
    d, rows = 10, []
    makes = {"C": targets.standard_normal(d).density, "Numba": numba_normal(), "Cython": cython_normal()}
    for make, function in makes.items():
        density = fw.Density(function, d)
        for motion, bound, path in KINDS:
            def fresh(density: fw.Density = density, motion: fw.motions.Motion = motion,
                      path: fw.motions.Path = path) -> fw.Chain:
                return fw.Chain(density, np.full(d, 0.1), motion=motion, path=path, seed=3, settle=1000)

            chain, counted = fresh(), {}
            chain.settle()

            def keeping(chain: fw.Chain = chain, counted: dict = counted) -> float:
                begun = time.thread_time()
                facts = chain.advance(3000).facts
                spent = time.thread_time() - begun
                counted["keeping"] = facts["gradients"].sum() / facts["steps"].sum()
                counted["steps"] = facts["steps"].mean()
                return spent / facts["steps"].sum()

            def settling(fresh: Callable = fresh, counted: dict = counted) -> float:
                new = fresh()
                begun = time.thread_time()
                facts = new.block(2**62).facts
                spent = time.thread_time() - begun
                counted["settling"] = facts["gradients"].sum() / facts["steps"].sum()
                return spent / facts["steps"].sum()

            found = interleaved({"own": timer(calls_of(function, d), seconds / 4), "keeping": keeping,
                                 "settling": settling}, repeats)
            net = {phase: np.median(found[phase] - counted[phase] * found["own"]) for phase in ("keeping", "settling")}
            rows.append([make, motion.name, type(path).__name__, f"{counted['steps']:.1f}",
                         f"{1e9 * np.median(found['own']):.1f}", ns(net["keeping"]), ns(net["settling"]), str(bound),
                         kept(1e9 * net["keeping"], bound), kept(1e9 * net["settling"], bound)])
    return table(["density", "motion", "path", "steps a draw", "own ns", "keeping, ns", "settling, ns", "bound",
                  "kept while keeping", "settling"], rows)


def whole_run(repeats: int) -> str:
    """d = 10 by `run`: what a step takes of all processor time of the process, without a record and with one."""
    d, few, many, rows = 10, 2_000, 102_000, []
    function = numba_normal()
    density = fw.Density(function, d, start=np.full(d, 0.1))
    for motion, bound, path in KINDS:
        ratio = [1.0, 1.0]
        with tempfile.TemporaryDirectory() as folder:
            def spent(keep: int, record: bool, motion: fw.motions.Motion = motion, path: fw.motions.Path = path,
                      folder: str = folder) -> tuple[float, int, int]:
                begun = time.process_time()
                found = fw.run(density, motion=motion, path=path, chains=1, keep=keep, seed=3, settle=300,
                               executor="here", progress="off", audit=False, replace=True,
                               record=f"{folder}/{keep}.fell" if record else None).facts
                return time.process_time() - begun, int(found["steps"].sum()), int(found["gradients"].sum())

            def a_step(record: bool, spent: Callable = spent, ratio: list = ratio) -> Callable[[], float]:
                def timed() -> float:
                    one, more = spent(few, record), spent(many, record)
                    whole, steps, gradients = (b - a for a, b in zip(one, more, strict=True))
                    ratio[:] = [gradients / steps, steps / (many - few)]
                    return whole / steps

                return timed

            found = interleaved({"own": timer(calls_of(function, d), 0.01), "none": a_step(False),
                                 "record": a_step(True)}, repeats)
        none, record = (np.median(found[key] - ratio[0] * found["own"]) for key in ("none", "record"))
        rows.append([motion.name, type(path).__name__, f"{ratio[1]:.1f}", ns(none), ns(record),
                     ns((record - none) * ratio[1]), str(bound), kept(1e9 * none, bound), kept(1e9 * record, bound)])
    return table(["motion", "path", "steps a draw", "no record, ns", "record, ns", "record, ns a draw", "bound",
                  "kept without", "with"], rows)


# ---- Python functions ------------------------------------------------------------------------------------------------


def python_calls(seconds: float, repeats: int) -> str:
    """Nanoseconds of a chain's step beyond the bare call of the Python function that it calls once."""
    rows = []
    for d in (2, 10, 100):
        x, gradient, same = np.linspace(-1.0, 1.0, d), np.empty(d), -np.linspace(-1.0, 1.0, d)

        def in_place(x: np.ndarray, gradient: np.ndarray, same: np.ndarray = same) -> float:
            gradient[:] = same
            return -1.5

        def pair(x: np.ndarray, same: np.ndarray = same) -> tuple[float, np.ndarray]:
            return -1.5, same

        for form, function, arguments, bound in (("in place", in_place, (x, gradient), 300), ("pair", pair, (x,), 700)):
            def bare(n: int, function: Callable = function, arguments: tuple = arguments) -> None:
                for _ in range(n):
                    function(*arguments)

            chain = fw.Chain(fw.Density(function, d, in_place=form == "in place"), x, path=fw.Jittered(32), seed=1,
                             step_size=1e-3)

            def a_step(chain: fw.Chain = chain) -> float:
                begun = time.thread_time()
                facts = chain.advance(200).facts
                return (time.thread_time() - begun) / facts["gradients"].sum()

            found = interleaved({"bare": timer(bare, seconds / 4), "step": a_step}, repeats)
            beyond = 1e9 * np.median(found["step"] - found["bare"])
            rows.append([form, f"{d}", ns(np.median(found["bare"])), f"{beyond:.0f}", str(bound), kept(beyond, bound)])
    return table(["form", "d", "bare, ns", "step beyond, ns", "bound of the call", "kept"], rows)


# ---- memory ----------------------------------------------------------------------------------------------------------


def step_times(name: str, d: int, seconds: float, repeats: int) -> tuple[np.ndarray, np.ndarray]:
    """(net seconds a step, seconds of one copy of d numbers), a number each repeat. The copies go round as many vectors
    as a step has, so that both find theirs in the same level of memory; the callbacks are timed over and over at the
    same place, where they are quickest, so that net times are on the long side."""
    motion, _, different = MOVED[name]
    target = targets.standard_normal(d)
    density = fw.Density(target.density, d, hessian_product=target.hessian_product)
    rng = np.random.default_rng(5)
    x, v, scale = rng.standard_normal(d), rng.standard_normal(d), rng.uniform(0.8, 1.25, d)
    ring = [rng.standard_normal(d) for _ in range(different)]
    spent = {"gradients": 0, "products": 0}

    def go(steps: int) -> float:
        begun = time.thread_time()
        end = fw.integrate(density, x, v, motion=motion, step_size=0.05, steps=steps, scale=scale, beta=1.0 / d)
        if end.status:
            raise RuntimeError(end.sentence)
        spent["gradients"], spent["products"] = end.gradients, end.products
        return time.thread_time() - begun

    def copies(n: int) -> None:
        for i in range(n):
            np.copyto(ring[i % different], ring[i % different - 1])

    callback = Callback(target, "standard_normal")
    # Making the chain of a path touches fresh pages: enough steps that their own time stands out.
    n = max(30, rounds_for(go, seconds))
    go(1)
    few = dict(spent)
    go(1 + n)
    calls = {key: (spent[key] - few[key]) / n for key in spent}
    works = {"step": lambda: (go(1 + n) - go(1)) / n, "copy": timer(copies, max(seconds, 1e-9 * d)),
             "gradient": timer(callback.gradients, seconds / 2)}
    if calls["products"]:
        works["product"] = timer(callback.products, seconds / 2)
    found = interleaved(works, repeats)
    net = found["step"] - calls["gradients"] * found["gradient"]
    return net - calls["products"] * found["product"] if calls["products"] else net, found["copy"]


def traffic(sizes: tuple[int, ...], seconds: float, repeats: int) -> str:
    """Net time of a step over the time that its bytes take at the bandwidth of a copy, both in one run."""
    rows = []
    for d in sizes:
        for name, (_, vectors, _) in MOVED.items():
            net, copy = step_times(name, d, seconds, repeats)
            ratio = np.median(net / (vectors * copy / 2))  # a copy reads one vector and writes one
            rows.append([name, f"{d:.0e}".replace("+0", ""), str(vectors), short_time(np.median(net)),
                         f"{16e-9 * d / np.median(copy):.1f}", f"{8e-9 * d * vectors / np.median(net):.1f}",
                         f"{ratio:.2f}", "1.3", kept(ratio, 1.3)])
    head = ["motion", "d", "vectors", "net a step", "copy, GB/s", "step, GB/s", "ratio", "bound", "kept"]
    return table(head, rows)


def growth(sizes: tuple[int, ...], seconds: float, repeats: int) -> str:
    """Net time of a step per element, and over what its bytes take at the bandwidth of that size of vectors."""
    rows = []
    for name in ("leapfrog", "surrogate"):
        _, vectors, different = MOVED[name]
        for d in sizes:
            net, copy = step_times(name, d, seconds, repeats)
            rows.append([name, f"{d:g}", f"{8 * d * different / 2**20:.3g}", f"{1e9 * np.median(net) / d:.2f}",
                         f"{16e-9 * d / np.median(copy):.1f}", f"{8e-9 * d * vectors / np.median(net):.1f}",
                         f"{np.median(net / (vectors * copy / 2)):.2f}"])
    head = ["motion", "d", "its vectors, MiB", "net, ns an element", "copy, GB/s", "step, GB/s", "ratio"]
    return table(head, rows)


def paths(sizes: tuple[int, ...], repeats: int) -> str:
    """Whole transitions: what a step takes beyond the callback with everything that a path does around it."""
    rows = []
    for d in sizes:
        target = targets.standard_normal(d)
        density, callback = fw.Density(target.density, d), Callback(target, "standard_normal")
        for motion in (fw.Leapfrog(), fw.Lagrangian(bend=0.5)):
            name = "leapfrog" if motion.name == "leapfrog" else "surrogate"
            pure, _ = step_times(name, d, 0.05, repeats)
            for path in (fw.Jittered(16), fw.NoUTurn()):
                chain = fw.Chain(density, np.zeros(d) + 0.1, motion=motion, path=path, seed=3, rank=0, beta=0.5 / d,
                                 step_size=0.6 * d**-0.25, scale=np.ones(d), adapt_scale=False)
                draws, counted = max(3, 3_000_000 // d), {}

                def a_step(chain: fw.Chain = chain, draws: int = draws, counted: dict = counted) -> float:
                    begun = time.thread_time()
                    facts = chain.block(draws, draws=False).facts
                    spent = time.thread_time() - begun
                    counted["gradients"] = facts["gradients"].sum() / facts["steps"].sum()
                    counted["steps"] = facts["steps"].mean()
                    return spent / facts["steps"].sum()

                found = interleaved({"gradient": timer(callback.gradients, 0.02), "step": a_step}, repeats)
                net = np.median(found["step"] - counted["gradients"] * found["gradient"])
                rows.append([motion.name, type(path).__name__, f"{d:g}", f"{counted['steps']:.0f}",
                             short_time(np.median(found["gradient"])), short_time(np.median(pure)), short_time(net),
                             f"{net / np.median(pure):.2f}"])
    return table(["motion", "path", "d", "steps a draw", "callback", "step alone", "in a path", "path / alone"], rows)


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--quick", action="store_true", help="d up to 1e5, shorter repeats")
    quick = parser.parse_args().quick
    seconds, repeats = (0.02, 5) if quick else (0.1, 9)
    print(f"{machine()}\nProcessor time, medians of {repeats} interleaved repeats, one thread; {busy()} before.\n")
    print(f"Small d: beyond the callbacks, per step, everything included\n\n{small(seconds, 2 * repeats + 1)}\n")
    print(f"The same by run, into memory and into a record on disk\n\n{whole_run(3 if quick else 5)}\n")
    print(f"Python functions\n\n{python_calls(seconds, 2 * repeats + 1)}\n", flush=True)
    if not quick:
        print(f"Memory traffic\n\n{traffic((1_000_000, 10_000_000), seconds, 5)}\n", flush=True)
    sizes = (100, 1_000, 10_000, 100_000) + (() if quick else (1_000_000, 10_000_000))
    print(f"Growth with d\n\n{growth(sizes, seconds, 5)}\n", flush=True)
    print(f"Steps in their paths\n\n{paths((1_000, 100_000), 5)}\n\n{busy()} after.")


if __name__ == "__main__":
    main()
