"""The O(d) operations on diag(diagonal) + sign u u^T against exact rationals, many digits and dense algebra.

`fellwalk.testing.check_metric` has the identities and their forward error bounds; here they are joined by determinants
and solutions of dense matrices in many digits, which know nothing of the formulas for a rank-one term.
"""

import checks
import mpmath as mp
import numpy as np
import oracles
import pytest
import stat_checks
from hypothesis import example, given, settings
from hypothesis import strategies as st
from scipy import linalg

from fellwalk import errors, kernels
from fellwalk.testing import Metric, check_metric, metrics

VECTORS = (kernels.apply, kernels.solve, kernels.velocity, kernels.momentum)


def arguments(metric):
    return metric.diagonal, metric.u, metric.vector


def assert_within(found, exact, bound):
    off = np.array([float(abs(mp.mpf(float(a)) - b)) for a, b in zip(found, exact, strict=True)])
    assert np.all(off <= bound), f"off by up to {np.max(off / np.maximum(bound, 1e-300)):.3g} bounds"


@given(metrics(most=40))
@settings(max_examples=300)
def test_every_identity_holds(metric):
    check_metric(metric)


@given(metrics())
@settings(max_examples=150)
def test_against_dense_matrices_in_many_digits(metric):
    """Elimination and the determinant of the whole matrix, at 120 digits."""
    solved = kernels.solve(*arguments(metric), sign=metric.sign)
    with mp.workdps(oracles.DIGITS):
        assert_within(solved, oracles.solve(*arguments(metric)[:2], metric.sign, metric.vector),
                      metric.bound_solve(metric.vector))
        exact = oracles.log_determinant(metric.diagonal, metric.u, metric.sign)
        found = kernels.log_determinant(metric.diagonal, metric.u, sign=metric.sign)
        assert float(abs(mp.mpf(found) - exact)) <= metric.bound_log_determinant


@pytest.mark.parametrize("sign", [1, -1])
@pytest.mark.parametrize("d", [1, 2, 7, 8, 9, 16, 23, 40])
def test_against_scipy_at_moderate_scales(d, sign):
    """All five operations against double precision; 1e-11: d eps times condition numbers below 200, on both sides."""
    rng = np.random.default_rng([d, sign + 1])
    diagonal, z = rng.uniform(0.3, 7.0, d), rng.standard_normal(d)
    u = rng.standard_normal(d)
    u *= np.sqrt(0.83 / np.sum(u**2 / diagonal))
    dense = np.diag(diagonal) + sign * np.outer(u, u)
    np.testing.assert_allclose(kernels.apply(diagonal, u, z, sign=sign), dense @ z, rtol=1e-11, atol=1e-13)
    solved = linalg.solve(dense, z, assume_a="pos")
    np.testing.assert_allclose(kernels.solve(diagonal, u, z, sign=sign), solved, rtol=1e-11, atol=1e-13)
    logdet = kernels.log_determinant(diagonal, u, sign=sign)
    assert logdet == pytest.approx(np.linalg.slogdet(dense)[1], rel=1e-11)
    for operation, covariance in ((kernels.velocity, linalg.inv(dense)), (kernels.momentum, dense)):
        m = np.array([operation(diagonal, u, e, sign=sign) for e in np.eye(d)]).T
        np.testing.assert_allclose(m @ m.T, covariance, rtol=1e-11, atol=1e-13)


def test_draws_have_the_covariance_by_monte_carlo():
    """Second moments of 40,000 draws along fixed directions; the whole family fails by chance with rate 1e-6."""
    rng = np.random.default_rng(20)
    d, n = 5, 40_000
    diagonal, u = 10.0 ** rng.uniform(-3, 3, d), rng.standard_normal(d)
    found = []
    for sign in (1, -1):
        one = u * np.sqrt(0.9 / np.sum(u**2 / diagonal))
        dense = np.diag(diagonal) + sign * np.outer(one, one)
        for operation, covariance in ((kernels.velocity, linalg.inv(dense)), (kernels.momentum, dense)):
            draws = np.array([operation(diagonal, one, z, sign=sign) for z in rng.standard_normal((n, d))])
            for direction in np.vstack([np.eye(d), rng.standard_normal((3, d)) / np.sqrt(np.diag(covariance))]):
                squares = (draws @ direction) ** 2 / (direction @ covariance @ direction)
                found.append(stat_checks.compare_mean(squares, 1.0, np.sqrt(2.0 / n), f"{operation.__name__} {sign}"))
    stat_checks.assert_all(found, 1e-6)


