"""Quantities that need a ping's neighbours: intervals, gaps, stamps, speed and distance along a line.

Every function takes the pings of one line and channel, in order, and gives one value for each.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
from numpy.typing import NDArray

from qa.physics import ground

Floats = NDArray[np.float64]
Times = NDArray[np.int64]

TYPICAL_WINDOW = 51
LEAST_FIX_TIME = 10.0
ARRIVAL_WINDOW = 10
_BLOCK = 20_000


def ping_interval(time: Times) -> Floats:
    """Time from each ping to the next; NaN for the last.

    Parameters
    ----------
    time : ndarray of int64, shape (n,)
        Transmission times. [ns]

    Returns
    -------
    ndarray of float64, shape (n,)
        t[i+1] - t[i]. [s]

    Examples
    --------
    >>> ping_interval(np.array([0, 200_000_000, 500_000_000])).tolist()
    [0.2, 0.3, nan]
    """
    return ping_span(time, 1)


def ping_span(time: Times, pings_in_water: float) -> Floats:
    """Time from each ping to the one that is sent when its echo must be in: k pings later.

    Parameters
    ----------
    time : ndarray of int64, shape (n,)
        Transmission times. [ns]
    pings_in_water : float
        k, the pings that are in the water at once.

    Returns
    -------
    ndarray of float64, shape (n,)
        t[i+k] - t[i]; NaN for the last k. [s]
    """
    k = int(pings_in_water)
    found = np.full(len(time), np.nan)
    if len(time) > k:
        found[:-k] = (time[k:] - time[:-k]) / 1e9
    return found


def interval_per_ping(ping_span: Floats, pings_in_water: float) -> Floats:
    """The interval that each ping has to itself: the span shared by the pings in the water. [s]"""
    return ping_span / pings_in_water


def running_median(values: Floats, window: int) -> Floats:
    """Median of the known values in a window around each, cut short at the ends; NaN where none is known."""
    half = window // 2
    n = len(values)
    if not n:
        return np.zeros(0)
    padded = np.concatenate([np.full(half, np.nan), values, np.full(half, np.nan)])
    ordered = np.sort(np.lib.stride_tricks.sliding_window_view(padded, window), axis=1)
    count = np.sum(~np.isnan(ordered), axis=1)
    some = np.maximum(count, 1)
    rows = np.arange(n)
    median = 0.5 * (ordered[rows, (some - 1) // 2] + ordered[rows, some // 2])
    return np.where(count > 0, median, np.nan)


def typical_interval(interval_per_ping: Floats) -> Floats:
    """What the interval usually is around a ping.

    The larger of the median and of the mean of the lowest 90 % of the 51 intervals around it, the
    window cut short at the line's ends. The mean keeps a line whose intervals alternate or bunch from
    seeming full of gaps.

    Parameters
    ----------
    interval_per_ping : ndarray of float64, shape (n,)
        Intervals. [s]

    Returns
    -------
    ndarray of float64, shape (n,)
        NaN where no interval is near. [s]
    """
    n, half = len(interval_per_ping), TYPICAL_WINDOW // 2
    found = np.full(n, np.nan)
    padded = np.concatenate([np.full(half, np.nan), interval_per_ping, np.full(half, np.nan)])
    for start in range(0, n, _BLOCK):
        stop = min(start + _BLOCK, n)
        windows = np.lib.stride_tricks.sliding_window_view(
            padded[start : stop + 2 * half], TYPICAL_WINDOW
        )
        ordered = np.sort(windows, axis=1)
        count = np.sum(~np.isnan(ordered), axis=1)
        some = np.maximum(count, 1)
        rows = np.arange(stop - start)
        median = 0.5 * (ordered[rows, (some - 1) // 2] + ordered[rows, some // 2])
        kept = np.maximum(some * 9 // 10, 1)
        sums = np.cumsum(np.where(np.isnan(ordered), 0.0, ordered), axis=1)
        typical = np.maximum(median, sums[rows, kept - 1] / kept)
        found[start:stop] = np.where(count > 0, typical, np.nan)
    return found


def least_mean_around(values: Floats, window: int = ARRIVAL_WINDOW) -> Floats:
    """The least mean of all runs of ``window`` consecutive values that contain each one.

    A series shorter than the window has one run: the whole of it. NaN where no run without NaN contains the value.
    """
    n = len(values)
    found = np.full(n, np.nan)
    usable = values[~np.isnan(values)]
    if not len(usable):
        return found
    width = min(window, len(usable))
    sums = np.lib.stride_tricks.sliding_window_view(values, min(width, n)).mean(axis=1)
    padded = np.concatenate(
        [
            np.full(width - 1, np.inf),
            np.where(np.isnan(sums), np.inf, sums),
            np.full(width - 1, np.inf),
        ]
    )
    least = np.lib.stride_tricks.sliding_window_view(padded, width).min(axis=1)[:n]
    return np.where(np.isinf(least), np.nan, least)


def stamped_on_arrival(ping_span: Floats, bottom_travel_time: Floats) -> Floats:
    """1 where the clock cannot have stamped the transmission, else 0.

    A span shorter than the bottom travel time, while no ten consecutive spans that contain it average
    less, is a stamp of arrival at the logger; so is a span that is not longer than nothing, since no ping
    follows another at once.

    Parameters
    ----------
    ping_span, bottom_travel_time : ndarray of float64, shape (n,)
        [s]

    Returns
    -------
    ndarray of float64, shape (n,)
    """
    bottom = np.broadcast_to(bottom_travel_time, ping_span.shape)
    with np.errstate(invalid="ignore"):
        short = ping_span < bottom * (1.0 - 1e-9)
        bunched = ~(least_mean_around(ping_span) < bottom)
        return ((short & bunched) | (ping_span <= 0.0)).astype(float)


def interval_as_sent(ping_interval: Floats, stamped_on_arrival: Any = 0.0) -> Floats:
    """Time from each ping to the next, a logger's stall shared among the pings it held back.

    Where the pings that follow were stamped on arrival, the interval before them and theirs together are
    their sending, so their mean is taken.

    Parameters
    ----------
    ping_interval : ndarray of float64, shape (n,)
        [s]
    stamped_on_arrival : ndarray of float64, shape (n,), optional
        1 for a ping whose time is a stamp of arrival.

    Returns
    -------
    ndarray of float64, shape (n,)
        [s]

    Examples
    --------
    >>> interval_as_sent(np.array([0.1, 0.3, 0.0, 0.0, 0.1]), np.array([0, 0, 1, 1, 0.0])).round(3).tolist()
    [0.1, 0.1, 0.0, 0.0, 0.1]
    """
    n = len(ping_interval)
    held = np.broadcast_to(np.asarray(stamped_on_arrival) == 1.0, (n,))
    if not held.any():
        return ping_interval
    # The first ping from each one on that was not held back.
    free = np.where(held, n, np.arange(n))
    following = np.minimum.accumulate(free[::-1])[::-1]
    after = np.append(following[1:], n)
    ends = np.concatenate([[0.0], np.nancumsum(ping_interval)])
    shared = (ends[after] - ends[:-1]) / np.maximum(after - np.arange(n), 1)
    return np.where(held | np.isnan(ping_interval), ping_interval, shared)


def usual_interval(interval_per_ping: Floats, typical_interval: Floats) -> Floats:
    """The interval that a re-run may count on: each ping's own, or the typical one where the log stopped. [s]"""
    with np.errstate(invalid="ignore"):
        return np.where(
            interval_per_ping > 3.0 * typical_interval, typical_interval, interval_per_ping
        )


