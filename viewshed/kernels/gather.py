"""From what one observer sees to sums of area and to the answer of several observers."""

import numpy as np

from viewshed._jit import inline, kernel

#: States of a cell: hidden, visible, unresolved.
STATES = 3
# Which layers `merge` keeps, by their place in `keep`.
COUNT, COUNT_UNRESOLVED, WHO, CLEARANCE, NEEDED_HEIGHT = 0, 1, 2, 3, 4
N_KEEP = 5


# What `holds` along a row.
FALLS, BEYOND, WITHIN = 0, 1, 2
#: Cells of a row that are looked at together for being all alike.
BLOCK = 16


@inline
def polynomial(row, x):
    """Sum of row[i] * x**i."""
    total = 0.0
    for i in range(row.shape[0] - 1, -1, -1):
        total = total * x + row[i]
    return total


@inline
def distance(along, jacobian, place, col):
    """Ground distance of a cell from the observer [m]; `along` is that of its row."""
    x = (np.float64(col) - place[1]) / place[2]
    p = polynomial(along[0], x)
    q = polynomial(along[1], x)
    east = jacobian[0, 0] * p + jacobian[0, 1] * q
    north = jacobian[1, 0] * p + jacobian[1, 1] * q
    return np.hypot(east, north)


@inline
def holds(what, along, jacobian, place, radius, col):
    """Tell whether the distance still falls, is still beyond the radius, or still within it."""
    here = distance(along, jacobian, place, col)
    if what == FALLS:
        return here > distance(along, jacobian, place, col + 1)
    return here > radius if what == BEYOND else here <= radius


@inline
def first_without(what, along, jacobian, place, radius, low, high, guess):
    """Find the first column from low to high where something no longer holds; high if always.

    It is looked for about a guess with growing steps, then by bisection.
    """
    step = 1
    at = min(max(guess, low), high - 1)
    while low < high:
        if holds(what, along, jacobian, place, radius, at):
            low = at + 1
            at = at + step
        else:
            high = at
            at = at - step
        step *= 2
        if at < low or at >= high:
            at = (low + high) // 2
    return low


@kernel
def runs_within(cp, cq, jacobian, place, cols, radii, ends, along):
    """Find what lies within some distances, row by row.

    Parameters
    ----------
    cp, cq : (n + 1, n + 1) float64
        Coefficients of the map from posts to true places, as in `viewshed.grid.PostMap`.
    jacobian : (2, 2) float64
        Its linear part [m].
    place : (3,) float64
        Row and column of the observer, and the scale of the map.
    cols : int
        Columns of the window.
    radii : (m,) float64
        Distances [m].
    ends : (m, 2, rows) int64
        First column within each distance and the one past the last, equal where there is none;
        written.
    along : (2, n + 1) float64
        Scratch space.
    """
    degree = cp.shape[0] - 1
    last = cols - 1
    nearest = 0
    for m in range(radii.shape[0]):
        ends[m, 0, 0] = 0
        ends[m, 1, 0] = cols
    for r in range(ends.shape[2]):
        y = (np.float64(r) - place[0]) / place[2]
        for i in range(degree + 1):
            along[0, i] = polynomial(cp[i, : degree - i + 1], y)
            along[1, i] = polynomial(cq[i, : degree - i + 1], y)
        nearest = first_without(FALLS, along, jacobian, place, 0.0, 0, last, nearest)
        least = distance(along, jacobian, place, nearest)
        before = max(r - 1, 0)  # the row before is a good guess
        for m in range(radii.shape[0]):
            first, past = ends[m, 0, before], ends[m, 1, before]
            if least <= radii[m]:
                first = first_without(
                    BEYOND, along, jacobian, place, radii[m], 0, nearest, first
                )
                past = first_without(
                    WITHIN, along, jacobian, place, radii[m], nearest + 1, cols, past
                )
            else:
                first = nearest
                past = nearest
            ends[m, 0, r] = first
            ends[m, 1, r] = past


@inline
def run_end(own, c, right):
    """Where the run of equal states that begins at a cell ends, at the latest at `right`."""
    s = own[c]
    end = c + 1
    while end < right and own[end] == s:
        end += 1
        if end - c == BLOCK:  # a long run: on by whole blocks
            while end + BLOCK <= right:
                differ = np.uint8(0)
                for n in range(BLOCK):
                    differ |= own[np.uint64(end) + np.uint64(n)] ^ s
                if differ != 0:
                    break
                end += BLOCK
    return end


