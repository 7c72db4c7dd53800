"""The elevation grid and the map from its posts to true local coordinates.

A `Grid` says where cells are. A *post* is the centre of a cell; index coordinates ``(row, col)``
count posts, so whole numbers are cell centres. A `PostMap` gives the true place of each post as
seen from one observer, and `CellAreas` the true size of each cell. All three hold numbers only:
the latter two are made from exact geodesic values by `viewshed.postmap` and `viewshed.areas`.
"""

from dataclasses import dataclass, field, replace
from math import isfinite

import numpy as np
from affine import Affine
from numpy.polynomial import polynomial
from numpy.typing import ArrayLike, NDArray

from viewshed.errors import InputError

FloatArray = NDArray[np.float64]

#: Rows of a mask that `CellAreas.total` turns into numbers at a time.
_AREA_BLOCK_ROWS = 16


@dataclass(frozen=True)
class Grid:
    """A regular grid of cells in some coordinate reference system.

    Parameters
    ----------
    shape : tuple of int
        Number of rows and columns, both at least 1.
    transform : affine.Affine
        Cell-edge transform: ``x, y = transform @ (col, row)`` is the top-left corner of a cell,
        in the units of the CRS, x east and y north. Rotation and south-up rows are fine.
    crs_wkt : str
        The coordinate reference system as WKT.

    Raises
    ------
    InputError
        If the shape is not positive or the transform is not finite or cannot be inverted.
    """

    shape: tuple[int, int]
    transform: Affine
    crs_wkt: str

    def __post_init__(self) -> None:
        """Refuse shapes and transforms that describe no grid."""
        if len(self.shape) != 2 or min(self.shape) < 1:
            msg = f"grid shape {self.shape!r} is not usable; give at least one row and one column"
            raise InputError(msg)
        a, b, c, d, e, f = self._coefficients()
        size = max(abs(a), abs(b)) * max(abs(d), abs(e))
        singular = not abs(a * e - b * d) > 1e-12 * size
        if not all(isfinite(v) for v in (a, b, c, d, e, f)) or singular:
            msg = (
                f"grid transform {(a, b, c, d, e, f)} is not finite or has no area; "
                "give the raster a valid georeference"
            )
            raise InputError(msg)

    def _coefficients(self) -> tuple[float, float, float, float, float, float]:
        t = self.transform
        return float(t.a), float(t.b), float(t.c), float(t.d), float(t.e), float(t.f)

    @property
    def rows(self) -> int:
        """Number of rows."""
        return self.shape[0]

    @property
    def cols(self) -> int:
        """Number of columns."""
        return self.shape[1]

    @property
    def bounds(self) -> tuple[float, float, float, float]:
        """Left, bottom, right and top of the box round all cells [CRS units]."""
        ends = ([-0.5, -0.5, self.rows - 0.5, self.rows - 0.5], [-0.5, self.cols - 0.5] * 2)
        x, y = self.xy(*ends)
        return float(x.min()), float(y.min()), float(x.max()), float(y.max())

    def xy(self, row: ArrayLike, col: ArrayLike) -> tuple[FloatArray, FloatArray]:
        """Give the CRS coordinates of index coordinates.

        Parameters
        ----------
        row, col : array_like
            Post coordinates; whole numbers are cell centres. Broadcast together.

        Returns
        -------
        x, y : numpy.ndarray
            Coordinates [CRS units].
        """
        a, b, c, d, e, f = self._coefficients()
        i = np.asarray(row, dtype=np.float64) + 0.5
        j = np.asarray(col, dtype=np.float64) + 0.5
        return a * j + b * i + c, d * j + e * i + f

    def rowcol(self, x: ArrayLike, y: ArrayLike) -> tuple[FloatArray, FloatArray]:
        """Give the index coordinates of CRS coordinates; the inverse of `xy`.

        Parameters
        ----------
        x, y : array_like
            Coordinates [CRS units]. Broadcast together.

        Returns
        -------
        row, col : numpy.ndarray
            Post coordinates with their fractions, also outside the grid.
        """
        a, b, c, d, e, f = self._coefficients()
        dx = np.asarray(x, dtype=np.float64) - c
        dy = np.asarray(y, dtype=np.float64) - f
        if b == 0.0 and d == 0.0:
            return dy / e - 0.5, dx / a - 0.5
        det = a * e - b * d
        return (a * dy - d * dx) / det - 0.5, (e * dx - b * dy) / det - 0.5

    def window(self, row_off: int, col_off: int, rows: int, cols: int) -> "Grid":
        """Cut a window out of the grid.

        Parameters
        ----------
        row_off, col_off : int
            First row and column of the window.
        rows, cols : int
            Size of the window.

        Returns
        -------
        Grid
            The window as a grid of its own.

        Raises
        ------
        InputError
            If the window has no cells or leaves the grid.
        """
        inside = 0 <= row_off < row_off + rows <= self.rows
        if not (inside and 0 <= col_off < col_off + cols <= self.cols):
            msg = (
                f"window of {rows} x {cols} cells from row {row_off}, column {col_off} is not "
                f"inside the grid of {self.rows} x {self.cols}; clip it first"
            )
            raise InputError(msg)
        a, b, c, d, e, f = self._coefficients()
        shifted = Affine(a, b, a * col_off + b * row_off + c, d, e, d * col_off + e * row_off + f)
        return Grid((rows, cols), shifted, self.crs_wkt)


