"""Who executes the blocks: this thread, threads, worker processes of our own, or the executor that was given."""

from __future__ import annotations

import hashlib
import importlib.util
import os
import signal
import socket
import sys
import threading
import time
import warnings
from collections.abc import Callable
from concurrent.futures import BrokenExecutor, Executor, Future, ThreadPoolExecutor
from typing import Any

import cloudpickle

from fellwalk.density import Density
from fellwalk.errors import ArgumentError, WorkerError
from fellwalk.work import Check, Job, Live, Parcel, behave_as_worker, here, make_block, make_block_elsewhere

__all__ = ["Here", "Workers", "cores"]

# Starting a pool of two workers that import this package took 0.9 to 1.3 s on the machine it was written on; a pool
# must promise to save a few times as much before anybody waits for it.
_SAVING_SECONDS = 4.0
_GRADIENTS = 10  # of one transition, for guessing how long a run will take before anything is known of it
_ONE_THREAD = dict.fromkeys(
    ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS", "BLIS_NUM_THREADS", "VECLIB_MAXIMUM_THREADS",
     "NUMEXPR_NUM_THREADS"), "1")
_DEATHS = 4  # workers lost in a row, without a block finished, before a run gives up


def cores() -> int:
    """CPUs that this process may use."""
    return len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count() or 1


class Here(Executor):
    """Runs each task at once, in the thread that submits it."""

    _max_workers = 1

    def submit(self, function: Callable[..., Any], /, *args: Any, **kwargs: Any) -> Future[Any]:
        """Run now; the future that comes back is finished."""
        future: Future[Any] = Future()
        try:
            future.set_result(function(*args, **kwargs))
        except BaseException as error:
            future.set_exception(error)
        return future


def cost_of(density: Density, check: Check) -> float:
    """Seconds of one evaluation: the quickest of a few, as the first may compile or load something."""
    best, begun = float("inf"), time.perf_counter()
    for _ in range(5):
        before = time.perf_counter()
        density(check.position)
        now = time.perf_counter()
        best = min(best, now - before)
        if now - begun > 0.05:
            break
    return best


