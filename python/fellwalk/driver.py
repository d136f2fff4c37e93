"""The driver of a run: keeps blocks in flight, writes each finished block before it asks for that chain's next one."""

from __future__ import annotations

import contextlib
import time
from collections import deque
from collections.abc import Iterator
from concurrent.futures import Executor, Future
from dataclasses import replace
from queue import Empty, SimpleQueue
from typing import Any

import numpy as np

from fellwalk.errors import Interrupted, RecordError, WorkerError
from fellwalk.facts import FACTS
from fellwalk.interrupts import Interrupts
from fellwalk.pools import Workers
from fellwalk.progress import Progress
from fellwalk.record import Record
from fellwalk.result import Result
from fellwalk.run_record import ChainResult, end_record, kept_where, record_block
from fellwalk.settings import Settings
from fellwalk.settling import settling_remarks
from fellwalk.trial_play import Play
from fellwalk.trial_record import record_answers, record_winner, stored_answers
from fellwalk.trial_result import Trial
from fellwalk.trial_rounds import TrialTerms
from fellwalk.watch import Watch
from fellwalk.work import Done, Job

__all__ = ["Driver"]

_BLOCK_SECONDS = 0.5
# Unpacking a state, packing and checking it and writing it to a record takes about 15 ns a byte, once a block; a block
# of this many seconds a byte makes that two parts in a hundred.
_BLOCK_SECONDS_A_BYTE, _LONGEST_BLOCK = 7.5e-7, 10.0
_BLOCK_BYTES = 32_000_000
_TRIAL_HERE = 0.25  # seconds: a trial that takes less is made in this thread, as handing blocks round would cost more
_NO_CHAIN = -1  # in the place of a chain's number: the density was called for none
_COMMIT_SHARE = 20  # commits are grouped so that they take at most one part in so many of the driver's time


