# cython: language_level=3, boundscheck=False, wraparound=False, embedsignature=True
# cython: freethreading_compatible=True
"""The thin binding: calls of the user's functions, random numbers, one compiled chain, the O(d) metric operations.

Nothing here decides anything; the decisions are in the core below and in the Python modules above.
"""
import numpy as np

cimport numpy as cnp
from cpython.mem cimport PyMem_Free, PyMem_Malloc
from cpython.pycapsule cimport PyCapsule_GetContext, PyCapsule_GetName, PyCapsule_GetPointer
from cpython.pythread cimport PyThread_get_thread_ident
from cpython.ref cimport PyObject
from libc.stdint cimport int32_t, int64_t, uint32_t, uint64_t
from libc.string cimport memcmp, memcpy
from numpy.random cimport bitgen_t
from numpy.random.c_distributions cimport random_standard_normal_fill

from fellwalk.core cimport *

from fellwalk.errors import ArgumentError, BusyError, DensityError, ShapeError

cnp.import_array()

cdef extern from "Python.h":
    Py_ssize_t Py_REFCNT(PyObject *o)
    double PyFloat_AsDouble(object o) except? -1.0

FACTS = np.dtype([
    ("log_density", "<f8"), ("energy", "<f8"), ("log_weight_range", "<f8"), ("acceptance", "<f8"),
    ("step_size", "<f8"), ("steps", "<i4"), ("gradients", "<i4"), ("products", "<i4"), ("failure", "<i4"),
])
if FACTS.itemsize != sizeof(fw_facts):
    raise ImportError("fellwalk was built with another layout of its per-draw facts; build it again")

MAX_DIRECTIONS = FW_MAX_DIRECTIONS
MAX_DOUBLINGS = FW_MAX_DOUBLINGS
MAX_HALVINGS = FW_MAX_HALVINGS

cdef dict _schemes = {"split": FW_SPLIT, "semi-explicit": FW_SEMI_EXPLICIT}
cdef dict _curvatures = {"surrogate": FW_SURROGATE, "difference": FW_DIFFERENCE, "product": FW_PRODUCT}
cdef dict _turns = {"base": FW_TURN_BASE, "metric": FW_TURN_METRIC}


def sentence(int status):
    """The core's sentence for a status code."""
    return fw_sentence(status).decode("ascii")


SENTENCES = {code: sentence(code) for code in range(-11, 12)}


# ---- compiled functions of the user ---------------------------------------------------------------------------------

DENSITY_SIGNATURE = "int (size_t, const double *, double *, double *, void *)"
PRODUCT_SIGNATURE = "int (size_t, const double *, const double *, double *, void *)"

_WORDS = {"size_t", "unsigned long", "unsigned long long", "long", "long long", "ptrdiff_t", "Py_ssize_t", "ssize_t",
          "intptr_t", "uintptr_t", "uint64_t", "int64_t", "long unsigned int", "unsigned long int", "long int",
          "npy_intp", "npy_uintp", "ulong", "ulonglong", "longlong"}
_INTS = {"int", "int32_t", "npy_int32"}


def normal_signature(str text):
    """A C signature with `const` and spacing dropped and the pointer-sized integers spelled alike."""
    head, _, tail = text.partition("(")
    parts = [head] + tail.rpartition(")")[0].split(",")
    seen = []
    for part in parts:
        stars = part.count("*")
        words = " ".join(word for word in part.replace("*", " ").split() if word != "const")
        if words in _WORDS:
            words = "word"
        elif words in _INTS:
            words = "int"
        seen.append(words + "*" * stars)
    return f"{seen[0]} ({', '.join(seen[1:])})"


cdef void *compiled_pointer(object function, str wanted, str what, void **context) except NULL:
    """Pointer and user data of a scipy.LowLevelCallable, its signature checked."""
    cdef object capsule = tuple.__getitem__(function, 0)
    cdef const char *name = PyCapsule_GetName(capsule)
    cdef str found = name.decode("ascii") if name != NULL else ""
    if normal_signature(found) != normal_signature(wanted):
        raise DensityError(
            f"the compiled {what} has the signature {found!r}; fellwalk calls it as {wanted!r}. "
            "Compile it with that signature, or give the signature when you make the LowLevelCallable")
    context[0] = PyCapsule_GetContext(capsule)
    return PyCapsule_GetPointer(capsule, name)


# ---- what was not written, and what was called -----------------------------------------------------------------------

cdef double mark() noexcept nogil:
    """A NaN that arithmetic does not produce."""
    cdef uint64_t bits = 0x7ff8f311a1c0ffee
    cdef double x
    memcpy(&x, &bits, sizeof(double))
    return x


UNWRITTEN = mark()


def is_unwritten(double x):
    """Is x the NaN that stands where nothing has been written yet?"""
    cdef double marked = mark()
    return memcmp(&x, &marked, sizeof(double)) == 0


# Padding keeps what two threads write at every step out of one line of the cache.
cdef struct calls:
    char before[64]
    fw_density density
    void *density_context
    fw_hessian_product product
    void *product_context
    uint64_t gradients, products
    char after[64]


cdef int counted_density(size_t d, const double *x, double *value, double *gradient, void *context) noexcept nogil:
    cdef calls *user = <calls *>context
    user.gradients += 1
    return user.density(d, x, value, gradient, user.density_context)


cdef int counted_product(size_t d, const double *x, const double *p, double *product, void *context) noexcept nogil:
    cdef calls *user = <calls *>context
    user.products += 1
    return user.product(d, x, p, product, user.product_context)


