"""Every kind of target beside its oracle, by name: what the tests of the targets go through.

``case(name)`` gives (target, oracle); DRAWABLE are the names whose targets have exact draws.
"""

from decimal import Decimal
from functools import cache

import mpmath as mp
import numpy as np

from . import models, normals, oracles, shapes
from .models import checks


def equicorrelated(d, rho, sd=1.0):
    return sd**2 * ((1.0 - rho) * np.eye(d) + rho)


def random_precision(d, seed):
    a = np.random.default_rng(seed).standard_normal((d, 2 * d))
    p = a @ a.T
    return 0.5 * (p + p.T)


def exact_inverse(matrix):
    with mp.workdps(oracles.DIGITS):
        inverse = mp.matrix(matrix.tolist()) ** -1
    return np.array(inverse.tolist(), dtype=object)


def spikes():
    rng = np.random.default_rng(31)
    directions = np.linalg.qr(rng.standard_normal((11, 3)))[0].T
    return np.array([40.7, 3.21, 0.0231]), directions, 10.0 ** rng.uniform(-3.0, 3.0, 11)


def spiked_covariance(variances, directions, scales):
    y = np.eye(len(scales)) + directions.T @ ((variances - 1.0)[:, None] * directions)
    return scales[:, None] * y * scales


def sample_case(name):
    offset = {"mcmc01": 10**8, "mcmc06": 10**13}[name]
    data = [mp.mpf(str(Decimal(text) - offset)) for text in checks.values(f"nist_{name}")["data"]]
    return models.normal_sample(name), oracles.gaussian_errors(data, [[mp.mpf(1)]] * len(data))


def regression_case(name, centred):
    response, predictors = models.regression_data(name)
    columns = predictors - predictors.mean(axis=0) if centred else predictors
    rows = [[mp.mpf(1), *oracles.exactly(row)] for row in columns]
    return models.regression(name, centred), oracles.gaussian_errors(oracles.exactly(response), rows)


def logistic_case(name):
    design, response, _ = models.logistic_data(name)
    return models.logistic(name), oracles.logistic(response, design)


def schools_case(centred):
    return models.eight_schools(centred), oracles.eight_schools(models.SCHOOLS, models.SCHOOL_ERRORS, centred)


MEANS, SDS = np.array([0.31, -7.2, 1e3, 2.385, 0.0, 4.1, -1.7, 0.2, 9.9, -3.3]), 10.0 ** np.linspace(-4.3, 3.1, 10)
PRECISION = random_precision(10, 5)

CASES = {
    "standard": lambda: (normals.standard_normal(9), oracles.normal(np.zeros(9), np.eye(9))),
    "independent": lambda: (normals.independent_normal(MEANS, SDS), oracles.normal(MEANS, np.diag(SDS**2))),
    "log spaced": lambda: (normals.log_spaced_normal(2), oracles.normal(np.zeros(2), np.diag([1.0, 1e6]))),
    "dense": lambda: (normals.dense_normal(PRECISION, MEANS), oracles.normal(MEANS, exact_inverse(PRECISION))),
    "equicorrelated": lambda: (
        normals.equicorrelated_normal(9, 0.93, 1.7),
        oracles.normal(np.zeros(9), equicorrelated(9, 0.93, 1.7)),
    ),
    "negatively correlated": lambda: (
        normals.equicorrelated_normal(3, -0.43),
        oracles.normal(np.zeros(3), equicorrelated(3, -0.43)),
    ),
    "spiked": lambda: (normals.spiked_normal(*spikes()), oracles.normal(np.zeros(11), spiked_covariance(*spikes()))),
    "student": lambda: (shapes.student(2, 5.0, 0.5), oracles.student(5.0, equicorrelated(2, 0.5))),
    "student 10": lambda: (shapes.student(10, 3.7, 0.0, 2.1), oracles.student(3.7, equicorrelated(10, 0.0, 2.1))),
    "rosenbrock": lambda: (shapes.rosenbrock(), oracles.rosenbrock(0.5, 5.0, 1.0)),
    "rosenbrock pairs": lambda: (shapes.rosenbrock(0.05, 5.0, 1.0, 3), oracles.rosenbrock(0.05, 5.0, 1.0)),
    "ring": lambda: (shapes.ring(2, 3.0, 0.5), oracles.ring(3.0, 0.5)),
    "narrow ring": lambda: (shapes.ring(2, 2.0, 0.1), oracles.ring(2.0, 0.1)),
    "ring 10": lambda: (shapes.ring(10, 3.0, 0.5), oracles.ring(3.0, 0.5)),
    "funnel": lambda: (shapes.funnel(2), oracles.funnel(3.0)),
    "funnel 11": lambda: (shapes.funnel(11), oracles.funnel(3.0)),
    "funnel 3, sd 1": lambda: (shapes.funnel(3, 1.0), oracles.funnel(1.0)),
    "winding ridge": lambda: (shapes.winding_ridge(), oracles.winding_ridge(1.5, 2.0, 0.3)),
    "rough well": lambda: (shapes.rough_well(), oracles.rough_well(100.0, 4.0)),
    "exponential": lambda: (shapes.exponential([0.31, 27.0, 1.4]), oracles.exponential([0.31, 27.0, 1.4])),
    "half-normal": lambda: (shapes.half_normal([0.31, 27.0]), oracles.half_normal([0.31, 27.0])),
    "mcmc01": lambda: sample_case("mcmc01"),
    "mcmc06": lambda: sample_case("mcmc06"),
    "Norris": lambda: regression_case("Norris", True),
    "Pontius": lambda: regression_case("Pontius", True),
    "Longley": lambda: regression_case("Longley", False),
    "Longley centred": lambda: regression_case("Longley", True),
    "pima": lambda: logistic_case("pima"),
    "australian": lambda: logistic_case("australian"),
    "ripley": lambda: logistic_case("ripley"),
    "ripley linear": lambda: logistic_case("ripley_linear"),
    "schools centred": lambda: schools_case(True),
    "schools non-centred": lambda: schools_case(False),
}
DRAWABLE = [name for name in CASES if name not in ("pima", "australian", "ripley", "ripley linear")]


@cache
def case(name):
    with mp.workdps(oracles.DIGITS):
        return CASES[name]()
