"""Where in parameter space steps failed or had to be halved."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from matplotlib.axes import Axes
from numpy.typing import NDArray

from fellwalk.figures import AREA, INK, LINE, MARK, MUTED, RULE, Drawing, draw, labels, number, plain, rows_of_labels

if TYPE_CHECKING:
    from fellwalk.result import Result

__all__ = ["Trouble"]

_CLOUD = 1500  # draws shown behind the places of trouble
_SHOWN = 400  # places of trouble shown of each kind
_ROWS = 6
_TENTHS = np.arange(0.1, 1.0, 0.1)


@dataclass(frozen=True)
class Places:
    """Positions (m, dimension) of one kind of trouble; ranks: (dimension, 12) shares of them below all draws, in each
    tenth of the draws, and above all draws; distance: (dimension,) from what the draws would give (the largest
    difference of the two distribution functions at the tenths)."""

    word: str
    positions: NDArray[np.float64]
    ranks: NDArray[np.float64]
    distance: NDArray[np.float64]

    @classmethod
    def of(cls, word: str, positions: NDArray[np.float64], draws: NDArray[np.float64]) -> Places:
        """positions: (m, dimension); draws: (n, dimension)."""
        dimension = draws.shape[1]
        ranks = np.zeros((dimension, 12))
        for k in range(dimension):
            column = draws[:, k]
            edges = [column.min(), *np.quantile(column, _TENTHS), column.max()]
            bins = np.searchsorted(edges, positions[:, k], side="right")
            bins[positions[:, k] == edges[-1]] = 10
            ranks[k] = np.bincount(bins, minlength=12) / max(len(positions), 1)
        expected = np.concatenate([[0.0], np.full(10, 0.1), [0.0]])
        distance = np.abs(np.cumsum(ranks - expected, axis=1)).max(axis=1)
        return cls(word, positions, ranks, np.where(np.ptp(draws, axis=0) > 0, distance, -1.0))

    def sentence(self, names: list[str]) -> str:
        """Where they lie, in the parameter that tells most."""
        k = int(np.argmax(self.distance))
        below, above = np.cumsum(self.ranks[k]), np.cumsum(self.ranks[k][::-1])
        name = plain(names[k])
        # 1.36 / sqrt(m): the 5% point of the Kolmogorov-Smirnov distance of m independent places.
        if self.distance[k] < 1.36 / np.sqrt(len(self.positions)):
            return f"{self.word.capitalize()} are spread over the draws: no single parameter tells where they lie."
        tenths = np.arange(12) / 10 - 0.0
        low, high = below[:11] - tenths[:11], above[:11] - tenths[:11]
        at, side, share = ((int(np.argmax(low)), "lowest", below) if low.max() >= high.max()
                           else (int(np.argmax(high)), "highest", above))
        if at == 0:
            return f"{100 * share[0]:.0f}% of {self.word} lie beyond the {side} draw of {name}."
        return f"{100 * share[at]:.0f}% of {self.word} lie in the {side} {10 * at}% of {name}, or beyond."


class Trouble:
    """Failed steps whose position was kept, and draws whose transition needed halved steps.

    failed, halved: how many transitions; places: the kinds of which positions are known.
    """

    def __init__(self, result: Result) -> None:
        self.names = result.names if result.parameters is None else result.parameters.coordinates
        self.draws = result.free_draws.reshape(-1, len(self.names))
        self.failed = int(np.count_nonzero(result.facts["failure"]))
        self.transitions = result.facts.size
        halved = _halved(result)
        self.halved = int(halved.sum())
        self.places: list[Places] = []
        positions = result.failures[3]
        positions = positions[np.isfinite(positions).all(axis=1)]
        self.known = len(positions)
        if len(positions) and len(self.draws):
            self.places.append(Places.of("failed steps", positions, self.draws))
        if self.halved and len(self.draws):
            self.places.append(Places.of("transitions with halved steps", result.free_draws[halved], self.draws))

    def sentences(self) -> list[str]:
        """What happened how often, and where."""
        total = f"{self.transitions:,} kept transitions"
        if not self.failed and not self.halved:
            return [f"No step failed and none was halved in {total}, so there is no place to show."]
        lines = [f"A step failed in {self.failed:,} of {total}"
                 + (f"; the places of {self.known:,} are known." if self.known < self.failed else ".")]
        if self.halved:
            lines.append(f"Steps were halved in {self.halved:,} of them, as the settings allow where the energy swings.")
        return lines + [places.sentence(self.names) for places in self.places]

    def drawings(self, key: str) -> list[Drawing]:
        """A map and, for each kind of trouble, its share in every tenth of the draws."""
        if not self.places:
            return []
        found = [self._tenths(f"{key}-{number}", places) for number, places in enumerate(self.places)]
        return found if len(self.names) < 2 else [self._map(f"{key}-map"), *found]

    def _map(self, key: str) -> Drawing:
        main = self.places[0]
        a, b = np.argsort(-main.distance, kind="stable")[:2]
        thin = max(1, len(self.draws) // _CLOUD)
        first, second = labels([self.names[a], self.names[b]], 40)
        words = (f"Draws in the plane of {first} and {second}, with the places of trouble over them. "
                 + " ".join(places.sentence(self.names) for places in self.places))

        def paint(axes: Axes) -> None:
            axes.plot(self.draws[::thin, a], self.draws[::thin, b], ls="", marker="o", ms=1.8, mew=0, color=MUTED,
                      alpha=0.45, rasterized=False)
            for places in self.places:
                failed = places.word == "failed steps"
                p = places.positions[:: max(1, len(places.positions) // _SHOWN)]
                axes.plot(p[:, a], p[:, b], ls="", marker="x" if failed else "o", ms=5.5 if failed else 3.6,
                          mew=1.5 if failed else 0.9, mfc="none", color=MARK if failed else LINE,
                          label=places.word)
            axes.set_xlabel(first)
            axes.set_title(second)
            axes.legend(loc="best", frameon=False, fontsize=10, handletextpad=0.3, borderaxespad=0.1)

        return draw(key, "Map of the draws and the places of trouble", words, 300, paint)

    def _tenths(self, key: str, places: Places) -> Drawing:
        order = np.argsort(-places.distance, kind="stable")[: min(_ROWS, len(self.names))]
        names = labels([self.names[k] for k in order])
        words = (f"Of {len(places.positions):,} {places.word}, by tenths of the draws from lowest to highest: "
                 + "; ".join(f"{plain(self.names[k])}: {number(100 * places.ranks[k][:2].sum())}% lowest or below, "
                             f"{number(100 * places.ranks[k][-2:].sum())}% highest or above" for k in order) + ".")

        def paint(axes: Axes) -> None:
            rows_of_labels(axes, names, [False] * len(names))
            highest = max(float(places.ranks[order].max()), 0.2)
            for r, k in enumerate(order):
                base = r + 0.42
                heights = 0.8 * places.ranks[k] / highest
                axes.bar(np.arange(12), -heights, bottom=base, width=0.9,
                         color=[MARK, *[LINE] * 10, MARK] if places.word == "failed steps" else LINE)
                axes.plot([0.5, 10.5], [base] * 2, color=INK, lw=0.8)
                axes.plot([0.5, 10.5], [base - 0.08 / highest] * 2, color=MUTED, lw=0.8, ls=(0, (2, 2)))
            axes.axvspan(0.5, 10.5, color=AREA, lw=0, zorder=0)
            axes.set_xlim(-0.6, 11.6)
            axes.set_xticks([0, 1, 10, 11], labels=["below", "lowest\ntenth", "highest\ntenth", "above"])
            axes.spines["bottom"].set_color(RULE)
            axes.tick_params(axis="x", length=0)
            axes.set_title(f"{places.word}, by tenths of the draws")

        return draw(key, f"{places.word.capitalize()} by tenths of the draws", words, 70 + 38 * len(order), paint,
                    left=140, bottom=40)


def _halved(result: Result) -> NDArray[np.bool_]:
    """Transitions (chains, draws) without a failed step that took more gradients than their steps do unhalved."""
    facts = result.facts
    motion = result.settings["motion"]
    if not motion.get("halvings"):
        return np.zeros(facts.shape, bool)
    steps = np.maximum(facts["steps"], 1)
    each = 1.0
    if motion.get("curvature") == "difference" and facts.size:
        each = max(1.0, float(np.min(facts["gradients"] / steps)))
    return (facts["failure"] == 0) & (facts["gradients"] > np.ceil(each * steps))
