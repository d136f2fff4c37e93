"""What a wrong gradient looks like: the usual mistakes, recognised from a coordinate's values at several points."""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from fellwalk.audit_differences import Probe, differentiate
from fellwalk.audit_gradient import Compared, _line

__all__ = ["guess"]

Array = NDArray[np.float64]

NO_PATTERN = ("The difference follows no pattern known here: take the log density apart, audit one term at a time, and "
              "the term that fails alone is the one to look at.")


def guess(probe: Probe, points: Sequence[Compared], i: int) -> str:
    """One or two sentences on what is probably wrong with entry i of the gradient, and where to look."""
    seen = [p for p in points if np.isfinite(p.right[i]) and p.error[i] <= 1e-3 * max(abs(p.right[i]), abs(p.given[i]))]
    seen = seen or [p for p in points if np.isfinite(p.right[i])]
    g, r = (np.array([getattr(p, key)[i] for p in seen]) for key in ("given", "right"))
    tolerance = np.array([p.tolerance[i] for p in seen]) + 1e-6 * np.maximum(np.abs(g), np.abs(r))
    y = np.array([p.y[i] for p in seen])
    for found in (_factor(seen, i, g, r, tolerance), _exchanged(seen, i), _constant(g, r, tolerance),
                  _variable(probe, i, y, g, r, tolerance), _prior(probe, seen, i, y, g - r, tolerance)):
        if found:
            return found
    return NO_PATTERN


def _factor(seen: Sequence[Compared], i: int, g: Array, r: Array, tolerance: Array) -> str | None:
    if np.all(np.abs(g) <= tolerance):
        return "It is 0 at every point tried: this entry seems never to be filled. Look for it in your function."
    best = int(np.argmax(np.abs(r)))
    if r[best] == 0 or not np.all(np.abs(g - g[best] / r[best] * r) <= (1 + abs(g[best] / r[best])) * tolerance):
        return None
    ratio = g[best] / r[best]
    everywhere = _shared(seen, ratio)
    what = "the whole gradient" if everywhere else "this entry"
    many = f"at all {len(seen)} points" if len(seen) > 1 else "here"
    if abs(ratio + 1.0) < 1e-3:
        return f"The sign of {what} is wrong {many}: look for a minus too many or too few."
    for value, words in ((2.0, "twice"), (0.5, "half of")):
        if abs(ratio / value - 1.0) < 1e-3:
            return (f"It is {words} what it should be {many} ({what}): look for a forgotten or doubled factor 2, as in "
                    "the derivative of -x^2/2.")
    if len(seen) > 1 and np.ptp(r) > 0.05 * np.max(np.abs(r)):
        return (f"It is {ratio:.6g} times what it should be {many} ({what}): look for a factor that stands in the "
                "value or in the gradient only: a number of data, a variance in place of a standard deviation, a unit.")
    return None


def _shared(seen: Sequence[Compared], ratio: float) -> bool:
    for p in seen:
        there = np.isfinite(p.right)
        if there.sum() < 2 or not np.all(np.abs(p.given - ratio * p.right)[there] <= (
                (1 + abs(ratio)) * p.tolerance + 1e-6 * np.abs(p.right))[there]):
            return False
    return True


def _exchanged(seen: Sequence[Compared], i: int) -> str | None:
    for j in range(len(seen[0].y)):
        if j == i or not all(np.isfinite(p.right[j]) for p in seen):
            continue
        room = [p.tolerance[i] + p.tolerance[j] + 1e-6 * abs(p.right[j]) for p in seen]
        if len(seen) > 1 and all(abs(p.given[i] - p.right[j]) <= t for p, t in zip(seen, room, strict=True)):
            both = all(abs(p.given[j] - p.right[i]) <= t + 1e-6 * abs(p.right[i])
                       for p, t in zip(seen, room, strict=True))
            how = "are exchanged" if both else "are mixed up (this one holds the other's)"
            return f"Entries {i} and {j} of the gradient {how}: look at their order."
    return None


def _constant(g: Array, r: Array, tolerance: Array) -> str | None:
    apart = g - r
    middle = float(apart[np.argmin(tolerance)])
    if len(g) < 2 or np.ptp(r) <= 0.01 * np.max(np.abs(r)) or not np.all(np.abs(apart - middle) <= 2 * tolerance):
        return None
    if abs(abs(middle) - 1.0) < 1e-4:
        side = "lacks" if middle < 0 else "has"
        return (f"It is off by {middle:+.6g} at every point: the gradient {side} the 1 that belongs to the "
                "log-Jacobian of a parameter walked in its logarithm (the value has + log t, so its derivative with "
                "respect to log t needs + 1; leave both out, or put both in).")
    return (f"It is off by {middle:+.6g} at every point: a term linear in this coordinate, such as n times it or a "
            "log-Jacobian, stands in the value or in the gradient only.")


