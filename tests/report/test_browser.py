"""The report in a real browser: silent, usable, readable at any width and in print."""

from __future__ import annotations

import csv
import json
import re
import shutil
import subprocess
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import pytest

pytestmark = pytest.mark.browser


@contextmanager
def opened(
    browser: Any, path: Path, width: int = 1280, scheme: str = "light", **options: Any
) -> Iterator[Any]:
    """A page that may say nothing on its console and ask for nothing but files of the report."""
    context = browser.new_context(
        viewport={"width": width, "height": 900}, color_scheme=scheme, **options
    )
    page = context.new_page()
    said: list[str] = []
    asked: list[str] = []
    page.on("console", lambda message: said.append(message.text))
    page.on("pageerror", lambda error: said.append(str(error)))
    page.on("request", lambda request: asked.append(request.url))
    page.goto(path.as_uri())
    yield page
    context.close()
    assert said == []
    assert [url for url in asked if not url.startswith((path.parent.as_uri(), "blob:"))] == []
    assert len([url for url in asked if url.partition("#")[0] == path.as_uri()]) >= 1


@pytest.mark.parametrize("scheme", ["light", "dark"])
@pytest.mark.parametrize("width", [1280, 390])
def test_opens_silently_and_fits_the_width(
    browser: Any, audit: Any, width: int, scheme: str
) -> None:
    with opened(browser, audit.folder / "report.html", width, scheme) as page:
        assert page.evaluate("document.documentElement.scrollWidth") <= width
        assert page.locator("h2.headline").inner_text().startswith("out of spec")
        light, ink = page.evaluate(
            "[getComputedStyle(document.body).backgroundColor, getComputedStyle(document.body).color]"
        )
        shade = [sum(map(int, re.findall(r"\d+", c)[:3])) for c in (light, ink)]
        assert (shade[0] > shade[1]) == (scheme == "light")


def test_first_screen_holds_what_one_must_know(browser: Any, audit: Any) -> None:
    with opened(browser, audit.folder / "report.html") as page:
        for text in ("Run again", "Main causes", "Not assessed", "Cautions"):
            box = page.locator("#first h3", has_text=text).bounding_box()
            assert box["y"] + box["height"] < 900, text


def column(page: Any, n: int) -> list[str]:
    rows = page.locator("#table-sections tbody tr:visible")
    return [rows.nth(i).locator("th,td").nth(n).inner_text().strip() for i in range(rows.count())]


def test_sections_sort_by_number_and_by_text(browser: Any, audit: Any) -> None:
    with opened(browser, audit.folder / "report.html") as page:
        heads = page.locator("#table-sections thead th button")
        names = [heads.nth(i).inner_text() for i in range(heads.count())]
        missed = names.index("Missed")
        heads.nth(missed).click()
        assert column(page, missed) == sorted(column(page, missed), key=int)
        heads.nth(missed).click()
        assert column(page, missed) == sorted(column(page, missed), key=int, reverse=True)
        assert page.locator("#table-sections th[aria-sort=descending]").count() == 1
        line = names.index("Line")
        heads.nth(line).focus()
        page.keyboard.press("Enter")
        assert column(page, line) == sorted(column(page, line), key=str.lower)


def test_sections_filter_by_text_and_by_rule(browser: Any, audit: Any) -> None:
    with opened(browser, audit.folder / "report.html") as page:
        tools = page.locator(".tools[data-for=table-sections]")
        tools.locator("input").fill("mr02 PINGS")
        assert column(page, 1) == ["MR02_north"] and "1 of 4 shown" in tools.inner_text()
        tools.locator("input").fill("")
        tools.locator("select").select_option("Range resolution against target size")
        assert len(column(page, 1)) == 1
        tools.locator("select").select_option("")
        assert len(column(page, 1)) == 4


def test_a_clause_leads_to_its_own_sections(browser: Any, write: Any, made: Any) -> None:
    faults = tuple(made.Fault("ping-interval", 10 + 20 * n, 20 + 20 * n) for n in range(5))
    kinds = (made.LineKind("A", faults=(*faults, made.Fault("range-resolution", 5, 9))),)
    with opened(browser, write(kinds).folder / "report.html") as page:
        assert len(column(page, 1)) == 6
        page.get_by_role("link", name="5 sections").click()
        assert column(page, 2) == ["Ping interval against listening time"] * 5


def test_a_section_leads_to_its_numbers_and_its_figure(browser: Any, audit: Any) -> None:
    with opened(browser, audit.folder / "report.html") as page:
        page.locator("#table-sections tbody a").first.click()
        target = page.locator("article:target")
        assert target.count() == 1 and target.locator("table").is_visible()
        assert target.bounding_box()["y"] < 900
        target.get_by_role("link").click()
        assert page.locator("figure:target svg.figure").bounding_box()["y"] < 900


