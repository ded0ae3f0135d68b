"""What the pages say: the findings' own numbers, every text as text, and the right sentence for each outcome."""

from __future__ import annotations

import html
import json
import re
from html.parser import HTMLParser
from pathlib import Path
from typing import Any

import pytest

from qa.report import numbers
from qa.report.conclusions import Conclusions, summary
from qa.report.pages import Report


class Page(HTMLParser):
    """Elements, texts and marked numbers of a page."""

    def __init__(self, path: Path) -> None:
        super().__init__(convert_charrefs=True)
        self.elements: list[tuple[str, dict[str, str]]] = []
        self.numbers: list[tuple[str, str | None, str, bool]] = []
        self.texts: list[str] = []
        self.bases: list[str] = []
        self._open: dict[str, str] | None = None
        self._raw = ""
        self._in: list[str] = []
        self.feed(path.read_text(encoding="utf-8"))

    def handle_starttag(self, tag: str, attrs: Any) -> None:
        attributes = {k: v or "" for k, v in attrs}
        self.elements.append((tag, attributes))
        if tag in ("script", "style"):
            self._in.append(tag)
        if tag == "tr":
            self.bases = [attributes.get("data-base", "")]
        if tag == "data":
            self._open, self._raw = attributes, ""

    def handle_endtag(self, tag: str) -> None:
        if tag in ("script", "style"):
            self._in.pop()
        if tag == "data" and self._open is not None:
            derived = "data-derived" in self._open
            at = self._open.get("data-derived") or self._open["data-at"]
            if not derived and not at.startswith("/"):
                at = f"{self.bases[0]}/{at}"
            self.numbers.append((at, self._open.get("value"), self._raw, derived))
            self._open = None

    def handle_data(self, data: str) -> None:
        if self._open is not None:
            self._raw += data
        if not self._in:
            self.texts.append(data)

    @property
    def text(self) -> str:
        return re.sub(r"\s+", " ", " ".join(self.texts))

    @property
    def ids(self) -> list[str]:
        return [a["id"] for _, a in self.elements if "id" in a]


def pointed(found: Any, pointer: str) -> Any:
    for part in pointer.split("/")[1:]:
        found = found[int(part)] if isinstance(found, list) else found[part]
    return found


SCALES = {"µs": 1e-6, "ms": 1e-3, "kHz": 1e3, "km": 1e3, "mm": 1e-3, "%": 1e-2}


def shown_number(text: str) -> float | None:
    """The number that a reader reads, in SI; None for a time or a text."""
    match = re.fullmatch(r"([+−]?[\d\u202f]+(?:\.\d+)?)\s?(µs|ms|kHz|km|mm|%|[a-zA-Z/]*|°)?", text)
    if match is None:
        return None
    number = float(match[1].replace("\u202f", "").replace("−", "-"))
    return number * SCALES.get(match[2] or "", 1.0)


@pytest.mark.parametrize("pages", ["one", "many"])
def test_every_number_is_the_one_in_findings_json(audit: Any, audit_pages: Any, pages: str) -> None:
    chosen = audit if pages == "one" else audit_pages
    found = json.loads((chosen.folder / "findings.json").read_text(encoding="utf-8"))
    checked = read = 0
    for path in chosen.pages:
        for at, raw, text, derived in Page(path).numbers:
            if derived:
                continue
            value = pointed(found, at)
            if value is None:
                assert raw == "" and text == "–", at
                continue
            assert (raw if raw is not None else text) == str(value), at
            checked += 1
            number = shown_number(text)
            if isinstance(value, int | float) and number is not None:
                assert number == pytest.approx(value, rel=0.06, abs=0.06), (at, text)
                read += 1
    assert checked > 400 and read > 250


def test_every_section_and_rule_and_line_stands_on_the_report(audit: Any) -> None:
    pointers = {at for at, *_ in Page(audit.folder / "report.html").numbers}
    findings = audit.findings
    assert {f"/sections/{n}/worst" for n in range(len(findings.sections))} <= pointers
    assert {
        f"/rules/{n}/pings_missed" for n, r in enumerate(findings.rules) if r.pings_assessed
    } <= pointers
    assert {f"/lines/{n}/pings" for n in range(len(findings.lines))} <= pointers
    assert {f"/inputs/{n}/rows_read" for n in range(len(findings.inputs))} <= pointers
    for n, line in enumerate(findings.lines):
        assert {f"/lines/{n}/rules/{k}/pings_assessed" for k in range(len(line.rules))} <= pointers


