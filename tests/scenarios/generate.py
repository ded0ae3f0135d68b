"""Writes simulated lines of all kinds, faulty, clean and odd, with their survey files and the truth.

    python tests/scenarios/generate.py OUT --lines 200 --seed 1

OUT gets a folder a batch (logs and a survey.toml) and truth.json. The lines are drawn at random; a
draw in which some ping is neither clearly in nor clearly out of a limit is drawn again, so that
every verdict is beyond dispute: missed by 1.19 times the limit or more, kept by 0.9 or less.
"""

from __future__ import annotations

import argparse
import json
import math
import sys
from collections.abc import Callable
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any

import numpy as np

HERE = Path(__file__).resolve().parent
sys.path[:0] = [str(HERE), str(HERE.parents[1] / "sample_logs")]

import catalogue_faults  # noqa: E402
from logs import (  # noqa: E402
    Column,
    Dialect,
    read_csv,
    read_parquet,
    read_wide_csv,
    write_csv,
    write_parquet,
    write_wide_csv,
)
from reckon import FIRST_RULES, truth_of  # noqa: E402
from setups import setup_of  # noqa: E402
from simulate import (  # noqa: E402
    Channel,
    Fault,
    Limits,
    Line,
    Seabed,
    Simulated,
    Sonar,
    along_footprint,
    gap,
    gap_seconds,
    long_pulse,
    pocket,
    setting,
    simulate,
    stamps_of_arrival,
    stamps_repeat,
    stamps_step_back,
    too_slow_for_ground,
    too_slow_for_target,
    too_soon_for_range_scale,
    too_soon_for_seabed,
)

CLEAN, FAULTY = 0.9, 1.19
STRENGTHS = (1.2, 1.35, 1.5, 2.0)
C = 1490.0
BATCH = 25
TIMED = ("ping-interval", "echo-in-time", "ping-gap", "pings-on-target", "ping-spacing", "clock")
FOOTPRINTS = ("along-resolution", "across-resolution", "footprint-growth")
GROUND = ("ping-spacing", "pings-on-target")

Random = np.random.Generator


@dataclass
class Draw:
    """One line as drawn: its run and how it is to be written."""

    line: Line
    sonar: Sonar
    limits: Limits
    seabed: Seabed
    faults: list[Fault]
    logged: set[str]
    stated: dict[str, Any]
    depth_from: str = "waterline"
    beams_as: str = "depth"
    decoy: str = ""
    tide: bool = False
    no_speed: bool = False
    rules: tuple[str, ...] = FIRST_RULES
    ping_numbers: bool = True
    extra: list[Fault] = field(default_factory=list)


# --- drawing ----------------------------------------------------------------------------------


def slots(rng: Random, pings: int, count: int) -> list[tuple[int, int]]:
    """Stretches well apart from each other and from the line's ends."""
    room = pings // count
    out = []
    for i in range(count):
        length = int(rng.integers(14, 46))
        first = i * room + 32 + int(rng.integers(0, max(1, room - length - 64)))
        out.append((first, first + length - 1))
    return out


def _speed_up(first: int, last: int, factor: float, rules: tuple[str, ...]) -> Fault:
    fault = setting("speed_factor", factor, rules, first, last, factor)
    return replace(fault, cause="the vessel runs too fast")


