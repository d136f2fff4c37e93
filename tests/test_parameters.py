"""Parameters by name: shapes, bounds, starts, forms of function, records, and what is said when something is off."""

import math
import pickle

import cloudpickle
import numpy as np
import pytest
from compiled_densities import DENSITY_SIGNATURE, PRODUCT_SIGNATURE, Plan, ctypes_function

import fellwalk as fw
from fellwalk import errors, testing

PARAMETERS = fw.Parameters(rate=fw.positive(), slope=fw.free(2), share=fw.shares(3), corr=fw.correlation(2))
START = {"rate": 0.7313, "slope": [-1.4142, 2.385], "share": [0.2, 0.5, 0.3], "corr": [[1, 0.25], [0.25, 1]]}
FLAT = np.array([0.7313, -1.4142, 2.385, 0.2, 0.5, 0.3, 0.25])


def by_name(v):
    value = 1.5 * math.log(v["rate"]) - v["rate"] - 0.5 * v["slope"] @ v["slope"] + np.log(v["share"]).sum()
    value += 0.7 * math.log(1 - v["corr"][1, 0] ** 2)
    r = v["corr"][1, 0]
    return float(value), {"rate": 1.5 / v["rate"] - 1, "slope": -v["slope"], "share": 1 / v["share"],
                          "corr": 0.7 * np.linalg.inv(np.array([[1, r], [r, 1]]))}


def flat(x):
    r = x[6]
    value = 1.5 * math.log(x[0]) - x[0] - 0.5 * x[1:3] @ x[1:3] + np.log(x[3:6]).sum() + 0.7 * math.log(1 - r * r)
    return float(value), np.array([1.5 / x[0] - 1, -x[1], -x[2], *(1 / x[3:6]), -1.4 * r / (1 - r * r)])


def flat_in_place(x, gradient):
    value, gradient[:] = flat(x)
    return value


def by_name_in_place(v, g):
    value, found = by_name(v)
    for name in found:
        g[name][...] = found[name]
    return value


def flat_product(x, p):
    r = x[6]
    out = np.array([-1.5 / x[0] ** 2, -1, -1, *(-1 / x[3:6] ** 2), -1.4 * (1 + r * r) / (1 - r * r) ** 2])
    return out * p


def by_name_product(v, p):
    r, s = v["corr"][1, 0], p["corr"][1, 0]
    assert np.array_equal(p["corr"], [[0, s], [s, 0]])
    cross = -0.7 * (1 + r * r) / (1 - r * r) ** 2 * s
    return {"rate": -1.5 / v["rate"] ** 2 * p["rate"], "slope": -p["slope"], "share": -p["share"] / v["share"] ** 2,
            "corr": np.array([[0, cross], [cross, 0]])}


FORMS = {
    "flat": lambda: fw.Density(flat, PARAMETERS, hessian_product=flat_product),
    "flat in place": lambda: fw.Density(flat_in_place, PARAMETERS, in_place=True, hessian_product=flat_product),
    "by name": lambda: fw.Density(by_name, PARAMETERS, by_name=True, hessian_product=by_name_product),
    "by name in place": lambda: fw.Density(by_name_in_place, PARAMETERS, by_name=True, in_place=True,
                                           hessian_product=by_name_product),
}


# ---- names and shapes ----------------------------------------------------------------------------------------------


def test_names_sizes_and_places():
    assert PARAMETERS.names == ["rate", "slope[0]", "slope[1]", "share[0]", "share[1]", "share[2]", "corr[1,0]"]
    assert PARAMETERS.coordinates == ["rate", "slope[0]", "slope[1]", "share, free coordinate 0",
                                      "share, free coordinate 1", "corr, free coordinate 0"]
    assert (PARAMETERS.size, PARAMETERS.dimension) == (7, 6)
    assert PARAMETERS.slices()["share"] == slice(3, 6)
    assert PARAMETERS.slices(free=True)["corr"] == slice(5, 6)
    np.testing.assert_array_equal(PARAMETERS.join(START), FLAT)
    split = PARAMETERS.split(np.stack([FLAT, FLAT]))
    assert {name: v.shape for name, v in split.items()} == {"rate": (2,), "slope": (2, 2), "share": (2, 3),
                                                            "corr": (2, 2, 2)}
    np.testing.assert_array_equal(split["corr"][1], START["corr"])


