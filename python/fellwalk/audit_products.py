"""The Hessian product against differences of the gradient, and its symmetry."""

from __future__ import annotations

import math
import warnings
from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

from fellwalk.audit_checks import Finding
from fellwalk.audit_differences import Probe, noise_at

__all__ = ["products"]

Array = NDArray[np.float64]

_LEVELS = 6


def products(probe: Probe, y: NDArray[np.float64], reach: NDArray[np.float64],
             rng: np.random.Generator) -> list[Finding]:
    """Findings on hessian_product at y; reach: (dimension,) steps over which the log density changes by about 1."""
    density = probe.density
    sight = probe.at(y)
    if density.hessian_product is None or not sight.finite:
        return []
    scale = np.where(np.isfinite(reach) & (reach > 0), reach, 1.0)
    scale = np.where(scale > 1e8 * np.median(scale), np.median(scale), scale)
    target = density.target()
    directions = [scale * rng.standard_normal(len(y)) / math.sqrt(len(y)) for _ in range(3)]
    found: list[NDArray[np.float64]] = []
    for p in directions:
        out = np.full(len(y), np.nan)
        try:
            with np.errstate(all="ignore"), warnings.catch_warnings():
                warnings.simplefilter("ignore")
                target.evaluate(y.copy(), np.empty(len(y)))
                answer = target.multiply(y, p.copy(), out)
        except Exception as error:
            return [Finding("mistake", "Hessian product", f"The Hessian product raises {type(error).__name__} "
                            f"({error}) at the starting point.")]
        if answer or not np.all(np.isfinite(out)):
            bad = int(np.flatnonzero(~np.isfinite(out))[0]) if not answer else 0
            return [Finding("mistake", "Hessian product", f"The Hessian product is not finite in "
                            f"{density.coordinates[bad]} at the starting point.", density.coordinates[bad])]
        found.append(out)
    return _against_gradient(probe, y, directions, found) + _symmetry(directions, found)


def _symmetry(directions: list[Array], found: list[Array]) -> list[Finding]:
    worst = 0.0
    for a in range(3):
        for b in range(a):
            one, two = float(directions[a] @ found[b]), float(directions[b] @ found[a])
            size = float(np.abs(directions[a] * found[b]).sum() + np.abs(directions[b] * found[a]).sum())
            worst = max(worst, abs(one - two) / size if size > 0 else 0.0)
    if worst <= 1e-6:
        return []
    return [Finding("mistake", "symmetry", f"The Hessian product is not symmetric: u.Hv and v.Hu differ by {worst:.2g} "
                    "of their size. A second derivative stands in one place of a pair only, or the two orders differ.")]


def _against_gradient(probe: Probe, y: Array, directions: list[Array], found: list[Array]) -> list[Finding]:
    def gradient(t: float, p: Array) -> Array:
        at = y + t * p
        slope = np.full(len(y), np.nan)
        with np.errstate(all="ignore"), warnings.catch_warnings():
            warnings.simplefilter("ignore")
            answer, _ = target.evaluate(at, slope)
        return slope if answer == 0 else np.full(len(y), np.nan)

    target = probe.density.target()
    worst, finding = 0.0, []
    for p, given in zip(directions, found, strict=True):
        noise = noise_at(probe, y, probe.at(y), p)[1]
        right, error = _extrapolated(lambda t, p=p: gradient(t, p), noise)
        apart = np.abs(given - right)
        size = np.maximum(np.abs(given), np.abs(right))
        matters = apart * np.abs(p) > 1e-6 * np.abs(size * p).sum() / len(y)
        wrong = (apart > 10.0 * error) & (apart > 1e-4 * size) & matters
        if not wrong.any():
            continue
        weight = np.where(wrong, apart * np.abs(p), 0.0)
        i = int(np.argmax(weight))
        if weight[i] > worst:
            worst = float(weight[i])
            name = probe.density.coordinates[i]
            ratio = given[i] / right[i] if right[i] else math.inf
            hint = {-1: " Its sign is wrong.", 2: " It is twice what it should be.",
                    0.5: " It is half of what it should be."}
            guess = next((text for value, text in hint.items() if abs(ratio / value - 1) < 1e-3), "")
            finding = [Finding("mistake", "Hessian product", f"The Hessian product is wrong in {name}: it gives "
                               f"{given[i]:.9g} where differences of the gradient give {right[i]:.9g}, uncertain by "
                               f"{error[i]:.1g}.{guess} Look at the second derivatives with respect to {name}.", name)]
    return finding


def _extrapolated(f: Callable[[float], Array], noise: Array) -> tuple[Array, Array]:
    """(derivative, error) of a vector function at 0, every entry with its own best level of extrapolation."""
    best, best_error = np.full(len(noise), np.nan), np.full(len(noise), np.inf)
    table: list[Array] = []
    h = 0.5
    for _ in range(_LEVELS + 4):
        row = [(f(h) - f(-h)) / (2.0 * h)]
        if not np.all(np.isfinite(row[0])):
            table, h = [], h / 4.0
            continue
        for k, before in enumerate(table, start=1):
            row.append(row[-1] + (row[-1] - before) / (4.0**k - 1.0))
            error = np.maximum(np.abs(row[-1] - row[-2]), np.abs(row[-1] - before)) + 2.0 * noise / h
            better = error < best_error
            best, best_error = np.where(better, row[-1], best), np.where(better, error, best_error)
        table, h = row, h / 2.0
        if len(table) > _LEVELS:
            break
    return best, best_error
