"""Distributions of known law sampled through each map, against SciPy's quantiles; one compiled density of all kinds."""

import math
from functools import cache

import numpy as np
import pytest
import stat_checks
from numba import carray, cfunc, types
from scipy import LowLevelCallable, stats

import fellwalk as fw

FALSE_ALARM = 1e-5  # of each test, all its comparisons together; seeds are fixed
PROBABILITIES = (0.01, 0.05, 0.25, 0.5, 0.75, 0.95, 0.99)
ALPHA = np.array([0.7, 1.4, 2.1, 3.3])
ETA = 1.7
LOW, HIGH = -1.5, 2.0  # of the ordered uniforms

PARAMETERS = fw.Parameters(
    rate=fw.positive(2), share=fw.shares(4), chance=fw.between(0.0, 1.0), lag=fw.positive(above=1.0),
    deep=fw.positive(above=None, below=-2.0), cut=fw.increasing(4, above=LOW, below=HIGH),
    wait=fw.increasing(3, above=0.0), fall=fw.increasing(2, below=0.0), free=fw.increasing(3),
    corr=fw.correlation(3))


@cache
def density():
    """Independent blocks: two gammas, Dirichlet, beta, half-t moved to 1, exponential backwards from -2, ordered
    uniforms, arrivals of a Poisson process (also backwards), ordered normals, det(R)^(eta - 1)."""
    pointer = types.CPointer(types.float64)

    # division by zero at an edge (a share that rounds to 0) is an infinity, as in C, and ends the path
    @cfunc(types.intc(types.uintp, pointer, pointer, pointer, types.voidptr), error_model="numpy")
    def laws(d, point, value, gradient, context):
        x, g = carray(point, (24,)), carray(gradient, (24,))
        total = -0.6 * math.log(x[0]) - x[0] + 1.385 * math.log(x[1]) - x[1]
        g[0], g[1] = -0.6 / x[0] - 1, 1.385 / x[1] - 1
        for k in range(4):
            total += (ALPHA[k] - 1) * math.log(x[2 + k])
            g[2 + k] = (ALPHA[k] - 1) / x[2 + k]
        total += -0.3 * math.log(x[6]) + 1.2 * math.log1p(-x[6])
        g[6] = -0.3 / x[6] - 1.2 / (1 - x[6])
        t = x[7] - 1.0
        total += -2.0 * math.log1p(t * t / 3.0) + x[8]
        g[7], g[8] = -4.0 * t / (3.0 + t * t), 1.0
        for k in range(9, 24):
            g[k] = 0.0
        total += x[16 - 1] * -1.0 + x[16]
        g[15], g[16] = -1.0, 1.0
        for k in range(18, 21):
            total -= 0.5 * x[k] * x[k]
            g[k] = -x[k]
        a, b, c = x[21], x[22], x[23]
        det = 1 - a * a - b * b - c * c + 2 * a * b * c
        total += 0.7 * math.log(det)
        g[21], g[22], g[23] = 1.4 * (b * c - a) / det, 1.4 * (a * c - b) / det, 1.4 * (a * b - c) / det
        value[0] = total
        return 0

    return fw.Density(LowLevelCallable(laws.ctypes), PARAMETERS)


class NormalOrder:
    """The k-th smallest of three standard normals: its cdf is that of a beta law at the normal cdf."""

    def __init__(self, k):
        self.law = stats.beta(k, 4 - k)

    def ppf(self, q):
        return stats.norm.ppf(self.law.ppf(q))


class Turned:
    """The law of `at` minus a variable of the law given."""

    def __init__(self, at, law):
        self.at, self.law = at, law

    def ppf(self, q):
        return self.at - self.law.ppf(1 - q)


class HalfT:
    """1 + |t|, t Student with 3 degrees of freedom."""

    def ppf(self, q):
        return 1.0 + stats.t(3).ppf(0.5 + 0.5 * q)


LAWS = {
    ("rate", 0): stats.gamma(0.4), ("rate", 1): stats.gamma(2.385),
    **{("share", k): stats.beta(a, ALPHA.sum() - a) for k, a in enumerate(ALPHA)},
    ("chance",): stats.beta(0.7, 2.2), ("lag",): HalfT(), ("deep",): Turned(-2.0, stats.expon()),
    **{("cut", k): stats.beta(k + 1, 4 - k, LOW, HIGH - LOW) for k in range(4)},
    **{("wait", k): stats.gamma(k + 1) for k in range(3)},
    **{("fall", k): Turned(0.0, stats.gamma(2 - k)) for k in range(2)},
    **{("free", k): NormalOrder(k + 1) for k in range(3)},
    # Lewandowski, Kurowicka & Joe (2009): each entry of a matrix of n rows is beta(eta - 1 + n/2) on (-1, 1)
    **{("corr", i, j): stats.beta(ETA + 0.5, ETA + 0.5, -1, 2) for i in range(3) for j in range(i)},
}


@cache
def result(motion):
    return fw.run(density(), motion=motion, keep=6000, chains=4, seed=11, progress="off", acceptance=0.9)


def comparisons(draws, laws):
    found = []
    for (name, *place), law in laws.items():
        x = draws[name][(..., *place)]
        for q in PROBABILITIES:
            found.append(stat_checks.compare_quantile(x, float(law.ppf(q)), q, f"{name}{place} quantile {q}"))
    return found


@pytest.mark.parametrize("motion", [fw.Leapfrog(), fw.Lagrangian()], ids=["leapfrog", "lagrangian"])
def test_known_laws(motion):
    found = comparisons(result(motion), LAWS)
    stat_checks.assert_all(found, FALSE_ALARM)
    # The test can see: a shift of 0.05 in any probability would be beyond the limit.
    assert max(c.error for c in found) * stat_checks.z_limit(len(found), FALSE_ALARM) < 0.05


def test_a_missing_jacobian_would_be_seen():
    """Without log-Jacobian the gamma law would be that of shape - 1, shares those of alpha - 1, and so on."""
    wrong = {("rate", 1): stats.gamma(1.385), ("share", 3): stats.beta(2.3, 2.2), ("chance",): stats.beta(1.7, 3.2),
             ("corr", 1, 0): stats.beta(ETA, ETA, -1, 2)}
    for key, law in wrong.items():
        with pytest.raises(AssertionError, match="beyond"):
            stat_checks.assert_all(comparisons(result(fw.Leapfrog()), {key: law}), FALSE_ALARM)


def test_natural_values_are_inside_and_consistent():
    found = result(fw.Leapfrog())
    assert np.all(found["rate"] > 0)
    np.testing.assert_allclose(found["share"].sum(axis=-1), 1, rtol=8e-16)
    assert np.all(np.diff(found["cut"], axis=-1) > 0)
    assert np.linalg.eigvalsh(found["corr"]).min() > 0
    np.testing.assert_array_equal(PARAMETERS.natural(found.free_draws), found.draws)
