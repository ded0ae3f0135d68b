"""Units: names of the trade and of UDUNITS, exponents, and texts with numbers."""

from __future__ import annotations

import math

import pytest
from hypothesis import given
from hypothesis import strategies as st

from qa.model.errors import UnitError
from qa.model.units import (
    CELSIUS,
    DEGREE,
    HERTZ,
    METRE,
    ONE,
    SECOND,
    Unit,
    conversion,
    measure,
    readable,
)

# Exact by definition: the international foot and fathom, the nautical mile and knot (SI brochure, table 8 of the
# 8th edition); the grad is a 400th of a turn.
EXACT = {
    "ft": (0.3048, METRE),
    "fathom": (1.8288, METRE),
    "nmi": (1852.0, METRE),
    "dm": (0.1, METRE),
    "km": (1000.0, METRE),
    "kn": (1852.0 / 3600.0, METRE / SECOND),
    "knots": (1852.0 / 3600.0, METRE / SECOND),
    "m s-1": (1.0, METRE / SECOND),
    "meter second-1": (1.0, METRE / SECOND),
    "km/h": (1.0 / 3.6, METRE / SECOND),
    "us": (1e-6, SECOND),
    "µs": (1e-6, SECOND),
    "msec": (1e-3, SECOND),
    "min": (60.0, SECOND),
    "kHz": (1e3, HERTZ),
    "grad": (0.9, DEGREE),
    "rad": (180.0 / math.pi, DEGREE),
    "degrees_north": (1.0, DEGREE),
    "%": (0.01, ONE),
    "PSU": (1.0, ONE),
}


@pytest.mark.parametrize("text", EXACT)
def test_a_units_name_has_its_defined_size(text: str) -> None:
    size, unit = EXACT[text]
    how = conversion(text)
    assert how.unit == unit
    assert how.to_si(1.0) == pytest.approx(size, rel=1e-14)


@pytest.mark.parametrize(
    ("text", "value", "celsius"),
    [("K", 283.15, 10.0), ("degF", 50.0, 10.0), ("degree_C", 10.0, 10.0)],
)
def test_temperatures_have_their_own_zero(text: str, value: float, celsius: float) -> None:
    assert conversion(text).unit == CELSIUS
    assert conversion(text).to_si(value) == pytest.approx(celsius)


def test_a_whole_number_of_microseconds_is_the_nearest_double() -> None:
    assert measure("60 us")[0] == 60e-6
    assert measure("100 us")[0] == 1e-4


@given(st.sampled_from(sorted(EXACT)), st.floats(-1e9, 1e9))
def test_there_and_back_is_the_same(text: str, value: float) -> None:
    how = conversion(text)
    assert how.from_si(how.to_si(value)) == pytest.approx(value, rel=1e-12, abs=1e-12)


@given(
    st.lists(st.integers(-3, 3), min_size=5, max_size=5),
    st.lists(st.integers(-3, 3), min_size=5, max_size=5),
)
def test_products_and_quotients_undo_each_other(first: list[int], second: list[int]) -> None:
    a, b = (Unit(tuple(map(_fraction, e))) for e in (first, second))
    assert a * b / b == a
    assert (a * a).root(2) == a


def _fraction(number: int) -> object:
    from fractions import Fraction

    return Fraction(number)


@pytest.mark.parametrize("text", ["furlongs", "m/", "1 m", "__import__", "m**999999", "", "??"])
def test_what_is_no_unit_is_refused_or_has_none(text: str) -> None:
    if text == "":
        assert conversion(text).unit == ONE
    else:
        with pytest.raises(UnitError):
            conversion(text)


@pytest.mark.parametrize("text", ["", "fast", "50 us 3", "nan m", "1e999 m", "- 3 m"])
def test_what_is_no_measure_is_refused(text: str) -> None:
    with pytest.raises(UnitError):
        measure(text)


def test_a_measure_of_another_kind_names_both_units() -> None:
    with pytest.raises(UnitError, match=r"limits\.target_size.*3 s.*a value in m"):
        measure("3 s", METRE, "limits.target_size")


@pytest.mark.parametrize(
    ("value", "unit", "text"),
    [
        (6e-5, SECOND, "60 µs"),
        (0.0449, SECOND, "44.9 ms"),
        (3e5, HERTZ, "300 kHz"),
        (45.0, DEGREE, "45°"),
        (-0.25, ONE, "−0.25"),
    ],
)
def test_values_are_said_as_surveyors_say_them(value: float, unit: Unit, text: str) -> None:
    assert readable(value, unit) == text
