"""From numbers to a verdict in plain words: fit for use, needs more draws, or not to be trusted, and why, and where.

Two questions are kept apart. Is there enough (worth, agreement, energy)? More draws cure a lack. Is there something
that more of the same draws would not cure (a chain that stands still, crawls, or stays in a place of its own; failed
steps)? Only when both are answered well are draws called fit for use.
"""

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from scipy import special

from fellwalk import autocorrelation as ac
from fellwalk.failing import failing, percent

FIT, MORE, NOT_TRUSTED = "fit for use", "needs more draws", "not to be trusted"

CAUTION = (
    "This speaks of the sampling only, not of the model or the data. Decisions which can hurt people need the review "
    "of a qualified practitioner under the rules that apply to them."
)

# Vehtari et al. (2021): R-hat above 1.01 asks for attention, in place of the older 1.1.
AGREEMENT = 1.01

# Vehtari et al. (2021): 50 effective draws for each half chain are needed for R-hat and the effective size
# itself to be stable; that is 100 for each chain, 400 for four.
WORTH_PER_CHAIN = 100

# Chance that chains of one law are told apart by mistake, shared out over all parameters and chains (Bonferroni).
# Chains are only compared where R-hat is above its bound already, so this decides between two kinds of "not fit".
CHANCE_OF_FALSE_ALARM = 1e-3

# A chain whose own effective size is below this share of the median of the others' crawls. The smallest share met in
# 4000 runs of four good chains (first-order autoregression): 0.27 for coefficient 0.5 and 500 draws, 0.21 for 0.9
# and 1000 draws, 0.13 for 0.97 and 1000 draws.
CRAWL = 0.1

# Successive draws that are equal to the last bit, as a share of the chain, and at least this many of them. A sampler
# that accepts one proposal in five stands for 50 draws with chance 0.8^50 = 1e-5 at each draw. Half a chain counts
# at any length.
STAND_SHARE, STAND_DRAWS = 0.1, 50

# Where one draw holds more than this share of all squared deviations, spread and error hang on it, and mean or variance
# may not exist. Share of 300 runs of 4000 independent draws above it: Cauchy 99%, Student t with 2 degrees of freedom
# 57%, with 3 11%, with 5 none; lognormal of log-sd 1.5 55%, of 1 6%; normal none. It is a note: ranks do not suffer.
HEAVIEST = 0.15

# So many sentences name chains that stand out, one for each set of chains; a reader of more has read enough.
MOST_SORTS = 4

# If each transition renews the energy as a first-order autoregression does, its lag-one correlation is 1 - F/2 for an
# energy fraction F, since E[(E_n - E_(n-1))^2] = 2 Var(E) (1 - r). Its autocorrelation time is then
# (1 + r) / (1 - r) = (4 - F) / F, so n draws hold n F / (4 - F) effective draws of the energy. The energy is asked for
# as many as any parameter, WORTH_PER_CHAIN in each chain; there is no bound on F apart from n. Measured on a funnel
# (11 parameters, sd 3 of the log scale; 180 runs of four leapfrog chains of 1000 draws at three step sizes, started
# from exact draws): F of the worst chain from 0.02 to 0.12, so 6 to 30 effective draws of its energy, and 0.55 to 0.75
# times that by the energies' own autocorrelations, so the formula errs on the lenient side. All 180 runs were refused.


@dataclass(frozen=True)
class Verdict:
    """What `judge` concludes.

    kind: "fit for use", "needs more draws" or "not to be trusted".
    reasons: sentences that name parameter and chain (counted from 1).
    draws_needed: kept draws a chain, in total, that would about do; None unless more draws are the cure.
    notes: what a reader should know besides. caution: what the verdict does not speak of.
    """

    kind: str
    reasons: tuple[str, ...]
    draws_needed: int | None
    notes: tuple[str, ...]
    caution: str = CAUTION

    def __str__(self) -> str:
        return f"{self.kind}: {' '.join(self.reasons)}"


@dataclass(frozen=True)
class _Finding:
    """One parameter's trouble: its sort (findings of one sort share a sentence), how bad it is among them, in words."""

    sort: str
    index: int
    badness: float
    sentence: str


