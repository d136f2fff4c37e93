"""Is a motion reversible, is its log-Jacobian that of the map, does it converge, does it leave a law as it is?

A walk is a function ``walk(x, v, step_size, steps)``, x and v of shape (dimension,), which returns what has the
attributes of `fellwalk.Trajectory` that are read here: position, velocity, log_jacobian, log_ratio, status, sentence.
`walk_of` makes one of a density and a motion of this package; motions of others are checked in the same way.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy import stats

from fellwalk.density import Density
from fellwalk.errors import ArgumentError
from fellwalk.motions import Motion
from fellwalk.paths import Trajectory, integrate
from fellwalk.testing_report import EPS, demand, require

__all__ = ["accepting", "check_invariance", "check_log_jacobian", "check_order", "check_reversible", "jacobian",
           "walk_of"]

Array = NDArray[np.float64]
Walk = Callable[[Array, Array, float, int], Any]

STEP_ROUNDINGS = 20  # of the state, in one step
_STEP_ERROR = STEP_ROUNDINGS * EPS


def walk_of(density: Density, motion: Motion | None = None, *, scale: ArrayLike | None = None,
            beta: float = 0.0) -> Callable[[Array, Array, float, int], Trajectory]:
    """`fellwalk.integrate` over a density with a motion, base metric and bend, as a walk."""
    def walk(x: Array, v: Array, step_size: float, steps: int) -> Trajectory:
        return integrate(density, x, v, motion=motion, step_size=step_size, steps=steps, scale=scale, beta=beta)

    return walk


def _fine(walk: Walk, x: Array, v: Array, step: float, steps: int, doing: str) -> Any:
    found = walk(x, v, step, steps)
    require(found.status == 0, doing, f"the walk failed: {found.sentence}", x=x, v=v, step_size=step, steps=steps)
    return found


def _units(scale: ArrayLike | None, d: int) -> Array:
    return np.ones(d) if scale is None else np.sqrt(np.asarray(scale, dtype=float))


def jacobian(move: Callable[[Array], Array], state: Array, unit: Array, h: float) -> Array:
    """Jacobian of `move`, (n, n), in units `unit`: central differences at h, h/2, h/4, extrapolated (Richardson)."""
    rows = []
    for i in range(len(state)):
        found = []
        for size in (h, h / 2, h / 4):
            step = np.zeros(len(state))
            step[i] = size * unit[i]
            found.append((move(state + step) - move(state - step)) / (2.0 * size * unit))
        first = [(4.0 * found[1] - found[0]) / 3.0, (4.0 * found[2] - found[1]) / 3.0]
        rows.append((16.0 * first[1] - first[0]) / 15.0)
    return np.array(rows).T


def _jacobian_of(walk: Walk, x: Array, v: Array, step: float, steps: int, unit: Array, h: float) -> Array:
    def move(state: Array) -> Array:
        end = _fine(walk, state[: len(x)], state[len(x) :], step, steps, "a walk from beside the start")
        return np.concatenate([end.position, end.velocity])

    return jacobian(move, np.concatenate([x, v]), np.tile(unit, 2), h)


def check_reversible(walk: Walk, x: ArrayLike, v: ArrayLike, step_size: float, steps: int = 4, *,
                     scale: ArrayLike | None = None, step_error: float = _STEP_ERROR,
                     tolerance: float | None = None) -> None:
    """Does the walk come back to (x, v), by a negative step and by the velocity turned round, with the log-Jacobian and
    the log ratio of the other sign?

    scale: variances (dimension,) that distances are measured by. tolerance: in these units; left out, `step_error` a
    step of the largest number of the state, times the condition number of the path's Jacobian. step_error: 20
    roundings, unless a step has an error of its own (Hessian products by differences: 1e-8). Raises IdentityFailed.
    """
    x, v = np.array(x, dtype=float), np.array(v, dtype=float)
    unit = _units(scale, len(x))
    there = _fine(walk, x, v, step_size, steps, "the way there")
    reason = "given"
    if tolerance is None:
        size = max(1.0, float(np.abs(x / unit).max()), float(np.abs(v / unit).max()))
        condition = float(np.linalg.cond(_jacobian_of(walk, x, v, step_size, steps, unit, 1e-4)))
        tolerance = steps * step_error * size * condition
        reason = f"{steps} steps of {step_error:.2g}, times the condition {condition:.3g} of the path's Jacobian"
    at = {"x": x, "v": v, "step_size": step_size, "steps": steps}
    for way, turn, step in (("by a negative step", 1.0, -step_size), ("by the velocity turned round", -1.0, step_size)):
        back = _fine(walk, there.position, turn * there.velocity, step, steps, f"the way back {way}")
        demand(f"x after the way back {way}, in units of the scale", back.position / unit, x / unit, tolerance, reason,
               **at)
        demand(f"v after the way back {way}, in units of the scale", turn * back.velocity / unit, v / unit, tolerance,
               reason, **at)
        for name in ("log_jacobian", "log_ratio"):  # sums of logarithms of numbers near 1, and differences of energies
            demand(f"{name} back {way} = -{name} there", getattr(back, name), -getattr(there, name), 100 * tolerance,
                   f"100 times that of the state, which is {reason}", **at)


def check_log_jacobian(walk: Walk, x: ArrayLike, v: ArrayLike, step_size: float, steps: int = 1, *,
                       scale: ArrayLike | None = None, h: float = 0.002, tolerance: float | None = None) -> None:
    """Is log_jacobian the logarithm of |det d(position, velocity) / d(x, v)|, by extrapolated differences?

    h: largest step of the differences, in units of the scale. tolerance: left out, ten times the change when h is
    doubled and the roundings of the differences. It costs 24 walks a dimension. Raises IdentityFailed.
    """
    x, v = np.array(x, dtype=float), np.array(v, dtype=float)
    unit = _units(scale, len(x))
    found = _fine(walk, x, v, step_size, steps, "the walk")
    matrix = _jacobian_of(walk, x, v, step_size, steps, unit, h)
    sign, right = np.linalg.slogdet(matrix)
    at = {"x": x, "v": v, "step_size": step_size, "steps": steps}
    require(sign == 1.0, "det > 0", f"the determinant of the map has sign {sign}", **at)
    reason = "given"
    if tolerance is None:
        wider = np.linalg.slogdet(_jacobian_of(walk, x, v, step_size, steps, unit, 2 * h))[1]
        size = max(1.0, float(np.abs(x / unit).max()), float(np.abs(v / unit).max()))
        rounding = 2 * len(x) * float(np.linalg.cond(matrix)) * STEP_ROUNDINGS * steps * EPS * size / h
        tolerance = 10.0 * abs(float(wider - right)) + rounding
        reason = f"differences of step {h:g}: ten times their change with the step, roundings {rounding:.2g}"
    demand("log_jacobian = log |det of the map|", found.log_jacobian, right, tolerance, reason, **at)


def check_order(walk: Walk, x: ArrayLike, v: ArrayLike, time: float, steps: int = 24, *, order: float = 2.0,
                consistent: bool = True, exact: tuple[ArrayLike, ArrayLike, float] | None = None,
                scale: ArrayLike | None = None, tolerance: float = 0.1) -> None:
    """Do the errors of position, velocity and log-Jacobian after `time` fall as step^order?

    exact: position, velocity and log-Jacobian of the exact motion, which walks of `steps` and 2 `steps` steps are
    compared with; left out, differences between walks of `steps`, 2 `steps` and 4 `steps` steps stand for errors.
    consistent: the walk follows a flow that conserves the energy net of the log-Jacobian, so its log ratio must go to 0
    as fast. scale: variances that distances are measured by. tolerance: of the observed order. Quantities whose errors
    are mere rounding are left out; ArgumentError when that is all of them. Raises IdentityFailed.
    """
    x, v = np.array(x, dtype=float), np.array(v, dtype=float)
    unit = _units(scale, len(x))
    counts = (steps, 2 * steps) if exact is not None else (steps, 2 * steps, 4 * steps)
    ends = [(end.position, end.velocity, end.log_jacobian, end.log_ratio)
            for end in (_fine(walk, x, v, time / n, n, "the walk") for n in counts)]
    others = ends[1:] if exact is None else [(*exact, 0.0)] * 2
    at = {"x": x, "v": v, "time": time, "steps": steps}
    size = max(1.0, *(float(np.abs(a / unit).max()) for a in (x, v)))
    noise = 1e4 * steps * EPS * size  # rounding would be more than 1% of a smaller error
    seen = 0
    for i, (name, u) in enumerate((("position", unit), ("velocity", unit), ("log_jacobian", 1.0), ("log_ratio", 1.0))):
        if name == "log_ratio" and not consistent:
            continue
        pairs = [(end[i], 0.0) for end in ends[-2:]] if name == "log_ratio" else [
            (a[i], b[i]) for a, b in zip(ends, others, strict=False)]
        coarse, fine = (float(np.abs((np.asarray(a) - np.asarray(b)) / u).max()) for a, b in pairs)
        if max(coarse, fine) < noise:
            continue
        seen += 1
        with np.errstate(all="ignore"):
            demand(f"order of {name} ({coarse:.3g} with the step, {fine:.3g} with half of it)",
                   float(np.log2(np.float64(coarse) / fine)), order, tolerance, "of the observed order", **at)
    if not seen:
        raise ArgumentError("all errors are mere rounding, so no order can be seen; take fewer steps or a longer time")


def accepting(walk: Walk, velocities: Array, step_size: float, steps: int, rng: np.random.Generator
              ) -> Callable[[Array], Array]:
    """A move of draws (n, dimension) for `check_invariance`: one path each from velocities (n, dimension), drawn given
    the positions, accepted with probability min(1, exp(log ratio)); a failed path is rejected."""
    def move(draws: Array) -> Array:
        ends = draws.copy()
        for i, (x, v, u) in enumerate(zip(draws, velocities, rng.random(len(draws)), strict=True)):
            end = walk(x, v, step_size, steps)
            if end.status == 0 and math.log(max(u, 1e-300)) < end.log_ratio:
                ends[i] = end.position
        return ends

    return move


def check_invariance(move: Callable[[Array], Array], draws: Array,
                     laws: Mapping[str, tuple[Callable[[Array], Array], Callable[[Array], Array]]], *,
                     false_alarm: float = 1e-6, least_moved: float = 0.2) -> None:
    """Do independent exact draws (n, dimension) still have their laws after `move`?

    laws: by name, a function of draws with the distribution function of its values, as `KnownDensity.laws`. Compared by
    Kolmogorov and Smirnov's test; false_alarm: the rate at which all laws together fail for nothing (over the choice of
    random numbers: fix the seed). least_moved: share of the draws that must have moved, since a move that stays where
    it is leaves any law as it is. Raises IdentityFailed; ArgumentError when the draws do not have the laws at first.
    """
    limit = false_alarm / len(laws)

    def chance(of: Callable[[Array], Array], cdf: Callable[[Array], Array], x: Array) -> float:
        values = np.asarray(of(x), dtype=float)
        return float(stats.kstest(values, cdf).pvalue) if np.all(np.isfinite(values)) else 0.0

    for name, (of, cdf) in laws.items():
        if not chance(of, cdf, draws) >= limit:
            raise ArgumentError(f"the draws given do not have the law {name!r} themselves, so nothing can be seen")
    ends = np.asarray(move(draws.copy()), dtype=float)
    moved = float(np.any(ends != draws, axis=1).mean())
    require(moved >= least_moved, "draws move", f"{moved:.2%} of the draws moved, at least {least_moved:.2%} must")
    for name, (of, cdf) in laws.items():
        p = chance(of, cdf, ends)
        quartiles = np.quantile(of(ends), [0.25, 0.5, 0.75])
        require(p >= limit, f"the law of {name!r} after the move", f"chance {p:.2g} by Kolmogorov and Smirnov's test "
                f"of {len(ends)} draws, below {limit:.2g} (false alarms {false_alarm:g} for {len(laws)} laws together);"
                f" its quartiles {quartiles} stand at {cdf(quartiles)} of the law, where 0.25, 0.5, 0.75 are right")
