"""Coarser copies of states, by what most cells say."""

from viewshed._jit import kernel


@kernel
def mode(cells, top, out, first, ratio_rows, ratio_cols, last_row, nodata, counts):
    """Give each coarser cell the state that most of its cells have.

    Where several states are as frequent, the one counts that was the first to be so, row by row.

    Parameters
    ----------
    cells : (rows, cols) uint8
        Strip of the finer cells.
    top : int
        Row of its first one.
    out : (rows, cols) uint8
        Strip of the coarser cells; written.
    first : int
        Row of its first one.
    ratio_rows, ratio_cols : float
        Finer rows and columns a coarser one, 2 or a little more.
    last_row : int
        The row past the last finer one.
    nodata : int
        Value of cells that say nothing.
    counts : (256,) int64
        Scratch space, all 0.
    """
    rows, cols = out.shape
    last_col = cells.shape[1]
    for r in range(rows):
        start = int((first + r) * ratio_rows + 1e-8)
        end = (first + r + 1) * ratio_rows - 1e-8
        stop = int(end)
        if stop < end:
            stop += 1
        stop = min(stop, last_row)
        for c in range(cols):
            left = int(c * ratio_cols + 1e-8)
            edge = (c + 1) * ratio_cols - 1e-8
            right = int(edge)
            if right < edge:
                right += 1
            right = min(right, last_col)
            best = nodata
            most = 0
            for i in range(start - top, stop - top):
                for k in range(left, right):
                    value = cells[i, k]
                    if value != nodata:
                        counts[value] += 1
                        if counts[value] > most:
                            most = counts[value]
                            best = value
            out[r, c] = best
            for i in range(start - top, stop - top):
                for k in range(left, right):
                    counts[cells[i, k]] = 0
