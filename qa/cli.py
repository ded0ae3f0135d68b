"""The commands. No logic here: each reads its options, calls the job, prints what came of it."""

from __future__ import annotations

import sys
from collections.abc import Callable
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

import qa
from qa.model.errors import PingworthyError

if TYPE_CHECKING:
    from qa.ingest import DayChoice
    from qa.kept import Kept
    from qa.model.findings import Findings

app = typer.Typer(
    name="pingworthy",
    help="Audits the ping logs of a finished sonar survey.\n\n"
    "A screening aid: it makes no statement on the safety of navigation. Acceptance is for the surveyor in charge, "
    "the contract and the authority.",
    no_args_is_help=True,
    add_completion=False,
    pretty_exceptions_enable=False,
    rich_markup_mode=None,
)

Logs = Annotated[
    list[str], typer.Argument(help="Log files, folders or patterns.", show_default=False)
]
Survey = Annotated[
    Path | None, typer.Option("--survey", help="Survey file (TOML).", show_default=False)
]
Sheet = Annotated[
    str | None,
    typer.Option(
        "--sheet", help="Rule sheet: a shipped one's name, or a path.", show_default=False
    ),
]
Out = Annotated[Path, typer.Option("--out", help="Folder for the report and the files beside it.")]
Limits = Annotated[
    list[str] | None,
    typer.Option(
        "--set", help="Override a limit, as in --set target_size=0.5m.", show_default=False
    ),
]
Day = Annotated[
    str | None,
    typer.Option(
        "--day", help='Only this day on board: a date, "today" or "yesterday".', show_default=False
    ),
]
Workers = Annotated[
    int | None,
    typer.Option(
        "--workers",
        min=1,
        help="Threads at work at once, in all.",
        show_default="as many as the machine runs",
    ),
]
Cluster = Annotated[
    str | None,
    typer.Option(
        "--cluster",
        metavar="ADDRESS",
        help="Compute on the workers of a Dask scheduler, as in tcp://10.0.0.5:8786; they read the logs under the same paths.",
        show_default=False,
    ),
]
KeepIn = Annotated[
    Path | None,
    typer.Option(
        "--keep-in",
        help="Folder in which computed lines are kept. [default: PINGWORTHY_KEPT, or the user's folder for caches]",
        show_default=False,
    ),
]
NoKeep = Annotated[
    bool, typer.Option("--no-keep", help="Compute every line, and keep none for another time.")
]
Rehash = Annotated[
    bool,
    typer.Option(
        "--rehash",
        help="Tell unchanged logs by their content, not by their size and time of change.",
    ),
]
RequireAssessed = Annotated[
    bool,
    typer.Option(
        "--require-assessed",
        help="Count rules that were not assessed as out of spec in the exit status.",
    ),
]
PagesChoice = Annotated[
    str,
    typer.Option("--pages", help="Lines in the report or on their own pages: auto, one or many."),
]
AllowPython = Annotated[
    bool,
    typer.Option(
        "--allow-python",
        help="Run the Python file of quantities that the survey file names. Read it first: it is a program.",
    ),
]
Quiet = Annotated[bool, typer.Option("--quiet", help="Print nothing but errors.")]


def _version(asked: bool) -> None:
    if asked:
        typer.echo(f"pingworthy {qa.__version__}")
        raise typer.Exit


@app.callback()
def _root(
    version: Annotated[
        bool, typer.Option("--version", callback=_version, is_eager=True, help="Print the version.")
    ] = False,
) -> None:
    """Audits the ping logs of a finished sonar survey."""


@app.command()
def audit(
    logs: Logs,
    survey: Survey = None,
    sheet: Sheet = None,
    out: Out = Path("pingworthy-audit"),
    limits: Limits = None,
    day: Day = None,
    workers: Workers = None,
    cluster: Cluster = None,
    keep_in: KeepIn = None,
    no_keep: NoKeep = False,
    rehash: Rehash = False,
    require_assessed: RequireAssessed = False,
    pages: PagesChoice = "auto",
    allow_python: AllowPython = False,
    quiet: Quiet = False,
) -> None:
    """Audit logs: which stretches of which lines are out of spec, why, and what to set for the re-run.

    Exit status: 0 nothing out of spec, 1 something is, 2 an input could not be used, 3 an error of the program.
    """
    _audit(
        list(logs),
        *(survey, sheet, out, limits, day, workers, require_assessed, pages, quiet, allow_python),
        kept=_kept(keep_in, no_keep, rehash),
        cluster=cluster,
    )


