"""Densities that the tests of runs use: quick ones, slow ones, and ones that do harm once, in whichever process.

Module level functions, so that every kind of worker process can import or unpickle them. Harm is planned in files, as
it must be seen by all processes and be done once: whoever removes the file does what stands in it.
"""

import os
import signal
import time
from pathlib import Path

import numpy as np

import fellwalk as fw

DIMENSION = 3


def curved(x):
    """x0 ~ N(0, 1), x1 | x0 ~ N(x0^2 / 2, 0.6), x2 ~ N(0, 2.385^2)."""
    x0, x1, x2 = x.tolist()
    r = x1 - 0.5 * x0 * x0
    value = -0.5 * x0 * x0 - 0.5 * r * r / 0.6 - 0.5 * x2 * x2 / 5.688225
    return value, np.array([-x0 + x0 * r / 0.6, -r / 0.6, -x2 / 5.688225])


def curved_product(x, p):
    """Hessian of `curved` at x times p."""
    x0, x1, _ = x.tolist()
    v0, v1, v2 = p.tolist()
    r = x1 - 0.5 * x0 * x0
    return np.array([(-1.0 + (r - x0 * x0) / 0.6) * v0 + x0 / 0.6 * v1, x0 / 0.6 * v0 - v1 / 0.6, -v2 / 5.688225])


START = np.array([0.3, -0.2, 1.1])


def python_density():
    """`curved` as a Python density."""
    return fw.Density(curved, DIMENSION, hessian_product=curved_product, start=START)


def compiled_density():
    """The same density, compiled; the function keeps no state."""
    from compiled_densities import DENSITY_SIGNATURE, PRODUCT_SIGNATURE, Plan, ctypes_function

    plan = Plan()
    made = fw.Density(ctypes_function("curved", plan, DENSITY_SIGNATURE), DIMENSION, start=START,
                      hessian_product=ctypes_function("curved_product", plan, PRODUCT_SIGNATURE))
    made.plan = plan  # lives as long as the density
    return made


def compiled_from_factory():
    """The compiled density for worker processes, each of which makes it for itself."""
    return fw.Density.factory(compiled_density)


def slow_density(seconds=0.0005):
    """`curved`, each evaluation taking a while without using the processor."""

    def slow(x):
        time.sleep(seconds)
        return curved(x)

    return fw.Density(slow, DIMENSION, start=START)


class Boom(Exception):
    """What a density raises when the plan says so."""


def _take(path):
    """The text of the file, for the one who removes it; else None."""
    try:
        text = Path(path).read_text()
        os.unlink(path)
        return text
    except FileNotFoundError:
        return None


def harmed_density(folder, seconds=0.0002):
    """`curved`, in which whoever finds one of the files kill, raise or unpicklable in `folder` does it, once each."""

    def harmed(x):
        if seconds:
            time.sleep(seconds)
        if os.path.exists(f"{folder}/armed"):
            if _take(f"{folder}/kill") is not None:
                os.kill(os.getpid(), signal.SIGKILL)
            if _take(f"{folder}/raise") is not None:
                raise Boom("told to")
        return curved(x)

    return fw.Density(harmed, DIMENSION, start=START)


def hanging_density():
    """`slow_density`, which hangs once for HANG_SECONDS when the file HANG appears."""
    path, seconds = os.environ.get("HANG", "/nowhere/at/all"), float(os.environ.get("HANG_SECONDS", "0"))

    def hanging(x):
        time.sleep(0.0005)
        if os.path.exists(path) and _take(path) is not None:
            time.sleep(seconds)
        return curved(x)

    return fw.Density(hanging, DIMENSION, start=START)


def elsewhere_density(home, how):
    """`curved` in process `home`; in another process as `how` says."""

    def differing(x):
        value, gradient = curved(x)
        if os.getpid() != home:
            if how == "rounding":
                value *= 1 + 2.0**-50
            if how == "other":
                value -= 1e-3
            if how == "raise":
                raise Boom("no data here")
        return value, gradient

    return fw.Density(differing, DIMENSION, start=START)


def counted_density(path):
    """`curved`, every call of which adds a byte to a file."""

    def counted(x):
        with open(path, "ab") as file:
            file.write(b".")
        return curved(x)

    return fw.Density(counted, DIMENSION, start=START)


class Unpicklable(Exception):
    """Cannot be unpickled, as its arguments are not those it was made with."""

    def __init__(self, first, second):
        super().__init__(f"{first} and {second}")


def raising_density(after, kind):
    """`curved`, which raises after so many calls, those before it was sent included."""
    calls = [0]

    def raising(x):
        calls[0] += 1
        if calls[0] > after:
            raise Unpicklable("this", "that") if kind == "unpicklable" else Boom("in the middle")
        return curved(x)

    return fw.Density(raising, DIMENSION, start=START)


def blas_density(path):
    """`curved`, which leaves the numbers of threads of the BLAS libraries in a file for each process."""

    def telling(x):
        import threadpoolctl

        threads = [library["num_threads"] for library in threadpoolctl.threadpool_info()]
        Path(f"{path}/{os.getpid()}").write_text(" ".join(map(str, threads)))
        return curved(x)

    return fw.Density(telling, DIMENSION, start=START)


def deadly_density(home, calls):
    """`curved`, which kills every process but `home` after so many calls there (1: that which tries it)."""
    made = []

    def deadly(x):
        if os.getpid() != home:
            if len(made) == calls:
                os.kill(os.getpid(), signal.SIGKILL)
            made.append(True)
        return curved(x)

    return fw.Density(deadly, DIMENSION, start=START)


def busy_density():
    """`curved`, each evaluation taking a while with the processor, without asking any clock."""

    def busy(x):
        sum(range(12_000))
        return curved(x)

    return fw.Density(busy, DIMENSION, start=START)


def other_dimension():
    """Another model, of two coordinates."""
    return fw.Density(lambda x: (-0.5 * float(x @ x), -x), 2, start=[0.1, 0.2])


def other_data():
    """`curved` with other data."""
    return fw.Density(lambda x: (curved(x)[0] - 0.01 * float(x @ x), curved(x)[1] - 0.02 * x), DIMENSION, start=START)


def other_names():
    """`curved` with other names."""
    return fw.Density(curved, DIMENSION, names=["a", "b", "c"], start=START)
