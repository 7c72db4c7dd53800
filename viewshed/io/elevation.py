"""Elevation grids in: one raster or a mosaic of equal ones, read window by window.

Heights come out in metres, float32, NaN where they are not known, never resampled. A file is
opened anew by each read, so that no open file is shared between threads.
"""

import os
import warnings
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, field
from functools import cached_property
from pathlib import Path
from typing import Any

import numpy as np

from viewshed import geodesy
from viewshed.errors import AllVoidError, InputError, ViewshedWarning
from viewshed.grid import Grid
from viewshed.io import _index, tiles
from viewshed.io._cells import Noticed, fill, fill_void, height_at
from viewshed.io._header import reading_env
from viewshed.io._reference import HEIGHT_UNITS, settle
from viewshed.io.fingerprint import Fingerprint
from viewshed.io.mosaic import Heights, Layout, Part, Tile, fit_together
from viewshed.io.void_height import VoidHeight

__all__ = ["HEIGHT_UNITS", "PathLike", "Reading", "Terrain", "open_terrain"]

PathLike = str | os.PathLike[str]

#: Difference between overlapping tiles that is rounding and no news [m].
_ROUNDING_M = 1e-3


@dataclass(frozen=True)
class Reading:
    """A window of heights and what was found while it was read.

    Attributes
    ----------
    elevation : numpy.ndarray, shape (rows, cols), float32
        Heights [m], NaN for void.
    overlap : tuple or None
        Where tiles overlap: the two files that differ most, the one that counts first, and by how
        much [m]. None where no cell is known from two files.
    undeclared_voids : int
        Cells that hold a value which means a void by habit and is not declared; they are void.
    voids_set : int
        Voids that got the void height.
    """

    elevation: Heights
    overlap: tuple[Path, Path, float] | None = None
    undeclared_voids: int = 0
    voids_set: int = 0


