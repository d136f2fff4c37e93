"""What `judge` is given: checked, with one sentence for whatever is wrong with it, and brought into one form."""

from collections.abc import Callable, Mapping, Sequence
from typing import Any

import numpy as np
from numpy.typing import ArrayLike

from fellwalk.errors import ArgumentError

FEWEST_DRAWS = 4  # two in each half of a chain: below that a half has no variance
SPENT = ("gradients", "products", "seconds")


def values_of(
    draws: ArrayLike, f: Callable[[np.ndarray], Any], names: Sequence[str] | None = None
) -> tuple[np.ndarray, Sequence[str]]:
    """Values (chains, draws, k) of a function of one draw, and names for them; see `judge_function`."""
    if not callable(f):
        raise ArgumentError(f"The function of the draws must be callable, not {type(f).__name__}.")
    _, x = checked_draws(draws)
    chains, n, _ = x.shape
    view = x.view()
    view.flags.writeable = False
    values: Any = None
    is_scalar = False
    for chain in range(chains):
        for draw in range(n):
            value = np.asarray(f(view[chain, draw]))
            where = f"for draw {draw + 1} of chain {chain + 1}"
            if value.ndim > 1 or value.size == 0 or value.dtype.kind not in "biuf":
                raise ArgumentError(
                    "The function must return a real number, a truth value or a vector of them, but "
                    f"{where} it returned {_describe(value)}."
                )
            if values is None:
                is_scalar = value.ndim == 0
                values = np.empty((chains, n, value.size), dtype=value.dtype)
                shape = value.shape
            if value.shape != shape:
                raise ArgumentError(
                    f"The function must return the same shape every time, but {where} it returned shape {value.shape} "
                    f"after {shape}."
                )
            if value.dtype != values.dtype:
                # A function that gives an integer for one draw and a float for another is a function of numbers.
                values = values.astype(np.result_type(values, value))
            values[chain, draw] = value
    if names is None:
        label = getattr(f, "__name__", "value")
        label = label if label.isidentifier() else "value"
        names = [label] if is_scalar else [f"{label}[{i}]" for i in range(values.shape[2])]
    return values, names


def _describe(value: np.ndarray) -> str:
    return f"an array of shape {value.shape} and type {value.dtype}"


# ---- what comes in --------------------------------------------------------------------------------------------------


def checked_draws(draws: ArrayLike) -> tuple[np.ndarray, np.ndarray]:
    if np.ma.isMaskedArray(draws) and np.ma.is_masked(draws):
        raise ArgumentError("The draws are a masked array with masked entries; leave those draws out first.")
    try:
        raw = np.asarray(draws)
    except (ValueError, TypeError):
        raise ArgumentError(
            "The draws must form one array (chains, draws, parameters), but the lists given differ in length."
        ) from None
    if raw.dtype.kind not in "biuf":
        raise ArgumentError(f"The draws must be real numbers, but they have type {raw.dtype}.")
    if raw.ndim != 3:
        hint = "; for a single chain give draws[None]" if raw.ndim == 2 else ""
        raise ArgumentError(
            f"The draws must have shape (chains, draws, parameters), but they have shape {raw.shape}{hint}."
        )
    chains, n, dimension = raw.shape
    if chains == 0 or dimension == 0:
        lacking = "chain" if chains == 0 else "parameter"
        raise ArgumentError(f"There is no {lacking} in draws of shape {raw.shape}; at least one is needed.")
    if n < FEWEST_DRAWS:
        raise ArgumentError(f"There are {n} draws a chain; at least {FEWEST_DRAWS} are needed to judge anything.")
    with np.errstate(over="ignore"):
        x = raw.astype(np.float64, copy=False)
    finite = np.isfinite(x)
    if not finite.all():
        chain, draw, parameter = (int(i) for i in np.argwhere(~finite)[0])
        raise ArgumentError(
            f"Draw {draw + 1} of chain {chain + 1} (counted from 1) is {x[chain, draw, parameter]} in parameter "
            f"x[{parameter}]; {int((~finite).sum())} of {x.size} numbers are not finite, and all must be."
        )
    return raw, x


def checked_names(names: Sequence[str] | None, dimension: int) -> list[str]:
    if names is None:
        return [f"x[{i}]" for i in range(dimension)]
    if isinstance(names, str):
        raise ArgumentError(f"The names must be a list of strings, not the single string {names!r}.")
    try:
        names = list(names)
    except TypeError:
        raise ArgumentError(f"The names must be a list of strings, not {type(names).__name__}.") from None
    if len(names) != dimension:
        raise ArgumentError(f"There are {len(names)} names for {dimension} parameters; one is needed for each.")
    seen: dict[str, int] = {}
    for i, name in enumerate(names):
        if not isinstance(name, str) or not name.strip() or not name.isprintable():
            raise ArgumentError(f"Name {i + 1} is {name!r}; a name must be a printable string that is not blank.")
        if name in seen:
            raise ArgumentError(
                f"The name {name!r} stands for parameters {seen[name] + 1} and {i + 1}; names must differ."
            )
        seen[name] = i
    return [str(name) for name in names]


def checked_facts(facts: np.ndarray | None, chains: int, n: int) -> tuple[np.ndarray | None, np.ndarray | None]:
    if facts is None:
        return None, None
    fields = getattr(getattr(facts, "dtype", None), "names", None)
    if fields is None or not {"energy", "failure"} <= set(fields):
        raise ArgumentError('The facts must be a structured array with the fields "energy" and "failure".')
    if facts.shape != (chains, n):
        raise ArgumentError(
            f"The facts must have shape {(chains, n)} like the draws, but they have shape {facts.shape}."
        )
    return np.asarray(facts["energy"], dtype=np.float64), np.asarray(facts["failure"])


def checked_spent(spent: Mapping[str, float] | None) -> dict[str, float]:
    if spent is None:
        return {}
    if not isinstance(spent, Mapping) or not set(spent) <= set(SPENT):
        raise ArgumentError(f"What was spent must be a dict with any of the keys {', '.join(SPENT)}.")
    for key, value in spent.items():
        if isinstance(value, bool) or not isinstance(value, int | float | np.number) or not 0 <= value < np.inf:
            raise ArgumentError(f"What was spent in {key} must be a finite number, zero or more, not {value!r}.")
    return {key: spent[key] for key in SPENT if key in spent}


def checked_gradients(
    free: ArrayLike, gradients: np.ndarray | None, shape: tuple[int, int]
) -> tuple[np.ndarray, np.ndarray] | None:
    """Draws and gradients in the same coordinates, both finite float64 (chains, n, dimension), or None without them."""
    if gradients is None:
        return None
    x, g = np.asarray(free, dtype=np.float64), np.asarray(gradients, dtype=np.float64)
    if x.shape != g.shape or x.ndim != 3 or x.shape[:2] != shape:
        raise ArgumentError(
            f"The gradients must have one row for each draw, in the same coordinates; draws of shape {x.shape} and "
            f"gradients of shape {g.shape} were given for {shape[0]} chains of {shape[1]} draws."
        )
    finite = np.isfinite(g).all(axis=2) & np.isfinite(x).all(axis=2)
    if not finite.all():
        chain, draw = (int(i) for i in np.argwhere(~finite)[0])
        raise ArgumentError(
            f"The gradient or the free coordinates at draw {draw + 1} of chain {chain + 1} (counted from 1) are not "
            "finite."
        )
    return x, g
