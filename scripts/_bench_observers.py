"""Many observers on one grid: the whole count against one engine run after another."""

import statistics
import warnings

import numpy as np
import rasterio
from _bench_common import THREADS, Clock, K, others
from _bench_process import CELL, write_dem

import viewshed
from viewshed.errors import ViewshedWarning
from viewshed.places import Target
from viewshed.placing import place
from viewshed.postmap import fit_post_map
from viewshed.visibility import compute

SEED, EYE = 4_712, 10.0


def positions(grid, count, reach):
    """Observers at random places, each as far from the borders as it sees where the grid allows."""
    low = min(reach + 2.0, grid.rows / 2.0 - 1.0)
    rng = np.random.default_rng(SEED)
    rows, cols = rng.uniform(low, grid.rows - 1.0 - low, (2, count))
    return [
        viewshed.Observer(float(x), float(y), eye_height=EYE)
        for x, y in zip(*grid.xy(rows, cols), strict=True)
    ]


class Alone:
    """One observer after another by the engine, all that it needs made before."""

    def __init__(self, path, terrain, observers, range_m):
        with rasterio.open(path) as file:
            self.z = file.read(1)
        self.range_m, self.asked = range_m, []
        for one in observers:
            where = place(terrain.grid, one, target=Target(0.0), range_m=range_m, sector=None)
            row, col, rows, cols = where.window
            at = where.row - row, where.col - col
            fitted = fit_post_map(terrain.grid.window(*where.window), *at, range_m=range_m)
            self.asked.append((np.s_[row : row + rows, col : col + cols], fitted))

    def run(self, clock, count):
        """Time every run and add what it sees to a count of the whole grid."""
        for part, post_map in self.asked:
            ground = np.ascontiguousarray(self.z[part])
            answer = clock.run(
                "alone",
                lambda ground=ground, post_map=post_map: compute(
                    ground,
                    post_map,
                    eye_height=EYE,
                    refraction_k=K,
                    range_m=self.range_m,
                    threads=THREADS,
                ),
            )
            count[part] += answer.visible == 1


def measure_observers(sizes, folder, checks):
    """Measure the count of many observers, files read and all, and runs of the engine alone."""
    path = folder / f"utm-{sizes.observer_side}.tif"
    write_dem(path, sizes.observer_side)
    terrain, range_m = viewshed.open_terrain(path), sizes.observer_range * CELL
    observers = positions(terrain.grid, sizes.observers, sizes.observer_range)
    alone = Alone(path, terrain, observers, range_m)

    def together():
        with warnings.catch_warnings():
            warnings.simplefilter("ignore", ViewshedWarning)
            return viewshed.map_visibility(
                terrain, observers, range_m=range_m, refraction=K, layers=["count"], threads=THREADS
            )

    clock, alones, start = Clock(), [], others()
    for _ in range(sizes.rounds):
        result = clock.run("together", together)
        own, count = Clock(), np.zeros(terrain.grid.shape, dtype=np.uint16)
        alone.run(own, count)
        alones.append(sum(own.wall["alone"]))
    share = others(start)
    row, col = (round(float(v)) for v in terrain.grid.rowcol(*result.grid.xy(0, 0)))
    rows, cols = result.grid.shape
    seen, expected = result.count, count[row : row + rows, col : col + cols]
    known = seen != 65535
    checks["observers"] = (int(known.sum()), int((seen[known] != expected[known]).sum()))
    both = clock.seconds("together"), statistics.median(alones)
    return {
        "observers": sizes.observers,
        "range": sizes.observer_range,
        "together": both[0],
        "alone": both[1],
        "ratio": both[0] / both[1],
        "others": share,
    }
