"""Every motion through `integrate`: published steps, dense steps, reversal, Jacobians, order, exactness, counts.

A kind is a motion with its scheme and curvature. "exact" kinds use Hessian products of the density, "difference" kinds
forward differences of the gradient (good to about 1e-8), "surrogate" kinds a constant field in the Hessian's place.
"""

import dataclasses

import checks
import numpy as np
import oracles
import pytest
import stat_checks
import targets
from hypothesis import given
from hypothesis import strategies as st
from walks import BENT, CONSISTENT, FLAT, KINDS, PAIRS, PLACES, SURROGATE, density_of, place

import fellwalk as fw
from fellwalk import kernels, testing

EPS = oracles.EPS


def measured(name, value):
    print(f"measured: {name}: {value:.2e}")
    return value


# ---- published numbers ----------------------------------------------------------------------------------------------

POINTS = {
    "point_funnel_d2": lambda: targets.funnel(2, 3.0),
    "point_rosenbrock": lambda: targets.rosenbrock(0.05, 5.0, 1.0),
    "point_ring": lambda: targets.ring(2, 3.0, 0.5),
    "point_student-t": lambda: targets.student(2, 5.0, 0.5),
    "point_nist": lambda: targets.normal_sample("mcmc01"),
}


def numbers(values):
    def number(text):
        top, _, bottom = text.partition("/")
        return float(top) / float(bottom or 1)

    return np.vectorize(number, otypes=[float])(np.array(values))


@pytest.mark.parametrize("name", POINTS)
def test_published_geometry_at_a_point(name):
    """Gradient, Hessian, metric and Christoffel symbols of the checks, 1e-12 relative to the largest entry."""
    known, target = checks.values(name), POINTS[name]()
    x, m, alpha2 = (numbers(known[key]) for key in ("point", "m", "alpha2"))
    density = density_of(target)

    def agree(found, key):
        expected = numbers(known[key])
        np.testing.assert_allclose(found, expected, rtol=1e-12, atol=1e-12 * np.abs(expected).max())

    value, gradient = density(x)
    u = np.sqrt(alpha2) * gradient
    agree(value, "logp")
    agree(gradient, "grad")
    hessian = np.array([density.product(x, e) for e in np.eye(2)])
    agree(hessian, "hess")
    agree(np.array([kernels.apply(m, u, e) for e in np.eye(2)]), "G")
    agree(np.array([kernels.solve(m, u, e) for e in np.eye(2)]), "Ginv")
    agree(kernels.log_determinant(m, u), "logdetG")
    # Gamma^k_ij = beta (G^-1 g)_k H_ij, since G^-1 g = n / L
    agree(alpha2 * np.multiply.outer(kernels.solve(m, u, gradient), hessian), "christoffel Gamma[k][i][j]")
    dense = oracles.Monge(target, m, float(alpha2))
    agree(dense.christoffel(x), "christoffel Gamma[k][i][j]")
    agree(dense.potential_gradient(x), "grad_phi")


@pytest.mark.parametrize("name", POINTS)
def test_published_semi_explicit_step(name):
    """One step of the checks, to 1e-12. Its log-Jacobian is the derived one: equation (9) of Williams et al. (2024)
    prints the two velocities exchanged (checks: williams2024_erratum), which must not be what comes out."""
    known, target = checks.values(name), POINTS[name]()
    step = known["lagrangian_step"]
    x, m, alpha2 = (numbers(known[key]) for key in ("point", "m", "alpha2"))
    v0, x1, v1, eps = (numbers(step[key]) for key in ("v0", "theta1", "v1", "eps"))
    found = fw.integrate(density_of(target), x, v0, motion=KINDS["semi-explicit, product"], step_size=float(eps),
                         steps=1, scale=1.0 / m, beta=float(alpha2), trace=True)
    np.testing.assert_allclose(found.position, x1, rtol=1e-12)
    np.testing.assert_allclose(found.velocity, v1, rtol=1e-12)
    log_jacobian, ratio = float(step["logabsdetJ"]), float(step["log_accept_ratio"])
    printed = float(step["logabsdetJ_if_velocities_swapped_as_printed_in_Williams2024_eq9"])
    energies = numbers([step["E0"], step["E1"]])
    # A log-Jacobian is a sum of logarithms of numbers near 1, and the ratio a difference of energies: both are as
    # good as 1e-12 of what they are made of, not of what is left.
    assert found.log_jacobian == pytest.approx(log_jacobian, rel=1e-12, abs=1e-15)
    assert abs(found.log_jacobian - printed) > 0.9 * abs(log_jacobian - printed) > 1e-10
    np.testing.assert_allclose(found.trace["energy"], energies, rtol=1e-12)
    assert found.log_ratio == pytest.approx(ratio, rel=1e-12, abs=1e-12 * np.abs(energies).max())


