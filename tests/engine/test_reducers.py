"""Reducers and sections against plain loops."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from qa.engine.reducers import Groups, reduce_beams
from qa.engine.remedies import rounded
from qa.engine.sections import find_sections
from qa.model.findings import EXEMPT, MET, MISSED, NOT_ASSESSED

numbers = st.floats(-100, 100) | st.just(math.nan)
ping = st.lists(st.tuples(numbers, st.booleans(), st.floats(-80, 80)), max_size=6)


def plainly(reducer: str, beams: list[tuple[float, bool, float]]) -> float:
    kept = [(v, angle) for v, accepted, angle in beams if accepted and not math.isnan(v)]
    values = [v for v, _ in kept]
    if reducer == "count":
        return float(sum(v != 0 for v in values))
    if not values:
        return math.nan
    if reducer == "greatest":
        return max(values)
    if reducer == "least":
        return min(values)
    if reducer == "spread":
        return max(values) - min(values)
    if reducer == "mean":
        return sum(values) / len(values)
    if reducer == "share":
        return sum(v != 0 for v in values) / len(values)
    return min(kept, key=lambda pair: abs(pair[1]))[0]


@pytest.mark.parametrize(
    "reducer", ["greatest", "least", "spread", "mean", "share", "count", "nearest_vertical"]
)
@given(pings=st.lists(ping, min_size=1, max_size=8))
def test_a_reducer_is_the_plain_loop(
    reducer: str, pings: list[list[tuple[float, bool, float]]]
) -> None:
    counts = np.array([len(p) for p in pings])
    flat = [beam for p in pings for beam in p]
    values = np.array([b[0] for b in flat], dtype=float)
    accepted = np.array([b[1] for b in flat], dtype=bool)
    angle = np.array([b[2] for b in flat], dtype=float)
    groups = Groups.of(counts)
    folded = (groups.folded(v) for v in (values, accepted, np.abs(angle)))
    found = reduce_beams(reducer, next(folded), groups, *folded)
    expected = np.array([plainly(reducer, p) for p in pings])
    np.testing.assert_allclose(found, expected, rtol=1e-12, atol=1e-12)


@given(
    st.lists(st.sampled_from([NOT_ASSESSED, MET, MISSED, EXEMPT]), max_size=60),
    st.integers(0, 4),
    st.integers(1, 5),
)
def test_sections_are_joined_and_kept_as_a_plain_loop_would(
    status: list[int], join: int, keep: int
) -> None:
    expected = []
    first = last = None
    gap, broken = 0, False
    for at, state in enumerate([*status, None]):
        if state == MISSED:
            if first is None or broken or gap > join:
                if first is not None:
                    expected.append((first, last))
                first = at
            last, gap, broken = at, 0, False
        elif state == MET:
            gap += 1
        else:
            broken = True
    if first is not None:
        expected.append((first, last))
    expected = [(a, b) for a, b in expected if b - a + 1 >= keep]
    assert find_sections(np.array(status, dtype=np.int8), join, keep) == expected


def test_a_ping_that_counts_alone_makes_a_section() -> None:
    status = np.array([MET, MISSED, MET, MET, MET, MISSED], dtype=np.int8)
    alone = np.array([False, True, False, False, False, False])
    assert find_sections(status, 2, 3, alone) == [(1, 1)]


@given(st.floats(1e-9, 1e9), st.sampled_from([-1, 1]))
def test_advice_is_rounded_to_the_safe_side(value: float, towards: int) -> None:
    found = rounded(value, towards)
    assert (found <= value * (1 + 1e-9)) if towards < 0 else (found >= value * (1 - 1e-9))
    assert abs(found - value) <= 0.0101 * value