# ---- Python functions of the user ------------------------------------------------------------------------------------

cdef class Target:
    """The functions of one chain, with the arrays that Python functions are called with.

    error holds the exception that a Python function raised until the call that caused it takes it out. gradients and
    products count the calls really made, those of abandoned transitions included.
    """
    cdef fw_target c
    cdef calls user
    cdef object function, product
    cdef object x, p, out  # None until a Python function needs them
    cdef object error
    cdef readonly Py_ssize_t dimension
    cdef readonly bint compiled
    # Between calls of a Python function in few dimensions there are fractions of a microsecond: to give the lock of the
    # interpreter away for them and take it again costs more, and the interpreter itself gives it to others in turn.
    cdef bint keeps_gil

    def __cinit__(self, function, Py_ssize_t dimension, *, bint in_place=False, product=None):
        cdef void *context = NULL
        self.dimension = dimension
        self.c.dimension = <size_t>dimension
        self.function = function
        self.product = product
        self.compiled = is_compiled(function)
        self.keeps_gil = not self.compiled and dimension <= 1000
        # made at the first call of a Python function; a compiled one needs none
        self.x = self.p = self.out = None
        if self.compiled:
            self.user.density = <fw_density>compiled_pointer(function, DENSITY_SIGNATURE, "log density", &context)
            self.user.density_context = context
        else:
            self.user.density = <fw_density>(call_in_place if in_place else call_pair)
            self.user.density_context = <void *>self
        self.c.density = counted_density
        self.c.density_context = <void *>&self.user
        if product is not None:
            if is_compiled(product):
                self.user.product = <fw_hessian_product>compiled_pointer(product, PRODUCT_SIGNATURE, "Hessian product",
                                                                         &context)
                self.user.product_context = context
            else:
                self.user.product = <fw_hessian_product>call_product
                self.user.product_context = <void *>self
            self.c.product = counted_product
            self.c.product_context = <void *>&self.user

    @property
    def gradients(self):
        return self.user.gradients

    @property
    def products(self):
        return self.user.products

    def evaluate(self, double[::1] x not None, double[::1] gradient not None):
        """One bare call at x: (return code, value); the gradient is written into `gradient`."""
        cdef double value = mark()
        cdef int answer
        with nogil:
            answer = self.c.density(self.c.dimension, &x[0], &value, &gradient[0], self.c.density_context)
        self.raise_error()
        return answer, value

    def multiply(self, double[::1] x not None, double[::1] p not None, double[::1] out not None):
        """One bare Hessian product at x times p: the return code; the product is written into `out`."""
        cdef int answer
        if self.c.product == NULL:
            raise DensityError("this density has no Hessian product")
        with nogil:
            answer = self.c.product(self.c.dimension, &x[0], &p[0], &out[0], self.c.product_context)
        self.raise_error()
        return answer

    cdef raise_error(self):
        cdef object error = self.error
        if error is not None:
            self.error = None
            raise error


def is_compiled(function):
    """Is this a scipy.LowLevelCallable (without importing SciPy to ask)?"""
    return isinstance(function, tuple) and type(function).__name__ == "LowLevelCallable"


cdef inline bint is_vector(object array, Py_ssize_t d) noexcept:
    """Is this an array of d contiguous, aligned float64, one dimension?"""
    return (cnp.PyArray_Check(array) and cnp.PyArray_TYPE(<cnp.ndarray>array) == cnp.NPY_DOUBLE
            and cnp.PyArray_NDIM(<cnp.ndarray>array) == 1 and cnp.PyArray_DIM(<cnp.ndarray>array, 0) == d
            and cnp.PyArray_ISCARRAY_RO(<cnp.ndarray>array))


cdef inline bint lendable(PyObject *array, Py_ssize_t d) noexcept:
    """Can a Python function be called with this array again? Not when somebody kept it, or changed its shape."""
    return Py_REFCNT(array) == 1 and is_vector(<object>array, d) and cnp.PyArray_ISWRITEABLE(<cnp.ndarray>array)


cdef inline void fill(object array, const double *data, Py_ssize_t d) noexcept:
    memcpy(cnp.PyArray_DATA(<cnp.ndarray>array), data, <size_t>d * sizeof(double))


cdef double number(object value) except? -1.0:
    if isinstance(value, float):
        return <double>value
    try:
        # NumPy turns complex numbers and arrays of one number into floats, with a warning at most
        if isinstance(value, np.complexfloating) or (isinstance(value, np.ndarray)
                                                     and (value.ndim or value.dtype.kind == "c")):
            raise TypeError
        return PyFloat_AsDouble(value)
    except TypeError:
        raise DensityError(
            f"the log density must be one real number; the function gave {type(value).__name__} {value!r:.60}") from None
    except OverflowError:
        raise DensityError(f"the log density must be one real number; the function gave a number of type "
                           f"{type(value).__name__} too large for a float") from None


cdef int take_vector(object array, double *to, Py_ssize_t d, str what) except -1:
    if not is_vector(array, d):
        try:
            given = np.asarray(array)
        except ValueError:
            raise DensityError(f"the {what} must be an array of real numbers of shape ({d},); the function gave "
                               f"{type(array).__name__} {array!r:.60}") from None
        if given.dtype.kind not in "fiub":
            raise DensityError(f"the {what} must hold real numbers; the function gave an array of dtype {given.dtype}")
        if given.ndim == 0 and d != 1:
            raise DensityError(f"the {what} must have shape ({d},); the function gave shape ()")
        array = np.ascontiguousarray(given, dtype=np.float64)
    if array.ndim != 1 or array.shape[0] != d:
        raise DensityError(f"the {what} must have shape ({d},); the function gave shape {tuple(array.shape)}")
    memcpy(to, cnp.PyArray_DATA(<cnp.ndarray>array), <size_t>d * sizeof(double))
    return 0


