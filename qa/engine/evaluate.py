"""One line, from its opened log to its verdicts, sections and the series behind them."""

from __future__ import annotations

import math
from collections.abc import Collection, Mapping, Sequence
from dataclasses import replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from qa.engine import quantities
from qa.engine.assumed import assumed_values
from qa.engine.plans import Available, Plan, PlannedRule, closure, make_plan
from qa.engine.remedies import filled
from qa.engine.sections import find_sections
from qa.engine.sheets import Rule, RuleSheet
from qa.engine.stages import BATCH_ROWS, Computed, LineRun, beam_misses, outcomes, run_stages
from qa.model.cast import Cast
from qa.model.columns import COLUMNS
from qa.model.findings import (
    EXEMPT,
    MET,
    MISSED,
    NOT_ASSESSED,
    Assumption,
    Evidence,
    LineFinding,
    LineResult,
    LineRule,
    RuleSeries,
    Section,
    Verdict,
)
from qa.model.log import ChannelSpan, Floats, LineLog, PingTable
from qa.model.survey_file import SurveyFile
from qa.model.units import Unit, readable
from qa.physics import water

EXTRA = (
    *("ping_interval", "ping_span", "listening_time", "bottom_travel_time", "range_resolution"),
    *("speed", "ping_spacing", "distance", "altitude", "nearest_vertical(depth)", "least(depth)"),
    *("greatest(depth)", "greatest(footprint_along)", "greatest(across_resolution)"),
    *("nearest_vertical(footprint)", "guaranteed_hits", "farthest_range"),
)
"""Quantities that figures and tables show beside those that rules need, where they can be had."""


def evaluate_line(
    log: LineLog,
    survey: SurveyFile,
    sheet: RuleSheet,
    files: Sequence[str] = (),
    rows: int = BATCH_ROWS,
    cast: Cast | None = None,
    sections: bool = True,
    threads: int = 1,
) -> LineResult:
    """Everything about one line.

    Parameters
    ----------
    log : LineLog
        The opened line.
    survey : SurveyFile
        What holds for this log.
    sheet : RuleSheet
        With the survey file's limits.
    files : sequence of str
        The line's files, as the user wrote them.
    rows : int
        Beams a batch holds, about; no result depends on it.
    cast : Cast, optional
        Speed of sound down the water, as the survey file's profile says it.
    sections : bool
        Whether to make sections, with their texts; without them misses are only counted.
    threads : int
        Threads that work on batches of beams; no result depends on it. More than one only where every recipe can be
        run by several at once, as the program's own can.
    """
    table = log.ping_table()
    kind, assumed_kind = line_kind(log, survey)
    beam_columns = log.beam_columns
    if kind == "side-scan" and "depth" in beam_columns:
        table = _with_depth(table, log)
        beam_columns = frozenset()
    measured = _measured(table, cast)
    runs = []
    for present, channels in _groups(table):
        available = Available(
            kind,
            present | ({"time", "ping"} if table.ping_logged else {"time"}),
            beam_columns,
            {**survey.stated, **measured, "kind": kind, **_depth_from(survey)},
            log.grain == "ping",
            assumed_kind,
        )
        rows_of = np.concatenate([np.arange(c.start, c.stop) for c in channels])
        spans, at = [], 0
        for channel in channels:
            length = channel.stop - channel.start
            spans.append(ChannelSpan(channel.name, at, at + length))
            at += length
        runs.append(LineRun(make_plan(sheet, available, EXTRA), table, rows_of, tuple(spans)))
    done = run_stages(log, runs, rows, threads)
    return _Assembly(log.name, kind, table, sheet, done, tuple(files)).result(sections)


def line_kind(log: LineLog, survey: SurveyFile) -> tuple[str, bool]:
    """The sonar's kind, and whether it had to be taken from the shape of the log."""
    stated = survey.stated.get("kind")
    if isinstance(stated, str):
        return stated, False
    if log.grain == "beam":
        return "multibeam", True
    if log.beam_columns & {"depth", "slant_range", "two_way_time"}:
        return "single-beam", True
    return "side-scan", True


