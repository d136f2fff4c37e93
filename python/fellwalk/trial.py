"""Trials: which motion and path suits a density, tried on it under an equal budget of gradients."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike

from fellwalk.density import Density
from fellwalk.errors import ArgumentError
from fellwalk.motions import real, whole
from fellwalk.starts import starting_points
from fellwalk.trial_result import Entry, Trial
from fellwalk.trial_rounds import Competition, settle_leaders

__all__ = ["Entry", "Trial", "trial"]


def trial(
    density: Density,
    starts: ArrayLike | None = None,
    *,
    budget: float = 20_000,
    chains: int = 4,
    seed: int | None = None,
    acceptance: float = 0.8,
    product_cost: float = 1.0,
) -> Trial:
    """Try motions and paths on a density, and settle chains of the best one.

    The chains settle first, with the leapfrog motion on no-U-turn paths by the open plan, as a run would; that is not
    part of the budget. All candidates share the base metrics so learned, find their own step size, and then draw in
    rounds of equal cost: after each the better half goes on, with the chains it has. What counts is the least number
    of effective draws per cost, over centre and tails of every coordinate, measured against the draws of all candidates
    together, so that a chain that moves well inside a part of the target counts for little. The leapfrog motion, over
    the diagonal alone where that may be as good, stays unless another is worth 1.1 times as much, and by more than 1.28
    standard errors; a candidate is ruled out where it visited a tail too rarely, or where more paths ended in failed
    steps.

    starts, chains, seed, acceptance: as in `run`. budget: in gradients; a Hessian product counts as product_cost of
    them. No clock decides anything. Errors: as `run`.
    """
    if not isinstance(density, Density):
        raise ArgumentError(f"the first argument must be a fellwalk.Density; it is {type(density).__name__}: wrap your "
                            "function as fellwalk.Density(function, dimension)")
    chains = whole("chains", chains, 1, 2**20)
    seed = int(np.random.SeedSequence().entropy) if seed is None else whole("seed", seed, 0, 2**128)
    acceptance = real("acceptance", acceptance, 0.0, 0.9999)
    budget = real("budget", budget, 0.0, 1e15)
    product_cost = real("product_cost", product_cost, 0.0, 1e6, include=True)
    if starts is None and density.start is None and density.parameters is None:
        raise ArgumentError("this density has no start of its own; give starts: a point (dimension,) in the support")
    points = starting_points(density, density.start if starts is None else starts, chains,
                             np.random.default_rng([seed, 1]))
    leaders = settle_leaders(density, points, seed, acceptance)
    return Competition(density, leaders, budget, seed, acceptance, product_cost).go()
