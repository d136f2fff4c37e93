"""The seedlings compiled by Numba: called from the core without Python, so that chains run on threads."""

import math

import numba
from numba import types
from scipy import LowLevelCallable
from seedlings_numpy import DAYS, HEIGHT, parameters

import fellwalk as fw

pointer = types.CPointer(types.double)


@numba.cfunc(types.intc(types.uintp, pointer, pointer, pointer, types.voidptr))
def log_density(d, x, value, gradient, context):
    level, growth, noise = x[0], x[1], x[2]
    total = -0.5 * ((level / 10) ** 2 + (growth / 5) ** 2 + (noise / 2) ** 2) - len(DAYS) * math.log(noise)
    a, b, c = -level / 100, -growth / 25, -noise / 4 - len(DAYS) / noise
    for k in range(len(DAYS)):
        miss = (HEIGHT[k] - level - growth * DAYS[k]) / noise
        total -= 0.5 * miss * miss
        a += miss / noise
        b += miss * DAYS[k] / noise
        c += miss * miss / noise
    value[0] = total
    gradient[0], gradient[1], gradient[2] = a, b, c
    return 0


density = fw.Density(LowLevelCallable(log_density.ctypes), parameters, start=[0.0, 3.0, 1.0])
