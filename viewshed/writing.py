"""From a result to its files: layers, page, table, polygons and record, all or nothing."""

from __future__ import annotations

import logging
import math
import warnings
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING, Any

from viewshed import geodesy
from viewshed._version import __version__
from viewshed.constants import COUNT_NODATA, HIDDEN, NODATA, UNRESOLVED, VISIBLE
from viewshed.errors import OutputError, ViewshedWarning
from viewshed.io._atomic import RESULT_NAMES, check_out_dir, staged
from viewshed.io._files import write_text
from viewshed.io._names import file_names
from viewshed.io.raster import write_cog
from viewshed.io.record import build_record, output_entry, write_record
from viewshed.postmap import fit_post_map
from viewshed.recording import summary_csv
from viewshed.result import grid_name
from viewshed.wording import told_area

if TYPE_CHECKING:
    import os
    from collections.abc import Iterator, Sequence

    from numpy.typing import NDArray

    from viewshed.grid import Grid, PostMap
    from viewshed.io._atomic import Stage
    from viewshed.io.polygons import Patches
    from viewshed.result import MapResult, View

_log = logging.getLogger("viewshed")

#: Who looks where the answer is that of all observers.
EVERYBODY = "all"

#: Description, unit and no-data value of each layer's band, and how coarser copies are made.
_BANDS: dict[str, tuple[str, str, float | None, str]] = {
    "visible": ("visible (1), hidden (0), unresolved (2)", "", NODATA, "mode"),
    "clearance": ("height of the target above the line of its horizon", "m", math.nan, "nearest"),
    "needed-height": (
        "least height above ground at which something is seen",
        "m",
        math.nan,
        "nearest",
    ),
    "count": ("observers that surely see the cell", "", COUNT_NODATA, "nearest"),
    "count-unresolved": (
        "observers for whom the cell is unresolved",
        "",
        COUNT_NODATA,
        "nearest",
    ),
    "who": ("bit n - 1 for observer n that surely sees the cell", "", None, "nearest"),
}
#: Colours of the states in programs that show the raster: the page's plum, and greys apart from it.
_STATE_COLOURS = {VISIBLE: (107, 41, 135), HIDDEN: (226, 224, 220), UNRESOLVED: (240, 190, 90)}
_CAUTION = "A model of the terrain it was given. Not for navigation or flight safety."


@dataclass(frozen=True)
class Wanted:
    """What is written beside the layers; see `MapResult.write`."""

    picture: bool = True
    polygons: str = "none"
    min_patch_m2: float = 0.0
    stac: bool = False
    creation_options: dict[str, str] = field(default_factory=dict)


def write_result(
    result: MapResult, out_dir: str | os.PathLike[str], *, overwrite: bool, wanted: Wanted
) -> list[Path]:
    """Write the files of a result; see `MapResult.write`."""
    each = [view.observer.name for view in result.views] if result.asked.each else []
    check_outputs(out_dir, overwrite=overwrite, each=each, polygons=wanted.polygons)
    folder = Path(out_dir)
    _spare_the_inputs(result, folder)
    with staged(folder, overwrite=overwrite) as stage:
        outputs = dict(_rasters(result, stage, each, wanted))
        outputs |= _table(result, stage)
        if wanted.polygons != "none":
            outputs |= _polygons(result, stage, wanted)
        if wanted.picture:
            outputs |= _picture(result, stage)
        _record(result, stage, outputs, wanted)
        names = [name for name in stage.names if name != "record.json"]
    names.sort(key=lambda name: (name != "map.png", not name.endswith(".tif")))
    return [folder / name for name in [*names, "record.json"]]


def check_outputs(
    out_dir: str | os.PathLike[str], *, overwrite: bool, each: Sequence[str], polygons: str
) -> None:
    """Refuse outputs that could not be written, best before any work.

    Parameters
    ----------
    out_dir : path
        Folder of the results.
    overwrite : bool
        Whether an earlier result there may be replaced.
    each : sequence of str
        Names of the observers that get files of their own.
    polygons : str
        Format of the polygons, or ``"none"``.

    Raises
    ------
    InputError
        If a name cannot name a file, two would name the same one, or the format is not known.
    OutputError
        If the folder cannot be used, or nothing here can write the format.
    """
    file_names(each)
    if polygons != "none":
        from viewshed.io._vector import check_format

        check_format(polygons)
    check_out_dir(out_dir, overwrite)


