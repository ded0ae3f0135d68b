"""Reading ahead changes neither what comes nor in which order."""

from __future__ import annotations

import threading
from collections.abc import Generator

import pyarrow as pa
import pytest

from qa.ingest.ahead import ahead


@pytest.fixture(params=[1, 2], ids=["one thread", "two threads"])
def threads(request: pytest.FixtureRequest) -> Generator[int, None, None]:
    before = pa.cpu_count()
    pa.set_cpu_count(request.param)
    yield request.param
    pa.set_cpu_count(before)


def _items(made: list[int], closed: list[bool], count: int = 20) -> Generator[int, None, None]:
    try:
        for n in range(count):
            made.append(threading.get_ident())
            yield n
    finally:
        closed.append(True)


def test_the_same_items_in_the_same_order(threads: int) -> None:
    made: list[int] = []
    closed: list[bool] = []
    assert list(ahead(_items(made, closed))) == list(range(20))
    assert closed == [True]
    elsewhere = {thread != threading.get_ident() for thread in made}
    assert elsewhere == {threads > 1}


def test_one_that_is_left_early_is_closed_and_not_read_to_its_end(threads: int) -> None:
    made: list[int] = []
    closed: list[bool] = []
    stream = ahead(_items(made, closed, 1000))
    assert [next(stream), next(stream)] == [0, 1]
    stream.close()
    assert closed == [True]
    assert len(made) < 10


def test_what_fails_is_raised_where_its_turn_comes(threads: int) -> None:
    def failing() -> Generator[int, None, None]:
        yield 1
        yield 2
        raise OSError("gone")

    found = []
    with pytest.raises(OSError, match="gone"):
        for item in ahead(failing()):
            found.append(item)
    assert found == [1, 2]
