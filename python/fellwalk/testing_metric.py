"""The O(d) operations of a diagonal-plus-rank-one metric against exact rational arithmetic.

Numbers in double precision are rationals, so G, its inverse and its determinant are known without rounding.
Tolerances are forward error bounds (Higham 2002, Accuracy and Stability of Numerical Algorithms, ch. 3): a sum of d
products is off by at most d + 1 roundings of the sum of absolute values, and dividing by L = 1 + sign q multiplies the
relative error of L by (1 + q) / L. SLACK counts the operations beside the sum.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from fractions import Fraction
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray

from fellwalk import kernels
from fellwalk.testing_report import EPS, demand, require

__all__ = ["Metric", "check_metric"]

SLACK = 12
_REASON = "forward error bound of the rounding analysis"

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Metric:
    """G = diag(diagonal) + sign u u', positive definite, and a vector to apply it to; arrays of shape (d,)."""

    diagonal: Array
    u: Array
    vector: Array
    sign: int = 1

    @property
    def values(self) -> dict[str, object]:
        """The fields by name."""
        return {"diagonal": self.diagonal, "u": self.u, "vector": self.vector, "sign": self.sign}

    @property
    def roundings(self) -> float:
        """Relative error of a sum over the coordinates and the operations around it."""
        return (len(self.u) + SLACK) * EPS / 2

    @cached_property
    def exact_q(self) -> Fraction:
        """q = sum u^2 / diagonal."""
        return sum((b * b / a for a, b in zip(_exact(self.diagonal), _exact(self.u), strict=True)), Fraction(0))

    @cached_property
    def level(self) -> float:
        """L = 1 + sign q, rounded once."""
        return float(1 + self.sign * self.exact_q)

    @cached_property
    def worse(self) -> float:
        """How many times its own relative error the relative error of L may be."""
        return 1.0 + (1.0 + float(self.exact_q)) / self.level

    # ---- exact ----------------------------------------------------------------------------------------------------

    def exact_apply(self, v: list[Fraction]) -> list[Fraction]:
        """G v."""
        delta, u = _exact(self.diagonal), _exact(self.u)
        along = self.sign * sum((a * b for a, b in zip(u, v, strict=True)), Fraction(0))
        return [a * b + c * along for a, b, c in zip(delta, v, u, strict=True)]

    def exact_solve(self, p: list[Fraction]) -> list[Fraction]:
        """G^-1 p, proved by multiplying with G."""
        delta, u = _exact(self.diagonal), _exact(self.u)
        along = self.sign * sum((a * b / c for a, b, c in zip(u, p, delta, strict=True)), Fraction(0))
        along /= 1 + self.sign * self.exact_q
        x = [(b - c * along) / a for a, b, c in zip(delta, p, u, strict=True)]
        if self.exact_apply(x) != p:
            raise AssertionError("the exact inverse is not one")
        return x

    def exact_log_determinant(self) -> float:
        """log det G (matrix determinant lemma), rounded a few times."""
        q = float(self.exact_q)
        last = math.log1p(self.sign * q) if q < 0.5 else math.log(self.level)
        return math.fsum([*map(math.log, self.diagonal), last])

    # ---- error bounds ----------------------------------------------------------------------------------------------

    def bound_apply(self, v: Array) -> Array:
        """Of apply at v, (d,)."""
        delta, u, v = self.diagonal, np.abs(self.u), np.abs(v)
        return self.roundings * (delta * v + u * (u @ v))

    def bound_solve(self, p: Array) -> Array:
        """Of solve at p, (d,)."""
        delta, u, p = self.diagonal, np.abs(self.u), np.abs(p)
        return self.roundings * (p / delta + u / delta * (u @ (p / delta)) / self.level * self.worse)

    def bound_velocity(self, z: Array) -> Array:
        """Of velocity at z, (d,)."""
        root, scale, z = math.sqrt(self.level), np.sqrt(self.diagonal), np.abs(z)
        w = np.abs(self.u) / scale
        return self.roundings * (z + w * (w @ z) / (root * (1 + root)) * self.worse) / scale

    def bound_momentum(self, z: Array) -> Array:
        """Of momentum at z, (d,)."""
        scale, u, z = np.sqrt(self.diagonal), np.abs(self.u), np.abs(z)
        return self.roundings * (scale * z + u * ((u / scale) @ z) / (1 + math.sqrt(self.level)) * self.worse)

    @property
    def bound_log_determinant(self) -> float:
        """Of log_determinant."""
        logs = float(np.abs(np.log(self.diagonal)).sum())
        return self.roundings * (logs + abs(math.log(self.level)) + float(self.exact_q) / self.level)


