"""What the water does to sound: its speed, its absorption, and pressure against depth.

Temperatures are on the scale of today's thermometers (ITS-90) unless said otherwise, salinities
practical, depths in metres down from the surface. Every formula has a companion ``..._in_range``:
outside it a value is still computed, and the caller can say that it is outside.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from qa.physics.arrays import BoolArray, FloatArray, chosen, floats

FRESH_SALINITY = 0.1
"""Up to this salinity water counts as fresh: neglecting it costs no more than 0.14 m/s."""

FRESH_DEPTH = 20.0
"""Down to this depth the formula without a pressure term serves fresh water. [m]"""

DEEP_WATER = 1000.0
"""From this depth on Del Grosso is preferred to UNESCO 44 in ocean water. [m]"""


def _polynomial(coefficients: tuple[float, ...], x: FloatArray) -> FloatArray:
    """Sum of coefficients times rising powers, by Horner's rule."""
    value = np.full_like(x, coefficients[-1])
    for coefficient in coefficients[-2::-1]:
        value = value * x + coefficient
    return value


def _between(value: FloatArray, least: float, greatest: float) -> BoolArray:
    """Whether a value lies in a closed interval; False for NaN."""
    inside: BoolArray = (value >= least) & (value <= greatest)
    return inside


def temperature_ipts68(temperature: ArrayLike) -> FloatArray:
    """Temperature on the older scale that the formulas of 1968 to 1989 were fitted on.

    Parameters
    ----------
    temperature : array_like
        Temperature on ITS-90. [degC]

    Returns
    -------
    numpy.ndarray
        Temperature on IPTS-68. [degC]

    References
    ----------
    .. [1] Saunders, WOCE Newsletter 10, 1990.

    Examples
    --------
    >>> round(float(temperature_ipts68(10.0)), 4)
    10.0024
    """
    (temperature,) = floats(temperature)
    return 1.00024 * temperature


def sound_speed_mackenzie(
    temperature: ArrayLike, salinity: ArrayLike, depth: ArrayLike
) -> FloatArray:
    """Speed of sound in sea water by Mackenzie's nine terms.

    Parameters
    ----------
    temperature : array_like
        Temperature. [degC]
    salinity : array_like
        Salinity. [1]
    depth : array_like
        Depth. [m]

    Returns
    -------
    numpy.ndarray
        Speed of sound. [m/s]

    Notes
    -----
    For 2 to 30 degC, salinity 25 to 40, depth 0 to 8000 m, where it stays within 0.6 m/s of
    TEOS-10 down to 1000 m.

    References
    ----------
    .. [1] Mackenzie, J. Acoust. Soc. Am. 70(3), 807-812, 1981.

    Examples
    --------
    >>> round(float(sound_speed_mackenzie(25.0, 35.0, 1000.0)), 3)
    1550.744
    """
    t, s, d = floats(temperature, salinity, depth)
    of_temperature = _polynomial((1448.96, 4.591, -5.304e-2, 2.374e-4), t)
    of_salinity = (1.340 - 1.025e-2 * t) * (s - 35.0)
    of_depth = d * (1.630e-2 + d * (1.675e-7 - 7.139e-13 * t * d))
    return of_temperature + of_salinity + of_depth


def mackenzie_in_range(temperature: ArrayLike, salinity: ArrayLike, depth: ArrayLike) -> BoolArray:
    """Whether Mackenzie's formula was made for this water.

    Parameters
    ----------
    temperature : array_like
        Temperature. [degC]
    salinity : array_like
        Salinity. [1]
    depth : array_like
        Depth. [m]

    Returns
    -------
    numpy.ndarray of bool
        False also where an input is NaN.

    References
    ----------
    .. [1] Mackenzie, J. Acoust. Soc. Am. 70(3), 807-812, 1981.

    Examples
    --------
    >>> mackenzie_in_range([1.0, 10.0], 35.0, 100.0)
    array([False,  True])
    """
    t, s, d = floats(temperature, salinity, depth)
    return _between(t, 2.0, 30.0) & _between(s, 25.0, 40.0) & _between(d, 0.0, 8000.0)


