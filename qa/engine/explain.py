"""One rule, limit or quantity in full, in plain words: from the sheet, the registry and the functions' docstrings.

These are the texts that the report uses too; nothing is said here that is not said there.
"""

from __future__ import annotations

import inspect
import re
from collections.abc import Callable, Mapping, Sequence
from typing import Any

import numpy as np

from qa.engine import quantities
from qa.engine.assumed import assumed_values
from qa.engine.expressions import Expression
from qa.engine.one_ping import OnePing
from qa.engine.page import Page
from qa.engine.plans import MADE_FROM
from qa.engine.quantities import RECIPES, SIDE_SCAN, Recipe, as_logged
from qa.engine.remedies import Template
from qa.engine.sheets import Limit, Rule, RuleSheet
from qa.model.columns import COLUMNS, SONAR_KINDS
from qa.model.errors import PingworthyError, nearest
from qa.model.survey_file import STATED
from qa.model.units import Unit, readable


def explain(name: str, sheet: RuleSheet, here: OnePing, width: int = 80) -> str:
    """A rule, a limit or a quantity in full.

    Parameters
    ----------
    name : str
        A rule's id, or the name of a limit or of a quantity.
    sheet : RuleSheet
        The sheet, with the limits that a survey file lays over it.
    here : OnePing
        Values that are stated, for which limits and quantities are worked out.
    width : int
        Columns of the terminal.

    Raises
    ------
    PingworthyError
        If nothing is called that; with the nearest name.
    """
    page = Page(width)
    asked = _meant(name.strip(), sheet)
    if asked in sheet.rules:
        _rule(page, sheet.rules[asked], sheet, here)
    if asked in sheet.limits:
        _limit(page, sheet.limits[asked], sheet, here)
    elif quantities.symbol(asked) is not None:
        # Some rules have the name of the quantity that they are about.
        page.blank()
        _quantity(page, asked, sheet, here)
    return str(page)


def _meant(name: str, sheet: RuleSheet) -> str:
    known = {*sheet.rules, *sheet.limits, *quantities.names()}
    if name in known:
        return name
    for other in (name.replace("_", "-"), name.replace("-", "_"), name.lower()):
        if other in known:
            return other
    raise PingworthyError(
        f'No rule, limit or quantity is called "{name[:80]}".',
        where=f"sheet {sheet.name}",
        advice=nearest(name[:80], known)
        if "Did you mean" in nearest(name[:80], known)
        else 'The "rules" command lists the rules of a sheet.',
    )


# Rules


def _rule(page: Page, rule: Rule, sheet: RuleSheet, here: OnePing) -> None:
    page.paragraph(f"{rule.id}: {rule.title}", 0)
    page.paragraph(f"A rule of the sheet {', changed by '.join((rule.sheet, *rule.changed_by))}.")
    page.heading("What it checks")
    for text in checks(rule):
        page.paragraph(text)
    if rule.why:
        page.heading("Why it matters")
        page.paragraph(rule.why)
    if rule.not_from_pings:
        page.heading("What to do")
        page.paragraph("Show it by other records to whoever accepts the survey.")
    elif any(template.text for template in rule.remedy.values()):
        page.heading("What to do")
        _by_kind(page, rule.remedy)
    limits = limits_of(rule, sheet)
    if limits:
        page.heading("Limits")
        for limit in limits:
            _one_limit(page, limit, here, only_for(limit, rule, sheet))
    inputs = _inputs(rule, sheet)
    if inputs:
        page.heading("What it rests on")
        for key in inputs:
            _input(page, key, here)
    _judged_here(page, rule, here)
    page.heading("Source")
    page.paragraph(_source(rule.source, rule.clause))


