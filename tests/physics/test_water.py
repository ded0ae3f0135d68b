"""Water: ranges, the choice of a formula, harmonic means, absorption's own laws."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from qa.physics import water

NAN = float("nan")


@pytest.mark.parametrize(
    ("function", "inside", "edges"),
    [
        (water.mackenzie_in_range, (10.0, 35.0, 100.0), ((2, 30), (25, 40), (0, 8000))),
        (water.unesco_in_range, (10.0, 35.0, 100.0), ((0, 40), (0, 40), (0, 10000))),
        (water.del_grosso_in_range, (10.0, 35.0, 100.0), ((0, 30), (30, 40), (0, 9806.65))),
        (water.marczak_in_range, (10.0, 0.0, 10.0), ((0, 95), (0, 0.1), (0, 20))),
        (
            water.francois_garrison_in_range,
            (1e5, 10.0, 33.0, 100.0),
            ((400, 1e6), (-2, 22), (30, 35), (0, 3500)),
        ),
        (
            water.ainslie_mccolm_in_range,
            (1e5, 10.0, 33.0, 100.0),
            ((100, 1e6), (-6, 35), (5, 50), (0, 7000)),
        ),
    ],
)
def test_range_of_a_formula_ends_where_its_paper_says(function, inside, edges) -> None:
    assert function(*inside)
    for place, (least, greatest) in enumerate(edges):
        for value, expected in (
            (least, True),
            (greatest, True),
            (least - 1e-3, False),
            (greatest + 1e-3, False),
            (NAN, False),
        ):
            inputs = list(inside)
            inputs[place] = value
            assert bool(function(*inputs)) is expected, (place, value)


def test_fresh_water_is_in_the_absorption_formulas_range() -> None:
    assert water.francois_garrison_in_range(1e5, 10.0, 0.0, 10.0)
    assert water.francois_garrison_in_range(1e5, 10.0, 0.1, 10.0)
    assert not water.francois_garrison_in_range(1e5, 10.0, 0.11, 10.0)


@pytest.mark.parametrize(
    ("temperature", "salinity", "depth", "formula", "in_range"),
    [
        (10.0, 0.0, 5.0, 0, True),
        (10.0, 0.1, 20.0, 0, True),
        (96.0, 0.0, 5.0, 0, False),
        (10.0, 0.0, 20.1, 1, True),
        (10.0, 0.05, 200.0, 1, True),
        (10.0, 0.11, 5.0, 2, True),
        (10.0, 35.0, 1000.0, 2, True),
        (45.0, 35.0, 10.0, 2, False),
        (4.0, 35.0, 1000.1, 3, True),
        (4.0, 20.0, 2000.0, 2, True),
        (NAN, 35.0, 10.0, -1, False),
    ],
)
def test_formula_is_chosen_by_salinity_and_depth(
    temperature: float, salinity: float, depth: float, formula: int, in_range: bool
) -> None:
    choice = water.choose_sound_speed(temperature, salinity, depth)
    assert choice.formula == formula
    assert bool(choice.in_range) is in_range
    assert bool(np.isnan(choice.sound_speed)) is (formula < 0)


def test_chosen_speed_is_that_of_its_formula() -> None:
    choice = water.choose_sound_speed(
        [10.0, 10.0, 10.0, 4.0], [0.0, 0.05, 35.0, 35.0], [5.0, 200.0, 500.0, 3000.0], 45.0
    )
    expected = [
        water.sound_speed_marczak(10.0),
        water.sound_speed_unesco(10.0, 0.0, water.pressure_from_depth_fresh(200.0)),
        water.sound_speed_unesco(10.0, 35.0, water.pressure_from_depth(500.0, 45.0)),
        water.sound_speed_del_grosso(4.0, 35.0, water.pressure_from_depth(3000.0, 45.0)),
    ]
    np.testing.assert_allclose(choice.sound_speed, expected, rtol=1e-13)
    assert choice.formula.tolist() == [0, 1, 2, 3]
    assert [reason.split(":")[0] for reason in choice.reasons()] == [
        name for name, _ in water.FORMULAS
    ]


def test_change_of_formula_makes_no_step_that_matters() -> None:
    for salinity, depth in ((0.0, 20.0), (35.0, 1000.0)):
        above, below = water.sound_speed(8.0, salinity, [depth - 0.01, depth + 0.01])
        assert abs(above - below) < 0.6
    fresh, brackish = water.sound_speed(8.0, [0.1, 0.1001], 5.0)
    assert abs(fresh - brackish) < 0.25


@given(st.floats(-85.0, 85.0), st.floats(0.0, 10000.0))
def test_pressure_and_depth_are_each_others_inverse(latitude: float, depth: float) -> None:
    pressure = water.pressure_from_depth(depth, latitude)
    assert water.depth_from_pressure(pressure, latitude) == pytest.approx(depth, abs=1e-6)


def test_latitude_left_out_is_forty_five_degrees() -> None:
    assert water.depth_from_pressure(5000.0) == water.depth_from_pressure(5000.0, 45.0)
    assert water.pressure_from_depth(5000.0) == water.pressure_from_depth(5000.0, 45.0)
    assert water.sound_speed(4.0, 35.0, 4000.0) == water.sound_speed(4.0, 35.0, 4000.0, 45.0)
    choice = water.choose_sound_speed(4.0, 35.0, 4000.0)
    assert choice.sound_speed == water.sound_speed(4.0, 35.0, 4000.0, 45.0)


def test_fresh_pressure_is_the_weight_of_the_water() -> None:
    pascal = 1000.0 * 9.80665 * 250.0
    assert water.pressure_from_depth_fresh(250.0) == pytest.approx(pascal / 1e4, rel=1e-12)


def test_same_temperature_is_faster_in_salt_water() -> None:
    assert water.sound_speed(12.0, 35.0, 5.0) > water.sound_speed(12.0, 0.0, 5.0) + 30.0


def numerical_mean(nodes: list[float], speeds: list[float], start: float, end: float) -> float:
    z = np.linspace(start, end, 200001)
    c = np.interp(z, nodes, speeds)
    return (end - start) / float(np.trapezoid(1.0 / c, z))


@given(
    st.lists(st.floats(1400.0, 1600.0), min_size=2, max_size=6),
    st.floats(0.0, 90.0),
    st.floats(5.0, 60.0),
)
def test_harmonic_mean_is_distance_over_time(speeds: list[float], start: float, way: float) -> None:
    nodes = list(np.linspace(10.0, 80.0, len(speeds)))
    got = water.harmonic_mean_sound_speed(nodes, speeds, start + way, start)
    assert got == pytest.approx(numerical_mean(nodes, speeds, start, start + way), rel=1e-6)
    back = water.harmonic_mean_sound_speed(nodes, speeds, start, start + way)
    assert back == pytest.approx(float(got), rel=1e-9)


def test_harmonic_mean_begins_at_the_surface_and_takes_arrays() -> None:
    nodes, speeds = [0.0, 20.0, 100.0], [1500.0, 1480.0, 1490.0]
    got = water.harmonic_mean_sound_speed(nodes, speeds, [[10.0, 50.0], [0.0, NAN]])
    assert got.shape == (2, 2)
    assert got[0, 1] == pytest.approx(numerical_mean(nodes, speeds, 0.0, 50.0), rel=1e-8)
    assert got[1, 0] == pytest.approx(1500.0)
    assert np.isnan(got[1, 1])


def test_harmonic_mean_of_even_water_is_its_speed() -> None:
    assert water.harmonic_mean_sound_speed([10.0], [1490.0], [5.0, 500.0]).tolist() == [
        1490.0,
        1490.0,
    ]


def test_cast_of_a_dense_probe_is_taken() -> None:
    assert water.harmonic_mean_sound_speed([0.0, 0.005, 0.01], [1500.0] * 3, 1.0) == 1500.0


def test_cast_covers_the_way_or_not() -> None:
    assert water.profile_covers([0.0, 50.0], 40.0)
    assert not water.profile_covers([0.5, 50.0], 40.0)
    covers = water.profile_covers([2.0, 50.0], [50.0, 50.1, 40.0, NAN], [2.0, 2.0, 1.9, 2.0])
    assert covers.tolist() == [True, False, False, False]


@pytest.mark.parametrize(
    ("depths", "speeds", "message"),
    [
        ([0.0, 0.005, 10.0, 10.0], [1500.0] * 4, "10 m followed by 10 m at entry 4"),
        ([0.0, 20.0, 10.0, 30.0], [1500.0] * 4, "20 m followed by 10 m at entry 3"),
        ([0.0, 10.0], [1500.0], "as many depths as speeds"),
        ([], [], "at least one"),
    ],
)
def test_cast_that_cannot_be_used_is_refused(depths, speeds, message: str) -> None:
    with pytest.raises(ValueError, match=message):
        water.harmonic_mean_sound_speed(depths, speeds, 10.0)


@given(st.floats(1e4, 4.9e5), st.floats(0.0, 22.0), st.floats(0.0, 35.0), st.floats(0.0, 1000.0))
def test_higher_frequencies_lose_more(
    frequency: float, temperature: float, salinity: float, depth: float
) -> None:
    for absorption in (water.absorption_francois_garrison, water.absorption_ainslie_mccolm):
        low, high = absorption([frequency, 1.02 * frequency], temperature, salinity, depth)
        assert 0.0 < low < high


def test_absorption_in_fresh_water_is_the_waters_own_alone() -> None:
    for absorption in (water.absorption_francois_garrison, water.absorption_ainslie_mccolm):
        one, two = absorption([1e5, 2e5], 10.0, 0.0, 0.0)
        assert two == pytest.approx(4.0 * one, rel=1e-12)


def test_acidity_left_out_is_eight() -> None:
    for absorption in (water.absorption_francois_garrison, water.absorption_ainslie_mccolm):
        assert absorption(1e3, 10.0, 35.0, 0.0) == absorption(1e3, 10.0, 35.0, 0.0, 8.0)
        assert absorption(1e3, 10.0, 35.0, 0.0, 7.7) < 0.8 * absorption(1e3, 10.0, 35.0, 0.0)


def test_ainslie_and_mccolm_in_its_own_terms() -> None:
    """A&M 1998, written out term by term at each part's own frequencies."""
    for khz, t, s, d, ph in ((1.0, 4.0, 30.0, 3000.0, 7.8), (50.0, 25.0, 38.0, 500.0, 8.2)):
        f1 = 0.78 * (s / 35.0) ** 0.5 * 2.718281828459045 ** (t / 26.0)
        f2 = 42.0 * 2.718281828459045 ** (t / 17.0)
        expected = (
            0.106 * f1 * khz**2 / (f1**2 + khz**2) * 2.718281828459045 ** ((ph - 8.0) / 0.56)
            + 0.52
            * (1.0 + t / 43.0)
            * (s / 35.0)
            * f2
            * khz**2
            / (f2**2 + khz**2)
            * 2.718281828459045 ** (-d / 6000.0)
            + 0.00049 * khz**2 * 2.718281828459045 ** (-(t / 27.0 + d / 17000.0))
        )
        got = 1000.0 * water.absorption_ainslie_mccolm(1e3 * khz, t, s, d, ph)
        assert got == pytest.approx(expected, rel=1e-9)


