"""The page a person looks at first: ground, what is seen of it, and the question in words.

The map is drawn in true local coordinates about its middle (geodesic distance and true bearing), so
north is up, the range is a circle and a ruler laid through the observer is right, whatever CRS,
cell shape or rotation the grid has. Among several observers the middle is a place between them.
Only this drawing is resampled, never a result.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from functools import cached_property
from pathlib import Path
from typing import TYPE_CHECKING

from viewshed.constants import CAUTIONS
from viewshed.io._ground import counted
from viewshed.io._page import Page
from viewshed.io._png import png_of
from viewshed.io._reach import Reach, reach_of
from viewshed.io._steps import Step, steps_of

if TYPE_CHECKING:
    import numpy as np
    from numpy.typing import NDArray

    from viewshed.grid import Grid, PostMap
    from viewshed.places import Sector


@dataclass(frozen=True)
class Marker:
    """An observer on the map.

    Parameters
    ----------
    x, y : float
        Its place [CRS units].
    name : str
        Written beside it where there is room; nothing for "" and for a lone "observer".
    range_m : float
        Its range [m].
    sector : Sector, optional
        Bearings it looks over; None is all round.
    """

    x: float
    y: float
    name: str
    range_m: float
    sector: Sector | None = None


@dataclass(frozen=True)
class Scene:
    """What is drawn.

    Parameters
    ----------
    elevation : numpy.ndarray, shape (rows, cols)
        Heights of the result's window [m], NaN for void.
    visible : numpy.ndarray, shape (rows, cols)
        The visible layer: 1, 0, 2 or 255.
    grid : Grid
        Grid of all arrays.
    post_map : PostMap
        True local coordinates about the middle of the map, fitted over the whole grid: the one
        observer, or a place among several.
    observers : sequence of Marker
        The observers, at least one.
    count : numpy.ndarray, shape (rows, cols), optional
        How many observers surely see each cell, 65535 for no data; where given, the map shows it
        in steps.
    rest : callable, optional
        Called between strips of the arrays, so that what is mapped into memory can be let go.
    """

    elevation: NDArray[np.float32]
    visible: NDArray[np.uint8]
    grid: Grid
    post_map: PostMap
    observers: Sequence[Marker]
    count: NDArray[np.uint16] | None = None
    rest: Callable[[], None] | None = None

    @cached_property
    def reach(self) -> Reach:
        """Places and outlines of the observers in the local plane."""
        return reach_of(self)

    @cached_property
    def steps(self) -> list[Step]:
        """Steps of the count that are told apart; none where there is no count."""
        if self.count is None:
            return []
        cells = counted(self)
        return steps_of(cells)


@dataclass(frozen=True)
class Words:
    """What the page says.

    Parameters
    ----------
    question : str
        The question in words; the title.
    refraction : str
        The air with k and K, as `Refraction.describe` gives it.
    dem_name : str
        Name of the elevation grid.
    crs_name : str
        Name of its CRS with the unit of its coordinates.
    summary : sequence of (label, value)
        Rows of the short table; the first stands out.
    cautions : sequence of str
        Sentences at the foot.
    made_with : str
        Program and version.
    """

    question: str
    refraction: str
    dem_name: str
    crs_name: str = ""
    summary: Sequence[tuple[str, str]] = ()
    cautions: Sequence[str] = CAUTIONS
    made_with: str = "viewshed"


def draw_map(path: str | Path, scene: Scene, words: Words, *, dpi: int = 200) -> None:
    """Draw the page and write it as PNG.

    The same input gives the same bytes with the same libraries; no date is written.

    Parameters
    ----------
    path : str or pathlib.Path
        File to write.
    scene : Scene
        What is drawn.
    words : Words
        What the page says.
    dpi : int
        Pixels an inch of an A4 page.

    Raises
    ------
    OSError
        If the file cannot be written.

    Notes
    -----
    Where several cells share a pixel its tint grows with the square root of their share, and is
    at least a quarter: a ridge one cell wide stays on the page (a linear share would fade it) and
    scattered single cells do not look like solid ground (as they would if any cell gave full
    colour). Steps of a count are mixed in proportion within a pixel, and tinted alike.
    """
    whole = [
        replace(m, sector=None) if m.sector is not None and m.sector.width_deg >= 360 else m
        for m in scene.observers
    ]
    scene = replace(scene, observers=whole)
    page = Page(dpi)
    page.compose(scene, words)
    Path(path).write_bytes(png_of(page.canvas.pixels, dpi))
