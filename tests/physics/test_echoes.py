"""Echoes: C-13 eqs. 3.4 to 3.16, the laws behind what is recalled, and a range found."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from qa.physics import beams, echoes, pulse, water

frequencies = st.floats(1e4, 1e6)


@given(st.floats(0.5, 1e4), st.floats(0.0, 0.2))
def test_transmission_loss_is_spreading_and_absorption(r: float, absorption: float) -> None:
    """C-13 eq. 3.9."""
    got = echoes.transmission_loss(r, absorption)
    assert got == pytest.approx(20.0 * math.log10(r) + absorption * r, abs=1e-9)


def test_thermal_noise_is_that_of_boltzmanns_constant() -> None:
    """Mean square pressure of warmth 4 pi k T rho f^2 / c, in uPa^2/Hz."""
    for frequency in (1e5, 4e5):
        pressure = 4.0 * math.pi * 1.380649e-23 * 283.0 * 1025.0 * frequency**2 / 1490.0 * 1e12
        assert echoes.thermal_noise(frequency) == pytest.approx(
            10.0 * math.log10(pressure), abs=0.5
        )


def test_wind_noise_is_near_knudsens_curves() -> None:
    """Knudsen's deep-sea levels [memory]: sea state 3 (wind 7 m/s) 64 dB at 1 kHz, 47 at 10 kHz."""
    assert echoes.wind_noise(1e3, 7.0) == pytest.approx(64.0, abs=2.0)
    assert echoes.wind_noise(10e3, 7.0) == pytest.approx(47.0, abs=3.0)
    assert echoes.wind_noise(1e3, 0.0) == pytest.approx(50.0 - 40.0 * math.log10(1.4))
    decade = echoes.wind_noise(1e5, 4.0) - echoes.wind_noise(1e6, 4.0)
    assert decade == pytest.approx(20.0, abs=0.1)
    gusts = echoes.wind_noise(1e5, [0.0, 4.0, 16.0])
    assert np.diff(gusts) == pytest.approx([15.0, 15.0])


@given(st.floats(-20.0, 120.0), st.floats(-20.0, 120.0))
def test_levels_combine_as_powers(a: float, b: float) -> None:
    expected = 10.0 * math.log10(10.0 ** (a / 10.0) + 10.0 ** (b / 10.0))
    assert echoes.combined_level(a, b) == pytest.approx(expected, abs=1e-9)


def test_ambient_noise_is_wind_and_warmth_together() -> None:
    for frequency in (2e4, 1e5, 4e5):
        thermal, wind = echoes.thermal_noise(frequency), echoes.wind_noise(frequency, 6.0)
        assert echoes.ambient_noise(frequency, 6.0) == echoes.combined_level(thermal, wind)


@given(st.floats(0.0, 100.0), st.floats(1.0, 1e5))
def test_noise_in_a_band(spectrum: float, bandwidth: float) -> None:
    """C-13 eq. 3.10."""
    expected = spectrum + 10.0 * math.log10(bandwidth)
    assert echoes.noise_level(spectrum, bandwidth) == pytest.approx(expected, abs=1e-9)


def test_line_directivity_is_the_integral_of_its_pattern() -> None:
    """C-13 eq. 3.14: power from all around over power along the axis."""
    length, wavelength = 0.5, 0.01
    sine = np.linspace(-1.0, 1.0, 400001)
    power = np.trapezoid(np.sinc(length / wavelength * sine) ** 2, sine) / 2.0
    expected = -10.0 * math.log10(power)
    assert echoes.directivity_index_line(length, wavelength) == pytest.approx(expected, abs=0.05)


def test_rectangle_directivity_is_the_integral_of_its_pattern() -> None:
    """Urick's rectangle: product of two lines' patterns over the half space before a baffle."""
    length, height, wavelength = 0.1, 0.06, 0.01
    x = np.linspace(-1.0, 1.0, 2001)
    u, v = np.meshgrid(x, x)
    inside = u**2 + v**2 < 0.999
    cosine = np.sqrt(np.where(inside, 1.0 - u**2 - v**2, 1.0))
    pattern = np.sinc(length / wavelength * u) ** 2 * np.sinc(height / wavelength * v) ** 2
    solid = np.where(inside, pattern / cosine, 0.0).sum() * (x[1] - x[0]) ** 2
    expected = 10.0 * math.log10(4.0 * math.pi / solid)
    got = float(echoes.directivity_index_rectangle(length, height, wavelength))
    assert got == pytest.approx(expected, abs=0.1)


