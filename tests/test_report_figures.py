"""The numbers behind the figures of the page, against plain computations of the same."""

import numpy as np
import pytest
import report_cases as cases
from scipy import stats

import fellwalk as fw
from fellwalk import figures
from fellwalk.figure_estimates import Progress
from fellwalk.figure_failures import HALVED, PATHS, STEPS, Places, Trouble, _halved
from fellwalk.figure_geometry import Bend
from fellwalk.figure_intervals import Intervals
from fellwalk.geometry import Line, Slice, agrees, inverse_sizes, plane_metric, velocity, worst_pair
from fellwalk.settled import SettledChain

# ---- intervals ------------------------------------------------------------------------------------------------------


def test_intervals_are_the_quantiles_of_each_chain_in_units_of_the_common_interval():
    result = cases.apart()
    shown = Intervals(result.judgement, np.arange(3))
    j = result.judgement.raw
    for c in range(4):
        for i in range(3):
            expected = np.quantile(result.draws[c, :, i], [0.05, 0.5, 0.95])
            np.testing.assert_allclose(j.low[i] + shown.places[:, c, i] * (j.high[i] - j.low[i]), expected, rtol=1e-12)


def test_only_the_line_that_lies_apart_is_heavy():
    shown = Intervals(cases.apart().judgement, np.arange(3))
    expected = np.zeros((4, 3), bool)
    expected[2, 1] = True
    np.testing.assert_array_equal(shown.apart, expected)
    assert "Apart from the others: chain 3 in two." in shown.words(np.arange(3))


def test_good_chains_have_no_heavy_line():
    """By chance in one of 1000 pages (Bonferroni); the seeds are fixed."""
    for seed in range(20):
        j = cases.made(cases.independent(8, 200, 5, seed)).judgement
        assert not Intervals(j, np.arange(5)).apart.any()


def test_constant_and_two_valued_parameters_have_rows():
    draws = cases.independent(4, 200, 3)
    draws[:, :, 1] = 7.0
    draws[:, :, 2] = draws[:, :, 2] > 5  # as good as never
    draws[0, 0, 2] = 1.0
    shown = Intervals(cases.made(draws).judgement, np.arange(3))
    assert np.isfinite(shown.places).all()
    drawing = shown.drawing("k", np.arange(3))
    assert "constant" in drawing.markup


# ---- estimates ------------------------------------------------------------------------------------------------------


def test_estimates_end_where_the_judgement_is():
    result = cases.neck_run()
    j = result.judgement.raw
    progress = Progress.of(result, np.array([0, 2]))
    np.testing.assert_allclose(progress.estimate[-1], j.estimate[[0, 2]], rtol=1e-10)
    np.testing.assert_allclose(progress.error[-1], j.error[[0, 2]], rtol=1e-10)
    np.testing.assert_allclose(progress.spread[-1], j.spread[[0, 2]], rtol=1e-10)
    assert progress.spent[-1] == result.spent["gradients"]
    k = int(progress.draws[3])
    early = fw.judge(result.draws[:, :k])
    np.testing.assert_allclose(progress.estimate[3], early.estimate[[0, 2]], rtol=1e-10)
    np.testing.assert_allclose(progress.error[3], early.error[[0, 2]], rtol=1e-10)
    np.testing.assert_allclose(progress.by_chain[3], result.draws[:, :k, [0, 2]].mean(axis=1), rtol=1e-10)
    settled = sum(facts["gradients"].sum() for facts in result.settling)
    assert progress.spent[3] == settled + result.facts["gradients"][:, :k].sum()


def test_few_draws_have_no_history():
    assert Progress.of(cases.made(cases.independent(4, 20, 2)), np.array([0])) is None


# ---- failures -------------------------------------------------------------------------------------------------------


def test_places_are_counted_in_tenths_of_the_draws():
    draws = np.arange(1000.0)[:, None] * [1.0, -1.0]
    positions = np.array([[-5.0, 0.0], [0.0, 0.0], [50.0, -50.0], [999.0, -999.0], [1e300, -999.5], [550.0, -550.0],
                          [550.0, -20.0], [3e3, -1.0]])
    places = Places.of(STEPS, positions, draws)
    np.testing.assert_array_equal(np.round(8 * places.ranks[0]), [1, 2, 0, 0, 0, 0, 2, 0, 0, 0, 1, 2])
    assert places.ranks[1][0] == pytest.approx(1 / 8)
    assert places.ranks.sum(axis=1) == pytest.approx([1, 1])


