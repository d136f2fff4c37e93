"""Targets given by a formula, with known marginals: Student-t, Rosenbrock, ring, funnel, ridge, rough well, edges."""

import numpy as np
from scipy import stats
from scipy.special import gammaln

from . import laws
from .normals import (
    LOG_TWO_PI,
    equicorrelated_draws,
    equicorrelated_inverse,
    equicorrelated_log_determinant,
)
from .target import Array, Marginal, Target, constructor, context_of, some_coordinates

PROBABILITIES = (0.05, 0.25, 0.5, 0.75, 0.95)
NEAL = "Neal (2003), Slice sampling, Ann. Stat. 31:705-767, section 8"
PAGANI = "Pagani, Wiegand & Nadarajah, An n-dimensional Rosenbrock distribution for MCMC testing, arXiv 1903.09556"
SOHL = "Sohl-Dickstein, Mudigonda & DeWeese (2014), Hamiltonian Monte Carlo Without Detailed Balance, PMLR 32"


def _known(of, law, mean: float | None, sd: float | None, source: str = "textbook") -> Marginal:
    quantiles = {p: float(q) for p, q in zip(PROBABILITIES, law.ppf(np.array(PROBABILITIES)), strict=True)}
    mean, sd = (None if moment is None else float(moment) for moment in (mean, sd))
    return Marginal(of, law, mean, sd, quantiles, source)


@constructor
def student(d: int, nu: float, rho: float = 0.0, scale: float = 1.0) -> Target:
    """Multivariate Student-t with scale matrix scale^2 ((1 - rho) I + rho 1 1^T), normalised, O(d) a call.

    Marginals: coordinates (t with nu degrees of freedom times scale) and "form" = x^T S^-1 x / d, F with (d, nu).
    Context: log constant, nu, w, c of the inverse scale matrix.
    """
    w, c = equicorrelated_inverse(d, rho, scale)
    constant = gammaln(0.5 * (nu + d)) - gammaln(0.5 * nu) - 0.5 * d * np.log(nu * np.pi)
    constant -= 0.5 * equicorrelated_log_determinant(d, rho, scale)

    def draws(n: int, rng: np.random.Generator) -> Array:
        normal = equicorrelated_draws(n, d, rho, scale, rng)
        return normal * np.sqrt(nu / rng.chisquare(nu, (n, 1)))

    def form(x: Array) -> Array:
        return w * ((x**2).sum(axis=-1) - c * x.sum(axis=-1) ** 2) / d

    sd = scale * np.sqrt(nu / (nu - 2.0)) if nu > 2.0 else None
    law = stats.t(nu, 0.0, scale)
    marginals = {f"x{i + 1}": _known(i, law, 0.0 if nu > 1.0 else None, sd) for i in some_coordinates(d)}
    ratio = stats.f(d, nu)
    marginals["form"] = _known(
        form, ratio, nu / (nu - 2.0) if nu > 2.0 else None, float(ratio.std()) if nu > 4.0 else None
    )
    name = f"Student-t, d = {d}, nu = {nu:g}, rho = {rho:g}"
    return Target(name, d, "student", context_of(constant, nu, w, c), draws, marginals)


@constructor
def rosenbrock(a: float = 0.5, b: float = 5.0, mu: float = 1.0, pairs: int = 1) -> Target:
    """Independent pairs x1 ~ N(mu, 1/(2a)), x2 | x1 ~ N(x1^2, 1/(2b)), normalised; dimension 2 * pairs.

    Context: log constant, a, b, mu.
    """
    d = 2 * pairs
    first, noise = np.sqrt(0.5 / a), np.sqrt(0.5 / b)

    def draws(n: int, rng: np.random.Generator) -> Array:
        x = np.empty((n, d))
        x[:, 0::2] = mu + first * rng.standard_normal((n, pairs))
        x[:, 1::2] = x[:, 0::2] ** 2 + noise * rng.standard_normal((n, pairs))
        return x

    second = laws.RosenbrockSecond(a, b, mu)
    second_sd = float(np.sqrt(2.0 * first**4 + 4.0 * mu**2 * first**2 + noise**2))
    kinds = [
        _known(0, stats.norm(mu, first), mu, float(first), PAGANI),
        _known(1, second, mu**2 + first**2, second_sd, PAGANI),
    ]
    marginals = {}
    for i in some_coordinates(d):
        k = kinds[i % 2]
        marginals[f"x{i + 1}"] = Marginal(i, k.law, k.mean, k.sd, k.quantiles, k.source)
    context = context_of(0.5 * pairs * np.log(a * b / np.pi**2), a, b, mu)
    return Target(f"Rosenbrock a={a:g} b={b:g} mu={mu:g}, d = {d}", d, "rosenbrock", context, draws, marginals, PAGANI)


