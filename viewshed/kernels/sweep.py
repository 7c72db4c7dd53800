"""The sweep: the exact horizon of one wedge of directions, line by line outward.

Everything here is in the frame of one octant around the observer: ``u`` grows along the main axis
(columns or rows), ``v`` along the other, and a sight line is ``v = t * u`` with t in [0, 1]. Posts
stand on lines j = 0, 1, 2 ... of constant main index (line 0 is at or just behind the observer)
and have the minor index i (i = 0 at or just below the observer). A post seen from the observer is
the point (t, g) = (v / u, f / u), f being its flat height. In that plane an edge between two posts
is a straight segment, because edge and observer span a plane f = A u + B v.

The horizon of all lines passed is kept in three parts:

* `env`: the upper envelope of the edges, an exact polyline: piece n runs from env[0, n] to
  env[0, n + 1] on the line A + B t with A = env[1, n], B = env[2, n].
* `arcs`: cells whose bilinear surface may rise above that polyline between its edges. Over the
  directions between two of its corners, the greatest g along the section of a cell is a convex
  function of t, so the chord bounds it from above; a cell is kept only where its chord is above
  the polyline and is evaluated exactly at the targets it may decide.
* `gaps`: disjoint open intervals of t whose sight lines have met something unknown.

All three are merged line by line, so a target costs the same wherever it stands.
"""

import numpy as np

from viewshed._jit import inline, kernel

BIG = 1e300

# Fields of the parameter vectors (module constants are frozen into the compiled code).
# ints
MAIN_IS_ROW, SIGN_MAIN, SIGN_MINOR, BASE_MAIN, BASE_MINOR, LAST_LINE = 0, 1, 2, 3, 4, 5
DEGREE, OWN_KNOWN, WANT_CLEARANCE, OWN_DIAGONAL, OWN_AXIS, HAS_BEARINGS, WIDE_BEARINGS = (
    6, 7, 8, 9, 10, 11, 12,
)  # fmt: skip
MARGIN = 13
N_INTS = 14
# floats
X0, Y0, SCALE, INV_R, Z_EYE, TARGET, RANGE2 = 0, 1, 2, 3, 4, 5, 6
D20, D11, D02, G20, G11, G02, EPS = 7, 8, 9, 10, 11, 12, 13
B_FROM_U, B_FROM_V, B_TO_U, B_TO_V = 14, 15, 16, 17
N_FLOATS = 18
# the observer's own cell: corner values [line, row] and their differences at the observer
O_U, O_V, O_F = 0, 4, 8
O_F0, O_FA, O_FB, O_FAB = 12, 13, 14, 15
O_UA, O_UB, O_UAB, O_VA, O_VB, O_VAB = 16, 17, 18, 19, 20, 21
O_X1, O_Y0, O_Y1 = 22, 23, 24
N_OWN = 25
# results of a sweep
DONE, FULL = 0, 1


@inline
def section_peak(u1, f1, u2, f2, kappa):
    """Greatest f/u strictly inside a section where f rises kappa*s*(1-s) above its chord."""
    du = u2 - u1
    if kappa <= 0.0 or du <= 0.0:
        return -BIG
    if u1 <= 0.0:  # the section starts at the eye
        if f1 >= 0.0:
            return (f2 - f1 + kappa) / du
    elif (f2 - f1 + kappa) * u1 <= f1 * du:
        return -BIG
    if (f2 - f1 - kappa) * u2 >= f2 * du:
        return -BIG
    turn = (u1 * f2 - u2 * f1) / kappa
    square = u1 * u2 + du * turn
    if square <= 0.0:
        return -BIG
    top = np.sqrt(square)
    s = (u1 + turn) / (top + u1)
    return (f1 + s * (f2 - f1) + kappa * s * (1.0 - s)) / top


@inline
def cell_section(c, t):
    """Where the sight line t enters and leaves a cell: u1, f1, u2, f2, kappa.

    `c` holds u, v, f of the corners (near line, low row), (near, high), (far, low), (far, high).
    """
    s00 = c[1] - t * c[0]
    s01 = c[4] - t * c[3]
    s10 = c[7] - t * c[6]
    s11 = c[10] - t * c[9]
    if s00 > 0.0:
        x1 = s00 / (s00 - s10) if s10 < s00 else 1.0
        y1 = 0.0
        u1 = c[0] + x1 * (c[6] - c[0])
        f1 = c[2] + x1 * (c[8] - c[2])
    elif s01 < 0.0:
        x1 = s01 / (s01 - s11) if s11 > s01 else 1.0
        y1 = 1.0
        u1 = c[3] + x1 * (c[9] - c[3])
        f1 = c[5] + x1 * (c[11] - c[5])
    else:
        x1 = 0.0
        y1 = -s00 / (s01 - s00) if s01 > s00 else 0.0
        u1 = c[0] + y1 * (c[3] - c[0])
        f1 = c[2] + y1 * (c[5] - c[2])
    if s10 > 0.0:
        x2 = s00 / (s00 - s10) if s10 > s00 else 1.0
        y2 = 0.0
        u2 = c[0] + x2 * (c[6] - c[0])
        f2 = c[2] + x2 * (c[8] - c[2])
    elif s11 < 0.0:
        x2 = s01 / (s01 - s11) if s11 < s01 else 1.0
        y2 = 1.0
        u2 = c[3] + x2 * (c[9] - c[3])
        f2 = c[5] + x2 * (c[11] - c[5])
    else:
        x2 = 1.0
        y2 = -s10 / (s11 - s10) if s11 > s10 else 0.0
        u2 = c[6] + y2 * (c[9] - c[6])
        f2 = c[8] + y2 * (c[11] - c[8])
    kappa = -(c[11] - c[8] - c[5] + c[2]) * (x2 - x1) * (y2 - y1)
    return u1, f1, u2, f2, kappa


