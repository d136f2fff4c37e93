"""Every call really made is counted, and what ends a call is said with the position the function was called at."""

import numpy as np
import pytest
from compiled_densities import DENSITY_SIGNATURE, Curved, ctypes_function

import fellwalk as fw
from fellwalk import errors

X = (0.731, -0.468, 1.117)
FORMS = ["pair", "in place", "compiled"]


def normal(x):
    return -0.5 * float(x @ x), -x


@pytest.mark.parametrize("form", FORMS)
@pytest.mark.parametrize("motion", [fw.Leapfrog(), fw.Lagrangian(curvature="product")])
def test_calls_of_abandoned_transitions_are_counted(form, motion):
    user = Curved(form, 3)
    chain = fw.Chain(user.density, X, motion=motion, path=fw.Jittered(8), seed=5, step_size=0.3, beta=0.4)
    before = chain.counts
    for n in (3, 5, 1):
        user.fail(n, "raise")
        assert chain.block(4).error is not None
        assert user.density.gradients + user.density.products == user.plan.calls
    user.fail(0, "raise")
    chain.advance(4)
    assert user.density.gradients + user.density.products == user.plan.calls
    made = chain.counts["gradients"] + chain.counts["products"]
    assert before["gradients"] + before["products"] < made < user.plan.calls  # the chain counts what stands


@pytest.mark.parametrize("form", FORMS)
def test_a_call_that_raises_is_counted(form):
    user = Curved(form, 3)
    for call in (
        lambda: fw.Chain(user.density, X),
        lambda: user.density(X),
        lambda: user.density.product(X, X),
        lambda: fw.integrate(user.density, X, X, step_size=0.1, steps=2),
    ):
        user.fail(1, "raise")
        before = user.plan.calls
        with pytest.raises(Exception, match=r"told to|asked to stop|returned -7"):
            call()
        assert user.plan.calls == before + 1
        assert user.density.gradients + user.density.products == user.plan.calls


def test_calls_of_the_users_function_are_counted_behind_bounds():
    """What counts is the function itself, which is not called everywhere."""
    seen = []

    def exponential(x):
        seen.append(x.copy())
        return -float(x[0]), [-1.0]

    density = fw.Density(exponential, fw.Parameters(rate=fw.positive()))
    chain = fw.Chain(density, [0.7], seed=3, step_size=0.5)
    chain.advance(20)
    density([0.3])
    density([800.0])
    density([-800.0])
    assert density.gradients == len(seen)


@pytest.mark.parametrize(("form", "act", "kind", "said"), [
    ("compiled", "raise", errors.CallbackStop, "the compiled function returned a negative code"),
    ("compiled", "unwritten", errors.NotWrittenError, "the compiled function returned 0"),
    ("in place", "unwritten", errors.NotWrittenError, "the in-place function returned a log density"),
    ("compiled", "infinite", errors.InfiniteDensityError, "the log density is plus infinity"),
    ("pair", "infinite", errors.InfiniteDensityError, "the log density is plus infinity"),
])  # fmt: skip
def test_what_ends_a_call_is_said_with_its_position(form, act, kind, said):
    user = Curved(form, 3)
    chain = fw.Chain(user.density, X, path=fw.Jittered(8), seed=5, step_size=0.3)
    runs = [(4, lambda: chain.advance(9)),
            (3, lambda: fw.integrate(user.density, X, X, step_size=0.1, steps=5)),
            (1, lambda: fw.Chain(user.density, X))]  # fmt: skip
    if act == "unwritten":
        runs.append((1, lambda: user.density(X)))
    for n, run in runs:
        user.fail(n, act)
        with pytest.raises(kind, match=said) as caught:
            run()
        where = ", ".join(f"{value:.6g}" for value in user.at)
        assert f"[{where}]" in str(caught.value)
        assert "\n" not in str(caught.value)


def test_positions_behind_bounds_are_natural_values():
    calls = []

    def function(x):
        calls.append(float(x[0]))
        return (np.inf if len(calls) > 3 else -float(x[0])), [-1.0]

    density = fw.Density(function, fw.Parameters(rate=fw.positive()))
    with pytest.raises(errors.InfiniteDensityError) as caught:
        fw.Chain(density, [0.7], step_size=0.4).advance(9)
    assert f"[{calls[-1]:.6g}]" in str(caught.value)


def test_a_call_by_hand_tells_computed_nan_from_nothing_written():
    compiled = fw.Density(ctypes_function("plain", None, DENSITY_SIGNATURE), 3)
    assert np.isfinite(compiled(X)[0])
    value, gradient = fw.Density(lambda x: (np.nan, x), 3)(X)
    assert np.isnan(value)
    np.testing.assert_array_equal(fw.Density(lambda x: (1.0, x * np.nan), 3)(X)[1], [np.nan] * 3)
    assert gradient.shape == (3,)
