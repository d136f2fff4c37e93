"""Starting points: one for every chain, inside the support."""

import numpy as np
from numpy.typing import ArrayLike, NDArray

from fellwalk.density import Density, as_vector, brief
from fellwalk.errors import ShapeError, StartError

__all__ = ["starting_points"]

_TRIES = 30


def starting_points(
    density: Density, starts: ArrayLike, chains: int, rng: np.random.Generator
) -> NDArray[np.float64]:
    """(chains, dimension) starting points from one point (dimension,) or from one point a chain (chains, dimension).

    The rule for one point: the first chain starts there; the others are drawn normal around it with standard
    deviation 1/|gradient| in each coordinate (1 where the gradient is 0), the deviation being halved until the log
    density and gradient are finite and the log density is not more than 10 + 2 dimension below the given point's;
    after 30 halvings a StartError says so. Points given one a chain are taken as they are.
    """
    given = np.asarray(starts, dtype=np.float64) if not isinstance(starts, np.ndarray) else starts
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
    slope = np.abs(gradient)
    spread = np.where(slope > 0, 1 / np.where(slope > 0, slope, 1.0), 1.0)
    return np.array([first] + [_near(density, first, value, spread, rng) for _ in range(chains - 1)])


def _near(density: Density, first: NDArray[np.float64], value: float, spread: NDArray[np.float64],
          rng: np.random.Generator) -> NDArray[np.float64]:
    direction = rng.standard_normal(len(first))
    lowest = value - 10 - 2 * len(first)
    for halvings in range(_TRIES):
        x = first + spread * direction / 2.0**halvings
        if not np.all(np.isfinite(x)):
            continue
        found, gradient = density(x)
        if np.isfinite(found) and found >= lowest and np.all(np.isfinite(gradient)):
            return x
    raise StartError(f"no second starting point was found near {brief(first)}: {_TRIES} points on a line towards it "
                     "were outside the support or far below it in log density; give one starting point a chain")
