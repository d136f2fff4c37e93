"""Do draws and gradients belong together? First-order identities that hold for every density, whatever its shape.

E[g] = 0 and E[(x - mean) g^T] = -I for draws x of a density with gradient g of its logarithm, if it vanishes fast
enough far out. Draws that have not arrived, that miss a part, or a gradient that is wrong break them, and no knowledge
of the density is needed to see it. What breaks none: draws that fill one of several well separated places as they
should, the others left empty.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import special

from fellwalk import autocorrelation as ac
from fellwalk.stein import HEAVY, Frame, tail_index

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


def check_identities(x: Array, g: Array) -> IdentityCheck:
    """Check draws x with gradients g, both (chains, n, dimension), of the same density in the same coordinates."""
    chains, n, dimension = x.shape
    with np.errstate(all="ignore"):
        frame = Frame(x.reshape(-1, dimension), g.reshape(-1, dimension), mix=False)
        if not len(frame) or n < 2 * BATCHES:
            return IdentityCheck(0, 0, (), "too few draws, or none that differ")
        found: list[tuple[Array, ...]] = []
        labels: list[tuple[int, int]] = []
        for names, rows in _terms(frame):
            labels += names
            found.append(_judged(rows.reshape(len(rows), chains, n)))
    mean, errors, chance = (np.concatenate(parts) for parts in zip(*found, strict=True))
    counted = np.isfinite(chance)
    limit = FALSE_ALARM / max(int(counted.sum()), 1)
    alarms = []
    for row, column in np.argwhere(counted & (chance < limit)):
        first, second = labels[row]
        expected = -1.0 if first == second else 0.0
        observed = float(mean[row, column]) - (1.0 if first == second else 0.0)
        alarms.append(Finding(None if first < 0 else int(frame.kept[first]), int(frame.kept[second]),
                              None if column == chains else int(column), observed, expected,
                              float(errors[row, column]), float(chance[row, column])))
    alarms.sort(key=lambda finding: (finding.chance, -abs(finding.errors)))
    return IdentityCheck(int(counted.sum()), int((~counted).sum()), tuple(alarms))


def _terms(frame: Frame) -> Iterator[tuple[list[tuple[int, int]], Array]]:
    """Labels (first, second) of terms of mean zero, first = -1 for the gradient alone, and the terms (p, N)."""
    count = len(frame)
    step = max(1, GROUP // frame.y.shape[1])
    for start in range(0, count, step):
        part = range(start, min(start + step, count))
        yield [(-1, j) for j in part], frame.gy[part.start : part.stop]
    if count <= ALL_PRODUCTS:
        for i in range(count):
            rows = frame.y[i] * frame.gy
            rows[i] += 1
            yield [(i, j) for j in range(count)], rows
        return
    for start in range(0, count, step):
        part = range(start, min(start + step, count))
        yield [(i, i) for i in part], frame.y[part.start : part.stop] * frame.gy[part.start : part.stop] + 1


def _judged(rows: Array) -> tuple[Array, Array, Array]:
    """Means, means in errors, and chances of terms (p, chains, n), for each chain and in the last column for all:
    each (p, chains + 1). NaN chances where nothing can be said."""
    p, chains, _ = rows.shape
    heavy = ~(tail_index(rows.reshape(p, -1)) < HEAVY)
    whole = _student(rows, 1)
    if chains == 1:
        mean, errors, chance = (np.repeat(a[:, None], 2, axis=1) for a in whole)
        chance[:, 0] = np.nan  # the same as all together
    else:
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
    # Of the statistic with and without the correction the nearer one to zero counts: no alarm on the correction's word.
    least = np.where(np.sign(flat) == np.sign(t), np.minimum(np.abs(t), np.abs(flat)), 0.0)
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
    text = (f"Draws and gradients contradict each other: {what}. Either the gradient is wrong (fellwalk.audit looks into "
            "that), or these draws have not arrived at the distribution or miss a part of it.")
    return [text + more]
