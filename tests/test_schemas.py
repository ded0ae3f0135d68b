"""The JSON Schemas: valid themselves, the loader's keys exactly, every shipped file accepted, its mistakes refused."""

from __future__ import annotations

import json
import tomllib
from pathlib import Path
from typing import Any

import jsonschema
import pytest

from qa import schemas
from qa.engine import sheets
from qa.engine.sheets import load_sheet, shipped_sheets
from qa.model import survey_file
from qa.model.columns import COLUMNS
from qa.model.errors import PingworthyError
from qa.model.shipped import shipped

SAMPLE = shipped("sample_logs")


def shipped_schema(name: str) -> dict[str, Any]:
    found: dict[str, Any] = json.loads((shipped("reports") / name).read_text(encoding="utf-8"))
    return found


SHEET, SURVEY = shipped_schema(schemas.SHEET), shipped_schema(schemas.SURVEY)


def errors(schema: dict[str, Any], content: Any) -> list[str]:
    return [e.message for e in jsonschema.Draft202012Validator(schema).iter_errors(content)]


@pytest.mark.parametrize("schema", [SHEET, SURVEY], ids=["sheet", "survey"])
def test_a_schema_is_valid_json_schema(schema: dict[str, Any]) -> None:
    jsonschema.Draft202012Validator.check_schema(schema)


@pytest.mark.parametrize(
    ("file", "made"),
    [(schemas.SHEET, schemas.sheet_schema), (schemas.SURVEY, schemas.survey_schema)],
)
def test_the_shipped_schema_is_that_of_the_loaders_tables(file: str, made: Any) -> None:
    text = (shipped("reports") / file).read_text(encoding="utf-8")
    assert text == schemas.written(made()), "write it again: python -m qa.schemas"


# Keys, from the loader's own tables


def test_keys_of_a_sheet_are_those_that_the_loader_accepts() -> None:
    assert set(SHEET["properties"]) == set(sheets.SHEET_KEYS)
    assert set(SHEET["$defs"]["rule"]["properties"]) == set(sheets.RULE_KEYS)
    tables = [s for s in SHEET["$defs"]["limit"]["anyOf"] if s["type"] == "object"]
    assert [set(t["properties"]) for t in tables] == [set(sheets.LIMIT_KEYS)]


def test_keys_of_a_survey_file_are_those_that_the_loader_accepts() -> None:
    assert set(SURVEY["properties"]) == set(survey_file.SURVEY_TABLES)
    assert set(SURVEY["properties"]["survey"]["properties"]) == set(survey_file.SURVEY_KEYS)
    for table, keys in survey_file.STATED.items():
        more = survey_file.MORE_KEYS.get(table, ())
        assert set(SURVEY["$defs"][table]["properties"]) == {*keys, *more}
    columns = SURVEY["$defs"]["columns"]["properties"]
    assert set(columns) == {*survey_file.COLUMN_KEYS, *COLUMNS}
    assert set(columns["units"]["properties"]) == set(COLUMNS)
    assert set(SURVEY["$defs"]["lines"]["properties"]) == set(survey_file.LINE_KEYS)
    part = SURVEY["properties"]["part"]["items"]["properties"]
    tables = set(survey_file.SURVEY_TABLES) - {"survey", "part"}
    assert set(part) == {*survey_file.PART_KEYS, *tables}


def test_limits_and_rules_of_every_shipped_sheet_are_offered() -> None:
    for name in shipped_sheets():
        sheet = load_sheet(name)
        assert set(sheet.limits) <= set(SHEET["properties"]["limits"]["properties"])
        assert set(sheet.limits) <= set(SURVEY["$defs"]["limits"]["properties"])
        assert set(sheet.rules) <= set(SHEET["properties"]["rule"]["properties"])


def described(schema: Any, path: str = "") -> list[str]:
    """Properties that say nothing of themselves; names of columns and kinds of sonar speak for themselves."""
    if isinstance(schema, list):
        return [p for item in schema for p in described(item, path)]
    if not isinstance(schema, dict):
        return []
    missing = []
    for key, inner in schema.items():
        if key != "properties":
            missing += described(inner, path)
            continue
        for name, item in inner.items():
            if not item.get("description") and not path.endswith(("/units", "/remedy", "/says")):
                missing.append(f"{path}/{name}")
            missing += described(item, f"{path}/{name}")
    return missing


def test_every_key_says_what_it_is_for() -> None:
    assert described(SHEET) == []
    assert described(SURVEY) == []