class Workers:
    """An executor with what a run needs of it: how many blocks it takes at once, whether the density must be sent, and
    what to do when a worker dies.

    given: as in `run`. transitions: about how many the run will make, for choosing when nothing is given.
    Errors: ArgumentError for an executor that cannot be used or a density that cannot be sent; WorkerError when the
    workers cannot run it.
    """

    def __init__(self, given: object, density: Density, chains: int, transitions: float, check: Check) -> None:
        self.density, self.check, self.live = density, check, Live()
        self.parcel: Parcel | None = None
        self.remarks: list[str] = []
        self.deaths = 0
        self.ours = not isinstance(given, Executor)
        self.count = max(1, min(chains, cores()))
        kind = given
        if given is None:
            kind, self.why = self._choice(chains, transitions)
        elif isinstance(given, str) and given in ("here", "threads", "processes"):
            self.why = f"blocks run {_WORDS[given].format(self.count)}, as asked"
        elif self.ours:
            raise ArgumentError('executor must be a concurrent.futures.Executor, "here", "threads", "processes" or '
                                f"None; it is {given!r:.60}")
        else:
            self.why = f"blocks run on the {type(given).__name__} given"
        self.kind = kind if self.ours else "given"
        self.executor: Any = given if not self.ours else self._own()
        self.here = isinstance(self.executor, Here)
        self.local = self.here or (isinstance(self.executor, ThreadPoolExecutor)
                                   and type(self.executor).__name__ != "InterpreterPoolExecutor")
        self.options = {"pure": False} if type(self.executor).__module__.split(".")[0] == "distributed" else {}
        try:
            if not self.local:
                self.parcel = self.parcel or self._pack()
                _check_fork(self.executor)
                if self.options:
                    # tasks of Dask run beside the main thread, which is the one that Ctrl-C would end; this runs in it
                    self.executor._client.run(ignore_interrupts, socket.gethostname(), os.getpgrp())
                self._try()
            if not self.ours:
                self.count = _count(self.executor)
        except BaseException:
            self.close(abandon=True)
            raise

    # ---- choosing ----------------------------------------------------------------------------------------------

    def _choice(self, chains: int, transitions: float) -> tuple[str, str]:
        threads, here = (f"blocks run {_WORDS[kind].format(self.count)}" for kind in ("threads", "here"))
        if self.density.compiled:
            return "threads", f"{threads}: the density is compiled, so threads can share this process"
        if self.count == 1:
            return "here", f"{here}: there is only one {'chain' if chains == 1 else 'core'}"
        cost = cost_of(self.density, self.check)
        seconds = cost * _GRADIENTS * transitions
        told = f"at {_duration(cost)} an evaluation"
        if seconds * (1 - 1 / self.count) < _SAVING_SECONDS:
            return "here", f"{here}: {told}, worker processes would not pay"
        if importlib.util.find_spec("loky") is None:
            return "here", f"{here}; with loky installed (pip install loky) {self.count} processes would share the work"
        try:
            self.parcel = self._pack()
        except ArgumentError:
            return "here", f"{here}: the density cannot be pickled, so it cannot be sent to worker processes"
        return "processes", f"blocks run {_WORDS['processes'].format(self.count)}: {told} they pay"

    def _own(self) -> Executor:
        # The handler of a signal runs between the lines of the main thread: it could not interrupt a compiled density
        # there, so that gets a thread.
        if self.kind == "here" and not self.density.compiled:
            return Here()
        if self.kind != "processes":
            return ThreadPoolExecutor(1 if self.kind == "here" else self.count, thread_name_prefix="fellwalk")
        if self.parcel is None:
            self.parcel = self._pack()
        try:
            import loky
        except ImportError:
            raise ArgumentError('executor="processes" needs loky: pip install loky; or give a '
                                "ProcessPoolExecutor") from None
        return loky.ProcessPoolExecutor(self.count, initializer=_begin_worker, initargs=(os.getpid(),), env=_ONE_THREAD)

    def _pack(self) -> Parcel:
        try:
            packed = cloudpickle.dumps(self.density)
        except Exception as error:
            raise ArgumentError(f"this density cannot be sent to other processes ({_told(error)}). Use threads, or "
                                "make it with fellwalk.Density.factory(function, ...): every worker then calls that "
                                "function itself") from error
        return Parcel(hashlib.blake2b(packed, digest_size=16).hexdigest(), packed, here(), self.check)

    # ---- using -------------------------------------------------------------------------------------------------

    @property
    def room(self) -> int:
        """Blocks to keep in flight: enough that no worker waits, few enough that memory stays bounded."""
        return 1 if self.here else 2 * self.count

    def _try(self) -> None:
        """See that a worker can run the density before anything is written or drawn."""
        try:
            self.remarks += [remark] if (remark := self._send(self.parcel, None).result().remark) else []
        except WorkerError:
            raise
        except BrokenExecutor as error:
            raise WorkerError(f"a worker process died when it tried this density ({_told(error)})") from error
        except Exception as error:
            raise self.lost(error) from error

    def _send(self, parcel: Parcel | None, job: Job | None) -> Future[Any]:
        if self.local:
            return self.executor.submit(make_block, self.density, job, self.live)
        return self.executor.submit(make_block_elsewhere, parcel, job, **self.options)

    def submit(self, job: Job, *, whole: bool = False) -> Future[Any]:
        """A future of `Done` (local) or `Reply`; `whole`: send the density too, as the worker lacked it."""
        parcel = self.parcel if whole or self.parcel is None else self.parcel.light()
        return self._send(parcel, job)

    def opened(self, answer: Any) -> Any:
        """The `Done` of an answer, or None when the worker lacks the density."""
        if self.local:
            return answer
        self.remarks += [answer.remark] if answer.remark else []
        if answer.lacking:
            return None
        self.deaths = 0
        return answer.opened()

    def rebuild(self, error: BaseException) -> bool:
        """After `error`: is this our own pool, broken, and is there a new one now?"""
        if self.kind != "processes" or not isinstance(error, BrokenExecutor) or self.deaths >= _DEATHS:
            return False
        self.deaths += 1
        self.close(abandon=True)
        self.executor = self._own()
        return True

    def lost(self, error: BaseException) -> WorkerError:
        """What to say when a block did not come back."""
        if isinstance(error, WorkerError):
            return error
        told = _told(error)
        if self.deaths >= _DEATHS:
            return WorkerError(f"worker processes died {_DEATHS + 1} times in a row ({told}); look for a density that "
                               "crashes the process, or for too little memory")
        if isinstance(error, BrokenExecutor):
            return WorkerError(f"a worker of the executor died ({told}), and the executor with it")
        return WorkerError(f"the executor did not bring a block back ({told})")

    def __enter__(self) -> Workers:
        return self

    def __exit__(self, kind: object, *_: object) -> None:
        self.close(abandon=kind is not None)

    def close(self, *, abandon: bool = False) -> None:
        """End what is ours; an executor that was given is left alone."""
        if not self.ours:
            return
        if self.kind == "processes":
            self.executor.shutdown(wait=not abandon, kill_workers=abandon)
        else:
            self.executor.shutdown(wait=True, cancel_futures=True)