def test_totals_are_sums_of_the_findings(audit: Any) -> None:
    page = Page(audit.folder / "report.html")
    totals = {at: float(raw) for at, raw, _, derived in page.numbers if derived}
    failing = [s for s in audit.findings.sections if s.severity == "out of spec"]
    # MR02's two sections overlap and are run as one: from the first ping of the one to the last of the other.
    overlap = [s for s in failing if s.line == "MR02_north"]
    alone = [s for s in failing if s.line != "MR02_north"]
    duration = sum(s.duration for s in alone) + (100 - 40) * 0.2
    assert totals["total_duration"] == pytest.approx(duration)
    length = sum(s.length for s in alone) + (100 - 40) * 0.5
    assert totals["total_length"] == pytest.approx(length)
    assert len(overlap) == 2


def test_ids_are_unique_and_links_lead_somewhere(audit: Any, audit_pages: Any) -> None:
    for chosen in (audit, audit_pages):
        pages = {p: Page(p) for p in chosen.pages}
        for path, page in pages.items():
            assert len(page.ids) == len(set(page.ids)), path.name
            links = [a["href"] for tag, a in page.elements if tag in ("a", "use") and "href" in a]
            assert links
            for link in links:
                file, _, anchor = link.partition("#")
                target = (path.parent / file).resolve() if file else path
                assert target in pages, link
                assert not anchor or anchor in pages[target].ids, link


def test_every_pattern_and_label_that_is_named_exists(audit: Any) -> None:
    page = Page(audit.folder / "report.html")
    named = {m for _, a in page.elements for m in re.findall(r"url\(#([^)]+)\)", a.get("fill", ""))}
    labelled = {i for _, a in page.elements for i in a.get("aria-labelledby", "").split()}
    assert named and labelled and named | labelled <= set(page.ids)


def test_nothing_is_fetched_and_nothing_runs_but_the_one_script(audit: Any) -> None:
    page = Page(audit.folder / "report.html")
    assert not [
        tag for tag, a in page.elements if "src" in a or tag in ("link", "iframe", "object", "img")
    ]
    assert not [a for _, a in page.elements if any(k.startswith("on") or k == "style" for k in a)]
    assert "http:" not in audit.html and "https:" not in audit.html
    policy = next(
        a["content"] for tag, a in page.elements if a.get("http-equiv") == "Content-Security-Policy"
    )
    assert "default-src 'none'" in policy and "unsafe" not in policy


def test_every_figure_says_in_words_what_it_shows(audit: Any) -> None:
    drawings = re.findall(r'<svg class="figure".*?</svg>', audit.html, re.DOTALL)
    assert len(drawings) > 10
    for drawing in drawings:
        assert re.search(
            r"<title id=[^>]+>[^<]{5,}</title><desc id=[^>]+>[^<]{15,}</desc>", drawing
        )
        assert 'role="img"' in drawing
    figures = re.findall(r"<figure .*?</figure>", audit.html, re.DOTALL)
    assert all("application/json" in f and "button" in f for f in figures)


HOSTILE = [
    "<script>window.broken=1</script>",
    "</script><script>window.broken=1</script>",
    '"><img src=x onerror=window.broken=1>',
    "=cmd|' /C calc'!A0",
    "{{ 7 * 7 }}{% raw %}",
    "\u202eesrever\u2066x",
    "a\u2028b\u2029c\x00\x1b[31m",
    "😀" * 20,
    "x" * 5000,
    "'\"`&amp;<!--",
    "",
]


@pytest.fixture(scope="session")
def hostile(write: Any, made: Any) -> Any:
    """An audit whose every name is out to do harm."""
    kinds = tuple(
        made.LineKind(
            text,
            pings=40,
            channels=(text, "b"),
            faults=(made.Fault("ping-interval", 5, 20),),
            notes=(text,),
            texts={"reason": text, "remedy": text},
        )
        for text in HOSTILE
    )
    return write(kinds, name=HOSTILE[1])


def test_hostile_names_are_shown_as_text(hostile: Any) -> None:
    page = Page(hostile.folder / "report.html")
    assert [tag for tag, _ in page.elements].count("img") == 0
    scripts = [a.get("type", "") for tag, a in page.elements if tag == "script"]
    assert scripts.count("") == 1 and set(scripts) == {"", "application/json"}
    text = "".join(page.texts)
    for name in ("<script>window.broken=1</script>", "{{ 7 * 7 }}{% raw %}", "=cmd|' /C calc'!A0"):
        assert name in text
    names = re.findall(r"<bdi[^>]*>([^<]*)</bdi>", hostile.html)
    assert names and max(len(html.unescape(n)) for n in names) <= 200, "a very long name is cut"
    for character in ("\u2028", "\u2029", "\x00", "\x1b"):
        blocks = re.findall(r"<script[^>]*>(.*?)</script>", hostile.html, re.DOTALL)
        assert not any(character in block for block in blocks)


