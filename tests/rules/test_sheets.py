"""The shipped sheets against the standards they put into numbers."""

from __future__ import annotations

import math
from pathlib import Path
from typing import Any

import pytest

import qa
from qa.engine.sheets import load_sheet, shipped_sheets

SAMPLE = Path(__file__).resolve().parents[2] / "sample_logs"
DEPTHS = (0.5, 1.0, 2.0, 5.0, 10.0, 20.0, 37.0, 39.99, 40.0, 40.01, 60.0, 100.0, 200.0, 500.0)
DEEP = (1000.0, 2500.0, 6000.0)

# IHO S-44 Edition 6.1.0, Table 1: a [m] and b of the TVU (§3.2.3), fixed part [m] and share of the THU,
# side of the cubic feature [m] (None: none stated)
TABLE_1: dict[str, tuple[float, float, float, float, float | None]] = {
    "s44-exclusive": (0.15, 0.0075, 1.0, 0.0, 0.5),
    "s44-special": (0.25, 0.0075, 2.0, 0.0, 1.0),
    "s44-1a": (0.5, 0.013, 5.0, 0.05, 2.0),
    "s44-1b": (0.5, 0.013, 5.0, 0.05, None),
    "s44-2": (1.0, 0.023, 20.0, 0.1, None),
}


def _at(sheet: str, limit: str, depth: float = math.nan) -> float | None:
    """A limit over a flat seabed of one depth; None where it is not stated."""
    expression = load_sheet(sheet).limits[limit].expression
    keys = ("reduced_depth", "least(reduced_depth)", "greatest(reduced_depth)")
    return None if expression is None else float(expression.run(dict.fromkeys(keys, depth)))


@pytest.mark.parametrize("order", TABLE_1)
@pytest.mark.parametrize("depth", (*DEPTHS, *DEEP))
def test_s44_limits_are_the_standards(order: str, depth: float) -> None:
    a, b, fixed, share, feature = TABLE_1[order]
    assert _at(order, "tvu_allowed", depth) == pytest.approx(math.sqrt(a**2 + (b * depth) ** 2))
    assert _at(order, "thu_allowed", depth) == pytest.approx(fixed + share * depth)
    if order == "s44-1a" and depth > 40.0:
        feature = 0.1 * depth
    found = _at(order, "target_size", depth)
    assert found == (None if feature is None else pytest.approx(feature))


@pytest.mark.parametrize("depth", DEPTHS)
def test_soundings_lie_as_near_as_s44_asks(depth: float) -> None:
    # S-44 §3.5.2: three times the depth or 25 m, whichever is greater
    assert _at("s44-1b", "sounding_distance", depth) == pytest.approx(max(3 * depth, 25.0))


def test_orders_that_ask_for_full_coverage_have_no_distance_between_soundings() -> None:
    for order in ("s44-special", "s44-exclusive"):
        assert "sounding-distance" not in load_sheet(order).rules
    assert load_sheet("s44-1b").rules["sounding-distance"].severity == "out of spec"


@pytest.mark.parametrize("order", TABLE_1)
def test_what_a_ping_log_cannot_show_is_listed_with_its_clause(order: str) -> None:
    rules = load_sheet(order).rules
    for rule in ("bathymetric-coverage", "feature-search", "cross-lines"):
        assert rules[rule].not_from_pings
        assert rules[rule].clause


def test_the_side_scan_sweep_is_reckoned_as_the_handbook_does() -> None:
    # C-13 chapter 4: five pings by eq. 4.1 at 25 m, no more than 8 kt, range scale 150 m
    sheet = load_sheet("side-scan-sweep")
    assert "possible_hits" in sheet.rules["pings-on-target"].text
    assert _at("side-scan-sweep", "hits_required") == 5
    assert _at("side-scan-sweep", "near_range") == 25.0
    assert _at("side-scan-sweep", "speed_limit") == pytest.approx(8 * 1852 / 3600)
    assert _at("side-scan-sweep", "sweep_range") == 150.0


@pytest.fixture(scope="module")
def audited() -> dict[str, Any]:
    return {
        name: qa.audit([SAMPLE / "single_beam", SAMPLE / "side_scan"], SAMPLE / "survey.toml", name)
        for name in shipped_sheets()
    }


@pytest.mark.parametrize("name", shipped_sheets())
def test_every_shipped_sheet_audits_the_sample(audited: dict[str, Any], name: str) -> None:
    findings = audited[name]
    assert [item.error for item in findings.inputs if item.error] == []
    assert {rule.id for rule in findings.rules} == set(load_sheet(name).rules)
    for rule in findings.rules:
        assert rule.verdict in ("in spec", "out of spec", "not assessed")
        if rule.verdict == "not assessed":
            assert rule.reason
    for section in findings.sections:
        assert "not known" not in section.reason


def test_a_contract_lays_its_own_numbers_over_the_order_it_extends() -> None:
    sheet = load_sheet("contract-example")
    assert sheet.limits["target_size"].origin == "contract-example"
    assert sheet.limits["tvu_allowed"].origin == "s44-special"
    assert sheet.rules["motion"].severity == "out of spec"
    assert sheet.rules["pings-on-target"].changed_by == ("s44-1a", "contract-example")
    assert "ping-pace" not in sheet.rules
