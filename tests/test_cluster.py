"""Lines on a real scheduler with two workers on this machine: the same bytes, and clear words where it cannot be had."""

from __future__ import annotations

import os
import re
import socket
import subprocess
import sys
import threading
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

import pytest

from qa.executors import ClusterPool, run_tasks
from qa.job import audit
from qa.kept import Kept
from qa.model.errors import PingworthyError
from tests.made_lines import files_of, write_line

pytest.importorskip("distributed", reason="the extra 'cluster' is not installed")

ROOT = Path(__file__).resolve().parent.parent
LIMITS = {"target_size": "0.05 m"}
LINES = 5


def started(*arguments: str, folder: Path) -> subprocess.Popen[str]:
    return subprocess.Popen(
        [sys.executable, "-m", *arguments],
        stderr=subprocess.PIPE,
        stdout=subprocess.DEVNULL,
        text=True,
        encoding="utf-8",
        cwd=folder,
        env={
            **os.environ,
            "PYTHONPATH": os.pathsep.join([str(ROOT), str(folder)]),
            "DASK_DISTRIBUTED__SCHEDULER__ALLOWED_FAILURES": "1",
        },
    )


def said(process: subprocess.Popen[str], pattern: str) -> str:
    """The first text of a process that matches, waited for; what comes after it is read too, so that it never waits."""
    stream = process.stderr
    assert stream is not None
    seen = []
    for line in stream:
        seen.append(line)
        if found := re.search(pattern, line):
            threading.Thread(target=lambda: list(stream), daemon=True).start()
            return found[1]
    raise AssertionError("".join(seen))


@contextmanager
def cluster(folder: Path, *of_worker: str) -> Iterator[str]:
    """A scheduler and two workers, processes of their own in a folder of their own."""
    running = []
    try:
        running.append(
            started(
                *("distributed.cli.dask_scheduler", "--host", "127.0.0.1", "--port", "0"),
                *("--no-dashboard", "--no-show", "--no-jupyter"),
                folder=folder,
            )
        )
        address = said(running[0], r"(tcp://127\.0\.0\.1:\d+)")
        for _ in range(2):
            worker = started(
                *("distributed.cli.dask_worker", address, "--host", "127.0.0.1"),
                *("--nthreads", "1", "--no-dashboard", "--local-directory", str(folder)),
                *("--death-timeout", "20"),
                *of_worker,
                folder=folder,
            )
            running.append(worker)
            said(worker, r"(Registered to)")
        yield address
    finally:
        for process in reversed(running):
            process.terminate()
        for process in running:
            try:
                process.wait(20)
            except subprocess.TimeoutExpired:
                # A nanny that is just starting a worker anew may not hear; the worker ends without a scheduler.
                process.kill()
                process.wait(20)


@pytest.fixture(scope="module")
def scheduler(tmp_path_factory: pytest.TempPathFactory) -> Iterator[str]:
    with cluster(tmp_path_factory.mktemp("cluster"), "--no-nanny") as address:
        yield address


