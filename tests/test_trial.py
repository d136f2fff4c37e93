"""Trials: what they measure, what they choose, and what they say when nothing can be told."""

import html
import json

import numpy as np
import pytest
import stat_checks
import targets

import fellwalk as fw
from fellwalk import errors, trial_merit
from fellwalk.autocorrelation import effective_size
from fellwalk.cli import main
from fellwalk.settled import SettledChain
from fellwalk.trial_candidates import candidates_for, with_rank
from fellwalk.trial_play import Play, packed, unpacked
from fellwalk.trial_result import told_in_words
from fellwalk.trial_rounds import Competition, TrialTerms
from fellwalk.trial_tuning import steepness
from fellwalk.work import Job, Live, make_block


def density_of(target):
    return fw.Density(target.density, target.dimension, hessian_product=target.hessian_product)


def played(play, limit=10**9):
    """The trial and the states of the winner's chains, of a play whose blocks are made here; or None after so many."""
    ready, live = list(play.begin()), Live()
    while ready and limit > 0:
        done = play.make_here(ready.pop(0), live)
        assert done.block.error is None
        ready += play.take(done)
        limit -= 1
    return play.winners() if play.over else None


def spread_normal():
    return targets.independent_normal(np.zeros(200), np.sqrt(np.logspace(-1.0, 1.0, 200)))


@pytest.fixture(scope="module")
def on_normal():
    """(density, gradients called, trial) on a normal in d = 200 with variances over 1e2."""
    target = spread_normal()
    density = density_of(target)
    found = fw.trial(density, target.exact_draws(1, np.random.default_rng(2))[0], seed=5)
    return density, density.gradients, found


# ---- what draws are worth -------------------------------------------------------------------------------------------


def autoregression(r, chains, n, rng, d=3):
    x = np.empty((chains, n, d))
    x[:, 0] = rng.standard_normal((chains, d))
    for t in range(1, n):
        x[:, t] = r * x[:, t - 1] + np.sqrt(1.0 - r * r) * rng.standard_normal((chains, d))
    return x


@pytest.mark.parametrize("r", [0.0, 0.5, 0.9])
def test_the_centre_of_an_autoregression(r):
    """Exactly n (1 - r) / (1 + r): within four times sqrt(5 / worth), which the errors of estimates stay below, and 0.1
    for the smaller of two estimates (false alarm rate 1e-4)."""
    x = autoregression(r, 2, 2000, np.random.default_rng(1), d=1)
    found = trial_merit.effective(x[..., 0], np.array(1.0))
    exact = 4000 * (1.0 - r) / (1.0 + r)
    assert abs(np.log(found / exact)) < 4.0 * np.sqrt(5.0 / exact) + 0.1


def test_chains_that_creep_in_a_part_are_worth_little():
    """Fast for themselves, with a tenth of the spread: they lose 0.01 of the variance a draw, worth 1/199 of one."""
    x = 0.1 * np.random.default_rng(2).standard_normal((2, 500))
    assert effective_size(x) > 900
    assert trial_merit.effective(x, np.array(1.0)) == pytest.approx(1000 / 199, rel=0.15)


def test_few_draws_do_not_pass_for_good():
    """A tail that was never visited in 16 draws a chain is worth less than two draws, not as many as were made."""
    rng = np.random.default_rng(3)
    pooled = trial_merit.pool([rng.standard_normal((2, 400, 1))])
    x = np.abs(rng.standard_normal((2, 16, 1)))
    worth = trial_merit.measure(x, pooled, pooled, 0.05)
    assert worth.what == "lower tail"
    assert worth.effective < 6.0


def test_a_tail_that_is_visited_too_rarely_is_seen():
    """Of 2 x 600 independent draws none below the lower 5% of the others': 60 were due, give or take 8."""
    rng = np.random.default_rng(4)
    others = rng.standard_normal((4, 600, 2))
    mine = rng.standard_normal((2, 600, 2))
    fine = trial_merit.measure(mine, trial_merit.pool([others, mine]), trial_merit.pool([others]), 0.05)
    assert fine.shy < 3.5
    mine[..., 1] = np.where(mine[..., 1] < -1.6, 0.0, mine[..., 1])
    shy = trial_merit.measure(mine, trial_merit.pool([others, mine]), trial_merit.pool([others]), 0.05)
    assert shy.shy > 4.0
    assert shy.shy_in == 1


