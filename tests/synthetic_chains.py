"""Chains of known behaviour, made from numpy generators: good, stuck, two-mode and too short ones.

Every maker takes a generator and returns draws (4, n, parameters). They are kept apart from the tests so that the
rates can be measured on more runs than the tests make: `python tests/synthetic_chains.py 2000`.
"""

import sys
from collections import Counter
from collections.abc import Callable

import numpy as np
from scipy.signal import lfilter

CHAINS = 4
Maker = Callable[[np.random.Generator], np.ndarray]


def autoregression(rng: np.random.Generator, r: float, n: int, parameters: int = 1) -> np.ndarray:
    """First-order autoregressions with standard normal marginals, exactly stationary. (CHAINS, n, parameters)."""
    noise = rng.standard_normal((CHAINS, n, parameters)) * np.sqrt(1 - r * r)
    noise[:, 0] /= np.sqrt(1 - r * r)
    return lfilter([1.0], [1.0, -r], noise, axis=1)


# Three parameters as a model might have them: plain, positive and skewed, and a square.
def _bend(x: np.ndarray) -> np.ndarray:
    return np.concatenate([x, np.exp(x), x**2 + 0.1 * x], axis=2)


def good(r: float, n: int) -> Maker:
    return lambda rng: _bend(autoregression(rng, r, n))


def frozen(share: float, n: int = 800) -> Maker:
    """Chain 3 stands still over the last part of its draws, or over all of them (share 1)."""

    def make(rng: np.random.Generator) -> np.ndarray:
        x = autoregression(rng, 0.5, n)
        start = n - int(share * n)
        x[2, start:] = x[2, start]
        return _bend(x)

    return make


def confined(low: float, high: float, n: int = 800) -> Maker:
    """Chain 3 never leaves an interval: it is reflected at its ends, elsewhere it moves like the others."""

    def make(rng: np.random.Generator) -> np.ndarray:
        x = autoregression(rng, 0.5, n)
        width = high - low
        folded = np.mod(x[2] - low, 2 * width)
        x[2] = low + np.minimum(folded, 2 * width - folded)
        return x

    return make


def crawling(n: int = 800) -> Maker:
    """Chain 3 creeps: nearly a random walk with steps a hundredth of the spread."""

    def make(rng: np.random.Generator) -> np.ndarray:
        x = autoregression(rng, 0.5, n)
        x[2] = autoregression(rng, 0.9999, n)[0]
        return x

    return make


def two_modes(apart: float, n: int = 800) -> Maker:
    """Each chain settles for good in one of two equal modes; both have at least one chain."""

    def make(rng: np.random.Generator) -> np.ndarray:
        side = rng.permutation([0.0, 1.0, *rng.integers(0, 2, CHAINS - 2)])
        return autoregression(rng, 0.5, n) + apart * side[:, None, None]

    return make


def switching(apart: float, chance: float, n: int = 800) -> Maker:
    """Chains jump between two equal modes with a small chance at each draw, starting in either with even chance."""

    def make(rng: np.random.Generator) -> np.ndarray:
        jumps = rng.random((CHAINS, n)) < chance
        jumps[:, 0] = rng.random(CHAINS) < 0.5
        side = np.cumsum(jumps, axis=1) % 2
        return autoregression(rng, 0.5, n) + apart * side[:, :, None]

    return make


def one_visitor(apart: float, n: int = 800) -> Maker:
    """All chains stay in one of two modes, but chain 3 visits the other one once, for a twentieth of its draws."""

    def make(rng: np.random.Generator) -> np.ndarray:
        x = autoregression(rng, 0.5, n)
        start = int(rng.integers(0, n - n // 20))
        x[2, start : start + n // 20] += apart
        return x

    return make


def drifting(start: float, rate: float, n: int = 800) -> Maker:
    """All chains still come from a far start, the distance shrinking by a factor e every n * rate draws."""

    def make(rng: np.random.Generator) -> np.ndarray:
        return autoregression(rng, 0.5, n) + start * np.exp(-np.arange(n) / (n * rate))[None, :, None]

    return make


# The true worth of each of the short ones, 4 n (1 - r) / (1 + r), is at most 256 of the 400 asked.
FAMILIES: dict[str, list[Maker]] = {
    "good": [good(0.0, 500), good(0.3, 800), good(0.5, 1000), good(-0.3, 600)],
    "stuck": [
        frozen(1.0), frozen(0.5), frozen(0.2), confined(0.0, 3.0), confined(-0.1, 0.1), confined(1.5, 2.0), crawling(),
    ],
    "two-mode": [
        two_modes(1.5), two_modes(4.0), two_modes(20.0), switching(5.0, 1 / 800), switching(5.0, 1 / 200),
        switching(3.0, 1 / 100), one_visitor(8.0),
    ],
    "too short": [
        good(0.0, 50), good(0.5, 150), good(0.9, 500), good(0.95, 1000), good(0.99, 1000), good(0.88, 1000),
        drifting(4.0, 0.3),
    ],
}  # fmt: skip


def verdicts(family: str, runs: int, seed: int) -> Counter[str]:
    """Verdict kinds over so many runs, the makers of a family taken in turn."""
    from fellwalk.judge import judge

    makers = FAMILIES[family]
    return Counter(
        judge(makers[run % len(makers)](np.random.default_rng([seed, run]))).verdict.kind for run in range(runs)
    )


if __name__ == "__main__":
    for name in FAMILIES:
        print(name, dict(verdicts(name, int(sys.argv[1]), 20260)))
