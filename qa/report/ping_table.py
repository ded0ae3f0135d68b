"""``pings.parquet``: each ping's quantities and verdicts, written line by line, joined at the end.

A line's part is an Arrow file, which costs little to write and to read again; it is compressed once, when the parts are joined.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
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
ROWS = 131_072


def write_part(result: LineResult, path: Path) -> None:
    """Write one line's pings."""
    columns, fields = [], []

    def add(name: str, values: Any, kind: pa.DataType, unit: str = "") -> None:
        columns.append(values)
        fields.append(pa.field(name, kind, metadata={"units": unit} if unit else None))

    n = len(result.time)
    channel = np.zeros(n, dtype=np.int32)
    index = np.zeros(n, dtype=np.int64)
    for number, (_, start, stop) in enumerate(result.channels):
        channel[start:stop] = number
        index[start:stop] = np.arange(stop - start)
    names = [name for name, _, _ in result.channels] or [""]
    add("line", _dictionary(np.zeros(n, dtype=np.int32), [result.finding.line], _TEXT), _TEXT)
    add("channel", _dictionary(channel, names, _TEXT), _TEXT)
    add("ping", pa.array(result.ping, pa.int64()), pa.int64())
    add("index", pa.array(index, pa.int64()), pa.int64())
    add(
        "time", pa.array(result.time, pa.int64()).cast(_TIME), _TIME, "nanoseconds since 1970-01-01"
    )
    for name in sorted(result.columns):
        values = result.columns[name]
        if name == "pulse_form":
            code = np.where(np.isfinite(values), values, 0).astype(np.int8)
            form = pa.DictionaryArray.from_arrays(
                pa.array(code, mask=~np.isfinite(values)), pa.array(PULSE_FORMS)
            )
            add(name, form, _STATUS)
        else:
            add(name, _numbers(values), pa.float64(), result.units.get(name, "1"))
    for rule in sorted(result.rules):
        series = result.rules[rule]
        add(f"{rule}: verdict", _dictionary(series.status, STATUS_WORDS, _STATUS), _STATUS)
        for side, values in (("value", series.value), ("limit", series.limit)):
            if np.isfinite(values).any():
                add(f"{rule}: {side}", _numbers(values), pa.float64(), series.unit)
    table = pa.Table.from_arrays(columns, schema=pa.schema(fields))
    path.parent.mkdir(parents=True, exist_ok=True)
    options = pa.ipc.IpcWriteOptions(compression="lz4")
    with (
        pa.OSFile(str(path), "wb") as sink,
        pa.ipc.new_file(sink, table.schema, options=options) as writer,
    ):
        writer.write_table(table, max_chunksize=ROWS)


_TIME = pa.timestamp("ns", tz="UTC")


def _dictionary(codes: NDArray[Any], words: Sequence[str], kind: pa.DictionaryType) -> pa.Array:
    return pa.DictionaryArray.from_arrays(
        pa.array(codes, kind.index_type), pa.array([clean(w) for w in words], pa.string())
    )


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
        pa.field("time", _TIME, metadata={"units": "nanoseconds since 1970-01-01"}),
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
