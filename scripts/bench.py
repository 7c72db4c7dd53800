"""Measure the engine against copying the grid and against walking sight lines; print one table.

    python scripts/bench.py [--quick] [--json] [--only NAME ...]

One process, kernels warm, medians of five rounds in which all ways take turns, fixed seeds. Needs
the libraries of the package. Ends with code 1 if an answer is not the walker's, else with 0.
"""

import argparse
import json
import os
import platform
import statistics
import sys
import time
from dataclasses import dataclass, field
from pathlib import Path

import numba
import numpy as np

ROOT = Path(__file__).resolve().parent.parent
sys.path.insert(0, str(ROOT))

from _terrains import SCENES  # noqa: E402
from _walkers import Walkers  # noqa: E402

from viewshed._version import __version__  # noqa: E402
from viewshed.grid import PostMap  # noqa: E402
from viewshed.visibility import compute  # noqa: E402

THREADS, ROUNDS, COPIES, K = 2, 5, 7, 0.13
#: Cells within this of the border between seen and hidden need not agree [m].
TIE = 1e-6
#: Latitude of the scenes [degrees], and the ellipsoid of WGS 84.
LATITUDE, SEMI_AXIS, FLATTENING = 45.0, 6_378_137.0, 1.0 / 298.257_223_563
#: What is asked for: engine over walker, and ns a cell on any terrain.
FASTER, NS_A_CELL = 40.0, 40.0
WALKS = {"outward": (True, False), "inward": (False, False)}
BOUNDED = {"outward, bounded": (True, True), "inward, bounded": (False, True)}
#: Share of the machine that other processes may take before a "NO" is doubted.
CALM = 0.05
#: Column: heading, width, places after the point (None: text).
COLUMNS = {
    "what": ("what", -30, None),
    "eye": ("eye m", 5, 0),
    "seen": ("seen%", 5, 1),
    "ns": ("ns", 6, 1),
    "busy": ("busy", 6, 1),
    "copies": ("copies", 6, 1),
    "one": ("1 thr", 6, 1),
    "gain": ("gain", 4, 2),
    "must": ("must", 7, None),
    "got": ("got", 7, None),
    "ok": ("ok", 3, None),
}
LEGEND = """\
ns: median wall time a cell answered ({threads} threads; copy: 1). busy: processor time / {threads},
what ns would be on a machine with nothing else to do and even shares. copies: ns over ns a cell of
np.copyto of the same grid in the same rounds. 1 thr: ns on one thread; gain: that over ns.
Walkers answer every {step}th row of the scene below them; the bounded ones look at the highest post
of a strip first and are no plain walks, so they are no yardstick. Target height 0, the curve of the
Earth and k = {k} included; cells of 30 m, of the city 5 m."""
#: Range of the run whose memory is measured [cells]: arrays too large to be kept when freed.
MEMORY_RANGE = 3000


@dataclass
class Sizes:
    """How much to measure."""

    walk_range: int
    walk_step: int
    range: int
    check_step: int
    full: bool


@dataclass
class Clock:
    """Wall and processor times of several ways to do something, taken in turns [s]."""

    wall: dict = field(default_factory=dict)
    busy: dict = field(default_factory=dict)
    others: float = 0.0

    def run(self, name, work):
        """Time one call and return what it returns."""
        busy, wall = time.process_time(), time.perf_counter()
        result = work()
        self.wall.setdefault(name, []).append(time.perf_counter() - wall)
        self.busy.setdefault(name, []).append(time.process_time() - busy)
        return result

    def ns(self, name, count):
        """Median wall time of each of `count` things [ns]."""
        return statistics.median(self.wall[name]) * 1e9 / count

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


