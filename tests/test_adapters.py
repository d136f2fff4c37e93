"""Densities of JAX, PyTorch and Numba functions against closed forms, in double precision on the CPU.

The tests of a library skip where it is missing. Tolerance 1e-12: some tens of roundings of sums of a few terms.
"""

import pickle
import subprocess
import sys
import textwrap

import cloudpickle
import numpy as np
import pytest

import fellwalk as fw
from fellwalk import errors, testing

D = 4
KNOWN = testing.funnel(D, 1.5)
POINTS = KNOWN.draws(20, np.random.default_rng(17))


# ---- the same funnel, written for each library ---------------------------------------------------------------------


def for_jax():
    jax = pytest.importorskip("jax")
    import jax.numpy as jnp

    jax.config.update("jax_enable_x64", True)

    def f(x):
        squares = jnp.sum(x[1:] ** 2) * jnp.exp(-x[0])
        return -0.5 * (x[0] / 1.5) ** 2 - 0.5 * squares - 0.5 * (x.size - 1) * x[0]

    return f


def for_torch():
    pytest.importorskip("torch")

    def f(x):
        squares = (x[1:] ** 2).sum() * (-x[0]).exp()
        return -0.5 * (x[0] / 1.5) ** 2 - 0.5 * squares - 0.5 * (x.numel() - 1) * x[0]

    return f


def filled(x, gradient):
    e, squares = np.exp(-x[0]), 0.0
    for i in range(1, x.size):
        squares += x[i] * x[i] * e
        gradient[i] = -x[i] * e
    gradient[0] = -x[0] / 2.25 + 0.5 * squares - 0.5 * (x.size - 1)
    return -0.5 * x[0] * x[0] / 2.25 - 0.5 * squares - 0.5 * (x.size - 1) * x[0]


def product_filled(x, p, out):
    e = np.exp(-x[0])
    out[0] = -p[0] / 2.25
    for i in range(1, x.size):
        out[0] += e * x[i] * (p[i] - 0.5 * x[i] * p[0])
        out[i] = e * (x[i] * p[0] - p[i])


def for_numba_in_place():
    pytest.importorskip("numba")
    return fw.from_numba(filled, D, in_place=True, hessian_product=product_filled)


def for_numba():
    numba = pytest.importorskip("numba")
    fill, fill_product = numba.njit(filled), numba.njit(product_filled)

    @numba.njit
    def pair(x):
        gradient = np.empty(x.size)
        return fill(x, gradient), gradient

    def product(x, p):
        out = np.empty(x.size)
        fill_product(x, p, out)
        return out

    return fw.from_numba(pair, D, hessian_product=product)


MAKERS = {
    "jax": lambda: fw.from_jax(for_jax(), D),
    "torch": lambda: fw.from_torch(for_torch(), D),
    "numba": for_numba,
    "numba in place": for_numba_in_place,
}
MADE = {}


@pytest.fixture(params=MAKERS)
def density(request):
    if request.param not in MADE:
        MADE[request.param] = MAKERS[request.param]()
    return MADE[request.param]


def test_value_gradient_and_product(density):
    rng = np.random.default_rng(3)
    for x in POINTS:
        value, gradient = density(x)
        expected, slope = KNOWN.call(x)
        assert value == pytest.approx(expected, rel=1e-12)
        np.testing.assert_allclose(gradient, slope, rtol=1e-12, atol=1e-12 * np.abs(slope).max())
        p = rng.standard_normal(D)
        right = KNOWN.multiply(x, p)
        np.testing.assert_allclose(density.product(x, p), right, rtol=1e-12, atol=1e-12 * np.abs(right).max())


def test_the_checks_and_the_audit_pass(density):
    for x in POINTS[:3]:
        testing.check_density(density, x)
        testing.check_hessian_product(density, x, *np.random.default_rng(4).standard_normal((2, D)))
    found = fw.audit(density, POINTS[0])
    assert found.ok, str(found)


def test_the_draws_are_those_of_the_same_function_in_numpy(density):
    """Up to rounding, which a few short paths do not let grow far."""
    plain = KNOWN.density()
    for motion in (fw.Leapfrog(), fw.Lagrangian(curvature="product")):
        chains = [fw.Chain(f, POINTS[0], motion=motion, path=fw.Jittered(4), seed=5, step_size=0.1)
                  for f in (density, plain)]
        found, right = (chain.advance(10).draws for chain in chains)
        np.testing.assert_allclose(found, right, rtol=1e-8, atol=1e-8)


def test_it_travels_to_another_process(density):
    again = pickle.loads(cloudpickle.dumps(density))
    for x in POINTS[:3]:
        value, gradient = density(x)
        assert again(x)[0] == value
        assert np.array_equal(again(x)[1], gradient)