def test_arrays_of_every_kind():
    p = fw.Parameters(a=fw.positive((2, 3), above=[0, 1, 2], below=[[5], [6]]), b=fw.shares(2, shape=3),
                      c=fw.increasing(2, (2, 2)), d=fw.correlation(3, 2),
                      e=fw.between([-np.inf, 0, -1], [0, np.inf, 1]))
    assert (p.size, p.dimension) == (6 + 6 + 8 + 6 + 3, 6 + 3 + 8 + 6 + 3)
    x = p.natural(np.random.default_rng(1).standard_normal((7, p.dimension)))
    v = p.split(x)
    assert [v[name].shape for name in "abcde"] == [(7, 2, 3), (7, 3, 2), (7, 2, 2, 2), (7, 2, 3, 3), (7, 3)]
    assert np.all((v["a"] > [0, 1, 2]) & (v["a"] < [[5], [6]]))
    np.testing.assert_allclose(v["b"].sum(axis=-1), 1)
    assert np.all(np.diff(v["c"], axis=-1) > 0)
    assert np.linalg.eigvalsh(v["d"]).min() > 0
    assert np.all((v["e"] > [-np.inf, 0, -1]) & (v["e"] < [0, np.inf, 1]))
    for k in range(7):
        np.testing.assert_array_equal(p.join({name: value[k] for name, value in v.items()}), x[k])
    np.testing.assert_allclose(p.natural(p.free(x)), x, rtol=1e-12)


def test_names_from_a_mapping_may_have_spaces():
    p = fw.Parameters({"mean gain": fw.free()}, rate=fw.positive())
    assert p.names == ["mean gain", "rate"]


def test_kept_as_json_and_pickled():
    p = fw.Parameters(a=fw.between([0.1, -np.inf], 2.0), b=fw.increasing(3, above=-1), c=fw.correlation(3, 2),
                      d=fw.shares(4))
    again = fw.Parameters.from_json(p.to_json())
    assert again == p == pickle.loads(pickle.dumps(p))
    assert again != fw.Parameters(a=fw.free(2))
    assert repr(p).startswith("<Parameters: a (between of shape (2,))")
    y = np.random.default_rng(2).standard_normal(p.dimension)
    np.testing.assert_array_equal(again.natural(y), p.natural(y))


# ---- every form of function ----------------------------------------------------------------------------------------


@pytest.mark.parametrize("form", FORMS)
def test_every_form_sees_natural_values(form):
    density = FORMS[form]()
    y = PARAMETERS.free(FLAT)
    value, gradient = density(y)
    natural_value, slope = flat(FLAT)
    assert value == pytest.approx(natural_value + float(PARAMETERS.log_jacobian(y)), rel=1e-14)
    np.testing.assert_allclose(gradient, PARAMETERS.maps().pull(y, slope, True), rtol=1e-13)
    assert density.names == PARAMETERS.names
    assert (density.dimension, density.natural_size) == (6, 7)
    p, q = np.random.default_rng(3).standard_normal((2, 6))
    testing.check_hessian_product(density, y, p, q, rtol=1e-7)


@pytest.mark.parametrize("form", FORMS)
def test_every_form_gives_the_same_draws(form):
    runs = [fw.run(FORMS[f](), START, keep=20, chains=2, seed=5, settle=30, progress="off") for f in (form, "flat")]
    # the same numbers up to rounding, and a chain of 20 draws is too short for rounding to grow far
    np.testing.assert_allclose(runs[0].draws, runs[1].draws, rtol=1e-4, atol=1e-6)
    assert runs[0]["corr"].shape == (2, 20, 2, 2)
    assert runs[0]["rate"].shape == runs[0]["share[1]"].shape == (2, 20)
    assert runs[0].free_draws.shape == runs[0].gradients.shape == (2, 20, 6)


