"""Quantities that tell a sounding that cannot be right from its neighbours, within a ping and along a line."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from qa.engine.alongline import running_median
from qa.engine.reducers import Groups

Floats = NDArray[np.float64]
Times = NDArray[np.int64]

ALONG_WINDOW = 15
TREND_WINDOW = 51
OWN_WINDOW = 5
WOBBLE_SECONDS = 30.0


def along_departure(height: Floats) -> Floats:
    """Signed departure of each ping's height from the median of the 15 around it, as a share of that median."""
    usual = running_median(height, ALONG_WINDOW)
    with np.errstate(invalid="ignore", divide="ignore"):
        return (height - usual) / usual


def multiple_echo(along_departure: Floats) -> Floats:
    """1 where the height is within 10 % of twice what it is around the ping: the second echo was taken."""
    with np.errstate(invalid="ignore"):
        found = np.abs(along_departure - 1.0) <= 0.2
    return np.where(np.isnan(along_departure), np.nan, found.astype(float))


def along_spike(along_departure: Floats, multiple_echo: Floats) -> Floats:
    """Size of the departure, second echoes left to their own rule."""
    return np.where(multiple_echo == 1.0, 0.0, np.abs(along_departure))


def across_departure(height: Any, accepted: Any, groups: Groups) -> Floats:
    """How far a beam's height lies beyond those of its four neighbours in the ping, as a share of their median.

    0 inside what the neighbours span or where fewer than five accepted beams are side by side.
    """
    total = int(groups.counts.sum())
    height = np.broadcast_to(np.asarray(height, dtype=float), (total,))
    counted = np.broadcast_to(np.asarray(accepted) != 0.0, (total,)) & ~np.isnan(height)
    found = np.where(np.isnan(height), np.nan, 0.0)
    rows = np.flatnonzero(counted)
    if len(rows) < 5:
        return found
    ping = np.repeat(np.arange(len(groups.counts)), groups.counts)[rows]
    z = height[rows]
    n = len(z)
    middle = slice(2, n - 2)
    a, b, c, d = z[: n - 4], z[1 : n - 3], z[3 : n - 1], z[4:]
    low, high = np.minimum(a, b), np.maximum(a, b)
    low2, high2 = np.minimum(c, d), np.maximum(c, d)
    # The second least and the second greatest: one wild neighbour decides nothing.
    inner_low = np.minimum(np.maximum(low, low2), np.minimum(high, high2))
    inner_high = np.maximum(np.maximum(low, low2), np.minimum(high, high2))
    beyond = np.maximum(
        z[middle] - np.maximum(inner_high, inner_low), np.minimum(inner_low, inner_high) - z[middle]
    )
    together = ping[: n - 4] == ping[4:]
    share = np.maximum(beyond, 0.0) / np.abs(0.5 * (inner_low + inner_high))
    found[rows[middle]] = np.where(together, share, 0.0)
    return found


def fan_shape(
    height: Any, angle_from_vertical: Any, accepted: Any, groups: Groups, power: int
) -> Floats:
    """Coefficient of the tangent (1) or of its square (2) in a ping's heights, as a share of its mean height.

    A least-squares fit of 1, tan β and tan² β over the ping's accepted beams, given for each of its beams.
    """
    total = int(groups.counts.sum())
    z = np.broadcast_to(np.asarray(height, dtype=float), (total,))
    t = np.tan(np.radians(np.broadcast_to(np.asarray(angle_from_vertical, dtype=float), (total,))))
    weight = (
        np.broadcast_to(np.asarray(accepted) != 0.0, (total,)) & ~np.isnan(z) & ~np.isnan(t)
    ).astype(float)
    z, t = np.where(weight > 0, z, 0.0), np.where(weight > 0, t, 0.0)

    def summed(values: Floats) -> Floats:
        return groups.reduced(np.add, values, 0.0)

    t2 = t * t
    s = [summed(weight), summed(t), summed(t2), summed(t2 * t), summed(t2 * t2)]
    v = [summed(z), summed(z * t), summed(z * t2)]
    normal = np.stack([np.stack([s[i + j] for j in range(3)], axis=-1) for i in range(3)], axis=-2)
    enough = s[0] >= 8
    normal[~enough] = np.eye(3)
    right = np.stack(v, axis=-1)
    scale = np.abs(np.linalg.det(normal)) > 1e-9 * np.maximum(s[0], 1.0) ** 3
    normal[~scale] = np.eye(3)
    solved = np.linalg.solve(normal, right[..., None])[..., 0]
    with np.errstate(invalid="ignore", divide="ignore"):
        share = np.where(enough & scale, solved[:, power] / (v[0] / s[0]), np.nan)
    return np.repeat(share, groups.counts)


