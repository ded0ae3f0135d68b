"""Ground: legs, courses, speeds and beams in their place (pyproj itself: tests/published)."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from qa.physics import ground

NAN = float("nan")
latitudes = st.floats(-80.0, 80.0)
longitudes = st.floats(-179.0, 179.0)


@given(latitudes, longitudes, st.floats(0.0, 359.9), st.floats(-300.0, 300.0), st.floats(-300, 300))
def test_placed_point_is_as_far_and_in_that_direction(
    latitude: float, longitude: float, heading: float, across: float, along: float
) -> None:
    to_latitude, to_longitude = ground.place(latitude, longitude, heading, across, along)
    way = ground.leg(latitude, longitude, to_latitude, to_longitude)
    assert way.distance == pytest.approx(math.hypot(across, along), abs=1e-6)
    if way.distance > 1.0:
        bearing = heading + math.degrees(math.atan2(across, along))
        off = (float(way.course) - bearing + 180.0) % 360.0 - 180.0
        assert off == pytest.approx(0.0, abs=1e-4)


@given(latitudes, longitudes, latitudes, longitudes)
def test_distance_is_the_same_both_ways(a: float, b: float, c: float, d: float) -> None:
    assert ground.distance(a, b, c, d) == pytest.approx(
        float(ground.distance(c, d, a, b)), abs=1e-6
    )


def test_equal_positions_have_no_course() -> None:
    same = ground.leg(50.0, 5.0, 50.0, 5.0)
    assert same.distance == 0.0
    assert np.isnan(same.course)
    assert ground.course(50.0, 5.0, 49.0, 5.0) == pytest.approx(180.0)
    assert ground.course(50.0, 5.0, 50.0 + 5e-8, 5.0) == pytest.approx(0.0, abs=0.1)


def test_unknown_positions_stay_unknown_and_shapes_broadcast() -> None:
    way = ground.leg([[50.0], [NAN]], 5.0, 51.0, [5.0, 6.0, NAN])
    assert way.distance.shape == (2, 3)
    expected = [[False, False, True], [True, True, True]]
    assert np.isnan(way.distance).tolist() == expected
    assert np.isnan(way.course).tolist() == expected
    latitude, longitude = ground.place([50.0, NAN], 5.0, [[10.0], [NAN]], 20.0)
    expected = [[False, True], [True, True]]
    assert np.isnan(latitude).tolist() == expected
    assert np.isnan(longitude).tolist() == expected
    assert ground.distance(np.empty(0), 5.0, 51.0, 5.0).shape == (0,)


def test_speed_needs_time() -> None:
    got = ground.speed_over_ground([20.0, 20.0, 20.0, NAN], [10.0, 0.0, -1.0, 10.0])
    assert got[0] == 2.0
    assert np.isnan(got[1:]).all()
    assert ground.speed_over_ground(0.01, 0.005) == 2.0


def test_offsets_turn_with_the_heading() -> None:
    for heading, expected in (
        (0.0, (3.0, 5.0)),
        (90.0, (5.0, -3.0)),
        (180.0, (-3.0, -5.0)),
        (270.0, (-5.0, 3.0)),
    ):
        assert ground.offsets_to_ground(heading, 3.0, 5.0) == pytest.approx(expected)


def test_distance_along_passes_over_unknown_fixes() -> None:
    along = ground.distance_along([NAN, 0.0, 0.0, NAN, 0.0], [0.0, 0.0, 0.001, 0.002, 0.003])
    step = float(ground.distance(0.0, 0.0, 0.0, 0.001))
    assert along[[1, 2, 4]] == pytest.approx([0.0, step, 3.0 * step])
    assert np.isnan(along[[0, 3]]).all()
    assert np.isnan(ground.distance_along([NAN], [NAN])).all()
    assert ground.distance_along([1.0], [1.0]).tolist() == [0.0]


def test_speed_from_fixes_is_not_fooled_by_repeated_ones() -> None:
    """A receiver of 1 Hz and pings at 5 Hz, at 2 m/s to the east along the equator."""
    t = np.arange(0.0, 60.0, 0.2)
    second = np.floor(t)
    longitude = second * 2.0 / 111319.49
    speed = ground.speed_from_fixes(t, np.full(t.shape, 1e-9), longitude)
    assert speed == pytest.approx(np.full(t.shape, 2.0), rel=1e-6)


def test_speed_from_fixes_leaves_out_zero_and_missing_positions() -> None:
    t = np.arange(0.0, 40.0)
    longitude = 5.0 + t * 2.0 / 111319.49
    latitude = np.zeros(t.shape)
    longitude[10] = 0.0
    longitude[20:24] = 0.0
    longitude[30] = NAN
    speed = ground.speed_from_fixes(t, latitude, longitude)
    assert speed == pytest.approx(np.full(t.shape, 2.0), rel=1e-6)


def test_change_of_speed_is_followed_fix_by_fix() -> None:
    t = np.arange(0.0, 41.0)
    metres = np.where(t <= 20.0, t, 20.0 + 3.0 * (t - 20.0))
    speed = ground.speed_from_fixes(t, np.zeros(t.shape), 5.0 + metres / 111319.49)
    assert speed[:20] == pytest.approx(np.full(20, 1.0), rel=1e-6)
    assert speed[20:] == pytest.approx(np.full(21, 3.0), rel=1e-6)
    longer = ground.speed_from_fixes(t, np.zeros(t.shape), 5.0 + metres / 111319.49, 30.0)
    assert longer == pytest.approx(np.full(41, 2.0), rel=1e-6)


def test_every_stretch_has_its_own_speed() -> None:
    t = np.arange(0.0, 31.0)
    metres = np.interp(t, [0.0, 10.0, 20.0, 30.0], [0.0, 10.0, 40.0, 90.0])
    speed = ground.speed_from_fixes(t, np.zeros(t.shape), 5.0 + metres / 111319.49)
    expected = np.repeat([1.0, 3.0, 5.0], [10, 10, 11])
    assert speed == pytest.approx(expected, rel=1e-6)


def test_equator_and_the_first_meridian_are_places() -> None:
    t = np.arange(0.0, 21.0)
    metres = (t + 1.0) / 111319.49
    on_equator = ground.speed_from_fixes(t, np.zeros(t.shape), metres)
    assert on_equator == pytest.approx(np.ones(t.shape), rel=1e-6)
    on_meridian = ground.speed_from_fixes(t, metres, np.zeros(t.shape))
    assert on_meridian == pytest.approx(np.full(t.shape, 110574.28 / 111319.49), rel=1e-5)


def test_speed_from_too_few_fixes_is_not_known() -> None:
    assert np.isnan(ground.speed_from_fixes([0.0, 5.0], [1.0, 1.0], [1.0, 1.1])).all()
    assert np.isnan(ground.speed_from_fixes([0.0, 50.0], [1.0, 1.0], [1.0, 1.0])).all()
    assert np.isnan(ground.speed_from_fixes([0.0, 50.0], [0.0, 0.0], [0.0, 0.0])).all()
    assert np.isnan(ground.speed_from_fixes([0.0], [1.0], [1.0])).all()
    early = ground.speed_from_fixes(
        [0.0, 5.0, 15.0, 20.0], [NAN, 1.0, 1.0, NAN], [NAN, 1.0, 1.1, 0]
    )
    assert np.isnan(early).tolist() == [True, False, False, True]


def test_beams_land_by_their_angle_from_the_vertical() -> None:
    seabed = ground.place_beams(0.0, 0.0, 0.0, 20.0, [60.0, 60.0, 0.0], [0.0, 30.0, 0.0])
    assert seabed.below == pytest.approx([10.0, 20.0 * math.cos(math.radians(30.0)), 20.0])
    east = seabed.longitude * 111319.4908
    assert east == pytest.approx([20.0 * math.sin(math.radians(60.0)), 10.0, 0.0], abs=1e-5)


def test_bow_up_points_the_fan_forward() -> None:
    seabed = ground.place_beams(0.0, 0.0, 90.0, 100.0, 0.0, pitch=10.0)
    assert seabed.below == pytest.approx(100.0 * math.cos(math.radians(10.0)))
    assert seabed.longitude * 111319.4908 == pytest.approx(
        100.0 * math.sin(math.radians(10.0)), abs=1e-4
    )
    assert seabed.latitude == pytest.approx(0.0, abs=1e-9)
