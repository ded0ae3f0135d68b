"""Made-up ping logs whose faults are known.

What belongs here: the seabed, the vessel's run, the sonar's geometry, the ping schedule, and faults
that can be planted at chosen pings. It needs numpy only and knows nothing of the program that will
read the logs, so that it can check that program.

Everything inside is SI, angles in degrees, depth positive down, starboard positive, roll positive
starboard down. Formulas: IHO C-13, 1st edition, chapter 3 (3.33, 3.35, 3.37), chapter 4 (4.1, 4.2)
and chapter 5 (§5.1.1.3).
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

Array = NDArray[Any]

# --- the seabed -------------------------------------------------------------------------------


@dataclass(frozen=True)
class Seabed:
    """Smooth hills, a channel and sandwaves: depth below the waterline as a function of position."""

    depth: float = 20.0
    hills: float = 0.8
    channel_depth: float = 0.0
    channel_east: float = 0.0
    channel_width: float = 120.0
    sandwave_height: float = 0.25
    sandwave_length: float = 14.0

    def __call__(self, east: Array, north: Array) -> Array:
        hills = self.hills * (
            0.6 * np.sin(east / 41.0 + 0.3) * np.cos(north / 57.0)
            + 0.4 * np.sin((east + 2.0 * north) / 83.0 + 1.1)
        )
        channel = self.channel_depth * np.exp(
            -(((east - self.channel_east) / self.channel_width) ** 2)
        )
        waves = (
            0.5
            * self.sandwave_height
            * np.sin(2 * np.pi * (0.8 * east + 0.6 * north) / self.sandwave_length)
        )
        return self.depth + hills + channel + waves


# --- what is set and what is required ---------------------------------------------------------


@dataclass(frozen=True)
class Sonar:
    """One sonar and how it is run."""

    kind: str = "multibeam"
    frequency: float = 300e3
    pulse_length: float = 60e-6
    pulse_form: str = "CW"
    bandwidth: float | None = None
    beamwidth_along: float = 1.0
    beamwidth_across: float = 0.5
    half_fan: float = 45.0
    beams: int = 128
    mount_angle: float = 0.0
    beam_angle_from: str = "vertical"
    pings_in_water: int = 1
    transducer_depth: float = 1.2
    range_scale: float | None = None
    channels: tuple[str, ...] = ("",)
    altitude: float = 7.5
    margin: float = 1.3  # ping span over listening time
    jitter: float = 0.01  # of the interval, cut off at 1.5 times this
    depth_noise: float = 0.002  # of the height over the seabed
    wild_beams: float = 0.0  # share of beams, all of them marked rejected


@dataclass(frozen=True)
class Limits:
    target_size: float = 1.0
    hits_required: int = 3
    near_range: float = math.nan
    footprint_limit: float | None = None


@dataclass(frozen=True)
class Line:
    """A run along one line."""

    name: str
    pings: int = 400
    first_ping: int = 0
    start: str = "2024-05-14T08:00:00"
    latitude: float = 47.312
    longitude: float = -9.104
    east: float = 0.0
    north: float = 0.0
    course: float = 20.0
    speed: float = 2.5
    speed_change: float = 0.04
    roll: float = 1.5
    pitch: float = 0.8
    heave: float = 0.10
    seed: int = 1


# --- faults -----------------------------------------------------------------------------------


@dataclass
class Plan:
    """The settings and the pace of every ping, before the run; faults change it."""

    line: Line
    sonar: Sonar
    limits: Limits
    sound_speed: float
    setting: dict[str, Array]
    channel_setting: dict[str, dict[str, Array]]
    pace_basis: list[str]
    pace: Array


@dataclass
class Channel:
    """One channel of a simulated (or read) line: ping columns, and beam columns or None."""

    name: str
    ping: dict[str, Array]
    beam: dict[str, Array] | None = None


@dataclass(frozen=True)
class Fault:
    """Something wrong from ``first`` to ``last`` (0-based positions), ``strength`` times the limit.

    ``rules`` are those that this cause breaks; where each is broken, the reckoning says.
    """

    cause: str
    rules: tuple[str, ...]
    first: int
    last: int
    strength: float
    channel: str | None = None
    before: Callable[[Plan, Fault], None] | None = None
    stamps: Callable[[Array, Fault], Array] | None = None
    after: Callable[[Channel, Fault, np.random.Generator], None] | None = None


def _pace(basis: str) -> Callable[[Plan, Fault], None]:
    def before(plan: Plan, fault: Fault) -> None:
        for i in range(fault.first, fault.last + 1):
            plan.pace_basis[i] = basis
            plan.pace[i] = fault.strength

    return before


def too_soon_for_range_scale(first: int, last: int, strength: float) -> Fault:
    """Pings before the range scale has been listened to; the seabed itself is still heard."""
    return Fault(
        "pings sooner than the range scale allows",
        ("ping-interval",),
        first,
        last,
        strength,
        before=_pace("listening"),
    )


def too_soon_for_seabed(first: int, last: int, strength: float) -> Fault:
    """Pings before the seabed's echo is back. At least 10 of them, or they look like late stamps."""
    return Fault(
        "pings sooner than the seabed's echo",
        ("ping-interval", "echo-in-time"),
        first,
        last,
        strength,
        before=_pace("bottom"),
    )


