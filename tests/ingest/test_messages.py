"""Rows that repeat the last ping are told from pings, and pings are never taken for repeats."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from qa import audit
from qa.ingest import open_line, plan_logs
from qa.ingest.line_log import OpenedLine
from qa.model.survey_file import SurveyFile, load_survey_file

START = 1_780_000_000.0
SURVEY = """
[survey]
depth_from = "transducer"
[sonar]
kind = "single-beam"
frequency = "200 kHz"
pulse_length = "100 us"
pulse_form = "CW"
range_scale = "50 m"
[water]
sound_speed = "1500 m/s"
"""


def _csv(path: Path, columns: dict[str, Any]) -> Path:
    names = list(columns)
    rows = [",".join(names)]
    rows += [",".join(map(str, row)) for row in zip(*columns.values(), strict=True)]
    path.write_text("\n".join(rows) + "\n", encoding="utf-8")
    return path


def _line(path: Path, survey: SurveyFile | None = None) -> OpenedLine:
    survey = survey or SurveyFile()
    (task,) = plan_logs([path], survey).lines
    return open_line(task, survey)


def _pings(seed: int, count: int, digits: int = 2, noise: float = 0.1) -> dict[str, Any]:
    """A single-beam line over a slope, a ping every 0.5 s."""
    lottery = np.random.default_rng(seed)
    depth = 20.0 + 0.02 * np.arange(count) + lottery.normal(0.0, noise, count)
    return {
        "time": START + 0.5 * np.arange(count),
        "depth (m)": np.round(depth, digits),
        "latitude": np.round(38.5 + 1e-5 * np.arange(count), 7),
        "longitude": np.round(-9.25 + 1e-6 * np.arange(count), 7),
    }


def _no_two_alike(pings: dict[str, Any]) -> dict[str, Any]:
    """Without pings of the depth of the ping before: these would be one message after another."""
    chosen = np.append(True, np.diff(pings["depth (m)"]) != 0.0)
    found = {k: v[chosen] for k, v in pings.items()}
    return found | {"time": START + 0.5 * np.arange(int(chosen.sum()))}


def _at_message_rate(pings: dict[str, Any], rate: float) -> dict[str, Any]:
    """The same as a position sensor writes it, so many times a second; the first row of a ping is at its time."""
    end = pings["time"][-1] + 0.5
    time = np.unique(np.round(np.append(np.arange(START, end, 1 / rate), pings["time"]), 3))
    of = np.searchsorted(pings["time"], time, side="right") - 1
    moved = (time - START) * 2e-5
    return {
        "time": np.round(time, 3),
        "depth (m)": pings["depth (m)"][of],
        "latitude": np.round(38.5 + moved, 7),
        "longitude": np.round(-9.25 + 0.1 * moved, 7),
    }


@settings(max_examples=25, deadline=None)
@given(
    seed=st.integers(0, 10_000),
    count=st.integers(60, 200),
    rate=st.sampled_from([5.0, 10.0, 20.0]),
    noise=st.sampled_from([0.1, 0.5]),
)
def test_a_log_at_message_rate_has_the_pings_of_the_log_of_pings(
    seed: int, count: int, rate: float, noise: float, tmp_path_factory: pytest.TempPathFactory
) -> None:
    folder = tmp_path_factory.mktemp("logs")
    pings = _no_two_alike(_pings(seed, count, noise=noise))
    messages = _at_message_rate(pings, rate)
    plain = _line(_csv(folder / "pings.csv", pings))
    line = _line(_csv(folder / "messages.csv", messages))
    np.testing.assert_array_equal(line.ping_table().time, plain.ping_table().time)
    (batch,) = line.beam_batches(["depth"])
    np.testing.assert_array_equal(batch.columns["depth"], pings["depth (m)"])
    (account,) = line.accounts()
    assert account.balances
    assert account.rows_used == len(pings["time"])
    assert account.rows_out_of_scope == len(messages["time"]) - len(pings["time"])
    assert any("rows are messages here, not pings" in note for note in account.notes)


def test_the_findings_are_those_of_the_log_of_pings(tmp_path: Path) -> None:
    survey = tmp_path / "survey.toml"
    survey.write_text(SURVEY, encoding="utf-8")
    pings = _pings(3, 150)
    pings["depth (m)"][60:70] *= 4
    pings = _no_two_alike(pings)
    found = []
    for name, columns in (("a", pings), ("b", _at_message_rate(pings, 10.0))):
        columns = {k: v for k, v in columns.items() if "itude" not in k}
        (tmp_path / name).mkdir()
        findings = audit([_csv(tmp_path / name / "line.csv", columns)], survey=survey)
        found.append(
            [(r.id, r.verdict, r.worst, r.pings_assessed, r.pings_missed) for r in findings.rules]
        )
    assert found[0] == found[1]
    assert any(rule[1] == "out of spec" for rule in found[0])


def _quantised_flat() -> dict[str, Any]:
    pings = _pings(1, 400, digits=1, noise=0.03)
    pings["depth (m)"] = np.round(20.0 + np.random.default_rng(1).normal(0, 0.04, 400), 1)
    return pings


def _slope_to_a_digit() -> dict[str, Any]:
    pings = _pings(1, 400)
    pings["depth (m)"] = np.round(20.0 + 0.1 * (np.arange(400) // 4), 1)
    return pings


def _hangs() -> dict[str, Any]:
    pings = _pings(2, 400)
    pings["depth (m)"][100:300] = pings["depth (m)"][100]
    return pings


def _tank() -> dict[str, Any]:
    pings = _pings(2, 400)
    pings["depth (m)"][:] = 4.25
    pings["depth (m)"][np.random.default_rng(5).random(400) < 0.1] = 7.5
    return pings


def _constant() -> dict[str, Any]:
    return _pings(2, 400) | {"depth (m)": np.full(400, 4.25)}


def _side_scan() -> dict[str, Any]:
    pings = _pings(2, 400)
    del pings["depth (m)"]
    return pings | {"range_scale (m)": np.full(400, 75.0)}


@pytest.mark.parametrize(
    "log", [_quantised_flat, _slope_to_a_digit, _hangs, _tank, _constant, _side_scan, lambda: _pings(7, 400)]
)  # fmt: skip
def test_pings_that_repeat_a_value_are_pings(log: Any, tmp_path: Path) -> None:
    line = _line(_csv(tmp_path / "log.csv", log()))
    assert len(line.ping_table()) == 400
    (account,) = line.accounts()
    assert account.rows_used == 400
    told = any('rows = "messages"' in note for note in account.notes)
    # A slope that takes four pings for each digit of the depth looks like messages, and that is said.
    assert told == (log is _slope_to_a_digit)


@pytest.mark.parametrize("word", ["pings", "messages"])
def test_what_the_survey_file_says_holds(word: str, tmp_path: Path) -> None:
    survey = tmp_path / "survey.toml"
    survey.write_text(f'[columns]\nrows = "{word}"\n', encoding="utf-8")
    pings = _pings(4, 150)
    time = START + 0.125 * np.arange(600)
    log = {"time": time, "depth (m)": np.repeat(pings["depth (m)"], 4)}
    line = _line(_csv(tmp_path / "log.csv", log), load_survey_file(survey))
    same = int((np.diff(pings["depth (m)"]) == 0).sum())
    assert line.ping_table() is not None
    (account,) = line.accounts()
    assert account.rows_used == (600 if word == "pings" else 150 - same)


def test_a_value_that_stays_for_longer_than_usual_is_measured_anew(tmp_path: Path) -> None:
    pings = _pings(6, 200)
    pings["depth (m)"][80:120] = pings["depth (m)"][80]
    time = START + 0.125 * np.arange(800)
    log = {"time": time, "depth (m)": np.repeat(pings["depth (m)"], 4)}
    line = _line(_csv(tmp_path / "log.csv", log))
    (batch,) = line.beam_batches(["depth"])
    same = int((np.diff(np.delete(pings["depth (m)"], np.s_[81:120])) == 0).sum())
    assert len(batch.columns["depth"]) == 200 - same
    assert (batch.columns["depth"] == pings["depth (m)"][80]).sum() >= 40


def test_rows_of_lists_that_repeat_are_messages(tmp_path: Path) -> None:
    lottery = np.random.default_rng(9)
    depths = [lottery.normal(30.0, 0.2, 16).round(2).tolist() for _ in range(50)]
    time = [round(START + 0.1 * i, 3) for i in range(250)]
    table = pa.table(
        {
            "time": pa.array((np.array(time) * 1e6).astype(np.int64), pa.timestamp("us", "UTC")),
            "depth": [depths[i // 5] for i in range(250)],
            "beam_angle": [np.linspace(-60, 60, 16).tolist()] * 250,
        }
    )
    pq.write_table(table, tmp_path / "log.parquet")
    line = _line(tmp_path / "log.parquet")
    assert len(line.ping_table()) == 50
    (account,) = line.accounts()
    assert account.balances and account.rows_out_of_scope == 200
    (batch,) = line.beam_batches(["depth"])
    assert batch.columns["depth"].tolist() == [d for depth in depths for d in depth]
