"""Where in parameter space steps failed or had to be halved."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from matplotlib.axes import Axes
from numpy.typing import NDArray

from fellwalk.failing import EDGE_CODES, HARMLESS_CODES, harmful
from fellwalk.figures import AREA, INK, LINE, MARK, MUTED, WIDTH, Drawing, draw, labels, number, plain, rows_of_labels

if TYPE_CHECKING:
    from fellwalk.result import Result

__all__ = ["Trouble"]

_CLOUD = 1500  # draws shown behind the places of trouble
_SHOWN = 400  # places of trouble shown of each kind
_ROWS = 6
_FEWEST = 8  # places that can tell where they lie; the verdict asks for as many
PATHS, STEPS, EDGES, HALVED = "paths that failed", "failed steps", "steps across the edge", "paths with halved steps"
_LOOKS: dict[str, dict[str, Any]] = {
    PATHS: {"marker": "o", "ms": 6.0, "mew": 1.3, "mec": MARK},
    STEPS: {"marker": "x", "ms": 5.5, "mew": 1.5, "mec": MARK},
    EDGES: {"marker": "x", "ms": 4.5, "mew": 1.0, "mec": LINE},
    HALVED: {"marker": "o", "ms": 3.4, "mew": 0.8, "mec": LINE},
}
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
        if len(self.positions) < _FEWEST:
            return f"The {self.word} are too few to tell where they lie."
        k = int(np.argmax(self.distance))
        below, above = np.cumsum(self.ranks[k]), np.cumsum(self.ranks[k][::-1])
        name = plain(names[k])
        # 1.36 / sqrt(m): the 5% point of the Kolmogorov-Smirnov distance of m independent places.
        if self.distance[k] < 1.36 / np.sqrt(len(self.positions)):
            return f"{self.word.capitalize()} are spread over the draws: no single parameter tells where they lie."
        tenths = np.arange(12) / 10
        low, high = below[:11] - tenths[:11], above[:11] - tenths[:11]
        at, side, share = ((int(np.argmax(low)), "lowest", below) if low.max() >= high.max()
                           else (int(np.argmax(high)), "highest", above))
        if at == 0:
            return f"{100 * share[0]:.0f}% of {self.word} lie beyond the {side} draw of {name}."
        return f"{100 * share[at]:.0f}% of {self.word} lie in the {side} {10 * at}% of {name}, or beyond."


class Trouble:
    """Paths that failed, the places of their failed steps, paths that met the edge of the support, halved steps.

    failed, edges, one_way, halved: how many transitions, of `transitions`; one_way: ended because their far end would
    have halved the step differently, which halving asks for. places: the kinds of which positions are known.
    """

    def __init__(self, result: Result) -> None:
        natural = result.watched or result.parameters is None  # of a run that watches, places are watched values
        self.names = result.names if natural else result.parameters.coordinates
        draws = result.draws if natural else result.free_draws
        self.draws = draws.reshape(-1, len(self.names))
        failure = result.facts["failure"]
        edge, one_way = np.isin(failure, EDGE_CODES), np.isin(failure, HARMLESS_CODES) & ~np.isin(failure, EDGE_CODES)
        failed = (failure != 0) & ~edge & ~one_way
        halved = _halved(result)
        counts = [int(np.count_nonzero(kind)) for kind in (failed, edge, one_way, halved)]
        self.failed, self.edges, self.one_way, self.halved = counts
        self.transitions = failure.size
        _, _, code, position = result.failures
        finite = np.isfinite(position).all(axis=1)
        at_edge = np.isin(code, EDGE_CODES)
        kinds = ((PATHS, draws[failed]), (STEPS, position[finite & ~np.isin(code, HARMLESS_CODES)]),
                 (EDGES, position[finite & at_edge]), (HALVED, draws[halved]))
        self.places = [Places.of(word, rows, self.draws) for word, rows in kinds if len(rows)]

    def sentences(self) -> list[str]:
        """What happened how often, and where."""
        total = f"{self.transitions:,} kept transitions"
        if not (self.failed or self.edges or self.halved or self.one_way):
            return [f"No step failed and none was halved in {total}, so there is no place to show."]
        lines = [f"A failed step cut the path short in {self.failed:,} of {total}." if self.failed
                 else f"No path was cut short by a failed step that matters, in {total}."]
        if self.edges:
            lines.append(f"In {self.edges:,} a step crossed the edge of the support, which hides nothing.")
        if self.halved:
            lines.append(f"Steps were halved in {self.halved:,}, as the settings allow where the energy swings.")
        if self.one_way:
            lines.append(f"In {self.one_way:,} a path ended because its far end would have halved the step "
                         "differently; halving asks for that, and it does no harm.")
        return [" ".join(lines), *(places.sentence(self.names) for places in self.places)]

    def drawings(self, key: str) -> list[Drawing]:
        """A map and, for each kind of trouble, its share in every tenth of the draws."""
        if not self.places:
            return []
        found = [self._tenths(f"{key}-{number}", places) for number, places in enumerate(self.places)
                 if len(places.positions) >= _FEWEST]
        return found if len(self.names) < 2 else [self._map(f"{key}-map"), *found]

    def _map(self, key: str) -> Drawing:
        pair = np.argsort(-self.places[0].distance, kind="stable")[:2]
        thin = max(1, -(-len(self.draws) // _CLOUD))
        first, second = labels([self.names[k] for k in pair], 40)
        # A failed step may have flown to anywhere; the map ends a width of the draws beyond them.
        low, high = self.draws[:, pair].min(axis=0), self.draws[:, pair].max(axis=0)
        width = np.where(high > low, high - low, 1.0)
        low, high = low - width, high + width
        far = sum(int(np.any((p.positions[:, pair] < low) | (p.positions[:, pair] > high), axis=1).sum())
                  for p in self.places)
        words = (f"Draws in the plane of {first} and {second}, with the places of trouble over them. "
                 + " ".join(places.sentence(self.names) for places in self.places)
                 + (f" {far:,} places lie further out than the map and are drawn at its rim." if far else ""))

        def paint(axes: Axes) -> None:
            axes.plot(*self.draws[::thin, pair].T, ls="", marker=",", color=MUTED, alpha=0.9)
            for places in reversed(self.places):
                p = np.clip(places.positions[:: -(-len(places.positions) // _SHOWN)][:, pair], low, high)
                axes.plot(p[:, 0], p[:, 1], ls="", mfc="none", label=places.word, **_LOOKS[places.word])
            axes.margins(0.03)
            axes.set_xlabel(f"{first} →")
            axes.set_title(f"↑ {second}")
            axes.legend(loc="upper center", bbox_to_anchor=(0.5, -0.16), ncols=2, frameon=False, fontsize=10.5,
                        handletextpad=0.2, columnspacing=1.2, borderaxespad=0.1)

        return draw(key, "Map of the draws and the places of trouble", words, 340, paint, bottom=78)

    def _tenths(self, key: str, places: Places) -> Drawing:
        order = np.argsort(-places.distance, kind="stable")[: min(_ROWS, len(self.names))]
        names = labels([self.names[k] for k in order])
        title = f"{len(places.positions):,} {places.word}, by tenths of the draws"
        words = (f"Of {title}: " + "; ".join(
            f"{plain(self.names[k])}: {number(100 * places.ranks[k][:2].sum(), 2)}% lowest or below, "
            f"{number(100 * places.ranks[k][-2:].sum(), 2)}% highest or above" for k in order) + ".")

        def paint(axes: Axes) -> None:
            rows_of_labels(axes, names, [False] * len(names))
            highest = max(float(places.ranks[order].max()), 0.2)
            colour = _LOOKS[places.word]["mec"]
            for r, k in enumerate(order):
                base = r + 0.42
                axes.bar(np.arange(12), -0.8 * places.ranks[k] / highest, bottom=base, width=0.9, color=colour, lw=0)
                axes.plot([0.5, 10.5], [base] * 2, color=INK, lw=0.8)
                axes.plot([0.5, 10.5], [base - 0.08 / highest] * 2, color=MUTED, lw=0.8, ls=(0, (2, 2)))
            axes.axvspan(0.5, 10.5, color=AREA, lw=0, zorder=0)
            axes.set_xlim(-1.1, 12.1)
            axes.set_xticks([-0.2, 5.5, 11.2],
                            labels=["below\nall draws", "lowest to highest tenth", "above\nall draws"])
            axes.spines["bottom"].set_visible(False)
            axes.tick_params(axis="x", length=0)
            axes.set_title(title, x=-130 / (WIDTH - 148), ha="left")

        return draw(key, title.capitalize(), words, 66 + 36 * len(order), paint, left=136, bottom=42)


def _halved(result: Result) -> NDArray[np.bool_]:
    """Transitions (chains, draws) without a harmful failure that took more gradients than their steps do unhalved."""
    facts = result.facts
    motion = result.settings["motion"]
    if not motion.get("halvings"):
        return np.zeros(facts.shape, bool)
    steps = np.maximum(facts["steps"], 1)
    each = 1.0
    if motion.get("curvature") == "difference" and facts.size:
        each = max(1.0, float(np.min(facts["gradients"] / steps)))
    harmless = ~harmful(facts["failure"])
    return np.asarray(harmless & (facts["gradients"] > np.ceil(each * steps)), bool)
