"""How much faster than what a user would write: NumPy steps, and steps with a dense metric and scipy.linalg's Cholesky.

    python benchmarks/against_numpy.py            two minutes of one processor; --quick: half a minute

The same steps from the same places, which must end in the same place before anything is timed. step_time.py has every
motion and dimension; here are the lines that have a bound. Net times leave out each side's own density.
"""

import argparse
import time

import numpy as np
import numpy_steps
from common import Callback, busy, machine, short_time, table, targets, timer
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


def least_of(timed, repeats: int) -> float:
    """Least of some repeats."""
    return min(timed() for _ in range(repeats))


def against_steps(d: int, name: str, seconds: float, repeats: int) -> tuple[float, float]:
    """Net seconds a step: ours, NumPy's."""
    case, normal = Case(name, d), NumpyNormal()
    ours, theirs = case.pure(seconds)
    callback = Callback(targets.standard_normal(d), "standard_normal")
    calls = case.calls(False)
    own = least_of(timer(callback.gradients, seconds), repeats)
    held: list[object] = [None] * 8

    def gradients(n: int) -> None:
        for i in range(n):
            held[i % 8] = normal.gradient(callback.x)

    their_own = least_of(timer(gradients, seconds), repeats)
    return (least_of(ours, repeats) - calls[0][0] * own, least_of(theirs, repeats) - calls[1][0] * their_own)


def against_dense(d: int, seconds: float) -> tuple[float, float]:
    """Whole seconds a surrogate step: ours, and with a dense metric."""
    case = Case("Lagrangian, surrogate, split", d)
    dense = Dense(NumpyNormal(), case.s, case.beta, "split", "surrogate")
    end, ours = numpy_steps.integrate(dense, case.x, case.v, STEP, 2), case.integrate(2)
    if not np.allclose(end.x, ours.position, rtol=0, atol=1e-10 * np.abs(case.x).max()):
        raise RuntimeError("the dense metric ends elsewhere")
    found = []
    for _ in range(3):
        begun = time.thread_time()
        numpy_steps.integrate(dense, case.x, case.v, STEP, 2)
        found.append((time.thread_time() - begun) / 2)
    return least_of(case.pure(seconds)[0], 5), min(found)


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--quick", action="store_true")
    quick = parser.parse_args().quick
    seconds, repeats = (0.01, 5) if quick else (0.05, 9)
    print(f"{machine()}\nProcessor time, least of repeats, one thread; {busy()} before.\n")
    rows = []
    for name in ("leapfrog", "Lagrangian, surrogate, split"):
        for d, bound in ((10, 50), (100_000, 4)):
            ours, theirs = against_steps(d, name, seconds, repeats)
            rows.append([name, f"{d}", short_time(ours), short_time(theirs), f"{theirs / ours:.3g}", str(bound),
                         "yes" if theirs >= bound * ours else "NO"])
    ours, theirs = against_dense(1000, seconds)
    rows.append(["surrogate, dense metric", "1000", short_time(ours), short_time(theirs), f"{theirs / ours:.3g}", "200",
                 "yes" if theirs >= 200 * ours else "NO"])
    print(table(["step", "d", "ours", "theirs", "theirs / ours", "bound", "kept"], rows))
    print(f"\n{busy()} after.")


if __name__ == "__main__":
    main()
