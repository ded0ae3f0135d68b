"""Whether an echo can be heard: losses, noise, seabed, target, and the margin that is left.

Levels are in decibels: sound re 1 uPa at 1 m, noise re 1 uPa, spectra re 1 uPa^2/Hz. A margin
(echo excess) of zero is an echo just at the detection threshold.

More power or a longer pulse raises the margin, and may endanger divers and marine life or break
a permit: whoever turns a margin into advice has to say so.
"""

from __future__ import annotations

import math
from collections.abc import Callable

import numpy as np
from numpy.typing import ArrayLike

from qa.physics.arrays import FloatArray, chosen, floats

_RADIANS = math.pi / 180.0


def _decibels(ratio: FloatArray) -> FloatArray:
    """Ten times the decimal logarithm; minus infinity for nothing at all."""
    with np.errstate(divide="ignore", invalid="ignore"):
        level: FloatArray = 10.0 * np.log10(ratio)
    return level


def transmission_loss(slant_range: ArrayLike, absorption: ArrayLike) -> FloatArray:
    """Loss of level on the way to a range, one way.

    Parameters
    ----------
    slant_range : array_like
        Range. [m]
    absorption : array_like
        Absorption per metre. [dB/m]

    Returns
    -------
    numpy.ndarray
        Loss by spherical spreading and absorption, against 1 m. [dB]

    References
    ----------
    .. [1] IHO C-13, eq. 3.9.

    Examples
    --------
    >>> round(float(transmission_loss(100.0, 0.05)), 6)
    45.0
    """
    slant_range, absorption = floats(slant_range, absorption)
    return 2.0 * _decibels(slant_range) + absorption * slant_range


def thermal_noise(frequency: ArrayLike) -> FloatArray:
    """Spectrum level of the noise that the warmth of the water makes.

    Parameters
    ----------
    frequency : array_like
        Frequency. [Hz]

    Returns
    -------
    numpy.ndarray
        Spectrum level re 1 uPa^2/Hz. [dB]

    Notes
    -----
    Outweighs the noise of wind from some 100 kHz on.

    References
    ----------
    .. [1] Mellen, J. Acoust. Soc. Am. 24(5), 478-480, 1952.

    Examples
    --------
    >>> round(float(thermal_noise(100e3)), 6)
    25.0
    """
    (frequency,) = floats(frequency)
    return -15.0 + 2.0 * _decibels(1e-3 * frequency)


def wind_noise(frequency: ArrayLike, wind_speed: ArrayLike) -> FloatArray:
    """Spectrum level of the noise that wind makes at the sea surface.

    Parameters
    ----------
    frequency : array_like
        Frequency. [Hz]
    wind_speed : array_like
        Wind speed. [m/s]

    Returns
    -------
    numpy.ndarray
        Spectrum level re 1 uPa^2/Hz. [dB]

    Notes
    -----
    A fit to Wenz's curves, for some 100 Hz to 100 kHz; recalled from the literature.

    References
    ----------
    .. [1] Coates, Underwater Acoustic Systems, 1990.
    .. [2] Wenz, J. Acoust. Soc. Am. 34(12), 1936-1956, 1962.

    Examples
    --------
    >>> round(float(wind_noise(100e3, 4.0)), 2)
    24.93
    """
    frequency, wind_speed = floats(frequency, wind_speed)
    khz = 1e-3 * frequency
    with np.errstate(invalid="ignore"):
        of_wind = 7.5 * np.sqrt(wind_speed)
    level: FloatArray = 50.0 + of_wind + 2.0 * _decibels(khz) - 4.0 * _decibels(khz + 0.4)
    return level


def combined_level(first: ArrayLike, second: ArrayLike) -> FloatArray:
    """Level of two sounds together that have nothing to do with each other.

    Parameters
    ----------
    first, second : array_like
        Levels of each. [dB]

    Returns
    -------
    numpy.ndarray
        Level of the sum of their powers. [dB]

    Examples
    --------
    >>> round(float(combined_level(40.0, 40.0)), 2)
    43.01
    """
    first, second = floats(first, second)
    return _decibels(10.0 ** (0.1 * first) + 10.0 ** (0.1 * second))


