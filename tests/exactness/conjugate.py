"""The conjugate model of conjugate.c: its two loops, and the exact means of functions of its joint law."""

import ctypes
from functools import cache

import numpy as np
from scipy.special import digamma, polygamma

from . import build
from .combinations import HALVINGS, RANKS, Combination, motions, paths, plan

SHAPE, RATE, CENTRE, WEIGHT, DATA = PRIOR = (5.0, 3.0, 0.5, 1.0, 4.0)
SCALE = np.array([0.2, 0.3])
DIRECTIONS = np.array([[0.6, 0.8], [-0.8, 0.6]])
LAMBDA = np.array([1.7, 0.6])
# The joint law is walked with long steps, so that wrong weights show; ranks need nearly independent draws.
JOINT_STEP, RANK_STEP, BETA = 0.9, 0.5, 0.3
# Far out in the tail of a posterior, where some replicates start, an isokinetic step of 0.5 is never accepted.
ISOKINETIC_RANK_STEP = 0.3


@cache
def chosen() -> list[Combination]:
    """Every motion with every path and turn test; halvings and rank take turns."""
    kinds = [(*motion, *path) for motion in motions() for path in paths()]
    turns = [(HALVINGS[i % len(HALVINGS)], RANKS[i % len(RANKS)]) for i in range(len(kinds))]
    return [Combination(*kind, *turn, "conjugate") for kind, turn in zip(kinds, turns, strict=True)]


def _plan(c: Combination, step: float):
    return plan(c, step, BETA, SCALE, DIRECTIONS, LAMBDA)


def joint(c: Combination, chains: int, rounds: int, mutation: build.Mutation | None = None) -> np.ndarray:
    """States (chains, rounds, 4): mu, log tau, mean of the data, sum of squares about it."""
    states, prior = np.full((chains, rounds, 4), np.nan), np.array(PRIOR)
    loop = build.harness(mutation).successive_conditional
    how, kept = _plan(c, JOINT_STEP)
    number = ctypes.c_uint64(int.from_bytes(str(c).encode()) % 2**61)
    sizes = ctypes.c_size_t(chains), ctypes.c_size_t(rounds)
    prior_at, states_at = ctypes.c_void_p(prior.ctypes.data), ctypes.c_void_p(states.ctypes.data)
    status = loop(ctypes.byref(how), prior_at, *sizes, number, states_at)
    del kept
    assert status == 0, f"{c}: the core refused with status {status}"
    return states


def functions(states: np.ndarray) -> dict[str, tuple[np.ndarray, float]]:
    """Name -> (values (chains, rounds), exact mean under the joint law of parameters and data)."""
    mu, log_tau, mean, squares = np.moveaxis(states, -1, 0)
    tau, away = np.exp(log_tau), mu - CENTRE
    centre, variance = digamma(SHAPE) - np.log(RATE), polygamma(1, SHAPE)
    own = RATE / (SHAPE - 1.0)  # E[1/tau]
    error = mean - mu
    return {
        "mu": (away, 0.0),
        "mu^2": (away**2, own / WEIGHT),
        "log tau": (log_tau - centre, 0.0),
        "(log tau)^2": ((log_tau - centre) ** 2, float(variance)),
        "data mean": (mean - CENTRE, 0.0),
        "mu * data mean": (away * (mean - CENTRE), own / WEIGHT),
        "log of squares": (np.log(squares) - np.log(2.0) - digamma(0.5 * (DATA - 1.0)) + centre, 0.0),
        "tau * squares": (tau * squares, DATA - 1.0),
        "tau * mu^2": (tau * away**2, 1.0 / WEIGHT),
        "tau * error^2": (tau * error**2, 1.0 / DATA),
        "error * mu": (error * away, 0.0),
    }


def ranks(
    c: Combination, replicates: int, lead: int, draws: int, thin: int, mutation: build.Mutation | None = None
) -> np.ndarray:
    """Ranks 0..draws of the truth, (replicates, 3): mu, log tau, posterior density."""
    found, prior = np.full((replicates, 3), -1, dtype=np.int32), np.array(PRIOR)
    loop = build.harness(mutation).truth_ranks
    how, kept = _plan(c, ISOKINETIC_RANK_STEP if c.motion == "isokinetic" else RANK_STEP)
    number = ctypes.c_uint64(int.from_bytes(f"ranks {c}".encode()) % 2**61)
    sizes = [ctypes.c_size_t(size) for size in (replicates, lead, draws, thin)]
    prior_at, found_at = ctypes.c_void_p(prior.ctypes.data), ctypes.c_void_p(found.ctypes.data)
    status = loop(ctypes.byref(how), prior_at, *sizes, number, found_at)
    del kept
    assert status == 0, f"{c}: the core refused with status {status}"
    return found
