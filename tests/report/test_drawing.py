"""Drawing: no spike disappears, nothing is drawn across what is not known."""

from __future__ import annotations

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st

from qa.report import drawing


@settings(max_examples=60, deadline=None)
@given(
    n=st.integers(1, 5000),
    spikes=st.lists(st.tuples(st.integers(0, 4999), st.floats(-1e6, 1e6)), max_size=5),
    holes=st.lists(st.integers(0, 4999), max_size=5),
    buckets=st.integers(1, 50),
)
def test_the_thinned_line_keeps_every_extreme(
    n: int, spikes: list[tuple[int, float]], holes: list[int], buckets: int
) -> None:
    values = np.sin(np.arange(n) / 7.0)
    for at, size in spikes:
        values[at % n] = size
    for at in holes:
        values[at % n] = np.nan
    rows = drawing.extremes(values, buckets)
    assert (np.diff(rows) > 0).all() and len(rows) <= max(2 * buckets, 3 * buckets + 2)
    if np.isfinite(values).any():
        assert np.nanmax(values[rows]) == np.nanmax(values)
        assert np.nanmin(values[rows]) == np.nanmin(values)
    if np.isnan(values).any():
        assert np.isnan(values[rows]).any(), "the line would be drawn across a hole"


def test_repeats_are_left_out_and_their_ends_kept() -> None:
    values = np.array([1.0, 1.0, 1.0, 5.0, 1.0, np.nan, np.nan, np.nan, 2.0])
    kept = drawing.without_repeats(values, np.arange(9))
    assert kept.tolist() == [0, 2, 3, 4, 5, 7, 8]


def test_a_line_is_broken_where_a_value_is_not_known() -> None:
    commands = drawing.path(np.arange(5.0), np.array([1.0, 2.0, np.nan, 4.0, 5.0]))
    assert commands == "M0 1L1 2M3 4L4 5"


def test_text_cannot_leave_its_element() -> None:
    sheet = drawing.Drawing(10, 10)
    sheet.text(0, 0, '</text><script>"&\x00')
    svg = sheet.svg("a", "<b>", "</desc>")
    assert "<script>" not in svg and "<b>" not in svg and "\x00" not in svg


def test_axis_of_times_is_round_and_within() -> None:
    first, last = 1_714_557_603_000_000_000, 1_714_557_999_000_000_000
    marks = drawing.time_ticks(first, last)
    assert 3 <= len(marks) <= 8
    assert all(first <= t <= last and t % 60_000_000_000 == 0 for t, _ in marks)