@pytest.fixture(scope="module")
def logs(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("survey")
    for line in range(LINES):
        write_line(folder / f"line_{line}.csv", line)
    (folder / "cast.csv").write_text(
        "depth (m),sound speed (m/s)\n0,1500\n10,1495\n60,1490\n", encoding="utf-8"
    )
    (folder / "sheet.toml").write_text(
        'title = "Ours"\nextends = ["physics"]\n[limits]\ntarget_size = "0.05 m"\n',
        encoding="utf-8",
    )
    (folder / "survey.toml").write_text(
        "[survey]\nsheet = 'sheet.toml'\n[water]\nprofile = 'cast.csv'\n"
        "[[part]]\nlogs = ['line_2.csv']\n[part.limits]\ntarget_size = '0.2 m'\n",
        encoding="utf-8",
    )
    return folder


def test_two_workers_of_a_cluster_write_the_same_bytes(
    scheduler: str, logs: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Though all places in the survey file are relative, and the workers work in another folder."""
    monkeypatch.chdir(logs)
    names = [f"line_{n}.csv" for n in range(LINES)]
    audit(names, "survey.toml", out=tmp_path / "here", workers=1)
    pool = ClusterPool(scheduler)
    audit(names, "survey.toml", out=tmp_path / "there", executor=pool)
    assert files_of(tmp_path / "there") == files_of(tmp_path / "here")
    assert b"out of spec" in files_of(tmp_path / "here")["findings.json"]


def test_lines_of_a_cluster_are_kept_like_others(
    scheduler: str, logs: Path, tmp_path: Path
) -> None:
    audit(logs / "line_*.csv", out=tmp_path / "off", limits=LIMITS, workers=1)
    for taken in (0, LINES):
        kept = Kept(tmp_path / "kept")
        audit(
            logs / "line_*.csv",
            out=tmp_path / "out",
            limits=LIMITS,
            executor=ClusterPool(scheduler),
            kept=kept,
        )
        assert (kept.taken, kept.added) == (taken, LINES - taken)
        assert files_of(tmp_path / "out") == files_of(tmp_path / "off")


def test_a_line_that_fails_there_is_reported_and_the_others_finish(
    scheduler: str, logs: Path, tmp_path: Path
) -> None:
    bad = tmp_path / "bad.csv"
    bad.write_text("time,ping,depth (m)\n" + "2025-05-04T10:00:00Z,1,mud\n" * 5, encoding="utf-8")
    findings = audit([logs / "line_0.csv", bad], executor=ClusterPool(scheduler))
    assert findings.exit_status == 2
    assert [line.pings for line in findings.lines if not line.error] == [60]
    assert ["bad.csv" in str(i.error) for i in findings.inputs if i.error] == [True]


def test_the_command_takes_the_address(scheduler: str, logs: Path, tmp_path: Path) -> None:
    done = subprocess.run(
        [
            *(sys.executable, "-m", "qa.cli", "audit", str(logs / "line_*.csv"), "--no-keep"),
            *("--out", str(tmp_path / "out"), "--cluster", scheduler),
        ],
        capture_output=True,
        text=True,
        encoding="utf-8",
        env={**os.environ, "PYTHONPATH": str(ROOT)},
        timeout=120,
    )
    assert done.returncode == 0, done.stderr
    assert "Traceback" not in done.stderr
    assert (tmp_path / "out" / "report.html").is_file()


def test_an_address_where_nothing_answers_is_one_clear_error(logs: Path, tmp_path: Path) -> None:
    with socket.socket() as free:
        free.bind(("127.0.0.1", 0))
        address = f"tcp://127.0.0.1:{free.getsockname()[1]}"
    with pytest.raises(PingworthyError, match=f"{address}: No scheduler answers there"):
        audit(logs / "line_0.csv", out=tmp_path / "out", executor=ClusterPool(address, 1.0))
    assert list(tmp_path.iterdir()) == []


@pytest.mark.parametrize("address", ["", "nonsense", "ftp://127.0.0.1:1", "127.0.0.1:99999999"])
def test_what_is_no_address_is_one_clear_error(address: str, logs: Path) -> None:
    with pytest.raises(PingworthyError, match="--cluster"):
        audit(logs / "line_0.csv", executor=ClusterPool(address, 1.0))


def test_a_missing_package_is_named_with_what_to_install(
    logs: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setitem(sys.modules, "distributed", None)
    with pytest.raises(PingworthyError, match=r"pip install .*cluster"):
        audit(logs / "line_0.csv", executor=ClusterPool("tcp://127.0.0.1:1"))


def test_workers_that_run_another_program_are_refused(
    scheduler: str, logs: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    import qa.fingerprints

    monkeypatch.setattr(qa.fingerprints, "of_program", lambda: "another")
    with pytest.raises(PingworthyError, match="runs another program"):
        qa.executors.ClusterPool(scheduler)()


def test_a_task_that_ends_its_worker_is_reported_and_the_others_finish(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    (tmp_path / "deadly_task.py").write_text(
        "import os\n\n"
        "def double(task):\n"
        "    if task == 3:\n"
        "        os._exit(7)\n"
        "    return 2 * task\n",
        encoding="utf-8",
    )
    monkeypatch.syspath_prepend(str(tmp_path))
    import deadly_task  # type: ignore[import-not-found]

    with cluster(tmp_path) as address:
        results = dict(
            run_tasks(deadly_task.double, range(8), ClusterPool(address), lambda _, why: why)
        )
    assert "KilledWorker" in results.pop(3)
    assert results == {n: 2 * n for n in range(8) if n != 3}
