"""Log files of any names and units, turned into canonical logs."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from qa.ingest.line_log import MET_BEFORE, DayChoice, OpenedLine
from qa.ingest.planning import LineTask, LogPlan, open_line, plan_logs
from qa.model.survey_file import SurveyFile, load_survey_file

if TYPE_CHECKING:
    import pyarrow as pa

__all__ = [
    "MET_BEFORE",
    "DayChoice",
    "LineTask",
    "LogPlan",
    "OpenedLine",
    "open_line",
    "plan_logs",
    "read_log",
]


def read_log(path: str | Path, survey: SurveyFile | str | Path | None = None) -> pa.Table:
    """The canonical rows of a log: known names, SI units, UTC, one row per beam.

    Parameters
    ----------
    path : path
        A file, or a folder or pattern whose lines are put after one another.
    survey : SurveyFile or path, optional
        Names, units and line choices.

    Returns
    -------
    pyarrow.Table
        ``line``, ``channel``, ``ping``, ``time`` and the logged columns. Pings without beams have one row.

    Raises
    ------
    InputError
        If the log cannot be used.
    """
    import pyarrow as pa

    facts = (
        survey
        if isinstance(survey, SurveyFile)
        else load_survey_file(survey)
        if survey
        else SurveyFile()
    )
    tables = [_line_table(open_line(task, facts)) for task in plan_logs([path], facts).lines]
    return pa.concat_tables(tables, promote_options="default")


def _line_table(line: OpenedLine) -> pa.Table:
    import pyarrow as pa

    table = line.ping_table()
    wanted = sorted(line.beam_columns)
    pings: list[Any] = []
    beams: dict[str, list[Any]] = {name: [] for name in wanted}
    for batch in line.beam_batches(wanted) if wanted else ():
        pings.append(np.repeat(batch.pings, batch.counts))
        for name in wanted:
            beams[name].append(batch.columns[name])
    rows = np.concatenate(pings) if pings else np.arange(len(table))
    if pings:
        without = np.setdiff1d(np.arange(len(table)), rows)
        rows = np.concatenate([rows, without])
        for parts in beams.values() if len(without) else ():
            parts.append(np.full(len(without), np.nan))
    # beams come in the order of the file, pings stand in the order of the line
    order = np.argsort(rows, kind="stable")
    rows = rows[order]
    channel = np.empty(len(table), dtype=object)
    for span in table.channels:
        channel[span.rows] = span.name
    columns: dict[str, Any] = {
        "line": np.full(len(rows), line.name, dtype=object),
        "channel": channel[rows],
        "ping": table.ping[rows],
        "time": pa.array(table.time[rows], pa.timestamp("ns", tz="UTC")),
    }
    columns.update({name: values[rows] for name, values in table.columns.items()})
    if pings:
        for name, parts in beams.items():
            columns[name] = np.concatenate(parts)[order]
    return pa.table(columns)