def ambient_noise(frequency: ArrayLike, wind_speed: ArrayLike) -> FloatArray:
    """Spectrum level of the noise of wind and of the water's warmth together.

    Parameters
    ----------
    frequency : array_like
        Frequency. [Hz]
    wind_speed : array_like
        Wind speed. [m/s]

    Returns
    -------
    numpy.ndarray
        Spectrum level re 1 uPa^2/Hz; the vessel's own noise comes on top. [dB]

    References
    ----------
    .. [1] As `thermal_noise` and `wind_noise`.

    Examples
    --------
    >>> round(float(ambient_noise(100e3, 4.0)), 2)
    27.98
    """
    return combined_level(thermal_noise(frequency), wind_noise(frequency, wind_speed))


def noise_level(noise_spectrum: ArrayLike, bandwidth: ArrayLike) -> FloatArray:
    """Level of the noise that a receiver lets through.

    Parameters
    ----------
    noise_spectrum : array_like
        Spectrum level re 1 uPa^2/Hz. [dB]
    bandwidth : array_like
        Bandwidth of the receiver. [Hz]

    Returns
    -------
    numpy.ndarray
        Noise level re 1 uPa. [dB]

    References
    ----------
    .. [1] IHO C-13, eq. 3.10.

    Examples
    --------
    >>> float(noise_level(30.0, 10e3))
    70.0
    """
    noise_spectrum, bandwidth = floats(noise_spectrum, bandwidth)
    return noise_spectrum + _decibels(bandwidth)


def directivity_index_line(array_length: ArrayLike, wavelength: ArrayLike) -> FloatArray:
    """By how much a line array hears noise from all around less than its own direction.

    Parameters
    ----------
    array_length : array_like
        Length of the array. [m]
    wavelength : array_like
        Wavelength in water. [m]

    Returns
    -------
    numpy.ndarray
        Directivity index. [dB]

    Notes
    -----
    For arrays of several wavelengths.

    References
    ----------
    .. [1] IHO C-13, eq. 3.14.

    Examples
    --------
    >>> round(float(directivity_index_line(0.5, 0.01)), 6)
    20.0
    """
    array_length, wavelength = floats(array_length, wavelength)
    return _decibels(2.0 * array_length / wavelength)


def directivity_index_rectangle(
    array_length: ArrayLike, array_height: ArrayLike, wavelength: ArrayLike
) -> FloatArray:
    """Directivity index of a rectangular face in a baffle.

    Parameters
    ----------
    array_length, array_height : array_like
        Sides of the rectangle. [m]
    wavelength : array_like
        Wavelength in water. [m]

    Returns
    -------
    numpy.ndarray
        Directivity index. [dB]

    Notes
    -----
    For sides of several wavelengths.

    References
    ----------
    .. [1] Urick, Principles of Underwater Sound, 3rd ed., 1983.

    Examples
    --------
    >>> round(float(directivity_index_rectangle(0.5, 0.05, 0.01)), 2)
    34.97
    """
    array_length, array_height, wavelength = floats(array_length, array_height, wavelength)
    return _decibels(4.0 * math.pi * array_length * array_height / (wavelength * wavelength))


def directivity_index_from_beamwidths(
    beamwidth_along: ArrayLike, beamwidth_across: ArrayLike
) -> FloatArray:
    """Directivity index of the rectangular face that makes a beam of two widths.

    Parameters
    ----------
    beamwidth_along, beamwidth_across : array_like
        Beam widths at half power. [deg]

    Returns
    -------
    numpy.ndarray
        Directivity index, not less than zero. [dB]

    Notes
    -----
    The rectangle's index with its sides from their beam widths, 50.76 degrees times wavelength
    over length: some 32400 square degrees over the beam's own.

    References
    ----------
    .. [1] Urick, Principles of Underwater Sound, 3rd ed., 1983.

    Examples
    --------
    >>> round(float(directivity_index_from_beamwidths(1.0, 50.0)), 2)
    28.11
    """
    along, across = floats(beamwidth_along, beamwidth_across)
    index: FloatArray = np.maximum(_decibels(4.0 * math.pi * 50.76**2 / (along * across)), 0.0)
    return index


def processing_gain(bandwidth: ArrayLike, pulse_length: ArrayLike) -> FloatArray:
    """What the matched filter of a frequency-modulated pulse gains over noise.

    Parameters
    ----------
    bandwidth : array_like
        Width of the frequency sweep, and of the receiver. [Hz]
    pulse_length : array_like
        Duration of the transmitted pulse. [s]

    Returns
    -------
    numpy.ndarray
        Gain, zero for a plain pulse (a product of bandwidth and duration up to one). [dB]

    References
    ----------
    .. [1] Lurton, An Introduction to Underwater Acoustics, 2nd ed., 2010.

    Examples
    --------
    >>> round(float(processing_gain(10e3, 10e-3)), 6)
    20.0
    """
    bandwidth, pulse_length = floats(bandwidth, pulse_length)
    gain: FloatArray = np.maximum(_decibels(bandwidth * pulse_length), 0.0)
    return gain