def patches_of(
    result: MapResult, *, states: tuple[str, ...], min_patch_m2: float
) -> Patches:
    """Give the polygons of the common answer and, where kept, of each observer's."""
    from viewshed.io.polygons import join_patches, polygonise

    k = result.refraction.k
    name = result.views[0].observer.name if len(result.views) == 1 else EVERYBODY
    asked: dict[str, Any] = {
        "k": k,
        "states": states,
        "min_patch_m2": min_patch_m2,
        "rest": result.rest,
    }
    found = [polygonise(result.visible, result.grid, result.areas, observer=name, **asked)]
    for view, visible in _each(result):
        grid, areas = result.grid.window(*view.window), result.areas.window(*view.window)
        found.append(polygonise(visible, grid, areas, observer=view.observer.name, **asked))
    return found[0] if len(found) == 1 else join_patches(found)


def _each(result: MapResult) -> Iterator[tuple[View, NDArray[Any]]]:
    for view in result.views:
        if view.visible is not None:
            yield view, view.visible


def _rasters(
    result: MapResult, stage: Stage, stems: list[str], wanted: Wanted
) -> Iterator[tuple[str, dict[str, Any]]]:
    everybody = result.views[0].observer.name if len(result.views) == 1 else EVERYBODY
    for layer, array in result.arrays.items():
        name = f"{layer.replace('-', '_')}.tif"
        tags = _tags(result, layer, everybody)
        yield name, _raster(stage.path(name), array, result.grid, layer, tags, wanted)
    if result.asked.each:
        views = _each(result) if len(result.views) > 1 else [(result.views[0], result.visible)]
        for stem, (view, visible) in zip(stems, views, strict=True):
            name = f"visible_{stem}.tif"
            grid = result.grid.window(*view.window) if len(result.views) > 1 else result.grid
            tags = _tags(result, "visible", view.observer.name)
            entry = _raster(stage.path(name), visible, grid, "visible", tags, wanted)
            yield name, {**entry, "observer": view.observer.name}


def _raster(
    path: Path,
    array: NDArray[Any],
    grid: Grid,
    layer: str,
    tags: dict[str, str],
    wanted: Wanted,
) -> dict[str, Any]:
    description, unit, nodata, overview = _BANDS[layer]
    written = write_cog(
        path,
        array,
        grid,
        nodata=nodata,
        description=description,
        unit=unit,
        tags=tags,
        overview=overview,
        colours=_STATE_COLOURS if layer == "visible" else None,
        creation_options=wanted.creation_options,
    )
    return {**written, "layer": layer}


def _tags(result: MapResult, layer: str, observer: str) -> dict[str, str]:
    tags = {
        "VERSION": __version__,
        "LAYER": layer,
        "QUESTION": result.question,
        "REFRACTION_K": repr(result.refraction.k),
        "EARTH_FACTOR": repr(result.refraction.K),
        "GEOMETRY_ERROR_M": f"{max(view.post_map.error_m for view in result.views):.3g}",
        "CAUTION": _CAUTION,
        "OBSERVER": observer,
    }
    if layer == "who":
        tags["BITS"] = "; ".join(f"{n} {v.observer.name}" for n, v in enumerate(result.views, 1))
    return tags


def _table(result: MapResult, stage: Stage) -> dict[str, Any]:
    path = stage.path("summary.csv")
    write_text(path, summary_csv(result))
    return {path.name: output_entry(path)}


def _polygons(result: MapResult, stage: Stage, wanted: Wanted) -> dict[str, Any]:
    from viewshed.io.polygons import write_polygons
    patches = patches_of(
        result, states=("visible", "unresolved"), min_patch_m2=wanted.min_patch_m2
    )
    _tell_of_dropped(patches, wanted.min_patch_m2)
    made = write_polygons(stage.folder / "visible", patches.frame, wanted.polygons)
    facts = {"dropped_patches": patches.dropped, "dropped_m2": round(patches.dropped_m2, 1)}
    return {
        path.name: {**output_entry(stage.path(path.name), layer="polygons"), **facts}
        for path in made
    }


