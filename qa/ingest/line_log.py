"""One line, read once: its pings held whole, its beams put aside and streamed from there."""

from __future__ import annotations

import datetime as dt
from collections.abc import Collection, Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import Any, Literal
from zoneinfo import ZoneInfo

import numpy as np
from numpy.typing import NDArray

from qa.ingest import spill
from qa.ingest.apart import ScatteredPlaces, in_order
from qa.ingest.messages import MEASURED, MESSAGE_SHARE, SET, Repeats, as_before, find_repeats
from qa.ingest.probe import FileProbe
from qa.ingest.rows import Integers, Names, RowReader, Rows, Stretch
from qa.ingest.second_reading import ReadBefore, SecondReading
from qa.ingest.spill import Spill
from qa.ingest.table_source import TableFormat
from qa.ingest.times import resolution
from qa.model.columns import COLUMNS
from qa.model.log import BeamBatch, ChannelSpan, FileAccount, PingTable
from qa.model.survey_file import SurveyFile

MOST_RUNS, FEWEST_ROWS = 500_000, 4
"""More runs of rows than this, of fewer rows each, are no pings: the rows of each ping stand apart."""
MOST_GATHERED = 1 << 27
"""Bytes of beams that are brought together in memory; more are on disk."""
_TOGETHER = "Beams of one ping stand apart in the file; they were brought together."
SAMPLE_BEAMS = 100_000
"""Beams by which it is decided whether all are worth a look."""
MET_BEFORE = "a ping that was met before"
"""Why a row is rejected that stands in another file too."""
SHUFFLED_SHARE = 0.3
"""Where times fall at more than this share of rows, the rows are shuffled (then it is about half); a clock that steps back does so at fewer."""
STRAY = 86_400_000_000_000
"""A ping further than this from both neighbours, in nanoseconds, has no time that can be used."""


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
    """What of a file belongs to a line: all its rows, or a stretch.

    ``met`` are rows that stand in another line's file too, ``met_in``, and count there.
    """

    probe: FileProbe
    stretch: Stretch | None = None
    met: Stretch | None = None
    met_in: str = ""


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


@dataclass(frozen=True, slots=True)
class _Met:
    """The pings of :class:`_Runs`, put together: one entry each."""

    time: Integers
    ping: Integers
    channel: Integers
    counts: Integers
    length: Integers
    number: Integers
    file: Integers
    columns: dict[str, NDArray[np.float64]]


class _RowsApart(Exception):
    """Rows of one ping stand apart, and are too many to be brought together in memory."""


class _RowsAlike(Exception):
    """Rows that follow one another are alike in all that was read of them; the rest must be read too."""


