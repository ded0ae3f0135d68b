"""The job: logs in, findings and a report out.

Plan which rows of which files make which line; take each line through the engine, on its own; put the lines
together; write everything beside the target and move it into place.
"""

from __future__ import annotations

import hashlib
import json
import os
import shutil
import tempfile
import traceback
from collections.abc import Callable, Iterable, Iterator, Mapping, Sequence
from contextlib import ExitStack, contextmanager
from dataclasses import dataclass, replace
from functools import lru_cache, partial
from pathlib import Path
from typing import Any, Literal, NoReturn

import qa
from qa.engine.evaluate import evaluate_line
from qa.engine.sheets import RuleSheet, load_sheet
from qa.engine.user_quantities import UserPython, allowed_python, check_inputs, use_python
from qa.executors import (
    ClusterPool,
    ExecutorFactory,
    ProcessPool,
    held_to_threads,
    run_tasks,
    share_of_threads,
    threads_here,
)
from qa.ingest import MET_BEFORE, DayChoice, LineTask, open_line, plan_logs
from qa.ingest.casts import read_cast
from qa.kept import Content, Kept
from qa.kept_lines import (
    contents,
    identity,
    keep,
    kept_page,
    line_key,
    recall,
    remembered,
)
from qa.model.cast import Cast
from qa.model.errors import InputError, OutputError, PingworthyError
from qa.model.findings import (
    Assumption,
    Findings,
    InputFile,
    LineFinding,
    LineRule,
    RuleFinding,
    Section,
    Verdict,
)
from qa.model.log import FileAccount, RejectedRow
from qa.model.survey_file import SurveyFile, load_survey_file
from qa.report import LineArtifacts, write_line, write_outputs
from qa.unfinished import folder_beside

Pages = Literal["auto", "one", "many"]
Progress = Callable[[int, int, str], None]

OUTPUTS = (
    *("report.html", "findings.json", "sections.csv", "rerun.geojson", "pings.parquet"),
    *("rejected.csv", "lines", "data"),
)
KNOWN_BY = "findings.json"
"""What a folder that an audit wrote is known by."""
BIG_ENOUGH_TO_SHARE = 30_000_000
"""Bytes of logs from which on starting other processes pays."""


@dataclass(frozen=True, slots=True)
class SheetChoice:
    """Which sheet, from where, with which limits laid over it: small, so that it travels to a worker."""

    name: str
    base: str
    overrides: tuple[tuple[str, Any], ...]
    python: UserPython | None = None

    def absolute(self) -> SheetChoice:
        """The same with places that are the same from any working folder."""
        python = self.python and replace(self.python, path=self.python.path.absolute())
        return replace(self, base=str(Path(self.base).absolute()), python=python)

    def load(self, survey: SurveyFile) -> RuleSheet:
        """The sheet with the survey's limits; the user's own quantities are in use from here on."""
        use_python(self.python)
        return _loaded_sheet(
            self, json.dumps(survey.limits, sort_keys=True, default=str), str(survey.path or "")
        )(survey)


@lru_cache(maxsize=64)
def _loaded_sheet(choice: SheetChoice, limits: str, path: str) -> Callable[[SurveyFile], RuleSheet]:
    kept: list[RuleSheet] = []

    def load(survey: SurveyFile) -> RuleSheet:
        if not kept:
            kept.append(load_sheet(choice.name, survey, dict(choice.overrides), Path(choice.base)))
        return kept[0]

    return load


@dataclass(frozen=True, slots=True)
class LineJob:
    """All that a worker needs for one line."""

    number: int
    task: LineTask
    survey: SurveyFile
    sheet: SheetChoice
    folder: str | None
    identity: str = ""


@dataclass(frozen=True, slots=True)
class LineOutcome:
    """What a worker hands back: small, whatever the line's size."""

    number: int
    finding: LineFinding
    sections: tuple[Section, ...]
    assumptions: tuple[Assumption, ...]
    limit_ranges: Mapping[str, tuple[float, float]]
    accounts: tuple[FileAccount, ...]
    artifacts: LineArtifacts | None
    input_error: str | None = None
    in_scope: bool = True


