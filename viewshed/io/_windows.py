"""A terrain read in many windows, as one: what each of them warns of is told once."""

import re
import warnings
from collections import defaultdict
from collections.abc import Sequence

import numpy as np

from viewshed.errors import AllVoidError, ViewshedWarning
from viewshed.io._cells import fill_void
from viewshed.io.elevation import Terrain
from viewshed.io.mosaic import Heights
from viewshed.notes import noted

#: Warnings of one kind that are told one by one.
_TOLD = 3
_COUNT = re.compile(r"^(?P<before>.*?: )(?P<count>\d+)(?P<after> (?:cells|blocks) of .*)$")


class Windows:
    """Windows of a terrain, some of which may be void all over.

    Parameters
    ----------
    terrain : Terrain
        What is read.

    Attributes
    ----------
    met : list of str
        What was warned of.
    """

    def __init__(self, terrain: Terrain) -> None:
        self.terrain = terrain
        self.met: list[str] = []

    def read(
        self, row_off: int, col_off: int, rows: int, cols: int, *, out: Heights | None = None
    ) -> Heights:
        """Read a window, into an array if one is given; NaN where nothing in it is known.

        Raises
        ------
        InputError, DataError
            As from `Terrain.read`, but not for a window that is void all over.
        """
        with noted(told=False) as met:
            try:
                heights = self.terrain.load(row_off, col_off, rows, cols, out=out).elevation
            except AllVoidError:
                heights = np.empty((rows, cols), dtype=np.float32) if out is None else out
                fill_void(heights)
        self.met += met
        return heights

    def warn(self) -> None:
        """Warn of what was met; cells are not counted, since windows may share some."""
        for text in condensed(self.met, counted=False):
            warnings.warn(text, ViewshedWarning, stacklevel=3)


def condensed(texts: Sequence[str], *, counted: bool = True) -> list[str]:
    """Give each warning once, its counts summed, and the first few of each kind.

    Parameters
    ----------
    texts : sequence of str
        Warnings as the windows gave them.
    counted : bool, optional
        Whether sums make sense; else the counts are left out.

    Returns
    -------
    list of str
        Fewer of them.
    """
    counts: dict[tuple[str, str], int] = defaultdict(int)
    for text in texts:
        found = _COUNT.match(text)
        key = (found["before"], found["after"]) if found else (text, "")
        counts[key] += int(found["count"]) if found else 0
    kinds: dict[str, list[str]] = defaultdict(list)
    for (before, after), count in counts.items():
        text = f"{before}{count}{after}" if counted else f"{before}{after.lstrip()}"
        text = text if after else before
        kinds[_kind(text)].append(text)
    told = []
    for alike in kinds.values():
        told += alike[:_TOLD]
        if len(alike) > _TOLD:
            told[-1] += f" (and {len(alike) - _TOLD} more warnings like it)"
    return told


def _kind(text: str) -> str:
    """Give the plain words of a warning, without names of files and numbers."""
    return " ".join(word for word in text.split() if re.fullmatch(r"[a-z]+[,;]?", word))
