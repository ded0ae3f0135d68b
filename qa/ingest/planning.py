"""Which files, and which rows of them, make which line."""

from __future__ import annotations

import glob
import re
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from functools import partial
from pathlib import Path, PurePosixPath
from typing import Any

import numpy as np

from qa.ingest.line_log import DayChoice, FilePart, OpenedLine
from qa.ingest.overlap import met_before, time_span
from qa.ingest.probe import FileProbe, probe
from qa.ingest.rows import Integers, Names, RowReader, Stretch
from qa.model.errors import InputError
from qa.model.findings import InputFile
from qa.model.survey_file import SurveyFile

LOG_ENDINGS = (
    *(".csv", ".tsv", ".txt", ".dat", ".asc", ".xyz", ".log"),
    *(".parquet", ".pq", ".arrow", ".feather", ".ipc"),
)
PACKED_ENDINGS = (".gz", ".zst", ".bz2")


@dataclass(frozen=True, slots=True)
class LineTask:
    """One line to be read: small, so that it travels to a worker. ``bytes`` is the size of its files."""

    name: str
    files: tuple[str, ...]
    parts: tuple[FilePart, ...]
    bytes: int
    day: DayChoice | None = None


@dataclass(frozen=True, slots=True)
class LogPlan:
    """The lines, in the order of their files and names, and the files that cannot be used."""

    lines: tuple[LineTask, ...]
    inputs: tuple[InputFile, ...]


Remembered = Callable[[Path, tuple[object, ...], Callable[[], Any]], Any]
"""Takes a file, what else counts, and what finds something out of the file; gives what it finds, or found before."""


def plan_logs(
    logs: Sequence[str | Path],
    survey: SurveyFile,
    day: DayChoice | None = None,
    remembered: Remembered | None = None,
) -> LogPlan:
    """Find the log files and what they are, and make lines of them.

    Parameters
    ----------
    logs : sequence of str or Path
        Files, folders or patterns.
    survey : SurveyFile
    day : DayChoice, optional
        Only pings of this day are in scope.
    remembered : callable, optional
        What files are is asked of it.

    Raises
    ------
    InputError
        If a path matches nothing, or no file can be used.
    """
    found = _files(logs)
    probes: list[tuple[FileProbe, SurveyFile]] = []
    spans: dict[str, tuple[int, int] | None] = {}
    failed: list[InputFile] = []
    errors: list[InputError] = []
    for shown, path in found:
        own = survey.for_log(path)
        try:
            folder_values = _folder_values(path)
            look = partial(_looked_at, path, shown, own, folder_values, len(found) > 1)
            if remembered is None:
                found_probe, span = look()
            else:
                about = (shown, own.of_one_log(), folder_values, len(found) > 1)
                found_probe, span = remembered(path, about, look)
            probes.append((found_probe, own))
            spans[shown] = span
        except InputError as error:
            failed.append(InputFile(shown, error=str(error)))
            errors.append(error)
    if not probes:
        if len(errors) == 1:
            raise errors[0]
        raise InputError(
            f"None of the {len(errors)} files could be used.",
            found="; ".join(str(e) for e in errors)[:250],
        )
    lines: list[LineTask] = []
    by_source: dict[str, list[tuple[FileProbe, SurveyFile]]] = {"file": [], "column": [], "gap": []}
    for item in probes:
        by_source[item[1].lines.source].append(item)
    names = _line_names([p.shown for p, _ in by_source["file"]])
    of_files = [p for p, _ in by_source["file"]]
    met = met_before(of_files, [spans[p.shown] for p in of_files])
    for at, ((own_probe, _), name) in enumerate(zip(by_source["file"], names, strict=True)):
        part = FilePart(own_probe)
        if at in met:
            part = FilePart(own_probe, met=_stretch(met[at][1]), met_in=met[at][0])
        lines.append(LineTask(name, (own_probe.shown,), (part,), own_probe.size, day))
    for source in ("column", "gap"):
        lines += _split(by_source[source], source, day, failed)
    order = {shown: i for i, (shown, _) in enumerate(found)}
    lines.sort(key=lambda line: (order[line.files[0]], natural(line.name)))
    return LogPlan(tuple(lines), tuple(failed))


