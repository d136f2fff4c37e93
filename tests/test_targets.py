"""The test densities against independent oracles: derivatives, exact draws, laws and published numbers."""

import ctypes
import gc
import pickle
from decimal import Decimal
from functools import cache

import checks
import mpmath as mp
import numpy as np
import pytest
import stat_checks
import targets
from scipy import LowLevelCallable
from targets import _build, models, oracles
from targets.cases import CASES, DRAWABLE, MEANS, SDS, case

DRAWS = 20_000
FALSE_ALARM = 1e-6  # for each test below that compares random numbers, the whole family together


@cache
def draws_of(name):
    target, _ = case(name)
    seed = [7, *name.encode()]
    if target.exact_draws is not None:
        return target.exact_draws(DRAWS, np.random.default_rng(seed))
    means = np.array([m.mean for m in target.marginals.values()])
    sds = np.array([m.sd for m in target.marginals.values()])
    return means + sds * np.random.default_rng(seed).standard_normal((8, target.dimension))


def units_of(name):
    """The interquartile range of each coordinate: robust where variances are huge."""
    low, high = np.quantile(draws_of(name), [0.25, 0.75], axis=0)
    return high - low


@pytest.mark.parametrize("name", CASES)
def test_derivatives_against_differences_at_fifty_digits(name):
    target, oracle = case(name)
    unit = units_of(name)
    count = 1 if target.name.startswith("logistic") else 3
    rng = np.random.default_rng(83)
    for x in draws_of(name)[:count]:
        value, gradient = oracles.value_gradient(oracle, x, unit)
        p = unit * rng.standard_normal(target.dimension)
        product = oracles.hessian_times(oracle, x, p, unit)
        found, slope = target.value_gradient(x)
        # A sum of some hundred terms, each off by a few roundings of 1.1e-16; in two regressions the residuals (300 and
        # 2e-4) are what is left over from terms 1e4 times as large.
        tolerance = 1e-10 if name in ("Longley", "Pontius") else 1e-12
        assert found == pytest.approx(value, rel=tolerance, abs=tolerance)
        # In these units gradients and curvatures are of order 1.
        np.testing.assert_allclose(slope * unit, gradient, rtol=tolerance, atol=tolerance)
        bend = target.hessian_times(x, p) * unit
        np.testing.assert_allclose(bend, product, rtol=tolerance, atol=tolerance)


def test_a_hundred_dimensions_run_through_the_vector_lanes():
    d = 100
    covariance = 0.01 * np.eye(d) + 0.99
    target = targets.equicorrelated_normal(d, 0.99)
    x = target.exact_draws(1, np.random.default_rng(3))[0]
    value, gradient = target.value_gradient(x)
    solved = np.linalg.solve(covariance, x)
    expected = -0.5 * (d * np.log(2 * np.pi) + np.linalg.slogdet(covariance)[1] + x @ solved)
    # The covariance has condition number 1e4.
    assert value == pytest.approx(expected, rel=1e-11)
    np.testing.assert_allclose(gradient, -solved, rtol=0, atol=1e-11 * np.abs(solved).max())


POINTS = {
    "point_funnel": lambda: targets.funnel(2),
    "point_rosenbrock": lambda: targets.rosenbrock(0.05, 5.0, 1.0),
    "point_ring": lambda: targets.ring(2, 3.0, 0.5),
    "point_student": lambda: targets.student(2, 5.0, 0.5),
    "point_nist": lambda: targets.normal_sample("mcmc01"),
}


@pytest.mark.parametrize("key", POINTS)
def test_known_points(key):
    target, known = POINTS[key](), checks.values(key)
    x = np.array([float(mp.mpf(text)) for text in known["point"]])
    value, gradient = target.value_gradient(x)
    tolerance = 1e-13  # 20 digits are known; a few dozen roundings of 1.1e-16, and those of the data themselves
    assert value == pytest.approx(float(known["logp"]), rel=tolerance)
    np.testing.assert_allclose(gradient, [float(v) for v in known["grad"]], rtol=tolerance)
    hessian = np.array([target.hessian_times(x, e) for e in np.eye(2)])
    np.testing.assert_allclose(hessian, [[float(v) for v in row] for row in known["hess"]], rtol=tolerance)


