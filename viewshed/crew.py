"""Threads that work through jobs, and help each other with the pieces of a job."""

from __future__ import annotations

import threading
from functools import partial
from typing import TYPE_CHECKING, Protocol

if TYPE_CHECKING:
    from collections.abc import Callable, Sequence

    Piece = Callable[[], None]
    Job = Callable[["Share"], None]
    Progress = Callable[[float, float], None]

__all__ = ["Share", "run_jobs"]


class Share(Protocol):
    """Has pieces done by whoever is free, and returns when all are."""

    def __call__(self, pieces: Sequence[Piece], *, told: bool = True) -> None:
        """Do the pieces; `told` is whether they count in the progress."""


#: Seconds between two looks at how far the work is.
_LOOK_EVERY = 0.1


def run_jobs(
    jobs: Sequence[Job],
    *,
    threads: int,
    at_once: int | None = None,
    weights: Sequence[float] | None = None,
    progress: Progress | None = None,
) -> None:
    """Run jobs on threads; each job can have others help with its pieces.

    A thread begins the next job where it may, and else does pieces of jobs begun before. So many
    small jobs are done one a thread, few large ones by all together, and the last of them too.

    Parameters
    ----------
    jobs : sequence of callable
        Each is called with a function that does pieces (callables), by this thread and by others,
        and returns when all are done. They are begun in order.
    threads : int
        Threads to use.
    at_once : int, optional
        Jobs that may be under way together. Default: one a thread.
    weights : sequence of float, optional
        Share of each job in the whole, for the progress. Default: the same.
    progress : callable, optional
        Called by this thread now and then with work done and work in all; what it raises ends the
        work.

    Raises
    ------
    BaseException
        What a job raises, of several the first in order. Jobs before it are finished, those after
        it are dropped after the pieces in hand.
    """
    crew = _Crew(jobs, at_once or threads, weights or [1.0] * len(jobs))
    workers = [threading.Thread(target=crew.work, daemon=True) for _ in range(threads)]
    try:
        for worker in workers:
            worker.start()
        for worker in workers:
            while worker.is_alive():
                worker.join(_LOOK_EVERY)
                if progress is not None:
                    progress(*crew.done())
    finally:
        crew.stop()
        for worker in workers:
            if worker.ident is not None:
                worker.join()
    crew.raise_first()
    if progress is not None:
        progress(*crew.done())


class _Dropped(BaseException):
    """Ends a job that is no longer wanted."""


class _Shared:
    """Pieces of one job: taken in order, done in any."""

    def __init__(self, pieces: Sequence[Piece], told: bool) -> None:
        self.pieces = pieces
        self.told = told
        self.taken = 0
        self.done = 0

    @property
    def open(self) -> bool:
        return self.taken < len(self.pieces)

    def take(self) -> Piece:
        self.taken += 1
        return self.pieces[self.taken - 1]


class _Crew:
    """What the threads know of each other; all of it changes under one lock."""

    def __init__(self, jobs: Sequence[Job], at_once: int, weights: Sequence[float]) -> None:
        self._jobs = jobs
        self._at_once = at_once
        self._weights = weights
        self._change = threading.Condition()
        self._begun = 0
        self._wanted = len(jobs)  # jobs from this one on are not wanted
        self._under_way: dict[int, _Shared] = {}
        self._failed: dict[int, BaseException] = {}
        self._finished = 0.0
        self._told = 0.0

    def work(self) -> None:
        """Begin jobs, and help with others, until there is nothing left; for one thread."""
        while True:
            with self._change:
                found = self._next()
            if found is None:
                return
            number, shared = found
            try:
                if shared is None:
                    self._jobs[number](partial(self._share, number))
                else:
                    self._help(number, shared)
            except _Dropped:
                pass
            except BaseException as error:
                self._fail(number, error)
            if shared is None:
                self._finish(number)

    def _next(self) -> tuple[int, _Shared | None] | None:
        """Wait for a job to begin, or one to help with; None when there is nothing to wait for."""
        while self._under_way or self._begun < self._wanted:
            if self._begun < self._wanted and len(self._under_way) < self._at_once:
                number = self._begun
                self._begun += 1
                self._under_way[number] = _Shared((), told=False)
                return number, None
            for number, shared in self._under_way.items():
                if shared.open and number < self._wanted:
                    return number, shared
            self._change.wait()
        return None

    def _share(self, number: int, pieces: Sequence[Piece], *, told: bool = True) -> None:
        """Do the pieces of a job together with those who help."""
        shared = _Shared(pieces, told)
        with self._change:
            self._under_way[number] = shared
            self._change.notify_all()
        self._help(number, shared)
        with self._change:
            while shared.done < len(pieces) and number < self._wanted:
                self._change.wait()
            if number >= self._wanted:
                raise _Dropped

    def _help(self, number: int, shared: _Shared) -> None:
        """Do pieces of a job while there are some that nobody has taken."""
        while True:
            with self._change:
                if not shared.open or number >= self._wanted:
                    return
                piece = shared.take()
            piece()
            with self._change:
                shared.done += 1
                if shared.done == len(shared.pieces):
                    self._change.notify_all()

    def _finish(self, number: int) -> None:
        with self._change:
            del self._under_way[number]
            self._finished += self._weights[number]
            self._change.notify_all()

    def _fail(self, number: int, error: BaseException) -> None:
        """Keep an error; what comes after that job is not wanted any more."""
        with self._change:
            self._failed.setdefault(number, error)
            self._wanted = min(self._wanted, number)
            self._change.notify_all()

    def stop(self) -> None:
        """Let every thread end after the piece in hand."""
        with self._change:
            self._wanted = 0
            self._change.notify_all()

    def raise_first(self) -> None:
        """Raise what the first job in order raised, if any did."""
        if self._failed:
            raise self._failed[min(self._failed)]

    def done(self) -> tuple[float, float]:
        """Work done, never less than told before, and work in all."""
        with self._change:
            parts = (
                self._weights[number] * shared.done / len(shared.pieces)
                for number, shared in self._under_way.items()
                if shared.told and shared.pieces
            )
            self._told = max(self._told, self._finished + sum(parts))
            return self._told, sum(self._weights)