def test_an_advisory_section_is_opened_by_its_link(browser: Any, audit: Any) -> None:
    with opened(browser, audit.folder / "report.html") as page:
        page.locator("#table-advice tbody a").first.click()
        assert page.locator("article:target").is_visible()


def test_lines_on_their_own_pages(browser: Any, audit_pages: Any) -> None:
    with opened(browser, audit_pages.folder / "report.html") as page:
        page.locator("#table-sections tbody a").first.click()
        page.wait_for_url("**/lines/*.html#*")
        assert page.locator("article:target").is_visible()
        page.get_by_role("link", name="Back to the survey").click()
        page.wait_for_url("**/report.html")


def test_figure_data_comes_as_csv(browser: Any, audit: Any, tmp_path: Path) -> None:
    with opened(browser, audit.folder / "report.html") as page:
        for kind in ("panels", "margins", "growth", "swath", "map"):
            button = page.locator(f"figure.kind-{kind} button.csv").first
            with page.expect_download() as download:
                button.click()
            path = tmp_path / f"{kind}.csv"
            download.value.save_as(path)
            with path.open(encoding="utf-8", newline="") as stream:
                rows = list(csv.reader(stream))
            assert len(rows) > 10 and len({len(r) for r in rows}) == 1
        panels = (tmp_path / "panels.csv").read_text(encoding="utf-8").splitlines()
        assert panels[0] == "panel,series,unit,time_utc,value"
        assert panels[1].startswith("Depth,Depth,m,2024-05-01T10:00:00.000Z,")
        first = float(audit.results[0].columns["depth"][0])
        assert float(panels[1].rpartition(",")[2]) == pytest.approx(first, rel=1e-5)


def test_works_without_scripts(browser: Any, audit: Any) -> None:
    with opened(browser, audit.folder / "report.html", java_script_enabled=False) as page:
        assert page.locator("#table-sections tbody tr").count() == 4
        assert page.locator(".tools:visible, button:visible").count() == 0


def test_hostile_names_run_nothing_and_break_nothing(browser: Any, write: Any, made: Any) -> None:
    names = (
        "</script><script>window.broken=1</script>",
        '"><img src=x onerror=window.broken=1>',
        "\u202eesrever",
        "W" * 5000,
        "😀" * 200,
    )
    kinds = tuple(
        made.LineKind(n, pings=40, channels=(n, "b"), faults=(made.Fault("ping-interval", 5, 20),))
        for n in names
    )
    folder = write(kinds, name="W" * 5000).folder
    for width in (1280, 390):
        with opened(browser, folder / "report.html", width) as page:
            assert page.evaluate("window.broken") is None
            assert page.evaluate("document.documentElement.scrollWidth") <= width


@pytest.mark.parametrize("scheme", ["light", "dark"])
@pytest.mark.parametrize("which", ["one", "index", "line"])
def test_axe_finds_nothing_serious(
    browser: Any, axe: str, audit: Any, audit_pages: Any, scheme: str, which: str
) -> None:
    path = {
        "one": audit.folder / "report.html",
        "index": audit_pages.folder / "report.html",
        "line": audit_pages.folder / "lines" / "0003.html",
    }[which]
    with opened(browser, path, scheme=scheme) as page:
        page.evaluate("document.querySelectorAll('details').forEach((d) => { d.open = true; })")
        page.evaluate(axe)
        found = page.evaluate("axe.run()")
        assert len(found["passes"]) > 10, "the checker did not run"
        told = [
            (v["id"], v["impact"], [n["html"][:160] for n in v["nodes"][:3]])
            for v in found["violations"]
            if v["impact"] in ("serious", "critical")
        ]
        assert told == [], json.dumps(told, indent=1)


def test_the_comparison_opens_silently_fits_and_is_accessible(
    browser: Any, axe: str, audit: Any, write: Any, made: Any, tmp_path: Path
) -> None:
    from qa.report.compare import compare_audits

    compare_audits(
        audit.folder, write((made.LineKind("AGAIN"), made.LineKind("TWICE"))).folder, tmp_path
    )
    for width in (1280, 390):
        with opened(browser, tmp_path / "compare.html", width) as page:
            assert page.evaluate("document.documentElement.scrollWidth") <= width
            page.evaluate(axe)
            found = page.evaluate("axe.run()")["violations"]
            assert [v["id"] for v in found if v["impact"] in ("serious", "critical")] == []


