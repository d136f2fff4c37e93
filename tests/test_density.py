"""What a log density may be, what it may give back, and what is said when it gives something else."""

import ctypes
import pickle
from decimal import Decimal
from fractions import Fraction

import numpy as np
import pytest
from compiled_densities import (
    DENSITY_SIGNATURE,
    PRODUCT_SIGNATURE,
    Curved,
    Plan,
    capsule_function,
    ctypes_function,
    numba_function,
    numba_raising,
)
from scipy import LowLevelCallable

import fellwalk as fw
from fellwalk import errors

X = np.array([0.7313, -1.4142, 2.385])
VALUE = -0.5 * float(X @ X)


def normal(x):
    return -0.5 * float(x @ x), -x


def normal_in_place(x, gradient):
    np.negative(x, out=gradient)
    return -0.5 * float(x @ x)


def pair_giving(value, gradient=(0.0, 0.0, 0.0)):
    return fw.Density(lambda x: (value, gradient), 3)


# ---- forms ----------------------------------------------------------------------------------------------------------
class Counting:
    """A callable object."""

    def __init__(self):
        self.calls = 0

    def __call__(self, x):
        self.calls += 1
        return normal(x)

    def method(self, x):
        return self(x)


FORMS = {
    "function": lambda: fw.Density(normal, 3),
    "in place": lambda: fw.Density(normal_in_place, 3, in_place=True),
    "callable object": lambda: fw.Density(Counting(), 3),
    "method": lambda: fw.Density(Counting().method, 3),
    "ctypes": lambda: fw.Density(ctypes_function("plain"), 3),
    "ctypes with signature": lambda: fw.Density(ctypes_function("plain", None, DENSITY_SIGNATURE), 3),
    "capsule": lambda: fw.Density(capsule_function("plain", DENSITY_SIGNATURE), 3),
    "numba": lambda: fw.Density(numba_function(), 3),
}


@pytest.mark.parametrize("form", FORMS)
def test_every_form_gives_the_same_density_and_the_same_chain(form):
    density = FORMS[form]()
    value, gradient = density(X)
    np.testing.assert_allclose(value, VALUE, rtol=4e-16)
    np.testing.assert_array_equal(gradient, -X)
    assert density.compiled is (form in ("ctypes", "ctypes with signature", "capsule", "numba"))
    assert density.dimension == 3
    assert repr(density).startswith("<Density of 3 coordinates, ")
    chain = fw.Chain(density, X, seed=31, step_size=0.9)
    expected = fw.Chain(FORMS["function"](), X, seed=31, step_size=0.9)
    # gradients agree bit for bit; sums of squares may differ in their last bit, which only accept tests see
    np.testing.assert_array_equal(chain.advance(20).draws, expected.advance(20).draws)


SPELLINGS = [
    "size_t", "unsigned long", "long", "ptrdiff_t", "Py_ssize_t", "ssize_t", "long unsigned int", "unsigned long int",
    "uintptr_t", "intptr_t", "uint64_t", "int64_t", "unsigned long long", "long long", "npy_intp", "npy_uintp",
    "ulong", "const size_t",
]  # fmt: skip


@pytest.mark.parametrize("word", SPELLINGS)
def test_pointer_sized_integers_may_be_spelled_as_compilers_spell_them(word):
    signature = DENSITY_SIGNATURE.replace("size_t", word)
    density = fw.Density(capsule_function("plain", signature), 3)
    np.testing.assert_array_equal(density(X)[1], -X)
    product = PRODUCT_SIGNATURE.replace("size_t", word)
    plan = Plan()
    fw.Density(ctypes_function("curved", plan, signature), 3,
               hessian_product=ctypes_function("curved_product", plan, product))


@pytest.mark.parametrize("signature", [
    "int (size_t, double *, double *, double *, void *)",
    "int(size_t,const double*,double*,double*,void*)",
    "int (size_t, double const *, double *, double *, void *)",
    "int  ( size_t ,  const  double  * , double * , double * , void * )",
    "int (size_t, const double * const, double *, double *, void *)",
    "int32_t (size_t, const double *, double *, double *, void *)",
    "const int (size_t, const double *, double *, double *, const void *)",
])  # fmt: skip
def test_const_and_spacing_do_not_matter(signature):
    density = fw.Density(capsule_function("plain", signature), 3)
    np.testing.assert_array_equal(density(X)[1], -X)


