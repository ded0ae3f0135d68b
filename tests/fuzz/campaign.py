"""Ruins small logs in many ways and sees that nothing worse comes of it than a clear message.

    python tests/fuzz/campaign.py --files 50000 --seed 1 --workers 2

Each file is planned, read to its end and accounted for, and a share of them goes through the whole audit. It fails when
anything but the product's own family of errors comes out, when a file takes more than 5 s of work or 500 MB of memory,
when a process dies, or when a row account is not exact. A failing file is kept, with what came of it beside it.
"""

from __future__ import annotations

import argparse
import contextlib
import multiprocessing
import os
import random
import shutil
import sys
import tempfile
import time
import traceback
import warnings
from collections import Counter
from collections.abc import Iterator
from dataclasses import dataclass, field
from multiprocessing.connection import Connection, wait
from multiprocessing.process import BaseProcess
from pathlib import Path

sys.path.insert(0, str(Path(__file__).resolve().parents[2]))

from qa.ingest import open_line, plan_logs
from qa.ingest.casts import read_cast
from qa.ingest.describe import describe_logs
from qa.ingest.line_plans import read_line_plan
from qa.job import audit
from qa.model.errors import PingworthyError
from qa.model.log import KEPT_REJECTS, FileAccount
from qa.model.survey_file import SurveyFile, load_survey_file
from tests.fuzz.mutate import mutant
from tests.fuzz.seeds import Seed, seeds

MOST_SECONDS, MOST_WALL, MOST_BYTES = 5.0, 60.0, 500_000_000
"""Seconds of work (a busy machine may make that many more on the wall), and memory of the whole process."""
AUDITED = 0.06
"""Share of the files that go through the whole audit; a tenth of these write their report too."""
LIFE, HEAVY = 1500, 250_000_000
"""Files that a worker reads before a fresh one takes over, and the memory after which one does so at once: what the
system's allocator keeps from one file is not the next one's."""


class Wrong(Exception):
    """Something that must not be."""


@dataclass(frozen=True, slots=True)
class Outcome:
    """What came of one file: "read", "refused" (by a clear message), or what went wrong."""

    number: int
    kind: str
    told: str = ""
    bytes: int = 0
    rows: int = 0


# One file


