"""The printed judgement: digits by the error, widths, names, what is shown of many parameters."""

import re

import numpy as np
import pytest
from hypothesis import example, given, settings
from hypothesis import strategies as st
from synthetic_chains import autoregression

from fellwalk import table
from fellwalk.judge import judge

FACTS = np.dtype([("energy", "<f8"), ("failure", "<i4")])


def draws(parameters: int = 2, seed: int = 3, r: float = 0.5, n: int = 800) -> np.ndarray:
    return autoregression(np.random.default_rng(seed), r, n, parameters)


def row(text: str, name: str) -> list[str]:
    (line,) = (line for line in text.splitlines() if line.startswith(name + " "))
    return line[len(name) :].split()


@pytest.mark.parametrize(
    ("error", "at"),
    [
        (0.0031, 4),
        (0.31, 2),
        (1.0, 1),
        (9.99, 1),
        (31.0, 0),
        (3100.0, -2),
        (2e-17, 18),
        (0.0, None),
        (np.nan, None),
        (np.inf, None),
    ],
)
def test_place_of_the_second_digit(error, at):
    assert table.place(error) == at


@pytest.mark.parametrize(
    ("value", "decimals", "text"),
    [
        (1.23456, 3, "1.235"),
        (-0.0004, 2, "0.00"),
        (123456.0, -2, "123500"),
        (0.5, 0, "0"),
        (-1.5, 1, "-1.5"),
        (-40.0, -2, "0"),
    ],
)
def test_digits(value, decimals, text):
    assert table.digits(value, decimals) == text


def test_numbers_carry_the_digits_of_their_errors():
    j = judge(draws(1), ["alpha"])
    cells = row(str(j), "alpha")
    errors = [j.error[0], j.error[0], j.spread_error[0], j.low_error[0], j.middle_error[0], j.high_error[0]]
    values = [j.estimate[0], j.error[0], j.spread[0], j.low[0], j.middle[0], j.high[0]]
    for cell, value, error in zip(cells[:6], values, errors, strict=True):
        # All numbers here are below ten with errors below one, so decimals are the second digit of the error.
        assert len(cell.partition(".")[2]) == 1 - int(np.floor(np.log10(error)))
        assert abs(float(cell) - value) <= 0.05 * error * 1.0000001
    assert cells[6:] == [f"{j.worth[0]:.0f}", f"{j.agreement[0]:.3f}"]


def test_large_offset_is_taken_out_and_named():
    x = draws(1)
    j = judge(1e8 + 0.2 + 0.01 * x, ["mu"])
    text = str(j)
    assert "mu: add 100000000 to estimate, low, middle and high." in text
    assert float(row(text, "mu")[0]) == pytest.approx(j.estimate[0] - 1e8, abs=0.05 * j.error[0] * 1.01)
    assert len(row(text, "mu")[0].partition(".")[2]) == 1 - int(np.floor(np.log10(j.error[0])))


@pytest.mark.parametrize("power", [-300, -14, -7, 9, 300])
def test_far_units_are_named(power):
    x = 10.0**power * (5 + draws(1))
    j = judge(x, ["mu"])
    text = str(j)
    unit = float(re.search(r"mu: multiply by (1e-?\d+)\.", text).group(1))
    cells = row(text, "mu")
    assert float(cells[0]) * unit == pytest.approx(j.estimate[0], abs=0.051 * j.error[0])
    assert float(cells[1]) * unit == pytest.approx(j.error[0], rel=0.051)
    assert float(cells[2]) * unit == pytest.approx(j.spread[0], abs=0.051 * j.spread_error[0])


@example(7.5, 1.0, 1.0, 0, 1)
@settings(max_examples=150, deadline=None)
@given(
    st.floats(-300, 300),
    st.one_of(st.just(0.0), st.floats(-14, 14)),
    st.sampled_from([1.0, -1.0]),
    st.integers(0, 5),
    st.integers(1, 40),
)
def test_never_wider_than_a_terminal_and_never_wrong(power, far, sign, seed, length):
    name = "n" * length
    x = 10.0**power * draws(1, seed=seed, n=60) + sign * (10.0 ** min(power + far, 305) if far else 0)
    j = judge(x, [name])
    text = str(j)
    assert max(map(len, text.splitlines())) <= table.WIDTH
    if j.constant[0]:
        return
    shown = table.Row(j, 0)
    cells = shown.cells()
    # What a reader gets back from the row by its notes is the number, to its error or to the last bit that it has.
    for cell, key in zip(cells, ("estimate", "error", "spread", "low", "middle", "high"), strict=False):
        error = {"error": j.error, "estimate": j.error, "spread": j.spread_error}.get(key)
        error = float((getattr(j, f"{key}_error") if error is None else error)[0])
        place = shown.offset if key in ("estimate", "low", "middle", "high") else 0.0
        value = float(getattr(j, key)[0])
        back = place + float(f"{cell}e{shown.exponent}")
        # Shown without error (equal draws): six digits.
        unsaid = 1e-5 * abs(value) if error == 0 else 0.0501 * error
        assert abs(back - value) <= unsaid + 4 * np.spacing(abs(value)) + 4 * np.spacing(abs(place))


