"""A line along time: panels one above the other on one axis, with its spans and its settings."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from qa.model.findings import EXEMPT, MISSED, NOT_ASSESSED, LineResult, RuleSeries, Section
from qa.model.log import Floats
from qa.model.units import readable
from qa.report import drawing, numbers
from qa.report.drawing import Drawing, Scale
from qa.report.words import known, word

LEFT, RIGHT, HEIGHT, GAP = 66, 168, 96, 30
ROW = 17
MOST_PANELS = 14
MOST_ROWS = 18
MOST_CHANGES = 60
UNASSESSED = "hatch-unassessed"
SETTINGS = (
    *("pulse_length", "range_scale", "frequency", "bandwidth", "source_level", "gain"),
    *("beamwidth_along", "beamwidth_across", "transducer_depth"),
)
DEPTHS = ("depth", "nearest_vertical(depth)", "least(depth)", "greatest(depth)")
ALTITUDES = ("altitude", "height", "nearest_vertical(height)")


@dataclass(frozen=True, slots=True)
class Series:
    """One curve: ``role`` is "value", "second", "third", "fourth" or "limit"."""

    name: str
    values: Floats
    role: str


@dataclass(frozen=True, slots=True)
class Panel:
    """Curves that share a unit, and the rules that judge them."""

    key: str
    title: str
    unit: str
    series: tuple[Series, ...]
    rules: tuple[str, ...] = ()
    downwards: bool = False


@dataclass(frozen=True, slots=True)
class Change:
    """A setting that changed within a channel."""

    row: int
    text: str


def rule_title(identity: str) -> str:
    """What a curve of a rule's own values is called."""
    key = f"rule.{identity}"
    return word(key) if known(key) else identity.replace("-", " ").capitalize()


def quantity_title(name: str) -> str:
    """What a quantity is called."""
    key = f"quantity.{name}"
    return word(key) if known(key) else name.replace("_", " ").capitalize()


def first_of(result: LineResult, names: Sequence[str]) -> Floats | None:
    """The first of some columns that holds any value."""
    for name in names:
        values = result.columns.get(name)
        if values is not None and np.isfinite(values).any():
            return values
    return None


def changes(result: LineResult) -> list[Change]:
    """Settings that changed from one ping to the next of a channel."""
    found = []
    for name in SETTINGS:
        values = result.columns.get(name)
        if values is None:
            continue
        for _, start, stop in result.channels:
            part = values[start:stop]
            rows = np.flatnonzero(np.isfinite(part))
            kept = part[rows]
            for at in np.flatnonzero(kept[1:] != kept[:-1]).tolist():
                unit = result.units.get(name, "1")
                before, after = readable(kept[at], unit), readable(kept[at + 1], unit)
                if before != after:
                    text = word(
                        "panel.change", name=quantity_title(name), before=before, after=after
                    )
                    found.append(Change(start + int(rows[at + 1]), text))
    # Two sides that change together are one change.
    once = {(int(result.time[c.row]), c.text): c for c in reversed(found)}
    return [once[key] for key in sorted(once)]


def panels(result: LineResult) -> list[Panel]:
    """Which panels a line has: the fixed ones that have values, then any other rule that was missed."""
    made = [_depth(result), _timing(result), _resolution(result), _spacing(result), _hits(result)]
    kept = [p for p in made if p is not None and p.series]
    shown = {rule for p in kept for rule in p.rules}
    for identity, series in result.rules.items():
        missed = bool((series.status == MISSED).any())
        if identity not in shown and missed and np.isfinite(series.value).any():
            kept.append(_ruled(identity, series))
    margin = _margin(result)
    return [*kept[: MOST_PANELS - 1], *([margin] if margin else [])]


def _depth(result: LineResult) -> Panel | None:
    depth, altitude = first_of(result, DEPTHS), first_of(result, ALTITUDES)
    series = []
    if depth is not None:
        series.append(Series(quantity_title("depth"), depth, "value"))
    if altitude is not None and (depth is None or result.finding.kind == "side-scan"):
        role = "second" if series else "value"
        series.append(Series(quantity_title("altitude"), altitude, role))
    return Panel(
        "depth", word("panel.depth"), "m", tuple(series), ("bottom-track", "depth-spike"), True
    )