@inline
def own_exit(own, t):
    """Where the sight line t leaves the observer's own cell: offsets x, y and u there.

    Worked from the differences at the observer, so that it stays sharp when the way out is a
    billionth of a cell.
    """
    x1 = own[O_X1]
    across = (own[O_VB] + own[O_VAB] * x1) - t * (own[O_UB] + own[O_UAB] * x1)
    x = x1
    y = x1 * (t * own[O_UA] - own[O_VA]) / across
    edge = own[O_Y1]
    if y > edge or y < own[O_Y0]:
        if y < own[O_Y0]:
            edge = own[O_Y0]
        along = t * (own[O_UA] + own[O_UAB] * edge) - (own[O_VA] + own[O_VAB] * edge)
        x = edge * (own[O_VB] - t * own[O_UB]) / along
        y = edge
    return x, y, own[O_UA] * x + own[O_UB] * y + own[O_UAB] * x * y


@inline
def own_peak(own, t):
    """Greatest f/u strictly inside the observer's own cell, from the eye to the way out."""
    x, y, u = own_exit(own, t)
    kappa = -own[O_FAB] * x * y
    f0 = own[O_F0]
    if kappa <= 0.0 or -f0 >= kappa or u <= 0.0:
        return -BIG
    fall = -f0 * kappa
    if fall < 0.0:
        fall = 0.0
    return (own[O_FA] * x + own[O_FB] * y - 2.0 * np.sqrt(fall)) / u


@inline
def arc_value(corners, own, t):
    """Exact greatest f/u inside the cell of an arc at t; corners[0] = -BIG: the own cell."""
    if corners[0] == -BIG:
        return own_peak(own, t)
    u1, f1, u2, f2, kappa = cell_section(corners, t)
    return section_peak(u1, f1, u2, f2, kappa)


@inline
def closed_value(corners, own, t):
    """As `arc_value`, the ends of the section included."""
    if corners[0] == -BIG:
        x, y, u = own_exit(own, t)
        g = -BIG
        if u > 0.0:
            g = own[O_F0] / u + (own[O_FA] * x + own[O_FB] * y + own[O_FAB] * x * y) / u
        return max(g, own_peak(own, t))
    u1, f1, u2, f2, kappa = cell_section(corners, t)
    g = section_peak(u1, f1, u2, f2, kappa)
    if u1 > 0.0:
        g = max(g, f1 / u1)
    if u2 > 0.0:
        g = max(g, f2 / u2)
    return g


@inline
def merge_edges(old, n_old, seg, n_seg, eps, new):
    """Write to `new` the upper envelope of `old` and of the sorted, disjoint segments.

    seg[0], seg[1]: start and end; seg[2], seg[3]: the line A + B t. Returns the number of pieces
    (0: `new` is too small) and the least value of the result.
    """
    room = new.shape[1] - 4
    n = 0
    k = 0
    m = 0
    low = BIG
    t = old[0, 0]
    end = old[0, n_old]
    last_a = BIG
    last_b = BIG
    while t < end:
        if n > room:
            return 0, low
        while k < n_old - 1 and old[0, k + 1] <= t:
            k += 1
        while m < n_seg and seg[1, m] <= t:
            m += 1
        stop = old[0, k + 1]
        a = old[1, k]
        b = old[2, k]
        cut = stop
        if m < n_seg:
            if seg[0, m] > t:
                stop = min(stop, seg[0, m])
                cut = stop
            else:
                stop = min(stop, seg[1, m])
                cut = stop
                sa = seg[2, m]
                sb = seg[3, m]
                d0 = (sa - a) + (sb - b) * t
                d1 = (sa - a) + (sb - b) * stop
                if d0 > eps:
                    if d1 < -eps:  # new first, then old
                        cut = t + (stop - t) * (d0 / (d0 - d1))
                        if t < cut < stop:
                            new[0, n] = t
                            new[1, n] = sa
                            new[2, n] = sb
                            if sa != last_a or sb != last_b:
                                n += 1
                                low = min(low, sa + sb * t)
                            low = min(low, sa + sb * cut)
                            last_a = sa
                            last_b = sb
                            t = cut
                    else:
                        a = sa
                        b = sb
                elif d1 > eps:
                    if d0 < -eps:  # old first, then new
                        cut = t + (stop - t) * (d0 / (d0 - d1))
                        if t < cut < stop:
                            new[0, n] = t
                            new[1, n] = a
                            new[2, n] = b
                            if a != last_a or b != last_b:
                                n += 1
                                low = min(low, a + b * t)
                            low = min(low, a + b * cut)
                            last_a = a
                            last_b = b
                            t = cut
                    a = sa
                    b = sb
        if a != last_a or b != last_b:
            new[0, n] = t
            new[1, n] = a
            new[2, n] = b
            n += 1
            last_a = a
            last_b = b
            low = min(low, a + b * t)
        low = min(low, a + b * stop)
        t = stop
    new[0, n] = end
    return n, low


