"""Whether a file is a valid rule sheet or survey file: every mistake, one message each.

Loading stops at the first mistake. So the part of the file that a mistake names is set aside and what is left is
loaded again, until nothing is wrong; what rests on a part that was set aside is set aside with it, so that one mistake is told once.
"""

from __future__ import annotations

import re
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Literal

from qa.engine.sheets import SHEET_KEYS, load_sheet, sheet_from, shipped_sheets
from qa.engine.user_quantities import allowed_python, check_inputs, use_python
from qa.model.errors import InputError, PingworthyError, SheetError, SurveyFileError
from qa.model.shipped import shipped
from qa.model.survey_file import SURVEY_TABLES, SurveyFile, read_toml, survey_from

MOST_MISTAKES = 100
Meant = Literal["rule sheet", "survey file", ""]


@dataclass(frozen=True, slots=True)
class Checked:
    """One file: what it is, its mistakes, and where there are none what it holds."""

    path: Path
    meant: Meant
    mistakes: tuple[PingworthyError, ...]
    holds: str = ""

    def __str__(self) -> str:
        if not self.mistakes:
            return f"{self.path}: a valid {self.meant}{self.holds}."
        count = len(self.mistakes)
        head = f"{self.path}: {f'a {self.meant} with ' if self.meant else ''}{count} mistake{'s' if count > 1 else ''}"
        # The file stands in the heading; said again in every message it would hide what is wrong.
        told = [str(m).removeprefix(f"{self.path}: ") for m in self.mistakes]
        return "\n".join([head, *(f"  {text}" for text in told)])


def check_file(path: str | Path, allow_python: bool = False) -> Checked:
    """Check one rule sheet or survey file.

    Parameters
    ----------
    path : str or Path
        The file, or the name of a shipped sheet.
    allow_python : bool
        Whether the Python file that a survey file names, if any, may be run.

    Returns
    -------
    Checked
    """
    given = Path(path)
    if str(path) in shipped_sheets() and not given.exists():
        given = shipped("rules") / f"{path}.toml"
    try:
        content, _ = read_toml(given, PingworthyError)
    except PingworthyError as error:
        return Checked(given, "", (error,))
    meant = meant_as(content)
    if meant == "rule sheet":
        mistakes = _mistakes(given, content, lambda left: sheet_from(given, left))
        return Checked(given, meant, mistakes, "" if mistakes else _sheet_holds(given))
    if meant == "survey file":
        mistakes = _mistakes(
            given, content, lambda left: _survey(given, left, allow_python, content)
        )
        return Checked(given, meant, mistakes, "" if mistakes else _survey_holds(given))
    neither = PingworthyError(
        "Neither a rule sheet nor a survey file.",
        where=str(given),
        found=", ".join(content) or "nothing",
        expected=f"a sheet's keys ({', '.join(SHEET_KEYS)}) or a survey file's tables ({', '.join(SURVEY_TABLES)})",
    )
    return Checked(given, "", (neither,))


def schema_paths() -> list[Path]:
    """Where the JSON Schemas of rule sheets and of survey files lie, for editors."""
    return [shipped("reports") / f"{name}.schema.json" for name in ("sheet", "survey")]


def meant_as(content: Mapping[str, Any]) -> Meant:
    """Whether a file's top keys are those of a rule sheet or of a survey file.

    Examples
    --------
    >>> meant_as({"extends": ["physics"], "limits": {}}), meant_as({"sonar": {}, "limits": {}})
    ('rule sheet', 'survey file')
    """
    sheet = sum(key in SHEET_KEYS and key != "limits" for key in content)
    survey = sum(key in SURVEY_TABLES and key != "limits" for key in content)
    if sheet > survey:
        return "rule sheet"
    if survey > sheet:
        return "survey file"
    # Limits alone lie over a sheet's, which is what a survey file's do.
    return "survey file" if "limits" in content else ""


def _survey(
    path: Path, content: Mapping[str, Any], allow_python: bool, original: Mapping[str, Any]
) -> None:
    facts = survey_from(path, content)
    _run_python(facts, allow_python)
    # Limits are those of a sheet: where the sheet, or what it needs, is a mistake, nothing is known of them.
    if all(_head(content, key) == _head(original, key) for key in ("sheet", "python")):
        _sheet_of(facts, {}, "")
        for number, (patterns, tables) in enumerate(facts.parts, start=1):
            own = tables.get("limits", {})
            _sheet_of(facts.for_log(facts.folder / patterns[0]), own, f"part {number}.")
    if facts.profile is not None:
        from qa.ingest.casts import read_cast

        try:
            read_cast(facts.profile, facts)
        except PingworthyError as error:
            raise SurveyFileError(
                "The sound speed cast cannot be used.",
                where=f"{path}: water.profile",
                found=str(error),
            ) from None


def _run_python(facts: SurveyFile, allow: bool) -> None:
    try:
        use_python(allowed_python(facts, allow))
    except InputError as error:
        raise SurveyFileError(
            "The Python file cannot be used.",
            where=f"{facts.path}: survey.python",
            found=str(error),
        ) from None