@dataclass(frozen=True)
class Terrain:
    """Heights on a grid, in files.

    Made by `open_terrain`.

    Attributes
    ----------
    grid : Grid
        The whole grid, over all tiles.
    paths : tuple of pathlib.Path
        The files in the order given; where they overlap, the first whose height is known counts.
    given : tuple of str
        The files, folders and patterns as the caller named them.
    height_factor : float
        Metres in one unit of the heights in the files [m].
    height_unit_origin : str
        Where that is known from: ``"option"``, ``"band"``, ``"crs"`` or ``"assumed metres"``.
    datum : str
        What the heights count from, as files or caller state it, else ``"unstated"``.
    tiles : tuple of Tile
        What each file says.
    stated : dict
        What the caller stated of the files: ``crs``, ``height_unit``, ``void_height_m`` and
        ``void_mask``, None where nothing.
    """

    grid: Grid
    height_factor: float
    height_unit_origin: str
    tiles: tuple[Tile, ...] = field(repr=False)
    stated: dict[str, Any] = field(default_factory=dict, repr=False)
    given: tuple[str, ...] = ()
    void_height: VoidHeight | None = field(default=None, repr=False)

    @cached_property
    def paths(self) -> tuple[Path, ...]:
        """The files, in the order given."""
        return tuple(tile.path for tile in self.tiles)

    @property
    def nodata(self) -> tuple[float | None, ...]:
        """The nodata value that each file declares, None where it declares none."""
        return tuple(tile.nodata for tile in self.tiles)

    @cached_property
    def datum(self) -> str:
        """What the heights count from, ``"unstated"`` where nothing says."""
        crs = geodesy.crs_from_user(self.grid.crs_wkt)
        return geodesy.height_datum(crs) or "unstated"

    @cached_property
    def _layout(self) -> Layout:
        return Layout(self.tiles)

    def read(self, row_off: int, col_off: int, rows: int, cols: int) -> Heights:
        """Read the heights of a window; `load` says more about them.

        Parameters
        ----------
        row_off, col_off : int
            First row and column of the window in `grid`.
        rows, cols : int
            Size of the window.

        Returns
        -------
        numpy.ndarray, shape (rows, cols), float32
            Heights [m], NaN for void.

        Raises
        ------
        InputError
            If the window is not inside the grid.
        DataError
            As `load`.
        """
        return self.load(row_off, col_off, rows, cols).elevation

    def load(
        self,
        row_off: int,
        col_off: int,
        rows: int,
        cols: int,
        *,
        cover: Heights | None = None,
        out: Heights | None = None,
    ) -> Reading:
        """Read a window.

        Parameters
        ----------
        row_off, col_off : int
            First row and column of the window in `grid`.
        rows, cols : int
            Size of the window.
        cover : numpy.ndarray, float32, shape (rows, cols), optional
            Heights of a surface over it [m], changed in place: where both are void and the voids
            are stated to have a height, the surface has it too.
        out : numpy.ndarray, float32, shape (rows, cols), optional
            Array to read into.

        Returns
        -------
        Reading
            Heights [m], NaN where a file declares a void, holds a value that means one by habit,
            or there is no file; and what was found meanwhile.

        Raises
        ------
        InputError
            If the window is not inside the grid.
        DataError
            If a file is missing, truncated or damaged, has changed, holds an infinite height, or
            no height in the whole window is known.

        Notes
        -----
        Besides the result it takes the memory of one strip of blocks.
        """
        window = self.grid.window(row_off, col_off, rows, cols)
        out = np.empty((rows, cols), np.float32) if out is None else out
        parts = self._layout.parts(row_off, col_off, rows, cols)
        if not any(part.covers(rows, cols) for part in parts[:1]):
            fill_void(out)
        with reading_env(len(self.tiles)):
            notes = [fill(part, out) for part in parts]
            overlap = _overlap(parts, notes)
        voids_set = 0 if self.void_height is None else self.void_height.fill(window, out, cover)
        if not voids_set and not any(note.is_known for note in notes):
            names = ", ".join(self.given[:3])
            msg = (
                f"{names}: only voids in the {rows} x {cols} cells from row {row_off}, "
                f"column {col_off}; move the observer or use another elevation grid"
            )
            raise AllVoidError(msg)
        _warn(parts, notes, overlap)
        undeclared = sum(sum(note.undeclared.values()) for note in notes)
        return Reading(out, overlap, undeclared, voids_set)

    def fingerprint(
        self, row_off: int, col_off: int, rows: int, cols: int, *, meanwhile: bool = False
    ) -> Fingerprint:
        """Take size and SHA-256 of the files that reach into a window; begin before it is read.

        Parameters
        ----------
        row_off, col_off : int
            First row and column of the window in `grid`.
        rows, cols : int
            Size of the window.
        meanwhile : bool, optional
            Whether that goes on while the caller reads the window.

        Returns
        -------
        Fingerprint
            Its `entries` name the files, and `confirm` makes sure at the end that they are the
            same. Files that belong to a raster follow it; those of the void mask are apart.

        Raises
        ------
        InputError
            If the window is not inside the grid.
        DataError
            If a file cannot be read.
        """
        self.grid.window(row_off, col_off, rows, cols)
        parts = self._layout.parts(row_off, col_off, rows, cols)
        files = [file for part in parts for file in _files(part)]
        mask = None if self.void_height is None else self.void_height.fingerprint
        return Fingerprint(files, mask, meanwhile=meanwhile)

    def fingerprints(self) -> list[dict[str, Any]]:
        """Give name, size and SHA-256 of every file, as `fingerprint` does for the whole grid."""
        return self.fingerprint(0, 0, *self.grid.shape).entries

    def save_index(self, path: PathLike) -> None:
        """Keep the headers of the tiles in a file, for the parameter `index` of `open_terrain`.

        Parameters
        ----------
        path : path
            The file. Put it beside the results, not among the tiles.

        Raises
        ------
        OutputError
            If the file cannot be written, or is there and no index.
        """
        _index.save(path, self.tiles)


