"""What a log is, found out from its first rows: format, columns, units, how times are written, one row per what."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Literal

import numpy as np
import pyarrow as pa

from qa.ingest.names import (
    TIME_PARTS,
    Binding,
    Header,
    Recognition,
    plain,
    recognise,
    wide_groups,
)
from qa.ingest.table_source import (
    MAGIC_ARROW,
    MAGIC_PARQUET,
    TableFormat,
    TableSource,
    is_list,
)
from qa.ingest.text_source import RawBatch, TextFormat, TextSource, probe_text
from qa.ingest.times import NoTimeError, TimePlan, plan_times
from qa.ingest.values import number_of
from qa.model.columns import COLUMNS
from qa.model.errors import InputError
from qa.model.survey_file import SurveyFile

RANGES = ("depth", "slant_range", "two_way_time", "altitude", "range_scale")
"""A log holds at least one of these, or nothing can be said of its pings."""

SIDES = {"north_or_south": ("latitude", "S"), "east_or_west": ("longitude", "W")}
"""Columns that say on which side of the equator or meridian a position is: the position's column, the negative side."""
_SAMPLE = 1 << 18


@dataclass(frozen=True, slots=True)
class FileProbe:
    """All that is needed to read one file. Small and picklable.

    ``layout``: "long" (a row is a ping or a beam), "list" (a row is a ping, its beams are lists), "wide" (its beams
    are columns side by side). ``constants`` are values that the folder's name gives, as in ``line=7``.
    """

    path: str
    shown: str
    form: TextFormat | TableFormat
    layout: Literal["long", "list", "wide"]
    grain: Literal["ping", "beam"]
    bindings: tuple[Binding, ...]
    times: TimePlan
    depth_from: str
    decimal_comma: bool
    size: int
    notes: tuple[str, ...] = ()
    left_over: tuple[tuple[str, str], ...] = ()
    ignored: tuple[str, ...] = ()
    constants: tuple[tuple[str, str], ...] = ()
    sides: tuple[Binding, ...] = ()
    line_values: bool = False

    def binding(self, role: str) -> Binding | None:
        """The first column that holds a canonical column."""
        return next((b for b in self.bindings if b.role == role), None)

    @property
    def roles(self) -> frozenset[str]:
        """Canonical columns that the file holds."""
        return frozenset(b.role for b in self.bindings)

    def open(self) -> TextSource | TableSource:
        """The file, ready to be read."""
        if isinstance(self.form, TextFormat):
            return TextSource(Path(self.path), self.shown, self.form)
        source = TableSource(Path(self.path), self.shown)
        if self.form.rows != source.length:
            raise InputError("The file changed while it was being read.", where=self.shown)
        return source


def is_table(path: Path, where: str) -> bool:
    """Whether a file is Parquet or Arrow, by its first bytes."""
    try:
        with path.open("rb") as file:
            magic = file.read(8)
    except OSError as problem:
        raise InputError(
            "The file cannot be read.",
            where=where,
            found=problem.strerror or str(problem),
            advice="Check the path and who may read it.",
        ) from None
    if magic[:4] == MAGIC_PARQUET or magic[:6] == MAGIC_ARROW:
        return True
    return magic[:4] == b"\xff\xff\xff\xff"


@np.errstate(over="ignore", invalid="ignore")
def probe(
    path: Path, shown: str, survey: SurveyFile, constants: Mapping[str, str] | None = None
) -> FileProbe:
    """Find out what a file is.

    Parameters
    ----------
    path : Path
        The file.
    shown : str
        Its name as the user wrote it, for messages.
    survey : SurveyFile
        What holds for this log.
    constants : mapping of str to str, optional
        Values that its folder's names give.

    Raises
    ------
    InputError
        If it cannot be used, with what to do.
    """
    size = path.stat().st_size if path.is_file() else 0
    if path.is_file() and size == 0:
        raise InputError("The file is empty.", where=shown)
    if is_table(path, shown):
        return _probe_table(path, shown, survey, size, dict(constants or {}))
    return _probe_text(path, shown, survey, size, dict(constants or {}))


