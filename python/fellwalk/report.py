"""The page: one self-contained HTML file that says whether draws can be used, what would fix them, what they cost."""

from __future__ import annotations

import contextlib
import itertools
import os
import re
from importlib.resources import files
from typing import TYPE_CHECKING, Any

import numpy as np

from fellwalk.errors import ArgumentError, FellwalkError, RecordError

try:
    from jinja2 import Environment
    from markupsafe import Markup, escape

    from fellwalk import figures
except ImportError as missing:
    raise ArgumentError(f"a page needs matplotlib and Jinja2, and {missing.name} is not installed: "
                        "pip install 'fellwalk[report]'") from missing

from fellwalk import report_facts as told
from fellwalk.density import Density
from fellwalk.export import _whole_file
from fellwalk.figure_estimates import Progress
from fellwalk.figure_failures import Trouble
from fellwalk.figure_geometry import Bend, slice_drawing
from fellwalk.figure_intervals import Intervals
from fellwalk.figures import plain
from fellwalk.geometry import Line, Slice, agrees, worst_pair
from fellwalk.model import find_model
from fellwalk.report_advice import remedies
from fellwalk.report_table import answer, by_need, html_table, table_notes
from fellwalk.table import ROWS, _energy_lines, _failure_lines, _identity_lines
from fellwalk.trial_result import told_in_words
from fellwalk.verdict import CAUTION, FIT, MORE, NOT_TRUSTED

if TYPE_CHECKING:
    from fellwalk.judgement import Judgement
    from fellwalk.result import Result

__all__ = ["page", "write"]

_ESTIMATES = 3  # parameters whose estimate is followed; those that need attention most
_INTERVALS = 400  # parameters whose intervals are drawn; beyond, those that need attention most
_TABLED = 1000  # the same for rows of the table
_TALL = 1100.0  # pixels of one drawing of intervals
_TONES = {FIT: "fit", MORE: "more", NOT_TRUSTED: "stop"}
_SIGN = "fellwalk report"


def write(result: Result, path: str | os.PathLike[str], density: Density | None = None, *, find: bool = True,
          replace: bool = True) -> str:
    """Write the page of `result` to a file, whole or not at all; returns its text. Arguments as for `page`.

    replace: whether a file that is no page of fellwalk may be overwritten. Errors: RecordError.
    """
    if not replace and os.path.exists(path) and not _is_page(path):
        raise RecordError(f"{path}: there is a file already, and it is not a page of fellwalk. Give the page another "
                          "name with -o")
    text = page(result, density, find=find)
    with _whole_file(path) as file:
        file.write(text.encode("utf-8", "replace"))
    return text


def _is_page(path: str | os.PathLike[str]) -> bool:
    with contextlib.suppress(OSError), open(path, "rb") as file:
        return _SIGN.encode() in file.read(1000)
    return False


def page(result: Result, density: Density | None = None, *, find: bool = True) -> str:
    """The page as text.

    density: that of the run, for the slice of the log density and the time in the user's code; left out, the model that
        the run names is imported (not with find=False). Where there is none the page says so.
    """
    templates = files("fellwalk").joinpath("templates")
    environment = Environment(autoescape=True, trim_blocks=True, lstrip_blocks=True)
    environment.filters["typed"] = _typed
    environment.filters["plain"] = plain
    template = environment.from_string(templates.joinpath("report.html").read_text(encoding="utf-8"))
    style = templates.joinpath("report.css").read_text(encoding="utf-8")
    return template.render(style=Markup(style), sign=_SIGN, **_contents(result, density, find))


def _typed(text: str) -> Markup:
    """Text in which backquotes hold what is to be typed."""
    parts = re.split(r"`([^`]*)`", plain(text))
    return Markup("").join(Markup("<code>{}</code>").format(part) if i % 2 else escape(part)
                           for i, part in enumerate(parts))


