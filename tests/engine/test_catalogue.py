"""Every rule of the wider catalogue: its fault found at several strengths and placed to the ping, nothing found
without it, its missing input named, and its remedy's numbers applied until it passes.

The faults are planted here, in lines made here; how far each value is from its limit is set, not read off.
"""

from __future__ import annotations

import math
import re
from collections.abc import Callable
from dataclasses import dataclass, field
from typing import Any

import numpy as np
import pytest

from qa.engine.evaluate import evaluate_line
from qa.engine.sheets import load_sheet
from qa.model.cast import Cast
from qa.model.findings import LineResult, Section
from qa.model.survey_file import SurveyFile
from qa.model.units import measure

N, INTERVAL, C = 900, 0.0625, 1500.0
FIRST, LAST = 320, 520
HEIGHT, FAN, BEAMS = 20.0, 40.0, 61


@dataclass
class Set:
    """A line with what is stated of it, before it is made into a log."""

    time: Any
    pings: dict[str, Any]
    beams: dict[str, Any]
    stated: dict[str, Any]
    limits: dict[str, Any]
    cast: Cast | None = None

    def set(self, name: str, value: Any, usual: Any = None) -> None:
        """A ping column that has ``value`` on the stretch and otherwise what is usual."""
        if usual is None:
            usual = self.pings.get(name, self.stated.get(name))
        column = np.broadcast_to(np.asarray(usual, dtype=float), (N,)).copy()
        column[FIRST : LAST + 1] = value
        self.pings[name] = column


HERE = slice(FIRST, LAST + 1)


def _line(kind: str) -> Set:
    rng = np.random.default_rng(5)
    at = np.arange(N)
    time = at * INTERVAL
    seconds = time
    east = 2.0 * seconds
    pings: dict[str, Any] = {
        "speed": np.full(N, 2.0),
        "latitude": np.full(N, 50.0) + 1e-9 * at,
        "longitude": -6.0 + east / (111_320.0 * math.cos(math.radians(50.0))),
        "heading": 90.0 + rng.normal(0.0, 0.05, N),
        "roll": 2.0 * np.sin(2 * np.pi * seconds / 6.0) + rng.normal(0.0, 0.02, N),
        "pitch": 1.0 * np.sin(2 * np.pi * seconds / 5.0) + rng.normal(0.0, 0.02, N),
        "heave": 0.1 * np.sin(2 * np.pi * seconds / 7.0) + rng.normal(0.0, 0.002, N),
    }
    stated: dict[str, Any] = {
        "kind": kind,
        "frequency": 300e3,
        "pulse_length": 60e-6,
        "pulse_form": "CW",
        "beamwidth_along": 2.0,
        "beamwidth_across": 2.0,
        "sound_speed": C,
        "transducer_depth": 0.0,
        "source_level": 215.0,
        "target_strength": -15.0,
        **dict.fromkeys(
            ("roll_sigma", "pitch_sigma", "heading_sigma", "heave_sigma", "range_sigma"), 0.05
        ),
        **dict.fromkeys(("draught_sigma", "squat_sigma", "tide_sigma"), 0.05),
        "sound_speed_sigma": 1.0,
        "surface_sound_speed_sigma": 0.5,
        "position_sigma": 0.05,
    }
    beams: dict[str, Any] = {}
    if kind == "multibeam":
        depth = HEIGHT + rng.normal(0.0, 0.02, (N, BEAMS))
        angle = np.broadcast_to(np.linspace(-FAN, FAN, BEAMS), (N, BEAMS)).copy()
        beams = {"depth": depth, "beam_angle": angle, "accepted": np.ones((N, BEAMS))}
    elif kind == "single-beam":
        beams = {"depth": np.round(HEIGHT + rng.normal(0.0, 0.02, N), 2)}
    else:
        pings["altitude"] = np.round(12.0 + rng.normal(0.0, 0.05, N), 2)
        pings["range_scale"] = np.full(N, 80.0)
        stated["beamwidth_across"] = 40.0
    return Set(time, pings, beams, stated, {"target_size": "2 m", "near_range": "20 m"})


