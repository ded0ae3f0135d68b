"""The report's pages: findings and figures put into the templates."""

from __future__ import annotations

import base64
import hashlib
import json
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from functools import cache
from pathlib import Path
from typing import Any

from jinja2 import Environment, FileSystemLoader, StrictUndefined
from markupsafe import Markup

from qa.model.findings import ORIGINS, Findings, Section
from qa.model.shipped import shipped
from qa.report import charts, drawing, marking, numbers, tracks
from qa.report.conclusions import Conclusions, fails, lacking
from qa.report.lines import LineArtifacts, line_identity
from qa.report.marking import Marker
from qa.report.panels import rule_title
from qa.report.words import marked, word

MOST_LINES_ON_ONE_PAGE = 20
MOST_SECTIONS_ON_INDEX = 500
FIRST_ROWS = 6
FIRST_CAUSES = 3
LINES_NAMED = 12


@cache
def _environment() -> Environment:
    environment = Environment(
        loader=FileSystemLoader(shipped("reports"), encoding="utf-8"),
        autoescape=True,
        trim_blocks=True,
        lstrip_blocks=True,
        undefined=StrictUndefined,
        keep_trailing_newline=True,
    )
    environment.globals.update(
        w=marked,
        name=marking.name,
        verdict=marking.verdict,
        derived=marking.derived,
        short=rule_title,
        lacking=lacking,
        length=numbers.length,
        duration=numbers.duration,
        count=numbers.count,
        share=numbers.share,
        script_json=marking.script_json,
        hatches=hatches,
        language=word("language"),
        **_inlined(),
    )
    environment.filters["clean"] = marking.escaped_text
    return environment


def _inlined() -> dict[str, Markup]:
    """Style and script, and the policy that lets nothing else run or load."""
    texts = {}
    for key, file in (("style", "style.css"), ("script", "report.js")):
        text = (shipped("reports") / file).read_text(encoding="utf-8")
        texts[key] = text.replace("\r\n", "\n")
    policy = "default-src 'none'; img-src data:; base-uri 'none'; form-action 'none'; " + "; ".join(
        f"{kind}-src 'sha256-{base64.b64encode(hashlib.sha256(texts[kind].encode()).digest()).decode()}'"
        for kind in ("style", "script")
    )
    return {**{key: Markup(text) for key, text in texts.items()}, "policy": Markup(policy)}


@dataclass(frozen=True, slots=True)
class SectionView:
    """A section with where it stands: in the findings, and on which page."""

    index: int
    at: str
    section: Section
    anchor: str
    figure: str
    page: str
    fails: bool