def test_exact_draws_follow_their_laws():
    laws, means = {}, []
    for name in DRAWABLE:
        target, _ = case(name)
        for label, marginal in target.marginals.items():
            x = marginal.values(draws_of(name))
            if marginal.law is None:
                means.append(stat_checks.compare_independent_mean(x, marginal.mean, f"{name} {label}"))
            else:
                laws[f"{name} {label}"] = (x, marginal.law.cdf)
    assert len(laws) > 100
    assert len(means) == 3
    stat_checks.assert_laws(laws, FALSE_ALARM)
    stat_checks.assert_all(means, FALSE_ALARM)


def test_rejection_gives_the_radii_of_a_wide_ring():
    """Where the rejection step matters most; 200,000 draws see 1% in the sd of the radius at six errors."""
    target = targets.ring(5, 0.6, 1.0)
    radius = target.marginals["radius"]
    r = radius.values(target.exact_draws(200_000, np.random.default_rng(29)))
    squares = ((r - radius.mean) / radius.sd) ** 2
    family = [
        stat_checks.compare_independent_mean(r, radius.mean),
        stat_checks.compare_independent_mean(squares, 1.0, "sd"),
    ]
    stat_checks.assert_all(family, FALSE_ALARM)


def test_exact_draws_belong_to_the_density():
    """E[(x_i - c) dl/dx_i] = -1 by parts, for any c where the support has no edge and for c = 0 at an edge at 0."""
    found = []
    for name in DRAWABLE:
        target, _ = case(name)
        x = draws_of(name)[:4000]
        gradients = np.array([target.value_gradient(row)[1] for row in x])
        bounded = name in ("exponential", "half-normal")
        centre = np.zeros(target.dimension) if bounded or "funnel" in name else np.median(draws_of(name), axis=0)
        # Small tau makes these integrals diverge for the other coordinates of the centred form.
        coordinates = [1] if name == "schools centred" else range(target.dimension)
        for i in coordinates:
            terms = (x[:, i] - centre[i]) * gradients[:, i]
            found.append(stat_checks.compare_independent_mean(terms, -1.0, f"{name} x{i + 1}"))
    stat_checks.assert_all(found, FALSE_ALARM)


PUBLISHED_LAWS = {
    "target_funnel_sd3": (lambda: targets.funnel(11), {"v": "v", "x": "x1"}),
    "target_funnel_sd1": (lambda: targets.funnel(2, 1.0), {"v": "v", "x": "x1"}),
    "target_rosenbrock_a0.05": (lambda: targets.rosenbrock(0.05), {"x1": "x1", "x2": "x2"}),
    "target_rosenbrock_a0.5": (lambda: targets.rosenbrock(0.5), {"x1": "x1", "x2": "x2"}),
    "target_ring_abs_r0=3": (lambda: targets.ring(2, 3.0, 0.5), {"r": "radius", "x": "x1"}),
    "target_ring_abs_r0=2": (lambda: targets.ring(2, 2.0, 0.1), {"r": "radius", "x": "x2"}),
    "target_ring_abs_r0=10": (lambda: targets.ring(2, 10.0, 1.0), {"r": "radius", "x": "x1"}),
    "target_winding_ridge": (lambda: targets.winding_ridge(), {"x1": "x1", "x2": "x2"}),
    "target_mvt_nu5": (lambda: targets.student(7, 5.0), {"": "x3"}),
    "target_mvt_nu10": (lambda: targets.student(4, 10.0, 0.4), {"": "x4"}),
    "eight_schools_A": (
        lambda: targets.eight_schools(False),
        {"mu": "mu", "tau": "tau", **{f"theta{j}": f"theta{j}" for j in range(1, 9)}},
    ),
}


