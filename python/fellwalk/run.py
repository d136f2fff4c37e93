"""Runs: settle chains, keep draws, go on later."""

from __future__ import annotations

import contextlib
import os
import secrets
from collections.abc import Callable, Mapping, Sequence
from concurrent.futures import Executor
from dataclasses import replace as replace_settings
from typing import Any

import numpy as np
from numpy.typing import ArrayLike

from fellwalk.audit import glance, glance_at_start
from fellwalk.density import Density, brief
from fellwalk.driver import Driver
from fellwalk.errors import ArgumentError, NotWrittenError, OtherModelError, StartError
from fellwalk.lockstep_run import LockstepRun, check_form, check_rows, first_lockstep_states
from fellwalk.model import find_model
from fellwalk.motions import Jittered, Leapfrog, Motion, NoUTurn, Path, real, whole
from fellwalk.parameters import Parameters
from fellwalk.pools import Workers
from fellwalk.progress import choose_progress
from fellwalk.record import Record
from fellwalk.result import Result
from fellwalk.run_record import ChainResult, begin, expected_bytes, plan_of, read_check, read_parts, read_states
from fellwalk.settings import Settings
from fellwalk.settled import Settled
from fellwalk.starts import Starts, first_states, starting_points
from fellwalk.trial_result import Trial
from fellwalk.trial_rounds import TrialTerms
from fellwalk.watch import Watch, watch_again, watch_of
from fellwalk.work import Check

__all__ = ["resume", "run"]

_GRADIENTS_UP_TO = 1000  # dimensions: beyond, kept gradients double a large record, so they are asked for
_TRIAL_UP_TO = 20_000  # dimensions: beyond, the draws of a trial take gigabytes, so it is asked for
_SETTLE = 400  # transitions that settling takes about, for guessing how long a run will be


