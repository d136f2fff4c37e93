"""What a chain says to bad input: one sentence each, its own class, the chain as it was."""

import inspect

import numpy as np
import pytest

import fellwalk as fw
from fellwalk import errors


def normal(x):
    return -0.5 * float(x @ x), -x


DENSITY = fw.Density(normal, 2, names=["width", "height"])
START = (0.3, -1.1)


def make(**options):
    return fw.Chain(DENSITY, START, **{"seed": 11, **options})


def test_every_exception_has_the_common_base():
    kinds = [kind for _, kind in inspect.getmembers(errors, inspect.isclass) if kind.__module__ == errors.__name__]
    assert len(kinds) > 10
    assert all(issubclass(kind, errors.FellwalkError) for kind in kinds)
    assert fw.FellwalkError is errors.FellwalkError


@pytest.mark.parametrize("bad", [np.nan, np.inf, -np.inf])
def test_a_start_that_is_not_finite(bad):
    calls = []
    density = fw.Density(lambda x: calls.append(1) or normal(x), 2, names=["width", "height"])
    with pytest.raises(errors.StartError, match=rf"{bad} in height; start from finite numbers"):
        fw.Chain(density, [0.0, bad])
    assert not calls


@pytest.mark.parametrize("start", [
    [0.0], [0.0, 1.0, 2.0], [[0.0, 1.0]], 0.0, "ab", None, [1j, 0.0], [[1.0], [1.0, 2.0]],
], ids=repr)  # fmt: skip
def test_a_start_of_another_shape(start):
    with pytest.raises(errors.ShapeError, match="starting point"):
        fw.Chain(DENSITY, start)


@pytest.mark.parametrize(("value", "gradient", "said"), [
    (-np.inf, None, "log density is -inf at the starting point"),
    (np.nan, None, "log density is nan at the starting point"),
    (-1.0, [0.0, np.nan], "gradient is nan in height at the starting point"),
    (-1.0, [-np.inf, 0.0], "gradient is -inf in width at the starting point"),
])  # fmt: skip
def test_a_start_outside_the_support(value, gradient, said):
    density = fw.Density(lambda x: (value, gradient), 2, names=["width", "height"])
    with pytest.raises(errors.StartError, match=said) as caught:
        fw.Chain(density, START)
    assert "[0.3, -1.1]" in str(caught.value)


def test_a_start_where_the_log_density_is_plus_infinity():
    with pytest.raises(errors.InfiniteDensityError, match="plus infinity"):
        fw.Chain(fw.Density(lambda x: (np.inf, x), 2), START)


def test_a_density_that_changes_its_mind_about_the_start():
    """Minus infinity at the first call only: still a sentence of our own."""
    values = iter([-np.inf, -1.0, -1.0])
    with pytest.raises(errors.StartError):
        fw.Chain(fw.Density(lambda x: (next(values), -x), 2), START)


def test_what_is_no_density():
    with pytest.raises(errors.ArgumentError, match=r"must be a fellwalk\.Density; it is function"):
        fw.Chain(normal, START)


@pytest.mark.parametrize("draws", [-1, 1.5, "3", None, True, 2**41, np.nan])
def test_bad_numbers_of_draws(draws):
    chain = make(step_size=0.5)
    before = chain.state
    with pytest.raises(errors.ArgumentError, match="draws"):
        chain.advance(draws)
    assert chain.state == before


def test_no_draws_are_a_number_of_draws():
    chain = make(step_size=0.5)
    before = chain.state
    block = chain.advance(0)
    assert len(block) == 0
    assert block.draws.shape == (0, 2)
    assert chain.state == before


@pytest.mark.parametrize("number", [-1, 1.5, "soon", None, True, 2**41, np.nan])
def test_bad_numbers_of_settling_transitions(number):
    chain = make(step_size=0.5)
    before = chain.state
    with pytest.raises(errors.ArgumentError, match="settle"):
        chain.settle(number)
    assert chain.state == before
    with pytest.raises(errors.ArgumentError, match="settle"):
        make(settle=number)


def test_draws_before_settling_has_ended():
    chain = make(settle=50)
    chain.block(7)
    before = chain.state
    with pytest.raises(errors.SettleError, match="has not settled"):
        chain.advance(1)
    assert chain.state == before


def test_draws_without_a_step_size():
    chain = make()
    before = chain.state
    with pytest.raises(errors.ArgumentError, match="no step size"):
        chain.advance(1)
    assert chain.state == before


def test_a_block_without_a_step_size_does_not_stand_still():
    """block() is what runs use: kept transitions with a step of 0 would repeat the start for ever."""
    chain = make(path=fw.Jittered(2))
    before = chain.state
    try:
        error = chain.block(1).error
    except errors.FellwalkError as raised:
        error = raised
    assert isinstance(error, errors.ArgumentError)
    assert "no step size" in str(error)
    assert chain.state == before


@pytest.mark.parametrize("name", ["step_size", "acceptance", "beta"])
@pytest.mark.parametrize("value", [-0.1, np.nan, np.inf, "much", 1j, [0.1, 0.2]])
def test_settings_out_of_range(name, value):
    with pytest.raises(errors.ArgumentError, match=name):
        make(**{name: value})


