"""What observers see of a terrain, in arrays and in words."""

from __future__ import annotations

import math
from dataclasses import dataclass, field, replace
from functools import cached_property
from pathlib import PurePath
from typing import TYPE_CHECKING, Any

from viewshed.wording import (
    told_area,
    told_distance,
    told_lengths,
    told_number,
    told_span,
)

if TYPE_CHECKING:
    import os
    from collections.abc import Callable, Mapping
    from pathlib import Path

    import numpy as np
    from numpy.typing import NDArray

    from viewshed.atmosphere import Refraction
    from viewshed.grid import CellAreas, Grid, PostMap
    from viewshed.io.elevation import Terrain
    from viewshed.io.polygons import Patches
    from viewshed.io.surface import Surface
    from viewshed.places import Observer, Sector, Target
    from viewshed.placing import Placed, Window
    from viewshed.tally import Tally

__all__ = ["Inputs", "MapResult", "Question", "View"]

_STATES = ("visible", "hidden", "unresolved", "nodata")


@dataclass(frozen=True)
class Question:
    """What a run asks.

    Attributes
    ----------
    target, range_m, sector
        For observers that have none of their own.
    refraction : Refraction
        The air.
    layers : tuple of str
        Layers to answer with.
    each : bool
        Whether what each observer sees is kept.
    """

    target: Target
    range_m: float
    sector: Sector | None
    refraction: Refraction
    layers: tuple[str, ...]
    each: bool = False


@dataclass(frozen=True)
class Inputs:
    """What a result was made from.

    Attributes
    ----------
    terrain : Terrain
        The elevation grid.
    surface : Surface or None
        What blocks sight; None is the ground.
    median_over_ground : float or None
        Median of surface minus ground [m].
    files : tuple of list of dict
        Path, size and SHA-256 of every file read: of the terrain, then of the surface.
    heights : dict
        What became of voids and overlapping tiles.
    """

    terrain: Terrain
    surface: Surface | None
    median_over_ground: float | None
    files: tuple[list[dict[str, Any]], ...]
    heights: dict[str, Any]


@dataclass(frozen=True)
class View:
    """What one observer sees.

    Attributes
    ----------
    placed : Placed
        The observer on the grid, with what it asks.
    ground, eye_height : float
        Ground under it [m] and height of its eye above that [m].
    post_map : PostMap
        True local coordinates of the posts of the result's grid.
    window : tuple of int
        First row and column, rows and columns of its range in the result's grid.
    tally : Tally
        Sums by state and distance.
    visible : numpy.ndarray or None
        Its own `visible` layer in `window`, where that is kept.
    """

    placed: Placed
    ground: float
    eye_height: float
    post_map: PostMap
    window: Window
    tally: Tally
    visible: NDArray[np.uint8] | None = field(default=None, repr=False)

    @property
    def observer(self) -> Observer:
        """The observer, as it was given."""
        return self.placed.observer

    @property
    def position(self) -> tuple[float, float]:
        """Place of the observer [CRS units of the grid]."""
        return self.placed.x, self.placed.y

    @property
    def covered(self) -> float:
        """Share of range and sector that lies on known ground, so that it has an answer."""
        sector = self.placed.sector
        width = 360.0 if sector is None else sector.width_deg
        asked = math.pi * self.placed.range_m**2 * width / 360.0
        return min(1.0, sum(self.tally.areas_m2.values()) / asked)

    def moved(self, row_off: int, col_off: int) -> View:
        """Give the same view for a grid that begins at another post."""
        row, col = self.window[:2]
        return replace(
            self,
            post_map=self.post_map.moved(row_off, col_off),
            window=(row - row_off, col - col_off, *self.window[2:]),
            tally=self.tally.moved(row_off, col_off),
        )


