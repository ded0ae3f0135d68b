"""The canonical columns: name, grain, unit and the values that are possible at all."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

from qa.model.units import CELSIUS, DECIBEL, DEGREE, HERTZ, METRE, ONE, SECOND, Unit

Grain = Literal["survey", "line", "ping", "beam"]
Kind = Literal["number", "time", "text", "form", "flag"]

GRAINS: tuple[Grain, ...] = ("survey", "line", "ping", "beam")
"""From coarse to fine."""

SONAR_KINDS = ("multibeam", "single-beam", "side-scan")
PULSE_FORMS = ("CW", "FM")
"""A pulse form is carried as its position in this tuple; NaN where it is not known."""


@dataclass(frozen=True, slots=True)
class Column:
    """One canonical column.

    ``least`` and ``greatest`` bound what is possible: a row outside them is rejected.
    """

    name: str
    grain: Grain
    unit: Unit
    about: str
    kind: Kind = "number"
    least: float = -float("inf")
    greatest: float = float("inf")


def _table(*columns: Column) -> dict[str, Column]:
    return {column.name: column for column in columns}


COLUMNS: dict[str, Column] = _table(
    Column("time", "ping", SECOND, "time of transmission", "time"),
    Column("line", "ping", ONE, "survey line", "text"),
    Column("channel", "ping", ONE, "transmitting head, side or frequency", "text"),
    Column("ping", "ping", ONE, "ping number as logged"),
    Column("frequency", "ping", HERTZ, "centre frequency", least=1.0, greatest=1e8),
    Column("bandwidth", "ping", HERTZ, "swept bandwidth of an FM pulse", least=0.0, greatest=1e8),
    Column(
        "pulse_length", "ping", SECOND, "length of the transmitted pulse", least=0.0, greatest=60.0
    ),
    Column("pulse_form", "ping", ONE, "CW or FM", "form"),
    Column("source_level", "ping", DECIBEL, "source level re 1 µPa at 1 m"),
    Column("gain", "ping", DECIBEL, "receiver gain"),
    Column("range_scale", "ping", METRE, "range scale, slant, one side", least=0.0, greatest=2e4),
    Column("ping_rate", "ping", HERTZ, "ping rate as set or logged", least=0.0, greatest=1e4),
    Column(
        "beamwidth_along", "ping", DEGREE, "transmit beam width at -3 dB", least=0.0, greatest=180.0
    ),
    Column(
        "beamwidth_across",
        "ping",
        DEGREE,
        "receive beam width at -3 dB, at broadside",
        least=0.0,
        greatest=180.0,
    ),
    Column(
        "sound_speed",
        "ping",
        METRE / SECOND,
        "speed of sound at the transducer",
        least=1000.0,
        greatest=2000.0,
    ),
    Column("temperature", "ping", CELSIUS, "water temperature", least=-5.0, greatest=60.0),
    Column("salinity", "ping", ONE, "salinity, practical scale", least=0.0, greatest=350.0),
    Column(
        "transducer_depth",
        "ping",
        METRE,
        "transducer below the waterline",
        least=-20.0,
        greatest=11500.0,
    ),
    Column(
        "altitude",
        "ping",
        METRE,
        "height of the transducer over the seabed",
        least=0.0,
        greatest=11500.0,
    ),
    Column("latitude", "ping", DEGREE, "latitude, north positive", least=-90.0, greatest=90.0),
    Column("longitude", "ping", DEGREE, "longitude, east positive", least=-360.0, greatest=360.0),
    Column("easting", "ping", METRE, "easting of a grid"),
    Column("northing", "ping", METRE, "northing of a grid"),
    Column("speed", "ping", METRE / SECOND, "speed over the ground", least=0.0, greatest=100.0),
    Column("course", "ping", DEGREE, "course over the ground", least=-360.0, greatest=720.0),
    Column("heading", "ping", DEGREE, "heading", least=-360.0, greatest=720.0),
    Column("roll", "ping", DEGREE, "roll, starboard down positive", least=-180.0, greatest=180.0),
    Column("pitch", "ping", DEGREE, "pitch, bow up positive", least=-180.0, greatest=180.0),
    Column("heave", "ping", METRE, "heave, up positive", least=-100.0, greatest=100.0),
    Column("tide", "ping", METRE, "height of the water over the datum", least=-50.0, greatest=50.0),
    Column("beam", "beam", ONE, "beam number"),
    Column(
        "beam_angle", "beam", DEGREE, "beam angle, starboard positive", least=-180.0, greatest=180.0
    ),
    Column("depth", "beam", METRE, "depth, positive down", least=0.0, greatest=11500.0),
    Column("slant_range", "beam", METRE, "range along the beam", least=0.0, greatest=2e4),
    Column("two_way_time", "beam", SECOND, "two-way travel time", least=0.0, greatest=60.0),
    Column("accepted", "beam", ONE, "whether the beam was accepted", "flag"),
)
"""Every canonical column by name. ``depth`` may be negative where depths are from a datum."""

PING_COLUMNS = tuple(c.name for c in COLUMNS.values() if c.grain == "ping")
BEAM_COLUMNS = tuple(c.name for c in COLUMNS.values() if c.grain == "beam")