def _column_or(result: LineResult, name: str, rule: str, side: str) -> Floats | None:
    values = first_of(result, (name,))
    if values is None and rule in result.rules:
        values = getattr(result.rules[rule], side)
    return values if values is not None and np.isfinite(values).any() else None


def _made(*candidates: tuple[str, Floats | None, str]) -> tuple[Series, ...]:
    return tuple(
        Series(name, values, role) for name, values, role in candidates if values is not None
    )


def _timing(result: LineResult) -> Panel | None:
    interval = first_of(result, ("ping_interval",))
    span = _column_or(result, "ping_span", "ping-interval", "value")
    if interval is not None and span is not None and np.array_equal(interval, span, equal_nan=True):
        span = None
    if interval is None and span is None:
        return None
    return Panel(
        "timing",
        word("panel.timing"),
        "s",
        _made(
            (quantity_title("ping_interval"), interval, "value"),
            (quantity_title("ping_span"), span, "second" if interval is not None else "value"),
            (
                quantity_title("listening_time"),
                _column_or(result, "listening_time", "ping-interval", "limit"),
                "limit",
            ),
            (
                quantity_title("bottom_travel_time"),
                _column_or(result, "bottom_travel_time", "echo-in-time", "value"),
                "third",
            ),
        ),
        ("ping-interval", "echo-in-time", "ping-gap", "ping-pace", "clock"),
    )


def _rule_value(result: LineResult, rule: str) -> Floats | None:
    series = result.rules.get(rule)
    return series.value if series is not None and np.isfinite(series.value).any() else None


def _resolution(result: LineResult) -> Panel | None:
    rules = ("range-resolution", "across-resolution", "along-resolution", "footprint-growth")
    curves = _made(
        (rule_title(rules[0]), _column_or(result, "range_resolution", rules[0], "value"), "value"),
        (rule_title(rules[1]), _rule_value(result, rules[1]), "second"),
        (rule_title(rules[2]), _rule_value(result, rules[2]), "third"),
        (rule_title(rules[3]), _column_or(result, "footprint", rules[3], "value"), "fourth"),
    )
    if not curves:
        return None
    curves += _limits(result, rules)
    return Panel("resolution", word("panel.resolution"), "m", curves, rules)


def _limits(result: LineResult, rules: Sequence[str]) -> tuple[Series, ...]:
    """The rules' limits, once where they agree."""
    distinct: list[tuple[str, Floats]] = []
    for rule in rules:
        series = result.rules.get(rule)
        if series is None or not np.isfinite(series.limit).any():
            continue
        if not any(np.array_equal(series.limit, other, equal_nan=True) for _, other in distinct):
            distinct.append((rule, series.limit))
    if len(distinct) == 1:
        return (Series(word("panel.limit"), distinct[0][1], "limit"),)
    return tuple(
        Series(word("panel.limit_of", name=rule_title(rule)), limit, "limit")
        for rule, limit in distinct
    )


def _spacing(result: LineResult) -> Panel | None:
    spacing = _column_or(result, "ping_spacing", "ping-spacing", "value")
    if spacing is None:
        return None
    limit = result.rules["ping-spacing"].limit if "ping-spacing" in result.rules else None
    if limit is not None and not np.isfinite(limit).any():
        limit = None
    curves = _made(
        (quantity_title("ping_spacing"), spacing, "value"),
        (word("panel.footprint"), limit, "limit"),
    )
    return Panel("spacing", word("panel.spacing"), "m", curves, ("ping-spacing",))


def _hits(result: LineResult) -> Panel | None:
    hits = _column_or(result, "guaranteed_hits", "pings-on-target", "value")
    if hits is None:
        return None
    limit = result.rules["pings-on-target"].limit if "pings-on-target" in result.rules else None
    if limit is not None and not np.isfinite(limit).any():
        limit = None
    curves = _made(
        (quantity_title("guaranteed_hits"), hits, "value"), (word("panel.required"), limit, "limit")
    )
    return Panel("hits", word("panel.hits"), "1", curves, ("pings-on-target",))


def _ruled(identity: str, series: RuleSeries) -> Panel:
    limit = series.limit if np.isfinite(series.limit).any() else None
    title = rule_title(identity)
    curves = _made(
        (word("panel.value"), series.value, "value"), (word("panel.limit"), limit, "limit")
    )
    return Panel(f"rule-{identity}", title, series.unit, curves, (identity,))