def checks(rule: Rule) -> list[str]:
    """What a rule requires, of which pings, and how many may miss it: one sentence or expression each."""
    if rule.not_from_pings:
        return [f"A ping log cannot show it: {rule.not_from_pings}. It reads not assessed."]
    if rule.columns:
        found = [f"These columns are logged and hold a value: {', '.join(rule.columns)}."]
    else:
        found = [rule.text]
    if rule.when is not None:
        found.append(f"Only where {rule.when.text}.")
    if rule.allow:
        found.append(f"Up to {100 * rule.allow:g} % of a line's assessed pings may miss it.")
    if rule.allow_beams:
        found.append(
            f"A ping misses it when more than {100 * rule.allow_beams:g} % of its beams do."
        )
    if rule.keep_when is not None:
        found.append(f"A shorter run of misses is told too where {rule.keep_when.text}.")
    if rule.severity == "advisory":
        found.append("Advisory: it gives advice, and never makes a line out of spec.")
    return found


def limits_of(rule: Rule, sheet: RuleSheet) -> list[Limit]:
    """The limits that a rule compares with, those which these rest on, and those that go into its quantities."""
    found: list[Limit] = []
    for kind in SONAR_KINDS:
        if _applies(rule, kind):
            found += [x for x in _limits_for(rule, sheet, kind) if x not in found]
    return found


def _applies(rule: Rule, kind: str) -> bool:
    if rule.when is None or rule.when.names != {"kind"}:
        return True
    return bool(rule.when.run({"kind": kind}) == 1.0)


def only_for(limit: Limit, rule: Rule, sheet: RuleSheet) -> tuple[str, ...]:
    """The kinds of sonar for which alone a rule needs a limit; none where it does for all that it applies to."""
    kinds = [k for k in SONAR_KINDS if _applies(rule, k)]
    needing = [k for k in kinds if limit in _limits_for(rule, sheet, k)]
    return () if needing == kinds else tuple(needing)


def _limits_for(rule: Rule, sheet: RuleSheet, kind: str) -> list[Limit]:
    names = [n for e in _expressions(rule) for n in sorted(_names(e))]
    found: list[Limit] = []
    seen: set[str] = set()
    while names:
        name = names.pop(0)
        if name in seen:
            continue
        seen.add(name)
        limit = sheet.limits.get(name)
        if limit is not None:
            found.append(limit)
            names += sorted(_names(limit.expression)) if limit.expression is not None else []
        elif name == "slant_range" and kind == SIDE_SCAN:
            names += MADE_FROM
        else:
            for recipe in RECIPES.get(name, ()):
                if not recipe.kinds or kind in recipe.kinds:
                    names += [n for need in recipe.needs for n in _NAME.findall(need)]
    return found


_NAME = re.compile(r"[a-z][a-z_0-9]*(?!\w*\()")


def _expressions(rule: Rule) -> list[Expression]:
    return [e for e in (rule.requirement, rule.when) if e is not None]


def _names(expression: Expression) -> set[str]:
    """What a text names: inside reducers, ``logged()`` and ``computed()`` too."""
    found = {_inner(n) for n in expression.names if "(" not in n or n.startswith(_OF_ORIGIN)}
    for reduction in expression.reductions.values():
        found |= _names(reduction.inner)
        if reduction.angle is not None:
            found |= _names(reduction.angle)
    return found


_OF_ORIGIN = ("logged(", "computed(")


def _inner(key: str) -> str:
    return key.partition("(")[2].rstrip(")") if key.startswith(_OF_ORIGIN) else key


def _inputs(rule: Rule, sheet: RuleSheet) -> list[str]:
    expressions = _expressions(rule)
    expressions += [x.expression for x in limits_of(rule, sheet) if x.expression is not None]
    names = {n for e in expressions for n in _names(e)} - set(sheet.limits) - {"kind"}
    return sorted(names)


def _input(page: Page, key: str, here: OnePing) -> None:
    text = f"{_unit_or_choices(key, here.sheet)} {about_quantity(key)}"
    ways = [r for r in RECIPES.get(key, ()) if not r.kinds or here.kind in r.kinds]
    if ways and key not in COLUMNS:
        formula, needs = ways[0].formula, ways[0].needs
        text += f" {formula}." if formula else ""
        text += (
            f" From {named([f'{n} {_unit_or_choices(n, here.sheet)}' for n in needs])}."
            if needs
            else ""
        )
    value = shown(here, key) if here.anything_stated else ""
    page.labelled(key, text + (f" Here {value}." if value else ""), label_width=22)


