"""Quantities of the platform along a line: numbers, motion, positions and settings that stop, jump or change.

Every function takes the pings of one line and channel, in order, and gives one value for each.
"""

from __future__ import annotations

from collections.abc import Callable
from itertools import pairwise
from typing import Any

import numpy as np
from numpy.typing import NDArray

from qa.engine.alongline import (
    distinct_fixes,
    geodesic,
    legs,
    running_median,
    spread_over_legs,
    straight,
)

Floats = NDArray[np.float64]
Times = NDArray[np.int64]

FROZEN_SECONDS = 10.0
"""A value that stays the same to the last digit for so long has stopped, where it otherwise does not."""
FROZEN_FACTOR = 5.0
"""... and for so many times as long as nineteen in twenty of the line's other runs of one value."""
FEWEST_FROZEN = 10
TURN_WINDOW = 5
SLOWEST_MOVING = 0.5


def number_step(ping: Floats) -> Floats:
    """Step from each ping's number to the next, as a multiple of the line's usual step; NaN for the last.

    A counter that starts again at 0 or 1 has not lost anything.

    Examples
    --------
    >>> number_step(np.array([7.0, 8.0, 10.0, 0.0, 1.0])).tolist()
    [1.0, 2.0, 1.0, 1.0, nan]
    """
    found = np.full(len(ping), np.nan)
    if len(ping) < 2:
        return found
    step = np.diff(ping)
    forward = step[step > 0]
    usual = float(np.median(forward)) if len(forward) else 1.0
    again = (step < 0) & (ping[1:] <= 1.0)
    found[:-1] = np.where(again, 1.0, step / usual)
    return found


def seconds_unchanged(time: Times, *values: Floats) -> tuple[Floats, NDArray[np.int64]]:
    """How long each ping's values have been and will be the same to the last digit, together.

    Parameters
    ----------
    time : ndarray of int64, shape (n,)
        [ns]
    *values : ndarray of float64, shape (n,)
        A missing value is never the same as another.

    Returns
    -------
    duration : ndarray of float64, shape (n,)
        Duration of the run that the ping belongs to, no interval counted for more than three times the
        line's median; NaN where a value is missing. [s]
    run : ndarray of int64, shape (n,)
        Number of that run.
    """
    n = len(time)
    if not n:
        return np.zeros(0), np.zeros(0, dtype=np.int64)
    known = np.ones(n, dtype=bool)
    same = np.ones(max(n - 1, 0), dtype=bool)
    for value in values:
        value = np.broadcast_to(value, (n,))
        known &= ~np.isnan(value)
        same &= value[1:] == value[:-1]
    run = np.concatenate([np.zeros(1, dtype=np.int64), np.cumsum(~same)])
    first = np.searchsorted(run, run, side="left")
    last = np.searchsorted(run, run, side="right") - 1
    step = np.maximum(np.diff(time) / 1e9, 0.0)
    # A stop of the logging has kept nothing the same.
    usual = float(np.median(step[step > 0])) if (step > 0).any() else 0.0
    elapsed = np.concatenate([[0.0], np.cumsum(np.minimum(step, 3.0 * usual))])
    duration = elapsed[last] - elapsed[first]
    return np.where(known, duration, np.nan), run


def frozen_seconds(time: Times, *values: Floats) -> Floats:
    """As :func:`seconds_unchanged`, but 0 where values of this line often stay so long: they are coarse, not stuck.

    What is usual is the length that 95 % of the line's runs do not exceed, or of fewer than twenty the second
    longest. NaN on a line whose values never change: whether they are stuck cannot be told. A run of fewer than ten pings is
    0 too: a gap between two pings that happen to agree has stopped nothing.
    """
    unchanged, run = seconds_unchanged(time, *values)
    starts = np.searchsorted(run, np.arange(run[-1] + 1)) if len(run) else run
    runs = unchanged[starts][~np.isnan(unchanged[starts])]
    if len(runs) < 2:
        return np.full(len(unchanged), np.nan)
    usual = float(np.quantile(runs, 0.95) if len(runs) >= 20 else np.sort(runs)[-2])
    pings = np.bincount(run)[run]
    with np.errstate(invalid="ignore"):
        stuck = (unchanged > FROZEN_FACTOR * usual) & (pings >= FEWEST_FROZEN)
        return np.where(np.isnan(unchanged), np.nan, np.where(stuck, unchanged, 0.0))


def depth_frozen_seconds(
    time: Times, nearest: Floats, least: Floats, greatest: Floats, speed: Any = np.nan
) -> Floats:
    """How long the depths have been stuck at each ping, while the vessel was not known to lie still. [s]"""
    return _under_way(frozen_seconds(time, nearest, least, greatest), speed)


def _under_way(frozen: Floats, speed: Any) -> Floats:
    with np.errstate(invalid="ignore"):
        return np.where(np.asarray(speed, dtype=float) < SLOWEST_MOVING, 0.0, frozen)


def motion_frozen_seconds(
    time: Times, roll: Any = np.nan, pitch: Any = np.nan, heave: Any = np.nan
) -> Floats:
    """The longest that roll, pitch or heave has been stuck at each ping, of those that are logged. [s]"""
    n = len(time)
    found = [
        frozen_seconds(time, np.broadcast_to(value, (n,)))
        for value in (roll, pitch, heave)
        if np.ndim(value) and not np.isnan(value).all()
    ]
    return np.fmax.reduce(found) if found else np.full(n, np.nan)


def position_frozen_seconds(
    time: Times, latitude: Floats, longitude: Floats, speed: Any = np.nan
) -> Floats:
    """How long the position has been stuck at each ping while the vessel was under way. [s]"""
    return _under_way(frozen_seconds(time, latitude, longitude), speed)


