"""How uncertain a sounding is, term by term, and what S-44 allows.

Inputs that end in ``_sigma`` are standard deviations. Each term is a function of its own and
returns the standard deviation that it brings to the depth (``vertical_...``), across or along
the track (``across_...``, ``along_...``); `combined` adds any of them as squares.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from types import MappingProxyType

import numpy as np
from numpy.typing import ArrayLike

from qa.physics.arrays import FloatArray, chosen, floats

_RADIANS = math.pi / 180.0

COVERAGE_ONE_DIMENSION = 1.96
"""Standard deviations that hold 95 % of errors in one dimension (S-44 §2.7)."""

COVERAGE_TWO_DIMENSIONS = 2.45
"""Standard deviations that hold 95 % of errors in two dimensions (S-44 §2.7)."""


def combined(*sigmas: ArrayLike) -> FloatArray:
    """Root of the sum of squares of errors that have nothing to do with each other.

    Parameters
    ----------
    *sigmas : array_like
        Uncertainties, all of the same kind (all standard deviations, or all at 95 %).

    Returns
    -------
    numpy.ndarray
        Uncertainty of their sum, same kind and unit.

    References
    ----------
    .. [1] IHO C-13, eq. 3.84; JCGM 100:2008, §5.1.2.

    Examples
    --------
    >>> round(float(combined(10.0, 5.0, 1.0, 1.5)), 1)
    11.3
    """
    terms = floats(*sigmas)
    total = terms[0] * terms[0]
    for term in terms[1:]:
        total = total + term * term
    root: FloatArray = np.sqrt(total)
    return root


def vertical_profile_gradient(
    height: ArrayLike, beam_angle: ArrayLike, sound_speed: ArrayLike, gradient_sigma: ArrayLike
) -> FloatArray:
    """Depth error from a cast whose gradient is uncertain.

    Parameters
    ----------
    height : array_like
        Height of the transducer over the seabed. [m]
    beam_angle : array_like
        Angle of the beam from the vertical. [deg]
    sound_speed : array_like
        Sound speed at the transducer. [m/s]
    gradient_sigma : array_like
        Standard deviation of the cast's gradient. [1/s]

    Returns
    -------
    numpy.ndarray
        Standard deviation of depth: zero at 45 degrees, where the error changes sign. [m]

    References
    ----------
    .. [1] IHO C-13, eq. 3.71, first term.

    Examples
    --------
    >>> round(float(vertical_profile_gradient(50.0, 60.0, 1500.0, 0.1)), 4)
    0.1667
    """
    height, angle, speed, sigma = floats(height, beam_angle, sound_speed, gradient_sigma)
    tangent = np.tan(_RADIANS * angle)
    error: FloatArray = np.abs(height * height / (2.0 * speed) * (1.0 - tangent * tangent) * sigma)
    return error


def vertical_profile_speed(
    height: ArrayLike, sound_speed: ArrayLike, sound_speed_sigma: ArrayLike
) -> FloatArray:
    """Depth error from a mean sound speed that is uncertain.

    Parameters
    ----------
    height : array_like
        Height of the transducer over the seabed. [m]
    sound_speed : array_like
        Sound speed. [m/s]
    sound_speed_sigma : array_like
        Standard deviation of the mean sound speed. [m/s]

    Returns
    -------
    numpy.ndarray
        Standard deviation of depth. [m]

    References
    ----------
    .. [1] IHO C-13, eq. 3.71, second term.

    Examples
    --------
    >>> float(vertical_profile_speed(30.0, 1500.0, 5.0))
    0.1
    """
    height, speed, sigma = floats(height, sound_speed, sound_speed_sigma)
    return height / speed * sigma


def vertical_surface_speed(
    height: ArrayLike,
    beam_angle: ArrayLike,
    sound_speed: ArrayLike,
    surface_sound_speed_sigma: ArrayLike,
    steering_angle: ArrayLike | None = None,
) -> FloatArray:
    """Depth error from the sound speed at the array, through steering.

    Parameters
    ----------
    height : array_like
        Height of the transducer over the seabed. [m]
    beam_angle : array_like
        Angle of the beam from the vertical. [deg]
    sound_speed : array_like
        Sound speed at the transducer. [m/s]
    surface_sound_speed_sigma : array_like
        Standard deviation of the sound speed at the transducer. [m/s]
    steering_angle : array_like, optional
        Angle of the beam from the array's own normal, if that is not the vertical: roll, or a
        tilted head. [deg]

    Returns
    -------
    numpy.ndarray
        Standard deviation of depth. [m]

    References
    ----------
    .. [1] IHO C-13, eq. 3.76, with the steering angle counted from the array.

    Examples
    --------
    >>> round(float(vertical_surface_speed(30.0, 60.0, 1500.0, 1.0)), 4)
    0.06
    """
    steering_angle = beam_angle if steering_angle is None else steering_angle
    height, angle, speed, sigma, steering = floats(
        height, beam_angle, sound_speed, surface_sound_speed_sigma, steering_angle
    )
    error: FloatArray = np.abs(
        height / speed * np.tan(_RADIANS * angle) * np.tan(_RADIANS * steering) * sigma
    )
    return error


def vertical_roll(
    height: ArrayLike, beam_angle: ArrayLike, roll_sigma: ArrayLike, pitch: ArrayLike = 0.0
) -> FloatArray:
    """Depth error from roll and from the mounting of the array about the same axis.

    Parameters
    ----------
    height : array_like
        Height of the transducer over the seabed. [m]
    beam_angle : array_like
        Angle of the beam from the vertical: roll is in it already. [deg]
    roll_sigma : array_like
        Standard deviation of roll. [deg]
    pitch : array_like, optional
        Pitch, positive bow up. [deg]

    Returns
    -------
    numpy.ndarray
        Standard deviation of depth. [m]

    References
    ----------
    .. [1] IHO C-13, eq. 3.80.

    Examples
    --------
    >>> round(float(vertical_roll(30.0, 60.0, 0.05)), 4)
    0.0453
    """
    height, angle, sigma, pitch = floats(height, beam_angle, roll_sigma, pitch)
    error: FloatArray = np.abs(
        height * np.cos(_RADIANS * pitch) * np.tan(_RADIANS * angle) * (_RADIANS * sigma)
    )
    return error


def vertical_pitch(height: ArrayLike, pitch: ArrayLike, pitch_sigma: ArrayLike) -> FloatArray:
    """Depth error from pitch and from the mounting of the array about the same axis.

    Parameters
    ----------
    height : array_like
        Height of the transducer over the seabed. [m]
    pitch : array_like
        Pitch, positive bow up. [deg]
    pitch_sigma : array_like
        Standard deviation of pitch. [deg]

    Returns
    -------
    numpy.ndarray
        Standard deviation of depth. [m]

    References
    ----------
    .. [1] IHO C-13, eq. 3.81.

    Examples
    --------
    >>> round(float(vertical_pitch(100.0, 5.0, 0.1)), 4)
    0.0152
    """
    height, pitch, sigma = floats(height, pitch, pitch_sigma)
    error: FloatArray = np.abs(height * np.sin(_RADIANS * pitch) * (_RADIANS * sigma))
    return error


def vertical_range(beam_angle: ArrayLike, range_sigma: ArrayLike) -> FloatArray:
    """Depth error from an uncertain range, as the detection of the bottom leaves it.

    Parameters
    ----------
    beam_angle : array_like
        Angle of the beam from the vertical. [deg]
    range_sigma : array_like
        Standard deviation of the range. [m]

    Returns
    -------
    numpy.ndarray
        Standard deviation of depth. [m]

    References
    ----------
    .. [1] IHO C-13, eq. 3.70: depth is range times the cosine of the angle.

    Examples
    --------
    >>> round(float(vertical_range(60.0, 0.1)), 9)
    0.05
    """
    angle, sigma = floats(beam_angle, range_sigma)
    error: FloatArray = np.abs(np.cos(_RADIANS * angle) * sigma)
    return error


def vertical_beam_angle(
    height: ArrayLike, beam_angle: ArrayLike, beam_angle_sigma: ArrayLike
) -> FloatArray:
    """Depth error from an uncertain beam angle, as the detection of the bottom leaves it.

    Parameters
    ----------
    height : array_like
        Height of the transducer over the seabed. [m]
    beam_angle : array_like
        Angle of the beam from the vertical. [deg]
    beam_angle_sigma : array_like
        Standard deviation of the angle. [deg]

    Returns
    -------
    numpy.ndarray
        Standard deviation of depth. [m]

    References
    ----------
    .. [1] IHO C-13, eq. 3.70: depth is range times the cosine of the angle.

    Examples
    --------
    >>> round(float(vertical_beam_angle(30.0, 45.0, 0.1)), 4)
    0.0524
    """
    return vertical_roll(height, beam_angle, beam_angle_sigma)


def vertical_heave(
    heave_sigma: ArrayLike,
    roll_sigma: ArrayLike = 0.0,
    pitch_sigma: ArrayLike = 0.0,
    arm_along: ArrayLike = 0.0,
    arm_across: ArrayLike = 0.0,
    arm_down: ArrayLike = 0.0,
    roll: ArrayLike = 0.0,
    pitch: ArrayLike = 0.0,
) -> FloatArray:
    """Depth error from heave, as measured and as the lever arm to the transducer adds.

    Parameters
    ----------
    heave_sigma : array_like
        Standard deviation of the measured heave. [m]
    roll_sigma, pitch_sigma : array_like, optional
        Standard deviations of roll and pitch. [deg]
    arm_along, arm_across, arm_down : array_like, optional
        Arm from the motion sensor to the transducer: forward, to starboard, down. [m]
    roll, pitch : array_like, optional
        Roll, positive starboard down, and pitch, positive bow up. [deg]

    Returns
    -------
    numpy.ndarray
        Standard deviation of depth. [m]

    Notes
    -----
    The transducer hangs lower than the sensor by -x sin P + cos P (y sin R + z cos R); the
    terms of roll and pitch are that expression's derivatives.

    References
    ----------
    .. [1] IHO C-13, eq. 3.82 and the text before it.

    Examples
    --------
    >>> round(float(vertical_heave(0.05, 0.05, 0.05, 10.0, 2.0)), 4)
    0.0508
    """
    heave, sigma_roll, sigma_pitch, x, y, z, roll, pitch = floats(
        heave_sigma, roll_sigma, pitch_sigma, arm_along, arm_across, arm_down, roll, pitch
    )
    sine_roll, cosine_roll = np.sin(_RADIANS * roll), np.cos(_RADIANS * roll)
    sine_pitch, cosine_pitch = np.sin(_RADIANS * pitch), np.cos(_RADIANS * pitch)
    by_roll = cosine_pitch * (y * cosine_roll - z * sine_roll)
    by_pitch = x * cosine_pitch + sine_pitch * (y * sine_roll + z * cosine_roll)
    return combined(heave, by_roll * (_RADIANS * sigma_roll), by_pitch * (_RADIANS * sigma_pitch))


def vertical_draught(
    draught_sigma: ArrayLike, settlement_sigma: ArrayLike = 0.0, squat_sigma: ArrayLike = 0.0
) -> FloatArray:
    """Depth error from how deep the transducer hangs.

    Parameters
    ----------
    draught_sigma : array_like
        Standard deviation of the draught at rest. [m]
    settlement_sigma, squat_sigma : array_like, optional
        Standard deviations of settlement and squat under way. [m]

    Returns
    -------
    numpy.ndarray
        Standard deviation of depth. [m]

    References
    ----------
    .. [1] IHO C-13, eq. 3.83.

    Examples
    --------
    >>> round(float(vertical_draught(0.03, 0.0, 0.04)), 9)
    0.05
    """
    return combined(draught_sigma, settlement_sigma, squat_sigma)


def vertical_tide(tide_sigma: ArrayLike, cotidal_sigma: ArrayLike = 0.0) -> FloatArray:
    """Depth error from the tide at the gauge and from carrying it over to the vessel.

    Parameters
    ----------
    tide_sigma : array_like
        Standard deviation of the tide measured. [m]
    cotidal_sigma : array_like, optional
        Standard deviation of the difference between gauge and vessel. [m]

    Returns
    -------
    numpy.ndarray
        Standard deviation of reduced depth. [m]

    References
    ----------
    .. [1] IHO C-13, eq. 3.84.

    Examples
    --------
    >>> round(float(vertical_tide(0.03, 0.04)), 9)
    0.05
    """
    return combined(tide_sigma, cotidal_sigma)


def across_profile_gradient(
    height: ArrayLike, beam_angle: ArrayLike, sound_speed: ArrayLike, gradient_sigma: ArrayLike
) -> FloatArray:
    """Error across the track from a cast whose gradient is uncertain.

    Parameters
    ----------
    height : array_like
        Height of the transducer over the seabed. [m]
    beam_angle : array_like
        Angle of the beam from the vertical. [deg]
    sound_speed : array_like
        Sound speed at the transducer. [m/s]
    gradient_sigma : array_like
        Standard deviation of the cast's gradient. [1/s]

    Returns
    -------
    numpy.ndarray
        Standard deviation across the track. [m]

    References
    ----------
    .. [1] First order of the ray in IHO C-13, eqs. 3.59 to 3.68, at constant travel time.

    Examples
    --------
    >>> round(float(across_profile_gradient(30.0, 45.0, 1500.0, 0.05)), 4)
    0.03
    """
    height, angle, speed, sigma = floats(height, beam_angle, sound_speed, gradient_sigma)
    error: FloatArray = np.abs(height * height / speed * np.tan(_RADIANS * angle) * sigma)
    return error


def across_profile_speed(
    height: ArrayLike, beam_angle: ArrayLike, sound_speed: ArrayLike, sound_speed_sigma: ArrayLike
) -> FloatArray:
    """Error across the track from a mean sound speed that is uncertain.

    Parameters
    ----------
    height : array_like
        Height of the transducer over the seabed. [m]
    beam_angle : array_like
        Angle of the beam from the vertical. [deg]
    sound_speed : array_like
        Sound speed. [m/s]
    sound_speed_sigma : array_like
        Standard deviation of the mean sound speed. [m/s]

    Returns
    -------
    numpy.ndarray
        Standard deviation across the track. [m]

    References
    ----------
    .. [1] Distance across is range times the sine of the angle, and range grows with speed.

    Examples
    --------
    >>> round(float(across_profile_speed(30.0, 45.0, 1500.0, 5.0)), 4)
    0.1
    """
    height, angle, speed, sigma = floats(height, beam_angle, sound_speed, sound_speed_sigma)
    error: FloatArray = np.abs(height * np.tan(_RADIANS * angle) / speed * sigma)
    return error


def across_surface_speed(
    height: ArrayLike,
    steering_angle: ArrayLike,
    sound_speed: ArrayLike,
    surface_sound_speed_sigma: ArrayLike,
) -> FloatArray:
    """Error across the track from the sound speed at the array, through steering.

    Parameters
    ----------
    height : array_like
        Height of the transducer over the seabed. [m]
    steering_angle : array_like
        Angle of the beam from the array's own normal. [deg]
    sound_speed : array_like
        Sound speed at the transducer. [m/s]
    surface_sound_speed_sigma : array_like
        Standard deviation of the sound speed at the transducer. [m/s]

    Returns
    -------
    numpy.ndarray
        Standard deviation across the track. [m]

    References
    ----------
    .. [1] Counterpart of IHO C-13, eq. 3.76: the beam turns by tan(angle) times the relative
       error of the speed.

    Examples
    --------
    >>> round(float(across_surface_speed(30.0, 45.0, 1500.0, 1.0)), 4)
    0.02
    """
    return across_profile_speed(height, steering_angle, sound_speed, surface_sound_speed_sigma)


def across_range(beam_angle: ArrayLike, range_sigma: ArrayLike) -> FloatArray:
    """Error across the track from an uncertain range.

    Parameters
    ----------
    beam_angle : array_like
        Angle of the beam from the vertical. [deg]
    range_sigma : array_like
        Standard deviation of the range. [m]

    Returns
    -------
    numpy.ndarray
        Standard deviation across the track. [m]

    References
    ----------
    .. [1] Distance across is range times the sine of the angle.

    Examples
    --------
    >>> round(float(across_range(30.0, 0.1)), 9)
    0.05
    """
    angle, sigma = floats(beam_angle, range_sigma)
    error: FloatArray = np.abs(np.sin(_RADIANS * angle) * sigma)
    return error


def across_roll(height: ArrayLike, roll_sigma: ArrayLike) -> FloatArray:
    """Error across the track from roll or from an uncertain beam angle.

    Parameters
    ----------
    height : array_like
        Height of the transducer over the seabed. [m]
    roll_sigma : array_like
        Standard deviation of roll, or of the beam angle. [deg]

    Returns
    -------
    numpy.ndarray
        Standard deviation across the track, the range being what was measured. [m]

    References
    ----------
    .. [1] Distance across is range times the sine of the angle.

    Examples
    --------
    >>> round(float(across_roll(100.0, 0.1)), 4)
    0.1745
    """
    height, sigma = floats(height, roll_sigma)
    error: FloatArray = np.abs(height * (_RADIANS * sigma))
    return error


def along_pitch(height: ArrayLike, pitch_sigma: ArrayLike) -> FloatArray:
    """Error along the track from pitch.

    Parameters
    ----------
    height : array_like
        Height of the transducer over the seabed. [m]
    pitch_sigma : array_like
        Standard deviation of pitch. [deg]

    Returns
    -------
    numpy.ndarray
        Standard deviation along the track. [m]

    References
    ----------
    .. [1] Counterpart of IHO C-13, eq. 3.81.

    Examples
    --------
    >>> round(float(along_pitch(100.0, 0.1)), 4)
    0.1745
    """
    return across_roll(height, pitch_sigma)


def along_heading(height: ArrayLike, beam_angle: ArrayLike, heading_sigma: ArrayLike) -> FloatArray:
    """Error along the track from heading, which grows outwards.

    Parameters
    ----------
    height : array_like
        Height of the transducer over the seabed. [m]
    beam_angle : array_like
        Angle of the beam from the vertical. [deg]
    heading_sigma : array_like
        Standard deviation of heading. [deg]

    Returns
    -------
    numpy.ndarray
        Standard deviation along the track. [m]

    References
    ----------
    .. [1] Distance across the track times the angle that it is turned by.

    Examples
    --------
    >>> round(float(along_heading(100.0, 60.0, 0.1)), 4)
    0.3023
    """
    return vertical_roll(height, beam_angle, heading_sigma)


def along_latency(speed: ArrayLike, latency_sigma: ArrayLike) -> FloatArray:
    """Error along the track from the timing between positions and pings.

    Parameters
    ----------
    speed : array_like
        Speed over the ground. [m/s]
    latency_sigma : array_like
        Standard deviation of the timing. [s]

    Returns
    -------
    numpy.ndarray
        Standard deviation along the track. [m]

    Examples
    --------
    >>> float(along_latency(4.0, 0.05))
    0.2
    """
    speed, sigma = floats(speed, latency_sigma)
    error: FloatArray = np.abs(speed * sigma)
    return error


def uncertainty_95(sigma: ArrayLike) -> FloatArray:
    """Uncertainty at 95 % in one dimension.

    Parameters
    ----------
    sigma : array_like
        Standard deviation. [m]

    Returns
    -------
    numpy.ndarray
        Half-width of the interval that holds 95 % of errors. [m]

    References
    ----------
    .. [1] IHO S-44, Edition 6.1.0, §2.7.

    Examples
    --------
    >>> round(float(uncertainty_95(0.1)), 9)
    0.196
    """
    (sigma,) = floats(sigma)
    return COVERAGE_ONE_DIMENSION * sigma


def sigma_from_95(uncertainty: ArrayLike) -> FloatArray:
    """Standard deviation from an uncertainty at 95 % in one dimension.

    Parameters
    ----------
    uncertainty : array_like
        Half-width of the interval that holds 95 % of errors. [m]

    Returns
    -------
    numpy.ndarray
        Standard deviation. [m]

    References
    ----------
    .. [1] IHO S-44, Edition 6.1.0, §2.7.

    Examples
    --------
    >>> round(float(sigma_from_95(0.196)), 9)
    0.1
    """
    (uncertainty,) = floats(uncertainty)
    return uncertainty / COVERAGE_ONE_DIMENSION


def horizontal_95(sigma_along: ArrayLike, sigma_across: ArrayLike) -> FloatArray:
    """Uncertainty of a position at 95 %.

    Parameters
    ----------
    sigma_along, sigma_across : array_like
        Standard deviations along two directions at right angles. [m]

    Returns
    -------
    numpy.ndarray
        Radius that holds 95 % of errors; exact for equal axes. [m]

    References
    ----------
    .. [1] IHO S-44, Edition 6.1.0, §2.7; for unequal axes the mean of the squares is derived.

    Examples
    --------
    >>> round(float(horizontal_95(1.0, 1.0)), 9)
    2.45
    """
    along, across = floats(sigma_along, sigma_across)
    radius: FloatArray = COVERAGE_TWO_DIMENSIONS * np.sqrt(0.5 * (along * along + across * across))
    return radius


def vertical_terms(
    height: ArrayLike,
    beam_angle: ArrayLike,
    sound_speed: ArrayLike,
    *,
    gradient_sigma: ArrayLike = 0.0,
    sound_speed_sigma: ArrayLike = 0.0,
    surface_sound_speed_sigma: ArrayLike = 0.0,
    roll_sigma: ArrayLike = 0.0,
    pitch_sigma: ArrayLike = 0.0,
    heave_sigma: ArrayLike = 0.0,
    draught_sigma: ArrayLike = 0.0,
    settlement_sigma: ArrayLike = 0.0,
    squat_sigma: ArrayLike = 0.0,
    tide_sigma: ArrayLike = 0.0,
    cotidal_sigma: ArrayLike = 0.0,
    range_sigma: ArrayLike = 0.0,
    beam_angle_sigma: ArrayLike = 0.0,
    pitch: ArrayLike = 0.0,
    steering_angle: ArrayLike | None = None,
) -> dict[str, FloatArray]:
    """Every term of the depth's uncertainty by itself.

    Parameters
    ----------
    height : array_like
        Height of the transducer over the seabed. [m]
    beam_angle : array_like
        Angle of the beam from the vertical. [deg]
    sound_speed : array_like
        Sound speed at the transducer. [m/s]
    gradient_sigma : array_like, optional
        Of the cast's gradient. [1/s]
    sound_speed_sigma, surface_sound_speed_sigma : array_like, optional
        Of the mean sound speed and of that at the array. [m/s]
    roll_sigma, pitch_sigma, beam_angle_sigma : array_like, optional
        Of roll, pitch and the detected angle. [deg]
    heave_sigma, draught_sigma, settlement_sigma, squat_sigma : array_like, optional
        Of the transducer's height. [m]
    tide_sigma, cotidal_sigma, range_sigma : array_like, optional
        Of the tide, of carrying it over, and of the detected range. [m]
    pitch : array_like, optional
        Pitch, positive bow up. [deg]
    steering_angle : array_like, optional
        Angle of the beam from the array's own normal, if that is not the vertical. [deg]

    Returns
    -------
    dict of str to numpy.ndarray
        Standard deviation of depth that each term brings, by the term's name. [m]

    References
    ----------
    .. [1] IHO C-13, eqs. 3.70 to 3.84.

    Examples
    --------
    >>> terms = vertical_terms(30.0, 0.0, 1500.0, sound_speed_sigma=5.0, heave_sigma=0.05)
    >>> {name: float(sigma) for name, sigma in terms.items() if sigma > 0}
    {'mean sound speed': 0.1, 'heave': 0.05}
    """
    return {
        "sound speed gradient": vertical_profile_gradient(
            height, beam_angle, sound_speed, gradient_sigma
        ),
        "mean sound speed": vertical_profile_speed(height, sound_speed, sound_speed_sigma),
        "surface sound speed": vertical_surface_speed(
            height, beam_angle, sound_speed, surface_sound_speed_sigma, steering_angle
        ),
        "roll": vertical_roll(height, beam_angle, roll_sigma, pitch),
        "pitch": vertical_pitch(height, pitch, pitch_sigma),
        "heave": vertical_heave(heave_sigma),
        "draught": vertical_draught(draught_sigma, settlement_sigma, squat_sigma),
        "tide": vertical_tide(tide_sigma, cotidal_sigma),
        "detected range": vertical_range(beam_angle, range_sigma),
        "detected angle": vertical_beam_angle(height, beam_angle, beam_angle_sigma),
    }


def vertical_uncertainty(
    height: ArrayLike,
    beam_angle: ArrayLike,
    sound_speed: ArrayLike,
    gradient_sigma: ArrayLike = 0.0,
    sound_speed_sigma: ArrayLike = 0.0,
    surface_sound_speed_sigma: ArrayLike = 0.0,
    roll_sigma: ArrayLike = 0.0,
    pitch_sigma: ArrayLike = 0.0,
    heave_sigma: ArrayLike = 0.0,
    draught_sigma: ArrayLike = 0.0,
    settlement_sigma: ArrayLike = 0.0,
    squat_sigma: ArrayLike = 0.0,
    tide_sigma: ArrayLike = 0.0,
    cotidal_sigma: ArrayLike = 0.0,
    range_sigma: ArrayLike = 0.0,
    beam_angle_sigma: ArrayLike = 0.0,
    pitch: ArrayLike = 0.0,
) -> FloatArray:
    """Total uncertainty of a reduced depth at 95 %.

    Parameters
    ----------
    height : array_like
        Height of the transducer over the seabed. [m]
    beam_angle : array_like
        Angle of the beam from the vertical. [deg]
    sound_speed : array_like
        Sound speed at the transducer. [m/s]
    gradient_sigma : array_like, optional
        Of the cast's gradient. [1/s]
    sound_speed_sigma, surface_sound_speed_sigma : array_like, optional
        Of the mean sound speed and of that at the array. [m/s]
    roll_sigma, pitch_sigma, beam_angle_sigma : array_like, optional
        Of roll, pitch and the detected angle. [deg]
    heave_sigma, draught_sigma, settlement_sigma, squat_sigma : array_like, optional
        Of the transducer's height. [m]
    tide_sigma, cotidal_sigma, range_sigma : array_like, optional
        Of the tide, of carrying it over, and of the detected range. [m]
    pitch : array_like, optional
        Pitch, positive bow up. [deg]

    Returns
    -------
    numpy.ndarray
        Half-width of the interval that holds 95 % of errors. [m]

    See Also
    --------
    vertical_terms : the same, term by term.

    References
    ----------
    .. [1] IHO C-13, eq. 3.84; IHO S-44, Edition 6.1.0, §2.7.

    Examples
    --------
    >>> round(float(vertical_uncertainty(30.0, 0.0, 1500.0, sound_speed_sigma=5.0)), 3)
    0.196
    """
    terms = vertical_terms(
        height,
        beam_angle,
        sound_speed,
        gradient_sigma=gradient_sigma,
        sound_speed_sigma=sound_speed_sigma,
        surface_sound_speed_sigma=surface_sound_speed_sigma,
        roll_sigma=roll_sigma,
        pitch_sigma=pitch_sigma,
        heave_sigma=heave_sigma,
        draught_sigma=draught_sigma,
        settlement_sigma=settlement_sigma,
        squat_sigma=squat_sigma,
        tide_sigma=tide_sigma,
        cotidal_sigma=cotidal_sigma,
        range_sigma=range_sigma,
        beam_angle_sigma=beam_angle_sigma,
        pitch=pitch,
    )
    return uncertainty_95(combined(*terms.values()))


@dataclass(frozen=True, slots=True)
class HorizontalTerms:
    """Standard deviations of a sounding's position, term by term. [m]"""

    along: dict[str, FloatArray]
    across: dict[str, FloatArray]


