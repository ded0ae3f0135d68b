"""Where tasks run: in spawned processes, on a cluster, on any executor of ``concurrent.futures``.

An executor comes from a factory, so that one that breaks can be replaced. Nothing heavy is loaded here: a spawned
process sets its threads before anything that has threads is imported.
"""

from __future__ import annotations

import os
from collections import deque
from collections.abc import Callable, Iterator, Sequence
from concurrent.futures import (
    FIRST_COMPLETED,
    BrokenExecutor,
    CancelledError,
    Executor,
    Future,
    ProcessPoolExecutor,
    wait,
)
from contextlib import contextmanager
from dataclasses import dataclass
from importlib import import_module
from typing import Any, TypeVar

from qa.model.errors import PingworthyError

Task = TypeVar("Task")
Result = TypeVar("Result")
ExecutorFactory = Callable[[], Executor]
THREAD_VARIABLES = ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS")
IN_FLIGHT = 32
"""Tasks handed to an executor at a time, where nothing says how many it works on at once."""


@dataclass(frozen=True, slots=True)
class ProcessPool:
    """Makes pools of ``count`` spawned processes, the same on every system, of ``threads`` threads each."""

    count: int
    threads: int = 1

    def __call__(self) -> Executor:
        import multiprocessing

        return ProcessPoolExecutor(
            self.count,
            mp_context=multiprocessing.get_context("spawn"),
            initializer=set_threads,
            initargs=(self.threads,),
        )


def set_threads(count: int) -> None:
    """Let this process compute with so many threads at once."""
    for name in THREAD_VARIABLES:
        os.environ[name] = str(count)
    import pyarrow as pa

    pa.set_cpu_count(count)
    pa.set_io_thread_count(count)


@contextmanager
def held_to_threads(count: int) -> Iterator[None]:
    """Read logs with so many threads for a while, in this process."""
    import pyarrow as pa

    before = pa.cpu_count(), pa.io_thread_count()
    pa.set_cpu_count(count)
    pa.set_io_thread_count(count)
    try:
        yield
    finally:
        pa.set_cpu_count(before[0])
        pa.set_io_thread_count(before[1])


def threads_here() -> int:
    """Threads that this process may have at work at once."""
    import pyarrow as pa

    return int(pa.cpu_count())


