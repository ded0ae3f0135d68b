"""The survey file: what is true of one survey, as its TOML says it."""

from __future__ import annotations

import fnmatch
import hashlib
import posixpath
import tomllib
from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any, Literal
from zoneinfo import ZoneInfo

from qa.model.columns import COLUMNS, PULSE_FORMS, SONAR_KINDS
from qa.model.errors import SurveyFileError, UnitError, nearest
from qa.model.units import (
    CELSIUS,
    DECIBEL,
    DEGREE,
    HERTZ,
    METRE,
    ONE,
    SECOND,
    Unit,
    conversion,
    measure,
)

Value = float | str

STATED: dict[str, dict[str, Unit | tuple[str, ...] | type[int]]] = {
    "sonar": {
        "kind": SONAR_KINDS,
        "frequency": HERTZ,
        "pulse_length": SECOND,
        "pulse_form": PULSE_FORMS,
        "bandwidth": HERTZ,
        "beamwidth_along": DEGREE,
        "beamwidth_across": DEGREE,
        "beam_angle_from": ("vertical", "array", "horizontal"),
        "mount_angle": DEGREE,
        "receive_array": ("flat", "curved"),
        "pings_in_water": int,
        "transducer_depth": METRE,
        "source_level": DECIBEL,
        "range_scale": METRE,
        "ping_rate": HERTZ,
        "gain": DECIBEL,
        "focus": ("none", "dynamic"),
        "detection_threshold": DECIBEL,
    },
    "water": {
        "sound_speed": METRE / SECOND,
        "temperature": CELSIUS,
        "salinity": ONE,
        "tide": METRE,
        "altitude": METRE,
        "wind_speed": METRE / SECOND,
        "backscatter_normal": DECIBEL,
        "backscatter_oblique": DECIBEL,
        "target_strength": DECIBEL,
    },
    "vessel": {"speed": METRE / SECOND},
    "uncertainty": {
        "sound_speed_sigma": METRE / SECOND,
        "surface_sound_speed_sigma": METRE / SECOND,
        "roll_sigma": DEGREE,
        "pitch_sigma": DEGREE,
        "heading_sigma": DEGREE,
        "heave_sigma": METRE,
        "draught_sigma": METRE,
        "squat_sigma": METRE,
        "tide_sigma": METRE,
        "range_sigma": METRE,
        "position_sigma": METRE,
    },
}
"""What each table may state of the survey, with its unit, its choices or ``int``."""

SURVEY_TABLES = ("survey", *STATED, "limits", "columns", "lines", "part")
"""The tables of a survey file."""

SURVEY_KEYS = ("name", "sheet", "python", "depth_from", "time_zone")
MORE_KEYS: dict[str, tuple[str, ...]] = {"water": ("profile",), "vessel": ("time_zone",)}
"""What tables hold beside what they state."""

COLUMN_KEYS = ("ignore", "hold", "order", "rows", "units")
ROWS = ("pings", "messages")
LINE_KEYS = ("from", "gap")
PART_KEYS = ("logs", "depth_from", "time_zone")
DepthFrom = Literal["waterline", "transducer", "datum"]
DEPTH_FROM = ("waterline", "transducer", "datum")


@dataclass(frozen=True, slots=True)
class ColumnChoices:
    """The [columns] table: how a log's own names map to canonical ones.

    ``rows`` says what a row of a log without beams is: one of :data:`ROWS`, or "" to find out.
    """

    names: Mapping[str, str] = field(default_factory=dict)
    ignore: tuple[str, ...] = ()
    hold: tuple[str, ...] = ()
    order: tuple[str, ...] = ()
    units: Mapping[str, str] = field(default_factory=dict)
    rows: str = ""


@dataclass(frozen=True, slots=True)
class LineChoices:
    """The [lines] table: how rows become lines. ``gap`` in seconds."""

    source: Literal["file", "column", "gap"] = "file"
    gap: float = 600.0


