"""The text of a judgement, at most 80 columns wide: table, verdict, failures and cost."""

import math
import textwrap
import unicodedata
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from fellwalk.judgement import Judgement

WIDTH = 80
ROWS = 24  # about one screen; more parameters are shown worst first, up to this many
WIDEST_NUMBER = 8  # columns; a longer number is written less a common offset or in another unit
HEADINGS = ("parameter", "estimate", "error", "spread", "low", "middle", "high", "worth", "agreement")
MARK, DOUBT = "*", "?"
SHARPENED = (
    f"{MARK} sharpened by the gradients at the draws, which have known averages; worth is then how many independent "
    "draws would give this error."
)
IN_DOUBT = (
    f"{DOUBT} without a reliable error: heavy tails, so that the error, though it has been made wider, is itself not "
    "well known; low, middle and high do not suffer from this."
)
TEXTBOOK = (
    "Textbook names: posterior mean, its Monte Carlo standard error, posterior standard deviation, 5%, 50% and 95% "
    "quantiles, effective sample size, R-hat."
)


# ---- numbers --------------------------------------------------------------------------------------------------------


def place(error: float) -> int | None:
    """Decimal place of the second significant digit of an error: 0.0031 gives 4, 3100 gives -2; None for no error."""
    return 1 - math.floor(math.log10(error)) if error > 0 and math.isfinite(error) else None


def digits(value: float, decimals: int) -> str:
    """A value with so many decimals; places left of the point are rounded away. Never a negative zero."""
    decimals = min(decimals, 15)
    text = f"{round(value, decimals):.{max(decimals, 0)}f}"
    return text[1:] if text.startswith("-") and not text.strip("-0.") else text


class Row:
    """One parameter's numbers in a common unit 10^exponent and less a common offset, so that every number is short."""

    def __init__(self, judgement: "Judgement", i: int) -> None:
        self.index = i
        j = judgement
        self.places = {"estimate": float(j.estimate[i]), "low": float(j.low[i]), "middle": float(j.middle[i])}
        self.places["high"] = float(j.high[i])
        self.errors = {"estimate": float(j.error[i]), "low": float(j.low_error[i]), "middle": float(j.middle_error[i])}
        self.errors |= {"high": float(j.high_error[i])}
        self.spread, self.spread_error = float(j.spread[i]), float(j.spread_error[i])
        self.doubt = {"estimate": DOUBT * bool(j.in_doubt[i]), "spread": DOUBT * bool(j.spread_in_doubt[i])}
        self.is_event, self.is_constant = bool(j.event[i]), bool(j.constant[i])
        self.sharpened = {key for key, by in j.by.items() if by[i] != "none"}
        self.exponent, self.offset = 0, 0.0
        if not self.is_constant and max(map(len, self._cells())) > WIDEST_NUMBER:
            self._shorten()
        self.worth = "-" if self.is_constant else worth_text(float(j.worth[i]))
        agreement = float(j.agreement[i])
        self.agreement = "constant" if self.is_constant else _agreement(agreement)

    @property
    def in_doubt(self) -> bool:
        return any(self.doubt.values())

    def _shorten(self) -> None:
        """Choose the unit from the width of the distribution, and an offset where its place is far beyond its width."""
        reach = max(self.spread, abs(self.places["high"] - self.places["low"]))
        if reach <= 0 or not math.isfinite(reach):
            return
        far = max(abs(value) for value in self.places.values())
        if far > 100 * reach:
            # The offset has as few digits as leave a remainder of the size of the width.
            unit = math.ceil(math.log10(reach)) + 1
            self.offset = float(f"{self.places['middle']:.{max(math.floor(math.log10(far)) - unit, 0)}e}")
            far = max(abs(value - self.offset) for value in self.places.values())
        if not max(map(len, self._cells())) <= WIDEST_NUMBER:
            self.exponent = math.floor(math.log10(max(far, reach)))

    def _scaled(self, value: float) -> float:
        # Dividing by a power of ten is exact to the last place where multiplying by its reciprocal is not.
        if self.exponent >= 0:
            return value / 10.0**self.exponent
        return value * 10.0 ** min(-self.exponent, 300) * 10.0 ** max(-self.exponent - 300, 0)

    def _number(self, value: float, error: float, sharpened: bool = False) -> str:
        value, error = self._scaled(value), self._scaled(error)
        at = place(error)
        if at is None:
            # An exactly known number, or one whose error is zero for lack of variety in the draws.
            return f"{value:.6g}"
        if sharpened:
            # Digits far below the width of the distribution give way where there is no room for them.
            least = place(self._scaled(self.spread)) or at
            while at > least and len(digits(value, at)) >= WIDEST_NUMBER:
                at -= 1
        return digits(value, at)

    def _error(self, error: float) -> str:
        text = self._number(error, error)
        return text if len(text) <= WIDEST_NUMBER or "estimate" not in self.sharpened else f"{self._scaled(error):.1e}"

    def _cells(self) -> list[str]:
        at = self._number
        if self.is_constant:
            return [f"{self.places['estimate']:.9g}", "0", "0", "", "", ""]
        shifted = {key: value - self.offset for key, value in self.places.items()}
        mark = {key: MARK if key in self.sharpened else "" for key in ("estimate", "spread", "low", "middle", "high")}
        cells = [at(shifted["estimate"], self.errors["estimate"], bool(mark["estimate"])) + mark["estimate"]]
        cells.append(self._error(self.errors["estimate"]) + self.doubt["estimate"])
        cells.append(at(self.spread, self.spread_error, bool(mark["spread"])) + mark["spread"] + self.doubt["spread"])
        if self.is_event:
            return [*cells, "", "", ""]
        return cells + [at(shifted[key], self.errors[key]) + mark[key] for key in ("low", "middle", "high")]

    def cells(self) -> list[str]:
        return [*self._cells(), self.worth, self.agreement]


