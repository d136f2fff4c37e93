"""Chains in lockstep: the law of single chains, pooled settling, failures that disturb no other, runs and records."""

import hashlib
import os
import signal

import numpy as np
import pytest
import stat_checks
from exactness.combinations import Combination, p_values, starts
from exactness.known import known
from scipy import stats

import fellwalk as fw
from fellwalk import errors, pooled, testing
from fellwalk.batch import evaluate
from fellwalk.lockstep import Lockstep


def batch_of(call, d, **named):
    return fw.Density(call, d, batch=True, **named)


def normal(scale):
    scale = np.asarray(scale, dtype=float)

    def call(x):
        y = x / scale
        return -0.5 * np.einsum("ij,ij->i", y, y), -y / scale

    return call


# ---- the targets of tests/exactness, for many points at once --------------------------------------------------------


def student(x):
    form = np.einsum("ij,ij->i", x, x)
    return -4.0 * np.log1p(form / 5.0), -8.0 * x / (5.0 + form)[:, None]


def ring(x):
    r = np.sqrt(np.einsum("ij,ij->i", x, x))
    return -2.0 * (r - 3.0) ** 2, -4.0 * ((r - 3.0) / r)[:, None] * x


def rosenbrock(x):
    away, bent = x[:, 0] - 1.0, x[:, 1] - x[:, 0] ** 2
    slope = np.column_stack([-away + 20.0 * x[:, 0] * bent, -10.0 * bent])
    return -0.5 * away**2 - 5.0 * bent**2, slope


def edge(x):
    y = x / np.array([1.3, 0.7])
    value = np.where(np.any(x < 0, axis=1), -np.inf, -0.5 * np.einsum("ij,ij->i", y, y))
    return value, np.where(np.isfinite(value)[:, None], -y / np.array([1.3, 0.7]), np.nan)


TARGETS = {"student": student, "ring": ring, "rosenbrock": rosenbrock, "edge": edge}
STEP = {"student": 0.9, "ring": 0.5, "rosenbrock": 0.22, "edge": 0.25}
# All p values of `test_ends_have_the_law_of_the_starts` together, over choices of the fixed random numbers.
FALSE_ALARM = 1e-3
TESTS = 2 * 3 * sum(len(known()[name].summaries) for name in TARGETS)


@pytest.mark.parametrize("name", TARGETS)
def test_the_functions_here_are_those_targets(name):
    """Up to a constant; 1e-12 for some tens of roundings."""
    target, x = known()[name].target, starts(name)[:50]
    values, slopes = TARGETS[name](x)
    right = [target.value_gradient(row) for row in x]
    away = values - np.array([value for value, _ in right])
    np.testing.assert_allclose(away, away[0], atol=1e-11)
    np.testing.assert_allclose(slopes, [slope for _, slope in right], rtol=1e-11, atol=1e-11)


def walked(name, rank, seed=2):
    """20,000 chains from exact draws, ten transitions of up to 7 steps that are too long on purpose."""
    it = known()[name]
    chains = Lockstep(batch_of(TARGETS[name], it.target.dimension), starts(name), path=fw.Jittered(7), seed=seed,
                      step_size=STEP[name])
    chains.base = pooled.Base(it.scale, it.directions[:rank], it.lam[:rank])
    facts = np.array([chains.transition()[0] for _ in range(10)])
    combination = Combination("leapfrog", 0, 0, "jittered", 0, 0, rank, name)
    return p_values(combination, chains.x), facts, np.any(chains.x != starts(name), axis=1).mean()


@pytest.mark.parametrize("rank", [0, 2])
@pytest.mark.parametrize("name", TARGETS)
def test_ends_have_the_law_of_the_starts(name, rank):
    """As in test_exactness: the chains are independent, also given the common numbers of steps."""
    p, facts, moved = walked(name, rank)
    print(name, rank, min(p.values()), facts["acceptance"].mean(), moved)
    assert min(p.values()) >= FALSE_ALARM / TESTS, p
    assert 0.2 < facts["acceptance"].mean() < 0.97
    assert moved > 0.8
    assert len(set(facts["steps"][:, 0])) > 1
    assert np.all(facts["steps"] == facts["steps"][:, :1])
    if name == "edge":
        assert (facts["failure"] == 2).mean() > 0.1, "paths have to meet the edge of the support"