@pytest.mark.parametrize("key", PUBLISHED_LAWS)
def test_laws_reach_the_known_quantiles(key):
    build, names = PUBLISHED_LAWS[key]
    target, known = build(), checks.values(key)
    compared = 0
    for short, label in names.items():
        marginal, prefix = target.marginals[label], f"{short}_" if short else ""
        for name, text in known.items():
            if name.startswith(f"{prefix}q0"):
                probability = float(name.split("q")[-1])
                # The references themselves agree between two grids to 2.6e-12.
                u, q = marginal.law.cdf(np.array(float(text))), marginal.law.ppf(np.array(probability))
                assert float(u) == pytest.approx(probability, abs=1e-11)
                assert float(q) == pytest.approx(float(text), rel=1e-11, abs=1e-11)
                compared += 1
        if f"{prefix}mean" in known:
            assert marginal.mean == pytest.approx(float(known[f"{prefix}mean"]), rel=1e-12, abs=1e-12)
        sd = known.get(f"{prefix}sd", known.get("sd_unit_scale"))
        assert marginal.sd == pytest.approx(float(sd), rel=1e-12)
    assert compared >= 5 * len(names)


def test_funnel_logarithm_and_schools_log_tau():
    known, marginal = checks.values("target_funnel_sd3"), targets.funnel(2).marginals["log|x1|"]
    assert marginal.mean == pytest.approx(float(known["E_log|x|"]), rel=1e-14)
    assert marginal.sd == pytest.approx(float(known["sd_log|x|"]), rel=1e-14)
    marginal = targets.eight_schools().marginals["log tau"]
    assert marginal.law.mean == pytest.approx(marginal.mean, rel=1e-12)
    assert marginal.law.sd == pytest.approx(marginal.sd, rel=1e-12)


@pytest.mark.parametrize("name", ["mcmc01", "mcmc06"])
def test_certified_normal_samples(name):
    known = checks.values(f"nist_{name}")["certified"]
    offset = {"mcmc01": 10**8, "mcmc06": 10**13}[name]
    mu, sigma = (targets.normal_sample(name).marginals[key] for key in ("mu", "sigma"))
    for p in (0.025, 0.5, 0.975):
        assert mu.quantiles[p] == pytest.approx(float(Decimal(known[f"mu_q{p:g}"]) - offset), abs=1e-14)
        assert sigma.quantiles[p] == pytest.approx(float(known[f"sigma_q{p:g}"]), abs=1e-14)
    assert mu.mean == pytest.approx(float(Decimal(known["mu_mean"]) - offset), abs=1e-14)
    # 15 published decimals
    assert [mu.sd, sigma.mean, sigma.sd] == pytest.approx(
        [float(known[k]) for k in ("mu_sd", "sigma_mean", "sigma_sd")], abs=1e-14
    )


@pytest.mark.parametrize("centred", [True, False])
@pytest.mark.parametrize("name", ["Norris", "Pontius", "Longley"])
def test_certified_regressions(name, centred):
    known, marginals = checks.values("nist_lls")[name], targets.regression(name, centred).marginals
    shrink = np.sqrt((known["nu"] - 2.0) / known["nu"])
    for i, parameter in enumerate(known["parameters"]):
        found = marginals[f"B{i}"]
        # 15 published digits, and what two orders of summation leave of them in double precision.
        assert found.mean == pytest.approx(float(parameter["certified_estimate"]), rel=1e-12)
        assert found.sd * shrink == pytest.approx(float(parameter["certified_sd"]), rel=1e-12)
        quantiles = [float(text) for text in parameter["quantiles"].values()]
        assert list(found.quantiles.values()) == pytest.approx(quantiles, rel=1e-11)
    sigma = marginals["sigma"]
    assert sigma.mean == pytest.approx(float(known["sigma_post_mean"]), rel=1e-12)
    assert sigma.sd == pytest.approx(float(known["sigma_post_sd"]), rel=1e-12)
    for p, text in known["sigma_q"].items():
        assert sigma.quantiles[float(p)] == pytest.approx(float(text), rel=1e-12)


