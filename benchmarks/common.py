"""What the benchmarks share: the machine in one line, interleaved timing, compiled densities timed from C, tables.

Times are processor time of the thread, not of the clock on the wall: on a machine with other work to do, waiting
for a turn says nothing of the code. What others do to caches and memory stays in the numbers; ratios feel it less.
"""

import ctypes
import os
import platform
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable, Mapping, Sequence
from functools import cache
from pathlib import Path

# One thread for NumPy's linear algebra, set before it is loaded: both sides of a comparison get one core.
for _name in ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS"):
    os.environ.setdefault(_name, "1")

import numpy as np  # noqa: E402

HERE = Path(__file__).resolve().parent
sys.path.insert(0, str(HERE.parent / "tests"))

import targets  # noqa: E402
from targets import _build  # noqa: E402

import fellwalk as fw  # noqa: E402


def machine() -> str:
    """Processor, cores, system and versions in one line."""
    name = platform.processor() or platform.machine()
    info = Path("/proc/cpuinfo")
    if info.exists():
        models = [
            line.split(":", 1)[1].strip() for line in info.read_text().splitlines() if line.startswith("model name")
        ]
        name = models[0] if models else name
    said = subprocess.run([*_build.compiler(), "--version"], capture_output=True, text=True, check=False).stdout
    compiler = said.splitlines()[0] if said else "unknown compiler"
    return (
        f"{name}, {os.cpu_count()} cores; {platform.system()} {platform.machine()}; "
        f"Python {platform.python_version()}, NumPy {np.__version__}, {compiler}"
    )


def busy() -> str:
    """How busy the machine is: the load of the last minute, where the system tells."""
    return f"load {os.getloadavg()[0]:.1f}" if hasattr(os, "getloadavg") else "load unknown"


def rounds_for(work: Callable[[int], None], seconds: float) -> int:
    """A number n such that work(n) takes about `seconds`; at least 1."""
    n = 1
    while True:
        start = time.thread_time()
        work(n)
        spent = time.thread_time() - start
        if spent >= 0.25 * seconds or n >= 1 << 30:
            return max(1, int(n * seconds / max(spent, 1e-9)))
        n = int(n * min(max(2.0, 0.5 * seconds / max(spent, 1e-9)), 64.0))


def interleaved(works: Mapping[str, Callable[[], float]], repeats: int) -> dict[str, np.ndarray]:
    """Times (repeats,) of each work, which returns its own time in seconds a unit; all are done once before any again.

    So what slows the machine down for a while slows all of them, and ratios within a repeat stay comparable.
    """
    for work in works.values():
        work()
    found: dict[str, list[float]] = {name: [] for name in works}
    for _ in range(repeats):
        for name, work in works.items():
            found[name].append(work())
    return {name: np.array(times) for name, times in found.items()}


@cache
def _repeat() -> ctypes.CDLL:
    directory = Path(tempfile.mkdtemp(prefix="fellwalk-benchmarks-"))
    library = directory / "repeat.so"
    subprocess.run(
        [*_build.compiler(), "-O2", "-shared", "-fPIC", "-o", str(library), str(HERE / "repeat.c")], check=True
    )
    return ctypes.CDLL(str(library))


class Callback:
    """The compiled callbacks of a target, called n times from C: times without Python's own."""

    def __init__(self, target: targets.Target, c_name: str) -> None:
        self.d, self.context = target.dimension, target.context
        self.x = np.random.default_rng(1).standard_normal(self.d)
        self.out, self.value = np.empty(self.d), np.empty(1)
        self.functions = [
            ctypes.cast(getattr(_build.library(), name), ctypes.c_void_p) for name in (c_name, f"{c_name}_product")
        ]

    def _call(self, which: str, function: ctypes.c_void_p, n: int, middle: np.ndarray) -> None:
        context = None if self.context is None else self.context.ctypes.data
        pointers = [ctypes.c_void_p(array.ctypes.data) for array in (self.x, middle, self.out)]
        repeat = getattr(_repeat(), which)
        if repeat(function, ctypes.c_long(n), ctypes.c_size_t(self.d), *pointers, ctypes.c_void_p(context)):
            raise RuntimeError(f"the callback of {which} failed")

    def gradients(self, n: int) -> None:
        """n calls of the log density."""
        self._call("repeat_density", self.functions[0], n, self.value)

    def products(self, n: int) -> None:
        """n calls of the Hessian product."""
        self._call("repeat_product", self.functions[1], n, self.x)


def timer(work: Callable[[int], None], seconds: float) -> Callable[[], float]:
    """A function that times work(n), n chosen now for about `seconds`, and returns the seconds for one of the n."""
    n = rounds_for(work, seconds)

    def timed() -> float:
        start = time.thread_time()
        work(n)
        return (time.thread_time() - start) / n

    return timed


def table(head: Sequence[str], rows: Sequence[Sequence[str]]) -> str:
    """A Markdown table, numbers to the right."""
    widths = [max(len(row[i]) for row in [head, *rows]) for i in range(len(head))]
    lines = [
        [cell.ljust(w) if i == 0 else cell.rjust(w) for i, (cell, w) in enumerate(zip(row, widths, strict=True))]
        for row in [head, *rows]
    ]
    rule = ["-" * w if i == 0 else "-" * (w - 1) + ":" for i, w in enumerate(widths)]
    return "\n".join("| " + " | ".join(line) + " |" for line in [lines[0], rule, *lines[1:]])


def short_time(seconds: float) -> str:
    """Three digits and a unit."""
    for unit, size in (("s", 1.0), ("ms", 1e-3), ("us", 1e-6)):
        if abs(seconds) >= size:
            return f"{seconds / size:.3g} {unit}"
    return f"{seconds / 1e-9:.3g} ns"


__all__ = ["Callback", "busy", "fw", "interleaved", "machine", "rounds_for", "short_time", "table", "targets", "timer"]
