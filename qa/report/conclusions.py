"""What follows from the findings: what to run again, which causes matter, what could not be assessed."""

from __future__ import annotations

import textwrap
from collections import defaultdict
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from functools import cached_property

from qa.model.findings import Findings, LineFinding, RuleFinding, Section
from qa.report import numbers
from qa.report.words import word

TOGETHER = 60.0
"""Seconds: stretches of one line that are less apart than this are run as one."""
ROWS_OF_A_PAGE = 14
"""With more stretches than this, the list for the operator takes each line as one."""

_DENSITIES = (("normal", 95, 48), ("dense", 112, 56))
"""How many characters of settings a printed line of the operator's list holds, and how many lines a page."""

Grid = tuple[float, float, float, float]


@dataclass(frozen=True, slots=True)
class Stretch:
    """A part of a line to run again. ``sections`` are positions in the findings' sections."""

    line: str
    line_index: int
    sections: tuple[int, ...]
    channels: tuple[str, ...]
    start: str
    end: str
    first_ping: int
    last_ping: int
    pings: int
    duration: float | None
    length: float | None
    causes: tuple[str, ...]
    settings: tuple[tuple[str, str], ...]
    start_place: tuple[str, ...]
    end_place: tuple[str, ...]
    first_section: int
    last_section: int
    stretches: int = 1


@dataclass(frozen=True, slots=True)
class Cause:
    """A rule that was missed, with what it costs."""

    index: int
    rule: RuleFinding
    lines: int
    duration: float
    pings: int
    worst_section: int | None


@dataclass(frozen=True, slots=True)
class Unassessed:
    """A rule that could not be assessed on some lines."""

    index: int
    rule: RuleFinding
    lines: tuple[str, ...]
    reasons: tuple[tuple[str, tuple[str, ...]], ...]
    everywhere: bool


