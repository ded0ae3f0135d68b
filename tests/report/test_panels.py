"""Panels along time: spans where the sections are, nothing drawn across a hole, the axis not stretched by a stray stamp."""

from __future__ import annotations

import re
from dataclasses import replace
from typing import Any

import numpy as np
import pytest

from qa.model.findings import MISSED
from qa.report import charts, panels


def drawn(result: Any) -> dict[str, Any]:
    figure = panels.track_time(result, "F")
    assert figure is not None
    return figure


def boxes(svg: str, kind: str) -> list[tuple[float, float]]:
    found = re.findall(rf'<rect class="{kind}" x="([\d.]+)" y="[\d.]+" width="([\d.]+)"', svg)
    return [(float(x), float(x) + float(w)) for x, w in found]


def test_sections_are_marked_where_they_are_on_every_panel(made: Any) -> None:
    result = made.line_result(made.LineKind("A", faults=(made.Fault("ping-interval", 60, 120),)))
    figure = drawn(result)
    axis = panels.TimeAxis(result.time)
    wanted = axis.places(result.time)[[60, 120]]
    marked = boxes(figure["svg"], "span own") + boxes(figure["svg"], "span")
    assert len(marked) == len(panels.panels(result))
    for start, stop in marked:
        assert (start, stop) == pytest.approx(tuple(wanted), abs=0.11)


def test_pings_not_assessed_are_shaded_apart(made: Any) -> None:
    clean, blank = (made.line_result(made.LineKind("A", blank=b)) for b in (None, (100, 150)))
    shaded = boxes(drawn(blank)["svg"], "span none")
    axis = panels.TimeAxis(blank.time)
    assert len(shaded) > len(boxes(drawn(clean)["svg"], "span none"))
    assert tuple(axis.places(blank.time)[[100, 150]]) == pytest.approx(shaded[0], abs=0.11)


def test_single_misses_are_shown_though_they_make_no_section(made: Any) -> None:
    result = made.line_result(made.LineKind("A"))
    assert "strip stray" not in drawn(result)["svg"]
    result.rules["ping-interval"].status[77] = MISSED
    assert "strip stray" in drawn(result)["svg"]


def test_no_curve_is_drawn_across_a_stop_of_the_log(made: Any) -> None:
    result = made.line_result(made.LineKind("A", pings=100))

    def curves() -> list[int]:
        found = re.findall(r'<path class="curve value" d="([^"]*)"', drawn(result)["svg"])
        return [commands.count("M") for commands in found]

    whole = curves()
    result.time = np.where(np.arange(100) < 50, result.time, result.time + 60_000_000_000)
    assert all(after == before + 1 for before, after in zip(whole, curves(), strict=True))


def test_a_stray_clock_stamp_does_not_stretch_the_axis(made: Any) -> None:
    result = made.line_result(made.LineKind("A"))
    width = panels.TimeAxis(result.time).places(result.time)
    result.time[0] = 0
    axis = panels.TimeAxis(result.time)
    assert axis.cut and np.isnan(axis.places(result.time)[0])
    assert axis.places(result.time)[250] == pytest.approx(width[250], abs=30)
    assert "outside the axis" in drawn(result)["text"]


def test_changes_of_settings_are_told_once_for_both_sides(made: Any) -> None:
    result = made.line_result(made.LineKind("A", pings=100, channels=("port", "starboard")))
    assert [c.text for c in panels.changes(result)] == ["Pulse length: 60 µs to 80 µs"]
    assert drawn(result)["changes"] == [
        ["2024-05-01T10:00:10.000Z", 51, "Pulse length: 60 µs to 80 µs"]
    ]


def test_other_missed_rules_get_a_panel_of_their_own(made: Any) -> None:
    result = made.line_result(made.LineKind("A", faults=(made.Fault("range-resolution", 5, 30),)))
    result.rules["own-rule"] = replace(result.rules["range-resolution"])
    assert "rule-own-rule" in [p.key for p in panels.panels(result)]


def test_margins_count_every_judged_ping(made: Any) -> None:
    result = made.line_result(
        made.LineKind("A", faults=(made.Fault("range-resolution", 5, 30, 1.4),))
    )
    bins = charts.margin_counts(result)["range-resolution"]
    assert sum(bins) == 300 and sum(bins[: charts.BINS // 2]) == 26
    assert bins[charts.BINS // 2 - 8] == 26, "a value 40 % over its limit"


def test_footprint_figure_names_the_depth_at_which_the_limit_is_outgrown(made: Any) -> None:
    result = made.line_result(made.LineKind("A"))
    points = charts.growth_points(result)
    figure = charts.growth([points], "G", "t")
    # The made-up footprint is 0.0175 times the depth, its limit 0.6 m.
    assert (
        "Outgrows the limit at 34.3 m" in figure["text"]
        and "Nowhere over the limit." in figure["text"]
    )


def test_every_missed_beam_is_counted_though_not_all_are_drawn(made: Any) -> None:
    result = made.line_result(
        made.LineKind("A", pings=3000, faults=(made.Fault("footprint-growth", 0, 2500),))
    )
    text = charts.swath(
        result,
        "S",
    )["text"]
    assert "7\u202f503 beams missed" in text and re.search(
        r"[\d\u202f]+ of 7\u202f503 are drawn", text
    )