@pytest.mark.parametrize("count", [1, 3, 24, 30, 300])
def test_many_parameters(count):
    x = draws(count, n=200)
    if count > 24:
        x[2, :, 17] += 5
    j = judge(x)
    text = str(j)
    lines = text.splitlines()
    assert max(map(len, lines)) <= 80
    rows = [line for line in lines if re.match(r"x\[\d+\] ", line)]
    assert len(rows) == min(count, table.ROWS)
    assert len([line for line in j.table(all=True).splitlines() if re.match(r"x\[\d+\] ", line)]) == count
    if count > table.ROWS:
        assert rows[0].startswith("x[17] ")
        assert f"worst first; {count - table.ROWS} more with .table(all=True)." in " ".join(text.split())
    else:
        assert [line.split()[0] for line in rows] == [f"x[{i}]" for i in range(count)]


def test_headings_and_textbook_names():
    text = str(judge(draws(1)))
    assert text.splitlines()[2].split() == list(table.HEADINGS)
    flat = " ".join(text.split())
    assert "posterior mean, its Monte Carlo standard error, posterior standard deviation" in flat
    assert "effective sample size, R-hat" in flat


NAME = st.text(st.characters(exclude_categories=("C", "Z", "M")), min_size=1, max_size=30)


@given(st.lists(NAME, unique=True, min_size=1, max_size=30), st.integers(8, 20))
def test_shortened_names_stay_unique_and_fit(names, width):
    short = table.shorten_names(names, width)
    assert len(set(short)) == len(names)
    assert all(table.columns(name) <= width for name in short)
    for name, whole in zip(short, names, strict=True):
        assert name == whole or ("…" in name and name[0] == whole[0])


def test_names_alike_at_both_ends_stay_apart():
    names = [f"effect_of_region_{i}_on_the_yearly_yield" for i in range(12)]
    short = table.shorten_names(names, 12)
    assert len(set(short)) == 12
    assert all(len(name) <= 12 for name in short)


def test_wide_characters_keep_the_columns():
    text = judge(draws(2), ["蜂蜜の重さ", "b"]).table().splitlines()
    first, second = (line for line in text if line.startswith(("蜂", "b ")))
    assert table.columns(first) == table.columns(second)


def test_failures_energy_and_cost_are_told():
    x = draws()
    facts = np.zeros(x.shape[:2], FACTS)
    facts["energy"] = draws(1, r=0.3)[:, :, 0]
    facts["failure"][0, :3] = 999
    facts["failure"][1, 0] = 998
    text = str(judge(x, facts=facts, spent={"gradients": 54_321, "products": 7, "seconds": 1.5}))
    flat = " ".join(text.split())
    assert "Failed steps: in 4 of 3,200 transitions (0.12%):" in flat
    assert flat.index("3 times failure code 999") < flat.index("1 time failure code 998")
    assert "Energy fraction (of missing information): 1." in flat
    assert re.search(
        r"Cost of the whole run: 54,321 gradients, 7 Hessian products, 1\.5 seconds; for one effective draw of x", flat
    )
    facts["failure"] = 0
    assert "Failed steps: none in 3,200 transitions." in str(judge(x, facts=facts))
    assert "Failed steps" not in str(judge(x))


def test_known_failure_codes_are_told_in_their_sentences():
    from fellwalk.facts import SENTENCES

    x = draws()
    facts = np.zeros(x.shape[:2], FACTS)
    facts["energy"] = draws(1, r=0.3)[:, :, 0]
    facts["failure"][2, 4] = 3
    assert f"1 time {SENTENCES[3]}" in " ".join(str(judge(x, facts=facts)).split())
