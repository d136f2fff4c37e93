"""Draws from a density given by its logarithm and gradient, along explicit geometric flows."""

from fellwalk import errors, kernels
from fellwalk.chain import Block, Chain
from fellwalk.density import Density
from fellwalk.errors import FellwalkError
from fellwalk.motions import Jittered, Lagrangian, Leapfrog, NoUTurn
from fellwalk.paths import Trajectory, integrate
