"""Before the first audit: what logs hold, which rules wait for what, and a survey file to start from."""

from __future__ import annotations

import os
import textwrap
import tomllib
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any, cast

from qa.engine.evaluate import line_kind
from qa.engine.plans import Available, Plan, make_plan
from qa.engine.sheets import RuleSheet, load_sheet
from qa.engine.user_quantities import allowed_python, use_python
from qa.ingest.describe import ColumnDescription, Description, Layout, describe_logs
from qa.ingest.times import iso
from qa.model.columns import COLUMNS
from qa.model.errors import OutputError
from qa.model.log import LineLog
from qa.model.survey_file import STATED, SurveyFile, load_survey_file
from qa.model.units import Unit, readable

WIDTH = 80


@dataclass(frozen=True, slots=True)
class Waiting:
    """Which rules a layout's logs can be assessed by, and what the others wait for.

    ``missing`` holds for each input that is neither logged nor stated the rules that need it; ``assumed`` the values
    that are taken where nothing is said, as text. ``never`` are rules that no log of pings shows.
    """

    kind: str
    kind_assumed: bool
    assessable: tuple[str, ...]
    missing: Mapping[str, tuple[str, ...]]
    never: tuple[str, ...]
    exempt: tuple[str, ...]
    assumed: Mapping[str, str]

    @property
    def waiting(self) -> tuple[str, ...]:
        """Rules that wait for any input."""
        return tuple(dict.fromkeys(rule for rules in self.missing.values() for rule in rules))


@dataclass(frozen=True, slots=True)
class _Shape:
    """As much of an opened line as tells the sonar's kind."""

    grain: str
    beam_columns: frozenset[str]


def waiting_rules(layout: Layout, sheet: RuleSheet) -> Waiting:
    """Which rules of a sheet can be assessed on a layout's logs, told by making their plan.

    Parameters
    ----------
    layout : Layout
    sheet : RuleSheet
        With the limits of the layout's survey.
    """
    survey = layout.survey
    present = layout.present
    beams = frozenset(n for n in present if COLUMNS[n].grain == "beam")
    kind, assumed_kind = line_kind(cast(LineLog, _Shape(layout.grain, beams)), survey)
    pings = frozenset(n for n in present if COLUMNS[n].grain == "ping" and n not in _NAMES)
    if kind == "side-scan" and "depth" in beams:
        pings, beams = pings | {"depth"}, frozenset()
    stated: dict[str, Any] = {**survey.stated, "kind": kind}
    if survey.profile is not None:
        stated["cast"] = str(survey.profile)
    if survey.says_depth_from:
        stated["depth_from"] = survey.depth_from
    available = Available(
        kind, pings | {"time"}, beams, stated, layout.grain == "ping", assumed_kind
    )
    plan = make_plan(sheet, available)
    rules = [p for p in plan.rules if not p.rule.not_from_pings]
    assumed = {
        key: node.value if isinstance(node.value, str) else readable(float(node.value), node.unit)
        for key, node in sorted(plan.nodes.items())
        if node.way == "assumed" and node.value is not None and key != "accepted"
    }
    return Waiting(
        kind,
        assumed_kind,
        tuple(p.rule.id for p in rules if p.applies and not p.missing),
        _missing(sheet, available, plan),
        tuple(p.rule.id for p in plan.rules if p.rule.not_from_pings),
        tuple(p.rule.id for p in rules if not p.applies),
        assumed,
    )


def _missing(sheet: RuleSheet, available: Available, plan: Plan) -> dict[str, tuple[str, ...]]:
    """What rules wait for.

    A plan names the first inputs that a rule lacks; what it would lack once these were there is found by planning
    again as if they were.
    """
    found: dict[str, dict[str, None]] = {}
    waiting = {p.rule.id for p in plan.rules if p.applies and p.missing}
    for _ in range(_ROUNDS):
        lacking = [p for p in plan.rules if p.applies and p.missing and p.rule.id in waiting]
        for planned in lacking:
            for name in planned.missing:
                found.setdefault(name, {})[planned.rule.id] = None
        before = available
        available = _as_if_there(available, {n for p in lacking for n in p.missing})
        if available == before:
            break
        plan = make_plan(sheet, available)
    return {name: tuple(rules) for name, rules in sorted(found.items())}