def test_directivity_from_beam_widths_is_that_of_the_array() -> None:
    along = beams.beamwidth_line(0.01, 0.8)
    across = beams.beamwidth_line(0.01, 0.3)
    from_widths = echoes.directivity_index_from_beamwidths(along, across)
    from_sides = echoes.directivity_index_rectangle(0.8, 0.3, 0.01)
    assert from_widths == pytest.approx(float(from_sides), abs=0.005)
    assert echoes.directivity_index_from_beamwidths(360.0, 180.0) == 0.0


def test_processing_gain_is_for_modulated_pulses_only() -> None:
    assert echoes.processing_gain(20e3, 5e-3) == pytest.approx(20.0)
    assert echoes.processing_gain(5e3, 1e-4) == 0.0


def test_seabed_sends_back_by_lamberts_law_when_oblique() -> None:
    """C-13, after eq. 3.16: a near-normal term, then 20 log cos."""
    angles = np.array([25.0, 45.0, 70.0, 89.0])
    expected = -30.0 + 20.0 * np.log10(np.cos(np.radians(angles)))
    assert echoes.backscatter_per_area(angles) == pytest.approx(expected)
    assert echoes.backscatter_per_area(-angles) == pytest.approx(expected)
    assert echoes.backscatter_per_area(0.0) == -15.0
    assert np.isneginf(echoes.backscatter_per_area([90.0, 100.0])).all()
    halfway = 0.5 * (-15.0 + -30.0 + 20.0 * math.log10(math.cos(math.radians(25.0))))
    assert echoes.backscatter_per_area(12.5) == pytest.approx(halfway)
    assert echoes.backscatter_per_area(10.0, -10.0, -25.0, 10.0) == pytest.approx(
        -25.0 + 20.0 * math.log10(math.cos(math.radians(10.0)))
    )


@given(st.floats(0.0, 89.0), st.floats(0.0, 89.0))
def test_more_oblique_seabed_never_sends_back_more(a: float, b: float) -> None:
    steep, oblique = sorted((a, b))
    assert echoes.backscatter_per_area(oblique) <= echoes.backscatter_per_area(steep) + 1e-12


@given(
    st.floats(1.0, 1000.0),
    st.floats(0.5, 89.0),
    st.floats(0.2, 5.0),
    st.floats(0.2, 60.0),
    st.floats(0.01, 2.0),
)
def test_ensonified_area_is_the_smaller_of_beam_and_pulse(
    r: float, angle: float, along: float, across: float, resolution: float
) -> None:
    """C-13 eq. 3.16."""
    by_beam = math.radians(along) * math.radians(across) * r**2
    by_pulse = resolution / math.sin(math.radians(angle)) * math.radians(along) * r
    got = echoes.ensonified_area(r, angle, along, across, resolution)
    assert got == pytest.approx(min(by_beam, by_pulse), rel=1e-9)


def test_straight_down_the_beam_alone_limits() -> None:
    assert echoes.ensonified_area(10.0, 0.0, 1.0, 1.0, 0.0) == pytest.approx(
        (10.0 * math.radians(1.0)) ** 2
    )
    assert echoes.ensonified_area(10.0, 30.0, 1.0, 1.0, 0.0) == 0.0


@pytest.mark.parametrize("detection", [0.1, 0.3, 0.5, 0.7, 0.9])
@pytest.mark.parametrize("false_alarm", [1e-7, 1e-5, 1e-3])
def test_steady_threshold_is_near_the_exact_one(detection: float, false_alarm: float) -> None:
    """Exact: the envelope's square is a noncentral chi-square with two degrees of freedom."""
    from scipy.stats import chi2, ncx2

    ratio = 10.0 ** (float(echoes.detection_threshold_steady(detection, false_alarm)) / 10.0)
    chance = ncx2.sf(chi2.isf(false_alarm, 2), 2, 2.0 * ratio)
    assert chance == pytest.approx(detection, rel=1e-6)