def backscatter_per_area(
    incidence_angle: ArrayLike,
    backscatter_normal: ArrayLike = -15.0,
    backscatter_oblique: ArrayLike = -30.0,
    oblique_from: ArrayLike = 25.0,
) -> FloatArray:
    """Strength with which a square metre of seabed sends sound back.

    Parameters
    ----------
    incidence_angle : array_like
        Angle between the beam and the normal of the seabed. [deg]
    backscatter_normal : array_like, optional
        Strength per square metre at normal incidence. [dB]
    backscatter_oblique : array_like, optional
        Strength per square metre that Lambert's law starts from. [dB]
    oblique_from : array_like, optional
        Angle from which Lambert's law holds, 10 to 25 degrees. [deg]

    Returns
    -------
    numpy.ndarray
        Backscattering strength per square metre; minus infinity from 90 degrees on. [dB]

    Notes
    -----
    Between normal incidence and `oblique_from` the level falls evenly with the angle. The
    strengths given as defaults vary by 10 dB or more with the seabed.

    References
    ----------
    .. [1] IHO C-13, text after eq. 3.16.

    Examples
    --------
    >>> backscatter_per_area([0.0, 60.0]).round(2)
    array([-15.  , -36.02])
    """
    angle, normal, oblique, oblique_from = floats(
        incidence_angle, backscatter_normal, backscatter_oblique, oblique_from
    )
    angle = np.abs(angle)
    cosine = chosen(angle < 90.0, np.cos(_RADIANS * angle), chosen(np.isnan(angle), np.nan, 0.0))
    lambert = oblique + 2.0 * _decibels(cosine)
    at_start = oblique + 2.0 * _decibels(np.cos(_RADIANS * oblique_from))
    with np.errstate(divide="ignore", invalid="ignore"):
        near_normal = normal + (at_start - normal) * angle / oblique_from
    # An unknown seabed stays unknown, also where the other of its two strengths decides.
    return chosen(angle >= oblique_from, lambert, near_normal) + 0.0 * (normal + oblique)


def ensonified_area(
    slant_range: ArrayLike,
    incidence_angle: ArrayLike,
    beamwidth_along: ArrayLike,
    beamwidth_across: ArrayLike,
    range_resolution: ArrayLike,
) -> FloatArray:
    """Area of seabed that sends sound back at one moment.

    Parameters
    ----------
    slant_range : array_like
        Range. [m]
    incidence_angle : array_like
        Angle between the beam and the normal of the seabed. [deg]
    beamwidth_along : array_like
        Beam width along the track. [deg]
    beamwidth_across : array_like
        Beam width across the track. [deg]
    range_resolution : array_like
        Range resolution: half the pulse width of a plain pulse. [m]

    Returns
    -------
    numpy.ndarray
        The smaller of what the beam holds and what the pulse reaches. [m2]

    References
    ----------
    .. [1] IHO C-13, eq. 3.16.

    Examples
    --------
    >>> ensonified_area(100.0, [0.0, 60.0], 1.0, 1.0, 0.075).round(3)
    array([3.046, 0.151])
    """
    slant_range, angle, along, across, resolution = floats(
        slant_range, incidence_angle, beamwidth_along, beamwidth_across, range_resolution
    )
    width = _RADIANS * along * slant_range
    beam_limited = _RADIANS * across * slant_range
    with np.errstate(divide="ignore", invalid="ignore"):
        pulse_limited: FloatArray = resolution / np.sin(_RADIANS * np.abs(angle))
    # 0/0: straight down, even no pulse at all leaves the question to the beam.
    pulse_limited = chosen((resolution == 0.0) & (angle == 0.0), np.inf, pulse_limited)
    area: FloatArray = width * np.minimum(beam_limited, pulse_limited)
    return area


def bottom_strength(backscatter: ArrayLike, area: ArrayLike) -> FloatArray:
    """Strength with which a patch of seabed sends sound back.

    Parameters
    ----------
    backscatter : array_like
        Backscattering strength per square metre. [dB]
    area : array_like
        Area of the patch. [m2]

    Returns
    -------
    numpy.ndarray
        Strength of the patch. [dB]

    References
    ----------
    .. [1] IHO C-13, eq. 3.15.

    Examples
    --------
    >>> float(bottom_strength(-30.0, 10.0))
    -20.0
    """
    backscatter, area = floats(backscatter, area)
    return backscatter + _decibels(area)


