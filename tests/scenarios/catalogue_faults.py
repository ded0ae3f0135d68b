"""Faults of the rules beyond the first ten, planted in what was logged.

What belongs here: one function a fault. Each is planted far enough beyond any sensible limit that
there is no dispute, and changes nothing that the first ten rules depend on, or the draw is drawn again.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from simulate import Channel, Fault, setting

Random = np.random.Generator
After = Callable[[Channel, Fault, Random], None]


@dataclass(frozen=True)
class Kind:
    """One fault: the rules it breaks, the sonars that can have it, the columns that must be logged."""

    cause: str
    rules: tuple[str, ...]
    sonars: tuple[str, ...]
    after: After | None = None
    columns: tuple[str, ...] = ()
    seconds: float = 0.0  # the least time that it must last
    prepare: Callable[[Random, Any, int, int], Fault] | None = None


ALL = ("multibeam", "single-beam", "side-scan")


def _where(fault: Fault) -> slice:
    return slice(fault.first, fault.last + 1)


def altitude_lost(channel: Channel, fault: Fault, rng: Random) -> None:
    channel.ping["altitude"][_where(fault)] = 0.0


def altitude_frozen(channel: Channel, fault: Fault, rng: Random) -> None:
    channel.ping["altitude"][_where(fault)] = channel.ping["altitude"][fault.first]


def depth_frozen(channel: Channel, fault: Fault, rng: Random) -> None:
    channel.ping["depth"][_where(fault)] = channel.ping["depth"][fault.first]


def depth_spikes(channel: Channel, fault: Fault, rng: Random) -> None:
    """Every third ping is 40 % too shallow: shallow, so that no footprint grows."""
    if channel.beam is None:
        channel.ping["depth"][fault.first : fault.last + 1 : 3] *= 0.6
        return
    beam = {name: values.copy() for name, values in channel.beam.items()}
    count = beam["depth"].shape[1]
    for i in range(fault.first, fault.last + 1):
        at = int(rng.integers(count // 2 + 3, count - 3))
        beam["depth"][i, at] = round(0.6 * float(beam["depth"][i, at]), 2)
        beam["accepted"][i, at] = True
    channel.beam = beam


def beams_lost(channel: Channel, fault: Fault, rng: Random) -> None:
    assert channel.beam is not None
    beam = {name: values.copy() for name, values in channel.beam.items()}
    count = beam["depth"].shape[1]
    beam["accepted"][_where(fault), : int(0.65 * count)] = False
    # the beam under the sonar stays, so that the footprint there is still known
    beam["accepted"][_where(fault), count // 2 - 1 : count // 2 + 1] = True
    channel.beam = beam


def numbers_missing(channel: Channel, fault: Fault, rng: Random) -> None:
    """A ping number is left out after each ping from first to last."""
    jump = np.zeros(channel.ping["ping"].size, dtype=np.int64)
    jump[fault.first + 1 : fault.last + 2] = 1
    channel.ping["ping"] = channel.ping["ping"] + np.cumsum(jump)


def fixes_frozen(channel: Channel, fault: Fault, rng: Random) -> None:
    for name in ("latitude", "longitude", "easting", "northing"):
        channel.ping[name][_where(fault)] = channel.ping[name][fault.first]


def fixes_jump(channel: Channel, fault: Fault, rng: Random) -> None:
    """Every second fix from first to last stands 300 m off."""
    at = slice(fault.first, fault.last + 1, 2)
    channel.ping["latitude"][at] = np.round(channel.ping["latitude"][at] + 0.0027, 7)
    channel.ping["northing"][at] += 300.0


def motion_frozen(channel: Channel, fault: Fault, rng: Random) -> None:
    """A value of its own, so that the pings before the fault cannot happen to share it."""
    for name, step in (("roll", 0.37), ("pitch", 0.37), ("heave", 0.07)):
        stuck = round(float(channel.ping[name][fault.first]) + step, 2)
        channel.ping[name][_where(fault)] = stuck


def too_much_roll(channel: Channel, fault: Fault, rng: Random) -> None:
    phase = np.arange(fault.last - fault.first + 1) % 2
    channel.ping["roll"][_where(fault)] = np.where(phase == 0, 24.0, -24.0)


def echoes_twice(channel: Channel, fault: Fault, rng: Random) -> None:
    """Every third depth is the second echo: twice as far under the transducer."""
    at = slice(fault.first, fault.last + 1, 3)
    ping = channel.ping
    ping["depth"][at] = 2 * ping["depth"][at] - ping["transducer_depth"][at]


def sound_speed_off(channel: Channel, fault: Fault, rng: Random) -> None:
    """Logged sound speed leaves what temperature and salinity say by 20 m/s."""
    n = channel.ping["time"].size
    # Mackenzie 1981 gives 1489.8 m/s at 10 degC and 35
    channel.ping["temperature"] = np.full(n, 10.0)
    channel.ping["salinity"] = np.full(n, 35.0)
    channel.ping["sound_speed"] = np.full(n, 1490.0)
    channel.ping["sound_speed"][_where(fault)] = 1510.0


def refracted(channel: Channel, fault: Fault, rng: Random) -> None:
    """A wrong sound speed profile: outer beams turn up as the square of the tangent."""
    assert channel.beam is not None
    beam = {name: values.copy() for name, values in channel.beam.items()}
    rows = _where(fault)
    tangent = np.tan(np.radians(beam["beam_angle"][rows]))
    height = beam["depth"][rows] - channel.ping["transducer_depth"][rows][:, None]
    beam["depth"][rows] = np.round(beam["depth"][rows] - 0.10 * height * tangent**2, 2)
    channel.beam = beam


def roll_left_in(channel: Channel, fault: Fault, rng: Random) -> None:
    """The swath tilts with roll: motion was applied in part only."""
    assert channel.beam is not None
    beam = {name: values.copy() for name, values in channel.beam.items()}
    rows = _where(fault)
    tangent = np.tan(np.radians(beam["beam_angle"][rows]))
    height = beam["depth"][rows] - channel.ping["transducer_depth"][rows][:, None]
    tilt = np.tan(np.radians(0.6 * channel.ping["roll"][rows]))[:, None]
    beam["depth"][rows] = np.round(beam["depth"][rows] + height * tangent * tilt, 2)
    channel.beam = beam


def turns_fast(channel: Channel, fault: Fault, rng: Random) -> None:
    """Heading goes round by 8 degrees from each ping to the next, and stays there."""
    turned = np.zeros(channel.ping["heading"].size)
    turned[fault.first + 1 : fault.last + 2] = 8.0
    channel.ping["heading"] = np.round((channel.ping["heading"] + np.cumsum(turned)) % 360.0, 2)


def _time_against_depth(rng: Random, drawn: Any, first: int, last: int) -> Fault:
    """Depths are 8 % too small for the two-way times logged beside them."""

    def after(channel: Channel, fault: Fault, rng: Random) -> None:
        assert channel.beam is not None
        beam = {name: values.copy() for name, values in channel.beam.items()}
        angle = beam["beam_angle"]
        if drawn.sonar.beam_angle_from == "array":
            angle = angle - channel.ping["roll"][:, None]
        height = beam["depth"] - channel.ping["transducer_depth"][:, None]
        beam["two_way_time"] = np.round(2 * height / np.cos(np.radians(angle)) / 1490.0, 7)
        rows = _where(fault)
        beam["depth"][rows] = np.round(beam["depth"][rows] - 0.08 * height[rows], 2)
        channel.beam = beam

    return Fault("times and depths disagree", ("time-depth",), first, last, 2.0, after=after)


def _range_window(rng: Random, drawn: Any, first: int, last: int) -> Fault:
    height = drawn.seabed.depth - drawn.sonar.transducer_depth
    reach = height / math.cos(
        math.radians(drawn.sonar.half_fan if drawn.sonar.kind == "multibeam" else 0)
    )
    value = round(reach / 1.25, 0)
    return setting("range_scale", value, ("range-window",), first, last, 1.25)


def _altitude_high(rng: Random, drawn: Any, first: int, last: int) -> Fault:
    drop = round(0.27 * drawn.sonar.range_scale - drawn.sonar.altitude, 1)
    return replace(
        setting("drop", drop, ("altitude",), first, last, 1.3),
        cause="the fish flies too high for its range",
    )


def _altitude_low(rng: Random, drawn: Any, first: int, last: int) -> Fault:
    drop = round(0.055 * drawn.sonar.range_scale - drawn.sonar.altitude, 1)
    return replace(
        setting("drop", drop, ("altitude",), first, last, 1.3),
        cause="the fish flies too low for its range",
    )


def _short_pulse(rng: Random, drawn: Any, first: int, last: int) -> Fault:
    value = round(0.25 / drawn.sonar.frequency, 9)
    return setting("pulse_length", value, ("pulse-cycles",), first, last, 2.0)


KINDS: tuple[Kind, ...] = (
    Kind("altitude lost", ("bottom-track",), ("side-scan",), altitude_lost),
    Kind("altitude frozen", ("bottom-track",), ("side-scan",), altitude_frozen, seconds=12.0),
    Kind("the fish too high", ("altitude",), ("side-scan",), prepare=_altitude_high),
    Kind("the fish too low", ("altitude",), ("side-scan",), prepare=_altitude_low),
    Kind("depth frozen", ("depth-stuck",), ("single-beam",), depth_frozen, seconds=18.0),
    Kind("depth spikes", ("depth-spike",), ("multibeam", "single-beam"), depth_spikes),
    Kind("most beams lost", ("beam-loss",), ("multibeam",), beams_lost),
    Kind("ping numbers left out", ("ping-number",), ALL, numbers_missing, ("ping",)),
    Kind("fixes frozen", ("position-frozen",), ALL, fixes_frozen, ("latitude",), 14.0),
    Kind("fixes jump", ("position-jump",), ALL, fixes_jump, ("latitude",)),
    Kind(
        "motion frozen",
        ("motion-frozen",),
        ("multibeam",),
        motion_frozen,
        ("roll", "pitch", "heave"),
        14.0,
    ),
    Kind("too much roll", ("motion",), ("single-beam",), too_much_roll, ("roll",)),
    Kind(
        "range scale too short",
        ("range-window",),
        ("multibeam", "single-beam"),
        columns=("range_scale",),
        prepare=_range_window,
    ),
    Kind("second echoes", ("multiple-echo",), ("single-beam",), echoes_twice),
    Kind(
        "sound speed and water disagree",
        ("sound-speed",),
        ALL,
        sound_speed_off,
        ("temperature", "salinity", "sound_speed"),
    ),
    Kind("refraction", ("swath-curl",), ("multibeam",), refracted, seconds=4.0),
    Kind("roll left in", ("swath-wobble",), ("multibeam",), roll_left_in, ("roll",), 40.0),
    Kind("the vessel turns fast", ("yaw-gap",), ("multibeam",), turns_fast, ("heading",)),
    Kind("times and depths disagree", ("time-depth",), ("multibeam",), prepare=_time_against_depth),
    Kind(
        "pulse too short",
        ("pulse-cycles",),
        ALL,
        columns=("pulse_length", "frequency"),
        prepare=_short_pulse,
    ),
)


def add(rng: Random, drawn: Any, allowed: set[str] | None = None) -> None:
    """One fault beyond the first ten, on a stretch added to the line's end."""
    fitting = [
        kind
        for kind in KINDS
        if drawn.sonar.kind in kind.sonars and (allowed is None or set(kind.rules) <= allowed)
    ]
    if not fitting or drawn.sonar.pings_in_water == 2:
        return
    kind = fitting[int(rng.integers(0, len(fitting)))]
    reach = drawn.seabed.depth - drawn.sonar.transducer_depth
    scale = drawn.sonar.range_scale or 1.3 * reach
    per_ping = drawn.sonar.margin * 2 * scale / 1490.0
    length = max(int(rng.integers(20, 50)), math.ceil(kind.seconds / per_ping))
    if length > 700:
        return
    first = drawn.line.pings + 20
    last = first + length - 1
    last -= (last - first) % 6  # so that every second and every third end on it
    drawn.line = replace(drawn.line, pings=last + 61)
    if kind.prepare is not None:
        fault = kind.prepare(rng, drawn, first, last)
    else:
        fault = Fault(kind.cause, kind.rules, first, last, 2.0, after=kind.after)
    drawn.extra.append(fault)
    drawn.logged |= set(kind.columns) - {"ping", "latitude"}
    if "ping" in kind.columns:
        drawn.ping_numbers = True
    if kind.rules[0] in ("depth-spike", "swath-curl", "swath-wobble"):
        drawn.beams_as = "depth"
    if kind.rules[0] == "depth-stuck" and drawn.depth_from == "datum":
        # a depth that is stuck is not reduced by a tide that moves on
        drawn.depth_from, drawn.tide = "waterline", False
    if kind.rules[0] == "time-depth":
        drawn.beams_as = "both"
