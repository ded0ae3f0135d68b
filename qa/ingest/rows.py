"""Raw batches turned into canonical rows: values in SI, what is missing, what is rejected and why."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
from numpy.typing import NDArray

from qa.ingest.names import Binding
from qa.ingest.probe import SIDES, FileProbe
from qa.ingest.proofs import NO_PROOF, Proof, counts_of, proven, unread
from qa.ingest.table_source import TableSource, is_list
from qa.ingest.text_source import RawBatch
from qa.ingest.times import EARLIEST, LATEST, TimeState, convert_times
from qa.ingest.values import (
    Converted,
    NameCodes,
    positions_of,
    to_flag,
    to_form,
    to_number,
    to_whole,
)
from qa.model.columns import COLUMNS
from qa.model.errors import InputError
from qa.model.log import KEPT_REJECTS, NO_TIME, FileAccount, RejectedRow
from qa.model.side_by_side import in_order

Integers = NDArray[np.int64]
WHOLE = ("ping", "beam")
NAMES = ("line", "channel")


@dataclass(slots=True)
class Rows:
    """Canonical rows of one batch, rejected ones taken out.

    ``numbers`` are the rows' numbers in the file. ``beams`` holds the beam columns, ``counts`` how many of their
    values each row owns: one each, ``one_each``, in a log whose rows are pings or beams. NaN, or -1 for ``ping``, is
    missing. Columns that ``proof`` covers are as they are in the file: :meth:`qa.ingest.proofs.Proof.settled`.
    """

    numbers: Integers
    time: Integers
    ping: Integers | None
    line: Integers | None
    channel: Integers | None
    pings: dict[str, NDArray[np.float64]]
    beams: dict[str, NDArray[Any]]
    counts: Integers
    one_each: bool = False
    proof: Proof = NO_PROOF

    def __len__(self) -> int:
        return len(self.numbers)

    @property
    def of_one_beam(self) -> bool:
        """Whether each row has one beam, or is one."""
        return self.one_each or bool((self.counts == 1).all())

    def take(self, kept: NDArray[np.bool_]) -> Rows:
        """Some of the rows, by mask."""
        if kept.all():
            return self
        owned = kept if self.one_each else np.repeat(kept, self.counts)

        def picked(values: Integers | None) -> Integers | None:
            return None if values is None else values[kept]

        return Rows(
            self.numbers[kept],
            self.time[kept],
            picked(self.ping),
            picked(self.line),
            picked(self.channel),
            {k: v[kept] for k, v in self.pings.items()},
            {k: v[owned] for k, v in self.beams.items()},
            self.counts[kept],
            self.one_each,
            self.proof,
        )


@dataclass(slots=True)
class Names:
    """Names of lines and channels met so far, over all files of one reading."""

    line: NameCodes = field(default_factory=NameCodes)
    channel: NameCodes = field(default_factory=NameCodes)


@dataclass(frozen=True, slots=True)
class Stretch:
    """Rows of a file that are to be read: those whose numbers fall into rising ``spans`` (first, last).

    ``start`` is where in the file a reader may begin: a block's byte, and the number of the line before it.
    """

    spans: tuple[tuple[int, int], ...]
    start: tuple[int, int] = (0, 0)

    def holds(self, numbers: Integers) -> NDArray[np.bool_]:
        """Which row numbers are within."""
        firsts = np.array([a for a, _ in self.spans])
        lasts = np.array([b for _, b in self.spans])
        at = np.searchsorted(firsts, numbers, side="right") - 1
        return np.asarray((at >= 0) & (numbers <= lasts[np.maximum(at, 0)]))

    def holds_all(self, raw: RawBatch) -> bool:
        """Whether every row of a batch is within one span, and none of them is broken."""
        if not raw.length or raw.broken:
            return False
        start, end = raw.rows[[0, -1]].tolist()
        return any(first <= start and end <= last for first, last in self.spans)


class RowReader:
    """Reads one file, or a stretch of it, as canonical rows, keeping its account.

    With ``lazy``, cells of which a Parquet file's statistics prove that none is missing or impossible are left as they
    are. Columns of ``later`` that are proven so, and such as have one value throughout, are not read at all.
    """

    def __init__(
        self,
        probe: FileProbe,
        names: Names,
        wanted: frozenset[str] | None = None,
        stretch: Stretch | None = None,
        lazy: bool = False,
        later: frozenset[str] = frozenset(),
    ) -> None:
        self.probe, self.names, self.stretch = probe, names, stretch
        self._lazy, self._later = lazy, later
        self.account = FileAccount(probe.shown, notes=list(probe.notes))
        self.state = TimeState()
        self.bindings = tuple(b for b in probe.bindings if wanted is None or b.role in wanted)
        self._sides = tuple(s for s in probe.sides if wanted is None or SIDES[s.role][0] in wanted)
        self._latest = NO_TIME
        self._unwritten: set[int] = set()
        self.starts: list[tuple[int, int]] = []

    def batches(self) -> Iterator[Rows]:
        """The file's rows, batch after batch, in file order."""
        for raw, proof in self._raw():
            yield self.convert(raw, proof)
        if self.state.leap_seconds:
            self.account.notes.append(
                f"{self.state.leap_seconds} times lie in a leap second (second 60): taken as that far into the next minute."
            )

    def kinds(self) -> dict[str, pa.DataType]:
        """The file's own columns that are read, and as what."""
        sources = {b.source: self._kind(b) for b in self.bindings}
        for source in self.probe.times.sources:
            sources[source] = self._time_kind()
        for side in self._sides:
            sources[side.source] = pa.string()
        return sources

    def _raw(self) -> Iterator[tuple[RawBatch, Proof]]:
        sources = self.kinds()
        opened = self.probe.open()
        if isinstance(opened, TableSource):
            groups = self._groups(opened)
            read = (item for g in groups for item in self._part(opened, g, list(sources)))
            try:
                # The next batch is read while the caller works on this one.
                yield from in_order(read, lambda item: item, pa.cpu_count() if self._lazy else 1)
            finally:
                opened.close()
            return
        if self.stretch is None or self.probe.times.rolls_over:
            batches = opened.batches(sources)
        else:
            batches = opened.batches(
                sources, start=self.stretch.start, last=self.stretch.spans[-1][1]
            )
        for raw in batches:
            yield raw, NO_PROOF
        if opened.seekable:
            self.starts = opened.starts

    def _part(
        self, opened: TableSource, group: int, sources: list[str]
    ) -> Iterator[tuple[RawBatch, Proof]]:
        """One part of a Parquet or Arrow file."""
        if not self._lazy or opened.kind != "parquet" or opened.nested:
            for _, raw in opened.batches(sources, groups=[group]):
                yield raw, NO_PROOF
            return
        before = unread(self.probe, opened, group, self.bindings, self._later)
        passed = {before.bindings[role].source for role in before.unread}
        proof: Proof | None = None
        for _, raw in opened.batches([s for s in sources if s not in passed], groups=[group]):
            if proof is None:
                proof = proven(self.probe, opened, group, before)
            yield raw, proof

    def beams(
        self, size: int
    ) -> Iterator[tuple[Integers, dict[str, NDArray[Any]], NDArray[np.bool_] | None]]:
        """Beam columns, the numbers of their rows, and which rows' beams are to be rejected, if any; times are not read."""
        opened = self.probe.open()
        assert isinstance(opened, TableSource)
        sources = [b.source for b in self.bindings]
        try:
            for _, raw in opened.batches(sources, size, self._groups(opened)):
                if not raw.length:
                    continue
                reasons: list[tuple[NDArray[np.bool_], str]] = []
                with np.errstate(over="ignore", invalid="ignore"):
                    beams = self._converted(raw, raw.rows, reasons).beams
                bad = np.logical_or.reduce([mask for mask, _ in reasons]) if reasons else None
                yield raw.rows, beams, bad
        finally:
            opened.close()

    def _groups(self, opened: TableSource) -> Sequence[int]:
        if self.stretch is None or self.probe.times.rolls_over:
            return range(len(opened.groups))
        ends = np.cumsum(opened.groups)
        needed = []
        for group, (end, count) in enumerate(zip(ends.tolist(), opened.groups, strict=True)):
            if count and any(a <= end and b > end - count for a, b in self.stretch.spans):
                needed.append(group)
        return needed

    def _time_kind(self) -> pa.DataType:
        plan = self.probe.times
        if plan.kind == "text" and plan.text_form == "ymd" and len(plan.bindings) == 1:
            # ISO 8601 is read as such; a cell that is none turns the column into texts from there on
            return pa.timestamp("ns", "UTC" if plan.zoned else None)
        whole = plan.kind == "number" and float(round(plan.step)) == plan.step and plan.step >= 1
        return pa.int64() if whole and not plan.decimal_comma else pa.string()

    def _kind(self, binding: Binding) -> pa.DataType:
        if binding.role in WHOLE:
            return pa.int64()
        column = COLUMNS[binding.role]
        return pa.float64() if column.kind == "number" else pa.string()

    @np.errstate(over="ignore", invalid="ignore")
    def convert(self, raw: RawBatch, proof: Proof = NO_PROOF) -> Rows:
        """A batch of the file as canonical rows; what is rejected goes into the account."""
        account = self.account
        reasons: list[tuple[NDArray[np.bool_], str]] = []
        bad_time: NDArray[np.bool_] | None = None
        if proof.time is None:
            time, bad = convert_times(self.probe.times, dict(raw.columns), self.state)
            if (
                bad.any()
                or time.min(initial=LATEST) < EARLIEST
                or time.max(initial=EARLIEST) > LATEST
            ):
                bad_time = bad
        else:
            time = proof.time(counts_of(raw.columns[self.probe.times.sources[0]]))
        if self.stretch is not None and not self.stretch.holds_all(raw):
            mine = self.stretch.holds(raw.rows)
            raw = _part_of(raw, mine, self.stretch)
            time, bad_time = time[mine], None if bad_time is None else bad_time[mine]
        n = raw.length
        account.rows_read += n + len(raw.broken)
        for number, reason, text in raw.broken:
            self._reject(number, reason, text)
        if bad_time is not None:
            reasons += _unusable(time, bad_time)
        rows = self._converted(raw, time, reasons, proof)
        if not reasons:
            return self._met(rows)
        rejected = np.zeros(n, dtype=bool)
        for mask, reason in reasons:
            fresh = mask & ~rejected
            if fresh.any():
                positions = np.flatnonzero(fresh)
                kept = positions[: max(0, KEPT_REJECTS - len(account.rejected_rows))]
                texts = raw.texts(kept) if len(kept) else []
                for position, text in zip(kept.tolist(), texts, strict=True):
                    self._reject(int(raw.rows[position]), reason, text)
                left = len(positions) - len(kept)
                account.rows_rejected += left
                if left:
                    account.reasons[reason] = account.reasons.get(reason, 0) + left
                rejected |= fresh
        return self._met(rows.take(~rejected))

    def _met(self, rows: Rows) -> Rows:
        if len(rows):
            self._latest = max(self._latest, int(rows.time.max()))
        return rows

    @property
    def latest(self) -> int:
        """The latest time met."""
        return self._latest

    def reject_all(self, numbers: Integers, reason: str) -> None:
        """Count rows as rejected that were taken at first."""
        account = self.account
        if not len(numbers):
            return
        account.rows_rejected += len(numbers)
        account.reasons[reason] = account.reasons.get(reason, 0) + len(numbers)
        room = max(0, KEPT_REJECTS - len(account.rejected_rows))
        self._unwritten.update(numbers[:room].tolist())
        account.rejected_rows += [
            RejectedRow(self.probe.shown, n, reason, "") for n in numbers[:room].tolist()
        ]

    def write_out(self) -> None:
        """Look up the words of rows that were rejected after they had passed."""
        if not self._unwritten:
            return
        opened = self.probe.open()
        try:
            texts = opened.rows(sorted(self._unwritten))
        finally:
            if isinstance(opened, TableSource):
                opened.close()
        self.account.rejected_rows = [
            replace(row, text=texts.get(row.row, "")) if row.row in self._unwritten else row
            for row in self.account.rejected_rows
        ]
        self._unwritten = set()

    def _reject(self, number: int, reason: str, text: str) -> None:
        account = self.account
        account.rows_rejected += 1
        account.reasons[reason] = account.reasons.get(reason, 0) + 1
        if len(account.rejected_rows) < KEPT_REJECTS:
            account.rejected_rows.append(RejectedRow(self.probe.shown, number, reason, text))

    def _converted(
        self,
        raw: RawBatch,
        time: Integers,
        reasons: list[tuple[NDArray[np.bool_], str]],
        proof: Proof = NO_PROOF,
    ) -> Rows:
        n = raw.length
        pings: dict[str, NDArray[np.float64]] = {}
        flat: dict[str, NDArray[Any]] = {}
        codes: dict[str, Integers | None] = {"ping": None, "line": None, "channel": None}
        counts: Integers = np.broadcast_to(np.ones(1, dtype=np.int64), n)
        lists: dict[str, tuple[Binding, pa.Array]] = {}
        wide: dict[str, dict[int, Converted]] = {}
        for role, constant in proof.constants.items():
            pings[role] = np.broadcast_to(np.asarray(constant), n)
        for binding in self.bindings:
            role = binding.role
            if role in proof.unread:
                continue
            array = raw.columns[binding.source]
            if role in proof.roles and role == "ping":
                codes[role] = counts_of(array)
            elif role in proof.roles:
                grain = pings if COLUMNS[role].grain == "ping" else flat
                grain[role] = array.to_numpy()
            elif role in NAMES:
                codes[role] = getattr(self.names, role).encode(_plain_text(array))
            elif role == "ping":
                codes[role] = self._whole(binding, array, reasons)
            elif COLUMNS[role].grain == "ping":
                found = self._value(binding, array)
                self._note(found, reasons, None)
                pings[role] = np.asarray(found.values, dtype=np.float64)
                self._count_missing(role, found)
            elif self.probe.layout == "wide":
                found = self._value(binding, array)
                self._note(found, reasons, None)
                self._count_missing(role, found)
                wide.setdefault(role, {}).setdefault(binding.number, found)
            elif self.probe.layout == "list":
                if not is_list(array.type):
                    raise InputError(
                        "A column of beams holds one value a row where others hold lists.",
                        where=self.probe.shown,
                        found=f'"{binding.source}" ({array.type})',
                        expected="a list in each row",
                        advice="Write the column under ignore in [columns] of the survey file, or export it as lists.",
                    )
                lists[role] = binding, _plain_text(array)
            elif role == "beam":
                values = self._whole(binding, array, reasons)
                flat[role] = values.astype(np.float64)
            else:
                found = self._value(binding, array)
                self._note(found, reasons, None)
                self._count_missing(role, found)
                flat[role] = found.values
        if wide:
            flat, counts = _side_by_side(wide, n)
        if lists:
            flat, counts = self._lists(lists, reasons)
        for role, value in self.probe.constants:
            if role in NAMES and codes[role] is None:
                codes[role] = np.full(n, getattr(self.names, role).code(value), dtype=np.int64)
        for side in self._sides:
            role, negative = SIDES[side.role]
            letters = pc.utf8_upper(
                pc.utf8_trim_whitespace(raw.columns[side.source].cast(pa.string()))
            )
            turned = np.asarray(pc.fill_null(pc.starts_with(letters, negative), False))
            pings[role] = np.where(turned, -np.abs(pings[role]), pings[role])
        self._no_fix(pings, proof)
        return Rows(
            raw.rows,
            time,
            codes["ping"],
            codes["line"],
            codes["channel"],
            pings,
            flat,
            counts,
            not (wide or lists),
            proof,
        )

    def _lists(
        self,
        lists: Mapping[str, tuple[Binding, pa.Array]],
        reasons: list[tuple[NDArray[np.bool_], str]],
    ) -> tuple[dict[str, NDArray[Any]], Integers]:
        """Lists of beams as beams after one another.

        A list that is not there is one of missing values. Lists of one row that differ in length cannot be told
        apart beam by beam: such a row is rejected, and has no beams.
        """
        there = {r: np.asarray(a.is_valid()).astype(bool) for r, (_, a) in lists.items()}
        lengths = {r: np.where(there[r], _list_lengths(a), 0) for r, (_, a) in lists.items()}
        counts = np.maximum.reduce(list(lengths.values()))
        uneven = np.zeros(len(counts), dtype=bool)
        for role, length in lengths.items():
            uneven |= there[role] & (length != counts)
        if uneven.any():
            reasons.append((uneven, "the lists of beams differ in length"))
            counts = np.where(uneven, 0, counts)
        flat: dict[str, NDArray[Any]] = {}
        for role, (binding, array) in lists.items():
            found = self._value(binding, positions_of(array))
            self._note(found, reasons, np.repeat(np.arange(len(counts)), lengths[role]))
            self._count_missing(role, found)
            values = found.values
            if (lengths[role] != counts).any():
                values = values[np.repeat(~uneven, lengths[role])]
                filled = np.repeat(there[role] & ~uneven, counts)
                blank = np.full(len(filled), np.nan if values.dtype != bool else True, values.dtype)
                blank[filled] = values
                values = blank
            flat[role] = values
        return flat, counts

    def _whole(
        self, binding: Binding, array: pa.Array, reasons: list[tuple[NDArray[np.bool_], str]]
    ) -> Integers:
        values, missing, bad = to_whole(array, self.probe.decimal_comma)
        if bad is not None:
            reasons.append((bad, f"the {binding.role} number is no whole number"))
        if missing is not None and missing.any():
            reasons.append((missing, f"no {binding.role} number"))
        return values

    def _value(self, binding: Binding, array: pa.Array) -> Converted:
        kind = COLUMNS[binding.role].kind
        if kind == "flag":
            return to_flag(binding, array)
        if kind == "form":
            return to_form(array)
        return to_number(binding, array, self.probe.depth_from, self.probe.decimal_comma)

    def _note(
        self,
        found: Converted,
        reasons: list[tuple[NDArray[np.bool_], str]],
        owners: Integers | None,
    ) -> None:
        """Bad cells reject their row; one bad beam in a ping's list only makes that beam missing."""
        for mask, reason in (
            (found.bad, found.reason),
            (found.impossible, found.impossible_reason),
        ):
            if mask is None or not mask.any():
                continue
            if owners is None and self.probe.layout != "wide":
                reasons.append((mask, reason))
            else:
                values = found.values.astype(np.float64, copy=True)
                values[mask] = np.nan
                found.values = values
                found.emptied += int(mask.sum())

    def _count_missing(self, role: str, found: Converted) -> None:
        if found.emptied:
            self.account.missing[role] = self.account.missing.get(role, 0) + found.emptied

    def _no_fix(self, pings: dict[str, NDArray[np.float64]], proof: Proof) -> None:
        """A position of 0,0 is where no fix was."""
        for first, second in (("latitude", "longitude"), ("easting", "northing")):
            if first in pings and second in pings and not proof.roles & {first, second}:
                none = (pings[first] == 0.0) & (pings[second] == 0.0)
                if none.any():
                    for role in (first, second):
                        pings[role] = np.where(none, np.nan, pings[role])
                    count = int(none.sum())
                    self.account.missing["position"] = (
                        self.account.missing.get("position", 0) + count
                    )


