"""Every shipped sheet does an audit, and those of C-13 chapter 4 come to the handbook's own figures."""

from __future__ import annotations

import math
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest

import qa
from qa.engine.one_ping import OnePing
from qa.engine.sheets import load_sheet, shipped_sheets
from qa.model.survey_file import SurveyFile, load_survey_file

SAMPLE = Path(__file__).resolve().parent.parent.parent / "sample_logs"
LINES = ("multibeam/VH101_approach.parquet", "side_scan/FW01.csv", "single_beam/CK01.csv")
KNOT = 1852.0 / 3600.0


def sample_without_limits() -> SurveyFile:
    facts = load_survey_file(SAMPLE / "survey.toml")
    parts = tuple(
        (logs, {k: v for k, v in tables.items() if k != "limits"}) for logs, tables in facts.parts
    )
    return replace(facts, limits={}, parts=parts)


@pytest.mark.parametrize("name", shipped_sheets())
@pytest.mark.parametrize("own_limits", [True, False], ids=["sheet's limits", "survey's limits"])
def test_every_shipped_sheet_audits_the_sample(name: str, own_limits: bool) -> None:
    survey = sample_without_limits() if own_limits else SAMPLE / "survey.toml"
    found = qa.audit([SAMPLE / line for line in LINES], survey=survey, sheet=name)
    assert [line.error for line in found.lines] == [None] * len(LINES)
    assert found.exit_status in (0, 1)
    assert found.sheet["name"] == name
    assert {r.id for r in found.rules} == set(load_sheet(name).rules)
    for rule in load_sheet(name).rules.values():
        if rule.not_from_pings:
            told = next(r for r in found.rules if r.id == rule.id)
            assert (told.verdict, told.pings_assessed) == ("not assessed", 0)
            assert rule.not_from_pings in told.reason
    for told in found.rules:
        assert told.reason or told.verdict != "not assessed"
    for section in found.sections:
        assert "not known" not in section.reason


# The handbook's worked example: 1500 m/s, beam 1.5°, range scale 150 m, so a ping every 0.2 s; five pings.

HANDBOOK = {
    "kind": "side-scan",
    "sound_speed": 1500.0,
    "beamwidth_along": 1.5,
    "range_scale": 150.0,
    "frequency": 100e3,
    "pulse_length": 100e-6,
    "pulse_form": "CW",
}


def sweep(memory_log: Any, speed: float, height: float = 15.0, n: int = 40) -> Any:
    return memory_log(np.arange(n) * 0.2, {"speed": speed, "altitude": height})


@pytest.mark.parametrize(
    ("count", "target", "near", "speed", "rounding"),
    [
        # C-13 chapter 4 §2.3.7: greatest speeds, m/s, as the handbook rounds them.
        ("possible", "2.999 m", "25 m", 4.57, 0.005),
        ("guaranteed", "2.999 m", "25 m", 3.65, 0.005),
        ("possible", "0.999 m", "25 m", 2.067, 0.003),
        ("possible", "0.999 m", "72.5 m", 3.623, 0.003),
    ],
)
def test_five_pings_are_had_up_to_the_handbooks_speed(
    run: Any,
    memory_log: Any,
    tmp_path: Path,
    count: str,
    target: str,
    near: str,
    speed: float,
    rounding: float,
) -> None:
    sheet = tmp_path / "own.toml"
    sheet.write_text(
        f'extends = ["side-scan-sweep"]\n[rule.pings-on-target]\ncount = "{count}"\n', "utf-8"
    )
    limits = {"target_size": target, "near_range": near}

    def missed(v: float) -> int:
        found = run(sweep(memory_log, v), HANDBOOK, limits, sheet)
        rule = found.rule("pings-on-target")
        assert rule.pings_assessed
        return int(rule.pings_missed)

    assert missed(speed - rounding) == 0
    assert missed(speed + rounding) > 0


def test_the_sweep_counts_pings_by_eq_4_1() -> None:
    assert (
        load_sheet("side-scan-sweep").rules["pings-on-target"].text
        == "possible_hits >= hits_required"
    )


def test_following_the_remedy_of_the_sweep_puts_five_pings_on_the_target(
    run: Any, memory_log: Any
) -> None:
    limits = {"target_size": "1 m"}
    section = run(sweep(memory_log, 3.0), HANDBOOK, limits, "side-scan-sweep").sections(
        "pings-on-target"
    )[0]
    told = float(section.remedy.split("under ")[1].split(" kt")[0])
    assert told * KNOT < 2.07  # the handbook has 4.0 kt
    again = run(sweep(memory_log, told * KNOT), HANDBOOK, limits, "side-scan-sweep")
    assert again.rule("pings-on-target").pings_missed == 0


