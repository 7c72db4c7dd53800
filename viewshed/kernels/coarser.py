"""Coarser copies of states, by what most cells say."""

import numpy as np

from viewshed._jit import inline, kernel

_BYTE = 8
_MASK = np.uint32(255)


@inline
def _slowly(cells, top, bottom, left, right, nodata, counts):
    """Give the most frequent value of some cells, the first to be so if there are several."""
    best = nodata
    most = 0
    for i in range(top, bottom):
        for k in range(left, right):
            value = cells[i, k]
            if value != nodata:
                counts[value] += 1
                if counts[value] > most:
                    most = counts[value]
                    best = value
    for i in range(top, bottom):
        for k in range(left, right):
            counts[cells[i, k]] = 0
    return best


@kernel
def mode(cells, rows, cols, out, nodata, counts, sums):
    """Give each coarser cell the state that most of its cells have.

    Where several states are as frequent, the one counts that was the first to be so, row by row.

    Parameters
    ----------
    cells : (n, m) uint8
        Finer cells.
    rows : (2, r) int64
        First finer row of each coarser one, and the one past its last; less than 256 of them.
    cols : (2, c) int64
        The same of the columns.
    out : (r, c) uint8
        Coarser cells; written.
    nodata : uint8
        Value of cells that say nothing.
    counts : (256,) int64
        Scratch space, all 0.
    sums : (m,) uint32
        Scratch space: cells of a column that are 0, 1, 2 and something else, a byte each.
    """
    one = np.uint32(1)
    for r in range(out.shape[0]):
        top = rows[0, r]
        bottom = rows[1, r]
        for k in range(cells.shape[1]):
            sums[k] = 0
        for i in range(top, bottom):
            for k in range(cells.shape[1]):
                value = cells[i, k]
                place = np.uint32(min(value, np.uint8(3)) * _BYTE)
                sums[k] += np.uint32(value != nodata) * (one << place)
        for c in range(out.shape[1]):
            left = cols[0, c]
            right = cols[1, c]
            found = np.uint32(0)
            for k in range(left, right):
                found += sums[k]
            zeros = found & _MASK
            ones = (found >> np.uint32(_BYTE)) & _MASK
            twos = (found >> np.uint32(2 * _BYTE)) & _MASK
            others = found >> np.uint32(3 * _BYTE)
            if others == 0 and zeros > ones and zeros > twos:
                out[r, c] = 0
            elif others == 0 and ones > zeros and ones > twos:
                out[r, c] = 1
            elif others == 0 and twos > zeros and twos > ones:
                out[r, c] = 2
            else:
                out[r, c] = _slowly(cells, top, bottom, left, right, nodata, counts)