def fan_tilt(height: Any, angle_from_vertical: Any, accepted: Any, groups: Groups) -> Floats:
    """Slope of a ping's soundings across the track, as a tangent; the same for each of its beams."""
    return fan_shape(height, angle_from_vertical, accepted, groups, 1)


def fan_curl(height: Any, angle_from_vertical: Any, accepted: Any, groups: Groups) -> Floats:
    """How much of a ping's height its outer beams turn up or down, per tan² β; the same for each of its beams."""
    return fan_shape(height, angle_from_vertical, accepted, groups, 2)


def lasting(values: Floats) -> Floats:
    """Size of a value that lasts: of its median over 51 pings, but no more than over the 5 around the ping itself.

    The greatest of the long medians that the ping is part of tells that something lasts, the short one where it
    begins and ends.
    """
    if not len(values):
        return np.zeros(0)
    trend = np.abs(running_median(values, TREND_WINDOW))
    half = TREND_WINDOW // 2
    padded = np.concatenate(
        [np.full(half, -np.inf), np.nan_to_num(trend, nan=-np.inf), np.full(half, -np.inf)]
    )
    greatest = np.lib.stride_tricks.sliding_window_view(padded, TREND_WINDOW).max(axis=1)
    own = np.abs(running_median(values, OWN_WINDOW))
    return np.where(np.isinf(greatest), np.nan, np.minimum(greatest[: len(values)], own))


def wobble_gain(time: Times, fan_tilt: Floats, roll: Floats) -> Floats:
    """Share of the roll that is found again as a tilt of the swath, over 30 s around each ping.

    The slope of a straight-line fit of the swath's tilt on the roll in the window; 0 where the two go together
    by chance (a correlation under 0.9), or the vessel hardly rolls (under 0.3° standard deviation).
    """
    n = len(time)
    if n < 10:
        return np.full(n, np.nan)
    seconds = (time - time[0]) / 1e9
    tilt = np.degrees(np.arctan(fan_tilt))
    known = ~(np.isnan(tilt) | np.isnan(roll))
    x, y = np.where(known, roll, 0.0), np.where(known, tilt, 0.0)
    first = np.searchsorted(seconds, seconds - 0.5 * WOBBLE_SECONDS, side="left")
    last = np.searchsorted(seconds, seconds + 0.5 * WOBBLE_SECONDS, side="right")

    def windowed(values: Floats) -> Floats:
        sums = np.concatenate([[0.0], np.cumsum(values)])
        total: Floats = sums[last] - sums[first]
        return total

    number = windowed(known.astype(float))
    with np.errstate(invalid="ignore", divide="ignore"):
        mean_x, mean_y = windowed(x) / number, windowed(y) / number
        var_x = windowed(x * x) / number - mean_x**2
        var_y = windowed(y * y) / number - mean_y**2
        both = windowed(x * y) / number - mean_x * mean_y
        gain = both / var_x
        correlation = both / np.sqrt(var_x * var_y)
    shows = (np.abs(correlation) >= 0.9) & (var_x >= 0.3**2) & (number >= 10)
    return np.where(number >= 10, np.where(shows, np.abs(gain), 0.0), np.nan)


def next_beam_distance(height: Any, angle_from_vertical: Any, groups: Groups) -> Floats:
    """Distance over a flat seabed from each beam to the next of its ping; NaN for the last. [m]"""
    total = int(groups.counts.sum())
    z = np.broadcast_to(np.asarray(height, dtype=float), (total,))
    t = np.tan(np.radians(np.broadcast_to(np.asarray(angle_from_vertical, dtype=float), (total,))))
    found = np.full(total, np.nan)
    found[:-1] = 0.5 * (z[1:] + z[:-1]) * np.abs(np.diff(t))
    ends = np.cumsum(groups.counts)[groups.counts > 0] - 1
    found[ends] = np.nan
    return found
