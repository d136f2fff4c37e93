"""Starting points: one for every chain, inside the support."""

from collections.abc import Callable, Mapping, Sequence
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from fellwalk.chain import Chain
from fellwalk.density import Density, as_vector, brief
from fellwalk.errors import ArgumentError, ShapeError, StartError
from fellwalk.parameters import Parameters
from fellwalk.settings import Settings
from fellwalk.settled import Settled

__all__ = ["first_states", "starting_points"]

Starts = ArrayLike | Mapping[str, ArrayLike] | Sequence[Mapping[str, ArrayLike]] | Callable[[np.random.Generator], Any]
_HALVINGS = 60


def starting_points(
    density: Density, starts: Starts | None, chains: int, rng: np.random.Generator
) -> NDArray[np.float64]:
    """(chains, dimension) starting points, in the coordinates the chains move in, from one point (dimension,) or from
    one point a chain (chains, dimension). None: the density's own start, or with parameters drawn ones.

    The rule for one point: the first chain starts there; the others are drawn normal around it, with standard
    deviation 1/|gradient| in each coordinate, but at most 1 or the coordinate's own size (near a mode the gradient says
    nothing of the width). The deviations are halved until the log density and gradient are finite and the log density
    is not more than 10 + 2 dimension below the given point's; after 60 halvings, or when nothing is left of them, a
    StartError says so. Points given one a chain are taken as they are.
    Errors: ArgumentError where there is no start at all; StartError; ShapeError.
    """
    starts = density.start if starts is None else starts
    if starts is None and density.parameters is None:
        raise ArgumentError("this density has no start of its own; give starts: a point (dimension,) in the support")
    if density.parameters is not None:
        starts = free_starts(density, density.parameters, starts, chains, rng)
    try:
        given = np.asarray(starts, dtype=np.float64)
    except (TypeError, ValueError):
        raise ShapeError(f"starts must be numbers, one point (dimension,) or one a chain (chains, dimension); they are "
                         f"{starts!r:.60}") from None
    if given.ndim == 2:
        if given.shape != (chains, density.dimension):
            raise ShapeError(f"starting points one a chain must have shape ({chains}, {density.dimension}); they have "
                             f"shape {given.shape}")
        return np.array([as_vector(row, density.dimension, f"the starting point of chain {c + 1}")
                         for c, row in enumerate(given)])
    first = as_vector(given, density.dimension, "the starting point")
    value, gradient = density(first) if np.all(np.isfinite(first)) else (np.nan, first)
    if not (np.isfinite(value) and np.all(np.isfinite(gradient))):
        raise StartError(f"the log density or its gradient is not finite at the starting point {brief(first)} (log "
                         f"density {value}); start inside the support, where both are finite")
    with np.errstate(divide="ignore", over="ignore"):
        spread = np.minimum(1 / np.abs(gradient), np.maximum(1.0, np.abs(first)))
    return np.array([first] + [_near(density, first, value, spread, rng) for _ in range(chains - 1)])


def _near(density: Density, first: NDArray[np.float64], value: float, spread: NDArray[np.float64],
          rng: np.random.Generator) -> NDArray[np.float64]:
    direction = rng.standard_normal(len(first))
    lowest = value - 10 - 2 * len(first)
    for halvings in range(_HALVINGS):
        x = first + spread * direction / 2.0**halvings
        if not np.all(np.isfinite(x)):
            continue
        if np.array_equal(x, first):
            break  # a chain that begins where another does tells nothing new
        found, gradient = density(x)
        if np.isfinite(found) and found >= lowest and np.all(np.isfinite(gradient)):
            return x
    raise StartError(f"no second starting point was found near {brief(first)}: all points tried on a "
                     "line towards it were outside the support or far below it in log density; give one starting point "
                     "a chain")


def free_starts(
    density: Density, parameters: Parameters, starts: Starts | None, chains: int, rng: np.random.Generator
) -> NDArray[np.float64]:
    """Free coordinates of starts given in natural values: flat, a dict of shaped values, one of these a chain, or a
    function ``starts(rng)`` that draws one (from the prior, say). None: drawn normal in the free coordinates, with
    standard deviation 1, then 1/2, 1/4, ... until log density and gradient are finite.
    """
    if callable(starts):
        return np.array([_free_point(parameters, starts(rng), f" that starts drew for chain {c + 1}")
                         for c in range(chains)])
    if starts is None:
        return np.array([_drawn(density, rng) for _ in range(chains)])
    points: Any = starts
    by_name = isinstance(points, list | tuple) and all(isinstance(one, Mapping) for one in points)
    if (by_name and len(points) == chains) or np.ndim(points) == 2:
        return np.array([_free_point(parameters, one, f" of chain {c + 1}") for c, one in enumerate(points)])
    return _free_point(parameters, starts, "")


def _free_point(parameters: Parameters, natural: Any, whose: str) -> NDArray[np.float64]:
    try:
        return parameters.free(natural)
    except StartError as error:
        raise StartError(f"the starting point{whose}: {error}") from None


def _drawn(density: Density, rng: np.random.Generator) -> NDArray[np.float64]:
    for halvings in range(_HALVINGS):
        x = rng.standard_normal(density.dimension) / 2.0**halvings
        value, gradient = density(x)
        if np.isfinite(value) and np.all(np.isfinite(gradient)):
            return x
    raise StartError(f"no starting point was found: {_HALVINGS} points drawn in the free coordinates have a log "
                     "density or gradient that is not finite; give starts in natural values")


def first_states(density: Density, settings: Settings, points: NDArray[np.float64], seed: int,
                 scale: ArrayLike | None = None, settled: Settled | None = None) -> list[bytes]:
    """States of chains that stand at these points and have not moved. Errors: StartError, which names the chain."""
    states = []
    for c, point in enumerate(points):
        part = None if settled is None else settled.for_chain(c, density.dimension)
        try:
            chain = Chain._with_settings(density, settings, point, np.random.SeedSequence(seed, spawn_key=(c,)), scale,
                                         part)
        except StartError as error:
            raise StartError(f"chain {c + 1} of {len(points)}: {error}") from None
        states.append(chain.state)
    return states
