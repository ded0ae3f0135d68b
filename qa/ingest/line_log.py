"""One line, read once: its pings held whole, its beams put aside and streamed from there."""

from __future__ import annotations

import datetime as dt
from collections.abc import Collection, Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import Any, Literal
from zoneinfo import ZoneInfo

import numpy as np
from numpy.typing import NDArray

from qa.ingest.probe import FileProbe
from qa.ingest.rows import Integers, Names, RowReader, Rows
from qa.ingest.spill import Spill
from qa.ingest.times import resolution
from qa.model.columns import COLUMNS
from qa.model.log import BeamBatch, ChannelSpan, FileAccount, PingTable
from qa.model.survey_file import SurveyFile

MESSAGE_SHARE = 0.2
"""Where more than this share of rows repeats the ping before, rows are messages and not pings."""


@dataclass(frozen=True, slots=True)
class DayChoice:
    """One day in a time zone: only its pings are in scope."""

    date: dt.date
    time_zone: str = "UTC"

    def bounds(self) -> tuple[int, int]:
        """First and last instant, as a half-open span of nanoseconds."""
        zone = ZoneInfo(self.time_zone)
        start = dt.datetime.combine(self.date, dt.time(), zone)
        end = dt.datetime.combine(self.date + dt.timedelta(days=1), dt.time(), zone)
        return round(start.timestamp()) * 1_000_000_000, round(end.timestamp()) * 1_000_000_000


@dataclass(frozen=True, slots=True)
class FilePart:
    """What of a file belongs to a line: all its rows, or those whose numbers fall into spans (first, last)."""

    probe: FileProbe
    spans: tuple[tuple[int, int], ...] | None = None


@dataclass(slots=True)
class _Runs:
    """Pings as they were met: one entry for each run of rows that belong to one ping."""

    time: list[Integers]
    ping: list[Integers]
    channel: list[Integers]
    counts: list[Integers]
    number: list[Integers]
    rows: list[Integers]
    file: list[Integers]
    columns: list[dict[str, NDArray[np.float64]]]


