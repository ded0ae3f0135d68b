"""Pings that stand in two files which are lines of their own: each is to be counted once.

Files are compared only where their times overlap, and read whole only where the first rows of the later one are
found in the earlier one; files that follow one another cost one look at their ends.
"""

from __future__ import annotations

import itertools
import zlib
from collections.abc import Iterator, Sequence

import numpy as np
from numpy.typing import NDArray

from qa.ingest.probe import FileProbe
from qa.ingest.rows import Integers, Names, RowReader, Rows
from qa.ingest.table_source import TableSource
from qa.ingest.text_source import TextSource
from qa.model.errors import InputError

_WINDOW = 1 << 16
_HEAD = 1 << 18
_HEAD_ROWS = 4096
Digests = NDArray[np.uint64]


def met_before(
    probes: Sequence[FileProbe], spans: Sequence[tuple[int, int] | None]
) -> dict[int, tuple[str, Integers]]:
    """Rows of later files that stand, value for value, in an earlier one.

    Parameters
    ----------
    probes : sequence of FileProbe
        Files that are lines of their own, in the order in which they count.
    spans : sequence of (int, int) or None
        What :func:`time_span` tells of each.

    Returns
    -------
    dict of int to (str, ndarray of int64)
        By position of the later file: the earlier file's name and the numbers of the rows met before.
    """
    if len(probes) < 2:
        return {}
    found: dict[int, tuple[str, Integers]] = {}
    order = sorted(
        (i for i, span in enumerate(spans) if span is not None), key=lambda i: (spans[i], i)
    )
    open_files: list[int] = []
    for later in order:
        start = spans[later]
        assert start is not None
        open_files = [i for i in open_files if _end(spans[i]) >= start[0]]
        for earlier in open_files:
            first, second = sorted((earlier, later))
            if second in found or probes[first].grain != probes[second].grain:
                continue
            rows = _shared(probes[earlier], probes[later], start[0], probes[first], probes[second])
            if len(rows):
                found[second] = (probes[first].shown, rows)
        open_files.append(later)
    return found


def _end(span: tuple[int, int] | None) -> int:
    assert span is not None
    return span[1]


def _shared(
    earlier: FileProbe, later: FileProbe, start: int, first: FileProbe, second: FileProbe
) -> Integers:
    """Row numbers of ``second`` that stand in ``first``, if ``earlier`` holds the first rows of ``later`` at all."""
    nothing = np.zeros(0, dtype=np.int64)
    try:
        names = Names()
        head = next(_head(later, names), None)
        if head is None or not len(head):
            return nothing
        wanted = np.sort(_digests(head, names))
        if not any(
            _among(_digests(rows, names), wanted).any() for rows in _around(earlier, start, names)
        ):
            return nothing
        seen = np.sort(
            np.concatenate([_digests(rows, names) for rows in RowReader(first, names).batches()])
        )
        again = [
            rows.numbers[_among(_digests(rows, names), seen)]
            for rows in RowReader(second, names).batches()
        ]
    except InputError:
        # what is wrong with a file is said when its line is read
        return nothing
    return np.concatenate([nothing, *again])


def _among(values: Digests, ordered: Digests) -> NDArray[np.bool_]:
    """Which values stand among those of another array, which is sorted once and searched for every batch."""
    if not len(ordered):
        return np.zeros(len(values), dtype=bool)
    place = np.minimum(np.searchsorted(ordered, values), len(ordered) - 1)
    return np.asarray(ordered[place] == values)


