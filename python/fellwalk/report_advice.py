"""What a reader can do about a verdict, and what that would cost."""

from __future__ import annotations

import shlex
from typing import TYPE_CHECKING

from fellwalk.failing import further
from fellwalk.figures import number
from fellwalk.verdict import FIT, NOT_TRUSTED

if TYPE_CHECKING:
    from fellwalk.judgement import Judgement
    from fellwalk.result import Result

__all__ = ["REMEDIES", "remedies"]

# By words of the verdict's own sentences: what each calls for. A test holds the two together. Fields: see `_further`.
REMEDIES = {
    "kept apart from": (
        "The chains found different places, which more draws of the same kind do not cure. Run again from more "
        "and other starting points, and let settling take longer. If they stay apart, the density has separate "
        "regions that these paths do not cross: write the model in other parameters, or treat the regions one by "
        "one."
    ),
    "stood still": (
        "A chain that stands still refuses every move. Aim at a higher acceptance rate ({rate}), allow {halved}, "
        "start nearer to the bulk, and look at the density where it stands with `fellwalk audit`."
    ),
    "far more slowly than the others": (
        "A crawling chain is stuck, or is alone in a place that the others have not met. Run again with longer "
        "settling and more chains; if chains crawl again, aim at a higher acceptance rate ({rate}) or allow "
        "{halved}."
    ),
    "Steps failed in": (
        "Too many steps failed. Shorter steps follow the density better: aim at a higher acceptance rate "
        "({rate}), or allow {halved}. If they fail in one place, as shown below, a change of parameters there is "
        "the lasting cure."
    ),
    "failed steps start where": (
        "The chains do not get on beyond one end of a parameter. Run again and allow {halved}, or aim at a higher "
        "acceptance rate ({rate}), so that they go further; where steps failed is shown below."
    ),
    "Draws and gradients contradict each other": (
        "What draws and gradients say does not fit together. Look for a mistake in the gradient with `fellwalk "
        "audit`; if there is none, the draws miss a part of the distribution."
    ),
    "nothing moved": (
        "No chain has moved. Let the chains settle, or give a smaller step size, and look at the density with "
        "`fellwalk audit`."
    ),
    "too near the end to be told": (
        "An event that was always true, or never, needs another number to judge: ask for the quantity behind it."
    ),
    "There is only one chain": (
        "Run at least four chains from different starting points: one alone cannot show that it missed something."
    ),
    "settling may have been too short": (
        "All chains still drift: run again with longer settling."
    ),
}


def remedies(result: Result, judgement: Judgement | None) -> list[str]:
    """Sentences on what to do, the first thing first; backquotes hold what is to be typed."""
    steps = []
    if not result.finished:
        on = f"Let it go on: {_resume(result)}." if result.path else "Run it again, with a record to go on from."
        steps.append(f"The run was not finished ({result.ended or 'not all draws asked for are made'}). {on}")
    if judgement is None:
        return steps or ["Keep more draws."]
    verdict = judgement.verdict
    said = " ".join(verdict.reasons)
    steps += [text.format(**_further(result)) for words, text in REMEDIES.items()
              if words in said and verdict.kind != FIT]
    needed = verdict.draws_needed
    if needed and needed > judgement.draws_per_chain:
        have = judgement.draws_per_chain
        kept = {key: float(result.facts[key].sum()) for key in ("gradients", "products")}
        more = needed / have - 1
        cost = [f"about {number(_round(more * kept[key]))} {word}"
                for key, word in (("gradients", "gradients"), ("products", "Hessian products")) if kept[key]]
        steps.append(f"Keep about {needed:,} draws a chain in total, in place of {have:,}: {_resume(result, needed)}. "
                     f"At the cost so far that is {' and '.join(cost)} more.")
    elif verdict.kind == NOT_TRUSTED and not steps:
        steps.append("More of the same draws would not help: cure first what the reasons name, and run again.")
    elif verdict.kind != FIT and not steps:
        steps.append("Run longer: more draws are all that is lacking.")
    return steps or ["Nothing needs to be fixed."]


def _further(result: Result) -> dict[str, str]:
    """Settings one step further than those of the run, as they are to be typed: shorter steps, more halving."""
    rate, halvings = further(result.settings)
    halved = f"halved steps (`{halvings}`)"
    if not halvings:
        halved = "a smaller step size"
    elif result.settings["motion"].get("halvings"):
        halved = f"more halving (`{halvings}`)"
    return {"rate": f"`{rate}`", "halved": halved}


def _resume(result: Result, keep: int | None = None) -> str:
    more = f" --keep {keep}" if keep else ""
    if result.path:
        return f"`fellwalk resume {shlex.quote(result.path)}{more}`"
    return f"`fellwalk.run(..., keep={keep})`"


def _round(value: float) -> float:
    return float(f"{value:.2g}")
