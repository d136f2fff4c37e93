"""Twelve correct densities and the planted mistakes that an audit is tried on; written before the audit itself.

CORRECT: each entry makes a density with unknown scale `s`: its spread is about s in every coordinate that has a unit.
PLANTED: each entry makes a density with one mistake, and says which coordinate the audit has to name (None where the
mistake is not in one coordinate) and words of which at least one has to stand in what it says.
"""

import math
from collections.abc import Callable
from dataclasses import dataclass
from functools import cache

import numpy as np
from compiled_densities import ctypes_function
from scipy.special import expit, logsumexp

import fellwalk as fw
from fellwalk.demo import hives

_rng = np.random.default_rng(2385)
_root = np.eye(4) + 0.35 * np.tril(_rng.standard_normal((4, 4)), -1)
PRECISION = _root @ _root.T
DESIGN = np.column_stack([np.ones(40), _rng.standard_normal((40, 2)) @ np.diag([1.3, 0.7])])
ANSWERS = (_rng.random(40) < expit(DESIGN @ [0.4, -1.1, 0.8])).astype(float)
DATA = 2.0 + 1.7 * _rng.standard_normal(25)


# ---- twelve correct densities ---------------------------------------------------------------------------------------


def correlated_normal(s: float) -> fw.Density:
    def f(x):
        u = x / s
        return -0.5 * float(u @ PRECISION @ u), -(PRECISION @ u) / s

    return fw.Density(f, 4, hessian_product=lambda x, p: -(PRECISION @ p) / s**2,
                      start=s * np.array([0.4, -1.2, 0.9, 0.3]))


def students(s: float) -> fw.Density:
    """Three independent Student-t with 3 degrees of freedom."""

    def f(x):
        u = x / s
        return -2.0 * float(np.log1p(u * u / 3.0).sum()), -4.0 * u / (3.0 + u * u) / s

    return fw.Density(f, 3, start=s * np.array([0.7, -2.2, 0.05]))


def funnel(s: float) -> fw.Density:
    """x0 = s v with v ~ N(0, 9), the others N(0, s^2 exp(v)) (Neal 2003, Ann. Stat. 31)."""

    def f(x):
        v, rest = x[0] / s, x[1:] / s
        if abs(v) > 300:
            return -np.inf, np.zeros(3)
        squares = float(rest @ rest) * math.exp(-v)
        value = -v * v / 18.0 - 0.5 * squares - v
        return value, np.array([-v / 9.0 + 0.5 * squares - 1.0, *(-rest * math.exp(-v))]) / s

    return fw.Density(f, 3, start=s * np.array([-1.3, 0.4, -0.2]))


def winding(s: float) -> fw.Density:
    """The Rosenbrock function, in place, with its Hessian product."""

    def f(x, gradient):
        a, b = x[0] / s, x[1] / s
        r = b - a * a
        gradient[0] = (-(a - 1.0) / 10.0 + 20.0 * a * r) / s
        gradient[1] = -10.0 * r / s
        return -((a - 1.0) ** 2) / 20.0 - 5.0 * r * r

    def product(x, p):
        a, b = x[0] / s, x[1] / s
        cross = 20.0 * a
        first = -0.1 + 20.0 * (b - 3.0 * a * a)
        return np.array([first * p[0] + cross * p[1], cross * p[0] - 10.0 * p[1]]) / s**2

    return fw.Density(f, 2, in_place=True, hessian_product=product, start=s * np.array([-1.4, 2.1]))


def logistic(s: float) -> fw.Density:
    """Logistic regression; the columns of the design are in units 1/s; normal prior of spread 2.5 s."""

    def f(x):
        u = x / s
        eta = DESIGN @ u
        value = float(ANSWERS @ eta - np.logaddexp(0.0, eta).sum() - 0.5 * u @ u / 6.25)
        return value, (DESIGN.T @ (ANSWERS - expit(eta)) - u / 6.25) / s

    return fw.Density(f, 3, start=s * np.array([0.1, -0.6, 0.5]), names=["level", "dose", "age"])


def kinked(s: float) -> fw.Density:
    """A Laplace density: its gradient jumps where a coordinate is 0."""
    return fw.Density(lambda x: (-float(np.abs(x / s).sum()), -np.sign(x) / s), 3, start=s * np.array([0.8, -0.3, 2.1]))


