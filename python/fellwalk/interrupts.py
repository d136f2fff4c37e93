"""Signals during a run: Ctrl-C, and what else is watched, once asks to stop, twice abandons what is in hand."""

from __future__ import annotations

import contextlib
import signal
import threading
from collections.abc import Callable, Iterator

from fellwalk.work import Live

__all__ = ["Interrupts", "watching"]

_watched: list[signal.Signals] = [signal.SIGINT]


@contextlib.contextmanager
def watching(number: signal.Signals) -> Iterator[None]:
    """Runs made inside this context take signal `number` for a Ctrl-C."""
    _watched.append(number)
    try:
        yield
    finally:
        _watched.remove(number)


class Interrupts:
    """The signals that came during one run.

    say: tells a person. wake: called at each signal; must be safe wherever the main thread stands. here: do the blocks
    run in the main thread, between whose lines the handler runs?
    """

    def __init__(self, live: Live, say: Callable[[str], None], wake: Callable[[], None], here: bool) -> None:
        self.live, self.say, self.wake, self.here = live, say, wake, here
        self.count = 0
        self.name = ""
        self.announced = False

    def __call__(self, number: int, frame: object) -> None:
        """The signal handler."""
        self.count += 1
        self.name = self.name or ("Ctrl-C" if number == signal.SIGINT else signal.Signals(number).name)
        self.wake()
        inside = self.here and self.live.inside_density()
        if self.count > 1:
            self.live.interrupt()
        if inside:
            # Only here can nothing of the package be half done: not a line half printed, no finished block in hand.
            with contextlib.suppress(RuntimeError):  # the user's function may be printing itself
                self.announce()
            if self.count > 1:
                raise KeyboardInterrupt  # out of the user's function, which may take long; the chain undoes the rest

    def announce(self) -> None:
        """Say once what has been asked and what comes."""
        if self.count and not self.announced:
            self.announced = True
            self.say(f"{self.name}: stopping at the end of the blocks in hand; once more abandons them")

    @contextlib.contextmanager
    def installed(self) -> Iterator[None]:
        """Take the watched signals over and give them back afterwards; signals that are ignored stay ignored. Outside
        the main thread they are not ours."""
        if threading.current_thread() is not threading.main_thread():
            yield
            return
        before = {}
        try:
            for number in _watched:
                handler = signal.getsignal(number)
                # None: installed from outside Python, so it could not be given back
                if handler not in (signal.SIG_IGN, None) and number not in before:
                    before[number] = handler
                    signal.signal(number, self)
            yield
        finally:
            for number, handler in before.items():
                signal.signal(number, handler)
