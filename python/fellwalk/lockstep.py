"""Chains that advance together, one call of the density a step for all of them.

For densities that are cheap in batches (array libraries): the price of a call is shared by all chains. They make
leapfrog steps on jittered paths. The number of steps of a transition is drawn once for all of them, independently of
where they are, so every chain by itself follows the law of a single chain on jittered paths, and chains that are
independent stay so. Settling is pooled (pooled.py).

The arithmetic of a row depends on that row only. A chain whose path fails stands still until the others have ended
theirs, and its random numbers are drawn all the same: the others' bits are what they would have been without it.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from fellwalk._core import FACTS, MAX_DIRECTIONS
from fellwalk.batch import evaluate
from fellwalk.chain import Block
from fellwalk.density import Density, as_vector, brief
from fellwalk.errors import ArgumentError, SettleError, ShapeError, StartError, StateError
from fellwalk.lockstep_state import pack, unpack
from fellwalk.motions import Jittered, Leapfrog, whole
from fellwalk.pooled import Base, Pool, first_scale
from fellwalk.settings import Settings
from fellwalk.settled import SettledChain

__all__ = ["Lockstep"]

_FAILURE_ROOM = 32  # positions of failed steps kept in one block of a chain
_OUTSIDE, _NAN, _GRADIENT, _ENERGY, _RANGE = 2, 3, 4, 8, 9  # status codes of the core
AUTO_SETTLE = (60, 1500)  # as for single chains, but m draws come with each transition


@dataclass
class _Path:
    """Where all chains stand on their paths: positions x, gradients g, whitened velocities w (m, d), log densities,
    energies (m,); the least and the largest energy so far; 0 or the status that ended the path, and where."""

    x: NDArray[np.float64]
    g: NDArray[np.float64]
    w: NDArray[np.float64]
    value: NDArray[np.float64]
    energy: NDArray[np.float64]
    low: NDArray[np.float64]
    high: NDArray[np.float64]
    failure: NDArray[np.int32]
    failed_at: dict[int, NDArray[np.float64]]


class _Room:
    """Arrays (m, d) to work in: velocities drawn, velocities and positions on the path, the next point."""

    def __init__(self, m: int, d: int) -> None:
        self.drawn, self.w, self.x, self.next_x, self.next_g = (np.empty((m, d)) for _ in range(5))


class Lockstep:
    """m chains over ``Density(function, dimension, batch=True)`` that advance together.

    starts: (m, dimension), one a chain, in the coordinates the chains move in; log density and gradient must be finite
        at each. Other arguments as in `run`; path is `Jittered`, motion `Leapfrog` without halvings. settled: the
        settled part of another chain; these then do not settle.
    Draws depend on the seed and on m. Errors: ArgumentError, ShapeError, StartError, and what the density raises.
    """

    def __init__(
        self,
        density: Density,
        starts: ArrayLike,
        *,
        path: Jittered | None = None,
        seed: int | np.random.SeedSequence | None = None,
        settle: int | str = 0,
        acceptance: float = 0.8,
        step_size: float | None = None,
        scale: ArrayLike | None = None,
        rank: int | str = "auto",
        settled: SettledChain | None = None,
    ) -> None:
        settings = Settings(path=path or Jittered(), settle=settle, acceptance=acceptance, step_size=step_size,
                            rank=rank)
        self._begin(density, settings, starts, seed, scale, settled)

    @classmethod
    def _with_settings(cls, density: Density, settings: Settings, starts: ArrayLike, seed: np.random.SeedSequence,
                       scale: ArrayLike | None, settled: SettledChain | None) -> Lockstep:
        self = cls.__new__(cls)
        self._begin(density, settings, starts, seed, scale, settled)
        return self

    def _begin(self, density: Density, settings: Settings, starts: ArrayLike, seed: int | np.random.SeedSequence | None,
               scale: ArrayLike | None, settled: SettledChain | None) -> None:
        self._make(density, settings, seed)
        x = np.array(starts, dtype=np.float64)
        if x.ndim != 2 or not len(x) or x.shape[1] != density.dimension:
            raise ShapeError(f"starts must have shape (chains, {density.dimension}); they have shape {x.shape}")
        self._start(x)
        least, most = AUTO_SETTLE if settings.settle == "auto" else settings.settle_bounds()
        step = settings.step_size
        self.base = Base(first_scale(self.g))
        if scale is not None:
            given = as_vector(scale, density.dimension, "scale")
            if not np.all((given > 0) & np.isfinite(given)):
                raise ArgumentError("scale must hold finite numbers > 0 (variances, one a coordinate)")
            self.base = Base(given)
        if settled is not None:
            if settings.settle not in ("auto", 0) or scale is not None:
                raise ArgumentError("settled= takes the place of settling and of a scale; leave these out")
            least = most = 0
            self.base = Base(settled.scale.copy(), settled.directions.copy(), settled.variances.copy())
            step = settled.step_size
        self._plan(least, most)
        self.has_step = step is not None
        self.pool.restart(math.log(1.0 if step is None else step))

    def _make(self, density: Density, settings: Settings, seed: int | np.random.SeedSequence | None) -> None:
        if not isinstance(density, Density) or density.batch is None:
            raise ArgumentError("chains in lockstep need a density of batches: fellwalk.Density(f, dimension, "
                                "batch=True), with f(x) -> (log densities (m,), gradients (m, dimension))")
        if not isinstance(settings.path, Jittered):
            raise ArgumentError("chains in lockstep follow jittered paths, as all of them must make the same number of "
                                "steps: give path=fellwalk.Jittered(steps); in the command, --path jittered")
        if settings.path.steps == "auto":
            raise ArgumentError("chains in lockstep do not look for the length of their paths; give "
                                "fellwalk.Jittered(steps)")
        if settings.motion != Leapfrog():
            raise ArgumentError("chains in lockstep make plain leapfrog steps: leave motion= out, or give "
                                "fellwalk.Leapfrog()")
        self.density, self.settings, self._steps = density, settings, settings.path.steps
        self._maps = None if density.parameters is None else density.parameters.maps()
        if not isinstance(seed, np.random.SeedSequence):
            seed = np.random.SeedSequence(None if seed is None else whole("seed", seed, 0, 2**128))
        self._random = np.random.Generator(np.random.PCG64DXSM(seed))
        self.transitions = self.evaluations = 0

    def _start(self, x: NDArray[np.float64]) -> None:
        value, g = evaluate(self.density, x, self._maps)
        self.evaluations += 1
        bad = np.flatnonzero(~(np.isfinite(value) & np.all(np.isfinite(g), axis=1)))
        if len(bad):
            raise StartError(f"chain {bad[0] + 1} of {len(x)}: the log density is {value[bad[0]]} at the starting "
                             f"point {brief(x[bad[0]])}, or its gradient is not finite; start inside the support")
        self.x, self.g, self.value = x, np.array(g), np.array(value)

    def _plan(self, least: int, most: int) -> None:
        rank = MAX_DIRECTIONS if self.settings.rank == "auto" else int(self.settings.rank)
        m, d = self.x.shape
        self._room = _Room(m, d)
        self.pool = Pool(m, d, least, most, self.settings.acceptance, rank, self.settings.rank != "auto")

    # ---- moving -----------------------------------------------------------------------------------------------------

    def settle(self, transitions: int | str = "auto") -> NDArray[np.void]:
        """Settle from here: a new plan, whatever came before. The facts of what was done, (m, transitions)."""
        log_step = self.pool.log_step
        self._plan(*(AUTO_SETTLE if transitions == "auto" else Settings(settle=transitions).settle_bounds()))
        self.pool.restart(log_step)
        facts = [np.empty((0, len(self.x)), FACTS)]
        while not self.settled:
            facts.append(self.transition()[0][None])
        return np.concatenate(facts).T

    def advance(self, draws: int) -> list[Block]:
        """`draws` kept transitions of every chain: one `Block` a chain, ``block.draws`` (draws, dimension). Raises what
        the density raises; the chains are then as before that transition.

        Errors: SettleError before settling has ended or without a step size.
        """
        if not self.settled or not self.has_step:
            raise SettleError("these chains have not settled; call settle() first, or give step_size= and settle=0")
        blocks = self.block(whole("draws", draws, 0, 2**40))
        if blocks[0].error is not None:
            raise blocks[0].error
        return blocks

    def block(self, most: int, *, gradients: bool = False) -> list[Block]:
        """Up to `most` transitions of the phase the chains are in, one `Block` a chain; errors are returned in the
        blocks, not raised. Settling keeps no draws. A KeyboardInterrupt comes out, and what was done is not given."""
        phase, (m, d) = self.phase, self.x.shape
        rows = most if phase == "keep" else 0
        x, g = np.empty((m, rows, d)), np.empty((m, rows, d)) if gradients and phase == "keep" else None
        facts = np.empty((m, most), FACTS)
        failures: list[list[tuple[int, int, NDArray[np.float64]]]] = [[] for _ in range(m)]
        done, error = 0, None
        while done < most and self.phase == phase and error is None:
            try:
                facts[:, done], failed_at = self.transition()
            except Exception as raised:
                error = raised
                continue
            for chain, where in failed_at.items():
                if len(failures[chain]) < _FAILURE_ROOM:
                    failures[chain].append((done, int(facts["failure"][chain, done]), where))
            if phase == "keep":
                x[:, done] = self.x
                if g is not None:
                    g[:, done] = self.g
            done += 1
        return [Block(phase, x[c, :done], None if g is None else g[c, :done], facts[c, :done],
                      (np.array([f[0] for f in failures[c]], np.int64), np.array([f[1] for f in failures[c]], np.int32),
                       np.array([f[2] for f in failures[c]]).reshape(-1, d)), error)
                for c in range(m)]

    def transition(self) -> tuple[NDArray[np.void], dict[int, NDArray[np.float64]]]:
        """One transition of all chains: facts (m,) and the positions of failed steps by chain.

        When the density raises, all is as it was before, the random numbers included.
        """
        mark, kept, calls = self._random.bit_generator.state, self.pool.__dict__.copy(), self.evaluations
        try:
            if self.pool.search and not self.settled:
                self._search()
            return self._travel(math.exp(self.pool.log_step))
        except BaseException:
            self._random.bit_generator.state = mark
            self.pool.__dict__.update(kept)
            self.evaluations = calls
            raise

    def _travel(self, step: float) -> tuple[NDArray[np.void], dict[int, NDArray[np.float64]]]:
        self._random.standard_normal(out=self._room.drawn)
        steps = 1 + min(int(self._random.random() * self._steps), self._steps - 1)
        chance = self._random.random(len(self.x))
        start, path = self._walk(step, steps)
        with np.errstate(all="ignore"):
            acceptance = np.where(path.failure == 0, np.exp(np.minimum(start - path.energy, 0.0)), 0.0)
        take = chance < acceptance
        stay = np.flatnonzero(~take)  # few
        x, g, value = self._room.next_x, self._room.next_g, np.where(take, path.value, self.value)
        for to, new, old in ((x, path.x, self.x), (g, path.g, self.g)):
            np.copyto(to, new)
            to[stay] = old[stay]
        facts = np.zeros(len(self.x), FACTS)
        facts["log_density"], facts["acceptance"] = value, acceptance
        facts["energy"] = np.where(take, path.energy, start)
        facts["log_weight_range"] = path.high - path.low
        facts["step_size"], facts["steps"], facts["gradients"], facts["failure"] = step, steps, steps, path.failure
        base = self.base if self.settled else self.pool.update(x, g, float(value.mean()), float(acceptance.mean()),
                                                                       self.base)
        self._room.next_x, self._room.next_g = self.x, self.g
        self.x, self.g, self.value, self.base = x, g, value, base
        self.transitions += 1
        self.has_step = True
        return facts, path.failed_at

    def _walk(self, step: float, steps: int) -> tuple[NDArray[np.float64], _Path]:
        """(energies at the start (m,), where the paths have ended) of leapfrog steps from here, with the whitened
        velocities that stand in the working room as drawn."""
        room, base = self._room, self.base
        np.copyto(room.w, room.drawn)
        np.copyto(room.x, self.x)
        start = 0.5 * np.einsum("ij,ij->i", room.w, room.w) - self.value
        path = _Path(room.x, self.g, room.w, self.value, start, start.copy(), start.copy(),
                     np.zeros(len(self.x), np.int32), {})
        still, ww, cc = np.zeros(len(self.x), np.uint8), 2.0 * (start + self.value), np.zeros(len(self.x))
        with np.errstate(over="ignore", invalid="ignore"):
            for _ in range(steps):
                base.leave(still, step, path.g, path.w, path.x)
                path.value, path.g = evaluate(self.density, path.x, self._maps)
                self.evaluations += 1
                base.arrive(still, step, path.g, path.w, ww, cc)
                path.energy = 0.5 * ww - path.value
                self._look(path, cc)
                self._weigh(path)
                if path.failed_at:
                    np.not_equal(path.failure, 0, out=still, casting="unsafe")
        return start, path

    def _look(self, path: _Path, cc: NDArray[np.float64]) -> None:
        """Which chains have come to where the density cannot be used? They wait at their start. cc: (m,), finite where
        the gradient is."""
        if not path.failed_at and math.isfinite(np.add.reduce(path.value)) and math.isfinite(np.add.reduce(cc)):
            return
        bad = ~(np.isfinite(path.value) & np.isfinite(cc)) & (path.failure == 0)
        self._fail(path, bad & (path.value == -np.inf), _OUTSIDE)
        self._fail(path, bad & np.isnan(path.value), _NAN)
        self._fail(path, bad & np.isfinite(path.value), _GRADIENT)

    def _weigh(self, path: _Path) -> None:
        """The range of the energy along the path; it ends where that is beyond all bounds, as in single chains."""
        if not path.failed_at and math.isfinite(np.add.reduce(path.energy)):
            np.minimum(path.low, path.energy, out=path.low)
            np.maximum(path.high, path.energy, out=path.high)
            if np.maximum.reduce(path.high - path.low) <= 1000.0:
                return
        going = path.failure == 0
        finite = going & np.isfinite(path.energy)
        np.fmin(path.low, path.energy, out=path.low, where=finite)
        np.fmax(path.high, path.energy, out=path.high, where=finite)
        if np.all((path.high - path.low <= 1000.0) & finite | ~going):
            return
        self._fail(path, going & ~finite, _ENERGY)
        self._fail(path, (path.failure == 0) & (path.high - path.low > 1000.0), _RANGE)

    def _fail(self, path: _Path, which: NDArray[np.bool_], code: int) -> None:
        for chain in np.flatnonzero(which):
            path.failed_at[int(chain)] = path.x[chain].copy()
            path.failure[chain] = code
            path.x[chain] = self.x[chain]

    def _search(self) -> None:
        """Double or halve the step until the mean acceptance of one step crosses 1/2; the good side is taken."""
        self._random.standard_normal(out=self._room.drawn)

        def good(step: float) -> bool:
            start, path = self._walk(step, 1)
            weight = np.where(path.failure == 0, start - path.energy, -np.inf)
            return float(np.exp(np.minimum(weight, 0.0)).mean()) > 0.5

        step = math.exp(self.pool.log_step)
        first = good(step)
        for _ in range(100):
            following = 2.0 * step if first else 0.5 * step
            now = good(following)
            if now or not first:
                step = following
            if now != first:
                break
        self.pool.restart(math.log(step))
        self.pool.search = False

    # ---- reading ----------------------------------------------------------------------------------------------------

    @property
    def settled(self) -> bool:
        """Has the plan of settling ended?"""
        return self.pool.settled

    @property
    def phase(self) -> str:
        """"settle" or "keep"."""
        return "keep" if self.settled else "settle"

    @property
    def step_size(self) -> float:
        """The step size in use, in units of the base metric."""
        return math.exp(self.pool.log_step)

    @property
    def settled_part(self) -> SettledChain:
        """What settling has found, for the ``settled=`` of other chains. Errors: SettleError before settling ends."""
        if not (self.settled and self.has_step):
            raise SettleError("these chains have not settled yet, so they have no settled part to use again")
        return SettledChain(self.base.scale, self.base.e, self.base.variances, self.step_size, 0.0)

    @property
    def summary(self) -> dict[str, Any]:
        """What settling has found, and counts, of each chain."""
        return {"gradients": self.evaluations, "products": 0, "transitions": self.transitions,
                "settled_transitions": self.pool.done, "windows": self.pool.windows, "step_size": self.step_size,
                "beta": 0.0, "bend": 0.0, "ceiling": 1.0, "change": self.pool.change,
                "directions": len(self.base.variances), "workspace_vectors": 0, "workspace_bytes": 0,
                "started": True, "settled": self.settled}

    # ---- state ------------------------------------------------------------------------------------------------------

    @property
    def state(self) -> bytes:
        """Everything the chains are, random numbers included. `Lockstep.from_state` goes on with the same bits."""
        numbers, rows = self.pool.to_plain()
        stream = self._random.bit_generator.state
        arrays = [self.x, self.g, self.value, self.base.r, self.base.e, self.base.variances, *rows]
        return pack({
            "settings": self.settings.to_json(), "pool": numbers, "random": stream, "has_step": self.has_step,
            "transitions": self.transitions, "evaluations": self.evaluations,
        }, arrays)

    @classmethod
    def from_state(cls, density: Density, state: bytes) -> Lockstep:
        """The chains that `state` was taken from, over the same density. Errors: StateError."""
        head, arrays = unpack(state)
        self = cls.__new__(cls)
        self._make(density, Settings.from_json(head["settings"]), 0)
        self._random.bit_generator.state = head["random"]
        self.transitions, self.evaluations = head["transitions"], head["evaluations"]
        self.has_step = head["has_step"]
        self.x, self.g, self.value, r, e, variances, *rows = arrays
        if self.x.shape[1] != density.dimension:
            raise StateError(f"the stored chains have {self.x.shape[1]} coordinates; this density has "
                             f"{density.dimension}")
        self.base = Base(r * r, e, variances)
        self.base.r = r
        self.pool = Pool.from_plain(head["pool"], rows)
        self._room = _Room(*self.x.shape)
        return self

    def __repr__(self) -> str:
        m, d = self.x.shape
        return f"<Lockstep of {m} chains of {d} coordinates, {self.transitions} transitions, {self.phase}>"