def _judged_here(page: Page, rule: Rule, here: OnePing) -> None:
    if not here.given:
        return
    judged = here.judged(rule)
    if judged is None:
        return
    page.heading("With these values")
    met = bool(np.all(judged.met))
    at = int(np.argmin(np.atleast_1d(judged.margin)))
    assert rule.requirement is not None
    unit = rule.requirement.comparisons[0].left.unit if rule.requirement.comparisons else Unit()
    value, limit = (
        float(np.atleast_1d(np.broadcast_to(v, np.shape(judged.margin)))[at])
        for v in (judged.value, judged.limit)
    )
    page.paragraph(
        f"{readable(value, unit)} against {readable(limit, unit)}: {'met' if met else 'missed'}."
    )
    for text in here.assumed(rule.requirement.names):
        page.paragraph(text)


def _by_kind(page: Page, templates: Mapping[str, Template]) -> None:
    for kind, template in templates.items():
        text = spoken(template)
        if kind:
            page.labelled(f"{kind}:", text, label_width=12)
        else:
            page.paragraph(text)


def spoken(template: Template) -> str:
    """A text whose numbers are not known yet: each field's expression and unit in square brackets.

    Examples
    --------
    >>> from qa.engine.sheets import load_sheet
    >>> spoken(load_sheet("physics").rules["speed"].remedy_for("multibeam"))
    'Run at [speed_limit in kt] over the ground or slower.'
    """
    parts = []
    for piece in template.pieces:
        if isinstance(piece, str):
            parts.append(piece)
            continue
        inner = piece.expression.text if piece.expression is not None else f"the {piece.direction}"
        unit = "" if piece.unit in ("", "1") else f" in {piece.unit}"
        parts.append(f"[{inner}{unit}]")
    return "".join(parts)


# Limits


def limit_text(limit: Limit) -> str:
    """A limit's value as it was written, with its unit."""
    if limit.expression is None:
        return f"not stated {_unit(limit.unit)}"
    if limit.expression.literal is not None:
        written = readable(limit.expression.literal, limit.unit)
        plain = limit.text.replace(" ", "").replace("us", "µs")
        return (
            written
            if plain in (written.replace(" ", ""), _bare(written))
            else (f"{limit.text} ({written})" if written != limit.text else written)
        )
    return f"{limit.text} {_unit(limit.unit)}"


def _bare(written: str) -> str:
    return written.replace("°", "deg").replace(" ", "")


def _one_limit(page: Page, limit: Limit, here: OnePing, kinds: Sequence[str]) -> None:
    only = f" ({' and '.join(kinds)} only)" if kinds else ""
    page.labelled(limit.name, f"{limit_text(limit)}{only}", label_width=22)
    value = value_here(limit, here)
    if value:
        page.paragraph(value, 3)
    page.paragraph(f"{_sentence(limit.about)} {_set_by(limit)}", 3)


def value_here(limit: Limit, here: OnePing) -> str:
    """What a limit that is an expression comes to with the values given, or what to give for it."""
    if limit.expression is None or limit.expression.literal is not None:
        return ""
    value = shown(here, limit.name)
    wanted = sorted(_leaves(limit, here))
    if value:
        at = ", ".join(f"{n} {shown(here, n)}" for n in wanted)
        return f"= {value}" + (f" at {at}" if at else "")
    missing = here.missing(limit.name)
    return f"Its value needs {', '.join(missing)}." if missing else ""


