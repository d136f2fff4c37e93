"""Posteriors of models on simulated data for the benchmarks: GARCH(1,1), a mixture of two normals, a log-Gaussian Cox
field. The first two are compiled by Numba; the data are invented, drawn from the models themselves."""

from functools import cache

import numba
import numpy as np
from numba import types
from scipy import LowLevelCallable

import fellwalk as fw

_POINTER = types.CPointer(types.double)
_SIGNATURE = types.intc(types.uintp, _POINTER, _POINTER, _POINTER, types.voidptr)


def _returns(n: int, seed: int) -> np.ndarray:
    """A GARCH(1,1) series with mu = 0.05, omega = 0.1, alpha = 0.15, beta = 0.75."""
    rng = np.random.default_rng(seed)
    y, h = np.empty(n), 1.0
    for t in range(n):
        y[t] = 0.05 + np.sqrt(h) * rng.standard_normal()
        h = 0.1 + 0.15 * (y[t] - 0.05) ** 2 + 0.75 * h
    return y


@cache
def garch(n: int = 500, seed: int = 1) -> fw.Density:
    """x = (mu, log omega, logit p, logit r), alpha = p r, beta = p (1 - r); p and r uniform on (0, 1), mu ~ N(0, 1),
    log omega ~ N(-2, 4); the first variance is that of the sample."""
    data = _returns(n, seed)
    first = float(data.var())

    @numba.cfunc(_SIGNATURE)
    def log_density(d, x, value, gradient, context):
        mu, omega = x[0], np.exp(x[1])
        p, r = 1.0 / (1.0 + np.exp(-x[2])), 1.0 / (1.0 + np.exp(-x[3]))
        alpha, beta = p * r, p * (1.0 - r)
        h, of_mu, of_omega, of_alpha, of_beta = first, 0.0, 0.0, 0.0, 0.0
        total, g_mu, g_omega, g_alpha, g_beta = 0.0, 0.0, 0.0, 0.0, 0.0
        for t in range(n):
            e = data[t] - mu
            total += -0.5 * (np.log(h) + e * e / h)
            slope = -0.5 / h * (1.0 - e * e / h)
            g_mu += e / h + slope * of_mu
            g_omega += slope * of_omega
            g_alpha += slope * of_alpha
            g_beta += slope * of_beta
            of_mu = -2.0 * alpha * e + beta * of_mu
            of_omega = 1.0 + beta * of_omega
            of_alpha = e * e + beta * of_alpha
            of_beta = h + beta * of_beta
            h = omega + alpha * e * e + beta * h
        by_p, by_r = g_alpha * r + g_beta * (1.0 - r), p * (g_alpha - g_beta)
        value[0] = (total - 0.5 * mu * mu - 0.125 * (x[1] + 2.0) ** 2 + np.log(p * (1.0 - p)) +
                    np.log(r * (1.0 - r)))
        gradient[0] = g_mu - mu
        gradient[1] = g_omega * omega - 0.25 * (x[1] + 2.0)
        gradient[2] = by_p * p * (1.0 - p) + 1.0 - 2.0 * p
        gradient[3] = by_r * r * (1.0 - r) + 1.0 - 2.0 * r
        return 0 if np.isfinite(value[0]) else 1

    return fw.Density(LowLevelCallable(log_density.ctypes), 4, start=[0.0, -2.0, 2.0, -1.5])


@cache
def mixture(n: int = 200, seed: int = 2) -> fw.Density:
    """x = (m1, log(m2 - m1), log s1, log s2, logit w) of w N(m1, s1^2) + (1 - w) N(m2, s2^2); means N(0, 9), logarithms
    N(0, 1), w uniform. Data: 0.4 N(-1, 0.7^2) + 0.6 N(1.5, 1)."""
    rng = np.random.default_rng(seed)
    left = rng.random(n) < 0.4
    data = np.where(left, -1.0 + 0.7 * rng.standard_normal(n), 1.5 + rng.standard_normal(n))

    @numba.cfunc(_SIGNATURE)
    def log_density(d, x, value, gradient, context):
        gap, s1, s2 = np.exp(x[1]), np.exp(x[2]), np.exp(x[3])
        m1, m2, w = x[0], x[0] + gap, 1.0 / (1.0 + np.exp(-x[4]))
        total, g1, g2, gs1, gs2, gw = 0.0, 0.0, 0.0, 0.0, 0.0, 0.0
        for i in range(n):
            z1, z2 = (data[i] - m1) / s1, (data[i] - m2) / s2
            a, b = np.log(w) - x[2] - 0.5 * z1 * z1, np.log1p(-w) - x[3] - 0.5 * z2 * z2
            top = max(a, b)
            each = top + np.log(np.exp(a - top) + np.exp(b - top))
            p = np.exp(a - each)
            total += each
            g1 += p * z1 / s1
            g2 += (1.0 - p) * z2 / s2
            gs1 += p * (z1 * z1 - 1.0)
            gs2 += (1.0 - p) * (z2 * z2 - 1.0)
            gw += p - w
        value[0] = (total - (m1 * m1 + m2 * m2) / 18.0 - 0.5 * (x[1] ** 2 + x[2] ** 2 + x[3] ** 2) +
                    np.log(w * (1.0 - w)))
        gradient[0] = g1 + g2 - (m1 + m2) / 9.0
        gradient[1] = (g2 - m2 / 9.0) * gap - x[1]
        gradient[2] = gs1 - x[2]
        gradient[3] = gs2 - x[3]
        gradient[4] = gw + 1.0 - 2.0 * w
        return 0 if np.isfinite(value[0]) else 1

    return fw.Density(LowLevelCallable(log_density.ctypes), 5, start=[-1.0, 1.0, 0.0, 0.0, 0.0])


@cache
def cox(side: int = 32, seed: int = 3) -> fw.Density:
    """Counts of a log-Gaussian Cox field on side x side cells: Poisson(exp(1 + f)), f = L z L' with the covariance
    exp(-|dx| / 0.1 - |dy| / 0.1) on the unit square, z standard normal: x = z, side^2 numbers."""
    at = (np.arange(side) + 0.5) / side
    lower = np.linalg.cholesky(np.exp(-np.abs(at[:, None] - at) / 0.1))
    rng = np.random.default_rng(seed)
    counts = rng.poisson(np.exp(1.0 + lower @ rng.standard_normal((side, side)) @ lower.T)).astype(float)

    def log_density(x: np.ndarray, gradient: np.ndarray) -> float:
        field = 1.0 + lower @ x.reshape(side, side) @ lower.T
        if field.max() > 600.0:
            return -np.inf
        rate = np.exp(field)
        gradient[:] = (lower.T @ (counts - rate) @ lower).ravel() - x
        return float((counts * field).sum() - rate.sum() - 0.5 * x @ x)

    return fw.Density(log_density, side * side, in_place=True, start=np.zeros(side * side))
