"""Checks that need no derivatives: what a density does to its arguments, far out, in two threads, and its speed."""

from __future__ import annotations

import contextlib
import math
import threading
import time
import warnings
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from fellwalk._core import count_disagreements, is_compiled
from fellwalk.audit_differences import Probe, Sight
from fellwalk.density import Density, brief

__all__ = ["Finding", "far_out", "forms", "repeats", "speed", "threads", "written"]

Array = NDArray[np.float64]

_MARK = 12345.678
_DISTANCES = (10.0, 100.0, 1e3, 1e6, 1e12, 1e150)
_THREAD_SECONDS, _THREAD_TRIES = 0.15, 4  # one try of a static array of 40 numbers was missed once in twenty


@dataclass(frozen=True)
class Finding:
    """One thing found. weight: "mistake" (the audit fails), "caution" or "note". about: what was looked at.

    where: name of the worst coordinate, or "". text: what was seen and how to look further.
    """

    weight: str
    about: str
    text: str
    where: str = ""


def written(probe: Probe, y: NDArray[np.float64]) -> list[Finding]:
    """Does the function write the whole gradient, and nothing of what stood there before?"""
    blank, marked = probe.at(y, math.nan), probe.at(y, _MARK)
    if blank.kind not in ("finite", "bad gradient") or marked.kind != "finite":
        return []
    names = probe.density.names
    a, b = (_natural_gradient(probe, y, fill) for fill in (0.0, _MARK))
    left = np.flatnonzero((b == _MARK) & (a == 0.0))
    if len(left):
        return [Finding("mistake", "gradient", f"The gradient of {names[left[0]]} is not written: the entry is left as "
                        f"it was before the call ({len(left)} of {len(a)} entries). Set every entry at every call.",
                        names[left[0]])]
    added = np.flatnonzero(np.abs((b - a) - _MARK) < 1e-6 * _MARK)
    if len(added):
        return [Finding("mistake", "gradient", f"The function adds to what stood in the gradient before (first in "
                        f"{names[added[0]]}): set it to 0 first, or use = in place of +=.", names[added[0]])]
    return []


def _natural_gradient(probe: Probe, y: NDArray[np.float64], fill: float) -> NDArray[np.float64]:
    slope = np.full(probe.density.natural_size, fill)
    with np.errstate(all="ignore"), warnings.catch_warnings():
        warnings.simplefilter("ignore")
        probe.natural.evaluate(probe.x_of(y), slope)
    return slope


def repeats(probe: Probe, y: NDArray[np.float64], other: NDArray[np.float64]) -> list[Finding]:
    """Does the same position give the same answer, also after a call elsewhere?"""
    first, second = probe.at(y), probe.at(y)
    probe.at(other)
    third = probe.at(y)
    worst, what = 0.0, ""
    for again in (second, third):
        if again.kind != first.kind:
            return [Finding("mistake", "repeats", "The same position gave a finite log density once and none the next "
                            f"time: {brief(probe.x_of(y))}. The function keeps something between calls, or draws "
                            "random numbers.")]
        if not first.finite:
            continue
        off = abs(again.value - first.value) / (1.0 + abs(first.value))
        slope = float(np.max(np.abs(again.gradient - first.gradient)) / (1e-300 + np.max(np.abs(first.gradient))))
        if max(off, slope) > worst:
            worst, what = max(off, slope), "log density" if off >= slope else "gradient"
    if worst > 1e-9:
        return [Finding("mistake", "repeats", f"The same position gave another {what} at another call (relative "
                        f"difference {worst:.2g}): the function draws random numbers, uses random parts of the data, "
                        "or keeps something from the call before. It must depend on the position alone.")]
    if worst > 0:
        return [Finding("caution", "repeats", f"The same position gave a {what} that differs by rounding (relative "
                        f"{worst:.1g}), as with libraries that divide sums over threads: runs will then not repeat bit "
                        "for bit. Set such libraries to one thread.")]
    return []


def forms(probe: Probe, y: NDArray[np.float64]) -> list[Finding]:
    """What a Python function does to its input, and the types and layout of what it gives."""
    density, x = probe.density, probe.x_of(y)
    given = x.copy()
    out = np.full(density.natural_size, np.nan)
    try:
        with np.errstate(all="ignore"), warnings.catch_warnings():
            warnings.simplefilter("ignore")
            if density.compiled:
                probe.natural.evaluate(given, out)
                answer: Any = None
            else:
                function: Any = density.function
                answer = function(given, out) if density.in_place else function(given)
    except Exception:
        return []  # said by the checks that look at exceptions
    found = []
    changed = np.flatnonzero((given != x) & ~(np.isnan(given) & np.isnan(x)))
    if len(changed):
        name = density.names[changed[0]]
        found.append(Finding("mistake", "input", f"The function changes its input ({len(changed)} of {len(x)} numbers, "
                             f"first {name}): work on a copy, as in x = x - m in place of x -= m.", name))
    if answer is None:
        return found
    value, gradient = (answer, out) if density.in_place else answer
    if isinstance(value, np.ndarray) and value.ndim:
        found.append(Finding("caution", "forms", f"The log density comes as an array of shape {value.shape}; "
                             "give a float."))
    kind = getattr(value, "dtype", None)
    slope = np.asarray(gradient) if not isinstance(gradient, np.ndarray) else gradient
    if kind == np.float32 or slope.dtype == np.float32:
        found.append(Finding("mistake", "precision", "The log density or its gradient comes in float32 (single "
                             "precision): compute and give float64, or rounding will look like a change of the "
                             "density."))
    elif not isinstance(gradient, np.ndarray):
        found.append(Finding("caution", "forms", f"The gradient comes as a {type(gradient).__name__}, which is turned "
                             "into an array at every call; give a NumPy array."))
    elif slope.dtype != np.float64 or not slope.flags.c_contiguous:
        found.append(Finding("caution", "forms", f"The gradient comes as {slope.dtype}"
                             f"{'' if slope.flags.c_contiguous else ', not contiguous,'} and is copied at every call; "
                             "give a contiguous float64 array."))
    return found