HARMONIC = [(0.1, 1), (0.5, 1), (1.0, 1), (1.5, 1), (1.9, 1), (1.99, 1), (1.0, 10), (0.5, 7), (1.5, 5), (1.9, 10)]


@pytest.mark.parametrize(("step", "steps"), HARMONIC)
def test_leapfrog_on_the_harmonic_oscillator(step, steps):
    """Matrix, mean energy error and acceptance rate of the checks (leapfrog_harmonic), to rounding.

    The energy error is a quadratic form l1 a^2 + l2 b^2 of a standard normal start, so the acceptance rate, twice the
    probability that it is negative, is (4 / pi) atan(sqrt(-l1 / l2)), the smaller root negative.
    """
    known = checks.values("leapfrog_harmonic")[f"epsw={step},M={steps}"]
    density = density_of(targets.standard_normal(1))

    def go(x, v):
        return fw.integrate(density, [x], [v], step_size=step, steps=steps)

    one, two, both = go(1.0, 0.0), go(0.0, 1.0), go(1.0, 1.0)
    matrix = np.array([[one.position[0], two.position[0]], [one.velocity[0], two.velocity[0]]])
    expected = [float(known[key]) for key in ("A00", "A01", "A10", "A00")]
    np.testing.assert_allclose(matrix.ravel(), expected, rtol=0.0, atol=8 * EPS * steps * np.abs(expected).max())
    assert np.linalg.det(matrix) == pytest.approx(1.0, abs=1e-13)
    cross = 0.5 * (both.log_ratio - one.log_ratio - two.log_ratio)
    low, high = np.linalg.eigvalsh(-np.array([[one.log_ratio, cross], [cross, two.log_ratio]]))
    assert low < 0.0 < high
    # energies are near 1 here, so each entry of the form is good to a few eps
    assert low + high == pytest.approx(float(known["mean_dH"]), abs=64 * EPS, rel=1e-12)
    rate = 4.0 / np.pi * np.arctan(np.sqrt(-low / high))
    assert rate == pytest.approx(float(known["accept"]), abs=64 * EPS / high, rel=1e-12)


SOHL = {
    "2d gauss": (lambda: targets.log_spaced_normal(2), 0.9208331517, 0.0),
    "100d gauss": (lambda: targets.log_spaced_normal(100), 0.8525844770, 0.0),
    "2d rough well": (lambda: targets.rough_well(), 0.55377, 0.00007),
}


@pytest.mark.parametrize("name", SOHL)
def test_published_acceptance_rates_of_leapfrog(name):
    """Ten steps of size 1 with unit mass (checks: sohl2014), 15,000 exact starts; false alarm rate 1e-6 each."""
    build, exact, error = SOHL[name]
    known = checks.values("sohl2014")
    assert round(exact, 3) == float(known["published"][name].split()[0])
    target, rng = build(), np.random.default_rng([3, *name.encode()])
    density = density_of(target)
    x = target.exact_draws(15_000, rng)
    ratios = np.array([fw.integrate(density, a, b, step_size=1.0, steps=10).log_ratio
                       for a, b in zip(x, rng.standard_normal(x.shape), strict=True)])
    rates = np.exp(np.minimum(ratios, 0.0))
    spread = float(np.hypot(rates.std() / np.sqrt(len(rates)), error))
    stat_checks.assert_all([stat_checks.compare_mean(rates, exact, spread, name)], 1e-6)


