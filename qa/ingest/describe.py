"""What was recognised in logs: for each layout its columns, units, ranges, what is missing and what is not used."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, Literal

import numpy as np
import pyarrow as pa
from numpy.typing import NDArray

from qa.ingest.names import Binding, plain
from qa.ingest.planning import _files, _folder_values
from qa.ingest.probe import FileProbe, probe
from qa.ingest.rows import Names, RowReader, Rows
from qa.ingest.table_source import TableFormat, TableSource, listed
from qa.ingest.text_source import TextFormat
from qa.ingest.times import TimePlan
from qa.model.columns import COLUMNS, PULSE_FORMS
from qa.model.errors import InputError
from qa.model.findings import InputFile
from qa.model.survey_file import SurveyFile

UnitFrom = Literal["header", "units row", "metadata", "survey file", "taken as is", "none"]

_WAYS: dict[str, UnitFrom] = {
    "header": "header",
    "units row": "units row",
    "metadata": "metadata",
    "survey file": "survey file",
}
_SAMPLE = 1 << 16
_MOST_BYTES = 1 << 28
"""Bytes of a layout's files that are read for its ranges."""
_SHOWN_NAMES = 4


@dataclass(frozen=True, slots=True)
class ColumnDescription:
    """One canonical column as a layout holds it.

    ``sources`` are the file's own names: several where beams stand side by side, or where a time is in parts.
    ``unit`` is the unit as written, "" where none is; ``unit_from`` says where it was found. ``least`` and
    ``greatest`` are SI (time: nanoseconds UTC), None where there is no value or it is no number; ``names`` are the
    values of a column of names, flags or pulse forms, at most a few of the ``distinct`` ones. ``missing`` is the
    share of the values that are not there, sentinels included. ``example`` stands as it does in the file.
    """

    name: str
    sources: tuple[str, ...]
    unit: str
    unit_from: UnitFrom
    named_by_survey: bool
    least: float | int | None
    greatest: float | int | None
    missing: float
    example: str
    names: tuple[str, ...] = ()
    distinct: int = 0

    @property
    def has_values(self) -> bool:
        """Whether any value is there at all."""
        return self.missing < 1.0


@dataclass(frozen=True, slots=True)
class Layout:
    """Logs whose columns, units and times are alike.

    ``forms`` says in words how the files are written, the first one's way first. ``read`` counts the files that were read for ranges and counts, of ``files``; ``failed`` names those that could
    not be read to their end, with why.
    """

    files: tuple[str, ...]
    paths: tuple[Path, ...]
    forms: tuple[str, ...]
    layout: Literal["long", "list", "wide"]
    grain: Literal["ping", "beam"]
    time: str
    columns: tuple[ColumnDescription, ...]
    unused: tuple[tuple[str, str], ...]
    ignored: tuple[str, ...]
    notes: tuple[str, ...]
    survey: SurveyFile
    read: int = 0
    rows_read: int = 0
    rows_kept: int = 0
    rows_rejected: int = 0
    reasons: tuple[tuple[str, int], ...] = ()
    failed: tuple[InputFile, ...] = ()

    def column(self, name: str) -> ColumnDescription | None:
        """The description of a canonical column, or None where the layout lacks it."""
        return next((c for c in self.columns if c.name == name), None)

    @property
    def present(self) -> frozenset[str]:
        """Canonical columns that hold any value."""
        return frozenset(c.name for c in self.columns if c.has_values)

    @property
    def missing(self) -> tuple[str, ...]:
        """Canonical columns that the layout lacks or leaves empty, in canonical order."""
        return tuple(name for name in COLUMNS if name not in self.present)


@dataclass(frozen=True, slots=True)
class Description:
    """All layouts among some logs, in the order of their first files, and the files that cannot be used."""

    layouts: tuple[Layout, ...]
    failed: tuple[InputFile, ...]


def describe_logs(
    logs: Sequence[str | Path], survey: SurveyFile | None = None, most_bytes: int = _MOST_BYTES
) -> Description:
    """Describe what is recognised in logs.

    Parameters
    ----------
    logs : sequence of str or Path
        Files, folders or patterns.
    survey : SurveyFile, optional
        What the survey file says of names, units and lines.
    most_bytes : int
        For ranges and counts, files of a layout are read until this many bytes; one at least.

    Raises
    ------
    InputError
        If a path matches nothing. A file that cannot be used is in ``failed`` instead.
    """
    survey = survey or SurveyFile()
    failed: list[InputFile] = []
    groups: dict[object, list[tuple[FileProbe, SurveyFile]]] = {}
    for shown, path in _files(logs):
        own = survey.for_log(path)
        try:
            found = probe(path, shown, own, _folder_values(path))
        except InputError as error:
            failed.append(InputFile(shown, error=str(error)))
            continue
        groups.setdefault(_key(found, own), []).append((found, own))
    return Description(tuple(_layout(g, most_bytes) for g in groups.values()), tuple(failed))