def horizontal_terms(
    height: ArrayLike,
    beam_angle: ArrayLike,
    sound_speed: ArrayLike,
    *,
    position_sigma: ArrayLike = 0.0,
    gradient_sigma: ArrayLike = 0.0,
    sound_speed_sigma: ArrayLike = 0.0,
    surface_sound_speed_sigma: ArrayLike = 0.0,
    roll_sigma: ArrayLike = 0.0,
    pitch_sigma: ArrayLike = 0.0,
    heading_sigma: ArrayLike = 0.0,
    range_sigma: ArrayLike = 0.0,
    beam_angle_sigma: ArrayLike = 0.0,
    latency_sigma: ArrayLike = 0.0,
    arm_sigma: ArrayLike = 0.0,
    speed: ArrayLike = 0.0,
    steering_angle: ArrayLike | None = None,
) -> HorizontalTerms:
    """Every term of the uncertainty of a sounding's position by itself.

    Parameters
    ----------
    height : array_like
        Height of the transducer over the seabed. [m]
    beam_angle : array_like
        Angle of the beam from the vertical. [deg]
    sound_speed : array_like
        Sound speed at the transducer. [m/s]
    position_sigma : array_like, optional
        Of the antenna's position, along each axis. [m]
    gradient_sigma : array_like, optional
        Of the cast's gradient. [1/s]
    sound_speed_sigma, surface_sound_speed_sigma : array_like, optional
        Of the mean sound speed and of that at the array. [m/s]
    roll_sigma, pitch_sigma, heading_sigma, beam_angle_sigma : array_like, optional
        Of roll, pitch, heading and the detected angle. [deg]
    range_sigma : array_like, optional
        Of the detected range. [m]
    latency_sigma : array_like, optional
        Of the timing between positions and pings. [s]
    arm_sigma : array_like, optional
        Of the arm from antenna to transducer, along each axis. [m]
    speed : array_like, optional
        Speed over the ground. [m/s]
    steering_angle : array_like, optional
        Angle of the beam from the array's own normal, if that is not the vertical. [deg]

    Returns
    -------
    HorizontalTerms
        Standard deviations along and across the track, by the term's name. [m]

    References
    ----------
    .. [1] Counterpart of IHO C-13, eqs. 3.70 to 3.84, derived from the same geometry.

    Examples
    --------
    >>> terms = horizontal_terms(100.0, 45.0, 1500.0, position_sigma=0.5, heading_sigma=0.1)
    >>> round(float(terms.along["heading"]), 3), float(terms.across["position"])
    (0.175, 0.5)
    """
    steering = beam_angle if steering_angle is None else steering_angle
    (position, arm) = floats(position_sigma, arm_sigma)
    return HorizontalTerms(
        along={
            "position": position,
            "lever arm": arm,
            "pitch": along_pitch(height, pitch_sigma),
            "heading": along_heading(height, beam_angle, heading_sigma),
            "timing": along_latency(speed, latency_sigma),
        },
        across={
            "position": position,
            "lever arm": arm,
            "sound speed gradient": across_profile_gradient(
                height, beam_angle, sound_speed, gradient_sigma
            ),
            "mean sound speed": across_profile_speed(
                height, beam_angle, sound_speed, sound_speed_sigma
            ),
            "surface sound speed": across_surface_speed(
                height, steering, sound_speed, surface_sound_speed_sigma
            ),
            "roll": across_roll(height, roll_sigma),
            "detected range": across_range(beam_angle, range_sigma),
            "detected angle": across_roll(height, beam_angle_sigma),
        },
    )


