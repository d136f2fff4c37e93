"""Jittered("auto"): settling finds how long jittered paths are to be, and keeps to it."""

import numpy as np
import pytest
import targets

import fellwalk as fw
from fellwalk import errors
from fellwalk.settings import AUTO_SETTLE, Settings

MOTIONS = {"leapfrog": fw.Leapfrog(), "isokinetic": fw.Isokinetic(), "surrogate": fw.Lagrangian()}


def settled(target, motion, seed, **named):
    start = target.exact_draws(1, np.random.default_rng([seed, 5]))[0]
    density = fw.Density(target.density, target.dimension)
    chain = fw.Chain(density, start, motion=MOTIONS[motion], path=fw.Jittered("auto"), seed=seed, **named)
    return chain, chain.settle("auto")


def reach(chain):
    """The longest path, in units of the base metric."""
    return chain.summary["steps"] * chain.step_size


@pytest.mark.parametrize("motion", ["leapfrog", "isokinetic"])
def test_correlated_targets_get_longer_paths(motion):
    """Without directions the long axis of a normal with rho = 0.99 in d = 10 has an sd of 9.7 units of the base metric
    (variance 9.91 over sqrt(var x / var g) = 0.105), that of an independent one of 1: half periods of 30 and 3.1. Over
    six seeds each the medians have to differ by a factor of four."""
    def median(rho):
        target = targets.equicorrelated_normal(10, rho)
        return float(np.median([reach(settled(target, motion, seed, rank=0)[0]) for seed in range(6)]))

    short, long = median(0.0), median(0.99)
    print(f"measured: reach, {motion}: {short:.2f}, {long:.2f}")
    assert 0.5 < short < 10.0
    assert long > 4.0 * short


@pytest.mark.parametrize("motion", MOTIONS)
def test_nothing_changes_once_it_is_settled(motion):
    chain, block = settled(targets.student(6, 5.0), motion, 3)
    assert AUTO_SETTLE[0] <= len(block) <= AUTO_SETTLE[1]
    steps, size = chain.summary["steps"], chain.step_size
    facts = chain.advance(400).facts
    assert (chain.summary["steps"], chain.step_size) == (steps, size)
    assert facts["steps"].max() <= steps
    # 400 numbers uniform on 1..steps: the greatest is missed with probability (1 - 1/steps)^400, below 2e-6 up to 30
    assert steps <= 30
    assert facts["steps"][facts["failure"] == 0].max() == steps


@pytest.mark.parametrize("transitions", [1, 2, 7, 40, 119, 120, 150, 400, 1000])
@pytest.mark.parametrize("adapt_scale", [True, False])
def test_plans_of_any_length_are_kept_to(transitions, adapt_scale):
    target = targets.student(4, 5.0)
    density = fw.Density(target.density, 4)
    chain = fw.Chain(density, np.full(4, 0.3), path=fw.Jittered("auto"), settle=transitions, seed=4,
                     adapt_scale=adapt_scale)
    assert len(chain.block(10_000)) == transitions
    assert chain.settled
    assert 1 <= chain.summary["steps"] <= 1024


def test_pilots_run_at_one_step_size():
    """After settling has begun its tail, forty transitions at a time keep one step size: those are the pilots."""
    _, block = settled(targets.student(6, 5.0), "isokinetic", 7)
    sizes = block.facts["step_size"]
    same = np.flatnonzero((np.diff(sizes) == 0.0) & (sizes[1:] > 0))  # a climb has none
    assert len(same) >= 79
    assert len(set(sizes[same])) == 1


