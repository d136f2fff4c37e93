"""`integrate`: steps that fail, exceptions on the way, traces, and arguments it refuses."""

import numpy as np
import pytest
import targets
from walks import KINDS, density_of, place

import fellwalk as fw
from fellwalk import errors

NORMAL = targets.standard_normal(2)


def go(density, x, v, kind="leapfrog", step=0.5, steps=4, beta=1.0, **named):
    return fw.integrate(density, x, v, motion=KINDS[kind], step_size=step, steps=steps, beta=beta, **named)


def normal(x):
    return -0.5 * x @ x, -x


def beyond(limit, answer):
    """A standard normal that gives `answer(x)` where x[0] > limit."""
    return lambda x: answer(x) if x[0] > limit else normal(x)


@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize("step", [0.3, -0.3])
def test_a_trace_holds_every_state_of_the_path(kind, step):
    here = place("ring")
    whole = here.go(kind, step=step, steps=5, trace=True)
    trace = whole.trace
    assert {name: rows.shape for name, rows in trace.items()} == {
        "position": (6, 2), "velocity": (6, 2), "log_density": (6,), "energy": (6,), "log_jacobian": (6,)
    }
    assert np.array_equal(trace["position"][0], here.x)
    np.testing.assert_allclose(trace["velocity"][0], here.v, rtol=4e-16)  # whitened and back
    assert trace["log_jacobian"][0] == 0.0
    for n in range(6):
        part = here.go(kind, step=step, steps=n)
        assert part.trace is None
        assert part.steps == n
        assert part.status == 0
        assert part.sentence == "fine"
        assert np.array_equal(part.position, trace["position"][n])
        assert np.array_equal(part.velocity, trace["velocity"][n])
        assert (part.log_density, part.log_jacobian) == (trace["log_density"][n], trace["log_jacobian"][n])
        assert part.log_ratio == trace["energy"][0] - trace["energy"][n] + trace["log_jacobian"][n]
    assert (whole.gradients, whole.products) == (part.gradients, part.products)


def test_the_given_arrays_stay_as_they_were():
    x, v = np.array([0.3, 0.4]), np.array([1.0, -2.0])
    found = go(density_of(NORMAL), x, v)
    assert np.array_equal(x, [0.3, 0.4])
    assert np.array_equal(v, [1.0, -2.0])
    assert not np.shares_memory(found.position, x)


ENDINGS = {
    1: (density_of(targets.half_normal([1.0, 1.0])), [1.2, 0.5], [-0.9, 0.2], "leapfrog"),
    2: (fw.Density(beyond(1.0, lambda x: (-np.inf, x)), 2), [0.0, 0.0], [1.0, 0.2], "leapfrog"),
    3: (fw.Density(beyond(1.0, lambda x: (np.nan, x)), 2), [0.0, 0.0], [1.0, 0.2], "leapfrog"),
    4: (fw.Density(beyond(1.0, lambda x: (0.0, np.array([np.inf, 0.0]))), 2), [0.0, 0.0], [1.0, 0.2], "leapfrog"),
    5: (
        fw.Density(normal, 2, hessian_product=lambda x, p: np.nan * p if x[0] > 1.0 else -p),
        [0.0, 0.1], [2.0, 0.2], "split, product",
    ),
    8: (
        fw.Density(beyond(1.0, lambda x: (-1.797e308, np.array([-1.3e154, 0.0]))), 2),
        [0.0, 0.0], [1.0, 0.2], "leapfrog",
    ),
}


@pytest.mark.parametrize("code", ENDINGS)
def test_a_step_that_fails_ends_the_path_with_its_code(code):
    density, x, v, kind = ENDINGS[code]
    whole = go(density, x, v, kind, steps=9, beta=0.1, trace=True)
    assert whole.status == code
    assert whole.sentence == fw.facts.SENTENCES[code]
    assert 0 < whole.steps < 9
    assert np.array_equal(whole.position, x)
    assert np.array_equal(whole.velocity, v)
    assert np.isnan(whole.log_ratio)
    # the steps before the failing one are there, and the same as when nobody asked for more
    before = go(density, x, v, kind, steps=whole.steps, beta=0.1)
    assert before.status == 0
    assert len(whole.trace["energy"]) == whole.steps + 1
    assert np.array_equal(whole.trace["position"][-1], before.position)
    assert np.array_equal(whole.trace["velocity"][-1], before.velocity)


def test_a_difference_that_leaves_the_support_is_a_product_that_is_not_available():
    """At the edge itself the probe of the gradient difference steps outside."""
    density = density_of(targets.half_normal([1.0, 1.0]))
    found = go(density, [0.0, 0.5], [-1.0, 0.2], "split, difference", step=0.01, steps=1)
    assert found.status == 5