@dataclass(frozen=True)
class MapResult:
    """What observers see, on the elevation grid cropped to their ranges.

    Attributes
    ----------
    arrays : mapping of str to (rows, cols) array
        The layers by name; see the properties.
    elevation : (rows, cols) float32
        The ground [m], NaN where void.
    grid : Grid
        Grid of all these arrays.
    areas : CellAreas
        True areas of its cells.
    views : tuple of View
        What each observer sees, in the order given.
    asked : Question
        What was asked.
    inputs : Inputs
        What it was made from.
    warnings : tuple of str
        What the user should know.
    rest : callable or None
        Called between pieces of work on the arrays where they lie in scratch files, so that memory
        stays bounded.
    """

    arrays: Mapping[str, NDArray[Any]]
    elevation: NDArray[np.float32]
    grid: Grid
    areas: CellAreas
    views: tuple[View, ...]
    asked: Question
    inputs: Inputs
    warnings: tuple[str, ...] = ()
    rest: Callable[[], None] | None = field(default=None, repr=False)

    @property
    def visible(self) -> NDArray[np.uint8]:
        """1 visible, 0 hidden, 2 unresolved, 255 void or outside range, sector or grid."""
        return self.arrays["visible"]

    @property
    def clearance(self) -> NDArray[np.float32] | None:
        """Height of the target above the line of its horizon [m]; NaN at 2 and 255."""
        return self.arrays.get("clearance")

    @property
    def needed_height(self) -> NDArray[np.float32] | None:
        """Least height above ground at which something is seen [m]; NaN at 2 and 255."""
        return self.arrays.get("needed-height")

    @property
    def count(self) -> NDArray[np.uint16] | None:
        """How many observers surely see a cell; 65535 where none has a word on it."""
        return self.arrays.get("count")

    @property
    def who(self) -> NDArray[np.uint32] | None:
        """Bit n for observer n (counted from 0) where it surely sees a cell."""
        return self.arrays.get("who")

    @property
    def terrain(self) -> Terrain:
        """The elevation grid."""
        return self.inputs.terrain

    @property
    def refraction(self) -> Refraction:
        """The air."""
        return self.asked.refraction

    @property
    def layers(self) -> tuple[str, ...]:
        """Names of the layers."""
        return tuple(self.arrays)

    @cached_property
    def question(self) -> str:
        """The question that the result answers, in words."""
        placed = [view.placed for view in self.views]
        targets = {one.target_height for one in placed}
        what = "the ground" if targets == {0.0} else f"{told_span(targets)} m above ground"
        where = f"within {told_lengths(one.range_m for one in placed)}"
        sectors = {one.sector for one in placed}
        sector = next(iter(sectors))
        if len(sectors) > 1:
            where += ", each over its own bearings"
        elif sector is not None:
            where += f", bearings {sector.from_deg:g} to {sector.to_deg:g} degrees"
        surface = self.inputs.surface
        over = "" if surface is None else f", over the surface {grid_name(surface)}"
        return (
            f"from {self._eyes()} at {self._places()} to {what} everywhere {where}{over}, "
            f"{self.refraction.describe()}"
        )

    def _eyes(self) -> str:
        elevations = [view.observer.eye_elevation for view in self.views]
        known = [e for e in elevations if e is not None]
        if not known:
            return f"{told_span(view.eye_height for view in self.views)} m above ground"
        if len(known) == len(elevations):
            return f"{told_span(known)} m elevation"
        return f"{told_span(round(view.eye_height, 2) for view in self.views)} m above ground"

    def _places(self) -> str:
        if len(self.views) > 1:
            return f"{len(self.views)} points"
        view = self.views[0]
        name = "" if view.observer.name == "observer" else f"{view.observer.name}, "
        x, y = view.position
        return f"{name}{told_number(x)}, {told_number(y)}"

    @cached_property
    def counts(self) -> dict[str, int]:
        """Cells of each state."""
        known = self._sums[0]
        return {name: known.get(name, self.visible.size - sum(known.values())) for name in _STATES}

    @cached_property
    def areas_m2(self) -> dict[str, float]:
        """True area of the cells of each state on the ellipsoid [m2]."""
        return {name: round(self._sums[1][name], 1) for name in _STATES if name != "nodata"}

    @cached_property
    def _sums(self) -> tuple[dict[str, int], dict[str, float]]:
        """Cells and areas [m2] of each state that is an answer."""
        if len(self.views) == 1:
            return self.views[0].tally.counts, self.views[0].tally.areas_m2
        from viewshed.tally import sums

        return sums(self.visible, self.areas)

    @cached_property
    def farthest_visible(self) -> dict[str, Any] | None:
        """The visible cell farthest from an observer that sees it: x, y, distance, bearing."""
        found = [self.farthest_of(view) for view in self.views]
        known = [one for one in found if one is not None]
        return max(known, key=lambda one: one["distance_m"]) if known else None

    def farthest_of(self, view: View) -> dict[str, Any] | None:
        """Give the farthest visible cell of one observer: x, y, distance [m], bearing [degrees]."""
        if view.tally.farthest is None:
            return None
        row, col, distance, bearing = view.tally.farthest
        x, y = (float(v) for v in self.grid.xy(row, col))
        return {
            "observer": view.observer.name,
            "x": x,
            "y": y,
            "distance_m": round(distance, 2),
            "bearing_deg": round(bearing, 4),
        }

    @cached_property
    def summary(self) -> list[tuple[str, str]]:
        """Short table of the result: rows of label and value."""
        total = sum(self.areas_m2.values())
        many = len(self.views) > 1
        rows = []
        for name, area in self.areas_m2.items():
            share = f" ({100 * area / total:.1f} %)" if total else ""
            of_any = " from any" if many and name == "visible" else ""
            label = name.capitalize() + of_any
            rows.append((label, told_area(area, small=total < 1e5) + share))
        if many:
            rows.append(("Observers", str(len(self.views))))
        covered = min(view.covered for view in self.views)
        if covered < 0.99:
            least = "as little as " if many else ""
            rows.append(("Range on known ground", f"{least}{100 * covered:.0f} % of it"))
        far = self.farthest_visible
        if far is not None:
            told = f"{told_distance(far['distance_m'])} at {far['bearing_deg']:.0f} degrees"
            rows.append(("Farthest visible", told + (f" from {_short(far)}" if many else "")))
        rows.append(("Refraction", self.refraction.describe()))
        return [*rows, *self._ground_rows()]

    def _ground_rows(self) -> list[tuple[str, str]]:
        rows = []
        if len(self.views) == 1:
            rows.append(("Ground at the observer", f"{self.views[0].ground:.1f} m"))
        surface = self.inputs.surface
        if surface is not None:
            median = self.inputs.median_over_ground
            rows.append(("Surface", f"{grid_name(surface)} ({surface.method})"))
            if median is not None:
                rows.append(("Surface over ground", f"{median:.1f} m in the median"))
            if surface.own.height_unit_origin == "assumed metres":
                rows.append(("Surface heights", "in metres, as assumed"))
        if self.terrain.height_unit_origin == "assumed metres":
            rows.append(("Heights", "in metres, as assumed"))
        void_height = self.terrain.stated.get("void_height_m")
        if void_height is not None:
            cells = self.inputs.heights["voids_set"]
            rows.append(("Voids stated to be", f"{void_height:g} m ({cells:,} cells)"))
        error = max(view.post_map.error_m for view in self.views)
        told = f"up to {error:.2g} m" if error >= 1e-3 else "under 1 mm"
        rows.append(("Map position error", told))
        return rows

    @cached_property
    def record(self) -> dict[str, Any]:
        """Everything needed to run it again, as plain JSON values (outputs when written)."""
        from viewshed.recording import record_of

        return record_of(self)

    def polygons(
        self,
        *,
        states: tuple[str, ...] = ("visible", "unresolved"),
        min_patch_m2: float = 0.0,
    ) -> Patches:
        """Give the patches of the answer as polygons along the edges of cells.

        Parameters
        ----------
        states : tuple of str
            Any of ``visible``, ``unresolved`` and ``hidden``.
        min_patch_m2 : float
            Patches smaller than this are left out [m2].

        Returns
        -------
        Patches
            ``frame``, a GeoDataFrame; ``dropped`` and ``dropped_m2``, what was left out. With a
            question that keeps each observer's answer, theirs follow the common one.
        """
        from viewshed.writing import patches_of

        return patches_of(self, states=states, min_patch_m2=min_patch_m2)

    def write(
        self,
        out_dir: str | os.PathLike[str],
        *,
        overwrite: bool = False,
        picture: bool = True,
        polygons: str = "none",
        min_patch_m2: float = 0.0,
        stac: bool = False,
        creation_options: Mapping[str, str] | None = None,
    ) -> list[Path]:
        """Write the layers, the page, the table and the record into a folder, all or nothing.

        Parameters
        ----------
        out_dir : path
            Folder; made if it does not exist.
        overwrite : bool
            Whether an earlier result there is replaced.
        picture : bool
            Whether map.png is drawn.
        polygons : {"none", "shp", "gpkg", "fgb", "parquet"}
            Format of the polygons.
        min_patch_m2 : float
            Polygons smaller than this are left out [m2].
        stac : bool
            Whether a STAC item is written beside the results.
        creation_options : mapping of str to str, optional
            Options of the COG driver, like ``{"COMPRESS": "ZSTD"}``.

        Returns
        -------
        list of Path
            What was written, the page first.

        Raises
        ------
        OutputError
            If something could not be written whole; the folder is as it was.
        InputError
            If the name of an observer cannot name a file that is asked for.
        """
        from viewshed.writing import Wanted, write_result

        wanted = Wanted(
            picture=picture,
            polygons=polygons,
            min_patch_m2=min_patch_m2,
            stac=stac,
            creation_options=dict(creation_options or {}),
        )
        return write_result(self, out_dir, overwrite=overwrite, wanted=wanted)


def _short(farthest: dict[str, Any]) -> str:
    """Name of the observer of a farthest cell, short enough for a table."""
    name = str(farthest["observer"])
    return name if len(name) <= 20 else f"{name[:12].rstrip()}\u2026{name[-6:].lstrip()}"


def grid_name(grid: Terrain | Surface) -> str:
    """Name a grid or surface by what was given: its first file, its folder or its pattern."""
    first, files = PurePath(grid.given[0]).name or grid.given[0], len(grid.paths)
    if files == 1:
        return grid.paths[0].name
    if len(grid.given) == 1:
        return f"{first} ({files} files)"
    return f"{first} and {len(grid.given) - 1} more"