def _as_if_there(available: Available, names: Iterable[str]) -> Available:
    pings, beams, stated = set(available.ping_columns), set(available.beam_columns), {}
    for name in names:
        if name in COLUMNS:
            (pings if COLUMNS[name].grain == "ping" or available.makes_beams else beams).add(name)
        elif _table_of(name) or name == "cast":
            stated[name] = 1.0
    return replace(
        available,
        ping_columns=frozenset(pings),
        beam_columns=frozenset(beams),
        stated={**stated, **available.stated},
    )


_ROUNDS = 6
_NAMES = ("line", "channel")


@dataclass(frozen=True, slots=True)
class Start:
    """What logs hold, with the sheet of each layout and what its rules wait for."""

    description: Description
    waiting: tuple[Waiting, ...]
    sheets: tuple[RuleSheet, ...]
    survey: SurveyFile

    def text(self) -> str:
        """For a terminal of 80 columns."""
        return columns_text(self.description, self.waiting, self.sheets)

    def write(self, path: Path) -> None:
        """Write a survey file to start from where there is none."""
        write_survey(
            path,
            survey_text(
                self.description, self.waiting, self.sheets, self.survey, path.resolve().parent
            ),
        )


def describe(
    logs: Sequence[str | Path],
    survey: str | Path | SurveyFile | None = None,
    sheet: str | Path | None = None,
    allow_python: bool = False,
) -> Start:
    """Describe logs, and by the sheet's rules what is missing in them.

    Parameters
    ----------
    logs : sequence of paths
        Files, folders or patterns.
    survey : path or SurveyFile, optional
        What is true of the survey.
    sheet : str or path, optional
        Rule sheet; beats the survey file's. Default "physics".
    allow_python : bool
        Whether the Python file that the survey file names, if any, may be run.

    Raises
    ------
    PingworthyError
        If a sheet or survey file cannot be used, or a path matches nothing. Logs that cannot be used are described.
    """
    facts = (
        survey
        if isinstance(survey, SurveyFile)
        else load_survey_file(survey)
        if survey
        else SurveyFile()
    )
    use_python(allowed_python(facts, allow_python))
    name = str(sheet) if sheet else facts.sheet or "physics"
    base = Path.cwd() if sheet else facts.folder
    description = describe_logs(logs, facts)
    sheets = tuple(load_sheet(name, layout.survey, None, base) for layout in description.layouts)
    if not sheets:
        load_sheet(name, facts, None, base)
    waiting = tuple(
        waiting_rules(layout, rules)
        for layout, rules in zip(description.layouts, sheets, strict=True)
    )
    return Start(description, waiting, sheets, facts)


# What is printed


def columns_text(
    description: Description, waiting: Sequence[Waiting], sheets: Sequence[RuleSheet]
) -> str:
    """All of a description, for a terminal of 80 columns."""
    lines: list[str] = []
    several = len(description.layouts) > 1
    for number, (layout, waits, sheet) in enumerate(
        zip(description.layouts, waiting, sheets, strict=True), start=1
    ):
        title = f"Layout {number} of {len(description.layouts)}: " if several else ""
        lines += [*_wrapped(title + _files_text(layout)), *_layout_lines(layout), ""]
        lines += [*_waiting_lines(layout, waits, sheet), ""]
    if description.failed:
        lines.append("Not usable")
        for item in description.failed:
            lines += _wrapped(item.error or item.path, "  ", "    ")
        lines.append("")
    return "\n".join(lines).rstrip()


def _files_text(layout: Layout) -> str:
    count = len(layout.files)
    form = ", or ".join(layout.forms[:3]) + (", or others" if len(layout.forms) > 3 else "")
    names = layout.files[0] if count == 1 else f"{count} files, {layout.files[0]} and others"
    row = "a ping" if layout.grain == "ping" or layout.layout != "long" else "a beam"
    beams = {"list": ", its beams in lists", "wide": ", its beams side by side"}.get(
        layout.layout, ""
    )
    return f"{names} ({form}; a row is {row}{beams})"