def _tell_of_dropped(patches: Patches, least: float) -> None:
    for state, (count, area) in patches.left_out.items():
        if count:
            small = told_area(area, small=area < 1e5)
            _log.info("Polygons: %s, left out %s in %s patches", state, small, f"{count:,}")
    if patches.dropped and not len(patches.frame):
        msg = f"every polygon is smaller than {least:g} m2, so none is left; give a smaller area"
        warnings.warn(msg, ViewshedWarning, stacklevel=2)


def _picture(result: MapResult, stage: Stage) -> dict[str, Any]:
    path = stage.path("map.png")
    draw_page(result, path)
    return {path.name: output_entry(path)}


def draw_page(result: MapResult, path: Path) -> None:
    """Draw the page of a result."""
    from viewshed.io.picture import Marker, Scene, Words, draw_map

    crs = geodesy.crs_from_user(result.grid.crs_wkt)
    unit = crs.axis_info[0].unit_name if crs.axis_info else ""
    single = len(result.views) == 1
    names = _page_names([view.observer.name for view in result.views])
    scene = Scene(
        elevation=result.elevation,
        visible=result.visible,
        grid=result.grid,
        post_map=result.views[0].post_map if single else _middle_map(result.grid),
        observers=[
            Marker(
                *view.position,
                name=name,
                range_m=view.placed.range_m,
                sector=view.placed.sector,
            )
            for view, name in zip(result.views, names, strict=True)
        ],
        count=None if single else result.count,
        rest=result.rest,
    )
    words = Words(
        question=result.question,
        refraction=result.refraction.describe(),
        dem_name=grid_name(result.terrain),
        crs_name=f"{crs.name}, {unit}" if unit else crs.name,
        summary=[(label, _with(names, result, told)) for label, told in result.summary],
        made_with=f"viewshed {__version__}",
    )
    draw_map(path, scene, words)


def _with(names: list[str], result: MapResult, told: str) -> str:
    """Put the name that the page can write in the place of one it cannot."""
    for name, view in zip(names, result.views, strict=True):
        if name != view.observer.name and told.endswith(f" from {view.observer.name}"):
            return told.removesuffix(view.observer.name) + name
    return told


def _page_names(names: list[str]) -> list[str]:
    """Names as the page can write them: those its font lacks letters for become numbers."""
    from viewshed.io._sheet import is_writable

    found = [name if is_writable(name) else f"({n})" for n, name in enumerate(names, 1)]
    odd = [name for name, written in zip(names, found, strict=True) if name != written]
    if odd and len(names) > 1:
        msg = (
            f"the page has no letters for {odd[0]!r}{' and others' if len(odd) > 1 else ''}; it "
            "numbers them as the rows of summary.csv"
        )
        warnings.warn(msg, ViewshedWarning, stacklevel=2)
    return found


def _middle_map(grid: Grid) -> PostMap:
    """Local coordinates about the middle of a grid, good enough to draw with."""
    row, col = (grid.rows - 1) / 2.0, (grid.cols - 1) / 2.0
    return fit_post_map(grid, row, col, range_m=1e7, allowed_cells=math.inf)


def _record(
    result: MapResult, stage: Stage, outputs: dict[str, Any], wanted: Wanted
) -> None:
    record = result.record
    options = {
        **record["options"],
        "picture": wanted.picture,
        "polygons": wanted.polygons,
        "min_patch_m2": wanted.min_patch_m2,
        "stac": wanted.stac,
        "creation_options": wanted.creation_options,
    }
    folder = stage.out_dir.resolve()
    whole = build_record({**record, "options": options, "outputs": outputs}, folder=folder)
    if wanted.stac:
        from viewshed.io.stac import STAC_NAME, write_stac

        path = stage.path(STAC_NAME)
        write_stac(path, whole)
        whole["outputs"][path.name] = output_entry(path)
    write_record(stage.path("record.json"), whole)


def _spare_the_inputs(result: MapResult, folder: Path) -> None:
    """Refuse to write over what was read."""
    surface = result.inputs.surface
    paths = [*result.terrain.paths, *(() if surface is None else surface.paths)]
    own = folder.resolve()
    for path in paths:
        if path.name in RESULT_NAMES and path.parent.resolve() == own:
            msg = f"{path}: is the elevation grid itself; choose another folder for the results"
            raise OutputError(msg)
