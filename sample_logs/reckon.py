"""The requirements reckoned a second time, from their definitions, with plain numpy.

What belongs here: for one channel of a line, how far each ping is from each limit, and which
stretches miss it. Written apart from the program that reads the logs, so that the two can disagree.

A ratio is value over limit: above 1 the ping misses the rule; NaN, it is not assessed.
"""

from __future__ import annotations

import itertools
import math
from dataclasses import dataclass
from typing import Any

import numpy as np
from simulate import Array, Channel, along_footprint

FIRST_RULES = (
    "ping-interval",
    "echo-in-time",
    "clock",
    "ping-gap",
    "range-resolution",
    "across-resolution",
    "along-resolution",
    "footprint-growth",
    "pings-on-target",
    "ping-spacing",
)


@dataclass(frozen=True)
class Setup:
    """What the survey file states for a log."""

    kind: str
    sound_speed: float
    target_size: float
    hits_required: float
    near_range: float = math.nan
    footprint_limit: float | None = None
    stated: dict[str, float] | None = None
    pulse_form: str = "CW"
    beam_angle_from: str = "vertical"
    mount_angle: float = 0.0
    pings_in_water: int = 1
    depth_from: str = "waterline"


@dataclass(frozen=True)
class Section:
    rule: str
    first: int
    last: int
    worst: float


def _column(channel: Channel, setup: Setup, name: str) -> Array:
    values = channel.ping.get(name)
    if values is not None and not np.all(np.isnan(values)):
        return values.astype(float)
    stated = (setup.stated or {}).get(name, math.nan)
    return np.full(channel.ping["time"].size, stated)


def _speed_from_fixes(channel: Channel) -> Array:
    """Speed between fixes at least 10 s apart, held in between. [m/s]"""
    time = channel.ping["time"] / 1e9
    if "latitude" not in channel.ping:
        return np.full(time.size, math.nan)
    latitude, longitude = channel.ping["latitude"], channel.ping["longitude"]
    # the radii of curvature of WGS 84, close enough over a line's length
    north = np.radians(latitude) * 6367000.0
    east = np.radians(longitude) * 6387000.0 * np.cos(np.radians(latitude.mean()))
    marks = [0]
    for i in range(1, time.size):
        if time[i] - time[marks[-1]] >= 10:
            marks.append(i)
    if len(marks) == 1:
        return np.full(time.size, math.nan)
    marks[-1] = time.size - 1
    out = np.zeros(time.size)
    for a, b in itertools.pairwise(marks):
        out[a : b + 1] = math.hypot(north[b] - north[a], east[b] - east[a]) / (time[b] - time[a])
    return out