cdef int call_pair(size_t d, const double *x, double *value, double *gradient, void *context) noexcept with gil:
    cdef Target self = <Target>context
    try:
        if not lendable(<PyObject *>self.x, <Py_ssize_t>d):
            self.x = np.empty(<Py_ssize_t>d)
        fill(self.x, x, <Py_ssize_t>d)
        answer = self.function(self.x)
        if not (isinstance(answer, tuple) and len(<tuple>answer) == 2):
            raise DensityError(
                f"the function must return (log density, gradient); it gave {type(answer).__name__} {answer!r:.60}")
        value[0] = number((<tuple>answer)[0])
        if value[0] - value[0] == 0.0:
            take_vector((<tuple>answer)[1], gradient, <Py_ssize_t>d, "gradient")
        return 0
    except BaseException as error:
        self.error = error
        return -1


cdef int call_in_place(size_t d, const double *x, double *value, double *gradient, void *context) noexcept with gil:
    cdef Target self = <Target>context
    try:
        if not lendable(<PyObject *>self.x, <Py_ssize_t>d):
            self.x = np.empty(<Py_ssize_t>d)
        if not lendable(<PyObject *>self.out, <Py_ssize_t>d):
            self.out = np.empty(<Py_ssize_t>d)
        fill(self.x, x, <Py_ssize_t>d)
        fill(self.out, gradient, <Py_ssize_t>d)
        answer = self.function(self.x, self.out)
        if answer is None:
            raise DensityError("the in-place function must return the log density; it returned None")
        value[0] = number(answer)
        take_vector(self.out, gradient, <Py_ssize_t>d, "gradient")
        return 0
    except BaseException as error:
        self.error = error
        return -1


cdef int call_product(size_t d, const double *x, const double *p, double *product, void *context) noexcept with gil:
    cdef Target self = <Target>context
    try:
        if not lendable(<PyObject *>self.x, <Py_ssize_t>d):
            self.x = np.empty(<Py_ssize_t>d)
        if not lendable(<PyObject *>self.p, <Py_ssize_t>d):
            self.p = np.empty(<Py_ssize_t>d)
        fill(self.x, x, <Py_ssize_t>d)
        fill(self.p, p, <Py_ssize_t>d)
        take_vector(self.product(self.x, self.p), product, <Py_ssize_t>d, "Hessian product")
        return 0
    except BaseException as error:
        self.error = error
        return -1


# ---- random numbers --------------------------------------------------------------------------------------------------

cdef extern from "stream.h":
    ctypedef struct fw_stream:
        uint64_t low, high, inc_low, inc_high, marked_low, marked_high
    uint64_t fw_stream_next(fw_stream *stream) noexcept nogil
    double fw_stream_uniform(fw_stream *stream) noexcept nogil


cdef extern from "lock.h" nogil:
    ctypedef struct fw_lock:
        pass
    void fw_lock_take(fw_lock *lock)
    void fw_lock_give(fw_lock *lock)


cdef struct view:
    # What any thread may read while the chain runs: all of it as the last completed transition left it. The lock is held
    # for copies only, and nothing that is done under it waits for the interpreter.
    fw_lock lock
    fw_chain *chain
    double *x
    double *gradient
    double value
    fw_summary summary
    int busy
    unsigned long owner  # the thread that runs the chain


cdef inline void renew(view *seen) noexcept nogil:
    fw_chain_point(seen.chain, seen.x, seen.gradient, &seen.value)
    fw_chain_summary(seen.chain, &seen.summary)


cdef struct numbers:
    char before[64]
    fw_stream own
    bitgen_t outer  # the same, for NumPy's distributions
    char after[64]
    view *seen      # renewed as each transition begins; NULL unless a chain runs


cdef uint64_t stream_uint64(void *state) noexcept nogil:
    return fw_stream_next(<fw_stream *>state)


cdef uint32_t stream_uint32(void *state) noexcept nogil:
    return <uint32_t>(fw_stream_next(<fw_stream *>state) >> 32)


cdef double stream_double(void *state) noexcept nogil:
    return fw_stream_uniform(<fw_stream *>state)


cdef void stream_normals(void *state, size_t n, double *out) noexcept nogil:
    random_standard_normal_fill(&(<numbers *>state).outer, <Py_ssize_t>n, out)


cdef double stream_uniform(void *state) noexcept nogil:
    return fw_stream_uniform(&(<numbers *>state).own)


cdef void stream_mark(void *state) noexcept nogil:
    cdef fw_stream *own = &(<numbers *>state).own
    cdef view *seen = (<numbers *>state).seen
    own.marked_low, own.marked_high = own.low, own.high
    if seen != NULL:
        fw_lock_take(&seen.lock)
        renew(seen)
        fw_lock_give(&seen.lock)


