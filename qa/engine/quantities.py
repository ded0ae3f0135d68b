"""The table that registers physics functions under the names that rules use.

A quantity is added by one call of :func:`quantity`: its function's parameters name what it needs. A name may
have several recipes; :mod:`qa.engine.plans` chooses among them.
"""

from __future__ import annotations

import inspect
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np

from qa.engine import alongline
from qa.engine.expressions import Symbol
from qa.model.columns import COLUMNS, PULSE_FORMS, SONAR_KINDS
from qa.model.survey_file import STATED
from qa.model.units import ONE, SECOND, Unit, conversion
from qa.physics import beams, hits, pulse


@dataclass(frozen=True, slots=True)
class Recipe:
    """One way to a quantity.

    ``needs`` name its inputs, quantities or reductions such as "greatest(slant_range)"; ``optional`` those that
    may be missing, of which one in ``any_of`` must be had. ``kinds`` are the sonars that it is for, none meaning all; ``only`` says the same of other choices, such as
    ``{"depth_from": "datum"}``. ``first`` puts it before every
    other recipe, whatever its inputs' origin. ``whole_line`` functions see all pings of a line and channel at
    once; ``within_ping`` functions also take ``groups``, how a batch's beams fall into pings. ``assumes`` is what taking this way supposes, listed on the report; a ``guess`` ranks as assumed.
    """

    name: str
    function: Callable[..., Any]
    unit: Unit
    needs: tuple[str, ...]
    parameters: tuple[str, ...]
    positional: bool
    optional: tuple[str, ...]
    any_of: tuple[str, ...]
    kinds: tuple[str, ...]
    only: tuple[tuple[str, str], ...]
    first: bool
    whole_line: bool
    within_ping: bool
    assumes: str
    guess: bool
    about: str
    source: str
    formula: str


RECIPES: dict[str, list[Recipe]] = {}
"""Every recipe by the name of its quantity, in the order they are tried."""


def quantity(
    name: str,
    function: Callable[..., Any],
    *,
    unit: str,
    needs: tuple[str, ...] | None = None,
    kinds: tuple[str, ...] = (),
    only: Mapping[str, str] | None = None,
    first: bool = False,
    any_of: tuple[str, ...] = (),
    whole_line: bool = False,
    within_ping: bool = False,
    assumes: str = "",
    guess: bool = False,
    about: str = "",
    source: str = "",
    formula: str = "",
) -> None:
    """Register a way to a quantity.

    Parameters
    ----------
    name : str
        Name that rules use.
    function : callable
        Takes arrays and numbers in SI, gives one value for each ping or beam. A parameter with a default is
        an input that may be missing.
    unit : str
        Unit of the result.
    needs : tuple of str, optional
        Names of the inputs, in the order of the function's parameters; the parameters' own names if left out.
        A function of ``*args`` takes any number, none of which may be missing.
    """
    every = inspect.signature(function).parameters.values()
    positional = any(p.kind is p.VAR_POSITIONAL for p in every)
    parameters = [
        p
        for p in every
        if p.kind in (p.POSITIONAL_ONLY, p.POSITIONAL_OR_KEYWORD)
        and not (within_ping and p.name == "groups")
    ]
    names = needs if needs is not None else tuple(p.name for p in parameters)
    if len(names) > len(parameters) and not positional:
        raise ValueError(f"{name} is given more inputs than its function takes.")
    optional = tuple(n for n, p in zip(names, parameters, strict=False) if p.default is not p.empty)
    lines = (inspect.getdoc(function) or "").strip().splitlines()
    recipe = Recipe(
        name,
        function,
        conversion(unit).unit,
        names,
        tuple(p.name for p in parameters[: len(names)]),
        positional,
        optional,
        any_of,
        kinds,
        tuple((only or {}).items()),
        first,
        whole_line,
        within_ping,
        assumes,
        guess,
        about or (lines[0] if lines else ""),
        source,
        formula,
    )
    known = RECIPES.setdefault(name, [])
    if known and known[0].unit != recipe.unit:
        raise ValueError(f"{name} is registered in {known[0].unit} already, not in {recipe.unit}.")
    known.append(recipe)


MEASURED: dict[str, Unit] = {"time_resolution": SECOND, "cast": ONE}
"""What is known of a line beside its columns: the step of its clock, and the survey's sound speed cast."""