def sound_speed_unesco(
    temperature: ArrayLike, salinity: ArrayLike, pressure: ArrayLike
) -> FloatArray:
    """Speed of sound in sea water by Chen and Millero, in the form of UNESCO 44.

    Parameters
    ----------
    temperature : array_like
        Temperature on ITS-90; turned into IPTS-68, which the formula was fitted on. [degC]
    salinity : array_like
        Practical salinity. [1]
    pressure : array_like
        Pressure over that of the air. [dbar]

    Returns
    -------
    numpy.ndarray
        Speed of sound. [m/s]

    Notes
    -----
    For 0 to 40 degC, salinity 0 to 40, pressure 0 to 10000 dbar.

    References
    ----------
    .. [1] Fofonoff and Millard, Unesco technical papers in marine science 44, 1983.
    .. [2] Chen and Millero, J. Acoust. Soc. Am. 62(5), 1129-1135, 1977.

    Examples
    --------
    >>> round(float(sound_speed_unesco(40.0 / 1.00024, 40.0, 10000.0)), 3)
    1731.995
    """
    t, s, p = floats(temperature, salinity, pressure)
    t = temperature_ipts68(t)
    bar = 0.1 * p
    root = np.sqrt(np.maximum(s, 0.0))
    pure = (
        _polynomial((1402.388, 5.03711, -5.80852e-2, 3.3420e-4, -1.47800e-6, 3.1464e-9), t)
        + _polynomial((0.153563, 6.8982e-4, -8.1788e-6, 1.3621e-7, -6.1185e-10), t) * bar
        + _polynomial((3.1260e-5, -1.7107e-6, 2.5974e-8, -2.5335e-10, 1.0405e-12), t) * bar**2
        + _polynomial((-9.7729e-9, 3.8504e-10, -2.3643e-12), t) * bar**3
    )
    linear = (
        _polynomial((1.389, -1.262e-2, 7.164e-5, 2.006e-6, -3.21e-8), t)
        + _polynomial((9.4742e-5, -1.2580e-5, -6.4885e-8, 1.0507e-8, -2.0122e-10), t) * bar
        + _polynomial((-3.9064e-7, 9.1041e-9, -1.6002e-10, 7.988e-12), t) * bar**2
        + _polynomial((1.100e-10, 6.649e-12, -3.389e-13), t) * bar**3
    )
    three_halves = (-1.922e-2 - 4.42e-5 * t) + (7.3637e-5 + 1.7945e-7 * t) * bar
    square = 1.727e-3 - 7.9836e-6 * bar
    speed: FloatArray = pure + s * (linear + root * three_halves + s * square)
    return speed


def unesco_in_range(temperature: ArrayLike, salinity: ArrayLike, pressure: ArrayLike) -> BoolArray:
    """Whether the UNESCO 44 formula was made for this water.

    Parameters
    ----------
    temperature : array_like
        Temperature. [degC]
    salinity : array_like
        Practical salinity. [1]
    pressure : array_like
        Pressure over that of the air. [dbar]

    Returns
    -------
    numpy.ndarray of bool
        False also where an input is NaN.

    References
    ----------
    .. [1] Fofonoff and Millard, Unesco technical papers in marine science 44, 1983.

    Examples
    --------
    >>> unesco_in_range([10.0, 41.0], 35.0, 100.0)
    array([ True, False])
    """
    t, s, p = floats(temperature, salinity, pressure)
    return _between(t, 0.0, 40.0) & _between(s, 0.0, 40.0) & _between(p, 0.0, 10000.0)


