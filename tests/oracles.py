"""Oracles of the metric and the motions: dense matrices, many digits, equations from textbooks.

Nothing here uses the closed forms of the compiled core: inverses and determinants come from factorisations, Christoffel
symbols from derivatives of the metric, exact motion from Hamilton's equations, halving from its definition.
"""

from collections.abc import Callable

import mpmath as mp
import numpy as np
from scipy import linalg
from scipy.integrate import solve_ivp

Array = np.ndarray
DIGITS = 120  # entries of a metric may span 1e-24..1e24 in squares, and factorisations cancel down to the smallest
EPS = 2.0**-52


# ---- diag(delta) + sign u u^T in many digits -----------------------------------------------------------------------


def column(values: Array) -> mp.matrix:
    return mp.matrix([mp.mpf(float(value)) for value in values])


def metric(delta: Array, u: Array, sign: int) -> mp.matrix:
    one = column(u)
    return mp.diag([mp.mpf(float(value)) for value in delta]) + sign * (one * one.T)


def solve(delta: Array, u: Array, sign: int, p: Array) -> list:
    """G^-1 p by elimination."""
    with mp.workdps(DIGITS):
        return list(mp.lu_solve(metric(delta, u, sign), column(p)))


def log_determinant(delta: Array, u: Array, sign: int) -> mp.mpf:
    with mp.workdps(DIGITS):
        return mp.log(mp.det(metric(delta, u, sign)))


# ---- Monge metric and any field in the place of the Hessian ---------------------------------------------------------


class Monge:
    """G(x) = diag(delta) + beta g g^T over a target, dense; `field(x)` stands for the Hessian (default: itself)."""

    def __init__(self, target, delta: Array, beta: float, field: Callable[[Array], Array] | None = None) -> None:
        self.target, self.delta, self.beta = target, np.asarray(delta, dtype=float), beta
        self.field = field or self.hessian

    def gradient(self, x: Array) -> Array:
        return self.target.value_gradient(x)[1]

    def hessian(self, x: Array) -> Array:
        full = np.array([self.target.hessian_times(x, e) for e in np.eye(len(x))])
        return 0.5 * (full + full.T)

    def metric(self, x: Array) -> Array:
        g = self.gradient(x)
        return np.diag(self.delta) + self.beta * np.outer(g, g)

    def metric_derivatives(self, x: Array) -> Array:
        """d[k, i, j] = d_k G_ij."""
        g, h = self.gradient(x), self.field(x)
        return self.beta * (np.einsum("ki,j->kij", h, g) + np.einsum("i,kj->kij", g, h))

    def christoffel(self, x: Array) -> Array:
        """Gamma[k, i, j] of the Levi-Civita connection, from the derivatives of the metric."""
        d = self.metric_derivatives(x)
        lowered = 0.5 * (np.einsum("ilj->lij", d) + np.einsum("jli->lij", d) - d)
        return np.einsum("kl,lij->kij", linalg.inv(self.metric(x)), lowered)

    def potential_gradient(self, x: Array) -> Array:
        """Gradient of phi = -l + log det G / 2, by Jacobi's formula."""
        inverse = linalg.inv(self.metric(x))
        return -self.gradient(x) + 0.5 * np.einsum("ij,kji->k", inverse, self.metric_derivatives(x))

    def log_determinant(self, x: Array) -> float:
        return float(np.linalg.slogdet(self.metric(x))[1])

    def energy(self, x: Array, v: Array) -> float:
        """Minus the log density of (x, v), v ~ N(0, G^-1) given x, without the constant of the normal."""
        return -self.target.value_gradient(x)[0] - 0.5 * self.log_determinant(x) + 0.5 * v @ self.metric(x) @ v

    def velocities(self, x: Array, z: Array) -> Array:
        """v ~ N(0, G(x)^-1) from standard normal z, for positions and z of shape (n, d)."""
        g = np.array([self.gradient(row) for row in x])
        lower = np.linalg.cholesky(np.diag(self.delta) + self.beta * g[:, :, None] * g[:, None, :])
        return np.linalg.solve(np.swapaxes(lower, 1, 2), z[:, :, None])[:, :, 0]

    # -- steps, from the published definitions

    def half_semi_explicit(self, x: Array, v: Array, step: float) -> Array:
        """[I + (step/2) Omega] v' = v - (step/2) G^-1 grad phi, Omega^k_j = Gamma^k_ij v^i (Lan et al. 2015)."""
        omega = np.einsum("kij,i->kj", self.christoffel(x), v)
        pushed = v - 0.5 * step * linalg.solve(self.metric(x), self.potential_gradient(x))
        return linalg.solve(np.eye(len(x)) + 0.5 * step * omega, pushed)

    def half_flow(self, x: Array, v: Array, step: float) -> Array:
        """dv/dt = -Gamma(v, v) at fixed x for the time step/2, by an adaptive method of order 8."""
        gamma = self.christoffel(x)
        done = solve_ivp(lambda _, w: -np.einsum("kij,i,j->k", gamma, w, w), (0.0, 0.5 * step), v,
                         method="DOP853", rtol=1e-13, atol=1e-14 * np.abs(v).max())
        return done.y[:, -1]

    def step(self, scheme: str, x: Array, v: Array, step: float) -> tuple[Array, Array]:
        if scheme == "semi-explicit":
            v = self.half_semi_explicit(x, v, step)
            x = x + step * v
            return x, self.half_semi_explicit(x, v, step)
        v = self.half_flow(x, v, step)
        v = v - 0.5 * step * linalg.solve(self.metric(x), self.potential_gradient(x))
        x = x + step * v
        v = v - 0.5 * step * linalg.solve(self.metric(x), self.potential_gradient(x))
        return x, self.half_flow(x, v, step)

    # -- exact motion

    def exact(self, x: Array, v: Array, time: float) -> tuple[Array, Array]:
        """(x, v) after `time` of the exact motion: Hamilton's equations of -l + log det G / 2 + p^T G^-1 p / 2."""
        d = len(x)

        def equations(_: float, state: Array) -> Array:
            position, momentum = state[:d], state[d:]
            velocity = linalg.solve(self.metric(position), momentum, assume_a="pos")
            force = 0.5 * np.einsum("i,kij,j->k", velocity, self.metric_derivatives(position), velocity)
            return np.concatenate([velocity, force - self.potential_gradient(position)])

        start = np.concatenate([x, self.metric(x) @ v])
        done = solve_ivp(equations, (0.0, time), start, method="DOP853", rtol=1e-12, atol=1e-13)
        return done.y[:d, -1], linalg.solve(self.metric(done.y[:d, -1]), done.y[d:, -1])