def pdf_pages(path: Path) -> list[tuple[str, bool]]:
    """Each page's text, and whether it lies on its side."""
    text = subprocess.run(
        ["pdftotext", "-layout", str(path), "-"], capture_output=True, check=True, encoding="utf-8"
    ).stdout
    sizes = subprocess.run(
        ["pdfinfo", "-f", "1", "-l", "999", str(path)],
        capture_output=True,
        check=True,
        encoding="utf-8",
    ).stdout
    wide = [
        float(w) > float(h) for w, h in re.findall(r"Page +\d+ size: +([\d.]+) x ([\d.]+)", sizes)
    ]
    return list(zip(text.split("\f"), wide, strict=False))


def printed(page: Any, folder: Path) -> list[tuple[str, bool]]:
    if shutil.which("pdftotext") is None:
        pytest.skip("pdftotext is not installed")
    path = folder / "printed.pdf"
    page.pdf(path=str(path), prefer_css_page_size=True)
    return pdf_pages(path)


def test_print_gives_each_reader_a_page(browser: Any, audit: Any, tmp_path: Path) -> None:
    with opened(browser, audit.folder / "report.html") as page:
        pages = printed(page, tmp_path)
    operator = [n for n, (text, _) in enumerate(pages) if "Settings to use" in text]
    assert len(operator) == 1, "the operator's list is one page"
    text, wide = pages[operator[0]]
    assert wide and text.lstrip().startswith("Lines to run again") and "Clauses" not in text
    assert "Main causes" in pages[0][0] and "Cautions" in pages[0][0], (
        "the first page holds the first screen"
    )
    signed = [text for text, _ in pages if "Signature" in text]
    assert len(signed) == 1 and signed[0].lstrip().startswith("Sign-off")
    for wanted in (
        "efef",
        "abab",
        "cdcd",
        "sound_speed = 1500 m/s",
        "Remarks",
        "not be used for navigation",
    ):
        assert wanted in " ".join(signed[0].split())


def test_the_operators_list_prints_alone_on_one_page(
    browser: Any, write: Any, made: Any, tmp_path: Path
) -> None:
    faults = tuple(
        made.Fault(r, 10 + 20 * n, 20 + 20 * n)
        for n, r in enumerate(("ping-interval", "range-resolution"))
    )
    kinds = tuple(
        made.LineKind(f"LN{n:02d}_outer_roads", pings=120, faults=faults) for n in range(14)
    )
    with opened(browser, write(kinds).folder / "report.html") as page:
        page.evaluate("document.documentElement.dataset.print = 'rerun'")
        pages = printed(page, tmp_path)
    kept = [text for text, _ in pages if text.strip()]
    assert len(kept) == 1
    assert all(f"LN{n:02d}_outer_roads" in kept[0] for n in range(14)) and "54°30" in kept[0]


def test_many_causes_a_line_still_fit_the_operators_page(
    browser: Any, write: Any, made: Any, tmp_path: Path
) -> None:
    rules = ("ping-interval", "range-resolution", "footprint-growth", "pings-on-target")
    faults = tuple(made.Fault(r, 10 + 20 * n, 25 + 20 * n) for n, r in enumerate(rules))
    remedy = "Keep to 4.25 kt over the ground or slower at this ping rate, or ping at 5.97 Hz or faster at this speed."
    for lines in (8, 12, 16):
        kinds = tuple(
            made.LineKind(f"LN{n:02d}", pings=120, faults=faults, texts={"remedy": remedy})
            for n in range(lines)
        )
        with opened(browser, write(kinds).folder / "report.html") as page:
            page.evaluate("document.documentElement.dataset.print = 'rerun'")
            kept = [text for text, _ in printed(page, tmp_path) if text.strip()]
        assert len(kept) == 1, lines
        assert kept[0].count("Keep to 4.25 kt") >= lines


def test_a_thousand_lines_are_listed_and_found(browser: Any, made: Any, tmp_path: Path) -> None:
    from dataclasses import replace

    from qa.report import write_line
    from qa.report.pages import Report

    first = made.line_result(
        made.LineKind("A", pings=400, faults=(made.Fault("ping-interval", 5, 60),))
    )
    artifact = write_line(first, tmp_path, 1)
    results = [
        replace(
            first,
            finding=replace(first.finding, line=f"LN{n:04d}"),
            sections=(replace(first.sections[0], line=f"LN{n:04d}", id=f"{n + 1}.1"),),
        )
        for n in range(1000)
    ]
    artifacts = [replace(artifact, line=f"LN{n:04d}", number=n + 1) for n in range(1000)]
    findings = made.findings_of(results)
    path = tmp_path / "report.html"
    path.write_text(
        Report(findings, artifacts, "auto", findings.to_dict()).index(), encoding="utf-8"
    )
    with opened(browser, path) as page:
        # How long it takes is for the benchmark of the report.
        assert page.locator("#table-lines tbody tr").count() == 1000
        page.locator(".tools[data-for=table-lines] input").fill("LN0999")
        assert page.locator("#table-lines tbody tr:visible").count() == 1