def test_del_grosso_agrees_with_a_second_transcription() -> None:
    """Wong and Zhu 1995, powers of temperature, salinity and pressure in kg/cm2, written out.

    TEOS-10 is the outside check, where the ocean has such water; this pins the small terms too.
    """
    terms = [
        (0.1402392e4, 0, 0, 0),
        (0.5012285e1, 1, 0, 0),
        (-0.551184e-1, 2, 0, 0),
        (0.221649e-3, 3, 0, 0),
        (0.1329530e1, 0, 1, 0),
        (0.1288598e-3, 0, 2, 0),
        (0.1560592e0, 0, 0, 1),
        (0.2449993e-4, 0, 0, 2),
        (-0.8833959e-8, 0, 0, 3),
        (-0.1275936e-1, 1, 1, 0),
        (0.6353509e-2, 1, 0, 1),
        (0.2656174e-7, 2, 0, 2),
        (-0.1593895e-5, 1, 0, 2),
        (0.5222483e-9, 1, 0, 3),
        (-0.4383615e-6, 3, 0, 1),
        (-0.1616745e-8, 0, 2, 2),
        (0.9688441e-4, 2, 1, 0),
        (0.4857614e-5, 1, 2, 1),
        (-0.3406824e-3, 1, 1, 1),
    ]
    for t, s, p in ((30.0, 40.0, 9806.65), (3.0, 33.0, 500.0), (17.0, 36.0, 4000.0)):
        k = p / 9.80665
        expected = sum(c * t**i * s**j * k**n for c, i, j, n in terms)
        assert water.sound_speed_del_grosso(t, s, p) == pytest.approx(expected, abs=1e-6)
