"""The main job on arrays: elevation in, exact visibility out.

The posts' heights become flat heights (the Earth's curve and the air taken out), directions are
cut into wedges, and each wedge is swept outward on its own by `viewshed.kernels.sweep`.
"""

from __future__ import annotations

import math
import os
import threading
from contextlib import nullcontext
from dataclasses import dataclass
from functools import partial
from typing import TYPE_CHECKING, Any

import numpy as np

from viewshed._jit import announce
from viewshed.constants import HIDDEN, NODATA, VISIBLE
from viewshed.crew import run_jobs
from viewshed.errors import InputError, ViewshedError
from viewshed.kernels import sweep as k
from viewshed.wedges import (
    MOST_SKEW,
    Air,
    Octant,
    Scene,
    Wedge,
    corner_weights,
    shift_of,
    skew_of,
    wedge_counts,
    wedges,
)

if TYPE_CHECKING:
    from collections.abc import Callable, Hashable
    from contextlib import AbstractContextManager

    from numpy.typing import NDArray

    from viewshed.crew import Share
    from viewshed.grid import PostMap
    from viewshed.places import Sector

__all__ = ["Visibility", "compute", "ground_at"]

#: Rows of a layer that are filled or finished at a time.
_STRIP_ROWS = 256


@dataclass(frozen=True)
class Visibility:
    """What one observer sees of an elevation array.

    Attributes
    ----------
    visible : (rows, cols) uint8
        1 visible, 0 hidden, 2 unresolved, 255 outside or void.
    clearance : (rows, cols) float32 or None
        Height of the target point above the line of the horizon [m]; NaN at 2 and 255.
    needed_height : (rows, cols) float32 or None
        Least height above ground at which something is seen [m]; NaN at 2 and 255.
    eye_elevation : float
        Elevation of the eye [m].
    """

    visible: NDArray[np.uint8]
    clearance: NDArray[np.float32] | None
    needed_height: NDArray[np.float32] | None
    eye_elevation: float


def ground_at(elevation: NDArray[np.float32], row: float, col: float) -> float:
    """Ground elevation at a place, bilinear between the four posts around it.

    Parameters
    ----------
    elevation : (rows, cols) float32
        Elevation [m], NaN where void.
    row, col : float
        Post coordinates (whole numbers are cell centres).

    Returns
    -------
    float
        Elevation [m].

    Raises
    ------
    InputError
        If the place is outside the outermost posts or beside a void.
    """
    rows, cols = elevation.shape
    if not (0.0 <= row <= rows - 1 and 0.0 <= col <= cols - 1):
        msg = (
            f"the observer at row {row:.3f}, column {col:.3f} is outside the outermost cell "
            f"centres of the elevation grid ({rows} x {cols} cells): move it inside"
        )
        raise InputError(msg)
    total = 0.0
    for r, c, weight in corner_weights(row, col):
        total += weight * float(elevation[r, c])
    if not math.isfinite(total):
        msg = (
            f"the observer at row {row:.3f}, column {col:.3f} stands on or beside a void cell, so "
            "the ground under it is not known: move it or fill the void"
        )
        raise InputError(msg)
    return total


class _Workers:
    """Scratch arrays, one set a thread, grown when a wedge asks for more."""

    def __init__(self, reach: int, count: int) -> None:
        self._local = threading.local()
        self._width = 128 + math.ceil(2.5 * reach / count)

    def get(self, factor: int) -> tuple[NDArray[Any], ...]:
        """Scratch arrays, `factor` times the usual size or larger."""
        if getattr(self._local, "factor", 0) < factor:
            w = self._width * factor
            self._local.factor = factor
            self._local.arrays = (
                np.zeros((5, w), np.float32),
                np.zeros((2, 7, w)),
                np.zeros((2 + k.PARTS, 4), np.int64),
                np.zeros((k.PARTS, 2), np.int64),
                np.zeros((8, w)),
                np.zeros(w, np.uint8),
                np.zeros((2, 3, 12 * w + 256)),
                np.zeros((4, w)),
                np.zeros((8 * w + 256, 16)),
                np.zeros((2, 4 * w + 64)),
                np.zeros((4, 16)),
                np.zeros((1, 16)),
                np.zeros((2, 8)),
                np.zeros((7, k.PARTS)),
                np.zeros((k.WINDOWS, w), np.float32),
            )
        arrays: tuple[NDArray[Any], ...] = self._local.arrays
        return arrays


