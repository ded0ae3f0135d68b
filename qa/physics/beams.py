"""What a beam covers: angles, widths, footprints, swaths, and how near is too near.

The seabed is flat unless a slope is given; height is that of the transducer over the seabed;
beam angles are from the vertical, positive to starboard; roll is positive starboard side down.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import ArrayLike

from qa.physics.arrays import BoolArray, FloatArray, chosen, floats

_RADIANS = math.pi / 180.0

# Half-power points: of sin(u)/u at u = 1.391557, of 2 J1(u)/u at u = 1.616340; over pi.
_LINE_HALF_POWER = 0.4429465
_CIRCLE_HALF_POWER = 0.5144970


def slant_range_from_height(height: ArrayLike, beam_angle: ArrayLike) -> FloatArray:
    """Range along a beam to a flat seabed.

    Parameters
    ----------
    height : array_like
        Height of the transducer over the seabed. [m]
    beam_angle : array_like
        Angle of the beam from the vertical. [deg]

    Returns
    -------
    numpy.ndarray
        Slant range; NaN for a beam that does not point down (90 degrees or more). [m]

    References
    ----------
    .. [1] IHO C-13, §3.3, geometry of eq. 3.37.

    Examples
    --------
    >>> round(float(slant_range_from_height(10.0, 60.0)), 9)
    20.0
    """
    height, beam_angle = floats(height, beam_angle)
    with np.errstate(divide="ignore", invalid="ignore"):
        slant_range = height / np.cos(_RADIANS * beam_angle)
    return chosen(np.abs(beam_angle) < 90.0, slant_range, np.nan)


def height_from_range(slant_range: ArrayLike, beam_angle: ArrayLike) -> FloatArray:
    """Height of the transducer over the place that a beam reached.

    Parameters
    ----------
    slant_range : array_like
        Range along the beam. [m]
    beam_angle : array_like
        Angle of the beam from the vertical. [deg]

    Returns
    -------
    numpy.ndarray
        Height; NaN for a beam that does not point down (90 degrees or more). [m]

    Examples
    --------
    >>> round(float(height_from_range(20.0, -60.0)), 9)
    10.0
    """
    slant_range, beam_angle = floats(slant_range, beam_angle)
    with np.errstate(invalid="ignore"):
        height = slant_range * np.cos(_RADIANS * beam_angle)
    return chosen(np.abs(beam_angle) < 90.0, height, np.nan)


def across_distance(height: ArrayLike, beam_angle: ArrayLike) -> FloatArray:
    """Distance across the track, on a flat seabed, from under the transducer to a beam.

    Parameters
    ----------
    height : array_like
        Height of the transducer over the seabed. [m]
    beam_angle : array_like
        Angle of the beam from the vertical. [deg]

    Returns
    -------
    numpy.ndarray
        Distance, positive to starboard; NaN for a beam that does not point down. [m]

    Examples
    --------
    >>> round(float(across_distance(10.0, -45.0)), 9)
    -10.0
    """
    height, beam_angle = floats(height, beam_angle)
    with np.errstate(invalid="ignore"):
        across = height * np.tan(_RADIANS * beam_angle)
    return chosen(np.abs(beam_angle) < 90.0, across, np.nan)


def beam_angle_from_range(slant_range: ArrayLike, height: ArrayLike) -> FloatArray:
    """Angle from the vertical at which a range meets a flat seabed.

    Parameters
    ----------
    slant_range : array_like
        Range. [m]
    height : array_like
        Height of the transducer over the seabed. [m]

    Returns
    -------
    numpy.ndarray
        Angle from the vertical, 0 to 90; NaN where the range does not reach the seabed. [deg]

    Examples
    --------
    >>> round(float(beam_angle_from_range(20.0, 10.0)), 9)
    60.0
    """
    slant_range, height = floats(slant_range, height)
    with np.errstate(divide="ignore", invalid="ignore"):
        angle: FloatArray = np.arccos(height / slant_range) / _RADIANS
    return angle


def array_angle(beam_angle: ArrayLike, roll: ArrayLike) -> FloatArray:
    """Angle of a beam from the ship's own downward axis.

    Parameters
    ----------
    beam_angle : array_like
        Angle of the beam from the vertical. [deg]
    roll : array_like
        Roll, positive starboard side down. [deg]

    Returns
    -------
    numpy.ndarray
        Angle as the array sees it, positive to starboard. [deg]

    Examples
    --------
    >>> float(array_angle(10.0, 3.0))
    13.0
    """
    beam_angle, roll = floats(beam_angle, roll)
    return beam_angle + roll


def vertical_angle(array_angle: ArrayLike, roll: ArrayLike) -> FloatArray:
    """Angle of a beam from the vertical, from its angle as the array sees it.

    Parameters
    ----------
    array_angle : array_like
        Angle from the ship's own downward axis, positive to starboard. [deg]
    roll : array_like
        Roll, positive starboard side down. [deg]

    Returns
    -------
    numpy.ndarray
        Angle from the vertical: starboard going down turns a starboard beam towards it. [deg]

    Examples
    --------
    >>> float(vertical_angle(13.0, 3.0))
    10.0
    """
    array_angle, roll = floats(array_angle, roll)
    return array_angle - roll


def vertical_angle_from_horizontal(angle: ArrayLike, starboard: ArrayLike) -> FloatArray:
    """Angle of a beam from the vertical, from its depression under the horizontal.

    Parameters
    ----------
    angle : array_like
        Angle under the horizontal, 0 to 90. [deg]
    starboard : array_like of bool
        Whether the beam points to starboard.

    Returns
    -------
    numpy.ndarray
        Angle from the vertical, positive to starboard. [deg]

    Examples
    --------
    >>> vertical_angle_from_horizontal(30.0, [True, False])
    array([ 60., -60.])
    """
    (angle,) = floats(angle)
    return chosen(np.asarray(starboard, dtype=bool), 90.0 - angle, angle - 90.0)


def steered_beamwidth(
    beamwidth: ArrayLike, array_angle: ArrayLike, mount_angle: ArrayLike = 0.0
) -> FloatArray:
    """Width of a beam that a flat array steers away from its own normal.

    Parameters
    ----------
    beamwidth : array_like
        Beam width at half power, unsteered. [deg]
    array_angle : array_like
        Angle of the beam from the ship's own downward axis, positive to starboard. [deg]
    mount_angle : array_like, optional
        Angle of the array's normal from the same axis, positive to starboard. [deg]

    Returns
    -------
    numpy.ndarray
        Beam width, grown by the inverse cosine of the steering angle; NaN where that angle is 90
        degrees or more. [deg]

    References
    ----------
    .. [1] IHO C-13, eq. 3.33. Counting from the array's own normal is derived.

    Examples
    --------
    >>> round(float(steered_beamwidth(1.0, 60.0)), 9)
    2.0
    >>> round(float(steered_beamwidth(1.0, 60.0, 30.0)), 4)
    1.1547
    """
    beamwidth, array_angle, mount_angle = floats(beamwidth, array_angle, mount_angle)
    steering = array_angle - mount_angle
    with np.errstate(divide="ignore", invalid="ignore"):
        width = beamwidth / np.cos(_RADIANS * steering)
    return chosen(np.abs(steering) < 90.0, width, np.nan)


def footprint_along(slant_range: ArrayLike, beamwidth_along: ArrayLike) -> FloatArray:
    """Length of seabed along the track that one beam covers.

    Parameters
    ----------
    slant_range : array_like
        Range along the beam. [m]
    beamwidth_along : array_like
        Transmitted beam width along the track, at half power. [deg]

    Returns
    -------
    numpy.ndarray
        Length along the track. [m]

    References
    ----------
    .. [1] IHO C-13, eqs. 3.34 and 3.37.

    Examples
    --------
    >>> round(float(footprint_along(100.0, 1.0)), 4)
    1.7454
    """
    slant_range, beamwidth_along = floats(slant_range, beamwidth_along)
    length: FloatArray = slant_range * (2.0 * np.tan((0.5 * _RADIANS) * beamwidth_along))
    return length


def footprint_across(
    height: ArrayLike, beam_angle: ArrayLike, beamwidth_across: ArrayLike
) -> FloatArray:
    """Length of flat seabed across the track that one beam covers, exactly.

    Parameters
    ----------
    height : array_like
        Height of the transducer over the seabed. [m]
    beam_angle : array_like
        Angle of the beam from the vertical. [deg]
    beamwidth_across : array_like
        Received beam width across the track, at half power, as steered. [deg]

    Returns
    -------
    numpy.ndarray
        Distance between the places where the two edges of the beam meet the seabed; infinite
        when the outer edge does not come down, NaN when the beam itself does not. [m]

    Notes
    -----
    The difference of the tangents of both edges, written without a difference of large numbers:
    height times the sine of the width, over the product of the edges' cosines.

    References
    ----------
    .. [1] Geometry; for narrow beams it becomes IHO C-13, eq. 3.35.

    Examples
    --------
    >>> round(float(footprint_across(100.0, 60.0, 1.0)), 4)
    6.9831
    >>> float(footprint_across(100.0, 89.8, 1.0))
    inf
    """
    height, beam_angle, beamwidth_across = floats(height, beam_angle, beamwidth_across)
    cosine = np.cos(_RADIANS * beam_angle)
    half_sine = np.sin((0.5 * _RADIANS) * beamwidth_across)
    edges = cosine * cosine - half_sine * half_sine
    with np.errstate(divide="ignore", invalid="ignore"):
        footprint: FloatArray = height * (np.sin(_RADIANS * beamwidth_across) / edges)
    # The whole pass costs time on large batches, and nearly all batches hold ordinary beams only.
    if np.any(~(edges > 1e-12)):
        outer_edge = np.abs(beam_angle) + 0.5 * beamwidth_across
        footprint = chosen(outer_edge < 90.0, footprint, height * np.inf)
    if np.any(~(np.abs(beam_angle) < 90.0)):
        footprint = chosen(np.abs(beam_angle) < 90.0, footprint, np.nan)
    if np.any(np.isnan(beamwidth_across)):
        footprint = footprint + 0.0 * beamwidth_across
    return footprint


def footprint_across_handbook(
    height: ArrayLike, beam_angle: ArrayLike, beamwidth_across: ArrayLike
) -> FloatArray:
    """Length of flat seabed across the track that one beam covers, in the handbook's form.

    Parameters
    ----------
    height : array_like
        Height of the transducer over the seabed. [m]
    beam_angle : array_like
        Angle of the beam from the vertical. [deg]
    beamwidth_across : array_like
        Received beam width across the track, at half power. [deg]

    Returns
    -------
    numpy.ndarray
        Length across the track; NaN when the beam does not come down. [m]

    Notes
    -----
    For narrow beams away from the horizontal; otherwise use `footprint_across`.

    References
    ----------
    .. [1] IHO C-13, eq. 3.35.

    Examples
    --------
    >>> round(float(footprint_across_handbook(100.0, 60.0, 1.0)), 4)
    6.9815
    """
    return footprint_across_on_slope(height, beam_angle, beamwidth_across, 0.0)


def footprint_across_on_slope(
    height: ArrayLike, beam_angle: ArrayLike, beamwidth_across: ArrayLike, slope: ArrayLike
) -> FloatArray:
    """Length across the track that one beam covers on a sloping seabed.

    Parameters
    ----------
    height : array_like
        Height of the transducer over the place where the beam meets the seabed. [m]
    beam_angle : array_like
        Angle of the beam from the vertical. [deg]
    beamwidth_across : array_like
        Received beam width across the track, at half power. [deg]
    slope : array_like
        Slope of the seabed across the track, positive where it faces the beams of positive
        angle (the seabed rises to starboard). [deg]

    Returns
    -------
    numpy.ndarray
        Length along the slope; NaN when the beam does not come down or runs along or behind the
        slope. [m]

    References
    ----------
    .. [1] IHO C-13, eq. 3.36.

    Examples
    --------
    >>> round(float(footprint_across_on_slope(100.0, 60.0, 1.0, 60.0)), 4)
    3.4907
    """
    height, beam_angle, beamwidth_across, slope = floats(
        height, beam_angle, beamwidth_across, slope
    )
    incidence = beam_angle - slope
    with np.errstate(divide="ignore", invalid="ignore"):
        footprint = (
            2.0
            * height
            * np.tan((0.5 * _RADIANS) * beamwidth_across)
            / (np.cos(_RADIANS * beam_angle) * np.cos(_RADIANS * incidence))
        )
    meets = (np.abs(beam_angle) < 90.0) & (np.abs(incidence) < 90.0)
    return chosen(meets, footprint, np.nan)


def pulse_limited_across(
    slant_range: ArrayLike, height: ArrayLike, range_resolution: ArrayLike
) -> FloatArray:
    """Length of flat seabed across the track that echoes within one range resolution.

    Parameters
    ----------
    slant_range : array_like
        Range to the near edge. [m]
    height : array_like
        Height of the transducer over the seabed. [m]
    range_resolution : array_like
        Range resolution of the pulse. [m]

    Returns
    -------
    numpy.ndarray
        Length across the track, one side; NaN where the range does not reach the seabed. [m]

    Notes
    -----
    Far from the nadir it tends to the range resolution over the sine of the beam angle.

    References
    ----------
    .. [1] Geometry of a flat seabed; its limit is that of IHO C-13, eq. 3.16.

    Examples
    --------
    >>> round(float(pulse_limited_across(20.0, 10.0, 0.1)), 4)
    0.1154
    """
    slant_range, height, range_resolution = floats(slant_range, height, range_resolution)
    outer = slant_range + range_resolution
    with np.errstate(invalid="ignore", divide="ignore"):
        near_edge = np.sqrt((slant_range - height) * (slant_range + height))
        far_edge = np.sqrt((outer - height) * (outer + height))
        # A quotient in place of the difference of two nearly equal lengths.
        length = range_resolution * (slant_range + outer) / (near_edge + far_edge)
    # No pulse at all covers nothing, at the nadir too, where the quotient is 0/0.
    nothing = (range_resolution == 0.0) & (slant_range >= height)
    return chosen(nothing, 0.0, length)


def pulse_limited_nadir(height: ArrayLike, range_resolution: ArrayLike) -> FloatArray:
    """Width of the patch under the transducer that echoes within one range resolution.

    Parameters
    ----------
    height : array_like
        Height of the transducer over the seabed. [m]
    range_resolution : array_like
        Range resolution of the pulse. [m]

    Returns
    -------
    numpy.ndarray
        Width of the patch, both sides together. [m]

    References
    ----------
    .. [1] Geometry of a flat seabed.

    Examples
    --------
    >>> round(float(pulse_limited_nadir(10.0, 0.1)), 4)
    2.8355
    """
    height, range_resolution = floats(height, range_resolution)
    width: FloatArray = 2.0 * np.sqrt(range_resolution * (2.0 * height + range_resolution))
    return width


def pulse_limited_in_beam(
    slant_range: ArrayLike,
    height: ArrayLike,
    range_resolution: ArrayLike,
    beam_angle: ArrayLike,
    beamwidth_across: ArrayLike,
) -> FloatArray:
    """Length across the track that echoes within one range resolution, nadir included.

    Parameters
    ----------
    slant_range : array_like
        Range to the near edge. [m]
    height : array_like
        Height of the transducer over the seabed. [m]
    range_resolution : array_like
        Range resolution of the pulse. [m]
    beam_angle : array_like
        Angle of the beam from the vertical. [deg]
    beamwidth_across : array_like
        Beam width across the track. [deg]

    Returns
    -------
    numpy.ndarray
        Both sides of the patch under the transducer where the beam holds the nadir, else one
        side. [m]

    Examples
    --------
    >>> round(float(pulse_limited_in_beam(10.0, 10.0, 0.1, 0.0, 40.0)), 4)
    2.8355
    """
    beam_angle, beamwidth_across = floats(beam_angle, beamwidth_across)
    one_side = pulse_limited_across(slant_range, height, range_resolution)
    both_sides = pulse_limited_nadir(height, range_resolution) + 0.0 * one_side
    at_nadir = np.abs(beam_angle) <= 0.5 * beamwidth_across
    known = ~(np.isnan(beam_angle) | np.isnan(beamwidth_across))
    return chosen(known, chosen(at_nadir, both_sides, one_side), np.nan)


def swath_width(height: ArrayLike, swath_angle: ArrayLike) -> FloatArray:
    """Width of flat seabed under a fan that opens evenly to both sides.

    Parameters
    ----------
    height : array_like
        Height of the transducer over the seabed. [m]
    swath_angle : array_like
        Angle between the outermost beams. [deg]

    Returns
    -------
    numpy.ndarray
        Swath width; NaN for 180 degrees or more. [m]

    References
    ----------
    .. [1] IHO C-13, eq. 3.38.

    Examples
    --------
    >>> round(float(swath_width(10.0, 90.0)), 9)
    20.0
    """
    (swath_angle,) = floats(swath_angle)
    half = 0.5 * swath_angle
    return swath_width_between(height, -half, half)


def swath_width_between(
    height: ArrayLike, port_angle: ArrayLike, starboard_angle: ArrayLike
) -> FloatArray:
    """Width of flat seabed between two beams.

    Parameters
    ----------
    height : array_like
        Height of the transducer over the seabed. [m]
    port_angle, starboard_angle : array_like
        Angles of the outermost beams from the vertical, positive to starboard. [deg]

    Returns
    -------
    numpy.ndarray
        Swath width; NaN where a beam does not come down. [m]

    References
    ----------
    .. [1] IHO C-13, eq. 3.38, for each side by itself.

    Examples
    --------
    >>> round(float(swath_width_between(10.0, -45.0, 60.0)), 4)
    27.3205
    """
    return across_distance(height, starboard_angle) - across_distance(height, port_angle)


def ground_range(slant_range: ArrayLike, height: ArrayLike) -> FloatArray:
    """Distance over a flat seabed from under the transducer to a range.

    Parameters
    ----------
    slant_range : array_like
        Slant range. [m]
    height : array_like
        Height of the transducer over the seabed. [m]

    Returns
    -------
    numpy.ndarray
        Distance, one side; NaN where the range does not reach the seabed. [m]

    Examples
    --------
    >>> float(ground_range(50.0, 30.0))
    40.0
    """
    slant_range, height = floats(slant_range, height)
    with np.errstate(invalid="ignore"):
        distance: FloatArray = np.sqrt((slant_range - height) * (slant_range + height))
    return distance


def beamwidth_line(wavelength: ArrayLike, array_length: ArrayLike) -> FloatArray:
    """Half-power beam width of an evenly driven line or rectangle, in its own plane.

    Parameters
    ----------
    wavelength : array_like
        Wavelength in water. [m]
    array_length : array_like
        Length of the array in the plane of the beam. [m]

    Returns
    -------
    numpy.ndarray
        Beam width, 180 where the array is too short to make a beam. [deg]

    Notes
    -----
    For long arrays 50.76 wavelengths over the length, in degrees.

    References
    ----------
    .. [1] Urick, Principles of Underwater Sound, 3rd ed., 1983: directivity of a line.

    Examples
    --------
    >>> round(float(beamwidth_line(0.0075, 0.3)), 3)
    1.269
    """
    wavelength, array_length = floats(wavelength, array_length)
    with np.errstate(divide="ignore"):
        sine = _LINE_HALF_POWER * wavelength / array_length
    width: FloatArray = (2.0 / _RADIANS) * np.arcsin(np.minimum(sine, 1.0))
    return width


def beamwidth_circular(wavelength: ArrayLike, diameter: ArrayLike) -> FloatArray:
    """Half-power beam width of an evenly driven circular transducer.

    Parameters
    ----------
    wavelength : array_like
        Wavelength in water. [m]
    diameter : array_like
        Diameter of the transducer. [m]

    Returns
    -------
    numpy.ndarray
        Beam width, 180 where the transducer is too small to make a beam. [deg]

    Notes
    -----
    For large transducers 58.96 wavelengths over the diameter, in degrees.

    References
    ----------
    .. [1] Urick, Principles of Underwater Sound, 3rd ed., 1983: directivity of a piston.

    Examples
    --------
    >>> round(float(beamwidth_circular(0.0075, 0.1)), 3)
    4.423
    """
    wavelength, diameter = floats(wavelength, diameter)
    with np.errstate(divide="ignore"):
        sine = _CIRCLE_HALF_POWER * wavelength / diameter
    width: FloatArray = (2.0 / _RADIANS) * np.arcsin(np.minimum(sine, 1.0))
    return width


def beamwidth_line_handbook(wavelength: ArrayLike, array_length: ArrayLike) -> FloatArray:
    """Beam width of a line or rectangle in the handbook's rounded form.

    Parameters
    ----------
    wavelength : array_like
        Wavelength in water. [m]
    array_length : array_like
        Length of the array in the plane of the beam. [m]

    Returns
    -------
    numpy.ndarray
        Beam width at half power. [deg]

    References
    ----------
    .. [1] IHO C-13, eq. 3.23.

    Examples
    --------
    >>> float(beamwidth_line_handbook(0.0075, 0.375))
    1.0
    """
    wavelength, array_length = floats(wavelength, array_length)
    return 50.0 * wavelength / array_length


def beamwidth_circular_handbook(wavelength: ArrayLike, diameter: ArrayLike) -> FloatArray:
    """Beam width of a circular transducer in the handbook's rounded form.

    Parameters
    ----------
    wavelength : array_like
        Wavelength in water. [m]
    diameter : array_like
        Diameter of the transducer. [m]

    Returns
    -------
    numpy.ndarray
        Beam width at half power. [deg]

    References
    ----------
    .. [1] IHO C-13, eq. 3.22.

    Examples
    --------
    >>> float(beamwidth_circular_handbook(0.0075, 0.15))
    3.0
    """
    wavelength, diameter = floats(wavelength, diameter)
    return 60.0 * wavelength / diameter


def beamwidth_of_steered_elements(
    wavelength: ArrayLike, elements: ArrayLike, spacing: ArrayLike, steering_angle: ArrayLike
) -> FloatArray:
    """Beam width of a steered row of elements, in the handbook's form.

    Parameters
    ----------
    wavelength : array_like
        Wavelength in water. [m]
    elements : array_like
        Number of elements. [1]
    spacing : array_like
        Distance between neighbouring elements. [m]
    steering_angle : array_like
        Angle of the beam from the array's normal. [deg]

    Returns
    -------
    numpy.ndarray
        Beam width at half power; NaN where the steering angle is 90 degrees or more. [deg]

    References
    ----------
    .. [1] IHO C-13, eq. 3.33.

    Examples
    --------
    >>> round(float(beamwidth_of_steered_elements(0.01, 101, 0.005, 60.0)), 9)
    2.0
    """
    wavelength, elements, spacing = floats(wavelength, elements, spacing)
    length = (elements - 1.0) * spacing
    return steered_beamwidth(beamwidth_line_handbook(wavelength, length), steering_angle)


def array_length_from_beamwidth(wavelength: ArrayLike, beamwidth: ArrayLike) -> FloatArray:
    """Length of the line or rectangle that makes a beam of a given width.

    Parameters
    ----------
    wavelength : array_like
        Wavelength in water. [m]
    beamwidth : array_like
        Beam width at half power. [deg]

    Returns
    -------
    numpy.ndarray
        Length of the array in the plane of the beam. [m]

    Examples
    --------
    >>> round(float(array_length_from_beamwidth(0.0075, 1.269)), 3)
    0.3
    """
    wavelength, beamwidth = floats(wavelength, beamwidth)
    with np.errstate(divide="ignore"):
        length: FloatArray = _LINE_HALF_POWER * wavelength / np.sin((0.5 * _RADIANS) * beamwidth)
    return length


def diameter_from_beamwidth(wavelength: ArrayLike, beamwidth: ArrayLike) -> FloatArray:
    """Diameter of the circular transducer that makes a beam of a given width.

    Parameters
    ----------
    wavelength : array_like
        Wavelength in water. [m]
    beamwidth : array_like
        Beam width at half power. [deg]

    Returns
    -------
    numpy.ndarray
        Diameter. [m]

    Examples
    --------
    >>> round(float(diameter_from_beamwidth(0.0075, 4.423)), 3)
    0.1
    """
    wavelength, beamwidth = floats(wavelength, beamwidth)
    with np.errstate(divide="ignore"):
        diameter: FloatArray = (
            _CIRCLE_HALF_POWER * wavelength / np.sin((0.5 * _RADIANS) * beamwidth)
        )
    return diameter


def far_field_range(array_length: ArrayLike, wavelength: ArrayLike) -> FloatArray:
    """Range from which an array's beam has its full sharpness.

    Parameters
    ----------
    array_length : array_like
        Greatest length of the array. [m]
    wavelength : array_like
        Wavelength in water. [m]

    Returns
    -------
    numpy.ndarray
        Range at which the ways from the middle and from the end of the array differ by half a
        wavelength; zero for an array shorter than a wavelength. [m]

    Notes
    -----
    About the square of the length over four wavelengths.

    References
    ----------
    .. [1] IHO C-13, eq. 3.29, solved for the range.

    Examples
    --------
    >>> round(float(far_field_range(0.5, 0.015)), 2)
    4.16
    """
    array_length, wavelength = floats(array_length, wavelength)
    with np.errstate(divide="ignore", invalid="ignore"):
        limit = 0.25 * (array_length * array_length / wavelength - wavelength)
    beyond: FloatArray = np.maximum(limit, 0.0)
    return beyond


def in_far_field(
    slant_range: ArrayLike, array_length: ArrayLike, wavelength: ArrayLike
) -> BoolArray:
    """Whether a range lies where the array's beam has its full sharpness.

    Parameters
    ----------
    slant_range : array_like
        Range along the beam. [m]
    array_length : array_like
        Greatest length of the array. [m]
    wavelength : array_like
        Wavelength in water. [m]

    Returns
    -------
    numpy.ndarray of bool
        False also where an input is NaN.

    References
    ----------
    .. [1] IHO C-13, eq. 3.29.

    Examples
    --------
    >>> in_far_field([3.0, 5.0], 0.5, 0.015)
    array([False,  True])
    """
    (slant_range,) = floats(slant_range)
    beyond: BoolArray = slant_range >= far_field_range(array_length, wavelength)
    return beyond


def footprint_unfocused(
    slant_range: ArrayLike, beamwidth: ArrayLike, array_length: ArrayLike, wavelength: ArrayLike
) -> FloatArray:
    """Footprint of an array without focusing, inside its far-field limit too.

    Parameters
    ----------
    slant_range : array_like
        Range along the beam. [m]
    beamwidth : array_like
        Beam width at half power in the plane of the array. [deg]
    array_length : array_like
        Length of the array in that plane. [m]
    wavelength : array_like
        Wavelength in water. [m]

    Returns
    -------
    numpy.ndarray
        Footprint across the beam, no smaller than the array where the range is nearer than the
        far field. [m]

    References
    ----------
    .. [1] IHO C-13, eqs. 3.29 and 3.34.

    Examples
    --------
    >>> footprint_unfocused([2.0, 100.0], 1.5, 0.5, 0.015).round(3)
    array([0.5  , 2.618])
    """
    slant_range, beamwidth, array_length, wavelength = floats(
        slant_range, beamwidth, array_length, wavelength
    )
    sharp = footprint_along(slant_range, beamwidth)
    limit = far_field_range(array_length, wavelength)
    near = slant_range < limit
    # The far-field limit is added with weight zero so that an unknown array stays unknown.
    return chosen(near, np.maximum(sharp, array_length), sharp) + 0.0 * limit


def beam_spacing_equiangular(
    height: ArrayLike, beam_angle: ArrayLike, angle_step: ArrayLike
) -> FloatArray:
    """Distance across the track between neighbouring beams of a fan with even angles.

    Parameters
    ----------
    height : array_like
        Height of the transducer over the seabed. [m]
    beam_angle : array_like
        Angle from the vertical, halfway between the two beams. [deg]
    angle_step : array_like
        Angle between neighbouring beams. [deg]

    Returns
    -------
    numpy.ndarray
        Distance over a flat seabed; infinite when the outer beam does not come down. [m]

    Examples
    --------
    >>> round(float(beam_spacing_equiangular(50.0, 60.0, 1.0)), 3)
    3.492
    """
    return footprint_across(height, beam_angle, angle_step)


def beam_spacing_equidistant(
    height: ArrayLike, swath_angle: ArrayLike, beams: ArrayLike
) -> FloatArray:
    """Distance across the track between neighbouring beams of a fan with even distances.

    Parameters
    ----------
    height : array_like
        Height of the transducer over the seabed. [m]
    swath_angle : array_like
        Angle between the outermost beams, even to both sides. [deg]
    beams : array_like
        Number of beams. [1]

    Returns
    -------
    numpy.ndarray
        Distance over a flat seabed; infinite for a single beam. [m]

    Examples
    --------
    >>> round(float(beam_spacing_equidistant(50.0, 90.0, 101)), 9)
    1.0
    """
    (beams,) = floats(beams)
    with np.errstate(divide="ignore"):
        return swath_width(height, swath_angle) / (beams - 1.0)


def beam_spacing_between(
    height: ArrayLike, beam_angle: ArrayLike, next_beam_angle: ArrayLike
) -> FloatArray:
    """Distance across the track between two beams.

    Parameters
    ----------
    height : array_like
        Height of the transducer over the seabed. [m]
    beam_angle, next_beam_angle : array_like
        Angles of the two beams from the vertical. [deg]

    Returns
    -------
    numpy.ndarray
        Distance over a flat seabed, not negative. [m]

    Examples
    --------
    >>> round(float(beam_spacing_between(10.0, 45.0, 0.0)), 9)
    10.0
    """
    between: FloatArray = np.abs(swath_width_between(height, beam_angle, next_beam_angle))
    return between


def greatest_range_for_footprint_along(
    target_size: ArrayLike, beamwidth_along: ArrayLike
) -> FloatArray:
    """Farthest range at which the footprint along the track is still as small as asked.

    Parameters
    ----------
    target_size : array_like
        Footprint asked for. [m]
    beamwidth_along : array_like
        Transmitted beam width along the track, at half power. [deg]

    Returns
    -------
    numpy.ndarray
        Slant range. [m]

    References
    ----------
    .. [1] IHO C-13, eq. 3.37, turned round.

    Examples
    --------
    >>> round(float(greatest_range_for_footprint_along(1.0, 1.0)), 2)
    57.29
    """
    target_size, beamwidth_along = floats(target_size, beamwidth_along)
    with np.errstate(divide="ignore"):
        farthest: FloatArray = target_size / (2.0 * np.tan((0.5 * _RADIANS) * beamwidth_along))
    return farthest


def greatest_depth_for_footprint_along(
    target_size: ArrayLike, beam_angle: ArrayLike, beamwidth_along: ArrayLike
) -> FloatArray:
    """Greatest height at which a beam's footprint along the track is as small as asked.

    Parameters
    ----------
    target_size : array_like
        Footprint asked for. [m]
    beam_angle : array_like
        Angle of the beam from the vertical. [deg]
    beamwidth_along : array_like
        Transmitted beam width along the track, at half power. [deg]

    Returns
    -------
    numpy.ndarray
        Height of the transducer over the seabed; NaN for a beam that does not come down. [m]

    References
    ----------
    .. [1] IHO C-13, eq. 3.37, turned round.

    Examples
    --------
    >>> round(float(greatest_depth_for_footprint_along(1.0, 60.0, 1.0)), 2)
    28.65
    """
    farthest = greatest_range_for_footprint_along(target_size, beamwidth_along)
    return height_from_range(farthest, beam_angle)


def greatest_depth_for_footprint_across(
    target_size: ArrayLike, beam_angle: ArrayLike, beamwidth_across: ArrayLike
) -> FloatArray:
    """Greatest height at which a beam's footprint across the track is as small as asked.

    Parameters
    ----------
    target_size : array_like
        Footprint asked for. [m]
    beam_angle : array_like
        Angle of the beam from the vertical. [deg]
    beamwidth_across : array_like
        Received beam width across the track, at half power, as steered. [deg]

    Returns
    -------
    numpy.ndarray
        Height of the transducer over the seabed: zero when the beam's outer edge never comes
        down, NaN when the beam itself does not. [m]

    References
    ----------
    .. [1] Geometry of `footprint_across`, which grows in proportion to the height.

    Examples
    --------
    >>> round(float(greatest_depth_for_footprint_across(1.0, 60.0, 1.0)), 2)
    14.32
    """
    (target_size,) = floats(target_size)
    with np.errstate(divide="ignore"):
        return target_size / footprint_across(1.0, beam_angle, beamwidth_across)


def greatest_depth_for_footprint(
    target_size: ArrayLike,
    beam_angle: ArrayLike,
    beamwidth_along: ArrayLike,
    beamwidth_across: ArrayLike,
) -> FloatArray:
    """Greatest height at which both sides of a beam's footprint are as small as asked.

    Parameters
    ----------
    target_size : array_like
        Footprint asked for. [m]
    beam_angle : array_like
        Angle of the beam from the vertical. [deg]
    beamwidth_along : array_like
        Transmitted beam width along the track, at half power. [deg]
    beamwidth_across : array_like
        Received beam width across the track, at half power, as steered. [deg]

    Returns
    -------
    numpy.ndarray
        Height of the transducer over the seabed. [m]

    Examples
    --------
    >>> round(float(greatest_depth_for_footprint(1.0, 0.0, 1.5, 1.0)), 2)
    38.2
    """
    both: FloatArray = np.minimum(
        greatest_depth_for_footprint_along(target_size, beam_angle, beamwidth_along),
        greatest_depth_for_footprint_across(target_size, beam_angle, beamwidth_across),
    )
    return both


def depth_error_from_slope(height: ArrayLike, slope: ArrayLike, beamwidth: ArrayLike) -> FloatArray:
    """Error in depth of a vertical beam over a slope: its nearest echo is not under it.

    Parameters
    ----------
    height : array_like
        Height of the transducer over the seabed straight below. [m]
    slope : array_like
        Slope of the seabed. [deg]
    beamwidth : array_like
        Beam width at half power. [deg]

    Returns
    -------
    numpy.ndarray
        Error in depth. [m]

    Notes
    -----
    On a slope gentler than half the beam's width the nearest point lies inside the beam; on a
    steeper one the edge of the beam sets the error.

    References
    ----------
    .. [1] IHO C-13, eq. 3.40.

    Examples
    --------
    >>> round(float(depth_error_from_slope(100.0, 10.0, 8.0)), 3)
    0.244
    """
    height, slope, beamwidth = floats(height, slope, beamwidth)
    angle = np.minimum(np.abs(slope), 0.5 * beamwidth)
    half_sine = np.sin((0.5 * _RADIANS) * angle)
    # 1/cos(a) - 1 = 2 sin(a/2)**2 / cos(a), without loss of digits for small angles.
    error: FloatArray = 2.0 * height * half_sine * half_sine / np.cos(_RADIANS * angle)
    return error


def ensonification_percent(effective_range: ArrayLike, line_spacing: ArrayLike) -> FloatArray:
    """How often, in percent, side-scan lines at a spacing sweep each piece of seabed.

    Parameters
    ----------
    effective_range : array_like
        Range to one side within which a contact would be seen. [m]
    line_spacing : array_like
        Distance between neighbouring lines. [m]

    Returns
    -------
    numpy.ndarray
        Percent: 100 is every place once, 200 every place twice. [1]

    References
    ----------
    .. [1] IHO C-13, chapter 4, §2.3.9.1.

    Examples
    --------
    >>> float(ensonification_percent(150.0, 125.0))
    240.0
    """
    effective_range, line_spacing = floats(effective_range, line_spacing)
    return 200.0 * effective_range / line_spacing


def line_overlap(range_scale: ArrayLike, line_spacing: ArrayLike) -> FloatArray:
    """By how much a side-scan line's range reaches beyond the neighbouring line.

    Parameters
    ----------
    range_scale : array_like
        Range to one side. [m]
    line_spacing : array_like
        Distance between neighbouring lines. [m]

    Returns
    -------
    numpy.ndarray
        Overlap, negative where the neighbouring line is not reached. [m]

    References
    ----------
    .. [1] IHO C-13, chapter 4, Table 4.4.

    Examples
    --------
    >>> float(line_overlap(150.0, 125.0))
    25.0
    """
    range_scale, line_spacing = floats(range_scale, line_spacing)
    return range_scale - line_spacing


def bathymetric_coverage(
    depth: ArrayLike,
    beamwidth: ArrayLike,
    line_spacing: ArrayLike,
    cross_line_spacing: ArrayLike = np.inf,
) -> FloatArray:
    """Share of the seabed that single-beam lines and cross lines measure.

    Parameters
    ----------
    depth : array_like
        Depth. [m]
    beamwidth : array_like
        Beam width at half power. [deg]
    line_spacing : array_like
        Distance between neighbouring lines. [m]
    cross_line_spacing : array_like, optional
        Distance between neighbouring cross lines; none by default. [m]

    Returns
    -------
    numpy.ndarray
        Share of the seabed, crossings counted twice; no more than one. [1]

    References
    ----------
    .. [1] IHO S-44, Edition 6.1.0, §3.5.2, the example.

    Examples
    --------
    >>> round(float(bathymetric_coverage(20.0, 8.0, 60.0, 600.0)), 3)
    0.051
    """
    depth, line_spacing, cross_line_spacing = floats(depth, line_spacing, cross_line_spacing)
    width = footprint_along(depth, beamwidth)
    share: FloatArray = np.minimum(width / line_spacing + width / cross_line_spacing, 1.0)
    return share
