"""A chain's state as bytes: taken anywhere, put in elsewhere, and the walk goes on with the same bits."""

import json
import struct
from functools import cache

import numpy as np
import pytest
from compiled_densities import Curved
from hypothesis import given, settings
from hypothesis import strategies as st

import fellwalk as fw
from fellwalk import errors

START = (0.731, 0.468, 1.117)
MOTIONS = {
    "leapfrog": fw.Leapfrog(),
    "leapfrog halved": fw.Leapfrog(halvings=2),
    "isokinetic": fw.Isokinetic(),
    **{
        f"{curvature} {scheme}{' halved' if halvings else ''}": fw.Lagrangian(
            bend=0.83, curvature=curvature, scheme=scheme, halvings=halvings
        )
        for curvature in ("surrogate", "difference", "product")
        for scheme in ("split", "semi-explicit")
        for halvings in (0, 2)
    },
}
PATHS = {
    "jittered": fw.Jittered(4),
    "length found": fw.Jittered("auto"),
    "no-u-turn": fw.NoUTurn(doublings=4),
    "no-u-turn metric": fw.NoUTurn(doublings=4, turn="metric"),
}
SETTLE, KEEP = 71, 19  # windows end after 10 + 21 and 10 + 51 transitions or so; the cuts below fall inside and between


def make(motion, path, *, form="compiled", settle=SETTLE, seed=404, **options):
    user = Curved(form, 3)
    return fw.Chain(user.density, START, motion=MOTIONS[motion], path=PATHS[path], seed=seed, settle=settle, **options)


def elsewhere(chain):
    """The state put into a new chain over a new density object, as another process would."""
    return fw.Chain.from_state(Curved("compiled", 3).density, chain.state)


@cache
def undisturbed(motion, path, settle=SETTLE):
    """(draws, facts, final state) of a run in one piece."""
    chain = make(motion, path, settle=settle)
    parts = [chain.block(10**6), chain.block(KEEP)]
    assert [part.phase for part in parts] == ["settle", "keep"]
    return (np.concatenate([part.draws for part in parts]), np.concatenate([part.facts for part in parts]), chain.state)


def assert_same_run(chain, cuts, motion, path):
    """Run with the state moved to a new chain after blocks of the sizes `cuts`, compared bit for bit."""
    draws, facts, final = undisturbed(motion, path)
    done, at = 0, 0
    while done < len(draws):
        block = chain.block(min(cuts[at % len(cuts)], len(draws) - done))
        np.testing.assert_array_equal(block.draws, draws[done : done + len(block)])
        assert block.facts.tobytes() == facts[done : done + len(block)].tobytes()
        done += len(block)
        at += 1
        state = chain.state
        chain = elsewhere(chain)
        assert chain.state == state
    assert chain.state == final


@given(st.sampled_from(sorted(MOTIONS)), st.sampled_from(sorted(PATHS)),
       st.lists(st.integers(1, 40), min_size=1, max_size=8))
@settings(max_examples=150, deadline=None, derandomize=True)
def test_a_moved_run_goes_on_with_the_same_bits(motion, path, cuts):
    assert_same_run(make(motion, path), cuts, motion, path)


@pytest.mark.parametrize("path", PATHS)
@pytest.mark.parametrize("motion", MOTIONS)
def test_a_run_moved_after_every_transition(motion, path):
    assert_same_run(make(motion, path), [1], motion, path)


@pytest.mark.parametrize("path", ["no-u-turn", "length found"])
@pytest.mark.parametrize("motion", ["leapfrog", "isokinetic", "surrogate split", "product semi-explicit"])
def test_a_run_moved_inside_an_open_plan_of_settling(motion, path):
    """settle="auto": the decision when to end, and pilots of the length of paths, are part of the state."""
    expected, *_ = undisturbed(motion, path, "auto")
    chain = make(motion, path, settle="auto")
    parts = []
    while not chain.settled:
        parts.append(chain.block(37).draws)
        chain = elsewhere(chain)
    parts.append(chain.block(KEEP).draws)
    np.testing.assert_array_equal(np.concatenate(parts), expected)