def sound_speed_del_grosso(
    temperature: ArrayLike, salinity: ArrayLike, pressure: ArrayLike
) -> FloatArray:
    """Speed of sound in sea water by Del Grosso, with the coefficients for ITS-90.

    Parameters
    ----------
    temperature : array_like
        Temperature on ITS-90. [degC]
    salinity : array_like
        Practical salinity. [1]
    pressure : array_like
        Pressure over that of the air. [dbar]

    Returns
    -------
    numpy.ndarray
        Speed of sound. [m/s]

    Notes
    -----
    For 0 to 30 degC, salinity 30 to 40, pressure 0 to 1000 kg/cm2 (9807 dbar).

    References
    ----------
    .. [1] Wong and Zhu, J. Acoust. Soc. Am. 97(3), 1732-1736, 1995.
    .. [2] Del Grosso, J. Acoust. Soc. Am. 56(4), 1084-1091, 1974.

    Examples
    --------
    >>> round(float(sound_speed_del_grosso(10.0, 35.0, 0.0)), 2)
    1489.79
    """
    t, s, p = floats(temperature, salinity, pressure)
    k = p / 9.80665  # the formula counts pressure in kg/cm2
    of_temperature = t * (5.012285 + t * (-5.51184e-2 + 2.21649e-4 * t))
    of_salinity = s * (1.329530 + 1.288598e-4 * s)
    of_pressure = k * (0.1560592 + k * (2.449993e-5 - 8.833959e-9 * k))
    together = (
        -1.275936e-2 * t * s
        + 6.353509e-3 * t * k
        + 2.656174e-8 * t**2 * k**2
        - 1.593895e-6 * t * k**2
        + 5.222483e-10 * t * k**3
        - 4.383615e-7 * t**3 * k
        - 1.616745e-9 * s**2 * k**2
        + 9.688441e-5 * s * t**2
        + 4.857614e-6 * s**2 * t * k
        - 3.406824e-4 * s * t * k
    )
    return 1402.392 + of_temperature + of_salinity + of_pressure + together


def del_grosso_in_range(
    temperature: ArrayLike, salinity: ArrayLike, pressure: ArrayLike
) -> BoolArray:
    """Whether Del Grosso's formula was made for this water.

    Parameters
    ----------
    temperature : array_like
        Temperature. [degC]
    salinity : array_like
        Practical salinity. [1]
    pressure : array_like
        Pressure over that of the air. [dbar]

    Returns
    -------
    numpy.ndarray of bool
        False also where an input is NaN.

    References
    ----------
    .. [1] Wong and Zhu, J. Acoust. Soc. Am. 97(3), 1732-1736, 1995.

    Examples
    --------
    >>> del_grosso_in_range(10.0, [29.0, 35.0], 100.0)
    array([False,  True])
    """
    t, s, p = floats(temperature, salinity, pressure)
    return _between(t, 0.0, 30.0) & _between(s, 30.0, 40.0) & _between(p, 0.0, 9806.65)


def sound_speed_marczak(temperature: ArrayLike) -> FloatArray:
    """Speed of sound in pure water at the pressure of the air, by Marczak.

    Parameters
    ----------
    temperature : array_like
        Temperature on ITS-90. [degC]

    Returns
    -------
    numpy.ndarray
        Speed of sound. [m/s]

    Notes
    -----
    For 0 to 95 degC. It has no pressure term: 0.8 m/s too low at 50 m, 3.9 at 250 m.

    References
    ----------
    .. [1] Marczak, J. Acoust. Soc. Am. 102(5), 2776-2779, 1997.

    Examples
    --------
    >>> round(float(sound_speed_marczak(20.0)), 3)
    1482.38
    """
    (t,) = floats(temperature)
    return _polynomial(
        (1402.385, 5.038813, -5.799136e-2, 3.287156e-4, -1.398845e-6, 2.787860e-9), t
    )


def marczak_in_range(temperature: ArrayLike, salinity: ArrayLike, depth: ArrayLike) -> BoolArray:
    """Whether Marczak's formula serves this water.

    Parameters
    ----------
    temperature : array_like
        Temperature. [degC]
    salinity : array_like
        Salinity. [1]
    depth : array_like
        Depth. [m]

    Returns
    -------
    numpy.ndarray of bool
        True for fresh water of 0 to 95 degC in its uppermost 20 m; False where an input is NaN.

    References
    ----------
    .. [1] Marczak, J. Acoust. Soc. Am. 102(5), 2776-2779, 1997; salinity and depth: ours.

    Examples
    --------
    >>> marczak_in_range(10.0, 0.0, [5.0, 50.0])
    array([ True, False])
    """
    t, s, d = floats(temperature, salinity, depth)
    return _between(t, 0.0, 95.0) & _between(s, 0.0, FRESH_SALINITY) & _between(d, 0.0, FRESH_DEPTH)