def _measured(table: PingTable, cast: Cast | None) -> dict[str, Any]:
    """What is known of the line beside its columns."""
    known: dict[str, Any] = {}
    if math.isfinite(table.time_resolution):
        known["time_resolution"] = table.time_resolution
    if cast is not None:
        known["cast"] = with_sound_speed(cast)
    return known


def with_sound_speed(cast: Cast) -> Cast:
    """The cast with a sound speed at each depth, from temperature and salinity where it was not measured."""
    if cast.sound_speed is not None or cast.temperature is None or cast.salinity is None:
        return cast
    speed = np.asarray(water.sound_speed(cast.temperature, cast.salinity, cast.depth), dtype=float)
    known = ~np.isnan(speed)
    return replace(cast, depth=cast.depth[known], sound_speed=speed[known])


def _depth_from(survey: SurveyFile) -> dict[str, str]:
    return {"depth_from": survey.depth_from} if survey.says_depth_from else {}


def _with_depth(table: PingTable, log: LineLog) -> PingTable:
    """A side-scan's own depth column belongs to its pings, since its beams are made."""
    depth = np.full(len(table), np.nan)
    for batch in log.beam_batches(["depth"]):
        depth[batch.pings[batch.counts == 1]] = batch.columns["depth"][
            : int((batch.counts == 1).sum())
        ]
    return replace(table, columns={**table.columns, "depth": depth})


def _groups(table: PingTable) -> list[tuple[frozenset[str], list[ChannelSpan]]]:
    """Channels by the set of columns that hold any value in them: those of one set share a plan."""
    found: dict[frozenset[str], list[ChannelSpan]] = {}
    for channel in table.channels:
        present = frozenset(
            name
            for name, column in table.columns.items()
            if not np.isnan(column[channel.rows]).all()
        )
        found.setdefault(present, []).append(channel)
    return list(found.items())


def iso_time(nanoseconds: int) -> str:
    """A time in ISO 8601, UTC, to the microsecond or the millisecond.

    Examples
    --------
    >>> iso_time(1_600_000_000_250_000_000)
    '2020-09-13T12:26:40.250Z'
    """
    unit = "ms" if nanoseconds % 1_000_000 == 0 else "us"
    text = np.datetime_as_string(
        np.datetime64(int(nanoseconds), "ns").astype(f"datetime64[{unit}]")
    )
    return f"{text}Z"


def _number(value: Any) -> float | None:
    return float(value) if value is not None and math.isfinite(value) else None