def _contents(result: Result, density: Density | None, find: bool) -> dict[str, Any]:
    judgement, why_not = told.judged(result)
    model, no_model = _model(result, density, find) if result.facts.size else (None, "no draws have been kept.")
    share = told.share_of_user(result, model, no_model)
    verdict = judgement.verdict if judgement else None
    return {
        "answer": answer(verdict),
        "tone": _TONES[verdict.kind] if verdict else "none",
        "heading": " ".join(result.heading().split()),
        "subject": _subject(result),
        "judgement": judgement,
        "why_not": why_not,
        "reasons": verdict.reasons if verdict else (),
        "notes": _notes(judgement),
        "remedies": remedies(result, judgement),
        "cost": told.cost_summary(result, judgement, share),
        "cost_rows": told.cost_rows(result, judgement, share),
        "chain_headings": told.CHAIN_HEADINGS,
        "chain_rows": told.chain_rows(result),
        "settings": told.settings_rows(result),
        "versions": told.version_rows(result),
        "code": told.code(result),
        "trial": told_in_words(result.trial) if result.trial else "",
        "caution": CAUTION,
        **_table(judgement),
        **_intervals(judgement),
        **_estimates(result, judgement),
        **_trouble(result),
        **_geometry(result, model, no_model, share.seconds),
    }


def _subject(result: Result) -> str:
    chains, draws = result.facts.shape
    model = (result.plan["model"] or "a model").rpartition("/")[2]
    return (f"{model}: {chains} {'chain' if chains == 1 else 'chains'} of {draws:,} kept draws, {len(result.names)} "
            f"{'parameter' if len(result.names) == 1 else 'parameters'}")


def _model(result: Result, density: Density | None, find: bool) -> tuple[Density | None, str]:
    """The density of the run, or None and why it is not at hand."""
    if result.watched:
        return None, "this run kept watched values, and the model can only be asked at whole draws."
    name = result.plan["model"]
    if density is None and not name:
        return None, "the run does not name its model; give it to the report (density=, or --model in the command)."
    if density is None and not find:
        return None, "the model was left out, as asked."
    try:
        found = density or find_model(name)
        agrees(result, found)
    except (Exception, SystemExit) as error:  # importing a model runs the user's code
        return None, f"the model could not be used ({type(error).__name__}: {error})."
    return found, ""


def _notes(judgement: Judgement | None) -> list[str]:
    if judgement is None:
        return []
    failed = " ".join(_failure_lines(judgement)).replace(": - ", ": ").replace(" - ", "; ")
    lines = (" ".join(_identity_lines(judgement)), failed + ("." if failed[-1:].isalnum() else ""),
             " ".join(_energy_lines(judgement)))
    return [*judgement.verdict.notes, *filter(None, lines)]


def _table(judgement: Judgement | None) -> dict[str, Any]:
    if judgement is None:
        return {"table": "", "all_table": "", "raw_table": "", "table_notes": [], "hidden": 0, "not_listed": 0}
    order = by_need(judgement)
    count = len(order)
    first = np.arange(count) if count <= ROWS else order[:ROWS]
    rest = order[ROWS:_TABLED] if count > ROWS else order[:0]
    caption = f"The {ROWS} that need attention most, worst first" if count > ROWS else "All parameters"
    return {"table": Markup(html_table(judgement, first, caption)), "hidden": len(rest),
            "all_table": Markup(html_table(judgement, np.sort(rest), "The other parameters")) if len(rest) else "",
            "raw_table": Markup(html_table(judgement.raw, first, caption)) if judgement.raw is not judgement else "",
            "table_notes": table_notes(judgement, order[:_TABLED]), "not_listed": max(count - _TABLED, 0)}


