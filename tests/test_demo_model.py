"""The demo's invented scenario: density against independent sums, gradient, data, and that it is a funnel."""

import math
import pickle
from importlib.resources import files

import mpmath
import numpy as np
import pytest
from scipy import stats

from fellwalk.demo import hives, make_hives

# Fixed points with no symmetry: the start, one in the wide part, one deep in the neck, one far out.
RANDOM = np.random.default_rng(20451)
POINTS = {
    "start": np.array(hives.start),
    "wide": np.concatenate([[1.873, 0.412, -0.137], 2.385 + 0.7 * RANDOM.standard_normal(14)]),
    "neck": np.concatenate([[2.219, -3.184, 0.093], 2.219 + 0.04 * RANDOM.standard_normal(14)]),
    "far": np.concatenate([[-11.37, 2.641, 1.877], 9.43 * RANDOM.standard_normal(14)]),
}
at_every_point = pytest.mark.parametrize("x", POINTS.values(), ids=POINTS.keys())


def raw_rows():
    """The weighings read with plain string operations, not with the module's own reader."""
    text = files("fellwalk.demo").joinpath("hives.csv").read_text(encoding="utf-8")
    rows = [line.split(",") for line in text.splitlines() if not line.startswith(("#", "apiary,"))]
    order = list(dict.fromkeys(row[0] for row in rows))
    return order, [(order.index(apiary), float(gain)) for apiary, _, gain in rows]


def log_density_by_scipy(x):
    """The same model as a sum over raw weighings of scipy.stats densities; also the sum of the terms' sizes."""
    _, rows = raw_rows()
    spread, noise, levels = math.exp(x[1]), math.exp(x[2]), x[3:]
    terms = [
        stats.norm.logpdf(x[0], 2.0, 2.0),
        stats.halfnorm.logpdf(spread, scale=1.0) + x[1],
        stats.halfnorm.logpdf(noise, scale=2.0) + x[2],
        *stats.norm.logpdf(levels, x[0], spread),
        *(stats.norm.logpdf(gain, levels[j], noise) for j, gain in rows),
    ]
    return math.fsum(terms), math.fsum(map(abs, terms))


def log_density_by_mpmath(*x):
    """The same model up to a constant, in mpmath numbers, from raw weighings."""
    _, rows = raw_rows()
    mean, log_spread, log_noise, *levels = x
    spread, noise = mpmath.exp(log_spread), mpmath.exp(log_noise)
    total = -((mean - 2) ** 2) / 8 - spread**2 / 2 + log_spread - noise**2 / 8 + log_noise
    total -= sum(((level - mean) / spread) ** 2 / 2 + log_spread for level in levels)
    return total - sum(((gain - levels[j]) / noise) ** 2 / 2 + log_noise for j, gain in rows)


@at_every_point
def test_value_is_the_sum_of_textbook_densities(x):
    value, _ = hives.value_gradient(x)
    expected, size = log_density_by_scipy(x)
    # About 75 terms, each right to a few units in the last place: 1e-14 of the sum of their sizes.
    assert abs(value - expected) <= 1e-14 * size


@at_every_point
def test_gradient_against_derivatives_in_50_digits(x):
    _, gradient = hives.value_gradient(x)
    with mpmath.workdps(50):
        point = tuple(mpmath.mpf(float(c)) for c in x)
        expected = np.array(
            [
                float(mpmath.diff(log_density_by_mpmath, point, tuple(int(i == k) for i in range(len(x)))))
                for k in range(len(x))
            ]
        )
    # Sums of at most 75 terms of this size, each with relative error of a few 1e-16.
    np.testing.assert_allclose(gradient, expected, rtol=1e-12, atol=1e-13 * np.max(np.abs(expected)))


def test_a_new_gradient_at_each_call_and_x_untouched():
    x = POINTS["wide"].copy()
    _, first = hives.value_gradient(x)
    kept = first.copy()
    hives.value_gradient(POINTS["far"])
    np.testing.assert_array_equal(first, kept)
    np.testing.assert_array_equal(x, POINTS["wide"])


@pytest.mark.parametrize("coordinate", [1, 2])
@pytest.mark.parametrize("log_sd", [-1000.0, -101.0, 101.0, 1000.0])
def test_absurd_scales_are_minus_infinity_without_a_warning(coordinate, log_sd):
    x = np.array(hives.start)
    x[coordinate] = log_sd
    value, gradient = hives.value_gradient(x)
    assert value == -math.inf
    np.testing.assert_array_equal(gradient, np.zeros(17))


