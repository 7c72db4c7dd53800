"""Files that stand alone among others: made in a hidden folder beside, published together.

They need no record. A run that is killed half-way leaves what `viewshed.io._atomic` sweeps: the
next run in that folder puts back what was there before.
"""

import contextlib
import os
from collections.abc import Iterator, Sequence
from pathlib import Path

from viewshed.errors import OutputError
from viewshed.io import _atomic


def check_place(
    folder: Path, names: Sequence[str], *, side: Sequence[str] = (), overwrite: bool = False
) -> None:
    """Refuse a place for files that cannot be used, before any work.

    Parameters
    ----------
    folder : pathlib.Path
        Folder they belong in.
    names : sequence of str
        Their names.
    side : sequence of str, optional
        Files that belong to older ones of these names.
    overwrite : bool, optional
        Whether all these may be replaced.

    Raises
    ------
    OutputError
        If the folder is none or cannot be written into, a file is there and may not be replaced,
        or it belongs to a result whose record would no longer be true.
    """
    if not folder.is_dir():
        msg = f"{folder}: is not a folder that exists; make it or choose another one"
        raise OutputError(msg)
    if not os.access(folder, os.W_OK | os.X_OK):
        msg = f"{folder}: is a folder that cannot be written into; choose another one"
        raise OutputError(msg)
    try:
        listed = _atomic.listed(folder)
    except OutputError:  # a record of something else
        listed = []
    for name in names:
        if name in listed:
            msg = (
                f"{folder / name}: belongs to the result that {_atomic.RECORD_NAME} describes; "
                "choose another name"
            )
            raise OutputError(msg)
    for name in [*names, *side]:
        if os.path.lexists(folder / name) and not overwrite:
            msg = f"{folder / name}: exists; use --overwrite to replace it"
            raise OutputError(msg)


@contextlib.contextmanager
def placed(
    folder: Path, names: Sequence[str], *, side: Sequence[str] = (), overwrite: bool = False
) -> Iterator[Path]:
    """Make files in a hidden folder, and move them to their places at the end.

    Parameters
    ----------
    folder, names, side, overwrite
        As for `check_place`. Older files are taken away when the new ones come.

    Yields
    ------
    pathlib.Path
        The hidden folder to make all the files in.

    Raises
    ------
    OutputError
        As `check_place`, and if another run works in the folder or something cannot be made or
        moved. What was there before is put back, nothing new is left.
    """
    check_place(folder, names, side=side, overwrite=overwrite)
    with _atomic.locked(folder):
        check_place(folder, names, side=side, overwrite=overwrite)
        stage = _atomic.Stage(folder, overwrite=overwrite)
        for name in names:
            stage.path(name)
        with _atomic.opened(stage):
            yield stage.folder
            _atomic.move(stage, [n for n in (*names, *side) if os.path.lexists(folder / n)])
