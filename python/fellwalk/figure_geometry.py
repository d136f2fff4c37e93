"""What makes the density hard: how steep it is along the draws, and what it looks like where mixing is worst."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from matplotlib.axes import Axes
from matplotlib.patches import Ellipse
from numpy.typing import NDArray
from scipy import stats

from fellwalk.errors import FellwalkError
from fellwalk.facts import SENTENCES
from fellwalk.figure_estimates import plain_log
from fellwalk.figures import AREA, INK, LINE, MARK, MUTED, PAPER, RULE, Drawing, draw, finite_range, labels, number
from fellwalk.geometry import Line, Slice, inverse_sizes, plane_metric

if TYPE_CHECKING:
    from fellwalk.result import Result

__all__ = ["Bend", "slice_drawing"]

_DROPS = (-128.0, -64.0, -32.0, -16.0, -8.0, -4.0, -2.0, -0.5)  # of the log density, below its highest point
_ELLIPSES = 7


class Bend:
    """q / d = g' G0^-1 g / d at every kept draw, and the bend L - 1 = beta q of a Lagrangian motion.

    For a normal density with the base metric at its own inverse covariance q has the chi-squared law with d degrees of
    freedom, so that q / d is near 1 everywhere.
    """

    def __init__(self, result: Result) -> None:
        gradients = result.gradients
        if gradients is None:
            raise FellwalkError("The gradients at the draws were not kept, so how steep the density is along them is "
                                "not known. Keep them with gradients=True.")
        parts = result.settled.chains
        self.dimension = gradients.shape[2]
        with np.errstate(all="ignore"):
            self.steepness = np.array([inverse_sizes(part, g) for part, g in zip(parts, gradients, strict=True)])
        self.steepness /= self.dimension
        is_bent = result.settings["motion"]["name"] == "lagrangian"
        self.betas = [part.beta if is_bent else 0.0 for part in parts]
        self.bend = self.steepness * self.dimension * np.array(self.betas)[:, None]

    @property
    def is_bent(self) -> bool:
        """Does the motion bend its metric at all?"""
        return max(self.betas) > 0

    @property
    def tail(self) -> float:
        """The 95% point of the steepness over that of a normal density."""
        return float(np.quantile(self.steepness, 0.95) / (stats.chi2.ppf(0.95, self.dimension) / self.dimension))

    def sentences(self) -> list[str]:
        """What the distribution says."""
        low, middle, high = np.quantile(self.steepness, [0.05, 0.5, 0.95])
        shape = (f"{_shape(self.tail, middle)} Its steepness g'G0⁻¹g / d, with g the gradient, G0 the learned base "
                 f"metric and d the number of coordinates, is {number(middle)} in the middle and between {number(low)} "
                 f"and {number(high)} at nine draws in ten; the steepest twentieth begins at {number(self.tail, 2)} "
                 "times the value of a normal density.")
        lines = [shape]
        if self.is_bent:
            low, middle, high = np.quantile(self.bend, [0.05, 0.5, 0.95])
            lines.append(f"The bend L − 1 is {number(middle)} in the middle, between {number(low)} and {number(high)} "
                         "at nine draws in ten: lengths along the gradient count up to "
                         f"{number(np.sqrt(1 + high))} times.")
        else:
            lines.append("The bend L − 1 is 0 at every draw, as this motion does not bend its metric.")
        return lines

    def drawing(self, key: str) -> Drawing:
        """The distribution of the bend (or of the steepness, without a bend), with that of a normal density."""
        factor = self.dimension * float(np.median(self.betas)) if self.is_bent else 1.0
        values = (self.bend if self.is_bent else self.steepness).ravel()
        values = values[(values > 0) & np.isfinite(values)]
        name = "bend L − 1 at the draws" if self.is_bent else "steepness g'G0⁻¹g / d at the draws"

        def paint(axes: Axes) -> None:
            axes.set_title(name)
            axes.set_yticks([])
            axes.spines["left"].set_visible(False)
            if not values.size:
                axes.text(0.5, 0.5, "zero at every draw", transform=axes.transAxes, ha="center", color=MUTED)
                axes.set_xticks([])
                return
            reference = stats.chi2.ppf([0.001, 0.999], self.dimension) / self.dimension * factor
            ends = np.quantile(values, [0.001, 0.999])
            low = max(min(ends[0], reference[0]), min(ends[0], 1e-4 * ends[1])) * 0.9
            high = max(ends[1], reference[1]) * 1.1
            edges = np.geomspace(low, high, 49)
            counts, _ = np.histogram(values, edges)
            axes.set_xscale("log")
            axes.fill_between(np.repeat(edges, 2)[1:-1], np.repeat(counts, 2), color=LINE, alpha=0.45, lw=0)
            law = np.diff(stats.chi2.cdf(edges / factor * self.dimension, self.dimension)) * len(values)
            axes.plot(np.sqrt(edges[1:] * edges[:-1]), law, color=INK, lw=1.2, ls=(0, (4, 2)))
            axes.set_xlim(low, high)
            axes.set_ylim(0, 1.12 * max(counts.max(), min(law.max(), 2.0 * counts.max())))
            plain_log(axes.xaxis, low, high)
            axes.set_xlabel("dashed: a normal density, perfect base metric")

        return draw(key, name.capitalize(), " ".join(self.sentences()), 230, paint, left=14)


def _shape(tail: float, middle: float) -> str:
    """In words, how far from normal. The bounds are round numbers: a step length that is right at the middle is too
    long by the square root of the tail at the steepest twentieth of the draws, by a fifth at 1.5 and twice at 4."""
    if tail < 0.5 and middle < 0.5:
        what = "is flatter than a normal one: it is wider than was learned."
    elif tail < 1.5:
        what = "is nearly normal: one step length suits all of it."
    elif tail < 4:
        what = "bends: its steepness changes from place to place."
    else:
        what = ("bends strongly: a step that suits most of it is far too long at its steepest places. Halved steps, or "
                "other parameters, help there.")
    return f"Where the chains have been, seen through the base metric, this density {what}"


def slice_drawing(key: str, found: Slice, line: Line | None, names: list[str]) -> Drawing:
    """The slice with contours, ellipses of the metric and the path."""
    first = labels([names[found.pair[0]]], 40)[0]
    if len(found.pair) == 1:
        return _profile(key, found, first)
    a, b = found.pair
    second = labels([names[b]], 44)[0]
    near = plane_metric(line.part, found.pair) if line is not None else None
    words = (f"Log density in the plane of {first} and {second} through the most central draw, which belongs to chain "
             f"{found.chain + 1}, all other coordinates held. {_support(found)}")
    if line is not None:
        words += _path_words(line, names, found)

    def paint(axes: Axes) -> None:
        x, y = found.axes
        finite = np.where(np.isfinite(found.values), found.values, -1e300)
        axes.contourf(x, y, finite, levels=[-2.0, 0.0], colors=[AREA])
        shown = axes.contour(x, y, finite, levels=_DROPS, colors=MUTED, linewidths=0.8, linestyles="solid")
        axes.clabel(shown, fmt=lambda v: f"−{abs(v):g}", fontsize=9, colors=MUTED)
        if line is not None and near is not None:
            _ellipses(axes, line, found, near)
            p = line.positions[:, [a, b]]
            axes.plot(p[:, 0], p[:, 1], color=INK, lw=1.3, marker="o", ms=2.4)
            axes.plot(*p[0], ls="", marker="o", ms=6.5, mfc=PAPER, mec=INK, mew=1.4)
        axes.set_xlim(x[0], x[-1])
        axes.set_ylim(y[0], y[-1])
        axes.set_xlabel(f"{first} →")
        axes.set_title(f"↑ {second}")

    return draw(key, f"Slice of the log density: {first} and {second}", words, 360, paint)


def _ellipses(axes: Axes, line: Line, found: Slice, near: NDArray[np.float64]) -> None:
    """Solid: the base metric's unit length about the start. Thin: one step of unit speed at states of the path."""
    axes.add_patch(_ellipse(line.positions[0][found.pair], near, 1.0, edgecolor=MARK, lw=1.6))
    for n in np.unique(np.linspace(0, len(line.positions) - 1, _ELLIPSES).astype(int)):
        here = plane_metric(line.part, found.pair, line.gradients[n], line.beta)
        axes.add_patch(_ellipse(line.positions[n][found.pair], here, line.step_size, edgecolor=LINE, lw=1.1))