def share_of_threads(budget: int, tasks: int) -> tuple[int, int]:
    """Processes, and threads in each, that a budget of threads makes for some tasks.

    Examples
    --------
    >>> share_of_threads(8, 100), share_of_threads(8, 3), share_of_threads(2, 1)
    ((8, 1), (3, 2), (1, 2))
    """
    processes = max(1, min(budget, tasks))
    return processes, max(1, budget // processes)


_BESIDE = "KilledWorker"
"""What a cluster raises for every task that was on a worker when it ended, for the second time or so."""


def run_tasks(
    work: Callable[[Task], Result],
    tasks: Sequence[Task],
    factory: ExecutorFactory,
    lost: Callable[[Task, str], Result],
) -> Iterator[tuple[Task, Result]]:
    """Run tasks on an executor, and hand out each with its result as it is done.

    Where the executor breaks, a new one takes the tasks that were under way one by one, so that the one that breaks
    it is known; the rest goes on as before. So do several tasks in the end that a cluster gives up because the workers
    that they were on ended: it may have been another's doing.

    Parameters
    ----------
    work : callable
        Takes a task; a module's own function, for it travels.
    tasks : sequence
    factory : callable
        Makes the executor, and others after it.
    lost : callable
        Takes a task that could not be run and why, and makes a result of that.
    """
    waiting = deque(tasks)
    accused: list[tuple[Task, str]] = []
    while waiting:
        pool = factory()
        most = 2 * int(getattr(pool, "_max_workers", 0) or 0) or IN_FLIGHT
        flying: dict[Future[Result], Task] = {}
        broken = False
        try:
            while (waiting or flying) and not broken:
                while waiting and len(flying) < most:
                    task = waiting.popleft()
                    try:
                        flying[pool.submit(work, task)] = task
                    except BrokenExecutor:
                        waiting.appendleft(task)
                        broken = True
                        break
                if broken:
                    break
                for future in wait(flying, return_when=FIRST_COMPLETED).done:
                    try:
                        result = future.result()
                    except (BrokenExecutor, CancelledError):
                        broken = True
                        continue
                    except Exception as error:
                        if type(error).__name__ == _BESIDE:
                            accused.append((flying.pop(future), f"{_BESIDE}: {error}"))
                            continue
                        result = lost(flying[future], f"{type(error).__name__}: {error}")
                    yield flying.pop(future), result
        finally:
            pool.shutdown(wait=not broken, cancel_futures=True)
        if broken:
            suspects = list(flying.values())
            if not suspects and waiting:
                suspects = [waiting.popleft()]
            yield from _one_by_one(work, suspects, factory, lost)
    if len(accused) == 1:
        yield from ((task, lost(task, why)) for task, why in accused)
    else:
        yield from _one_by_one(work, [task for task, _ in accused], factory, lost)


def _one_by_one(
    work: Callable[[Task], Result],
    tasks: Sequence[Task],
    factory: ExecutorFactory,
    lost: Callable[[Task, str], Result],
) -> Iterator[tuple[Task, Result]]:
    pool: Executor | None = None
    try:
        for task in tasks:
            pool = pool or factory()
            try:
                result = pool.submit(work, task).result()
            except (BrokenExecutor, CancelledError):
                pool.shutdown(wait=False, cancel_futures=True)
                pool = None
                result = lost(task, "the process that computed this line was ended by the system")
            except Exception as error:
                result = lost(task, f"{type(error).__name__}: {error}")
            yield task, result
    finally:
        if pool is not None:
            pool.shutdown(wait=False, cancel_futures=True)


@dataclass(frozen=True, slots=True)
class ClusterPool:
    """Makes executors that run tasks on the workers of a Dask scheduler.

    Its workers read the logs, and the survey file's cast, under the same paths as this process; what they write
    travels back, so that nothing else need be shared.

    Parameters
    ----------
    address : str
        Where the scheduler listens, as in "tcp://10.0.0.5:8786".
    timeout : float
        Seconds to wait for the scheduler, and for a first worker.
    """

    address: str
    timeout: float = 10.0

    def __call__(self) -> Executor:
        try:
            distributed: Any = import_module("distributed")
        except ImportError:
            raise PingworthyError(
                "The package for clusters is not installed.",
                where="--cluster",
                advice='Install it with pip install "pingworthy[cluster]".',
            ) from None
        try:
            client = distributed.Client(self.address, timeout=self.timeout, set_as_default=False)
        except (OSError, TimeoutError, ValueError) as error:
            raise PingworthyError(
                "No scheduler answers there.",
                where=f"--cluster {self.address}",
                found=str(error) or type(error).__name__,
                expected="the address that the scheduler printed, such as tcp://10.0.0.5:8786",
            ) from None
        try:
            self._check_workers(client)
        except BaseException:
            client.close()
            raise
        return _Cluster(client)

    def _check_workers(self, client: Any) -> None:
        """Workers that run another program would compute something else."""
        from qa.fingerprints import of_program

        try:
            client.wait_for_workers(1, timeout=self.timeout)
        except TimeoutError:
            raise PingworthyError(
                "The scheduler has no workers.",
                where=f"--cluster {self.address}",
                advice="Start workers, with pingworthy installed, and try again.",
            ) from None
        try:
            found = client.run(_program_here, on_error="return")
        except ImportError as error:
            found = {"": error}
        for worker, told in sorted(found.items()):
            if told != of_program():
                raise PingworthyError(
                    "A worker runs another program.",
                    where=f"--cluster {self.address}: worker {worker}",
                    found=str(told) if isinstance(told, Exception) else "other versions",
                    expected="the same pingworthy, Python, numpy and pyarrow as here",
                )


def _program_here() -> str:
    from qa.fingerprints import of_program

    return of_program()


class _Cluster(Executor):
    """A client's executor, whose end is the client's end too."""

    def __init__(self, client: Any) -> None:
        self.client = client
        self.executor = client.get_executor(pure=False)
        self._max_workers = sum(client.nthreads().values())

    def submit(self, fn: Callable[..., Any], /, *args: Any, **kwargs: Any) -> Future[Any]:
        """Hand a task to the scheduler."""
        future: Future[Any] = self.executor.submit(fn, *args, **kwargs)
        return future

    def shutdown(self, wait: bool = True, *, cancel_futures: bool = False) -> None:
        """Leave the scheduler; its workers stay."""
        self.executor.shutdown(wait=wait)
        self.client.close()
