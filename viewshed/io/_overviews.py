"""Coarser copies of a raster, made strip by strip beside its draft.

Each copy is made from the one before, of half its rows and columns, as the raster library would,
cell for cell, but in one pass and many times faster.
"""

import hashlib
from collections.abc import Callable
from pathlib import Path
from typing import Any
from xml.sax.saxutils import escape

import numpy as np
import rasterio
import rasterio.shutil
from affine import Affine
from numpy.typing import NDArray
from rasterio.windows import Window

from viewshed.kernels import coarser

Cells = NDArray[Any]
Rows = Callable[[int, int], Cells]

#: Most cells of a strip of a coarser copy.
_STRIP_CELLS = 1 << 20
#: Rows of a coarser copy that are stored together.
_BLOCK_ROWS = 64
#: What an edge between cells may be off by rounding [cells].
_TIE = 1e-8


def sizes(shape: tuple[int, int], block: int) -> list[tuple[int, int]]:
    """Give rows and columns of the coarser copies that a raster gets, the finest first."""
    found = []
    rows, cols = shape
    while max(rows, cols) > block:
        rows, cols = rows // 2, cols // 2
        found.append((rows, cols))
    return found


def with_overviews(
    draft: Path, array: Cells, how: str, nodata: float | None, block: int
) -> tuple[Path, list[bytes]]:
    """Make coarser copies of a raster beside its draft.

    Parameters
    ----------
    draft : pathlib.Path
        The raster.
    array : numpy.ndarray, shape (rows, cols)
        Its cells.
    how : {"mode", "nearest"}
        The most frequent of the cells (of a byte each), or the nearest one.
    nodata : float or None
        Value of cells that say nothing.
    block : int
        Rows and columns that are stored together; copies are made until one fits in a block.

    Returns
    -------
    joined : pathlib.Path
        A raster that has the draft's cells and these copies, the draft itself where none was made.
    digests : list of bytes
        SHA-256 of the cells of each copy, to know them by when they are read back.
    """
    wanted = sizes(array.shape, block)
    if not wanted or min(wanted[-1]) < 1:
        return draft, []
    names: list[str] = []
    digests: list[bytes] = []
    rows: Rows = lambda first, last: array[first:last]  # noqa: E731
    finer = array.shape
    for number, shape in enumerate(wanted, 1):
        path = draft.with_name(f"{draft.name}-{number}.tif")
        digests.append(_Copy(rows, finer, shape, how, nodata).write(path, array.dtype))
        rows, finer = _reader(path, shape), shape
        names.append(path.name)
    joined = draft.with_name(f"{draft.name}.vrt")
    rasterio.shutil.copy(draft, joined, driver="VRT")
    text = joined.read_text(encoding="utf-8", errors="surrogateescape")
    copies = "".join(
        f'<Overview><SourceFilename relativeToVRT="1">{escape(name)}</SourceFilename>'
        "<SourceBand>1</SourceBand></Overview>"
        for name in names
    )
    text = text.replace("</VRTRasterBand>", f"{copies}</VRTRasterBand>")
    joined.write_text(text, encoding="utf-8", errors="surrogateescape")
    return joined, digests


def _reader(path: Path, shape: tuple[int, int]) -> Rows:
    def read(first: int, last: int) -> Cells:
        with rasterio.open(path, NUM_THREADS="1") as file:
            return np.asarray(file.read(1, window=Window(0, first, shape[1], last - first)))

    return read


class _Copy:
    """A coarser copy of a raster, made strip by strip."""

    def __init__(
        self,
        rows: Rows,
        finer: tuple[int, int],
        shape: tuple[int, int],
        how: str,
        nodata: float | None,
    ) -> None:
        self.rows = rows
        self.finer = finer
        self.shape = shape
        self.make = self._nearest if how == "nearest" else self._most_frequent
        self.nodata = np.uint8(nodata or 0) if how == "mode" else None
        self.ratio = finer[0] / shape[0], finer[1] / shape[1]

    def write(self, path: Path, kind: np.dtype[Any]) -> bytes:
        """Write it into a plain raster; give the SHA-256 of its cells."""
        digest: Any = hashlib.sha256()
        rows, cols = self.shape
        step = max(1, _STRIP_CELLS // cols)
        with rasterio.open(
            path,
            "w",
            driver="GTiff",
            height=rows,
            width=cols,
            count=1,
            dtype=kind.name,
            transform=Affine.scale(2.0),
            blockysize=min(rows, _BLOCK_ROWS),
            bigtiff="IF_SAFER",
        ) as file:
            for first in range(0, rows, step):
                count = min(step, rows - first)
                made = np.ascontiguousarray(self.make(first, count))
                file.write(made, 1, window=Window(0, first, cols, count))
                digest.update(made.view(np.uint8))
        return bytes(digest.digest())

    def _most_frequent(self, first: int, count: int) -> Cells:
        rows, cols = self._spans(0, first, count), self._spans(1, 0, self.shape[1])
        top, bottom = int(rows[0, 0]), int(rows[1, -1])
        out = np.empty((count, self.shape[1]), dtype=np.uint8)
        counts = np.zeros(256, dtype=np.int64)
        sums = np.empty(self.finer[1], dtype=np.uint32)
        coarser.mode(self.rows(top, bottom), rows - top, cols, out, self.nodata, counts, sums)
        return out

    def _spans(self, axis: int, first: int, count: int) -> NDArray[np.int64]:
        """Give the first row or column that each coarser one covers, and the one past the last."""
        edges = np.arange(first, first + count + 1) * self.ratio[axis]
        ends = np.minimum(np.ceil(edges[1:] - _TIE), self.finer[axis])
        return np.stack([edges[:-1] + _TIE, ends]).astype(np.int64)

    def _nearest(self, first: int, count: int) -> Cells:
        down = self._sources(0, first, count)
        part = self.rows(int(down[0]), int(down[-1]) + 1)
        found: Cells = part[down - down[0]][:, self._sources(1, 0, self.shape[1])]
        return found

    def _sources(self, axis: int, first: int, count: int) -> NDArray[np.intp]:
        """Give the rows or columns that coarser ones take their cells from."""
        found = (0.5 + np.arange(first, first + count) * self.ratio[axis]).astype(np.intp)
        return np.minimum(found, self.finer[axis] - 1)