def motion_share(
    roll: Any = np.nan,
    pitch: Any = np.nan,
    heave: Any = np.nan,
    roll_rate: Any = np.nan,
    roll_limit: Any = np.nan,
    pitch_limit: Any = np.nan,
    heave_limit: Any = np.nan,
    roll_rate_limit: Any = np.nan,
) -> Any:
    """The largest of roll, pitch, heave and roll rate, each as a share of its limit, of those that are logged."""
    with np.errstate(invalid="ignore"):
        return np.fmax(
            np.fmax(np.abs(roll) / roll_limit, np.abs(pitch) / pitch_limit),
            np.fmax(np.abs(heave) / heave_limit, roll_rate / roll_rate_limit),
        )


def rate(value: Floats, ping_interval: Floats, typical_interval: Floats) -> Floats:
    """How fast a value changes from each ping to the next, in size; 0 for the last. [unit/s]

    No interval counts for less than half the typical one: a clock that stepped back makes nothing turn faster.
    """
    found = np.zeros(len(value))
    with np.errstate(invalid="ignore", divide="ignore"):
        seconds = np.fmax(ping_interval, 0.5 * typical_interval)[:-1]
        steps = np.abs(np.diff(value)) / seconds
    found[:-1] = np.where(np.isfinite(steps), steps, 0.0)
    return found


def fix_speed(time: Times, latitude: Floats, longitude: Floats) -> Floats:
    """Speed that each new fix means since the fix before it; 0 where the position is not new. [m/s]"""
    return _fix_speed(time, latitude, longitude, geodesic)


def fix_speed_on_grid(time: Times, easting: Floats, northing: Floats) -> Floats:
    """As :func:`fix_speed`, from grid coordinates. [m/s]"""
    return _fix_speed(time, easting, northing, straight)


def _fix_speed(time: Times, first: Floats, second: Floats, metres: Callable[..., Floats]) -> Floats:
    found = np.where(np.isnan(first) | np.isnan(second), np.nan, 0.0)
    fixes = distinct_fixes(first, second)
    if len(fixes) < 2:
        return found
    a, b = fixes[:-1], fixes[1:]
    # A fix is no finer in time than the pings that carry it: never less than a second is counted.
    seconds = np.maximum(np.diff(time[fixes]) / 1e9, 1.0)
    found[b] = metres(first[a], second[a], first[b], second[b]) / seconds
    return found


def speed_disagreement(time: Times, latitude: Floats, longitude: Floats, speed: Floats) -> Floats:
    """Mean of the logged speed over each leg of 10 s or more, less the speed of its two fixes, in size. [m/s]"""
    return _disagreement(time, speed, *legs(time, latitude, longitude, geodesic))


def speed_disagreement_on_grid(
    time: Times, easting: Floats, northing: Floats, speed: Floats
) -> Floats:
    """As :func:`speed_disagreement`, from grid coordinates. [m/s]"""
    return _disagreement(time, speed, *legs(time, easting, northing, straight))


def _disagreement(time: Times, speed: Floats, ends: NDArray[np.int64], of_fixes: Floats) -> Floats:
    found = np.full(len(of_fixes), np.nan)
    for leg, (a, b) in enumerate(pairwise(ends)):
        seconds = np.diff(time[a : b + 1]) / 1e9
        run = np.nansum(speed[a:b] * seconds)
        known = seconds[~np.isnan(speed[a:b])].sum()
        if known > 0.5 * seconds.sum() > 0:
            found[leg] = abs(run / known - of_fixes[leg])
    return spread_over_legs(len(time), ends, found)


def settings_changed(
    frequency: Any = np.nan,
    bandwidth: Any = np.nan,
    pulse_length: Any = np.nan,
    pulse_form: Any = np.nan,
    range_scale: Any = np.nan,
    source_level: Any = np.nan,
    beamwidth_along: Any = np.nan,
    beamwidth_across: Any = np.nan,
) -> Any:
    """1 at a ping whose settings are not those of the ping before, else 0; of settings that are logged."""
    found: Any = 0.0
    for value in (
        *(frequency, bandwidth, pulse_length, pulse_form),
        *(range_scale, source_level, beamwidth_along, beamwidth_across),
    ):
        if np.ndim(value):
            changed = np.zeros(len(value))
            before, after = value[:-1], value[1:]
            changed[1:] = (before != after) & ~(np.isnan(before) | np.isnan(after))
            found = np.maximum(found, changed)
    return found


BOTTOM_TRACK_FAULTS = ("followed", "lost", "frozen", "beyond the range")


def bottom_track_fault(time: Times, altitude: Floats, range_scale: Any = np.inf) -> Floats:
    """What is wrong with a towed sonar's altitude, as a position in :data:`BOTTOM_TRACK_FAULTS`."""
    frozen = frozen_seconds(time, altitude)
    found = np.zeros(len(time))
    with np.errstate(invalid="ignore"):
        found[altitude > range_scale] = 3.0
        found[frozen >= FROZEN_SECONDS] = 2.0
        found[altitude <= 0.0] = 1.0
    missing = np.isnan(altitude)
    # Logged on fewer than half the pings it is not lost in between, only logged more slowly.
    found[missing] = 1.0 if missing.mean() < 0.5 else np.nan
    return found


def turn(heading: Floats) -> Floats:
    """Change of heading from each ping to the next, in size: the median of the five changes around it. [deg]

    A heading's noise goes to and fro from ping to ping, and hardly outlives the median; a turn goes on.
    """
    if len(heading) < 2:
        return np.zeros(len(heading))
    change = np.append((np.diff(heading) + 180.0) % 360.0 - 180.0, np.nan)
    return np.abs(running_median(change, TURN_WINDOW))
