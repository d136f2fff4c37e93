"""The user's log density: what is called, how, and how often."""

import threading
from collections.abc import Callable, Mapping, Sequence
from typing import Any, SupportsIndex, cast

import numpy as np
from numpy.typing import ArrayLike, NDArray

from fellwalk._core import SENTENCES, UNWRITTEN, MappedTarget, Target, is_compiled, is_unwritten, reals
from fellwalk.batch import OnePoint
from fellwalk.errors import (
    ArgumentError,
    CallbackStop,
    DensityError,
    FellwalkError,
    InfiniteDensityError,
    Interrupted,
    NotWrittenError,
    ShapeError,
)
from fellwalk.motions import whole
from fellwalk.parameters import ByName, Parameters

__all__ = ["Density"]

_counting = threading.Lock()  # held for a few additions, which an interpreter without a lock of its own could mix up
Function = Callable[..., object] | tuple[object, ...]  # a scipy.LowLevelCallable is a tuple


def as_vector(value: object, dimension: int, what: str) -> NDArray[np.float64]:
    """A new contiguous float64 array of shape (dimension,), or a sentence."""
    try:
        array = np.array(reals(value))
    except (TypeError, ValueError, OverflowError):
        raise ShapeError(f"{what} must be an array of real numbers; it is {value!r:.60}") from None
    if array.shape != (dimension,):
        raise ShapeError(f"{what} must have shape ({dimension},); it has shape {array.shape}")
    return array


