"""The program `viewshed`: its commands, and how it ends when someone presses Ctrl-C."""

from __future__ import annotations

import contextlib
import os
import signal
import threading
import time
from typing import TYPE_CHECKING, Any

import click

from viewshed.cli.check import check_command
from viewshed.cli.map import map_command
from viewshed.cli.options import INTERRUPTED, Program
from viewshed.cli.polygons import polygons_command
from viewshed.cli.rerun import rerun_command

if TYPE_CHECKING:
    from collections.abc import Callable

#: Seconds a run has for leaving in good order after Ctrl-C.
GRACE = 0.8

HELP = """Find out what can be seen from where over real terrain.

The answer is exact for the terrain and the air you state: the Earth is curved, the air bends
sight lines, unknown ground is called unknown and never guessed.

\b
Examples:
  What a person at a lookout sees of the ground within 30 km:
    viewshed map dem.tif --observer 512300,4650120 --out lookout
  Which ground sees the top of an 80 m mast, people 1.7 m tall:
    viewshed map tiles/*.tif --observer 512300,4650120 --eye-height 80 \\
        --target-height 1.7 --range 45km --out mast

The elevation grid can be any raster file that GDAL reads, in any projected or geographic
coordinate system. `viewshed map --help` explains the options and what the numbers mean.
"""


def _version(ctx: click.Context, _: click.Parameter, asked: bool) -> None:
    if asked and not ctx.resilient_parsing:
        from viewshed._version import __version__

        click.echo(f"viewshed {__version__}")
        ctx.exit()


@click.group(
    cls=Program,
    help=HELP,
    context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 96},
)
@click.option(
    "--version",
    is_flag=True,
    is_eager=True,
    expose_value=False,
    callback=_version,
    help="Show the version and leave.",
)
@click.pass_obj
def cli(prepare: Callable[[], None] | None) -> None:
    """Hold the commands together; prepare for a command that is about to run."""
    if prepare is not None:
        prepare()


cli.add_command(map_command)
cli.add_command(rerun_command)
cli.add_command(check_command)
cli.add_command(polygons_command)


def main(args: list[str] | None = None) -> Any:
    """Run the program; the exit code is 0, 1 (failed), 2 (wrong call) or 130 (Ctrl-C)."""
    try:
        return cli.main(args=args, prog_name="viewshed", obj=_heed_signals)
    except KeyboardInterrupt:
        raise SystemExit(INTERRUPTED) from None


def _heed_signals() -> None:
    """End in good order on Ctrl-C and SIGTERM, where signals can be heeded."""
    with contextlib.suppress(ValueError, OSError):
        _leave_in_time()
        signal.signal(signal.SIGTERM, _end)


def _end(number: int, _: object) -> None:
    """End on SIGTERM as on Ctrl-C, with what is half done removed."""
    raise SystemExit(128 + number)


def _leave_in_time() -> None:
    """See to it that Ctrl-C ends the process even while a library is deep in its own work.

    Python tells the main thread of a signal only when the library returns. The bytes that the
    signal writes into a socket arrive at once, so a thread that waits for them can end the
    process after a moment of grace. What is then left half done is hidden and is swept by the
    next run.
    """
    import socket

    waiting, told = socket.socketpair()
    waiting.setblocking(True)
    told.setblocking(False)
    signal.set_wakeup_fd(told.fileno(), warn_on_full_buffer=False)

    def watch() -> None:
        while signal.SIGINT not in waiting.recv(64):
            pass
        time.sleep(GRACE)
        told.close()
        with contextlib.suppress(OSError):
            os.write(2, b"\nInterrupted.\n")
        os._exit(INTERRUPTED)

    threading.Thread(target=watch, name="viewshed-interrupt", daemon=True).start()