def symbol(name: str) -> Symbol | None:
    """What a quantity's name means to the compiler of expressions, or None."""
    if name in MEASURED:
        return Symbol(MEASURED[name])
    if name in _TEXTS:
        return Symbol(ONE, "text", _TEXTS[name])
    if name in RECIPES:
        return Symbol(RECIPES[name][0].unit)
    column = COLUMNS.get(name)
    if column is not None:
        return Symbol(column.unit) if column.kind in ("number", "flag") else None
    for keys in STATED.values():
        if name in keys:
            meant = keys[name]
            return Symbol(meant) if isinstance(meant, Unit) else Symbol(ONE)
    return None


_TEXTS: dict[str, tuple[str, ...]] = {
    "kind": SONAR_KINDS,
    "pulse_form": PULSE_FORMS,
    "beam_angle_from": ("vertical", "array", "horizontal"),
    "receive_array": ("flat", "curved"),
    "depth_from": ("waterline", "transducer", "datum"),
    "focus": ("none", "dynamic"),
}


def names() -> list[str]:
    """All quantities' names."""
    stated = [key for keys in STATED.values() for key in keys]
    return sorted(
        {
            *RECIPES,
            *_TEXTS,
            *stated,
            *(c.name for c in COLUMNS.values() if c.kind in ("number", "flag")),
        }
    )


def quantity_unit(name: str) -> Unit:
    """Unit of a quantity; a pure number for one that is a text or not known."""
    found = symbol(name)
    return found.unit if found else ONE


def is_stated_key(name: str) -> bool:
    """Whether a survey file may state it."""
    return any(name in keys for keys in STATED.values())


MULTIBEAM, SINGLE_BEAM, SIDE_SCAN = SONAR_KINDS
_ECHO_SOUNDERS = (MULTIBEAM, SINGLE_BEAM)


# Angles, heights and ranges


def as_logged(value: Any) -> Any:
    """The value as it is."""
    return value


def angle_from_horizontal(beam_angle: Any) -> Any:
    """Angle of a beam from the vertical, from a depression angle that carries its side as its sign."""
    return np.sign(beam_angle) * (90.0 - np.abs(beam_angle))


def height_from_datum(depth: Any, tide: Any, transducer_depth: Any, heave: Any) -> Any:
    """Height of the transducer over the seabed, from a depth below the datum; heave is positive up."""
    return depth + tide - transducer_depth + heave


_BETA = "Angle of a beam from the vertical, starboard positive."
_BETA_ARRAY = "Angle of a beam from the ship's own downward axis, starboard positive."
for _from, _function, _needs in (
    ("vertical", as_logged, ("beam_angle",)),
    ("array", beams.vertical_angle, ("beam_angle", "roll")),
    ("horizontal", angle_from_horizontal, ("beam_angle",)),
):
    quantity(
        "angle_from_vertical",
        _function,
        unit="deg",
        needs=_needs,
        only={"beam_angle_from": _from},
        about=_BETA,
        source="C-13 ch. 3",
        formula="β = β_array − roll" if _from == "array" else "",
    )
quantity(
    "angle_from_array",
    as_logged,
    unit="deg",
    needs=("beam_angle",),
    only={"beam_angle_from": "array"},
    about=_BETA_ARRAY,
)
for _from in ("vertical", "horizontal"):
    quantity(
        "angle_from_array",
        beams.array_angle,
        unit="deg",
        needs=("angle_from_vertical", "roll"),
        only={"beam_angle_from": _from},
        about=_BETA_ARRAY,
        formula="β_array = β + roll",
        source="C-13 ch. 3",
    )
