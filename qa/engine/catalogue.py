"""Quantities of the wider catalogue: swath, echoes, soundings, water, platform, uncertainty.

Registered like those of :mod:`qa.engine.quantities`; the functions with a body of their own stand in modules by idea.
"""

from __future__ import annotations

from typing import Any

import numpy as np

from qa.engine import alongline, platform, sonar_equation, soundings
from qa.engine.quantities import MULTIBEAM, SIDE_SCAN, SINGLE_BEAM, as_logged, quantity
from qa.physics import beams, echoes, hits, pulse, rays, uncertainty, water

_ECHO_SOUNDERS = (MULTIBEAM, SINGLE_BEAM)

# Water


def sound_speed_from_water(temperature: Any, salinity: Any) -> Any:
    """Speed of sound at the transducer, by the formula that suits the water there."""
    return water.sound_speed(temperature, salinity, 0.0)


def speed_of_cast(cast: Any, transducer_depth: Any) -> Any:
    """Speed of sound that the cast gives at the transducer."""
    return rays.speed_at_depth(
        cast.depth, cast.sound_speed, np.maximum(transducer_depth, cast.depth[0])
    )


def mean_speed_of_cast(cast: Any, transducer_depth: Any, height: Any) -> Any:
    """Harmonic mean of the cast from the transducer down to the seabed under it."""
    top = np.maximum(transducer_depth, cast.depth[0])
    return water.harmonic_mean_sound_speed(
        cast.depth, cast.sound_speed, top, top + np.maximum(height, 0.1)
    )


def depth_error_of_change(
    cast: Any,
    sound_speed: Any,
    cast_sound_speed: Any,
    transducer_depth: Any,
    height: Any,
    outer_angle: Any,
) -> Any:
    """Depth error of the outermost beam, by rays, if the whole cast had changed as the probe has since.

    Pings alike in change (0.1 m/s), height (2 %) and angle (1°) are traced once.
    """
    shape = np.broadcast_shapes(
        *(np.shape(v) for v in (sound_speed, cast_sound_speed, height, outer_angle))
    )
    change = np.broadcast_to(np.round(np.asarray(sound_speed) - cast_sound_speed, 1), shape).ravel()
    with np.errstate(invalid="ignore", divide="ignore"):
        step = np.broadcast_to(np.round(np.log(height) / 0.02), shape).ravel()
    angle = np.broadcast_to(np.round(outer_angle), shape).ravel()
    rows = np.column_stack([change, step, angle])
    known = np.isfinite(rows).all(axis=1)
    found = np.full(len(rows), np.nan)
    if known.any():
        unique, back = np.unique(rows[known], axis=0, return_inverse=True)
        top = max(float(np.nanmax(transducer_depth)), float(cast.depth[0]))
        true = cast.sound_speed + unique[:, :1]
        used = np.broadcast_to(cast.sound_speed, true.shape)
        depths = np.broadcast_to(cast.depth, true.shape)
        error = rays.sounding_error(
            depths,
            used,
            depths,
            true,
            np.full(len(unique), top),
            unique[:, 2],
            top + np.exp(0.02 * unique[:, 1]),
        )
        found[known] = np.abs(error.depth)[back.ravel()]
    return found.reshape(shape)


quantity(
    "sound_speed",
    sound_speed_from_water,
    unit="m/s",
    source="UNESCO 44, Del Grosso or Marczak, by the water",
    formula="c(T, S)",
)
quantity(
    "sound_speed", speed_of_cast, unit="m/s", about="Speed of sound at the transducer, of the cast."
)
quantity("cast_sound_speed", speed_of_cast, unit="m/s")
quantity(
    "sound_speed_of_water",
    sound_speed_from_water,
    unit="m/s",
    needs=("logged(temperature)", "salinity"),
    source="UNESCO 44, Del Grosso or Marczak, by the water",
    formula="c(T, S)",
)
quantity(
    "mean_sound_speed",
    mean_speed_of_cast,
    unit="m/s",
    needs=("cast", "transducer_depth", "nearest_vertical(height)"),
    kinds=_ECHO_SOUNDERS,
    first=True,
    source="harmonic mean",
    formula="Δz / Σ(δz/c)",
)
quantity(
    "mean_sound_speed",
    mean_speed_of_cast,
    unit="m/s",
    needs=("cast", "transducer_depth", "altitude"),
    kinds=(SIDE_SCAN,),
    first=True,
    source="harmonic mean",
    formula="Δz / Σ(δz/c)",
)
quantity(
    "change_depth_error",
    depth_error_of_change,
    unit="m",
    needs=(
        "cast",
        "logged(sound_speed)",
        "cast_sound_speed",
        "transducer_depth",
        "nearest_vertical(height)",
        "outer_angle",
    ),
    source="rays through layers of constant gradient, C-13 eqs. 3.59–3.68",
)