@app.command()
def demo(
    out: Out = Path("pingworthy-demo"),
    workers: Workers = None,
    quiet: Quiet = False,
) -> None:
    """Audit the shipped sample: a made-up survey with known faults. Exit status 0 when it ran."""
    from qa.model.shipped import shipped

    folder = shipped("sample_logs")
    logs = [str(folder / name) for name in ("multibeam", "side_scan", "single_beam")]
    try:
        _audit(logs, folder / "survey.toml", None, out, None, None, workers, False, "auto", quiet)
    except typer.Exit as ended:
        # The sample has faults on purpose, and finding them is what the demo shows.
        if ended.exit_code != 1:
            raise


@app.command()
def kept(
    keep_in: KeepIn = None,
    clear: Annotated[bool, typer.Option("--clear", help="Remove everything that is kept.")] = False,
) -> None:
    """Where computed lines are kept so that unchanged ones need not be computed again, how many, and their size."""
    from qa.kept import Kept, checked_folder, kept_folder

    held = Kept(checked_folder(kept_folder(keep_in)))
    records, size = held.size()
    typer.echo(f"Folder: {held.folder}")
    typer.echo(f"Lines kept: {records}")
    typer.echo(f"Size: {size / 1e6:.1f} MB, at most {held.budget / 1e6:.0f} MB after an audit")
    if clear:
        typer.echo(f"Removed: {held.clear() / 1e6:.1f} MB")


@app.command()
def compare(
    before: Annotated[Path, typer.Argument(help="Folder of the earlier audit.")],
    after: Annotated[Path, typer.Argument(help="Folder of the audit of the re-run.")],
    out: Out = Path("pingworthy-compare"),
    within: Annotated[
        float,
        typer.Option("--within", min=0.1, help="Metres within which ground counts as the same."),
    ] = 10.0,
    quiet: Quiet = False,
) -> None:
    """What a re-run mended, what remains and what is new, matched by position.

    Exit status: 0 everything is mended and nothing is new, 1 otherwise.
    """
    from qa.job import checked_target
    from qa.report.compare import compare_audits, summary

    result = compare_audits(before, after, checked_target(out, "compare.json"), within)
    if not quiet:
        typer.echo(summary(result))
        typer.echo(f"Page: {out / 'compare.html'}")
    open_still = any(m.outcome != "mended" for m in result.matched) or bool(result.new)
    raise typer.Exit(1 if open_still else 0)


@app.command()
def columns(
    logs: Logs,
    survey: Survey = None,
    sheet: Sheet = None,
    write: Annotated[
        Path | None,
        typer.Option("--write", help="Write a survey file to start from.", show_default=False),
    ] = None,
    allow_python: AllowPython = False,
    quiet: Quiet = False,
) -> None:
    """What is recognised in logs, what is missing, and which rules that keeps from being assessed.

    Exit status: 0 every log could be used, 2 otherwise.
    """
    from qa.survey_start import describe, new_file

    if write is not None:
        new_file(write)
    found = describe(list(logs), survey, sheet, allow_python)
    if not quiet:
        typer.echo(found.text())
    if write is not None:
        found.write(write)
        if not quiet:
            typer.echo(f"Survey file to start from: {write}")
    raise typer.Exit(2 if found.description.failed else 0)


LogOf = Annotated[
    Path | None,
    typer.Option(
        "--log", help="The log whose [[part]] of the survey file counts.", show_default=False
    ),
]


@app.command()
def rules(
    sheet: Sheet = None,
    survey: Survey = None,
    limits: Limits = None,
    log: LogOf = None,
    allow_python: AllowPython = False,
) -> None:
    """Every rule of a sheet: what it requires, its limits and where they come from."""
    from qa.rule_pages import rules_text

    typer.echo(rules_text(sheet, survey, _overrides(limits or []), log, _width(), allow_python))


