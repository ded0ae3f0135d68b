"""The JSON Schemas of rule sheets and survey files, made from the loader's own tables.

``python -m qa.schemas`` writes them to ``reports/``; they are shipped as files, so that an editor needs no Python.
"""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

from qa.engine.explain import about_quantity
from qa.engine.sheets import (
    LIMIT_KEYS,
    RULE_KEYS,
    SEVERITIES,
    SHEET_KEYS,
    load_sheet,
    shipped_sheets,
)
from qa.model.columns import COLUMNS, SONAR_KINDS
from qa.model.shipped import shipped
from qa.model.survey_file import (
    COLUMN_KEYS,
    DEPTH_FROM,
    LINE_KEYS,
    MORE_KEYS,
    PART_KEYS,
    ROWS,
    STATED,
    SURVEY_KEYS,
    SURVEY_TABLES,
)
from qa.model.units import ONE, Unit

Schema = dict[str, Any]

DIALECT = "https://json-schema.org/draft/2020-12/schema"
SHEET, SURVEY = "sheet.schema.json", "survey.schema.json"

_TEXT: Schema = {"type": "string"}
_TEXTS: Schema = {"anyOf": [_TEXT, {"type": "array", "items": _TEXT}]}
_NUMBER_PATTERN = r"^\s*[+-]?(\d|\.\d)"
_SHARE: Schema = {
    "anyOf": [{"type": "string", "pattern": _NUMBER_PATTERN}, {"type": "number", "minimum": 0}],
    "examples": ["5 %"],
}
_EXAMPLES = {
    "Hz": "300 kHz",
    "s": "60 us",
    "deg": "1.0 deg",
    "m": "1 m",
    "dB": "210 dB",
    "m/s": "4 kt",
    "degC": "12 degC",
}

_RULE_ABOUT = {
    "title": "What the rule is called in the report.",
    "require": "What must hold: a comparison of quantities, limits and numbers with units.",
    "columns": "Columns that must be logged, in place of a requirement.",
    "allow": "Share of a line's assessed pings that may miss it.",
    "allow_beams": "Share of a ping's accepted beams that may miss it before the ping does.",
    "severity": "Whether misses make a line out of spec, or only give advice.",
    "remedy": "What to set for the re-run; fields in braces are worked out. One text, or one for each kind of sonar.",
    "says": "What a section says of its cause. One text, or one for each kind of sonar.",
    "source": "Where the requirement comes from.",
    "why": "Why it matters.",
    "when": "A condition: lines or pings for which it is false are exempt.",
    "join_pings": "Sections are joined over gaps of up to so many assessed pings.",
    "keep_pings": "Sections shorter than so many pings are counted but not kept.",
    "keep_when": "A condition for which shorter sections are kept too.",
    "count": "Whether hits are those that are sure (C-13 eq. 4.2) or those that are possible (eq. 4.1).",
    "clause": "Number of the clause in the contract or standard.",
    "not_from_pings": "Why a ping log cannot show it; it then reads not assessed.",
}
_LIMIT_ABOUT = {
    "value": "A number with its unit, or an expression. Left out, the limit waits for a survey file or another sheet.",
    "unit": "Its unit.",
    "about": "What it is.",
    "source": "Where the value comes from.",
}
_SHEET_ABOUT = {
    "title": "What the sheet is called in the report.",
    "about": "What it is for.",
    "extends": "Sheets that it builds on, shipped ones by name, others by path; later ones win.",
    "drop": "Rules of those sheets that do not apply.",
    "limits": "Numbers that rules compare with, each with its unit.",
    "rule": "The rules, or what is changed in rules of the sheets that it builds on.",
}
_TABLE_ABOUT = {
    "survey": "The survey as a whole.",
    "sonar": "The sonar, where the log does not say.",
    "water": "The water, where the log does not say.",
    "vessel": "The vessel, where the log does not say.",
    "uncertainty": "Standard uncertainties (one sigma) of what the sensors and corrections measure.",
    "limits": "Limits that override the rule sheet's.",
    "columns": "The file's names of columns, where they are not recognised.",
    "lines": "How rows become lines.",
    "part": "Tables that hold only for the logs that it names.",
}
_SURVEY_ABOUT = {
    "name": "Name of the survey, for the report.",
    "sheet": "Rule sheet: a shipped one's name, or a path.",
    "python": "Python file that adds quantities; it is run only where --allow-python is given.",
    "depth_from": "What logged depths are measured from.",
    "time_zone": "Zone of log times that carry none, such as UTC or Europe/Lisbon.",
}
_MORE_ABOUT = {
    "profile": "Sound speed cast, a path.",
    "time_zone": 'Zone of the vessel\'s days: what "yesterday" means on board.',
}
_COLUMN_ABOUT = {
    "ignore": "Names in the file that are not read.",
    "hold": "Columns that are logged only when they change.",
    "order": "Columns of a file without a header, from the left.",
    "rows": "What a row without beams is: a ping, or a message that repeats the last ping until the next.",
    "units": "Units of columns, where neither the header nor the file's metadata says.",
}
_LINE_ABOUT = {
    "from": "What makes a line: a file, the line column, or a gap in time.",
    "gap": "Time without a ping that ends a line.",
}
_PART_ABOUT = {
    "logs": "Patterns of the logs that the part is for.",
    "depth_from": _SURVEY_ABOUT["depth_from"],
    "time_zone": _SURVEY_ABOUT["time_zone"],
}


