"""Makes the sample survey, the same bytes each time, and checks it.

    python make.py            write the logs and truth.json beside this file
    python make.py --check    read the logs back, reckon every requirement again, compare with the truth

With ``--out FOLDER`` the logs and the truth go to (or are read from) another folder.
"""

from __future__ import annotations

import argparse
import json
import sys
from collections.abc import Callable
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np
from logs import Column, Dialect, read_csv, read_parquet, write_csv, write_parquet
from reckon import FIRST_RULES, truth_of
from setups import setup_for
from simulate import (
    Channel,
    Fault,
    Limits,
    Line,
    Seabed,
    Simulated,
    Sonar,
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

HERE = Path(__file__).resolve().parent
CLEAN, FAULTY = 0.9, 1.19

# --- the lines --------------------------------------------------------------------------------


@dataclass(frozen=True)
class Planned:
    """A line of the survey: how it was run, where it is written and how."""

    line: Line
    sonar: Sonar
    limits: Limits
    seabed: Seabed
    file: str
    dialect: Dialect | None = None
    ping_columns: tuple[str, ...] = ()
    faults: tuple[Fault, ...] = ()
    note: str = "clean"


# as many beams as leave no ground between them
MULTIBEAM = Sonar(beams=256)
MB_LIMITS = Limits()
SIDE_SCAN = Sonar(
    kind="side-scan",
    frequency=400e3,
    pulse_length=50e-6,
    beamwidth_along=0.9,
    range_scale=50.0,
    channels=("port", "starboard"),
    altitude=7.4,
)
SS_LIMITS = Limits(hits_required=5, near_range=15.0)
SINGLE_BEAM = Sonar(
    kind="single-beam",
    frequency=200e3,
    pulse_length=100e-6,
    beamwidth_along=3.0,
    beamwidth_across=3.0,
    transducer_depth=0.6,
    range_scale=50.0,
)
SB_LIMITS = Limits(hits_required=5)
MB_COLUMNS = (
    "time",
    "ping",
    "latitude",
    "longitude",
    "speed",
    "heading",
    "roll",
    "pitch",
    "heave",
    "range_scale",
)


def multibeam_lines() -> list[Planned]:
    lines: list[Planned] = []

    def add(
        name: str,
        sonar: Sonar,
        depth: float,
        faults: tuple[Fault, ...] = (),
        note: str = "clean",
        extra: tuple[str, ...] = (),
        limits: Limits = MB_LIMITS,
        seabed: dict[str, float] | None = None,
        **line: Any,
    ) -> None:
        number = len(lines)
        lines.append(
            Planned(
                Line(
                    name,
                    **{"pings": 600, **line},
                    start=f"2024-05-14T{8 + number // 2:02d}:{10 + 30 * (number % 2)}:00",
                    east=40.0 * number,
                    north=25.0 * number,
                    course=20.0 if number % 2 == 0 else 200.0,
                    seed=100 + number,
                ),
                sonar,
                limits,
                Seabed(depth=depth, **(seabed or {})),
                f"multibeam/{name}.parquet",
                ping_columns=MB_COLUMNS + extra,
                faults=faults,
                note=note,
            )
        )

    relief = {"hills": 2.0, "channel_depth": 2.5, "channel_east": 60.0, "channel_width": 40.0}
    add("VH101_approach", replace(MULTIBEAM, range_scale=50.0), 22.0, speed=2.6, seabed=relief)
    add(
        "VH102_approach",
        replace(MULTIBEAM, range_scale=45.0),
        17.0,
        (too_soon_for_range_scale(120, 171, 1.3), stamps_step_back(290, 304, 0.5)),
        "pings too soon for the range scale; a clock set back",
        first_ping=1,
    )
    add(
        "VH103_approach",
        MULTIBEAM,
        24.0,
        (too_soon_for_seabed(90, 135, 1.25), gap(220, 1.4), gap_seconds(310, 1.3)),
        "pings sooner than the seabed's echo; two stops of the log",
        first_ping=4100,
        seabed={"hills": 1.6, "channel_depth": 1.5, "channel_east": 100.0},
    )
    add(
        "VH104_fairway",
        replace(MULTIBEAM, range_scale=32.0),
        15.5,
        (
            too_slow_for_ground(100, 139, 1.35),
            long_pulse(240, 275, 1.3),
        ),
        "slow pinging over shallow ground; a pulse left long",
        ("pulse_length",),
        speed=2.3,
        seabed={"hills": 0.4},
    )
    add(
        "VH105_basin",
        replace(MULTIBEAM, range_scale=60.0),
        29.5,
        (too_slow_for_target(150, 199, 1.3, also=("ping-spacing",)),),
        "pinging too slow for three pings on a target",
        speed=2.9,
        first_ping=20000,
    )
    add(
        "VH106_basin",
        replace(MULTIBEAM, range_scale=50.0, half_fan=50.0),
        19.5,
        (
            setting("beamwidth_along", 2.5, ("along-resolution",), 60, 109, 1.25),
            setting("half_fan", 62.0, ("across-resolution",), 200, 251, 1.6),
        ),
        "the transmit beam is widened; the fan is opened too far",
        ("beamwidth_along",),
        speed=2.4,
        seabed={"hills": 0.3, "sandwave_height": 0.15},
    )
    add(
        "VH107_inner",
        replace(MULTIBEAM, range_scale=34.0),
        18.2,
        (
            setting("beamwidth_along", 1.95, ("footprint-growth",), 80, 131, 1.2),
            setting(
                "beamwidth_along", 3.2, ("footprint-growth", "along-resolution"), 240, 281, 1.4
            ),
        ),
        "the transmit beam is widened twice, against a tighter limit of its own",
        ("beamwidth_along",),
        limits=Limits(footprint_limit=0.45),
        speed=2.0,
        seabed={"hills": 0.2, "sandwave_height": 0.1},
    )
    add(
        "VH108_inner",
        replace(MULTIBEAM, range_scale=40.0),
        20.5,
        (stamps_of_arrival(90, 120), stamps_repeat(230, 246)),
        "stamps of arrival, then stamps that repeat",
        speed=1.6,
        first_ping=512,
        seabed={"hills": 0.4},
    )
    add(
        "VH109_pairs",
        replace(MULTIBEAM, range_scale=50.0, pings_in_water=2, margin=1.22),
        24.0,
        note="clean: pings leave in pairs, two in the water",
        speed=2.8,
    )
    add(
        "VH110_swept",
        replace(MULTIBEAM, range_scale=50.0, pulse_length=3e-3, pulse_form="FM", bandwidth=20e3),
        25.0,
        note="clean: a long swept pulse",
        speed=2.3,
        seabed={"hills": 1.8, "sandwave_height": 0.5},
    )
    add(
        "VH111_deep",
        replace(MULTIBEAM, range_scale=40.0, transducer_depth=24.0, wild_beams=0.006),
        43.0,
        note="clean: the head is lowered to 24 m, depths are from the waterline; wild beams, rejected",
        extra=("transducer_depth",),
        speed=2.2,
        first_ping=900,
        seabed={"hills": 1.5, "channel_depth": 1.0, "channel_east": 420.0},
    )
    add(
        "VH112_swell",
        replace(MULTIBEAM, range_scale=45.0, beam_angle_from="array", half_fan=44.0),
        19.0,
        note="clean: strong roll, beam angles of the array",
        speed=2.4,
        roll=6.0,
        pitch=2.0,
        heave=0.4,
    )
    return lines


def side_scan_lines() -> list[Planned]:
    plain = Dialect(
        (
            Column("time", "time", "iso Z"),
            Column("channel", "channel"),
            Column("ping", "ping"),
            Column("latitude", "latitude", "deg", 7),
            Column("longitude", "longitude", "deg", 7),
            Column("altitude", "altitude", "m", 2),
            Column("range_scale", "range_scale", "m", 0),
            Column("pulse_length", "pulse_length", "s", 6),
            Column("speed", "speed", "m/s", 3),
            Column("heading", "heading", "deg", 1),
        )
    )
    trade = Dialect(
        (
            Column("Ping No", "ping"),
            Column("Channel", "channel"),
            Column("Epoch (ms)", "time", "epoch ms", 0),
            Column("Lat", "latitude", "deg", 7),
            Column("Lon", "longitude", "deg", 7),
            Column("SOG [kn]", "speed", "kn", 3),
            Column("Range Scale (m)", "range_scale", "m", 0),
            Column("Pulse Length (us)", "pulse_length", "us", 0),
            Column("Altitude (m)", "altitude", "m", 2),
            Column("Frequency (kHz)", "frequency", "kHz", 0),
        ),
        labels=(("port", "P"), ("starboard", "S")),
    )
    sided = Dialect(
        (
            Column("Date", "time", "date"),
            Column("Time", "time", "clock"),
            Column("Side", "channel"),
            Column("Ping Number", "ping"),
            Column("Latitude", "latitude", "deg", 7),
            Column("Longitude", "longitude", "deg", 7),
            Column("Altitude [ft]", "altitude", "ft", 2),
            Column("Speed (kn)", "speed", "kn", 3),
            Column("Range Scale [m]", "range_scale", "m", 0),
            Column("Pulse Length [ms]", "pulse_length", "ms", 4),
        ),
        separator=";",
        decimal=",",
        labels=(("port", "1"), ("starboard", "2")),
    )
    tabbed = Dialect(
        (
            Column("ping", "ping"),
            Column("time", "time", "iso +02:00"),
            Column("channel", "channel"),
            Column("easting_m", "easting", "m", 2),
            Column("northing_m", "northing", "m", 2),
            Column("speed_kn", "speed", "kn", 3),
            Column("altitude_m", "altitude", "m", 2),
            Column("range_scale_m", "range_scale", "m", 0),
            Column("pulse_length_us", "pulse_length", "us", 0),
        ),
        separator="\t",
    )

    def planned(
        number: int,
        dialect: Dialect,
        faults: tuple[Fault, ...] = (),
        note: str = "clean",
        **line: Any,
    ) -> Planned:
        name = f"FW{number:02d}"
        return Planned(
            Line(
                name,
                start=f"2024-05-15T{7 + number:02d}:20:00",
                latitude=47.318,
                east=60.0 * number,
                course=95.0 if number % 2 else 275.0,
                seed=200 + number,
                pings=500,
                **line,
            ),
            SIDE_SCAN,
            SS_LIMITS,
            Seabed(),
            f"side_scan/{name}.csv",
            dialect,
            faults=faults,
            note=note,
        )

    return [
        planned(1, plain, speed=1.8),
        planned(
            2,
            trade,
            (
                setting("range_scale", 82.0, ("along-resolution",), 100, 149, 1.25),
                long_pulse(300, 339, 1.35, channel="port", also=("across-resolution",)),
            ),
            "the range scale is set too far; the port pulse is left long",
            speed=1.25,
            first_ping=7000,
        ),
        planned(
            3,
            sided,
            (too_soon_for_range_scale(80, 139, 1.3), gap(260, 1.5), stamps_step_back(380, 392)),
            "pings too soon for the range scale; a stop of the log; a clock set back",
            speed=1.6,
            first_ping=1,
        ),
        planned(
            4,
            tabbed,
            (
                too_slow_for_target(120, 179, 1.3, also=("ping-spacing",)),
                gap_seconds(330, 1.4),
            ),
            "pinging too slow for five pings on a target; a stop of the log",
            speed=1.9,
            first_ping=33,
        ),
    ]


def single_beam_lines() -> list[Planned]:
    european = Dialect(
        (
            Column("Date", "time", "date"),
            Column("Time", "time", "clock"),
            Column("Ping No", "ping"),
            Column("Latitude", "latitude", "deg", 7),
            Column("Longitude", "longitude", "deg", 7),
            Column("Depth (ft)", "depth", "ft", 2),
            Column("SOG [kn]", "speed", "kn", 3),
            Column("Range Scale (m)", "range_scale", "m", 1),
        ),
        separator=";",
        decimal=",",
    )
    epoch = Dialect(
        (
            Column("Epoch (ms)", "time", "epoch ms", 0),
            Column("Ping No", "ping"),
            Column("lat", "latitude", "deg", 7),
            Column("lon", "longitude", "deg", 7),
            Column("depth [dm]", "depth", "dm", 1),
            Column("pulse_length_us", "pulse_length", "us", 0),
            Column("range_scale_m", "range_scale", "m", 0),
        )
    )
    offset = Dialect(
        (
            Column("time", "time", "iso +01:00"),
            Column("latitude", "latitude", "deg", 7),
            Column("longitude", "longitude", "deg", 7),
            Column("depth_m", "depth", "m", 2),
            Column("pulse_length_ms", "pulse_length", "ms", 3),
            Column("range_scale_m", "range_scale", "m", 0),
            Column("speed_kn", "speed", "kn", 3),
        ),
        separator="\t",
    )

    def planned(
        number: int, dialect: Dialect, faults: tuple[Fault, ...], note: str, **line: Any
    ) -> Planned:
        name = f"CK{number:02d}"
        return Planned(
            Line(
                name,
                start=f"2024-05-16T{9 + number:02d}:05:00",
                latitude=47.321,
                east=-80.0 * number,
                course=340.0,
                seed=300 + number,
                **line,
            ),
            SINGLE_BEAM,
            SB_LIMITS,
            Seabed(depth=15.0, hills=0.3, sandwave_height=0.15),
            f"single_beam/{name}.csv",
            dialect,
            faults=faults,
            note=note,
        )

    growth = ("along-resolution", "across-resolution", "footprint-growth")
    return [
        planned(
            1,
            european,
            (pocket(210, 269, 11.0, 1.3, growth),),
            "a dredged pocket, too deep for this beam",
            pings=500,
            speed=2.3,
            first_ping=1,
        ),
        planned(
            2,
            epoch,
            (too_slow_for_target(150, 209, 1.35), gap(420, 1.6)),
            "pinging too slow for five pings on a target; a stop of the log; no speed is logged",
            pings=700,
            speed=2.4,
            speed_change=0.02,
            first_ping=60001,
        ),
        planned(
            3,
            offset,
            (long_pulse(100, 159, 1.3), too_soon_for_range_scale(300, 349, 1.3)),
            "a pulse left long; pings too soon for the range scale",
            pings=500,
            speed=2.1,
        ),
        planned(4, european, (), "clean", pings=450, speed=2.2, first_ping=10),
    ]


# --- writing, checking ------------------------------------------------------------------------


def read_back(planned: Planned, folder: Path) -> list[Channel]:
    path = folder / planned.file
    if planned.dialect is not None:
        return read_csv(path, planned.dialect)
    return read_parquet(path)


def reckoned(
    planned: Planned, channels: list[Channel]
) -> tuple[list[dict[str, Any]], list[dict[str, Any]], list[str]]:
    """The truth of one line from what was written, and what is wrong with it."""
    setup = setup_for(HERE / "survey.toml", planned.file)
    labels = dict(planned.dialect.labels) if planned.dialect else {}
    faults: list[dict[str, Any]] = []
    strays: list[dict[str, Any]] = []
    wrong: list[str] = []
    for channel in channels:
        found, left, ratio = truth_of(channel, setup)
        label = labels.get(channel.name, channel.name)
        unexplained = set(range(len(found)))
        for fault in planned.faults:
            if fault.channel not in (None, channel.name):
                continue
            for rule in fault.rules:
                # the reckoned stretch must be the planted one, give or take nothing
                hits = [
                    j
                    for j, s in enumerate(found)
                    if s.rule == rule
                    and abs(s.first - fault.first) <= 1
                    and abs(s.last - fault.last) <= 1
                ]
                if len(hits) != 1:
                    wrong.append(f"{planned.file} {label}: {rule} of {fault.cause!r} is not there")
                    continue
                section = found[hits[0]]
                unexplained.discard(hits[0])
                inside = ratio[rule][section.first : section.last + 1]
                missed = inside[inside > 1]
                if missed.min() < FAULTY:
                    wrong.append(
                        f"{planned.file} {label}: {rule} misses by {missed.min():.3f} only"
                    )
                faults.append(
                    {
                        "file": planned.file,
                        "line": planned.line.name,
                        "channel": label or None,
                        "rule": rule,
                        "first_ping": int(channel.ping["ping"][section.first]),
                        "last_ping": int(channel.ping["ping"][section.last]),
                        "first_index": section.first,
                        "last_index": section.last,
                        "strength": round(float(missed.min()), 2),
                        "cause": fault.cause,
                    }
                )
        for j in sorted(unexplained):
            wrong.append(f"{planned.file} {label}: {found[j]} was not planted")
        for rule in FIRST_RULES:
            values = ratio[rule]
            grey = (values > CLEAN) & (values < FAULTY)
            stray = left.get(rule, [])
            if rule in ("pings-on-target", "ping-spacing"):
                for fault in planned.faults:  # the one ping of a gap
                    if "ping-gap" in fault.rules:
                        grey[fault.first] = False
            if grey.any():
                at = np.flatnonzero(grey)
                wrong.append(
                    f"{planned.file} {label}: {rule} is neither kept nor missed at {at[:8]} ({values[at][:3]})"
                )
            for i in stray:
                if not any(f.first == i and "ping-gap" in f.rules for f in planned.faults):
                    wrong.append(f"{planned.file} {label}: {rule} has a stray miss at {i}")
            if stray:
                strays.append(
                    {
                        "file": planned.file,
                        "line": planned.line.name,
                        "channel": label or None,
                        "rule": rule,
                        "indices": stray,
                    }
                )
    return faults, strays, wrong


def all_lines() -> list[Planned]:
    return multibeam_lines() + side_scan_lines() + single_beam_lines()


def write_line(planned: Planned, folder: Path) -> Simulated:
    run = simulate(
        planned.line, planned.sonar, planned.limits, planned.seabed, list(planned.faults)
    )
    path = folder / planned.file
    if planned.dialect is not None:
        write_csv(path, run, planned.dialect)
    else:
        write_parquet(path, run, planned.ping_columns)
    return run


def truth(folder: Path, say: Callable[[str], None] = print) -> tuple[dict[str, Any], list[str]]:
    faults: list[dict[str, Any]] = []
    strays: list[dict[str, Any]] = []
    wrong: list[str] = []
    lines: list[dict[str, Any]] = []
    for planned in all_lines():
        channels = read_back(planned, folder)
        found, left, problems = reckoned(planned, channels)
        faults += found
        strays += left
        wrong += problems
        lines.append(
            {
                "file": planned.file,
                "line": planned.line.name,
                "kind": planned.sonar.kind,
                "pings": int(channels[0].ping["time"].size),
                "note": planned.note,
            }
        )
    missing = set(FIRST_RULES) - {fault["rule"] for fault in faults}
    wrong += [f"no fault of {rule}" for rule in sorted(missing)]
    return {
        "rules": list(FIRST_RULES),
        "about": (
            "Every stretch that misses one of the rules above; positions are 0-based in the line and "
            "channel; strength is value over limit at the ping that misses by least. single_misses are "
            "pings that miss a rule beside a stop of the log, too few to make a stretch."
        ),
        "lines": lines,
        "faults": faults,
        "single_misses": strays,
    }, wrong


def main() -> int:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0] if __doc__ else None)
    parser.add_argument("--check", action="store_true", help="check the logs and the truth")
    parser.add_argument("--out", type=Path, default=HERE, help="folder of the logs")
    chosen = parser.parse_args()
    if not chosen.check:
        for planned in all_lines():
            write_line(planned, chosen.out)
    known, wrong = truth(chosen.out)
    target = chosen.out / "truth.json"
    text = json.dumps(known, indent=1, ensure_ascii=False) + "\n"
    if chosen.check:
        if target.read_text(encoding="utf-8") != text:
            wrong.append("truth.json is not what the logs say")
    else:
        target.write_text(text, encoding="utf-8", newline="\n")
    for problem in wrong:
        print(problem)
    size = sum(f.stat().st_size for f in chosen.out.rglob("*") if f.suffix in (".csv", ".parquet"))
    print(
        f"{len(known['lines'])} lines, {len(known['faults'])} faults, {size / 1e6:.1f} MB", end="; "
    )
    print("all as planted" if not wrong else f"{len(wrong)} things are wrong")
    return 1 if wrong else 0


if __name__ == "__main__":
    sys.exit(main())