Parcel = tuple[LineOutcome, bytes, bytes]
"""A line's outcome with its figures and pings, from a machine that writes none of this one's files."""


def audit(
    logs: Sequence[str | Path] | str | Path,
    survey: str | Path | SurveyFile | None = None,
    sheet: str | Path | None = None,
    out: str | Path | None = None,
    *,
    limits: Mapping[str, Any] | None = None,
    day: DayChoice | None = None,
    workers: int | None = None,
    require_assessed: bool = False,
    pages: Pages = "auto",
    progress: Progress | None = None,
    executor: ExecutorFactory | None = None,
    allow_python: bool = False,
    kept: Kept | None = None,
) -> Findings:
    """Audit the logs of a survey.

    Parameters
    ----------
    logs : path or sequence of paths
        Files, folders or globs.
    survey : path or SurveyFile, optional
        What is true of the survey.
    sheet : str or path, optional
        Rule sheet; beats the survey file's. Default "physics".
    out : path, optional
        Folder for the report and the files beside it; nothing is written without it.
    limits : mapping, optional
        Limits that override the sheet's and the survey file's, such as ``{"target_size": "0.5 m"}``.
    day : DayChoice, optional
        Only pings of this day.
    workers : int, optional
        Threads at work at once, in all: as many processes, if there are as many lines. With 1, or if left out and
        the logs are small, lines run in this process.
    require_assessed : bool
        Whether a rule that was not assessed counts towards the exit status.
    pages : "auto", "one" or "many"
        Whether lines stand in the report or on pages of their own.
    progress : callable, optional
        Called with lines done, lines in all and the name of the line just done.
    executor : callable, optional
        Makes any ``concurrent.futures`` executor to run lines on, such as :class:`qa.executors.ClusterPool`. Where
        its workers are other machines, they read the logs under the same paths.
    allow_python : bool
        Whether the Python file that the survey file names, if any, may be run.
    kept : Kept, optional
        Where lines computed are kept, and taken from where nothing that counts for them has changed.

    Returns
    -------
    Findings

    Raises
    ------
    PingworthyError
        If a sheet or survey file, or every log, cannot be used, or the results cannot be written.
    """
    paths = [logs] if isinstance(logs, str | Path) else list(logs)
    facts = (
        survey
        if isinstance(survey, SurveyFile)
        else load_survey_file(survey)
        if survey
        else SurveyFile()
    )
    choice = _sheet_choice(sheet, facts, limits or {}, allow_python)
    rules = choice.load(facts)
    check_inputs(rules)
    cast_of(facts)
    _check_parts(choice, facts)
    target = None if out is None else checked_target(Path(out))
    plan = plan_logs(paths, facts, day, None if kept is None else partial(remembered, kept))
    with _folder_beside(target) as folder:
        survey_there, sheet_there = _absolute(facts), choice.absolute()
        jobs = [
            LineJob(
                number, task, survey_there, sheet_there, None if folder is None else str(folder)
            )
            for number, task in enumerate(plan.lines, start=1)
        ]
        budget = workers or os.cpu_count() or 1
        files = [Path(part.probe.path) for task in plan.lines for part in task.parts]
        known = {} if kept is None else contents(kept, files, budget)
        outcomes = _run(jobs, workers, progress, executor, kept, known)
        findings = _together(
            facts, choice, rules, plan.inputs, outcomes, day, require_assessed, known
        )
        if folder is not None and target is not None:
            artifacts = [o.artifacts for o in outcomes if o.artifacts is not None]
            put_page = None if kept is None else partial(kept_page, kept)
            write_outputs(findings, artifacts, _rejected(outcomes), folder, pages, put_page)
            _move_into_place(folder, target)
    return findings


