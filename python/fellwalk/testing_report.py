"""How a check says that an identity failed: which one, at which values, by how much against which tolerance."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike

__all__ = ["EPS", "IdentityFailed", "demand", "require", "shown"]

EPS = float(np.finfo(float).eps)


class IdentityFailed(AssertionError):
    """An identity that must hold does not; the message has the values and the tolerance."""


def shown(value: object) -> str:
    """A value in full precision, as it could be typed in again."""
    if isinstance(value, np.ndarray):
        return np.array2string(value, separator=", ", threshold=200, max_line_width=10**6, floatmode="unique")
    return repr(value)


def require(holds: bool, identity: str, what: str, **at: object) -> None:
    """IdentityFailed unless `holds`; `what` says how it was seen, `at` are the values it was seen with."""
    if not holds:
        values = "".join(f"\n  {name} = {shown(value)}" for name, value in at.items())
        raise IdentityFailed(f"{identity} does not hold: {what}{values}")


def demand(identity: str, found: ArrayLike, right: ArrayLike, tolerance: ArrayLike, reason: str, **at: object) -> None:
    """IdentityFailed at the entry where `found` is furthest from `right` in tolerances, if that is beyond one.

    A NaN anywhere is a failure. reason: where the tolerance comes from.
    """
    found, right, allowed = np.broadcast_arrays(*(np.asarray(a, dtype=float) for a in (found, right, tolerance)))
    with np.errstate(all="ignore"):
        off = np.abs(found - right)
        share = np.where(off == 0.0, 0.0, off / allowed)
    share = np.where(np.isnan(share) | np.isnan(off), np.inf, share)
    if not share.size or share.max() <= 1.0:
        return
    worst = np.unravel_index(int(np.argmax(share)), share.shape)
    where = f" in entry {tuple(map(int, worst)) if len(worst) > 1 else int(worst[0])}" if worst else ""
    require(False, identity, f"{float(found[worst])!r}{where}, where {float(right[worst])!r} is right: off by "
            f"{off[worst]:.3g}, tolerance {allowed[worst]:.3g} ({reason})", **at)
