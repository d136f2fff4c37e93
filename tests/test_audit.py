"""The audit's parts: differences, noise, forms of functions, far-out behaviour, the command, and what it prints."""

import math
import os
import subprocess
import sys
import textwrap

import audit_cases
import mpmath as mp
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

import fellwalk as fw
from fellwalk import errors
from fellwalk.audit_differences import differentiate, noise_of, reach_along

# ---- derivatives by differences ------------------------------------------------------------------------------------

FUNCTIONS = {
    "exp": (mp.exp, lambda x: math.exp(x)),
    "sin(5x)": (lambda x: mp.sin(5 * x), lambda x: math.sin(5 * x)),
    "log(1+x^2)": (lambda x: mp.log(1 + x * x), lambda x: math.log1p(x * x)),
    "-x^4": (lambda x: -(x**4), lambda x: -(x**4)),
    "1e6 - cosh": (lambda x: 10**6 - mp.cosh(x), lambda x: 1e6 - math.cosh(x)),
}


@pytest.mark.parametrize("name", FUNCTIONS)
@given(x=st.floats(-2.0, 2.0), scale=st.sampled_from([1e-8, 1e-3, 1.0, 1e5, 1e8]))
def test_the_error_estimate_covers_the_error(name, x, scale):
    """In every unit: the error is within the estimate, which is small beside 1/scale, the size of such derivatives."""
    exact_function, function = FUNCTIONS[name]

    def line(t):
        return function((x * scale + t) / scale)

    middle = line(0.0)
    noise = 2.0**-52 * abs(middle)
    reach = reach_along(line, middle, 1e-3 * scale, noise)
    found = differentiate(line, middle, reach, noise)
    exact = float(mp.diff(exact_function, mp.mpf(x))) / scale
    # (x scale + t)/scale rounds t at the size of x scale: eps |x| of noise in the argument, times the derivative
    argument = 2.0**-51 * abs(x) * abs(exact) / reach * scale * 2.0**9
    assert abs(found.value - exact) <= found.error + argument
    assert found.error <= 1e-6 * max(1.0, abs(exact * scale)) / scale


@given(size=st.sampled_from([1e-12, 1e-6, 1e-2]), seed=st.integers(0, 1000))
def test_noise_is_measured_under_a_smooth_function(size, seed):
    """Thirteen samples leave much to chance: of 100,000 sets of pure noise all but 2e-4 were between 0.097 and 2.96."""
    t = np.arange(13) * 1e-4
    samples = np.exp(np.sin(3 * t)) + size * np.random.default_rng(seed).standard_normal(13)
    assert 0.097 * size < noise_of(samples) < 2.96 * size


def test_noise_of_a_smooth_function_is_rounding():
    t = 0.3 + np.arange(13) * 1e-4
    assert noise_of(np.exp(np.sin(3 * t))) < 2.0**-50


# ---- forms ---------------------------------------------------------------------------------------------------------


def normal(x):
    return -0.5 * float(x @ x), -x


def texts(found, about):
    return [f.text for f in found.findings if f.about == about]


@pytest.mark.parametrize(("change", "words"), [
    (lambda v, g: (np.array([v]).reshape(1)[0:1][0], g.astype(np.float32)), "comes in float32"),
    (lambda v, g: (np.float32(v), g), "comes in float32"),
    (lambda v, g: (v, g.tolist()), "comes as a list"),
    (lambda v, g: (v, np.repeat(g, 2)[::2]), "not contiguous, and is copied"),
    (lambda v, g: (v, g.astype(np.longdouble)), "comes as "),
])
def test_types_and_layout(change, words):
    found = fw.audit(fw.Density(lambda x: change(*normal(x)), 3, start=[0.4, -0.8, 1.3]))
    assert words in " ".join(texts(found, "forms") + texts(found, "precision"))
    assert found.ok is (words != "comes in float32")


def test_rounding_between_calls_is_a_caution():
    calls = [0]

    def f(x):
        calls[0] += 1
        return -0.5 * float(x @ x) * (1 + (calls[0] % 2) * 2.0**-50), -x

    found = fw.audit(fw.Density(f, 2, start=[0.4, -0.8]))
    assert found.ok
    assert "differs by rounding" in " ".join(texts(found, "repeats"))


def test_the_value_alone_is_timed_and_compared():
    density = fw.Density(normal, 3, start=[0.4, -0.8, 1.3])
    found = fw.audit(density, value=lambda x: -0.5 * float(x @ x))
    assert found.ok
    assert "The log density alone takes" in str(found)
    wrong = fw.audit(density, value=lambda x: -0.5 * float(x @ x) + 1)
    assert [f.about for f in wrong.mistakes] == ["value"]


def test_seconds_are_those_of_the_function():
    import time

    def slow(x):
        time.sleep(0.003)
        return normal(x)

    found = fw.audit(fw.Density(slow, 1, start=[0.3], hessian_product=lambda x, p: -p))
    assert 0.003 <= found.seconds["function"] < 0.03
    assert 0.003 <= found.seconds["gradient"] < 0.03
    assert found.seconds["product"] < 0.003
    assert "milliseconds" in str(found)
    assert fw.audit(audit_cases.compiled_normal()).seconds["gradient"] < 1e-6