class _Assembly:
    """Puts what the groups of channels came to together into one line's result."""

    def __init__(
        self,
        name: str,
        kind: str,
        table: PingTable,
        sheet: RuleSheet,
        done: list[Computed],
        files: tuple[str, ...],
    ) -> None:
        self.name, self.kind, self.table, self.sheet, self.done = name, kind, table, sheet, done
        self.files = files
        self.n = len(table)
        self.columns: dict[str, Floats] = {}
        self.units: dict[str, str] = {}
        for name_, column in table.columns.items():
            self._put(name_, column, COLUMNS[name_].unit)
        for computed in done:
            for key, node in computed.plan.nodes.items():
                if (node.grain == "ping" and key != "time" and "logged(" not in key) or (
                    node.grain == "survey"
                    and node.way in ("stated", "recipe", "assumed")
                    and isinstance(computed.values[key], float | int | np.number | np.ndarray)
                    and key not in self.columns
                ):
                    self._merge(computed, key, computed.values[key], node.unit)
        self.spacing = self.columns.get("ping_spacing")
        self.latitude = self._filled("latitude")
        self.longitude = self._filled("longitude")

    def _put(self, key: str, values: Floats, unit: Unit) -> None:
        self.columns[key], self.units[key] = values, str(unit)

    def _merge(self, computed: Computed, key: str, values: Any, unit: Unit) -> None:
        if len(computed.rows) == self.n:
            self._put(key, np.broadcast_to(np.asarray(values, dtype=float), (self.n,)), unit)
            return
        if key not in self.columns or not self.columns[key].flags.writeable:
            self._put(key, np.array(self.columns.get(key, np.full(self.n, np.nan))), unit)
        self.columns[key][computed.rows] = values

    def _filled(self, key: str) -> Floats | None:
        """Positions for every ping: between fixes in proportion to time, none outside the first and last."""
        if key not in self.table.columns:
            return None
        values = np.array(self.table.columns[key])
        for channel in self.table.channels:
            here = values[channel.rows]
            known = np.flatnonzero(~np.isnan(here))
            if len(known) and len(known) < len(here):
                at = np.arange(len(here))
                values[channel.rows] = np.interp(at, known, here[known], left=np.nan, right=np.nan)
        return values

    def result(self, with_sections: bool) -> LineResult:
        """The line's findings, sections and series."""
        series: dict[str, RuleSeries] = {}
        rules: list[LineRule] = []
        sections: list[Section] = []
        ranges: dict[str, tuple[float, float]] = {}
        for rule in self.sheet.rules.values():
            planned = [self._planned(computed, rule) for computed in self.done]
            if not any(p.applies for p in planned):
                continue
            found = self._series(rule, planned)
            if found is not None:
                series[rule.id] = found
                assessed = (found.status == MET) | (found.status == MISSED)
                if assessed.any() and not np.isnan(found.limit[assessed]).all():
                    limits = found.limit[assessed]
                    ranges[rule.id] = (float(np.nanmin(limits)), float(np.nanmax(limits)))
            rule_finding, rule_sections = self._judged(rule, planned, found, with_sections)
            rules.append(rule_finding)
            sections += rule_sections
        sections.sort(key=lambda s: (s.severity != "out of spec", s.first_index, s.channel, s.rule))
        return LineResult(
            self._line(rules),
            tuple(sections),
            tuple((c.name, c.start, c.stop) for c in self.table.channels),
            self.table.time,
            self.table.ping,
            self.columns,
            self.units,
            series,
            tuple(m for computed in self.done for m in beam_misses(computed)),
            assumptions=self._assumptions(),
            limit_ranges=ranges,
        )

    def _planned(self, computed: Computed, rule: Rule) -> PlannedRule:
        return next(p for p in computed.plan.rules if p.rule.id == rule.id)

    def _series(self, rule: Rule, planned: Sequence[PlannedRule]) -> RuleSeries | None:
        whole: RuleSeries | None = None
        for computed, plan in zip(self.done, planned, strict=True):
            found = outcomes(computed, plan)
            if found is None:
                continue
            if len(computed.rows) == self.n:
                return found
            if whole is None:
                blank = np.full(self.n, np.nan)
                status = np.full(self.n, NOT_ASSESSED, dtype=np.int8)
                whole = RuleSeries(status, blank, blank.copy(), blank.copy(), found.unit)
            for name in ("status", "value", "limit", "margin"):
                getattr(whole, name)[computed.rows] = getattr(found, name)
        if whole is not None:
            for computed, plan in zip(self.done, planned, strict=True):
                if not plan.applies:
                    whole.status[computed.rows] = EXEMPT
        return whole

    def _judged(
        self,
        rule: Rule,
        planned: Sequence[PlannedRule],
        series: RuleSeries | None,
        with_sections: bool,
    ) -> tuple[LineRule, list[Section]]:
        if series is None:
            reason = rule.not_from_pings or self._missing_reason(planned)
            return self._line_rule(rule, "not assessed", reason, None, 0), []
        status = series.status
        assessed = int(((status == MET) | (status == MISSED)).sum())
        missed = int((status == MISSED).sum())
        if not assessed:
            return self._line_rule(
                rule, "not assessed", self._empty_reason(planned, status), series, 0
            ), []
        out = missed / assessed > rule.allow
        verdict: Verdict = "out of spec" if out and rule.severity == "out of spec" else "in spec"
        sections = (
            self._sections(rule, planned, series, assessed, within=not out) if with_sections else []
        )
        stray = missed - sum(s.pings_missed for s in sections)
        reason = self._reason(rule, assessed, missed, stray, out)
        absent = sorted({name for p in planned for name in p.absent})
        if absent:
            reason += f"; not in the log: {', '.join(absent)}"
        return self._line_rule(rule, verdict, reason, series, stray), sections

    def _reason(self, rule: Rule, assessed: int, missed: int, stray: int, out: bool) -> str:
        if not missed:
            return ""
        share = 100.0 * missed / assessed
        text = f"{missed:,} of {assessed:,} assessed pings miss it ({share:.2g} %)".replace(
            ",", "\u202f"
        )
        if not out:
            text += f", within the {100.0 * rule.allow:g} % allowed"
        if stray:
            text += f"; {stray} of them too scattered to make a section"
        return text

    def _missing_reason(self, planned: Sequence[PlannedRule]) -> str:
        names = list(dict.fromkeys(n for p in planned for n in p.missing))
        stated = {name for computed in self.done for name in computed.plan.available.stated}
        return missing_text(names, self.sheet, stated)

    def _empty_reason(self, planned: Sequence[PlannedRule], status: NDArray[np.int8]) -> str:
        if (status == EXEMPT).all():
            return "the line has too few pings for it"
        for computed, plan in zip(self.done, planned, strict=True):
            stamped = computed.values.get("stamped_on_arrival")
            if plan.timed and stamped is not None and np.nanmean(np.asarray(stamped) == 1.0) > 0.5:
                return "the clock stamped arrivals, not transmissions"
            for key in reversed(closure(plan.reads, computed.plan.nodes)):
                value = computed.values.get(key)
                if value is None or isinstance(value, str) or key == "time":
                    continue
                if np.isnan(np.asarray(value, dtype=float)).all():
                    return f"no ping has a value of {key}"
        return "no ping has all the values it needs"

    def _line_rule(
        self, rule: Rule, verdict: Verdict, reason: str, series: RuleSeries | None, stray: int
    ) -> LineRule:
        if series is None:
            counts = (0, 0, self.n, 0)
            return LineRule(
                rule.id,
                verdict,
                reason,
                rule.severity,
                None,
                None,
                "",
                None,
                *counts,
                0,
                None,
                None,
            )
        status = series.status
        at = self._worst(series, np.ones(self.n, dtype=bool))
        return LineRule(
            rule.id,
            verdict,
            reason,
            rule.severity,
            None if at is None else _number(series.limit[at]),
            None if at is None else _number(series.value[at]),
            series.unit,
            None if at is None else _number(series.margin[at]),
            int(((status == MET) | (status == MISSED)).sum()),
            int((status == MISSED).sum()),
            int((status == NOT_ASSESSED).sum()),
            int((status == EXEMPT).sum()),
            stray,
            self._metres((status == MET) | (status == MISSED)),
            self._metres(status == MISSED),
        )

    def _worst(self, series: RuleSeries, among: NDArray[np.bool_]) -> int | None:
        margin = np.where(among & ~np.isnan(series.margin), series.margin, np.inf)
        # Among the missed first: an allowance may leave a met ping with a margin of nothing.
        missed = among & (series.status == MISSED)
        if missed.any():
            margin = np.where(missed, margin, np.inf)
        at = int(np.argmin(margin)) if len(margin) else 0
        if len(margin) and not np.isnan(margin[at]) and (margin[at] < np.inf or missed.any()):
            return at
        return None

    def _metres(self, mask: NDArray[np.bool_]) -> float | None:
        if self.spacing is None or np.isnan(self.spacing).all():
            return None
        return float(np.nansum(np.where(mask, np.maximum(self.spacing, 0.0), 0.0)))

    def _sections(
        self,
        rule: Rule,
        planned: Sequence[PlannedRule],
        series: RuleSeries,
        assessed: int,
        within: bool,
    ) -> list[Section]:
        found: list[Section] = []
        for computed, plan in zip(self.done, planned, strict=True):
            if not plan.applies or plan.missing:
                continue
            alone = self._alone(rule, computed)
            for span, channel in zip(computed.channels, self._own_channels(computed), strict=True):
                status = series.status[channel.rows]
                keep = None if alone is None else alone[span.rows]
                for first, last in find_sections(status, rule.join_pings, rule.keep_pings, keep):
                    found.append(
                        self._section(
                            rule,
                            plan,
                            computed,
                            series,
                            channel,
                            span,
                            first,
                            last,
                            assessed,
                            within,
                        )
                    )
        return found

    def _own_channels(self, computed: Computed) -> list[ChannelSpan]:
        names = [c.name for c in computed.channels]
        return [c for c in self.table.channels if c.name in names]

    def _alone(self, rule: Rule, computed: Computed) -> NDArray[np.bool_] | None:
        if rule.keep_when is None or not all(k in computed.values for k in rule.keep_when.names):
            return None
        truth = np.asarray(rule.keep_when.run(computed.values), dtype=float)
        return np.broadcast_to(truth == 1.0, (len(computed.rows),))

    def _section(
        self,
        rule: Rule,
        planned: PlannedRule,
        computed: Computed,
        series: RuleSeries,
        channel: ChannelSpan,
        span: ChannelSpan,
        first: int,
        last: int,
        assessed: int,
        within: bool,
    ) -> Section:
        a, b = channel.start + first, channel.start + last
        inside = np.zeros(self.n, dtype=bool)
        inside[a : b + 1] = True
        inside &= series.status == MISSED
        worst = self._worst(series, inside)
        worst = a if worst is None else worst
        local = slice(span.start + first, span.start + last + 1)
        missed_here = series.status[a : b + 1] == MISSED
        values = self._values_in(computed, planned, local, missed_here)
        at = int(missed_here[: worst - a].sum())
        value, limit = float(series.value[worst]), float(series.limit[worst])
        unit = (
            planned.rule.requirement.comparisons[0].left.unit
            if planned.rule.requirement and planned.rule.requirement.comparisons
            else Unit()
        )
        says = filled(rule.says_for(self.kind), values, at, value, limit, unit)
        reason = (
            says
            or f"{rule.title}: {readable(value, unit)} against {readable(limit, unit)} at the worst ping."
        )
        channel_text = channel.name
        return Section(
            id="",
            line=self.name,
            channel=channel_text,
            rule=rule.id,
            severity=rule.severity,
            start=iso_time(int(self.table.time[a])),
            end=iso_time(int(self.table.time[b])),
            first_ping=int(self.table.ping[a]),
            last_ping=int(self.table.ping[b]),
            first_index=first,
            last_index=last,
            pings=last - first + 1,
            pings_missed=int(missed_here.sum()),
            share=float(missed_here.sum()) / assessed,
            worst=_number(value),
            limit=_number(limit),
            unit=series.unit,
            margin=_number(series.margin[worst]),
            worst_ping=int(self.table.ping[worst]),
            worst_index=worst - channel.start,
            reason=reason,
            remedy=filled(rule.remedy_for(self.kind), values, at, value, limit, unit),
            within_allowance=within,
            length=self._metres(_span_mask(self.n, a, b)),
            duration=max(0.0, float(self.table.time[b] - self.table.time[a]) / 1e9),
            start_latitude=self._at(self.latitude, a),
            start_longitude=self._at(self.longitude, a),
            end_latitude=self._at(self.latitude, b),
            end_longitude=self._at(self.longitude, b),
            evidence=self._evidence(
                planned, computed, span.start + worst - channel.start, value, limit, unit
            ),
        )

    def _values_in(
        self, computed: Computed, planned: PlannedRule, local: slice, missed: NDArray[np.bool_]
    ) -> Mapping[str, Any]:
        """What the texts' names are over the missed pings of a section; a beam's own at its ping's worst beam."""
        worst = computed.worst_beams.get(planned.rule.id)
        values: dict[str, Any] = {}
        expressions = planned.rule.text_expressions
        for key in {name for e in expressions for name in e.names}:
            value = computed.values.get(key)
            if value is None and worst is not None:
                value = worst.inputs.get(key)
            if value is not None:
                values[key] = value[local][missed] if np.ndim(value) else value
        return values

    def _at(self, values: Floats | None, at: int) -> float | None:
        return None if values is None else _number(values[at])

    def _evidence(
        self,
        planned: PlannedRule,
        computed: Computed,
        at: int,
        value: float,
        limit: float,
        unit: Unit,
    ) -> tuple[Evidence, ...]:
        nodes = computed.plan.nodes
        worst = computed.worst_beams.get(planned.rule.id)
        found = []
        for key in closure(planned.reads, nodes):
            node = nodes[key]
            here: Any = None
            if node.grain == "beam":
                here = worst.inputs[key][at] if worst is not None and key in worst.inputs else None
            elif key in computed.values and key != "time":
                here = computed.values[key]
                here = here[at] if np.ndim(here) else here
            if here is None:
                continue
            if not isinstance(here, float | int | np.number):
                found.append(Evidence(key, str(here), "", None, node.origin))
                continue
            recipe = node.recipe
            formula = (
                recipe.formula
                if recipe
                else (node.limit.text if node.limit and node.inputs else "")
            )
            source = recipe.source if recipe else (node.limit.source if node.limit else "")
            found.append(
                Evidence(
                    key,
                    readable(float(here), node.unit),
                    str(node.unit),
                    _number(here),
                    node.origin,
                    formula,
                    source,
                )
            )
        return tuple(found)

    def _line(self, rules: list[LineRule]) -> LineFinding:
        verdict: Verdict = "not assessed"
        counted = [r for r in rules if r.severity == "out of spec"]
        if any(r.verdict == "out of spec" for r in counted):
            verdict = "out of spec"
        elif any(r.verdict == "in spec" for r in counted):
            verdict = "in spec"
        time = self.table.time
        first = self.table.channels[0].rows if self.table.channels else slice(0, 0)
        length = None
        if self.spacing is not None and not np.isnan(self.spacing).all():
            length = float(np.nansum(np.maximum(self.spacing[first], 0.0)))
        origins: dict[str, str] = {}
        for computed in self.done:
            for key, node in computed.plan.nodes.items():
                if node.way not in ("limit", "reduction", "alias"):
                    origins.setdefault(key, node.origin)
        return LineFinding(
            line=self.name,
            kind=self.kind,
            channels=tuple(c.name for c in self.table.channels),
            files=self.files,
            pings=self.n,
            soundings=sum(c.soundings for c in self.done),
            start=iso_time(int(time.min())) if self.n else None,
            end=iso_time(int(time.max())) if self.n else None,
            length=length,
            duration=float(time.max() - time.min()) / 1e9 if self.n else None,
            verdict=verdict,
            rules=tuple(rules),
            origins=dict(sorted(origins.items())),
        )

    def _assumptions(self) -> tuple[Assumption, ...]:
        found: dict[str, Assumption] = {}
        for computed in self.done:
            for key in sorted(_used(computed.plan)):
                node = computed.plan.nodes[key]
                if node.way == "assumed":
                    assumed = assumed_values()[key]
                    found[key] = Assumption(key, assumed.text, assumed.reason, (self.name,))
                elif node.recipe is not None and node.recipe.assumes:
                    found[key] = Assumption(key, "", node.recipe.assumes, (self.name,))
            if computed.plan.available.assumed_kind:
                found["kind"] = Assumption(
                    "kind",
                    self.kind,
                    "the sonar's kind is not stated; this is what the shape of the log suggests",
                    (self.name,),
                )
        return tuple(found.values())


