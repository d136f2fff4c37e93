"""Time per step of every motion, beside a NumPy version of the same step; the callbacks' own time is taken off both.

    python benchmarks/step_time.py            all dimensions, some minutes
    python benchmarks/step_time.py --quick    up to d = 1e4 and shorter repeats, under a minute

Two tables. "Pure step": `fellwalk.integrate` over n steps less the same over 0 steps, divided by n, so leapfrog and
surrogate steps share passes with their neighbours, as on jittered paths (csrc/src/kernels.h). "All included":
draws of `fellwalk.Chain.advance` on jittered paths of 1..16 steps, divided by the steps made: velocities, energies,
accept tests, facts and the copies of the draws included. The density is a standard normal, in C and in NumPy; its own
time, measured alone, is what "net" leaves out.
Before anything is timed, both versions of each motion must have gone the same way.
"""

import argparse
import gc
import time
from collections.abc import Callable

import numpy as np
import numpy_steps
from common import Callback, busy, fw, interleaved, machine, short_time, table, targets, timer

MOTIONS = {
    "leapfrog": None,
    "Lagrangian, surrogate, split": ("split", "surrogate"),
    "Lagrangian, surrogate, semi-explicit": ("semi-explicit", "surrogate"),
    "Lagrangian, product, split": ("split", "product"),
    "Lagrangian, product, semi-explicit": ("semi-explicit", "product"),
    "Lagrangian, difference, split": ("split", "difference"),
}
STEP, MOST = 0.05, 16


class NumpyNormal:
    """A standard normal in NumPy that counts its calls."""

    def __init__(self) -> None:
        self.gradients = self.products = 0

    def gradient(self, x: np.ndarray) -> tuple[float, np.ndarray]:
        """Log density (up to a constant) and gradient."""
        self.gradients += 1
        return -0.5 * float(x @ x), -x

    def product(self, x: np.ndarray, p: np.ndarray) -> np.ndarray:
        """H p."""
        self.products += 1
        return -p


class Case:
    """One motion in one dimension, both versions, from the same place with the same base metric."""

    def __init__(self, name: str, d: int) -> None:
        rng = np.random.default_rng(5)
        self.d, self.kind = d, MOTIONS[name]
        self.x, self.s = rng.standard_normal(d), rng.uniform(0.8, 1.25, d)
        self.v = np.sqrt(self.s) * rng.standard_normal(d)
        self.beta = 1.0 / d  # beta g'G0^-1 g is about 1, as with bend = 1
        target = targets.standard_normal(d)
        self.density = fw.Density(target.density, d, hessian_product=target.hessian_product)
        self.normal = NumpyNormal()
        if self.kind is None:
            self.motion: fw.Leapfrog | fw.Lagrangian = fw.Leapfrog()
            self.numpy: object = numpy_steps.Leapfrog(self.normal, self.s)
        else:
            scheme, curvature = self.kind
            self.motion = fw.Lagrangian(scheme=scheme, curvature=curvature)
            self.numpy = numpy_steps.Lagrangian(self.normal, self.s, self.beta, scheme, curvature)
        self.chain = fw.Chain(
            self.density,
            self.x,
            motion=self.motion,
            path=fw.Jittered(MOST),
            seed=3,
            step_size=STEP,
            scale=self.s,
            adapt_scale=False,
            beta=self.beta if self.kind else None,
        )
        self.rng = np.random.default_rng(3)
        self.check()

    def integrate(self, steps: int) -> fw.Trajectory:
        """Steps by the package; a failed one is an error."""
        end = fw.integrate(
            self.density,
            self.x,
            self.v,
            motion=self.motion,
            step_size=STEP,
            steps=steps,
            scale=self.s,
            beta=self.beta if self.kind else 0.0,
        )
        if end.status or end.steps != steps:
            raise RuntimeError(f"{self.motion}, d = {self.d}: {end.sentence}")
        return end

    def check(self) -> None:
        """Both versions go the same way: to rounding, or to the error of differences."""
        ours = self.integrate(5)
        theirs = numpy_steps.integrate(self.numpy, self.x, self.v, STEP, 5)
        # Forward differences of gradients lose half the digits; sums over 1e6 terms lose three of sixteen.
        tolerance = 1e-6 if self.kind and self.kind[1] == "difference" else 1e-11
        scale = np.abs(self.x).max()
        for a, b in ((ours.position, theirs.x), (ours.velocity, theirs.v)):
            if not np.allclose(a, b, rtol=0.0, atol=tolerance * scale):
                raise RuntimeError(f"{self.motion}, d = {self.d}: NumPy ends {np.abs(a - b).max()} away")

    def pure(self, seconds: float) -> tuple[Callable[[], float], Callable[[], float]]:
        """Two functions that time a step: of the package, and of NumPy."""
        return (
            _slope(lambda n: self.integrate(n), seconds),
            _slope(lambda n: numpy_steps.integrate(self.numpy, self.x, self.v, STEP, n), seconds),
        )

    def included(self, seconds: float) -> tuple[Callable[[], float], Callable[[], float]]:
        """Two functions that time a step with its share of a transition."""
        per = timer(lambda n: self.chain.advance(n), seconds)
        ours = max(1, round(seconds / per()))
        per = timer(lambda n: numpy_steps.jittered(self.numpy, self.x, STEP, MOST, n, self.rng), seconds)
        theirs = max(1, round(seconds / per()))

        def package() -> float:
            start = time.thread_time()
            facts = self.chain.advance(ours).facts
            return (time.thread_time() - start) / int(facts["steps"].sum())

        def plain() -> float:
            start = time.thread_time()
            _, made = numpy_steps.jittered(self.numpy, self.x, STEP, MOST, theirs, self.rng)
            return (time.thread_time() - start) / made

        return package, plain

    def calls(self, included: bool) -> tuple[tuple[float, float], tuple[float, float]]:
        """(gradients, products) a step, of the package and of NumPy."""
        self.normal.gradients = self.normal.products = 0
        if included:
            facts = self.chain.advance(200 if self.d < 100_000 else 4).facts
            steps = facts["steps"].sum()
            ours = facts["gradients"].sum() / steps, facts["products"].sum() / steps
            _, made = numpy_steps.jittered(self.numpy, self.x, STEP, MOST, 200 if self.d < 100_000 else 4, self.rng)
            return ours, (self.normal.gradients / made, self.normal.products / made)
        many, none = self.integrate(8), self.integrate(0)
        ours = (many.gradients - none.gradients) / 8, (many.products - none.products) / 8
        counts = []
        for n in (8, 0):
            before = self.normal.gradients, self.normal.products
            numpy_steps.integrate(self.numpy, self.x, self.v, STEP, n)
            counts.append((self.normal.gradients - before[0], self.normal.products - before[1]))
        return ours, tuple((a - b) / 8 for a, b in zip(*counts, strict=True))