# ---- single steps ---------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(("name", "kind"), PAIRS)
def test_a_step_is_the_dense_step(name, kind):
    """Against dense Christoffel symbols and a numerical Christoffel flow (tolerance 1e-13): 1e-12 of the state's size.
    Differences of gradients are off by sqrt(eps) of the curvature, so a state by 1e-7 of a step."""
    here = place(name)
    dense = here.dense(kind)
    scheme = "semi-explicit" if kind in FLAT else KINDS[kind].scheme
    for step in (here.step, -here.step):
        found = here.go(kind, step=step, trace=True)
        x, v = dense.step(scheme, here.x, here.v, step)
        size = max(1.0, np.abs(here.x).max(), np.abs(here.v).max())
        assert here.apart((found.position, found.velocity), (x, v)) <= (1e-7 if "difference" in kind else 1e-12) * size
        energies = [dense.energy(here.x, here.v), dense.energy(found.position, found.velocity)]
        np.testing.assert_allclose(found.trace["energy"], energies, rtol=1e-12, atol=1e-12)
        assert found.log_density == here.target.value_gradient(found.position)[0]


@pytest.mark.parametrize(("name", "kind"), PAIRS)
def test_the_log_jacobian_is_that_of_the_whole_step(name, kind):
    """Against slogdet of the (2 d, 2 d) Jacobian by extrapolated central differences of step h.

    At h = 0.002 their truncation is 6e-17 times seventh derivatives and their rounding 20 eps / h = 2e-12; ten times
    that. Differences of gradients carry noise of 1e-8, at h = 0.02 5e-7 in each entry; ten times that. Measured: 2e-12
    and 3e-7 at worst.
    """
    here = place(name)
    h, tolerance = (0.02, 5e-6) if "difference" in kind else (0.002, 2e-11)
    for step in (here.step, -here.step):
        testing.check_log_jacobian(here.walk(kind), here.x, here.v, step, scale=here.scale, h=h, tolerance=tolerance)
        found = here.go(kind, step=step).log_jacobian
        assert kind == "leapfrog" or abs(found) > 1e-6, "a log-Jacobian this small would agree with anything"


@pytest.mark.parametrize("name", PLACES)
def test_log_jacobians_of_difference_curvature_follow_the_exact_ones(name):
    """A Hessian product by differences is off by about 1e-8 of the curvature: 1e-6 after a path of eight steps."""
    here = place(name)
    for scheme in ("split", "semi-explicit"):
        near, exact = (here.go(f"{scheme}, {curvature}", steps=8) for curvature in ("difference", "product"))
        assert near.log_jacobian == pytest.approx(exact.log_jacobian, abs=1e-6)


# ---- reversal -------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(("name", "kind"), PAIRS)
@pytest.mark.parametrize("steps", [4, 12])
def test_paths_are_reversible(name, kind, steps):
    """Some steps and back, by a negative step and by the flipped velocity.

    A step makes some 20 roundings of the state, which the way back carries on by at most the condition number of the
    path's Jacobian (on the funnel 470 after twelve steps). With "difference" curvature sqrt(eps) for a whole path, to
    which differences are symmetric and linear, stands for the roundings, and four steps must come back to 1e-7 whatever
    the condition.
    """
    here = place(name)
    named = {"scale": here.scale}
    if "difference" in kind:
        named |= {"tolerance": 1e-7} if steps == 4 else {"step_error": np.sqrt(EPS) / steps}
    testing.check_reversible(here.walk(kind), here.x, here.v, here.step, steps, **named)


