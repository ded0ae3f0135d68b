"""What a re-run mended: two audits laid over each other by position, since a re-run has a new name."""

from __future__ import annotations

import json
import math
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, Literal

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
from numpy.typing import NDArray

from qa.model.errors import InputError
from qa.model.json_text import json_text
from qa.model.log import Floats
from qa.report import numbers, pages, tracks
from qa.report.files import write_text
from qa.report.tracks import EARTH, Track
from qa.report.words import word

Outcome = Literal["mended", "remains", "unassessed", "uncovered", "unmatched"]
OUTCOMES: tuple[Outcome, ...] = ("remains", "uncovered", "unassessed", "unmatched", "mended")
"""In the order in which they matter: a section has the first that holds for any of its ground."""
WITHIN = 10.0
MOST_POINTS = 200
_MET, _MISSED, _UNKNOWN = 3, 2, 1


@dataclass(frozen=True, slots=True)
class Ground:
    """Every ping of an audit that has a position: metres on a local plane, or on the log's grid.

    ``status`` and ``value`` are by rule; ``status`` is 3 where met, 2 where missed, 1 where not assessed.
    """

    line: NDArray[np.int64]
    channel: NDArray[np.int64]
    index: NDArray[np.int64]
    x: Floats
    y: Floats
    lines: tuple[str, ...]
    channels: tuple[str, ...]
    status: Mapping[str, NDArray[np.int8]]
    value: Mapping[str, Floats]
    geographic: bool


@dataclass(frozen=True, slots=True)
class Matched:
    """A section out of spec before, and what the later audit has at its place. Shares are of its ground."""

    section: Mapping[str, Any]
    outcome: Outcome
    shares: Mapping[str, float]
    after_lines: tuple[str, ...] = ()
    worst_after: float | None = None
    x: Floats = field(default_factory=lambda: np.empty(0))
    y: Floats = field(default_factory=lambda: np.empty(0))
    states: NDArray[np.int8] = field(default_factory=lambda: np.empty(0, np.int8))


@dataclass(frozen=True, slots=True)
class Comparison:
    """Two audits compared: sections before by outcome, sections that are new, what makes the two unlike."""

    name: str
    within: float
    matched: tuple[Matched, ...]
    new: tuple[Mapping[str, Any], ...]
    notes: tuple[str, ...]

    def count(self, outcome: str) -> int:
        """How many sections came out so."""
        return sum(m.outcome == outcome for m in self.matched)

    def headline(self) -> str:
        """The comparison in a sentence or two."""
        new = word("compare.new_count", n=len(self.new))
        if not self.matched:
            return f"{word('compare.none')} {new}"
        parts = [
            word(f"compare.count_{o}", n=self.count(o))
            for o in ("mended", "remains", "uncovered", "unassessed", "unmatched")
            if self.count(o) or o in ("mended", "remains")
        ]
        return f"{word('compare.headline', n=len(self.matched), parts=', '.join(parts))} {new}"

    def to_dict(self) -> dict[str, Any]:
        """The content of ``compare.json``."""
        keys = ("id", "line", "channel", "rule", "start", "end", "first_ping", "last_ping")
        return {
            "tool": "pingworthy",
            "within_metres": self.within,
            "counts": {o: self.count(o) for o in OUTCOMES},
            "sections": [
                {
                    **{k: m.section[k] for k in keys},
                    "outcome": m.outcome,
                    "shares": dict(m.shares),
                    "after_lines": list(m.after_lines),
                    "worst_before": m.section["worst"],
                    "worst_after": m.worst_after,
                    "limit": m.section["limit"],
                    "unit": m.section["unit"],
                }
                for m in self.matched
            ],
            "new": [{k: s[k] for k in keys} for s in self.new],
            "notes": list(self.notes),
        }


def compare_audits(
    before: str | Path, after: str | Path, out: str | Path | None = None, within: float = WITHIN
) -> Comparison:
    """Compare two audits' folders.

    Parameters
    ----------
    before, after : path
        Folders that audits wrote.
    out : path, optional
        Where ``compare.html`` and ``compare.json`` go; nothing is written without it.
    within : float
        How near a ping of the later audit must lie to count as the same ground. [m]

    Returns
    -------
    Comparison

    Raises
    ------
    InputError
        If a folder holds no audit.
    """
    folders = Path(before), Path(after)
    old, new = (_read_findings(folder) for folder in folders)
    rules = {s["rule"] for found in (old, new) for s in found["sections"] if _fails(s)}
    origin = _origin(folders)
    grounds = [_read_ground(folder, rules, origin) for folder in folders]
    result = compare(old, new, grounds[0], grounds[1], within)
    if out is not None:
        target = Path(out)
        target.mkdir(parents=True, exist_ok=True)
        write_text(target / "compare.json", json_text(result.to_dict()))
        write_text(target / "compare.html", page(result, old, new))
    return result


