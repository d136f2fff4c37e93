"""The test densities once more, straight from their definitions as probabilities, in mpmath.

Written apart from the C code and from the closed forms of its gradients: each oracle takes a list of mpf and returns
the log density; derivatives come from differences at 50 digits.
"""

from collections.abc import Callable
from typing import Any

import mpmath as mp
import numpy as np

Oracle = Callable[[list], Any]
DIGITS = 50
STEP = mp.mpf(10) ** -14


def exactly(values: np.ndarray) -> list:
    """Doubles as mpf, without rounding."""
    return [mp.mpf(float(v)) for v in np.asarray(values).ravel()]


def log_normal_pdf(x, mean, sd):
    return -mp.log(2 * mp.pi) / 2 - mp.log(sd) - ((x - mean) / sd) ** 2 / 2


def _form(covariance: np.ndarray, x: list):
    """(x^T covariance^-1 x, log determinant of the covariance)"""
    matrix = mp.matrix(covariance.tolist())
    factor = mp.cholesky(matrix)
    y = mp.lu_solve(factor, mp.matrix(x))
    return sum(v**2 for v in y), 2 * sum(mp.log(factor[i, i]) for i in range(matrix.rows))


def normal(mean: np.ndarray, covariance: np.ndarray) -> Oracle:
    centre = exactly(mean)

    def log_density(x: list):
        form, log_determinant = _form(covariance, [a - b for a, b in zip(x, centre, strict=True)])
        return -(len(x) * mp.log(2 * mp.pi) + log_determinant + form) / 2

    return log_density


def student(nu: float, scale: np.ndarray) -> Oracle:
    def log_density(x: list):
        d = len(x)
        form, log_determinant = _form(scale, x)
        constant = mp.loggamma((mp.mpf(nu) + d) / 2) - mp.loggamma(mp.mpf(nu) / 2)
        constant -= d * mp.log(mp.mpf(nu) * mp.pi) / 2 + log_determinant / 2
        return constant - (mp.mpf(nu) + d) / 2 * mp.log(1 + form / nu)

    return log_density


def rosenbrock(a: float, b: float, mu: float) -> Oracle:
    first, noise = mp.sqrt(1 / (2 * mp.mpf(a))), mp.sqrt(1 / (2 * mp.mpf(b)))

    def log_density(x: list):
        pairs = zip(x[0::2], x[1::2], strict=True)
        return sum(log_normal_pdf(p, mu, first) + log_normal_pdf(q, p**2, noise) for p, q in pairs)

    return log_density


def ring(r0: float, s: float) -> Oracle:
    return lambda x: -(((mp.sqrt(sum(v**2 for v in x)) - mp.mpf(r0)) / mp.mpf(s)) ** 2) / 2


def funnel(sd: float) -> Oracle:
    def log_density(x: list):
        return log_normal_pdf(x[0], 0, mp.mpf(sd)) + sum(log_normal_pdf(v, 0, mp.exp(x[0] / 2)) for v in x[1:])

    return log_density


def winding_ridge(w: float, s1: float, s2: float) -> Oracle:
    w, s1, s2 = mp.mpf(w), mp.mpf(s1), mp.mpf(s2)
    return lambda x: log_normal_pdf(x[0], 0, s1) + log_normal_pdf(x[1], -mp.sin(w * x[0]), s2)


def rough_well(scale: float, wavelength: float) -> Oracle:
    scale, wavelength = mp.mpf(scale), mp.mpf(wavelength)
    return lambda x: -sum((v / scale) ** 2 / 2 + mp.cos(2 * mp.pi * v / wavelength) for v in x)


def exponential(rates: np.ndarray) -> Oracle:
    rates = exactly(rates)
    return lambda x: sum(mp.log(r) - r * v for r, v in zip(rates, x, strict=True))


def half_normal(sds: np.ndarray) -> Oracle:
    sds = exactly(sds)
    return lambda x: sum(mp.log(2) + log_normal_pdf(v, 0, s) for s, v in zip(sds, x, strict=True))


def gaussian_errors(response: list, design: list[list]) -> Oracle:
    """y_i ~ N(row_i . b, sigma^2), prior 1 / sigma, in (b, log sigma), without the factor (2 pi)^(-n/2).

    The prior 1 / sigma and the Jacobian sigma of the logarithm cancel.
    """

    def log_density(x: list):
        b, sigma = x[:-1], mp.exp(x[-1])
        means = [mp.fdot(row, b) for row in design]
        total = sum(log_normal_pdf(y, m, sigma) for y, m in zip(response, means, strict=True))
        return total + len(response) * mp.log(2 * mp.pi) / 2

    return log_density


def logistic(response: np.ndarray, design: np.ndarray) -> Oracle:
    rows = [exactly(row) for row in design]

    def log_density(x: list):
        total = -sum(v**2 for v in x) / 200
        for y, row in zip(response, rows, strict=True):
            eta = mp.fdot(row, x)
            total -= mp.log(1 + mp.exp(-eta if y else eta))
        return total

    return log_density


def eight_schools(effects: np.ndarray, errors: np.ndarray, centred: bool) -> Oracle:
    """Normal log densities without their factors (2 pi)^(-1/2) and 1 / error; flat prior on (mu, tau), times tau.

    The non-centred form is the centred one at theta = mu + tau z, times the Jacobian tau^8.
    """
    constant = sum(mp.log(2 * mp.pi) + mp.log(mp.mpf(float(s))) for s in errors)

    def log_density(x: list):
        mu, log_tau, tail = x[0], x[1], x[2:]
        tau = mp.exp(log_tau)
        theta = tail if centred else [mu + tau * z for z in tail]
        total = constant + log_tau + (0 if centred else 8 * log_tau)
        for y, s, t in zip(effects, errors, theta, strict=True):
            total += log_normal_pdf(mp.mpf(float(y)), t, mp.mpf(float(s))) + log_normal_pdf(t, mu, tau)
        return total

    return log_density


def value_gradient(oracle: Oracle, x: np.ndarray, unit: np.ndarray) -> tuple[float, np.ndarray]:
    """Log density and its gradient times `unit` (the natural size of each coordinate), by central differences."""
    with mp.workdps(DIGITS):
        point, size = exactly(x), exactly(unit)
        gradient = []
        for i in range(len(point)):
            ahead, behind = list(point), list(point)
            ahead[i] += STEP * size[i]
            behind[i] -= STEP * size[i]
            gradient.append(float((oracle(ahead) - oracle(behind)) / (2 * STEP)))
        return float(oracle(point)), np.array(gradient)


def hessian_times(oracle: Oracle, x: np.ndarray, p: np.ndarray, unit: np.ndarray) -> np.ndarray:
    """`unit` times the Hessian times p, by mixed central differences."""
    with mp.workdps(DIGITS):
        point, size, along = exactly(x), exactly(unit), exactly(p)
        product = []
        for i in range(len(point)):
            total = mp.mpf(0)
            for a in (1, -1):
                for b in (1, -1):
                    moved = [v + b * STEP * q for v, q in zip(point, along, strict=True)]
                    moved[i] += a * STEP * size[i]
                    total += a * b * oracle(moved)
            product.append(float(total / (4 * STEP**2)))
        return np.array(product)
