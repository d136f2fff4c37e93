"""Steps that are done as 2^k smaller ones where the energy would swing: against the rule written out in oracles.py.

The bound on the range of the log weight inside one step is 1, the package's setting.
"""

import dataclasses

import numpy as np
import oracles
import pytest
import targets
from hypothesis import given
from hypothesis import strategies as st
from scipy import stats
from walks import FLAT, KINDS, PAIRS, density_of, place

import fellwalk as fw
from fellwalk.settings import Settings

BOUND = Settings().core()["halving_bound"]
COUNTED = [kind for kind in KINDS if "difference" not in kind]


def halving(kind, most):
    return dataclasses.replace(KINDS[kind], halvings=most)


def rule(density, kind, x, v, step, most, **named):
    """One macro step by the written-out rule over plain steps of the same motion."""

    def micro(x, v, step, n):
        path = fw.integrate(density, x, v, motion=KINDS[kind], step_size=step, steps=n, trace=True, **named)
        trace = path.trace
        levels = trace["log_jacobian"] - trace["energy"]
        # the gradients of n steps, whole or with the one that failed
        used = list(range(len(levels)))
        if path.status:
            used.append(path.gradients - 1)
        return levels, (None if path.status else (path.position, path.velocity)), used

    return oracles.halved_step(micro, x, v, step, most, BOUND)


def states(target, n, seed, kind, beta):
    """(density, beta, x, v): n exact draws with velocities; no bend for leapfrog."""
    beta = 0.0 if kind == "leapfrog" else beta
    rng = np.random.default_rng(seed)
    x = target.exact_draws(n, rng)
    v = oracles.Monge(target, np.ones(target.dimension), beta).velocities(x, rng.standard_normal(x.shape))
    return density_of(target), beta, x, v


@pytest.mark.parametrize("kind", COUNTED)
def test_every_step_follows_the_rule(kind):
    """Status, end, and number of gradients of single steps from 500 exact draws, in both directions of time.

    The way there is the same arithmetic, so the same bits. Looking back, the core carries H v along and the oracle
    multiplies again, which could matter only for a log weight within roundings of the bound.
    """
    density, beta, x, v = states(targets.rosenbrock(), 500, 41, kind, 0.05)
    seen = set()
    for i, (a, b) in enumerate(zip(x, v, strict=True)):
        step = 0.6 if i % 2 else -0.6
        status, position, velocity, gradients, chosen = rule(density, kind, a, b, step, 4, beta=beta)
        found = fw.integrate(density, a, b, motion=halving(kind, 4), step_size=step, steps=1, beta=beta)
        assert found.status == status
        assert np.array_equal(found.position, position)
        assert np.array_equal(found.velocity, velocity)
        assert found.gradients == 1 + gradients
        seen.add((status, chosen))
    assert seen >= {(0, 0), (0, 1), (0, 2), (11, 1), (11, 2), (11, 3)}, "not every branch was taken"
    assert kind in FLAT or (10, None) in seen


@pytest.mark.parametrize("kind", COUNTED)
@pytest.mark.parametrize("most", [1, 3, 12])
def test_halved_paths_are_reversible(kind, most):
    """Paths of four steps come back to their start with the log-Jacobian and the log ratio of the other sign.

    A hundred small steps of some 20 roundings, 4e-13, carried on by a condition of up to 250: 1e-10; 2.5e-12 was the
    largest error when this was written. In the neck of a funnel, where one step may amplify 1e5-fold, halved paths of
    the exact curvature do not come back.
    """
    density, beta, x, v = states(targets.winding_ridge(), 500, 43, kind, 0.05)
    named = {"motion": halving(kind, most), "steps": 4, "beta": beta}
    returned, halved, worst = 0, 0, 0.0
    for a, b in zip(x, v, strict=True):
        there = fw.integrate(density, a, b, step_size=0.5, **named)
        if there.status:
            assert there.status in (10, 11)
            continue
        back = fw.integrate(density, there.position, there.velocity, step_size=-0.5, **named)
        assert back.status == 0, back.sentence
        worst = max(worst, np.abs(back.position - a).max(), np.abs(back.velocity - b).max())
        assert back.log_jacobian == pytest.approx(-there.log_jacobian, abs=1e-9)
        assert back.log_ratio == pytest.approx(-there.log_ratio, abs=1e-9)
        returned += 1
        halved += there.gradients > 5
    print(f"measured: reversal with halving, {kind}, {most}: {worst:.1e}, {returned} paths, {halved} of them halved")
    assert returned > 20
    assert halved >= 3
    assert worst < 1e-10


