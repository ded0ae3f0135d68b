"""Batches of a stream read and worked on by several threads, the results in the order of the batches."""

from __future__ import annotations

from collections import deque
from collections.abc import Callable, Generator, Iterable, Iterator
from concurrent.futures import ThreadPoolExecutor
from functools import partial
from threading import Lock
from typing import NoReturn, TypeVar

Batch = TypeVar("Batch")
Result = TypeVar("Result")


def in_order(
    batches: Iterable[Batch], work: Callable[[Batch], Result], threads: int
) -> Generator[Result, None, None]:
    """``work`` of each batch, in order.

    Each thread reads its next batch itself while no other does, so that no more than ``threads`` are at work, and no
    more than twice as many batches are held.

    Parameters
    ----------
    batches : iterable
        Read by one thread at a time; closed in the end, if it is a generator.
    work : callable
        May run for several batches at once.
    threads : int
        With 1 everything runs in the caller's.

    Raises
    ------
    Exception
        What reading or working raises, where the batch's turn comes.
    """
    source = iter(batches)
    try:
        yield from map(work, source) if threads < 2 else _by_threads(source, work, threads)
    finally:
        if isinstance(source, Generator):
            source.close()


def _by_threads(
    source: Iterator[Batch], work: Callable[[Batch], Result], threads: int
) -> Iterator[Result]:
    reading, taken = Lock(), 0

    def next_one() -> tuple[int, Callable[[], Result]] | None:
        """A batch's number, and what gives its result, or raises, when its turn comes."""
        nonlocal taken
        with reading:
            number, taken = taken, taken + 1
            try:
                batch = next(source)
            except StopIteration:
                return None
            except Exception as error:
                return number, partial(_raised, error)
        try:
            result = work(batch)
        except Exception as error:
            return number, partial(_raised, error)
        return number, lambda: result

    waiting: dict[int, Callable[[], Result]] = {}
    turn = 0
    with ThreadPoolExecutor(threads, "pingworthy") as pool:
        at_work = deque(pool.submit(next_one) for _ in range(2 * threads))
        try:
            while at_work:
                done = at_work.popleft().result()
                if done is None:
                    continue
                at_work.append(pool.submit(next_one))
                waiting[done[0]] = done[1]
                while turn in waiting:
                    yield waiting.pop(turn)()
                    turn += 1
        finally:
            for task in at_work:
                task.cancel()


def _raised(error: Exception) -> NoReturn:
    raise error
