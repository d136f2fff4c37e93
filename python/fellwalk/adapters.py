"""Densities from functions written for JAX, PyTorch or Numba; each library is imported when it is asked for.

Costs are processor time for one gradient of a standard normal in 10 dimensions, the chain's own step included, as
measured by benchmarks/call_time.py (the same function in NumPy: 1.4 microseconds; in C: 0.06).
"""

from __future__ import annotations

import importlib
import pickle
import sys
from collections.abc import Callable
from typing import Any

import cloudpickle
import numpy as np
from numpy.typing import NDArray

from fellwalk.density import Density
from fellwalk.errors import ArgumentError, DensityError
from fellwalk.motions import whole
from fellwalk.parameters import Parameters

__all__ = ["from_jax", "from_numba", "from_torch"]

Array = NDArray[np.float64]

_JAX_LINE = 'jax.config.update("jax_enable_x64", True)'


def _size(dimension: int | Parameters) -> int:
    return dimension.size if isinstance(dimension, Parameters) else whole("dimension", dimension, 1, 2**40)


def _imported(name: str, product: str) -> Any:
    """The module, or a sentence."""
    try:
        return importlib.import_module(name)
    except ImportError as error:
        raise ArgumentError(f"from_{name} needs {product}, which is not installed: python -m pip install {name}"
                            ) from error


def _function(f: object, library: str) -> None:
    if not callable(f):
        raise ArgumentError(f"from_{library} needs a function f(x) -> log density; it got {f!r:.60}")


# ---- JAX -------------------------------------------------------------------------------------------------------------


def from_jax(f: Callable[[Any], Any], dimension: int | Parameters, *, batch: bool | str = False,
             **named: Any) -> Density:
    """The density of a JAX function, with gradient and Hessian product by automatic differentiation.

    f: x of shape (dimension,), a float64 JAX array, to the log density, a float64 scalar; it must be one that jax.jit
        takes. With Parameters x holds the flat natural values. named: start=, names= of `fellwalk.Density`.
    Log density and gradient come from one compiled call, and a Hessian product from one that fuses all three. x goes in
    as it is and the gradient comes out without a copy. A gradient costs 9 microseconds, a Hessian product 14.
    batch: all chains of a run advance together, f still being of one point. Worth it where a call costs more than the
        arithmetic of f. True: jax.vmap makes it a function of many, which is best where f has matrix products; "loop":
        the compiled call does one point after the other, best for simple functions (benchmarks/lockstep.py).
    Errors: ArgumentError without JAX, in single precision, or when f does not give a float64 scalar.
    """
    _function(f, "jax")
    if batch not in (False, True, "loop"):
        raise ArgumentError(f'batch must be False, True or "loop"; it is {batch!r:.60}')
    function = JaxFunction(f, _size(dimension), loop=batch == "loop")
    if batch:
        return Density(function.many, dimension, batch=True, hessian_product=function.multiply, **named)
    return Density(function, dimension, hessian_product=function.multiply, **named)


class JaxFunction:
    """A compiled JAX function as f(x) -> (log density, gradient); `multiply` gives Hessian products.

    Pickles when f does. In a process that has no JAX yet it switches double precision on.
    """

    def __init__(self, f: Callable[[Any], Any], size: int, loop: bool = False) -> None:
        self.f, self.size, self.loop = f, size, loop
        self._compile()

    def _compile(self) -> None:
        jax = _jax()
        found = jax.eval_shape(self.f, jax.ShapeDtypeStruct((self.size,), np.float64))
        if getattr(found, "shape", None) != () or found.dtype != np.float64:
            raise ArgumentError("the JAX function must return one float64 number; for x of shape "
                                f"({self.size},) it returns {found}")

        def packed(x: Any) -> Any:  # one output array is fetched faster than two
            value, gradient = jax.value_and_grad(self.f)(x)
            return jax.numpy.concatenate([gradient, value[None]])

        def flat(x: Any) -> Any:
            one = jax.value_and_grad(self.f)
            values, gradients = jax.lax.map(one, x) if self.loop else jax.vmap(one)(x)
            return jax.numpy.concatenate([gradients.ravel(), values])

        def fused(x: Any, p: Any) -> Any:
            return jax.numpy.stack(jax.jvp(packed, (x,), (p,)))

        self._packed, self._fused = jax.jit(packed), jax.jit(fused)
        self._many = jax.jit(flat)

    def __call__(self, x: Array) -> tuple[float, Array]:
        """(log density, gradient (dimension,)) at x; the gradient is read-only and JAX's own memory."""
        out = _doubles(self._packed(x))
        return float(out[-1]), out[:-1]

    def many(self, x: Array) -> tuple[Array, Array]:
        """(log densities (m,), gradients (m, dimension)) at the rows of x, read-only."""
        out = _doubles(self._many(x))
        return out[x.size :], out[: x.size].reshape(x.shape)

    def together(self, x: Array, p: Array) -> tuple[float, Array, Array]:
        """(log density, gradient, Hessian times p) in one call."""
        out = _doubles(self._fused(x, p))
        return float(out[0, -1]), out[0, :-1], out[1, :-1]

    def multiply(self, x: Array, p: Array) -> Array:
        """Hessian at x times p, (dimension,)."""
        return self.together(x, p)[2]

    def __reduce__(self) -> tuple[Any, ...]:
        return _jax_again, (cloudpickle.dumps(self.f), self.size, self.loop)