def _variable(probe: Probe, i: int, y: Array, g: Array, r: Array, tolerance: Array) -> str | None:
    if len(g) < 2 or not np.all(np.abs(r) > 0):
        return None
    if probe.maps is not None:
        slopes = np.array([_own_slope(probe, at, i) for at in y])
        if np.all(np.isfinite(slopes)) and np.ptp(slopes) > 0.02 * np.max(np.abs(slopes)):
            free = ("the derivative with respect to the free coordinate (the logarithm, say) where that with respect "
                    "to the natural value belongs")
            for power, words in ((1.0, free), (-1.0, "a chain rule factor that fellwalk puts in by itself")):
                if np.all(np.abs(g - r * slopes**power) <= (1 + np.abs(slopes**power)) * tolerance):
                    return f"The function seems to give {words}: give the derivative with respect to the natural value."
    with np.errstate(all="ignore"):
        factors = {"exp(x)": np.exp(y), "exp(-x)": np.exp(-y), "x": y, "1/x": 1 / y}
    for words, factor in factors.items():
        if not np.all(np.isfinite(factor)) or np.ptp(factor) <= 0.02 * np.max(np.abs(factor)):
            continue
        if np.all(np.abs(g * factor - r) <= (1 + np.abs(factor)) * tolerance):
            return (f"It lacks the factor {words}, x being this coordinate: the chain rule factor of a transformed "
                    "parameter, most likely.")
    return None


def _own_slope(probe: Probe, y: float, i: int) -> float:
    """d natural / d free of an elementwise coordinate, from the log-Jacobian-free pull-back of a unit gradient."""
    parameters = probe.density.parameters
    assert parameters is not None
    assert probe.maps is not None
    for name, where in parameters.slices(free=True).items():
        if where.start <= i < where.stop:
            kind = parameters.kinds[name]
            if kind.joint:
                return math.nan
            point = np.zeros(parameters.dimension)
            point[i] = y
            return float(probe.maps.pull(point, np.ones(parameters.size), False)[i])
    return math.nan


def _prior(probe: Probe, seen: Sequence[Compared], i: int, y: Array, apart: Array,
           tolerance: Array) -> str | None:
    natural = y if probe.maps is None else np.array([probe.x_of(p.y)[_natural_place(probe, i)] for p in seen])
    slopes = np.ones(len(y)) if probe.maps is None else np.array([_own_slope(probe, at, i) for at in y])
    if np.all(np.isfinite(slopes)) and len(y) >= 3:
        design = np.column_stack([slopes, slopes * natural])
        (a, b), *_ = np.linalg.lstsq(design / tolerance[:, None], apart / tolerance, rcond=None)
        if b != 0 and np.all(np.abs(apart - design @ (a, b)) <= 3 * tolerance + 1e-4 * np.max(np.abs(apart))):
            width = 1 / math.sqrt(abs(b))
            centre = -a / b if abs(a / b) > 1e-6 * width else 0.0
            where = "the value but not in the gradient" if b > 0 else "the gradient but not in the value"
            return (f"The difference is linear in this coordinate, as if a normal term of centre {centre:.4g} and "
                    f"width {width:.4g} stood in {where}: a forgotten prior term, most likely.")
    if len(probe.density.names) > 1 and _alone(probe, seen, i, apart, tolerance):
        return ("The difference depends on this coordinate alone, whatever the others are: a prior term of it stands "
                "in the value or in the gradient only, most likely.")
    return None


def _natural_place(probe: Probe, i: int) -> int:
    parameters = probe.density.parameters
    assert parameters is not None
    for name, where in parameters.slices(free=True).items():
        if where.start <= i < where.stop:
            return parameters.slices()[name].start + i - where.start
    return 0


def _alone(probe: Probe, seen: Sequence[Compared], i: int, apart: Array, tolerance: Array) -> bool:
    """With this coordinate held and all others moved, does the difference stay?"""
    rng = np.random.default_rng(i)
    base = seen[0]
    checked = 0
    for _ in range(3):
        y = base.y + np.nan_to_num(base.reach) * rng.standard_normal(len(base.y))
        y[i] = base.y[i]
        sight = probe.at(y)
        if not sight.finite:
            continue
        slope = differentiate(_line(probe, y, i), sight.value, base.reach[i], 0.0)
        if not abs((sight.gradient[i] - slope.value) - apart[0]) <= 10 * slope.error + 2 * tolerance[0]:
            return False
        checked += 1
    return checked > 1
