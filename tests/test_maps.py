"""The maps of bounded parameters, against independent formulas in many digits, to the edges of double precision.

The formulas here are the textbooks', not the ones the core computes with: shares as a softmax over an orthonormal basis
made by Gram-Schmidt, gaps by plain sums, correlations by the recursion of partial correlations on R itself
(Lewandowski, Kurowicka & Joe 2009, eq. 2). Log-Jacobians are log |det| of derivatives taken in mpmath, or, where the
matrix is large, of its Taylor arithmetic; nothing is taken from the code that is tested.
"""

import math

import mpmath as mp
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

import fellwalk as fw

DIGITS = 60
EPS = 2.0**-52
TINY = 5e-324


# ---- formulas in many digits ---------------------------------------------------------------------------------------


def exact_basis(n):
    """Orthonormal basis of the vectors of sum 0, by Gram-Schmidt on e_0 + ... + e_{k-1} - k e_k."""
    columns = []
    for k in range(1, n):
        column = [mp.mpf(1)] * k + [mp.mpf(-k)] + [mp.mpf(0)] * (n - k - 1)
        for other in columns:
            dot = mp.fsum(a * b for a, b in zip(column, other, strict=True))
            column = [a - dot * b for a, b in zip(column, other, strict=True)]
        norm = mp.sqrt(mp.fsum(a * a for a in column))
        columns.append([a / norm for a in column])
    return columns


def exact_shares(y):
    n = len(y) + 1
    z = [mp.fsum(c[i] * v for c, v in zip(exact_basis(n), y, strict=True)) for i in range(n)]
    total = mp.fsum(mp.exp(v) for v in z)
    return [mp.exp(v) / total for v in z]


def exact_increasing(y, low, high):
    n = len(y)
    if low is not None and high is not None:
        gaps = exact_shares(y)
        return [low + (high - low) * mp.fsum(gaps[: k + 1]) for k in range(n)]
    if high is not None:
        return [high - mp.fsum(mp.exp(v) for v in y[k:]) for k in range(n)]
    first = y[0] if low is None else low + mp.exp(y[0])
    return [first + mp.fsum(mp.exp(v) for v in y[1 : k + 1]) for k in range(n)]