# Depths


def below_datum(depth: Any, tide: Any) -> Any:
    """Depth below the datum: the measured one less the height of the tide."""
    return depth - tide


_REDUCED = "Depth below the datum, which limits that depend on depth go by."
quantity(
    "reduced_depth",
    as_logged,
    unit="m",
    needs=("depth",),
    only={"depth_from": "datum"},
    first=True,
    about=_REDUCED,
)
quantity(
    "reduced_depth",
    below_datum,
    unit="m",
    needs=("depth", "tide"),
    only={"depth_from": "waterline"},
    first=True,
    about=_REDUCED,
    formula="depth − tide",
)
quantity(
    "reduced_depth",
    as_logged,
    unit="m",
    needs=("depth",),
    only={"depth_from": "waterline"},
    about=_REDUCED,
    assumes="the tide is not known: depths below the waterline stand for depths below the datum",
)
quantity(
    "reduced_depth",
    lambda depth, transducer_depth, tide: depth + transducer_depth - tide,
    unit="m",
    only={"depth_from": "transducer"},
    first=True,
    about=_REDUCED,
    formula="depth + transducer depth − tide",
)
quantity(
    "reduced_depth",
    lambda depth, transducer_depth: depth + transducer_depth,
    unit="m",
    only={"depth_from": "transducer"},
    about=_REDUCED,
    assumes="the tide is not known: depths below the waterline stand for depths below the datum",
)

# Pulses and arrays

quantity("pulse_cycles", pulse.pulse_cycles, unit="1", formula="f·τ")
quantity(
    "blind_zone",
    pulse.blind_zone,
    unit="m",
    needs=("pulse_length", "mean_sound_speed"),
    formula="c·τ/2",
)
quantity(
    "nearest_range",
    as_logged,
    unit="m",
    needs=("least(slant_range)",),
    about="Slant range of the nearest ground that is wanted: of the nearest accepted beam, or a side-scan's near range.",
)
quantity(
    "array_length",
    beams.array_length_from_beamwidth,
    unit="m",
    needs=("wavelength", "beamwidth_along"),
    formula="50.76·λ/φ",
)
quantity(
    "far_field_range",
    beams.far_field_range,
    unit="m",
    formula="about L²/(4λ)",
    source="C-13 eq. 3.29",
)

# Swath


def width_between(port: Any, starboard: Any) -> Any:
    """Width of ground between the outermost accepted beams."""
    return starboard - port


def shown_share(accepted_share: Any, any_flag: Any) -> Any:
    """Share of a ping's beams that were accepted, where the log marks them at all."""
    return np.where(np.isnan(any_flag), np.nan, accepted_share)


quantity(
    "across_distance",
    beams.across_distance,
    unit="m",
    needs=("height", "angle_from_vertical"),
    kinds=_ECHO_SOUNDERS,
    formula="z·tan β",
)
quantity(
    "swath_width",
    width_between,
    unit="m",
    needs=("least(across_distance)", "greatest(across_distance)"),
    kinds=(MULTIBEAM,),
    source="C-13 eq. 3.38",
)
quantity(
    "swath_width",
    lambda farthest_range, altitude: beams.ground_range(farthest_range, altitude),
    unit="m",
    kinds=(SIDE_SCAN,),
    about="Width of ground on one side, out to the range scale.",
)
quantity(
    "accepted_share",
    shown_share,
    unit="1",
    needs=("share(accepted)", "greatest(logged(accepted))"),
    kinds=(MULTIBEAM,),
)
quantity(
    "beam_spacing",
    soundings.next_beam_distance,
    unit="m",
    within_ping=True,
    kinds=(MULTIBEAM,),
    formula="z·Δ(tan β)",
)
quantity(
    "guaranteed_beams",
    hits.guaranteed_beams,
    unit="1",
    needs=("target_size", "footprint_across", "beam_spacing"),
    kinds=(MULTIBEAM,),
    source="C-13 eq. 4.2, across the track",
)
quantity(
    "possible_beams",
    hits.possible_beams,
    unit="1",
    needs=("target_size", "footprint_across", "beam_spacing"),
    kinds=(MULTIBEAM,),
    source="C-13 eq. 4.1, across the track",
)
quantity(
    "outer_angle",
    as_logged,
    unit="deg",
    needs=("greatest(abs(angle_from_vertical))",),
    kinds=_ECHO_SOUNDERS,
    about="Angle of the outermost accepted beam from the vertical.",
)
quantity("turn", platform.turn, unit="deg", whole_line=True)


