"""A compiled density that keeps its intermediate results in a static array, so that two threads disturb each other."""

import ctypes
import hashlib
import subprocess
from functools import cache

from compiled_densities import DENSITY_SIGNATURE
from scipy import LowLevelCallable
from targets import _build

SOURCE = r"""
#include <math.h>
#include <stddef.h>

static double scratch[64];

int shared_scratch(size_t d, const double *x, double *value, double *gradient, void *context)
{
    (void)context;
    for (size_t i = 0; i < d; ++i) scratch[i] = sin(x[i]) * x[i];
    *value = 0.0;
    for (size_t i = 0; i < d; ++i) {
        *value -= scratch[i] + x[i] * x[i];
        gradient[i] = -sin(x[i]) - x[i] * cos(x[i]) - 2.0 * x[i];
    }
    return 0;
}
"""


@cache
def shared_scratch() -> LowLevelCallable:
    """minus sum of x sin x + x^2, up to 64 coordinates."""
    command = _build.compiler()
    key = hashlib.sha256((SOURCE + " ".join(command)).encode()).hexdigest()[:20]
    folder = _build._cache_directory(key)
    built = folder / "shared.so"
    if not built.exists():
        source = folder / "shared.c"
        source.write_text(SOURCE, encoding="ascii")
        subprocess.run([*command, *_build.FLAGS, "-o", str(built), str(source), "-lm"], check=True)
    function = ctypes.CDLL(str(built)).shared_scratch
    function.restype = ctypes.c_int
    function.argtypes = (ctypes.c_size_t, *[ctypes.POINTER(ctypes.c_double)] * 3, ctypes.c_void_p)
    return LowLevelCallable(function, signature=DENSITY_SIGNATURE)
