"""Successive-conditional simulation of parameters and data has the joint law (Geweke 2004, JASA 99:799-804).

Rounds of "redraw the data given the parameters; one transition given the data" leave the joint law of a normal sample
under its conjugate prior invariant if the kernel is exact for every data set. Means of eleven functions are known.
"""

import pytest
import stat_checks
from exactness.build import Mutation
from exactness.combinations import Combination, motions, paths
from exactness.conjugate import chosen, functions, joint
from exactness.planted import MOTION, ORBIT

CHAINS, ROUNDS = 8, 10_000
FALSE_ALARM = 1e-3  # for all comparisons of this file's combinations together
COUNT = 11 * len(chosen())


def comparisons(c: Combination, mutation: Mutation | None = None) -> list[stat_checks.Comparison]:
    states = joint(c, CHAINS, ROUNDS, mutation)
    found = [stat_checks.compare_mean(x, mean, what=name) for name, (x, mean) in functions(states).items()]
    assert len(found) * len(chosen()) == COUNT
    return found


def worst(c: Combination, mutation: Mutation | None = None) -> stat_checks.Comparison:
    return max(comparisons(c, mutation), key=lambda found: abs(found.z))


def test_every_motion_and_path_takes_part():
    assert {(c.motion, c.scheme, c.curvature) for c in chosen()} == set(motions())
    assert {(c.path, c.turn) for c in chosen()} == set(paths())
    assert {c.halvings > 0 for c in chosen()} == {False, True}


@pytest.mark.parametrize("c", chosen(), ids=str)
def test_joint_law(c):
    limit = stat_checks.z_limit(COUNT, FALSE_ALARM)
    for found in comparisons(c):
        assert abs(found.z) <= limit, f"{c}: {found}"


@pytest.mark.parametrize(
    ("path", "mutation"),
    [
        ("jittered", Mutation(MOTION, "FW_SEMI_EXPLICIT ? 1.0 : -2.0)", "FW_SEMI_EXPLICIT ? 1.0 : 0.0)")),
        ("no-u-turn", Mutation(ORBIT, "o->start - p->energy + p->log_jacobian;", "o->start - p->energy;")),
        ("no-u-turn", Mutation(ORBIT, "if (!join(chain, level, p)) {", "if (!join(chain, level, p) && 0) {")),
        ("no-u-turn", Mutation(ORBIT, "* o->fresh_sum < weight)", "* (o->fresh_sum - weight) < weight)")),
    ],
    ids=["split Jacobian", "Jacobian", "sub-orbits", "biased choice"],
)
def test_planted_errors_are_seen(path, mutation):
    c = Combination("lagrangian", 0, 0, path, 0, 0, 0, "conjugate")
    limit = stat_checks.z_limit(COUNT, FALSE_ALARM)
    right, wrong = worst(c), worst(c, mutation)
    print(f"{c}: {right.what} z {right.z:.2f} -> {wrong.what} z {wrong.z:.2f}")
    assert abs(right.z) <= limit < abs(wrong.z)
