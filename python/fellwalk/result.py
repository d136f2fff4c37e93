"""The result of a run: draws, facts, costs, judgement; from memory or from a record."""

from __future__ import annotations

import os
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray

from fellwalk import export
from fellwalk.errors import ArgumentError
from fellwalk.facts import FACTS
from fellwalk.judge import judge, judge_function
from fellwalk.judgement import Judgement
from fellwalk.record import Record
from fellwalk.table import wrap

__all__ = ["ChainResult", "Result", "load"]


@dataclass
class ChainResult:
    """What one chain has given: parts of blocks, joined when asked for."""

    draws: list[NDArray[np.float64]] = field(default_factory=list)
    gradients: list[NDArray[np.float64]] = field(default_factory=list)
    facts: dict[str, list[NDArray]] = field(default_factory=lambda: {"settle": [], "keep": []})
    failures: list[tuple[NDArray, NDArray, NDArray]] = field(default_factory=list)
    seconds: float = 0.0
    summary: dict[str, Any] = field(default_factory=dict)

    def count(self, phase: str) -> int:
        """Transitions finished in a phase."""
        return sum(len(part) for part in self.facts[phase])


class Result:
    """Draws with the record of how they were made. Print it for the table and the verdict.

    draws: (chains, draws, dimension), as many as the shortest chain has. gradients: the same shape, of the log density
    at the draws, or None when they were not kept. facts: (chains, draws) of dtype ``fellwalk.facts.FACTS``.
    settling: the facts of settling, one array a chain. failures: (chain, draw, code, position) arrays of the failed
    steps whose position was kept, while keeping. names, seed, settings: as the run was given them. chains: what each
    chain found while settling (step size, bend, ...). spent: gradients, products and seconds, settling included.
    finished: were all draws asked for made; ended: why not.
    """

    def __init__(self, plan: dict[str, Any], parts: Sequence[ChainResult], *, ended: str = "", path: str = "") -> None:
        self.plan = plan
        self.names: list[str] = plan["names"]
        self.settings: dict[str, Any] = plan["settings"]
        self.seed = plan["seed"]
        self.path = path
        self.ended = ended
        self._parts = list(parts)
        self.chains = [part.summary for part in parts]

    @property
    def _shortest(self) -> int:
        return min(part.count("keep") for part in self._parts)

    def _stack(self, pick: Callable[[ChainResult], list[NDArray]], shape: tuple[int, ...], dtype: Any) -> NDArray:
        n = self._shortest
        out = np.empty((len(self._parts), n, *shape), dtype)
        for row, part in zip(out, self._parts, strict=True):
            if n:
                row[:] = np.concatenate(pick(part))[:n]
        return out

    @cached_property
    def draws(self) -> NDArray[np.float64]:
        """(chains, draws, dimension)."""
        return self._stack(lambda part: part.draws, (len(self.names),), np.float64)

    @cached_property
    def gradients(self) -> NDArray[np.float64] | None:
        """(chains, draws, dimension), or None when the run did not keep them."""
        if not self.plan["gradients"]:
            return None
        return self._stack(lambda part: part.gradients, (len(self.names),), np.float64)

    @cached_property
    def facts(self) -> NDArray:
        """(chains, draws) of dtype ``fellwalk.facts.FACTS``."""
        return self._stack(lambda part: part.facts["keep"], (), FACTS)

    @cached_property
    def settling(self) -> list[NDArray]:
        """Facts of settling, one array a chain."""
        return [np.concatenate(part.facts["settle"] or [np.empty(0, FACTS)]) for part in self._parts]

    @cached_property
    def failures(self) -> tuple[NDArray, NDArray, NDArray, NDArray]:
        """(chain, draw, code, position) of failed steps whose position was kept, while keeping."""
        rows = [(np.full(len(draw), c), draw, code, position)
                for c, part in enumerate(self._parts) for draw, code, position in part.failures]
        if not rows:
            rows = [(np.empty(0, int), np.empty(0, int), np.empty(0, int), np.empty((0, len(self.names))))]
        chain, draw, code, position = (np.concatenate(column) for column in zip(*rows, strict=True))
        return chain, draw, code, position

    @property
    def finished(self) -> bool:
        """Has every chain made all the draws asked for?"""
        return self._shortest >= self.plan["keep"]

    @cached_property
    def spent(self) -> dict[str, float]:
        """Calls and seconds of work, settling included."""
        total = {"gradients": 0.0, "products": 0.0, "seconds": 0.0}
        for part in self._parts:
            for phase in part.facts.values():
                for facts in phase:
                    total["gradients"] += int(facts["gradients"].sum())
                    total["products"] += int(facts["products"].sum())
            total["seconds"] += part.seconds
        return total

    @cached_property
    def judgement(self) -> Judgement:
        """What `judge` says of the draws. Errors: ArgumentError with fewer than four draws a chain."""
        self._enough()
        return judge(self.draws, self.names, facts=self.facts, spent=self.spent)

    def _enough(self) -> None:
        if self._shortest < 4:
            raise ArgumentError(f"there are {self._shortest} kept draws a chain, too few to judge; let the run go on"
                                + (f": fellwalk.resume({self.path!r}, density)" if self.path else ""))

    def of(self, f: Callable[[NDArray[np.float64]], Any], names: Sequence[str] | None = None) -> Judgement:
        """Judge a function of the draws: ``f(x)`` with x of shape (dimension,) gives a number, a truth value (its
        mean is a probability) or a short vector."""
        self._enough()
        return judge_function(self.draws, f, names, facts=self.facts, spent=self.spent)

    # ---- saying it ---------------------------------------------------------------------------------------------

    def heading(self) -> str:
        """Lines on what was run and how it settled, at most 80 columns wide."""
        motion, path = self.settings["motion"], self.settings["path"]
        shown = ", ".join(f"{key} {value}" for key, value in motion.items() if key != "name" and value not in (0, None))
        lines = [f"{len(self._parts)} chains of {self._shortest} draws, {len(self.names)} parameters, "
                 f"{motion['name']} motion{f' ({shown})' if shown else ''} on {path['name']} paths, seed {self.seed}."]
        if all(self.chains):
            settled = [part.count("settle") for part in self._parts]
            sizes = [chain["step_size"] for chain in self.chains]
            lines.append(f"Settled in {_range(settled, 'd')} transitions: step size {_range(sizes, '.3g')}"
                         + self._bend_line() + ".")
        if not self.finished:
            lines.append(f"Stopped early: {self.ended or 'not all draws asked for are made'} "
                         f"({self._shortest} of {self.plan['keep']} draws a chain)."
                         + (f" Go on with fellwalk.resume({self.path!r}, density)." if self.path else ""))
        return "\n".join(row for line in lines for row in wrap(line))

    def _bend_line(self) -> str:
        if self.settings["motion"]["name"] != "lagrangian" or self.settings["beta"] is not None:
            return ""
        bends = [chain["bend"] for chain in self.chains]
        text = f", bend {_range(bends, '.3g')}"
        if max(bends) < self.settings["motion"]["bend"]:
            text += " (lowered: the bend asked for capped the acceptance)"
        return text

    def __str__(self) -> str:
        if self._shortest < 4:
            return self.heading()
        return f"{self.heading()}\n\n{self.judgement}"

    def __repr__(self) -> str:
        return f"<Result: {len(self._parts)} chains of {self._shortest} draws, {len(self.names)} parameters>"

    # ---- handing over ------------------------------------------------------------------------------------------

    def provenance(self) -> dict[str, Any]:
        """How the draws were made: plan, versions, chains."""
        return {**self.plan, "chains": self.chains, "spent": self.spent, "record": self.path}

    def save_npz(self, path: str | os.PathLike[str]) -> None:
        """Draws, facts, names and provenance as a NumPy .npz file."""
        export.save_npz(path, self.draws, self.names, facts=self.facts, attributes=self.provenance())

    def save_csv(self, path: str | os.PathLike[str]) -> None:
        """One row a draw: chain, draw, then the parameters with every digit."""
        export.save_csv(path, self.draws, self.names, facts=self.facts)

    def save_netcdf(self, path: str | os.PathLike[str]) -> None:
        """A classic netCDF file: dimensions chain and draw, one variable a parameter."""
        export.save_netcdf(path, self.draws, self.names, facts=self.facts, attributes=self.provenance())


