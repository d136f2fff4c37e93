"""The plain facts of a page: what was spent, by chain and in all, and what is needed to repeat the run."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from fellwalk.errors import FellwalkError
from fellwalk.failing import harmful
from fellwalk.figures import number
from fellwalk.geometry import seconds_in_density
from fellwalk.judgement import Judgement
from fellwalk.settings import Settings

if TYPE_CHECKING:
    from fellwalk.density import Density
    from fellwalk.result import Result

__all__ = ["Share", "chain_rows", "code", "cost_rows", "cost_summary", "settings_rows", "share_of_user", "version_rows"]

CHAIN_HEADINGS = ("chain", "settling transitions", "gradients in settling", "gradients for draws", "Hessian products",
                  "step size", "acceptance", "failed steps that matter")


@dataclass(frozen=True)
class Share:
    """Seconds of a gradient, measured now, and the share of the run's work that they make up; text says it."""

    seconds: float
    share: float
    text: str


def share_of_user(result: Result, density: Density | None, why_not: str) -> Share:
    """An estimate of the share of time in the user's code: what a gradient takes now, times the gradients made."""
    spent = result.spent
    if density is None:
        return Share(np.nan, np.nan, f"Not known: {why_not}")
    try:
        each = seconds_in_density(result, density)
    except Exception as error:  # whatever the user's function raises
        return Share(np.nan, np.nan, f"Not known: the model raised {type(error).__name__}.")
    if not spent["seconds"] > 0:
        return Share(each, np.nan, "Not known: the run's time is not.")
    share = each * spent["gradients"] / spent["seconds"]
    said = f"{100 * share:.0f}%" if share < 0.95 else "all"
    products = " (Hessian products left out)" if spent["products"] else ""
    text = (f"{'Nearly' if said == 'all' else 'About'} {said}{products}: a gradient takes {duration(each)} when timed "
            f"now, times {spent['gradients']:,.0f}. An estimate, as the run itself does not time your code.")
    return Share(each, share, text)


def duration(seconds: float) -> str:
    """A time in words."""
    if seconds >= 7200:
        return f"{seconds / 3600:.3g} hours"
    if seconds >= 120:
        return f"{seconds / 60:.3g} minutes"
    for unit, size in (("seconds", 1.0), ("milliseconds", 1e-3), ("microseconds", 1e-6)):
        if seconds >= size:
            return f"{seconds / size:.3g} {unit}"
    return f"{seconds * 1e9:.3g} nanoseconds"


def _settled(result: Result, field: str) -> float:
    return float(sum(facts[field].sum(dtype=np.int64) for facts in result.settling))


def cost_summary(result: Result, judgement: Judgement | None, share: Share) -> str:
    """What it cost, in two sentences."""
    spent = result.spent
    text = f"{spent['gradients']:,.0f} gradients"
    if spent["products"]:
        text += f", {spent['products']:,.0f} Hessian products"
    text += f" and {duration(spent['seconds'])} of work"
    if spent["gradients"]:
        text += f"; {100 * _settled(result, 'gradients') / spent['gradients']:.0f}% of the gradients went into settling"
    text += "."
    if np.isfinite(share.share):
        said = f"About {100 * share.share:.0f}%" if share.share < 0.95 else "Nearly all"
        text += f" {said} of the time was spent in your code."
    return text


def cost_rows(result: Result, judgement: Judgement | None, share: Share) -> list[tuple[str, str]]:
    """The cost of the whole run, as (what, how much)."""
    spent, settled = result.spent, _settled(result, "gradients")
    tried = result.trial["spent"] if result.trial else 0
    kept = spent["gradients"] - settled - tried
    trial = f"{tried:,.0f} in the trial, " if tried else ""
    parts = f"{settled:,.0f} in settling, {trial}{kept:,.0f} for the kept draws"
    rows = [("Gradients", f"{spent['gradients']:,.0f}: {parts}")]
    products = f"{spent['products']:,.0f}" if spent["products"] else "none"
    rows.append(("Hessian products", products))
    rows.append(("Time", f"{duration(spent['seconds'])} of work, all chains added up"))
    rows.append(("Share in your code", share.text))
    least = judgement.least_worth() if judgement else None
    if judgement and least is not None:
        each = [f"{number(judgement.gradients_per_worth)} gradients"]
        if spent["products"]:
            each.append(f"{number(judgement.products_per_worth)} Hessian products")
        each.append(duration(judgement.seconds_per_worth))
        rows.append((f"One effective draw of {judgement.names[least]}, which is worth least", ", ".join(each)))
    return rows


