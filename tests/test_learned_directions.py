"""Learned directions of the base metric: what they make of ill-conditioned targets, and what they leave alone.

Everything is judged from outside: the base metric as a chain gives it, against the exact covariance of the target. The
spread of a base metric over a target is the square root of the condition number of the covariance that the motion
sees: 1 is perfect, and the number of steps a draw needs grows with it.
"""

from functools import cache

import numpy as np
import pytest
import stat_checks
import targets
from scipy.special import polygamma
from targets.models import regression_data

import fellwalk as fw

MOTIONS = {
    "leapfrog": fw.Leapfrog(),
    "surrogate": fw.Lagrangian(bend=0.3),
    "product": fw.Lagrangian(bend=0.3, curvature="product"),
}


def chain_on(target, start, **named):
    density = fw.Density(target.density, target.dimension, hessian_product=target.hessian_product)
    return fw.Chain(density, start, **named)


def spread(chain, root, unit):
    """sqrt(condition number) of S^-1 C S^-T, for the base metric G0^-1 = S S^T of the chain and C = U root root^T U,
    U = diag(unit); everything in units of U, where C is best known."""
    scale, directions, variances = chain.base_metric
    np.testing.assert_allclose(directions @ directions.T, np.eye(len(directions)), rtol=0, atol=1e-12)
    y = root / (np.sqrt(scale) / unit)[:, None]
    y += directions.T @ ((1.0 / np.sqrt(variances) - 1.0)[:, None] * (directions @ y))
    values = np.linalg.svd(y, compute_uv=False)
    return values[0] / values[-1]


def worth(draws):
    """The least effective draws of all coordinates of draws (chains, n, d), of their centres and their squares."""
    z = draws - draws.mean(axis=(0, 1))
    return min(stat_checks.effective_draws(f[..., i]) for f in (z, z**2) for i in range(draws.shape[-1]))


# ---- Longley's regression -------------------------------------------------------------------------------------------

# A plan of settling of some 3,400 gradients here, which leaves room for paths that are long while the base is wrong.
LONGLEY_SETTLE = 400


class Longley:
    """Raw predictors and an intercept; the square root of the condition number of the posterior covariance, all sds
    made 1, is 35,900."""

    def __init__(self):
        self.target = targets.regression("Longley", centred=False)
        response, predictors = regression_data("Longley")
        n, design = len(response), np.column_stack([np.ones(len(response)), predictors])
        length = np.linalg.norm(design, axis=0)
        q, r = np.linalg.qr(design / length)
        nu = n - design.shape[1]
        residual = response - q @ (q.T @ response)
        variance = residual @ residual / nu
        # Student-t with nu degrees of freedom; log sigma = log of a root of chi^2, uncorrelated with the rest.
        root = np.linalg.inv(r) / length[:, None] * np.sqrt(variance * nu / (nu - 2))
        self.root = np.zeros((8, 8))
        self.root[:7, :7], self.root[7, 7] = root, 0.5 * np.sqrt(polygamma(1, nu / 2))
        self.sd = np.linalg.norm(self.root, axis=1)
        self.root /= self.sd[:, None]
        coefficients = np.linalg.solve(r, q.T @ response) / length
        self.middle = np.append(coefficients, 0.5 * np.log(variance))

    def start(self, number):
        """0: the origin; 1 to 4: each coordinate by itself some 10 posterior sds away, so that along the tightest
        direction of the posterior the start is 100,000 of its sds out."""
        if number == 0:
            return np.zeros(8)
        return self.middle + 10.0 * self.sd * np.random.default_rng([2385, number]).standard_normal(8)

    @staticmethod
    @cache
    def chains(number):
        """20 settled chains from one start."""
        found = []
        for seed in range(20):
            chain = chain_on(longley().target, longley().start(number), seed=seed)
            chain.settle(LONGLEY_SETTLE)
            found.append((chain, chain.counts["gradients"]))
        return found


@cache
def longley():
    return Longley()


def test_a_diagonal_is_of_no_use_on_longley():
    root = longley().root
    values = np.linalg.svd(root, compute_uv=False)
    assert values[0] / values[-1] > 23_800


@pytest.mark.parametrize("number", range(5))
def test_longley_settles_within_5000_gradients_on_every_seed(number):
    """From the origin and from four dispersed starts, 20 seeds each: the plan has ended, and the base metric is within
    a factor of 4 of the posterior covariance in every direction."""
    for chain, gradients in Longley.chains(number):
        assert chain.settled
        assert gradients <= 5000
        assert spread(chain, longley().root, longley().sd) < 4.0