@kernel
def tally(state, ends, row_factors, usual, more, counts, areas, first, last, sums):
    """Add up cells and areas by distance band and state.

    Parameters
    ----------
    state : (rows, cols) uint8
        0 hidden, 1 visible, 2 unresolved, 255 no data.
    ends : (bands - 1, 2, rows) int64
        Columns ends[b, 0, r] up to but not at ends[b, 1, r] of row r lie within the outer edge of
        band b. What is farther belongs to the last band.
    row_factors, usual, more : (rows, m), (m,), (m, cols + 1) float64
        The area of cells c up to but not at e of row r is the sum of row_factors[r, k] *
        (usual[k] * (e - c) + more[k, e] - more[k, c]) [m2].
    counts : (bands, 3) int64
        Cells of each band and state, added to.
    areas : (bands, 3) float64
        Their area [m2], added to.
    first, last : (rows,) int64
        First and last visible column of each row, -1 where there is none; written.
    sums : (bands, 3, m + 1) float64
        Scratch space.
    """
    rows, cols = state.shape
    bands = counts.shape[0]
    terms = row_factors.shape[1]
    for r in range(rows):
        own = state[r]
        first[r] = -1
        last[r] = -1
        sums[:] = 0.0
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
            c = left
            while c < right:
                s = own[c]
                end = run_end(own, c, right)
                if s < STATES:
                    sums[b, s, terms] += end - c
                    for k in range(terms):
                        sums[b, s, k] += more[k, end] - more[k, c]
                    if s == 1:
                        if first[r] < 0:
                            first[r] = c
                        last[r] = end - 1
                c = end
            left = right
        for b in range(bands):
            for s in range(STATES):
                total = 0.0
                for k in range(terms):
                    total += row_factors[r, k] * (usual[k] * sums[b, s, terms] + sums[b, s, k])
                counts[b, s] += np.int64(sums[b, s, terms])
                areas[b, s] += total


# One row of a layer each. Plain loops without branches (hence `&` and `|`), in functions of their
# own: only so does the compiler take many cells at a time.


@inline
def merge_states(own, states):
    """Visible goes before unresolved, unresolved before hidden, and any before no data."""
    for c in range(own.shape[0]):
        s = own[c]
        before = states[c]
        better = (before == 255) | (s == 1) | ((s == 2) & (before == 0))
        states[c] = s if (s <= 2) & better else before


@inline
def count_up(own, what, count):
    """Add 1 where the own state is `what`; 65535 is the count of a cell without a word so far."""
    for c in range(own.shape[0]):
        n = count[c]
        n = np.uint16(0) if (own[c] <= 2) & (n == 65535) else n
        count[c] = n + np.uint16(own[c] == what)


@inline
def set_bit(own, bit, bits):
    """Set the bit where the own state is visible."""
    for c in range(own.shape[0]):
        bits[c] |= bit if own[c] == 1 else np.uint32(0)


@inline
def keep_greatest(own, values, best):
    """Keep the greatest that is known; zero loses its sign, which would tell who came first."""
    for c in range(own.shape[0]):
        value = values[c] + np.float32(0.0)
        better = (own[c] <= 2) & ((value > best[c]) | (best[c] != best[c]))
        best[c] = value if better else best[c]


@inline
def keep_least(own, values, best):
    """Keep the least that is known."""
    for c in range(own.shape[0]):
        value = values[c] + np.float32(0.0)
        better = (own[c] <= 2) & ((value < best[c]) | (best[c] != best[c]))
        best[c] = value if better else best[c]


@kernel
def merge(
    one, clear, needed, row0, col0, bit, keep, state, count, unresolved, who, clearance, need
):
    """Add the answer of one observer to that of several.

    Nothing here depends on the order in which observers come.

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
        Greatest clearance and least needed height that is known [m]; NaN where none is. Zero has
        no sign.
    """
    rows, cols = one.shape
    end = col0 + cols
    for r in range(rows):
        own = one[r]
        i = row0 + r
        if keep[COUNT]:
            count_up(own, np.uint8(1), count[i, col0:end])
        if keep[COUNT_UNRESOLVED]:
            count_up(own, np.uint8(2), unresolved[i, col0:end])
        if keep[WHO]:
            set_bit(own, bit, who[i, col0:end])
        if keep[CLEARANCE]:
            keep_greatest(own, clear[r], clearance[i, col0:end])
        if keep[NEEDED_HEIGHT]:
            keep_least(own, needed[r], need[i, col0:end])
        merge_states(own, state[i, col0:end])
