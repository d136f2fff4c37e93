"""What a trial has found, and how it is told."""

from __future__ import annotations

from dataclasses import asdict, dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from fellwalk.chain import Chain
from fellwalk.motions import Motion, Path
from fellwalk.settled import Settled, SettledChain

__all__ = ["Entry", "Trial", "told_in_words"]


@dataclass(frozen=True)
class Entry:
    """One candidate: worth = least effective draws (centre and tails of every coordinate) in 1000 of cost; low, high:
    its 95% interval; least: effective draws of the trial; worst, what: the coordinate, and whether centre or tail;
    apart: largest split R-hat; failed: share of paths that a failed step ended; draws, spent, rounds: what it was
    given; why: in words, where it was ruled out, or how it ended."""

    name: str
    worth: float
    low: float
    high: float
    least: float
    worst: str
    what: str
    apart: float
    failed: float
    draws: int
    spent: float
    rounds: int
    why: str


@dataclass(frozen=True, eq=False)
class Trial:
    """What a trial has found. Print it for the ranking and the reasons.

    entries: the candidates, best first. reasons: why the winner won, and what stands against believing it, in words.
    told: was the budget enough to tell, and do the chains agree? motion, path: of the winner; settled: its settled
    parts; positions: (chains, dimension), where its chains stand, in free coordinates. chains: settled chains of the
    winner, ready to go on; what they drew during the trial is not kept. spent: cost of all candidates, in gradients;
    settling: gradients of the settling that all share. blocks: what the decisions are functions of.
    """

    entries: tuple[Entry, ...]
    reasons: tuple[str, ...]
    told: bool
    motion: Motion
    path: Path
    chains: tuple[Chain, ...]
    budget: float
    spent: float
    settling: float
    blocks: tuple[dict[str, Any], ...] = field(default=(), repr=False)

    @property
    def winner(self) -> str:
        """The name of the first candidate."""
        return self.entries[0].name

    @property
    def settled(self) -> Settled:
        """The settled parts of the winner's chains, for ``settled=``."""
        return Settled(tuple(SettledChain.of(chain) for chain in self.chains))

    @property
    def positions(self) -> NDArray[np.float64]:
        """(chains, dimension): where the winner's chains stand, in free coordinates."""
        return np.stack([chain.position for chain in self.chains])

    def to_json(self) -> dict[str, Any]:
        """The table, the reasons and the decisions as plain values, for a record."""
        return {"entries": [asdict(entry) for entry in self.entries], "reasons": list(self.reasons), "told": self.told,
                "budget": self.budget, "spent": self.spent, "settling": self.settling, "blocks": list(self.blocks)}

    def __str__(self) -> str:
        return told_in_words(self.to_json())


def told_in_words(found: dict[str, Any]) -> str:
    """Ranking and reasons of what `Trial.to_json` gave; the reasons alone where nothing was tried."""
    if not any(entry["draws"] for entry in found["entries"]):
        return "\n".join(found["reasons"])
    head = ("candidate", "in 1000", "95% interval", "effective", "worst", "R-hat", "failed", "spent", "")
    rows = [head]
    for e in found["entries"]:
        where = f"{e['what']} of {e['worst']}" if e["worst"] else ""
        numbers = (f"{e['worth']:.3g}", f"{e['low']:.3g} to {e['high']:.3g}", f"{e['least']:.0f}", where,
                   f"{e['apart']:.2f}", f"{e['failed']:.1%}") if e["draws"] else ("", "", "", "", "", "")
        rows.append((e["name"], *numbers, f"{e['spent']:.0f}", e["why"]))
    widths = [max(len(row[i]) for row in rows) for i in range(len(head) - 1)]
    lines = ["  ".join([*(cell.ljust(w) for cell, w in zip(row[:-1], widths, strict=True)), row[-1]]).rstrip()
             for row in rows]
    cost = (f"Trial: {found['spent']:.0f} of a budget of {found['budget']:.0f}, after {found['settling']:.0f} "
            "gradients of settling.")
    return "\n".join([cost, *lines, *found["reasons"]])