@constructor
def ring(d: int = 2, r0: float = 3.0, s: float = 0.5) -> Target:
    """exp(-(|x| - r0)^2 / (2 s^2)) in R^d, d >= 2, unnormalised. Context: r0, 1 / s^2.

    The radius has the density r^(d-1) exp(-(r - r0)^2 / (2 s^2)), which is log-concave: exact draws come by rejection
    from the normal with the same mode and sd s.
    """
    if d < 2:
        raise ValueError("A ring needs at least two dimensions.")
    mode = 0.5 * (r0 + np.sqrt(r0**2 + 4.0 * (d - 1) * s**2))

    def radii(n: int, rng: np.random.Generator) -> Array:
        kept = np.empty(0)
        while kept.size < n:
            r = mode + s * rng.standard_normal(n + 64)
            r = r[r > 0.0]
            log_ratio = (d - 1) * (np.log(r / mode) - (r - mode) / mode)
            kept = np.concatenate([kept, r[np.log(rng.random(r.size)) < log_ratio]])
        return kept[:n]

    def draws(n: int, rng: np.random.Generator) -> Array:
        z = rng.standard_normal((n, d))
        return z * (radii(n, rng) / np.linalg.norm(z, axis=1))[:, None]

    radius = laws.TabulatedLaw(
        lambda r: (d - 1) * np.log(np.maximum(r, 1e-300)) - 0.5 * ((r - r0) / s) ** 2,
        max(0.0, mode - 9.0 * s),
        mode + 9.0 * s,
        panels=400,
    )
    coordinate = laws.SphereCoordinate(radius, d)
    coordinate_sd = float(np.sqrt((radius.mean**2 + radius.sd**2) / d))
    base = _known(0, coordinate, 0.0, coordinate_sd, "common practice")
    marginals = {
        f"x{i + 1}": Marginal(i, base.law, base.mean, base.sd, base.quantiles, base.source) for i in some_coordinates(d)
    }
    marginals["radius"] = _known(lambda x: np.linalg.norm(x, axis=-1), radius, radius.mean, radius.sd, base.source)
    return Target(f"ring r0={r0:g} s={s:g}, d = {d}", d, "ring", context_of(r0, s**-2.0), draws, marginals)


@constructor
def funnel(d: int = 2, sd: float = 3.0) -> Target:
    """x[0] = v ~ N(0, sd^2), the other d - 1 coordinates N(0, exp(v)), normalised. Context: log constant, 1 / sd^2."""

    def draws(n: int, rng: np.random.Generator) -> Array:
        x = rng.standard_normal((n, d))
        x[:, 0] *= sd
        x[:, 1:] *= np.exp(0.5 * x[:, :1])
        return x

    v = sd * np.linspace(-10.0, 10.0, 401)
    other = laws.NormalMixture(np.exp(-0.5 * (v / sd) ** 2), np.zeros_like(v), np.exp(0.5 * v))
    marginals = {"v": _known(0, stats.norm(0.0, sd), 0.0, sd, NEAL)}
    marginals["x1"] = _known(1, other, 0.0, float(np.exp(0.25 * sd**2)), NEAL)
    # E log|z| = -(gamma + log 2)/2 and var log|z| = pi^2/8 for a standard normal z.
    marginals["log|x1|"] = Marginal(
        lambda x: np.log(np.abs(x[..., 1])),
        mean=-0.5 * (np.euler_gamma + np.log(2.0)),
        sd=float(np.sqrt(sd**2 / 4.0 + np.pi**2 / 8.0)),
        source=NEAL,
    )
    context = context_of(-0.5 * d * LOG_TWO_PI - np.log(sd), sd**-2.0)
    return Target(f"funnel sd={sd:g}, d = {d}", d, "funnel", context, draws, marginals, NEAL)


