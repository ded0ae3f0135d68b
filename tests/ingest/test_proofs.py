"""A Parquet log comes to the same whether its statistics are believed or each of its cells is looked at."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from qa.ingest import open_line, plan_logs, rows, spill
from qa.ingest.line_log import OpenedLine
from qa.ingest.page_headers import dictionary_size
from qa.ingest.proofs import NO_PROOF
from qa.ingest.table_source import TableSource
from qa.model.errors import InputError
from qa.model.survey_file import SurveyFile

BEAMS = 8


def _written(path: Path, log: dict[str, Any], group: int, units: dict[str, str]) -> Path:
    columns = {
        name: values if isinstance(values, pa.Array) else pa.array(values)
        for name, values in log.items()
    }
    schema = pa.schema(
        pa.field(name, column.type, metadata={"units": units[name]} if name in units else None)
        for name, column in columns.items()
    )
    pq.write_table(pa.table(columns, schema=schema), path, row_group_size=group)
    return path


def _line(path: Path) -> OpenedLine:
    survey = SurveyFile()
    (task,) = plan_logs([path], survey).lines
    return open_line(task, survey)


def _everything(path: Path) -> list[Any]:
    line = _line(path)
    table = line.ping_table()
    names = sorted(line.beam_columns)
    beams = list(line.beam_batches(names))
    (account,) = line.accounts()
    assert account.balances
    arrays = [table.time, table.ping, *(table.columns[k] for k in sorted(table.columns))]
    arrays += [np.concatenate([b.columns[n] for b in beams]) for n in names if beams]
    return [
        [a.tobytes() for a in arrays],
        sorted(table.columns),
        names,
        table.channels,
        *(account.rows_used, account.rows_rejected, account.reasons, account.missing),
        *(account.notes, account.rejected_rows),
    ]


CELLS = {
    "pulse_length": [60.0, 60.0, 60.0, 90.0, -1.0, -999.0, float("nan"), None],
    "latitude": [38.5, 38.5, 0.0, 95.0, None],
    "longitude": [-9.25, -9.25, 0.0, 181.0, float("nan")],
    "depth": [20.0, 21.0, -3.0, -9999.0, float("nan"), None],
    "beam_angle": [-10.0, 30.0, 400.0, float("nan")],
}


@st.composite
def logs(draw: st.DrawFn) -> tuple[dict[str, Any], int]:
    """Beam logs most of whose columns are as they should be, with some cells that are not."""
    pings = draw(st.integers(1, 12))
    n = pings * BEAMS
    owner = np.repeat(np.arange(pings), BEAMS)
    log: dict[str, Any] = {
        "time": pa.array(1_700_000_000_000_000 + owner * 250_000, pa.timestamp("us", "UTC")),
        "ping": owner,
        "beam": np.tile(np.arange(1, BEAMS + 1, dtype=np.int32), pings),
    }
    if draw(st.booleans()):
        log["beam"] = np.where(np.arange(n) == draw(st.integers(0, n - 1)), 1, log["beam"])
    for name, cells in CELLS.items():
        values: list[float | None] = [cells[0]] * n
        if name == "depth":
            values = [20.0 + 0.01 * i for i in range(n)]
        for _ in range(draw(st.integers(0, 2))):
            values[draw(st.integers(0, n - 1))] = draw(st.sampled_from(cells))
        log[name] = pa.array(values, pa.float64())
    if draw(st.booleans()):
        twice = np.sort(np.append(np.arange(n), draw(st.integers(0, n - 1))))
        log = {
            k: v.take(pa.array(twice)) if isinstance(v, pa.Array) else v[twice]
            for k, v in log.items()
        }
    return log, draw(st.sampled_from([5, 17, 1000]))


@settings(max_examples=60, deadline=None)
@given(made=logs(), twice=st.booleans())
def test_no_cell_is_taken_otherwise_for_a_proof(
    made: tuple[dict[str, Any], int], twice: bool, tmp_path_factory: pytest.TempPathFactory
) -> None:
    log, group = made
    path = _written(
        tmp_path_factory.mktemp("log") / "log.parquet", log, group, {"pulse_length": "us"}
    )
    with pytest.MonkeyPatch.context() as patch:
        if twice:
            patch.setattr(spill, "IN_MEMORY", 0)
        believed = _everything(path)
        patch.setattr(rows, "unread", lambda *_: NO_PROOF)
        patch.setattr(rows, "proven", lambda *_: NO_PROOF)
        assert believed == _everything(path)


def _constant_log(**more: Any) -> dict[str, Any]:
    owner = np.repeat(np.arange(50), BEAMS)
    return {
        "time": pa.array(1_700_000_000_000_000 + owner * 250_000, pa.timestamp("us", "UTC")),
        "ping": owner,
        "beam": np.tile(np.arange(1, BEAMS + 1), 50),
        "depth": 20.0 + 0.001 * np.arange(len(owner)),
        "pulse_length": np.full(len(owner), 60.0),
    } | more


def _asked_for(path: Path, monkeypatch: pytest.MonkeyPatch) -> set[str]:
    """Columns of which more than a first row was read when the line's pings were."""
    asked: set[str] = set()
    whole = TableSource._group

    def watched(self: Any, group: int, names: Any, size: int) -> Any:
        asked.update(names if size > 1 else ())
        return whole(self, group, names, size)

    line = _line(path)
    monkeypatch.setattr(TableSource, "_group", watched)
    line.ping_table()
    monkeypatch.setattr(TableSource, "_group", whole)
    return asked


