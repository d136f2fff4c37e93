"""The truth ranks uniformly among posterior draws (Talts, Betancourt, Simpson, Vehtari & Gelman 2018).

Simulation-based calibration, arXiv 1804.06788.

Parameters from the prior, data from the parameters, 31 posterior draws by a chain that starts at the prior's centre:
the rank of the true value among them is uniform on 0..31, for both parameters and for the posterior density, if the
chains draw from the posterior. Draws are 8 transitions apart, so that they are nearly independent.
"""

import numpy as np
import pytest
import stat_checks
from exactness.build import Mutation
from exactness.combinations import Combination, motions, paths
from exactness.conjugate import chosen, ranks
from exactness.planted import MOTION, ORBIT

REPLICATES, LEAD, DRAWS, THIN, BINS = 2000, 40, 31, 8, 16
FALSE_ALARM = 1e-3  # for all ranks of this file's combinations together

# Every motion, with the paths taking turns.
CASES = [chosen()[len(paths()) * i + i % len(paths())] for i in range(len(motions()))]


def p_values(c: Combination, mutation: Mutation | None = None) -> list[float]:
    found = ranks(c, REPLICATES, LEAD, DRAWS, THIN, mutation)
    return [stat_checks.uniform_rank_p(column, DRAWS + 1, BINS) for column in np.moveaxis(found, -1, 0)]


LIMIT = FALSE_ALARM / (3 * len(CASES))


def test_every_motion_and_path_takes_part():
    assert {(c.motion, c.scheme, c.curvature) for c in CASES} == set(motions())
    assert {(c.path, c.turn) for c in CASES} == set(paths())
    assert {c.halvings > 0 for c in CASES} == {False, True}


@pytest.mark.parametrize("c", CASES, ids=str)
def test_ranks_are_uniform(c):
    assert min(p_values(c)) >= LIMIT, str(c)


@pytest.mark.parametrize(
    ("c", "mutation"),
    [
        (
            Combination("lagrangian", 0, 0, "jittered", 0, 0, 0, "conjugate"),
            Mutation(MOTION, "FW_SEMI_EXPLICIT ? 1.0 : -2.0)", "FW_SEMI_EXPLICIT ? 1.0 : 0.0)"),
        ),
        (
            Combination("lagrangian", 1, 2, "no-u-turn", 1, 0, 0, "conjugate"),
            Mutation(ORBIT, "o->start - p->energy + p->log_jacobian;", "o->start - p->energy;"),
        ),
        (
            Combination("leapfrog", 0, 0, "no-u-turn", 0, 0, 0, "conjugate"),
            Mutation(ORBIT, "if (!join(chain, level, p)) {", "if (!join(chain, level, p) && 0) {"),
        ),
    ],
    ids=["split Jacobian", "Jacobian", "sub-orbits"],
)
def test_planted_errors_are_seen(c, mutation):
    right, wrong = min(p_values(c)), min(p_values(c, mutation))
    print(f"{c}: least p {right:.2g} -> {wrong:.2g}")
    assert wrong < LIMIT <= right