def post_map(row, col, cell):
    """North-up grid of square cells [m] around an observer at post coordinates row, col."""
    sine2 = np.sin(np.radians(LATITUDE)) ** 2
    e2 = FLATTENING * (2.0 - FLATTENING)
    prime = SEMI_AXIS / np.sqrt(1.0 - e2 * sine2)
    meridian = prime * (1.0 - e2) / (1.0 - e2 * sine2)
    scale = 64.0
    cp, cq = np.zeros((2, 2)), np.zeros((2, 2))
    cp[1, 0] = cq[0, 1] = scale
    jacobian = np.diag((cell, -cell))
    return PostMap(row, col, jacobian, scale, cp, cq, 0.0, 0.0, 0.0, LATITUDE, meridian, prime)


class Run:
    """One scene at one size, ready to be asked."""

    def __init__(self, scene, reach):
        self.scene, self.reach = scene, reach
        self.z = scene.make(2 * reach + 1)
        self.surface = None if scene.cover is None else scene.cover(self.z)
        row, col = scene.place(self.z)
        self.map = post_map(row, col, scene.cell)
        self.copy = self.z.copy()  # written once, as the yardstick asks
        self.answer = self.ask(clearance=True)
        self.cells = int(np.count_nonzero(self.answer.visible != 255))
        self.seen = 100.0 * np.count_nonzero(self.answer.visible == 1) / self.cells

    def ask(self, threads=THREADS, clearance=False):
        """Answer by the engine."""
        return compute(
            self.z,
            self.map,
            surface=self.surface,
            eye_height=self.scene.eye,
            refraction_k=K,
            range_m=self.reach * self.scene.cell,
            clearance=clearance,
            threads=threads,
        )

    def walkers(self):
        """Walkers on the same scene, compiled."""
        eye, range_m = self.answer.eye_elevation, self.reach * self.scene.cell
        walkers = Walkers(self.z, self.map, eye_elevation=eye, range_m=range_m, k=K)
        for bounded in (False, True):
            walkers.answer(np.array([0, 1]), outward=True, bounded=bounded)
        return walkers

    def rows(self, step):
        """Every step-th row, that of the observer among them."""
        return np.arange(round(self.map.row0) % step, self.z.shape[0], step)

    def unlike(self, rows, state):
        """Cells of some rows that a walker answers otherwise, ties left out."""
        differ = state != self.answer.visible[rows]
        return int(np.count_nonzero(differ & ~(np.abs(self.answer.clearance[rows]) <= TIE)))

    def take_copy(self, clock):
        """Time the yardstick once."""
        clock.run("copy", lambda: np.copyto(self.copy, self.z))


def verdict(got, limit, unit, foreign=0.0, least=False):
    """Cells of a row that say what is asked for, what came out and whether it will do.

    A "NO?" comes from a machine that had other work to do.
    """
    sign, good = (">=", got >= limit) if least else ("<=", got <= limit)
    places = 0 if least else 1
    return {
        "must": f"{sign} {limit:g}{unit}",
        "got": f"{got:.{places}f}{unit}",
        "ok": "yes" if good else "NO" if foreign <= CALM else "NO?",
    }


def engine_row(run, clock, name, words):
    """Row of the table for one layer."""
    ns, one = clock.ns(name, run.cells), clock.ns(f"{name} 1", run.cells)
    copy = clock.ns("copy", run.z.size)
    return {
        "what": words,
        "eye": run.scene.eye,
        "seen": run.seen,
        "ns": ns,
        "busy": clock.busy_ns(name, run.cells),
        "best": min(clock.wall[name]) * 1e9 / run.cells,
        "copies": ns / copy,
        "one": one,
        "gain": one / ns,
        "others": clock.others,
        "cells": run.cells,
        "name": f"{run.scene.name} {name}",
    }


def rounds(run, clock, layers, more=()):
    """Let the copy, the engine and `more` (name, work) take turns."""
    start = others()
    for _ in range(COPIES - ROUNDS):
        run.take_copy(clock)
    for _ in range(ROUNDS):
        run.take_copy(clock)
        for name in layers:
            clear = name == "clearance"
            clock.run(name, lambda clear=clear: run.ask(clearance=clear))
            clock.run(f"{name} 1", lambda clear=clear: run.ask(threads=1, clearance=clear))
        for name, work in more:
            clock.run(name, work)
    clock.others = others(start)