def test_the_pool_holds_as_much_of_each():
    pooled = trial_merit.pool([np.zeros((2, 50, 1)), np.ones((4, 500, 1))])
    assert pooled.shape == (1, 200)  # 100 of each
    assert pooled.mean() == 0.5


# ---- candidates -----------------------------------------------------------------------------------------------------


def settled_part(d, k, rng):
    directions = np.linalg.qr(rng.standard_normal((d, k)))[0].T
    return SettledChain(rng.uniform(0.3, 3.0, d), directions, np.array([30.0, 0.02, 5.0][:k]), 0.5, 0.0)


def covariance(part):
    inner = np.eye(len(part.scale)) + part.directions.T @ ((part.variances - 1.0)[:, None] * part.directions)
    return np.sqrt(part.scale)[:, None] * inner * np.sqrt(part.scale)


def test_directions_left_out_go_into_the_scale():
    """sqrt(var x / var g) of the covariance that the directions describe, coordinate by coordinate."""
    part = settled_part(6, 3, np.random.default_rng(5))
    dense = covariance(part)
    flat = with_rank(part, 0)
    np.testing.assert_allclose(flat.scale, np.sqrt(np.diag(dense) / np.diag(np.linalg.inv(dense))), rtol=1e-12)
    assert flat.directions.shape == (0, 6)
    assert with_rank(part, None) is part
    one = with_rank(part, 1)
    np.testing.assert_array_equal(one.variances, [0.02])  # the strongest: |log 0.02| > log 30


def test_steepness_is_that_of_the_dense_metric():
    rng = np.random.default_rng(6)
    part = settled_part(5, 2, rng)
    g = rng.standard_normal((41, 5))
    expected = np.median(np.einsum("ni,ij,nj->n", g, covariance(part), g))
    assert steepness(part, g) == pytest.approx(expected, rel=1e-12)


def test_candidates():
    names = [c.name for c in candidates_for(3, 2)]
    assert names[0] == "leapfrog"
    assert len(set(names)) == len(names)
    assert {"leapfrog, rank 0", "leapfrog, rank 1", "leapfrog, halved", "lagrangian, bend 0.3"} <= set(names)
    assert "isokinetic" in names
    assert not any("rank" in c.name for c in candidates_for(3, 0))
    assert not any("isokinetic" in c.name for c in candidates_for(1, 0))


# ---- a trial that can tell ------------------------------------------------------------------------------------------


def test_it_chooses_what_is_better(on_normal):
    """The long run is the oracle: 3000 draws of the winner's first chain against as many of leapfrog over the same base
    metric, by Geyer's effective size of centres and squares, the least over 200 coordinates, per gradient."""
    density, _, found = on_normal
    assert found.told
    assert found.winner.startswith("isokinetic")
    part = found.settled.chains[0]

    def worth(chain):
        block = chain.advance(3000)
        z = (block.draws - block.draws.mean(axis=0)).T[:, None]
        return min(effective_size(z).min(), effective_size(z**2).min()) / block.facts["gradients"].sum()

    plain = fw.Chain(density, found.positions[0], seed=1, settle=100, scale=part.scale, adapt_scale=False)
    plain.block(100)
    assert worth(fw.Chain.from_state(density, found.chains[0].state)) > 1.5 * worth(plain)


def test_it_counts_every_gradient_and_keeps_to_its_budget(on_normal):
    """Beside settling and candidates: starting points, starts of chains, two calls and one-step paths for noise."""
    _, called, found = on_normal
    assert 0 <= called - found.spent - found.settling <= 40
    # a candidate may go over its share by the transitions in hand, and the least number of draws
    assert 0.7 * found.budget < found.spent < 1.15 * found.budget
    assert found.spent == pytest.approx(sum(entry.spent for entry in found.entries))
    assert all(entry.low <= entry.worth <= entry.high for entry in found.entries)


def test_the_same_seed_gives_the_same_trial_and_chains(on_normal):
    density, _, found = on_normal
    target = spread_normal()
    again = fw.trial(density, target.exact_draws(1, np.random.default_rng(2))[0], seed=5)
    assert again.to_json() == found.to_json()
    assert [chain.position.tobytes() for chain in again.chains] == [chain.position.tobytes() for chain in found.chains]


