"""Every row of a log is accounted for, once, and a rejected row is kept with its number, its reason and its words."""

from __future__ import annotations

import csv
from collections import Counter
from pathlib import Path
from typing import Any

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

import qa
from qa.ingest import open_line, plan_logs
from qa.model.log import FileAccount
from qa.model.survey_file import SurveyFile, load_survey_file

HEADER = "time,ping,line,depth (m)"


def row(i: int, line: str = "A", depth: str = "10.5", time: str = "") -> str:
    return f"{time or f'2026-05-04T10:{i // 60 % 60:02d}:{i % 60:02d}Z'},{i},{line},{depth}"


WRECKED = {
    "depth": lambda i: row(i, depth="mud"),
    "negative": lambda i: row(i, depth="-3"),
    "time": lambda i: row(i, time="noon"),
    "old": lambda i: row(i, time="1970-01-01T00:00:00Z"),
    "short": lambda i: f"2026-05-04T10:00:00Z,{i}",
    "long": lambda i: row(i) + ",1,2,3",
    "quote": lambda i: row(i, line='"A'),
    "ping": lambda i: row(i).replace(f",{i},", ",half,", 1),
}
NO_ROWS = ("", "   ", "# a remark")


def accounts_of(path: Path, survey: SurveyFile) -> list[FileAccount]:
    plan = plan_logs([path], survey)
    assert plan.inputs == ()
    return [a for task in plan.lines for a in open_line(task, survey).accounts()]


def survey_with(folder: Path, text: str) -> SurveyFile:
    path = folder / "survey.toml"
    path.write_text(text, encoding="utf-8")
    return load_survey_file(path)


@st.composite
def logs(draw: st.DrawFn) -> tuple[list[str], dict[int, str], int]:
    """Lines of a log, its wrecked rows by their number in the file, and how many rows are sound."""
    kinds = draw(
        st.lists(
            st.sampled_from(["sound"] * 12 + sorted(WRECKED) + ["none"]), min_size=1, max_size=60
        )
    )
    lines, wrecked, sound = ["# exported", HEADER, row(0), row(1)], {}, 2
    for i, kind in enumerate(kinds, start=2):
        if kind == "none":
            lines.append(draw(st.sampled_from(NO_ROWS)))
        elif kind == "sound":
            lines.append(row(i, line=draw(st.sampled_from("AB"))))
            sound += 1
        else:
            lines.append(WRECKED[kind](i))
            wrecked[len(lines)] = lines[-1]
    return lines, wrecked, sound


@pytest.mark.parametrize("source", ["file", "column", "gap"])
@settings(
    max_examples=60, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture]
)
@given(log=logs())
def test_every_row_is_used_or_rejected_with_its_words(
    source: str, log: tuple[list[str], dict[int, str], int], tmp_path: Path
) -> None:
    lines, wrecked, sound = log
    path = tmp_path / "log.csv"
    path.write_text("\n".join(lines) + "\n", encoding="utf-8")
    survey = survey_with(tmp_path, f'[lines]\nfrom = "{source}"\n')
    accounts = accounts_of(path, survey)
    assert all(a.balances for a in accounts)
    assert sum(a.rows_read for a in accounts) == sound + len(wrecked)
    assert sum(a.rows_used for a in accounts) == sound
    kept = [r for a in accounts for r in a.rejected_rows]
    assert {r.row: r.text for r in kept} == wrecked
    assert len(kept) == len(wrecked)


def test_rows_without_a_name_of_a_line_that_can_be_read_are_still_accounted_for(
    tmp_path: Path,
) -> None:
    good, bad = tmp_path / "good.csv", tmp_path / "bad.csv"
    good.write_text("\n".join([HEADER, row(0), row(1)]), encoding="utf-8")
    bad.write_text(
        "\n".join([HEADER, *(row(i, time="1970-01-01T00:00:00Z") for i in range(3))]),
        encoding="utf-8",
    )
    survey = survey_with(tmp_path, '[lines]\nfrom = "column"\n')
    findings = qa.audit([good, bad], survey=survey, out=tmp_path / "out").to_dict()
    inputs = {Path(i["path"]).name: i for i in findings["inputs"]}
    assert (inputs["bad.csv"]["rows_read"], inputs["bad.csv"]["rows_rejected"]) == (3, 3)
    assert "1990" in inputs["bad.csv"]["error"]
    assert inputs["good.csv"]["error"] is None
    assert len(rejected(tmp_path / "out")) == 3