class Density:
    """A log density (unnormalised) with its gradient, on R^dimension.

    function: one of
        ``f(x) -> (log density, gradient)``, x and gradient of shape (dimension,);
        ``f(x, gradient) -> log density`` writing into gradient, with ``in_place=True``;
        a ``scipy.LowLevelCallable`` with the signature
        ``int (size_t, const double *, double *, double *, void *)``: dimension, x, value, gradient, user data;
        it returns 0, or > 0 outside the support, or < 0 to stop.
        Outside the support Python functions return ``-inf`` (the gradient is then not looked at).
        x is lent for the call: its contents are undefined afterwards unless the function keeps the array.
        with ``batch=True``, ``f(x) -> (log densities, gradients)`` of many points at once, x and gradients of shape
        (m, dimension), log densities (m,): `fellwalk.run` then lets all chains advance together, one call a step.
    hessian_product: optional ``f(x, p) -> H(x) p``, or a LowLevelCallable with the signature
        ``int (size_t, const double *, const double *, double *, void *)``: dimension, x, p, product, user data.
    names: one name a coordinate; ``x[0]``, ``x[1]``, ... when left out.
    start: a position (dimension,) inside the support, for runs that are given none.

    In place of the dimension, `fellwalk.Parameters`: all functions then see natural values, flat and inside their
    bounds, and give the log density of these (no log-Jacobian: it is added here) and its gradient with respect to
    these; ``start`` is natural too, flat or a dict. The density itself, its chains and its positions live in the free
    coordinates (dimension,) of the parameters; ``names`` are those of the natural values, ``coordinates`` those of the
    free ones. With ``by_name=True`` Python functions see and give dicts of shaped arrays: f(values) -> (log density,
    gradients), in place f(values, gradients) -> log density, and hessian_product(values, directions) -> products.

    Attributes ``gradients`` and ``products`` count the calls made so far in this process, whether or not what they
    were made for came to an end: an abandoned transition, a start that was refused, a call that raised.
    """

    def __init__(
        self,
        function: Function,
        dimension: int | Parameters,
        *,
        in_place: bool = False,
        hessian_product: Function | None = None,
        names: Sequence[str] | None = None,
        start: ArrayLike | Mapping[str, ArrayLike] | None = None,
        by_name: bool = False,
        batch: bool = False,
    ) -> None:
        if not callable(function) and not is_compiled(function):
            raise ArgumentError(f"the log density must be a function or a scipy.LowLevelCallable; it is "
                                f"{function!r:.60}")
        if hessian_product is not None and not callable(hessian_product) and not is_compiled(hessian_product):
            raise ArgumentError(f"hessian_product must be a function or a scipy.LowLevelCallable; it is "
                                f"{hessian_product!r:.60}")
        if batch and (is_compiled(function) or in_place or by_name):
            raise ArgumentError("batch=True is for functions f(x) -> (log densities (m,), gradients (m, dimension)) of "
                                "points (m, dimension); in_place=, by_name= and compiled ones are for single points")
        self.batch = function if batch else None
        self.function = OnePoint(function) if batch else function
        self.in_place = bool(in_place)
        self.hessian_product = hessian_product
        self.parameters = dimension if isinstance(dimension, Parameters) else None
        if self.parameters is None:
            self.dimension = self.natural_size = whole("dimension", dimension, 1, 2**40)
            self.names = self.coordinates = _checked_names(names, self.dimension)
        else:
            self.dimension, self.natural_size = self.parameters.dimension, self.parameters.size
            self.names, self.coordinates = self.parameters.names, self.parameters.coordinates
            if names is not None:
                raise ArgumentError("Parameters bring their own names; leave names= out")
            start = self.parameters.join(start) if isinstance(start, Mapping) else start
        self.start = None if start is None else as_vector(start, self.natural_size, "start")
        if self.parameters is not None and self.start is not None:
            self.parameters.free(self.start)  # a start on a bound is said here
        if by_name:
            self._see_by_name()
        self.model: str | None = None  # where the command found it, so that a record can name it
        self.made_by: tuple[Callable[..., object], tuple[object, ...]] | None = None
        self.gradients = 0
        self.products = 0
        self.target()  # a wrong signature is said here, not at the first chain

    @classmethod
    def factory(cls, function: Callable[..., "Density"], *args: object) -> "Density":
        """The density that ``function(*args)`` makes, sent to worker processes as that call.

        Every worker makes the call once for itself; so compiled functions, open files and data too large to send can
        be used there. The function and its arguments must be picklable; it is called here as well.
        Errors: ArgumentError when it does not give a Density; and whatever it raises.
        """
        if not callable(function):
            raise ArgumentError(f"factory needs a function that makes a fellwalk.Density; it got {function!r:.60}")
        made = function(*args)
        if not isinstance(made, Density):
            raise ArgumentError(f"the function given to factory must return a fellwalk.Density; it returned "
                                f"{type(made).__name__}")
        made.made_by = function, args
        module, name = getattr(function, "__module__", None), getattr(function, "__qualname__", "<>")
        if made.model is None and not args and module not in (None, "__main__") and "<" not in name:
            made.model = f"{module}:{name}"
        return made

    def _see_by_name(self) -> None:
        if self.parameters is None:
            raise ArgumentError("by_name=True needs Parameters in place of the dimension")
        if is_compiled(self.function) or (self.hessian_product is not None and is_compiled(self.hessian_product)):
            raise ArgumentError("by_name=True is for Python functions; a compiled one sees the flat natural values")
        self.function = ByName(_python(self.function), self.parameters, "fill" if self.in_place else "call")
        if self.hessian_product is not None:
            self.hessian_product = ByName(_python(self.hessian_product), self.parameters, "multiply")

    def target(self) -> Target:
        """A fresh set of call arrays around the functions; each chain needs its own."""
        if self.parameters is None:
            return Target(self.function, self.dimension, in_place=self.in_place, product=self.hessian_product)
        natural = MappedTarget(self.function, self.natural_size, in_place=self.in_place, product=self.hessian_product)
        return natural.see_through(self.parameters.maps())

    @property
    def compiled(self) -> bool:
        """Is the log density called without Python?"""
        return is_compiled(self.function)

    def __call__(self, x: ArrayLike) -> tuple[float, NDArray[np.float64]]:
        """(log density, gradient) at x, shape (dimension,); -inf outside the support, the gradient is then NaN.

        Errors: NotWrittenError; DensityError when a compiled function asks to stop; and what the function raises.
        """
        point = as_vector(x, self.dimension, "the position")
        gradient = np.full(self.dimension, UNWRITTEN)
        target = self.target()
        try:
            answer, value = target.evaluate(point, gradient)
        finally:
            self.count(target.gradients)
        if answer < 0:
            raise DensityError(f"the compiled log density returned {answer} (it asked to stop) at {brief(point)}")
        if answer > 0:
            return -np.inf, gradient
        if is_unwritten(value) or (np.isfinite(value) and any(map(is_unwritten, gradient))):
            raise stopped(-2, "the call", self, point)
        return value, gradient

    def product(self, x: ArrayLike, p: ArrayLike) -> NDArray[np.float64]:
        """H(x) p, shape (dimension,).

        Errors: NotWrittenError; DensityError when a compiled function refuses; and what the function raises.
        """
        point, vector = as_vector(x, self.dimension, "the position"), as_vector(p, self.dimension, "p")
        out = np.full(self.dimension, UNWRITTEN)
        target = self.target()
        try:
            answer = target.multiply(point, vector, out)
        finally:
            self.count(target.gradients, target.products)
        if answer:
            raise DensityError(f"the compiled Hessian product returned {answer} at {brief(point)}")
        if any(map(is_unwritten, out)):
            raise stopped(-2, "the Hessian product", self, point)
        return out

    def count(self, gradients: int, products: int = 0) -> None:
        """Add calls that were made; chains in several threads may share a density."""
        with _counting:
            self.gradients += gradients
            self.products += products

    def __reduce_ex__(self, protocol: SupportsIndex) -> str | tuple[Any, ...]:
        if self.made_by is not None:
            function, args = self.made_by
            return Density.factory, (function, *args)
        return super().__reduce_ex__(protocol)

    def __getstate__(self) -> dict[str, object]:
        return {**self.__dict__, "gradients": 0, "products": 0}

    def __repr__(self) -> str:
        kind = "compiled" if self.compiled else "in place" if self.in_place else "(value, gradient)"
        return f"<Density of {self.dimension} coordinates, {kind}{', Hessian product' if self.hessian_product else ''}>"


