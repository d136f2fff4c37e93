"""Strategies and checks for test suites: ours, and those of programs that bring densities, metrics or motions.

Strategies (Hypothesis) give metrics, positions and densities from tame to extreme, and shrink to small ones. Checks
raise an AssertionError that says which identity failed, at which values, by how much against which tolerance. They use
no knowledge of how the thing checked was made: exact rationals, differences, the way back, known laws.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from fellwalk.testing_density import check_density, check_hessian_product
from fellwalk.testing_known import KnownDensity, edge, funnel, logistic, normal, ridge, student
from fellwalk.testing_metric import Metric, check_metric
from fellwalk.testing_motion import (
    accepting,
    check_invariance,
    check_log_jacobian,
    check_order,
    check_reversible,
    jacobian,
    walk_of,
)
from fellwalk.testing_report import IdentityFailed

try:
    from hypothesis import strategies as st
except ImportError as error:
    raise ImportError("fellwalk.testing makes its examples with Hypothesis, which is not installed: "
                      "python -m pip install 'hypothesis>=6.100'") from error

__all__ = [
    "IdentityFailed",
    "KnownDensity",
    "Metric",
    "accepting",
    "check_density",
    "check_hessian_product",
    "check_invariance",
    "check_log_jacobian",
    "check_metric",
    "check_order",
    "check_reversible",
    "densities",
    "edge",
    "funnel",
    "ill_behaved",
    "jacobian",
    "logistic",
    "metrics",
    "near",
    "normal",
    "positions",
    "ridge",
    "scales",
    "student",
    "walk_of",
    "well_behaved",
]

Array = NDArray[np.float64]


_FINE = 1000  # exponents to a decade: whole numbers become small far sooner than floats


def _magnitudes(decades: float) -> st.SearchStrategy[float]:
    """Positive numbers whose logarithm is spread over so many decades about 1; they shrink to 1."""
    most = round(0.5 * decades * _FINE)
    return st.integers(-most, most).map(lambda k: 10.0 ** (k / _FINE))


def _signed(decades: float) -> st.SearchStrategy[float]:
    return st.tuples(_magnitudes(decades), st.sampled_from([1.0, -1.0])).map(math.prod)


def _array(values: st.SearchStrategy[list[float]]) -> st.SearchStrategy[Array]:
    return values.map(lambda found: np.array(found, dtype=float))


def scales(dimension: int, decades: float = 2.0) -> st.SearchStrategy[Array]:
    """Arrays (dimension,) of positive numbers spread over so many decades about 1."""
    return _array(st.lists(_magnitudes(decades), min_size=dimension, max_size=dimension))


def positions(dimension: int, decades: float = 24.0) -> st.SearchStrategy[Array]:
    """Arrays (dimension,) of numbers of both signs and of 0, their sizes spread over so many decades about 1."""
    entry = st.one_of(_signed(decades), st.just(0.0))
    return _array(st.lists(entry, min_size=dimension, max_size=dimension))


@st.composite
def metrics(draw: st.DrawFn, most: int = 12, decades: float = 24.0) -> Metric:
    """Metrics diag(diagonal) + sign u u' of 1 to `most` dimensions, positive definite, with a vector.

    Every number has a scale of its own, spread over so many decades about 1, but some diagonals are all ones or nearly
    so; entries of u may be 0; with sign -1, L = 1 - sum u^2 / diagonal comes down to 1e-9.
    """
    spread = draw(st.sampled_from([0.0, min(2.0, decades), decades, decades]))
    row = st.tuples(_magnitudes(spread), st.one_of(_signed(decades), st.just(0.0)), _signed(decades))
    diagonal, u, vector = np.array(draw(st.lists(row, min_size=1, max_size=most))).T
    u = u * draw(st.sampled_from([1.0, 1.0, 1e-9]))  # so that q is small now and then
    sign = draw(st.sampled_from([1, -1]))
    if sign == -1 and np.any(u):
        q = 1.0 - 10.0 ** -draw(st.integers(50, 9 * _FINE).map(lambda k: k / _FINE))
        u = u * np.sqrt(q / np.sum(u**2 / diagonal))
    return Metric(diagonal.copy(), u.copy(), vector.copy(), sign)


# All numbers are drawn whatever the kind: choices of other lengths would not shrink into each other.


@st.composite
def well_behaved(draw: st.DrawFn, most: int = 5) -> KnownDensity:
    """Normal, Student t and logistic densities of 1 to `most` dimensions, their scales over two decades."""
    kind = draw(st.sampled_from(["normal", "logistic", "student"]))
    ratio = draw(_magnitudes(1.0))
    scale = draw(scales(draw(st.integers(1, most))))
    if kind == "normal":
        return normal(scale, ratio)
    return logistic(scale) if kind == "logistic" else student(scale, 8.0 * ratio)


@st.composite
def ill_behaved(draw: st.DrawFn, most: int = 5) -> KnownDensity:
    """Densities that end at an edge, curved ridges, funnels, and normal ones with scales over 24 decades."""
    kind = draw(st.sampled_from(["edge", "normal", "ridge", "funnel"]))
    ratio = draw(_magnitudes(1.0))
    scale = draw(scales(draw(st.integers(1, most)), 24.0))
    if kind == "ridge":
        return ridge(1.0 / ratio, 0.3 * ratio)
    if kind == "funnel":
        return funnel(max(2, len(scale)), 1.5 * ratio**0.6)
    return edge(scale) if kind == "edge" else normal(scale, ratio**4)


def densities(most: int = 5) -> st.SearchStrategy[KnownDensity]:
    """Well-behaved and ill-behaved densities with known derivatives, draws and laws."""
    return st.one_of(well_behaved(most), ill_behaved(most))


def near(known: KnownDensity) -> st.SearchStrategy[Array]:
    """Positions (dimension,) in the bulk of a density: places of normal numbers within three standard deviations."""
    size = st.integers(-95, 200).map(lambda k: 1.0 + k / 100)
    entry = st.tuples(size, st.sampled_from([1.0, -1.0])).map(math.prod)
    return _array(st.lists(entry, min_size=known.dimension, max_size=known.dimension)).map(known.place)