def exact_correlations(y, n):
    """R from its partial correlations: that of (i, j) given 0..j-1 is tanh(y_ij); unwound one condition at a time."""
    z = {(i, j): mp.tanh(y[i * (i - 1) // 2 + j]) for i in range(n) for j in range(i)}
    out = []
    for i in range(n):
        for j in range(i):
            r = z[i, j]
            for k in reversed(range(j)):
                r = z[i, k] * z[j, k] + r * mp.sqrt((1 - z[i, k] ** 2) * (1 - z[j, k] ** 2))
            out.append(r)
    return out


def exact_value(word, y, low, high):
    if word == "between":
        return low + (high - low) / (1 + mp.exp(-y))
    return low + mp.exp(y) if high is None else high - mp.exp(y)


def exact_log_det(f, y):
    """log |det df/dy| by central differences in so many digits that truncation and rounding are both below 1e-30."""
    with mp.workdps(4 * DIGITS):
        y = [mp.mpf(v) for v in y]
        h = mp.mpf(10) ** (-DIGITS)
        columns = []
        for i in range(len(y)):
            up, down = list(y), list(y)
            up[i], down[i] = y[i] + h, y[i] - h
            columns.append([(a - b) / (2 * h) for a, b in zip(f(up), f(down), strict=True)])
        return mp.log(abs(mp.det(mp.matrix(columns))))


def close(found, exact, relative, absolute=0.0):
    error = abs(mp.mpf(float(found)) - exact)
    assert error <= relative * abs(exact) + absolute, (float(found), mp.nstr(exact, 20), mp.nstr(error, 3))


@pytest.fixture(autouse=True)
def many_digits():
    with mp.workdps(DIGITS):
        yield


def one(kind, y):
    parameters = fw.Parameters(v=kind)
    y = np.atleast_1d(np.asarray(y, dtype=float))
    return parameters, parameters.natural(y), float(parameters.log_jacobian(y))


# ---- elementwise kinds ---------------------------------------------------------------------------------------------

bound = st.one_of(st.sampled_from([0.0, 1.0, -1.0, 1e-300, -1e300, 2.385, 1e-308, TINY]),
                  st.floats(-1e300, 1e300, allow_nan=False))
coordinate = st.one_of(st.floats(-40.0, 40.0), st.floats(-700.0, 700.0),
                       st.sampled_from([0.0, -0.0, 1e-300, 36.7, -36.7]))


def ulps(x, n):
    return math.ulp(abs(x)) * n


@given(low=bound, y=coordinate)
def test_above(low, y):
    _, x, log_jacobian = one(fw.positive(above=low), y)
    exact = exact_value("above", mp.mpf(y), mp.mpf(low), None)
    assert x[0] > low
    # exp is good to 1 ulp (2 where it is subnormal), the sum to 1/2; the guard against the bound adds 1 at most
    close(x[0], exact, 0, ulps(x[0], 2) + ulps(low, 1) + 2 * TINY)
    close(log_jacobian, mp.mpf(y), 0)


@given(high=bound, y=coordinate)
def test_below(high, y):
    _, x, log_jacobian = one(fw.positive(above=None, below=high), y)
    exact = exact_value("below", mp.mpf(y), None, mp.mpf(high))
    assert x[0] < high
    close(x[0], exact, 0, ulps(x[0], 2) + ulps(high, 1) + 2 * TINY)
    close(log_jacobian, mp.mpf(y), 0)


@given(low=bound, width=st.one_of(st.integers(1, 5), bound.map(abs)), y=coordinate)
def test_between(low, width, y):
    """Bounds from 1 ulp apart (no number between: the values are then the bounds) to beyond the largest double."""
    high = low
    if isinstance(width, int):
        for _ in range(width):
            high = math.nextafter(high, math.inf)
    else:
        high = low + width
    if not low < high < math.inf:
        return
    _, x, log_jacobian = one(fw.between(low, high), y)
    assert low <= x[0] <= high
    if math.nextafter(low, math.inf) < high:
        assert low < x[0] < high
    exact = exact_value("between", mp.mpf(y), mp.mpf(low), mp.mpf(high))
    room = ulps(x[0], 2) + ulps(low, 1) + ulps(high, 1) + 4 * EPS * min(abs(exact - low), abs(mp.mpf(high) - exact))
    close(x[0], exact, 0, room + 2 * TINY)
    size = mp.log(mp.mpf(high) - mp.mpf(low)) - abs(mp.mpf(y)) - 2 * mp.log1p(mp.exp(-abs(mp.mpf(y))))
    # the terms are computed to 1 ulp each and added with two roundings
    scale = abs(float(mp.log(mp.mpf(high) - mp.mpf(low))))
    close(log_jacobian, size, 0, 4 * EPS * (scale + abs(y) + 2))


def test_bounds_an_ulp_apart_beyond_the_largest_difference_and_subnormal():
    for low, high in [(1.0, 1.0 + EPS), (-1e308, 1e308), (TINY, 2 * TINY), (0.0, TINY), (-1.7e308, 1.7e308)]:
        for y in (-800.0, -30.0, -0.3, 0.0, 0.4, 35.0, 800.0):
            _, x, log_jacobian = one(fw.between(low, high), y)
            assert low <= x[0] <= high
            exact = mp.log(mp.mpf(high) - mp.mpf(low)) - abs(y) - 2 * mp.log1p(mp.exp(-abs(mp.mpf(y))))
            # log width and |y| may cancel: each is rounded at its own size
            close(log_jacobian, exact, 0, 2 * EPS * (abs(float(mp.log(mp.mpf(high) - mp.mpf(low)))) + abs(y) + 2))


@given(y=st.floats(-700.0, 700.0))
def test_there_and_back_at_zero(y):
    """exp and log with no bound to hide digits: the error of y is one rounding of x, eps, and one of the logarithm."""
    parameters, x, _ = one(fw.positive(), y)
    assert abs(parameters.free(x)[0] - y) <= 2 * EPS * (1 + abs(y))


@given(exponent=st.floats(-307.0, 308.0), low=st.sampled_from([0.0, 1.0, -2.385, 1e-300]))
def test_back_and_there(exponent, low):
    x = low + 10.0**exponent
    if not low < x < math.inf:
        return
    parameters = fw.Parameters(v=fw.positive(above=low))
    again = parameters.natural(parameters.free([x]))
    # free is off by eps |log(x - low)| at most (the difference from a bound of the same size is exact)
    assert abs(again[0] - x) <= 4 * EPS * (1 + abs(math.log(x - low))) * (x - low) + ulps(x, 1) + ulps(low, 1)


@given(share=st.floats(1e-16, 1.0), low=st.sampled_from([0.0, -1.0, 3.25, -1e300]),
       high=st.sampled_from([4.0, 1e10, 1e300]))
def test_between_back_and_there(share, low, high):
    x = low + (high - low) * share
    if not low < x < high:
        return
    parameters = fw.Parameters(v=fw.between(low, high))
    y = parameters.free([x])
    exact = mp.log((mp.mpf(x) - low) / (mp.mpf(high) - x))
    # x - low and high - x each round once
    close(y[0], exact, 3 * EPS, 3 * EPS)
    edge = min(x - low, high - x)
    assert abs(parameters.natural(y)[0] - x) <= 4 * EPS * (1 + abs(y[0])) * edge + ulps(x, 2) + ulps(low, 1)


# ---- shares --------------------------------------------------------------------------------------------------------

wild = st.one_of(st.floats(-3.0, 3.0), st.floats(-150.0, 150.0))


@given(y=st.lists(wild, min_size=1, max_size=7))
def test_shares(y):
    _, x, log_jacobian = one(fw.shares(len(y) + 1), y)
    exact = exact_shares([mp.mpf(v) for v in y])
    size = sum(map(abs, y)) + 1
    assert np.all(x > 0)
    assert np.all(x < 1)
    assert abs(x.sum() - 1) <= 2 * EPS * len(x)
    for found, true in zip(x, exact, strict=True):
        # z is a sum of len(y) terms, each to 2 roundings, off by that times eps times its size; exp turns it relative
        close(found, true, 2 * (len(y) + 3) * EPS * size, 2 * TINY)
    true = mp.fsum(mp.log(v) for v in exact) + mp.log(len(x)) / 2
    close(log_jacobian, true, 0, 2 * (len(y) + 3) * EPS * size * len(x))


@pytest.mark.parametrize("y", [[0.7], [-1.3, 0.4], [0.2, -2.1, 1.7], [3.0, -1.0, 0.25, 2.385], [31.0, -12.0]])
def test_log_jacobian_of_shares_is_a_determinant(y):
    """Of the first n - 1 shares with respect to the coordinates."""
    _, _, log_jacobian = one(fw.shares(len(y) + 1), y)
    close(log_jacobian, exact_log_det(lambda v: exact_shares(v)[:-1], y), 1e-14)


@pytest.mark.parametrize("share", [1e-16, 1e-300, 1e-5, 0.3])
@pytest.mark.parametrize("place", [0, 1, 3])
def test_small_shares_come_back(share, place):
    x = np.array([0.15, 0.35, 0.3, 0.2])
    x[place] = 0.0
    x *= (1 - share) / x.sum()
    x[place] = share
    parameters = fw.Parameters(v=fw.shares(4))
    again = parameters.natural(parameters.free(x))
    np.testing.assert_allclose(again, x, rtol=8 * EPS * (1 + abs(math.log(share))))


# ---- increasing ----------------------------------------------------------------------------------------------------

SIDES = [(None, None), (-2.385, None), (None, 3.25), (-2.385, 3.25), (0.0, 1.0)]


@pytest.mark.parametrize(("low", "high"), SIDES)
@given(y=st.lists(st.floats(-20.0, 20.0), min_size=1, max_size=6))
def test_increasing(low, high, y):
    _, x, _ = one(fw.increasing(len(y), above=low, below=high), y)
    assert np.all(np.diff(x) > 0)
    assert low is None or x[0] > low
    assert high is None or x[-1] < high
    exact = exact_increasing([mp.mpf(v) for v in y], *(None if b is None else mp.mpf(b) for b in (low, high)))
    largest = max([abs(float(v)) for v in exact] + [abs(b) for b in (low, high) if b is not None] + [abs(y[0])])
    exponents = sum(map(abs, y)) if high is not None and low is not None else 0.0
    for found, true in zip(x, exact, strict=True):
        # each sum rounds at its own size; equal neighbours are moved apart by an ulp, which can add up
        close(found, true, 0, 4 * (len(y) + 2) * EPS * (largest + exponents))


@pytest.mark.parametrize(("low", "high"), SIDES)
@pytest.mark.parametrize("y", [[0.4], [0.4, -1.3], [-0.8, 2.1, 0.3, -4.5], [11.0, -9.0, 3.0]])
def test_log_jacobian_of_increasing_is_a_determinant(low, high, y):
    _, _, log_jacobian = one(fw.increasing(len(y), above=low, below=high), y)
    bounds = [None if b is None else mp.mpf(b) for b in (low, high)]
    close(log_jacobian, exact_log_det(lambda v: exact_increasing(v, *bounds), y), 1e-14, 1e-14)


def test_increasing_keeps_distance_where_gaps_round_to_nothing():
    _, x, _ = one(fw.increasing(4, above=1.0), [-50.0, -60.0, -700.0, -800.0])
    assert x.tolist() == [1 + EPS, 1 + 2 * EPS, 1 + 3 * EPS, 1 + 4 * EPS]
    _, x, _ = one(fw.increasing(4, below=1.0), [-800.0] * 4)
    assert x.tolist() == [1 - 2 * EPS, 1 - 1.5 * EPS, 1 - EPS, 1 - EPS / 2]
    for y in ([800.0, 0.0, 0.0], [-800.0, 0.0, 0.0], [0.0, 0.0, 800.0], [0.0, 0.0, -800.0]):
        _, x, _ = one(fw.increasing(3, above=0.0, below=1.0), y)
        assert 0 < x[0] < x[1] < x[2] < 1


@pytest.mark.parametrize(("low", "high"), SIDES)
@given(y=st.lists(st.floats(-6.0, 6.0), min_size=1, max_size=6))
def test_increasing_there_and_back(low, high, y):
    parameters, x, _ = one(fw.increasing(len(y), above=low, below=high), y)
    ends = np.concatenate([[] if low is None else [low], x, [] if high is None else [high]])
    smallest = np.min(np.diff(ends), initial=np.inf)
    # the gaps are known to a rounding of the largest value, and the logarithm turns that relative
    room = 8 * EPS * len(y) * (1 + np.abs(ends).max() / smallest + np.abs(y).max()) * len(y)
    assert np.abs(parameters.free(x) - y).max() <= room


# ---- correlations --------------------------------------------------------------------------------------------------


@given(rows=st.integers(2, 5), data=st.data())
def test_correlation(rows, data):
    y = data.draw(st.lists(st.floats(-8.0, 8.0), min_size=rows * (rows - 1) // 2, max_size=rows * (rows - 1) // 2))
    parameters, x, log_jacobian = one(fw.correlation(rows), y)
    for found, true in zip(x, exact_correlations([mp.mpf(v) for v in y], rows), strict=True):
        close(found, true, 0, 4 * rows * EPS)
    full = parameters.split(x)["v"]
    assert np.all(np.diagonal(full) == 1)
    assert np.array_equal(full, full.T)
    assert np.all(np.abs(x) < 1)
    exact = mp.fsum((rows - k) * mp.log(mp.sech(mp.mpf(y[i * (i - 1) // 2 + k])))
                    for i in range(rows) for k in range(i))
    close(log_jacobian, exact, 1e-14, 1e-14)


@pytest.mark.parametrize(("rows", "y"), [(2, [0.7]), (3, [0.3, -1.1, 0.8]), (3, [4.0, -3.0, 2.0]),
                                         (4, [0.5, -0.2, 1.2, 0.9, -1.4, 0.1])])
def test_log_jacobian_of_correlations_is_a_determinant(rows, y):
    _, _, log_jacobian = one(fw.correlation(rows), y)
    close(log_jacobian, exact_log_det(lambda v: exact_correlations(v, rows), y), 1e-14)


@given(rows=st.integers(2, 5), data=st.data())
def test_correlation_there_and_back(rows, data):
    y = data.draw(st.lists(st.floats(-2.0, 2.0), min_size=rows * (rows - 1) // 2, max_size=rows * (rows - 1) // 2))
    parameters, x, _ = one(fw.correlation(rows), y)
    smallest = np.linalg.eigvalsh(parameters.split(x)["v"])[0]
    # Cholesky is backward stable: R is perturbed by rows * eps, its factor by that over the smallest eigenvalue
    assert np.abs(parameters.free(x) - y).max() <= 16 * rows**2 * EPS / smallest**1.5


@given(y=st.lists(st.floats(-800.0, 800.0), min_size=3, max_size=3))
def test_correlations_never_reach_one(y):
    _, x, log_jacobian = one(fw.correlation(3), y)
    assert np.all(np.abs(x) < 1)
    assert np.isfinite(log_jacobian)


# ---- what the core does with gradients -----------------------------------------------------------------------------

EVERYTHING = fw.Parameters(
    slope=fw.free(2), rate=fw.positive(2), late=fw.positive(above=None, below=2.0), angle=fw.between(0.0, 2.5),
    share=fw.shares(4), cut=fw.increasing(4), up=fw.increasing(3, above=-1.0), down=fw.increasing(3, below=4.0),
    inside=fw.increasing(3, above=-1.0, below=2.0), corr=fw.correlation(4))


def exact_everything(y):
    """All natural values of EVERYTHING from exact formulas."""
    y = list(y)
    out = [*y[:2], mp.exp(y[2]), mp.exp(y[3]), 2 - mp.exp(y[4]), mp.mpf("2.5") / (1 + mp.exp(-y[5]))]
    out += exact_shares(y[6:9]) + exact_increasing(y[9:13], None, None) + exact_increasing(y[13:16], mp.mpf(-1), None)
    out += exact_increasing(y[16:19], None, mp.mpf(4)) + exact_increasing(y[19:22], mp.mpf(-1), mp.mpf(2))
    return out + exact_correlations(y[22:28], 4)


def exact_log_jacobian(y):
    """Sum of the blocks' log-determinants, each from its formula in the tests above."""
    y = [mp.mpf(v) for v in y]
    total = y[2] + y[3] + y[4] + mp.log(mp.mpf("2.5")) - abs(y[5]) - 2 * mp.log1p(mp.exp(-abs(y[5])))
    total += mp.fsum(mp.log(v) for v in exact_shares(y[6:9])) + mp.log(4) / 2
    total += mp.fsum(y[10:13]) + mp.fsum(y[13:16]) + mp.fsum(y[16:19])
    total += mp.fsum(mp.log(v) for v in exact_shares(y[19:22])) + mp.log(4) / 2 + 3 * mp.log(3)
    return total + mp.fsum((4 - k) * mp.log(mp.sech(y[22 + i * (i - 1) // 2 + k])) for i in range(4) for k in range(i))


def exact_derivative(f, y, p):
    """d f(y + t p) / dt at 0, many digits."""
    with mp.workdps(3 * DIGITS):
        h = mp.mpf(10) ** (-DIGITS)
        up, down = ([mp.mpf(a) + s * h * mp.mpf(b) for a, b in zip(y, p, strict=True)] for s in (1, -1))
        a, b = f(up), f(down)
        if not isinstance(a, list):
            return (a - b) / (2 * h)
        return [(c - d) / (2 * h) for c, d in zip(a, b, strict=True)]


@pytest.mark.parametrize("seed", range(6))
def test_push_pull_and_bend(seed):
    """J p, J^T g + gradient of the log-Jacobian, and its derivative along p, at points of spread 1 and 3."""
    rng = np.random.default_rng(seed)
    size, d = EVERYTHING.size, EVERYTHING.dimension
    y, p, g = (1 + 2 * (seed % 2)) * rng.standard_normal(d), rng.standard_normal(d), rng.standard_normal(size)
    maps = EVERYTHING.maps()

    def weighted(at):
        return mp.fsum(mp.mpf(float(a)) * b for a, b in zip(g, exact_everything(at), strict=True))

    pushed = exact_derivative(exact_everything, y, p)
    scale = max(abs(float(v)) for v in pushed)
    for found, true in zip(maps.push(y, p), pushed, strict=True):
        close(found, true, 1e-13, 1e-14 * scale)
    pulled, with_jacobian = maps.pull(y, g, False), maps.pull(y, g, True)
    for i in range(d):
        e = np.eye(1, d, i)[0]
        true = exact_derivative(weighted, y, e)
        close(pulled[i], true, 1e-12, 1e-13 * scale)
        close(with_jacobian[i], true + exact_derivative(exact_log_jacobian, y, e), 1e-12, 1e-13 * scale)
    bend = maps.bend(y, g, p)
    exactly = EVERYTHING.slices(free=True)["corr"].start
    for i in range(d):
        e = [mp.mpf(int(k == i)) for k in range(d)]
        true = exact_derivative(lambda at, e=e: exact_derivative(
            lambda v: weighted(v) + exact_log_jacobian(v), at, e), y, p)
        # by central differences for correlations: cbrt(eps)^2 of truncation, eps / cbrt(eps) of rounding
        close(bend[i], true, *((1e-12, 1e-12 * scale) if i < exactly else (1e-8, 1e-9 * np.abs(bend[exactly:]).max())))


def test_log_jacobian_of_everything():
    rng = np.random.default_rng(6)
    for _ in range(5):
        y = rng.standard_normal(EVERYTHING.dimension)
        close(float(EVERYTHING.log_jacobian(y)), exact_log_jacobian(y), 1e-14, 1e-13)


def test_many_points_at_once_are_those_one_by_one():
    y = np.random.default_rng(7).standard_normal((3, 4, EVERYTHING.dimension))
    together, logs = EVERYTHING.natural(y), EVERYTHING.log_jacobian(y)
    for place in np.ndindex(3, 4):
        np.testing.assert_array_equal(together[place], EVERYTHING.natural(y[place]))
        assert logs[place] == EVERYTHING.log_jacobian(y[place])
    np.testing.assert_allclose(EVERYTHING.free(together), y, rtol=0, atol=1e-11)


def test_nearly_singular_correlations_are_outside():
    """Where the maps let a function be called, Cholesky succeeds on the rounded matrix; beyond nothing is called."""
    rng = np.random.default_rng(8)
    refused = 0
    for size in (1.0, 5.0, 9.0, 15.0, 40.0):
        for _ in range(100):
            rows = int(rng.integers(2, 7))
            parameters = fw.Parameters(v=fw.correlation(rows))
            y = size * rng.standard_normal(parameters.dimension)
            called = []

            def f(x, called=called):
                called.append(x)
                return 0.0, np.zeros(len(x))

            value, _ = fw.Density(f, parameters)(y)
            assert bool(called) == (value > -np.inf)
            if called:
                np.linalg.cholesky(parameters.split(called[0])["v"])
            refused += not called
    assert 150 < refused < 350
