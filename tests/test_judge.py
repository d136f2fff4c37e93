"""The numbers of `judge`: against closed forms, under changes of scale and offset, and on bad input."""

import json
import warnings

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import stats
from synthetic_chains import autoregression

from fellwalk.errors import ArgumentError, FellwalkError
from fellwalk.judge import energy_fractions, judge, judge_function
from fellwalk.judgement import Judgement

FACTS = np.dtype([("energy", "<f8"), ("failure", "<i4")])
PLACES = ("estimate", "low", "middle", "high")
WIDTHS = ("error", "spread", "spread_error", "low_error", "middle_error", "high_error")
RANKED = ("worth", "worth_tails", "agreement")


def draws(seed: int = 3, parameters: int = 2, r: float = 0.5, n: int = 400) -> np.ndarray:
    return autoregression(np.random.default_rng(seed), r, n, parameters)


@pytest.fixture(autouse=True)
def _no_warning_leaks():
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        yield


# ---- right numbers --------------------------------------------------------------------------------------------------


def test_estimates_are_those_of_all_draws():
    x = draws()
    j = judge(x)
    flat = x.reshape(-1, 2)
    np.testing.assert_allclose(j.estimate, flat.mean(axis=0), rtol=0, atol=1e-15)
    np.testing.assert_allclose(j.spread, flat.std(axis=0, ddof=1), rtol=1e-14)
    for name, level in (("low", 0.05), ("middle", 0.5), ("high", 0.95)):
        np.testing.assert_allclose(getattr(j, name), np.quantile(flat, level, axis=0), rtol=0, atol=1e-15)
        value, error = j.quantile(level)
        np.testing.assert_array_equal(value, getattr(j, name))
        np.testing.assert_array_equal(error, getattr(j, f"{name}_error"))


# What each column should find for AR(1) with standard normal marginals, and the relative error of its own estimate.
TRUTH = {"estimate": 0.0, "spread": 1.0, "low": stats.norm.ppf(0.05), "middle": 0.0, "high": stats.norm.ppf(0.95)}


@pytest.mark.parametrize("r", [0.0, 0.5, 0.8])
def test_errors_shown_are_the_errors_made(r):
    # Root mean square of (found - true) over 400 independent parameters of 4 x 500 draws, against the mean error shown.
    # It is good to 1 / sqrt(800) = 3.5% (chance 0.05% for 3.5 of those, 0.7% over the 15). Over 3000 parameters the
    # quotient was 0.94 to 1.02; what is below 1 is the outward rounding of the quantiles' intervals to draws.
    j = judge(draws(seed=int(100 * r), parameters=400, r=r, n=500))
    for name, true in TRUTH.items():
        error = j.error if name == "estimate" else getattr(j, f"{name}_error")
        quotient = np.sqrt(np.mean((getattr(j, name) - true) ** 2)) / error.mean()
        assert 0.94 * (1 - 3.5 * 0.035) < quotient < 1.02 * (1 + 3.5 * 0.035), name


def test_worth_of_an_autoregression():
    # Exactly 2000 (1 - r) / (1 + r) = 666.7 for the mean. Rank-normal scores of a normal chain are that chain, nearly.
    # Estimates spread by 10%, so their mean over 200 by 0.7%; their bias was measured as +2.6% at 4 x 250 draws and
    # -0.7% at 4 x 1000: 4% is the bias at 250 and two of the former.
    j = judge(draws(parameters=200, r=0.5, n=500))
    for worth in (j.worth_mean, j.worth):
        assert worth.mean() == pytest.approx(2000 / 3, rel=0.04)


def test_energy_fraction_of_known_series():
    # Steps of +1, -1 in turn between 0 and 1: mean square 1 over a variance of 1/4. A constant has none.
    energies = np.array([[0.0, 1.0] * 50, [3.0] * 100])
    fraction = energy_fractions(energies)
    assert fraction[0] == pytest.approx(4.0, rel=1e-14)
    assert np.isnan(fraction[1])


def test_energy_fraction_of_an_autoregression_is_twice_one_minus_r():
    # Standard error of a lag-one correlation: sqrt((1 - r^2) / n) = 0.0022 for a chain of 40,000; five of these.
    x = autoregression(np.random.default_rng(2), 0.9, 40_000)[:, :, 0]
    np.testing.assert_allclose(energy_fractions(1e9 + x), 2 * (1 - 0.9), rtol=0, atol=5 * 2 * 0.0022)