@pytest.mark.parametrize("signature", [
    "double (size_t, const double *, double *, double *, void *)",
    "int (int, const double *, double *, double *, void *)",
    "int (size_t, const float *, double *, double *, void *)",
    "int (size_t, const double *, double *, double *)",
    "int (size_t, const double *, double, double *, void *)",
    "int (size_t, const double **, double *, double *, void *)",
    "void (size_t, const double *, double *, double *, void *)",
    "double (double)",
    "nonsense",
    "",
])  # fmt: skip
def test_a_wrong_signature_is_said_in_one_sentence_when_the_density_is_made(signature):
    with pytest.raises(errors.DensityError) as caught:
        fw.Density(capsule_function("plain", signature), 3)
    said = str(caught.value)
    assert repr(signature) in said
    assert repr(DENSITY_SIGNATURE) in said
    with pytest.raises(errors.DensityError) as caught:
        fw.Density(normal, 3, hessian_product=capsule_function("plain", signature))
    assert repr(PRODUCT_SIGNATURE) in str(caught.value)
    assert "Hessian product" in str(caught.value)


def test_the_signatures_of_density_and_product_are_told_apart():
    """They differ in const only, so a product in the density's place cannot be seen by its types: it is said to be
    unwritten or is caught by what it writes. A product with three vectors and no context is refused."""
    with pytest.raises(errors.DensityError):
        fw.Density(normal, 3, hessian_product=capsule_function("plain", "int (size_t, double *, double *, double *)"))


def test_the_context_reaches_compiled_functions_and_is_kept_alive():
    def make():
        plan = Plan()
        plan.fail_at, plan.act = 2, 1
        return fw.Density(ctypes_function("curved", plan, DENSITY_SIGNATURE), 3)

    density = make()
    kept = [np.full(64, np.nan) for _ in range(200)]  # would overwrite freed memory of the plan
    assert np.isfinite(density(X)[0])
    assert density(X)[0] == -np.inf  # the second call answers 3: outside
    assert np.isfinite(density(X)[0])
    del kept


def test_a_negative_code_stops_a_single_call():
    plan = Plan()
    plan.fail_at = 1
    density = fw.Density(ctypes_function("curved", plan, DENSITY_SIGNATURE), 3)
    with pytest.raises(errors.FellwalkError, match=r"-7 .*asked to stop"):
        density(X)


@pytest.mark.parametrize("name", ["half_value", "half_gradient"])
def test_compiled_functions_that_write_half_are_caught(name):
    density = fw.Density(ctypes_function(name, None, DENSITY_SIGNATURE), 3)
    with pytest.raises(errors.NotWrittenError):
        fw.Chain(density, X)


@pytest.mark.parametrize("name", ["half_value", "half_gradient"])
def test_a_single_call_says_that_nothing_was_written(name):
    """A density called by hand must not pass off an unwritten value or gradient as computed."""
    density = fw.Density(ctypes_function(name, None, DENSITY_SIGNATURE), 3)
    with pytest.raises(errors.NotWrittenError):
        density(X)


@pytest.mark.filterwarnings("ignore::pytest.PytestUnraisableExceptionWarning")
def test_an_exception_swallowed_by_numba_is_caught(capfd):
    function = numba_raising()
    signed = LowLevelCallable(function.function, signature=DENSITY_SIGNATURE)
    with pytest.raises(errors.NotWrittenError, match="lost"):
        fw.Chain(fw.Density(signed, 3), X)


@pytest.mark.parametrize("function", [None, 3.0, "normal", (normal,), np.zeros(3)])
def test_what_is_no_function_is_refused(function):
    with pytest.raises(errors.ArgumentError, match="must be a function"):
        fw.Density(function, 3)


