"""Runs: blocks of transitions over an executor, with progress, stopping and resuming."""

from __future__ import annotations

import contextlib
import os
import signal
import threading
import time
from collections.abc import Iterator
from concurrent.futures import FIRST_COMPLETED, Executor, Future, wait
from typing import Any

import numpy as np
from numpy.typing import ArrayLike

from fellwalk.chain import Chain
from fellwalk.density import Density, as_vector, brief
from fellwalk.errors import ArgumentError, Interrupted, OtherModelError
from fellwalk.motions import Motion, Path, real, whole
from fellwalk.progress import Progress, choose_progress
from fellwalk.record import Block as RecordBlock
from fellwalk.record import Record
from fellwalk.result import ChainResult, Result, read_parts
from fellwalk.settings import Settings
from fellwalk.starts import starting_points
from fellwalk.work import Done, Job, Live, Sender, choose_executor

__all__ = ["resume", "run"]

_BLOCK_SECONDS = 0.5
_BLOCK_BYTES = 32_000_000
_GRADIENTS_UP_TO = 1000  # dimensions: beyond, kept gradients double a large record, so they are asked for


def run(
    density: Density,
    starts: ArrayLike | None = None,
    *,
    motion: Motion | None = None,
    path: Path | None = None,
    settle: int | str = "auto",
    keep: int = 1000,
    chains: int = 4,
    seed: int | None = None,
    acceptance: float = 0.8,
    step_size: float | None = None,
    scale: ArrayLike | None = None,
    gradients: bool | None = None,
    executor: Executor | str | None = None,
    record: str | os.PathLike[str] | None = None,
    replace: bool = False,
    progress: object = None,
    seconds: float | None = None,
) -> Result:
    """Settle `chains` chains, keep `keep` draws of each, and judge them.

    starts: one point (dimension,), spread over the chains by the rule of `fellwalk.starts.starting_points`, or one
        point a chain (chains, dimension). Left out: the density's own ``start``.
    settle: settling transitions a chain, or "auto": until the scale has stabilised, between stated bounds.
    acceptance: the rate that settling aims the step size at. step_size, scale: where settling starts from.
    gradients: keep the gradient at every draw (default: up to 1,000 dimensions).
    executor: a concurrent.futures.Executor, "here", "threads", or None: threads for compiled densities, else here.
    record: file to write every finished block to, so that nothing finished is lost; `replace` overwrites an old one.
    progress: "bars", "lines", "off" or None (bars when a person watches). seconds: stop at a block edge after so long.

    The first Ctrl-C ends the run at the next block edge and returns what there is; a second one abandons the
    transitions in hand and raises KeyboardInterrupt. An exception of the density comes out as it was raised, after
    finished blocks are safe; `resume` goes on either way, with the bits of an undisturbed run.
    Errors: ArgumentError, ShapeError, StartError, RecordError, and whatever the density raises.
    """
    if not isinstance(density, Density):
        raise ArgumentError(f"the first argument must be a fellwalk.Density; it is {type(density).__name__}: wrap your "
                            "function as fellwalk.Density(function, dimension)")
    settings = _settings(motion, path, settle, acceptance, step_size)
    chains, keep = whole("chains", chains, 1, 2**20), whole("keep", keep, 1, 2**40)
    seed = int(np.random.SeedSequence().entropy) if seed is None else whole("seed", seed, 0, 2**128)
    keep_gradients = density.dimension <= _GRADIENTS_UP_TO if gradients is None else bool(gradients)
    plan = {
        "settings": settings.to_json(),
        "names": density.names,
        "dimension": density.dimension,
        "chains": chains,
        "keep": keep,
        "seed": seed,
        "gradients": keep_gradients,
        "model": density.model,
    }
    if starts is None and density.start is None:
        raise ArgumentError("this density has no start of its own; give starts, one point (dimension,) inside the support")
    points = starting_points(density, density.start if starts is None else starts, chains, np.random.default_rng([seed, 1]))
    states = [Chain._with_settings(density, settings, point, np.random.SeedSequence(seed, spawn_key=(c,)), scale).state
              for c, point in enumerate(points)]
    told = choose_progress(progress, chains, keep)
    if record is None:
        return _Run(density, plan, states, None, told).go(executor, seconds)
    with Record.create(record, plan, replace=replace) as file:
        value, gradient = density(points[0])
        file.set_entry("starts", points)
        file.set_entry("check", {"position": points[0], "log_density": value, "gradient": gradient})
        file.set_entry("first states", [file.put_part(state) for state in states])
        return _Run(density, plan, states, file, told).go(executor, seconds)


