"""Rule sheets: TOML read, laid over what they extend, checked and compiled."""

from __future__ import annotations

import hashlib
import math
import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, cast

from qa.engine import quantities
from qa.engine.expressions import (
    FUNCTIONS,
    REDUCERS,
    UNIT_NAMES,
    Expression,
    Symbol,
    compile_expression,
)
from qa.engine.remedies import Template, compile_template
from qa.model.columns import COLUMNS, SONAR_KINDS
from qa.model.errors import SheetError, UnitError, nearest
from qa.model.findings import Severity
from qa.model.shipped import shipped
from qa.model.survey_file import SurveyFile, read_toml
from qa.model.units import ONE, Unit, conversion, measure

RULE_KEYS = (
    *("title", "require", "allow", "allow_beams", "severity", "remedy", "source", "why", "says"),
    *("when", "join_pings", "keep_pings", "keep_when", "count", "clause", "not_from_pings"),
    "columns",
)
LIMIT_KEYS = ("value", "unit", "about", "source")
SHEET_KEYS = ("title", "about", "extends", "drop", "limits", "rule")
_NUMBER_AND_WORD = re.compile(r"\s*[\d.]+\s*[A-Za-zµ°]+\s*\Z")
SEVERITIES: tuple[Severity, ...] = ("out of spec", "advisory")


@dataclass(frozen=True, slots=True)
class Limit:
    """A named number or expression. ``text`` is as written, "" where no value is stated; ``origin`` is who wrote it."""

    name: str
    text: str
    unit: Unit
    expression: Expression | None
    about: str
    source: str
    origin: str

    @property
    def stated(self) -> bool:
        """Whether it has a value at all."""
        return self.expression is not None


@dataclass(frozen=True, slots=True)
class Rule:
    """One rule, compiled: a requirement, or the ``columns`` that must be logged. ``sheet`` is the sheet that first made it, ``changed_by`` those that changed it since."""

    id: str
    title: str
    text: str
    requirement: Expression | None
    allow: float
    allow_beams: float
    severity: Severity
    says: Mapping[str, Template]
    remedy: Mapping[str, Template]
    source: str
    why: str
    clause: str
    when: Expression | None
    join_pings: int
    keep_pings: int
    keep_when: Expression | None
    not_from_pings: str
    columns: tuple[str, ...]
    sheet: str
    changed_by: tuple[str, ...] = ()

    @property
    def text_expressions(self) -> tuple[Expression, ...]:
        """Every expression in the fields of its texts."""
        templates = (*self.says.values(), *self.remedy.values())
        return tuple(e for template in templates for e in template.expressions)

    def says_for(self, kind: str) -> Template:
        """What a section says of its cause, for one kind of sonar."""
        return self.says.get(kind, self.says.get("", Template()))

    def remedy_for(self, kind: str) -> Template:
        """What to set for the re-run, for one kind of sonar."""
        return self.remedy.get(kind, self.remedy.get("", Template()))


@dataclass(frozen=True, slots=True)
class RuleSheet:
    """A sheet with all it extends, ready to be planned."""

    name: str
    title: str
    about: str
    sha256: str
    extends: tuple[str, ...]
    limits: Mapping[str, Limit]
    rules: Mapping[str, Rule]


@dataclass(slots=True)
class _Raw:
    """A sheet while it is being merged."""

    title: str = ""
    about: str = ""
    limits: dict[str, dict[str, Any]] = field(default_factory=dict)
    rules: dict[str, dict[str, Any]] = field(default_factory=dict)
    names: list[str] = field(default_factory=list)
    hashes: list[str] = field(default_factory=list)


def shipped_sheets() -> list[str]:
    """Names of the sheets that come with the program."""
    return sorted(p.stem for p in shipped("rules").glob("*.toml") if p.stem != "assumed")


