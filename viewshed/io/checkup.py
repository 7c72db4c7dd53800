"""What an elevation grid is like, before anybody maps with it: `viewshed check`."""

from collections.abc import Callable
from dataclasses import dataclass
from functools import cached_property
from math import isfinite
from typing import Any

from viewshed import extent, geodesy
from viewshed.constants import DEFAULT_RANGE, LAYERS
from viewshed.errors import InputError
from viewshed.io._memory import run_bytes, told_size
from viewshed.io._survey import NEAR_ZERO, Survey, survey
from viewshed.io._value_steps import Rounding
from viewshed.io._windows import Windows, condensed
from viewshed.io.elevation import HEIGHT_UNITS, Terrain
from viewshed.io.mosaic import uncovered
from viewshed.notes import noted
from viewshed.postmap import range_window

#: Share of the sides of voids with ground near zero from which the voids are likely sea.
_LIKELY_SEA = 0.1
#: No ground is higher or lower than this [m].
_HIGHEST, _LOWEST = 8850.0, -450.0
#: Steps as large as this [m] show in what is seen.
_COARSE_STEP = 0.5


@dataclass(frozen=True)
class Checkup:
    """What was found about an elevation grid.

    Made by `check_up`.

    Attributes
    ----------
    terrain : Terrain
        The grid.
    found : Survey
        What its cells are like.
    cell_m : tuple of float
        True size of the cell in the middle, along its row and along its column [m].
    range_cells : int
        Cells within the default range of the middle.
    warnings : tuple of str
        What was warned of while it was opened and read.
    """

    terrain: Terrain
    found: Survey
    cell_m: tuple[float, float]
    range_cells: int
    warnings: tuple[str, ...]

    @property
    def drivers(self) -> tuple[str, ...]:
        """Formats of the files."""
        return tuple(sorted({tile.driver for tile in self.terrain.tiles}))

    @property
    def cells(self) -> int:
        """Number of cells."""
        return self.terrain.grid.rows * self.terrain.grid.cols

    @property
    def voids(self) -> int:
        """Number of cells whose height is not known."""
        return self.cells - self.found.known

    @cached_property
    def uncovered(self) -> int:
        """Number of cells that lie in no tile."""
        return uncovered(self.terrain.grid, self.terrain.tiles)

    @property
    def step(self) -> Rounding | None:
        """Largest step that all heights are whole multiples of."""
        return self.found.steps.found(self.found.low, self.found.high)

    @property
    def is_sea_likely(self) -> bool:
        """Whether the ground beside the voids is so often near zero that they are likely sea.

        Voids that are stated to have a height, and cells of missing tiles, are no sea.
        """
        if self.terrain.void_height is not None or self.uncovered > self.voids // 2:
            return False
        return self.found.rims > 0 and self.found.rims_near_zero >= _LIKELY_SEA * self.found.rims

    @property
    def memory(self) -> dict[str, dict[str, float]]:
        """Memory that maps take [bytes], by extent and layers."""
        return {
            name: {"visible": run_bytes(cells), "all_layers": run_bytes(cells, LAYERS)}
            for name, cells in (("default_range", self.range_cells), ("whole_grid", self.cells))
        }

    @property
    def notes(self) -> list[str]:
        """What a user should think about before mapping."""
        found = []
        if self.uncovered:
            share = told_share(self.uncovered, self.cells)
            found.append(
                f"{self.uncovered} cells ({share}) lie in no tile: some are missing, or the tiles "
                "do not fill a rectangle"
            )
        if self.is_sea_likely:
            share = told_share(self.found.rims_near_zero, self.found.rims)
            found.append(
                f"{share} of the rim of the voids is ground within {NEAR_ZERO:g} m of zero, so "
                "they are likely sea; if they are, state it with --void-height 0"
            )
        step = self.step
        if step is not None and step.metres >= _COARSE_STEP:
            found.append(
                f"heights come in steps of {step.metres:.4g} m; where the land is level such steps "
                "decide what is seen"
            )
        if self.found.high > _HIGHEST:
            found.append(
                f"no ground is as high as {self.found.high:.0f} m; if the heights are feet, state "
                "it with --height-unit ft"
            )
        if self.found.low < _LOWEST:
            found.append(
                f"no dry ground is as low as {self.found.low:.0f} m; where this is the floor of "
                "the sea, sight lines would pass below its surface"
            )
        return found

    def as_json(self) -> dict[str, Any]:
        """Give everything as a mapping that JSON can hold."""
        grid, found, step = self.terrain.grid, self.found, self.step
        crs = geodesy.crs_from_user(grid.crs_wkt)
        bounds = extent.lonlat_bounds(grid)
        known = found.known > 0
        return {
            "format": "viewshed check",
            "files": {
                "given": list(self.terrain.given),
                "tiles": len(self.terrain.tiles),
                "drivers": list(self.drivers),
                "types": sorted({tile.dtype for tile in self.terrain.tiles}),
                "nodata": sorted({str(value) for value in self.terrain.nodata}),
            },
            "grid": {
                "rows": grid.rows,
                "columns": grid.cols,
                "transform": list(grid.transform)[:6],
                "bounds": list(grid.bounds),
                "lonlat_bounds": None if bounds is None else list(bounds),
            },
            "crs": {
                "name": crs.name,
                "code": geodesy.authority_code(crs),
                "unit": geodesy.unit_name(crs),
            },
            "cell_m": [_number(length) for length in self.cell_m],
            "heights": {
                "lowest_m": float(found.low) if known else None,
                "highest_m": float(found.high) if known else None,
                "unit": unit_name(self.terrain.height_factor),
                "unit_origin": self.terrain.height_unit_origin,
                "datum": self.terrain.datum,
                "step": None if step is None else {"size_m": step.metres, "name": step.name},
            },
            "voids": {
                "cells": self.voids,
                "share": self.voids / self.cells,
                "in_no_tile": self.uncovered,
                "rims": found.rims,
                "rims_near_zero": found.rims_near_zero,
                "likely_sea": self.is_sea_likely,
            },
            "memory_bytes": {"default_range_m": DEFAULT_RANGE, **self.memory},
            "notes": self.notes,
            "warnings": list(self.warnings),
        }

    def rows(self) -> list[tuple[str, str]]:
        """Give everything as labels and values of a table."""
        return [
            ("Files", self._files()),
            ("Size", self._size()),
            ("CRS", crs_words(self.terrain)),
            ("Extent", extent_words(self.terrain)),
            ("Cell", self._cell()),
            ("Heights", self._heights()),
            ("Unit", self._unit()),
            ("Steps", self._steps()),
            ("Voids", self._voids()),
            *self._memory_rows(),
            *(("Note", note) for note in self.notes),
            *(("Warning", warning) for warning in self.warnings),
        ]

    def _files(self) -> str:
        tiles = self.terrain.tiles
        types = ", ".join(sorted({tile.dtype for tile in tiles}))
        count = "1 file" if len(tiles) == 1 else f"{len(tiles)} tiles"
        return f"{count}, {', '.join(self.drivers)}, {types}"

    def _size(self) -> str:
        grid = self.terrain.grid
        return f"{grid.rows} rows x {grid.cols} columns, {self.cells / 1e6:.3g} million cells"

    def _cell(self) -> str:
        across, down = (f"{length:.7g} m" if isfinite(length) else "?" for length in self.cell_m)
        return f"{across} along the rows, {down} along the columns, true size at the centre"

    def _heights(self) -> str:
        if not self.found.known:
            return "none is known"
        return f"{self.found.low:.2f} m to {self.found.high:.2f} m"

    def _unit(self) -> str:
        origins = {
            "option": "as stated by --height-unit",
            "band": "as the file states for its heights",
            "crs": "as the CRS states",
            "assumed metres": "stated nowhere",
        }
        origin = self.terrain.height_unit_origin
        unit = unit_name(self.terrain.height_factor)
        return f"{unit}, {origins.get(origin, origin)}; datum {self.terrain.datum}"

    def _steps(self) -> str:
        if not self.found.known:
            return "no heights"
        if self.found.low == self.found.high:
            return "all heights are the same"
        return "none found" if self.step is None else self.step.name

    def _voids(self) -> str:
        if not self.voids:
            return "none"
        return f"{self.voids} cells, {told_share(self.voids, self.cells)}"

    def _memory_rows(self) -> list[tuple[str, str]]:
        names = {
            "default_range": f"a range of {DEFAULT_RANGE / 1000:g} km",
            "whole_grid": "the whole grid",
        }
        return [
            (
                "Memory" if name == "default_range" else "",
                f"{told_size(need['visible'])} for {names[name]}, {told_size(need['all_layers'])} "
                "with all layers",
            )
            for name, need in self.memory.items()
        ]