def _sheet_choice(
    sheet: str | Path | None, survey: SurveyFile, limits: Mapping[str, Any], allow_python: bool
) -> SheetChoice:
    if sheet:
        name, base = str(sheet), Path.cwd()
    else:
        name, base = survey.sheet or "physics", survey.folder
    python = allowed_python(survey, allow_python)
    return SheetChoice(name, str(base), tuple(limits.items()), python)


def _absolute(survey: SurveyFile) -> SurveyFile:
    """The survey file with places that are the same from any working folder."""
    return replace(
        survey,
        path=None if survey.path is None else survey.path.absolute(),
        profile=None if survey.profile is None else survey.profile.absolute(),
    )


def _check_parts(choice: SheetChoice, survey: SurveyFile) -> None:
    """Limits and casts of every part are checked before any log is read."""
    for patterns, _ in survey.parts:
        part = survey.for_log(survey.folder / patterns[0])
        choice.load(part)
        cast_of(part)


def cast_of(survey: SurveyFile) -> Cast | None:
    """The sound speed cast that the survey file names, read once as long as the file stays as it is."""
    if survey.profile is None:
        return None
    try:
        about = survey.profile.stat()
    except OSError:
        return read_cast(survey.profile)
    return _read_cast(survey.profile, (about.st_size, about.st_mtime_ns))


@lru_cache(maxsize=8)
def _read_cast(path: Path, stamp: tuple[int, int]) -> Cast:
    return read_cast(path)


# Lines as tasks


def run_line(job: LineJob) -> LineOutcome:
    """One line, from its files to its findings and its part of the report."""
    try:
        log = open_line(job.task, job.survey)
        survey = log.survey
        if not len(log.ping_table()):
            return _without_pings(job, log.accounts())
        # A user's own functions are not asked to stand being run by several threads at once.
        threads = 1 if job.sheet.python else threads_here()
        result = evaluate_line(
            log,
            survey,
            job.sheet.load(survey),
            job.task.files,
            cast=cast_of(survey),
            threads=threads,
        )
    except PingworthyError as error:
        return _failed(job, str(error), str(error))
    except Exception as error:
        # One line's failure is reported with its line; the others finish.
        place = traceback.extract_tb(error.__traceback__)[-1]
        text = f"{type(error).__name__}: {error} ({Path(place.filename).name}:{place.lineno})"
        return _failed(job, text, None)
    numbered = tuple(
        replace(s, id=f"{job.number}.{i}") for i, s in enumerate(result.sections, start=1)
    )
    result.sections = numbered
    accounts = log.accounts()
    notes = tuple(dict.fromkeys(n for a in accounts for n in a.notes))
    result.finding = replace(result.finding, notes=notes)
    artifacts = (
        None
        if job.folder is None
        else write_line(result, Path(job.folder), job.number, job.identity)
    )
    return LineOutcome(
        job.number,
        result.finding,
        numbered,
        result.assumptions,
        result.limit_ranges,
        accounts,
        artifacts,
    )


def _without_pings(job: LineJob, accounts: tuple[FileAccount, ...]) -> LineOutcome:
    """A line none of whose rows is in scope is left out, and so is one that is a copy of another; one whose rows were
    all rejected is an error of its files."""
    rejected = sum(a.rows_rejected for a in accounts)
    copy = set().union(*(a.reasons for a in accounts)) == {MET_BEFORE}
    if not rejected or copy:
        return replace(_failed(job, "no ping is in scope", None), accounts=accounts, in_scope=False)
    reasons = sorted(
        {r: n for a in accounts for r, n in a.reasons.items()}.items(), key=lambda item: -item[1]
    )
    error = InputError(
        "No row could be used.",
        where=", ".join(job.task.files),
        found="; ".join(f"{reason} ({count} rows)" for reason, count in reasons[:5]),
        advice="Check the columns and their units with the columns command.",
    )
    return replace(_failed(job, str(error), str(error)), accounts=accounts)