def single_precision(sights: list[Sight], noises: list[float]) -> list[Finding]:
    """Numbers that all fit into float32, or noise of that size, betray a computation in single precision."""
    values = np.array([s.value for s in sights])
    slopes = np.concatenate([s.gradient for s in sights])
    telling = (slopes != 0) & (np.abs(slopes) > 1e-30) & (np.abs(slopes) < 1e30)
    inexact = telling & (slopes * 64 != np.round(slopes * 64))
    hint = "compute in float64 throughout (dtype=np.float64; in JAX: jax_enable_x64)"
    with np.errstate(over="ignore"):
        if inexact.sum() >= 4 and np.all(slopes[inexact] == slopes[inexact].astype(np.float32)):
            return [Finding("mistake", "precision", f"Every gradient has no more digits than float32 holds (single "
                            f"precision): {hint}.")]
        odd = values * 64 != np.round(values * 64)
        if odd.sum() >= 3 and np.all(values[odd] == values[odd].astype(np.float32)):
            return [Finding("mistake", "precision", "Every log density has no more digits than float32 holds (single "
                            f"precision): {hint}.")]
    relative = np.median([n / max(1.0, abs(s.value)) for n, s in zip(noises, sights, strict=True)])
    if relative > 3e-9:
        return [Finding("caution", "precision", f"The log density is noisy, by {relative:.1g} of its size where "
                        f"float64 rounding is 1e-16. If single precision takes part: {hint}. If a solver with a "
                        "tolerance does: tighten it.")]
    return []


def far_out(probe: Probe, y: NDArray[np.float64], reach: NDArray[np.float64], rng: np.random.Generator
            ) -> tuple[list[Finding], list[str], NDArray[np.float64] | None]:
    """What happens up to 1e150 scales away. (findings, lines on the behaviour, a point just inside an edge or None)."""
    scale = np.where(np.isfinite(reach) & (reach > 0), reach, 1.0)
    axes = np.linspace(0, len(y) - 1, min(len(y), 12)).astype(int)
    rays = [sign * scale * np.eye(1, len(y), i)[0] for i in axes for sign in (1.0, -1.0)]
    rays += [scale * rng.standard_normal(len(y)) for _ in range(6)]
    names, inside = probe.density.coordinates, None
    found: dict[str, Any] = {}
    counts: dict[float, dict[str, Any]] = {distance: {} for distance in _DISTANCES}
    rising, tried = 0, 0
    here = probe.at(y).value + probe.log_jacobian(y)
    for number, ray in enumerate(rays):
        along = f"{names[axes[number // 2]]} {'up' if number % 2 == 0 else 'down'}" if number < 2 * len(axes) else ""
        heights = [here]
        for distance in _DISTANCES:
            with np.errstate(over="ignore"):
                at = y + distance * ray
            if not np.all(np.isfinite(at)) or not math.isfinite(probe.log_jacobian(at)):
                continue  # a chain does not call the function there
            sight = probe.at(at)
            counts[distance][sight.kind] = counts[distance].get(sight.kind, 0) + 1
            known = sight.kind in ("finite", "bad gradient")
            heights.append(sight.value + probe.log_jacobian(at) if known else -math.inf)
            finding = _far_finding(sight, distance, along, probe.x_of(at))
            if finding and (finding.about not in found or finding.weight == "mistake" != found[finding.about].weight):
                found[finding.about] = finding
            if inside is None and distance == 10.0 and sight.kind == "outside":
                inside = _edge(probe, y, ray, distance)
        tried += 1
        rising += len(heights) > 3 and heights[0] < heights[1] + 10 and heights[1] + 10 < heights[2] < heights[3] - 10
    if rising == tried:
        found["rising"] = Finding("mistake", "sign", "The log density rises without end in every direction tried: this "
                                  "looks like minus the log density (an energy, a cost). Change the sign of value and "
                                  "gradient.")
    lines = [f"{distance:g} scales away: " + ", ".join(f"{n} {kind}" for kind, n in sorted(kinds.items()))
             for distance, kinds in counts.items() if kinds]
    return list(found.values()), lines, inside


