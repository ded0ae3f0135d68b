"""Pulses and timing: C-13 §2.4.3, §5.1.1.3 and chapter 4 §2.3.6.3; Lurton 2010."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from qa.physics import pulse

lengths = st.floats(1e-6, 1e-1)
speeds = st.floats(1400.0, 1600.0)
ranges = st.floats(0.1, 1e4)


@given(lengths, lengths, speeds)
def test_resolution_never_improves_with_a_longer_pulse(a: float, b: float, c: float) -> None:
    short, long = sorted((a, b))
    assert pulse.range_resolution_cw(short, c) <= pulse.range_resolution_cw(long, c)
    narrow = pulse.range_resolution_narrow_receiver
    assert narrow(short, c, 2e4) <= narrow(long, c, 2e4)


@given(lengths, speeds)
def test_resolution_is_half_the_width_in_water(length: float, c: float) -> None:
    width = pulse.pulse_width(length, c)
    assert width == pytest.approx(length * c, rel=1e-12)
    assert pulse.range_resolution_cw(length, c) == pytest.approx(width / 2.0, rel=1e-12)
    assert pulse.blind_zone(length, c) == pulse.range_resolution_cw(length, c)


@given(st.floats(1e2, 1e6), speeds)
def test_sweep_as_wide_as_a_plain_pulse_resolves_as_much(bandwidth: float, c: float) -> None:
    swept = pulse.range_resolution_fm(bandwidth, c)
    assert swept == pytest.approx(float(pulse.range_resolution_cw(1.0 / bandwidth, c)), rel=1e-12)


@given(ranges, speeds)
def test_range_and_travel_time_are_each_others_inverse(r: float, c: float) -> None:
    time = pulse.two_way_travel_time(r, c)
    assert time == pytest.approx(2.0 * r / c, rel=1e-12)
    assert pulse.slant_range_from_time(time, c) == pytest.approx(r, rel=1e-12)
    assert pulse.unambiguous_range(time, c) == pytest.approx(r, rel=1e-12)


@given(st.floats(1e-3, 2.0), st.floats(1e-6, 1e-2), st.integers(1, 4))
def test_pinging_at_the_fastest_rate_leaves_time_to_listen(
    travel: float, length: float, pings: int
) -> None:
    listening = pulse.listening_time(travel, length)
    assert listening == pytest.approx(travel + length, rel=1e-12)
    rate = pulse.fastest_ping_rate(listening, pings)
    assert pings / rate == pytest.approx(float(listening), rel=1e-12)
    assert pulse.pings_in_water_needed(listening, 1.0 / rate) == pings
    assert pulse.receive_window(listening, length) == pytest.approx(travel, rel=1e-9)


def test_window_of_a_pulse_longer_than_the_span_is_empty() -> None:
    assert pulse.receive_window(0.1, 0.2) == 0.0


@pytest.mark.parametrize(
    ("interval", "pings"),
    [
        (0.5, 1.0),
        (0.1, 2.0),
        (0.2 / 3.0, 3.0),
        (0.0999, 3.0),
        (0.1001, 2.0),
        (0.1 * (1.0 - 0.995e-9), 2.0),
        (0.1 * (1.0 - 1.005e-9), 3.0),
    ],
)
def test_pings_needed_in_the_water(interval: float, pings: float) -> None:
    assert pulse.pings_in_water_needed(0.2, interval) == pings


def test_pings_needed_for_no_interval_are_endless() -> None:
    assert np.isinf(pulse.pings_in_water_needed(0.2, 0.0))


@given(st.floats(0.01, 10.0), speeds)
def test_longest_pulse_and_least_bandwidth_just_resolve_the_target(size: float, c: float) -> None:
    longest = pulse.longest_pulse_for_resolution(size, c)
    assert pulse.range_resolution_cw(longest, c) == pytest.approx(size, rel=1e-12)
    least = pulse.least_bandwidth_for_resolution(size, c)
    assert pulse.range_resolution_fm(least, c) == pytest.approx(size, rel=1e-12)


def test_narrow_receiver_limits_a_short_pulse_only() -> None:
    narrow = pulse.range_resolution_narrow_receiver
    assert narrow(10e-6, 1500.0, 10e3) == pytest.approx(0.075)
    assert narrow(1e-3, 1500.0, 10e3) == pytest.approx(0.75)


def test_unknown_form_with_a_wide_band_is_not_guessed() -> None:
    unknown = pulse.range_resolution_form_unknown
    assert unknown(1e-3, 1500.0, 2000.0) == pytest.approx(0.75)
    assert np.isnan(unknown(1e-3, 1500.0, 2001.0))


def test_cw_bandwidth_is_where_the_spectrum_has_half_its_power() -> None:
    length = 1e-3
    t = (np.arange(20000) + 0.5) / 20000 * length
    edge = 0.5 * float(pulse.bandwidth_cw(length))
    power = np.abs(np.mean(np.exp(2j * np.pi * edge * t))) ** 2
    assert power == pytest.approx(0.5, abs=1e-6)


def test_pulse_of_half_a_natural_period_is_the_shortest_useful() -> None:
    assert pulse.natural_period(200e3) == pytest.approx(5e-6)
    assert pulse.shortest_useful_pulse(200e3) == pytest.approx(2.5e-6)
    enough = pulse.pulse_is_long_enough([2.4e-6, 2.6e-6, np.nan], 200e3)
    assert enough.tolist() == [False, True, False]


@given(st.floats(1e3, 1e6), lengths, speeds)
def test_cycles_fill_the_pulse(frequency: float, length: float, c: float) -> None:
    cycles = pulse.pulse_cycles(frequency, length)
    assert cycles * pulse.period(frequency) == pytest.approx(length, rel=1e-12)
    assert cycles * pulse.wavelength(c, frequency) == pytest.approx(
        float(pulse.pulse_width(length, c)), rel=1e-12
    )
    assert pulse.time_bandwidth_product(frequency, length) == pytest.approx(float(cycles))
