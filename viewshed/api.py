"""From files to a result and back to files: what the command line and Python callers use.

A map is made in four steps: place the observer on the grid, read what the range reaches, compute
(`viewshed.visibility`), and say in words and numbers what came out.
"""

from __future__ import annotations

import math
import warnings
from dataclasses import dataclass, field
from functools import cached_property
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from viewshed import geodesy
from viewshed._version import __version__
from viewshed.areas import cell_areas
from viewshed.atmosphere import Refraction, parse_refraction
from viewshed.constants import (
    DEFAULT_RANGE,
    HIDDEN,
    LAYERS,
    NODATA,
    SURVEY_K,
    UNRESOLVED,
    VISIBLE,
)
from viewshed.errors import InputError, OutputError, ViewshedWarning
from viewshed.places import Observer, Sector, Target, parse_length
from viewshed.postmap import fit_post_map, range_window
from viewshed.visibility import compute, ground_at

if TYPE_CHECKING:
    import os
    from collections.abc import Callable, Mapping, Sequence

    from numpy.typing import NDArray

    from viewshed.grid import Grid, PostMap
    from viewshed.io.elevation import Terrain
    from viewshed.visibility import Visibility

__all__ = ["MapResult", "map_visibility"]

#: A target this tall [m] looked for by eyes this low [m] is a structure entered as a target.
_TALL_TARGET, _LOW_EYE = 20.0, 3.0
#: Memory of the page, the writers and the scratch arrays, beside the arrays of the window [bytes].
_OVERHEAD = 500e6

#: A position this near to a post is that post [cells].
_SAME_POST = 1e-6
#: Clearance is told up to here [m]: an obstacle a hair's breadth before the eye gives millions.
_GREATEST_CLEARANCE = np.float32(10_000.0)
#: Half way round the Earth, about [m].
_GREATEST_RANGE = 2e7

_BANDS = {
    "visible": ("visible (1), hidden (0), unresolved (2)", "", NODATA),
    "clearance": ("height of the target above the line of its horizon", "m", math.nan),
    "needed-height": ("least height above ground at which something is seen", "m", math.nan),
}