def measure_walkers(sizes, checks):
    """Rows of the yardsticks and of the engine beside the walkers."""
    scene = next(scene for scene in SCENES if scene.name == "rough")
    run, clock = Run(scene, sizes.walk_range), Clock()
    walkers, rows = run.walkers(), run.rows(sizes.walk_step)
    targets = int(np.count_nonzero(run.answer.visible[rows] != 255))
    ways = WALKS | BOUNDED
    for name, (outward, bounded) in ways.items():
        state = walkers.answer(rows, outward=outward, bounded=bounded)
        checks[f"walker {name}"] = (targets, run.unlike(rows, state))
    work = [
        (name, lambda o=outward, b=bounded: walkers.answer(rows, outward=o, bounded=b))
        for name, (outward, bounded) in ways.items()
    ]
    rounds(run, clock, ["visible"], work)
    n = run.z.shape[0]
    table = [{"what": f"copy {n} x {n}", "ns": clock.ns("copy", run.z.size), "name": "copy"}]
    for name in ways:
        ns, busy = clock.ns(name, targets), clock.busy_ns(name, targets)
        row = {"what": f"walker {name}", "ns": ns, "busy": busy, "name": f"walker {name}"}
        table.append(row | {"copies": ns / table[0]["ns"], "cells": targets})
    row = engine_row(run, clock, "visible", f"visible, rough, {run.reach} cells range")
    walker = min(clock.ns(name, targets) for name in WALKS)
    row |= {"name": "against walker", "walker": walker, "ratio": walker / row["ns"]}
    if sizes.full:
        row |= verdict(row["ratio"], FASTER, " x", row["others"], least=True)
    else:
        row["got"] = f"{row['ratio']:.0f} x"
    return [*table, row]


def measure_scene(scene, sizes, checks):
    """Rows of one terrain."""
    run, clock = Run(scene, sizes.range), Clock()
    if not np.isnan(run.z).any() and run.surface is None:  # walkers know no voids and no cover
        rows = run.rows(sizes.check_step)
        state = run.walkers().answer(rows, outward=False, bounded=True)
        checks[scene.name] = (int(np.count_nonzero(state != 255)), run.unlike(rows, state))
    run.answer = None
    rounds(run, clock, ["visible", "clearance"])
    table = []
    for name in ("visible", "clearance"):
        words = scene.words if name == "visible" else "  with clearance"
        row = engine_row(run, clock, name, words)
        asked = verdict(row["ns"], NS_A_CELL, "", row["others"]) if name == "visible" else {}
        table.append(row | asked)
    return table


def status(name):
    """Entry of the process's own status in bytes."""
    for line in Path("/proc/self/status").read_text(encoding="ascii").splitlines():
        if line.startswith(name):
            return int(line.split()[1]) * 1024
    raise LookupError(name)


def measure_memory():
    """Rows of the memory taken beside the elevation array, where the system can tell."""
    scene = next(scene for scene in SCENES if scene.name == "sea")
    run = Run(scene, MEMORY_RANGE)
    run.answer = None
    table = []
    for name in ("visible", "clearance"):
        row = {"what": f"memory a cell, {name}", "name": f"memory {name}", "got": "-"}
        try:
            Path("/proc/self/clear_refs").write_text("5", encoding="ascii")  # forget the peak
            before = status("VmRSS")
            run.ask(clearance=name == "clearance")
            row["bytes"] = (status("VmHWM") - before) / run.z.size
            row["got"] = f"{row['bytes']:.2f} B"
        except (OSError, LookupError):
            pass
        table.append(row)
    return table


def machine():
    """Say what it runs on."""
    try:
        text = Path("/proc/cpuinfo").read_text(encoding="utf-8")
        model = text.split("model name", 1)[1].split(":", 1)[1].splitlines()[0].strip()
    except (OSError, IndexError):
        model = platform.processor() or platform.machine()
    try:
        cores = len(os.sched_getaffinity(0))
    except AttributeError:
        cores = os.cpu_count()
    return {
        "cpu": model,
        "cores": cores,
        "python": platform.python_version(),
        "numpy": np.__version__,
        "numba": numba.__version__,
        "viewshed": __version__,
        "load": round(os.getloadavg()[0], 1) if hasattr(os, "getloadavg") else None,
    }


