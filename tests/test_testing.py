"""`fellwalk.testing`: every check passes what is right, and each catches the error planted for it and says so.

Examples are found and made small by Hypothesis, with fixed choices.
"""

import dataclasses
import subprocess
import sys
import types

import numpy as np
import pytest
from hypothesis import Phase, find, given, settings
from hypothesis import strategies as st
from scipy import stats

import fellwalk as fw
from fellwalk import errors, kernels
from fellwalk import testing as ft
from fellwalk.testing_report import demand


def message(check, *arguments, **named):
    """What a check says of an error that it must see."""
    with pytest.raises(ft.IdentityFailed) as caught:
        check(*arguments, **named)
    return str(caught.value)


# ---- metrics --------------------------------------------------------------------------------------------------------


@given(ft.metrics())
def test_the_strategy_gives_metrics_of_both_signs_that_are_positive_definite(metric):
    assert np.all(metric.diagonal > 0)
    assert metric.level > 0
    assert metric.sign in (1, -1)
    assert len(metric.diagonal) == len(metric.u) == len(metric.vector) >= 1


def test_the_strategy_reaches_extremes():
    seen = []

    @settings(max_examples=400)
    @given(ft.metrics())
    def collect(metric):
        seen.append(metric)

    collect()
    for wanted in (
        lambda m: m.sign == -1 and m.level < 1e-6,
        lambda m: m.sign == 1 and m.level > 1e20,
        lambda m: m.diagonal.max() > 1e9 and m.diagonal.min() < 1e-9,
        lambda m: len(m.u) > 8 and np.count_nonzero(m.u) > 4,
        lambda m: len(m.u) > 2 and not np.any(m.u),
    ):
        assert any(map(wanted, seen))
        ft.check_metric(next(filter(wanted, seen)))


def wrong_metric(**operations):
    """The kernels with some of them replaced."""
    names = ("apply", "solve", "velocity", "momentum", "log_determinant")
    return types.SimpleNamespace(**{name: getattr(kernels, name) for name in names} | operations)


def solve_without_level(delta, u, p, *, sign):
    return p / delta - sign * (u / delta) * (u @ (p / delta))


def determinant_without_sign(delta, u, *, sign):
    return np.log(delta).sum() + np.log1p(np.sum(u * u / delta))


def determinant_by_adding_one(delta, u, *, sign):
    return np.log(delta).sum() + np.log(1.0 + sign * np.sum(u * u / delta))


def velocity_by_subtraction(delta, u, z, *, sign):
    """Right on paper; the difference loses the digits of a small q."""
    w = u / np.sqrt(delta)
    q = w @ w
    return (z - w * (w @ z) * ((1 - 1 / np.sqrt(1 + sign * q)) / q if q else 0.0)) / np.sqrt(delta)


def momentum_of_the_inverse(delta, u, z, *, sign):
    return kernels.velocity(1.0 / delta, u / delta, z, sign=sign)


PLANTED_IN_METRICS = {
    "apply without the sign": ("apply", lambda delta, u, v, *, sign: delta * v + u * (u @ v), "apply = G v"),
    "solve without L": ("solve", solve_without_level, "solve = G^-1 p"),
    "determinant without the sign": ("log_determinant", determinant_without_sign, "log_determinant"),
    "determinant that rounds q away": ("log_determinant", determinant_by_adding_one, "log_determinant"),
    "velocity that cancels": ("velocity", velocity_by_subtraction, "velocity: M M' = G^-1"),
    "momentum of the inverse": ("momentum", momentum_of_the_inverse, "momentum: M M' = G"),
}


def planted_in(planted):
    name, operation, identity = PLANTED_IN_METRICS[planted]
    return wrong_metric(**{name: operation}), identity


@pytest.mark.parametrize("planted", PLANTED_IN_METRICS)
def test_errors_planted_in_metrics_are_seen(planted):
    operations, identity = planted_in(planted)

    @settings(max_examples=300, phases=[Phase.generate], report_multiple_bugs=False)
    @given(ft.metrics())
    def look(metric):
        with np.errstate(all="ignore"):
            ft.check_metric(metric, operations)

    said = message(look)
    for part in (identity, "is right: off by", "tolerance", "diagonal = [", "u = [", "vector = [", "sign = "):
        assert part in said


