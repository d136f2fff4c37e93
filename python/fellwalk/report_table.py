"""The table of a judgement as HTML, for the page and for notebooks; no more than the standard library is needed."""

from __future__ import annotations

from collections.abc import Iterable
from html import escape
from typing import TYPE_CHECKING

import numpy as np

from fellwalk.judge import MOST_CREDIT
from fellwalk.judgement import Judgement
from fellwalk.table import HEADINGS, IN_DOUBT, ROWS, SHARPENED, TEXTBOOK, Row, _order, _unit_notes
from fellwalk.verdict import AGREEMENT, FIT, WORTH_PER_CHAIN, Verdict

if TYPE_CHECKING:
    from fellwalk.result import Result

__all__ = ["answer", "by_need", "html_table", "needs_attention", "notebook", "table_notes"]

ANSWERS = {"fit for use": "Yes: fit for use", "needs more draws": "Not yet: needs more draws",
           "not to be trusted": "No: not to be trusted"}


_SIGN = ' <span class="sign" aria-hidden="true">▲</span><span class="unseen"> needs attention</span>'


def answer(verdict: Verdict | None) -> str:
    """The verdict as an answer to whether the draws can be used."""
    return "No verdict yet" if verdict is None else ANSWERS[verdict.kind]


def by_need(judgement: Judgement) -> np.ndarray:
    """Indices of the parameters, those in most need of attention first."""
    return np.asarray(_order(judgement), dtype=np.int64)


def needs_attention(judgement: Judgement) -> np.ndarray:
    """Which parameters are short of a bound of the verdict, (parameters,); none when the draws are fit for use."""
    j = judgement.raw
    if judgement.verdict.kind == FIT:
        return np.zeros(len(j.names), bool)
    asked = WORTH_PER_CHAIN * j.chains
    with np.errstate(invalid="ignore"):
        worth = np.fmax(j.worth, np.fmin(judgement.worth, MOST_CREDIT * j.worth))
        short = (worth < asked) | (j.worth_tails < asked) | (j.agreement >= AGREEMENT)
    return np.asarray(short & ~j.constant)


def html_table(judgement: Judgement, indices: Iterable[int], caption: str = "") -> str:
    """A table with the headings and the numbers of the printed one; `indices` says which parameters, in which order."""
    short = needs_attention(judgement)
    sharpened = any(by != "none" for words in judgement.by.values() for by in words)
    headings = [*HEADINGS, "sharpened by"] if sharpened else HEADINGS
    head = "".join(f'<th scope="col">{heading}</th>' for heading in headings)
    rows = []
    for i in map(int, indices):
        cells = "".join(f"<td>{escape(cell).replace('-', '−')}</td>" for cell in Row(judgement, i).cells())
        kind, sign = (' class="short"', _SIGN) if short[i] else ("", "")
        if sharpened:
            cells += f'<td class="words">{escape(sharpened_by(judgement, i))}</td>'
        rows.append(f'<tr{kind}><th scope="row">{escape(shown(judgement.names[i]))}{sign}</th>{cells}</tr>')
    said = f"<caption>{escape(caption)}</caption>" if caption else ""
    return f"<table>{said}<thead><tr>{head}</tr></thead><tbody>{''.join(rows)}</tbody></table>"


def sharpened_by(judgement: Judgement, i: int) -> str:
    """With which terms the numbers of a parameter are sharpened, as a short text; empty where none is."""
    kinds: dict[str, list[str]] = {}
    for key, words in judgement.by.items():
        kinds.setdefault(words[i], []).append(key)
    kinds.pop("none", None)
    if len(kinds) == 1:
        return next(iter(kinds))
    return "; ".join(f"{kind}: {', '.join(keys)}" for kind, keys in kinds.items())


def shown(name: str) -> str:
    """A name as it can stand in a page: what is not printable gives way to a sign."""
    return "".join(c if c.isprintable() else "\ufffd" for c in name)


def table_notes(judgement: Judgement, indices: Iterable[int]) -> list[str]:
    """What a reader of the table must know besides."""
    rows = [Row(judgement, int(i)) for i in indices]
    notes = [TEXTBOOK]
    if any(row.sharpened for row in rows):
        notes.append(SHARPENED)
    if any(row.in_doubt for row in rows):
        notes.append(IN_DOUBT)
    if needs_attention(judgement).any():
        notes.append(f"▲ short of what is asked: {WORTH_PER_CHAIN} effective draws a chain in centre and tails, and "
                     f"agreement below {AGREEMENT}.")
    notes += [" ".join(_unit_notes(rows, [shown(judgement.names[row.index]) for row in rows]))]
    if any(row.is_event for row in rows):
        notes.append("The estimate of a truth value is its probability.")
    return [note for note in notes if note]


_NOTEBOOK_STYLE = (
    "<style>.fellwalk{max-width:60em}.fellwalk table{border-collapse:collapse;font-variant-numeric:tabular-nums}"
    ".fellwalk td,.fellwalk th{text-align:right;padding:.15em .6em;border-bottom:1px solid rgba(128,128,128,.35)}"
    ".fellwalk th:first-child{text-align:left}.fellwalk thead th{font-weight:normal;opacity:.75}"
    ".fellwalk .answer{font-size:1.3em;font-weight:600}.fellwalk .quiet{opacity:.75}"
    ".fellwalk .unseen{position:absolute;width:1px;height:1px;overflow:hidden;clip-path:inset(50%)}</style>"
)


def notebook(result: Result) -> str:
    """HTML of a result for a notebook: the answer, its reasons, the table and the cost."""
    from fellwalk.errors import FellwalkError
    from fellwalk.table import _cost_lines

    parts = [_NOTEBOOK_STYLE, f'<p class="quiet">{escape(" ".join(result.heading().split()))}</p>']
    try:
        j = result.judgement
    except FellwalkError as error:
        parts += [f'<p class="answer">{answer(None)}</p><p>{escape(str(error))}</p>']
        return f'<div class="fellwalk">{"".join(parts)}</div>'
    chosen = by_need(j)[:ROWS] if len(j.names) > ROWS else np.arange(len(j.names))
    more = [f"The {ROWS} that need attention most, worst first, of {len(j.names)}."] * (len(j.names) > ROWS)
    parts += [f'<p class="answer">{answer(j.verdict)}</p><ul>',
              *(f"<li>{escape(reason)}</li>" for reason in j.verdict.reasons), "</ul>",
              html_table(j, chosen), f'<p class="quiet">{escape(" ".join(more + table_notes(j, chosen)))}</p>',
              f'<p class="quiet">{escape(" ".join(_cost_lines(j)))} {escape(j.verdict.caution)}</p>']
    return f'<div class="fellwalk">{"".join(parts)}</div>'