@pytest.mark.parametrize("kind", ["split, surrogate", "semi-explicit, surrogate"])
def test_steps_longer_than_the_flow_meet_its_pole_in_both_directions(kind):
    """Uphill at great speed: the exact Christoffel flow of the surrogate reaches infinity in finite time."""
    density = density_of(targets.student(1, 5.0))
    for step, v in ((0.5, [-30.0]), (-0.5, [30.0])):
        found = go(density, [2.0], v, kind, step=step, steps=1)
        assert found.status == 6, found.sentence
        assert found.steps == 0
        assert np.array_equal(found.position, [2.0])
    assert go(density, [2.0], [-30.0], kind, step=1e-3, steps=1).status == 0


def test_a_flow_too_stiff_to_come_back_is_refused():
    """v^T H v and g^T H g of opposite signs: the velocity grows like exp(rate t), and its way back is lost."""
    def saddle(x):
        return 0.5 * (x[0] ** 2 - x[1] ** 2), np.array([x[0], -x[1]])

    density = fw.Density(saddle, 2, hessian_product=lambda x, p: p * [1.0, -1.0])
    found = go(density, [0.0, 1.0], [40.0, 0.0], "split, product", step=0.5, steps=1)
    assert found.status == 7, found.sentence
    assert go(density, [0.0, 1.0], [40.0, 0.0], "split, product", step=0.05, steps=1).status == 0


def test_a_start_without_a_finite_density_is_a_failure_before_the_first_step():
    found = go(density_of(targets.half_normal([1.0, 1.0])), [-0.5, 0.5], [1.0, 0.2], trace=True)
    assert (found.status, found.steps, found.gradients) == (1, 0, 1)
    assert all(np.isnan(rows).all() for rows in found.trace.values())


# ---- what stops the call --------------------------------------------------------------------------------------------


@pytest.mark.parametrize("kind", ["leapfrog", "split, surrogate", "semi-explicit, difference"])
@pytest.mark.parametrize("nth", [1, 2, 4])
def test_an_exception_comes_out_as_the_same_object(kind, nth):
    calls, error = [], ZeroDivisionError("mine")

    def value_gradient(x):
        calls.append(x[0])
        if len(calls) == nth:
            raise error
        return normal(x)

    with pytest.raises(ZeroDivisionError) as caught:
        go(fw.Density(value_gradient, 2), [0.1, 0.2], [1.0, 0.0], kind)
    assert caught.value is error
    assert caught.traceback[-1].name == "value_gradient"
    assert len(calls) == nth


def test_plus_infinity_is_an_error():
    with pytest.raises(errors.InfiniteDensityError, match="after 1 of 4 steps"):
        go(fw.Density(beyond(0.6, lambda x: (np.inf, x)), 2), [0.0, 0.0], [1.0, 0.0])


# ---- arguments ------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("change", "kind", "message"),
    [
        ({"x": [0.0]}, errors.ShapeError, "x must have shape"),
        ({"v": np.zeros((2, 1))}, errors.ShapeError, "v must have shape"),
        ({"x": ["a", "b"]}, errors.ShapeError, "x must be an array of real numbers"),
        ({"v": np.array([1j, 0.0])}, errors.ShapeError, "v must be an array of real numbers"),
        ({"step_size": 0.0}, errors.ArgumentError, "step_size"),
        ({"step_size": np.nan}, errors.ArgumentError, "step_size"),
        ({"step_size": -np.inf}, errors.ArgumentError, "step_size"),
        ({"step_size": "small"}, errors.ArgumentError, "step_size"),
        ({"step_size": None}, errors.ArgumentError, "step_size"),
        ({"steps": -1}, errors.ArgumentError, "steps"),
        ({"steps": 1.5}, errors.ArgumentError, "steps"),
        ({"steps": True}, errors.ArgumentError, "steps"),
        ({"beta": -0.1}, errors.ArgumentError, "beta"),
        ({"beta": np.nan}, errors.ArgumentError, "beta"),
        ({"scale": [1.0, 0.0]}, errors.ArgumentError, "scale"),
        ({"scale": [1.0, -1.0]}, errors.ArgumentError, "scale"),
        ({"scale": [np.inf, 1.0]}, errors.ArgumentError, "scale"),
        ({"scale": 1.0}, errors.ShapeError, "scale must have shape"),
        ({"motion": "leapfrog"}, errors.ArgumentError, "motion must be one of"),
        ({"motion": fw.Lagrangian(curvature="product")}, errors.ArgumentError, "hessian_product"),
    ],
)
def test_what_cannot_be_meant_is_said_in_words(change, kind, message):
    named = {"x": [0.1, 0.2], "v": [1.0, 0.0], "step_size": 0.1, "steps": 2, **change}
    with pytest.raises(kind, match=message):
        fw.integrate(fw.Density(normal, 2), **named)