def target_strength_sphere(radius: ArrayLike) -> FloatArray:
    """Strength with which a large hard sphere sends sound back.

    Parameters
    ----------
    radius : array_like
        Radius, large against the wavelength. [m]

    Returns
    -------
    numpy.ndarray
        Target strength. [dB]

    References
    ----------
    .. [1] Urick, Principles of Underwater Sound, 3rd ed., 1983.

    Examples
    --------
    >>> float(target_strength_sphere(2.0))
    0.0
    """
    (radius,) = floats(radius)
    return _decibels(0.25 * radius * radius)


def detection_threshold_steady(
    chance_of_detection: ArrayLike, chance_of_false_alarm: ArrayLike
) -> FloatArray:
    """Signal to noise that detects a steady echo at a stated confidence.

    Parameters
    ----------
    chance_of_detection : array_like
        Chance that one ping's echo is detected. [1]
    chance_of_false_alarm : array_like
        Chance that noise alone is taken for an echo. [1]

    Returns
    -------
    numpy.ndarray
        Detection threshold, signal over noise in the receiver's band. [dB]

    Notes
    -----
    Exact for one sample and an envelope detector: the envelope's square is a noncentral
    chi-square with two degrees of freedom. Minus infinity where noise alone does it.

    References
    ----------
    .. [1] Marcum, Trans. IRE IT-6, 59-267, 1960.

    Examples
    --------
    >>> round(float(detection_threshold_steady(0.9, 1e-6)), 2)
    13.18
    """
    from scipy.special import chndtrinc

    detection, false_alarm = floats(chance_of_detection, chance_of_false_alarm)
    with np.errstate(divide="ignore", invalid="ignore"):
        needs_echo = detection > false_alarm
        excess = chndtrinc(-2.0 * np.log(false_alarm), 2.0, 1.0 - detection)
        ratio: FloatArray = np.where(needs_echo, 0.5 * excess, 0.0)
    return _decibels(ratio + 0.0 * (detection + false_alarm))


def detection_threshold_fluctuating(
    chance_of_detection: ArrayLike, chance_of_false_alarm: ArrayLike
) -> FloatArray:
    """Signal to noise that detects an echo of random strength at a stated confidence.

    Parameters
    ----------
    chance_of_detection : array_like
        Chance that one ping's echo is detected. [1]
    chance_of_false_alarm : array_like
        Chance that noise alone is taken for an echo. [1]

    Returns
    -------
    numpy.ndarray
        Detection threshold, mean signal over noise in the receiver's band. [dB]

    Notes
    -----
    Exact for an echo whose amplitude follows Rayleigh's law, as that of many small facets does.

    References
    ----------
    .. [1] Swerling, Trans. IRE IT-6, 269-308, 1960, case 1 with one sample.

    Examples
    --------
    >>> round(float(detection_threshold_fluctuating(0.5, 1e-4)), 2)
    10.89
    """
    detection, false_alarm = floats(chance_of_detection, chance_of_false_alarm)
    with np.errstate(divide="ignore", invalid="ignore"):
        ratio = np.log(false_alarm) / np.log(detection) - 1.0
    return _decibels(ratio)


def echo_excess(
    source_level: ArrayLike,
    transmission_loss: ArrayLike,
    noise_level: ArrayLike,
    directivity_index: ArrayLike,
    echo_strength: ArrayLike,
    detection_threshold: ArrayLike,
    processing_gain: ArrayLike = 0.0,
) -> FloatArray:
    """Margin of an echo over noise.

    Parameters
    ----------
    source_level : array_like
        Level of the source re 1 uPa at 1 m. [dB]
    transmission_loss : array_like
        Loss one way. [dB]
    noise_level : array_like
        Level of the noise in the receiver's band. [dB]
    directivity_index : array_like
        Directivity index of the receiver. [dB]
    echo_strength : array_like
        Strength of the patch of seabed, or of the target. [dB]
    detection_threshold : array_like
        Signal over noise that is needed. [dB]
    processing_gain : array_like, optional
        Gain of a matched filter. [dB]

    Returns
    -------
    numpy.ndarray
        Echo excess: what is left over the threshold. [dB]

    References
    ----------
    .. [1] IHO C-13, eq. 3.4.

    Examples
    --------
    >>> float(echo_excess(210.0, 50.0, 70.0, 28.0, -35.0, 10.0))
    23.0
    """
    level, loss, noise, index, strength, threshold, gain = floats(
        source_level,
        transmission_loss,
        noise_level,
        directivity_index,
        echo_strength,
        detection_threshold,
        processing_gain,
    )
    return level - 2.0 * loss - (noise - index) + strength - threshold + gain


