"""watch=: what a run keeps of its draws. The oracle is the same run with every draw kept whole: draws do not depend on
what is kept of them, so watched values, means and variances must have its bits."""

import pickle

import numpy as np
import pytest
import targets

import fellwalk as fw
from fellwalk import watch as watch_module
from fellwalk.errors import ArgumentError, OtherModelError
from fellwalk.watch import Moments, Watch

D = 12
RUN = {"keep": 120, "chains": 2, "seed": 4, "settle": 80, "progress": "off", "executor": "here"}


def density():
    target = targets.log_spaced_normal(D, 1e-2, 1e2)
    return fw.Density(target.density, D, start=np.full(D, 0.1))


def half_space(x):
    """A normal on x[0] < 1, so that steps fail; as a module-level function it goes to worker processes."""
    return (-np.inf, x) if x[0] > 1.0 else (-0.5 * float(x @ x), -x)


@pytest.fixture(scope="module")
def whole():
    return fw.run(density(), **RUN)


def total_and_first(x):
    return np.array([x.sum(), x[0]])


@pytest.mark.parametrize(("watch", "names", "pick"), [
    (7, ["x[7]"], lambda x: x[..., [7]]),
    ("x[3]", ["x[3]"], lambda x: x[..., [3]]),
    ([5, "x[2]", 11], ["x[5]", "x[2]", "x[11]"], lambda x: x[..., [5, 2, 11]]),
    (np.array([1, 0]), ["x[1]", "x[0]"], lambda x: x[..., [1, 0]]),
    ("x", [f"x[{i}]" for i in range(D)], lambda x: x),
    (total_and_first, ["total_and_first[0]", "total_and_first[1]"],
     lambda x: np.stack([np.apply_along_axis(np.sum, 2, x), x[..., 0]], axis=2)),
])
def test_the_bits_are_those_of_a_run_that_keeps_all(whole, watch, names, pick, tmp_path):
    path = tmp_path / "a.fell"
    found = fw.run(density(), **RUN, watch=watch, record=path)
    assert found.names == names
    for result in (found, fw.load(path)):
        np.testing.assert_array_equal(result.draws, pick(whole.draws))
        np.testing.assert_array_equal(result.facts, whole.facts)
        assert result.gradients is None
        for kept, draws in zip(result.moments, whole.draws, strict=True):
            assert kept.count == RUN["keep"]
            # two-pass sums of the whole draws; Welford's mean errs by at most a rounding a draw
            errors = np.abs(kept.mean - draws.mean(axis=0)) / np.abs(draws).max(axis=0)
            assert errors.max() < RUN["keep"] * np.finfo(float).eps
            np.testing.assert_allclose(kept.variance, draws.var(axis=0, ddof=1), rtol=1e-12)
    for kept, other in zip(found.moments, whole.moments, strict=True):
        assert kept.mean.tobytes() == other.mean.tobytes()
        assert kept.squares.tobytes() == other.squares.tobytes()


@pytest.mark.parametrize("watch", [[0, 4], lambda x: x[0] * x[1]])
def test_resume_goes_on_with_the_same_bits(tmp_path, watch):
    whole, half = (tmp_path / name for name in ("whole.fell", "half.fell"))
    expected = fw.run(density(), **{**RUN, "keep": 200}, watch=watch, record=whole)
    fw.run(density(), **{**RUN, "keep": 90}, watch=watch, record=half)
    again = {"watch": watch} if callable(watch) else {}
    found = fw.resume(half, density(), keep=200, progress="off", executor="here", **again)
    for result in (found, fw.load(half)):
        np.testing.assert_array_equal(result.draws, expected.draws)
        for a, b in zip(result.moments, expected.moments, strict=True):
            assert a.packed() == b.packed()
    assert str(found.judgement) == str(expected.judgement) or found.spent != expected.spent


def test_worker_processes_take_a_function_made_on_the_spot():
    power = 2
    found = fw.run(fw.Density(half_space, 3, start=np.zeros(3)), **{**RUN, "keep": 40, "executor": "processes"},
                   watch=lambda x: x[1] ** power)
    here = fw.run(fw.Density(half_space, 3, start=np.zeros(3)), **{**RUN, "keep": 40})
    np.testing.assert_array_equal(found.draws[..., 0], here.draws[..., 1] ** 2)
    assert [m.packed() for m in found.moments] == [m.packed() for m in here.moments]