@dataclass(frozen=True, slots=True)
class ChosenSoundSpeed:
    """Speed of sound by the formula that suits the water, and why that one.

    Attributes
    ----------
    sound_speed : numpy.ndarray
        Speed of sound. [m/s]
    formula : numpy.ndarray of int
        Index into `FORMULAS` of the formula used; -1 where the inputs are not known.
    in_range : numpy.ndarray of bool
        Whether that formula was made for this water.
    """

    sound_speed: FloatArray
    formula: NDArray[np.int8]
    in_range: BoolArray

    def reasons(self) -> list[str]:
        """The formulas that were used at all, each with its reason, in order."""
        used = np.unique(self.formula)
        return [f"{FORMULAS[i][0]}: {FORMULAS[i][1]}" for i in used if i >= 0]


FORMULAS: tuple[tuple[str, str], ...] = (
    ("Marczak 1997", "fresh water, no deeper than 20 m"),
    ("UNESCO 44 at salinity 0", "fresh water deeper than 20 m, where pressure counts"),
    ("UNESCO 44", "salt or brackish water down to 1000 m, or outside Del Grosso's range"),
    ("Del Grosso, ITS-90", "ocean water deeper than 1000 m"),
)


def choose_sound_speed(
    temperature: ArrayLike, salinity: ArrayLike, depth: ArrayLike, latitude: ArrayLike = 45.0
) -> ChosenSoundSpeed:
    """Speed of sound by the formula that suits salinity and depth.

    Parameters
    ----------
    temperature : array_like
        Temperature. [degC]
    salinity : array_like
        Practical salinity. [1]
    depth : array_like
        Depth. [m]
    latitude : array_like, optional
        Latitude, for gravity. [deg]

    Returns
    -------
    ChosenSoundSpeed
        Speed, formula and whether the formula was made for this water, of broadcast shape.

    Notes
    -----
    Fresh water (salinity up to 0.1) by Marczak down to 20 m and by UNESCO 44 at salinity 0
    below; ocean water deeper than 1000 m by Del Grosso where its range allows; all else by
    UNESCO 44, which serves salinities from 0 to 40.

    References
    ----------
    .. [1] The formulas' own papers, at their functions.
    .. [2] Dushaw et al., J. Acoust. Soc. Am. 93(1), 255-275, 1993: Del Grosso in deep water.

    Examples
    --------
    >>> choice = choose_sound_speed(10.0, [0.0, 35.0], 10.0)
    >>> choice.sound_speed.round(2), choice.formula
    (array([1447.29, 1490.  ]), array([0, 2], dtype=int8))
    >>> choice.reasons()[0]
    'Marczak 1997: fresh water, no deeper than 20 m'
    """
    t, s, d, latitude = np.broadcast_arrays(*floats(temperature, salinity, depth, latitude))
    fresh = s <= FRESH_SALINITY
    pressure = chosen(fresh, pressure_from_depth_fresh(d), pressure_from_depth(d, latitude))
    deep = (d > DEEP_WATER) & del_grosso_in_range(t, s, pressure)
    known = ~np.isnan(t + s + d + latitude)
    formula = np.select(
        [~known, fresh & (d <= FRESH_DEPTH), fresh, deep], [-1, 0, 1, 3], default=2
    ).astype(np.int8)
    effective_salinity = chosen(fresh, 0.0, s)
    speeds = [
        sound_speed_marczak(t),
        sound_speed_unesco(t, effective_salinity, pressure),
        sound_speed_del_grosso(t, s, pressure),
    ]
    speed = np.select(
        [formula == 0, formula == 3, formula > 0], [speeds[0], speeds[2], speeds[1]], np.nan
    )[()]
    unesco_range = unesco_in_range(t, effective_salinity, pressure)
    in_range = np.select(
        [formula == 0, formula > 0],
        # Del Grosso is chosen in its own range only, which lies inside that of UNESCO 44.
        [marczak_in_range(t, s, d), unesco_range & (s >= 0.0)],
        False,
    )
    return ChosenSoundSpeed(speed, formula, in_range.astype(np.bool_))


