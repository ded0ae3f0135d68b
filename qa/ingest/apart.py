"""Rows of one ping that stand far apart in a file, brought together on disk, so that memory does not follow the file."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
from numpy.typing import NDArray

from qa.ingest.rows import Integers, RowReader, Rows
from qa.ingest.spill import Spill

ROWS_TOGETHER = 300_000
"""Rows that are sorted in memory at once, about."""
MOST_BUCKETS = 256
HELD_BYTES = 1 << 19
"""Bytes of a bucket that are held before they are written."""
_SAMPLE = 1 << 18
_BATCH = 100_000


def in_order(times: RowReader, reader: RowReader) -> Iterator[Rows]:
    """All rows of a file in the order of their times, those of one time by channel, ping and beam.

    Rows are first put into files by spans of time that hold about as many each; each of these is sorted in memory.

    Parameters
    ----------
    times : RowReader
        Reads the times of the same rows, and nothing else.
    reader : RowReader
        Reads the rows, one a beam; the account is its own. It may leave no cell as it is in the file.
    """
    edges = _edges(times)
    buckets = [Spill(HELD_BYTES) for _ in range(len(edges) + 1)]
    try:
        for rows in reader.batches():
            if not len(rows):
                continue
            assert rows.one_each
            columns = _columns(rows)
            of = np.searchsorted(edges, rows.time, side="right")
            order = np.argsort(of, kind="stable")
            bounds = np.searchsorted(of[order], np.arange(len(buckets) + 1))
            for bucket, start, stop in zip(buckets, bounds[:-1], bounds[1:], strict=True):
                if start < stop:
                    bucket.append({k: v[order[start:stop]] for k, v in columns.items()})
        for bucket in buckets:
            bucket.finish()
            if bucket.rows:
                yield from _sorted(bucket)
            bucket.close()
    finally:
        for bucket in buckets:
            bucket.close()


def _edges(reader: RowReader) -> Integers:
    """Times that divide a file's rows into parts of about as many, none of which is cut within a time."""
    taken: list[Integers] = []
    step, count, held = 1, 0, 0
    for rows in reader.batches():
        taken.append(rows.time[-count % step :: step])
        count += len(rows)
        held += len(taken[-1])
        while held > _SAMPLE:
            taken = [np.concatenate(taken)[::2]]
            step, held = 2 * step, len(taken[0])
    sample = np.sort(np.concatenate(taken)) if taken else np.zeros(0, dtype=np.int64)
    parts = min(MOST_BUCKETS, -(-count // ROWS_TOGETHER))
    if parts < 2:
        return sample[:0]
    return np.unique(sample[np.arange(1, parts) * len(sample) // parts])


def _columns(rows: Rows) -> dict[str, NDArray[np.generic]]:
    found: dict[str, NDArray[np.generic]] = {"time": rows.time, "number": rows.numbers}
    for name in ("ping", "line", "channel"):
        values = getattr(rows, name)
        if values is not None:
            found[name] = values
    found |= {f"ping.{k}": np.asarray(v, dtype=np.float64) for k, v in rows.pings.items()}
    found |= {f"beam.{k}": np.asarray(v, dtype=np.float64) for k, v in rows.beams.items()}
    return found


def _sorted(bucket: Spill) -> Iterator[Rows]:
    names = bucket.columns
    parts: dict[str, list[NDArray[np.generic]]] = {name: [] for name in names}
    for batch in bucket.batches(names):
        for name, values in batch.items():
            parts[name].append(values)
    whole = {name: np.concatenate(values) for name, values in parts.items()}
    parts.clear()
    beams = sorted(name for name in names if name.startswith("beam.") and name != "beam.beam")
    # The last key decides first; rows that are the same to the last value come to stand together.
    keys = ["number", *beams, "beam.beam", "ping", "channel", "time"]
    order = np.lexsort([whole[key] for key in keys if key in whole])
    for start in range(0, len(order), _BATCH):
        rows = order[start : start + _BATCH]
        taken = {name: values[rows] for name, values in whole.items()}
        yield Rows(
            taken["number"],
            taken["time"],
            taken.get("ping"),
            taken.get("line"),
            taken.get("channel"),
            {k.removeprefix("ping."): v for k, v in taken.items() if k.startswith("ping.")},
            {
                k.removeprefix("beam."): v != 0.0 if k == "beam.accepted" else v
                for k, v in taken.items()
                if k.startswith("beam.")
            },
            np.broadcast_to(np.ones(1, dtype=np.int64), len(rows)),
            one_each=True,
        )


class ScatteredPlaces:
    """Row numbers in the file of rows by their place in the stream, on disk where they are many and in no order."""

    def __init__(self) -> None:
        self._numbers = Spill(HELD_BYTES)
        self.count = 0

    def add(self, numbers: Integers) -> None:
        """The next rows of the stream."""
        self._numbers.append({"number": numbers})
        self.count += len(numbers)

    def numbers(self, places: Integers) -> Integers:
        """Row numbers of places in the stream."""
        self._numbers.finish()
        found = np.zeros(len(places), dtype=np.int64)
        order = np.argsort(places, kind="stable")
        wanted, passed = places[order], 0
        for batch in self._numbers.batches(["number"]):
            here = batch["number"]
            low, high = np.searchsorted(wanted, [passed, passed + len(here)])
            found[order[low:high]] = here[wanted[low:high] - passed]
            passed += len(here)
        return found
