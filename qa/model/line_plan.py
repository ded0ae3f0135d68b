"""A line plan: the lines that were to be run."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Literal

from qa.model.log import FileAccount


@dataclass(frozen=True, slots=True)
class PlannedLine:
    """One line that was to be run.

    ``start`` and ``end`` are (latitude, longitude) in degrees or (easting, northing) in metres, as
    :attr:`LinePlan.position` says.
    """

    name: str
    start: tuple[float, float]
    end: tuple[float, float]


@dataclass(frozen=True, slots=True)
class LinePlan:
    """The lines of a plan, in the order of the file, each name once."""

    path: str
    lines: tuple[PlannedLine, ...]
    position: Literal["latitude and longitude", "easting and northing"]
    account: FileAccount = field(default_factory=lambda: FileAccount(""))
    notes: tuple[str, ...] = ()

    def line(self, name: str) -> PlannedLine | None:
        """The line of a name, or None."""
        return next((line for line in self.lines if line.name == name), None)