def run(
    density: Density,
    starts: Starts | None = None,
    *,
    motion: Motion | str | None = None,
    path: Path | None = None,
    settle: int | str = "auto",
    keep: int = 1000,
    chains: int = 4,
    seed: int | None = None,
    acceptance: float = 0.8,
    step_size: float | None = None,
    scale: ArrayLike | None = None,
    rank: int | str = "auto",
    product_cost: float = 1.0,
    settled: Result | Settled | Trial | None = None,
    gradients: bool | None = None,
    watch: str | int | Sequence[str | int] | Callable[[np.ndarray], Any] | None = None,
    executor: Executor | str | None = None,
    record: str | os.PathLike[str] | None = None,
    replace: bool = False,
    progress: object = None,
    seconds: float | None = None,
    audit: bool = True,
    notes: Mapping[str, Any] | None = None,
) -> Result:
    """Settle `chains` chains, keep `keep` draws of each, and judge them.

    starts: one point (dimension,), spread over the chains by the rule of `fellwalk.starts.starting_points`, or one
        point a chain (chains, dimension). Left out: the density's own ``start``. With `fellwalk.Parameters` points are
        natural values, flat or dicts by name; also a function ``starts(rng)`` that draws one; left out, and without a
        ``start`` of the density, they are drawn (`fellwalk.starts.free_starts`).
    settle: settling transitions a chain, or "auto": until the scale has stabilised, between stated bounds.
    motion: what moves a point, by default "auto": what a trial (`fellwalk.trial`) finds best, made when the chains have
        settled, with a budget of 0.12 of what the run would cost. The plan, and so the record and the result, keeps its
        table; what was drawn during the trial is not kept. Where ``path``, ``settle``, ``step_size``, ``scale``,
        ``rank`` or ``settled`` is given, in more than 20,000 dimensions, and with ``batch=True``, the default is
        `fellwalk.Leapfrog()`, without a trial. product_cost: gradients that a Hessian product counts as in the trial.
    acceptance: the rate that settling aims the step size at. step_size, scale: where settling starts from.
    rank: directions of large or small variance that the base metric learns beside its diagonal: a number, or "auto":
        those that stand out, at most 16. settled: another result (or its ``settled``), whose settled parts are used in
        turn in the place of settling; the plan keeps their hash. A `fellwalk.Trial` gives motion, path and starts, too.
    gradients: keep the gradient at every draw (default: up to 1,000 dimensions, and not with ``watch``).
    watch: keep of each draw only these: names of coordinates or parameters, numbers of coordinates, or a function of
        one draw (parameters,), read-only, that gives a number, a truth value or a vector; of all other coordinates
        running means and variances are kept (``result.moments``), and the verdict says what it judged. Default: all up
        to 20,000 coordinates, beyond that 1,000 of them spread evenly; "all" keeps every draw whole in any dimension.
    executor: who makes the blocks: any concurrent.futures.Executor (the density then goes to its workers by pickling,
        or by `Density.factory`), "here", "threads", "processes", or None: threads for compiled densities; for Python
        ones worker processes where they save time, else this process. Draws do not depend on it. An executor that was
        given is never shut down; its worker processes ignore Ctrl-C from then on, as the run answers to it.
    record: file to write every finished block to, so that nothing finished is lost; `replace` overwrites an old one.
    progress: "bars", "lines", "off" or None (bars when a person watches). seconds: stop at a block edge after so long.
    audit: look at the gradient at the last starting point first (ten gradients or so), and refuse one that is wrong.
    notes: what the plan, and so the record, is to keep besides, as plain JSON values by name; reports show them.

    Densities made with ``batch=True`` advance all chains together (`Lockstep`), in this process, on jittered paths;
    draws then depend on the number of chains too.

    The first Ctrl-C ends the run at the next block edge and returns what there is; a second one abandons the
    transitions in hand and raises KeyboardInterrupt. An exception of the density comes out as it was raised, after
    finished blocks are safe; `resume` goes on either way, with the bits of an undisturbed run.
    Errors: ArgumentError, ShapeError, StartError, AuditError, RecordError, WorkerError, and what the density raises.
    """
    if not isinstance(density, Density):
        raise ArgumentError(f"the first argument must be a fellwalk.Density; it is {type(density).__name__}: wrap your "
                            "function as fellwalk.Density(function, dimension)")
    found = {"path": path, "step_size": step_size, "scale": scale, "settled": settled,
             "settle": None if settle == "auto" else settle, "rank": None if rank == "auto" else rank}
    given = [name for name, value in found.items() if value is not None]
    auto = isinstance(motion, str)
    if isinstance(motion, str):
        _only_auto(motion, given)
        motion = None
    elif motion is None and not given and density.batch is None:
        auto = density.dimension <= _TRIAL_UP_TO
    if isinstance(settled, Trial):
        motion, path = motion or settled.motion, path or settled.path
    if density.batch is not None:
        if auto or watch is not None:
            raise ArgumentError(f"a density with batch=True keeps whole draws of leapfrog steps; leave out "
                                f"{'motion=' if auto else 'watch='}, or make the density without batch")
        path = Jittered() if path is None else path
    settings = _settings(motion, path, settle, acceptance, step_size, rank)
    taken = settled.settled if isinstance(settled, Result | Trial) else settled
    if taken is not None:
        if settle not in ("auto", 0):
            raise ArgumentError(f"settled= takes the place of settling; leave settle out (it is {settle!r})")
        settings = replace_settings(settings, settle=0, step_size=taken.chains[0].step_size)
    product_cost = real("product_cost", product_cost, 0.0, 1e6, include=True)
    chains, keep = whole("chains", chains, 1, 2**20), whole("keep", keep, 1, 2**40)
    seconds = None if seconds is None else real("seconds", seconds, 0.0, 1e12)
    seed = secrets.randbits(128) if seed is None else whole("seed", seed, 0, 2**128)
    plan = {
        "settings": settings.to_json(),
        "names": density.names,
        "dimension": density.dimension,
        "chains": chains,
        "keep": keep,
        "seed": seed,
        "gradients": density.dimension <= _GRADIENTS_UP_TO if gradients is None else bool(gradients),
        "watch": None,
        "model": density.model,
        "settled": None if taken is None else taken.hash,
        "parameters": None if density.parameters is None else density.parameters.to_json(),
    }
    if density.batch is not None:
        plan["lockstep"] = True
    if auto:
        plan["terms"] = {"draws": chains * keep, "product_cost": product_cost}
    if notes:
        plan["notes"] = dict(notes)
    again = settled.positions if starts is None and isinstance(settled, Trial) else None
    try:
        if again is not None:
            points = again[np.arange(chains) % len(again)]
        else:
            points = starting_points(density, starts, chains, np.random.default_rng([seed, 1]))
    except (NotWrittenError, StartError):
        if audit:
            glance_at_start(density)
        raise
    watching = None if density.batch is not None else _watch(plan, watch, density, points[0], gradients)
    first = first_states if density.batch is None else first_lockstep_states
    states = first(density, settings, points, seed, scale, taken)
    if audit:
        glance(density, points[-1])
        if density.batch is not None:
            check_rows(density, states)
    parts = [ChainResult() for _ in states]
    check = Check.of(density, points[0])
    if density.batch is not None:
        with contextlib.nullcontext() if record is None else Record.create(
                record, plan, replace=replace, expected=expected_bytes(plan, states)) as file:
            if file is not None:
                begin(file, states, check)
            return _drive_lockstep(plan, density, states, parts, executor, file, progress, seconds)
    transitions = chains * (keep + min(_SETTLE, settings.settle_bounds()[1]))
    with Workers(executor, density, chains, transitions, check) as workers:
        if record is None:
            return _drive(plan, states, parts, workers, None, progress, seconds, watching)
        with Record.create(record, plan, replace=replace, expected=expected_bytes(plan, states)) as file:
            begin(file, states, check)
            return _drive(plan, states, parts, workers, file, progress, seconds, watching)