cdef class Stream:
    """The numbers of NumPy's PCG64DXSM, which can go back to where a transition began."""
    cdef numbers c

    def __cinit__(self, seed_sequence):
        self.c.outer.state = <void *>&self.c.own
        self.c.outer.next_uint64 = stream_uint64
        self.c.outer.next_uint32 = stream_uint32
        self.c.outer.next_double = stream_double
        self.c.outer.next_raw = stream_uint64
        begun = np.random.PCG64DXSM(seed_sequence).state["state"]
        self.state = begun["state"].to_bytes(16, "little") + begun["inc"].to_bytes(16, "little")

    cdef fw_random random(self) noexcept:
        cdef fw_random r
        r.normals = stream_normals
        r.uniform = stream_uniform
        r.mark = stream_mark
        r.state = <void *>&self.c
        return r

    def rewind(self):
        """Back to the mark: the numbers of the abandoned transition come again."""
        self.c.own.low, self.c.own.high = self.c.own.marked_low, self.c.own.marked_high

    def normals(self, size_t n):
        """The next n standard normal numbers."""
        cdef double[::1] out = np.empty(n)
        if n:
            stream_normals(&self.c, n, &out[0])
        return np.asarray(out)

    def uniforms(self, size_t n):
        """The next n numbers in [0, 1)."""
        return np.array([fw_stream_uniform(&self.c.own) for _ in range(n)])

    @property
    def state(self):
        """32 bytes: the generator's state and increment, little-endian."""
        words = (self.c.own.low, self.c.own.high, self.c.own.inc_low, self.c.own.inc_high)
        return b"".join(int(word).to_bytes(8, "little") for word in words)

    @state.setter
    def state(self, bytes given):
        low, high, inc_low, inc_high = (int.from_bytes(given[i : i + 8], "little") for i in range(0, 32, 8))
        self.c.own.low, self.c.own.high, self.c.own.inc_low, self.c.own.inc_high = low, high, inc_low, inc_high
        stream_mark(&self.c)


cdef extern from "kernels.h":
    void fw_gather_moments(size_t n, double count, const double *a, double *mean, double *squares) noexcept nogil


def gather(moments, const double[:, ::1] rows not None):
    """Add rows to an object with mean, squares and count, as the core adds draws."""
    cdef double[::1] mean = moments.mean, squares = moments.squares
    cdef uint64_t count = moments.count
    cdef Py_ssize_t row
    if mean.shape[0] != rows.shape[1] or squares.shape[0] != rows.shape[1]:
        raise ShapeError(f"the moments are of {mean.shape[0]} values, the rows have {rows.shape[1]}")
    for row in range(rows.shape[0]):
        count += 1
        fw_gather_moments(<size_t>rows.shape[1], <double>count, &rows[row, 0], &mean[0], &squares[0])
    moments.count = count


# ---- the chain -------------------------------------------------------------------------------------------------------