@given(metrics())
@example(Metric(np.array([3.7e-12]), np.array([0.0]), np.array([-2.385e12]), -1))
def test_without_a_rank_one_term_nothing_but_the_diagonal_is_left(case):
    delta, zero, z = case.diagonal, np.zeros_like(case.u), case.vector
    assert np.array_equal(kernels.apply(delta, zero, z, sign=case.sign), delta * z)
    assert np.array_equal(kernels.solve(delta, zero, z, sign=case.sign), z / delta)
    assert np.array_equal(kernels.velocity(delta, zero, z, sign=case.sign), z / np.sqrt(delta))
    assert np.array_equal(kernels.momentum(delta, zero, z, sign=case.sign), np.sqrt(delta) * z)
    logs = np.log(delta)
    assert abs(kernels.log_determinant(delta, zero, sign=case.sign) - logs.sum()) <= case.roundings * np.abs(logs).sum()


@given(metrics(most=40), st.sampled_from(VECTORS))
def test_out_may_be_the_vector_itself_and_gives_the_same_bits(case, operation):
    fresh = operation(*arguments(case), sign=case.sign)
    kept = case.vector.copy()
    into = np.full_like(kept, np.nan)
    assert operation(case.diagonal, case.u, kept, sign=case.sign, out=into) is into
    assert into.tobytes() == fresh.tobytes()
    assert np.array_equal(kept, case.vector), "the given vector was changed"
    assert operation(case.diagonal, case.u, kept, sign=case.sign, out=kept) is kept
    assert kept.tobytes() == fresh.tobytes()


@given(metrics(most=40), st.sampled_from(VECTORS))
def test_strided_and_read_only_arrays_are_read_as_they_are(case, operation):
    spread = np.repeat(case.vector, 3)[::3]
    fixed = case.diagonal.copy()
    fixed.flags.writeable = False
    found = operation(fixed, case.u[::-1][::-1], spread, sign=case.sign)
    assert found.tobytes() == operation(*arguments(case), sign=case.sign).tobytes()


@given(metrics(most=40), st.sampled_from(VECTORS), st.integers(-30, 30))
def test_units_that_are_powers_of_four_change_no_bit(case, operation, k):
    """x -> 2^k x makes delta, u and velocities 4^-k, 2^-k and 2^k times as large: exact in binary."""
    unit = 2.0**k
    powers = {kernels.apply: (1, -1), kernels.solve: (-1, 1), kernels.velocity: (0, 1), kernels.momentum: (0, -1)}
    given_power, power = powers[operation]
    fresh = operation(*arguments(case), sign=case.sign)
    other = operation(case.diagonal / unit**2, case.u / unit, case.vector * unit**given_power, sign=case.sign)
    assert (other / unit**power).tobytes() == fresh.tobytes()


RANK1 = {
    "rank1: m=(1,2,3) alpha2=1/4 g=(1,2,3)": ([1.0, 2.0, 3.0], [0.5, 1.0, 1.5]),
    "rank1: m=(1,1) alpha2=1 g=(3,4)": ([1.0, 1.0], [3.0, 4.0]),
    "rank1: m=1 (n=5) alpha2=1 g=ones": ([1.0] * 5, [1.0] * 5),
}


@pytest.mark.parametrize("name", RANK1)
def test_exact_rationals(name):
    """Sherman-Morrison and determinant lemma in exact rationals (checks: rank1); 1e-14: condition numbers below 30."""
    diagonal, u = RANK1[name]
    known = checks.values("rank1")[name]
    inverse = np.array([[float(mp.mpf(entry)) for entry in row] for row in known["inverse"]])
    found = np.array([kernels.solve(diagonal, u, e) for e in np.eye(len(u))])
    np.testing.assert_allclose(found, inverse, rtol=1e-14, atol=1e-15)
    assert np.exp(kernels.log_determinant(diagonal, u)) == pytest.approx(float(known["det"]), rel=1e-14)


def test_symmetric_square_roots():
    """(I + g g^T)^(1/2) and its inverse for g = (3, 4), published in 18 digits (checks: rank1)."""
    known = checks.values("rank1")["sqrt of I+gg^T, g=(3,4)"]
    for operation, key in ((kernels.momentum, "sqrtG"), (kernels.velocity, "invsqrtG")):
        found = np.array([operation([1.0, 1.0], [3.0, 4.0], e) for e in np.eye(2)])
        np.testing.assert_allclose(found, np.array(known[key], dtype=float), rtol=4e-15)


