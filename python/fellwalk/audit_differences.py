"""Derivatives by differences, with an error estimate that tells rounding from mistake.

Central differences are extrapolated (Richardson 1911; the stopping rule after Ridders 1982, Adv. Eng. Softw. 4) from a
step over which the log density changes by about 1: a log density has no unit, so this finds the scale of any
coordinate. Noise is read off high differences of closely spaced values (Hamming 1962; More & Wild 2011, SIAM J. Sci.
Comput. 33), in which smooth functions vanish.
"""

from __future__ import annotations

import math
import warnings
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from fellwalk._core import MappedTarget
from fellwalk.density import Density

__all__ = ["Probe", "Sight", "Slope", "differentiate", "noise_of", "reach_along"]

_EPS = float(np.finfo(float).eps)
_LEVELS = 9
_NOISE_POINTS = 13
_SPACINGS = (5.3e-4, 2.9e-3)  # two, because noise with a regular pattern can look smooth at one
_RATIO = 0.55  # of one step to the one before; not 1/2, so that noise with a regular pattern does not look smooth


@dataclass(frozen=True)
class Sight:
    """What one call gave: kind "finite", "outside", "NaN", "plus infinity", "exception" or "bad gradient"."""

    kind: str
    value: float
    gradient: NDArray[np.float64]
    error: BaseException | None = None
    rounding: float = 0.0  # what rounding of the natural values themselves may do to the log density

    @property
    def finite(self) -> bool:
        """Are the value and the whole gradient finite?"""
        return self.kind == "finite"


class Probe:
    """The user's function in the coordinates chains move in, without the log-Jacobian, warnings and exceptions held."""

    def __init__(self, density: Density) -> None:
        self.density = density
        self.maps = None if density.parameters is None else density.parameters.maps()
        self.natural = MappedTarget(density.function, density.natural_size, in_place=density.in_place,
                                    product=density.hessian_product)
        self.calls = 0

    def x_of(self, y: NDArray[np.float64]) -> NDArray[np.float64]:
        """Natural values at y, a new array."""
        return y.copy() if self.maps is None else self.maps.apply(y[None, :])[0][0]

    def log_jacobian(self, y: NDArray[np.float64]) -> float:
        """Of the map at y; 0 without Parameters."""
        return 0.0 if self.maps is None else float(self.maps.apply(y[None, :])[1][0])

    def at(self, y: NDArray[np.float64], before: float = math.nan) -> Sight:
        """One call; `before` fills the gradient before it. The gradient is with respect to y."""
        slope = np.full(self.density.natural_size, before)
        if self.maps is not None and self.maps.outside(y):
            return Sight("outside", -math.inf, slope)
        x = self.x_of(y)
        self.calls += 1
        try:
            with np.errstate(all="ignore"), warnings.catch_warnings():
                warnings.simplefilter("ignore")
                answer, value = self.natural.evaluate(x, slope)
        except Exception as error:
            return Sight("exception", math.nan, slope, error)
        if answer < 0:
            return Sight("exception", math.nan, slope, RuntimeError(f"the compiled function returned {answer}"))
        if answer > 0 or value == -math.inf:
            return Sight("outside", -math.inf, slope)
        if math.isnan(value):
            return Sight("NaN", value, slope)
        if value == math.inf:
            return Sight("plus infinity", value, slope)
        gradient = slope if self.maps is None else self.maps.pull(y, slope, False)
        kind = "finite" if np.all(np.isfinite(gradient)) else "bad gradient"
        with np.errstate(all="ignore"):
            rounding = float(np.abs(slope) @ np.spacing(np.abs(x)))
        return Sight(kind, value, gradient, rounding=rounding)

    def value(self, y: NDArray[np.float64]) -> float:
        """The log density at y, NaN where it is not finite."""
        sight = self.at(y)
        return sight.value if sight.kind in ("finite", "bad gradient") else math.nan