def _sweep_piece(
    scene: Scene,
    state: NDArray[np.uint8],
    clearance: NDArray[np.float32],
    piece: Wedge,
    workers: _Workers,
) -> None:
    octant, limits = piece
    factor = 1
    while True:
        status = k.sweep(
            scene.surface,
            scene.surface if scene.ground is None else scene.ground,
            state,
            clearance,
            octant.ints,
            octant.geo,
            octant.coef_u,
            octant.coef_v,
            octant.own,
            limits,
            workers.get(factor),
        )
        if status == k.DONE:
            return
        factor *= 2
        if factor > 1 << 14:
            msg = "the horizon of one direction does not fit in memory: narrow the range"
            raise ViewshedError(msg)


def usable_threads(threads: int | None) -> int:
    """Threads to run: as asked, else one for each processor this process may use."""
    if threads is not None:
        if threads < 1:
            msg = f"{threads} threads cannot do any work: ask for 1 or more"
            raise InputError(msg)
        return int(threads)
    try:
        return max(1, len(os.sched_getaffinity(0)))
    except AttributeError:
        return max(1, os.cpu_count() or 1)


def compute(  # noqa: PLR0913 - one name for each thing a question is made of
    elevation: NDArray[np.float32],
    post_map: PostMap,
    *,
    surface: NDArray[np.float32] | None = None,
    eye_height: float,
    target_height: float = 0.0,
    refraction_k: float = 0.13,
    range_m: float = math.inf,
    sector: Sector | None = None,
    clearance: bool = False,
    needed_height: bool = False,
    empty: Callable[..., NDArray[Any]] = np.empty,
    turn: Callable[[Hashable], AbstractContextManager[Any]] = nullcontext,
    threads: int | None = None,
    progress: Callable[[float, float], None] | None = None,
    share: Share | None = None,
) -> Visibility:
    """Say what one observer sees of every cell of an elevation array.

    Parameters
    ----------
    elevation : (rows, cols) float32
        Elevation of the ground at the posts [m], NaN where void.
    post_map : PostMap
        True local coordinates of the posts; its origin is the observer.
    surface : (rows, cols) float32, optional
        What blocks sight [m], NaN where not known, while observer and targets stand on
        `elevation`. None is the ground itself. It also blocks at the target's own post.
    eye_height : float
        Height of the eye above the ground under it [m].
    target_height : float
        Height above ground of what is looked at [m].
    refraction_k : float
        Refraction coefficient [1].
    range_m : float
        Farthest ground distance considered [m].
    sector : Sector or None
        Bearings looked over; None is all around.
    clearance, needed_height : bool
        Whether to answer with these layers too.
    empty : callable
        What makes the arrays of the layers, by shape and type.
    threads : int or None
        Threads to use; None is one a processor. The answer is the same to the bit.
    progress : callable or None
        Called with pieces done and pieces in all.
    turn : callable
        Gives a context in which a piece is done, by its octant; `viewshed.io.room.Room.turn` keeps
        memory bounded that way.
    share : callable, optional
        Does the pieces, as of a job of `viewshed.crew`, instead of `threads` and `progress`.

    Returns
    -------
    Visibility
        The layers, on the grid of `elevation`.

    Raises
    ------
    InputError
        If the observer is outside the outermost posts, on or beside a void, or under the ground or
        the surface, or if the grid bends too strongly in range, as near a pole.

    Notes
    -----
    With M and P the principal radii at the observer and R' = sqrt(M P) / (1 - k), a post at E, N
    with elevation z has the flat height

        f = (z - z_eye) (1 - z / R') - (1 - k) / 2 * (N^2 / M + E^2 / P).

    Between four posts f is bilinear in row and column. A target is visible when no point of that
    surface strictly between it and the observer lies above the straight line that joins them.
    """
    n_threads = usable_threads(threads)
    if not (range_m > 0.0 and math.isfinite(refraction_k)):
        msg = (
            f"range {range_m} m must be above 0 and the refraction coefficient {refraction_k} a "
            "finite number"
        )
        raise InputError(msg)
    if not (math.isfinite(eye_height) and math.isfinite(target_height)):
        msg = f"eye height {eye_height} and target height {target_height} must be finite numbers"
        raise InputError(msg)
    elevation = np.require(elevation, dtype=np.float32, requirements=["C", "W"])
    if surface is not None:
        surface = np.require(surface, dtype=np.float32, requirements=["C", "W"])
    heights = eye_height, target_height
    scene, eye = _scene(elevation, surface, post_map, heights, refraction_k, range_m, sector)
    asked = _Asked(scene, elevation, clearance, needed_height, empty, turn)
    announce(k.sweep)
    if share is None:
        run_jobs([asked.work], threads=n_threads, progress=progress)
    else:
        asked.work(share)
    return Visibility(
        asked.state, asked.clear if clearance else None, asked.height, eye_elevation=eye
    )