@inline
def above(env, n_env, a, b, t0, t1, eps):
    """Hull of the part of [t0, t1] where the line a + b t is more than eps above the envelope."""
    lo = 0
    hi = n_env - 1
    while lo < hi:
        mid = (lo + hi + 1) >> 1
        if env[0, mid] <= t0:
            lo = mid
        else:
            hi = mid - 1
    first = BIG
    last = -BIG
    k = lo
    t = t0
    while t < t1 and k < n_env:
        stop = min(env[0, k + 1], t1)
        c = a - env[1, k]
        d = b - env[2, k]
        d0 = c + d * t
        d1 = c + d * stop
        if d0 > eps or d1 > eps:
            start = t
            finish = stop
            if d0 < 0.0:
                start = t + (stop - t) * (d0 / (d0 - d1))
            if d1 < 0.0:
                finish = t + (stop - t) * (d0 / (d0 - d1))
            if start < first:
                first = start
            last = finish
        t = stop
        k += 1
    return first, last


@inline
def add_gap(gaps, n_gaps, a, b):
    """Add the open interval (a, b) to the sorted disjoint list; returns its length, -1 if full."""
    lo = 0
    while lo < n_gaps and gaps[1, lo] <= a:
        lo += 1
    hi = lo
    while hi < n_gaps and gaps[0, hi] < b:
        a = min(a, gaps[0, hi])
        b = max(b, gaps[1, hi])
        hi += 1
    if hi == lo:
        if n_gaps >= gaps.shape[1]:
            return -1
        for k in range(n_gaps, lo, -1):
            gaps[0, k] = gaps[0, k - 1]
            gaps[1, k] = gaps[1, k - 1]
        n_gaps += 1
    elif hi > lo + 1:
        shift = hi - lo - 1
        for k in range(hi, n_gaps):
            gaps[0, k - shift] = gaps[0, k]
            gaps[1, k - shift] = gaps[1, k]
        n_gaps -= shift
    gaps[0, lo] = a
    gaps[1, lo] = b
    return n_gaps


@inline
def in_gap(gaps, n_gaps, t):
    """Whether t lies strictly inside one of the open intervals."""
    lo = 0
    hi = n_gaps
    while lo < hi:
        mid = (lo + hi) >> 1
        if gaps[1, mid] <= t:
            lo = mid + 1
        else:
            hi = mid
    return lo < n_gaps and gaps[0, lo] < t


@inline
def line_coefficients(coef, degree, x, out):
    """Coefficients in y of a polynomial sum coef[i, j] x**i y**j at one x."""
    for j in range(degree + 1):
        value = 0.0
        for i in range(degree - j, -1, -1):
            value = value * x + coef[i, j]
        out[j] = value


@inline
def fill_line(z, ints, geo, own, j, lo, hi, poly, line):
    """Fill line[:, n] = t, g, f, u, v, drop of the posts i = lo .. hi (f = NaN where unknown)."""
    main_is_row = ints[MAIN_IS_ROW]
    main = ints[BASE_MAIN] + ints[SIGN_MAIN] * j
    sign = ints[SIGN_MINOR]
    base = ints[BASE_MINOR]
    degree = ints[DEGREE]
    rows, cols = z.shape
    n_minor = cols if main_is_row else rows
    inside_main = 0 <= main < (rows if main_is_row else cols)
    u_line = geo[X0] + j
    ze = geo[Z_EYE]
    inv_r = geo[INV_R]
    d20 = geo[D20]
    d11 = geo[D11]
    d02 = geo[D02]
    for n in range(hi - lo + 1):
        i = lo + n
        v = geo[Y0] + i
        u = u_line
        if degree > 1:
            y = v / geo[SCALE]
            u = 0.0
            v = 0.0
            for k in range(degree, -1, -1):
                u = u * y + poly[0, k]
                v = v * y + poly[1, k]
        drop = d20 * u * u + d11 * u * v + d02 * v * v
        minor = base + sign * i
        f = np.nan
        if inside_main and 0 <= minor < n_minor:
            height = np.float64(z[main, minor]) if main_is_row else np.float64(z[minor, main])
            f = (height - ze) * (1.0 - height * inv_r) - drop
        line[2, n] = f
        line[3, n] = u
        line[4, n] = v
        line[5, n] = drop
    if j <= 1:  # the corners of the own cell, sharp however near the observer
        for i in range(2):
            n = i - lo
            if 0 <= n <= hi - lo:
                line[2, n] = own[O_F + 2 * j + i]
                line[3, n] = own[O_U + 2 * j + i]
                line[4, n] = own[O_V + 2 * j + i]
    for n in range(hi - lo + 1):
        u = line[3, n]
        v = line[4, n]
        if u > 0.0:
            line[0, n] = v / u
            g = line[2, n] / u
            line[1, n] = g if g == g else -BIG
        else:
            line[0, n] = BIG if v > 0.0 else -BIG
            line[1, n] = -BIG