def _layout_lines(layout: Layout) -> list[str]:
    whole = "" if layout.read == len(layout.files) else f" of the first {layout.read} files"
    lines = _wrapped(
        f"{_count(layout.rows_read)} rows{whole}"
        + (f", {_count(layout.rows_rejected)} rejected" if layout.rows_rejected else ", all usable")
        + ".",
        "  ",
    )
    for reason, count in layout.reasons[:6]:
        lines += _wrapped(f"rejected: {reason} ({_count(count)})", "    ", "      ")
    for item in layout.failed:
        lines += _wrapped(f"not read to its end: {item.error}", "    ", "      ")
    lines += ["", f"  {'Recognised':<18}{'in the file as':<33}{'unit':<20}missing"]
    for column in layout.columns:
        lines += _column_lines(column, layout)
    doubtful = [(n, a) for n, a in layout.unused if a]
    others = [n for n, a in layout.unused if not a]
    if doubtful:
        lines += ["", "  In doubt, and not used"]
        for name, advice in doubtful:
            told = advice if f'"{name}"' in advice else f'"{name}": {advice}'
            lines += _wrapped(told[0].upper() + told[1:], "    ", "      ")
    if others or layout.ignored:
        lines += ["", "  Not used"]
        if others:
            lines += _wrapped(", ".join(f'"{n}"' for n in others), "    ")
        if layout.ignored:
            names = ", ".join(f'"{n}"' for n in layout.ignored)
            lines += _wrapped(f"as the survey file says: {names}", "    ", "      ")
    told_above = {advice for _, advice in doubtful}
    notes = [n for n in layout.notes if n not in told_above]
    if notes:
        lines += ["", "  Notes"]
        for note in notes:
            lines += _wrapped(note, "    ", "      ")
    return lines


def _column_lines(column: ColumnDescription, layout: Layout) -> list[str]:
    if column.sources:
        source = f'"{column.sources[0]}"'
        if len(column.sources) > 1 and column.name == "time":
            source = " + ".join(f'"{s}"' for s in column.sources)
        elif len(column.sources) > 1:
            source = (
                f'"{column.sources[0]}" to "{column.sources[-1]}" ({len(column.sources)} columns)'
            )
    else:
        source = "the columns' numbers" if column.name == "beam" else "the folder's name"
    unit = _unit_text(column, layout)
    missing = _percent(column.missing)
    if len(source) <= 32 and len(unit) <= 19:
        lines = [f"  {column.name:<18}{source:<33}{unit:<20}{missing:>7}"]
    else:
        lines = [f"  {column.name:<71}{missing:>7}"]
        lines += _wrapped(f"{source}, {unit}" if unit else source, "      ")
    told = []
    if column.named_by_survey:
        told.append("named in the survey file")
    told.append(_range_text(column))
    if column.example:
        told.append(f"e.g. {column.example}")
    return lines + _wrapped("; ".join(t for t in told if t), "      ")


def _unit_text(column: ColumnDescription, layout: Layout) -> str:
    if column.name == "time":
        return column.unit + " (survey file)" if column.unit_from == "survey file" else layout.time
    if column.unit_from == "none":
        return ""
    if column.unit_from == "taken as is":
        return f"{COLUMNS[column.name].unit} (none given)"
    return f"{column.unit} ({column.unit_from})"


def _range_text(column: ColumnDescription) -> str:
    if column.names:
        more = (
            f" and {column.distinct - len(column.names)} more"
            if column.distinct > len(column.names)
            else ""
        )
        return ", ".join(column.names) + more
    if column.least is None or column.greatest is None:
        return "no value"
    if column.name == "time":
        return f"{iso(int(column.least))} to {iso(int(column.greatest))}"
    unit = COLUMNS[column.name].unit
    if column.name in ("latitude", "longitude"):
        texts = [f"{v:.6f}".rstrip("0").rstrip(".") + "°" for v in (column.least, column.greatest)]
    elif column.name in ("easting", "northing"):
        texts = [f"{v:.2f} m" for v in (column.least, column.greatest)]
    elif isinstance(column.least, int) or column.name == "beam":
        texts = [f"{v:.0f}" for v in (column.least, column.greatest)]
    else:
        texts = [readable(float(v), unit) for v in (column.least, column.greatest)]
    return texts[0] if texts[0] == texts[1] else " to ".join(texts)


