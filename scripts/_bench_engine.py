"""The engine on arrays: against copying, against walking, on one thread, and as it grows."""

import time
from functools import partial

import numba
import numpy as np
from _bench_common import THREADS, Clock, K, others
from _terrains import SCENES
from _walkers import Walkers

from viewshed import visibility
from viewshed.grid import PostMap
from viewshed.places import Sector

#: Cells within this of the border between seen and hidden need not agree [m].
TIE = 1e-6
#: Latitude of the scenes [degrees], and the ellipsoid of WGS 84.
LATITUDE, SEMI_AXIS, FLATTENING = 45.0, 6_378_137.0, 1.0 / 298.257_223_563
WALKS = {"outward": (True, False), "inward": (False, False)}
BOUNDED = {"outward, bounded": (True, True), "inward, bounded": (False, True)}
#: Rows that are walked for the curve of the walker, about, and up to which range [cells].
CURVE_ROWS, CURVE_RANGE = 75, 5000


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
    """One scene seen up to one range, ready to be asked.

    Parameters
    ----------
    scene : Scene
        The scene.
    z, surface : numpy.ndarray
        Elevation, and surface over it or None [m].
    place : tuple of float
        Post coordinates of the observer.
    reach : int
        Range [cells].
    """

    def __init__(self, scene, z, surface, place, reach):
        self.scene, self.reach, self.z, self.surface = scene, reach, z, surface
        self.map = post_map(*place, scene.cell)
        self.sector = None if scene.sector is None else Sector(*scene.sector)
        self.copy = z.copy()  # written once, as the yardstick asks
        answer = self.ask()
        self.eye_elevation = answer.eye_elevation
        self.cells = int(np.count_nonzero(answer.visible != 255))
        self.seen = 100.0 * np.count_nonzero(answer.visible == 1) / self.cells

    def ask(self, threads=THREADS, clearance=False, share=None):
        """Answer by the engine; `share` does the pieces of work in the place of its threads."""
        return visibility.compute(
            self.z,
            self.map,
            surface=self.surface,
            eye_height=self.scene.eye,
            refraction_k=K,
            range_m=self.reach * self.scene.cell,
            sector=self.sector,
            clearance=clearance,
            threads=threads,
            share=share,
        )

    def walkers(self):
        """Walkers on the same scene, compiled, on as many threads as the engine."""
        numba.set_num_threads(min(THREADS, numba.config.NUMBA_NUM_THREADS))
        eye, range_m = self.eye_elevation, self.reach * self.scene.cell
        walkers = Walkers(self.z, self.map, eye_elevation=eye, range_m=range_m, k=K)
        for bounded in (False, True):
            walkers.answer(np.array([0, 1]), outward=True, bounded=bounded)
        return walkers

    def rows(self, step):
        """Every step-th row, that of the observer among them."""
        return np.arange(round(self.map.row0) % step, self.z.shape[0], step)

    def take_copy(self, clock, name="copy"):
        """Time the yardstick once."""
        clock.run(name, lambda: np.copyto(self.copy, self.z))