def chain_rows(result: Result) -> list[tuple[str, ...]]:
    """One row a chain under CHAIN_HEADINGS."""
    rows: list[tuple[str, ...]] = []
    for c, (settling, chain) in enumerate(zip(result.settling, result.chains, strict=True)):
        facts = result.facts[c]
        acceptance = f"{facts['acceptance'].mean():.2f}" if len(facts) else "–"
        step = f"{chain['step_size']:.3g}" if chain else "–"
        products = int(facts["products"].sum() + settling["products"].sum())
        rows.append((str(c + 1), f"{len(settling):,}", f"{settling['gradients'].sum():,}",
                     f"{facts['gradients'].sum():,}", f"{products:,}", step, acceptance,
                     f"{np.count_nonzero(harmful(facts['failure'])):,}"))
    return rows


def settings_rows(result: Result) -> list[tuple[str, str]]:
    """All that was asked for, as (what, value)."""
    plan, settings = result.plan, Settings.from_json(result.settings)
    fixed = "found by settling" if settings.step_size is None else f"{settings.step_size:g} to start from"
    rows = [("Model", plan["model"] or "not named: it was given as an object"), ("Seed", str(plan["seed"])),
            ("Chains", str(plan["chains"])), ("Kept draws a chain", f"{plan['keep']:,} asked for"),
            ("Settling", f"{settings.settle} transitions" if settings.settle != "auto" else "auto"),
            ("Motion", repr(settings.motion)), ("Path", repr(settings.path)),
            ("Acceptance aimed at", f"{settings.acceptance:g}"), ("Step size", fixed),
            ("Directions of the base metric", str(settings.rank)),
            ("Gradients at draws", "kept" if plan["gradients"] else "not kept")]
    if plan.get("settled"):
        rows.append(("Settled part taken over", str(plan["settled"])))
    if result.path:
        rows.append(("Record", str(result.path)))
    for key, value in (plan.get("notes") or {}).items():
        rows.append((f"Note: {key}", value if isinstance(value, str) else _short(value)))
    return rows


def _short(value: Any) -> str:
    if isinstance(value, dict):
        return ", ".join(f"{key} = {item!r}" for key, item in value.items())
    return repr(value)


def code(result: Result) -> str:
    """The call that repeats the run."""
    plan, settings = result.plan, Settings.from_json(result.settings)
    given = {"motion": f"fw.{settings.motion!r}", "path": f"fw.{settings.path!r}", "settle": repr(settings.settle),
             "keep": plan["keep"], "chains": plan["chains"], "seed": plan["seed"], "acceptance": settings.acceptance}
    if settings.step_size is not None:
        given["step_size"] = settings.step_size
    if settings.rank != "auto":
        given["rank"] = settings.rank
    if plan["gradients"] != (plan["dimension"] <= 1000):
        given["gradients"] = plan["gradients"]
    if plan.get("settled"):
        given["settled"] = "earlier"
        given.pop("settle")
        given.pop("step_size", None)
    if "terms" in plan:
        given = {"motion": '"auto"', **{key: given[key] for key in ("keep", "chains", "seed", "acceptance")}}
        if plan["terms"]["product_cost"] != 1.0:
            given["product_cost"] = plan["terms"]["product_cost"]
    arguments = "".join(f"    {key}={value},\n" for key, value in given.items())
    return f"import fellwalk as fw\n\nresult = fw.run(\n    density, starts,\n{arguments})"


def version_rows(result: Result) -> list[tuple[str, str]]:
    """Versions that made the draws, as (what, version)."""
    return [(str(key), str(value)) for key, value in result.versions.items()]


def judged(result: Result) -> tuple[Judgement | None, str]:
    """The judgement, or None and a sentence why there is none."""
    try:
        return result.judgement, ""
    except FellwalkError as error:
        text = str(error)
        return None, text[:1].upper() + text[1:]