class Reader:
    """Makes and reads mutants by their number, in a folder of its own."""

    def __init__(self, folder: Path, seed: int) -> None:
        self.folder, self.seed, self.seeds = folder, seed, seeds()
        self.surveys: dict[str, SurveyFile] = {}

    def file(self, number: int) -> tuple[Seed, str, bytes, random.Random]:
        """The seed, name and content of a mutant, always the same, and the generator for what follows."""
        rng = random.Random(self.seed * 1_000_003 + number)
        seed = self.seeds[number % len(self.seeds)]
        name = seed.name
        if rng.random() < 0.03:
            name = f"{name.partition('.')[0]}{rng.choice(('.csv', '.parquet', '.gz', '.arrow', '.txt'))}"
        return seed, name, mutant(seed, rng), rng

    def read(self, number: int) -> Outcome:
        """What comes of one mutant."""
        seed, name, content, rng = self.file(number)
        # A name of its own: where a file that is still mapped cannot be removed, the next one is not in its way.
        path = self.folder / f"{number}-{name}"
        path.write_bytes(content)
        survey = self._survey(seed)
        _reset_peak()
        found = Outcome(number, "read")
        unraised: list[str] = []
        heard = sys.unraisablehook
        sys.unraisablehook = lambda told: unraised.append(f"{told.exc_value!r} in {told.object!r}")
        with warnings.catch_warnings(record=True) as caught:
            warnings.simplefilter("always")
            try:
                found = self._read(seed, path, survey, number, rng)
            except PingworthyError as error:
                told = str(error)
                found = Outcome(number, "refused", told)
                if not error.message or "Traceback" in told:
                    found = Outcome(number, "a message that says nothing", told)
            except Wrong as problem:
                found = Outcome(number, str(problem).partition(":")[0], str(problem))
            except BaseException:
                found = Outcome(number, "a traceback", traceback.format_exc())
        sys.unraisablehook = heard
        with contextlib.suppress(OSError):
            path.unlink(missing_ok=True)
        if unraised:
            found = Outcome(number, "an exception that nobody heard", "\n".join(unraised))
        if caught and found.kind in ("read", "refused"):
            shown = "\n".join(f"{w.filename}:{w.lineno}: {w.message}" for w in caught)
            found = Outcome(number, "a warning", shown)
        return Outcome(number, found.kind, found.told, _peak(), found.rows)

    def _survey(self, seed: Seed) -> SurveyFile:
        if seed.survey not in self.surveys:
            path = self.folder / "survey.toml"
            path.write_text(seed.survey, "utf-8")
            self.surveys[seed.survey] = load_survey_file(path)
        return self.surveys[seed.survey]

    def _read(
        self, seed: Seed, path: Path, survey: SurveyFile, number: int, rng: random.Random
    ) -> Outcome:
        if seed.kind == "cast":
            return _accounted(number, [read_cast(path, shown=path.name).account])
        if seed.kind == "plan":
            return _accounted(number, [read_line_plan(path, shown=path.name).account])
        if rng.random() < 0.05:
            describe_logs([path], survey)
        if rng.random() < AUDITED:
            return self._audited(path, survey, number, written=rng.random() < 0.1)
        accounts: list[FileAccount] = []
        errors: list[PingworthyError] = []
        for task in plan_logs([path], survey).lines:
            line = open_line(task, survey)
            try:
                table = line.ping_table()
                beams = sum(
                    int(batch.counts.sum())
                    for batch in line.beam_batches(sorted(line.beam_columns), 16)
                )
            except PingworthyError as error:
                errors.append(error)
                continue
            for account in line.accounts():
                _exact(account)
            used = sum(account.rows_used for account in line.accounts())
            layout = task.parts[0].probe.layout
            if len(task.parts) == 1 and (layout != "long" or line.grain == "ping"):
                notes = [note for account in line.accounts() for note in account.notes]
                together = any("brought together" in note for note in notes)
                if used < len(table) or (used > len(table) and not together):
                    raise Wrong(f"pings are not rows: {used} rows used, {len(table)} pings")
            elif line.beam_columns and used != beams:
                raise Wrong(f"beams are not rows: {used} rows used, {beams} beams")
            accounts += line.accounts()
        if errors and not accounts:
            raise errors[0]
        return _accounted(number, accounts)

    def _audited(self, path: Path, survey: SurveyFile, number: int, written: bool) -> Outcome:
        out = self.folder / "out"
        try:
            findings = audit([path], survey, out=out if written else None, workers=1)
        finally:
            shutil.rmtree(out, ignore_errors=True)
        if findings.exit_status == 3:
            raise Wrong(
                "an error of the program: " + "; ".join(x.error or "" for x in findings.lines)
            )
        rows = 0
        for item in findings.inputs:
            rows += item.rows_read
            if item.rows_read != item.rows_used + item.rows_rejected + item.rows_out_of_scope:
                raise Wrong(f"an account that is not exact: {item}")
        return Outcome(number, "read", rows=rows)


def _accounted(number: int, accounts: list[FileAccount]) -> Outcome:
    for account in accounts:
        _exact(account)
    return Outcome(number, "read", rows=sum(account.rows_read for account in accounts))


def _exact(account: FileAccount) -> None:
    counts = (account.rows_used, account.rows_rejected, account.rows_out_of_scope)
    if min(counts) < 0 or account.rows_read != sum(counts):
        raise Wrong(f"an account that is not exact: {account.rows_read} read, {counts}")
    if sum(account.reasons.values()) != account.rows_rejected:
        raise Wrong(f"an account that is not exact: reasons {account.reasons} of {counts}")
    if len(account.rejected_rows) != min(account.rows_rejected, KEPT_REJECTS):
        raise Wrong(f"an account that is not exact: {len(account.rejected_rows)} rows kept")


# Memory


def _reset_peak() -> None:
    """Start counting the peak anew, where the system can."""
    with contextlib.suppress(OSError):
        Path("/proc/self/clear_refs").write_text("5", "utf-8")