@inline
def post_t(geo, degree, poly, j, i):
    """Direction t of post i of a line whose polynomial coefficients are in `poly`."""
    v = geo[Y0] + i
    u = geo[X0] + j
    if degree > 1:
        y = v / geo[SCALE]
        u = 0.0
        v = 0.0
        for k in range(degree, -1, -1):
            u = u * y + poly[0, k]
            v = v * y + poly[1, k]
    if u > 0.0:
        return v / u
    return BIG if v > 0.0 else -BIG


@inline
def edge_plane(line0, n0, line1, n1):
    """A and B of the plane f = A u + B v through the observer and two posts."""
    u0 = line0[3, n0]
    v0 = line0[4, n0]
    f0 = line0[2, n0]
    u1 = line1[3, n1]
    v1 = line1[4, n1]
    f1 = line1[2, n1]
    det = u0 * v1 - u1 * v0
    return (f0 * v1 - f1 * v0) / det, (u0 * f1 - u1 * f0) / det


@inline
def own_plane(own, far, edge):
    """A and B for an edge of the own cell: the far one (x = x1) or a side (y = edge)."""
    if far:
        x1 = own[O_X1]
        p11 = own[O_UA]
        p12 = own[O_VA]
        r1 = own[O_F0] / x1 + own[O_FA]
        p21 = own[O_UB] + own[O_UAB] * x1
        p22 = own[O_VB] + own[O_VAB] * x1
        r2 = own[O_FB] + own[O_FAB] * x1
    else:
        p11 = own[O_UA] + own[O_UAB] * edge
        p12 = own[O_VA] + own[O_VAB] * edge
        r1 = own[O_FA] + own[O_FAB] * edge
        p21 = own[O_UB]
        p22 = own[O_VB]
        r2 = own[O_F0] / edge + own[O_FB]
    det = p11 * p22 - p12 * p21
    return (r1 * p22 - r2 * p12) / det, (p11 * r2 - p21 * r1) / det


@inline
def load_corners(prev, lo_prev, line, lo, row, out):
    """Copy u, v, f of the four corners of cell `row` between two lines; False if one is void."""
    for k in range(2):
        a = row + k - lo_prev
        b = row + k - lo
        out[3 * k] = prev[3, a]
        out[3 * k + 1] = prev[4, a]
        out[3 * k + 2] = prev[2, a]
        out[6 + 3 * k] = line[3, b]
        out[6 + 3 * k + 1] = line[4, b]
        out[6 + 3 * k + 2] = line[2, b]
    total = out[2] + out[5] + out[8] + out[11]
    return total == total


@inline
def own_strip_horizon(prev, lo_prev, line, lo, j, i, t, own, own_known, corners):
    """Horizon that the last strip before a target puts in its own way.

    That is the bulge of the cell the sight line ends in and, where it crosses more than one cell
    of the strip, what it crosses before.
    """
    best = -BIG
    side = prev[4, i - lo_prev] - t * prev[3, i - lo_prev]
    step = -1 if side > 0.0 else 1
    if side == 0.0:
        return best
    row = i - 1 if side > 0.0 else i
    for _ in range(4):
        if row < lo_prev or row < lo:
            return best
        known = load_corners(prev, lo_prev, line, lo, row, corners)
        if j == 1 and row == 0:
            if own_known:
                best = max(best, own_peak(own, t))
            return best
        if known:
            u1, f1, u2, f2, kappa = cell_section(corners, t)
            best = max(best, section_peak(u1, f1, u2, f2, kappa))
        edge = row if step < 0 else row + 1
        near = prev[4, edge - lo_prev] - t * prev[3, edge - lo_prev]
        if (step < 0 and near <= 0.0) or (step > 0 and near >= 0.0):
            return best
        far = line[4, edge - lo] - t * line[3, edge - lo]
        if near != far:
            x = near / (near - far)
            u = prev[3, edge - lo_prev] + x * (line[3, edge - lo] - prev[3, edge - lo_prev])
            f = prev[2, edge - lo_prev] + x * (line[2, edge - lo] - prev[2, edge - lo_prev])
            if f == f and u > 0.0:
                best = max(best, f / u)
        row += step
    return best


@inline
def add_arcs(corners, is_own, ts, own, env, n_env, low, high, slack, eps, arcs, n_arcs):
    """Keep the parts of a cell whose chord stands above the envelope; -1 if there is no room.

    `ts`: the directions of the four corners, which are where the convex pieces of the cell meet.
    """
    for a in range(1, 4):  # sort four numbers
        value = ts[a]
        b = a
        while b > 0 and ts[b - 1] > value:
            ts[b] = ts[b - 1]
            b -= 1
        ts[b] = value
    t1 = min(max(ts[0], low), high)
    g1 = closed_value(corners, own, t1)
    for a in range(3):
        t0 = t1
        g0 = g1
        t1 = min(max(ts[a + 1], low), high)
        if t1 <= t0:
            continue
        g1 = closed_value(corners, own, t1)
        rise = (g1 - g0) / (t1 - t0)
        level = g0 - rise * t0 + slack
        first, last = above(env, n_env, level, rise, t0, t1, eps)
        if first < last:
            if n_arcs >= arcs.shape[0]:
                return -1
            arcs[n_arcs, 0] = first
            arcs[n_arcs, 1] = last
            arcs[n_arcs, 2] = level
            arcs[n_arcs, 3] = rise
            for k in range(12):
                arcs[n_arcs, 4 + k] = corners[k]
            if is_own:
                arcs[n_arcs, 4] = -BIG
            n_arcs += 1
    return n_arcs


