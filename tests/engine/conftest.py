"""A line held in memory, so that the engine is tested without files."""

from __future__ import annotations

from collections.abc import Collection, Iterator, Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from qa.engine.evaluate import evaluate_line
from qa.engine.sheets import load_sheet
from qa.model.findings import LineResult, LineRule, Section
from qa.model.log import BeamBatch, ChannelSpan, FileAccount, PingTable
from qa.model.survey_file import SurveyFile


@dataclass
class MemoryLog:
    """A LineLog: ``time`` in seconds; ``beams`` holds (pings, beams) arrays, or (pings,) for one row a ping."""

    time: Any
    pings: Mapping[str, Any] = field(default_factory=dict)
    beams: Mapping[str, Any] = field(default_factory=dict)
    channels: tuple[tuple[str, int], ...] = ()
    name: str = "L1"
    numbers: Any = None
    time_resolution: float = float("nan")

    @property
    def grain(self) -> str:
        return "beam" if any(np.ndim(v) == 2 for v in self.beams.values()) else "ping"

    @property
    def beam_columns(self) -> frozenset[str]:
        return frozenset(self.beams)

    def ping_table(self) -> PingTable:
        n = len(self.time)
        spans, at = [], 0
        for name, length in self.channels or (("", n),):
            spans.append(ChannelSpan(name, at, at + length))
            at += length
        columns = {
            k: np.broadcast_to(np.asarray(v, dtype=float), (n,)) for k, v in self.pings.items()
        }
        time = (
            np.round(np.asarray(self.time, dtype=float) * 1e9).astype(np.int64)
            + 1_700_000_000_000_000_000
        )
        numbers = np.arange(n) + 100 if self.numbers is None else np.asarray(self.numbers)
        return PingTable(time, numbers, True, tuple(spans), columns, self.time_resolution)

    def beam_batches(self, columns: Collection[str], rows: int = 100_000) -> Iterator[BeamBatch]:
        n = len(self.time)
        if not self.beams:
            return
        width = max((np.shape(v)[1] for v in self.beams.values() if np.ndim(v) == 2), default=1)
        step = max(1, rows // width)
        for start in range(0, n, step):
            pings = np.arange(start, min(n, start + step))
            yield BeamBatch(
                pings,
                np.full(len(pings), width),
                {
                    k: np.asarray(self.beams[k], dtype=float).reshape(n, -1)[pings].ravel()
                    for k in columns
                },
            )

    def accounts(self) -> tuple[FileAccount, ...]:
        return ()


class Audited:
    """A line's result with short ways to a rule and its sections."""

    def __init__(self, result: LineResult) -> None:
        self.result = result

    def rule(self, name: str) -> LineRule:
        return next(r for r in self.result.finding.rules if r.id == name)

    def spans(self, name: str) -> list[tuple[str, int, int]]:
        return [
            (s.channel, s.first_index, s.last_index) for s in self.result.sections if s.rule == name
        ]

    def sections(self, name: str) -> list[Section]:
        return [s for s in self.result.sections if s.rule == name]


@pytest.fixture
def run() -> Any:
    """Run the engine on a memory log: ``run(log, stated={...}, limits={...}, sheet="physics", rows=…)``."""

    def run_it(
        log: MemoryLog,
        stated: Mapping[str, Any] | None = None,
        limits: Mapping[str, Any] | None = None,
        sheet: str | Path = "physics",
        rows: int = 100_000,
        threads: int = 1,
        **more: Any,
    ) -> Audited:
        survey = SurveyFile(stated=dict(stated or {}), limits=dict(limits or {}), **more)
        found = evaluate_line(log, survey, load_sheet(sheet, survey), rows=rows, threads=threads)
        return Audited(found)

    return run_it


@pytest.fixture
def memory_log() -> type[MemoryLog]:
    return MemoryLog


MULTIBEAM = {
    "kind": "multibeam",
    "frequency": 300e3,
    "pulse_length": 60e-6,
    "pulse_form": "CW",
    "beamwidth_along": 1.0,
    "beamwidth_across": 1.0,
    "sound_speed": 1500.0,
    "transducer_depth": 0.0,
}


@pytest.fixture
def multibeam() -> dict[str, Any]:
    """Settings of a multibeam, SI, to be stated."""
    return dict(MULTIBEAM)


@pytest.fixture
def swath(memory_log: Any) -> Any:
    """``swath(n, depth, interval, …)``: a clean multibeam line of 101 beams over a flat seabed."""

    def make(
        n: int = 60, depth: float = 20.0, interval: float = 0.1, fan: float = 40.0, **pings: Any
    ) -> MemoryLog:
        angles = np.broadcast_to(np.linspace(-fan, fan, 101), (n, 101)).copy()
        return MemoryLog(
            np.arange(n) * interval,
            {"speed": 2.0, **pings},
            {
                "depth": np.full((n, 101), depth),
                "beam_angle": angles,
                "accepted": np.ones((n, 101)),
            },
        )

    return make
