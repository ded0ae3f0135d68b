"""Which kept record is a line's: everything that its part of the findings and of the report depends on."""

from __future__ import annotations

import datetime as dt
import shutil
from collections.abc import Callable, Mapping, Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

from qa.fingerprints import fingerprint, of_program
from qa.kept import Content, Kept
from qa.model.cast import Cast
from qa.model.survey_file import SurveyFile
from qa.report import renumbered, write_text

if TYPE_CHECKING:
    from qa.job import LineJob, LineOutcome

CastOf = Callable[[SurveyFile], Cast | None]
_FIGURES, _PINGS, _PAGE, _FILE = "figures", "pings", "page", "file"


def contents(kept: Kept, paths: Sequence[Path], threads: int) -> dict[Path, Content]:
    """What each file holds; a file that cannot be read is left out, and is said when its line is read."""

    def content(path: Path) -> Content | None:
        try:
            return kept.content(path)
        except OSError:
            return None

    unique = list(dict.fromkeys(paths))
    with ThreadPoolExecutor(threads) as pool:
        found = zip(unique, pool.map(content, unique), strict=True)
        return {path: known for path, known in found if known is not None}


def line_key(
    job: LineJob,
    known: Mapping[Path, Content],
    cast_of: CastOf,
    named: dict[int, tuple[object, str]],
) -> str:
    """The key of a line's record; "" where a file's content is not known.

    It holds the program, the line's task (files, what their columns are, rows, day), the files' content, what the
    survey file says of this log, the sheet with its limits, the cast, and the user's own quantities. The name of the
    survey, its other parts and the line's number do not count. What lines of one part of the survey have in common is
    named once, and remembered in ``named``.
    """
    paths = [Path(part.probe.path) for part in job.task.parts]
    if not all(path in known for path in paths):
        return ""
    own = job.survey.for_log(paths[0])
    # The record itself is held, so that no other can come to stand at its place.
    if id(own) not in named:
        named[id(own)] = own, _in_common(job, own, cast_of)
    return fingerprint(named[id(own)][1], job.task, [known[path].sha256 for path in paths])


def _in_common(job: LineJob, own: SurveyFile, cast_of: CastOf) -> str:
    sheet = job.sheet.load(own)
    limits = [
        (x.name, x.text, str(x.unit), x.about, x.source, x.origin) for x in sheet.limits.values()
    ]
    return fingerprint(
        of_program(),
        own.of_one_log(),
        cast_of(own),
        (sheet.name, sheet.sha256, sheet.extends, list(sheet.rules), limits),
        None if job.sheet.python is None else job.sheet.python.sha256,
        job.folder is not None,
    )


def kept_page(kept: Kept, path: Path, inputs: bytes, make: Callable[[], str]) -> None:
    """Put a line's page to a path: one that was made from the same before, or a new one."""
    key = f"{_PAGE}-{fingerprint(of_program(), inputs)}"
    if kept.look(key, path.parent) is None:
        write_text(path, make())
        kept.store(key, _PAGE, {_PAGE: path})
    else:
        (path.parent / _PAGE).replace(path)


def remembered(kept: Kept, path: Path, about: tuple[object, ...], make: Callable[[], Any]) -> Any:
    """What was found out of a file and depends on it and on ``about`` alone, as long as the file stays as it is.

    A file is the same if its size and time of change are. With ``rehash`` it is looked at again in any case.
    """
    try:
        now = path.stat()
    except OSError:
        return make()
    here = Content("", now.st_size, now.st_mtime_ns)
    key = f"{_FILE}-{fingerprint(of_program(), path.resolve(), about)}"
    if not kept.rehash:
        before = kept.look(key)
        if before is not None and before[0] == here:
            return before[1]
    found = make()
    if here.settled(path):
        kept.store(key, (here, found))
    return found


def identity(key: str) -> str:
    """What the ids of a kept line's elements begin with: nothing that its name or its numbers could hold."""
    return f"L{key[:24]}"


def recall(job: LineJob, kept: Kept, key: str) -> LineOutcome | None:
    """A line's outcome as an earlier audit kept it, its files put into this audit's folder."""
    if job.folder is None:
        found: LineOutcome | None = kept.get(key)
        return None if found is None else replace(found, number=job.number)
    aside = Path(job.folder) / f"kept-{job.number:04d}"
    aside.mkdir()
    try:
        found = kept.get(key, aside)
        if found is None:
            return None
        if found.artifacts is not None:
            files = replace(found.artifacts, figures=aside / _FIGURES, pings=aside / _PINGS)
            found = replace(found, artifacts=files)
        return numbered(job, found, key)
    finally:
        shutil.rmtree(aside, ignore_errors=True)


def keep(
    job: LineJob, kept: Kept, key: str, outcome: LineOutcome, known: Mapping[Path, Content]
) -> LineOutcome:
    """Keep a line that was computed, if it will be the same another time; returns it with its number's own ids."""
    paths = [Path(part.probe.path) for part in job.task.parts]
    failed = outcome.finding.error is not None and outcome.in_scope
    # A log that reaches into the future has a note that it loses later.
    future = (outcome.finding.end or "") > dt.datetime.now(dt.UTC).isoformat()
    if not failed and not future and all(known[path].still(path) for path in paths):
        made = outcome.artifacts
        files = {} if made is None else {_FIGURES: made.figures, _PINGS: made.pings}
        kept.put(key, outcome, files)
    return numbered(job, outcome, key)


def numbered(job: LineJob, outcome: LineOutcome, key: str) -> LineOutcome:
    """A line's outcome under the number that its job has in this audit."""
    sections = tuple(
        replace(s, id=f"{job.number}.{s.id.rpartition('.')[2]}") for s in outcome.sections
    )
    made = outcome.artifacts
    if made is not None and job.folder is not None:
        made = renumbered(made, job.number, Path(job.folder), identity(key))
    return replace(outcome, number=job.number, sections=sections, artifacts=made)
