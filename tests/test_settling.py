"""Settling from bad starts, on targets whose laws are known: whatever the start, what is kept afterwards is right.

See test_chain for plans, scales from 1e-12 to 1e12 started near the bulk, and the tuning of the bend; here are the far
starts, hopeless first steps, edges of supports, coordinates without information, and that nothing adapts afterwards.
"""

import numpy as np
import pytest
import stat_checks
import targets

import fellwalk as fw
from fellwalk.settings import AUTO_SETTLE

MOTIONS = {
    "leapfrog": fw.Leapfrog(),
    "surrogate": fw.Lagrangian(),
    "product": fw.Lagrangian(curvature="product"),
}
# The rate at which each test here fails for nothing.
FALSE_ALARM = 1e-5


def chain_on(target, start, **named):
    density = fw.Density(target.density, target.dimension, hessian_product=target.hessian_product)
    return fw.Chain(density, start, **named)


def settled_in_bounds(chain):
    """Settle by the open plan; everything on the way is finite, and the summary says what it took."""
    block = chain.settle("auto")
    assert chain.settled
    assert np.isfinite(block.draws).all()
    assert all(np.isfinite(block.facts[name]).all() for name in block.facts.dtype.names)
    summary = chain.summary
    assert AUTO_SETTLE[0] <= summary["settled_transitions"] == len(block) <= AUTO_SETTLE[1]
    assert summary["windows"] >= 2
    assert chain.counts["gradients"] == 1 + block.facts["gradients"].sum()
    return block


def assert_right(chain, target, draws, names=None):
    """Means, sds and quantiles of the marginals, and power: a bias of 0.3 sds would be noticed in every mean."""
    kept = chain.advance(draws).draws[None]
    family = []
    for name, marginal in target.marginals.items():
        if names is None or name in names:
            family += stat_checks.compare_marginal(kept, marginal, name)
            error = stat_checks.compare_mean(marginal.values(kept) / marginal.sd, 0.0).error
            assert error * stat_checks.z_limit(70, FALSE_ALARM) < 0.3, f"{name}: too few effective draws"
    assert len(family) <= 70
    stat_checks.assert_all(family, FALSE_ALARM)


# ---- far starts -----------------------------------------------------------------------------------------------------

FAR = [1e2, 1e4, 1e7]


@pytest.mark.parametrize("motion", MOTIONS)
@pytest.mark.parametrize("path", [fw.NoUTurn(), fw.Jittered(10)])
@pytest.mark.parametrize("far", FAR)
def test_far_out_on_scales_over_twelve_decades(far, path, motion):
    """Some coordinates begin 2.5 times as many sds out as `far`, others are hardly displaced; the gradient of the
    tightest is 1e14 from 1e7 sds out."""
    d = 8
    target = targets.independent_normal(np.zeros(d), 10.0 ** np.linspace(-7.0, 5.0, d))
    start = far * target.exact_draws(1, np.random.default_rng(9))[0]
    chain = chain_on(target, start, motion=MOTIONS[motion], path=path, seed=3)
    settled_in_bounds(chain)
    assert_right(chain, target, 2000)


@pytest.mark.parametrize("far", FAR)
@pytest.mark.parametrize("seed", range(3))
def test_far_out_on_a_strongly_correlated_normal(far, seed):
    """d = 50, rho = 0.99, coordinates displaced independently: along the tight directions the start is ten times as
    many sds out."""
    target = targets.equicorrelated_normal(50, 0.99)
    start = far * np.random.default_rng([5, seed]).standard_normal(50)
    chain = chain_on(target, start, seed=seed)
    settled_in_bounds(chain)
    assert_right(chain, target, 2000)


@pytest.mark.parametrize("name", ["student", "ring", "normal sample"])
@pytest.mark.parametrize("far", FAR)
def test_far_out_on_targets_that_are_not_normal(name, far):
    """Tails in which the gradient falls off with distance; a ring from outside; a normal sample whose log sigma starts
    where its density is nearly flat or as steep as exp(2 far)."""
    rng = np.random.default_rng(31)
    if name == "student":
        target = targets.student(8, 9.0)
        start = far * rng.standard_normal(8)
    elif name == "ring":
        target = targets.ring(2, 3.0, 0.5)
        start = far * rng.standard_normal(2)
    else:
        target = targets.normal_sample("mcmc01")
        middle = np.array([target.marginals[key].mean for key in ("mu", "log sigma")])
        sd = np.array([target.marginals[key].sd for key in ("mu", "log sigma")])
        start = middle + far * sd * [1.0, 0.0]
    chain = chain_on(target, start, seed=12)
    settled_in_bounds(chain)
    # the quadratic form of the Student-t has no moments that would give the errors of its sd
    assert_right(chain, target, 4000, [key for key in target.marginals if key != "form"])


