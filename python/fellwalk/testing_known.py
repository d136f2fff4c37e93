"""Densities whose derivatives, draws and laws are known in closed form: some well-behaved, some ill-behaved."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy import special, stats

from fellwalk.density import Density

__all__ = ["KnownDensity", "edge", "funnel", "logistic", "normal", "ridge", "student"]

Array = NDArray[np.float64]
Law = tuple[Callable[[Array], Array], Callable[[Array], Array]]


@dataclass(frozen=True)
class KnownDensity:
    """A density with what is known of it.

    name: the call that makes it. call: x -> (log density, gradient); multiply: x, p -> Hessian times p; arrays of shape
    (dimension,). place: standard normal numbers (..., dimension) to exact draws of the same shape. laws: by name, a
    function of draws (n, dimension) with the continuous distribution function of its values (n,).
    """

    name: str
    dimension: int
    call: Callable[[Array], tuple[float, Array]]
    multiply: Callable[[Array, Array], Array]
    place: Callable[[Array], Array]
    laws: Mapping[str, Law] = field(default_factory=dict)

    def density(self, **named: Any) -> Density:
        """A `fellwalk.Density` over `call` and `multiply`."""
        return Density(self.call, self.dimension, hessian_product=self.multiply, **named)

    def draws(self, n: int, rng: np.random.Generator) -> Array:
        """n independent exact draws, (n, dimension)."""
        return self.place(rng.standard_normal((n, self.dimension)))

    def __repr__(self) -> str:
        return self.name


def _laws(values: Callable[[Array], Array], d: int, cdf: Callable[[Array], Array]) -> dict[str, Law]:
    """The law of every coordinate of what `values` makes of draws."""
    def column(i: int) -> Callable[[Array], Array]:
        return lambda x: values(x)[:, i]

    return {f"coordinate {i}": (column(i), cdf) for i in range(d)}


def _name(function: str, *arguments: object) -> str:
    return f"{function}({', '.join(repr(a.tolist()) if isinstance(a, np.ndarray) else repr(a) for a in arguments)})"


def normal(scale: ArrayLike, along: float = 1.0) -> KnownDensity:
    """Normal, x = scale * (z + (along - 1) e (e.z)) with e = (1, ..., 1) / sqrt(d): one direction is `along` times as
    wide as the others in scaled coordinates; scale: (d,), along > 0."""
    s = np.asarray(scale, dtype=float)
    d = len(s)

    def spread(z: Array, width: float) -> Array:
        return np.asarray(z + (width - 1.0) * z.mean(axis=-1, keepdims=True))

    def call(x: Array) -> tuple[float, Array]:
        y = spread(x / s, 1.0 / along)
        return -0.5 * float(y @ y), -spread(y, 1.0 / along) / s

    def multiply(x: Array, p: Array) -> Array:
        return np.asarray(-spread(spread(p / s, 1.0 / along), 1.0 / along) / s)

    laws = _laws(lambda x: spread(x / s, 1.0 / along), d, stats.norm.cdf)
    return KnownDensity(_name("normal", s, along), d, call, multiply, lambda z: s * spread(z, along), laws)


def student(scale: ArrayLike, freedom: float) -> KnownDensity:
    """Independent Student t with `freedom` > 0 degrees of freedom, scaled; scale: (d,)."""
    s = np.asarray(scale, dtype=float)

    def call(x: Array) -> tuple[float, Array]:
        y = x / s
        return -0.5 * (freedom + 1) * float(np.log1p(y * y / freedom).sum()), -(freedom + 1) * y / (freedom + y * y) / s

    def multiply(x: Array, p: Array) -> Array:
        y = x / s
        return np.asarray(-(freedom + 1) * (freedom - y * y) / (freedom + y * y) ** 2 / s**2 * p)

    def place(z: Array) -> Array:  # from the lower half, where small probabilities keep their digits
        return np.asarray(s * np.copysign(special.stdtrit(freedom, special.ndtr(-np.abs(z))), z))

    laws = _laws(lambda x: x / s, len(s), stats.t(freedom).cdf)
    return KnownDensity(_name("student", s, freedom), len(s), call, multiply, place, laws)


def logistic(scale: ArrayLike) -> KnownDensity:
    """Independent logistic, scaled; scale: (d,)."""
    s = np.asarray(scale, dtype=float)

    def call(x: Array) -> tuple[float, Array]:
        y = np.abs(x / s)
        return -float((y + 2.0 * np.log1p(np.exp(-y))).sum()), -np.tanh(0.5 * x / s) / s

    def multiply(x: Array, p: Array) -> Array:
        return np.asarray(-0.5 * (1.0 - np.tanh(0.5 * x / s) ** 2) / s**2 * p)

    def place(z: Array) -> Array:
        return np.asarray(s * (special.log_ndtr(z) - special.log_ndtr(-z)))

    laws = _laws(lambda x: x / s, len(s), stats.logistic.cdf)
    return KnownDensity(_name("logistic", s), len(s), call, multiply, place, laws)


def funnel(dimension: int, width: float = 3.0) -> KnownDensity:
    """x[0] normal with sd `width`, the others normal with variance exp(x[0]): the scale changes from place to place."""
    d = dimension

    def call(x: Array) -> tuple[float, Array]:
        v, y = x[0], x[1:]
        each = np.exp(-v) * y
        squares = float(y @ each)
        value = -0.5 * (v / width) ** 2 - 0.5 * squares - 0.5 * (d - 1) * v
        return value, np.concatenate([[-v / width**2 + 0.5 * squares - 0.5 * (d - 1)], -each])

    def multiply(x: Array, p: Array) -> Array:
        v, y = x[0], x[1:]
        e = np.exp(-v)
        first = -p[0] / width**2 - 0.5 * e * (y @ y) * p[0] + e * (y @ p[1:])
        return np.concatenate([[first], e * y * p[0] - e * p[1:]])

    def place(z: Array) -> Array:
        v = width * z[..., :1]
        return np.concatenate([v, np.exp(0.5 * v) * z[..., 1:]], axis=-1)

    def back(x: Array) -> Array:
        return np.concatenate([x[:, :1] / width, np.exp(-0.5 * x[:, :1]) * x[:, 1:]], axis=1)

    return KnownDensity(_name("funnel", d, width), d, call, multiply, place, _laws(back, d, stats.norm.cdf))


def ridge(curve: float = 1.0, thickness: float = 0.3) -> KnownDensity:
    """A curved ridge in two dimensions: x[0] standard normal, x[1] normal about curve * x[0]^2 with sd `thickness`."""

    def call(x: Array) -> tuple[float, Array]:
        away = (x[1] - curve * x[0] ** 2) / thickness**2
        value = -0.5 * x[0] ** 2 - 0.5 * away * away * thickness**2
        return float(value), np.array([-x[0] + 2.0 * curve * x[0] * away, -away])

    def multiply(x: Array, p: Array) -> Array:
        away, w = (x[1] - curve * x[0] ** 2) / thickness**2, 1.0 / thickness**2
        h00, h01 = -1.0 + 2.0 * curve * away - 4.0 * (curve * x[0]) ** 2 * w, 2.0 * curve * x[0] * w
        return np.array([h00 * p[0] + h01 * p[1], h01 * p[0] - w * p[1]])

    def place(z: Array) -> Array:
        return np.stack([z[..., 0], curve * z[..., 0] ** 2 + thickness * z[..., 1]], axis=-1)

    def back(x: Array) -> Array:
        return np.stack([x[:, 0], (x[:, 1] - curve * x[:, 0] ** 2) / thickness], axis=1)

    return KnownDensity(_name("ridge", curve, thickness), 2, call, multiply, place, _laws(back, 2, stats.norm.cdf))


def edge(scale: ArrayLike) -> KnownDensity:
    """Half-normal in every coordinate: minus infinity where one is below 0; scale: (d,)."""
    s = np.asarray(scale, dtype=float)

    def call(x: Array) -> tuple[float, Array]:
        if np.any(x < 0.0):
            return -np.inf, np.full(len(s), np.nan)
        return -0.5 * float((x / s) @ (x / s)), -x / s**2

    def multiply(x: Array, p: Array) -> Array:
        return np.asarray(-p / s**2)

    laws = _laws(lambda x: x / s, len(s), stats.halfnorm.cdf)
    return KnownDensity(_name("edge", s), len(s), call, multiply, lambda z: s * np.abs(z), laws)
