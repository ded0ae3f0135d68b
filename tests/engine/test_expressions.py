"""The language of rule sheets: values, units, and truth that is not known."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from qa.engine.expressions import FUNCTIONS, Expression, Symbol, compile_expression, judge
from qa.model.errors import SheetError
from qa.model.units import DEGREE, METRE, ONE, SECOND

SYMBOLS = {
    "a": Symbol(METRE),
    "b": Symbol(METRE),
    "t": Symbol(SECOND),
    "n": Symbol(ONE),
    "w": Symbol(DEGREE),
}


def compiled(text: str) -> Expression:
    return compile_expression(text, SYMBOLS.get, lambda: list(SYMBOLS), "test")


def value(text: str, **values: Any) -> Any:
    return compiled(text).run(values)


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ("a + 2*b", 8.0),
        ("a / t", 1.0),
        ("sqrt(a**2 + b**2)", math.hypot(2.0, 3.0)),
        ("hypot(a, b, 6*m)", 7.0),
        ("min(a, b)", 2.0),
        ("max(a, b, 10*m)", 10.0),
        ("abs(a - b)", 1.0),
        ("sin(30*deg)", 0.5),
        ("atan(1)", 45.0),
        ("radians(180*deg)", math.pi),
        ("floor(a / b)", 0.0),
        ("log10(a / (0.2*m))", 1.0),
        ("where(a < b, a, b)", 2.0),
        ("where(a > b, a, b)", 3.0),
        ("-a + 4 * kt * s", -2.0 + 4 * 1852 / 3600),
        ("decibels(100)", 20.0),
    ],
)
def test_arithmetic_is_that_of_python(text: str, expected: float) -> None:
    assert value(text, a=2.0, b=3.0, t=2.0) == pytest.approx(expected)


@pytest.mark.parametrize(
    ("text", "unit"),
    [
        ("a * b", "m^2"),
        ("a / t", "m/s"),
        ("sqrt(a * b)", "m"),
        ("1 / t", "Hz"),
        ("a / b", "1"),
        ("n * w", "deg"),
    ],
)
def test_units_follow_the_arithmetic(text: str, unit: str) -> None:
    assert str(compiled(text).unit) == unit


@pytest.mark.parametrize(
    "text",
    ["a + t", "a < t", "min(a, t)", "sin(a)", "log10(a)", "where(a < b, a, t)", "a + 1", "a == n"],
)
def test_units_that_do_not_fit_are_refused(text: str) -> None:
    with pytest.raises(SheetError):
        compiled(text)


def test_nothing_fits_every_unit() -> None:
    assert value("a > 0", a=2.0) == 1.0
    assert value("max(a, 0)", a=-2.0) == 0.0


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ("a < 1*m and b < 1*m", 0.0),
        ("b < 1*m and a < 1*m", 0.0),
        ("a < 1*m or b < 1*m", math.nan),
        ("a > 1*m or b < 1*m", 1.0),
        ("a > 1*m and b < 1*m", math.nan),
        ("not b < 1*m", math.nan),
        ("where(b < 1*m, 1, 2)", math.nan),
    ],
)
def test_what_is_not_known_decides_nothing(text: str, expected: float) -> None:
    found = float(value(text, a=2.0, b=math.nan))
    assert found == expected or (math.isnan(found) and math.isnan(expected))


@given(st.floats(-1e6, 1e6), st.floats(-1e6, 1e6))
def test_a_judgement_agrees_with_its_comparison(a: float, b: float) -> None:
    judged = judge(compiled("a <= b"), {"a": np.array([a]), "b": np.array([b])})
    assert bool(judged.met[0]) == (a <= b + 1e-9 * abs(b))
    assert bool(judged.known[0])
    if a < b or a > b * (1 + 1e-6) > 0:
        assert (judged.margin[0] >= 0) == bool(judged.met[0]) or abs(judged.margin[0]) < 1e-8


@given(st.lists(st.floats(-10, 10) | st.just(math.nan), min_size=1, max_size=20))
def test_both_comparisons_must_hold_and_the_nearer_decides(values: list[float]) -> None:
    a = np.array(values)
    judged = judge(compiled("a >= 2*m and a <= 5*m"), {"a": a})
    with np.errstate(invalid="ignore"):
        np.testing.assert_array_equal(
            judged.met & judged.known, (a >= 2 * (1 - 1e-9)) & (a <= 5 * (1 + 1e-9))
        )
    np.testing.assert_array_equal(judged.known, ~np.isnan(a))
    low = judged.known & (a < 1.9)
    assert (judged.limit[low] == 2.0).all()
    assert (judged.limit[judged.known & (a > 5.1)] == 5.0).all()


def test_a_rounding_error_is_no_miss() -> None:
    judged = judge(compiled("a <= b"), {"a": np.array([0.1 + 0.2]), "b": np.array([0.3])})
    assert bool(judged.met[0])


def test_an_endless_footprint_misses_any_limit() -> None:
    judged = judge(compiled("a <= b"), {"a": np.array([np.inf]), "b": np.array([1.0])})
    assert not judged.met[0]
    assert judged.known[0]


def test_a_reducer_is_read_under_its_own_key() -> None:
    found = compiled("greatest(a) - least(b + 1*m) <= 3*m")
    assert set(found.reductions) == {"greatest(a)", "least(b + 1 * m)"}
    assert found.names == {"greatest(a)", "least(b + 1 * m)"}


def test_every_function_refuses_the_wrong_number_of_values() -> None:
    for name, function in FUNCTIONS.items():
        too_many = ", ".join(["n"] * (function.most_args + 1))
        with pytest.raises(SheetError):
            compiled(f"{name}({too_many})")
