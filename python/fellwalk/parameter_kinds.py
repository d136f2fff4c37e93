"""Kinds of parameters: what values one may take, and how many free coordinates and natural values it has."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from itertools import pairwise
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from fellwalk.errors import ArgumentError, ShapeError
from fellwalk.motions import whole

__all__ = ["Kind", "between", "correlation", "free", "increasing", "positive", "shares"]

_FREE, _ABOVE, _BELOW, _BETWEEN, _SHARES, _INCREASING, _CORRELATION = range(7)  # fw_map_kind

MapItem = tuple[int, int, NDArray[np.float64] | None, NDArray[np.float64] | None]


@dataclass(frozen=True)
class Kind:
    """One parameter, which may be an array; `free`, `positive`, `between`, `shares`, ... make it.

    shape: of the natural values as the user's function sees them by name. repeats: leading part of the shape over
    which shares, increasing and correlation are repeated. low, high: bounds as nested tuples of the values' shape
    (elementwise kinds), one number or None (increasing), else None.
    """

    word: str
    shape: tuple[int, ...]
    repeats: tuple[int, ...] = ()
    low: tuple[Any, ...] | float | None = None
    high: tuple[Any, ...] | float | None = None

    @property
    def joint(self) -> bool:
        """Do the values of one set move together?"""
        return self.word in ("shares", "increasing", "correlation")

    @property
    def sets(self) -> int:
        """How many sets of shares, sequences or matrices."""
        return math.prod(self.repeats)

    @property
    def size(self) -> int:
        """Natural values, flat: of a correlation matrix those below the diagonal."""
        if self.word == "correlation":
            return self.sets * self.shape[-1] * (self.shape[-1] - 1) // 2
        return math.prod(self.shape)

    @property
    def dimension(self) -> int:
        """Free coordinates."""
        return self.size - self.sets if self.word == "shares" else self.size

    def maps(self) -> list[MapItem]:
        """The compiled maps of this parameter, as `fellwalk._core.Maps` takes them."""
        n = self.shape[-1] if self.shape else 1
        if self.word == "shares":
            return [(_SHARES, n, None, None)] * self.sets
        if self.word == "correlation":
            return [(_CORRELATION, n, None, None)] * self.sets
        if self.word == "increasing":
            low, high = (None if bound is None else np.array([bound]) for bound in (self.low, self.high))
            return [(_INCREASING, n, low, high)] * self.sets
        return _runs(self.bounds("low"), self.bounds("high"), self.size)

    def bounds(self, side: str) -> NDArray[np.float64]:
        """Lower or upper bounds of the natural values, flat; infinite where there is none."""
        none = -np.inf if side == "low" else np.inf
        given = getattr(self, side)
        if self.word == "shares":
            given = 0.0 if side == "low" else 1.0
        if self.word == "correlation":
            given = -1.0 if side == "low" else 1.0
        full = np.full(self.size, none)
        if given is not None:
            full[:] = np.asarray(given, dtype=np.float64).reshape(-1)
        return full

    def labels(self, name: str) -> list[str]:
        """One name for each natural value."""
        if self.word == "correlation":
            n = self.shape[-1]
            places = [(*r, i, j) for r in np.ndindex(*self.repeats) for i in range(n) for j in range(i)]
        else:
            places = list(np.ndindex(*self.shape))
        return [f"{name}[{','.join(map(str, place))}]" if place else name for place in places]

    def coordinates(self, name: str) -> list[str]:
        """One name for each free coordinate: that of its natural value, except where values move together."""
        if not self.joint:
            return self.labels(name)
        return [f"{name}, free coordinate {k}" for k in range(self.dimension)]

    def to_json(self) -> dict[str, Any]:
        """Plain values from which `from_json` makes the kind again."""
        return {"word": self.word, "shape": list(self.shape), "repeats": list(self.repeats), "low": self.low,
                "high": self.high}

    @classmethod
    def from_json(cls, given: dict[str, Any]) -> Kind:
        """The kind that `to_json` was called on."""
        return cls(given["word"], tuple(given["shape"]), tuple(given["repeats"]), _tuples(given["low"]),
                   _tuples(given["high"]))

    def __str__(self) -> str:
        size = f" of shape {self.shape}" if self.shape else ""
        low, high = self.bounds("low"), self.bounds("high")
        if self.joint or not self.size or (len(set(low)) > 1 or len(set(high)) > 1):
            return f"{self.word}{size}"
        return f"{self.word}{size}, above {low[0]:g}, below {high[0]:g}"


def _tuples(value: Any) -> Any:
    return tuple(map(_tuples, value)) if isinstance(value, list | tuple) else value


def _runs(low: NDArray[np.float64], high: NDArray[np.float64], size: int) -> list[MapItem]:
    kinds = np.where(np.isfinite(low), np.where(np.isfinite(high), _BETWEEN, _ABOVE),
                     np.where(np.isfinite(high), _BELOW, _FREE))
    edges = [0, *(np.flatnonzero(np.diff(kinds)) + 1).tolist(), size]
    return [(int(kinds[a]), b - a, low[a:b].copy(), high[a:b].copy())
            for a, b in pairwise(edges)]


def _shape(given: int | Sequence[int], what: str) -> tuple[int, ...]:
    if isinstance(given, int | np.integer) and not isinstance(given, bool):
        given = (given,)
    if not isinstance(given, tuple | list):
        raise ArgumentError(f"the shape of {what} must be a whole number or a tuple of them; it is {given!r:.60}")
    return tuple(whole(f"the shape of {what}", n, 1, 2**40) for n in given)


def _elementwise(word: str, shape: int | Sequence[int] | None, low: ArrayLike | None, high: ArrayLike | None) -> Kind:
    low, high = (none if bound is None else bound for bound, none in ((low, -np.inf), (high, np.inf)))
    try:
        lows, highs = np.broadcast_arrays(np.asarray(low, dtype=np.float64), np.asarray(high, dtype=np.float64))
        wanted = lows.shape if shape is None else _shape(shape, word)
        lows, highs = (np.broadcast_to(bound, wanted) for bound in (lows, highs))
    except (TypeError, ValueError) as error:
        if isinstance(error, ArgumentError):
            raise
        raise ShapeError(f"the bounds of fellwalk.{word} must be numbers, or arrays that fit the shape of the "
                         f"parameter; they are {low!r:.40} and {high!r:.40}") from None
    if np.any(np.isnan(lows) | np.isnan(highs)) or not np.all(lows < highs):
        bad = np.argwhere(~(lows < highs))[0] if lows.shape else []
        at = tuple(int(i) for i in bad)
        raise ArgumentError(f"in fellwalk.{word} the lower bound must be below the upper one; "
                            f"{f'at {list(at)} ' if at else ''}they are {lows[at]} and {highs[at]}")
    return Kind(word, wanted, (), _tuples(lows.tolist()), _tuples(highs.tolist()))


def free(shape: int | Sequence[int] = ()) -> Kind:
    """A parameter that may be any real number, or an array of them."""
    return Kind("free", _shape(shape, "free"))


def positive(shape: int | Sequence[int] = (), *, above: ArrayLike | None = 0.0, below: ArrayLike | None = None) -> Kind:
    """A parameter above a bound (0 unless given), and below another one if that is given.

    shape: of the array; left out: one number. above, below: numbers or arrays of that shape; None for no bound.
    x = above + exp(y); with both bounds as `between`; with ``above=None`` x = below - exp(y).
    """
    return _elementwise("positive", shape, above, below)


def between(low: ArrayLike, high: ArrayLike, shape: int | Sequence[int] | None = None) -> Kind:
    """A parameter between two bounds, numbers or arrays; an infinite one is none. x = low + (high - low)/(1 + exp(-y)).

    shape: left out: that of the bounds.
    """
    return _elementwise("between", shape, low, high)


def shares(count: int, shape: int | Sequence[int] = ()) -> Kind:
    """`count` positive numbers that sum to one (2 or more), or an array of such sets: shape (*shape, count).

    The free coordinates are isometric log-ratios (Egozcue, Pawlowsky-Glahn, Mateu-Figueras & Barcelo-Vidal 2003,
    Math. Geol. 35): count - 1 a set. Densities are with respect to the first count - 1 shares.
    """
    lead = _shape(shape, "shares")
    return Kind("shares", (*lead, whole("the number of shares", count, 2, 2**40)), lead)


def increasing(count: int, shape: int | Sequence[int] = (), *, above: float | None = None,
               below: float | None = None) -> Kind:
    """`count` numbers, each above the one before, between bounds if given, or an array of such: (*shape, count).

    Free coordinates: the first value (with a bound: the logarithm of its distance from it) and the logarithms of the
    gaps; with two bounds the count + 1 gaps are shares of the distance between them.
    """
    lead = _shape(shape, "increasing")
    low, high = (None if b is None or math.isinf(b) else float(b) for b in (above, below))
    if (low is not None and math.isnan(low)) or (high is not None and math.isnan(high)):
        raise ArgumentError("the bounds of fellwalk.increasing must be numbers, not NaN")
    if low is not None and high is not None and not low < high:
        raise ArgumentError(f"in fellwalk.increasing above= must be less than below=; they are {low} and {high}")
    return Kind("increasing", (*lead, whole("the number of increasing values", count, 1, 2**40)), lead, low, high)


def correlation(rows: int, shape: int | Sequence[int] = ()) -> Kind:
    """A correlation matrix of `rows` rows (2 or more), or an array of them: shape (*shape, rows, rows).

    Flat, the natural values are the entries below the diagonal, row by row, and densities are with respect to these.
    By name the user's function sees the whole matrix; its gradient there is a matrix too, of which entries (i, j) and
    (j, i) are added: the derivative of log det R is then simply the inverse of R. Matrices so near to singular that
    rounding may leave them not positive definite count as outside the support: the function never sees one. The
    hyperbolic arc tangents of the canonical partial correlations are the free coordinates (Lewandowski, Kurowicka & Joe
    2009, J. Multivar. Anal. 100).
    """
    lead = _shape(shape, "correlation")
    n = whole("the rows of a correlation matrix", rows, 2, 2**15)
    return Kind("correlation", (*lead, n, n), lead)