def horizontal_uncertainty(
    height: ArrayLike,
    beam_angle: ArrayLike,
    sound_speed: ArrayLike,
    position_sigma: ArrayLike = 0.0,
    gradient_sigma: ArrayLike = 0.0,
    sound_speed_sigma: ArrayLike = 0.0,
    surface_sound_speed_sigma: ArrayLike = 0.0,
    roll_sigma: ArrayLike = 0.0,
    pitch_sigma: ArrayLike = 0.0,
    heading_sigma: ArrayLike = 0.0,
    range_sigma: ArrayLike = 0.0,
    beam_angle_sigma: ArrayLike = 0.0,
    latency_sigma: ArrayLike = 0.0,
    arm_sigma: ArrayLike = 0.0,
    speed: ArrayLike = 0.0,
) -> FloatArray:
    """Total uncertainty of a sounding's position at 95 %.

    Parameters
    ----------
    height : array_like
        Height of the transducer over the seabed. [m]
    beam_angle : array_like
        Angle of the beam from the vertical. [deg]
    sound_speed : array_like
        Sound speed at the transducer. [m/s]
    position_sigma : array_like, optional
        Of the antenna's position, along each axis. [m]
    gradient_sigma : array_like, optional
        Of the cast's gradient. [1/s]
    sound_speed_sigma, surface_sound_speed_sigma : array_like, optional
        Of the mean sound speed and of that at the array. [m/s]
    roll_sigma, pitch_sigma, heading_sigma, beam_angle_sigma : array_like, optional
        Of roll, pitch, heading and the detected angle. [deg]
    range_sigma : array_like, optional
        Of the detected range. [m]
    latency_sigma : array_like, optional
        Of the timing between positions and pings. [s]
    arm_sigma : array_like, optional
        Of the arm from antenna to transducer, along each axis. [m]
    speed : array_like, optional
        Speed over the ground. [m/s]

    Returns
    -------
    numpy.ndarray
        Radius that holds 95 % of errors. [m]

    See Also
    --------
    horizontal_terms : the same, term by term.

    References
    ----------
    .. [1] IHO S-44, Edition 6.1.0, §2.7.

    Examples
    --------
    >>> round(float(horizontal_uncertainty(100.0, 0.0, 1500.0, position_sigma=1.0)), 3)
    2.45
    """
    terms = horizontal_terms(
        height,
        beam_angle,
        sound_speed,
        position_sigma=position_sigma,
        gradient_sigma=gradient_sigma,
        sound_speed_sigma=sound_speed_sigma,
        surface_sound_speed_sigma=surface_sound_speed_sigma,
        roll_sigma=roll_sigma,
        pitch_sigma=pitch_sigma,
        heading_sigma=heading_sigma,
        range_sigma=range_sigma,
        beam_angle_sigma=beam_angle_sigma,
        latency_sigma=latency_sigma,
        arm_sigma=arm_sigma,
        speed=speed,
    )
    return horizontal_95(combined(*terms.along.values()), combined(*terms.across.values()))