def sheet_schema() -> Schema:
    """The JSON Schema of a rule sheet."""
    sheets = [load_sheet(name) for name in shipped_sheets()]
    limits = {n: x for sheet in sheets for n, x in sheet.limits.items()}
    rules = {n: r for sheet in sheets for n, r in sheet.rules.items()}
    keys: dict[str, Schema] = {
        "title": _TEXT,
        "about": _TEXT,
        "extends": _one_or_more(_known(shipped_sheets())),
        "drop": _one_or_more(_known(sorted(rules))),
        "limits": {
            "type": "object",
            "properties": {
                name: {"$ref": "#/$defs/limit", "description": _described(x.about, x.unit)}
                for name, x in sorted(limits.items())
            },
            "propertyNames": {"pattern": r"^[^\W\d]\w*$"},
            "additionalProperties": {"$ref": "#/$defs/limit"},
        },
        "rule": {
            "type": "object",
            "properties": {
                name: {"$ref": "#/$defs/rule", "description": rule.title}
                for name, rule in sorted(rules.items())
            },
            "additionalProperties": {"$ref": "#/$defs/rule"},
        },
    }
    return {
        "$schema": DIALECT,
        "$id": "urn:pingworthy:sheet:1",
        "title": "Rule sheet of a ping log audit",
        **_object(SHEET_KEYS, keys, _SHEET_ABOUT),
        "$defs": {
            "limit": {
                "anyOf": [
                    {"type": "string"},
                    {"type": "number"},
                    _object(
                        LIMIT_KEYS,
                        {
                            "value": {"anyOf": [{"type": "string"}, {"type": "number"}]},
                            **dict.fromkeys(("unit", "about", "source"), _TEXT),
                        },
                        _LIMIT_ABOUT,
                    ),
                ]
            },
            "rule": _rule_schema(),
        },
    }


def _rule_schema() -> Schema:
    by_kind: Schema = {
        "anyOf": [
            _TEXT,
            {
                "type": "object",
                "properties": dict.fromkeys((*SONAR_KINDS, "otherwise"), _TEXT),
                "additionalProperties": False,
            },
        ]
    }
    columns = [c.name for c in COLUMNS.values() if c.kind in ("number", "flag", "form")]
    keys: dict[str, Schema] = {
        **dict.fromkeys(("title", "require", "source", "why", "when", "keep_when"), _TEXT),
        **dict.fromkeys(("clause", "not_from_pings"), _TEXT),
        "allow": _SHARE,
        "allow_beams": _SHARE,
        "severity": {"enum": list(SEVERITIES)},
        "remedy": by_kind,
        "says": by_kind,
        "join_pings": {"type": "integer", "minimum": 0, "maximum": 100_000},
        "keep_pings": {"type": "integer", "minimum": 1, "maximum": 100_000},
        "count": {"enum": ["guaranteed", "possible"]},
        "columns": _one_or_more({"enum": columns}),
    }
    return _object(RULE_KEYS, keys, _RULE_ABOUT)


