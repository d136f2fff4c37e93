"""Named, shaped, bounded parameters: between the free coordinates that chains move in and natural values."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from fellwalk._core import Maps
from fellwalk.errors import ArgumentError, DensityError, ShapeError, StartError
from fellwalk.parameter_kinds import Kind

__all__ = ["ByName", "Parameters"]

_SUM_OFF = 1e-8  # a start whose shares sum to 1 within this is taken as rounded, and divided by its sum
_SYMMETRY_OFF = 1e-8  # the same for the diagonal and symmetry of a correlation matrix


class Parameters:
    """Parameters by name, each a kind: ``Parameters(rate=fw.positive(), share=fw.shares(4))``, or from a mapping.

    names: one a natural value, such as ``rate`` and ``share[2]``. coordinates: one a free coordinate.
    size: natural values, flat, in the order of the parameters, arrays row by row. dimension: free coordinates.
    kinds: dict of the kinds. Arrays of points have any leading shape, values along the last axis.
    """

    def __init__(self, given: Mapping[str, Kind] | None = None, /, **kinds: Kind) -> None:
        self.kinds: dict[str, Kind] = {**(given or {}), **kinds}
        if not self.kinds:
            raise ArgumentError("Parameters needs at least one parameter, such as rate=fellwalk.positive()")
        for name, kind in self.kinds.items():
            if not isinstance(name, str) or not name:
                raise ArgumentError(f"the name of a parameter must be text; it is {name!r:.60}")
            if not isinstance(kind, Kind):
                raise ArgumentError(f"the parameter {name!r} must be made by fellwalk.free, positive, between, shares, "
                                    f"increasing or correlation; it is {kind!r:.60}")
        self.names = [label for name, kind in self.kinds.items() for label in kind.labels(name)]
        self.coordinates = [label for name, kind in self.kinds.items() for label in kind.coordinates(name)]
        self.size = sum(kind.size for kind in self.kinds.values())
        self.dimension = sum(kind.dimension for kind in self.kinds.values())
        if len(set(self.names)) != self.size:
            twice = next(name for name in self.names if self.names.count(name) > 1)
            raise ArgumentError(f"two values would be named {twice!r}; choose names that do not end in an index")
        self._slices = _slices({name: kind.size for name, kind in self.kinds.items()})
        self._free_slices = _slices({name: kind.dimension for name, kind in self.kinds.items()})
        self.maps()  # a kind that cannot be mapped is said here

    def maps(self) -> Maps:
        """A fresh set of compiled maps; each belongs to one thread."""
        return Maps([item for kind in self.kinds.values() for item in kind.maps()])

    def slices(self, free: bool = False) -> dict[str, slice]:
        """Where each parameter stands among the natural values, or among the free coordinates."""
        return self._free_slices if free else self._slices

    # ---- points ---------------------------------------------------------------------------------------------------

    def natural(self, free: ArrayLike) -> NDArray[np.float64]:
        """Natural values (..., size) of free coordinates (..., dimension)."""
        rows, lead = _rows(free, self.dimension, "free coordinates")
        return self.maps().apply(rows)[0].reshape(*lead, self.size)

    def log_jacobian(self, free: ArrayLike) -> NDArray[np.float64]:
        """log |d natural / d free| at free coordinates (..., dimension); shape (...). Shares count without the last."""
        rows, lead = _rows(free, self.dimension, "free coordinates")
        return self.maps().apply(rows)[1].reshape(lead)

    def free(self, natural: ArrayLike | Mapping[str, ArrayLike]) -> NDArray[np.float64]:
        """Free coordinates (..., dimension) of natural values (..., size), or of a dict of shaped values.

        Errors: ShapeError; StartError naming the value that is on or outside a bound.
        """
        flat = self.join(natural) if isinstance(natural, Mapping) else natural
        rows, lead = _rows(flat, self.size, "natural values")
        rows = self._tidy(rows)
        free = self.maps().invert(rows)
        if not np.all(np.isfinite(free)):
            self._refuse(rows[int(np.flatnonzero(~np.isfinite(free).all(axis=1))[0])])
        return free.reshape(*lead, self.dimension)

    def _tidy(self, rows: NDArray[np.float64]) -> NDArray[np.float64]:
        """Shares that were rounded sum to one again."""
        rows = rows.copy()
        for name, where in self.slices().items():
            kind = self.kinds[name]
            if kind.word == "shares":
                sets = rows[:, where].reshape(-1, kind.shape[-1])
                sums = sets.sum(axis=1)
                if np.any(np.abs(sums - 1.0) > _SUM_OFF):
                    worst = sums[np.argmax(np.abs(sums - 1.0))]
                    raise StartError(f"the shares {name!r} must sum to one; they sum to {worst:.9g}")
                exact = np.abs(sums - 1.0) <= 4e-16 * kind.shape[-1]
                sets = np.where(exact[:, None], sets, sets / sums[:, None])
                rows[:, where] = sets.reshape(len(rows), -1)
        return rows

    def _refuse(self, x: NDArray[np.float64]) -> None:
        """Say which value of one point has no free coordinate."""
        for name, where in self.slices().items():
            kind, values = self.kinds[name], x[where]
            low, high = kind.bounds("low"), kind.bounds("high")
            for k, (value, a, b) in enumerate(zip(values, low, high, strict=True)):
                if not a < value < b:
                    side = f"above {a:g}" if not value > a else f"below {b:g}"
                    raise StartError(f"{kind.labels(name)[k]} is {value:.17g}; it must be a finite number {side}, not "
                                     "on the bound: start inside")
            if kind.word == "increasing":
                gaps = np.diff(values.reshape(-1, kind.shape[-1]), axis=1)
                if np.any(~(gaps > 0)):
                    raise StartError(f"the values of {name!r} must increase, each above the one before; they are "
                                     f"{values.tolist()!r:.80}")
            if kind.word == "correlation" and not np.all(np.isfinite(Parameters({name: kind}).maps().invert(
                    np.ascontiguousarray(values[None, :])))):
                raise StartError(f"{name!r} is not a positive definite correlation matrix; start from one that is")
        raise StartError(f"these natural values have no free coordinates: {x.tolist()!r:.80}")

    # ---- by name --------------------------------------------------------------------------------------------------

    def split(self, natural: NDArray[np.float64]) -> dict[str, NDArray[np.float64]]:
        """Natural values (..., size) as arrays by name, of shape (..., *kind.shape)."""
        if len(natural.shape) == 0 or natural.shape[-1] != self.size:
            raise ShapeError(f"natural values must have shape (..., {self.size}); they have shape {natural.shape}")
        return {name: self._shaped(self.kinds[name], natural[..., where]) for name, where in self.slices().items()}

    def pick(self, name: str, natural: NDArray[np.float64]) -> NDArray[np.float64]:
        """One parameter of natural values (..., size). Errors: ArgumentError for an unknown name."""
        if name not in self.kinds:
            raise ArgumentError(f"there is no parameter {name!r}; there are {', '.join(self.kinds)}")
        return self._shaped(self.kinds[name], natural[..., self.slices()[name]])

    @staticmethod
    def _shaped(kind: Kind, values: NDArray[np.float64]) -> NDArray[np.float64]:
        lead = values.shape[:-1]
        if kind.word != "correlation":
            return values.reshape((*lead, *kind.shape))
        n = kind.shape[-1]
        below = np.tril_indices(n, -1)
        full = np.empty((*lead, *kind.shape))
        full[..., np.arange(n), np.arange(n)] = 1.0
        entries = values.reshape((*lead, *kind.repeats, n * (n - 1) // 2))
        full[..., below[0], below[1]] = full[..., below[1], below[0]] = entries
        return full

    def join(self, values: Mapping[str, ArrayLike], *, gradient: bool = False) -> NDArray[np.float64]:
        """The flat array (size,) of a dict of shaped arrays, one a parameter.

        gradient: of correlation matrices, entries (i, j) and (j, i) are added. Errors: ShapeError, StartError.
        """
        if set(values) != set(self.kinds):
            odd = sorted(set(values) ^ set(self.kinds))
            raise ShapeError(f"there must be one entry for each of {', '.join(self.kinds)}; missing or unknown: "
                             f"{', '.join(map(str, odd))}")
        out = np.empty(self.size)
        for name, where in self.slices().items():
            kind = self.kinds[name]
            array = np.asarray(values[name], dtype=np.float64)
            if array.shape != kind.shape:
                raise ShapeError(f"{name!r} must have shape {kind.shape}; it has shape {array.shape}")
            if kind.word == "correlation":
                below = np.tril_indices(kind.shape[-1], -1)
                turned = np.swapaxes(array, -1, -2)
                if not gradient:
                    _check_correlation(name, array)
                array = (array + turned if gradient else array)[..., below[0], below[1]]
            out[where] = array.reshape(-1)
        return out

    # ---- kept ------------------------------------------------------------------------------------------------------

    def to_json(self) -> list[list[Any]]:
        """Names and kinds as plain values; `from_json` makes the parameters again."""
        return [[name, kind.to_json()] for name, kind in self.kinds.items()]

    @classmethod
    def from_json(cls, given: list[list[Any]]) -> Parameters:
        """The parameters that `to_json` was called on."""
        return cls({name: Kind.from_json(kind) for name, kind in given})

    def __eq__(self, other: object) -> bool:
        return isinstance(other, Parameters) and list(self.kinds.items()) == list(other.kinds.items())

    __hash__ = None  # type: ignore[assignment]

    def __repr__(self) -> str:
        return f"<Parameters: {', '.join(f'{name} ({kind})' for name, kind in self.kinds.items())}>"


def _slices(sizes: dict[str, int]) -> dict[str, slice]:
    found, at = {}, 0
    for name, size in sizes.items():
        found[name] = slice(at, at + size)
        at += size
    return found


def _rows(given: ArrayLike, size: int, what: str) -> tuple[NDArray[np.float64], tuple[int, ...]]:
    try:
        array = np.asarray(given, dtype=np.float64)
    except (TypeError, ValueError):
        raise ShapeError(f"{what} must be an array of real numbers; they are {given!r:.60}") from None
    if array.ndim == 0 or array.shape[-1] != size:
        raise ShapeError(f"{what} must have shape (..., {size}); they have shape {array.shape}")
    return np.ascontiguousarray(array.reshape(-1, size)), array.shape[:-1]


def _check_correlation(name: str, array: NDArray[np.float64]) -> None:
    diagonal = np.diagonal(array, axis1=-2, axis2=-1)
    if np.any(np.abs(diagonal - 1.0) > _SYMMETRY_OFF) or np.any(
            np.abs(array - np.swapaxes(array, -1, -2)) > _SYMMETRY_OFF):
        raise StartError(f"{name!r} must be a correlation matrix: symmetric, with ones on its diagonal")


class ByName:
    """A user's function of named, shaped natural values, called as one of flat natural values.

    Pickles when the function does. `call` is for f(values) -> (log density, gradients), `fill` for
    f(values, gradients) -> log density, `multiply` for f(values, directions) -> products.
    """

    def __init__(self, function: Callable[..., object], parameters: Parameters, form: str) -> None:
        self.function, self.parameters, self.form = function, parameters, form

    def __call__(self, x: NDArray[np.float64], second: Any = None) -> object:
        """As the form says: (x) -> (value, gradient), (x, gradient) -> value, (x, p) -> product."""
        values = self.parameters.split(x)
        if self.form == "multiply":
            return self._flat(self.function(values, self._direction(second)), "Hessian product")
        if self.form == "fill":
            slopes = {name: np.full(kind.shape, np.nan) for name, kind in self.parameters.kinds.items()}
            value = self.function(values, slopes)
            if isinstance(value, float | int) and np.isfinite(value):
                second[:] = self._flat(slopes, "gradient")
            return value
        answer = self.function(values)
        if not (isinstance(answer, tuple) and len(answer) == 2):
            raise DensityError("the function must return (log density, dict of gradients by name); it gave "
                               f"{type(answer).__name__} {answer!r:.60}")
        value, gradients = answer
        finite = isinstance(value, int | float | np.number) and np.isfinite(value)
        return value, self._flat(gradients, "gradient") if finite else None

    def _direction(self, p: NDArray[np.float64]) -> dict[str, NDArray[np.float64]]:
        found = self.parameters.split(p)
        for name, kind in self.parameters.kinds.items():
            if kind.word == "correlation":  # the diagonal does not move
                found[name][..., np.arange(kind.shape[-1]), np.arange(kind.shape[-1])] = 0.0
        return found

    def _flat(self, given: object, what: str) -> NDArray[np.float64]:
        if not isinstance(given, Mapping):
            raise DensityError(f"by name, the {what} must be a dict with one array for each parameter; the function "
                               f"gave {type(given).__name__}")
        try:
            return self.parameters.join(given, gradient=True)
        except ShapeError as error:
            raise DensityError(f"in the {what} that the function gave: {error}") from None
