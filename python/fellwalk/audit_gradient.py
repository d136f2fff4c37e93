"""The gradient against differences of the log density, coordinate by coordinate, at several points."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from fellwalk.audit_differences import Probe, Sight, Slope, differentiate, noise_at, reach_along

__all__ = ["Compared", "compare", "compare_along", "reaches", "suspects"]

# A difference counts as a mistake when it is beyond these multiples of the estimated errors and this share of the
# derivative, and would change the log density by more than this over the coordinate's own scale.
ERRORS, GRADIENT_NOISES, SHARE, CHANGE = 10.0, 30.0, 1e-4, 1e-5


@dataclass
class Compared:
    """One point: what the function gave and what differences give. NaN where a coordinate was not looked at.

    y: in the coordinates chains move in; given, right, error, reach: (dimension,); noise: of given, (dimension,).
    """

    label: str
    y: NDArray[np.float64]
    sight: Sight
    right: NDArray[np.float64]
    error: NDArray[np.float64]
    reach: NDArray[np.float64]
    noise: NDArray[np.float64]

    @property
    def given(self) -> NDArray[np.float64]:
        """The function's gradient."""
        return self.sight.gradient

    @property
    def tolerance(self) -> NDArray[np.float64]:
        """How far apart the two may be by rounding, noise and the error of differences."""
        return ERRORS * self.error + GRADIENT_NOISES * self.noise

    @property
    def wrong(self) -> NDArray[np.bool_]:
        """Which coordinates differ by more than can be explained, and by enough to matter."""
        apart = np.abs(self.given - self.right)
        size = np.maximum(np.abs(self.given), np.abs(self.right))
        return (apart > self.tolerance) & (apart > SHARE * size) & (apart * self.reach > CHANGE)

    @property
    def slightly_off(self) -> NDArray[np.bool_]:
        """Which differ by more than can be explained, but by little."""
        apart = np.abs(self.given - self.right)
        size = np.maximum(np.abs(self.given), np.abs(self.right))
        return (apart > self.tolerance) & (apart > 1e-7 * size) & (apart * self.reach > 1e-9) & ~self.wrong

    @property
    def importance(self) -> NDArray[np.float64]:
        """Change of the log density over the coordinate's scale by the difference; 0 where none was seen."""
        return np.nan_to_num(np.abs(self.given - self.right) * self.reach) * self.wrong


def first_step(y: float, slope: float) -> float:
    """A step to begin the search for a coordinate's scale with."""
    if slope != 0.0 and math.isfinite(slope) and 1e-200 < abs(slope) < 1e200:
        return 0.5 / abs(slope)
    return 1e-3 * abs(y) if y != 0.0 else 1e-3


def reaches(probe: Probe, y: NDArray[np.float64], sight: Sight, which: NDArray[np.intp]) -> NDArray[np.float64]:
    """Steps in each coordinate over which the log density changes by about 1, (dimension,); NaN for the others."""
    out = np.full(len(y), np.nan)
    for i in which:
        out[i] = reach_along(_line(probe, y, i), sight.value, first_step(y[i], sight.gradient[i]), 0.0)
    return out


def _line(probe: Probe, y: NDArray[np.float64], i: int) -> Callable[[float], float]:
    def f(t: float) -> float:
        moved = y.copy()
        moved[i] = y[i] + t
        return probe.value(moved)
    return f


def compare(probe: Probe, label: str, y: NDArray[np.float64], which: NDArray[np.intp],
            scale: NDArray[np.float64] | None = None) -> Compared | None:
    """The coordinates `which` at y; None when the log density is not finite there.

    scale: a first guess of the reaches, (dimension,).
    """
    sight = probe.at(y)
    if not sight.finite:
        return None
    d = len(y)
    right, error, reach = (np.full(d, np.nan) for _ in range(3))
    rng = np.random.default_rng(len(label) + d)
    noise, gradient_noise = 0.0, np.zeros(d)
    for turn, i in enumerate(which):
        line = _line(probe, y, i)
        first = first_step(y[i], sight.gradient[i])
        if scale is not None and scale[i] > 0:
            first = min(scale[i], 8.0 * first) if sight.gradient[i] != 0 else scale[i]
        reach[i] = reach_along(line, sight.value, first, noise)
        if turn == 0:
            direction = np.zeros(d)
            known = reach if scale is None else np.where(np.isnan(reach), scale, reach)
            direction[which] = np.nan_to_num(known[which]) * rng.choice([-1.0, 1.0], len(which))
            direction *= _shrink(probe, y, sight, direction)
            noise, gradient_noise = noise_at(probe, y, sight, direction)
        slope = differentiate(line, sight.value, _exact(y[i], reach[i]), noise)
        right[i], error[i] = slope.value, slope.error
    return Compared(label, y, sight, right, error, reach, gradient_noise)


def _exact(y: float, h: float) -> float:
    """The step that is really made when h is added to y."""
    made = (y + h) - y
    return made if made > 0 else h


def _shrink(probe: Probe, y: NDArray[np.float64], sight: Sight, direction: NDArray[np.float64]) -> float:
    """Factor that makes the log density change by about 1 along the direction."""
    if not np.any(direction):
        return 1.0
    return reach_along(lambda t: probe.value(y + t * direction), sight.value, 1.0 / math.sqrt(len(y)), 0.0)


def compare_along(probe: Probe, y: NDArray[np.float64], sight: Sight, direction: NDArray[np.float64],
                  levels: int = 5) -> tuple[float, Slope, float]:
    """(the function's derivative along a direction, that by differences, sum of the sizes of its parts)."""
    def line(t: float) -> float:
        return probe.value(y + t * direction)
    given = float(sight.gradient @ direction)
    size = float(np.abs(sight.gradient * direction).sum())
    reach = reach_along(line, sight.value, 0.5 / max(abs(given), 1e-2), 0.0)
    return given, differentiate(line, sight.value, reach, 0.0, levels=levels, enough=1e-8), size


def suspects(probe: Probe, y: NDArray[np.float64], sight: Sight, scale: NDArray[np.float64],
             groups: list[NDArray[np.intp]], rng: np.random.Generator) -> list[NDArray[np.intp]]:
    """The groups of coordinates along which a random direction disagrees with differences."""
    bad = []
    for group in groups:
        direction = np.zeros(len(y))
        direction[group] = scale[group] * rng.choice([-1.0, 1.0], len(group)) * rng.uniform(0.5, 1.0, len(group))
        given, slope, size = compare_along(probe, y, sight, direction)
        if not abs(given - slope.value) <= 5.0 * slope.error + 1e-6 * (size + abs(slope.value)):
            bad.append(group)
    return bad
