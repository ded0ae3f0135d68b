"""Beam values brought to their ping: one value from each ping's accepted beams."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Groups:
    """How a batch's beams fall into pings: ``counts`` beams each, shape (n,), zero allowed.

    Values of beams have one shape within a batch: (n, width) where every ping has ``width`` beams, two at least,
    so that what is the same for every ping or along it stays small and broadcasts; else (beams,), width 0.
    """

    counts: NDArray[np.int64]
    starts: NDArray[np.int64]
    filled: NDArray[np.bool_]
    single: bool
    width: int

    @classmethod
    def of(cls, counts: NDArray[np.int64]) -> Groups:
        """Groups of consecutive beams."""
        ends = np.cumsum(counts)
        filled = counts > 0
        alike = len(counts) > 0 and bool((counts == counts[0]).all())
        width = int(counts[0]) if alike and counts[0] > 1 else 0
        return cls(counts, (ends - counts)[filled], filled, alike and counts[0] == 1, width)

    @property
    def shape(self) -> tuple[int, ...]:
        """Shape of a full array of beam values."""
        return (len(self.counts), self.width) if self.width else (int(self.counts.sum()),)

    def folded(self, values: NDArray[Any]) -> NDArray[Any]:
        """Values of beams after one another, in the batch's shape; (1, width) where every ping has the same."""
        if not self.width:
            return values
        grid = values.reshape(self.shape)
        if len(grid) > 1 and (grid[1] == grid[0]).all() and (grid == grid[0]).all():
            return grid[:1]
        return grid

    def full(self, values: Any) -> NDArray[Any]:
        """Values in the batch's full shape, without a copy."""
        if np.shape(values) == self.shape:
            return np.asarray(values)
        return np.broadcast_to(values, self.shape)

    def at(self, values: Any, beams: NDArray[np.int64]) -> NDArray[Any]:
        """Values at some beams, counted after one another."""
        return np.asarray(self.full(values)[self.places(beams)])

    def places(self, beams: NDArray[np.int64]) -> tuple[NDArray[np.int64], ...]:
        """Where in an array of the batch's full shape some beams are, counted after one another."""
        return (beams // self.width, beams % self.width) if self.width else (beams,)

    def owners(self, beams: NDArray[np.int64]) -> NDArray[np.int64]:
        """Which ping of the batch some beams are of, counted after one another."""
        if self.width:
            return beams // self.width
        return np.flatnonzero(self.filled)[np.searchsorted(self.starts, beams, side="right") - 1]

    def grid(
        self, counted: NDArray[np.bool_] | None, *values: Any
    ) -> tuple[tuple[Floats, ...], NDArray[np.bool_] | None]:
        """Values of the counted beams as (pings, beams) arrays, each ping's from the left, NaN after them.

        Parameters
        ----------
        counted : ndarray of bool, optional
            In the batch's shape; every beam, if left out.
        *values : ndarray or number
            In the batch's shape, or what broadcasts to it.

        Returns
        -------
        tuple of ndarray
            Where every beam of a regular fan counts, the values as they were given, (n, 1) and (1, width) included.
        ndarray of bool, shape (pings, beams), or None
            Where in them the counted beams stand; None where that is everywhere.
        """
        if self.width and counted is None:
            return tuple(np.atleast_2d(np.asarray(v, dtype=float)) for v in values), None
        chosen = np.ones(self.shape, dtype=bool) if counted is None else self.full(counted)
        number = self.counted(chosen)
        most = int(number.max(initial=0))
        there = np.arange(most) < number[:, None]
        grids = []
        for value in values:
            grid = np.full(there.shape, np.nan)
            grid[there] = self.full(value)[chosen]
            grids.append(grid)
        return tuple(grids), there

    def scattered(
        self, grid: Floats, there: NDArray[np.bool_] | None, counted: NDArray[np.bool_] | None
    ) -> Floats:
        """A grid of counted beams back in the batch's shape; NaN for those that do not count."""
        if there is None:
            return grid
        if counted is None:
            return grid[there].reshape(self.shape)
        found = np.full(self.shape, np.nan)
        found[self.full(counted)] = grid[there]
        return found

    def spread(self, values: Any) -> Any:
        """A value for each ping, for its beams; one number where all are the same."""
        if np.ndim(values) == 0 or self.single:
            return values
        if len(values) and (values == values[0]).all():
            return values[0]
        return values[:, None] if self.width else np.repeat(values, self.counts)

    def reduced(self, ufunc: Any, values: Any, empty: float) -> Floats:
        """``ufunc`` over each ping's beams, ``empty`` for a ping without beams."""
        if self.single:
            return np.asarray(self.full(values), dtype=float)
        if self.width and ufunc is not np.add:
            return np.asarray(ufunc.reduce(self.full(values), axis=1), dtype=float)
        # A sum's last digit hangs on the order of its terms, which may not hang on how batches are cut.
        found = np.full(len(self.counts), empty)
        if len(self.starts):
            found[self.filled] = ufunc.reduceat(self.full(values).ravel(), self.starts)
        return found

    def counted(self, mask: Any) -> NDArray[np.int64]:
        """True beams of each ping."""
        if self.width:
            return np.asarray(np.count_nonzero(self.full(mask), axis=1), dtype=np.int64)
        return self.reduced(np.add, self.full(mask).astype(np.int64), 0).astype(np.int64)

    def first_where(self, mask: NDArray[np.bool_]) -> NDArray[np.int64]:
        """First true beam of each ping, counted after one another; -1 where there is none."""
        if self.width:
            mask = self.full(mask)
            column = mask.argmax(axis=1)
            pings = np.arange(len(self.counts))
            return np.where(mask[pings, column], pings * self.width + column, -1)
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
    accepted: NDArray[np.bool_] | None = None,
    nearness: Any = None,
) -> Floats:
    """One value for each ping.

    Parameters
    ----------
    reducer : str
        greatest, least, mean, spread (greatest less least), share, count, nearest_vertical or nearest_angle.
    values : ndarray or number
        In the batch's shape, or what broadcasts to it. NaN where not known; such beams are passed over, and for
        share and count not counted.
    groups : Groups
    accepted : ndarray of bool, optional
        Beams that count; all if left out.
    nearness : ndarray, optional
        For the nearest: the beam of the least value is taken, of equal ones the first.

    Returns
    -------
    ndarray of float64, shape (pings,)
        NaN where no beam counts; 0 for a count.
    """
    if not groups.counts.any():
        return np.full(len(groups.counts), 0.0 if reducer == "count" else np.nan)
    values = np.asarray(values, dtype=float)
    if reducer in ("nearest_vertical", "nearest_angle") and accepted is None:
        found = _in_one_column(values, groups, nearness)
        if found is not None:
            return found
    if accepted is not None:
        values = np.where(accepted, values, np.nan)
    if reducer == "greatest":
        return _extreme(np.maximum, np.fmax, values, groups)
    if reducer == "least":
        return _extreme(np.minimum, np.fmin, values, groups)
    if reducer == "spread":
        greatest = _extreme(np.maximum, np.fmax, values, groups)
        return greatest - _extreme(np.minimum, np.fmin, values, groups)
    if reducer in ("nearest_vertical", "nearest_angle"):
        row = nearest_beam(values, groups, nearness)
        return np.where(row >= 0, groups.at(values, row), np.nan)
    known = ~np.isnan(values)
    number = groups.counted(known)
    if reducer == "count":
        return groups.counted(known & (values != 0.0)).astype(float)
    total = np.where(known, values != 0.0 if reducer == "share" else values, 0.0).astype(float)
    with np.errstate(invalid="ignore", divide="ignore"):
        mean: Floats = groups.reduced(np.add, total, 0.0) / number
    return np.where(number > 0, mean, np.nan)


