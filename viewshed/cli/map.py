"""`viewshed map`: what observers see of an elevation grid, everything in range."""

from __future__ import annotations

import time
import warnings
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from viewshed.cli.grid import GRID_OPTIONS, check_grid_options, grid_options, terrain_of
from viewshed.cli.options import (
    AreaType,
    CrsType,
    FolderType,
    LayersType,
    LengthType,
    NamedPointType,
    NameValueType,
    Progress,
    RefractionType,
    SectionedCommand,
    SectorType,
    columns,
    memory_option,
    overwrite_option,
    table,
    threads_option,
    verbosity,
    verbosity_options,
)
from viewshed.constants import (
    DEFAULT_EYE_HEIGHT,
    DEFAULT_RANGE,
    DEFAULT_TARGET_HEIGHT,
    LAYERS,
    SURVEY_K,
)

if TYPE_CHECKING:
    from viewshed.io.elevation import Terrain
    from viewshed.places import Observer
    from viewshed.result import MapResult

HELP = """Map what can be seen from one place or from many.

DEM is the elevation grid: a raster file, or several, or a folder or pattern of tiles that form one
mosaic of equal grids. Only what the ranges reach is read.

\b
A worked example:
  viewshed map dem.tif --observer 512300,4650120 --eye-height 12 \\
      --range 25km --layers visible,needed-height --out tower
writes into the folder tower:
  map.png            the page to look at first
  visible.tif        what is seen
  needed_height.tif  how tall something must be in each cell to be seen
  summary.csv        areas, distances and shares, a row an observer
  record.json        everything needed to run it again, with checksums

\b
What the values mean:
  visible        1 visible, 0 hidden by known terrain, 2 unresolved (known
                 terrain does not hide it, but the view crosses a void),
                 255 void, or outside range, sector or grid
  clearance      height of the target above the line of its horizon [m];
                 negative: hidden by that much
  needed-height  least height above ground at which something is seen [m]
Of several observers a cell is visible if any sees it, else unresolved if it
is for any; clearance is the greatest, needed height the least, and
  count             how many surely see the cell (65535: no data)
  count-unresolved  for how many it is unresolved
  who               bit n - 1 set where observer n sees it, up to 32

\b
Lengths take a unit: 30km, 6ft, 2nmi; bare numbers are metres. Areas too:
2ha, 0.5km2; bare numbers are square metres.

\b
Refraction is one of
  0.13 or k=0.13  coefficient, Earth radius over the ray's radius
  K=4/3           effective Earth factor, K = 1 / (1 - k)
  m=0.075         angle ratio, m = k / 2
  none, survey (k = 0.13), radio (K = 4/3)

\b
More examples:
  A position in degrees, looking from north-west round to north-east:
    viewshed map dem.tif --observer -68.85,42.0 --observer-crs EPSG:4326 \\
        --sector 315,45 --out north
  From where people 1.7 m tall see the top of an 80 m mast (sight lines are
  the same both ways, so the top of the mast is the observer):
    viewshed map dem.tif --observer 512300,4650120 --eye-height 80 \\
        --target-height 1.7 --range 45km --out mast
  How many of the turbines in a file are seen from where, with polygons,
  over woods and buildings; columns of the file (name, eye_height, range,
  ...) go before the options:
    viewshed map tiles/ --observers turbines.gpkg --eye-height 150 \\
        --target-height 2 --surface dsm.tif --layers visible,count \\
        --polygons gpkg --out turbines
  A grid larger than memory; scratch files hold what does not fit, and the
  answer is the same:
    viewshed map dem.tif --observer 512300,4650120 --range 100km \\
        --memory 2GiB --out far

Take care: the result is no better than the elevation grid, and trees and buildings count only if
they are in it or in the surface. Real air differs from the stated k, most of all near warm or cold
ground. Not for navigation, flight safety or aiming.
"""

SECTIONS = {
    "Who looks": ("observer", "observers", "observer_crs", "eye_height", "eye_elevation"),
    "At what": ("target_height", "range_m", "sector", "refraction"),
    "Elevation grid": (
        *(*GRID_OPTIONS, "index"),
        *("surface", "surface_crs", "surface_height_unit"),
    ),
    "Results": (
        *("out", "layers", "each", "polygons", "min_patch", "picture", "stac", "overwrite"),
        "creation_options",
    ),
}


