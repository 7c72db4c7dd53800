"""Measure against yardsticks of the same run: copying, walking, reading and writing, imports.

    python scripts/bench.py [--quick] [--short] [--json] [--only NAME ...] [--cache FOLDER]
    python scripts/bench.py --readme [--from FILE]

Prints one table of what is asked and what came out, and what lies behind it. Kernels warm, medians
of rounds in which all ways take turns, fixed seeds. Needs the libraries of the package, 8 GB of
memory and 2 GB of disk. Ends with code 1 if an answer is not the walker's, else with 0.
"""

import argparse
import contextlib
import json
import os
import platform
import sys
import tempfile
import time
from dataclasses import replace
from pathlib import Path

import numba
import numpy as np

ROOT = Path(__file__).resolve().parent.parent
sys.path.insert(0, str(ROOT))

from _bench_asked import agreement, rows_of  # noqa: E402
from _bench_common import FULL, QUICK, Sizes  # noqa: E402
from _bench_engine import measure_scene, measure_walkers  # noqa: E402
from _bench_observers import measure_observers  # noqa: E402
from _bench_plot import draw  # noqa: E402
from _bench_process import measure_processes, measure_sample, measure_starts  # noqa: E402
from _bench_table import beyond, printed, readme_lines, write_readme  # noqa: E402
from _terrains import SCENES  # noqa: E402

from viewshed._version import __version__  # noqa: E402

SCENE_NAMES = [scene.name for scene in SCENES]
#: Groups of measurements, in their order: processes first, while the machine is cool and its
#: memory free.
GROUPS = ["start", "sample", "process", "observers", "walker", "scenes"]
README, PICTURE = ROOT / "README.md", ROOT / "sample_dem" / "cost.png"


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


def measure(names, sizes, folder):
    """Measure what is named, telling on stderr where it stands.

    Parameters
    ----------
    names : list of str
        Groups, and scenes of the group `scenes`.
    sizes : Sizes
        How much.
    folder : pathlib.Path
        Where grids and results of whole processes go.

    Returns
    -------
    dict
        What was found, by group; `agreement` is that with walkers and of counts.
    """
    checks = {}
    ways = {
        "start": lambda: measure_starts(sizes),
        "sample": lambda: measure_sample(sizes, folder),
        "process": lambda: measure_processes(sizes, folder),
        "observers": lambda: measure_observers(sizes, folder, checks),
        "walker": lambda: measure_walkers(sizes, checks),
    }
    found = {}
    start = time.perf_counter()
    for name in names:
        print(f"bench: {time.perf_counter() - start:5.0f} s  {name}", file=sys.stderr, flush=True)
        if name in ways:
            found[name] = ways[name]()
        else:
            scene = next(scene for scene in SCENES if scene.name == name)
            found.setdefault("scenes", {})[name] = measure_scene(scene, sizes, checks)
    if checks:
        found["agreement"] = agreement(checks)
    return found


def parse(words):
    """Return the options."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    names = [*GROUPS, *SCENE_NAMES]
    parser.add_argument("--quick", action="store_true", help="small sizes: about a minute")
    parser.add_argument("--short", action="store_true", help="leave out the longest ranges")
    parser.add_argument("--json", action="store_true", help="print JSON in place of the tables")
    parser.add_argument(
        "--only", action="append", choices=names, metavar="NAME", help=", ".join(names)
    )
    parser.add_argument(
        "--cache", type=Path, metavar="FOLDER", help="keep what whole processes read and write here"
    )
    parser.add_argument(
        "--readme", action="store_true", help="write the tables and the picture into the README"
    )
    parser.add_argument(
        "--from",
        dest="source",
        type=Path,
        metavar="FILE",
        help="measure nothing; take what an earlier --json printed",
    )
    options = parser.parse_args(words)
    only = options.only or GROUPS
    options.names = [name for name in GROUPS if name in only and name != "scenes"]
    options.names += [name for name in SCENE_NAMES if name in only or "scenes" in only]
    if options.readme and (options.only or options.quick or options.short):
        parser.error("--readme needs everything: leave out --only, --quick and --short")
    return options


def main(words=None, sizes=None):
    """Measure and print; return the exit code."""
    options = parse(words)
    if options.source:
        told = json.loads(options.source.read_text(encoding="utf-8"))
        host, found, took = told["machine"], told["found"], told["seconds"]
        sizes = Sizes(**told["sizes"])
    else:
        sizes = sizes or (QUICK if options.quick else FULL)
        if options.short:
            sizes = replace(sizes, curve=sizes.ranges[-1:])
        host, start = machine(), time.perf_counter()
        with contextlib.ExitStack() as stack:
            folder = options.cache or Path(stack.enter_context(tempfile.TemporaryDirectory()))
            folder.mkdir(parents=True, exist_ok=True)
            found = measure(options.names, sizes, folder)
        took = time.perf_counter() - start
    if options.json:
        rows = rows_of(found, sizes)
        result = {"machine": host, "sizes": vars(sizes), "seconds": took, "rows": rows}
        print(json.dumps(result | {"found": found}, indent=2))
    else:
        print("\n".join(printed(found, sizes, host)))
        print(f"Took {took:.0f} s.")
    if options.readme:
        missing = [name for name in GROUPS if name not in found]
        if missing or not sizes.full or not beyond(sizes):
            lacks = f"lacks {', '.join(missing)}" if missing else "is not of the full sizes"
            msg = f"{options.source} {lacks}, so README is left as it is: measure everything first"
            raise SystemExit(msg)
        draw(found, PICTURE)
        write_readme(README, readme_lines(found, sizes, host))
    return 1 if found.get("agreement", {}).get("unlike") else 0


if __name__ == "__main__":
    sys.exit(main())