@inline
def may_bulge(c, t_low, t_high):
    """False where g surely grows through the whole cell, so that it has no greatest inside."""
    along = min(c[8] - c[2], c[11] - c[5])
    across = min(c[5] - c[2], c[11] - c[8])
    rise = along + (across * t_low if across > 0.0 else across * t_high)
    top = max(max(c[2], c[5]), max(c[8], c[11]))
    reach = min(c[0], c[3]) if rise > 0.0 else max(c[6], c[9])
    # the margin covers cells that are not quite square in (u, v)
    return rise * reach - 0.02 * abs(rise * reach) < top + 0.02 * abs(top)


@kernel
def sweep(z, state, clearance, ints, geo, coef_u, coef_v, own, piece, work):
    """Answer every target of one wedge of an octant.

    Parameters
    ----------
    z : (rows, cols) float32
        Elevation [m], NaN where void.
    state : (rows, cols) uint8
        Written at the targets of this wedge.
    clearance : (rows, cols) float32
        Written likewise if ints[WANT_CLEARANCE], else unused.
    ints, geo, own : 1-D
        Parameters, see the field names at the top of this module.
    coef_u, coef_v : (n + 1, n + 1) float64
        u and v as polynomials of the index offsets from the observer, in this octant's frame.
    piece : (4,) float64
        Directions answered, from piece[0] up to but not at piece[1], and those swept, piece[2]
        to piece[3].
    work : tuple of arrays
        Scratch space: lines (2, 6, w), env (2, 3, e), seg (4, w), arcs (a, 16), gaps (2, b),
        horizon (4, w).

    Returns
    -------
    int
        DONE, or FULL if some scratch array is too small; nothing it wrote is wrong then.
    """
    lines, envs, seg, arcs, gaps, scratch = work
    degree = ints[DEGREE]
    own_known = ints[OWN_KNOWN] != 0
    want_clearance = ints[WANT_CLEARANCE] != 0
    curved = degree > 1
    eps = geo[EPS]
    low = piece[2]
    high = piece[3]
    width = lines.shape[2]
    main_is_row = ints[MAIN_IS_ROW]
    rows, cols = z.shape
    n_minor = cols if main_is_row else rows
    target = geo[TARGET]
    inv_r = geo[INV_R]
    ze = geo[Z_EYE]

    poly = np.empty((2, degree + 1))
    corners = np.empty(12)
    ts = np.empty(4)
    at = scratch[0]  # horizon at each post
    least = scratch[1]  # least envelope over each interval between posts
    wants = scratch[2]  # 1 where the post is an open question of this wedge
    target_f = scratch[3]

    which = 0
    env = envs[0]
    env[0, 0] = low
    env[0, 1] = high
    env[1, 0] = -BIG
    env[2, 0] = 0.0
    n_env = 1
    env_low = -BIG
    n_arcs = 0
    n_gaps = 0

    prev = lines[0]
    line = lines[1]
    lo_prev = -4
    hi_prev = 6
    if hi_prev - lo_prev + 1 > width:
        return FULL
    if curved:
        line_coefficients(coef_u, degree, geo[X0] / geo[SCALE], poly[0])
        line_coefficients(coef_v, degree, geo[X0] / geo[SCALE], poly[1])
    fill_line(z, ints, geo, own, 0, lo_prev, hi_prev, poly, prev)
    first_prev = 0
    last_prev = 2
    first = 0
    last = 1

    for j in range(1, ints[LAST_LINE] + 1):
        if curved:
            x = (geo[X0] + j) / geo[SCALE]
            line_coefficients(coef_u, degree, x, poly[0])
            line_coefficients(coef_v, degree, x, poly[1])
        # posts that straddle the wedge: t[first] <= low < ..., ... < high <= t[last]
        while post_t(geo, degree, poly, j, first) > low:
            first -= 1
        while post_t(geo, degree, poly, j, first + 1) <= low:
            first += 1
        if last <= first:
            last = first + 1
        while post_t(geo, degree, poly, j, last) < high:
            last += 1
        while last - 1 > first and post_t(geo, degree, poly, j, last - 1) >= high:
            last -= 1
        lo = min(first, first_prev) - 3
        hi = max(last, last_prev) + 3
        if hi - lo + 1 > width:
            return FULL
        # outside the grid for good?
        end_a = ints[BASE_MINOR] + ints[SIGN_MINOR] * lo
        end_b = ints[BASE_MINOR] + ints[SIGN_MINOR] * hi
        if max(end_a, end_b) < -ints[MARGIN] or min(end_a, end_b) >= n_minor + ints[MARGIN]:
            return DONE
        fill_line(z, ints, geo, own, j, lo, hi, poly, line)
        if j == 1:
            # Edges of the first strip begin behind the observer: ahead of it they come from
            # straight left or right, whichever side of the observer they pass.
            for i in range(max(lo, lo_prev), min(hi, hi_prev) + 1):
                a = i - lo_prev
                b = i - lo
                if prev[3, a] <= 0.0 and line[3, b] > 0.0:
                    passes = prev[4, a] * line[3, b] - line[4, b] * prev[3, a]
                    prev[0, a] = BIG if passes > 0.0 else -BIG
            if geo[Y0] == 0.0:
                prev[0, 0 - lo_prev] = line[0, 0 - lo]
            elif own_known:
                prev[0, 0 - lo_prev] = -BIG
                prev[0, 1 - lo_prev] = BIG

        # the unknown
        cell_lo = min(first, first_prev) - 1
        cell_hi = max(last, last_prev)
        total = 0.0
        top = -BIG
        for i in range(cell_lo, cell_hi + 2):
            total += line[2, i - lo] + prev[2, i - lo_prev]
            top = max(top, max(line[1, i - lo], prev[1, i - lo_prev]))
        has_void = total != total
        if has_void:
            run_a = BIG
            run_b = -BIG
            for i in range(cell_lo, cell_hi + 1):
                a = i - lo_prev
                b = i - lo
                some = prev[2, a] + prev[2, a + 1] + line[2, b] + line[2, b + 1]
                if some == some:
                    continue
                t0 = min(min(prev[0, a], prev[0, a + 1]), min(line[0, b], line[0, b + 1]))
                t1 = max(max(prev[0, a], prev[0, a + 1]), max(line[0, b], line[0, b + 1]))
                if j == 1 and i == 0:
                    t0 = line[0, b]
                    t1 = BIG
                if t1 <= low or t0 >= high:
                    continue
                if t0 < run_b:  # overlaps the run of cells before it
                    run_a = min(run_a, t0)
                    run_b = max(run_b, t1)
                else:
                    if run_a < run_b:
                        n_gaps = add_gap(gaps, n_gaps, run_a, run_b)
                        if n_gaps < 0:
                            return FULL
                    run_a = t0
                    run_b = t1
            if run_a < run_b:
                n_gaps = add_gap(gaps, n_gaps, run_a, run_b)
                if n_gaps < 0:
                    return FULL

        # the envelope at the posts and its least value between them
        k = 0
        for i in range(first, last + 1):
            n = i - lo
            t = min(max(line[0, n], low), high)
            while k < n_env - 1 and env[0, k + 1] <= t:
                k += 1
            value = env[1, k] + env[2, k] * t
            if k > 0 and env[0, k] == t:
                value = max(value, env[1, k - 1] + env[2, k - 1] * t)
            at[n] = value
            bottom = min(env[1, k] + env[2, k] * t, value)
            t_next = min(max(line[0, n + 1], low), high)
            m = k
            while m < n_env - 1 and env[0, m + 1] < t_next:
                edge = env[0, m + 1]
                bottom = min(bottom, env[1, m] + env[2, m] * edge)
                m += 1
                bottom = min(bottom, env[1, m] + env[2, m] * edge)
            least[n] = min(bottom, env[1, m] + env[2, m] * t_next)

        # which posts are questions of this wedge, and what their own strip says
        nearest = BIG
        a_main = geo[X0] + j
        for i in range(first, last + 1):
            n = i - lo
            wants[n] = 0.0
            u = line[3, n]
            v = line[4, n]
            dist2 = geo[G20] * u * u + geo[G11] * u * v + geo[G02] * v * v
            nearest = min(nearest, dist2)
            t = line[0, n]
            f = line[2, n]
            if not (f == f) or t < piece[0] or t >= piece[1] or dist2 > geo[RANGE2]:
                continue
            b_minor = geo[Y0] + i
            if b_minor < 0.0 or b_minor > a_main:
                continue
            if b_minor == a_main and not ints[OWN_DIAGONAL]:
                continue
            if b_minor == 0.0 and not ints[OWN_AXIS]:
                continue
            if ints[HAS_BEARINGS]:
                past_from = geo[B_FROM_U] * v - geo[B_FROM_V] * u >= -1e-12 * u
                before_to = u * geo[B_TO_V] - v * geo[B_TO_U] >= -1e-12 * u
                if ints[WIDE_BEARINGS]:
                    if not (past_from or before_to):
                        continue
                elif not (past_from and before_to):
                    continue
            minor = ints[BASE_MINOR] + ints[SIGN_MINOR] * i
            main = ints[BASE_MAIN] + ints[SIGN_MAIN] * j
            height = np.float64(z[main, minor]) if main_is_row else np.float64(z[minor, main])
            height += target
            ft = (height - ze) * (1.0 - height * inv_r) - line[5, n]
            target_f[n] = ft
            wants[n] = 1.0
            if not want_clearance and ft - at[n] * u < 0.0:
                continue
            a = i - lo_prev
            if j > 2:
                if not curved:  # the last cell alone, and only if it is concave along the line
                    twist = line[2, n] - line[2, n - 1] - prev[2, a] + prev[2, a - 1]
                    if twist >= 0.0:
                        continue
                highest = -BIG
                for m in range(-2, 3):
                    highest = max(highest, max(line[1, n + m], prev[1, a + m]))
                if highest <= at[n]:
                    continue
                if not want_clearance and ft - highest * u > 1e-9:
                    continue
            here = own_strip_horizon(prev, lo_prev, line, lo, j, i, t, own, own_known, corners)
            at[n] = max(at[n], here)

        # cells that may rise above the envelope
        for k in range(n_arcs):
            t0 = arcs[k, 0]
            t1 = arcs[k, 1]
            i = int(np.ceil(t0 * a_main - geo[Y0]))
            i = min(max(i, first), last)
            while i > first and line[0, i - 1 - lo] >= t0:
                i -= 1
            while i <= last and line[0, i - lo] < t0:
                i += 1
            while i <= last:
                n = i - lo
                t = line[0, n]
                if t > t1:
                    break
                if wants[n] != 0.0:
                    bound = arcs[k, 2] + arcs[k, 3] * t
                    if bound > at[n]:
                        u = line[3, n]
                        ft = target_f[n]
                        if want_clearance or (
                            ft - at[n] * u >= 0.0 and ft - bound * u < 1e-9
                        ):
                            at[n] = max(at[n], arc_value(arcs[k, 4:], own, t))
                i += 1

        # the answers
        main = ints[BASE_MAIN] + ints[SIGN_MAIN] * j
        for i in range(first, last + 1):
            n = i - lo
            if wants[n] == 0.0:
                continue
            minor = ints[BASE_MINOR] + ints[SIGN_MINOR] * i
            r = main if main_is_row else minor
            c = minor if main_is_row else main
            clear = target_f[n] - at[n] * line[3, n]
            answer = 0
            if clear >= 0.0:
                answer = 1
                if n_gaps > 0 and in_gap(gaps, n_gaps, line[0, n]):
                    answer = 2
            state[r, c] = answer
            if want_clearance:
                if answer == 2:
                    clearance[r, c] = np.nan
                elif at[n] <= -BIG:
                    clearance[r, c] = np.inf
                else:
                    clearance[r, c] = clear
        if nearest > geo[RANGE2]:
            return DONE

        # merge this strip
        if top > env_low or j <= 2:
            go_lo = cell_hi + 1
            go_hi = cell_lo - 1
            for i in range(cell_lo, cell_hi + 1):
                a = i - lo_prev
                b = i - lo
                highest = max(max(prev[1, a], prev[1, a + 1]), max(line[1, b], line[1, b + 1]))
                under = BIG
                for m in range(i - 1, i + 3):
                    under = min(under, least[min(max(m, first), last) - lo])
                if highest > under or j <= 2:
                    go_lo = min(go_lo, i)
                    go_hi = i
            if go_lo <= go_hi:
                # edges of this line
                n_seg = 0
                for i in range(go_lo, go_hi + 1):
                    b = i - lo
                    t0 = max(line[0, b], low)
                    t1 = min(line[0, b + 1], high)
                    if t1 <= t0:
                        continue
                    if j == 1 and i == 0 and own_known:
                        pa, pb = own_plane(own, True, 0.0)
                    else:
                        both = line[2, b] + line[2, b + 1]
                        if not (both == both):
                            continue
                        pa, pb = edge_plane(line, b, line, b + 1)
                    seg[0, n_seg] = t0
                    seg[1, n_seg] = t1
                    seg[2, n_seg] = pa
                    seg[3, n_seg] = pb
                    n_seg += 1
                if n_seg > 0:
                    n_env, env_low = merge_edges(env, n_env, seg, n_seg, eps, envs[1 - which])
                    if n_env == 0:
                        return FULL
                    which = 1 - which
                    env = envs[which]
                # edges between the last line and this, even and odd rows apart: neighbours may
                # overlap where the map bends
                for parity in range(2):
                    n_seg = 0
                    for i in range(go_lo + ((go_lo + parity) & 1), go_hi + 2, 2):
                        a = i - lo_prev
                        b = i - lo
                        t0 = max(min(line[0, b], prev[0, a]), low)
                        t1 = min(max(line[0, b], prev[0, a]), high)
                        if t1 <= t0:
                            continue
                        if j == 1 and own_known and (i == 1 or i == 0):
                            if i == 0 and geo[Y0] == 0.0:
                                continue  # the observer stands on it
                            pa, pb = own_plane(own, False, geo[Y0] + i)
                        else:
                            both = line[2, b] + prev[2, a]
                            if not (both == both):
                                continue
                            if j == 1 and prev[3, a] == 0.0 and prev[4, a] == 0.0:
                                continue  # it starts at the observer
                            pa, pb = edge_plane(prev, a, line, b)
                        if j > 2:
                            # under an edge of this line, or of the last, along its whole length?
                            m = b if line[0, b] <= prev[0, a] else b - 1
                            both = line[2, m] + line[2, m + 1]
                            if both == both and line[0, m] <= prev[0, a] <= line[0, m + 1]:
                                qa, qb = edge_plane(line, m, line, m + 1)
                                if qa + qb * prev[0, a] >= prev[1, a]:
                                    continue
                            m = a - 1 if line[0, b] <= prev[0, a] else a
                            both = prev[2, m] + prev[2, m + 1]
                            if both == both and prev[0, m] <= line[0, b] <= prev[0, m + 1]:
                                qa, qb = edge_plane(prev, m, prev, m + 1)
                                if qa + qb * line[0, b] >= line[1, b]:
                                    continue
                        seg[0, n_seg] = t0
                        seg[1, n_seg] = t1
                        seg[2, n_seg] = pa
                        seg[3, n_seg] = pb
                        n_seg += 1
                    if n_seg > 0:
                        n_env, env_low = merge_edges(env, n_env, seg, n_seg, eps, envs[1 - which])
                        if n_env == 0:
                            return FULL
                        which = 1 - which
                        env = envs[which]
                # bulges that are still above the envelope
                k = 0
                while k < n_arcs:
                    t0, t1 = above(
                        env, n_env, arcs[k, 2], arcs[k, 3], arcs[k, 0], arcs[k, 1], eps
                    )
                    if t0 < t1:
                        arcs[k, 0] = t0
                        arcs[k, 1] = t1
                        k += 1
                    else:
                        n_arcs -= 1
                        for m in range(16):
                            arcs[k, m] = arcs[n_arcs, m]
                # bulges of this strip
                for i in range(go_lo, go_hi + 1):
                    is_own = j == 1 and i == 0
                    if is_own and not own_known:
                        continue
                    if not load_corners(prev, lo_prev, line, lo, i, corners):
                        continue
                    twist = corners[11] - corners[8] - corners[5] + corners[2]
                    if twist == 0.0 or (twist > 0.0 and not curved):
                        continue
                    a = i - lo_prev
                    b = i - lo
                    ts[0] = prev[0, a]
                    ts[1] = prev[0, a + 1]
                    ts[2] = line[0, b]
                    ts[3] = line[0, b + 1]
                    t0 = max(min(min(ts[0], ts[1]), min(ts[2], ts[3])), low)
                    t1 = min(max(max(ts[0], ts[1]), max(ts[2], ts[3])), high)
                    if t1 <= t0 or (twist > 0.0 and t0 > 0.3):
                        continue
                    if j > 2 and not may_bulge(corners, t0, t1):
                        continue
                    if is_own:
                        ts[0] = low
                        ts[1] = high
                    slack = 1e-4 * abs(twist) / line[3, b] if curved else 0.0
                    n_arcs = add_arcs(
                        corners, is_own, ts, own, env, n_env, low, high, slack, eps, arcs, n_arcs
                    )
                    if n_arcs < 0:
                        return FULL

        prev, line = line, prev
        lo_prev = lo
        first_prev = first
        last_prev = last
    return DONE


