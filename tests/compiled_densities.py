"""One curved test density in every form that fellwalk takes, in Python and compiled, each able to fail at a given call.

The density: x0 ~ N(0, 1), x1 | x0 ~ N(x0^2 / 2, 0.6), the other coordinates N(0, 2.385^2), independent. Density and
Hessian product count their calls together; call number `fail_at` misbehaves as `act` says:
"raise" an exception (Python) or return a negative code (compiled), return "outside" (a positive code; minus infinity
in Python), "zero" (minus infinity), "nan", "bad gradient" (NaN in its last entry), "infinite", "unwritten".
"""

import ctypes
import hashlib
import os
import subprocess
import tempfile
from functools import cache
from pathlib import Path

import numpy as np
from scipy import LowLevelCallable
from targets import _build

import fellwalk as fw

ACTS = ("raise", "outside", "zero", "nan", "bad gradient", "infinite", "unwritten")
DENSITY_SIGNATURE = "int (size_t, const double *, double *, double *, void *)"
PRODUCT_SIGNATURE = "int (size_t, const double *, const double *, double *, void *)"

SOURCE = r"""
#include <math.h>
#include <stdint.h>
#include <stddef.h>
#include <time.h>

/* act: place in ACTS; at: position of the call that failed; gate: see waiting(). */
typedef struct { int64_t calls, fail_at, act; volatile int64_t entered, gate; double at[4]; } plan;

static int fails(plan *p, size_t d, const double *x)
{
    if (++p->calls != p->fail_at) return 0;
    for (size_t i = 0; i < d && i < 4; ++i) p->at[i] = x[i];
    return 1;
}

int curved(size_t d, const double *x, double *value, double *gradient, void *context)
{
    plan *p = context;
    const int failing = fails(p, d, x);
    if (failing && p->act == 0) return -7;
    if (failing && p->act == 1) return 3;
    if (failing && p->act == 6) return 0;
    const double r = x[1] - 0.5 * x[0] * x[0];
    double sum = 0.5 * x[0] * x[0] + 0.5 * r * r / 0.6;
    gradient[0] = -x[0] + x[0] * r / 0.6;
    gradient[1] = -r / 0.6;
    for (size_t i = 2; i < d; ++i) {
        sum += 0.5 * x[i] * x[i] / (2.385 * 2.385);
        gradient[i] = -x[i] / (2.385 * 2.385);
    }
    *value = -sum;
    if (failing && p->act == 2) *value = -INFINITY;
    if (failing && p->act == 3) *value = NAN;
    if (failing && p->act == 4) gradient[d - 1] = NAN;
    if (failing && p->act == 5) *value = INFINITY;
    return 0;
}

int curved_product(size_t d, const double *x, const double *v, double *product, void *context)
{
    plan *p = context;
    const int failing = fails(p, d, x);
    if (failing && p->act == 0) return -7;
    if (failing && p->act == 1) return 3;
    if (failing && p->act == 6) return 0;
    const double r = x[1] - 0.5 * x[0] * x[0];
    product[0] = (-1.0 + (r - x[0] * x[0]) / 0.6) * v[0] + x[0] / 0.6 * v[1];
    product[1] = x[0] / 0.6 * v[0] - v[1] / 0.6;
    for (size_t i = 2; i < d; ++i) product[i] = -v[i] / (2.385 * 2.385);
    if (failing) product[d - 1] = NAN;
    return 0;
}

/* A standard normal that from the call `fail_at` (0: never) on waits, at most 20 s, until the gate is opened. */
int waiting(size_t d, const double *x, double *value, double *gradient, void *context)
{
    plan *p = context;
    const struct timespec pause = {0, 1000000};
    if (++p->calls >= p->fail_at && p->fail_at > 0) {
        p->entered = 1;
        for (int i = 0; i < 20000 && !p->gate; ++i) nanosleep(&pause, NULL);
        if (!p->gate) return -1;
    }
    *value = 0.0;
    for (size_t i = 0; i < d; ++i) {
        *value -= 0.5 * x[i] * x[i];
        gradient[i] = -x[i];
    }
    return 0;
}

/* A standard normal without a context. */
int plain(size_t d, const double *x, double *value, double *gradient, void *context)
{
    (void)context;
    *value = 0.0;
    for (size_t i = 0; i < d; ++i) {
        *value -= 0.5 * x[i] * x[i];
        gradient[i] = -x[i];
    }
    return 0;
}

/* Writes a log density only, or a gradient only. */
int half_value(size_t d, const double *x, double *value, double *gradient, void *context)
{
    (void)d, (void)x, (void)gradient, (void)context;
    *value = -1.0;
    return 0;
}

int half_gradient(size_t d, const double *x, double *value, double *gradient, void *context)
{
    (void)value, (void)context;
    for (size_t i = 0; i < d; ++i) gradient[i] = -x[i];
    return 0;
}
"""


