"""Where the vessel went and how each stretch did: simplified tracks, and the map of them."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from qa.model.findings import EXEMPT, NOT_ASSESSED, LineResult
from qa.model.log import Floats
from qa.report import drawing
from qa.report.drawing import Drawing, Scale
from qa.report.panels import section_rows
from qa.report.words import word

MOST_POINTS = 400
NAME_ON_MAP = 24
UNKNOWN, CLEAR, ADVISED, OUT = 0, 1, 2, 3
STATES = ("none", "clear", "advice", "out")
EARTH = 6_371_008.8
Places = list[tuple[float, float]]


@dataclass(frozen=True, slots=True)
class Track:
    """A thinned track: longitude and latitude, or easting and northing, and each point's state."""

    x: Floats
    y: Floats
    state: NDArray[np.int8]
    geographic: bool


def states(result: LineResult) -> NDArray[np.int8]:
    """For each ping whether it lies in a section, and whether anything was assessed at all, shape (pings,)."""
    state = np.zeros(len(result.time), dtype=np.int8)
    severe = {r.id for r in result.finding.rules if r.severity == "out of spec"}
    for identity, series in result.rules.items():
        if identity in severe:
            judged = (series.status != NOT_ASSESSED) & (series.status != EXEMPT)
            state[judged] = CLEAR
    for wanted, level in (("advisory", ADVISED), ("out of spec", OUT)):
        for section in result.sections:
            if section.severity == wanted and not (level == OUT and section.within_allowance):
                rows = section_rows(result, section)
                if rows is not None:
                    state[rows[0] : rows[1] + 1] = level
    return state


def track(result: LineResult) -> Track | None:
    """The line's track with positions thinned to :data:`MOST_POINTS`, the worst state of each stretch kept."""
    pair = _positions(result)
    if pair is None:
        return None
    x, y, geographic = pair
    known = np.flatnonzero(np.isfinite(x) & np.isfinite(y))
    order = known[np.argsort(result.time[known], kind="stable")]
    state = states(result)
    if len(order) > MOST_POINTS:
        edges = np.linspace(0, len(order), MOST_POINTS + 1).astype(np.int64)
        worst = np.maximum.reduceat(state[order], edges[:-1])
        picked = order[edges[:-1]]
        picked[-1] = order[-1]
        return Track(x[picked].copy(), y[picked].copy(), worst.astype(np.int8), geographic)
    return Track(x[order].copy(), y[order].copy(), state[order].copy(), geographic)


def _positions(result: LineResult) -> tuple[Floats, Floats, bool] | None:
    for names, geographic in ((("longitude", "latitude"), True), (("easting", "northing"), False)):
        if all(n in result.columns for n in names):
            x, y = (result.columns[n] for n in names)
            if (np.isfinite(x) & np.isfinite(y)).any():
                return x, y, geographic
    return None


def section_places(result: LineResult, most: int = 60) -> dict[str, Places]:
    """Longitudes and latitudes along each section, thinned."""
    pair = _positions(result)
    if pair is None or not pair[2]:
        return {}
    found = {}
    for section in result.sections:
        rows = section_rows(result, section)
        if rows is None:
            continue
        at = np.arange(rows[0], rows[1] + 1)
        at = at[np.isfinite(pair[0][at]) & np.isfinite(pair[1][at])]
        if len(at):
            at = at[np.unique(np.linspace(0, len(at) - 1, most).round().astype(np.int64))]
            places = zip(pair[0][at].tolist(), pair[1][at].tolist(), strict=True)
            found[section.id] = [(round(a, 7), round(b, 7)) for a, b in places]
    return found


def section_grid(result: LineResult) -> dict[str, tuple[float, float, float, float]]:
    """Easting and northing of each section's start and end, where the log has no latitude."""
    pair = _positions(result)
    if pair is None or pair[2]:
        return {}
    easting, northing, _ = pair
    found = {}
    for section in result.sections:
        rows = section_rows(result, section)
        if rows is None:
            continue
        at = np.arange(rows[0], rows[1] + 1)
        at = at[np.isfinite(easting[at]) & np.isfinite(northing[at])]
        if len(at):
            a, b = int(at[0]), int(at[-1])
            found[section.id] = (
                float(easting[a]),
                float(northing[a]),
                float(easting[b]),
                float(northing[b]),
            )
    return found