def _margin(result: LineResult) -> Panel | None:
    severe = {r.id for r in result.finding.rules if r.severity == "out of spec"}
    margins = [
        np.where(s.status == EXEMPT, np.nan, s.margin)
        for identity, s in result.rules.items()
        if identity in severe and np.isfinite(s.margin).any()
    ]
    if not margins:
        return None
    least = np.fmin.reduce(margins)
    shown = 100 * np.clip(least, -1.0, 1.0)
    zero = np.where(np.isfinite(shown), 0.0, np.nan)
    curves = _made(
        (word("panel.least_margin"), shown, "value"), (word("panel.limit"), zero, "limit")
    )
    return Panel("margin", word("panel.margin"), "%", curves)


class TimeAxis:
    """The one axis that a line's panels share; a stray clock stamp does not stretch it."""

    def __init__(self, time: np.ndarray[Any, np.dtype[np.int64]]) -> None:
        first, last = int(time.min()), int(time.max())
        early, late = (int(t) for t in np.quantile(time, [0.01, 0.99]).astype(np.int64))
        room = max(late - early, 1_000_000_000)
        self.first = first if early - first <= 3 * room else early - room // 20
        self.last = last if last - late <= 3 * room else late + room // 20
        self.cut = self.first != first or self.last != last
        self.origin = self.first
        self.scale = Scale(0.0, float(self.last - self.first), LEFT, drawing.WIDTH - RIGHT)

    def places(self, time: np.ndarray[Any, np.dtype[np.int64]]) -> Floats:
        """Where times lie; NaN for those beyond the axis."""
        x = np.asarray(self.scale((time - self.origin).astype(float)), dtype=float)
        x = np.broadcast_to(x, time.shape).copy()
        x[(time < self.first) | (time > self.last)] = np.nan
        return x

    def marks(self) -> list[tuple[float, str]]:
        """Ticks: places as nanoseconds from the origin, and labels."""
        return [
            (float(t - self.origin), text) for t, text in drawing.time_ticks(self.first, self.last)
        ]


def runs(mask: np.ndarray[Any, np.dtype[np.bool_]]) -> list[tuple[int, int]]:
    """First and last rows of each run of true values.

    Examples
    --------
    >>> runs(np.array([True, True, False, True]))
    [(0, 1), (3, 3)]
    """
    padded = np.concatenate([[False], mask, [False]]).astype(np.int8)
    edges = np.diff(padded)
    starts, stops = np.flatnonzero(edges == 1), np.flatnonzero(edges == -1) - 1
    return list(zip(starts.tolist(), stops.tolist(), strict=True))


def _value_scale(panel: Panel, top: float) -> tuple[Scale, float, str, bool]:
    """The panel's own axis: its scale (of values times the factor), factor, unit, whether logarithmic."""
    known_values = np.concatenate([s.values[np.isfinite(s.values)] for s in panel.series])
    if not len(known_values):
        known_values = np.zeros(1)
    least, greatest = float(known_values.min()), float(known_values.max())
    middle = float(np.median(np.abs(known_values)))
    factor, unit = numbers.axis_unit(
        min(abs(greatest) or middle, 4 * middle or abs(greatest)), panel.unit
    )
    logarithmic = least >= 0 and middle > 0 and greatest > 25 * middle
    if logarithmic:
        positive = known_values[known_values > 0]
        low = max(float(positive.min()), middle / 1e3)
        bounds = float(np.log10(low * factor)), float(np.log10(greatest * factor))
    else:
        bounds = least * factor, greatest * factor
        if panel.key in ("timing", "spacing", "hits") and bounds[0] >= 0:
            bounds = 0.0, bounds[1]
    room = 0.06 * (bounds[1] - bounds[0]) or abs(bounds[1]) * 0.1 or 1.0
    low_edge = 0.0 if bounds[0] == 0.0 and not logarithmic else bounds[0] - room
    start, stop = (top, top + HEIGHT) if panel.downwards else (top + HEIGHT, top)
    return Scale(low_edge, bounds[1] + room, start, stop), factor, unit, logarithmic


