"""How long a browser takes over the index of 1,000 lines, beside an empty page: medians of several loads.

python tests/bench/bench_report.py [--lines 1000] [--rounds 5]
"""

from __future__ import annotations

import argparse
import importlib.util
import shutil
import statistics
import sys
import tempfile
from dataclasses import replace
from pathlib import Path
from typing import Any

ROOT = Path(__file__).resolve().parents[2]
sys.path.insert(0, str(ROOT))

from qa.report import write_line  # noqa: E402
from qa.report.pages import Report  # noqa: E402


def made_up() -> Any:
    """The module of made-up audits that the report's tests use."""
    spec = importlib.util.spec_from_file_location("made_up", ROOT / "tests/report/made_up.py")
    assert spec is not None and spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    sys.modules["made_up"] = module
    spec.loader.exec_module(module)
    return module


def index_page(folder: Path, lines: int) -> Path:
    made = made_up()
    fault = made.Fault("ping-interval", 5, 60)
    first = made.line_result(made.LineKind("A", pings=400, faults=(fault,)))
    artifact = write_line(first, folder, 1)
    results, artifacts = [], []
    for n in range(lines):
        name = f"LN{n:04d}"
        section = replace(first.sections[0], line=name, id=f"{n + 1}.1")
        finding = replace(first.finding, line=name)
        results.append(replace(first, finding=finding, sections=(section,)))
        artifacts.append(replace(artifact, line=name, number=n + 1))
    findings = made.findings_of(results)
    path = folder / "report.html"
    page = Report(findings, artifacts, "auto", findings.to_dict()).index()
    path.write_text(page, encoding="utf-8")
    return path


def main() -> int:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0] if __doc__ else None)
    parser.add_argument("--lines", type=int, default=1000)
    parser.add_argument("--rounds", type=int, default=5)
    chosen = parser.parse_args()
    from playwright.sync_api import sync_playwright

    with tempfile.TemporaryDirectory() as folder, sync_playwright() as playwright:
        page_path = index_page(Path(folder), chosen.lines)
        empty = Path(folder) / "empty.html"
        empty.write_text("<!doctype html><title>empty</title>", encoding="utf-8")
        browser = playwright.chromium.launch(
            executable_path=shutil.which("chromium"), args=["--no-sandbox"]
        )
        taken: dict[str, list[float]] = {"index": [], "empty": []}
        for _ in range(chosen.rounds):
            for name, path in (("index", page_path), ("empty", empty)):
                page = browser.new_page(viewport={"width": 1280, "height": 900})
                page.goto(path.as_uri())
                entry = "performance.getEntriesByType('navigation')[0].domComplete"
                taken[name].append(float(page.evaluate(entry)))
                page.close()
        browser.close()
        size = page_path.stat().st_size / 1e6
    for name, times in taken.items():
        print(
            f"{name:6} complete after {statistics.median(times):7.0f} ms (median of {len(times)})"
        )
    print(f"index of {chosen.lines} lines: {size:.2f} MB")
    return 0


if __name__ == "__main__":
    sys.exit(main())
