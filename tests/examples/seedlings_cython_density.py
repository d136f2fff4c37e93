"""The density over the compiled Cython module: `cythonize -i seedlings_cython.pyx` makes it."""

import seedlings_cython
from scipy import LowLevelCallable
from seedlings_numpy import parameters

import fellwalk as fw

density = fw.Density(LowLevelCallable.from_cython(seedlings_cython, "log_density"), parameters, start=[0.0, 3.0, 1.0])