class Driver:
    """One run from where its chains stand until all draws are made, or until it is stopped.

    plan: as the record keeps it. states, parts: of every chain, so far. seconds: stop at a block edge after so long.
    terms: of a trial that is to be made when all chains have settled; its winner's chains then keep the draws.
    Attributes for measurements: `blocks` finished, and seconds `waited` for workers.
    """

    def __init__(self, plan: dict[str, Any], states: list[bytes], parts: list[ChainResult], workers: Workers,
                 record: Record | None, progress: Progress, seconds: float | None, watch: Watch | None = None,
                 terms: TrialTerms | None = None) -> None:
        self.watch, self.terms = watch, terms
        self.play: Play | None = None
        self.trial: Trial | None = None
        self.plan, self.states, self.parts = plan, states, parts
        self.workers, self.record, self.progress = workers, record, progress
        self.settle_most = Settings.from_json(plan["settings"]).settle_bounds()[1]
        self.limit = None if seconds is None else time.monotonic() + seconds
        self.ready = deque(chain for chain in range(len(states)) if self._left(chain))
        self.flying: dict[Future[Any], tuple[Job, Executor]] = {}
        self.arrived: SimpleQueue[Future[Any] | None] = SimpleQueue()
        self.finished: list[Done] = []
        self.written, self.writing = float("-inf"), 0.0  # when the last commit ended, how long it took
        self.errors: list[tuple[int, str, BaseException]] = []
        self.interrupts = Interrupts(workers.live, progress.say, lambda: self.arrived.put(None), workers.here)
        self.stored = float("-inf")  # when answers of the trial were last stored
        self.blocks, self.waited = 0, 0.0

    def go(self) -> Result:
        """Run. Raises what the density raised, KeyboardInterrupt after a second Ctrl-C, RecordError, WorkerError."""
        try:
            with self.interrupts.installed():
                self._drive()
        except BaseException:
            self.workers.live.interrupt()
            raise
        finally:
            for future in self.flying:
                future.cancel()
            self.progress.close()
        return self._end()

    # ---- the loop ----------------------------------------------------------------------------------------------

    def _drive(self) -> None:
        while True:
            if self._stopping():
                self.interrupts.announce()
                self.ready.clear()
                self._call_back()
            while self.ready and len(self.flying) < self.workers.room:
                self._submit(self.ready.popleft())
            if self.finished and self._due():
                self._write()
            elif not self.flying:
                if self.terms is None or self.play is not None or self._stopping():
                    return
                with self._calling():
                    self._try()
            elif self.interrupts.count > 1 and not self.workers.local:
                self._write()
                return
            else:
                self._collect()

    def _stopping(self) -> bool:
        late = self.limit is not None and time.monotonic() >= self.limit
        return self.interrupts.count > 0 or bool(self.errors) or late

    def _call_back(self) -> None:
        """Take back the blocks that no worker has begun."""
        for future in list(self.flying):
            if future.cancel():
                del self.flying[future]

    def _left(self, chain: int) -> int:
        if self.terms is not None:  # a trial comes between settling and keeping
            return int(not self._settled(chain))
        return self.plan["keep"] - self.parts[chain].count("keep")

    def _settled(self, chain: int) -> bool:
        return self.parts[chain].summary.get("settled", self.settle_most == 0)

    def _job(self, chain: int) -> Job:
        size = len(self.states[chain % len(self.states)])
        seconds = min(max(_BLOCK_SECONDS, _BLOCK_SECONDS_A_BYTE * size), _LONGEST_BLOCK)
        if self.limit is not None:
            seconds = min(seconds, max(0.01, 0.5 * (self.limit - time.monotonic())))
        if self.play is not None and chain >= len(self.states):
            return self.play.job(chain, seconds)
        keeping = self._settled(chain)
        most = min(self._left(chain), self._most(chain)) if keeping else self._most(chain)
        return Job(chain, self.states[chain], most, self.plan["gradients"], seconds, self.watch,
                   self.parts[chain].moments)

    def _most(self, chain: int) -> int:
        """Transitions in a block, for memory's sake; but of draws at least as many bytes as the state has."""
        return max(_BLOCK_BYTES, len(self.states[chain])) // (16 * self._width() + FACTS.itemsize) + 1

    def _width(self) -> int:
        """Numbers kept of a draw."""
        return self.plan["dimension"] if self.watch is None else len(self.watch.names)

    def _submit(self, chain: int, again: Job | None = None) -> None:
        """Send the next block of a chain, or one `again`, to a worker that lacked the density."""
        job = again or self._job(chain)
        try:
            future = self.workers.submit(job, whole=again is not None)
        except Exception as error:
            self._missed(job, error, self.workers.executor)
            return
        self.flying[future] = (job, self.workers.executor)
        future.add_done_callback(self.arrived.put)

    def _collect(self) -> None:
        """Wait until a block arrives, or something else is to be done; take what has arrived."""
        until = [time.monotonic() + 1.0]
        if self.finished:
            until.append(self.written + _COMMIT_SHARE * self.writing)
        if self.limit is not None:
            until.append(self.limit)
        before = time.monotonic()
        try:
            arrived = [self.arrived.get(timeout=max(0.001, min(until) - before))]
        except Empty:
            arrived = []
        self.waited += time.monotonic() - before
        while not self.arrived.empty():
            arrived.append(self.arrived.get())
        for future in arrived:
            if future in self.flying:  # and was not called back; None only wakes
                self._take(future, *self.flying.pop(future))

    def _take(self, future: Future[Any], job: Job, executor: Executor) -> None:
        try:
            done = self.workers.opened(future.result())
        except BaseException as error:
            self._missed(job, error, executor)
            return
        if done is None:
            self._submit(job.chain, job)
            return
        for remark in self.workers.remarks:
            self.progress.say(remark)
            if self.record:
                self.record.append_event("rounding", {"remark": remark})
        self.workers.remarks.clear()
        self.finished.append(done)

    def _missed(self, job: Job, error: BaseException, executor: Executor) -> None:
        """A block did not come back: ask again, if the executor is our own, or else stop."""
        if self._stopping():
            return  # after a Ctrl-C workers may die of it, too; the block is made again when the run goes on
        if self.workers.local and not isinstance(error, RuntimeError):
            self.errors.append((job.chain, "", error))
        elif executor is not self.workers.executor or self.workers.rebuild(error):
            self.ready.appendleft(job.chain)
        else:
            self.errors.append((job.chain, "", self.workers.lost(error)))

    # ---- finished blocks ---------------------------------------------------------------------------------------

    def _due(self) -> bool:
        """Is it time for a commit? Not while every worker has work and the last one was a short time ago."""
        busy = len(self.flying) >= self.workers.count and not self._stopping()
        return not (self.record and busy) or time.monotonic() >= self.written + _COMMIT_SHARE * self.writing

    def _write(self) -> None:
        whole, self.finished = self.finished, []
        done = [d for d in whole if d.chain < len(self.states)]
        with self._calling():
            self._tried([d for d in whole if d.chain >= len(self.states)])
        full = [d for d in done if len(d.block)]
        if self.record and full:
            begun = time.monotonic()
            self.record.append_blocks([record_block(d, self.parts[d.chain]) for d in full])
            self.written = time.monotonic()
            self.writing = self.written - begun
        self.blocks += len(full)
        for d in done:
            part, phase, error = self.parts[d.chain], d.block.phase, d.block.error
            if len(d.block):
                part.add(d)
                self.states[d.chain] = d.state
                self.progress.update(d.chain, phase, part.count(phase), d.block.facts)
            if error is not None:
                self.errors.append((d.chain, phase, error))
            elif self._left(d.chain):
                self.ready.append(d.chain)

    # ---- a trial between settling and keeping -------------------------------------------------------------------

    @contextlib.contextmanager
    def _calling(self) -> Iterator[None]:
        """Where the trial calls the density between blocks: what that raises ends the run as it would in a block."""
        try:
            yield
        except RecordError:
            raise
        except Exception as error:
            self.errors.append((_NO_CHAIN, "trial", error))

    def _try(self) -> None:
        """All chains have settled: begin the trial, or make all of it where that takes no time."""
        assert self.terms is not None
        stored = stored_answers(self.record, self.plan["dimension"]) if self.record else []
        settling = [np.concatenate(part.facts["settle"]) for part in self.parts]
        remarks = settling_remarks(settling, [part.summary for part in self.parts], self.terms.acceptance)
        self.play = Play(self.workers.density, self.states, settling, self.terms, stored,
                         storing=self.record is not None, lost=len(remarks))
        budget = self.play.competition.budget
        self.progress.say(f"the chains have settled; a trial of motions may take {budget:.0f} gradients")
        ready = deque(self.play.begin())
        took = sum(part.seconds for part in self.parts) / max(1.0, self.play.competition.settling)
        if self.workers.local and took * budget < _TRIAL_HERE:
            while ready and not self._stopping():
                done = self.play.make_here(ready.popleft(), self.workers.live)
                if done.block.error is not None:
                    self.errors.append((self.play.place(done.chain), "trial", done.block.error))
                else:
                    ready.extend(self.play.take(done))
        else:
            self.ready.extend(ready)
        if self.play.over:
            self._end_trial()

    def _tried(self, done: list[Done]) -> None:
        """Blocks of the trial have come back."""
        if self.play is None or not done:
            return
        for d in done:
            if len(d.block):
                self.ready.extend(self.play.take(replace(d, block=replace(d.block, error=None))))
            if d.block.error is not None:
                self.errors.append((self.play.place(d.chain), "trial", d.block.error))
        if self.record and (self._stopping() or time.monotonic() >= self.stored + _COMMIT_SHARE * self.writing + 1.0):
            self._store_answers(self.record)
        if self.play.over:
            self._end_trial()

    def _store_answers(self, record: Record) -> None:
        if self.play is not None and self.play.unsaved:
            record_answers(record, self.play.unsaved)
            self.play.unsaved.clear()
            self.stored = time.monotonic()

    def _end_trial(self) -> None:
        """The winner's chains go on in the place of those that have settled."""
        assert self.play is not None
        self.trial, states = self.play.winners()
        settings = replace(Settings.from_json(self.plan["settings"]), motion=self.trial.motion, path=self.trial.path)
        chosen = {"settings": settings.to_json(), "trial": self.trial.to_json()}
        if self.record:
            record_winner(self.record, chosen, states)
        self.progress.say(f"the trial is over: {' '.join(self.trial.reasons[:1])}")
        self.plan = self.plan | chosen
        self.states, self.terms = states, None
        self.ready.extend(chain for chain in range(len(states)) if self._left(chain))

    # ---- the end -----------------------------------------------------------------------------------------------

    def _end(self) -> Result:
        if self.record:
            self._store_answers(self.record)
        done = self.terms is None and not any(self._left(chain) for chain in range(len(self.states)))
        abandoned = self.interrupts.count > 1
        real = [e for e in self.errors if not (abandoned and isinstance(e[2], Interrupted | KeyboardInterrupt))]
        why = "" if done else "an exception" if real else self.interrupts.name or "the time given had passed"
        path = self.record.path if self.record else ""
        result = Result(self.plan, self.parts, states=self.states, ended=why, path=path)
        error = self._explained(real, result) if real else KeyboardInterrupt() if abandoned and not done else None
        end_record(self.record, why, result, error)
        return result

    def _explained(self, errors: list[tuple[int, str, BaseException]], result: Result) -> BaseException:
        chain, phase, error = errors[0]
        kept = kept_where(result.path)
        if isinstance(error, WorkerError):
            error.add_note(f"fellwalk: the block in hand of chain {chain + 1} is lost; {kept}.")
            return error
        place = f"chain {chain + 1}"
        if chain == _NO_CHAIN:
            place = "the trial of motions, between its blocks"
        elif phase == "trial":
            place += ", in the trial of motions"
        elif phase:
            doing = "keeping draws" if phase == "keep" else "settling"
            place += f", {doing}, at transition {self.parts[chain].count(phase) + 1}"
        others = sorted({number + 1 for number, *_ in errors} - {chain + 1, _NO_CHAIN + 1})
        more = f" (and another in chain {', '.join(map(str, others))})" if others else ""
        error.add_note(f"fellwalk: raised in {place}{more}; {kept}.")
        return error