def test_cost_for_one_effective_draw():
    j = judge(draws(), spent={"gradients": 12_345, "products": 0, "seconds": 2.5})
    least = j.worth.min()
    assert j.gradients_per_worth == 12_345 / least
    assert j.products_per_worth == 0
    assert j.seconds_per_worth == 2.5 / least
    assert np.isnan(judge(draws()).gradients_per_worth)


def test_many_parameters_give_the_numbers_of_each_alone():
    x = draws(parameters=700, n=300)
    together = judge(x)
    for i in (0, 350, 699):
        alone = judge(x[:, :, i : i + 1])
        for key in Judgement.NUMBERS:
            assert getattr(together, key)[i] == getattr(alone, key)[0]


def test_odd_number_of_draws_and_fewest_draws():
    assert judge(draws(n=401)).draws_per_chain == 401
    assert judge(draws(n=4)).verdict.kind != "fit for use"
    middle = np.zeros((2, 5, 1))
    middle[0, 2] = 1.0
    assert judge(middle).worth[0] == 1.0


# ---- invariances ----------------------------------------------------------------------------------------------------


@settings(max_examples=40)
@given(st.integers(0, 10**6), st.integers(-900, 900), st.booleans())
def test_powers_of_two_and_signs_change_nothing_but_the_scale(seed, power, negative):
    x = draws(seed=seed, parameters=1, n=30)
    a, b = judge(x), judge(np.ldexp(-x if negative else x, power))
    for key in RANKED if not negative else ("worth", "agreement"):
        np.testing.assert_allclose(getattr(b, key), getattr(a, key), rtol=1e-9)
    for key in ("estimate", "error", "spread", "spread_error"):
        expected = np.ldexp(getattr(a, key), power) * (-1 if negative and key == "estimate" else 1)
        np.testing.assert_allclose(getattr(b, key), expected, rtol=1e-9)


@settings(max_examples=40)
@given(st.integers(0, 10**6), st.floats(0.01, 100), st.floats(-1e4, 1e4))
def test_shift_and_scale_carry_over(seed, scale, shift):
    x = draws(seed=seed, parameters=1, n=30)
    a, b = judge(x), judge(shift + scale * x)
    # The shift itself rounds each draw by 1e-16 |shift|.
    rounding = 1e-9 * scale + 4e-16 * abs(shift)
    for key in PLACES:
        np.testing.assert_allclose(getattr(b, key), shift + scale * getattr(a, key), rtol=0, atol=rounding)
    for key in WIDTHS:
        np.testing.assert_allclose(getattr(b, key), scale * getattr(a, key), rtol=1e-6)
    # Interpolated quantiles round up or down, so a draw that equals one may cross it: only ranks are held here.
    np.testing.assert_allclose(b.worth, a.worth, rtol=1e-9)


MONOTONE = [np.exp, np.arctan, lambda x: x**3, lambda x: np.sinh(5 * x)]


@settings(max_examples=30)
@given(st.integers(0, 10**6), st.sampled_from(MONOTONE))
def test_centre_does_not_feel_a_monotone_map(seed, monotone):
    x = draws(seed=seed, parameters=1, n=31)
    a, b = judge(x), judge(monotone(x))
    np.testing.assert_allclose(b.worth, a.worth, rtol=1e-12)
    from fellwalk import autocorrelation as ac

    centre = [ac.potential_scale_reduction(ac.rank_normalise(ac.split(y[:, :, 0]))) for y in (x, monotone(x))]
    assert centre[0] == centre[1]


def test_order_of_chains_does_not_matter():
    x = draws()
    a, b = judge(x), judge(x[[2, 0, 3, 1]])
    for key in ("estimate", "error", "worth", "worth_tails", "agreement"):
        np.testing.assert_allclose(getattr(b, key), getattr(a, key), rtol=1e-10)


@pytest.mark.parametrize("offset", [1e8, -1e13])
def test_large_offset_loses_no_digits(offset):
    # Draws on a grid that the offset leaves exact, so that the same draws can be had without it.
    step = 2.0**-6
    x = np.round(draws() / step) * step
    a, b = judge(x), judge(x + offset)
    for key in (*WIDTHS, *RANKED):
        np.testing.assert_allclose(getattr(b, key), getattr(a, key), rtol=1e-12)
    np.testing.assert_allclose(b.estimate - offset, a.estimate, rtol=0, atol=2 * np.spacing(abs(offset)))


