"""What a run keeps of each draw: chosen coordinates or a function of it, and running means and variances of all.

In many dimensions a record of whole draws is larger and slower than the run itself. Quantiles, worths and R-hat need
draws in order, so they are known of the watched values only; mean and variance of the rest come from two running
vectors a chain (Welford 1962), those of several chains together from them (Chan, Golub & LeVeque 1983).
"""

from __future__ import annotations

import struct
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from fellwalk._core import gather
from fellwalk.errors import ArgumentError, OtherModelError

if TYPE_CHECKING:
    from fellwalk.density import Density

__all__ = ["WATCH_ABOVE", "WATCH_DEFAULT", "Moments", "Watch", "Watching", "judged_only", "watch_again", "watch_of"]

WATCH_ABOVE = 20_000  # coordinates: up to so many every draw is kept whole, beyond only what is watched
WATCH_DEFAULT = 1_000  # coordinates watched beyond that when nothing is said: spread evenly over all
_BUFFER = 1 << 19  # numbers of whole draws that wait for a function of them


@dataclass
class Moments:
    """Running mean and sum of squared deviations, (parameters,) each, of `count` draws of one chain."""

    mean: NDArray[np.float64]
    squares: NDArray[np.float64]
    count: int = 0

    @classmethod
    def of(cls, size: int) -> Moments:
        """Of no draws yet."""
        return cls(np.zeros(size), np.zeros(size))

    def and_of(self, other: Moments) -> Moments:
        """Those of both sets of draws: of all chains, from those of each."""
        if other.count == 0:
            return self
        count = self.count + other.count
        apart = other.mean - self.mean
        return Moments(self.mean + apart * (other.count / count),
                       self.squares + other.squares + apart**2 * (self.count * other.count / count), count)

    def add(self, rows: NDArray[np.float64]) -> None:
        """Take in draws (n, parameters), one after the other: the bits do not depend on where a call ends."""
        gather(self, np.ascontiguousarray(rows, dtype=np.float64))

    def copy(self) -> Moments:
        """One that can be added to without changing this."""
        return Moments(self.mean.copy(), self.squares.copy(), self.count)

    @property
    def variance(self) -> NDArray[np.float64]:
        """Variances (parameters,), NaN for fewer than two draws."""
        return self.squares / (self.count - 1) if self.count > 1 else np.full_like(self.squares, np.nan)

    def packed(self) -> bytes:
        """As bytes, little-endian."""
        both = np.concatenate([self.mean, self.squares]).astype("<f8", copy=False)
        return struct.pack("<q", self.count) + both.tobytes()

    @classmethod
    def unpacked(cls, given: bytes) -> Moments:
        """From what `packed` gave."""
        both = np.frombuffer(given, "<f8", offset=8).astype(np.float64)
        return cls(*np.split(both, 2), *struct.unpack_from("<q", given))


@dataclass(frozen=True)
class Watch:
    """names of the values kept of each draw, and what they are: natural coordinates by number, or a function.

    events: every value is a truth value, so that means are probabilities.
    """

    names: list[str]
    indices: NDArray[np.intp] | None = None
    function: Callable[[NDArray[np.float64]], Any] | None = None
    events: bool = False
    by_default: bool = False

    def __getstate__(self) -> dict[str, Any]:
        import cloudpickle  # only what is sent needs it

        packed = None if self.function is None else cloudpickle.dumps(self.function)
        return {**self.__dict__, "function": packed}

    def __setstate__(self, state: dict[str, Any]) -> None:
        import cloudpickle

        packed = state["function"]
        self.__dict__.update(state, function=None if packed is None else cloudpickle.loads(packed))

    def values(self, natural: NDArray[np.float64]) -> NDArray[np.float64]:
        """(n, watched) of draws (n, parameters) in natural values. Errors: ArgumentError; what the function raises."""
        if self.function is None:
            return natural[:, self.indices]
        out = np.empty((len(natural), len(self.names)))
        for row, x in zip(out, natural, strict=True):
            row[:] = self._value(x)
        return out

    def _value(self, x: NDArray[np.float64]) -> NDArray:
        assert self.function is not None
        value = _real(self.function, x)
        if value.size != len(self.names):
            raise ArgumentError(f"the watched function must return as many values every time; it returned {value.size} "
                                f"after {len(self.names)}")
        return value

    def to_json(self, natural: NDArray[np.float64]) -> dict[str, Any]:
        """As a record keeps it: a function by its values at the point `natural` (parameters,)."""
        at = None if self.function is None else self._value(natural).astype(float).tolist()
        return {"names": self.names, "indices": None if self.indices is None else self.indices.tolist(), "at": at,
                "events": self.events, "by_default": self.by_default}


