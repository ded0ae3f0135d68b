"""Lines, steps, points, spans and axes as SVG text.

Written out by hand rather than by a plotting library: a figure is a few kilobytes, takes its colours from the
page's style, so that light, dark and print need no second drawing, and has the same bytes each time.
"""

from __future__ import annotations

import html
import math
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from qa.model.log import Floats

Indices = NDArray[np.int64]
WIDTH = 960
BUCKETS = 240
PATTERNS = 8


def escaped(text: str) -> str:
    """Text made safe for an element or an attribute."""
    return html.escape(clean(text), quote=True)


def clean(text: str) -> str:
    """Text without the characters that no XML document may hold."""
    return "".join(
        c if c in "\t\n\r" or (c >= " " and not "\ud800" <= c <= "\udfff") else "�" for c in text
    )


def clipped(text: str, most: int = 80) -> str:
    """A name short enough for a title."""
    return text if len(text) <= most else text[: most - 1] + "…"


@dataclass(frozen=True, slots=True)
class Scale:
    """A straight line from values to places on the drawing."""

    least: float
    greatest: float
    start: float
    stop: float

    def __call__(self, values: Any) -> Any:
        span = self.greatest - self.least
        if span == 0:
            return np.full(np.shape(values), 0.5 * (self.start + self.stop))[()]
        return self.start + (np.asarray(values, dtype=float) - self.least) * (
            (self.stop - self.start) / span
        )


def ticks(least: float, greatest: float, wanted: int = 4) -> list[float]:
    """Round values that divide a range.

    Examples
    --------
    >>> ticks(0.0, 10.3)
    [0.0, 5.0, 10.0]
    """
    span = greatest - least
    if not math.isfinite(span) or span <= 0:
        return [least] if math.isfinite(least) else []
    rough = span / wanted
    power = 10.0 ** math.floor(math.log10(rough))
    step = next((m * power for m in (1, 2, 5, 10) if m * power >= rough), 10 * power)
    first = math.ceil(least / step - 1e-9)
    last = math.floor(greatest / step + 1e-9)
    return [round(n * step, 12) + 0.0 for n in range(first, last + 1)]


def tick_label(value: float) -> str:
    """A tick's number, as short as it can be.

    Examples
    --------
    >>> tick_label(0.5), tick_label(-20.0), tick_label(12000.0)
    ('0.5', '−20', '12000')
    """
    shown = f"{value:.6g}"
    if "e" in shown and 1e-4 <= abs(value) < 1e9:
        shown = f"{value:.0f}"
    return shown.replace("-", "−")


_STEPS = (
    *(1e-3, 5e-3, 0.01, 0.05, 0.1, 0.2, 0.5, 1, 2, 5, 10, 15, 30, 60, 120, 300, 600, 900, 1800),
    *(3600, 7200, 10800, 21600, 43200, 86400, 172800, 604800, 2592000, 31536000),
)


