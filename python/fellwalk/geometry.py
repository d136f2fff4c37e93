"""The shape that the chains have met: bend along the draws, a slice of the log density, a path over it.

G0^-1 = s^1/2 (I + E (lambda - 1) E') s^1/2 is the inverse base metric of a chain, g the gradient of the log density,
G = G0 + beta g g' the metric and L = 1 + beta g' G0^-1 g the factor by which it stretches lengths along the gradient.
"""

from __future__ import annotations

import time
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from fellwalk import autocorrelation as ac
from fellwalk._core import Engine, Stream, count_disagreements
from fellwalk.density import Density
from fellwalk.errors import OtherModelError
from fellwalk.settings import Settings
from fellwalk.settled import SettledChain

if TYPE_CHECKING:
    from fellwalk.result import Result

__all__ = ["Line", "Slice", "agrees", "inverse_sizes", "plane_metric", "seconds_in_density", "worst_pair"]

_SECONDS = 4.0  # about what the slice may take of the model's time
_FINEST, _COARSEST = 61, 13  # points along a side of the slice
_LONGEST = 255  # steps of the path shown
_MOST_MIXING = 5000  # coordinates looked at for the pair that mixes worst


def base_strengths(part: SettledChain) -> tuple[NDArray[np.float64], ...]:
    """(square roots of the scale, directions (k, d), variances (k,)) of the base metric of one chain."""
    return np.sqrt(part.scale), part.directions.reshape(-1, len(part.scale)), part.variances


def inverse_sizes(part: SettledChain, gradients: NDArray[np.float64]) -> NDArray[np.float64]:
    """q = g' G0^-1 g of gradients (n, d), shape (n,)."""
    root, directions, variances = base_strengths(part)
    white = gradients * root
    return np.asarray(np.einsum("nd,nd->n", white, white) + ((white @ directions.T) ** 2) @ (variances - 1.0))


def plane_metric(part: SettledChain, pair: list[int], gradient: NDArray[np.float64] | None = None,
                 beta: float = 0.0) -> NDArray[np.float64]:
    """The metric G = G0 + beta g g' in the plane of one or two coordinates, the others held: (len(pair), len(pair))."""
    root, directions, variances = base_strengths(part)
    ends = directions[:, pair]
    found = np.eye(len(pair)) + (ends.T * (1.0 / variances - 1.0)) @ ends
    found = found / np.outer(root[pair], root[pair])
    return np.asarray(found if gradient is None else found + beta * np.outer(gradient[pair], gradient[pair]))


def velocity(part: SettledChain, gradient: NDArray[np.float64], beta: float,
             rng: np.random.Generator) -> NDArray[np.float64]:
    """A velocity of the law N(0, G^-1) that a path begins with, shape (d,)."""
    root, directions, variances = base_strengths(part)

    def half(w: NDArray[np.float64]) -> NDArray[np.float64]:  # I + E (lambda^1/2 - 1) E'
        return w + ((np.sqrt(variances) - 1.0) * (directions @ w)) @ directions

    u, z = half(root * gradient), rng.standard_normal(len(root))
    size = float(u @ u)
    if beta > 0 and size > 0:
        z = z + (1.0 / np.sqrt(1.0 + beta * size) - 1.0) * (u @ z) / size * u
    return np.asarray(root * half(z))


def worst_pair(result: Result) -> list[int]:
    """The one or two free coordinates with the least effective size, the worst first."""
    draws = result.free_draws
    d = min(draws.shape[2], _MOST_MIXING)
    columns = np.ascontiguousarray(np.moveaxis(draws[:, :, :d], 2, 0))
    with np.errstate(all="ignore"):
        worth = ac.effective_size(ac.split(ac.rank_normalise(columns)))
    moving = np.ptp(columns.reshape(d, -1), axis=1) > 0
    order = np.argsort(np.where(moving, np.nan_to_num(worth, nan=1.0), np.inf), kind="stable")
    return [int(k) for k in order[: min(2, int(moving.sum()))]]


def agrees(result: Result, density: Density) -> None:
    """Errors: OtherModelError unless `density` gives the log density that the run has kept for its last draw."""
    if density.dimension != result.plan["dimension"]:
        raise OtherModelError(f"the model has {density.dimension} coordinates, the run had {result.plan['dimension']}")
    kept = float(result.facts["log_density"][0, -1])
    now, _ = density(result.free_draws[0, -1])
    if not np.isclose(now, kept, rtol=1e-7, atol=1e-7):
        raise OtherModelError(f"at the last draw of chain 1 the model has log density {now:.9g}, the run had "
                              f"{kept:.9g}: it is another model, or other data")