def _slope(walk: Callable[[int], object], seconds: float) -> Callable[[], float]:
    """Times walk(n) less walk(0) a step, n chosen now for about `seconds`."""
    n = 4
    while True:
        marks = [time.thread_time()]
        for count in (0, n):
            walk(count)
            marks.append(time.thread_time())
        nothing, whole = np.diff(marks)
        if whole - nothing >= 0.5 * seconds:
            break
        n = int(n * min(max(2.0, 0.8 * seconds / max(whole - nothing, 1e-9)), 64.0))

    def timed() -> float:
        marks = [time.thread_time()]
        for count in (0, 0, 0, n):
            walk(count)
            marks.append(time.thread_time())
        *nothing, whole = np.diff(marks)
        return float(whole - np.median(nothing)) / n

    return timed


def _holding(call: Callable[[], object], n: int) -> None:
    """n calls with the last eight results held, as steps hold theirs: else the allocator gives every page back to the
    system and takes it again, at ten times the price of the arithmetic at d = 1e4."""
    held: list[object] = [None] * 8
    for i in range(n):
        held[i % 8] = call()


def measure(d: int, repeats: int, seconds: float) -> tuple[list[list[str]], list[list[str]], list[str]]:
    """Rows of both tables, and of the callbacks', for one dimension."""
    callback, normal = Callback(targets.standard_normal(d), "standard_normal"), NumpyNormal()
    cases = {name: Case(name, d) for name in MOTIONS}
    works = {
        "C gradient": timer(callback.gradients, seconds),
        "C product": timer(callback.products, seconds),
        "NumPy gradient": timer(lambda n: _holding(lambda: normal.gradient(callback.x), n), seconds),
        "NumPy product": timer(lambda n: _holding(lambda: normal.product(callback.x, callback.x), n), seconds),
    }
    calls = {}
    for name, case in cases.items():
        for kind in ("pure", "included"):
            works[f"{kind} {name}"], works[f"{kind} {name}, NumPy"] = getattr(case, kind)(seconds)
            calls[f"{kind} {name}"] = case.calls(kind == "included")
    times = interleaved(works, repeats)
    own = {key: np.median(times[key]) for key in list(works)[:4]}
    rows: dict[str, list[list[str]]] = {"pure": [], "included": []}
    for kind, found in rows.items():
        for name in MOTIONS:
            whole = times[f"{kind} {name}"], times[f"{kind} {name}, NumPy"]
            ours, theirs = calls[f"{kind} {name}"]
            net = (
                whole[0] - ours[0] * own["C gradient"] - ours[1] * own["C product"],
                whole[1] - theirs[0] * own["NumPy gradient"] - theirs[1] * own["NumPy product"],
            )
            ratio = np.median(net[1] / net[0])
            cells = [short_time(float(np.median(t))) for t in (*whole, *net)]
            found.append([name, f"{d:g}", *cells, f"{ratio:.3g}"])
    return rows["pure"], rows["included"], [f"{d:g}", *[short_time(float(t)) for t in own.values()]]


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--quick", action="store_true", help="d up to 1e4, shorter repeats")
    quick = parser.parse_args().quick
    repeats = 5
    gc.disable()  # its pauses would fall on whoever is being timed
    before = busy()
    pure, included, own = [], [], []
    for d in (2, 10, 100, 10_000) if quick else (2, 10, 100, 10_000, 1_000_000):
        a, b, c = measure(d, repeats=repeats, seconds=0.005 if quick else 0.03)
        pure, included, own = pure + a, included + b, [*own, c]
    head = ["motion", "d", "whole", "NumPy whole", "net", "NumPy net", "NumPy net / net"]
    print(machine())
    print(f"Processor time, medians of {repeats} interleaved repeats, one thread; {before} before, {busy()} after.\n")
    for title, rows in (("Pure step", pure), ("All included, per step", included)):
        rows.sort(key=lambda row: list(MOTIONS).index(row[0]))
        print(f"{title}\n\n{table(head, rows)}\n")
    names = ["d", "C gradient", "C product", "NumPy gradient", "NumPy product"]
    print(f"The callbacks' own times, which are taken off\n\n{table(names, own)}")


if __name__ == "__main__":
    main()