# Files


@pytest.mark.parametrize("name", shipped_sheets())
def test_every_shipped_sheet_is_valid(name: str) -> None:
    with (shipped("rules") / f"{name}.toml").open("rb") as stream:
        assert errors(SHEET, tomllib.load(stream)) == []


@pytest.mark.parametrize("path", sorted(SAMPLE.rglob("*.toml")), ids=lambda p: p.name)
def test_every_shipped_survey_file_is_valid(path: Path) -> None:
    with path.open("rb") as stream:
        assert errors(SURVEY, tomllib.load(stream)) == []


WRONG_SHEETS = [
    "titel = 'x'",
    "title = 3",
    "extends = 3",
    "[limits]\na = { value = '1 m', untis = 'm' }",
    "[limits]\n'a b' = '1 m'",
    "[limits]\na = true",
    "[rule.r]\nrequires = 'x'",
    "[rule.r]\nrequire = 3",
    "[rule.r]\nseverity = 'bad'",
    "[rule.r]\ncount = 'some'",
    "[rule.r]\nkeep_pings = 0",
    "[rule.r]\nallow = 'much'",
    "[rule.r.remedy]\nmultybeam = 'x'",
    "[rule.r]\ncolumns = ['depht']",
    "[rule]\nr = 3",
]


@pytest.mark.parametrize("text", WRONG_SHEETS)
def test_a_mistake_in_a_sheet_is_one_for_the_schema_and_for_the_loader(
    tmp_path: Path, text: str
) -> None:
    assert errors(SHEET, tomllib.loads(text))
    path = tmp_path / "own.toml"
    path.write_text(text, encoding="utf-8")
    with pytest.raises(PingworthyError):
        load_sheet(path)


WRONG_SURVEYS = [
    "sonars = 3",
    "[survey]\nsheets = 'x'",
    "[survey]\ndepth_from = 'keel'",
    "[sonar]\nkind = 'multi'",
    "[sonar]\nfrequency = 300000",
    "[sonar]\nfrequency = 'high'",
    "[sonar]\npings_in_water = 0",
    "[sonar]\npings_in_water = '2'",
    "[water]\nprofil = 'x.csv'",
    "[vessel]\nspeed = 4",
    "[uncertainty]\nroll = '1 deg'",
    "[columns]\ndepht = 'Z'",
    "[columns]\ndepth = 3",
    "[columns]\nhold = ['depth']",
    "[columns.units]\ndepht = 'ft'",
    "[lines]\nfrom = 'time'",
    "[[part]]\n[part.sonar]\nkind = 'multibeam'",
    "[[part]]\nlogs = ['x']\nsheet = 'physics'",
]


@pytest.mark.parametrize("text", WRONG_SURVEYS)
def test_a_mistake_in_a_survey_file_is_one_for_the_schema_and_for_the_loader(
    tmp_path: Path, text: str
) -> None:
    assert errors(SURVEY, tomllib.loads(text))
    path = tmp_path / "survey.toml"
    path.write_text(text, encoding="utf-8")
    with pytest.raises(PingworthyError):
        survey_file.load_survey_file(path)


README_SURVEY = """
[survey]
name       = "Outer roads, block 3"
sheet      = "s44-1a"
depth_from = "waterline"
time_zone  = "UTC"
[sonar]
kind             = "multibeam"
frequency        = "300 kHz"
pings_in_water   = 1
[water]
salinity = 35
profile  = "cast.csv"
[vessel]
speed     = "4 kt"
time_zone = "UTC"
[limits]
target_size   = "1 m"
hits_required = 3
tvu_allowed   = "hypot(0.25*m, 0.0075*least(reduced_depth))"
[columns]
depth  = "Z snd"
ignore = ["Speed"]
hold   = ["pulse_length"]
order  = ["latitude", "longitude", "depth", "temperature", "time"]
[columns.units]
depth = "ft"
time  = "ms since 1970-01-01"
[lines]
from = "gap"
gap  = "10 min"
[[part]]
logs = "side_scan/*.csv"
depth_from = "transducer"
[part.limits]
near_range = "15 m"
"""


def test_a_survey_file_that_uses_every_table_is_valid_for_both(tmp_path: Path) -> None:
    assert errors(SURVEY, tomllib.loads(README_SURVEY)) == []
    path = tmp_path / "survey.toml"
    path.write_text(README_SURVEY, encoding="utf-8")
    assert survey_file.load_survey_file(path).parts