# ---- isokinetic motion ----------------------------------------------------------------------------------------------


class Isokinetic:
    """dv/dt = (|v|^2 s g - v (v.g)) / (d - 1), |v|^2 = v.v / s, s = 1 / delta: of constant length, only turned."""

    def __init__(self, target, delta: Array) -> None:
        self.target, self.delta = target, np.asarray(delta, dtype=float)

    def energy(self, x: Array, v: Array) -> float:
        return -self.target.value_gradient(x)[0]

    def log_determinant(self, x: Array) -> float:
        """In the place of log det G: the logarithm of the density of the volume in (x, v) that the motion keeps."""
        return self.target.value_gradient(x)[0]

    def _turning(self, x: Array, v: Array) -> Array:
        g = self.target.value_gradient(x)[1]
        return (v @ (self.delta * v) * g / self.delta - v * (v @ g)) / (len(x) - 1)

    def half_turn(self, x: Array, v: Array, step: float) -> Array:
        done = solve_ivp(lambda _, w: self._turning(x, w), (0.0, 0.5 * step), v, method="DOP853", rtol=1e-13,
                         atol=1e-14 * np.abs(v).max())
        return done.y[:, -1]

    def step(self, scheme: str, x: Array, v: Array, step: float) -> tuple[Array, Array]:
        v = self.half_turn(x, v, step)
        x = x + step * v
        return x, self.half_turn(x, v, step)

    def exact(self, x: Array, v: Array, time: float) -> tuple[Array, Array]:
        d = len(x)

        def equations(_: float, state: Array) -> Array:
            return np.concatenate([state[d:], self._turning(state[:d], state[d:])])

        done = solve_ivp(equations, (0.0, time), np.concatenate([x, v]), method="DOP853", rtol=1e-12, atol=1e-13)
        return done.y[:d, -1], done.y[d:, -1]


# ---- halved steps, from their definition ----------------------------------------------------------------------------


def halved_step(micro: Callable, x: Array, v: Array, step: float, most: int, bound: float) -> tuple:
    """(status, x, v, gradients, halvings) of one macro step, by the rule of Bou-Rabee, Carpenter, Kleppe & Liu (2025).

    micro(x, v, step, n) -> (levels, end, calls): the log weights of the start and of each of the n steps that worked,
    the end (x, v) or None after a failed step, and calls[i], the gradients that the first i steps cost. Status 10: no
    number of halvings fits; 11: the far end would have chosen fewer.
    """
    spent, chosen, end = 0, None, None
    for k in range(most + 1):
        fits, cost, there = _trial(micro, x, v, step, k, bound)
        spent += cost
        if fits:
            chosen, end = k, there
            break
    if chosen is None:
        return 10, x, v, spent, None
    for k in range(chosen):
        fits, cost, _ = _trial(micro, *end, -step, k, bound)
        spent += cost
        if fits:
            return 11, x, v, spent, chosen
    return 0, *end, spent, chosen


def _trial(micro: Callable, x: Array, v: Array, step: float, k: int, bound: float) -> tuple:
    count = 2**k
    levels, end, calls = micro(x, v, step / count, count)
    for i in range(1, len(levels)):
        if np.ptp(levels[: i + 1]) > bound:
            return False, calls[i], None
    return end is not None, calls[-1], end
