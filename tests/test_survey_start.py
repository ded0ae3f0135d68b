"""The columns command: what it prints, which rules wait for what, and the survey file that it writes."""

from __future__ import annotations

import re
from pathlib import Path

import pytest
from typer.testing import CliRunner

import qa
from qa.cli import app
from qa.model.columns import COLUMNS
from qa.model.errors import OutputError
from qa.model.survey_file import STATED, load_survey_file
from qa.survey_start import Start, describe

ROOT = Path(__file__).resolve().parent.parent
SAMPLE = ROOT / "sample_logs"
BAY = ROOT / "tests" / "data" / "bay"
LOG = SAMPLE / "single_beam" / "CK01.csv"


def run(*arguments: object) -> tuple[int, str]:
    done = CliRunner().invoke(app, ["columns", *map(str, arguments)])
    return done.exit_code, done.output


def unmarked(text: str) -> str:
    """A survey file whose suggestions are all said."""
    return re.sub(r"(?m)^# (\w+ += )", r"\1", text)


def test_every_line_fits_a_terminal_of_80_columns(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(ROOT)
    logs = "sample_logs"
    for start in (
        describe([f"{logs}/side_scan", f"{logs}/single_beam"], f"{logs}/survey.toml"),
        describe([f"{logs}/side_scan"]),
        describe(["tests/data/bay"]),
    ):
        text = start.text()
        assert text
        assert max(map(len, text.splitlines())) <= 80


def test_each_recognised_column_is_printed_with_its_own_name_and_unit() -> None:
    status, text = run(LOG)
    assert status == 0
    assert re.search(r'depth +"Depth \(ft\)" +ft \(header\) +none', text)
    assert re.search(r'time +"Date" \+ "Time"', text)
    assert re.search(r'latitude +"Latitude" +deg \(none given\)', text)


def test_rules_wait_for_what_the_audit_says_they_lack() -> None:
    """The plan that is made here and the audit's own verdicts are of one mind."""
    for logs, survey in (
        ([LOG], None),
        ([SAMPLE / "multibeam" / "VH101_approach.parquet"], None),
        ([SAMPLE / "side_scan" / "FW01.csv"], None),
        ([LOG], SAMPLE / "survey.toml"),
        ([SAMPLE / "side_scan" / "FW01.csv"], SAMPLE / "survey.toml"),
    ):
        waits = describe(logs, survey).waiting[0]
        findings = qa.audit(logs, survey)
        known = {limit["name"] for limit in findings.limits} | COLUMNS.keys()
        known |= {key for keys in STATED.values() for key in keys} | {"cast", "bottom_track_fault"}
        assert waits.kind == findings.lines[0].kind
        for rule in findings.rules:
            lacks = "logged" in rule.reason or "stated" in rule.reason
            if rule.id in waits.waiting:
                assert rule.verdict == "not assessed", rule.id
                assert lacks, (rule.id, rule.reason)
                names = {n for n, rules in waits.missing.items() if rule.id in rules}
                told = set(re.findall(r"\w+", rule.reason)) & known
                # An audit names what it met first; more may be lacking behind it.
                assert told, (rule.id, rule.reason)
                assert told <= names, (rule.id, rule.reason, names)
            elif rule.id in waits.assessable:
                assert not lacks, (rule.id, rule.reason)
            else:
                assert rule.id in (*waits.never, *waits.exempt), rule.id
        assumed = {a.name for a in findings.assumptions}
        assert set(waits.assumed) <= assumed


def test_a_missing_column_names_the_rules_that_it_keeps_from_being_assessed() -> None:
    waits = describe([LOG]).waiting[0]
    assert "range-resolution" in waits.missing["pulse_length"]
    stated = describe([LOG], SAMPLE / "survey.toml").waiting[0]
    assert "pulse_length" not in stated.missing
    assert "range-resolution" in stated.assessable


def test_a_log_that_cannot_be_used_is_told_beside_those_that_can(tmp_path: Path) -> None:
    (tmp_path / "bad.csv").write_text("a,b\n1,2\n", "utf-8")
    status, text = run(LOG, tmp_path / "bad.csv")
    assert status == 2
    assert "Not usable" in text
    assert "bad.csv" in text
    assert "Depth (ft)" in text


def sample_start() -> Start:
    return describe([SAMPLE / name for name in ("multibeam", "side_scan", "single_beam")])


@pytest.mark.parametrize("name", ["single_beam", "side_scan", "multibeam"])
def test_the_written_file_loads_and_audits_the_same_logs(tmp_path: Path, name: str) -> None:
    target = tmp_path / "start.toml"
    logs = sorted((SAMPLE / name).iterdir())[:2]
    status, text = run(*logs, "--write", target)
    assert status == 0
    assert str(target) in text.replace("\n", "")
    load_survey_file(target)
    plain, started = qa.audit(logs), qa.audit(logs, target)
    assert [(r.id, r.verdict, r.worst) for r in started.rules] == [
        (r.id, r.verdict, r.worst) for r in plain.rules
    ]


def test_every_suggestion_of_the_written_file_is_valid_once_it_is_said(tmp_path: Path) -> None:
    start = sample_start()
    target = tmp_path / "start.toml"
    start.write(target)
    said = unmarked(target.read_text("utf-8"))
    assert "\nbeamwidth_along" in said
    assert "\ntarget_size" in said
    full = tmp_path / "full.toml"
    full.write_text(said, "utf-8")
    survey = load_survey_file(full)
    assert survey.for_log(SAMPLE / "side_scan" / "FW01.csv").stated["kind"] == "side-scan"
    assert survey.for_log(LOG).stated["kind"] == "single-beam"
    again = describe([SAMPLE / "single_beam", SAMPLE / "side_scan"], full)
    statable = {key for keys in STATED.values() for key in keys}
    for layout, waits, sheet in zip(
        again.description.layouts, again.waiting, again.sheets, strict=True
    ):
        # What still lacks can only be logged, be in a cast, or not be had at all.
        lacking = waits.missing.keys() - layout.survey.stated.keys()
        assert not lacking & (statable | sheet.limits.keys())


def test_what_is_said_already_is_carried_over(tmp_path: Path) -> None:
    folder = tmp_path / "elsewhere"
    folder.mkdir()
    target = folder / "start.toml"
    logs = [LOG, SAMPLE / "side_scan" / "FW03.csv"]
    status, _ = run(*logs, "--survey", SAMPLE / "survey.toml", "--write", target)
    assert status == 0
    before, after = qa.audit(logs, SAMPLE / "survey.toml"), qa.audit(logs, target)
    assert after.rules == before.rules
    assert after.sections == before.sections


def test_logs_without_a_header_start_from_their_order(tmp_path: Path) -> None:
    known = tmp_path / "bay.toml"
    known.write_text(
        '[columns]\norder = ["latitude", "longitude", "depth", "temperature", "time"]\n'
        '[columns.units]\ndepth = "m"\n',
        "utf-8",
    )
    target = tmp_path / "start.toml"
    assert run(BAY, "--survey", known, "--write", target)[0] == 0
    assert describe([BAY], target).waiting == describe([BAY], known).waiting
    bare = tmp_path / "bare.toml"
    assert run(BAY, "--write", bare)[0] == 2
    load_survey_file(bare)
    assert '# order            = ["time", "depth"]' in bare.read_text("utf-8")


def test_awkward_names_survive_the_written_file(tmp_path: Path) -> None:
    log = tmp_path / 'li"ne [1].csv'
    rows = "".join(f"2024-05-14T08:00:{i:02d}Z,10,1,2\n" for i in range(20))
    log.write_text('time,"Z ""snd"" \\ ü",range,Speed (furlong)\n' + rows, "utf-8")
    known = tmp_path / "known.toml"
    known.write_text("[columns]\ndepth = 'Z \"snd\" \\ ü'\n", "utf-8")
    target = tmp_path / "start.toml"
    status, text = run(log, LOG, "--survey", known, "--write", target)
    assert status == 0, text
    assert load_survey_file(target).columns.names["depth"] == 'Z "snd" \\ ü'
    assert describe([log], target).description.layouts[0].column("depth") is not None
    assert "range_scale (the setting" in target.read_text("utf-8")


def test_a_file_that_is_there_is_left_as_it_was(tmp_path: Path) -> None:
    target = tmp_path / "survey.toml"
    target.write_text("[survey]\n", "utf-8")
    with pytest.raises(OutputError, match="left as it is"):
        CliRunner().invoke(
            app, ["columns", str(LOG), "--write", str(target)], catch_exceptions=False
        )
    assert target.read_text("utf-8") == "[survey]\n"
    with pytest.raises(OutputError, match="left as it is"):
        sample_start().write(target)


def test_what_is_stated_is_not_called_missing() -> None:
    _, text = run(
        SAMPLE / "multibeam" / "VH101_approach.parquet", "--survey", SAMPLE / "survey.toml"
    )
    stated = text.partition("Not logged, and stated")[2].partition("Not logged, and no rule")[0]
    assert {"frequency", "pulse_length"} <= set(re.findall(r"\w+", stated))
    assert "frequency:" not in text


def test_quiet_prints_nothing() -> None:
    assert run(LOG, "--quiet") == (0, "")
