"""Beams that are read from their file a second time are those that were put aside at the first reading."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

from qa.ingest import open_line, plan_logs, spill
from qa.ingest.line_log import DayChoice, OpenedLine
from qa.ingest.second_reading import SecondReading
from qa.ingest.spill import Spill
from qa.model.survey_file import SurveyFile

START = 1_700_000_000
BEAM_COLUMNS = ("beam", "beam_angle", "depth", "accepted")


def _log(
    seed: int, ragged: bool = False, channels: int = 1, shuffled: bool = False
) -> dict[str, Any]:
    lottery = np.random.default_rng(seed)
    pings = 120
    counts = lottery.integers(1, 60, pings) if ragged else np.full(pings, 32)
    owner = np.repeat(np.arange(pings), counts)
    beam = np.concatenate([np.arange(1, n + 1) for n in counts])
    if shuffled:
        order = np.lexsort((lottery.random(len(owner)), owner))
        owner, beam = owner[order], beam[order]
    log = {
        "time": START + owner // channels,
        "ping": owner,
        "beam": beam,
        "beam_angle": beam - 16.0 + lottery.normal(0, 0.1, len(owner)),
        "depth": 20.0 + lottery.normal(0, 1, len(owner)),
        "accepted": lottery.random(len(owner)) > 0.1,
        "pulse_length": np.full(len(owner), 60e-6),
    }
    if channels > 1:
        log["channel"] = np.array(["port", "starboard"])[owner % channels]
    return log


def _missing(log: dict[str, Any]) -> dict[str, Any]:
    lottery = np.random.default_rng(1)
    for name, value in (("depth", np.nan), ("depth", -9999.0), ("beam_angle", np.nan)):
        log[name] = np.where(lottery.random(len(log[name])) < 0.05, value, log[name])
    return log


def _rejected(log: dict[str, Any]) -> dict[str, Any]:
    """Rows of no time, of a clock that was not set, of impossible angles; a row twice; a whole ping gone."""
    lottery = np.random.default_rng(2)
    n = len(log["time"])
    chosen = lottery.random(n)
    log["time"] = np.where(chosen < 0.02, 1000, log["time"])
    log["time"] = np.where(log["ping"] == 7, 1000, log["time"])
    log["beam_angle"] = np.where((chosen > 0.02) & (chosen < 0.04), 400.0, log["beam_angle"])
    twice = np.repeat(np.arange(n), np.where(chosen > 0.97, 2, 1))
    return {k: np.asarray(v)[twice] for k, v in log.items()}


def _apart(log: dict[str, Any]) -> dict[str, Any]:
    """Even beams of the whole line first, then the odd ones."""
    order = np.argsort(log["beam"] % 2, kind="stable")
    return {k: np.asarray(v)[order] for k, v in log.items()}


def _later_pings_first(log: dict[str, Any]) -> dict[str, Any]:
    order = np.argsort(-(log["ping"] // 40), kind="stable")
    return {k: np.asarray(v)[order] for k, v in log.items()}


def _pings_twice(log: dict[str, Any]) -> dict[str, Any]:
    again = np.concatenate([np.arange(len(log["ping"])), np.flatnonzero(log["ping"] % 11 == 3)])
    return {k: np.asarray(v)[again] for k, v in log.items()}


LOGS = {
    "regular": lambda: _log(1),
    "ragged": lambda: _log(2, ragged=True),
    "two channels": lambda: _log(3, channels=2),
    "beams out of order": lambda: _log(4, shuffled=True),
    "values missing": lambda: _missing(_log(5, ragged=True)),
    "rows rejected": lambda: _rejected(_log(6, ragged=True)),
    "rows rejected, two channels": lambda: _rejected(_missing(_log(7, channels=2))),
    "beams of a ping apart": lambda: _apart(_log(8)),
    "later pings first": lambda: _later_pings_first(_log(9, ragged=True)),
    "pings met twice": lambda: _pings_twice(_log(10)),
    "no flags": lambda: {k: v for k, v in _log(11).items() if k != "accepted"},
}


def _written(path: Path, log: dict[str, Any], group: int) -> Path:
    table = pa.table(log | {"time": pa.array(log["time"], pa.timestamp("s", "UTC"))})
    pq.write_table(table, path, row_group_size=group)
    return path


def _opened(paths: list[Path], day: DayChoice | None = None) -> list[OpenedLine]:
    survey = SurveyFile()
    return [open_line(task, survey) for task in plan_logs(paths, survey, day).lines]


def _everything(line: OpenedLine, rows: int) -> list[Any]:
    table = line.ping_table()
    names = sorted(line.beam_columns)
    batches = list(line.beam_batches(names, rows))
    found: list[Any] = [names, table.time, table.ping, table.channels]
    found += [dict(sorted(table.columns.items()))[k] for k in sorted(table.columns)]
    # Where a batch is cut is free; the order of pings and beams is not.
    found += [
        np.concatenate([b.pings for b in batches]),
        np.concatenate([b.counts for b in batches]),
    ]
    found += [np.concatenate([b.columns[n] for b in batches]) for n in names]
    for account in line.accounts():
        assert account.balances
        found += [account.rows_used, account.rows_rejected, account.reasons, account.missing]
        found += [account.notes, account.rejected_rows]
    return found


def _same(ours: list[Any], theirs: list[Any]) -> None:
    assert len(ours) == len(theirs)
    for one, other in zip(ours, theirs, strict=True):
        if isinstance(one, np.ndarray):
            assert one.dtype == other.dtype
            np.testing.assert_array_equal(one, other)
        else:
            assert one == other


@pytest.mark.parametrize("group", [97, 100_000])
@pytest.mark.parametrize("name", LOGS)
def test_a_second_reading_gives_what_was_put_aside(
    name: str, group: int, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    path = _written(tmp_path / "log.parquet", LOGS[name](), group)
    aside = [_everything(line, 100_000) for line in _opened([path])]
    monkeypatch.setattr(spill, "IN_MEMORY", 0)
    for rows in (1, 333, 100_000):
        lines = _opened([path])
        again = [_everything(line, rows) for line in lines]
        if "apart" not in name:
            assert all(isinstance(line._spill, SecondReading) for line in lines)
        for ours, theirs in zip(again, aside, strict=True):
            _same(ours, theirs)


def test_small_logs_and_logs_of_text_are_put_aside(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    small = _written(tmp_path / "log.parquet", _log(1), 100_000)
    (line,) = _opened([small])
    line.ping_table()
    assert isinstance(line._spill, Spill)
    monkeypatch.setattr(spill, "IN_MEMORY", 0)
    text = tmp_path / "log.csv"
    text.write_text("time,ping,beam,depth (m)\n2024-01-01T00:00:00Z,1,1,10\n", encoding="utf-8")
    (line,) = _opened([text])
    line.ping_table()
    assert isinstance(line._spill, Spill)


def test_columns_are_asked_for_singly(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    log = _rejected(_log(6, ragged=True))
    path = _written(tmp_path / "log.parquet", log, 97)
    monkeypatch.setattr(spill, "IN_MEMORY", 0)
    (line,) = _opened([path])
    together = np.concatenate([b.columns["depth"] for b in line.beam_batches(BEAM_COLUMNS)])
    alone = np.concatenate([b.columns["depth"] for b in line.beam_batches(["depth"], 50)])
    np.testing.assert_array_equal(alone, together)
    assert 0 < len(alone) < len(log["depth"])