def tvu(a: ArrayLike, b: ArrayLike, depth: ArrayLike) -> FloatArray:
    """Greatest vertical uncertainty that S-44 allows, at 95 %.

    Parameters
    ----------
    a : array_like
        Part that does not change with depth. [m]
    b : array_like
        Part that does, per metre of depth. [1]
    depth : array_like
        Depth. [m]

    Returns
    -------
    numpy.ndarray
        Total vertical uncertainty allowed. [m]

    References
    ----------
    .. [1] IHO S-44, Edition 6.1.0, §3.2.3 and Table 1.

    Examples
    --------
    >>> round(float(tvu(0.5, 0.013, 30.0)), 3)
    0.634
    """
    a, b, depth = floats(a, b, depth)
    return combined(a, b * depth)


def thu(a: ArrayLike, b: ArrayLike, depth: ArrayLike) -> FloatArray:
    """Greatest horizontal uncertainty that S-44 allows, at 95 %.

    Parameters
    ----------
    a : array_like
        Part that does not change with depth. [m]
    b : array_like
        Part that does, per metre of depth. [1]
    depth : array_like
        Depth. [m]

    Returns
    -------
    numpy.ndarray
        Total horizontal uncertainty allowed. [m]

    References
    ----------
    .. [1] IHO S-44, Edition 6.1.0, Table 1.

    Examples
    --------
    >>> float(thu(5.0, 0.05, 40.0))
    7.0
    """
    a, b, depth = floats(a, b, depth)
    return a + b * depth


