"""Settling of chains that advance together: one step size and one base metric for all, learned from all.

The rules are like those of csrc/src/settle.c, with every chain's draws and gradients in one pool: the step size is led
towards a mean acceptance; windows, each half as long again as the one before, at whose end the scale is set
anew; a tail for the step size alone. As the pool is large, directions come from covariances of all coordinates: found
in every other chain, confirmed in the rest. There is no climb; an open plan goes on while the log density rises.
"""

from __future__ import annotations

import math
from typing import Any

import numpy as np
from numpy.typing import NDArray

from fellwalk._core import arrive, leave

__all__ = ["Base", "Pool"]

Array = NDArray[np.float64]

_LEAD, _WINDOW, _TAIL = 10, 10, 50  # transitions; shorter than for single chains, as each brings m draws
_QUIET = 0.2  # root mean square of log(new / old standard deviation)
_NUMBERS = 2_000_000  # that the rows of a window may hold
_MOST_FOR_DIRECTIONS = 500  # dimensions: covariances take d^2 numbers and d^3 operations
_ROWS_A_DIMENSION = 10  # in each half of the pool, before directions are looked for
_WORTH, _AGREEMENT = 1.0, 0.5  # |log lambda| kept, and the share that the other half must show


class Base:
    """G0^-1 = S S', S = diag(r) A, A = I + E' (lambda^1/2 - 1) E; r (d,), E (k, d) orthonormal rows, lambda (k,)."""

    def __init__(self, scale: Array, directions: Array | None = None, variances: Array | None = None) -> None:
        self.r = np.sqrt(scale)
        self.e = np.empty((0, len(scale))) if directions is None else directions
        self.variances = np.empty(0) if variances is None else variances

    @property
    def scale(self) -> Array:
        """Variances of the diagonal part, (d,)."""
        return self.r**2

    def stretch(self, y: Array, power: float) -> Array:
        """A^(2 power) times the rows of y, (m, d)."""
        if not len(self.variances):
            return y
        out: Array = y + ((y @ self.e.T) * (self.variances**power - 1.0)) @ self.e
        return out

    def leave(self, still: NDArray[np.uint8], step: float, g: Array, w: Array, x: Array) -> None:
        """Half a kick and a drift: w += step/2 S' g, x += step S w, in the rows (m, d) that do not stand still (m,)."""
        if not len(self.variances):
            leave(still, 0.5 * step, step, self.r, g, w, x)
            return
        w += self.stretch(g * (0.5 * step * self.r), 0.5)
        w[still != 0] = 0.0
        x += self.stretch(w, 0.5) * (step * self.r)

    def arrive(self, still: NDArray[np.uint8], step: float, g: Array, w: Array, ww: Array, cc: Array) -> None:
        """Half a kick: w += step/2 S' g; then ww = |w|^2 and cc = |S' g|^2, (m,), of the rows that go on."""
        if not len(self.variances):
            arrive(still, 0.5 * step, self.r, g, w, ww, cc)
            return
        c = self.stretch(g * self.r, 0.5)
        w += c * (0.5 * step)
        ww[:], cc[:] = np.einsum("ij,ij->i", w, w), np.einsum("ij,ij->i", c, c)

    def variance(self) -> Array:
        """Variances of the coordinates, (d,)."""
        out: Array = self.r**2 * (1.0 + (self.variances - 1.0) @ self.e**2)
        return out


