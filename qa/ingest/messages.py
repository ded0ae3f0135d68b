"""Rows at message rate: where each row repeats what the last ping measured, a row is no ping."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

Integers = NDArray[np.int64]
Floats = NDArray[np.float64]
Mask = NDArray[np.bool_]

MESSAGE_SHARE = 0.2
"""Rows are looked at as messages only where more than this share of them repeats the row before."""
FEWEST_RUNS = 20
NO_ACCIDENT = 10.0
"""How many times as often as by one step of the last digit a value must stay the same, for that to be no accident."""
REGULAR_SHARE = 0.9
REPEATING_SHARE = 0.25
LONG_RUN = 3
MANY_BEAMS = 8

MEASURED = ("depth", "slant_range", "two_way_time", "altitude")
"""What a sonar measures anew with each ping."""
SET = (
    *("frequency", "bandwidth", "pulse_length", "pulse_form", "source_level", "gain"),
    *("range_scale", "ping_rate", "beamwidth_along", "beamwidth_across"),
)
"""What holds for a whole ping: where one of these changes, a ping begins."""


@dataclass(frozen=True, slots=True)
class Repeats:
    """Which rows repeat the ping of a row before, and what may be said of it.

    ``rows`` are "pings" where no row does; "messages" where those of ``again`` do; "either" where it looks so and is
    not sure. ``usual`` is the usual number of rows from one ping to the next.
    """

    rows: Literal["pings", "messages", "either"]
    again: Mask
    usual: int = 1


def find_repeats(
    time: Integers,
    source: Integers,
    measured: Sequence[Floats],
    settings: Sequence[Floats],
    beams: int,
    stated: bool = False,
) -> Repeats:
    """Tell messages from pings in a log that has no ping numbers.

    Rows are messages where values stay the same far more often than they change by the last digit only, so that it is
    no accident, and do so for about as many rows each time, as between the pings of a sounder. Seabed that is flat to
    the last digit, a tank, or a sensor that hangs for a while passes one of these tests at most.

    Parameters
    ----------
    time : ndarray of int64, shape (n,)
        Times of the rows in the order of the file. [ns]
    source : ndarray of int64, shape (n,)
        File and channel of each row, as one number.
    measured : sequence of ndarray, each of shape (n,)
        What a ping measures; NaN is missing.
    settings : sequence of ndarray, each of shape (n,)
        What holds for a whole ping.
    beams : int
        Values that each of ``measured`` stands for: one, or as many as a row has beams.
    stated : bool
        The user says that rows are messages.
    """
    n = len(time)
    nothing = Repeats("pings", np.zeros(n, dtype=bool))
    if n < 2 or not any(np.isfinite(values).any() for values in measured):
        return nothing
    order = np.argsort(source, kind="stable")
    same = (np.diff(source[order]) == 0) & (np.diff(time[order]) > 0)
    for values in (*measured, *settings):
        same &= as_before(values[order])
    known = np.logical_or.reduce([~np.isnan(values[order]) for values in measured])
    same &= known[1:]
    if not stated and same.mean() <= MESSAGE_SHARE:
        return nothing
    starts = np.flatnonzero(np.append(True, ~same))
    lengths = np.diff(np.append(starts, n))
    usual = max(1, round(float(np.median(lengths[1:-1])))) if len(lengths) > 2 else int(lengths[0])
    if not stated:
        if len(lengths) < FEWEST_RUNS:
            return nothing
        no_accident = _no_accident(same, starts, [v[order] for v in measured], beams)
        regular = _regular(lengths[1:-1], usual)
        if not (no_accident and regular):
            doubtful = usual >= 2 and (no_accident or regular)
            return Repeats("either", nothing.again, usual) if doubtful else nothing
    within = np.arange(n) - np.repeat(starts, lengths)
    again = within > 0
    # What stays the same for much longer than usual is measured anew all the same.
    again &= ~(np.repeat(lengths > LONG_RUN * usual, lengths) & (within % usual == 0))
    found = np.zeros(n, dtype=bool)
    found[order] = again
    return Repeats("messages", found, usual)


def as_before(values: NDArray[Any]) -> Mask:
    """Which values, from the second on, are those before them; a missing one is as another."""
    equal: Mask = values[1:] == values[:-1]
    if values.dtype.kind == "f" and not equal.all():
        equal |= np.isnan(values[1:]) & np.isnan(values[:-1])
    return equal


def _no_accident(same: Mask, starts: Integers, measured: Sequence[Floats], beams: int) -> bool:
    """Whether values stay the same far more often than they change by one step of the last digit."""
    if beams >= MANY_BEAMS:
        return True
    for values in measured:
        known = np.unique(values[np.isfinite(values)])
        if len(known) < 2:
            continue
        step = float(np.diff(known).min())
        changes = np.abs(np.diff(values[starts]))
        smallest = int((changes <= 1.5 * step).sum())
        if int(same.sum()) >= NO_ACCIDENT * smallest:
            return True
    return False


def _regular(lengths: Integers, usual: int) -> bool:
    """Whether nearly all runs of rows are about as long, and many longer than one row."""
    off = np.abs(lengths - usual)
    alike = (off <= max(1.0, 0.5 * usual)).mean() >= REGULAR_SHARE
    return bool(alike and (lengths > 1).mean() >= REPEATING_SHARE)