def test_the_length_is_taken_over_with_the_settled_part():
    chain, _ = settled(targets.student(6, 5.0), "isokinetic", 1)
    part = chain.settled_part
    assert part.steps == chain.summary["steps"] > 0
    other = fw.Chain(chain.density, chain.position, motion=fw.Isokinetic(), path=fw.Jittered("auto"), seed=2,
                     settled=part)
    assert other.settings.path == fw.Jittered(part.steps)
    assert other.advance(300).facts["steps"].max() <= part.steps
    plain = fw.Chain(chain.density, chain.position, seed=2, settle=200)
    plain.block(200)
    assert plain.settled_part.steps == 0
    with pytest.raises(errors.ArgumentError, match="knows no number of steps"):
        fw.Chain(chain.density, chain.position, path=fw.Jittered("auto"), settled=plain.settled_part)


def test_settings_go_through_json_and_wrong_ones_are_refused():
    settings = Settings(motion=fw.Isokinetic(halvings=2), path=fw.Jittered("auto"))
    assert Settings.from_json(settings.to_json()) == settings
    with pytest.raises(errors.ArgumentError, match='a whole number or "auto"'):
        fw.Jittered("long")
    density = fw.Density(lambda x: (-0.5 * float(x @ x), -x), 2)
    with pytest.raises(errors.ArgumentError, match="nothing finds the length of paths"):
        fw.run(density, [0.0, 0.1], path=fw.Jittered("auto"), settle=0, step_size=0.5)


def test_the_isokinetic_motion_needs_two_dimensions():
    density = fw.Density(lambda x: (-0.5 * float(x @ x), -x), 1)
    for make in (lambda: fw.Chain(density, [0.3], motion=fw.Isokinetic()),
                 lambda: fw.run(density, [0.3], motion=fw.Isokinetic(), keep=5, progress="off"),
                 lambda: fw.integrate(density, [0.3], [1.0], motion=fw.Isokinetic(), step_size=0.1, steps=2)):
        with pytest.raises(errors.ArgumentError, match="at least 2 coordinates"):
            make()


def test_steps_that_turn_too_far_end_the_path_from_both_ends_alike():
    """The turn of half a step, |v| |g| step / (2 (d - 1)), may be 4; here |v| = |g| = 1, d = 2."""
    density = fw.Density(lambda x: (-float(x[0]), np.array([-1.0, 0.0])), 2)
    for angle in (0.0, 0.7, np.pi):
        v = [np.cos(angle), np.sin(angle)]
        for size in (8.0, -8.0):
            assert fw.integrate(density, [0.1, 0.2], v, motion=fw.Isokinetic(), step_size=size, steps=1).status == 0
            found = fw.integrate(density, [0.1, 0.2], v, motion=fw.Isokinetic(), step_size=1.001 * size, steps=1)
            assert found.sentence == "the geometric flow was too stiff to be reversed in double precision"


@pytest.mark.parametrize("off", [0.0, 1e-16, 1e-12, 1e-8, 1e-3])
def test_velocities_against_the_gradient_come_back(off):
    """The antipode of the gradient is where the turn loses digits: exp(2 * 4) times rounding, there and back."""
    target = targets.student(3, 5.0, 0.3)
    x = np.array([1.1, -0.4, 0.8])
    g = target.value_gradient(x)[1]
    side = np.cross(g, [0.3, 0.5, -0.2])
    v = -g / np.linalg.norm(g) + off * side / np.linalg.norm(side)
    size = 2.0 * 3.5 * 2.0 / np.linalg.norm(g) / np.linalg.norm(v)  # a turn of 3.5 in the first half step
    density = fw.Density(target.density, 3)
    there = fw.integrate(density, x, v, motion=fw.Isokinetic(), step_size=size, steps=1)
    assert there.status == 0
    assert np.linalg.norm(there.velocity) == pytest.approx(np.linalg.norm(v), rel=1e-14)
    back = fw.integrate(density, there.position, there.velocity, motion=fw.Isokinetic(), step_size=-size, steps=1)
    assert back.status == 0
    tolerance = 100 * 2.2e-16 * np.exp(8.0)
    np.testing.assert_allclose(back.position, x, atol=size * tolerance)
    np.testing.assert_allclose(back.velocity, v, atol=tolerance)
    assert there.log_jacobian == pytest.approx(-back.log_jacobian, abs=tolerance)