def test_what_is_no_product_is_refused():
    with pytest.raises(errors.ArgumentError, match="hessian_product must be a function"):
        fw.Density(normal, 3, hessian_product=np.eye(3))


@pytest.mark.parametrize("dimension", [0, -1, 2.0, "3", None, True, 2**41])
def test_dimensions_that_are_none(dimension):
    with pytest.raises(errors.ArgumentError, match="dimension"):
        fw.Density(normal, dimension)


def test_a_numpy_integer_is_a_dimension():
    assert fw.Density(normal, np.int64(3)).dimension == 3


def test_names_of_coordinates():
    assert fw.Density(normal, 3).names == ["x[0]", "x[1]", "x[2]"]
    assert fw.Density(normal, 3, names=("a", "b", "c")).names == ["a", "b", "c"]
    for names, said in ((["a", "b"], "2 names for 3"), (["a", "b", "a"], "'a'"), ("abc", "one string")):
        with pytest.raises(errors.ArgumentError, match=said):
            fw.Density(normal, 3, names=names)


# ---- what a function may give back ----------------------------------------------------------------------------------
@pytest.mark.parametrize("value", [
    -2.5, np.float64(-2.5), np.float32(-2.5), np.longdouble(-2.5), np.array(-2.5), Decimal("-2.5"), Fraction(-5, 2),
])  # fmt: skip
def test_real_numbers_of_every_kind_are_log_densities(value):
    found, gradient = pair_giving(value, [1, 2, 3])(X)
    assert found == -2.5
    np.testing.assert_array_equal(gradient, [1.0, 2.0, 3.0])
    assert type(found) is float


@pytest.mark.parametrize("value", [3, np.int32(3), True])
def test_whole_numbers_are_log_densities(value):
    assert pair_giving(value)(X)[0] == float(value)


BAD_VALUES = [None, "2.5", b"2", 1j, np.complex128(1 + 2j), np.complex64(1j), [1.0], np.zeros(1), np.zeros(2), {},
              (1.0,), 10**400]  # fmt: skip


@pytest.mark.parametrize("value", BAD_VALUES, ids=lambda v: f"{type(v).__name__}-{str(v)[:10]}")
@pytest.mark.parametrize("in_place", [False, True])
def test_what_is_no_real_number_is_refused(value, in_place):
    def in_place_function(x, gradient):
        gradient[:] = 0.0
        return value

    density = fw.Density(in_place_function, 3, in_place=True) if in_place else pair_giving(value)
    with pytest.raises(errors.DensityError, match="log density"):
        density(X)
    with pytest.raises(errors.DensityError, match="log density"):
        fw.Chain(density, X)


@pytest.mark.parametrize("answer", [None, 2.5, [1.0, X], (1.0,), (1.0, X, X), np.zeros(2), "ab"], ids=repr)
def test_what_is_no_pair_is_refused(answer):
    with pytest.raises(errors.DensityError, match=r"must return \(log density, gradient\)"):
        fw.Density(lambda x: answer, 3)(X)


def unaligned(values):
    raw = np.zeros(8 * len(values) + 1, np.uint8)[1:]
    array = raw.view(np.float64)
    array[:] = values
    return array


@pytest.mark.parametrize("gradient", [
    [1, 2, 3], (1.0, 2.0, 3.0), np.array([1, 2, 3], np.int64), np.array([1, 2, 3], np.uint8),
    np.array([1, 2, 3], np.float32), np.array([1, 2, 3], np.longdouble), np.array([1, 2, 3], ">f8"),
    np.array([1.0, 9, 2, 9, 3])[::2], np.array([3.0, 2, 1])[::-1], np.array([[1.0, 2, 3]])[0],
    np.array([[1.0, 2], [2, 3], [3, 4]])[:, 0], unaligned([1.0, 2, 3]), np.float16([1, 2, 3]),
], ids=lambda g: f"{type(g).__name__}-{getattr(g, 'dtype', '')}-{getattr(g, 'strides', '')}")  # fmt: skip
def test_gradients_of_every_real_kind_are_taken(gradient):
    np.testing.assert_array_equal(pair_giving(1.0, gradient)(X)[1], [1.0, 2.0, 3.0])