def _range(values: Sequence[float], form: str) -> str:
    low, high = format(min(values), form), format(max(values), form)
    return low if low == high else f"{low} to {high}"


def read_parts(record: Record) -> list[ChainResult]:
    """The parts of every chain of a record."""
    plan = record.settings
    parts = []
    for chain in range(plan["chains"]):
        part = ChainResult()
        for phase in ("settle", "keep"):
            if record.count(chain, phase):
                part.facts[phase].append(record.facts(chain, phase))
            for note in record.notes(chain, phase):
                part.seconds += note["seconds"]
                part.summary = note["summary"]
        if record.count(chain, "keep"):
            part.draws.append(record.chain_draws(chain))
            gradients = record.gradients(chain)
            part.gradients.extend([] if gradients is None else [gradients])
            part.failures.append(tuple(record.failures(chain)))
        parts.append(part)
    return parts


def load(path: str | os.PathLike[str], *, salvage: bool = False) -> Result:
    """The result that a record holds so far; also while the run goes on. Errors: RecordError and its kinds.

    salvage: of a damaged record, what stands before the damage.
    """
    with Record.open(path, salvage=salvage) as record:
        events = [event for event in record.events() if event.kind in ("stopped", "finished")]
        ended = events[-1].details.get("why", "") if events else "the run was killed or is still going on"
        return Result(record.settings, read_parts(record), ended=ended, path=record.path)
