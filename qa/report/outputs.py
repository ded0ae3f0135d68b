"""All files of an audit, written into one folder."""

from __future__ import annotations

import shutil
from collections.abc import Callable, Iterable, Sequence
from concurrent.futures import ThreadPoolExecutor
from functools import partial
from pathlib import Path
from typing import Literal

from qa.model.findings import Findings
from qa.model.json_text import json_text
from qa.model.log import RejectedRow
from qa.report import ping_table, tables
from qa.report.files import write_text
from qa.report.lines import LineArtifacts
from qa.report.pages import Report

Pages = Literal["auto", "one", "many"]
PutPage = Callable[[Path, bytes, Callable[[], str]], None]
PARTS = ("figures", "pings")


def write_outputs(
    findings: Findings,
    artifacts: Sequence[LineArtifacts],
    rejected: Iterable[RejectedRow],
    folder: Path,
    pages: Pages = "auto",
    put_page: PutPage | None = None,
) -> Path:
    """Write the report and the files beside it.

    Parameters
    ----------
    findings : Findings
        What the audit found.
    artifacts : sequence of LineArtifacts
        What :func:`qa.report.lines.write_line` returned, of every line that could be computed.
    rejected : iterable of RejectedRow
        Rows that could not be used.
    folder : Path
        Where to; the lines' own parts lie in it, and are gone afterwards.
    pages : "auto", "one" or "many"
        Whether lines stand in the report or on pages of their own; by their number if "auto".
    put_page : callable, optional
        Puts a line's page to a path: takes the path, all that the page is made from, and what makes it.

    Returns
    -------
    Path
        The report.
    """
    folder = Path(folder)
    artifacts = sorted(artifacts, key=lambda a: a.number)
    data = findings.to_dict()
    write_text(folder / "findings.json", json_text(data))
    tables.write_sections(findings, folder / "sections.csv")
    tables.write_rejected(rejected, folder / "rejected.csv")
    places = {key: along for a in artifacts for key, along in a.places.items()}
    tables.write_rerun(findings, places, folder / "rerun.geojson")
    with ThreadPoolExecutor(1) as pool:
        # Written outside of Python's own lock, for the most part: pages are made meanwhile.
        pings = [a.pings for a in artifacts]
        joined = pool.submit(ping_table.join_parts, pings, folder / "pings.parquet")
        path = _write_pages(Report(findings, artifacts, pages, data), folder, put_page)
        joined.result()
    for part in PARTS:
        shutil.rmtree(folder / part, ignore_errors=True)
    return path


def _write_pages(report: Report, folder: Path, put_page: PutPage | None) -> Path:
    path = folder / "report.html"
    write_text(path, report.index())
    if report.many:
        (folder / "lines").mkdir(exist_ok=True)
        for n in range(len(report.findings.lines)):
            page = folder / "lines" / f"{n + 1:04d}.html"
            if put_page is None:
                write_text(page, report.line(n))
            else:
                put_page(page, report.line_inputs(n), partial(report.line, n))
    return path
