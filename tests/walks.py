"""Motions of every kind, and places from which all of them take a few steps well inside their region of stability."""

from dataclasses import dataclass
from functools import cache

import numpy as np
import oracles
import targets

import fellwalk as fw
from fellwalk import testing

KINDS = {"leapfrog": fw.Leapfrog(), "isokinetic": fw.Isokinetic()} | {
    f"{scheme}, {curvature}": fw.Lagrangian(curvature=curvature, scheme=scheme)
    for scheme in ("split", "semi-explicit")
    for curvature in ("surrogate", "difference", "product")
}
FLAT = ["leapfrog", "isokinetic"]  # over the base metric alone
BENT = [kind for kind in KINDS if kind not in FLAT]
SURROGATE = [kind for kind in KINDS if "surrogate" in kind]
CONSISTENT = [kind for kind in KINDS if "surrogate" not in kind]


def density_of(target):
    return fw.Density(target.density, target.dimension, hessian_product=target.hessian_product)


@dataclass(frozen=True)
class Place:
    """A target, a metric and a start from which all kinds take a few steps well inside their region of stability."""

    target: targets.Target
    scale: np.ndarray
    beta: float
    step: float
    x: np.ndarray
    v: np.ndarray

    def go(self, kind, x=None, v=None, step=None, steps=1, **named):
        x, v = (self.x if x is None else x), (self.v if v is None else v)
        return fw.integrate(density_of(self.target), x, v, motion=KINDS[kind], step_size=step or self.step, steps=steps,
                            scale=self.scale, beta=self.beta, **named)

    def walk(self, kind):
        """The motion of this kind here, as `fellwalk.testing` takes it."""
        beta = 0.0 if kind in FLAT else self.beta
        return testing.walk_of(density_of(self.target), KINDS[kind], scale=self.scale, beta=beta)

    def dense(self, kind):
        """The geometry in which `kind` is written down."""
        if kind == "isokinetic":
            return oracles.Isokinetic(self.target, 1.0 / self.scale)
        beta = 0.0 if kind == "leapfrog" else self.beta
        flat = (lambda x: -np.diag(1.0 / self.scale)) if "surrogate" in kind else None
        return oracles.Monge(self.target, 1.0 / self.scale, beta, flat)

    def apart(self, a, b):
        """Largest difference of two states, in the units of the base metric."""
        return max(np.abs((p - q) / np.sqrt(self.scale)).max() for p, q in zip(a, b, strict=True))


PLACES = {
    "student 1": (lambda: targets.student(1, 5.0), 0.8, 0.2),
    "rosenbrock": (lambda: targets.rosenbrock(), 0.05, 0.04),
    "ring": (lambda: targets.ring(2, 3.0, 0.5), 0.3, 0.1),
    "ridge": (lambda: targets.winding_ridge(), 0.2, 0.05),
    "funnel": (lambda: targets.funnel(3, 1.0), 0.7, 0.2),
    "normal": (lambda: targets.equicorrelated_normal(4, 0.6), 0.6, 0.2),
    "student 4": (lambda: targets.student(4, 3.7, 0.4, 2.1), 0.4, 0.3),
}

# The isokinetic motion has nowhere to turn in one dimension.
PAIRS = [(name, kind) for name in PLACES for kind in KINDS if (name, kind) != ("student 1", "isokinetic")]


@cache
def place(name):
    build, beta, step = PLACES[name]
    target = build()
    rng = np.random.default_rng([11, *name.encode()])
    x = target.exact_draws(1, rng)
    scale = rng.uniform(0.6, 1.7, target.dimension)
    v = oracles.Monge(target, 1.0 / scale, beta).velocities(x, rng.standard_normal(x.shape))
    return Place(target, scale, beta, step, x[0], v[0])
