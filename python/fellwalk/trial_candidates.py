"""The candidates of a trial, and how their chains are made from settled ones."""

from __future__ import annotations

from collections.abc import Generator
from dataclasses import dataclass, field, replace
from typing import TypeVar

import numpy as np
from numpy.typing import NDArray

from fellwalk.chain import Block
from fellwalk.failing import harmful
from fellwalk.fresh import Fresh
from fellwalk.motions import Isokinetic, Jittered, Lagrangian, Leapfrog, Motion, NoUTurn, Path
from fellwalk.settings import Settings
from fellwalk.settled import SettledChain

__all__ = ["LEADER", "Ask", "Candidate", "Contender", "Work", "candidates_for", "fresh_chain", "with_rank"]


@dataclass(frozen=True)
class Candidate:
    """A way to move. rank: learned directions used, at most; None: all that settling found."""

    name: str
    motion: Motion
    path: Path
    rank: int | None = None


LEADER = Candidate("leapfrog", Leapfrog(), NoUTurn())


def candidates_for(dimension: int, directions: int) -> list[Candidate]:
    """All candidates; the first is the leader, whose chains have settled by the open plan. The others stand in the
    order in which they are left out where a budget is too small for all, the last first."""
    found = [LEADER]
    if directions > 0:
        found.append(Candidate("leapfrog, rank 0", Leapfrog(), NoUTurn(), 0))
    found.append(Candidate("leapfrog, length found", Leapfrog(), Jittered("auto")))
    if dimension > 1:
        found.append(Candidate("isokinetic", Isokinetic(), NoUTurn()))
    found.append(_bent(0.3))
    if dimension > 1:
        found.append(Candidate("isokinetic, length found", Isokinetic(), Jittered("auto")))
    found.append(Candidate("leapfrog, halved", Leapfrog(halvings=6), NoUTurn()))
    if directions > 1:
        found.append(Candidate("leapfrog, rank 1", Leapfrog(), NoUTurn(), 1))
    found += [_bent(bend) for bend in (0.1, 1.0)]
    if dimension > 1:
        found.append(Candidate("isokinetic, halved", Isokinetic(halvings=6), NoUTurn()))
    return found


def _bent(bend: float) -> Candidate:
    return Candidate(f"lagrangian, bend {bend:g}", Lagrangian(bend=bend), NoUTurn())


def with_rank(part: SettledChain, rank: int | None) -> SettledChain:
    """The settled part with its `rank` strongest directions. What the others said of single coordinates, the ratio of
    their variance to that of their gradient, goes into the scale."""
    if rank is None or rank >= len(part.variances):
        return part
    order = np.argsort(-np.abs(np.log(part.variances)))
    kept, left = order[:rank], order[rank:]
    squares = part.directions[left] ** 2
    rest = np.maximum(1.0 - squares.sum(axis=0), 0.0)
    wide, steep = rest + part.variances[left] @ squares, rest + (1.0 / part.variances[left]) @ squares
    return replace(part, scale=part.scale * np.sqrt(wide / steep), directions=part.directions[kept],
                   variances=part.variances[kept])


@dataclass(frozen=True, eq=False)
class Ask:
    """A block wanted of a chain of the trial: of a new one (`fresh`), or of the one that `slot` (number of the
    candidate, number of the chain) holds; at most `most` transitions."""

    slot: tuple[int, int]
    most: int
    fresh: Fresh | None = None
    gradients: bool = False


Found = TypeVar("Found")
Work = Generator[list[Ask], list[Block], Found]  # asks for blocks that may be made side by side, and is sent them


@dataclass(eq=False)
class Contender:
    """A candidate with its draws, and what it has spent: `spent` in all, `drawing` for the draws.

    number: of the candidate; unbegun: of its chains, None where the chain exists; positions: where they stand;
    accepted: sum of acceptance over the `moved` transitions since its step size was last set.
    """

    candidate: Candidate
    number: int
    unbegun: list[Fresh | None] = field(default_factory=list)
    draws: list[list[NDArray[np.float64]]] = field(default_factory=list)
    spent: float = 0.0
    drawing: float = 0.0
    transitions: int = 0
    failed: int = 0
    rounds: int = 0
    positions: list[NDArray[np.float64]] = field(default_factory=list)
    accepted: float = 0.0
    moved: int = 0

    @property
    def acceptance(self) -> float:
        """Mean since the step size was last set."""
        return self.accepted / max(1, self.moved)

    @property
    def chains(self) -> int:
        """How many it has."""
        return len(self.unbegun)

    def add(self, fresh: Fresh | None, position: NDArray[np.float64]) -> None:
        """One chain more, which stands there."""
        self.unbegun.append(fresh)
        self.draws.append([])
        self.positions.append(position)

    def begin_again(self, fresh: list[Fresh]) -> None:
        """The same chains with another step size."""
        self.unbegun = [*fresh]
        self.accepted, self.moved = 0.0, 0

    def ask(self, most: int, *, gradients: bool = False) -> list[Ask]:
        """A block of each chain."""
        asks = [Ask((self.number, c), most, fresh, gradients) for c, fresh in enumerate(self.unbegun)]
        self.unbegun = [None] * self.chains
        return asks

    def take(self, block: Block, chain: int, cost: float, picked: NDArray[np.int64] | None) -> None:
        """Add a block of draws of one chain, or of each draw only the coordinates `picked`."""
        self.see(block, chain, cost)
        self.drawing += cost
        self.transitions += len(block)
        self.failed += int(np.count_nonzero(harmful(block.facts["failure"])))
        self.draws[chain].append(block.draws if picked is None else block.draws[:, picked])

    def see(self, block: Block, chain: int, cost: float) -> None:
        """Where a block has moved a chain, what it has accepted and what it cost."""
        self.spent += cost
        self.moved += len(block)
        self.accepted += float(block.facts["acceptance"].sum())
        self.positions[chain] = block.draws[-1]

    def only(self, picked: NDArray[np.int64]) -> None:
        """Forget the other coordinates of the draws."""
        self.draws = [[rows[:, picked] for rows in parts] for parts in self.draws]

    def stacked(self) -> NDArray[np.float64]:
        """(chains, draws, coordinates), as many draws as the shortest chain has."""
        joined = [np.concatenate(parts) for parts in self.draws]
        n = min(len(rows) for rows in joined)
        return np.stack([rows[:n] for rows in joined])


def fresh_chain(candidate: Candidate, part: SettledChain, start: NDArray[np.float64], seed: tuple[int, tuple[int, ...]],
                acceptance: float) -> Fresh:
    """A chain of the candidate with the base metric, step size, beta and number of steps of the settled part."""
    return Fresh(Settings(motion=candidate.motion, path=candidate.path, acceptance=acceptance), part, start, seed)
