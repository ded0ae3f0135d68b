"""Work on the batches of a stream by several threads, its results in the order of the batches."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Iterator
from concurrent.futures import ThreadPoolExecutor
from threading import Lock
from typing import TypeVar

Batch = TypeVar("Batch")
Result = TypeVar("Result")


def in_order(
    batches: Iterable[Batch], work: Callable[[Batch], Result], threads: int
) -> Iterator[Result]:
    """``work`` of each batch, in order.

    Each thread reads its next batch itself while no other does, so that no more than ``threads`` are at work, and no
    more than twice as many batches are held.

    Parameters
    ----------
    batches : iterable
        Read by one thread at a time.
    work : callable
        May run for several batches at once.
    threads : int
        With 1 everything runs in the caller's.

    Raises
    ------
    Exception
        What reading or working raises, where the batch's turn comes.
    """
    if threads < 2:
        yield from map(work, batches)
        return
    source, reading, taken = iter(batches), Lock(), 0

    def next_one() -> tuple[int, Result] | None:
        nonlocal taken
        with reading:
            try:
                batch = next(source)
            except StopIteration:
                return None
            number, taken = taken, taken + 1
        return number, work(batch)

    waiting: dict[int, Result] = {}
    turn = 0
    with ThreadPoolExecutor(threads, "pingworthy") as pool:
        at_work = [pool.submit(next_one) for _ in range(2 * threads)]
        try:
            while at_work:
                done = at_work.pop(0).result()
                if done is None:
                    continue
                at_work.append(pool.submit(next_one))
                waiting[done[0]] = done[1]
                while turn in waiting:
                    yield waiting.pop(turn)
                    turn += 1
        finally:
            for task in at_work:
                task.cancel()