def ratios(channel: Channel, setup: Setup) -> dict[str, Array]:
    """Value over limit of each rule at each ping, and `unseen`, the unseen ground. [1, m]"""
    ping = channel.ping
    n, k, c = ping["time"].size, setup.pings_in_water, setup.sound_speed
    seconds = (ping["time"] - ping["time"][0]) / 1e9
    interval = np.full(n, math.nan)
    interval[:-1] = np.diff(seconds)
    span = np.full(n, math.nan)
    span[:-k] = seconds[k:] - seconds[:-k]

    pulse = _column(channel, setup, "pulse_length")
    along = _column(channel, setup, "beamwidth_along")
    across = _column(channel, setup, "beamwidth_across")
    scale = _column(channel, setup, "range_scale")
    if setup.pulse_form == "FM":
        resolution = c / (2 * _column(channel, setup, "bandwidth"))
    else:
        resolution = c * pulse / 2

    if setup.kind == "side-scan":
        height = ping["altitude"].astype(float)
        bottom = 2 * height / c
        farthest = scale
        near = np.full(n, setup.near_range)
        ranges = np.stack([near, farthest], axis=1)
        footprint_along = along_footprint(ranges, along[:, None])
        with np.errstate(invalid="ignore"):
            footprint_across = np.sqrt(
                (ranges + resolution[:, None]) ** 2 - height[:, None] ** 2
            ) - np.sqrt(ranges**2 - height[:, None] ** 2)
        worst_along, worst_across = footprint_along.max(axis=1), footprint_across.max(axis=1)
        under = footprint_along[:, 0]
        narrowest = under
        growth = np.full(n, math.nan)
    else:
        head = _column(channel, setup, "transducer_depth")
        head = np.where(np.isnan(head), 0.0, head)
        if channel.beam is not None:
            beams = channel.beam
            angle_logged = beams["beam_angle"].astype(float)
            good = beams.get("accepted", np.ones(angle_logged.shape)).astype(bool)
            depth = beams.get("depth", np.full(angle_logged.shape, math.nan)).astype(float)
        else:
            depth, good = ping["depth"].astype(float)[:, None], np.ones((n, 1), dtype=bool)
            angle_logged = np.zeros((n, 1))
        roll = _column(channel, setup, "roll")
        roll = np.where(np.isnan(roll), 0.0, roll)[:, None]
        if channel.beam is None:
            angle, from_array = angle_logged, angle_logged
        elif setup.beam_angle_from == "array":
            angle, from_array = angle_logged - roll, angle_logged
        else:
            angle, from_array = angle_logged, angle_logged + roll
        height = depth if setup.depth_from == "transducer" else depth - head[:, None]
        if setup.depth_from == "datum":
            height = height + (ping["tide"] + ping["heave"])[:, None]
        reach = height / np.cos(np.radians(angle))
        if channel.beam is not None and "slant_range" in channel.beam:
            reach = channel.beam["slant_range"].astype(float)
        if channel.beam is not None and "two_way_time" in channel.beam:
            reach = channel.beam["two_way_time"].astype(float) * c / 2
        height = np.where(np.isnan(height), reach * np.cos(np.radians(angle)), height)
        greatest = np.where(good, reach, -np.inf).max(axis=1)
        bottom = 2 * greatest / c
        farthest = np.where(np.isnan(scale), greatest, scale)
        width = across[:, None] / np.cos(np.radians(from_array - setup.mount_angle))
        footprint_along = along_footprint(reach, along[:, None])
        footprint_across = height * (
            np.tan(np.radians(angle + width / 2)) - np.tan(np.radians(angle - width / 2))
        )
        worst_along = np.where(good, footprint_along, -np.inf).max(axis=1)
        worst_across = np.where(good, footprint_across, -np.inf).max(axis=1)
        narrowest = np.where(good, footprint_along, np.inf).min(axis=1)
        nearest = np.argmin(np.where(good, np.abs(angle), np.inf), axis=1)
        rows = np.arange(n)
        under = footprint_along[rows, nearest]
        growth = np.maximum(under, footprint_across[rows, nearest])

    listening = 2 * farthest / c + pulse
    speed = ping.get("speed")
    if speed is None or np.all(np.isnan(speed)):
        speed = _speed_from_fixes(channel)
    spacing = speed * span / k

    # stamps of arrival: sooner than the echo, yet no 10 intervals around it are so on average
    sums = np.concatenate([[0.0], np.cumsum(interval[:-1])])
    arrival = np.zeros(n, dtype=bool)
    for i in np.flatnonzero(interval < bottom):
        starts = range(max(0, i - 9), min(i, n - 1 - 10) + 1)
        means = [(sums[s + 10] - sums[s]) / 10 for s in starts]
        arrival[i] = interval[i] > 0 and not any(mean < bottom[i] for mean in means)
    bad_stamp = arrival | (interval <= 0)
    clock = np.where(np.isnan(interval), math.nan, np.where(bad_stamp, 2.0, 0.0))

    typical = np.full(n, math.nan)
    share = span / k
    for i in range(n):
        window = share[max(0, i - 25) : i + 26]
        window = np.sort(window[~np.isnan(window)])
        if window.size:
            lowest = window[: max(1, int(0.9 * window.size))]
            typical[i] = max(np.median(window), lowest.mean())

    def timed(values: Array) -> Array:
        return np.where(bad_stamp, math.nan, values)

    limit = setup.footprint_limit if setup.footprint_limit is not None else setup.target_size
    return {
        "ping-interval": timed(listening / np.where(bad_stamp, 1.0, span)),
        "echo-in-time": timed(bottom / np.where(bad_stamp, 1.0, span)),
        "clock": clock,
        "ping-gap": timed(np.maximum(interval / (3 * typical), interval / 5.0)),
        "range-resolution": resolution / setup.target_size,
        "across-resolution": worst_across / setup.target_size,
        "along-resolution": worst_along / setup.target_size,
        "footprint-growth": growth / limit,
        "pings-on-target": timed(setup.hits_required * spacing / (setup.target_size + narrowest)),
        "ping-spacing": timed(spacing / under),
        "unseen": timed(spacing - under),
    }


def sections(
    rule: str, ratio: Array, unseen: Array, target_size: float
) -> tuple[list[Section], list[int]]:
    """Stretches of misses, and the positions of misses that made none."""
    runs: list[list[int]] = []
    quiet = 3
    for i, value in enumerate(ratio):
        if math.isnan(value):
            quiet = 3
        elif value > 1:
            if runs and quiet <= 2:
                runs[-1].append(i)
            else:
                runs.append([i])
            quiet = 0
        else:
            quiet += 1
    kept, strays = [], []
    for run in runs:
        first, last = run[0], run[-1]
        keep = 1 if rule == "ping-gap" else 3
        if rule == "ping-spacing" and max(unseen[i] for i in run) > target_size:
            keep = 1
        if last - first + 1 >= keep:
            kept.append(Section(rule, first, last, float(np.nanmax(ratio[first : last + 1]))))
        else:
            strays.extend(run)
    return kept, strays


def truth_of(
    channel: Channel, setup: Setup, rules: tuple[str, ...] = FIRST_RULES
) -> tuple[list[Section], dict[str, list[int]], dict[str, Any]]:
    """Sections, stray misses by rule, and the ratios themselves."""
    all_ratios = ratios(channel, setup)
    found: list[Section] = []
    strays: dict[str, list[int]] = {}
    for rule in rules:
        if rule not in all_ratios:
            continue
        kept, left = sections(rule, all_ratios[rule], all_ratios["unseen"], setup.target_size)
        found.extend(kept)
        if left:
            strays[rule] = left
    return found, strays, all_ratios
