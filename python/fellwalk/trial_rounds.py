"""The rounds of a trial: candidates draw under equal budgets, the better half goes on, and what stands against it."""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import asdict, dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from fellwalk import trial_merit
from fellwalk.chain import Block
from fellwalk.density import Density
from fellwalk.fresh import Fresh
from fellwalk.motions import Jittered, Lagrangian, Leapfrog
from fellwalk.settled import SettledChain
from fellwalk.trial_candidates import LEADER, Ask, Candidate, Contender, Work, candidates_for, fresh_chain, with_rank
from fellwalk.trial_result import Entry, Trial
from fellwalk.trial_tuning import Tuner, needed, steepness

__all__ = ["Competition", "Leaders", "TrialTerms"]

_SHARE = 0.12  # of what a run costs without its trial, settling and draws
_CHAINS = 2  # chains of every candidate but the plain ways, which have all: they are to be as sure as can be
_ROUNDS = (0.5, 0.5, 1.0)  # shares of what is left of the budget
_FOR_TUNING = 0.6  # share of its first allowance that a candidate may take to find its step size
_MOST_AT_FIRST = 500  # draws a chain in the first round, however large the budget
_ENOUGH = 1000.0  # effective draws: a standard error of 7%
_MOST_IN_BLOCK, _BLOCK_BYTES = 1000, 32_000_000
_SLOPES = 400  # gradients, of which the median that sets beta is taken
_AT_LEAST = 1.1  # a candidate takes the leader's place only where it is worth so many times as much,
_ERRORS = 1.28  # and by so many standard errors of the logarithm: chance does that once in ten
_SHY = 4.0  # standard errors by which a tail visited too rarely disqualifies: chance does it to one tail in 30,000
_APART = 1.1  # split R-hat of ranks above which chains are not of one mind
_FAILED = 0.01  # share of failed paths beyond the leader's that disqualifies
_FEW = 10.0  # effective draws below which nothing can be told
_ONE_STEP = Candidate("one step", Leapfrog(), Jittered("auto"))
_ROUGH = 1e-3  # energy error of a step a thousandth as long as the settled one: smooth densities have 1e-9
_GAIN, _LEAST, _MOST = 1.5, 0.03, 0.5  # of corrections of the logarithm of a step size
_AIM = 0.9  # where leapfrog accepts more than was asked for others aim at that too, up to this
_LAST_LOOKS, _LAST_BLOCK = 2, 20  # corrections of the winner, each after so many transitions of each chain
_CORRECTED = 1000  # in the seeds of chains whose step size was corrected
_NOISE = (1000, 0)  # the slot of the chain that looks for it
_ALL_UP_TO = 2000  # coordinates that are all judged; of more these are: so many spread evenly,
_EVENLY, _SLOWEST = 1000, 250  # and those in which the leader's first draws moved least


@dataclass(frozen=True)
class TrialTerms:
    """What a trial may cost. draws: those that the run, which makes the trial, is to keep, or 0; budget: in gradients,
    or None: a share of what the run will cost; product_cost: gradients that a Hessian product counts as."""

    seed: int
    acceptance: float = 0.8
    draws: int = 0
    budget: float | None = None
    product_cost: float = 1.0

    def budget_for(self, settling: float, per_draw: float) -> float:
        """The budget where settling took so many gradients and a draw takes so many."""
        return _SHARE * (settling + self.draws * per_draw) if self.budget is None else self.budget


@dataclass(frozen=True)
class Leaders:
    """Settled chains of the leader: their settled parts and positions. gradients: that settling took; per_draw: of a
    transition in the last part of it."""

    parts: list[SettledChain]
    positions: list[NDArray[np.float64]]
    gradients: float
    per_draw: float