def test_names_are_isolated_from_the_text_around_them(hostile: Any) -> None:
    assert "<bdi>\u202eesrever" in hostile.html
    assert not re.search(r"<th scope=\"row\"><a href=\"#L\d+\">(?!<bdi)", hostile.html)


def test_figure_data_of_hostile_lines_stays_json(hostile: Any) -> None:
    blocks = re.findall(
        r'<script type="application/json"[^>]*>(.*?)</script>', hostile.html, re.DOTALL
    )
    assert len(blocks) > 20
    for block in blocks:
        assert json.loads(block)["data"]


def test_lone_surrogates_of_file_names_do_not_lose_the_report(write: Any, made: Any) -> None:
    audit = write((made.LineKind("bad\udc80name", pings=20),))
    assert "bad" in audit.html


def all_pass(made: Any) -> Any:
    return tuple(made.LineKind(f"P{n}", pings=50, places="none") for n in range(2))


def test_all_pass_but_something_was_not_assessed_says_both(write: Any, made: Any) -> None:
    text = Page(write(all_pass(made)).folder / "report.html").text
    assert (
        "Nothing that could be assessed is out of spec on 2 lines, but 1 requirement was not"
        in text
    )
    assert "Nothing to run again." in text and "No line has positions" in text
    assert re.search(r"in spec where assessed\s+Nothing that could", text)
    assert "out of spec." not in text.split("Cautions")[0].replace("is out of spec.", "")


def test_nothing_assessable_is_no_pass(write: Any, made: Any) -> None:
    kinds = (made.LineKind("N", pings=50, unassessed=tuple(r.id for r in made.RULES)),)
    audit = write(kinds)
    page = Page(audit.folder / "report.html")
    assert audit.findings.verdict == "not assessed"
    assert "Nothing could be assessed. This is not a pass" in page.text
    assert "Cannot be said: nothing was assessed." in page.text
    assert "Nothing to run again" not in page.text
    classes = [a.get("class", "") for _, a in page.elements]
    assert "verdict in" not in classes and "verdict none" in classes


def test_all_fail_says_so(write: Any, made: Any) -> None:
    kinds = tuple(
        made.LineKind(f"F{n}", faults=(made.Fault("ping-interval", 0, 200),)) for n in range(3)
    )
    assert "All 3 lines are out of spec." in Page(write(kinds).folder / "report.html").text


@pytest.mark.parametrize("places", ["geographic", "grid", "none"])
def test_one_ping_makes_a_whole_report(write: Any, made: Any, places: str) -> None:
    audit = write((made.LineKind("one", pings=1, places=places),))
    text = Page(audit.folder / "report.html").text
    assert "1 line" in text
    assert "nan" not in re.findall(r' d="([^"]*)"', audit.html).__str__()


def test_no_drawing_holds_a_value_that_is_not_known(audit: Any, hostile: Any) -> None:
    for chosen in (audit, hostile):
        for drawing in re.findall(r'<svg class="figure".*?</svg>', chosen.html, re.DOTALL):
            assert not re.search(r'="[^"]*\b(nan|inf|None)\b[^"]*"', drawing)


def test_advisory_misses_are_neither_in_nor_out_of_spec(audit: Any) -> None:
    table = audit.html.split("<h3>Advisory: no verdict depends on these</h3>")[1].split("</table>")[
        0
    ]
    assert "verdict advice" in table and "verdict in" not in table and "verdict out" not in table


def test_sections_within_the_allowance_are_not_run_again(
    write: Any, made: Any, tmp_path: Path
) -> None:
    from dataclasses import replace

    results = made.results_of((made.LineKind("W", faults=(made.Fault("ping-interval", 5, 9),)),))
    findings = made.findings_of(results)
    allowed = replace(
        findings, sections=tuple(replace(s, within_allowance=True) for s in findings.sections)
    )
    assert Conclusions(findings).stretches and not Conclusions(allowed).stretches


def test_operators_list_takes_near_stretches_as_one_and_keeps_the_order(made: Any) -> None:
    faults = (made.Fault("ping-interval", 5, 9), made.Fault("range-resolution", 100, 120))
    far = (made.Fault("ping-interval", 5, 9), made.Fault("range-resolution", 700, 720))
    kinds = (made.LineKind("B", faults=faults), made.LineKind("A", pings=900, faults=far))
    stretches = Conclusions(made.findings_of(made.results_of(kinds))).stretches
    assert [(s.line, s.first_ping, s.last_ping) for s in stretches] == [
        ("B", 6, 121),
        ("A", 6, 10),
        ("A", 701, 721),
    ]
    assert {rule for rule, _ in stretches[0].settings} == {"ping-interval", "range-resolution"}


