"""Values, options and behaviour that every command shares.

Only click is imported at the top; what reads a value is imported when there is one to read.
"""

from __future__ import annotations

import errno
import logging
import sys
import time
import traceback
import warnings
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Any, TypeVar

import click

from viewshed.constants import LAYERS
from viewshed.errors import InputError, ViewshedError, ViewshedWarning

if TYPE_CHECKING:
    from types import TracebackType

    from viewshed.atmosphere import Refraction
    from viewshed.places import Sector

    _ParamType = click.ParamType[Any]
else:
    _ParamType = click.ParamType  # generic for the type checker only, so that any click will do

Command = TypeVar("Command", bound=Callable[..., Any])

#: Exit codes: a failed run, a wrong call, Ctrl-C.
FAILED, WRONG_CALL, INTERRUPTED = 1, 2, 130
#: Seconds between two lines of progress in a log.
LINE_EVERY = 10.0

_VERBOSITY = "viewshed.verbosity"


class _Text(_ParamType):
    """A text that is read when the command line is; what is wrong with it ends in exit code 2."""

    def read(self, text: str) -> Any:
        """Give the value or raise an InputError."""
        raise NotImplementedError

    def convert(self, value: Any, param: click.Parameter | None, ctx: click.Context | None) -> Any:
        """Read a text; leave what is a value already."""
        if not isinstance(value, str):
            return value
        try:
            return self.read(value)
        except InputError as error:
            self.fail(str(error), param, ctx)


class LengthType(_Text):
    """Length with a unit, read as metres.

    Parameters
    ----------
    least : float, optional
        Least value that makes sense [m].
    open_end : bool
        Whether `least` itself is refused too.
    """

    name = "length"

    def __init__(self, least: float | None = None, *, open_end: bool = False) -> None:
        self.least = least
        self.open_end = open_end

    def read(self, text: str) -> float:
        """Read metres from a text such as 30km."""
        from viewshed.places import parse_length

        metres = parse_length(text)
        low = self.least is not None and metres < self.least
        if low or (self.open_end and metres == self.least):
            bound = "more than 0" if self.open_end else "0 or more"
            msg = f"length {text!r} makes no sense here; give {bound}, like 30km, 6ft or 1.7"
            raise InputError(msg)
        return metres


class NamedPointType(_Text):
    """Position as X,Y or NAME=X,Y."""

    name = "[name=]x,y"

    def read(self, text: str) -> tuple[str, float, float]:
        """Read name (empty if there is none), x and y."""
        from viewshed.places import parse_point

        name, equals, point = text.rpartition("=")
        if equals and not name.strip():
            msg = f"observer {text!r} has no name before the '='; give it as NAME=X,Y or X,Y"
            raise InputError(msg)
        return (name.strip(), *parse_point(point))


class SectorType(_Text):
    """Bearings as FROM,TO."""

    name = "from,to"

    def read(self, text: str) -> Sector:
        """Read a sector."""
        from viewshed.places import parse_sector

        return parse_sector(text)


class RefractionType(_Text):
    """State of the air."""

    name = "air"

    def read(self, text: str) -> Refraction:
        """Read a refraction."""
        from viewshed.atmosphere import parse_refraction

        return parse_refraction(text)


class CrsType(_Text):
    """Coordinate reference system, checked and kept as it was written."""

    name = "crs"

    def read(self, text: str) -> str:
        """Check a CRS."""
        from viewshed.geodesy import crs_from_user

        crs_from_user(text)
        return text


class LayersType(_Text):
    """Names of layers with commas between; `visible` is always one of them."""

    name = "layers"

    def read(self, text: str) -> tuple[str, ...]:
        """Read the layers in their fixed order."""
        asked = [part.strip() for part in text.split(",")]
        for layer in asked:
            if layer not in LAYERS:
                msg = f"layer {layer!r} is not known; choose from {', '.join(LAYERS)}"
                raise InputError(msg)
        return tuple(layer for layer in LAYERS if layer == "visible" or layer in asked)


class FolderType(_Text):
    """A folder, which an empty text (an unset variable in a script) is not."""

    name = "DIR"

    def read(self, text: str) -> Path:
        """Make a path of the text."""
        if not text.strip():
            msg = "the folder for the results has no name; give one"
            raise InputError(msg)
        return Path(text)


class MemoryType(_Text):
    """Size of memory, read as bytes."""

    name = "size"

    def read(self, text: str) -> int:
        """Read bytes from a text such as 2GiB."""
        from viewshed.io._memory import check_limit, parse_size

        return check_limit(parse_size(text))


class PictureType(_Text):
    """A file for a picture, which is always a PNG."""

    name = "file"

    def read(self, text: str) -> Path:
        """Make a path of the text."""
        if Path(text).suffix.lower() != ".png" or not Path(text).stem:
            msg = f"the picture {text!r} would be a PNG; give a name that ends in .png"
            raise InputError(msg)
        return Path(text)