def _heights(values: Floats, scale: Scale, factor: float, logarithmic: bool) -> Floats:
    scaled = values * factor
    if logarithmic:
        with np.errstate(divide="ignore", invalid="ignore"):
            scaled = np.log10(np.maximum(scaled, 10.0**scale.least))
    return np.asarray(scale(scaled), dtype=float)


def pattern_of(result: LineResult) -> dict[str, int]:
    """A hatch for each rule that made sections, the same on every panel of the line."""
    with_sections = {s.rule for s in result.sections}
    ordered = [r.id for r in result.finding.rules if r.id in with_sections]
    ordered += sorted(with_sections - set(ordered))
    return {rule: n % drawing.PATTERNS for n, rule in enumerate(ordered)}


def section_rows(result: LineResult, section: Section) -> tuple[int, int] | None:
    """Rows of the line's table that a section covers."""
    for name, start, stop in result.channels:
        if name == section.channel:
            first, last = start + section.first_index, start + section.last_index
            return (first, last) if start <= first <= last < stop else None
    return None


def track_time(result: LineResult, identity: str) -> dict[str, Any] | None:
    """The figure: its SVG, text alternative and data.

    Parameters
    ----------
    result : LineResult
        The line.
    identity : str
        What the element's ids begin with; unique in the report.

    Returns
    -------
    dict or None
        None where the line has no ping.
    """
    if not len(result.time):
        return None
    axis = TimeAxis(result.time)
    x = axis.places(result.time)
    made = panels(result)
    patterns = pattern_of(result)
    spans = _section_spans(result, x)
    rows = _strip_rows(result, patterns)
    changed = changes(result)
    strips = ROW * (len(rows) + (1 if changed else 0)) + (26 if rows or changed else 0)
    total = 18 + len(made) * (HEIGHT + GAP) + strips + 34
    sheet = Drawing(drawing.WIDTH, total)
    right = drawing.WIDTH - RIGHT
    top = 18.0
    data: list[dict[str, Any]] = []
    sentences: list[str] = []
    for panel in made:
        _panel(sheet, result, panel, axis, x, top, spans, patterns, data, sentences)
        top += HEIGHT + GAP
    if rows or changed:
        sheet.text(LEFT, top - 2, word("panel.strip"), "panel-title")
        top += 8
    for rule, channel in rows:
        _strip(sheet, result, rule, channel, x, top, patterns, spans)
        top += ROW
    if changed:
        _change_row(sheet, changed, x, top)
        top += ROW
    for tick, label in axis.marks():
        place = float(axis.scale(tick))
        sheet.line(place, top - 4, place, top, "edge")
        sheet.text(place, top + 15, label, "tick", "middle")
    day = numbers.iso(axis.first)[:10]
    sheet.text(0.5 * (LEFT + right), top + 31, word("panel.time", day=day), "axis", "middle")
    if axis.cut:
        sentences.append(word("panel.cut"))
    title = word("panel.title", line=drawing.clipped(result.finding.line))
    return {
        "id": identity,
        "kind": "panels",
        "title": title,
        "text": " ".join(sentences),
        "svg": sheet.svg(identity, title, " ".join(sentences)),
        "data": data,
        "origin_ms": axis.origin // 1_000_000,
        "changes": [
            [numbers.iso(int(result.time[c.row])), int(result.ping[c.row]), c.text]
            for c in changed[:MOST_CHANGES]
        ],
        "changes_total": len(changed),
        "legend": [[patterns[rule], rule] for rule in patterns],
    }


def _section_spans(result: LineResult, x: Floats) -> list[tuple[Section, float, float]]:
    found = []
    for section in result.sections:
        rows = section_rows(result, section)
        if rows is None:
            continue
        part = x[rows[0] : rows[1] + 1]
        part = part[np.isfinite(part)]
        if len(part):
            found.append((section, float(part.min()), float(part.max())))
    return found


