# cython: language_level=3, boundscheck=False
"""A program of a user of fellwalk: densities in C and in Cython, and a chain that never calls Python."""
import numpy as np

from cpython.pycapsule cimport PyCapsule_GetPointer
from libc.string cimport memset
from numpy.random cimport bitgen_t
from numpy.random.c_distributions cimport random_standard_normal_fill

from fellwalk.core cimport *


cdef extern from "ridge.h" nogil:
    ctypedef struct ridge_data:
        double bend
        double width
    int ridge(size_t d, const double *x, double *value, double *gradient, void *context) noexcept

cdef ridge_data usual
usual.bend, usual.width = 0.3, 0.8


cdef api int bent(size_t d, const double *x, double *value, double *gradient, void *context) noexcept nogil:
    """The density written in C."""
    return ridge(d, x, value, gradient, &usual)


cdef api int linked(size_t d, const double *x, double *value, double *gradient, void *context) noexcept nogil:
    """A density written in Cython: x[0] ~ N(0, 1), x[i] ~ N(0.7 x[i - 1], 0.51)."""
    cdef double total = -0.5 * x[0] * x[0], miss
    cdef size_t i
    gradient[0] = -x[0]
    for i in range(1, d):
        miss = x[i] - 0.7 * x[i - 1]
        total -= 0.5 * miss * miss / 0.51
        gradient[i] = -miss / 0.51
        gradient[i - 1] += 0.7 * miss / 0.51
    value[0] = total
    return 0


cdef fw_density named(str which) except NULL:
    if which == "bent":
        return <fw_density>bent
    if which == "linked":
        return <fw_density>linked
    raise ValueError(which)


def evaluate(str which, double[::1] x not None):
    """(log density, gradient): the same functions as Python sees them."""
    cdef double value = 0.0
    gradient = np.empty(x.shape[0])
    cdef double[::1] to = gradient
    named(which)(<size_t>x.shape[0], &x[0], &value, &to[0], NULL)
    return value, gradient


# ---- random numbers: those of NumPy's PCG64DXSM ---------------------------------------------------------------------

cdef void normals(void *state, size_t n, double *out) noexcept nogil:
    random_standard_normal_fill(<bitgen_t *>state, <Py_ssize_t>n, out)


cdef double uniform(void *state) noexcept nogil:
    cdef bitgen_t *bits = <bitgen_t *>state
    return bits.next_double(bits.state)


# ---- the chain ------------------------------------------------------------------------------------------------------

cdef fw_settings settings(dict plan):
    """Leapfrog motion, no-U-turn paths; numbers by name."""
    cdef fw_settings s
    memset(&s, 0, sizeof(s))
    s.motion, s.path = "leapfrog", "no-u-turn"
    s.scheme, s.curvature, s.turn = FW_SPLIT, FW_SURROGATE, FW_TURN_BASE
    s.bend, s.beta, s.steps, s.doublings = plan["bend"], plan["beta"], plan["steps"], plan["doublings"]
    s.halvings, s.halving_bound = plan["halvings"], plan["halving_bound"]
    s.step_size, s.acceptance = plan["step_size"], plan["acceptance"]
    s.settle_least, s.settle_most = plan["settle_least"], plan["settle_most"]
    s.rank, s.rank_fixed, s.adapt_step, s.adapt_scale = FW_MAX_DIRECTIONS, 0, 1, 1
    return s


def walk(str which, seed, double[::1] start not None, dict plan not None, size_t keep):
    """(draws (keep, d), log densities (keep,), state bytes) of a chain that settles, then keeps; all without the GIL."""
    generator = np.random.PCG64DXSM(np.random.SeedSequence(seed))
    draws, state = np.empty((keep, start.shape[0])), None
    facts = np.empty(keep, dtype=[("log_density", "f8"), ("rest", "V48")])
    cdef double[:, ::1] to = draws
    cdef char[::1] raw = facts.view(np.int8), bytes_
    cdef fw_target target
    cdef fw_random random
    cdef fw_settings set_ = settings(plan)
    cdef fw_chain *chain = NULL
    cdef fw_output out
    cdef size_t done = 0
    cdef int status
    if facts.itemsize != sizeof(fw_facts):
        raise ImportError("fellwalk's facts have another layout than this program was written for")
    memset(&target, 0, sizeof(target))
    memset(&random, 0, sizeof(random))
    memset(&out, 0, sizeof(out))
    target.dimension, target.density = <size_t>start.shape[0], named(which)
    random.normals, random.uniform = normals, uniform
    random.state = PyCapsule_GetPointer(generator.capsule, "BitGenerator")
    out.draws, out.facts = &to[0, 0], <fw_facts *>&raw[0]
    with nogil:
        status = fw_chain_new(&target, &random, &set_, &chain)
        if status == FW_OK:
            status = fw_chain_start(chain, &start[0])
        if status == FW_OK:
            status = fw_chain_run(chain, set_.settle_most, NULL, &done)
        if status == FW_OK:
            status = fw_chain_run(chain, keep, &out, &done)
    if status == FW_OK:
        state = bytearray(fw_chain_state_bytes(chain))
        bytes_ = state
        status = fw_chain_export(chain, &bytes_[0], <size_t>bytes_.shape[0])
    fw_chain_free(chain)
    if status != FW_OK:
        raise RuntimeError(fw_sentence(status).decode())
    return draws, facts["log_density"], bytes(state)
