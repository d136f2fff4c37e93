"""One chain for use inside other programs: settle, advance, read, export, import."""

import hashlib
import json
import struct
import time
from collections.abc import Callable, Mapping
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import ArrayLike, NDArray

from fellwalk._core import FACTS, Engine, Stream
from fellwalk.density import Density, as_vector, brief, stopped
from fellwalk.errors import ArgumentError, SettleError, StartError, StateError
from fellwalk.motions import Jittered, Leapfrog, Motion, NoUTurn, Path, check_fits, real, whole
from fellwalk.settings import Settings
from fellwalk.settled import SettledChain
from fellwalk.watch import Moments, Watching

if TYPE_CHECKING:
    from fellwalk._core import Summary

__all__ = ["Block", "Chain"]

Bytes = bytes | bytearray | memoryview
Failures = tuple[NDArray[np.int64], NDArray[np.int32], NDArray[np.float64]]
Rows = tuple[NDArray[np.float64], NDArray[np.float64] | None, NDArray[np.void]]  # draws, gradients, facts
_STATE_MAGIC = b"fellwalk chain 1\n"
_CHECKSUM_BYTES = 16  # of the SHA-256 of all that stands before it
_ENDLESS = 2**62
_PIECE = 1024  # transitions between two looks of Python
_FAILURE_ROOM = 32  # positions of failed steps kept in one block; every failure is counted in the facts


@dataclass(frozen=True)
class Block:
    """Transitions of one phase ("settle" or "keep") in the order they happened.

    draws (n, dimension), or (n, watched) of a run that watches; gradients (n, dimension) or None, of the log density
    at the draws; facts (n,) of dtype ``fellwalk.facts.FACTS``; failures: (index, code, position) of the first failed
    steps; error: the exception that ended the block early, or None; moments: of the chain's draws so far, in all
    coordinates, of a run that watches.
    """

    phase: str
    draws: NDArray[np.float64]
    gradients: NDArray[np.float64] | None
    facts: NDArray[np.void]
    failures: Failures
    error: BaseException | None = None
    moments: Moments | None = None

    def __len__(self) -> int:
        return len(self.facts)


class Room:
    """Arrays made once for the transitions of several calls, which fill them one after the other.

    Memory that nothing is written to is never the process's own, so there may be much more room than is used.
    """

    def __init__(self, most: int, width: int, dimension: int, draws: bool, gradients: bool) -> None:
        self.draws = np.empty((most if draws else 0, width))
        self.gradients = np.empty((most, dimension)) if gradients else None
        self.facts = np.empty(most, dtype=FACTS)
        self.used = 0

    def rows(self, n: int) -> Rows:
        """Views of the next n rows."""
        return self._between(self.used, self.used + n)

    def filled(self) -> Rows:
        """What has been written; copies where less than half was, so that nobody keeps the rest."""
        draws, gradients, facts = self._between(0, self.used)
        if 2 * self.used >= len(self.facts):
            return draws, gradients, facts
        return draws.copy(), None if gradients is None else gradients.copy(), facts.copy()

    def _between(self, begin: int, end: int) -> Rows:
        gradients = None if self.gradients is None else self.gradients[begin:end]
        return self.draws[begin:end], gradients, self.facts[begin:end]


