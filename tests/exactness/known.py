"""Targets whose draws are exact, with summaries of known law, and the base metric each is walked with."""

from collections.abc import Callable
from dataclasses import dataclass
from functools import cache

import numpy as np
import targets
from scipy import stats

Array = np.ndarray


@dataclass(frozen=True)
class Summary:
    """`of` takes draws (n, d) to values (n,) with the continuous distribution function `cdf`."""

    name: str
    of: Callable[[Array], Array]
    cdf: Callable[[Array], Array]


@dataclass(frozen=True)
class Known:
    """A target, its C name, its summaries, and two directions with their lambda; the scale is not the target's own."""

    target: targets.Target
    c_name: str
    summaries: tuple[Summary, ...]
    scale: Array
    directions: Array
    lam: Array


def marginals(target: targets.Target, *names: str) -> list[Summary]:
    """Known marginals of the target as summaries."""
    return [Summary(name, target.marginals[name].values, target.marginals[name].law.cdf) for name in names]


def orthonormal(d: int, number: int) -> Array:
    """Two orthonormal rows (2, d), along no axis."""
    return np.ascontiguousarray(np.linalg.qr(np.random.default_rng(number).standard_normal((d, 2)))[0].T)


@cache
def known() -> dict[str, Known]:
    """By name."""
    student = targets.student(3, 5.0)
    ring = targets.ring(2, 3.0, 0.5)
    rosenbrock = targets.rosenbrock(0.5, 5.0)
    edge = targets.half_normal(np.array([1.3, 0.7]))
    angle = Summary("angle", lambda x: np.arctan2(x[:, 1], x[:, 0]), stats.uniform(-np.pi, 2 * np.pi).cdf)

    def standard(x: Array) -> tuple[Array, Array]:
        return x[:, 0] - 1.0, np.sqrt(10.0) * (x[:, 1] - x[:, 0] ** 2)

    wall = Summary("wall", lambda x: standard(x)[1], stats.norm.cdf)
    size = Summary("size", lambda x: standard(x)[0] ** 2 + standard(x)[1] ** 2, stats.chi2(2).cdf)
    corner = Summary("size", lambda x: (x[:, 0] / 1.3) ** 2 + (x[:, 1] / 0.7) ** 2, stats.chi2(2).cdf)
    walked = {
        "student": (student, "student", marginals(student, "x1", "x2", "x3", "form"), [1.7, 0.6, 1.1], [2.3, 0.45]),
        "ring": (ring, "ring", [*marginals(ring, "x1", "radius"), angle], [1.9, 0.8], [0.5, 1.8]),
        "rosenbrock": (rosenbrock, "rosenbrock", [*marginals(rosenbrock, "x1"), wall, size], [0.35, 0.9], [1.9, 0.6]),
        "edge": (edge, "one_sided", [*marginals(edge, "x1", "x2"), corner], [1.1, 0.6], [0.6, 1.7]),
    }
    return {
        name: Known(target, c_name, tuple(summaries), np.array(scale), orthonormal(len(scale), 1), np.array(lam))
        for name, (target, c_name, summaries, scale, lam) in walked.items()
    }