@dataclass(frozen=True, slots=True)
class SurveyFile:
    """A survey file, checked; every default stands where nothing is said.

    ``stated`` holds what [sonar], [water] and [vessel] say, SI; ``limits`` the raw texts of [limits], whose
    meaning the rule sheet gives. ``given`` names the keys that the file itself sets, as "table.key".
    """

    path: Path | None = None
    sha256: str = ""
    name: str = ""
    sheet: str = ""
    python: Path | None = None
    depth_from: DepthFrom = "waterline"
    time_zone: str = "UTC"
    vessel_time_zone: str = "UTC"
    profile: Path | None = None
    stated: Mapping[str, Value] = field(default_factory=dict)
    limits: Mapping[str, Any] = field(default_factory=dict)
    columns: ColumnChoices = field(default_factory=ColumnChoices)
    lines: LineChoices = field(default_factory=LineChoices)
    parts: tuple[tuple[tuple[str, ...], Mapping[str, Any]], ...] = ()
    given: frozenset[str] = frozenset()

    @property
    def says_depth_from(self) -> bool:
        """Whether ``depth_from`` is stated, not merely the default."""
        return "survey.depth_from" in self.given

    @property
    def folder(self) -> Path:
        """Folder that relative paths in the file start from."""
        return self.path.parent if self.path else Path.cwd()

    def for_log(self, log: Path | str) -> SurveyFile:
        """What holds for one log: each [[part]] whose ``logs`` match it, laid over the rest in order."""
        here = self
        if not self.parts:
            return here
        full, folder = Path(log).resolve().as_posix(), self.folder.resolve()
        for patterns, tables in self.parts:
            if any(_matches(full, pattern, folder) for pattern in patterns):
                here = _overlaid(here, tables)
        return here

    def of_one_log(self) -> SurveyFile:
        """Only what it says of the log that :meth:`for_log` was asked for: neither the survey's own facts nor limits."""
        return replace(
            self, path=None, sha256="", name="", sheet="", limits={}, parts=(), profile=None
        )


def _matches(log: str, pattern: str, folder: Path) -> bool:
    wanted = (folder / pattern).as_posix() if not Path(pattern).is_absolute() else pattern
    return fnmatch.fnmatchcase(log, posixpath.normpath(wanted))


def load_survey_file(path: Path | str) -> SurveyFile:
    """Read a survey file.

    Raises
    ------
    SurveyFileError
        If it cannot be read, is no TOML, or holds a key or value that is not valid.
    """
    path = Path(path)
    raw, sha = read_toml(path, SurveyFileError)
    return survey_from(path, raw, sha)


def survey_from(path: Path, raw: Mapping[str, Any], sha256: str = "") -> SurveyFile:
    """A survey file whose content has been read already; errors name the file."""
    survey = SurveyFile(path=path, sha256=sha256)
    _known(raw, SURVEY_TABLES, str(path), "")
    head = _subtable(raw, "survey", path)
    _known(head, SURVEY_KEYS, str(path), "survey.")
    survey = replace(
        survey,
        name=_text(head, "name", path, "survey."),
        sheet=_text(head, "sheet", path, "survey."),
        python=survey.folder / python
        if (python := _text(head, "python", path, "survey."))
        else None,
        given=frozenset(f"survey.{key}" for key in head),
    )
    survey = _overlaid(
        survey,
        {
            **{k: v for k, v in raw.items() if k not in ("survey", "part")},
            **{k: v for k, v in head.items() if k in ("depth_from", "time_zone")},
        },
    )
    parts = raw.get("part", [])
    if not isinstance(parts, list):
        raise SurveyFileError(
            "A part is written with double brackets.", where=f"{path}: part", expected="[[part]]"
        )
    kept = []
    for number, part in enumerate(parts, start=1):
        place = f"part {number}."
        if not isinstance(part, dict):
            raise SurveyFileError("Not a table.", where=f"{path}: part {number}", found=repr(part))
        _known(part, (*PART_KEYS, *STATED, "limits", "columns", "lines"), str(path), place)
        logs = part.get("logs", [])
        logs = [logs] if isinstance(logs, str) else logs
        if not isinstance(logs, list) or not logs or not all(isinstance(x, str) for x in logs):
            raise SurveyFileError(
                "A part says which logs it is for.",
                where=f"{path}: {place}logs",
                found=repr(part.get("logs")),
                expected='a list of patterns such as ["side_scan/*.csv"]',
            )
        tables = {k: v for k, v in part.items() if k != "logs"}
        _overlaid(survey, tables, place)
        kept.append((tuple(logs), tables))
    return replace(survey, parts=tuple(kept))