class Report:
    """One report: the survey's page and its lines'.

    Parameters
    ----------
    findings : Findings
        What the audit found.
    artifacts : sequence of LineArtifacts
        What its lines left behind.
    pages : "auto", "one" or "many"
        Whether lines stand on the survey's page.
    data : mapping
        The findings as they stand in ``findings.json``.
    """

    def __init__(
        self,
        findings: Findings,
        artifacts: Sequence[LineArtifacts],
        pages: str,
        data: Mapping[str, Any],
    ) -> None:
        self.findings = findings
        self.marker = Marker(data)
        self.artifacts = _by_line(findings, artifacts)
        grid = {key: ends for a in artifacts for key, ends in a.grid.items()}
        self.conclusions = Conclusions(findings, grid)
        many = len(findings.lines) > MOST_LINES_ON_ONE_PAGE
        self.many = many if pages == "auto" else pages == "many"
        self.views = self._section_views()

    def _section_views(self) -> list[SectionView]:
        counted: dict[str, int] = {}
        views = []
        for n, section in enumerate(self.findings.sections):
            line = self.conclusions.line_index.get(section.line)
            identity = line_identity(0 if line is None else line + 1)
            counted[identity] = counted.get(identity, 0) + 1
            views.append(
                SectionView(
                    index=n,
                    at=f"/sections/{n}",
                    section=section,
                    anchor=f"{identity}-s{counted[identity]}",
                    figure=""
                    if line is None or self.artifacts[line] is None
                    else f"{identity}-time",
                    page=f"lines/{line + 1:04d}.html" if self.many and line is not None else "",
                    fails=fails(section),
                )
            )
        return views

    def index(self) -> str:
        """The survey's page."""
        found = self.conclusions
        shown = sorted(self.views, key=_least_margin_first)
        failing = [v for v in shown if v.section.severity == "out of spec"]
        advised = [v for v in shown if v.section.severity != "out of spec"]
        most = MOST_SECTIONS_ON_INDEX if self.many else len(self.views)
        zone = str(self.findings.survey.get("vessel_time_zone") or "UTC")
        context = self._common("")
        context.update(
            findings=self.findings,
            local=self.marker.local,
            within=self.marker.within,
            pair_within=self.marker.pair_within,
            views=self.views,
            found=found,
            headline=found.headline(),
            period=_period(self.findings),
            zone=zone,
            day=self.findings.survey.get("day"),
            operator=found.operator_list,
            by_line=len(found.operator_list) != len(found.stretches),
            density=found.density,
            first_rows=found.by_line[:FIRST_ROWS],
            more_rows=max(0, len(found.by_line) - FIRST_ROWS),
            causes=found.causes[:FIRST_CAUSES],
            more_causes=max(0, len(found.causes) - FIRST_CAUSES),
            first_unassessed=found.unassessed[:FIRST_ROWS],
            more_unassessed=max(0, len(found.unassessed) - FIRST_ROWS),
            failed_lines=[(n, x) for n, x in enumerate(self.findings.lines) if x.error],
            clause_groups=self._clause_groups(),
            maps=self._maps(),
            unplaced=sum(a is None or a.track is None for a in self.artifacts),
            section_groups=[
                ("sections", failing[:most], len(failing)),
                ("advice", advised[:most], len(advised)),
            ],
            # What concerns several lines together belongs to none of them.
            of_survey=[v for v in self.views if v.section.line not in found.line_index],
            lines=self._line_rows(),
            blocks=[] if self.many else [self._block(n) for n in range(len(self.findings.lines))],
            survey_figures=self._survey_figures(),
            named=LINES_NAMED,
        )
        return _environment().get_template("report.html.jinja").render(context)

    def line_inputs(self, index: int) -> bytes:
        """All that one line's own page is made from, but for the program: pages of the same are the same."""
        line = self.findings.lines[index]
        views = self._views_of(line.line)
        rules = {r.id for r in line.rules} | {v.section.rule for v in views}
        sections = self.marker.look_up("/sections")
        artifact = self.artifacts[index]
        figures = b"" if artifact is None else Path(artifact.figures).read_bytes()
        about = [
            index,
            index + 1 < len(self.findings.lines),
            self.many,
            self.marker.look_up(f"/lines/{index}"),
            [[v.at, v.anchor, v.figure, v.page, v.fails, sections[v.index]] for v in views],
            {rule: self.conclusions.titles.get(rule) for rule in sorted(rules)},
        ]
        return json.dumps(about).encode() + hashlib.sha256(figures).digest()

    def _views_of(self, line: str) -> list[SectionView]:
        return [self.views[n] for n in self.conclusions.sections_of.get(line, ())]

    def line(self, index: int) -> str:
        """One line's own page."""
        context = self._common("../report.html")
        line_name = drawing.clean(self.findings.lines[index].line)[:160]
        context.update(block=self._block(index), block_name=line_name)
        context.update(
            previous=f"{index:04d}.html" if index else "",
            following=f"{index + 2:04d}.html" if index + 1 < len(self.findings.lines) else "",
        )
        return _environment().get_template("line.html.jinja").render(context)

    def _common(self, home: str) -> dict[str, Any]:
        return {
            "n": self.marker.number,
            "pair": self.marker.pair,
            "titles": self.conclusions.titles,
            "home": home,
            "many": self.many,
            "line_href": self._line_href,
            "section_href": lambda view: self._section_href(view, home),
        }

    def _line_href(self, index: int) -> str:
        return f"lines/{index + 1:04d}.html" if self.many else f"#{line_identity(index + 1)}"

    def _section_href(self, view: SectionView, home: str) -> str:
        return f"#{view.anchor}" if home or not view.page else f"{view.page}#{view.anchor}"

    def _clause_groups(self) -> list[tuple[str, list[dict[str, Any]]]]:
        by_rule: dict[str, list[SectionView]] = {}
        for view in self.views:
            by_rule.setdefault(view.section.rule, []).append(view)
        groups: dict[str, list[dict[str, Any]]] = {"main": [], "advisory": []}
        for index, rule in enumerate(self.findings.rules):
            own = sorted(by_rule.get(rule.id, []), key=_least_margin_first)
            groups["main" if rule.severity == "out of spec" else "advisory"].append(
                {"at": f"/rules/{index}", "rule": rule, "sections": own}
            )
        return [(key, rows) for key, rows in groups.items() if rows]

    def _line_rows(self) -> list[dict[str, Any]]:
        rows = []
        for n, line in enumerate(self.findings.lines):
            missed = [r.id for r in line.rules if r.verdict == "out of spec"]
            none = sum(r.verdict == "not assessed" for r in line.rules)
            rows.append(
                {"at": f"/lines/{n}", "line": line, "index": n, "missed": missed, "none": none}
            )
        return rows

    def _block(self, index: int) -> dict[str, Any]:
        line = self.findings.lines[index]
        views = self._views_of(line.line)
        artifact = self.artifacts[index]
        return {
            "at": f"/lines/{index}",
            "line": line,
            "id": line_identity(index + 1),
            "figures": _figures(artifact),
            "origins": _by_origin(line.origins),
            "sections": [v for v in views if v.section.severity == "out of spec"],
            "advice": [v for v in views if v.section.severity != "out of spec"],
        }

    def _maps(self) -> list[dict[str, Any]]:
        made = []
        for geographic in (True, False):
            own = [
                (self.findings.lines[n].line, a.track)
                for n, a in enumerate(self.artifacts)
                if a is not None and a.track is not None and a.track.geographic == geographic
            ]
            title = word("map.caption") if geographic else word("map.grid")
            figure = tracks.chart(own, "map" if geographic else "map-grid", title)
            if figure is not None:
                made.append(_prepared(figure))
        return made

    def _survey_figures(self) -> list[dict[str, Any]]:
        if len(self.findings.lines) < 2:
            return []
        summed: dict[str, list[int]] = {}
        for artifact in self.artifacts:
            for rule, bins in (artifact.margins if artifact else {}).items():
                summed[rule] = [
                    a + b for a, b in zip(summed.get(rule, [0] * len(bins)), bins, strict=True)
                ]
        ordered = {r.id: summed[r.id] for r in self.findings.rules if r.id in summed}
        points = [a.growth for a in self.artifacts if a is not None and a.growth is not None]
        made = [
            charts.growth(_thinned(points), "all-growth", word("figures.survey_growth")),
            charts.margins(ordered, "all-margins", word("figures.survey_margins")),
        ]
        return [_prepared(f) for f in made if f is not None]


