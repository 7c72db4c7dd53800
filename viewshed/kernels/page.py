"""The map of the page: cells summed in blocks, the light on the ground, and colours of pixels."""

from math import sqrt

import numpy as np

from viewshed._jit import inline, kernel

# Rows of the colours that `paint` is given.
SEEN, UNSURE, STRIPE, DOT = 0, 1, 2, 3
# What stands last among the shares of a pixel, counted from the end.
OUTSIDE, VOID, HIDDEN, UNRESOLVED = 1, 2, 3, 4


@kernel
def count_seen(visible, count, seen):
    """Add up the cells that are visible, by how many observers see them.

    Parameters
    ----------
    visible : (rows, cols) uint8
        The visible layer.
    count : (rows, cols) uint16
        How many observers see each cell.
    seen : (65536,) int64
        Cells seen by 0, 1, 2, ... observers; added to.
    """
    for r in range(visible.shape[0]):
        for c in range(visible.shape[1]):
            if visible[r, c] == 1:
                seen[count[r, c]] += 1


@inline
def _share(part, cells):
    """Part of some cells in 255ths, rounded up: a single cell is not lost."""
    exact = 255.0 * part / cells
    low = int(exact)
    return low + 1 if low < exact else low


@kernel
def sum_blocks(visible, count, elevation, kinds, place, tallies, totals, shares, heights):
    """Sum blocks of cells; the lowest and the rightmost ones can be smaller.

    Parameters
    ----------
    visible : (rows, cols) uint8
        The visible layer.
    count : (rows, cols) uint16
        How many observers see each cell; of no rows where that is not told apart.
    elevation : (rows, cols) float32
        Heights [m], NaN for void.
    kinds : (256 + 65536,) uint8
        The kind of each state, then of each count of a cell of kind 0. As many as there are kinds
        stands for no answer.
    place : (4,) int64
        First column of the blocks and their end, rows and columns of a block.
    tallies : (rows of blocks, columns of blocks, kinds + 2) int32
        Scratch space, zero.
    totals : (rows of blocks, columns of blocks) float64
        Scratch space, zero.
    shares : (rows of blocks, columns of blocks, kinds + 2) uint8
        Share of each kind, of void and of no answer; 255 is all; written.
    heights : (rows of blocks, columns of blocks) float32
        Mean height [m], NaN where there is none; written.
    """
    left, end, by, bx = place[0], place[1], place[2], place[3]
    number = shares.shape[2] - 2
    counted = count.shape[0] > 0
    for r in range(visible.shape[0]):
        i = r // by
        for j in range(shares.shape[1]):
            total = 0.0
            for c in range(left + j * bx, min(left + (j + 1) * bx, end)):
                kind = kinds[visible[r, c]]
                if counted and kind == 0:
                    kind = kinds[256 + count[r, c]]
                tallies[i, j, kind] += 1
                z = elevation[r, c]
                if z - z == 0.0:
                    total += z
                else:
                    tallies[i, j, number + 1] += 1
            totals[i, j] += total
    for i in range(shares.shape[0]):
        tall = min(by, visible.shape[0] - i * by)
        for j in range(shares.shape[1]):
            cells = tall * min(bx, end - left - j * bx)
            voids = tallies[i, j, number + 1]
            bare = cells - voids
            for k in range(number):
                bare -= tallies[i, j, k]
                shares[i, j, k] = _share(tallies[i, j, k], cells)
            shares[i, j, number] = _share(voids, cells)
            shares[i, j, number + 1] = _share(max(bare, 0), cells)
            known = cells - voids
            heights[i, j] = totals[i, j] / known if known > 0 else np.nan


@inline
def _slope(heights, inverse, i, j):
    """Rise of the ground to the east and to the north at a block."""
    rows, cols = heights.shape
    a, b = max(i - 1, 0), min(i + 1, rows - 1)
    down = (heights[b, j] - heights[a, j]) / (b - a) if b > a else heights[i, j] * 0.0
    a, b = max(j - 1, 0), min(j + 1, cols - 1)
    right = (heights[i, b] - heights[i, a]) / (b - a) if b > a else heights[i, j] * 0.0
    return (
        right * inverse[0, 0] + down * inverse[1, 0],
        right * inverse[0, 1] + down * inverse[1, 1],
    )


