"""The S-44 sheets against the standard's own figures: IHO S-44 Edition 6.1.0, Table 1, §3.2.3 and §3.5.2.

The figures below are typed from the standard's table and not read from the sheets.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from functools import cache
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from qa.engine.explain import explain
from qa.engine.one_ping import OnePing
from qa.engine.sheets import RuleSheet, load_sheet
from qa.model.units import METRE

ORDERS = ("s44-exclusive", "s44-special", "s44-1a", "s44-1b", "s44-2")
DEPTHS = (0.5, 1, 2, 5, 7.5, 10, 20, 25, 37, 39.99, 40, 40.01, 50, 100, 200, 500, 1000, 3000, 6000)

# Table 1: a and b of the total vertical uncertainty, √(a² + (b·d)²) of §3.2.3, 95 %.
VERTICAL = {
    "s44-exclusive": (0.15, 0.0075),
    "s44-special": (0.25, 0.0075),
    "s44-1a": (0.5, 0.013),
    "s44-1b": (0.5, 0.013),
    "s44-2": (1.0, 0.023),
}
# Table 1: total horizontal uncertainty, 95 %: metres, and a share of the depth.
HORIZONTAL = {
    "s44-exclusive": (1.0, 0.0),
    "s44-special": (2.0, 0.0),
    "s44-1a": (5.0, 0.05),
    "s44-1b": (5.0, 0.05),
    "s44-2": (20.0, 0.10),
}
# Table 1: side of the cube that must be detected; order 1a: 2 m to 40 m of depth, beyond that 10 % of it.
FEATURE: dict[str, Callable[[float], float]] = {
    "s44-exclusive": lambda depth: 0.5,
    "s44-special": lambda depth: 1.0,
    "s44-1a": lambda depth: 2.0 if depth <= 40.0 else depth / 10.0,
}


@cache
def sheet_of(order: str) -> RuleSheet:
    return load_sheet(order)


def limit(order: str, name: str, depth: float) -> Any:
    return OnePing(sheet_of(order), {"reduced_depth": depth}).value(name)


@pytest.mark.parametrize("order", ORDERS)
@pytest.mark.parametrize("depth", DEPTHS)
def test_vertical_uncertainty_allowed_is_that_of_table_1(order: str, depth: float) -> None:
    a, b = VERTICAL[order]
    expected = (a * a + (b * depth) ** 2) ** 0.5
    assert limit(order, "tvu_allowed", depth) == pytest.approx(expected, rel=1e-12)


@pytest.mark.parametrize("order", ORDERS)
@pytest.mark.parametrize("depth", DEPTHS)
def test_horizontal_uncertainty_allowed_is_that_of_table_1(order: str, depth: float) -> None:
    fixed, share = HORIZONTAL[order]
    assert limit(order, "thu_allowed", depth) == pytest.approx(fixed + share * depth, rel=1e-12)


@pytest.mark.parametrize("order", FEATURE)
@pytest.mark.parametrize("depth", DEPTHS)
def test_feature_size_is_that_of_table_1(order: str, depth: float) -> None:
    expected = FEATURE[order](depth)
    assert limit(order, "target_size", depth) == pytest.approx(expected, rel=1e-12)


@pytest.mark.parametrize("order", ["s44-1b", "s44-2"])
def test_orders_that_demand_no_feature_state_no_target(order: str) -> None:
    assert not sheet_of(order).limits["target_size"].stated


@settings(deadline=None, max_examples=60)
@given(depth=st.floats(0.5, 6000.0))
def test_limits_hold_at_any_depth_and_a_stricter_order_allows_less(depth: float) -> None:
    vertical = [limit(order, "tvu_allowed", depth) for order in ORDERS]
    horizontal = [limit(order, "thu_allowed", depth) for order in ORDERS]
    for order, v, h in zip(ORDERS, vertical, horizontal, strict=True):
        assert v == pytest.approx(math.hypot(VERTICAL[order][0], VERTICAL[order][1] * depth))
        assert h == pytest.approx(HORIZONTAL[order][0] + HORIZONTAL[order][1] * depth)
    assert vertical == sorted(vertical)
    assert horizontal == sorted(horizontal)
    assert limit("s44-1a", "target_size", depth) == pytest.approx(FEATURE["s44-1a"](depth))


@pytest.mark.parametrize("order", ["s44-1a", "s44-1b", "s44-2"])
@pytest.mark.parametrize(("depth", "distance"), [(0.5, 25.0), (8.0, 25.0), (8.5, 25.5), (100, 300)])
def test_soundings_lie_no_farther_apart_than_three_depths_or_25_m(
    order: str, depth: float, distance: float
) -> None:
    # S-44 §3.5.2: three times the depth or 25 m, whichever is greater.
    assert limit(order, "sounding_distance", depth) == pytest.approx(distance)


@pytest.mark.parametrize("order", ["s44-exclusive", "s44-special"])
def test_orders_that_demand_full_coverage_have_no_distance_between_soundings(order: str) -> None:
    assert "sounding-distance" not in sheet_of(order).rules


@pytest.mark.parametrize("order", ["s44-1b", "s44-2"])
def test_the_distance_between_soundings_is_a_requirement_where_coverage_is_partial(
    order: str,
) -> None:
    assert sheet_of(order).rules["sounding-distance"].severity == "out of spec"


def test_what_order_1a_allows_at_37_m_is_one_page() -> None:
    sheet = sheet_of("s44-1a")
    here = OnePing(sheet, {"reduced_depth": 37.0, "depth": 37.0})
    # √(0.5² + (0.013·37)²) = 0.6938; 5 + 0.05·37 = 6.85
    assert "= 0.6938 m at reduced_depth 37 m" in explain("vertical-uncertainty", sheet, here, 100)
    assert "= 6.85 m at reduced_depth 37 m" in explain("horizontal-uncertainty", sheet, here, 100)
    assert "= 2 m at reduced_depth 37 m" in explain("target_size", sheet, here, 100)


@pytest.mark.parametrize("order", ORDERS)
def test_what_a_ping_log_cannot_show_is_listed_with_its_clause(order: str) -> None:
    rules = sheet_of(order).rules
    for name in (
        "feature-search",
        "bathymetric-coverage",
        "cross-lines",
        "water-levels",
        "metadata",
    ):
        assert rules[name].not_from_pings
        assert rules[name].clause
    assert rules["vertical-uncertainty"].clause.startswith("Table 1")


@pytest.mark.parametrize(
    ("order", "search", "coverage"),
    [
        ("s44-exclusive", "200 %", "200 %"),
        ("s44-special", "100 %", "100 %"),
        ("s44-1a", "100 %", "100 %"),
        ("s44-1b", "recommended", "5 %"),
        ("s44-2", "recommended", "5 %"),
    ],
)
def test_search_and_coverage_are_those_of_table_1(order: str, search: str, coverage: str) -> None:
    rules = sheet_of(order).rules
    assert search in rules["feature-search"].title
    assert coverage in rules["bathymetric-coverage"].title


@pytest.mark.parametrize("order", ORDERS)
def test_units_of_the_limits_are_metres(order: str) -> None:
    limits = sheet_of(order).limits
    assert {limits[n].unit for n in ("tvu_allowed", "thu_allowed", "target_size")} == {METRE}


# On a line: a swath over a seabed that shelves from 30 to 50 m, pings one by one.


def shelving(memory_log: Any, n: int = 60) -> tuple[Any, np.ndarray]:
    depth = np.repeat(np.linspace(30.0, 50.0, n)[:, None], 21, axis=1)
    angles = np.broadcast_to(np.linspace(-40.0, 40.0, 21), (n, 21)).copy()
    log = memory_log(
        np.arange(n) * 0.2,
        {"speed": 2.0, "tide": 0.0},
        {"depth": depth, "beam_angle": angles, "accepted": np.ones((n, 21))},
    )
    return log, depth[:, 0]


def test_the_feature_size_of_order_1a_follows_the_depth_ping_by_ping(
    run: Any, memory_log: Any, multibeam: Any
) -> None:
    log, depth = shelving(memory_log)
    # A pulse that resolves 2.5 m: too coarse for 2 m, fine where 10 % of the depth is 4 m or more.
    stated = {**multibeam, "pulse_length": 2 * 2.5 / 1500.0}
    found = run(log, stated, sheet="s44-1a")
    last = int(np.flatnonzero(depth <= 40.0)[-1])
    assert found.spans("range-resolution") == [("", 0, last)]
    assert found.rule("range-resolution").pings_missed == last + 1


def test_vertical_uncertainty_is_judged_by_the_depth_of_each_ping(
    run: Any, memory_log: Any, multibeam: Any
) -> None:
    log, _ = shelving(memory_log)
    sigma = {
        "sound_speed_sigma": 0.5,
        "surface_sound_speed_sigma": 0.5,
        "roll_sigma": 0.02,
        "pitch_sigma": 0.02,
        "heave_sigma": 0.05,
        "draught_sigma": 0.02,
        "squat_sigma": 0.02,
        "tide_sigma": 0.05,
        "range_sigma": 0.02,
        "heading_sigma": 0.1,
        "position_sigma": 0.5,
    }
    result = run(log, {**multibeam, **sigma}, sheet="s44-1a").result
    limits = result.rules["vertical-uncertainty"].limit
    assert limits[0] == pytest.approx(math.hypot(0.5, 0.013 * 30.0))
    assert limits[-1] == pytest.approx(math.hypot(0.5, 0.013 * 50.0))
    assert result.rules["horizontal-uncertainty"].limit[-1] == pytest.approx(5.0 + 0.05 * 50.0)