@dataclass
class Watching:
    """What one block of one chain keeps: turns whole draws into watched values and adds them to the chain's moments."""

    watch: Watch
    density: Density
    moments: Moments

    @property
    def direct(self) -> bool:
        """Can the core pick the values by itself?"""
        return self.watch.function is None and self.density.parameters is None

    def picked(self, keeping: bool) -> tuple[NDArray[np.uintp] | None, Moments | None]:
        """What the core needs to do it; while settling nothing is gathered, but positions of failures are picked."""
        if not self.direct or self.watch.indices is None:
            return None, None
        return self.watch.indices.astype(np.uintp), self.moments if keeping else None

    @property
    def width(self) -> int:
        """Watched values a draw."""
        return len(self.watch.names)

    def rows(self, n: int) -> int:
        """How many whole draws wait in memory at a time, of n."""
        return max(1, min(n, _BUFFER // self.density.dimension))

    def _natural(self, free: NDArray[np.float64]) -> NDArray[np.float64]:
        return free if self.density.parameters is None else self.density.parameters.natural(free)

    def take(self, free: NDArray[np.float64]) -> NDArray[np.float64]:
        """Watched values (n, watched) of draws (n, dimension), which are gathered."""
        if not len(free):
            return np.empty((0, self.width))
        natural = self._natural(free)
        values = self.watch.values(natural)
        self.moments.add(natural)
        return values

    def place(self, free: NDArray[np.float64]) -> NDArray[np.float64]:
        """Watched values at positions of failed steps; NaN where there are none."""
        out = np.full((len(free), self.width), np.nan)
        for row, x in zip(out, free, strict=True):
            try:
                row[:] = self.watch.values(self._natural(x[None]))[0]
            except Exception:  # outside the support a function may do anything; draws are the place to complain
                continue
        return out


def _real(f: Callable[[NDArray[np.float64]], Any], x: NDArray[np.float64]) -> NDArray:
    view = x.view()
    view.flags.writeable = False
    value = np.asarray(f(view))
    if value.ndim > 1 or value.size == 0 or value.dtype.kind not in "biuf":
        raise ArgumentError("the watched function must return a real number, a truth value or a vector of them; it "
                            f"returned an array of shape {value.shape} and type {value.dtype}")
    return value.reshape(-1)


def watch_of(given: object, density: Density, natural: NDArray[np.float64]) -> Watch | None:
    """What `run` was asked to watch; None: everything. natural: a starting point (parameters,) in natural values."""
    names = density.names
    if given is None and len(names) > WATCH_ABOVE:
        spread = np.unique(np.linspace(0, len(names) - 1, WATCH_DEFAULT).round().astype(np.intp))
        return Watch([names[i] for i in spread], spread, by_default=True)
    if given is None or (isinstance(given, str) and given == "all"):
        return None
    if callable(given):
        value = np.asarray(_real(given, natural))
        label = getattr(given, "__name__", "value")
        label = label if label.isidentifier() else "value"
        scalar = np.ndim(given(natural.copy())) == 0
        return Watch([label] if scalar else [f"{label}[{i}]" for i in range(value.size)], function=given,
                     events=value.dtype == np.bool_)
    one = isinstance(given, str | int | np.integer)
    chosen: list[int] = []
    for item in [given] if one else list(given):  # type: ignore[call-overload]
        chosen += _numbers(item, names)
    if not chosen:
        raise ArgumentError('watch must name at least one coordinate; watch="all" keeps every one')
    if len(set(chosen)) < len(chosen):
        twice = next(i for i in chosen if chosen.count(i) > 1)
        raise ArgumentError(f"watch names the coordinate {names[twice]!r} twice")
    return Watch([names[i] for i in chosen], np.array(chosen, dtype=np.intp))


def _numbers(item: object, names: Sequence[str]) -> list[int]:
    if isinstance(item, str):
        found = [i for i, name in enumerate(names) if name == item or name.startswith(item + "[")]
        if not found:
            raise ArgumentError(f"watch names {item!r}, which is no coordinate and no parameter of this density")
        return found
    if isinstance(item, bool | np.bool_) or not isinstance(item, int | np.integer):
        raise ArgumentError(f"watch takes names, numbers of coordinates, or a function; not {type(item).__name__}")
    if not 0 <= item < len(names):
        raise ArgumentError(f"watch names coordinate number {item}; they are numbered from 0 to {len(names) - 1}")
    return [int(item)]


def judged_only(kept: dict[str, Any], parameters: int) -> str:
    """The verdict's sentence on what it judged. kept: as `Watch.to_json` gives it."""
    names = kept["names"]
    shown = ", ".join(names[:5]) + (f" and {len(names) - 5} more" if len(names) > 5 else "")
    if kept["at"] is not None:
        return f"Judged: what the run watched, a function of the {parameters:,} coordinates: {shown}."
    how = f"{len(names):,} of the {parameters:,} coordinates, as the run watched"
    if kept["by_default"]:
        how += ", spread evenly as nothing was said"
    return f"Judged: {how}: {shown}. Of the others only means and variances were kept."


def watch_again(kept: dict[str, Any] | None, given: object, density: Density, natural: NDArray[np.float64],
                path: str) -> Watch | None:
    """The watch of a run that goes on. kept: what its record has of it; natural: its first starting point.

    Errors: ArgumentError where a function must be given again, OtherModelError where it is another one.
    """
    if kept is None or kept["at"] is None:
        if given is not None:
            raise ArgumentError(f"{path}: what this run keeps of its draws is settled; leave watch out")
        if kept is None:
            return None
        return Watch(kept["names"], np.array(kept["indices"], dtype=np.intp), by_default=kept["by_default"])
    if not callable(given):
        raise ArgumentError(f"{path}: this run watches a function ({', '.join(kept['names'][:3])}), which a record "
                            "cannot keep; give it again: fellwalk.resume(record, density, watch=function)")
    watch = Watch(kept["names"], function=given, events=kept["events"])
    now = watch.values(natural[None])[0]
    if not np.allclose(now, kept["at"], rtol=1e-9, atol=1e-12, equal_nan=True):
        raise OtherModelError(f"{path}: at the first starting point the watched function gives {now[:3].tolist()}, "
                              f"but the run's gave {kept['at'][:3]}: it is another function, or uses other data")
    return watch