def load_sheet(
    sheet: str | Path = "physics",
    survey: SurveyFile | None = None,
    overrides: Mapping[str, Any] | None = None,
    base: Path | None = None,
) -> RuleSheet:
    """Read a rule sheet, with the limits that a survey file and the caller lay over it.

    Parameters
    ----------
    sheet : str or Path
        Name of a shipped sheet, or a path.
    survey : SurveyFile, optional
        Its [limits] override the sheet's.
    overrides : mapping, optional
        Limits that override both.
    base : Path, optional
        Folder that a relative path starts from; the working folder if left out.

    Raises
    ------
    SheetError
        With the file, rule and key, what was found and what was expected.
    """
    path = _find(str(sheet), base or Path.cwd(), "")
    raw = _merged(path, ())
    if survey is not None:
        where = f"{survey.path}: limits" if survey.path else "limits"
        for name, value in survey.limits.items():
            _override(raw, name, value, where, "survey file")
    for name, value in (overrides or {}).items():
        _override(raw, name, value, "--set", "--set")
    return _Builder(raw, path).built()


def sheet_from(path: Path, content: Mapping[str, Any]) -> RuleSheet:
    """A rule sheet whose file has been read already; errors name the file."""
    return _Builder(_merged(path, (), content), path).built()


def _find(name: str, base: Path, where: str) -> Path:
    if name in shipped_sheets():
        return shipped("rules") / f"{name}.toml"
    path = Path(name) if Path(name).is_absolute() else base / name
    if path.suffix == ".toml" or path.is_file():
        return path
    raise SheetError(
        f'There is no rule sheet "{name[:200]}".',
        where=where,
        expected="a shipped sheet's name or the path of a .toml file",
        advice=nearest(name[:80], shipped_sheets()),
    )


def _merged(path: Path, above: tuple[Path, ...], content: Mapping[str, Any] | None = None) -> _Raw:
    resolved = path.resolve()
    if resolved in above:
        raise SheetError(
            "A sheet extends itself.",
            where=str(path),
            found=" → ".join(p.stem for p in (*above, resolved)),
        )
    sha = ""
    if content is None:
        content, sha = read_toml(path, SheetError)
    name = path.stem
    _keys(content, SHEET_KEYS, f"{path}", "")
    for key in ("title", "about"):
        if not isinstance(content.get(key, ""), str):
            raise SheetError("Not a text.", where=f"{path}: {key}", found=repr(content[key]))
    raw = _Raw()
    for parent in _names(content.get("extends", []), f"{path}: extends"):
        below = _merged(_find(parent, path.parent, f"{path}: extends"), (*above, resolved))
        raw.names += [n for n in below.names if n not in raw.names]
        raw.hashes += below.hashes
        for limit, value in below.limits.items():
            raw.limits.setdefault(limit, {}).update(value)
        for rule, value in below.rules.items():
            raw.rules.setdefault(rule, {}).update(value)
    for dropped in _names(content.get("drop", []), f"{path}: drop"):
        if dropped not in raw.rules:
            raise SheetError(
                f'There is no rule "{dropped}" to drop.',
                where=f"{path}: drop",
                advice=nearest(dropped, raw.rules),
            )
        del raw.rules[dropped]
    raw.title, raw.about = content.get("title", name), content.get("about", "")
    raw.names.append(name)
    raw.hashes.append(sha)
    for limit, value in _table(content, "limits", path).items():
        _limit_laid(raw, limit, value, f"{path}: limits.{limit}", name)
    for rule, table in _table(content, "rule", path).items():
        where = f"{path}: rule.{rule}"
        if not isinstance(table, dict):
            raise SheetError(
                "Not a table.", where=where, found=repr(table), expected=f"[rule.{rule}]"
            )
        _keys(table, RULE_KEYS, where, "")
        kept = raw.rules.setdefault(rule, {})
        if kept:
            kept["_changed"] = (*kept.get("_changed", ()), name)
        else:
            kept["_sheet"] = name
        kept.update(table)
        kept["_where"] = where
    return raw