def _key(found: FileProbe, survey: SurveyFile) -> object:
    """What two files must share to be of one layout."""
    return (
        found.layout,
        found.grain,
        isinstance(found.form, TextFormat),
        found.depth_from,
        tuple((b.role, b.source, b.unit, b.how, b.number) for b in found.bindings),
        tuple((b.role, b.source, b.unit) for b in found.times.bindings),
        (found.times.kind, found.times.zone, found.times.step, found.times.text_form),
        found.left_over,
        found.ignored,
        tuple(role for role, _ in found.constants),
        survey.stated.get("kind"),
        survey.lines,
    )


@dataclass(slots=True)
class _Seen:
    """What was met of one column."""

    values: int = 0
    missing: int = 0
    least: float | int | None = None
    greatest: float | int | None = None
    names: dict[str, None] = field(default_factory=dict)

    def numbers(self, values: NDArray[Any]) -> None:
        """Take more values in; NaN is missing."""
        values = np.asarray(values, dtype=np.float64)
        known = values[~np.isnan(values)]
        self.values += len(values)
        self.missing += len(values) - len(known)
        if len(known):
            self._bounds(float(known.min()), float(known.max()))

    def whole(self, values: NDArray[np.int64]) -> None:
        """Take more whole numbers in, all there."""
        self.values += len(values)
        if len(values):
            self._bounds(int(values.min()), int(values.max()))

    def words(self, codes: NDArray[np.int64], names: Sequence[str]) -> None:
        """Take more names in; an empty one is missing."""
        self.values += len(codes)
        found, counts = np.unique(codes, return_counts=True)
        for code, count in zip(found.tolist(), counts.tolist(), strict=True):
            if code < 0 or not names[code]:
                self.missing += count
            else:
                self.names.setdefault(names[code])

    def _bounds(self, least: float, greatest: float) -> None:
        self.least = least if self.least is None else min(self.least, least)
        self.greatest = greatest if self.greatest is None else max(self.greatest, greatest)


def _layout(group: Sequence[tuple[FileProbe, SurveyFile]], most_bytes: int) -> Layout:
    first, survey = group[0]
    seen: dict[str, _Seen] = {}
    names = Names()
    failed: list[InputFile] = []
    notes: list[str] = []
    reasons: dict[str, int] = {}
    read = rows_read = rejected = size = 0
    for found, _ in group:
        if read and size + found.size > most_bytes:
            break
        reader = RowReader(found, names)
        try:
            for rows in reader.batches():
                _take(rows, names, seen)
        except InputError as error:
            failed.append(InputFile(found.shown, error=str(error)))
        read, size = read + 1, size + found.size
        rows_read += reader.account.rows_read
        rejected += reader.account.rows_rejected
        notes += reader.account.notes
        for reason, count in reader.account.reasons.items():
            reasons[reason] = reasons.get(reason, 0) + count
    notes += [note for found, _ in group[read:] for note in found.notes]
    examples = _examples(first)
    return Layout(
        files=tuple(found.shown for found, _ in group),
        paths=tuple(Path(found.path) for found, _ in group),
        forms=tuple(dict.fromkeys(_form(found) for found, _ in group)),
        layout=first.layout,
        grain=first.grain,
        time=_time_form(first.times),
        columns=_columns(first, survey, seen, examples),
        unused=tuple((n, a) for n, a in first.left_over if n),
        ignored=first.ignored,
        notes=tuple(dict.fromkeys(notes)),
        survey=survey,
        read=read,
        rows_read=rows_read,
        rows_kept=rows_read - rejected,
        rows_rejected=rejected,
        reasons=tuple(sorted(reasons.items(), key=lambda item: -item[1])),
        failed=tuple(failed),
    )


def _take(rows: Rows, names: Names, seen: dict[str, _Seen]) -> None:
    seen.setdefault("time", _Seen()).whole(rows.time)
    if rows.ping is not None:
        seen.setdefault("ping", _Seen()).whole(rows.ping)
    for role, codes, known in (
        ("line", rows.line, names.line.names),
        ("channel", rows.channel, names.channel.names),
    ):
        if codes is not None:
            seen.setdefault(role, _Seen()).words(codes, known)
    for role, values in (*rows.pings.items(), *rows.beams.items()):
        seen.setdefault(role, _Seen()).numbers(values)


def _columns(
    first: FileProbe, survey: SurveyFile, seen: Mapping[str, _Seen], examples: Mapping[str, str]
) -> tuple[ColumnDescription, ...]:
    by_role: dict[str, list[Binding]] = {"time": list(first.times.bindings)}
    for binding in first.bindings:
        by_role.setdefault(binding.role, []).append(binding)
    if first.layout == "wide":
        by_role.setdefault("beam", [])
    for role, _ in first.constants:
        by_role.setdefault(role, [])
    stated = {role: plain(name) for role, name in survey.columns.names.items()}
    return tuple(
        _column(role, by_role[role], stated, survey, seen.get(role, _Seen()), examples)
        for role in COLUMNS
        if role in by_role
    )


