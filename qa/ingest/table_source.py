"""Parquet and Arrow logs, read in batches, only the columns that are asked for."""

from __future__ import annotations

import json
from collections.abc import Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
import pyarrow.parquet as pq
from numpy.typing import NDArray

from qa.ingest.names import Header
from qa.ingest.page_headers import dictionary_size
from qa.ingest.text_source import RawBatch
from qa.model.errors import InputError

MAGIC_PARQUET, MAGIC_ARROW = b"PAR1", b"ARROW1"
_ROW_LIMIT = 1 << 40
BATCH_ROWS = 100_000
"""Rows of a batch: columns of so many numbers stay in a processor's cache. A power of two would make them clash there."""


@dataclass(frozen=True, slots=True)
class TableFormat:
    """All that is needed to read one Parquet or Arrow log."""

    kind: str
    rows: int


def _damaged(where: str, problem: BaseException) -> InputError:
    text = str(problem).strip()
    return InputError(
        "The file is damaged: it cannot be read as what it says it is.",
        where=where,
        found=text.splitlines()[0][:160] if text else type(problem).__name__,
        advice="Copy or export it again.",
    )


def _flat_fields(fields: Iterable[pa.Field], path: str = "") -> Iterator[tuple[str, str, pa.Field]]:
    """Leaf columns as (dotted path, own name, field); records are opened, lists are not."""
    for field in fields:
        if pa.types.is_struct(field.type):
            inner = [field.type.field(i) for i in range(field.type.num_fields)]
            yield from _flat_fields(inner, f"{path}{field.name}.")
        else:
            yield f"{path}{field.name}", field.name, field


def _units(field: pa.Field) -> str:
    metadata = field.metadata or {}
    for key in (b"units", b"unit", b"Units", b"UNITS", b"Unit"):
        if key in metadata:
            return str(metadata[key].decode("utf-8", "replace"))
    return ""