def planted_kick(monkeypatch):
    """The second half kick of every step is 30% too long, so that paths cannot be walked back."""
    arrive = pooled.Base.arrive
    monkeypatch.setattr(pooled.Base, "arrive", lambda self, still, step, *rest: arrive(self, still, 1.3 * step, *rest))


def planted_acceptance(monkeypatch):
    """All paths that do not fail are accepted."""
    walk = Lockstep._walk

    def careless(self, step, steps):
        start, path = walk(self, step, steps)
        path.energy = np.where(path.failure == 0, start, np.inf)
        return start, path

    monkeypatch.setattr(Lockstep, "_walk", careless)


def planted_velocity(monkeypatch):
    """Velocities are drawn 10% too small, and the energy does not know."""
    walk = Lockstep._walk

    def slow(self, step, steps):
        self._room.drawn *= 0.9
        return walk(self, step, steps)

    monkeypatch.setattr(Lockstep, "_walk", slow)


def planted_mask(monkeypatch):
    """A path that has met the edge goes on as if it had not."""
    def fail(self, path, which, code):
        path.value[which], path.g[which], path.energy[which] = self.value[which], self.g[which], path.low[which]

    monkeypatch.setattr(Lockstep, "_fail", fail)


PLANTED = {"student": planted_kick, "ring": planted_acceptance, "rosenbrock": planted_velocity, "edge": planted_mask}


@pytest.mark.parametrize("name", PLANTED)
def test_planted_errors_are_seen(name, monkeypatch):
    PLANTED[name](monkeypatch)
    p = walked(name, 0)[0].values()
    assert min(0.0 if np.isnan(value) else value for value in p) < FALSE_ALARM / TESTS


def test_a_path_is_that_of_single_chains():
    """One walk of 20 chains against `integrate`, row by row: ends and log weights to 1e-12, some tens of roundings."""
    rng = np.random.default_rng(4)
    scale, x = np.array([0.5, 2.0, 1.0]), rng.standard_normal((20, 3))
    chains = Lockstep(batch_of(lambda x: tuple(map(np.asfortranarray, student(x))), 3), x, seed=1, step_size=0.3,
                      scale=scale)
    chains._room.drawn[:] = rng.standard_normal((20, 3))
    start, path = chains._walk(0.3, 5)
    weight = start - path.energy
    single = fw.Density(lambda x: tuple(part[0] for part in student(x[None])), 3)
    for c in range(20):
        end = fw.integrate(single, x[c], np.sqrt(scale) * chains._room.drawn[c], step_size=0.3, steps=5, scale=scale)
        np.testing.assert_allclose(path.x[c], end.position, rtol=1e-12, atol=1e-12)
        assert weight[c] == pytest.approx(end.log_ratio, abs=1e-12)


# ---- failures and masks ---------------------------------------------------------------------------------------------


class Faulty:
    """A standard normal that gives something else in one row at the n-th call; remembers the points of that row."""

    def __init__(self, row, n, value=0.0, slope=None):
        self.row, self.n, self.value, self.slope, self.calls, self.seen = row, n, value, slope, 0, []

    def __call__(self, x):
        self.calls += 1
        assert np.all(np.isfinite(x)), "the function was called where nothing is"
        self.seen.append(x[self.row].copy())
        value, slope = normal(np.ones(x.shape[1]))(x)
        if self.calls == self.n:
            value[self.row] += self.value
            if self.slope is not None:
                slope[self.row] = self.slope
        return value, slope


FAULTS = {"minus infinity": (-np.inf, None, 2), "NaN": (np.nan, None, 3), "gradient": (0.0, np.inf, 4),
          "gradient NaN": (0.0, np.nan, 4)}


def started(function, m=6, d=3, **named):
    x = np.random.default_rng(8).standard_normal((m, d))
    return Lockstep(batch_of(function, d), x, seed=5, step_size=0.4, path=fw.Jittered(6), **named)