def read_toml(path: Path, error: type[SurveyFileError] | Any) -> tuple[dict[str, Any], str]:
    """A TOML file's content and SHA-256, or one clear error of the given kind."""
    try:
        content = path.read_bytes()
    except OSError as problem:
        raise error(
            "The file cannot be read.",
            where=str(path),
            found=problem.strerror or "no such file",
            advice="Check the path.",
        ) from None
    try:
        return tomllib.loads(content.decode("utf-8-sig")), hashlib.sha256(content).hexdigest()
    except UnicodeDecodeError:
        raise error("Not UTF-8 text.", where=str(path), expected="a TOML file in UTF-8") from None
    except (tomllib.TOMLDecodeError, RecursionError) as problem:
        raise error(
            "Not valid TOML.",
            where=str(path),
            found=str(problem),
            advice='Texts stand in quotes, as in target_size = "1 m".',
        ) from None


def _known(table: Mapping[str, Any], valid: tuple[str, ...], path: str, prefix: str) -> None:
    for key in table:
        if key not in valid:
            raise SurveyFileError(
                "Not a key of a survey file.",
                where=f"{path}: {prefix}{key}",
                advice=nearest(key, valid),
            )


def _subtable(raw: Mapping[str, Any], key: str, path: Path | None) -> Mapping[str, Any]:
    table = raw.get(key, {})
    if not isinstance(table, Mapping):
        raise SurveyFileError(
            "Not a table.", where=f"{path}: {key}", found=repr(table), expected=f"[{key}]"
        )
    return table


def _text(table: Mapping[str, Any], key: str, path: Path | None, prefix: str) -> str:
    value = table.get(key, "")
    if not isinstance(value, str):
        raise SurveyFileError(
            "Not a text.",
            where=f"{path}: {prefix}{key}",
            found=repr(value),
            expected="a text in quotes",
        )
    return value


def _choice(value: Any, choices: tuple[str, ...], where: str) -> str:
    if not isinstance(value, str) or value not in choices:
        advice = nearest(value, choices) if isinstance(value, str) else ""
        raise SurveyFileError(
            "Not one of the choices.",
            where=where,
            found=repr(value),
            expected=", ".join(f'"{c}"' for c in choices),
            advice=advice,
        )
    return value


def _zone(value: Any, where: str) -> str:
    try:
        ZoneInfo(value)
    except Exception:
        raise SurveyFileError(
            "Not a known time zone.",
            where=where,
            found=repr(value),
            expected='a name such as "UTC" or "Europe/Lisbon"',
        ) from None
    return str(value)


def _texts(value: Any, where: str) -> tuple[str, ...]:
    value = [value] if isinstance(value, str) else value
    if not isinstance(value, list) or not all(isinstance(v, str) for v in value):
        raise SurveyFileError(
            "Not a list of texts.",
            where=where,
            found=repr(value),
            expected='a list such as ["depth"]',
        )
    return tuple(value)


def _overlaid(base: SurveyFile, tables: Mapping[str, Any], prefix: str = "") -> SurveyFile:
    """The survey with some tables laid over it, each key checked."""
    path = base.path
    given = set(base.given)
    changes: dict[str, Any] = {}
    if "depth_from" in tables:
        given.add("survey.depth_from")
        changes["depth_from"] = _choice(
            tables["depth_from"], DEPTH_FROM, f"{path}: {prefix}depth_from"
        )
    if "time_zone" in tables:
        changes["time_zone"] = _zone(tables["time_zone"], f"{path}: {prefix}time_zone")
    stated = dict(base.stated)
    for name, keys in STATED.items():
        table = _subtable(tables, name, path)
        _known(table, (*keys, *MORE_KEYS.get(name, ())), str(path), f"{prefix}{name}.")
        for key, value in table.items():
            where = f"{path}: {prefix}{name}.{key}"
            given.add(f"{name}.{key}")
            if key == "profile":
                changes["profile"] = base.folder / _text(table, key, path, f"{prefix}{name}.")
            elif key == "time_zone":
                changes["vessel_time_zone"] = _zone(value, where)
            else:
                stated[key] = _stated_value(key, value, keys[key], where)
    changes["stated"] = stated
    limits = _subtable(tables, "limits", path)
    given.update(f"limits.{key}" for key in limits)
    changes["limits"] = {**base.limits, **limits}
    if "columns" in tables:
        changes["columns"] = _columns(
            base.columns, _subtable(tables, "columns", path), f"{path}: {prefix}columns."
        )
    if "lines" in tables:
        table = _subtable(tables, "lines", path)
        _known(table, LINE_KEYS, str(path), f"{prefix}lines.")
        source = _choice(
            table.get("from", base.lines.source),
            ("file", "column", "gap"),
            f"{path}: {prefix}lines.from",
        )
        gap = base.lines.gap
        if "gap" in table:
            gap = _measured(table["gap"], SECOND, f"{path}: {prefix}lines.gap")
            if gap <= 0:
                raise SurveyFileError(
                    "A gap is longer than nothing.",
                    where=f"{path}: {prefix}lines.gap",
                    found=repr(table["gap"]),
                )
        changes["lines"] = LineChoices(source, gap)  # type: ignore[arg-type]  # checked by _choice
    changes["given"] = frozenset(given)
    return replace(base, **changes)