def _leaves(limit: Limit, here: OnePing) -> set[str]:
    """The quantities that a limit's value rests on directly, through other limits."""
    found: set[str] = set()
    names = sorted(_names(limit.expression)) if limit.expression is not None else []
    seen: set[str] = set()
    while names:
        name = names.pop()
        if name in seen:
            continue
        seen.add(name)
        other = here.sheet.limits.get(name)
        if other is None:
            found.add(name)
        elif other.expression is not None:
            names += sorted(_names(other.expression))
    return found


def _set_by(limit: Limit) -> str:
    if limit.expression is None:
        return f"No sheet or survey file states it, so rules that need it are not assessed.{_from(limit.source)}"
    by = {"survey file": "the survey file", "--set": "the command"}.get(
        limit.origin, f"the sheet {limit.origin}"
    )
    return f"Set by {by}.{_from(limit.source)}"


def _from(source: str) -> str:
    return f" Source: {source}." if source else ""


def _limit(page: Page, limit: Limit, sheet: RuleSheet, here: OnePing) -> None:
    page.paragraph(f"{limit.name}: {limit.about or 'a limit'}", 0)
    page.paragraph(f"A limit in {_unit(limit.unit, bare=True)}. {_set_by(limit)}")
    page.heading("Value")
    page.paragraph(limit_text(limit))
    value = value_here(limit, here)
    if value:
        page.paragraph(value)
    if limit.expression is not None:
        names = sorted(_names(limit.expression))
        if names:
            page.heading("What it rests on")
            for name in names:
                if name in sheet.limits:
                    page.labelled(name, limit_text(sheet.limits[name]), label_width=22)
                else:
                    _input(page, name, here)
    users = [r.id for r in sheet.rules.values() if limit in limits_of(r, sheet)]
    page.heading("Rules that use it")
    page.paragraph(", ".join(users) or f"none of the sheet {sheet.name}")


# Quantities


def about_quantity(name: str) -> str:
    """What a quantity is, in one sentence."""
    column = COLUMNS.get(name)
    if column is not None:
        return _sentence(column.about)
    for recipe in RECIPES.get(name, ()):
        if recipe.about and recipe.about != inspect.getdoc(as_logged):
            return _sentence(" ".join(_paragraphs(recipe.about)))
    return _sentence(_STATED_ABOUT.get(name, name.replace("_", " ")))


_STATED_ABOUT = {
    "kind": "kind of sonar",
    "beam_angle_from": "what logged beam angles are measured from",
    "depth_from": "what logged depths are measured from",
    "receive_array": "shape of the receive array",
    "mount_angle": "angle of the receive array's own normal from the vertical, starboard positive",
    "pings_in_water": "pings that are in the water at the same time",
    "focus": "whether the sonar focuses in its near field",
    "detection_threshold": "echo over noise from which on it is detected",
    "wind_speed": "wind over the survey",
    "backscatter_normal": "backscatter of the seabed at normal incidence",
    "backscatter_oblique": "backscatter of the seabed at oblique incidence",
    "target_strength": "target strength of the object that must be seen",
    "sound_speed_sigma": "standard uncertainty of the mean sound speed",
    "surface_sound_speed_sigma": "standard uncertainty of the sound speed at the transducer",
    "roll_sigma": "standard uncertainty of the roll",
    "pitch_sigma": "standard uncertainty of the pitch",
    "heading_sigma": "standard uncertainty of the heading",
    "heave_sigma": "standard uncertainty of the heave",
    "draught_sigma": "standard uncertainty of the draught",
    "squat_sigma": "standard uncertainty of the squat",
    "tide_sigma": "standard uncertainty of the tide",
    "range_sigma": "standard uncertainty of the measured range",
    "position_sigma": "standard uncertainty of the position, of each axis",
    "cast": "sound speed cast",
}