def sound_speed(
    temperature: ArrayLike, salinity: ArrayLike, depth: ArrayLike, latitude: ArrayLike = 45.0
) -> FloatArray:
    """Speed of sound by the formula that suits salinity and depth, without its reason.

    Parameters
    ----------
    temperature : array_like
        Temperature. [degC]
    salinity : array_like
        Practical salinity. [1]
    depth : array_like
        Depth. [m]
    latitude : array_like, optional
        Latitude, for gravity. [deg]

    Returns
    -------
    numpy.ndarray
        Speed of sound. [m/s]

    See Also
    --------
    choose_sound_speed : the same with the formula, its reason and its range.

    Examples
    --------
    >>> round(float(sound_speed(10.0, 35.0, 10.0)), 2)
    1490.0
    """
    return choose_sound_speed(temperature, salinity, depth, latitude).sound_speed


def _gravity_at_surface(latitude: FloatArray) -> FloatArray:
    """Gravity at the surface as UNESCO 44 has it. [m/s2]"""
    sine_squared = np.sin(np.deg2rad(latitude)) ** 2
    gravity: FloatArray = 9.780318 * (1.0 + (5.2788e-3 + 2.36e-5 * sine_squared) * sine_squared)
    return gravity


def depth_from_pressure(pressure: ArrayLike, latitude: ArrayLike = 45.0) -> FloatArray:
    """Depth in the ocean from pressure.

    Parameters
    ----------
    pressure : array_like
        Pressure over that of the air. [dbar]
    latitude : array_like, optional
        Latitude, for gravity. [deg]

    Returns
    -------
    numpy.ndarray
        Depth in an ocean of 0 degC and salinity 35. [m]

    Notes
    -----
    For 0 to 10000 dbar; in fresh water depths come out 2.6 to 3 % too small.

    References
    ----------
    .. [1] Fofonoff and Millard, Unesco technical papers in marine science 44, 1983.

    Examples
    --------
    >>> round(float(depth_from_pressure(10000.0, 30.0)), 3)
    9712.653
    """
    p, latitude = floats(pressure, latitude)
    gravity = _gravity_at_surface(latitude) + 1.092e-6 * p
    return p * _polynomial((9.72659, -2.2512e-5, 2.279e-10, -1.82e-15), p) / gravity


def pressure_from_depth(depth: ArrayLike, latitude: ArrayLike = 45.0) -> FloatArray:
    """Pressure in the ocean at a depth: the inverse of `depth_from_pressure`.

    Parameters
    ----------
    depth : array_like
        Depth. [m]
    latitude : array_like, optional
        Latitude, for gravity. [deg]

    Returns
    -------
    numpy.ndarray
        Pressure over that of the air, in an ocean of 0 degC and salinity 35. [dbar]

    Notes
    -----
    Solved by repeated substitution, to better than 1e-6 dbar over 0 to 10000 m.

    References
    ----------
    .. [1] Fofonoff and Millard, Unesco technical papers in marine science 44, 1983.

    Examples
    --------
    >>> round(float(pressure_from_depth(9712.653, 30.0)), 2)
    10000.0
    """
    depth, latitude = floats(depth, latitude)
    pressure = 1.01 * depth
    # Each pass leaves under a tenth of the error, since gravity and density hardly change.
    for _ in range(12):
        pressure = pressure + 1.02 * (depth - depth_from_pressure(pressure, latitude))
    return pressure


def pressure_from_depth_fresh(depth: ArrayLike) -> FloatArray:
    """Pressure in a lake or river at a depth.

    Parameters
    ----------
    depth : array_like
        Depth. [m]

    Returns
    -------
    numpy.ndarray
        Pressure over that of the air, for water of 1000 kg/m3 and normal gravity. [dbar]

    Examples
    --------
    >>> round(float(pressure_from_depth_fresh(100.0)), 4)
    98.0665
    """
    (depth,) = floats(depth)
    return 0.980665 * depth