# ---- errors ---------------------------------------------------------------------------------------------------------

GOOD = ([1.0, 2.0], [0.1, 0.2], [3.0, 4.0])


def every_operation(diagonal, u, vector, **named):
    yield from (lambda f=f: f(diagonal, u, vector, **named) for f in VECTORS)
    yield lambda: kernels.log_determinant(diagonal, u, **{k: v for k, v in named.items() if k == "sign"})


@pytest.mark.parametrize(
    ("diagonal", "u", "sign"),
    [
        ([1.0, 0.0], [0.1, 0.2], 1),
        ([1.0, -2.0], [0.1, 0.2], 1),
        ([1.0, np.nan], [0.1, 0.2], 1),
        ([1.0, np.inf], [0.1, 0.2], 1),
        ([1.0, 2.0], [np.nan, 0.2], 1),
        ([1.0, 2.0], [np.inf, 0.2], 1),
        ([1.0, 2.0], [1e200, 0.2], 1),  # q overflows
        ([1.0, 2.0], [1.0, 0.0], -1),  # L = 0 exactly
        ([1.0, 2.0], [0.8, 1.2], -1),
        ([1.0, 2.0], [np.nan, 0.2], -1),
    ],
)
def test_a_metric_that_is_not_positive_definite_is_refused(diagonal, u, sign):
    for call in every_operation(diagonal, u, [1.0, 1.0], sign=sign):
        with pytest.raises(errors.MetricError, match="positive definite"):
            call()
    out = np.array([7.0, 8.0])
    for operation in VECTORS:
        with pytest.raises(errors.MetricError):
            operation(diagonal, u, [1.0, 1.0], sign=sign, out=out)
    assert np.array_equal(out, [7.0, 8.0]), "a refused call wrote into out"


@pytest.mark.parametrize("sign", [0, 2, -2, "plus", None, 0.5])
def test_other_signs_are_refused(sign):
    for call in every_operation(*GOOD, sign=sign):
        with pytest.raises(errors.ArgumentError, match="sign must be 1 or -1"):
            call()


@pytest.mark.parametrize(
    ("place", "wrong", "name"),
    [
        (0, [[1.0, 2.0]], "diagonal"),
        (0, [], "diagonal"),
        (1, [0.1], "u"),
        (1, [0.1, 0.2, 0.3], "u"),
        (1, 0.1, "u"),
        (1, np.zeros((2, 1)), "u"),
        (2, [3.0], "the vector"),
        (2, 3.0, "the vector"),
        (2, [[3.0, 4.0]], "the vector"),
    ],
)
def test_wrong_shapes_are_named(place, wrong, name):
    given_ = list(GOOD)
    given_[place] = wrong
    calls = list(every_operation(*given_))
    for call in calls[:4] if place == 2 else calls:
        with pytest.raises(errors.ShapeError, match=rf"^{name} must have shape"):
            call()


@pytest.mark.parametrize("wrong", [["a", "b"], [None, {}], [1j, 2.0], np.array([1.0 + 2.0j, 2.0]), [[1.0], [1.0, 2.0]]])
def test_what_is_not_real_numbers_is_refused(wrong):
    for place in range(3):
        given_ = list(GOOD)
        given_[place] = wrong
        calls = list(every_operation(*given_))
        for call in calls[:4] if place == 2 else calls:
            with pytest.raises(errors.ShapeError, match="real numbers"):
                call()


def read_only():
    array = np.zeros(2)
    array.flags.writeable = False
    return array


@pytest.mark.parametrize(
    "out",
    [np.zeros(3), np.zeros((2, 1)), np.zeros(2, dtype=np.float32), np.zeros(4)[::2], [0.0, 0.0], read_only()],
    ids=["length", "two axes", "float32", "strided", "list", "read-only"],
)
def test_out_must_be_a_writable_contiguous_vector(out):
    for operation in VECTORS:
        with pytest.raises(errors.ShapeError, match="out must be a writable"):
            operation(*GOOD, out=out)


def test_every_error_has_the_common_base():
    for kind in (errors.MetricError, errors.ShapeError, errors.ArgumentError):
        assert issubclass(kind, errors.FellwalkError)
        assert issubclass(kind, ValueError)
