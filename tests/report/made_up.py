"""Made-up lines and findings, so that the report is tested without the engine."""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any

import numpy as np

from qa.model.findings import (
    EXEMPT,
    MET,
    MISSED,
    NOT_ASSESSED,
    Assumption,
    BeamMisses,
    Evidence,
    Findings,
    InputFile,
    LineFinding,
    LineResult,
    LineRule,
    RuleFinding,
    RuleSeries,
    Section,
    Verdict,
)
from qa.model.log import RejectedRow
from qa.report import LineArtifacts, write_line, write_outputs

START = 1_714_557_600_000_000_000
"""2024-05-01 10:00 UTC, in nanoseconds."""


@dataclass(frozen=True)
class RuleKind:
    """A rule of the made-up sheet; ``sense`` is +1 where the value must not be greater than the limit."""

    id: str
    title: str
    require: str
    unit: str
    sense: int
    severity: str = "out of spec"
    remedy: str = "Ping at 8.2 Hz or slower."
    missing: str = ""


RULES = (
    RuleKind(
        "ping-interval",
        "Ping interval against listening time",
        "ping_span >= listening_time",
        "s",
        -1,
    ),
    RuleKind(
        "echo-in-time", "Echo in before the next ping", "bottom_travel_time <= ping_span", "s", 1
    ),
    RuleKind(
        "range-resolution",
        "Range resolution against target size",
        "range_resolution <= target_size",
        "m",
        1,
        remedy="Shorten a CW pulse to 60 µs or less; think of divers and marine life before lengthening it.",
    ),
    RuleKind(
        "footprint-growth",
        "Footprint nearest the vertical",
        "footprint <= footprint_limit",
        "m",
        1,
        remedy="This set-up outgrows the limit at 28.6 m; take a narrower beam there.",
    ),
    RuleKind(
        "pings-on-target",
        "Pings on the target",
        "guaranteed_hits >= hits_required",
        "1",
        -1,
        remedy="Go at 2.31 m/s or slower.",
    ),
    RuleKind(
        "ping-pace",
        "Pinging slower than the range allows",
        "ping_rate >= fastest_ping_rate / 2",
        "Hz",
        -1,
        "advisory",
    ),
    RuleKind(
        "vertical-uncertainty",
        "Vertical uncertainty",
        "vertical_uncertainty <= tvu_allowed",
        "m",
        1,
        missing="needs heave, which is neither logged nor stated",
    ),
)


@dataclass(frozen=True)
class Fault:
    """Pings ``first`` to ``last`` of a channel miss a rule by a factor."""

    rule: str
    first: int
    last: int
    factor: float = 1.4
    channel: int = 0


@dataclass(frozen=True)
class LineKind:
    """How one made-up line is."""

    name: str
    pings: int = 300
    channels: tuple[str, ...] = ("",)
    faults: tuple[Fault, ...] = ()
    unassessed: tuple[str, ...] = ("vertical-uncertainty",)
    blank: tuple[int, int] | None = None
    places: str = "geographic"
    kind: str = "multibeam"
    number: int = 0
    notes: tuple[str, ...] = ()
    texts: dict[str, str] = field(default_factory=dict)


