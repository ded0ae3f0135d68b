"""Beam values brought to their ping: one value from each ping's accepted beams."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Groups:
    """How a batch's rows fall into pings: ``counts`` rows each, shape (n,), zero allowed."""

    counts: NDArray[np.int64]
    starts: NDArray[np.int64]
    filled: NDArray[np.bool_]
    single: bool

    @classmethod
    def of(cls, counts: NDArray[np.int64]) -> Groups:
        """Groups of consecutive rows."""
        ends = np.cumsum(counts)
        filled = counts > 0
        return cls(counts, (ends - counts)[filled], filled, bool((counts == 1).all()))

    def spread(self, values: Any) -> Any:
        """A value for each ping, repeated for its beams; one number where all are the same."""
        if np.ndim(values) == 0:
            return values
        if self.single:
            return values
        if len(values) and (values == values[0]).all():
            return values[0]
        return np.repeat(values, self.counts)

    def reduced(self, ufunc: Any, values: Any, empty: float) -> Floats:
        """``ufunc`` over each ping's rows, ``empty`` for a ping without rows."""
        if self.single:
            return np.asarray(values, dtype=float)
        found = np.full(len(self.counts), empty)
        if len(self.starts):
            found[self.filled] = ufunc.reduceat(values, self.starts)
        return found

    def first_where(self, mask: NDArray[np.bool_]) -> NDArray[np.int64]:
        """Row of the first true element of each ping; -1 where there is none."""
        found = np.full(len(self.counts), -1, dtype=np.int64)
        rows = np.flatnonzero(mask)
        if not len(rows):
            return found
        if self.single:
            found[rows] = rows
            return found
        ping = np.searchsorted(self.starts, rows, side="right") - 1
        first = np.concatenate([[True], ping[1:] != ping[:-1]])
        found[np.flatnonzero(self.filled)[ping[first]]] = rows[first]
        return found


def reduce_beams(
    reducer: str,
    values: Any,
    groups: Groups,
    rows: int,
    accepted: NDArray[np.bool_] | None = None,
    nearness: Any = None,
) -> Floats:
    """One value for each ping.

    Parameters
    ----------
    reducer : str
        greatest, least, mean, spread (greatest less least), share, count, nearest_vertical or nearest_angle.
    values : ndarray, shape (rows,), or number
        NaN where not known; such beams are passed over, and for share and count not counted.
    groups : Groups
    rows : int
        Rows of the batch.
    accepted : ndarray of bool, optional
        Beams that count; all if left out.
    nearness : ndarray, shape (rows,), optional
        For the nearest: the beam of the least value is taken, of equal ones the first.

    Returns
    -------
    ndarray of float64, shape (pings,)
        NaN where no beam counts; 0 for a count.
    """
    if not rows:
        return np.full(len(groups.counts), 0.0 if reducer == "count" else np.nan)
    values = np.broadcast_to(np.asarray(values, dtype=float), (rows,))
    if accepted is not None:
        values = np.where(accepted, values, np.nan)
    if reducer == "greatest":
        return groups.reduced(np.fmax, values, np.nan)
    if reducer == "least":
        return groups.reduced(np.fmin, values, np.nan)
    if reducer == "spread":
        return groups.reduced(np.fmax, values, np.nan) - groups.reduced(np.fmin, values, np.nan)
    if reducer in ("nearest_vertical", "nearest_angle"):
        distance = np.broadcast_to(np.asarray(nearness, dtype=float), (rows,))
        distance = np.where(
            np.isnan(values), np.inf, np.where(np.isnan(distance), np.inf, distance)
        )
        least = groups.reduced(np.minimum, distance, np.inf)
        row = groups.first_where(
            (distance == np.repeat(least, groups.counts)) & np.isfinite(distance)
        )
        return np.where(row >= 0, values[row], np.nan)
    known = ~np.isnan(values)
    number = groups.reduced(np.add, known.astype(float), 0.0)
    if reducer == "count":
        return groups.reduced(np.add, np.where(known, values != 0.0, 0.0).astype(float), 0.0)
    total = np.where(known, values != 0.0 if reducer == "share" else values, 0.0).astype(float)
    with np.errstate(invalid="ignore", divide="ignore"):
        mean: Floats = groups.reduced(np.add, total, 0.0) / number
    return np.where(number > 0, mean, np.nan)