def harmonic_mean_sound_speed(
    profile_depth: ArrayLike, profile_speed: ArrayLike, depth: ArrayLike, from_depth: ArrayLike = 0
) -> FloatArray:
    """Speed that turns a vertical travel time into a distance, over part of a profile.

    Parameters
    ----------
    profile_depth : array_like, shape (n,)
        Depths of the cast, rising. [m]
    profile_speed : array_like, shape (n,)
        Speed of sound at those depths. [m/s]
    depth : array_like
        Depth at which the way ends. [m]
    from_depth : array_like, optional
        Depth at which the way begins: that of the transducer. [m]

    Returns
    -------
    numpy.ndarray
        Distance over travel time, both exact for speeds that change evenly between the depths
        of the cast; the speed itself where the way has no length. [m/s]

    Raises
    ------
    ValueError
        If the cast's depths do not rise, or depths and speeds differ in number.

    Notes
    -----
    Above its first and below its last depth the cast's speed is carried on unchanged:
    `profile_covers` says where that was needed.

    References
    ----------
    .. [1] IHO C-13, §3.6: travel time through layers of constant gradient.

    Examples
    --------
    >>> round(float(harmonic_mean_sound_speed([0.0, 100.0], [1500.0, 1480.0], 100.0)), 3)
    1489.978
    """
    nodes, speeds = _checked_profile(profile_depth, profile_speed)
    end, start = floats(depth, from_depth)
    thickness = np.diff(nodes)
    ratio = (speeds[1:] - speeds[:-1]) / speeds[:-1]
    layer_times = thickness / speeds[:-1] * _log1p_ratio(ratio)
    times = np.concatenate([[0.0], np.cumsum(layer_times)])
    end, start = np.broadcast_arrays(end, start)
    end_time, end_speed = _time_and_speed_at(nodes, speeds, times, end)
    start_time, start_speed = _time_and_speed_at(nodes, speeds, times, start)
    with np.errstate(divide="ignore", invalid="ignore"):
        mean = (end - start) / (end_time - start_time)
    return chosen(end == start, 0.5 * (end_speed + start_speed), mean)


def _log1p_ratio(x: FloatArray) -> FloatArray:
    """log(1 + x) / x, with its limit of one at zero."""
    with np.errstate(divide="ignore", invalid="ignore"):
        ratio = np.log1p(x) / x
    return chosen(x == 0.0, 1.0, ratio)