def test_sentinels_of_a_file_of_several_lines_are_counted_once(tmp_path: Path) -> None:
    path = tmp_path / "log.csv"
    path.write_text(
        "\n".join([HEADER, *(row(i, line="ABC"[i % 3], depth="-999") for i in range(9)), row(9)]),
        encoding="utf-8",
    )
    survey = survey_with(tmp_path, '[lines]\nfrom = "column"\n')
    accounts = accounts_of(path, survey)
    assert len(accounts) == 3
    assert sum(a.missing["depth"] for a in accounts) == 9


def rejected(folder: Path) -> list[dict[str, Any]]:
    with (folder / "rejected.csv").open(encoding="utf-8", newline="") as stream:
        return list(csv.DictReader(stream))


def test_rejected_csv_holds_file_row_reason_and_the_row_itself(tmp_path: Path) -> None:
    path = tmp_path / "log.csv"
    lines = [HEADER, row(0), row(1), row(1), '2026-05-04T10:00:02Z,2,"a, b",mud', row(3), row(4)]
    path.write_text("\n".join(lines), encoding="utf-8")
    findings = qa.audit([path], out=tmp_path / "out").to_dict()
    found = [(r["file"], int(r["row"]), r["text"]) for r in rejected(tmp_path / "out")]
    assert found == [(path.as_posix(), 4, lines[3]), (path.as_posix(), 5, lines[4])]
    assert all(r["reason"] for r in rejected(tmp_path / "out"))
    (account,) = findings["inputs"]
    assert account["rows_read"] == 6
    assert account["rows_used"] == 4
    assert sum(account["reasons"].values()) == account["rows_rejected"] == 2


def test_nothing_is_written_beside_the_logs(tmp_path: Path) -> None:
    logs = tmp_path / "logs"
    logs.mkdir()
    for name in ("a", "b"):
        text = "\n".join([HEADER, *(row(i, depth="mud" if i == 3 else "10") for i in range(20))])
        (logs / f"{name}.csv").write_text(text, encoding="utf-8")
    before = {p: (p.stat().st_mtime_ns, p.read_bytes()) for p in logs.rglob("*")}
    qa.audit([logs], out=tmp_path / "out")
    assert {p: (p.stat().st_mtime_ns, p.read_bytes()) for p in logs.rglob("*")} == before


def test_beams_and_pings_that_stand_twice_are_rejected_row_by_row(tmp_path: Path) -> None:
    head = "time,ping,beam,beam angle (deg),depth (m)"
    ping = [f"2026-05-04T10:00:0{p}Z,{p},{b},{b * 10 - 20},{10 + p + b / 10}" for p in range(4) for b in range(1, 4)]  # fmt: skip
    # a ping that comes again later, a remark between its rows; then a beam again at once
    lines = [head, *ping, *ping[3:5], "# a remark", ping[5], ping[11]]
    path = tmp_path / "log.csv"
    path.write_text("# beams\n" + "\n".join(lines) + "\n", encoding="utf-8")
    (account,) = accounts_of(path, SurveyFile())
    assert account.balances
    assert (account.rows_read, account.rows_used) == (16, 12)
    assert {r.row: r.text for r in account.rejected_rows} == {
        15: ping[3],
        16: ping[4],
        18: ping[5],
        19: ping[11],
    }


def test_shuffled_beams_with_repeats_are_brought_together_and_counted_once(tmp_path: Path) -> None:
    head = "time,ping,beam,beam angle (deg),depth (m)"
    beams = [f"2026-05-04T10:00:0{p}Z,{p},{b},{b * 10 - 20},{10 + p + b / 10}" for p in range(4) for b in range(1, 4)]  # fmt: skip
    mixed = [beams[i] for i in (7, 2, 9, 0, 4, 11, 2, 5, 1, 8, 3, 10, 6, 0)]
    path = tmp_path / "log.csv"
    path.write_text("\n".join([head, *mixed]) + "\n", encoding="utf-8")
    (account,) = accounts_of(path, SurveyFile())
    assert account.balances
    assert (account.rows_used, account.rows_rejected) == (12, 2)
    assert Counter(r.text for r in account.rejected_rows) == Counter([beams[2], beams[0]])