def compare(
    before: Mapping[str, Any],
    after: Mapping[str, Any],
    ground_before: Ground | None,
    ground_after: Ground | None,
    within: float = WITHIN,
) -> Comparison:
    """Compare two audits' findings by place.

    Ground is mended where one run of the later audit, with all its channels, meets the rule there.
    A line farther off than ``within`` counts for nothing.

    Parameters
    ----------
    before, after : mapping
        What ``findings.json`` holds.
    ground_before, ground_after : Ground or None
        Where their pings lie; None where they have no positions.
    within : float
        How near is the same ground. [m]
    """
    if (
        ground_before is None
        or ground_after is None
        or ground_before.geographic != ground_after.geographic
    ):
        ground_before = ground_after = None
    old = [s for s in before["sections"] if _fails(s)]
    new = [s for s in after["sections"] if _fails(s)]
    same = {_log_place(s) for s in new}
    matched = []
    forth = None if ground_after is None else _Search(ground_after, within)
    for section in old:
        found = _looked_up(section, ground_before, forth)
        if found is None:
            outcome: Outcome = "remains" if _log_place(section) in same else "unmatched"
            found = Matched(section, outcome, {})
        matched.append(found)
    known = {_log_place(s) for s in old}
    back = None if ground_before is None else _Search(ground_before, within)
    fresh = []
    for section in new:
        found = _looked_up(section, ground_after, back)
        # At fault before at the same place: that is the remainder of the old section, not a new one.
        if _log_place(section) not in known and not (found and found.shares["remains"] > 0):
            fresh.append(section)
    name = str(after["survey"].get("name") or before["survey"].get("name") or "")
    return Comparison(name, within, tuple(matched), tuple(fresh), tuple(_notes(before, after)))


def _fails(section: Mapping[str, Any]) -> bool:
    return section["severity"] == "out of spec" and not section.get("within_allowance", False)


def _log_place(section: Mapping[str, Any]) -> tuple[Any, ...]:
    """What tells the same section of the same log, audited twice."""
    return tuple(section[k] for k in ("line", "channel", "rule", "start", "end"))


def _notes(before: Mapping[str, Any], after: Mapping[str, Any]) -> Iterable[str]:
    if before["sheet"].get("sha256") != after["sheet"].get("sha256"):
        yield word("compare.sheets")
    limits = [{x["name"]: x["text"] for x in found["limits"]} for found in (before, after)]
    names = sorted(k for k in {*limits[0], *limits[1]} if limits[0].get(k) != limits[1].get(k))
    if names:
        yield word("compare.limits", names=", ".join(names))


class _Search:
    """Pings near a place, found by squares of the plane."""

    def __init__(self, ground: Ground, within: float) -> None:
        self.ground, self.within = ground, within
        column = np.floor(ground.x / within).astype(np.int64)
        row = np.floor(ground.y / within).astype(np.int64)
        self.order = np.lexsort((column, row))
        self.keys = self._key(row[self.order], column[self.order])

    @staticmethod
    def _key(row: Any, column: Any) -> Any:
        return np.asarray(row, np.int64) * (1 << 31) + np.asarray(column, np.int64)

    def near(self, x: float, y: float) -> NDArray[np.int64]:
        """Rows of the ground no farther from a place than ``within``, the nearest first."""
        column, row = math.floor(x / self.within), math.floor(y / self.within)
        found = []
        for r in (row - 1, row, row + 1):
            start = np.searchsorted(self.keys, self._key(r, column - 1))
            stop = np.searchsorted(self.keys, self._key(r, column + 1), side="right")
            found.append(self.order[start:stop])
        rows = np.concatenate(found)
        apart = np.hypot(self.ground.x[rows] - x, self.ground.y[rows] - y)
        close = apart <= self.within
        return np.asarray(rows[close][np.argsort(apart[close], kind="stable")], np.int64)