def test_product_after_a_density_elsewhere():
    """The natural gradient that a product needs is asked for again, and counted, if the last density was elsewhere."""
    density = FORMS["flat"]()
    target, y, other = density.target(), PARAMETERS.free(FLAT), PARAMETERS.free(FLAT) + 0.3
    out, again, slope, p = np.empty(6), np.empty(6), np.empty(6), np.ones(6)
    target.evaluate(y, slope)
    target.multiply(y, p, out)
    assert target.extra == 0
    target.evaluate(other, slope)
    target.multiply(y, p, again)
    assert target.extra == 1
    np.testing.assert_array_equal(again, out)


def test_lagrangian_motion_with_products_keeps_its_energy():
    """Energy error of a short path falls with the square of the step: value, gradient and product belong together."""
    density = FORMS["flat"]()
    y, v = PARAMETERS.free(FLAT), np.random.default_rng(4).standard_normal(6)
    ratios = [abs(fw.integrate(density, y, v, motion=fw.Lagrangian(curvature="product"), step_size=0.02 / 2**k,
                               steps=10 * 2**k, beta=0.5).log_ratio) for k in range(3)]
    assert 3.5 < ratios[0] / ratios[1] < 4.5
    assert 3.5 < ratios[1] / ratios[2] < 4.5


@pytest.mark.parametrize("form", ["pair", "in place", "compiled"])
def test_all_free_is_the_plain_density(form):
    """Maps that change nothing: the bits of the unmapped density, every failure code included."""
    from compiled_densities import Curved

    plain = Curved(form).density
    if form == "compiled":
        plan = Plan()
        mapped = fw.Density(ctypes_function("curved", plan, DENSITY_SIGNATURE), fw.Parameters(x=fw.free(2)),
                            hessian_product=ctypes_function("curved_product", plan, PRODUCT_SIGNATURE))
    else:
        mapped = fw.Density(plain.function, fw.Parameters(x=fw.free(2)), in_place=form == "in place",
                            hessian_product=plain.hessian_product)
    runs = [fw.Chain(d, [0.3, 0.4], seed=6, step_size=0.4, motion=fw.Lagrangian(curvature="product")).advance(40)
            for d in (plain, mapped)]
    np.testing.assert_array_equal(runs[0].draws, runs[1].draws)
    np.testing.assert_array_equal(runs[0].facts, runs[1].facts)
    assert mapped.compiled is plain.compiled


@pytest.mark.parametrize("act", ["raise", "outside", "zero", "nan", "bad gradient", "infinite", "unwritten"])
def test_failures_come_through_the_maps(act):
    from compiled_densities import ACTS

    codes = []
    for parameters in (2, fw.Parameters(a=fw.free(), b=fw.positive())):
        plan = Plan()
        density = fw.Density(ctypes_function("curved", plan, DENSITY_SIGNATURE), parameters)
        chain = fw.Chain(density, [0.3, 0.4], seed=7, step_size=0.3)
        plan.fail_at, plan.act = plan.calls + 4, ACTS.index(act)
        block = chain.block(1)
        codes.append((type(block.error).__name__, block.facts["failure"].tolist()))
    assert codes[0] == codes[1]
    assert codes[0] != ("NoneType", [0])


def test_hessian_product_that_fails_comes_through_the_maps():
    def broken(x, p):
        raise KeyError("told to")

    density = fw.Density(flat, PARAMETERS, hessian_product=broken)
    with pytest.raises(KeyError, match="told to"):
        density.product(PARAMETERS.free(FLAT), np.ones(6))


@pytest.mark.parametrize("form", FORMS)
def test_densities_with_parameters_travel(form):
    density = FORMS[form]()
    again = cloudpickle.loads(cloudpickle.dumps(density))
    y = PARAMETERS.free(FLAT)
    assert again(y)[0] == density(y)[0]
    assert again.parameters == PARAMETERS


