"""Sound speed casts, read by the same machinery as logs and put in order from the top down."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from qa.ingest.names import TIME_PARTS, Binding, Header, Recognition, plain, recognise
from qa.ingest.small_table import SmallTable, read_small_table
from qa.model.cast import Cast
from qa.model.errors import InputError
from qa.model.log import NO_TIME
from qa.model.survey_file import ColumnChoices, SurveyFile

Floats = NDArray[np.float64]

_WANTED = ("depth", "sound_speed", "temperature", "salinity", "latitude", "longitude", "time")
_PRESSURES = frozenset(
    [
        "pressure",
        "press",
        "pres",
        "prdm",
        "prsm",
        "seapressure",
        "waterpressure",
        "absolutepressure",
        "gaugepressure",
        "p",
        "dbar",
        "pressuredbar",
        "pressuredb",
        "pressurebar",
    ]
)
_FORMS = "depth and sound speed, or depth, temperature and salinity"
_TREND = 0.8
"""Share of the steps that go one way, from which on a run of rows is a way down or up."""
_WHOLE = 0.8
"""Share of the whole span of depths that a way down or up covers, to be used alone."""


@np.errstate(over="ignore", invalid="ignore")
def read_cast(path: str | Path, survey: SurveyFile | None = None, shown: str = "") -> Cast:
    """Read a sound speed cast from CSV, Parquet or Arrow.

    Names, units, encodings, sentinels and the row account are those of logs. What [columns] of the survey file
    says is of logs and does not count here; a [[part]] whose ``logs`` match the cast does.

    A profiler that was lowered and hoisted passes every depth twice. The way down is used, since on the way up the
    sensor hangs in its own wake; the way up is used where the file holds nothing else. Rows at one depth become
    their mean. What was left out is counted as out of scope, and noted.

    Parameters
    ----------
    path : path
        The file.
    survey : SurveyFile, optional
        Its parts and its time zone.
    shown : str
        The file's name for messages; the path itself if left out.

    Returns
    -------
    Cast
        ``sound_speed`` is None where the file holds temperature and salinity only.

    Raises
    ------
    InputError
        If the file cannot be read, holds no depth (a pressure is not one), neither sound speed nor temperature
        and salinity, or fewer than two depths.
    """
    path = Path(path)
    where = shown or path.as_posix()
    choices, zone = _choices(path, survey)
    chooser = _Chooser(where, choices)
    try:
        table = read_small_table(
            path, where, chooser, choices.order, zone, choices.units.get("time", "")
        )
    except InputError as error:
        raise _in_a_part(error, path, where) from None
    return _cast(table, where)


def _choices(path: Path, survey: SurveyFile | None) -> tuple[ColumnChoices, str]:
    """What the survey file says of this file in particular."""
    if survey is None:
        return ColumnChoices(), "UTC"
    own = replace(survey, columns=ColumnChoices()).for_log(path)
    return own.columns, own.time_zone


def _in_a_part(error: InputError, path: Path, where: str) -> InputError:
    """The error with advice that fits a cast: its columns are named in a part of the survey file."""
    if error.message == "The file has no header.":
        advice = (
            "Put names above the columns, such as depth,sound_speed, or write order = "
            '["depth", "sound_speed"] under [part.columns] of a [[part]] of the survey file.'
        )
    elif "[columns" in error.advice:
        advice = (
            error.advice.replace("[columns.units]", "[part.columns.units]")
            .replace("[columns]", "[part.columns]")
            .replace("in the survey file", f'of a [[part]] with logs = ["{path.name}"]')
        )
    else:
        return error
    return InputError(
        error.message, where=where, found=error.found, expected=error.expected, advice=advice
    )


@dataclass(slots=True)
class _Chooser:
    """Picks a cast's columns out of a header."""

    where: str
    choices: ColumnChoices

    def __call__(self, headers: Sequence[Header]) -> Sequence[Binding]:
        found = recognise(headers, self.choices, self.where)
        roles = {b.role for b in found.bindings}
        names = ", ".join(f'"{h.name}"' for h in headers if h.name)[:300]
        if "depth" not in roles:
            self._refuse_depth(headers, found, names)
        if "sound_speed" not in roles and not {"temperature", "salinity"} <= roles:
            lacking = {"temperature", "salinity"} - roles
            message = (
                "The cast has no sound speed that is recognised."
                if len(lacking) == 2
                else f"The cast has no {lacking.pop()} that is recognised, and no sound speed."
            )
            raise InputError(
                message,
                where=self.where,
                found=f"columns {names}",
                expected=_FORMS,
                advice=_nearest_advice(found, "sound_speed", "temperature", "salinity"),
            )
        return [
            b
            for b in found.bindings
            if (b.role in _WANTED or b.role in TIME_PARTS) and b.number < 0
        ]

    def _refuse_depth(self, headers: Sequence[Header], found: Recognition, names: str) -> None:
        pressure = next((h.name for h in headers if _is_pressure(h.name)), None)
        if pressure is not None:
            raise InputError(
                "The cast gives pressure and no depth.",
                where=self.where,
                found=f'column "{pressure}"',
                expected=_FORMS,
                advice="Export the cast with depth in metres: a pressure becomes a depth only with the latitude and "
                "the water's density, which whoever made the cast knows.",
            )
        raise InputError(
            "The cast has no depth that is recognised.",
            where=self.where,
            found=f"columns {names}",
            expected=_FORMS,
            advice=_nearest_advice(found, "depth"),
        )


