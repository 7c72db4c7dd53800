"""Whole processes: what a run takes from start to end, against what it cannot do without."""

import json
import os
import statistics
import subprocess
import sys
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import rasterio
from _bench_common import THREADS, others
from _terrains import fractal
from affine import Affine

SCRIPTS = Path(__file__).resolve().parent
ROOT = SCRIPTS.parent
#: Side of a cell [m], and the middle of the grid: UTM zone 32, and about there in degrees.
CELL, EAST, NORTH, LON, LAT = 5.0, 500_000.0, 5_400_000.0, 9.0, 48.753
#: Length of a degree of latitude and of longitude there [m].
LAT_M, LON_M = 111_200.0, 73_540.0
#: Rows and columns of the grid whose map takes the memory of any.
SMALL = 65
#: Libraries whose import is the yardstick of the run on the sample.
LIBRARIES = "numpy, numba, rasterio, pyproj, geopandas, matplotlib"


@dataclass
class Ran:
    """What runs of one command took, in turns with others.

    Attributes
    ----------
    wall, busy : list of float
        Wall and processor time [s].
    peak : list of float
        Greatest resident memory [bytes].
    """

    wall: list
    busy: list
    peak: list

    @property
    def seconds(self):
        """Median wall time [s]."""
        return statistics.median(self.wall)

    def told(self):
        """Medians as a dict; None for what the system does not tell."""
        middles = {
            name: None if None in values else statistics.median(values)
            for name, values in vars(self).items()
        }
        return {"seconds": middles["wall"], "busy": middles["busy"], "peak": middles["peak"]}


def environ():
    """Environment of the processes: this package, two threads, modules kept compiled."""
    kept = {name: value for name, value in os.environ.items() if name != "PYTHONDONTWRITEBYTECODE"}
    return kept | {"PYTHONPATH": str(ROOT), "GDAL_NUM_THREADS": str(THREADS)}


def run_once(words):
    """Run a command of this Python and return what it took.

    Raises
    ------
    RuntimeError
        If it fails.
    """
    python = [sys.executable, "-I", "-S", str(SCRIPTS / "_bench_launch.py"), sys.executable]
    done = subprocess.run(
        [*python, *map(str, words)], env=environ(), capture_output=True, text=True, check=True
    )
    took = json.loads(done.stdout)
    if took["code"]:
        msg = f"{' '.join(map(str, words))} ended with code {took['code']}: {took['said']}"
        raise RuntimeError(msg)
    return took


def in_turns(jobs, rounds, warm=True):
    """Run commands in turns.

    Parameters
    ----------
    jobs : dict
        Words of each command by its name.
    rounds : int
        How often.
    warm : bool
        Whether each runs once before, untimed: what it reads is then in memory, what it compiles
        is kept.

    Returns
    -------
    dict
        `Ran` of each.
    """
    if warm:
        for words in jobs.values():
            run_once(words)
    found = {name: Ran([], [], []) for name in jobs}
    for _ in range(rounds):
        for name, words in jobs.items():
            took = run_once(words)
            for what, values in vars(found[name]).items():
                values.append(took[what])
    return found


def elevation(side):
    """Hills of `side` rows and columns, the highest in the middle, told in centimetres [m]."""
    return np.round(fractal(side, 1.0, 1500.0), 2)


def write_dem(path, side, *, geographic=False):
    """Write the hills as GeoTIFF: DEFLATE, predictor 3, tiles of 512; keep one that is there.

    Parameters
    ----------
    path : pathlib.Path
        The file.
    side : int
        Rows and columns.
    geographic : bool
        Whether cells are of as many metres in degrees, instead of metres in a UTM zone.

    Returns
    -------
    tuple of float
        Coordinates of the middle post.
    """
    width, height = (CELL / LON_M, CELL / LAT_M) if geographic else (CELL, CELL)
    x, y = (LON, LAT) if geographic else (EAST, NORTH)
    corner = Affine(width, 0.0, x - 0.5 * side * width, 0.0, -height, y + 0.5 * side * height)
    if not path.exists():
        draft = path.with_suffix(".part")
        crs = "EPSG:4326" if geographic else "EPSG:32632"
        shape = {"height": side, "width": side, "count": 1, "dtype": "float32"}
        tiles = {"tiled": True, "blockxsize": 512, "blockysize": 512}
        packing = {"compress": "DEFLATE", "predictor": 3, "num_threads": THREADS}
        with rasterio.open(
            draft, "w", driver="GTiff", crs=crs, transform=corner, **shape, **tiles, **packing
        ) as file:
            file.write(elevation(side), 1)
        draft.replace(path)
    return x, y


