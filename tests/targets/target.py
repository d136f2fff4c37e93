"""What a test target is: compiled callbacks, exact draws and the known laws of some of its coordinates."""

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from functools import wraps
from typing import Any

import numpy as np
from scipy import LowLevelCallable

from . import _build

Array = np.ndarray


@dataclass(frozen=True)
class Marginal:
    """What is known of one coordinate of a target, or of one function of it.

    `of` is a coordinate number or a function taking draws (..., dimension) to values (...). `law` has `cdf` and `ppf`
    (None when only numbers are known). The `*_error` fields bound the error of the reference numbers themselves, where
    they are Monte Carlo results; 0 means that they are exact to rounding.
    """

    of: int | Callable[[Array], Array]
    law: Any = None
    mean: float | None = None
    sd: float | None = None
    quantiles: Mapping[float, float] = field(default_factory=dict)
    source: str = "textbook"
    mean_error: float = 0.0
    sd_error: float = 0.0
    quantile_error: float = 0.0

    def values(self, draws: Array) -> Array:
        """The coordinate or function of draws (..., dimension), shape (...)."""
        return self.of(draws) if callable(self.of) else draws[..., self.of]


class Target:
    """A log density in C with its gradient and exact Hessian product, and what is known of it.

    `density` and `hessian_product` are ``scipy.LowLevelCallable`` objects; each keeps `context` (the array of doubles
    that its C function reads) alive by itself. `exact_draws(n, rng)` gives independent draws (n, dimension), or
    `exact_draws` is None. `marginals` maps a name to a :class:`Marginal`.
    """

    density: LowLevelCallable
    hessian_product: LowLevelCallable

    def __init__(
        self,
        name: str,
        dimension: int,
        c_name: str,
        context: Array | None,
        exact_draws: Callable[[int, np.random.Generator], Array] | None = None,
        marginals: Mapping[str, Marginal] | None = None,
        source: str = "textbook",
    ) -> None:
        self.name, self.dimension, self.source = name, int(dimension), source
        self.context = context
        self.exact_draws = exact_draws
        self.marginals = dict(marginals or {})
        self.density = _build.callable_with_context(c_name, _build.DENSITY_SIGNATURE, context)
        self.hessian_product = _build.callable_with_context(f"{c_name}_product", _build.PRODUCT_SIGNATURE, context)
        self._density = _build.function(c_name)
        self._product = _build.function(f"{c_name}_product")
        self._context = None if context is None else context.ctypes.data
        self._recipe: tuple[Callable[..., Target], tuple, dict] | None = None

    def __repr__(self) -> str:
        return f"<Target {self.name}>"

    def __reduce__(self) -> tuple:
        if self._recipe is None:
            raise TypeError(f"{self!r} was not made by one of the constructors, so it cannot be pickled.")
        return _rebuild, self._recipe

    def value_gradient(self, x: Array) -> tuple[float, Array]:
        """(log density, gradient (dimension,)) at x; (-inf, zeros) outside the support."""
        x = self._point(x)
        value, gradient = np.full(1, np.nan), np.zeros(self.dimension)
        code = self._density(self.dimension, x.ctypes.data, value.ctypes.data, gradient.ctypes.data, self._context)
        if code < 0:
            raise RuntimeError(f"{self!r} said stop (code {code}).")
        return (float(value[0]), gradient) if code == 0 else (-np.inf, np.zeros(self.dimension))

    def hessian_times(self, x: Array, p: Array) -> Array:
        """The Hessian of the log density at x times p, shape (dimension,); NaN outside the support."""
        x, p = self._point(x), self._point(p)
        product = np.full(self.dimension, np.nan)
        code = self._product(self.dimension, x.ctypes.data, p.ctypes.data, product.ctypes.data, self._context)
        if code < 0:
            raise RuntimeError(f"{self!r} said stop (code {code}).")
        return product

    def _point(self, x: Array) -> Array:
        x = np.ascontiguousarray(x, dtype=float)
        if x.shape != (self.dimension,):
            raise ValueError(f"{self!r} takes points of shape ({self.dimension},), not {x.shape}.")
        return x


def _rebuild(build: Callable[..., Target], args: tuple, kwargs: dict) -> Target:
    return build(*args, **kwargs)


def constructor(build: Callable[..., Target]) -> Callable[..., Target]:
    """Lets the targets that `build` returns be pickled: another process builds them again from the same arguments."""

    @wraps(build)
    def wrapped(*args: Any, **kwargs: Any) -> Target:
        target = build(*args, **kwargs)
        target._recipe = (wrapped, args, kwargs)
        return target

    return wrapped


def context_of(*parts: Any) -> Array:
    """The parts, numbers or arrays, one after another in a float64 array."""
    return np.concatenate([np.asarray(part, dtype=float).ravel() for part in parts])


def some_coordinates(dimension: int) -> list[int]:
    """All coordinates up to 8, else the first four and the last four: marginals of huge targets stay few."""
    return list(range(dimension)) if dimension <= 8 else [0, 1, 2, 3, *range(dimension - 4, dimension)]