def two_hills(s: float) -> fw.Density:
    """0.3 N(-3, 1) + 0.7 N(2, 0.5^2) in each of two coordinates."""

    def f(x):
        u = x / s
        parts = np.array([math.log(0.3) - 0.5 * (u + 3.0) ** 2, math.log(1.4) - 2.0 * (u - 2.0) ** 2])
        total = logsumexp(parts, axis=0)
        weights = np.exp(parts - total)
        return float(total.sum()), (-weights[0] * (u + 3.0) - weights[1] * 4.0 * (u - 2.0)) / s

    return fw.Density(f, 2, start=s * np.array([1.6, -2.5]))


def cut_off(s: float) -> fw.Density:
    """A half-normal and an exponential written without Parameters: minus infinity below 0."""

    def f(x):
        if x.min() <= 0.0:
            return -np.inf, np.zeros(2)
        return -0.5 * float(x[0] / s) ** 2 - float(x[1] / s), np.array([-x[0] / s**2, -1.0 / s])

    return fw.Density(f, 2, start=s * np.array([0.9, 1.4]))


def shifted(s: float) -> fw.Density:
    """Means of many data, computed from raw sums, so that seven digits cancel; the coordinates far from 0."""
    n, centre = 4000.0, 300.0

    def f(x):
        u = x / s
        square = n * (u * u - 2.0 * centre * u + centre * centre)
        return -0.5 * float(square.sum()) - 7.5e8, -n * (u - centre) / s

    return fw.Density(f, 2, start=s * (centre + np.array([0.013, -0.021])))


def waiting_times(s: float) -> fw.Density:
    """Gamma and a bounded beta through Parameters, the user's function in natural values, with its Hessian product."""
    parameters = fw.Parameters(rate=fw.positive(2), angle=fw.between(0.0, 2.5 * s))

    def f(x):
        rate, t = x[:2], x[2] / (2.5 * s)
        value = float((1.5 * np.log(rate) - rate / s).sum() + 0.8 * np.log(t) + 2.1 * np.log1p(-t))
        return value, np.array([*(1.5 / rate - 1.0 / s), (0.8 / t - 2.1 / (1.0 - t)) / (2.5 * s)])

    def product(x, p):
        t = x[2] / (2.5 * s)
        last = (-0.8 / t**2 - 2.1 / (1.0 - t) ** 2) / (2.5 * s) ** 2
        return np.array([*(-1.5 / x[:2] ** 2), last]) * p

    return fw.Density(f, parameters, hessian_product=product, start=s * np.array([1.1, 2.9, 0.7]))


def composition(s: float) -> fw.Density:
    """Shares, cut points and a correlation matrix by name: Dirichlet, ordered exponentials' gaps, det(R)^1.5."""
    parameters = fw.Parameters(share=fw.shares(4), cut=fw.increasing(3), corr=fw.correlation(3))
    alpha = np.array([0.7, 1.4, 2.1, 3.3])

    def f(values):
        share, cut, corr = values["share"], values["cut"] / s, values["corr"]
        sign, logdet = np.linalg.slogdet(corr)
        if sign <= 0:
            return -np.inf, {}
        gaps = np.diff(cut)
        value = float((alpha - 1.0) @ np.log(share) - 0.5 * cut @ cut + 0.5 * np.log(gaps).sum() + 1.5 * logdet)
        slope = -cut
        slope[1:] += 0.5 / gaps
        slope[:-1] -= 0.5 / gaps
        return value, {"share": (alpha - 1.0) / share, "cut": slope / s, "corr": 1.5 * np.linalg.inv(corr)}

    start = {"share": [0.1, 0.3, 0.35, 0.25], "cut": s * np.array([-1.1, 0.2, 0.9]),
             "corr": [[1, 0.3, -0.2], [0.3, 1, 0.1], [-0.2, 0.1, 1]]}
    return fw.Density(f, parameters, by_name=True, start=start)


def apiaries(s: float) -> fw.Density:
    """The demo's hierarchical model with its lengths in units of s."""
    unit = np.ones(hives.dimension)
    unit[[0, *range(3, hives.dimension)]] = s

    def f(x):
        value, gradient = hives.value_gradient(x / unit)
        return value, gradient / unit

    return fw.Density(f, hives.dimension, names=hives.coordinates, start=hives.start * unit)