def decide(
    x: np.ndarray,
    names: Sequence[str],
    numbers: dict[str, np.ndarray],
    fraction: np.ndarray | None,
    failure: np.ndarray | None,
    credited: dict[str, np.ndarray] | None = None,
    broken_identities: Sequence[str] = (),
    settings: Mapping[str, Any] | None = None,
) -> Verdict:
    """The verdict on finite draws (chains, n, dimension) with the numbers of `fellwalk.judge.measure`.

    fraction: energy fraction of each chain, failure: codes (chains, n); None where nothing is known of them.
    credited: the numbers with the worths that sharpened estimates are credited with, by which more draws are asked for.
    broken_identities: sentences on what draws and gradients contradict. settings: of the run, where they are known.
    """
    chains, n, dimension = x.shape
    varying = np.flatnonzero(~numbers["constant"])
    with np.errstate(all="ignore"):
        broken = _standing(names, numbers, n)
        at_fault = {finding.index for finding in broken}
        broken += [f for f in _apart(x, names, numbers, varying) if f.index not in at_fault]
        at_fault |= {finding.index for finding in broken}
        broken += [f for f in _crawling(names, numbers, varying) if f.index not in at_fault]
        reasons = _summaries(broken, len(varying)) + failing(x, names, failure, settings) + list(broken_identities)
        if dimension and not varying.size and not numbers["event"].any():
            reasons.append("No parameter differs between any two draws: nothing moved.")
        at_fault |= {finding.index for finding in broken}
        sound = np.array([i for i in varying if i not in at_fault], dtype=np.int64)
        lacking, factor = _lacking(x, names, credited or numbers, sound)
        energy_lack, energy_factor = _energy(fraction, n)
        factor = max(factor, energy_factor)
    notes = _notes(names, numbers, fraction, n * chains)
    if reasons:
        return Verdict(NOT_TRUSTED, tuple(reasons + lacking + energy_lack), None, tuple(notes))
    lacking += energy_lack
    needed = _round_up(n * factor) if factor > 1 else None
    lacking += _unseen_events(names, numbers, n * chains)
    if chains == 1:
        lacking.append("There is only one chain, and nothing to compare it with: run three more from other places.")
    if lacking:
        return Verdict(MORE, tuple(lacking), needed, tuple(notes))
    return Verdict(FIT, (_praise(names, numbers, varying),), None, tuple(notes))


def _round_up(count: float) -> int | None:
    if not np.isfinite(count):
        return None
    unit = 10 ** max(int(np.floor(np.log10(count))) - 1, 0)
    return int(np.ceil(count / unit)) * unit


def _chain_list(indices: Iterable[int | np.integer]) -> str:
    numbers = [str(int(i) + 1) for i in indices]
    if len(numbers) == 1:
        return f"chain {numbers[0]}"
    return f"chains {', '.join(numbers[:-1])} and {numbers[-1]}"


def _summaries(findings: list[_Finding], total: int) -> list[str]:
    """One sentence for each sort of finding: the worst parameter's own, and how many others share the trouble."""
    sorts: dict[str, list[_Finding]] = {}
    for finding in findings:
        sorts.setdefault(finding.sort, []).append(finding)
    sentences = []
    for like in list(sorts.values())[:MOST_SORTS]:
        worst = max(like, key=lambda finding: finding.badness)
        others = len(like) - 1
        more = f" (So it is in {others} more of {total} parameters.)" if others else ""
        sentences.append(worst.sentence + more)
    unsaid = {finding.index for like in list(sorts.values())[MOST_SORTS:] for finding in like}
    if unsaid:
        sentences.append(f"Other chains stand out in {len(unsaid)} more of {total} parameters.")
    return sentences


# ---- what more draws would not cure ---------------------------------------------------------------------------------


def _standing(names: Sequence[str], numbers: dict[str, np.ndarray], n: int) -> list[_Finding]:
    stand = numbers["stand"]
    long = ((stand >= STAND_SHARE * n) & (stand >= STAND_DRAWS)) | (2 * stand >= n)
    # A parameter of few values, an event for instance, stands still by its nature: chains can then only be compared.
    total = stand.shape[1] * n
    many_valued = 20 * numbers["distinct"] >= total
    findings = []
    everywhere = np.isinf(numbers["agreement"])
    for i in np.flatnonzero((long.any(axis=1) & many_valued & ~numbers["constant"]) | everywhere):
        where = np.flatnonzero(long[i])
        worst = int(stand[i, where].max())
        name = names[int(i)]
        text = f"{_chain_list(where).capitalize()} stood still in {name}: up to {worst:,} of {n:,} draws are equal."
        findings.append(_Finding(f"standing {where}", int(i), worst, text))
    return findings