def target_excess(
    noise_limited_excess: ArrayLike,
    target_strength: ArrayLike,
    bottom_strength: ArrayLike,
    detection_threshold: ArrayLike,
) -> FloatArray:
    """Margin of a target that lies on the seabed: over noise and over the seabed's own echo.

    Parameters
    ----------
    noise_limited_excess : array_like
        Echo excess of the target over noise. [dB]
    target_strength : array_like
        Strength of the target. [dB]
    bottom_strength : array_like
        Strength of the patch of seabed that echoes with it. [dB]
    detection_threshold : array_like
        Signal over what hides it that is needed. [dB]

    Returns
    -------
    numpy.ndarray
        The smaller of both margins. [dB]

    Notes
    -----
    More power does not help against the seabed's own echo: a shorter pulse or a narrower beam
    does. Derived.

    Examples
    --------
    >>> float(target_excess(23.0, -20.0, -45.0, 10.0))
    15.0
    """
    noise_limited, target, bottom, threshold = floats(
        noise_limited_excess, target_strength, bottom_strength, detection_threshold
    )
    smaller: FloatArray = np.minimum(noise_limited, target - bottom - threshold)
    return smaller


def seabed_echo_margin(
    source_level: ArrayLike,
    slant_range: ArrayLike,
    incidence_angle: ArrayLike,
    absorption: ArrayLike,
    noise_level: ArrayLike,
    directivity_index: ArrayLike,
    beamwidth_along: ArrayLike,
    beamwidth_across: ArrayLike,
    range_resolution: ArrayLike,
    detection_threshold: ArrayLike,
    processing_gain: ArrayLike = 0.0,
    backscatter_normal: ArrayLike = -15.0,
    backscatter_oblique: ArrayLike = -30.0,
) -> FloatArray:
    """Margin of the seabed's echo over noise.

    Parameters
    ----------
    source_level : array_like
        Level of the source re 1 uPa at 1 m. [dB]
    slant_range : array_like
        Range. [m]
    incidence_angle : array_like
        Angle between the beam and the normal of the seabed. [deg]
    absorption : array_like
        Absorption per metre. [dB/m]
    noise_level : array_like
        Level of the noise in the receiver's band. [dB]
    directivity_index : array_like
        Directivity index of the receiver. [dB]
    beamwidth_along, beamwidth_across : array_like
        Beam widths. [deg]
    range_resolution : array_like
        Range resolution. [m]
    detection_threshold : array_like
        Signal over noise that is needed. [dB]
    processing_gain : array_like, optional
        Gain of a matched filter. [dB]
    backscatter_normal, backscatter_oblique : array_like, optional
        Strength of the seabed per square metre, as in `backscatter_per_area`. [dB]

    Returns
    -------
    numpy.ndarray
        Echo excess. [dB]

    References
    ----------
    .. [1] IHO C-13, eqs. 3.4 and 3.9 to 3.16.

    Examples
    --------
    >>> margin = seabed_echo_margin(
    ...     210.0, 100.0, 60.0, 0.05, 70.0, 28.0, 1.0, 1.0, 0.075, 10.0
    ... )
    >>> round(float(margin), 2)
    23.77
    """
    patch = bottom_strength(
        backscatter_per_area(incidence_angle, backscatter_normal, backscatter_oblique),
        ensonified_area(
            slant_range, incidence_angle, beamwidth_along, beamwidth_across, range_resolution
        ),
    )
    return echo_excess(
        source_level,
        transmission_loss(slant_range, absorption),
        noise_level,
        directivity_index,
        patch,
        detection_threshold,
        processing_gain,
    )


