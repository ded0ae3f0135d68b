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
    height = np.asarray(height, dtype=float)
    counted = _counted(groups, accepted, height)
    (z,), there = groups.grid(counted, groups.full(height))
    if z.shape[1] < 5:
        return np.where(np.isnan(groups.full(height)), np.nan, 0.0)
    a, b, middle, c, d = z[:, :-4], z[:, 1:-3], z[:, 2:-2], z[:, 3:-1], z[:, 4:]
    # The second least and the second greatest: one wild neighbour decides nothing.
    low, high = np.minimum(a, b), np.maximum(a, b)
    low, high = (
        np.maximum(low, np.minimum(c, d), out=low),
        np.minimum(high, np.maximum(c, d), out=high),
    )
    usual = low + high
    usual *= 0.5
    np.abs(usual, out=usual)
    inner_high = np.maximum(low, high)
    beyond = np.minimum(low, high, out=low)
    beyond -= middle
    np.maximum(beyond, np.subtract(middle, inner_high, out=inner_high), out=beyond)
    np.maximum(beyond, 0.0, out=beyond)
    beyond /= usual
    share = np.zeros(z.shape)
    share[:, 2:-2] = beyond
    if there is None:
        return share
    share[:, 2:-2][~there[:, 4:]] = 0.0
    found = groups.scattered(share, there, counted)
    if counted is None:
        return found
    return np.where(counted, found, np.where(np.isnan(groups.full(height)), np.nan, 0.0))


def _counted(groups: Groups, accepted: Any, *values: Any) -> NDArray[np.bool_] | None:
    """Accepted beams of which all values are known; None where all beams are."""
    known: Any = np.asarray(accepted) != 0.0
    for value in values:
        known = known & ~np.isnan(value)
    return None if np.all(known) else groups.full(known)


def fan_shape(
    height: Any, angle_from_vertical: Any, accepted: Any, groups: Groups, power: int
) -> Floats:
    """Coefficient of the tangent (1) or of its square (2) in a ping's heights, as a share of its mean height.

    A least-squares fit of 1, tan β and tan² β over the ping's accepted beams, given for each of its beams.
    """
    z = np.asarray(height, dtype=float)
    t = np.tan(np.radians(np.asarray(angle_from_vertical, dtype=float)))
    counted = _counted(groups, accepted, z, t)
    weight: Any = np.ones((1, groups.width)) if groups.width else 1.0
    if counted is not None:
        weight = counted.astype(float)
        z, t = np.where(counted, z, 0.0), np.where(counted, t, 0.0)

    def summed(values: Any) -> Floats:
        values = np.asarray(values, dtype=float)
        if groups.width and values.shape == (1, groups.width):
            # The same for every ping.
            return np.broadcast_to(np.add.reduceat(values[0], [0]), groups.counts.shape)
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
    return share[:, None] if groups.width else np.repeat(share, groups.counts)


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
    z = groups.full(np.asarray(height, dtype=float))
    t = np.tan(np.radians(np.asarray(angle_from_vertical, dtype=float)))
    t = t if groups.width else groups.full(t)
    found = np.full(groups.shape, np.nan)
    np.add(z[..., 1:], z[..., :-1], out=found[..., :-1])
    found[..., :-1] *= 0.5
    found[..., :-1] *= np.abs(np.diff(t, axis=-1)) if t.ndim else 0.0
    if not groups.width:
        found[np.cumsum(groups.counts)[groups.counts > 0] - 1] = np.nan
    return found