@pytest.mark.parametrize("fault", FAULTS)
def test_a_failing_chain_does_not_disturb_the_bits_of_the_others(fault):
    value, slope, code = FAULTS[fault]
    plain, faulty = started(normal(np.ones(3))), Faulty(2, 5, value, slope)
    other = started(faulty)
    before = other.x[2].copy()
    right, found = plain.advance(8), other.advance(8)
    failed = [np.flatnonzero(block.facts["failure"]) for block in found]
    assert [len(where) for where in failed] == [0, 0, 1, 0, 0, 0]
    at = int(failed[2][0])
    assert found[2].facts["failure"][at] == code
    assert found[2].facts["acceptance"][at] == 0.0
    index, codes, position = found[2].failures
    assert (index.tolist(), codes.tolist()) == ([at], [code])
    assert np.array_equal(position[0], faulty.seen[4]), "where the function gave it"
    for c in (0, 1, 3, 4, 5):
        assert np.array_equal(right[c].draws, found[c].draws)
        assert np.array_equal(right[c].facts, found[c].facts)
    stayed = before if at == 0 else found[2].draws[at - 1]
    assert np.array_equal(found[2].draws[at], stayed)


def test_a_waiting_chain_is_called_at_its_start_only():
    faulty = Faulty(1, 2, np.nan)
    chains = started(faulty)
    start = chains.x[1].copy()
    chains._room.drawn[:] = 0.3
    _, path = chains._walk(0.4, 6)
    assert path.failure.tolist() == [0, 3, 0, 0, 0, 0]
    assert len(faulty.seen) == 7
    for x in faulty.seen[2:]:
        assert np.array_equal(x, start)


def test_energies_that_run_away_are_failures():
    """Steps far beyond stability: log weights of more than 1000, and beyond all numbers."""
    codes = set()
    for step in (30.0, 1e100):
        chains = Lockstep(batch_of(normal(np.ones(2)), 2), np.ones((4, 2)), seed=1, step_size=step, path=fw.Jittered(9))
        with np.errstate(all="ignore"):
            codes |= set(np.array([b.facts["failure"] for b in chains.advance(3)]).ravel())
        assert np.all(chains.x == 1.0)
    assert codes >= {9}
    assert codes <= {2, 3, 4, 8, 9}


def test_an_exception_leaves_everything_as_it_was():
    class Stop(Exception):
        pass

    plain = started(normal(np.ones(3)))
    right = np.array([block.draws for block in plain.advance(6)])

    class Raises:
        n = -1

        def __call__(self, x):
            self.n += 1
            if self.n == 9:
                raise Stop("now")
            return normal(np.ones(3))(x)

    chains = started(Raises())
    blocks = chains.block(6)
    assert isinstance(blocks[0].error, Stop)
    done = len(blocks[0])
    assert 0 < done < 6
    more = chains.advance(6 - done)
    assert np.array_equal(np.concatenate([[b.draws for b in part] for part in (blocks, more)], axis=1), right)
    chains.density.batch.n = 8
    before = chains.state
    with pytest.raises(Stop, match="now"):
        chains.advance(3)
    assert chains.state == before


def test_plus_infinity_and_wrong_forms_are_said():
    def once(answer):
        return batch_of(lambda x: answer(x) if len(x) > 1 else normal(np.ones(2))(x), 2)

    def start(answer):
        return Lockstep(once(answer), np.ones((3, 2)), seed=1, step_size=0.1)

    with pytest.raises(errors.InfiniteDensityError, match="in row 1 of the batch"):
        start(lambda x: (np.array([0.0, np.inf, 0.0]), -x))
    for answer in (lambda x: -x, lambda x: (0.0, -x), lambda x: (np.zeros(3), np.zeros(2)),
                   lambda x: (np.zeros((3, 1)), -x), lambda x: (np.zeros(3), np.array([["a"] * 2] * 3)),
                   lambda x: (np.zeros(3), -x + 1j)):
        with pytest.raises(errors.DensityError, match=r"function of a batch|points of shape"):
            start(answer)
    with pytest.raises(errors.StartError, match="chain 2 of 3"):
        start(lambda x: (np.array([0.0, -np.inf, 0.0]), -x))


# ---- settling -------------------------------------------------------------------------------------------------------

SPREAD = 10.0 ** np.linspace(-3.0, 3.0, 8)