def draw_faults(
    rng: Random, count: int, sonar: Sonar, limits: Limits, line: Line, facts: dict[str, float]
) -> tuple[list[Fault], set[str]]:
    """Faults of the first ten rules, and the columns that must be logged for them."""
    logged: set[str] = set()
    faults: list[Fault] = []
    two = sonar.pings_in_water == 2
    for first, last in slots(rng, line.pings, count):
        s = float(rng.choice(STRENGTHS))
        choices: list[str] = ["pulse", "gap", "gap-seconds", "step-back"]
        if not two:
            choices += ["too-soon", "slow-ground", "slow-target", "arrival", "repeat", "speed"]
        if sonar.kind == "side-scan":
            choices += ["range-scale", "beam-along"]
        else:
            choices += ["beam-along", "beam-across", "pocket"]
            if not two:
                choices += ["too-soon-seabed"]
        if sonar.kind == "multibeam":
            choices += ["fan"]
        what = str(rng.choice(choices))
        if what == "pulse":
            if sonar.pulse_form == "FM":
                value = round(C / (2 * s * 1.01 * limits.target_size), 1)
                fault = setting("bandwidth", value, ("range-resolution",), first, last, s)
                logged.add("bandwidth")
            else:
                channel = None
                if len(sonar.channels) > 1 and rng.random() < 0.5:
                    channel = str(rng.choice(sonar.channels))
                fault = long_pulse(first, last, s * 1.005, C, limits.target_size, channel)
                logged.add("pulse_length")
        elif what == "too-soon":
            fault = too_soon_for_range_scale(first, last, min(s, 1.6))
        elif what == "too-soon-seabed":
            fault = too_soon_for_seabed(first, last, min(s, 1.6))
        elif what == "slow-ground":
            fault = too_slow_for_ground(first, last, s)
        elif what == "slow-target":
            fault = too_slow_for_target(first, last, s)
        elif what == "gap":
            fault = gap(first, s)
        elif what == "gap-seconds":
            fault = gap_seconds(first, s)
        elif what == "step-back":
            fault = stamps_step_back(first, first + 2 * ((last - first) // 2), 0.5)
        elif what == "repeat":
            fault = stamps_repeat(first, first + 2 * ((last - first) // 2))
        elif what == "arrival":
            fault = stamps_of_arrival(first, first + 2 * ((last - first) // 2), 0.75)
        elif what == "speed":
            fault = _speed_up(first, last, round(1.7 * s, 2), ("ping-spacing",))
        elif what == "range-scale":
            value = round(s * 1.03 * sonar_reach(sonar) / facts["along"], 0)
            fault = setting("range_scale", value, ("along-resolution",), first, last, s)
            logged.add("range_scale")
        elif what == "beam-along":
            value = round(s * 1.06 * sonar.beamwidth_along / facts["along"], 2)
            fault = setting("beamwidth_along", value, ("along-resolution",), first, last, s)
            logged.add("beamwidth_along")
        elif what == "beam-across":
            value = round(s * 1.06 * sonar.beamwidth_across / facts["across"], 2)
            fault = setting("beamwidth_across", value, ("across-resolution",), first, last, s)
            logged.add("beamwidth_across")
        elif what == "fan":
            value = float(rng.uniform(sonar.half_fan + 8, 66.0))
            fault = setting("half_fan", value, ("across-resolution",), first, last, s)
        else:
            worst = max(facts["along"], facts["across"])
            drop = round((s * 1.06 / worst - 1) * facts["height"], 1)
            fault = pocket(first, last, drop, s, FOOTPRINTS[:1])
        faults.append(fault)
    return faults, logged


def sonar_reach(sonar: Sonar) -> float:
    return sonar.range_scale if sonar.range_scale is not None else math.nan


def draw(rng: Random, number: int, kind: str, clean: bool) -> Draw:
    target = float(rng.choice([0.5, 1.0, 2.0]))
    count = 0 if clean else int(rng.integers(1, 4))
    pings = int(rng.integers(300, 420))
    logged: set[str] = {"speed"}
    stated: dict[str, Any] = {}
    decoy = ""
    depth_from, tide, beams_as = "waterline", False, "depth"
    line = Line(
        f"L{number:03d}_{kind[:2]}",
        pings=pings,
        first_ping=int(rng.choice([0, 1, 77, 5000, 120000])),
        start=f"2023-0{rng.integers(1, 10)}-{rng.integers(10, 28)}T0{rng.integers(0, 10)}:15:00",
        course=float(rng.integers(0, 360)),
        roll=float(rng.uniform(0.5, 2.0)),
        heave=float(rng.uniform(0.02, 0.15)),
        speed_change=float(rng.uniform(0.0, 0.05)),
        seed=int(rng.integers(1, 2**31)),
    )
    margin = float(rng.uniform(1.25, 1.5))
    if kind == "side-scan":
        near = float(rng.choice([10.0, 15.0, 20.0]))
        width = float(rng.choice([0.3, 0.5, 0.9]))
        along = float(rng.uniform(0.4, 0.8))
        scale = round(along * target / float(along_footprint(1.0, width)), 0)
        scale = max(25.0, min(scale, 150.0))
        along = float(along_footprint(scale, width)) / target
        sonar = Sonar(
            kind=kind,
            frequency=float(rng.choice([100e3, 400e3])),
            pulse_length=50e-6,
            beamwidth_along=width,
            range_scale=scale,
            channels=("port", "starboard"),
            altitude=float(rng.uniform(0.1, 0.18)) * scale,
            margin=margin,
        )
        # within the height that suits the range, and below the nearest ground that is wanted
        near = max(near, math.ceil(1.25 * sonar.altitude))
        limits = Limits(target, int(rng.choice([3, 5])), near)
        footprint = float(along_footprint(near, width))
        listening = 2 * scale / C
        facts = {"along": along, "across": 0.1, "height": sonar.altitude}
        logged.add("range_scale")
    else:
        multibeam = kind == "multibeam"
        half_fan = float(rng.uniform(30.0, 52.0)) if multibeam else 0.0
        mount = 0.0
        angle_from = "vertical"
        roll = line.roll
        if multibeam and rng.random() < 0.3:
            angle_from = "array"
            decoy = "array angles and roll"
            roll = float(rng.uniform(3.0, 7.0))
            half_fan = min(half_fan, 42.0)
            if rng.random() < 0.5:
                mount = float(rng.choice([-20.0, -12.0, 15.0, 20.0]))
                half_fan = min(half_fan, 32.0)
                decoy = "a tilted head, array angles and roll"
        line = replace(line, roll=roll)
        outer = half_fan + abs(mount) + (roll if angle_from == "array" else 0.0)
        height = float(rng.uniform(9.0, 34.0))
        if not multibeam:
            height = float(rng.uniform(6.0, 20.0))
        # beam widths that leave room under the target size
        share = float(rng.uniform(0.4, 0.8))
        width_along = math.degrees(
            2 * math.atan(share * target * math.cos(math.radians(outer)) / (2 * height))
        )
        share_across = float(rng.uniform(0.4, 0.75))
        widen = math.cos(math.radians(half_fan + (roll if angle_from == "vertical" else 0.0)))
        width_across = math.degrees(
            share_across * target * math.cos(math.radians(outer)) ** 2 * widen / height
        )
        width_along, width_across = (
            round(min(width_along, 8.0), 2),
            round(min(width_across, 8.0), 2),
        )
        if not multibeam:
            width_across = width_along
        # enough beams to leave no ground between them, and not so many that the logs grow heavy
        width_across = max(width_across, round(2 * half_fan / (0.75 * 220), 2))
        beams = max(24, math.ceil(2 * half_fan / (0.75 * width_across)))
        two = multibeam and rng.random() < 0.2
        form = "FM" if rng.random() < 0.2 else "CW"
        reach = height / math.cos(math.radians(outer)) * 1.1
        scale_factor = rng.choice([math.nan, 1.15, 1.5, 1.8])
        scale = None if math.isnan(scale_factor) else float(round(reach * scale_factor))
        if two and scale is not None:
            scale = float(round(reach * 1.15))
        lowered = multibeam and rng.random() < 0.15
        sonar = Sonar(
            kind=kind,
            beams=beams if multibeam else 1,
            pulse_length=float(rng.choice([40e-6, 100e-6, 200e-6])) if form == "CW" else 2e-3,
            pulse_form=form,
            bandwidth=float(rng.choice([10e3, 30e3])) if form == "FM" else None,
            beamwidth_along=width_along,
            beamwidth_across=width_across,
            half_fan=half_fan,
            mount_angle=mount,
            beam_angle_from=angle_from,
            pings_in_water=2 if two else 1,
            transducer_depth=round(float(rng.uniform(12, 30)), 1) if lowered else 1.1,
            range_scale=scale,
            margin=1.22 if two else margin,
            depth_noise=0.002,
            wild_beams=0.01 if multibeam and rng.random() < 0.3 else 0.0,
        )
        limits = Limits(target, int(rng.choice([3, 4, 5])))
        footprint = float(along_footprint(height, width_along))
        listening = 2 * (scale if scale is not None else reach / 1.1) / C + sonar.pulse_length
        facts = {"along": share, "across": share_across, "height": height}
        if scale is not None:
            logged.add("range_scale")
        if two:
            decoy = "paired swaths"
        elif form == "FM":
            decoy = decoy or "swept pulse"
        elif sonar.wild_beams:
            decoy = decoy or "wild beams, rejected"
        elif lowered:
            decoy = decoy or "lowered head, depths from the waterline"
        if lowered and rng.random() < 0.5:
            logged.add("transducer_depth")
        depth_from = str(rng.choice(["waterline", "waterline", "transducer", "datum"]))
        if depth_from != "waterline":
            decoy = decoy or f"depths from the {depth_from}"
            tide = depth_from == "datum"
            if tide:
                logged |= {"tide", "heave"}
        if multibeam:
            beams_as = str(rng.choice(["depth", "depth", "depth", "slant_range", "two_way_time"]))
            if beams_as != "depth":
                depth_from, tide = "waterline", False
            logged.add("roll")
        if rng.random() < 0.3 and not math.isnan(footprint):
            limits = replace(
                limits, footprint_limit=round(target * 1.1 * float(max(share, 0.5)), 2)
            )
    per_ping = sonar.margin * listening / sonar.pings_in_water
    room = min(footprint / per_ping, (target + footprint) / limits.hits_required / per_ping)
    speed = min(float(rng.uniform(0.35, 0.78)) * room, 4.5)
    line = replace(line, speed=round(max(speed, 0.5), 2))
    faults, need = draw_faults(rng, count, sonar, limits, line, facts) if count else ([], set())
    logged |= need
    seabed = Seabed(
        depth=facts["height"] + sonar.transducer_depth,
        hills=0.03 * facts["height"],
        sandwave_height=0.01 * facts["height"],
        sandwave_length=float(rng.uniform(9.0, 25.0)),
    )
    return Draw(
        line,
        sonar,
        limits,
        seabed,
        faults,
        logged,
        stated,
        depth_from,
        beams_as,
        decoy or "plain",
        tide,
        no_speed=kind != "side-scan" and clean and rng.random() < 0.25,
        ping_numbers=rng.random() < 0.8,
    )


# --- the survey file --------------------------------------------------------------------------


def part_of(rng: Random, drawn: Draw, file: str) -> dict[str, Any]:
    sonar, limits = drawn.sonar, drawn.limits
    stated: dict[str, Any] = {"kind": sonar.kind, "pulse_form": sonar.pulse_form}
    if sonar.kind != "single-beam" or rng.random() < 0.5:
        stated["frequency"] = f"{sonar.frequency / 1e3:g} kHz"
    stated["pulse_length"] = f"{sonar.pulse_length * 1e6:g} us"
    stated["beamwidth_along"] = f"{sonar.beamwidth_along:g} deg"
    if sonar.kind != "side-scan":
        stated["beamwidth_across"] = f"{sonar.beamwidth_across:g} deg"
        stated["transducer_depth"] = f"{sonar.transducer_depth:g} m"
    if sonar.bandwidth is not None:
        stated["bandwidth"] = f"{sonar.bandwidth / 1e3:g} kHz"
    if sonar.kind == "multibeam":
        stated["beam_angle_from"] = sonar.beam_angle_from
        if sonar.mount_angle:
            stated["mount_angle"] = f"{sonar.mount_angle:g} deg"
    if sonar.pings_in_water > 1:
        stated["pings_in_water"] = sonar.pings_in_water
    required: dict[str, Any] = {
        "target_size": f"{limits.target_size:g} m",
        "hits_required": limits.hits_required,
    }
    if sonar.kind == "side-scan":
        required["near_range"] = f"{limits.near_range:g} m"
    if limits.footprint_limit is not None:
        required["footprint_limit"] = f"{limits.footprint_limit:g} m"
    # a setting that nobody logged nor stated: what needs it must read "not assessed"
    if not drawn.faults and not drawn.extra and rng.random() < 0.3:
        gone = str(rng.choice(["pulse_length", "beamwidth_along", "target_size", "near_range"]))
        removed = stated.pop(gone, None) is not None
        removed |= required.pop(gone, None) is not None
        if gone == "beamwidth_along" and sonar.kind == "single-beam":
            # a round transducer's one width would stand for the other
            stated.pop("beamwidth_across", None)
        if removed:
            drawn.logged.discard(gone)
            drawn.decoy += f"; {gone} missing"
    part: dict[str, Any] = {"logs": [file], "sonar": stated, "limits": required}
    if drawn.depth_from != "waterline":
        part["depth_from"] = drawn.depth_from
    return part


def toml_of(survey: dict[str, Any]) -> str:
    def table(name: str, content: dict[str, Any]) -> list[str]:
        plain = {k: v for k, v in content.items() if not isinstance(v, dict)}
        lines = [f"[{name}]"] if name else []
        lines += [f"{k} = {json.dumps(v)}" for k, v in plain.items()]
        return lines

    lines: list[str] = []
    for name, content in survey.items():
        if name == "part":
            continue
        lines += [*table(name, content), ""]
    for part in survey.get("part", []):
        lines += ["[[part]]", *table("", part)]
        for name, content in part.items():
            if isinstance(content, dict) and content:
                lines += table(f"part.{name}", content)
        lines.append("")
    return "\n".join(lines)


# --- the layout of a log ----------------------------------------------------------------------

HEADINGS: dict[str, tuple[tuple[str, str, int], ...]] = {
    "latitude": (("lat", "deg", 7), ("Latitude", "deg", 7), ("Lat (deg)", "deg", 7)),
    "longitude": (("lon", "deg", 7), ("Longitude", "deg", 7), ("Lon (deg)", "deg", 7)),
    "speed": (
        ("speed", "m/s", 3),
        ("SOG [kn]", "kn", 3),
        ("speed_kn", "kn", 3),
        ("Speed (m/s)", "m/s", 3),
    ),
    "depth": (
        ("Depth (m)", "m", 2),
        ("depth", "m", 2),
        ("Depth (ft)", "ft", 2),
        ("depth [dm]", "dm", 2),
        ("depth_m", "m", 3),
    ),
    "slant_range": (("Slant Range (m)", "m", 3), ("slant_range", "m", 3)),
    "two_way_time": (("Two Way Time (ms)", "ms", 4), ("two_way_time_s", "s", 7)),
    "beam_angle": (("Beam Angle (deg)", "deg", 3), ("beam_angle", "deg", 3)),
    "accepted": (("accepted", "", 0), ("Accepted", "", 0)),
    "altitude": (("Altitude (m)", "m", 2), ("altitude_ft", "ft", 2), ("Altitude [m]", "m", 2)),
    "range_scale": (("Range Scale (m)", "m", 1), ("range_scale_m", "m", 1)),
    "pulse_length": (
        ("Pulse Length (us)", "us", 1),
        ("pulse_length_ms", "ms", 4),
        ("pulse length [s]", "s", 7),
    ),
    "bandwidth": (("Bandwidth (kHz)", "kHz", 4), ("bandwidth", "Hz", 1)),
    "frequency": (("Frequency (kHz)", "kHz", 1), ("frequency_hz", "Hz", 0)),
    "beamwidth_along": (("Beamwidth Along (deg)", "deg", 3), ("beamwidth_along", "deg", 3)),
    "beamwidth_across": (("Beamwidth Across (deg)", "deg", 3), ("beamwidth_across", "deg", 3)),
    "transducer_depth": (("Transducer Depth (m)", "m", 2), ("transducer_depth", "m", 2)),
    "roll": (("Roll (deg)", "deg", 2), ("roll", "deg", 2)),
    "pitch": (("Pitch (deg)", "deg", 2), ("pitch", "deg", 2)),
    "heave": (("Heave (m)", "m", 2), ("heave_cm", "cm", 1)),
    "heading": (("Heading", "deg", 2), ("heading_deg", "deg", 2)),
    "course": (("Course (deg)", "deg", 2), ("course", "deg", 2)),
    "tide": (("Tide (m)", "m", 2), ("tide", "m", 2)),
    "easting": (("Easting (m)", "m", 2), ("easting", "m", 2)),
    "northing": (("Northing (m)", "m", 2), ("northing", "m", 2)),
    "temperature": (("Temperature (degC)", "", 2), ("temperature", "", 2)),
    "salinity": (("Salinity", "", 2),),
    "sound_speed": (("Sound Speed (m/s)", "m/s", 2), ("sound_speed", "m/s", 2)),
}
TIMES: tuple[tuple[tuple[str, str, int], ...], ...] = (
    (("time", "iso Z", 0),),
    (("Time", "iso +02:00", 0),),
    (("timestamp", "iso Z", 0),),
    (("Epoch (ms)", "epoch ms", 2),),
    (("time_us", "epoch us", 0),),
    (("Epoch (s)", "epoch s", 4),),
    (("Date", "date", 0), ("Time", "clock", 0)),
)


def columns_of(rng: Random, drawn: Draw, run: Simulated) -> list[str]:
    """The ping columns that the log will carry."""
    names = (
        ["latitude", "longitude"]
        if rng.random() < 0.7 or drawn.no_speed
        else ["easting", "northing"]
    )
    if not drawn.no_speed:
        names.append("speed")
    names += [n for n in sorted(drawn.logged) if n != "speed"]
    if run.sonar.kind == "side-scan":
        names.append("altitude")
    if run.sonar.kind == "single-beam":
        names.append("depth")
    for name in ("heading", "pitch", "heave"):
        if name not in names and rng.random() < 0.5:
            names.append(name)
    return names


def csv_dialect(rng: Random, drawn: Draw, run: Simulated, names: list[str]) -> Dialect:
    separator, decimal = ((",", "."), (";", ","), ("\t", "."), (";", "."))[int(rng.integers(0, 4))]
    head = list(TIMES[int(rng.integers(0, len(TIMES)))])
    columns = [Column(h, "time", unit, digits) for h, unit, digits in head]
    if drawn.ping_numbers:
        columns.append(Column(str(rng.choice(["ping", "Ping No", "ping_number"])), "ping"))
    labels: tuple[tuple[str, str], ...] = ()
    if len(run.channels) > 1:
        columns.append(Column(str(rng.choice(["channel", "Channel"])), "channel"))
        labels = ((("port", "P"), ("starboard", "S")), (("port", "1"), ("starboard", "2")), ())[
            int(rng.integers(0, 3))
        ]
    order = list(names)
    if run.sonar.kind == "multibeam":
        columns.append(Column(str(rng.choice(["beam", "Beam No"])), "beam"))
        both = drawn.beams_as == "both"
        order += [
            "beam_angle",
            *(["depth", "two_way_time"] if both else [drawn.beams_as]),
            "accepted",
        ]
    for name in order:
        options = HEADINGS[name]
        heading, unit, digits = options[int(rng.integers(0, len(options)))]
        columns.append(Column(heading, name, unit, digits))
    return Dialect(tuple(columns), separator, decimal, labels=labels)


def prepare(drawn: Draw, run: Simulated) -> None:
    """Depths as this log counts them, ranges in their place where it logs those."""
    for channel in run.channels:
        ping = channel.ping
        head = ping["transducer_depth"]
        ping["tide"] = np.round(1.2 + 0.3 * np.linspace(-1, 1, head.size), 2)
        shift = np.zeros(head.size)
        if drawn.depth_from == "transducer":
            shift = head
        elif drawn.depth_from == "datum":
            shift = ping["tide"] + ping["heave"]
        if "depth" in ping:
            ping["depth"] = np.round(ping["depth"] - shift, 2)
        if channel.beam is not None:
            beam = dict(channel.beam)
            height = beam["depth"] - head[:, None]
            beam["depth"] = np.round(beam["depth"] - shift[:, None], 2)
            if drawn.beams_as in ("slant_range", "two_way_time"):
                angle = beam["beam_angle"]
                if run.sonar.beam_angle_from == "array":
                    angle = angle - ping["roll"][:, None]
                reach = height / np.cos(np.radians(angle))
                del beam["depth"]
                if drawn.beams_as == "slant_range":
                    beam["slant_range"] = np.round(reach, 3)
                else:
                    beam["two_way_time"] = np.round(2 * reach / C, 7)
            channel.beam = beam


def write(
    rng: Random, drawn: Draw, run: Simulated, folder: Path, name: str
) -> tuple[str, Callable[[Path], list[Channel]], dict[str, str]]:
    """Write the log; its file name, how to read it back, and its channel labels."""
    names = columns_of(rng, drawn, run)
    if run.sonar.kind == "multibeam":
        layout = str(
            rng.choice(["long", "long", "lists", "csv", "wide"], p=[0.3, 0.2, 0.25, 0.15, 0.1])
        )
        if layout == "wide" and (drawn.beams_as != "depth" or not drawn.ping_numbers):
            layout = "long"
        # text of so many beams takes long to write, and shows nothing more
        if layout == "csv" and run.sonar.beams * run.line.pings > 40_000:
            layout = "long"
    else:
        layout = str(rng.choice(["long", "csv", "csv", "csv"]))
    if layout == "csv":
        dialect = csv_dialect(rng, drawn, run, names)
        file = f"{name}.csv"
        write_csv(folder / file, run, dialect)
        return file, lambda path: read_csv(path, dialect), dict(dialect.labels)
    if layout == "wide":
        columns = [Column("time", "time", "iso Z"), Column("ping", "ping")]
        for column in names:
            heading, unit, digits = HEADINGS[column][0]
            columns.append(Column(heading, column, unit, digits))
        file = f"{name}.csv"
        write_wide_csv(folder / file, run, tuple(columns))
        return file, lambda path: read_wide_csv(path, tuple(columns)), {}
    file = f"{name}.parquet"
    ping = ("ping",) if drawn.ping_numbers else ()
    write_parquet(folder / file, run, ("time", *ping, *names), layout=layout)
    return file, read_parquet, {}


# --- the truth --------------------------------------------------------------------------------

MAY: dict[str, tuple[str, ...]] = {
    "ping-spacing": ("pings-on-target",),
    "pings-on-target": ("ping-spacing",),
    "ping-gap": ("ping-spacing",),
    "echo-in-time": ("ping-interval",),
    "ping-interval": ("echo-in-time",),
    "range-resolution": ("across-resolution", "ping-interval"),
    "along-resolution": ("across-resolution", "footprint-growth"),
    "across-resolution": ("along-resolution", "footprint-growth"),
}


def reckoned(
    drawn: Draw, channels: list[Channel], survey: dict[str, Any], log: str, labels: dict[str, str]
) -> tuple[list[dict[str, Any]], list[dict[str, Any]], list[dict[str, Any]], str]:
    """Faults, single misses, rules not assessed, and why this draw will not do ("" if it will)."""
    setup = setup_of(survey, log)
    faults: list[dict[str, Any]] = []
    strays: list[dict[str, Any]] = []
    unassessed: list[dict[str, Any]] = []
    for channel in channels:
        if "ping" not in channel.ping:
            channel.ping["ping"] = np.arange(channel.ping["time"].size)
        found, left, ratio = truth_of(channel, setup)
        label = labels.get(channel.name, channel.name) or None
        mine = [f for f in drawn.faults if f.channel in (None, channel.name)]
        for fault in mine:
            rule = fault.rules[0]
            if rule not in [s.rule for s in found if abs(s.first - fault.first) <= 1]:
                return [], [], [], f"{rule} of {fault.cause} came to nothing"
        for section in found:
            cause = next(
                (
                    f
                    for f in mine
                    if abs(f.first - section.first) <= 1
                    and abs(f.last - section.last) <= 1
                    and section.rule in (*f.rules, *(m for r in f.rules for m in MAY.get(r, ())))
                ),
                None,
            )
            if cause is None:
                return [], [], [], f"{section} was not planted"
            inside = ratio[section.rule][section.first : section.last + 1]
            faults.append(
                {
                    "channel": label,
                    "rule": section.rule,
                    "first_ping": int(channel.ping["ping"][section.first]),
                    "last_ping": int(channel.ping["ping"][section.last]),
                    "first_index": section.first,
                    "last_index": section.last,
                    "strength": round(float(inside[inside > 1].min()), 2),
                    "cause": cause.cause,
                }
            )
        stops = [f.first for f in mine if "ping-gap" in f.rules]
        for rule in FIRST_RULES:
            values = ratio[rule]
            if np.all(np.isnan(values)):
                unassessed.append({"channel": label, "rule": rule})
                continue
            grey = (values > CLEAN) & (values < FAULTY)
            grey[stops] &= rule not in GROUND
            if grey.any():
                return [], [], [], f"{rule} is neither kept nor missed"
            stray = left.get(rule, [])
            if any(i not in stops for i in stray):
                return [], [], [], f"{rule} has a stray miss"
            if stray:
                strays.append({"channel": label, "rule": rule, "indices": stray})
        # unseen ground near the target size would leave the single ping of a stop in dispute
        unseen = ratio["unseen"][stops] / setup.target_size
        if np.any((unseen > 0.8) & (unseen < 1.25)):
            return [], [], [], "a stop leaves about a target's size unseen"
    return faults, strays, unassessed, ""


def generate(out: Path, lines: int, seed: int, extras: bool = True) -> dict[str, Any]:
    truth: dict[str, Any] = {"rules": list(FIRST_RULES), "lines": []}
    survey: dict[str, Any] = {}
    refused: dict[str, int] = {}
    folder = out
    for number in range(lines):
        if number % BATCH == 0:
            folder = out / f"batch_{number // BATCH + 1:02d}"
            folder.mkdir(parents=True, exist_ok=True)
            survey = {
                "survey": {"name": f"Made-up lines, {folder.name}", "sheet": "physics"},
                "water": {"sound_speed": f"{C:g} m/s"},
                "part": [],
            }
        attempt = 0
        # settled before the redraws, which would otherwise favour what is easily drawn
        outer = np.random.default_rng([seed, number])
        kind = str(outer.choice(["multibeam", "side-scan", "single-beam"], p=[0.5, 0.25, 0.25]))
        clean = bool(outer.random() < 0.35)
        while True:
            rng = np.random.default_rng([seed, number, attempt])
            attempt += 1
            if attempt > 400:
                raise RuntimeError(f"line {number}: no draw is clear; {refused}")
            drawn = draw(rng, number, kind, clean)
            if extras and rng.random() < 0.4:
                catalogue_faults.add(rng, drawn)
            run = simulate(
                drawn.line,
                drawn.sonar,
                drawn.limits,
                drawn.seabed,
                drawn.faults + drawn.extra,
                sound_speed=C,
            )
            prepare(drawn, run)
            file, read, labels = write(rng, drawn, run, folder, drawn.line.name)
            part = part_of(rng, drawn, file)
            trial = {**survey, "part": [part]}
            channels = read(folder / file)
            faults, strays, unassessed, why = reckoned(drawn, channels, trial, file, labels)
            if not why:
                break
            refused[why.split(" ", 1)[0]] = refused.get(why.split(" ", 1)[0], 0) + 1
            (folder / file).unlink()
        survey["part"].append(part)
        for fault in drawn.extra:
            for channel in channels:
                if fault.channel in (None, channel.name):
                    for rule in fault.rules:
                        faults.append(
                            {
                                "channel": labels.get(channel.name, channel.name) or None,
                                "rule": rule,
                                "first_ping": int(channel.ping["ping"][fault.first]),
                                "last_ping": int(channel.ping["ping"][fault.last]),
                                "first_index": fault.first,
                                "last_index": fault.last,
                                "strength": fault.strength,
                                "cause": fault.cause,
                            }
                        )
                        if rule not in truth["rules"]:
                            truth["rules"].append(rule)
        truth["lines"].append(
            {
                "batch": folder.name,
                "file": file,
                "line": drawn.line.name,
                "kind": drawn.sonar.kind,
                "decoy": drawn.decoy,
                "pings": int(channels[0].ping["time"].size),
                "faults": faults,
                "single_misses": strays,
                "not_assessed": unassessed,
            }
        )
        (folder / "survey.toml").write_text(toml_of(survey), encoding="utf-8", newline="\n")
    (out / "truth.json").write_text(
        json.dumps(truth, indent=1) + "\n", encoding="utf-8", newline="\n"
    )
    return {"refused": refused, "truth": truth}


def main() -> int:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0] if __doc__ else None)
    parser.add_argument("out", type=Path)
    parser.add_argument("--lines", type=int, default=200)
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--first-rules-only", action="store_true")
    chosen = parser.parse_args()
    made = generate(chosen.out, chosen.lines, chosen.seed, not chosen.first_rules_only)
    counts: dict[str, int] = {}
    for line in made["truth"]["lines"]:
        for fault in line["faults"]:
            counts[fault["rule"]] = counts.get(fault["rule"], 0) + 1
    clean = sum(not line["faults"] for line in made["truth"]["lines"])
    print(f"{chosen.lines} lines, {clean} of them clean; drawn again because: {made['refused']}")
    for rule, count in sorted(counts.items()):
        print(f"{count:5d}  {rule}")
    return 0


if __name__ == "__main__":
    sys.exit(main())