_HEIGHT = "Height of the transducer over the seabed at the beam's footprint."
quantity(
    "height",
    lambda depth, transducer_depth: depth - transducer_depth,
    unit="m",
    kinds=_ECHO_SOUNDERS,
    only={"depth_from": "waterline"},
    about=_HEIGHT,
    formula="z = depth − transducer depth",
)
quantity(
    "height",
    as_logged,
    unit="m",
    needs=("depth",),
    kinds=_ECHO_SOUNDERS,
    only={"depth_from": "transducer"},
    about=_HEIGHT,
    formula="z = depth",
)
quantity(
    "height",
    height_from_datum,
    unit="m",
    kinds=_ECHO_SOUNDERS,
    only={"depth_from": "datum"},
    about=_HEIGHT,
    formula="z = depth + tide − transducer depth + heave",
)
quantity(
    "height",
    beams.height_from_range,
    unit="m",
    needs=("slant_range", "angle_from_vertical"),
    kinds=_ECHO_SOUNDERS,
    formula="R·cos β",
)
quantity(
    "height",
    as_logged,
    unit="m",
    needs=("altitude",),
    about="Height of the transducer over the seabed.",
)
quantity(
    "altitude",
    as_logged,
    unit="m",
    needs=("nearest_vertical(height)",),
    kinds=_ECHO_SOUNDERS,
    about="Height of the transducer over the seabed under it.",
)
quantity(
    "altitude",
    lambda depth, transducer_depth: depth - transducer_depth,
    unit="m",
    needs=("depth", "logged(transducer_depth)"),
    kinds=(SIDE_SCAN,),
    about="Depth of the water less the depth of the towed body.",
)
quantity(
    "slant_range",
    pulse.slant_range_from_time,
    unit="m",
    needs=("logged(two_way_time)", "mean_sound_speed"),
    kinds=_ECHO_SOUNDERS,
    first=True,
    formula="R = c·t/2",
    source="C-13 §2.3.6.3",
)
quantity(
    "slant_range",
    beams.slant_range_from_height,
    unit="m",
    needs=("height", "angle_from_vertical"),
    kinds=_ECHO_SOUNDERS,
    formula="R = z/cos β",
)
quantity(
    "depth",
    lambda height, transducer_depth: height + transducer_depth,
    unit="m",
    needs=("height", "transducer_depth"),
    kinds=_ECHO_SOUNDERS,
    about="Depth below the waterline.",
)
quantity(
    "mean_sound_speed",
    as_logged,
    unit="m/s",
    needs=("sound_speed",),
    assumes="one sound speed serves both the transducer and the whole way down",
    about="Speed of sound that turns times into ranges: the harmonic mean to the depth.",
)

# Pulses


def is_frequency_modulated(pulse_form: Any) -> Any:
    """Truth of a logged or stated pulse form: 1 for FM, 0 for CW, NaN where it is not known."""
    if isinstance(pulse_form, str):
        return float(PULSE_FORMS.index(pulse_form))
    return pulse_form


def range_resolution(
    pulse_length: Any, sound_speed: Any, pulse_form: Any, bandwidth: Any = np.nan
) -> Any:
    """Smallest separation along the beam at which two echoes stay apart.

    CW: half the pulse width in water. FM, after the matched filter: c/(2B).
    """
    modulated = is_frequency_modulated(pulse_form)
    plain = pulse.range_resolution_cw(pulse_length, sound_speed)
    swept = pulse.range_resolution_fm(bandwidth, sound_speed)
    return np.where(modulated == 1.0, swept, np.where(modulated == 0.0, plain, np.nan))


def range_resolution_by_form_unknown(
    pulse_length: Any, sound_speed: Any, bandwidth: Any = np.nan
) -> Any:
    """Smallest separation along the beam at which two echoes stay apart; the pulse's form is not known.

    Taken as CW where bandwidth times pulse length is 2 at most or is not known, else not known.
    """
    swept = np.asarray(bandwidth * pulse_length, dtype=float) > 2.0
    return np.where(swept, np.nan, pulse.range_resolution_cw(pulse_length, sound_speed))


quantity("wavelength", pulse.wavelength, unit="m", source="λ = c/f", formula="c/f")
quantity(
    "pulse_width",
    pulse.pulse_width,
    unit="m",
    needs=("pulse_length", "mean_sound_speed"),
    formula="c·τ",
    source="C-13 §5.1.1.3",
)
quantity(
    "range_resolution",
    range_resolution,
    unit="m",
    needs=("pulse_length", "mean_sound_speed", "pulse_form", "bandwidth"),
    first=True,
    formula="CW c·τ/2; FM c/(2B)",
    source="C-13 §5.1.1.3",
)
quantity(
    "range_resolution",
    lambda sound_speed, pulse_form, bandwidth: np.where(
        is_frequency_modulated(pulse_form) == 1.0,
        pulse.range_resolution_fm(bandwidth, sound_speed),
        np.nan,
    ),
    unit="m",
    needs=("mean_sound_speed", "pulse_form", "bandwidth"),
    formula="FM c/(2B)",
    source="C-13 §5.1.1.3",
    about="Smallest separation along the beam at which two echoes stay apart; the length of the pulse is not known, so only that of FM pulses.",
)
quantity(
    "range_resolution",
    range_resolution_by_form_unknown,
    unit="m",
    needs=("pulse_length", "mean_sound_speed", "bandwidth"),
    assumes="pulses of unknown form are taken as CW where B·τ ≤ 2 or is not known, else not assessed",
    formula="c·τ/2",
    source="C-13 §5.1.1.3",
)

