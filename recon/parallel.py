"""Work shared between threads, results in order, few at a time: memory stays flat and the order decides nothing."""

from __future__ import annotations

from collections import deque
from collections.abc import Callable, Iterator, Sequence
from concurrent.futures import Future, ThreadPoolExecutor
from typing import TypeVar

Item = TypeVar("Item")
Result = TypeVar("Result")


def in_order(function: Callable[[Item], Result], items: Sequence[Item], *, threads: int) -> Iterator[Result]:
    """Yield function(item) for every item, in the items' order.

    At most `threads` + 1 results exist at any time, finished or not. The first exception ends the iteration: what has
    not begun is dropped, what has begun ends first. One thread means the caller's own.

    Parameters
    ----------
    function : callable
        Safe to call from several threads at once.
    items : sequence
    threads : int
        At least 1.

    Yields
    ------
    Result
    """
    if threads <= 1 or len(items) <= 1:
        yield from map(function, items)
        return
    waiting = iter(items)
    with ThreadPoolExecutor(threads, thread_name_prefix="plane") as pool:
        running: deque[Future[Result]] = deque()
        try:
            for item in waiting:
                running.append(pool.submit(function, item))
                if len(running) > threads:
                    yield running.popleft().result()
            while running:
                yield running.popleft().result()
        finally:
            pool.shutdown(wait=False, cancel_futures=True)
