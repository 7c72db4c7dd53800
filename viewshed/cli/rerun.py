"""`viewshed rerun`: a map once more from its record, and whether the same comes out."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import click

from viewshed.cli.options import (
    FAILED,
    FolderType,
    Progress,
    SectionedCommand,
    memory_option,
    overwrite_option,
    table,
    threads_option,
    verbosity,
    verbosity_options,
)

if TYPE_CHECKING:
    from viewshed.rerun import Rerun

HELP = """Run a map again from its record and say whether the same comes out.

RECORD is the record.json of an earlier result, or the folder it lies in. Its paths lead from where
it lies, so a folder that was moved together with its elevation grid works as it is; --dem and
--surface say where a grid went that was moved alone. Inputs that changed are named and used;
inputs that are missing end the run.

\b
A worked example:
  viewshed rerun tower/record.json --out again
writes the same files anew into the folder again, and a line for each file:
  same-bytes   visible.tif   the file is the same, byte for byte
  same-values  visible.tif   other bytes, but the same cells or polygons
  redrawn      map.png       the picture has other bytes; it shows the rasters
  different    visible.tif   something differs
  missing      count.tif     it was not made again
  new          summary.csv   the earlier result did not have it
Word and name have a tab between them.

\b
The table says how much differs (if the old files are still beside the record)
and what changed since: version of viewshed, Python, processor, libraries.

The exit code is 0 where all is the same in bytes or values, and 1 where something is different or
missing; the new result is kept in any case.
"""

SECTIONS = {
    "What has moved": ("dem", "surface", "void_mask"),
    "Results": ("out", "overwrite", "as_json"),
}
#: Words for people.
_WORDS = {
    "same-bytes": "same bytes",
    "same-values": "same values",
}


@click.command(
    "rerun",
    cls=SectionedCommand,
    sections=SECTIONS,
    help=HELP,
    short_help="Run a map again from its record and compare.",
)
@click.argument("record", type=click.Path(), metavar="RECORD")
@click.option(
    "--out",
    type=FolderType(),
    required=True,
    metavar="DIR",
    help="Folder for the new results; not the one of the record.",
)
@click.option(
    "--dem",
    type=click.Path(),
    multiple=True,
    metavar="PATH",
    help="Where the elevation grid is now; can be repeated.",
)
@click.option(
    "--surface",
    type=click.Path(),
    multiple=True,
    metavar="PATH",
    help="Where the surface is now; can be repeated.",
)
@click.option(
    "--void-mask", type=click.Path(), metavar="PATH", help="Where the mask of voids is now."
)
@overwrite_option
@click.option("--json", "as_json", is_flag=True, help="Print the comparison as JSON instead.")
@memory_option
@threads_option
@verbosity_options
@click.pass_context
def rerun_command(ctx: click.Context, /, **given: Any) -> None:
    """Run a map again from its record."""
    from viewshed.errors import InputError
    from viewshed.rerun import check_folder, rerun

    try:
        check_folder(given["record"], given["out"])
    except InputError as error:
        raise click.BadParameter(str(error), param_hint="'--out'") from None
    quiet = verbosity(ctx) < 0
    with Progress("Looking", hidden=quiet) as progress:
        found = rerun(
            given["record"],
            given["out"],
            dem=given["dem"],
            surface=given["surface"],
            void_mask=given["void_mask"],
            memory=given["memory"],
            threads=given["threads"],
            overwrite=given["overwrite"],
            progress=progress,
        )
    if not quiet:
        click.echo(table(_rows(found)), err=True)
    click.echo(_json(found) if given["as_json"] else _lines(found))
    if found.verdict == "different":
        if not quiet:
            click.echo(f"The new result is kept in {found.folder}.", err=True)
        ctx.exit(FAILED)


def _lines(found: Rerun) -> str:
    return "\n".join(f"{one.word}\t{one.name}" for one in found.outputs)


def _json(found: Rerun) -> str:
    import json

    return json.dumps(
        {
            "verdict": found.verdict,
            "outputs": [
                {"name": one.name, "word": one.word, "told": one.told} for one in found.outputs
            ],
            "inputs": [
                {"path": one.path.as_posix(), "state": one.state, "told": one.told}
                for one in found.inputs
            ],
            "changed": [
                {"what": what, "was": was, "is": now} for what, was, now in found.changed
            ],
        },
        indent=2,
        ensure_ascii=False,
    )


def _rows(found: Rerun) -> list[tuple[str, str]]:
    rows = []
    for one in found.outputs:
        word = _WORDS.get(one.word, one.word)
        rows.append((one.name, f"{word}: {one.told}" if one.told else word))
    states = [one.state for one in found.inputs]
    told = [f"{states.count(state)} {state}" for state in ("same", "changed", "new")]
    rows.append(("Inputs", ", ".join(text for text in told if not text.startswith("0 "))))
    changed = "; ".join(f"{what} {now} (was {was})" for what, was, now in found.changed)
    rows.append(("Changed since", changed or "nothing that the record knows of"))
    rows.append(("Result", _WORDS.get(found.verdict, found.verdict)))
    return rows
