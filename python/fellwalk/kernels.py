"""The O(d) operations of the metric G = diag(diagonal) + sign u u', on arrays.

``sign`` is 1 or -1; G must be positive definite. Solve: Sherman & Morrison (1950); determinant: the matrix
determinant lemma. Every function takes arrays of shape (d,) and, but for ``log_determinant``, an optional ``out=``,
a contiguous float64 array of shape (d,), which may be the vector itself.
"""

from fellwalk._core import apply, log_determinant, momentum, solve, velocity

__all__ = ["apply", "log_determinant", "momentum", "solve", "velocity"]
