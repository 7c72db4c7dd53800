"""Patches of cells with one code, and the rings along their edges.

A patch is a set of cells of one code that hang together by their edges (4-connected). Its rings
run along edges of cells with the patch on the left, rows counted downward, so on a north-up map
the outer ring runs anticlockwise and holes run clockwise. Where two cells of a patch touch at a
corner alone, the ring crosses over from one to the other: as the patch is joined elsewhere, the
two other cells at that corner are parted by it, and so no ring ever meets itself.

Arrays of patches have a rim of one cell on all sides that belongs to no patch, so row r and
column c of the grid are at [r + 1, c + 1] there. Corner (r, c) is the top left one of a cell.
"""

from viewshed._jit import inline, kernel

NONE = -1
#: Directions of a step along a ring.
DOWN, RIGHT, UP, LEFT = 0, 1, 2, 3


@inline
def root_of(parent, label):
    """Follow a label to the first one of its patch, shortening the way."""
    while parent[label] != label:
        parent[label] = parent[parent[label]]
        label = parent[label]
    return label


@kernel
def join(codes, patches, parent, n, first, last):
    """Label the cells of rows first to last - 1; return the number of labels so far.

    Code 0 is in no patch. `parent` needs room for one label a cell of these rows.
    """
    for r in range(first, last):
        for c in range(codes.shape[1]):
            code = codes[r, c]
            if code == 0:
                patches[r + 1, c + 1] = NONE
                continue
            above, before = NONE, NONE
            if r > 0 and codes[r - 1, c] == code:
                above = root_of(parent, patches[r, c + 1])
            if c > 0 and codes[r, c - 1] == code:
                before = root_of(parent, patches[r + 1, c])
            if above == NONE and before == NONE:
                parent[n] = n
                patches[r + 1, c + 1] = n
                n += 1
            elif above == NONE:
                patches[r + 1, c + 1] = before
            elif before == NONE:
                patches[r + 1, c + 1] = above
            else:
                kept, gone = above, before
                if before < above:
                    kept, gone = before, above
                parent[gone] = kept
                patches[r + 1, c + 1] = kept
    return n


@kernel
def number(parent, n):
    """Turn labels into numbers of patches, in the order of their first cells; return how many.

    The first label of a patch is its least, and belongs to its first cell.
    """
    count = 0
    for label in range(n):
        if parent[label] == label:
            parent[label] = count
            count += 1
        else:
            parent[label] = parent[parent[label]]
    return count


@kernel
def measure(codes, patches, numbers, row_factors, col_sums, code_of, cells, area, first, last):
    """Put numbers of patches for labels in rows first to last - 1, and sum up the patches.

    The area of a run of cells from column a to b - 1 of row r is the sum over k of
    row_factors[r, k] * (col_sums[k, b] - col_sums[k, a]).
    """
    cols = codes.shape[1]
    for r in range(first, last):
        c = 0
        while c < cols:
            if codes[r, c] == 0:
                c += 1
                continue
            patch = numbers[patches[r + 1, c + 1]]
            start = c
            while c < cols and codes[r, c] == codes[r, start]:
                patches[r + 1, c + 1] = patch
                c += 1
            code_of[patch] = codes[r, start]
            cells[patch] += c - start
            for k in range(row_factors.shape[1]):
                area[patch] += row_factors[r, k] * (col_sums[k, c] - col_sums[k, start])


@kernel
def count_corners(patches, wanted, first, last):
    """Count the corners of the rings of wanted patches, cell by cell of rows first to last - 1."""
    found = 0
    for r in range(first + 1, last + 1):
        for c in range(1, patches.shape[1] - 1):
            own = patches[r, c]
            if own == NONE or not wanted[own]:
                continue
            for dr in (-1, 1):
                for dc in (-1, 1):
                    beside = patches[r, c + dc] == own
                    over = patches[r + dr, c] == own
                    if beside == over and (not beside or patches[r + dr, c + dc] != own):
                        found += 1
    return found


@inline
def turn(patches, own, r, c, direction):
    """Direction in which a ring leaves corner (r, c)."""
    if direction == DOWN:
        left, right = patches[r + 1, c + 1], patches[r + 1, c]
    elif direction == RIGHT:
        left, right = patches[r, c + 1], patches[r + 1, c + 1]
    elif direction == UP:
        left, right = patches[r, c], patches[r, c + 1]
    else:
        left, right = patches[r + 1, c], patches[r, c]
    if right == own:
        return (direction + 3) % 4
    if left == own:
        return direction
    return (direction + 1) % 4


@kernel
def trace(patches, wanted, walked, corners, ring_patch, ring_end, rings, first, last):
    """Trace the rings that begin in rows first to last - 1; return the number of rings so far.

    A ring begins at its first left edge in the order of cells, so the first ring of a patch is
    its outer one. `corners` gets row and column of each corner, the first one again at the end of
    a ring; ring i ends before corner ring_end[i]. `walked` marks left edges that are done.
    """
    at = 0
    if rings > 0:
        at = ring_end[rings - 1]
    for row in range(first, last):
        for col in range(walked.shape[1]):
            own = patches[row + 1, col + 1]
            if own == NONE or patches[row + 1, col] == own or walked[row, col] != 0:
                continue
            if not wanted[own]:
                continue
            r, c, direction = row, col, DOWN
            corners[at, 0], corners[at, 1] = r, c
            at += 1
            while True:
                if direction == DOWN:
                    walked[r, c] = 1
                    r += 1
                elif direction == RIGHT:
                    c += 1
                elif direction == UP:
                    r -= 1
                else:
                    c -= 1
                way = turn(patches, own, r, c, direction)
                if way != direction:
                    corners[at, 0], corners[at, 1] = r, c
                    at += 1
                    direction = way
                    if r == row and c == col and way == DOWN:
                        break
            ring_patch[rings] = own
            ring_end[rings] = at
            rings += 1
    return rings