@pytest.mark.parametrize(("name", "kind"), [pair for pair in PAIRS if pair[1] in COUNTED])
def test_where_the_bound_is_never_exceeded_it_is_the_plain_motion(name, kind):
    """Bit for bit, at the same price."""
    here = place(name)
    named = {"scale": here.scale, "beta": here.beta, "step_size": here.step / 4, "steps": 5, "trace": True}
    density = density_of(here.target)
    plain = fw.integrate(density, here.x, here.v, motion=KINDS[kind], **named)
    levels = plain.trace["log_jacobian"] - plain.trace["energy"]
    assert np.abs(np.diff(levels)).max() < BOUND
    halved = fw.integrate(density, here.x, here.v, motion=halving(kind, 5), **named)
    for key, rows in plain.trace.items():
        assert rows.tobytes() == halved.trace[key].tobytes()
    assert (plain.gradients, plain.products) == (halved.gradients, halved.products)
    assert (plain.log_ratio, plain.status, plain.steps) == (halved.log_ratio, halved.status, halved.steps)


@given(st.sampled_from(COUNTED), st.integers(1, 6), st.integers(0, 2**32), st.floats(0.2, 1.5))
def test_the_number_of_halvings_is_the_smallest_that_fits(kind, most, seed, step):
    """On Student-t targets of any dimension up to six: the whole path against the rule applied step by step."""
    rng = np.random.default_rng(seed)
    d = int(rng.integers(2 if kind == "isokinetic" else 1, 7))
    target, beta = targets.student(d, 3.7, 0.3), 0.0 if kind == "leapfrog" else 0.3
    density, x = density_of(target), target.exact_draws(1, rng)[0]
    v = oracles.Monge(target, np.ones(d), beta).velocities(x[None], rng.standard_normal((1, d)))[0]
    found = fw.integrate(density, x, v, motion=halving(kind, most), step_size=step, steps=3, beta=beta)
    spent, status = 1, 0
    position, velocity = x, v
    for _ in range(3):
        status, position, velocity, cost, _ = rule(density, kind, position, velocity, step, most, beta=beta)
        spent += cost
        if status:
            break
    assert found.status == status
    assert found.gradients == spent
    if status == 0:
        np.testing.assert_allclose(found.position, position, rtol=1e-11, atol=1e-11)
        np.testing.assert_allclose(found.velocity, velocity, rtol=1e-11, atol=1e-11)


@pytest.mark.parametrize("kind", ["leapfrog", "split, surrogate"])
def test_halved_paths_keep_the_target(kind):
    """20,000 exact draws of a funnel, three transitions of one long step: Kolmogorov-Smirnov, false alarm rate 1e-6.

    A path that fails stays where it was. The power: the same transitions without the check from the far end were
    measured once, with p = 2e-14 (leapfrog) and 2e-15 (surrogate).
    """
    target = targets.funnel(2, 1.5)
    density, beta, x, _ = states(target, 20_000, 47, kind, 0.4)
    geometry, rng = oracles.Monge(target, np.ones(2), beta), np.random.default_rng(48)
    stopped, halved, moves = 0, 0, 0
    for _ in range(3):
        v = geometry.velocities(x, rng.standard_normal(x.shape))
        ends = [fw.integrate(density, a, b, motion=halving(kind, 3), step_size=1.4, steps=1, beta=beta)
                for a, b in zip(x, v, strict=True)]
        ratios = np.array([-np.inf if end.status else end.log_ratio for end in ends])
        moved = np.where((np.log(rng.random(len(x))) < ratios)[:, None], np.array([end.position for end in ends]), x)
        stopped += sum(end.status == 11 for end in ends)
        halved += sum(end.gradients > 2 for end in ends)
        moves += np.count_nonzero(np.any(moved != x, axis=1))
        x = moved
    assert stopped > 5_000
    assert halved > 10_000
    assert moves > 20_000
    for name in ("v", "x1"):
        marginal = target.marginals[name]
        assert stats.kstest(marginal.values(x), marginal.law.cdf).pvalue > 1e-6 / 2