@dataclass
class Conclusions:
    """Everything that the first page and the printed summary say, worked out once.

    Parameters
    ----------
    findings : Findings
        What the audit found.
    grid : mapping
        Easting and northing of start and end by section id, where the log has no latitude.
    """

    findings: Findings
    grid: Mapping[str, Grid] = field(default_factory=dict)

    @cached_property
    def line_index(self) -> dict[str, int]:
        """Position of each line by its name."""
        return {line.line: n for n, line in enumerate(self.findings.lines)}

    @cached_property
    def sections_of(self) -> dict[str, list[int]]:
        """Positions of each line's sections."""
        found: dict[str, list[int]] = defaultdict(list)
        for n, section in enumerate(self.findings.sections):
            found[section.line].append(n)
        return dict(found)

    @cached_property
    def titles(self) -> dict[str, str]:
        """Rules' titles."""
        return {rule.id: rule.title or rule.id for rule in self.findings.rules}

    @cached_property
    def lines_out(self) -> list[LineFinding]:
        """Lines out of spec."""
        return [line for line in self.findings.lines if line.verdict == "out of spec"]

    @cached_property
    def failing(self) -> list[int]:
        """Positions of the sections that count: out of spec, beyond what is allowed."""
        return [n for n, s in enumerate(self.findings.sections) if fails(s)]

    @cached_property
    def stretches(self) -> list[Stretch]:
        """What to run again, in the order of the lines."""
        found = []
        for name, indices in self._failing_by_line().items():
            found += [self._stretch(name, group) for group in self._groups(indices)]
        return found

    @cached_property
    def by_line(self) -> list[Stretch]:
        """The same, each line as one stretch from its first to its last."""
        counted: dict[str, int] = defaultdict(int)
        for stretch in self.stretches:
            counted[stretch.line] += 1
        return [
            self._stretch(name, indices, counted[name])
            for name, indices in self._failing_by_line().items()
        ]

    @property
    def operator_list(self) -> list[Stretch]:
        """What fits on a page."""
        return self.stretches if len(self.stretches) <= ROWS_OF_A_PAGE else self.by_line

    @property
    def density(self) -> str:
        """How tightly the operator's list must be printed to fit a page: "normal", "dense" or "worst causes only"."""
        for name, characters, most in _DENSITIES:
            lines = 0
            for row in self.operator_list:
                told = sum(
                    1 + (len(rule) + len(remedy)) // characters for rule, remedy in row.settings
                )
                lines += max(3, told)
            if lines <= most:
                return name
        return "worst"

    def _failing_by_line(self) -> dict[str, list[int]]:
        grouped: dict[str, list[int]] = {}
        failing = set(self.failing)
        for line in self.findings.lines:
            indices = [n for n in self.sections_of.get(line.line, ()) if n in failing]
            if indices:
                grouped[line.line] = indices
        return grouped

    def _groups(self, indices: Sequence[int]) -> list[list[int]]:
        sections = self.findings.sections
        groups: list[list[int]] = []
        latest = None
        for n in sorted(indices, key=lambda i: (sections[i].start, i)):
            start, end = (numbers.parsed_time(t) for t in (sections[n].start, sections[n].end))
            near = (
                latest is not None
                and start is not None
                and (start - latest).total_seconds() < TOGETHER
            )
            if groups and near:
                groups[-1].append(n)
            else:
                groups.append([n])
                latest = None
            if end is not None and (latest is None or end > latest):
                latest = end
        return groups

    def _stretch(self, name: str, indices: Sequence[int], count: int = 1) -> Stretch:
        sections = [self.findings.sections[n] for n in indices]
        first = min(sections, key=lambda s: (s.start, s.first_index))
        last = max(sections, key=lambda s: (s.end, s.last_index))
        duration, length = _extent(sections, first, last)
        worst: dict[str, Section] = {}
        for section in sections:
            before = worst.get(section.rule)
            if before is None or _margin(section) < _margin(before):
                worst[section.rule] = section
        ordered = sorted(worst.values(), key=_margin)
        return Stretch(
            line=name,
            line_index=self.line_index.get(name, -1),
            sections=tuple(indices),
            channels=tuple(dict.fromkeys(s.channel for s in sections if s.channel)),
            start=first.start,
            end=last.end,
            first_ping=first.first_ping,
            last_ping=last.last_ping,
            pings=sum(s.pings for s in sections),
            duration=duration,
            length=length,
            causes=tuple(s.rule for s in ordered),
            settings=tuple((s.rule, s.remedy) for s in ordered if s.remedy),
            start_place=self._place(first, 0),
            end_place=self._place(last, 2),
            first_section=indices[sections.index(first)],
            last_section=indices[sections.index(last)],
            stretches=count,
        )

    def _place(self, section: Section, side: int) -> tuple[str, ...]:
        latitude = section.start_latitude if side == 0 else section.end_latitude
        longitude = section.start_longitude if side == 0 else section.end_longitude
        if latitude is not None and longitude is not None:
            return numbers.position(latitude, longitude)
        if section.id in self.grid:
            easting, northing = self.grid[section.id][side : side + 2]
            return numbers.grid(easting, northing)
        return ()

    @cached_property
    def total_length(self) -> float | None:
        """Metres to run again; None where some length is not known."""
        return _total([s.length for s in self.stretches])

    @cached_property
    def total_duration(self) -> float | None:
        """Seconds that it took the first time."""
        return _total([s.duration for s in self.stretches])

    @cached_property
    def causes(self) -> list[Cause]:
        """Rules out of spec, the one that costs most time first."""
        found = []
        failing = [(n, self.findings.sections[n]) for n in self.failing]
        for index, rule in enumerate(self.findings.rules):
            if rule.severity != "out of spec" or rule.verdict != "out of spec":
                continue
            own = [(n, s) for n, s in failing if s.rule == rule.id]
            worst = min(own, key=lambda p: _margin(p[1]), default=None)
            found.append(
                Cause(
                    index,
                    rule,
                    rule.lines_out_of_spec,
                    sum(s.duration or 0.0 for _, s in own),
                    sum(s.pings for _, s in own),
                    None if worst is None else worst[0],
                )
            )
        return sorted(found, key=lambda c: (-c.duration, -c.pings, c.rule.id))

    @cached_property
    def unassessed(self) -> list[Unassessed]:
        """Rules that were not assessed on every line that they are for, those assessed nowhere first."""
        reasons: dict[str, dict[str, list[str]]] = defaultdict(lambda: defaultdict(list))
        for line in self.findings.lines:
            for rule in line.rules:
                if rule.verdict == "not assessed":
                    reasons[rule.id][rule.reason].append(line.line)
        found = []
        for index, summed in enumerate(self.findings.rules):
            own = reasons.get(summed.id, {})
            everywhere = summed.verdict == "not assessed"
            if not own and not everywhere:
                continue
            told = tuple((reason, tuple(lines)) for reason, lines in own.items())
            lines = tuple(name for _, names in told for name in names)
            found.append(
                Unassessed(index, summed, lines, told or ((summed.reason, ()),), everywhere)
            )
        return sorted(
            found, key=lambda u: (not u.everywhere, u.rule.severity != "out of spec", u.index)
        )

    @property
    def lacking(self) -> bool:
        """Whether a rule that counts was not assessed on some line."""
        return any(u.rule.severity == "out of spec" for u in self.unassessed)

    @cached_property
    def partly(self) -> list[RuleFinding]:
        """Rules that were assessed, but not on every ping."""
        return [r for r in self.findings.rules if r.pings_assessed and r.pings_not_assessed]

    @cached_property
    def advice(self) -> list[int]:
        """Positions of the advisory sections."""
        return [n for n, s in enumerate(self.findings.sections) if s.severity == "advisory"]

    @cached_property
    def not_used(self) -> list[str]:
        """Files that could not be used."""
        return [item.path for item in self.findings.inputs if item.error]

    def headline(self) -> str:
        """The verdict in a sentence."""
        findings = self.findings
        lines = len(findings.lines)
        out = len(self.lines_out)
        if out:
            if out == lines:
                head = word("headline.all_out", n=lines)
            else:
                head = word("headline.out", out=out, n=lines)
            if not self.stretches:
                return f"{head} {word('headline.no_stretch')}"
            extent = [word("counted.stretches", n=len(self.stretches))]
            if self.total_length is not None:
                extent.append(numbers.length(self.total_length))
            if self.total_duration is not None:
                extent.append(word("headline.time", time=numbers.duration(self.total_duration)))
            return f"{head} {word('headline.again', extent=', '.join(extent))}"
        if findings.verdict == "in spec":
            n = sum(u.rule.severity == "out of spec" for u in self.unassessed)
            if n:
                return word("headline.in_partly", n=n, lines=word("counted.lines", n=lines))
            return word("headline.in", n=lines)
        return word("headline.nothing")


