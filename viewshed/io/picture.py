"""The page a person looks at first: ground, what is seen of it, and the question in words.

The map is drawn in true local coordinates of the first observer (geodesic distance and true
bearing), so north is up, the range is a circle and a ruler laid through the observer is right,
whatever CRS, cell shape or rotation the grid has. Only this drawing is resampled, never a result.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from viewshed.constants import CAUTIONS
from viewshed.io._page import PAGE_HEIGHT, PAGE_WIDTH, Page

if TYPE_CHECKING:
    from viewshed.grid import Grid, PostMap
    from viewshed.places import Sector


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
        Grid of both arrays.
    post_map : PostMap
        True local coordinates seen from the observer in the middle of the map.
    observers : sequence of (x, y, name)
        Places of the observers [CRS units]; the first is the one of `post_map`.
    range_m : float
        Range [m].
    sector : Sector, optional
        Bearings looked over; None is all round.
    """

    elevation: NDArray[np.float32]
    visible: NDArray[np.uint8]
    grid: Grid
    post_map: PostMap
    observers: Sequence[tuple[float, float, str]]
    range_m: float
    sector: Sector | None = None


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
        Rows of the short table.
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
    colour).
    """
    import matplotlib
    from matplotlib.backends.backend_agg import FigureCanvasAgg
    from matplotlib.figure import Figure

    if scene.sector is not None and scene.sector.width_deg >= 360:
        scene = replace(scene, sector=None)
    with matplotlib.rc_context():
        matplotlib.rcdefaults()
        figure = Figure(figsize=(PAGE_WIDTH, PAGE_HEIGHT), dpi=dpi, facecolor="white")
        renderer: Any = FigureCanvasAgg(figure).get_renderer()  # type: ignore[no-untyped-call]
        Page(figure, renderer, dpi).compose(scene, words)
        figure.savefig(path, format="png", dpi=dpi, metadata={"Software": None})
