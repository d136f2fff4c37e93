"""Settling and then keeping: what keeping has changed in a chain (settled.c)."""

import ctypes
from typing import NamedTuple

import numpy as np

from . import build
from .combinations import Combination, plan
from .known import known


class Kept(NamedTuple):
    """`status` 0: summary and base metric are as settling left them. Words of the exported state that differ: those of
    the point and of the counters of the summary, and others. Step size and beta are what settling found."""

    status: int
    of_point: int
    others: int
    step_size: float
    beta: float


def settle_and_keep(c: Combination, settle: int, keep: int, mutation: build.Mutation | None = None) -> Kept:
    """One chain, from an exact draw of the combination's target."""
    it = known()[c.target]
    how, kept = plan(c, 1.0, 1.0, it.scale, it.directions, it.lam)
    start = np.ascontiguousarray(it.target.exact_draws(1, np.random.default_rng(3))[0])
    changed, learned = np.zeros(2, dtype=np.int32), np.zeros(2)
    functions = [build.address(it.c_name), build.address(f"{it.c_name}_product"), build.pointer(it.target.context)]
    status = build.harness(mutation).settle_and_keep(
        ctypes.byref(how),
        ctypes.c_size_t(it.target.dimension),
        *map(ctypes.c_void_p, [*functions, start.ctypes.data]),
        ctypes.c_size_t(settle),
        ctypes.c_size_t(keep),
        ctypes.c_uint64(11),
        ctypes.c_void_p(changed.ctypes.data),
        ctypes.c_void_p(learned.ctypes.data),
    )
    del kept
    return Kept(status, *map(int, changed), *map(float, learned))