@kernel
def steepness(heights, inverse, stride, found):
    """Slope of every so many blocks, NaN where it is not known.

    Parameters
    ----------
    heights : (rows, cols) float32
        Heights [m].
    inverse : (2, 2) float64
        Columns and rows that a metre to the east and to the north is.
    stride : int
        Blocks from one to the next, along rows.
    found : (n,) float64
        Slopes; written.
    """
    cols = heights.shape[1]
    for n in range(found.size):
        east, north = _slope(heights, inverse, n * stride // cols, n * stride % cols)
        found[n] = sqrt(east * east + north * north)


@kernel
def shade(heights, inverse, factor, level, suns, brightness, first, last, light):
    """Light on the ground.

    Parameters
    ----------
    heights, inverse
        As in `steepness`.
    factor : float
        How much the relief is exaggerated.
    level : float
        Light on level ground before it is made brighter.
    suns : (n, 3) float64
        For each light: east and north of where it comes from, and its weight.
    brightness : float
        What all light is multiplied with; more than 1 is cut off.
    first, last : int
        Rows that are worked on.
    light : (rows, cols) float32
        0 to 1; written.
    """
    for i in range(first, last):
        for j in range(heights.shape[1]):
            east, north = _slope(heights, inverse, i, j)
            total = level
            if east - east == 0.0 and north - north == 0.0:
                east, north = east * factor, north * factor
                norm = sqrt(1.0 + east * east + north * north)
                total = 0.0
                for s in range(suns.shape[0]):
                    dot = (level - (east * suns[s, 0] + north * suns[s, 1])) / norm
                    total += suns[s, 2] * max(dot, 0.0)
            light[i, j] = min(total * brightness, 1.0)


@inline
def _ink(means, y, inks, ramp, least, rgb):
    """Colour a row by the shares of the classes and the light on each pixel."""
    kinds = means.shape[1] - 1
    steps = kinds - 4
    ramped = ramp.shape[0] > 0
    for x in range(means.shape[0]):
        unsure, light = means[x, kinds - UNRESOLVED], means[x, kinds]
        void = means[x, kinds - VOID]
        seen = 0.0
        for k in range(steps):
            seen += means[x, k]
        judged = seen + unsure + means[x, kinds - HIDDEN]
        some = 1.0 / max(judged, 1e-6)
        doubt = max(sqrt(unsure * some), least) if unsure > 0.0 else 0.0
        sure = max(sqrt(seen * some), least) if seen > 0.0 else 0.0
        striped = doubt > 0.0 and (x + y) % 9 < 3
        dotted = void > 0.5 and judged < 0.5 and x % 8 < 2 and (y + 4 * (x // 8 % 2)) % 8 < 2
        for c in range(3):
            v = 1.0
            if means[x, kinds - OUTSIDE] > 0.0:
                v = (0.95 if ramped else 0.93) + 0.05 * light
            if dotted:
                v = inks[DOT, c]
            if judged > 0.0:
                bare = 0.76 + 0.20 * light if ramped else 0.50 + 0.47 * light
                v = bare * (1.0 if c == 0 else (0.995 if c == 1 else 0.975))
            if doubt > 0.0:
                v = v * (1.0 - doubt) + doubt * inks[UNSURE, c] * min(0.82 + 0.2 * light, 1.0)
                if striped:
                    v = v * (1.0 - doubt) + doubt * inks[STRIPE, c]
            if sure > 0.0:
                if ramped:
                    ink = 0.0
                    for k in range(steps):
                        ink += means[x, k] * ramp[k, c]
                    ink = ink / max(seen, 1e-6) * (0.88 + 0.15 * light)
                else:
                    ink = inks[SEEN, c] * (0.5 + 0.75 * light)
                v = v * (1.0 - sure) + sure * ink
            rgb[y, x, c] = int(min(max(v, 0.0), 1.0) * 255.0 + 0.5)


@inline
def _between(values, row, col):
    """Value between four blocks, held at the border."""
    rows, cols = values.shape
    row, col = min(max(row, 0.0), rows - 1.0), min(max(col, 0.0), cols - 1.0)
    i, j = min(int(row), max(rows - 2, 0)), min(int(col), max(cols - 2, 0))
    v, u = row - i, col - j
    below, beside = min(i + 1, rows - 1), min(j + 1, cols - 1)
    upper = values[i, j] * (1.0 - u) + values[i, beside] * u
    lower = values[below, j] * (1.0 - u) + values[below, beside] * u
    return upper * (1.0 - v) + lower * v


@inline
def _along(lattice, place, share, nodes):
    """Row and column in blocks, from their first edges, at the nodes of a line across the map."""
    v = share * (lattice.shape[1] - 1)
    m = min(int(v), lattice.shape[1] - 2)
    v -= m
    for axis in range(2):
        for n in range(lattice.shape[2]):
            place_there = (1.0 - v) * lattice[axis, m, n] + v * lattice[axis, m + 1, n]
            nodes[axis, n] = (place_there - place[axis] + 0.5) / place[2 + axis]


@inline
def _at(nodes, u):
    """Row and column in blocks at a place along that line."""
    n = min(int(u), nodes.shape[1] - 2)
    u -= n
    return (
        nodes[0, n] * (1.0 - u) + nodes[0, n + 1] * u,
        nodes[1, n] * (1.0 - u) + nodes[1, n + 1] * u,
    )


@kernel
def paint(shares, light, lattice, place, first, last, inks, ramp, least, nodes, means, found, rgb):
    """Colour some rows of the map.

    Parameters
    ----------
    shares : (rows of blocks, columns of blocks, kinds + 2) uint8
        As `sum_blocks` gives them.
    light : (rows of blocks, columns of blocks) float32
        Light on the ground, 0 to 1.
    lattice : (2, nodes, nodes) float64
        Row and column of the grid at evenly spaced places of the map, its corners the first and
        last.
    place : (5,) int64
        First row and column of the blocks, rows and columns of a block, and pixels finer than
        the map's along its side.
    first, last : int
        Rows that are coloured.
    inks : (4, 3) float64
        Colours of what is seen, of what is unresolved, of its stripes and of the dots of voids.
    ramp : (steps, 3) float64
        Colours of the steps of a count; none where visible is one.
    least : float
        Least tint of a pixel that holds any cell of a class.
    nodes : (2, nodes) float64
        Scratch space.
    means : (width, kinds + 3) float64
        Scratch space.
    found : (3,) uint8
        Set to 1 for unresolved, void and outside where they occur.
    rgb : (height, width, 3) uint8
        Colours; written from `first` up to but not at `last`.
    """
    fine, height, width = place[4], rgb.shape[0], rgb.shape[1]
    kinds, bright = shares.shape[2], shares.shape[2]
    right, finest = (lattice.shape[2] - 1) / width, 1.0 / fine
    for y in range(first, last):
        _along(lattice, place, (y + 0.5) / height, nodes)
        for x in range(width):
            for k in range(kinds):
                means[x, k] = 0.0
            row, col = _at(nodes, (x + 0.5) * right)
            means[x, bright] = _between(light, row - 0.5, col - 0.5)
        for i in range(fine):
            _along(lattice, place, (y + (i + 0.5) * finest) / height, nodes)
            for x in range(width):
                for j in range(fine):
                    row, col = _at(nodes, (x + (j + 0.5) * finest) * right)
                    if 0.0 <= row < shares.shape[0] and 0.0 <= col < shares.shape[1]:
                        r, c = int(row), int(col)
                        for k in range(kinds):
                            means[x, k] += shares[r, c, k]
        whole = 1.0 / (255.0 * fine * fine)
        for x in range(width):
            for k in range(kinds):
                means[x, k] *= whole
            if means[x, kinds - UNRESOLVED] > 0.0:
                found[0] = 1
            if means[x, kinds - VOID] > 0.0:
                found[1] = 1
            if means[x, kinds - OUTSIDE] > 0.0:
                found[2] = 1
        _ink(means, y, inks, ramp, least, rgb)
