"""What is wrong with a density, before a long run: derivatives, repeatability, behaviour far out, threads, speed."""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from fellwalk import audit_checks as checks
from fellwalk.audit_checks import Finding
from fellwalk.audit_differences import Probe, Sight
from fellwalk.audit_gradient import Compared, compare, compare_along, reaches, suspects
from fellwalk.audit_guesses import guess
from fellwalk.audit_products import products
from fellwalk.density import Density, as_vector, brief
from fellwalk.errors import ArgumentError, AuditError, StartError
from fellwalk.parameter_kinds import Kind
from fellwalk.starts import free_starts
from fellwalk.table import wrap

__all__ = ["Audit", "Finding", "audit", "glance", "glance_at_start"]

Array = NDArray[np.float64]
Places = NDArray[np.intp]

_ALL = 300  # up to so many coordinates each is looked at by itself; beyond, in groups, and those of a bad group
_WEIGHTS = ("mistake", "caution", "note")


@dataclass(frozen=True)
class Audit:
    """What an audit has found; print it. `ok`: no mistake was found.

    findings: `Finding` with weight ("mistake", "caution", "note"), about, where and text. points: (label, position in
    natural values) of the points where the gradient was compared. compared: how many coordinates were looked at one by
    one. seconds: by what was timed. behaviour: lines on what was met far out. calls: evaluations spent.
    """

    findings: tuple[Finding, ...]
    points: tuple[tuple[str, NDArray[np.float64]], ...]
    dimension: int
    compared: int
    seconds: Mapping[str, float]
    behaviour: tuple[str, ...]
    calls: int
    largest_share: float = field(default=math.nan)

    @property
    def ok(self) -> bool:
        """Was no mistake found?"""
        return not self.mistakes

    @property
    def mistakes(self) -> tuple[Finding, ...]:
        """The findings that make the audit fail."""
        return tuple(finding for finding in self.findings if finding.weight == "mistake")

    def __str__(self) -> str:
        lines = [f"Audit of a density of {self.dimension} coordinates: {len(self.points)} points, {self.calls} calls."]
        for finding in self.findings:
            lines += ["", f"{finding.weight.capitalize()}: {finding.text}"]
        if self.ok and not math.isnan(self.largest_share):
            all_seen = self.compared == self.dimension
            where = "each coordinate" if all_seen else f"{self.compared} coordinates and in all groups of coordinates"
            lines += ["", (f"The gradient agrees with differences of the log density in {where}, within their errors "
                           f"(largest difference {self.largest_share:.1g} of the derivative).")]
        lines += ["", *self._speed()]
        lines += ["", "Far out:", *(f"  {line}" for line in self.behaviour)] if self.behaviour else []
        count = len(self.mistakes)
        lines += ["", "No mistake found." if self.ok else f"{count} mistake{'s' * (count > 1)} found."]
        return "\n".join(row for line in lines for row in (wrap(line) if line else [""]))

    def _speed(self) -> list[str]:
        s = self.seconds
        if "gradient" not in s:
            return []
        lines = [f"One log density with its gradient takes {_time(s['gradient'])}."]
        if "function" in s:
            over = s["gradient"] - s["function"]
            lines[0] = lines[0][:-1] + ("; the call from the core adds nothing that can be measured."
                                        if over < 0.02 * s["gradient"] else
                                        f", {_time(over)} of it in the call from the core.")
        if "value" in s:
            lines.append(f"The log density alone takes {_time(s['value'])}, so the gradient costs "
                         f"{s['gradient'] / s['value'] - 1:.1f} times as much again.")
        if "product" in s:
            share = s["product"] / s["gradient"]
            lines.append(f"A Hessian product takes {_time(s['product'])}, {share:.1f} gradients.")
        return lines


def _time(seconds: float) -> str:
    for unit, size in (("seconds", 1.0), ("milliseconds", 1e-3), ("microseconds", 1e-6)):
        if seconds >= size:
            return f"{seconds / size:.3g} {unit}"
    return f"{seconds * 1e9:.3g} nanoseconds"