class Plan(ctypes.Structure):
    """The context of the compiled functions."""

    _fields_ = (
        ("calls", ctypes.c_int64),
        ("fail_at", ctypes.c_int64),
        ("act", ctypes.c_int64),
        ("entered", ctypes.c_int64),
        ("gate", ctypes.c_int64),
        ("at", ctypes.c_double * 4),
    )


@cache
def library() -> ctypes.CDLL:
    """SOURCE as a shared library, compiled once for each change of its text."""
    command = _build.compiler()
    key = hashlib.sha256((SOURCE + " ".join(command)).encode()).hexdigest()[:20]
    folder = _build._cache_directory(key)
    built = folder / "curved.so"
    if not built.exists():
        source = folder / f"curved-{os.getpid()}.c"
        source.write_text("#define _POSIX_C_SOURCE 199309L\n" + SOURCE, encoding="ascii")
        handle, unfinished = tempfile.mkstemp(suffix=".so", dir=folder)
        os.close(handle)
        subprocess.run([*command, *_build.FLAGS, "-o", unfinished, str(source), "-lm"], check=True)
        source.unlink()
        Path(unfinished).replace(built)
    return ctypes.CDLL(str(built))


DENSITY_TYPES = (ctypes.c_size_t, *[ctypes.POINTER(ctypes.c_double)] * 3, ctypes.c_void_p)
PRODUCT_TYPES = (ctypes.c_size_t, *[ctypes.POINTER(ctypes.c_double)] * 3, ctypes.c_void_p)


def ctypes_function(name: str, plan: Plan | None = None, signature: str | None = None) -> LowLevelCallable:
    """The C function `name`, through ctypes, with `plan` as context; SciPy spells the signature if none is given."""
    function = getattr(library(), name)
    function.restype = ctypes.c_int
    function.argtypes = PRODUCT_TYPES if name.endswith("_product") else DENSITY_TYPES
    if plan is None:
        return LowLevelCallable(function, signature=signature)
    return LowLevelCallable(function, user_data=ctypes.cast(ctypes.pointer(plan), ctypes.c_void_p), signature=signature)


_names: list[ctypes.c_char_p] = []  # a capsule keeps only the pointer to its name


def capsule_function(name: str, signature: str) -> LowLevelCallable:
    """The C function `name` in a bare capsule that claims the signature given, as an extension module makes them."""
    _names.append(ctypes.c_char_p(signature.encode()))
    address = ctypes.cast(getattr(library(), name), ctypes.c_void_p)
    return LowLevelCallable(_build._new_capsule(address, _names[-1], None))


@cache
def numba_function() -> LowLevelCallable:
    """A standard normal compiled by Numba."""
    from numba import carray, cfunc, types

    pointer = types.CPointer(types.float64)

    @cfunc(types.intc(types.uintp, pointer, pointer, pointer, types.voidptr))
    def normal(d, x, value, gradient, context):
        point, slope = carray(x, (d,)), carray(gradient, (d,))
        total = 0.0
        for i in range(d):
            total -= 0.5 * point[i] * point[i]
            slope[i] = -point[i]
        value[0] = total
        return 0

    return LowLevelCallable(normal.ctypes)


