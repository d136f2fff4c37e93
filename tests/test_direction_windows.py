"""The search for learned directions in one window, against dense algebra: rows in, directions out.

The oracle has singular values of the rows where the core has Gram matrices and SciPy's root of a matrix where it has
Cholesky factors, and it looks at every part of the window where the core leaves as soon as nothing can be found.
"""

import ctypes
import subprocess
from pathlib import Path

import numpy as np
import pytest
from scipy.linalg import sqrtm
from targets import _build

ROOT = Path(__file__).resolve().parent.parent
SOURCES = sorted((ROOT / "csrc" / "src").glob("*.c"))
pytestmark = pytest.mark.skipif(not SOURCES, reason="the sources of the core are not beside the tests")
WIDE = 144  # numbers of a row beyond which the core looks at Gram matrices: csrc/src/window.h


class Window(ctypes.Structure):
    """harness_window of window_harness.c."""

    _fields_ = (
        *((name, ctypes.c_size_t) for name in ("d", "m", "k")),
        ("rank", ctypes.c_uint),
        ("rank_fixed", ctypes.c_int),
        *((name, ctypes.c_void_p) for name in ("x", "g", "mean_x", "mean_g")),
        *((name, ctypes.c_void_p) for name in ("scale_before", "directions", "variances")),
    )


@pytest.fixture(scope="module")
def search(tmp_path_factory):
    """f(x, g, scale, rank=16, fixed=0, known=None) -> (scale, directions, log lambda) of the core."""
    out = tmp_path_factory.mktemp("window") / "window.so"
    flags = ["-std=c11", "-O2", "-ffp-contract=off", "-fPIC", "-shared", "-fvisibility=hidden", "-DFW_NO_CLONES"]
    folders = [f"-I{ROOT / 'csrc/include'}", f"-I{ROOT / 'csrc/src'}"]
    sources = [ROOT / "tests" / "window_harness.c", *SOURCES]
    subprocess.run([*_build.compiler(), *flags, *folders, *map(str, sources), "-o", str(out), "-lm"], check=True)
    library = ctypes.CDLL(str(out))
    library.harness_directions.restype = ctypes.c_long

    def find(x, g, scale, rank=16, fixed=0, known=None):
        m, d = x.shape
        before, directions, variances = known or (np.ones(d), np.zeros((0, d)), np.zeros(0))
        arrays = [np.ascontiguousarray(a, float) for a in (x, g, x.mean(0), g.mean(0), before, directions, variances)]
        window = Window(d, m, len(directions), rank, fixed, *(a.ctypes.data for a in arrays))
        scale, found, values = scale.copy(), np.full((16, d), np.nan), np.full(16, np.nan)
        outputs = (ctypes.c_void_p(a.ctypes.data) for a in (scale, found, values))
        count = library.harness_directions(ctypes.byref(window), ctypes.c_long(1), *outputs)
        assert 0 <= count <= min(rank, d - 1)
        return scale, found[:count], np.log(values[:count])

    return find


# ---- the oracle -----------------------------------------------------------------------------------------------------


def half_power_scale(x, g):
    return (np.sqrt(abs(x - x.mean(0))).sum(0) / np.sqrt(abs(g - g.mean(0))).sum(0)) ** 2


def leading(rows, most):
    """Right singular vectors of the centred rows; values^2 below 1e-10 of the largest are none."""
    _, values, vectors = np.linalg.svd(rows - rows.mean(0), full_matrices=False)
    return vectors[: min(most, np.sum(values**2 > 1e-10 * values[0] ** 2))]