PARAMETERS = {
    "jax": lambda p: fw.from_jax(for_jax(), p, start=[0.1, 0.5, 1.0, 2.0]),
    "torch": lambda p: fw.from_torch(for_torch(), p, start=[0.1, 0.5, 1.0, 2.0]),
    "numba": lambda p: fw.from_numba(filled, p, in_place=True, start=[0.1, 0.5, 1.0, 2.0]),
}


@pytest.mark.parametrize("name", PARAMETERS)
def test_with_parameters_the_function_sees_natural_values(name):
    parameters = fw.Parameters(v=fw.free(), rest=fw.positive(3))
    density = PARAMETERS[name](parameters)
    plain = fw.Density(KNOWN.call, parameters)
    y = parameters.free([0.3, 0.4, 1.5, 0.7])
    assert density(y)[0] == pytest.approx(plain(y)[0], rel=1e-12)
    np.testing.assert_allclose(density(y)[1], plain(y)[1], rtol=1e-12, atol=1e-12)
    assert density.names == ["v", "rest[0]", "rest[1]", "rest[2]"]


def test_a_function_is_wanted():
    for adapter in (fw.from_jax, fw.from_torch, fw.from_numba):
        with pytest.raises(errors.ArgumentError, match="needs a function"):
            adapter(3.0, 2)


@pytest.mark.parametrize("library", ["jax", "torch", "numba"])
def test_a_missing_library_is_named(library, monkeypatch):
    monkeypatch.setitem(sys.modules, library, None)
    with pytest.raises(errors.ArgumentError, match=f"is not installed: python -m pip install {library}"):
        getattr(fw, f"from_{library}")(lambda x: x, 2)


# ---- JAX ------------------------------------------------------------------------------------------------------------


def run_alone(code):
    """Output of a fresh interpreter."""
    pytest.importorskip("jax")
    done = subprocess.run([sys.executable, "-c", textwrap.dedent(code)], capture_output=True, text=True)
    assert done.returncode == 0, done.stderr
    return done.stdout


def test_single_precision_is_refused_with_the_line_that_ends_it():
    said = run_alone("""
        import jax, fellwalk as fw
        try:
            fw.from_jax(lambda x: -0.5 * x @ x, 2)
        except fw.errors.ArgumentError as error:
            print(error)
        jax.config.update("jax_enable_x64", True)
        print(fw.from_jax(lambda x: -0.5 * x @ x, 2)([3.0, 4.0])[0])
        """)
    assert 'jax.config.update("jax_enable_x64", True)' in said
    assert said.splitlines()[-1] == "-12.5"


def test_in_another_process_double_precision_is_switched_on_before_the_function_brings_jax():
    said = run_alone("""
        import pickle, cloudpickle, subprocess, sys
        import fellwalk as fw, jax.numpy as jnp, jax
        jax.config.update("jax_enable_x64", True)
        density = fw.from_jax(lambda x: -0.5 * jnp.sum(x * x), 2)
        code = "import pickle, sys; print(pickle.load(sys.stdin.buffer)([0.1, 0.2])[0])"
        print(density([0.1, 0.2])[0])
        print(subprocess.run([sys.executable, "-c", code], input=cloudpickle.dumps(density), capture_output=True,
                             check=True).stdout.decode())
        """).split()
    assert float(said[0]) == float(said[1]) == pytest.approx(-0.025, rel=1e-15)


def test_a_float32_result_and_other_shapes_are_refused():
    for_jax()
    import jax.numpy as jnp

    for f in (lambda x: jnp.sum(x).astype(jnp.float32), lambda x: -x, lambda x: (jnp.sum(x), x)):
        with pytest.raises(errors.ArgumentError, match="must return one float64 number"):
            fw.from_jax(f, 3)


def test_precision_switched_off_later_is_noticed():
    density = fw.from_jax(for_jax(), D)
    density(POINTS[0])
    import jax

    jax.config.update("jax_enable_x64", False)
    try:
        with pytest.raises(errors.DensityError, match="switched to single precision"):
            density(POINTS[1])
    finally:
        jax.config.update("jax_enable_x64", True)


def test_one_fused_call_gives_all_three_and_no_copy_is_made_on_the_way_out():
    function = fw.from_jax(for_jax(), D).function
    x, p = POINTS[0], np.arange(1.0, D + 1)
    value, gradient, product = function.together(x, p)
    alone, slope = function(x)
    assert value == pytest.approx(alone, rel=1e-15)
    np.testing.assert_allclose(gradient, slope, rtol=1e-14)
    assert gradient.base is not None
    assert product.base is gradient.base or np.shares_memory(product.base, gradient.base)
    assert not gradient.flags.writeable, "it is a view of JAX's own array"