def fails(section: Section) -> bool:
    """Whether a section puts its line out of spec."""
    return section.severity == "out of spec" and not section.within_allowance


def lacking(line: LineFinding) -> bool:
    """Whether a rule that counts was not assessed on a line."""
    return any(r.severity == "out of spec" and r.verdict == "not assessed" for r in line.rules)


def _margin(section: Section) -> float:
    return section.margin if section.margin is not None else 0.0


def _total(values: Sequence[float | None]) -> float | None:
    known = [v for v in values if v is not None]
    return sum(known) if known and len(known) == len(values) else None


def _extent(
    sections: Sequence[Section], first: Section, last: Section
) -> tuple[float | None, float | None]:
    """Time and length from the first to the last; the length at the sections' mean speed."""
    if len(sections) == 1:
        return first.duration, first.length
    start, end = numbers.parsed_time(first.start), numbers.parsed_time(last.end)
    if start is None or end is None:
        return None, None
    duration = max((end - start).total_seconds(), max(s.duration or 0.0 for s in sections))
    timed = [s for s in sections if s.duration and s.length is not None]
    if not timed:
        return duration, None
    speed = sum(s.length or 0.0 for s in timed) / sum(s.duration or 0.0 for s in timed)
    longest = max(s.length or 0.0 for s in timed)
    return duration, max(speed * duration, longest)


