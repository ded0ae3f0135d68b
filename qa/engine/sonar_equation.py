"""Quantities of the sonar equation: what the water and the receiver add, margins, and how far an echo is heard."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from qa.physics import beams, echoes, water

Floats = NDArray[np.floating[Any]]

HEIGHT_STEP = 0.005
"""Pings whose heights over the seabed differ by less, as a share, are solved once, for the greater height."""


def absorption(frequency: Any, temperature: Any = 10.0, salinity: Any = 35.0) -> Any:
    """Absorption of sound in the water, per metre; 10 °C and salinity 35 where they are not known."""
    return water.absorption_francois_garrison(frequency, temperature, salinity, 0.0)


def receiver_bandwidth(pulse_length: Any, pulse_form: Any = 0.0, bandwidth: Any = np.nan) -> Any:
    """Band that the receiver must let through: of a CW pulse the inverse of its length, of an FM pulse its sweep."""
    modulated = np.asarray(pulse_form == "FM" if isinstance(pulse_form, str) else pulse_form == 1.0)
    return np.where(modulated, bandwidth, 1.0 / np.asarray(pulse_length, dtype=float))


def matched_gain(pulse_length: Any, receiver_bandwidth: Any) -> Any:
    """What the matched filter gains: nothing for a CW pulse, whose band times length is one."""
    return np.maximum(echoes.processing_gain(receiver_bandwidth, pulse_length), 0.0)


def seabed_heard_range(source_level: Any, altitude: Any, least_margin: Any, *rest: Any) -> Floats:
    """Farthest range at which the seabed's echo still has the least margin, at each ping's height; 0 for none."""
    return _heard(echoes.seabed_echo_margin, source_level, altitude, least_margin, rest)


def target_heard_range(source_level: Any, altitude: Any, least_margin: Any, *rest: Any) -> Floats:
    """Farthest range at which the target's echo still has the least margin, at each ping's height; 0 for none."""
    return _heard(echoes.target_echo_margin, source_level, altitude, least_margin, rest)


def _heard(
    margin: Any, source_level: Any, altitude: Any, least_margin: Any, rest: tuple[Any, ...]
) -> Floats:
    shape = np.broadcast_shapes(*(np.shape(v) for v in (source_level, altitude, *rest)))
    with np.errstate(invalid="ignore", divide="ignore"):
        height = np.exp(HEIGHT_STEP * np.ceil(np.log(altitude) / HEIGHT_STEP))
    columns = [
        np.broadcast_to(np.asarray(v, dtype=float), shape).ravel()
        for v in (source_level, height, least_margin, *rest)
    ]
    rows = np.column_stack(columns)
    known = np.isfinite(rows).all(axis=1)
    found = np.full(len(rows), np.nan)
    if known.any():
        unique, back = np.unique(rows[known], axis=0, return_inverse=True)
        level, z, least = unique[:, 0], unique[:, 1], unique[:, 2]
        more = [unique[:, i] for i in range(3, unique.shape[1])]

        def above(ranges: Floats) -> Floats:
            angle = beams.beam_angle_from_range(np.maximum(ranges, z), z)
            found: Floats = np.asarray(margin(level, ranges, angle, *more), dtype=float) - least
            return found

        found[known] = echoes.greatest_range(above, shortest=z)[back.ravel()]
    return found.reshape(shape)
