"""What the package adds to the user's function: small d, Python functions, memory traffic, growth with d.

    python benchmarks/speed.py            all of it, five minutes of one processor
    python benchmarks/speed.py --quick    d up to 1e5, shorter repeats, half a minute

Every line has its bound beside it and says whether it was kept. Net times leave out the density's own calls, timed
alone in the same run; of repeats the least is taken, as everything that disturbs a time makes it longer.
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
from common import HERE, _build, _repeat, busy, fw, machine, rounds_for, short_time, table, targets
from scipy import LowLevelCallable

# Vectors read and written in one step: the table in csrc/src/kernels.h, which tests/test_speed_counts.py checks.
# Last: how many different vectors that are, which decides the memory level they come from.
MOVED = {
    "leapfrog": (fw.Leapfrog(), 10, 4),
    "surrogate": (fw.Lagrangian(curvature="surrogate"), 13, 5),
    "product, split": (fw.Lagrangian(curvature="product"), 27, 8),
    "product, semi-explicit": (fw.Lagrangian(curvature="product", scheme="semi-explicit"), 35, 8),
    "difference, split": (fw.Lagrangian(curvature="difference"), 34, 8),
    "difference, semi-explicit": (fw.Lagrangian(curvature="difference", scheme="semi-explicit"), 41, 8),
}


def least(work: Callable[[int], object], seconds: float, repeats: int = 7) -> float:
    """Least seconds of one of n rounds of work(n), n chosen for about `seconds`."""
    n = rounds_for(work, seconds)
    found = []
    for _ in range(repeats):
        begun = time.thread_time()
        work(n)
        found.append((time.thread_time() - begun) / n)
    return min(found)


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


def own_time(function: LowLevelCallable, d: int, seconds: float) -> float:
    """Seconds of a bare call from C."""
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

    return least(calls, seconds)


def small(seconds: float) -> str:
    """d = 10: everything included, per step."""
    d, rows = 10, []
    makes = {"C": targets.standard_normal(d).density, "Numba": numba_normal(), "Cython": cython_normal()}
    for make, function in makes.items():
        own = own_time(function, d, seconds)
        for motion, bound in ((fw.Leapfrog(), 100), (fw.Lagrangian(bend=0.5), 200)):
            for path in (fw.Jittered(16), fw.NoUTurn()):
                chain = fw.Chain(fw.Density(function, d), np.full(d, 0.1), motion=motion, path=path, seed=3, settle=300)
                chain.settle()
                draws, found = 2000, []
                for _ in range(15):
                    begun = time.thread_time()
                    facts = chain.advance(draws).facts
                    spent = time.thread_time() - begun
                    found.append((spent - facts["gradients"].sum() * own) / facts["steps"].sum())
                net, a_draw = 1e9 * min(found), facts["steps"].mean()
                rows.append([make, motion.name, type(path).__name__, f"{a_draw:.1f}", f"{1e9 * own:.1f}", f"{net:.0f}",
                             str(bound), "yes" if net <= bound else "NO"])
    return table(["density", "motion", "path", "steps a draw", "own ns", "beyond, ns", "bound", "kept"], rows)


# ---- Python functions ------------------------------------------------------------------------------------------------


def python_calls(seconds: float) -> str:
    """Nanoseconds of a chain's step beyond the bare call of the Python function that it calls once."""
    rows = []
    for d in (2, 10, 100):
        x, gradient, kept = np.linspace(-1.0, 1.0, d), np.empty(d), -np.linspace(-1.0, 1.0, d)

        def in_place(x: np.ndarray, gradient: np.ndarray, kept: np.ndarray = kept) -> float:
            gradient[:] = kept
            return -1.5

        def pair(x: np.ndarray, kept: np.ndarray = kept) -> tuple[float, np.ndarray]:
            return -1.5, kept

        for form, function, arguments, bound in (("in place", in_place, (x, gradient), 300), ("pair", pair, (x,), 700)):
            def bare(n: int, function: Callable = function, arguments: tuple = arguments) -> None:
                for _ in range(n):
                    function(*arguments)

            density = fw.Density(function, d, in_place=form == "in place")
            chain = fw.Chain(density, x, path=fw.Jittered(32), seed=1, step_size=1e-3)
            whole = []
            for _ in range(15):
                begun = time.thread_time()
                facts = chain.advance(200).facts
                whole.append((time.thread_time() - begun) / facts["gradients"].sum())
            own = least(bare, seconds)
            beyond = 1e9 * (min(whole) - own)
            rows.append([form, f"{d}", f"{1e9 * own:.0f}", f"{beyond:.0f}", str(bound),
                         "yes" if beyond <= bound else "NO"])
    return table(["form", "d", "bare, ns", "step beyond, ns", "bound of the call", "kept"], rows)


# ---- memory ----------------------------------------------------------------------------------------------------------