def _frozen(values: ArrayLike) -> FloatArray:
    array = np.array(values, dtype=np.float64)
    array.setflags(write=False)
    return array


@dataclass(frozen=True, eq=False)
class PostMap:
    """True local coordinates of every post of a grid, seen from one observer.

    With ``x = col - col0``, ``y = row - row0``, ``X = x / scale`` and ``Y = y / scale``::

        p = sum(cp[i, j] * X**i * Y**j)      q = sum(cq[i, j] * X**i * Y**j)      i + j <= n
        (E, N) = jacobian @ (p, q)

    ``(E, N)`` is the geodesic distance times (sine, cosine) of the true bearing, so sight lines
    are straight in ``(E, N)`` and in ``(p, q)``. Near the observer ``p ~ x`` and ``q ~ y``; for
    ``n = 1`` both are equal to the last bit, since `scale` is a power of two.

    Parameters
    ----------
    row0, col0 : float
        Post coordinates of the observer.
    jacobian : numpy.ndarray, shape (2, 2)
        ``[[dE/dx, dE/dy], [dN/dx, dN/dy]]`` at the observer [m per index step].
    scale : float
        Divisor of the index steps, a power of two.
    cp, cq : numpy.ndarray, shape (n + 1, n + 1)
        Coefficients [index steps].
    error_m : float
        Largest distance between interpolated and exact place, on points not fitted [m].
    error_cells : float
        `error_m` over the smallest cell side.
    lon, lat : float
        The observer on the geodetic base of the grid's CRS [degrees].
    radius_meridian, radius_prime_vertical : float
        Principal radii of curvature M and P at the observer [m].
    """

    row0: float
    col0: float
    jacobian: FloatArray
    scale: float
    cp: FloatArray
    cq: FloatArray
    error_m: float
    error_cells: float
    lon: float
    lat: float
    radius_meridian: float
    radius_prime_vertical: float

    def __post_init__(self) -> None:
        """Keep private read-only copies of the arrays."""
        for name in ("jacobian", "cp", "cq"):
            object.__setattr__(self, name, _frozen(getattr(self, name)))

    def moved(self, row_off: int, col_off: int) -> "PostMap":
        """Give the same map for a window that begins at another post."""
        return replace(self, row0=self.row0 - row_off, col0=self.col0 - col_off)

    @property
    def degree(self) -> int:
        """Total degree n of the polynomials."""
        return int(self.cp.shape[0]) - 1

    def pq(self, rows: ArrayLike, cols: ArrayLike) -> tuple[FloatArray, FloatArray]:
        """Give the index-like coordinates in which sight lines are straight.

        Parameters
        ----------
        rows, cols : array_like
            Post coordinates; they broadcast, so a column of rows and a row of columns make a grid.

        Returns
        -------
        p, q : numpy.ndarray
            Coordinates [index steps at the observer], zero at the observer.
        """
        x = (np.asarray(cols, dtype=np.float64) - self.col0) / self.scale
        y = (np.asarray(rows, dtype=np.float64) - self.row0) / self.scale
        return _polynomial(self.cp, x, y), _polynomial(self.cq, x, y)

    def en(self, rows: ArrayLike, cols: ArrayLike) -> tuple[FloatArray, FloatArray]:
        """Give the true local coordinates of posts.

        Parameters
        ----------
        rows, cols : array_like
            Post coordinates; they broadcast.

        Returns
        -------
        E, N : numpy.ndarray
            Geodesic distance times sine and cosine of the true bearing [m].
        """
        p, q = self.pq(rows, cols)
        j = self.jacobian
        return j[0, 0] * p + j[0, 1] * q, j[1, 0] * p + j[1, 1] * q


