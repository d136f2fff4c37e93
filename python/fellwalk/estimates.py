"""Means, standard deviations and quantiles with their errors, sharpened by gradients where that helps.

`estimate_all` computes; `Estimates` holds and shows. The plain numbers are those of `fellwalk.judge.measure`.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from fellwalk import autocorrelation as ac
from fellwalk import table
from fellwalk.errors import ArgumentError
from fellwalk.identities import IdentityCheck
from fellwalk.sharpen import CANDIDATES, Sharpener

Array = NDArray[np.float64]

CHOICES = ("auto", *CANDIDATES)
# Where so small a part of the plain error is left, heavy tails have gone with the rest.
CERTAIN = 0.01
# Values of so many parameters are fitted together.
GROUP = 64


@dataclass(frozen=True, eq=False)
class Quantile:
    """One quantile of every value: value, error (values,), and by: which candidate it comes from.

    worth: independent draws that would give the sharpened share of draws below it the error it has; NaN where not
    sharpened.
    """

    level: float
    value: Array
    error: Array
    by: tuple[str, ...]
    worth: Array


@dataclass(frozen=True, eq=False)
class Estimates:
    """Estimates of several values of the draws, arrays (values,) in the order of `names`; print it for the table.

    estimate, error: mean and its Monte Carlo standard error. worth: how many independent draws would give that error.
    spread, spread_error: standard deviation and its error. quantiles: by level, each with value and error.
    by, spread_by: what the numbers come from: "none" (the draws alone), "linear", "quadratic" or "cubic" terms in the
        coordinates, fitted with the gradients at the draws.
    in_doubt, spread_in_doubt: whether `error` and `spread_error` are themselves hardly known, since tails are heavy
        (`fellwalk.tails`).
    raw: the same from the draws alone. checked: whether draws and gradients agree; None when no gradients were used.
    """

    names: tuple[str, ...]
    chains: int
    draws_per_chain: int
    estimate: Array
    error: Array
    worth: Array
    by: tuple[str, ...]
    spread: Array
    spread_error: Array
    spread_by: tuple[str, ...]
    in_doubt: NDArray[np.bool_]
    spread_in_doubt: NDArray[np.bool_]
    quantiles: dict[float, Quantile]
    raw: Estimates | None = None
    checked: IdentityCheck | None = None
    why_not: str = ""

    def draws_for(self, error: float) -> NDArray[np.int64]:
        """Kept draws a chain, in total, with which the error of each estimate should be about `error`, (values,).

        Errors fall as one over the square root of the draws. Raises ArgumentError unless error is a number > 0.
        """
        if isinstance(error, bool) or not isinstance(error, int | float | np.number) or not 0 < error < np.inf:
            raise ArgumentError(f"The error aimed at must be a number above 0, not {error!r}.")
        return np.ceil(self.draws_per_chain * np.minimum((self.error / error) ** 2, 1e15)).astype(np.int64)

    def __str__(self) -> str:
        rows = []
        for i, name in enumerate(self.names):
            doubt = [table.DOUBT * bool(there[i]) for there in (self.in_doubt, self.spread_in_doubt)]
            cells = [_cell(self.estimate[i], self.error[i], self.by[i]), _bare(self.error[i]) + doubt[0],
                     _cell(self.spread[i], self.spread_error[i], self.spread_by[i]) + doubt[1]]
            cells += [_cell(q.value[i], q.error[i], q.by[i]) for q in self.quantiles.values()]
            rows.append([name, *cells, table.worth_text(float(self.worth[i]))])
        head = ["value", "estimate", "error", "spread", *(f"{100 * level:g}%" for level in self.quantiles), "worth"]
        widths = [max(table.columns(row[k]) for row in [head, *rows]) for k in range(len(head))]
        lines = ["  ".join(cell + " " * (w - table.columns(cell)) if k == 0 else cell.rjust(w)
                           for k, (cell, w) in enumerate(zip(row, widths, strict=True))).rstrip()
                 for row in [head, *rows]]
        used = {*self.by, *self.spread_by}.union(*(q.by for q in self.quantiles.values()))
        lines += table.wrap(table.SHARPENED) if used - {"none"} else []
        lines += table.wrap(table.IN_DOUBT) if self.in_doubt.any() or self.spread_in_doubt.any() else []
        lines += table.wrap(self.why_not) if self.why_not else []
        return "\n".join(lines)

    def to_dict(self) -> dict[str, Any]:
        """Plain Python objects that any JSON writer takes; what is not finite becomes None."""
        def plain(value: Any) -> float | None:
            return float(value) if math.isfinite(value) else None

        values = []
        for i, name in enumerate(self.names):
            one: dict[str, Any] = {"name": name, "by": self.by[i], "spread_by": self.spread_by[i]}
            one |= {"in_doubt": bool(self.in_doubt[i]), "spread_in_doubt": bool(self.spread_in_doubt[i])}
            numbers = ("estimate", "error", "worth", "spread", "spread_error")
            one |= {key: plain(getattr(self, key)[i]) for key in numbers}
            one["quantiles"] = [
                {"level": q.level, "value": plain(q.value[i]), "error": plain(q.error[i]), "by": q.by[i]}
                for q in self.quantiles.values()
            ]
            values.append(one)
        return {"chains": self.chains, "draws_per_chain": self.draws_per_chain, "values": values,
                "raw": None if self.raw is None else self.raw.to_dict()["values"]}


def _bare(error: float) -> str:
    return f"{error:.2g}"


def _cell(value: float, error: float, by: str) -> str:
    at = table.place(float(error))
    text = f"{value:.6g}" if at is None else table.digits(float(value), at)
    if len(text) > 12:
        text = f"{value:.7g}"
    return text + (table.MARK if by != "none" else "")


def estimate_all(
    x: Array,
    names: Sequence[str],
    numbers: dict[str, NDArray[Any]],
    levels: Sequence[float],
    sharpener: Sharpener | None,
    checked: IdentityCheck | None = None,
    why_not: str = "",
) -> Estimates:
    """Estimates of draws (chains, n, values), with their `numbers` of `fellwalk.judge.measure`."""
    from fellwalk.judge import LEVELS, quantiles

    chains, n, count = x.shape
    measured = {level: (numbers[name], numbers[name + "_error"]) for name, level in LEVELS.items()}
    plain = {level: measured[level] if level in measured else quantiles(x, level, numbers["worth"]) for level in levels}
    still = numbers["constant"]
    with np.errstate(all="ignore"):
        worth = np.where(still, np.nan, (numbers["spread"] / numbers["error"]) ** 2)
    nothing = ("none",) * count
    raw = Estimates(
        tuple(names), chains, n, numbers["estimate"], numbers["error"], worth, nothing, numbers["spread"],
        numbers["spread_error"], nothing, numbers["in_doubt"], numbers["spread_in_doubt"],
        {level: Quantile(level, value, np.where(still, 0.0, error), nothing, np.full(count, np.nan))
         for level, (value, error) in plain.items()},
        None, checked, why_not)
    if sharpener is None:
        return raw
    out = _Sharper(raw)
    for start in range(0, count, GROUP):
        part = np.arange(start, min(start + GROUP, count))
        part = part[~still[part]]
        if part.size:
            out.take(part, x[:, :, part], numbers["event"][part], numbers["above_doubt"][part], sharpener)
    return out.estimates(raw)


class _Sharper:
    """Arrays of the plain estimates in which groups of values are replaced by sharpened ones."""

    def __init__(self, raw: Estimates) -> None:
        count = len(raw.names)
        self.numbers = {key: getattr(raw, key).astype(float) for key in ("estimate", "error", "spread", "spread_error")}
        self.by, self.spread_by = np.zeros(count, int), np.zeros(count, int)
        self.at = {level: (q.value.copy(), q.error.copy(), np.zeros(count, int), q.worth.copy())
                   for level, q in raw.quantiles.items()}

    def take(
        self, part: NDArray[np.int64], x: Array, event: NDArray[np.bool_], above: Array, sharpener: Sharpener
    ) -> None:
        """Sharpen values `part`, of draws x (chains, n, values); above: `fellwalk.tails.excess` for mean and sd,
        (values, 2)."""
        from fellwalk.judge import standardise

        y, origin, exponent = standardise(np.ascontiguousarray(np.moveaxis(x, 2, 0)))
        count = len(y)
        centre = y.reshape(count, -1).mean(axis=1)
        ordered = np.sort(y.reshape(count, -1), axis=1) if self.at else y.reshape(count, -1)
        series = np.empty((2 + len(self.at), *y.shape))
        series[0] = y
        np.square(y - centre[:, None, None], out=series[1])
        for k, level in enumerate(self.at, start=2):
            np.less_equal(y, _at_level(ordered, level)[:, None, None], out=series[k])
        tails = np.full(series.shape[:2], -np.inf)  # a share of draws has none
        tails[:2] = above.T
        found = sharpener.sharpen(series.reshape(-1, *y.shape[1:]), tails.reshape(-1))
        mean, error, by, plain, plain_error = (a.reshape(len(series), count) for a in (
            found.mean, found.error, found.by, found.raw, found.raw_error))

        won = by[0] > 0
        at = part[won]
        self.numbers["estimate"][at] = (np.ldexp(mean[0], exponent) + origin)[won]
        self.numbers["error"][at] = np.ldexp(error[0], exponent)[won]
        self.by[at] = by[0][won]
        # Squares were taken about the plain mean; the sharpened one may lie elsewhere.
        variance = mean[1] - (mean[0] - centre) ** 2
        won = (by[1] > 0) & (variance > 0) & ~event
        at, spread = part[won], np.sqrt(variance[won])
        self.numbers["spread"][at] = np.ldexp(spread, exponent[won])
        self.numbers["spread_error"][at] = np.ldexp(error[1][won] / (2 * spread), exponent[won])
        self.spread_by[at] = by[1][won]
        for k, (level, (value, value_error, value_by, value_worth)) in enumerate(self.at.items(), start=2):
            won = (by[k] > 0) & ~event
            # The share of draws below the plain quantile is off by what sharpening says; so is the level to look at.
            # The draws between the two say how far apart they are, and their share is off by an error of its own.
            shifted = np.clip(level + plain[k] - mean[k], 0.0, 1.0)
            between = np.abs(shifted - level) * plain_error[k] ** 2 / (level * (1 - level))
            share_error = np.sqrt(error[k] ** 2 + between)
            for i in np.flatnonzero(won):
                worth = np.array([level * (1 - level) / max(share_error[i], 1e-12) ** 2])
                value[part[i]] = np.ldexp(_at_level(ordered[i], shifted[i]), exponent[i]) + origin[i]
                wide = ac.quantile_error(ordered[i : i + 1], float(np.clip(shifted[i], 1e-9, 1 - 1e-9)), worth)
                value_error[part[i]] = np.ldexp(wide[0], exponent[i])
                value_by[part[i]], value_worth[part[i]] = by[k, i], worth[0]

    def estimates(self, raw: Estimates) -> Estimates:
        def words(by: NDArray[np.int64]) -> tuple[str, ...]:
            return tuple(CANDIDATES[b] for b in by)

        numbers = self.numbers
        with np.errstate(all="ignore"):
            worth = np.where(self.by > 0, (numbers["spread"] / numbers["error"]) ** 2, raw.worth)
        levels = {level: Quantile(level, value, error, words(by), share_worth)
                  for level, (value, error, by, share_worth) in self.at.items()}
        return Estimates(raw.names, raw.chains, raw.draws_per_chain, numbers["estimate"], numbers["error"], worth,
                         words(self.by), numbers["spread"], numbers["spread_error"], words(self.spread_by),
                         raw.in_doubt & (numbers["error"] > CERTAIN * raw.error),
                         raw.spread_in_doubt & (numbers["spread_error"] > CERTAIN * raw.spread_error), levels, raw,
                         raw.checked)


def _at_level(ordered: Array, level: float) -> Array:
    """Quantiles of sorted draws (..., N), between neighbours as `numpy.quantile` takes them."""
    place = float(level) * (ordered.shape[-1] - 1)
    below = min(int(place), ordered.shape[-1] - 2)
    part = place - below
    return ordered[..., below] * (1 - part) + ordered[..., below + 1] * part