cdef class Engine:
    """One compiled chain. `settings` is a dict with the members of fw_settings by name; see fellwalk.h.

    Calls return (status, ...) and raise only what the user's function raised; the modules above say it in words. One
    thread at a time may move the chain; position, gradient, log density and summary can be read by any.
    """
    cdef fw_chain *chain
    cdef Target target
    cdef Stream stream
    cdef int flag
    cdef view seen
    cdef object seen_arrays
    cdef readonly Py_ssize_t dimension

    def __cinit__(self, Target target not None, Stream stream not None, dict settings not None):
        cdef fw_settings s
        cdef fw_random random = stream.random()
        cdef bytes motion = settings["motion"].encode("ascii")
        cdef bytes path = settings["path"].encode("ascii")
        self.target = target
        self.stream = stream
        self.dimension = target.dimension
        s.motion = motion
        s.path = path
        s.scheme = <fw_scheme><int>_schemes[settings["scheme"]]
        s.curvature = <fw_curvature><int>_curvatures[settings["curvature"]]
        s.turn = <fw_turn><int>_turns[settings["turn"]]
        s.bend = settings["bend"]
        s.beta = settings["beta"]
        s.steps = settings["steps"]
        s.doublings = settings["doublings"]
        s.halvings = settings["halvings"]
        s.halving_bound = settings["halving_bound"]
        s.step_size = settings["step_size"]
        s.acceptance = settings["acceptance"]
        s.settle_least = settings["settle_least"]
        s.settle_most = settings["settle_most"]
        s.rank = settings["rank"]
        s.rank_fixed = settings["rank_fixed"]
        s.adapt_step = settings["adapt_step"]
        s.adapt_scale = settings["adapt_scale"]
        cdef int status = fw_chain_new(&target.c, &random, &s, &self.chain)
        if status == FW_NO_MEMORY:
            raise MemoryError(f"no memory for the workspace of a chain of {self.dimension} coordinates")
        if status != FW_OK:
            raise ArgumentError(f"a chain with these settings cannot be made: {sentence(status)} ({settings})")
        fw_chain_watch(self.chain, &self.flag)
        self.seen_arrays = np.zeros((2, self.dimension))
        self.seen.x = <double *>cnp.PyArray_DATA(<cnp.ndarray>self.seen_arrays)
        self.seen.gradient = self.seen.x + self.dimension
        self.seen.chain = self.chain
        renew(&self.seen)

    def __dealloc__(self):
        fw_chain_free(self.chain)

    cdef enter(self):
        """From here to `leave` the chain is this call's alone."""
        fw_lock_take(&self.seen.lock)
        cdef bint refused = self.seen.busy
        if not refused:
            self.seen.busy = 1
            self.seen.owner = <unsigned long>PyThread_get_thread_ident()
        fw_lock_give(&self.seen.lock)
        if refused:
            raise BusyError("this chain is already running in another call; use one chain per thread")
        self.stream.c.seen = &self.seen

    cdef leave(self, int status):
        self.stream.c.seen = NULL
        if status == FW_INTERRUPTED:
            self.flag = 0
        fw_lock_take(&self.seen.lock)
        renew(&self.seen)
        self.seen.busy = 0
        fw_lock_give(&self.seen.lock)

    cdef int go(self, size_t n, uint64_t most_gradients, fw_output *out, size_t *done) noexcept nogil:
        """fw_chain_run of up to n transitions, ended by the one that brings their gradients to most_gradients (0: no
        such bound). One that takes none, because no path can leave, counts as one."""
        cdef fw_output row = out[0]
        cdef size_t one = 1, i, before
        cdef uint64_t begun = self.seen.summary.gradients
        cdef int status = FW_OK, settled = self.seen.summary.settled
        if most_gradients == 0:
            return fw_chain_run(self.chain, n, out, done)
        while (one and status == FW_OK and done[0] < min(n, most_gradients)
               and self.seen.summary.gradients - begun < most_gradients and self.seen.summary.settled == settled):
            i, before = done[0], row.failures
            row.draws = out.draws + i * <size_t>self.dimension if out.draws != NULL else NULL
            row.gradients = out.gradients + i * <size_t>self.dimension if out.gradients != NULL else NULL
            row.facts = out.facts + i if out.facts != NULL else NULL
            status = fw_chain_run(self.chain, 1, &row, &one)
            done[0] += one
            if row.failures > before and row.failure_index != NULL:
                row.failure_index[before] += <int64_t>i
        out.failures = row.failures
        return status

    def interrupt(self):
        """Ask the running call, or else the next one, to stop inside the transition in hand; from any thread."""
        self.flag = 1

    def set_base(self, const double[::1] scale not None, const double[:, ::1] directions=None,
                 const double[::1] lambdas=None):
        cdef size_t count = 0 if directions is None else <size_t>directions.shape[0]
        self.enter()
        try:
            return fw_chain_set_base(self.chain, &scale[0], count, &directions[0, 0] if count else NULL,
                                     &lambdas[0] if count else NULL)
        finally:
            self.leave(FW_OK)

    def base(self):
        cdef double[::1] scale = np.empty(self.dimension), l = np.empty(FW_MAX_DIRECTIONS)
        cdef double[:, ::1] e = np.empty((self.seen.summary.directions, self.dimension))
        cdef size_t k = 0, room = <size_t>e.shape[0]
        fw_lock_take(&self.seen.lock)
        # Directions come and go inside a call, so of another thread's call they cannot be seen.
        cdef bint refused = self.seen.busy and self.seen.owner != <unsigned long>PyThread_get_thread_ident()
        if not refused:
            k = fw_chain_base(self.chain, &scale[0], NULL, NULL)
            if 0 < k <= room:
                fw_chain_base(self.chain, NULL, &e[0, 0], &l[0])
        fw_lock_give(&self.seen.lock)
        if refused:
            raise BusyError("another thread is moving this chain; its base metric can be read between calls")
        if k > room:
            return self.base()
        return np.asarray(scale), np.asarray(e)[:k].copy(), np.asarray(l)[:k].copy()

    def start(self, const double[::1] x not None):
        cdef int status = FW_OK
        self.enter()
        try:
            with nogil:
                status = fw_chain_start(self.chain, &x[0])
            self.target.raise_error()
        finally:
            self.leave(status)
        return status

    def density_changed(self, const double[::1] x=None):
        """Evaluate anew, at x or where the chain stands; the status."""
        cdef int status = FW_OK
        cdef const double *to = &x[0] if x is not None else NULL
        self.enter()
        try:
            with nogil:
                status = fw_chain_density_changed(self.chain, to)
            self.target.raise_error()
        finally:
            self.leave(status)
        return status

    def settle(self, size_t least, size_t most):
        self.enter()
        try:
            return fw_chain_settle(self.chain, least, most)
        finally:
            self.leave(FW_OK)

    def run(self, size_t n, double[:, ::1] draws=None, facts=None, double[:, ::1] gradients=None,
            int64_t[::1] failure_index=None, int32_t[::1] failure_code=None, double[:, ::1] failure_position=None,
            const size_t[::1] watched=None, moments=None, uint64_t most_gradients=0):
        """(status, transitions done, failure rows used, the exception a Python function raised or None).

        Arrays have n rows, or are None. Completed transitions stand whatever the status. watched: coordinates that the
        rows of draws and failure_position are, all when None; moments: an object with mean, squares and count, which
        take the draws in. most_gradients: no transition begins once those of this call have taken so many gradients; 0:
        no such bound.
        """
        cdef double[::1] mean, squares
        cdef fw_output out
        cdef size_t done = 0
        cdef int status = FW_OK
        cdef char[::1] raw
        out.draws = &draws[0, 0] if draws is not None and n else NULL
        out.gradients = &gradients[0, 0] if gradients is not None and n else NULL
        out.facts = NULL
        if facts is not None and n:
            raw = facts.view(np.int8)
            out.facts = <fw_facts *>&raw[0]
        out.failures_room = 0 if failure_index is None else <size_t>failure_index.shape[0]
        out.failures = 0
        out.failure_index = &failure_index[0] if out.failures_room else NULL
        out.failure_code = &failure_code[0] if out.failures_room else NULL
        out.failure_position = &failure_position[0, 0] if out.failures_room else NULL
        out.watched = NULL
        out.watched_count = 0
        out.mean = out.squares = NULL
        out.gathered = 0
        if watched is not None:
            out.watched = &watched[0]
            out.watched_count = <size_t>watched.shape[0]
        if moments is not None:
            mean, squares, out.gathered = moments.mean, moments.squares, moments.count
            out.mean, out.squares = &mean[0], &squares[0]
        self.enter()
        try:
            if self.target.keeps_gil:
                status = self.go(n, most_gradients, &out, &done)
            else:
                with nogil:
                    status = self.go(n, most_gradients, &out, &done)
            if status < 0:
                self.stream.rewind()
            error, self.target.error = self.target.error, None
        finally:
            self.leave(status)
        if moments is not None:
            moments.count = out.gathered
        return status, done, out.failures, error

    def integrate(self, double[::1] x not None, double[::1] v not None, double step_size, size_t steps,
                  double[:, ::1] trace_x=None, double[:, ::1] trace_v=None, double[:, ::1] trace_facts=None):
        """(status, steps done, log density, log-Jacobian, log ratio, gradients, products); x and v become the end."""
        cdef fw_path_out out
        cdef int status = FW_OK
        out.trace_x = &trace_x[0, 0] if trace_x is not None else NULL
        out.trace_v = &trace_v[0, 0] if trace_v is not None else NULL
        out.trace_facts = &trace_facts[0, 0] if trace_facts is not None else NULL
        out.log_density = out.log_jacobian = out.log_ratio = float("nan")
        self.enter()
        try:
            with nogil:
                status = fw_chain_integrate(self.chain, &x[0], &v[0], step_size, steps, &out)
            self.target.raise_error()
        finally:
            self.leave(status)
        return status, out.steps_done, out.log_density, out.log_jacobian, out.log_ratio, out.gradients, out.products

    def point(self):
        """(position, gradient, log density), copies; while another call runs, as its last transition left them."""
        x, g = np.empty(self.dimension), np.empty(self.dimension)
        cdef double *to_x = <double *>cnp.PyArray_DATA(<cnp.ndarray>x)
        cdef double *to_g = <double *>cnp.PyArray_DATA(<cnp.ndarray>g)
        cdef size_t size = <size_t>self.dimension * sizeof(double)
        fw_lock_take(&self.seen.lock)
        memcpy(to_x, self.seen.x, size)
        memcpy(to_g, self.seen.gradient, size)
        cdef double value = self.seen.value
        fw_lock_give(&self.seen.lock)
        return x, g, value

    def failed_at(self):
        """Position of the user's call that ended the latest call with a status from -1 to -3."""
        x = np.empty(self.dimension)
        cdef double[::1] to = x
        fw_chain_failed_at(self.chain, &to[0])
        return x

    def settled(self):
        fw_lock_take(&self.seen.lock)
        cdef bint settled = self.seen.summary.settled
        fw_lock_give(&self.seen.lock)
        return settled

    def summary(self):
        fw_lock_take(&self.seen.lock)
        cdef fw_summary s = self.seen.summary
        fw_lock_give(&self.seen.lock)
        return {"gradients": s.gradients, "products": s.products, "transitions": s.transitions,
                "settled_transitions": s.settled_transitions, "windows": s.windows, "step_size": s.step_size,
                "beta": s.beta, "bend": s.bend, "ceiling": s.ceiling, "change": s.change, "directions": s.directions,
                "steps": s.steps,
                "workspace_vectors": s.workspace_vectors, "workspace_bytes": s.workspace_bytes,
                "started": bool(s.started), "settled": bool(s.settled)}

    def export_state(self):
        cdef size_t size
        cdef char[::1] view
        self.enter()
        try:
            size = fw_chain_state_bytes(self.chain)
            out = bytearray(size)
            view = out
            fw_chain_export(self.chain, &view[0], size)
            return bytes(out) + self.stream.state
        finally:
            self.leave(FW_OK)

    def import_state(self, const unsigned char[::1] given not None):
        cdef size_t size = <size_t>given.shape[0]
        cdef int status
        if size < 40:
            return FW_BAD_STATE
        self.enter()
        try:
            status = fw_chain_import(self.chain, &given[0], size - 32)
            if status == FW_OK:
                self.stream.state = bytes(given[size - 32:])
            return status
        finally:
            self.leave(FW_OK)