@constructor
def winding_ridge(w: float = 1.5, s1: float = 2.0, s2: float = 0.3) -> Target:
    """(x1, x2 + sin(w x1)) ~ N(0, diag(s1^2, s2^2)), normalised. Context: log constant, w, 1 / s1^2, 1 / s2^2."""

    def draws(n: int, rng: np.random.Generator) -> Array:
        x = rng.standard_normal((n, 2)) * [s1, s2]
        x[:, 1] -= np.sin(w * x[:, 0])
        return x

    # A trapezoid rule converges exponentially here; eight points a sd of the ridge, measured along the ridge.
    step = min(s1, s2 / w) / 8.0
    x1 = np.arange(-9.5 * s1, 9.5 * s1, step)
    second = laws.NormalMixture(np.exp(-0.5 * (x1 / s1) ** 2), -np.sin(w * x1), np.full(x1.shape, s2))
    second_sd = float(np.sqrt(s2**2 - 0.5 * np.expm1(-2.0 * (w * s1) ** 2)))
    source = "sinusoidal shear of a normal"
    marginals = {
        "x1": _known(0, stats.norm(0.0, s1), 0.0, s1, source),
        "x2": _known(1, second, 0.0, second_sd, source),
    }
    context = context_of(-LOG_TWO_PI - np.log(s1 * s2), w, s1**-2.0, s2**-2.0)
    return Target(f"winding ridge w={w:g} s1={s1:g} s2={s2:g}", 2, "winding_ridge", context, draws, marginals, source)


@constructor
def rough_well(d: int = 2, scale: float = 100.0, wavelength: float = 4.0) -> Target:
    """exp(-sum [x_i^2 / (2 scale^2) + cos(2 pi x_i / wavelength)]), unnormalised.

    The defaults are the rough well of Sohl-Dickstein et al. (2014). Context: 1 / scale^2, wave number. Exact draws by
    rejection from N(0, scale^2).
    """
    wave = 2.0 * np.pi / wavelength

    def draws(n: int, rng: np.random.Generator) -> Array:
        kept = np.empty(0)
        while kept.size < n * d:
            x = scale * rng.standard_normal(2 * n * d + 64)
            kept = np.concatenate([kept, x[np.log(rng.random(x.size)) < -1.0 - np.cos(wave * x)]])
        return kept[: n * d].reshape(n, d)

    panels = int(np.ceil(18.0 * scale / (0.125 * wavelength)))
    law = laws.TabulatedLaw(
        lambda x: -0.5 * (x / scale) ** 2 - np.cos(wave * x), -9.0 * scale, 9.0 * scale, panels=panels
    )
    base = _known(0, law, 0.0, law.sd, SOHL)
    marginals = {
        f"x{i + 1}": Marginal(i, base.law, base.mean, base.sd, base.quantiles, base.source) for i in some_coordinates(d)
    }
    name = f"rough well scale={scale:g} wavelength={wavelength:g}, d = {d}"
    return Target(name, d, "rough_well", context_of(scale**-2.0, wave), draws, marginals, SOHL)


@constructor
def exponential(rates: Array) -> Target:
    """Independent exponentials on x >= 0 with the given rates (d,), normalised; the callback returns 1 outside.

    The gradient does not vanish at the edge. Context: log constant, rates, zeros.
    """
    rates = np.array(rates, dtype=float)
    d = len(rates)
    marginals = {
        f"x{i + 1}": _known(i, stats.expon(0.0, 1.0 / rates[i]), 1.0 / rates[i], 1.0 / rates[i])
        for i in some_coordinates(d)
    }
    context = context_of(np.log(rates).sum(), rates, np.zeros(d))

    def draws(n: int, rng: np.random.Generator) -> Array:
        return rng.standard_exponential((n, d)) / rates

    return Target(f"exponential, d = {d}", d, "one_sided", context, draws, marginals)


@constructor
def half_normal(sds: Array) -> Target:
    """Independent |N(0, sd^2)| on x >= 0 with the given sds (d,), normalised; the callback returns 1 outside.

    Context: log constant, zeros, 1 / sd^2.
    """
    sds = np.array(sds, dtype=float)
    d = len(sds)
    unit_mean, unit_sd = np.sqrt(2.0 / np.pi), np.sqrt(1.0 - 2.0 / np.pi)
    marginals = {
        f"x{i + 1}": _known(i, stats.halfnorm(0.0, sds[i]), unit_mean * sds[i], unit_sd * sds[i])
        for i in some_coordinates(d)
    }
    context = context_of(0.5 * d * np.log(2.0 / np.pi) - np.log(sds).sum(), np.zeros(d), sds**-2.0)

    def draws(n: int, rng: np.random.Generator) -> Array:
        return np.abs(rng.standard_normal((n, d))) * sds

    return Target(f"half-normal, d = {d}", d, "one_sided", context, draws, marginals)