def _polynomial(coefficients: FloatArray, x: FloatArray, y: FloatArray) -> FloatArray:
    """Sum ``c[i, j] x**i y**j`` by Horner's rule in x, so that broadcasting stays cheap."""
    degree = coefficients.shape[0] - 1
    total = np.zeros(np.broadcast_shapes(x.shape, y.shape))
    for i in range(degree, -1, -1):
        total = total * x + polynomial.polyval(y, coefficients[i, : degree - i + 1])
    return total


@dataclass(frozen=True, eq=False)
class CellAreas:
    """True areas of the cells of a grid, as a sum of few products of a row and a column number.

    The area of cell ``(r, c)`` is ``sum(row_factors[r, k] * col_factors[k, c])``, so that sums
    over masks of any size are cheap.

    Parameters
    ----------
    row_factors : numpy.ndarray, shape (rows, m)
        Numbers of the rows [m2].
    col_factors : numpy.ndarray, shape (m, cols)
        Numbers of the columns.
    error : float
        Largest relative error found on points not used in the fit; 0 where the areas are exact.
    """

    row_factors: FloatArray = field(repr=False)
    col_factors: FloatArray = field(repr=False)
    error: float

    def __post_init__(self) -> None:
        """Keep private read-only copies of the arrays."""
        for name in ("row_factors", "col_factors"):
            object.__setattr__(self, name, _frozen(getattr(self, name)))

    @property
    def shape(self) -> tuple[int, int]:
        """Rows and columns of the grid."""
        return self.row_factors.shape[0], self.col_factors.shape[1]

    def window(self, row_off: int, col_off: int, rows: int, cols: int) -> "CellAreas":
        """Give the same areas for a window of the grid."""
        return CellAreas(
            self.row_factors[row_off : row_off + rows],
            self.col_factors[:, col_off : col_off + cols],
            self.error,
        )

    def at(self, rows: ArrayLike, cols: ArrayLike) -> FloatArray:
        """Give the areas of single cells.

        Parameters
        ----------
        rows, cols : array_like of int
            Cells; they broadcast.

        Returns
        -------
        numpy.ndarray
            Areas [m2].
        """
        r, c = np.asarray(rows), np.asarray(cols)
        areas: FloatArray = np.sum(self.row_factors[r] * self.col_factors.T[c], axis=-1)
        return areas

    def total(self, mask: ArrayLike) -> float:
        """Sum the areas of the cells chosen by a mask.

        Parameters
        ----------
        mask : array_like, shape (rows, cols)
            Cells that are true or not zero are counted.

        Returns
        -------
        float
            Area [m2].

        Raises
        ------
        InputError
            If the mask has another shape than the grid.
        """
        chosen = np.asarray(mask)
        if chosen.shape != self.shape:
            msg = f"mask of shape {chosen.shape} does not fit the grid of shape {self.shape}"
            raise InputError(msg)
        columns = self.col_factors.T
        constant = columns.shape[1] == 1 and bool(np.all(columns == columns[0, 0]))
        sums = np.empty_like(self.row_factors)
        for start in range(0, self.shape[0], _AREA_BLOCK_ROWS):
            block = chosen[start : start + _AREA_BLOCK_ROWS]
            if constant:
                counts = np.count_nonzero(block, axis=1)
                sums[start : start + len(block), 0] = counts * columns[0, 0]
            else:
                sums[start : start + len(block)] = (block != 0).astype(np.float64) @ columns
        return float(np.sum(self.row_factors * sums))
