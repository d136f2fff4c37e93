# cython: language_level=3, cdivision=True
"""The seedlings compiled by Cython: `cdef api` puts the function where scipy.LowLevelCallable.from_cython finds it."""
from libc.math cimport log

cdef double[8] DAYS = [2.0, 3.0, 5.0, 6.0, 8.0, 9.0, 11.0, 12.0]
cdef double[8] HEIGHT = [9.1, 12.7, 17.9, 22.4, 27.3, 31.9, 36.2, 41.0]


cdef api int log_density(size_t d, const double *x, double *value, double *gradient, void *context) noexcept nogil:
    cdef double level = x[0], growth = x[1], noise = x[2], miss
    cdef int k
    value[0] = -0.5 * ((level / 10) ** 2 + (growth / 5) ** 2 + (noise / 2) ** 2) - 8 * log(noise)
    gradient[0], gradient[1], gradient[2] = -level / 100, -growth / 25, -noise / 4 - 8 / noise
    for k in range(8):
        miss = (HEIGHT[k] - level - growth * DAYS[k]) / noise
        value[0] -= 0.5 * miss * miss
        gradient[0] += miss / noise
        gradient[1] += miss * DAYS[k] / noise
        gradient[2] += miss * miss / noise
    return 0