def test_a_setting_that_never_changes_is_not_read_and_beams_are_not_before_they_are_wanted(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(spill, "IN_MEMORY", 0)
    units = {"pulse_length": "us"}
    path = _written(tmp_path / "log.parquet", _constant_log(), 100, units)
    assert _asked_for(path, monkeypatch) == {"time", "ping", "beam"}
    assert _line(path).ping_table().columns["pulse_length"].tolist() == [60e-6] * 50


@pytest.mark.parametrize("odd", [float("nan"), None, 61.0])
def test_a_setting_with_one_other_cell_is_read(
    odd: float | None, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    values: list[float | None] = [60.0] * (50 * BEAMS)
    values[3 * BEAMS] = odd
    log = _constant_log(pulse_length=pa.array(values, pa.float64()))
    path = _written(tmp_path / "log.parquet", log, 10_000, {"pulse_length": "us"})
    assert "pulse_length" in _asked_for(path, monkeypatch)
    found = _line(path).ping_table().columns["pulse_length"]
    np.testing.assert_array_equal(found[3], np.nan if odd != 61.0 else 61e-6)
    assert (np.delete(found, 3) == 60e-6).all()


def test_a_file_whose_beams_are_not_what_its_statistics_say_is_refused(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(spill, "IN_MEMORY", 0)
    log = _constant_log()
    log["depth"][123] = -5.0
    path = _written(tmp_path / "log.parquet", log, 10_000, {"pulse_length": "us"})
    honest = TableSource.extremes
    monkeypatch.setattr(
        TableSource,
        "extremes",
        lambda self, name, group: (20.0, 21.0) if name == "depth" else honest(self, name, group),
    )
    line = _line(path)
    with pytest.raises(InputError, match="its own statistics rule out"):
        list(line.beam_batches(["depth"]))


@pytest.mark.parametrize("version", ["1.0", "2.0"])
@pytest.mark.parametrize("compression", ["none", "zstd", "snappy"])
@pytest.mark.parametrize("distinct", [1, 2, 300])
def test_a_dictionary_has_as_many_entries_as_were_written(
    distinct: int, compression: str, version: str, tmp_path: Path
) -> None:
    # Reference: files that pyarrow writes, of whose values the number is known.
    path = tmp_path / "log.parquet"
    table = pa.table({"a": np.arange(4000) % distinct * 0.5})
    pq.write_table(table, path, compression=compression, data_page_version=version)
    column = pq.ParquetFile(path).metadata.row_group(0).column(0)
    with path.open("rb") as file:
        assert dictionary_size(file, column.dictionary_page_offset) == distinct
        # A page of data is none of dictionaries, and neither is what is no page at all.
        assert dictionary_size(file, column.data_page_offset) is None
        assert dictionary_size(file, 0) is None
        assert dictionary_size(file, path.stat().st_size) is None