_WORDS = {"here": "in this process, one at a time", "threads": "on {} threads", "processes": "in {} worker processes"}


def _told(error: BaseException) -> str:
    """An exception in one line."""
    first = str(error).strip().split("\n")[0].rstrip(".")
    return f"{type(error).__name__}: {first}" if first else type(error).__name__


def _duration(seconds: float) -> str:
    for unit, size in (("s", 1.0), ("ms", 1e-3)):
        if seconds >= size:
            return f"{seconds / size:.2g} {unit}"
    return f"{seconds * 1e6:.2g} microseconds"


def _count(executor: Any) -> int:
    """Workers of an executor that was given, as far as it says."""
    if type(executor).__module__.split(".")[0] == "distributed":
        return max(1, sum(executor._client.nthreads().values()))
    for name in ("num_workers", "_max_workers"):
        found = getattr(executor, name, None)
        if isinstance(found, int) and found > 0:
            return found
    return cores()


def _check_fork(executor: Any) -> None:
    """A forked process has copies of locks that other threads hold, and no such threads: it may hang."""
    context = getattr(executor, "_mp_context", None) or getattr(executor, "_context", None)
    if not hasattr(context, "get_start_method") or context.get_start_method() != "fork":
        return
    if getattr(executor, "_processes", None):
        return  # forked before we came
    other = 'ProcessPoolExecutor(mp_context=multiprocessing.get_context("forkserver")), or executor="processes"'
    if "jax" in sys.modules:
        raise ArgumentError(f"this executor would fork the process after JAX was imported, which may hang; use {other}")
    if threading.active_count() > 1:
        names = ", ".join(thread.name for thread in threading.enumerate() if thread is not threading.main_thread())
        warnings.warn(f"this executor forks the process while other threads run ({names}); a worker may hang on a lock "
                      f"that one of them holds. Safer: {other}", RuntimeWarning, stacklevel=2)


def ignore_interrupts(machine: str, group: int) -> None:
    """In a worker that shares the terminal of the driver: leave Ctrl-C to the driver."""
    main = threading.current_thread() is threading.main_thread()
    if main and (socket.gethostname(), os.getpgrp()) == (machine, group):
        signal.signal(signal.SIGINT, signal.SIG_IGN)


def _begin_worker(driver: int) -> None:
    """First thing in a worker of our own pool: behave, and end when the driver has gone."""
    behave_as_worker()

    def watch() -> None:
        while os.getppid() == driver:
            time.sleep(1)
        os._exit(1)

    threading.Thread(target=watch, daemon=True, name="fellwalk watch").start()
