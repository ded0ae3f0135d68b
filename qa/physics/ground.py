"""Where things are on the ground: distances, courses, speeds, and beams put in their place.

On the ellipsoid WGS 84, by geodesics. pyproj is loaded when first needed.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import cache
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import ArrayLike

from qa.physics.arrays import FloatArray, chosen, floats

if TYPE_CHECKING:
    from pyproj import Geod

_RADIANS = math.pi / 180.0


@cache
def _geodesics() -> Geod:
    from pyproj import Geod

    return Geod(ellps="WGS84")


@dataclass(frozen=True, slots=True)
class Leg:
    """The shortest way between two positions.

    Attributes
    ----------
    distance : numpy.ndarray
        Length. [m]
    course : numpy.ndarray
        Direction at its start, clockwise from north, 0 to 360; NaN where it has no length.
        [deg]
    """

    distance: FloatArray
    course: FloatArray


def leg(
    from_latitude: ArrayLike,
    from_longitude: ArrayLike,
    to_latitude: ArrayLike,
    to_longitude: ArrayLike,
) -> Leg:
    """Length and direction of the shortest way between two positions.

    Parameters
    ----------
    from_latitude, from_longitude : array_like
        Where it starts, WGS 84. [deg]
    to_latitude, to_longitude : array_like
        Where it ends, WGS 84. [deg]

    Returns
    -------
    Leg
        Distance and course; NaN where a position is.

    References
    ----------
    .. [1] Karney, J. Geodesy 87, 43-55, 2013, through the pyproj library.

    Examples
    --------
    >>> there = leg(0.0, 0.0, 0.0, 1.0)
    >>> round(float(there.distance), 3), float(there.course)
    (111319.491, 90.0)
    """
    inputs = np.broadcast_arrays(*floats(from_latitude, from_longitude, to_latitude, to_longitude))
    latitude_1, longitude_1, latitude_2, longitude_2 = (
        np.array(a, dtype=np.float64, order="C") for a in inputs
    )
    known = np.isfinite(latitude_1 + longitude_1 + latitude_2 + longitude_2)
    shape = known.shape
    east_1, north_1, east_2, north_2 = (
        np.where(known, a, 0.0).ravel() for a in (longitude_1, latitude_1, longitude_2, latitude_2)
    )
    forward, _, distance = _geodesics().inv(east_1, north_1, east_2, north_2)
    distance = np.where(known, np.asarray(distance).reshape(shape), np.nan)
    course = np.mod(np.asarray(forward).reshape(shape), 360.0)
    return Leg(distance=distance[()], course=chosen(known & (distance > 0.0), course, np.nan))


def distance(
    from_latitude: ArrayLike,
    from_longitude: ArrayLike,
    to_latitude: ArrayLike,
    to_longitude: ArrayLike,
) -> FloatArray:
    """Length of the shortest way between two positions.

    Parameters
    ----------
    from_latitude, from_longitude : array_like
        Where it starts, WGS 84. [deg]
    to_latitude, to_longitude : array_like
        Where it ends, WGS 84. [deg]

    Returns
    -------
    numpy.ndarray
        Distance. [m]

    References
    ----------
    .. [1] Karney, J. Geodesy 87, 43-55, 2013, through the pyproj library.

    Examples
    --------
    >>> round(float(distance(0.0, 0.0, 1.0, 0.0)), 3)
    110574.389
    """
    return leg(from_latitude, from_longitude, to_latitude, to_longitude).distance


def course(
    from_latitude: ArrayLike,
    from_longitude: ArrayLike,
    to_latitude: ArrayLike,
    to_longitude: ArrayLike,
) -> FloatArray:
    """Direction of the shortest way between two positions, at its start.

    Parameters
    ----------
    from_latitude, from_longitude : array_like
        Where it starts, WGS 84. [deg]
    to_latitude, to_longitude : array_like
        Where it ends, WGS 84. [deg]

    Returns
    -------
    numpy.ndarray
        Course clockwise from north, 0 to 360; NaN between equal positions. [deg]

    References
    ----------
    .. [1] Karney, J. Geodesy 87, 43-55, 2013, through the pyproj library.

    Examples
    --------
    >>> float(course(0.0, 1.0, 0.0, 0.0))
    270.0
    """
    return leg(from_latitude, from_longitude, to_latitude, to_longitude).course


def speed_over_ground(distance: ArrayLike, duration: ArrayLike) -> FloatArray:
    """Speed over a leg.

    Parameters
    ----------
    distance : array_like
        Length of the leg. [m]
    duration : array_like
        Time taken. [s]

    Returns
    -------
    numpy.ndarray
        Speed; NaN where no time passed. [m/s]

    Examples
    --------
    >>> float(speed_over_ground(20.0, 10.0))
    2.0
    """
    distance, duration = floats(distance, duration)
    with np.errstate(divide="ignore", invalid="ignore"):
        speed = distance / duration
    return chosen(duration > 0.0, speed, np.nan)


def distance_along(latitude: ArrayLike, longitude: ArrayLike) -> FloatArray:
    """Distance along a track from its first known position.

    Parameters
    ----------
    latitude, longitude : array_like, shape (n,)
        Positions in order, WGS 84. [deg]

    Returns
    -------
    numpy.ndarray, shape (n,)
        Distance along the track; unknown positions are NaN and are passed over. [m]

    Examples
    --------
    >>> distance_along([0.0, float("nan"), 0.0], [0.0, 0.5, 0.001]).round(2)
    array([  0.  ,    nan, 111.32])
    """
    latitude = np.atleast_1d(np.asarray(latitude, dtype=np.float64))
    longitude = np.atleast_1d(np.asarray(longitude, dtype=np.float64))
    known = np.flatnonzero(np.isfinite(latitude) & np.isfinite(longitude))
    along = np.full(latitude.shape, np.nan)
    if known.size:
        north, east = latitude[known], longitude[known]
        steps = np.atleast_1d(distance(north[:-1], east[:-1], north[1:], east[1:]))
        along[known] = np.concatenate([[0.0], np.cumsum(steps)])
    return along


def speed_from_fixes(
    seconds: ArrayLike, latitude: ArrayLike, longitude: ArrayLike, at_least: float = 10.0
) -> FloatArray:
    """Speed over the ground from positions, repeated and missing ones left out.

    Parameters
    ----------
    seconds : array_like, shape (n,)
        Times in order, from any beginning. [s]
    latitude, longitude : array_like, shape (n,)
        Positions, WGS 84; NaN and 0,0 are no position. [deg]
    at_least : float, optional
        Shortest time between the two fixes that a speed is taken from. [s]

    Returns
    -------
    numpy.ndarray, shape (n,)
        Speed of the stretch between fixes that holds each time; NaN before the first fix, after
        the last known position, and everywhere if no two fixes are far enough apart. [m/s]

    Notes
    -----
    A receiver that gives one position to many pings would otherwise show a vessel that stands
    and leaps. Only the first ping of each new position is a fix.

    Examples
    --------
    >>> t = [0.0, 5.0, 10.0, 15.0, 20.0]
    >>> speed_from_fixes(t, [0.0] * 5, [1.0, 1.0, 1.0002, 1.0002, 1.0004]).round(3)
    array([2.226, 2.226, 2.226, 2.226, 2.226])
    """
    time = np.atleast_1d(np.asarray(seconds, dtype=np.float64))
    north = np.atleast_1d(np.asarray(latitude, dtype=np.float64))
    east = np.atleast_1d(np.asarray(longitude, dtype=np.float64))
    speed = np.full(time.shape, np.nan)
    usable = np.isfinite(time + north + east) & ~((north == 0.0) & (east == 0.0))
    known = np.flatnonzero(usable)
    if known.size < 2:
        return speed
    moved = np.ones(known.size, dtype=bool)
    moved[1:] = (np.diff(north[known]) != 0.0) | (np.diff(east[known]) != 0.0)
    fixes = known[moved]
    knots = [int(fixes[0])]
    while True:
        after = np.searchsorted(time[fixes], time[knots[-1]] + at_least, side="left")
        if after >= fixes.size:
            break
        knots.append(int(fixes[after]))
    if len(knots) < 2:
        return speed
    # What is left after the last full stretch belongs to it, rather than to no stretch at all.
    knots[-1] = int(fixes[-1])
    ends = np.asarray(knots)
    lengths = distance(north[ends[:-1]], east[ends[:-1]], north[ends[1:]], east[ends[1:]])
    speeds = np.atleast_1d(speed_over_ground(lengths, np.diff(time[ends])))
    stretch = np.clip(np.searchsorted(time[ends], time, side="right") - 1, 0, speeds.size - 1)
    inside = (time >= time[ends[0]]) & (time <= time[known[-1]])
    found: FloatArray = np.where(inside, speeds[stretch], np.nan)
    return found


@dataclass(frozen=True, slots=True)
class BeamPlace:
    """Where a beam met the seabed.

    Attributes
    ----------
    latitude, longitude : numpy.ndarray
        Position, WGS 84. [deg]
    below : numpy.ndarray
        Depth under the transducer. [m]
    """

    latitude: FloatArray
    longitude: FloatArray
    below: FloatArray


def offsets_to_ground(
    heading: ArrayLike, across: ArrayLike, along: ArrayLike = 0.0
) -> tuple[FloatArray, FloatArray]:
    """Turn distances across and along the ship into distances east and north.

    Parameters
    ----------
    heading : array_like
        Heading clockwise from north. [deg]
    across : array_like
        Distance to starboard. [m]
    along : array_like, optional
        Distance forward. [m]

    Returns
    -------
    tuple of numpy.ndarray
        Distances east and north. [m]

    Examples
    --------
    >>> east, north = offsets_to_ground(90.0, 10.0)
    >>> round(float(east), 9), round(float(north), 9)
    (0.0, -10.0)
    """
    heading, across, along = floats(heading, across, along)
    sine, cosine = np.sin(_RADIANS * heading), np.cos(_RADIANS * heading)
    east: FloatArray = along * sine + across * cosine
    north: FloatArray = along * cosine - across * sine
    return east, north


def place(
    latitude: ArrayLike,
    longitude: ArrayLike,
    heading: ArrayLike,
    across: ArrayLike,
    along: ArrayLike = 0.0,
) -> tuple[FloatArray, FloatArray]:
    """Position of something seen across and along the ship.

    Parameters
    ----------
    latitude, longitude : array_like
        Position of the transducer, WGS 84. [deg]
    heading : array_like
        Heading clockwise from north. [deg]
    across : array_like
        Distance to starboard. [m]
    along : array_like, optional
        Distance forward. [m]

    Returns
    -------
    tuple of numpy.ndarray
        Latitude and longitude. [deg]

    References
    ----------
    .. [1] Karney, J. Geodesy 87, 43-55, 2013, through the pyproj library.

    Examples
    --------
    >>> latitude, longitude = place(0.0, 0.0, 0.0, 111.319491)
    >>> round(float(latitude), 9), round(float(longitude), 9)
    (0.0, 0.001)
    """
    north_0, east_0 = floats(latitude, longitude)
    east, north = offsets_to_ground(heading, across, along)
    inputs = np.broadcast_arrays(north_0, east_0, east, north)
    north_0, east_0, east, north = (np.array(a, dtype=np.float64, order="C") for a in inputs)
    known = np.isfinite(north_0 + east_0 + east + north)
    azimuth = np.degrees(np.arctan2(east, north))
    start_east, start_north, direction, length = (
        np.where(known, a, 0.0).ravel() for a in (east_0, north_0, azimuth, np.hypot(east, north))
    )
    to_longitude, to_latitude, _ = _geodesics().fwd(start_east, start_north, direction, length)
    return (
        chosen(known, np.asarray(to_latitude).reshape(known.shape), np.nan),
        chosen(known, np.asarray(to_longitude).reshape(known.shape), np.nan),
    )


def place_beams(
    latitude: ArrayLike,
    longitude: ArrayLike,
    heading: ArrayLike,
    slant_range: ArrayLike,
    array_angle: ArrayLike,
    roll: ArrayLike = 0.0,
    pitch: ArrayLike = 0.0,
) -> BeamPlace:
    """Position and depth of the seabed that beams met, in water of one sound speed.

    Parameters
    ----------
    latitude, longitude : array_like
        Position of the transducer, WGS 84. [deg]
    heading : array_like
        Heading clockwise from north. [deg]
    slant_range : array_like
        Range along the beam. [m]
    array_angle : array_like
        Angle of the beam from the ship's own downward axis, positive to starboard. [deg]
    roll : array_like, optional
        Roll, positive starboard side down. [deg]
    pitch : array_like, optional
        Pitch, positive bow up: the fan then points forward. [deg]

    Returns
    -------
    BeamPlace
        Position, and depth under the transducer.

    References
    ----------
    .. [1] IHO C-13, §3 for the senses of roll and pitch.

    Examples
    --------
    >>> seabed = place_beams(10.0, 20.0, 0.0, 20.0, 63.0, roll=3.0)
    >>> round(float(seabed.below), 6), round(float(seabed.latitude), 6)
    (10.0, 10.0)
    """
    slant_range, array_angle, roll, pitch = floats(slant_range, array_angle, roll, pitch)
    angle = _RADIANS * (array_angle - roll)
    upright = slant_range * np.cos(angle)
    across: FloatArray = slant_range * np.sin(angle)
    below: FloatArray = upright * np.cos(_RADIANS * pitch)
    along: FloatArray = upright * np.sin(_RADIANS * pitch)
    to_latitude, to_longitude = place(latitude, longitude, heading, across, along)
    return BeamPlace(latitude=to_latitude, longitude=to_longitude, below=below)