@click.command(
    "map",
    cls=SectionedCommand,
    sections=SECTIONS,
    help=HELP,
    short_help="Map what can be seen from one place or many.",
)
@grid_options
@click.option(
    "--observer",
    type=NamedPointType(),
    multiple=True,
    metavar="[NAME=]X,Y",
    help="Position: x east or longitude, then y north or latitude, in the CRS of the DEM; can be "
    "repeated.",
)
@click.option(
    "--observers",
    type=click.Path(),
    metavar="FILE",
    help="Points in a vector file, or a CSV with columns x,y or lon,lat. Columns name, eye_height, "
    "eye_elevation, target_height, range, bearing_from and bearing_to go before the options.",
)
@click.option(
    "--observer-crs", type=CrsType(), metavar="CRS", help="CRS of the positions, like EPSG:4326."
)
@click.option(
    "--eye-height",
    type=LengthType(0.0),
    metavar="LENGTH",
    help=f"Height of the eye above ground. [default: {DEFAULT_EYE_HEIGHT:g} m]",
)
@click.option(
    "--eye-elevation",
    type=LengthType(),
    metavar="LENGTH",
    help="Elevation of the eye in the DEM's datum, instead of --eye-height.",
)
@click.option(
    "--target-height",
    type=LengthType(0.0),
    metavar="LENGTH",
    default=f"{DEFAULT_TARGET_HEIGHT:g}",
    help=f"Height above ground of what is looked at. [default: {DEFAULT_TARGET_HEIGHT:g} m]",
)
@click.option(
    "--range",
    "range_m",
    type=LengthType(0.0, open_end=True),
    metavar="LENGTH",
    default=f"{DEFAULT_RANGE:g}",
    help=f"Farthest ground distance. [default: {DEFAULT_RANGE / 1000:g} km]",
)
@click.option(
    "--sector",
    type=SectorType(),
    metavar="FROM,TO",
    help="Bearings looked over, clockwise from true north in degrees; 350,10 crosses north. "
    "[default: all round]",
)
@click.option(
    "--refraction",
    type=RefractionType(),
    metavar="AIR",
    default="survey",
    help=f"State of the air, see above. [default: survey, k = {SURVEY_K:g}]",
)
@click.option(
    "--surface",
    type=click.Path(),
    multiple=True,
    metavar="DSM",
    help="Surface that blocks sight (woods, buildings), while observers and targets stand on the "
    "DEM; can be repeated for tiles.",
)
@click.option(
    "--surface-crs", type=CrsType(), metavar="CRS", help="CRS of a surface that states none."
)
@click.option(
    "--surface-height-unit",
    type=click.Choice(["m", "ft", "us-ft"]),
    help="Unit of the surface's heights, where the file does not say or says it wrong.",
)
@click.option(
    "--index",
    type=click.Path(path_type=Path),
    metavar="FILE",
    help="Where the headers of many tiles are kept between runs. [default: tile_index.json in DIR]",
)
@click.option(
    "--out",
    type=FolderType(),
    required=True,
    metavar="DIR",
    help="Folder for the results; made if it is not there.",
)
@click.option(
    "--layers",
    type=LayersType(),
    metavar="NAMES",
    help=f"Layers to write, with commas between: {', '.join(LAYERS)}. [default: visible, and "
    "count for several observers]",
)
@click.option("--each", is_flag=True, help="Add what each observer sees: visible_NAME.tif.")
@click.option(
    "--polygons",
    type=click.Choice(["shp", "gpkg", "fgb", "parquet", "none"]),
    default="none",
    help="Polygons of what is visible and unresolved. [default: none]",
)
@click.option(
    "--min-patch",
    type=AreaType(),
    default="0",
    metavar="AREA",
    help="Leave out polygons smaller than this. [default: 0]",
)
@click.option("--stac", is_flag=True, help="Describe the results in a STAC item.")
@click.option(
    "--picture",
    type=click.Choice(["png", "none"]),
    default="png",
    help="Page to look at. [default: png]",
)
@overwrite_option
@click.option(
    "--co",
    "creation_options",
    type=NameValueType(),
    multiple=True,
    metavar="NAME=VALUE",
    help="GDAL creation option for the rasters, like COMPRESS=ZSTD; can be repeated.",
)
@memory_option
@threads_option
@verbosity_options
@click.pass_context
def map_command(ctx: click.Context, /, **given: Any) -> None:
    """Map what can be seen from one place or many."""
    from viewshed.io._atomic import nearest_folder
    from viewshed.notes import noted
    from viewshed.placing import named
    from viewshed.writing import check_outputs

    began, quiet = time.perf_counter(), verbosity(ctx) < 0
    check_grid_options(given)
    _check_pairs(given)
    options = _creation_options(given)
    with noted() as notes:
        observers = _observers(given)
        each = [one.name for one in named(observers)] if given["each"] else []
        check_outputs(
            given["out"], overwrite=given["overwrite"], each=each, polygons=given["polygons"]
        )
        terrain = terrain_of(given, _index(given))
        surface = _surface(given, terrain)

    from viewshed.api import map_visibility
    from viewshed.places import Target

    with Progress("Looking", hidden=quiet) as progress:
        result = map_visibility(
            terrain,
            observers,
            target=Target(given["target_height"]),
            range_m=given["range_m"],
            refraction=given["refraction"],
            sector=given["sector"],
            layers=given["layers"],
            each=given["each"],
            surface=surface,
            notes=notes,
            memory=given["memory"],
            scratch=nearest_folder(given["out"]),
            threads=given["threads"],
            progress=progress,
        )
    paths = result.write(
        given["out"],
        overwrite=given["overwrite"],
        picture=given["picture"] == "png",
        polygons=given["polygons"],
        min_patch_m2=given["min_patch"],
        stac=given["stac"],
        creation_options=options,
    )
    _keep_index(given, terrain)
    if not quiet:
        _tell(result, time.perf_counter() - began)
    for path in paths:
        click.echo(str(path))