def _used(plan: Plan) -> set[str]:
    """What the rules' verdicts rest on, conditions of recipes included."""
    keys: set[str] = set()
    for planned in plan.rules:
        keys |= set(closure(planned.reads, plan.nodes))
    for key in list(keys):
        recipe = plan.nodes[key].recipe
        if recipe is not None:
            keys |= {name for name, _ in recipe.only if name in plan.nodes}
    return keys


def _span_mask(n: int, first: int, last: int) -> NDArray[np.bool_]:
    mask = np.zeros(n, dtype=bool)
    mask[first : last + 1] = True
    return mask


def missing_text(names: Sequence[str], sheet: RuleSheet, said: Collection[str]) -> str:
    """Which input a rule lacks, in words; of what was ``said`` in the survey file it lacks what is logged."""
    if not names:
        return "an input is missing"
    limits = [n for n in names if n in sheet.limits]
    others = [n for n in names if n not in sheet.limits]
    parts = []
    if limits:
        parts.append(f"{_and(limits)} {'is' if len(limits) == 1 else 'are'} not stated")
    stated = [n for n in others if quantities.is_stated_key(n) and n not in said]
    logged = [n for n in others if n not in stated]
    if stated:
        parts.append(
            f"{_and(stated)} {'is' if len(stated) == 1 else 'are'} neither logged nor stated"
        )
    if logged:
        parts.append(f"{_and(logged)} {'is' if len(logged) == 1 else 'are'} not logged")
    return "; ".join(parts)


def _and(names: Sequence[str]) -> str:
    return names[0] if len(names) == 1 else f"{', '.join(names[:-1])} and {names[-1]}"
