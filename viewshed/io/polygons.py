"""Patches of cells of one state as polygons, and the files that hold them."""

from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from math import isfinite
from typing import Any

import geopandas
import numpy as np
import pandas
from numpy.typing import NDArray

from viewshed import geodesy
from viewshed.atmosphere import Refraction
from viewshed.constants import HIDDEN, UNRESOLVED, VISIBLE
from viewshed.errors import InputError
from viewshed.grid import CellAreas, Grid
from viewshed.io._rings import Found, Rows, Sweep, find_patches, outlines
from viewshed.io._vector import FORMATS, write_polygons

__all__ = ["FORMATS", "STATES", "Patches", "join_patches", "polygonise", "write_polygons"]

#: States that a polygon can have, in the order of the features, and their values in the raster.
STATES = {"visible": VISIBLE, "unresolved": UNRESOLVED, "hidden": HIDDEN}


@dataclass(frozen=True, eq=False)
class Patches:
    """The patches of a map as polygons.

    Attributes
    ----------
    frame : geopandas.GeoDataFrame
        One polygon a patch, with the columns observer, state, area_m2 (true area on the ellipsoid
        [m2]), map_m2 (area in the plane of the map [m2], null where the CRS is geographic), refr_k
        (coefficient of refraction), earth_fac (effective Earth factor) and geometry.
    left_out : dict of str to tuple of int and float
        By state, how many patches were too small to be in `frame`, and their true area [m2].
    """

    frame: geopandas.GeoDataFrame = field(repr=False)
    left_out: dict[str, tuple[int, float]]

    @property
    def dropped(self) -> int:
        """Number of patches of all states that were too small."""
        return sum(count for count, _ in self.left_out.values())

    @property
    def dropped_m2(self) -> float:
        """True area of the patches of all states that were too small [m2]."""
        return sum(area for _, area in self.left_out.values())


def polygonise(
    visible: NDArray[np.uint8] | Rows,
    grid: Grid,
    areas: CellAreas,
    *,
    observer: str,
    k: float,
    states: tuple[str, ...] = ("visible", "unresolved"),
    min_patch_m2: float = 0.0,
    rest: Callable[[], None] | None = None,
) -> Patches:
    """Make polygons of the patches of cells that have the same state.

    A patch is a set of cells that hang together by their edges. Its polygon follows those edges
    exactly, so polygons of all states together tile the map. Polygons come in the order visible,
    unresolved, hidden, the larger ones first, those of one size from the first row on.

    Parameters
    ----------
    visible : numpy.ndarray, shape (rows, cols)
        States of the cells: 1 visible, 0 hidden, 2 unresolved, 255 no data. It is read by strips of
        rows, each three times, and never copied whole, so it may be mapped from a file.
    grid : Grid
        Where the cells are.
    areas : CellAreas
        True areas of the cells, from `viewshed.areas.cell_areas` of the same grid.
    observer : str
        What the polygons say in the column observer.
    k : float
        Coefficient of refraction that the map was made with [1].
    states : tuple of str, optional
        States that are wanted, some of `STATES`.
    min_patch_m2 : float, optional
        Patches with a smaller true area are left out [m2]. They leave a gap: neither are they
        given to another state nor are holes in other patches filled.
    rest : callable, optional
        Called after each strip of rows, without arguments.

    Returns
    -------
    Patches
        The polygons, and what was left out.

    Raises
    ------
    InputError
        If arrays and grid do not fit together, or a state, `min_patch_m2` or `k` is not usable.
    DataError
        If the states change while they are read.
    """
    if visible.dtype != np.uint8 or visible.shape != grid.shape or areas.shape != grid.shape:
        msg = (
            f"states of type {visible.dtype} and shape {visible.shape} and areas of shape "
            f"{areas.shape} do not fit the grid of shape {grid.shape}; give uint8 and one grid"
        )
        raise InputError(msg)
    for state in states:
        if state not in STATES:
            msg = f"state {state!r} is not known; choose from {', '.join(STATES)}"
            raise InputError(msg)
    if not (isfinite(min_patch_m2) and min_patch_m2 >= 0.0):
        msg = f"least area {min_patch_m2!r} of a patch is not usable; give 0 or more [m2]"
        raise InputError(msg)
    refraction = Refraction(float(k))
    code_of_value = np.zeros(256, np.uint8)
    for code, (state, value) in enumerate(STATES.items(), 1):
        code_of_value[value] = code if state in states else 0
    sweep = Sweep(visible, code_of_value, rest)
    found = find_patches(sweep, areas)
    keep = found.area >= min_patch_m2
    chosen = np.flatnonzero(keep)
    order = chosen[np.lexsort((-found.area[chosen], found.code[chosen]))]
    geometry = outlines(sweep, found, order, grid)
    frame = _frame(found, order, geometry, grid, observer, refraction)
    return Patches(frame, _left_out(found, ~keep, states))


def join_patches(found: Sequence[Patches]) -> Patches:
    """Put the patches of several answers on the same CRS one after the other."""
    left_out: dict[str, tuple[int, float]] = {}
    for patches in found:
        for state, (count, area) in patches.left_out.items():
            before = left_out.get(state, (0, 0.0))
            left_out[state] = (before[0] + count, before[1] + area)
    frames = [patches.frame for patches in found]
    return Patches(pandas.concat(frames, ignore_index=True), left_out)


def _frame(
    found: Found,
    order: NDArray[np.intp],
    geometry: NDArray[Any],
    grid: Grid,
    observer: str,
    refraction: Refraction,
) -> geopandas.GeoDataFrame:
    crs = geodesy.crs_from_user(grid.crs_wkt)
    unit, t = geodesy.horizontal_unit_factor(crs), grid.transform
    cell = float("nan") if unit is None else abs(t.a * t.e - t.b * t.d) * unit**2
    names = np.array(["", *STATES], object)
    columns: dict[str, Any] = {
        "observer": np.full(order.size, observer, object),
        "state": names[found.code[order]],
        "area_m2": found.area[order],
        "map_m2": found.cells[order] * cell,
        "refr_k": np.full(order.size, refraction.k),
        "earth_fac": np.full(order.size, refraction.K),
    }
    return geopandas.GeoDataFrame(columns, geometry=geometry, crs=crs.to_2d().to_wkt("WKT2_2019"))


def _left_out(
    found: Found, small: NDArray[np.bool_], states: tuple[str, ...]
) -> dict[str, tuple[int, float]]:
    left_out = {}
    for code, state in enumerate(STATES, 1):
        if state in states:
            chosen = small & (found.code == code)
            left_out[state] = (int(np.count_nonzero(chosen)), float(np.sum(found.area[chosen])))
    return left_out
