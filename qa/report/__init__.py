"""Findings as tables, figures and HTML."""

from __future__ import annotations

from qa.report.conclusions import summary
from qa.report.files import write_text
from qa.report.lines import LineArtifacts, renumbered, write_line
from qa.report.outputs import write_outputs

__all__ = ["LineArtifacts", "renumbered", "summary", "write_line", "write_outputs", "write_text"]