def _is_pressure(name: str) -> bool:
    head = name.partition("(")[0].partition("[")[0]
    return plain(head) in _PRESSURES or any(
        word in ("pressure", "pres", "press", "dbar")
        for word in head.lower().replace("_", " ").replace(".", " ").split()
    )


def _nearest_advice(found: Recognition, *roles: str) -> str:
    for advice in (*found.problems, *found.left_over.values()):
        if any(f"{role} =" in advice or f"be {role}" in advice for role in roles):
            return advice + " [columns]" if "[columns" not in advice else advice
    return f'Write {roles[0]} = "the column\'s name" under [columns] in the survey file.'


def _cast(table: SmallTable, where: str) -> Cast:
    _refuse_units(table)
    notes = list(table.notes)
    table.reject(np.isnan(table.values["depth"]), "no depth")
    if not len(table):
        raise InputError(
            "No row of the cast could be used.", where=where, found=table.reasons(), expected=_FORMS
        )
    speed = table.values.get("sound_speed")
    has_speed = speed is not None and not np.isnan(speed).all()
    if has_speed:
        table.reject(np.isnan(table.values["sound_speed"]), "no sound speed")
        kept = [k for k in ("sound_speed", "temperature", "salinity") if k in table.values]
    elif {"temperature", "salinity"} <= table.values.keys():
        for name in ("temperature", "salinity"):
            table.reject(np.isnan(table.values[name]), f"no {name}")
        kept = ["temperature", "salinity"]
    else:
        raise InputError(
            "The cast's sound speed is empty.",
            where=where,
            found=table.reasons() or "missing in every row",
            expected=_FORMS,
        )
    _refuse_short(table, where)
    notes += _one_way(table)
    depth, columns, shared = _ordered(table.values["depth"], {k: table.values[k] for k in kept})
    if shared:
        notes.append(f"{shared} rows share their depth with another; each depth has their mean.")
    notes += table.rejected_note()
    table.finish()
    table.account.notes.extend(notes)
    known = table.time[table.time != NO_TIME]
    for array in (depth, *columns.values()):
        array.flags.writeable = False
    return Cast(
        where,
        depth,
        columns.get("sound_speed"),
        columns.get("temperature"),
        columns.get("salinity"),
        int(known[0]) if len(known) else None,
        *_position(table),
        table.account,
        tuple(notes),
    )


_TYPICAL = {
    "sound_speed": (1300.0, 1700.0, "m/s", "ft/s"),
    "temperature": (-4.0, 45.0, "degC", "degF"),
}


