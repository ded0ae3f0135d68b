"""Lines as tasks: the same bytes however many workers, and no line that takes others with it."""

from __future__ import annotations

import sys
from collections.abc import Callable, Iterator
from concurrent.futures import Executor, Future, ThreadPoolExecutor
from pathlib import Path
from typing import Any

import pytest

from qa.executors import ProcessPool, held_to_threads, run_tasks, share_of_threads
from qa.job import audit
from tests.made_lines import files_of, write_line

LINES = 4


@pytest.fixture(scope="module")
def logs(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("logs")
    for line in range(LINES):
        write_line(folder / f"line_{line}.csv", line)
    return folder


@pytest.fixture(scope="module")
def serial(logs: Path, tmp_path_factory: pytest.TempPathFactory) -> dict[str, bytes]:
    out = tmp_path_factory.mktemp("serial") / "out"
    audit(logs, out=out, limits={"target_size": "0.05 m"}, workers=1)
    return files_of(out)


@pytest.fixture
def tasks(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Iterator[Any]:
    """A module that spawned processes can import, with work that ends the process it runs in."""
    (tmp_path / "deadly_work.py").write_text(
        "import os\n\n"
        "def deadly(work, task):\n"
        "    if getattr(task, 'number', task) == 3:\n"
        "        os._exit(7)\n"
        "    return work(task)\n\n"
        "def double(task):\n"
        "    return 2 * task\n",
        encoding="utf-8",
    )
    monkeypatch.syspath_prepend(str(tmp_path))
    import deadly_work  # type: ignore[import-not-found]

    yield deadly_work
    del sys.modules["deadly_work"]


class Deadly(Executor):
    """An executor whose processes end when they meet the third task."""

    def __init__(self, pool: Executor, deadly: Callable[..., Any]) -> None:
        self.pool, self.deadly = pool, deadly
        self._max_workers = 2

    def submit(self, fn: Callable[..., Any], /, *args: Any, **kwargs: Any) -> Future[Any]:
        return self.pool.submit(self.deadly, fn, *args)

    def shutdown(self, wait: bool = True, *, cancel_futures: bool = False) -> None:
        self.pool.shutdown(wait, cancel_futures=cancel_futures)


def test_two_workers_write_the_same_bytes_as_one(
    logs: Path, serial: dict[str, bytes], tmp_path: Path
) -> None:
    audit(logs, out=tmp_path / "out", limits={"target_size": "0.05 m"}, workers=2)
    assert files_of(tmp_path / "out") == serial
    assert "report.html" in serial


def test_any_executor_writes_the_same_bytes(
    logs: Path, serial: dict[str, bytes], tmp_path: Path
) -> None:
    factory = lambda: ThreadPoolExecutor(2)  # noqa: E731
    audit(logs, out=tmp_path / "out", limits={"target_size": "0.05 m"}, executor=factory)
    assert files_of(tmp_path / "out") == serial


def test_a_line_that_ends_its_process_is_reported_and_the_others_finish(
    logs: Path, tasks: Any, tmp_path: Path
) -> None:
    made = []

    def factory() -> Executor:
        made.append(Deadly(ProcessPool(2)(), tasks.deadly))
        return made[-1]

    findings = audit(logs, out=tmp_path / "out", executor=factory)
    failed = [line.line for line in findings.lines if line.error]
    assert failed == ["line_2"]
    assert "ended by the system" in str(findings.lines[2].error)
    assert [line.pings for line in findings.lines] == [60, 60, 0, 60]
    assert findings.exit_status == 3
    assert len(made) > 1, "the broken executor was replaced"


def test_every_task_has_one_result_though_the_executor_breaks(tasks: Any) -> None:
    """Many more tasks than are under way at once: those after the break run on a pool again."""

    def factory() -> Executor:
        return Deadly(ProcessPool(2)(), tasks.deadly)

    results = list(run_tasks(tasks.double, range(20), factory, lambda task, why: -1))
    assert sorted(results) == [(n, -1 if n == 3 else 2 * n) for n in range(20)]


def test_a_task_that_raises_is_lost_alone() -> None:
    results = dict(
        run_tasks(lambda n: 6 // n, [0, 1, 2], lambda: ThreadPoolExecutor(1), lambda _, why: why)
    )
    assert results[1] == 6
    assert "ZeroDivisionError" in str(results[0])
    assert results[2] == 3


@pytest.mark.parametrize("budget", [1, 2, 3, 8, 64])
@pytest.mark.parametrize("tasks", [1, 2, 5, 100])
def test_workers_are_a_budget_of_threads(budget: int, tasks: int) -> None:
    processes, threads = share_of_threads(budget, tasks)
    assert 1 <= processes <= tasks
    assert threads >= 1
    assert processes * threads <= budget


def test_processes_of_a_pool_keep_to_their_threads() -> None:
    import pyarrow as pa

    with ProcessPool(1, 1)() as pool:
        assert pool.submit(pa.cpu_count).result() == 1
        assert pool.submit(pa.io_thread_count).result() == 1
    with ProcessPool(1, 3)() as pool:
        assert pool.submit(pa.cpu_count).result() == 3


def test_the_threads_of_this_process_are_given_back() -> None:
    import pyarrow as pa

    before = pa.cpu_count(), pa.io_thread_count()
    with held_to_threads(1):
        assert (pa.cpu_count(), pa.io_thread_count()) == (1, 1)
    assert (pa.cpu_count(), pa.io_thread_count()) == before
