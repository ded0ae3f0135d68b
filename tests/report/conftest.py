"""Made-up audits, written once, and a real browser where there is one."""

from __future__ import annotations

import importlib.util
import os
import shutil
import sys
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from types import ModuleType
from typing import Any

import pytest


def _loaded() -> ModuleType:
    name = "pingworthy_made_up"
    if name not in sys.modules:
        spec = importlib.util.spec_from_file_location(name, Path(__file__).parent / "made_up.py")
        assert spec is not None and spec.loader is not None
        module = importlib.util.module_from_spec(spec)
        sys.modules[name] = module
        spec.loader.exec_module(module)
    return sys.modules[name]


@dataclass(frozen=True)
class Written:
    """An audit's outputs and what they were made from."""

    folder: Path
    findings: Any
    results: Any
    artifacts: Any

    @property
    def html(self) -> str:
        return (self.folder / "report.html").read_text(encoding="utf-8")

    @property
    def pages(self) -> list[Path]:
        return [self.folder / "report.html", *sorted((self.folder / "lines").glob("*.html"))]


@pytest.fixture(scope="session")
def made() -> ModuleType:
    """The factory."""
    return _loaded()


@pytest.fixture(scope="session")
def write(made: ModuleType, tmp_path_factory: pytest.TempPathFactory) -> Any:
    """Writes an audit into a folder of its own."""

    def written(*arguments: Any, **changed: Any) -> Written:
        folder = tmp_path_factory.mktemp("audit")
        return Written(folder, *made.written(folder, *arguments, **changed))

    return written


@pytest.fixture(scope="session")
def audit(write: Any) -> Written:
    """Five lines with faults of several kinds."""
    return write()


@pytest.fixture(scope="session")
def audit_pages(write: Any, made: ModuleType) -> Written:
    """The same, each line on a page of its own."""
    return write(made.SOME_FAULTS, "many")


def chromium() -> str | None:
    """Where a Chromium is."""
    for name in ("chromium", "chromium-browser", "google-chrome"):
        if found := shutil.which(name):
            return found
    return None


@pytest.fixture(scope="session")
def browser() -> Iterator[Any]:
    """A Chromium that asks the network for nothing."""
    playwright = pytest.importorskip("playwright.sync_api", reason="playwright is not installed")
    path = chromium()
    if path is None:
        pytest.skip("no Chromium found")
    with playwright.sync_playwright() as run:
        arguments = [
            *("--no-sandbox", "--headless", "--disable-gpu", "--disable-background-networking"),
            *("--disable-component-update", "--disable-sync", "--no-first-run"),
        ]
        opened = run.chromium.launch(executable_path=path, args=arguments)
        yield opened
        opened.close()


@pytest.fixture(scope="session")
def axe() -> str:
    """The accessibility checker's script."""
    if named := os.environ.get("PINGWORTHY_AXE"):
        return Path(named).read_text(encoding="utf-8")
    found = importlib.util.find_spec("axe_playwright_python")
    if found is None or found.origin is None:
        pytest.skip("axe-playwright-python is not installed")
    scripts = sorted(Path(found.origin).parent.rglob("axe.min.js"))
    assert scripts, "the package carries no axe.min.js"
    return scripts[0].read_text(encoding="utf-8")