@app.command()
def explain(
    name: Annotated[str, typer.Argument(help="A rule, a limit or a quantity.")],
    values: Annotated[
        list[str] | None,
        typer.Argument(
            metavar="[NAME=VALUE]…",
            help="Values to work it out for, as in speed=4kt.",
            show_default=False,
        ),
    ] = None,
    sheet: Sheet = None,
    survey: Survey = None,
    depth: Annotated[
        str | None,
        typer.Option(
            "--depth", help="Depth to work limits out for, as in 37m.", show_default=False
        ),
    ] = None,
    limits: Limits = None,
    log: LogOf = None,
    allow_python: AllowPython = False,
) -> None:
    """A rule, limit or quantity in full: what it checks, why, what to do, formula, inputs, units, source."""
    from qa.rule_pages import explain_text

    given = _overrides(values or [], "NAME=VALUE")
    more = (_overrides(limits or []), log, _width(), allow_python)
    typer.echo(explain_text(name, sheet, survey, depth, given, *more))


@app.command()
def check(
    files: Annotated[
        list[Path] | None,
        typer.Argument(help="Rule sheets or survey files.", show_default=False),
    ] = None,
    schemas: Annotated[
        bool,
        typer.Option("--schemas", help="Print where the JSON Schemas for editors lie."),
    ] = False,
    allow_python: AllowPython = False,
    quiet: Quiet = False,
) -> None:
    """Whether rule sheets and survey files are valid: one message for each mistake.

    Exit status: 0 all are valid, 2 otherwise.
    """
    from qa.checking import check_file, schema_paths

    if schemas:
        for path in schema_paths():
            typer.echo(str(path))
    elif not files:
        raise PingworthyError("No file to check.", where="check", expected="pingworthy check FILE…")
    wrong = False
    for file in files or []:
        found = check_file(file, allow_python)
        wrong = wrong or bool(found.mistakes)
        if found.mistakes or not quiet:
            typer.echo(str(found), err=bool(found.mistakes))
    raise typer.Exit(2 if wrong else 0)


@app.command()
def settings(
    survey: Survey = None,
    sheet: Sheet = None,
    depth: Annotated[
        str | None,
        typer.Option("--depth", help="Depths to work at, as in 10m..40m.", show_default=False),
    ] = None,
    hold: Annotated[
        list[str] | None,
        typer.Option(
            "--hold", help="A setting that stays, as in --hold speed=4kt.", show_default=False
        ),
    ] = None,
    limits: Limits = None,
    allow_python: AllowPython = False,
) -> None:
    """Which settings of the stated sonar satisfy a sheet, or which of its rules conflict.

    Exit status: 0 some settings satisfy everything, 1 none do, 2 something needed is not stated.
    """
    from qa.settings import asked_for, text

    held = _overrides(hold or [], "--hold")
    answer = asked_for(survey, sheet, depth, held, _overrides(limits or []), allow_python)
    typer.echo(text(answer))
    raise typer.Exit(0 if answer.satisfied else 1)


def _width() -> int:
    import shutil

    return shutil.get_terminal_size((96, 24)).columns


def _audit(
    logs: list[str],
    survey: Path | None,
    sheet: str | None,
    out: Path,
    limits: list[str] | None,
    day: str | None,
    workers: int | None,
    require_assessed: bool,
    pages: str,
    quiet: bool,
    allow_python: bool = False,
    kept: Kept | None = None,
    cluster: str | None = None,
) -> None:
    from qa.executors import ClusterPool
    from qa.job import audit as run
    from qa.model.survey_file import load_survey_file
    from qa.report import summary

    if cluster is not None and workers is not None:
        raise PingworthyError(
            "A cluster has its own workers.",
            where="--workers",
            advice="Leave --workers or --cluster out.",
        )
    if pages not in ("auto", "one", "many"):
        raise PingworthyError(
            "Not a way to lay out pages.",
            where="--pages",
            found=pages,
            expected="auto, one or many",
        )
    facts = load_survey_file(survey) if survey else None
    zone = facts.vessel_time_zone if facts else "UTC"
    with _Progress(quiet) as progress:
        findings: Findings = run(
            logs,
            facts,
            sheet,
            out,
            limits=_overrides(limits or []),
            day=_day(day, zone),
            workers=workers,
            require_assessed=require_assessed,
            pages=pages,  # type: ignore[arg-type]  # checked above
            progress=progress,
            allow_python=allow_python,
            kept=kept,
            executor=None if cluster is None else ClusterPool(cluster),
        )
    if kept is not None and not quiet:
        if kept.taken:
            typer.echo(f"{kept.taken} lines unchanged, taken from {kept.folder}", err=True)
        if kept.trouble:
            typer.echo(f"Lines are not kept for another time: {kept.trouble}", err=True)
    if not quiet:
        typer.echo(summary(findings))
        typer.echo(f"Report: {out / 'report.html'}")
    for item in findings.inputs:
        if item.error:
            typer.echo(f"Not used: {item.error}", err=True)
    for line in findings.lines:
        if line.error and findings.exit_status == 3:
            typer.echo(f"Line {line.line} failed: {line.error}", err=True)
    raise typer.Exit(findings.exit_status)


