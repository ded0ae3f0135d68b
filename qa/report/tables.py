"""``sections.csv``, ``rejected.csv`` and ``rerun.geojson``."""

from __future__ import annotations

import csv
from collections.abc import Iterable, Mapping
from pathlib import Path
from typing import Any

from qa.model.findings import Findings, Section
from qa.model.json_text import json_text
from qa.model.log import RejectedRow
from qa.report.conclusions import fails
from qa.report.files import write_text
from qa.report.tracks import Places

SECTION_COLUMNS = (
    *("line", "channel", "rule", "severity", "start", "end", "first_ping", "last_ping"),
    *("first_index", "last_index", "pings", "pings_missed", "share", "worst", "limit", "unit"),
    *("margin", "worst_ping", "within_allowance", "length", "duration"),
    *("start_latitude", "start_longitude", "end_latitude", "end_longitude", "reason", "remedy"),
)
_FORMULA_STARTS = ("=", "+", "-", "@", "\t", "\r", "\n", "＝", "＋", "－", "＠")


def safe_cell(value: Any) -> Any:
    """A text that a spreadsheet takes for text: one that would begin a formula gets an apostrophe before it.

    Examples
    --------
    >>> safe_cell("=cmd"), safe_cell(-1.5), safe_cell(" =1")
    ("'=cmd", -1.5, "' =1")
    """
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, str) and value.lstrip(" \u00a0\ufeff").startswith(_FORMULA_STARTS):
        return "'" + value
    return value


def write_sections(findings: Findings, path: Path) -> None:
    """Every section, one a row; empty where not known."""
    with _opened(path) as stream:
        writer = csv.writer(stream, lineterminator="\r\n")
        writer.writerow(SECTION_COLUMNS)
        for section in findings.sections:
            writer.writerow([safe_cell(getattr(section, name)) for name in SECTION_COLUMNS])


def write_rejected(rejected: Iterable[RejectedRow], path: Path) -> None:
    """Rows that could not be used: which file, which row, why, and the row itself."""
    with _opened(path) as stream:
        writer = csv.writer(stream, lineterminator="\r\n")
        writer.writerow(("file", "row", "reason", "text"))
        for row in rejected:
            writer.writerow([safe_cell(v) for v in (row.path, row.row, row.reason, row.text)])


def _opened(path: Path) -> Any:
    # No mark at the start: programs that read the first column by its name would stumble over it.
    return path.open("w", encoding="utf-8", errors="replace", newline="")


def write_rerun(findings: Findings, places: Mapping[str, Places], path: Path) -> bool:
    """The stretches to run again as GeoJSON (RFC 7946); no file where no position is known."""
    features = []
    positioned = False
    for section in findings.sections:
        along = places.get(section.id) or _ends(section)
        positioned = positioned or bool(along)
        if along and fails(section):
            features.append(_feature(section, along))
    if not positioned and not any(places.values()):
        return False
    collection = {"type": "FeatureCollection", "features": features}
    write_text(path, json_text(collection))
    return True


def _ends(section: Section) -> Places:
    ends = (
        (section.start_longitude, section.start_latitude),
        (section.end_longitude, section.end_latitude),
    )
    return [(x, y) for x, y in ends if x is not None and y is not None]


def _feature(section: Section, along: Places) -> dict[str, Any]:
    names = (
        *("id", "line", "channel", "rule", "severity", "start", "end", "first_ping", "last_ping"),
        *("pings", "worst", "limit", "unit", "length", "duration", "reason", "remedy"),
    )
    return {
        "type": "Feature",
        "properties": {name: getattr(section, name) for name in names},
        "geometry": geometry(along),
    }


def geometry(along: Places) -> dict[str, Any]:
    """A line along positions, cut where it crosses the 180th meridian, as the standard asks.

    Examples
    --------
    >>> geometry([(179.0, 0.0), (-179.0, 2.0)])["coordinates"]
    [[[179.0, 0.0], [180.0, 1.0]], [[-180.0, 1.0], [-179.0, 2.0]]]
    >>> geometry([(3.0, 54.0), (3.0, 54.0)])
    {'type': 'Point', 'coordinates': [3.0, 54.0]}
    """
    parts: list[list[list[float]]] = [[]]
    for x, y in along:
        x = round((x + 180.0) % 360.0 - 180.0, 7)
        y = round(y, 7)
        part = parts[-1]
        if part and abs(x - part[-1][0]) > 180.0:
            edge = 180.0 if part[-1][0] > 0 else -180.0
            # Unwrapped, the far point lies beyond the edge; the crossing is where the line meets it.
            far = x + 360.0 if edge > 0 else x - 360.0
            share = (edge - part[-1][0]) / (far - part[-1][0])
            crossing = round(part[-1][1] + share * (y - part[-1][1]), 7)
            if part[-1] != [edge, crossing]:
                part.append([edge, crossing])
            parts.append([[-edge, crossing]])
            part = parts[-1]
        if not part or part[-1] != [x, y]:
            part.append([x, y])
    kept = [p for p in parts if len(p) > 1]
    if not kept:
        return {"type": "Point", "coordinates": parts[-1][-1]}
    if len(kept) == 1:
        return {"type": "LineString", "coordinates": kept[0]}
    return {"type": "MultiLineString", "coordinates": kept}