# ---- the O(d) metric operations on arrays ----------------------------------------------------------------------------

def reals(object given):
    """A contiguous float64 array of what is given; TypeError, ValueError or OverflowError when it is not real numbers."""
    array = np.asarray(given)
    if array.dtype.kind not in "fiubO" or (array.dtype.kind == "O" and any(
            isinstance(value, (complex, np.complexfloating, str, bytes)) for value in array.flat)):
        raise TypeError(f"not real numbers: an array of dtype {array.dtype}")
    return np.asarray(array, dtype=np.float64, order="C")


cdef object vector(object a, str name, Py_ssize_t d=-1):
    try:
        array = reals(a)
    except (TypeError, ValueError, OverflowError):
        raise ShapeError(f"{name} must be an array of real numbers; it is {type(a).__name__}") from None
    if array.ndim != 1 or array.shape[0] == 0 or (d >= 0 and array.shape[0] != d):
        wanted = f"({d},)" if d >= 0 else "(d,) with d >= 1"
        raise ShapeError(f"{name} must have shape {wanted}; it has shape {tuple(np.shape(a))}")
    return array


cdef object output(object out, Py_ssize_t d):
    if out is None:
        return np.empty(d)
    if not (isinstance(out, np.ndarray) and out.dtype == np.float64 and out.shape == (d,) and out.flags.c_contiguous
            and out.flags.writeable):
        raise ShapeError(f"out must be a writable contiguous float64 array of shape ({d},)")
    return out


ctypedef int (*metric_operation)(size_t, const double *, const double *, int, const double *, double *) noexcept nogil


