"""What all tests share."""

from __future__ import annotations

import os
from collections.abc import Generator
from typing import Any

import pytest


@pytest.hookimpl(hookwrapper=True)
def pytest_runtest_makereport(item: pytest.Item) -> Generator[None, Any, None]:
    """Where a browser is promised, a browser test that skips has failed."""
    outcome = yield
    report = outcome.get_result()
    promised = os.environ.get("PINGWORTHY_REQUIRE_BROWSER") == "1"
    if promised and report.skipped and item.get_closest_marker("browser"):
        report.outcome = "failed"
        report.longrepr = f"skipped though a browser is promised: {report.longrepr}"