def _looked_at(
    path: Path, shown: str, survey: SurveyFile, folder_values: Mapping[str, str], several: bool
) -> tuple[FileProbe, tuple[int, int] | None]:
    """What a file is, and its first and last time if it is one of several that are lines by their names."""
    found = probe(path, shown, survey, folder_values)
    return found, time_span(found) if several and survey.lines.source == "file" else None


def _stretch(numbers: Integers) -> Stretch:
    """The rows of rising numbers."""
    breaks = np.flatnonzero(np.diff(numbers) != 1)
    firsts = numbers[np.concatenate([[0], breaks + 1])]
    lasts = numbers[np.concatenate([breaks, [len(numbers) - 1]])]
    return Stretch(tuple(zip(firsts.tolist(), lasts.tolist(), strict=True)))


def open_line(task: LineTask, survey: SurveyFile) -> OpenedLine:
    """Open a line; ``survey`` is the whole survey's, and what holds for this log is found from it."""
    return OpenedLine(task.name, task.parts, survey.for_log(task.parts[0].probe.path), task.day)


def natural(text: str) -> tuple[tuple[int, int, str], ...]:
    """A key that sorts numbers in texts by their size.

    Examples
    --------
    >>> sorted(["line10", "line9"], key=natural)
    ['line9', 'line10']
    """
    return tuple(_part_key(part) for part in re.split(r"([0-9]+)", text) if part)


def _part_key(part: str) -> tuple[int, int, str]:
    if "0" <= part[0] <= "9":
        # Length and digits sort a number by its size, however long it is.
        digits = part.lstrip("0")
        return 0, len(digits), digits
    return 1, 0, part.lower()


def stem(shown: str) -> str:
    """A file's name without its endings."""
    name = PurePosixPath(shown).name
    lowered = name.lower()
    for packed in PACKED_ENDINGS:
        if lowered.endswith(packed) and len(name) > len(packed):
            name = name[: -len(packed)]
            break
    for ending in LOG_ENDINGS:
        if name.lower().endswith(ending) and len(name) > len(ending):
            return name[: -len(ending)]
    return name


def _is_log(path: Path) -> bool:
    name = path.name.lower()
    if name.startswith((".", "~")):
        return False
    for packed in PACKED_ENDINGS:
        name = name.removesuffix(packed)
    return name.endswith(LOG_ENDINGS)


def _files(logs: Sequence[str | Path]) -> list[tuple[str, Path]]:
    """Each file once, with its name as the user wrote it, in natural order."""
    found: dict[Path, str] = {}
    for log in logs:
        text = str(log)
        path = Path(text)
        if path.is_dir():
            inside = sorted(
                (p for p in path.rglob("*") if p.is_file() and _is_log(p)),
                key=lambda p: natural(p.as_posix()),
            )
            if not inside:
                raise InputError(
                    "The folder holds no logs.",
                    where=text,
                    expected="files that end in " + ", ".join(LOG_ENDINGS),
                )
            matched = inside
        elif path.exists():
            matched = [path]
        elif glob.has_magic(text):
            matched = sorted(
                (Path(p) for p in glob.glob(text, recursive=True)),  # noqa: PTH207  # takes any pattern
                key=lambda p: natural(p.as_posix()),
            )
            matched = [p for p in matched if p.is_file()]
            if not matched:
                raise InputError(
                    "The pattern matches no file.", where=text, advice="Check the path."
                )
        else:
            raise InputError(
                "There is no such file or folder.", where=text, advice="Check the path."
            )
        for item in matched:
            found.setdefault(item.resolve(), item.as_posix())
    return sorted(
        ((shown, path) for path, shown in found.items()), key=lambda item: natural(item[0])
    )


def _folder_values(path: Path) -> dict[str, str]:
    """Values that folders' names give, as in ``line=7``."""
    values = {}
    for part in path.parts[:-1]:
        name, equals, value = part.partition("=")
        if equals and name in ("line", "channel"):
            values[name] = value
    return values