def test_settling_pools_all_chains():
    """Scales over six decades, from starts in one corner: scale to 5%, acceptance to 0.05 of what was asked for."""
    rng = np.random.default_rng(3)
    x = SPREAD * (4.0 + 0.1 * rng.standard_normal((128, 8)))
    chains = Lockstep(batch_of(normal(SPREAD), 8), x, seed=6, path=fw.Jittered(6), acceptance=0.7)
    facts = chains.settle()
    assert facts.shape[0] == 128
    assert chains.settled
    assert 60 <= facts.shape[1] < 200, "two quiet windows end it"
    np.testing.assert_allclose(chains.base.scale / SPREAD**2, 1.0, rtol=0.05)
    assert len(chains.base.variances) == 0
    before = hashlib.sha256(chains.base.r.tobytes()).hexdigest(), chains.step_size
    acceptance = np.mean([block.facts["acceptance"] for block in chains.advance(100)])
    assert acceptance == pytest.approx(0.7, abs=0.05)
    assert (hashlib.sha256(chains.base.r.tobytes()).hexdigest(), chains.step_size) == before, "nothing adapts any more"


def test_settling_goes_on_while_the_log_density_rises():
    """From 3,000 standard deviations out, where two windows change nothing: the draws are then of the target. Means of
    64 chains, 40 draws each that hardly depend on each other: false alarm 1e-6."""
    x = SPREAD * (3000.0 + 0.1 * np.random.default_rng(3).standard_normal((64, 8)))
    chains = Lockstep(batch_of(normal(SPREAD), 8), x, seed=6, path=fw.Jittered(6), settle="auto")
    while not chains.settled:
        chains.transition()
    assert chains.transitions > 200
    draws = np.array([block.draws for block in chains.advance(400)])[:, ::10] / SPREAD
    assert np.abs(draws).max() < 10.0
    stat_checks.assert_all([stat_checks.compare_independent_mean(draws[..., i], 0.0) for i in range(8)], 1e-6)


def test_directions_are_learned_and_confirmed():
    """A normal whose correlation of 0.99 makes one direction long and nine short."""
    d = 10
    known_ = testing.normal(np.linspace(0.5, 2.0, d), 20.0)

    def call(x):
        pairs = [known_.call(row) for row in x]
        return np.array([value for value, _ in pairs]), np.array([slope for _, slope in pairs])

    starts_ = known_.draws(64, np.random.default_rng(1)) * 0.1
    chains = Lockstep(batch_of(call, d), starts_, seed=2, path=fw.Jittered(4))
    chains.settle(80)
    assert len(chains.base.variances) >= 1
    # what is left to the walk: the condition number of the target in the base metric, 400 without it
    spread = np.array([chains.base.stretch(row[None] / chains.base.r, -0.5)[0] for row in known_.draws(
        4000, np.random.default_rng(9))])
    values = np.linalg.eigvalsh(np.cov(spread.T))
    assert values[-1] / values[0] < 2.0
    plain = Lockstep(batch_of(normal(SPREAD), 8), np.tile(SPREAD, (64, 1)), seed=2, rank=0)
    plain.settle(60)
    assert plain.base.e.shape == (0, 8)


def test_the_geometric_mean_of_covariances_is_the_covariance_of_a_normal():
    rng = np.random.default_rng(5)
    a = rng.standard_normal((6, 6))
    covariance = a @ a.T + np.eye(6)
    found = pooled._geometric(covariance, np.linalg.inv(covariance))
    np.testing.assert_allclose(found, covariance, rtol=1e-9)


@pytest.mark.parametrize("settle", [0, 1, 2, 5, 40])
def test_fixed_plans_are_kept_to(settle):
    chains = Lockstep(batch_of(normal(np.ones(2)), 2), np.ones((4, 2)), seed=1, settle=settle, step_size=0.5)
    count = 0
    while not chains.settled:
        chains.transition()
        count += 1
    assert count == settle
    assert len(chains.settle(settle)[0]) == settle


# ---- state ----------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("done", [0, 7, 25, 70, 200])
def test_a_state_goes_on_with_the_same_bits(done):
    def make():
        return Lockstep(batch_of(normal(SPREAD), 8), np.tile(SPREAD, (16, 1)), seed=6, settle="auto",
                        path=fw.Jittered(3))

    whole, first = make(), make()
    for _ in range(done):
        first.transition()
    second = Lockstep.from_state(first.density, first.state)
    assert second.state == first.state
    facts = [whole.transition()[0] for _ in range(done + 60)]
    again = [second.transition()[0] for _ in range(60)]
    assert np.array_equal(facts[done:], again)
    assert second.state == whole.state