def _measured(value: Any, unit: Unit, where: str) -> float:
    try:
        return measure(value, unit, where)[0]
    except UnitError as error:
        raise SurveyFileError(
            error.message,
            where=where,
            found=error.found,
            expected=error.expected,
            advice=error.advice,
        ) from None


def _stated_value(
    key: str, value: Any, kind: Unit | tuple[str, ...] | type[int], where: str
) -> Value:
    if isinstance(kind, tuple):
        return _choice(value, kind, where)
    if isinstance(kind, type):
        if isinstance(value, bool) or not isinstance(value, int) or not 1 <= value <= 1000:
            raise SurveyFileError(
                "Not a count.", where=where, found=repr(value), expected="a whole number from 1"
            )
        return float(value)
    number = _measured(value, kind, where)
    column = COLUMNS.get(key)
    low, high = (column.least, column.greatest) if column else (-180.0, 180.0)
    if not low <= number <= high:
        raise SurveyFileError(
            "The value is not possible.",
            where=where,
            found=repr(value),
            expected=f"{low:g} to {high:g} {kind}",
        )
    if number == 0.0 and key in (
        "frequency",
        "pulse_length",
        "bandwidth",
        "beamwidth_along",
        "beamwidth_across",
        "range_scale",
    ):
        raise SurveyFileError(
            "The value is zero.", where=where, found=repr(value), expected="more than 0"
        )
    return number


def _columns(base: ColumnChoices, table: Mapping[str, Any], where: str) -> ColumnChoices:
    names, units = dict(base.names), dict(base.units)
    for key, value in table.items():
        if key in COLUMN_KEYS:
            continue
        if key not in COLUMNS:
            raise SurveyFileError(
                "Not a canonical column.",
                where=f"{where}{key}",
                advice=nearest(key, (*COLUMNS, *COLUMN_KEYS)),
            )
        if not isinstance(value, str):
            raise SurveyFileError(
                "Not a column's name.", where=f"{where}{key}", found=repr(value), expected="a text"
            )
        names[key] = value
    chosen: dict[str, tuple[str, ...]] = {}
    for key in ("hold", "order", "ignore"):
        chosen[key] = _texts(table[key], f"{where}{key}") if key in table else getattr(base, key)
    for name in chosen["hold"]:
        if name not in COLUMNS or COLUMNS[name].grain != "ping":
            raise SurveyFileError(
                "Not a ping column.",
                where=f"{where}hold",
                found=name,
                advice=nearest(name, COLUMNS),
            )
    raw_units = table.get("units", {})
    if not isinstance(raw_units, Mapping):
        raise SurveyFileError("Not a table.", where=f"{where}units", found=repr(raw_units))
    for name, unit in raw_units.items():
        if name not in COLUMNS:
            raise SurveyFileError(
                "Not a canonical column.",
                where=f"{where}units.{name}",
                advice=nearest(name, COLUMNS),
            )
        if not isinstance(unit, str):
            raise SurveyFileError(
                "Not a unit.", where=f"{where}units.{name}", found=repr(unit), expected="a text"
            )
        if COLUMNS[name].kind == "number":
            try:
                found = conversion(unit).unit
            except UnitError as error:
                raise SurveyFileError(
                    error.message, where=f"{where}units.{name}", found=unit, expected=error.expected
                ) from None
            if found != COLUMNS[name].unit:
                raise SurveyFileError(
                    "The unit is of the wrong kind.",
                    where=f"{where}units.{name}",
                    found=unit,
                    expected=f"a unit of {COLUMNS[name].unit}",
                )
        units[name] = unit
    rows = table.get("rows", base.rows)
    if rows not in ("", *ROWS):
        raise SurveyFileError(
            "Not what a row can be.",
            where=f"{where}rows",
            found=repr(rows),
            expected=" or ".join(f'"{choice}"' for choice in ROWS),
        )
    return ColumnChoices(names, chosen["ignore"], chosen["hold"], chosen["order"], units, rows)