class NameValueType(_Text):
    """NAME=VALUE."""

    name = "name=value"

    def read(self, text: str) -> tuple[str, str]:
        """Read the two sides."""
        name, equals, value = text.partition("=")
        if not (name.strip() and equals and value.strip()):
            msg = f"creation option {text!r} is not understood; give it like COMPRESS=ZSTD"
            raise InputError(msg)
        return name.strip().upper(), value.strip()


class SectionedCommand(click.Command):
    """A command whose help shows its options in named groups.

    Parameters
    ----------
    sections : dict of str to sequence of str
        Title of each group and the names of its options; what is in no group comes last.
    """

    def __init__(self, *args: Any, sections: dict[str, Sequence[str]], **kwargs: Any) -> None:
        super().__init__(*args, **kwargs)
        self.sections = sections

    def format_options(self, ctx: click.Context, formatter: click.HelpFormatter) -> None:
        """Write the groups."""
        options = [p for p in self.get_params(ctx) if isinstance(p, click.Option)]
        records = {option.name: option.get_help_record(ctx) for option in options}
        named = {name for names in self.sections.values() for name in names}
        rest = [name for name in records if name not in named]
        for title, names in [*self.sections.items(), ("Other", rest)]:
            rows = [record for record in map(records.get, names) if record is not None]
            if rows:
                with formatter.section(title):
                    formatter.write_dl(rows)


#: Options that more than one command has.
overwrite_option = click.option(
    "--overwrite", is_flag=True, help="Replace results that are already in DIR."
)
threads_option = click.option(
    "--threads",
    type=click.IntRange(min=1),
    metavar="N",
    help="Threads to use. [default: all there are]",
)
memory_option = click.option(
    "--memory",
    type=MemoryType(),
    metavar="SIZE",
    help="Memory that may be used, like 2GiB; what does not fit lies in scratch files in DIR "
    "meanwhile. [default: what is free, less a margin]",
)


def verbosity_options(command: Command) -> Command:
    """Add -v and -q to a command; they work before anything else is read."""
    for option in (
        click.option(
            "-q",
            "--quiet",
            count=True,
            expose_value=False,
            is_eager=True,
            callback=lambda ctx, _, n: _louder(ctx, -n),
            help="No progress and no table; warnings and errors stay.",
        ),
        click.option(
            "-v",
            "--verbose",
            count=True,
            expose_value=False,
            is_eager=True,
            callback=lambda ctx, _, n: _louder(ctx, n),
            help="Tell more where there is more; -vv shows where an error comes from.",
        ),
    ):
        command = option(command)
    return command


def _louder(ctx: click.Context, steps: int) -> None:
    ctx.meta[_VERBOSITY] = ctx.meta.get(_VERBOSITY, 0) + steps


def verbosity(ctx: click.Context) -> int:
    """Tell how much is to be said: -1 quiet, 0 as usual, 1 more, 2 everything."""
    return int(ctx.meta.get(_VERBOSITY, 0))


class _WrongCall(click.ClickException):
    """A wrong call told in one line."""

    exit_code = WRONG_CALL


class Program(click.Group):
    """The program: every way a run can end becomes one line and an exit code."""

    def parse_args(self, ctx: click.Context, args: list[str]) -> list[str]:
        """Read the options of the program itself."""
        try:
            return super().parse_args(ctx, args)
        except click.UsageError as error:
            raise self._wrong_call(error) from error

    def invoke(self, ctx: click.Context) -> Any:
        """Run a command."""
        with warnings_as_lines(ctx), log_lines(ctx):
            try:
                return super().invoke(ctx)
            except (click.exceptions.Exit, click.Abort):
                raise
            except click.UsageError as error:
                raise self._wrong_call(error) from error
            except click.ClickException:
                raise
            except KeyboardInterrupt:
                click.echo("\nInterrupted; nothing is left half written.", err=True)
                ctx.exit(INTERRUPTED)
            except ViewshedError as error:
                self._show_origin(ctx)
                raise click.ClickException(one_line(str(error))) from error
            except OSError as error:
                if error.errno == errno.EPIPE:  # the reader of our output went away
                    raise
                self._show_origin(ctx)
                raise click.ClickException(unexpected(error)) from error
            except Exception as error:
                self._show_origin(ctx)
                raise click.ClickException(unexpected(error)) from error

    @staticmethod
    def _show_origin(ctx: click.Context) -> None:
        if verbosity(ctx) >= 2:
            click.echo(traceback.format_exc(), err=True, nl=False)

    @staticmethod
    def _wrong_call(error: click.UsageError) -> click.ClickException:
        if isinstance(error, click.exceptions.NoArgsIsHelpError):
            return error
        where = error.ctx.command_path if error.ctx is not None else "viewshed"
        what = one_line(error.format_message()).rstrip(".")
        return _WrongCall(f"{what} (see {where} --help)")


def one_line(text: str) -> str:
    """Fold a message into one line."""
    return " ".join(text.split())


def unexpected(error: BaseException) -> str:
    """Message for an error that nobody foresaw."""
    what = one_line(f"{type(error).__name__}: {error}").rstrip(": ")
    return f"unexpected {what}; run again with -vv to see where it comes from"