@cache
def numba_raising() -> LowLevelCallable:
    """Compiled by Numba and always dividing by zero: Numba prints the exception and returns 0."""
    from numba import cfunc, types

    pointer = types.CPointer(types.float64)

    @cfunc(types.intc(types.uintp, pointer, pointer, pointer, types.voidptr))
    def broken(d, x, value, gradient, context):
        value[0] = 1 // (d - d)
        return 0

    return LowLevelCallable(broken.ctypes)


class Boom(Exception):
    """What the Python forms raise when told to."""


class Curved:
    """The curved density; `form` is "pair", "in place" or "compiled". Tell it where to fail with `fail(call, act)`."""

    def __init__(self, form: str, dimension: int = 2) -> None:
        self.form, self.dimension = form, dimension
        self.plan = Plan()
        self.error: BaseException | None = None
        self.last: list[np.ndarray] = []
        self.kind = Boom
        if form == "compiled":
            self.density = fw.Density(ctypes_function("curved", self.plan, DENSITY_SIGNATURE), dimension,
                                      hessian_product=ctypes_function("curved_product", self.plan, PRODUCT_SIGNATURE))
        else:
            self.density = fw.Density(self.in_place if form == "in place" else self.pair, dimension,
                                      in_place=form == "in place", hessian_product=self.product)

    def fail(self, call: int, act: str) -> None:
        """Call number `call` from here (1: the next one; 0: none) does `act`."""
        self.plan.fail_at = self.plan.calls + call if call else 0
        self.plan.act = ACTS.index(act)
        self.error = None

    @property
    def failed(self) -> bool:
        """Has the call told to fail been made?"""
        return 0 < self.plan.fail_at <= self.plan.calls

    @property
    def at(self) -> np.ndarray:
        """Position of the call that failed."""
        return np.array(self.plan.at[: self.dimension])

    def _act(self, x: np.ndarray) -> str | None:
        self.plan.calls += 1
        if self.plan.calls != self.plan.fail_at:
            return None
        self.plan.at[: self.dimension] = x.tolist()
        act = ACTS[self.plan.act]
        if act == "raise":
            self.error = self.kind("told to")
            raise self.error
        return act

    def _values(self, x: np.ndarray) -> tuple[float, list[float]]:
        x0, x1, *rest = x.tolist()
        r = x1 - 0.5 * x0 * x0
        total = 0.5 * x0 * x0 + 0.5 * r * r / 0.6
        for y in rest:
            total += 0.5 * y * y / (2.385 * 2.385)
        return -total, [-x0 + x0 * r / 0.6, -r / 0.6, *(-y / (2.385 * 2.385) for y in rest)]

    _OUT = {"outside": -np.inf, "zero": -np.inf, "nan": np.nan, "infinite": np.inf}  # noqa: RUF012

    def pair(self, x: np.ndarray) -> tuple[float, object]:
        """f(x) -> (log density, gradient)."""
        act = self._act(x)
        if act in self._OUT:
            return self._OUT[act], None
        value, gradient = self._values(x)
        if act == "bad gradient":
            gradient[-1] = np.nan
        return value, np.array(gradient)

    def in_place(self, x: np.ndarray, gradient: np.ndarray) -> float:
        """f(x, gradient) -> log density."""
        act = self._act(x)
        value, slope = self._values(x)
        if act == "unwritten":
            return value
        gradient[:] = slope
        if act == "bad gradient":
            gradient[-1] = np.nan
        return self._OUT.get(act, value)

    def product(self, x: np.ndarray, p: np.ndarray) -> np.ndarray:
        """f(x, p) -> H(x) p."""
        act = self._act(x)
        x0, x1, *_ = x.tolist()
        v0, v1, *rest = p.tolist()
        r = x1 - 0.5 * x0 * x0
        out = [(-1.0 + (r - x0 * x0) / 0.6) * v0 + x0 / 0.6 * v1, x0 / 0.6 * v0 - v1 / 0.6]
        out += [-v / (2.385 * 2.385) for v in rest]
        return np.array(out) if act is None else np.full(self.dimension, np.nan)