def too_slow_for_ground(
    first: int, last: int, strength: float, also: tuple[str, ...] = ()
) -> Fault:
    """The ping rate is turned down until the ground under the sonar has gaps."""
    return Fault(
        "ping rate turned down: ground unseen between pings",
        ("ping-spacing", *also),
        first,
        last,
        strength,
        before=_pace("spacing"),
    )


def too_slow_for_target(
    first: int, last: int, strength: float, also: tuple[str, ...] = ()
) -> Fault:
    """The ping rate is turned down until a target gets too few pings."""
    return Fault(
        "ping rate turned down: too few pings on a target",
        ("pings-on-target", *also),
        first,
        last,
        strength,
        before=_pace("hits"),
    )


def gap(at: int, strength: float, also: tuple[str, ...] = ()) -> Fault:
    """One interval ``strength`` times longer than three typical ones."""
    return Fault(
        "the log stops for a while",
        ("ping-gap", *also),
        at,
        at,
        strength,
        before=_pace("gap"),
    )


def gap_seconds(at: int, strength: float, also: tuple[str, ...] = ("ping-spacing",)) -> Fault:
    """One interval ``strength`` times longer than 5 s."""
    return Fault(
        "the log stops for seconds",
        ("ping-gap", *also),
        at,
        at,
        strength,
        before=_pace("seconds"),
    )


def _set(name: str, value: float) -> Callable[[Plan, Fault], None]:
    def before(plan: Plan, fault: Fault) -> None:
        where = slice(fault.first, fault.last + 1)
        if fault.channel is None:
            plan.setting[name][where] = value
        if fault.channel is None and plan.channel_setting:
            for settings in plan.channel_setting.values():
                settings[name][where] = value
        if fault.channel is not None:
            plan.channel_setting[fault.channel][name][where] = value

    return before


def setting(
    name: str,
    value: float,
    rules: tuple[str, ...],
    first: int,
    last: int,
    strength: float,
    channel: str | None = None,
) -> Fault:
    """A setting is changed for a while: pulse_length, beamwidth_along, half_fan, range_scale …"""
    return Fault(
        f"{name} set to {value:g}",
        rules,
        first,
        last,
        strength,
        channel,
        before=_set(name, value),
    )


def long_pulse(
    first: int,
    last: int,
    strength: float,
    sound_speed: float = 1490.0,
    target: float = 1.0,
    channel: str | None = None,
    also: tuple[str, ...] = (),
) -> Fault:
    """A pulse too long to part two targets; the schedule makes room for it."""
    pulse = round(strength * 2.0 * target / sound_speed, 6)
    rules = ("range-resolution", *also)
    return setting("pulse_length", pulse, rules, first, last, strength, channel)


def pocket(first: int, last: int, drop: float, strength: float, rules: tuple[str, ...]) -> Fault:
    """A dredged pocket with upright sides, square across the line."""
    fault = setting("drop", drop, rules, first, last, strength)
    return replace(fault, cause=f"a dredged pocket {drop:g} m deeper")


def stamps_step_back(first: int, last: int, step: float = 1.0) -> Fault:
    """The clock is set back at every second ping from first to last."""

    def stamps(times: Array, fault: Fault) -> Array:
        shift = np.zeros(times.size, dtype=np.int64)
        for i in range(fault.first, fault.last + 1, 2):
            shift[i + 1 :] -= np.int64(step * 1e9)
        return times + shift

    return Fault("the clock steps back", ("clock",), first, last, 2.0, stamps=stamps)


def stamps_repeat(first: int, last: int) -> Fault:
    """Every second ping from first to last has the stamp of the one before."""

    def stamps(times: Array, fault: Fault) -> Array:
        out = times.copy()
        for i in range(fault.first, fault.last + 1, 2):
            out[i + 1] = out[i]
        return out

    return Fault("stamps repeat", ("clock",), first, last, 2.0, stamps=stamps)


def stamps_of_arrival(first: int, last: int, late: float = 0.7) -> Fault:
    """Stamps given when the data arrived: every second one is late by a share of its interval."""

    def stamps(times: Array, fault: Fault) -> Array:
        out = times.copy()
        for i in range(fault.first, fault.last + 1, 2):
            out[i] += np.int64(late * (times[i + 1] - times[i]))
        return out

    return Fault("stamps of arrival", ("clock",), first, last, 2.0, stamps=stamps)