CORRECT: dict[str, Callable[[float], fw.Density]] = {
    make.__name__: make
    for make in (correlated_normal, students, funnel, winding, logistic, kinked, two_hills, cut_off, shifted,
                 waiting_times, composition, apiaries)
}
SCALES = (1e-8, 1e-3, 1.0, 1e4, 1e8)


# ---- planted mistakes -----------------------------------------------------------------------------------------------


@dataclass(frozen=True)
class Planted:
    """A density with one mistake; see the module's text. `small`: seen by the few gradients that a run spends."""

    make: Callable[[], fw.Density]
    names: str | None
    words: tuple[str, ...]
    small: bool = True


def _regression(change: Callable[[np.ndarray, np.ndarray], np.ndarray]) -> fw.Density:
    """Normal data with unknown mean and log spread, mean ~ N(0, 10^2), log spread ~ N(0, 1); gradient changed."""

    def f(x):
        mean, log_spread = x
        spread = math.exp(min(log_spread, 300.0))
        r = (DATA - mean) / spread
        value = -len(DATA) * log_spread - 0.5 * float(r @ r) - 0.005 * mean**2 - 0.5 * log_spread**2
        gradient = np.array([r.sum() / spread - 0.01 * mean, r @ r - len(DATA) - log_spread])
        return value, change(gradient, x)

    return fw.Density(f, 2, names=["mean", "log spread"], start=[1.3, 0.9])


def wrong_sign() -> fw.Density:
    return _regression(lambda g, x: g * [-1.0, 1.0])


def factor_two() -> fw.Density:
    def f(x):
        return -0.5 * float(x @ PRECISION @ x), -2.0 * (PRECISION @ x)

    return fw.Density(f, 4, start=[0.4, -1.2, 0.9, 0.3])


def missing_jacobian() -> fw.Density:
    """A gamma law walked in log t: the value has + log t for the change of variable, its gradient has no + 1."""

    def f(x):
        t = math.exp(min(x[1], 300.0))
        value = -0.5 * x[0] ** 2 + 2.5 * x[1] - t + x[1]
        return value, np.array([-x[0], 2.5 - t])

    return fw.Density(f, 2, names=["level", "log t"], start=[0.3, 1.1])


def forgotten_prior() -> fw.Density:
    """The gradient lacks the prior of the log spread, -x^2/2."""
    return _regression(lambda g, x: g + np.array([0.0, x[1]]))


def single_precision() -> fw.Density:
    design, answers = DESIGN.astype(np.float32), ANSWERS.astype(np.float32)

    def f(x):
        u = x.astype(np.float32)
        eta = design @ u
        value = answers @ eta - np.logaddexp(np.float32(0.0), eta).sum() - np.float32(0.08) * (u @ u)
        return float(value), (design.T @ (answers - expit(eta)) - np.float32(0.16) * u).astype(float)

    return fw.Density(f, 3, start=[0.1, -0.6, 0.5])


def swapped_entries() -> fw.Density:
    return _regression(lambda g, x: g[::-1].copy())


def never_filled() -> fw.Density:
    """In place, the last entry left as it was."""

    def f(x, gradient):
        gradient[:2] = -x[:2]
        return -0.5 * float(x @ x)

    return fw.Density(f, 3, in_place=True, names=["a", "b", "c"], start=[0.4, -0.8, 1.3])


def added_up() -> fw.Density:
    """In place, adding to the gradient without setting it to 0 first."""

    def f(x, gradient):
        gradient -= x
        return -0.5 * float(x @ x)

    return fw.Density(f, 3, in_place=True, start=[0.4, -0.8, 1.3])


def input_changed() -> fw.Density:
    def f(x):
        x -= 1.3
        return -0.5 * float(x @ x), -x.copy()

    return fw.Density(f, 3, start=[0.4, -0.8, 1.9])


def random_subset() -> fw.Density:
    rng = np.random.default_rng(5)

    def f(x):
        some = rng.choice(DATA, 10)
        return -1.25 * float(((some - x[0]) ** 2).sum()), np.array([2.5 * (some - x[0]).sum()])

    return fw.Density(f, 1, start=[1.7])


def wrong_product() -> fw.Density:
    lopsided = PRECISION.copy()
    lopsided[0, 2] = 0.0

    def f(x):
        return -0.5 * float(x @ PRECISION @ x), -(PRECISION @ x)

    return fw.Density(f, 4, hessian_product=lambda x, p: -(lopsided @ p), start=[0.4, -1.2, 0.9, 0.3])