def sigma(y, c, known):
    """Sigma of these rows, as basis (r x d) and matrix (r x r)."""
    m, d = y.shape
    known = known if d > m // 2 and len(known) + 4 < m else known[:0]
    side = d if d <= m // 2 else min((m - 2 - len(known)) // 3, (60 - len(known)) // 2)
    _, values, vectors = np.linalg.svd(np.vstack([known, leading(y, side), leading(c, side)]), full_matrices=False)
    basis = vectors[values**2 > 1e-6]
    of_y, of_c = (np.atleast_2d(np.cov(rows @ basis.T, rowvar=False)) for rows in (y, c))
    for matrix in (of_y, of_c):
        matrix += 1e-13 * np.trace(matrix) * np.eye(len(basis))
    low = np.linalg.cholesky(of_c)
    root = np.real(sqrtm(low.T @ of_y @ low))
    inverse = np.linalg.inv(low)
    return basis, inverse.T @ root @ inverse


def strongest(y, c, known, most, threshold):
    basis, matrix = sigma(y, c, known)
    values, vectors = np.linalg.eigh(0.5 * (matrix + matrix.T))
    logs = np.log(values)
    order = np.argsort(-abs(logs))[:most]
    order = order[abs(logs[order]) >= threshold]
    return vectors.T[order] @ basis, logs[order]


def agreeing(mine, others, known, most):
    directions, logs = strongest(*mine, known, most, 1.0)
    y, c = (rows @ directions.T for rows in others)
    other = 0.5 * np.log(y.var(0) / c.var(0))
    return int(np.sum((other * logs > 0) & (abs(other) > 1.0) & (abs(other) > 0.5 * abs(logs))))


def gathered(rows):
    """Sum of the half powers of what each row is away from the mean of those before."""
    means = np.cumsum(rows, axis=0)[:-1] / np.arange(1, len(rows))[:, None]
    return np.sqrt(abs(rows[1:] - means)).sum(0)