def time_ticks(first: int, last: int, wanted: int = 7) -> list[tuple[int, str]]:
    """Round times of day within a range of nanoseconds, with their labels, UTC.

    Examples
    --------
    >>> time_ticks(0, 180_000_000_000, 3)
    [(0, '00:00'), (60000000000, '00:01'), (120000000000, '00:02'), (180000000000, '00:03')]
    """
    span = (last - first) / 1e9
    if span <= 0:
        return [(first, _label(first, 1.0))]
    step = next((s for s in _STEPS if span / s <= wanted), _STEPS[-1] * 100)
    step_ns = round(step * 1e9)
    start = -(-first // step_ns) * step_ns
    return [(t, _label(t, step)) for t in range(start, last + 1, step_ns)]


def _label(nanoseconds: int, step: float) -> str:
    with np.errstate(all="ignore"):
        text = str(np.datetime64(nanoseconds, "ns"))
    if step >= 86400:
        return text[:10]
    if step >= 60:
        return text[11:16]
    return text[11:19] if step >= 1 else text[11:23]


def extremes(values: Floats, buckets: int = BUCKETS) -> Indices:
    """Rows that keep each bucket's least and greatest value, so that no spike disappears.

    Examples
    --------
    >>> values = np.zeros(10_000); values[4321] = 9.0
    >>> bool(4321 in extremes(values)), len(extremes(values)) < 500
    (True, True)
    """
    n = len(values)
    if n <= 2 * buckets:
        return np.arange(n, dtype=np.int64)
    edges = np.unique(np.linspace(0, n, buckets + 1).astype(np.int64))[:-1]
    known = np.isfinite(values)
    low, high = np.where(known, values, np.inf), np.where(known, values, -np.inf)
    lengths = np.diff(np.append(edges, n))
    bucket = np.repeat(np.arange(len(edges)), lengths)
    least, greatest = np.minimum.reduceat(low, edges), np.maximum.reduceat(high, edges)
    rows = [np.array([0, n - 1], dtype=np.int64)]
    for wanted in (least, greatest):
        hits = np.flatnonzero((values == wanted[bucket]) & known)
        _, firsts = np.unique(bucket[hits], return_index=True)
        rows.append(hits[firsts])
    # The first unknown value of a bucket is kept too: a line may not be drawn across what is not known.
    unknown = np.flatnonzero(~known)
    if len(unknown):
        _, firsts = np.unique(bucket[unknown], return_index=True)
        rows.append(unknown[firsts])
    return np.unique(np.concatenate(rows)).astype(np.int64)


def without_repeats(values: Floats, rows: Indices) -> Indices:
    """Rows less those inside a stretch of equal values, which a line through its ends shows as well.

    Examples
    --------
    >>> without_repeats(np.array([1.0, 1.0, 1.0, 2.0]), np.arange(4)).tolist()
    [0, 2, 3]
    """
    if len(rows) < 3:
        return rows
    kept = values[rows]
    same = (kept[1:] == kept[:-1]) | (np.isnan(kept[1:]) & np.isnan(kept[:-1]))
    keep = np.ones(len(rows), dtype=bool)
    keep[1:-1] = ~(same[:-1] & same[1:])
    return rows[keep]


def figures(values: Floats) -> list[float | None]:
    """Numbers for a figure's data, to six figures; None where not known."""
    return [float(f"{v:.6g}") if v == v and abs(v) != math.inf else None for v in values.tolist()]


def path(x: Floats, y: Floats) -> str:
    """The commands of a line through points, broken where one is not known.

    Examples
    --------
    >>> path(np.array([0.0, 1.0, 2.0, 3.0]), np.array([0.0, 1.04, np.nan, 3.0]))
    'M0 0L1 1M3 3h.1'
    """
    known = np.isfinite(x) & np.isfinite(y)
    xs, ys = np.round(x, 1).tolist(), np.round(y, 1).tolist()
    parts: list[str] = []
    last = len(xs) - 1
    ok = known.tolist()
    for i, (a, b) in enumerate(zip(xs, ys, strict=True)):
        if not ok[i]:
            continue
        starts = i == 0 or not ok[i - 1]
        parts.append(f"{'M' if starts else 'L'}{a:g} {b:g}")
        if starts and (i == last or not ok[i + 1]):
            parts.append("h.1")
    return "".join(parts)


def broken(x: Floats, y: Floats, piece: Indices) -> tuple[Floats, Floats]:
    """Points with an unknown one put in wherever a new piece begins.

    Examples
    --------
    >>> broken(np.array([0.0, 1.0]), np.array([5.0, 6.0]), np.array([0, 1]))[1].tolist()
    [5.0, nan, 6.0]
    """
    at = np.flatnonzero(np.diff(piece)) + 1
    return np.insert(x, at, np.nan), np.insert(y, at, np.nan)


def edges(piece: Indices, most: int = 200) -> Indices:
    """Rows on both sides of where a new piece begins.

    Examples
    --------
    >>> edges(np.array([0, 0, 1, 1])).tolist()
    [1, 2]
    """
    at = np.flatnonzero(np.diff(piece))
    at = at[:: len(at) // most + 1]
    return np.union1d(at, at + 1).astype(np.int64)


_GLYPHS = (
    "m-2 -2h4v4h-4z",
    "m0 -2.6l2.6 4.6h-5.2z",
    "m-2.4 0l2.4 -2.4l2.4 2.4l-2.4 2.4z",
    "m-2.4 0h4.8m-2.4 -2.4v4.8",
    "m-2 -2l4 4m0 -4l-4 4",
    "m0 2.6l2.6 -4.6h-5.2z",
)


def glyphs(x: Floats, y: Floats, shape: int) -> str:
    """The commands of small marks at points; ``shape`` tells one set from another without colour."""
    glyph = _GLYPHS[shape % len(_GLYPHS)]
    known = np.isfinite(x) & np.isfinite(y)
    xs, ys = np.round(x[known], 1).tolist(), np.round(y[known], 1).tolist()
    return "".join(f"M{a:g} {b:g}{glyph}" for a, b in zip(xs, ys, strict=True))


def dots(x: Floats, y: Floats) -> str:
    """The commands of dots (a round cap drawn by the style), places that coincide drawn once."""
    known = np.isfinite(x) & np.isfinite(y)
    if not known.any():
        return ""
    places = np.unique(np.round(np.stack([x[known], y[known]], 1) * 2) / 2, axis=0).tolist()
    return "".join(f"M{a:g} {b:g}h0" for a, b in places)


@dataclass(slots=True)
class Drawing:
    """Marks gathered into one SVG element."""

    width: float
    height: float
    parts: list[str] = field(default_factory=list)

    def add(self, markup: str) -> None:
        """Markup whose texts have been escaped already."""
        self.parts.append(markup)

    def text(
        self, x: float, y: float, words: str, kind: str = "", anchor: str = "start", most: int = 90
    ) -> None:
        """Words at a place, cut where they are too long; the whole is in the tooltip."""
        words = clean(words)
        cut = words if len(words) <= most else words[: most - 1] + "…"
        title = f"<title>{escaped(words[:500])}</title>" if cut != words else ""
        name = f' class="{kind}"' if kind else ""
        at = "" if anchor == "start" else f' text-anchor="{anchor}"'
        # An isolated text keeps a right-to-left name from turning its neighbours round.
        self.parts.append(
            f'<text x="{_short(x)}" y="{_short(y)}"{at}{name} unicode-bidi="isolate">'
            f"{escaped(cut)}{title}</text>"
        )

    def line(self, x1: float, y1: float, x2: float, y2: float, kind: str) -> None:
        """A straight line."""
        self.parts.append(
            f'<path class="{kind}" d="M{_short(x1)} {_short(y1)}L{_short(x2)} {_short(y2)}"/>'
        )

    def box(
        self,
        x: float,
        y: float,
        width: float,
        height: float,
        kind: str,
        title: str = "",
        fill: str = "",
    ) -> None:
        """A rectangle, perhaps filled by a pattern of the page."""
        inside = f"<title>{escaped(title[:500])}</title>" if title else ""
        filled = f' fill="url(#{fill})"' if fill else ""
        self.parts.append(
            f'<rect class="{kind}" x="{_short(x)}" y="{_short(y)}" width="{_short(width)}" '
            f'height="{_short(height)}"{filled}' + (f">{inside}</rect>" if inside else "/>")
        )

    def curve(self, commands: str, kind: str, extra: str = "") -> None:
        """A path from its commands."""
        if commands:
            self.parts.append(f'<path class="{kind}"{extra} d="{commands}"/>')

    def svg(self, identity: str, title: str, description: str) -> str:
        """The whole element, with its text alternative."""
        return (
            f'<svg class="figure" viewBox="0 0 {_short(self.width)} {_short(self.height)}" role="img" '
            f'aria-labelledby="{identity}-t {identity}-d"><title id="{identity}-t">{escaped(title)}</title>'
            f'<desc id="{identity}-d">{escaped(description)}</desc>{"".join(self.parts)}</svg>'
        )


def _short(value: float) -> str:
    return f"{round(float(value), 1):g}"


def value_axis(drawing: Drawing, scale: Scale, left: float, right: float, wanted: int = 4) -> None:
    """Ticks of a vertical axis, with a faint line across."""
    for tick in ticks(scale.least, scale.greatest, wanted):
        y = float(scale(tick))
        drawing.line(left, y, right, y, "grid")
        drawing.text(left - 6, y + 4, tick_label(tick), "tick", "end")


def foot_axis(
    drawing: Drawing,
    scale: Scale,
    top: float,
    bottom: float,
    marks: Iterable[tuple[float, str]],
    title: str = "",
) -> None:
    """Ticks of a horizontal axis under a panel, and what it shows."""
    for value, label in marks:
        x = float(scale(value))
        drawing.line(x, top, x, bottom, "grid")
        drawing.text(x, bottom + 15, label, "tick", "middle")
    if title:
        drawing.text(0.5 * (scale.start + scale.stop), bottom + 31, title, "axis", "middle")


def joined(
    spans: Sequence[tuple[float, float]], apart: float = 1.0, least: float = 2.0
) -> list[tuple[float, float]]:
    """Spans that touch on the drawing, as one, each wide enough to be seen.

    Examples
    --------
    >>> joined([(0.0, 0.5), (1.2, 4.0), (9.0, 9.1)])
    [(0.0, 4.0), (9.0, 11.0)]
    """
    result: list[tuple[float, float]] = []
    for start, stop in sorted(spans):
        stop = max(stop, start + least)
        if result and start - result[-1][1] <= apart:
            result[-1] = (result[-1][0], max(result[-1][1], stop))
        else:
            result.append((start, stop))
    return result