def newton_mode(target):
    x = np.zeros(target.dimension)
    for _ in range(30):
        hessian = np.array([target.hessian_times(x, e) for e in np.eye(target.dimension)])
        x = x - np.linalg.solve(hessian, target.value_gradient(x)[1])
    return x, np.linalg.inv(-hessian)


@pytest.mark.parametrize("name", ["pima", "australian", "ripley"])
def test_logistic_modes(name):
    target, known = targets.logistic(name), checks.values(models.logistic_data(name)[2])
    mode, _ = newton_mode(target)
    # Ten and twelve published digits.
    np.testing.assert_allclose(mode, [float(v) for v in known["mode"]], rtol=0, atol=6e-10)
    assert target.value_gradient(mode)[0] == pytest.approx(float(known["logpost_at_mode_unnormalised"]), abs=6e-10)
    assert len(target.marginals) == known["D_with_intercept"]


def test_logistic_quadrature():
    """Evidence, means and sds of a 3-d posterior by the trapezoid rule, which converges exponentially here."""
    target = targets.logistic("ripley_linear")
    mode, covariance = newton_mode(target)
    root, step = np.linalg.cholesky(covariance), 0.6
    axis = step * np.arange(-17, 18)
    white = np.stack(np.meshgrid(axis, axis, axis, indexing="ij"), axis=-1).reshape(-1, 3)
    points = mode + white[np.linalg.norm(white, axis=1) < 10.2] @ root.T
    logs = np.array([target.value_gradient(x)[0] for x in points])
    weights = np.exp(logs - logs.max())
    evidence = np.log(weights.sum()) + logs.max() + np.log(step**3 * np.prod(np.diag(root)))
    known = checks.values("logit_ripley_synth")["result"]
    # The reference leaves out a mass of up to 1.3e-9 at the edge of its grid; this grid is converged to 1e-9.
    assert evidence == pytest.approx(float(known["b0"]["log_evidence_kernel"]), abs=4e-9)
    weights /= weights.sum()
    means = weights @ points
    sds = np.sqrt(weights @ (points - means) ** 2)
    np.testing.assert_allclose(means, [float(known[f"b{i}"]["mean"]) for i in range(3)], rtol=0, atol=4e-9)
    np.testing.assert_allclose(sds, [float(known[f"b{i}"]["sd"]) for i in range(3)], rtol=0, atol=4e-9)


def leapfrog_acceptance(target, draws, rng, step=1.0, steps=10):
    """min(1, exp(-energy change)) of one path from each draw, unit mass."""
    found = np.empty(len(draws))
    for i, start in enumerate(draws):
        x, v = start.copy(), rng.standard_normal(target.dimension)
        value, gradient = target.value_gradient(x)
        before = value - 0.5 * v @ v
        for _ in range(steps):
            v += 0.5 * step * gradient
            x += step * v
            value, gradient = target.value_gradient(x)
            v += 0.5 * step * gradient
        found[i] = min(1.0, np.exp(value - 0.5 * v @ v - before))
    return found


def test_published_leapfrog_acceptance():
    known = checks.values("sohl2014")["recomputed"]
    family = []
    for target, expected in [
        (targets.log_spaced_normal(2), known["sohl2014_2d_gauss"]["both_dims_Imhof"]),
        (targets.log_spaced_normal(100), known["sohl2014_100d_gauss"]["Imhof"]),
        (targets.rough_well(), known["sohl2014_2d_rough_well"]["computed_MC"].split()[0]),
    ]:
        rng = np.random.default_rng(2014)
        accepted = leapfrog_acceptance(target, target.exact_draws(3000, rng), rng)
        family.append(stat_checks.compare_independent_mean(accepted, float(expected), target.name))
    stat_checks.assert_all(family, FALSE_ALARM)


