"""How a candidate of a trial finds its step size and the length of its paths, over a base metric that stands."""

from __future__ import annotations

import itertools
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from fellwalk.chain import Block
from fellwalk.motions import Jittered, NoUTurn
from fellwalk.settled import SettledChain
from fellwalk.trial_candidates import Ask, Candidate, Work, fresh_chain

__all__ = ["Tuner", "needed", "steepness"]

# The logarithm of the step size moves by gain * (acceptance - target) after each block (Robbins & Monro 1951); the mean
# of the later half is taken. Gains from 3 down: a block that rejects all takes the step down to a tenth.
_GAINS = (3.0, 2.4, 1.9, 1.5, 1.2, 1.0, 0.8, 0.65)
_BLOCK = 6  # transitions of a block
_SHORT = 4  # doublings of no-U-turn paths while the step size is sought: whole ones may take hundreds of steps
_PILOT = 20  # transitions of a pilot of one length
_MOST_STEPS = 512
_FIRST_REACH = np.pi  # a half period of a normal target


def needed(per_draw: float) -> float:
    """Gradients that finding a step size takes about, where a draw on whole paths takes so many."""
    return _BLOCK * len(_GAINS) * (1.0 / _BLOCK + min(per_draw, 2.0**_SHORT - 1.0))


def steepness(part: SettledChain, gradients: NDArray[np.float64]) -> float:
    """Median of g' G0^-1 g over gradients (n, dimension): what turns bend into beta."""
    scaled = gradients * np.sqrt(part.scale)
    along = scaled @ part.directions.T
    return float(np.median((scaled**2).sum(axis=-1) + (along**2) @ (part.variances - 1.0)))


@dataclass
class Tuner:
    """Works on one chain of a candidate from `position`, for at most about `allowance`. After `go`: `part`, `spent`,
    and `position`. slot, seed: of the chain."""

    slot: tuple[int, int]
    candidate: Candidate
    part: SettledChain
    position: NDArray[np.float64]
    seed: tuple[int, tuple[int, ...]]
    target: float
    product_cost: float
    allowance: float
    spread: NDArray[np.float64]
    spent: float = 0.0

    def __post_init__(self) -> None:
        self._numbers = itertools.count()
        self._first = self.part.step_size

    def go(self) -> Work[bool]:
        """False where the allowance was not enough."""
        if isinstance(self.candidate.path, Jittered):
            self._reach(_FIRST_REACH)
        if not (yield from self._find_step()):
            return False
        return not isinstance(self.candidate.path, Jittered) or (yield from self._find_length())

    @property
    def capped(self) -> bool:
        """Does it take steps far shorter than leapfrog's for the same acceptance? On whole paths, which are longer than
        those of the search, there may be no such step at all."""
        return self.part.step_size < self._first / 6.0

    def _block(self, transitions: int, *, short: bool = False) -> Work[Block]:
        entropy, key = self.seed
        candidate, part = self.candidate, self.part
        if short and isinstance(candidate.path, NoUTurn):
            candidate = replace(candidate, path=NoUTurn(min(_SHORT, candidate.path.doublings)))
        elif short:
            part = replace(part, steps=min(part.steps, 2**_SHORT))
        seed = entropy, (*key, next(self._numbers))
        fresh = fresh_chain(candidate, part, self.position, seed, self.target)
        (block,) = yield [Ask(self.slot, transitions, fresh)]
        self.position = block.draws[-1]
        self.spent += 1.0 + float(block.facts["gradients"].sum())
        self.spent += self.product_cost * float(block.facts["products"].sum())
        return block

    def _find_step(self) -> Work[bool]:
        steps = []
        reach = self.part.steps * self.part.step_size
        for gain in _GAINS:
            block = yield from self._block(_BLOCK, short=True)
            rate = float(block.facts["acceptance"].mean())
            steps.append(np.log(self.part.step_size))
            self._step(float(np.exp(steps[-1] + gain * (rate - self.target))), reach)
            if self.spent > self.allowance:
                return False
        self._step(float(np.exp(np.mean([*steps[len(steps) // 2 :], np.log(self.part.step_size)]))), reach)
        return True

    def _step(self, size: float, reach: float) -> None:
        self.part = replace(self.part, step_size=size)
        if reach > 0.0:
            self._reach(reach)

    def scale_step(self, factor: float) -> None:
        """Another step size; jittered paths keep their length."""
        reach = self.part.steps * self.part.step_size
        self._step(self.part.step_size * factor, reach)

    def _reach(self, reach: float) -> None:
        steps = min(max(1, round(reach / self.part.step_size)), _MOST_STEPS)
        self.part = replace(self.part, steps=steps)

    def _find_length(self) -> Work[bool]:
        """By doubling, on effective draws per gradient of pilots, as settling does (length.c)."""
        best, factor, at, worth = 0.0, 2.0, _FIRST_REACH, 0.0
        for number in range(8):
            reach = at * (factor if number else 1.0)
            if number and not 1.5 * self.part.step_size <= reach <= _MOST_STEPS * self.part.step_size:
                break
            self._reach(reach)
            worth = yield from self._pilot()
            better = worth > best
            if better:
                best, at = worth, reach
            elif number == 1:
                factor = 0.5
            elif number:
                break
            if self.spent > self.allowance:
                break
        self._reach(at)
        return self.spent <= 2.0 * self.allowance

    def _pilot(self) -> Work[float]:
        before = self.position
        block = yield from self._block(_PILOT)
        x = np.concatenate([before[None], block.draws])
        centre = 0.5 * (np.diff(x, axis=0) ** 2).mean(axis=0) / self.spread
        squares = (x - x.mean(axis=0)) ** 2
        square = 0.25 * (np.diff(squares, axis=0) ** 2).mean(axis=0) / self.spread**2
        shares = np.sort(np.clip(np.minimum(centre, square), 1e-6, 1.0))
        share = shares[: (len(shares) + 7) // 8].mean()
        return float(share / (2.0 - share) / block.facts["gradients"].sum())
