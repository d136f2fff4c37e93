"""The result of a run: draws, facts, costs, judgement; from memory or from a record."""

from __future__ import annotations

import os
from collections.abc import Callable, Sequence
from dataclasses import replace
from functools import cached_property
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from fellwalk import export, frames
from fellwalk.errors import ArgumentError
from fellwalk.facts import FACTS
from fellwalk.judge import judge, judge_function
from fellwalk.judgement import Judgement
from fellwalk.parameters import Parameters
from fellwalk.record import Record, current_versions
from fellwalk.run_record import ChainResult, plan_of, read_parts, read_states
from fellwalk.settled import Settled
from fellwalk.settling import settling_remarks
from fellwalk.table import wrap
from fellwalk.trial_result import told_in_words
from fellwalk.watch import Moments, judged_only

if TYPE_CHECKING:
    import pandas
    import pyarrow

    from fellwalk.density import Density
    from fellwalk.estimates import Estimates

__all__ = ["Result", "load"]


class Result:
    """Draws with the record of how they were made. Print it for the table and the verdict.

    draws: (chains, draws, parameters) in natural values, as many as the shortest chain has; ``result["name"]`` is one
    parameter in its own shape. free_draws: (chains, draws, dimension), the same in the coordinates that the chains
    moved in (`fellwalk.Parameters`; else the same array). gradients: like free_draws, of the log density there, or None
    when they were not kept. facts: (chains, draws) of dtype ``fellwalk.facts.FACTS``.
    settling: the facts of settling, one array a chain. failures: (chain, draw, code, position) arrays of the failed
    steps whose position was kept, while keeping. names, seed, settings: as the run was given them. chains: what each
    chain found while settling (step size, bend, ...). spent: gradients, products and seconds, settling included.
    Of a run that watches (``watch=`` of `run`), names and draws are those of the watched values only, free_draws cannot
    be had, and positions in failures hold the watched values; moments: means and variances of all coordinates.
    finished: were all draws asked for made; ended: why not. versions: of what made them.
    """

    def __init__(self, plan: dict[str, Any], parts: Sequence[ChainResult], *, states: Sequence[bytes] = (),
                 ended: str = "", path: str = "", versions: dict[str, Any] | None = None) -> None:
        self.plan = plan
        self.versions: dict[str, Any] = current_versions() if versions is None else versions
        self._states = list(states)
        self.watched: dict[str, Any] | None = plan.get("watch")
        self.names: list[str] = self.watched["names"] if self.watched else plan["names"]
        self.parameters = Parameters.from_json(plan["parameters"]) if plan.get("parameters") else None
        self.settings: dict[str, Any] = plan["settings"]
        self.seed: int = plan["seed"]
        self.path = path
        self.ended = ended
        self._parts = list(parts)
        self.chains = [part.summary for part in parts]

    @property
    def _shortest(self) -> int:
        return min(part.count("keep") for part in self._parts)

    def _stack(self, pick: Callable[[ChainResult], list[Any]], shape: tuple[int, ...], dtype: Any) -> NDArray[Any]:
        """(chains, draws, *shape) of what every chain has in pieces; one chain's single piece is not copied."""
        n = self._shortest
        if len(self._parts) == 1 and len(pick(self._parts[0])) == 1:
            return pick(self._parts[0])[0][None, :n]
        out = np.empty((len(self._parts), n, *shape), dtype)
        for row, part in zip(out, self._parts, strict=True):
            done = 0
            for piece in pick(part):
                row[done : done + len(piece)] = piece[: n - done]
                done = min(n, done + len(piece))
        return out

    @cached_property
    def free_draws(self) -> NDArray[np.float64]:
        """(chains, draws, dimension): the draws in the coordinates that the chains moved in.

        Errors: ArgumentError for a run that kept only watched values.
        """
        if self.watched:
            raise ArgumentError(f"this run kept {len(self.names)} watched values of each draw, not the whole draws; "
                                'run it with watch="all" to keep them')
        return self._stack(lambda part: part.draws, (self.plan["dimension"],), np.float64)

    @cached_property
    def draws(self) -> NDArray[np.float64]:
        """(chains, draws, parameters), in natural values; without `fellwalk.Parameters` these are `free_draws`."""
        if self.watched:
            return self._stack(lambda part: part.draws, (len(self.names),), np.float64)
        return self.free_draws if self.parameters is None else self.parameters.natural(self.free_draws)

    def __getitem__(self, name: str) -> NDArray[np.float64]:
        """Natural draws of one parameter, (chains, draws, *its shape). Errors: ArgumentError for an unknown name."""
        if self.parameters is not None and name in self.parameters.kinds and not self.watched:
            return self.parameters.pick(name, self.draws)
        if name in self.names:
            return self.draws[..., self.names.index(name)]
        known = self.names if self.parameters is None or self.watched else self.parameters.kinds
        raise ArgumentError(f"there is no parameter {name!r}; there are {', '.join(list(known)[:20])}")

    @cached_property
    def gradients(self) -> NDArray[np.float64] | None:
        """(chains, draws, dimension), or None when the run did not keep them."""
        if not self.plan["gradients"]:
            return None
        return self._stack(lambda part: part.gradients, (self.plan["dimension"],), np.float64)

    @cached_property
    def facts(self) -> NDArray[np.void]:
        """(chains, draws) of dtype ``fellwalk.facts.FACTS``."""
        return self._stack(lambda part: part.facts["keep"], (), FACTS)

    @cached_property
    def settling(self) -> list[NDArray[np.void]]:
        """Facts of settling, one array a chain."""
        return [np.concatenate(part.facts["settle"] or [np.empty(0, FACTS)]) for part in self._parts]

    @cached_property
    def failures(self) -> tuple[NDArray[np.int64], NDArray[np.int64], NDArray[np.int32], NDArray[np.float64]]:
        """(chain, draw, code, position) of failed steps whose position was kept, while keeping."""
        rows = [(np.full(len(draw), c), draw, code, position)
                for c, part in enumerate(self._parts) for draw, code, position in part.failures]
        if not rows:
            width = len(self.names) if self.watched else self.plan["dimension"]
            rows = [(np.empty(0, int), np.empty(0, int), np.empty(0, int), np.empty((0, width)))]
        chain, draw, code, position = (np.concatenate(column) for column in zip(*rows, strict=True))
        return chain, draw, code, position

    @cached_property
    def settled(self) -> Settled:
        """What settling has found, for the ``settled=`` of another run. Errors: SettleError before settling ends."""
        return Settled.of_states(self._states, self.plan["dimension"])

    @cached_property
    def moments(self) -> list[Moments] | None:
        """Mean, sum of squared deviations and count of every chain, of all natural coordinates (``plan["names"]``),
        watched or not. None before the first draw, and of a salvaged record that lost draws."""
        if not self.watched:
            found = [Moments.of(self.draws.shape[2]) for _ in self._parts]
            for moments, draws in zip(found, self.draws, strict=True):
                if len(draws):
                    moments.add(draws)
            return found if self._shortest else None
        kept = [part.moments for part in self._parts]
        return None if any(moments is None for moments in kept) else kept

    @property
    def finished(self) -> bool:
        """Has every chain made all the draws asked for?"""
        return bool(self._shortest >= self.plan["keep"])

    @cached_property
    def spent(self) -> dict[str, float]:
        """Calls and seconds of work, settling and a trial included (of a trial the calls; products at their price)."""
        total = {"gradients": 0.0, "products": 0.0, "seconds": 0.0}
        for part in self._parts:
            for phase in part.facts.values():
                for facts in phase:
                    total["gradients"] += int(facts["gradients"].sum())
                    total["products"] += int(facts["products"].sum())
            total["seconds"] += part.seconds
        if self.trial is not None:
            total["gradients"] += self.trial["spent"]
        return total

    @property
    def trial(self) -> dict[str, Any] | None:
        """After a trial of motions what it has found, as `fellwalk.Trial.to_json` gives it, else None."""
        return self.plan.get("trial")

    @property
    def judged(self) -> bool:
        """Are there draws enough to judge?"""
        return self._shortest >= 4

    @cached_property
    def judgement(self) -> Judgement:
        """What `judge` says of the draws. Errors: ArgumentError with fewer than four draws a chain."""
        self._enough()
        if not self.watched:
            return judge(self.draws, self.names, **self._judged_with())
        draws = self.draws.astype(bool) if self.watched["events"] else self.draws
        found = judge(draws, self.names, facts=self.facts, spent=self.spent)
        note = judged_only(self.watched, len(self.plan["names"]))
        return replace(found, verdict=replace(found.verdict, notes=(*found.verdict.notes, note)))

    def _judged_with(self) -> dict[str, Any]:
        if self.watched:
            return {"facts": self.facts, "spent": self.spent}
        coordinates = self.names if self.parameters is None else self.parameters.coordinates
        return {"facts": self.facts, "spent": self.spent, "gradients": self.gradients, "free_draws": self.free_draws,
                "coordinates": coordinates, "settings": self.settings}

    def _enough(self) -> None:
        if not self.judged:
            raise ArgumentError(f"there are {self._shortest} kept draws a chain, too few to judge; let the run go on"
                                + (f": fellwalk.resume({self.path!r}, density)" if self.path else ""))

    def of(self, f: Callable[[NDArray[np.float64]], Any], names: Sequence[str] | None = None) -> Judgement:
        """Judge a function of the draws: ``f(x)`` with x of shape (dimension,), or the watched values, gives a number,
        a truth value (its mean is a probability) or a short vector."""
        self._enough()
        return judge_function(self.draws, f, names, **self._judged_with())

    def estimate(
        self,
        f: Callable[[NDArray[np.float64]], Any] | str | None = None,
        names: Sequence[str] | None = None,
        *,
        quantiles: Sequence[float] = (),
        sharpen: str = "auto",
        whole: bool = False,
    ) -> Estimates:
        """Means, standard deviations and quantiles with their errors, sharpened by the kept gradients where that helps.

        f: nothing for all parameters, the name of a parameter, or a function of the draws in natural values: of one
            draw (parameters,), as for `of`; with ``whole`` it is called once with all draws (chains, draws, parameters)
            and gives (chains, draws) or (chains, draws, k). names: for the k values of a function.
        quantiles: levels between 0 and 1. sharpen: "auto" takes what has the smallest held-out error, "none" the draws
            alone; "linear", "quadratic" and "cubic" insist on these terms where there are draws enough.
        Errors: ArgumentError; "auto" without kept gradients gives plain estimates, the others then raise.
        """
        from fellwalk.estimation import estimate

        self._enough()
        return estimate(self, f, names, quantiles, sharpen, whole)

    def compute_gradients(self, density: Density) -> NDArray[np.float64]:
        """Gradients at the kept draws of a run that kept none, (chains, draws, dimension); the calls count as spent.

        density: that of the run. Errors: OtherModelError when its log density at a draw is not that of the run.
        """
        from fellwalk.estimation import gradients_again

        if self.gradients is None:
            self.gradients = gradients_again(self, density)
            self.spent["gradients"] += self.gradients.shape[0] * self.gradients.shape[1]
            self.__dict__.pop("judgement", None)
        return self.gradients

    # ---- saying it ---------------------------------------------------------------------------------------------

    def heading(self) -> str:
        """Lines on what was run and how it settled, at most 80 columns wide."""
        motion, path = self.settings["motion"], self.settings["path"]
        shown = ", ".join(f"{key} {value}" for key, value in motion.items() if key != "name" and value not in (0, None))
        moved = f"{motion['name']} motion{f' ({shown})' if shown else ''} on {path['name']} paths"
        counts = ((len(self._parts), "chain"), (self._shortest, "draw"), (len(self.names), "parameter"))
        chains, draws, parameters = (f"{count} {word}{'s' * (count != 1)}" for count, word in counts)
        made = f"{chains} of {draws}, {parameters}"
        lines = [f"{made}, {moved}, seed {self.seed}."]
        if self._parts and not all(chain.get("settled") for chain in self.chains):
            lines.append(f"Settling has not ended, after {_range([part.count('settle') for part in self._parts], 'd')} "
                         "transitions.")
        elif all(self.chains):
            settled = [part.count("settle") for part in self._parts]
            sizes = [chain["step_size"] for chain in self.chains]
            how = f"Settled in {_range(settled, 'd')} transitions"
            if self.trial:
                how += " and a trial of motions"
            elif self.plan.get("settled"):
                how = f"Settled part {self.plan['settled']} taken over"
            lines.append(f"{how}: step size {_range(sizes, '.3g')}{self._bend_line()}.")
            lines += settling_remarks(self.settling, self.chains, self.settings["acceptance"])
        if not self.finished:
            on = f" Go on with fellwalk.resume({self.path!r}, density)." if self.path else ""
            where = ", in its trial of motions" if self._in_trial else ""
            lines.append(f"Stopped early{where}: {self.ended or 'not all draws asked for are made'} "
                         f"({self._shortest} of {self.plan['keep']} draws a chain).{on}")
        return "\n".join(row for line in lines for row in wrap(line))

    @property
    def _in_trial(self) -> bool:
        """Have all chains settled, and the trial that was to come has not ended?"""
        return "terms" in self.plan and self.trial is None and all(chain.get("settled") for chain in self.chains)

    def _bend_line(self) -> str:
        if self.settings["motion"]["name"] != "lagrangian" or self.settings["beta"] is not None:
            return ""
        bends = [chain["bend"] for chain in self.chains]
        text = f", bend {_range(bends, '.3g')}"
        if max(bends) < self.settings["motion"]["bend"]:
            text += " (lowered: the bend asked for capped the acceptance)"
        return text

    def __str__(self) -> str:
        if not self.judged:
            return self.heading()
        tried = f"{told_in_words(self.trial)}\n\n" if self.trial else ""
        return f"{self.heading()}\n\n{tried}{self.judgement}"

    def __repr__(self) -> str:
        return f"<Result: {len(self._parts)} chains of {self._shortest} draws, {len(self.names)} parameters>"

    def report(self, path: str | os.PathLike[str] | None = None, *, density: Density | None = None) -> str:
        """The result as one self-contained HTML page, for light and dark screens, print and screen readers.

        path: where to write it; the text is returned in any case. density: that of the run, for a slice of it and the
        share of time spent in it; left out, the model that the run names is imported, and without one the page says so.
        Needs the extra ``report``. Errors: ArgumentError without it; RecordError when the file cannot be written.
        """
        from fellwalk import report  # matplotlib and Jinja2 are loaded when a page is asked for

        return report.page(self, density) if path is None else report.write(self, path, density)

    def _repr_html_(self) -> str:
        from fellwalk.report_table import notebook

        return notebook(self)

    # ---- handing over ------------------------------------------------------------------------------------------

    def provenance(self) -> dict[str, Any]:
        """How the draws were made: plan, versions, chains."""
        return {**self.plan, "chains": self.chains, "spent": self.spent, "record": self.path, "versions": self.versions}

    def to_frame(self) -> pandas.DataFrame:
        """A pandas data frame of one row a draw: chain and draw, both from 0, then the parameters. Errors:
        ArgumentError without pandas."""
        return frames.to_frame(self)

    def to_arrow(self) -> pyarrow.Table:
        """The same columns as a pyarrow table, with the provenance as JSON in its metadata ``fellwalk``. Errors:
        ArgumentError without pyarrow."""
        return frames.to_arrow(self)

    def save_npz(self, path: str | os.PathLike[str]) -> None:
        """Draws, facts, names and provenance as a NumPy .npz file."""
        export.save_npz(path, self.draws, self.names, facts=self.facts, attributes=self.provenance())

    def save_csv(self, path: str | os.PathLike[str]) -> None:
        """One row a draw: chain, draw, then the parameters with every digit."""
        export.save_csv(path, self.draws, self.names, facts=self.facts)

    def save_netcdf(self, path: str | os.PathLike[str]) -> None:
        """A classic netCDF file: dimensions chain and draw, one variable a parameter."""
        export.save_netcdf(path, self.draws, self.names, facts=self.facts, attributes=self.provenance())


def _range(values: Sequence[float], form: str) -> str:
    low, high = format(min(values), form), format(max(values), form)
    return low if low == high else f"{low} to {high}"


def load(path: str | os.PathLike[str], *, salvage: bool = False) -> Result:
    """The result that a record holds so far; also while the run goes on. Errors: RecordError and its kinds.

    salvage: of a damaged record, what stands before the damage.
    """
    with Record.open(path, salvage=salvage) as record:
        plan = plan_of(record)
        last = [event for event in record.events() if event.kind in ("stopped", "finished", "resumed")][-1:]
        ended = last[0].details.get("why", "") if last else ""
        if not last or last[0].kind == "resumed":
            ended = "the run was killed or is still going on"
        states = [] if salvage else read_states(record)
        return Result(plan, read_parts(record), states=states, ended=ended, path=record.path, versions=record.versions)