class OpenedLine:
    """A line of a log, as :class:`qa.model.log.LineLog` wants it."""

    def __init__(
        self, name: str, parts: Sequence[FilePart], survey: SurveyFile, day: DayChoice | None = None
    ) -> None:
        self._name, self._parts, self.survey = name, tuple(parts), survey
        self._day = None if day is None else day.bounds()
        grains = {part.probe.grain for part in parts}
        self._grain: Literal["ping", "beam"] = "beam" if "beam" in grains else "ping"
        self._table: PingTable | None = None
        self._readers: list[RowReader] = []
        self._spill = Spill()
        self._beam_columns: frozenset[str] = frozenset()
        self._counts: Integers = np.zeros(0, dtype=np.int64)
        self._position: Integers = np.zeros(0, dtype=np.int64)

    @property
    def name(self) -> str:
        """The line's name."""
        return self._name

    @property
    def grain(self) -> Literal["ping", "beam"]:
        """Whether the log has one row per ping, or one per beam."""
        return self._grain

    @property
    def beam_columns(self) -> frozenset[str]:
        """Beam columns that hold any value."""
        self.ping_table()
        return self._beam_columns

    @property
    def recognised(self) -> Mapping[str, tuple[str, str]]:
        """Canonical name to the file's own name and unit, of the line's first file."""
        return {b.role: (b.source, b.unit) for b in self._parts[0].probe.bindings}

    def accounts(self) -> tuple[FileAccount, ...]:
        """What became of the rows of each file."""
        self.ping_table()
        return tuple(reader.account for reader in self._readers)

    def ping_table(self) -> PingTable:
        """Read the line; the second call returns what the first one read."""
        if self._table is None:
            self._table = self._read()
        return self._table

    def beam_batches(self, columns: Collection[str], rows: int = 100_000) -> Iterator[BeamBatch]:
        """Stream beams, whole pings at a time."""
        self.ping_table()
        names = sorted(columns)
        if not names or not len(self._counts):
            return
        ends = np.cumsum(self._counts)
        run = 0
        held: list[dict[str, NDArray[Any]]] = []
        held_rows, passed = 0, 0
        total = int(ends[-1])
        for batch in self._spill.batches(names):
            held.append(batch)
            held_rows += len(batch[names[0]])
            while held_rows >= rows or passed + held_rows == total:
                aim = min(passed + max(rows, 1), passed + held_rows)
                stop = int(np.searchsorted(ends, aim, side="right"))
                if stop == run and passed + held_rows >= int(ends[run]):
                    stop = run + 1
                if stop == run:
                    break
                whole = (
                    {n: np.concatenate([h[n] for h in held]) for n in names}
                    if len(held) > 1
                    else held[0]
                )
                taken = int(ends[stop - 1]) - passed
                yield from self._batch(run, stop, {n: whole[n][:taken] for n in names})
                held = [{n: whole[n][taken:] for n in names}]
                held_rows, passed, run = held_rows - taken, passed + taken, stop
                if not held_rows:
                    break

    def _batch(self, run: int, stop: int, columns: dict[str, NDArray[Any]]) -> Iterator[BeamBatch]:
        positions, counts = self._position[run:stop], self._counts[run:stop]
        kept = positions >= 0
        if not kept.all():
            rows = np.repeat(kept, counts)
            columns = {n: v[rows] for n, v in columns.items()}
            positions, counts = positions[kept], counts[kept]
        if len(positions):
            if "accepted" in columns:
                columns["accepted"] = columns["accepted"].astype(bool)
            yield BeamBatch(positions, counts, columns)

    # Reading

    def _read(self) -> PingTable:
        names = Names()
        runs = _Runs([], [], [], [], [], [], [], [])
        present: dict[str, bool] = {}
        for at, part in enumerate(self._parts):
            reader = RowReader(part.probe, names)
            self._readers.append(reader)
            self._read_file(at, part, reader, runs, present)
        self._spill.finish()
        self._beam_columns = frozenset(name for name, there in present.items() if there)
        return self._assembled(runs, names)

    def _read_file(
        self, at: int, part: FilePart, reader: RowReader, runs: _Runs, present: dict[str, bool]
    ) -> None:
        beam_roles = [b.role for b in part.probe.bindings if COLUMNS[b.role].grain == "beam"]
        if part.probe.layout == "wide":
            beam_roles.append("beam")
        stored = sorted({r for p in self._parts for r in _beam_roles(p.probe)})
        last: dict[str, Any] | None = None
        for rows in reader.batches():
            rows = self._in_scope(rows, part, reader)
            if not len(rows):
                continue
            rows, last = self._without_repeats(rows, last, reader)
            if not len(rows):
                continue
            starts, continues = self._run_starts(
                rows, last_of=runs if runs.time else None, at=at, beam=_beam_number(rows)
            )
            self._keep(rows, starts, continues, runs, at)
            self._put_aside(rows, stored, present)
        self._resolve_notes(reader, runs, at)

    def _in_scope(self, rows: Rows, part: FilePart, reader: RowReader) -> Rows:
        if part.spans is not None:
            firsts = np.array([a for a, _ in part.spans])
            lasts = np.array([b for _, b in part.spans])
            at = np.searchsorted(firsts, rows.numbers, side="right") - 1
            mine = (at >= 0) & (rows.numbers <= lasts[np.maximum(at, 0)])
            # Another line's task accounts for the others.
            reader.account.rows_read -= int((~mine).sum())
            rows = rows.take(mine)
        if self._day is not None and len(rows):
            inside = (rows.time >= self._day[0]) & (rows.time < self._day[1])
            reader.account.rows_out_of_scope += int((~inside).sum())
            rows = rows.take(inside)
        return rows

    def _without_repeats(
        self, rows: Rows, last: dict[str, Any] | None, reader: RowReader
    ) -> tuple[Rows, dict[str, Any] | None]:
        """A beam's row that stands twice in a row counts once; pings are looked at when all are known."""
        if self._grain != "beam" or (rows.counts != 1).any():
            return rows, None
        now = {"time": rows.time, **rows.pings, **rows.beams}
        for key in ("ping", "channel"):
            values = getattr(rows, key)
            if values is not None:
                now[key] = values
        if "beam" not in now and rows.ping is None:
            return rows, None
        same = np.ones(len(rows), dtype=bool)
        for key, values in now.items():
            before = np.concatenate(
                [[values[0] if last is None or key not in last else last[key]], values[:-1]]
            )
            equal = values == before
            if values.dtype.kind == "f":
                equal |= np.isnan(values) & np.isnan(before)
            same &= equal
            if not same.any():
                break
        if last is None:
            same[0] = False
        following = {key: values[-1] for key, values in now.items()}
        if same.any():
            for position in np.flatnonzero(same).tolist():
                reader.reject(int(rows.numbers[position]), "the row before again")
            rows = rows.take(~same)
        return rows, following

    def _run_starts(
        self, rows: Rows, last_of: _Runs | None, at: int, beam: NDArray[Any] | None
    ) -> tuple[NDArray[np.bool_], bool]:
        """Where a new ping begins, and whether the first rows go on with the ping before."""
        n = len(rows)
        if self._parts[at].probe.grain == "ping" or self._parts[at].probe.layout != "long":
            return np.ones(n, dtype=bool), False
        starts = np.zeros(n, dtype=bool)
        keys = [k for k in (rows.ping, rows.channel) if k is not None]
        if rows.ping is None:
            keys.append(rows.time)
        for key in keys:
            starts[1:] |= key[1:] != key[:-1]
        if rows.ping is None and beam is not None:
            starts[1:] |= beam[1:] <= beam[:-1]
        starts[0] = True
        continues = False
        if last_of is not None and int(last_of.file[-1][-1]) == at:
            same = rows.channel is None or rows.channel[0] == last_of.channel[-1][-1]
            if rows.ping is not None:
                same = same and rows.ping[0] == last_of.ping[-1][-1]
            else:
                same = same and rows.time[0] == last_of.time[-1][-1]
                if beam is not None and self._last_beam is not None:
                    same = same and beam[0] > self._last_beam
            continues = bool(same)
        self._last_beam = None if beam is None else beam[-1]
        return starts, continues

    _last_beam: Any = None

    def _keep(
        self, rows: Rows, starts: NDArray[np.bool_], continues: bool, runs: _Runs, at: int
    ) -> None:
        first = np.flatnonzero(starts)
        lengths = np.diff(np.append(first, len(rows)))
        beams = np.add.reduceat(rows.counts, first)
        hold = self.survey.columns.hold
        columns = {}
        for name, values in rows.pings.items():
            columns[name] = _first_known(values, first, lengths) if name in hold else values[first]
        if continues:
            runs.counts[-1][-1] += beams[0]
            runs.rows[-1][-1] += lengths[0]
            first, lengths, beams = first[1:], lengths[1:], beams[1:]
            columns = {k: v[1:] for k, v in columns.items()}
        if not len(first):
            return
        n = len(first)
        blank = np.full(n, -1, dtype=np.int64)
        runs.time.append(rows.time[first])
        runs.ping.append(rows.ping[first] if rows.ping is not None else blank)
        runs.channel.append(rows.channel[first] if rows.channel is not None else blank)
        runs.counts.append(beams.astype(np.int64))
        runs.number.append(rows.numbers[first])
        runs.rows.append(lengths.astype(np.int64))
        runs.file.append(np.full(n, at, dtype=np.int64))
        runs.columns.append(columns)

    def _put_aside(self, rows: Rows, stored: Sequence[str], present: dict[str, bool]) -> None:
        if not stored:
            return
        total = int(rows.counts.sum())
        columns: dict[str, NDArray[Any]] = {}
        for name in stored:
            values = rows.beams.get(name)
            if values is None:
                values = (
                    np.ones(total, dtype=bool) if name == "accepted" else np.full(total, np.nan)
                )
            elif name == "accepted":
                values = np.asarray(values).astype(bool)
                present[name] = True
            else:
                values = np.asarray(values, dtype=np.float64)
                present[name] = present.get(name, False) or not bool(np.isnan(values).all())
            columns[name] = values
        self._spill.append(columns)

    def _resolve_notes(self, reader: RowReader, runs: _Runs, at: int) -> None:
        times = [t for t, f in zip(runs.time, runs.file, strict=True) if len(f) and f[0] == at]
        if not times:
            return
        together = np.concatenate(times)
        step = resolution(together)
        if step >= 1_000_000:
            reader.account.notes.append(f"Times are given to {_step_text(step)}.")
        repeats = int((np.diff(together) == 0).sum())
        if repeats and self._grain == "ping":
            reader.account.notes.append(
                f"{repeats} rows repeat the time of the row before them, as read."
            )
        now = int(dt.datetime.now(dt.UTC).timestamp()) * 1_000_000_000
        if reader.latest > now:
            reader.account.notes.append("Some times lie in the future; they were used.")

    # Pings put together

    def _assembled(self, runs: _Runs, names: Names) -> PingTable:
        if not runs.time:
            self._finish_accounts(
                np.zeros(0, dtype=np.int64), np.zeros(0, dtype=np.int64), np.zeros(0, dtype=bool)
            )
            return PingTable(
                np.zeros(0, dtype=np.int64),
                np.zeros(0, dtype=np.int64),
                False,
                (ChannelSpan("", 0, 0),),
                {},
            )
        time, ping, channel = (np.concatenate(v) for v in (runs.time, runs.ping, runs.channel))
        counts, number, length, file = (
            np.concatenate(v) for v in (runs.counts, runs.number, runs.rows, runs.file)
        )
        every = sorted({k for c in runs.columns for k in c})
        columns = {
            k: np.concatenate(
                [
                    c[k] if k in c else np.full(len(t), np.nan)
                    for c, t in zip(runs.columns, runs.time, strict=True)
                ]
            )
            for k in every
        }
        logged = bool((ping >= 0).any()) or any(
            b.role == "ping" for p in self._parts for b in p.probe.bindings
        )
        self._counts = counts
        kept = np.ones(len(time), dtype=bool)
        if self._grain == "ping":
            self._drop_duplicates(kept, time, ping, channel, columns, number, file)
            if logged:
                self._drop_messages(kept, time, ping, channel, file, length)
        elif logged:
            merged = self._gathered(time, ping, channel, counts, length, columns, number, file)
            if merged is not None:
                time, ping, channel, counts, length, number, file, columns = merged
                kept = np.ones(len(time), dtype=bool)
            self._drop_same_pings(kept, time, ping, channel, number, file, length)
        self._finish_accounts(file, length, kept)
        order = self._order(time, ping, channel, kept, logged, names)
        self._position = np.full(len(kept), -1, dtype=np.int64)
        self._position[order] = np.arange(len(order))
        spans = self._spans(channel[order], names)
        self._hold(columns, order, spans)
        positions = np.concatenate([np.arange(s.stop - s.start) for s in spans]) if spans else order
        table = {k: v[order] for k, v in columns.items()}
        table = {k: v for k, v in table.items() if not np.isnan(v).all()}
        return PingTable(
            time[order], ping[order] if logged else positions.astype(np.int64), logged, spans, table
        )

    def _drop_duplicates(
        self,
        kept: NDArray[np.bool_],
        time: Integers,
        ping: Integers,
        channel: Integers,
        columns: Mapping[str, NDArray[np.float64]],
        number: Integers,
        file: Integers,
    ) -> None:
        """Rows of one time that are the same to the last value: the first counts."""
        order = np.argsort(time, kind="stable")
        same = np.diff(time[order]) == 0
        if not same.any():
            return
        candidates = np.zeros(len(time), dtype=bool)
        candidates[order[1:][same]] = True
        candidates[order[:-1][same]] = True
        rows = np.flatnonzero(candidates)
        keys = [ping, channel, *columns.values(), *self._beam_rows()]
        matrix = np.column_stack(
            [time[rows].view(np.float64), *(np.asarray(k[rows], dtype=float) for k in keys)]
        )
        _, first = np.unique(matrix.view(np.int64), axis=0, return_index=True)
        repeated = np.ones(len(rows), dtype=bool)
        repeated[first] = False
        for at in rows[repeated].tolist():
            kept[at] = False
            self._readers[int(file[at])].reject(int(number[at]), "a duplicate of another row", "")

    def _beam_rows(self) -> list[NDArray[Any]]:
        stored = sorted({r for p in self._parts for r in _beam_roles(p.probe)})
        if not stored:
            return []
        whole: dict[str, list[NDArray[Any]]] = {name: [] for name in stored}
        for batch in self._spill.batches(stored):
            for name in stored:
                whole[name].append(batch[name])
        return [np.concatenate(whole[name]) for name in stored]

    def _drop_messages(
        self,
        kept: NDArray[np.bool_],
        time: Integers,
        ping: Integers,
        channel: Integers,
        file: Integers,
        length: Integers,
    ) -> None:
        """Rows at message rate repeat the last ping under its number: they are no pings of their own."""
        rows = np.flatnonzero(kept)
        if len(rows) < 4:
            return
        same = (np.diff(ping[rows]) == 0) & (np.diff(channel[rows]) == 0)
        for values in self._beam_rows():
            here = np.asarray(values[rows], dtype=float)
            same &= (np.diff(here) == 0) | (np.isnan(here[1:]) & np.isnan(here[:-1]))
        if same.mean() <= MESSAGE_SHARE:
            return
        again = rows[1:][same]
        kept[again] = False
        for at, reader in enumerate(self._readers):
            count = int((file[again] == at).sum())
            if count:
                reader.account.rows_out_of_scope += count
                reader.account.notes.append(
                    f"{count} rows repeat the ping of the row before them: rows are messages here, not pings, and the "
                    "first row of each ping was taken."
                )

    def _gathered(
        self,
        time: Integers,
        ping: Integers,
        channel: Integers,
        counts: Integers,
        length: Integers,
        columns: dict[str, NDArray[np.float64]],
        number: Integers,
        file: Integers,
    ) -> (
        tuple[
            Integers,
            Integers,
            Integers,
            Integers,
            Integers,
            Integers,
            Integers,
            dict[str, NDArray[np.float64]],
        ]
        | None
    ):
        """Beams of a ping that stand apart in the file, brought together in memory; None where none do."""
        order = np.lexsort((np.arange(len(time)), time, ping, channel))
        same = (
            (np.diff(ping[order]) == 0)
            & (np.diff(channel[order]) == 0)
            & (np.diff(time[order]) == 0)
        )
        if not same.any() or "beam" not in self._beam_columns:
            return None
        beam = self._beam_rows()[
            sorted({r for p in self._parts for r in _beam_roles(p.probe)}).index("beam")
        ]
        starts = np.cumsum(counts) - counts
        # A ping that is there twice, beam for beam, is a repeat and no shuffle.
        if not _shuffled(order, same, starts, counts, beam):
            return None
        group = np.zeros(len(time), dtype=np.int64)
        group[order] = np.concatenate([[0], np.cumsum(~same)])
        rows_group = np.repeat(group, counts)
        names = sorted({r for p in self._parts for r in _beam_roles(p.probe)})
        arrays = dict(zip(names, self._beam_rows(), strict=True))
        rank = np.full(int(group.max()) + 1, np.iinfo(np.int64).max)
        np.minimum.at(rank, group, np.arange(len(time)))
        row_order = np.lexsort((arrays["beam"], rank[rows_group]))
        spill = Spill()
        spill.append({n: v[row_order] for n, v in arrays.items()})
        spill.finish()
        self._spill = spill
        first = np.sort(np.unique(rank))
        new_counts = np.bincount(
            np.searchsorted(first, rank[group]), weights=counts, minlength=len(first)
        )
        new_length = np.bincount(
            np.searchsorted(first, rank[group]), weights=length, minlength=len(first)
        )
        self._counts = new_counts.astype(np.int64)
        for reader in self._readers:
            reader.account.notes.append(
                "Beams of one ping stand apart in the file; they were brought together."
            )
        return (
            time[first],
            ping[first],
            channel[first],
            self._counts,
            new_length.astype(np.int64),
            number[first],
            file[first],
            {k: v[first] for k, v in columns.items()},
        )

    def _drop_same_pings(
        self,
        kept: NDArray[np.bool_],
        time: Integers,
        ping: Integers,
        channel: Integers,
        number: Integers,
        file: Integers,
        length: Integers,
    ) -> None:
        """The same ping met again, in this or another file, counts once."""
        order = np.lexsort((np.arange(len(time)), time, ping, channel))
        again = (
            (np.diff(ping[order]) == 0)
            & (np.diff(channel[order]) == 0)
            & (np.diff(time[order]) == 0)
        )
        repeated = order[1:][again]
        if not len(repeated):
            return
        kept[repeated] = False
        for at, reader in enumerate(self._readers):
            mine = repeated[file[repeated] == at]
            if not len(mine):
                continue
            reader.account.notes.append(
                f"{len(mine)} pings were met before; each was counted once."
            )
            for run in mine.tolist():
                for row in range(int(number[run]), int(number[run]) + int(length[run])):
                    reader.reject(row, "a ping that was met before")

    def _finish_accounts(self, file: Integers, length: Integers, kept: NDArray[np.bool_]) -> None:
        for at, reader in enumerate(self._readers):
            reader.account.rows_used = int(length[(file == at) & kept].sum()) if len(file) else 0
            reader.account.rejected_rows.sort(key=lambda r: r.row)

    def _order(
        self,
        time: Integers,
        ping: Integers,
        channel: Integers,
        kept: NDArray[np.bool_],
        logged: bool,
        names: Names,
    ) -> Integers:
        """Runs in channel, then ping order.

        Ping numbers decide only where they bring the times into order: a counter that starts again, or a clock
        that steps back, leaves the order of the file.
        """
        rank = np.array(_ranks(names.channel.names) or [0], dtype=np.int64)
        ordered: list[Integers] = []
        codes = np.unique(channel[kept])
        for code in sorted(codes.tolist(), key=lambda c: int(rank[c]) if c >= 0 else -1):
            rows = np.flatnonzero(kept & (channel == code))
            falling = (np.diff(ping[rows]) < 0).any() if logged else False
            if falling and (np.diff(time[rows]) < 0).any():
                by_ping = rows[np.lexsort((np.arange(len(rows)), ping[rows]))]
                if not (np.diff(time[by_ping]) < 0).any():
                    rows = by_ping
            elif not logged and len(self._parts) > 1:
                rows = rows[np.argsort(time[rows], kind="stable")]
            ordered.append(rows)
        return np.concatenate(ordered) if ordered else np.zeros(0, dtype=np.int64)

    def _spans(self, channel: Integers, names: Names) -> tuple[ChannelSpan, ...]:
        if not len(channel):
            return (ChannelSpan("", 0, 0),)
        edges = np.flatnonzero(np.diff(channel)) + 1
        starts = np.concatenate([[0], edges])
        stops = np.concatenate([edges, [len(channel)]])
        found = []
        for start, stop in zip(starts.tolist(), stops.tolist(), strict=True):
            code = int(channel[start])
            found.append(ChannelSpan(names.channel.names[code] if code >= 0 else "", start, stop))
        return tuple(found)

    def _hold(
        self, columns: dict[str, NDArray[np.float64]], order: Integers, spans: Sequence[ChannelSpan]
    ) -> None:
        """Settings that are logged only when they change last until the next."""
        for name in self.survey.columns.hold:
            if name not in columns:
                continue
            values = columns[name].copy()
            for span in spans:
                rows = order[span.rows]
                here = values[rows]
                known = np.maximum.accumulate(np.where(np.isnan(here), -1, np.arange(len(here))))
                values[rows] = np.where(known >= 0, here[np.maximum(known, 0)], np.nan)
            columns[name] = values