def _probe_text(
    path: Path, shown: str, survey: SurveyFile, size: int, constants: dict[str, str]
) -> FileProbe:
    form = probe_text(path, shown, survey.columns.order)
    dialect = form.dialect
    units = dialect.units or ("",) * dialect.width
    headers = [Header(n, units_row=u) for n, u in zip(dialect.names, units, strict=True)]
    groups = wide_groups(headers)
    source = TextSource(path, shown, form)
    in_groups = {i for members in groups.values() for i, _ in members}
    rest = [h if i not in in_groups else Header("") for i, h in enumerate(headers)]
    found = recognise(rest, survey.columns, shown)
    bindings = list(found.bindings)
    layout: Literal["long", "wide"] = "long"
    if groups:
        layout = "wide"
        bindings = [
            b for b in bindings if COLUMNS.get(b.role) is None or COLUMNS[b.role].grain == "ping"
        ]
        for stem, members in groups.items():
            pattern = recognise(
                [replace(headers[members[0][0]], name=stem)], survey.columns, shown
            ).bindings
            for b in pattern:
                bindings.extend(
                    replace(b, source=headers[i].name, index=i, number=n) for i, n in members
                )
    names = {b.source: pa.string() for b in bindings}
    sample: RawBatch | None = None
    for raw in source.batches(names, threads=1, most=_SAMPLE):
        sample = raw
    if sample is None:
        raise InputError(
            "The file has a header but no rows.",
            where=shown,
            found=", ".join(n for n in dialect.names if n)[:200],
        )
    return _finished(
        path, shown, survey, size, constants, form, layout, found, tuple(bindings), sample.columns,
        dialect.decimal_comma, [h.name for h in headers], dialect.notes, sample.length, dialect.headed,
    )  # fmt: skip


def _probe_table(
    path: Path, shown: str, survey: SurveyFile, size: int, constants: dict[str, str]
) -> FileProbe:
    source = TableSource(path, shown)
    try:
        headers = source.headers
        lists = set(source.list_columns())
        found = recognise(headers, survey.columns, shown, _nested_names(source))
        bindings = found.bindings
        beam_lists = [
            b
            for b in bindings
            if b.source in lists and b.role in COLUMNS and COLUMNS[b.role].grain == "beam"
        ]
        layout: Literal["long", "list"] = "list" if beam_lists else "long"
        if layout == "list":
            bindings = tuple(
                b
                for b in bindings
                if (b.source in lists) == (b in beam_lists)
                and not (
                    b not in beam_lists and b.role in COLUMNS and COLUMNS[b.role].grain == "beam"
                )
            )
        else:
            bindings = tuple(b for b in bindings if b.source not in lists)
        if source.length == 0:
            raise InputError(
                "The file has columns but no rows.",
                where=shown,
                found=", ".join(h.name for h in headers)[:200],
            )
        names = [b.source for b in bindings]
        sample: dict[str, pa.Array] = {}
        length = 0
        group = next(i for i, n in enumerate(source.groups) if n)
        for _, raw in source.batches(names, size=20_000, groups=[group]):
            sample, length = dict(raw.columns), raw.length
            break
        return _finished(
            path, shown, survey, size, constants, TableFormat(source.kind, source.length), layout, found,
            bindings, sample, False, [h.name for h in headers], (), length, True,
        )  # fmt: skip
    finally:
        source.close()


def _nested_names(source: TableSource) -> dict[str, str]:
    """For a column inside a record its own name, where that is told apart from all others."""
    counts: dict[str, int] = {}
    for name in source.own_names.values():
        counts[plain(name)] = counts.get(plain(name), 0) + 1
    return {
        path: name
        for path, name in source.own_names.items()
        if path != name and counts[plain(name)] == 1
    }