def call(callback, *arrays):
    """The return code of a LowLevelCallable, through nothing but its own pointer and context."""
    api = ctypes.pythonapi
    api.PyCapsule_GetPointer.restype = api.PyCapsule_GetContext.restype = ctypes.c_void_p
    api.PyCapsule_GetPointer.argtypes = [ctypes.py_object, ctypes.c_char_p]
    api.PyCapsule_GetContext.argtypes = [ctypes.py_object]
    capsule = tuple.__getitem__(callback, 0)
    pointer = api.PyCapsule_GetPointer(capsule, callback.signature.encode())
    kind = ctypes.CFUNCTYPE(ctypes.c_int, ctypes.c_size_t, *[ctypes.c_void_p] * 4)
    return kind(pointer)(len(arrays[0]), *(a.ctypes.data for a in arrays), api.PyCapsule_GetContext(capsule))


def test_callables_carry_signature_and_context_and_outlive_their_target():
    target = targets.independent_normal(MEANS, SDS)
    assert isinstance(target.density, LowLevelCallable)
    assert target.density.signature == "int (size_t, const double *, double *, double *, void *)"
    assert target.hessian_product.signature == "int (size_t, const double *, const double *, double *, void *)"
    x, p = MEANS + SDS, SDS.copy()
    (expected, slope), bend = target.value_gradient(x), target.hessian_times(x, p)
    density, product = target.density, target.hessian_product
    del target
    gc.collect()
    ballast = [np.full(21, 7.0) for _ in range(1000)]  # would reuse the context's memory, had it been freed
    value, gradient, out = np.zeros(1), np.zeros(10), np.zeros(10)
    assert call(density, x, value, gradient) == 0
    assert call(product, x, p, out) == 0
    assert value[0] == expected
    np.testing.assert_array_equal(gradient, slope)
    np.testing.assert_array_equal(out, bend)
    assert len(ballast) == 1000


@pytest.mark.parametrize("target", [targets.exponential([1.3, 0.2]), targets.half_normal([1.3, 0.2])])
def test_outside_the_support_nothing_is_written(target):
    x, value, gradient = np.array([0.4, -1e-300]), np.full(1, 5.0), np.full(2, 5.0)
    assert call(target.density, x, value, gradient) == 1
    assert call(target.hessian_product, x, np.ones(2), gradient) == 1
    assert value[0] == 5.0
    assert (gradient == 5.0).all()
    assert target.value_gradient(x)[0] == -np.inf
    assert np.isfinite(target.value_gradient(np.zeros(2))[0])


def test_centre_of_a_ring_has_no_gradient():
    assert call(targets.ring().density, np.zeros(2), np.zeros(1), np.zeros(2)) == 1


def test_failing_normal_fails_once_and_counts():
    target = targets.failing_normal(3, at=3, code=-4)
    x, value, gradient, product = np.ones(3), np.zeros(1), np.zeros(3), np.zeros(3)
    codes = [
        call(target.density, x, value, gradient),
        call(target.hessian_product, x, x, product),
        call(target.density, x, value, gradient),
        call(target.density, x, value, gradient),
    ]
    assert codes == [0, 0, -4, 0]
    assert target.context[0] == 4
    written = targets.failing_normal(3, at=1, value=-np.inf)
    assert written.value_gradient(x)[0] == -np.inf
    assert written.value_gradient(x)[0] == targets.standard_normal(3).value_gradient(x)[0]


def test_targets_travel_by_pickle():
    x = np.array([0.3, -1.2, 0.7])
    for target in (targets.funnel(3), targets.logistic("ripley_linear")):
        twin = pickle.loads(pickle.dumps(target))
        assert twin.value_gradient(x)[0] == target.value_gradient(x)[0]


def test_no_compiler_gives_one_clear_sentence(monkeypatch):
    monkeypatch.setattr(_build.shutil, "which", lambda name: None)
    with pytest.raises(RuntimeError, match="no C compiler was found: install one or set CC"):
        _build.compiler()


def test_wrong_shape_is_named():
    with pytest.raises(ValueError, match=r"points of shape \(3,\), not \(2,\)"):
        targets.funnel(3).value_gradient(np.zeros(2))