def test_calls_are_counted():
    density = fw.Density(normal, 3, start=[0.4, -0.8, 1.3])
    found = fw.audit(density)
    assert density.gradients == found.calls > 100


# ---- where it looks ------------------------------------------------------------------------------------------------


def test_the_point_may_be_given_in_natural_values():
    density = audit_cases.waiting_times(1.0)
    x = np.array([0.7, 2.2, 1.9])
    found = fw.audit(density, x)
    np.testing.assert_allclose(found.points[0][1], x, rtol=1e-14)
    assert {label for label, _ in found.points} >= {"the point given", "random point 1", "far out", "near lower bounds",
                                                    "near upper bounds"}
    near = dict(found.points)["near lower bounds"]
    assert np.all(near < 1e-3 * x)


def test_the_edge_of_a_support_is_found():
    found = fw.audit(audit_cases.cut_off(1.0), seed=5)
    assert any("outside" in line for line in found.behaviour)


def test_a_point_that_is_not_inside():
    density = audit_cases.cut_off(1.0)
    with pytest.raises(errors.StartError, match=r"the log density is -inf at the point to audit"):
        fw.audit(density, [-1.0, 1.0])
    with pytest.raises(errors.ShapeError, match=r"x must have shape \(2,\)"):
        fw.audit(density, [1.0])
    with pytest.raises(errors.StartError, match="rate"):
        fw.audit(audit_cases.waiting_times(1.0), [0.0, 1.0, 1.0])
    with pytest.raises(errors.ArgumentError, match=r"looks at a fellwalk\.Density"):
        fw.audit(normal)
    with pytest.raises(errors.ArgumentError, match="give x"):
        fw.audit(fw.Density(lambda x: (-np.inf, x), 2))

    def broken(x):
        raise KeyError("told to")

    with pytest.raises(KeyError, match="told to"):
        fw.audit(fw.Density(broken, 2, start=[0.0, 0.0]))


def test_a_density_without_start_is_looked_at_near_zero():
    found = fw.audit(fw.Density(normal, 3))
    assert found.ok
    assert np.abs(found.points[0][1]).max() < 1
    assert fw.audit(fw.Density(lambda v: (-float(v["a"]) + 0.0, {"a": np.array(-1.0)}), fw.Parameters(a=fw.positive()),
                               by_name=True)).ok


# ---- Hessian products ----------------------------------------------------------------------------------------------


@pytest.mark.parametrize(("factor", "words"), [(-1.0, "Its sign is wrong"), (2.0, "twice"), (0.5, "half")])
def test_products_that_are_off_by_a_factor(factor, words):
    density = audit_cases.winding(1.0)
    right = density.hessian_product
    density.hessian_product = lambda x, p: factor * right(x, p)
    found = fw.audit(density)
    assert words in found.mistakes[0].text
    assert found.mistakes[0].where in ("x[0]", "x[1]")


def test_products_that_raise_or_are_not_finite():
    density = audit_cases.winding(1.0)
    density.hessian_product = lambda x, p: 1 / 0
    assert "raises ZeroDivisionError" in fw.audit(density).mistakes[0].text
    density.hessian_product = lambda x, p: np.array([0.0, np.nan])
    assert "not finite in x[1]" in fw.audit(density).mistakes[0].text


# ---- printed, and as a command -------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", audit_cases.PLANTED)
def test_eighty_columns(name):
    assert max(map(len, str(fw.audit(audit_cases.PLANTED[name].make())).splitlines())) <= 80


MODEL = textwrap.dedent("""
    import fellwalk

    def make(factor):
        def f(x):
            return -0.5 * float(x @ x), -factor * x
        return fellwalk.Density(f, 2, start=[0.3, 0.4], names=["left", "right"])

    good, bad = make(1.0), make(2.0)
""")


@pytest.mark.parametrize(("name", "status"), [("good", 0), ("bad", 1), ("ugly", 1)])
def test_the_command(tmp_path, name, status):
    (tmp_path / "model.py").write_text(MODEL)
    done = subprocess.run([sys.executable, "-m", "fellwalk", "audit", f"model.py:{name}", "--start", "0.7,-1.1"],
                          cwd=tmp_path, env={**os.environ, "PYTHONWARNINGS": "error"}, capture_output=True, text=True)
    assert done.returncode == status, done.stderr
    if name == "good":
        assert "No mistake found." in done.stdout
    elif name == "bad":
        assert "twice" in done.stdout
        assert "1 mistake found." in done.stdout
    else:
        assert "ugly" in done.stderr


def test_the_command_runs_a_bad_model_only_when_told(tmp_path):
    (tmp_path / "model.py").write_text(MODEL)
    command = [sys.executable, "-m", "fellwalk", "run", "model.py:bad", "--record", "out.fell", "--keep", "10",
               "--settle", "20", "--chains", "1", "--seed", "1", "--progress", "off"]
    refused = subprocess.run(command, cwd=tmp_path, capture_output=True, text=True)
    assert refused.returncode == 1
    assert "The gradient of" in refused.stderr
    done = subprocess.run([*command, "--no-audit"], cwd=tmp_path, capture_output=True, text=True)
    assert done.returncode == 0, done.stderr