def _far_finding(sight: Sight, distance: float, along: str, x: NDArray[np.float64]) -> Finding | None:
    where = f"{distance:g} scales from the start" + (f" ({along})" if along else "") + f", at {brief(x)}"
    reachable = distance <= 1e6
    if sight.kind == "exception":
        kind = type(sight.error).__name__
        return Finding("mistake" if reachable else "note", "exception", f"The function raises {kind} ({sight.error}) "
                       f"{where}. A step that goes too far would stop the run there: return minus infinity instead.",
                       along)
    if sight.kind == "plus infinity":
        return Finding("mistake" if reachable else "note", "plus infinity", f"The log density is plus infinity "
                       f"{where}: no density has that. Outside the support return minus infinity.", along)
    if sight.kind == "NaN" and distance <= 1e3:
        return Finding("mistake" if distance <= 10 else "caution" if distance <= 100 else "note", "NaN", f"The log "
                       f"density is NaN {where}. Outside the support return minus infinity; inside, look for inf - "
                       "inf, 0/0 and logarithms of negative numbers.", along)
    if sight.kind == "bad gradient" and distance <= 1e3:
        return Finding("caution" if distance <= 10 else "note", "gradient far out",
                       f"The log density is finite but its gradient is not {where}.", along)
    return None


def _edge(probe: Probe, y: NDArray[np.float64], ray: NDArray[np.float64], outside: float) -> NDArray[np.float64] | None:
    """A point a little inside the edge of the support on a ray."""
    low, high = 0.0, outside
    for _ in range(30):
        middle = 0.5 * (low + high)
        if probe.at(y + middle * ray).finite:
            low = middle
        else:
            high = middle
    at = y + 0.98 * low * ray
    return at if low > 0 and probe.at(at).finite else None


def threads(density: Density, points: NDArray[np.float64]) -> list[Finding]:
    """Compiled: two threads at other points must not disturb each other. Python functions share the GIL: nothing."""
    if not is_compiled(density.function):
        return []
    target = density.target()
    values, gradients = np.empty(len(points)), np.empty(points.shape)
    for k, point in enumerate(points):
        slope = np.empty(len(point))
        _, values[k] = target.evaluate(point, slope)
        gradients[k] = slope
    begun = time.perf_counter()
    count_disagreements(target, points, values, gradients, 1)
    rounds = int(min(max(_THREAD_SECONDS / max(time.perf_counter() - begun, 1e-7), 2), 10**7))
    wrong = [0, 0]

    def work(which: int) -> None:
        mine = slice(which, None, 2)
        a, b, c = (np.ascontiguousarray(part[mine]) for part in (points, values, gradients))
        wrong[which] = count_disagreements(density.target(), a, b, c, rounds)

    for _ in range(_THREAD_TRIES):
        pair = [threading.Thread(target=work, args=(which,)) for which in (0, 1)]
        for thread in pair:
            thread.start()
        for thread in pair:
            thread.join()
        if any(wrong):
            break
    else:
        return []
    return [Finding("mistake", "threads", f"Called from two threads at once, the compiled function gave other numbers "
                    f"than from one ({sum(wrong)} of {rounds * len(points)} calls): it keeps intermediate results in a "
                    "static or global variable, or in a context that chains share. Use local variables.")]


def speed(probe: Probe, y: NDArray[np.float64], value: Callable[[Array], float] | None) -> dict[str, float]:
    """Seconds a call: "gradient" through the core, "function" called directly, "product", "value" when given."""
    density, x = probe.density, probe.x_of(y)
    target = density.target()
    nothing = np.zeros(1), np.zeros((1, len(y)))
    found = {"gradient": _timed(lambda n: count_disagreements(target, y[None, :], *nothing, n))}
    out = np.empty(density.natural_size)
    if not density.compiled:
        function: Any = density.function
        also = (out,) if density.in_place else ()
        found["function"] = _timed(lambda n: [function(x.copy(), *also) for _ in range(n)])
    if density.hessian_product is not None:
        p, product = np.ones(len(y)), np.empty(len(y))
        with contextlib.suppress(Exception):  # what it raises is a finding already
            target.evaluate(y.copy(), np.empty(len(y)))
            found["product"] = _timed(lambda n: [target.multiply(y, p, product) for _ in range(n)])
    if value is not None:
        found["value"] = _timed(lambda n: [value(x) for _ in range(n)])
    return found


def _timed(run: Callable[[int], object]) -> float:
    """Seconds a round, the best of five of about 10 ms."""
    n, best = 1, math.inf
    with np.errstate(all="ignore"), warnings.catch_warnings():
        warnings.simplefilter("ignore")
        for _ in range(8):
            begun = time.perf_counter()
            run(n)
            taken = time.perf_counter() - begun
            best = min(best, taken / n)
            n = min(max(n, int(0.01 / max(best, 1e-9))), 10**6)
            if taken > 0.2:
                break
    return best
