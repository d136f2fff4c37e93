"""Trials: which motion and path suits a density, tried on it under an equal budget of gradients."""

from __future__ import annotations

from concurrent.futures import Executor
from dataclasses import replace

import numpy as np
from numpy.typing import ArrayLike

from fellwalk.chain import Chain
from fellwalk.density import Density
from fellwalk.driver import Driver
from fellwalk.errors import ArgumentError
from fellwalk.motions import real, whole
from fellwalk.pools import Workers
from fellwalk.progress import choose_progress
from fellwalk.run_record import ChainResult
from fellwalk.settings import Settings
from fellwalk.starts import first_states, starting_points
from fellwalk.trial_result import Entry, Trial
from fellwalk.trial_rounds import TrialTerms
from fellwalk.work import Check

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
    executor: Executor | str | None = None,
    progress: object = None,
) -> Trial:
    """Try motions and paths on a density, and settle chains of the best one.

    The chains settle first, with the leapfrog motion on no-U-turn paths by the open plan, as a run would; that is not
    part of the budget. All candidates share the base metrics so learned, find their own step size, and then draw in
    rounds of equal cost: after each the better half goes on, with the chains it has. What counts is the least number
    of effective draws per cost, over centre and tails of every coordinate, measured against the draws of all candidates
    together, so that a chain that moves well inside a part of the target counts for little. The leapfrog motion, over
    the diagonal alone where that may be as good, stays unless another is worth 1.1 times as much, and by more than 1.28
    standard errors; a candidate is ruled out where it visited a tail too rarely, or where more paths ended in failed
    steps. Where nothing can be told (chains that do not agree, few effective draws, noise) a plain way stays. Only as
    many candidates take part as the budget can tune. The winner's step size is corrected by what its chains accept.

    starts, chains, seed, acceptance, executor, progress: as in `run`. budget: in gradients; a Hessian product counts as
    product_cost of them. No clock decides anything. Ctrl-C ends it without a result (KeyboardInterrupt); a trial inside
    a `run` with a record goes on from where it stood. Errors: as `run`.
    """
    if not isinstance(density, Density):
        raise ArgumentError(f"the first argument must be a fellwalk.Density; it is {type(density).__name__}: wrap your "
                            "function as fellwalk.Density(function, dimension)")
    chains = whole("chains", chains, 1, 2**20)
    seed = int(np.random.SeedSequence().entropy) if seed is None else whole("seed", seed, 0, 2**128)
    acceptance = real("acceptance", acceptance, 0.0, 0.9999)
    budget = real("budget", budget, 0.0, 1e15)
    product_cost = real("product_cost", product_cost, 0.0, 1e6, include=True)
    points = starting_points(density, starts, chains, np.random.default_rng([seed, 1]))
    settings = Settings(acceptance=acceptance)
    states = first_states(density, settings, points, seed)
    plan = {"settings": settings.to_json(), "names": density.names, "dimension": density.dimension, "chains": chains,
            "keep": 0, "seed": seed, "gradients": False}
    check = Check.of(density, points[0])
    with Workers(executor, density, chains, budget / 10.0, check) as workers:
        told = choose_progress(progress, 0, [0] * chains)
        told.say(workers.why)
        driver = Driver(plan, states, [ChainResult() for _ in states], workers, None, told, None,
                        terms=TrialTerms(seed, acceptance, 0, budget, product_cost))
        driver.go()
    if driver.trial is None:
        raise KeyboardInterrupt
    return replace(driver.trial, chains=tuple(Chain.from_state(density, state) for state in driver.states))