def _failed(job: LineJob, error: str, input_error: str | None) -> LineOutcome:
    finding = LineFinding(
        line=job.task.name,
        kind="",
        channels=(),
        files=job.task.files,
        pings=0,
        soundings=0,
        start=None,
        end=None,
        length=None,
        duration=None,
        verdict="not assessed",
        error=error,
    )
    return LineOutcome(job.number, finding, (), (), {}, (), None, input_error)


def _run(
    jobs: Sequence[LineJob],
    workers: int | None,
    progress: Progress | None,
    executor: ExecutorFactory | None,
    kept: Kept | None,
    known: Mapping[Path, Content],
) -> list[LineOutcome]:
    """Every job's outcome, in the order of the jobs: kept ones first, then those that are computed."""
    outcomes: dict[int, LineOutcome] = {}

    def done(job: LineJob, outcome: LineOutcome) -> None:
        outcomes[job.number] = outcome
        if progress is not None:
            progress(len(outcomes), len(jobs), job.task.name)

    keys: dict[int, str] = {}
    named: dict[int, tuple[object, str]] = {}
    rest = []
    for job in jobs:
        key = "" if kept is None else line_key(job, known, cast_of, named)
        if kept is not None and key:
            before = recall(job, kept, key)
            if before is not None:
                done(job, before)
                continue
            keys[job.number] = key
            job = replace(job, identity=identity(key))
        rest.append(job)
    for job, outcome in _outcomes(rest, workers, executor):
        if kept is not None and job.number in keys:
            outcome = keep(job, kept, keys[job.number], outcome, known)
        done(job, outcome)
    if kept is not None:
        kept.trim()
    return [outcomes[job.number] for job in jobs]


def _outcomes(
    jobs: Sequence[LineJob], workers: int | None, executor: ExecutorFactory | None
) -> Iterator[tuple[LineJob, LineOutcome]]:
    """Each job with its outcome, as they are done."""
    if executor is None:
        budget = workers or os.cpu_count() or 1
        processes, threads = share_of_threads(budget, len(jobs))
        small = sum(job.task.bytes for job in jobs) <= BIG_ENOUGH_TO_SHARE
        if processes == 1 or (workers is None and small):
            with held_to_threads(budget):
                for job in jobs:
                    yield job, run_line(job)
            return
        executor = ProcessPool(processes, threads)
    if isinstance(executor, ClusterPool):
        for job, (outcome, figures, pings) in run_tasks(run_line_away, jobs, executor, _lost_away):
            yield job, _arrived(job, outcome, figures, pings)
        return
    yield from run_tasks(run_line, jobs, executor, _lost)


def _lost(job: LineJob, why: str) -> LineOutcome:
    return _failed(job, why, None)


def run_line_away(job: LineJob) -> Parcel:
    """One line, on a machine that need not share a folder for outputs: what is written comes along as bytes."""
    if job.folder is None:
        return run_line(job), b"", b""
    with tempfile.TemporaryDirectory(prefix="pingworthy-") as folder:
        outcome = run_line(replace(job, folder=folder))
        made = outcome.artifacts
        if made is None:
            return outcome, b"", b""
        return outcome, made.figures.read_bytes(), made.pings.read_bytes()


def _lost_away(job: LineJob, why: str) -> Parcel:
    return _lost(job, why), b"", b""


def _arrived(job: LineJob, outcome: LineOutcome, figures: bytes, pings: bytes) -> LineOutcome:
    """The outcome of a line from another machine, its files put where they would have been written here."""
    if outcome.artifacts is None or job.folder is None:
        return outcome
    made = outcome.artifacts.moved(Path(job.folder))
    for path, content in ((made.figures, figures), (made.pings, pings)):
        path.parent.mkdir(parents=True, exist_ok=True)
        path.write_bytes(content)
    return replace(outcome, artifacts=made)


# Lines put together


