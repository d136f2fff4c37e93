"""Errors planted in the core, one change each, with the combinations that must show them."""

from dataclasses import dataclass

from .build import Mutation
from .combinations import Combination


@dataclass(frozen=True)
class Planted:
    """What is wrong, the mutation that makes it so, and where it must be seen."""

    what: str
    mutation: Mutation
    seen: tuple[Combination, ...]


def lagrangian(path: str, target: str, scheme=0, curvature=0, turn=0, halvings=0, rank=0) -> Combination:
    return Combination("lagrangian", scheme, curvature, path, turn, halvings, rank, target)


def leapfrog(path: str, target: str, turn=0, halvings=0, rank=0) -> Combination:
    return Combination("leapfrog", 0, 0, path, turn, halvings, rank, target)


def isokinetic(path: str, target: str, turn=0, halvings=0, rank=0) -> Combination:
    return Combination("isokinetic", 0, 0, path, turn, halvings, rank, target)


JITTERED, NO_U_TURN = "jittered", "no-u-turn"
MOTION, PATH, ORBIT, WALK = "motion_lagrangian.c", "path.c", "path_nouturn.c", "walk.c"
TURNED = "motion_isokinetic.c"

JACOBIAN = [
    Planted(
        "log-Jacobian dropped in the accept test",
        Mutation(PATH, "weight = start - p->energy + p->log_jacobian;", "weight = start - p->energy;"),
        (lagrangian(JITTERED, "student"), lagrangian(JITTERED, "ring", scheme=1, curvature=2)),
    ),
    Planted(
        "log-Jacobian dropped in the weights of the orbit",
        Mutation(ORBIT, "o->start - p->energy + p->log_jacobian;", "o->start - p->energy;"),
        (lagrangian(NO_U_TURN, "student"), lagrangian(NO_U_TURN, "rosenbrock", turn=1, curvature=2)),
    ),
    Planted(
        "log-Jacobian dropped, split, surrogate",
        Mutation(MOTION, "FW_SEMI_EXPLICIT ? 1.0 : -2.0)", "FW_SEMI_EXPLICIT ? 1.0 : 0.0)"),
        (lagrangian(JITTERED, "student"), lagrangian(NO_U_TURN, "ring", turn=1)),
    ),
    Planted(
        "log-Jacobian dropped, semi-explicit, surrogate",
        Mutation(MOTION, "FW_SEMI_EXPLICIT ? 1.0 : -2.0)", "FW_SEMI_EXPLICIT ? 0.0 : -2.0)"),
        (lagrangian(JITTERED, "student", scheme=1), lagrangian(NO_U_TURN, "ring", scheme=1, turn=1)),
    ),
    Planted(
        "log-Jacobian of the first half step dropped, split, products",
        Mutation(
            MOTION,
            "    p->log_jacobian -= 2.0 * log1p(rise);\n    fw_base_kick2_drift(",
            "    p->log_jacobian -= 0.0 * log1p(rise);\n    fw_base_kick2_drift(",
        ),
        (lagrangian(JITTERED, "student", curvature=2), lagrangian(NO_U_TURN, "ring", curvature=1)),
    ),
    Planted(
        "log-Jacobian dropped, semi-explicit, products",
        Mutation(MOTION, "p->log_jacobian += log(after / before);", "p->log_jacobian += 0.0;"),
        (lagrangian(JITTERED, "student", scheme=1, curvature=2), lagrangian(NO_U_TURN, "ring", scheme=1, curvature=1)),
    ),
    Planted(
        "sign of the log-Jacobian wrong on the left side only",
        Mutation(
            ORBIT,
            "        if (status == FW_OK) status = weigh(chain, o, p, i == 0);",
            "        if (step < 0.0) p->log_jacobian = -p->log_jacobian;\n"
            "        if (status == FW_OK) status = weigh(chain, o, p, i == 0);\n"
            "        if (step < 0.0) p->log_jacobian = -p->log_jacobian;",
        ),
        (lagrangian(NO_U_TURN, "student"), lagrangian(NO_U_TURN, "ring", scheme=1, turn=1)),
    ),
]

FIELD = [
    Planted(
        "paths begin with the surrogate field and go on with exact products",
        Mutation(
            MOTION,
            "            status = fw_curve_velocity(walk, p, 0, &p->whw);\n        }\n",
            "            for (size_t i = 0; i < walk->d; ++i) p->hc[i] = -p->c[i];\n"
            "            p->chc = -p->cc;\n"
            "            p->whw = -p->ww;\n"
            "            p->whc = -p->wc;\n        }\n",
        ),
        (lagrangian(NO_U_TURN, "ring", curvature=2, turn=1), lagrangian(JITTERED, "rosenbrock", curvature=2)),
    ),
    Planted(
        "the first Christoffel flow of a path uses a field of zeros",
        Mutation(
            MOTION,
            "christoffel(rate, 0.5 * step, -ww",
            "christoffel(leaving && p->log_jacobian == 0.0 ? 0.0 : rate, 0.5 * step, -ww",
        ),
        (lagrangian(NO_U_TURN, "student"), lagrangian(JITTERED, "student", rank=1)),
    ),
]

