"""One block of transitions as a pure function of density, chain state and length; in this process or in another."""

from __future__ import annotations

import contextlib
import os
import pickle
import signal
import socket
import threading
import time
import traceback
from collections.abc import Iterator
from dataclasses import dataclass, field, replace
from typing import Any

import cloudpickle
import numpy as np
from numpy.typing import NDArray

from fellwalk.chain import Block, Chain, Room, _joined
from fellwalk.density import Density, brief
from fellwalk.errors import BusyError, RemoteError, WorkerError
from fellwalk.fresh import Fresh
from fellwalk.watch import Moments, Watch, Watching

__all__ = ["Check", "Done", "Job", "Live", "Parcel", "Reply", "make_block", "make_block_elsewhere", "not_begun"]


@dataclass(frozen=True)
class Job:
    """A block to be made: at most `most` transitions and about `seconds` of work, all of one phase, by the chain that
    has this state, or by a fresh one.

    The clock decides only where a block ends, never what is drawn.
    """

    chain: int
    state: bytes | Fresh
    most: int
    gradients: bool
    seconds: float = 0.5
    watch: Watch | None = None
    moments: Moments | None = None  # of the draws before, of a run that watches


@dataclass(frozen=True)
class Done:
    """A finished block with the chain's new state, what it took, and what the chain knows of itself."""

    chain: int
    block: Block
    state: bytes
    seconds: float
    summary: dict[str, Any]


@dataclass
class Live:
    """The chains at work in this process, so that they can be interrupted."""

    stopped: bool = False
    chains: set[Chain] = field(default_factory=set)
    guard: threading.RLock = field(default_factory=threading.RLock)  # a signal may come while this thread holds it

    def interrupt(self) -> None:
        """Abandon every transition in hand, and the blocks that have not begun."""
        with self.guard:
            self.stopped = True
            for chain in list(self.chains):
                chain.interrupt()

    def inside_density(self) -> bool:
        """Is a chain inside a call of the user's function? (For a signal handler, which runs between Python lines.)"""
        for chain in list(self.chains):
            try:
                chain._engine.run(0)
            except BusyError:
                return True
        return False

    @contextlib.contextmanager
    def holding(self, chain: Chain) -> Iterator[None]:
        """The chain can be interrupted inside this context."""
        with self.guard:
            self.chains.add(chain)
            if self.stopped:
                chain.interrupt()
        try:
            yield
        finally:
            with self.guard:
                self.chains.discard(chain)


def not_begun(chain: int, density: Density, error: Exception) -> Done:
    """What comes back where the density raised at the start of a fresh chain."""
    return Done(chain, replace(_joined("keep", [], density.dimension), error=error), b"", 0.0, {})


def make_block(density: Density, job: Job, live: Live | None = None) -> Done:
    """Make the block of a job. Exceptions of the density are carried in the block, after what was finished."""
    live = live or Live()
    begun = time.perf_counter()
    try:
        chain = job.state.chain(density) if isinstance(job.state, Fresh) else Chain.from_state(density, job.state)
    except Exception as error:  # of the density, at the start of a fresh chain
        if not isinstance(job.state, Fresh):
            raise
        return not_begun(job.chain, density, error)
    keeping, phase = chain.settled, chain.phase
    watching = None
    if job.watch is not None:
        moments = Moments.of(len(density.names)) if job.moments is None else job.moments.copy()
        watching = Watching(job.watch, density, moments)
    parts: list[Block] = []
    width = watching.width if watching else density.dimension
    room = Room(job.most, width, density.dimension, keeping, keeping and job.gradients)
    moving = time.perf_counter()
    seconds = max(job.seconds, 4 * (moving - begun))  # in millions of dimensions, unpacking a state takes its time
    done, size, elapsed = 0, 1, 0.0
    with live.holding(chain):
        while done < job.most and elapsed < seconds and chain.settled == keeping and not live.stopped:
            try:
                parts.append(chain.block(min(size, job.most - done), draws=keeping, gradients=keeping and job.gradients,
                                         watching=watching, room=room))
            except Exception as error:  # of the watched function: the chain is beyond the draws it was asked about
                block = replace(_joined(phase, [], density.dimension), error=error)
                before = b"" if isinstance(job.state, Fresh) else job.state
                return Done(job.chain, block, before, time.perf_counter() - begun, chain.summary)
            done += len(parts[-1])
            if parts[-1].error is not None:
                break
            elapsed = time.perf_counter() - moving
            size = max(1, min(8 * size, int(done * (seconds / elapsed - 1))))
    block = _joined(phase, parts, density.dimension, room)
    if watching is not None and keeping:
        block = replace(block, moments=watching.moments)
    return Done(job.chain, block, chain.state, time.perf_counter() - begun, dict(chain.summary))


# ---- in another process ---------------------------------------------------------------------------------------------