def _head(content: Mapping[str, Any], key: str) -> Any:
    head = content.get("survey", {})
    return head.get(key) if isinstance(head, Mapping) else None


def _sheet_of(facts: SurveyFile, limits: Mapping[str, Any], part: str) -> None:
    """The sheet under the limits of the file, or of one part: a limit of the part's own is told as that."""
    here = f"{facts.path}: "
    try:
        check_inputs(load_sheet(facts.sheet or "physics", facts, None, facts.folder))
    except InputError as error:
        raise SurveyFileError(
            "The Python file cannot be used.", where=f"{here}survey.python", found=str(error)
        ) from None
    except SheetError as error:
        place = error.where.removeprefix(here)
        if not error.where.startswith(here):
            # Another file's mistake is told at the key that names that file.
            raise SurveyFileError(
                "The rule sheet cannot be used.", where=f"{here}survey.sheet", found=str(error)
            ) from None
        name = place.removeprefix("limits.") if place.startswith("limits.") else ""
        raise SurveyFileError(
            error.message,
            where=f"{here}{part if name in limits else ''}{place}",
            found=error.found,
            expected=error.expected,
            advice=error.advice,
        ) from None


def _sheet_holds(path: Path) -> str:
    sheet = load_sheet(path)
    own = sum(r.sheet == sheet.name for r in sheet.rules.values())
    changed = sum(sheet.name in r.changed_by for r in sheet.rules.values())
    text = f" of {len(sheet.rules)} rules"
    if sheet.extends:
        text += (
            f", {own} of them its own and {changed} changed; it extends {', '.join(sheet.extends)}"
        )
    return text


def _survey_holds(path: Path) -> str:
    content, sha = read_toml(path, SurveyFileError)
    facts = survey_from(path, content, sha)
    text = f'; its rule sheet is "{facts.sheet or "physics"}"'
    return text + (f", and it has {len(facts.parts)} parts" if facts.parts else "")


# Mistake after mistake


def _mistakes(path: Path, content: Mapping[str, Any], load: Any) -> tuple[PingworthyError, ...]:
    left = _copied(content)
    found: list[PingworthyError] = []
    while len(found) < MOST_MISTAKES:
        try:
            load(left)
        except PingworthyError as error:
            found.append(error)
            keys = _keys_of(error.where, path, left)
            if not keys:
                break
            _set_aside(left, keys)
        else:
            break
    return tuple(found)


def _copied(value: Any) -> Any:
    if isinstance(value, Mapping):
        return {key: _copied(v) for key, v in value.items()}
    return [_copied(v) for v in value] if isinstance(value, list) else value


def _keys_of(where: str, path: Path, content: Mapping[str, Any]) -> list[str | int]:
    """The way into the file to the deepest part that an error's place names; none if it is not in this file."""
    prefix = f"{path}: "
    if not where.startswith(prefix):
        return []
    rest = where.removeprefix(prefix).replace(": ", ".")
    part = re.match(r"part (\d+)\.?", rest)
    keys: list[str | int] = []
    here: Any = content
    if part:
        keys, here = ["part", int(part[1]) - 1], content["part"][int(part[1]) - 1]
        rest = rest[part.end() :]
    while rest and isinstance(here, Mapping):
        fitting = [k for k in here if rest == k or rest.startswith(f"{k}.")]
        if not fitting and len(keys) == 0:
            # Keys of [survey] that may stand in a part too are told without their table.
            fitting = ["survey"] if rest in content.get("survey", {}) else []
            rest = f"survey.{rest}" if fitting else rest
        if not fitting:
            break
        key = max(fitting, key=len)
        keys.append(key)
        here, rest = here[key], rest[len(key) + 1 :]
    return keys


def _set_aside(content: Any, keys: list[str | int]) -> None:
    holder = content
    for key in keys[:-1]:
        holder = holder[key]
    last = keys[-1]
    if isinstance(holder, list):
        # The parts that follow keep their numbers.
        holder[int(last)] = {"logs": ["set aside"]}
    elif keys[0] == "rule" and last == "require":
        _without_requirement(holder)
    else:
        holder.pop(last)
        if keys[0] == "limits" and len(keys) > 1:
            _without(content, str(keys[1]))


def _without_requirement(rule: dict[str, Any]) -> None:
    """A rule without its requirement would be a mistake of its own."""
    rule.pop("require")
    rule["not_from_pings"] = "set aside"


def _without(content: dict[str, Any], name: str) -> None:
    """Set aside what names a limit that was set aside: limits, and keys of rules."""
    content.get("limits", {}).pop(name, None)
    named = re.compile(rf"\b{re.escape(name)}\b")
    for limit, value in list(content.get("limits", {}).items()):
        if named.search(str(value)):
            _without(content, limit)
    rules = content.get("rule", {})
    for table in rules.values() if isinstance(rules, dict) else ():
        if not isinstance(table, dict):
            continue
        for key in [k for k, v in table.items() if named.search(str(v))]:
            if key == "require":
                _without_requirement(table)
            elif key != "not_from_pings":
                table.pop(key)