def audit(density: Density, x: ArrayLike | Mapping[str, ArrayLike] | None = None, *, seed: int = 0,
          value: Callable[[NDArray[np.float64]], float] | None = None) -> Audit:
    """Look for mistakes in a density: a thousand calls or so for ten coordinates, none of them kept.

    x: a point inside the support, (dimension,), or natural values (flat or a dict) with `fellwalk.Parameters`; left
        out: the density's own start; without one, a point drawn in free coordinates. seed: of the random points.
    value: optionally a function of the same x that gives the log density alone; it is timed against the gradient, and
        must agree with it.
    Compared at the point given, random points about one and three scales away, 30 scales away, and near bounds or the
    edge of the support: the gradient with extrapolated differences of the log density, the Hessian product with
    differences of the gradient. Beside that: is the gradient written, the input left alone, the answer the same for the
    same position, single precision, minus infinity or exceptions far out, two threads at once, time.
    Errors: ArgumentError, ShapeError, StartError when the point itself has no finite log density or gradient.
    """
    if not isinstance(density, Density):
        raise ArgumentError(f"audit looks at a fellwalk.Density; it was given {type(density).__name__}: wrap your "
                            "function as fellwalk.Density(function, dimension)")
    rng = np.random.default_rng(seed)
    y = _point(density, x, rng)
    probe = Probe(density)
    sight = probe.at(y)
    findings = [*checks.forms(probe, y), *checks.written(probe, y)]
    if sight.kind != "finite" and not any(finding.weight == "mistake" for finding in findings):
        _refuse(density, probe, y, sight)
    points: list[Compared] = []
    behaviour: list[str] = []
    if not any(finding.about == "gradient" for finding in findings):
        every = np.arange(density.dimension)
        some = np.unique(np.linspace(0, density.dimension - 1, _ALL).astype(int))
        which = every if density.dimension <= _ALL else some
        reach = _filled(reaches(probe, y, sight, which), y, sight, which)
        findings += checks.repeats(probe, y, y + 0.3 * reach * rng.standard_normal(len(y)))
        far, behaviour, inside = checks.far_out(probe, y, reach, rng)
        findings += far
        if not any(finding.about == "repeats" and finding.weight == "mistake" for finding in findings):
            places = _places(density, y, reach, inside, rng)
            points, bad = _compared(probe, places, reach, which, rng)
            findings += bad + _gradient_findings(probe, points)
            findings += products(probe, y, reach, rng)
            findings += _precision(points, findings)
            near = np.array([at for at in (y + 0.5 * reach * rng.standard_normal(len(y)) for _ in range(8))
                             if probe.at(at).finite] or [y, y])
            findings += checks.threads(density, near)
    if value is not None:
        findings += _value_alone(probe, y, sight, value)
    density.count(probe.calls)
    seconds = checks.speed(probe, y, value) if sight.finite else {}
    findings.sort(key=lambda finding: _WEIGHTS.index(finding.weight))
    return Audit(tuple(findings), tuple((p.label, probe.x_of(p.y)) for p in points), density.dimension,
                 int(np.isfinite(points[0].right).sum()) if points else 0, seconds, tuple(behaviour), probe.calls,
                 _largest_share(points))


def _point(density: Density, x: Any, rng: np.random.Generator) -> NDArray[np.float64]:
    given: Any = density.start if x is None else x
    if density.parameters is not None:
        return free_starts(density, density.parameters, given, 1, rng).reshape(-1)
    if given is not None:
        return as_vector(given, density.dimension, "x")
    for size in (0.0, 1.0, 1.0, 0.1, 10.0):
        y = size * rng.standard_normal(density.dimension) + (0.0 if size else 0.1)
        if Probe(density).at(y).finite:
            return y
    raise ArgumentError("this density has no start of its own, and is not finite at the points tried; give x, a point "
                        f"of shape ({density.dimension},) inside the support")


def _refuse(density: Density, probe: Probe, y: NDArray[np.float64], sight: Sight) -> None:
    if sight.error is not None:
        raise sight.error
    what = f"the log density is {sight.value}" if sight.kind != "bad gradient" else "the gradient is not finite in " + (
        density.names[int(np.flatnonzero(~np.isfinite(sight.gradient))[0])] if density.parameters is None
        else "natural values")
    raise StartError(f"{what} at the point to audit, {brief(probe.x_of(y))}; give x inside the support")


def _filled(reach: Array, y: Array, sight: Sight, which: Places) -> Array:
    """Reaches of the coordinates not looked at: from the gradient, or the median of the others."""
    usual = float(np.median(reach[which]))
    slope = np.abs(sight.gradient)
    rest = np.where(slope > 0, 1.0 / np.where(slope > 0, slope, 1.0), usual)
    return np.where(np.isfinite(reach), reach, np.minimum(rest, 100.0 * usual))