# --- the run ----------------------------------------------------------------------------------


@dataclass
class Simulated:
    line: Line
    sonar: Sonar
    limits: Limits
    sound_speed: float
    channels: list[Channel]
    faults: list[Fault] = field(default_factory=list)


def along_footprint(slant_range: Array | float, beamwidth: Array | float) -> Array:
    """C-13 (3.37)."""
    return np.asarray(2.0 * np.asarray(slant_range) * np.tan(np.radians(beamwidth) / 2.0))


def _wave(rng: np.random.Generator, amplitude: float, period: float) -> Callable[[float], float]:
    phases = rng.uniform(0, 2 * np.pi, 3)

    def value(seconds: float) -> float:
        return amplitude * (
            0.7 * math.sin(2 * np.pi * seconds / period + phases[0])
            + 0.2 * math.sin(2 * np.pi * seconds / (0.62 * period) + phases[1])
            + 0.1 * math.sin(2 * np.pi * seconds / (2.9 * period) + phases[2])
        )

    return value


def simulate(
    line: Line,
    sonar: Sonar,
    limits: Limits,
    seabed: Callable[[Array, Array], Array],
    faults: list[Fault] | None = None,
    sound_speed: float = 1490.0,
) -> Simulated:
    """Run the line and return what the logger would have written, faults included."""
    faults = faults or []
    n = line.pings
    rng = np.random.default_rng(line.seed)
    setting_start: dict[str, float] = {
        "pulse_length": sonar.pulse_length,
        "beamwidth_along": sonar.beamwidth_along,
        "beamwidth_across": sonar.beamwidth_across,
        "half_fan": sonar.half_fan,
        "range_scale": sonar.range_scale if sonar.range_scale is not None else math.nan,
        "bandwidth": sonar.bandwidth if sonar.bandwidth is not None else math.nan,
        "frequency": sonar.frequency,
        "transducer_depth": sonar.transducer_depth,
        "drop": 0.0,
        "speed_factor": 1.0,
    }
    plan = Plan(
        line,
        sonar,
        limits,
        sound_speed,
        {name: np.full(n, value) for name, value in setting_start.items()},
        {
            channel: {name: np.full(n, value) for name, value in setting_start.items()}
            for channel in (sonar.channels if len(sonar.channels) > 1 else ())
        },
        ["normal"] * n,
        np.ones(n),
    )
    for fault in faults:
        if fault.before is not None:
            fault.before(plan, fault)

    roll_at = _wave(rng, line.roll, 6.3)
    pitch_at = _wave(rng, line.pitch, 5.1)
    heave_at = _wave(rng, line.heave, 6.9)
    yaw_at = _wave(rng, 1.0, 17.0)
    speed_at = _wave(rng, line.speed_change, 45.0)
    altitude_at = _wave(rng, 0.05, 60.0)
    course = math.radians(line.course)

    names = ("roll", "pitch", "heave", "heading", "speed", "east", "north", "altitude", "depth")
    out = {name: np.full(n, math.nan) for name in names}
    multibeam = sonar.kind == "multibeam"
    shape = (n, sonar.beams if multibeam else 1)
    beam_angle, depth = np.zeros(shape), np.zeros(shape)
    accepted = np.ones(shape, dtype=bool)
    times = np.zeros(n, dtype=np.int64)
    start = int(np.datetime64(line.start, "ns").astype(np.int64))

    seconds, distance = 0.0, 0.0
    intervals: list[float] = []
    k = sonar.pings_in_water
    for i in range(n):
        times[i] = start + round(seconds * 1e6) * 1000
        east = line.east + distance * math.sin(course)
        north = line.north + distance * math.cos(course)
        speed = line.speed * (1 + speed_at(seconds)) * plan.setting["speed_factor"][i]
        roll, heave = roll_at(seconds), heave_at(seconds)
        head_depth = plan.setting["transducer_depth"][i]
        pulse = max(
            [plan.setting["pulse_length"][i]]
            + [s["pulse_length"][i] for s in plan.channel_setting.values()]
        )
        scale = np.fmax.reduce(
            [plan.setting["range_scale"][i]]
            + [s["range_scale"][i] for s in plan.channel_setting.values()]
        )
        width_along = plan.setting["beamwidth_along"][i]

        if sonar.kind == "side-scan":
            altitude = sonar.altitude * (1 + altitude_at(seconds))
            altitude += 0.01 * rng.standard_normal() + plan.setting["drop"][i]
            greatest = altitude
            nadir_footprint = float(along_footprint(limits.near_range, width_along))
            narrowest = nadir_footprint
            out["altitude"][i] = altitude
        else:
            if multibeam:
                own = np.linspace(-1.0, 1.0, sonar.beams) * plan.setting["half_fan"][i]
                from_array = own + sonar.mount_angle
                if sonar.beam_angle_from == "array":
                    angle = from_array - roll
                    beam_angle[i] = from_array
                else:
                    # steered to stay level: the angles from the vertical do not move with roll
                    angle = from_array
                    beam_angle[i] = from_array
            else:
                angle = np.zeros(1)
            slope = np.tan(np.radians(angle))
            height = np.full(angle.size, 15.0)
            for _ in range(8):
                side = height * slope
                height = (
                    seabed(east + side * math.cos(course), north - side * math.sin(course))
                    + plan.setting["drop"][i]
                    + heave
                    - head_depth
                )
            noise = sonar.depth_noise * height * np.clip(rng.standard_normal(angle.size), -2.5, 2.5)
            depth[i] = np.round(height + noise + head_depth, 2)
            if sonar.wild_beams:
                wild = rng.random(angle.size) < sonar.wild_beams
                wild[angle.size // 2] = False
                accepted[i] = ~wild
                depth[i, wild] = np.round(depth[i, wild] * rng.uniform(0.3, 6.0, wild.sum()), 2)
            good = accepted[i]
            ranges = (depth[i] - head_depth) / np.cos(np.radians(angle))
            greatest = float(ranges[good].max())
            footprints = along_footprint(ranges, width_along)
            nearest = int(np.argmin(np.where(good, np.abs(angle), np.inf)))
            nadir_footprint = float(footprints[nearest])
            narrowest = float(footprints[good].min())

        for name, value in zip(
            names[:7],
            (roll, pitch_at(seconds), heave, 0.0, speed, east, north),
            strict=True,
        ):
            out[name][i] = value
        out["heading"][i] = (line.course + yaw_at(seconds)) % 360.0

        farthest = scale if not math.isnan(scale) else greatest
        listening = 2 * farthest / sound_speed + pulse
        basis, strength = plan.pace_basis[i], plan.pace[i]
        beyond = strength * 1.02
        if basis == "normal":
            interval = sonar.margin * listening / k
            if k == 2:
                interval *= 0.5 if i % 2 == 0 else 1.5
        elif basis == "listening":
            interval = listening / beyond
        elif basis == "bottom":
            interval = 2 * greatest / sound_speed / beyond
        elif basis == "spacing":
            interval = beyond * nadir_footprint / speed
        elif basis == "hits":
            interval = beyond * (limits.target_size + narrowest) / limits.hits_required / speed
        elif basis == "gap":
            interval = 3 * beyond * float(np.median(intervals[-50:]))
        elif basis == "seconds":
            interval = 5.0 * beyond
        else:
            raise ValueError(f"pace basis {basis!r} is not known")
        interval *= 1 + sonar.jitter * float(np.clip(rng.standard_normal(), -1.5, 1.5))
        intervals.append(interval)
        seconds += interval
        distance += speed * interval

    for fault in faults:
        if fault.stamps is not None:
            times = fault.stamps(times, fault)

    metres_north = 111132.954 - 559.822 * math.cos(2 * math.radians(line.latitude))
    metres_east = 111319.491 * math.cos(math.radians(line.latitude))
    ping: dict[str, Array] = {
        "time": times,
        "ping": line.first_ping + np.arange(n, dtype=np.int64),
        "latitude": np.round(line.latitude + out["north"] / metres_north, 7),
        "longitude": np.round(line.longitude + out["east"] / metres_east, 7),
        "easting": np.round(500000.0 + out["east"], 2),
        "northing": np.round(5240000.0 + out["north"], 2),
        "speed": np.round(out["speed"], 3),
        "course": np.full(n, line.course),
        "heading": np.round(out["heading"], 2),
        "roll": np.round(out["roll"], 2),
        "pitch": np.round(out["pitch"], 2),
        "heave": np.round(out["heave"], 2),
        "altitude": np.round(out["altitude"], 2),
    }
    if sonar.kind == "single-beam":
        ping["depth"] = depth[:, 0]
    columns = (
        "pulse_length",
        "beamwidth_along",
        "beamwidth_across",
        "range_scale",
        "bandwidth",
        "frequency",
        "transducer_depth",
    )
    channels = []
    for name in sonar.channels:
        settings = plan.channel_setting.get(name, plan.setting)
        channel = Channel(name, {key: value.copy() for key, value in ping.items()})
        for column in columns:
            channel.ping[column] = settings[column].copy()
        if multibeam:
            channel.beam = {"beam_angle": beam_angle, "depth": depth, "accepted": accepted}
        channels.append(channel)
    for fault in faults:
        if fault.after is not None:
            for channel in channels:
                if fault.channel in (None, channel.name):
                    fault.after(channel, fault, rng)
    return Simulated(line, sonar, limits, sound_speed, channels, faults)