# Times

quantity(
    "ping_interval", alongline.ping_interval, unit="s", whole_line=True, formula="t[i+1] − t[i]"
)
quantity("ping_span", alongline.ping_span, unit="s", whole_line=True, formula="t[i+k] − t[i]")
quantity("interval_per_ping", alongline.interval_per_ping, unit="s", formula="ping_span/k")
quantity("typical_interval", alongline.typical_interval, unit="s", whole_line=True)
quantity(
    "farthest_range",
    as_logged,
    unit="m",
    needs=("range_scale",),
    first=True,
    about="Farthest slant range that is listened for: the range scale.",
    source="C-13 ch. 4 §2.3.6.3",
)
quantity(
    "farthest_range",
    as_logged,
    unit="m",
    needs=("greatest(slant_range)",),
    kinds=_ECHO_SOUNDERS,
    about="Farthest slant range of the ping's accepted beams.",
)
quantity(
    "two_way_travel_time",
    pulse.two_way_travel_time,
    unit="s",
    needs=("farthest_range", "mean_sound_speed"),
    formula="2R/c",
    source="C-13 ch. 4 §2.3.6.3",
)
quantity(
    "bottom_travel_time",
    pulse.two_way_travel_time,
    unit="s",
    needs=("greatest(slant_range)", "mean_sound_speed"),
    kinds=_ECHO_SOUNDERS,
    formula="2R/c of the farthest accepted beam",
    about="Two-way travel time to the farthest accepted beam's seabed.",
    source="C-13 ch. 4 §2.3.6.3",
)
quantity(
    "bottom_travel_time",
    pulse.two_way_travel_time,
    unit="s",
    needs=("altitude", "mean_sound_speed"),
    kinds=(SIDE_SCAN,),
    formula="2z/c",
    about="Two-way travel time to the seabed below.",
    source="C-13 ch. 4 §2.3.6.3",
)
quantity(
    "listening_time",
    pulse.listening_time,
    unit="s",
    formula="2R/c + τ",
    source="C-13 ch. 4 §2.3.6.3",
)
quantity(
    "fastest_ping_rate",
    pulse.fastest_ping_rate,
    unit="Hz",
    formula="k/(2R/c + τ)",
    source="C-13 ch. 4 §2.3.6.3",
)
quantity("usual_interval", alongline.usual_interval, unit="s")
quantity("interval_as_sent", alongline.interval_as_sent, unit="s", whole_line=True)
quantity("stamped_on_arrival", alongline.stamped_on_arrival, unit="1", whole_line=True)
quantity("clock_fault", alongline.clock_fault, unit="1", whole_line=True)

# Footprints