def test_times_of_the_operators_list_are_those_on_board(write: Any, made: Any) -> None:
    survey = {"name": "Z", "vessel_time_zone": "Asia/Tokyo", "day": "2024-05-01"}
    kinds = (made.LineKind("T", faults=(made.Fault("ping-interval", 0, 50),)),)
    page = Page(write(kinds, survey=survey).folder / "report.html")
    assert "Times of day in Asia/Tokyo" in page.text and "2024-05-01 19:00:00" in page.text
    assert "Only pings of 2024-05-01 (Asia/Tokyo)" in page.text


def test_a_line_that_failed_and_a_file_not_used_stand_on_the_first_screen(
    write: Any, made: Any
) -> None:
    from dataclasses import replace

    results = made.results_of((made.LineKind("A"), made.LineKind("B")))
    findings = made.findings_of(results)
    broken = replace(findings.lines[1], error="it broke", rules=(), verdict="not assessed")
    inputs = (replace(findings.inputs[0], error="is empty"), findings.inputs[1])
    changed = replace(findings, lines=(findings.lines[0], broken), inputs=inputs)
    report = Report(changed, [], "one", changed.to_dict())
    first = report.index().split('id="rerun"')[0]
    assert "1 file could not be used:" in first and "1 line could not be computed:" in first


def test_sections_of_no_single_line_have_their_place(made: Any, tmp_path: Path) -> None:
    from dataclasses import replace

    results = made.results_of((made.LineKind("A", faults=(made.Fault("ping-interval", 5, 9),)),))
    findings = made.findings_of(results)
    whole = replace(
        findings.sections[0], id="survey.1", line="A and B", reason="Swaths do not meet."
    )
    changed = replace(findings, sections=(*findings.sections, whole))
    path = tmp_path / "report.html"
    path.write_text(Report(changed, [], "one", changed.to_dict()).index(), encoding="utf-8")
    page = Page(path)
    links = {
        a["href"] for tag, a in page.elements if tag == "a" and a.get("href", "").startswith("#")
    }
    assert {link[1:] for link in links} <= set(page.ids)
    assert "Sections of several lines together" in page.text and "Swaths do not meet." in page.text


def test_a_thousand_lines_have_an_index_under_three_megabytes(made: Any, tmp_path: Path) -> None:
    """Every line fails by four rules: nearly the most that an index can hold. Artifacts of one line serve for all."""
    from dataclasses import replace

    from qa.report import write_line

    rules = ("ping-interval", "range-resolution", "footprint-growth", "pings-on-target")
    faults = tuple(made.Fault(r, 10 + 20 * n, 20 + 20 * n) for n, r in enumerate(rules))
    first = made.line_result(made.LineKind("LN0000", pings=400, faults=faults))
    artifact = write_line(first, tmp_path, 1)
    results, artifacts = [], []
    for n in range(1000):
        name = f"LN{n:04d}"
        sections = tuple(
            replace(s, line=name, id=f"{n + 1}.{k}") for k, s in enumerate(first.sections, start=1)
        )
        results.append(replace(first, finding=replace(first.finding, line=name), sections=sections))
        artifacts.append(replace(artifact, line=name, number=n + 1))
    findings = made.findings_of(results)
    report = Report(findings, artifacts, "auto", findings.to_dict())
    index = report.index()
    assert report.many and len(index.encode()) < 3_000_000
    assert "of 4\u202f000; all are in sections.csv" in index


def test_the_printed_summary_names_verdicts_and_worst_sections(audit: Any) -> None:
    told = summary(audit.findings)
    assert "3 of 5 lines are out of spec." in told
    met = told.partition("In spec (")[2].partition("\n\n")[0]
    for rule in audit.findings.rules:
        if rule.verdict == "in spec" and not rule.pings_missed:
            assert rule.id in met
        else:
            assert re.search(rf"{rule.id} +{rule.verdict}", told)
    assert told.index("SW05_sweep") < told.index("MR02_north"), "the worst stands first"
    assert "not for navigation" in told
    told.encode("cp1252")


def test_a_value_beside_its_limit_is_never_shown_as_equal() -> None:
    value, limit = numbers.against(0.300000001, 0.3, "m")
    assert value != limit and limit == "0.3 m"