class TableSource:
    """One Parquet or Arrow log."""

    def __init__(self, path: Path, where: str) -> None:
        self.path, self.where = path, where
        self._file: Any = None
        try:
            with path.open("rb") as file:
                magic = file.read(6)
            self.kind = "parquet" if magic[:4] == MAGIC_PARQUET else "arrow"
            if self.kind == "parquet":
                self._file = pq.ParquetFile(str(path), memory_map=False, pre_buffer=False)
                self.schema = self._file.schema_arrow
                self.length = int(self._file.metadata.num_rows)
                self.groups = [
                    int(self._file.metadata.row_group(i).num_rows)
                    for i in range(self._file.metadata.num_row_groups)
                ]
                self._check_values()
            else:
                self._open_arrow(magic)
            fields = list(_flat_fields(self.schema))
            # A damaged name of a time zone shows only when it is asked for.
            [f.type.tz for _, _, f in fields if pa.types.is_timestamp(f.type)]
        except InputError:
            raise
        except (
            OSError,
            pa.ArrowException,
            ValueError,
            KeyError,
            OverflowError,
            MemoryError,
        ) as problem:
            raise _damaged(where, problem) from None
        # Of columns of one name the first counts, here as where their values are read.
        self.fields: dict[str, pa.Field] = {}
        self.own_names: dict[str, str] = {}
        for name, own, field in fields:
            self.fields.setdefault(name, field)
            self.own_names.setdefault(name, own)
        self.nested = any("." in path and path not in self.schema.names for path in self.fields)
        if self.kind == "parquet" and (
            sum(self.groups) != self.length
            or not 0 <= self.length < _ROW_LIMIT
            or min(self.groups, default=0) < 0
        ):
            raise _damaged(
                where, ValueError(f"{self.length} rows stated, {sum(self.groups)} in its parts")
            )

    def _check_values(self) -> None:
        """Refuse a file whose columns say that they hold more or fewer values than it says it has rows."""
        columns = range(len(self._file.schema))
        flat = next(
            (i for i in columns if not self._file.schema.column(i).max_repetition_level), None
        )
        for group, rows in enumerate(self.groups if flat is not None else ()):
            # Damaged statistics are refused by the reader; asked for here first they would end the process.
            name = self._file.schema.column(flat).path
            next(self._file.iter_batches(batch_size=1, row_groups=[group], columns=[name]), None)
            values = self._file.metadata.row_group(group).column(flat).num_values
            if values != rows:
                raise _damaged(
                    self.where, ValueError(f"{rows} rows stated, {values} values in a column")
                )

    def _open_arrow(self, magic: bytes) -> None:
        if magic[:6] == MAGIC_ARROW:
            source = pa.memory_map(str(self.path), "r")
            self._file = pa.ipc.open_file(source)
            self.schema = self._file.schema
            self.groups = [
                self._file.get_batch(i).num_rows for i in range(self._file.num_record_batches)
            ]
            self.length = sum(self.groups)
        else:
            with pa.OSFile(str(self.path), "rb") as source:
                reader = pa.ipc.open_stream(source)
                self.schema = reader.schema
                self.groups = [batch.num_rows for batch in reader]
            self.length = sum(self.groups)
            self.kind = "stream"

    def close(self) -> None:
        """Let the file go."""
        if self.kind == "parquet" and self._file is not None:
            self._file.close()

    @property
    def headers(self) -> list[Header]:
        """The columns with the units that their metadata give."""
        return [Header(path, metadata=_units(field)) for path, field in self.fields.items()]

    def list_columns(self) -> list[str]:
        """Columns that hold a list in each row."""
        return [p for p, f in self.fields.items() if is_list(f.type)]

    def extremes(self, name: str, group: int) -> tuple[float, float] | None:
        """Least and greatest of a column of numbers or times in a part of which its statistics say that no cell is empty.

        Times are given as counts. None where the statistics do not say. A cell that is no number (NaN) may be there.
        The column must have been read from before: statistics that are damaged are refused there, and end the process
        here.
        """
        if self.kind != "parquet" or self.nested:
            return None
        try:
            place = self.schema.names.index(name)
            column = self._file.metadata.row_group(group).column(place)
            statistics = column.statistics
            if statistics is None or column.path_in_schema != name:
                return None
            if not statistics.has_min_max or not statistics.has_null_count or statistics.null_count:
                return None
            if pa.types.is_timestamp(self.schema.field(place).type):
                return int(statistics.min_raw), int(statistics.max_raw)
            return statistics.min, statistics.max
        except (ValueError, TypeError, IndexError, pa.ArrowException):
            return None

    def constants(self, names: Sequence[str], group: int) -> dict[str, float]:
        """Columns of numbers that have one value, and nothing else, in all rows of a part, with that value.

        Their least and greatest are the same, no cell is empty, and their dictionary has one entry: it would have
        another for a cell that is no number (NaN), of which the statistics do not tell. The columns must have been
        read from before, as for :meth:`extremes`.
        """
        found: dict[str, float] = {}
        with self.path.open("rb") as file:
            for name in names:
                extremes = self.extremes(name, group)
                if extremes is None or extremes[0] != extremes[1]:
                    continue
                column = self._file.metadata.row_group(group).column(self.schema.names.index(name))
                start = column.dictionary_page_offset
                if start and not column.file_path and dictionary_size(file, start) == 1:
                    found[name] = extremes[0]
        return found

    def try_out(self, names: Sequence[str], group: int) -> None:
        """Read one row of some columns of a part, so that damage shows as an error."""
        for _ in self.batches(names, 1, [group]):
            return

    def batches(
        self, names: Sequence[str], size: int = BATCH_ROWS, groups: Sequence[int] | None = None
    ) -> Iterator[tuple[int, RawBatch]]:
        """Batches of the named columns, each with the number of its part of the file.

        Raises
        ------
        InputError
            If the file is damaged, or holds fewer or more rows than it says.
        """
        first = np.concatenate([[0], np.cumsum(self.groups)])
        chosen = range(len(self.groups)) if groups is None else groups
        try:
            if self.kind == "stream":
                yield from self._stream(names, size, set(chosen))
                return
            for group in chosen:
                start = int(first[group])
                done = 0
                for batch in self._group(group, names, size):
                    yield group, self._raw(batch, names, start + done)
                    done += batch.num_rows
                if done != self.groups[group] and names:
                    raise _damaged(
                        self.where, ValueError(f"{self.groups[group]} rows stated, {done} found")
                    )
        except (
            OSError,
            pa.ArrowException,
            ValueError,
            OverflowError,
            MemoryError,
            NotImplementedError,
        ) as problem:
            raise _damaged(self.where, problem) from None

    def _group(self, group: int, names: Sequence[str], size: int) -> Iterator[pa.RecordBatch]:
        if self.kind == "parquet":
            if not names:
                yield from _empty(self.groups[group], size)
                return
            columns = sorted(set(names))
            yield from self._file.iter_batches(
                batch_size=size, row_groups=[group], columns=columns, use_threads=True
            )
            return
        batch = self._file.get_batch(group)
        for start in range(0, batch.num_rows, size):
            yield batch.slice(start, size)

    def _stream(
        self, names: Sequence[str], size: int, chosen: set[int]
    ) -> Iterator[tuple[int, RawBatch]]:
        start = 0
        with pa.OSFile(str(self.path), "rb") as source:
            for group, batch in enumerate(pa.ipc.open_stream(source)):
                if group in chosen:
                    for at in range(0, batch.num_rows, size):
                        yield group, self._raw(batch.slice(at, size), names, start + at)
                start += batch.num_rows

    def _raw(self, batch: pa.RecordBatch, names: Sequence[str], start: int) -> RawBatch:
        # Offsets into texts and lists and indices into dictionaries are taken on trust when a file is read; a damaged
        # one would read elsewhere in memory.
        batch.validate(full=True)
        columns = {name: _leaf(batch, name) for name in names}
        rows = np.arange(start + 1, start + 1 + batch.num_rows, dtype=np.int64)

        def texts(positions: NDArray[np.int64]) -> list[str]:
            # By a handle of its own: another thread may be reading on, or have closed this one at the end.
            numbers = rows[positions].tolist()
            again = TableSource(self.path, self.where)
            try:
                found = again.rows(numbers)
            finally:
                again.close()
            return [found[n] for n in numbers]

        return RawBatch(batch.num_rows, columns, rows, texts)

    def rows(self, numbers: Sequence[int]) -> dict[int, str]:
        """Rows by their number, each as its values between commas."""
        wanted = np.unique(np.asarray(numbers, dtype=np.int64))
        found: dict[int, str] = {}
        if not len(wanted):
            return found
        everything = list(self.fields)
        first = np.concatenate([[0], np.cumsum(self.groups)])
        needed = np.unique(np.searchsorted(first, wanted - 1, side="right") - 1)
        for _, raw in self.batches(everything, groups=needed.tolist()):
            low, high = (
                np.searchsorted(wanted, [raw.rows[0], raw.rows[-1] + 1]) if raw.length else (0, 0)
            )
            if low == high:
                continue
            places = wanted[low:high] - int(raw.rows[0])
            parts = [listed(raw.columns[name].take(pa.array(places))) for name in everything]
            for i, number in enumerate(wanted[low:high].tolist()):
                found[number] = ",".join(_written(values[i]) for values in parts)[:10_000]
        return found


