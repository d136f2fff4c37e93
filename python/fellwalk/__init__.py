"""Draws from a density given by its logarithm and gradient, along explicit geometric flows.

What a chain needs is imported at once. Whole runs, their judgement and the audit need SciPy and much else, so their
modules are imported when one of their names is first asked for; the benchmark ``import_time.py`` says what that saves.
"""

import sys
from importlib import import_module
from importlib.util import find_spec
from pathlib import Path
from types import ModuleType
from typing import TYPE_CHECKING

from fellwalk import errors, kernels
from fellwalk.chain import Block, Chain
from fellwalk.density import Density
from fellwalk.errors import FellwalkError
from fellwalk.motions import Isokinetic, Jittered, Lagrangian, Leapfrog, NoUTurn
from fellwalk.parameter_kinds import between, correlation, free, increasing, positive, shares
from fellwalk.parameters import Parameters
from fellwalk.paths import Trajectory, integrate
from fellwalk.settled import Settled, SettledChain

__all__ = [
    "Audit",
    "Block",
    "Chain",
    "Density",
    "Estimates",
    "FellwalkError",
    "Isokinetic",
    "Jittered",
    "Judgement",
    "Lagrangian",
    "Leapfrog",
    "Lockstep",
    "NoUTurn",
    "Parameters",
    "Result",
    "Settled",
    "SettledChain",
    "Trajectory",
    "Trial",
    "audit",
    "between",
    "correlation",
    "errors",
    "free",
    "from_jax",
    "from_numba",
    "from_torch",
    "get_include",
    "get_library",
    "increasing",
    "integrate",
    "judge",
    "kernels",
    "load",
    "positive",
    "resume",
    "run",
    "shares",
    "trial",
]

if TYPE_CHECKING:
    from fellwalk.adapters import from_jax, from_numba, from_torch
    from fellwalk.audit import Audit, audit
    from fellwalk.estimates import Estimates
    from fellwalk.judge import judge
    from fellwalk.judgement import Judgement
    from fellwalk.lockstep import Lockstep
    from fellwalk.result import Result, load
    from fellwalk.run import resume, run
    from fellwalk.trial import Trial, trial

    __version__: str
else:
    _WHERE = {
        "Audit": "audit",
        "Estimates": "estimates",
        "Judgement": "judgement",
        "Lockstep": "lockstep",
        "Result": "result",
        "Trial": "trial_result",
        "audit": "audit",
        "from_jax": "adapters",
        "from_numba": "adapters",
        "from_torch": "adapters",
        "judge": "judge",
        "load": "result",
        "resume": "run",
        "run": "run",
        "trial": "trial",
    }

    def __getattr__(name):
        if name == "__version__":
            from importlib.metadata import version

            found = version("fellwalk")
        elif name in _WHERE:
            found = getattr(import_module(f"fellwalk.{_WHERE[name]}"), name)
        elif not name.startswith("_") and find_spec(f"fellwalk.{name}") is not None:
            found = import_module(f"fellwalk.{name}")
        else:
            raise AttributeError(f"module 'fellwalk' has no attribute {name!r}")
        globals()[name] = found
        return found

    def __dir__():
        return sorted({*globals(), *_WHERE, "__version__"})

    class _Package(ModuleType):
        """audit, judge, run and trial are functions in modules of the same name: the import of such a module, whoever
        asks for it, must not put it in the function's place."""

        def __reduce__(self):  # functions that are sent by value may hold the package
            return import_module, (self.__name__,)

        def __setattr__(self, name, value):
            if _WHERE.get(name) == name and isinstance(value, ModuleType):
                value = getattr(value, name)
            super().__setattr__(name, value)

    sys.modules[__name__].__class__ = _Package


def get_include() -> str:
    """The folder of fellwalk.h, for compiling C, C++ or Cython (with ``cimport fellwalk.core``) against the core."""
    installed = Path(__file__).parent / "include"
    if installed.is_dir():
        return str(installed)
    return str(Path(__file__).resolve().parents[2] / "csrc" / "include")


def get_library() -> str:
    """The folder of the compiled core, libfellwalk.a (fellwalk.lib on Windows), for linking: ``-lfellwalk -lm``."""
    return str(Path(__file__).resolve().parent / "lib")