def _peak() -> int:
    """The most memory since then (or since the process started), 0 where the system does not tell."""
    try:
        for line in Path("/proc/self/status").read_text("utf-8").splitlines():
            if line.startswith("VmHWM"):
                return int(line.split()[1]) * 1024
    except OSError:
        return 0
    return 0


def _work_done(process: int) -> tuple[float, int]:
    """Seconds of work and bytes of memory of another process, 0 where the system does not tell."""
    try:
        fields = Path(f"/proc/{process}/stat").read_text("utf-8").rpartition(")")[2].split()
        seconds = (int(fields[11]) + int(fields[12])) / os.sysconf("SC_CLK_TCK")
        return seconds, int(fields[21]) * os.sysconf("SC_PAGE_SIZE")
    except (OSError, IndexError, ValueError, AttributeError):
        return 0.0, 0


# Workers and their watchdog


def _work(orders: Connection, folder: str, seed: int) -> None:
    """Read mutants by number until told to stop."""
    reader = Reader(Path(folder), seed)
    while (number := orders.recv()) is not None:
        orders.send(reader.read(number))


@dataclass(slots=True)
class _Worker:
    process: BaseProcess
    orders: Connection
    folder: Path
    number: int = -1
    since: float = 0.0
    work: float = 0.0
    done: int = 0
    tired: bool = False


