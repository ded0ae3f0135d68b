"""Uncertainty: C-13 eqs. 3.70 to 3.84 against the geometry that they come from; S-44 Table 1."""

from __future__ import annotations

import inspect
import math
from collections.abc import Callable

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from qa.physics import rays, uncertainty

Z, BETA, C = 40.0, 55.0, 1490.0
RANGE = Z / math.cos(math.radians(BETA))


def slope(function: Callable[[float], float], step: float) -> float:
    """Change of a result for one unit of an input, to second order."""
    return (function(step) - function(-step)) / (2.0 * step)


def depth_with(angle: float = 0.0, distance: float = 0.0) -> float:
    return (RANGE + distance) * math.cos(math.radians(BETA + angle))


def across_with(angle: float = 0.0, distance: float = 0.0) -> float:
    return (RANGE + distance) * math.sin(math.radians(BETA + angle))


def test_roll_and_detected_angle_are_the_turn_of_the_beam() -> None:
    """C-13 eq. 3.80."""
    per_degree = abs(slope(lambda a: depth_with(angle=a), 1e-4))
    assert uncertainty.vertical_roll(Z, BETA, 0.1) == pytest.approx(0.1 * per_degree, rel=1e-6)
    assert uncertainty.vertical_beam_angle(Z, BETA, 0.1) == pytest.approx(
        0.1 * per_degree, rel=1e-6
    )
    assert uncertainty.vertical_roll(Z, -BETA, 0.1) == pytest.approx(0.1 * per_degree, rel=1e-6)
    pitched = uncertainty.vertical_roll(Z, BETA, 0.1, 20.0)
    assert pitched == pytest.approx(0.1 * per_degree * math.cos(math.radians(20.0)), rel=1e-6)
    across = abs(slope(lambda a: across_with(angle=a), 1e-4))
    assert uncertainty.across_roll(Z, 0.1) == pytest.approx(0.1 * across, rel=1e-6)


def test_detected_range_is_the_length_of_the_beam() -> None:
    vertical = slope(lambda r: depth_with(distance=r), 1e-3)
    across = slope(lambda r: across_with(distance=r), 1e-3)
    assert uncertainty.vertical_range(BETA, 0.1) == pytest.approx(0.1 * vertical, rel=1e-6)
    assert uncertainty.across_range(BETA, 0.1) == pytest.approx(0.1 * across, rel=1e-6)


def test_pitch_turns_the_fan_forward() -> None:
    """C-13 eq. 3.81."""
    pitch = 6.0

    def below(extra: float) -> float:
        return Z / math.cos(math.radians(pitch)) * math.cos(math.radians(pitch + extra))

    expected = abs(slope(below, 1e-4)) * 0.1
    measured = Z / math.cos(math.radians(pitch))
    got = uncertainty.vertical_pitch(measured, pitch, 0.1)
    assert got == pytest.approx(expected, rel=1e-6)
    assert uncertainty.along_pitch(Z, 0.1) == pytest.approx(Z * math.radians(0.1), rel=1e-9)


def test_heave_adds_the_lever_arms_motion() -> None:
    """C-13 eq. 3.82: how far the transducer hangs under the motion sensor."""
    x, y, z = 12.0, -3.0, 4.0
    roll, pitch = 8.0, -5.0

    def hangs(r: float, p: float) -> float:
        r, p = math.radians(r), math.radians(p)
        return -x * math.sin(p) + math.cos(p) * (y * math.sin(r) + z * math.cos(r))

    by_roll = slope(lambda d: hangs(roll + d, pitch), 1e-4) * 0.2
    by_pitch = slope(lambda d: hangs(roll, pitch + d), 1e-4) * 0.3
    got = uncertainty.vertical_heave(0.05, 0.2, 0.3, x, y, z, roll, pitch)
    assert got == pytest.approx(math.sqrt(0.05**2 + by_roll**2 + by_pitch**2), rel=1e-6)
    assert uncertainty.vertical_heave(0.05) == 0.05


def test_cast_terms_are_those_of_traced_rays() -> None:
    """C-13 eq. 3.71, both terms, and the horizontal counterpart, by ray tracing."""
    for beta in (0.0, 30.0, 70.0):
        error = rays.sounding_error([0.0, 100.0], [C, C + 100.0 * 1e-5], [0.0], [C], 0.0, beta, Z)
        per_gradient = abs(float(error.depth)) / 1e-5
        assert uncertainty.vertical_profile_gradient(Z, beta, C, 0.1) == pytest.approx(
            0.1 * per_gradient, rel=1e-3, abs=1e-6
        )
        across = abs(float(error.across)) / 1e-5
        assert uncertainty.across_profile_gradient(Z, beta, C, 0.1) == pytest.approx(
            0.1 * across, rel=1e-3, abs=1e-6
        )
        shifted = rays.sounding_error([0.0], [C + 0.01], [0.0], [C], 0.0, beta, Z)
        assert uncertainty.vertical_profile_speed(Z, C, 2.0) == pytest.approx(
            200.0 * abs(float(shifted.depth)), rel=1e-6
        )
        assert uncertainty.across_profile_speed(Z, beta, C, 2.0) == pytest.approx(
            200.0 * abs(float(shifted.across)), rel=1e-6, abs=1e-9
        )


