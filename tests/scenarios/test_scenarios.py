"""The audit against logs whose faults are known: the shipped sample, and lines drawn at random."""

from __future__ import annotations

import importlib.util
import subprocess
import sys
from pathlib import Path
from types import ModuleType

import pytest

HERE = Path(__file__).resolve().parent
SAMPLE = HERE.parents[1] / "sample_logs"


def _load(name: str) -> ModuleType:
    spec = importlib.util.spec_from_file_location(f"scenarios_{name}", HERE / f"{name}.py")
    assert spec is not None and spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    sys.modules[spec.name] = module
    spec.loader.exec_module(module)
    return module


def test_the_sample_is_as_its_truth_says() -> None:
    run = subprocess.run(
        [sys.executable, str(SAMPLE / "make.py"), "--check"], capture_output=True, text=True
    )
    assert run.returncode == 0, run.stdout + run.stderr
    assert "all as planted" in run.stdout


def test_the_sample_is_made_the_same_each_time(tmp_path: Path) -> None:
    run = subprocess.run(
        [sys.executable, str(SAMPLE / "make.py"), "--out", str(tmp_path)],
        capture_output=True,
        text=True,
    )
    assert run.returncode == 0, run.stdout + run.stderr
    made = sorted(p.relative_to(tmp_path) for p in tmp_path.rglob("*") if p.is_file())
    assert len(made) == 21
    for name in made:
        if name.suffix == ".parquet":
            # another version of the library may compress otherwise: the content counts
            import pyarrow.parquet as pq

            assert pq.read_table(tmp_path / name).equals(pq.read_table(SAMPLE / name)), name
        else:
            made_text = (tmp_path / name).read_text(encoding="utf-8")
            assert made_text == (SAMPLE / name).read_text(encoding="utf-8"), name


def test_every_fault_of_the_sample_is_found_and_nothing_else() -> None:
    result = _load("score").score(SAMPLE)
    assert sum(row.found for row in result.rows.values()) == 43
    assert result.amiss == 0, "\n".join(result.complaints)


@pytest.mark.parametrize("seed", [11, 12])
def test_faults_of_drawn_lines_are_found_and_nothing_else(tmp_path: Path, seed: int) -> None:
    _load("generate").generate(tmp_path, 20, seed)
    result = _load("score").score(tmp_path)
    assert sum(row.found for row in result.rows.values()) > 10
    assert result.amiss == 0, "\n".join(result.complaints)