class Chain:
    """A chain over a density. It prints nothing, starts no thread, installs no signal handler, keeps no global.

    One thread at a time moves a chain (BusyError otherwise); `position`, `gradient`, `log_density`, `counts` and
    `summary` can be read at any time and from any thread: they are those of the last completed transition.

    start: position of shape (dimension,), where log density and gradient are finite; with `fellwalk.Parameters` in
        natural values, flat or a dict, while positions and draws of the chain are in free coordinates
        (``density.parameters.natural(block.draws)`` maps them).
    scale: optional variances of shape (dimension,) to start from, as the diagonal of the inverse base metric;
        settling refines them, unless ``adapt_scale=False``.
    settled: the settled part of another chain; this one then does not settle.
    Other arguments as in `run`. Errors: ArgumentError, ShapeError, StartError, and whatever the density raises.
    """

    def __init__(
        self,
        density: Density,
        start: ArrayLike | Mapping[str, ArrayLike],
        *,
        motion: Motion | None = None,
        path: Path | None = None,
        seed: int | np.random.SeedSequence | None = None,
        settle: int | str = 0,
        acceptance: float = 0.8,
        step_size: float | None = None,
        scale: ArrayLike | None = None,
        adapt_scale: bool = True,
        beta: float | None = None,
        rank: int | str = "auto",
        settled: SettledChain | None = None,
    ) -> None:
        settings = Settings(motion=motion or Leapfrog(), path=path or NoUTurn(), settle=settle, acceptance=acceptance,
                            step_size=step_size, adapt_scale=adapt_scale, beta=beta, rank=rank)
        self._make(density, settings if settled is None else self._reused(settings, settled), seed)
        self._set_base(scale, settled)
        self._start(self._free(start))

    def _make(self, density: Density, settings: Settings, seed: int | np.random.SeedSequence | None) -> None:
        if not isinstance(density, Density):
            raise ArgumentError(f"the first argument must be a fellwalk.Density; it is {type(density).__name__}: wrap "
                                "your function as fellwalk.Density(function, dimension)")
        check_fits(settings.motion, density.dimension, density.hessian_product is not None)
        self.density = density
        self.settings = settings
        if not isinstance(seed, np.random.SeedSequence):
            seed = np.random.SeedSequence(None if seed is None else whole("seed", seed, 0, 2**128))
        self._target = density.target()
        self._engine = Engine(self._target, Stream(seed), settings.core())
        self._told = (0, 0)

    @classmethod
    def _with_settings(
        cls,
        density: Density,
        settings: Settings,
        start: ArrayLike,
        seed: np.random.SeedSequence,
        scale: ArrayLike | None,
        settled: SettledChain | None = None,
    ) -> "Chain":
        self = cls.__new__(cls)
        self._make(density, settings if settled is None else self._reused(settings, settled), seed)
        self._set_base(scale, settled)
        self._start(start)
        return self

    @staticmethod
    def _reused(settings: Settings, settled: SettledChain) -> Settings:
        """Settings of a chain that takes over a settled part and does not settle."""
        if settings.settle not in ("auto", 0):
            raise ArgumentError(f"settled= takes the place of settling; leave settle out (it is {settings.settle!r})")
        path = settings.path
        if isinstance(path, Jittered) and path.steps == "auto":
            if settled.steps == 0:
                raise ArgumentError('the settled part knows no number of steps, as it is not of jittered paths; give '
                                    'Jittered(steps) in the place of Jittered("auto")')
            path = Jittered(settled.steps)
        return replace(settings, settle=0, step_size=settled.step_size, beta=settled.beta, adapt_scale=False, path=path)

    def _set_base(self, scale: ArrayLike | None, settled: SettledChain | None) -> None:
        if settled is not None:
            if scale is not None:
                raise ArgumentError("give scale= or settled=, not both: the settled part has a scale of its own")
            status = self._engine.set_base(settled.scale, settled.directions, settled.variances)
        elif scale is not None:
            status = self._engine.set_base(as_vector(scale, self.density.dimension, "scale"))
        else:
            return
        if status != 0:
            raise ArgumentError("scale must hold finite numbers > 0 (variances, one a coordinate), and a settled part "
                                "no more directions than rank allows")

    def _free(self, start: ArrayLike | Mapping[str, ArrayLike]) -> object:
        """A start in the coordinates that the chain moves in, not yet looked at."""
        return start if self.density.parameters is None else self.density.parameters.free(start)

    def _start(self, start: object) -> None:
        self._put(start, self._engine.start)

    def _put(self, start: object, move: Callable[[NDArray[np.float64]], int]) -> None:
        x = as_vector(start, self.density.dimension, "the starting point")
        if not np.all(np.isfinite(x)):
            bad = int(np.flatnonzero(~np.isfinite(x))[0])
            raise StartError(f"the starting point is {x[bad]} in {self.density.coordinates[bad]}; start from finite "
                             "numbers")
        try:
            status = move(x)
        finally:
            self._count()
        if status == -7:
            raise self._no_start(x)
        if status < 0:
            raise stopped(status, "the starting point", self.density, x)

    def _no_start(self, x: NDArray[np.float64]) -> StartError:
        value, gradient = self.density(x)
        wrong = np.flatnonzero(~np.isfinite(gradient))
        if np.isfinite(value) and not len(wrong):
            return StartError(f"the log density or its gradient was not finite at the starting point {brief(x)}, and "
                              "was finite there at a second call; the function must depend on the position alone")
        what = f"the log density is {value}"
        if np.isfinite(value):
            what = f"the gradient is {gradient[wrong[0]]} in {self.density.coordinates[wrong[0]]}"
        return StartError(f"{what} at the starting point {brief(x)}; start inside the support, where both are finite")

    def _count(self) -> None:
        now = (self._target.gradients, self._target.products)
        self.density.count(now[0] - self._told[0], now[1] - self._told[1])
        self._told = now

    # ---- moving -------------------------------------------------------------------------------------------------

    def settle(self, transitions: int | str = "auto") -> Block:
        """Settle from here: a new plan, whatever came before. Returns the transitions made."""
        plan = Settings(settle=transitions)
        self._engine.settle(*plan.settle_bounds())
        if self.settled:
            return _joined("settle", [], self.density.dimension)
        return self._raised(self.block(_ENDLESS))

    def advance(
        self, draws: int | None = None, *, gradients: int | None = None, seconds: float | None = None
    ) -> Block:
        """Make kept transitions: `draws` of them, or until they have taken `gradients`, or for `seconds`.

        Of several bounds the first that is reached ends the block. A transition that has begun is completed, so
        gradients and seconds are passed by no more than one transition takes (at most 0.1 s of small ones). The bounds
        decide how many draws there are and nothing else about them.
        Raises what the density raises; the chain is then as before that transition, and this call's draws before it are
        not returned (`block` returns both). Errors: SettleError before settling has ended; ArgumentError without a step
        size, or without a bound.
        """
        if draws is None and gradients is None and seconds is None:
            raise ArgumentError("say how far: advance(draws=...), advance(gradients=...) or advance(seconds=...)")
        count = _ENDLESS if draws is None else whole("draws", draws, 0, 2**40)
        budget = None if gradients is None else whole("gradients", gradients, 1, 2**40)
        end = None if seconds is None else time.perf_counter() + real("seconds", seconds, 0.0, 1e9)
        if not self.settled:
            raise SettleError("this chain has not settled; call settle() first, or make it with settle=0 and a "
                              "step_size")
        if budget is None and end is None:
            return self._raised(self.block(count))
        return self._raised(self._bounded(count, budget, end))

    def _bounded(self, count: int, budget: int | None, end: float | None) -> Block:
        """Kept transitions in pieces, short ones where the clock decides, until the first bound is reached."""
        self._ready()
        parts: list[Block] = []
        most = max(1, min(_PIECE, 2**24 // self.density.dimension))  # rows of at most 128 MB are made ahead
        piece, begun, made, spent = (most if end is None else 1), time.perf_counter(), 0, 0
        while made < count and not (parts and parts[-1].error is not None):
            now = time.perf_counter()
            if end is not None:
                if now >= end:
                    break
                if made:
                    each = max((now - begun) / made, 1e-9)
                    piece = int(min(4 * piece, most, max(1.0, 0.5 * min(end - now, 0.2) / each)))
            left = _ENDLESS if budget is None else budget - max(spent, made)
            if left <= 0:
                break
            parts.append(self._rows("keep", min(piece, count - made, left), True, False,
                                    most_gradients=0 if budget is None else left))
            made += len(parts[-1])
            spent += int(parts[-1].facts["gradients"].sum(dtype=np.int64))
        return _joined("keep", parts, self.density.dimension)

    def density_changed(self, position: ArrayLike | Mapping[str, ArrayLike] | None = None) -> None:
        """Say that the density is another one from now on, because its data have changed.

        Its value and gradient are evaluated anew where the chain stands, or at `position` (as ``start``). A chain that
        is settling begins its plan anew, from the base metric it has; one that has settled keeps base metric and step
        size, so call `settle` as well where the new density is of another scale.
        Errors: StartError where the new density is not finite, and the chain is then as it was, over the old values:
        give a position inside the support.
        """
        if position is None:
            self._put(self.position, lambda _: self._engine.density_changed())
        else:
            self._put(self._free(position), self._engine.density_changed)

    def _raised(self, block: Block) -> Block:
        if block.error is not None:
            raise block.error
        return block

    def block(self, most: int, *, draws: bool = True, gradients: bool = False, watching: Watching | None = None,
              room: Room | None = None) -> Block:
        """Up to `most` transitions of the phase the chain is in; errors are returned in the block, not raised.

        watching: keeps of each draw what it says, and gathers the moments of all. room: where the arrays of the block
        go, made with the same choices and with at least `most` rows left.

        Errors: ArgumentError when the chain has settled without a step size.
        """
        phase = self._ready()
        # How long settling goes on is not known, so its arrays grow; those of kept draws are made once.
        rows = _PIECE if phase == "settle" and room is None else most
        parts: list[Block] = []
        while most > 0 and self.phase == phase and not (parts and parts[-1].error is not None):
            parts.append(self._rows(phase, min(most, rows), draws, gradients, watching, room=room))
            most -= len(parts[-1])
        return _joined(phase, parts, self.density.dimension)

    def _rows(self, phase: str, n: int, want_draws: bool, want_gradients: bool, watching: Watching | None = None,
              most_gradients: int = 0, room: Room | None = None) -> Block:
        """Up to n transitions, in pieces between which Python may answer a Ctrl-C; with most_gradients in one."""
        d = self.density.dimension
        room = room or Room(n, watching.width if watching else d, d, want_draws, want_gradients)
        draws, gradients, facts = room.rows(n)
        whole_rows = None if watching is None or watching.direct else np.empty((watching.rows(n), d))
        most = _PIECE if whole_rows is None else min(_PIECE, len(whole_rows))
        failures, done, error = [], 0, None
        while done < n and error is None and self.phase == phase:
            piece = slice(done, min(n, done + most))
            places = min(piece.stop - done, _FAILURE_ROOM)
            index, code = np.empty(places, np.int64), np.empty(places, np.int32)
            position = np.empty((places, d if whole_rows is not None else draws.shape[1]))
            into = (draws[piece] if whole_rows is None else whole_rows) if want_draws else None
            picked = watching.picked(want_draws) if watching else (None, None)
            status, made, rows, error = self._engine.run(
                piece.stop - done, into, facts[piece], None if gradients is None else gradients[piece], index, code,
                position, *picked, most_gradients)
            if watching and whole_rows is not None:
                if want_draws:
                    draws[done : done + made] = watching.take(whole_rows[:made])
                position = watching.place(position[:rows])
            if rows:
                failures.append((index[:rows] + done, code[:rows], position[:rows].copy()))
            done += made
            self._count()
            if status < 0 and error is None:
                error = stopped(status, f"transition {self._engine.summary()['transitions'] + 1}", self.density,
                                self._engine.failed_at())
            if most_gradients:
                break
        room.used += done
        return Block(phase, draws[:done], None if gradients is None else gradients[:done], facts[:done],
                     _joined_failures(failures, draws.shape[1]), error)

    def _ready(self) -> str:
        """The phase, of a chain that can move."""
        if self.phase == "keep" and not self.step_size > 0:
            raise ArgumentError("this chain has no step size: call settle() first, or give step_size=")
        return self.phase

    def interrupt(self) -> None:
        """Abandon the transition in hand; may be called from another thread."""
        self._engine.interrupt()

    # ---- reading ------------------------------------------------------------------------------------------------

    @property
    def settled(self) -> bool:
        """Has the plan of settling ended?"""
        return self._engine.settled()

    @property
    def phase(self) -> str:
        """"settle" or "keep"."""
        return "keep" if self.settled else "settle"

    @property
    def position(self) -> NDArray[np.float64]:
        """The current position, shape (dimension,); a copy."""
        return self._engine.point()[0]

    @property
    def gradient(self) -> NDArray[np.float64]:
        """The gradient at the current position, shape (dimension,); a copy."""
        return self._engine.point()[1]

    @property
    def log_density(self) -> float:
        """The log density at the current position."""
        return self._engine.point()[2]

    @property
    def step_size(self) -> float:
        """The step size in use, in units of the base metric."""
        return self._engine.summary()["step_size"]

    @property
    def scale(self) -> NDArray[np.float64]:
        """The learned variances of the base metric's diagonal part, shape (dimension,)."""
        return self._engine.base()[0]

    @property
    def base_metric(self) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
        """The learned base metric: scale (dimension,), directions (k, dimension) and their variances (k,); its inverse
        is G0^-1 = s^1/2 (I + E (lambda - 1) E') s^1/2, with s the scale and E' the directions."""
        scale, directions, variances = self._engine.base()
        return scale, directions, variances

    @property
    def settled_part(self) -> SettledChain:
        """What settling has found, for the ``settled=`` of another chain. Errors: SettleError before settling ends."""
        return SettledChain.of(self)

    @property
    def counts(self) -> dict[str, int]:
        """Transitions completed so far, and the gradients and Hessian products they and the start took.

        Calls of abandoned transitions are counted by the density only.
        """
        found = self._engine.summary()
        return {"transitions": found["transitions"], "gradients": found["gradients"], "products": found["products"]}

    @property
    def summary(self) -> "Summary":
        """What settling has found: step size, bend, beta, ceiling of acceptance, windows; and the workspace's size."""
        return self._engine.summary()

    # ---- state --------------------------------------------------------------------------------------------------

    @property
    def state(self) -> bytes:
        """Everything the chain is, random stream included. `Chain.from_state` goes on from it with the same bits."""
        head = json.dumps(self.settings.to_json()).encode()
        whole_state = _STATE_MAGIC + struct.pack("<I", len(head)) + head + self._engine.export_state()
        return whole_state + _checksum(whole_state)

    @state.setter
    def state(self, given: Bytes) -> None:
        settings, core = _split_state(given)
        if settings != self.settings:
            raise StateError(f"the stored state belongs to a chain of other settings ({settings}); use "
                             "Chain.from_state")
        self._import(core)

    @classmethod
    def from_state(cls, density: Density, state: Bytes) -> "Chain":
        """The chain that `state` (bytes, or a view of such) was taken from, over its density. Errors: StateError."""
        settings, core = _split_state(state)
        self = cls.__new__(cls)
        self._make(density, settings, 0)
        self._import(core)
        return self

    def _import(self, core: bytes) -> None:
        if self._engine.import_state(core) != 0:
            raise StateError(f"the stored chain state is damaged, or belongs to a density of another dimension than "
                             f"{self.density.dimension}")

    def __repr__(self) -> str:
        found = self._engine.summary()
        return f"<Chain of {self.density.dimension} coordinates, {found['transitions']} transitions, {self.phase}>"


def _checksum(given: bytes) -> bytes:
    return hashlib.sha256(given, usedforsecurity=False).digest()[:_CHECKSUM_BYTES]


def _split_state(stored: Bytes) -> tuple[Settings, bytes]:
    start = len(_STATE_MAGIC) + 4
    try:
        given = bytes(memoryview(stored))
    except TypeError:
        raise StateError(f"a chain state is bytes; this is {type(stored).__name__}") from None
    if given[: len(_STATE_MAGIC)] != _STATE_MAGIC:
        raise StateError("this is not a chain state of fellwalk: it does not begin as one")
    state, checksum = given[:-_CHECKSUM_BYTES], given[-_CHECKSUM_BYTES:]
    if len(state) < start or _checksum(state) != checksum:
        raise StateError("the stored chain state is damaged: it does not agree with its checksum")
    (length,) = struct.unpack("<I", state[start - 4 : start])
    try:
        settings = Settings.from_json(json.loads(state[start : start + length]))
    except (ValueError, KeyError, TypeError):
        raise StateError("the stored chain state is damaged in its settings") from None
    return settings, state[start + length :]


def _joined_failures(parts: list[Failures], width: int) -> Failures:
    if not parts:
        return np.empty(0, np.int64), np.empty(0, np.int32), np.empty((0, width))
    index, code, position = (np.concatenate(column) for column in zip(*parts, strict=True))
    return index, code, position


def _joined(phase: str, parts: list[Block], dimension: int, room: Room | None = None) -> Block:
    """One block of all parts; room: where they stand one after the other, if they do."""
    if len(parts) == 1 and room is None:
        return parts[0]
    if not parts:
        return Block(phase, np.empty((0, dimension)), None, np.empty(0, FACTS), _joined_failures([], dimension))
    starts = np.cumsum([0, *(len(part) for part in parts[:-1])])
    failures = [(part.failures[0] + start, *part.failures[1:]) for part, start in zip(parts, starts, strict=True)]
    if room is not None:
        arrays = room.filled()
    else:
        slopes = [part.gradients for part in parts if part.gradients is not None]
        arrays = (np.concatenate([part.draws for part in parts]), np.concatenate(slopes) if slopes else None,
                  np.concatenate([part.facts for part in parts]))
    return Block(phase, *arrays, _joined_failures(failures, parts[0].failures[2].shape[1]), parts[-1].error)