def seconds_in_density(result: Result, density: Density) -> float:
    """Seconds that one log density with its gradient takes when called from the core; the least of up to twelve
    measurements over draws of the run (a call may cost more at one place than at another)."""
    draws = result.free_draws.reshape(-1, density.dimension)
    points = np.ascontiguousarray(draws[:: max(1, len(draws) // 16)][:16])
    target = density.target()
    values, gradients = np.zeros(len(points)), np.zeros_like(points)
    rounds, taken = 1, []
    for _ in range(12):
        begun = time.perf_counter()
        count_disagreements(target, points, values, gradients, rounds)
        seconds = time.perf_counter() - begun
        taken.append(seconds / (rounds * len(points)))
        if seconds > 0.1 or len(taken) == 12:
            break
        rounds = min(rounds * (2 if seconds > 0.004 else 16), 10**6) if seconds < 0.02 else rounds
    return float(min(taken))


@dataclass(frozen=True)
class Line:
    """A path through all coordinates: positions and gradients (states, d); status 0 or why it ended early."""

    positions: NDArray[np.float64]
    gradients: NDArray[np.float64]
    status: int
    step_size: float
    beta: float
    part: SettledChain

    @classmethod
    def of(cls, result: Result, density: Density, chain: int, start: NDArray[np.float64]) -> Line:
        """From `start`, with the settings and the settled part of a chain, as many steps as its middle path has."""
        part = result.settled.chains[chain]
        settings = Settings.from_json(result.settings)
        fixed = Settings(motion=settings.motion, settle=0, step_size=part.step_size, beta=max(part.beta or 0.0, 0.0))
        target = density.target()
        engine = Engine(target, Stream(np.random.SeedSequence(0)), fixed.core())
        engine.set_base(part.scale, part.directions, part.variances)
        beta = part.beta if settings.motion.name == "lagrangian" else 0.0
        _, gradient = density(start)
        v = velocity(part, gradient, beta, np.random.default_rng([result.seed, 3]))
        steps = int(min(max(np.median(result.facts["steps"][chain]), 2), _LONGEST))
        rows = [np.full((steps + 1, width), np.nan) for width in (density.dimension, density.dimension, 3)]
        status, done, *_ = engine.integrate(start.copy(), v.copy(), part.step_size, steps, *rows)
        density.count_calls(target.gradients, target.products)
        positions = rows[0][: done + 1]
        return cls(positions, np.array([density(x)[1] for x in positions]), status, part.step_size, beta, part)


@dataclass(frozen=True)
class Slice:
    """The log density over the plane (or line) of the coordinates `pair` through `centre`, the others held there.

    axes: one or two arrays of places; values: less the largest one found, (len(axes[1]), len(axes[0])) or
    (len(axes[0]),); -inf outside the support. chain: of the centre.
    """

    pair: list[int]
    centre: NDArray[np.float64]
    axes: list[NDArray[np.float64]]
    values: NDArray[np.float64]
    chain: int

    @classmethod
    def of(cls, result: Result, density: Density, pair: list[int], seconds: float) -> Slice | None:
        """Through the most central draw; None when even a coarse one would take too long. seconds: of one call."""
        budget = _SECONDS / max(seconds, 1e-7)
        side = int(min(_FINEST, np.sqrt(budget) if len(pair) == 2 else budget))
        if side < _COARSEST:
            return None
        draws = result.free_draws
        flat = draws.reshape(-1, draws.shape[2])
        chain, n = divmod(_central(flat), draws.shape[1])
        centre = draws[chain, n].copy()
        axes = []
        for k in pair:
            low, high = np.quantile(flat[:, k], [0.005, 0.995])
            margin = 0.1 * (high - low)
            axes.append(np.linspace(low - margin, high + margin, side if len(pair) == 2 else 4 * side))
        target = density.target()
        gradient = np.empty(density.dimension)
        values = []
        for places in (np.array(p) for p in np.stack(np.meshgrid(*axes), axis=-1).reshape(-1, len(pair))):
            point = centre.copy()
            point[pair] = places
            answer, value = target.evaluate(point, gradient)
            values.append(value if answer == 0 and np.isfinite(value) else -np.inf)
        density.count_calls(target.gradients, 0)
        shape = tuple(len(axis) for axis in reversed(axes))
        found = np.array(values).reshape(shape)
        return cls(pair, centre, axes, found - found.max(), chain)


def _central(flat: NDArray[np.float64]) -> int:
    """The draw nearest to the medians, with every coordinate in units of its spread."""
    with np.errstate(all="ignore"):
        apart = np.nan_to_num((flat - np.median(flat, axis=0)) / flat.std(axis=0), nan=0.0, posinf=0.0, neginf=0.0)
    return int(np.argmin(np.einsum("nd,nd->n", apart, apart)))
