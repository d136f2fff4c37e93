"""What settling has found, to be used again: base metric, step size, strength of the bend."""

from __future__ import annotations

import hashlib
from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from fellwalk.density import Density
from fellwalk.errors import ArgumentError, SettleError

if TYPE_CHECKING:
    from fellwalk.chain import Chain

__all__ = ["Settled", "SettledChain"]

LOCKSTEP_MAGIC = b"fellwalk lockstep 1\n"  # how the states of chains in lockstep begin


@dataclass(frozen=True, eq=False)
class SettledChain:
    """The settled part of one chain.

    scale: (dimension,) variances; directions: (k, dimension), orthonormal in coordinates scaled by sqrt(scale);
    variances: (k,), along the directions in those coordinates. beta is None where the motion has none of its own;
    steps is the most of a jittered path, 0 for other paths.
    """

    scale: NDArray[np.float64]
    directions: NDArray[np.float64]
    variances: NDArray[np.float64]
    step_size: float
    beta: float
    steps: int = 0

    @classmethod
    def of(cls, chain: Chain) -> SettledChain:
        """The settled part of a chain. Errors: SettleError while it has not settled."""
        found = chain.summary
        if not found["settled"] or not found["step_size"] > 0:
            raise SettleError("a chain has not settled yet, so it has no settled part to use again")
        return cls(*chain.base_metric, found["step_size"], found["beta"], found["steps"])

    def to_bytes(self) -> bytes:
        """All numbers as little-endian float64, in the order of the fields."""
        last = np.array([self.step_size, self.beta, float(self.steps)])
        numbers = [self.scale, self.directions.ravel(), self.variances, last]
        return np.concatenate(numbers).astype("<f8").tobytes()


@dataclass(frozen=True, eq=False)
class Settled:
    """The settled parts of all chains of a run; `hash` names the numbers."""

    chains: tuple[SettledChain, ...]

    @classmethod
    def of_states(cls, states: Sequence[bytes], dimension: int) -> Settled:
        """From the states of chains. Errors: SettleError while one has not settled."""
        from fellwalk.chain import Chain  # a chain is made from a settled part, and a settled part from a chain

        def unused(*_: object) -> None:
            raise AssertionError("reading a state calls no density")

        if states and states[0].startswith(LOCKSTEP_MAGIC):
            from fellwalk.lockstep import Lockstep

            chains = Lockstep.from_state(Density(unused, dimension, batch=True), states[0])
            return cls((chains.settled_part,) * len(states))
        density = Density(unused, dimension, hessian_product=unused)
        return cls(tuple(SettledChain.of(Chain.from_state(density, state)) for state in states))

    @cached_property
    def hash(self) -> str:
        """BLAKE2b of all numbers, 16 bytes in hexadecimal."""
        digest = hashlib.blake2b(digest_size=16)
        for chain in self.chains:
            digest.update(chain.to_bytes())
        return digest.hexdigest()

    def for_chain(self, number: int, dimension: int) -> SettledChain:
        """The part that chain `number` of another run takes; parts are used in turn."""
        part = self.chains[number % len(self.chains)]
        if len(part.scale) != dimension:
            raise ArgumentError(f"the settled part is of {len(part.scale)} coordinates; this density has {dimension}")
        return part
