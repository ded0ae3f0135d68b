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


@pytest.fixture(scope="session", autouse=True)
def kept_of_this_session(tmp_path_factory: pytest.TempPathFactory) -> Generator[None, None, None]:
    """No test takes lines from a folder that another run, or the user, has filled, nor leaves any there."""
    with pytest.MonkeyPatch.context() as patch:
        patch.setenv("PINGWORTHY_KEPT", str(tmp_path_factory.mktemp("kept")))
        yield
