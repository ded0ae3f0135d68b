"""A line read once: what a ping is, in what order pings and beams stand, what lies outside its day."""

from __future__ import annotations

import datetime as dt
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

from qa.ingest import DayChoice, OpenedLine, open_line, plan_logs, read_log
from qa.model.survey_file import SurveyFile, load_survey_file

START = 1777888800


def opened(path: Path, survey: str = "", day: DayChoice | None = None) -> OpenedLine:
    facts = SurveyFile()
    if survey:
        stated = path.parent / "survey.toml"
        stated.write_text(survey, encoding="utf-8")
        facts = load_survey_file(stated)
    (task,) = plan_logs([path], facts, day).lines
    return open_line(task, facts)


def csv(folder: Path, head: str, rows: list[str]) -> Path:
    path = folder / "log.csv"
    path.write_text("\n".join([head, *rows]) + "\n", encoding="utf-8")
    return path


def test_settings_are_held_within_a_channel_and_not_across(tmp_path: Path) -> None:
    settings = {0: "60", 1: "", 5: "90", 4: "100"}
    rows = [
        f"{START + i},{i // 2},{'port' if i % 2 == 0 else 'starboard'},10,{settings.get(i, '')}"
        for i in range(8)
    ]
    line = opened(
        csv(tmp_path, "time,ping,channel,depth (m),pulse length (us)", rows),
        '[columns]\nhold = ["pulse_length"]\n',
    )
    table = line.ping_table()
    pulse = {c.name: table.columns["pulse_length"][c.rows] * 1e6 for c in table.channels}
    np.testing.assert_allclose(pulse["port"], [60, 60, 100, 100])
    np.testing.assert_allclose(pulse["starboard"], [np.nan, np.nan, 90, 90])


def test_a_few_equal_pings_are_pings_and_many_are_messages(tmp_path: Path) -> None:
    pings = [i if i not in (7, 15) else i - 1 for i in range(30)]
    rows = [f"{START + i},{p},{p % 5 + 10}" for i, p in enumerate(pings)]
    few = opened(csv(tmp_path, "time,ping,depth (m)", rows))
    assert len(few.ping_table()) == 30
    rows = [f"{START + i},{i // 4},{i // 4 % 5 + 10}" for i in range(120)]
    many = opened(csv(tmp_path, "time,ping,depth (m)", rows))
    assert many.ping_table().ping.tolist() == list(range(30))
    (account,) = many.accounts()
    assert (account.rows_used, account.rows_out_of_scope) == (30, 90)


def test_only_pings_of_the_day_are_in_scope(tmp_path: Path) -> None:
    first = dt.datetime(2026, 5, 4, 21, tzinfo=dt.UTC)
    rows = [f"{(first + dt.timedelta(hours=i)).isoformat()},{i},10" for i in range(8)]
    path = csv(tmp_path, "time,ping,depth (m)", rows)
    line = opened(path, day=DayChoice(dt.date(2026, 5, 5), "Europe/Lisbon"))
    # Lisbon is one hour ahead in May: its 5 May begins at 23:00 UTC on the 4th
    assert line.ping_table().ping.tolist() == [2, 3, 4, 5, 6, 7]
    (account,) = line.accounts()
    assert (account.rows_used, account.rows_out_of_scope) == (6, 2)


@pytest.mark.parametrize("places", [[0], [25], [49], [10, 11, 12], [3, 30]])
def test_times_beyond_repair_are_rejected_wherever_they_stand(
    places: list[int], tmp_path: Path
) -> None:
    rows = [f"{START + i},{i},10" for i in range(50)]
    for i in places:
        shift = 90_000_000 if i == 0 else -90_000_000
        rows[i] = f"{START + i + shift},{i},10"
    line = opened(csv(tmp_path, "time,ping,depth (m)", rows))
    assert line.ping_table().ping.tolist() == [i for i in range(50) if i not in places]
    (account,) = line.accounts()
    assert [(r.row, r.text) for r in account.rejected_rows] == [(i + 2, rows[i]) for i in places]


def test_a_long_pause_and_a_small_step_back_reject_nothing(tmp_path: Path) -> None:
    times = [START + i + (5 * 86400 if i >= 20 else 0) - (3 if i >= 30 else 0) for i in range(50)]
    rows = [f"{t},{i},10" for i, t in enumerate(times)]
    line = opened(csv(tmp_path, "time,ping,depth (m)", rows))
    assert line.ping_table().ping.tolist() == list(range(50))
    assert (line.ping_table().time // 10**9).tolist() == times


def test_a_counter_that_starts_again_leaves_the_order_of_the_file(tmp_path: Path) -> None:
    rows = [f"{START + i},{i % 20},10" for i in range(50)]
    line = opened(csv(tmp_path, "time,ping,depth (m)", rows))
    assert line.ping_table().ping.tolist() == [i % 20 for i in range(50)]


def test_beams_come_in_the_order_of_their_numbers_in_every_batch(tmp_path: Path) -> None:
    lottery = np.random.default_rng(5)
    pings, beams = 60, 40
    number = np.concatenate([lottery.permutation(beams) + 1 for _ in range(pings)])
    table = pa.table(
        {
            "time": pa.array(np.repeat(START + np.arange(pings), beams), pa.timestamp("s", "UTC")),
            "ping": np.repeat(np.arange(pings), beams),
            "beam": number,
            "beam_angle": number - 20.0,
            "depth": 10.0 + number / 100,
        }
    )
    path = tmp_path / "log.parquet"
    # parts of the file end within a ping
    pq.write_table(table, path, row_group_size=333)
    line = opened(path)
    for names in (["beam"], ["depth"], ["beam", "beam_angle", "depth"]):
        for batch in line.beam_batches(names, rows=500):
            wanted = np.tile(np.arange(1, beams + 1), len(batch.pings))
            assert batch.counts.tolist() == [beams] * len(batch.pings)
            assert sorted(batch.columns) == sorted(names)
            for name, values in batch.columns.items():
                first = {"beam": wanted, "beam_angle": wanted - 20.0, "depth": 10 + wanted / 100}
                np.testing.assert_allclose(values, first[name])


def test_a_ping_without_beams_keeps_its_place(tmp_path: Path) -> None:
    path = tmp_path / "log.parquet"
    table = pa.table(
        {
            "time": pa.array([START, START + 1, START + 2], pa.timestamp("s", "UTC")),
            "ping": [1, 2, 3],
            "depth": pa.array([[10.0, 11.0], [], [12.0, 13.0]]),
        }
    )
    pq.write_table(table, path)
    found = read_log(path)
    assert found.column("ping").to_pylist() == [1, 1, 2, 3, 3]
    np.testing.assert_allclose(found.column("depth").to_numpy(), [10, 11, np.nan, 12, 13])


def test_a_clock_that_steps_back_again_and_again_keeps_the_order_of_the_file(
    tmp_path: Path,
) -> None:
    at = np.arange(100) * 200
    at[20:60:2] -= 300  # every second ping of forty: a fifth of all rows fall
    log = tmp_path / "stepping.csv"
    rows = "".join(f"{1_700_000_000_000 + t},{10 + i / 100}\n" for i, t in enumerate(at))
    log.write_text(f"Epoch (ms),Depth (m)\n{rows}", encoding="utf-8")
    table = read_log(log)
    assert table["depth"].to_pylist() == pytest.approx([10 + i / 100 for i in range(100)])