def _settings(motion: Motion | None, path: Path | None, settle: int | str, acceptance: float,
              step_size: float | None) -> Settings:
    chosen = {key: value for key, value in (("motion", motion), ("path", path)) if value is not None}
    settings = Settings(settle=settle, acceptance=acceptance, step_size=step_size, **chosen)
    if settings.settle_bounds()[1] == 0 and step_size is None:
        raise ArgumentError("with settle=0 nothing finds a step size; give step_size=, or let the chains settle")
    return settings


def resume(
    record: str | os.PathLike[str],
    density: Density,
    *,
    keep: int | None = None,
    executor: Executor | str | None = None,
    progress: object = None,
    seconds: float | None = None,
) -> Result:
    """Go on with a recorded run: the bits are those of a run never interrupted. `keep` may ask for more draws.

    The density at the stored first starting point is evaluated again and must agree with the record.
    Errors: OtherModelError when it does not; RecordError and its kinds; whatever the density raises.
    """
    if not isinstance(density, Density):
        raise ArgumentError(f"the second argument must be the fellwalk.Density of the run; it is {type(density).__name__}")
    with Record.open(record, write=True) as file:
        plan = file.settings
        _check_model(file, plan, density)
        if keep is not None:
            plan = {**plan, "keep": whole("keep", keep, plan["keep"], 2**40)}
            file.set_entry("settings", plan)
        states = [file.part(name) for name in file.get_entry("first states")]
        for chain, (_, _, state) in file.states().items():
            states[chain] = state
        file.append_event("resumed")
        told = choose_progress(progress, plan["chains"], plan["keep"])
        return _Run(density, plan, states, file, told).go(executor, seconds)


def _check_model(file: Record, plan: dict[str, Any], density: Density) -> None:
    if density.dimension != plan["dimension"]:
        raise OtherModelError(f"{file.path}: the record is of a model with {plan['dimension']} coordinates; this density "
                              f"has {density.dimension}")
    check = file.get_entry("check")
    position = as_vector(check["position"], density.dimension, "the stored position")
    value, gradient = density(position)
    same = value == check["log_density"] and np.array_equal(gradient, check["gradient"])
    near = np.isclose(value, check["log_density"], rtol=1e-9) and np.allclose(
        gradient, check["gradient"], rtol=1e-6, atol=1e-9 * float(np.max(np.abs(check["gradient"]))))
    if not near:
        raise OtherModelError(f"{file.path}: at {brief(position)} this density has log density {value!r}, but the record "
                              f"was made with {check['log_density']!r} (and its gradient): it is another model, or "
                              "other data. Resume with the density of the run")
    if not same:
        file.append_event("rounding", {"log_density": value, "was": check["log_density"]})


class _Signals:
    """Ctrl-C (and SIGTERM where asked): once asks to stop, twice abandons what is in hand."""

    def __init__(self, live: Live, say, here: bool) -> None:
        self.live = live
        self.say = say
        self.here = here
        self.count = 0

    def __call__(self, number: int, frame: object) -> None:
        self.count += 1
        if self.count == 1:
            self.say("stopping at the end of the blocks in hand; once more abandons them")
            return
        self.live.interrupt()
        if self.here:
            raise KeyboardInterrupt

    @contextlib.contextmanager
    def installed(self) -> Iterator[None]:
        """In the main thread: take over SIGINT, give it back afterwards. Elsewhere signals are not ours."""
        if threading.current_thread() is not threading.main_thread():
            yield
            return
        before = {}
        for number in (signal.SIGINT, *extra_signals):
            before[number] = signal.signal(number, self)
        try:
            yield
        finally:
            for number, handler in before.items():
                signal.signal(number, handler)


extra_signals: list[signal.Signals] = []  # the command adds SIGTERM