def test_longley_gives_the_certified_numbers_at_50_effective_draws_in_1000_gradients():
    """Certified estimates and their standard deviations, from the 100 chains of all starts, 600 draws each.

    False-alarm rate 1e-5. The power is asserted too: a bias of 5% of a standard deviation would be noticed.
    """
    kept = [chain.advance(600) for number in range(5) for chain, _ in Longley.chains(number)]
    draws = np.array([block.draws for block in kept])
    gradients = sum(int(block.facts["gradients"].sum()) for block in kept)
    family = []
    for name, marginal in longley().target.marginals.items():
        family += stat_checks.compare_marginal(draws, marginal, name)
        x = (marginal.values(draws) - marginal.mean) / marginal.sd
        mean = stat_checks.compare_mean(x, 0.0)
        assert mean.error * (stat_checks.z_limit(60, 1e-5) + 2.0) < 0.05
    assert len(family) >= 7 * 7
    stat_checks.assert_all(family, 1e-5)
    assert worth(draws) >= 0.050 * gradients


# ---- one direction --------------------------------------------------------------------------------------------------


def equicorrelated_root(d, rho):
    """(1 - rho) I + rho 1 1^T as root root^T."""
    flat = np.full((d, d), 1.0 / d)
    return np.sqrt(1.0 - rho) * (np.eye(d) - flat) + np.sqrt(1.0 + (d - 1) * rho) * flat


EQUI = (100, 0.99)


@cache
def equicorrelated(rank):
    """(spread, effective draws a gradient) of four chains that settled with this rank, and the last of them."""
    target, draws, gradients, spreads = targets.equicorrelated_normal(*EQUI), [], 0, []
    for seed in range(4):
        start = target.exact_draws(1, np.random.default_rng(seed))[0]
        chain = chain_on(target, start, rank=rank, seed=seed)
        chain.settle(500)
        block = chain.advance(4000 if rank == 0 else 1000)
        draws.append(block.draws)
        gradients += int(block.facts["gradients"].sum())
        spreads.append(spread(chain, equicorrelated_root(*EQUI), np.ones(100)))
    return max(spreads), worth(np.array(draws)) / gradients, chain


@pytest.mark.parametrize("rank", [1, "auto"])
def test_one_strong_direction_is_worth_a_factor_of_20(rank):
    """Equicorrelated, d = 100, rho = 0.99: the variance along (1, ..., 1) is 9,900 times that of every other direction.
    Measured over 8 seeds: more than 1,000 times the effective draws of rank 0, whose spread is 109."""
    assert equicorrelated(rank)[1] >= 20.0 * equicorrelated(0)[1]


@pytest.mark.parametrize("rank", [1, "auto"])
def test_the_direction_found_is_the_right_one(rank):
    wide, _, chain = equicorrelated(rank)
    assert equicorrelated(0)[0] > 50.0
    assert wide < 4.0
    directions, variances = chain.base_metric[1:]
    assert len(directions) == 1
    assert abs(directions[0].sum()) / 10.0 > 0.99
    assert abs(np.log(variances[0] * 0.01 / 99.01)) < np.log(3.0)


@pytest.mark.parametrize("motion", MOTIONS)
@pytest.mark.parametrize("path", [fw.NoUTurn(), fw.Jittered(12)])
def test_every_motion_and_path_learns_and_draws_right(motion, path):
    """Means and sds of the direction and of coordinates; false-alarm rate 1e-5 a case."""
    d, rho = 20, 0.97
    target = targets.equicorrelated_normal(d, rho)
    chain = chain_on(target, np.linspace(-3.0, 3.0, d), motion=MOTIONS[motion], path=path, seed=31)
    chain.settle(500)
    assert spread(chain, equicorrelated_root(d, rho), np.ones(d)) < 4.0
    draws = chain.advance(3000).draws[None]
    family = [c for name, m in target.marginals.items() for c in stat_checks.compare_marginal(draws, m, name)]
    stat_checks.assert_all(family, 1e-5)


# ---- how many -------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("rank", [0, 1, 2, 5, 16])
def test_a_rank_given_is_kept(rank):
    """Also where nothing stands out; never more than one less than the dimension. The target is drawn right all the
    same: false-alarm rate 1e-5 a case."""
    for d in (2, 30):
        target = targets.standard_normal(d)
        chain = chain_on(target, np.full(d, 0.4), rank=rank, seed=5)
        chain.settle(200)
        assert chain.summary["directions"] == min(rank, d - 1)
        draws = chain.advance(2000).draws[None]
        family = [c for name, m in target.marginals.items() for c in stat_checks.compare_marginal(draws, m, name)]
        stat_checks.assert_all(family, 1e-5)


def dense(seed, d=8):
    """A normal whose correlations have eigenvalues over six decades."""
    rng = np.random.default_rng(seed)
    q = np.linalg.qr(rng.standard_normal((d, d)))[0]
    values = 10.0 ** rng.uniform(-3.0, 3.0, d)
    precision = (q / values) @ q.T
    return targets.dense_normal(0.5 * (precision + precision.T)), q * np.sqrt(values)