@dataclass(frozen=True)
class MapResult:
    """What one observer sees, on the elevation grid cropped to the range.

    Attributes
    ----------
    visible : (rows, cols) uint8
        1 visible, 0 hidden, 2 unresolved, 255 void or outside range, sector or grid.
    clearance, needed_height : (rows, cols) float32 or None
        Further layers [m] if asked for; NaN at 2 and 255.
    elevation : (rows, cols) float32
        The ground [m], NaN where void.
    grid : Grid
        Grid of all these arrays.
    post_map : PostMap
        True local coordinates of the posts.
    observer : Observer
        The observer, where it was put.
    warnings : tuple of str
        What the user should know.
    """

    visible: NDArray[np.uint8]
    clearance: NDArray[np.float32] | None
    needed_height: NDArray[np.float32] | None
    elevation: NDArray[np.float32]
    grid: Grid
    post_map: PostMap
    terrain: Terrain
    observer: Observer
    position: tuple[float, float]
    eye_height: float
    target: Target
    range_m: float
    refraction: Refraction
    sector: Sector | None
    layers: tuple[str, ...]
    warnings: tuple[str, ...] = field(default=())

    @property
    def question(self) -> str:
        """The question that the result answers, in words."""
        x, y = self.position
        name = "" if self.observer.name == "observer" else f"{self.observer.name}, "
        if self.observer.eye_elevation is None:
            eye = f"{self.eye_height:g} m above ground"
        else:
            eye = f"{self.observer.eye_elevation:g} m elevation"
        low = self.target.height == 0
        what = "the ground" if low else f"{self.target.height:g} m above ground"
        where = f"within {_length(self.range_m)}"
        if self.sector is not None:
            where += f", bearings {self.sector.from_deg:g} to {self.sector.to_deg:g} degrees"
        return (
            f"from {eye} at {name}{_number(x)}, {_number(y)} to {what} everywhere {where}, "
            f"{self.refraction.describe()}"
        )

    @cached_property
    def counts(self) -> dict[str, int]:
        """Cells of each state."""
        found = np.zeros(256, dtype=np.int64)
        for first in range(0, self.visible.shape[0], 256):  # bincount widens what it is given
            found += np.bincount(self.visible[first : first + 256].ravel(), minlength=256)
        return {name: int(found[value]) for name, value in _STATES.items()}

    @cached_property
    def areas_m2(self) -> dict[str, float]:
        """True area of the cells of each state on the ellipsoid [m2]."""
        areas = cell_areas(self.grid)
        return {
            name: round(areas.total(self.visible == value), 1)
            for name, value in _STATES.items()
            if value != NODATA
        }

    @cached_property
    def farthest_visible(self) -> dict[str, float] | None:
        """The farthest visible cell: x, y, distance [m] and true bearing [degrees]."""
        best = None
        seen = self.visible == VISIBLE
        for row in np.flatnonzero(seen.any(axis=1)):
            # along a row distance has no greatest between its ends
            for col in {int(seen[row].argmax()), seen.shape[1] - 1 - int(seen[row, ::-1].argmax())}:
                east, north = (float(v) for v in self.post_map.en(float(row), float(col)))
                distance = math.hypot(east, north)
                if best is None or distance > best[0]:
                    best = (distance, math.degrees(math.atan2(east, north)) % 360.0, row, col)
        if best is None:
            return None
        x, y = (float(v) for v in self.grid.xy(best[2], best[3]))
        return {"x": x, "y": y, "distance_m": round(best[0], 2), "bearing_deg": round(best[1], 4)}

    @property
    def covered(self) -> float:
        """Share of range and sector that lies on known ground, so that it has an answer."""
        width = 360.0 if self.sector is None else self.sector.width_deg
        asked = math.pi * self.range_m**2 * width / 360.0
        return min(1.0, sum(self.areas_m2.values()) / asked)

    @cached_property
    def summary(self) -> list[tuple[str, str]]:
        """Short table of the result: rows of label and value."""
        total = sum(self.areas_m2.values())
        rows = []
        for name, area in self.areas_m2.items():
            share = f" ({100 * area / total:.1f} %)" if total else ""
            told = f"{area / 1e6:,.2f} km2" if total >= 1e5 else f"{area:,.0f} m2"
            rows.append((name.capitalize(), told + share))
        if self.covered < 0.99:
            rows.append(("Range on known ground", f"{100 * self.covered:.0f} % of it"))
        far = self.farthest_visible
        if far is not None:
            metres = far["distance_m"]
            distance = f"{metres / 1000:.1f} km" if metres >= 1000 else f"{metres:.0f} m"
            told = f"{distance} off at {far['bearing_deg']:.0f} degrees"
            rows.append(("Farthest visible", told))
        rows.append(("Refraction", self.refraction.describe()))
        rows.append(("Ground at the observer", f"{self._ground:.1f} m"))
        if self.terrain.height_unit_origin == "assumed metres":
            rows.append(("Heights", "in metres, as assumed"))
        error = self.post_map.error_m
        told = f"up to {error:.2g} m" if error >= 1e-3 else "under 1 mm"
        rows.append(("Map position error", told))
        return rows

    @cached_property
    def record(self) -> dict[str, Any]:
        """Everything needed to run it again, as plain JSON values (outputs when written)."""
        from viewshed.io.record import build_record

        return build_record(
            {
                "version": __version__,
                "question": self.question,
                "options": self._options(),
                "crs": self.grid.crs_wkt,
                "grid": {"shape": self.grid.shape, "transform": tuple(self.grid.transform)[:6]},
                "dem": self.terrain.fingerprints(),
                "heights": {
                    "metres_per_unit": self.terrain.height_factor,
                    "unit_from": self.terrain.height_unit_origin,
                    "nodata": self.terrain.nodata,
                },
                "observer": {
                    "name": self.observer.name,
                    "x": self.position[0],
                    "y": self.position[1],
                    "eye_height_m": self.eye_height,
                    "ground_m": self._ground,
                },
                "refraction": {
                    "k": self.refraction.k,
                    "K": self.refraction.K,
                    "m": self.refraction.m,
                    "origin": self.refraction.origin,
                },
                "geometry": {
                    "error_m": self.post_map.error_m,
                    "error_cells": self.post_map.error_cells,
                    "degree": self.post_map.degree,
                    "radius_meridian_m": self.post_map.radius_meridian,
                    "radius_prime_vertical_m": self.post_map.radius_prime_vertical,
                },
                "counts": self.counts,
                "areas_m2": self.areas_m2,
                "range_on_known_ground": round(self.covered, 4),
                "farthest_visible": self.farthest_visible,
                "warnings": list(self.warnings),
                "outputs": {},
            }
        )

    @property
    def _ground(self) -> float:
        return ground_at(self.elevation, self.post_map.row0, self.post_map.col0)

    def _options(self) -> dict[str, Any]:
        sector = self.sector
        return {
            "observer": [self.observer.x, self.observer.y],
            "observer_crs": self.observer.crs,
            "eye_height_m": self.observer.eye_height,
            "eye_elevation_m": self.observer.eye_elevation,
            "target_height_m": self.target.height,
            "range_m": self.range_m,
            "sector_deg": None if sector is None else [sector.from_deg, sector.to_deg],
            "refraction_k": self.refraction.k,
            "layers": list(self.layers),
            **self.terrain.stated,
        }

    def write(
        self,
        out_dir: str | os.PathLike[str],
        *,
        overwrite: bool = False,
        picture: bool = True,
        creation_options: Mapping[str, str] | None = None,
    ) -> list[Path]:
        """Write the layers, the page and the record into a folder, all or nothing.

        Parameters
        ----------
        out_dir : path
            Folder; made if it does not exist.
        overwrite : bool
            Whether an earlier result there is replaced.
        picture : bool
            Whether map.png is drawn.
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
        """
        from viewshed.io._atomic import check_out_dir, file_sha256, staged
        from viewshed.io.raster import write_cog
        from viewshed.io.record import build_record, write_record

        check_out_dir(out_dir, overwrite)
        folder = Path(out_dir)
        self._spare_the_inputs(folder)
        outputs: dict[str, Any] = {}
        with staged(folder, overwrite=overwrite) as stage:
            for layer, array in self._arrays():
                name = f"{layer.replace('-', '_')}.tif"
                description, unit, nodata = _BANDS[layer]
                written = write_cog(
                    stage.path(name),
                    array,
                    self.grid,
                    nodata=nodata,
                    description=description,
                    unit=unit,
                    tags=self._tags(layer),
                    overview="mode" if layer == "visible" else "nearest",
                    creation_options=creation_options or {},
                )
                outputs[name] = {**written, "layer": layer}
            if picture:
                self._draw(stage.path("map.png"))
                outputs["map.png"] = {"sha256": file_sha256(stage.path("map.png")), "layer": None}
            options = {
                **self.record["options"],
                "picture": picture,
                "creation_options": dict(creation_options or {}),
            }
            record = build_record(
                {**self.record, "options": options, "outputs": outputs}, folder=folder.resolve()
            )
            write_record(stage.path("record.json"), record)
        names = sorted(outputs, key=lambda n: (n != "map.png", list(outputs).index(n)))
        return [folder / name for name in [*names, "record.json"]]

    def _spare_the_inputs(self, folder: Path) -> None:
        """Refuse to write over the elevation that was read."""
        from viewshed.io._atomic import RESULT_NAMES

        for path in self.terrain.paths:
            if path.resolve().parent == folder.resolve() and path.name in RESULT_NAMES:
                msg = f"{path}: is the elevation grid itself; choose another folder for the results"
                raise OutputError(msg)

    def _arrays(self) -> list[tuple[str, NDArray[Any]]]:
        arrays = {
            "visible": self.visible,
            "clearance": self.clearance,
            "needed-height": self.needed_height,
        }
        return [(name, arrays[name]) for name in self.layers if arrays[name] is not None]  # type: ignore[misc]

    def _tags(self, layer: str) -> dict[str, str]:
        return {
            "VERSION": __version__,
            "LAYER": layer,
            "QUESTION": self.question,
            "REFRACTION_K": repr(self.refraction.k),
            "EARTH_FACTOR": repr(self.refraction.K),
            "GEOMETRY_ERROR_M": f"{self.post_map.error_m:.3g}",
            "CAUTION": "A model of the terrain it was given. Not for navigation or flight safety.",
        }

    def _draw(self, path: Path) -> None:
        from viewshed.io.picture import Scene, Words, draw_map

        crs = geodesy.crs_from_user(self.grid.crs_wkt)
        unit = crs.axis_info[0].unit_name if crs.axis_info else ""
        name = "" if self.observer.name == "observer" else self.observer.name
        scene = Scene(
            elevation=self.elevation,
            visible=self.visible,
            grid=self.grid,
            post_map=self.post_map,
            observers=[(*self.position, name)],
            range_m=self.range_m,
            sector=self.sector,
        )
        words = Words(
            question=self.question,
            refraction=self.refraction.describe(),
            dem_name=_dem_name(self.terrain.paths),
            crs_name=f"{crs.name}, {unit}" if unit else crs.name,
            summary=self.summary,
            made_with=f"viewshed {__version__}",
        )
        draw_map(path, scene, words)


