"""Blocks that can be recomputed from their place, and a writer that the tests run as a process.

    python helpers_record_writer.py MODE FILE

appends blocks of two chains in turn until it is killed ("wal", "rollback"), or until a file-size limit stops it
("full"; "full-close" with no room left to close either), and prints a line for every block whose append has returned.
"""

from __future__ import annotations

import os
import sys

import numpy as np

from fellwalk import record_file
from fellwalk.errors import RecordError
from fellwalk.facts import FACTS
from fellwalk.record import Block, Record

DIMENSION = 7


def make_block(chain: int, phase: str, start: int, size: int = 5, *, failed: bool = True,
               gradients: bool = False) -> Block:
    """The one block that can stand at this place: every number follows from the arguments."""
    rng = np.random.default_rng([chain, phase == "keep", start, size])
    facts = np.zeros(size, FACTS)
    for name in ("log_density", "energy", "log_weight_range", "acceptance", "step_size"):
        facts[name] = rng.normal(size=size)
    facts["steps"] = rng.integers(1, 100, size)
    failures = None
    if failed:
        position = rng.normal(size=(2, DIMENSION))
        failures = (np.array([0, size - 1]), np.array([3, 4], np.int32), position)
    draws = rng.normal(size=(size, DIMENSION)) if phase == "keep" else None
    slopes = rng.normal(size=(size, DIMENSION)) if gradients else None
    return Block(chain, phase, start, facts, state_after(chain, phase, start + size), draws, failures, slopes,
                 {"seconds": float(rng.random())})


def state_after(chain: int, phase: str, stop: int) -> bytes:
    return f"{chain}/{phase}/{stop};".encode() * 40


def expected_draws(chain: int, stop: int, size: int = 5) -> np.ndarray:
    blocks = [make_block(chain, "keep", start, size).draws for start in range(0, stop, size)]
    return np.concatenate(blocks) if blocks else np.empty((0, DIMENSION))


def say(text: str) -> None:
    os.write(1, text.encode() + b"\n")


def write_until_stopped(path: str) -> None:
    with Record.open(path, write=True) as record:
        counts = [record.count(chain, "keep") for chain in (0, 1)]
        say("ready")
        while True:
            for chain in (0, 1):
                record.append_blocks([make_block(chain, "keep", counts[chain])])
                counts[chain] += 5
                say(f"{chain} {counts[chain]}")


def write_until_full(path: str, go_on: bool) -> None:
    import resource
    import signal

    signal.signal(signal.SIGXFSZ, signal.SIG_IGN)
    hard = resource.getrlimit(resource.RLIMIT_FSIZE)[1]
    with Record.open(path, write=True) as record:
        resource.setrlimit(resource.RLIMIT_FSIZE, (200_000, hard))
        start = 0
        while True:
            try:
                record.append_blocks([make_block(0, "keep", start)])
            except RecordError as error:
                say(f"{type(error).__name__}: {error}")
                break
            start += 5
            say(f"0 {start}")
        assert record.count(0, "keep") == start
        resource.setrlimit(resource.RLIMIT_FSIZE, (20_000, hard))
        if go_on:
            resource.setrlimit(resource.RLIMIT_FSIZE, (hard, hard))
            for _ in range(3):
                record.append_blocks([make_block(0, "keep", start)])
                start += 5
            say(f"0 {start}")


if __name__ == "__main__":
    mode, file = sys.argv[1:]
    if mode == "rollback":
        record_file._on_network = lambda path: True
    if mode.startswith("full"):
        write_until_full(file, mode == "full")
    else:
        write_until_stopped(file)