def chart(
    tracks: Sequence[tuple[str, Track]],
    identity: str,
    title: str,
    most_points: int = 12_000,
    words: str = "map",
) -> dict[str, Any] | None:
    """The map of tracks by name: a local equirectangular projection, a scale bar and north."""
    if not tracks:
        return None
    geographic = tracks[0][1].geographic
    xs = [_unwrapped(t.x) if geographic else t.x for _, t in tracks]
    if geographic:
        # Tracks on both sides of the 180th meridian are drawn side by side.
        reference = float(np.median(np.concatenate(xs)))
        xs = [x + 360.0 * np.round((reference - np.median(x)) / 360.0) for x in xs]
    middle = float(np.mean([t.y.mean() for _, t in tracks])) if geographic else 0.0
    metres = math.radians(1.0) * EARTH if geographic else 1.0
    across = metres * max(math.cos(math.radians(middle)), 0.01) if geographic else 1.0
    x0 = min(float(x.min()) for x in xs)
    y0 = min(float(t.y.min()) for _, t in tracks)
    wide = (max(float(x.max()) for x in xs) - x0) * across
    tall = (max(float(t.y.max()) for _, t in tracks) - y0) * metres
    size = max(wide, tall, 1.0)
    frame_width, left, top = 720.0, 70.0, 16.0
    frame_height = min(560.0, max(200.0, frame_width * tall / max(wide, 1e-9))) if wide else 400.0
    room = 24.0
    scale = min(
        (frame_width - 2 * room) / max(wide, size / 50),
        (frame_height - 2 * room) / max(tall, size / 50),
    )
    ox = left + 0.5 * (frame_width - wide * scale)
    oy = top + 0.5 * (frame_height + tall * scale)
    sheet = Drawing(drawing.WIDTH, top + frame_height + 34)
    sheet.box(left, top, frame_width, frame_height, "frame")
    x_axis = Scale(
        x0 - (ox - left) / scale / across,
        x0 + (left + frame_width - ox) / scale / across,
        left,
        left + frame_width,
    )
    y_axis = Scale(
        y0 - (top + frame_height - oy) / scale / metres,
        y0 + (oy - top) / scale / metres,
        top + frame_height,
        top,
    )
    _graticule(sheet, x_axis, y_axis, left, top, frame_width, frame_height, geographic)
    budget = max(12, most_points // len(tracks))
    counted: dict[str, int] = dict.fromkeys(STATES, 0)
    bunches: dict[int, list[str]] = {n: [] for n in range(4)}
    names = []
    for (name, one), x in zip(tracks, xs, strict=True):
        rows, state = _thinned(one.state, budget)
        px = np.asarray(ox + (x[rows] - x0) * across * scale)
        py = np.asarray(oy - (one.y[rows] - y0) * metres * scale)
        counted[STATES[int(one.state.max())]] += 1
        for level in (CLEAR, UNKNOWN, ADVISED, OUT):
            bunches[level].append(_stretches(px, py, state, level))
        if len(tracks) <= 40:
            names.append((name, [(float(px[k]), float(py[k])) for k in (0, -1)]))
    for level in (CLEAR, UNKNOWN, ADVISED, OUT):
        sheet.curve("".join(bunches[level]), f"track {STATES[level]}")
    _names(sheet, names, (left, top, left + frame_width, top + frame_height))
    _legend(sheet, left + frame_width + 16, top, scale, words)
    text = (
        word(f"{words}.told", n=len(tracks))
        + " "
        + " ".join(
            word(f"{words}.{state}{'_state' if state == 'none' else ''}", n=many)
            for state, many in counted.items()
            if many
        )
    )
    return {
        "id": identity,
        "kind": "map",
        "title": title,
        "text": text,
        "svg": sheet.svg(identity, title, text),
        "data": _points(tracks) if len(tracks) <= 40 else [],
    }


def _points(tracks: Sequence[tuple[str, Track]]) -> list[dict[str, Any]]:
    """The tracks as drawn, thinner still, as figures' data."""
    data = []
    for name, one in tracks:
        rows, state = _thinned(one.state, 100)
        x, y = (np.round(v[rows], 7).tolist() for v in (one.x, one.y))
        data.append({"series": drawing.clean(name), "x": x, "y": y, "v": state.tolist()})
    return data


def _names(
    sheet: Drawing,
    names: Sequence[tuple[str, Places]],
    frame: tuple[float, float, float, float],
) -> None:
    """Each track's name beside one of its ends, where there is room; the rest are in the table of lines."""
    taken: list[tuple[float, float, float, float]] = []
    for name, ends in names:
        shown = name if len(name) <= NAME_ON_MAP else name[: NAME_ON_MAP - 1] + "…"
        wide = 6.2 * len(shown) + 4
        for x, y in ends:
            placed = False
            for side, drop in ((1, -4), (-1, -4), (1, 11), (-1, 11)):
                x0 = x + 4 if side > 0 else x - 4 - wide
                box = (x0, y + drop - 9, x0 + wide, y + drop + 2)
                inside = (
                    box[0] >= frame[0]
                    and box[2] <= frame[2]
                    and box[1] >= frame[1]
                    and box[3] <= frame[3]
                )
                clear = all(
                    box[2] <= t[0] or t[2] <= box[0] or box[3] <= t[1] or t[3] <= box[1]
                    for t in taken
                )
                if inside and clear:
                    taken.append(box)
                    anchor = "start" if side > 0 else "end"
                    sheet.text(x + 4 * side, y + drop, name, "track-name", anchor, most=NAME_ON_MAP)
                    placed = True
                    break
            if placed:
                break


def _unwrapped(longitude: Floats) -> Floats:
    return np.asarray(np.degrees(np.unwrap(np.radians(longitude))))


def _thinned(state: NDArray[np.int8], most: int) -> tuple[NDArray[np.int64], NDArray[np.int8]]:
    n = len(state)
    if n <= most:
        return np.arange(n), state
    edges = np.unique(np.linspace(0, n - 1, most).astype(np.int64))
    return edges, np.maximum.reduceat(state, edges).astype(np.int8)


def _stretches(px: Floats, py: Floats, state: NDArray[np.int8], level: int) -> str:
    """Each stretch of one state as a path from its first point to the one after its last."""
    mask = state == level
    if not mask.any():
        return ""
    parts = []
    xs, ys = np.round(px, 1).tolist(), np.round(py, 1).tolist()
    i, n = 0, len(xs)
    flags = mask.tolist()
    while i < n:
        if not flags[i]:
            i += 1
            continue
        j = i
        while j + 1 < n and flags[j + 1]:
            j += 1
        end = min(j + 1, n - 1)
        parts.append(f"M{xs[i]:g} {ys[i]:g}")
        last = (xs[i], ys[i])
        for k in range(i + 1, end + 1):
            if (xs[k], ys[k]) != last:
                parts.append(f"L{xs[k]:g} {ys[k]:g}")
                last = (xs[k], ys[k])
        if last == (xs[i], ys[i]):
            parts.append("h.1")
        i = j + 1
    return "".join(parts)


def _graticule(
    sheet: Drawing,
    x_axis: Scale,
    y_axis: Scale,
    left: float,
    top: float,
    width: float,
    height: float,
    geographic: bool,
) -> None:
    for tick in drawing.ticks(x_axis.least, x_axis.greatest, 4):
        x = float(x_axis(tick))
        sheet.line(x, top, x, top + height, "grid")
        sheet.text(
            x,
            top + height + 16,
            _degree(tick, "EW") if geographic else f"{tick:.0f}".replace("-", "−"),
            "tick",
            "middle",
        )
    for tick in drawing.ticks(y_axis.least, y_axis.greatest, 4):
        y = float(y_axis(tick))
        sheet.line(left, y, left + width, y, "grid")
        sheet.text(
            left - 5,
            y + 4,
            _degree(tick, "NS") if geographic else f"{tick:.0f}".replace("-", "−"),
            "tick",
            "end",
        )


def _degree(angle: float, names: str) -> str:
    angle = (angle + 180.0) % 360.0 - 180.0 if names == "EW" else angle
    return f"{abs(round(angle, 6)):g}° {names[0] if angle >= 0 else names[1]}"


def _legend(sheet: Drawing, x: float, top: float, scale: float, words: str) -> None:
    sheet.curve(f"M{x + 12:g} {top + 30:g}v-24m-6 9l6 -10l6 10", "north")
    sheet.text(x + 24, top + 20, word(f"{words}.north"), "label")
    wanted = 110.0 / scale
    power = 10.0 ** math.floor(math.log10(wanted))
    bar = next(m * power for m in (5, 2, 1) if m * power <= wanted)
    y = top + 62
    sheet.curve(f"M{x:g} {y - 5:g}v5h{bar * scale:.1f}v-5", "north")
    label = f"{bar:g} m" if bar < 1000 else f"{bar / 1000:g} km"
    sheet.text(x, y + 16, label, "label")
    y += 48
    for state in ("out", "advice", "clear", "none"):
        sheet.curve(f"M{x:g} {y:g}h30", f"track {state}")
        sheet.text(x + 38, y + 4, word(f"{words}.legend_{state}"), "label", most=24)
        y += 20