quantity(
    "outer_distance",
    as_logged,
    unit="m",
    needs=("greatest(abs(across_distance))",),
    kinds=_ECHO_SOUNDERS,
    about="Distance across the track of the outermost accepted beam.",
)
quantity(
    "outer_distance",
    beams.ground_range,
    unit="m",
    needs=("farthest_range", "altitude"),
    kinds=(SIDE_SCAN,),
    about="Distance across the track of the farthest ground.",
)
quantity(
    "outer_spacing",
    hits.outer_ping_spacing,
    unit="m",
    needs=("ping_spacing", "outer_distance", "turn"),
    formula="V·t + x·Δψ",
    source="C-13 ch. 4 §2.3.7; turn ours",
)
quantity(
    "outer_footprint_along",
    as_logged,
    unit="m",
    needs=("greatest(footprint_along)",),
    about="Along-track footprint of the ping's widest beam on the ground.",
)

# Echoes


quantity(
    "absorption",
    sonar_equation.absorption,
    unit="dB/m",
    source="Francois & Garrison 1982",
    assumes="absorption in water of 10 °C and salinity 35 where temperature or salinity are not known",
)
quantity("receiver_bandwidth", sonar_equation.receiver_bandwidth, unit="Hz", source="C-13 eq. 3.10")
quantity(
    "noise_level",
    lambda frequency, wind_speed, bandwidth: echoes.noise_level(
        echoes.ambient_noise(frequency, wind_speed), bandwidth
    ),
    unit="dB",
    needs=("frequency", "wind_speed", "receiver_bandwidth"),
    about="Level of wind and thermal noise in the receiver's band.",
    source="C-13 eq. 3.10; Mellen 1952",
)
quantity(
    "directivity_index",
    echoes.directivity_index_from_beamwidths,
    unit="dB",
    source="Urick, rectangular face",
)
quantity("processing_gain", sonar_equation.matched_gain, unit="dB", source="Lurton")
quantity(
    "wanted_range",
    as_logged,
    unit="m",
    needs=("farthest_range",),
    kinds=(SIDE_SCAN,),
    about="Farthest range from which an echo is wanted: a side-scan's range scale.",
)
quantity(
    "wanted_range",
    as_logged,
    unit="m",
    needs=("greatest(slant_range)",),
    kinds=_ECHO_SOUNDERS,
    about="Farthest range from which an echo is wanted: of the farthest accepted beam.",
)
quantity(
    "incidence_angle",
    beams.beam_angle_from_range,
    unit="deg",
    needs=("wanted_range", "altitude"),
    about="Angle at which sound meets a flat seabed at the farthest wanted range.",
    formula="acos(z/R)",
)
_SONAR = (
    *("source_level", "wanted_range", "incidence_angle", "absorption", "noise_level"),
    *("directivity_index", "beamwidth_along", "beamwidth_across", "range_resolution"),
    "detection_threshold",
)
_SEABED = ("processing_gain", "backscatter_normal", "backscatter_oblique")
_OF_SEABED = (*_SONAR, *_SEABED)
_OF_TARGET = (*_SONAR, "target_strength", *_SEABED)
for _whose, _all, _margin, _heard in (
    ("", _OF_SEABED, echoes.seabed_echo_margin, sonar_equation.seabed_heard_range),
    ("target_", _OF_TARGET, echoes.target_echo_margin, sonar_equation.target_heard_range),
):
    quantity(
        f"{_whose or 'echo_'}margin",
        _margin,
        unit="dB",
        needs=_all,
        source="C-13 eqs. 3.4–3.16",
    )
    quantity(
        f"{_whose}heard_range",
        _heard,
        unit="m",
        needs=("source_level", "altitude", "least_margin", *_all[3:]),
        source="C-13 eqs. 3.4–3.16",
        formula=f"the root of {_whose or 'echo_'}margin = least_margin",
    )
