"""Every motion's step and a jittered path in plain NumPy, as a user would write them from the formulas.

A density here is an object with ``gradient(x) -> (value, gradient)`` and ``product(x, p) -> H p``. A base metric is the
diagonal 1 / s; formulas as in Duane et al. (1987) for the leapfrog motion and Lan et al. (2015) for the Lagrangian one,
on the Monge metric diag(1 / s) + beta g g'.
"""

import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import Protocol

import numpy as np

Array = np.ndarray


class NumpyDensity(Protocol):
    """What the steps ask of a density."""

    def gradient(self, x: Array) -> tuple[float, Array]:
        """Log density and gradient."""

    def product(self, x: Array, p: Array) -> Array:
        """Hessian of the log density times p."""


@dataclass
class Place:
    """A point on its way: position, velocity, log density, gradient; Hn and Hv where the motion carries them on."""

    x: Array
    v: Array
    value: float
    g: Array
    hn: Array | None = None
    hv: Array | None = None
    log_jacobian: float = 0.0


class Leapfrog:
    """Leapfrog steps over the base metric."""

    def __init__(self, density: NumpyDensity, s: Array) -> None:
        self.density, self.s = density, s

    def begin(self, x: Array, v: Array, value: float, g: Array) -> Place:
        """The place from which steps start."""
        return Place(x, v, value, g)

    def step(self, at: Place, step: float) -> Place:
        """One step on."""
        v = at.v + 0.5 * step * self.s * at.g
        x = at.x + step * v
        value, g = self.density.gradient(x)
        return Place(x, v + 0.5 * step * self.s * g, value, g)

    def velocity(self, g: Array, z: Array) -> Array:
        """A velocity drawn given the gradient at the position, from standard normals z."""
        return np.sqrt(self.s) * z

    def energy(self, at: Place) -> float:
        """Minus the log of the joint density of position and velocity, up to a constant."""
        return -at.value + 0.5 * float(at.v @ (at.v / self.s))


class Lagrangian:
    """Lagrangian steps, scheme "split" or "semi-explicit", curvature "surrogate", "difference" or "product"."""

    def __init__(self, density: NumpyDensity, s: Array, beta: float, scheme: str, curvature: str) -> None:
        self.density, self.s, self.beta = density, s, beta
        self.step = {"split": self._split, "semi-explicit": self._semi_explicit}[scheme]
        self.curve: Callable[[Place, Array], Array] = getattr(self, f"_{curvature}")
        self.carries = scheme == "split"

    def begin(self, x: Array, v: Array, value: float, g: Array) -> Place:
        """The place from which steps start."""
        at = Place(x, v, value, g)
        at.hn = self.curve(at, self.s * at.g)
        if self.carries:
            at.hv = self.curve(at, at.v)
        return at

    def velocity(self, g: Array, z: Array) -> Array:
        """A velocity drawn given the gradient at the position, from standard normals z."""
        root = np.sqrt(self.s)
        w = root * g
        level = math.sqrt(1.0 + self.beta * float(w @ w))
        return root * (z - self.beta / (level * (1.0 + level)) * float(w @ z) * w)

    def energy(self, at: Place) -> float:
        """Minus the log of the joint density of position and velocity, up to a constant."""
        level = 1.0 + self.beta * float(at.g @ (self.s * at.g))
        quadratic = float(at.v @ (at.v / self.s)) + self.beta * float(at.g @ at.v) ** 2
        return -at.value - 0.5 * math.log(level) + 0.5 * quadratic

    def _surrogate(self, at: Place, p: Array) -> Array:
        return -p / self.s

    def _product(self, at: Place, p: Array) -> Array:
        return self.density.product(at.x, p)

    def _difference(self, at: Place, p: Array) -> Array:
        length = math.sqrt(float(p @ (p / self.s)))
        if length == 0.0:
            return np.zeros_like(p)
        h = math.sqrt(np.finfo(float).eps) / length
        return (self.density.gradient(at.x + h * p)[1] - at.g) / h

    def _force(self, at: Place) -> tuple[Array, Array, float]:
        """(n, b, beta / L) at a place whose Hn is set."""
        n = self.s * at.g
        level = 1.0 + self.beta * float(at.g @ n)
        ratio = self.beta / level
        b = -n / level + ratio * (self.s * at.hn - ratio * float(n @ at.hn) * n)
        return n, b, ratio

    def _flow(self, at: Place, n: Array, ratio: float, t: float) -> None:
        """Exact Christoffel flow in place."""
        a, b, c = float(at.v @ at.hv), float(at.v @ at.hn), float(n @ at.hn)
        disc = b * b - a * c
        if abs(disc) * (ratio * t) ** 2 < 1e-12:
            even, odd = 1.0, ratio * t
        elif disc > 0.0:
            r = math.sqrt(disc)
            even, odd = math.cosh(ratio * r * t), math.sinh(ratio * r * t) / r
        else:
            r = math.sqrt(-disc)
            even, odd = math.cos(ratio * r * t), math.sin(ratio * r * t) / r
        delta = even + b * odd
        along = a * odd / delta
        at.v = at.v - along * n
        at.hv = at.hv - along * at.hn
        at.log_jacobian -= 2.0 * math.log(delta)

    def _split(self, at: Place, step: float) -> Place:
        half = 0.5 * step
        at = Place(**vars(at))
        n, b, ratio = self._force(at)
        self._flow(at, n, ratio, half)
        at.v = at.v - half * b
        at.x = at.x + step * at.v
        at.value, at.g = self.density.gradient(at.x)
        at.hn = self.curve(at, self.s * at.g)
        n, b, ratio = self._force(at)
        at.v = at.v - half * b
        at.hv = self.curve(at, at.v)
        self._flow(at, n, ratio, half)
        return at

    def _half(self, at: Place, step: float) -> None:
        n, b, ratio = self._force(at)
        hv = self.curve(at, at.v)
        a = 0.5 * step * ratio
        before = 1.0 + a * float(hv @ n)
        w = at.v - 0.5 * step * b
        at.v = w - a * float(hv @ w) / before * n
        at.log_jacobian += math.log(1.0 - a * float(at.v @ at.hn)) - math.log(before)

    def _semi_explicit(self, at: Place, step: float) -> Place:
        at = Place(**vars(at))
        self._half(at, step)
        at.x = at.x + step * at.v
        at.value, at.g = self.density.gradient(at.x)
        at.hn = self.curve(at, self.s * at.g)
        self._half(at, step)
        return at


def integrate(motion: Leapfrog | Lagrangian, x: Array, v: Array, step: float, steps: int) -> Place:
    """`steps` steps from (x, v), with the energy of each state, which every path needs."""
    at = motion.begin(x, v, *motion.density.gradient(x))
    for _ in range(steps):
        at = motion.step(at, step)
        motion.energy(at)
    return at


def jittered(
    motion: Leapfrog | Lagrangian, x: Array, step: float, most: int, draws: int, rng: np.random.Generator
) -> tuple[Array, int]:
    """(draws (draws, d), steps made): jittered paths of 1..most steps, one accept test each."""
    found, made = np.empty((draws, x.size)), 0
    value, g = motion.density.gradient(x)
    for row in found:
        at = motion.begin(x, motion.velocity(g, rng.standard_normal(x.size)), value, g)
        start, count = motion.energy(at), int(rng.integers(1, most + 1))
        for _ in range(count):
            at = motion.step(at, step)
        made += count
        if math.log(rng.random()) < start - motion.energy(at) + at.log_jacobian:
            x, value, g = at.x, at.value, at.g
        row[:] = x
    return found, made