def test_decisions_follow_from_what_is_recorded(on_normal):
    """After each round the better half by effective draws per cost goes on, and the leader."""
    _, _, found = on_normal
    blocks = json.loads(json.dumps(found.to_json()))["blocks"]
    for block in blocks[:-1]:
        per = {c["name"]: c["effective"] / c["drawing"] for c in block["candidates"]}
        ruled_out = {e.name for e in found.entries if "round" not in e.why and e.why}
        order = sorted((name for name in per if name not in ruled_out), key=per.get, reverse=True)
        assert set(block["kept"]) == {*order[: max(2, len(per) // 2)], *({"leapfrog", "leapfrog, rank 0"} & set(per))}
    assert found.to_json()["entries"][0]["name"] == found.winner
    assert found.winner in str(found)
    assert "times leapfrog per cost" in told_in_words(found.to_json())


def test_a_run_takes_it_and_keeps_none_of_its_draws(on_normal):
    density, _, found = on_normal
    states = [chain.state for chain in found.chains]
    result = fw.run(density, settled=found, keep=30, seed=9, progress="off", executor="here")
    assert result.settings["motion"]["name"] == found.motion.name
    assert result.plan["settled"] == found.settled.hash
    assert len(result.chains) == 4
    assert [chain["step_size"] for chain in result.chains] == [part.step_size for part in found.settled.chains]
    assert [chain.state for chain in found.chains] == states
    starts = {position.tobytes() for position in found.positions}
    assert not starts & {draw.tobytes() for draw in result.draws.reshape(-1, 200)}


def test_a_run_that_finds_its_motion_itself(tmp_path):
    target = targets.student(20, 5.0)
    density = density_of(target)
    start = target.exact_draws(1, np.random.default_rng(3))[0]
    path = tmp_path / "walk.fell"
    result = fw.run(density, start, motion="auto", keep=400, seed=11, record=path, progress="off", executor="here")
    loaded = fw.load(path)
    assert loaded.trial == json.loads(json.dumps(result.trial))
    assert loaded.draws.tobytes() == result.draws.tobytes()
    assert result.trial["entries"][0]["name"] in str(loaded)
    assert " and a trial of motions: step size" in " ".join(str(loaded).split())
    page = loaded.report()
    assert "Why this motion?" in page
    assert html.escape(result.trial["reasons"][0]) in page
    assert "motion=&#34;auto&#34;" in page
    assert result.spent["gradients"] >= result.trial["spent"] + result.trial["settling"]
    assert result.spent["gradients"] == pytest.approx(density.gradients, abs=60)
    on = fw.resume(path, density, keep=500, progress="off", executor="here")
    assert on.draws[:, :400].tobytes() == result.draws.tobytes()
    # the budget is 0.12 of what settling and 4 x 400 of the best candidate's draws take, or less
    best = max(result.trial["blocks"][0]["candidates"], key=lambda c: c["effective"] / c["drawing"])
    cost = result.trial["settling"] + 1600 * best["drawing"] / best["transitions"]
    assert 0.0 < result.trial["budget"] <= 0.12 * cost * (1.0 + 1e-12)
    stat_checks.assert_all(stat_checks.compare_marginal(on.draws, target.marginals["x1"], "x1"), 1e-5)


@pytest.fixture(scope="module")
def settled_on_student():
    """(density, states, facts of settling) of four chains on a Student-t in 10 dimensions."""
    target = targets.student(10, 5.0)
    density = density_of(target)
    chains = [fw.Chain(density, x, seed=c, settle="auto")
              for c, x in enumerate(target.exact_draws(4, np.random.default_rng(9)))]
    settling = [chain.block(10_000, draws=False).facts for chain in chains]
    return density, [chain.state for chain in chains], settling


TERMS = TrialTerms(6, budget=9000)


def test_it_does_not_matter_who_makes_the_blocks_nor_where_they_end(settled_on_student):
    """Chains kept in memory against states sent round in random order, with blocks cut into pieces of at most three."""
    density, states, settling = settled_on_student
    found, ends = played(Play(density, states, settling, TERMS))
    play, rng = Play(density, states, settling, TERMS), np.random.default_rng(1)
    ready = list(play.begin())
    most_at_once = 0
    while ready:
        most_at_once = max(most_at_once, len(ready))
        job = play.job(ready.pop(rng.integers(len(ready))), 10.0)
        ready += play.take(make_block(density, Job(job.chain, job.state, min(3, job.most), job.gradients)))
    assert most_at_once > 5  # candidates side by side
    again, others = play.winners()
    assert again.to_json() == found.to_json()
    assert others == ends


@pytest.mark.parametrize(("stop", "most"), [(1, 1000), (30, 1000), (100, 1000), (8, 2), (61, 2)])
def test_a_trial_goes_on_from_its_stored_blocks(settled_on_student, stop, most):
    """Also from the middle of a block that was cut into pieces of at most `most` transitions."""
    density, states, settling = settled_on_student
    found, ends = played(Play(density, states, settling, TERMS))
    play = Play(density, states, settling, TERMS, storing=True)
    ready = list(play.begin())
    for _ in range(stop):
        job = play.job(ready.pop(0), 10.0)
        ready += play.take(make_block(density, Job(job.chain, job.state, min(most, job.most), job.gradients)))
    assert len(play.unsaved) == stop
    stored = unpacked(packed(play.unsaved), 10)
    calls = density.gradients
    again, others = played(Play(density, states, settling, TERMS, stored))
    assert again.to_json() == found.to_json()
    assert others == ends
    called = density.gradients - calls
    saved = sum(int(answer.block.facts["gradients"].sum()) for answer in stored)
    assert saved > 0
    # beside blocks: two calls and a short path for noise, starts; those of stored blocks are not made again
    assert -stop <= called - (found.spent - saved) <= 40


class Stopping:
    """A density that counts its calls and raises at one of them."""

    def __init__(self, at=None):
        self.calls, self.at = 0, at

    def __call__(self, x):
        self.calls += 1
        if self.calls == self.at:
            raise ZeroDivisionError("here")
        return -0.5 * float(x @ x), -x


@pytest.mark.parametrize("where", ["settling", "trial", "keeping"])
def test_a_run_that_was_cut_off_goes_on_with_the_bits_of_an_undisturbed_one(tmp_path, monkeypatch, where):
    monkeypatch.setattr(fw.driver, "_TRIAL_HERE", 0.0)  # hand its blocks round, as of a slow density
    whole = fw.run(fw.Density(Stopping(), 3), [0.1, 0.2, 0.3], keep=500, seed=3, executor="here", progress="off")
    assert whole.trial["entries"][0]["draws"] > 0
    settling = whole.trial["settling"]
    at = {"settling": 0.5 * settling, "trial": settling + 0.6 * whole.trial["spent"],
          "keeping": settling + whole.trial["spent"] + 1500}[where]
    path = tmp_path / "walk.fell"
    with pytest.raises(ZeroDivisionError) as caught:
        fw.run(fw.Density(Stopping(round(at)), 3), [0.1, 0.2, 0.3], keep=500, seed=3, executor="here", progress="off",
               record=path)
    phrase = {"settling": ", settling, at", "trial": "in the trial of motions", "keeping": "keeping draws"}[where]
    assert phrase in caught.value.__notes__[0]
    half = fw.load(path)
    assert (half.trial is None) == (where != "keeping")
    assert ("Stopped early, in its trial of motions" in half.heading()) == (where == "trial")
    function = Stopping()
    on = fw.resume(path, fw.Density(function, 3), executor="here", progress="off")
    assert on.draws.tobytes() == whole.draws.tobytes()
    assert on.trial == json.loads(json.dumps(whole.trial))
    if where == "trial":  # what was made before it stopped is not made again
        assert function.calls < whole.spent["gradients"] - settling - 0.4 * whole.trial["spent"]
    assert fw.load(path).draws.tobytes() == whole.draws.tobytes()


@pytest.mark.parametrize("executor", ["threads", "processes"])
def test_the_executor_does_not_matter(monkeypatch, executor):
    monkeypatch.setattr(fw.driver, "_TRIAL_HERE", 0.0)
    how = {"keep": 300, "chains": 3, "seed": 8, "progress": "off"}
    density = fw.Density(Stopping(), 3)
    here = fw.run(density, [0.1, 0.2, 0.3], executor="here", **how)
    there = fw.run(density, [0.1, 0.2, 0.3], executor=executor, **how)
    assert there.trial == here.trial
    assert there.draws.tobytes() == here.draws.tobytes()
    tried = [fw.trial(density, [0.1, 0.2, 0.3], budget=4000, seed=8, executor=one) for one in ("here", executor)]
    assert tried[0].to_json() == tried[1].to_json()
    assert [a.state for a in tried[0].chains] == [b.state for b in tried[1].chains]


def test_a_run_makes_a_trial_unless_it_is_told_what_a_trial_would_find():
    density = fw.Density(Stopping(), 3)
    how = {"keep": 300, "seed": 8, "progress": "off", "executor": "here"}
    chosen = fw.run(density, [0.1, 0.2, 0.3], **how)
    assert chosen.trial["entries"]
    assert chosen.draws.tobytes() == fw.run(density, [0.1, 0.2, 0.3], motion="auto", **how).draws.tobytes()
    told = [{"motion": fw.Leapfrog()}, {"path": fw.NoUTurn()}, {"rank": 0}, {"settle": 200}, {"scale": np.ones(3)},
            {"step_size": 0.5}, {"settled": chosen}]
    for given in told:
        assert fw.run(density, [0.1, 0.2, 0.3], **given, **how).trial is None


def test_a_short_run_makes_none_and_says_so():
    result = fw.run(fw.Density(Stopping(), 3), [0.1, 0.2, 0.3], keep=20, seed=8, progress="off", executor="here")
    assert [entry["name"] for entry in result.trial["entries"]] == ["leapfrog"]
    assert result.trial["spent"] == 0
    assert "No trial was made: its budget of" in str(result)
    plain = fw.run(fw.Density(Stopping(), 3), [0.1, 0.2, 0.3], motion=fw.Leapfrog(), keep=20, seed=8, progress="off",
                   executor="here")
    assert result.draws.tobytes() == plain.draws.tobytes()  # the chains go on as if nothing had been asked


def test_chains_that_have_not_come_home_are_not_tried():
    """A density without a top: its log density rises by one a unit of x[0], for ever."""
    density = fw.Density(lambda x: (float(x[0]) - 0.5 * float(x[1] ** 2), np.array([1.0, -x[1]])), 2)
    result = fw.run(density, [0.1, 0.2], keep=400, chains=2, seed=1, progress="off", executor="here")
    assert "No trial was made, as settling ended far from home in 2 of 2 chains" in result.trial["reasons"][0]
    assert result.trial["spent"] == 0


def test_fewer_candidates_where_the_budget_is_for_fewer():
    found = [len(fw.trial(fw.Density(Stopping(), 3), [0.1, 0.2, 0.3], budget=budget, seed=8).entries)
             for budget in (1000, 2500, 20_000)]
    assert 1 <= found[0] < found[1] < found[2] == len(candidates_for(3, 0))


def test_products_have_their_price_in_a_run():
    target = targets.equicorrelated_normal(20, 0.98)
    how = {"keep": 1000, "seed": 2, "progress": "off", "executor": "here", "product_cost": 7.0}
    result = fw.run(density_of(target), target.exact_draws(1, np.random.default_rng(7))[0], **how)
    assert result.plan["terms"] == {"draws": 4000, "product_cost": 7.0}
    assert "product_cost=7.0" in result.report()
    with pytest.raises(errors.ArgumentError, match="product_cost"):
        fw.run(density_of(target), np.zeros(20), product_cost=-1.0)


def test_of_many_coordinates_some_are_judged():
    """Of 3000 coordinates some 1250, the slow one among them: a hundred times as wide as its chains were told."""
    d = 3000
    scale = np.ones(d)
    scale[1234] = 1e4
    density = fw.Density(lambda x: (-0.5 * float(x @ (x / scale)), -x / scale), d)
    chains = [fw.Chain(density, np.sqrt(scale) * x, seed=c, settle=30, adapt_scale=False)
              for c, x in enumerate(np.random.default_rng(3).standard_normal((2, d)))]
    settling = [chain.block(30, draws=False).facts for chain in chains]
    play = Play(density, [chain.state for chain in chains], settling, TrialTerms(4, budget=5000))
    found, _ = played(play)
    picked = play.competition.picked
    assert 1000 < len(picked) <= 1250
    assert 1234 in picked
    assert found.entries[0].worst == "x[1234]"
    assert all(rows.shape[1] == len(picked) for parts in play.competition.leader.draws for rows in parts)


@pytest.mark.parametrize(("given", "named"), [({"path": fw.NoUTurn()}, "path"), ({"settle": 100}, "settle"),
                                              ({"scale": [1.0, 1.0]}, "scale"), ({"rank": 0}, "rank")])
def test_what_a_trial_finds_cannot_be_given(given, named):
    density = fw.Density(lambda x: (-0.5 * float(x @ x), -x), 2)
    with pytest.raises(errors.ArgumentError, match=f'motion="auto" finds what {named}= would fix'):
        fw.run(density, [0.1, 0.2], motion="auto", **given)
    with pytest.raises(errors.ArgumentError, match='or "auto"; it is \'best\''):
        fw.run(density, [0.1, 0.2], motion="best")


@pytest.mark.parametrize(("given", "words"), [({"budget": 0}, "budget"), ({"product_cost": -1}, "product_cost"),
                                              ({"acceptance": 1.0}, "acceptance"), ({"chains": 0}, "chains"),
                                              ({"seed": -1}, "seed")])
def test_wrong_arguments(given, words):
    density = fw.Density(lambda x: (-0.5 * float(x @ x), -x), 2)
    with pytest.raises(errors.ArgumentError, match=words):
        fw.trial(density, [0.1, 0.2], **given)


def test_what_the_density_raises_comes_out():
    calls = []

    def function(x):
        calls.append(1)
        if len(calls) > 3000:
            raise ZeroDivisionError("far on")
        return -0.5 * float(x @ x), -x

    with pytest.raises(ZeroDivisionError, match="far on"):
        fw.trial(fw.Density(function, 3), [0.1, 0.2, 0.3], seed=1)


@pytest.mark.parametrize("method", ["_look_for_noise", "winners"])
def test_what_the_density_raises_between_blocks_stops_the_run_as_in_a_block(tmp_path, monkeypatch, method):
    """The search for noise and the making of the winner's chains call the density in the run's own thread."""
    armed = []

    def function(x):
        if armed:
            armed.clear()
            raise ZeroDivisionError("between blocks")
        return -0.5 * float(x @ x), -x

    owner = Competition if method == "_look_for_noise" else Play
    called = getattr(owner, method)

    def arming(self):
        armed.append(1)
        return called(self)

    density = fw.Density(function, 2, start=[0.3, 0.3])
    terms = {"keep": 2000, "chains": 2, "seed": 3, "executor": "here", "progress": "off"}
    whole = fw.run(density, **terms)
    assert whole.settings["path"]["name"] == "jittered"  # the leader did not win, so the winner's chains are new
    with monkeypatch.context() as patch:
        patch.setattr(owner, method, arming)
        with pytest.raises(ZeroDivisionError, match="between blocks") as caught:
            fw.run(density, **terms, record=tmp_path / "w.fell")
    (note,) = caught.value.__notes__
    assert "raised in the trial of motions, between its blocks; the record" in note
    assert caught.value.fellwalk_result.ended == fw.load(tmp_path / "w.fell").ended == "an exception"
    again = fw.resume(tmp_path / "w.fell", density, executor="here", progress="off")
    assert np.array_equal(again.draws, whole.draws)
    assert again.plan["trial"] == whole.plan["trial"]


def test_where_the_surrogate_is_capped_products_take_its_place_at_their_price():
    """Without directions a bend of 1 caps the acceptance on an equicorrelated normal, the more the longer the paths."""
    target = targets.equicorrelated_normal(20, 0.98)
    density = density_of(target)
    points = target.exact_draws(2, np.random.default_rng(7))
    chains = [fw.Chain(density, x, seed=c, settle="auto", rank=0) for c, x in enumerate(points)]
    settling = [chain.block(10_000, draws=False).facts for chain in chains]
    before = density.gradients, density.products
    play = Play(density, [chain.state for chain in chains], settling, TrialTerms(4, budget=60_000, product_cost=3.0))
    found, _ = played(play)
    names = {entry.name for entry in found.entries}
    assert "lagrangian, bend 1, product" in names
    assert "lagrangian, bend 0.1" in names
    products = density.products - before[1]
    assert products > 100
    assert abs(density.gradients - before[0] + 3.0 * products - found.spent) <= 40


def test_the_command_makes_a_trial(tmp_path, capsys):
    model = tmp_path / "model.py"
    model.write_text("import fellwalk as fw\n"
                     "density = fw.Density(lambda x: (-0.5 * float(x @ x), -x), 2, start=[0.1, 0.2])\n")
    record = str(tmp_path / "walk.fell")
    assert main(["run", f"{model}:density", "--record", record, "--motion", "auto", "--keep", "60", "--seed", "3",
                 "--executor", "here", "--progress", "off"]) == 0
    assert "No trial was made" in capsys.readouterr().out
    assert main(["run", f"{model}:density", "--record", record, "--keep", "800", "--seed", "3", "--replace",
                 "--executor", "here", "--progress", "off"]) == 0
    assert "gradients of settling." in capsys.readouterr().out
    assert fw.load(record).trial["entries"][0]["draws"] > 0
    assert main(["run", f"{model}:density", "--record", record, "--keep", "60", "--seed", "3", "--replace",
                 "--halvings", "2", "--executor", "here", "--progress", "off"]) == 0
    assert fw.load(record).trial is None
    assert main(["run", f"{model}:density", "--record", record, "--motion", "auto", "--path", "jittered", "--replace"]
                ) != 0
    assert "finds what path= would fix" in capsys.readouterr().err
    for more in (["--motion", "auto", "--halvings", "3"], ["--motion", "auto", "--doublings", "4"], ["--bend", "0.3"]):
        assert main(["run", f"{model}:density", "--record", record, "--replace", *more]) != 0
        assert f"a trial of motions finds what {more[-2]} would fix" in capsys.readouterr().err


# ---- honest limits --------------------------------------------------------------------------------------------------


def two_modes(x):
    """Two normals of sd 1, 16 apart in the first coordinate."""
    heights = [-0.5 * ((x[0] - m) ** 2 + x[1] ** 2) for m in (-8.0, 8.0)]
    top = max(heights)
    weights = np.exp(np.array(heights) - top)
    share = weights / weights.sum()
    mean = -8.0 * share[0] + 8.0 * share[1]
    return top + np.log(weights.sum()), np.array([mean - x[0], -x[1]])


def test_several_modes_are_said():
    starts = [[-8.0, 0.1], [8.0, 0.3], [-7.5, -0.4], [8.5, 0.2]]
    found = fw.trial(fw.Density(two_modes, 2), starts, budget=6000, seed=3)
    assert not found.told
    (said,) = [reason for reason in found.reasons if "modes" in reason]
    assert "2 below a gap and 2 above it in x[0]" in said
    plain = fw.trial(fw.Density(lambda x: (-0.5 * float(x @ x), -x), 2), starts, budget=6000, seed=3)
    assert plain.told
    assert not any("modes" in reason for reason in plain.reasons)


def test_a_budget_that_is_too_small_is_said():
    target = targets.funnel(11)
    found = fw.trial(density_of(target), target.exact_draws(1, np.random.default_rng(1))[0], budget=300, seed=2)
    assert not found.told
    assert any("too small to tell" in reason for reason in found.reasons)
    assert found.winner == "leapfrog"


def test_noise_from_call_to_call_is_said():
    rng = np.random.default_rng(8)
    density = fw.Density(lambda x: (-0.5 * float(x @ x) + 1e-3 * rng.standard_normal(), -x), 3)
    found = fw.trial(density, [0.1, 0.2, 0.3], budget=2000, seed=2)
    assert not found.told
    assert any("called twice at one point it gave two log densities" in reason for reason in found.reasons)


def test_noise_that_depends_on_the_position_is_said():
    """As of a solver with a loose tolerance: the same at the same place, and rough at any distance."""
    density = fw.Density(lambda x: (-0.5 * float(x @ x) + 0.03 * np.sin(1e7 * x[0]), -x), 3)
    found = fw.trial(density, [0.1, 0.2, 0.3], budget=2000, seed=2)
    assert not found.told
    assert any("not smooth: over a step a thousandth" in reason for reason in found.reasons)


@pytest.mark.parametrize("build", [lambda: targets.equicorrelated_normal(20, 0.999), lambda: targets.funnel(3),
                                   lambda: targets.independent_normal(np.full(5, 1e6), np.full(5, 1e-2))])
def test_no_noise_is_said_where_there_is_none(build):
    target = build()
    found = fw.trial(density_of(target), target.exact_draws(1, np.random.default_rng(1))[0], budget=3000, seed=2)
    assert not any("smooth" in reason for reason in found.reasons)