quantity(
    "detection_confidence",
    hits.detection_confidence,
    unit="1",
    needs=("guaranteed_hits", "detections_needed", "detection_chance"),
    source="binomial distribution",
)

# Soundings

quantity(
    "along_departure",
    soundings.along_departure,
    unit="1",
    needs=("nearest_vertical(height)",),
    whole_line=True,
    kinds=_ECHO_SOUNDERS,
)
quantity(
    "height_around",
    lambda height: alongline.running_median(height, soundings.ALONG_WINDOW),
    unit="m",
    needs=("nearest_vertical(height)",),
    whole_line=True,
    kinds=_ECHO_SOUNDERS,
    about="Median of the heights over the seabed of the 15 pings around.",
)
quantity("multiple_echo", soundings.multiple_echo, unit="1", whole_line=True)
quantity("along_spike", soundings.along_spike, unit="1", whole_line=True)
quantity(
    "across_departure",
    soundings.across_departure,
    unit="1",
    needs=("height", "accepted"),
    within_ping=True,
    kinds=(MULTIBEAM,),
)
quantity(
    "spike",
    lambda across, along: np.fmax(across, along),
    unit="1",
    needs=("greatest(across_departure)", "along_spike"),
    kinds=(MULTIBEAM,),
    about="Largest departure of a sounding from its neighbours across and along the track, as a share of the height.",
)
quantity(
    "spike",
    as_logged,
    unit="1",
    needs=("along_spike",),
    kinds=(SINGLE_BEAM,),
    about="Departure of a sounding from its neighbours along the track, as a share of the height.",
)
quantity(
    "depth_unchanged",
    platform.depth_frozen_seconds,
    unit="s",
    needs=("time", "nearest_vertical(depth)", "least(depth)", "greatest(depth)", "speed"),
    whole_line=True,
    kinds=_ECHO_SOUNDERS,
    about="How long the depths have stayed the same to the last digit, where they do not usually.",
)
quantity(
    "time_depth_difference",
    lambda height, time, speed, angle: (
        np.abs(height - 0.5 * speed * time * np.cos(np.radians(angle))) / np.abs(height)
    ),
    unit="1",
    needs=("computed_height", "logged(two_way_time)", "mean_sound_speed", "angle_from_vertical"),
    kinds=_ECHO_SOUNDERS,
    about="Difference between the logged depth and that of the two-way time and angle, as a share of the height.",
)
quantity(
    "fan_tilt",
    soundings.fan_tilt,
    unit="1",
    needs=("height", "angle_from_vertical", "accepted"),
    within_ping=True,
    kinds=(MULTIBEAM,),
)
quantity(
    "fan_curl",
    soundings.fan_curl,
    unit="1",
    needs=("height", "angle_from_vertical", "accepted"),
    within_ping=True,
    kinds=(MULTIBEAM,),
)
quantity(
    "swath_curl",
    soundings.lasting,
    unit="1",
    needs=("mean(fan_curl)",),
    whole_line=True,
    kinds=(MULTIBEAM,),
    about="How much of the height the outer beams turn up or down per square of the tangent, over 51 pings.",
)
quantity(
    "swath_wobble",
    soundings.wobble_gain,
    unit="1",
    needs=("time", "mean(fan_tilt)", "logged(roll)"),
    whole_line=True,
    kinds=(MULTIBEAM,),
)
for _from, _function, _needs in (
    (
        "waterline",
        lambda depth, transducer_depth: depth - transducer_depth,
        ("logged(depth)", "transducer_depth"),
    ),
    ("transducer", as_logged, ("logged(depth)",)),
    (
        "datum",
        lambda depth, tide, transducer_depth, heave: depth + tide - transducer_depth + heave,
        ("logged(depth)", "tide", "transducer_depth", "heave"),
    ),
):
    quantity(
        "computed_height",
        _function,
        unit="m",
        needs=_needs,
        only={"depth_from": _from},
        kinds=_ECHO_SOUNDERS,
        about="Height of the transducer over the seabed that the logged depth says.",
    )

# Platform

