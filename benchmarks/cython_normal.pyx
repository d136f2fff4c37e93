# cython: language_level=3, boundscheck=False, wraparound=False
"""A standard normal as a Cython function, handed over in a capsule: one of the compiled densities that are timed."""
from cpython.pycapsule cimport PyCapsule_New


cdef int normal(size_t d, const double *x, double *value, double *gradient, void *context) noexcept nogil:
    cdef size_t i
    cdef double total = 0.0
    for i in range(d):
        total += x[i] * x[i]
        gradient[i] = -x[i]
    value[0] = -0.5 * total
    return 0


capsule = PyCapsule_New(<void *>normal, "int (size_t, const double *, double *, double *, void *)", NULL)
