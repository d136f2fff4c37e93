"""A trial as jobs: which blocks may be made now, and what follows from those that have been made."""

from __future__ import annotations

import io
from collections import deque
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, field, replace

import numpy as np
from numpy.typing import NDArray

from fellwalk.chain import Block, Chain, _joined
from fellwalk.density import Density
from fellwalk.fresh import Fresh
from fellwalk.settled import SettledChain
from fellwalk.trial_candidates import Ask, Work
from fellwalk.trial_result import Trial
from fellwalk.trial_rounds import Competition, Leaders, TrialTerms
from fellwalk.work import Done, Job, Live, not_begun

__all__ = ["Answer", "Play", "leaders_of", "packed", "unpacked"]

_LATE = 50  # transitions of the end of settling that say what one takes


def leaders_of(density: Density, states: Sequence[bytes], settling: Sequence[NDArray[np.void]]) -> Leaders:
    """The leader's chains from their states and the facts of their settling."""
    chains = [Chain.from_state(density, state) for state in states]
    gradients = float(sum(facts["gradients"].sum(dtype=np.int64) for facts in settling))
    late = float(np.mean([facts["gradients"][-_LATE:].mean() for facts in settling]))
    return Leaders([SettledChain.of(chain) for chain in chains], [chain.position for chain in chains], gradients, late)


@dataclass(frozen=True, eq=False)
class Answer:
    """A block, or a part of one, that chain `number` of the trial has made, the `turn`-th, and its state after it."""

    number: int
    turn: int
    block: Block
    state: bytes


@dataclass(eq=False)
class _Going:
    """A work of the competition with what it has asked for."""

    work: Work[None]
    asks: list[Ask] = field(default_factory=list)
    blocks: list[Block | None] = field(default_factory=list)


@dataclass(eq=False)
class _Asked:
    """One block in the making."""

    going: _Going
    index: int
    parts: list[Block] = field(default_factory=list)

    @property
    def ask(self) -> Ask:
        return self.going.asks[self.index]

    @property
    def left(self) -> int:
        """Transitions still to be made."""
        return self.ask.most - sum(map(len, self.parts))

    @property
    def fresh(self) -> Fresh | None:
        """The chain that is to be made for it, while there is none."""
        return None if self.parts else self.ask.fresh