class Competition:
    """The rounds of a trial, from settled chains of the leader to those of the winner.

    lost: chains whose settling ended before they had come home; then nothing is tried.
    `go` yields groups of works that may go on side by side, each to its end before the next group begins.
    Where a better candidate takes less for a draw than the leader, a run will be cheaper, and its trial's budget with
    it. After `go`: `winner`, a contender, and `found`, without the chains.
    """

    def __init__(self, density: Density, leaders: Leaders, terms: TrialTerms, lost: int = 0) -> None:
        self.density, self.terms, self.lost = density, terms, lost
        self.settling, self.per_draw = leaders.gradients, leaders.per_draw
        self.budget = terms.budget_for(leaders.gradients, leaders.per_draw)
        self.parts, self.begun = leaders.parts, leaders.positions
        directions = max(len(part.variances) for part in self.parts)
        found = candidates_for(density.dimension, directions)
        self.leader = Contender(LEADER, 0)
        for position in self.begun:
            self.leader.add(None, position)
        self.others = [Contender(c, i) for i, c in enumerate(found[: 1 + self._affordable(len(found) - 1)]) if i > 0]
        self.plain = [c for c in self.others if c.candidate.rank == 0]
        self.winner = self.leader
        self.out: list[tuple[Contender, str]] = []
        self.blocks: list[dict[str, Any]] = []
        self.remarks: list[str] = []
        self.rough = False
        self.worths: dict[str, trial_merit.Worth] = {}
        self.gradients: list[NDArray[np.float64]] = []
        self.tuned: dict[int, Tuner] = {}
        self.spread = np.ones(density.dimension)
        self.picked: NDArray[np.int64] | None = None
        self.found: Trial | None = None

    def _budget_of(self, count: int) -> float:
        """What the first round needs, to tune each of so many and let it draw as often as is the least to say something
        of."""
        tuning = needed(self.per_draw)
        each = max(tuning / _FOR_TUNING, tuning + trial_merit.FEWEST * _CHAINS * self.per_draw)
        return count * each / _ROUNDS[0]

    def _affordable(self, most: int) -> int:
        """How many candidates beside the leader the budget is enough for."""
        return int(np.clip(self.budget / self._budget_of(1) - 1.0, 0, most))

    def go(self) -> Iterator[list[Work[None]]]:
        """All rounds."""
        if self.lost or not self.others:
            self.found = self._no_trial()
            return
        yield [self._look_for_noise()]
        live = [self.leader, *self.others]
        for number, share in enumerate(_ROUNDS):
            left = self.budget - self._spent()
            if left <= 0.0 or len(live) == 1:
                break
            allowance = share * left / len(live)
            if number == 0:
                yield [self._give(self.leader, allowance, number)]
                if self.picked is None:
                    self._know_the_leader()
                yield [self._give(contender, allowance, number) for contender in live[1:]]
            else:
                yield [self._give(contender, allowance, number) for contender in live]
            live = self._weigh([c for c in live if c.chains], number, last=number == len(_ROUNDS) - 1)
            best = live[0]
            self.budget = min(self.budget, self.terms.budget_for(self.settling, best.drawing / best.transitions))
        best = self._chosen(live)
        told = self._believe(best)
        best = best if told else self._plainer(best, live)
        if best is not self.leader:
            yield [self._make_ready(best)]
        self.winner = best
        self.found = self._end(best, live, told=told)

    def _spent(self) -> float:
        return sum(c.spent for c in (self.leader, *self.others))

    # ---- drawing ------------------------------------------------------------------------------------------------

    def _price(self, block: Block) -> float:
        facts = block.facts
        return float(facts["gradients"].sum()) + self.terms.product_cost * float(facts["products"].sum())

    def _give(self, contender: Contender, allowance: float, number: int) -> Work[None]:
        """Let a candidate draw for about `allowance`; in its first round it pays its tuning from that, and is out where
        that was not enough."""
        until = contender.spent + min(allowance, self._wanted(contender))
        if number > 0 and contender is not self.leader:
            self._correct(contender, number)
        if not contender.chains and not (yield from self._enter(contender, allowance)):
            self.out.append((contender, "its share of the budget was not enough to find its step size"))
            return
        contender.rounds = number + 1
        fewest = trial_merit.FEWEST * contender.chains
        first = contender is self.leader and number == 0
        most = _MOST_AT_FIRST * contender.chains if number == 0 else math.inf
        while (contender.spent < until and contender.transitions < most) or contender.transitions < fewest:
            blocks = yield contender.ask(self._block_size(contender, until), gradients=first)
            for c, block in enumerate(blocks):
                contender.take(block, c, self._price(block), self.picked)
                if block.gradients is not None and sum(map(len, self.gradients)) < _SLOPES:
                    self.gradients.append(block.gradients)
            if first and self.picked is None and self.density.dimension > _ALL_UP_TO:
                self._know_the_leader()  # at once, as whole draws take much memory

    def _wanted(self, contender: Contender) -> float:
        """What more draws may cost until they are worth enough to tell, as far as the last round says."""
        if contender.candidate.name not in self.worths:
            return math.inf
        missing = _ENOUGH / self.worths[contender.candidate.name].effective - 1.0
        return max(0.0, missing) * contender.drawing

    def _block_size(self, contender: Contender, until: float) -> int:
        """Transitions of the next block of each chain: the fewest first, then as many as the rest may pay for."""
        if contender.transitions < trial_merit.FEWEST * contender.chains:
            return trial_merit.FEWEST
        each = contender.drawing / contender.transitions
        most = min(_MOST_IN_BLOCK, max(trial_merit.FEWEST, _BLOCK_BYTES // (16 * self.density.dimension)))
        return int(np.clip((until - contender.spent) / (each * contender.chains), 1, most))

    def _know_the_leader(self) -> None:
        """From its first draws: the spread of all coordinates, and which of them are judged where there are many."""
        draws = self.leader.stacked()
        with np.errstate(over="ignore", invalid="ignore"):  # a chain may be far out
            self.spread = np.maximum(draws.var(axis=(0, 1)), 1e-300)
        d = self.density.dimension
        if d > _ALL_UP_TO:
            moved = (np.diff(draws, axis=1) ** 2).mean(axis=(0, 1)) / self.spread
            slow = np.argsort(moved, kind="stable")[:_SLOWEST]
            self.picked = np.union1d(np.linspace(0, d - 1, _EVENLY).round().astype(np.int64), slow)
            self.leader.only(self.picked)

    def _named(self, coordinate: int) -> str:
        return self.density.coordinates[coordinate if self.picked is None else int(self.picked[coordinate])]

    def _enter(self, contender: Contender, allowance: float) -> Work[bool]:
        """Tune a candidate on its first chain. Where the surrogate field caps its acceptance the cheapest field that is
        left takes its place."""
        tuner = yield from self._tuned(contender, allowance)
        motion = contender.candidate.motion
        if tuner is not None and tuner.capped and isinstance(motion, Lagrangian):
            curvature = "difference" if self.density.hessian_product is None else "product"
            contender.candidate = replace(contender.candidate, motion=replace(motion, curvature=curvature),
                                          name=f"{contender.candidate.name}, {curvature}")
            tuner = yield from self._tuned(contender, allowance)
        if tuner is None:
            return False
        self.tuned[contender.number] = tuner
        self._fill(contender, len(self.parts) if contender in self.plain else min(_CHAINS, len(self.parts)))
        return True

    def _tuned(self, contender: Contender, allowance: float) -> Work[Tuner | None]:
        part, motion = with_rank(self.parts[0], contender.candidate.rank), contender.candidate.motion
        beta = 0.0
        if isinstance(motion, Lagrangian):
            beta = motion.bend / max(steepness(part, np.concatenate(self.gradients)), 0.01 * len(part.scale))
        tuner = Tuner((contender.number, 0), contender.candidate, replace(part, beta=beta, steps=0), self.begun[0],
                      (self.terms.seed, (0, contender.number)), self.terms.acceptance, self.terms.product_cost,
                      _FOR_TUNING * allowance, self.spread)
        fine = yield from tuner.go()
        contender.spent += tuner.spent
        return tuner if fine else None

    def _fill(self, contender: Contender, count: int) -> None:
        """New chains of a tuned candidate, `count` in all."""
        tuner = self.tuned[contender.number]
        for c in range(contender.chains, count):
            start = tuner.position if c == 0 else self.begun[c]
            contender.add(self._fresh(contender, c, start, (c, contender.number)), start)
            contender.spent += 1.0

    def _fresh(self, contender: Contender, c: int, start: NDArray[np.float64], key: tuple[int, ...]) -> Fresh:
        found, own = self.tuned[contender.number].part, with_rank(self.parts[c], contender.candidate.rank)
        part = replace(own, step_size=found.step_size, beta=found.beta, steps=found.steps)
        return fresh_chain(contender.candidate, part, start, (self.terms.seed, key), self.terms.acceptance)

    def _make_ready(self, contender: Contender) -> Work[None]:
        """The winner gets all its chains, and its step size is corrected by what all of them accept: those that did not
        take part may stand where the target is of another scale."""
        self._fill(contender, len(self.parts))
        for number in range(_LAST_LOOKS):
            contender.accepted, contender.moved = 0.0, 0
            blocks = yield contender.ask(_LAST_BLOCK)
            for c, block in enumerate(blocks):
                contender.see(block, c, self._price(block))
            self._correct(contender, len(_ROUNDS) + number)

    def _correct(self, contender: Contender, number: int) -> None:
        """The step size by the acceptance of the last round's draws, which are on whole paths and many more than those
        of tuning. The rejection of a step of order 2 is about proportional to the square of its size, so a tenth more
        acceptance at 0.8 is a quarter less of step; a gain of 1.5 goes more than half of that way."""
        aim = max(self.terms.acceptance, min(self.leader.acceptance, _AIM))
        log_factor = float(np.clip(_GAIN * (contender.acceptance - aim), -_MOST, _MOST))
        if contender.moved == 0 or abs(log_factor) < _LEAST:
            return
        tuner = self.tuned[contender.number]
        tuner.scale_step(math.exp(log_factor))
        contender.begin_again([self._fresh(contender, c, start, (c, contender.number, _CORRECTED + number))
                               for c, start in enumerate(contender.positions)])
        contender.spent += contender.chains

    # ---- deciding -----------------------------------------------------------------------------------------------

    def _score(self, contender: Contender) -> float:
        """Logarithm of effective draws per cost."""
        return math.log(self.worths[contender.candidate.name].effective / contender.drawing)

    def _weigh(self, live: list[Contender], number: int, *, last: bool) -> list[Contender]:
        """Measure all, rule out, and keep the better half; the leader stays."""
        drawn = {c.candidate.name: c.stacked() for c in live}
        pooled, tail = trial_merit.pool(list(drawn.values())), trial_merit.tail_for(list(drawn.values()))
        for name, mine in drawn.items():
            others = [draws for other, draws in drawn.items() if other != name]
            self.worths[name] = trial_merit.measure(mine, pooled, trial_merit.pool(others) if others else pooled, tail)
        fine = []
        for c in live:
            reason = self._ruled_out(c)
            if reason and c is not self.leader:
                self.out.append((c, reason))
            else:
                fine.append(c)
        fine.sort(key=self._score, reverse=True)
        stay = (*self.plain, self.leader)
        kept = fine if last else [c for i, c in enumerate(fine) if i < max(2, len(live) // 2) or c in stay]
        self.out += [(c, f"left after round {number + 1}") for c in fine if c not in kept]
        self.blocks.append({"round": number + 1, "kept": [c.candidate.name for c in kept], "candidates": [
            {"name": c.candidate.name, "spent": c.spent, "drawing": c.drawing, "transitions": c.transitions,
             "failed": c.failed, **asdict(self.worths[c.candidate.name])} for c in live]})
        return kept

    def _ruled_out(self, contender: Contender) -> str:
        worth = self.worths[contender.candidate.name]
        share = contender.failed / contender.transitions
        usual = self.leader.failed / self.leader.transitions
        surely = contender.failed - 2.0 * math.sqrt(contender.failed)  # more than chance would have
        if surely > (usual + _FAILED) * contender.transitions:
            return f"{share:.1%} of its paths ended in a failed step ({usual:.1%} of the leader's)"
        if worth.shy > _SHY:
            return f"it visited a tail of {self._named(worth.shy_in)} too rarely, by {worth.shy:.0f} standard errors"
        return ""

    def _end(self, best: Contender, live: list[Contender], *, told: bool) -> Trial:
        ranked = [best, *(c for c in live if c is not best)]
        entries = [self._entry(c, "") for c in ranked]
        measured = [(c, why) for c, why in self.out if c.candidate.name in self.worths]
        entries += [self._entry(c, why) for c, why in sorted(measured, key=lambda pair: -self._score(pair[0]))]
        entries += [Entry(c.candidate.name, 0.0, 0.0, 0.0, 0.0, "", "", 1.0, 0.0, 0, c.spent, 0, why)
                    for c, why in sorted(self.out, key=lambda pair: pair[0].number)
                    if c.candidate.name not in self.worths]
        return Trial(tuple(entries), tuple(self.remarks), told, best.candidate.motion, best.candidate.path, (),
                     self.budget, self._spent(), self.settling, tuple(self.blocks))

    def _no_trial(self) -> Trial:
        if self.lost:
            said = (f"No trial was made, as settling ended far from home in {self.lost} of {len(self.parts)} chains: "
                    f"{LEADER.name} stays.")
            return self._untried(said)
        needs = math.ceil(self._budget_of(2))
        said = (f"No trial was made: its budget of {self.budget:.0f} gradients is too small to tell a second way of "
                f"moving from {LEADER.name}, which stays; to try one takes about {needs}.")
        return self._untried(said)

    def _untried(self, said: str) -> Trial:
        entry = Entry(LEADER.name, 0.0, 0.0, 0.0, 0.0, "", "", 1.0, 0.0, 0, 0.0, 0, "")
        return Trial((entry,), (said,), False, LEADER.motion, LEADER.path, (), self.budget, 0.0, self.settling)

    def _chosen(self, live: list[Contender]) -> Contender:
        """The first, unless a plain way may be as good; fewer directions make cheaper steps, unseen by gradients."""
        best, sure, gain = live[0], 0.0, 0.0
        plain = [c for c in (*self.plain, self.leader) if c in live and not self._ruled_out(c)]
        for c in plain:
            if c is best:
                self.remarks.append(f"Nothing was measured to be worth more than {c.candidate.name}.")
                return c
            gain = self._score(best) - self._score(c)
            sure = math.hypot(self.worths[c.candidate.name].error, self.worths[best.candidate.name].error)
            if gain < max(math.log(_AT_LEAST), _ERRORS * sure):
                self.remarks.append(f"{best.candidate.name} was measured at {math.exp(gain):.2f} times the worth of "
                                    f"{c.candidate.name}, which could be chance (a standard error is a factor "
                                    f"{math.exp(sure):.2f}): the plainer way stays.")
                return c
        if plain:
            self.remarks.append(f"{best.candidate.name} is worth {math.exp(gain):.2f} times {plain[-1].candidate.name} "
                                f"per cost (a standard error is a factor {math.exp(sure):.2f}).")
        else:
            self.remarks.append(f"{best.candidate.name} is the best of those that were not ruled out.")
        return best

    def _plainer(self, best: Contender, live: list[Contender]) -> Contender:
        """What stays where the trial is not to be believed: the better of the plain ways."""
        plain = [c for c in live if c in (*self.plain, self.leader)]
        if best in plain:
            return best
        stays = plain[0] if plain else self.leader
        self.remarks.append(f"As it could not be told, {stays.candidate.name} stays.")
        return stays

    def _entry(self, contender: Contender, why: str) -> Entry:
        worth = self.worths[contender.candidate.name]
        per = 1000.0 * worth.effective / contender.drawing
        reach = math.exp(min(1.96 * worth.error, 700.0))
        return Entry(contender.candidate.name, per, per / reach, per * reach, worth.effective,
                     self._named(worth.worst), worth.what, worth.apart,
                     contender.failed / contender.transitions, contender.transitions, contender.spent, contender.rounds,
                     why)

    # ---- what stands against it ---------------------------------------------------------------------------------

    def _believe(self, best: Contender) -> bool:
        """Was the budget enough, and do chains from different starts agree? Says so where not."""
        worth = self.worths[best.candidate.name]
        led = self.worths[LEADER.name]
        told = not self.rough
        if best is self.leader and self._ruled_out(best):
            self.remarks.append(f"Of leapfrog, {self._ruled_out(best)}; no candidate was better.")
            told = False
        apart, where = (led.apart, led.apart_in) if led.apart > worth.apart else (worth.apart, worth.apart_in)
        if apart > _APART:
            groups, name = self._groups(where), self._named(where)
            if groups:
                self.remarks.append(f"Chains from different starts stay in different parts of the target ({groups} in "
                                    f"{name}, R-hat {apart:.2f}): it has several modes, and no candidate was seen to "
                                    "pass between them. What was measured is how well they move inside one.")
            else:
                self.remarks.append(f"Chains from different starts do not agree yet (R-hat {apart:.2f} in {name}): the "
                                    "budget is too small to tell, or the target has parts that none has found.")
            told = False
        if worth.effective < _FEW:
            name = self._named(worth.worst)
            self.remarks.append(f"The best had {worth.effective:.1f} effective draws in {name}: the budget is too "
                                f"small to tell; ten would take about {self._needed(worth):.0f}.")
            told = False
        return told

    def _needed(self, worth: trial_merit.Worth) -> float:
        return self.budget * _FEW / max(worth.effective, 0.1)

    def _groups(self, coordinate: int) -> str:
        """The numbers of chains on either side of a gap that none of the leader's chains crosses, or nothing."""
        draws = self.leader.stacked()[..., coordinate]
        low, high = draws.min(axis=-1), draws.max(axis=-1)
        order = np.argsort(low)
        for i in range(1, len(order)):
            left, right = order[:i], order[i:]
            gap = low[right].min() - high[left].max()
            if gap > 0.0 and gap > 0.5 * max(np.median(high - low), 1e-300):
                return f"{len(left)} below a gap and {len(right)} above it"
        return ""

    def _look_for_noise(self) -> Work[None]:
        """The same value twice at the same place, and an energy that hardly changes in a very short step?"""
        part, x = self.parts[0], self.begun[0]
        first, second = self.density(x), self.density(x)
        self.rough = True
        if first[0] != second[0] or not np.array_equal(first[1], second[1]):
            self.remarks.append("The density is not smooth: called twice at one point it gave two log densities or "
                                f"gradients ({first[0]!r}, {second[0]!r}). Every motion needs it to depend on the "
                                "position alone; what the trial says is not to be believed.")
            return
        short = replace(part, step_size=1e-3 * part.step_size, steps=1)
        fresh = fresh_chain(_ONE_STEP, short, x, (self.terms.seed, (0, 0)), self.terms.acceptance)
        (block,) = yield [Ask(_NOISE, 5, fresh)]
        errors = block.facts["log_weight_range"]
        size = 1e-11 * (abs(first[0]) + len(x))
        self.rough = float(np.median(errors)) > _ROUGH + size
        if self.rough:
            self.remarks.append("The density is not smooth: over a step a thousandth as long as the settled one the "
                                f"energy changes by {np.median(errors):.2g}, so the log density carries noise, or is "
                                "not what its gradient is the gradient of. What the trial says is not to be believed.")