def _intervals(judgement: Judgement | None) -> dict[str, Any]:
    if judgement is None:
        return {"intervals": [], "more_intervals": [], "not_drawn": 0, "apart": ""}
    order = by_need(judgement)[:_INTERVALS]
    count = len(order)
    first = np.sort(order) if count <= ROWS else order[:ROWS]
    indices = np.concatenate([first, np.sort(order[len(first):])])
    shown = Intervals(judgement, indices)
    rows = int(max(4, min(ROWS // 2, _TALL // (4 * judgement.chains + 11))))
    groups = _groups(len(first), rows), _groups(count - len(first), rows)
    drawings = [[shown.drawing(f"intervals-{k}-{n}", start + np.arange(a, b)) for n, (a, b) in enumerate(group)]
                for k, (group, start) in enumerate(zip(groups, (0, len(first)), strict=True))]
    return {"intervals": drawings[0], "more_intervals": drawings[1], "more_count": count - len(first),
            "not_drawn": len(judgement.names) - count, "apart": shown.words(np.arange(count))}


def _groups(count: int, most: int) -> list[tuple[int, int]]:
    """Even groups of at most `most` out of `count`, as (start, stop)."""
    pieces = -(-count // most)
    edges = np.linspace(0, count, pieces + 1).round().astype(int) if pieces else np.zeros(1, int)
    return [(int(a), int(b)) for a, b in itertools.pairwise(edges)]


def _estimates(result: Result, judgement: Judgement | None) -> dict[str, Any]:
    if judgement is None:
        return {"estimates": [], "no_estimates": "There are too few draws to follow an estimate.", "double": ""}
    order = np.array([i for i in by_need(judgement) if not judgement.constant[i]][:ROWS], dtype=np.int64)
    progress = Progress.of(result, order) if len(order) else None
    if progress is None:
        why = "No parameter varies." if not len(order) else "There are too few draws to follow an estimate."
        return {"estimates": [], "no_estimates": why, "double": ""}
    drawings = [progress.drawing(f"estimate-{k}", k) for k in range(min(_ESTIMATES, len(order)))]
    kept = progress.spent[-1] - progress.settled
    double = (f"Errors fall as one over the square root of the gradients: half the error would take about "
              f"{figures.number(float(f'{3 * kept:.2g}'))} gradients more.")
    if judgement.verdict.kind == NOT_TRUSTED:
        double = ("Since the verdict is that these draws are not to be trusted, the errors below need not tell how far "
                  "the estimates are from the truth.")
    return {"estimates": [*drawings, progress.errors_drawing("errors")], "no_estimates": "", "double": double,
            "followed": min(_ESTIMATES, len(order)), "errors_of": len(order),
            "sharpened": any(by != "none" for by in judgement.by.get("estimate", ()))}


def _trouble(result: Result) -> dict[str, Any]:
    if not result.facts.size:
        return {"trouble": ["No draws have been kept yet."], "trouble_drawings": []}
    trouble = Trouble(result)
    settling = sum(int(np.count_nonzero(facts["failure"])) for facts in result.settling)
    lines = trouble.sentences()
    if settling:
        lines.append(f"While settling, steps failed in {settling:,} transitions; that is where step sizes are tried, "
                     "and does no harm to the draws.")
    return {"trouble": lines, "trouble_drawings": trouble.drawings("trouble")}


def _geometry(result: Result, model: Density | None, no_model: str, seconds: float) -> dict[str, Any]:
    found: dict[str, Any] = {"bend": None, "bend_said": [], "slice": None, "slice_said": "", "slice_caption": ""}
    if not result.facts.size:
        return {**found, "bend_said": ["No draws have been kept yet."]}
    try:
        bend = Bend(result)
        found |= {"bend": bend.drawing("bend"), "bend_said": bend.sentences()}
    except FellwalkError as error:
        found["bend_said"] = [str(error)]
    if model is None:
        return {**found, "slice_said": f"A slice of the log density needs the model: {no_model}"}
    try:
        return found | _slice(result, model, seconds)
    except Exception as error:  # the user's function runs here
        return {**found, "slice_said": f"A slice could not be drawn ({type(error).__name__}: {error})."}


def _slice(result: Result, model: Density, seconds: float) -> dict[str, Any]:
    pair = worst_pair(result)
    if not pair:
        return {"slice_said": "No coordinate varies, so there is nothing to draw a slice through."}
    found = Slice.of(result, model, pair, seconds)
    if found is None:
        return {"slice_said": f"No slice is drawn: at {told.duration(seconds)} a gradient it would take too long."}
    line = Line.of(result, model, found.chain, found.centre)
    return {"slice": slice_drawing("slice", found, line, model.coordinates),
            "slice_caption": _slice_caption(result, pair)}


def _slice_caption(result: Result, pair: list[int]) -> str:
    if len(pair) == 1:
        return "The density along the only coordinate that varies."
    bent = " and its bend" if result.settings["motion"]["name"] == "lagrangian" else ""
    return ("The two coordinates that mix worst; the others stay at the most central draw. Contours: how far the log "
            "density lies below its highest value here. Heavy ellipse: unit length in the base metric, which is good "
            f"where it has the shape of the contours. Thin ellipses: one step of unit speed in the metric{bent}. Line "
            "with dots: a path of usual length from the ring; it moves in all coordinates, so this is its shadow on "
            "the plane.")