def _refuse_units(table: SmallTable) -> None:
    """Depths positive up, or speeds in feet, reject nearly every row: one message says why."""
    read, reasons = table.account.rows_read, table.account.reasons
    if reasons.get("depth is negative", 0) > 0.5 * read:
        raise InputError(
            "The cast's depths are negative: they seem to be positive up.",
            where=table.where,
            found=f"{reasons['depth is negative']} of {read} depths below 0",
            expected="depths positive down",
            advice="Export the cast with depths positive down.",
        )
    for name, (low, high, unit, likely) in _TYPICAL.items():
        values = table.values.get(name)
        outside = sum(n for r, n in reasons.items() if r.startswith(name.replace("_", " ") + " "))
        typical = (
            np.nanmedian(values) if values is not None and not np.isnan(values).all() else np.nan
        )
        if outside > 0.5 * read or (np.isfinite(typical) and not low <= typical <= high):
            shown = f"typically {typical:g} {unit}" if np.isfinite(typical) else table.reasons()
            raise InputError(
                f"The cast's {name.replace('_', ' ')} cannot be in {unit}.",
                where=table.where,
                found=shown,
                expected=f"{low:g} to {high:g} {unit}",
                advice=f'Say the true unit in the header, for example "{name} [{likely}]".',
            )


def _refuse_short(table: SmallTable, where: str) -> None:
    distinct = len(np.unique(table.values["depth"]))
    if distinct < 2:
        raise InputError(
            "A cast needs two depths at least.",
            where=where,
            found=f"{distinct} with a value"
            + (f"; rejected: {table.reasons()}" if table.account.rows_rejected else ""),
            expected=_FORMS,
        )


def _one_way(table: SmallTable) -> list[str]:
    """Leave the way up out where there is a way down, or the other way round; say what was done."""
    depth = table.values["depth"]
    deepest = int(np.argmax(depth))
    span = float(depth.max() - depth.min())
    last = len(depth) - int(np.argmax(depth[::-1])) - 1
    down, up = depth[: deepest + 1], depth[last:]
    descends = _trend(down) and float(np.ptp(down)) >= _WHOLE * span
    ascends = _trend(-up) and float(np.ptp(up)) > 0.1 * span
    rows = np.arange(len(depth))
    if descends and (ascends or last == len(depth) - 1):
        after = rows > last
        if after.any():
            table.leave_out(after)
            return [f"The way down was used; {int(after.sum())} rows of the way up were left out."]
        return []
    if ascends and float(np.ptp(up)) >= _WHOLE * span:
        before = rows < deepest
        if before.any():
            table.leave_out(before)
            return [
                f"The way up was used, since the way down is not whole; {int(before.sum())} rows before it were left "
                "out."
            ]
        return ["The cast was logged from the bottom up."]
    return ["The rows do not go down in order; they were sorted by depth."]


def _trend(depth: Floats) -> bool:
    """Whether rows go down, but for the vessel's heave."""
    steps = np.diff(depth)
    steps = steps[steps != 0.0]
    if not len(steps):
        return False
    if float((steps > 0).mean()) >= _TREND:
        return True
    # Sampled fast in a swell a profiler moves back often, but comes down all the same.
    return len(steps) >= 30 and float(np.abs(steps).sum()) < 3.0 * float(depth[-1] - depth[0])


def _ordered(depth: Floats, columns: dict[str, Floats]) -> tuple[Floats, dict[str, Floats], int]:
    """Strictly increasing depths, each with the mean of its rows, and how many rows shared a depth."""
    distinct, place, counts = np.unique(depth, return_inverse=True, return_counts=True)
    found = {}
    for name, values in columns.items():
        known = ~np.isnan(values)
        total = np.bincount(place[known], weights=values[known], minlength=len(distinct))
        n = np.bincount(place[known], minlength=len(distinct))
        with np.errstate(invalid="ignore"):
            found[name] = total / n
    return distinct, found, int(counts[counts > 1].sum())


def _position(table: SmallTable) -> tuple[float | None, float | None]:
    if not {"latitude", "longitude"} <= table.values.keys():
        return None, None
    latitude, longitude = table.values["latitude"], table.values["longitude"]
    fixed = ~np.isnan(latitude) & ~np.isnan(longitude) & ~((latitude == 0.0) & (longitude == 0.0))
    if not fixed.any():
        return None, None
    first = int(np.argmax(fixed))
    return float(latitude[first]), float(longitude[first])
