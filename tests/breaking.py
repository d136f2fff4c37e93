"""One density in any dimension, in Python and compiled (breaking.c), that breaks in a chosen way at a chosen call."""

import ctypes
import subprocess
import tempfile
from functools import cache
from pathlib import Path

import numpy as np
from scipy import LowLevelCallable
from targets import _build

import fellwalk as fw

# Act: status of the call that it ends.
ACTS = {
    "stop": -1, "outside": 1, "not written": -2, "zero": 2, "nan": 3, "infinite value": -3, "gradient nan": 4,
    "gradient infinite": 4, "energy infinite": 8, "cliff": 0,
}  # fmt: skip
FORMS = ("compiled", "pair", "in place")


class Plan(ctypes.Structure):
    """`plan` of breaking.c."""

    _fields_ = (*[(name, ctypes.c_int64) for name in ("calls", "breaks_at", "act")], ("at", ctypes.c_void_p))


@cache
def library() -> ctypes.CDLL:
    """breaking.c, compiled."""
    out = Path(tempfile.mkdtemp(prefix="fellwalk-breaking-")) / "breaking.so"
    source = Path(__file__).with_suffix(".c")
    subprocess.run([*_build.compiler(), *_build.FLAGS, "-o", str(out), str(source), "-lm"], check=True)
    return ctypes.CDLL(str(out))


class Stop(Exception):
    """What the Python forms raise."""


class Breaking:
    """The density in one form; `called`, where given, is told the number of every call of a Python form."""

    def __init__(self, form: str, dimension: int, called=None) -> None:
        self.at = np.full(dimension, np.nan)
        self.plan = Plan(at=self.at.ctypes.data)
        self.called = called
        if form == "compiled":
            function = library().breaking
            function.restype = ctypes.c_int
            function.argtypes = [ctypes.c_size_t, *[ctypes.POINTER(ctypes.c_double)] * 3, ctypes.c_void_p]
            made = LowLevelCallable(function, user_data=ctypes.cast(ctypes.pointer(self.plan), ctypes.c_void_p),
                                    signature="int (size_t, const double *, double *, double *, void *)")
            self.density = fw.Density(made, dimension)
        else:
            self.density = fw.Density(self.in_place if form == "in place" else self.pair, dimension,
                                      in_place=form == "in place")

    def breaks(self, call: int, act: str) -> None:
        """Call number `call` from the first one on (0: none) does `act`."""
        self.plan.breaks_at, self.plan.act = call, list(ACTS).index(act)

    def pair(self, x: np.ndarray) -> tuple[float, np.ndarray]:
        """As a function of x alone."""
        self.plan.calls += 1
        if self.called:
            self.called(self.plan.calls)
        act = list(ACTS)[self.plan.act] if self.plan.calls == self.plan.breaks_at else None
        if act:
            self.at[:] = x
        if act == "stop":
            raise Stop
        with np.errstate(over="ignore"):
            value, gradient = -float(np.sum(x * x * (0.5 + 0.025 * x * x))), -x * (1.0 + 0.1 * x * x)
        value = {"outside": -np.inf, "zero": -np.inf, "nan": np.nan, "infinite value": np.inf,
                 "energy infinite": -1.79769313e308, "cliff": value - 1e5}.get(act, value)
        if act == "gradient nan":
            gradient[-1] = np.nan
        if act == "gradient infinite":
            gradient[len(x) // 2] = np.inf
        if act == "energy infinite":
            gradient[0] = 1e153
        return value, gradient

    def in_place(self, x: np.ndarray, gradient: np.ndarray) -> float:
        """Writing into `gradient`."""
        value, found = self.pair(x)
        if list(ACTS)[self.plan.act] != "not written" or self.plan.calls != self.plan.breaks_at:
            gradient[:] = found
        return value