def _drive_lockstep(plan: dict[str, Any], density: Density, states: list[bytes], parts: list[ChainResult],
                    executor: object, file: Record | None, progress: object, seconds: float | None) -> Result:
    told = choose_progress(progress, plan["keep"], [part.count("keep") for part in parts])
    return LockstepRun(plan, density, states, parts, executor, file, told, seconds).go()


def _drive(plan: dict[str, Any], states: list[bytes], parts: list[ChainResult], workers: Workers, file: Record | None,
           progress: object, seconds: float | None, watch: Watch | None) -> Result:
    told = choose_progress(progress, plan["keep"], [part.count("keep") for part in parts])
    told.say(workers.why)
    terms = None
    if "terms" in plan and not plan.get("trial"):
        terms = TrialTerms(plan["seed"], plan["settings"]["acceptance"], **plan["terms"])
    return Driver(plan, states, parts, workers, file, told, seconds, watch, terms).go()


def _watch(plan: dict[str, Any], watch: object, density: Density, point: np.ndarray, gradients: bool | None
           ) -> Watch | None:
    """What to watch, noted in the plan."""
    natural = _natural(density, point)
    found = watch_of(watch, density, natural)
    if found is not None:
        if gradients:
            raise ArgumentError('gradients are kept at whole draws; leave out gradients=True, or say watch="all"')
        plan["gradients"] = False
        plan["watch"] = found.to_json(natural)
    return found


def _natural(density: Density, point: np.ndarray) -> np.ndarray:
    return point if density.parameters is None else density.parameters.natural(point)


def _only_auto(motion: str, given: Sequence[str]) -> None:
    if motion != "auto":
        raise ArgumentError(f'motion must be a motion, as fellwalk.Leapfrog(), or "auto"; it is {motion!r}')
    if given:
        raise ArgumentError(f'motion="auto" finds what {given[0]}= would fix; leave it out')


def _settings(motion: Motion | None, path: Path | None, settle: int | str, acceptance: float,
              step_size: float | None, rank: int | str) -> Settings:
    settings = Settings(motion=Leapfrog() if motion is None else motion, path=NoUTurn() if path is None else path,
                        settle=settle, acceptance=acceptance, step_size=step_size, rank=rank)
    if settings.settle_bounds()[1] == 0 and step_size is None:
        raise ArgumentError("with settle=0 nothing finds a step size; give step_size=, or let the chains settle")
    if settings.settle_bounds()[1] == 0 and isinstance(settings.path, Jittered) and settings.path.steps == "auto":
        raise ArgumentError('with settle=0 nothing finds the length of paths; give Jittered(steps), or let the chains '
                            'settle')
    return settings