def test_the_parameter_that_tells_where_is_named():
    draws = cases.independent(1, 4000, 3)[0]
    low = draws[draws[:, 1] < np.quantile(draws[:, 1], 0.1)][:60]

    def said(positions):
        return Places.of(STEPS, positions, draws).sentence(["a", "b", "c"])

    assert said(low) == "100% of failed steps lie in the lowest 10% of b, or beyond."
    assert said(draws[:60] + np.array([0, 0, 20])) == "100% of failed steps lie beyond the highest draw of c."
    assert said(draws[:60]) == "Failed steps are spread over the draws: no single parameter tells where they lie."
    assert "too few to tell" in said(low[:3])


def test_kinds_of_trouble_are_told_apart():
    draws = cases.independent(2, 100, 2)
    facts = cases.steady_facts(2, 100)
    facts["failure"][0, :12] = 9
    facts["failure"][0, 12:17] = 1
    facts["failure"][1, :3] = 11
    failures = [(0, k, 9 if k < 12 else 1, draws[0, k] + 4) for k in range(17)] + [(1, 0, 11, draws[1, 0])]
    trouble = Trouble(cases.made(draws, facts=facts, failures=failures))
    assert (trouble.failed, trouble.edges, trouble.one_way, trouble.halved) == (12, 5, 3, 0)
    assert [(places.word, len(places.positions)) for places in trouble.places] == [
        (PATHS, 12), (STEPS, 12), ("steps across the edge", 5)]
    said = trouble.sentences()[0]
    assert "cut the path short in 12 of 200 kept transitions" in said
    assert "In 5 a step crossed the edge" in said
    assert len(trouble.drawings("t")) == 3  # the map, and two kinds of which there are enough


def test_failed_steps_of_a_neck_are_found_there():
    trouble = Trouble(cases.neck_run())
    assert trouble.failed >= 8
    paths = trouble.places[0]
    assert paths.word == PATHS
    assert int(np.argmax(paths.distance)) == 0
    assert "log v" in paths.sentence(trouble.names)


def test_halved_steps_are_told_from_whole_ones_by_their_gradients():
    """Whole leapfrog steps take one gradient each, also where halving is allowed."""
    scale = np.array([1.0, 2.0])
    easy = fw.Density(lambda x: (-0.5 * float(x @ (x / scale)), -x / scale), 2, start=scale)
    whole = fw.run(easy, motion=fw.Leapfrog(halvings=6), step_size=0.1, settle=0, keep=200, chains=1, seed=3,
                   executor="here", progress="off")
    np.testing.assert_array_equal(whole.facts["gradients"], whole.facts["steps"])
    assert not _halved(whole).any()
    result = cases.neck_run(6)
    halved = _halved(result)
    assert 10 < halved.sum() < halved.size
    log_v = result.free_draws[:, :, 0]
    at = np.quantile(log_v, [0.1, 0.5])
    assert halved[log_v <= at[0]].mean() > 4 * halved[log_v > at[1]].mean()
    trouble = Trouble(result)
    assert trouble.places[-1].word == HALVED
    assert not _halved(cases.neck_run()).any()


# ---- geometry -------------------------------------------------------------------------------------------------------


@pytest.fixture(scope="module")
def part():
    rng = np.random.default_rng(31)
    directions = np.linalg.qr(rng.standard_normal((5, 2)))[0].T
    return SettledChain(rng.uniform(0.2, 5.0, 5), np.ascontiguousarray(directions), np.array([9.0, 0.1]), 0.3, 0.7)


def dense(part):
    """The inverse base metric as a matrix, from its definition."""
    root = np.diag(np.sqrt(part.scale))
    inner = np.eye(len(part.scale))
    for direction, variance in zip(part.directions, part.variances, strict=True):
        inner += (variance - 1) * np.outer(direction, direction)
    return root @ inner @ root


def test_steepness_and_metric_agree_with_dense_algebra(part):
    inverse = dense(part)
    g = np.random.default_rng(4).standard_normal((7, 5))
    np.testing.assert_allclose(inverse_sizes(part, g), np.einsum("ni,ij,nj->n", g, inverse, g), rtol=1e-12)
    metric = np.linalg.inv(inverse)
    np.testing.assert_allclose(plane_metric(part, [3, 1]), metric[np.ix_([3, 1], [3, 1])], rtol=1e-11)
    bent = metric + 0.7 * np.outer(g[0], g[0])
    np.testing.assert_allclose(plane_metric(part, [0, 4], g[0], 0.7), bent[np.ix_([0, 4], [0, 4])], rtol=1e-11)


