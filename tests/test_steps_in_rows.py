"""Steps that follow each other share passes (`step_in_row` in walk.h): bit for bit what single steps do.

A path whose velocities are asked for is made of single steps, so one that only tells its end, or positions and energies
on the way, is compared with it; jittered paths are compared with the same paths put together from single steps here.
"""

import math

import numpy as np
import pytest
from breaking import ACTS, FORMS, Breaking, Stop

import fellwalk as fw
from fellwalk._core import Engine, Stream
from fellwalk.facts import FACTS
from fellwalk.settings import Settings

SIZES = [1, 2, 3, 7, 8, 9, 16, 17, 100, 1001]
MOTIONS = {
    "leapfrog": fw.Leapfrog(),
    "leapfrog, halved": fw.Leapfrog(halvings=3),
    "isokinetic": fw.Isokinetic(),
    "surrogate, split": fw.Lagrangian(curvature="surrogate"),
    "surrogate, semi-explicit": fw.Lagrangian(curvature="surrogate", scheme="semi-explicit"),
    "difference": fw.Lagrangian(curvature="difference"),
}
INTERRUPTED, ENERGY, RANGE = -4, 1, 9


def directions(d, count, rng):
    """(count, d) orthonormal rows and their lambda."""
    rows = np.ascontiguousarray(np.linalg.qr(rng.standard_normal((d, count)))[0].T)
    return rows, rng.uniform(0.3, 4.0, count)


def engine_of(breaking, motion, *, scale, learned=None, beta=0.02, path=None, step_size=0.3, seed=0):
    """An engine that keeps at once, over the base metric given, and its target and stream."""
    settings = Settings(motion=motion, path=path or fw.Jittered(4), settle=0, beta=beta, step_size=step_size,
                        rank=len(learned[1]) if learned else 0)
    target, stream = breaking.density.target(), Stream(np.random.SeedSequence(seed))
    engine = Engine(target, stream, settings.core())
    assert engine.set_base(scale, *(learned or ())) == 0
    return engine, stream


def walked(engine, x, v, step, steps, *, velocities, states):
    """What is known of a path: result or "raised", end, failure place, rows of positions and facts, of velocities."""
    x, v, d = x.copy(), v.copy(), len(x)
    xs, vs, told = (np.full((steps + 1, width), np.nan) for width in (d, d, 3))
    try:
        found = engine.integrate(x, v, step, steps, xs if states else None, vs if velocities else None,
                                 told if states else None)
    except Stop:
        found = ("raised",)
    return found, x, v, engine.failed_at(), xs, told, vs


def same(a, b):
    """Equal to the bit, arrays and numbers and tuples of them."""
    if isinstance(a, np.ndarray):
        return a.tobytes() == b.tobytes()
    if isinstance(a, tuple):
        return len(a) == len(b) and all(same(p, q) for p, q in zip(a, b, strict=True))
    return type(a) is type(b) and (a == b or (a != a and b != b))


def case(seed, d, count):
    """(x, v, scale, learned directions or None, signed step)"""
    rng = np.random.default_rng([seed, d, count])
    learned = directions(d, count, rng) if count else None
    return (rng.standard_normal(d), rng.standard_normal(d), rng.uniform(0.3, 3.0, d), learned,
            rng.uniform(0.02, 0.5) * rng.choice([-1, 1]))


@pytest.mark.parametrize("count", [0, 1, 3])
@pytest.mark.parametrize("name", MOTIONS)
def test_a_row_of_steps_is_its_steps(name, count):
    motion = MOTIONS[name]
    for d in (size for size in SIZES if size >= max(count, 2 if name == "isokinetic" else 1)):
        breaking = Breaking("compiled", d)
        for seed in range(12 if d < 100 else 3):
            x, v, scale, learned, step = case(seed, d, count)
            engine, _ = engine_of(breaking, motion, scale=scale, learned=learned)
            for steps in (0, 1, 2, 3, 8):
                apart = walked(engine, x, v, step, steps, velocities=True, states=True)
                told = walked(engine, x, v, step, steps, velocities=False, states=True)
                plain = walked(engine, x, v, step, steps, velocities=False, states=False)
                assert same(told[:6], apart[:6]), (d, seed, steps)
                assert same(plain[:4], apart[:4]), (d, seed, steps)
                if apart[0][0] == 0 and name == "leapfrog":
                    assert apart[0][1] == steps
                    assert apart[0][5] == steps + 1, "gradients"


@pytest.mark.parametrize(("act", "form"), [(act, form) for act in ACTS for form in FORMS
                                           if (act, form) != ("not written", "pair")])
def test_a_row_breaks_where_its_steps_break(act, form):
    """At every call of a path, the last one included: status, steps done, calls made and place of the failure."""
    steps = 6
    for d, count in ((1, 0), (2, 0), (3, 2), (8, 0), (9, 1), (17, 0), (100, 0)):
        breaking = Breaking(form, d)
        x, v, scale, learned, step = case(3, d, count)
        for name in ("leapfrog", "surrogate, split", "isokinetic")[: 3 if d > 1 else 2]:
            for call in range(1, steps + 2):
                found = []
                for ways in ({"velocities": True, "states": True}, {"velocities": False, "states": True},
                             {"velocities": False, "states": False}):
                    breaking.plan.calls = 0
                    breaking.breaks(call, act)
                    engine, _ = engine_of(breaking, MOTIONS[name], scale=scale, learned=learned)
                    found.append((*walked(engine, x, v, step, steps, **ways), int(breaking.plan.calls)))
                apart, told, plain = found
                where = (d, name, call)
                # at the start there is no kick yet that would make this energy infinite
                known = name == "leapfrog" and (call, act) != (1, "energy infinite")
                assert same((told[:6], told[7]), (apart[:6], apart[7])), where
                assert same((plain[:4], plain[7]), (apart[:4], apart[7])), where
                status = 2 if act == "outside" and form != "compiled" else ACTS[act]
                if act == "stop" and form != "compiled":
                    assert apart[0] == ("raised",)
                elif known:
                    assert apart[0][:2] == ((status, max(call - 2, 0)) if status else (0, steps)), where
                if status and known:
                    assert breaking.plan.calls == call, where
                    assert same(plain[3], breaking.at), where


