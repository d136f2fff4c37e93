"""One block of transitions as a pure function of density, chain state and length; and who executes it."""

import contextlib
import hashlib
import os
import threading
import time
from concurrent.futures import Executor, Future, ThreadPoolExecutor
from dataclasses import dataclass, field

import cloudpickle

from fellwalk.chain import Block, Chain
from fellwalk.density import Density
from fellwalk.errors import ArgumentError

__all__ = ["Done", "Here", "Job", "Live", "Sender", "choose_executor"]


@dataclass(frozen=True)
class Job:
    """A block to be made: the next `most` transitions, or fewer when settling ends first."""

    chain: int
    state: bytes
    most: int
    gradients: bool


@dataclass(frozen=True)
class Done:
    """A finished block with the chain's new state, what it took, and what the chain knows of itself."""

    chain: int
    block: Block
    state: bytes
    seconds: float
    summary: dict[str, object]


@dataclass
class Live:
    """The chains at work in this process, so that they can be interrupted."""

    stopped: bool = False
    chains: set[Chain] = field(default_factory=set)
    guard: threading.Lock = field(default_factory=threading.Lock)

    def interrupt(self) -> None:
        """Abandon every transition in hand, and those of blocks that have not begun."""
        with self.guard:
            self.stopped = True
            for chain in self.chains:
                chain.interrupt()

    @contextlib.contextmanager
    def holding(self, chain: Chain):
        """The chain can be interrupted inside this context."""
        with self.guard:
            self.chains.add(chain)
        try:
            yield
        finally:
            with self.guard:
                self.chains.discard(chain)


def make_block(density: Density, job: Job, live: Live | None = None) -> Done:
    """Make the block of a job. Exceptions of the density are carried in the block, after what was finished."""
    begun = time.perf_counter()
    chain = Chain.from_state(density, job.state)
    keeping = chain.settled
    with live.holding(chain) if live else contextlib.nullcontext():
        most = 0 if live and live.stopped else job.most
        block = chain.block(most, draws=keeping, gradients=keeping and job.gradients)
    return Done(job.chain, block, chain.state, time.perf_counter() - begun, chain.summary)


_densities: dict[str, Density] = {}


def make_block_elsewhere(name: str, packed: bytes, job: Job) -> Done:
    """`make_block` in another process: the density comes as bytes and is unpacked once per worker."""
    if name not in _densities:
        _densities.clear()
        _densities[name] = cloudpickle.loads(packed)
    return make_block(_densities[name], job)


class Here(Executor):
    """Runs each task at once, in the thread that submits it."""

    def submit(self, function, /, *args, **kwargs) -> Future:
        """Run now; the future that comes back is finished."""
        future: Future = Future()
        try:
            future.set_result(function(*args, **kwargs))
        except BaseException as error:
            future.set_exception(error)
        return future


def choose_executor(given: object, density: Density, chains: int) -> tuple[Executor, bool]:
    """(executor, is it ours to shut down). Compiled densities run on threads, Python ones here."""
    if isinstance(given, Executor):
        return given, False
    if given not in (None, "here", "threads"):
        raise ArgumentError('executor must be a concurrent.futures.Executor, "here", "threads" or None; it is '
                            f"{given!r:.60}")
    if given == "threads" or (given is None and density.compiled):
        return ThreadPoolExecutor(max(1, min(chains, os.cpu_count() or 1)), thread_name_prefix="fellwalk"), True
    return Here(), True


class Sender:
    """Submits jobs to an executor, in the form that suits where it runs."""

    def __init__(self, executor: Executor, density: Density, live: Live) -> None:
        self.executor = executor
        self.density = density
        self.live = live
        self.local = isinstance(executor, Here | ThreadPoolExecutor)
        if not self.local:
            try:
                self.packed = cloudpickle.dumps(density)
            except Exception as error:
                raise ArgumentError(f"this density cannot be sent to another process ({error}); use threads, or a "
                                    "Python function that can be pickled") from error
            self.name = hashlib.blake2b(self.packed, digest_size=16).hexdigest()

    def submit(self, job: Job) -> Future:
        """A future of `Done`."""
        if self.local:
            return self.executor.submit(make_block, self.density, job, self.live)
        return self.executor.submit(make_block_elsewhere, self.name, self.packed, job)