def test_read_only_gradients_are_taken():
    gradient = np.array([1.0, 2.0, 3.0])
    gradient.flags.writeable = False
    np.testing.assert_array_equal(pair_giving(1.0, gradient)(X)[1], gradient)


@pytest.mark.parametrize(("gradient", "shape"), [
    (np.zeros(2), "(2,)"), (np.zeros(4), "(4,)"), (np.zeros((3, 1)), "(3, 1)"), (np.zeros((1, 3)), "(1, 3)"),
    (np.zeros(0), "(0,)"), (0.0, "()"), (np.array(0.0), "()"), ([[1.0], [2.0], [3.0]], "(3, 1)"),
], ids=repr)  # fmt: skip
def test_gradients_of_another_shape_are_refused(gradient, shape):
    density = pair_giving(1.0, gradient)
    with pytest.raises(errors.DensityError, match=r"gradient must have shape \(3,\)") as caught:
        density(X)
    assert f"gave shape {shape}" in str(caught.value)
    with pytest.raises(errors.DensityError, match=r"gradient must have shape \(3,\)"):
        fw.Chain(density, X)


@pytest.mark.parametrize("gradient", [
    None, "abc", ["a", "b", "c"], np.zeros(3, complex), [1j, 0, 0], [None] * 3, [1.0, "2", 3.0], np.zeros(3, object),
    np.zeros(3, "M8[s]"), {1, 2, 3}, [[1, 2], [3]], [Decimal(1)] * 3,
], ids=lambda g: str(g)[:20])  # fmt: skip
def test_gradients_that_hold_no_real_numbers_are_refused(gradient):
    with pytest.raises(errors.DensityError, match="gradient"):
        pair_giving(1.0, gradient)(X)


def test_a_gradient_number_is_no_gradient_of_one_coordinate():
    """In one dimension a bare number is taken for the vector of length 1, which loses nothing."""
    density = fw.Density(lambda x: (-0.5 * x[0] ** 2, -x[0]), 1)
    np.testing.assert_array_equal(density([0.37])[1], [-0.37])


@pytest.mark.parametrize(
    "answer", [None, np.zeros(2), np.zeros((3, 3)), "abc", [1j, 0, 0], 1.0], ids=lambda a: str(a)[:9]
)
def test_hessian_products_are_checked_likewise(answer):
    density = fw.Density(normal, 3, hessian_product=lambda x, p: answer)
    with pytest.raises(errors.DensityError, match="Hessian product must"):
        density.product(X, X)
    chain = fw.Chain(density, X, motion=fw.Lagrangian(curvature="product"), step_size=0.3, beta=0.4)
    before = chain.state
    with pytest.raises(errors.DensityError, match="Hessian product must"):
        chain.advance(1)
    assert chain.state == before


def test_minus_infinity_needs_no_gradient():
    density = fw.Density(lambda x: (-np.inf, None), 3)
    value, gradient = density(X)
    assert value == -np.inf
    assert gradient.shape == (3,)
    half_line = fw.Density(lambda x: (-np.inf, None) if x[0] < 0.0 else (-x[0], [-1.0]), 1)
    draws = fw.Chain(half_line, [1.0], path=fw.Jittered(4), seed=3, step_size=0.6).advance(200).draws
    assert draws.min() >= 0.0


def test_sentences_speak_of_the_function_that_was_given():
    """A Python function is not called compiled, and the sentence says where it happened."""

    def silent(x, gradient):
        return -1.0

    for density in (fw.Density(silent, 3, in_place=True), fw.Density(lambda x: (np.inf, x), 3)):
        with pytest.raises(errors.DensityError) as caught:
            fw.Chain(density, X)
        assert "0.7313" in str(caught.value)

    calls = []

    def later(x):
        calls.append(x)
        return (np.inf if len(calls) > 3 else -0.5 * x @ x), -x

    with pytest.raises(errors.InfiniteDensityError) as caught:
        fw.Chain(fw.Density(later, 3), X, step_size=0.4, seed=1).advance(9)
    assert "compiled" not in str(caught.value)
    assert f"[{calls[-1][0]:.6g}, " in str(caught.value)