@dataclass(frozen=True)
class Check:
    """What the density gives at one point, to compare another process, machine or day with."""

    position: NDArray[np.float64]
    log_density: float
    gradient: NDArray[np.float64]

    @classmethod
    def of(cls, density: Density, position: NDArray[np.float64]) -> Check:
        """Evaluate `density` at `position`."""
        return cls(position, *density(position))

    def same(self, other: Check) -> bool:
        """Do log density and gradient agree bit for bit?"""
        mine, others = (np.append(c.gradient, c.log_density).tobytes() for c in (self, other))
        return mine == others

    def near(self, other: Check) -> bool:
        """Do they agree but for rounding?"""
        most = float(np.max(np.abs(self.gradient)))
        return bool(np.isclose(self.log_density, other.log_density, rtol=1e-9, atol=1e-9) and
                    np.allclose(self.gradient, other.gradient, rtol=1e-6, atol=1e-9 * most))


@dataclass(frozen=True)
class Parcel:
    """A density on its way to workers: its name, its bytes (left out once a worker may be thought to have it), the
    process it comes from, and what it gives there."""

    name: str
    packed: bytes | None
    home: tuple[str, int]
    check: Check

    def light(self) -> Parcel:
        """Without the density itself, where that is large: a worker that lacks it says so."""
        return replace(self, packed=None) if self.packed is not None and len(self.packed) > 32_768 else self


@dataclass(frozen=True)
class Reply:
    """What a worker answers: the block, with its exception apart (packed, as text with the traceback); or that it lacks
    the density; and a remark when it calculates differently."""

    done: Done | None
    error: tuple[bytes, str] | None = None
    lacking: bool = False
    remark: str = ""

    def opened(self) -> Done:
        """The block with its exception, which has the traceback of the worker as its cause."""
        assert self.done is not None
        if self.error is None:
            return self.done
        packed, text = self.error
        try:
            error = cloudpickle.loads(packed)
        except Exception:
            error = RemoteError(text.splitlines()[-1])
        error.__cause__ = RemoteError(f"in a worker:\n\n{text}")
        return replace(self.done, block=replace(self.done.block, error=error))


_guard = threading.Lock()
_unpacked: dict[str, Density] = {}


def here() -> tuple[str, int]:
    """(machine, process)."""
    return socket.gethostname(), os.getpid()


def make_block_elsewhere(parcel: Parcel, job: Job | None) -> Reply:
    """`make_block` in another process, which unpacks the density once. Without a job: only see whether it can."""
    remark = ""
    with _guard:
        if parcel.name not in _unpacked:
            if parcel.packed is None:
                return Reply(None, lacking=True)
            remark = _unpack(parcel)
        density = _unpacked[parcel.name]
    if job is None:
        return Reply(None, remark=remark)
    done = make_block(density, job)
    error = done.block.error
    if error is None:
        return Reply(done, remark=remark)
    return Reply(replace(done, block=replace(done.block, error=None)), _packed(error), remark=remark)


def _unpack(parcel: Parcel) -> str:
    elsewhere = here() != parcel.home
    if elsewhere:
        behave_as_worker()
    try:
        density = pickle.loads(parcel.packed)
        found = Check.of(density, parcel.check.position)
    except Exception as error:
        raise WorkerError(f"the density cannot be used in worker process {os.getpid()} on {socket.gethostname()}: "
                          f"{type(error).__name__}: {error}") from error
    where = f"worker process {os.getpid()} on {socket.gethostname()}"
    values = f"{found.log_density!r} there, {parcel.check.log_density!r} here, at {brief(parcel.check.position)}"
    if not found.near(parcel.check):
        raise WorkerError(f"{where} does not calculate this density: its log density is {values} (or its gradient "
                          "differs). Either the function does not give the same twice, or it uses other data there")
    while len(_unpacked) > 1:
        _unpacked.pop(next(iter(_unpacked)))
    _unpacked[parcel.name] = density
    if found.same(parcel.check):
        return ""
    return (f"{where} rounds this density differently: log density {values}. Draws will not be the same bits as in one "
            "process (other libraries, another kind of CPU, or BLAS with another number of threads)")


def behave_as_worker() -> None:
    """Ctrl-C is for the driver, and one thread of BLAS in each worker: more only get into each other's way."""
    if threading.current_thread() is threading.main_thread():
        signal.signal(signal.SIGINT, signal.SIG_IGN)
    with contextlib.suppress(ImportError):
        import threadpoolctl

        threadpoolctl.threadpool_limits(1)


def _packed(error: BaseException) -> tuple[bytes, str]:
    """The exception itself where it survives the way home, else one that tells of it; and its traceback as text."""
    text = "".join(traceback.format_exception(error)).rstrip()
    try:
        packed = cloudpickle.dumps(error)
        cloudpickle.loads(packed)
    except Exception:
        packed = cloudpickle.dumps(RemoteError(f"{type(error).__name__}: {error}"))
    return packed, text