class Pool:
    """What settling has gathered, and what it says: `log_step` now, `base` now. Plain numbers and arrays."""

    def __init__(self, m: int, d: int, least: int, most: int, acceptance: float, rank: int, rank_fixed: bool) -> None:
        self.m, self.d, self.rank, self.rank_fixed = m, d, rank, rank_fixed
        self.acceptance = acceptance
        self.least, self.most = least, most
        self.tail = min(_TAIL, most // 2)
        self.done = self.windows = self.quiet = self.tail_left = self.window = self.in_window = 0
        self.change = math.nan
        self.settled = most == 0
        self.search = True
        self.log_step = self.log_average = 0.0
        self.count = 0
        self.values: list[float] = []
        self.rows_x: list[Array] = []
        self.rows_g: list[Array] = []
        if most:
            self.window = self._next_window()
            if not self.window:
                self._begin_tail()

    # ---- step size --------------------------------------------------------------------------------------------------

    def restart(self, log_step: float) -> None:
        """Begin at log_step, which a search has found."""
        self.log_step = self.log_average = log_step
        self.count = 0

    def _average(self, acceptance: float) -> None:
        """Robbins & Monro 1951, averaged (Polyak & Juditsky 1992). The mean acceptance of many chains falls by about
        its own size when the step is e times as long, and what is left of its noise is that of the common number of
        steps: a gain of about 1 that falls slowly."""
        self.count += 1
        self.log_step += 1.5 * self.count**-0.6 * (acceptance - self.acceptance)
        share = self.count**-0.75
        self.log_average = share * self.log_step + (1.0 - share) * self.log_average

    # ---- plan -------------------------------------------------------------------------------------------------------

    def _next_window(self) -> int:
        before = self.window + self.window // 2 if self.window else _WINDOW
        end, begun = self.most - self.tail, max(self.done, _LEAD)
        if begun + before > end:
            return end - begun if not self.window and end > begun + 4 else 0
        return end - begun if begun + 2 * before + before // 2 > end else before

    def _begin_tail(self) -> None:
        left = self.most - self.done
        self.window = 0
        self.tail_left = max(1, left if self.least == self.most or left < self.tail else self.tail)

    def update(self, x: Array, g: Array, value: float, acceptance: float, base: Base) -> Base:
        """After a transition that ended at x with gradients g (m, d) each; value: the mean log density there. The base
        metric from now on."""
        self.done += 1
        self._average(acceptance)
        if self.tail_left > 0:
            self.tail_left -= 1
            if self.tail_left == 0:
                self.settled = True
                self.log_step = self.log_average
            return base
        if self.done <= _LEAD:
            return base
        stride = -(-self.window * self.m * self.d // _NUMBERS)
        if self.in_window % stride == 0:
            self.rows_x, self.rows_g = [*self.rows_x, x.copy()], [*self.rows_g, g.copy()]
        self.values = [*self.values, value]
        self.in_window += 1
        return self._close(base) if self.in_window == self.window else base

    def _close(self, old: Base) -> Base:
        new = learned(np.array(self.rows_x), np.array(self.rows_g), old, self.rank, self.rank_fixed)
        self.change = moved(old, new)
        middle = len(self.values) // 2
        rise = float(np.mean(self.values[middle:]) - np.mean(self.values[:middle]))
        # of m chains in the bulk, where a log density has a standard deviation of about sqrt(d / 2)
        rising = rise > 0.1 + 4.0 * math.sqrt(self.d / self.m)
        self.values = []
        self.rows_x, self.rows_g, self.in_window = [], [], 0
        self.windows += 1
        self.quiet = self.quiet + 1 if self.change < _QUIET and not rising else 0
        self.search = True
        stable = self.quiet >= 2 and self.done + self.tail >= self.least and self.least < self.most
        self.window = 0 if stable else self._next_window()
        if not self.window:
            self._begin_tail()
        return new

    # ---- state ------------------------------------------------------------------------------------------------------

    def to_plain(self) -> tuple[dict[str, Any], list[Array]]:
        """All of it: JSON values, and arrays (rows, m, d)."""
        numbers = {name: value for name, value in self.__dict__.items() if not name.startswith("rows")}
        shape = (-1, self.m, self.d)
        return numbers, [np.array(rows, dtype=float).reshape(shape) for rows in (self.rows_x, self.rows_g)]

    @classmethod
    def from_plain(cls, numbers: dict[str, Any], arrays: list[Array]) -> Pool:
        """What `to_plain` gave."""
        self = cls.__new__(cls)
        self.__dict__.update(numbers, rows_x=list(arrays[0]), rows_g=list(arrays[1]))
        return self


def first_scale(g: Array) -> Array:
    """Variances (d,) before anything else is known, from the gradients (m, d) at the starts: 1 / g^2."""
    slope = np.sqrt(np.mean(g**2, axis=0))
    slope = np.maximum(slope, 1e-8 * slope.max())
    out: Array = np.where(slope < 1e-100, 1.0, np.minimum(slope, 1e100)) ** -2.0
    return out


def learned(x: Array, g: Array, old: Base, rank: int, fixed: bool) -> Base:
    """The base metric that draws and gradients (transitions, m, d) ask for."""
    d = x.shape[2]
    with np.errstate(all="ignore"):
        away = [np.sqrt(np.abs(a - a.mean(axis=(0, 1)))).mean(axis=(0, 1)) for a in (x, g)]
        scale = (away[0] / away[1]) ** 2
    scale = np.where((scale > 1e-200) & (scale < 1e200), scale, old.scale)
    if rank == 0 or d < 2 or d > _MOST_FOR_DIRECTIONS or x.shape[0] * (x.shape[1] // 2) < _ROWS_A_DIMENSION * d:
        return Base(scale)
    r = np.sqrt(scale)
    halves = [_covariances(x[:, part] / r, g[:, part] * r) for part in (slice(0, None, 2), slice(1, None, 2))]
    values, vectors = np.linalg.eigh(_geometric(*halves[0]))
    order = np.argsort(-np.abs(np.log(values)))
    kept, variances = [], []
    for i in order:
        size = abs(math.log(values[i]))
        if not fixed and size <= _WORTH:
            break  # they come in falling order
        e = vectors[:, i]
        ratios = [0.5 * math.log((e @ cx @ e) / (e @ cg @ e)) for cx, cg in halves]
        shown = ratios[1] * math.copysign(1.0, math.log(values[i]))
        if fixed or shown > _AGREEMENT * size:
            kept.append(e)
            variances.append(math.exp(0.5 * (ratios[0] + ratios[1])))
        if len(kept) == min(rank, d):
            break
    return Base(scale, np.array(kept).reshape(-1, d), np.array(variances))


def _covariances(y: Array, c: Array) -> tuple[Array, Array]:
    """Of draws and gradients in scaled coordinates, (d, d) each, with a small ridge."""
    found = []
    for a in (y, c):
        rows = a.reshape(-1, a.shape[2])
        rows = rows - rows.mean(axis=0)
        found.append(rows.T @ rows / len(rows))
        found[-1] += 1e-10 * np.trace(found[-1]) / len(found[-1]) * np.eye(len(found[-1]))
    return found[0], found[1]


def _geometric(cx: Array, cg: Array) -> Array:
    """The Sigma that solves Sigma cg Sigma = cx (Fisher-divergence minimiser; Seyboldt, Carlson & Carpenter 2026)."""
    values, vectors = np.linalg.eigh(cg)
    root, back = ((vectors * values**power) @ vectors.T for power in (0.5, -0.5))
    inner, turn = np.linalg.eigh(root @ cx @ root)
    middle = (turn * np.sqrt(np.maximum(inner, 0.0))) @ turn.T
    out: Array = back @ middle @ back
    return 0.5 * (out + out.T) + 1e-300 * np.eye(len(out))


def moved(old: Base, new: Base) -> float:
    """|log(new / old standard deviation)|: root mean square over coordinates, or the largest along new directions."""
    of_coordinates = math.sqrt(float(np.mean((0.5 * np.log(new.variance() / old.variance())) ** 2)))
    if not len(new.variances):
        return of_coordinates
    seen = old.stretch(new.e / new.r * old.r, 0.5)
    along = np.abs(0.5 * np.log(new.variances / np.einsum("ij,ij->i", seen, seen)))
    return max(of_coordinates, float(along.max()))