def _unusable(time: Integers, bad: NDArray[np.bool_]) -> list[tuple[NDArray[np.bool_], str]]:
    """Rows whose time is of no use, and why."""
    missing = (time == NO_TIME) & ~bad
    known = ~missing & ~bad
    return [
        (bad, "the time cannot be read"),
        (missing, "no time"),
        (known & (time < EARLIEST), "the time is before 1990: the clock was not set"),
        (known & (time > LATEST), "the time is after 2100"),
    ]


def _part_of(raw: RawBatch, mine: NDArray[np.bool_], stretch: Stretch) -> RawBatch:
    """The rows of a batch that belong to a stretch of the file."""
    broken = raw.broken
    if broken:
        held = stretch.holds(np.array([number for number, _, _ in broken])).tolist()
        broken = [row for row, there in zip(broken, held, strict=True) if there]
    if mine.all():
        return replace(raw, broken=broken)
    kept = np.flatnonzero(mine)
    mask = pa.array(mine)
    return RawBatch(
        len(kept),
        {name: array.filter(mask) for name, array in raw.columns.items()},
        raw.rows[kept],
        lambda positions: raw.texts(kept[positions]),
        broken,
    )


def _plain_text(array: pa.Array) -> pa.Array:
    return array.combine_chunks() if isinstance(array, pa.ChunkedArray) else array


