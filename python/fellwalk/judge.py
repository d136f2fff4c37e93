"""Judge draws: what they say about each parameter, how well, and whether they are fit for use.

`judge` takes draws of any origin, `judge_function` a function of them. The numbers follow Vehtari, Gelman, Simpson,
Carpenter & Buerkner (2021), Bayesian Analysis 16, with Geyer's (1992) initial monotone sequence, and Betancourt (2016)
for the energies. This file checks the input and computes; `fellwalk.verdict` decides, `fellwalk.judgement` shows.
"""

from collections.abc import Callable, Mapping, Sequence
from dataclasses import replace
from typing import Any

import numpy as np
from numpy.typing import ArrayLike

from fellwalk import autocorrelation as ac
from fellwalk import verdict as verdict_module
from fellwalk.estimates import Estimates, estimate_all
from fellwalk.failing import EDGE_CODES
from fellwalk.identities import IdentityCheck, check_identities, describe
from fellwalk.judge_input import (
    checked_draws,
    checked_facts,
    checked_gradients,
    checked_names,
    checked_spent,
    values_of,
)
from fellwalk.judgement import Judgement
from fellwalk.sharpen import Sharpener
from fellwalk.stein import Frame
from fellwalk.tails import excess, widening

LEVELS = {"low": 0.05, "middle": 0.5, "high": 0.95}
MOST_SHARPENED = 1000  # parameters: beyond, only what is asked for by `fellwalk.Result.estimate` is sharpened

# A sharpened estimate may be worth thousands of times its draws; but R-hat, autocorrelations and the fit itself rest on
# the draws, so that the verdict credits it with at most so many times what the draws alone are worth. At the 50 a chain
# that are then left, an effective size is known to about a fifth (relative spread over 40 runs of 4 x 1000 draws of a
# first-order autoregression that are worth 210: 20%).
MOST_CREDIT = 2.0

# Parameters are worked on in groups of about this many numbers, so that the transforms of 1e5 parameters never
# stand in memory together.
GROUP = 1 << 19


def judge(
    draws: ArrayLike,
    names: Sequence[str] | None = None,
    *,
    facts: np.ndarray | None = None,
    spent: Mapping[str, float] | None = None,
    gradients: np.ndarray | None = None,
    free_draws: np.ndarray | None = None,
    coordinates: Sequence[str] | None = None,
    settings: Mapping[str, Any] | None = None,
) -> Judgement:
    """Judge draws of one or more chains.

    draws: (chains, draws, dimension), finite numbers, at least four draws a chain; draws before settling left out.
        Boolean draws are events: their estimates are probabilities. Not copied: leave the array as it is afterwards.
    names: one name for each parameter, all different; x[0], x[1], ... when left out.
    facts: structured array (chains, draws) with fields "energy" and "failure", as a run keeps it.
    spent: cost of the whole run, settling included: any of "gradients", "products", "seconds".
    gradients: of the log density at the draws, (chains, draws, free dimension). With them estimates are sharpened where
        that helps (`fellwalk.sharpen`), and draws and gradients are checked against each other
        (`fellwalk.identities`).
    free_draws: the draws in the coordinates of the gradients, where these are not those of the draws; coordinates:
        their names.
    settings: of the run that made the draws, as `fellwalk.Result` has them; what the verdict suggests goes further.

    Raises ArgumentError, naming the place, for anything else. Chains are counted from 1 in everything that is printed.
    """
    raw, x = checked_draws(draws)
    chains, n, dimension = x.shape
    names = checked_names(names, dimension)
    energies, failure = checked_facts(facts, chains, n)
    spent = checked_spent(spent)
    numbers = measure(x)
    numbers["event"] = np.full(dimension, raw.dtype == np.bool_)
    pair = checked_gradients(x if free_draws is None else free_draws, gradients, (chains, n))
    if coordinates is None and free_draws is None:
        coordinates = names
    return _assemble(x, names, numbers, energies, failure, spent, pair, coordinates, settings)


