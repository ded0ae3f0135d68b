"""What a pulse is in the water, and how long one must wait for its echo.

Lengths of pulses, the range resolution they give, and the timing of pings: travel times, the
receive window, the fastest rate, the range that a ping interval leaves free of ambiguity.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike

from qa.physics.arrays import BoolArray, FloatArray, chosen, floats


def period(frequency: ArrayLike) -> FloatArray:
    """Duration of one cycle of the sound.

    Parameters
    ----------
    frequency : array_like
        Frequency of the sound. [Hz]

    Returns
    -------
    numpy.ndarray
        Period. [s]

    Notes
    -----
    Infinite at a frequency of zero.

    Examples
    --------
    >>> float(period(1.0)), float(period(200e3))
    (1.0, 5e-06)
    """
    (frequency,) = floats(frequency)
    with np.errstate(divide="ignore"):
        return 1.0 / frequency


def natural_period(frequency: ArrayLike) -> FloatArray:
    """Period at which a transducer resonates, taken as that of its working frequency.

    Parameters
    ----------
    frequency : array_like
        Working (resonance) frequency of the transducer. [Hz]

    Returns
    -------
    numpy.ndarray
        Natural period. [s]

    References
    ----------
    .. [1] IHO C-13, §2.4.3.

    Examples
    --------
    >>> float(natural_period(100e3))
    1e-05
    """
    return period(frequency)


def wavelength(sound_speed: ArrayLike, frequency: ArrayLike) -> FloatArray:
    """Distance that sound travels in one period.

    Parameters
    ----------
    sound_speed : array_like
        Speed of sound at the transducer. [m/s]
    frequency : array_like
        Frequency of the sound. [Hz]

    Returns
    -------
    numpy.ndarray
        Wavelength in water. [m]

    Examples
    --------
    >>> float(wavelength(1500.0, 300e3))
    0.005
    """
    sound_speed, frequency = floats(sound_speed, frequency)
    with np.errstate(divide="ignore"):
        return sound_speed / frequency


def pulse_width(pulse_length: ArrayLike, sound_speed: ArrayLike) -> FloatArray:
    """Length of water that the pulse fills as it passes.

    Parameters
    ----------
    pulse_length : array_like
        Duration of the transmitted pulse. [s]
    sound_speed : array_like
        Speed of sound at the pulse. [m/s]

    Returns
    -------
    numpy.ndarray
        Pulse width in water. [m]

    Notes
    -----
    One duration fills more salt water than fresh water of the same temperature, since sound is
    faster there.

    References
    ----------
    .. [1] IHO C-13, §5.1.1.3.

    Examples
    --------
    >>> float(pulse_width(100e-6, 1500.0))
    0.15
    """
    pulse_length, sound_speed = floats(pulse_length, sound_speed)
    return pulse_length * sound_speed


def range_resolution_cw(pulse_length: ArrayLike, sound_speed: ArrayLike) -> FloatArray:
    """Smallest separation along the beam at which two echoes of a plain pulse stay apart.

    Parameters
    ----------
    pulse_length : array_like
        Duration of the transmitted pulse. [s]
    sound_speed : array_like
        Speed of sound at the target. [m/s]

    Returns
    -------
    numpy.ndarray
        Half the pulse width in water. [m]

    References
    ----------
    .. [1] IHO C-13, §5.1.1.3.

    Examples
    --------
    >>> float(range_resolution_cw(100e-6, 1500.0))
    0.075
    """
    return 0.5 * pulse_width(pulse_length, sound_speed)


def range_resolution_fm(bandwidth: ArrayLike, sound_speed: ArrayLike) -> FloatArray:
    """Range resolution of a frequency-modulated pulse after its matched filter.

    Parameters
    ----------
    bandwidth : array_like
        Width of the frequency sweep. [Hz]
    sound_speed : array_like
        Speed of sound at the target. [m/s]

    Returns
    -------
    numpy.ndarray
        Smallest separation along the beam of two echoes that stay apart. [m]

    Notes
    -----
    The filtered pulse lasts about the inverse of the bandwidth, whatever the length of the
    transmitted pulse.

    References
    ----------
    .. [1] Lurton, An Introduction to Underwater Acoustics, 2nd ed., 2010.

    Examples
    --------
    >>> float(range_resolution_fm(30e3, 1500.0))
    0.025
    """
    bandwidth, sound_speed = floats(bandwidth, sound_speed)
    with np.errstate(divide="ignore"):
        return 0.5 * sound_speed / bandwidth


def range_resolution_narrow_receiver(
    pulse_length: ArrayLike, sound_speed: ArrayLike, receiver_bandwidth: ArrayLike
) -> FloatArray:
    """Range resolution of a plain pulse heard through a receiver of limited bandwidth.

    Parameters
    ----------
    pulse_length : array_like
        Duration of the transmitted pulse. [s]
    sound_speed : array_like
        Speed of sound at the target. [m/s]
    receiver_bandwidth : array_like
        Bandwidth of the receiver. [Hz]

    Returns
    -------
    numpy.ndarray
        The coarser of pulse and receiver. [m]

    Notes
    -----
    A receiver stretches what it hears to about the inverse of its bandwidth, so that a shorter
    pulse than that brings nothing. Derived, not taken from a handbook.

    Examples
    --------
    >>> float(range_resolution_narrow_receiver(10e-6, 1500.0, 20e3))
    0.0375
    """
    of_pulse = range_resolution_cw(pulse_length, sound_speed)
    of_receiver = range_resolution_fm(receiver_bandwidth, sound_speed)
    coarser: FloatArray = np.maximum(of_pulse, of_receiver)
    return coarser


def range_resolution_form_unknown(
    pulse_length: ArrayLike, sound_speed: ArrayLike, bandwidth: ArrayLike
) -> FloatArray:
    """Range resolution where the log does not say whether the pulse was modulated.

    Parameters
    ----------
    pulse_length : array_like
        Duration of the transmitted pulse. [s]
    sound_speed : array_like
        Speed of sound at the target. [m/s]
    bandwidth : array_like
        Logged bandwidth. [Hz]

    Returns
    -------
    numpy.ndarray
        Half the pulse width where the bandwidth is no more than a plain pulse's (time-bandwidth
        product up to 2), NaN where it is more and the form therefore matters. [m]

    Examples
    --------
    >>> range_resolution_form_unknown(100e-6, 1500.0, [10e3, 60e3])
    array([0.075,   nan])
    """
    product = time_bandwidth_product(bandwidth, pulse_length)
    return chosen(product <= 2.0, range_resolution_cw(pulse_length, sound_speed), np.nan)


def bandwidth_cw(pulse_length: ArrayLike) -> FloatArray:
    """Half-power bandwidth of a plain pulse of constant amplitude.

    Parameters
    ----------
    pulse_length : array_like
        Duration of the transmitted pulse. [s]

    Returns
    -------
    numpy.ndarray
        Width of the spectrum between its half-power points. [Hz]

    Notes
    -----
    The spectrum of a rectangular pulse is a sine over its argument, which falls to half power at
    1.39156 from the middle: 0.8859 over the duration. Commonly rounded to one over the duration.

    References
    ----------
    .. [1] Lurton, An Introduction to Underwater Acoustics, 2nd ed., 2010.

    Examples
    --------
    >>> round(float(bandwidth_cw(100e-6)))
    8859
    """
    (pulse_length,) = floats(pulse_length)
    with np.errstate(divide="ignore"):
        return 0.8858929 / pulse_length


def time_bandwidth_product(bandwidth: ArrayLike, pulse_length: ArrayLike) -> FloatArray:
    """Bandwidth times duration: about one for a plain pulse, many for a modulated one.

    Parameters
    ----------
    bandwidth : array_like
        Bandwidth of the pulse. [Hz]
    pulse_length : array_like
        Duration of the transmitted pulse. [s]

    Returns
    -------
    numpy.ndarray
        Product, without unit. [1]

    References
    ----------
    .. [1] Lurton, An Introduction to Underwater Acoustics, 2nd ed., 2010.

    Examples
    --------
    >>> float(time_bandwidth_product(30e3, 2e-3))
    60.0
    """
    bandwidth, pulse_length = floats(bandwidth, pulse_length)
    return bandwidth * pulse_length


def pulse_cycles(frequency: ArrayLike, pulse_length: ArrayLike) -> FloatArray:
    """Number of cycles that the pulse holds.

    Parameters
    ----------
    frequency : array_like
        Frequency of the sound. [Hz]
    pulse_length : array_like
        Duration of the transmitted pulse. [s]

    Returns
    -------
    numpy.ndarray
        Cycles. [1]

    Examples
    --------
    >>> float(pulse_cycles(200e3, 50e-6))
    10.0
    """
    frequency, pulse_length = floats(frequency, pulse_length)
    return frequency * pulse_length


def shortest_useful_pulse(frequency: ArrayLike) -> FloatArray:
    """Shortest pulse that a transducer can still give out.

    Parameters
    ----------
    frequency : array_like
        Working (resonance) frequency of the transducer. [Hz]

    Returns
    -------
    numpy.ndarray
        Half the natural period. [s]

    References
    ----------
    .. [1] IHO C-13, §2.4.3.

    Examples
    --------
    >>> float(shortest_useful_pulse(100e3))
    5e-06
    """
    return 0.5 * natural_period(frequency)


def longest_pulse_for_resolution(target_size: ArrayLike, sound_speed: ArrayLike) -> FloatArray:
    """Longest plain pulse whose range resolution is still as fine as asked.

    Parameters
    ----------
    target_size : array_like
        Range resolution asked for. [m]
    sound_speed : array_like
        Speed of sound at the target. [m/s]

    Returns
    -------
    numpy.ndarray
        Pulse length. [s]

    References
    ----------
    .. [1] IHO C-13, §5.1.1.3, turned round.

    Examples
    --------
    >>> float(longest_pulse_for_resolution(0.75, 1500.0))
    0.001
    """
    target_size, sound_speed = floats(target_size, sound_speed)
    return 2.0 * target_size / sound_speed


def least_bandwidth_for_resolution(target_size: ArrayLike, sound_speed: ArrayLike) -> FloatArray:
    """Narrowest sweep whose range resolution is still as fine as asked.

    Parameters
    ----------
    target_size : array_like
        Range resolution asked for. [m]
    sound_speed : array_like
        Speed of sound at the target. [m/s]

    Returns
    -------
    numpy.ndarray
        Swept bandwidth. [Hz]

    References
    ----------
    .. [1] Lurton, An Introduction to Underwater Acoustics, 2nd ed., 2010, turned round.

    Examples
    --------
    >>> float(least_bandwidth_for_resolution(0.05, 1500.0))
    15000.0
    """
    target_size, sound_speed = floats(target_size, sound_speed)
    return 0.5 * sound_speed / target_size


def two_way_travel_time(slant_range: ArrayLike, sound_speed: ArrayLike) -> FloatArray:
    """Time from transmission to the echo from a range.

    Parameters
    ----------
    slant_range : array_like
        Distance from the transducer. [m]
    sound_speed : array_like
        Harmonic mean speed of sound along the way. [m/s]

    Returns
    -------
    numpy.ndarray
        Time there and back. [s]

    References
    ----------
    .. [1] IHO C-13, chapter 4, §2.3.6.3.

    Examples
    --------
    >>> float(two_way_travel_time(150.0, 1500.0))
    0.2
    """
    slant_range, sound_speed = floats(slant_range, sound_speed)
    return 2.0 * slant_range / sound_speed


def slant_range_from_time(two_way_time: ArrayLike, sound_speed: ArrayLike) -> FloatArray:
    """Range from which an echo came.

    Parameters
    ----------
    two_way_time : array_like
        Time from transmission to echo. [s]
    sound_speed : array_like
        Harmonic mean speed of sound along the way. [m/s]

    Returns
    -------
    numpy.ndarray
        Distance from the transducer. [m]

    References
    ----------
    .. [1] IHO C-13, chapter 4, §2.3.6.3.

    Examples
    --------
    >>> float(slant_range_from_time(0.2, 1500.0))
    150.0
    """
    two_way_time, sound_speed = floats(two_way_time, sound_speed)
    return 0.5 * two_way_time * sound_speed


def listening_time(two_way_travel_time: ArrayLike, pulse_length: ArrayLike) -> FloatArray:
    """Time from the start of a ping to the end of its farthest echo.

    Parameters
    ----------
    two_way_travel_time : array_like
        Time there and back to the farthest range wanted. [s]
    pulse_length : array_like
        Duration of the transmitted pulse. [s]

    Returns
    -------
    numpy.ndarray
        Listening time: the echo ends one pulse length after it begins. [s]

    Examples
    --------
    >>> float(listening_time(0.2, 0.001))
    0.201
    """
    two_way_travel_time, pulse_length = floats(two_way_travel_time, pulse_length)
    return two_way_travel_time + pulse_length


def fastest_ping_rate(listening_time: ArrayLike, pings_in_water: ArrayLike = 1) -> FloatArray:
    """Highest rate at which every ping is still heard out before its place is taken.

    Parameters
    ----------
    listening_time : array_like
        Time from the start of a ping to the end of its farthest echo. [s]
    pings_in_water : array_like, optional
        Pings that may be under way at once. [1]

    Returns
    -------
    numpy.ndarray
        Ping rate. [Hz]

    References
    ----------
    .. [1] IHO C-13, chapter 4, §2.3.6.3: the rate is the inverse of the travel time.

    Examples
    --------
    >>> float(fastest_ping_rate(0.2)), float(fastest_ping_rate(0.2, 2))
    (5.0, 10.0)
    """
    listening_time, pings_in_water = floats(listening_time, pings_in_water)
    with np.errstate(divide="ignore"):
        return pings_in_water / listening_time


def pings_in_water_needed(listening_time: ArrayLike, ping_interval: ArrayLike) -> FloatArray:
    """Pings that are under way at once when pinging at an interval.

    Parameters
    ----------
    listening_time : array_like
        Time from the start of a ping to the end of its farthest echo. [s]
    ping_interval : array_like
        Time from one ping to the next. [s]

    Returns
    -------
    numpy.ndarray
        Whole number of pings, at least one. [1]

    Notes
    -----
    A quotient within 1e-9 of a whole number counts as that number.

    Examples
    --------
    >>> pings_in_water_needed(0.2, [0.25, 0.2, 0.15, 0.05])
    array([1., 1., 2., 4.])
    """
    listening_time, ping_interval = floats(listening_time, ping_interval)
    with np.errstate(divide="ignore"):
        ratio = listening_time / ping_interval
    pings: FloatArray = np.maximum(np.ceil(ratio * (1.0 - 1e-9)), 1.0)
    return pings


def receive_window(ping_span: ArrayLike, pulse_length: ArrayLike) -> FloatArray:
    """Longest two-way travel time whose whole echo ends before the ping's time is over.

    Parameters
    ----------
    ping_span : array_like
        Time from a ping to the one that takes its place in the water. [s]
    pulse_length : array_like
        Duration of the transmitted pulse. [s]

    Returns
    -------
    numpy.ndarray
        Receive window, not less than zero. [s]

    Examples
    --------
    >>> float(receive_window(0.201, 0.001))
    0.2
    """
    ping_span, pulse_length = floats(ping_span, pulse_length)
    window: FloatArray = np.maximum(ping_span - pulse_length, 0.0)
    return window


def unambiguous_range(ping_span: ArrayLike, sound_speed: ArrayLike) -> FloatArray:
    """Farthest range whose echo begins before the ping's time is over.

    Parameters
    ----------
    ping_span : array_like
        Time from a ping to the one that takes its place in the water. [s]
    sound_speed : array_like
        Harmonic mean speed of sound along the way. [m/s]

    Returns
    -------
    numpy.ndarray
        Range. [m]

    References
    ----------
    .. [1] IHO C-13, chapter 4, §2.3.6.3.

    Examples
    --------
    >>> float(unambiguous_range(0.2, 1500.0))
    150.0
    """
    return slant_range_from_time(ping_span, sound_speed)


def blind_zone(pulse_length: ArrayLike, sound_speed: ArrayLike) -> FloatArray:
    """Range nearer than which nothing is heard, because the pulse is still going out.

    Parameters
    ----------
    pulse_length : array_like
        Duration of the transmitted pulse. [s]
    sound_speed : array_like
        Speed of sound at the transducer. [m/s]

    Returns
    -------
    numpy.ndarray
        Half the pulse width in water; ringing of the transducer comes on top. [m]

    References
    ----------
    .. [1] IHO C-13, §5.1.1.3: an echo from nearer overlaps its own pulse.

    Examples
    --------
    >>> float(blind_zone(1e-3, 1500.0))
    0.75
    """
    return range_resolution_cw(pulse_length, sound_speed)


def pulse_is_long_enough(pulse_length: ArrayLike, frequency: ArrayLike) -> BoolArray:
    """Whether a pulse lasts at least half the transducer's natural period.

    Parameters
    ----------
    pulse_length : array_like
        Duration of the transmitted pulse. [s]
    frequency : array_like
        Working (resonance) frequency of the transducer. [Hz]

    Returns
    -------
    numpy.ndarray of bool
        False also where an input is NaN.

    References
    ----------
    .. [1] IHO C-13, §2.4.3.

    Examples
    --------
    >>> pulse_is_long_enough([4e-6, 5e-6], 100e3)
    array([False,  True])
    """
    (pulse_length,) = floats(pulse_length)
    enough: BoolArray = pulse_length >= shortest_useful_pulse(frequency)
    return enough