@inline
def has_edge(z, r, c):
    """Whether a post has a known neighbour: alone among voids it is no edge and does not block."""
    rows, cols = z.shape
    if r > 0 and z[r - 1, c] == z[r - 1, c]:
        return True
    if r < rows - 1 and z[r + 1, c] == z[r + 1, c]:
        return True
    if c > 0 and z[r, c - 1] == z[r, c - 1]:
        return True
    return c < cols - 1 and z[r, c + 1] == z[r, c + 1]


@kernel
def axis(z, state, clearance, ints, geo, own):
    """Answer the targets straight along the main axis, on the observer's own row or column.

    Only for grids whose map is affine and an observer exactly on that row or column: there the
    sight line runs along edges and meets posts alone. Parameters as for `sweep`.
    """
    main_is_row = ints[MAIN_IS_ROW]
    rows, cols = z.shape
    minor = ints[BASE_MINOR]
    horizon = -BIG
    broken = False
    for j in range(1, ints[LAST_LINE] + 1):
        main = ints[BASE_MAIN] + ints[SIGN_MAIN] * j
        r = main if main_is_row else minor
        c = minor if main_is_row else main
        u = geo[X0] + j
        if geo[G20] * u * u > geo[RANGE2]:
            return
        height = np.float64(z[r, c])
        if not (height == height):
            broken = True
            continue
        drop = geo[D20] * u * u
        inside = True
        if ints[HAS_BEARINGS]:
            past_from = -geo[B_FROM_V] >= -1e-12
            before_to = geo[B_TO_V] >= -1e-12
            inside = (past_from or before_to) if ints[WIDE_BEARINGS] else past_from and before_to
        if inside:
            top = height + geo[TARGET]
            ft = (top - geo[Z_EYE]) * (1.0 - top * geo[INV_R]) - drop
            clear = ft - horizon * u
            answer = 0
            if clear >= 0.0:
                answer = 2 if broken else 1
            state[r, c] = answer
            if ints[WANT_CLEARANCE]:
                if answer == 2:
                    clearance[r, c] = np.nan
                elif horizon <= -BIG:
                    clearance[r, c] = np.inf
                else:
                    clearance[r, c] = clear
        if j == 1:
            horizon = own[O_F0] / u + own[O_FA]
        elif has_edge(z, r, c):
            f = (height - geo[Z_EYE]) * (1.0 - height * geo[INV_R]) - drop
            horizon = max(horizon, f / u)
