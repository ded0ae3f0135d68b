"""What DEVELOPERS.md shows is done here to the letter: its files written, its commands run, its rules found assessed."""

from __future__ import annotations

import json
import re
import shlex
import shutil
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from typer.testing import CliRunner, Result

import qa
from qa.cli import app
from qa.engine.user_quantities import use_python

ROOT = Path(__file__).resolve().parent.parent
LOG = ROOT / "sample_logs" / "multibeam" / "VH103_approach.parquet"
SECTIONS = ("Add a rule: one table", "Add a quantity: one function")


def blocks() -> list[tuple[str, str]]:
    """Language and text of the fenced blocks of the two sections, in order."""
    text = (ROOT / "DEVELOPERS.md").read_text(encoding="utf-8")
    found = []
    for title in SECTIONS:
        section = text.split(f"## {title}\n")[1].split("\n## ")[0]
        found += re.findall(r"^```(\w*)\n(.*?)^```$", section, re.MULTILINE | re.DOTALL)
    return found


@pytest.fixture(scope="module")
def done(tmp_path_factory: pytest.TempPathFactory) -> dict[str, Any]:
    """Every block taken in order, as a reader would: a file is written, a command is run."""
    folder = tmp_path_factory.mktemp("house")
    (folder / "logs").mkdir()
    shutil.copy(LOG, folder / "logs")
    results: dict[str, Result] = {}
    with pytest.MonkeyPatch.context() as patch:
        patch.chdir(folder)
        for language, text in blocks():
            if language:
                name = re.match(r"# ([\w.-]+)(, continued)?\n", text)
                assert name, "a block that is a file says which in its first line"
                path = folder / name[1]
                before = path.read_text(encoding="utf-8") + "\n" if name[2] else ""
                path.write_text(before + text, encoding="utf-8")
                continue
            for command in text.splitlines():
                program, *arguments = shlex.split(command)
                assert program == "pingworthy"
                results[command] = CliRunner().invoke(app, arguments, env={"COLUMNS": "100"})
    use_python(None)
    return {"folder": folder, "results": results}


def findings(done: dict[str, Any], out: str) -> dict[str, Any]:
    text = (done["folder"] / out / "findings.json").read_text(encoding="utf-8")
    return {rule["id"]: rule for rule in json.loads(text)["rules"]}


def test_every_command_runs(done: dict[str, Any]) -> None:
    assert len(done["results"]) == 6
    for command, result in done["results"].items():
        allowed = (0, 1) if " audit " in command else (0,)
        assert result.exit_code in allowed, (command, result.output, result.exception)


def test_the_rule_is_explained_and_worked_out(done: dict[str, Any]) -> None:
    text = next(r.output for c, r in done["results"].items() if "explain ping-rate" in c)
    assert "1 / interval_per_ping >= slowest_rate" in text
    assert "3.333 Hz against 4 Hz: missed." in text


def test_the_new_rule_is_assessed_on_every_ping(done: dict[str, Any]) -> None:
    rule = findings(done, "rate-audit")["ping-rate"]
    log = qa.read_log(LOG)
    numbers = np.asarray(log["ping"])
    first = np.concatenate([[True], numbers[1:] != numbers[:-1]])
    time = np.asarray(log["time"].cast("int64"))[first] / 1e9
    rate = 1.0 / np.diff(time)
    assert rule["pings_assessed"] == len(rate)
    assert rule["pings_missed"] == np.count_nonzero(rate < 4.0 * (1 - 1e-9))


def test_the_new_quantity_is_explained_and_worked_out(done: dict[str, Any]) -> None:
    text = next(r.output for c, r in done["results"].items() if "explain grazing_angle" in c)
    assert "Angle between a beam and a flat seabed." in text
    assert "With these values\n  30°" in text


def test_the_new_quantity_serves_the_rule_at_every_beam(done: dict[str, Any]) -> None:
    rule = findings(done, "angle-audit")["grazing-angle"]
    log = qa.read_log(LOG)
    angle = 90.0 - np.abs(np.asarray(log["beam_angle"], dtype=float))
    accepted = (
        np.asarray(log["accepted"]) if "accepted" in log.column_names else np.ones(len(angle))
    )
    low = np.unique(np.asarray(log["ping"])[(angle < 50.0) & (accepted != 0)])
    assert rule["pings_missed"] == len(low)
    assert rule["worst"] == pytest.approx(float(angle[accepted != 0].min()))