def _scene(
    elevation: NDArray[np.float32],
    surface: NDArray[np.float32] | None,
    post_map: PostMap,
    heights: tuple[float, float],
    refraction_k: float,
    range_m: float,
    sector: Sector | None,
) -> tuple[Scene, float]:
    """Check that the observer can look, and give the scene and the elevation of the eye [m]."""
    eye_height, target_height = heights
    ground = ground_at(elevation, post_map.row0, post_map.col0)
    if eye_height < 0.0:
        msg = (
            f"the eye is {-eye_height:g} m below the ground under it ({ground:.2f} m): raise it "
            "to the ground or above"
        )
        raise InputError(msg)
    skew = skew_of(post_map, *elevation.shape)
    if skew > MOST_SKEW:
        reach, less = (r / 1000.0 for r in (range_m, 0.9 * range_m * MOST_SKEW / skew))
        msg = (
            f"rows and columns bend too strongly within {reach:.3g} km of the observer, as they do "
            f"near a pole; give a range of {less:.2g} km or warp the grid to a projection of the "
            "polar region"
        )
        raise InputError(msg)
    foot = ground
    if surface is not None:
        foot = _surface_under(surface, elevation, post_map, ground + eye_height)
    scene = Scene(
        surface=elevation if surface is None else surface,
        ground=None if surface is None else elevation,
        post_map=post_map,
        air=Air(post_map.radius_meridian, post_map.radius_prime_vertical, refraction_k),
        foot=foot,
        eye_over=eye_height if surface is None else ground + eye_height - foot,
        target_height=target_height,
        range_m=min(range_m, 1e9),
        sector=sector,
        shift=shift_of(post_map) if post_map.degree > 1 else (0.0, 0.0),
        spare=eye_height + target_height,
    )
    return scene, ground + eye_height