def summary(findings: Findings, worst: int = 5) -> str:
    """The short text that the command prints at the end.

    Parameters
    ----------
    findings : Findings
        What the audit found.
    worst : int
        How many of the worst sections to name.
    """
    found = Conclusions(findings)
    pings = sum(line.pings for line in findings.lines)
    counted = [word("counted.lines", n=len(findings.lines)), word("counted.pings", n=pings)]
    soundings = sum(line.soundings for line in findings.lines)
    if soundings and soundings != pings:
        counted.append(word("counted.soundings", n=soundings))
    rows = [", ".join(counted), found.headline(), ""]
    rows += _verdicts(findings.rules)
    failing = sorted(found.failing, key=lambda n: (_margin(findings.sections[n]), n))
    if failing:
        rows += ["", word("summary.worst")]
        for n in failing[:worst]:
            section = findings.sections[n]
            where = clipped(section.line) + (
                f" · {clipped(section.channel)}" if section.channel else ""
            )
            told = word(
                "summary.section",
                where=where,
                rule=section.rule,
                first=section.first_ping,
                last=section.last_ping,
                start=numbers.moment(section.start),
            )
            rows.append(f"  {told} {section.reason}".rstrip())
        if len(failing) > worst:
            rows.append("  " + word("summary.more", n=len(failing) - worst))
    rows += ["", word("cautions.short")]
    # A terminal or a pipe may know no more than its code page.
    return "\n".join(rows).replace(numbers.THIN, "").replace(numbers.MINUS, "-")


def _verdicts(rules: Sequence[RuleFinding], told: int = 6) -> list[str]:
    """Rules by verdict: those missed each on a line, those met by name, those not assessed with their reason if few."""
    out = [r for r in rules if r.verdict == "out of spec"]
    noted = [r for r in rules if r.verdict == "in spec" and r.pings_missed]
    met = [r for r in rules if r.verdict == "in spec" and not r.pings_missed]
    lacking = [r for r in rules if r.verdict == "not assessed"]
    each = lacking if len(lacking) <= told else []
    width = max((len(r.id) for r in [*out, *noted, *each]), default=0)

    def listed(some: Sequence[RuleFinding]) -> list[str]:
        return [f"  {r.id:<{width}}  {r.verdict:<12}  {_told(r)}".rstrip() for r in some]

    rows = [*listed(out), *listed(noted), *listed(each)]
    names = {word("summary.met", n=len(met)): met}
    if not each:
        names[word("summary.lacking", n=len(lacking))] = lacking
    for title, some in names.items():
        if some:
            text = f"{title} {', '.join(r.id for r in some)}"
            rows += textwrap.wrap(
                text,
                100,
                initial_indent="  ",
                subsequent_indent="    ",
                break_on_hyphens=False,
            )
    return rows


def clipped(text: str, most: int = 60) -> str:
    """A name short enough for a terminal, on one line.

    Examples
    --------
    >>> clipped("a\\tline" + 80 * "x")[-3:]
    'xx…'
    """
    single = "".join(c if c.isprintable() else " " for c in text)
    return single if len(single) <= most else single[: most - 1] + "…"


def _told(rule: RuleFinding) -> str:
    if rule.verdict == "not assessed":
        return rule.reason
    missed = word("summary.missed", missed=rule.pings_missed, n=rule.pings_assessed)
    parts = [missed]
    if rule.severity == "advisory":
        parts.append(word("summary.advisory"))
    if rule.lines_not_assessed:
        parts.append(word("summary.lines_not_assessed", n=rule.lines_not_assessed))
    return "; ".join(parts)