def test_python_and_compiled_chains_exchange_states():
    """The state knows nothing of how the density is called; one evaluation may differ in its last bit, not more."""
    chain = make("leapfrog", "no-u-turn")
    chain.block(20)
    other = fw.Chain.from_state(Curved("pair", 3).density, chain.state)
    assert other.state == chain.state
    np.testing.assert_allclose(other.block(5).draws, chain.block(5).draws, rtol=1e-9)


def test_the_setter_puts_a_state_into_a_chain_of_the_same_settings():
    a, b = make("surrogate split", "jittered"), make("surrogate split", "jittered", seed=5)
    a.block(33)
    b.block(50)
    assert a.state != b.state
    b.state = a.state
    assert b.state == a.state
    assert b.phase == "settle"
    np.testing.assert_array_equal(a.position, b.position)
    np.testing.assert_array_equal(a.block(60).draws, b.block(60).draws)
    assert a.counts == b.counts


def test_reading_the_state_changes_nothing():
    a, b = make("leapfrog", "no-u-turn"), make("leapfrog", "no-u-turn")
    for _ in range(10):
        assert a.state == a.state
        np.testing.assert_array_equal(a.block(3).draws, b.block(3).draws)


def test_putting_back_an_earlier_state_repeats_the_draws_and_does_not_count_backwards():
    user = Curved("compiled", 3)
    chain = fw.Chain(user.density, START, seed=3, step_size=0.6)
    state, before = chain.state, user.density.gradients
    first = chain.advance(10)
    used = user.density.gradients - before
    chain.state = state
    assert user.density.gradients == before + used
    np.testing.assert_array_equal(chain.advance(10).draws, first.draws)
    assert user.density.gradients == before + 2 * used == user.plan.calls


def test_importing_does_not_call_the_density():
    user = Curved("compiled", 3)
    fw.Chain.from_state(user.density, make("leapfrog", "jittered").state)
    assert user.plan.calls == 0
    assert user.density.gradients == 0


def test_the_scale_and_the_settings_travel_along():
    chain = make("leapfrog halved", "jittered", settle=0, step_size=0.4, scale=[0.5, 2.0, 3.0], acceptance=0.71,
                 adapt_scale=False)
    other = elsewhere(chain)
    assert other.settings == chain.settings
    np.testing.assert_array_equal(other.scale, chain.scale)
    assert other.step_size == 0.4
    np.testing.assert_array_equal(other.settle(40).draws, chain.settle(40).draws)


@pytest.mark.parametrize("beta", [0.0, 0.31, None])
def test_beta_travels_along(beta):
    chain = make("surrogate split", "jittered", beta=beta)
    chain.block(25)
    assert elsewhere(chain).summary["beta"] == chain.summary["beta"]


# ---- damage ---------------------------------------------------------------------------------------------------------
def small(settle=40, done=5):
    chain = fw.Chain(Curved("compiled", 2).density, START[:2], path=fw.Jittered(2), seed=9, settle=settle)
    chain.block(done)
    return chain


def head_end(state):
    """Where the settings end and the core's bytes begin."""
    start = state.index(b"\n") + 1
    (length,) = struct.unpack("<I", state[start : start + 4])
    assert json.loads(state[start + 4 : start + 4 + length])
    return start + 4 + length


def refused(state):
    try:
        fw.Chain.from_state(Curved("compiled", 2).density, state)
    except errors.StateError as error:
        return "\n" not in str(error)
    return False


@pytest.mark.parametrize("flip", [0x01, 0x80, 0xFF])
def test_every_damaged_byte_beyond_the_settings_is_noticed(flip):
    state = small().state
    missed = [
        at - len(state)
        for at in range(head_end(state), len(state))
        if not refused(state[:at] + bytes([state[at] ^ flip]) + state[at + 1 :])
    ]
    assert missed == []


@pytest.mark.parametrize("flip", [0x01, 0x02, 0x04, 0x10, 0x20, 0x80, 0xFF])
def test_every_damaged_byte_of_the_settings_is_noticed(flip):
    """Not only where it breaks the JSON or what the core compares: a changed number is damage too."""
    state = small().state
    missed = [
        state[max(0, at - 20) : at + 2]
        for at in range(head_end(state))
        if not refused(state[:at] + bytes([state[at] ^ flip]) + state[at + 1 :])
    ]
    assert missed == []