def step_times(name: str, d: int, seconds: float, repeats: int) -> tuple[float, float]:
    """(net seconds a step, seconds of one copy of d numbers), interleaved. The copies go round as many vectors as a
    step has, so that both find theirs in the same level of memory."""
    motion, _, different = MOVED[name]
    target = targets.standard_normal(d)
    density = fw.Density(target.density, d, hessian_product=target.hessian_product)
    rng = np.random.default_rng(5)
    x, v, scale = rng.standard_normal(d), rng.standard_normal(d), rng.uniform(0.8, 1.25, d)
    ring = [rng.standard_normal(d) for _ in range(different)]
    spent = {"gradients": 0, "products": 0}

    def go(steps: int) -> None:
        end = fw.integrate(density, x, v, motion=motion, step_size=0.05, steps=steps, scale=scale, beta=1.0 / d)
        if end.status:
            raise RuntimeError(end.sentence)
        spent["gradients"], spent["products"] = end.gradients, end.products

    def copies(n: int) -> None:
        for i in range(n):
            np.copyto(ring[i % different], ring[i % different - 1])

    from common import Callback

    callback = Callback(target, "standard_normal")
    # Making the chain of a path touches fresh pages: enough steps that their own time stands out.
    n, m = max(6 if d > 1_000_000 else 30, rounds_for(go, seconds)), max(2 * different, rounds_for(copies, seconds))
    k = max(1, rounds_for(callback.gradients, seconds))
    go(1)
    few = dict(spent)
    go(1 + n)
    calls = {key: (spent[key] - few[key]) / n for key in spent}
    times: dict[str, list[float]] = {key: [] for key in ("one", "more", "copy", "gradient", "product")}
    for _ in range(repeats):
        marks = [time.thread_time()]
        for work in (lambda: go(1), lambda: go(1 + n), lambda: copies(m), lambda: callback.gradients(k),
                     lambda: callback.products(k)):
            work()
            marks.append(time.thread_time())
        one, more, copied, gradients, products = np.diff(marks)
        times["one"].append(one)
        times["more"].append(more)
        times["copy"].append(copied / m)
        times["gradient"].append(gradients / k)
        times["product"].append(products / k)
    best = {key: min(found) for key, found in times.items()}
    net = (best["more"] - best["one"]) / n - calls["gradients"] * best["gradient"] - calls["products"] * best["product"]
    return net, best["copy"]


def traffic(seconds: float, repeats: int) -> str:
    """d = 1e6: net time of a step over the time that its bytes take at the bandwidth of a copy."""
    d, rows = 1_000_000, []
    for name, (_, vectors, _) in MOVED.items():
        net, copy = step_times(name, d, seconds, repeats)
        ratio = net / (vectors * copy / 2)  # a copy reads one vector and writes one
        rows.append([name, str(vectors), short_time(net), f"{16 * d / copy / 1e9:.1f}",
                     f"{8 * d * vectors / net / 1e9:.1f}", f"{ratio:.2f}", "1.3", "yes" if ratio <= 1.3 else "NO"])
    head = ["motion", "vectors", "net a step", "copy, GB/s", "step, GB/s", "ratio", "bound", "kept"]
    return table(head, rows)


def growth(sizes: tuple[int, ...], seconds: float, repeats: int) -> str:
    """Net time of a step per element, and over what its bytes take at the bandwidth of that size of vectors."""
    rows = []
    for name in ("leapfrog", "surrogate"):
        _, vectors, different = MOVED[name]
        found = {d: step_times(name, d, seconds, repeats) for d in sizes}
        for d, (net, copy) in found.items():
            rows.append([name, f"{d:g}", f"{8 * d * different / 2**20:.3g}", f"{1e9 * net / d:.2f}",
                         f"{16 * d / copy / 1e9:.1f}", f"{8 * d * vectors / net / 1e9:.1f}",
                         f"{net / (vectors * copy / 2):.2f}"])
    head = ["motion", "d", "its vectors, MiB", "net, ns an element", "copy, GB/s", "step, GB/s", "ratio"]
    return table(head, rows)


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--quick", action="store_true", help="d up to 1e5, shorter repeats")
    quick = parser.parse_args().quick
    seconds, repeats = (0.02, 5) if quick else (0.1, 9)
    print(f"{machine()}\nProcessor time, least of repeats, one thread; {busy()} before.\n")
    print(f"Small d: beyond the callbacks, per step, everything included\n\n{small(seconds)}\n")
    print(f"Python functions\n\n{python_calls(seconds)}\n")
    if not quick:
        print(f"Memory traffic, d = 1e6\n\n{traffic(seconds, repeats)}\n")
    sizes = (100, 1_000, 10_000, 100_000) + (() if quick else (1_000_000, 10_000_000))
    print(f"Growth with d\n\n{growth(sizes, seconds, repeats)}\n\n{busy()} after.")


if __name__ == "__main__":
    main()
