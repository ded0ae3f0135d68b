"""Where sound goes in water whose speed changes with depth.

Between the depths of a cast the speed changes evenly, so that a ray runs along arcs of circles,
in closed form. Above the first depth and below the last, the cast's speed is carried on.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from qa.physics.arrays import BoolArray, FloatArray, floats

_RADIANS = math.pi / 180.0
_MOST_STEPS = 100_000


@dataclass(frozen=True, slots=True)
class RayEnd:
    """Where rays have come after a time.

    Attributes
    ----------
    across : numpy.ndarray
        Horizontal distance from the start, positive to starboard. [m]
    depth : numpy.ndarray
        Depth. [m]
    angle : numpy.ndarray
        Direction, 0 straight down, over 90 upwards, positive to starboard. [deg]
    turned : numpy.ndarray of bool
        Whether the ray was bent through the horizontal on its way.
    surfaced : numpy.ndarray of bool
        Whether the ray met the surface and was left there, its time not used up.
    """

    across: FloatArray
    depth: FloatArray
    angle: FloatArray
    turned: BoolArray
    surfaced: BoolArray


@dataclass(frozen=True, slots=True)
class SoundingError:
    """What a wrong cast does to a sounding: computed minus true.

    Attributes
    ----------
    depth : numpy.ndarray
        Error in depth, positive where it comes out too deep. [m]
    across : numpy.ndarray
        Error across the track, positive to starboard. [m]
    """

    depth: FloatArray
    across: FloatArray


@dataclass(frozen=True, slots=True)
class _Water:
    """Casts as layers: an even layer above, the cast's own, an even layer below."""

    top: FloatArray
    bottom: FloatArray
    speed_at_top: FloatArray
    speed_at_bottom: FloatArray
    gradient: FloatArray


def _water(profile_depth: ArrayLike, profile_speed: ArrayLike) -> _Water:
    nodes = np.atleast_1d(np.asarray(profile_depth, dtype=np.float64))
    speeds = np.atleast_1d(np.asarray(profile_speed, dtype=np.float64))
    nodes, speeds = np.broadcast_arrays(nodes, speeds)
    if nodes.shape[-1] == 0:
        raise ValueError("a sound speed cast needs at least one depth: found none")
    steps = np.diff(nodes, axis=-1)
    if not np.all((steps > 0.0) | np.isnan(steps)):
        place = np.argwhere(steps <= 0.0)[0]
        above = nodes[tuple(place)]
        below = above + steps[tuple(place)]
        raise ValueError(
            "the depths of a sound speed cast must rise: found "
            f"{above:g} m followed by {below:g} m at entry {place[-1] + 2}"
        )
    if np.any(speeds <= 0.0):
        raise ValueError(
            f"the speeds of a sound speed cast must be above zero: found {np.nanmin(speeds):g} m/s"
        )
    edge = nodes[..., :1]
    unbounded = np.full_like(edge, np.inf)
    even = np.zeros_like(edge)
    return _Water(
        top=np.concatenate([-unbounded, nodes], axis=-1),
        bottom=np.concatenate([nodes, unbounded], axis=-1),
        speed_at_top=np.concatenate([speeds[..., :1], speeds], axis=-1),
        speed_at_bottom=np.concatenate([speeds, speeds[..., -1:]], axis=-1),
        gradient=np.concatenate([even, np.diff(speeds, axis=-1) / steps, even], axis=-1),
    )


def speed_at_depth(
    profile_depth: ArrayLike, profile_speed: ArrayLike, depth: ArrayLike
) -> FloatArray:
    """Speed of sound at a depth of a cast.

    Parameters
    ----------
    profile_depth, profile_speed : array_like, shape (..., n)
        Depths of the cast, rising [m], and the speed of sound there [m/s].
    depth : array_like, shape (...)
        Depth. [m]

    Returns
    -------
    numpy.ndarray
        Speed of sound, carried on unchanged above and below the cast. [m/s]

    Examples
    --------
    >>> float(speed_at_depth([0.0, 100.0], [1500.0, 1480.0], 25.0))
    1495.0
    """
    water = _water(profile_depth, profile_speed)
    (depth,) = floats(depth)
    below = depth[..., np.newaxis]
    inside = np.clip(below, water.top[..., 1:2], water.bottom[..., -2:-1])
    steps = np.clip(inside - water.top, 0.0, water.bottom - water.top)[..., 1:-1]
    gained: FloatArray = np.sum(steps * water.gradient[..., 1:-1], axis=-1)
    unknown = np.isnan(depth) | np.isnan(water.speed_at_top + water.top).any(axis=-1)
    speed: FloatArray = np.where(unknown, np.nan, water.speed_at_top[..., 0] + gained)[()]
    return speed