def _apart(x: np.ndarray, names: Sequence[str], numbers: dict[str, np.ndarray], varying: np.ndarray) -> list[_Finding]:
    """Chains whose mean, or mean distance from the median, is further from the others' than autocorrelations allow.

    Student's t with the least own effective size, less one, as its degrees of freedom.
    """
    chains, _n, _ = x.shape
    if chains < 2:
        return []
    bound = CHANCE_OF_FALSE_ALARM / (2 * chains * max(len(varying), 1))
    findings = []
    for i in varying[~(numbers["agreement"][varying] < AGREEMENT)]:
        draws = x[:, :, i] / 2 - x[0, 0, i] / 2
        for what, y in (("in the value of", draws), ("in the spread of", ac.fold(draws))):
            t, chance, means = _separation(ac.rank_normalise(y))
            if not chance < bound:
                continue
            groups = _groups(means)
            text = (
                f"{_chain_list(groups[0]).capitalize()} kept apart from {_chain_list(groups[1])} {what} {names[i]}, by "
                f"{t:.0f} times the error that their own draws allow (R-hat {_short(numbers['agreement'][i])})."
            )
            findings.append(_Finding(f"apart {groups[0]}", int(i), float(t), text))
            break
    return findings


def _separation(scores: np.ndarray) -> tuple[float, float, np.ndarray]:
    """The largest t of one chain against the rest, its chance, and the chain means, from scores (chains, n)."""
    chains, n = scores.shape
    means = scores.mean(axis=1)
    own = np.minimum(ac.effective_size(scores[:, None, :]), n)
    moving = np.isfinite(own)
    squared = np.where(moving, scores.var(axis=1, ddof=1) / np.where(moving, own, 1), 0)
    freedom = max(float(np.min(own[moving], initial=n)) - 1, 1.0)
    rest_mean = (means.sum() - means) / (chains - 1)
    rest_squared = (squared.sum() - squared) / (chains - 1) ** 2
    t = np.abs(means - rest_mean) / np.sqrt(squared + rest_squared)
    largest = float(np.nanmax(t)) if np.isfinite(t).any() else 0.0
    return largest, float(2 * special.stdtr(freedom, -largest)), means