def _looked_up(
    section: Mapping[str, Any], own: Ground | None, search: _Search | None
) -> Matched | None:
    """What the other audit has at a section's places; None where the section has none."""
    if own is None or search is None:
        return None
    rows = _rows(own, section)
    return _match(section, own.x[rows], own.y[rows], search) if len(rows) else None


def _rows(ground: Ground, section: Mapping[str, Any]) -> NDArray[np.int64]:
    """A section's pings, thinned evenly, its ends kept."""
    if section["line"] not in ground.lines or section["channel"] not in ground.channels:
        return np.empty(0, np.int64)
    own = (ground.line == ground.lines.index(section["line"])) & (
        ground.channel == ground.channels.index(section["channel"])
    )
    within = (ground.index >= section["first_index"]) & (ground.index <= section["last_index"])
    rows = np.flatnonzero(own & within)
    if len(rows) > MOST_POINTS:
        rows = rows[np.unique(np.linspace(0, len(rows) - 1, MOST_POINTS).round().astype(np.int64))]
    return rows


def _match(section: Mapping[str, Any], x: Floats, y: Floats, search: _Search) -> Matched:
    """At each place a run counts by the nearest ping of each of its channels, the worst of them; the best run counts."""
    ground = search.ground
    status = ground.status.get(section["rule"], np.full(len(ground.x), _UNKNOWN, np.int8))
    states = np.zeros(len(x), np.int8)
    taken: list[int] = []
    for n, (px, py) in enumerate(zip(x.tolist(), y.tolist(), strict=True)):
        near = search.near(px, py)
        _, firsts = np.unique(
            ground.line[near] * (1 << 20) + ground.channel[near], return_index=True
        )
        nearest = near[firsts]
        runs = ground.line[nearest]
        chosen = nearest[:0]
        for run in np.unique(runs):
            own = status[nearest[runs == run]]
            worst = _MISSED if (own == _MISSED).any() else int(own.min())
            if worst > states[n]:
                states[n], chosen = worst, nearest[runs == run]
        taken += chosen.tolist()
    shares = {
        "mended": float((states == _MET).mean()),
        "remains": float((states == _MISSED).mean()),
        "unassessed": float((states == _UNKNOWN).mean()),
        "uncovered": float((states == 0).mean()),
    }
    outcome: Outcome = next((o for o in OUTCOMES if shares.get(o, 0.0) > 0), "mended")
    lines = tuple(ground.lines[n] for n in np.unique(ground.line[taken]).tolist()) if taken else ()
    return Matched(section, outcome, shares, lines, _worst(section, ground, taken), x, y, states)


def _worst(section: Mapping[str, Any], ground: Ground, rows: Sequence[int]) -> float | None:
    """The worst value of some pings, on the side of the limit on which the section was worst."""
    values = ground.value.get(section["rule"])
    if values is None or not rows or section["worst"] is None or section["limit"] is None:
        return None
    known = values[rows]
    known = known[np.isfinite(known)]
    if not len(known):
        return None
    return float(known.max() if section["worst"] > section["limit"] else known.min())


# Reading


def _read_findings(folder: Path) -> dict[str, Any]:
    try:
        found = json.loads((folder / "findings.json").read_text(encoding="utf-8"))
        complete = found["tool"]["name"] == "pingworthy" and isinstance(found["sections"], list)
    except (OSError, ValueError, KeyError, TypeError):
        complete = False
    if not complete:
        raise InputError(
            "This folder holds no audit.",
            where=str(folder),
            expected="a folder that the audit command wrote, with its findings.json and pings.parquet",
        )
    return dict(found)


def _table(folder: Path, wanted: Iterable[str]) -> pa.Table | None:
    path = folder / "pings.parquet"
    if not path.is_file():
        return None
    try:
        have = pq.read_schema(path).names
        return pq.read_table(path, columns=[n for n in wanted if n in have])
    except (OSError, pa.ArrowException) as error:
        raise InputError("The pings cannot be read.", where=str(path), found=str(error)) from None


def _floats(table: pa.Table, name: str) -> Floats:
    return np.asarray(table[name].to_numpy(zero_copy_only=False), dtype=np.float64)


def _origin(folders: Sequence[Path]) -> tuple[float, float] | None:
    """A longitude and a latitude amid the audits: one plane serves both."""
    for folder in folders:
        table = _table(folder, ("longitude", "latitude"))
        if table is not None and {"longitude", "latitude"} <= set(table.column_names):
            x, y = _floats(table, "longitude"), _floats(table, "latitude")
            known = np.isfinite(x) & np.isfinite(y)
            if known.any():
                return float(x[known][0]), float(np.median(y[known]))
    return None