def _by_origin(origins: Mapping[str, str]) -> list[tuple[str, list[str]]]:
    """Quantities by where they came from, the best origin first."""
    found: dict[str, list[str]] = {origin: [] for origin in ORIGINS}
    for quantity, origin in sorted(origins.items()):
        found.setdefault(origin, []).append(quantity)
    return [(origin, names) for origin, names in found.items() if names]


def _thinned(points: Sequence[charts.GrowthPoints], most: int = 4000) -> list[charts.GrowthPoints]:
    step = max(1, -(-sum(len(p.depth) for p in points) // most))
    return [
        charts.GrowthPoints(p.depth[::step], p.footprint[::step], p.limit[::step]) for p in points
    ]


def _by_line(findings: Findings, artifacts: Sequence[LineArtifacts]) -> list[LineArtifacts | None]:
    """Each line's artifacts, None where the line could not be computed."""
    by_number = {a.number: a for a in artifacts}
    by_name = {a.line: a for a in artifacts}
    found = []
    for n, line in enumerate(findings.lines, start=1):
        same = by_number.get(n)
        found.append(
            same if same is not None and same.line == line.line else by_name.get(line.line)
        )
    return found


def _least_margin_first(view: SectionView) -> tuple[bool, float, int]:
    margin = view.section.margin
    return not view.fails, 0.0 if margin is None else margin, view.index


def _period(findings: Findings) -> tuple[str, str] | None:
    """Pointers to the first start and the last end."""
    starts = [(line.start, n) for n, line in enumerate(findings.lines) if line.start]
    ends = [(line.end, n) for n, line in enumerate(findings.lines) if line.end]
    if not starts or not ends:
        return None
    return f"/lines/{min(starts)[1]}/start", f"/lines/{max(ends)[1]}/end"


def _figures(artifact: LineArtifacts | None) -> list[dict[str, Any]]:
    if artifact is None:
        return []
    drawn: list[dict[str, Any]] = json.loads(Path(artifact.figures).read_text(encoding="utf-8"))
    return [_prepared(figure) for figure in drawn]


def render(template: str, **context: Any) -> str:
    """A page from its template."""
    return _environment().get_template(template).render(context)


def prepared(figure: dict[str, Any] | None) -> dict[str, Any] | None:
    """A figure for the templates, if there is one."""
    return None if figure is None else _prepared(figure)


def _prepared(figure: dict[str, Any]) -> dict[str, Any]:
    """A figure for the templates: its drawing was escaped when it was made."""
    data = {key: figure[key] for key in ("kind", "origin_ms", "data") if key in figure}
    return {
        "changes": [],
        "changes_total": 0,
        "legend": [],
        **figure,
        "svg": Markup(figure["svg"]),
        "data": marking.script_json(data) if figure["data"] else None,
    }


def hatches() -> Markup:
    """The patterns that figures fill their spans with: once a page."""
    from_here = []
    for n, (turn, gap) in enumerate(
        ((45, 6), (-45, 6), (0, 5), (90, 6), (45, 10), (-45, 10), (20, 8), (-70, 8))
    ):
        from_here.append(
            f'<pattern id="hatch-{n}" width="{gap}" height="{gap}" patternUnits="userSpaceOnUse" '
            f'patternTransform="rotate({turn})"><path class="hatch h{n}" d="M0 0V{gap}"/></pattern>'
        )
    from_here.append(
        '<pattern id="hatch-unassessed" width="5" height="5" patternUnits="userSpaceOnUse">'
        '<circle class="hatch-dot" cx="2" cy="2" r=".9"/></pattern>'
    )
    assert len(from_here) == drawing.PATTERNS + 1
    return Markup(
        '<svg class="defs" width="0" height="0" aria-hidden="true"><defs>'
        + "".join(from_here)
        + str(marking.shapes())
        + "</defs></svg>"
    )