@pytest.mark.parametrize(("name", "value"), [("step_size", 0.0), ("acceptance", 0.0), ("acceptance", 1.0)])
def test_settings_at_the_edge_of_their_range(name, value):
    with pytest.raises(errors.ArgumentError, match=name):
        make(**{name: value})


@pytest.mark.parametrize(("scale", "kind"), [
    ([1.0, 0.0], errors.ArgumentError), ([1.0, -1.0], errors.ArgumentError), ([np.nan, 1.0], errors.ArgumentError),
    ([np.inf, 1.0], errors.ArgumentError), ([1.0], errors.ShapeError), (1.0, errors.ShapeError),
    (np.eye(2), errors.ShapeError), ("ab", errors.ShapeError), ([1.0, 1j], errors.ShapeError),
], ids=repr)  # fmt: skip
def test_bad_scales(scale, kind):
    with pytest.raises(kind, match="scale"):
        make(scale=scale)


@pytest.mark.parametrize("motion", ["leapfrog", fw.NoUTurn(), fw.Leapfrog, 3])
def test_what_is_no_motion(motion):
    with pytest.raises(errors.ArgumentError, match=r"motion must be one of fellwalk\.Leapfrog"):
        make(motion=motion)


@pytest.mark.parametrize("path", ["jittered", fw.Leapfrog(), fw.NoUTurn, 3])
def test_what_is_no_path(path):
    with pytest.raises(errors.ArgumentError, match=r"path must be one of fellwalk\.Jittered"):
        make(path=path)


@pytest.mark.parametrize(("make_it", "said"), [
    (lambda: fw.Leapfrog(halvings=-1), "halvings"),
    (lambda: fw.Leapfrog(halvings=13), "halvings"),
    (lambda: fw.Leapfrog(halvings=1.0), "halvings"),
    (lambda: fw.Lagrangian(bend=-1.0), "bend"),
    (lambda: fw.Lagrangian(bend=np.nan), "bend"),
    (lambda: fw.Lagrangian(bend="x"), "bend"),
    (lambda: fw.Lagrangian(curvature="exact"), "curvature"),
    (lambda: fw.Lagrangian(scheme=None), "scheme"),
    (lambda: fw.Lagrangian(halvings=99), "halvings"),
    (lambda: fw.Jittered(0), "steps"),
    (lambda: fw.Jittered(2.5), "steps"),
    (lambda: fw.NoUTurn(doublings=0), "doublings"),
    (lambda: fw.NoUTurn(doublings=20), "doublings"),
    (lambda: fw.NoUTurn(turn="left"), "turn"),
])  # fmt: skip
def test_motions_and_paths_out_of_range(make_it, said):
    with pytest.raises(errors.ArgumentError, match=said):
        make_it()


@pytest.mark.parametrize("seed", [-1, 1.5, "x"])
def test_bad_seeds(seed):
    with pytest.raises(errors.ArgumentError, match="seed"):
        make(seed=seed)


def test_a_sentence_is_one_line_and_short_even_in_many_dimensions():
    d = 1000
    density = fw.Density(lambda x: (-np.inf, None), d)
    with pytest.raises(errors.StartError) as caught:
        fw.Chain(density, np.zeros(d))
    assert "\n" not in str(caught.value)
    assert len(str(caught.value)) < 300


@pytest.mark.parametrize("options", [
    {"step_size": np.float32(0.5)}, {"acceptance": np.float32(0.75)}, {"settle": np.int32(5)}, {"rank": np.int64(2)},
    {"motion": fw.Leapfrog(halvings=np.int64(1))}, {"motion": fw.Lagrangian(bend=np.float32(0.5))},
    {"path": fw.Jittered(np.int64(3))}, {"path": fw.NoUTurn(np.uint8(4))}, {"beta": np.float16(0.5)},
    {"adapt_scale": np.bool_(False)},
], ids=str)  # fmt: skip
def test_numbers_of_numpy_are_settings_like_any_other(options):
    chain = make(**{"step_size": 0.5, **options})
    plain = make(**{"step_size": 0.5, **{k: v.item() if hasattr(v, "item") else v for k, v in options.items()}})
    assert chain.state == fw.Chain.from_state(chain.density, chain.state).state
    assert chain.settings == plain.settings


@pytest.mark.parametrize("value", ["0.5", b"1", 10**400, np.complex64(1), np.complex128(0.5)])
def test_what_only_looks_like_a_real_number_is_no_setting(value):
    with pytest.raises(errors.ArgumentError, match="step_size must be a number"):
        make(step_size=value)


@pytest.mark.parametrize("start", [
    [0.1, 1j], np.array([0.1, 2.0], np.complex64), ["0.1", "0.2"], [0.1, 10**400], [[1, 2], [3]], {"a": 1.0},
    np.array([np.complex64(1), 0.1], object),
], ids=lambda start: str(start)[:24])  # fmt: skip
def test_a_start_that_holds_no_real_numbers(start):
    with pytest.raises(errors.ShapeError, match="must be an array of real numbers"):
        fw.Chain(fw.Density(normal, 2), start)