def test_metrics_are_made_small():
    operations, identity = planted_in("solve without L")

    def fails(metric):
        try:
            ft.check_metric(metric, operations)
        except ft.IdentityFailed:
            return True
        return False

    small = find(ft.metrics(most=4), fails, settings=settings(max_examples=300))
    ft.check_metric(small)
    assert len(small.u) == 1
    assert identity in message(ft.check_metric, small, operations)


# ---- densities ------------------------------------------------------------------------------------------------------


@given(st.data())
def test_known_densities_have_the_derivatives_they_say(data):
    known = data.draw(ft.densities())
    x = data.draw(ft.near(known))
    density = known.density()
    ft.check_density(density, x)
    p, q = (np.abs(x) * data.draw(ft.positions(known.dimension, 2.0)) for _ in range(2))
    ft.check_hessian_product(density, x, p, q)


@settings(max_examples=20)
@given(ft.densities(3), st.integers(0, 2**32))
def test_known_densities_have_the_draws_they_say(known, seed):
    """Kolmogorov-Smirnov of 2,000 draws in every law; false alarms 1e-8 an example, 2e-7 in all. And E[g] = 0, which
    ties the draws to the density: within 8 errors of draws with all moments (chance 1e-15), where there is no edge."""
    x = known.draws(2000, np.random.default_rng(seed))
    for of, cdf in known.laws.values():
        assert stats.kstest(of(x), cdf).pvalue > 1e-8 / len(known.laws)
    if not known.name.startswith(("edge", "funnel")):
        slopes = np.array([known.call(row)[1] for row in x])
        assert np.all(np.abs(slopes.mean(axis=0)) <= 8 * slopes.std(axis=0) / np.sqrt(len(x)))


def changed(known, call=None, multiply=None):
    return dataclasses.replace(known, call=call or known.call, multiply=multiply or known.multiply).density()


def scaled_gradient(known, factor):
    def call(x):
        value, gradient = known.call(x)
        return value, gradient * np.where(np.arange(known.dimension) == 0, factor, 1.0)
    return call


def test_a_wrong_gradient_is_seen_in_its_coordinate_and_made_small():
    factor = 1.0 + 1e-4

    def fails(pair):
        known, x = pair
        try:
            ft.check_density(changed(known, scaled_gradient(known, factor)), x)
        except ft.IdentityFailed:
            return True
        return False

    pairs = ft.densities().flatmap(lambda known: st.tuples(st.just(known), ft.near(known)))
    known, x = find(pairs, fails, settings=settings(max_examples=1000))
    assert known.dimension == 1
    assert known.name == "normal([1.0], 1.0)"
    assert x.tolist() == [1.0]
    said = message(ft.check_density, changed(known, scaled_gradient(known, factor)), x)
    assert "gradient = derivative of the log density does not hold" in said
    assert "in entry 0" in said
    assert "errors of the differences" in said


def test_a_function_that_changes_its_mind_is_seen():
    calls = iter(range(10))
    said = message(ft.check_density, fw.Density(lambda x: (-0.5 * x @ x + 1e-14 * next(calls), -x), 2), [1.0, 2.0])
    assert "the same value and gradient at every call" in said


def test_outside_the_support_a_density_cannot_be_checked():
    with pytest.raises(errors.ArgumentError, match="inside its support"):
        ft.check_density(ft.edge([1.0, 2.0]).density(), [-1.0, 1.0])


SKEW = np.array([[0.0, 1.0, 0.0], [-1.0, 0.0, 0.0], [0.0, 0.0, 0.0]])
PLANTED_IN_PRODUCTS = {
    "not symmetric": (lambda k: lambda x, p: k.multiply(x, p) + 1e-3 * SKEW @ p, "p.Hq = q.Hp"),
    "not linear": (lambda k: lambda x, p: k.multiply(x, p) * (1.0 + 1e-6 * np.abs(p).sum()), "H (p - 2 q) ="),
    "of another point": (lambda k: lambda x, p: k.multiply(1.01 * x, p), "H p = derivative of the gradient along p"),
    "twice": (lambda k: lambda x, p: 2.0 * k.multiply(x, p), "H p = derivative of the gradient along p"),
}