def test_positions_of_failed_steps_are_watched_values(tmp_path):
    given = fw.Density(half_space, 3, start=np.zeros(3))
    whole = fw.run(given, **RUN)
    kept = fw.run(given, **RUN, watch=["x[0]", 2], record=tmp_path / "a.fell")
    assert len(whole.failures[3]) > 5
    for result in (kept, fw.load(tmp_path / "a.fell")):
        np.testing.assert_array_equal(result.failures[3], whole.failures[3][:, [0, 2]])
        np.testing.assert_array_equal(result.failures[1], whole.failures[1])

    def refuses(x):
        if x[0] > 1.0:
            raise ValueError
        return float(x[0])

    assert np.isnan(fw.run(given, **RUN, watch=refuses).failures[3]).all()


def test_parameters_are_watched_and_gathered_in_natural_values():
    def gamma(x):
        return float(2.0 * np.log(x).sum() - x.sum()), 2.0 / x - 1.0

    parameters = fw.Parameters({"rate": fw.positive(3), "level": fw.positive()})
    given = fw.Density(gamma, parameters, start={"rate": np.ones(3), "level": 2.0})
    whole = fw.run(given, **RUN)
    kept = fw.run(given, **RUN, watch=["level", "rate[1]"])
    np.testing.assert_array_equal(kept.draws, np.stack([whole["level"], whole["rate"][..., 1]], axis=2))
    np.testing.assert_array_equal(kept["level"], whole["level"])
    assert [m.packed() for m in kept.moments] == [m.packed() for m in whole.moments]
    assert kept.moments[0].mean.shape == (4,)


def test_the_verdict_says_what_it_judged(whole):
    kept = fw.run(density(), **RUN, watch=[0, 1, 2, 3, 4, 5, 6])
    assert kept.judgement.names == tuple(f"x[{i}]" for i in range(7))
    said = kept.judgement.verdict.notes[-1]
    assert said == ("Judged: 7 of the 12 coordinates, as the run watched: x[0], x[1], x[2], x[3], x[4] and 2 more. Of "
                    "the others only means and variances were kept.")
    assert said.split()[0] in str(kept)
    assert not any(note.startswith("Judged") for note in whole.judgement.verdict.notes)
    bare = fw.run(density(), **RUN, gradients=False).judgement
    np.testing.assert_array_equal(kept.judgement.worth, bare.worth[:7])


@pytest.mark.parametrize("watch", [["x[0]", 2], lambda x: x[:2] > 0.0])
def test_a_report_is_made_of_what_was_watched(watch, tmp_path):
    found = fw.run(fw.Density(half_space, 3, start=np.zeros(3)), **RUN, watch=watch)
    found.report(tmp_path / "a.html")
    page = (tmp_path / "a.html").read_text(encoding="utf-8")
    assert all(name in page for name in found.names)
    assert "this run kept watched values, and the model can only be asked at whole draws" in page
    assert "Judged: " in page


def test_truth_values_give_probabilities():
    found = fw.run(density(), **RUN, watch=lambda x: x[0] > 0)
    assert found.judgement.event.all()
    assert found.judgement.estimate[0] == pytest.approx(found.draws.mean(), rel=1e-15)


def test_beyond_a_stated_dimension_some_are_watched_unless_all_are_asked_for(monkeypatch):
    assert (watch_module.WATCH_ABOVE, watch_module.WATCH_DEFAULT) == (20_000, 1_000)
    monkeypatch.setattr(watch_module, "WATCH_ABOVE", 10)
    monkeypatch.setattr(watch_module, "WATCH_DEFAULT", 4)
    found = fw.run(density(), **RUN)
    assert found.names == ["x[0]", "x[4]", "x[7]", "x[11]"]
    assert "spread evenly as nothing was said" in found.judgement.verdict.notes[-1]
    assert fw.run(density(), **RUN, watch="all").draws.shape == (2, 120, D)


