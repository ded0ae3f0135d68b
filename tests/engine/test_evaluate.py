"""Verdicts, sections and origins of one line, against numbers reckoned by hand here."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pytest

from qa.model.findings import MET, MISSED, NOT_ASSESSED

TARGET = {"target_size": "1 m", "hits_required": 3}


def test_clean_line_is_in_spec_everywhere(run: Any, swath: Any, multibeam: dict[str, Any]) -> None:
    found = run(swath(interval=0.06), multibeam, TARGET)
    verdicts = {r.id: r.verdict for r in found.result.finding.rules}
    for rule in (
        *("ping-interval", "echo-in-time", "clock", "ping-gap", "range-resolution"),
        *("across-resolution", "along-resolution", "footprint-growth", "pings-on-target"),
        *("ping-spacing", "ping-pace", "ping-number", "pulse-cycles", "blind-zone", "beam-loss"),
    ):
        assert verdicts[rule] == "in spec", rule
    assert "out of spec" not in verdicts.values()
    # What was neither logged nor stated is not taken for met.
    for rule in ("speed", "swath-width", "yaw-gap", "time-depth", "vertical-uncertainty"):
        assert verdicts[rule] == "not assessed", rule
    assert found.result.finding.verdict == "in spec"
    assert found.result.sections == ()


def test_ping_sooner_than_its_echo_is_out_of_spec(
    run: Any, swath: Any, multibeam: dict[str, Any]
) -> None:
    log = swath(depth=60.0)
    listening = 2 * 60.0 / math.cos(math.radians(40.0)) / 1500.0 + 60e-6
    times = np.full(60, listening * 1.3)
    times[20:35] = listening * 0.8
    log.time = np.concatenate([[0.0], np.cumsum(times)[:-1]])
    found = run(log, multibeam, {"target_size": "5 m"})
    assert found.spans("ping-interval") == [("", 20, 34)]
    assert found.spans("echo-in-time") == [("", 20, 34)]
    section = found.sections("ping-interval")[0]
    assert section.first_ping == 120
    assert section.worst == pytest.approx(listening * 0.8, rel=1e-6)
    assert section.limit == pytest.approx(listening, rel=1e-6)
    assert section.margin == pytest.approx(-0.2, abs=1e-6)
    assert "Hz or slower" in section.remedy
    assert found.rule("ping-interval").verdict == "out of spec"
    assert found.rule("clock").verdict == "in spec"


def test_last_pings_have_no_interval_and_are_exempt(
    run: Any, swath: Any, multibeam: dict[str, Any]
) -> None:
    rule = run(swath(), {**multibeam, "pings_in_water": 2.0}, TARGET).rule("ping-interval")
    assert (rule.pings_assessed, rule.pings_exempt, rule.pings_not_assessed) == (58, 2, 0)


def test_paired_pings_are_judged_by_their_span(
    run: Any, swath: Any, multibeam: dict[str, Any]
) -> None:
    log = swath(depth=60.0)
    listening = 2 * 60.0 / math.cos(math.radians(40.0)) / 1500.0 + 60e-6
    pair = np.tile([0.1 * listening, 1.1 * listening], 30)
    log.time = np.concatenate([[0.0], np.cumsum(pair)[:-1]])
    clean = run(log, {**multibeam, "pings_in_water": 2.0}, {"target_size": "5 m"})
    assert clean.result.sections == ()
    wrong = run(log, multibeam, {"target_size": "5 m"})
    assert wrong.rule("ping-interval").verdict in ("out of spec", "not assessed")


def test_stamps_of_arrival_keep_timing_rules_from_being_assessed(
    run: Any, swath: Any, multibeam: dict[str, Any]
) -> None:
    log = swath(depth=60.0, interval=0.2)
    late = np.array(log.time)
    late[10:30:2] += 0.17
    log.time = late
    found = run(log, multibeam, {"target_size": "5 m"})
    assert found.sections("ping-interval") == []
    assert found.rule("ping-interval").pings_not_assessed == 10
    assert found.spans("clock") == [("", 10, 28)]
    assert found.rule("clock").severity == "advisory"
    assert found.result.finding.verdict == "in spec"


def test_clock_set_back_is_the_clocks_fault_alone(
    run: Any, swath: Any, multibeam: dict[str, Any]
) -> None:
    log = swath()
    log.time = np.concatenate([log.time[:30], log.time[30:] - 1.5])
    found = run(log, multibeam, TARGET)
    assert found.spans("clock") == [("", 30, 30)]
    assert [s.rule for s in found.result.sections if s.severity == "out of spec"] == []


def test_gap_is_one_pings(run: Any, swath: Any, multibeam: dict[str, Any]) -> None:
    log = swath()
    log.time = np.concatenate([log.time[:30], log.time[30:] + 0.25])
    found = run(log, multibeam, {"target_size": "2 m", "hits_required": 1})
    assert found.spans("ping-gap") == [("", 29, 29)]


def test_range_resolution_by_form_of_pulse(run: Any, swath: Any, multibeam: dict[str, Any]) -> None:
    long = {**multibeam, "pulse_length": 2e-3}
    assert run(swath(), long, TARGET).rule("range-resolution").worst == pytest.approx(1.5)
    swept = {**long, "pulse_form": "FM", "bandwidth": 30e3}
    assert run(swath(), swept, TARGET).rule("range-resolution").worst == pytest.approx(0.025)
    unsure = {k: v for k, v in swept.items() if k != "pulse_form"}
    assert run(swath(), unsure, TARGET).rule("range-resolution").verdict == "not assessed"
    plain = {k: v for k, v in multibeam.items() if k != "pulse_form"}
    found = run(swath(), plain, TARGET)
    assert found.rule("range-resolution").worst == pytest.approx(0.045)
    assert any("unknown form" in a.reason for a in found.result.assumptions)


def test_outer_beams_footprint_is_exact_and_steered(
    run: Any, swath: Any, multibeam: dict[str, Any]
) -> None:
    found = run(swath(fan=60.0), multibeam, TARGET)
    half = math.radians(0.5 / math.cos(math.radians(60.0)))
    beta = math.radians(60.0)
    expected = 20.0 * (math.tan(beta + half) - math.tan(beta - half))
    rule = found.rule("across-resolution")
    assert rule.worst == pytest.approx(expected, rel=1e-9)
    assert rule.verdict == "out of spec"
    assert found.spans("across-resolution") == [("", 0, 59)]
    curved = run(swath(fan=60.0), {**multibeam, "receive_array": "curved"}, TARGET)
    narrow = math.radians(0.5)
    assert curved.rule("across-resolution").worst == pytest.approx(
        20.0 * (math.tan(beta + narrow) - math.tan(beta - narrow)), rel=1e-9
    )


def test_rejected_beams_count_for_nothing(run: Any, swath: Any, multibeam: dict[str, Any]) -> None:
    log = swath(interval=0.06)
    log.beams["depth"][10:20, 3] = 500.0
    log.beams["accepted"][10:20, 3] = 0.0
    found = run(log, multibeam, TARGET)
    assert found.result.sections == ()
    log.beams["accepted"][10:20, 3] = 1.0
    assert run(log, multibeam, TARGET).spans("along-resolution") == [("", 10, 19)]


def test_array_angles_are_turned_by_roll(run: Any, swath: Any, multibeam: dict[str, Any]) -> None:
    level = run(swath(), multibeam, TARGET)
    log = swath(roll=5.0)
    log.beams["beam_angle"] += 5.0
    rolled = run(log, {**multibeam, "beam_angle_from": "array"}, TARGET)
    # The same ground from the same height; only the steering differs, by the roll.
    assert rolled.rule("along-resolution").worst == pytest.approx(
        level.rule("along-resolution").worst
    )
    assert rolled.rule("across-resolution").worst > level.rule("across-resolution").worst


def test_depression_angles_count_from_the_horizontal(
    run: Any, swath: Any, multibeam: dict[str, Any]
) -> None:
    level = run(swath(), multibeam, TARGET)
    log = swath()
    angle = log.beams["beam_angle"]
    log.beams["beam_angle"] = np.where(angle >= 0, 90.0 - angle, -(90.0 + angle))
    turned = run(log, {**multibeam, "beam_angle_from": "horizontal"}, TARGET)
    for rule in ("along-resolution", "across-resolution"):
        assert turned.rule(rule).worst == pytest.approx(level.rule(rule).worst)


@pytest.mark.parametrize(
    ("depth_from", "expected"),
    [("waterline", 17.0), ("transducer", 20.0), ("datum", 20.0 + 2.0 - 3.0 + 0.5)],
)
def test_height_follows_what_depths_are_from(
    run: Any, swath: Any, multibeam: dict[str, Any], depth_from: str, expected: float
) -> None:
    stated = {**multibeam, "transducer_depth": 3.0}
    given = frozenset({"survey.depth_from"})
    found = run(swath(tide=2.0, heave=0.5), stated, TARGET, depth_from=depth_from, given=given)
    worst = 2 * expected / math.cos(math.radians(40.0)) * math.tan(math.radians(0.5))
    assert found.rule("along-resolution").worst == pytest.approx(worst)


def test_datum_depths_without_tide_leave_ranges_unassessed(
    run: Any, swath: Any, multibeam: dict[str, Any]
) -> None:
    given = frozenset({"survey.depth_from"})
    found = run(swath(heave=0.0), multibeam, TARGET, depth_from="datum", given=given)
    rule = found.rule("along-resolution")
    assert rule.verdict == "not assessed"
    assert "tide" in rule.reason


def test_missing_target_is_named(run: Any, swath: Any, multibeam: dict[str, Any]) -> None:
    rule = run(swath(), multibeam).rule("range-resolution")
    assert (rule.verdict, rule.reason) == ("not assessed", "target_size is not stated")
    assert rule.pings_not_assessed == 60


def test_what_is_stated_but_must_be_logged_is_said_to_be_not_logged(
    run: Any, swath: Any, multibeam: dict[str, Any]
) -> None:
    assert "sound_speed" in multibeam
    found = run(swath(20), multibeam, {}).rule("sound-speed")
    assert found.verdict == "not assessed"
    assert "sound_speed is not logged" in found.reason
    assert "temperature and salinity are neither logged nor stated" in found.reason


def test_missing_setting_is_named(run: Any, swath: Any, multibeam: dict[str, Any]) -> None:
    stated = {k: v for k, v in multibeam.items() if k != "beamwidth_along"}
    rule = run(swath(), stated, TARGET).rule("along-resolution")
    assert rule.verdict == "not assessed"
    assert "beamwidth_along" in rule.reason


def test_a_ping_without_a_value_ends_a_section(
    run: Any, swath: Any, multibeam: dict[str, Any]
) -> None:
    length = np.full(60, 2e-3)
    length[25] = np.nan
    found = run(
        swath(pulse_length=length),
        {k: v for k, v in multibeam.items() if k != "pulse_length"},
        TARGET,
    )
    assert found.spans("range-resolution") == [("", 0, 24), ("", 26, 59)]
    assert found.rule("range-resolution").pings_not_assessed == 1


def test_hits_are_those_of_the_handbook(run: Any, swath: Any, multibeam: dict[str, Any]) -> None:
    log = swath(speed=4.0)
    footprint = 2 * 20.0 * math.tan(math.radians(0.5))
    hits = math.floor((1.0 + footprint) / (4.0 * 0.1))
    found = run(log, multibeam, {**TARGET, "hits_required": hits})
    assert found.rule("pings-on-target").worst == hits
    assert found.rule("pings-on-target").verdict == "in spec"
    tight = run(log, multibeam, {**TARGET, "hits_required": hits + 1})
    assert tight.rule("pings-on-target").verdict == "out of spec"


def test_spacing_wider_than_the_footprint(run: Any, swath: Any, multibeam: dict[str, Any]) -> None:
    found = run(swath(speed=5.0), multibeam, {**TARGET, "hits_required": 1})
    footprint = 2 * 20.0 * math.tan(math.radians(0.5))
    assert found.rule("ping-spacing").limit == pytest.approx(footprint)
    assert found.rule("ping-spacing").worst == pytest.approx(0.5)
    assert found.rule("ping-spacing").verdict == "out of spec"


def test_one_ping_with_much_unseen_ground_is_a_section(
    run: Any, swath: Any, multibeam: dict[str, Any]
) -> None:
    log = swath()
    log.time = np.concatenate([log.time[:30], log.time[30:] + 0.9])
    found = run(log, multibeam, TARGET)
    assert found.spans("ping-spacing") == [("", 29, 29)]


def test_side_scan_beams_are_made_at_near_and_far_range(run: Any, memory_log: Any) -> None:
    n = 80
    log = memory_log(
        np.concatenate([np.arange(40), np.arange(40)]) * 0.15,
        {"altitude": 12.0, "range_scale": 75.0, "speed": 1.5},
        channels=(("port", 40), ("starboard", 40)),
    )
    stated = {
        "kind": "side-scan",
        "pulse_length": 100e-6,
        "pulse_form": "CW",
        "beamwidth_along": 0.6,
        "sound_speed": 1500.0,
    }
    found = run(log, stated, {**TARGET, "near_range": "15 m"})
    assert found.rule("along-resolution").worst == pytest.approx(
        2 * 75.0 * math.tan(math.radians(0.3))
    )
    delta = 0.075
    across = math.sqrt((15 + delta) ** 2 - 144) - math.sqrt(225 - 144)
    assert found.rule("across-resolution").worst == pytest.approx(across)
    footprint = 2 * 15.0 * math.tan(math.radians(0.3))
    assert found.rule("pings-on-target").worst == math.floor((1.0 + footprint) / 0.225)
    assert "footprint-growth" not in {r.id for r in found.result.finding.rules}
    assert found.rule("ping-interval").pings_exempt == 2
    unstated = run(log, stated, TARGET)
    assert unstated.rule("pings-on-target").reason == "near_range is not stated"
    assert n == found.result.finding.pings


def test_channels_that_log_different_columns_have_their_own_origins(
    run: Any, memory_log: Any
) -> None:
    scale = np.concatenate([np.full(40, 75.0), np.full(40, np.nan)])
    log = memory_log(
        np.concatenate([np.arange(40), np.arange(40)]) * 0.15,
        {"altitude": 12.0, "range_scale": scale},
        channels=(("port", 40), ("starboard", 40)),
    )
    stated = {"kind": "side-scan", "pulse_length": 100e-6, "sound_speed": 1500.0}
    rule = run(log, stated, {"target_size": "1 m"}).rule("ping-interval")
    assert (rule.pings_assessed, rule.pings_not_assessed, rule.pings_exempt) == (39, 40, 1)


def test_single_beam_is_taken_from_the_logs_shape(run: Any, memory_log: Any) -> None:
    log = memory_log(np.arange(50) * 0.2, {"speed": 2.0}, {"depth": np.full(50, 10.0)})
    stated = {"pulse_length": 100e-6, "beamwidth_along": 5.0, "sound_speed": 1500.0}
    found = run(log, stated, TARGET)
    assert found.result.finding.kind == "single-beam"
    assert {"kind", "transducer_depth", "beamwidth_across"} <= {
        a.name for a in found.result.assumptions
    }
    expected = 2 * 10.0 * math.tan(math.radians(2.5))
    assert found.rule("footprint-growth").worst == pytest.approx(expected)
    assert found.rule("across-resolution").worst == pytest.approx(expected)


@pytest.mark.parametrize("rows", [21, 50, 1000, 100_000])
def test_no_result_depends_on_the_size_of_batches(
    run: Any, swath: Any, multibeam: dict[str, Any], rows: int
) -> None:
    log = swath(depth=30.0, fan=55.0)
    log.beams["depth"] += np.random.default_rng(1).normal(0, 1.0, log.beams["depth"].shape)
    whole = run(log, multibeam, TARGET)
    parts = run(log, multibeam, TARGET, rows=rows)
    assert parts.result.finding == whole.result.finding
    assert parts.result.sections == whole.result.sections


def test_statuses_and_sections_agree(run: Any, swath: Any, multibeam: dict[str, Any]) -> None:
    log = swath(depth=30.0)
    log.beams["depth"][7] = 90.0
    log.beams["depth"][30:33] = 90.0
    found = run(log, multibeam, TARGET)
    series = found.result.rules["along-resolution"]
    assert np.flatnonzero(series.status == MISSED).tolist() == [7, 30, 31, 32]
    assert found.spans("along-resolution") == [("", 30, 32)]
    rule = found.rule("along-resolution")
    assert (rule.pings_missed, rule.pings_stray, rule.verdict) == (4, 1, "out of spec")
    assert (series.status == MET).sum() == 56
    assert (series.status == NOT_ASSESSED).sum() == 0


def test_evidence_leads_from_the_section_to_the_inputs(
    run: Any, swath: Any, multibeam: dict[str, Any]
) -> None:
    section = run(swath(depth=80.0), multibeam, TARGET).sections("along-resolution")[0]
    evidence = {e.name: e for e in section.evidence}
    assert evidence["footprint_along"].formula == "2R·tan(φ/2)"
    assert evidence["depth"].origin == "logged"
    assert evidence["beamwidth_along"].origin == "stated"
    assert evidence["depth"].value == 80.0


def test_columns_that_a_sheet_requires(
    run: Any, swath: Any, multibeam: dict[str, Any], tmp_path: Any
) -> None:
    sheet = tmp_path / "contract.toml"
    sheet.write_text(
        'extends = ["physics"]\n[rule.required-columns]\ncolumns = ["roll", "depth", "accepted"]\n',
        encoding="utf-8",
    )
    roll = np.zeros(60)
    complete = run(swath(roll=roll), multibeam, TARGET, sheet)
    assert complete.rule("required-columns").verdict == "in spec"
    roll[20:30] = np.nan
    gone = run(swath(roll=roll), multibeam, TARGET, sheet)
    assert gone.spans("required-columns") == [("", 20, 29)]
    absent = run(swath(), multibeam, TARGET, sheet).rule("required-columns")
    assert absent.verdict == "out of spec"
    assert "not in the log: roll" in absent.reason
    shipped = run(swath(), multibeam, TARGET).rule("required-columns")
    assert shipped.verdict == "not assessed"


def test_a_clock_coarser_than_a_margin_says_so(
    run: Any, swath: Any, multibeam: dict[str, Any]
) -> None:
    listening = 2 * 60.0 / math.cos(math.radians(40.0)) / 1500.0 + 60e-6
    log = swath(depth=60.0, interval=listening + 0.004)
    log.time_resolution = 0.01
    assert run(log, multibeam, TARGET).spans("clock") == [("", 0, 58)]
    log.time_resolution = 0.001
    assert run(log, multibeam, TARGET).spans("clock") == []


@pytest.mark.parametrize("form", ["CW", "FM"])
def test_a_condition_on_the_pulse_form_holds_for_a_stated_as_for_a_logged_form(
    run: Any, swath: Any, multibeam: dict[str, Any], tmp_path: Any, form: str
) -> None:
    sheet = tmp_path / "contract.toml"
    sheet.write_text(
        "[rule.swept]\nwhen = \"pulse_form == 'FM'\"\nrequire = 'pulse_length >= 1*ms'\n",
        encoding="utf-8",
    )
    stated = {**multibeam, "pulse_form": form, "bandwidth": 30e3}
    unstated = {k: v for k, v in stated.items() if k != "pulse_form"}
    logged = swath(pulse_form=float(form == "FM"))
    missed = [
        [r.pings_missed for r in run(log, facts, None, sheet).result.finding.rules]
        for log, facts in ((swath(), stated), (logged, unstated))
    ]
    # A rule on FM pulses: every ping of an FM line misses it; a CW line is exempt, ping by ping or as a whole.
    assert missed == ([[60], [60]] if form == "FM" else [[], [0]])
