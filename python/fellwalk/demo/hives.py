"""Invented scenario: how much weight hives gain in a week, in 14 apiaries with 2 to 6 weighings each.

The data are made up (hives.csv, by make_hives.py). All quantities are in kg a week. The model, with m the mean gain
over all apiaries, t > 0 the spread between apiaries, s > 0 the noise of one weighing and a[j] the level of apiary j:

    m      ~ normal(2, 2)               a hive in a fair season gains a few kg a week, and may lose some
    t      ~ half-normal, scale 1       apiaries of one region seldom differ by more than 2 kg a week
    s      ~ half-normal, scale 2       weather, robbing and the beekeeper's scales
    a[j]   ~ normal(m, t)
    y[j,k] ~ normal(a[j], s)            the weighings

A point to walk over is x = (m, log t, log s, a[0], ..., a[13]): all 17 coordinates are free, and the density carries
the factor t s that the logarithms bring. The levels a[j] are walked as they are, not as multiples of t. As the data
do not rule out that all apiaries are alike, t may be small, and the levels are then confined to m within t: a funnel,
wide where t is large and narrow where it is small, which is what makes this small model a fair trial.
"""

import csv
import math
from importlib.resources import files

import numpy as np
from numpy.typing import NDArray

MEAN_CENTRE, MEAN_SCALE = 2.0, 2.0
SPREAD_SCALE = 1.0
NOISE_SCALE = 2.0
# Beyond exp(+-100) kg the products below could overflow; less than exp(-90) of the probability lies there.
LOG_LIMIT = 100.0


def read_weighings() -> tuple[list[str], NDArray[np.int64], NDArray[np.float64]]:
    """The shipped data: names of the apiaries, and for every weighing the index of its apiary and the gain in kg.

    Returns
    -------
    names : list of 14 str
    apiary : int64 array (weighings,), indices into names
    gain : float64 array (weighings,), kg a week
    """
    text = files(__package__).joinpath("hives.csv").read_text(encoding="utf-8")
    rows = list(csv.DictReader(line for line in text.splitlines() if not line.startswith("#")))
    names = list(dict.fromkeys(row["apiary"] for row in rows))
    apiary = np.array([names.index(row["apiary"]) for row in rows], dtype=np.int64)
    return names, apiary, np.array([float(row["gain_kg"]) for row in rows])


_apiaries, _apiary, _gain = read_weighings()
_groups = len(_apiaries)
# The weighings enter only through each apiary's count and average, and the sum of squares around the averages.
_counts = np.bincount(_apiary).astype(float)
_averages = np.bincount(_apiary, _gain) / _counts
_squares_within = float(np.sum((_gain - _averages[_apiary]) ** 2))
_weighings = len(_gain)
_ones = np.ones(_groups)
_constant = (
    -0.5 * (_weighings + _groups + 1) * math.log(2 * math.pi)
    - math.log(MEAN_SCALE)
    + math.log(2 / math.pi)
    - math.log(SPREAD_SCALE)
    - math.log(NOISE_SCALE)
)

dimension = 3 + _groups
#: What each coordinate of `natural(x)` is, for tables.
names = ["mean gain", "spread between apiaries", "noise of a weighing", *_apiaries]
#: What each coordinate of x is.
coordinates = ["mean gain", "log spread between apiaries", "log noise of a weighing", *_apiaries]
#: A point to start from: everything at a plain guess made without the data. Shape (17,).
start = np.concatenate([[MEAN_CENTRE, 0.0, 0.0], np.full(_groups, MEAN_CENTRE)])
start.flags.writeable = False


def value_gradient(x: NDArray[np.float64]) -> tuple[float, NDArray[np.float64]]:
    """Log posterior density at x, up to the logarithm of the evidence, and its gradient.

    Parameters
    ----------
    x : float64 array (17,)
        (m, log t, log s, a[0], ..., a[13]), see the module's text.

    Returns
    -------
    value : float
        Minus infinity when log t or log s is beyond +-100.
    gradient : float64 array (17,)
        A new array; zero where the value is minus infinity.
    """
    mean, log_spread, log_noise = x[:3].tolist()
    if abs(log_spread) > LOG_LIMIT or abs(log_noise) > LOG_LIMIT:
        return -math.inf, np.zeros(dimension)
    levels = x[3:]
    spread_precision = math.exp(-2.0 * log_spread)
    noise_precision = math.exp(-2.0 * log_noise)
    spread_term = math.exp(2.0 * log_spread) / SPREAD_SCALE**2
    noise_term = math.exp(2.0 * log_noise) / NOISE_SCALE**2
    mean_offset = (mean - MEAN_CENTRE) / MEAN_SCALE

    apart = levels - mean
    misses = _averages - levels
    pulls = _counts * misses
    between = spread_precision * float(apart.dot(apart))
    within = noise_precision * (_squares_within + float(pulls.dot(misses)))

    gradient = np.empty(dimension)
    gradient[0] = spread_precision * float(apart.dot(_ones)) - mean_offset / MEAN_SCALE
    gradient[1] = between - _groups + 1.0 - spread_term
    gradient[2] = within - _weighings + 1.0 - noise_term
    pulls *= noise_precision
    apart *= spread_precision
    np.subtract(pulls, apart, out=gradient[3:])

    value = (
        _constant
        - (_groups - 1) * log_spread
        - (_weighings - 1) * log_noise
        - 0.5 * (between + within + spread_term + noise_term + mean_offset * mean_offset)
    )
    return value, gradient


def natural(x: NDArray[np.float64]) -> NDArray[np.float64]:
    """Points or draws in natural units, kg a week: the two logarithms are undone, the rest is unchanged.

    Parameters
    ----------
    x : float64 array (..., 17)
        One point, or draws of any leading shape such as (chains, draws, 17).

    Returns
    -------
    float64 array of the same shape, its last axis as in `names`. x is not changed.
    """
    out = np.array(x, dtype=np.float64)
    out[..., 1:3] = np.exp(out[..., 1:3])
    return out