def _together(
    survey: SurveyFile,
    choice: SheetChoice,
    sheet: RuleSheet,
    failed: Sequence[InputFile],
    outcomes: Sequence[LineOutcome],
    day: DayChoice | None,
    require_assessed: bool,
    known: Mapping[Path, Content],
) -> Findings:
    inputs = _inputs(failed, outcomes, known)
    outcomes = [o for o in outcomes if o.in_scope]
    lines = tuple(o.finding for o in outcomes)
    if not any(line.pings for line in lines):
        _refuse(inputs, outcomes, day)
    rules = tuple(_rule(sheet, rule, outcomes) for rule in sheet.rules)
    verdict: Verdict = "not assessed"
    if any(line.verdict == "out of spec" for line in lines):
        verdict = "out of spec"
    elif any(line.verdict == "in spec" for line in lines):
        verdict = "in spec"
    findings = Findings(
        tool={"name": "pingworthy", "version": qa.__version__},
        survey={
            "name": survey.name,
            "file": None if survey.path is None else survey.path.name,
            "sha256": survey.sha256 or None,
            "depth_from": survey.depth_from,
            "vessel_time_zone": survey.vessel_time_zone,
            "day": None if day is None else str(day.date),
            "stated": dict(sorted(survey.stated.items())),
            "python": None
            if choice.python is None
            else {"file": choice.python.path.name, "sha256": choice.python.sha256},
            "parts": [
                {"logs": list(patterns), "states": _flat(tables)}
                for patterns, tables in survey.parts
            ],
        },
        sheet={
            "name": sheet.name,
            "title": sheet.title,
            "about": sheet.about.strip(),
            "sha256": sheet.sha256,
            "extends": list(sheet.extends),
        },
        verdict=verdict,
        inputs=inputs,
        assumptions=_assumptions(outcomes),
        limits=tuple(
            {
                "name": limit.name,
                "text": limit.text or None,
                "unit": str(limit.unit),
                "about": limit.about,
                "source": limit.source,
                "origin": limit.origin,
            }
            for limit in sheet.limits.values()
        ),
        rules=rules,
        lines=lines,
        sections=tuple(s for o in outcomes for s in o.sections),
        notes=()
        if choice.python is None
        else (
            f"Some quantities are computed by the survey's own Python file, {choice.python.path.name} "
            f"(SHA-256 {choice.python.sha256}); what it computes is for its author to answer.",
        ),
    )
    return replace(findings, exit_status=_exit_status(findings, outcomes, require_assessed))


def _refuse(
    inputs: Sequence[InputFile], outcomes: Sequence[LineOutcome], day: DayChoice | None
) -> NoReturn:
    """No line has a ping: say why."""
    errors = list(dict.fromkeys(i.error for i in inputs if i.error))
    failures = [o.finding.error for o in outcomes if o.finding.error and not o.input_error]
    if failures:
        raise RuntimeError(failures[0])
    if not errors and day is not None:
        raise InputError(
            f"No ping is of {day.date} ({day.time_zone}).",
            where=", ".join(i.path for i in inputs)[:300],
            advice="Check the day, and time_zone under [vessel] in the survey file.",
        )
    raise InputError(
        errors[0] if len(errors) == 1 else f"None of the {len(inputs)} files could be used.",
        found="; ".join(errors)[:2000] if len(errors) > 1 else "",
    )


def _flat(tables: Mapping[str, Any]) -> dict[str, Any]:
    flat: dict[str, Any] = {}
    for name, table in tables.items():
        if isinstance(table, Mapping):
            flat.update(
                {
                    f"{name}.{key}": value
                    for key, value in table.items()
                    if not isinstance(value, Mapping)
                }
            )
        else:
            flat[name] = table
    return flat


def _exit_status(
    findings: Findings, outcomes: Sequence[LineOutcome], require_assessed: bool
) -> int:
    if any(o.finding.error and not o.input_error for o in outcomes):
        return 3
    if any(i.error for i in findings.inputs):
        return 2
    if findings.verdict == "out of spec":
        return 1
    if require_assessed:
        for line in findings.lines:
            if any(r.verdict == "not assessed" and r.severity == "out of spec" for r in line.rules):
                return 1
    return 0


