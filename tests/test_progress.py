"""What a person sees of a run: bars, lines, or nothing."""

import fcntl
import io
import os
import pty
import struct
import subprocess
import sys
import termios
from pathlib import Path

import numpy as np
import pytest
from run_models import python_density

import fellwalk as fw
from fellwalk import progress
from fellwalk.errors import ArgumentError
from fellwalk.facts import FACTS
from fellwalk.progress import Bars, Lines, Silent, choose_progress


def facts(count, accepted=0.5, failed=0):
    found = np.zeros(count, FACTS)
    found["acceptance"] = accepted
    found["failure"][:failed] = 3
    return found


class Clock:
    def __init__(self, monkeypatch):
        self.now = 1000.0
        monkeypatch.setattr(progress.time, "monotonic", lambda: self.now)


def test_lines_tell_draws_acceptance_failures_settling_and_time_left(monkeypatch):
    clock, out = Clock(monkeypatch), io.StringIO()
    lines = Lines(100, [0, 0], out)
    lines.update(0, "settle", 10, facts(10, 0.6, 1))
    assert out.getvalue() == ""
    clock.now += 6
    lines.update(1, "settle", 10, facts(10, 0.4))
    assert out.getvalue() == ("fellwalk: kept 0 of 200 draws after 6 s; acceptance 0.50, failed steps 1, 2 of 2 chains "
                              "settling\n")
    lines.update(0, "keep", 10, facts(10))
    clock.now += 10
    lines.update(0, "keep", 50, facts(40))
    assert out.getvalue().splitlines()[-1] == (
        "fellwalk: kept 50 of 200 draws after 16 s; acceptance 0.50, failed steps 1, 1 of 2 chains settling; about "
        "30 s left")
    lines.update(1, "keep", 100, facts(100))
    lines.update(0, "keep", 100, facts(50))
    assert "kept 200 of 200 draws" in out.getvalue().splitlines()[-1]
    assert "left" not in out.getvalue().splitlines()[-1]


def test_a_resumed_run_counts_what_is_there(monkeypatch):
    clock, out = Clock(monkeypatch), io.StringIO()
    lines = Lines(1000, [500, 400], out)
    lines.update(0, "keep", 510, facts(10))
    clock.now += 10
    lines.update(0, "keep", 600, facts(90))
    assert "kept 1000 of 2000 draws" in out.getvalue()
    assert "about 100 s left" in out.getvalue()


@pytest.mark.parametrize(("seconds", "text"), [(5.4, "5 s"), (119, "119 s"), (600, "10 min"), (9000, "2 h"),
                                               (250000, "3 days")])
def test_spans(seconds, text):
    assert progress._span(seconds) == text


def test_who_gets_what(monkeypatch):
    monkeypatch.setattr(sys, "stderr", io.StringIO())
    assert isinstance(choose_progress(None, 10, [0]), Silent)
    assert isinstance(choose_progress(True, 10, [0]), Lines)
    assert isinstance(choose_progress("lines", 10, [0]), Lines)
    for off in (False, "off"):
        assert isinstance(choose_progress(off, 10, [0]), Silent)
    bars = choose_progress("bars", 10, [0])
    assert isinstance(bars, Bars)
    bars.close()
    monkeypatch.setattr(sys, "stderr", None)
    assert isinstance(choose_progress(None, 10, [0]), Silent)


@pytest.mark.parametrize("given", ["bar", 1, 0, [], np.zeros(2)])
def test_something_else_is_refused(given):
    with pytest.raises(ArgumentError, match='progress must be "bars", "lines", "off"'):
        choose_progress(given, 10, [0])


def test_silent_when_asked(capfd):
    fw.run(python_density(), settle=20, keep=10, chains=2, seed=1, progress="off")
    assert capfd.readouterr() == ("", "")


def test_bars_on_a_terminal():
    """A real terminal, 100 columns wide: a bar for all draws, one for each chain, and no thread left behind."""
    script = ("import threading, fellwalk as fw, run_models\n"
              "r = fw.run(run_models.slow_density(0.0002), settle=50, keep=200, chains=2, seed=1, executor='here')\n"
              "assert threading.active_count() == 1, threading.enumerate()\n")
    driver, terminal = pty.openpty()
    fcntl.ioctl(terminal, termios.TIOCSWINSZ, struct.pack("HHHH", 24, 100, 0, 0))
    process = subprocess.Popen([sys.executable, "-c", script], stderr=terminal, cwd=Path(__file__).parent)
    os.close(terminal)
    seen = b""
    while True:
        try:
            more = os.read(driver, 65536)
        except OSError:  # the other end has closed
            break
        if not more:
            break
        seen += more
    os.close(driver)
    assert process.wait(30) == 0
    text = seen.decode()
    assert "blocks run in this process, one at a time, as asked" in text
    for piece in ("chain 1", "chain 2", "settling", "draws: 100%", "400/400", "failed steps", "acceptance 0."):
        assert piece in text