def _finished(
    path: Path,
    shown: str,
    survey: SurveyFile,
    size: int,
    constants: dict[str, str],
    form: TextFormat | TableFormat,
    layout: Literal["long", "list", "wide"],
    found: Recognition,
    bindings: tuple[Binding, ...],
    sample: Mapping[str, pa.Array],
    decimal_comma: bool,
    headers: list[str],
    extra_notes: tuple[str, ...],
    rows: int,
    headed: bool,
) -> FileProbe:
    timed = tuple(b for b in bindings if b.role == "time" or b.role in TIME_PARTS)
    others = tuple(b for b in bindings if b.role in COLUMNS and b.role != "time")
    try:
        times = plan_times(
            timed,
            {b.source: sample[b.source] for b in timed},
            survey.time_zone,
            shown,
            survey.columns.units.get("time", ""),
            decimal_comma,
        )
    except NoTimeError:
        raise InputError(
            "The log has no column of times that is recognised.",
            where=shown,
            found="columns " + ", ".join(f'"{h}"' for h in headers if h)[:400],
            advice=_what_to_write("time", found, headers),
        ) from None
    roles = {b.role for b in others}
    if not roles & set(RANGES):
        raise InputError(
            "The log has no depth, slant range, two-way time, altitude or range scale that is recognised.",
            where=shown,
            found="columns " + ", ".join(f'"{h}"' for h in headers if h)[:400],
            advice=_what_to_write("depth", found, headers),
        )
    notes = [*extra_notes, *found.notes, *found.problems, *times.notes]
    notes += [
        advice
        for name, advice in found.left_over.items()
        if advice.startswith(f'"{name}" may be') and advice not in notes
    ]
    for binding in others:
        if COLUMNS[binding.role].kind == "number" and binding.source in sample:
            _plausible(binding, sample[binding.source], shown, decimal_comma, survey.depth_from)
    assumed = sorted(
        {
            b.role
            for b in others
            if COLUMNS[b.role].kind == "number"
            and not b.unit
            and str(COLUMNS[b.role].unit) != "1"
            and b.role not in ("latitude", "longitude")
        }
    )
    if assumed:
        notes.append(
            "No unit is given for "
            + ", ".join(f"{r} ({COLUMNS[r].unit})" for r in assumed)
            + ": taken in the unit in brackets."
        )
    if "beam_angle_from" not in survey.stated and any(
        "depression" in b.source.lower() for b in others if b.role == "beam_angle"
    ):
        notes.append(
            'Beam angles are named as angles of depression: write beam_angle_from = "horizontal" under [sonar].'
        )
    grain = _grain(layout, others, times, sample, rows, decimal_comma)
    if "line" in roles and survey.lines.source == "file":
        line = next(b for b in others if b.role == "line")
        values = sample[line.source]
        if isinstance(values, pa.Array | pa.ChunkedArray) and len(values.unique()) > 1:
            notes.append(
                f'Column "{line.source}" names several lines; the file was taken as one line. To tell them apart write '
                'from = "column" under [lines] in the survey file.'
            )
    return FileProbe(
        str(path), shown, form, layout, grain, others, times, survey.depth_from, decimal_comma, size,
        tuple(dict.fromkeys(notes)), tuple(found.left_over.items()), found.ignored, tuple(sorted(constants.items())),
        tuple(b for b in bindings if b.role in SIDES and SIDES[b.role][0] in roles),
    )  # fmt: skip


def _what_to_write(role: str, found: Recognition, headers: list[str]) -> str:
    for advice in (*found.problems, *found.left_over.values()):
        if f"{role} =" in advice or f"be {role}" in advice:
            return advice
    example = next(
        (h for h in headers if h and h in found.left_over), headers[0] if headers else "…"
    )
    return (
        f'Write {role} = "{example}" (the column that holds it) under [columns] in the survey file'
        + (
            ""
            if role == "time"
            else ", or slant_range, two_way_time, altitude or range_scale likewise"
        )
        + "."
    )