def survey_schema() -> Schema:
    """The JSON Schema of a survey file."""
    tables = {name: _stated_table(name) for name in STATED}
    tables |= {"limits": _limits(), "columns": _columns(), "lines": _lines()}
    zone_and_depth: dict[str, Schema] = {
        "depth_from": {"enum": list(DEPTH_FROM)},
        "time_zone": _TEXT,
    }
    head: dict[str, Schema] = {
        "name": _TEXT,
        "sheet": _known(shipped_sheets()),
        "python": _TEXT,
        **zone_and_depth,
    }
    part = _object(PART_KEYS, {"logs": _TEXTS, **zone_and_depth}, _PART_ABOUT)
    of_tables: dict[str, Schema] = {
        name: {"$ref": f"#/$defs/{name}", "description": _TABLE_ABOUT[name]} for name in tables
    }
    part["properties"] |= of_tables
    part["required"] = ["logs"]
    properties: dict[str, Schema] = {
        "survey": _object(SURVEY_KEYS, head, _SURVEY_ABOUT),
        **of_tables,
        "part": {"type": "array", "items": part},
    }
    for name in ("survey", "part"):
        properties[name]["description"] = _TABLE_ABOUT[name]
    return {
        "$schema": DIALECT,
        "$id": "urn:pingworthy:survey:1",
        "title": "Survey file of a ping log audit",
        "type": "object",
        "properties": {name: properties[name] for name in SURVEY_TABLES},
        "additionalProperties": False,
        "$defs": tables,
    }


def _stated_table(table: str) -> Schema:
    keys: dict[str, Schema] = {}
    about: dict[str, str] = {}
    for name, meant in STATED[table].items():
        unit = meant if isinstance(meant, Unit) else ONE
        about[name] = _described(about_quantity(name), unit)
        if isinstance(meant, tuple):
            keys[name] = {"enum": list(meant)}
        elif isinstance(meant, Unit):
            keys[name] = _measured(meant)
        else:
            keys[name] = {"type": "integer", "minimum": 1, "maximum": 1000}
    for name in MORE_KEYS.get(table, ()):
        keys[name], about[name] = _TEXT, _MORE_ABOUT[name]
    return _object(tuple(keys), keys, about)


def _measured(unit: Unit) -> Schema:
    text: Schema = {"type": "string", "pattern": _NUMBER_PATTERN}
    if unit == ONE:
        return {"anyOf": [{"type": "number"}, text]}
    example = _EXAMPLES.get(str(unit))
    return {**text, "examples": [example]} if example else text


def _limits() -> Schema:
    limits = {n: x for name in shipped_sheets() for n, x in load_sheet(name).limits.items()}
    value: Schema = {"$ref": "#/$defs/limits/$defs/limit"}
    return {
        "type": "object",
        "properties": {
            n: {**value, "description": _described(x.about, x.unit)}
            for n, x in sorted(limits.items())
        },
        "additionalProperties": value,
        "$defs": {"limit": sheet_schema()["$defs"]["limit"]},
    }


def _columns() -> Schema:
    names = {n: {"type": "string"} for n in COLUMNS}
    held = [c.name for c in COLUMNS.values() if c.grain == "ping"]
    keys: dict[str, Schema] = {
        "ignore": _TEXTS,
        "hold": _one_or_more({"enum": held}),
        "order": _TEXTS,
        "rows": {"enum": list(ROWS)},
        "units": {"type": "object", "properties": names, "additionalProperties": False},
    }
    found = _object(COLUMN_KEYS, keys, _COLUMN_ABOUT)
    found["properties"] |= {
        c.name: {
            "type": "string",
            "description": f"The file's name for: {_described(c.about, c.unit)}",
        }
        for c in COLUMNS.values()
    }
    return found


def _lines() -> Schema:
    keys: dict[str, Schema] = {
        "from": {"enum": ["file", "column", "gap"]},
        "gap": {"type": "string", "pattern": _NUMBER_PATTERN, "examples": ["10 min"]},
    }
    return _object(LINE_KEYS, keys, _LINE_ABOUT)


def _object(names: tuple[str, ...], keys: dict[str, Schema], about: dict[str, str]) -> Schema:
    """An object of exactly these keys; a key that nothing is said of here is an error."""
    return {
        "type": "object",
        "properties": {name: {**keys[name], "description": about[name]} for name in names},
        "additionalProperties": False,
    }


def _known(names: list[str]) -> Schema:
    """Any text; an editor offers the known ones."""
    return {"anyOf": [{"enum": names}, _TEXT]}


def _one_or_more(item: Schema) -> Schema:
    return {"anyOf": [{"type": "array", "items": item}, item]}


def _described(about: str, unit: Unit) -> str:
    about = about.rstrip(".")
    return about if unit == ONE else f"{about}, in {unit} or a unit of its kind"


def written(schema: Schema) -> str:
    """A schema as the text of its file."""
    return json.dumps(schema, indent=1, ensure_ascii=False) + "\n"


def main() -> None:
    """Write both schemas to ``reports/``."""
    folder: Path = shipped("reports")
    for name, schema in ((SHEET, sheet_schema()), (SURVEY, survey_schema())):
        (folder / name).write_text(written(schema), encoding="utf-8", newline="\n")


if __name__ == "__main__":
    main()
