"""One line's share of the report, made where the line was computed, so that its series can be dropped."""

from __future__ import annotations

import json
from dataclasses import dataclass, field, replace
from pathlib import Path

from qa.model.findings import LineResult
from qa.report import charts, drawing, panels, ping_table, tracks
from qa.report.charts import GrowthPoints
from qa.report.files import write_text
from qa.report.tracks import Places, Track
from qa.report.words import word


@dataclass(frozen=True, slots=True)
class LineArtifacts:
    """What stays of a line once it is written: two files, and what the survey's own figures need.

    ``sections`` are the ids of the line's sections, in order. ``places`` holds longitudes and latitudes along each
    section, ``grid`` eastings and northings of its ends where the log has no latitude.
    """

    line: str
    number: int
    figures: Path
    pings: Path
    sections: tuple[str, ...]
    track: Track | None = None
    growth: GrowthPoints | None = None
    margins: dict[str, list[int]] = field(default_factory=dict)
    places: dict[str, Places] = field(default_factory=dict)
    grid: dict[str, tuple[float, float, float, float]] = field(default_factory=dict)

    @property
    def identity(self) -> str:
        """What the ids of the line's elements begin with: never the line's own name."""
        return line_identity(self.number)

    def moved(self, folder: Path) -> LineArtifacts:
        """The same, with its files in another audit's folder, under the number's names."""
        figures, pings = line_files(folder, self.number)
        return replace(self, figures=figures, pings=pings)


def line_identity(number: int) -> str:
    """The id of a line's place in the report.

    Examples
    --------
    >>> line_identity(7)
    'L0007'
    """
    return f"L{number:04d}"


def line_files(folder: Path, number: int) -> tuple[Path, Path]:
    """Where a line's figures and pings are written, in the folder of the whole audit."""
    return folder / "figures" / f"{number:04d}.json", folder / "pings" / f"{number:04d}.arrow"


def write_line(result: LineResult, folder: Path, number: int, identity: str = "") -> LineArtifacts:
    """Draw a line's figures and write its part of ``pings.parquet``.

    Parameters
    ----------
    result : LineResult
        The line, computed.
    folder : Path
        Folder of the whole audit's outputs; ``figures`` and ``pings`` are made in it.
    number : int
        The line's number, which its files and ids are named by.
    identity : str
        What ids begin with instead, where the number may change; :func:`renumbered` puts the number's own there.

    Returns
    -------
    LineArtifacts
        A small record that travels between processes.
    """
    identity = identity or line_identity(number)
    growth = charts.growth_points(result)
    counted = charts.margin_counts(result)
    name = result.finding.line
    shown = drawing.clipped(name)
    drawn = [
        panels.track_time(result, f"{identity}-time"),
        charts.swath(result, f"{identity}-swath"),
        charts.margins(counted, f"{identity}-margins", word("margins.title", line=shown)),
        charts.growth(
            [growth] if growth else [], f"{identity}-growth", word("growth.title", line=shown)
        ),
    ]
    figures, pings = line_files(folder, number)
    figures.parent.mkdir(parents=True, exist_ok=True)
    kept = [f for f in drawn if f is not None]
    write_text(figures, json.dumps(kept, ensure_ascii=False, separators=(",", ":")))
    ping_table.write_part(result, pings)
    return LineArtifacts(
        line=name,
        number=number,
        figures=figures,
        pings=pings,
        sections=tuple(s.id for s in result.sections),
        track=tracks.track(result),
        growth=growth,
        margins=counted,
        places=tracks.section_places(result),
        grid=tracks.section_grid(result),
    )


def renumbered(artifacts: LineArtifacts, number: int, folder: Path, identity: str) -> LineArtifacts:
    """The artifacts under another number, their files in a folder; ``identity`` is what their ids begin with so far."""
    figures, pings = line_files(folder, number)
    for path in (figures, pings):
        path.parent.mkdir(parents=True, exist_ok=True)
    text = artifacts.figures.read_bytes()
    # A new file: the one that stands there may be kept under another name.
    figures.unlink(missing_ok=True)
    figures.write_bytes(text.replace(identity.encode(), line_identity(number).encode()))
    if artifacts.pings != pings:
        artifacts.pings.replace(pings)
    own = {name: f"{number}.{name.rpartition('.')[2]}" for name in artifacts.sections}
    return replace(
        artifacts,
        number=number,
        figures=figures,
        pings=pings,
        sections=tuple(own.values()),
        places={own[name]: along for name, along in artifacts.places.items()},
        grid={own[name]: ends for name, ends in artifacts.grid.items()},
    )
