"""A run that was stopped and resumed, in whatever way, equals the undisturbed run bit for bit."""

import numpy as np
import pytest
from run_models import START, compiled_density, curved, python_density

import fellwalk as fw
from fellwalk.driver import Driver

CURVATURES = ["surrogate", "difference", "product"]
MOTIONS = {
    "leapfrog": fw.Leapfrog(),
    "leapfrog halved": fw.Leapfrog(halvings=2),
    **{f"{curvature} {scheme}": fw.Lagrangian(bend=0.7, curvature=curvature, scheme=scheme)
       for curvature in CURVATURES for scheme in ("split", "semi-explicit")},
}
PATHS = {"no-u-turn": fw.NoUTurn(doublings=5), "jittered": fw.Jittered(9)}
SETTLE, KEEP, CHAINS = 90, 50, 2


def options(motion="leapfrog", path="no-u-turn", **more):
    return {"motion": MOTIONS[motion], "path": PATHS[path], "settle": SETTLE, "keep": KEEP, "chains": CHAINS,
            "seed": 1123, **more}


def assert_same(result, expected):
    """Every draw, gradient and per-draw fact, settling included; and what each chain knows of itself."""
    assert result.finished
    np.testing.assert_array_equal(result.draws, expected.draws)
    np.testing.assert_array_equal(result.gradients, expected.gradients)
    np.testing.assert_array_equal(result.facts, expected.facts)
    for mine, other in zip(result.settling, expected.settling, strict=True):
        np.testing.assert_array_equal(mine, other)
    assert result.chains == expected.chains


class StopAt:
    """A density that raises at chosen calls, each once: the run stops there and can be resumed."""

    def __init__(self, stops):
        self.stops, self.calls = set(stops), 0

    def __call__(self, x):
        self.calls += 1
        if self.calls in self.stops:
            self.stops.discard(self.calls)
            raise InterruptedError("stop here")
        return curved(x)


@pytest.fixture
def random_blocks(monkeypatch):
    """Blocks of 1 to 30 transitions, at random, other ones at every run."""
    rng = np.random.default_rng(2385)
    monkeypatch.setattr(Driver, "_most", lambda self, chain: int(rng.integers(1, 31)))


@pytest.mark.parametrize("path", PATHS)
@pytest.mark.parametrize("motion", MOTIONS)
def test_random_blocks_and_many_stops_change_nothing(motion, path, tmp_path, random_blocks):
    """Stopped by an exception at eight evaluations: in settling, inside windows, and while keeping."""
    density = python_density()
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(Driver, "_most", lambda self, chain: 10**6)
        expected = fw.run(density, **options(motion, path))
    stops = density.gradients * (np.linspace(0.1, 0.9, 8) + np.random.default_rng(7).uniform(-0.05, 0.05, 8))
    broken = fw.Density(StopAt(stops.astype(int).tolist()), 3, hessian_product=density.hessian_product, start=START)
    record = tmp_path / "a.fell"
    phases, result, resumed = set(), None, 0
    while result is None:
        try:
            if not record.exists():
                result = fw.run(broken, **options(motion, path, record=record))
            else:
                resumed += 1
                result = fw.resume(record, broken)
        except InterruptedError as error:
            note = getattr(error, "__notes__", [""])[0]  # none when it came from looking at the density before going on
            phases |= {phase for phase in ("settling", "keeping draws") if phase in note}
    assert resumed >= 3
    assert phases == {"settling", "keeping draws"}
    assert_same(result, expected)
    assert_same(fw.load(record), expected)


@pytest.mark.parametrize("executor", ["here", "threads"])
@pytest.mark.parametrize("make", [python_density, compiled_density])
def test_seconds_stop_at_a_block_edge_and_resume_goes_on(make, executor, tmp_path, random_blocks):
    density = make()
    expected = fw.run(density, **options(keep=1000))
    record = tmp_path / "a.fell"
    result = fw.run(density, **options(keep=1000), record=record, seconds=0.02, executor=executor)
    stops = 0
    while not result.finished:
        assert result.ended == "the time given had passed"
        assert "Stopped early" in str(result)
        stops += 1
        result = fw.resume(record, density, seconds=0.08, executor=executor)
    assert stops >= 2
    assert_same(result, expected)


def test_draws_are_added_as_if_asked_for_at_first(tmp_path):
    density = python_density()
    expected = fw.run(density, **options(keep=200))
    record = tmp_path / "a.fell"
    first = fw.run(density, **options(keep=1), record=record)
    assert first.finished
    assert "1 draw," in str(first)
    for keep in (7, 7, 120):
        assert fw.resume(record, density, keep=keep).draws.shape == (CHAINS, keep, 3)
    assert_same(fw.resume(record, density, keep=200), expected)
    assert fw.load(record).plan["keep"] == 200
    again = fw.resume(record, density)
    assert_same(again, expected)
