"""Results for the tests of the page: made from arrays, so that what the page must show is known, or run in a second."""

import functools

import numpy as np

import fellwalk as fw
from fellwalk.facts import FACTS
from fellwalk.result import Result
from fellwalk.run_record import ChainResult
from fellwalk.settings import Settings

MARKUP = ["<script>alert('x')</script>", "<b>bold</b> & \"quoted\" id=\"y\"", "$x^2$ `tick` {{ 7 * 7 }} {% raw %}",
          "名前 ünïcode", "-->]]><!--"]


def made(draws, names=None, *, gradients=None, facts=None, failures=(), motion=None, ended="", path="", keep=None,
         model=None, summary=None):
    """A result of these draws (chains, n, dimension), as if it had been run; failures: rows of chain, draw, code and
    position."""
    chains, n, dimension = draws.shape
    plan = {"settings": Settings(motion=motion or fw.Leapfrog()).to_json(), "dimension": dimension, "chains": chains,
            "names": names or [f"x[{i}]" for i in range(dimension)], "keep": n if keep is None else keep, "seed": 11,
            "gradients": gradients is not None, "model": model, "settled": None, "parameters": None}
    if facts is None:
        facts = steady_facts(chains, n)
    found = {"settled": True, "step_size": 0.5, "bend": 0.0, "beta": 0.0} if summary is None else summary
    parts = []
    for c in range(chains):
        part = ChainResult(seconds=0.25, summary=dict(found))
        part.add_facts("settle", steady_facts(1, 20)[0])
        if n:
            part.add_facts("keep", facts[c])
            part.draws.append(draws[c])
            part.gradients.extend([] if gradients is None else [gradients[c]])
        rows = [f for f in failures if f[0] == c]
        if rows:
            _, draw, code, position = zip(*rows, strict=True)
            part.failures.append((np.array(draw), np.array(code, np.int32), np.array(position)))
        parts.append(part)
    return Result(plan, parts, ended=ended, path=path)


def steady_facts(chains, n):
    """Facts of transitions of 8 steps in which nothing happened, with independent energies."""
    facts = np.zeros((chains, n), FACTS)
    facts["steps"] = facts["gradients"] = 8
    facts["acceptance"] = 0.9
    facts["energy"] = np.random.default_rng(5).standard_normal((chains, n))
    return facts


def independent(chains, n, dimension, seed=3):
    """Independent standard normal draws."""
    return np.random.default_rng(seed).standard_normal((chains, n, dimension))


def neck(x):
    """log v ~ N(0, 1.8), the others ~ N(0, v): a funnel that is steep where v is small."""
    log_v, rest = x[0], x[1:]
    if abs(log_v) > 300:  # exp(-600 or so) of the probability lies there
        return -np.inf, x
    scaled = rest * np.exp(-log_v)
    square = float(rest @ scaled)
    value = -0.5 * log_v**2 / 3.24 - 0.5 * len(rest) * log_v - 0.5 * square
    return value, np.concatenate([[-log_v / 3.24 - 0.5 * len(rest) + 0.5 * square], -scaled])


def neck_density():
    return fw.Density(neck, 3, names=["log v", "a", "b"], start=np.array([0.1, 0.2, -0.1]))


@functools.cache
def neck_run(halvings=0):
    """A funnel with too long steps: steps fail in its neck, or, a step size given, are halved there."""
    settling = {"settle": 0, "step_size": 0.5} if halvings else {"settle": 150, "acceptance": 0.6}
    return fw.run(neck_density(), motion=fw.Leapfrog(halvings=halvings), keep=600, chains=4, seed=4, executor="here",
                  progress="off", **settling)


@functools.cache
def bent_run():
    """One chain of a bent metric over an easy density of three coordinates, under names with markup in them."""
    scale = np.array([0.5, 1.0, 3.0])
    density = fw.Density(lambda x: (-0.5 * float(x @ (x / scale)), -x / scale), 3, names=MARKUP[:3], start=scale)
    return fw.run(density, motion=fw.Lagrangian(bend=0.5), settle=150, keep=300, chains=1, seed=9, executor="here",
                  progress="off"), density


@functools.cache
def many():
    """300 parameters, 16 chains."""
    return made(independent(16, 60, 300))


@functools.cache
def apart():
    """Chain 3 lies elsewhere in the second of three parameters."""
    draws = independent(4, 300, 3)
    draws[2, :, 1] += 5.0
    return made(draws, names=["one", "two", "three"])


@functools.cache
def constant():
    """The second of three parameters never varies; draws good otherwise."""
    draws = independent(4, 1000, 3)
    draws[:, :, 1] = 2.385
    return made(draws, names=["east", "fixed", "north"])


@functools.cache
def markup():
    """Good draws under names that are not fit to stand in a page as they are."""
    return made(independent(4, 600, len(MARKUP)), names=MARKUP)


@functools.cache
def stopped():
    """A run that ended before its first kept draw."""
    return made(np.empty((2, 0, 2)), keep=500, ended="an exception", summary={})