def test_damaged_states_are_refused():
    chains = started(normal(np.ones(3)))
    state = chains.state
    for wrong in (b"", b"something else", state[:-1], state[:40] + b"x" + state[41:]):
        with pytest.raises(errors.StateError):
            Lockstep.from_state(chains.density, wrong)
    with pytest.raises(errors.StateError, match="3 coordinates; this density has 2"):
        Lockstep.from_state(batch_of(normal(np.ones(2)), 2), state)


# ---- runs -----------------------------------------------------------------------------------------------------------

MADE = batch_of(normal([1.0, 3.0, 0.2]), 3, start=[0.5, 1.0, 0.1], names=["a", "b", "c"])


def run(density=MADE, **named):
    named = {"chains": 32, "keep": 150, "seed": 9, "progress": "off", "path": fw.Jittered(4)} | named
    return fw.run(density, **named)


def test_a_run_is_like_any_other():
    """Means and sds against the law; the family fails for nothing with rate 1e-6."""
    result = run(keep=400)
    assert result.finished
    assert result.draws.shape == (32, 400, 3)
    assert result.gradients.shape == result.draws.shape
    np.testing.assert_allclose(result.gradients, -result.draws / [1.0, 9.0, 0.04], rtol=1e-12)
    found = []
    for name, sd in (("a", 1.0), ("b", 3.0), ("c", 0.2)):
        found += [stat_checks.compare_mean(result[name] / sd, 0.0, what=name),
                  stat_checks.compare_sd(result[name], 0.0, sd, f"{name} sd")]
    stat_checks.assert_all(found, 1e-6)
    assert "jittered paths" in str(result)
    assert len(result.settled.chains) == 32
    again = run(settled=result, chains=5, keep=20)
    assert again.draws.shape == (5, 20, 3)
    assert len(again.settling[0]) == 0


def test_single_chains_over_the_same_density():
    """A density of batches is one of single points too."""
    value, gradient = MADE([1.0, 3.0, 0.2])
    assert value == pytest.approx(-1.5, rel=1e-14)
    np.testing.assert_allclose(gradient, [-1.0, -1.0 / 3.0, -5.0], rtol=1e-14)
    assert fw.audit(MADE).ok
    block = fw.Chain(MADE, [0.0, 0.0, 0.0], seed=1, step_size=0.1).advance(5)
    assert block.draws.shape == (5, 3)


def test_with_parameters_natural_values_are_seen():
    """Exponential and uniform laws of two bounded parameters, by Kolmogorov-Smirnov of every tenth draw of chains that
    are nearly independent draw by draw; false alarm 1e-6. And the bits of the mapped single density, to rounding."""
    parameters = fw.Parameters(rate=fw.positive(), share=fw.between(0.0, 2.0))

    def call(x):
        assert np.all(x[:, 0] > 0)
        assert np.all((x[:, 1] > 0) & (x[:, 1] < 2))
        return -x[:, 0], np.tile([-1.0, 0.0], (len(x), 1))

    density = batch_of(call, parameters)
    chains = Lockstep(density, np.random.default_rng(2).standard_normal((7, 2)), seed=1, step_size=0.1)
    for c in range(7):
        value, gradient = density(chains.x[c])
        assert chains.value[c] == pytest.approx(value, rel=1e-13)
        np.testing.assert_allclose(chains.g[c], gradient, rtol=1e-13)
    result = run(density, chains=64, keep=300, path=fw.Jittered(5))
    rate, share = (result[name][:, ::10].ravel() for name in ("rate", "share"))
    stat_checks.assert_laws({"rate": (rate, stats.expon.cdf), "share": (share, stats.uniform(0, 2).cdf)}, 1e-6)


def test_where_no_natural_value_is_the_function_is_not_called():
    """A log-Jacobian beyond all numbers; alone and beside a row that is fine."""
    parameters = fw.Parameters(rates=fw.positive(2))
    seen = []

    def call(x):
        seen.append(x.copy())
        return -x.sum(axis=1), -np.ones_like(x)

    density, far = batch_of(call, parameters), np.array([[-1.7e308, -1.7e308], [0.1, 0.2]])
    values, _ = evaluate(density, far, parameters.maps())
    assert values[0] == -np.inf
    assert np.isfinite(values[1])
    np.testing.assert_allclose(seen[-1], np.exp([[0.1, 0.2]] * 2))
    count = len(seen)
    values, _ = evaluate(density, far[:1], parameters.maps())
    assert values.tolist() == [-np.inf]
    assert len(seen) == count