def _time_and_speed_at(
    nodes: FloatArray, speeds: FloatArray, times: FloatArray, depth: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """Travel time from the cast's first depth to a depth, and the speed there."""
    inside = np.clip(depth, nodes[0], nodes[-1])
    speed: FloatArray = np.interp(inside, nodes, speeds)
    layer = np.searchsorted(nodes, inside, side="right") - 1
    first = speeds[layer]
    within = (inside - nodes[layer]) / first * _log1p_ratio((speed - first) / first)
    return times[layer] + within + (depth - inside) / speed, speed


def _checked_profile(
    profile_depth: ArrayLike, profile_speed: ArrayLike
) -> tuple[FloatArray, FloatArray]:
    """The cast as float64, or an error that says what is wrong with it."""
    nodes = np.atleast_1d(np.asarray(profile_depth, dtype=np.float64))
    speeds = np.atleast_1d(np.asarray(profile_speed, dtype=np.float64))
    if nodes.ndim != 1 or nodes.shape != speeds.shape or nodes.size == 0:
        raise ValueError(
            "a sound speed cast needs as many depths as speeds, at least one: "
            f"found {nodes.shape} depths and {speeds.shape} speeds"
        )
    if not np.all(np.diff(nodes) > 0.0):
        where = int(np.argmin(np.diff(nodes) > 0.0))
        raise ValueError(
            "the depths of a sound speed cast must rise: found "
            f"{nodes[where]:g} m followed by {nodes[where + 1]:g} m at entry {where + 2}"
        )
    return nodes, speeds


def profile_covers(
    profile_depth: ArrayLike, depth: ArrayLike, from_depth: ArrayLike = 0
) -> BoolArray:
    """Whether a cast reaches over the whole way between two depths.

    Parameters
    ----------
    profile_depth : array_like, shape (n,)
        Depths of the cast. [m]
    depth : array_like
        Depth at which the way ends. [m]
    from_depth : array_like, optional
        Depth at which the way begins. [m]

    Returns
    -------
    numpy.ndarray of bool
        False also where an input is NaN.

    Examples
    --------
    >>> profile_covers([0.0, 50.0], [40.0, 60.0])
    array([ True, False])
    """
    nodes = np.asarray(profile_depth, dtype=np.float64)
    end, start = floats(depth, from_depth)
    covered: BoolArray = (np.minimum(start, end) >= nodes.min()) & (
        np.maximum(start, end) <= nodes.max()
    )
    return covered


def absorption_francois_garrison(
    frequency: ArrayLike,
    temperature: ArrayLike,
    salinity: ArrayLike,
    depth: ArrayLike,
    acidity: ArrayLike = 8.0,
) -> FloatArray:
    """Absorption of sound in water by Francois and Garrison.

    Parameters
    ----------
    frequency : array_like
        Frequency of the sound. [Hz]
    temperature : array_like
        Temperature. [degC]
    salinity : array_like
        Salinity; 0 for fresh water. [1]
    depth : array_like
        Depth. [m]
    acidity : array_like, optional
        pH of the water. [1]

    Returns
    -------
    numpy.ndarray
        Loss along the way, per metre. [dB/m]

    Notes
    -----
    Three parts: boric acid, magnesium sulphate, and the water itself. In fresh water only the
    last remains.

    References
    ----------
    .. [1] Francois and Garrison, J. Acoust. Soc. Am. 72(3), 896-907 and 72(6), 1879-1890, 1982.

    Examples
    --------
    >>> round(float(1000.0 * absorption_francois_garrison(100e3, 10.0, 35.0, 0.0)), 2)
    33.63
    """
    frequency, t, s, d, acidity = floats(frequency, temperature, salinity, depth, acidity)
    khz = 1e-3 * frequency
    square = khz * khz
    speed = 1412.0 + 3.21 * t + 1.19 * s + 0.0167 * d
    kelvin = t + 273.0
    boric_relaxation = 2.8 * np.sqrt(s / 35.0) * 10.0 ** (4.0 - 1245.0 / kelvin)
    boric = 8.86 / speed * 10.0 ** (0.78 * acidity - 5.0)
    sulphate_relaxation = 8.17 * 10.0 ** (8.0 - 1990.0 / kelvin) / (1.0 + 0.0018 * (s - 35.0))
    sulphate = 21.44 * s / speed * (1.0 + 0.025 * t)
    sulphate_pressure = 1.0 + d * (-1.37e-4 + 6.2e-9 * d)
    cold = _polynomial((4.937e-4, -2.59e-5, 9.11e-7, -1.50e-8), t)
    warm = _polynomial((3.964e-4, -1.146e-5, 1.45e-7, -6.5e-10), t)
    water = chosen(t <= 20.0, cold, warm)
    water_pressure = 1.0 + d * (-3.83e-5 + 4.9e-10 * d)
    per_kilometre: FloatArray = square * (
        boric * boric_relaxation / (boric_relaxation**2 + square)
        + sulphate * sulphate_pressure * sulphate_relaxation / (sulphate_relaxation**2 + square)
        + water * water_pressure
    )
    return 1e-3 * per_kilometre


def francois_garrison_in_range(
    frequency: ArrayLike, temperature: ArrayLike, salinity: ArrayLike, depth: ArrayLike
) -> BoolArray:
    """Whether Francois and Garrison's formula was made for this water.

    Parameters
    ----------
    frequency : array_like
        Frequency of the sound. [Hz]
    temperature : array_like
        Temperature. [degC]
    salinity : array_like
        Salinity. [1]
    depth : array_like
        Depth. [m]

    Returns
    -------
    numpy.ndarray of bool
        True for 0.4 kHz to 1 MHz, -2 to 22 degC, salinity 30 to 35 or fresh water, down to
        3500 m; False also where an input is NaN.

    Notes
    -----
    These limits are recalled from the literature, not read again in the paper.

    References
    ----------
    .. [1] Francois and Garrison, J. Acoust. Soc. Am. 72(3), 896-907 and 72(6), 1879-1890, 1982.

    Examples
    --------
    >>> francois_garrison_in_range(100e3, 10.0, [0.0, 20.0, 35.0], 10.0)
    array([ True, False,  True])
    """
    frequency, t, s, d = floats(frequency, temperature, salinity, depth)
    salinity_served = _between(s, 30.0, 35.0) | _between(s, 0.0, FRESH_SALINITY)
    return (
        _between(frequency, 400.0, 1e6)
        & _between(t, -2.0, 22.0)
        & salinity_served
        & _between(d, 0.0, 3500.0)
    )


def absorption_ainslie_mccolm(
    frequency: ArrayLike,
    temperature: ArrayLike,
    salinity: ArrayLike,
    depth: ArrayLike,
    acidity: ArrayLike = 8.0,
) -> FloatArray:
    """Absorption of sound in water by Ainslie and McColm's shorter formula.

    Parameters
    ----------
    frequency : array_like
        Frequency of the sound. [Hz]
    temperature : array_like
        Temperature. [degC]
    salinity : array_like
        Salinity; 0 for fresh water. [1]
    depth : array_like
        Depth. [m]
    acidity : array_like, optional
        pH of the water. [1]

    Returns
    -------
    numpy.ndarray
        Loss along the way, per metre. [dB/m]

    Notes
    -----
    Within about 10 % of Francois and Garrison between 100 Hz and 1 MHz, to 1000 m.

    References
    ----------
    .. [1] Ainslie and McColm, J. Acoust. Soc. Am. 103(3), 1671-1672, 1998.

    Examples
    --------
    >>> round(float(1000.0 * absorption_ainslie_mccolm(100e3, 10.0, 35.0, 0.0)), 2)
    34.34
    """
    frequency, t, s, d, acidity = floats(frequency, temperature, salinity, depth, acidity)
    khz = 1e-3 * frequency
    square = khz * khz
    km = 1e-3 * d
    boric_relaxation = 0.78 * np.sqrt(s / 35.0) * np.exp(t / 26.0)
    sulphate_relaxation = 42.0 * np.exp(t / 17.0)
    boric = 0.106 * np.exp((acidity - 8.0) / 0.56)
    sulphate = 0.52 * (1.0 + t / 43.0) * (s / 35.0) * np.exp(-km / 6.0)
    water = 0.00049 * np.exp(-(t / 27.0 + km / 17.0))
    per_kilometre: FloatArray = square * (
        boric * boric_relaxation / (boric_relaxation**2 + square)
        + sulphate * sulphate_relaxation / (sulphate_relaxation**2 + square)
        + water
    )
    return 1e-3 * per_kilometre


def ainslie_mccolm_in_range(
    frequency: ArrayLike, temperature: ArrayLike, salinity: ArrayLike, depth: ArrayLike
) -> BoolArray:
    """Whether Ainslie and McColm's formula was made for this water.

    Parameters
    ----------
    frequency : array_like
        Frequency of the sound. [Hz]
    temperature : array_like
        Temperature. [degC]
    salinity : array_like
        Salinity. [1]
    depth : array_like
        Depth. [m]

    Returns
    -------
    numpy.ndarray of bool
        True for 0.1 kHz to 1 MHz, -6 to 35 degC, salinity 5 to 50, down to 7000 m; False also
        where an input is NaN.

    Notes
    -----
    These limits are recalled from the literature, not read again in the paper.

    References
    ----------
    .. [1] Ainslie and McColm, J. Acoust. Soc. Am. 103(3), 1671-1672, 1998.

    Examples
    --------
    >>> ainslie_mccolm_in_range(100e3, [10.0, 36.0], 35.0, 10.0)
    array([ True, False])
    """
    frequency, t, s, d = floats(frequency, temperature, salinity, depth)
    return (
        _between(frequency, 100.0, 1e6)
        & _between(t, -6.0, 35.0)
        & _between(s, 5.0, 50.0)
        & _between(d, 0.0, 7000.0)
    )