def _empty(rows: int, size: int) -> Iterator[pa.RecordBatch]:
    for start in range(0, rows, size):
        count = min(size, rows - start)
        yield pa.record_batch([pa.nulls(count)], names=["nothing"])


def listed(array: pa.Array) -> list[Any]:
    """The values of a column; times beyond the calendar as the counts that they are."""
    try:
        return list(array.to_pylist())
    except (OverflowError, ValueError):
        return [_plain_value(value) for value in array]


def _plain_value(value: Any) -> Any:
    try:
        return value.as_py()
    except (OverflowError, ValueError):
        return getattr(value, "value", "(beyond the calendar)")


def _written(value: Any) -> str:
    if value is None:
        return ""
    if hasattr(value, "isoformat"):
        return str(value.isoformat())
    if isinstance(value, list | dict):
        return json.dumps(value, default=str)
    return str(value)


def is_list(kind: pa.DataType) -> bool:
    """Whether values of a type are lists."""
    return bool(
        pa.types.is_list(kind) or pa.types.is_large_list(kind) or pa.types.is_fixed_size_list(kind)
    )


def _leaf(batch: pa.RecordBatch, path: str) -> pa.Array:
    # A record may bear the name of a column beside it.
    own = [f.name == path and not pa.types.is_struct(f.type) for f in batch.schema]
    if any(own):
        array = batch.column(own.index(True))
    else:
        parts = path.split(".")
        # a name may hold dots itself: the longest head that is a column
        for count in range(len(parts), 0, -1):
            head = ".".join(parts[:count])
            if head in batch.schema.names:
                array = batch.column(batch.schema.names.index(head))
                rest = parts[count:]
                break
        else:
            raise ValueError(f"no column {path}")
        for part in rest:
            array = pc.struct_field(array, part)
    return array


def kinds_of(fields: Mapping[str, pa.Field]) -> dict[str, str]:
    """Types as words, for messages."""
    return {name: str(field.type) for name, field in fields.items()}