def oracle(x, g, scale, rank=16, fixed=0, known=None):
    m, d = x.shape
    before, directions, variances = known or (np.ones(d), np.zeros((0, d)), np.zeros(0))
    root, most = np.sqrt(scale), min(rank, d - 1)
    y, c = (x - x.mean(0)) / root, (g - g.mean(0)) * root
    like_gradient = variances < 1.0
    known = directions * np.where(like_gradient[:, None], root / np.sqrt(before), np.sqrt(before) / root)
    for turn in range(3):
        allowed = most
        if not fixed:
            parts = [(y[: m // 2], c[: m // 2]), (y[m // 2 :], c[m // 2 :])]
            allowed = min(agreeing(*parts, known, most), agreeing(*parts[::-1], known, most))
        found, logs = strongest(y, c, known, allowed, 0.0 if fixed else 1.0)
        if len(logs) == 0 or turn == 2:
            return scale, found, logs
        left_y, left_c = (rows - (rows @ found.T) @ found for rows in (y, c))
        with np.errstate(invalid="ignore"):  # coordinates that stand: 0/0
            factor = (gathered(left_y) / gathered(left_c)) ** 2
        factor = np.where((factor > 1e-6) & (factor < 1e6), factor, 1.0)
        scale, root = scale * factor, np.sqrt(factor)
        y, c, known = y / root, c * root, known * np.where(like_gradient[:, None], root, 1.0 / root)
    raise AssertionError


# ---- windows --------------------------------------------------------------------------------------------------------


def spiked(rng, d, m):
    """Draws and gradients of a normal with a few strong directions, in units over two decades."""
    q = np.linalg.qr(rng.standard_normal((d, d)))[0]
    variances = np.exp(0.2 * rng.standard_normal(d))
    for i, spike in enumerate((400.0, 1 / 300.0, 40.0)[: d - 1]):
        variances[i] = spike
    unit = 10.0 ** rng.uniform(-1.0, 1.0, d)
    z = rng.standard_normal((m, d))
    return (z @ (q * np.sqrt(variances)).T) * unit, -(z @ (q / np.sqrt(variances)).T) / unit, (q * variances) @ q.T


def faint(rng, d, m):
    """Two directions whose log variances are near 1, and gradients that are not quite those of a normal."""
    q = np.linalg.qr(rng.standard_normal((d, d)))[0]
    variances = np.exp(0.3 * rng.standard_normal(d))
    variances[:2] *= np.exp([1.3, -1.3])
    z = rng.standard_normal((m, d))
    pull = z * (1.0 + 0.3 * rng.standard_normal((m, d)))
    return (z @ (q * np.sqrt(variances)).T), -(pull @ (q / np.sqrt(variances)).T)


def known_before(rng, d, k):
    directions = np.linalg.qr(rng.standard_normal((d, k)))[0].T
    return 10.0 ** rng.uniform(-0.5, 0.5, d), directions, np.exp(rng.uniform(-3.0, 3.0, k))


def assert_same(mine, theirs, tolerance):
    scale, found, logs = mine
    assert len(logs) == len(theirs[2])
    np.testing.assert_allclose(np.log(scale), np.log(theirs[0]), rtol=0, atol=tolerance)
    np.testing.assert_allclose(logs, theirs[2], rtol=0, atol=tolerance)
    np.testing.assert_allclose(abs((found * theirs[1]).sum(1)), 1.0, rtol=0, atol=tolerance)
    np.testing.assert_allclose(found @ found.T, np.eye(len(found)), rtol=0, atol=1e-12)


# Covariances here have condition numbers up to 1e6, and their square roots lose half of the digits they cost:
# 1e6 times 2e-16 in a variance, with a factor of 100 for what the three rounds and d terms add.
DIGITS = 1e-8


@pytest.mark.parametrize("fixed", [0, 1])
@pytest.mark.parametrize("m", [8, 20, 33, 64])
@pytest.mark.parametrize("d", [2, 3, 10, 16, 17, 30, 31, 32, 33, 50, 60, 61, WIDE, WIDE + 1, 300])
def test_the_directions_are_those_of_dense_algebra(search, d, m, fixed):
    """Rows that span all coordinates and rows that do not, rows themselves and Gram matrices, directions known or none.
    31 and 32 coordinates of 64 rows: two full sets of singular vectors are more than the dimensions of a span."""
    rng = np.random.default_rng([d, m, fixed])
    rank = 4 if fixed else 16
    for k in (0, min(2, d - 1)):
        x, g, _ = spiked(rng, d, m)
        known, scale = known_before(rng, d, k) if k else None, half_power_scale(x, g)
        expected = oracle(x, g, scale, rank, fixed, known)
        if fixed:
            assert len(expected[2]) == min(4, d - 1)
        elif m == 64 and d > 3:
            assert len(expected[2]) >= 2
        assert_same(search(x, g, scale, rank, fixed, known), expected, DIGITS)


@pytest.mark.parametrize("d", [2, 5, 10, 14, 30])
def test_nothing_is_missed_and_nothing_invented_where_little_stands_out(search, d):
    """What is left out of work for good reasons must never be a direction: counts over many windows near the edge."""
    counts = []
    for seed in range(40):
        rng = np.random.default_rng([d, seed, 4])
        m = int(rng.integers(8, 65))
        x, g = faint(rng, d, m)
        scale = half_power_scale(x, g)
        expected = oracle(x, g, scale)
        assert_same(search(x, g, scale), expected, DIGITS)
        counts.append(len(expected[2]))
    assert 0 in counts
    assert max(counts) > 0


@pytest.mark.parametrize(("d", "m"), [(10, 64), (10, 20), (40, 64), (WIDE + 5, 64)])
def test_independent_normal_coordinates_leave_the_scale(search, d, m):
    rng = np.random.default_rng([d, m])
    unit = 10.0 ** rng.uniform(-3.0, 3.0, d)
    x = rng.standard_normal((m, d))
    scale, found, _ = search(x * unit, -x / unit, unit**2)
    assert len(found) == 0
    np.testing.assert_array_equal(scale, unit**2)


@pytest.mark.parametrize("d", [2, 5, 10, 17, 31, 32])
def test_the_covariance_of_a_normal_is_exact_from_few_draws(search, d):
    """From 2 d draws, with every direction asked for: all but the weakest, whose variance becomes 1. The ridge, 1e-13
    of traces that are 1e5 times the smallest variance, shows in the eighth digit."""
    rng = np.random.default_rng(d)
    x, g, covariance = spiked(rng, d, max(8, 2 * d))
    unit = np.sqrt(half_power_scale(x, g))
    rank = min(d - 1, 16)
    scale, found, logs = search(x, g, unit**2, rank, 1)
    whole = np.linalg.lstsq(g - g.mean(0), -(x - x.mean(0)), rcond=None)[0]  # the covariance: x = -C g
    values, vectors = np.linalg.eigh(whole / np.sqrt(np.outer(scale, scale)))
    order = np.argsort(-abs(np.log(values)))[:rank]
    np.testing.assert_allclose(logs, np.log(values[order]), rtol=0, atol=10 * DIGITS)
    np.testing.assert_allclose(abs((found * vectors.T[order]).sum(1)), 1.0, rtol=0, atol=10 * DIGITS)
    assert np.linalg.cond(covariance) > 100.0


@pytest.mark.parametrize("d", [10, 31, 40, WIDE + 1])
def test_the_order_of_rows_in_a_half_and_of_coordinates_is_of_no_account(search, d):
    """Coordinates change places and nothing else changes. Rows change places inside a half: as many directions, and
    those of the oracle (the second look at the scale takes rows as they come)."""
    rng = np.random.default_rng([d, 9])
    x, g, _ = spiked(rng, d, 64)
    scale = half_power_scale(x, g)
    first = search(x, g, scale)
    coordinates = rng.permutation(d)
    turned = search(x[:, coordinates], g[:, coordinates], scale[coordinates])
    assert_same((turned[0][np.argsort(coordinates)], turned[1][:, np.argsort(coordinates)], turned[2]), first, DIGITS)
    rows = np.concatenate([rng.permutation(32), 32 + rng.permutation(32)])
    mixed, expected = search(x[rows], g[rows], scale), oracle(x[rows], g[rows], scale)
    assert_same(mixed, expected, DIGITS)
    assert len(mixed[2]) == len(first[2])


def test_coordinates_that_stand_change_nothing(search):
    """Ten coordinates that move among a few that stand, or so many that the Gram matrix is taken: rows that do not span
    all coordinates, in every way of looking at them."""
    rng = np.random.default_rng(77)
    x, g, _ = spiked(rng, 10, 64)
    scale = half_power_scale(x, g)
    first = search(x, g, scale)
    assert len(first[2]) >= 3
    for more in (1, 20, 21, 22, 50, WIDE - 10, WIDE - 9, 500):
        wide = [np.hstack([a, np.zeros((64, more))]) for a in (x, g)]
        found = search(*wide, np.append(scale, np.ones(more)))
        np.testing.assert_array_equal(found[1][:, 10:], 0.0)
        np.testing.assert_array_equal(found[0][10:], 1.0)
        if 10 + more <= 32:  # beyond, the span is of fewer singular vectors
            assert_same((found[0][:10], found[1][:, :10], found[2]), first, DIGITS)
        assert_same(found, oracle(*wide, np.append(scale, np.ones(more))), DIGITS)


@pytest.mark.parametrize("more", [1, 20])
def test_coordinates_that_stand_are_not_taken_for_directions(search, more):
    """They have nothing but the ridges, in the ratio of the traces: 400 here, where the second direction has 2."""
    rng = np.random.default_rng(78)
    q, sd = np.linalg.qr(rng.standard_normal((10, 10)))[0], np.sqrt(np.append([4000.0, 2.0], np.ones(8)))
    z, still = rng.standard_normal((64, 10)), np.zeros((64, more))
    x, g = np.hstack([z @ (q * sd).T, still]), np.hstack([-z @ (q / sd).T, still])
    found = search(x, g, np.ones(10 + more), 2, 1)
    np.testing.assert_array_equal(found[1][:, 10:], 0.0)
    assert_same(found, oracle(x, g, np.ones(10 + more), 2, 1), DIGITS)