@pytest.mark.parametrize("planted", PLANTED_IN_PRODUCTS)
def test_wrong_hessian_products_are_seen(planted):
    wrong, identity = PLANTED_IN_PRODUCTS[planted]
    known = ft.student([1.0, 0.5, 2.0], 5.0)
    x, p, q = np.array([0.7, -0.4, 1.3]), np.array([1.0, 0.3, -0.8]), np.array([0.2, -1.1, 0.6])
    ft.check_hessian_product(known.density(), x, p, q)
    assert message(ft.check_hessian_product, changed(known, multiply=wrong(known)), x, p, q).startswith(identity)


# ---- motions --------------------------------------------------------------------------------------------------------

KNOWN = ft.student([1.0, 1.0], 5.0)
BEND = 1.5
X, V, SCALE = np.array([0.7, -0.4]), np.array([0.5, 0.9]), np.array([1.3, 0.5])
BENT = ft.walk_of(KNOWN.density(), fw.Lagrangian(curvature="product"), scale=SCALE, beta=BEND)
PLAIN = ft.walk_of(KNOWN.density(), scale=SCALE)


def altered(change, walk=BENT):
    """A walk whose end is changed: change(end, x, v, step_size, steps) gives the fields that differ."""
    def go(x, v, step_size, steps):
        end = walk(x, v, step_size, steps)
        return dataclasses.replace(end, **change(end, x, v, step_size, steps))
    return go


@settings(max_examples=25)
@given(st.data())
def test_motions_of_this_package_pass_on_any_known_density(data):
    known = data.draw(ft.well_behaved(3))
    x = data.draw(ft.near(known))
    unit = np.median(np.abs(known.draws(200, np.random.default_rng(1))), axis=0)
    v = unit * data.draw(ft.positions(known.dimension, 1.0))
    for motion, beta in ((fw.Leapfrog(), 0.0), (fw.Lagrangian(), 0.3), (fw.Lagrangian(curvature="product"), 0.3)):
        walk = ft.walk_of(known.density(), motion, scale=unit**2, beta=beta)
        if walk(x, v, 0.1, 3).status == 0:
            ft.check_reversible(walk, x, v, 0.1, 3, scale=unit**2)
            ft.check_log_jacobian(walk, x, v, 0.1, 1, scale=unit**2)


def test_a_walk_that_does_not_come_back_is_seen():
    ft.check_reversible(BENT, X, V, 0.2, 5, scale=SCALE)
    for change in (
        lambda end, x, v, step, steps: {"velocity": end.velocity + 1e-11},
        lambda end, x, v, step, steps: {"position": end.position * (1 + 1e-11)},
        lambda end, x, v, step, steps: {"velocity": end.velocity + 1e-3 * abs(step) ** 3 * end.velocity},
    ):
        said = message(ft.check_reversible, altered(change), X, V, 0.2, 5, scale=SCALE)
        assert "after the way back by a negative step" in said
        assert "condition" in said
    said = message(ft.check_reversible, altered(lambda end, *_: {"log_jacobian": abs(end.log_jacobian)}), X, V, 0.2, 5)
    assert "log_jacobian back by a negative step = -log_jacobian there" in said


def test_a_wrong_log_jacobian_is_seen():
    ft.check_log_jacobian(BENT, X, V, 0.2, 3, scale=SCALE)
    for change in (lambda end, *_: {"log_jacobian": -end.log_jacobian}, lambda end, *_: {"log_jacobian": 0.0},
                   lambda end, *_: {"log_jacobian": end.log_jacobian + 1e-7}):
        said = message(ft.check_log_jacobian, altered(change), X, V, 0.2, 3, scale=SCALE)
        assert "log_jacobian = log |det of the map|" in said
        assert "step_size = 0.2" in said