CLOCK_FAULTS = ("in order", "steps back", "repeats", "stamped on arrival", "too coarse")


def clock_fault(
    time: Times,
    ping_span: Floats,
    bottom_travel_time: Any = np.nan,
    listening_time: Any = np.nan,
    time_resolution: Any = np.nan,
) -> Floats:
    """What is wrong with each ping's time, as a position in :data:`CLOCK_FAULTS`.

    A step back or a repeat is the fault of the ping whose time is not later than the one before. A clock is
    too coarse where the span and the listening time differ by less than its step: either could be the longer.

    Parameters
    ----------
    time : ndarray of int64, shape (n,)
        [ns]
    ping_span : ndarray of float64, shape (n,)
        [s]
    bottom_travel_time : ndarray of float64, shape (n,), optional
        Without it, stamps of arrival are not looked for. [s]
    listening_time : ndarray of float64, shape (n,), optional
        [s]
    time_resolution : float, optional
        Step of the clock. [s]
    """
    found = np.zeros(len(time))
    with np.errstate(invalid="ignore"):
        found[np.abs(ping_span - listening_time) < time_resolution] = 4.0
    bottom = np.broadcast_to(np.asarray(bottom_travel_time, dtype=float), ping_span.shape)
    stamped = (stamped_on_arrival(ping_span, bottom) == 1.0) & (ping_span > 0.0)
    found[stamped] = 3.0
    step = np.diff(time)
    found[1:][step == 0] = 2.0
    found[1:][step < 0] = 1.0
    return found


