"""The canonical log: what ingest delivers and the engine reads, one line at a time."""

from __future__ import annotations

from collections.abc import Collection, Iterator, Mapping
from dataclasses import dataclass, field
from typing import Any, Literal, Protocol

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]

NO_TIME = np.iinfo(np.int64).min
"""Stands for a time that is not known."""


@dataclass(frozen=True, slots=True)
class ChannelSpan:
    """The rows of a ping table that belong to one channel: ``start`` to ``stop``, as a slice."""

    name: str
    start: int
    stop: int

    @property
    def rows(self) -> slice:
        """The rows as a slice."""
        return slice(self.start, self.stop)


@dataclass(frozen=True, slots=True)
class PingTable:
    """Every ping of one line, in channel, then ping order.

    Parameters
    ----------
    time : ndarray of int64, shape (pings,)
        Nanoseconds since 1970-01-01 UTC. Never missing: a row without a time is rejected.
    ping : ndarray of int64, shape (pings,)
        The logged ping number, or where none is logged the 0-based position in line and channel.
    ping_logged : bool
        Whether ``ping`` was logged.
    channels : tuple of ChannelSpan
        Consecutive, covering all rows; one with the name "" where no channel is logged.
    columns : mapping of str to ndarray of float64, shape (pings,)
        The other logged ping columns that hold any value, SI, NaN where missing. ``pulse_form`` as its position
        in ``columns.PULSE_FORMS``. ``depth`` and the other beam columns of a log of one row per ping are
        not here: they come with the beams.
    time_resolution : float
        The step of the clock as measured, in seconds: 1.0 where times are whole seconds. NaN where neither the
        intervals nor the digits written tell.
    """

    time: NDArray[np.int64]
    ping: NDArray[np.int64]
    ping_logged: bool
    channels: tuple[ChannelSpan, ...]
    columns: Mapping[str, Floats]
    time_resolution: float = float("nan")

    def __len__(self) -> int:
        return len(self.time)


@dataclass(frozen=True, slots=True)
class BeamBatch:
    """Some whole pings' beams, ping after ping, in beam order.

    Parameters
    ----------
    pings : ndarray of int64, shape (n,)
        Positions in the ping table, each once in the whole stream.
    counts : ndarray of int64, shape (n,)
        Beams of each ping; 0 where all were rejected.
    columns : mapping of str to ndarray, shape (counts.sum(),)
        Beam columns, SI, float64 or float32 as stored; NaN where missing; ``accepted`` as bool.
    """

    pings: NDArray[np.int64]
    counts: NDArray[np.int64]
    columns: Mapping[str, NDArray[Any]]


@dataclass(frozen=True, slots=True)
class RejectedRow:
    """A row that could not be used. ``row`` counts from 1 in the original file, its header included."""

    path: str
    row: int
    reason: str
    text: str


@dataclass(slots=True)
class FileAccount:
    """What became of a file's rows: ``read = used + rejected + out_of_scope``.

    ``rejected_rows`` holds at most the first :data:`KEPT_REJECTS` of a file; ``reasons`` counts all.
    ``missing`` counts, by canonical column, values that were sentinels (0,0 positions, -999) and became missing.
    """

    path: str
    rows_read: int = 0
    rows_used: int = 0
    rows_rejected: int = 0
    rows_out_of_scope: int = 0
    reasons: dict[str, int] = field(default_factory=dict)
    missing: dict[str, int] = field(default_factory=dict)
    notes: list[str] = field(default_factory=list)
    rejected_rows: list[RejectedRow] = field(default_factory=list)

    @property
    def balances(self) -> bool:
        """Whether every row is accounted for."""
        return self.rows_read == self.rows_used + self.rows_rejected + self.rows_out_of_scope


KEPT_REJECTS = 100_000


class LineLog(Protocol):
    """One line of a log, opened. Read the ping table first, then the beams, then the accounts."""

    @property
    def name(self) -> str:
        """The line's name."""
        ...

    @property
    def grain(self) -> Literal["ping", "beam"]:
        """Whether the log has one row per ping, or one per beam."""
        ...

    @property
    def beam_columns(self) -> frozenset[str]:
        """Beam columns that are logged and hold any value, as far as is known before they are read."""
        ...

    def ping_table(self) -> PingTable:
        """Read the ping columns; each call after the first returns the same table."""
        ...

    def beam_batches(self, columns: Collection[str], rows: int = 100_000) -> Iterator[BeamBatch]:
        """Stream the named beam columns in batches of about ``rows`` rows, cut at ping boundaries.

        In a log of one row per ping each ping has one beam.
        """
        ...

    def accounts(self) -> tuple[FileAccount, ...]:
        """What became of the rows of each file, complete once the beams were streamed to their end."""
        ...
