"""Beams on the seabed: C-13 eqs. 3.22 to 3.40, chapter 4 §2.3.9.1; S-44 §3.5.2."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import assume, given
from hypothesis import strategies as st

from qa.physics import beams

heights = st.floats(0.5, 6000.0)
angles = st.floats(-75.0, 75.0)
widths = st.floats(0.1, 10.0)


def tangent(degrees: float) -> float:
    return math.tan(math.radians(degrees))


@given(heights, angles)
def test_range_and_height_are_each_others_inverse(z: float, angle: float) -> None:
    slant_range = beams.slant_range_from_height(z, angle)
    assert slant_range == pytest.approx(z / math.cos(math.radians(angle)), rel=1e-12)
    assert beams.height_from_range(slant_range, angle) == pytest.approx(z, rel=1e-12)
    assert beams.beam_angle_from_range(slant_range, z) == pytest.approx(abs(angle), abs=1e-5)
    across = float(beams.across_distance(z, angle))
    assert across == pytest.approx(z * tangent(angle), rel=1e-9, abs=1e-9)
    assert beams.ground_range(slant_range, z) == pytest.approx(abs(across), rel=1e-6, abs=1e-6 * z)


def test_beam_that_does_not_point_down_meets_no_seabed() -> None:
    for function in (beams.slant_range_from_height, beams.height_from_range, beams.across_distance):
        result = function(10.0, [-90.0, 89.0, 90.0, 100.0])
        assert np.isnan(result).tolist() == [True, False, True, True]
    assert np.isnan(beams.steered_beamwidth(1.0, [90.0, -95.0])).all()
    assert np.isnan(beams.footprint_across(10.0, [90.0, -95.0], 1.0)).all()
    assert np.isnan(beams.footprint_across(10.0, 90.4, 0.5))


@given(angles, st.floats(-20.0, 20.0))
def test_roll_turns_angles_there_and_back(angle: float, roll: float) -> None:
    seen = beams.array_angle(angle, roll)
    assert seen == pytest.approx(angle + roll)
    assert beams.vertical_angle(seen, roll) == pytest.approx(angle, abs=1e-9)


def test_starboard_down_brings_a_starboard_beam_nearer_the_vertical() -> None:
    assert beams.vertical_angle(50.0, 5.0) == 45.0
    assert beams.vertical_angle(-50.0, 5.0) == -55.0


def test_angles_from_the_horizontal() -> None:
    got = beams.vertical_angle_from_horizontal([90.0, 20.0, 20.0], [True, True, False])
    assert got.tolist() == [0.0, 70.0, -70.0]


@given(widths, angles, st.floats(-40.0, 40.0))
def test_steering_widens_from_the_arrays_own_normal(
    width: float, angle: float, mount: float
) -> None:
    assume(abs(angle - mount) < 85.0)
    steered = float(beams.steered_beamwidth(width, angle, mount))
    assert steered == pytest.approx(width / math.cos(math.radians(angle - mount)), rel=1e-9)
    assert steered >= width * (1.0 - 1e-12)


@given(heights, widths)
def test_footprint_of_a_vertical_beam(z: float, width: float) -> None:
    """C-13 eq. 3.34."""
    single = 2.0 * z * tangent(width / 2.0)
    assert beams.footprint_along(z, width) == pytest.approx(single, rel=1e-12)
    assert beams.footprint_across(z, 0.0, width) == pytest.approx(single, rel=1e-12)


@given(heights, angles, widths)
def test_exact_footprint_is_the_difference_of_both_edges(
    z: float, angle: float, width: float
) -> None:
    exact = z * (tangent(angle + width / 2.0) - tangent(angle - width / 2.0))
    assert beams.footprint_across(z, angle, width) == pytest.approx(exact, rel=1e-9)


@given(heights, angles)
def test_exact_footprint_tends_to_the_handbooks_for_narrow_beams(z: float, angle: float) -> None:
    """C-13 eq. 3.35: the difference shrinks with the square of the width."""
    for width, tolerance in ((1.0, 5e-3), (0.1, 5e-5), (0.01, 5e-7)):
        exact = float(beams.footprint_across(z, angle, width))
        handbook = float(beams.footprint_across_handbook(z, angle, width))
        assert exact == pytest.approx(handbook, rel=tolerance)


@given(heights, angles, widths, st.floats(1.0, 50.0))
def test_beam_limited_footprints_grow_in_proportion_to_depth(
    z: float, angle: float, width: float, times: float
) -> None:
    for function in (beams.footprint_across, beams.footprint_across_handbook):
        assert function(times * z, angle, width) == pytest.approx(
            times * float(function(z, angle, width)), rel=1e-9
        )
    near = beams.footprint_along(beams.slant_range_from_height(z, angle), width)
    far = beams.footprint_along(beams.slant_range_from_height(times * z, angle), width)
    assert far == pytest.approx(times * float(near), rel=1e-9)


def test_footprint_whose_outer_edge_is_level_is_endless() -> None:
    got = beams.footprint_across(10.0, [89.497, 89.5, 89.9], 1.0)
    assert np.isfinite(got[0])
    assert np.isinf(got[1:]).all()
    assert np.isinf(beams.footprint_across(10.0, -88.0, 10.0))


@given(heights, st.floats(-60.0, 60.0), st.floats(0.05, 0.5), st.floats(-25.0, 25.0))
def test_slope_footprint_is_where_the_edges_meet_the_slope(
    z: float, angle: float, width: float, slope: float
) -> None:
    """C-13 eq. 3.36, against the crossing of two edges with a sloping line."""
    across = z * tangent(angle)

    def distance_along_slope(edge: float) -> float:
        # The seabed rises to starboard: height over it at x is z - (x - across) tan(slope).
        x = (z + across * tangent(slope)) * tangent(edge) / (1.0 + tangent(edge) * tangent(slope))
        return x / math.cos(math.radians(slope))

    exact = distance_along_slope(angle + width / 2.0) - distance_along_slope(angle - width / 2.0)
    got = float(beams.footprint_across_on_slope(z, angle, width, slope))
    assert got == pytest.approx(exact, rel=2e-3)


def test_beam_along_or_behind_a_slope_meets_nothing() -> None:
    got = beams.footprint_across_on_slope(10.0, [-60.0, -60.0, 89.0], 1.0, [29.0, 30.0, 0.0])
    assert np.isnan(got).tolist() == [False, True, False]
    assert np.isnan(beams.footprint_across_on_slope(10.0, 90.4, 1.0, 10.0))
    assert np.isnan(beams.footprint_across_on_slope(10.0, -60.0, 1.0, 30.4))


@given(heights, st.floats(1.0, 80.0), st.floats(0.001, 1.0))
def test_pulse_limited_length_is_the_difference_of_two_circles(
    z: float, angle: float, resolution: float
) -> None:
    r = float(beams.slant_range_from_height(z, angle))
    near = math.sqrt(r**2 - z**2)
    far = math.sqrt((r + resolution) ** 2 - z**2)
    got = float(beams.pulse_limited_across(r, z, resolution))
    assert got == pytest.approx(far - near, rel=1e-5, abs=1e-6)


@given(st.floats(30.0, 85.0))
def test_pulse_limited_length_tends_to_resolution_over_sine(angle: float) -> None:
    """C-13 eq. 3.16, far from the nadir."""
    r = float(beams.slant_range_from_height(1000.0, angle))
    expected = 0.01 / math.sin(math.radians(angle))
    assert beams.pulse_limited_across(r, 1000.0, 0.01) == pytest.approx(expected, rel=1e-4)


@given(heights, st.floats(0.001, 1.0))
def test_nadir_patch_is_both_sides_of_the_first_echo(z: float, resolution: float) -> None:
    both = float(beams.pulse_limited_nadir(z, resolution))
    assert both == pytest.approx(2.0 * math.sqrt(2.0 * z * resolution + resolution**2), rel=1e-9)
    assert both == pytest.approx(
        2.0 * float(beams.pulse_limited_across(z, z, resolution)), rel=1e-9
    )


def test_range_short_of_the_seabed_has_no_patch() -> None:
    assert np.isnan(beams.pulse_limited_across(9.999, 10.0, 0.1))
    assert np.isnan(beams.ground_range(9.999, 10.0))
    assert beams.pulse_limited_across(10.0, 10.0, 0.0) == 0.0


def test_beam_that_holds_the_nadir_sees_both_sides() -> None:
    patch = beams.pulse_limited_in_beam
    assert patch(10.0, 10.0, 0.1, 20.0, 40.0) == pytest.approx(
        float(beams.pulse_limited_nadir(10.0, 0.1))
    )
    assert patch(11.0, 10.0, 0.1, -20.1, 40.0) == pytest.approx(
        float(beams.pulse_limited_across(11.0, 10.0, 0.1))
    )


@given(heights, st.floats(-70.0, 0.0), st.floats(0.0, 70.0))
def test_swath_is_the_sum_of_its_sides(z: float, port: float, starboard: float) -> None:
    width = z * (tangent(starboard) - tangent(port))
    assert beams.swath_width_between(z, port, starboard) == pytest.approx(width, rel=1e-9, abs=1e-9)
    assert beams.beam_spacing_between(z, starboard, port) == pytest.approx(
        width, rel=1e-9, abs=1e-9
    )
    even = beams.swath_width(z, 2.0 * starboard)
    assert even == pytest.approx(2.0 * z * tangent(starboard), rel=1e-9, abs=1e-9)


@given(st.floats(0.001, 0.05), st.floats(0.2, 3.0))
def test_array_size_and_beam_width_are_each_others_inverse(wavelength: float, size: float) -> None:
    assume(size > 2.0 * wavelength)
    line = beams.beamwidth_line(wavelength, size)
    assert beams.array_length_from_beamwidth(wavelength, line) == pytest.approx(size, rel=1e-9)
    piston = beams.beamwidth_circular(wavelength, size)
    assert beams.diameter_from_beamwidth(wavelength, piston) == pytest.approx(size, rel=1e-9)


def test_line_pattern_has_half_its_power_at_the_beams_edge() -> None:
    wavelength, length = 0.01, 0.2
    edge = math.radians(float(beams.beamwidth_line(wavelength, length)) / 2.0)
    assert np.sinc(length / wavelength * math.sin(edge)) ** 2 == pytest.approx(0.5, abs=1e-6)


def test_piston_pattern_has_half_its_power_at_the_beams_edge() -> None:
    from scipy.special import j1

    wavelength, diameter = 0.01, 0.1
    edge = math.radians(float(beams.beamwidth_circular(wavelength, diameter)) / 2.0)
    u = math.pi * diameter / wavelength * math.sin(edge)
    assert (2.0 * j1(u) / u) ** 2 == pytest.approx(0.5, abs=1e-6)


def test_array_too_short_for_a_beam_hears_all_round() -> None:
    assert beams.beamwidth_line(0.1, 0.01) == pytest.approx(180.0)
    assert beams.beamwidth_circular(0.1, 0.01) == pytest.approx(180.0)


@given(st.floats(0.05, 3.0), st.floats(0.001, 0.05))
def test_far_field_begins_where_the_ways_differ_by_half_a_wave(
    length: float, wavelength: float
) -> None:
    """C-13 eq. 3.29: k (sqrt(R^2 + (L/2)^2) - R) = pi."""
    assume(length > 1.01 * wavelength)
    r = float(beams.far_field_range(length, wavelength))
    k = 2.0 * math.pi / wavelength
    assert k * (math.hypot(r, length / 2.0) - r) == pytest.approx(math.pi, rel=1e-6)
    assert beams.in_far_field([0.99 * r, 1.01 * r], length, wavelength).tolist() == [False, True]


def test_small_array_is_far_field_at_once() -> None:
    assert beams.far_field_range(0.01, 0.02) == 0.0


def test_unfocused_footprint_is_no_smaller_than_the_array_when_near() -> None:
    got = beams.footprint_unfocused([1.0, 4.1, 5.0], 1.5, 0.5, 0.015)
    assert got[:2].tolist() == [0.5, 0.5]
    assert got[2] == pytest.approx(10.0 * tangent(0.75))


@given(heights, st.integers(3, 500), st.floats(20.0, 140.0))
def test_equiangular_spacings_fill_the_swath(z: float, number: int, swath: float) -> None:
    step = swath / (number - 1)
    middles = -swath / 2.0 + step * (np.arange(number - 1) + 0.5)
    spacings = beams.beam_spacing_equiangular(z, middles, step)
    assert spacings.sum() == pytest.approx(float(beams.swath_width(z, swath)), rel=1e-9)
    even = beams.beam_spacing_equidistant(z, swath, number)
    assert even * (number - 1) == pytest.approx(float(beams.swath_width(z, swath)), rel=1e-12)


@given(st.floats(0.1, 20.0), angles, widths, widths)
def test_footprint_at_the_greatest_depth_is_just_the_target(
    size: float, angle: float, along: float, across: float
) -> None:
    z = beams.greatest_depth_for_footprint_along(size, angle, along)
    r = beams.slant_range_from_height(z, angle)
    assert beams.footprint_along(r, along) == pytest.approx(size, rel=1e-9)
    assert beams.greatest_range_for_footprint_along(size, along) == pytest.approx(float(r))
    z_across = beams.greatest_depth_for_footprint_across(size, angle, across)
    assert beams.footprint_across(z_across, angle, across) == pytest.approx(size, rel=1e-9)
    both = beams.greatest_depth_for_footprint(size, angle, along, across)
    assert both == min(z, z_across)


@given(heights, st.floats(0.01, 40.0), widths)
def test_slope_error_of_a_vertical_beam(z: float, slope: float, width: float) -> None:
    """C-13 eq. 3.40."""
    angle = math.radians(min(slope, width / 2.0))
    expected = z * (1.0 / math.cos(angle) - 1.0)
    assert beams.depth_error_from_slope(z, slope, width) == pytest.approx(expected, rel=1e-5)
    assert beams.depth_error_from_slope(z, -slope, width) == pytest.approx(expected, rel=1e-5)


def test_coverage_is_never_more_than_all() -> None:
    assert beams.bathymetric_coverage(100.0, 30.0, 20.0, 50.0) == 1.0
    assert beams.bathymetric_coverage(100.0, 2.0, 100.0) == pytest.approx(2.0 * tangent(1.0))
    assert beams.ensonification_percent(100.0, 200.0) == pytest.approx(100.0)
    assert beams.line_overlap(150.0, 160.0) == -10.0