@contextmanager
def warnings_as_lines(ctx: click.Context) -> Iterator[None]:
    """Show each warning about a result once, as one line; other warnings with -v only."""
    told: set[str] = set()

    def show(message: Warning | str, category: type[Warning], *_: Any, **__: Any) -> None:
        text = one_line(str(message))
        ours = issubclass(category, ViewshedWarning)
        if text not in told and (ours or verbosity(ctx) >= 1):
            told.add(text)
            kind = "Warning" if ours else f"Warning ({category.__name__})"
            click.echo(f"{kind}: {text}", err=True)

    with warnings.catch_warnings():
        warnings.simplefilter("always", ViewshedWarning)
        warnings.showwarning = show
        yield


class _Lines(logging.Handler):
    """Log lines on standard error: ours as the verbosity asks, those of libraries with -vv."""

    def __init__(self, ctx: click.Context) -> None:
        super().__init__()
        self.ctx = ctx

    def emit(self, record: logging.LogRecord) -> None:
        """Write a record if it is to be heard."""
        loud = verbosity(self.ctx)
        if record.name.split(".")[0] == "viewshed":
            least = {0: logging.INFO}.get(loud, logging.DEBUG if loud > 0 else logging.WARNING)
        else:
            least = logging.INFO if loud >= 2 else logging.CRITICAL
        if record.levelno >= least:
            click.echo(one_line(record.getMessage()), err=True)


@contextmanager
def log_lines(ctx: click.Context) -> Iterator[None]:
    """Send the log to standard error for as long as a command runs."""
    root, ours = logging.getLogger(), logging.getLogger("viewshed")
    handler, level = _Lines(ctx), ours.level
    root.addHandler(handler)
    ours.setLevel(logging.DEBUG)
    try:
        yield
    finally:
        root.removeHandler(handler)
        ours.setLevel(level)


class Progress:
    """A bar on a terminal, a line now and then in a log, nothing when quiet.

    Both say how much time is left, by the pace since the first time that something was told.

    Parameters
    ----------
    label : str
        What is going on.
    hidden : bool
        Show nothing.
    """

    def __init__(self, label: str, *, hidden: bool = False) -> None:
        self.label = label
        self.hidden = hidden
        self.terminal = sys.stderr.isatty()
        self.bar: Any = None
        self.shown = 0
        self.next_line = time.monotonic() + LINE_EVERY
        self.first: tuple[float, float] | None = None

    def __enter__(self) -> Progress:
        """Begin."""
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        """Leave the bar's line."""
        if self.bar is not None:
            self.bar.render_finish()

    def __call__(self, done: float, total: float) -> None:
        """Tell how much is done."""
        if self.hidden or total <= 0:
            return
        permille = max(0, min(1000, int(1000 * done / total)))
        if self.terminal:
            if self.bar is None:
                self.bar = click.progressbar(length=1000, label=self.label, file=sys.stderr)
                self.bar.__enter__()
            self.bar.update(max(0, permille - self.shown))
        now, share = time.monotonic(), done / total
        if self.first is None:
            self.first = now, share
        if not self.terminal and now >= self.next_line:
            self.next_line = now + LINE_EVERY
            left = _time_left(now - self.first[0], share - self.first[1], share)
            click.echo(f"{self.label}: {permille // 10} %{left}", err=True)
        self.shown = max(self.shown, permille)


def _time_left(seconds: float, gained: float, share: float) -> str:
    """Say how long the rest takes at the pace so far; nothing where there is no pace yet."""
    if gained <= 0.0:
        return ""
    left = seconds * (1.0 - share) / gained
    if left < 90.0:
        return f", about {left:.0f} s left"
    minutes = left / 60.0
    told = f"{minutes:.0f} minutes" if minutes < 90.0 else f"{minutes / 60.0:.1f} hours"
    return f", about {told} left"


def table(rows: Sequence[tuple[str, str]]) -> str:
    """Set labels and values in two columns."""
    width = max((len(label) for label, _ in rows), default=0)
    return "\n".join(f"{label:<{width}}  {value}" for label, value in rows)


def columns(rows: Sequence[Sequence[str]]) -> str:
    """Set rows in columns, the first row a heading; numbers stand to the right."""
    widths = [max(len(row[n]) for row in rows) for n in range(len(rows[0]))]
    lines = []
    for row in rows:
        cells = [row[0].ljust(widths[0])]
        cells += [cell.rjust(width) for cell, width in zip(row[1:], widths[1:], strict=True)]
        lines.append("  ".join(cells).rstrip())
    return "\n".join(lines)


class AreaType(_Text):
    """Area with a unit, 0 or more, read as square metres."""

    name = "area"

    def read(self, text: str) -> float:
        """Read square metres from a text such as 2ha."""
        from viewshed.places import parse_area

        square_metres = parse_area(text)
        if square_metres < 0.0:
            msg = f"area {text!r} makes no sense here; give 0 or more, like 2ha, 0.5km2 or 900"
            raise InputError(msg)
        return square_metres