@pytest.mark.parametrize("mount", [0.0, 30.0])
def test_surface_speed_turns_the_beam_by_steering(mount: float) -> None:
    """C-13 eq. 3.76, and with a tilted head tan(beta) tan(steering)."""

    def turn(extra: float) -> float:
        return float(rays.steered_angle_in_water(BETA - mount, C + extra, C)) - (BETA - mount)

    depth = abs(slope(lambda e: depth_with(angle=turn(e)), 0.01))
    across = abs(slope(lambda e: across_with(angle=turn(e)), 0.01))
    got = uncertainty.vertical_surface_speed(Z, BETA, C, 1.5, BETA - mount)
    assert got == pytest.approx(1.5 * depth, rel=1e-5)
    assert uncertainty.across_surface_speed(Z, BETA - mount, C, 1.5) == pytest.approx(
        1.5 * across, rel=1e-5
    )
    if mount == 0.0:
        assert uncertainty.vertical_surface_speed(Z, BETA, C, 1.5) == pytest.approx(float(got))
        handbook = Z / C * math.tan(math.radians(BETA)) ** 2 * 1.5
        assert got == pytest.approx(handbook, rel=1e-9)


def test_heading_and_timing_move_soundings_along_the_track() -> None:
    expected = Z * math.tan(math.radians(BETA)) * math.radians(0.2)
    assert uncertainty.along_heading(Z, BETA, 0.2) == pytest.approx(expected, rel=1e-9)
    assert uncertainty.along_latency(-3.0, 0.1) == pytest.approx(0.3)


def test_draught_and_tide_add_as_squares() -> None:
    assert uncertainty.vertical_draught(0.02, 0.03, 0.06) == pytest.approx(0.07)
    assert uncertainty.vertical_tide(0.05, 0.12) == pytest.approx(0.13)
    assert uncertainty.combined(2.0) == 2.0


SIGMAS = [
    name
    for name in inspect.signature(uncertainty.vertical_uncertainty).parameters
    if name.endswith("_sigma")
]
HORIZONTAL_SIGMAS = [
    name
    for name in inspect.signature(uncertainty.horizontal_uncertainty).parameters
    if name.endswith("_sigma")
]
some = dict.fromkeys(SIGMAS, 0.05)
some_horizontal = dict.fromkeys(HORIZONTAL_SIGMAS, 0.05)


@pytest.mark.parametrize("name", SIGMAS)
def test_vertical_uncertainty_never_falls_when_a_term_grows(name: str) -> None:
    sizes = np.array([0.0, 0.01, 0.05, 0.2, 1.0])
    got = uncertainty.vertical_uncertainty(Z, BETA, C, **{**some, name: sizes}, pitch=3.0)
    assert (np.diff(got) > 0.0).all()


@pytest.mark.parametrize("name", HORIZONTAL_SIGMAS)
def test_horizontal_uncertainty_never_falls_when_a_term_grows(name: str) -> None:
    sizes = np.array([0.0, 0.01, 0.05, 0.2, 1.0])
    got = uncertainty.horizontal_uncertainty(
        Z, BETA, C, **{**some_horizontal, name: sizes}, speed=3.0
    )
    assert (np.diff(got) > 0.0).all()


def test_total_is_the_root_of_the_reported_terms() -> None:
    """C-13 eq. 3.84 at 95 % as S-44 §2.7."""
    terms = uncertainty.vertical_terms(Z, BETA, C, **some, pitch=3.0)
    assert len(terms) == 10
    total = 1.96 * math.sqrt(sum(float(sigma) ** 2 for sigma in terms.values()))
    assert uncertainty.vertical_uncertainty(Z, BETA, C, **some, pitch=3.0) == pytest.approx(total)
    assert terms["sound speed gradient"] == uncertainty.vertical_profile_gradient(Z, BETA, C, 0.05)
    assert terms["surface sound speed"] == uncertainty.vertical_surface_speed(Z, BETA, C, 0.05)
    tilted = uncertainty.vertical_terms(Z, BETA, C, **some, steering_angle=20.0)
    assert tilted["surface sound speed"] < terms["surface sound speed"]