def _waiting_lines(layout: Layout, waits: Waiting, sheet: RuleSheet) -> list[str]:
    total = len(waits.assessable) + len(waits.waiting)
    kind = f"{waits.kind}, by the shape of the log" if waits.kind_assumed else waits.kind
    lines = _wrapped(
        f"Sheet {sheet.name}, {kind}: {len(waits.assessable)} of {total} rules can be assessed.",
        "  ",
    )
    if waits.missing:
        lines += ["", "  Missing, and the rules that wait for it"]
        alike: dict[tuple[str, tuple[str, ...]], list[str]] = {}
        for name, rules in waits.missing.items():
            where = _where_to_say(name, sheet, layout.survey)
            alike.setdefault((where, rules), []).append(name)
        for (where, rules), names in sorted(alike.items(), key=lambda item: -len(item[0][1])):
            lines += _wrapped(f"{', '.join(names)}: {where}", "    ", "      ")
            lines += _wrapped(", ".join(rules), "        ")
    if waits.assumed:
        lines += ["", "  Assumed, since neither logged nor stated"]
        pairs = [f"{name} {value}" for name, value in waits.assumed.items()]
        lines += _wrapped(", ".join(pairs), "    ")
    others = [n for n in layout.missing if n not in waits.missing and n not in waits.assumed]
    for title, stated in (("stated", True), ("no rule waits for it", False)):
        names = [n for n in others if (n in layout.survey.stated) is stated]
        if names:
            lines += ["", f"  Not logged, and {title}", *_wrapped(", ".join(names), "    ")]
    if waits.never:
        lines += ["", "  Rules that no log of pings can show"]
        lines += _wrapped(", ".join(waits.never), "    ")
    return lines


def _where_to_say(name: str, sheet: RuleSheet, survey: SurveyFile) -> str:
    """Where a missing value can be stated."""
    table = _table_of(name)
    if name in sheet.limits:
        return "under [limits]"
    if name == "cast":
        return "a sound speed cast, named as profile under [water]"
    if name in survey.stated and name in COLUMNS:
        return "in the log (it is stated, but these look at what was logged)"
    if table and name in COLUMNS:
        return f"in the log, or under [{table}]"
    if table:
        return f"under [{table}]"
    return "in the log" if name in COLUMNS else "these logs do not give it"


def _table_of(name: str) -> str:
    return next((table for table, keys in STATED.items() if name in keys), "")


def _wrapped(text: str, first: str = "", then: str | None = None) -> list[str]:
    return textwrap.wrap(
        text,
        WIDTH,
        initial_indent=first,
        subsequent_indent=first if then is None else then,
        break_on_hyphens=False,
        break_long_words=False,
    ) or [first.rstrip()]


def _percent(share: float) -> str:
    if share == 0.0:
        return "none"
    if share == 1.0:
        return "all"
    text = f"{100.0 * share:.2g} %"
    return text if share >= 1e-4 else "< 0.01 %"


def _count(number: int) -> str:
    return f"{number:,}".replace(",", "\u202f")


# The survey file to start from

_EXAMPLES = {
    "frequency": "300 kHz",
    "pulse_length": "60 us",
    "pulse_form": "CW",
    "bandwidth": "30 kHz",
    "beamwidth_along": "1.0 deg",
    "beamwidth_across": "1.0 deg",
    "mount_angle": "0 deg",
    "transducer_depth": "0.8 m",
    "source_level": "215 dB",
    "range_scale": "50 m",
    "ping_rate": "10 Hz",
    "gain": "0 dB",
    "sound_speed": "1490 m/s",
    "temperature": "12 degC",
    "salinity": "35",
    "tide": "0 m",
    "altitude": "10 m",
    "speed": "4 kt",
    "target_size": "1 m",
    "near_range": "15 m",
}