def map_words(dem, middle, side, out, *more):
    """Words of a run that looks at the whole grid from its middle."""
    where = "{!r},{!r}".format(*middle)
    words = ["-m", "viewshed", "map", dem, "--observer", where, "--range", (side - 1) * CELL]
    return [*words, "--out", out, "--overwrite", "--threads", THREADS, "-q", *more]


def measure_processes(sizes, folder):
    """Measure maps of a large grid, projected and in degrees, with and without what is drawn."""
    side, out, bare = sizes.side, folder / "out", ("--picture", "none")
    paths = {name: folder / f"{name}-{side}.tif" for name in ("utm", "degrees")}
    middle = write_dem(paths["utm"], side)
    degrees = write_dem(paths["degrees"], side, geographic=True)
    small = folder / f"utm-{SMALL}.tif"
    write_dem(small, SMALL)
    words = map_words(paths["utm"], middle, side, out / "utm", *bare)
    run_once(words)
    answer = folder / "answer.npy"
    with rasterio.open(out / "utm" / "visible.tif") as file:
        np.save(answer, file.read(1))
    plain = [SCRIPTS / "_bench_plain.py", paths["utm"], answer, folder / "plain.tif", THREADS]
    jobs = {
        "plain": plain,
        "map": words,
        "geographic": map_words(paths["degrees"], degrees, side, out / "degrees", *bare),
        "small": map_words(small, middle, SMALL, out / "small", *bare),
        "drawn": map_words(paths["utm"], middle, side, out / "drawn", "--polygons", "gpkg"),
    }
    start = others()
    ran = in_turns(jobs, sizes.rounds, warm=sizes.full)
    share = others(start)
    took = {name: one.told() for name, one in ran.items()}
    peaks = [took[name]["peak"] for name in ("map", "small")]
    return {
        "side": side,
        "took": took,
        "map": ran["map"].seconds / ran["plain"].seconds,
        "geographic": ran["geographic"].seconds / ran["map"].seconds,
        "drawn": ran["drawn"].seconds / ran["map"].seconds,
        "bytes": None if None in peaks else (peaks[0] - peaks[1]) / side**2,
        "others": share,
    }


def measure_starts(sizes):
    """Measure how long help and an import take beyond an empty process."""
    jobs = {
        "pass": ["-c", "pass"],
        "help": ["-m", "viewshed", "--help"],
        "import": ["-c", "import viewshed"],
    }
    start = others()
    ran = in_turns(jobs, sizes.starts)
    took = {name: one.told() for name, one in ran.items()}
    more = {name: 1e3 * (ran[name].seconds - ran["pass"].seconds) for name in ("help", "import")}
    return {"took": took, **more, "others": others(start)}


def measure_sample(sizes, folder):
    """Measure maps of the sample terrain against importing the libraries that they need."""
    dem, places = ROOT / "sample_dem" / "elevation.tif", ROOT / "sample_dem" / "places.gpkg"
    words = ["-m", "viewshed", "map", dem, "--overwrite", "-q", "--out"]
    turbines = ["--observers", f"{places}:turbines", "--target-height", 1.7, "--polygons", "gpkg"]
    jobs = {
        "import": ["-c", f"import {LIBRARIES}"],
        "one": [*words, folder / "one", "--observer", "410385,6204255"],
        "turbines": [
            *words, folder / "turbines", *turbines, "--layers", "visible,count,needed-height",
        ],
    }  # fmt: skip
    start = others()
    ran = in_turns(jobs, 5 if sizes.full else 1, warm=sizes.full)
    took = {name: one.told() for name, one in ran.items()}
    ratios = {name: ran[name].seconds / ran["import"].seconds for name in ("one", "turbines")}
    return {"took": took, **ratios, "others": others(start)}
