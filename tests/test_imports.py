"""The arrows between the packages are those of the design, and the command starts light."""

from __future__ import annotations

import ast
import subprocess
import sys
from pathlib import Path

import pytest

import qa

PACKAGE = Path(qa.__file__).parent
EVERYTHING = {
    "model",
    "ingest",
    "physics",
    "engine",
    "survey",
    "report",
    "job",
    "cli",
    "rules",
    "survey_start",
}
ALLOWED = {
    "model": set(),
    "ingest": {"model"},
    "physics": set(),
    "engine": {"model", "physics"},
    "survey": {"model"},
    "report": {"model"},
    "job": EVERYTHING,
    "survey_start": {"model", "ingest", "engine"},
    "cli": EVERYTHING,
}
MODULES = sorted(p for p in PACKAGE.rglob("*.py") if "sample_logs" not in p.parts)


def imported_parts(path: Path) -> set[str]:
    """Parts of the package that a module imports, wherever in it the import stands."""
    found = set()
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.Import):
            names = [alias.name for alias in node.names]
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, f"{path}: imports are absolute"
            names = [f"{node.module}.{alias.name}" for alias in node.names]
        else:
            continue
        found |= {name.split(".")[1] for name in names if name.startswith("qa.")}
    return found


@pytest.mark.parametrize("path", MODULES, ids=lambda p: p.relative_to(PACKAGE).as_posix())
def test_only_the_arrows_of_the_design(path: Path) -> None:
    part = path.relative_to(PACKAGE).parts[0].removesuffix(".py")
    if part == "__init__":
        return
    others = {name for name in imported_parts(path) if name in EVERYTHING} - {part}
    allowed = ALLOWED.get(part, EVERYTHING)
    assert others <= allowed, f"{part} may not import {sorted(others - allowed)}"


def test_importing_the_package_loads_nothing_heavy() -> None:
    code = "import sys, qa; print([m for m in ('numpy', 'pyarrow', 'matplotlib', 'scipy', 'pint') if m in sys.modules])"
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "[]"