def _log1p_ratio(x: FloatArray) -> FloatArray:
    """log(1 + x) / x, one at zero."""
    ratio: FloatArray = np.ones_like(x)
    np.divide(np.log1p(x), x, out=ratio, where=x != 0.0)
    return ratio


def _expm1_ratio(x: FloatArray) -> FloatArray:
    """(exp(x) - 1) / x, one at zero."""
    ratio: FloatArray = np.ones_like(x)
    np.divide(np.expm1(x), x, out=ratio, where=x != 0.0)
    return ratio


def _arc_to_depth(
    speed: FloatArray, gradient: FloatArray, sine: FloatArray, cosine: FloatArray, way: FloatArray
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Time, distance and sine of the angle after a vertical way that the ray does complete.

    Everything is counted along the ray's own vertical direction. Each formula is that of C-13
    eqs. 3.59 to 3.68, rearranged so that an even layer is no special case.
    """
    change = gradient * way / speed
    sine_after = sine * (1.0 + change)
    cosine_after = np.sqrt(np.maximum((1.0 - sine_after) * (1.0 + sine_after), 0.0))
    both = cosine + cosine_after
    # Level before and after: there was no way at all, and 0/0 shall be none.
    both = np.where(both == 0.0, np.inf, both)
    ratio = change * (sine * sine * (2.0 + change) / both + 1.0 + cosine) / (1.0 + cosine_after)
    slope = sine * sine * (2.0 + change) / both + 1.0 + cosine
    time = way / speed * slope / (1.0 + cosine_after) * _log1p_ratio(ratio)
    across = way * (sine + sine_after) / both
    return time, across, sine_after


def trace_ray(
    profile_depth: ArrayLike,
    profile_speed: ArrayLike,
    launch_depth: ArrayLike,
    launch_angle: ArrayLike,
    travel_time: ArrayLike,
) -> RayEnd:
    """Follow rays through layered water for a time.

    Parameters
    ----------
    profile_depth, profile_speed : array_like, shape (..., n)
        Depths of the casts, rising [m], and the speed of sound there [m/s]. Leading axes
        broadcast with the rays, so that every ray may have its own cast.
    launch_depth : array_like, shape (...)
        Depth of the transducer. [m]
    launch_angle : array_like, shape (...)
        Direction there: 0 straight down, 90 to starboard, over 90 upwards. [deg]
    travel_time : array_like, shape (...)
        One-way travel time. [s]

    Returns
    -------
    RayEnd
        Where the rays are, and whether they turned or surfaced.

    Raises
    ------
    ValueError
        If a cast's depths do not rise or a speed is not above zero.

    Notes
    -----
    A ray that reaches water too fast for its angle turns there and comes back; one that reaches
    the surface (depth zero, or the transducer's depth if that is less) is left there. A ray
    exactly along the horizontal in even water stays there.

    References
    ----------
    .. [1] IHO C-13, eqs. 3.59 to 3.68.

    Examples
    --------
    >>> end = trace_ray([0.0, 100.0], [1500.0, 1500.0], 0.0, [0.0, 60.0], 0.02)
    >>> end.depth.round(6), end.across.round(6)
    (array([30., 15.]), array([ 0.      , 25.980762]))
    """
    water = _water(profile_depth, profile_speed)
    start, angle, time = floats(launch_depth, launch_angle, travel_time)
    casts = water.gradient.shape[:-1]
    shape = np.broadcast_shapes(casts, start.shape, angle.shape, time.shape)
    cast = np.broadcast_to(np.arange(math.prod(casts)).reshape(casts), shape).ravel()
    layers = water.gradient.shape[-1]
    top = water.top.reshape(-1, layers)
    bottom = water.bottom.reshape(-1, layers)
    gradients = water.gradient.reshape(-1, layers)
    speeds_at_top = water.speed_at_top.reshape(-1, layers)
    speeds_at_bottom = water.speed_at_bottom.reshape(-1, layers)

    depth = np.broadcast_to(start, shape).astype(np.float64).ravel()
    angles = np.broadcast_to(angle, shape).astype(np.float64).ravel()
    left = np.broadcast_to(time, shape).astype(np.float64).ravel()
    surface = np.minimum(depth, 0.0)
    across = np.zeros_like(depth)
    side = np.where(angles < 0.0, -1.0, 1.0)
    radians = _RADIANS * np.abs(angles)
    down = np.where(np.abs(angles) <= 90.0, 1.0, -1.0)
    sine = np.sin(radians)
    cosine = np.abs(np.cos(radians))
    turned = np.zeros(depth.shape, dtype=bool)
    surfaced = np.zeros(depth.shape, dtype=bool)
    speed = np.broadcast_to(speed_at_depth(profile_depth, profile_speed, start), shape)
    speed = speed.astype(np.float64).ravel()
    # At a layer's edge a ray belongs to the layer that it is about to enter.
    level = depth[:, np.newaxis]
    left_above = np.where(down[:, np.newaxis] > 0.0, bottom[cast] <= level, bottom[cast] < level)
    layer = left_above.sum(axis=-1)

    unknown = ~np.isfinite(depth + angles + left + speed)
    unknown |= np.isnan(top[cast] + gradients[cast]).any(axis=-1)
    active = np.flatnonzero(~unknown & (left > 0.0))
    for _ in range(_MOST_STEPS):
        if active.size == 0:
            break
        active = _one_layer(
            active, cast, layer, depth, across, speed, sine, cosine, down, left, turned, surfaced,
            surface, top, bottom, gradients, speeds_at_top, speeds_at_bottom,
        )  # fmt: skip
    else:
        raise ValueError(
            f"{active.size} rays were not at their end after {_MOST_STEPS} layers: "
            "the travel time is too long for water that traps them"
        )
    for values in (depth, across):
        values[unknown] = np.nan
    final = np.degrees(np.arctan2(sine, cosine * down)) * side
    final[unknown] = np.nan
    return RayEnd(
        across=(across * side).reshape(shape)[()],
        depth=depth.reshape(shape)[()],
        angle=final.reshape(shape)[()],
        turned=turned.reshape(shape)[()],
        surfaced=surfaced.reshape(shape)[()],
    )


def _one_layer(
    active: NDArray[np.intp],
    cast: NDArray[np.intp],
    layer: NDArray[np.intp],
    depth: FloatArray,
    across: FloatArray,
    speed: FloatArray,
    sine: FloatArray,
    cosine: FloatArray,
    down: FloatArray,
    left: FloatArray,
    turned: BoolArray,
    surfaced: BoolArray,
    surface: FloatArray,
    top: FloatArray,
    bottom: FloatArray,
    gradients: FloatArray,
    speeds_at_top: FloatArray,
    speeds_at_bottom: FloatArray,
) -> NDArray[np.intp]:
    """Take the rays to the end of their layer, of their time or to where they turn."""
    c = speed[active]
    s = sine[active]
    k = cosine[active]
    d = down[active]
    z = depth[active]
    t = left[active]
    place = (cast[active], layer[active])
    g = d * gradients[place]
    # Level on the axis of a channel, where the water on either side bends it back: it stays. A
    # cosine of 1e-6 would lift it off the axis by less than a micrometre.
    side = np.clip(place[1] - d.astype(np.intp), 0, gradients.shape[-1] - 1)
    behind = -d * gradients[place[0], side]
    start = np.where(d > 0.0, top[place], bottom[place])
    stays = (k < 1e-6) & (z == start) & (g >= 0.0) & (behind >= 0.0)
    g = np.where(stays, 0.0, g)
    k = np.where(stays, 0.0, k)
    ceiling = np.maximum(top[place], surface[active])
    goal = np.where(d > 0.0, bottom[place], ceiling)
    way = d * (goal - z)
    with np.errstate(over="ignore", invalid="ignore", divide="ignore"):
        # An endless even layer: any way longer than the time allows will do.
        way = np.where(np.isinf(way), 2.0 * c * t + 1.0, way)
        turns = (g > 0.0) & (s * (1.0 + g * way / c) >= 1.0)
        time_to_turn = np.log((1.0 + k) / s) / g
        across_to_turn = c * k / (g * s)
        time_to_edge, across_to_edge, sine_at_edge = _arc_to_depth(c, g, s, k, way)
    horizontal = (k == 0.0) & (g == 0.0)
    time_to_edge = np.where(horizontal, np.inf, time_to_edge)
    step = np.where(turns, time_to_turn, time_to_edge)
    ends = step >= t

    # Those whose time is up inside the layer.
    last = active[ends]
    ce, se, ke, ge, te, de = c[ends], s[ends], k[ends], g[ends], t[ends], d[ends]
    exponent = ge * te
    half = se / (1.0 + ke)
    after = half * np.exp(exponent)
    grown = ce * te * _expm1_ratio(exponent)
    down_way = grown * (1.0 - half * after) / (1.0 + after * after)
    depth[last] = z[ends] + de * down_way
    across[last] += grown * (half + after) / (1.0 + after * after)
    sine[last] = 2.0 * after / (1.0 + after * after)
    upright = (1.0 - after * after) / (1.0 + after * after)
    cosine[last] = np.maximum(upright, 0.0)

    # Those that turn: set level exactly, and sent back through the same layer.
    back = turns & ~ends
    level = active[back]
    depth[level] = z[back] + d[back] * (c[back] / s[back] - c[back]) / g[back]
    across[level] += across_to_turn[back]
    speed[level] = c[back] / s[back]
    sine[level] = 1.0
    cosine[level] = 0.0
    down[level] = -d[back]
    left[level] = t[back] - time_to_turn[back]
    turned[level] = True

    # Those that cross into the next layer or meet the surface.
    cross = ~turns & ~ends
    over = active[cross]
    depth[over] = goal[cross]
    across[over] += across_to_edge[cross]
    sine[over] = np.minimum(sine_at_edge[cross], 1.0)
    cosine[over] = np.sqrt((1.0 - sine[over]) * (1.0 + sine[over]))
    left[over] = t[cross] - time_to_edge[cross]
    cast_over, layer_over = place[0][cross], place[1][cross]
    heading_down = d[cross] > 0.0
    speed[over] = np.where(
        heading_down, speeds_at_bottom[cast_over, layer_over], speeds_at_top[cast_over, layer_over]
    )
    met = ~heading_down & (goal[cross] <= surface[over])
    surfaced[over] |= met
    layer[over] = np.where(met, layer_over, layer_over + np.where(heading_down, 1, -1))
    going: BoolArray = ~ends
    going[cross] &= ~met
    return active[going]


@dataclass(frozen=True, slots=True)
class RayCrossing:
    """Where and when rays come to a depth.

    Attributes
    ----------
    across : numpy.ndarray
        Horizontal distance from the start, positive to starboard; infinite for a ray that
        turns before. [m]
    travel_time : numpy.ndarray
        One-way travel time; infinite for a ray that turns before. [s]
    angle : numpy.ndarray
        Angle from the vertical there, 90 for a ray that turns before. [deg]
    """

    across: FloatArray
    travel_time: FloatArray
    angle: FloatArray


def ray_to_depth(
    profile_depth: ArrayLike,
    profile_speed: ArrayLike,
    launch_depth: ArrayLike,
    launch_angle: ArrayLike,
    depth: ArrayLike,
) -> RayCrossing:
    """Follow rays down through layered water to a depth.

    Parameters
    ----------
    profile_depth, profile_speed : array_like, shape (..., n)
        Depths of the casts, rising [m], and the speed of sound there [m/s].
    launch_depth : array_like, shape (...)
        Depth of the transducer. [m]
    launch_angle : array_like, shape (...)
        Angle from the vertical there. [deg]
    depth : array_like, shape (...)
        Depth to reach, not above the transducer. [m]

    Returns
    -------
    RayCrossing
        Distance, time and angle; NaN for a depth above the transducer or an angle of 90 degrees
        or more.

    Raises
    ------
    ValueError
        If a cast's depths do not rise or a speed is not above zero.

    References
    ----------
    .. [1] IHO C-13, eqs. 3.59 to 3.68.

    Examples
    --------
    >>> crossing = ray_to_depth([0.0, 100.0], [1500.0, 1500.0], 0.0, 60.0, 15.0)
    >>> round(float(crossing.across), 4), round(float(crossing.travel_time), 6)
    (25.9808, 0.02)
    """
    water = _water(profile_depth, profile_speed)
    start, angle, end = floats(launch_depth, launch_angle, depth)
    first_speed = speed_at_depth(profile_depth, profile_speed, start)
    launch = _RADIANS * angle[..., np.newaxis]
    parameter = np.abs(np.sin(launch)) / np.asarray(first_speed)[..., np.newaxis]
    from_depth, to_depth = start[..., np.newaxis], end[..., np.newaxis]
    top = np.clip(water.top, from_depth, to_depth)
    bottom = np.clip(water.bottom, from_depth, to_depth)
    way = bottom - top
    with np.errstate(invalid="ignore", divide="ignore"):
        # Below an endless layer's top the cast's speed does not change.
        below_top = np.where(water.gradient == 0.0, 0.0, top - water.top)
        speed = water.speed_at_top + water.gradient * below_top
        sine = parameter * speed
        sine_after = parameter * (speed + water.gradient * way)
        passes = np.maximum(sine, sine_after) < 1.0
        cosine = np.sqrt(np.maximum((1.0 - sine) * (1.0 + sine), 0.0))
        time, across, _ = _arc_to_depth(speed, water.gradient, sine, cosine, way)
        time = np.where(way > 0.0, np.where(passes, time, np.inf), 0.0).sum(axis=-1)
        across = np.where(way > 0.0, np.where(passes, across, np.inf), 0.0).sum(axis=-1)
    last_speed = speed_at_depth(profile_depth, profile_speed, end)
    last_sine = parameter[..., 0] * last_speed
    arrives = np.isfinite(time)
    final = np.degrees(np.arcsin(np.where(arrives, np.minimum(last_sine, 1.0), 1.0)))
    side = np.where(angle < 0.0, -1.0, 1.0)
    possible = (np.abs(angle) < 90.0) & (end >= start) & ~np.isnan(last_sine)
    return RayCrossing(
        across=np.where(possible, side * across, np.nan)[()],
        travel_time=np.where(possible, time, np.nan)[()],
        angle=np.where(possible, side * final, np.nan)[()],
    )


def steered_angle_in_water(
    steering_angle: ArrayLike, speed_used: ArrayLike, speed_true: ArrayLike
) -> FloatArray:
    """Direction that a flat array's beam really takes when steered with another sound speed.

    Parameters
    ----------
    steering_angle : array_like
        Angle from the array's normal that was meant. [deg]
    speed_used : array_like
        Sound speed that the steering reckoned with. [m/s]
    speed_true : array_like
        Sound speed at the array. [m/s]

    Returns
    -------
    numpy.ndarray
        Angle from the array's normal; NaN where no such beam exists. [deg]

    References
    ----------
    .. [1] IHO C-13, text to eq. 3.76: the array keeps the sine over the speed.

    Examples
    --------
    >>> round(float(steered_angle_in_water(60.0, 1500.0, 1510.0)), 3)
    60.668
    """
    angle, used, true = floats(steering_angle, speed_used, speed_true)
    with np.errstate(invalid="ignore", divide="ignore"):
        steered: FloatArray = np.degrees(np.arcsin(np.sin(_RADIANS * angle) * true / used))
    return steered


def sounding_error(
    used_depth: ArrayLike,
    used_speed: ArrayLike,
    true_depth: ArrayLike,
    true_speed: ArrayLike,
    launch_depth: ArrayLike,
    beam_angle: ArrayLike,
    depth: ArrayLike,
) -> SoundingError:
    """Error of a sounding worked out with one cast in water that had another.

    Parameters
    ----------
    used_depth, used_speed : array_like, shape (..., n)
        The cast that was used: depths [m] and speeds [m/s].
    true_depth, true_speed : array_like, shape (..., m)
        The cast of the water as it was: depths [m] and speeds [m/s].
    launch_depth : array_like, shape (...)
        Depth of the transducer. [m]
    beam_angle : array_like, shape (...)
        Angle of the beam from the vertical as it left the transducer. [deg]
    depth : array_like, shape (...)
        True depth of the seabed. [m]

    Returns
    -------
    SoundingError
        Computed minus true; zero for equal casts. NaN where the ray does not reach the seabed.

    Raises
    ------
    ValueError
        If a cast's depths do not rise or a speed is not above zero.

    Notes
    -----
    The beam's direction in the water counts as known. A wrong speed at the array itself turns
    the beam: pass `steered_angle_in_water` through both casts for that.

    References
    ----------
    .. [1] IHO C-13, §3.6 and eqs. 3.59 to 3.71.

    Examples
    --------
    >>> error = sounding_error([0.0, 50.0], [1500.0, 1500.0], [0.0, 50.0], [1500.0, 1490.0],
    ...                        0.0, [0.0, 60.0], 50.0)
    >>> error.depth.round(3), error.across.round(3)
    (array([ 0.167, -0.324]), array([0.   , 0.571]))
    """
    reached = ray_to_depth(true_depth, true_speed, launch_depth, beam_angle, depth)
    arrives = np.isfinite(reached.travel_time)
    time = np.where(arrives, reached.travel_time, np.nan)
    computed = trace_ray(used_depth, used_speed, launch_depth, beam_angle, time)
    (depth,) = floats(depth)
    with np.errstate(invalid="ignore"):
        return SoundingError(
            depth=(computed.depth - depth)[()], across=(computed.across - reached.across)[()]
        )