def _quantity(page: Page, name: str, sheet: RuleSheet, here: OnePing) -> None:
    symbol = quantities.symbol(name)
    assert symbol is not None
    page.paragraph(f"{name}: {about_quantity(name)}", 0)
    if symbol.type == "text":
        page.paragraph(f"A quantity that is one of: {', '.join(symbol.choices)}.")
    else:
        page.paragraph(f"A quantity in {_unit(symbol.unit, bare=True)}.")
    value = shown(here, name)
    if value and here.anything_stated:
        page.heading("With these values")
        page.paragraph(value)
        for key, node in here.rests_on(name).items():
            if key != name and (text := shown(here, key)):
                origin = "as given" if key in here.given else node.origin
                page.labelled(key, f"{text}, {origin}", 2, label_width=26)
    elif here.given:
        page.heading("With these values")
        page.paragraph(_not_here(name, here))
    if here.given and here.kind_assumed and any(r.kinds for r in RECIPES.get(name, ())):
        page.paragraph(f"Taken as a {here.kind}: kind is not given.")
    page.heading("How it is had")
    page.paragraph(
        "The first of these that a log and a survey file allow; among them, what is logged comes before what is "
        "computed from logged values, stated, computed from stated values, or assumed."
    )
    for label, text in _ways(name):
        page.labelled(label, text, label_width=10)
    for number, recipe in enumerate(RECIPES.get(name, ()), start=1):
        _recipe(page, number, recipe, sheet)
    for title, *paragraphs in docstrings(name):
        page.heading(title)
        for paragraph in paragraphs:
            page.paragraph(paragraph)
    users = [r.id for r in sheet.rules.values() if name in _inputs(r, sheet)]
    page.heading("Rules that use it")
    page.paragraph(", ".join(users) or f"none of the sheet {sheet.name} directly")


def _not_here(name: str, here: OnePing) -> str:
    missing = here.missing(name)
    if missing == (name,) or not missing:
        return "It needs a whole line of pings, so it cannot be had from these values; it can be given itself."
    return f"It needs {', '.join(missing)} too."


def _ways(name: str) -> list[tuple[str, str]]:
    found = []
    column = COLUMNS.get(name)
    if column is not None:
        found.append(("logged", f"a column of the log, one value a {column.grain}"))
    for table, keys in STATED.items():
        if name in keys:
            found.append(("stated", f"{name} under [{table}] in the survey file"))
    assumed = assumed_values().get(name)
    if assumed is not None:
        only = " (only in logs of one row a ping)" if assumed.ping_logs_only else ""
        found.append(("assumed", f"{assumed.text}: {assumed.reason}{only}"))
    return found


def _recipe(page: Page, number: int, recipe: Recipe, sheet: RuleSheet) -> None:
    page.heading(f"Computed, way {number}{_conditions(recipe)}", 1)
    page.paragraph(recipe.formula, 2)
    for need in recipe.needs:
        unit = _unit_or_choices(need, sheet)
        more = ", if it is there" if need in recipe.optional else ""
        page.labelled(need, f"{unit}{more}", 2, label_width=26)
    if recipe.assumes:
        page.paragraph(f"Assumes that {recipe.assumes}.", 2)
    if recipe.whole_line:
        page.paragraph("Needs the pings before and after, of the same line and channel.", 2)
    if recipe.source:
        page.paragraph(f"Source: {recipe.source}", 2)


def _conditions(recipe: Recipe) -> str:
    parts = [" or ".join(recipe.kinds)] if recipe.kinds else []
    parts += [f"{name} = {choice}" for name, choice in recipe.only]
    return f" ({', '.join(parts)})" if parts else ""


def _unit_of(need: str, sheet: RuleSheet) -> Unit:
    reducer, bracket, inner = need.partition("(")
    if bracket and reducer in ("share", "count"):
        return Unit()
    found = re.search(r"[a-z_0-9]+(?=\)*(,|\Z))", inner) if bracket else re.match(r".*", need)
    name = found[0] if found else ""
    return sheet.limits[name].unit if name in sheet.limits else quantities.quantity_unit(name)


