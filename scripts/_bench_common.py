"""What all measurements share: how much is measured, clocks, and what else the machine did."""

import os
import statistics
import time
from dataclasses import dataclass, field
from pathlib import Path

THREADS, K = 2, 0.13
#: Share of the machine that other processes may take before a "NO" is doubted.
CALM = 0.05


@dataclass(frozen=True)
class Sizes:
    """How much to measure.

    Attributes
    ----------
    full : bool
        Whether these are the sizes for which something is asked.
    walk_range, walk_step : int
        Range of the engine against walkers [cells], and of which rows one is walked.
    ranges : tuple of int
        Ranges of every scene [cells]; at the first, clearance, threads and pieces are measured too.
    curve : tuple of int
        Ranges of every kind of terrain [cells], beside `ranges`; growth is that to the last.
    check_step : int
        Of which rows one is checked against a walker.
    side : int
        Rows and columns of the grid that whole processes map.
    observers, observer_range, observer_side : int
        How many observers, how far they see and on a grid of which side [cells].
    rounds : int
        Rounds of whole processes and of many observers.
    starts : int
        Times that each short process is started.
    turns : int
        Times that each way on arrays is timed, in turns; copies are two more. The median counts.
    """

    full: bool
    walk_range: int
    walk_step: int
    ranges: tuple[int, ...]
    curve: tuple[int, ...]
    check_step: int
    side: int
    observers: int
    observer_range: int
    observer_side: int
    rounds: int
    starts: int
    turns: int


FULL = Sizes(
    full=True,
    walk_range=1500,
    walk_step=40,
    ranges=(3000, 5000),
    curve=(250, 500, 1000, 2000, 10_000),
    check_step=200,
    side=10_001,
    observers=300,
    observer_range=1000,
    observer_side=5001,
    rounds=3,
    starts=20,
    turns=5,
)
QUICK = Sizes(
    full=False,
    walk_range=300,
    walk_step=10,
    ranges=(300, 400),
    curve=(150, 600),
    check_step=50,
    side=1001,
    observers=20,
    observer_range=200,
    observer_side=1001,
    rounds=1,
    starts=3,
    turns=3,
)


@dataclass
class Clock:
    """Wall and processor times of several ways to do something, taken in turns [s]."""

    wall: dict = field(default_factory=dict)
    busy: dict = field(default_factory=dict)

    def run(self, name, work):
        """Time one call and return what it returns."""
        busy, wall = time.process_time(), time.perf_counter()
        result = work()
        self.wall.setdefault(name, []).append(time.perf_counter() - wall)
        self.busy.setdefault(name, []).append(time.process_time() - busy)
        return result

    def seconds(self, name):
        """Median wall time [s]."""
        return statistics.median(self.wall[name])

    def ns(self, name, count):
        """Median wall time of each of `count` things [ns]."""
        return self.seconds(name) * 1e9 / count

    def busy_ns(self, name, count, threads=THREADS):
        """Median processor time of each of `count` things and each thread [ns]."""
        return statistics.median(self.busy[name]) * 1e9 / count / threads


def others(since=None):
    """Processor time that other processes have taken, over the wall time of all processors.

    Parameters
    ----------
    since : tuple or None
        What an earlier call returned.

    Returns
    -------
    tuple or float
        Times to hand in later, or the share since then (0 where the system does not tell).
    """
    wall, own, machine, cores = time.perf_counter(), time.process_time(), 0.0, os.cpu_count()
    own += sum(os.times()[2:4])  # of processes that were started and have ended
    try:
        ticks = Path("/proc/stat").read_text(encoding="ascii").splitlines()[0].split()[1:9]
        machine = sum(int(n) for i, n in enumerate(ticks) if i not in (3, 4))  # neither is work
        machine /= os.sysconf("SC_CLK_TCK")
    except (OSError, ValueError, AttributeError):
        own = 0.0
    if since is None:
        return wall, own, machine
    foreign = (machine - since[2]) - (own - since[1])
    return max(0.0, foreign) / ((wall - since[0]) * cores)