@dataclass(frozen=True)
class Case:
    """A fault of one rule. ``plant`` plants it ``s`` times beyond its limit (under 1: short of it)."""

    rule: str
    kind: str
    plant: Callable[[Set, float], None]
    mend: Callable[[Set, list[float]], None] | None = None
    lacking: str = ""  # an input whose loss leaves the rule not assessed
    strengths: tuple[float, ...] = (1.2, 1.5, 2.0)
    clean: float | None = 0.9
    spans: tuple[tuple[int, int], ...] = ((FIRST, LAST),)
    ends: int = 1
    limits: dict[str, Any] = field(default_factory=dict)


CASES: list[Case] = []
MEMORY_LOG: list[Any] = []


@pytest.fixture(autouse=True)
def _memory(memory_log: Any) -> None:
    MEMORY_LOG[:] = [memory_log]


def case(rule: str, kind: str = "multibeam", **more: Any) -> Callable[[Any], Any]:
    def register(plant: Callable[[Set, float], None]) -> Callable[[Set, float], None]:
        CASES.append(Case(rule, kind, plant, **more))
        return plant

    return register


def _slant() -> float:
    return HEIGHT / math.cos(math.radians(FAN))


# Timing


def _intervals(line: Set, value: float) -> None:
    step = np.full(N, INTERVAL)
    step[HERE] = value
    line.time = np.concatenate([[0.0], np.cumsum(step)[:-1]])


def _level(line: Set, depth: float = HEIGHT) -> None:
    line.beams["depth"] = np.full(np.shape(line.beams["depth"]), depth)


def _pocket(line: Set, depth: float) -> None:
    _level(line)
    line.beams["depth"][HERE] = depth


@case("ping-interval", mend=lambda line, n: _intervals(line, 1.0 / n[0]), lacking="pulse_length")
def _(line: Set, s: float) -> None:
    _level(line)
    line.pings["range_scale"] = np.full(N, 30.0)
    _intervals(line, (2 * 30.0 / C + 60e-6) / s)


@case("echo-in-time", mend=lambda line, n: _intervals(line, 1.0 / n[0]))
def _(line: Set, s: float) -> None:
    _level(line)
    _intervals(line, 2 * _slant() / C / s)


@case(
    "ping-gap",
    "single-beam",
    mend=lambda line, n: _one_interval(line, n[0]),
    spans=((FIRST, FIRST),),
)
def _(line: Set, s: float) -> None:
    _one_interval(line, s * 3 * INTERVAL)


def _one_interval(line: Set, value: float) -> None:
    step = np.full(N, INTERVAL)
    step[FIRST] = value
    line.time = np.concatenate([[0.0], np.cumsum(step)[:-1]])


@case(
    "range-resolution", mend=lambda line, n: line.set("pulse_length", n[0]), lacking="target_size"
)
def _(line: Set, s: float) -> None:
    line.set("pulse_length", s * 2 * 2.0 / C)


@case("across-resolution", mend=lambda line, n: _pocket(line, n[0]), lacking="beamwidth_across")
def _(line: Set, s: float) -> None:
    # exact form at the edge of the fan, the beam widened by steering (C-13 eqs. 3.33 and 3.35)
    edge, half = math.radians(FAN), math.radians(1.0) / math.cos(math.radians(FAN))
    _pocket(line, s * 2.0 / (math.tan(edge + half) - math.tan(edge - half)))


@case(
    "along-resolution",
    "side-scan",
    mend=lambda line, n: line.set("range_scale", n[0]),
    lacking="range_scale",
)
def _(line: Set, s: float) -> None:
    line.set("range_scale", s * 2.0 / (2 * math.tan(math.radians(1.0))), 50.0)


@case(
    "footprint-growth",
    "single-beam",
    mend=lambda line, n: _pocket(line, n[0]),
    lacking="target_size",
)
def _(line: Set, s: float) -> None:
    line.stated["beamwidth_across"] = 1.0
    _pocket(line, s * 2.0 / (2 * math.tan(math.radians(1.0))))


@case(
    "pings-on-target",
    mend=lambda line, n: line.set("speed", n[0]),
    lacking="hits_required",
    limits={"hits_required": 10},
    clean=0.9,
)
def _(line: Set, s: float) -> None:
    # C-13 eq. 4.2: (L + R·φ)/(V·t) = N at s = 1; half a hit more, so that the floor decides nothing
    _level(line)
    footprint = 2 * HEIGHT * math.tan(math.radians(1.0))
    line.set("speed", s * (2.0 + footprint) / 10.5 / INTERVAL, 0.5)