def open_terrain(
    paths: PathLike | Sequence[PathLike],
    *,
    crs: str | None = None,
    height_unit: str | None = None,
    void_height: float | None = None,
    void_mask: PathLike | None = None,
    index: PathLike | None = None,
) -> Terrain:
    """Open one elevation raster, or several that form one mosaic of equal grids.

    Only the headers are read here.

    Parameters
    ----------
    paths : path or sequence of paths
        Rasters, folders of rasters, and patterns like ``tiles/n4*.tif``. Several rasters must
        share CRS, datum of the heights, cell size and the position of the cells; they may leave
        gaps, which are voids, and may overlap, where the first known height counts.
    crs : str, optional
        CRS of rasters that state none; a vertical part states the datum and the unit of the
        heights of rasters that state only their horizontal CRS. A raster that states another CRS
        is refused.
    height_unit : {"m", "ft", "us-ft"}, optional
        Unit of the heights. Default: that of the band, else of the CRS, else metres.
    void_height : float, optional
        Height that voids get [m], such as 0 for sea. Default: voids stay unknown.
    void_mask : path, optional
        Vector file; only voids whose cell centre lies in its polygons get `void_height`.
    index : path, optional
        File in which `Terrain.save_index` kept the headers of an earlier run. It need not exist.

    Returns
    -------
    Terrain
        The grid and a way to read it.

    Raises
    ------
    InputError
        If no CRS is stated, `crs` contradicts a file, the heights of a grid in feet have no
        stated unit, or there is a void mask without a void height.
    DataError
        If a file is missing, empty, truncated, no raster, has more than one band, no usable CRS
        or no position, the files do not fit together, or the void mask cannot be used.
    """
    names = [paths] if isinstance(paths, str | os.PathLike) else list(paths)
    if not names:
        msg = "no elevation grid was given; name at least one raster"
        raise InputError(msg)
    if height_unit is not None and height_unit not in HEIGHT_UNITS:
        msg = f"height unit {height_unit!r} is not known; use m, ft or us-ft"
        raise InputError(msg)
    if void_mask is not None and void_height is None:
        msg = f"void mask {os.fspath(void_mask)} was given and no void height; state it, like 0"
        raise InputError(msg)
    if crs is not None:
        geodesy.crs_from_user(crs)
    filled = None if void_height is None else VoidHeight(void_height, void_mask)
    files, found = tiles.find(names)
    with reading_env(len(files)):
        headers = tiles.read_headers(files, found, _index.Index(index))
    grid, placed = fit_together(settle(headers, crs, height_unit))
    return Terrain(
        grid=grid,
        height_factor=placed[0].height_factor,
        height_unit_origin=placed[0].height_unit_origin,
        tiles=tuple(placed),
        stated={
            "crs": crs,
            "height_unit": height_unit,
            "void_height_m": void_height,
            "void_mask": None if void_mask is None else os.fspath(void_mask),
        },
        given=tuple(os.fspath(name) for name in names),
        void_height=filled,
    )


def _files(part: Part) -> Iterable[Path]:
    """Give the files of a tile that its part of a window comes from."""
    tile = part.tile
    shape = (part.rows.stop - part.rows.start, part.cols.stop - part.cols.start)
    used = {piece.path for piece in tile.pieces if piece.reaches(part.row, part.col, shape)}
    unused = {piece.path for piece in tile.pieces} - used
    return (file for file in tile.files if file not in unused)


def _overlap(parts: list[Part], notes: list[Noticed]) -> tuple[Path, Path, float] | None:
    """Find the two files that differ most where they overlap."""
    differing = [i for i, note in enumerate(notes) if not np.isnan(note.difference)]
    if not differing:
        return None
    worst = max(differing, key=lambda i: notes[i].difference)
    row, col = notes[worst].where
    before = [part for part in parts[:worst] if part.holds(row, col)]
    known = (part for part in before[:-1] if not np.isnan(height_at(part, row, col)))
    first = next(known, before[-1])
    return first.tile.path, parts[worst].tile.path, notes[worst].difference


def _warn(
    parts: list[Part], notes: list[Noticed], overlap: tuple[Path, Path, float] | None
) -> None:
    """Tell the user of a window what its files are wrong about."""
    for msg in [*_undeclared(parts, notes), *_missing(parts, notes)]:
        warnings.warn(msg, ViewshedWarning, stacklevel=4)
    if overlap is not None and overlap[2] > _ROUNDING_M:
        msg = (
            f"{overlap[0]} and {overlap[1]} overlap and differ there by up to {overlap[2]:.3g} m; "
            "the one given first counts"
        )
        warnings.warn(msg, ViewshedWarning, stacklevel=4)


def _undeclared(parts: list[Part], notes: list[Noticed]) -> Iterable[str]:
    """Say, once a value, which file holds undeclared voids."""
    for value in dict.fromkeys(value for note in notes for value in note.undeclared):
        having = [i for i, note in enumerate(notes) if value in note.undeclared]
        cells = notes[having[0]].undeclared[value]
        told = "1 cell of" if cells == 1 else f"{cells} cells of"
        yield (
            f"{parts[having[0]].tile.path}: {told} {value:g}, not declared as nodata, taken as "
            f"void{_and_more(len(having))}; declare the value in the file"
        )


def _missing(parts: list[Part], notes: list[Noticed]) -> Iterable[str]:
    """Say which file lacks blocks of cells."""
    having = [i for i, note in enumerate(notes) if note.missing_blocks]
    if having:
        tile, blocks = parts[having[0]].tile, notes[having[0]].missing_blocks
        yield (
            f"{tile.path}: {blocks} blocks of cells are missing in the file and count as height "
            f"{tile.offset * tile.height_factor:g} m{_and_more(len(having))}; if it was not "
            "written to its end, get it again"
        )


def _and_more(count: int) -> str:
    if count == 1:
        return ""
    return f" (likewise in {count - 1} more file{'s' if count > 2 else ''})"
