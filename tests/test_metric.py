"""The O(d) operations on diag(diagonal) + sign u u^T against dense algebra.

Tolerances are forward error bounds of the rounding analysis (Higham 2002, Accuracy and Stability of Numerical
Algorithms, ch. 3): a sum of d products is off by at most d + 1 roundings of the sum of absolute values, and dividing
by L = 1 + sign q multiplies the relative error of L by (1 + q) / L. SLACK counts the operations beside the sum.
"""

from dataclasses import dataclass

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

EPS = oracles.EPS / 2
SLACK = 12
VECTORS = (kernels.apply, kernels.solve, kernels.velocity, kernels.momentum)


@dataclass(frozen=True)
class Case:
    diagonal: np.ndarray
    u: np.ndarray
    vector: np.ndarray
    sign: int

    @property
    def arguments(self):
        return self.diagonal, self.u, self.vector

    @property
    def roundings(self):
        return (len(self.u) + SLACK) * EPS


@st.composite
def cases(draw, most=40, decades=12):
    """Every entry has a scale of its own in 1e-decades..1e+decades; with sign -1, L goes down to 1e-9."""
    d = draw(st.integers(1, most))
    sign = draw(st.sampled_from([1, -1]))
    rng = np.random.default_rng(draw(st.integers(0, 2**32)))
    diagonal, vector = (10.0 ** rng.uniform(-decades, decades, d) for _ in range(2))
    u = 10.0 ** rng.uniform(-decades, decades, d) * rng.choice([-1.0, 1.0], d)
    u[rng.random(d) < draw(st.sampled_from([0.0, 0.3, 1.0]))] = 0.0
    if sign == -1 and u.any():
        q = 1.0 - 10.0 ** draw(st.floats(-9.0, -0.05))
        u *= np.sqrt(q / np.sum(u**2 / diagonal))
    return Case(diagonal, u, vector * rng.choice([-1.0, 1.0], d), sign)


def conditioning(case):
    """(L, how many times its own relative error the relative error of L may be)."""
    q, level = oracles.level(case.diagonal, case.u, case.sign)
    return level, 1.0 + (1.0 + q) / level


def bound_apply(case):
    delta, u, v = (np.abs(a) for a in case.arguments)
    return case.roundings * (delta * v + u * (u @ v))


def bound_solve(case):
    delta, u, p = (np.abs(a) for a in case.arguments)
    level, worse = conditioning(case)
    return case.roundings * (p / delta + u / delta * (u @ (p / delta)) / level * worse)


def bound_velocity(case):
    delta, u, z = (np.abs(a) for a in case.arguments)
    level, worse = conditioning(case)
    root = np.sqrt(level)
    w = u / np.sqrt(delta)
    return case.roundings * (z + w * (w @ z) / (root * (1 + root)) * worse) / np.sqrt(delta)


def bound_momentum(case):
    delta, u, z = (np.abs(a) for a in case.arguments)
    level, worse = conditioning(case)
    return case.roundings * (np.sqrt(delta) * z + u * ((u / np.sqrt(delta)) @ z) / (1 + np.sqrt(level)) * worse)


def assert_within(found, exact, bound):
    off = np.array([float(abs(mp.mpf(float(a)) - b)) for a, b in zip(found, exact, strict=True)])
    assert np.all(off <= bound), f"off by up to {np.max(off / np.maximum(bound, 1e-300)):.3g} bounds"


@given(cases())
@settings(max_examples=150)
def test_apply_is_the_dense_product(case):
    found = kernels.apply(*case.arguments, sign=case.sign)
    with mp.workdps(oracles.DIGITS):
        exact = oracles.metric(case.diagonal, case.u, case.sign) * oracles.column(case.vector)
        assert_within(found, list(exact), bound_apply(case))


@given(cases(most=14))
@settings(max_examples=150)
def test_solve_is_elimination_in_many_digits(case):
    found = kernels.solve(*case.arguments, sign=case.sign)
    with mp.workdps(oracles.DIGITS):
        assert_within(found, oracles.solve(case.diagonal, case.u, case.sign, case.vector), bound_solve(case))


@given(cases())
@settings(max_examples=150)
def test_apply_and_solve_undo_each_other(case):
    """G x^ - p is at most |G| times the error of x^, and G^-1 p^ - v at most |G^-1| times that of p^, plus one more."""
    delta, u = case.diagonal, case.u
    solved = kernels.solve(*case.arguments, sign=case.sign)
    back = kernels.apply(delta, u, solved, sign=case.sign)
    carried = bound_solve(case)
    allowed = delta * carried + np.abs(u) * (np.abs(u) @ carried) + bound_apply(Case(delta, u, solved, case.sign))
    assert np.all(np.abs(back - case.vector) <= allowed * (1 + 1e-9))

    applied = kernels.apply(*case.arguments, sign=case.sign)
    back = kernels.solve(delta, u, applied, sign=case.sign)
    carried = bound_apply(case)
    level, worse = conditioning(case)
    allowed = carried / delta + np.abs(u) / delta * (np.abs(u) @ (carried / delta)) / level * worse
    allowed = allowed + bound_solve(Case(delta, u, applied, case.sign))
    assert np.all(np.abs(back - case.vector) <= allowed * (1 + 1e-9))


