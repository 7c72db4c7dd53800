"""Patches of cells of one state, and the rings along their edges, row by row.

A patch is a set of cells of one code that hang together by their edges (4-connected). Its rings
run along edges of cells with the patch on the left, rows counted downward, so on a north-up map
the outer ring runs anticlockwise and holes run clockwise. Where two cells of a patch touch at a
corner alone, the ring crosses over from one to the other: as the patch is joined elsewhere, the
two other cells at that corner are parted by it, and so no ring ever meets itself.

Rows come in strips, any number at a time, and of the rows before only the last one is kept, as
*runs*: cells of one state side by side. Run i of row r begins at column starts[k, i], holds
codes[k, i] and is called names[k, i], with k the parity of r; there are count[k] runs, and behind
the last one stands one more of code 0 that begins where the row ends. A code of 0 is in no patch.
Corner (r, c) is the top left one of a cell.
"""

from viewshed._jit import inline, kernel

NONE = -1


@inline
def find_runs(states, r, code_of, k, starts, codes):
    """Find the runs of row r of a strip; return how many."""
    cols = states.shape[1]
    n = 0
    c = 0
    while c < cols:
        state = states[r, c]
        starts[k, n] = c
        codes[k, n] = code_of[state]
        n += 1
        c += 1
        while c < cols and states[r, c] == state:
            c += 1
    starts[k, n] = cols
    codes[k, n] = 0
    return n


@inline
def root_of(parent, label):
    """Follow a label to the first one of its patch, shortening the way."""
    while parent[label] != label:
        parent[label] = parent[parent[label]]
        label = parent[label]
    return label


@kernel
def join(states, first, code_of, starts, codes, names, count, parent, n):
    """Label the runs of a strip that begins with row `first`; return the number of labels so far.

    A run that touches none of its code in the row above gets a new label; labels of one patch are
    joined in `parent`, which needs room for one label a cell of the strip.
    """
    for r in range(states.shape[0]):
        k = (first + r) % 2
        p = 1 - k
        count[k] = find_runs(states, r, code_of, k, starts, codes)
        j = 0
        for i in range(count[k]):
            code = codes[k, i]
            names[k, i] = NONE
            if code == 0:
                continue
            own = NONE
            while starts[p, j + 1] <= starts[k, i]:
                j += 1
            q = j
            while q < count[p] and starts[p, q] < starts[k, i + 1]:
                if codes[p, q] == code:
                    root = root_of(parent, names[p, q])
                    if own == NONE:
                        own = root
                    elif root < own:
                        parent[own] = root
                        own = root
                    elif own < root:
                        parent[root] = own
                q += 1
            if own == NONE:
                own = n
                parent[n] = n
                n += 1
            names[k, i] = own
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


@inline
def name_runs(k, starts, codes, names, count, name_of, n):
    """Name the runs of a row by the names of labels; return the number of labels so far.

    Labels are met in the same order as by `join`.
    """
    p = 1 - k
    j = 0
    for i in range(count[k]):
        code = codes[k, i]
        names[k, i] = NONE
        if code == 0:
            continue
        while starts[p, j + 1] <= starts[k, i]:
            j += 1
        q = j
        while q < count[p] and starts[p, q] < starts[k, i + 1] and codes[p, q] != code:
            q += 1
        if q < count[p] and starts[p, q] < starts[k, i + 1]:
            names[k, i] = names[p, q]
        else:
            names[k, i] = name_of[n]
            n += 1
    return n


@kernel
def measure(
    states, first, code_of, starts, codes, names, count, numbers, n,
    row_factors, col_sums, code_in, cells, area, corners,
):  # fmt: skip
    """Sum up the patches over the runs of a strip; return the number of labels so far.

    The area of a run from column a to b - 1 of row r is the sum over m of
    row_factors[r, m] * (col_sums[m, b] - col_sums[m, a]). `corners` counts those of the rings,
    in the line of corners above each row.
    """
    for r in range(states.shape[0]):
        k = (first + r) % 2
        count[k] = find_runs(states, r, code_of, k, starts, codes)
        n = name_runs(k, starts, codes, names, count, numbers, n)
        for i in range(count[k]):
            patch = names[k, i]
            if patch == NONE:
                continue
            code_in[patch] = codes[k, i]
            a, b = starts[k, i], starts[k, i + 1]
            cells[patch] += b - a
            for m in range(row_factors.shape[1]):
                area[patch] += row_factors[first + r, m] * (col_sums[m, b] - col_sums[m, a])
        count_corners(k, starts, names, count, corners)
    return n


@inline
def count_corners(k, starts, names, count, corners):
    """Count the corners of rings on the line above a row, by patch."""
    p = 1 - k
    i, j, c = 0, 0, 0
    nw, ne, sw, se = NONE, NONE, NONE, NONE
    names[k, count[k]] = NONE
    names[p, count[p]] = NONE
    end = starts[k, count[k]]
    while True:
        if starts[p, j] == c:
            ne = names[p, j]
            j += 1
        if starts[k, i] == c:
            se = names[k, i]
            i += 1
        if (nw != ne or sw != se) and (nw != sw or ne != se):
            if nw != NONE and (nw == ne) == (nw == sw) and (nw != ne or nw != se):
                corners[nw] += 1
            if ne != NONE and (ne == nw) == (ne == se) and (ne != nw or ne != sw):
                corners[ne] += 1
            if sw != NONE and (sw == nw) == (sw == se) and (sw != nw or sw != ne):
                corners[sw] += 1
            if se != NONE and (se == ne) == (se == sw) and (se != ne or se != nw):
                corners[se] += 1
        if c == end:
            return
        nw, sw = ne, se
        c = min(starts[p, j], starts[k, i])