def _jax_again(packed: bytes, size: int, loop: bool) -> JaxFunction:
    """In another process: double precision is on before f, which may bring JAX with it, is unpacked."""
    _jax()
    return JaxFunction(pickle.loads(packed), size, loop)


def _jax() -> Any:
    """JAX, in double precision where nobody can have used it before. Errors: ArgumentError."""
    fresh = "jax" not in sys.modules
    jax = _imported("jax", "JAX")
    if fresh:
        jax.config.update("jax_enable_x64", True)
    if not jax.config.jax_enable_x64:
        raise ArgumentError("JAX computes in single precision here, which is too coarse for following a path back; "
                            f"before anything else is computed, say: {_JAX_LINE}")
    return jax


def _doubles(given: Any) -> Array:
    out: Array = np.asarray(given)
    if out.dtype != np.float64:
        raise DensityError("JAX was switched to single precision after this density was made; take back what did that, "
                           f"or say {_JAX_LINE}")
    return out


# ---- PyTorch ---------------------------------------------------------------------------------------------------------


def from_torch(f: Callable[[Any], Any], dimension: int | Parameters, **named: Any) -> Density:
    """The density of a PyTorch function on the CPU, with gradient and Hessian product by automatic differentiation.

    f: x, a float64 tensor of shape (dimension,), to the log density, a float64 tensor of one number. With Parameters x
        holds the flat natural values. named: start=, names= of `fellwalk.Density`.
    x is a view of the array that the chain lends for the call, and the gradient comes out without a copy. A gradient
    costs 36 microseconds, a Hessian product 76; torch.set_num_threads(1) is best for small functions.
    Errors: ArgumentError without PyTorch; at the first call DensityError when f gives another type or shape.
    """
    _function(f, "torch")
    function = TorchFunction(f)
    return Density(function, dimension, hessian_product=function.multiply, **named)


class TorchFunction:
    """A PyTorch function as f(x) -> (log density, gradient); `multiply` gives Hessian products. Pickles when f does."""

    def __init__(self, f: Callable[[Any], Any]) -> None:
        self.f = f
        self._load()

    def _load(self) -> None:
        self._torch = _imported("torch", "PyTorch")

    def _value(self, x: Any) -> Any:
        value = self.f(x)
        if not isinstance(value, self._torch.Tensor) or value.dtype != self._torch.float64 or value.numel() != 1:
            kind = f"{tuple(value.shape)} of {value.dtype}" if isinstance(value, self._torch.Tensor) else type(value)
            raise DensityError("the PyTorch function must return a float64 tensor of one number; it returned "
                               f"{kind}. Data in float32 make it so: give them dtype=torch.float64")
        return value

    def __call__(self, x: Array) -> tuple[float, Array]:
        """(log density, gradient (dimension,)) at x."""
        at = self._torch.from_numpy(x).requires_grad_()
        with self._torch.enable_grad():
            value = self._value(at)
        return value.item(), self._slope(value, at).detach().numpy()

    def multiply(self, x: Array, p: Array) -> Array:
        """Hessian at x times p, (dimension,)."""
        at = self._torch.from_numpy(x).requires_grad_()
        with self._torch.enable_grad():
            gradient = self._slope(self._value(at), at, create_graph=True)
        product: Array = self._slope(gradient, at, grad_outputs=self._torch.from_numpy(p)).detach().numpy()
        return product

    def _slope(self, of: Any, at: Any, **named: Any) -> Any:
        """Derivative of `of`; zeros where it does not depend on `at`."""
        if not of.requires_grad:
            return self._torch.zeros_like(at)
        (slope,) = self._torch.autograd.grad(of, at, allow_unused=True, **named)
        return self._torch.zeros_like(at) if slope is None else slope

    def __getstate__(self) -> dict[str, Any]:
        return {"f": self.f}

    def __setstate__(self, state: dict[str, Any]) -> None:
        self.__dict__.update(state)
        self._load()


# ---- Numba -----------------------------------------------------------------------------------------------------------


