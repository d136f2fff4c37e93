"""Draws from a density given by its logarithm and gradient, along explicit geometric flows."""

from importlib.metadata import version
from pathlib import Path

from fellwalk import errors, kernels
from fellwalk.adapters import from_jax, from_numba, from_torch
from fellwalk.audit import Audit, audit
from fellwalk.chain import Block, Chain
from fellwalk.density import Density
from fellwalk.errors import FellwalkError
from fellwalk.judge import judge
from fellwalk.judgement import Judgement
from fellwalk.lockstep import Lockstep
from fellwalk.motions import Jittered, Lagrangian, Leapfrog, NoUTurn
from fellwalk.parameter_kinds import between, correlation, free, increasing, positive, shares
from fellwalk.parameters import Parameters
from fellwalk.paths import Trajectory, integrate
from fellwalk.result import Result, load
from fellwalk.run import resume, run
from fellwalk.settled import Settled, SettledChain

__version__ = version("fellwalk")

__all__ = [
    "Audit",
    "Block",
    "Chain",
    "Density",
    "FellwalkError",
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
    "audit",
    "between",
    "correlation",
    "errors",
    "free",
    "from_jax",
    "from_numba",
    "from_torch",
    "get_include",
    "increasing",
    "integrate",
    "judge",
    "kernels",
    "load",
    "positive",
    "resume",
    "run",
    "shares",
]


def get_include() -> str:
    """The folder that holds fellwalk.h, for compiling against the core."""
    installed = Path(__file__).parent / "include"
    if installed.is_dir():
        return str(installed)
    return str(Path(__file__).resolve().parents[2] / "csrc" / "include")