def test_position_is_the_root_of_its_reported_terms() -> None:
    terms = uncertainty.horizontal_terms(Z, BETA, C, **some_horizontal, speed=3.0)
    assert (len(terms.along), len(terms.across)) == (5, 8)
    square = sum(float(s) ** 2 for part in (terms.along, terms.across) for s in part.values())
    total = 2.45 * math.sqrt(0.5 * square)
    got = uncertainty.horizontal_uncertainty(Z, BETA, C, **some_horizontal, speed=3.0)
    assert got == pytest.approx(total)
    tilted = uncertainty.horizontal_terms(Z, BETA, C, **some_horizontal, steering_angle=20.0)
    assert tilted.across["surface sound speed"] < terms.across["surface sound speed"]


def test_terms_that_are_not_given_are_zero() -> None:
    for sigma in uncertainty.vertical_terms(Z, BETA, C).values():
        assert sigma == 0.0
    terms = uncertainty.horizontal_terms(Z, BETA, C)
    for sigma in [*terms.along.values(), *terms.across.values()]:
        assert sigma == 0.0
    assert uncertainty.vertical_terms(Z, BETA, C, pitch_sigma=1.0)["pitch"] == 0.0
    assert uncertainty.vertical_terms(Z, BETA, C, pitch=9.0)["pitch"] == 0.0
    assert uncertainty.horizontal_terms(Z, BETA, C, latency_sigma=1.0).along["timing"] == 0.0
    assert uncertainty.horizontal_terms(Z, BETA, C, speed=3.0).along["timing"] == 0.0
    level = uncertainty.vertical_terms(Z, BETA, C, roll_sigma=1.0)["roll"]
    assert level == uncertainty.vertical_roll(Z, BETA, 1.0, 0.0)


def test_nothing_uncertain_is_no_uncertainty() -> None:
    assert uncertainty.vertical_uncertainty(Z, BETA, C) == 0.0
    assert uncertainty.horizontal_uncertainty(Z, BETA, C) == 0.0


def test_coverage_factors_are_those_of_the_normal_distribution() -> None:
    """S-44 §2.7, to the two digits that it gives."""
    from scipy.stats import chi2, norm

    assert uncertainty.uncertainty_95(1.0) == pytest.approx(norm.ppf(0.975), abs=0.005)
    assert uncertainty.horizontal_95(1.0, 1.0) == pytest.approx(
        math.sqrt(chi2.ppf(0.95, 2)), abs=0.005
    )
    assert uncertainty.sigma_from_95(uncertainty.uncertainty_95(0.3)) == pytest.approx(0.3)


@given(st.floats(0.0, 10.0), st.floats(0.0, 10.0))
def test_unequal_axes_share_the_mean_square(along: float, across: float) -> None:
    expected = 2.45 * math.sqrt((along**2 + across**2) / 2.0)
    assert uncertainty.horizontal_95(along, across) == pytest.approx(expected)


TABLE_1 = {
    # IHO S-44 Edition 6.1.0, Table 1 [read]: TVU a, b; THU a, b; feature at 30 and 100 m.
    "exclusive": (0.15, 0.0075, 1.0, 0.0, 0.5, 0.5),
    "special": (0.25, 0.0075, 2.0, 0.0, 1.0, 1.0),
    "1a": (0.5, 0.013, 5.0, 0.05, 2.0, 10.0),
    "1b": (0.5, 0.013, 5.0, 0.05, math.nan, math.nan),
    "2": (1.0, 0.023, 20.0, 0.10, math.nan, math.nan),
}


@pytest.mark.parametrize("order", TABLE_1)
def test_orders_are_those_of_the_standard(order: str) -> None:
    a, b, thu_a, thu_b, shallow, deep = TABLE_1[order]
    depths = np.array([0.5, 10.0, 37.0, 100.0, 1000.0, 6000.0])
    allowed = np.sqrt(a**2 + (b * depths) ** 2)
    assert uncertainty.s44_tvu(order, depths) == pytest.approx(allowed)
    assert uncertainty.tvu(a, b, depths) == pytest.approx(allowed)
    assert uncertainty.s44_thu(order, depths) == pytest.approx(thu_a + thu_b * depths)
    sizes = uncertainty.s44_feature_size(order, [30.0, 100.0])
    assert sizes == pytest.approx([shallow, deep], nan_ok=True)
    assert np.isnan(uncertainty.s44_feature_size(order, math.nan))


def test_feature_of_order_1a_steps_at_forty_metres() -> None:
    sizes = uncertainty.s44_feature_size("1a", [39.999, 40.0, 40.001])
    assert sizes == pytest.approx([2.0, 2.0, 4.0001])


def test_order_that_does_not_exist_is_refused_with_those_that_do() -> None:
    for function in (uncertainty.s44_tvu, uncertainty.s44_thu, uncertainty.s44_feature_size):
        with pytest.raises(ValueError, match=r"'1c'.*exclusive, special, 1a, 1b, 2"):
            function("1c", 10.0)