@pytest.mark.parametrize("batch", [True, "loop"])
def test_a_function_of_one_point_becomes_one_of_many(batch):
    density = fw.from_jax(for_jax(), D, batch=batch, start=POINTS[0])
    values, gradients = density.batch(POINTS)
    assert not gradients.flags.writeable, "it is a view of JAX's own array"
    for c, x in enumerate(POINTS):
        value, slope = KNOWN.call(x)
        assert values[c] == pytest.approx(value, rel=1e-12)
        np.testing.assert_allclose(gradients[c], slope, rtol=1e-12, atol=1e-12 * np.abs(slope).max())
    result = fw.run(density, chains=16, keep=50, seed=1, path=fw.Jittered(4), progress="off")
    assert result.draws.shape == (16, 50, D)
    again = pickle.loads(cloudpickle.dumps(density))
    assert np.array_equal(again.batch(POINTS)[1], gradients)
    with pytest.raises(errors.ArgumentError, match="batch must be"):
        fw.from_jax(for_jax(), D, batch="rows")


# ---- PyTorch --------------------------------------------------------------------------------------------------------


def test_torch_sees_the_array_it_was_called_with_and_gives_its_own():
    torch = pytest.importorskip("torch")
    seen = []

    def f(x):
        seen.append((x.data_ptr(), x.dtype))
        return -0.5 * (x * x).sum()

    density = fw.from_torch(f, 3)
    x = np.array([0.1, 0.2, 0.3])
    _, gradient = density.function(x)
    assert seen == [(x.ctypes.data, torch.float64)]
    assert gradient.base is not None or not gradient.flags.owndata
    assert np.array_equal(gradient, -x)


def test_torch_in_single_precision_or_of_another_shape_is_refused():
    torch = pytest.importorskip("torch")
    for f in (lambda x: x.float().sum(), lambda x: -x, lambda x: 1.0):
        with pytest.raises(errors.DensityError, match="must return a float64 tensor of one number"):
            fw.from_torch(f, 3)([1.0, 2.0, 3.0])
    density = fw.from_torch(for_torch(), D)
    right = density(POINTS[0])[1]
    with torch.no_grad():
        assert np.array_equal(density(POINTS[0])[1], right)


def test_torch_functions_that_leave_coordinates_out():
    torch = pytest.importorskip("torch")
    flat = fw.from_torch(lambda x: torch.zeros((), dtype=torch.float64), 2)
    line = fw.from_torch(lambda x: x[0] * 3.0, 2)
    assert flat([1.0, 2.0])[1].tolist() == flat.product([1.0, 2.0], [1.0, 1.0]).tolist() == [0.0, 0.0]
    assert line([1.0, 2.0])[1].tolist() == [3.0, 0.0]
    assert line.product([1.0, 2.0], [1.0, 1.0]).tolist() == [0.0, 0.0]


# ---- Numba ----------------------------------------------------------------------------------------------------------


def test_numba_runs_on_threads_with_the_bits_of_one():
    density = MADE.setdefault("numba in place", for_numba_in_place())
    assert density.compiled
    one, two = (fw.run(density, POINTS[0], keep=50, chains=2, seed=3, settle=50, executor=where, progress="off").draws
                for where in ("here", "threads"))
    assert np.array_equal(one, two)


def test_the_compiled_code_outlives_the_density():
    import gc

    chain = fw.Chain(fw.from_numba(filled, D, in_place=True), POINTS[0], seed=1, step_size=0.1)
    gc.collect()
    assert np.all(np.isfinite(chain.advance(200).draws))


def test_numba_functions_that_write_into_x_or_have_another_form_do_not_compile():
    pytest.importorskip("numba")

    def writes(x):
        x[0] = 0.0
        return 0.0, x

    for f in (writes, lambda x: -x, lambda: 1.0, lambda x: ("a", x)):
        with pytest.raises(errors.ArgumentError, match=r"cannot compile this as f\(x\) -> \(log density, gradient\)"):
            fw.from_numba(f, 3)
    with pytest.raises(errors.ArgumentError, match=r"cannot compile this as hessian_product\(x, p\) -> product"):
        fw.from_numba(lambda x: (0.0, -x), 3, hessian_product=lambda x: x)


def test_a_numba_gradient_of_another_length_and_one_that_raises_are_noticed():
    pytest.importorskip("numba")
    with pytest.raises(errors.NotWrittenError):
        fw.from_numba(lambda x: (0.0, x[1:] * 1.0), 3)([1.0, 2.0, 3.0])


def half(x, gradient):
    total = 0.0
    for i in range(x.size):
        if x[i] <= 0:
            return -np.inf
        gradient[i] = -1.0
        total -= x[i]
    return total


def test_minus_infinity_is_outside():
    density = fw.from_numba(half, 2, in_place=True)
    assert density([1.0, 2.0])[0] == -3.0
    assert density([1.0, -2.0])[0] == -np.inf
    chain = fw.Chain(density, [1.0, 1.0], seed=2, step_size=0.8)
    facts = chain.advance(300).facts
    assert set(facts["failure"]) == {0, 2}  # 2: minus infinity