def _places(density: Density, y: Array, reach: Array, inside: Array | None, rng: np.random.Generator
            ) -> list[tuple[str, Array]]:
    n = rng.standard_normal
    places = [("the point given", y)]
    places += [(f"random point {k + 1}", y + size * reach * n(len(y))) for k, size in enumerate((1.0, 1.0, 3.0))]
    places.append(("far out", y + 30.0 * reach * n(len(y))))
    if inside is not None:
        places.append(("near the edge of the support", inside))
    if density.parameters is not None and any(kind.word != "free" for kind in density.parameters.kinds.values()):
        bounded = np.concatenate([_towards_bounds(kind) for kind in density.parameters.kinds.values()])
        places.append(("near lower bounds", y - 9.0 * bounded))
        places.append(("near upper bounds", y + np.minimum(5.0, 5.0 * reach) * bounded))
    return places


def _towards_bounds(kind: Kind) -> NDArray[np.float64]:
    """1 for free coordinates that are logarithms of a distance, 0 for those that have no bound, (kind.dimension,)."""
    if kind.word == "correlation":
        return np.full(kind.dimension, 0.25)  # near-singular matrices are beyond what most functions can compute
    if kind.word == "increasing":
        out = np.ones((kind.sets, kind.shape[-1]))
        out[:, 0] = kind.low is not None or kind.high is not None
        return out.reshape(-1)
    if kind.word == "shares":
        return np.ones(kind.dimension)
    return (np.isfinite(kind.bounds("low")) | np.isfinite(kind.bounds("high"))).astype(float)


def _compared(probe: Probe, places: list[tuple[str, Array]], reach: Array, which: Places, rng: np.random.Generator
              ) -> tuple[list[Compared], list[Finding]]:
    d = len(reach)
    if d > len(which):
        sight = probe.at(places[0][1])
        groups = np.array_split(np.arange(d), 100)
        bad = suspects(probe, places[0][1], sight, reach, groups, rng)
        which = np.unique(np.concatenate([which, *bad[:3]]))
        places = places[:3]
    points, findings = [], []
    for label, at in places:
        found = compare(probe, label, at, which, reach)
        if found is not None:
            points.append(found)
            continue
        sight = probe.at(at)
        if sight.kind == "bad gradient":
            findings.append(Finding("mistake" if "random" in label else "caution", "gradient not finite",
                                    f"The log density is finite but its gradient is not at {label}, "
                                    f"{brief(probe.x_of(at))}."))
        elif sight.kind == "exception" and "far" not in label:
            findings.append(Finding("mistake", "exception", f"The function raises {type(sight.error).__name__} "
                                    f"({sight.error}) at {label}, {brief(probe.x_of(at))}: return minus infinity where "
                                    "there is no density."))
    return points, findings


def _gradient_findings(probe: Probe, points: list[Compared]) -> list[Finding]:
    weight = np.sum([p.importance for p in points], axis=0)
    if not np.any(weight > 0):
        off = [(float(np.max(np.abs(p.given - p.right)[p.slightly_off] / np.abs(p.right)[p.slightly_off])), p)
               for p in points if p.slightly_off.any()]
        if not off:
            return []
        share, p = max(off, key=lambda pair: pair[0])
        i = int(np.argmax(np.where(p.slightly_off, np.abs(p.given - p.right) / np.abs(p.right), 0.0)))
        return [Finding("caution", "gradient", f"The gradient of {probe.density.coordinates[i]} differs from "
                        f"differences of the log density by {share:.1g} of its size at {p.label}, more than rounding "
                        "explains: single precision, a constant with few digits, or a solver with a loose tolerance.",
                        probe.density.coordinates[i])]
    wrong = sorted(np.flatnonzero(weight > 0).tolist(), key=lambda i: -weight[i])
    guesses = [(i, guess(probe, points, i)) for i in wrong[:8]]
    i, why = guesses[0]
    return [Finding("mistake", "gradient", _said(probe, points, i, len(wrong)) + " " + why + _others(probe, guesses),
                    probe.density.coordinates[i])]


def _others(probe: Probe, guesses: list[tuple[int, str]]) -> str:
    different = [(i, why) for i, why in guesses[1:] if why != guesses[0][1]]
    names = probe.density.coordinates
    return "".join(f" In {names[i]}: {why[0].lower()}{why[1:]}" for i, why in different[:2])


