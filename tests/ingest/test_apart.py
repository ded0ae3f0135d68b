"""Rows of one ping that stand apart come together on disk as they would stand in an ordered file."""

from __future__ import annotations

import tracemalloc
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

from qa.ingest import apart, line_log, open_line, plan_logs
from qa.ingest.line_log import OpenedLine
from qa.ingest.spill import Spill
from qa.model.survey_file import SurveyFile

BEAMS = 16


def _log(pings: int = 150, channels: int = 1, beams: int = BEAMS) -> dict[str, Any]:
    lottery = np.random.default_rng(4)
    owner = np.repeat(np.arange(pings), beams)
    log: dict[str, Any] = {
        "time": 1_700_000_000_000 + (owner // channels) * 250,
        "ping": owner // channels,
        "beam": np.tile(np.arange(1, beams + 1), pings),
        "beam_angle": np.tile(np.linspace(-60, 60, beams), pings),
        "depth": 20.0 + lottery.normal(0, 1, len(owner)),
        "accepted": lottery.random(len(owner)) > 0.1,
        "pulse_length": 60e-6 * (1 + owner // 40),
    }
    if channels > 1:
        log["channel"] = np.array(["port", "starboard"])[owner % channels]
    return log


def _written(path: Path, log: dict[str, Any], group: int = 500) -> Path:
    table = pa.table(log | {"time": pa.array(log["time"], pa.timestamp("ms", "UTC"))})
    if path.suffix == ".csv":
        import pyarrow.csv as pc

        pc.write_csv(table, path)
    else:
        pq.write_table(table, path, row_group_size=group)
    return path


def _line(path: Path) -> OpenedLine:
    survey = SurveyFile()
    (task,) = plan_logs([path], survey).lines
    return open_line(task, survey)


def _everything(line: OpenedLine) -> list[Any]:
    table = line.ping_table()
    names = sorted(line.beam_columns)
    batches = list(line.beam_batches(names, 777))
    found: list[Any] = [table.time, table.ping, *(table.columns[k] for k in sorted(table.columns))]
    # Pings of two channels may come one way or the other; beams of a ping stand in their order.
    of = np.concatenate([np.repeat(b.pings, b.counts) for b in batches])
    order = np.argsort(of, kind="stable")
    found += [of[order], *(np.concatenate([b.columns[n] for b in batches])[order] for n in names)]
    return [names, sorted(table.columns), table.channels, *(a.tolist() for a in found)]


def _shuffled(log: dict[str, Any]) -> dict[str, Any]:
    order = np.random.default_rng(1).permutation(len(log["ping"]))
    return {k: np.asarray(v)[order] for k, v in log.items()}


def _halves(log: dict[str, Any]) -> dict[str, Any]:
    order = np.argsort(log["beam"] > BEAMS // 2, kind="stable")
    return {k: np.asarray(v)[order] for k, v in log.items()}


@pytest.fixture
def on_disk(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(line_log, "MOST_RUNS", 40)
    monkeypatch.setattr(line_log, "MOST_GATHERED", 1000)
    monkeypatch.setattr(apart, "ROWS_TOGETHER", 300)


@pytest.mark.usefixtures("on_disk")
@pytest.mark.parametrize("suffix", [".parquet", ".csv"])
@pytest.mark.parametrize("channels", [1, 2])
@pytest.mark.parametrize("apart_by", [_shuffled, _halves])
def test_what_was_apart_is_as_if_it_had_been_together(
    apart_by: Any, channels: int, suffix: str, tmp_path: Path
) -> None:
    log = _log(channels=channels)
    line = _line(_written(tmp_path / f"apart{suffix}", apart_by(log)))
    assert _everything(line) == _everything(_line(_written(tmp_path / f"together{suffix}", log)))
    assert line._apart
    (account,) = line.accounts()
    assert account.balances and account.rows_used == len(log["ping"])
    assert any("stand apart in the file" in note for note in account.notes)


@pytest.mark.usefixtures("on_disk")
def test_rows_that_stand_twice_or_are_of_no_use_keep_their_numbers(tmp_path: Path) -> None:
    log = _log()
    log["beam_angle"][37] = 500.0
    twice = np.append(np.arange(len(log["ping"])), [100, 900, 901])
    shuffled = _shuffled({k: np.asarray(v)[twice] for k, v in log.items()})
    line = _line(_written(tmp_path / "apart.parquet", shuffled))
    (account,) = line.accounts()
    assert account.balances
    assert account.rows_used == len(log["ping"]) - 1
    assert account.reasons == {
        "beam angle outside -180° to 180°": 1,
        "the row before again": 3,
    } or set(account.reasons.values()) == {1, 3}
    for row in account.rejected_rows:
        # A row's number is its place in the file, and its words are those that stand there.
        depth = repr(float(shuffled["depth"][row.row - 1]))
        assert depth in row.text


@pytest.mark.usefixtures("on_disk")
def test_pings_met_twice_are_told_by_the_numbers_of_their_rows(tmp_path: Path) -> None:
    log = _shuffled(_log())
    first, second = tmp_path / "a" / "line.parquet", tmp_path / "b" / "line.parquet"
    for path in (first, second):
        path.parent.mkdir()
        _written(path, log)
    plan = plan_logs([first, second], SurveyFile())
    used = rejected = 0
    for task in plan.lines:
        line = open_line(task, SurveyFile())
        line.ping_table()
        for account in line.accounts():
            assert account.balances
            used, rejected = used + account.rows_used, rejected + account.rows_rejected
    assert (used, rejected) == (len(log["ping"]), len(log["ping"]))


def _peak(path: Path) -> int:
    line = _line(path)
    tracemalloc.start()
    line.ping_table()
    peak = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    return peak


@pytest.mark.usefixtures("on_disk")
def test_memory_does_not_follow_the_number_of_rows(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(apart, "ROWS_TOGETHER", 8000)
    monkeypatch.setattr(apart, "_BATCH", 1000)
    monkeypatch.setattr(apart, "_SAMPLE", 1 << 12)
    monkeypatch.setattr(apart, "HELD_BYTES", 1 << 14)
    monkeypatch.setattr(Spill.__init__, "__defaults__", (1 << 14,))
    small, large = (
        _peak(_written(tmp_path / f"{n}.parquet", _shuffled(_log(n, beams=128)), 8000))
        for n in (250, 2000)
    )
    # Eight times the rows, of some 60 bytes each; what is held of them all is their pings.
    assert large < 2 * small