@pytest.mark.parametrize(("watch", "said"), [
    ("z", "watch names 'z', which is no coordinate and no parameter of this density"),
    (12, "watch names coordinate number 12; they are numbered from 0 to 11"),
    (-1, "watch names coordinate number -1"),
    ([2, "x[2]"], "twice"),
    ([], "watch must name at least one coordinate"),
    ([1.5], "watch takes names, numbers of coordinates, or a function; not float"),
    (lambda x: "a", "the watched function must return a real number, a truth value or a vector of them"),
    (lambda x: np.eye(2), "an array of shape \\(2, 2\\)"),
])
def test_what_cannot_be_watched_is_said(watch, said):
    with pytest.raises(ArgumentError, match=said):
        fw.run(density(), **RUN, watch=watch)


def test_gradients_belong_to_whole_draws():
    with pytest.raises(ArgumentError, match="gradients are kept at whole draws"):
        fw.run(density(), **RUN, watch=1, gradients=True)
    found = fw.run(density(), **RUN, watch=1)
    with pytest.raises(ArgumentError, match='watch="all"'):
        _ = found.free_draws


class Halts:
    """A function of draws that raises at its n-th call."""

    def __init__(self, calls):
        self.left = calls

    def __call__(self, x):
        self.left -= 1
        if self.left == 0:
            raise ZeroDivisionError("told to")
        return float(x[0])


def test_an_exception_of_the_function_comes_out_and_the_run_goes_on_later(tmp_path):
    path = tmp_path / "a.fell"
    with pytest.raises(ZeroDivisionError, match="told to"):
        fw.run(density(), **RUN, watch=Halts(90), record=path)
    found = fw.resume(path, density(), progress="off", executor="here", watch=lambda x: float(x[0]))
    expected = fw.run(density(), **RUN, watch=[0])
    np.testing.assert_array_equal(found.draws, expected.draws)
    assert [m.packed() for m in found.moments] == [m.packed() for m in expected.moments]


def test_resume_wants_the_same_function_again_and_nothing_else(tmp_path):
    path, other = tmp_path / "a.fell", tmp_path / "b.fell"
    fw.run(density(), **RUN, watch=lambda x: float(x.sum()), record=path)
    with pytest.raises(ArgumentError, match="give it again"):
        fw.resume(path, density(), keep=130, progress="off")
    with pytest.raises(OtherModelError, match="it is another function, or uses other data"):
        fw.resume(path, density(), keep=130, progress="off", watch=lambda x: float(x[0]))
    fw.run(density(), **RUN, watch=[1], record=other)
    with pytest.raises(ArgumentError, match="leave watch out"):
        fw.resume(other, density(), keep=130, progress="off", watch=lambda x: float(x[0]))


def test_a_function_that_changes_its_shape_is_said():
    calls = iter(range(10_000))
    with pytest.raises(ArgumentError, match="as many values every time; it returned 2 after 1"):
        fw.run(density(), **RUN, watch=lambda x: np.ones(1 if next(calls) < 50 else 2))


def test_moments_together_are_those_of_all_draws():
    x = np.random.default_rng(3).standard_normal((3, 50, 4)) * [1.0, 1e-3, 1e3, 2.385] + [0.0, 1e3, -5.0, 1.0]
    parts = []
    for rows in x:
        parts.append(Moments.of(4))
        parts[-1].add(rows)
    both = parts[0].and_of(parts[1]).and_of(parts[2])
    flat = x.reshape(-1, 4)
    assert both.count == 150
    np.testing.assert_allclose(both.mean, flat.mean(axis=0), rtol=1e-13, atol=1e-13)
    # the offset 1e3 over the deviation 1e-3 costs six of sixteen digits twice at worst
    np.testing.assert_allclose(both.variance, flat.var(axis=0, ddof=1), rtol=1e-8)
    again = Moments.unpacked(both.packed())
    assert again.packed() == both.packed()
    assert Moments.of(4).and_of(parts[0]).packed() == parts[0].packed()


def test_a_watch_is_sent_by_pickling():
    threshold = 0.5
    sent = pickle.loads(pickle.dumps(Watch(["value"], function=lambda x: x[0] > threshold)))
    assert sent.values(np.array([[0.7], [0.2]])).tolist() == [[1.0], [0.0]]