def _said(probe: Probe, points: list[Compared], i: int, wrong: int) -> str:
    p = next(p for p in points if p.wrong[i])
    given, right, error = p.given[i], p.right[i], p.error[i]
    name, kind = probe.density.coordinates[i], ""
    if probe.maps is not None:
        kind = " (per unit of its free coordinate)"
    also = f" ({wrong} coordinates are wrong; this one matters most.)" if wrong > 1 else ""
    return (f"The gradient of {name} is wrong: at {p.label}, {brief(probe.x_of(p.y))}, the function gives {given:.9g} "
            f"where differences of its log density give {right:.9g}{kind}, uncertain by {error:.1g}.{also}")


def _precision(points: list[Compared], findings: list[Finding]) -> list[Finding]:
    if any(finding.about == "precision" for finding in findings) or not points:
        return []
    near = [p for p in points if p.label.startswith(("the point", "random"))]
    noises = [float(np.nanmedian(p.error * np.nan_to_num(p.reach))) for p in near]
    return checks.single_precision([p.sight for p in near], noises)


def _largest_share(points: list[Compared]) -> float:
    """Over the derivatives known to six digits at least."""
    known = [np.abs(p.given / p.right - 1.0)[p.error < 1e-6 * np.abs(p.right)]
             for p in points if np.all(p.right != 0)]
    return float(max((part.max() for part in known if len(part)), default=math.nan))


def _value_alone(probe: Probe, y: Array, sight: Sight, value: Callable[[Array], float]) -> list[Finding]:
    alone = float(value(probe.x_of(y)))
    if abs(alone - sight.value) <= 1e-9 * (1.0 + abs(sight.value)):
        return []
    return [Finding("mistake", "value", f"The function of the log density alone gives {alone:.9g} where the density "
                    f"gives {sight.value:.9g}.")]


def glance(density: Density, y: NDArray[np.float64]) -> None:
    """The look that a run takes by default, about ten gradients at one point in chain coordinates.

    Raises AuditError with the audit's sentence when the gradient is plainly wrong, not written, or not repeatable; what
    the density raises there is left to the start of the chains, which raises it as it is.
    """
    probe = Probe(density)
    try:
        _glance(density, probe, y)
    finally:
        density.count(probe.calls)


def glance_at_start(density: Density) -> None:
    """`glance` at the density's own start, for when a start is refused: the gradient may not have been written."""
    if density.start is not None:
        glance(density, density.start if density.parameters is None else density.parameters.free(density.start))


def _glance(density: Density, probe: Probe, y: NDArray[np.float64]) -> None:
    first = probe.at(y)
    if not first.finite:
        found = checks.written(probe, y) if first.kind == "bad gradient" else []
        _raise(found)
        return
    rng = np.random.default_rng(len(y))
    slope = np.abs(first.gradient)
    usual = float(np.median(slope[slope > 0])) if np.any(slope > 0) else 1.0
    scale = np.where(slope > 1e-8 * usual, 1.0 / np.where(slope > 0, slope, 1.0), 1.0 / usual)
    direction = scale * rng.choice([-1.0, 1.0], len(y)) * rng.uniform(0.5, 1.0, len(y)) / math.sqrt(len(y))
    given, difference, size = compare_along(probe, y, first, direction, levels=4)
    again = probe.at(y, before=1.0)
    if again.kind != first.kind or not np.allclose(again.gradient, first.gradient, rtol=1e-9, atol=0.0) or (
            abs(again.value - first.value) > 1e-9 * (1.0 + abs(first.value))):
        _raise(checks.written(probe, y) or checks.repeats(probe, y, y + difference.reach * direction))
    if abs(given - difference.value) <= 10.0 * difference.error + 1e-6 * (size + abs(difference.value)):
        return
    every = np.arange(len(y))
    if len(y) > _ALL:
        bad = suspects(probe, y, first, scale, np.array_split(every, 100), rng)
        every = np.concatenate(bad[:3]) if bad else every[:0]
    places = [("the starting point", y), *(("a point near the start", y + part * difference.reach * direction)
                                            for part in (1.0, -0.6, 0.3))]
    points = [p for p in (compare(probe, label, at, every) for label, at in places) if p is not None]
    if points and points[0].wrong.any():
        _raise(checks.repeats(probe, y, places[1][1]) or _gradient_findings(probe, points))


def _raise(findings: list[Finding]) -> None:
    for finding in findings:
        if finding.weight == "mistake":
            raise AuditError(f"{finding.text} fellwalk.audit(density) looks closer; audit=False runs it all the same.")