# ---- what a function may do to its arrays ---------------------------------------------------------------------------
def expected_draws():
    return fw.Chain(fw.Density(normal, 3), X, seed=8, step_size=0.8).advance(40).draws


def drawn(function, **options):
    return fw.Chain(fw.Density(function, 3, **options), X, seed=8, step_size=0.8).advance(40).draws


def test_the_gradient_may_be_x_itself_changed_in_place():
    def function(x):
        value = -0.5 * float(x @ x)
        x *= -1.0
        return value, x

    np.testing.assert_array_equal(drawn(function), expected_draws())


def test_the_gradient_may_be_a_view_of_x():
    def function(x):
        value = -0.5 * float(x @ x)
        x[:] = -x[::-1]
        return value, x[::-1]

    np.testing.assert_array_equal(drawn(function), expected_draws())


def test_the_gradient_may_be_the_same_array_each_time():
    own = np.empty(3)

    def function(x):
        np.negative(x, out=own)
        return -0.5 * float(x @ x), own

    np.testing.assert_array_equal(drawn(function), expected_draws())


def test_a_function_may_spoil_x():
    def function(x):
        answer = normal(x)
        x[:] = np.nan
        return answer

    def in_place(x, gradient):
        value = normal_in_place(x, gradient)
        x[:] = np.inf
        return value

    np.testing.assert_array_equal(drawn(function), expected_draws())
    np.testing.assert_array_equal(drawn(in_place, in_place=True), expected_draws())


@pytest.mark.parametrize("keep", ["array", "view", "memoryview"])
def test_what_a_function_keeps_does_not_change_later(keep):
    kept, copies = [], []

    def store(array):
        kept.append(array if keep == "array" else array[1:] if keep == "view" else memoryview(array))
        copies.append(np.array(kept[-1]))

    def function(x):
        store(x)
        return normal(x)

    def in_place(x, gradient):
        value = normal_in_place(x, gradient)
        store(x)
        store(gradient)
        return value

    for draws in (drawn(function), drawn(in_place, in_place=True)):
        np.testing.assert_array_equal(draws, expected_draws())
    assert len(kept) > 100
    for array, copy in zip(kept, copies, strict=True):
        np.testing.assert_array_equal(array, copy)


def test_what_a_product_keeps_does_not_change_later():
    kept = []

    def product(x, p):
        kept.append((x, p, x.copy(), p.copy()))
        return -p

    density = fw.Density(normal, 3, hessian_product=product)
    fw.Chain(density, X, motion=fw.Lagrangian(curvature="product"), step_size=0.4, beta=0.3, seed=1).advance(10)
    assert len(kept) > 20
    for x, p, x_copy, p_copy in kept:
        np.testing.assert_array_equal(x, x_copy)
        np.testing.assert_array_equal(p, p_copy)


def test_the_same_array_is_lent_again_when_nobody_kept_it():
    seen = set()

    def function(x):
        seen.add(x.ctypes.data)
        return normal(x)

    drawn(function)
    assert len(seen) == 1


def test_the_arrays_lent_are_plain_writable_float64():
    def function(x):
        assert type(x) is np.ndarray
        assert x.dtype == np.float64
        assert x.flags.c_contiguous
        assert x.flags.writeable
        assert x.shape == (3,)
        return normal(x)

    def in_place(x, gradient):
        function(x)
        function(gradient)
        return normal_in_place(x, gradient)

    drawn(function)
    drawn(in_place, in_place=True)


def test_the_position_given_to_a_single_call_is_not_changed():
    def function(x):
        x[:] = 0.0
        return 0.0, x

    x = X.copy()
    fw.Density(function, 3)(x)
    np.testing.assert_array_equal(x, X)