def _exact(values: Array) -> list[Fraction]:
    return [Fraction(float(value)) for value in values]


def _off(found: Array, exact: list[Fraction]) -> Array:
    """found - exact, rounded once, so that no digit of the comparison is lost; NaN where found is not finite."""
    return np.array([float(Fraction(float(a)) - b) if math.isfinite(a) else math.nan
                     for a, b in zip(found, exact, strict=True)])


def check_metric(metric: Metric, operations: Any = kernels, *, most_columns: int = 8) -> None:
    """Are apply, solve, log_determinant, velocity and momentum those of G = diag(diagonal) + sign u u'?

    operations: what has these five functions, called as those of `fellwalk.kernels`. The draws' square roots are looked
    at whole (M M' against G^-1 or G) up to `most_columns` dimensions. Raises IdentityFailed.
    """
    delta, u, v, sign = metric.diagonal, metric.u, metric.vector, metric.sign
    exact, at = _exact(v), metric.values
    applied, solved = (f(delta, u, v, sign=sign) for f in (operations.apply, operations.solve))
    demand("apply = G v (apply less the exact product)", _off(applied, metric.exact_apply(exact)), 0.0,
           metric.bound_apply(v), _REASON, **at)
    demand("solve = G^-1 p (solve less the exact solution)", _off(solved, metric.exact_solve(exact)), 0.0,
           metric.bound_solve(v), _REASON, **at)
    _check_undone(metric, operations, applied, solved)
    demand("log_determinant = log det G", operations.log_determinant(delta, u, sign=sign),
           metric.exact_log_determinant(), metric.bound_log_determinant, _REASON, **at)
    if len(u) <= most_columns:
        _check_root(metric, operations.velocity, metric.bound_velocity, metric.exact_solve, "velocity: M M' = G^-1")
        _check_root(metric, operations.momentum, metric.bound_momentum, metric.exact_apply, "momentum: M M' = G")


def _check_undone(metric: Metric, operations: Any, applied: Array, solved: Array) -> None:
    """The error of the first operation goes through the second one, which adds its own."""
    delta, u, v, size = metric.diagonal, metric.u, metric.vector, np.abs(metric.u)
    carried = metric.bound_solve(v)
    allowed = delta * carried + size * (size @ carried) + metric.bound_apply(solved)
    demand("G (G^-1 p) = p", operations.apply(delta, u, solved, sign=metric.sign), v, allowed * (1 + 1e-9), _REASON,
           **metric.values)
    carried = metric.bound_apply(v)
    allowed = carried / delta + size / delta * (size @ (carried / delta)) / metric.level * metric.worse
    allowed += metric.bound_solve(applied)
    demand("G^-1 (G v) = v", operations.solve(delta, u, applied, sign=metric.sign), v, allowed * (1 + 1e-9), _REASON,
           **metric.values)


def _check_root(metric: Metric, operation: Callable[..., Array], bound: Callable[[Array], Array],
                covariance: Callable[[list[Fraction]], list[Fraction]], identity: str) -> None:
    d = len(metric.u)
    root = np.array([operation(metric.diagonal, metric.u, e, sign=metric.sign) for e in np.eye(d)]).T
    off = np.array([bound(e) for e in np.eye(d)]).T
    require(bool(np.all(np.isfinite(root))), identity, f"M = {root}", **metric.values)
    rows = [_exact(row) for row in root]
    right = [covariance([Fraction(int(i == j)) for i in range(d)]) for j in range(d)]
    wrong = np.array([[float(sum((a * b for a, b in zip(rows[i], rows[j], strict=True)), Fraction(0)) - right[j][i])
                       for j in range(d)] for i in range(d)])
    allowed = (off @ np.abs(root).T + np.abs(root) @ off.T) * (1 + 1e-9) + off @ off.T
    demand(f"{identity} (left less right)", wrong, 0.0, allowed, _REASON, **metric.values)
