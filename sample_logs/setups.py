"""What a survey file states for one log: the base tables, then every matching part, key by key."""

from __future__ import annotations

import math
import tomllib
from fnmatch import fnmatchcase
from pathlib import Path
from typing import Any

from logs import SI_PER_UNIT
from reckon import Setup


def si(value: Any) -> float:
    """ "60 us" → 6e-05; a bare number is taken as it is."""
    if isinstance(value, int | float):
        return float(value)
    number, _, unit = str(value).partition(" ")
    return float(number) * SI_PER_UNIT["kn" if unit == "kt" else unit]


def merged(survey: dict[str, Any], log: str) -> dict[str, Any]:
    """The tables that hold for the log at this path, relative to the survey file, with slashes."""
    tables = {
        name: dict(survey.get(name, {}))
        for name in ("survey", "sonar", "water", "vessel", "limits", "columns", "lines")
    }
    tables["depth_from"] = tables["survey"].get("depth_from", "waterline")
    for part in survey.get("part", []):
        if any(fnmatchcase(log, pattern) for pattern in part["logs"]):
            for name, value in part.items():
                if name == "logs":
                    continue
                if isinstance(value, dict):
                    tables[name].update(value)
                else:
                    tables[name] = value
    return tables


def setup_for(survey_path: Path, log: str) -> Setup:
    return setup_of(tomllib.loads(survey_path.read_text(encoding="utf-8")), log)


def setup_of(survey: dict[str, Any], log: str) -> Setup:
    tables = merged(survey, log)
    sonar, limits = tables["sonar"], tables["limits"]
    numbers = ("pulse_length", "bandwidth", "beamwidth_along", "beamwidth_across", "frequency")
    stated = {name: si(sonar[name]) for name in (*numbers, "transducer_depth") if name in sonar}
    footprint_limit = limits.get("footprint_limit")
    return Setup(
        kind=sonar["kind"],
        sound_speed=si(tables["water"]["sound_speed"]),
        target_size=si(limits["target_size"]) if "target_size" in limits else math.nan,
        hits_required=float(limits.get("hits_required", math.nan)),
        near_range=si(limits["near_range"]) if "near_range" in limits else math.nan,
        footprint_limit=None if footprint_limit is None else si(footprint_limit),
        stated=stated,
        pulse_form=sonar.get("pulse_form", "CW"),
        beam_angle_from=sonar.get("beam_angle_from", "vertical"),
        mount_angle=si(sonar.get("mount_angle", 0.0)),
        pings_in_water=int(sonar.get("pings_in_water", 1)),
        depth_from=tables["depth_from"],
    )