def test_noise_alone_detects_as_often_as_it_alarms() -> None:
    assert np.isneginf(echoes.detection_threshold_steady(1e-3, 1e-3))
    assert np.isneginf(echoes.detection_threshold_steady(1e-4, 1e-3))


@given(st.floats(0.05, 0.95), st.floats(1e-9, 0.04))
def test_fluctuating_threshold_is_exact(detection: float, false_alarm: float) -> None:
    """An exponential echo power on exponential noise is exponential again."""
    ratio = 10.0 ** (float(echoes.detection_threshold_fluctuating(detection, false_alarm)) / 10.0)
    assert false_alarm ** (1.0 / (1.0 + ratio)) == pytest.approx(detection, rel=1e-9)


def test_echo_excess_adds_up() -> None:
    """C-13 eq. 3.4."""
    assert echoes.echo_excess(200.0, 40.0, 60.0, 25.0, -30.0, 12.0, 7.0) == pytest.approx(
        200.0 - 80.0 - (60.0 - 25.0) - 30.0 - 12.0 + 7.0
    )
    assert echoes.echo_excess(200.0, 40.0, 60.0, 25.0, -30.0, 12.0) == pytest.approx(43.0)


def test_target_is_hidden_by_noise_or_by_the_seabed() -> None:
    assert echoes.target_excess(5.0, -20.0, -50.0, 10.0) == 5.0
    assert echoes.target_excess(50.0, -20.0, -35.0, 10.0) == 5.0


SEABED = {
    "source_level": 215.0,
    "slant_range": 80.0,
    "incidence_angle": 55.0,
    "absorption": 0.05,
    "noise_level": 75.0,
    "directivity_index": 28.0,
    "beamwidth_along": 1.0,
    "beamwidth_across": 2.0,
    "range_resolution": 0.05,
    "detection_threshold": 10.0,
}


def test_seabed_margin_is_made_of_its_parts() -> None:
    area = 0.05 / math.sin(math.radians(55.0)) * math.radians(1.0) * 80.0
    strength = -30.0 + 20.0 * math.log10(math.cos(math.radians(55.0))) + 10.0 * math.log10(area)
    loss = 20.0 * math.log10(80.0) + 0.05 * 80.0
    expected = 215.0 - 2.0 * loss - (75.0 - 28.0) + strength - 10.0
    assert echoes.seabed_echo_margin(**SEABED) == pytest.approx(expected)
    assert echoes.seabed_echo_margin(**SEABED, processing_gain=6.0) == pytest.approx(expected + 6.0)
    assert echoes.seabed_echo_margin(
        **SEABED, backscatter_normal=-5.0, backscatter_oblique=-20.0
    ) == pytest.approx(expected + 10.0)
    upright = {**SEABED, "incidence_angle": 0.0}
    brighter = echoes.seabed_echo_margin(**upright, backscatter_normal=-9.0)
    assert brighter - echoes.seabed_echo_margin(**upright) == pytest.approx(6.0)


def test_target_margin_is_the_smaller_of_two() -> None:
    area = 0.05 / math.sin(math.radians(55.0)) * math.radians(1.0) * 80.0
    strength = -30.0 + 20.0 * math.log10(math.cos(math.radians(55.0))) + 10.0 * math.log10(area)
    over_seabed = -20.0 - strength - 10.0
    got = echoes.target_echo_margin(**SEABED, target_strength=-20.0)
    assert got == pytest.approx(over_seabed)
    rougher = echoes.target_echo_margin(**SEABED, target_strength=-20.0, backscatter_oblique=-25.0)
    assert rougher == pytest.approx(over_seabed - 5.0)
    quiet = {**SEABED, "source_level": 150.0}
    loss = 20.0 * math.log10(80.0) + 0.05 * 80.0
    over_noise = 150.0 - 2.0 * loss - 47.0 - 20.0 - 10.0
    assert echoes.target_echo_margin(**quiet, target_strength=-20.0) == pytest.approx(over_noise)
    assert echoes.target_echo_margin(
        **quiet, target_strength=-20.0, processing_gain=9.0
    ) == pytest.approx(over_noise + 9.0)
    steep = {**SEABED, "incidence_angle": 0.0}
    dull = echoes.target_echo_margin(**steep, target_strength=-20.0, backscatter_normal=-30.0)
    plain = echoes.target_echo_margin(**steep, target_strength=-20.0)
    assert dull == pytest.approx(plain + 15.0)


