"""All rules of a sheet, each with its limits and where they come from."""

from __future__ import annotations

from qa.engine.explain import checks, limit_text, limits_of, only_for, value_here
from qa.engine.one_ping import OnePing
from qa.engine.page import Page
from qa.engine.sheets import Limit, Rule, RuleSheet
from qa.model.survey_file import SurveyFile


def list_rules(
    sheet: RuleSheet, here: OnePing, survey: SurveyFile | None = None, width: int = 80
) -> str:
    """Every rule: id, title, requirement, limits with value, unit and origin, severity, source.

    Rules that a ping log cannot show stand at the end, each with its clause and the reason.
    """
    page = Page(width)
    page.paragraph(f"{sheet.title} (sheet {sheet.name})", 0)
    if sheet.extends:
        page.paragraph(f"Extends {', '.join(sheet.extends)}.")
    page.paragraph(sheet.about)
    assessed = [r for r in sheet.rules.values() if not r.not_from_pings]
    others = [r for r in sheet.rules.values() if r.not_from_pings]
    waiting = [
        r.id
        for r in assessed
        if any(not x.stated and not only_for(x, r, sheet) for x in limits_of(r, sheet))
    ]
    page.paragraph(_counted(len(assessed), len(others), len(waiting)))
    for rule in assessed:
        _rule(page, rule, sheet, here, survey)
    if others:
        page.heading("Not assessed: a ping log cannot show it")
        for rule in others:
            page.heading(f"{rule.id}: {rule.title}", 1)
            if rule.clause:
                page.labelled("clause", rule.clause, 2, label_width=8)
            page.labelled("reason", rule.not_from_pings, 2, label_width=8)
            if rule.source:
                page.labelled("source", rule.source, 2, label_width=8)
    return str(page)


def _counted(assessed: int, others: int, waiting: int) -> str:
    text = f"{assessed} rules are assessed where a log holds what they need"
    if waiting:
        text += f"; {waiting} of them wait for a limit that is not stated"
    if others:
        text += f"; {others} more cannot be shown by a ping log"
    return text + "."


def _rule(
    page: Page, rule: Rule, sheet: RuleSheet, here: OnePing, survey: SurveyFile | None
) -> None:
    page.heading(f"{rule.id}: {rule.title}")
    requires, *more = checks(rule)
    page.labelled("requires", requires, label_width=8)
    for text in more:
        if not text.startswith("Advisory"):
            page.labelled("", text, label_width=8)
    for number, limit in enumerate(limits_of(rule, sheet)):
        text = _limit(limit, here, survey, only_for(limit, rule, sheet))
        page.labelled("limits" if not number else "", text, label_width=8)
    page.labelled("severity", rule.severity, label_width=8)
    page.labelled("from", ", changed by ".join((rule.sheet, *rule.changed_by)), label_width=8)
    if rule.source or rule.clause:
        clause = f"clause {rule.clause}" if rule.clause else ""
        page.labelled("source", "; ".join(t for t in (clause, rule.source) if t), label_width=8)


def _limit(limit: Limit, here: OnePing, survey: SurveyFile | None, kinds: tuple[str, ...]) -> str:
    only = f", {' and '.join(kinds)} only" if kinds else ""
    if not limit.stated:
        text = f"{limit.name}: {limit_text(limit)}{only}: not assessed until a sheet or survey file states it"
    else:
        by = limit.origin
        if by == "survey file" and survey is not None and survey.path is not None:
            by = f"survey file {survey.path.name}"
        value = value_here(limit, here)
        # What it would need is for a page of its own; here a value is shown where there is one.
        value = f" {value}" if value.startswith("=") else ""
        text = f"{limit.name}: {limit_text(limit)}{value} (from {by}{only})"
    for patterns, tables in survey.parts if survey is not None else ():
        part = tables.get("limits", {})
        if limit.name in part:
            text += f"; {part[limit.name]} for {', '.join(patterns)}"
    return text
