"""Batches worked on by several threads come out in order, and no more are at work than may be."""

from __future__ import annotations

import threading
import time
from collections.abc import Generator, Iterator

import pytest

from qa.model.side_by_side import in_order


@pytest.mark.parametrize("threads", [1, 2, 5])
def test_results_come_in_the_order_of_the_batches(threads: int) -> None:
    def work(batch: int) -> int:
        time.sleep(0.002 * (batch % 3))
        return batch * batch

    assert list(in_order(range(40), work, threads)) == [n * n for n in range(40)]
    assert list(in_order([], work, threads)) == []


def test_no_more_threads_are_at_work_than_said_and_one_reads() -> None:
    lock, at_work, reading, most = threading.Lock(), 0, 0, [0, 0]

    def batches() -> Iterator[int]:
        nonlocal reading
        for n in range(30):
            reading += 1
            most[1] = max(most[1], reading)
            time.sleep(0.001)
            reading -= 1
            yield n

    def work(batch: int) -> int:
        nonlocal at_work
        with lock:
            at_work += 1
            most[0] = max(most[0], at_work)
        time.sleep(0.003)
        with lock:
            at_work -= 1
        return batch

    assert list(in_order(batches(), work, 3)) == list(range(30))
    assert most[1] == 1
    assert 1 < most[0] <= 3


@pytest.mark.parametrize("threads", [1, 3])
@pytest.mark.parametrize("at_fault", ["reading", "working"])
def test_what_fails_is_raised(threads: int, at_fault: str) -> None:
    def batches() -> Iterator[int]:
        yield from range(5)
        if at_fault == "reading":
            raise KeyError("the file")

    def work(batch: int) -> int:
        if at_fault == "working" and batch == 4:
            raise KeyError("the file")
        return batch

    found = []
    with pytest.raises(KeyError, match="the file"):
        for result in in_order(batches(), work, threads):
            found.append(result)
    assert found == list(range(len(found)))


def _items(made: list[int], closed: list[bool], count: int = 20) -> Generator[int, None, None]:
    try:
        for n in range(count):
            made.append(threading.get_ident())
            yield n
    finally:
        closed.append(True)


def _as_it_is(item: int) -> int:
    return item


@pytest.mark.parametrize("threads", [1, 2])
def test_what_is_only_read_is_read_ahead(threads: int) -> None:
    made: list[int] = []
    closed: list[bool] = []
    assert list(in_order(_items(made, closed), _as_it_is, threads)) == list(range(20))
    assert closed == [True]
    elsewhere = {thread != threading.get_ident() for thread in made}
    assert elsewhere == {threads > 1}


@pytest.mark.parametrize("threads", [1, 2])
def test_one_that_is_left_early_is_closed_and_not_read_to_its_end(threads: int) -> None:
    made: list[int] = []
    closed: list[bool] = []
    stream = in_order(_items(made, closed, 1000), _as_it_is, threads)
    assert [next(stream), next(stream)] == [0, 1]
    stream.close()
    assert closed == [True]
    assert len(made) < 10


@pytest.mark.parametrize("threads", [1, 2])
def test_what_fails_is_raised_where_its_turn_comes(threads: int) -> None:
    def failing() -> Generator[int, None, None]:
        yield 1
        yield 2
        raise OSError("gone")

    found = []
    with pytest.raises(OSError, match="gone"):
        for item in in_order(failing(), _as_it_is, threads):
            found.append(item)
    assert found == [1, 2]
