"""Work on several threads, its results in order."""

import threading
from contextlib import contextmanager, nullcontext

import pytest

from viewshed.io._pool import in_order


@pytest.mark.parametrize("threads", [1, 2, 5])
def test_results_are_in_order(threads):
    assert list(in_order(lambda n: n * n, range(20), threads, nullcontext)) == [
        n * n for n in range(20)
    ]


def test_threads_work_at_the_same_time():
    meeting = threading.Barrier(2, timeout=20)
    assert sorted(in_order(lambda n: meeting.wait(), range(2), 2, nullcontext)) == [0, 1]


def test_each_piece_of_work_has_its_surroundings():
    inside = threading.local()

    @contextmanager
    def surroundings():
        inside.here = True
        yield
        inside.here = False

    assert all(in_order(lambda n: inside.here, range(9), 2, surroundings))


@pytest.mark.parametrize("threads", [1, 2])
def test_an_error_ends_the_work(threads):
    done = []

    def work(n):
        if n == 3:
            raise ZeroDivisionError
        done.append(n)

    with pytest.raises(ZeroDivisionError):
        list(in_order(work, range(100_000), threads, nullcontext))
    assert len(done) < 100_000