_STATES = {"visible": VISIBLE, "hidden": HIDDEN, "unresolved": UNRESOLVED, "nodata": NODATA}


def _dem_name(paths: Sequence[Path]) -> str:
    first = Path(paths[0]).name
    return first if len(paths) == 1 else f"{first} and {len(paths) - 1} more"


def _length(metres: float) -> str:
    return f"{metres / 1000.0:g} km" if metres >= 1000.0 else f"{metres:g} m"


def _number(value: float) -> str:
    """Write a coordinate without needless digits."""
    return f"{value:.8f}".rstrip("0").rstrip(".") if abs(value) < 1000 else f"{value:.10g}"


def _place(terrain: Terrain, observer: Observer) -> tuple[float, float, float, float]:
    """Post coordinates (row, col) of the observer, and its x and y in the grid's CRS."""
    grid = terrain.grid
    x, y = observer.x, observer.y
    if observer.crs is not None:
        given, own = (geodesy.crs_from_user(crs) for crs in (observer.crs, grid.crs_wkt))
        x, y = geodesy.transform_point(x, y, given, own)
    row, col = geodesy.post_position(grid, x, y)
    # positions and cell sizes are written in decimals: within their rounding a post is meant
    row, col = (round(v) if abs(v - round(v)) < _SAME_POST else v for v in (row, col))
    if 0 <= row <= grid.rows - 1 and 0 <= col <= grid.cols - 1:
        return float(row), float(col), x, y
    told = f"the observer {_number(observer.x)},{_number(observer.y)}"
    if observer.crs is not None:
        told += f" (here x {_number(x)}, y {_number(y)})"
    if -0.5 <= row <= grid.rows - 0.5 and -0.5 <= col <= grid.cols - 0.5:
        msg = (
            f"{told} is in the rim of the elevation grid, less than half a cell from its edge, "
            "where the ground is not known between cell centres: move it inward"
        )
    else:
        left, bottom, right, top = (_number(v) for v in grid.bounds)
        msg = (
            f"{told} is outside the elevation grid (x {left} to {right}, y {bottom} to {top}): "
            "move it, add tiles, or say in which CRS it is given"
        )
    raise InputError(msg)