def survey_text(
    description: Description,
    waiting: Sequence[Waiting],
    sheets: Sequence[RuleSheet],
    survey: SurveyFile,
    folder: Path,
) -> str:
    """A survey file to start from: what is said already, and as comments all that rules wait for.

    Every line that would state something new is a comment: nothing is true of a survey because a program wrote it.

    Parameters
    ----------
    description : Description
    waiting, sheets : sequences, one of each layout
    survey : SurveyFile
        What is said already, carried over.
    folder : Path
        Where the file will lie: paths in it start there.
    """
    said = _said(survey, folder)
    layouts = description.layouts
    lines = [
        "# A survey file to start from. Lines that begin with # say nothing yet: take the mark away,",
        "# and put in what is true of this survey. Everything is optional; what is neither logged nor",
        "# stated is assumed or leaves rules not assessed, and the report says which.",
        "",
    ]
    head = dict(said.pop("survey", {}))
    lines += ["[survey]"]
    lines += [f"{key} = {_toml(value)}" for key, value in head.items()]
    sheet_names = {sheet.name for sheet in sheets} or {"physics"}
    if "name" not in head:
        lines.append('# name       = ""                     # what the report calls the survey')
    if "sheet" not in head:
        lines.append(
            f'# sheet      = "{sorted(sheet_names)[0]}"              # a shipped sheet, or a path'
        )
    if "depth_from" not in head:
        lines.append(
            '# depth_from = "waterline"            # or "transducer", or "datum": what depths are counted from'
        )
    if "time_zone" not in head and any("no time zone" in n for x in layouts for n in x.notes):
        lines.append('# time_zone  = "UTC"                  # the log\'s times carry none')
    parts = said.pop("part", [])
    groups = _by_kind(layouts, waiting, sheets)
    base = _Suggestions()
    if len(groups) == 1:
        base = groups[0].suggestions
    else:
        base.tables = _taken_out(groups)
    for item in description.failed:
        base.comment("columns", str(item.error))
        if "has no header" in (item.error or ""):
            base.say("columns", "order", _toml(["time", "depth"]), "every column, in its order")
    for table in dict.fromkeys((*said, *base.tables)):
        lines += ["", f"[{table}]"]
        content = dict(said.get(table, {}))
        units = content.pop("units", None) if table == "columns" else None
        lines += [f"{_key(key)} = {_toml(value)}" for key, value in content.items()]
        lines += base.lines(table)
        if units:
            lines += ["", "[columns.units]", *(f"{_key(k)} = {_toml(v)}" for k, v in units.items())]
    for part in parts:
        lines += ["", *_part_lines(part)]
    if len(groups) > 1:
        patterns = _patterns([group.paths for group in groups], folder)
        for group, logs in zip(groups, patterns, strict=True):
            if group.suggestions.tables:
                lines += ["", "[[part]]", f"logs = {_toml(logs)}"]
            for table in group.suggestions.tables:
                told = [
                    t.replace("[columns", "[part.columns") for t in group.suggestions.lines(table)
                ]
                lines += ["", f"[part.{table}]", *told]
    return "\n".join(lines) + "\n"


@dataclass(slots=True)
class _Suggestions:
    """Lines that say nothing yet, by table and key: value and why. A key that is no name holds a comment."""

    tables: dict[str, dict[str, tuple[str, str]]] = field(default_factory=dict)

    def say(self, table: str, key: str, value: str, why: str) -> None:
        """One more key, unless it is there; ``value`` as TOML writes it."""
        self.tables.setdefault(table, {}).setdefault(key, (value, why))

    def comment(self, table: str, text: str) -> None:
        """One more comment, once."""
        self.tables.setdefault(table, {}).setdefault(f"# {text}", ("", ""))

    def lines(self, table: str) -> list[str]:
        """The lines of a table."""
        found = []
        for key, (value, why) in self.tables.get(table, {}).items():
            if key.startswith("# "):
                found += [f"# {t}" for t in textwrap.wrap(key[2:], 90, break_on_hyphens=False)]
            else:
                text = f"# {key:<16} = {value}"
                found.append(f"{text:<38} # {why}" if why else text)
        return found


@dataclass(slots=True)
class _Group:
    """Layouts of one kind of sonar: they share what is to be stated."""

    kind: str
    paths: list[Path]
    suggestions: _Suggestions