@pytest.mark.parametrize("scale", [1e-320, 1e-300, 1e-14, 1e150, 1e307])
def test_huge_and_tiny_scales(scale):
    x = draws()
    a, b = judge(x), judge(scale * x)
    # A draw of 1e-320 has about three digits left, and equal draws in plenty.
    rtol = 0.05 if scale < 1e-310 else 1e-9
    for key in ("worth", "worth_tails", "agreement"):
        np.testing.assert_allclose(getattr(b, key), getattr(a, key), rtol=rtol)
    np.testing.assert_allclose(b.spread, scale * a.spread, rtol=rtol)
    assert str(b)


def test_whole_double_range():
    x = draws()
    x[0, 0], x[1, 0] = 1.7e308, -1.7e308
    j = judge(x)
    assert np.isfinite(j.estimate).all()
    assert np.isfinite(j.error).all()
    assert str(j)


def test_constants_are_shown_as_constant():
    x = draws(parameters=3)
    x[:, :, 1] = 0.1
    j = judge(x)
    assert j.constant.tolist() == [False, True, False]
    assert (j.estimate[1], j.error[1], j.spread[1], j.low[1], j.high[1]) == (0.1, 0, 0, 0.1, 0.1)
    assert np.isnan(j.agreement[1])
    assert "constant" in str(j)


# ---- functions of draws ---------------------------------------------------------------------------------------------


def test_probability_of_an_event():
    j = judge_function(draws(r=0.0, n=2000), lambda x: x[0] > 1, ["above one"])
    # 8000 independent draws: an error of sqrt(p (1 - p) / 8000), the truth within four of them (chance 6e-5).
    assert j.event.tolist() == [True]
    assert j.error[0] == pytest.approx(np.sqrt(0.1587 * 0.8413 / 8000), rel=0.1)
    assert abs(j.estimate[0] - stats.norm.sf(1)) < 4 * j.error[0]
    assert "The estimate of a truth value is its probability." in str(j)


def test_function_of_several_values_equals_judging_them():
    x = draws()
    j = judge_function(x, lambda v: [v[0] + v[1], v[0] * v[1]], ["sum", "product"])
    k = judge(np.stack([x.sum(axis=2), x.prod(axis=2)], axis=2), ["sum", "product"])
    assert j.to_dict() == k.to_dict()


def test_function_names_and_changing_number_types():
    def total(v):
        return 0 if v[0] > 0 else v[0] + v[1]

    j = judge_function(draws(), total)
    assert j.names == ("total",)
    assert not j.event[0]
    assert judge_function(draws(), lambda v: v).names == ("value[0]", "value[1]")


def test_function_cannot_change_the_draws():
    def spoil(v):
        v[0] = 0
        return 1.0

    with pytest.raises(ValueError, match="read-only"):
        judge_function(draws(), spoil)


def test_exception_inside_the_function_comes_through():
    error = KeyError("mine")

    def fail(v):
        raise error

    with pytest.raises(KeyError) as caught:
        judge_function(draws(), fail)
    assert caught.value is error


def second_differs(first, second):
    seen = []

    def f(v):
        seen.append(1)
        return first if len(seen) == 1 else second

    return f


@pytest.mark.parametrize(
    ("f", "said"),
    [
        (second_differs([1.0, 2.0], [1.0]), "for draw 2 of chain 1 it returned shape (1,) after (2,)"),
        (second_differs(1.0, [1.0]), "for draw 2 of chain 1 it returned shape (1,) after ()"),
        (lambda v: "high", "for draw 1 of chain 1 it returned"),
        (lambda v: None, "for draw 1 of chain 1 it returned"),
        (lambda v: np.eye(2), "shape (2, 2)"),
        (lambda v: [], "shape (0,)"),
        (second_differs(1.0, np.nan), "Draw 2 of chain 1 (counted from 1) is nan"),
        (3.0, "must be callable, not float"),
    ],
)
def test_bad_functions(f, said):
    with pytest.raises(ArgumentError) as caught:
        judge_function(draws(), f)
    assert said in str(caught.value)


# ---- bad input ------------------------------------------------------------------------------------------------------

HOLE = draws()
HOLE[2, 7, 1] = np.nan
HOLE[3, 0, 0] = np.inf