def test_record_and_resume_with_the_same_bits(tmp_path):
    whole = run(keep=120)
    calls = iter(range(10**9))

    def stops(x):
        if len(x) > 1 and next(calls) == 300:
            raise RuntimeError("the power went")
        return normal([1.0, 3.0, 0.2])(x)

    place = tmp_path / "walk.fell"
    density = batch_of(stops, 3, start=MADE.start, names=MADE.names)
    with pytest.raises(RuntimeError, match="the power went") as caught:
        run(density, keep=120, record=place)
    assert "32 chains in lockstep" in caught.value.__notes__[0]
    so_far = fw.load(place)
    assert not so_far.finished
    result = fw.resume(place, MADE, progress="off")
    assert np.array_equal(result.draws, whole.draws)
    assert np.array_equal(result.facts, whole.facts)
    assert np.array_equal(fw.load(place).draws, whole.draws)
    more = fw.resume(place, MADE, keep=150, progress="off")
    assert np.array_equal(more.draws, run(keep=150).draws)
    single = fw.Density(lambda x: tuple(part[0] for part in normal([1.0, 3.0, 0.2])(x[None])), 3, names=MADE.names)
    with pytest.raises(errors.OtherModelError, match="made with batch=True"):
        fw.resume(place, single)


def test_a_limit_of_time_and_ctrl_c_end_at_a_block_edge(tmp_path):
    result = run(keep=10**6, seconds=0.3)
    assert not result.finished
    assert result.ended == "the time given had passed"
    calls = iter(range(10**9))

    def interrupted(x):
        if len(x) > 1 and next(calls) == 5:
            os.kill(os.getpid(), signal.SIGINT)
        return normal([1.0, 3.0, 0.2])(x)

    place = tmp_path / "walk.fell"
    result = run(batch_of(interrupted, 3, start=MADE.start, names=MADE.names), keep=400, record=place)
    assert result.ended == "Ctrl-C"
    assert np.array_equal(fw.resume(place, MADE, progress="off").draws, run(keep=400).draws)


def test_rows_that_hang_together_are_noticed():
    """A mean over the batch, which one point alone does not show."""
    def mixed(x):
        value, slope = normal(np.ones(3))(x)
        return value - 0.1 * x.mean(), slope - 0.1 / x.size

    def shared(x):
        value, slope = normal(np.ones(3))(x)
        return value, slope.mean(axis=0) + np.zeros_like(x)

    for function in (mixed, shared):
        with pytest.raises(errors.AuditError, match="depend on its own point only"):
            run(batch_of(function, 3, start=[0.5, 1.0, 0.1]))


WRONG = {
    "path": ({"path": fw.NoUTurn()}, "jittered paths"),
    "length": ({"path": fw.Jittered("auto")}, "do not look for the length"),
    "seed": ({"seed": "x"}, "seed must be a whole number"),
    "motion": ({"motion": fw.Lagrangian()}, "plain leapfrog"),
    "halvings": ({"motion": fw.Leapfrog(halvings=3)}, "plain leapfrog"),
    "executor": ({"executor": "threads"}, "leave executor= out"),
}


@pytest.mark.parametrize("wrong", WRONG)
def test_what_does_not_go_together_is_said(wrong):
    named, sentence = WRONG[wrong]
    with pytest.raises(errors.ArgumentError, match=sentence):
        run(**named)


def test_a_density_of_batches_is_python_and_plain():
    for named in ({"in_place": True}, {"by_name": True}):
        with pytest.raises(errors.ArgumentError, match="batch=True is for functions"):
            fw.Density(normal(np.ones(2)), 2, batch=True, **named)
    with pytest.raises(errors.ArgumentError, match="need a density of batches"):
        Lockstep(fw.Density(lambda x: (0.0, x), 2), np.ones((2, 2)))
    with pytest.raises(errors.ShapeError, match=r"starts must have shape \(chains, 3\)"):
        Lockstep(MADE, np.ones(3))