class _Places:
    """Row numbers in the file of rows by their place in the stream, kept as stretches without a break."""

    def __init__(self) -> None:
        self._at: list[Integers] = []
        self._number: list[Integers] = []
        self.count = 0

    def add(self, numbers: Integers) -> None:
        """The next rows of the stream, their numbers rising from one to the next."""
        starts = np.zeros(1, dtype=np.int64)
        if numbers[-1] - numbers[0] != len(numbers) - 1:
            starts = np.append(starts, np.flatnonzero(np.diff(numbers) != 1) + 1)
        self._at.append(starts + self.count)
        self._number.append(numbers[starts])
        self.count += len(numbers)

    def numbers(self, places: Integers) -> Integers:
        """Row numbers of places in the stream."""
        at, number = np.concatenate(self._at), np.concatenate(self._number)
        stretch = np.searchsorted(at, places, side="right") - 1
        return number[stretch] + places - at[stretch]

    def spans(self, start: int, stop: int) -> tuple[Integers, Integers]:
        """First and last row numbers of the stretches of a part of the stream that begins and ends with a batch."""
        if start == stop:
            return np.zeros(0, dtype=np.int64), np.zeros(0, dtype=np.int64)
        at = np.concatenate(self._at)
        low, high = np.searchsorted(at, [start, stop])
        first = np.concatenate(self._number)[low:high]
        last = first + np.diff(np.append(at[low:high], stop)) - 1
        breaks = first[1:] != last[:-1] + 1
        return first[np.append(True, breaks)], last[np.append(breaks, True)]


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
        self._spill: Spill | SecondReading = Spill()
        self._beam_columns: frozenset[str] = frozenset()
        self._counts: Integers = np.zeros(0, dtype=np.int64)
        self._position: Integers = np.zeros(0, dtype=np.int64)
        self._places: _Places | ScatteredPlaces = _Places()
        self._beams_ordered = True
        self._apart, self._met = False, 0
        self._last_beam: Any = None
        self._rows_of_files: Integers | None = None

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
        asked = sorted(columns)
        if not asked or not len(self._counts):
            return
        names = asked if self._beams_ordered else sorted({*asked, "beam"})
        ends = np.cumsum(self._counts)
        run = 0
        held: list[dict[str, NDArray[Any]]] = []
        held_rows, passed = 0, 0
        total = int(ends[-1])
        # Pings of one size come whole if they are read so many at a time.
        width = int(self._counts[0])
        width = width if 0 < width <= rows and (self._counts == width).all() else 1
        for part in self._spill.batches(names, max(rows, 1) // width * width):
            held.append(part)
            held_rows += len(part[names[0]])
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
                batch = {n: whole[n][:taken] for n in names}
                if not self._beams_ordered:
                    owner = np.repeat(np.arange(stop - run), self._counts[run:stop])
                    order = np.lexsort((batch["beam"], owner))
                    batch = {n: batch[n][order] for n in asked}
                yield from self._batch(run, stop, batch)
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
        twice = self._reads_twice()
        later = frozenset(self._stored) - {"beam"} if twice else frozenset[str]()
        while True:
            try:
                return self._read_with(None if twice else Spill(), later)
            except _RowsAlike:
                later = frozenset()
            except _RowsApart:
                later, twice, self._apart = frozenset(), False, True
            self._start_again()

    def _start_again(self) -> None:
        self._readers, self._met = [], 0
        self._places = ScatteredPlaces() if self._apart else _Places()
        self._beams_ordered, self._last_beam, self._rows_of_files = True, None, None

    def _read_with(self, aside: Spill | None, later: frozenset[str] = frozenset()) -> PingTable:
        """Read the line once, its beams put ``aside`` or to be read again; columns of ``later`` only where one must."""
        names = Names()
        runs = _Runs([], [], [], [], [], [], [], [])
        present: dict[str, bool] = {}
        read: list[ReadBefore] = []
        for at, part in enumerate(self._parts):
            start = self._places.count
            wanted = part.probe.roles - {"line"}
            lazy = not self._apart
            reader = RowReader(part.probe, names, wanted, part.stretch, lazy=lazy, later=later)
            self._readers.append(reader)
            if part.met is not None:
                count = sum(last - first + 1 for first, last in part.met.spans)
                reader.account.notes.append(
                    f"{count} rows stand in {part.met_in} too, value for value; each was counted once, there."
                )
            self._read_file(at, part, reader, runs, present, aside)
            if isinstance(self._places, _Places):
                spans = self._places.spans(start, self._places.count)
                read.append(ReadBefore(part.probe, part.stretch, *spans))
        if aside is None:
            self._spill = SecondReading(read)
        else:
            aside.finish()
            self._spill = aside
        self._beam_columns = frozenset(name for name, there in present.items() if there)
        return self._assembled(runs, names)

    def _reads_twice(self) -> bool:
        """Whether beams can be read again by column, and are too many to be held in memory till then."""
        size = 0
        for probe in (part.probe for part in self._parts):
            form = probe.form
            if probe.grain != "beam" or probe.layout != "long" or probe.times.rolls_over:
                return False
            if not isinstance(form, TableFormat) or form.kind != "parquet":
                return False
            size += 8 * form.rows * len(self._stored)
        return size > spill.IN_MEMORY

    def _read_file(
        self,
        at: int,
        part: FilePart,
        reader: RowReader,
        runs: _Runs,
        present: dict[str, bool],
        aside: Spill | None,
    ) -> None:
        stored = self._stored
        last: dict[str, Any] | None = None
        together = False
        for rows in self._rows_of(part, reader):
            rows = self._in_scope(rows, part, reader)
            if not len(rows):
                continue
            rows, last = self._without_repeats(rows, last, reader)
            if not len(rows):
                continue
            starts, continues = self._run_starts(
                rows, last_of=runs if runs.time else None, at=at, beam=_beam_number(rows)
            )
            self._places.add(rows.numbers)
            self._note_beam_order(rows, starts, continues)
            self._keep(rows, starts, continues, runs, at)
            self._put_aside(rows, stored, present, aside)
            if self._apart:
                together = together or bool((np.diff(rows.numbers) < 0).any())
            elif self._met > MOST_RUNS and self._places.count < FEWEST_ROWS * self._met:
                raise _RowsApart
        if together:
            reader.account.notes.append(_TOGETHER)
        self._resolve_notes(reader, runs, at)

    def _rows_of(self, part: FilePart, reader: RowReader) -> Iterator[Rows]:
        """The rows of a file; in the order of their times where those of a ping are known to stand apart."""
        if not self._apart or part.probe.grain != "beam" or part.probe.layout != "long":
            return reader.batches()
        times = RowReader(part.probe, Names(), frozenset(), part.stretch)
        return in_order(times, reader)

    def _in_scope(self, rows: Rows, part: FilePart, reader: RowReader) -> Rows:
        if part.met is not None:
            met = part.met.holds(rows.numbers)
            reader.reject_all(rows.numbers[met], MET_BEFORE)
            rows = rows.take(~met)
        if self._day is not None and len(rows):
            inside = (rows.time >= self._day[0]) & (rows.time < self._day[1])
            reader.account.rows_out_of_scope += int((~inside).sum())
            rows = rows.take(inside)
        return rows

    def _without_repeats(
        self, rows: Rows, last: dict[str, Any] | None, reader: RowReader
    ) -> tuple[Rows, dict[str, Any] | None]:
        """A beam's row that stands twice in a row counts once; pings are looked at when all are known."""
        if self._grain != "beam" or not rows.of_one_beam:
            return rows, None
        # What differs soonest comes first: the beam's number from row to row.
        beam = {"beam": rows.beams["beam"]} if "beam" in rows.beams else {}
        now = {**beam, "time": rows.time, **rows.pings, **rows.beams}
        for key in ("ping", "channel"):
            values = getattr(rows, key)
            if values is not None:
                now[key] = values
        if "beam" not in now and rows.ping is None:
            return rows, None

        def ends(place: int) -> dict[str, Any]:
            return {
                key: rows.proof.settled(key, values[[place]])[0]
                if key in rows.proof.roles and key != "ping"
                else values[place]
                for key, values in now.items()
            }

        first = last is not None and all(
            key not in last or value == last[key] or (value != value and last[key] != last[key])
            for key, value in ends(0).items()
        )
        following = ends(-1)
        alike: NDArray[np.bool_] | None = None
        for values in now.values():
            equal = as_before(values)
            alike = equal if alike is None else alike & equal
            if not alike.any():
                break
        assert alike is not None
        if first or alike.any():
            if rows.proof.unread - rows.proof.roles:
                raise _RowsAlike
            same = np.append(first, alike)
            reader.reject_all(rows.numbers[same], "the row before again")
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
        return starts, continues

    def _note_beam_order(self, rows: Rows, starts: NDArray[np.bool_], continues: bool) -> None:
        """Find out whether beams stand in the order of their numbers within each ping."""
        beam = rows.beams.get("beam")
        if beam is None or not len(beam):
            return
        falls = beam[1:] < beam[:-1]
        # a ping's first beam may well be lower than the last of the ping before
        if rows.one_each:
            falls &= ~starts[1:]
        else:
            first = np.cumsum(rows.counts) - rows.counts
            inside = first[starts & (first < len(beam)) & (first > 0)]
            falls[inside - 1] = False
        fell = continues and self._last_beam is not None and bool(beam[0] < self._last_beam)
        self._last_beam = beam[-1]
        if self._beams_ordered and (fell or falls.any()):
            self._beams_ordered = False

    def _keep(
        self, rows: Rows, starts: NDArray[np.bool_], continues: bool, runs: _Runs, at: int
    ) -> None:
        first = np.flatnonzero(starts)
        lengths = np.diff(np.append(first, len(rows)))
        beams = lengths.copy() if rows.one_each else np.add.reduceat(rows.counts, first)
        hold = self.survey.columns.hold
        columns = {}
        for name, values in rows.pings.items():
            found = _first_known(values, first, lengths) if name in hold else values[first]
            columns[name] = rows.proof.settled(name, found)
        if continues:
            runs.counts[-1][-1] += beams[0]
            runs.rows[-1][-1] += lengths[0]
            first, lengths, beams = first[1:], lengths[1:], beams[1:]
            columns = {k: v[1:] for k, v in columns.items()}
        if not len(first):
            return
        n = len(first)
        if self._parts[at].probe.layout == "long" and self._grain == "beam":
            self._met += n
        blank = np.full(n, -1, dtype=np.int64)
        runs.time.append(rows.time[first])
        runs.ping.append(rows.ping[first] if rows.ping is not None else blank)
        runs.channel.append(rows.channel[first] if rows.channel is not None else blank)
        runs.counts.append(beams.astype(np.int64))
        runs.number.append(rows.numbers[first])
        runs.rows.append(lengths.astype(np.int64))
        runs.file.append(np.full(n, at, dtype=np.int64))
        runs.columns.append(columns)

    @np.errstate(invalid="ignore")  # a damaged float may be a NaN of the signalling kind
    def _put_aside(
        self, rows: Rows, stored: Sequence[str], present: dict[str, bool], aside: Spill | None
    ) -> None:
        if not stored:
            return
        if aside is None:
            for name in stored:
                values = rows.beams.get(name)
                if name in rows.proof.unread:
                    present[name] = True
                elif values is not None and not present.get(name, False):
                    present[name] = name == "accepted" or not bool(np.isnan(values).all())
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
                values = rows.proof.settled(name, values)
                present[name] = present.get(name, False) or not bool(np.isnan(values).all())
            columns[name] = values
        aside.append(columns)

    def _resolve_notes(self, reader: RowReader, runs: _Runs, at: int) -> None:
        times = [t for t, f in zip(runs.time, runs.file, strict=True) if len(f) and f[0] == at]
        if not times:
            return
        together = np.concatenate(times)
        codes = np.concatenate(
            [c for c, f in zip(runs.channel, runs.file, strict=True) if len(f) and f[0] == at]
        )
        written = reader.probe.times.written
        step = max(resolution(together[codes == c], written) for c in np.unique(codes).tolist())
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
            self._drop_messages(kept, time, ping if logged else None, channel, columns, file)
        else:
            different = self._drop_same_pings(kept, time, ping, channel, file, length)
            if any(part.probe.layout != "long" for part in self._parts):
                self._drop_messages(kept, time, ping if logged else None, channel, columns, file)
            if different and logged:
                runs_met = _Met(time, ping, channel, counts, length, number, file, columns)
                merged = self._gathered(runs_met, kept)
                if merged is not None:
                    time, ping, channel, length = (
                        merged.time,
                        merged.ping,
                        merged.channel,
                        merged.length,
                    )
                    file, columns = merged.file, merged.columns
                    kept = np.ones(len(time), dtype=bool)
                self._note_namesakes(time, ping, channel, file, kept)
        order = self._order(time, ping, channel, kept, logged, names, file)
        if self._rows_of_files is None:
            self._drop_strays(kept, order, time, channel, file, length)
            order = order[kept[order]]
        self._finish_accounts(file, length, kept)
        self._position = np.full(len(kept), -1, dtype=np.int64)
        self._position[order] = np.arange(len(order))
        spans = self._spans(channel[order], names)
        self._hold(columns, order, spans)
        positions = np.concatenate([np.arange(s.stop - s.start) for s in spans]) if spans else order
        table = {k: v[order] for k, v in columns.items()}
        table = {k: v for k, v in table.items() if not np.isnan(v).all()}
        written = min(part.probe.times.written for part in self._parts)
        step = max(resolution(time[order[s.rows]], written) for s in spans)
        return PingTable(
            time[order],
            ping[order] if logged else positions.astype(np.int64),
            logged,
            spans,
            table,
            step * 1e-9 if step else float("nan"),
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
        _, first, of = np.unique(
            matrix.view(np.int64), axis=0, return_index=True, return_inverse=True
        )
        repeated = np.ones(len(rows), dtype=bool)
        repeated[first] = False
        elsewhere = file[rows[first[of.ravel()]]] != file[rows]
        kept[rows[repeated]] = False
        for at, reader in enumerate(self._readers):
            mine = repeated & (file[rows] == at)
            reader.reject_all(number[rows[mine]], "a duplicate of another row")
            shared = int((mine & elsewhere).sum())
            if shared:
                reader.account.notes.append(
                    f"{shared} rows stand in another file of this line too; each was counted once."
                )

    def _beam_rows(self) -> list[NDArray[Any]]:
        stored = self._stored
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
        ping: Integers | None,
        channel: Integers,
        columns: Mapping[str, NDArray[np.float64]],
        file: Integers,
    ) -> None:
        """Rows at message rate repeat the last ping: they are no pings of their own."""
        rows, choice = np.flatnonzero(kept), self.survey.columns.rows
        if len(rows) < 4 or choice == "pings":
            return
        if ping is not None:
            again = rows[1:][self._numbered_again(rows, ping, channel)]
            if choice != "messages" and len(again) <= MESSAGE_SHARE * (len(rows) - 1):
                return
            how = "under its number"
        else:
            found = self._alike_again(rows, time, channel, columns, file)
            if found.rows == "either":
                self._readers[0].account.notes.append(
                    f"Values often stay the same for {found.usual} rows or so: each row was taken as a ping. If rows are "
                    'messages that repeat the last ping, write rows = "messages" under [columns] in the survey file.'
                )
            again = rows[found.again]
            how = f"as {found.usual} rows usually do"
        kept[again] = False
        for at, reader in enumerate(self._readers):
            count = int((file[again] == at).sum())
            if count:
                reader.account.rows_out_of_scope += count
                reader.account.notes.append(
                    f"{count} rows repeat the ping of the row before them {how}: rows are messages here, not pings, and "
                    "the first row of each ping was taken, with its time. If they are pings, write "
                    'rows = "pings" under [columns] in the survey file.'
                )

    def _numbered_again(
        self, rows: Integers, ping: Integers, channel: Integers
    ) -> NDArray[np.bool_]:
        """Which rows, from the second on, have the ping number and the beams of the row before."""
        same: NDArray[np.bool_] = (np.diff(ping[rows]) == 0) & (np.diff(channel[rows]) == 0)
        if same.any():
            for values in self._values_of_pings(len(ping)):
                same &= as_before(values[rows])
        return same

    def _values_of_pings(
        self, count: int, chosen: Collection[str] | None = None
    ) -> list[NDArray[np.float64]]:
        """Beam columns with one value a ping; where pings have more beams, one number that all of them make."""
        if (self._counts == 1).all():
            pairs = zip(self._stored, self._beam_rows(), strict=True)
            return [
                np.asarray(values, dtype=np.float64)
                for name, values in pairs
                if chosen is None or name in chosen
            ]
        # The same beams make the same number, and others another.
        return [np.unique(self._digests(count), return_inverse=True)[1].astype(np.float64)]

    def _alike_again(
        self,
        rows: Integers,
        time: Integers,
        channel: Integers,
        columns: Mapping[str, NDArray[np.float64]],
        file: Integers,
    ) -> Repeats:
        """Which rows have no ping number and measure what the row before does."""
        if not set(self._stored) & set(MEASURED):
            measured = []
        elif not (self._counts == 1).all() and not self._begins_alike(len(time)):
            return Repeats("pings", np.zeros(len(rows), dtype=bool))
        else:
            measured = [v[rows] for v in self._values_of_pings(len(time), MEASURED)]
        measured += [columns[name][rows] for name in MEASURED if name in columns]
        settings = [columns[name][rows] for name in SET if name in columns]
        source = channel[rows] * len(self._readers) + file[rows]
        stated = self.survey.columns.rows == "messages"
        beams = int(np.median(self._counts[rows]))
        return find_repeats(time[rows], source, measured, settings, beams, stated)

    def _gathered(self, runs: _Met, kept: NDArray[np.bool_]) -> _Met | None:
        """Beams of a ping that stand apart in the file, brought together; None where none do.

        Runs of one ping that give different values for one beam are of different heads: they are left apart.
        """
        if "beam" not in self._beam_columns:
            return None
        count = len(runs.time)
        order = np.lexsort((np.arange(count), runs.time, runs.ping, runs.channel, ~kept))
        same = kept[order[1:]] & kept[order[:-1]]
        for key in (runs.time, runs.ping, runs.channel):
            same &= np.diff(key[order]) == 0
        if not same.any():
            return None
        group = np.zeros(count, dtype=np.int64)
        group[order] = np.concatenate([[0], np.cumsum(~same)])
        names = self._stored
        if not self._apart and 8 * len(names) * int(runs.counts.sum()) > MOST_GATHERED:
            raise _RowsApart
        arrays = dict(zip(names, self._beam_rows(), strict=True))
        owner = np.repeat(np.arange(count), runs.counts)
        row_order = np.lexsort((arrays["beam"], group[owner]))
        row_order = row_order[kept[owner[row_order]]]
        in_group = group[owner[row_order]]
        again = np.diff(in_group, prepend=-1) == 0
        again &= np.diff(arrays["beam"][row_order], prepend=np.nan) == 0
        equal = again.copy()
        for values in arrays.values():
            equal[1:] &= as_before(np.asarray(values[row_order]))
        apart = np.isin(group, in_group[again & ~equal])
        if apart.any():
            if apart[kept].all():
                return None
            group[apart] = group.max() + 1 + np.arange(int(apart.sum()))
        rank = np.full(int(group.max()) + 1, count)
        np.minimum.at(rank, group[kept], np.flatnonzero(kept))
        repeated = equal & ~apart[owner[row_order]]
        length = runs.length
        if repeated.any() and (runs.counts == runs.length).all():
            gone = np.sort(row_order[repeated])
            for at, reader in enumerate(self._readers):
                mine = gone[runs.file[owner[gone]] == at]
                reader.reject_all(self._places.numbers(mine), "a duplicate of another row")
            length = length - np.bincount(owner[gone], minlength=count)
            row_order = row_order[~repeated]
        row_order = row_order[
            np.lexsort((arrays["beam"][row_order], rank[group[owner[row_order]]]))
        ]
        self._beams_ordered = True
        together = Spill()
        together.append({n: v[row_order] for n, v in arrays.items()})
        together.finish()
        self._spill = together
        first = np.unique(rank[group[kept]])
        merged = np.searchsorted(first, rank[group[owner[row_order]]])
        self._counts = np.bincount(merged, minlength=len(first)).astype(np.int64)
        # a ping whose beams stand in several files counts, row by row, for each
        self._rows_of_files = np.bincount(
            runs.file[kept], weights=length[kept], minlength=len(self._readers)
        )
        moved = np.unique(runs.file[order[1:][same]]).tolist()
        for at in moved:
            self._readers[at].account.notes.append(_TOGETHER)
        return _Met(
            runs.time[first],
            runs.ping[first],
            runs.channel[first],
            self._counts,
            runs.length[first],
            runs.number[first],
            runs.file[first],
            {k: v[first] for k, v in runs.columns.items()},
        )

    @property
    def _stored(self) -> list[str]:
        return sorted({r for p in self._parts for r in _beam_roles(p.probe)})

    def _drop_same_pings(
        self,
        kept: NDArray[np.bool_],
        time: Integers,
        ping: Integers,
        channel: Integers,
        file: Integers,
        length: Integers,
    ) -> bool:
        """The same ping met again, in this or another file, counts once.

        A ping is the same where time, number, channel and every beam are. Returns whether there are pings of one time,
        number and channel whose beams differ.
        """
        order = np.lexsort((np.arange(len(time)), time, ping, channel))
        again = (
            (np.diff(ping[order]) == 0)
            & (np.diff(channel[order]) == 0)
            & (np.diff(time[order]) == 0)
        )
        if not again.any():
            return False
        digest = self._digests(len(time))
        order = np.lexsort((np.arange(len(time)), digest, time, ping, channel))
        same = np.ones(len(time) - 1, dtype=bool)
        for key in (digest, time, ping, channel):
            same &= np.diff(key[order]) == 0
        repeated = np.sort(order[1:][same])
        kept[repeated] = False
        start = np.cumsum(length) - length
        for at, reader in enumerate(self._readers):
            mine = repeated[file[repeated] == at]
            if len(mine):
                reader.account.notes.append(
                    f"{len(mine)} pings were met before, in this or another file; each was counted once."
                )
                places = _spread(start[mine], length[mine])
                reader.reject_all(self._places.numbers(places), MET_BEFORE)
        return int(again.sum()) > len(repeated)

    def _note_namesakes(
        self,
        time: Integers,
        ping: Integers,
        channel: Integers,
        file: Integers,
        kept: NDArray[np.bool_],
    ) -> None:
        """Say where pings of one time, number and channel differ in their beams."""
        rows = np.flatnonzero(kept)
        order = rows[np.lexsort((time[rows], ping[rows], channel[rows]))]
        same = np.ones(len(order) - 1, dtype=bool)
        for key in (time, ping, channel):
            same &= np.diff(key[order]) == 0
        for at, reader in enumerate(self._readers):
            count = int((file[order[1:][same]] == at).sum())
            if count:
                reader.account.notes.append(
                    f"{count} pings have the time and number of another but other beams; all were used. If they are of "
                    "different heads, log a channel."
                )

    def _begins_alike(self, count: int) -> bool:
        """Whether many pings among the first have the beams of the ping before."""
        first = int(np.searchsorted(np.cumsum(self._counts), SAMPLE_BEAMS))
        digests = self._digests(count, SAMPLE_BEAMS)[:first]
        return len(digests) > 1 and bool((np.diff(digests) == 0).mean() > MESSAGE_SHARE)

    def _digests(self, count: int, most: int | None = None) -> Integers:
        """For each run a number that its beams' values give: equal where all of them are.

        With ``most`` only about so many beams are looked at, from the first on.
        """
        digest = np.zeros(count, dtype=np.uint64)
        runs = np.repeat(np.arange(count), self._counts)
        stored = self._stored
        passed = 0
        for batch in self._spill.batches(stored):
            here = runs[passed : passed + len(batch[stored[0]])]
            starts = np.concatenate([[0], np.flatnonzero(np.diff(here)) + 1]) if len(here) else here
            for weight, name in enumerate(stored, start=1):
                bits = np.asarray(batch[name], dtype=np.float64).view(np.uint64)
                mixed = (bits ^ (bits >> np.uint64(29))) * np.uint64(
                    0x9E3779B97F4A7C15 + 2 * weight
                )
                mixed ^= mixed >> np.uint64(32)
                if len(here):
                    digest[here[starts]] += np.add.reduceat(mixed, starts)
            passed += len(here)
            if most is not None and passed >= most:
                break
        return digest.view(np.int64)

    def _finish_accounts(self, file: Integers, length: Integers, kept: NDArray[np.bool_]) -> None:
        for at, reader in enumerate(self._readers):
            used = self._rows_of_files[at] if self._rows_of_files is not None else None
            if used is None:
                used = length[(file == at) & kept].sum() if len(file) else 0
            reader.account.rows_used = int(used)
            reader.write_out()
            reader.account.rejected_rows.sort(key=lambda r: r.row)

    def _order(
        self,
        time: Integers,
        ping: Integers,
        channel: Integers,
        kept: NDArray[np.bool_],
        logged: bool,
        names: Names,
        file: Integers,
    ) -> Integers:
        """Runs in channel, then ping order.

        Ping numbers decide only where they bring the times into better order: a counter that starts again, or a
        clock that steps back, leaves the order of the file. Where neither helps, and times fall so often that rows
        must have been shuffled, the times decide: unless ping numbers never fall, for then it is the clock that does.
        """
        rank = np.array(_ranks(names.channel.names) or [0], dtype=np.int64)
        ordered: list[Integers] = []
        codes = np.unique(channel[kept])
        for code in sorted(codes.tolist(), key=lambda c: int(rank[c]) if c >= 0 else -1):
            rows = np.flatnonzero(kept & (channel == code))
            by = ""
            falls = _falls(time[rows])
            counted = logged and not (np.diff(ping[rows]) < 0).any()
            if falls and logged and not counted:
                by_ping = rows[np.argsort(ping[rows], kind="stable")]
                if _falls(time[by_ping]) < falls:
                    rows, by, falls = by_ping, "ping numbers", _falls(time[by_ping])
            if (falls and not counted) and (
                (not logged and len(self._parts) > 1)
                or (falls > 1 and falls > SHUFFLED_SHARE * (len(rows) - 1))
            ):
                rows, by = rows[np.argsort(time[rows], kind="stable")], "times"
            if by:
                self._note_order(rows, file, by)
            ordered.append(rows)
        return np.concatenate(ordered) if ordered else np.zeros(0, dtype=np.int64)

    def _note_order(self, rows: Integers, file: Integers, by: str) -> None:
        for at, reader in enumerate(self._readers):
            moved = int((np.diff(rows[file[rows] == at]) < 0).sum())
            if moved:
                reader.account.notes.append(
                    f"Pings stand out of order in the file; they were put into the order of their {by}."
                )

    def _drop_strays(
        self,
        kept: NDArray[np.bool_],
        order: Integers,
        time: Integers,
        channel: Integers,
        file: Integers,
        length: Integers,
    ) -> None:
        """Few pings over a day away from both neighbours, which agree with one another: their times are no times."""
        stray: list[Integers] = []
        for code in np.unique(channel[order]).tolist():
            rows = order[channel[order] == code]
            there = time[rows]
            jumps = np.flatnonzero(np.abs(np.diff(there)) > STRAY)
            for first, last in zip(jumps[:-1].tolist(), jumps[1:].tolist(), strict=True):
                back = abs(int(there[last + 1]) - int(there[first])) <= STRAY
                if back and last - first <= 3:
                    stray.append(rows[first + 1 : last + 1])
            if len(there) > 2 and len(jumps):
                if jumps[0] == 0 and there[0] > there[1] and (len(jumps) < 2 or jumps[1] > 1):
                    stray.append(rows[:1])
                end = len(there) - 2
                alone = len(jumps) < 2 or jumps[-2] < end - 1
                if jumps[-1] == end and there[-1] < there[-2] and alone:
                    stray.append(rows[-1:])
        if not stray:
            return
        gone = np.unique(np.concatenate(stray))
        kept[gone] = False
        start = np.cumsum(length) - length
        for at, reader in enumerate(self._readers):
            mine = gone[file[gone] == at]
            if len(mine):
                places = _spread(start[mine], length[mine])
                reader.reject_all(
                    self._places.numbers(places), "the time is out of order beyond repair"
                )

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
    return rows.beams.get("beam") if rows.of_one_beam else None


def _first_known(
    values: NDArray[np.float64], first: Integers, lengths: Integers
) -> NDArray[np.float64]:
    """The first value that is known in each run."""
    known = np.where(np.isnan(values), len(values), np.arange(len(values)))
    at = np.minimum.reduceat(known, first)
    inside = at < first + lengths
    return np.where(inside, values[np.minimum(at, len(values) - 1)], np.nan)


def _falls(time: Integers) -> int:
    """How often times fall."""
    return int((np.diff(time) < 0).sum())


def _spread(starts: Integers, lengths: Integers) -> Integers:
    """Places of stretches, all after one another."""
    ends = np.cumsum(lengths)
    return np.repeat(starts + lengths - ends, lengths) + np.arange(int(lengths.sum()))


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