@case("ping-spacing", mend=lambda line, n: line.set("speed", n[0]), lacking="beamwidth_along")
def _(line: Set, s: float) -> None:
    _level(line)
    line.set("speed", s * 2 * HEIGHT * math.tan(math.radians(1.0)) / INTERVAL)


@case("ping-pace", mend=lambda line, n: _intervals(line, 1.0 / n[0]), lacking="pulse_length")
def _(line: Set, s: float) -> None:
    line.beams["depth"] = np.full((N, BEAMS), HEIGHT)
    _intervals(line, s * 2 * (2 * _slant() / C + 60e-6))


@case("ping-number", "single-beam", strengths=(2,), clean=None)
def _(line: Set, s: float) -> None:
    step = np.ones(N, dtype=int)
    step[FIRST + 1 : LAST + 2] = 2
    line.pings["ping"] = np.cumsum(step)


@case(
    "range-window", mend=lambda line, n: line.set("range_scale", n[0], 90.0), lacking="range_scale"
)
def _(line: Set, s: float) -> None:
    line.beams["depth"] = np.full((N, BEAMS), HEIGHT)
    line.set("range_scale", _slant() / (0.98 * s), 90.0)


# Resolution


@case("wavelength", mend=lambda line, n: line.set("frequency", n[0]), lacking="frequency")
def _(line: Set, s: float) -> None:
    line.set("frequency", C / (s * 2.0 / 3.0))


@case("pulse-cycles", mend=lambda line, n: line.set("pulse_length", n[0]), lacking="pulse_length")
def _(line: Set, s: float) -> None:
    line.set("pulse_length", 0.5 / 300e3 / s)


@case("frequency-for-depth", mend=lambda line, n: line.set("frequency", n[0]), lacking="frequency")
def _(line: Set, s: float) -> None:
    line.set("frequency", 200e3 / s)


@case(
    "near-field",
    "side-scan",
    mend=lambda line, n: line.limits.update(near_range=f"{n[0]} m"),
    lacking="beamwidth_along",
)
def _(line: Set, s: float) -> None:
    # L²/(4λ) = s·20 m (C-13 eq. 3.29), φ = 50.76 λ/L; half power of a line of length L
    wavelength = C / 300e3
    length = math.sqrt(4 * wavelength * s * 20.0)
    line.set("beamwidth_along", 50.76 * wavelength / length)


@case("blind-zone", mend=lambda line, n: line.set("pulse_length", n[0]), lacking="pulse_length")
def _(line: Set, s: float) -> None:
    line.beams["depth"] = np.full((N, BEAMS), HEIGHT)
    line.set("pulse_length", s * 2 * HEIGHT / C)


# Ground covered


def _fan(line: Set, widest: float) -> None:
    line.beams["beam_angle"][HERE] = np.linspace(-widest, widest, BEAMS)


@case(
    "beam-spacing",
    mend=lambda line, n: _fan(line, n[0]),
    lacking="beamwidth_across",
)
def _(line: Set, s: float) -> None:
    line.beams["depth"] = np.full((N, BEAMS), HEIGHT)
    line.set("beamwidth_across", 2 * FAN / (BEAMS - 1) / s)


@case(
    "beams-on-target",
    strengths=(2,),
    clean=0.9,
    lacking="beams_required",
    limits={"beams_required": 2},
)
def _(line: Set, s: float) -> None:
    line.limits["target_size"] = "0.5 m"
    if s > 1:
        # at 60 m beams of 2° stand 3.6 m apart at the edge of the fan, where one is 5 m wide
        line.beams["depth"][HERE] *= 3.0


@case(
    "yaw-gap",
    mend=lambda line, n: _turn(line, n[0] * INTERVAL),
    lacking="heading",
)
def _(line: Set, s: float) -> None:
    footprint = 2 * _slant() * math.tan(math.radians(1.0))
    outer = HEIGHT * math.tan(math.radians(FAN))
    line.beams["depth"] = np.full((N, BEAMS), HEIGHT)
    line.pings["heading"] = np.full(N, 90.0)
    _turn(line, math.degrees((s * footprint - 2.0 * INTERVAL) / outer))


def _turn(line: Set, per_ping: float) -> None:
    turned = np.zeros(N)
    turned[FIRST + 1 : LAST + 2] = per_ping
    line.pings["heading"] = (90.0 + np.cumsum(turned)) % 360.0


