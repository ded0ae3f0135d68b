"""Columns of rows, put aside while a log is read once: in memory while few, in a temporary Arrow file else."""

from __future__ import annotations

import contextlib
import shutil
import tempfile
import weakref
from collections.abc import Iterator, Mapping, Sequence
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
from numpy.typing import NDArray

IN_MEMORY = 1 << 24
"""Bytes that stay in memory."""


class Spill:
    """Batches of columns, written once and read back any number of times."""

    def __init__(self, in_memory: int = IN_MEMORY) -> None:
        self._limit = in_memory
        self._kept: list[pa.RecordBatch] = []
        self._bytes = 0
        self._folder: str | None = None
        self._writer: Any = None
        self._mapped: Any = None
        self._reader: Any = None
        self._schema: pa.Schema | None = None
        self.rows = 0

    def append(self, columns: Mapping[str, NDArray[Any]]) -> None:
        """Put a batch aside. Columns that the first batch did not have are refused by Arrow."""
        arrays = []
        for values in columns.values():
            if values.dtype == bool:
                arrays.append(pa.array(values.view(np.uint8)))
            elif values.dtype == np.float32:
                arrays.append(pa.array(values.astype(np.float64), from_pandas=False))
            else:
                arrays.append(pa.array(np.ascontiguousarray(values), from_pandas=False))
        batch = pa.record_batch(arrays, names=list(columns))
        if not batch.num_rows:
            return
        self._schema = self._schema or batch.schema
        self.rows += batch.num_rows
        if self._writer is None:
            self._kept.append(batch)
            self._bytes += batch.nbytes
            if self._bytes > self._limit:
                self._to_file()
        else:
            self._writer.write_batch(batch)

    @property
    def columns(self) -> list[str]:
        """Names of the columns that were put aside."""
        return [] if self._schema is None else list(self._schema.names)

    def _to_file(self) -> None:
        self._folder = tempfile.mkdtemp(prefix="pingworthy-")
        self._finalizer = weakref.finalize(self, shutil.rmtree, self._folder, True)
        assert self._schema is not None
        self._writer = pa.ipc.new_file(str(Path(self._folder) / "beams.arrow"), self._schema)
        for batch in self._kept:
            self._writer.write_batch(batch)
        self._kept = []

    def finish(self) -> None:
        """No more batches come."""
        if self._writer is not None and self._reader is None:
            self._writer.close()
            assert self._folder is not None
            # Read batch by batch: a mapped file would count as this process's memory, whole.
            self._mapped = pa.OSFile(str(Path(self._folder) / "beams.arrow"), "rb")
            self._reader = pa.ipc.open_file(self._mapped)

    def batches(self, names: Sequence[str], size: int = 0) -> Iterator[dict[str, NDArray[Any]]]:
        """The named columns, batch after batch as they were put aside, whatever the ``size`` that is wished for."""
        if self._reader is None:
            batches: Iterator[pa.RecordBatch] = iter(self._kept)
        else:
            batches = (self._reader.get_batch(i) for i in range(self._reader.num_record_batches))
        for batch in batches:
            yield {name: batch.column(name).to_numpy(zero_copy_only=False) for name in names}

    def close(self) -> None:
        """Remove what was put aside."""
        self._kept = []
        self._reader = None
        if self._mapped is not None:
            with contextlib.suppress(OSError):
                self._mapped.close()
            self._mapped = None
        if self._folder is not None:
            self._finalizer()
            self._folder = None