@dataclass(frozen=True, slots=True)
class Order:
    """What S-44 asks of one order of survey.

    Attributes
    ----------
    tvu_a, thu_a : float
        Parts of the uncertainties that do not change with depth. [m]
    tvu_b, thu_b : float
        Parts that do, per metre of depth. [1]
    feature : float
        Side of the smallest cube to be found, NaN where none is stated. [m]
    feature_share : float
        Share of depth that takes its place in deeper water, zero where none does. [1]
    feature_depth : float
        Depth down to which the fixed size holds. [m]
    """

    tvu_a: float
    tvu_b: float
    thu_a: float
    thu_b: float
    feature: float
    feature_share: float = 0.0
    feature_depth: float = math.inf


S44_ORDERS = MappingProxyType(
    {
        "exclusive": Order(0.15, 0.0075, 1.0, 0.0, 0.5),
        "special": Order(0.25, 0.0075, 2.0, 0.0, 1.0),
        "1a": Order(0.5, 0.013, 5.0, 0.05, 2.0, 0.10, 40.0),
        "1b": Order(0.5, 0.013, 5.0, 0.05, math.nan),
        "2": Order(1.0, 0.023, 20.0, 0.10, math.nan),
    }
)
"""IHO S-44, Edition 6.1.0, Table 1."""