def worth_text(value: float) -> str:
    """An effective size in at most seven columns."""
    if math.isnan(value):
        return "-"
    return f"{value:.0f}" if value < 999_999 else f"{value:.2g}"


def _agreement(value: float) -> str:
    if math.isnan(value):
        return "unknown"
    if math.isinf(value):
        return "infinite"
    return f"{value:.3f}" if value < 100 else f"{value:.2g}"


# ---- names ----------------------------------------------------------------------------------------------------------


def columns(text: str) -> int:
    """Columns of a terminal that a text takes: two for wide characters, none for combining ones."""
    return sum(0 if unicodedata.combining(c) else 2 if unicodedata.east_asian_width(c) in "WF" else 1 for c in text)


def _fit(text: str, width: int, from_end: bool = False) -> str:
    taken = ""
    for character in reversed(text) if from_end else text:
        longer = character + taken if from_end else taken + character
        if columns(longer) > width:
            break
        taken = longer
    return taken


def shorten_names(names: list[str], width: int) -> list[str]:
    """Names of at most `width` (>= 8) columns, all different if they were.

    The middle of a long one gives way to an ellipsis; where two then look alike, their ends give way to a number.
    """
    short = []
    for name in names:
        if columns(name) > width:
            tail = _fit(name, (width - 1) // 2, from_end=True)
            name = _fit(name, width - 1 - columns(tail)) + "…" + tail
        short.append(name)
    taken = {name for name in short if short.count(name) == 1} if len(set(short)) < len(short) else set(short)
    if len(taken) == len(short):
        return short
    result, number = [], 0
    for name, whole in zip(short, names, strict=True):
        if name not in taken or (name != whole and name in result):
            while name in taken or name in result or short.count(name) > 1:
                number += 1
                end = f"…{number}"
                name = _fit(whole, width - columns(end)) + end
        result.append(name)
    return result


# ---- the table ------------------------------------------------------------------------------------------------------


def _order(judgement: "Judgement") -> np.ndarray:
    """Parameters by need of attention: those closest to, or furthest beyond, a bound of the verdict come first."""
    from fellwalk.verdict import AGREEMENT, WORTH_PER_CHAIN

    j = judgement.raw
    with np.errstate(all="ignore"):
        target = WORTH_PER_CHAIN * j.chains
        need = np.fmax((j.agreement - 1) / (AGREEMENT - 1), np.fmax(target / j.worth, target / j.worth_tails))
    return np.argsort(-np.where(j.constant, -1.0, np.nan_to_num(need, nan=-1.0, posinf=1e300)), kind="stable")


def parameters(judgement: "Judgement", all_rows: bool = False) -> str:
    """The table with its notes; see Judgement.table."""
    count = len(judgement.names)
    hidden = 0 if all_rows or count <= ROWS else count - ROWS
    chosen = _order(judgement)[:ROWS] if hidden else range(count)
    rows = [Row(judgement, int(i)) for i in chosen]
    body = _aligned([row.cells() for row in rows])
    widths = [max(len(HEADINGS[k + 1]), *(len(cells[k]) for cells in body)) for k in range(len(HEADINGS) - 1)]
    names = [judgement.names[row.index] for row in rows]
    longest = max(columns(HEADINGS[0]), *(columns(name) for name in names))
    gap = 2 if sum(widths) + 2 * len(widths) + min(longest, 14) <= WIDTH else 1
    room = max(WIDTH - sum(widths) - gap * len(widths), 8)
    short = shorten_names(names, min(longest, room))
    first = max(columns(HEADINGS[0][:room]), *(columns(name) for name in short))

    def line(name: str, cells: list[str] | tuple[str, ...]) -> str:
        padded = name + " " * (first - columns(name))
        return (
            padded + "".join(" " * gap + cell.rjust(width) for cell, width in zip(cells, widths, strict=True))
        ).rstrip()

    draws = f"{judgement.chains} {_plural('chain', judgement.chains)} of {judgement.draws_per_chain:,} kept draws"
    lines = [draws, "", line(HEADINGS[0][:room], HEADINGS[1:])]
    lines += [line(name, cells) for name, cells in zip(short, body, strict=True)]
    if hidden:
        lines += wrap(f"The {ROWS} that need attention most, worst first; {hidden} more with .table(all=True).")
    lines += wrap(TEXTBOOK)
    if any(row.sharpened for row in rows):
        lines += wrap(f"{SHARPENED} By the draws alone: .raw")
    if any(row.in_doubt for row in rows):
        lines += wrap(IN_DOUBT)
    lines += _unit_notes(rows, short)
    if any(row.is_event for row in rows):
        lines += wrap("The estimate of a truth value is its probability.")
    return "\n".join(lines)


def _aligned(body: list[list[str]]) -> list[list[str]]:
    """Cells in which digits stand under digits where only some of a column are marked, if there is room for that."""
    padded = [list(cells) for cells in body]
    for k in range(len(padded[0])):
        marks = [len(cells[k]) - len(cells[k].rstrip(MARK + DOUBT)) for cells in padded]
        for cells, marked in zip(padded, marks, strict=True):
            cells[k] += " " * (max(marks) - marked)
    taken = sum(max(len(HEADINGS[k + 1]), *(len(cells[k]) for cells in padded)) + 1 for k in range(len(HEADINGS) - 1))
    return padded if taken + 8 <= WIDTH else body


def _unit_notes(rows: list[Row], names: list[str]) -> list[str]:
    """How to read rows in another unit or less an offset, rows that share both in one sentence."""
    alike: dict[tuple[int, float], list[str]] = {}
    for row, name in zip(rows, names, strict=True):
        if row.exponent or row.offset:
            alike.setdefault((row.exponent, row.offset), []).append(name)
    lines = []
    for (exponent, offset), members in alike.items():
        steps = [f"multiply by 1e{exponent:d}"] if exponent else []
        if offset:
            steps.append(f"add {offset:.15g} to estimate, low, middle and high")
        lines += wrap(f"{', '.join(members)}: {', then '.join(steps)}.")
    return lines


# ---- verdict and the rest -------------------------------------------------------------------------------------------


def verdict_lines(judgement: "Judgement") -> list[str]:
    """Verdict, reasons, notes, failures, cost and the caution, wrapped."""
    verdict = judgement.verdict
    lines = wrap(f"Verdict: {verdict.kind}.")
    for reason in verdict.reasons:
        lines += wrap(reason, "- ", "  ")
    if verdict.draws_needed is not None:
        lines += wrap(f"About {verdict.draws_needed:,} kept draws a chain in total should do.")
    for note in verdict.notes:
        lines += wrap(note)
    lines += _identity_lines(judgement)
    lines += _failure_lines(judgement) + _energy_lines(judgement) + _cost_lines(judgement)
    return [*lines, *wrap(verdict.caution)]


def _identity_lines(judgement: "Judgement") -> list[str]:
    checked = judgement.identities
    if checked is None:
        return []
    if checked.why_not:
        return wrap(f"Draws and gradients were not checked against each other: {checked.why_not}.")
    if not checked.checked:
        return wrap("Too few effective draws to check draws and gradients against each other.")
    held = f"{len(checked.alarms)} of {checked.checked} broken" if checked.alarms else f"all {checked.checked} hold"
    return wrap(f"Identities of draws and gradients (E g = 0, E x g' = -I): {held}.")


def _failure_lines(judgement: "Judgement") -> list[str]:
    if not judgement.judged_facts:
        return []
    total = judgement.chains * judgement.draws_per_chain
    count = sum(judgement.failures.values())
    if not count:
        return wrap(f"Failed steps: none in {total:,} transitions.")
    lines = wrap(f"Failed steps: in {count:,} of {total:,} transitions ({100 * count / total:.2g}%):")
    sentences = failure_sentences()
    for code, times in sorted(judgement.failures.items(), key=lambda item: -item[1]):
        lines += wrap(f"{times:,} {_plural('time', times)} {sentences.get(code, f'failure code {code}')}", "- ", "  ")
    return lines


def failure_sentences() -> dict[int, str]:
    """Status codes in words; empty where the compiled core is not installed, as draws can be judged without it."""
    try:
        from fellwalk.facts import SENTENCES
    except ImportError:
        return {}
    return SENTENCES


def _energy_lines(judgement: "Judgement") -> list[str]:
    fraction = judgement.energy_fraction
    if fraction is None or not np.isfinite(fraction).any():
        return []
    return wrap(f"Energy fraction (of missing information): {np.nanmin(fraction):.2g} in the lowest chain.")


def _cost_lines(judgement: "Judgement") -> list[str]:
    spent, least = judgement.spent, judgement.least_worth()
    if not spent:
        return []
    words = {"gradients": "gradients", "products": "Hessian products"}
    whole = [f"{spent[key]:,.0f} {word}" for key, word in words.items() if spent.get(key)]
    each = [f"{judgement._per_worth(key):,.3g} {word}" for key, word in words.items() if spent.get(key)]
    if "seconds" in spent:
        whole.append(f"{spent['seconds']:.3g} seconds")
        each.append(f"{1000 * judgement.seconds_per_worth:.3g} milliseconds")
    text = f"Cost of the whole run: {', '.join(whole)}"
    if least is not None:
        text += f"; for one effective draw of {judgement.names[least]}, worth least: {', '.join(each)}"
    return wrap(text + ".")


def _plural(word: str, count: int) -> str:
    return word if count == 1 else word + "s"


def wrap(text: str, first: str = "", rest: str = "") -> list[str]:
    """Lines of at most WIDTH columns; `first` and `rest` are the indents of the first line and of the others."""
    return textwrap.wrap(text, WIDTH, initial_indent=first, subsequent_indent=rest, break_on_hyphens=False)
