"""Progress for people: bars on a terminal or in a notebook, lines in a log, or nothing."""

import sys
import time
from typing import Protocol

import numpy as np

from fellwalk.errors import ArgumentError

__all__ = ["Progress", "choose_progress"]

_BETWEEN_LINES = 5.0  # seconds


class Progress(Protocol):
    """What a run tells."""

    def update(self, chain: int, phase: str, done: int, total: int, facts: np.ndarray) -> None:
        """`done` of `total` transitions of this phase are finished in this chain; facts of the newest block."""

    def say(self, sentence: str) -> None:
        """Something worth a line."""

    def close(self) -> None:
        """The run has ended."""


class Silent:
    """Says nothing."""

    def update(self, chain: int, phase: str, done: int, total: int, facts: np.ndarray) -> None:
        """Nothing."""

    def say(self, sentence: str) -> None:
        """Nothing."""

    def close(self) -> None:
        """Nothing."""


class _Tally:
    """Sums over chains that both forms show."""

    def __init__(self, chains: int, keep: int) -> None:
        self.kept = [0] * chains
        self.keep = keep
        self.settling = set(range(chains))
        self.failed = self.transitions = 0
        self.accepted = 0.0

    def add(self, chain: int, phase: str, done: int, facts: np.ndarray) -> None:
        self.failed += int(np.count_nonzero(facts["failure"]))
        self.transitions += len(facts)
        self.accepted += float(facts["acceptance"].sum())
        if phase == "keep":
            self.settling.discard(chain)
            self.kept[chain] = done

    def text(self) -> str:
        acceptance = self.accepted / max(1, self.transitions)
        settling = f", {len(self.settling)} chains settling" if self.settling else ""
        return f"acceptance {acceptance:.2f}, failed steps {self.failed}{settling}"


class Lines:
    """Plain lines, one every few seconds at most."""

    def __init__(self, chains: int, keep: int, out=None) -> None:
        self.tally = _Tally(chains, keep)
        self.out = out or sys.stderr
        self.begun = self.last = time.monotonic()

    def update(self, chain: int, phase: str, done: int, total: int, facts: np.ndarray) -> None:
        """Add a block; print when the last line is old enough or all is done."""
        self.tally.add(chain, phase, done, facts)
        now = time.monotonic()
        whole = self.tally.keep * len(self.tally.kept)
        if now - self.last >= _BETWEEN_LINES or sum(self.tally.kept) == whole:
            self.last = now
            self.say(f"kept {sum(self.tally.kept)} of {whole} draws after {now - self.begun:.0f} s; {self.tally.text()}")

    def say(self, sentence: str) -> None:
        """One line."""
        print(f"fellwalk: {sentence}", file=self.out, flush=True)

    def close(self) -> None:
        """Nothing is left open."""


class Bars:
    """A bar for all kept draws, and one for each chain when there are few."""

    def __init__(self, chains: int, keep: int) -> None:
        from tqdm.auto import tqdm

        self.tqdm = tqdm
        self.tally = _Tally(chains, keep)
        self.whole = tqdm(total=keep * chains, desc="draws", unit="draw", dynamic_ncols=True)
        self.each = [tqdm(total=keep, desc=f"chain {c + 1} settling", unit="draw", leave=False, dynamic_ncols=True)
                     for c in range(chains if 1 < chains <= 8 else 0)]

    def update(self, chain: int, phase: str, done: int, total: int, facts: np.ndarray) -> None:
        """Add a block."""
        self.tally.add(chain, phase, done, facts)
        self.whole.set_postfix_str(self.tally.text(), refresh=False)
        self.whole.update(sum(self.tally.kept) - self.whole.n)
        if self.each:
            bar = self.each[chain]
            if phase == "keep":
                bar.set_description(f"chain {chain + 1}", refresh=False)
                bar.update(done - bar.n)
            else:
                bar.set_description(f"chain {chain + 1} settling, {done}")

    def say(self, sentence: str) -> None:
        """One line above the bars."""
        self.tqdm.write(f"fellwalk: {sentence}", file=sys.stderr)

    def close(self) -> None:
        """Take the bars of the chains away, leave the total."""
        for bar in self.each:
            bar.close()
        self.whole.close()


def _in_notebook() -> bool:
    shell = sys.modules.get("IPython")
    return shell is not None and getattr(shell.get_ipython(), "kernel", None) is not None


def choose_progress(given: object, chains: int, keep: int) -> Progress:
    """`given`: "bars", "lines", "off", True (bars or lines), False ("off"), or None (bars for a person, else nothing)."""
    if given not in (None, True, False, "bars", "lines", "off"):
        raise ArgumentError(f'progress must be "bars", "lines", "off", True, False or None; it is {given!r:.40}')
    person = sys.stderr.isatty() or _in_notebook()
    if given in (False, "off") or (given is None and not person):
        return Silent()
    if given == "bars" or (given in (None, True) and person):
        try:
            return Bars(chains, keep)
        except ImportError:
            if given == "bars":
                raise ArgumentError('progress="bars" needs tqdm: pip install tqdm, or use "lines"') from None
    return Lines(chains, keep)