def test_the_handbooks_standard_sweep_is_in_spec(run: Any, memory_log: Any) -> None:
    # Table 4.4: lines 125 m apart, range scale 150 m, 6 or 8 kt; height a tenth of the range scale.
    for knots in (6.0, 8.0):
        limits = {"target_size": "3 m"}
        found = run(sweep(memory_log, knots * KNOT), HANDBOOK, limits, "side-scan-sweep")
        for rule in ("pings-on-target", "speed", "altitude", "range-scale", "ensonification"):
            assert found.rule(rule).pings_assessed, rule
            assert found.rule(rule).pings_missed == 0, rule


@pytest.mark.parametrize(
    ("rule", "stated", "speed", "height"),
    [
        ("speed", {}, 8.2 * KNOT, 15.0),
        ("altitude", {}, 3.0, 19.0),
        ("altitude", {}, 3.0, 11.0),
        ("range-scale", {"range_scale": 149.0}, 3.0, 15.0),
        ("ensonification", {"range_scale": 149.0}, 3.0, 15.0),
    ],
)
def test_a_sweep_that_leaves_the_handbooks_figures_is_told(
    run: Any, memory_log: Any, rule: str, stated: dict[str, float], speed: float, height: float
) -> None:
    log = sweep(memory_log, speed, height)
    found = run(log, {**HANDBOOK, **stated}, sheet="side-scan-sweep").rule(rule)
    assert found.pings_assessed
    assert found.pings_missed == found.pings_assessed


def test_ensonification_of_the_standard_sweep_is_240_percent() -> None:
    sheet = load_sheet("side-scan-sweep")
    here = OnePing(sheet, {"kind": "side-scan", "range_scale": 150.0})
    judged = here.judged(sheet.rules["ensonification"])
    assert judged is not None
    assert float(judged.value) == pytest.approx(2.40)


# The chance of finding an object, against trying it many times


@pytest.mark.parametrize("speed", [1.0, 1.2, 1.5, 2.0, 2.6])
def test_chance_of_finding_is_that_of_many_trials(run: Any, memory_log: Any, speed: float) -> None:
    limits = {"target_size": "1 m", "near_range": "25 m"}
    found = run(sweep(memory_log, speed), HANDBOOK, limits, "target-search")
    told = found.result.rules["confidence"].value
    # Pings that are sure to fall on it (C-13 eq. 4.2), of which each detects with 80 %; three are needed.
    sure = math.floor((1.0 + 25.0 * math.radians(1.5)) / (speed * 0.2))
    trials = np.random.default_rng(7).random((200_000, sure)) < 0.8
    chance = float(np.mean(trials.sum(axis=1) >= 3))
    assert np.nanmax(np.abs(told - chance)) < 0.005
    assert (found.rule("confidence").pings_missed > 0) == (chance < 0.95)


def test_a_search_without_the_objects_size_or_strength_is_not_assessed(
    run: Any, memory_log: Any
) -> None:
    found = run(sweep(memory_log, 2.0), HANDBOOK, {"near_range": "25 m"}, "target-search")
    assert found.rule("confidence").verdict == "not assessed"
    assert "target_size" in found.rule("confidence").reason
    assert "target_strength" in found.rule("target-margin").reason


# The contract


def test_the_example_contract_shows_each_kind_of_change() -> None:
    contract, base = load_sheet("contract-example"), load_sheet("s44-1a")
    assert set(base.rules) - set(contract.rules) == {"ping-pace", "sounding-distance"}
    assert set(contract.rules) - set(base.rules) == {"ping-rate", "report-delivered"}
    assert contract.rules["required-columns"].columns
    assert contract.limits["target_size"].origin == "contract-example"
    assert contract.limits["tvu_allowed"].origin == "s44-1a"
    assert contract.rules["pings-on-target"].allow == 0.01
    assert (base.rules["motion"].severity, contract.rules["motion"].severity) == (
        "advisory",
        "out of spec",
    )
    clauses = [
        r.clause for r in contract.rules.values() if "contract-example" in (r.sheet, *r.changed_by)
    ]
    assert all(clauses)


def test_a_copy_of_the_example_contract_is_a_valid_sheet_anywhere(tmp_path: Path) -> None:
    from qa.model.shipped import shipped

    text = (shipped("rules") / "contract-example.toml").read_text(encoding="utf-8")
    copy = tmp_path / "my-contract.toml"
    copy.write_text(text, encoding="utf-8")
    assert list(load_sheet(copy).rules) == list(load_sheet("contract-example").rules)