@dataclass(frozen=True)
class Slope:
    """A derivative by differences with an estimate of its error, and the step over which the function changes by 1."""

    value: float
    error: float
    reach: float


def reach_along(f: Callable[[float], float], middle: float, first: float, noise: float) -> float:
    """A step t for which f(t) or f(-t) differ from `middle` = f(0) by about 1, or by much more than the noise.

    When there is none: `first`, or the largest smaller step found with both sides finite.
    """
    least = max(0.05, 1e4 * noise)
    most = 40.0 * least
    low, high, t, best = 0.0, math.inf, first, 0.0
    for _ in range(60):
        change = max(abs(f(t) - middle), abs(f(-t) - middle))
        if least <= change <= most:
            return t
        if change < least:
            low = t
            best = max(best, t) if t <= first else best
            if t > 1e14 * first:
                break
            t = math.sqrt(low * high) if high < math.inf else 16.0 * t
        else:  # too far, or not finite
            high = t
            t = math.sqrt(low * high) if low > 0 else t / 16.0
        if high < 1.2 * low or not 1e-300 < t < 1e300:
            break
    return best or t


def differentiate(f: Callable[[float], float], middle: float, reach: float, noise: float,
                  levels: int = _LEVELS, enough: float = 1e-11) -> Slope:
    """f'(0) from central differences with steps reach, 0.55 reach, ..., extrapolated; `noise` is that of f near 0."""
    table: list[float] = []
    best, best_error, size = math.nan, math.inf, 0.0
    h = reach
    for level in range(levels):
        up, down = f(h), f(-h)
        row = [(up - down) / (2.0 * h)]
        if not math.isfinite(row[0]):
            table, h = [], h / 4.0
            continue
        size = max(size, abs(row[0]))
        rounding = 2.0 * max(noise, _EPS * max(abs(up), abs(down), abs(middle))) / h
        for k, before in enumerate(table, start=1):
            row.append(row[-1] + (row[-1] - before) / (_RATIO ** (-2 * k) - 1.0))
            error = max(abs(row[-1] - row[-2]), abs(row[-1] - before)) + rounding
            if error < best_error:
                best, best_error = row[-1], error
        table, h = row, h * _RATIO
        if level >= 2 and (best_error < enough * size or rounding > best_error):
            break
    return Slope(best, best_error, reach)


def noise_of(samples: NDArray[np.float64]) -> NDArray[np.float64]:
    """Standard deviation of the noise in equally spaced samples (points, ...) of smooth functions.

    Differences of order k of pure noise have variance (2k)! / (k!)^2 times its own; the median over k = 5, 6, 7.
    """
    found = []
    table = np.diff(samples, 4, axis=0)
    for k in (5, 6, 7):
        table = np.diff(table, axis=0)
        factor = math.factorial(k) ** 2 / math.factorial(2 * k)
        found.append(np.sqrt(factor * np.mean(table**2, axis=0)))
    return np.median(found, axis=0)


def noise_at(probe: Probe, y: NDArray[np.float64], sight: Sight, direction: NDArray[np.float64]
             ) -> tuple[float, NDArray[np.float64]]:
    """Noise of the log density and of each entry of its gradient at y; `direction` spans a change of about 1."""
    value, slopes = 0.0, np.zeros(len(y))
    for spacing in _SPACINGS:
        values, gradients = [], []
        for k in range(_NOISE_POINTS):
            near = probe.at(y + (k - _NOISE_POINTS // 2) * spacing * direction)
            if not near.finite:  # beside a point where it is finite: noise at its worst, so nothing can be said here
                return math.inf, np.full(len(y), math.inf)
            values.append(near.value)
            gradients.append(near.gradient)
        value = max(value, float(noise_of(np.array(values))))
        if spacing == _SPACINGS[0]:
            slopes = noise_of(np.array(gradients))
    return (max(value, _EPS * abs(sight.value), sight.rounding),
            np.maximum(slopes, 4.0 * _EPS * np.abs(sight.gradient)))