def _beam_roles(probe: FileProbe) -> set[str]:
    found = {b.role for b in probe.bindings if COLUMNS[b.role].grain == "beam"}
    return found | {"beam"} if probe.layout == "wide" else found


def _beam_number(rows: Rows) -> NDArray[Any] | None:
    return rows.beams.get("beam") if (rows.counts == 1).all() else None


def _first_known(
    values: NDArray[np.float64], first: Integers, lengths: Integers
) -> NDArray[np.float64]:
    """The first value that is known in each run."""
    known = np.where(np.isnan(values), len(values), np.arange(len(values)))
    at = np.minimum.reduceat(known, first)
    inside = at < first + lengths
    return np.where(inside, values[np.minimum(at, len(values) - 1)], np.nan)


def _shuffled(
    order: Integers, same: NDArray[np.bool_], starts: Integers, counts: Integers, beam: NDArray[Any]
) -> bool:
    """Whether two runs of one ping hold different beams."""
    for at in np.flatnonzero(same)[:50].tolist():
        one, other = order[at], order[at + 1]
        first = beam[starts[one] : starts[one] + counts[one]]
        second = beam[starts[other] : starts[other] + counts[other]]
        if len(np.intersect1d(first, second)) < min(len(first), len(second)):
            return True
    return False


def _ranks(names: Sequence[str]) -> list[int]:
    """Places of names in natural order."""
    from qa.ingest.planning import natural

    order = sorted(range(len(names)), key=lambda i: natural(names[i]))
    ranks = [0] * len(names)
    for place, index in enumerate(order):
        ranks[index] = place
    return ranks


def _step_text(step: int) -> str:
    return f"{step / 1e9:g} s" if step >= 1_000_000_000 else f"{step / 1e6:g} ms"
