"""``pings.parquet``: each ping's quantities and verdicts, written line by line, joined at the end.

A line's part is an Arrow file, which costs little to write and to read again; it is compressed once, when the parts are joined.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Sequence
from functools import partial
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
from numpy.typing import NDArray

from qa.model.columns import PULSE_FORMS
from qa.model.findings import LineResult
from qa.report.drawing import clean

STATUS_WORDS = ("not assessed", "met", "missed", "exempt")
_STATUS = pa.dictionary(pa.int8(), pa.string())
_TEXT = pa.dictionary(pa.int32(), pa.string())
_TIME = pa.timestamp("ns", tz="UTC")
_EPOCH = "nanoseconds since 1970-01-01"
ROWS = 65_536


def write_part(result: LineResult, path: Path) -> None:
    """Write one line's pings, some at a time, so that a long line needs no second copy of itself."""
    fields: list[pa.Field] = []
    makers: list[Callable[[slice], pa.Array]] = []

    def add(
        name: str, kind: pa.DataType, make: Callable[[slice], pa.Array], unit: str = ""
    ) -> None:
        fields.append(pa.field(name, kind, metadata={"units": unit} if unit else None))
        makers.append(make)

    def add_words(name: str, codes: NDArray[Any], words: Sequence[str], kind: pa.DataType) -> None:
        held = pa.array([clean(w) for w in words], pa.string())
        add(
            name,
            kind,
            lambda rows: pa.DictionaryArray.from_arrays(
                pa.array(codes[rows], kind.index_type), held
            ),
        )

    def add_numbers(name: str, values: NDArray[Any], unit: str) -> None:
        add(name, pa.float64(), lambda rows: _numbers(values[rows]), unit)

    n = len(result.time)
    channel = np.zeros(n, dtype=np.int32)
    index = np.zeros(n, dtype=np.int64)
    for number, (_, start, stop) in enumerate(result.channels):
        channel[start:stop] = number
        index[start:stop] = np.arange(stop - start)
    add_words("line", np.zeros(n, dtype=np.int32), [result.finding.line], _TEXT)
    add_words("channel", channel, [name for name, _, _ in result.channels] or [""], _TEXT)
    add("ping", pa.int64(), lambda rows: pa.array(result.ping[rows], pa.int64()))
    add("index", pa.int64(), lambda rows: pa.array(index[rows], pa.int64()))
    add("time", _TIME, lambda rows: pa.array(result.time[rows], pa.int64()).cast(_TIME), _EPOCH)
    for name in sorted(result.columns):
        values = result.columns[name]
        if name == "pulse_form":
            add(name, _STATUS, partial(_forms, values))
        else:
            add_numbers(name, values, result.units.get(name, "1"))
    for rule in sorted(result.rules):
        series = result.rules[rule]
        add_words(f"{rule}: verdict", series.status, STATUS_WORDS, _STATUS)
        for side, values in (("value", series.value), ("limit", series.limit)):
            if np.isfinite(values).any():
                add_numbers(f"{rule}: {side}", values, series.unit)
    schema = pa.schema(fields)
    path.parent.mkdir(parents=True, exist_ok=True)
    options = pa.ipc.IpcWriteOptions(compression="lz4")
    with (
        pa.OSFile(str(path), "wb") as sink,
        pa.ipc.new_file(sink, schema, options=options) as writer,
    ):
        for start in range(0, n, ROWS):
            rows = slice(start, start + ROWS)
            writer.write_batch(
                pa.RecordBatch.from_arrays([make(rows) for make in makers], schema=schema)
            )


def _forms(values: NDArray[Any], rows: slice) -> pa.Array:
    part = values[rows]
    known = np.isfinite(part)
    codes = pa.array(np.where(known, part, 0).astype(np.int8), mask=~known)
    return pa.DictionaryArray.from_arrays(codes, pa.array(PULSE_FORMS))


def _numbers(values: NDArray[Any]) -> pa.Array:
    values = np.asarray(values, dtype=np.float64)
    return pa.array(values, mask=~np.isfinite(values))


def join_parts(parts: Iterable[Path], path: Path) -> int:
    """Join lines' parts into one Parquet file, a batch at a time; returns the rows.

    A column that a line lacks is null there. The parts stay.
    """
    parts = list(parts)
    schema = _joint_schema(parts)
    rows = 0
    plain = [
        f.name
        for f in schema
        if not pa.types.is_floating(f.type) and f.name not in ("ping", "index", "time")
    ]
    waiting: list[pa.RecordBatch] = []
    held = 0
    with pq.ParquetWriter(
        path, schema, compression="zstd", compression_level=1, use_dictionary=plain
    ) as writer:

        def flush() -> None:
            nonlocal held
            if waiting:
                writer.write_table(pa.Table.from_batches(waiting, schema).unify_dictionaries())
            waiting.clear()
            held = 0

        for part in parts:
            with pa.OSFile(str(part), "rb") as source, pa.ipc.open_file(source) as reader:
                for n in range(reader.num_record_batches):
                    batch = _fitted(reader.get_batch(n), schema)
                    rows += batch.num_rows
                    held += batch.num_rows
                    waiting.append(batch)
                    if held >= ROWS:
                        flush()
        flush()
    return rows


def _joint_schema(parts: Sequence[Path]) -> pa.Schema:
    first = [pa.field("line", _TEXT), pa.field("channel", _TEXT), pa.field("ping", pa.int64())]
    first += [
        pa.field("index", pa.int64()),
        pa.field("time", _TIME, metadata={"units": _EPOCH}),
    ]
    fixed = {f.name for f in first}
    quantities: dict[str, pa.Field] = {}
    rules: dict[str, pa.Field] = {}
    for part in parts:
        with pa.OSFile(str(part), "rb") as source, pa.ipc.open_file(source) as reader:
            for field in reader.schema:
                if field.name not in fixed:
                    (rules if ": " in field.name else quantities).setdefault(field.name, field)
    rest = [quantities[k] for k in sorted(quantities)]
    rest += [rules[k] for k in sorted(rules, key=_rule_order)]
    return pa.schema([*first, *rest])


def _rule_order(name: str) -> tuple[str, int]:
    rule, _, side = name.rpartition(": ")
    return rule, ("verdict", "value", "limit").index(side)


def _fitted(batch: pa.RecordBatch, schema: pa.Schema) -> pa.RecordBatch:
    have = {name: n for n, name in enumerate(batch.schema.names)}
    columns = [
        batch.column(have[f.name]) if f.name in have else pa.nulls(batch.num_rows, f.type)
        for f in schema
    ]
    return pa.RecordBatch.from_arrays(columns, schema=schema)
