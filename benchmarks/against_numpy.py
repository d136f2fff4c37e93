"""How much faster than what a user would write: NumPy steps, and steps with a dense metric and scipy.linalg's Cholesky.

    python benchmarks/against_numpy.py            two minutes of one processor; --quick: half a minute

The same steps from the same places, which must end in the same place before anything is timed. step_time.py has every
motion and dimension; here are the lines that have a bound. Net times leave out each side's own density; medians of
interleaved repeats. NumPy makes an array for every result: where the C library gives memory of that size back to the
system at once, much of its time is that of fresh pages. "Memory kept" asks the C library to keep it (mallopt, as
MALLOC_MMAP_THRESHOLD_ and MALLOC_TRIM_THRESHOLD_ would), and has the bound; "as it comes" is a process of its own.
"""

import argparse
import ctypes
import json
import subprocess
import sys
import time

import numpy as np
import numpy_steps
from common import Callback, busy, interleaved, machine, short_time, table, targets, timer
from scipy import linalg
from step_time import STEP, Case, NumpyNormal


class Dense(numpy_steps.Lagrangian):
    """The surrogate split step with the metric as a matrix, factorised at every new point."""

    def _force(self, at: numpy_steps.Place) -> tuple[np.ndarray, np.ndarray, float]:
        metric = np.diag(1.0 / self.s) + self.beta * np.outer(at.g, at.g)
        factor = linalg.cho_factor(metric, lower=True, overwrite_a=True, check_finite=False)
        n = self.s * at.g
        within = float(at.g @ linalg.cho_solve(factor, at.g, check_finite=False))
        ratio = self.beta * (1.0 - self.beta * within)  # beta / L, by Sherman & Morrison
        b = linalg.cho_solve(factor, -at.g + ratio * at.hn, check_finite=False)
        return n, b, ratio


def keep_memory() -> bool:
    """From now on the C library keeps what is freed, up to 1 GiB. False: it is not glibc."""
    trim, mmap = -1, -3  # M_TRIM_THRESHOLD and M_MMAP_THRESHOLD of malloc.h
    mallopt = getattr(ctypes.CDLL(None), "mallopt", None)
    return mallopt is not None and bool(mallopt(mmap, 1 << 30) and mallopt(trim, 1 << 30))


def against_steps(d: int, name: str, seconds: float, repeats: int) -> tuple[float, float, float]:
    """Net seconds a step: ours, NumPy's; and the median of their ratios."""
    case, normal = Case(name, d), NumpyNormal()
    ours, theirs = case.pure(seconds)
    callback = Callback(targets.standard_normal(d), "standard_normal")
    calls = case.calls(False)
    held: list[object] = [None] * 8

    def gradients(n: int) -> None:
        for i in range(n):
            held[i % 8] = normal.gradient(callback.x)

    found = interleaved({"ours": ours, "theirs": theirs, "own": timer(callback.gradients, seconds),
                         "their own": timer(gradients, seconds)}, repeats)
    net = found["ours"] - calls[0][0] * found["own"]
    their_net = found["theirs"] - calls[1][0] * found["their own"]
    return np.median(net), np.median(their_net), np.median(their_net / net)


def against_dense(d: int, seconds: float) -> tuple[float, float, float]:
    """Whole seconds a surrogate step: ours, and with a dense metric; and the median of their ratios."""
    case = Case("Lagrangian, surrogate, split", d)
    dense = Dense(NumpyNormal(), case.s, case.beta, "split", "surrogate")
    end, ours = numpy_steps.integrate(dense, case.x, case.v, STEP, 2), case.integrate(2)
    if not np.allclose(end.x, ours.position, rtol=0, atol=1e-10 * np.abs(case.x).max()):
        raise RuntimeError("the dense metric ends elsewhere")

    def theirs() -> float:
        begun = time.thread_time()
        numpy_steps.integrate(dense, case.x, case.v, STEP, 2)
        return (time.thread_time() - begun) / 2

    found = interleaved({"ours": case.pure(seconds)[0], "theirs": theirs}, 5)
    return np.median(found["ours"]), np.median(found["theirs"]), np.median(found["theirs"] / found["ours"])


def lines(seconds: float, repeats: int) -> list[list[str]]:
    """One row a line."""
    rows = []
    for name in ("leapfrog", "Lagrangian, surrogate, split"):
        for d, bound in ((10, 50), (100_000, 4)):
            rows.append([name, f"{d}", *against_steps(d, name, seconds, repeats), bound])
    rows.append(["surrogate, dense metric", "1000", *against_dense(1000, seconds), 200])
    return rows


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--quick", action="store_true")
    parser.add_argument("--as-it-comes", action="store_true", help="rows as JSON, the C library left as it is")
    options = parser.parse_args()
    seconds, repeats = (0.01, 5) if options.quick else (0.05, 9)
    if options.as_it_comes:
        print(json.dumps(lines(seconds, repeats)))
        return
    print(f"{machine()}\nProcessor time, medians of {repeats} interleaved repeats, one thread; {busy()} before.\n")
    other = subprocess.run([sys.executable, __file__, "--as-it-comes", *(["--quick"] if options.quick else [])],
                           check=True, capture_output=True, text=True).stdout
    if not keep_memory():
        print("This C library has no mallopt: memory is not kept.\n")
    rows = [[name, d, short_time(ours), short_time(theirs), f"{ratio:.3g}", f"{comes[4]:.3g}", str(bound),
             "yes" if ratio >= bound else "NO"]
            for (name, d, ours, theirs, ratio, bound), comes in zip(lines(seconds, repeats), json.loads(other),
                                                                    strict=True)]
    print(table(["step", "d", "ours", "NumPy, memory kept", "NumPy / ours", "as it comes", "bound", "kept"], rows))
    print(f"\n{busy()} after.")


if __name__ == "__main__":
    main()
