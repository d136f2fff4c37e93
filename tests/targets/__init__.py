"""Densities for the tests and the benchmarks: compiled C callbacks with exact gradients and Hessian products.

Each constructor returns a :class:`Target`: `density` and `hessian_product` are ``scipy.LowLevelCallable`` objects
with the exact texts DENSITY_SIGNATURE and PRODUCT_SIGNATURE, `value_gradient(x)` is the same density for Python,
`exact_draws(n, rng)` gives independent draws where that is possible, and `marginals` holds known laws, means, sds and
quantiles. The C files are compiled once for each change of their text, into the temporary directory. Nothing here
needs the package under test.
"""

from ._build import DENSITY_SIGNATURE, PRODUCT_SIGNATURE
from .models import eight_schools, logistic, normal_sample, regression
from .normals import (
    dense_normal,
    equicorrelated_normal,
    failing_normal,
    independent_normal,
    log_spaced_normal,
    random_spikes,
    spiked_normal,
    standard_normal,
)
from .shapes import exponential, funnel, half_normal, ring, rosenbrock, rough_well, student, winding_ridge
from .target import Marginal, Target

__all__ = [
    "DENSITY_SIGNATURE",
    "PRODUCT_SIGNATURE",
    "Marginal",
    "Target",
    "dense_normal",
    "eight_schools",
    "equicorrelated_normal",
    "exponential",
    "failing_normal",
    "funnel",
    "half_normal",
    "independent_normal",
    "log_spaced_normal",
    "logistic",
    "normal_sample",
    "random_spikes",
    "regression",
    "ring",
    "rosenbrock",
    "rough_well",
    "spiked_normal",
    "standard_normal",
    "student",
    "winding_ridge",
]
