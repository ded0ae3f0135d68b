"""What an audit finds: verdicts, sections, accounts; the content of ``findings.json``."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any, Literal

import numpy as np

from qa.model.json_text import json_text, plain
from qa.model.log import Floats, RejectedRow

SCHEMA_VERSION = "1"

Verdict = Literal["in spec", "out of spec", "not assessed"]
Severity = Literal["out of spec", "advisory"]
Origin = Literal[
    "logged",
    "computed from logged",
    "stated",
    "computed from stated",
    "assumed",
    "computed from assumed",
]
ORIGINS: tuple[Origin, ...] = (
    "logged",
    "computed from logged",
    "stated",
    "computed from stated",
    "assumed",
    "computed from assumed",
)
"""From best to worst."""


@dataclass(frozen=True, slots=True)
class Assumption:
    """A value that was neither logged nor stated, and was used."""

    name: str
    value: str
    reason: str
    lines: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True)
class InputFile:
    """A file that was read, and what became of its rows. ``error`` says why it could not be used."""

    path: str
    sha256: str | None = None
    bytes: int | None = None
    rows_read: int = 0
    rows_used: int = 0
    rows_rejected: int = 0
    rows_out_of_scope: int = 0
    reasons: Mapping[str, int] = field(default_factory=dict)
    missing: Mapping[str, int] = field(default_factory=dict)
    notes: tuple[str, ...] = ()
    error: str | None = None


@dataclass(frozen=True, slots=True)
class LineRule:
    """How one line does by one rule. Numbers SI; ``limit`` and ``worst`` at the worst margin.

    ``margin`` is how far the worst value keeps from its limit, as a share of it: negative is a miss.
    ``pings_exempt`` are those that cannot have the value at all, such as the last ping's interval.
    ``pings_stray`` are misses that made no section.
    """

    id: str
    verdict: Verdict
    reason: str
    severity: Severity
    limit: float | None
    worst: float | None
    unit: str
    margin: float | None
    pings_assessed: int
    pings_missed: int
    pings_not_assessed: int
    pings_exempt: int
    pings_stray: int
    metres_assessed: float | None = None
    metres_missed: float | None = None


@dataclass(frozen=True, slots=True)
class RuleFinding:
    """How the survey does by one rule: its lines added up.

    ``limits`` are the least and the greatest limit met on any assessed ping.
    """

    id: str
    title: str
    verdict: Verdict
    reason: str
    severity: Severity
    require: str
    allow: float
    limit: float | None
    limits: tuple[float, float] | None
    worst: float | None
    unit: str
    margin: float | None
    pings_assessed: int
    pings_missed: int
    pings_not_assessed: int
    pings_exempt: int
    pings_stray: int
    lines_in_spec: int
    lines_out_of_spec: int
    lines_not_assessed: int
    lines_exempt: int
    metres_assessed: float | None
    metres_missed: float | None
    source: str
    why: str
    sheet: str
    clause: str = ""


@dataclass(frozen=True, slots=True)
class Evidence:
    """One number behind a verdict: at the worst ping of a section. ``text`` is the value with its unit."""

    name: str
    text: str
    unit: str
    value: float | None
    origin: str
    formula: str = ""
    source: str = ""


@dataclass(frozen=True, slots=True)
class Section:
    """A run of consecutive pings of one line and channel that miss one rule.

    ``share`` is of the line's assessed pings. ``within_allowance`` is true where the sheet allows
    that many misses, so that the line stays in spec. ``length`` in metres along the line.
    """

    id: str
    line: str
    channel: str
    rule: str
    severity: Severity
    start: str
    end: str
    first_ping: int
    last_ping: int
    first_index: int
    last_index: int
    pings: int
    pings_missed: int
    share: float
    worst: float | None
    limit: float | None
    unit: str
    margin: float | None
    worst_ping: int
    worst_index: int
    reason: str
    remedy: str
    within_allowance: bool = False
    length: float | None = None
    duration: float | None = None
    start_latitude: float | None = None
    start_longitude: float | None = None
    end_latitude: float | None = None
    end_longitude: float | None = None
    evidence: tuple[Evidence, ...] = ()


@dataclass(frozen=True, slots=True)
class LineFinding:
    """One line: its verdict, its rules and where each quantity came from."""

    line: str
    kind: str
    channels: tuple[str, ...]
    files: tuple[str, ...]
    pings: int
    soundings: int
    start: str | None
    end: str | None
    length: float | None
    duration: float | None
    verdict: Verdict
    rules: tuple[LineRule, ...] = ()
    origins: Mapping[str, str] = field(default_factory=dict)
    notes: tuple[str, ...] = ()
    error: str | None = None


@dataclass(frozen=True, slots=True)
class Findings:
    """All that an audit found. ``to_json`` is the content of ``findings.json``."""

    tool: Mapping[str, str]
    survey: Mapping[str, Any]
    sheet: Mapping[str, Any]
    verdict: Verdict
    inputs: tuple[InputFile, ...]
    assumptions: tuple[Assumption, ...]
    limits: tuple[Mapping[str, Any], ...]
    rules: tuple[RuleFinding, ...]
    lines: tuple[LineFinding, ...]
    sections: tuple[Section, ...]
    notes: tuple[str, ...] = ()
    exit_status: int = 0
    schema_version: str = SCHEMA_VERSION

    def to_dict(self) -> dict[str, Any]:
        """Plain lists, dicts, texts and numbers; None where a number is not known."""
        found: dict[str, Any] = plain(self)
        return found

    def to_json(self) -> str:
        """The same text each time for the same findings."""
        return json_text(self.to_dict())


@dataclass(slots=True)
class RuleSeries:
    """One rule's outcome for each ping of a line, shape (pings,).

    ``status``: see :data:`NOT_ASSESSED` and its neighbours. ``value`` and ``limit`` are SI, the ping's worst beam
    for a beam rule. ``margin`` as in :class:`LineRule`.
    """

    status: np.ndarray[Any, np.dtype[np.int8]]
    value: Floats
    limit: Floats
    margin: Floats
    unit: str


NOT_ASSESSED, MET, MISSED, EXEMPT = 0, 1, 2, 3


@dataclass(slots=True)
class BeamMisses:
    """Beams that missed a rule, at most some thousands of a line, for the swath view."""

    rule: str
    index: np.ndarray[Any, np.dtype[np.int64]]
    beam_angle: Floats
    total: int


@dataclass(slots=True)
class LineResult:
    """One line, computed: its findings and the series behind them, for figures and tables.

    ``columns`` hold ping quantities, SI, shape (pings,); ``units`` their units. Rows are in the order of
    ``channels``, spans as in :class:`qa.model.log.PingTable`.
    """

    finding: LineFinding
    sections: tuple[Section, ...]
    channels: tuple[tuple[str, int, int], ...]
    time: np.ndarray[Any, np.dtype[np.int64]]
    ping: np.ndarray[Any, np.dtype[np.int64]]
    columns: dict[str, Floats]
    units: dict[str, str]
    rules: dict[str, RuleSeries]
    beam_misses: tuple[BeamMisses, ...] = ()
    rejected: tuple[RejectedRow, ...] = ()
    inputs: tuple[InputFile, ...] = ()
    assumptions: tuple[Assumption, ...] = ()
    limit_ranges: dict[str, tuple[float, float]] = field(default_factory=dict)