cdef object operate(metric_operation operation, object diagonal, object u, object given, object sign, object out):
    cdef const double[::1] delta = vector(diagonal, "diagonal")
    cdef Py_ssize_t d = delta.shape[0]
    cdef const double[::1] one = vector(u, "u", d)
    cdef const double[::1] v = vector(given, "the vector", d)
    if sign not in (1, -1):
        raise ArgumentError(f"sign must be 1 or -1; it is {sign!r}")
    result = output(out, d)
    cdef double[::1] to = result
    cdef int s = sign, status
    with nogil:
        status = operation(<size_t>d, &delta[0], &one[0], s, &v[0], &to[0])
    if status != FW_OK:
        raise not_positive(sign)
    return result


cdef object not_positive(sign):
    from fellwalk.errors import MetricError
    return MetricError("diag(diagonal) + sign u u' is not positive definite: every diagonal entry must be > 0 and finite"
                       + (", and sum(u**2 / diagonal) must be below 1" if sign == -1 else ""))


def apply(diagonal, u, v, *, sign=1, out=None):
    """G v for the metric G = diag(diagonal) + sign u u'. Arrays of shape (d,); O(d)."""
    return operate(fw_metric_apply, diagonal, u, v, sign, out)


def solve(diagonal, u, p, *, sign=1, out=None):
    """G^-1 p (Sherman & Morrison 1950). Arrays of shape (d,); O(d)."""
    return operate(fw_metric_solve, diagonal, u, p, sign, out)


def velocity(diagonal, u, z, *, sign=1, out=None):
    """A velocity v ~ N(0, G^-1) made from z ~ N(0, I). Arrays of shape (d,); O(d)."""
    return operate(fw_metric_velocity, diagonal, u, z, sign, out)


def momentum(diagonal, u, z, *, sign=1, out=None):
    """A momentum p ~ N(0, G) made from z ~ N(0, I). Arrays of shape (d,); O(d)."""
    return operate(fw_metric_momentum, diagonal, u, z, sign, out)


def log_determinant(diagonal, u, *, sign=1):
    """log det G (matrix determinant lemma). Arrays of shape (d,); O(d)."""
    cdef const double[::1] delta = vector(diagonal, "diagonal")
    cdef Py_ssize_t d = delta.shape[0]
    cdef const double[::1] one = vector(u, "u", d)
    if sign not in (1, -1):
        raise ArgumentError(f"sign must be 1 or -1; it is {sign!r}")
    cdef double value = 0.0
    cdef int s = sign
    if fw_metric_log_determinant(<size_t>d, &delta[0], &one[0], s, &value) != FW_OK:
        raise not_positive(sign)
    return value


# ---- many points at once ---------------------------------------------------------------------------------------------

def leave(const unsigned char[::1] still not None, double kick, double step, const double[::1] r not None,
          const double[:, ::1] g not None, double[:, ::1] w not None, double[:, ::1] x not None):
    """fw_rows_leave; g, w, x (m, d), still (m,), r (d,)."""
    cdef Py_ssize_t m = g.shape[0], d = g.shape[1]
    if not (r.shape[0] == d and still.shape[0] == w.shape[0] == x.shape[0] == m and w.shape[1] == x.shape[1] == d):
        raise ShapeError("the arrays of leave do not belong together")
    if m and d:
        with nogil:
            fw_rows_leave(<size_t>m, <size_t>d, &still[0], kick, step, &r[0], &g[0, 0], &w[0, 0], &x[0, 0])


def arrive(const unsigned char[::1] still not None, double kick, const double[::1] r not None,
           const double[:, ::1] g not None, double[:, ::1] w not None, double[::1] ww not None,
           double[::1] cc not None):
    """fw_rows_arrive; g, w (m, d), still, ww, cc (m,), r (d,)."""
    cdef Py_ssize_t m = g.shape[0], d = g.shape[1]
    if not (r.shape[0] == d and still.shape[0] == w.shape[0] == ww.shape[0] == cc.shape[0] == m and w.shape[1] == d):
        raise ShapeError("the arrays of arrive do not belong together")
    if m and d:
        with nogil:
            fw_rows_arrive(<size_t>m, <size_t>d, &still[0], kick, &r[0], &g[0, 0], &w[0, 0], &ww[0], &cc[0])


# ---- bounded parameters ----------------------------------------------------------------------------------------------

