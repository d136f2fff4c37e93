"""Draws as tables of other libraries, where these are installed."""

from __future__ import annotations

import json
from typing import TYPE_CHECKING, Any

import numpy as np

from fellwalk.errors import ArgumentError

if TYPE_CHECKING:
    import pandas
    import pyarrow

    from fellwalk.result import Result

__all__ = ["to_arrow", "to_frame"]


def _columns(result: Result) -> dict[str, np.ndarray]:
    """chain and draw, both from 0, then every parameter; each (chains * draws,)."""
    taken = [name for name in ("chain", "draw") if name in result.names]
    if taken:
        raise ArgumentError(f"a parameter is named {taken[0]!r}, as a column of the table is: rename it")
    chains, n, parameters = result.draws.shape
    flat = result.draws.reshape(-1, parameters)
    columns = {"chain": np.repeat(np.arange(chains), n), "draw": np.tile(np.arange(n), chains)}
    return columns | {name: np.ascontiguousarray(flat[:, i]) for i, name in enumerate(result.names)}


def to_frame(result: Result) -> pandas.DataFrame:
    """See `fellwalk.Result.to_frame`."""
    try:
        import pandas
    except ImportError:
        raise ArgumentError("to_frame needs pandas, which is not installed: pip install pandas") from None
    return pandas.DataFrame(_columns(result), copy=False)


def to_arrow(result: Result) -> pyarrow.Table:
    """See `fellwalk.Result.to_arrow`."""
    try:
        import pyarrow
    except ImportError:
        raise ArgumentError("to_arrow needs pyarrow, which is not installed: pip install pyarrow") from None
    provenance = json.dumps(result.provenance(), default=_plain)
    return pyarrow.table(_columns(result), metadata={"fellwalk": provenance})


def _plain(value: Any) -> Any:
    return value.tolist()