@pytest.mark.parametrize("x", [np.zeros(2), np.zeros((3, 1)), 0.0, "abc", None, [1j, 0, 0]], ids=lambda x: str(x)[:9])
def test_positions_of_another_kind_are_refused(x):
    density = fw.Density(normal, 3, hessian_product=lambda x, p: -p)
    with pytest.raises(errors.ShapeError, match="position"):
        density(x)
    with pytest.raises(errors.ShapeError, match="position"):
        density.product(x, X)
    with pytest.raises(errors.ShapeError, match="p must"):
        density.product(X, x)


# ---- counts and exceptions ------------------------------------------------------------------------------------------
@pytest.mark.parametrize("form", ["pair", "in place", "compiled"])
@pytest.mark.parametrize("motion", [
    fw.Leapfrog(halvings=2), fw.Lagrangian(curvature="product"), fw.Lagrangian(curvature="difference"),
])  # fmt: skip
def test_evaluations_and_products_are_counted_exactly(form, motion):
    user = Curved(form, 3)
    density = user.density
    density(X)
    assert (density.gradients, density.products) == (1, 0)
    density.product(X, X)
    assert (density.gradients, density.products) == (1, 1)
    chain = fw.Chain(density, X, motion=motion, seed=5)
    assert density.gradients == 2
    settled = chain.settle(60)
    kept = chain.advance(10)
    assert density.gradients + density.products == user.plan.calls
    assert density.gradients == 2 + settled.facts["gradients"].sum() + kept.facts["gradients"].sum()
    assert density.products == 1 + settled.facts["products"].sum() + kept.facts["products"].sum()
    assert chain.counts == {
        "transitions": len(settled) + 10, "gradients": density.gradients - 1, "products": density.products - 1,
    }  # fmt: skip
    assert (density.products > 1) is (getattr(motion, "curvature", "") == "product")


def test_counts_of_a_pickled_copy_start_at_zero():
    density = fw.Density(normal, 3)
    density(X)
    copy = pickle.loads(pickle.dumps(density))
    assert (copy.gradients, density.gradients) == (0, 1)
    assert copy(X)[0] == density(X)[0]


@pytest.mark.parametrize("kind", [ValueError, KeyboardInterrupt, SystemExit, RecursionError])
@pytest.mark.parametrize("in_place", [False, True])
def test_exceptions_inside_come_out_of_a_single_call_and_of_a_start(kind, in_place):
    error = kind("inside")

    def function(*arrays):
        raise error

    density = fw.Density(function, 3, in_place=in_place, hessian_product=function)
    for call in (lambda: density(X), lambda: density.product(X, X), lambda: fw.Chain(density, X)):
        with pytest.raises(kind) as caught:
            call()
        assert caught.value is error
        assert any(entry.frame.code.raw is function.__code__ for entry in caught.traceback)


def test_a_missing_product_is_said():
    density = fw.Density(normal, 3)
    with pytest.raises(errors.DensityError, match="no Hessian product"):
        density.product(X, X)
    with pytest.raises(errors.ArgumentError, match="hessian_product="):
        fw.Chain(density, X, motion=fw.Lagrangian(curvature="product"))


def test_a_million_coordinates():
    d = 1_000_000
    start = np.linspace(-1.0, 1.0, d)
    python = fw.Chain(fw.Density(normal, d), start, path=fw.Jittered(2), seed=6, step_size=0.004)
    compiled = fw.Chain(fw.Density(ctypes_function("plain", None, DENSITY_SIGNATURE), d), start, path=fw.Jittered(2),
                        seed=6, step_size=0.004)
    a, b = python.advance(3), compiled.advance(3)
    assert a.draws.shape == (3, d)
    assert not np.array_equal(a.draws[-1], start)
    # sums of 1e6 squares in another order: relative error below 1e-11, which an accept test does not see
    np.testing.assert_allclose(a.draws, b.draws, rtol=1e-12, atol=1e-12)
    np.testing.assert_array_equal(python.gradient, -python.position)


def test_ctypes_restype_is_part_of_the_signature():
    function = ctypes.CFUNCTYPE(ctypes.c_double, ctypes.c_double)(lambda x: x)
    with pytest.raises(errors.DensityError, match="signature"):
        fw.Density(LowLevelCallable(function), 3)
