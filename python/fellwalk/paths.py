"""Single paths by hand, from a given position and velocity."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from fellwalk._core import SENTENCES, Engine, Stream
from fellwalk.density import Density, as_vector, stopped
from fellwalk.errors import ArgumentError
from fellwalk.motions import Jittered, Leapfrog, Motion, check_fits, real, whole
from fellwalk.settings import Settings

__all__ = ["Trajectory", "integrate"]


@dataclass(frozen=True)
class Trajectory:
    """The end of one path.

    position, velocity: (dimension,), in the coordinates that chains move in (with `fellwalk.Parameters` the free ones;
    ``density.parameters.natural(path.position)`` maps them). log_jacobian: of the map from start to end, in (x, v).
    log_ratio: energy at the start minus energy at the end plus log_jacobian: the log of what an accept test compares.
    status: 0, or the code of the step that failed (position and velocity are then the given ones), said in `sentence`.
    gradients, products: calls made. trace: with ``trace=True``, a dict of arrays with one row a state, start
    included: position, velocity (steps + 1, dimension), log_density, energy, log_jacobian (steps + 1,).
    """

    position: NDArray[np.float64]
    velocity: NDArray[np.float64]
    log_density: float
    log_jacobian: float
    log_ratio: float
    status: int
    steps: int
    gradients: int
    products: int
    trace: dict[str, NDArray[np.float64]] | None = None

    @property
    def sentence(self) -> str:
        """The status in words."""
        return SENTENCES[self.status]


def integrate(
    density: Density,
    x: ArrayLike,
    v: ArrayLike,
    *,
    motion: Motion | None = None,
    step_size: float,
    steps: int,
    scale: ArrayLike | None = None,
    beta: float = 0.0,
    trace: bool = False,
) -> Trajectory:
    """Move (x, v), both of shape (dimension,), by `steps` steps of `step_size`; a negative step goes back in time.

    x and v are in the coordinates that chains move in: with `fellwalk.Parameters` in free coordinates, not in natural
    values (``density.parameters.free(values)`` gives x). velocity is dx / dt; log densities include the log-Jacobian.
    scale: diagonal of the inverse base metric, shape (dimension,), default ones; beta: strength of the rank-one term
    of the Lagrangian motion's metric, G = diag(1/scale) + beta g g'. Raises what the density raises.
    """
    if not isinstance(density, Density):
        raise ArgumentError(f"the first argument must be a fellwalk.Density; it is {type(density).__name__}: wrap your "
                            "function as fellwalk.Density(function, dimension)")
    d = density.dimension
    position, velocity = as_vector(x, d, "x").copy(), as_vector(v, d, "v").copy()
    given = position.copy(), velocity.copy()
    size = real("step_size", step_size, -1e300, 1e300, include=True)
    if size == 0.0:
        raise ArgumentError("step_size must not be 0; a negative one goes back in time")
    count = whole("steps", steps, 0, 2**40)
    settings = Settings(motion=motion or Leapfrog(), path=Jittered(), settle=0, beta=beta)
    check_fits(settings.motion, d, density.hessian_product is not None)
    target = density.target()
    engine = Engine(target, Stream(np.random.SeedSequence(0)), settings.core())
    diagonal = np.ones(d) if scale is None else as_vector(scale, d, "scale")
    if engine.set_base(diagonal) != 0:
        raise ArgumentError("scale must hold finite numbers > 0 (variances, one a coordinate)")
    rows = [np.full((count + 1, width), np.nan) for width in (d, d, 3)] if trace else []
    try:
        status, done, value, log_jacobian, log_ratio, gradients, products = engine.integrate(
            position, velocity, size, count, *rows)
    finally:
        density.count(target.gradients, target.products)
    if status < 0:
        raise stopped(status, f"after {done} of {count} steps", density, engine.failed_at())
    if status > 0:
        position, velocity = given
    found = None
    if trace:
        names = ("log_density", "energy", "log_jacobian")
        found = {"position": rows[0][: done + 1], "velocity": rows[1][: done + 1],
                 **{name: rows[2][: done + 1, i] for i, name in enumerate(names)}}
    return Trajectory(position, velocity, value, log_jacobian, log_ratio, status, done, gradients, products, found)