def judge_function(
    draws: ArrayLike,
    f: Callable[[np.ndarray], Any],
    names: Sequence[str] | None = None,
    *,
    facts: np.ndarray | None = None,
    spent: Mapping[str, float] | None = None,
    gradients: np.ndarray | None = None,
    free_draws: np.ndarray | None = None,
    coordinates: Sequence[str] | None = None,
    settings: Mapping[str, Any] | None = None,
) -> Judgement:
    """Judge a function of the draws: what it is on average, how it spreads, and with what error.

    f: called once for each draw with one read-only vector (dimension,); returns a number, a truth value (the estimate
        is then its probability) or a short vector of either, of the same length every time.
    names: one name for each number that f returns. draws, facts, spent, gradients, free_draws, coordinates, settings:
        as for `judge`.

    Raises ArgumentError when values of f differ in shape, are not numbers or not finite; what f raises comes through.
    """
    values, names = values_of(draws, f, names)
    if gradients is not None and free_draws is None:
        free_draws = np.asarray(draws, dtype=np.float64)
    return judge(values, names, facts=facts, spent=spent, gradients=gradients, free_draws=free_draws,
                 coordinates=coordinates, settings=settings)


# ---- what is computed -----------------------------------------------------------------------------------------------


def measure(x: np.ndarray) -> dict[str, np.ndarray]:
    """All numbers for each parameter, from finite draws (chains, n, dimension).

    Arrays (dimension,), and (dimension, chains) for "own_worth" (effective size of each chain taken alone) and
    "stand" (longest run of equal successive draws), (dimension, 2) for "above_doubt" (`fellwalk.tails.excess` of draws
    and of their squares about the mean). "heaviest" is the largest draw's share of all squared deviations.
    Constant parameters have NaN for what is then undefined.
    """
    chains, n, dimension = x.shape
    step = max(1, GROUP // (chains * n))
    with np.errstate(all="ignore"):
        groups = [
            _measure_group(np.ascontiguousarray(np.moveaxis(x[:, :, start : start + step], 2, 0)))
            for start in range(0, dimension, step)
        ]
    return {key: np.concatenate([group[key] for group in groups]) for key in groups[0]}


def standardise(x: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Draws (p, chains, n) less a common origin, over a power of two: (y, origin, exponent), x = origin + y 2^exponent.

    No digit is lost to a large offset (the origin is a draw), and squares neither overflow nor vanish.
    """
    origin = x[:, 0, 0]
    # Halved first, so that the distance between draws at both ends of the double range stays finite.
    y = x / 2 - origin[:, None, None] / 2
    lost = (np.abs(y).max(axis=(1, 2)) < 1e-290)[:, None, None]
    y = np.where(lost, x - origin[:, None, None], y)
    exponent = np.frexp(np.abs(y).max(axis=(1, 2)))[1]
    y = np.ldexp(y, -exponent[:, None, None])
    return y, origin, exponent + np.where(lost[:, 0, 0], 0, 1)


def _measure_group(x: np.ndarray) -> dict[str, np.ndarray]:
    p, _chains, _n = x.shape
    y, origin, exponent = standardise(x)
    flat = y.reshape(p, -1)
    ordered = np.sort(flat, axis=-1)
    halves = ac.split(y)
    scores = ac.rank_normalise(halves)
    constant = ordered[:, 0] == ordered[:, -1]
    # Of an odd number of draws only the middle one may differ; what is left without it is then worth one draw.
    worth = _known(ac.effective_size(scores), constant)
    centre = ac.potential_scale_reduction(scores)
    folded = ac.potential_scale_reduction(ac.rank_normalise(ac.fold(halves)))

    mean = flat.mean(axis=-1)
    deviation = y - mean[:, None, None]
    spread = flat.std(axis=-1, ddof=1)
    worth_mean = _known(ac.effective_size(halves), constant)
    error = spread / np.sqrt(worth_mean)
    # Delta method: the error of a standard deviation is that of the variance, over twice the standard deviation.
    square = deviation**2
    square_worth = ac.effective_size(ac.split(square))
    square_spread = square.std(axis=(1, 2), ddof=1)
    spread_error = np.where(
        square_spread > 0, square_spread / np.sqrt(_known(square_worth, constant)) / (2 * spread), 0
    )
    above = excess(deviation.reshape(p, -1), (1.0, 2.0)).T
    above[constant] = -np.inf
    error, spread_error = error * widening(above[:, 0]), spread_error * widening(above[:, 1])
    numbers = {"worth": worth, "worth_mean": worth_mean, "agreement": np.fmax(centre, folded)}
    tails = []
    for name, level in LEVELS.items():
        value, level_error, indicator_worth = _quantile(ordered, halves, level, worth)
        numbers[name] = np.ldexp(value, exponent) + origin
        numbers[name + "_error"] = np.ldexp(level_error, exponent)
        if name != "middle":
            tails.append(indicator_worth)
    lower = np.fmin(*tails)
    numbers["worth_tails"] = np.where(np.isnan(lower), worth, lower)
    exact = {"estimate": np.ldexp(mean, exponent) + origin, "error": np.ldexp(error, exponent)}
    exact |= {"spread": np.ldexp(spread, exponent), "spread_error": np.ldexp(spread_error, exponent)}
    numbers |= exact
    for key in ("error", "spread", "spread_error", "low_error", "middle_error", "high_error"):
        numbers[key] = np.where(constant, 0.0, numbers[key])
    whole = ac.rank_normalise(y)
    numbers["own_worth"] = ac.effective_size(whole[:, :, None, :])
    numbers["stand"] = ac.longest_stand(y)
    numbers["distinct"] = 1 + np.sum(ordered[:, 1:] != ordered[:, :-1], axis=-1)
    numbers["constant"] = constant
    numbers["above_doubt"], numbers["in_doubt"], numbers["spread_in_doubt"] = above, above[:, 0] > 0, above[:, 1] > 0
    numbers["heaviest"] = square.max(axis=(1, 2)) / square.sum(axis=(1, 2))
    return numbers


def _known(worth: np.ndarray, constant: np.ndarray) -> np.ndarray:
    return np.where(np.isnan(worth) & ~constant, 1.0, worth)


def energy_fractions(energies: np.ndarray) -> np.ndarray:
    """Energy fraction of missing information of each chain, E[(E_n - E_(n-1))^2] / Var(E) (Betancourt 2016).

    energies: (chains, n). Returns (chains,): 2 for independent draws, near 0 where each transition covers little of the
    energy's range; NaN for energies that are constant or not finite.
    """
    with np.errstate(all="ignore"):
        shifted = energies - energies[:, :1]
        variance = shifted.var(axis=1)
        steps = np.mean(np.diff(shifted, axis=1) ** 2, axis=1)
        return np.where(variance > 0, steps / variance, np.nan)


def _assemble(
    x: np.ndarray,
    names: list[str],
    numbers: dict[str, np.ndarray],
    energies: np.ndarray | None,
    failure: np.ndarray | None,
    spent: dict[str, float],
    pair: tuple[np.ndarray, np.ndarray] | None,
    coordinates: Sequence[str] | None,
    settings: Mapping[str, Any] | None,
) -> Judgement:
    chains, n, _ = x.shape
    fraction = None if energies is None else energy_fractions(energies)
    checked, sharpener, _ = prepare(pair, failure)
    best, credited = None, numbers
    if sharpener is not None and len(names) <= MOST_SHARPENED:
        best = estimate_all(x, names, numbers, list(LEVELS.values()), sharpener, checked)
        credited = _credited(numbers, best)
    labels = coordinates or (None if pair is None else [f"free[{i}]" for i in range(pair[0].shape[2])])
    broken = [] if checked is None else describe(checked, labels or [])
    verdict = verdict_module.decide(x, names, numbers, fraction, failure, credited, broken, settings)
    shown: dict[str, Any] = {key: value for key, value in numbers.items() if key in Judgement.NUMBERS}
    failures: dict[int, int] = {}
    if failure is not None:
        codes, counts = np.unique(failure[failure != 0], return_counts=True)
        failures = {int(code): int(count) for code, count in zip(codes, counts, strict=True)}
    raw = Judgement(
        names=tuple(names), chains=chains, draws_per_chain=n, energy_fraction=fraction, failures=failures,
        judged_facts=failure is not None, spent=spent, verdict=verdict, draws=x, identities=checked, **shown,
    )  # fmt: skip
    return raw if best is None else _with_estimates(raw, best)


def prepare(
    pair: tuple[np.ndarray, np.ndarray] | None, failure: np.ndarray | None, choice: str = "auto"
) -> tuple[IdentityCheck | None, Sharpener | None, str]:
    """The check of draws against gradients, what sharpens with them, or None and a sentence why nothing does."""
    if pair is None:
        return None, None, ""
    if failure is not None and np.isin(failure, EDGE_CODES).any():
        why = "paths met an edge of the support, where the identities that sharpening rests on need not hold"
        return IdentityCheck(0, 0, (), why), None, f"Not sharpened: {why}."
    x, g = pair
    with np.errstate(all="ignore"):
        frame = Frame(x.reshape(-1, x.shape[2]), g.reshape(-1, x.shape[2]))
    checked = check_identities(x, g, frame)
    if checked.alarms:
        return checked, None, "Not sharpened: draws and gradients contradict each other (see the verdict)."
    if not checked.passed:
        return checked, None, "Not sharpened: too few effective draws to check draws and gradients against each other."
    return checked, Sharpener(x, g, choice, frame), ""


def _credited(numbers: dict[str, np.ndarray], best: Estimates) -> dict[str, np.ndarray]:
    """Worths by which the verdict asks for more draws: those of the sharpened estimates, as far as the draws allow."""
    credited = dict(numbers)
    sharp = np.array(best.by) != "none"
    for key in ("worth", "worth_mean"):
        credited[key] = np.where(sharp, _bounded(best.worth, numbers[key]), numbers[key])
    plain = numbers["worth_tails"]
    ends = [best.quantiles[LEVELS[name]].worth for name in ("low", "high")]
    credited["worth_tails"] = _bounded(np.fmin(*(np.where(np.isfinite(end), end, plain) for end in ends)), plain)
    return credited


def _bounded(sharpened: np.ndarray, plain: np.ndarray) -> np.ndarray:
    return np.maximum(np.fmin(sharpened, MOST_CREDIT * plain), plain)


def _with_estimates(raw: Judgement, best: Estimates) -> Judgement:
    by = {"estimate": best.by, "spread": best.spread_by}
    numbers: dict[str, Any] = {"in_doubt": best.in_doubt, "spread_in_doubt": best.spread_in_doubt}
    numbers |= {"estimate": best.estimate, "error": best.error}
    numbers |= {"spread": best.spread, "spread_error": best.spread_error}
    for name, level in LEVELS.items():
        quantile = best.quantiles[level]
        by[name], numbers[name], numbers[name + "_error"] = quantile.by, quantile.value, quantile.error
    numbers["worth"] = np.where(np.array(best.by) != "none", best.worth, raw.worth)
    return replace(raw, **numbers, by=by, plain=raw)


def quantiles(x: np.ndarray, level: float, worth: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """The quantile at a level and its error for draws (chains, n, dimension), both (dimension,).

    worth: (dimension,) effective size in the centre, used where no draw of the halves lies beyond the quantile.
    """
    chains, n, dimension = x.shape
    values, errors = np.empty(dimension), np.empty(dimension)
    step = max(1, GROUP // (chains * n))
    with np.errstate(all="ignore"):
        for start in range(0, dimension, step):
            part = slice(start, start + step)
            y, origin, exponent = standardise(np.ascontiguousarray(np.moveaxis(x[:, :, part], 2, 0)))
            ordered = np.sort(y.reshape(len(y), -1), axis=-1)
            value, error, _ = _quantile(ordered, ac.split(y), level, worth[part])
            values[part] = np.ldexp(value, exponent) + origin
            errors[part] = np.ldexp(error, exponent)
    return values, errors


def _quantile(
    ordered: np.ndarray, halves: np.ndarray, level: float, worth: np.ndarray
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Quantile, error and effective size of the indicator (NaN where that never varies) of standardised draws."""
    value = np.quantile(ordered, level, axis=-1)
    indicator = ac.effective_size((halves <= value[:, None, None]).astype(np.float64))
    effective = np.nan_to_num(np.where(np.isnan(indicator), worth, indicator), nan=1.0)
    return value, ac.quantile_error(ordered, level, effective), indicator