def _python(function: Function) -> Callable[..., object]:
    """A function known not to be a compiled one, as what it is."""
    return cast(Callable[..., object], function)


def _checked_names(names: Sequence[str] | None, dimension: int) -> list[str]:
    if names is None:
        return [f"x[{i}]" for i in range(dimension)]
    if isinstance(names, str):
        raise ArgumentError(f"names must be a list of {dimension} names; it is one string, {names!r}")
    found = [str(name) for name in names]
    if len(found) != dimension:
        raise ArgumentError(f"there are {len(found)} names for {dimension} coordinates; give one name a coordinate")
    if len(set(found)) != dimension:
        twice = next(name for name in found if found.count(name) > 1)
        raise ArgumentError(f"the name {twice!r} stands more than once; names must differ")
    return found


def stopped(status: int, where: str, density: Density, x: NDArray[np.float64]) -> FellwalkError:
    """The exception that belongs to a status < 0 of the core; x: (dimension,), where the function was called."""
    if status == -4:
        return Interrupted(f"{where}: the transition in hand was abandoned; the chain is as it was before it")
    at = f"{where}, at {brief(x if density.parameters is None else density.parameters.natural(x))}"
    if status == -1:
        return CallbackStop(f"{at}: the compiled function returned a negative code (it asked to stop)")
    if status == -2:
        return NotWrittenError(f"{at}: {_not_written(density)}")
    if status == -3:
        return InfiniteDensityError(f"{at}: the log density is plus infinity there, so the function is not the "
                                    "logarithm of a density: look for a division by 0 or a logarithm of 0 with the "
                                    "wrong sign")
    return FellwalkError(f"{where}: {SENTENCES.get(status, f'status {status}')}")


def _not_written(density: Density) -> str:
    by_hand = density.in_place and not density.compiled
    lost = "an exception inside compiled code is often lost this way: call the function once from Python there"
    if not by_hand:
        return f"the compiled function returned 0 but did not write all of its results; {lost}"
    said = "the in-place function returned a log density but did not write all of the gradient it was given"
    if density.hessian_product is not None and is_compiled(density.hessian_product):
        return f"{said}, or the compiled Hessian product did not write its result; {lost}"
    return f"{said}; set every entry at every call"


def brief(x: NDArray[np.float64], most: int = 6) -> str:
    """A position in one line: at most the first few coordinates."""
    shown = ", ".join(f"{value:.6g}" for value in x[:most])
    return f"[{shown}{', ...' if len(x) > most else ''}]"