@given(st.floats(100.0, 240.0), st.floats(0.0, 0.1))
def test_margin_is_zero_at_the_greatest_range(level: float, absorption: float) -> None:
    def margin(r: np.ndarray) -> np.ndarray:
        return level - 100.0 - 2.0 * np.asarray(echoes.transmission_loss(r, absorption))

    found = float(echoes.greatest_range(margin))
    if np.isinf(found):
        assert margin(np.array(20000.0)) >= 0.0
    elif found == 0.0:
        assert margin(np.array(20000.0)) < 0.0
        assert margin(np.array(1.0)) < 0.0
    else:
        assert margin(np.array(found)) == pytest.approx(0.0, abs=1e-6)


def test_greatest_range_of_many_columns_at_once() -> None:
    budget = np.array([80.0, -1.0, 200.0, np.nan, 60.0])

    def margin(r: np.ndarray) -> np.ndarray:
        return budget - 40.0 * np.log10(r)

    found = echoes.greatest_range(margin, np.ones(5), np.full(5, 1000.0))
    assert found[0] == pytest.approx(100.0)
    assert found[1] == 0.0
    assert np.isinf(found[2])
    assert np.isnan(found[3])
    assert found[4] == pytest.approx(10.0**1.5)


def test_last_fall_counts_not_the_first() -> None:
    found = echoes.greatest_range(
        lambda r: np.where(r < 20.0, 1.0, -1.0) + 2.0 * (abs(r - 60.0) < 9)
    )
    assert found == pytest.approx(69.0, rel=1e-6)


def test_range_just_inside_the_longest_is_found_and_beyond_it_is_not() -> None:
    for root, found in ((19800.0, 19800.0), (20100.0, np.inf)):
        got = echoes.greatest_range(lambda r, root=root: root - r)
        assert got == pytest.approx(found)
        from_ten = echoes.greatest_range(lambda r, root=root: root - r, 10.0)
        assert from_ten == pytest.approx(found)


def side_scan_of_the_handbooks_day(target_strength: float, range_scale: float) -> float:
    """Greatest range of a 100 kHz side-scan, with inputs stated here.

    Towed at 10 % of the range scale; source level 210 dB; plain pulse of 0.1 ms in a receiver of
    20 kHz; beam 1.2 by 40 degrees; noise 50 dB re 1 uPa^2/Hz, that is a towing vessel some 15 dB
    over the sea's own; 15 dB for a contact that an operator marks on a paper record; sea water of
    12 degC.
    """
    height = 0.1 * range_scale
    absorption = water.absorption_francois_garrison(100e3, 12.0, 35.0, 20.0)
    resolution = pulse.range_resolution_cw(1e-4, 1500.0)

    def margin(r: np.ndarray) -> np.ndarray:
        return np.asarray(
            echoes.target_echo_margin(
                source_level=210.0,
                slant_range=r,
                incidence_angle=beams.beam_angle_from_range(r, height),
                absorption=absorption,
                noise_level=echoes.noise_level(50.0, 20e3),
                directivity_index=echoes.directivity_index_from_beamwidths(1.2, 40.0),
                beamwidth_along=1.2,
                beamwidth_across=40.0,
                range_resolution=resolution,
                detection_threshold=15.0,
                target_strength=target_strength,
            )
        )

    return float(echoes.greatest_range(margin, height, 2000.0))


def test_side_scan_ranges_of_the_handbook_come_out_within_a_factor_of_one_and_a_half() -> None:
    """C-13 ch. 4 §2.3.4.14 [read]: contacts of 1 to 2 m to 120-150 m, large wrecks to 270 m.

    A small contact sends back as a rough object of about -27 dB does; of a large wreck, what
    lies in one beam and one pulse sends back about 0 dB.
    """
    small = side_scan_of_the_handbooks_day(-27.0, 150.0)
    wreck = side_scan_of_the_handbooks_day(0.0, 300.0)
    assert 135.0 / 1.5 < small < 135.0 * 1.5
    assert 270.0 / 1.5 < wreck < 270.0 * 1.5
