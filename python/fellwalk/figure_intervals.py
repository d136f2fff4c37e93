"""Do the chains say the same? Each parameter in units of its own interval, one line a chain."""

from __future__ import annotations

import numpy as np
from matplotlib.axes import Axes
from matplotlib.lines import Line2D
from numpy.typing import NDArray
from scipy import special

from fellwalk import autocorrelation as ac
from fellwalk.figures import AREA, INK, LINE, MARK, MUTED, RULE, Drawing, draw, labels, number, rows_of_labels
from fellwalk.judgement import Judgement
from fellwalk.verdict import AGREEMENT

__all__ = ["Intervals"]

# Chance that a page of chains of one law has a line drawn heavily, shared out over all lines (Bonferroni).
_FALSE_MARK = 1e-3
_WIDEST, _LEAST = 0.75, 0.15  # the drawing goes so far beyond the band, in intervals; lines further out end in an arrow
_LINE_HEIGHT, _GAP = 4.0, 11.0


class Intervals:
    """The 5%, 50% and 95% quantiles of every parameter by chain, and which lines lie apart.

    places: (3, chains, parameters) low, middle and high of each chain, in units of the common interval of all chains
    from low (0) to high (1). apart: (chains, parameters), lines further from the others than their draws allow.
    """

    def __init__(self, judgement: Judgement, indices: NDArray[np.int64]) -> None:
        self.judgement, self.indices = judgement, indices
        j = judgement.raw
        draws = j.draws[:, :, indices].astype(np.float64)
        self.low, self.high = j.low[indices], j.high[indices]
        width = self.high - self.low
        self.constant = j.constant[indices]
        spread = np.where(width > 0, width, np.where(j.spread[indices] > 0, 3.29 * j.spread[indices], 1.0))
        self.quantiles = np.quantile(draws, [0.05, 0.5, 0.95], axis=1)
        start = np.where(width > 0, self.low, j.estimate[indices] - spread / 2)
        with np.errstate(all="ignore"):
            self.places = np.nan_to_num((self.quantiles - start) / spread, nan=0.5, posinf=9.0, neginf=-9.0)
            self.middle = (j.middle[indices] - start) / spread
        self.apart = self._apart(draws)
        beyond = max(float(np.max(-self.places[0], initial=0)), float(np.max(self.places[2] - 1, initial=0)))
        margin = min(max(beyond + 0.06, _LEAST), _WIDEST)
        self.ends = -margin, 1 + margin

    def _apart(self, draws: NDArray[np.float64]) -> NDArray[np.bool_]:
        chains = draws.shape[0]
        if chains < 2:
            return np.zeros((chains, len(self.indices)), bool)
        bound = -special.ndtri(_FALSE_MARK / (2 * chains * max(len(self.indices), 1)))
        found = np.zeros((chains, len(self.indices)), bool)
        agreement = self.judgement.raw.agreement[self.indices]
        for column in np.flatnonzero(~self.constant & ~(agreement < AGREEMENT)):
            scores = ac.rank_normalise(draws[:, :, column])
            with np.errstate(all="ignore"):
                own = np.minimum(ac.effective_size(scores[:, None, :]), draws.shape[1])
                squared = np.where(np.isfinite(own), scores.var(axis=1, ddof=1) / own, 0.0)
                means = scores.mean(axis=1)
                rest = (means.sum() - means) / (chains - 1)
                rest_squared = (squared.sum() - squared) / (chains - 1) ** 2
                far = np.abs(means - rest) > bound * np.sqrt(squared + rest_squared)
            if far.any():
                # One chain far from the rest leaves the rest far from it: the smaller side of the widest gap is meant.
                order = np.argsort(means)
                cut = int(np.argmax(np.diff(means[order]))) + 1
                side = order[:cut] if 2 * cut <= chains else order[cut:]
                found[side, column] = far[side]
        return found

    def words(self, columns: NDArray[np.int64]) -> str:
        """What the drawing of these columns shows."""
        chains = self.places.shape[1]
        moving = [c for c in columns if not self.constant[c]]
        names = self.judgement.names
        if not moving:
            return "None of these parameters differs between any two draws."
        off = np.abs(self.places[1][:, moving] - self.middle[moving])
        chain, column = np.unravel_index(int(np.argmax(off)), off.shape)
        name = names[self.indices[moving[column]]]
        text = (f"{len(columns)} {'parameter' if len(columns) == 1 else 'parameters'}, {chains} "
                f"{'chain' if chains == 1 else 'chains'}. ")
        if chains > 1:
            text += (f"The middle that is furthest from the common one is that of chain {chain + 1} in {name}: "
                     f"{number(100 * off[chain, column], 2)}% of the interval from low to high. ")
        marked = [f"chain {c + 1} in {names[self.indices[k]]}"
                  for k in moving for c in np.flatnonzero(self.apart[:, k])]
        if marked:
            more = f" and {len(marked) - 6} more" if len(marked) > 6 else ""
            return text + f"Apart from the others: {', '.join(marked[:6])}{more}."
        return text + ("No line lies apart from the others." if chains > 1 else
                       "One chain alone has nothing to be compared with.")

    def drawing(self, key: str, columns: NDArray[np.int64]) -> Drawing:
        """Rows for these columns of `indices`."""
        chains = self.places.shape[1]
        row = chains * _LINE_HEIGHT + _GAP
        offsets = (np.arange(chains) - (chains - 1) / 2) * _LINE_HEIGHT / row
        names = labels([self.judgement.names[self.indices[k]] for k in columns])
        lagging = [bool(self.apart[:, k].any()) for k in columns]

        def paint(axes: Axes) -> None:
            axes.axvspan(0, 1, color=AREA, lw=0)
            axes.set_xlim(*self.ends)
            rows_of_labels(axes, names, lagging)
            for r in range(len(columns) + 1):
                axes.axhline(r - 0.5, color=RULE, lw=0.5)
            self._lines(axes, columns, offsets)
            axes.set_xticks([0, 1], labels=["low", "high"])
            axes.xaxis.tick_top()
            axes.tick_params(axis="x", length=0)
            axes.spines["bottom"].set_visible(False)

        title = f"Intervals by chain: {names[0]}" + (f" to {names[-1]}" if len(names) > 1 else "")
        return draw(key, title, self.words(columns), 24 + row * len(columns) + 6, paint, left=136, top=24, bottom=6,
                    right=8)

    def _lines(self, axes: Axes, columns: NDArray[np.int64], offsets: NDArray[np.float64]) -> None:
        left, right = self.ends[0] + 0.03, self.ends[1] - 0.03
        thin: list[tuple[list[float], list[float]]] = [([], []), ([], [])]
        dots: list[list[tuple[float, float]]] = [[], []]
        beyond: list[tuple[float, float, str]] = []
        for r, k in enumerate(columns):
            if self.constant[k]:
                axes.text(0.5, r, "constant", ha="center", va="center", color=MUTED)
                continue
            axes.plot([self.middle[k]] * 2, [r - 0.5, r + 0.5], color=MUTED, lw=0.8, ls=(0, (2, 2)))
            for c, offset in enumerate(offsets):
                heavy = int(self.apart[c, k])
                low, middle, high = np.clip(self.places[:, c, k], left, right)
                thin[heavy][0].extend([low, high, np.nan])
                thin[heavy][1].extend([r + offset] * 3)
                dots[heavy].append((middle, r + offset))
                if self.places[0, c, k] < left:
                    beyond.append((left, r + offset, "<"))
                if self.places[2, c, k] > right:
                    beyond.append((right, r + offset, ">"))
        for heavy, colour in ((0, LINE), (1, MARK)):
            axes.add_line(Line2D(*thin[heavy], color=colour, lw=1.2 + 1.2 * heavy, solid_capstyle="butt"))
            if dots[heavy]:
                x, y = zip(*dots[heavy], strict=True)
                axes.plot(x, y, ls="", marker="|", ms=4.5, mew=2.0, color=INK if not heavy else MARK)
        for end, level, sign in beyond:
            axes.plot([end], [level], ls="", marker=sign, ms=4, color=MARK)