def _extreme(fast: Any, careful: Any, values: Floats, groups: Groups) -> Floats:
    """Greatest or least, NaN passed over; the pass that minds NaN is taken where there is one."""
    if groups.width and values.ndim == 2 and values.shape[1] == 1:
        return np.broadcast_to(values[:, 0], groups.counts.shape)
    found = groups.reduced(fast, values, np.nan)
    return groups.reduced(careful, values, np.nan) if np.isnan(found).any() else found


def _in_one_column(values: Floats, groups: Groups, nearness: Any) -> Floats | None:
    """Values of the nearest beam where it is the same in every ping and known in all; None else."""
    distance = np.asarray(nearness, dtype=float)
    if not groups.width or distance.ndim != 2 or distance.shape != (1, groups.width):
        return None
    column = int(distance[0].argmin())
    found = groups.full(values)[:, column]
    return None if np.isnan(found).any() or not distance[0, column] < np.inf else found


def nearest_beam(values: Floats, groups: Groups, nearness: Any) -> NDArray[np.int64]:
    """The known beam of the least nearness in each ping, of equal ones the first; -1 where there is none."""
    distance = np.asarray(nearness, dtype=float)
    unknown = np.isnan(values) | np.isnan(distance)
    if unknown.any():
        distance = np.where(unknown, np.inf, distance)
    if groups.width:
        whole = distance if distance.ndim == 2 and distance.shape[1] > 1 else groups.full(distance)
        pings = np.arange(len(groups.counts))
        column = np.broadcast_to(whole.argmin(axis=1), pings.shape)
        there = groups.full(distance)[pings, column] < np.inf
        return np.where(there, pings * groups.width + column, -1)
    least = groups.reduced(np.minimum, distance, np.inf)
    nearest = groups.full(distance) == np.repeat(least, groups.counts)
    return groups.first_where(nearest & (distance < np.inf))
