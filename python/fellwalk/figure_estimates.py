"""Have the estimates come to rest? Estimate and error by the number of gradients spent."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from matplotlib.axes import Axes
from matplotlib.axis import Axis
from numpy.typing import NDArray

from fellwalk import autocorrelation as ac
from fellwalk.figures import AREA, INK, LINE, MUTED, PAPER, RULE, Drawing, draw, finite_range, labels, number
from fellwalk.judge import standardise

if TYPE_CHECKING:
    from fellwalk.result import Result

__all__ = ["Progress"]

_STEPS = 16  # points along a line
_FEWEST = 16  # draws a chain before anything is drawn
_MOST_CHAINS = 16  # lines of single chains; more would hide the rest


@dataclass(frozen=True)
class Progress:
    """Estimates from the first draws of every chain, as they grew.

    draws: (steps,) draws a chain; spent: (steps,) gradients of the whole run by then, settling included; settled:
    gradients of settling. estimate, error, spread: (steps, parameters); by_chain: (steps, chains, parameters).
    """

    names: list[str]
    draws: NDArray[np.int64]
    spent: NDArray[np.float64]
    settled: float
    estimate: NDArray[np.float64]
    error: NDArray[np.float64]
    spread: NDArray[np.float64]
    by_chain: NDArray[np.float64]

    @classmethod
    def of(cls, result: Result, indices: NDArray[np.int64]) -> Progress | None:
        """For some parameters; None where there are too few draws to show any growth."""
        n = result.facts.shape[1]
        if n < 2 * _FEWEST:
            return None
        counts = np.unique(np.linspace(max(_FEWEST, n / _STEPS), n, _STEPS).astype(np.int64))
        gradients = np.cumsum(result.facts["gradients"].sum(axis=0, dtype=np.float64))
        settled = float(sum(facts["gradients"].sum(dtype=np.float64) for facts in result.settling))
        x = np.ascontiguousarray(np.moveaxis(result.draws[:, :, indices], 2, 0))
        y, origin, exponent = standardise(x)
        rows = [_at(y[:, :, :k]) for k in counts]
        estimate, error, spread = (np.array([row[i] for row in rows]) for i in range(3))
        by_chain = np.array([y[:, :, :k].mean(axis=2).T for k in counts])
        return cls([result.names[i] for i in indices], counts, settled + gradients[counts - 1], settled,
                   np.ldexp(estimate, exponent) + origin, np.ldexp(error, exponent), np.ldexp(spread, exponent),
                   np.ldexp(by_chain, exponent) + origin)

    def drawing(self, key: str, column: int) -> Drawing:
        """The estimate of one parameter."""
        estimate, error = self.estimate[:, column], self.error[:, column]
        last, first = estimate[-1], len(self.draws) // 4
        two = 2 * error
        name = labels([self.names[column]], 44)[0]
        with np.errstate(all="ignore"):
            outside = np.abs(estimate[first:] - last) > 2 * np.hypot(error[first:], error[-1])
        drift = (self.estimate[-1, column] - self.estimate[len(self.draws) // 2, column])
        words = (f"{_plain_name(self.names[column])}: after {number(self.spent[-1])} gradients the estimate is "
                 f"{number(last, 5)}, with error {number(error[-1], 2)}. Since half of the draws it has moved by "
                 f"{number(drift, 2)}. "
                 + ("At some time after the first quarter it was further from its last value than its errors allow."
                    if outside.any() else "After the first quarter it kept within its errors of its last value."))

        def paint(axes: Axes) -> None:
            axes.axhspan(last - two[-1], last + two[-1], color=AREA, lw=0)
            _settling(axes, self.settled)
            if 1 < self.by_chain.shape[1] <= _MOST_CHAINS:
                axes.plot(self.spent, self.by_chain[:, :, column], color=MUTED, lw=0.7, alpha=0.65)
            axes.fill_between(self.spent, estimate - two, estimate + two, color=LINE, alpha=0.28, lw=0)
            axes.plot(self.spent, estimate, color=LINE, lw=1.8, marker="o", ms=2.6)
            axes.set_xlim(0, self.spent[-1] * 1.02)
            seen = [estimate[first:] - two[first:], estimate[first:] + two[first:]]
            chains: Any = self.by_chain[-1, :, column] if self.by_chain.shape[1] <= _MOST_CHAINS else []
            axes.set_ylim(*finite_range(np.concatenate([*seen, chains])))
            axes.set_title(name)
            _gradient_axis(axes, self.spent[-1])

        return draw(key, f"Estimate of {name} by gradients spent", words, 210, paint)

    def errors_drawing(self, key: str) -> Drawing:
        """Errors of all these parameters, as parts of their spread, against the gradients of the kept draws."""
        kept = self.spent - self.settled
        with np.errstate(all="ignore"):
            share = self.error / self.spread[-1]
        good = np.isfinite(share) & (share > 0)
        worst = int(np.argmax(np.where(good[-1], share[-1], -1)))
        values = share[good]
        ends = finite_range(values) if values.size else (0.01, 1.0)
        bottom, top = (values.min() * 0.8, values.max() * 1.25) if values.size else ends
        words = (f"Monte Carlo errors as parts of the spread, {len(self.names)} parameters. After all draws the "
                 f"largest is {100 * share[-1, worst]:.2g}% of its spread ({self.names[worst]}), the smallest "
                 f"{100 * np.min(share[-1][good[-1]], initial=np.inf):.2g}%."
                 if good[-1].any() else "No errors are known.")

        def paint(axes: Axes) -> None:
            axes.set_xscale("log")
            axes.set_yscale("log")
            guide = np.array([kept[0], kept[-1]])
            for start in share[0][good[0]][:1]:
                high = np.max(share[0][good[0]], initial=start) * 1.1
                axes.plot(guide, high * np.sqrt(guide[0] / guide), color=MUTED, lw=1, ls=(0, (4, 3)))
            axes.plot(kept, np.where(good, share, np.nan), color=LINE, lw=0.8, alpha=0.55)
            if good[-1].any():
                axes.plot(kept, np.where(good, share, np.nan)[:, worst], color=INK, lw=1.8)
            axes.set_xlim(kept[0] * 0.95, kept[-1] * 1.05)
            axes.set_ylim(bottom, top * 1.1)
            plain_log(axes.xaxis, kept[0], kept[-1])
            plain_log(axes.yaxis, bottom, top * 1.1, percent=True)
            axes.set_xlabel("gradients spent on kept draws")
            axes.set_title("error, as a part of the spread")
            axes.grid(color=RULE, lw=0.5)

        return draw(key, "Errors by gradients spent on kept draws", words, 210, paint)


def _plain_name(name: str) -> str:
    """A name for a sentence."""
    return labels([name], 60)[0]


def _at(y: NDArray[np.float64]) -> tuple[NDArray[np.float64], ...]:
    """Mean, its error and the spread from draws (parameters, chains, k)."""
    with np.errstate(all="ignore"):
        flat = y.reshape(len(y), -1)
        spread = flat.std(axis=1, ddof=1)
        worth = ac.effective_size(ac.split(y))
        error = np.where(spread > 0, spread / np.sqrt(np.where(np.isnan(worth), 1.0, worth)), 0.0)
        return flat.mean(axis=1), error, spread


def _settling(axes: Axes, settled: float) -> None:
    if settled > 0:
        axes.axvspan(0, settled, facecolor=PAPER, edgecolor=RULE, hatch="////", lw=0)
        axes.axvline(settled, color=RULE, lw=0.8)
        axes.annotate("settling", (0, 1), xycoords="axes fraction", xytext=(5, -5), textcoords="offset points",
                      va="top", color=MUTED, fontsize=10)


def _gradient_axis(axes: Axes, most: float) -> None:
    axes.set_xlabel("gradients spent, settling included")
    step = 10 ** np.floor(np.log10(most))
    step = step if most / step >= 3 else step / 2 if most / step >= 1.5 else step / 5
    ticks = np.arange(0, most * 1.001, step)
    axes.set_xticks(ticks, labels=[short(t) for t in ticks])


def short(value: float) -> str:
    """A count in few letters, in thousands or millions where these are whole enough."""
    for size, word in ((1e9, " G"), (1e6, " M"), (1e3, " k")):
        if value >= size:
            return f"{value / size:.4g}{word}"
    return f"{value:.4g}"


def plain_log(axis: Axis, low: float, high: float, percent: bool = False) -> None:
    """A few round ticks on a logarithmic axis."""
    decades = np.arange(np.floor(np.log10(low)), np.ceil(np.log10(high)) + 1)
    ticks = [m * 10.0**d for d in decades for m in (1, 2, 5) if low <= m * 10.0**d <= high]
    if len(ticks) > 6:
        ticks = [t for t in ticks if abs(np.log10(t) - round(np.log10(t))) < 1e-9]
    text = [f"{100 * t:.3g}%" if percent else short(t) for t in ticks]
    axis.set_ticks(ticks, labels=text)
    axis.set_ticks([], minor=True)
