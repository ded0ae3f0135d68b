"""What the statistics of a part of a Parquet file prove of its columns: then no cell of it need be looked at."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np
import pyarrow as pa
from numpy.typing import NDArray

from qa.ingest.names import Binding
from qa.ingest.probe import SIDES, FileProbe
from qa.ingest.table_source import TableSource
from qa.ingest.times import EARLIEST, LATEST, TimeState, convert_times
from qa.ingest.values import to_number
from qa.model.columns import COLUMNS

Integers = NDArray[np.int64]
Roles = frozenset[str]
_POSITIONS = ("latitude", "longitude", "easting", "northing")
_NUMBERS = ("ping", "beam")
_TICKS = {"s": 1_000_000_000, "ms": 1_000_000, "us": 1_000, "ns": 1}


@dataclass(frozen=True, slots=True)
class Proof:
    """Canonical columns without a cell that is missing, unreadable or impossible, in one part of one file.

    ``time`` turns the counts of the time's column into nanoseconds, where they are times, all of them. ``unread`` are
    columns that were not even read, ``constants`` those of them that have one value in all rows, as the file has it.
    """

    roles: frozenset[str] = frozenset()
    unread: frozenset[str] = frozenset()
    constants: dict[str, float] = field(default_factory=dict)
    time: Callable[[Integers], Integers] | None = None
    bindings: dict[str, Binding] = field(default_factory=dict)

    def settled(self, role: str, values: NDArray[Any]) -> NDArray[np.float64]:
        """Some cells of a column, in SI; those of a column without proof are so already."""
        if role in self.roles:
            values = self.bindings[role].convert.to_si(values.astype(np.float64))
        return np.asarray(values, dtype=np.float64)


NO_PROOF = Proof()


def counts_of(array: pa.Array) -> Integers:
    """Whole numbers, or times as counts, of a column without an empty cell."""
    if pa.types.is_timestamp(array.type):
        array = array.view(pa.int64())
    return np.asarray(array.to_numpy(), dtype=np.int64)


def unread(
    probe: FileProbe, source: TableSource, group: int, bindings: Sequence[Binding], later: Roles
) -> Proof:
    """What can be proven of some columns of a part so that they need not be read: a proof of nothing else.

    Parameters
    ----------
    probe : FileProbe
    source : TableSource
        The file that is being read.
    group : int
        The part's number.
    bindings : sequence of Binding
        The columns that are wanted.
    later : frozenset of str
        Columns that will be read when they are wanted; the others are proven if they are constant.
    """
    candidates = [
        b
        for b in bindings
        if b.role in later
        or (b.role in COLUMNS and COLUMNS[b.role].grain == "ping" and b.role not in _NUMBERS)
    ]
    if not candidates or not source.groups[group]:
        return NO_PROOF
    source.try_out([b.source for b in candidates], group)
    sound = [b for b in candidates if is_proven(b, probe, source, group)]
    same = source.constants([b.source for b in sound if b.role not in later], group)
    found = {b.role: b for b in sound if b.role in later or b.source in same}
    constants = {role: same[b.source] for role, b in found.items() if b.source in same}
    return Proof(frozenset(constants), frozenset(found), constants, None, found)


def proven(probe: FileProbe, source: TableSource, group: int, before: Proof) -> Proof:
    """What the statistics of one part prove of the columns that were read from it.

    Parameters
    ----------
    probe : FileProbe
    source : TableSource
        The file that is being read.
    group : int
        The part's number. The caller has read from it: damaged statistics are refused by then.
    before : Proof
        What was proven of the columns that are not read.
    """
    found = {
        b.role: b
        for b in probe.bindings
        if b.role not in before.unread and is_proven(b, probe, source, group)
    }
    return replace(
        before,
        roles=before.roles | frozenset(found),
        time=_times(probe, source, group),
        bindings=before.bindings | found,
    )


def is_proven(binding: Binding, probe: FileProbe, source: TableSource, group: int) -> bool:
    """Whether no cell of a numeric column of a part is missing, unreadable or impossible."""
    role = binding.role
    if role in {SIDES[side.role][0] for side in probe.sides}:
        return False
    if probe.layout != "long" and (role not in COLUMNS or COLUMNS[role].grain == "beam"):
        return False
    kind = source.fields[binding.source].type
    if role not in _NUMBERS and (role not in COLUMNS or COLUMNS[role].kind != "number"):
        return False
    plain = pa.types.is_signed_integer(kind) or pa.types.is_float64(kind)
    extremes = source.extremes(binding.source, group) if plain else None
    if extremes is None:
        return False
    if role in _NUMBERS:
        return bool(pa.types.is_integer(kind))
    if role in _POSITIONS and extremes[0] <= 0 <= extremes[1]:
        return False
    # What is missing or impossible lies outside of a span of values, or at its ends.
    both = to_number(binding, pa.array(extremes, kind), probe.depth_from, probe.decimal_comma)
    return both.bad is None and both.impossible is None and not both.emptied


def _times(
    probe: FileProbe, source: TableSource, group: int
) -> Callable[[Integers], Integers] | None:
    plan = probe.times
    if plan.rolls_over or len(plan.bindings) != 1 or plan.kind not in ("instant", "number"):
        return None
    (name,) = plan.sources
    kind = source.fields[name].type
    if pa.types.is_timestamp(kind) and plan.kind == "instant":
        if kind.tz is None and plan.zone != "UTC":
            return None
        step, origin = _TICKS[kind.unit], 0
    elif pa.types.is_signed_integer(kind) and plan.kind == "number":
        step, origin = round(plan.step), plan.origin
        if float(step) != plan.step:
            return None
    else:
        return None
    extremes = source.extremes(name, group)
    if extremes is None:
        return None
    both = pa.array([int(e) for e in extremes], pa.int64()).cast(kind)
    times, bad = convert_times(plan, {name: both}, TimeState())
    if bad.any() or times.min() < EARLIEST or times.max() > LATEST:
        return None

    def settled(counts: Integers) -> Integers:
        scaled = counts if step == 1 else counts * step
        return scaled + origin if origin else scaled

    return settled
