"""The rule that spreads one starting point over chains, and what it says when it cannot."""

import numpy as np
import pytest
from run_models import curved

import fellwalk as fw
from fellwalk.errors import ShapeError, StartError
from fellwalk.starts import starting_points


def points(density, starts, chains=4, seed=3):
    return starting_points(density, starts, chains, np.random.default_rng(seed))


def normal(scale, dimension=2):
    scale = np.broadcast_to(scale, dimension)
    return fw.Density(lambda x: (-0.5 * float((x / scale) @ (x / scale)), -x / scale**2), dimension)


def test_the_first_chain_starts_at_the_point_and_the_others_around_it():
    start = np.array([0.7, -0.2])
    found = points(normal(1.0), start, 6)
    assert found.shape == (6, 2)
    np.testing.assert_array_equal(found[0], start)
    assert len({tuple(row) for row in found.tolist()}) == 6
    density = normal(1.0)
    assert all(density(row)[0] >= density(start)[0] - 14 for row in found)
    np.testing.assert_array_equal(points(normal(1.0), start, 6), found)


@pytest.mark.parametrize("scale", [1e-9, 1e-3, 1.0, 1e6])
@pytest.mark.parametrize("place", [0.0, 1e-14, 1.3])
def test_near_a_mode_and_at_any_scale(scale, place):
    """At a mode the gradient is 0, or what rounding leaves of it, and says nothing of the width."""
    density = normal(scale)
    start = np.full(2, place * scale)
    found = points(density, start)
    assert np.unique(found[:, 0]).size == 4
    assert all(density(row)[0] >= density(start)[0] - 14 for row in found)


def test_points_outside_the_support_are_tried_nearer():
    def cut(x):
        return (-np.inf, None) if x[0] <= 0 else (-float(x[0]), np.array([-1.0]))

    found = points(fw.Density(cut, 1), [1e-6], 20)
    assert found.min() > 0


def test_no_other_point_inside_the_support():
    def needle(x):
        return (0.0, np.zeros(2)) if np.all(x == 0.25) else (-np.inf, None)

    with pytest.raises(StartError, match=r"no second starting point was found near \[0.25, 0.25\]: all points"):
        points(fw.Density(needle, 2), [0.25, 0.25])


def test_one_point_a_chain_is_taken_as_it_is():
    given = np.arange(6.0).reshape(2, 3)
    np.testing.assert_array_equal(points(fw.Density(curved, 3), given, 2), given)


@pytest.mark.parametrize(("starts", "sentence"), [
    (np.zeros(2), r"the starting point must have shape \(3,\); it has shape \(2,\)"),
    (np.zeros((3, 3)), r"must have shape \(4, 3\); they have shape \(3, 3\)"),
    (np.zeros((4, 3, 1)), r"must have shape \(3,\); it has shape \(4, 3, 1\)"),
    (1.0, r"must have shape \(3,\); it has shape \(\)"),
    ("here", "starts must be numbers"),
    ([[1.0], [1.0, 2.0]], "starts must be numbers"),
    ([1j, 0, 0], "starts must be numbers"),
])
def test_wrong_shapes(starts, sentence):
    with pytest.raises(ShapeError, match=sentence):
        points(fw.Density(curved, 3), starts)


@pytest.mark.parametrize("bad", [np.nan, np.inf, -np.inf])
def test_a_start_that_is_not_finite(bad):
    with pytest.raises(StartError, match="not finite at the starting point"):
        points(fw.Density(curved, 3), [0.0, bad, 0.0])
    with pytest.raises(StartError, match=r"chain 2 of 2: the starting point is .* in x\[1\]"):
        fw.run(fw.Density(curved, 3), [[0.0, 0.0, 0.0], [0.0, bad, 0.0]], chains=2)


def test_a_density_that_is_not_finite_there():
    def logarithm(x):
        return (-np.inf, None) if x[0] < 0 else (-float(x[0]), np.array([-1.0]))

    with pytest.raises(StartError, match=r"not finite at the starting point \[-1\] \(log density -inf\)"):
        fw.run(fw.Density(logarithm, 1), [-1.0])
    with pytest.raises(StartError, match="chain 3 of 3: the log density is -inf"):
        fw.run(fw.Density(logarithm, 1), [[1.0], [2.0], [-1.0]], chains=3)