@pytest.mark.parametrize("seed", range(6))
def test_a_dense_normal_of_few_dimensions_is_learned_whole(seed):
    target, root = dense(seed)
    start = target.exact_draws(1, np.random.default_rng([seed, 1]))[0]
    chain = chain_on(target, start, seed=seed)
    chain.settle(300)
    assert np.linalg.cond(root) > 30.0
    assert spread(chain, root, np.ones(8)) < 4.0


def test_six_spikes_among_500_scales_over_six_decades():
    """Six directions whose variances are 1e4, 3e3, 1e3, 1e-3, 3e-4, 1e-4, scales over six decades: below 10 after
    10,000 gradients (square roots of condition numbers) for each of ten fixed seeds. Over 24 runs of the benchmark the
    largest was 3.7; without directions it stays above 1,000."""
    d, variances, seed = 500, np.array([1e4, 3e3, 1e3, 1e-3, 3e-4, 1e-4]), 20250
    rng = np.random.default_rng(seed)  # as random_spikes makes them
    directions = np.linalg.qr(rng.standard_normal((d, 6)))[0].T
    scales = 10.0 ** rng.permutation(np.linspace(-3.0, 3.0, d))
    target = targets.random_spikes(d, tuple(variances), 6.0, seed)
    assert np.array_equal(target.context[2 + 6 : 2 + 6 + d], 1.0 / scales)
    root = np.eye(d) + directions.T @ ((np.sqrt(variances) - 1.0)[:, None] * directions)
    found = []
    for number in range(10):
        chain = chain_on(target, np.zeros(d), seed=number, settle="auto")
        while not chain.settled and chain.counts["gradients"] < 10_000:
            chain.block(1, draws=False)
        assert chain.summary["directions"] == 6
        found.append(spread(chain, root, scales))
    assert max(found) < 10.0, found


# ---- nothing to find ------------------------------------------------------------------------------------------------

# This plan ends with a window of 200: climb 4, lead 10, windows of 20, 26, 34, 45, 60, 80 and 200, tail 95.
ENDS_WITH_200 = 574


def independent(d):
    rng = np.random.default_rng([d, 3])
    sd = 10.0 ** rng.uniform(-2.0, 2.0, d)
    return targets.independent_normal(sd * rng.standard_normal(d), sd)


@pytest.mark.parametrize(("d", "runs"), [(1000, 40), (100, 40), (10, 60)])
def test_independent_coordinates_show_no_direction(d, runs):
    """Windows of 200 draws invent a direction in at most 5% of runs."""
    target, kept = independent(d), 0
    for seed in range(runs):
        start = target.exact_draws(1, np.random.default_rng([d, seed]))[0]
        chain = chain_on(target, start, path=fw.Jittered(8), seed=seed, settle=ENDS_WITH_200)
        seen = []
        while not chain.settled:
            chain.block(1, draws=False)
            seen.append(chain.summary["windows"])
        closed = np.flatnonzero(np.diff(seen)) + 2
        assert abs(closed[-1] - closed[-2] - 200) <= 4
        kept += chain.summary["directions"] > 0
    assert kept <= 0.05 * runs


def test_on_independent_coordinates_looking_for_directions_costs_no_efficiency():
    """d = 1000: effective draws a gradient, on the average over all coordinates, within 5% of rank 0. The same seeds
    give the same draws as long as nothing is kept, so this needs few runs."""
    target, found = independent(1000), {}
    for rank in (0, "auto"):
        each = 0.0
        for seed in range(4):
            start = target.exact_draws(1, np.random.default_rng([7, seed]))[0]
            chain = chain_on(target, start, rank=rank, seed=seed)
            chain.settle(ENDS_WITH_200)
            block = chain.advance(300)
            sizes = [stat_checks.effective_draws(block.draws[None, :, i]) for i in range(0, 1000, 10)]
            each += np.mean(sizes) / block.facts["gradients"].sum()
        found[rank] = each
    assert 0.95 < found["auto"] / found[0] < 1.05


# ---- cost -----------------------------------------------------------------------------------------------------------


def test_learning_calls_no_gradients_and_keeps_few_vectors_at_large_dimensions():
    """d = 1e5: every gradient belongs to a path, to the climb or to the search for a step size; directions cost 24
    pairs of vectors, and a handful of windows."""
    d = 100_000
    target = targets.standard_normal(d)
    start = np.random.default_rng(1).standard_normal(d)
    counts = {}
    for rank in (0, "auto"):
        chain = chain_on(target, start, rank=rank, seed=2, path=fw.Jittered(4))
        block = chain.settle(120)
        assert chain.counts["gradients"] == 1 + block.facts["gradients"].sum()
        assert chain.summary["windows"] <= 4
        counts[rank] = chain.counts["gradients"], chain.summary["workspace_vectors"]
    assert counts["auto"][0] == counts[0][0]
    assert counts["auto"][1] - counts[0][1] == 2 * 24 - 16 + 3 * 16
