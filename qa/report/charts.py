"""Figures other than those along time: swath, margins, footprint against depth."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from qa.model.findings import MET, MISSED, LineResult
from qa.model.log import Floats
from qa.report import drawing, numbers
from qa.report.drawing import Drawing, Scale
from qa.report.panels import LEFT, RIGHT, TimeAxis, first_of, rule_title
from qa.report.words import word

BINS = 40
MOST_POINTS = 250
Figure = dict[str, Any]


@dataclass(frozen=True, slots=True)
class GrowthPoints:
    """Footprint against depth, thinned: the points of least and greatest footprint of each step of depth."""

    depth: Floats
    footprint: Floats
    limit: Floats


def swath(result: LineResult, identity: str) -> Figure | None:
    """Which beams missed a rule, by angle, along time; None where none did."""
    misses = [m for m in result.beam_misses if len(m.index)]
    if not misses:
        return None
    axis = TimeAxis(result.time)
    x = axis.places(result.time)
    angles = np.concatenate([m.beam_angle for m in misses])
    angles = angles[np.isfinite(angles)]
    edge = max(10.0, 10.0 * np.ceil(float(np.abs(angles).max()) / 10.0)) if len(angles) else 70.0
    top, height = 24.0, 190.0
    scale = Scale(-edge, edge, top + height, top)
    sheet = Drawing(drawing.WIDTH, top + height + 40)
    right = drawing.WIDTH - RIGHT
    sheet.text(LEFT, top - 8, word("swath.axis"), "panel-title")
    drawing.value_axis(sheet, scale, LEFT, right, 4)
    sheet.line(LEFT, top, LEFT, top + height, "edge")
    sentences, data = [], []
    for n, miss in enumerate(misses):
        step = -(-len(miss.index) // 1500)
        index, angle = miss.index[::step], miss.beam_angle[::step]
        sheet.curve(drawing.glyphs(x[index], scale(angle), n), f"mark m{n % 6}")
        y = top + 12 + 15 * n
        sheet.curve(drawing.glyphs(np.array([right + 12.0]), np.array([y]), n), f"mark m{n % 6}")
        sheet.text(right + 22, y + 4, rule_title(miss.rule), "label", most=24)
        sentences.append(word("swath.told", name=rule_title(miss.rule), n=miss.total))
        if len(index) < miss.total:
            sentences.append(word("swath.thinned", shown=len(index), n=miss.total))
        data.append(
            {
                "panel": word("swath.axis"),
                "series": rule_title(miss.rule),
                "unit": "deg",
                "t": ((result.time[index] - axis.origin) // 1_000_000).tolist(),
                "v": drawing.figures(angle),
            }
        )
    drawing.foot_axis(sheet, axis.scale, top, top + height, axis.marks())
    day = numbers.iso(axis.first)[:10]
    sheet.text(
        0.5 * (LEFT + right), top + height + 31, word("panel.time", day=day), "axis", "middle"
    )
    title = word("swath.title", line=drawing.clipped(result.finding.line))
    text = " ".join(sentences)
    return {
        "id": identity,
        "kind": "swath",
        "title": title,
        "text": text,
        "svg": sheet.svg(identity, title, text),
        "data": data,
        "origin_ms": axis.origin // 1_000_000,
    }


def margin_counts(result: LineResult) -> dict[str, list[int]]:
    """How many pings lie in each of :data:`BINS` steps of margin from −100 % to +100 %, by rule.

    What lies beyond is counted in the outermost steps.
    """
    counted = {}
    for identity, series in result.rules.items():
        judged = (series.status == MET) | (series.status == MISSED)
        margins = series.margin[judged & np.isfinite(series.margin)]
        if len(margins):
            # A margin of nothing at all meets its limit, so it belongs to the right of zero.
            step = np.floor((np.clip(margins, -1.0, 1.0) + 1.0) * (BINS / 2))
            step = np.clip(step, 0, BINS - 1).astype(np.int64)
            counted[identity] = np.bincount(step, minlength=BINS).tolist()
    return counted


def margins(counted: Mapping[str, Sequence[int]], identity: str, title: str) -> Figure | None:
    """A histogram of margins for each rule, one above the other, on one axis."""
    rules = [r for r in counted if any(counted[r])]
    if not rules:
        return None
    left, right, row = 210.0, drawing.WIDTH - 110.0, 30.0
    top = 20.0
    sheet = Drawing(drawing.WIDTH, top + row * len(rules) + 40)
    scale = Scale(-100.0, 100.0, left, right)
    bottom = top + row * len(rules)
    drawing.foot_axis(
        sheet,
        scale,
        top,
        bottom,
        [(v, f"{drawing.tick_label(v)} %") for v in (-100.0, -50.0, 0.0, 50.0, 100.0)],
        word("margins.axis"),
    )
    zero = float(scale(0.0))
    sheet.line(zero, top, zero, bottom, "curve limit")
    sheet.text(zero - 6, top - 6, word("margins.missed"), "tick", "end")
    sheet.text(zero + 6, top - 6, word("margins.met"), "tick")
    sentences, data = [], []
    width = (right - left) / BINS
    for n, rule in enumerate(rules):
        bins = counted[rule]
        greatest = max(bins)
        base = top + row * (n + 1) - 4
        sheet.line(left, base, right, base, "grid")
        bars: dict[str, list[str]] = {"bar out": [], "bar in": []}
        for b, many in enumerate(bins):
            if many:
                # Square root, so that a few misses beside many thousand pings can still be seen.
                high = max(1.0, (row - 7) * (many / greatest) ** 0.5)
                kind = "bar out" if b < BINS // 2 else "bar in"
                bars[kind].append(
                    f"M{left + b * width + 0.5:.1f} {base:.1f}v-{high:.1f}h{width - 1:.1f}v{high:.1f}z"
                )
        for kind, commands in bars.items():
            sheet.curve("".join(commands), kind)
        sheet.text(left - 8, base - 4, rule_title(rule), "label", "end", most=32)
        total, missed = sum(bins), sum(bins[: BINS // 2])
        sheet.text(right + 8, base - 4, word("counted.pings", n=total), "tick")
        sentences.append(word("margins.told", name=rule_title(rule), missed=missed, n=total))
        data.append({"series": rule_title(rule), "v": list(bins)})
    text = word("margins.text") + " " + " ".join(sentences)
    return {
        "id": identity,
        "kind": "margins",
        "title": title,
        "text": text,
        "svg": sheet.svg(identity, title, text),
        "data": data,
    }


def growth_points(result: LineResult) -> GrowthPoints | None:
    """Footprint of the beam nearest the vertical against depth, if the line has both."""
    series = result.rules.get("footprint-growth")
    footprint = first_of(result, ("footprint", "nadir_footprint"))
    if footprint is None and series is not None:
        footprint = series.value
    depth = first_of(result, ("nearest_vertical(depth)", "depth", "altitude", "height"))
    if footprint is None or depth is None:
        return None
    limit = series.limit if series is not None else np.full(len(depth), np.nan)
    known = np.isfinite(footprint) & np.isfinite(depth)
    if not known.any():
        return None
    rows = np.flatnonzero(known)
    rows = rows[np.argsort(depth[rows], kind="stable")]
    kept = rows[drawing.extremes(footprint[rows], MOST_POINTS // 2)]
    return GrowthPoints(depth[kept], footprint[kept], limit[kept])


def growth(points: Sequence[GrowthPoints], identity: str, title: str) -> Figure | None:
    """Footprint against depth with the limit, and where the one crosses the other."""
    if not points:
        return None
    depth = np.concatenate([p.depth for p in points])
    footprint = np.concatenate([p.footprint for p in points])
    limit = np.concatenate([p.limit for p in points])
    left, right, top, height = LEFT, drawing.WIDTH - RIGHT, 26.0, 210.0
    sheet = Drawing(drawing.WIDTH, top + height + 42)
    has_limit = bool(np.isfinite(limit).any())
    greatest = float(np.nanmax(np.concatenate([footprint, limit[np.isfinite(limit)]])))
    x_scale = Scale(*_bounds(depth), left, right)
    y_scale = Scale(0.0, greatest * 1.08 or 1.0, top + height, top)
    sheet.text(left, top - 10, word("growth.y"), "panel-title")
    drawing.value_axis(sheet, y_scale, left, right, 4)
    marks = [(t, drawing.tick_label(t)) for t in drawing.ticks(x_scale.least, x_scale.greatest, 6)]
    drawing.foot_axis(sheet, x_scale, top, top + height, marks, word("growth.x"))
    sheet.line(left, top, left, top + height, "edge")
    over = np.isfinite(limit) & (footprint > limit)
    sheet.curve(drawing.dots(x_scale(depth[~over]), y_scale(footprint[~over])), "dot value")
    sheet.curve(drawing.glyphs(x_scale(depth[over]), y_scale(footprint[over]), 1), "mark m0")
    low, high = (numbers.quantity(float(v), "m") for v in (footprint.min(), footprint.max()))
    shallow, deep = (numbers.quantity(float(v), "m") for v in (depth.min(), depth.max()))
    sentences = [word("growth.told", low=low, high=high, shallow=shallow, deep=deep)]
    if has_limit:
        for one in points:
            known = np.isfinite(one.limit)
            if known.any():
                # From edge to edge where it is one number for all: it holds at every depth, not only at those met.
                same = np.unique(limit[np.isfinite(limit)]).size == 1
                over_depths = (
                    np.array([x_scale.least, x_scale.greatest]) if same else one.depth[known]
                )
                at = np.full(2, one.limit[known][0]) if same else one.limit[known]
                xs, ys = np.asarray(x_scale(over_depths), float), np.asarray(y_scale(at), float)
                sheet.curve(drawing.path(xs, ys), "curve limit")
                if same:
                    break
        deepest = int(np.nanargmax(np.where(np.isfinite(limit), depth, -np.inf)))
        sheet.text(
            right + 6, float(y_scale(limit[deepest])) + 4, word("growth.limit"), "label limit"
        )
        crossing, fitted = _crossing(depth, footprint, limit)
        if crossing is not None:
            shown = numbers.quantity(crossing, "m", 3)
            told = (
                word("growth.fitted", depth=shown)
                if fitted
                else word("growth.crossing", depth=shown)
            )
            sentences.append(told + ".")
            place = float(x_scale(crossing))
            if left <= place <= right:
                sheet.line(place, top, place, top + height, "curve crossing")
                far = place > 0.6 * right
                side, anchor = (-6, "end") if far else (6, "start")
                sheet.text(place + side, top + 12, told, "label", anchor)
            else:
                sheet.text(right - 6, top + 12, told, "label", "end")
        if not over.any():
            sentences.append(word("growth.under"))
    text = " ".join(sentences)
    data = [
        {"series": word("growth.x"), "v": drawing.figures(depth)},
        {"series": word("growth.y"), "v": drawing.figures(footprint)},
        {"series": word("growth.limit"), "v": drawing.figures(limit)},
    ]
    return {
        "id": identity,
        "kind": "growth",
        "title": title,
        "text": text,
        "svg": sheet.svg(identity, title, text),
        "data": data,
    }


def _crossing(depth: Floats, footprint: Floats, limit: Floats) -> tuple[float | None, bool]:
    """Depth at which the footprint reaches its limit, and whether a straight line through the points says so.

    The footprint of one set-up grows with depth in a straight line. Where the points do not lie on one, or show too
    little of it, the depth is that of the shallowest point over its limit.
    """
    known = limit[np.isfinite(limit)]
    if len(depth) >= 8 and np.ptp(known) == 0 and np.ptp(depth) > 0.1 * float(np.mean(depth)):
        slope, start = np.polyfit(depth, footprint, 1)
        off = footprint - (start + slope * depth)
        if slope > 0 and float(np.sqrt(np.mean(off**2))) < 0.02 * float(np.mean(footprint)):
            found = (float(known[0]) - start) / slope
            # A straight line says little far from its points.
            if 0 < found < 2 * float(depth.max()):
                return float(found), True
    over = np.isfinite(limit) & (footprint > limit)
    return (float(depth[over].min()), False) if over.any() else (None, False)


def _bounds(values: Floats) -> tuple[float, float]:
    least, greatest = float(values.min()), float(values.max())
    room = 0.04 * (greatest - least) or 0.05 * abs(greatest) or 1.0
    return max(0.0, least - room) if least >= 0 else least - room, greatest + room
