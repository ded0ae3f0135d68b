"""Log files of any names and units, turned into canonical logs."""

from __future__ import annotations

from qa.ingest.line_log import DayChoice, OpenedLine
from qa.ingest.planning import LineTask, LogPlan, open_line, plan_logs

__all__ = ["DayChoice", "LineTask", "LogPlan", "OpenedLine", "open_line", "plan_logs"]
