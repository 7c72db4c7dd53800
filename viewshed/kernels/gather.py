"""From what one observer sees to sums of area and to the answer of several observers."""

from viewshed._jit import kernel

#: States of a cell: hidden, visible, unresolved.
STATES = 3
# Which layers `merge` keeps, by their place in `keep`.
COUNT, COUNT_UNRESOLVED, WHO, CLEARANCE, NEEDED_HEIGHT = 0, 1, 2, 3, 4
N_KEEP = 5


@kernel
def tally(state, ends, row_factors, col_factors, counts, areas, first, last, sums):
    """Add up cells and areas by distance band and state.

    Parameters
    ----------
    state : (rows, cols) uint8
        0 hidden, 1 visible, 2 unresolved, 255 no data.
    ends : (bands - 1, 2, rows) int64
        Columns ends[b, 0, r] up to but not at ends[b, 1, r] of row r lie within the outer edge of
        band b. What is farther belongs to the last band.
    row_factors, col_factors : (rows, m), (m, cols) float64
        The area of cell (r, c) is the sum of row_factors[r, k] * col_factors[k, c] [m2].
    counts : (bands, 3) int64
        Cells of each band and state, added to.
    areas : (bands, 3) float64
        Their area [m2], added to.
    first, last : (rows,) int64
        First and last visible column of each row, -1 where there is none; written.
    sums : (bands, 3, m) float64
        Scratch space.
    """
    rows, cols = state.shape
    bands = counts.shape[0]
    terms = row_factors.shape[1]
    for r in range(rows):
        first[r] = -1
        last[r] = -1
        for b in range(bands):
            for s in range(STATES):
                for k in range(terms):
                    sums[b, s, k] = 0.0
        # bands from the far left to the observer and on to the far right
        left = 0
        for piece in range(2 * bands - 1):
            b = bands - 1 - piece if piece < bands else piece - bands + 1
            right = cols
            if piece < bands - 1:
                right = ends[b - 1, 0, r]
            elif piece < 2 * bands - 2:
                right = ends[b, 1, r]
            right = min(max(right, left), cols)
            for c in range(left, right):
                s = state[r, c]
                if s >= STATES:
                    continue
                counts[b, s] += 1
                for k in range(terms):
                    sums[b, s, k] += col_factors[k, c]
                if s == 1:
                    if first[r] < 0:
                        first[r] = c
                    last[r] = c
            left = right
        for b in range(bands):
            for s in range(STATES):
                total = 0.0
                for k in range(terms):
                    total += row_factors[r, k] * sums[b, s, k]
                areas[b, s] += total


@kernel
def merge(
    one, clear, needed, row0, col0, bit, keep, state, count, unresolved, who, clearance, need
):
    """Add the answer of one observer to that of several.

    Parameters
    ----------
    one : (rows, cols) uint8
        What this observer sees.
    clear, needed : (rows, cols) float32
        Its clearance and needed height [m], if kept.
    row0, col0 : int
        Where its first cell lies in the common arrays.
    bit : uint32
        Its bit in `who`.
    keep : (5,) uint8
        Which of the layers below are kept; the others may be of any shape.
    state : uint8
        255 if no observer has a word on the cell; else 1 if any sees it, 2 if any is unresolved, 0.
    count, unresolved : uint16
        Observers that surely see it, and that are unresolved; 65535 where none has a word.
    who : uint32
        Bits of the observers that surely see it.
    clearance, need : float32
        Greatest clearance and least needed height that is known [m]; NaN where none is.
    """
    rows, cols = one.shape
    for r in range(rows):
        for c in range(cols):
            s = one[r, c]
            if s > 2:
                continue
            i = row0 + r
            k = col0 + c
            before = state[i, k]
            if before == 255 or s == 1 or (s == 2 and before == 0):
                state[i, k] = s
            if keep[COUNT]:
                if before == 255:
                    count[i, k] = 0
                if s == 1:
                    count[i, k] += 1
            if keep[COUNT_UNRESOLVED]:
                if before == 255:
                    unresolved[i, k] = 0
                if s == 2:
                    unresolved[i, k] += 1
            if keep[WHO] and s == 1:
                who[i, k] |= bit
            if keep[CLEARANCE]:
                value = clear[r, c]
                if value == value and not value <= clearance[i, k]:
                    clearance[i, k] = value
            if keep[NEEDED_HEIGHT]:
                value = needed[r, c]
                if value == value and not value >= need[i, k]:
                    need[i, k] = value