def _column(
    role: str,
    bindings: Sequence[Binding],
    stated: Mapping[str, str],
    survey: SurveyFile,
    found: _Seen,
    examples: Mapping[str, str],
) -> ColumnDescription:
    first = bindings[0] if bindings else None
    unit, unit_from = _unit(role, first, survey)
    sources = tuple(dict.fromkeys(b.source for b in bindings))
    words = tuple(found.names)
    least, greatest = found.least, found.greatest
    if role == "pulse_form" and least is not None and greatest is not None:
        words = tuple(PULSE_FORMS[i] for i in sorted({int(least), int(greatest)}))
    elif role == "accepted" and least is not None and greatest is not None:
        words = tuple(("rejected", "accepted")[i] for i in sorted({int(least), int(greatest)}))
    if words:
        least = greatest = None
    return ColumnDescription(
        name=role,
        sources=sources,
        unit=unit,
        unit_from=unit_from,
        named_by_survey=any(plain(s) == stated.get(role) for s in sources),
        least=least,
        greatest=greatest,
        missing=found.missing / found.values if found.values else 1.0,
        example=" ".join(e for s in sources if (e := examples.get(s, "")))
        if role == "time"
        else next((e for s in sources if (e := examples.get(s, ""))), ""),
        names=words[:_SHOWN_NAMES],
        distinct=len(words),
    )


def _unit(role: str, binding: Binding | None, survey: SurveyFile) -> tuple[str, UnitFrom]:
    if role == "time" and "time" in survey.columns.units:
        return survey.columns.units["time"], "survey file"
    if binding is None or (COLUMNS[role].kind != "number" and not binding.unit):
        return "", "none"
    if binding.unit:
        return binding.unit, _WAYS.get(binding.how, "header")
    return "", "none" if str(COLUMNS[role].unit) == "1" else "taken as is"


def _examples(first: FileProbe) -> dict[str, str]:
    """The first value of each column as it stands in the file."""
    wanted = list(dict.fromkeys(b.source for b in (*first.bindings, *first.times.bindings)))
    found: dict[str, str] = {}
    try:
        opened = first.open()
        if isinstance(opened, TableSource):
            try:
                for _, raw in opened.batches(wanted, size=1000):
                    found = {name: _first(raw.columns[name]) for name in wanted}
                    break
            finally:
                opened.close()
        else:
            kinds = {name: pa.string() for name in wanted}
            for raw in opened.batches(kinds, threads=1, most=_SAMPLE):
                found = {name: _first(raw.columns[name]) for name in wanted}
    except InputError:
        # Reading the file's rows has already told what is wrong with it.
        return found
    return found


def _first(array: pa.Array) -> str:
    known = array.drop_null()
    if not len(known):
        return ""
    value = listed(known[:1])[0]
    kind = array.type.value_type if isinstance(value, list) else array.type
    # A single precision 22.55 stands in the file as such, not as 22.5499992.
    digits = 7 if pa.types.is_float32(kind) else 12
    if isinstance(value, list):
        shown = ", ".join(_shown(v, digits) for v in value[:3])
        return f"[{shown}{', …' if len(value) > 3 else ''}]"
    return _shown(value, digits)


def _shown(value: object, digits: int) -> str:
    if hasattr(value, "isoformat"):
        return str(value.isoformat())
    text = f"{value:.{digits}g}" if isinstance(value, float) else str(value)
    text = " ".join(text.split())
    return text if len(text) <= 40 else text[:39] + "…"


_SEPARATORS = {
    ",": "commas",
    ";": "semicolons",
    "\t": "tabs",
    " ": "spaces",
    "|": "upright strokes",
}
_ENCODINGS = {"utf-8": "", "cp1252": ", Latin-1", "utf-16-le": ", UTF-16", "utf-16-be": ", UTF-16"}


def _form(first: FileProbe) -> str:
    """How a file is written, in words."""
    if isinstance(first.form, TableFormat):
        return "Parquet" if first.form.kind == "parquet" else "Arrow"
    dialect = first.form.dialect
    text = f"text with {_SEPARATORS.get(dialect.separator, dialect.separator)}"
    if dialect.decimal_comma:
        text += " and decimal commas"
    text += _ENCODINGS.get(dialect.encoding, f", {dialect.encoding}")
    return text if dialect.headed else text + ", no header"


_FORMS = {
    "ymd": "year, month, day",
    "ymd1": "year, month, day",
    "dmy": "day, month, year",
    "mdy": "month, day, year",
    "month": "day, month by name, year",
    "doy": "year and day of year",
    "clock": "time of day",
}
_STEPS = {1.0: "ns", 1e3: "µs", 1e6: "ms", 1e9: "s", 6e10: "min", 3.6e12: "h", 8.64e13: "d"}


def _time_form(plan: TimePlan) -> str:
    """How a file's times are written, in words."""
    if plan.kind == "instant":
        return "timestamps"
    if plan.kind == "number":
        start = str(np.datetime64(int(plan.origin), "ns").astype("datetime64[s]"))
        return f"{_STEPS.get(plan.step, f'{plan.step / 1e9:g} s')} since {start.removesuffix('T00:00:00')}"
    if plan.kind == "parts":
        return "in parts: " + ", ".join(b.role.replace("_", " ") for b in plan.bindings)
    return _FORMS.get(plan.text_form, "text")
