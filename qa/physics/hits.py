"""How often pings and beams fall on a target: spacing, guaranteed and possible hits, speeds.

A feature of length L is hit by every ping whose footprint touches it, so pings a distance D
apart, of footprint B, fall on it (L + B) / D times on average: never fewer than the whole part
of that, and one more with a chance equal to the rest.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike

from qa.physics.arrays import FloatArray, chosen, floats


def _mean_hits(
    target_length: ArrayLike, footprint: ArrayLike, spacing: ArrayLike
) -> tuple[FloatArray, FloatArray]:
    """Mean number of hits, and the same rounded where it is a whole number but for rounding."""
    target_length, footprint, spacing = floats(target_length, footprint, spacing)
    with np.errstate(divide="ignore", invalid="ignore"):
        mean: FloatArray = (target_length + footprint) / spacing
    # 0/0: nothing of no length at all is ever hit, however dense the pings.
    mean = chosen((target_length + footprint == 0.0) & (spacing == 0.0), 0.0, mean)
    whole = np.rint(mean)
    # Lengths and spacings that are exact multiples in the survey's decimal numbers are not so in
    # binary ones; float32 carries about seven digits.
    tolerance = 1e-9 if mean.dtype == np.float64 else 5e-7
    with np.errstate(invalid="ignore"):
        near = np.abs(mean - whole) <= tolerance * whole
    return mean, chosen(near, whole, mean)


def ping_spacing(speed: ArrayLike, ping_interval: ArrayLike) -> FloatArray:
    """Distance over the ground from one ping to the next.

    Parameters
    ----------
    speed : array_like
        Speed over the ground. [m/s]
    ping_interval : array_like
        Time from one ping to the next. [s]

    Returns
    -------
    numpy.ndarray
        Distance along the track. [m]

    References
    ----------
    .. [1] IHO C-13, chapter 4, §2.3.6.

    Examples
    --------
    >>> float(ping_spacing(2.0, 0.25))
    0.5
    """
    speed, ping_interval = floats(speed, ping_interval)
    return speed * ping_interval


def guaranteed_hits(
    target_length: ArrayLike, footprint_along: ArrayLike, ping_spacing: ArrayLike
) -> FloatArray:
    """Pings that fall on a target wherever it lies along the track.

    Parameters
    ----------
    target_length : array_like
        Length of the target along the track. [m]
    footprint_along : array_like
        Footprint along the track at the target's range. [m]
    ping_spacing : array_like
        Distance over the ground from one ping to the next. [m]

    Returns
    -------
    numpy.ndarray
        Whole number of pings; infinite where the spacing is zero. [1]

    Notes
    -----
    A quotient within 1e-9 (float32: 5e-7) of a whole number counts as that number.

    References
    ----------
    .. [1] IHO C-13, chapter 4, eq. 4.2.

    Examples
    --------
    >>> float(guaranteed_hits(1.0, 0.5, 0.4)), float(guaranteed_hits(0.7, 0.2, 0.3))
    (3.0, 3.0)
    """
    _, mean = _mean_hits(target_length, footprint_along, ping_spacing)
    hits: FloatArray = np.floor(mean)
    return hits


def possible_hits(
    target_length: ArrayLike, footprint_along: ArrayLike, ping_spacing: ArrayLike
) -> FloatArray:
    """Pings that fall on a target where it lies best along the track.

    Parameters
    ----------
    target_length : array_like
        Length of the target along the track. [m]
    footprint_along : array_like
        Footprint along the track at the target's range. [m]
    ping_spacing : array_like
        Distance over the ground from one ping to the next. [m]

    Returns
    -------
    numpy.ndarray
        Whole number of pings: one more than are guaranteed, except where the target and the
        footprint together are an exact multiple of the spacing. [1]

    References
    ----------
    .. [1] IHO C-13, chapter 4, eq. 4.1: the longest feature that can never receive N pings.

    Examples
    --------
    >>> float(possible_hits(1.0, 0.5, 0.4)), float(possible_hits(0.7, 0.2, 0.3))
    (4.0, 3.0)
    """
    _, mean = _mean_hits(target_length, footprint_along, ping_spacing)
    hits: FloatArray = np.ceil(mean)
    return hits


def extra_hit_chance(
    target_length: ArrayLike, footprint_along: ArrayLike, ping_spacing: ArrayLike
) -> FloatArray:
    """Chance that a target receives one ping more than are guaranteed.

    Parameters
    ----------
    target_length : array_like
        Length of the target along the track. [m]
    footprint_along : array_like
        Footprint along the track at the target's range. [m]
    ping_spacing : array_like
        Distance over the ground from one ping to the next. [m]

    Returns
    -------
    numpy.ndarray
        Chance, from 0 to 1, for a target that may lie anywhere along the track. [1]

    References
    ----------
    .. [1] IHO C-13, chapter 4, between eqs. 4.1 and 4.2.

    Examples
    --------
    >>> round(float(extra_hit_chance(1.0, 0.5, 0.4)), 9)
    0.75
    """
    _, mean = _mean_hits(target_length, footprint_along, ping_spacing)
    with np.errstate(invalid="ignore"):
        chance = mean - np.floor(mean)
    return chosen(np.isinf(mean), 0.0, chance)


def chance_of_hits(
    target_length: ArrayLike,
    footprint_along: ArrayLike,
    ping_spacing: ArrayLike,
    hits: ArrayLike,
) -> FloatArray:
    """Chance that a target receives at least a number of pings.

    Parameters
    ----------
    target_length : array_like
        Length of the target along the track. [m]
    footprint_along : array_like
        Footprint along the track at the target's range. [m]
    ping_spacing : array_like
        Distance over the ground from one ping to the next. [m]
    hits : array_like
        Number of pings wanted. [1]

    Returns
    -------
    numpy.ndarray
        Chance, from 0 to 1, for a target that may lie anywhere along the track. [1]

    Examples
    --------
    >>> chance_of_hits(1.0, 0.5, 0.4, [3, 4, 5]).round(9)
    array([1.  , 0.75, 0.  ])
    """
    (hits,) = floats(hits)
    _, mean = _mean_hits(target_length, footprint_along, ping_spacing)
    chance: FloatArray = np.clip(mean - hits + 1.0, 0.0, 1.0)
    return chance


def shortest_target_always_hit(
    footprint_along: ArrayLike, ping_spacing: ArrayLike, hits: ArrayLike
) -> FloatArray:
    """Length of the shortest feature that always receives a number of pings.

    Parameters
    ----------
    footprint_along : array_like
        Footprint along the track at the target's range. [m]
    ping_spacing : array_like
        Distance over the ground from one ping to the next. [m]
    hits : array_like
        Number of pings. [1]

    Returns
    -------
    numpy.ndarray
        Length along the track, zero where the footprint alone is enough. [m]

    References
    ----------
    .. [1] IHO C-13, chapter 4, eq. 4.2.

    Examples
    --------
    >>> round(float(shortest_target_always_hit(0.5, 0.5, 3)), 9)
    1.0
    """
    footprint_along, ping_spacing, hits = floats(footprint_along, ping_spacing, hits)
    length: FloatArray = np.maximum(ping_spacing * hits - footprint_along, 0.0)
    return length


def longest_target_never_hit(
    footprint_along: ArrayLike, ping_spacing: ArrayLike, hits: ArrayLike
) -> FloatArray:
    """Length of the longest feature that can never receive a number of pings.

    Parameters
    ----------
    footprint_along : array_like
        Footprint along the track at the target's range. [m]
    ping_spacing : array_like
        Distance over the ground from one ping to the next. [m]
    hits : array_like
        Number of pings. [1]

    Returns
    -------
    numpy.ndarray
        Length along the track, zero where any feature can. [m]

    References
    ----------
    .. [1] IHO C-13, chapter 4, eq. 4.1.

    Examples
    --------
    >>> round(float(longest_target_never_hit(0.5, 0.5, 3)), 9)
    0.5
    """
    (hits,) = floats(hits)
    return shortest_target_always_hit(footprint_along, ping_spacing, hits - 1.0)


def greatest_ping_spacing(
    target_length: ArrayLike, footprint_along: ArrayLike, hits: ArrayLike
) -> FloatArray:
    """Widest spacing at which a target still always receives a number of pings.

    Parameters
    ----------
    target_length : array_like
        Length of the target along the track. [m]
    footprint_along : array_like
        Footprint along the track at the target's range. [m]
    hits : array_like
        Number of pings. [1]

    Returns
    -------
    numpy.ndarray
        Distance over the ground from one ping to the next. [m]

    References
    ----------
    .. [1] IHO C-13, chapter 4, eq. 4.2, turned round.

    Examples
    --------
    >>> float(greatest_ping_spacing(1.0, 0.5, 3))
    0.5
    """
    target_length, footprint_along, hits = floats(target_length, footprint_along, hits)
    with np.errstate(divide="ignore"):
        return (target_length + footprint_along) / hits


def greatest_ping_spacing_possible(
    target_length: ArrayLike, footprint_along: ArrayLike, hits: ArrayLike
) -> FloatArray:
    """Spacing below which a target can receive a number of pings, if it lies well.

    Parameters
    ----------
    target_length : array_like
        Length of the target along the track. [m]
    footprint_along : array_like
        Footprint along the track at the target's range. [m]
    hits : array_like
        Number of pings. [1]

    Returns
    -------
    numpy.ndarray
        Distance over the ground from one ping to the next: the spacing must stay under it.
        Infinite for one ping. [m]

    References
    ----------
    .. [1] IHO C-13, chapter 4, eq. 4.1, turned round.

    Examples
    --------
    >>> float(greatest_ping_spacing_possible(1.0, 0.5, 3))
    0.75
    """
    (hits,) = floats(hits)
    return greatest_ping_spacing(target_length, footprint_along, hits - 1.0)


def greatest_speed(
    target_length: ArrayLike,
    footprint_along: ArrayLike,
    hits: ArrayLike,
    ping_interval: ArrayLike,
) -> FloatArray:
    """Highest speed at which a target still always receives a number of pings.

    Parameters
    ----------
    target_length : array_like
        Length of the target along the track. [m]
    footprint_along : array_like
        Footprint along the track at the target's range. [m]
    hits : array_like
        Number of pings. [1]
    ping_interval : array_like
        Time from one ping to the next. [s]

    Returns
    -------
    numpy.ndarray
        Speed over the ground. [m/s]

    References
    ----------
    .. [1] IHO C-13, chapter 4, eq. 4.2, turned round.

    Examples
    --------
    >>> float(greatest_speed(1.0, 0.5, 3, 0.25))
    2.0
    """
    (ping_interval,) = floats(ping_interval)
    with np.errstate(divide="ignore"):
        return greatest_ping_spacing(target_length, footprint_along, hits) / ping_interval


def greatest_speed_possible(
    target_length: ArrayLike,
    footprint_along: ArrayLike,
    hits: ArrayLike,
    ping_interval: ArrayLike,
) -> FloatArray:
    """Speed below which a target can receive a number of pings, if it lies well.

    Parameters
    ----------
    target_length : array_like
        Length of the target along the track. [m]
    footprint_along : array_like
        Footprint along the track at the target's range. [m]
    hits : array_like
        Number of pings. [1]
    ping_interval : array_like
        Time from one ping to the next. [s]

    Returns
    -------
    numpy.ndarray
        Speed over the ground: the vessel must stay under it. Infinite for one ping. [m/s]

    References
    ----------
    .. [1] IHO C-13, chapter 4, eq. 4.1, turned round.

    Examples
    --------
    >>> float(greatest_speed_possible(1.0, 0.5, 3, 0.25))
    3.0
    """
    (hits,) = floats(hits)
    return greatest_speed(target_length, footprint_along, hits - 1.0, ping_interval)


def greatest_ping_interval(
    target_length: ArrayLike, footprint_along: ArrayLike, hits: ArrayLike, speed: ArrayLike
) -> FloatArray:
    """Longest interval at which a target still always receives a number of pings.

    Parameters
    ----------
    target_length : array_like
        Length of the target along the track. [m]
    footprint_along : array_like
        Footprint along the track at the target's range. [m]
    hits : array_like
        Number of pings. [1]
    speed : array_like
        Speed over the ground. [m/s]

    Returns
    -------
    numpy.ndarray
        Time from one ping to the next. [s]

    References
    ----------
    .. [1] IHO C-13, chapter 4, eq. 4.2, turned round.

    Examples
    --------
    >>> float(greatest_ping_interval(1.0, 0.5, 3, 2.0))
    0.25
    """
    return greatest_speed(target_length, footprint_along, hits, speed)


def unseen_ground(ping_spacing: ArrayLike, footprint_along: ArrayLike) -> FloatArray:
    """Length of ground between the footprints of two pings that neither covers.

    Parameters
    ----------
    ping_spacing : array_like
        Distance over the ground from one ping to the next. [m]
    footprint_along : array_like
        Footprint along the track. [m]

    Returns
    -------
    numpy.ndarray
        Length along the track, zero where the footprints touch. [m]

    Examples
    --------
    >>> float(unseen_ground(1.5, 1.0)), float(unseen_ground(0.5, 1.0))
    (0.5, 0.0)
    """
    ping_spacing, footprint_along = floats(ping_spacing, footprint_along)
    unseen: FloatArray = np.maximum(ping_spacing - footprint_along, 0.0)
    return unseen


def outer_ping_spacing(
    ping_spacing: ArrayLike, across_distance: ArrayLike, heading_change: ArrayLike
) -> FloatArray:
    """Spacing of the pings far out on the outer side of a turn.

    Parameters
    ----------
    ping_spacing : array_like
        Distance over the ground from one ping to the next, at the transducer. [m]
    across_distance : array_like
        Distance across the track of the outer beam. [m]
    heading_change : array_like
        Change of heading from one ping to the next. [deg]

    Returns
    -------
    numpy.ndarray
        Distance along the track from one ping to the next, on the outer side. [m]

    Examples
    --------
    >>> round(float(outer_ping_spacing(0.5, 100.0, 0.5)), 4)
    1.3727
    """
    ping_spacing, across_distance, heading_change = floats(
        ping_spacing, across_distance, heading_change
    )
    wider: FloatArray = ping_spacing + np.abs(across_distance * np.deg2rad(heading_change))
    return wider


def guaranteed_beams(
    target_width: ArrayLike, footprint_across: ArrayLike, beam_spacing: ArrayLike
) -> FloatArray:
    """Beams of one ping that fall on a target wherever it lies across the track.

    Parameters
    ----------
    target_width : array_like
        Width of the target across the track. [m]
    footprint_across : array_like
        Footprint across the track. [m]
    beam_spacing : array_like
        Distance across the track between neighbouring beams. [m]

    Returns
    -------
    numpy.ndarray
        Whole number of beams. [1]

    References
    ----------
    .. [1] IHO C-13, chapter 4, eq. 4.2, applied across the track.

    Examples
    --------
    >>> float(guaranteed_beams(1.0, 0.6, 0.5))
    3.0
    """
    return guaranteed_hits(target_width, footprint_across, beam_spacing)


def possible_beams(
    target_width: ArrayLike, footprint_across: ArrayLike, beam_spacing: ArrayLike
) -> FloatArray:
    """Beams of one ping that fall on a target where it lies best across the track.

    Parameters
    ----------
    target_width : array_like
        Width of the target across the track. [m]
    footprint_across : array_like
        Footprint across the track. [m]
    beam_spacing : array_like
        Distance across the track between neighbouring beams. [m]

    Returns
    -------
    numpy.ndarray
        Whole number of beams. [1]

    References
    ----------
    .. [1] IHO C-13, chapter 4, eq. 4.1, applied across the track.

    Examples
    --------
    >>> float(possible_beams(1.0, 0.6, 0.5))
    4.0
    """
    return possible_hits(target_width, footprint_across, beam_spacing)


def detection_confidence(
    hits: ArrayLike, detections_needed: ArrayLike, chance_per_hit: ArrayLike
) -> FloatArray:
    """Chance that enough of the pings that fall on a target give a detection.

    Parameters
    ----------
    hits : array_like
        Pings that fall on the target. [1]
    detections_needed : array_like
        Detections that make a contact. [1]
    chance_per_hit : array_like
        Chance that one ping on the target gives a detection, pings being independent. [1]

    Returns
    -------
    numpy.ndarray
        Chance, from 0 to 1. [1]

    References
    ----------
    .. [1] Binomial distribution.

    Examples
    --------
    >>> round(float(detection_confidence(5, 3, 0.9)), 5)
    0.99144
    """
    from scipy.special import betainc

    hits, needed, chance = floats(hits, detections_needed, chance_per_hit)
    with np.errstate(invalid="ignore"):
        regular = betainc(np.maximum(needed, 1.0), np.maximum(hits - needed + 1.0, 1.0), chance)
    confidence = chosen(needed <= 0.0, 1.0, chosen(hits >= needed, regular, 0.0))
    return chosen(np.isnan(hits + needed + chance), np.nan, confidence)