def resume(
    record: str | os.PathLike[str],
    density: Density | None = None,
    *,
    keep: int | None = None,
    watch: Callable[[np.ndarray], Any] | None = None,
    executor: Executor | str | None = None,
    progress: object = None,
    seconds: float | None = None,
) -> Result:
    """Go on with a recorded run: the bits are those of a run never interrupted.

    density: that of the run; may be left out when the record names a model that can be imported. At the first starting
        point of the run it is evaluated again and must agree with the record.
    keep: draws a chain in all, when more are wanted than at first; the bits are those of having asked at first (but for
        a trial, which has had the budget of the run first asked for).
    watch: the function that the run watched, where it was one; it must agree at the first starting point, too.
    executor, progress, seconds: as in `run`; they need not be those of the first time.
    Errors: OtherModelError when the density does not agree; RecordError and its kinds; and as `run`.
    """
    if not isinstance(density, Density | None):
        raise ArgumentError(f"the second argument must be the run's fellwalk.Density; it is {type(density).__name__}")
    seconds = None if seconds is None else real("seconds", seconds, 0.0, 1e12)
    with Record.open(record, write=True) as file:
        plan = plan_of(file)
        density = density or _named(file, plan)
        check_form(density, plan, file.path)
        check = _agreed(file, plan, density)
        if keep is not None:
            keep = whole("keep", keep, 1, 2**40)
            if keep < plan["keep"]:
                raise ArgumentError(f"{file.path}: this run keeps {plan['keep']} draws a chain already; keep= can only "
                                    f"ask for more, not for {keep}")
            plan = {**plan, "keep": keep}
        natural = _natural(density, check.position)
        watching = watch_again(plan.get("watch"), watch, density, natural, file.path)
        parts, states = read_parts(file), read_states(file)
        if density.batch is not None:
            if keep is not None:
                file.set_entry("settings", plan)
            file.append_event("resumed")
            return _drive_lockstep(plan, density, states, parts, executor, file, progress, seconds)
        left = sum(plan["keep"] - part.count("keep") + _SETTLE * (not part.summary.get("settled")) for part in parts)
        with Workers(executor, density, plan["chains"], left, check) as workers:
            if keep is not None:
                file.set_entry("settings", plan)
            file.append_event("resumed")
            return _drive(plan, states, parts, workers, file, progress, seconds, watching)


def _named(file: Record, plan: dict[str, Any]) -> Density:
    if not plan["model"]:
        raise ArgumentError(f"{file.path}: this record does not name its model; give the density too: "
                            "fellwalk.resume(file, density), or --model in the command")
    return find_model(plan["model"])


def _agreed(file: Record, plan: dict[str, Any], density: Density) -> Check:
    """What the density gives at the first starting point, having seen that it agrees with the record."""
    if density.dimension != plan["dimension"]:
        raise OtherModelError(f"{file.path}: the record is of a model with {plan['dimension']} coordinates; this "
                              f"density has {density.dimension}")
    if density.parameters != (Parameters.from_json(plan["parameters"]) if plan.get("parameters") else None):
        raise OtherModelError(f"{file.path}: the parameters of this density differ from those of the record in kind, "
                              "shape or bounds")
    if density.names != plan["names"]:
        ours, theirs = next(pair for pair in zip(density.names, plan["names"], strict=True) if pair[0] != pair[1])
        raise OtherModelError(f"{file.path}: the record is of a model with a coordinate {theirs!r} where this density "
                              f"has {ours!r}")
    then = read_check(file, plan["dimension"])
    now = Check.of(density, then.position)
    if not then.near(now):
        raise OtherModelError(f"{file.path}: at {brief(then.position)} this density has log density "
                              f"{now.log_density!r}, but the record was made with {then.log_density!r} (and its "
                              "gradient): it is another model, or other data. Resume with the density of the run")
    if not then.same(now):
        file.append_event("rounding", {"log_density": now.log_density, "was": then.log_density})
    return now
