"""No result depends on how beams are cut into batches, nor on whether all pings have as many."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
import pytest

from qa.engine import beam_rules, stages
from qa.engine.reducers import Groups

LIMITS = {"target_size": "0.6 m", "hits_required": 3, "beams_required": 1, "least_swath": "30 m"}


def _line(swath: Any, jittered: bool, marred: str = "missing and rejected") -> Any:
    rng = np.random.default_rng(3)
    log = swath(240, interval=0.06, heading=rng.normal(0, 0.1, 240), roll=rng.normal(0, 2.0, 240))
    shape = log.beams["depth"].shape
    log.beams["depth"] = log.beams["depth"] + rng.normal(0.0, 0.3, shape)
    log.beams["depth"][60:90] *= 1.6
    if "missing" in marred:
        log.beams["depth"][rng.random(shape) < 0.02] = np.nan
    log.beams["accepted"] = np.ones(shape)
    if "rejected" in marred:
        log.beams["accepted"] = (rng.random(shape) > 0.05).astype(float)
        log.beams["accepted"][120:130] = 0.0
    log.beams["two_way_time"] = 2 * log.beams["depth"] / 1480.0
    if jittered:
        log.beams["beam_angle"] = log.beams["beam_angle"] + rng.normal(0, 0.4, (shape[0], 1))
    return log


def _same(one: Any, other: Any) -> None:
    assert one.finding == other.finding
    assert one.sections == other.sections
    assert set(one.columns) == set(other.columns)
    for key, values in one.columns.items():
        np.testing.assert_array_equal(values, other.columns[key], err_msg=key)
    for rule, series in one.rules.items():
        for name in ("status", "value", "limit", "margin"):
            ours, theirs = getattr(series, name), getattr(other.rules[rule], name)
            np.testing.assert_array_equal(ours, theirs, err_msg=f"{rule} {name}")
    assert len(one.beam_misses) == len(other.beam_misses) > 0
    for ours, theirs in zip(one.beam_misses, other.beam_misses, strict=True):
        assert (ours.rule, ours.total) == (theirs.rule, theirs.total)
        np.testing.assert_array_equal(ours.index, theirs.index)
        np.testing.assert_array_equal(ours.beam_angle, theirs.beam_angle)


@pytest.mark.parametrize("marred", ["", "missing and rejected"])
@pytest.mark.parametrize("jittered", [False, True])
@pytest.mark.parametrize("rows", [101, 1234, 9999])
def test_any_size_of_batch_gives_the_same(
    run: Any, swath: Any, multibeam: dict[str, Any], jittered: bool, marred: str, rows: int
) -> None:
    log = _line(swath, jittered, marred)
    whole = run(log, multibeam, LIMITS).result
    assert len(whole.sections) > 5
    _same(run(log, multibeam, LIMITS, rows=rows).result, whole)


@pytest.mark.parametrize("most", [7, 4000])
def test_any_number_of_threads_gives_the_same(
    run: Any, swath: Any, multibeam: dict[str, Any], most: int, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(beam_rules, "MOST_MISSES", most)
    log = _line(swath, True)
    alone = run(log, multibeam, LIMITS, rows=1234).result
    assert sum(len(m.index) for m in alone.beam_misses) <= most * len(alone.beam_misses)
    for threads, rows in ((2, 101), (5, 1234)):
        _same(run(log, multibeam, LIMITS, rows=rows, threads=threads).result, alone)


@pytest.mark.parametrize("marred", ["", "rejected", "missing", "missing and rejected"])
@pytest.mark.parametrize("jittered", [False, True])
def test_pings_of_as_many_beams_are_judged_as_any(
    run: Any,
    swath: Any,
    multibeam: dict[str, Any],
    jittered: bool,
    marred: str,
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    log = _line(swath, jittered, marred)
    folded = run(log, multibeam, LIMITS).result

    class Unfolded:
        @staticmethod
        def of(counts: Any) -> Groups:
            return replace(Groups.of(counts), width=0)

    monkeypatch.setattr(stages, "Groups", Unfolded)
    _same(run(log, multibeam, LIMITS).result, folded)