def line_result(made: LineKind) -> LineResult:
    """A line with series, verdicts and sections that fit each other."""
    random = np.random.default_rng(made.number + 7)
    n, many = made.pings, len(made.channels)
    steps = np.arange(n)
    time = START + made.number * 1_800_000_000_000 + (steps * 200_000_000)
    depth = 22.0 + 7.0 * np.sin(steps / 60.0 + made.number) + random.normal(0, 0.05, n)
    interval = 0.2 + random.normal(0, 1e-4, n)
    interval[-1:] = np.nan
    along = 0.5 * steps
    columns = {
        "depth": depth,
        "ping_interval": interval,
        "ping_span": interval,
        "listening_time": np.full(n, 0.1),
        "bottom_travel_time": depth / 750.0,
        "range_resolution": np.full(n, 0.045),
        "footprint": depth * 0.0175,
        "ping_spacing": np.full(n, 0.5),
        "guaranteed_hits": np.full(n, 4.0),
        "pulse_length": np.where(steps < n // 2, 60e-6, 80e-6),
        "speed": np.full(n, 2.5),
        "distance": along,
    }
    units = {
        "depth": "m",
        "ping_interval": "s",
        "ping_span": "s",
        "listening_time": "s",
        "bottom_travel_time": "s",
        "range_resolution": "m",
        "footprint": "m",
        "ping_spacing": "m",
        "guaranteed_hits": "1",
        "pulse_length": "s",
        "speed": "m/s",
        "distance": "m",
        "latitude": "deg",
        "longitude": "deg",
        "easting": "m",
        "northing": "m",
    }
    if made.places == "geographic":
        columns["latitude"] = 54.5 + along / 111_195.0
        columns["longitude"] = -3.25 + made.number * 0.0009 + 0.0001 * np.sin(steps / 40.0)
    elif made.places == "meridian":
        columns["latitude"] = np.full(n, -17.0)
        columns["longitude"] = (179.999 + along / 100_000.0 + 180.0) % 360.0 - 180.0
    elif made.places == "grid":
        columns["easting"] = 412_000.0 + 50.0 * made.number + along
        columns["northing"] = 6_040_000.0 + 0.3 * along
    base = {
        "ping-interval": (interval, columns["listening_time"]),
        "echo-in-time": (columns["bottom_travel_time"], interval),
        "range-resolution": (columns["range_resolution"], np.full(n, 0.06)),
        "footprint-growth": (columns["footprint"], np.full(n, 0.6)),
        "pings-on-target": (columns["guaranteed_hits"], np.full(n, 3.0)),
        "ping-pace": (np.full(n, 5.0), np.full(n, 3.0)),
        "vertical-uncertainty": (np.full(n, np.nan), np.full(n, np.nan)),
    }
    columns = {k: np.tile(v, many) for k, v in columns.items()}
    series, sections, rules = {}, [], []
    for rule in RULES:
        value, limit = (np.tile(v, many).copy() for v in base[rule.id])
        for fault in made.faults:
            if fault.rule == rule.id:
                rows = slice(fault.channel * n + fault.first, fault.channel * n + fault.last + 1)
                value[rows] = limit[rows] * (fault.factor if rule.sense > 0 else 1 / fault.factor)
        if rule.id in made.unassessed:
            value[:] = np.nan
        if made.blank:
            for c in range(many):
                value[c * n + made.blank[0] : c * n + made.blank[1] + 1] = np.nan
        with np.errstate(invalid="ignore", divide="ignore"):
            margin = rule.sense * (limit - value) / limit
        status = np.where(np.isnan(margin), NOT_ASSESSED, np.where(margin < 0, MISSED, MET)).astype(
            np.int8
        )
        if rule.id == "ping-interval" and rule.id not in made.unassessed:
            for c in range(many):
                status[(c + 1) * n - 1] = EXEMPT
        series[rule.id] = RuleSeries(status, value, limit, margin, rule.unit)
        rules.append(_line_rule(rule, series[rule.id]))
        for fault in made.faults:
            if fault.rule == rule.id:
                sections.append(
                    _section(made, rule, fault, series[rule.id], time, columns, len(sections))
                )
    judged = [r.verdict for r in rules if r.severity == "out of spec"]
    verdict: Verdict = (
        "out of spec"
        if "out of spec" in judged
        else "in spec"
        if "in spec" in judged
        else "not assessed"
    )
    finding = LineFinding(
        line=made.name,
        kind=made.kind,
        channels=made.channels,
        files=(f"logs/{made.name}.csv",),
        pings=n * many,
        soundings=n * many * 100,
        start=_iso(time[0]),
        end=_iso(time[-1]),
        length=float(along[-1]),
        duration=float(time[-1] - time[0]) / 1e9,
        verdict=verdict,
        rules=tuple(rules),
        origins={"pulse_length": "logged", "sound_speed": "assumed"},
        notes=made.notes,
    )
    misses = ()
    if any(f.rule == "footprint-growth" for f in made.faults):
        rows = np.flatnonzero(series["footprint-growth"].status == MISSED)
        misses = (
            BeamMisses(
                "footprint-growth",
                np.repeat(rows, 3),
                np.tile([-55.0, 0.0, 48.0], len(rows)),
                3 * len(rows),
            ),
        )
    return LineResult(
        finding=finding,
        sections=tuple(sections),
        channels=tuple((name, c * n, (c + 1) * n) for c, name in enumerate(made.channels)),
        time=np.tile(time, many),
        ping=np.tile(steps + 1, many),
        columns=columns,
        units=units,
        rules=series,
        beam_misses=misses,
    )


def _iso(nanoseconds: Any) -> str:
    return str(np.datetime64(int(nanoseconds), "ms" if False else "ns"))[:23] + "Z"


def _line_rule(rule: RuleKind, series: RuleSeries) -> LineRule:
    assessed = (series.status == MET) | (series.status == MISSED)
    missed = int((series.status == MISSED).sum())
    worst = int(np.nanargmin(np.where(assessed, series.margin, np.nan))) if assessed.any() else None
    verdict: Verdict = "not assessed"
    if assessed.any():
        verdict = "out of spec" if missed and rule.severity == "out of spec" else "in spec"
    return LineRule(
        id=rule.id,
        verdict=verdict,
        reason=(rule.missing or "needs a value that is neither logged nor stated")
        if worst is None
        else "",
        severity=rule.severity,  # type: ignore[arg-type]
        limit=None if worst is None else float(series.limit[worst]),
        worst=None if worst is None else float(series.value[worst]),
        unit=rule.unit,
        margin=None if worst is None else float(series.margin[worst]),
        pings_assessed=int(assessed.sum()),
        pings_missed=missed,
        pings_not_assessed=int((series.status == NOT_ASSESSED).sum()),
        pings_exempt=int((series.status == EXEMPT).sum()),
        pings_stray=0,
        metres_assessed=0.5 * float(assessed.sum()),
        metres_missed=0.5 * missed,
    )


def _section(
    made: LineKind,
    rule: RuleKind,
    fault: Fault,
    series: RuleSeries,
    time: Any,
    columns: dict[str, Any],
    place: int,
) -> Section:
    offset = fault.channel * made.pings
    rows = np.arange(offset + fault.first, offset + fault.last + 1)
    worst = int(rows[np.argmin(series.margin[rows])])
    geographic = "latitude" in columns
    value, limit = float(series.value[worst]), float(series.limit[worst])
    assessed = int(((series.status == MET) | (series.status == MISSED)).sum())
    evidence = (
        Evidence(
            "value",
            f"{value:.4g} {rule.unit}",
            rule.unit,
            value,
            "computed from logged",
            "c·τ/2",
            "C-13 §5.1.1.3",
        ),
        Evidence("pulse_length", "80 µs", "s", 8e-5, "logged"),
        Evidence("sound_speed", "1500 m/s", "m/s", 1500.0, "assumed"),
    )
    return Section(
        id=f"{made.number + 1}.{place + 1}",
        line=made.name,
        channel=made.channels[fault.channel],
        rule=rule.id,
        severity=rule.severity,  # type: ignore[arg-type]
        start=_iso(time[fault.first]),
        end=_iso(time[fault.last]),
        first_ping=fault.first + 1,
        last_ping=fault.last + 1,
        first_index=fault.first,
        last_index=fault.last,
        pings=len(rows),
        pings_missed=len(rows),
        share=len(rows) / assessed if assessed else 0.0,
        worst=value,
        limit=limit,
        unit=rule.unit,
        margin=float(series.margin[worst]),
        worst_ping=worst - offset + 1,
        worst_index=worst - offset,
        reason=made.texts.get(
            "reason", f"Measured {value:.4g} {rule.unit} against {limit:.4g} {rule.unit}."
        ),
        remedy=made.texts.get("remedy", rule.remedy),
        length=0.5 * (len(rows) - 1),
        duration=float(time[fault.last] - time[fault.first]) / 1e9,
        start_latitude=float(columns["latitude"][rows[0]]) if geographic else None,
        start_longitude=float(columns["longitude"][rows[0]]) if geographic else None,
        end_latitude=float(columns["latitude"][rows[-1]]) if geographic else None,
        end_longitude=float(columns["longitude"][rows[-1]]) if geographic else None,
        evidence=evidence,
    )


def findings_of(
    results: list[LineResult], name: str = "Made-up roads, block 3", **changed: Any
) -> Findings:
    """The lines put together."""
    lines = tuple(r.finding for r in results)
    verdicts = {line.verdict for line in lines}
    verdict: Verdict = (
        "out of spec"
        if "out of spec" in verdicts
        else "in spec"
        if "in spec" in verdicts
        else "not assessed"
    )
    found = Findings(
        tool={"name": "pingworthy", "version": "0.1.0"},
        survey={
            "name": name,
            "file": "survey.toml",
            "sha256": "ab" * 32,
            "vessel_time_zone": "UTC",
            "day": None,
            "stated": {"target_size": "1 m"},
            "parts": [],
        },
        sheet={
            "name": "physics",
            "title": "Physics",
            "about": "",
            "sha256": "cd" * 32,
            "extends": [],
        },
        verdict=verdict,
        inputs=tuple(
            InputFile(
                line.files[0], "ef" * 32, 1234, line.pings + 2, line.pings, 2, 0, {"no time": 2}
            )
            for line in lines
        ),
        assumptions=(Assumption("sound_speed", "1500 m/s", "a round figure for sea water"),),
        limits=(
            {
                "name": "target_size",
                "text": "1 m",
                "unit": "m",
                "about": "smallest target",
                "source": "",
                "origin": "survey file",
            },
        ),
        rules=tuple(_rule_finding(kind, lines) for kind in RULES),
        lines=lines,
        sections=tuple(s for r in results for s in r.sections),
        exit_status=int(verdict == "out of spec"),
    )
    return replace(found, **changed)


def _rule_finding(kind: RuleKind, lines: tuple[LineFinding, ...]) -> RuleFinding:
    own = [r for line in lines for r in line.rules if r.id == kind.id]
    assessed = [r for r in own if r.pings_assessed]
    worst = min(assessed, key=lambda r: r.margin or 0.0, default=None)
    out = sum(r.verdict == "out of spec" for r in own)
    verdict: Verdict = "out of spec" if out else "in spec" if assessed else "not assessed"
    return RuleFinding(
        id=kind.id,
        title=kind.title,
        verdict=verdict,
        reason=own[0].reason if own and not assessed else "",
        severity=kind.severity,  # type: ignore[arg-type]
        require=kind.require,
        allow=0.0,
        limit=worst.limit if worst else None,
        limits=(worst.limit, worst.limit) if worst and worst.limit is not None else None,
        worst=worst.worst if worst else None,
        unit=kind.unit,
        margin=worst.margin if worst else None,
        pings_assessed=sum(r.pings_assessed for r in own),
        pings_missed=sum(r.pings_missed for r in own),
        pings_not_assessed=sum(r.pings_not_assessed for r in own),
        pings_exempt=sum(r.pings_exempt for r in own),
        pings_stray=0,
        lines_in_spec=sum(r.verdict == "in spec" for r in own),
        lines_out_of_spec=out,
        lines_not_assessed=sum(not r.pings_assessed for r in own),
        lines_exempt=0,
        metres_assessed=sum(r.metres_assessed or 0.0 for r in own),
        metres_missed=sum(r.metres_missed or 0.0 for r in own),
        source="C-13 ch. 4 §2.3.6.3",
        why="Because.",
        sheet="physics",
    )


REJECTED = (
    RejectedRow("logs/A.csv", 12, "no time", "1,,54.5"),
    RejectedRow("logs/A.csv", 15, "no time", "=cmd|x!A0"),
)

SOME_FAULTS = (
    LineKind("MR01_north"),
    LineKind(
        "MR02_north",
        faults=(Fault("ping-interval", 40, 90), Fault("pings-on-target", 60, 100, 2.0)),
    ),
    LineKind(
        "MR03_basin", faults=(Fault("footprint-growth", 100, 220, 1.2), Fault("ping-pace", 10, 60))
    ),
    LineKind("MR04_basin", blank=(120, 180)),
    LineKind(
        "SW05_sweep",
        channels=("port", "starboard"),
        kind="side-scan",
        faults=(Fault("range-resolution", 5, 25, 3.0, channel=1),),
    ),
)


def results_of(kinds: tuple[LineKind, ...]) -> list[LineResult]:
    """Lines numbered in their order."""
    return [line_result(replace(kind, number=n)) for n, kind in enumerate(kinds)]


def written(
    folder: Path, kinds: tuple[LineKind, ...] = SOME_FAULTS, pages: Any = "auto", **changed: Any
) -> tuple[Findings, list[LineResult], list[LineArtifacts]]:
    """All outputs of some made-up lines."""
    results = results_of(kinds)
    findings = findings_of(results, **changed)
    artifacts = [write_line(r, folder, n) for n, r in enumerate(results, start=1)]
    write_outputs(findings, artifacts, REJECTED, folder, pages)
    return findings, results, artifacts