def _check_memory(
    window: tuple[int, int, int, int], layers: tuple[str, ...], range_m: float
) -> None:
    from viewshed.io._memory import available_memory, check_memory

    cells = window[2] * window[3]
    each = 4 + 1 + 2
    if len(layers) > 1:
        each += 6
    if "needed-height" in layers:
        each += 4
    check_memory(cells * each + _OVERHEAD, available_memory(), range_m)


def _trim(post_map: PostMap, shape: tuple[int, int], range_m: float) -> tuple[slice, slice]:
    """Rows and columns of the window that hold cells within range."""
    rows, cols = shape

    def reached(row: Any, col: Any) -> bool:
        east, north = post_map.en(row, col)
        return bool((np.hypot(east, north) <= range_m).any())

    top, bottom, left, right = 0, rows - 1, 0, cols - 1
    every_row, every_col = np.arange(float(rows)), np.arange(float(cols))
    while top < bottom and not reached(float(top), every_col):
        top += 1
    while bottom > top and not reached(float(bottom), every_col):
        bottom -= 1
    while left < right and not reached(every_row, float(left)):
        left += 1
    while right > left and not reached(every_row, float(right)):
        right -= 1
    return slice(top, bottom + 1), slice(left, right + 1)


def _layers(layers: Sequence[str]) -> tuple[str, ...]:
    unknown = [name for name in layers if name not in LAYERS]
    if unknown:
        msg = f"unknown layer {unknown[0]!r}: choose from {', '.join(LAYERS)}"
        raise InputError(msg)
    return tuple(name for name in LAYERS if name in layers or name == "visible")


