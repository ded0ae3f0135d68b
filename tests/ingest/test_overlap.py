"""A ping that two files hold counts once, with a note; pings that only look alike count each."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

import qa
from qa.ingest import open_line, plan_logs
from qa.model.survey_file import SurveyFile, load_survey_file

START = 1777888800


def depths(first: int, count: int, seed: int = 0) -> np.ndarray:
    return np.random.default_rng(seed).uniform(5, 90, 200_000).round(3)[first : first + count]


def write_csv(path: Path, first: int, count: int, seed: int = 0) -> Path:
    rows = zip(range(first, first + count), depths(first, count, seed).tolist(), strict=True)
    text = "".join(f"{START + i},{i},{d},a remark that makes rows long\n" for i, d in rows)
    path.with_suffix(".csv").write_text("time,ping,depth (m),remark\n" + text, encoding="utf-8")
    return path.with_suffix(".csv")


def write_parquet(path: Path, first: int, count: int, seed: int = 0) -> Path:
    table = pa.table(
        {
            "time": pa.array(np.arange(START + first, START + first + count), pa.timestamp("s", "UTC")),
            "ping": np.arange(first, first + count),
            "depth": depths(first, count, seed),
        }
    )  # fmt: skip
    pq.write_table(table, path.with_suffix(".parquet"), row_group_size=5000)
    return path.with_suffix(".parquet")


def used(folder: Path) -> dict[str, tuple[int, int, list[str]]]:
    """Rows used and rejected of each file, and notes on what stands elsewhere."""
    found = {}
    for task in plan_logs([folder], SurveyFile()).lines:
        for account in open_line(task, SurveyFile()).accounts():
            assert account.balances
            notes = [n for n in account.notes if "counted once" in n]
            found[Path(account.path).stem] = (account.rows_used, account.rows_rejected, notes)
    return found


@pytest.mark.parametrize("write", [write_csv, write_parquet])
def test_the_end_of_one_file_at_the_start_of_the_next(
    write: Callable[..., Path], tmp_path: Path
) -> None:
    write(tmp_path / "a", 0, 30_000)
    write(tmp_path / "b", 17_000, 30_000)
    found = used(tmp_path)
    assert found["a"][:2] == (30_000, 0)
    assert found["b"][:2] == (17_000, 13_000)
    assert "13000 rows stand in" in found["b"][2][0]
    assert "a." in found["b"][2][0]


def write_seconds_of_day(path: Path, first: int, count: int) -> Path:
    """The date of the file's first row on each of them, and seconds that start again at midnight."""
    rows = zip(range(first, first + count), depths(first, count).tolist(), strict=True)
    text = "".join(f"2026-05-04,{(80_000 + i) % 86_400},{i},{d}\n" for i, d in rows)
    path.write_text("date,seconds of day,ping,depth (m)\n" + text, encoding="utf-8")
    return path


def test_files_whose_seconds_start_again_at_midnight_are_compared(tmp_path: Path) -> None:
    write_seconds_of_day(tmp_path / "a.csv", 0, 12_000)
    write_seconds_of_day(tmp_path / "b.csv", 5_000, 12_000)
    found = used(tmp_path)
    assert found["a"][:2] == (12_000, 0)
    assert found["b"][:2] == (5_000, 7_000)
    assert "7000 rows stand in a.csv" in found["b"][2][0].replace(str(tmp_path) + "/", "")


def test_a_copy_counts_for_nothing_and_is_no_failure(tmp_path: Path) -> None:
    first = write_csv(tmp_path / "line", 0, 500)
    copy = tmp_path / "copy of line.csv"
    copy.write_bytes(first.read_bytes())
    findings = qa.audit([tmp_path])
    assert [line.pings for line in findings.lines] == [500]
    assert findings.exit_status in (0, 1)
    (note,) = {n for i in findings.inputs for n in i.notes if "value for value" in n}
    assert "500 rows" in note


def test_a_csv_and_its_packed_copy_count_once(tmp_path: Path) -> None:
    import gzip

    path = write_csv(tmp_path / "a", 0, 500)
    (tmp_path / "b.csv.gz").write_bytes(gzip.compress(path.read_bytes()))
    assert sorted(v[:2] for v in used(tmp_path).values()) == [(0, 500), (500, 0)]


def test_two_heads_at_the_same_times_count_each(tmp_path: Path) -> None:
    write_csv(tmp_path / "port", 0, 20_000, seed=1)
    write_csv(tmp_path / "starboard", 0, 20_000, seed=2)
    assert {v[:2] for v in used(tmp_path).values()} == {(20_000, 0)}


def test_files_that_follow_one_another_are_left_alone(tmp_path: Path) -> None:
    for i in range(5):
        write_csv(tmp_path / f"part_{i}", i * 2000, 2000)
    assert {v[:2] for v in used(tmp_path).values()} == {(2000, 0)}


BEAMS = "time,ping,beam,beam angle (deg),depth (m),line\n"


def beams(pings: range, offset: float, numbers: range = range(1, 6)) -> str:
    return "".join(
        f"{START + p},{p},{b},{b * 10 - 30},{20 + offset + p / 100 + b},A\n"
        for p in pings
        for b in numbers
    )


def of_one_line(folder: Path, *texts: str) -> tuple[int, int, int, list[str]]:
    """Pings and soundings of one line of several files, rows rejected, notes."""
    logs = folder / "logs"
    logs.mkdir()
    for i, text in enumerate(texts):
        (logs / f"part_{i}.csv").write_text(BEAMS + text, encoding="utf-8")
    survey = folder / "survey.toml"
    survey.write_text('[lines]\nfrom = "column"\n', encoding="utf-8")
    facts = load_survey_file(survey)
    (task,) = plan_logs([logs], facts).lines
    line = open_line(task, facts)
    pings = len(line.ping_table())
    soundings = sum(int(b.counts.sum()) for b in line.beam_batches(["depth"]))
    accounts = line.accounts()
    assert all(a.balances for a in accounts)
    assert sum(a.rows_used for a in accounts) == soundings
    return pings, soundings, sum(a.rows_rejected for a in accounts), [n for a in accounts for n in a.notes]  # fmt: skip


def test_swaths_in_two_files_of_a_line_count_once(tmp_path: Path) -> None:
    pings, soundings, rejected, notes = of_one_line(
        tmp_path, beams(range(20), 0), beams(range(15, 40), 0)
    )
    assert (pings, soundings, rejected) == (40, 200, 25)
    assert any("5 pings were met before" in n for n in notes)


def test_a_swath_cut_in_two_by_the_end_of_a_file_is_one(tmp_path: Path) -> None:
    first = beams(range(20), 0) + beams(range(20, 21), 0, range(1, 3))
    second = beams(range(20, 21), 0, range(3, 6)) + beams(range(21, 40), 0)
    pings, soundings, rejected, _ = of_one_line(tmp_path, first, second)
    assert (pings, soundings, rejected) == (40, 200, 0)


def test_heads_that_share_numbers_are_kept_apart_and_named(tmp_path: Path) -> None:
    pings, soundings, rejected, notes = of_one_line(
        tmp_path, beams(range(20), 0), beams(range(20), 3.5)
    )
    assert (pings, soundings, rejected) == (40, 200, 0)
    assert any("log a channel" in n for n in notes)
