"""The elevation grid on the command line: its options, shared by the commands that read one."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any, TypeVar

import click

from viewshed.cli.options import CrsType, LengthType

if TYPE_CHECKING:
    from collections.abc import Callable
    from pathlib import Path

    from viewshed.io.elevation import Terrain

Command = TypeVar("Command", bound="Callable[..., Any]")

#: Names of these options, for a section of the help.
GRID_OPTIONS = ("crs", "height_unit", "void_height", "void_mask")


def grid_options(command: Command) -> Command:
    """Add the argument DEM... and the options that state what it does not."""
    for decorate in (
        click.option(
            "--void-mask",
            type=click.Path(),
            metavar="FILE",
            help="Polygons: only the voids in them have that height.",
        ),
        click.option(
            "--void-height",
            type=LengthType(),
            metavar="LENGTH",
            help="State that the DEM's voids have this height, like 0 for a sea delivered as "
            "nodata.",
        ),
        click.option(
            "--height-unit",
            type=click.Choice(["m", "ft", "us-ft"]),
            help="Unit of the DEM's heights, where the file does not say or says it wrong.",
        ),
        click.option(
            "--crs", type=CrsType(), metavar="CRS", help="CRS of a DEM that does not state its own."
        ),
        click.argument("dem", nargs=-1, required=True, metavar="DEM..."),
    ):
        command = decorate(command)
    return command


def check_grid_options(given: dict[str, Any]) -> None:
    """Refuse options that do not go together, before any file is looked at."""
    if given["void_mask"] is not None and given["void_height"] is None:
        msg = f"--void-mask {given['void_mask']} says where, not what; add --void-height, like 0"
        raise click.UsageError(msg)


def terrain_of(given: dict[str, Any], index: Path | None = None) -> Terrain:
    """Open the elevation grid that the options say."""
    from viewshed.io.elevation import open_terrain

    return open_terrain(
        list(given["dem"]),
        crs=given["crs"],
        height_unit=given["height_unit"],
        void_height=given["void_height"],
        void_mask=given["void_mask"],
        index=index,
    )