quantity(
    "beamwidth_across",
    as_logged,
    unit="deg",
    needs=("beamwidth_along",),
    kinds=(SINGLE_BEAM,),
    assumes="the single beam is as wide across as it is along",
    guess=True,
    about="Beam width across the track, of a round transducer.",
)
quantity(
    "beamwidth_along",
    as_logged,
    unit="deg",
    needs=("beamwidth_across",),
    kinds=(SINGLE_BEAM,),
    assumes="the single beam is as wide along as it is across",
    guess=True,
    about="Beam width along the track, of a round transducer.",
)
quantity(
    "receive_beamwidth",
    beams.steered_beamwidth,
    unit="deg",
    needs=("beamwidth_across", "angle_from_array", "mount_angle"),
    kinds=(MULTIBEAM,),
    only={"receive_array": "flat"},
    formula="φ/cos(β_array − mount)",
    source="C-13 eq. 3.33",
)
quantity(
    "receive_beamwidth",
    as_logged,
    unit="deg",
    needs=("beamwidth_across",),
    kinds=(MULTIBEAM,),
    only={"receive_array": "curved"},
    about="Receive beam width across the track, of an array that is curved and need not steer.",
)
quantity(
    "receive_beamwidth",
    as_logged,
    unit="deg",
    needs=("beamwidth_across",),
    kinds=(SINGLE_BEAM,),
    about="Beam width across the track.",
)
quantity(
    "footprint_along",
    beams.footprint_along,
    unit="m",
    formula="2R·tan(φ/2)",
    source="C-13 eq. 3.37",
)
quantity(
    "footprint_across",
    beams.footprint_across,
    unit="m",
    needs=("height", "angle_from_vertical", "receive_beamwidth"),
    kinds=_ECHO_SOUNDERS,
    formula="z·[tan(β+φ/2) − tan(β−φ/2)]",
    source="C-13 eq. 3.35, exact",
)
quantity(
    "across_resolution",
    as_logged,
    unit="m",
    needs=("footprint_across",),
    kinds=_ECHO_SOUNDERS,
    formula="z·[tan(β+φ/2) − tan(β−φ/2)]",
    about="Ground across the track that one sounding averages over: the beam-limited footprint.",
    source="C-13 eq. 3.35, exact",
)
quantity(
    "across_resolution",
    beams.pulse_limited_across,
    unit="m",
    needs=("slant_range", "altitude", "range_resolution"),
    kinds=(SIDE_SCAN,),
    formula="√((R+δ)²−z²) − √(R²−z²)",
    source="C-13 eq. 3.16, flat seabed",
)
quantity(
    "footprint",
    lambda along, across: np.maximum(along, across),
    unit="m",
    needs=("footprint_along", "footprint_across"),
    about="The larger of the along and across footprints.",
)
quantity(
    "narrowest_footprint_along",
    as_logged,
    unit="m",
    needs=("least(footprint_along)",),
    about="Along-track footprint of the ping's narrowest accepted beam.",
)
quantity(
    "nadir_footprint_along",
    as_logged,
    unit="m",
    needs=("nearest_vertical(footprint_along)",),
    about="Along-track footprint of the beam nearest the vertical; side-scan, at the near range.",
)

# Ground covered along the line

quantity("speed", alongline.speed_from_positions, unit="m/s", whole_line=True)
quantity("speed", alongline.speed_from_grid, unit="m/s", whole_line=True)
quantity(
    "ping_spacing",
    hits.ping_spacing,
    unit="m",
    needs=("speed", "interval_per_ping"),
    formula="V·t, t = ping_span/k",
    source="C-13 ch. 4 §2.3.6",
)
quantity("distance", alongline.distance_along, unit="m", whole_line=True)
quantity(
    "guaranteed_hits",
    hits.guaranteed_hits,
    unit="1",
    needs=("target_size", "narrowest_footprint_along", "ping_spacing"),
    formula="⌊(L + R·φ)/(V·t)⌋",
    source="C-13 eq. 4.2",
)
quantity(
    "possible_hits",
    hits.possible_hits,
    unit="1",
    needs=("target_size", "narrowest_footprint_along", "ping_spacing"),
    formula="C-13 eq. 4.1",
    source="C-13 eq. 4.1",
)
quantity(
    "unseen_ground",
    hits.unseen_ground,
    unit="m",
    needs=("ping_spacing", "nadir_footprint_along"),
    about="Ground between the footprints of consecutive pings under the sonar.",
)

# What would pass: the numbers of remedies

quantity(
    "longest_pulse",
    pulse.longest_pulse_for_resolution,
    unit="s",
    needs=("target_size", "mean_sound_speed"),
    formula="2·target/c",
    source="C-13 §5.1.1.3",
)
quantity(
    "least_bandwidth",
    pulse.least_bandwidth_for_resolution,
    unit="Hz",
    needs=("target_size", "mean_sound_speed"),
    formula="c/(2·target)",
)
quantity(
    "longest_range", pulse.unambiguous_range, unit="m", needs=("ping_span", "mean_sound_speed")
)
quantity(
    "greatest_spacing",
    hits.greatest_ping_spacing,
    unit="m",
    needs=("target_size", "narrowest_footprint_along", "hits_required"),
    formula="(L + R·φ)/N",
    source="C-13 eq. 4.2",
)