# ---- starts --------------------------------------------------------------------------------------------------------


def test_starts_in_every_form():
    density = FORMS["flat"]()
    wanted = PARAMETERS.free(FLAT)
    for given in (FLAT, START, FLAT.tolist()):
        np.testing.assert_array_equal(fw.Chain(density, given, step_size=0.1).position, wanted)
    many = [START, {**START, "rate": 3.0}]
    runs = [fw.run(density, s, keep=4, chains=2, settle=5, seed=1, progress="off")
            for s in (many, np.array([PARAMETERS.join(m) for m in many]))]
    np.testing.assert_array_equal(runs[0].draws, runs[1].draws)
    drawn = fw.run(density, lambda rng: {**START, "rate": rng.gamma(2.0)}, keep=4, chains=2, settle=5, seed=1,
                   progress="off")
    assert not np.array_equal(drawn.draws[0], drawn.draws[1])
    assert fw.run(density, keep=4, chains=2, settle=5, seed=1, progress="off").draws.shape == (2, 4, 7)


@pytest.mark.parametrize(("name", "value", "words"), [
    ("rate", 0.0, r"rate is 0; it must be a finite number above 0"),
    ("rate", -1.0, "rate is -1; it must be a finite number above 0"),
    ("rate", np.inf, "rate is inf; it must be a finite number below inf"),
    ("rate", np.nan, "rate is nan"),
    ("slope", [0.0, np.inf], r"slope\[1\] is inf"),
    ("share", [0.0, 0.5, 0.5], r"share\[0\] is 0; it must be a finite number above 0"),
    ("share", [0.2, 0.5, 0.4], "must sum to one; they sum to 1.1"),
    ("corr", [[1, 1.0], [1.0, 1]], r"corr\[1,0\] is 1"),
    ("corr", [[1, 0.2], [0.3, 1]], "must be a correlation matrix"),
])
def test_starts_on_or_outside_a_bound(name, value, words):
    with pytest.raises(errors.StartError, match=words):
        fw.run(FORMS["flat"](), {**START, name: value}, progress="off")
    with pytest.raises(errors.StartError, match=words):
        fw.Density(flat, PARAMETERS, start={**START, name: value})


def test_other_impossible_starts():
    p = fw.Parameters(cut=fw.increasing(3), corr=fw.correlation(3), angle=fw.between(0.0, 2.5))
    x = {"cut": [1.0, 2.0, 3.0], "corr": np.eye(3), "angle": 1.0}
    assert np.all(np.isfinite(p.free(x)))
    with pytest.raises(errors.StartError, match="must increase"):
        p.free({**x, "cut": [1.0, 1.0, 3.0]})
    with pytest.raises(errors.StartError, match="not a positive definite"):
        p.free({**x, "corr": [[1, 0.9, -0.9], [0.9, 1, 0.9], [-0.9, 0.9, 1]]})
    with pytest.raises(errors.StartError, match=r"angle is 2\.5; it must be a finite number below 2\.5, not on the"):
        p.free({**x, "angle": 2.5})
    with pytest.raises(errors.ShapeError, match=r"'cut' must have shape \(3,\)"):
        p.free({**x, "cut": [1.0, 2.0]})
    with pytest.raises(errors.ShapeError, match="missing or unknown: angel, angle"):
        p.free({"cut": x["cut"], "corr": x["corr"], "angel": 1.0})
    with pytest.raises(errors.ShapeError, match=r"shape \(\.\.\., 7\)"):
        p.free([1.0, 2.0])


# ---- wrong arguments -----------------------------------------------------------------------------------------------