@kernel
def trace(
    states, first, code_of, starts, codes, names, count, ranks, n,
    down, up, nodes, at, down_ranks,
):  # fmt: skip
    """Find the corners of rings on the line above each row of a strip; return labels so far.

    `ranks` is the rank of the patch of each label, NONE where it is not wanted. A node is a
    corner of a ring: its row, its column and the node that follows. Rings run both with the
    sweep and against it, so a node that comes first waits: down[c] and up[c] at the edge below
    that it leaves and that it is reached by. at[0] counts nodes, at[1] those that leave downward,
    of which `down_ranks` tells the rank of the patch.
    """
    for r in range(states.shape[0]):
        k = (first + r) % 2
        count[k] = find_runs(states, r, code_of, k, starts, codes)
        n = name_runs(k, starts, codes, names, count, ranks, n)
        trace_line(first + r, starts, names, count, down, up, nodes, at, down_ranks)
    return n


@inline
def trace_line(r, starts, names, count, down, up, nodes, at, down_ranks):
    """Find the corners of rings on the line above row r."""
    k = r % 2
    p = 1 - k
    i, j, c = 0, 0, 0
    nw, ne, sw, se = NONE, NONE, NONE, NONE
    names[k, count[k]] = NONE
    names[p, count[p]] = NONE
    end = starts[k, count[k]]
    right, left = NONE, NONE  # the node that left to the right, and the one reached from there
    while True:
        if starts[p, j] == c:
            ne = names[p, j]
            j += 1
        if starts[k, i] == c:
            se = names[k, i]
            i += 1
        if (nw != ne or sw != se) and (nw != sw or ne != se):
            from_left, to_left, from_above, to_above = NONE, NONE, NONE, NONE
            from_right, to_right, from_below, to_below = NONE, NONE, NONE, NONE
            node = at[0]
            if nw != NONE and nw != ne and nw != sw:
                from_left, to_above = node, node
                node += 1
            if se != NONE and se != ne and se != sw:
                from_right, to_below = node, node
                node += 1
                if se == nw:
                    to_above, to_below = to_below, to_above
            if ne != NONE and ne != nw and ne != se:
                from_above, to_right = node, node
                node += 1
            if sw != NONE and sw != nw and sw != se:
                from_below, to_left = node, node
                node += 1
                if sw == ne:
                    to_right, to_left = to_left, to_right
            if nw == ne and nw == sw and nw != NONE:
                from_below, to_right = node, node
                node += 1
            elif nw == ne and nw == se and nw != NONE:
                from_left, to_below = node, node
                node += 1
            elif nw == sw and nw == se and nw != NONE:
                from_right, to_above = node, node
                node += 1
            elif ne == sw and ne == se and ne != NONE:
                from_above, to_left = node, node
                node += 1
            for new in range(at[0], node):
                nodes[new, 0], nodes[new, 1] = r, c
            at[0] = node
            if from_above != NONE:
                nodes[down[c], 2] = from_above
            if to_above != NONE:
                nodes[to_above, 2] = up[c]
            if from_left != NONE:
                nodes[right, 2] = from_left
            if to_left != NONE:
                nodes[to_left, 2] = left
            if from_below != NONE:
                up[c] = from_below
            if to_right != NONE:
                right = to_right
            if from_right != NONE:
                left = from_right
            if to_below != NONE:
                down[c] = to_below
                down_ranks[at[1]] = se
                at[1] += 1
        if c == end:
            return
        nw, sw = ne, se
        c = min(starts[p, j], starts[k, i])


@kernel
def link(nodes, down_ranks, first, last, downs, rings, ring_first, ring_rank, ring_length):
    """Find the rings that begin at nodes first to last - 1; return downs and rings so far.

    A ring begins where it first leaves downward in the order of cells, so the first ring of a
    patch is its outer one. Nodes that are done have -1 - x for the node x that follows.
    """
    for begin in range(first, last):
        after = nodes[begin, 2]
        done = after < 0
        if done:
            after = -1 - after
        if nodes[after, 0] <= nodes[begin, 0]:
            continue
        rank = down_ranks[downs]
        downs += 1
        if done:
            continue
        node, length = begin, 0
        while nodes[node, 2] >= 0:
            after = nodes[node, 2]
            nodes[node, 2] = -1 - after
            node = after
            length += 1
        ring_first[rings], ring_rank[rings], ring_length[rings] = begin, rank, length
        rings += 1
    return downs, rings


@kernel
def fill(nodes, chosen, ring_first, ring_length, backward, row_col):
    """Write row and column of the corners of chosen rings, the first again at the end of each."""
    at = 0
    for ring in chosen:
        node, length = ring_first[ring], ring_length[ring]
        for step in range(length + 1):
            to = at + length - step if backward else at + step
            row_col[to, 0], row_col[to, 1] = nodes[node, 0], nodes[node, 1]
            node = -1 - nodes[node, 2]
        at += length + 1