@case(
    "speed",
    mend=lambda line, n: line.set("speed", n[0]),
    lacking="speed_limit",
    limits={"speed_limit": "4 kt"},
)
def _(line: Set, s: float) -> None:
    line.set("speed", s * 4 * 1852 / 3600)


# Swath


@case("swath-width", mend=lambda line, n: _fan(line, n[0] / 2), lacking="least_swath")
def _(line: Set, s: float) -> None:
    line.beams["depth"] = np.full((N, BEAMS), HEIGHT)
    line.limits["least_swath"] = "30 m"
    _fan(line, math.degrees(math.atan(15.0 / s / HEIGHT)))


@case(
    "swath-width",
    "side-scan",
    mend=lambda line, n: line.set("range_scale", n[0]),
    lacking="least_swath",
)
def _(line: Set, s: float) -> None:
    line.limits["least_swath"] = "70 m"
    line.pings["altitude"] = np.full(N, 12.0)
    line.set("range_scale", math.hypot(70.0 / s, 12.0))


@case("beam-loss", lacking="accepted", clean=0.8)
def _(line: Set, s: float) -> None:
    kept = round(BEAMS * 0.5 / s) if s > 1 else BEAMS - 10
    first = (BEAMS - kept) // 2
    accepted = np.zeros(BEAMS)
    accepted[first : first + kept] = 1.0
    line.beams["accepted"][HERE] = accepted


@case(
    "altitude",
    "side-scan",
    mend=lambda line, n: _fly(line, 0.5 * (n[0] + n[1])),
    lacking="altitude",
)
def _(line: Set, s: float) -> None:
    _fly(line, s * 0.2 * 80.0)


@case("altitude", "side-scan", mend=lambda line, n: _fly(line, 0.5 * (n[0] + n[1])))
def _(line: Set, s: float) -> None:
    _fly(line, 0.08 * 80.0 / s)


@case("bottom-track", "side-scan", strengths=(2,), clean=None, lacking="altitude")
def _(line: Set, s: float) -> None:
    line.set("altitude", 0.0)


@case("bottom-track", "side-scan", strengths=(2,), clean=None)
def _(line: Set, s: float) -> None:
    line.set("altitude", 13.37)


def _fly(line: Set, altitude: float) -> None:
    """At a height that is held to a hair, but not to the last digit."""
    line.set("altitude", altitude * (1.0 + 1e-6 * (np.arange(FIRST, LAST + 1) % 3 - 1)))


# Echo


def _margin(line: Set, rule: str, s: float) -> None:
    """Lower the source level by what stands above the limit, and by 10 dB for each whole ``s`` beyond."""
    series = _evaluated(line).rules[rule]
    line.set("source_level", 215.0 - float(np.nanmin(series.value)) - 10.0 * (s - 1.0))


@case(
    "echo-margin",
    "side-scan",
    mend=lambda line, n: line.set("range_scale", n[0]),
    lacking="source_level",
)
def _(line: Set, s: float) -> None:
    line.pings["altitude"] = np.full(N, 12.0)
    _margin(line, "echo-margin", s)


@case(
    "target-margin",
    "side-scan",
    mend=lambda line, n: line.set("range_scale", n[0]),
    lacking="target_strength",
)
def _(line: Set, s: float) -> None:
    """The seabed beside the target is what limits: it echoes by 10·log10 of the pulse's length more."""
    line.pings["altitude"] = np.full(N, 12.0)
    worst = float(np.nanmin(_evaluated(line).rules["target-margin"].value))
    line.stated["target_strength"] += 3.0 - worst
    line.set("pulse_length", 60e-6 * 10 ** ((3.0 + 10.0 * (s - 1.0)) / 10.0))


# Soundings


@case("depth-spike")
def _(line: Set, s: float) -> None:
    line.beams["depth"][HERE, 20] *= 1.0 - 0.2 * s


@case("depth-spike", "single-beam", spans=((FIRST, FIRST + 198),))
def _(line: Set, s: float) -> None:
    line.beams["depth"][FIRST : FIRST + 199 : 3] *= 1.0 - 0.2 * s


@case("depth-stuck", "single-beam")
def _(line: Set, s: float) -> None:
    last = FIRST + round(s * 10.0 / INTERVAL)
    line.beams["depth"][FIRST : last + 1] = 21.37


