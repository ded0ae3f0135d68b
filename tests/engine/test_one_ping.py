"""Values for one ping with stated values are those that an audit computes for such a ping."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest

from qa.engine.expressions import judge
from qa.engine.one_ping import OnePing
from qa.engine.sheets import load_sheet

LIMITS = {"target_size": "1 m", "hits_required": 3, "near_range": "15 m"}
SIDE_SCAN = {
    "kind": "side-scan",
    "frequency": 400e3,
    "pulse_length": 50e-6,
    "pulse_form": "CW",
    "beamwidth_along": 0.9,
    "range_scale": 75.0,
    "sound_speed": 1490.0,
}


def same_as_the_audit(run: Any, log: Any, stated: dict[str, Any], given: dict[str, float]) -> int:
    """Compare every ping quantity that both have; the number of them."""
    sheet = load_sheet("physics", None, LIMITS)
    columns = run(log, stated, LIMITS).result.columns
    here = OnePing(sheet, {**stated, **given})
    compared = 0
    for key, values in columns.items():
        value = None if key in given else here.value(key)
        if value is None or isinstance(value, str) or np.ndim(value) or np.isnan(values[5]):
            continue
        assert value == pytest.approx(values[5], rel=1e-9), key
        compared += 1
    return compared


def test_a_single_beam_ping(run: Any, memory_log: Any, multibeam: dict[str, Any]) -> None:
    n = 20
    log = memory_log(np.arange(n) * 0.2, {"speed": 2.0, "roll": 0.0}, {"depth": np.full(n, 24.0)})
    stated = {**multibeam, "kind": "single-beam"}
    given = {"depth": 24.0, "speed": 2.0, "roll": 0.0, "ping_span": 0.2}
    assert same_as_the_audit(run, log, stated, given) > 25


def test_a_side_scan_ping(run: Any, memory_log: Any) -> None:
    n = 20
    log = memory_log(np.arange(n) * 0.2, {"speed": 2.0, "altitude": 7.5})
    given = {"altitude": 7.5, "speed": 2.0, "ping_span": 0.2}
    assert same_as_the_audit(run, log, SIDE_SCAN, given) > 20


@pytest.mark.parametrize("rule", ["range-resolution", "pings-on-target", "along-resolution"])
def test_a_rule_is_judged_as_in_the_audit(run: Any, memory_log: Any, rule: str) -> None:
    n = 20
    log = memory_log(np.arange(n) * 0.2, {"speed": 2.0, "altitude": 7.5})
    sheet = load_sheet("physics", None, LIMITS)
    given = {**SIDE_SCAN, "altitude": 7.5, "speed": 2.0, "ping_span": 0.2}
    judged = OnePing(sheet, given).judged(sheet.rules[rule])
    assert judged is not None
    found = run(log, SIDE_SCAN, LIMITS).rule(rule)
    assert float(np.min(judged.margin)) == pytest.approx(found.margin)
    assert bool(np.all(judged.met)) == (found.pings_missed == 0)


def test_a_rule_that_does_not_apply_or_lacks_an_input_is_not_judged() -> None:
    sheet = load_sheet("physics", None, LIMITS)
    assert OnePing(sheet, {"kind": "side-scan"}).judged(sheet.rules["range-window"]) is None
    assert OnePing(sheet).judged(sheet.rules["pings-on-target"]) is None
    assert "pulse_length" in OnePing(sheet).missing("range_resolution")
    assert OnePing(sheet).missing("mean_sound_speed") == ()


@pytest.mark.parametrize(
    ("reduced", "value"),
    [
        ("greatest(slant_range)", 75.0),
        ("least(slant_range)", 15.0),
        ("mean(slant_range)", 45.0),
        ("spread(slant_range)", 60.0),
        ("nearest_vertical(slant_range)", 15.0),
        ("share(slant_range > 20*m)", 0.5),
        ("count(slant_range > 20*m)", 1.0),
    ],
)
def test_reducers_over_the_two_beams_of_a_side_scan(reduced: str, value: float) -> None:
    sheet = load_sheet("physics", None, LIMITS)
    assert OnePing(sheet, SIDE_SCAN).value(reduced) == pytest.approx(value)


def test_what_is_given_comes_before_what_would_be_computed() -> None:
    sheet = load_sheet("physics")
    given = {"depth": 20.0, "tide": 3.0, "reduced_depth": 37.0, "depth_from": "waterline"}
    here = OnePing(sheet, given)
    assert here.value("reduced_depth") == 37.0
    assert here.value("sounding_distance") == 111.0
    del given["reduced_depth"]
    assert OnePing(sheet, given).value("reduced_depth") == 17.0


def test_judging_uses_the_language_of_sheets() -> None:
    sheet = load_sheet("physics", None, LIMITS)
    here = OnePing(sheet, {"pulse_length": 1e-3, "pulse_form": "CW", "sound_speed": 1500.0})
    rule = sheet.rules["range-resolution"]
    assert rule.requirement is not None
    judged = here.judged(rule)
    assert judged is not None
    again = judge(rule.requirement, {"range_resolution": 0.75, "target_size": 1.0})
    assert float(judged.margin) == pytest.approx(float(again.margin))
