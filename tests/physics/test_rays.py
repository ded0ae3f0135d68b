"""Rays: C-13 eqs. 3.59 to 3.68, laws of refraction, and a numerical integration."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from qa.physics import rays, water

NODES = [0.0, 8.0, 15.0, 30.0, 60.0, 120.0]
SPEEDS = [1512.0, 1511.0, 1496.0, 1490.0, 1491.0, 1493.0]

casts = st.lists(st.floats(1450.0, 1550.0), min_size=2, max_size=7)


def nodes_of(speeds: list[float]) -> list[float]:
    return list(np.linspace(0.0, 100.0, len(speeds)))


@given(
    st.floats(1400.0, 1600.0), st.floats(-85.0, 85.0), st.floats(1e-4, 5.0), st.floats(0.0, 20.0)
)
def test_ray_in_constant_sound_speed_is_straight(
    c: float, angle: float, time: float, start: float
) -> None:
    for nodes, speeds in (([0.0], [c]), ([0.0, 10.0, 40.0], [c, c, c])):
        end = rays.trace_ray(nodes, speeds, start, angle, time)
        assert end.depth == pytest.approx(
            start + c * time * math.cos(math.radians(angle)), rel=1e-9
        )
        assert end.across == pytest.approx(
            c * time * math.sin(math.radians(angle)), rel=1e-9, abs=1e-9
        )
        assert end.angle == pytest.approx(angle, abs=1e-6)
        assert not end.turned
        assert not end.surfaced


def integrated(
    nodes: list[float], speeds: list[float], start: float, angle: float, time: float
) -> tuple[float, float, float]:
    """The ray equations dx/dt, dz/dt and d(angle)/dt by Runge and Kutta, layer edges and all."""
    steps = 20000
    h = time / steps
    z_nodes, c_nodes = np.asarray(nodes), np.asarray(speeds)
    gradients = np.diff(c_nodes) / np.diff(z_nodes)

    def slope(state: tuple[float, float, float]) -> tuple[float, float, float]:
        _, z, theta = state
        place = int(np.searchsorted(z_nodes, z, side="right")) - 1
        inside = 0 <= place < len(gradients)
        g = gradients[place] if inside else 0.0
        near = min(max(place, 0), len(c_nodes) - 1)
        c = c_nodes[near] + g * (z - z_nodes[near])
        return c * math.sin(theta), c * math.cos(theta), g * math.sin(theta)

    state = (0.0, start, math.radians(angle))
    for _ in range(steps):
        k1 = slope(state)
        k2 = slope(tuple(s + 0.5 * h * k for s, k in zip(state, k1, strict=True)))
        k3 = slope(tuple(s + 0.5 * h * k for s, k in zip(state, k2, strict=True)))
        k4 = slope(tuple(s + h * k for s, k in zip(state, k3, strict=True)))
        state = tuple(
            s + h / 6.0 * (a + 2.0 * b + 2.0 * c + d)
            for s, a, b, c, d in zip(state, k1, k2, k3, k4, strict=True)
        )
    return state[0], state[1], math.degrees(state[2])


@pytest.mark.parametrize(
    ("start", "angle", "time"),
    [
        (2.0, 10.0, 0.07),
        (2.0, -60.0, 0.08),
        (12.0, 80.0, 0.03),
        (20.0, 75.0, 0.15),
        # Bent back downwards by the fast water above it, and upwards by that below.
        (20.0, 96.0, 0.20),
        (31.0, 89.5, 0.60),
        (40.0, -90.4, 0.50),
    ],
)
def test_ray_agrees_with_a_numerical_integration(start: float, angle: float, time: float) -> None:
    across, depth, direction = integrated(NODES, SPEEDS, start, angle, time)
    end = rays.trace_ray(NODES, SPEEDS, start, angle, time)
    assert end.across == pytest.approx(across, abs=2e-3)
    assert end.depth == pytest.approx(depth, abs=2e-3)
    assert end.angle == pytest.approx(direction, abs=2e-3)


@given(casts, st.floats(0.0, 50.0), st.floats(-70.0, 70.0), st.floats(1.0, 60.0))
def test_time_to_a_depth_and_depth_after_a_time_agree(
    speeds: list[float], start: float, angle: float, way: float
) -> None:
    nodes = nodes_of(speeds)
    there = rays.ray_to_depth(nodes, speeds, start, angle, start + way)
    if np.isinf(there.travel_time):
        c = rays.speed_at_depth(nodes, speeds, np.linspace(start, start + way, 400))
        assert c.max() / c[0] * math.sin(math.radians(abs(angle))) > 0.999
        return
    end = rays.trace_ray(nodes, speeds, start, angle, there.travel_time)
    assert end.depth == pytest.approx(start + way, abs=1e-5)
    assert end.across == pytest.approx(float(there.across), abs=1e-4)
    assert end.angle == pytest.approx(float(there.angle), abs=1e-3)


@given(casts, st.floats(0.0, 50.0), st.floats(-65.0, 65.0), st.floats(1.0, 60.0))
def test_time_there_and_back_is_symmetric(
    speeds: list[float], start: float, angle: float, way: float
) -> None:
    nodes = nodes_of(speeds)
    there = rays.ray_to_depth(nodes, speeds, start, angle, start + way)
    if np.isinf(there.travel_time) or abs(there.angle) > 85.0:
        return
    back = rays.trace_ray(nodes, speeds, start + way, 180.0 + float(there.angle), there.travel_time)
    # 180 + angle points the way back; its across is counted positive where the ray was.
    assert back.depth == pytest.approx(start, abs=1e-5) or back.surfaced
    assert abs(back.across) == pytest.approx(abs(float(there.across)), abs=1e-4)


@given(casts, st.floats(0.0, 50.0), st.floats(0.0, 70.0), st.floats(1.0, 80.0))
def test_snells_law_holds_at_every_depth(
    speeds: list[float], start: float, angle: float, way: float
) -> None:
    nodes = nodes_of(speeds)
    there = rays.ray_to_depth(nodes, speeds, start, angle, start + way)
    if np.isinf(there.travel_time):
        return
    c_0, c_1 = rays.speed_at_depth(nodes, speeds, [start, start + way])
    before, after = math.radians(angle), math.radians(float(there.angle))
    assert math.sin(after) / c_1 == pytest.approx(math.sin(before) / c_0, rel=1e-9)


def test_arc_of_a_constant_gradient_is_the_handbooks() -> None:
    """C-13 eqs. 3.59 to 3.68: radius of 1/(kappa g), distance and time in closed form."""
    c_0, g, way, angle = 1480.0, 0.5, 80.0, math.radians(50.0)
    kappa = math.sin(angle) / c_0
    after = math.asin(kappa * (c_0 + g * way))
    radius = 1.0 / (kappa * g)
    across = radius * (math.cos(angle) - math.cos(after))
    time = math.log(math.tan(after / 2.0) / math.tan(angle / 2.0)) / g
    there = rays.ray_to_depth([0.0, 100.0], [c_0, c_0 + g * 100.0], 0.0, 50.0, way)
    assert there.across == pytest.approx(across, rel=1e-9)
    assert there.travel_time == pytest.approx(time, rel=1e-9)
    assert there.angle == pytest.approx(math.degrees(after), rel=1e-9)


@pytest.mark.parametrize("g", [0.5, 0.005])
def test_turning_ray_comes_back_to_its_depth_in_the_time_of_a_full_arc(g: float) -> None:
    c_0, angle = 1480.0, math.radians(80.0)
    nodes, speeds = [0.0, 1e4], [c_0 - g * 100.0, c_0 + g * 9900.0]
    half = math.log(1.0 / math.tan(angle / 2.0)) / g
    end = rays.trace_ray(nodes, speeds, 100.0, 80.0, 2.0 * half)
    assert end.turned
    assert end.depth == pytest.approx(100.0, abs=1e-6)
    assert end.angle == pytest.approx(100.0, abs=1e-6)
    assert end.across == pytest.approx(2.0 * c_0 / g / math.tan(angle), rel=1e-9)
    at_turn = rays.trace_ray(nodes, speeds, 100.0, 80.0, half)
    assert at_turn.depth == pytest.approx(100.0 + c_0 / g * (1.0 / math.sin(angle) - 1.0))
    assert at_turn.angle == pytest.approx(90.0, abs=1e-6)
    deepest = 100.0 + c_0 / g * (1.0 / math.sin(angle) - 1.0)
    reached = rays.ray_to_depth(nodes, speeds, 100.0, 80.0, 0.999 * deepest)
    assert reached.travel_time < half
    crossing = rays.ray_to_depth(nodes, speeds, 100.0, 80.0, 1.001 * deepest)
    assert np.isinf(crossing.travel_time)
    assert np.isinf(crossing.across)
    assert crossing.angle == 90.0


def test_ray_that_meets_the_surface_is_left_there() -> None:
    end = rays.trace_ray([0.0, 100.0], [1500.0, 1500.0], 15.0, [120.0, 60.0], 1.0)
    assert end.surfaced.tolist() == [True, False]
    assert end.depth[0] == 0.0
    assert end.across[0] == pytest.approx(15.0 * math.tan(math.radians(60.0)))


def test_level_ray_in_even_water_stays_level() -> None:
    end = rays.trace_ray([0.0, 100.0], [1500.0, 1500.0], 15.0, [90.0, -90.0], 0.1)
    assert end.depth.tolist() == [15.0, 15.0]
    assert end.across == pytest.approx([150.0, -150.0])


def test_ray_of_endless_turns_is_given_up_with_a_reason(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(rays, "_MOST_STEPS", 10)
    with pytest.raises(ValueError, match="1 rays were not at their end after 10 layers"):
        rays.trace_ray([0.0, 50.0, 100.0], [1510.0, 1490.0, 1510.0], 50.0, 85.0, 100.0)


@pytest.mark.parametrize("angle", [30.0, 88.0, 89.5])
@pytest.mark.parametrize("way", [0.005, 3.0, 30.0])
def test_cast_that_begins_below_the_transducer_is_carried_up(angle: float, way: float) -> None:
    nodes, speeds = [5.0, 30.0, 60.0], [1500.0, 1495.0, 1490.0]
    there = rays.ray_to_depth(nodes, speeds, 2.0, angle, 2.0 + way)
    end = rays.trace_ray(nodes, speeds, 2.0, angle, there.travel_time)
    assert end.depth == pytest.approx(2.0 + way, abs=1e-6)
    assert end.across == pytest.approx(float(there.across), rel=1e-6)
    if way < 3.1:
        straight = way / math.cos(math.radians(angle)) / 1500.0
        assert there.travel_time == pytest.approx(straight, rel=1e-9)


@pytest.mark.parametrize("angle", [90.0, 90.00003, 89.99997])
@pytest.mark.parametrize("upper", [1510.0, 1490.0])
def test_level_ray_on_the_axis_of_a_channel_stays_there(angle: float, upper: float) -> None:
    nodes, speeds = [0.0, 50.0, 100.0], [upper, 1490.0, 1510.0]
    for sign in (1.0, -1.0):
        end = rays.trace_ray(nodes, speeds, 50.0, sign * angle, 2.0)
        assert end.depth == pytest.approx(50.0, abs=1e-5)
        assert end.across == pytest.approx(sign * 2980.0, rel=1e-9)


def test_axis_is_told_by_the_water_on_both_of_its_sides() -> None:
    nodes, speeds = [0.0, 20.0, 50.0, 100.0, 150.0], [1480.0, 1500.0, 1490.0, 1510.0, 1530.0]
    for angle in (90.0, 90.00001):
        end = rays.trace_ray(nodes, speeds, 50.0, angle, 2.0)
        assert end.depth == pytest.approx(50.0, abs=1e-5)


def test_level_ray_in_water_that_grows_faster_downwards_bends_up() -> None:
    across, depth, _ = integrated([0.0, 50.0, 100.0], [1480.0, 1490.0, 1510.0], 50.0, 90.0, 0.3)
    end = rays.trace_ray([0.0, 50.0, 100.0], [1480.0, 1490.0, 1510.0], 50.0, 90.0, 0.3)
    assert end.depth == pytest.approx(depth, abs=1e-3)
    assert end.across == pytest.approx(across, abs=1e-3)
    assert end.turned


def test_level_ray_on_a_ridge_of_speed_leaves_it() -> None:
    end = rays.trace_ray(
        [0.0, 50.0, 100.0], [1490.0, 1510.0, 1490.0], 50.0, [89.99999, 90.00001], 0.3
    )
    assert end.depth[0] > 50.1
    assert end.depth[1] < 49.9
    down = rays.trace_ray([0.0, 50.0, 100.0], [1490.0, 1490.0, 1480.0], 50.0, 90.0, 0.3)
    assert down.depth > 50.1


def test_trapped_ray_keeps_to_its_channel() -> None:
    nodes, speeds = [0.0, 50.0, 100.0], [1510.0, 1490.0, 1510.0]
    end = rays.trace_ray(nodes, speeds, 50.0, 85.0, np.linspace(0.1, 5.0, 50))
    assert (end.depth > 0.0).all() and (end.depth < 100.0).all()
    assert end.turned[-1]


@given(casts, st.floats(-75.0, 75.0), st.floats(5.0, 95.0))
def test_profile_compared_with_itself_gives_zero_error(
    speeds: list[float], angle: float, depth: float
) -> None:
    nodes = nodes_of(speeds)
    error = rays.sounding_error(nodes, speeds, nodes, speeds, 1.0, angle, depth)
    if np.isnan(error.depth):
        there = rays.ray_to_depth(nodes, speeds, 1.0, angle, depth)
        assert np.isinf(there.travel_time)
        return
    assert error.depth == pytest.approx(0.0, abs=1e-5)
    assert error.across == pytest.approx(0.0, abs=1e-4)


def test_faster_cast_makes_vertical_soundings_deeper_in_proportion() -> None:
    error = rays.sounding_error([0.0], [1515.0], [0.0], [1500.0], 0.0, 0.0, 100.0)
    assert error.depth == pytest.approx(1.0, rel=1e-9)
    assert error.across == 0.0


def test_small_gradient_error_is_that_of_the_handbooks_budget() -> None:
    """C-13 eq. 3.71: depth error z^2/(2c)(1 - tan^2) times the error of the gradient."""
    g = 1e-4
    angles = np.array([0.0, 30.0, 45.0, 60.0, -60.0])
    error = rays.sounding_error([0.0, 100.0], [1500.0, 1500.0 + 100.0 * g], [0.0], [1500.0], 0.0,
                                angles, 50.0)  # fmt: skip
    tangent = np.tan(np.radians(angles))
    expected = 50.0**2 / 3000.0 * (1.0 - tangent**2) * g
    assert error.depth == pytest.approx(expected, abs=2e-9)
    assert error.across == pytest.approx(50.0**2 / 1500.0 * tangent * g, abs=2e-8)


def test_every_ray_may_have_its_own_cast() -> None:
    nodes = np.array([[0.0, 50.0], [0.0, 80.0], [0.0, 100.0]])[:, np.newaxis, :]
    speeds = np.array([[1500.0, 1490.0], [1480.0, 1490.0], [1500.0, 1500.0]])[:, np.newaxis, :]
    angles = np.array([-50.0, 0.0, 20.0, 60.0])
    together = rays.trace_ray(nodes, speeds, 2.0, angles, 0.05)
    assert together.depth.shape == (3, 4)
    crossing = rays.ray_to_depth(nodes, speeds, 2.0, angles, 60.0)
    assert crossing.across.shape == (3, 4)
    for i in range(3):
        for j in range(4):
            alone = rays.trace_ray(nodes[i, 0], speeds[i, 0], 2.0, angles[j], 0.05)
            assert together.depth[i, j] == pytest.approx(float(alone.depth), rel=1e-12)
            assert together.across[i, j] == pytest.approx(float(alone.across), abs=1e-9)
            single = rays.ray_to_depth(nodes[i, 0], speeds[i, 0], 2.0, angles[j], 60.0)
            assert crossing.travel_time[i, j] == pytest.approx(float(single.travel_time))


def test_vertical_time_is_that_of_the_harmonic_mean() -> None:
    there = rays.ray_to_depth(NODES, SPEEDS, 3.0, 0.0, 110.0)
    mean = water.harmonic_mean_sound_speed(NODES, SPEEDS, 110.0, 3.0)
    assert there.travel_time == pytest.approx(107.0 / float(mean), rel=1e-9)


def test_nan_in_is_nan_out_and_nowhere_else() -> None:
    end = rays.trace_ray(NODES, SPEEDS, [1.0, np.nan, 1.0, 1.0], [30.0, 30.0, np.nan, 30.0],
                         [0.05, 0.05, 0.05, np.nan])  # fmt: skip
    for values in (end.depth, end.across, end.angle):
        assert np.isnan(values).tolist() == [False, True, True, True]
    there = rays.ray_to_depth(NODES, SPEEDS, [1.0, np.nan, 1.0, 1.0], [30.0, 30.0, np.nan, 30.0],
                              [50.0, 50.0, 50.0, np.nan])  # fmt: skip
    for values in (there.travel_time, there.across, there.angle):
        assert np.isnan(values).tolist() == [False, True, True, True]
    holed = [1512.0, np.nan, 1496.0, 1490.0, 1491.0, 1493.0]
    assert np.isnan(rays.trace_ray(NODES, holed, 1.0, 30.0, 0.05).depth)
    assert np.isnan(rays.ray_to_depth(NODES, holed, 1.0, 30.0, 50.0).travel_time)


def test_depth_above_the_transducer_or_a_beam_upwards_has_no_crossing() -> None:
    there = rays.ray_to_depth(NODES, SPEEDS, 10.0, [30.0, 90.0, 120.0], [5.0, 20.0, 20.0])
    assert np.isnan(there.travel_time).all()
    at_once = rays.ray_to_depth(NODES, SPEEDS, 10.0, 30.0, 10.0)
    assert at_once.travel_time == 0.0
    assert at_once.across == 0.0


def test_no_time_is_no_way() -> None:
    end = rays.trace_ray(NODES, SPEEDS, 10.0, [30.0, -40.0], 0.0)
    assert end.depth.tolist() == [10.0, 10.0]
    assert end.across.tolist() == [0.0, 0.0]
    assert end.angle == pytest.approx([30.0, -40.0])


def test_speed_at_depth_is_that_of_the_cast_and_carried_on() -> None:
    depths = [-1.0, 0.0, 4.0, 8.0, 45.0, 120.0, 500.0]
    expected = np.interp(depths, NODES, SPEEDS)
    assert rays.speed_at_depth(NODES, SPEEDS, depths) == pytest.approx(expected)
    assert np.isnan(rays.speed_at_depth(NODES, SPEEDS, np.nan))


@pytest.mark.parametrize(
    ("depths", "speeds", "message"),
    [
        ([0.0, 0.005, 10.0, 5.0], [1500.0] * 4, "10 m followed by 5 m at entry 4"),
        ([0.0, 10.0], [1500.0, 0.0], "above zero: found 0 m/s"),
        ([], [], "at least one depth"),
    ],
)
def test_cast_that_cannot_be_used_is_refused(depths, speeds, message: str) -> None:
    with pytest.raises(ValueError, match=message):
        rays.trace_ray(depths, speeds, 1.0, 10.0, 0.1)


def test_cast_of_a_dense_probe_is_taken() -> None:
    end = rays.trace_ray([0.0, 0.005, 0.01], [1500.0] * 3, 0.0, 0.0, 0.01)
    assert end.depth == pytest.approx(15.0)


@given(st.floats(-70.0, 70.0), st.floats(1450.0, 1550.0), st.floats(1450.0, 1550.0))
def test_steering_keeps_the_sine_over_the_speed(angle: float, used: float, true: float) -> None:
    """C-13, text to eq. 3.76."""
    turned = math.radians(float(rays.steered_angle_in_water(angle, used, true)))
    assert math.sin(turned) / true == pytest.approx(math.sin(math.radians(angle)) / used, rel=1e-9)


def test_beam_that_cannot_exist_is_not_known() -> None:
    assert np.isnan(rays.steered_angle_in_water(85.0, 1400.0, 1500.0))
