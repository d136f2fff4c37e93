"""What `Result.estimate` does: which values, of which draws, sharpened with what; and gradients computed afterwards."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from fellwalk.errors import ArgumentError, OtherModelError
from fellwalk.estimates import CHOICES, Estimates, estimate_all
from fellwalk.judge import measure, prepare
from fellwalk.judge_input import checked_draws, checked_gradients, checked_names, values_of

if TYPE_CHECKING:
    from fellwalk.density import Density
    from fellwalk.result import Result

# A log density given again at a kept draw may differ by rounding: another order of sums, another machine.
AGREES = 1e-6
NO_GRADIENTS = "the run kept no gradients; compute_gradients(density) makes them"


def estimate(
    result: Result,
    f: Callable[[NDArray[np.float64]], Any] | str | None,
    names: Sequence[str] | None,
    levels: Sequence[float],
    sharpen: str,
    whole: bool,
) -> Estimates:
    """See `fellwalk.Result.estimate`."""
    if sharpen not in CHOICES:
        raise ArgumentError(f"sharpen must be one of {', '.join(map(repr, CHOICES))}; it is {sharpen!r}")
    if sharpen not in ("auto", "none") and result.gradients is None:
        raise ArgumentError(f"sharpen={sharpen!r} needs the gradients at the draws, which this run did not keep; run "
                            "with gradients=True, or call compute_gradients(density) first")
    levels = _checked_levels(levels)
    values, names = _values(result, f, names, whole)
    raw, x = checked_draws(values)
    names = checked_names(names, x.shape[2])
    numbers = measure(x)
    numbers["event"] = np.full(x.shape[2], raw.dtype == np.bool_)
    if sharpen == "none" or result.gradients is None:
        why = "" if sharpen == "none" else f"Not sharpened: {NO_GRADIENTS}."
        return estimate_all(x, names, numbers, levels, None, None, why)
    pair = checked_gradients(result.free_draws, result.gradients, x.shape[:2])
    checked, sharpener, why = prepare(pair, result.facts["failure"], sharpen)
    return estimate_all(x, names, numbers, levels, sharpener, checked, why)


def _checked_levels(levels: Sequence[float]) -> list[float]:
    try:
        found = [float(level) for level in levels]
    except (TypeError, ValueError):
        raise ArgumentError(f"quantiles must be a list of levels between 0 and 1, not {levels!r}") from None
    for level in found:
        if not 0 < level < 1:
            raise ArgumentError(f"the level of a quantile must lie between 0 and 1, ends excluded; {level!r} does not")
    return list(dict.fromkeys(found))


def _values(
    result: Result, f: Callable[[NDArray[np.float64]], Any] | str | None, names: Sequence[str] | None, whole: bool
) -> tuple[NDArray[Any], Sequence[str]]:
    if callable(f):
        return _all_at_once(result, f, names) if whole else values_of(result.draws, f, names)
    if whole or names is not None:
        raise ArgumentError("names= and whole= go with a function of the draws, and none was given")
    if f is None:
        return result.draws, result.names
    if not isinstance(f, str):
        raise ArgumentError("what to estimate must be a function, the name of a parameter, or left out; it is "
                            f"{f!r:.60}")
    if f in result.names:
        return result[f][..., None] if result[f].ndim == 2 else result[f], [f]
    values = result[f]  # a name with several elements, or a sentence
    assert result.parameters is not None  # else it had no such name
    where = result.parameters.slices()[f]
    flat = result.draws[..., where]
    return flat, result.names[where] if values.size else []


def _all_at_once(
    result: Result, f: Callable[[NDArray[np.float64]], Any], names: Sequence[str] | None
) -> tuple[NDArray[Any], Sequence[str]]:
    view = result.draws.view()
    view.flags.writeable = False
    values = np.asarray(f(view))
    lead = view.shape[:2]
    if values.shape[:2] != lead or values.ndim not in (2, 3):
        raise ArgumentError(f"with whole=True the function must give an array of shape {lead} or {(*lead, 'k')} for "
                            f"draws of shape {view.shape}; it gave shape {values.shape}")
    label = getattr(f, "__name__", "value")
    label = label if label.isidentifier() else "value"
    if values.ndim == 2:
        return values[..., None], names or [label]
    return values, names or [f"{label}[{i}]" for i in range(values.shape[2])]


def gradients_again(result: Result, density: Density) -> NDArray[np.float64]:
    """The gradients at the kept draws; see `fellwalk.Result.compute_gradients`."""
    x, told = result.free_draws, result.facts["log_density"]
    if density.dimension != x.shape[2]:
        raise OtherModelError(f"this density has {density.dimension} coordinates, the run's draws have {x.shape[2]}")
    out = np.empty_like(x)
    for chain in range(x.shape[0]):
        for draw in range(x.shape[1]):
            value, out[chain, draw] = density(x[chain, draw])
            if not abs(value - told[chain, draw]) <= AGREES * (1 + abs(told[chain, draw])):
                then = float(told[chain, draw])
                raise OtherModelError(f"at draw {draw + 1} of chain {chain + 1} this density has log density {value!r} "
                                      f"where the run had {then!r}: it is another model, or other data")
    return out
