"""The command as its users run it: what it prints, where it ends, and how it refuses."""

from __future__ import annotations

import json
import os
import subprocess
import sys
from pathlib import Path
from typing import Any

import pytest

import qa

ROOT = Path(__file__).resolve().parent.parent
SAMPLE = ROOT / "sample_logs"

GOOD_CSV = "Ping No,Time,Depth (m),Pulse Length (us)\n" + "".join(
    f"{i},2026-05-04T10:00:{i // 5:02d}.{i % 5 * 200:03d}Z,{10 + 0.01 * i:.2f},100\n"
    for i in range(60)
)


def pingworthy(*arguments: str | Path, cwd: Path | None = None) -> subprocess.CompletedProcess[str]:
    return subprocess.run(
        [sys.executable, "-m", "qa.cli", *map(str, arguments)],
        capture_output=True,
        text=True,
        encoding="utf-8",
        cwd=cwd,
        timeout=120,
        env={**os.environ, "PYTHONPATH": str(ROOT), "PYTHONIOENCODING": "utf-8"},
    )


@pytest.fixture
def log(tmp_path: Path) -> Path:
    path = tmp_path / "line_7.csv"
    path.write_text(GOOD_CSV, encoding="utf-8")
    return path


def refused(done: subprocess.CompletedProcess[str], *words: str) -> None:
    """One clear message, status 2, no traceback."""
    assert done.returncode == 2, done.stderr
    assert "Traceback" not in done.stderr + done.stdout
    assert done.stderr.strip()
    for word in words:
        assert word in done.stderr, done.stderr


def test_version() -> None:
    done = pingworthy("--version")
    assert done.returncode == 0
    assert done.stdout.split() == ["pingworthy", qa.__version__]


def test_version_is_that_of_the_distribution() -> None:
    import tomllib

    project = tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))
    assert project["project"]["version"] == qa.__version__


def test_audit_ends_with_a_summary_and_every_output(log: Path, tmp_path: Path) -> None:
    out = tmp_path / "out"
    done = pingworthy("audit", log, "--out", out, "--set", "target_size=1m")
    assert done.returncode == 0, done.stderr
    assert "report.html" in done.stdout
    assert "range-resolution" in done.stdout
    findings = json.loads((out / "findings.json").read_text(encoding="utf-8"))
    assert findings["lines"][0]["line"] == "line_7"
    assert findings["inputs"][0]["rows_read"] == findings["inputs"][0]["rows_used"] == 60
    for name in ("report.html", "sections.csv", "pings.parquet", "rejected.csv"):
        assert (out / name).is_file()


def test_out_of_spec_is_status_one(log: Path, tmp_path: Path) -> None:
    done = pingworthy("audit", log, "--out", tmp_path / "out", "--set", "target_size=0.05m")
    assert done.returncode == 1, done.stderr


def test_not_assessed_counts_only_when_asked(log: Path, tmp_path: Path) -> None:
    assert pingworthy("audit", log, "--out", tmp_path / "a").returncode == 0
    assert pingworthy("audit", log, "--out", tmp_path / "a", "--require-assessed").returncode == 1


def test_same_input_gives_the_same_bytes(log: Path, tmp_path: Path) -> None:
    for name in ("a", "b"):
        pingworthy("audit", log, "--out", tmp_path / name, "--set", "target_size=0.05m")
    files = sorted(
        p.relative_to(tmp_path / "a") for p in (tmp_path / "a").rglob("*") if p.is_file()
    )
    assert files == sorted(
        p.relative_to(tmp_path / "b") for p in (tmp_path / "b").rglob("*") if p.is_file()
    )
    for name in files:
        assert (tmp_path / "a" / name).read_bytes() == (tmp_path / "b" / name).read_bytes(), name


def test_quiet_prints_nothing(log: Path, tmp_path: Path) -> None:
    done = pingworthy("audit", log, "--out", tmp_path / "out", "--quiet")
    assert (done.stdout, done.stderr) == ("", "")


def test_a_folder_with_something_else_is_refused(log: Path, tmp_path: Path) -> None:
    out = tmp_path / "thesis"
    out.mkdir()
    (out / "chapter.txt").write_text("precious", encoding="utf-8")
    refused(pingworthy("audit", log, "--out", out), str(out), "--out")
    assert (out / "chapter.txt").read_text(encoding="utf-8") == "precious"


def test_an_earlier_audit_is_replaced_and_other_files_kept(log: Path, tmp_path: Path) -> None:
    out = tmp_path / "out"
    pingworthy("audit", log, "--out", out)
    (out / "notes.txt").write_text("mine", encoding="utf-8")
    assert pingworthy("audit", log, "--out", out).returncode == 0
    assert (out / "notes.txt").read_text(encoding="utf-8") == "mine"