#: From how many tiles on their headers are kept for the next run.
_MANY_TILES = 64
#: Most observers that the table on the terminal tells one by one.
_MOST_TOLD = 20


def _check_pairs(given: dict[str, Any]) -> None:
    """Refuse options that say nothing without another."""
    if given["min_patch"] and given["polygons"] == "none":
        msg = "--min-patch says which polygons to leave out; give --polygons too"
        raise click.UsageError(msg)
    for option in ("surface_crs", "surface_height_unit"):
        if given[option] and not given["surface"]:
            name = f"--{option.replace('_', '-')}"
            msg = f"{name} {given[option]} is said of a surface; give --surface too"
            raise click.UsageError(msg)


def _creation_options(given: dict[str, Any]) -> dict[str, str]:
    from viewshed.errors import InputError
    from viewshed.io.raster import checked_creation_options

    options = dict(given["creation_options"])
    try:
        checked_creation_options(options)
    except InputError as error:
        raise click.BadParameter(str(error), param_hint="'--co'") from None
    return options


def _observers(given: dict[str, Any]) -> list[Observer]:
    """Make the observers; both heights at once are a wrong call."""
    from viewshed.places import Observer

    height, elevation = given["eye_height"], given["eye_elevation"]
    if height is not None and elevation is not None:
        msg = (
            f"--eye-height ({height:g} m) and --eye-elevation ({elevation:g} m) exclude each "
            "other; give one of them"
        )
        raise click.UsageError(msg)
    if not (given["observer"] or given["observers"]):
        msg = "no observer was given; name one with --observer X,Y or many with --observers FILE"
        raise click.UsageError(msg)
    eye = {"eye_height": height, "eye_elevation": elevation}
    found = [
        Observer(x, y, crs=given["observer_crs"], **({"name": name} if name else {}), **eye)
        for name, x, y in given["observer"]
    ]
    if given["observers"]:
        from viewshed.io.features import read_observers

        found += read_observers(given["observers"], crs=given["observer_crs"], **eye)
    return found


def _index(given: dict[str, Any]) -> Path:
    path: Path = given["index"] or given["out"] / "tile_index.json"
    return path


def _keep_index(given: dict[str, Any], terrain: Terrain) -> None:
    """Keep the headers of many tiles; the result is whole without them."""
    from viewshed.errors import OutputError, ViewshedWarning

    if len(terrain.tiles) < _MANY_TILES:
        return
    try:
        terrain.save_index(_index(given))
    except OutputError as error:
        told = f"{error}; the next run reads all headers again"
        warnings.warn(told, ViewshedWarning, stacklevel=2)


def _surface(given: dict[str, Any], terrain: Terrain) -> Any:
    if not given["surface"]:
        return None
    from viewshed.io.surface import open_surface

    return open_surface(
        list(given["surface"]),
        terrain,
        crs=given["surface_crs"],
        height_unit=given["surface_height_unit"],
    )


def _tell(result: MapResult, seconds: float) -> None:
    """Say on standard error what came out."""
    from viewshed.recording import bands_told, observer_table

    click.echo(table([*result.summary, ("Time taken", f"{seconds:.1f} s")]), err=True)
    if len(result.views) == 1:
        click.echo(table(bands_told(result.views[0])), err=True)
        return
    rows = observer_table(result)
    click.echo(columns(rows[: _MOST_TOLD + 1]), err=True)
    if len(rows) > _MOST_TOLD + 1:
        click.echo(f"and {len(rows) - _MOST_TOLD - 1} more in summary.csv", err=True)