@pytest.mark.parametrize("coordinate", [1, 2])
@pytest.mark.parametrize("log_sd", [-99.0, 99.0])
def test_finite_up_to_the_stated_limit(coordinate, log_sd):
    x = POINTS["far"].copy()
    x[coordinate] = log_sd
    value, gradient = hives.value_gradient(x)
    assert math.isfinite(value)
    assert np.all(np.isfinite(gradient))


def test_names_and_natural_units():
    order, _ = raw_rows()
    assert hives.dimension == len(hives.names) == len(hives.coordinates) == len(hives.start) == 17
    assert hives.names[:3] == ["mean gain", "spread between apiaries", "noise of a weighing"]
    assert hives.names[3:] == hives.coordinates[3:] == order
    draws = np.stack(list(POINTS.values())).reshape(2, 2, 17)
    before = draws.copy()
    natural = hives.natural(draws)
    np.testing.assert_array_equal(draws, before)
    np.testing.assert_array_equal(natural[..., 1:3], np.exp(draws[..., 1:3]))
    np.testing.assert_array_equal(np.delete(natural, [1, 2], -1), np.delete(draws, [1, 2], -1))


def test_start_cannot_be_changed_by_accident():
    with pytest.raises(ValueError, match="read-only"):
        hives.start[0] = 1.0


def test_density_travels_by_pickle():
    again = pickle.loads(pickle.dumps(hives.value_gradient))
    assert again(POINTS["wide"])[0] == hives.value_gradient(POINTS["wide"])[0]


def test_data_are_marked_invented_and_come_from_the_script():
    text = files("fellwalk.demo").joinpath("hives.csv").read_text(encoding="utf-8")
    assert text.splitlines()[0].startswith("# invented data")
    assert text == make_hives.invent()


def test_fourteen_apiaries_with_two_to_six_weighings():
    order, rows = raw_rows()
    counts = np.bincount([j for j, _ in rows])
    assert len(order) == len(counts) == 14
    assert counts.min() >= 2
    assert counts.max() <= 6


def exact_spread():
    """Posterior of log t on a grid, with its probabilities: m and the levels integrate out in closed form.

    Averages are then normal around m with variance t^2 + s^2/n, which leaves a sum over a grid of (log t, log s).
    """
    order, rows = raw_rows()
    apiary = np.array([j for j, _ in rows])
    gain = np.array([y for _, y in rows])
    n = np.bincount(apiary)
    average = np.bincount(apiary, gain) / n
    within = np.sum((gain - average[apiary]) ** 2)
    log_t = np.linspace(-9.0, 2.0, 441)
    log_s = np.linspace(-1.2, 1.4, 161)
    t2 = np.exp(2 * log_t)[:, None]
    s2 = np.exp(2 * log_s)[None, :]
    variance = t2[..., None] + s2[..., None] / n
    a = np.sum(1 / variance, axis=-1) + 1 / 4
    b = np.sum(average / variance, axis=-1) + 2 / 4
    c = np.sum(average**2 / variance, axis=-1) + 4 / 4
    logp = -0.5 * np.sum(np.log(variance), axis=-1) - 0.5 * np.log(a) - 0.5 * (c - b * b / a)
    logp += -(len(gain) - len(order)) * log_s - within / (2 * s2) - t2 / 2 + log_t[:, None] - s2 / 8 + log_s
    p = np.exp(logp - logp.max()).sum(axis=1)
    return log_t, p / p.sum()


def test_posterior_is_a_funnel():
    log_t, p = exact_spread()
    below = np.cumsum(p)
    # The neck holds a few per cent: enough to matter, little enough to walk in seconds.
    assert 0.02 < np.interp(math.log(0.1), log_t, below) < 0.05
    # Given t and s = 1, levels spread about m by (1/t^2 + n)^(-1/2): five times more at the 99% point of t than at 1%.
    low, high = np.exp(np.interp([0.01, 0.99], below, log_t))
    counts = np.bincount([j for j, _ in raw_rows()[1]])
    width = [np.mean((1 / t**2 + counts) ** -0.5) for t in (low, high)]
    assert width[1] / width[0] > 5