def _inputs(
    failed: Sequence[InputFile], outcomes: Sequence[LineOutcome], known: Mapping[Path, Content]
) -> tuple[InputFile, ...]:
    found: dict[str, InputFile] = {}
    for outcome in outcomes:
        for account in outcome.accounts:
            before = found.get(account.path) or InputFile(account.path)
            found[account.path] = replace(
                before,
                rows_read=before.rows_read + account.rows_read,
                rows_used=before.rows_used + account.rows_used,
                rows_rejected=before.rows_rejected + account.rows_rejected,
                rows_out_of_scope=before.rows_out_of_scope + account.rows_out_of_scope,
                reasons=_added(before.reasons, account.reasons),
                missing=_added(before.missing, account.missing),
                notes=tuple(dict.fromkeys((*before.notes, *account.notes))),
            )
        if outcome.input_error:
            for path in outcome.finding.files:
                found[path] = replace(found.get(path) or InputFile(path), error=outcome.input_error)
    for item in failed:
        found[item.path] = item
    return tuple(_hashed(item, known) for _, item in sorted(found.items()))


def _added(first: Mapping[str, int], second: Mapping[str, int]) -> dict[str, int]:
    return {k: first.get(k, 0) + second.get(k, 0) for k in sorted({*first, *second})}


def _hashed(item: InputFile, known: Mapping[Path, Content]) -> InputFile:
    path = Path(item.path)
    if item.sha256 is not None or not path.is_file():
        return item
    content = known.get(path.resolve())
    if content is not None and content.still(path):
        return replace(item, sha256=content.sha256, bytes=content.bytes)
    try:
        with path.open("rb") as stream:
            return replace(
                item,
                sha256=hashlib.file_digest(stream, "sha256").hexdigest(),
                bytes=path.stat().st_size,
            )
    except OSError:
        return item


def _rejected(outcomes: Sequence[LineOutcome]) -> Iterable[RejectedRow]:
    for outcome in outcomes:
        for account in outcome.accounts:
            yield from account.rejected_rows


def _assumptions(outcomes: Sequence[LineOutcome]) -> tuple[Assumption, ...]:
    merged: dict[tuple[str, str, str], list[str]] = {}
    for outcome in outcomes:
        for found in outcome.assumptions:
            merged.setdefault((found.name, found.value, found.reason), []).extend(found.lines)
    return tuple(
        Assumption(name, value, reason, tuple(lines))
        for (name, value, reason), lines in sorted(merged.items())
    )


def _rule(sheet: RuleSheet, name: str, outcomes: Sequence[LineOutcome]) -> RuleFinding:
    """One rule over all lines; its worst value is that of the line whose margin is least."""
    rule = sheet.rules[name]
    found: list[LineRule] = [r for o in outcomes for r in o.finding.rules if r.id == name]
    assessed = [r for r in found if r.pings_assessed]
    out = [r for r in found if r.verdict == "out of spec"]
    verdict: Verdict = "out of spec" if out else "in spec" if assessed else "not assessed"
    with_margin = [r for r in assessed if r.margin is not None]
    missed = [r for r in with_margin if r.pings_missed]
    worst = min(missed or with_margin, key=lambda r: r.margin or 0.0, default=None)
    ranges = [o.limit_ranges[name] for o in outcomes if name in o.limit_ranges]
    not_assessed = [r for r in found if not r.pings_assessed]
    unit = next((r.unit for r in found if r.unit), "")
    if not unit and rule.requirement is not None and rule.requirement.comparisons:
        unit = str(rule.requirement.comparisons[0].left.unit)
    return RuleFinding(
        id=name,
        title=rule.title,
        verdict=verdict,
        reason=_rule_reason(rule, found, out, not_assessed, len(outcomes)),
        severity=rule.severity,
        require=rule.text,
        allow=rule.allow,
        limit=worst.limit if worst else None,
        limits=(min(a for a, _ in ranges), max(b for _, b in ranges)) if ranges else None,
        worst=worst.worst if worst else None,
        unit=unit,
        margin=worst.margin if worst else None,
        pings_assessed=sum(r.pings_assessed for r in found),
        pings_missed=sum(r.pings_missed for r in found),
        pings_not_assessed=sum(r.pings_not_assessed for r in found),
        pings_exempt=sum(r.pings_exempt for r in found),
        pings_stray=sum(r.pings_stray for r in found),
        lines_in_spec=sum(r.verdict == "in spec" for r in found),
        lines_out_of_spec=len(out),
        lines_not_assessed=len(not_assessed),
        lines_exempt=sum(1 for o in outcomes if not o.finding.error) - len(found),
        metres_assessed=_sum(r.metres_assessed for r in found),
        metres_missed=_sum(r.metres_missed for r in found),
        source=rule.source,
        why=rule.why,
        sheet=" → ".join((rule.sheet, *rule.changed_by)),
        clause=rule.clause,
    )