class Play:
    """A competition between chains that others move.

    `begin` and `take` give the numbers of chains whose next block may be made, in any order and side by side; numbers
    begin above those of the run's own chains. What comes out does not depend on that order, nor on where blocks end.
    states: of the leader's settled chains. stored: answers of a trial that was cut off. `unsaved`: answers since, where
    they are to be stored. lost: as for `Competition`.
    """

    def __init__(self, density: Density, states: Sequence[bytes], settling: Sequence[NDArray[np.void]],
                 terms: TrialTerms, stored: Iterable[Answer] = (), *, storing: bool = False, lost: int = 0) -> None:
        self.density, self.first = density, len(states)
        self.competition = Competition(density, leaders_of(density, states, settling), terms, lost)
        self.groups = self.competition.go()
        self.states: dict[int, bytes] = {self.first + c: state for c, state in enumerate(states)}
        self.chains: dict[int, Chain] = {}
        self.stored = {(answer.number, answer.turn): answer for answer in stored}
        self.asked: dict[int, _Asked] = {}
        self.turns: dict[int, int] = {}
        self.storing = storing
        self.unsaved: list[Answer] = []
        self.over = False

    def begin(self) -> list[int]:
        """The first chains to move; none where the stored answers are all there is to it."""
        return self._replayed(self._next_group())

    def place(self, number: int) -> int:
        """Which of the run's chains a chain of the trial goes with."""
        return (number - self.first) % self.first

    def job(self, number: int, seconds: float) -> Job:
        """The next block of a chain, to be made anywhere."""
        asked = self.asked[number]
        return Job(number, asked.fresh or self.states[number], asked.left, asked.ask.gradients, seconds)

    def make_here(self, number: int, live: Live) -> Done:
        """The next block of a chain, made in this thread by a chain that stays in memory."""
        asked = self.asked[number]
        if asked.fresh is not None:
            try:
                self.chains[number] = asked.fresh.chain(self.density)
            except Exception as error:
                return not_begun(number, self.density, error)
        elif number not in self.chains:
            self.chains[number] = Chain.from_state(self.density, self.states[number])
        chain = self.chains[number]
        with live.holding(chain):
            block = chain.block(asked.left, gradients=asked.ask.gradients)
        return Done(number, block, b"", 0.0, {})

    def take(self, done: Done) -> list[int]:
        """What may be moved now that this block has been made. Its state is empty where the chain is kept here."""
        answer = Answer(done.chain, self.turns.get(done.chain, 0), done.block, done.state)
        if done.state and self.storing:
            self.unsaved.append(answer)
        return self._replayed(self._taken(answer))

    def winners(self) -> tuple[Trial, list[bytes]]:
        """What was found, and the states of the winner's chains. Takes a gradient for each chain that has not moved."""
        best, found = self.competition.winner, self.competition.found
        assert found is not None
        states = []
        for c, fresh in enumerate(best.unbegun):
            number = self._number((best.number, c))
            if fresh is not None:
                states.append(fresh.chain(self.density).state)
            else:
                states.append(self.chains[number].state if number in self.chains else self.states[number])
        return found, states

    # ---- inside -------------------------------------------------------------------------------------------------

    def _number(self, slot: tuple[int, int]) -> int:
        return self.first + slot[0] * self.first + slot[1]

    def _replayed(self, numbers: list[int]) -> list[int]:
        """The same after all that follows from stored answers."""
        ready, waiting = [], deque(numbers)
        while waiting:
            number = waiting.popleft()
            answer = self.stored.pop((number, self.turns.get(number, 0)), None)
            if answer is None:
                ready.append(number)
            else:
                waiting.extend(self._taken(answer))
        return ready

    def _taken(self, answer: Answer) -> list[int]:
        number, block = answer.number, answer.block
        self.turns[number] = answer.turn + 1
        if answer.state:
            self.states[number] = answer.state
        asked = self.asked[number]
        asked.parts.append(block)
        if asked.left > 0:
            return [number]
        del self.asked[number]
        going = asked.going
        going.blocks[asked.index] = _joined("keep", asked.parts, self.density.dimension)
        blocks = [one for one in going.blocks if one is not None]
        found = self._ask(going, blocks) if len(blocks) == len(going.asks) else []
        return found if self.asked else self._next_group()

    def _ask(self, going: _Going, blocks: list[Block] | None) -> list[int]:
        """Send a work its blocks; the chains that it asks for next."""
        try:
            going.asks = next(going.work) if blocks is None else going.work.send(blocks)
        except StopIteration:
            return []
        going.blocks = [None] * len(going.asks)
        numbers = [self._number(ask.slot) for ask in going.asks]
        self.asked |= {number: _Asked(going, i) for i, number in enumerate(numbers)}
        return numbers

    def _next_group(self) -> list[int]:
        for works in self.groups:
            numbers = [number for work in works for number in self._ask(_Going(work), None)]
            if numbers:
                return numbers
        self.over = True
        return []


# ---- answers as bytes -----------------------------------------------------------------------------------------------


def packed(answers: Sequence[Answer]) -> bytes:
    """Answers as arrays in the form of numpy.savez; of the states of a chain the last one, from which it goes on."""
    last = {answer.number: answer for answer in answers}
    arrays: dict[str, NDArray[np.generic]] = {
        "places": np.array([(answer.number, answer.turn) for answer in answers], np.int64).reshape(-1, 2)}
    for i, answer in enumerate(answers):
        arrays |= {f"draws {i}": answer.block.draws, f"facts {i}": answer.block.facts,
                   f"state {i}": np.frombuffer(answer.state if last[answer.number] is answer else b"", np.uint8)}
        if answer.block.gradients is not None:
            arrays[f"gradients {i}"] = answer.block.gradients
    out = io.BytesIO()
    np.savez(out, **arrays)
    return out.getvalue()


def unpacked(data: bytes, dimension: int) -> list[Answer]:
    """What `packed` has packed."""
    found = []
    with np.load(io.BytesIO(data), allow_pickle=False) as arrays:
        for i, (number, turn) in enumerate(arrays["places"].tolist()):
            gradients = arrays.get(f"gradients {i}")
            block = replace(_joined("keep", [], dimension), draws=arrays[f"draws {i}"], gradients=gradients,
                            facts=arrays[f"facts {i}"])
            found.append(Answer(number, turn, block, arrays[f"state {i}"].tobytes()))
    return found