class _Run:
    """The driver of one run: keeps one block in flight per chain, writes each finished block before the next."""

    def __init__(self, density: Density, plan: dict[str, Any], states: list[bytes], record: Record | None,
                 progress: Progress) -> None:
        self.density = density
        self.plan = plan
        self.states = states
        self.record = record
        self.progress = progress
        self.parts = read_parts(record) if record else [ChainResult() for _ in states]
        self.settle_most = Settings.from_json(plan["settings"]).settle_bounds()[1]
        self.pace = [0.0] * len(states)  # transitions a second
        self.live = Live()
        self.errors: list[tuple[int, BaseException]] = []

    def go(self, executor: object, seconds: float | None) -> Result:
        limit = None if seconds is None else time.monotonic() + real("seconds", seconds, 0.0, 1e12)
        runner, ours = choose_executor(executor, self.density, len(self.states))
        sender = Sender(runner, self.density, self.live)
        signals = _Signals(self.live, self.progress.say, sender.local and not hasattr(runner, "_max_workers"))
        try:
            with signals.installed():
                self._drive(sender, signals, limit)
        finally:
            self.progress.close()
            if ours:
                runner.shutdown(wait=True, cancel_futures=True)
        return self._end(signals, limit)

    # ---- the loop ----------------------------------------------------------------------------------------------

    def _drive(self, sender: Sender, signals: _Signals, limit: float | None) -> None:
        flying: dict[Future, int] = {}
        waiting = [c for c in range(len(self.states)) if self._left(c)]
        while waiting or flying:
            stop = signals.count > 0 or self.errors or (limit is not None and time.monotonic() >= limit)
            if stop:
                waiting.clear()
            # one at a time, so that an executor that runs at once does not hold back what is finished
            if waiting:
                chain = waiting.pop(0)
                flying[sender.submit(self._job(chain, limit))] = chain
            if not waiting or len(flying) == len(self.states) or all(future.done() for future in flying):
                finished, _ = wait(flying, return_when=FIRST_COMPLETED)
                done = [self._take(future, flying.pop(future)) for future in finished]
                self._write([d for d in done if d is not None])
                waiting.extend(d.chain for d in done if d is not None and d.block.error is None and self._left(d.chain))

    def _left(self, chain: int) -> int:
        return self.plan["keep"] - self.parts[chain].count("keep")

    def _job(self, chain: int, limit: float | None) -> Job:
        keeping = self.parts[chain].count("keep") > 0 or self.parts[chain].summary.get("settled", self.settle_most == 0)
        left = self._left(chain) if keeping else 2**40
        seconds = _BLOCK_SECONDS
        if limit is not None:
            seconds = min(seconds, max(0.01, 0.5 * (limit - time.monotonic())))
        rows = _BLOCK_BYTES // (16 * self.plan["dimension"]) + 1 if keeping else 2**40
        most = min(left, rows, int(self.pace[chain] * seconds) + 1 if self.pace[chain] else 8)
        return Job(chain, self.states[chain], most, self.plan["gradients"])

    def _take(self, future: Future, chain: int) -> Done | None:
        try:
            done: Done = future.result()
        except BaseException as error:
            self.errors.append((chain, error))
            return None
        if done.block.error is not None:
            self.errors.append((chain, done.block.error))
        return done

    def _write(self, done: list[Done]) -> None:
        full = [d for d in done if len(d.block)]
        if self.record and full:
            self.record.append_blocks([self._for_record(d) for d in full])
        for d in full:
            part, block = self.parts[d.chain], d.block
            start = part.count(block.phase)
            part.facts[block.phase].append(block.facts)
            part.seconds += d.seconds
            part.summary = d.summary
            if block.phase == "keep":
                part.draws.append(block.draws)
                part.gradients.extend([] if block.gradients is None else [block.gradients])
                part.failures.append((block.failures[0] + start, *block.failures[1:]))
            self.states[d.chain] = d.state
            pace = len(block) / max(d.seconds, 1e-6)
            self.pace[d.chain] = min(pace, 4 * self.pace[d.chain]) if self.pace[d.chain] else pace
            total = self.plan["keep"] if block.phase == "keep" else self.settle_most
            self.progress.update(d.chain, block.phase, part.count(block.phase), total, block.facts)

    def _for_record(self, d: Done) -> RecordBlock:
        block = d.block
        keeping = block.phase == "keep"
        return RecordBlock(d.chain, block.phase, self.parts[d.chain].count(block.phase), block.facts, d.state,
                           draws=block.draws if keeping else None, failures=block.failures,
                           gradients=block.gradients if keeping else None,
                           note={"seconds": d.seconds, "summary": d.summary})

    # ---- the end -----------------------------------------------------------------------------------------------

    def _end(self, signals: _Signals, limit: float | None) -> Result:
        why = ""
        if signals.count:
            why = "Ctrl-C"
        elif self.errors:
            why = "an exception"
        elif limit is not None and any(self._left(c) for c in range(len(self.states))):
            why = "the time given had passed"
        path = self.record.path if self.record else ""
        result = Result(self.plan, self.parts, ended=why, path=path)
        if self.record:
            self.record.append_event("stopped" if why else "finished", {"why": why} if why else {})
        if signals.count > 1 and all(isinstance(error, Interrupted | KeyboardInterrupt) for _, error in self.errors):
            raise KeyboardInterrupt
        if self.errors:
            raise self._explained(result)
        return result

    def _explained(self, result: Result) -> BaseException:
        chain, error = self.errors[0]
        part = self.parts[chain]
        phase = "keep" if part.count("keep") else "settle"
        doing = "keeping" if phase == "keep" else "settling"
        kept = (f"the record {result.path} holds every finished transition; fellwalk.resume goes on from it"
                if result.path else "this exception's fellwalk_result holds the draws finished before it")
        error.add_note(f"fellwalk: raised in chain {chain + 1}, {doing}, at transition {part.count(phase) + 1}; {kept}.")
        with contextlib.suppress(AttributeError):
            error.fellwalk_result = result  # type: ignore[attr-defined]
        return error