def euler(x, v, step_size, steps):
    """The symplectic Euler method: of order 1, volume preserving."""
    start = KNOWN.call(x)[0] - 0.5 * v @ v
    for _ in range(steps):
        v = v + step_size * KNOWN.call(x)[1]
        x = x + step_size * v
    ratio = KNOWN.call(x)[0] - 0.5 * v @ v - start
    return types.SimpleNamespace(position=x, velocity=v, log_jacobian=0.0, log_ratio=ratio, status=0, sentence="fine")


def test_a_wrong_order_is_seen():
    for walk in (BENT, PLAIN):
        ft.check_order(walk, X, V, 1.2, scale=SCALE)
    ft.check_order(euler, X, V, 1.2, 100, order=1)
    assert "order of position" in message(ft.check_order, euler, X, V, 1.2)
    assert "order of position" in message(ft.check_order, BENT, X, V, 1.2, order=3, scale=SCALE)
    surrogate = ft.walk_of(KNOWN.density(), fw.Lagrangian(), scale=SCALE, beta=BEND)
    ft.check_order(surrogate, X, V, 1.2, scale=SCALE, consistent=False)
    assert "order of log_ratio" in message(ft.check_order, surrogate, X, V, 1.2, scale=SCALE)


def test_an_order_beyond_rounding_is_not_claimed():
    with pytest.raises(errors.ArgumentError, match="mere rounding"):
        ft.check_order(PLAIN, X, V, 1e-9, scale=SCALE)


def test_a_move_that_changes_the_law_is_seen():
    """6,000 exact draws; false alarms 1e-6 for each call that must pass."""
    rng = np.random.default_rng(5)
    draws = KNOWN.draws(6000, rng)
    grads = np.array([KNOWN.call(x)[1] for x in draws])
    w = rng.standard_normal(draws.shape)
    # v ~ N(0, G^-1), G = diag(1 / SCALE) + BEND g g'
    v = np.array([kernels.velocity(1 / SCALE, np.sqrt(BEND) * g, z) for g, z in zip(grads, w, strict=True)])
    for walk, velocities in ((BENT, v), (PLAIN, np.sqrt(SCALE) * w)):
        ft.check_invariance(ft.accepting(walk, velocities, 0.55, 2, rng), draws, KNOWN.laws)
    careless = altered(lambda end, *_: {"log_ratio": end.log_ratio - end.log_jacobian})
    said = message(ft.check_invariance, ft.accepting(careless, v, 0.55, 2, rng), draws, KNOWN.laws)
    assert "the law of 'coordinate" in said
    assert "false alarms 1e-06 for 2 laws together" in said
    careless = altered(lambda end, *_: {"log_ratio": 0.0}, PLAIN)
    message(ft.check_invariance, ft.accepting(careless, np.sqrt(SCALE) * w, 1.8, 2, rng), draws, KNOWN.laws)
    assert "of the draws moved" in message(ft.check_invariance, lambda x: x, draws, KNOWN.laws)
    with pytest.raises(errors.ArgumentError, match="do not have the law"):
        ft.check_invariance(lambda x: x + 1.0, draws + 1.0, KNOWN.laws)


def test_a_failed_walk_is_said():
    said = message(ft.check_reversible, ft.walk_of(ft.edge([1.0]).density()), [0.1], [-5.0], 0.2, 3)
    assert "the way there does not hold: the walk failed: the log density was minus infinity" in said


# ---- around them ----------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("found", [np.nan, [1.0, np.nan], np.inf])
def test_what_is_not_a_number_fails_whatever_the_tolerance(found):
    message(demand, "something", found, 1.0, np.inf, "given")


def test_equal_values_pass_without_a_tolerance():
    demand("something", [1.0, 2.0], [1.0, 2.0], 0.0, "given")
    assert "in entry (1, 0)" in message(demand, "it", [[1.0], [3.0]], [[1.0], [2.0]], 0.5, "given")


def test_without_hypothesis_the_module_says_what_to_install():
    code = "import sys; sys.modules['hypothesis'] = None\nimport fellwalk\nimport fellwalk.testing"
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True)
    assert done.returncode == 1
    assert "pip install 'hypothesis>=6.100'" in done.stderr