def _list_lengths(array: pa.Array) -> Integers:
    lengths = pc.list_value_length(array).fill_null(0)
    return np.asarray(lengths.to_numpy(zero_copy_only=False)).astype(np.int64)


def _side_by_side(
    wide: Mapping[str, Mapping[int, Converted]], n: int
) -> tuple[dict[str, NDArray[Any]], Integers]:
    """Beam columns side by side as beams after one another, told apart by number; one without any value is none."""
    numbers = sorted({number for columns in wide.values() for number in columns})
    grids: dict[str, NDArray[Any]] = {}
    for role, columns in wide.items():
        grid = np.full((n, len(numbers)), np.nan)
        for at, number in enumerate(numbers):
            if number in columns:
                grid[:, at] = columns[number].values
        grids[role] = grid
    there = np.zeros((n, len(numbers)), dtype=bool)
    for role, grid in grids.items():
        if role != "accepted":
            there |= ~np.isnan(grid)
    flat: dict[str, NDArray[Any]] = {
        role: (grid[there] != 0.0 if role == "accepted" else grid[there])
        for role, grid in grids.items()
    }
    flat["beam"] = np.broadcast_to(np.array(numbers, dtype=np.float64), there.shape)[there]
    return flat, there.sum(axis=1).astype(np.int64)