def _ellipse(centre: NDArray[np.float64], metric: NDArray[np.float64], length: float, **look: object) -> Ellipse:
    """All displacements u with u' G u = length^2."""
    sizes, turns = np.linalg.eigh(metric)
    angle = np.degrees(np.arctan2(turns[1, 0], turns[0, 0]))
    return Ellipse(tuple(centre), 2 * length / np.sqrt(sizes[0]), 2 * length / np.sqrt(sizes[1]), angle=angle,
                   facecolor="none", **look)


def _support(found: Slice) -> str:
    share = float(np.mean(~np.isfinite(found.values)))
    return f"{100 * share:.0f}% of the plane shown is outside the support. " if share > 0.005 else ""


def _path_words(line: Line, names: list[str], found: Slice) -> str:
    length = len(line.positions) - 1
    ended = f", where it ended: {SENTENCES.get(line.status, 'a step failed')}" if line.status else ""
    span = np.ptp(line.positions[:, found.pair], axis=0)
    reach = [(axis[-1] - axis[0]) for axis in found.axes]
    return (f"A path of {length} steps from there reaches over {100 * span[0] / reach[0]:.0f}% of the width and "
            f"{100 * span[1] / reach[1]:.0f}% of the height of the slice{ended}.")


def _profile(key: str, found: Slice, name: str) -> Drawing:
    x = found.axes[0]
    finite = np.where(np.isfinite(found.values), found.values, np.nan)
    words = f"Log density along {name}, its highest value taken as 0. {_support(found)}"

    def paint(axes: Axes) -> None:
        axes.plot(x, finite, color=LINE, lw=1.8)
        axes.set_ylim(max(float(np.nanmin(finite)), -40.0), finite_range(finite)[1])
        axes.set_xlabel(name)
        axes.set_title("log density, less its highest value")
        axes.grid(color=RULE, lw=0.5)

    return draw(key, f"Log density along {name}", words, 230, paint)