def _kept(keep_in: Path | None, no_keep: bool, rehash: bool) -> Kept | None:
    from qa.kept import Kept, checked_folder, kept_folder

    if no_keep:
        if keep_in is not None or rehash:
            raise PingworthyError(
                "Nothing is kept with --no-keep.",
                where="--keep-in" if keep_in is not None else "--rehash",
                advice="Leave one of the two out.",
            )
        return None
    return Kept(checked_folder(kept_folder(keep_in)), rehash=rehash)


def _overrides(texts: list[str], where: str = "--set") -> dict[str, str]:
    found = {}
    for text in texts:
        name, equals, value = text.partition("=")
        if not equals or not name.strip() or not value.strip():
            raise PingworthyError(
                "Not a name with a value.", where=where, found=text, expected="target_size=0.5m"
            )
        found[name.strip()] = value.strip()
    return found


def _day(text: str | None, zone: str) -> DayChoice | None:
    if text is None:
        return None
    import datetime as dt
    from zoneinfo import ZoneInfo

    from qa.ingest import DayChoice

    today = dt.datetime.now(ZoneInfo(zone)).date()
    named = {"today": today, "yesterday": today - dt.timedelta(days=1)}
    if text.lower() in named:
        return DayChoice(named[text.lower()], zone)
    try:
        return DayChoice(dt.date.fromisoformat(text), zone)
    except ValueError:
        raise PingworthyError(
            "Not a day.",
            where="--day",
            found=text,
            expected='a date such as 2026-05-04, "today" or "yesterday"',
        ) from None


class _Progress:
    """A bar on a terminal, a plain line for each tenth otherwise, nothing when quiet."""

    def __init__(self, quiet: bool) -> None:
        self.quiet, self.terminal = quiet, sys.stderr.isatty()
        self.bar: Any = None
        self.shown = -1

    def __enter__(self) -> Callable[[int, int, str], None] | None:
        return None if self.quiet else self.step

    def step(self, done: int, total: int, name: str) -> None:
        """One more line is done."""
        if self.terminal:
            if self.bar is None:
                self.bar = typer.progressbar(length=total, label="Lines", file=sys.stderr)
                self.bar.__enter__()
            self.bar.update(1)
            return
        tenth = 10 * done // total
        if tenth != self.shown:
            self.shown = tenth
            typer.echo(f"{done} of {total} lines done", err=True)

    def __exit__(self, *_: object) -> None:
        if self.bar is not None:
            self.bar.__exit__(None, None, None)


def main() -> None:
    """Run the command; every error of the user's own ends in one message and status 2."""
    for stream in (sys.stdout, sys.stderr):
        # A Windows console may not know every letter; a name that cannot be printed is no reason to fail.
        if hasattr(stream, "reconfigure"):
            stream.reconfigure(errors="replace")
    try:
        app()
    except PingworthyError as error:
        typer.echo(f"pingworthy: {error}", err=True)
        sys.exit(2)
    except KeyboardInterrupt:
        typer.echo(
            "pingworthy: stopped; no results were written.",
            err=True,
        )
        sys.exit(130)
    except Exception as error:
        typer.echo(
            f"pingworthy: an error of the program itself: {type(error).__name__}: {error}. Please report it, with the log "
            "if you can.",
            err=True,
        )
        sys.exit(3)


if __name__ == "__main__":
    main()