@case(
    "depth-limits",
    lacking="deepest",
    limits={"shallowest": "1 m", "deepest": "30 m"},
)
def _(line: Set, s: float) -> None:
    line.beams["depth"][HERE] = s * 30.0


@case("multiple-echo", "single-beam", strengths=(2,), clean=None)
def _(line: Set, s: float) -> None:
    line.beams["depth"][FIRST : LAST + 1 : 2] *= 2.0


@case(
    "sounding-distance",
    "single-beam",
    mend=lambda line, n: line.set("speed", n[0]),
)
def _(line: Set, s: float) -> None:
    line.beams["depth"] = np.full(N, HEIGHT)
    line.set("speed", s * 60.0 / INTERVAL)


@case("time-depth", lacking="two_way_time")
def _(line: Set, s: float) -> None:
    reach = line.beams["depth"] / np.cos(np.radians(line.beams["beam_angle"]))
    line.beams["two_way_time"] = 2 * reach / C
    line.beams["two_way_time"][HERE] *= 1.0 + 0.03 * s


@case("swath-curl")
def _(line: Set, s: float) -> None:
    tangent = np.tan(np.radians(line.beams["beam_angle"][HERE]))
    line.beams["depth"][HERE] -= 0.05 * s * HEIGHT * tangent**2


@case(
    "swath-wobble",
    ends=240,
    strengths=(2.0, 3.0),
    clean=0.5,
    lacking="roll",
    spans=((160, 799),),
)
def _(line: Set, s: float) -> None:
    here = slice(160, 800)
    tilt = np.tan(np.radians(0.3 * s * line.pings["roll"][here]))[:, None]
    line.beams["depth"][here] += HEIGHT * np.tan(np.radians(line.beams["beam_angle"][here])) * tilt


# Water and platform


def _cast() -> Cast:
    depth = np.array([0.0, 10.0, 30.0, 60.0])
    return Cast("cast.csv", depth, np.array([1500.0, 1500.0, 1495.0, 1490.0]))


@case(
    "sound-speed",
    mend=lambda line, n: line.set("sound_speed", n[0]),
    lacking="temperature",
)
def _(line: Set, s: float) -> None:
    line.pings["temperature"], line.pings["salinity"] = np.full(N, 10.0), np.full(N, 35.0)
    # Mackenzie 1981 gives 1489.8 m/s at 10 degC, 35, 0 m
    line.set("sound_speed", 1489.8 + 5.0 * s, 1489.8)


@case("sound-speed-age", lacking="tvu_allowed")
def _(line: Set, s: float) -> None:
    line.cast = _cast()
    line.set("sound_speed", 1508.0, 1500.0)
    line.limits["tvu_allowed"] = "100 m"
    worst = np.nanmax(_evaluated(line).rules["sound-speed-age"].value)
    line.limits["tvu_allowed"] = f"{worst / s} m"


@case("surface-sound-speed", lacking="sound_speed")
def _(line: Set, s: float) -> None:
    line.cast = _cast()
    line.set("sound_speed", 1500.0 + 2.0 * s, 1500.0)


@case("motion", lacking="roll")
def _(line: Set, s: float) -> None:
    """Half a degree a ping up to its greatest and down again, through the limit at the stretch's ends."""
    for name in ("pitch", "heave"):
        del line.pings[name]
    at = np.arange(N)
    inside = np.minimum(at - FIRST, LAST - at) + 0.5
    line.pings["roll"] = np.clip(15.0 + 0.5 * inside, 0.0, 15.0 * s)


@case("motion-frozen", strengths=(1.2, 1.5, 2.0))
def _(line: Set, s: float) -> None:
    line.pings["roll"][FIRST : FIRST + round(s * 10.0 / INTERVAL) + 1] = 1.2345


@case("settings-change", strengths=(2,), clean=None, spans=((FIRST, FIRST), (LAST + 1, LAST + 1)))
def _(line: Set, s: float) -> None:
    line.set("pulse_length", 80e-6)


@case("position-jump", lacking="latitude")
def _(line: Set, s: float) -> None:
    line.pings["latitude"][FIRST : LAST + 1 : 2] += 20.0 * s / 111_229.0


@case("position-frozen", lacking="latitude")
def _(line: Set, s: float) -> None:
    for name in ("latitude", "longitude"):
        values = line.pings[name]
        values[FIRST : FIRST + round(s * 10.0 / INTERVAL) + 1] = values[FIRST]