@pytest.mark.parametrize("motion", MOTIONS)
@pytest.mark.parametrize("path", [fw.NoUTurn(), fw.Jittered(10)])
@pytest.mark.parametrize("off", [0.0, 1e-30, 1e-8])
def test_from_the_mode_itself(off, path, motion):
    """Where the gradient is next to nothing: it says nothing of the scale, nor of how strongly a metric should bend."""
    target = targets.standard_normal(8)
    for more in ({}, {"scale": np.ones(8)}):
        chain = chain_on(target, np.full(8, off), motion=MOTIONS[motion], path=path, seed=5, **more)
        settled_in_bounds(chain)
        assert_right(chain, target, 1500)


# ---- first steps ----------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("motion", MOTIONS)
@pytest.mark.parametrize("factor", [1e-12, 1e-6, 1e6, 1e12])
def test_a_first_step_far_too_small_or_large_is_found_out(factor, motion):
    """The right step of this target is about 0.7, with this scale kept and with a learned one."""
    target = targets.standard_normal(10)
    start = target.exact_draws(1, np.random.default_rng(2))[0]
    for more in ({"scale": np.ones(10), "adapt_scale": False}, {}):
        chain = chain_on(target, start, motion=MOTIONS[motion], step_size=0.7 * factor, seed=4, **more)
        block = chain.settle(200)
        assert 0.2 < chain.step_size < 2.0
        # one path at most is spent at a step of the wrong size; the search doubles or halves it first
        assert block.facts["gradients"].max() < 1100
        assert_right(chain, target, 1500)


@pytest.mark.parametrize("factor", [1e-6, 1e6])
def test_a_first_step_far_too_large_next_to_an_edge(factor):
    target = targets.half_normal([1.3, 0.4])
    chain = chain_on(target, [1.0, 0.2], step_size=0.1 * factor, seed=6)
    settled_in_bounds(chain)
    assert_right(chain, target, 12_000)


# ---- edges of supports ----------------------------------------------------------------------------------------------


EDGE = [(start, motion) for motion in ("leapfrog", "surrogate") for start in ((0.3, 27.0), (1e-9, 1e-9), (40.0, 0.1))]


@pytest.mark.parametrize(("start", "motion"), EDGE)
def test_half_normals_in_two_scales(start, motion):
    """The density is cut off at its mode; paths that leave the support end there, say so, and nothing is lost."""
    target = targets.half_normal([0.31, 27.0])
    chain = chain_on(target, start, motion=MOTIONS[motion], seed=16)
    settled_in_bounds(chain)
    facts = chain.advance(100).facts
    assert set(facts["failure"].tolist()) <= {0, 1}
    assert (facts["failure"] == 1).any()
    assert_right(chain, target, 12_000)


@pytest.mark.parametrize("start", [[1.0, 0.01, 0.7], [1e-6, 1e-6, 1e-6], [300.0, 0.5, 40.0]])
def test_exponentials_in_three_scales(start):
    """The gradient is constant and does not vanish at the edge, so it says nothing of the scale."""
    target = targets.exponential([0.31, 27.0, 1.4])
    chain = chain_on(target, start, seed=17)
    settled_in_bounds(chain)
    assert_right(chain, target, 100_000)


# ---- coordinates without information --------------------------------------------------------------------------------


