"""What failed steps say about draws: how many there were, and where."""

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np

__all__ = ["EDGE_CODES", "FAILED_PLACE", "FAILED_SHARE", "FAILED_THERE", "HARMLESS_CODES", "failing", "further",
           "harmful"]

# Failed steps cut paths short, so what lies behind them may be missed. At 400 effective draws the standard error of a
# probability of 5% is sqrt(0.05 * 0.95 / 400) = 0.011: failures in more than 1% of the transitions could hide as much
# probability as the errors shown allow for.
FAILED_SHARE = 0.01

# Failures that start from the same few draws mark where the chains stop getting on: a neck too narrow for the step. Of
# at least so many failures, half starting in so small a share of the draws at one end of a parameter: by chance that
# happens with probability 2 C(8, 4) 0.02^4 = 2e-5 a parameter. On the demo's funnel, where plain chains missed 2.5% of
# the probability while R-hat was 1.001, half of the failures started in the lowest 0.4% to 1.3% of the draws (6 of 6
# seeds).
FAILED_PLACE, FAILED_THERE = 0.02, 8

# A step across the edge of the support hides nothing: the density there is zero. (Status codes 1 and 2 of the core.)
EDGE_CODES = (1, 2)

# Nor does a path that ends because its far end would have halved the step differently (11): halving asks for it.
HARMLESS_CODES = (*EDGE_CODES, 11)


def percent(share: float) -> str:
    """A share as a percentage with two digits."""
    return f"{100 * share:.2g}%"


def further(settings: Mapping[str, Any] | None) -> tuple[str, str]:
    """Settings a step further than those of a run, as they are typed: a higher acceptance rate, and more halving.

    settings: as `fellwalk.Result` has them; None where the run is not known. The second is empty where no more halving
    can be had.
    """
    settings = settings or {}
    now = float(settings.get("acceptance") or 0)
    halvings = int(settings.get("motion", {}).get("halvings") or 0)
    rate = 0.95 if now < 0.95 else round(1 - (1 - now) / 2, 4)
    more = 5
    if halvings:
        from fellwalk.motions import MAX_HALVINGS  # a run is known, so the core is there

        more = min(halvings + 3, MAX_HALVINGS)
    return f"acceptance={rate:g}", f"halvings={more}" if more > halvings else ""


def harmful(failure: np.ndarray) -> np.ndarray:
    """Which status codes are of failed steps that may hide a part of the distribution."""
    found: np.ndarray = failure != 0
    return found & ~np.isin(failure, HARMLESS_CODES) if found.any() else found


def failing(
    x: np.ndarray, names: Sequence[str], failure: np.ndarray | None, settings: Mapping[str, Any] | None = None
) -> list[str]:
    """Sentences on failed steps: x (chains, draws, dimension), failure (chains, draws) status codes or None; settings:
    of the run, where they are known."""
    if failure is None:
        return []
    failed = harmful(failure)
    share = failed.mean()
    reasons = []
    if share > FAILED_SHARE:
        by_chain = failed.mean(axis=1)
        worst = int(np.argmax(by_chain))
        reasons.append(
            f"Steps failed in {percent(share)} of the transitions ({percent(by_chain[worst])} in chain {worst + 1}); "
            f"above {percent(FAILED_SHARE)} a part of the distribution may be missed."
        )
    return reasons + _failing_at_an_end(x, names, failed, further(settings))


def _failing_at_an_end(
    x: np.ndarray, names: Sequence[str], failed: np.ndarray, shorter: tuple[str, str]
) -> list[str]:
    """Do failures start from the draws at one end of a parameter? Then the chains may not get on beyond it."""
    if failed.sum() < FAILED_THERE:
        return []
    flat, where = x.reshape(-1, x.shape[2]), failed.ravel()
    most, found = FAILED_PLACE, ""
    rate, halved = shorter
    help_ = f"smaller steps ({rate}) or halved ones ({halved})" if halved else f"smaller steps ({rate})"
    for i, name in enumerate(names):
        middle = np.median(flat[where, i])
        for share, end in ((np.mean(flat[:, i] <= middle), "smallest"), (np.mean(flat[:, i] >= middle), "largest")):
            if share < most:
                most = share
                found = (
                    f"Half of the {int(where.sum())} failed steps start where {name} is {end} (in {percent(share)} of "
                    f"the draws), so what lies beyond may be missed; {help_} get further."
                )
    return [found] if found else []
