"""Threads that share jobs and their pieces: who does what, and how it ends."""

import threading

import pytest

from viewshed.crew import run_jobs

#: Longer than any of these waits for another thread [s].
PATIENCE = 20.0


def meeting(parties=2):
    """Something that only several threads together get past."""
    barrier = threading.Barrier(parties)
    return lambda: barrier.wait(PATIENCE)


@pytest.mark.parametrize("threads", [1, 2, 5])
@pytest.mark.parametrize("at_once", [None, 1, 3])
def test_everything_is_done_once(threads, at_once):
    did, finished = [], []

    def job(number):
        def run(share):
            share([lambda n=n: did.append((number, n)) for n in range(number)])
            assert len([one for one in did if one[0] == number]) == number
            finished.append(number)

        return run

    run_jobs([job(n) for n in range(7)], threads=threads, at_once=at_once)
    assert sorted(did) == [(number, n) for number in range(7) for n in range(number)]
    assert sorted(finished) == list(range(7))


def test_small_jobs_run_side_by_side():
    meet = meeting()
    run_jobs([lambda share: meet()] * 4, threads=2)


def test_all_threads_help_with_the_only_job():
    meet = meeting(3)
    run_jobs([lambda share: share([meet] * 3)], threads=3)


def test_the_last_job_is_helped_with():
    """The others are done when its pieces come up, so that two can meet there only as helpers."""
    others, meet = threading.Semaphore(0), meeting()

    def last(share):
        for _ in range(3):
            assert others.acquire(timeout=PATIENCE)
        share([meet] * 6)

    run_jobs([lambda share: others.release()] * 3 + [last], threads=2)


def test_no_more_jobs_are_under_way_than_may_be():
    meet, lock, under_way, most = meeting(), threading.Lock(), [], []

    def job(share):
        with lock:
            under_way.append(None)
            most.append(len(under_way))
        share([meet, meet])  # a thread without a job of its own helps
        with lock:
            under_way.pop()

    run_jobs([job] * 5, threads=2, at_once=1)
    assert most == [1] * 5


def test_after_an_error_no_job_is_begun():
    begun = []

    def fine(share):
        begun.append("fine")
        share([lambda: None])

    def bad(share):
        begun.append("bad")
        raise MemoryError("no room")

    with pytest.raises(MemoryError, match="no room"):
        run_jobs([fine, bad, fine, fine], threads=1)
    assert begun == ["fine", "bad"]


def test_of_several_errors_the_first_in_order_is_raised():
    """The second job fails first; the first one is still finished, and fails too."""
    second_failed = threading.Event()

    def first(share):
        assert second_failed.wait(PATIENCE)
        share([lambda: None])
        raise ValueError("first")

    def second(share):
        second_failed.set()
        raise ValueError("second")

    with pytest.raises(ValueError, match="first"):
        run_jobs([first, second], threads=2)


def test_a_later_job_is_dropped_when_one_before_it_fails():
    later_runs, went_on = threading.Event(), []

    def bad(share):
        assert later_runs.wait(PATIENCE)
        raise ValueError("bad")

    def later(share):
        later_runs.set()
        while True:  # only by being dropped does this end
            share([lambda: None])

    with pytest.raises(ValueError, match="bad"):
        run_jobs([bad, later, lambda share: went_on.append(None)], threads=2)
    assert not went_on


def test_an_error_of_a_helper_is_the_error_of_the_job():
    meet = meeting()
    owner = []

    def piece():
        meet()
        if threading.get_ident() not in owner:
            raise ValueError("helper")

    def job(share):
        owner.append(threading.get_ident())
        share([piece] * 2)
        pytest.fail("went on without its pieces")

    with pytest.raises(ValueError, match="helper"):
        run_jobs([job], threads=2)


@pytest.mark.parametrize("threads", [1, 3])
def test_what_progress_raises_ends_all_threads(threads):
    before = threading.active_count()

    def endless(share):
        while True:
            share([lambda: None] * 10)

    def interrupt(done, total):
        raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        run_jobs([endless] * 3, threads=threads, progress=interrupt)
    assert threading.active_count() == before


@pytest.mark.parametrize("threads", [1, 2])
def test_progress_goes_by_weight_and_never_back(threads, monkeypatch):
    monkeypatch.setattr("viewshed.crew._LOOK_EVERY", 0.001)
    told = []
    looked = threading.Semaphore(0)

    def tell(done, total):
        told.append((done, total))
        looked.release()

    def piece():
        assert looked.acquire(timeout=PATIENCE)

    run_jobs(
        [lambda share: share([piece] * 4)] * 3, threads=threads, weights=[8, 4, 20], progress=tell
    )
    done, totals = zip(*told, strict=True)
    assert set(totals) == {32}
    assert list(done) == sorted(done)
    assert done[-1] == 32
    assert len(set(done)) > 3