def _by_kind(
    layouts: Sequence[Layout], waiting: Sequence[Waiting], sheets: Sequence[RuleSheet]
) -> list[_Group]:
    groups: dict[str, _Group] = {}
    for layout, waits, sheet in zip(layouts, waiting, sheets, strict=True):
        group = groups.setdefault(waits.kind, _Group(waits.kind, [], _Suggestions()))
        group.paths += layout.paths
        _suggest(group.suggestions, layout, waits, sheet)
    return list(groups.values())


def _taken_out(groups: Sequence[_Group]) -> dict[str, dict[str, tuple[str, str]]]:
    """What all groups suggest alike, taken out of each."""
    common: dict[str, dict[str, tuple[str, str]]] = {}
    for table, keys in groups[0].suggestions.tables.items() if groups else ():
        for key, told in keys.items():
            values = [g.suggestions.tables.get(table, {}).get(key, ("?", ""))[0] for g in groups]
            if set(values) == {told[0]}:
                common.setdefault(table, {})[key] = told
    for group in groups:
        for table, keys in common.items():
            for key in keys:
                del group.suggestions.tables[table][key]
            if not group.suggestions.tables[table]:
                del group.suggestions.tables[table]
    return common


def _suggest(into: _Suggestions, layout: Layout, waits: Waiting, sheet: RuleSheet) -> None:
    """All that could be said of a layout's logs."""
    if waits.kind_assumed:
        into.say("sonar", "kind", _toml(waits.kind), "taken so by the shape of the log")
    for name, value in waits.assumed.items():
        table = _table_of(name)
        if table:
            into.say(table, name, _example(name, value), f"assumed: {value}")
    for name, rules in waits.missing.items():
        if name in layout.survey.stated:
            continue
        table = "limits" if name in sheet.limits else _table_of(name)
        why = "for " + ", ".join(rules[:3]) + (", …" if len(rules) > 3 else "")
        if table:
            unit = sheet.limits[name].unit if name in sheet.limits else None
            into.say(table, name, _example(name, "", unit), why)
        elif name == "cast":
            into.say("water", "profile", _toml("cast.csv"), why)
        elif name in COLUMNS and any(not advice for _, advice in layout.unused):
            into.say("columns", name, _toml("its name in the log"), why)
    for name, advice in layout.unused:
        if advice:
            into.comment("columns", advice if f'"{name}"' in advice else f'"{name}": {advice}')
    plain = [n for n, a in layout.unused if not a]
    if plain:
        into.comment("columns", "Not used: " + ", ".join(_toml(n) for n in plain))
    unknown = [
        f"{c.name} = {_toml(str(COLUMNS[c.name].unit))}"
        for c in layout.columns
        if c.unit_from == "taken as is" and c.name not in ("latitude", "longitude")
    ]
    if unknown:
        into.comment(
            "columns",
            "No unit is given for these, and they were taken so; if they are in another, write it under "
            f"[columns.units]: {', '.join(unknown)}",
        )
    if layout.survey.lines.source == "file" and any('from = "column"' in n for n in layout.notes):
        into.say("lines", "from", _toml("column"), "the log names several lines")


def _example(name: str, value: str, unit: Unit | None = None) -> str:
    """A value to be replaced by the true one, as TOML writes it."""
    stated = next((keys[name] for keys in STATED.values() if name in keys), None)
    if isinstance(stated, tuple):
        return _toml(value or stated[0])
    if stated is int or name == "hits_required":
        return value or "3"
    if name in _EXAMPLES:
        return _toml(_EXAMPLES[name])
    kind = str(unit if unit is not None else stated)
    if name.endswith("_sigma"):
        return _toml(f"0.05 {kind}")
    return "1" if kind == "1" else _toml(f"1 {kind.replace('·', ' * ')}")


