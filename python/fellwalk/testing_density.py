"""Is a gradient the derivative of its log density, and a Hessian product that of the gradient?"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import ArrayLike, NDArray

from fellwalk.audit_differences import Probe, noise_at, reach_along
from fellwalk.audit_gradient import ERRORS, GRADIENT_NOISES, compare
from fellwalk.audit_products import _extrapolated
from fellwalk.density import Density, as_vector
from fellwalk.errors import ArgumentError
from fellwalk.testing_report import demand, require

__all__ = ["check_density", "check_hessian_product"]

Array = NDArray[np.float64]


def _point(density: Density, x: ArrayLike) -> tuple[Array, float, Array]:
    """The point with two calls there that must agree bit for bit."""
    at = as_vector(x, density.dimension, "x")
    value, gradient = density(at)
    again, slope = density(at)
    same = value == again and np.array_equal(gradient, slope, equal_nan=True)
    require(same, "the same value and gradient at every call", f"first {value!r} and {gradient}, then {again!r} and "
            f"{slope}", x=at)
    return at, value, gradient


def check_density(density: Density, x: ArrayLike, *, rtol: float = 1e-6) -> None:
    """Does the function give the same twice at x, (dimension,), and is its gradient the derivative of its value?

    The derivative is by extrapolated central differences, with their own error estimate; rtol: of the size of the
    derivative, allowed besides. Raises IdentityFailed; ArgumentError where x is outside the support.
    """
    at, value, gradient = _point(density, x)
    if not (math.isfinite(value) and np.all(np.isfinite(gradient))):
        raise ArgumentError(f"a density is checked inside its support; at {at} it gives {value} and {gradient}")
    found = compare(Probe(density), "the point given", at, np.arange(density.dimension))
    if found is None:
        raise ArgumentError(f"the function was finite at {at} at first, and then it was not")
    size = np.maximum(np.abs(found.given), np.abs(found.right))
    # a change of the log density below 1e-10 over the coordinate's own scale is rounding, whatever the derivative is
    allowed = np.fmax(found.tolerance + rtol * size, 1e-10 / found.reach)
    require(bool(np.all(np.isfinite(allowed))), "differences can be taken", "the log density is not smooth or not "
            "finite beside this point, so nothing can be said of its gradient; take another point", x=at)
    demand("gradient = derivative of the log density", found.given, found.right, allowed,
           f"{ERRORS:g} errors of the differences, {GRADIENT_NOISES:g} of the gradient's noise, {rtol:g} of its size",
           x=at)


def check_hessian_product(density: Density, x: ArrayLike, p: ArrayLike, q: ArrayLike, *, rtol: float = 1e-6,
                          rounding: float = 1e-10) -> None:
    """Is hessian_product at x the derivative of the gradient along p, linear, and symmetric? All (dimension,).

    rtol: share of the sizes of the parts of a product by which it may differ from differences of the gradient, beside
    their errors; rounding: the same for linearity and symmetry, where no differences enter. Raises IdentityFailed.
    """
    at, _, _ = _point(density, x)
    one, two = (as_vector(a, density.dimension, name) for a, name in ((p, "p"), (q, "q")))
    columns = np.abs([density.product(at, e) for e in np.eye(density.dimension)])
    first, second = density.product(at, one), density.product(at, two)
    parts = [np.abs(one) @ columns, np.abs(two) @ columns]  # what a product is summed from
    values = {"x": at, "p": one, "q": two}
    demand("H (p - 2 q) = H p - 2 H q", density.product(at, one - 2.0 * two), first - 2.0 * second,
           rounding * (parts[0] + 2.0 * parts[1]), f"{rounding:g} of the parts of the sum", **values)
    demand("p.Hq = q.Hp", one @ second, two @ first, rounding * (np.abs(one) @ parts[1] + np.abs(two) @ parts[0]),
           f"{rounding:g} of the parts of the sum", **values)
    if not np.any(one):
        return
    probe = Probe(density)
    sight = probe.at(at)
    guess = 1.0 / max(abs(float(sight.gradient @ one)), 1e-3)
    reach = reach_along(lambda t: probe.value(at + t * one), sight.value, guess, 0.0)
    noise = noise_at(probe, at, sight, reach * one)[1]

    def slope(t: float) -> Array:  # with the gradient of the log-Jacobian, which the probe leaves out
        value, gradient = density(at + t * reach * one)
        return gradient if math.isfinite(value) else np.full(len(at), np.nan)

    right, error = _extrapolated(slope, noise)
    allowed = ERRORS * error / reach + rtol * parts[0] + GRADIENT_NOISES * noise
    require(bool(np.all(np.isfinite(allowed))), "differences of the gradient can be taken", "the gradient is not "
            "finite beside this point; take another point", **values)
    demand("H p = derivative of the gradient along p", first, right / reach, allowed,
           f"{ERRORS:g} errors of the differences and {rtol:g} of the parts of the sum", **values)