def from_numba(f: Callable[..., Any], dimension: int | Parameters, *, in_place: bool = False,
               hessian_product: Callable[..., Any] | None = None, **named: Any) -> Density:
    """The density of a function that Numba compiles to a callback: called without Python, on all cores as threads.

    f: f(x) -> (log density, gradient), or with in_place=True f(x, gradient) -> log density; x is a read-only float64
        array of shape (dimension,), and -inf is returned outside the support. A plain function, or one of numba.njit.
    hessian_product: f(x, p) -> product, or with in_place=True f(x, p, product), writing into it.
    With Parameters x holds the flat natural values. named: start=, names= of `fellwalk.Density`.
    x and gradient are the chain's own memory. A gradient costs 0.06 microseconds in place, as in C, and 0.09 when f
    makes a new array for it. It takes a second or two to compile.
    Errors: ArgumentError without Numba, or when f cannot be compiled, or writes into x.
    """
    _function(f, "numba")
    d = _size(dimension)
    density = _numba_callback(f, d, in_place, 1)
    product = None if hessian_product is None else _numba_callback(hessian_product, d, in_place, 2)
    made = Density(density[0], dimension, hessian_product=product and product[0], **named)
    again = _NumbaAgain(f, dimension, in_place, hessian_product, named)
    again.code = (density, product)
    made.made_by = again, ()
    return made


class _NumbaAgain:
    """The call that made a density, to be made again in another process; here it keeps the compiled code alive."""

    code: object = None

    def __init__(self, f: Callable[..., Any], dimension: int | Parameters, in_place: bool,
                 hessian_product: Callable[..., Any] | None, named: dict[str, Any]) -> None:
        self.call = f, dimension, in_place, hessian_product, named

    def __call__(self) -> Density:
        f, dimension, in_place, product, named = self.call
        return from_numba(f, dimension, in_place=in_place, hessian_product=product, **named)

    def __reduce__(self) -> tuple[Any, ...]:
        return _NumbaAgain, self.call


_NUMBA_FORMS = {
    (1, False): "f(x) -> (log density, gradient)",
    (1, True): "f(x, gradient) -> log density",
    (2, False): "hessian_product(x, p) -> product",
    (2, True): "hessian_product(x, p, product)",
}


def _numba_callback(f: Callable[..., Any], d: int, in_place: bool, inputs: int) -> tuple[Any, Any]:
    """(LowLevelCallable, the compiled code whose address it holds) of a density (one input) or a product (two)."""
    numba = _imported("numba", "Numba")
    from scipy import LowLevelCallable

    types, form = numba.types, _NUMBA_FORMS[inputs, in_place]
    fixed = types.Array(types.float64, 1, "C", readonly=True)
    pointer = types.CPointer(types.double)
    jitted = f if hasattr(f, "py_func") else numba.njit(f, error_model="numpy")
    make = _density_callback if inputs == 1 else _product_callback
    try:
        # once more with arrays that are read-only: a function that writes into x does not compile
        numba.njit(jitted.py_func).compile((fixed,) * inputs + (types.float64[::1],) * in_place)
        code = numba.cfunc(types.intc(types.uintp, pointer, pointer, pointer, types.voidptr))(
            make(jitted, d, in_place, numba.carray))
    except (numba.core.errors.NumbaError, TypeError) as error:
        raise ArgumentError(f"Numba cannot compile this as {form}, with float64 arrays of which x is read-only:\n"
                            f"{error}") from error
    return LowLevelCallable(code.ctypes), code


def _density_callback(jitted: Any, d: int, in_place: bool, carray: Any) -> Callable[..., int]:
    def fill(size: Any, x: Any, value: Any, gradient: Any, context: Any) -> int:
        value[0] = jitted(carray(x, (d,)), carray(gradient, (d,)))
        return 0

    def copy(size: Any, x: Any, value: Any, gradient: Any, context: Any) -> int:
        found, slope = jitted(carray(x, (d,)))
        if slope.size == d:  # else it stays unwritten, which is seen
            for i in range(d):
                gradient[i] = slope[i]
        value[0] = found
        return 0

    return fill if in_place else copy


def _product_callback(jitted: Any, d: int, in_place: bool, carray: Any) -> Callable[..., int]:
    def fill(size: Any, x: Any, p: Any, product: Any, context: Any) -> int:
        jitted(carray(x, (d,)), carray(p, (d,)), carray(product, (d,)))
        return 0

    def copy(size: Any, x: Any, p: Any, product: Any, context: Any) -> int:
        found = jitted(carray(x, (d,)), carray(p, (d,)))
        if found.size == d:
            for i in range(d):
                product[i] = found[i]
        return 0

    return fill if in_place else copy