def test_an_interruption_falls_on_the_same_step():
    x, v, scale, _, step = case(4, 5, 0)
    for call in range(1, 7):
        found = []
        for velocities in (True, False):
            breaking = Breaking("pair", 5, lambda made: engine.interrupt() if made == call else None)  # noqa: B023
            engine, _ = engine_of(breaking, fw.Leapfrog(), scale=scale)
            found.append((*walked(engine, x, v, step, 6, velocities=velocities, states=True)[:6],
                          int(breaking.plan.calls)))
        assert same(*found)
        assert found[0][0][:2] == (INTERRUPTED, call - 1)
        assert found[0][6] == call


# ---- jittered paths -------------------------------------------------------------------------------------------------


def jittered(breaking, engine, stream, x, *, scale, step, most, draws):
    """Transitions put together from single steps: points, gradients, facts, failures [(draw, code, place)].

    `scale` has powers of 4, so that velocities and whitened ones turn into each other without rounding.
    """
    d, root, plan = len(x), np.sqrt(scale), breaking.plan
    breaks_at, calls = int(plan.breaks_at), 1  # the start of the chain
    points, gradients, facts, failures = np.empty((draws, d)), np.empty((draws, d)), np.zeros(draws, FACTS), []
    for i in range(draws):
        v = root * stream.normals(d)
        steps = min(1 + int(stream.uniforms(1)[0] * most), most)
        xs, vs, told = (np.full((steps + 1, width), np.nan) for width in (d, d, 3))
        # `integrate` evaluates the start of its path, which the chain knows
        plan.calls, plan.breaks_at = calls - 1, breaks_at if breaks_at > calls else 0
        status, done, *_ = engine.integrate(x.copy(), v, step, steps, xs, vs, told)
        start, place = told[0, ENERGY], engine.failed_at()
        low = high = weight = 0.0
        made = done + (status > 0)
        for j in range(1, done + 1):
            weight = start - told[j, ENERGY]
            low, high = min(low, weight), max(high, weight)
            if high - low > 1000.0:
                status, made, place = RANGE, j, xs[j]
                break
        calls += made
        accept = 0.0 if status else math.exp(min(weight, 0.0))
        moved = stream.uniforms(1)[0] < accept
        x = xs[steps] if moved else x
        if status:
            failures.append((i, status, place.tobytes()))
        plan.breaks_at = 0
        value, gradient = breaking.density(x)
        points[i], gradients[i] = x, gradient
        facts[i]["log_density"], facts[i]["energy"] = value, told[steps, ENERGY] if moved else start
        facts[i]["log_weight_range"], facts[i]["acceptance"] = high - low, accept
        facts[i]["step_size"], facts[i]["steps"], facts[i]["gradients"] = step, made, made
        facts[i]["failure"] = status
    return points, gradients, facts, failures, calls


@pytest.mark.parametrize("act", [None, *[act for act in ACTS if ACTS[act] >= 0]])
@pytest.mark.parametrize("d", SIZES)
def test_jittered_paths_are_made_of_single_steps(d, act):
    """Draws, gradients, facts, failures with their places and the random numbers used; without an act, in some steps so
    long that energies run away by themselves."""
    most, draws, failed = 7, 12, 0
    for seed in range(6):
        rng = np.random.default_rng([seed, d])
        scale, x = 4.0 ** rng.integers(-1, 2, d), rng.standard_normal(d)
        step = [0.2, 0.6, 8.0][seed % 3] if act is None else 0.15
        ours, ours_alone = Breaking("compiled", d), Breaking("compiled", d)
        for breaking in (ours, ours_alone):
            breaking.breaks(1 + int(rng.integers(2, 30)) if act and breaking is ours else 0, act or "zero")
        ours_alone.plan.breaks_at = ours.plan.breaks_at
        named = {"scale": scale, "step_size": step, "path": fw.Jittered(most), "seed": seed}
        engine, stream = engine_of(ours, fw.Leapfrog(), **named)
        assert engine.start(x) == 0
        points, gradients, facts = np.empty((draws, d)), np.empty((draws, d)), np.zeros(draws, FACTS)
        index, code, place = np.zeros(draws, np.int64), np.zeros(draws, np.int32), np.zeros((draws, d))
        status, done, rows, _ = engine.run(draws, points, facts, gradients, index, code, place)
        assert (status, done) == (0, draws)
        alone, numbers = engine_of(ours_alone, fw.Leapfrog(), **named)
        one = jittered(ours_alone, alone, numbers, x, scale=scale, step=step, most=most, draws=draws)
        assert same((points, gradients), one[:2]), seed
        for column in FACTS.names:
            assert same(facts[column].copy(), one[2][column].copy()), (seed, column)
        assert [(int(i), int(c), p.tobytes()) for i, c, p in zip(index, code, place, strict=True)][:rows] == one[3]
        assert stream.state == numbers.state
        assert ours.plan.calls == one[4]
        failed += rows
    assert failed > 0, "no path has failed"