@given(st.sampled_from(sorted(KINDS)), st.integers(1, 20), st.integers(0, 2**32))
def test_reversal_at_any_dimension_and_scale(kind, d, seed):
    """Student-t targets with a scale of its own in 1e-6..1e6 for every coordinate. 1e-11 of the state: four steps of
    20 roundings there and back, 4e-14, carried on by a condition of up to 250; differences, 1.5e-8 each: 1e-6."""
    d = max(d, 2) if kind == "isokinetic" else d
    rng = np.random.default_rng(seed)
    unit = 10.0 ** rng.uniform(-6.0, 6.0, d)
    core = targets.student(d, 5.0)

    def value_gradient(x):
        value, gradient = core.value_gradient(x / unit)
        return value, gradient / unit

    density = fw.Density(value_gradient, d, hessian_product=lambda x, p: core.hessian_times(x / unit, p / unit) / unit)
    x, z = core.exact_draws(1, rng)[0], rng.standard_normal(d)
    v = oracles.Monge(core, np.ones(d), 0.3).velocities(x[None], z[None])[0]
    walk = testing.walk_of(density, KINDS[kind], scale=unit**2, beta=0.3)
    tolerance = (1e-6 if "difference" in kind else 1e-11) * max(1.0, np.abs(x).max())
    testing.check_reversible(walk, x * unit, v * unit, 0.15, scale=unit**2, tolerance=tolerance)


@given(st.sampled_from(sorted(KINDS)), st.lists(st.integers(-20, 20), min_size=3, max_size=3), st.integers(0, 2**32))
def test_units_that_are_powers_of_two_change_no_bit(kind, powers, seed):
    """x -> unit x with scale -> unit^2 scale is the same motion, and exact in binary."""
    rng = np.random.default_rng(seed)
    core = targets.student(3, 5.0, 0.3)
    scale = np.array([1.0, 0.25, 4.0])

    def run(unit):
        def value_gradient(x):
            value, gradient = core.value_gradient(x / unit)
            return value, gradient / unit

        def product(x, p):
            return core.hessian_times(x / unit, p / unit) / unit

        density = fw.Density(value_gradient, 3, hessian_product=product)
        found = fw.integrate(density, x * unit, v * unit, motion=KINDS[kind], step_size=0.2, steps=3,
                             scale=scale * unit**2, beta=0.4)
        return found.position / unit, found.velocity / unit, found.log_jacobian, found.log_ratio, found.status

    x, v = rng.standard_normal((2, 3))
    plain, scaled = run(np.ones(3)), run(2.0 ** np.array(powers, dtype=float))
    # the log-determinant of the base metric, at most 84 here, enters both energies of the ratio
    assert scaled[3] == pytest.approx(plain[3], abs=200 * EPS, rel=8 * EPS, nan_ok=True)
    for a, b in zip(plain[:3], scaled[:3], strict=True):
        assert np.array_equal(a, b, equal_nan=True)
    assert plain[4] == scaled[4]


# ---- order ----------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(("name", "kind"), [pair for pair in PAIRS if pair[1] in CONSISTENT])
def test_order_two_in_position_velocity_and_energy(name, kind):
    """Errors against the exact motion (Hamilton's equations, tolerance 1e-12) fall fourfold when the step is halved.

    The log ratio is what the energy loses net of the log-Jacobian; along the exact motion it is 0.
    """
    here = place(name)
    dense = here.dense(kind)
    time = 6 * here.step
    x, v = dense.exact(here.x, here.v, time)
    exact = (x, v, dense.log_determinant(here.x) - dense.log_determinant(x))
    if kind == "leapfrog":
        exact = (x, v, 0.0)
    near = here.go(kind, step=time / 48, steps=48)
    assert here.apart((near.position, near.velocity), (x, v)) < 0.02
    # The next term of the error is (step / scale of change)^2 of the first, below 5% here: 0.07 of the order.
    testing.check_order(here.walk(kind), here.x, here.v, time, 48, exact=exact, scale=here.scale, tolerance=0.07)