class _Asked:
    """The arrays of an answer, and the work that fills them.

    Parameters
    ----------
    scene : Scene
        What is looked at.
    elevation : (rows, cols) float32
        What targets stand on [m].
    clearance, needed_height : bool
        Layers beside `visible`.
    empty, turn : callable
        As for `compute`.
    """

    def __init__(
        self,
        scene: Scene,
        elevation: NDArray[np.float32],
        clearance: bool,
        needed_height: bool,
        empty: Callable[..., NDArray[Any]],
        turn: Callable[[Hashable], AbstractContextManager[Any]],
    ) -> None:
        self.scene = scene
        self.elevation = elevation
        self.turn = turn
        self.wants_clear = clearance or needed_height
        self.state: NDArray[np.uint8] = empty(elevation.shape, np.uint8)
        self.clear = empty(elevation.shape if self.wants_clear else (1, 1), np.float32)
        self.height: NDArray[np.float32] | None = None
        if needed_height:
            self.height = empty(elevation.shape, np.float32) if clearance else self.clear

    def work(self, share: Share) -> None:
        """Fill the arrays: all pieces may be done by any thread."""
        rows = range(0, self.elevation.shape[0], _STRIP_ROWS)
        strips = [slice(first, first + _STRIP_ROWS) for first in rows]
        share([partial(self._blank, strip) for strip in strips], told=False)
        pieces, axes = wedges(self.scene, self.wants_clear)
        for octant in axes:
            self._walk(octant)
        counts = wedge_counts(self.scene)
        workers = _Workers(max(self.elevation.shape), min(counts.values()))
        share([partial(self._sweep, piece, workers) for piece in pieces])
        clear = self.clear if self.wants_clear else None
        _answer_own_place(self.scene, self.elevation, self.state, clear)
        if self.height is not None:
            share([partial(self._lower, strip) for strip in strips], told=False)

    def _blank(self, rows: slice) -> None:
        with self.turn("blank"):
            self.state[rows] = NODATA
            self.clear[rows] = np.nan

    def _walk(self, octant: Octant) -> None:
        with self.turn(id(octant.ints)):
            k.axis(
                self.scene.surface,
                self.elevation,
                self.state,
                self.clear,
                octant.ints,
                octant.geo,
                octant.coef_u,
                octant.own,
            )

    def _sweep(self, piece: Wedge, workers: _Workers) -> None:
        with self.turn(id(piece[0])):
            _sweep_piece(self.scene, self.state, self.clear, piece, workers)

    def _lower(self, rows: slice) -> None:
        """Turn clearances into needed heights."""
        target = np.float32(self.scene.target_height)
        with self.turn("lower"):
            if self.height is not None:
                np.maximum(np.float32(0.0), target - self.clear[rows], out=self.height[rows])


def _surface_under(
    surface: NDArray[np.float32],
    elevation: NDArray[np.float32],
    post_map: PostMap,
    eye: float,
) -> float:
    """Surface under the observer; the eye must not be below it."""
    if surface.shape != elevation.shape:
        msg = f"surface of shape {surface.shape} does not fit the ground of {elevation.shape}"
        raise InputError(msg)
    try:
        foot = ground_at(surface, post_map.row0, post_map.col0)
    except InputError:
        msg = (
            "the surface is not known at the observer, so what stands before the eye is not "
            "either: move the observer or fill the surface"
        )
        raise InputError(msg) from None
    if eye < foot:
        msg = (
            f"the eye at {eye:.2f} m is {foot - eye:.2f} m below the surface at its place "
            f"({foot:.2f} m): raise it or move the observer into the open"
        )
        raise InputError(msg)
    return foot


def _answer_own_place(
    scene: Scene,
    elevation: NDArray[np.float32],
    state: NDArray[np.uint8],
    clear: NDArray[np.float32] | None,
) -> None:
    """Answer the cell whose centre is the observer's own place: it looks straight down there."""
    row, col = scene.post_map.row0, scene.post_map.col0
    if row != int(row) or col != int(col):
        return
    at = int(row), int(col)
    over = np.inf
    if scene.ground is not None:  # the surface at the target's own post
        top = float(elevation[at]) + scene.target_height
        over = (top - scene.foot) * (1.0 - (top - scene.eye_over) * scene.air.inverse_radius)
    state[at] = VISIBLE if over >= 0.0 else HIDDEN
    if clear is not None:
        clear[at] = scene.spare if over == np.inf else over