@given(cases(most=14))
@settings(max_examples=150)
def test_log_determinant_is_that_of_the_dense_matrix(case):
    found = kernels.log_determinant(case.diagonal, case.u, sign=case.sign)
    q, level = oracles.level(case.diagonal, case.u, case.sign)
    bound = case.roundings * (np.abs(np.log(case.diagonal)).sum() + abs(np.log(level)) + q / level)
    with mp.workdps(oracles.DIGITS):
        exact = oracles.log_determinant(case.diagonal, case.u, case.sign)
        assert float(abs(mp.mpf(found) - exact)) <= bound


def as_matrix(operation, case):
    """The matrix of a linear operation: its images of the identity's columns, and their error bounds."""
    bound = {kernels.velocity: bound_velocity, kernels.momentum: bound_momentum}[operation]
    columns, errors_ = [], []
    for e in np.eye(len(case.u)):
        pushed = Case(case.diagonal, case.u, e, case.sign)
        columns.append(operation(*pushed.arguments, sign=case.sign))
        errors_.append(bound(pushed))
    return np.array(columns).T, np.array(errors_).T


@given(cases(most=9))
def test_covariances_of_the_draws_are_exact(case):
    """M M^T of the maps from z is G^-1 for velocities and G for momenta, in many digits."""
    with mp.workdps(oracles.DIGITS):
        dense = oracles.metric(case.diagonal, case.u, case.sign)
        for operation, exact in ((kernels.velocity, mp.inverse(dense)), (kernels.momentum, dense)):
            found, off = as_matrix(operation, case)
            product = mp.matrix(found.tolist()) * mp.matrix(found.tolist()).T
            bound = (off @ np.abs(found).T + np.abs(found) @ off.T) * (1 + 1e-9) + off @ off.T
            for i in range(len(case.u)):
                assert_within([0.0] * len(case.u), list(product[i, :] - exact[i, :]), bound[i])


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


@given(cases())
@example(Case(np.array([3.7e-12]), np.array([0.0]), np.array([-2.385e12]), -1))
def test_without_a_rank_one_term_nothing_but_the_diagonal_is_left(case):
    delta, zero, z = case.diagonal, np.zeros_like(case.u), case.vector
    assert np.array_equal(kernels.apply(delta, zero, z, sign=case.sign), delta * z)
    assert np.array_equal(kernels.solve(delta, zero, z, sign=case.sign), z / delta)
    assert np.array_equal(kernels.velocity(delta, zero, z, sign=case.sign), z / np.sqrt(delta))
    assert np.array_equal(kernels.momentum(delta, zero, z, sign=case.sign), np.sqrt(delta) * z)
    logs = np.log(delta)
    assert abs(kernels.log_determinant(delta, zero, sign=case.sign) - logs.sum()) <= case.roundings * np.abs(logs).sum()


@given(cases(), st.sampled_from(VECTORS))
def test_out_may_be_the_vector_itself_and_gives_the_same_bits(case, operation):
    fresh = operation(*case.arguments, sign=case.sign)
    kept = case.vector.copy()
    into = np.full_like(kept, np.nan)
    assert operation(case.diagonal, case.u, kept, sign=case.sign, out=into) is into
    assert into.tobytes() == fresh.tobytes()
    assert np.array_equal(kept, case.vector), "the given vector was changed"
    assert operation(case.diagonal, case.u, kept, sign=case.sign, out=kept) is kept
    assert kept.tobytes() == fresh.tobytes()


@given(cases(), st.sampled_from(VECTORS))
def test_strided_and_read_only_arrays_are_read_as_they_are(case, operation):
    spread = np.repeat(case.vector, 3)[::3]
    fixed = case.diagonal.copy()
    fixed.flags.writeable = False
    found = operation(fixed, case.u[::-1][::-1], spread, sign=case.sign)
    assert found.tobytes() == operation(*case.arguments, sign=case.sign).tobytes()


@given(cases(), st.sampled_from(VECTORS), st.integers(-30, 30))
def test_units_that_are_powers_of_four_change_no_bit(case, operation, k):
    """x -> 2^k x makes delta, u and velocities 4^-k, 2^-k and 2^k times as large: exact in binary."""
    unit = 2.0**k
    powers = {kernels.apply: (1, -1), kernels.solve: (-1, 1), kernels.velocity: (0, 1), kernels.momentum: (0, -1)}
    given_power, power = powers[operation]
    fresh = operation(*case.arguments, sign=case.sign)
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
