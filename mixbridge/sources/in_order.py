"""Work on the items of a stream in several threads, and hand the results on in the order of the items."""

from __future__ import annotations

from collections import deque
from collections.abc import Callable, Iterator
from concurrent.futures import Future, ThreadPoolExecutor
from functools import partial
from threading import Lock
from typing import NoReturn, TypeVar

__all__ = ["in_order"]

Item = TypeVar("Item")
Result = TypeVar("Result")

AHEAD = 2
"""Results that may wait for the caller, beside those that are being worked on."""


def in_order(
    items: Iterator[Item], work: Callable[[Item], Result], threads: int, *, anywhere: bool
) -> Iterator[Result]:
    """Yield ``work(item)`` for each item, in order.

    What is yielded does not depend on the number of threads; neither does which error is raised: that of the
    first item in order which has one. When the caller stops, or is interrupted, threads end after the item they
    are at, and the stream is closed.

    Parameters
    ----------
    items : iterator
        The stream; drawn from by one thread at a time.
    work : callable
        Must not depend on other items.
    threads : int
        Threads that may be busy, the caller's own among them: with 1 all is done there.
    anywhere : bool
        Whether the stream may be drawn from in other threads than the caller's.
    """
    try:
        if threads < 2:
            yield from map(work, items)
            return
        pool = ThreadPoolExecutor(threads - 1, thread_name_prefix="mixbridge")
        try:
            drawn = _drawn_anywhere if anywhere else _drawn_here
            yield from drawn(items, work, pool, threads - 1 + AHEAD)
        finally:
            pool.shutdown(wait=True, cancel_futures=True)
    finally:
        close = getattr(items, "close", None)
        if close is not None:
            close()


def _drawn_here(
    items: Iterator[Item], work: Callable[[Item], Result], pool: ThreadPoolExecutor, most: int
) -> Iterator[Result]:
    waiting: deque[Future[Result]] = deque()
    failure: Exception | None = None
    while True:
        try:
            item = next(items)
        except StopIteration:
            break
        except Exception as error:
            failure = error  # due after the results that wait
            break
        waiting.append(pool.submit(work, item))
        if len(waiting) >= most:
            yield waiting.popleft().result()
    while waiting:
        yield waiting.popleft().result()
    if failure is not None:
        raise failure


def _drawn_anywhere(
    items: Iterator[Item], work: Callable[[Item], Result], pool: ThreadPoolExecutor, most: int
) -> Iterator[Result]:
    lock = Lock()
    numbers = iter(range(2**62))

    def task() -> tuple[int, Callable[[], Result] | None]:
        with lock:
            number = next(numbers)
            try:
                item = next(items)
            except StopIteration:
                return number, None
            except Exception as error:
                return number, partial(_raise, error)
        try:
            return number, partial(_same, work(item))
        except Exception as error:
            return number, partial(_raise, error)

    waiting = deque(pool.submit(task) for _ in range(most))
    done: dict[int, Callable[[], Result] | None] = {}
    for due in range(2**62):
        while due not in done:  # two threads may have drawn in another order than they were asked
            number, outcome = waiting.popleft().result()
            done[number] = outcome
        outcome = done.pop(due)
        if outcome is None:
            return
        yield outcome()
        waiting.append(pool.submit(task))


def _same(result: Result) -> Result:
    return result


def _raise(error: Exception) -> NoReturn:
    raise error
