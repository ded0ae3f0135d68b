"""Hits on a target: C-13 chapter 4, eqs. 4.1 and 4.2, against pings laid out one by one."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from qa.physics import hits

lengths = st.floats(0.1, 20.0)
footprints = st.floats(0.01, 20.0)
spacings = st.floats(0.05, 10.0)


def counted(length: float, footprint: float, spacing: float, places: np.ndarray) -> np.ndarray:
    """Pings whose footprint touches a target of a length that begins at each place."""
    pings = np.arange(-2000, 2000) * spacing
    touch = (pings[:, None] + footprint / 2.0 > places) & (
        pings[:, None] - footprint / 2.0 < places + length
    )
    return touch.sum(axis=0)


@given(st.floats(0.1, 5.0), st.floats(0.01, 5.0), st.floats(0.05, 3.0), st.integers(0, 10**6))
def test_counts_are_those_of_pings_laid_out(
    length: float, footprint: float, spacing: float, seed: int
) -> None:
    places = np.random.default_rng(seed).uniform(0.0, spacing, 400)
    found = counted(length, footprint, spacing, places)
    least = hits.guaranteed_hits(length, footprint, spacing)
    most = hits.possible_hits(length, footprint, spacing)
    assert found.min() >= least
    assert found.max() <= most
    mean = least + hits.extra_hit_chance(length, footprint, spacing)
    assert abs(found.mean() - mean) < 0.13
    for wanted in (int(least), int(least) + 1, int(least) + 2):
        chance = hits.chance_of_hits(length, footprint, spacing, wanted)
        assert abs((found >= wanted).mean() - chance) < 0.13


@given(lengths, footprints, spacings)
def test_possible_is_one_more_than_guaranteed(length: float, foot: float, spacing: float) -> None:
    difference = hits.possible_hits(length, foot, spacing) - hits.guaranteed_hits(
        length, foot, spacing
    )
    mean = (length + foot) / spacing
    assert difference == (0.0 if abs(mean - round(mean)) <= 1e-9 * round(mean) else 1.0)


@given(st.integers(1, 5000), st.integers(1, 400), st.integers(1, 60))
def test_decimal_multiples_are_counted_whole(spacing: int, foot: int, number: int) -> None:
    """Centimetres: 0.7 m + 0.2 m every 0.3 m is three, though not in binary numbers."""
    length = spacing * number / 100.0 + 4.0 - foot / 100.0
    total = spacing * number + 400
    got = hits.guaranteed_hits(length, foot / 100.0, spacing / 100.0)
    assert got == total // spacing
    possible = hits.possible_hits(length, foot / 100.0, spacing / 100.0)
    assert possible == -(-total // spacing)


def test_tolerance_is_a_billionth_and_no_more() -> None:
    assert hits.guaranteed_hits(1.0, 0.0, 0.2 * (1.0 + 5e-10)) == 5.0
    assert hits.guaranteed_hits(1.0, 0.0, 0.2 * (1.0 + 5e-9)) == 4.0
    assert hits.possible_hits(1.0, 0.0, 0.2 * (1.0 - 5e-10)) == 5.0
    assert hits.possible_hits(1.0, 0.0, 0.2 * (1.0 - 5e-9)) == 6.0
    assert hits.guaranteed_hits(1.0, 0.0, 0.2 * (1.0 + 0.995e-9)) == 5.0
    assert hits.guaranteed_hits(1.0, 0.0, 0.2 * (1.0 + 1.005e-9)) == 4.0


def test_float32_multiples_are_counted_whole() -> None:
    single = [np.full(2, v, dtype=np.float32) for v in (0.7, 0.2, 0.3)]
    assert hits.guaranteed_hits(*single).tolist() == [3.0, 3.0]
    off = np.full(2, 0.3 * (1.0 + 2e-6), dtype=np.float32)
    assert hits.guaranteed_hits(single[0], single[1], off).tolist() == [2.0, 2.0]


def test_standing_vessel_hits_for_ever_and_nothing_is_never_hit() -> None:
    assert np.isinf(hits.guaranteed_hits(1.0, 0.5, 0.0))
    assert hits.extra_hit_chance(1.0, 0.5, 0.0) == 0.0
    assert np.isinf(hits.guaranteed_hits(0.005, 0.005, 0.0))
    assert hits.guaranteed_hits(0.0, 0.0, 0.0) == 0.0
    assert hits.possible_hits(0.0, 0.0, 0.0) == 0.0
    assert hits.guaranteed_hits(0.0, 0.0, 1.0) == 0.0
    assert hits.possible_hits(0.0, 0.0, 1.0) == 0.0


@given(lengths, footprints, st.integers(1, 10))
def test_greatest_spacing_just_guarantees_the_hits(length: float, foot: float, number: int) -> None:
    spacing = float(hits.greatest_ping_spacing(length, foot, number))
    assert hits.guaranteed_hits(length, foot, spacing) == number
    assert hits.guaranteed_hits(length, foot, 1.0001 * spacing) == number - 1


@given(lengths, footprints, st.integers(2, 10))
def test_spacing_under_the_greatest_possible_can_give_the_hits(
    length: float, foot: float, number: int
) -> None:
    spacing = float(hits.greatest_ping_spacing_possible(length, foot, number))
    assert hits.possible_hits(length, foot, 0.9999 * spacing) == number
    assert hits.possible_hits(length, foot, spacing) == number - 1


def test_one_ping_is_possible_at_any_spacing() -> None:
    assert np.isinf(hits.greatest_ping_spacing_possible(1.0, 0.5, 1))
    assert np.isinf(hits.greatest_speed_possible(1.0, 0.5, 1, 0.2))


@given(footprints, spacings, st.integers(1, 10))
def test_lengths_of_both_equations(foot: float, spacing: float, number: int) -> None:
    always = float(hits.shortest_target_always_hit(foot, spacing, number))
    never = float(hits.longest_target_never_hit(foot, spacing, number))
    assert always == pytest.approx(max(number * spacing - foot, 0.0), abs=1e-12)
    assert never == pytest.approx(max((number - 1) * spacing - foot, 0.0), abs=1e-12)
    assert hits.guaranteed_hits(always, foot, spacing) >= number
    if never > 0.0:
        assert hits.possible_hits(never, foot, spacing) == number - 1


@given(lengths, footprints, st.integers(2, 10), st.floats(0.05, 2.0))
def test_speeds_and_intervals_come_from_the_spacing(
    length: float, foot: float, number: int, interval: float
) -> None:
    speed = float(hits.greatest_speed(length, foot, number, interval))
    spacing = float(hits.greatest_ping_spacing(length, foot, number))
    assert hits.ping_spacing(speed, interval) == pytest.approx(spacing, rel=1e-12)
    assert hits.greatest_ping_interval(length, foot, number, speed) == pytest.approx(interval)
    possible = float(hits.greatest_speed_possible(length, foot, number, interval))
    assert possible == pytest.approx(speed * number / (number - 1), rel=1e-12)


def test_unseen_ground_and_the_outer_side_of_a_turn() -> None:
    assert hits.unseen_ground([1.0, 2.0], 1.5).tolist() == [0.0, 0.5]
    turned = hits.outer_ping_spacing(0.5, [50.0, -50.0], -1.0)
    assert turned == pytest.approx([0.5 + 50.0 * math.radians(1.0)] * 2)


def test_beams_are_counted_as_pings_are() -> None:
    assert hits.guaranteed_beams(1.0, 0.5, 0.4) == 3.0
    assert hits.possible_beams(1.0, 0.5, 0.4) == 4.0


@given(st.integers(0, 12), st.integers(0, 12), st.floats(0.0, 1.0))
def test_confidence_is_the_binomial_tail(number: int, needed: int, chance: float) -> None:
    expected = sum(
        math.comb(number, k) * chance**k * (1.0 - chance) ** (number - k)
        for k in range(needed, number + 1)
    )
    got = hits.detection_confidence(number, needed, chance)
    assert got == pytest.approx(expected, abs=1e-9)