def s44_tvu(order: str, depth: ArrayLike) -> FloatArray:
    """Greatest vertical uncertainty that an order of S-44 allows, at 95 %.

    Parameters
    ----------
    order : str
        "exclusive", "special", "1a", "1b" or "2".
    depth : array_like
        Depth. [m]

    Returns
    -------
    numpy.ndarray
        Total vertical uncertainty allowed. [m]

    Raises
    ------
    ValueError
        If there is no such order.

    References
    ----------
    .. [1] IHO S-44, Edition 6.1.0, Table 1.

    Examples
    --------
    >>> round(float(s44_tvu("1a", 37.0)), 3)
    0.694
    """
    limits = _order(order)
    return tvu(limits.tvu_a, limits.tvu_b, depth)


def s44_thu(order: str, depth: ArrayLike) -> FloatArray:
    """Greatest horizontal uncertainty that an order of S-44 allows, at 95 %.

    Parameters
    ----------
    order : str
        "exclusive", "special", "1a", "1b" or "2".
    depth : array_like
        Depth. [m]

    Returns
    -------
    numpy.ndarray
        Total horizontal uncertainty allowed. [m]

    Raises
    ------
    ValueError
        If there is no such order.

    References
    ----------
    .. [1] IHO S-44, Edition 6.1.0, Table 1.

    Examples
    --------
    >>> round(float(s44_thu("1a", 37.0)), 3)
    6.85
    """
    limits = _order(order)
    return thu(limits.thu_a, limits.thu_b, depth)


def s44_feature_size(order: str, depth: ArrayLike) -> FloatArray:
    """Side of the smallest cube that an order of S-44 asks to be found.

    Parameters
    ----------
    order : str
        "exclusive", "special", "1a", "1b" or "2".
    depth : array_like
        Depth. [m]

    Returns
    -------
    numpy.ndarray
        Size; for order 1a it steps from 2 m to a tenth of the depth beyond 40 m. NaN where the
        order states none. [m]

    Raises
    ------
    ValueError
        If there is no such order.

    References
    ----------
    .. [1] IHO S-44, Edition 6.1.0, Table 1.

    Examples
    --------
    >>> s44_feature_size("1a", [10.0, 40.0, 40.1, 100.0])
    array([ 2.  ,  2.  ,  4.01, 10.  ])
    """
    limits = _order(order)
    (depth,) = floats(depth)
    size = chosen(depth <= limits.feature_depth, limits.feature, limits.feature_share * depth)
    return size + 0.0 * depth


def _order(order: str) -> Order:
    try:
        return S44_ORDERS[order]
    except KeyError:
        known = ", ".join(S44_ORDERS)
        raise ValueError(f"no S-44 order {order!r}: the orders are {known}") from None
