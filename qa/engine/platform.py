"""Quantities of the platform along a line: numbers, motion, positions and settings that stop, jump or change.

Every function takes the pings of one line and channel, in order, and gives one value for each.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from qa.engine.alongline import distinct_fixes
from qa.physics import ground

Floats = NDArray[np.float64]
Times = NDArray[np.int64]

FROZEN_SECONDS = 10.0
"""A value that stays the same to the last digit for so long has stopped, where it otherwise does not."""
FROZEN_FACTOR = 5.0
"""... and for so many times as long as nineteen in twenty of the line's other runs of one value."""
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


def seconds_unchanged(time: Times, *values: Floats) -> Floats:
    """How long each ping's values have been and will be the same to the last digit, together.

    Parameters
    ----------
    time : ndarray of int64, shape (n,)
        [ns]
    *values : ndarray of float64, shape (n,)
        A missing value is never the same as another.

    Returns
    -------
    ndarray of float64, shape (n,)
        Duration of the run that the ping belongs to; NaN where a value is missing. [s]
    """
    n = len(time)
    if not n:
        return np.zeros(0)
    known = np.ones(n, dtype=bool)
    same = np.ones(max(n - 1, 0), dtype=bool)
    for value in values:
        value = np.broadcast_to(value, (n,))
        known &= ~np.isnan(value)
        same &= value[1:] == value[:-1]
    run = np.concatenate([[0], np.cumsum(~same)])
    first = np.searchsorted(run, run, side="left")
    last = np.searchsorted(run, run, side="right") - 1
    duration = (time[last] - time[first]) / 1e9
    return np.where(known, duration, np.nan)


def frozen_seconds(time: Times, *values: Floats) -> Floats:
    """As :func:`seconds_unchanged`, but 0 where values of this line often stay so long: they are coarse, not stuck.

    What is usual is the length that 95 % of the line's runs do not exceed.
    """
    unchanged = seconds_unchanged(time, *values)
    known = unchanged[~np.isnan(unchanged)]
    if not len(known):
        return unchanged
    starts = np.concatenate([[True], np.diff(unchanged) != 0])
    runs = unchanged[starts & ~np.isnan(unchanged)]
    usual = float(np.quantile(runs, 0.95)) if len(runs) >= 20 else 0.0
    with np.errstate(invalid="ignore"):
        return np.where(
            np.isnan(unchanged), np.nan, np.where(unchanged > FROZEN_FACTOR * usual, unchanged, 0.0)
        )


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
    frozen = frozen_seconds(time, latitude, longitude)
    speed = np.broadcast_to(np.asarray(speed, dtype=float), frozen.shape)
    with np.errstate(invalid="ignore"):
        return np.where(speed < SLOWEST_MOVING, 0.0, frozen)


def motion_share(
    roll: Any = np.nan,
    pitch: Any = np.nan,
    heave: Any = np.nan,
    roll_limit: Any = np.nan,
    pitch_limit: Any = np.nan,
    heave_limit: Any = np.nan,
) -> Any:
    """The largest of roll, pitch and heave, each as a share of its limit, of those that are logged."""
    with np.errstate(invalid="ignore"):
        return np.fmax(
            np.fmax(np.abs(roll) / roll_limit, np.abs(pitch) / pitch_limit),
            np.abs(heave) / heave_limit,
        )


def fix_speed(time: Times, latitude: Floats, longitude: Floats) -> Floats:
    """Speed that each new fix means since the fix before it; 0 where the position is none or not new. [m/s]"""
    found = np.where(np.isnan(latitude) | np.isnan(longitude), np.nan, 0.0)
    fixes = distinct_fixes(latitude, longitude)
    if len(fixes) < 2:
        return found
    metres = ground.distance(
        latitude[fixes[:-1]], longitude[fixes[:-1]], latitude[fixes[1:]], longitude[fixes[1:]]
    )
    # A fix is no finer in time than the pings that carry it: never less than a second is counted.
    seconds = np.maximum(np.diff(time[fixes]) / 1e9, 1.0)
    found[fixes[1:]] = metres / seconds
    return found


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
    found[np.isnan(altitude)] = 1.0
    return found


def turn(heading: Floats) -> Floats:
    """Change of heading from each ping to the next; 0 for the last. [deg]"""
    change = np.zeros(len(heading))
    change[:-1] = np.abs((np.diff(heading) + 180.0) % 360.0 - 180.0)
    return change