def _line_names(shown: Sequence[str]) -> list[str]:
    """Stems, or for stems that several files share the shortest path that tells them apart."""
    stems = [stem(s) for s in shown]
    names = []
    for text, short in zip(shown, stems, strict=True):
        twins = [s for s, other in zip(shown, stems, strict=True) if other == short and s != text]
        if not twins:
            names.append(short)
            continue
        parts = PurePosixPath(text).parts[:-1]
        for depth in range(1, len(parts) + 1):
            folder = parts[-depth:]
            if not any(PurePosixPath(t).parts[:-1][-depth:] == folder for t in twins):
                break
        else:
            folder = parts
        same_folder = [t for t in twins if PurePosixPath(t).parts[:-1] == parts]
        last = PurePosixPath(text).name if same_folder else short
        names.append(
            "/".join((*folder, last)) if not same_folder or len(twins) > len(same_folder) else last
        )
    return names


def _split(
    probes: Sequence[tuple[FileProbe, SurveyFile]],
    source: str,
    day: DayChoice | None,
    failed: list[InputFile],
) -> list[LineTask]:
    """Lines from a column or from gaps in time: each file is read once to see where they lie."""
    parts: dict[str, list[FilePart]] = {}
    names = Names()
    last_time, gaps = None, 0
    for item, own in probes:
        if (
            source == "column"
            and "line" not in item.roles
            and not any(r == "line" for r, _ in item.constants)
        ):
            failed.append(
                InputFile(
                    item.shown,
                    error=str(
                        InputError(
                            "Lines are to come from a column, but no column of lines is recognised.",
                            where=item.shown,
                            advice='Write line = "its name" under [columns], or from = "file" under [lines].',
                        )
                    ),
                )
            )
            continue
        reader = RowReader(item, names, frozenset(("line",)))
        firsts: list[int] = []
        labels: list[str] = []
        try:
            for rows in reader.batches():
                if not len(rows):
                    continue
                if source == "column":
                    assert rows.line is not None
                    here = np.array(names.line.names, dtype=object)[rows.line]
                else:
                    before = np.concatenate(
                        [[rows.time[0] if last_time is None else last_time], rows.time[:-1]]
                    )
                    jumps = np.cumsum((rows.time - before) > own.lines.gap * 1e9) + gaps
                    last_time, gaps = int(rows.time[-1]), int(jumps[-1])
                    here = np.array([f"line {j + 1}" for j in jumps.tolist()], dtype=object)
                begin = np.concatenate([[0], np.flatnonzero(here[1:] != here[:-1]) + 1])
                for a in begin.tolist():
                    if not labels or labels[-1] != here[a]:
                        firsts.append(int(rows.numbers[a]))
                        labels.append(str(here[a]))
        except InputError as error:
            failed.append(InputFile(item.shown, error=str(error)))
            continue
        if not labels:
            # no row can be used: a line of its own gives the account of its rows
            parts.setdefault(stem(item.shown), []).append(FilePart(item))
        for label, found in _spans(firsts, labels).items():
            part = FilePart(item, Stretch(found, _start(reader.starts, found[0][0])))
            parts.setdefault(label or "(no name)", []).append(part)
    lines = []
    for label, own_parts in parts.items():
        shown = tuple(p.probe.shown for p in own_parts)
        size = sum(p.probe.size for p in own_parts)
        lines.append(LineTask(label, shown, tuple(own_parts), size, day))
    return lines


def _spans(firsts: Sequence[int], labels: Sequence[str]) -> dict[str, tuple[tuple[int, int], ...]]:
    """Rows of each label, from where it begins to where another does: every row of the file belongs to one."""
    found: dict[str, list[tuple[int, int]]] = {}
    if not labels:
        return {}
    starts = [0, *firsts[1:]]
    for start, stop, label in zip(starts, [*firsts[1:], _BEYOND], labels, strict=True):
        found.setdefault(label, []).append((start, stop - 1))
    return {label: tuple(spans) for label, spans in found.items()}


_BEYOND = 1 << 62


def _start(starts: Sequence[tuple[int, int]], first: int) -> tuple[int, int]:
    """The last block that begins before a row."""
    return max((s for s in starts if s[1] < first), default=(0, 0))
