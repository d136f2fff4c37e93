"""Draws of posteriors with certified answers: NIST's Markov chain Monte Carlo and linear regression sets.

False alarms: 1e-5 a test (`sampling.FALSE_ALARM`), seeds fixed. Each test states the smallest bias that it notices, in
standard deviations for means, relative for standard deviations, as a probability for quantiles, and asserts it.
"""

from decimal import Decimal

import checks
import numpy as np
import pytest
import sampling

OFFSETS = {"mcmc01": 10**8, "mcmc06": 10**13}

SAMPLE_WAYS = [
    *[("mcmc01", way) for way in sampling.WAYS],
    ("mcmc06", "leapfrog, no-u-turn"),
    ("mcmc06", "leapfrog, jittered"),
    ("mcmc06", "surrogate, no-u-turn"),
    ("mcmc06", "product, no-u-turn"),
]
# Hessian motions on Pontius need some twenty steps a draw, hence fewer draws.
LINE_WAYS = [
    *[("Norris", way, 60_000) for way in sampling.WAYS],
    ("Pontius", "leapfrog, no-u-turn", 60_000),
    ("Pontius", "leapfrog, jittered", 100_000),
    ("Pontius", "surrogate, no-u-turn", 60_000),
    ("Pontius", "product, no-u-turn", 30_000),
    ("Pontius", "difference, no-u-turn", 30_000),
]


@pytest.mark.parametrize(("name", "way"), SAMPLE_WAYS)
def test_certified_normal_samples(name, way):
    """Means, sds and quantiles of mu and sigma as NIST certifies them; notices 0.035 (surrogate 0.08)."""
    certified = {key: Decimal(text) for key, text in checks.values(f"nist_{name}")["certified"].items()}
    # Tails of sigma are where the surrogate's paths are refused most, so its squares need more draws.
    keep, smallest = (200_000, 0.08) if "surrogate" in way else (90_000, 0.035)
    draws = sampling.draw(name, way, keep=keep, seed=[101, 606][name == "mcmc06"]).draws
    values = {"mu": draws[..., 0], "sigma": np.exp(draws[..., 1])}
    family = []
    for quantity, x in values.items():
        # x[0] is mu less the offset of the model, which only exact decimals can take off.
        offset = OFFSETS[name] if quantity == "mu" else 0
        known = {p: float(certified[f"{quantity}_q{p}"] - offset) for p in (0.025, 0.5, 0.975)}
        mean = float(certified[f"{quantity}_mean"] - offset)
        family += sampling.compare(x, quantity, mean, float(certified[f"{quantity}_sd"]), known)
    assert len(family) == 10
    sampling.assert_agrees(family, smallest)


@pytest.mark.parametrize(("name", "way", "keep"), LINE_WAYS)
def test_certified_regressions(name, way, keep):
    """Coefficients and sigma against certified estimates and the closed-form posterior; notices 0.03 (Pontius 0.06).

    Under the prior 1 / sigma the posterior of a coefficient is Student's t about the certified estimate, scaled by the
    certified standard error, so its sd is the certified one times sqrt(nu / (nu - 2)); the quantiles of both
    and the law of sigma were computed to 20 digits and more.
    """
    known = checks.values("nist_lls")[name]
    draws = sampling.draw(name, way, keep=keep, seed=17).draws
    marginals = sampling.target(name).marginals
    widening = np.sqrt(known["nu"] / (known["nu"] - 2.0))
    family = []
    for row in known["parameters"]:
        x = marginals[row["name"]].values(draws)
        quantiles = {float(p): float(q) for p, q in row["quantiles"].items()}
        mean, sd = float(row["certified_estimate"]), float(row["certified_sd"]) * widening
        family += sampling.compare(x, row["name"], mean, sd, quantiles)
    sigma = marginals["sigma"].values(draws)
    quantiles = {float(p): float(q) for p, q in known["sigma_q"].items()}
    mean, sd = float(known["sigma_post_mean"]), float(known["sigma_post_sd"])
    family += sampling.compare(sigma, "sigma", mean, sd, quantiles)
    assert len(family) == 9 * known["p"] + 7
    sampling.assert_agrees(family, 0.03 if name == "Norris" else 0.06)