def _panel(
    sheet: Drawing,
    result: LineResult,
    panel: Panel,
    axis: TimeAxis,
    x: Floats,
    top: float,
    spans: Sequence[tuple[Section, float, float]],
    patterns: dict[str, int],
    data: list[dict[str, Any]],
    sentences: list[str],
) -> None:
    right = drawing.WIDTH - RIGHT
    scale, factor, unit, logarithmic = _value_scale(panel, top)
    heading = panel.title + (f" ({unit})" if unit else "")
    sheet.text(LEFT, top - 6, heading + (word("panel.log") if logarithmic else ""), "panel-title")
    _unassessed(sheet, result, panel, x, top)
    own = set(panel.rules)
    for rule in patterns:
        of_rule = [
            (a, b)
            for s, a, b in spans
            if s.rule == rule and (s.severity == "out of spec" or rule in own)
        ]
        kind = "span own" if rule in own else "span"
        for a, b in drawing.joined(of_rule):
            sheet.box(a, top, b - a, HEIGHT, kind, rule_title(rule), f"hatch-{patterns[rule]}")
    if logarithmic:
        for power in range(int(np.ceil(scale.least)), int(np.floor(scale.greatest)) + 1):
            y = float(scale(power))
            sheet.line(LEFT, y, right, y, "grid")
            sheet.text(LEFT - 6, y + 4, drawing.tick_label(10.0**power), "tick", "end")
    else:
        drawing.value_axis(sheet, scale, LEFT, right)
    for tick, _ in axis.marks():
        place = float(axis.scale(tick))
        sheet.line(place, top, place, top + HEIGHT, "grid")
    sheet.line(LEFT, top, LEFT, top + HEIGHT, "edge")
    ends: list[tuple[float, str, str]] = []
    told: list[str] = []
    pieces = _pieces(result)
    for series in panel.series:
        commands, marks, columns = [], [], []
        for _, start, stop in result.channels:
            part = series.values[start:stop]
            kept = drawing.without_repeats(part, drawing.extremes(part))
            kept = np.union1d(kept, drawing.edges(pieces[start:stop]))
            xs = x[start:stop][kept]
            ys = _heights(part[kept], scale, factor, logarithmic)
            commands.append(drawing.path(*drawing.broken(xs, ys, pieces[start:stop][kept])))
            if len(part) <= 40:
                marks.append(drawing.dots(xs, ys))
            columns.append((start + kept, part[kept]))
        sheet.curve("".join(commands), f"curve {series.role}")
        sheet.curve("".join(marks), f"dot {series.role}")
        finite = series.values[np.isfinite(series.values)]
        if len(finite):
            # The label stands where the curve ends: its last known value.
            y = float(_heights(finite[-1:], scale, factor, logarithmic)[0])
            ends.append((y, series.name, series.role))
            low, high = float(finite.min()), float(finite.max())
            told.append(
                word(
                    "panel.range",
                    name=series.name,
                    low=numbers.quantity(low, panel.unit),
                    high=numbers.quantity(high, panel.unit),
                )
                if low != high
                else word(
                    "panel.constant", name=series.name, value=numbers.quantity(low, panel.unit)
                )
            )
        rows = np.concatenate([r for r, _ in columns])
        data.append(
            {
                "panel": panel.title,
                "series": series.name,
                "unit": panel.unit,
                "t": ((result.time[rows] - axis.origin) // 1_000_000).tolist(),
                "v": drawing.figures(np.concatenate([v for _, v in columns])),
            }
        )
    _end_labels(sheet, ends, right + 6, top)
    misses = sum(r.pings_missed for r in result.finding.rules if r.id in own)
    tail = word("panel.misses", n=misses) if own and misses else ""
    sentences.append(f"{panel.title}: " + "; ".join(told) + "." + (f" {tail}" if tail else ""))


def _pieces(result: LineResult) -> np.ndarray[Any, np.dtype[np.int64]]:
    """A number for each ping that grows where the log stops for long: no curve is drawn across that, shape (pings,)."""
    number = np.zeros(len(result.time), dtype=np.int64)
    for _, start, stop in result.channels:
        steps = np.abs(np.diff(result.time[start:stop]))
        if len(steps):
            number[start + 1 : stop] = np.cumsum(steps > 8 * max(float(np.median(steps)), 1e6))
    return number


def _unassessed(sheet: Drawing, result: LineResult, panel: Panel, x: Floats, top: float) -> None:
    """Shade what none of the panel's rules could judge."""
    statuses = [result.rules[r].status for r in panel.rules if r in result.rules]
    if not statuses:
        return
    blank = np.logical_and.reduce([s == NOT_ASSESSED for s in statuses])
    for a, b in _mask_spans(result, blank, x):
        sheet.box(a, top, b - a, HEIGHT, "span none", word("verdict.not assessed"), UNASSESSED)


def _mask_spans(
    result: LineResult,
    mask: np.ndarray[Any, np.dtype[np.bool_]],
    x: Floats,
    channel: str | None = None,
) -> list[tuple[float, float]]:
    spans = []
    for name, start, stop in result.channels:
        if channel is not None and name != channel:
            continue
        found = runs(mask[start:stop])
        if len(found) > 5000:
            found = found[:: len(found) // 5000 + 1]
        for first, last in found:
            a, b = x[start + first], x[start + last]
            if np.isfinite(a) and np.isfinite(b):
                spans.append((min(a, b), max(a, b)))
    return drawing.joined(spans)


def _end_labels(sheet: Drawing, ends: list[tuple[float, str, str]], x: float, top: float) -> None:
    """Names beside the curves' ends, moved apart where they would lie on each other."""
    ends.sort()
    places: list[float] = []
    for y, _, _ in ends:
        places.append(max(y, places[-1] + 13) if places else max(y, top + 4))
    overflow = places[-1] - (top + HEIGHT) if places else 0.0
    if overflow > 0:
        places = [p - overflow for p in places]
    for (_, name, role), y in zip(ends, places, strict=True):
        sheet.line(x, y, x + 14, y, f"curve {role} swatch")
        sheet.text(x + 19, y + 4, name, f"label {role}", most=25)


def _strip_rows(result: LineResult, patterns: dict[str, int]) -> list[tuple[str, str]]:
    rows = []
    own = {(s.rule, s.channel) for s in result.sections}
    for rule, series in result.rules.items():
        for channel, start, stop in result.channels:
            status = series.status[start:stop]
            partly = (status == NOT_ASSESSED).any() and (status != NOT_ASSESSED).any()
            if (rule, channel) in own or (status == MISSED).any() or partly:
                rows.append((rule, channel))
    rows.sort(key=lambda r: r[0] not in patterns)
    return rows[:MOST_ROWS]


def _strip(
    sheet: Drawing,
    result: LineResult,
    rule: str,
    channel: str,
    x: Floats,
    top: float,
    patterns: dict[str, int],
    spans: Sequence[tuple[Section, float, float]],
) -> None:
    status = result.rules[rule].status
    right = drawing.WIDTH - RIGHT
    sheet.line(LEFT, top + ROW / 2, right, top + ROW / 2, "grid")
    for a, b in _mask_spans(result, status == NOT_ASSESSED, x, channel):
        sheet.box(
            a, top + 3, b - a, ROW - 6, "strip none", word("verdict.not assessed"), UNASSESSED
        )
    single = status == MISSED
    for section in result.sections:
        rows = section_rows(result, section)
        if rows is not None and section.rule == rule:
            single[rows[0] : rows[1] + 1] = False
    for a, b in _mask_spans(result, single, x, channel):
        sheet.box(a, top + 6, b - a, ROW - 12, "strip stray")
    if rule in patterns:
        for severity in ("advisory", "out of spec"):
            own = [
                (a, b)
                for s, a, b in spans
                if s.rule == rule and s.channel == channel and s.severity == severity
            ]
            kind = "strip out" if severity == "out of spec" else "strip advice"
            for a, b in drawing.joined(own):
                sheet.box(
                    a, top + 2, b - a, ROW - 4, kind, rule_title(rule), f"hatch-{patterns[rule]}"
                )
    name = rule_title(rule) + (f" · {channel}" if len(result.channels) > 1 else "")
    sheet.text(right + 6, top + ROW - 4, name, "label", most=27)


def _change_row(sheet: Drawing, changed: Sequence[Change], x: Floats, top: float) -> None:
    right = drawing.WIDTH - RIGHT
    sheet.line(LEFT, top + ROW / 2, right, top + ROW / 2, "grid")
    step = len(changed) // 400 + 1
    for change in changed[::step]:
        if np.isfinite(x[change.row]):
            sheet.box(float(x[change.row]) - 1, top + 2, 2, ROW - 4, "change", change.text)
    sheet.text(right + 6, top + ROW - 4, word("panel.settings"), "label")
