"""The water against independent libraries, over grids of inputs."""

from __future__ import annotations

import warnings

import numpy as np
import pytest

from qa.physics import ground, water

gsw = pytest.importorskip("gsw")


def _seawater():
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        return pytest.importorskip("seawater")


def _grid(*axes: np.ndarray) -> list[np.ndarray]:
    return np.meshgrid(*axes, indexing="ij")


def _teos_10(temperature: np.ndarray, salinity: np.ndarray, pressure: np.ndarray) -> np.ndarray:
    reference_salinity = salinity * 35.16504 / 35.0
    return gsw.sound_speed_t_exact(reference_salinity, temperature, pressure)


def test_unesco_44_agrees_with_seawater_within_a_centimetre_a_second() -> None:
    t, s, p = _grid(
        np.linspace(0.0, 40.0, 9), np.geomspace(1e-3, 40.0, 9), np.linspace(0.0, 10000.0, 11)
    )
    reference = _seawater().svel(s, t, p)
    assert np.abs(water.sound_speed_unesco(t, s, p) - reference).max() < 1e-9


def test_depth_from_pressure_agrees_with_seawater() -> None:
    p, latitude = _grid(np.linspace(0.0, 10000.0, 21), np.linspace(-80.0, 80.0, 9))
    reference = _seawater().dpth(p, latitude)
    assert np.abs(water.depth_from_pressure(p, latitude) - reference).max() < 1e-6


def test_pressure_from_depth_agrees_with_teos_10_within_two_thousandths() -> None:
    depth, latitude = _grid(np.linspace(10.0, 9000.0, 20), np.linspace(-80.0, 80.0, 9))
    reference = gsw.p_from_z(-depth, latitude)
    relative = water.pressure_from_depth(depth, latitude) / reference - 1.0
    assert np.abs(relative).max() < 2e-3


def test_mackenzie_agrees_with_teos_10_in_its_range_to_1000_m() -> None:
    t, s, d = _grid(
        np.linspace(2.0, 30.0, 15), np.linspace(25.0, 40.0, 7), np.linspace(0.0, 1000.0, 6)
    )
    assert water.mackenzie_in_range(t, s, d).all()
    reference = _teos_10(t, s, water.pressure_from_depth(d, 45.0))
    assert np.abs(water.sound_speed_mackenzie(t, s, d) - reference).max() < 0.6


def test_mackenzie_agrees_with_arlpy() -> None:
    uwa = pytest.importorskip("arlpy.uwa")
    t, s, d = _grid(
        np.linspace(0.0, 40.0, 9), np.linspace(0.0, 45.0, 9), np.linspace(0.0, 9000.0, 9)
    )
    assert np.abs(water.sound_speed_mackenzie(t, s, d) - uwa.soundspeed(t, s, d)).max() < 1e-9


def test_del_grosso_agrees_with_teos_10_where_the_ocean_has_such_water() -> None:
    t, s = _grid(np.linspace(0.0, 30.0, 13), np.linspace(33.0, 37.0, 5))
    at_surface = water.sound_speed_del_grosso(t, s, 0.0)
    assert np.abs(at_surface - _teos_10(t, s, np.zeros_like(t))).max() < 0.08
    t, s, p = _grid(
        np.linspace(0.0, 6.0, 7), np.linspace(34.0, 36.0, 5), np.linspace(0.0, 8000.0, 9)
    )
    in_depth = water.sound_speed_del_grosso(t, s, p)
    assert np.abs(in_depth - _teos_10(t, s, p)).max() < 0.18


def test_unesco_44_agrees_with_teos_10_at_the_surface() -> None:
    t, s = _grid(np.linspace(0.0, 35.0, 15), np.linspace(0.0, 40.0, 9))
    reference = _teos_10(t, s, np.zeros_like(t))
    assert np.abs(water.sound_speed_unesco(t, s, 0.0) - reference).max() < 0.25


def test_marczak_agrees_with_iapws_95() -> None:
    iapws = pytest.importorskip("iapws")
    temperatures = np.linspace(0.5, 95.0, 20)
    reference = [iapws.IAPWS95(T=t + 273.15, P=0.101325).w for t in temperatures]
    assert np.abs(water.sound_speed_marczak(temperatures) - reference).max() < 0.06


def test_fresh_water_below_20_m_agrees_with_iapws_95() -> None:
    iapws = pytest.importorskip("iapws")
    for temperature in (4.0, 12.0, 25.0):
        for depth in (25.0, 100.0, 250.0):
            pressure = 0.101325 + 0.01 * float(water.pressure_from_depth_fresh(depth))
            reference = iapws.IAPWS95(T=temperature + 273.15, P=pressure).w
            assert abs(float(water.sound_speed(temperature, 0.0, depth)) - reference) < 0.1


def test_francois_and_garrison_agrees_with_arlpy_far_within_a_thousandth() -> None:
    uwa = pytest.importorskip("arlpy.uwa")
    frequencies = np.geomspace(400.0, 1e6, 20)
    worst = 0.0
    for temperature in (-1.0, 5.0, 10.0, 15.0, 19.9, 20.1, 22.0, 30.0):
        for salinity in (0.0, 10.0, 30.0, 35.0):
            for depth in (0.0, 200.0, 1000.0, 3500.0):
                for acidity in (7.7, 8.0, 8.3):
                    got = water.absorption_francois_garrison(
                        frequencies, temperature, salinity, depth, acidity
                    )
                    linear = uwa.absorption(frequencies, 1.0, temperature, salinity, depth, acidity)
                    reference = -20.0 * np.log10(linear)
                    worst = max(worst, float(np.abs(got / reference - 1.0).max()))
    assert worst < 1e-7


def test_ainslie_and_mccolm_stays_near_francois_and_garrison() -> None:
    f, t, s, d = _grid(
        np.geomspace(10e3, 500e3, 12),
        np.linspace(0.0, 20.0, 6),
        np.array([30.0, 35.0]),
        np.array([0.0, 250.0, 1000.0]),
    )
    shorter = water.absorption_ainslie_mccolm(f, t, s, d)
    longer = water.absorption_francois_garrison(f, t, s, d)
    assert np.abs(shorter / longer - 1.0).max() < 0.12


def test_legs_agree_with_pyproj() -> None:
    from pyproj import Geod

    geod = Geod(ellps="WGS84")
    random = np.random.default_rng(3)
    latitude, to_latitude = random.uniform(-85.0, 85.0, (2, 200))
    longitude, to_longitude = random.uniform(-180.0, 180.0, (2, 200))
    azimuth, _, length = geod.inv(longitude, latitude, to_longitude, to_latitude)
    got = ground.leg(latitude, longitude, to_latitude, to_longitude)
    assert np.abs(got.distance - length).max() < 1e-6
    assert np.abs(got.course - np.mod(azimuth, 360.0)).max() < 1e-9


def test_placed_beams_agree_with_pyproj() -> None:
    from pyproj import Geod

    geod = Geod(ellps="WGS84")
    seabed = ground.place_beams(54.0, 8.0, 30.0, 100.0, [-63.0, 3.0, 57.0], roll=-3.0)
    for position, across in enumerate((-100.0 * np.sqrt(0.75), 10.4528463, 100.0 * np.sqrt(0.75))):
        longitude, latitude, _ = geod.fwd(8.0, 54.0, 120.0, across)
        assert abs(seabed.longitude[position] - longitude) < 1e-9
        assert abs(seabed.latitude[position] - latitude) < 1e-9
