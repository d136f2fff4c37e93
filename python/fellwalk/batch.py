"""Log densities that are called for many points at once."""

from __future__ import annotations

from collections.abc import Callable
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from fellwalk._core import Maps, reals
from fellwalk.errors import ArgumentError, DensityError, InfiniteDensityError

if TYPE_CHECKING:
    from fellwalk.density import Density

__all__ = ["OnePoint", "evaluate"]

Array = NDArray[np.float64]


class OnePoint:
    """A function of points (m, d) as one of a single point (d,). Pickles when the function does."""

    def __init__(self, function: Callable[..., Any]) -> None:
        self.function = function

    def __call__(self, x: Array) -> tuple[float, Array]:
        """(log density, gradient (d,)) at x."""
        values, gradients = _checked(self.function(x[None, :]), 1, len(x))
        return float(values[0]), gradients[0]


def evaluate(density: Density, y: Array, maps: Maps | None) -> tuple[Array, Array]:
    """(log densities (m,), gradients (m, dimension)) at the points y (m, dimension), in the coordinates chains move in.

    maps: those of the density's parameters. A log density that is not finite is minus infinity or NaN; its gradient is
    then of no meaning. The calls are counted, one a point.
    Errors: DensityError; InfiniteDensityError; what the function raises.
    """
    if density.batch is None:
        raise ArgumentError("this density is not one of batches: make it with batch=True")
    density.gradients += len(y)
    if maps is None:
        values, gradients = _checked(density.batch(y), *y.shape)
    else:
        x, log_jacobians, outside = maps.apply_all(y)
        if np.all(outside):
            return np.full(len(y), -np.inf), np.zeros_like(y)
        if np.any(outside):  # the function sees no value outside its bounds
            x[outside] = x[np.argmin(outside)]
        values, slopes = _checked(density.batch(x), *x.shape)
        values = np.where(outside, -np.inf, values + log_jacobians)
        gradients = maps.pull_all(y, np.ascontiguousarray(slopes))
    if not np.add.reduce(values) < np.inf and np.any(values == np.inf):
        row = int(np.argmax(values))
        raise InfiniteDensityError(f"in row {row} of the batch, at {y[row]}: the log density is plus infinity there, "
                                   "so the function is not the logarithm of a density: look for a division by 0 or a "
                                   "logarithm of 0 with the wrong sign")
    return values, np.ascontiguousarray(gradients)


def _checked(answer: object, m: int, d: int) -> tuple[Array, Array]:
    """What the function gave, as float64 arrays of the right shapes; no copy is made of such arrays."""
    if not (isinstance(answer, tuple) and len(answer) == 2):
        raise DensityError(f"a function of a batch of {m} points must return (log densities, gradients); it gave "
                           f"{type(answer).__name__} {answer!r:.60}")
    try:
        values, gradients = np.asarray(answer[0]), np.asarray(answer[1])
        values = values if values.dtype == np.float64 else reals(values)
        gradients = gradients if gradients.dtype == np.float64 else reals(gradients)
    except (TypeError, ValueError, OverflowError):
        raise DensityError("a function of a batch must return arrays of real numbers") from None
    if values.shape != (m,) or gradients.shape != (m, d):
        raise DensityError(f"for points of shape ({m}, {d}) the function must return log densities of shape ({m},) and "
                           f"gradients of shape ({m}, {d}); it gave {values.shape} and {gradients.shape}")
    return values, gradients