def check_up(
    open_it: Callable[[], Terrain], progress: Callable[[int, int], None] | None = None
) -> Checkup:
    """Look at all of an elevation grid, a strip at a time.

    Parameters
    ----------
    open_it : callable
        Opens the grid; what is warned of meanwhile is told with the rest.
    progress : callable, optional
        Called with rows done and in all.

    Returns
    -------
    Checkup
        What was found.

    Raises
    ------
    InputError, DataError
        As from `open_terrain` and `Terrain.read`.
    """
    with noted(told=False) as met:
        terrain = open_it()
    windows = Windows(terrain)
    found = survey(terrain.grid, windows.read, terrain.tiles[0].block[0], progress)
    return Checkup(
        terrain=terrain,
        found=found,
        cell_m=extent.cell_size(terrain.grid),
        range_cells=_cells_in_range(terrain),
        warnings=tuple(condensed([*met, *windows.met])),
    )


def _cells_in_range(terrain: Terrain) -> int:
    """Count the cells of the window that the default range reaches from the middle of a grid."""
    grid = terrain.grid
    try:
        window, _ = range_window(grid, (grid.rows - 1) / 2, (grid.cols - 1) / 2, DEFAULT_RANGE)
    except InputError:
        return grid.rows * grid.cols
    return window[2] * window[3]


# --- words --------------------------------------------------------------------------------------


def unit_name(factor: float) -> str:
    """Give the name of a unit of height by its metres."""
    names = (name for name, metres in HEIGHT_UNITS.items() if abs(factor / metres - 1.0) < 1e-9)
    return next(names, f"{factor:g} m")


def told_share(part: int, whole: int) -> str:
    """Give a share in percent, never as nothing or all where it is not."""
    percent = 100.0 * part / whole
    if 0 < percent < 0.01:
        return "less than 0.01 %"
    return "more than 99.9 %" if 99.9 < percent < 100 else f"{percent:.3g} %"


def crs_words(terrain: Terrain) -> str:
    """Give name, code and unit of the CRS of a grid."""
    crs = geodesy.crs_from_user(terrain.grid.crs_wkt)
    code = geodesy.authority_code(crs)
    return f"{crs.name}{f' ({code})' if code else ''}, in units of {geodesy.unit_name(crs)}"


def extent_words(terrain: Terrain) -> str:
    """Give the extent of a grid in longitude and latitude."""
    bounds = extent.lonlat_bounds(terrain.grid)
    if bounds is None:
        return "in no known place"
    west, south, east, north = bounds
    return f"longitude {west:.5f} to {east:.5f}, latitude {south:.5f} to {north:.5f} degrees"


def _number(value: float) -> float | None:
    return value if isfinite(value) else None
