"""`viewshed check`: what an elevation grid is like, before anybody maps with it."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import click

from viewshed.cli.grid import GRID_OPTIONS, check_grid_options, grid_options, terrain_of
from viewshed.cli.options import (
    PictureType,
    Progress,
    SectionedCommand,
    table,
    verbosity,
    verbosity_options,
)

if TYPE_CHECKING:
    from pathlib import Path

HELP = """Check an elevation grid before mapping with it.

DEM is the elevation grid: raster files, a folder of tiles, or a pattern in quotes, which form one
mosaic of equal grids. All of it is read, a strip at a time.

\b
A worked example:
  viewshed check dem.tif --picture dem.png
tells files, size, coordinate system, true cell size, unit and datum of the
heights, their range and steps, voids, and the memory that a map would need,
and draws a small picture in which voids stand out.

\b
What to look for:
  Unit    heights whose unit is stated nowhere are taken for metres
  Steps   whole metres or feet show in what is seen near the observer
  Voids   are never guessed; if they are sea, state it with --void-height 0
  Note    what to think about before mapping
  Warning what was odd while the files were read

\b
More examples:
  For a program, on standard output:
    viewshed check dem.tif --json
  A folder of tiles whose voids are sea:
    viewshed check tiles --void-height 0
"""

SECTIONS = {
    "Elevation grid": GRID_OPTIONS,
    "Results": ("as_json", "picture", "overwrite"),
}


@click.command(
    "check",
    cls=SectionedCommand,
    sections=SECTIONS,
    help=HELP,
    short_help="Check an elevation grid before mapping with it.",
)
@grid_options
@click.option("--json", "as_json", is_flag=True, help="Write JSON instead of the table.")
@click.option(
    "--picture", type=PictureType(), metavar="FILE", help="Draw a small picture into a PNG file."
)
@click.option("--overwrite", is_flag=True, help="Replace the picture if it is there already.")
@verbosity_options
@click.pass_context
def check_command(ctx: click.Context, /, **given: Any) -> None:
    """Check an elevation grid before mapping with it."""
    from viewshed.io._check_picture import check_target, draw_picture
    from viewshed.io.checkup import check_up

    picture: Path | None = given["picture"]
    check_grid_options(given)
    if picture is not None:
        check_target(picture, overwrite=given["overwrite"])
    with Progress("Reading", hidden=verbosity(ctx) < 0) as progress:
        checkup = check_up(lambda: terrain_of(given), progress)
    told = checkup.as_json()
    rows = checkup.rows()
    if picture is not None:
        draw_picture(picture, checkup, overwrite=given["overwrite"])
        told["picture"] = str(picture)
        rows.append(("Picture", str(picture)))
    if given["as_json"]:
        import json

        click.echo(json.dumps(told, indent=2, allow_nan=False))
    else:
        click.echo(table(rows))