@pytest.mark.parametrize(("make", "words"), [
    (lambda: fw.between(2.0, 2.0), "lower bound must be below the upper one; they are 2.0 and 2.0"),
    (lambda: fw.between([0, 3], [1, 2]), r"at \[1\] they are 3.0 and 2.0"),
    (lambda: fw.between(np.nan, 1.0), "lower bound must be below"),
    (lambda: fw.between("a", 1.0), "must be numbers"),
    (lambda: fw.between([0, 0], [1, 1], shape=3), "that fit the shape"),
    (lambda: fw.positive(shape=-1), "the shape of positive must be"),
    (lambda: fw.free(shape=2.5), "must be a whole number or a tuple"),
    (lambda: fw.positive(above=3, below=1), "lower bound must be below"),
    (lambda: fw.shares(1), "number of shares"),
    (lambda: fw.increasing(0), "number of increasing values"),
    (lambda: fw.increasing(2, above=1, below=1), "must be less than below="),
    (lambda: fw.increasing(2, above=np.nan), "not NaN"),
    (lambda: fw.correlation(1), "rows of a correlation matrix"),
    (lambda: fw.Parameters(), "at least one parameter"),
    (lambda: fw.Parameters(a=3), "'a' must be made by"),
    (lambda: fw.Parameters({1: fw.free()}), "must be text"),
    (lambda: fw.Parameters({"a": fw.free(2), "a[1]": fw.free()}), r"would be named 'a\[1\]'"),
    (lambda: fw.Density(flat, PARAMETERS, names=["a"] * 7), "leave names= out"),
    (lambda: fw.Density(flat, 7, by_name=True), "needs Parameters"),
    (lambda: fw.Density(ctypes_function("plain", None, DENSITY_SIGNATURE), PARAMETERS, by_name=True),
     "Python functions"),
])
def test_wrong_arguments(make, words):
    with pytest.raises(errors.ArgumentError, match=words):
        make()


@pytest.mark.parametrize(("function", "words"), [
    (lambda v: 1.0, "dict of gradients by name"),
    (lambda v: (1.0, np.zeros(7)), "must be a dict with one array for each parameter"),
    (lambda v: (1.0, {"rate": 1.0}), "missing or unknown: corr, share, slope"),
    (lambda v: (1.0, {**by_name(v)[1], "slope": np.zeros(3)}), r"'slope' must have shape \(2,\)"),
])
def test_what_a_function_by_name_gives(function, words):
    with pytest.raises(errors.DensityError, match=words):
        fw.Density(function, PARAMETERS, by_name=True)(np.zeros(6))


def test_unknown_name_in_a_result():
    result = fw.run(FORMS["flat"](), START, keep=4, chains=1, settle=5, seed=1, progress="off")
    with pytest.raises(errors.ArgumentError, match="no parameter 'rat'; there are rate, slope, share, corr"):
        result["rat"]
    plain = fw.run(fw.Density(lambda x: (-0.5 * x @ x, -x), 2, names=["a", "b"]), [0.1, 0.2], keep=4, chains=1,
                   settle=5, seed=1, progress="off")
    np.testing.assert_array_equal(plain["b"], plain.draws[..., 1])
    assert plain.draws is plain.free_draws


# ---- records -------------------------------------------------------------------------------------------------------


def test_a_record_knows_its_parameters(tmp_path):
    path = tmp_path / "natural.fell"
    density = FORMS["by name"]()
    first = fw.run(density, START, keep=30, chains=2, settle=20, seed=2, record=path, progress="off")
    loaded = fw.load(path)
    np.testing.assert_array_equal(loaded.draws, first.draws)
    np.testing.assert_array_equal(loaded["share"], first["share"])
    more = fw.resume(path, density, keep=45, progress="off")
    np.testing.assert_array_equal(more["share"][:, :30], first["share"])
    straight = fw.run(density, START, keep=45, chains=2, settle=20, seed=2, progress="off")
    np.testing.assert_array_equal(more.draws, straight.draws)
    assert "share[0]" in str(more)
    other = fw.Parameters({**PARAMETERS.kinds, "rate": fw.positive(below=50.0)})
    with pytest.raises(errors.OtherModelError, match="parameters of this density differ"):
        fw.resume(path, fw.Density(flat, other), keep=50, progress="off")
