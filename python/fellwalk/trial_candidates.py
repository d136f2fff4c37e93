"""The candidates of a trial, and how their chains are made from settled ones."""

from __future__ import annotations

from dataclasses import dataclass, field, replace

import numpy as np
from numpy.typing import NDArray

from fellwalk.chain import Block, Chain
from fellwalk.density import Density
from fellwalk.failing import harmful
from fellwalk.motions import Isokinetic, Jittered, Lagrangian, Leapfrog, Motion, NoUTurn, Path
from fellwalk.settings import Settings
from fellwalk.settled import SettledChain

__all__ = ["Candidate", "Contender", "candidates_for", "new_chain", "with_rank"]


@dataclass(frozen=True)
class Candidate:
    """A way to move. rank: learned directions used, at most; None: all that settling found."""

    name: str
    motion: Motion
    path: Path
    rank: int | None = None


LEADER = Candidate("leapfrog", Leapfrog(), NoUTurn())


def candidates_for(dimension: int, directions: int) -> list[Candidate]:
    """All candidates; the first is the leader, whose chains have settled by the open plan."""
    found = [LEADER]
    if directions > 0:
        found.append(Candidate("leapfrog, rank 0", Leapfrog(), NoUTurn(), 0))
    if directions > 1:
        found.append(Candidate("leapfrog, rank 1", Leapfrog(), NoUTurn(), 1))
    found.append(Candidate("leapfrog, length found", Leapfrog(), Jittered("auto")))
    found.append(Candidate("leapfrog, halved", Leapfrog(halvings=6), NoUTurn()))
    found += [Candidate(f"lagrangian, bend {bend:g}", Lagrangian(bend=bend), NoUTurn()) for bend in (0.1, 0.3, 1.0)]
    if dimension > 1:
        found.append(Candidate("isokinetic", Isokinetic(), NoUTurn()))
        found.append(Candidate("isokinetic, length found", Isokinetic(), Jittered("auto")))
        found.append(Candidate("isokinetic, halved", Isokinetic(halvings=6), NoUTurn()))
    return found


def with_rank(part: SettledChain, rank: int | None) -> SettledChain:
    """The settled part with its `rank` strongest directions. What the others said of single coordinates, the ratio of
    their variance to that of their gradient, goes into the scale."""
    if rank is None or rank >= len(part.variances):
        return part
    order = np.argsort(-np.abs(np.log(part.variances)))
    kept, left = order[:rank], order[rank:]
    squares = part.directions[left] ** 2
    wide = 1.0 + (part.variances[left] - 1.0) @ squares
    steep = 1.0 + (1.0 / part.variances[left] - 1.0) @ squares
    return replace(part, scale=part.scale * np.sqrt(wide / steep), directions=part.directions[kept],
                   variances=part.variances[kept])


@dataclass(eq=False)
class Contender:
    """A candidate with its chains and draws, and what it has spent: `spent` in all, `drawing` for the draws."""

    candidate: Candidate
    chains: list[Chain] = field(default_factory=list)
    draws: list[list[NDArray[np.float64]]] = field(default_factory=list)
    spent: float = 0.0
    drawing: float = 0.0
    transitions: int = 0
    failed: int = 0
    rounds: int = 0

    def take(self, block: Block, number: int, cost: float) -> None:
        """Add a block of draws of chain `number`."""
        self.spent += cost
        self.drawing += cost
        self.transitions += len(block)
        self.failed += int(np.count_nonzero(harmful(block.facts["failure"])))
        self.draws[number].append(block.draws)

    def stacked(self) -> NDArray[np.float64]:
        """(chains, draws, dimension), as many draws as the shortest chain has."""
        joined = [np.concatenate(parts) for parts in self.draws]
        n = min(len(rows) for rows in joined)
        return np.stack([rows[:n] for rows in joined])


def new_chain(density: Density, candidate: Candidate, part: SettledChain, start: NDArray[np.float64],
              seed: np.random.SeedSequence, acceptance: float) -> Chain:
    """A chain of the candidate with the base metric, step size, beta and number of steps of the settled part."""
    settings = Settings(motion=candidate.motion, path=candidate.path, acceptance=acceptance)
    return Chain._with_settings(density, settings, start, seed, None, part)
