"""What a run writes into its record, and how it is read back."""

from __future__ import annotations

import contextlib
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from fellwalk.errors import RecordError
from fellwalk.facts import FACTS
from fellwalk.record import Block as RecordBlock
from fellwalk.record import Record
from fellwalk.settings import Settings
from fellwalk.watch import Moments
from fellwalk.work import Check, Done

__all__ = ["ChainResult", "begin", "end_record", "expected_bytes", "kept_where", "plan_of", "read_check", "read_parts",
           "read_states", "record_block"]

_PLAN = {"settings", "names", "dimension", "chains", "keep", "seed", "gradients", "model"}


@dataclass
class ChainResult:
    """What one chain has given: parts of blocks, joined when asked for."""

    draws: list[NDArray[np.float64]] = field(default_factory=list)
    gradients: list[NDArray[np.float64]] = field(default_factory=list)
    facts: dict[str, list[NDArray[Any]]] = field(default_factory=lambda: {"settle": [], "keep": []})
    failures: list[tuple[NDArray[Any], NDArray[Any], NDArray[Any]]] = field(default_factory=list)
    seconds: float = 0.0
    summary: dict[str, Any] = field(default_factory=dict)
    counts: dict[str, int] = field(default_factory=lambda: {"settle": 0, "keep": 0})
    moments: Moments | None = None  # of all coordinates, of a run that watches

    def count(self, phase: str) -> int:
        """Transitions finished in a phase."""
        return self.counts[phase]

    def add(self, done: Done) -> None:
        """Add a finished block."""
        block = done.block
        start = self.counts[block.phase]
        self.add_facts(block.phase, block.facts)
        self.seconds += done.seconds
        self.summary = done.summary
        self.moments = block.moments or self.moments
        if block.phase == "keep":
            self.draws.append(block.draws)
            self.gradients.extend([] if block.gradients is None else [block.gradients])
            self.failures.append((block.failures[0] + start, *block.failures[1:]))

    def add_facts(self, phase: str, facts: NDArray[Any]) -> None:
        """Add the facts of finished transitions, and count them."""
        self.facts[phase].append(facts)
        self.counts[phase] += len(facts)


def begin(record: Record, states: list[bytes], check: Check) -> None:
    """Write what a run needs to go on from nothing: the first states of all chains, and what the density gives."""
    record.set_entry("beginning", {
        "states": record.put_part(b"".join(states)),
        "sizes": [len(state) for state in states],
        "check": record.put_part(np.concatenate([check.position, check.gradient, [check.log_density]])
                                 .astype("<f8").tobytes()),
    })


def expected_bytes(plan: dict[str, Any], states: list[bytes]) -> int:
    """About how many bytes a run will keep at a time: draws, their facts, and the states of its chains."""
    width = len(plan["watch"]["names"]) if plan["watch"] else plan["dimension"]
    draw = 8 * width * (1 + plan["gradients"]) + FACTS.itemsize
    return plan["chains"] * plan["keep"] * draw + sum(map(len, states))


def kept_where(path: str) -> str:
    """For the note of an exception: where what was finished before it is."""
    return (f"the record {path} holds every finished block; fellwalk.resume goes on from it" if path else
            "this exception's fellwalk_result holds the draws finished before it")


def end_record(record: Record | None, why: str, result: object, error: BaseException | None) -> None:
    """Note in the record that a run has finished, or why it stopped; then raise its error, which carries the result."""
    if record:
        with contextlib.suppress(*([RecordError] if error else [])):  # a full disk must not hide what was before
            record.append_event("stopped" if why else "finished", {"why": why} if why else {})
    if error is not None:
        with contextlib.suppress(AttributeError):
            error.fellwalk_result = result  # type: ignore[attr-defined]
        raise error


def record_block(done: Done, part: ChainResult) -> RecordBlock:
    """A finished block in the form that the record takes; `part`: what stands before it."""
    block = done.block
    keeping = block.phase == "keep"
    return RecordBlock(done.chain, block.phase, part.count(block.phase), block.facts, done.state,
                       draws=block.draws if keeping else None, failures=block.failures,
                       gradients=block.gradients if keeping else None,
                       note={"seconds": done.seconds, "summary": done.summary},
                       moments=None if block.moments is None else block.moments.packed())


def plan_of(record: Record) -> dict[str, Any]:
    """The plan of the run that the record keeps, with what its trial has chosen.

    Errors: RecordError when it is not of a run of this version.
    """
    plan = record.settings
    if not (isinstance(plan, dict) and plan.keys() >= _PLAN):
        raise RecordError(f"{record.path}: this record was not made by fellwalk.run, so there is no run in it")
    chosen = record.get_entry("chosen", {})
    plan = plan | {name: chosen[name] for name in ("settings", "trial") if name in chosen}
    try:
        Settings.from_json(plan["settings"])
    except (KeyError, TypeError, ValueError) as error:
        raise RecordError(f"{record.path}: this run was made with settings that this version of fellwalk does not know "
                          f"({error}); use the version that made it, {record.versions.get('fellwalk')}") from error
    return plan


def _beginning(record: Record) -> dict[str, Any]:
    found = record.get_entry("beginning")
    if found is None:
        raise RecordError(f"{record.path}: the run was killed before its first block, so there is nothing to go on "
                          "from. Start it again with replace=True (in the command: --replace)")
    return found


def read_states(record: Record) -> list[bytes]:
    """The latest state of every chain: of its last block, or that which a trial gave it, or its first one."""
    chosen = record.get_entry("chosen")
    states = _split(record, _beginning(record) if chosen is None else chosen)
    for chain, (phase, _, state) in record.states().items():
        if chosen is None or phase == "keep":
            states[chain] = state
    return states


def _split(record: Record, entry: dict[str, Any]) -> list[bytes]:
    whole = record.part(entry["states"])
    ends = np.cumsum(entry["sizes"]).tolist()
    return [whole[end - size : end] for size, end in zip(entry["sizes"], ends, strict=True)]


def read_check(record: Record, dimension: int) -> Check:
    """What the density of the run gave at its first starting point."""
    numbers = np.frombuffer(record.part(_beginning(record)["check"]), "<f8").astype(np.float64)
    return Check(numbers[:dimension], float(numbers[-1]), numbers[dimension:-1])


def read_parts(record: Record) -> list[ChainResult]:
    """What every chain has given so far."""
    parts = []
    counts = record.counts()
    for chain in range(plan_of(record)["chains"]):
        part = ChainResult()
        for phase in ("settle", "keep"):
            if counts.get(chain, {}).get(phase):
                part.add_facts(phase, record.facts(chain, phase))
            for note in record.notes(chain, phase):
                if note is not None:
                    part.seconds += note["seconds"]
                    part.summary = note["summary"]
        if part.count("keep"):
            part.draws.append(record.chain_draws(chain))
            gradients = record.gradients(chain)
            part.gradients.extend([] if gradients is None else [gradients])
            draw, code, position = record.failures(chain)
            part.failures.append((draw, code, position))
            kept = record.moments(chain)
            part.moments = None if kept is None else Moments.unpacked(kept)
        parts.append(part)
    return parts
