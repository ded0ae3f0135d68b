"""A stream read ahead: its next item is made by another thread while the caller works on the one before."""

from __future__ import annotations

from collections import deque
from collections.abc import Generator
from concurrent.futures import Future, ThreadPoolExecutor
from typing import TypeVar

import pyarrow as pa

Item = TypeVar("Item")
_END = object()


def ahead(items: Generator[Item, None, None], most: int = 2) -> Generator[Item, None, None]:
    """The same items in the same order, up to ``most`` of them made before they are asked for.

    Where Arrow may use one thread only, so may this: then nothing is read ahead.
    """
    if pa.cpu_count() < 2:
        yield from items
        return

    def next_one() -> Item | object:
        return next(items, _END)

    with ThreadPoolExecutor(1, "pingworthy-ahead") as pool:
        coming: deque[Future[Item | object]] = deque()
        try:
            coming.extend(pool.submit(next_one) for _ in range(most))
            while (item := coming.popleft().result()) is not _END:
                coming.append(pool.submit(next_one))
                yield item  # type: ignore[misc]
        finally:
            for one in coming:
                one.cancel()
            pool.shutdown(wait=True)
            items.close()