def text_of(value, width, places):
    """One cell of the table."""
    if value is None:
        text = ""
    elif places is None:
        text = str(value)
    else:
        text = f"{value:.{2 if 0 < value < 1 and places else places}f}"
        if places and len(text) > abs(width):
            text = f"{value:.0f}"
    return text.ljust(-width) if width < 0 else text.rjust(width)


def print_table(rows, host, sizes):
    """Print the table, 100 columns wide at most."""
    print(
        f"viewshed {host['viewshed']}, {'full' if sizes.full else 'quick'} run: {host['cpu']}, "
        f"{host['cores']} cores; Python {host['python']},"
    )
    print(f"numpy {host['numpy']}, numba {host['numba']}; load average before it {host['load']}")
    n = 2 * sizes.range + 1
    print(f"Terrains are {n} x {n} float32, seen {sizes.range} cells far.\n")
    print(" ".join(text_of(head, width, None) for head, width, _ in COLUMNS.values()).rstrip())
    for row in rows:
        hide = ("eye", "seen") if row["what"].startswith(" ") else ()
        cells = (
            text_of(None if key in hide else row.get(key), width, places)
            for key, (_, width, places) in COLUMNS.items()
        )
        print(" ".join(cells).rstrip())
    shares = [100.0 * row["others"] for row in rows if "others" in row]
    if shares:
        middle, most = statistics.median(shares), max(shares)
        print(
            f"\nOther processes took {middle:.0f} % of the processors, at most {most:.0f} %; above "
            f"{100 * CALM:.0f} % times are too long (NO?)."
        )
    print("\n" + LEGEND.format(threads=THREADS, step=sizes.walk_step, k=K))


def measure(names, sizes, checks):
    """Measure what is named, telling on stderr where it stands."""
    rows = []
    for name in names:
        print(f"bench: {name}", file=sys.stderr, flush=True)
        if name == "walker":
            rows += measure_walkers(sizes, checks)
        elif name == "memory":
            rows += measure_memory()
        else:
            scene = next(scene for scene in SCENES if scene.name == name)
            rows += measure_scene(scene, sizes, checks)
    return rows


def parse(words):
    """Return the options."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    names = ["walker", *(scene.name for scene in SCENES), "memory"]
    parser.add_argument("--quick", action="store_true", help="smaller grids: under a minute")
    parser.add_argument("--json", action="store_true", help="print JSON in place of the table")
    parser.add_argument(
        "--only", action="append", choices=names, metavar="NAME", help=", ".join(names)
    )
    options = parser.parse_args(words)
    options.names = [name for name in names if not options.only or name in options.only]
    return options


def main(words=None):
    """Measure and print; return the exit code."""
    options = parse(words)
    sizes = Sizes(400, 10, 700, 50, False) if options.quick else Sizes(1500, 40, 3000, 200, True)
    host, checks = machine(), {}
    start = time.perf_counter()
    rows = measure(options.names, sizes, checks)
    asked = sum(count for count, _ in checks.values())
    unlike = sum(count for _, count in checks.values())
    if checks:
        what = f"wrong of {asked:,} walked"
        rows.append({"what": what, "name": "agreement"} | verdict(unlike, 0, ""))
        rows[-1]["must"], rows[-1]["got"] = "0", str(unlike)
    if options.json:
        took = time.perf_counter() - start
        agreement = {name: {"asked": n, "unlike": bad} for name, (n, bad) in checks.items()}
        result = {"machine": host, "quick": options.quick, "seconds": took, "rows": rows}
        print(json.dumps(result | {"agreement": agreement}, indent=2))
    else:
        print_table(rows, host, sizes)
        print(f"Took {time.perf_counter() - start:.0f} s.")
    return 1 if unlike else 0


if __name__ == "__main__":
    sys.exit(main())
