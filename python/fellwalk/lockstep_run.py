"""A run of chains in lockstep: blocks of all chains together, written before the next is begun.

Everything happens in this process and thread. The record and the result are those of any run; the state of all chains
stands with the first of them.
"""

from __future__ import annotations

import time
from typing import Any

import numpy as np
from numpy.typing import ArrayLike

from fellwalk.chain import Block
from fellwalk.density import Density, brief
from fellwalk.errors import ArgumentError, AuditError, OtherModelError
from fellwalk.interrupts import Interrupts
from fellwalk.lockstep import Lockstep
from fellwalk.progress import Progress
from fellwalk.record import Record
from fellwalk.result import Result
from fellwalk.run_record import ChainResult, end_record, kept_where, record_block
from fellwalk.settings import Settings
from fellwalk.settled import LOCKSTEP_MAGIC, Settled
from fellwalk.work import Done, Live

__all__ = ["LockstepRun", "check_form", "check_rows", "first_lockstep_states", "states_of"]

_BLOCK_SECONDS = 0.5
_BLOCK_BYTES = 64_000_000
_WRITE_SHARE = 20  # blocks are made so long that writing them takes at most one part in so many


def states_of(chains: Lockstep) -> list[bytes]:
    """One state a chain, as records keep them: that of all with the first, a mark with the others."""
    return [chains.state] + [LOCKSTEP_MAGIC] * (len(chains.x) - 1)


def first_lockstep_states(density: Density, settings: Settings, points: np.ndarray, seed: int, scale: ArrayLike | None,
                          settled: Settled | None) -> list[bytes]:
    """The states that a run in lockstep begins with, at the points (chains, dimension)."""
    part = None if settled is None else settled.for_chain(0, density.dimension)
    return states_of(Lockstep._with_settings(density, settings, points, np.random.SeedSequence(seed, spawn_key=(0,)),
                                             scale, part))


def check_form(density: Density, plan: dict[str, Any], path: str) -> None:
    """A run in lockstep goes on in lockstep. Errors: OtherModelError."""
    if plan.get("lockstep", False) != (density.batch is not None):
        made, needed = ("in lockstep", "with") if plan.get("lockstep") else ("of single chains", "without")
        raise OtherModelError(f"{path}: this run is {made}; go on with a density made {needed} batch=True")


def check_rows(density: Density, states: list[bytes]) -> None:
    """Is the last row of a batch what its point gives alone, but for rounding? Errors: AuditError."""
    chains = Lockstep.from_state(density, states[0])
    value, gradient = density(chains.x[-1])
    size = float(np.abs(gradient).max())
    if not (abs(value - chains.value[-1]) <= 1e-6 * (1.0 + abs(value))
            and np.abs(gradient - chains.g[-1]).max() <= 1e-6 * (1.0 + size)):
        raise AuditError(f"at {brief(chains.x[-1])}, the last of {len(chains.x)} points, the function gives the "
                         f"log density {float(chains.value[-1])!r} in a batch and {value!r} alone (or its gradient "
                         "differs): each row must depend on its own point only. Look for sums over the batch")


class _Inside(Live):
    """Is a block in hand? Then a second Ctrl-C may raise, as nothing else is half done."""

    busy = False

    def inside_density(self) -> bool:
        return self.busy


class LockstepRun:
    """One run from where its chains stand until all draws are made, or it is stopped; arguments as for `Driver`."""

    def __init__(self, plan: dict[str, Any], density: Density, states: list[bytes], parts: list[ChainResult],
                 executor: object, record: Record | None, told: Progress, seconds: float | None) -> None:
        if executor not in (None, "here"):
            raise ArgumentError("chains in lockstep advance in this process and thread, as one call serves all of "
                                "them; leave executor= out")
        self.plan, self.states, self.parts, self.record, self.told = plan, states, parts, record, told
        self.chains = Lockstep.from_state(density, states[0])
        self.limit = None if seconds is None else time.monotonic() + seconds
        self.live = _Inside()
        self.interrupts = Interrupts(self.live, told.say, lambda: None, True)
        self.pace, self.writing = 0.0, 0.0  # seconds that a transition and the last writing took

    def go(self) -> Result:
        """Run. Raises what the density raised, KeyboardInterrupt after a second Ctrl-C, RecordError."""
        error: BaseException | None = None
        try:
            with self.interrupts.installed():
                while error is None and self._left() and not self._stopping():
                    error = self._block()
                self.interrupts.announce()
        finally:
            self.told.close()
        return self._end(error)

    def _left(self) -> int:
        return int(self.plan["keep"]) - self.parts[0].count("keep")

    def _stopping(self) -> bool:
        return self.interrupts.count > 0 or (self.limit is not None and time.monotonic() >= self.limit)

    def _length(self) -> int:
        """Transitions of the next block: for about so long, and no more than memory is for."""
        seconds = max(_BLOCK_SECONDS, _WRITE_SHARE * self.writing)
        if self.limit is not None:
            seconds = min(seconds, max(0.01, 0.5 * (self.limit - time.monotonic())))
        count = int(seconds / self.pace) if self.pace else 4
        most = _BLOCK_BYTES // (16 * self.chains.x.size) + 1
        count = max(1, min(count, most))
        return min(count, self._left()) if self.chains.settled else count

    def _block(self) -> BaseException | None:
        begun = time.perf_counter()
        self.live.busy = True
        try:
            blocks = self.chains.block(self._length(), gradients=self.plan["gradients"])
        except KeyboardInterrupt as stop:  # the states stay those of the last block's end
            return stop
        finally:
            self.live.busy = False
        spent = time.perf_counter() - begun
        if len(blocks[0]):
            self.pace = spent / len(blocks[0])
            self._keep(blocks, spent)
        return blocks[0].error

    def _keep(self, blocks: list[Block], spent: float) -> None:
        summary = self.chains.summary
        states = states_of(self.chains)
        done = [Done(c, block, states[c], spent / len(blocks), summary) for c, block in enumerate(blocks)]
        if self.record:
            begun = time.perf_counter()
            self.record.append_blocks([record_block(d, self.parts[d.chain]) for d in done])
            self.writing = time.perf_counter() - begun
        self.states = states
        for d in done:
            part = self.parts[d.chain]
            part.add(d)
            self.told.update(d.chain, d.block.phase, part.count(d.block.phase), d.block.facts)

    def _end(self, error: BaseException | None) -> Result:
        done = not self._left()
        why = "" if done else self.interrupts.name if self.interrupts.count else (
            "an exception" if error else "the time given had passed")
        path = self.record.path if self.record else ""
        result = Result(self.plan, self.parts, states=self.states, ended=why, path=path)
        if error is not None and not (isinstance(error, KeyboardInterrupt) and self.interrupts.count > 0):
            phase = "keeping draws" if self.chains.settled else "settling"
            error.add_note(f"fellwalk: raised while {len(self.parts)} chains in lockstep were {phase}, at transition "
                           f"{self.chains.transitions + 1}; {kept_where(path)}.")
        end_record(self.record, why, result, error)
        return result