def distinct_fixes(latitude: Floats, longitude: Floats) -> NDArray[np.int64]:
    """Rows that hold a new position: not missing, not the one before again."""
    known = np.flatnonzero(~(np.isnan(latitude) | np.isnan(longitude)))
    if not len(known):
        return known
    moved = (np.diff(latitude[known]) != 0) | (np.diff(longitude[known]) != 0)
    fixes: NDArray[np.int64] = known[np.concatenate([[True], moved])]
    return fixes


def speed_from_positions(time: Times, latitude: Floats, longitude: Floats) -> Floats:
    """Speed over the ground from distinct fixes at least 10 s apart, straight between them.

    Parameters
    ----------
    time : ndarray of int64, shape (n,)
        [ns]
    latitude, longitude : ndarray of float64, shape (n,)
        [deg]

    Returns
    -------
    ndarray of float64, shape (n,)
        NaN outside the first and the last fix used, and everywhere with fewer than two. [m/s]
    """

    return spread_over_legs(len(time), *legs(time, latitude, longitude, geodesic))


def speed_from_grid(time: Times, easting: Floats, northing: Floats) -> Floats:
    """As :func:`speed_from_positions`, from grid coordinates in metres."""

    return spread_over_legs(len(time), *legs(time, easting, northing, straight))


def geodesic(
    latitude: Floats, longitude: Floats, to_latitude: Floats, to_longitude: Floats
) -> Floats:
    """Distance between positions in degrees. [m]"""
    return np.asarray(ground.distance(latitude, longitude, to_latitude, to_longitude), dtype=float)


def straight(easting: Floats, northing: Floats, to_easting: Floats, to_northing: Floats) -> Floats:
    """Distance between positions of a grid. [m]"""
    return np.hypot(to_easting - easting, to_northing - northing)


def legs(
    time: Times, first: Floats, second: Floats, metres: Callable[..., Floats]
) -> tuple[NDArray[np.int64], Floats]:
    """Legs of at least 10 s between distinct fixes, and the speed over each.

    Parameters
    ----------
    time : ndarray of int64, shape (n,)
        [ns]
    first, second : ndarray of float64, shape (n,)
        The two coordinates.
    metres : callable
        :func:`geodesic` or :func:`straight`.

    Returns
    -------
    ends : ndarray of int64, shape (legs + 1,)
        Rows at which the legs begin and end; empty where there is none.
    speed : ndarray of float64, shape (legs,)
        [m/s]
    """
    fixes = distinct_fixes(first, second)
    if len(fixes) < 2:
        return fixes[:0], np.zeros(0)
    seconds = (time[fixes] - time[0]) / 1e9
    kept = [0]
    while True:
        following = int(np.searchsorted(seconds, seconds[kept[-1]] + LEAST_FIX_TIME, side="left"))
        if following <= kept[-1] or following >= len(seconds):
            break
        kept.append(following)
    ends = fixes[kept]
    if len(ends) < 2:
        return ends[:0], np.zeros(0)
    a, b = ends[:-1], ends[1:]
    speed: Floats = metres(first[a], second[a], first[b], second[b]) / np.diff(seconds[kept])
    return ends, speed


def spread_over_legs(n: int, ends: NDArray[np.int64], values: Floats) -> Floats:
    """Each leg's value at each of its rows; NaN outside the first and the last leg."""
    found = np.full(n, np.nan)
    if len(values):
        at = np.arange(ends[0], ends[-1] + 1)
        leg = np.searchsorted(ends, at, side="right") - 1
        found[at] = values[np.minimum(leg, len(values) - 1)]
    return found


def distance_along(speed: Floats, ping_interval: Floats) -> Floats:
    """Distance along the line since its first ping, over pings whose speed and interval are known. [m]"""
    step = np.broadcast_to(speed, ping_interval.shape) * ping_interval
    step = np.where(np.isnan(step) | (step < 0), 0.0, step)
    return np.concatenate([[0.0], np.cumsum(step[:-1])]) if len(step) else step