@pytest.mark.parametrize(
    ("x", "said"),
    [
        (np.zeros((4, 10)), "they have shape (4, 10); for a single chain give draws[None]"),
        (np.zeros((1, 2, 3, 4)), "they have shape (1, 2, 3, 4)"),
        (0.5, "they have shape ()"),
        ([[[1.0], [2.0]], [[1.0]]], "the lists given differ in length"),
        (np.zeros((4, 3, 2)), "There are 3 draws a chain; at least 4"),
        (np.zeros((0, 10, 2)), "There is no chain"),
        (np.zeros((4, 10, 0)), "There is no parameter"),
        (np.zeros((4, 10, 2), dtype=complex), "they have type complex128"),
        (np.full((4, 10, 2), "a"), "they have type <U1"),
        (HOLE, "Draw 8 of chain 3 (counted from 1) is nan in parameter x[1]; 2 of 3200 numbers"),
        (np.ma.masked_less(draws(), 0.0), "masked array with masked entries"),
    ],
)
def test_bad_draws(x, said):
    with pytest.raises(ArgumentError) as caught:
        judge(x)
    text = str(caught.value)
    assert said in text
    assert "\n" not in text
    assert isinstance(caught.value, FellwalkError)
    assert isinstance(caught.value, ValueError)


@pytest.mark.parametrize(
    ("names", "said"),
    [
        (["a"], "There are 1 names for 2 parameters"),
        (["a", "a"], "The name 'a' stands for parameters 1 and 2"),
        ("ab", "not the single string 'ab'"),
        (["a", 3], "Name 2 is 3"),
        (["a", "b\n"], "Name 2 is 'b\\n'"),
        (["a", " "], "Name 2 is ' '"),
        (7, "must be a list of strings, not int"),
    ],
)
def test_bad_names(names, said):
    with pytest.raises(ArgumentError) as caught:
        judge(draws(), names)
    assert said in str(caught.value)


@pytest.mark.parametrize(
    ("keywords", "said"),
    [
        ({"facts": np.zeros((4, 400))}, 'fields "energy" and "failure"'),
        ({"facts": np.zeros((4, 399), FACTS)}, "they have shape (4, 399)"),
        ({"facts": [1, 2]}, 'fields "energy" and "failure"'),
        ({"spent": {"gradients": -1}}, "spent in gradients must be a finite number, zero or more, not -1"),
        ({"spent": {"seconds": np.nan}}, "spent in seconds"),
        ({"spent": {"gradients": True}}, "not True"),
        ({"spent": {"euros": 3}}, "any of the keys gradients, products, seconds"),
        ({"spent": 12}, "must be a dict"),
    ],
)
def test_bad_facts_and_costs(keywords, said):
    with pytest.raises(ArgumentError) as caught:
        judge(draws(), **keywords)
    assert said in str(caught.value)


@pytest.mark.parametrize("level", [0, 1, -0.1, np.nan, "half", True])
def test_bad_levels(level):
    with pytest.raises(ArgumentError, match="between 0 and 1"):
        judge(draws()).quantile(level)


def test_lists_and_other_real_types_are_taken():
    x = draws(n=20)
    assert judge(x.tolist()).to_dict() == judge(x).to_dict()
    assert judge(x.astype(np.float32)).spread == pytest.approx(judge(x).spread, rel=1e-6)
    assert not judge(np.round(10 * x).astype(int)).event.any()
    assert judge(x > 0).event.all()


def test_draws_are_left_as_they_are():
    x = draws()
    before = x.copy()
    str(judge(x))
    np.testing.assert_array_equal(x, before)


def test_dictionary_goes_through_strict_json_and_back():
    x = draws(parameters=3)
    x[:, :, 0] = 5.0
    x[:, :, 1] = np.arange(4.0)[:, None]
    table = np.zeros((4, 400), FACTS)
    table["failure"][0, 0] = 4
    j = judge(x, ["a", "b", "c"], facts=table, spent={"gradients": np.int64(10)})
    back = json.loads(json.dumps(j.to_dict(), allow_nan=False))
    assert back == j.to_dict()
    assert (
        back["parameters"][0] | {"name": "a", "constant": True, "agreement": None, "estimate": 5.0}
        == back["parameters"][0]
    )
    assert back["parameters"][1]["agreement"] is None
    assert back["failures"] == {"4": 1}
    assert back["energy_fraction"] == [None] * 4
    assert back["verdict"]["kind"] == j.verdict.kind