def _keys(table: Mapping[str, Any], valid: Sequence[str], where: str, prefix: str) -> None:
    for key in table:
        if key not in valid:
            raise SheetError(
                "Not a key of a rule sheet.",
                where=f"{where}: {prefix}{key}",
                advice=nearest(key, valid),
            )


def _names(value: Any, where: str) -> list[str]:
    value = [value] if isinstance(value, str) else value
    if not isinstance(value, list) or not all(isinstance(v, str) for v in value):
        raise SheetError(
            "Not a list of names.",
            where=where,
            found=repr(value),
            expected='a list such as ["physics"]',
        )
    return value


def _table(content: Mapping[str, Any], key: str, path: Path) -> Mapping[str, Any]:
    table = content.get(key, {})
    if not isinstance(table, dict):
        raise SheetError(
            "Not a table.", where=f"{path}: {key}", found=repr(table), expected=f"[{key}]"
        )
    return table


def _limit_laid(raw: _Raw, name: str, value: Any, where: str, origin: str) -> None:
    if not name.isidentifier():
        raise SheetError("Not a name.", where=where, found=name, expected="letters, digits and _")
    if quantities.symbol(name) is not None or name in (*FUNCTIONS, *REDUCERS, *UNIT_NAMES):
        raise SheetError(
            f'"{name}" is the name of a quantity, a function or a unit already.',
            where=where,
            advice="Call the limit otherwise.",
        )
    kept = raw.limits.setdefault(name, {})
    if isinstance(value, dict):
        _keys(value, LIMIT_KEYS, where, "")
        kept.update(value)
        if "value" not in value:
            kept.setdefault("value", None)
    else:
        kept["value"] = value
    kept["_origin"], kept["_where"] = origin, where


def _override(raw: _Raw, name: str, value: Any, where: str, origin: str) -> None:
    where = f"{where}.{name}" if where != "--set" else f"--set {name}"
    if name not in raw.limits:
        raise SheetError(
            f'The rule sheet has no limit "{name}".', where=where, advice=nearest(name, raw.limits)
        )
    _limit_laid(raw, name, value, where, origin)