TURN = [
    Planted(
        "turn test only at the end last extended, in every piece",
        Mutation(
            ORBIT,
            "    if (!(sums[0] > 0.0 && sums[1] > 0.0 && sums[2] > 0.0 && sums[5] > 0.0)) return 0;",
            "    return sums[1] > 0.0;",
        ),
        (leapfrog(NO_U_TURN, "student"), lagrangian(NO_U_TURN, "student", turn=1)),
    ),
    Planted(
        "turn test only at the end last extended, of the whole orbit",
        Mutation(
            ORBIT,
            "    swap(&chain->orbit_rho, &chain->spare_rho);\n    return onward(chain, sums);",
            "    swap(&chain->orbit_rho, &chain->spare_rho);\n    return sums[1] > 0.0;",
        ),
        (leapfrog(NO_U_TURN, "rosenbrock"), lagrangian(NO_U_TURN, "rosenbrock", turn=1)),
    ),
    Planted(
        "tests of sub-orbits skipped",
        Mutation(ORBIT, "if (!join(chain, level, p)) {", "if (!join(chain, level, p) && 0) {"),
        (leapfrog(NO_U_TURN, "student"), lagrangian(NO_U_TURN, "student", turn=1)),
    ),
    Planted(
        "turn test with momenta of the full metric at the start of a path and of the base metric elsewhere",
        Mutation(
            ORBIT,
            "    if (by_metric(chain)) fw_axpy(walk->d,",
            "    if (by_metric(chain) && p->log_jacobian == 0.0) fw_axpy(walk->d,",
        ),
        (lagrangian(NO_U_TURN, "student", turn=1), lagrangian(NO_U_TURN, "student", scheme=1, curvature=2, turn=1)),
    ),
    Planted(
        "turn test with momenta of the base metric at the start of a path and of the full metric elsewhere",
        Mutation(
            ORBIT,
            "    if (by_metric(chain)) fw_axpy(walk->d,",
            "    if (by_metric(chain) && p->log_jacobian != 0.0) fw_axpy(walk->d,",
        ),
        (
            lagrangian(NO_U_TURN, "student", curvature=2, turn=1),
            lagrangian(NO_U_TURN, "student", scheme=1, curvature=1, turn=1),
        ),
    ),
    Planted(
        "a new half that turned is drawn from all the same",
        Mutation(ORBIT, "if (status != FW_OK || turned) break;", "if (status != FW_OK) break;"),
        (leapfrog(NO_U_TURN, "student"), lagrangian(NO_U_TURN, "ring", turn=1)),
    ),
    Planted(
        "choice inside a half biased towards the newest state",
        Mutation(ORBIT, "* o->fresh_sum < weight)", "* (o->fresh_sum - weight) < weight)"),
        (leapfrog(NO_U_TURN, "student"), lagrangian(NO_U_TURN, "edge", turn=1)),
    ),
]

HALVING = [
    Planted(
        "halving without the reverse rule",
        Mutation(WALK, "    if (k > 0) {\n", "    if (0) {\n"),
        (
            leapfrog(JITTERED, "student", halvings=3),
            lagrangian(NO_U_TURN, "student", halvings=3),
            lagrangian(NO_U_TURN, "ring", halvings=3, curvature=2),
        ),
    ),
    Planted(
        "halving bounds the rise since the start of the step, not the range",
        Mutation(WALK, "        if (level < low) low = level;\n", ""),
        (leapfrog(JITTERED, "student", halvings=3), lagrangian(NO_U_TURN, "student", halvings=3)),
    ),
]

VELOCITY = [
    Planted(
        "velocities drawn from the base metric instead of the bent one",
        Mutation(
            MOTION,
            "    fw_kick(walk->d, -k * p->wc, p->c, p->w, sums);",
            "    fw_kick(walk->d, -k * 0.0, p->c, p->w, sums);",
        ),
        (lagrangian(JITTERED, "student"), lagrangian(NO_U_TURN, "ring", curvature=2)),
    ),
]

ISOKINETIC = [
    Planted(
        "log-Jacobian dropped, isokinetic",
        Mutation(TURNED, "    p->log_jacobian -= others * log_stretch;\n", ""),
        (isokinetic(JITTERED, "student"), isokinetic(NO_U_TURN, "ring")),
    ),
    Planted(
        "log-Jacobian of the isokinetic turn in d dimensions, not d - 1",
        Mutation(TURNED, "_jacobian -= others * log_stretch;", "_jacobian -= (others + 1.0) * log_stretch;"),
        (isokinetic(JITTERED, "student"), isokinetic(NO_U_TURN, "rosenbrock")),
    ),
    Planted(
        "isokinetic turns less in the first half of a step than in the second",
        Mutation(
            TURNED,
            "turn(walk, p, 0.5 * step, speed, &k, &stretch);\n    if (status != FW_OK) return status;\n    /*",
            "turn(walk, p, 0.2 * step, speed, &k, &stretch);\n    if (status != FW_OK) return status;\n    /*",
        ),
        (isokinetic(NO_U_TURN, "student"), isokinetic(JITTERED, "student")),
    ),
    Planted(
        "isokinetic velocities that always begin along the gradient",
        Mutation(
            TURNED,
            "    fw_scale(walk->d, k, p->w);\n    p->wc *= k;\n",
            "    fw_scale(walk->d, p->wc < 0.0 ? -k : k, p->w);\n    p->wc = fabs(k * p->wc);\n",
        ),
        (isokinetic(JITTERED, "student"), isokinetic(JITTERED, "ring")),
    ),
]

PLANTED = [*JACOBIAN, *FIELD, *TURN, *HALVING, *VELOCITY, *ISOKINETIC]