def target_echo_margin(
    source_level: ArrayLike,
    slant_range: ArrayLike,
    incidence_angle: ArrayLike,
    absorption: ArrayLike,
    noise_level: ArrayLike,
    directivity_index: ArrayLike,
    beamwidth_along: ArrayLike,
    beamwidth_across: ArrayLike,
    range_resolution: ArrayLike,
    detection_threshold: ArrayLike,
    target_strength: ArrayLike,
    processing_gain: ArrayLike = 0.0,
    backscatter_normal: ArrayLike = -15.0,
    backscatter_oblique: ArrayLike = -30.0,
) -> FloatArray:
    """Margin of a target on the seabed over noise and over the seabed's own echo.

    Parameters
    ----------
    source_level : array_like
        Level of the source re 1 uPa at 1 m. [dB]
    slant_range : array_like
        Range. [m]
    incidence_angle : array_like
        Angle between the beam and the normal of the seabed. [deg]
    absorption : array_like
        Absorption per metre. [dB/m]
    noise_level : array_like
        Level of the noise in the receiver's band. [dB]
    directivity_index : array_like
        Directivity index of the receiver. [dB]
    beamwidth_along, beamwidth_across : array_like
        Beam widths. [deg]
    range_resolution : array_like
        Range resolution. [m]
    detection_threshold : array_like
        Signal over noise or over the seabed's echo that is needed. [dB]
    target_strength : array_like
        Strength of the target. [dB]
    processing_gain : array_like, optional
        Gain of a matched filter, which helps against noise only. [dB]
    backscatter_normal, backscatter_oblique : array_like, optional
        Strength of the seabed per square metre, as in `backscatter_per_area`. [dB]

    Returns
    -------
    numpy.ndarray
        Echo excess. [dB]

    References
    ----------
    .. [1] IHO C-13, eqs. 3.4 and 3.9 to 3.16; the seabed's own echo as a limit is derived.

    Examples
    --------
    >>> margin = target_echo_margin(
    ...     210.0, 100.0, 60.0, 0.05, 70.0, 28.0, 1.0, 1.0, 0.075, 10.0, -20.0
    ... )
    >>> round(float(margin), 2)
    14.23
    """
    patch = bottom_strength(
        backscatter_per_area(incidence_angle, backscatter_normal, backscatter_oblique),
        ensonified_area(
            slant_range, incidence_angle, beamwidth_along, beamwidth_across, range_resolution
        ),
    )
    over_noise = echo_excess(
        source_level,
        transmission_loss(slant_range, absorption),
        noise_level,
        directivity_index,
        target_strength,
        detection_threshold,
        processing_gain,
    )
    return target_excess(over_noise, target_strength, patch, detection_threshold)


def greatest_range(
    margin: Callable[[FloatArray], FloatArray],
    shortest: ArrayLike = 1.0,
    longest: ArrayLike = 20000.0,
) -> FloatArray:
    """Farthest range at which a margin is still not below zero.

    Parameters
    ----------
    margin : callable
        Takes slant ranges [m], shape (k, ...), and returns margins [dB] of the same shape, each
        column being one sonar, water or target.
    shortest, longest : array_like, optional
        Ranges between which to look; their shape is that of the result. [m]

    Returns
    -------
    numpy.ndarray
        The range of the last fall through zero, to 1e-9 of itself; zero where the margin is
        below zero everywhere, infinite where it is not yet below zero at `longest`, NaN where
        the margin is. [m]

    Notes
    -----
    The last fall is bracketed on 241 ranges in even ratios, then halved: a margin that rises
    and falls again between two of them (some 4 % apart, with the ranges as given) may be
    overlooked.

    Examples
    --------
    >>> def spreading_only(slant_range):
    ...     return 80.0 - 2.0 * transmission_loss(slant_range, 0.0)
    >>> round(float(greatest_range(spreading_only)), 6)
    100.0
    """
    low, high = np.broadcast_arrays(
        np.asarray(shortest, dtype=np.float64), np.asarray(longest, dtype=np.float64)
    )
    steps = np.linspace(0.0, 1.0, 241).reshape((-1,) + (1,) * low.ndim)
    ranges = low * (high / low) ** steps
    margins = np.asarray(margin(ranges), dtype=np.float64)
    ranges = np.broadcast_to(ranges, margins.shape)
    heard = margins >= 0.0
    last = margins.shape[0] - 1 - np.argmax(heard[::-1], axis=0)
    never = ~heard.any(axis=0)
    always = heard[-1]
    unknown = np.isnan(margins).any(axis=0)
    inner = np.take_along_axis(ranges, np.minimum(last, 239)[np.newaxis], axis=0)
    outer = np.take_along_axis(ranges, np.minimum(last + 1, 240)[np.newaxis], axis=0)
    for _ in range(32):
        middle = 0.5 * (inner + outer)
        still = np.asarray(margin(middle)) >= 0.0
        inner = np.where(still, middle, inner)
        outer = np.where(still, outer, middle)
    root = inner[0]
    root = np.where(never, 0.0, np.where(always, np.inf, root))
    found: FloatArray = np.where(unknown, np.nan, root)[()]
    return found