BAD_LOGS: dict[str, bytes] = {
    "empty.csv": b"",
    "prose.csv": b"Dear colleague, the survey went well.\nThe weather was fine.\n",
    "random.csv": bytes((i * 197 + i // 3 * 31) % 256 for i in range(5000)),
    "random.parquet": bytes((i * 197 + i // 3 * 31) % 256 for i in range(5000)),
    "header_only.csv": b"time,depth,ping\n",
    "no_time.csv": b"ping,depth\n1,10\n2,11\n",
    "no_depth.csv": b"time,ping\n2026-05-04T10:00:00Z,1\n2026-05-04T10:00:01Z,2\n",
}


@pytest.mark.parametrize("name", BAD_LOGS)
def test_a_log_that_cannot_be_used_gives_one_clear_message(name: str, tmp_path: Path) -> None:
    path = tmp_path / name
    path.write_bytes(BAD_LOGS[name])
    refused(pingworthy("audit", path, "--out", tmp_path / "out"), name)
    assert not (tmp_path / "out").exists()
    assert list(tmp_path.iterdir()) == [path], "nothing is left beside the logs"


def test_a_wrong_path_is_named(tmp_path: Path) -> None:
    refused(pingworthy("audit", tmp_path / "nowhere.csv", "--out", tmp_path / "out"), "nowhere.csv")


BAD_SURVEYS = {
    "typo": ("[sonar]\nfrequncy = '300 kHz'\n", ("frequncy", "frequency")),
    "unit": ("[sonar]\nfrequency = '300 m'\n", ("sonar.frequency", "300 m", "Hz")),
    "toml": ("[sonar\nfrequency = 3\n", ("TOML",)),
    "choice": ("[sonar]\nkind = 'multibeem'\n", ("multibeem", "multibeam")),
    "limit": ("[limits]\ntarget_sise = '1 m'\n", ("target_sise", "target_size")),
    "limit unit": ("[limits]\ntarget_size = '1 s'\n", ("target_size", "1 s")),
    "sheet": ("[survey]\nsheet = 'physiks'\n", ("physiks", "physics")),
    "zone": ("[survey]\ntime_zone = 'Mars/Olympus'\n", ("Mars/Olympus",)),
    "column": ("[columns]\ndeepth = 'Z'\n", ("deepth", "depth")),
}


@pytest.mark.parametrize("case", BAD_SURVEYS)
def test_a_survey_file_with_a_mistake_is_refused(case: str, log: Path, tmp_path: Path) -> None:
    text, words = BAD_SURVEYS[case]
    survey = tmp_path / "survey.toml"
    survey.write_text(text, encoding="utf-8")
    refused(pingworthy("audit", log, "--survey", survey, "--out", tmp_path / "out"), *words)


def test_a_bad_file_among_good_ones_is_named_and_the_rest_finished(
    log: Path, tmp_path: Path
) -> None:
    bad = tmp_path / "bad.csv"
    bad.write_bytes(BAD_LOGS["prose.csv"])
    done = pingworthy("audit", log, bad, "--out", tmp_path / "out")
    assert done.returncode == 2
    findings = json.loads((tmp_path / "out" / "findings.json").read_text(encoding="utf-8"))
    assert [line["line"] for line in findings["lines"] if line["pings"]] == ["line_7"]
    errors: list[Any] = [i["error"] for i in findings["inputs"] if i["error"]]
    assert len(errors) == 1
    assert "bad.csv" in errors[0]


def test_demo_finds_the_planted_faults(tmp_path: Path) -> None:
    done = pingworthy("demo", "--out", tmp_path / "demo")
    assert done.returncode == 0, done.stderr
    findings = json.loads((tmp_path / "demo" / "findings.json").read_text(encoding="utf-8"))
    truth = json.loads((SAMPLE / "truth.json").read_text(encoding="utf-8"))
    rules = set(truth["rules"])
    found = [s for s in findings["sections"] if s["rule"] in rules]
    unmatched = list(found)
    for fault in truth["faults"]:
        match = [
            s
            for s in unmatched
            if s["line"] == fault["line"]
            and s["rule"] == fault["rule"]
            and (s["channel"] or None) == (fault["channel"] or None)
            and all(
                abs(s[k] - fault[k]) <= 1
                for k in ("first_index", "last_index", "first_ping", "last_ping")
            )
        ]
        assert match, f"not found: {fault}"
        unmatched.remove(match[0])
    assert unmatched == []
    faulty = {f["line"] for f in truth["faults"]}
    for line in findings["lines"]:
        if line["line"] not in faulty:
            assert line["verdict"] == "in spec", line["line"]


def _run_of(path: Path, pulse: int) -> Path:
    rows = "".join(
        f"{i},2026-05-04T10:{i // 300:02d}:{i // 5 % 60:02d}.{i % 5 * 200:03d}Z,12.0,{pulse},{38.7 + i * 4e-6:.6f},-9.2\n"
        for i in range(400)
    )
    path.write_text(
        "ping,time,depth (m),pulse length (us),latitude,longitude\n" + rows, encoding="utf-8"
    )
    return path


def test_compare_says_what_a_rerun_mended(tmp_path: Path) -> None:
    for name, pulse in (("first", 2000), ("again", 100)):
        log = _run_of(tmp_path / f"{name}.csv", pulse)
        pingworthy("audit", log, "--out", tmp_path / name, "--set", "target_size=1m")
    mended = pingworthy("compare", tmp_path / "first", tmp_path / "again", "--out", tmp_path / "c")
    assert mended.returncode == 0, mended.stderr + mended.stdout
    assert "mended" in mended.stdout
    assert (tmp_path / "c" / "compare.html").is_file()
    same = pingworthy("compare", tmp_path / "first", tmp_path / "first", "--out", tmp_path / "c")
    assert same.returncode == 1
    refused(
        pingworthy("compare", tmp_path, tmp_path / "again", "--out", tmp_path / "d"), str(tmp_path)
    )


def test_a_day_takes_its_lines_only(tmp_path: Path) -> None:
    for day in ("04", "05"):
        text = GOOD_CSV.replace("2026-05-04", f"2026-05-{day}")
        (tmp_path / f"day_{day}.csv").write_text(text, encoding="utf-8")
    logs = [tmp_path / "day_04.csv", tmp_path / "day_05.csv"]
    done = pingworthy("audit", *logs, "--day", "2026-05-05", "--out", tmp_path / "out")
    assert done.returncode == 0, done.stderr
    findings = json.loads((tmp_path / "out" / "findings.json").read_text(encoding="utf-8"))
    assert [line["line"] for line in findings["lines"]] == ["day_05"]
    assert [i["rows_out_of_scope"] for i in findings["inputs"]] == [60, 0]
    refused(
        pingworthy("audit", *logs, "--day", "2025-01-01", "--out", tmp_path / "out"), "2025-01-01"
    )
    refused(pingworthy("audit", *logs, "--day", "tuesday", "--out", tmp_path / "out"), "tuesday")


def test_a_log_of_rejected_rows_only_says_why(tmp_path: Path) -> None:
    path = tmp_path / "bad.csv"
    path.write_text(
        "time,ping,depth (m)\n" + "2026-05-04T10:00:00Z,1,soft mud\n" * 5, encoding="utf-8"
    )
    refused(pingworthy("audit", path, "--out", tmp_path / "out"), "bad.csv", "depth is no number")


BAY = ROOT / "tests" / "data" / "bay"
BAY_SURVEY = """
[sonar]
kind = "single-beam"
[columns]
order = ["latitude", "longitude", "depth", "temperature", "time"]
[columns.units]
time = "ms since 1970-01-01"
"""


def test_real_logs_of_a_bay_are_taken_as_they_are(tmp_path: Path) -> None:
    """Parts of an open dataset (MIT, licence beside it), the facts counted here with pandas."""
    import pandas as pd

    survey = tmp_path / "bay.toml"
    survey.write_text(BAY_SURVEY, encoding="utf-8")
    done = pingworthy("audit", BAY / "*.csv", "--survey", survey, "--out", tmp_path / "out")
    assert done.returncode == 1, done.stderr
    findings = json.loads((tmp_path / "out" / "findings.json").read_text(encoding="utf-8"))
    pings = pd.read_parquet(tmp_path / "out" / "pings.parquet")
    for item in findings["inputs"]:
        raw = pd.read_csv(item["path"], header=None)
        times = raw[4]
        assert item["rows_read"] == len(raw)
        assert item["rows_rejected"] == raw.duplicated().sum()
        assert item["rows_used"] == len(raw) - raw.duplicated().sum()
        assert item["missing"]["position"] == (
            (raw[0] == 0) & (raw[1] == 0) & ~raw.duplicated()
        ).sum() or (item["missing"]["position"] == ((raw[0] == 0) & (raw[1] == 0)).sum())
        zero = int((times.diff() == 0).sum())
        assert any(f"{zero} rows repeat the time" in note for note in item["notes"]), item["notes"]
        line = pings[pings["line"] == Path(item["path"]).stem]
        gaps = line[line["ping_interval"] > 5.0]
        assert len(gaps) == (times.diff() > 5000).sum()
        assert (gaps["ping-gap: verdict"] == "missed").all()
        # No flood: nearly all that is called a gap is one, and few pings are.
        assert (line["ping-gap: verdict"] == "missed").sum() < len(gaps) + 0.02 * len(line)
        stepped = int((line["clock: verdict"] == "missed").sum())
        assert stepped >= zero - item["rows_rejected"]
    verdicts = {rule["id"]: rule["verdict"] for rule in findings["rules"]}
    for unknown in (
        "range-resolution",
        "along-resolution",
        "pings-on-target",
        "ping-spacing",
        "ping-interval",
    ):
        assert verdicts[unknown] == "not assessed"
    assert {a["name"] for a in findings["assumptions"]} >= {"sound_speed", "pings_in_water"}
