"""What the commands ``rules`` and ``explain`` print: a sheet with its survey file, in plain words."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path

from qa.engine.explain import explain
from qa.engine.one_ping import OnePing, given_value
from qa.engine.rule_list import list_rules
from qa.engine.sheets import RuleSheet, load_sheet
from qa.engine.user_quantities import allowed_python, use_python
from qa.job import cast_of
from qa.model.survey_file import SurveyFile, load_survey_file


def rules_text(
    sheet: str | None = None,
    survey: Path | None = None,
    limits: Mapping[str, str] | None = None,
    log: Path | None = None,
    width: int = 80,
    allow_python: bool = False,
) -> str:
    """Every rule of a sheet, as text.

    Parameters
    ----------
    sheet : str, optional
        Name or path; the survey file's if left out, else "physics".
    survey : Path, optional
    limits : mapping of str to str, optional
        Limits that override both, as text.
    log : Path, optional
        The log whose [[part]] of the survey file counts.
    width : int
        Columns of the terminal.
    allow_python : bool
        Whether the Python file that the survey file names, if any, may be run.
    """
    facts = _facts(survey, log, allow_python)
    loaded = _sheet(sheet, facts, limits or {})
    whole = facts if log is None else None
    return list_rules(loaded, OnePing(loaded, {}, facts), whole, width)


def explain_text(
    name: str,
    sheet: str | None = None,
    survey: Path | None = None,
    depth: str | None = None,
    given: Mapping[str, str] | None = None,
    limits: Mapping[str, str] | None = None,
    log: Path | None = None,
    width: int = 80,
    allow_python: bool = False,
) -> str:
    """One rule, limit or quantity in full, as text.

    Parameters
    ----------
    depth : str, optional
        Depth that limits are worked out for; it stands for the measured and for the reduced depth.
    given : mapping of str to str, optional
        Other values to work with, of quantities or limits, as text with units.
    """
    facts = _facts(survey, log, allow_python)
    overrides = dict(limits or {})
    loaded = _sheet(sheet, facts, overrides)
    overrides |= {n: v for n, v in (given or {}).items() if n in loaded.limits}
    if given and overrides:
        loaded = _sheet(sheet, facts, overrides)
    values = {}
    if depth is not None:
        values["depth"] = values["reduced_depth"] = given_value("depth", depth, "--depth")
    for quantity, text in (given or {}).items():
        if quantity not in loaded.limits:
            values[quantity] = given_value(quantity, text)
    return explain(name, loaded, OnePing(loaded, values, facts, cast_of(facts)), width)


def _facts(survey: Path | None, log: Path | None, allow_python: bool) -> SurveyFile:
    facts = load_survey_file(survey) if survey is not None else SurveyFile()
    use_python(allowed_python(facts, allow_python))
    return facts.for_log(log) if log is not None else facts


def _sheet(sheet: str | None, facts: SurveyFile, limits: Mapping[str, str]) -> RuleSheet:
    if sheet:
        return load_sheet(sheet, facts, limits, Path.cwd())
    return load_sheet(facts.sheet or "physics", facts, limits, facts.folder)