def runs_of(scene, reaches):
    """Make a scene at its largest and cut the others out of it, around the observer."""
    full = max(reaches)
    z = scene.make(2 * full + 1)
    surface = None if scene.cover is None else scene.cover(z)
    row, col = scene.place(z)
    found = []
    for reach in sorted(reaches):
        top, left = (int(at) - int(at) * reach // full for at in (row, col))
        part = np.s_[top : top + 2 * reach + 1, left : left + 2 * reach + 1]
        own = z if reach == full else np.ascontiguousarray(z[part])
        over = None if surface is None else np.ascontiguousarray(surface[part])
        found.append(Run(scene, own, over, (row - top, col - left), reach))
    return found


def unlike(answer, rows, state):
    """Cells of some rows that a walker answers otherwise than the engine, ties left out."""
    differ = state != answer.visible[rows]
    return int(np.count_nonzero(differ & ~(np.abs(answer.clearance[rows]) <= TIE)))


def check(run, step, ways, checks, name):
    """Compare the engine with walkers on every step-th row."""
    answer, walkers, rows = run.ask(clearance=True), run.walkers(), run.rows(step)
    for way, (outward, bounded) in ways.items():
        state = walkers.answer(rows, outward=outward, bounded=bounded)
        if run.sector is not None:  # walkers look all around
            state[answer.visible[rows] == 255] = 255
        asked = int(np.count_nonzero(state != 255))
        checks[f"{name} {way}"] = (asked, unlike(answer, rows, state))
    return walkers, rows, asked


def largest_piece(run):
    """Ask on one thread; return the share that the largest piece of work has in all of them."""
    times = []

    def timed(tasks, *, told=True):
        for task in tasks:
            start = time.perf_counter() if told else 0.0
            task()
            if told:
                times.append(time.perf_counter() - start)

    run.ask(share=timed)
    return max(times) / sum(times)


def measure_walkers(sizes, checks):
    """Measure walkers, the engine beside them, and how walkers grow with the range."""
    scene = next(scene for scene in SCENES if scene.name == "rough")
    curve = [reach for reach in (*sizes.curve, *sizes.ranges) if reach <= CURVE_RANGE]
    runs = {run.reach: run for run in runs_of(scene, {*curve, sizes.walk_range})}
    run, clock, start = runs[sizes.walk_range], Clock(), others()
    walkers, rows, targets = check(run, sizes.walk_step, WALKS | BOUNDED, checks, "walker")
    for turn in range(sizes.turns + 2):
        run.take_copy(clock)
        if turn < sizes.turns:
            clock.run("visible", run.ask)
            for way, (outward, bounded) in (WALKS | BOUNDED).items():
                clock.run(way, partial(walkers.answer, rows, outward=outward, bounded=bounded))
    share = others(start)
    ways = {
        way: {"ns": clock.ns(way, targets), "busy": clock.busy_ns(way, targets)}
        for way in WALKS | BOUNDED
    }
    ns = clock.ns("visible", run.cells)
    return {
        "range": run.reach,
        "walkers": ways,
        "ns": ns,
        "copy": clock.ns("copy", run.z.size),
        "ratio": min(ways[way]["ns"] for way in WALKS) / ns,
        "others": share,
        "curve": [walker_point(runs[reach], sizes) for reach in sorted(curve)],
    }


def walker_point(run, sizes):
    """Time of the faster plain walker at one range."""
    walkers, clock = run.walkers(), Clock()
    rows = run.rows(max(1, 2 * run.reach // CURVE_ROWS))
    for _ in range(sizes.turns // 2 + 1):
        for way, (outward, _) in WALKS.items():
            state = clock.run(way, partial(walkers.answer, rows, outward=outward))
    targets = int(np.count_nonzero(state != 255))
    return {"range": run.reach, "ns": min(clock.ns(way, targets) for way in WALKS)}


def measure_scene(scene, sizes, checks):
    """Measure one scene at all its ranges."""
    reaches = {*sizes.ranges, *(sizes.curve if scene.kind else ())}
    runs = {run.reach: run for run in runs_of(scene, reaches)}
    first, clock = runs[sizes.ranges[0]], Clock()
    if not np.isnan(first.z).any() and first.surface is None:  # walkers know neither
        check(first, sizes.check_step, {"inward": (False, True)}, checks, scene.name)
    pieces, start = [], others()
    for turn in range(sizes.turns + 2):
        for reach, run in runs.items():
            run.take_copy(clock, f"copy {reach}")
            if turn < sizes.turns:
                clock.run(f"visible {reach}", run.ask)
        if turn < sizes.turns:
            clock.run("clearance", partial(first.ask, clearance=True))
            pieces.append(clock.run("one", partial(largest_piece, first)))
    share = others(start)
    points = [point_of(run, clock) for run in runs.values()]
    by_range = {point["range"]: point for point in points}
    ns = by_range[first.reach]["ns"]
    found = {
        "words": scene.words,
        "eye": scene.eye,
        "seen": first.seen,
        "points": points,
        "clearance": clock.ns("clearance", first.cells) / ns,
        "gain": clock.ns("one", first.cells) / ns,
        "piece": sorted(pieces)[len(pieces) // 2],
        "others": share,
    }
    if scene.kind:
        found["growth"] = by_range[max(reaches)]["ns"] / ns
    return found


def point_of(run, clock):
    """Numbers of one scene at one range."""
    ns, copy = (
        clock.ns(f"visible {run.reach}", run.cells),
        clock.ns(f"copy {run.reach}", run.z.size),
    )
    return {
        "range": run.reach,
        "cells": run.cells,
        "ns": ns,
        "busy": clock.busy_ns(f"visible {run.reach}", run.cells),
        "copy": copy,
        "copies": ns / copy,
    }