class _Builder:
    def __init__(self, raw: _Raw, path: Path) -> None:
        self.raw, self.path = raw, path
        self.limits: dict[str, Limit] = {}
        self.building: list[str] = []

    def built(self) -> RuleSheet:
        for name in self.raw.limits:
            self._limit(name)
        rules = {}
        for name, table in self.raw.rules.items():
            rules[name] = self._rule(name, table)
        together = hashlib.sha256("\n".join(self.raw.hashes).encode()).hexdigest()
        return RuleSheet(
            self.path.stem,
            self.raw.title,
            self.raw.about,
            together,
            tuple(self.raw.names[:-1]),
            self.limits,
            rules,
        )

    def _symbol(self, name: str) -> Symbol | None:
        if name in self.raw.limits:
            return Symbol(self._limit(name).unit)
        return quantities.symbol(name)

    def _known(self) -> list[str]:
        return [*self.raw.limits, *quantities.names()]

    def _compiled(self, text: Any, where: str) -> Expression:
        if not isinstance(text, str):
            raise SheetError(
                "Not a text.", where=where, found=repr(text), expected="an expression in quotes"
            )
        return compile_expression(text, self._symbol, self._known, where)

    def _limit(self, name: str) -> Limit:
        if name in self.limits:
            return self.limits[name]
        table = self.raw.limits[name]
        where = table["_where"]
        if name in self.building:
            raise SheetError(
                "Limits that need each other.",
                where=where,
                found=" → ".join([*self.building, name]),
            )
        self.building.append(name)
        try:
            self.limits[name] = found = self._limit_built(name, table, where)
        finally:
            self.building.pop()
        return found

    def _limit_built(self, name: str, table: Mapping[str, Any], where: str) -> Limit:
        declared: Unit | None = None
        for key in ("unit", "about", "source"):
            if not isinstance(table.get(key, ""), str):
                raise SheetError("Not a text.", where=f"{where}.{key}", found=repr(table[key]))
        if "unit" in table:
            try:
                declared = conversion(table["unit"]).unit
            except UnitError as error:
                raise SheetError(
                    error.message,
                    where=f"{where}.unit",
                    found=table["unit"],
                    expected=error.expected,
                ) from None
        value = table.get("value")
        more = (table.get("about", ""), table.get("source", ""), table["_origin"])
        if value is None:
            if declared is None:
                raise SheetError(
                    "A limit without a value says its unit.", where=where, expected='unit = "m"'
                )
            return Limit(name, "", declared, None, *more)
        if isinstance(value, bool) or not isinstance(value, int | float | str):
            raise SheetError(
                "Not a limit.",
                where=where,
                found=repr(value),
                expected='a text such as "1 m", a number or an expression',
            )
        if isinstance(value, float) and not math.isfinite(value):
            raise SheetError("Not a finite number.", where=where, found=repr(value))
        expression = self._value(value, declared, where)
        if declared is not None and expression.unit != declared:
            raise SheetError(
                "The unit is of the wrong kind.",
                where=where,
                found=f"{value} (unit {expression.unit})",
                expected=f"a value in {declared}",
            )
        return Limit(name, str(value), expression.unit, expression, *more)

    def _value(self, value: int | float | str, declared: Unit | None, where: str) -> Expression:
        try:
            number, unit = measure(value)
        except UnitError as error:
            if isinstance(value, str) and _NUMBER_AND_WORD.match(value):
                raise SheetError(
                    error.message, where=where, found=value, expected=error.expected
                ) from None
            return self._compiled(value, where)
        if number == 0.0 and unit == ONE and declared is not None:
            unit = declared
        return Expression(
            str(value), unit, "number", frozenset(), {}, lambda values: number, literal=number
        )

    def _rule(self, name: str, table: Mapping[str, Any]) -> Rule:
        where = table["_where"]
        for key in (
            "title",
            "require",
            "severity",
            "source",
            "why",
            "when",
            "keep_when",
            "count",
            "clause",
            "not_from_pings",
        ):
            if key in table and not isinstance(table[key], str):
                raise SheetError(
                    "Not a text.",
                    where=f"{where}: {key}",
                    found=repr(table[key]),
                    expected="a text in quotes",
                )
        cannot = table.get("not_from_pings", "")
        columns = self._columns(table, where)
        if "require" not in table and not cannot and columns is None:
            raise SheetError(
                "A rule says what it requires.", where=where, expected='require = "a <= b"'
            )
        if columns is not None and "require" in table:
            raise SheetError(
                "A rule either requires columns or compares.",
                where=f"{where}: require",
                advice="Make two rules of it.",
            )
        if columns == ():
            cannot = cannot or "the sheet names no column that must be logged"
        requirement = None
        text = table.get("require", "")
        if columns:
            text = f"logged: {', '.join(columns)}"
        elif not cannot:
            count = table.get("count", "guaranteed")
            if count not in ("guaranteed", "possible"):
                raise SheetError(
                    "Not a way to count hits.",
                    where=f"{where}: count",
                    found=count,
                    expected='"guaranteed" or "possible"',
                )
            if count == "possible":
                text = text.replace("guaranteed_hits", "possible_hits").replace(
                    "guaranteed_beams", "possible_beams"
                )
            requirement = self._compiled(text, f"{where}: require")
            if requirement.type != "truth":
                raise SheetError(
                    "A requirement compares.",
                    where=f"{where}: require",
                    found=text,
                    expected='a comparison such as "a <= b"',
                )
            if not requirement.names:
                raise SheetError(
                    "A requirement names a quantity.", where=f"{where}: require", found=text
                )
        severity = table.get("severity", "out of spec")
        if severity not in SEVERITIES:
            raise SheetError(
                "Not a severity.",
                where=f"{where}: severity",
                found=severity,
                expected=" or ".join(f'"{s}"' for s in SEVERITIES),
                advice=nearest(severity, SEVERITIES),
            )
        when = self._condition(table, "when", where)
        return Rule(
            id=name,
            title=table.get("title", name.replace("-", " ").capitalize()),
            text=text,
            requirement=requirement,
            allow=self._share(table, "allow", where),
            allow_beams=self._share(table, "allow_beams", where),
            severity=cast(Severity, severity),
            says=self._template(table, "says", where),
            remedy=self._template(table, "remedy", where),
            source=table.get("source", ""),
            why=table.get("why", ""),
            clause=table.get("clause", ""),
            when=when,
            join_pings=self._count(table, "join_pings", 2, 0, where),
            keep_pings=self._count(table, "keep_pings", 3, 1, where),
            keep_when=self._condition(table, "keep_when", where),
            not_from_pings=cannot,
            columns=columns or (),
            sheet=table["_sheet"],
            changed_by=table.get("_changed", ()),
        )

    def _columns(self, table: Mapping[str, Any], where: str) -> tuple[str, ...] | None:
        if "columns" not in table:
            return None
        names = _names(table["columns"], f"{where}: columns")
        valid = [c.name for c in COLUMNS.values() if c.kind in ("number", "flag", "form")]
        for name in names:
            if name not in valid:
                raise SheetError(
                    f'There is no column "{name[:80]}".',
                    where=f"{where}: columns",
                    advice=nearest(name[:80], valid),
                )
        return tuple(names)

    def _condition(self, table: Mapping[str, Any], key: str, where: str) -> Expression | None:
        if key not in table:
            return None
        found = self._compiled(table[key], f"{where}: {key}")
        if found.type != "truth":
            raise SheetError("A condition compares.", where=f"{where}: {key}", found=table[key])
        return found

    def _share(self, table: Mapping[str, Any], key: str, where: str) -> float:
        if key not in table:
            return 0.0
        try:
            share = measure(table[key], ONE, f"{where}: {key}")[0]
        except UnitError as error:
            raise SheetError(
                error.message,
                where=f"{where}: {key}",
                found=error.found,
                expected='a share such as "5 %"',
            ) from None
        if not 0.0 <= share < 1.0:
            raise SheetError(
                "Not a share.",
                where=f"{where}: {key}",
                found=repr(table[key]),
                expected='"0 %" to under "100 %"',
            )
        return share

    def _count(
        self, table: Mapping[str, Any], key: str, default: int, least: int, where: str
    ) -> int:
        value = table.get(key, default)
        if isinstance(value, bool) or not isinstance(value, int) or not least <= value <= 100_000:
            raise SheetError(
                "Not a number of pings.",
                where=f"{where}: {key}",
                found=repr(value),
                expected=f"a whole number from {least}",
            )
        return value

    def _template(self, table: Mapping[str, Any], key: str, where: str) -> Mapping[str, Template]:
        """A text, or a table of texts by kind of sonar; "otherwise" is for the rest."""
        given = table.get(key, "")
        texts = given if isinstance(given, dict) else {"otherwise": given}
        found = {}
        for kind, text in texts.items():
            if kind not in (*SONAR_KINDS, "otherwise"):
                raise SheetError(
                    "Not a kind of sonar.",
                    where=f"{where}: {key}.{kind}",
                    advice=nearest(kind, (*SONAR_KINDS, "otherwise")),
                )
            if not isinstance(text, str):
                raise SheetError("Not a text.", where=f"{where}: {key}", found=repr(text))
            found["" if kind == "otherwise" else kind] = compile_template(
                text, self._compiled, f"{where}: {key}"
            )
        return found