def _rule_reason(
    rule: Any,
    found: Sequence[LineRule],
    out: Sequence[LineRule],
    unassessed: Sequence[LineRule],
    lines: int,
) -> str:
    if not found:
        return "it applies to none of these lines"
    reasons = list(dict.fromkeys(r.reason for r in unassessed if r.reason))
    parts = []
    if out:
        parts.append(
            f"out of spec on {len(out)} of {len(found)} line{'s' if len(found) > 1 else ''}"
        )
    if unassessed:
        where = (
            ""
            if len(unassessed) == len(found)
            else f"not assessed on {len(unassessed)} of {len(found)} lines: "
        )
        parts.append(where + "; ".join(reasons[:3]) + ("; and others" if len(reasons) > 3 else ""))
    return "; ".join(parts)


def _sum(values: Iterable[float | None]) -> float | None:
    known = [v for v in values if v is not None]
    return sum(known) if known else None


# Where the results go


def checked_target(target: Path, written: str = KNOWN_BY) -> Path:
    """The target, if it is free or holds what an earlier run wrote; else one clear error."""
    if target.exists() and not target.is_dir():
        raise OutputError(
            "The output is not a folder.", where=str(target), advice="Name a folder with --out."
        )
    if target.is_dir() and any(target.iterdir()) and not is_earlier_run(target, written):
        raise OutputError(
            "The folder holds something else.",
            where=str(target),
            expected="an empty or new folder, or that of an earlier run",
            advice="Name another folder with --out.",
        )
    return target


def is_earlier_run(folder: Path, written: str) -> bool:
    """Whether a folder holds what this program wrote."""
    try:
        with (folder / written).open(encoding="utf-8") as stream:
            return "pingworthy" in stream.read(400)
    except OSError:
        return False


@contextmanager
def _folder_beside(target: Path | None) -> Iterator[Path | None]:
    """A folder to write into, if anything is to be written."""
    if target is None:
        yield None
        return
    with ExitStack() as stack:
        try:
            folder = stack.enter_context(folder_beside(target))
        except OSError as error:
            raise OutputError(
                "The results cannot be written there.",
                where=str(target),
                found=error.strerror or str(error),
            ) from None
        yield folder


def _move_into_place(folder: Path, target: Path) -> None:
    """Replace an earlier run's files; its findings, which it is known by, are there at every moment."""
    try:
        target.mkdir(parents=True, exist_ok=True)
        (folder / KNOWN_BY).replace(target / KNOWN_BY)
        for name in OUTPUTS:
            old = target / name
            if old.is_dir():
                shutil.rmtree(old)
            elif old.exists() and name != KNOWN_BY:
                old.unlink()
        for item in sorted(folder.iterdir()):
            if item.name in OUTPUTS:
                item.replace(target / item.name)
    except OSError as error:
        raise OutputError(
            "The results cannot be moved into place.",
            where=str(target),
            found=error.strerror or str(error),
            advice="Close programs that have files of that folder open.",
        ) from None
