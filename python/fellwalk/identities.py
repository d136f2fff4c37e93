"""Do draws and gradients belong together? First-order identities that hold for every density, whatever its shape.

E[g] = 0 and E[(x - mean) g^T] = -I for draws x of a density with gradient g of its logarithm, if it vanishes fast
enough far out. Draws that have not arrived, that miss a part, or a gradient that is wrong break them, and no knowledge
of the density is needed to see it. What breaks none: draws that fill one of several well separated places as they
should, the others left empty.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import special

from fellwalk import autocorrelation as ac
from fellwalk.stein import Frame
from fellwalk.tails import HEAVY, tail_index

Array = NDArray[np.float64]

FALSE_ALARM = 0.01  # for all identities of one set of draws together (Bonferroni)
ALL_PRODUCTS = 20  # dimensions up to which all products x_i g_j are looked at; beyond only those with i = j
BATCHES = 16  # for each chain
# A term with fewer effective draws than this is not judged: its error is not known well enough for chances this small.
FEWEST_EFFECTIVE = 100
GROUP = 1 << 20  # numbers that stand in memory together


@dataclass(frozen=True)
class Finding:
    """One identity: mean of the gradient in `second` (first is None), or of its product with the centred `first`.

    observed, expected: in units in which the coordinates have sd 1. errors: the distance in standard errors. chain: the
    chain that it was seen in, from 0; None for all together.
    """

    first: int | None
    second: int
    chain: int | None
    observed: float
    expected: float
    errors: float
    chance: float


@dataclass(frozen=True)
class IdentityCheck:
    """What the identities say. checked: how many were looked at; left_out: how many had too heavy tails or too few
    effective draws; alarms: those beyond chance at a false-alarm rate of 1% together, the clearest first; why_not: why
    nothing was checked, or empty."""

    checked: int
    left_out: int
    alarms: tuple[Finding, ...]
    why_not: str = ""

    @property
    def passed(self) -> bool:
        """Were identities checked, and is none broken?"""
        return self.checked > 0 and not self.alarms


def check_identities(x: Array, g: Array, frame: Frame | None = None) -> IdentityCheck:
    """Check draws x with gradients g, both (chains, n, dimension), of the same density in the same coordinates.

    frame: `fellwalk.stein.Frame` of these, where it is at hand.
    """
    chains, n, dimension = x.shape
    with np.errstate(all="ignore"):
        frame = frame or Frame(x.reshape(-1, dimension), g.reshape(-1, dimension))
        if not len(frame) or n < 2 * BATCHES:
            return IdentityCheck(0, 0, (), "too few draws, or none that differ")
        return _check(frame, chains, n)


def _check(frame: Frame, chains: int, n: int) -> IdentityCheck:
    """Batch means settle nearly all; the few that look broken by them are looked at draw by draw."""
    labels, mean, chance, worth = _by_batches(frame, chains, n)
    enough = worth >= FEWEST_EFFECTIVE
    limit = FALSE_ALARM / max(int(enough.sum()), 1)
    suspects = np.flatnonzero((enough & (chance < limit)).any(axis=1))
    alarms, left_out = [], int((~enough).sum())
    step = max(1, GROUP // (chains * n))
    for start in range(0, len(suspects), step):
        part = suspects[start : start + step]
        mean, errors, exact = _judged(_series(frame, labels[part]).reshape(len(part), chains, n))
        exact[~enough[part]] = np.nan
        left_out += int((enough[part] & np.isnan(exact)).sum())
        for row, column in np.argwhere(exact < limit):
            first, second = labels[part[row]]
            expected = -1.0 if first == second else 0.0
            alarms.append(Finding(
                None if first < 0 else int(frame.kept[first]), int(frame.kept[second]),
                None if column == chains else int(column), float(mean[row, column]) + expected, expected,
                float(errors[row, column]), float(exact[row, column])))
    alarms.sort(key=lambda finding: (finding.chance, -abs(finding.errors)))
    return IdentityCheck(enough.size - left_out, left_out, tuple(alarms))


def _series(frame: Frame, labels: NDArray[np.int64]) -> Array:
    """The terms of mean zero with these labels (first, second), (p, N); first = -1 stands for the gradient alone."""
    rows = frame.gy[labels[:, 1]]
    products = labels[:, 0] >= 0
    rows[products] *= frame.y[labels[products, 0]]
    rows[labels[:, 0] == labels[:, 1]] += 1
    return rows


def _by_batches(frame: Frame, chains: int, n: int) -> tuple[NDArray[np.int64], Array, Array, Array]:
    """Labels (p, 2) of all terms, and for each chain and in the last column for all: means, chances by Student's t of
    the batch means alone, and effective draws by these, each (p, chains + 1); a chance is 1 below two errors."""
    count, length = len(frame), n // BATCHES
    kept = slice(n - length * BATCHES, n)
    y, gy = (a.reshape(count, chains, n)[:, :, kept].reshape(count, chains * BATCHES, length).transpose(1, 0, 2)
             for a in (frame.y, frame.gy))
    order = np.arange(count)
    if count <= ALL_PRODUCTS:
        products = np.ascontiguousarray(y) @ np.ascontiguousarray(gy.transpose(0, 2, 1)) / length
        squares = (frame.y**2) @ (frame.gy**2).T / (chains * n)
        pairs = np.column_stack([np.repeat(order, count), np.tile(order, count)])
    else:
        products = np.einsum("bil,bil->bi", y, gy)[:, :, None] / length
        squares = np.einsum("in,in->i", frame.y**2, frame.gy**2) / (chains * n)
        pairs = np.column_stack([order, order])
    labels = np.concatenate([np.column_stack([np.full(count, -1), order]), pairs])
    batches = np.concatenate([gy.mean(axis=2).T, products.reshape(chains * BATCHES, -1).T])
    second = np.concatenate([np.einsum("in,in->i", frame.gy, frame.gy) / (chains * n), squares.reshape(-1)])
    diagonal = labels[:, 0] == labels[:, 1]
    # Of y g + 1, whose square is (y g)^2 + 2 y g + 1.
    second[diagonal] += 2 * batches[diagonal].mean(axis=1) + 1
    batches[diagonal] += 1
    spread = second - batches.mean(axis=1) ** 2
    each = batches.reshape(-1, chains, BATCHES)
    # As in _student: no chain's error is taken smaller than it is in the mean of the chains.
    own = each.var(axis=2, ddof=1) / BATCHES
    squared = np.column_stack([np.maximum(own, own.mean(axis=1, keepdims=True)),
                               batches.var(axis=1, ddof=1) / batches.shape[1]])
    mean = np.column_stack([each.mean(axis=2), batches.mean(axis=1)])
    freedom = np.array([*[BATCHES - 1.0] * chains, chains * BATCHES - 1.0])
    errors = np.abs(mean) / np.sqrt(squared)
    # Chances are dear, and those of small distances are of no interest.
    chance, far = np.ones(errors.shape), np.isfinite(errors) & (errors > 2)
    chance[far] = 2 * special.stdtr(np.broadcast_to(freedom, errors.shape)[far], -errors[far])
    worth = spread[:, None] / np.column_stack([np.repeat(own.mean(axis=1)[:, None], chains, axis=1), squared[:, -1]])
    if chains == 1:
        worth[:, 0] = 0.0  # the same as all together
    return labels, mean, chance, np.where(squared > 0, worth, 0.0)


def _judged(rows: Array) -> tuple[Array, Array, Array]:
    """Means, means in errors, and chances of terms (p, chains, n), for each chain and in the last column for all:
    each (p, chains + 1). NaN chances where nothing can be said."""
    p, chains, _ = rows.shape
    heavy = ~(tail_index(rows.reshape(p, -1)) < HEAVY)
    whole = _student(rows, 1)
    each = _student(rows.reshape(p * chains, 1, -1), chains)
    mean, errors, chance = (
        np.concatenate([a.reshape(p, chains), b[:, None]], axis=1) for a, b in zip(each, whole, strict=True))
    chance[heavy] = np.nan
    return mean, errors, chance


def _student(rows: Array, siblings: int) -> tuple[Array, Array, Array]:
    """Mean, mean in errors, and its two-sided chance for rows (p, chains, n).

    siblings: so many successive rows are of the same term. An error is never taken smaller than it is in the mean of
    these: a chain that happened to see little shows too small a spread and too small an error of it at once. The error
    is the larger one of the initial monotone sequence's and of batch means; the skewness of the batches is taken out of
    Student's statistic (Hall 1992, Journal of the Royal Statistical Society B 54, from memory).
    """
    p, chains, n = rows.shape
    length = n // BATCHES
    means = rows[:, :, n - length * BATCHES :].reshape(p, chains * BATCHES, length).mean(axis=2)
    count = means.shape[1]
    mean = rows.mean(axis=(1, 2))
    away = means - means.mean(axis=1, keepdims=True)
    variance = (away**2).mean(axis=1)
    worth = np.minimum(ac.effective_size(rows), chains * n)
    spread = rows.var(axis=(1, 2))
    squared = np.maximum(spread / worth, variance / (count - 1))
    worth = spread / squared
    shared = squared.reshape(-1, siblings).mean(axis=1)
    squared = np.maximum(squared, np.repeat(shared, siblings))
    freedom = np.minimum(count - 1.0, worth / 4)
    t = mean / np.sqrt(squared)
    a = (away**3).mean(axis=1) / np.maximum(variance, 1e-300) ** 1.5 / np.sqrt(count)
    flat = t + a * t**2 / 3 + a**2 * t**3 / 27 + a / 6
    # Of the statistic with and without the correction the nearer one to zero counts: no alarm on the correction's
    # word. It may take away half at most, since the skewness of few batches is itself uncertain.
    least = np.clip(np.where(np.sign(flat) == np.sign(t), np.abs(flat), 0.0), np.abs(t) / 2, np.abs(t))
    chance = 2 * special.stdtr(freedom, -least)
    known = (squared > 0) & (worth >= FEWEST_EFFECTIVE)
    return mean, np.where(known, t, np.nan), np.where(known, chance, np.nan)


def describe(check: IdentityCheck, coordinates: Sequence[str]) -> list[str]:
    """Sentences on broken identities, for a verdict; none when none is broken."""
    if not check.alarms:
        return []
    worst = check.alarms[0]
    where = "" if worst.chain is None else f" in chain {worst.chain + 1}"
    if worst.first is None:
        what = f"the mean gradient in {coordinates[worst.second]}{where} is {abs(worst.errors):.0f} errors from zero"
    else:
        first, second = coordinates[worst.first], coordinates[worst.second]
        product = f"{first} less its mean times the gradient in {second}"
        what = (f"{product} is {worst.observed:.2g} on average{where}, where it must be {worst.expected:.0f} "
                f"({abs(worst.errors):.0f} errors away)")
    others = len(check.alarms) - 1
    more = f" {others} more of {check.checked} such identities are broken." if others else ""
    text = (f"Draws and gradients contradict each other: {what}. Either the gradient is wrong (fellwalk.audit looks "
            "into that), or these draws have not arrived at the distribution or miss a part of it.")
    return [text + more]