cdef class Maps:
    """The compiled maps of a list of (kind, size, low, high), bounds being float64 arrays or None; see fellwalk.h.

    One thread at a time. Arrays are contiguous float64; several points are rows.
    """
    cdef fw_maps *maps
    cdef readonly Py_ssize_t dimension, natural_size

    def __cinit__(self, list given):
        cdef size_t count = <size_t>len(given), k
        cdef double[::1] low, high
        cdef fw_map *plan = <fw_map *>PyMem_Malloc(max(count, 1) * sizeof(fw_map))
        cdef int status
        held = []
        if plan == NULL:
            raise MemoryError()
        try:
            for k in range(count):
                kind, size, lows, highs = given[k]
                plan[k].kind = <fw_map_kind><int>kind
                plan[k].size = <size_t>size
                plan[k].low = plan[k].high = NULL
                if lows is not None:
                    low = lows
                    plan[k].low = &low[0]
                    held.append(low)
                if highs is not None:
                    high = highs
                    plan[k].high = &high[0]
                    held.append(high)
            status = fw_maps_new(count, plan, &self.maps)
        finally:
            PyMem_Free(plan)
        if status == FW_NO_MEMORY:
            raise MemoryError("no memory for the maps of these parameters")
        if status != FW_OK:
            raise ArgumentError("these parameters cannot be mapped: a size is too small or too large, or a bound is not "
                                "a finite number below its partner")
        self.dimension = <Py_ssize_t>fw_maps_dimension(self.maps)
        self.natural_size = <Py_ssize_t>fw_maps_natural(self.maps)

    def __dealloc__(self):
        fw_maps_free(self.maps)

    def apply(self, const double[:, ::1] y not None):
        """(natural values (n, natural_size), log-Jacobians (n,)) of free coordinates (n, dimension)."""
        x, log_jacobian = np.empty((y.shape[0], self.natural_size)), np.empty(y.shape[0])
        cdef double[:, ::1] to = x
        cdef double[::1] logs = log_jacobian
        cdef Py_ssize_t i
        for i in range(y.shape[0]):
            logs[i] = fw_maps_apply(self.maps, &y[i, 0], &to[i, 0])
        return x, log_jacobian

    def outside(self, const double[::1] y not None):
        """Is y where the user's functions are not called (see fw_maps_outside)?"""
        x = np.empty(self.natural_size)
        cdef double[::1] to = x
        fw_maps_apply(self.maps, &y[0], &to[0])
        return bool(fw_maps_outside(self.maps))

    def invert(self, const double[:, ::1] x not None):
        """Free coordinates (n, dimension) of natural values; not finite where a value is not inside its bounds."""
        y = np.empty((x.shape[0], self.dimension))
        cdef double[:, ::1] to = y
        cdef Py_ssize_t i
        for i in range(x.shape[0]):
            fw_maps_invert(self.maps, &x[i, 0], &to[i, 0])
        return y

    def pull(self, const double[::1] y not None, const double[::1] g not None, bint with_jacobian):
        """J^T g at y, plus the gradient of the log-Jacobian if asked for."""
        x, out = np.empty(self.natural_size), np.empty(self.dimension)
        cdef double[::1] at = x, to = out
        fw_maps_apply(self.maps, &y[0], &at[0])
        fw_maps_pull(self.maps, &g[0], with_jacobian, &to[0])
        return out

    def apply_all(self, const double[:, ::1] y not None):
        """As `apply`, and (n,) truth values: the rows where the user's functions are not called."""
        x, log_jacobian = np.empty((y.shape[0], self.natural_size)), np.empty(y.shape[0])
        outside = np.empty(y.shape[0], dtype=np.uint8)
        cdef double[:, ::1] to = x
        cdef double[::1] logs = log_jacobian
        cdef unsigned char[::1] out = outside
        cdef Py_ssize_t i
        for i in range(y.shape[0]):
            logs[i] = fw_maps_apply(self.maps, &y[i, 0], &to[i, 0])
            out[i] = fw_maps_outside(self.maps) != 0
        return x, log_jacobian, outside.view(np.bool_)

    def pull_all(self, const double[:, ::1] y not None, const double[:, ::1] g not None):
        """J^T g plus the gradient of the log-Jacobian, for rows (n, dimension) and (n, natural_size)."""
        x, pulled = np.empty(self.natural_size), np.empty((y.shape[0], self.dimension))
        cdef double[::1] at = x
        cdef double[:, ::1] to = pulled
        cdef Py_ssize_t i
        for i in range(y.shape[0]):
            fw_maps_apply(self.maps, &y[i, 0], &at[0])
            fw_maps_pull(self.maps, &g[i, 0], 1, &to[i, 0])
        return pulled

    def push(self, const double[::1] y not None, const double[::1] p not None):
        """J p at y."""
        x, out = np.empty(self.natural_size), np.empty(self.natural_size)
        cdef double[::1] at = x, to = out
        fw_maps_apply(self.maps, &y[0], &at[0])
        fw_maps_push(self.maps, &p[0], &to[0])
        return out

    def bend(self, const double[::1] y not None, const double[::1] g not None, const double[::1] p not None):
        """What the curvature of the maps adds to a Hessian product along p, given the natural gradient g."""
        x, out = np.empty(self.natural_size), np.zeros(self.dimension)
        cdef double[::1] at = x, to = out
        fw_maps_apply(self.maps, &y[0], &at[0])
        fw_maps_bend(self.maps, &g[0], &p[0], &to[0])
        return out


cdef class MappedTarget(Target):
    """A Target of natural values that, once `see_through` has been called, is a target of free coordinates."""
    cdef Maps maps

    def see_through(self, Maps maps not None):
        cdef fw_target natural = self.c
        if fw_maps_target(maps.maps, &natural, &self.c) != FW_OK:
            raise ArgumentError("the maps do not belong to a density of this dimension")
        self.maps = maps
        self.dimension = maps.dimension
        return self

    @property
    def extra(self):
        """Calls of the density that Hessian products needed beyond those the chain counts."""
        return fw_maps_extra(self.maps.maps)


def count_disagreements(Target target not None, const double[:, ::1] points not None, const double[::1] values not None,
                        const double[:, ::1] gradients not None, Py_ssize_t rounds):
    """Evaluate the points in turn, `rounds` times over, without the GIL: how often value or gradient has other bits."""
    cdef Py_ssize_t r, i, m = points.shape[0], d = points.shape[1]
    cdef double value = 0.0
    cdef double[::1] gradient = np.zeros(d)
    cdef Py_ssize_t wrong = 0
    with nogil:
        for r in range(rounds):
            for i in range(m):
                target.c.density(<size_t>d, &points[i, 0], &value, &gradient[0], target.c.density_context)
                if (memcmp(&value, &values[i], sizeof(double)) != 0
                        or memcmp(&gradient[0], &gradients[i, 0], <size_t>d * sizeof(double)) != 0):
                    wrong += 1
    target.raise_error()
    return wrong