@pytest.mark.parametrize("motion", ["leapfrog", "surrogate"])
@pytest.mark.parametrize("flat", [1, 3])
def test_coordinates_that_the_density_does_not_know_do_not_spoil_the_others(flat, motion):
    """Two normals in scales 1e-5 and 1e5 beside flat coordinates, which drift: their law does not exist."""
    sd = np.array([1e-5, 1e5])

    def function(x):
        z = x[:2] / sd
        return -0.5 * float(z @ z), np.concatenate([-z / sd, np.zeros(flat)])

    start = np.concatenate([2.0 * sd, np.ones(flat)])
    path = fw.NoUTurn(doublings=5)
    chain = fw.Chain(fw.Density(function, 2 + flat), start, motion=MOTIONS[motion], path=path, seed=14)
    settled_in_bounds(chain)
    scale, directions, variances = chain.base_metric
    assert all(np.isfinite(values).all() for values in (scale, directions, variances))
    assert (scale > 0.0).all()
    kept = chain.advance(1500).draws[None, :, :2] / sd
    family = [stat_checks.compare_mean(kept[..., i], 0.0) for i in range(2)]
    family += [stat_checks.compare_sd(kept[..., i], 0.0, 1.0) for i in range(2)]
    stat_checks.assert_all(family, FALSE_ALARM)


# ---- bend -----------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("bend", [0.3, 1.0, 3.0])
def test_a_harmless_bend_is_kept_while_the_scale_is_learned(bend):
    """A normal, whose curvature the learned base metric gets right: all of 6 fixed seeds keep the bend (of 12 measured,
    12 did), and the acceptance is what was asked for, or more."""
    target = targets.independent_normal(np.zeros(20), 10.0 ** np.linspace(-3.0, 3.0, 20))
    for seed in range(6):
        start = target.exact_draws(1, np.random.default_rng(seed))[0]
        chain = chain_on(target, start, motion=fw.Lagrangian(bend=bend), seed=seed)
        settled_in_bounds(chain)
        assert chain.summary["bend"] == bend
        assert chain.block(500, draws=False).facts["acceptance"].mean() > 0.75


@pytest.mark.parametrize("bend", [1.0, 3.0])
def test_a_harmful_bend_is_lowered_until_the_acceptance_is_reached(bend):
    """Student-t, d = 20: the surrogate's ceiling of acceptance at bend 1 is 0.62 (3: 0.39), and 0.8 is asked for. Over
    12 seeds it came out at 0.68 to 0.86, 0.78 on the average, which is how well a tail of 50 to 150 transitions knows a
    step size; a step that has collapsed would be accepted more often, so it is looked at too (0.034 at least)."""
    target = targets.student(20, 5.0)
    acceptance = []
    for seed in range(6):
        start = target.exact_draws(1, np.random.default_rng(seed))[0]
        chain = chain_on(target, start, motion=fw.Lagrangian(bend=bend), seed=seed)
        settled_in_bounds(chain)
        assert chain.summary["bend"] <= 0.5
        assert chain.step_size > 0.02
        acceptance.append(chain.block(1000, draws=False).facts["acceptance"].mean())
    assert min(acceptance) > 0.6
    assert np.mean(acceptance) > 0.75


def test_only_the_surrogate_has_a_ceiling():
    """With exact products acceptance goes to 1 with the step, so the bend asked for is kept."""
    target = targets.student(5, 5.0)
    start = target.exact_draws(1, np.random.default_rng(1))[0]
    chain = chain_on(target, start, motion=fw.Lagrangian(bend=1.0, curvature="product"), seed=2)
    settled_in_bounds(chain)
    assert chain.summary["bend"] == 1.0


# ---- afterwards -----------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("halvings", [0, 3])
@pytest.mark.parametrize("path", [fw.NoUTurn(), fw.NoUTurn(turn="metric"), fw.Jittered(8)])
@pytest.mark.parametrize("motion", ["leapfrog", "surrogate", "product"])
def test_nothing_adapts_afterwards(motion, path, halvings):
    """What settling has found is the same to the bit after 1000 kept transitions, and its hash with it."""
    kind = MOTIONS[motion]
    named = {} if motion == "leapfrog" else {"curvature": kind.curvature}
    target = targets.equicorrelated_normal(4, 0.98)
    chain = chain_on(target, np.ones(4), motion=type(kind)(halvings=halvings, **named), path=path, seed=8)
    chain.settle(150)
    before, summary = chain.settled_part, chain.summary
    chain.advance(1000)
    after, now = chain.settled_part, chain.summary
    assert before.to_bytes() == after.to_bytes()
    assert all(now[key] == summary[key] for key in ("bend", "beta", "ceiling", "change", "windows", "directions"))