quantity(
    "ping_number_step", platform.number_step, unit="1", needs=("logged(ping)",), whole_line=True
)
_SETTINGS = tuple(
    f"logged({name})"
    for name in (
        *("frequency", "bandwidth", "pulse_length", "pulse_form"),
        *("range_scale", "source_level", "beamwidth_along", "beamwidth_across"),
    )
)
quantity(
    "settings_changed",
    platform.settings_changed,
    unit="1",
    needs=_SETTINGS,
    any_of=_SETTINGS,
    whole_line=True,
)
_MOTION = ("logged(roll)", "logged(pitch)", "logged(heave)")
quantity(
    "roll_rate",
    platform.rate,
    unit="deg/s",
    needs=("logged(roll)", "ping_interval", "typical_interval"),
    whole_line=True,
    about="How fast the vessel rolls from each ping to the next.",
)
quantity(
    "motion_share",
    platform.motion_share,
    unit="1",
    needs=(
        *_MOTION,
        "roll_rate",
        "roll_limit",
        "pitch_limit",
        "heave_limit",
        "roll_rate_limit",
    ),
    any_of=_MOTION,
)
quantity(
    "motion_frozen",
    platform.motion_frozen_seconds,
    unit="s",
    needs=("time", *_MOTION),
    any_of=_MOTION,
    whole_line=True,
)
quantity(
    "position_frozen",
    platform.position_frozen_seconds,
    unit="s",
    needs=("time", "latitude", "longitude", "logged(speed)"),
    whole_line=True,
)
quantity(
    "position_frozen",
    platform.position_frozen_seconds,
    unit="s",
    needs=("time", "easting", "northing", "logged(speed)"),
    whole_line=True,
)
quantity(
    "speed_disagreement",
    platform.speed_disagreement,
    unit="m/s",
    needs=("time", "latitude", "longitude", "logged(speed)"),
    whole_line=True,
)
quantity(
    "speed_disagreement",
    platform.speed_disagreement_on_grid,
    unit="m/s",
    needs=("time", "easting", "northing", "logged(speed)"),
    whole_line=True,
)
quantity("fix_speed", platform.fix_speed, unit="m/s", whole_line=True)
quantity("fix_speed", platform.fix_speed_on_grid, unit="m/s", whole_line=True)
quantity(
    "bottom_track_fault",
    platform.bottom_track_fault,
    unit="1",
    needs=("time", "logged(altitude)", "range_scale"),
    whole_line=True,
    kinds=(SIDE_SCAN,),
)

# Uncertainty

_SIGMAS = ("sound_speed_sigma", "surface_sound_speed_sigma", "roll_sigma", "pitch_sigma")
quantity(
    "vertical_uncertainty",
    lambda height, angle, speed, mean_sigma, surface_sigma, roll, pitch, heave, draught, squat, tide, bottom: (
        uncertainty.vertical_uncertainty(
            height,
            angle,
            speed,
            sound_speed_sigma=mean_sigma,
            surface_sound_speed_sigma=surface_sigma,
            roll_sigma=roll,
            pitch_sigma=pitch,
            heave_sigma=heave,
            draught_sigma=draught,
            squat_sigma=squat,
            tide_sigma=tide,
            range_sigma=bottom,
        )
    ),
    unit="m",
    needs=(
        "nearest_vertical(height)",
        "outer_angle",
        "sound_speed",
        *_SIGMAS,
        "heave_sigma",
        "draught_sigma",
        "squat_sigma",
        "tide_sigma",
        "range_sigma",
    ),
    kinds=_ECHO_SOUNDERS,
    about="Uncertainty of the outermost accepted beam's depth at 95 %, over a flat seabed.",
    source="C-13 eqs. 3.70–3.84; S-44 §2.7",
)
quantity(
    "horizontal_uncertainty",
    lambda height, angle, speed, mean_sigma, surface_sigma, roll, pitch, heading, position, bottom: (
        uncertainty.horizontal_uncertainty(
            height,
            angle,
            speed,
            position_sigma=position,
            sound_speed_sigma=mean_sigma,
            surface_sound_speed_sigma=surface_sigma,
            roll_sigma=roll,
            pitch_sigma=pitch,
            heading_sigma=heading,
            range_sigma=bottom,
        )
    ),
    unit="m",
    needs=(
        "nearest_vertical(height)",
        "outer_angle",
        "sound_speed",
        *_SIGMAS,
        "heading_sigma",
        "position_sigma",
        "range_sigma",
    ),
    kinds=_ECHO_SOUNDERS,
    about="Uncertainty of the outermost accepted beam's position at 95 %, over a flat seabed.",
    source="S-44 §2.7",
)