@cache
def _shared_scratch():
    from audit_compiled import shared_scratch

    return shared_scratch()


def shared_between_threads() -> fw.Density:
    """Compiled, with its intermediate results in a static array."""
    return fw.Density(_shared_scratch(), 40, start=np.linspace(-1.0, 1.3, 40))


def raises_far_out() -> fw.Density:
    """math.exp overflows where the log spread is large."""

    def f(x):
        spread = math.exp(x[1])
        r = (DATA - x[0]) / spread
        value = -len(DATA) * x[1] - 0.5 * float(r @ r) - 0.5 * float(x @ x)
        return value, np.array([r.sum() / spread - x[0], r @ r - len(DATA) - x[1]])

    return fw.Density(f, 2, start=[1.3, 0.9])


def infinite_at_edge() -> fw.Density:
    """Plus infinity, where minus infinity was meant, outside the support."""

    def f(x):
        if x[0] <= 0.0:
            return np.inf, np.zeros(2)
        return 2.0 * math.log(x[0]) - x[0] - 0.5 * x[1] ** 2, np.array([2.0 / x[0] - 1.0, -x[1]])

    return fw.Density(f, 2, start=[1.6, 0.4])


def minus_log_density() -> fw.Density:
    def f(x):
        return 0.5 * float(x @ PRECISION @ x), PRECISION @ x

    return fw.Density(f, 4, start=[0.4, -1.2, 0.9, 0.3])


def yesterday() -> fw.Density:
    """The gradient is kept from the call before."""
    kept = [np.zeros(3)]

    def f(x):
        before = kept[0]
        kept[0] = -x.copy()
        return -0.5 * float(x @ x), before

    return fw.Density(f, 3, start=[0.4, -0.8, 1.3])


def wrong_variable() -> fw.Density:
    """With Parameters, the gradient of log rate where that of the rate belongs."""
    parameters = fw.Parameters(level=fw.free(), rate=fw.positive())

    def f(x):
        return -0.5 * float(x[0]) ** 2 + 1.5 * math.log(x[1]) - 0.4 * x[1], np.array([-x[0], 1.5 - 0.4 * x[1]])

    return fw.Density(f, parameters, start=[0.3, 2.2])


def nan_outside() -> fw.Density:
    """The logarithm of a negative number a little way off."""

    def f(x):
        with np.errstate(invalid="ignore"):
            return float(2.0 * np.log(x[0]) - x[0]), np.array([2.0 / x[0] - 1.0])

    return fw.Density(f, 1, start=[1.6])


PLANTED: dict[str, Planted] = {
    "wrong sign": Planted(wrong_sign, "mean", ("sign",)),
    "factor two": Planted(factor_two, "x[", ("factor 2", "twice")),
    "missing Jacobian": Planted(missing_jacobian, "log t", ("Jacobian",)),
    "forgotten prior": Planted(forgotten_prior, "log spread", ("prior",)),
    "single precision": Planted(single_precision, None, ("float32", "single precision"), small=False),
    "swapped entries": Planted(swapped_entries, "mean", ("exchanged", "swapped")),
    "never filled": Planted(never_filled, "c", ("not written", "never written", "left as it was")),
    "added up": Planted(added_up, None, ("adds to", "added to")),
    "input changed": Planted(input_changed, None, ("changes its input", "changes the position"), small=False),
    "random subset": Planted(random_subset, None, ("same position", "same input")),
    "wrong product": Planted(wrong_product, "x[", ("symmetric", "Hessian"), small=False),
    "shared between threads": Planted(shared_between_threads, None, ("two threads",), small=False),
    "raises far out": Planted(raises_far_out, None, ("OverflowError",), small=False),
    "infinite at the edge": Planted(infinite_at_edge, None, ("plus infinity",), small=False),
    "minus the log density": Planted(minus_log_density, None, ("minus the log density",), small=False),
    "gradient of yesterday": Planted(yesterday, None, ("same position", "same input")),
    "wrong variable": Planted(wrong_variable, "rate", ("natural value", "chain rule")),
    "NaN outside": Planted(nan_outside, None, ("NaN",), small=False),
}


@cache
def compiled_normal() -> fw.Density:
    """A correct compiled density without a context."""
    return fw.Density(ctypes_function("plain"), 3, start=[0.4, -0.8, 1.3])