def _ground_under(
    elevation: NDArray[np.float32], at: tuple[float, float], place: tuple[float, float]
) -> float:
    try:
        return ground_at(elevation, *at)
    except InputError:
        msg = (
            f"the observer {_number(place[0])},{_number(place[1])} stands on or beside a void, "
            "so the ground under it is not known: move it or fill the void"
        )
        raise InputError(msg) from None


def _eye_height(observer: Observer, ground: float) -> float:
    if observer.eye_elevation is None:
        return float(observer.eye_height or 0.0)
    height = observer.eye_elevation - ground
    if height < 0.0:
        msg = (
            f"the eye at {observer.eye_elevation:g} m is {-height:.2f} m below the ground under it "
            f"({ground:.2f} m): raise it"
        )
        raise InputError(msg)
    return height


def map_visibility(  # noqa: PLR0913 - one name for each thing a question is made of
    terrain: Terrain,
    observer: Observer,
    *,
    target: Target | float = 0.0,
    range_m: float | str = DEFAULT_RANGE,
    refraction: Refraction | float | str = SURVEY_K,
    sector: Sector | None = None,
    layers: Sequence[str] = ("visible",),
    threads: int | None = None,
    progress: Callable[[int, int], None] | None = None,
) -> MapResult:
    """Map what one observer sees of a terrain.

    Parameters
    ----------
    terrain : Terrain
        Elevation grid, from `viewshed.open_terrain`.
    observer : Observer
        Where the sight lines start.
    target : Target or float
        What is looked at in each cell: height above ground [m].
    range_m : float or str
        Farthest ground distance considered [m], or a text such as ``"30km"``.
    refraction : Refraction, float or str
        The air: k, or a text such as ``"K=4/3"`` or ``"survey"``.
    sector : Sector or None
        Bearings looked over; None is all around.
    layers : sequence of str
        Any of ``visible`` (always there), ``clearance`` and ``needed-height``.
    threads : int or None
        Threads to use; None is one a processor. The answer is the same to the bit.
    progress : callable or None
        Called now and then with pieces of work done and in all.

    Returns
    -------
    MapResult
        Arrays, grid and record; `MapResult.write` writes the files.

    Raises
    ------
    InputError
        If a value cannot be used: a range that is not positive, an observer outside the grid, on
        a void or under ground, an unknown layer.
    DataError
        If the elevation cannot be read or is void all over.
    MemoryLimitError
        If the window does not fit in memory; nothing was read then.

    Examples
    --------
    >>> import viewshed
    >>> terrain = viewshed.open_terrain("sample_dem/elevation.tif")
    >>> result = viewshed.map_visibility(
    ...     terrain, viewshed.Observer(410385, 6204255), range_m=2000, refraction="survey"
    ... )
    >>> result.counts["unresolved"], result.refraction.describe()
    (0, 'k = 0.13 (K = 1.149)')
    """
    range_m = parse_length(range_m) if isinstance(range_m, str) else float(range_m)
    if not 0.0 < range_m <= _GREATEST_RANGE:
        msg = f"range {range_m:g} m: give a length above 0 and up to {_length(_GREATEST_RANGE)}"
        raise InputError(msg)
    wanted = _layers(layers)
    goal = target if isinstance(target, Target) else Target(float(target))
    air = refraction if isinstance(refraction, Refraction) else parse_refraction(refraction)
    row, col, x, y = _place(terrain, observer)
    notes: list[str] = []
    window, past = range_window(terrain.grid, row, col, range_m)
    if past:
        notes.append(
            f"the range of {_length(range_m)} reaches past the elevation grid; what lies beyond "
            "is not in the result"
        )
    _check_memory(window, wanted, range_m)
    with warnings.catch_warnings(record=True) as caught:
        warnings.simplefilter("always", ViewshedWarning)
        elevation = terrain.read(*window)
    notes += [str(w.message) for w in caught if issubclass(w.category, ViewshedWarning)]
    at = (row - window[0], col - window[1])
    eye_height = _eye_height(observer, _ground_under(elevation, at, (x, y)))
    if goal.height > _TALL_TARGET and eye_height < _LOW_EYE:
        notes.append(
            f"a target {goal.height:g} m tall seen from an eye at {eye_height:g} m: this maps "
            "where such a thing could be seen from here, not where one such thing is seen from; "
            "for the zone of visibility of a structure make its top the observer"
        )
    for note in notes:
        warnings.warn(note, ViewshedWarning, stacklevel=2)
    grid = terrain.grid.window(*window)
    post_map = fit_post_map(grid, *at, range_m=range_m)
    seen = compute(
        elevation,
        post_map,
        eye_height=eye_height,
        target_height=goal.height,
        refraction_k=air.k,
        range_m=range_m,
        sector=sector,
        clearance="clearance" in wanted,
        needed_height="needed-height" in wanted,
        threads=threads,
        progress=progress,
    )
    if seen.clearance is not None:
        np.minimum(seen.clearance, _GREATEST_CLEARANCE, out=seen.clearance)
    if (seen.visible == NODATA).all():
        where = "" if sector is None else " and the sector"
        msg = f"no known cell centre lies within the range of {_length(range_m)}{where}: widen it"
        raise InputError(msg)
    return _cropped(
        seen,
        elevation,
        grid,
        post_map,
        {
            "terrain": terrain,
            "observer": observer,
            "position": (x, y),
            "eye_height": eye_height,
            "target": goal,
            "range_m": range_m,
            "refraction": air,
            "sector": sector,
            "layers": wanted,
            "warnings": tuple(notes),
        },
    )


def _cropped(
    seen: Visibility,
    elevation: NDArray[np.float32],
    grid: Grid,
    post_map: PostMap,
    facts: dict[str, Any],
) -> MapResult:
    """Cut the result to the rows and columns that hold cells within range."""
    rows, cols = _trim(post_map, elevation.shape, facts["range_m"])
    # the observer's cell stays in, so that the ground under it stays known
    r0, c0 = post_map.row0, post_map.col0
    rows = slice(min(rows.start, math.floor(r0)), max(rows.stop, math.ceil(r0) + 1))
    cols = slice(min(cols.start, math.floor(c0)), max(cols.stop, math.ceil(c0) + 1))

    def cut(array: NDArray[Any] | None) -> Any:
        return None if array is None else array[rows, cols]

    return MapResult(
        visible=cut(seen.visible),
        clearance=cut(seen.clearance),
        needed_height=cut(seen.needed_height),
        elevation=cut(elevation),
        grid=grid.window(
            rows.start, cols.start, rows.stop - rows.start, cols.stop - cols.start
        ),
        post_map=post_map.moved(rows.start, cols.start),
        **facts,
    )
