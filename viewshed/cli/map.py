"""`viewshed map`: one observer, one elevation grid, everything in range."""

from __future__ import annotations

import time
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from viewshed.cli.options import (
    CrsType,
    FolderType,
    LayersType,
    LengthType,
    NameValueType,
    PointType,
    Progress,
    RefractionType,
    SectionedCommand,
    SectorType,
    table,
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
    from viewshed.places import Observer

HELP = """Map what can be seen from one place.

DEM is the elevation grid: one raster file, or several that form one mosaic of equal grids. Only
what the range reaches is read.

\b
A worked example:
  viewshed map dem.tif --observer 512300,4650120 --eye-height 12 \\
      --range 25km --layers visible,needed-height --out tower
writes into the folder tower:
  map.png            the page to look at first
  visible.tif        what is seen
  needed_height.tif  how tall something must be in each cell to be seen
  record.json        everything needed to run it again, with checksums

\b
What the values mean:
  visible        1 visible, 0 hidden by known terrain, 2 unresolved (known
                 terrain does not hide it, but the view crosses a void),
                 255 void, or outside range, sector or grid
  clearance      height of the target above the line of its horizon [m];
                 negative: hidden by that much
  needed-height  least height above ground at which something is seen [m]

\b
Lengths take a unit: 30km, 6ft, 2nmi; bare numbers are metres.

\b
Refraction is one of
  0.13 or k=0.13  coefficient, Earth radius over the ray's radius
  K=4/3           effective Earth factor, K = 1 / (1 - k)
  m=0.075         angle ratio, m = k / 2
  none, survey (k = 0.13), radio (K = 4/3)

\b
More examples:
  A position in degrees, looking from north-west round to north-east:
    viewshed map dem.tif --observer -71.5,42.1 --observer-crs EPSG:4326 \\
        --sector 315,45 --out north
  From where people 1.7 m tall see the top of an 80 m mast (sight lines are
  the same both ways, so the top of the mast is the observer):
    viewshed map dem.tif --observer 512300,4650120 --eye-height 80 \\
        --target-height 1.7 --range 45km --out mast

Take care: the result is no better than the elevation grid, and trees and buildings count only if
they are in it. Real air differs from the stated k, most of all near warm or cold ground. Not for
navigation, flight safety or aiming.
"""

SECTIONS = {
    "Who looks": ("observer", "observer_crs", "eye_height", "eye_elevation"),
    "At what": ("target_height", "range_m", "sector", "refraction"),
    "Elevation grid": ("crs", "height_unit"),
    "Results": ("out", "layers", "picture", "overwrite", "creation_options"),
}


@click.command(
    "map",
    cls=SectionedCommand,
    sections=SECTIONS,
    help=HELP,
    short_help="Map what can be seen from one place.",
)
@click.argument("dem", nargs=-1, required=True, metavar="DEM...")
@click.option(
    "--observer",
    type=PointType(),
    required=True,
    metavar="X,Y",
    help="Position: x east or longitude, then y north or latitude, in the CRS of the DEM.",
)
@click.option(
    "--observer-crs", type=CrsType(), metavar="CRS", help="CRS of the position, like EPSG:4326."
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
    "--crs", type=CrsType(), metavar="CRS", help="CRS of a DEM that does not state its own."
)
@click.option(
    "--height-unit",
    type=click.Choice(["m", "ft", "us-ft"]),
    help="Unit of the DEM's heights, where the file does not say or says it wrong.",
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
    default="visible",
    help=f"Layers to write, with commas between: {', '.join(LAYERS)}. [default: visible]",
)
@click.option(
    "--picture",
    type=click.Choice(["png", "none"]),
    default="png",
    help="Page to look at. [default: png]",
)
@click.option("--overwrite", is_flag=True, help="Replace results that are already in DIR.")
@click.option(
    "--co",
    "creation_options",
    type=NameValueType(),
    multiple=True,
    metavar="NAME=VALUE",
    help="GDAL creation option for the rasters, like COMPRESS=ZSTD; can be repeated.",
)
@click.option(
    "--threads",
    type=click.IntRange(min=1),
    metavar="N",
    help="Threads to use. [default: all there are]",
)
@verbosity_options
@click.pass_context
def map_command(ctx: click.Context, /, **given: Any) -> None:
    """Map what can be seen from one place."""
    from viewshed.io._atomic import check_out_dir
    from viewshed.io.elevation import open_terrain
    from viewshed.places import Target

    began, quiet = time.perf_counter(), verbosity(ctx) < 0
    observer = _observer(given)
    check_out_dir(given["out"], overwrite=given["overwrite"])
    terrain = open_terrain(list(given["dem"]), crs=given["crs"], height_unit=given["height_unit"])

    from viewshed.api import map_visibility
    from viewshed.errors import InputError
    from viewshed.io.raster import checked_creation_options

    options = dict(given["creation_options"])
    try:
        checked_creation_options(options)
    except InputError as error:
        raise click.BadParameter(str(error), param_hint="'--co'") from None
    with Progress("Looking", hidden=quiet) as progress:
        result = map_visibility(
            terrain,
            observer,
            target=Target(given["target_height"]),
            range_m=given["range_m"],
            refraction=given["refraction"],
            sector=given["sector"],
            layers=given["layers"],
            threads=given["threads"],
            progress=progress,
        )
    paths = result.write(
        given["out"],
        overwrite=given["overwrite"],
        picture=given["picture"] == "png",
        **({"creation_options": options} if options else {}),
    )
    if not quiet:
        took = ("Time taken", f"{time.perf_counter() - began:.1f} s")
        click.echo(table([*result.summary, took]), err=True)
    for path in sorted(paths, key=lambda p: Path(p).suffix != ".png"):
        click.echo(str(path))


def _observer(given: dict[str, Any]) -> Observer:
    """Make the observer; both heights at once are a wrong call."""
    from viewshed.places import Observer

    height, elevation = given["eye_height"], given["eye_elevation"]
    if height is not None and elevation is not None:
        msg = (
            f"--eye-height ({height:g} m) and --eye-elevation ({elevation:g} m) exclude each "
            "other; give one of them"
        )
        raise click.UsageError(msg)
    x, y = given["observer"]
    return Observer(x, y, crs=given["observer_crs"], eye_height=height, eye_elevation=elevation)