def _groups(means: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Chains on the two sides of the widest gap between chain means, the smaller group first."""
    order = np.argsort(means)
    cut = int(np.argmax(np.diff(means[order]))) + 1
    low, high = np.sort(order[:cut]), np.sort(order[cut:])
    return (low, high) if len(low) <= len(high) else (high, low)


def _crawling(names: Sequence[str], numbers: dict[str, np.ndarray], varying: np.ndarray) -> list[_Finding]:
    own = numbers["own_worth"]
    chains = own.shape[1]
    findings: list[_Finding] = []
    if chains < 2:
        return findings
    lacks = ~(numbers["agreement"] < AGREEMENT) | (numbers["worth"] < WORTH_PER_CHAIN * chains)
    for i in varying[lacks[varying]]:
        # A chain that never moves has no worth of its own; it is dealt with as standing still, or compared by R-hat.
        moving = np.where(np.isfinite(own[i]), own[i], 0)
        others = np.array([np.median(np.delete(moving, c)) for c in range(chains)])
        slow = np.flatnonzero(own[i] < CRAWL * others)
        if slow.size:
            worst = slow[np.argmin(own[i, slow])]
            text = (
                f"{_chain_list(slow).capitalize()} moved through {names[i]} far more slowly than the others: "
                f"chain {worst + 1} alone is worth {own[i, worst]:.0f} effective draws, the others about "
                f"{others[worst]:.0f} each. It is stuck, or the others have not met what it met."
            )
            findings.append(_Finding(f"crawling {slow}", int(i), float(others[worst] / own[i, worst]), text))
    return findings


# ---- what more draws would cure -------------------------------------------------------------------------------------


def _lacking(
    x: np.ndarray, names: Sequence[str], numbers: dict[str, np.ndarray], varying: np.ndarray
) -> tuple[list[str], float]:
    """Sentences on what is too little, and by what factor the draws would have to grow: errors fall as one over the
    square root of the worth, the worth grows in proportion to the draws, and R-hat - 1 falls in the same proportion."""
    chains = x.shape[0]
    target = WORTH_PER_CHAIN * chains
    findings, factor = [], 1.0
    for i in varying:
        agreement = numbers["agreement"][i]
        if agreement >= AGREEMENT:
            text = f"The chains agree only to R-hat {_short(agreement)} in {names[i]} (below {AGREEMENT} is asked)"
            text += f"; {_odd_one(x[:, :, i])}."
            findings.append(_Finding("agreement", int(i), float(agreement), text))
            factor = max(factor, float((agreement - 1) / (AGREEMENT - 1)))
        places = (("worth", "in its centre"), ("worth_tails", "in its tails"), ("worth_mean", "for its mean"))
        for key, where in places[:1] if numbers["event"][i] else places:
            worth = numbers[key][i]
            if worth < target:
                text = f"{names[i]} is worth {worth:.0f} effective draws {where} (at least {target} are asked)."
                findings.append(_Finding(key, int(i), float(-worth), text))
                factor = max(factor, target / float(worth))
    return _summaries(findings, len(varying)), factor


def _odd_one(draws: np.ndarray) -> str:
    """Which chain, or which chain's first half, differs most; in value or, if that shows more, in spread."""
    halves = ac.split(draws / 2 - draws[0, 0] / 2)
    best, words = -1.0, ""
    for what, y in (("value", halves), ("spread", ac.fold(halves))):
        means = ac.rank_normalise(y).mean(axis=1).reshape(-1, 2)
        drift = np.abs(means[:, 0] - means[:, 1])
        candidates = [
            (float(drift.max()), f"the two halves of chain {int(np.argmax(drift)) + 1} differ most in {what}")
        ]
        if len(means) > 1:
            chain = means.mean(axis=1)
            away = np.abs(chain - (chain.sum() - chain) / (len(chain) - 1))
            candidates.append((float(away.max()), f"chain {int(np.argmax(away)) + 1} differs most in {what}"))
        same_way = (means[:, 0] < means[:, 1]).all() or (means[:, 0] > means[:, 1]).all()
        if len(means) > 2 and same_way and 2 * drift.min() > drift.max():
            text = f"all chains drift the same way in {what}, so settling may have been too short"
            candidates.append((2 * float(drift.max()), text))
        for size, text in candidates:
            if size > best:
                best, words = size, text
    return words


def _energy(fraction: np.ndarray | None, n: int) -> tuple[list[str], float]:
    if fraction is None or not np.isfinite(fraction).any():
        return [], 1.0
    worst = int(np.nanargmin(fraction))
    worth = n * fraction[worst] / (4 - fraction[worst]) if fraction[worst] < 2 else np.inf
    if worth >= WORTH_PER_CHAIN:
        return [], 1.0
    text = (
        f"The energy of chain {worst + 1} is worth about {worth:.0f} effective draws (energy fraction "
        f"{fraction[worst]:.2g}; {WORTH_PER_CHAIN} are asked): each transition covers little of the energy's "
        "range, so tails may be thin."
    )
    return [text], float(WORTH_PER_CHAIN / worth)


def _unseen_events(names: Sequence[str], numbers: dict[str, np.ndarray], draws: int) -> list[str]:
    sentences = []
    for i in np.flatnonzero(numbers["event"] & numbers["constant"]):
        said = "true" if numbers["estimate"][i] == 1 else "false"
        sentences.append(
            f"{names[int(i)]} was {said} in all {draws:,} draws: its probability is too near the end to be told."
        )
    return sentences


# ---- the rest -------------------------------------------------------------------------------------------------------


def _notes(names: Sequence[str], numbers: dict[str, np.ndarray], fraction: np.ndarray | None, draws: int) -> list[str]:
    notes = []
    constant = np.flatnonzero(numbers["constant"] & ~numbers["event"])
    if constant.size:
        shown = ", ".join(names[i] for i in constant[:5])
        more = f" and {constant.size - 5} more" if constant.size > 5 else ""
        notes.append(f"Constant in all {draws:,} draws: {shown}{more}. If that should vary, these draws are wrong.")
    heavy = np.flatnonzero((numbers["heaviest"] > HEAVIEST) & ~numbers["constant"] & ~numbers["event"])
    if heavy.size:
        worst = heavy[np.argmax(numbers["heaviest"][heavy])]
        more = f" (So it is in {heavy.size - 1} more.)" if heavy.size > 1 else ""
        notes.append(
            f"The spread of {names[worst]} and the error of its estimate hang on one draw, which holds "
            f"{percent(numbers['heaviest'][worst])} of all squared deviations: rather use low, middle and high.{more}"
        )
    if fraction is not None and not np.isfinite(fraction).all():
        unknown = np.flatnonzero(~np.isfinite(fraction))
        notes.append(
            f"The energies of {_chain_list(unknown)} are constant or not finite, so no energy fraction is known."
        )
    return notes


def _praise(names: Sequence[str], numbers: dict[str, np.ndarray], varying: np.ndarray) -> str:
    worth, tails, agreement = (numbers[key][varying] for key in ("worth", "worth_tails", "agreement"))
    at = [names[varying[i]] for i in (np.argmin(worth), np.argmin(tails), np.nanargmax(agreement))]
    return (
        f"The least worth is {worth.min():,.0f} effective draws in the centre ({at[0]}) and {tails.min():,.0f} "
        f"in the tails ({at[1]}); the largest R-hat is {_short(np.nanmax(agreement))} ({at[2]})."
    )


def _short(agreement: float) -> str:
    if not np.isfinite(agreement):
        return "infinite"
    return f"{agreement:.3f}" if agreement < 10 else f"{agreement:.3g}"