_TOO_MUCH = {
    "pulse_length": (0.0, 1.0, "us", "s"),
    "frequency": (1000.0, 1e8, "kHz", "Hz"),
    "bandwidth": (100.0, 1e8, "kHz", "Hz"),
    "two_way_time": (0.0, 16.0, "ms", "s"),
    "sound_speed": (1300.0, 1700.0, "ft/s", "m/s"),
    "temperature": (-4.0, 45.0, "degF", "degC"),
    "speed": (0.0, 60.0, "km/h", "m/s"),
    "latitude": (-90.0, 90.0, "deg", "deg"),
    "longitude": (-360.0, 360.0, "deg", "deg"),
    "depth": (-11500.0, 11500.0, "mm", "m"),
    "altitude": (0.0, 11500.0, "mm", "m"),
    "range_scale": (0.0, 20000.0, "mm", "m"),
    "slant_range": (0.0, 20000.0, "mm", "m"),
    "beam_angle": (-180.0, 180.0, "deg", "deg"),
    "heading": (-360.0, 720.0, "deg", "deg"),
}
"""For a column without a unit: least and greatest typical value that can be SI, a likely unit, the SI unit."""


def _plausible(
    binding: Binding, values: pa.Array, where: str, decimal_comma: bool, depth_from: str
) -> None:
    """Refuse numbers that cannot be in the unit that no unit would mean."""
    if binding.role not in _TOO_MUCH or binding.unit:
        return
    if is_list(values.type):
        values = values.flatten()
    numbers, _bad = number_of(values, decimal_comma)
    numbers = numbers[np.isfinite(numbers)].astype(np.float64)
    numbers = numbers[
        (numbers != 0.0)
        & (np.abs(numbers) < 1e30)
        & ~np.isin(np.abs(numbers), (999.0, 9999.0, 99999.0, 999999.0, 32768.0, 32767.0))
    ]
    if not len(numbers):
        return
    low, high, likely, unit = _TOO_MUCH[binding.role]
    typical = float(np.median(numbers))
    if (
        binding.role == "depth"
        and typical < 0
        and depth_from != "datum"
        and (numbers < 0).mean() > 0.9
    ):
        raise InputError(
            f'Column "{binding.source}" holds negative depths: it seems to be positive up.',
            where=where,
            found=f"{typical:g}",
            expected="depths positive down",
            advice='Export depths positive down, or, if they are heights over a datum, write depth_from = "datum" and '
            "turn their sign.",
        )
    if low <= typical <= high:
        return
    if binding.role in ("latitude", "longitude"):
        raise InputError(
            f'Column "{binding.source}" holds no decimal degrees.',
            where=where,
            found=f"{typical:.10g}",
            expected="degrees such as 47.318",
            advice="Export positions in decimal degrees, or, if these are grid coordinates, write easting and northing "
            "under [columns] in the survey file.",
        )
    raise InputError(
        f'Column "{binding.source}" gives no unit, and its values cannot be {binding.role} in {unit}.',
        where=where,
        found=f"typically {typical:g}",
        advice=f'Write the true unit under [columns.units] in the survey file, for example {binding.role} = "{likely}".',
    )


def _grain(
    layout: str,
    bindings: tuple[Binding, ...],
    times: TimePlan,
    sample: Mapping[str, pa.Array],
    rows: int,
    decimal_comma: bool,
) -> Literal["ping", "beam"]:
    roles = {b.role: b for b in bindings}
    if layout != "long" or "beam" in roles:
        return "beam"
    if not {"beam_angle", "slant_range", "two_way_time", "accepted"} & roles.keys() or rows < 4:
        return "ping"
    if "beam_angle" not in roles:
        return "ping"
    key = roles["ping"].source if "ping" in roles else times.bindings[-1].source
    keys = sample[key]
    if isinstance(keys, pa.ChunkedArray):
        keys = keys.combine_chunks()
    distinct = max(1, len(keys.unique()))
    angles, _ = number_of(sample[roles["beam_angle"].source], decimal_comma)
    several_angles = len(np.unique(angles[np.isfinite(angles)])) > 2
    return "beam" if rows / distinct > 2.5 and several_angles else "ping"