def _digests(rows: Rows, names: Names) -> Digests:
    """For each row a number that all its values give."""
    total = np.zeros(len(rows), dtype=np.uint64)

    def weight(name: str) -> np.uint64:
        return np.uint64(zlib.crc32(name.encode()) * 2 + 0x9E3779B97F4A7C15)

    def mixed(bits: NDArray[np.uint64], name: str) -> Digests:
        bits = (bits ^ (bits >> np.uint64(29))) * weight(name)
        return bits ^ (bits >> np.uint64(32))

    def number(values: NDArray[np.generic]) -> NDArray[np.uint64]:
        floats = np.asarray(values, dtype=np.float64) + 0.0
        return np.where(np.isnan(floats), np.nan, floats).view(np.uint64)

    with np.errstate(over="ignore"):
        total += mixed(rows.time.view(np.uint64), "time")
        if rows.ping is not None:
            total += mixed(rows.ping.view(np.uint64), "ping")
        if rows.channel is not None:
            codes = [zlib.crc32(n.encode()) for n in names.channel.names]
            total += mixed(np.array(codes, dtype=np.uint64)[rows.channel], "channel")
        for name, values in rows.pings.items():
            total += mixed(number(values), name)
        owner = np.repeat(np.arange(len(rows)), rows.counts)
        place = np.arange(len(owner)) - np.repeat(np.cumsum(rows.counts) - rows.counts, rows.counts)
        for name, values in rows.beams.items():
            placed = mixed(number(values) + place.astype(np.uint64), name)
            np.add.at(total, owner, placed)
    return total


def time_span(probe: FileProbe) -> tuple[int, int] | None:
    """First and last time, as far as the ends of the file tell; the first alone where its end cannot be reached.

    Where seconds count from midnight the last depends on all before, and the file's times are read whole.
    """
    try:
        names = Names()
        head = next(_head(probe, names, frozenset()), None)
        if head is None or not len(head):
            return None
        first, last = int(head.time.min()), int(head.time.max())
        for rows in _tail(probe, names):
            if len(rows):
                last = max(last, int(rows.time.max()))
    except InputError:
        return None
    return first, last


def _head(probe: FileProbe, names: Names, wanted: frozenset[str] | None = None) -> Iterator[Rows]:
    reader = RowReader(probe, names, wanted)
    opened = probe.open()
    if isinstance(opened, TextSource):
        for raw in opened.batches(reader.kinds(), threads=1, most=_HEAD):
            yield reader.convert(raw)
        return
    yield from _groups(
        opened, reader, [next(i for i, n in enumerate(opened.groups) if n)], _HEAD_ROWS
    )


def _tail(probe: FileProbe, names: Names) -> Iterator[Rows]:
    reader = RowReader(probe, names, frozenset())
    if probe.times.rolls_over:
        yield from reader.batches()
        return
    opened = probe.open()
    if isinstance(opened, TextSource):
        if opened.seekable and probe.size > _HEAD:
            yield reader.convert(opened.window(reader.kinds(), probe.size - _WINDOW, _WINDOW))
        return
    last = max(i for i, n in enumerate(opened.groups) if n)
    yield from _groups(opened, reader, [last])


def _groups(
    opened: TableSource, reader: RowReader, groups: list[int], size: int = 1 << 17
) -> Iterator[Rows]:
    try:
        for _, raw in opened.batches(list(reader.kinds()), size=size, groups=groups):
            yield reader.convert(raw)
    finally:
        opened.close()


def _around(probe: FileProbe, time: int, names: Names) -> Iterator[Rows]:
    """Rows of a file about a time, its times taken to rise; from its head where its middle cannot be reached."""
    reader = RowReader(probe, names)
    if probe.times.rolls_over:
        met = (rows for rows in reader.batches() if len(rows) and int(rows.time.max()) >= time)
        yield from itertools.islice(met, 2)
        return
    opened = probe.open()
    if isinstance(opened, TextSource):
        if not opened.seekable or probe.size <= _HEAD:
            yield from _head(probe, names)
            return
        times = RowReader(probe, names, frozenset())
        low, high = 0, probe.size
        while high - low > 2 * _WINDOW:
            middle = (low + high) // 2
            here = times.convert(opened.window(times.kinds(), middle, _WINDOW)).time
            if not len(here) or int(here.max()) < time:
                low = middle
            elif int(here.min()) > time:
                high = middle
            else:
                low, high = middle, middle + _WINDOW
        begin = max(0, low - _WINDOW)
        yield reader.convert(opened.window(reader.kinds(), begin, high - begin + 2 * _WINDOW))
        return
    chosen = 0
    times = RowReader(probe, names, frozenset())
    try:
        for group, raw in opened.batches(list(times.kinds())):
            rows = times.convert(raw)
            if len(rows) and int(rows.time.max()) >= time:
                chosen = group
                break
    finally:
        opened.close()
    again = probe.open()
    assert isinstance(again, TableSource)
    yield from _groups(again, reader, [chosen])