def test_damage_never_breaks_a_chain():
    """Whatever is let through goes on without a crash."""
    state = small().state
    rng = np.random.default_rng(5)
    for at in range(len(state)):
        damaged = bytearray(state)
        damaged[at] ^= int(rng.integers(1, 256))
        try:
            chain = fw.Chain.from_state(Curved("compiled", 2).density, bytes(damaged))
        except errors.FellwalkError:
            continue
        chain.block(2)


@given(st.binary(max_size=200))
@settings(max_examples=200, deadline=None, derandomize=True)
def test_what_is_no_state_is_refused(noise):
    state = small().state
    assert refused(noise)
    assert refused(state[: state.index(b"\n") + 1] + noise)
    assert refused(state[: head_end(state)] + noise)


def test_truncated_and_lengthened_states_are_refused():
    for settle, done in ((40, 5), (12, 10**6)):  # while settling; settled, which is shorter
        state = small(settle, done).state
        assert not refused(state)
        for length in range(len(state)):
            assert refused(state[:length])
        for extra in (b"\0", b"\0" * 8, state[-8:], state):
            assert refused(state + extra)


@pytest.mark.parametrize("given", [None, 3, "text", 1.5, [1, 2]])
def test_what_is_not_bytes_is_refused(given):
    chain = small()
    before = chain.state
    with pytest.raises(errors.StateError):
        fw.Chain.from_state(chain.density, given)
    with pytest.raises(errors.StateError):
        chain.state = given
    assert chain.state == before


def test_a_state_of_other_settings_is_refused_by_the_setter():
    chain = make("leapfrog", "jittered")
    before = chain.state
    others = [
        make("leapfrog halved", "jittered"),
        make("leapfrog", "no-u-turn"),
        make("surrogate split", "jittered"),
        make("leapfrog", "jittered", settle=SETTLE + 1),
        make("leapfrog", "jittered", acceptance=0.7),
        make("leapfrog", "jittered", step_size=0.5),
        make("leapfrog", "jittered", adapt_scale=False),
        make("leapfrog", "jittered", beta=0.2),
    ]
    for other in others:
        with pytest.raises(errors.StateError, match="other settings"):
            chain.state = other.state
        assert chain.state == before


@pytest.mark.parametrize("dimension", [2, 4])
def test_a_state_of_another_dimension_is_refused(dimension):
    chain = make("leapfrog", "jittered")
    with pytest.raises(errors.StateError, match=f"another dimension than {dimension}"):
        fw.Chain.from_state(Curved("compiled", dimension).density, chain.state)
    start = (*START, 0.5)[:dimension]
    other = fw.Chain(Curved("compiled", dimension).density, start, path=fw.Jittered(4), settle=SETTLE)
    before = other.state
    with pytest.raises(errors.StateError, match=f"another dimension than {dimension}"):
        other.state = chain.state
    assert other.state == before


def test_the_core_of_another_state_is_refused():
    """The settings of one chain before the bytes of another."""
    a, b = make("leapfrog", "jittered").state, make("surrogate split", "jittered").state
    with pytest.raises(errors.StateError):
        fw.Chain.from_state(Curved("compiled", 3).density, a[: head_end(a)] + b[head_end(b) :])


def test_a_state_that_needs_products_wants_a_density_with_products():
    state = make("product split", "jittered").state
    with pytest.raises(errors.ArgumentError, match="Hessian product"):
        fw.Chain.from_state(fw.Density(lambda x: (0.0, x), 3), state)


def test_a_refused_state_leaves_the_chain_as_it_was():
    chain = small()
    before = chain.state
    for at in range(head_end(before), len(before) - 40, 8):
        with pytest.raises(errors.StateError):
            chain.state = before[:at] + bytes([before[at] ^ 1]) + before[at + 1 :]
        assert chain.state == before
    expected = small().block(10).draws
    np.testing.assert_array_equal(chain.block(10).draws, expected)