@pytest.mark.parametrize("kind", SURROGATE)
def test_the_surrogate_is_no_integrator_of_the_exact_motion(kind):
    """Its log ratio tends to a number that is not 0, at order 2 like every reversible map of its kind."""
    here = place("student 4")
    time = 6 * here.step
    ratios = [here.go(kind, step=time / n, steps=n).log_ratio for n in (24, 48, 96, 192)]
    changes = np.abs(np.diff(ratios))
    assert abs(ratios[-1]) > 0.01
    assert abs(ratios[-1]) > 100 * changes[-1]
    np.testing.assert_allclose(changes[:-1] / changes[1:], 4.0, atol=0.4)


# ---- exactness ------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("kind", KINDS)
def test_the_target_is_left_invariant(kind):
    """20,000 exact draws, one coarse path each, accepted with probability min(1, exp(log ratio)): still exact draws.

    Kolmogorov-Smirnov against the exact laws of both coordinates and of the quadratic form; false alarm rate 1e-6.
    The same paths accepted without their log-Jacobian must be found out, so the test has the power it needs.
    """
    target, n, rng = targets.student(2, 5.0, 0.5), 20_000, np.random.default_rng(71)
    density, scale, beta = density_of(target), np.array([1.3, 0.8]), 0.0 if kind in FLAT else 1.5
    step = 1.3 if kind == "isokinetic" else 0.55  # it has hardly an energy error to reject at smaller ones
    x = target.exact_draws(n, rng)
    v = oracles.Monge(target, 1.0 / scale, beta).velocities(x, rng.standard_normal(x.shape))
    laws = {name: (known.values, known.law.cdf) for name, known in target.marginals.items()}
    walk = testing.walk_of(density, KINDS[kind], scale=scale, beta=beta)

    def careless(*start):
        end = walk(*start)
        return dataclasses.replace(end, log_ratio=end.log_ratio - end.log_jacobian)

    right = testing.accepting(walk, v, step, 2, np.random.default_rng(72))
    testing.check_invariance(right, x, laws, least_moved=0.3)
    if kind != "leapfrog":
        with pytest.raises(testing.IdentityFailed, match="the law of"):
            testing.check_invariance(testing.accepting(careless, v, step, 2, np.random.default_rng(72)), x, laws,
                                     false_alarm=1e-12)


# ---- counts ---------------------------------------------------------------------------------------------------------


def counting(target):
    calls = {"gradients": 0, "products": 0}

    def value_gradient(x):
        calls["gradients"] += 1
        return target.value_gradient(x)

    def product(x, p):
        calls["products"] += 1
        return target.hessian_times(x, p)

    return fw.Density(value_gradient, target.dimension, hessian_product=product), calls


@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize("n", [0, 1, 2, 9])
def test_exact_numbers_of_calls(kind, n):
    """A gradient a step and one at the start; two Hessian products a step when split, three when semi-explicit."""
    here = place("funnel")
    density, calls = counting(here.target)
    found = fw.integrate(density, here.x, here.v, motion=KINDS[kind], step_size=0.05, steps=n, beta=0.3)
    curved = 0 if kind in FLAT or "surrogate" in kind else 2 * n + 2 if "split" in kind else 3 * n + 1
    expected = {"gradients": n + 1, "products": curved}
    if "difference" in kind:
        expected = {"gradients": n + 1 + curved, "products": 0}
    assert found.status == 0
    assert found.steps == n
    assert calls == expected
    assert {"gradients": found.gradients, "products": found.products} == expected
    assert {"gradients": density.gradients, "products": density.products} == expected


@pytest.mark.parametrize("kind", BENT)
@pytest.mark.parametrize("name", PLACES)
def test_without_bend_it_is_leapfrog_bit_for_bit(name, kind):
    here = place(name)

    def go(kind):
        found = fw.integrate(density_of(here.target), here.x, here.v, motion=KINDS[kind], step_size=here.step, steps=7,
                             scale=here.scale, beta=0.0)
        arrays = (found.position.tobytes(), found.velocity.tobytes())
        return *arrays, found.log_density, found.log_jacobian, found.log_ratio, found.gradients, found.products

    assert go(kind) == go("leapfrog")
