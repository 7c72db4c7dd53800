"""Work done by several threads, its results in order."""

from collections.abc import Callable, Iterable, Iterator
from concurrent.futures import ThreadPoolExecutor
from contextlib import AbstractContextManager
from typing import TypeVar

Item = TypeVar("Item")
Result = TypeVar("Result")


def in_order(
    work: Callable[[Item], Result],
    items: Iterable[Item],
    threads: int,
    surroundings: Callable[[], AbstractContextManager[None]],
) -> Iterator[Result]:
    """Do work on each item; an error or an interrupt ends it after the items in hand.

    Parameters
    ----------
    work : callable
        Called with each item.
    items : iterable
        The items.
    threads : int
        Threads to use; of one thread it is that of the caller.
    surroundings : callable
        Gives a context in which each other thread does its work.

    Yields
    ------
    object
        What the work gave, in the order of the items.
    """
    if threads == 1:
        yield from map(work, items)
        return

    def surrounded(item: Item) -> Result:
        with surroundings():
            return work(item)

    pool = ThreadPoolExecutor(threads)
    try:
        yield from pool.map(surrounded, items)
    finally:
        pool.shutdown(cancel_futures=True)
