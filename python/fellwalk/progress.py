"""Progress for people: bars on a terminal or in a notebook, lines in a log, or nothing."""

import contextlib
import sys
import time
from typing import Protocol, TextIO

import numpy as np

from fellwalk.errors import ArgumentError

__all__ = ["Progress", "choose_progress"]

_BETWEEN_LINES = 5.0  # seconds


class Progress(Protocol):
    """What a run tells."""

    def update(self, chain: int, phase: str, done: int, facts: np.ndarray) -> None:
        """`done` transitions of this phase are finished in this chain; facts of the newest block."""

    def say(self, sentence: str) -> None:
        """Something worth a line."""

    def close(self) -> None:
        """The run has ended."""


class Silent:
    """Says nothing."""

    def update(self, chain: int, phase: str, done: int, facts: np.ndarray) -> None:
        """Nothing."""

    def say(self, sentence: str) -> None:
        """Nothing."""

    def close(self) -> None:
        """Nothing."""


class _Tally:
    """Sums over chains that both forms show. kept: draws that each chain has when it begins."""

    def __init__(self, keep: int, kept: list[int]) -> None:
        self.kept = list(kept)
        self.whole = keep * len(kept)
        self.total = self.first = sum(kept)
        self.settling = {chain for chain, count in enumerate(kept) if not count}
        self.failed = self.transitions = 0
        self.accepted = 0.0
        self.begun = self.keeping = time.monotonic()

    def add(self, chain: int, phase: str, done: int, facts: np.ndarray) -> None:
        self.failed += int(np.count_nonzero(facts["failure"]))
        self.transitions += len(facts)
        self.accepted += float(facts["acceptance"].sum())
        if phase == "keep":
            if self.total == self.first:
                self.keeping = time.monotonic()
            self.settling.discard(chain)
            self.total += done - self.kept[chain]
            self.kept[chain] = done

    def text(self) -> str:
        acceptance = self.accepted / max(1, self.transitions)
        settling = f", {len(self.settling)} of {len(self.kept)} chains settling" if self.settling else ""
        return f"acceptance {acceptance:.2f}, failed steps {self.failed}{settling}"

    def left(self) -> str:
        """About how long until all draws are made, once that can be told."""
        made, took = self.total - self.first, time.monotonic() - self.keeping
        if not made or took < 1.0 or self.total == self.whole:
            return ""
        return f"; about {_span((self.whole - self.total) * took / made)} left"


def _span(seconds: float) -> str:
    for size, unit in ((86400, "days"), (3600, "h"), (60, "min")):
        if seconds >= 2 * size:
            return f"{seconds / size:.0f} {unit}"
    return f"{seconds:.0f} s"


class Lines:
    """Plain lines, one every few seconds at most."""

    def __init__(self, keep: int, kept: list[int], out: TextIO | None = None) -> None:
        self.tally = _Tally(keep, kept)
        self.out = out or sys.stderr
        self.last = time.monotonic()

    def update(self, chain: int, phase: str, done: int, facts: np.ndarray) -> None:
        """Add a block; print when the last line is old enough or all is done."""
        tally = self.tally
        tally.add(chain, phase, done, facts)
        now = time.monotonic()
        if now - self.last >= _BETWEEN_LINES or tally.total == tally.whole:
            self.last = now
            self.say(f"kept {tally.total} of {tally.whole} draws after {_span(now - tally.begun)}; {tally.text()}"
                     + tally.left())

    def say(self, sentence: str) -> None:
        """One line. A log that has gone away does not end the run."""
        with contextlib.suppress(OSError, ValueError, AttributeError):
            print(f"fellwalk: {sentence}", file=self.out, flush=True)

    def close(self) -> None:
        """Nothing is left open."""


class Bars:
    """A bar for all kept draws, and one for each chain when there are few."""

    def __init__(self, keep: int, kept: list[int]) -> None:
        from tqdm.auto import tqdm

        class Bar(tqdm):
            """Without the watching thread, as worker processes may be forked later."""

            monitor_interval = 0

        self.tqdm = tqdm
        self.tally = _Tally(keep, kept)
        self.whole = Bar(total=self.tally.whole, initial=self.tally.total, desc="draws", unit="draw",
                         dynamic_ncols=True)
        self.each = [Bar(total=keep, initial=count, desc=_label(c, 0 if count else None), unit="draw", leave=False,
                         dynamic_ncols=True) for c, count in enumerate(kept) if 1 < len(kept) <= 8]

    def update(self, chain: int, phase: str, done: int, facts: np.ndarray) -> None:
        """Add a block."""
        self.tally.add(chain, phase, done, facts)
        self.whole.set_postfix_str(self.tally.text(), refresh=False)
        self.whole.update(self.tally.total - self.whole.n)
        if self.each:
            bar = self.each[chain]
            bar.set_description(_label(chain, done if phase == "settle" else None), refresh=phase == "settle")
            if phase == "keep":
                bar.update(done - bar.n)

    def say(self, sentence: str) -> None:
        """One line above the bars."""
        with contextlib.suppress(OSError, ValueError):
            self.tqdm.write(f"fellwalk: {sentence}", file=sys.stderr)

    def close(self) -> None:
        """Take the bars of the chains away, leave the total."""
        for bar in self.each:
            bar.close()
        self.whole.close()


def _label(chain: int, settled: int | None) -> str:
    return f"chain {chain + 1}" + ("" if settled is None else f" settling, {settled}")


def _in_notebook() -> bool:
    shell = sys.modules.get("IPython")
    return shell is not None and getattr(shell.get_ipython(), "kernel", None) is not None


def choose_progress(given: object, keep: int, kept: list[int]) -> Progress:
    """What shows the progress of a run to `keep` draws of chains that have `kept` draws.

    given: "bars", "lines", "off", True (bars for a person, else lines), False ("off"), or None (bars for a person, else
    nothing). Errors: ArgumentError.
    """
    if not (given is None or isinstance(given, bool) or (isinstance(given, str) and given in ("bars", "lines", "off"))):
        raise ArgumentError(f'progress must be "bars", "lines", "off", True, False or None; it is {given!r:.40}')
    person = (sys.stderr is not None and sys.stderr.isatty()) or _in_notebook()
    if given in (False, "off") or (given is None and not person):
        return Silent()
    if given == "bars" or (given in (None, True) and person):
        try:
            return Bars(keep, kept)
        except ImportError:
            if given == "bars":
                raise ArgumentError('progress="bars" needs tqdm: pip install tqdm, or use "lines"') from None
    return Lines(keep, kept)
