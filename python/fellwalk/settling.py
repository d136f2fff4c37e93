"""What is wrong with the end of settling, in sentences that say what was tried."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

__all__ = ["settling_remarks"]

Array = NDArray[np.float64]

_LEAST = 40  # transitions; fewer say nothing of a trend
_NOTHING = 1e-9  # a step size, in units of the learned scale, that takes no path anywhere
_RISE = 10.0  # nats of log density; less is no long way


def _rise(log_density: Array) -> float:
    """How far the last quarter lies above the first, by medians, if all of it does and the way is long; else 0.

    (n,) values. A straight rise leaves a gap of two thirds of that between the quarters; chance seldom leaves any.
    """
    quarter = len(log_density) // 4
    early, late = log_density[:quarter], log_density[-quarter:]
    rise = float(np.median(late) - np.median(early))
    return rise if rise > _RISE and late.min() - early.max() > 0.25 * rise else 0.0


def _tried(facts: NDArray, summary: dict[str, Any]) -> str:
    sizes = facts["step_size"][facts["step_size"] > 0]
    tried = [f"{len(facts)} transitions", f"{int(facts['gradients'].sum()):,} gradients"]
    if summary.get("windows"):
        tried.append(f"{summary['windows']} windows of scales")
    if len(sizes):
        tried.append(f"step sizes from {sizes.min():.2g} to {sizes.max():.2g}")
    return ", ".join(tried)


def settling_remarks(settling: Sequence[NDArray], summaries: Sequence[dict[str, Any]], acceptance: float) -> list[str]:
    """One sentence for each chain whose settling ended before it had come home; none where nothing is to be said.

    settling: facts of each chain's settling. summaries: what each chain found. acceptance: the rate asked for. The
    second half of settling is looked at: does the log density still rise, do steps move anything, are they refused?
    """
    remarks = []
    for number, (facts, summary) in enumerate(zip(settling, summaries, strict=True), 1):
        late = facts[len(facts) // 2 :]
        if len(late) < _LEAST:
            continue
        rise = _rise(late["log_density"])
        accepted = float(late["acceptance"][-len(late) // 2 :].mean())
        if rise > 0.0:
            what = (f"the log density still rose, by {rise:.3g} within its last {len(late)} transitions: "
                    "its start lies far out, or the density has no top. Start nearer to where the draws should be, or "
                    "give a longer settle=")
        elif summary["step_size"] < _NOTHING:
            what = (f"its step size had fallen to {summary['step_size']:.1g}, which moves nothing: a coordinate may be "
                    "known more finely than its numbers are spaced (let the function take the distance from a "
                    "constant instead), or the density jumps everywhere. See fellwalk.audit")
        elif accepted < 0.25 * acceptance:
            what = (f"steps were still refused (acceptance {accepted:.2g}, asked for {acceptance:.2g}): look at the "
                    "density there with fellwalk.audit, or start elsewhere")
        else:
            continue
        remarks.append(f"When settling of chain {number} ended, {what}. Tried: {_tried(facts, summary)}.")
    return remarks