def _said(survey: SurveyFile, folder: Path) -> dict[str, Any]:
    """The tables of the survey file that is there, its paths turned to start from another folder."""
    if survey.path is None:
        return {}
    raw: dict[str, Any] = tomllib.loads(survey.path.read_text(encoding="utf-8-sig"))
    base = survey.path.parent

    def moved(text: str) -> str:
        if Path(text).is_absolute():
            return text
        return _relative(base / text, folder)

    tables = [raw, *raw.get("part", [])]
    for table in tables:
        water = table.get("water", {})
        if "profile" in water:
            water["profile"] = moved(water["profile"])
        if "logs" in table:
            logs = table["logs"]
            table["logs"] = [moved(log) for log in ([logs] if isinstance(logs, str) else logs)]
    sheet = raw.get("survey", {}).get("sheet", "")
    if sheet and (base / sheet).is_file():
        raw["survey"]["sheet"] = moved(sheet)
    return raw


def _relative(path: Path, folder: Path) -> str:
    try:
        return Path(os.path.relpath(path.resolve(), folder.resolve())).as_posix()
    except ValueError:
        # On Windows there is no way from one drive to another.
        return path.resolve().as_posix()


def _patterns(groups: Sequence[Sequence[Path]], folder: Path) -> list[list[str]]:
    """For each group of files patterns that match them and no other group's."""
    every = {path.resolve() for group in groups for path in group}
    found = []
    for group in groups:
        own = {path.resolve() for path in group}
        patterns: list[str] = []
        for place, ending in sorted({(p.parent, p.suffix) for p in own}):
            alike = {p for p in every if p.parent == place and p.suffix == ending}
            if alike <= own and len(alike) > 1:
                patterns.append(f"{_escaped(_relative(place, folder))}/*{_escaped(ending)}")
            else:
                patterns += sorted(_escaped(_relative(p, folder)) for p in alike & own)
        found.append(patterns)
    return found


def _escaped(text: str) -> str:
    return "".join(f"[{c}]" if c in "[*?" else c for c in text)


def _part_lines(part: Mapping[str, Any]) -> list[str]:
    lines = ["[[part]]"]
    lines += [f"{_key(k)} = {_toml(v)}" for k, v in part.items() if not isinstance(v, Mapping)]
    for name, table in part.items():
        if isinstance(table, Mapping):
            lines += ["", *_table_lines(f"part.{name}", table)]
    return lines


def _table_lines(name: str, table: Mapping[str, Any]) -> list[str]:
    lines = [f"[{name}]"]
    lines += [f"{_key(k)} = {_toml(v)}" for k, v in table.items() if not isinstance(v, Mapping)]
    for key, inner in table.items():
        if isinstance(inner, Mapping):
            lines += ["", *_table_lines(f"{name}.{_key(key)}", inner)]
    return lines


def _key(key: str) -> str:
    bare = bool(key) and key.isascii() and all(c.isalnum() or c in "_-" for c in key)
    return key if bare else _toml(key)


def _toml(value: Any) -> str:
    """A value as TOML writes it."""
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, int | float):
        return repr(value)
    if isinstance(value, str):
        return '"' + "".join(_letter(c) for c in value) + '"'
    if isinstance(value, Iterable) and not isinstance(value, Mapping):
        return "[" + ", ".join(_toml(v) for v in value) + "]"
    return str(value)


def _letter(letter: str) -> str:
    known = {'"': '\\"', "\\": "\\\\", "\n": "\\n", "\t": "\\t", "\r": "\\r"}
    if letter in known:
        return known[letter]
    return f"\\u{ord(letter):04x}" if ord(letter) < 32 or ord(letter) == 127 else letter


def new_file(path: Path) -> Path:
    """The path, if no file is there.

    Raises
    ------
    OutputError
        If there is one.
    """
    if path.exists():
        raise _there_already(path)
    return path


def _there_already(path: Path) -> OutputError:
    return OutputError(
        "There is a file of that name already; it was left as it is.",
        where=str(path),
        advice="Name another file with --write.",
    )


def write_survey(path: Path, text: str) -> None:
    """Write a survey file where there is none, and load it again.

    Raises
    ------
    OutputError
        If a file is there already, or it cannot be written.
    """
    try:
        with path.open("x", encoding="utf-8", newline="\n") as stream:
            stream.write(text)
    except FileExistsError:
        raise _there_already(path) from None
    except OSError as problem:
        raise OutputError(
            "The survey file cannot be written there.",
            where=str(path),
            found=problem.strerror or str(problem),
        ) from None
    load_survey_file(path)