def test_velocities_have_the_law_of_the_metric(part):
    """v'Gv of 2000 velocities is chi-squared with 5 degrees of freedom, and so is every whitened square on its own;
    false alarms one in 10^4 for each of two Kolmogorov-Smirnov tests, the seed is fixed."""
    g, rng = np.random.default_rng(4).standard_normal(5), np.random.default_rng(12)
    metric = np.linalg.inv(dense(part)) + 0.7 * np.outer(g, g)
    v = np.array([velocity(part, g, 0.7, rng) for _ in range(2000)])
    assert stats.kstest(np.einsum("ni,ij,nj->n", v, metric, v), stats.chi2(5).cdf).pvalue > 1e-4
    white = v @ np.linalg.cholesky(metric)
    assert stats.kstest(white.ravel(), stats.norm.cdf).pvalue > 1e-4
    # correlations of 2000 pairs have a standard deviation of 0.022; ten of them within 4.5
    assert np.abs(np.corrcoef(white.T) - np.eye(5)).max() < 0.1


def test_a_normal_density_has_the_steepness_of_chi_squared():
    """The dashed curve of the page: 3000 independent normal draws with their exact metric; false alarm one in 10^4."""
    draws = cases.independent(1, 3000, 4)
    unit = SettledChain(np.ones(4), np.empty((0, 4)), np.empty(0), 0.5, 0.0)
    q = inverse_sizes(unit, -draws[0])
    assert stats.kstest(q, stats.chi2(4).cdf).pvalue > 1e-4


def test_bend_is_beta_times_the_steepness():
    result, _ = cases.bent_run()
    bend = Bend(result)
    settled = result.settled.chains[0]
    g = result.gradients[0]
    expected = settled.beta * np.einsum("ni,ij,nj->n", g, dense(settled), g)
    np.testing.assert_allclose(bend.bend[0], expected, rtol=1e-10)
    assert settled.beta > 0
    assert f"The bend L − 1 is {figures.number(np.median(expected))} in the middle" in bend.sentences()[1]
    assert "is 0 at every draw" in Bend(cases.neck_run()).sentences()[1]


def test_the_slice_is_the_density():
    result, density = cases.neck_run(), cases.neck_density()
    pair = worst_pair(result)
    assert pair[0] == 0  # log v mixes worst
    found = Slice.of(result, density, pair, 1e-6)
    values = []
    for y in found.axes[1][::20]:
        for x in found.axes[0][::20]:
            point = found.centre.copy()
            point[pair] = x, y
            values.append(cases.neck(point)[0])
    shown = found.values[::20, ::20].ravel()
    np.testing.assert_allclose(shown - shown[0], np.array(values) - values[0], rtol=1e-12, atol=1e-12)
    assert found.values.max() == 0
    assert Slice.of(result, density, pair, 1.0) is None  # a second an evaluation is too dear


def test_the_path_is_what_integrate_gives():
    result, density = cases.neck_run(), cases.neck_density()
    # integrate has no base metric with directions
    chain = next(i for i, part in enumerate(result.settled.chains) if not len(part.directions))
    start = result.free_draws[chain, 50]
    line = Line.of(result, density, chain, start)
    settled = result.settled.chains[chain]
    v = velocity(settled, density(start)[1], 0.0, np.random.default_rng([result.seed, 3]))
    path = fw.integrate(density, start, v, step_size=settled.step_size, steps=len(line.positions) - 1,
                        scale=settled.scale, trace=True)
    np.testing.assert_array_equal(line.positions, path.trace["position"])


def test_the_right_model_agrees_and_is_counted():
    density = cases.neck_density()
    agrees(cases.neck_run(), density)
    assert density.gradients == 1


# ---- drawing --------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(("value", "text"), [
    (0.0, "0"), (1234.5, "1,234"), (-1500.0, "−1,500"), (0.012345, "0.0123"), (2.5e7, "25,000,000"),
    (1.23456e9, "1.23e9"), (-3e-12, "−3e−12"), (float("nan"), "unknown"), (float("inf"), "infinite")])
def test_numbers_in_sentences(value, text):
    assert figures.number(value) == text


def test_drawings_do_not_change_from_one_time_to_the_next():
    first, second = (cases.constant().report() for _ in range(2))
    assert first == second


def test_drawing_leaves_the_settings_of_matplotlib_alone():
    import matplotlib

    before = dict(matplotlib.rcParams)
    cases.constant().report()
    assert dict(matplotlib.rcParams) == before