def _read_ground(
    folder: Path, rules: Iterable[str], origin: tuple[float, float] | None
) -> Ground | None:
    rules = sorted(rules)
    names = ["line", "channel", "index", "longitude", "latitude", "easting", "northing"]
    names += [f"{rule}: {side}" for rule in rules for side in ("verdict", "value")]
    table = _table(folder, names)
    have = set() if table is None else set(table.column_names)
    if table is None or not ({"longitude", "latitude"} <= have or {"easting", "northing"} <= have):
        return None
    geographic = origin is not None and {"longitude", "latitude"} <= have
    if origin is not None and geographic:
        metres = math.radians(1.0) * EARTH
        turn = (_floats(table, "longitude") - origin[0] + 180.0) % 360.0 - 180.0
        x = turn * metres * math.cos(math.radians(origin[1]))
        y = (_floats(table, "latitude") - origin[1]) * metres
    elif {"easting", "northing"} <= have:
        x, y = _floats(table, "easting"), _floats(table, "northing")
    else:
        return None
    known = np.flatnonzero(np.isfinite(x) & np.isfinite(y))
    line, lines = _coded(table["line"])
    channel, channels = _coded(table["channel"])
    status, value = {}, {}
    levels = {"met": _MET, "missed": _MISSED}
    for rule in rules:
        if f"{rule}: verdict" in have:
            codes, words = _coded(table[f"{rule}: verdict"])
            # The last stands for the code −1, where a line lacks the rule.
            ranks = np.array([*(levels.get(w, _UNKNOWN) for w in words), _UNKNOWN], np.int8)
            status[rule] = ranks[codes][known]
        if f"{rule}: value" in have:
            value[rule] = _floats(table, f"{rule}: value")[known]
    index = np.asarray(table["index"].to_numpy(), np.int64)
    return Ground(
        line[known],
        channel[known],
        index[known],
        x[known],
        y[known],
        lines,
        channels,
        status,
        value,
        geographic,
    )


def _coded(column: pa.ChunkedArray) -> tuple[NDArray[np.int64], tuple[str, ...]]:
    """Codes and words of a text column; a null has the code −1."""
    coded = pa.concat_arrays(column.cast(pa.string()).chunks).dictionary_encode()
    codes = np.asarray(coded.indices.fill_null(-1).to_numpy(zero_copy_only=False), np.int64)
    return codes, tuple(str(w) for w in coded.dictionary.to_pylist())


# Writing


def page(result: Comparison, before: Mapping[str, Any], after: Mapping[str, Any]) -> str:
    """``compare.html``."""
    titles = {r["id"]: r["title"] or r["id"] for found in (after, before) for r in found["rules"]}
    rows = sorted(result.matched, key=lambda m: OUTCOMES.index(m.outcome))
    shown = [
        (m, *numbers.against(m.section["worst"], m.section["limit"], m.section["unit"]))
        for m in rows
    ]
    return pages.render(
        "compare.html.jinja",
        result=result,
        rows=shown,
        titles=titles,
        figure=_chart(result),
        quantity=numbers.quantity,
        moment=numbers.moment,
    )


def _chart(result: Comparison) -> dict[str, Any] | None:
    level = np.array([tracks.UNKNOWN, tracks.ADVISED, tracks.OUT, tracks.CLEAR], np.int8)
    drawn = [
        (m.section["line"], Track(m.x, m.y, level[m.states], False))
        for m in result.matched
        if len(m.x)
    ]
    figure = tracks.chart(drawn, "compare-map", word("compare.map"), words="compare")
    return pages.prepared({**figure, "data": []} if figure else None)


def summary(result: Comparison) -> str:
    """The short text that the command prints."""
    rows = [result.headline(), *result.notes]
    for m in result.matched:
        if m.outcome != "mended":
            rows.append(f"  {_told(m.section)}: {word(f'compare.{m.outcome}')}")
    rows += [f"  {_told(s)}: {word('compare.new')}" for s in result.new]
    return "\n".join(rows).replace(numbers.THIN, "").replace(numbers.MINUS, "-")


def _told(section: Mapping[str, Any]) -> str:
    pings = word("sections.ping_span", first=section["first_ping"], last=section["last_ping"])
    return f"{section['line'][:60]}, {section['rule']}, {pings}"