def docstrings(name: str) -> list[list[str]]:
    """Of the functions that compute a quantity: what their docstrings say beyond the first line, under headings."""
    body: list[str] = []
    references: list[str] = []
    for recipe in RECIPES.get(name, ()):
        if recipe.function is as_logged:
            continue
        for function in (recipe.function, *physics_behind(recipe.function)):
            text, cited = _docstring(function)
            body += [t for t in text if t not in body and t.rstrip(".") != recipe.about.rstrip(".")]
            references += [c for c in cited if c not in references]
    found = []
    if body:
        found.append(["More on it", *body])
    if references:
        found.append(["References", *references])
    return found


def physics_behind(function: Callable[..., Any]) -> list[Callable[..., Any]]:
    """The functions of :mod:`qa.physics` that a registered function calls by name.

    Examples
    --------
    >>> from qa.engine.quantities import RECIPES
    >>> [f.__name__ for f in physics_behind(RECIPES["range_resolution"][0].function)]
    ['range_resolution_cw', 'range_resolution_fm']
    """
    function = inspect.unwrap(function)
    code = getattr(function, "__code__", None)
    if code is None:
        return []
    known = getattr(function, "__globals__", {})
    rooms = [known[n] for n in code.co_names if inspect.ismodule(known.get(n))]
    rooms = [r for r in rooms if r.__name__.startswith("qa.physics.")]
    called = [getattr(room, n, None) for n in code.co_names for room in rooms]
    return [f for f in dict.fromkeys(called) if inspect.isfunction(f)]


_UNDERLINE = re.compile(r"^(?P<title>[A-Z][A-Za-z ]+)\n-{3,}$", re.MULTILINE)


def _docstring(function: Callable[..., Any]) -> tuple[list[str], list[str]]:
    doc = inspect.getdoc(function) or ""
    pieces = _UNDERLINE.split(doc)
    sections = dict(zip(pieces[1::2], pieces[2::2], strict=True))
    body = _paragraphs(pieces[0]) + _paragraphs(sections.get("Notes", ""))
    cited = re.split(r"^\.\. \[\d+\] ", sections.get("References", ""), flags=re.MULTILINE)
    return body, [" ".join(c.split()) for c in cited if c.strip()]


def _paragraphs(text: str) -> list[str]:
    plain = re.sub(r":[a-z]+:`~?(?:[\w.]+\.)?([\w]+)`", r"\1", text).replace("``", "")
    return [" ".join(p.split()) for p in plain.split("\n\n") if p.strip()]


# Values and units in words


def shown(here: OnePing, name: str) -> str:
    """A value in the unit a surveyor says it in; a side-scan's at its near and farthest range; "" if not to be had."""
    value = here.value(name)
    if value is None or isinstance(value, str):
        return value or ""
    unit = _unit_of(name, here.sheet)
    try:
        numbers = np.atleast_1d(np.asarray(value, dtype=float))
    except TypeError:
        return ""
    if len(numbers) == 2:
        near, far = (readable(float(n), unit) for n in numbers)
        return f"{near} at the near range, {far} at the farthest"
    return "" if np.isnan(numbers[0]) else readable(float(numbers[0]), unit)


def _unit(unit: Unit, bare: bool = False) -> str:
    text = str(unit)
    if bare:
        return "no unit: a number, or 0 and 1 for no and yes" if text == "1" else text
    return f"[{text}]"


def _unit_or_choices(need: str, sheet: RuleSheet) -> str:
    symbol = quantities.symbol(need)
    if symbol is not None and symbol.type == "text":
        return f"[{' or '.join(symbol.choices)}]"
    return _unit(_unit_of(need, sheet))


def _sentence(text: str) -> str:
    text = text.strip().rstrip(".")
    return f"{text[:1].upper()}{text[1:]}." if text else ""


def _source(source: str, clause: str) -> str:
    parts = [p for p in (f"Clause {clause}" if clause else "", source) if p]
    return "; ".join(parts) or "none stated"


def named(names: Sequence[str]) -> str:
    """Names in a sentence.

    Examples
    --------
    >>> named(["a", "b", "c"])
    'a, b and c'
    """
    return names[0] if len(names) == 1 else f"{', '.join(names[:-1])} and {names[-1]}"
