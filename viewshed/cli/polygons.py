"""`viewshed polygons`: a map made earlier as polygons for a GIS."""

from __future__ import annotations

import time
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from viewshed.cli.options import AreaType, SectionedCommand, table, verbosity, verbosity_options

if TYPE_CHECKING:
    from viewshed.io.polygons import Patches

    _ParamType = click.ParamType[Any]
else:
    _ParamType = click.ParamType

#: Suffixes of OUT, and states, as `viewshed.io.polygons` knows them.
SUFFIXES = (".shp", ".gpkg", ".fgb", ".parquet")
STATES = ("visible", "unresolved", "hidden")

HELP = """Make polygons of a map that was made earlier.

RASTER is a visible.tif of `viewshed map`. OUT is the file to make; its suffix says which format:
.shp (shapefile, five files), .gpkg (GeoPackage), .fgb (FlatGeobuf) or .parquet (GeoParquet).

\b
A worked example:
  viewshed polygons tower/visible.tif tower/seen.gpkg --states visible \\
      --min-patch 0.2ha
writes the file tower/seen.gpkg: what is seen, without specks.

\b
A polygon is a patch of cells of one state that hang together by their edges;
its outline follows these edges exactly. Its columns:
  observer   who looks, from the raster or --observer
  state      visible, unresolved or hidden
  area_m2    true area on the ellipsoid [m2]
  map_m2     area in the plane of the map [m2], none in degrees
  refr_k     coefficient of refraction k the map was made with
  earth_fac  effective Earth factor K = 1 / (1 - k)

\b
Areas take a unit: 2ha, 0.5km2, 3acre, 20000ft2; bare numbers are m2.
Patches under --min-patch are left out and told of. Each leaves a gap: holes
in other patches are not filled.
"""


class OutType(_ParamType):
    """The file to make, with a suffix that names a format."""

    name = "OUT"

    def convert(self, value: Any, param: click.Parameter | None, ctx: click.Context | None) -> Path:
        """Check the suffix."""
        path = Path(value)
        if path.suffix not in SUFFIXES or path.name.startswith("."):
            msg = f"file {str(value)!r} names no format; end its name in {', '.join(SUFFIXES)}"
            self.fail(msg, param, ctx)
        return path


class StatesType(_ParamType):
    """Names of states with commas between."""

    name = "states"

    def convert(
        self, value: Any, param: click.Parameter | None, ctx: click.Context | None
    ) -> tuple[str, ...]:
        """Read the states in their fixed order."""
        if not isinstance(value, str):
            return tuple(value)
        asked = [part.strip() for part in value.split(",")]
        for state in asked:
            if state not in STATES:
                msg = f"state {state!r} is not known; choose from {', '.join(STATES)}"
                self.fail(msg, param, ctx)
        return tuple(state for state in STATES if state in asked)


@click.command(
    "polygons",
    cls=SectionedCommand,
    sections={"Polygons": ("states", "min_patch_m2", "observer"), "Results": ("overwrite",)},
    help=HELP,
    short_help="Make polygons of a map that was made earlier.",
)
@click.argument("raster", type=click.Path(path_type=Path))
@click.argument("out", type=OutType())
@click.option(
    "--states",
    type=StatesType(),
    metavar="NAMES",
    default="visible,unresolved",
    help=f"States to make polygons of, with commas between: {', '.join(STATES)}. "
    "[default: visible,unresolved]",
)
@click.option(
    "--min-patch",
    "min_patch_m2",
    type=AreaType(),
    metavar="AREA",
    default="0",
    help="Leave out patches with a smaller true area. [default: none]",
)
@click.option(
    "--observer",
    metavar="NAME",
    help="Name for the column observer. [default: from the raster, else its file name]",
)
@click.option("--overwrite", is_flag=True, help="Replace OUT if it exists.")
@verbosity_options
@click.pass_context
def polygons_command(ctx: click.Context, /, **given: Any) -> None:
    """Make polygons of a map that was made earlier."""
    from viewshed.areas import cell_areas
    from viewshed.io._beside import check_place, placed
    from viewshed.io._vector import SIDE_SUFFIXES, check_format, file_names
    from viewshed.io._visible import open_visible
    from viewshed.io.polygons import polygonise, write_polygons

    began, out, fmt = time.perf_counter(), given["out"], given["out"].suffix[1:]
    check_format(fmt)
    names = file_names(out.stem, fmt)
    place = {
        "side": [out.stem + suffix for suffix in SIDE_SUFFIXES[fmt]],
        "overwrite": given["overwrite"],
    }
    check_place(out.parent, names, **place)
    with open_visible(given["raster"]) as seen:
        patches = polygonise(
            seen.visible,
            seen.grid,
            cell_areas(seen.grid),
            observer=given["observer"] or seen.observer,
            k=seen.k,
            states=given["states"],
            min_patch_m2=given["min_patch_m2"],
        )
    with placed(out.parent, names, **place) as folder:
        write_polygons(folder / out.stem, patches.frame, fmt)
    if verbosity(ctx) >= 0:
        took = ("Time taken", f"{time.perf_counter() - began:.1f} s")
        click.echo(table([*_summary(patches), took]), err=True)
    for name in names:
        click.echo(str(out.parent / name))


def _summary(patches: Patches) -> list[tuple[str, str]]:
    """Short table of what was made and what was left out."""
    frame, rows = patches.frame, []
    for state, left_out in patches.left_out.items():
        areas = frame["area_m2"][frame["state"] == state]
        rows.append((state.capitalize(), _told(len(areas), float(areas.sum()))))
        if left_out[0]:
            rows.append((f"{state.capitalize()}, left out", _told(*left_out)))
    return rows


def _told(count: int, area_m2: float) -> str:
    size = f"{area_m2 / 1e6:,.2f} km2" if area_m2 >= 1e5 else f"{area_m2:,.0f} m2"
    return f"{size} in {count:,} patch{'' if count == 1 else 'es'}"