# Legs of 10 s begin at the first ping: 160 pings each.
@case("speed-agreement", spans=((320, 479),), lacking="latitude")
def _(line: Set, s: float) -> None:
    line.pings["speed"][320:480] += 0.5 * s


# Uncertainty


def _allowed(line: Set, limit: str, rule: str, s: float) -> None:
    line.limits[limit] = "100 m"
    line.beams["depth"] = np.full((N, BEAMS), HEIGHT)
    line.beams["depth"][HERE] = 10 * HEIGHT
    worst = np.nanmax(_evaluated(line).rules[rule].value)
    line.limits[limit] = f"{worst / s} m"


@case("vertical-uncertainty", lacking="roll_sigma")
def _(line: Set, s: float) -> None:
    _allowed(line, "tvu_allowed", "vertical-uncertainty", s)


@case("horizontal-uncertainty", lacking="position_sigma")
def _(line: Set, s: float) -> None:
    _allowed(line, "thu_allowed", "horizontal-uncertainty", s)


# What is done with them


def _evaluated(line: Set) -> LineResult:
    pings = {k: v for k, v in line.pings.items() if k != "ping"}
    log = MEMORY_LOG[0](line.time, pings, line.beams, numbers=line.pings.get("ping"))
    survey = SurveyFile(stated=dict(line.stated), limits=dict(line.limits))
    return evaluate_line(log, survey, load_sheet("physics", survey), cast=line.cast)


def _made(case: Case, s: float | None) -> Set:
    line = _line(case.kind)
    line.limits.update(case.limits)
    if s is not None:
        case.plant(line, s)
    return line


def _sections(line: Set, rule: str) -> list[Section]:
    return [section for section in _evaluated(line).sections if section.rule == rule]


def _name(value: Any) -> str:
    return f"{value.rule}-{value.kind}" if isinstance(value, Case) else str(value)


STRONG = [(case, s) for case in CASES for s in case.strengths]


@pytest.mark.parametrize(("case", "s"), STRONG, ids=_name)
def test_a_fault_is_found_and_placed(case: Case, s: float) -> None:
    found = _sections(_made(case, s), case.rule)
    spans = case.spans
    if case.rule in ("depth-stuck", "motion-frozen", "position-frozen"):
        spans = ((FIRST, FIRST + round(s * 10.0 / INTERVAL)),)
    assert len(found) == len(spans), [(f.first_index, f.last_index) for f in found]
    for section, (first, last) in zip(found, spans, strict=True):
        assert abs(section.first_index - first) <= case.ends
        assert abs(section.last_index - last) <= case.ends
        assert section.reason and section.remedy
        assert "{" not in section.reason + section.remedy
        assert "not known" not in section.reason + section.remedy


@pytest.mark.parametrize("case", CASES, ids=_name)
def test_without_its_fault_nothing_is_found(case: Case) -> None:
    assert _sections(_made(case, case.clean), case.rule) == []


@pytest.mark.parametrize("case", [c for c in CASES if c.lacking], ids=_name)
def test_a_missing_input_is_named(case: Case) -> None:
    line = _made(case, case.strengths[-1])
    for table in (line.pings, line.beams, line.stated, line.limits):
        table.pop(case.lacking, None)
    if case.lacking == "latitude":
        line.pings.pop("longitude")
    if case.lacking == "roll":
        line.pings.pop("pitch", None), line.pings.pop("heave", None)
    rule = next(r for r in _evaluated(line).finding.rules if r.id == case.rule)
    assert rule.verdict == "not assessed"
    assert case.lacking in rule.reason


_NUMBER = re.compile(r"(\d+(?:\.\d+)?(?:e-?\d+)?) (Hz|kHz|m/s|ms|m|µs|us|s|kt|deg/s|deg)\b")


@pytest.mark.parametrize("case", [c for c in CASES if c.mend], ids=_name)
def test_the_remedys_numbers_mend_it(case: Case) -> None:
    for s in case.strengths:
        line = _made(case, s)
        (section,) = _sections(line, case.rule)
        numbers = [
            measure(f"{number} {unit.replace('µ', 'u')}")[0]
            for number, unit in _NUMBER.findall(section.remedy)
        ]
        assert case.mend is not None
        case.mend(line, numbers)
        assert _sections(line, case.rule) == [], section.remedy