@dataclass(slots=True)
class Campaign:
    """A run over many mutants: hands out numbers, watches, counts."""

    seed: int
    files: int
    workers: int
    keep: Path
    first: int = 0
    kinds: Counter[str] = field(default_factory=Counter)
    again: set[int] = field(default_factory=set)
    failures: list[Outcome] = field(default_factory=list)
    most_bytes: tuple[int, int] = (0, -1)
    most_seconds: tuple[float, int] = (0.0, -1)
    rows: int = 0

    def run(self) -> bool:
        """Whether nothing went wrong."""
        with tempfile.TemporaryDirectory(prefix="pingworthy-fuzz-") as name:
            self._run(Path(name))
        return not self.failures

    def _run(self, folder: Path) -> None:
        numbers = iter(range(self.first, self.first + self.files))
        team = [self._started(folder / str(i)) for i in range(self.workers)]
        for worker in team:
            self._next(worker, numbers)
        told = time.monotonic()
        while any(worker.number >= 0 for worker in team):
            ready = wait([w.orders for w in team if w.number >= 0], timeout=0.2)
            for at, worker in enumerate(team):
                if worker.number < 0:
                    continue
                over = None
                if worker.orders in ready:
                    try:
                        self._take(worker, worker.orders.recv())
                    except (EOFError, OSError):
                        over = "the process died"
                else:
                    over = self._over(worker)
                number = worker.number
                # A machine that stands still looks like a hang; a true one comes again in a fresh process.
                once_more = over == "a hang" and number not in self.again
                if over is not None and not once_more:
                    self._fail(Outcome(number, over))
                if over is not None or worker.tired:
                    self._ended(worker)
                    team[at] = worker = self._started(worker.folder)
                    self.again |= {number} if once_more else set()
                    self._next(worker, iter([number]) if once_more else numbers)
                elif worker.orders in ready:
                    self._next(worker, numbers)
            if time.monotonic() - told > 30:
                told = time.monotonic()
                print(
                    f"{sum(self.kinds.values())} files, {len(self.failures)} failures", flush=True
                )
        for worker in team:
            self._ended(worker)

    def _started(self, folder: Path) -> _Worker:
        folder.mkdir(exist_ok=True)
        context = multiprocessing.get_context("spawn")
        mine, theirs = context.Pipe()
        process = context.Process(target=_work, args=(theirs, str(folder), self.seed), daemon=True)
        process.start()
        theirs.close()
        return _Worker(process, mine, folder)

    def _next(self, worker: _Worker, numbers: Iterator[int]) -> None:
        worker.number = next(numbers, -1)
        if worker.number >= 0:
            worker.since, worker.work = time.monotonic(), _work_done(worker.process.pid or 0)[0]
            worker.orders.send(worker.number)

    def _take(self, worker: _Worker, outcome: Outcome) -> None:
        seconds = _work_done(worker.process.pid or 0)[0] - worker.work
        if worker.done:
            # The first file also loads the libraries.
            self.most_seconds = max(self.most_seconds, (seconds, outcome.number))
            if seconds > MOST_SECONDS and outcome.kind in ("read", "refused"):
                outcome = Outcome(outcome.number, "too slow", f"{seconds:.1f} s of work")
        if outcome.bytes > MOST_BYTES and outcome.kind in ("read", "refused"):
            outcome = Outcome(
                outcome.number, "too much memory", f"{outcome.bytes / 1e6:.0f} MB", outcome.bytes
            )
        self.most_bytes = max(self.most_bytes, (outcome.bytes, outcome.number))
        worker.done += 1
        worker.tired = worker.done >= LIFE or outcome.bytes > HEAVY
        self.rows += outcome.rows
        if outcome.kind in ("read", "refused"):
            self.kinds[outcome.kind] += 1
        else:
            self._fail(outcome)

    def _over(self, worker: _Worker) -> str | None:
        seconds, memory = _work_done(worker.process.pid or 0)
        allowed = MOST_SECONDS if worker.done else 6 * MOST_SECONDS
        if not worker.process.is_alive():
            return "the process died"
        if seconds - worker.work > allowed or time.monotonic() - worker.since > MOST_WALL + allowed:
            return "a hang"
        return "too much memory" if memory > 2 * MOST_BYTES else None

    def _ended(self, worker: _Worker) -> None:
        with contextlib.suppress(OSError):
            worker.orders.send(None)
        worker.process.join(0.5)
        if worker.process.is_alive():
            worker.process.kill()
            worker.process.join()
        worker.orders.close()

    def _fail(self, outcome: Outcome) -> None:
        self.kinds[outcome.kind] += 1
        self.failures.append(outcome)
        self.keep.mkdir(parents=True, exist_ok=True)
        _, name, content, _ = Reader(self.keep, self.seed).file(outcome.number)
        (self.keep / f"{outcome.number:06d}-{name}").write_bytes(content)
        (self.keep / f"{outcome.number:06d}.told").write_text(
            f"{outcome.kind}\n{outcome.told}\n", "utf-8"
        )

    def summary(self) -> str:
        """What came of it, in a few lines."""
        total = sum(self.kinds.values())
        lines = [
            f"{total} files, seed {self.seed}: "
            + ", ".join(f"{n} {k}" for k, n in self.kinds.most_common())
        ]
        lines.append(
            f"{self.rows} rows read and accounted for; at most {self.most_seconds[0]:.2f} s of work (file "
            f"{self.most_seconds[1]}) and {self.most_bytes[0] / 1e6:.0f} MB (file {self.most_bytes[1]})"
        )
        for outcome in self.failures[:20]:
            last = outcome.told.strip().splitlines()[-1][:150] if outcome.told.strip() else ""
            lines.append(f"  {outcome.number}: {outcome.kind}: {last}")
        if self.failures:
            lines.append(f"Kept in {self.keep}.")
        return "\n".join(lines)


def main() -> int:
    """Run a campaign, or one file of it again."""
    options = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    options.add_argument("--files", type=int, default=50_000)
    options.add_argument("--seed", type=int, default=1)
    options.add_argument("--workers", type=int, default=2)
    options.add_argument("--first", type=int, default=0, help="number of the first file")
    options.add_argument("--keep", type=Path, default=Path("fuzz-failures"))
    options.add_argument(
        "--only", type=int, help="read this one file here, and say what came of it"
    )
    chosen = options.parse_args()
    if chosen.only is not None:
        with tempfile.TemporaryDirectory() as folder:
            outcome = Reader(Path(folder), chosen.seed).read(chosen.only)
        print(outcome.kind, f"{outcome.bytes / 1e6:.0f} MB", outcome.told, sep="\n")
        return int(outcome.kind not in ("read", "refused"))
    campaign = Campaign(chosen.seed, chosen.files, chosen.workers, chosen.keep, chosen.first)
    started = time.monotonic()
    sound = campaign.run()
    print(campaign.summary())
    print(f"{campaign.files / (time.monotonic() - started):.0f} files a second")
    return 0 if sound else 1


if __name__ == "__main__":
    sys.exit(main())
