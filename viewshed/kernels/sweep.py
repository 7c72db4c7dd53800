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

All three are merged line by line, so a target costs the same wherever it stands. Targets stand on
the surface `z` itself or, with HAS_GROUND, on a ground of their own, under the surface or over it.
"""

import numpy as np

from viewshed._jit import inline, kernel

BIG = 1e300
#: Parts of a wedge that are looked at as a whole.
BLOCKS = 8
#: A mixed difference of four heights that is rounding and no bulge [m].
FLAT = 1e-11

# Fields of the parameter vectors (module constants are frozen into the compiled code).
# ints
MAIN_IS_ROW, SIGN_MAIN, SIGN_MINOR, BASE_MAIN, BASE_MINOR, LAST_LINE = 0, 1, 2, 3, 4, 5
DEGREE, OWN_KNOWN, WANT_CLEARANCE, OWN_DIAGONAL, OWN_AXIS, HAS_BEARINGS, WIDE_BEARINGS = (
    6, 7, 8, 9, 10, 11, 12,
)  # fmt: skip
MARGIN, HAS_GROUND = 13, 14
N_INTS = 15
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
def cell_section(c, k, t):
    """Where the sight line t enters and leaves a cell: u1, f1, u2, f2, kappa.

    c[k, 4:] holds u, v, f of the corners (near line, low row), (near, high), (far, low),
    (far, high).
    """
    u00, v00, f00 = c[k, 4], c[k, 5], c[k, 6]
    u01, v01, f01 = c[k, 7], c[k, 8], c[k, 9]
    u10, v10, f10 = c[k, 10], c[k, 11], c[k, 12]
    u11, v11, f11 = c[k, 13], c[k, 14], c[k, 15]
    s00 = v00 - t * u00
    s01 = v01 - t * u01
    s10 = v10 - t * u10
    s11 = v11 - t * u11
    if s00 > 0.0:
        x1 = s00 / (s00 - s10) if s10 < s00 else 1.0
        y1 = 0.0
        u1 = u00 + x1 * (u10 - u00)
        f1 = f00 + x1 * (f10 - f00)
    elif s01 < 0.0:
        x1 = s01 / (s01 - s11) if s11 > s01 else 1.0
        y1 = 1.0
        u1 = u01 + x1 * (u11 - u01)
        f1 = f01 + x1 * (f11 - f01)
    else:
        x1 = 0.0
        y1 = -s00 / (s01 - s00) if s01 > s00 else 0.0
        u1 = u00 + y1 * (u01 - u00)
        f1 = f00 + y1 * (f01 - f00)
    if s10 > 0.0:
        x2 = s00 / (s00 - s10) if s10 > s00 else 1.0
        y2 = 0.0
        u2 = u00 + x2 * (u10 - u00)
        f2 = f00 + x2 * (f10 - f00)
    elif s11 < 0.0:
        x2 = s01 / (s01 - s11) if s11 < s01 else 1.0
        y2 = 1.0
        u2 = u01 + x2 * (u11 - u01)
        f2 = f01 + x2 * (f11 - f01)
    else:
        x2 = 1.0
        y2 = -s10 / (s11 - s10) if s11 > s10 else 0.0
        u2 = u10 + y2 * (u11 - u10)
        f2 = f10 + y2 * (f11 - f10)
    kappa = -(f11 - f10 - f01 + f00) * (x2 - x1) * (y2 - y1)
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
    below = y < own[O_Y0] and own[O_Y0] < 0.0
    if y > edge or below:
        if below:
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
    if kappa <= FLAT or -f0 >= kappa or u <= 0.0:
        return -BIG
    fall = -f0 * kappa
    if fall < 0.0:
        fall = 0.0
    return (own[O_FA] * x + own[O_FB] * y - 2.0 * np.sqrt(fall)) / u


@inline
def arc_value(c, k, own, t):
    """Exact greatest f/u inside the cell at t; c[k, 4] = -BIG stands for the own cell."""
    if c[k, 4] == -BIG:
        return own_peak(own, t)
    u1, f1, u2, f2, kappa = cell_section(c, k, t)
    return section_peak(u1, f1, u2, f2, kappa)


@inline
def closed_value(c, k, own, t):
    """As `arc_value`, the ends of the section included."""
    if c[k, 4] == -BIG:
        x, y, u = own_exit(own, t)
        g = -BIG
        if u > 0.0:
            g = own[O_F0] / u + (own[O_FA] * x + own[O_FB] * y + own[O_FAB] * x * y) / u
        return max(g, own_peak(own, t))
    u1, f1, u2, f2, kappa = cell_section(c, k, t)
    g = section_peak(u1, f1, u2, f2, kappa)
    if u1 > 0.0:
        g = max(g, f1 / u1)
    if u2 > 0.0:
        g = max(g, f2 / u2)
    return g


@inline
def merge_line(old, n_old, first, count, t, g, plane_a, plane_b, least, most, high, eps, new):
    """Write to `new` the upper envelope of `old` and of the edges of one line of posts.

    Edge n runs from post n to n + 1 and is unknown where plane_a[n] is NaN; least[n] and most[n]
    bound `old` between these posts, so that most edges are taken or left as a whole. Returns the
    number of pieces (0: `new` is too small), a lower bound of the result, and whether it differs.
    """
    room = new.shape[1] - 4
    n = 0
    k = 0
    low = BIG
    start = old[0, 0]
    last_a = BIG
    last_b = BIG
    changed = False
    for i in range(first, first + count):
        stop = min(t[i + 1], high)
        if stop <= start:
            continue
        sa = plane_a[i]
        sb = plane_b[i]
        known = sa == sa
        g0 = g[i]
        g1 = g[i + 1]
        if known and min(g0, g1) >= most[i]:
            if n > room:
                return 0, low, True
            new[0, n] = start
            new[1, n] = sa
            new[2, n] = sb
            n += 1
            last_a = sa
            last_b = sb
            low = min(low, min(g0, g1))
            changed = True
            while k < n_old - 1 and old[0, k + 1] <= stop:
                k += 1
            start = stop
            continue
        mixed = known and max(g0, g1) > least[i]
        if not mixed:
            low = min(low, least[i])
        while start < stop:
            if n > room:
                return 0, low, True
            while k < n_old - 1 and old[0, k + 1] <= start:
                k += 1
            end = min(old[0, k + 1], stop)
            a = old[1, k]
            b = old[2, k]
            if mixed:
                d0 = (sa - a) + (sb - b) * start
                d1 = (sa - a) + (sb - b) * end
                if d0 > eps or d1 > eps:
                    changed = True
                    if d0 < -eps or d1 < -eps:
                        cut = start + (end - start) * (d0 / (d0 - d1))
                        if start < cut < end:
                            if d0 > 0.0:
                                ca = sa
                                cb = sb
                            else:
                                ca = a
                                cb = b
                                a = sa
                                b = sb
                            if ca != last_a or cb != last_b:
                                new[0, n] = start
                                new[1, n] = ca
                                new[2, n] = cb
                                n += 1
                                last_a = ca
                                last_b = cb
                            low = min(low, min(ca + cb * start, ca + cb * cut))
                            start = cut
                        elif d1 > d0:
                            a = sa
                            b = sb
                        else:
                            a = sa
                            b = sb
                    else:
                        a = sa
                        b = sb
                low = min(low, min(a + b * start, a + b * end))
            if a != last_a or b != last_b:
                new[0, n] = start
                new[1, n] = a
                new[2, n] = b
                n += 1
                last_a = a
                last_b = b
            start = end
    new[0, n] = old[0, n_old]
    return n, low, changed


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
def fetch(z, main_is_row, main, minor, sign, heights, n):
    """Copy n elevations of one line into heights, NaN outside the grid."""
    rows, cols = z.shape
    n_minor = cols if main_is_row else rows
    inside = 0 <= main < (rows if main_is_row else cols)
    start = 0
    stop = n
    if sign > 0:
        start = min(max(0, -minor), n)
        stop = max(min(n, n_minor - minor), start)
    else:
        start = min(max(0, minor - n_minor + 1), n)
        stop = max(min(n, minor + 1), start)
    if not inside:
        stop = start
    for m in range(start):
        heights[m] = np.nan
    for m in range(stop, n):
        heights[m] = np.nan
    if main_is_row:
        for m in range(start, stop):
            heights[m] = z[main, minor + sign * m]
    else:
        for m in range(start, stop):
            heights[m] = z[minor + sign * m, main]


@inline
def place(degree, y0, lo, u_line, scale, poly, u, v, n):
    """Fill the coordinates u, v of n posts of a line from row lo on."""
    if degree <= 1:
        for m in range(n):
            u[m] = u_line
        for m in range(n):
            v[m] = y0 + (lo + m)
        return
    for m in range(n):
        u[m] = poly[0, degree]
    for m in range(n):
        v[m] = poly[1, degree]
    turn = 1.0 / scale  # a power of two: the product is exact
    for k in range(degree - 1, -1, -1):
        pu = poly[0, k]
        pv = poly[1, k]
        for m in range(n):
            u[m] = u[m] * ((y0 + (lo + m)) * turn) + pu
        for m in range(n):
            v[m] = v[m] * ((y0 + (lo + m)) * turn) + pv


@inline
def flatten(heights, raise_by, geo, u, v, f, n):
    """Flat heights of n posts (of points `raise_by` above them)."""
    ze = geo[Z_EYE]
    inv_r = geo[INV_R]
    d20 = geo[D20]
    d11 = geo[D11]
    d02 = geo[D02]
    for m in range(n):
        h = heights[m] + raise_by
        drop = d20 * u[m] * u[m] + d11 * u[m] * v[m] + d02 * v[m] * v[m]
        f[m] = (h - ze) * (1.0 - h * inv_r) - drop


@inline
def directions(u, v, f, t, g, n):
    """Fill t = v / u and g = f / u, g = -BIG where unknown or not ahead."""
    for m in range(n):
        t[m] = v[m] / u[m] if u[m] > 0.0 else (BIG if v[m] > 0.0 else -BIG)
    for m in range(n):
        q = f[m] / u[m]
        g[m] = q if (u[m] > 0.0 and q == q) else -BIG


@inline
def greatest(g, lo, hi):
    """Greatest of g[lo:hi] (four chains, since one would wait on itself)."""
    a = -BIG
    b = -BIG
    c = -BIG
    d = -BIG
    m = lo
    while m + 3 < hi:
        a = g[m] if g[m] > a else a
        b = g[m + 1] if g[m + 1] > b else b
        c = g[m + 2] if g[m + 2] > c else c
        d = g[m + 3] if g[m + 3] > d else d
        m += 4
    while m < hi:
        a = g[m] if g[m] > a else a
        m += 1
    return max(max(a, b), max(c, d))


@inline
def edge_planes(u, v, f, plane_a, plane_b, n):
    """Planes f = A u + B v through the observer and each pair of neighbours of a line."""
    for m in range(n - 1):
        plane_a[m] = (f[m] * v[m + 1] - f[m + 1] * v[m]) / (u[m] * v[m + 1] - u[m + 1] * v[m])
    for m in range(n - 1):
        plane_b[m] = (u[m] * f[m + 1] - u[m + 1] * f[m]) / (u[m] * v[m + 1] - u[m + 1] * v[m])


@inline
def load_corners(pu, pv, pf, a, u, v, f, b, out, k):
    """Copy u, v, f of the corners of a cell between two lines; False if one is void.

    Posts a, a + 1 of the line before and b, b + 1 of this line.
    """
    for m in range(2):
        out[k, 4 + 3 * m] = pu[a + m]
        out[k, 5 + 3 * m] = pv[a + m]
        out[k, 6 + 3 * m] = pf[a + m]
        out[k, 10 + 3 * m] = u[b + m]
        out[k, 11 + 3 * m] = v[b + m]
        out[k, 12 + 3 * m] = f[b + m]
    total = pf[a] + pf[a + 1] + f[b] + f[b + 1]
    return total == total


@inline
def own_strip_horizon(pu, pv, pf, a, u, v, f, b, j, i, t, own, own_known, cell):
    """Horizon that the last strip before a target puts in its own way.

    That is the bulge of the cell the sight line ends in and, where it crosses more than one cell
    of the strip, what it crosses before. The target is post b of this line, post a stands on the
    same row of the line before.
    """
    best = -BIG
    side = pv[a] - t * pu[a]
    if side == 0.0:
        return best
    step = -1 if side > 0.0 else 1
    row = i - 1 if side > 0.0 else i
    for _ in range(3):
        at_a = a + row - i
        at_b = b + row - i
        known = load_corners(pu, pv, pf, at_a, u, v, f, at_b, cell, 0)
        if j == 1 and row == 0:
            if own_known:
                best = max(best, own_peak(own, t))
            return best
        if known:
            u1, f1, u2, f2, kappa = cell_section(cell, 0, t)
            best = max(best, section_peak(u1, f1, u2, f2, kappa))
        if step > 0:
            at_a += 1
            at_b += 1
        near = pv[at_a] - t * pu[at_a]
        if near == 0.0:  # through a post: its edge outward blocks with this end
            ff = pf[at_a] + f[at_b]
            if ff == ff and pu[at_a] > 0.0:
                best = max(best, pf[at_a] / pu[at_a])
            return best
        if (step < 0 and near <= 0.0) or (step > 0 and near >= 0.0):
            return best
        far = v[at_b] - t * u[at_b]
        if near != far:
            x = near / (near - far)
            uu = pu[at_a] + x * (u[at_b] - pu[at_a])
            ff = pf[at_a] + x * (f[at_b] - pf[at_a])
            if ff == ff and uu > 0.0:
                best = max(best, ff / uu)
        row += step
    return best


@inline
def add_arcs(cell, is_own, ts, gs, own, env, n_env, low, high, slack, eps, arcs, n_arcs):
    """Keep the parts of a cell whose chord stands above the envelope; -1 if there is no room.

    ts, gs: t and g of the four corners, which are where the convex pieces of the cell meet.
    """
    for a in range(1, 4):  # sort four corners
        value = ts[a]
        other = gs[a]
        b = a
        while b > 0 and ts[b - 1] > value:
            ts[b] = ts[b - 1]
            gs[b] = gs[b - 1]
            b -= 1
        ts[b] = value
        gs[b] = other
    t1 = min(max(ts[0], low), high)
    g1 = gs[0]
    if is_own or t1 != ts[0] or ts[1] == ts[0]:  # not at one corner alone
        g1 = closed_value(cell, 0, own, t1)
    for a in range(3):
        t0 = t1
        g0 = g1
        t1 = min(max(ts[a + 1], low), high)
        if t1 <= t0:
            continue
        g1 = gs[3]
        if is_own or a < 2 or t1 != ts[3] or ts[2] == ts[3]:
            g1 = closed_value(cell, 0, own, t1)
        rise = (g1 - g0) / (t1 - t0)
        level = g0 - rise * t0 + slack
        if min(g0, g1) <= -BIG:  # no bound to be had: always look
            rise = 0.0
            level = BIG
        first, last = above(env, n_env, level, rise, t0, t1, eps)
        if first < last:
            if n_arcs >= arcs.shape[0]:
                return -1
            arcs[n_arcs, 0] = first
            arcs[n_arcs, 1] = last
            arcs[n_arcs, 2] = level
            arcs[n_arcs, 3] = rise
            for k in range(4, 16):
                arcs[n_arcs, k] = cell[0, k]
            n_arcs += 1
    return n_arcs


@inline
def climbs(f00, f01, f10, f11, near, far, t_low, t_high):
    """Whether g surely grows all through a cell, so that it has no greatest inside.

    f: corners (near line, low row), (near, high), (far, low), (far, high); near, far: least u of
    the near line and greatest of the far one.
    """
    along = min(f10 - f00, f11 - f01)
    across = min(f01 - f00, f11 - f10)
    rise = along + (across * t_low if across > 0.0 else across * t_high)
    top = max(max(f00, f01), max(f10, f11))
    reach = rise * (near if rise > 0.0 else far)
    # the margin covers cells that are not quite square in (u, v)
    return reach - 0.02 * abs(reach) >= top + 0.02 * abs(top)


@inline
def add_strip_gaps(pt, pf, t, f, shift, from_a, to_a, j, lo_prev, low, high, gaps, n_gaps):
    """Add the directions of the unknown cells of a strip to the gaps; -1 if there is no room.

    Cells from_a .. to_a (counted on the line before; post a is post a + shift of this line).
    """
    run_a = BIG
    run_b = -BIG
    for a in range(from_a, to_a + 1):
        b = a + shift
        some = pf[a] + pf[a + 1] + f[b] + f[b + 1]
        if some == some:
            continue
        t0 = min(min(pt[a], pt[a + 1]), min(t[b], t[b + 1]))
        t1 = max(max(pt[a], pt[a + 1]), max(t[b], t[b + 1]))
        if j == 1 and lo_prev + a == 0:
            t0 = t[b]
            t1 = BIG
        if t1 <= low or t0 >= high:
            continue
        # overlaps the run of cells before it, or meets it at a void post
        if t0 < run_b or (t0 == run_b and (pf[a] != pf[a] or f[b] != f[b])):
            run_a = min(run_a, t0)
            run_b = max(run_b, t1)
        else:
            if run_a < run_b:
                n_gaps = add_gap(gaps, n_gaps, run_a, run_b)
                if n_gaps < 0:
                    return -1
            run_a = t0
            run_b = t1
    if run_a < run_b:
        n_gaps = add_gap(gaps, n_gaps, run_a, run_b)
    return n_gaps


@inline
def survey_line(env, n_env, first, count, t, low, high, at, least, most):
    """Envelope at each post of a line, and its least and greatest between neighbours."""
    k = 0
    for n in range(first, first + count + 1):
        here = min(max(t[n], low), high)
        while k < n_env - 1 and env[0, k + 1] <= here:
            k += 1
        a = env[1, k]
        b = env[2, k]
        value = a + b * here
        bottom = value
        peak = value
        if k > 0 and env[0, k] == here:
            value = max(value, env[1, k - 1] + env[2, k - 1] * here)
        at[n] = value
        if n == first + count:
            return
        there = min(max(t[n + 1], low), high)
        while k < n_env - 1 and env[0, k + 1] < there:
            edge = env[0, k + 1]
            w = a + b * edge
            bottom = min(bottom, w)
            peak = max(peak, w)
            k += 1
            a = env[1, k]
            b = env[2, k]
            w = a + b * edge
            bottom = min(bottom, w)
            peak = max(peak, w)
        w = a + b * there
        least[n] = min(bottom, w)
        most[n] = max(peak, w)


@inline
def block_floors(env, n_env, low, high, floors):
    """Least value of the envelope over each of equal parts of the wedge."""
    k = 0
    step = (high - low) / BLOCKS
    for b in range(BLOCKS):
        t0 = low + step * b
        t1 = low + step * (b + 1) if b < BLOCKS - 1 else high
        while k > 0 and env[0, k] > t0:
            k -= 1
        while k < n_env - 1 and env[0, k + 1] <= t0:
            k += 1
        bottom = env[1, k] + env[2, k] * t0
        while True:
            bottom = min(bottom, env[1, k] + env[2, k] * max(env[0, k], t0))
            bottom = min(bottom, env[1, k] + env[2, k] * min(env[0, k + 1], t1))
            if k == n_env - 1 or env[0, k + 1] >= t1:
                break
            k += 1
        floors[b] = bottom


@inline
def loud_posts(
    t, g, goal_g, pg, shift, n_prev, n_first, n_last, lo, u_line, y0, low, high, floors, least, most
):
    """Find the posts of a line between which something may be seen or rise: first and last.

    Part by part of the wedge, the line and the one before it are held against the least of the
    envelope there; `least` and `most` are bounded where nothing rises.
    """
    from_n = n_last + 1
    to_n = n_first - 1
    n_a = n_first
    step = (high - low) / BLOCKS
    for b in range(BLOCKS):
        n_b = n_last
        if b < BLOCKS - 1:
            edge = low + step * (b + 1)
            n_b = min(max(int(edge * u_line - y0) + 1 - lo, n_a), n_last)
            while n_b > n_a and t[n_b - 1] >= edge:
                n_b -= 1
            while n_b < n_last and t[n_b] < edge:
                n_b += 1
        # a cell reaches no farther than three posts along its line, also where the map bends
        peak = greatest(g, max(n_a - 3, 0), n_b + 4)
        peak = max(peak, greatest(goal_g, max(n_a - 3, 0), n_b + 4))
        peak = max(peak, greatest(pg, max(n_a - 3 - shift, 0), min(n_b + 4 - shift, n_prev)))
        bottom = floors[b]
        if peak + 1e-12 >= bottom:
            from_n = min(from_n, max(n_a - 3, n_first))
            to_n = max(to_n, min(n_b + 3, n_last))
        for n in range(n_a, n_b):
            least[n] = bottom
            most[n] = BIG
        if b > 0 and n_a > n_first:
            least[n_a - 1] = min(least[n_a - 1], bottom)
        n_a = n_b
    return from_n, to_n


@inline
def rising(pg, a, g, b, least, n_first, n_last):
    """Whether a cell (posts a, a + 1 before, b, b + 1 here) may rise above the envelope."""
    highest = max(max(pg[a], pg[a + 1]), max(g[b], g[b + 1]))
    under = BIG
    for m in range(b - 1, b + 3):
        under = min(under, least[min(max(m, n_first), n_last - 1)])
    return highest > under


@inline
def owned(ints, geo, piece, j, i, t):
    """Whether a post belongs to this wedge: each post of the grid belongs to exactly one."""
    if t < piece[0] or t >= piece[1]:
        return False
    along = geo[X0] + j
    across = geo[Y0] + i
    if across < 0.0 or across > along:
        return False
    if across == along and ints[OWN_DIAGONAL] == 0:
        return False
    return across != 0.0 or ints[OWN_AXIS] != 0


@inline
def distance2(geo, u, v):
    """Squared ground distance [m2]."""
    return geo[G20] * u * u + geo[G11] * u * v + geo[G02] * v * v


@inline
def asked(ints, geo, u, v):
    """Whether a post is within range and bearings."""
    if distance2(geo, u, v) > geo[RANGE2]:
        return False
    if ints[HAS_BEARINGS]:
        past_from = geo[B_FROM_U] * v - geo[B_FROM_V] * u >= -1e-12 * u
        before_to = u * geo[B_TO_V] - v * geo[B_TO_U] >= -1e-12 * u
        if ints[WIDE_BEARINGS]:
            return past_from or before_to
        return past_from and before_to
    return True


@inline
def own_plane(own, far, edge):
    """Give A and B of an edge of the own cell: the far one (x = x1) or a side (y = edge)."""
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
def load_line(z, ints, geo, own, j, lo, n, poly, heights, line):
    """Fill t, g, f, u, v of the n posts of line j from row lo on."""
    t, g, f, u, v = line[0], line[1], line[2], line[3], line[4]
    sign = ints[SIGN_MINOR]
    main = ints[BASE_MAIN] + ints[SIGN_MAIN] * j
    fetch(z, ints[MAIN_IS_ROW] != 0, main, ints[BASE_MINOR] + sign * lo, sign, heights, n)
    place(ints[DEGREE], geo[Y0], lo, geo[X0] + j, geo[SCALE], poly, u, v, n)
    flatten(heights, 0.0, geo, u, v, f, n)
    if j <= 1:  # the corners of the own cell, sharp however near the observer
        for i in range(2):
            if 0 <= i - lo < n:
                f[i - lo] = own[O_F + 2 * j + i]
                u[i - lo] = own[O_U + 2 * j + i]
                v[i - lo] = own[O_V + 2 * j + i]
    directions(u, v, f, t, g, n)


@inline
def stand_on_own_cell(z, ints, geo, f, heights, lo, n, goal):
    """Work targets at the corners of the own cell from the sharp f of the surface there.

    Else a target at the surface itself could lie a rounding error below it.
    """
    for i in range(2):
        m = i - lo
        if 0 <= m < n and f[m] == f[m]:
            main = ints[BASE_MAIN] + ints[SIGN_MAIN]
            minor = ints[BASE_MINOR] + ints[SIGN_MINOR] * i
            h = np.float64(z[main, minor] if ints[MAIN_IS_ROW] != 0 else z[minor, main])
            top = heights[m] + geo[TARGET]
            goal[m] = f[m] + (top - h) * (1.0 - (top + h - geo[Z_EYE]) * geo[INV_R])


@inline
def open_first_strip(geo, own_known, before, lo_prev, n_prev, here, lo, n):
    """Set the directions of line 0 as seen ahead of the observer.

    Edges of the first strip begin behind the observer: ahead of it they come from straight left
    or right, whichever side of the observer they pass.
    """
    pt, pu, pv = before[0], before[3], before[4]
    t, u, v = here[0], here[3], here[4]
    for i in range(max(lo, lo_prev), min(lo + n, lo_prev + n_prev)):
        a = i - lo_prev
        b = i - lo
        if pu[a] <= 0.0 and u[b] > 0.0:
            passes = pv[a] * u[b] - v[b] * pu[a]
            pt[a] = BIG if passes > 0.0 else -BIG
    if geo[Y0] == 0.0:
        pt[0 - lo_prev] = t[0 - lo]
    elif own_known:
        pt[0 - lo_prev] = -BIG
        pt[1 - lo_prev] = BIG


@inline
def answer(
    state, clearance, ints, geo, own, before, here, goal, at, wants, j, lo, shift, w_lo, w_hi,
    plain, main, minor, arcs, n_arcs, gaps, n_gaps, cell,
):  # fmt: skip
    """Answer the posts w_lo .. w_hi of a line, the envelope at them being known."""
    curved = ints[DEGREE] > 1
    own_known = ints[OWN_KNOWN] != 0
    want_clearance = ints[WANT_CLEARANCE] != 0
    on_ground = ints[HAS_GROUND] != 0
    main_is_row = ints[MAIN_IS_ROW] != 0
    sign = ints[SIGN_MINOR]
    u_line = geo[X0] + j
    pg, pf, pu, pv = before[1], before[2], before[3], before[4]
    t, g, f, u, v = here[0], here[1], here[2], here[3], here[4]
    # the questions, and what their own strip says
    for n in range(w_lo, w_hi + 1):
        wants[n] = 0.0
        if not (goal[n] == goal[n] and (plain or asked(ints, geo, u[n], v[n]))):
            continue
        wants[n] = 1.0
        if on_ground and not want_clearance and f[n] > goal[n]:
            continue
        if not want_clearance and goal[n] - at[n] * u[n] < 0.0:
            continue
        a = n - shift
        if j > 2:
            if curved:
                highest = -BIG
                for m in range(-2, 3):
                    highest = max(highest, max(g[n + m], pg[a + m]))
            else:
                twist = f[n] - f[n - 1] - pf[a] + pf[a - 1]
                if twist >= -FLAT:
                    continue  # the last cell is not concave along the sight line
                if twist == twist and climbs(
                    pf[a - 1], pf[a], f[n - 1], f[n], pu[a], u[n], t[n], t[n]
                ):
                    continue
                highest = max(max(g[n - 1], g[n]), max(pg[a - 1], pg[a]))
            if highest <= at[n]:
                continue
            if not want_clearance and goal[n] - highest * u[n] > 1e-9:
                continue
        strip = own_strip_horizon(
            pu, pv, pf, a, u, v, f, n, j, lo + n, t[n], own, own_known, cell
        )
        at[n] = max(at[n], strip)
    # cells that may rise above the envelope
    for k in range(n_arcs):
        t0 = arcs[k, 0]
        t1 = arcs[k, 1]
        n = int(t0 * u_line - geo[Y0]) + 1 - lo
        n = min(max(n, w_lo), w_hi)
        while n > w_lo and t[n - 1] >= t0:
            n -= 1
        while n <= w_hi and t[n] < t0:
            n += 1
        while n <= w_hi and t[n] <= t1:
            bound = arcs[k, 2] + arcs[k, 3] * t[n]
            is_open = want_clearance or (
                goal[n] - at[n] * u[n] >= 0.0 and goal[n] - bound * u[n] < 1e-9
            )
            if wants[n] != 0.0 and bound > at[n] and is_open:
                at[n] = max(at[n], arc_value(arcs, k, own, t[n]))
            n += 1
    # the answers
    for n in range(w_lo, w_hi + 1):
        if wants[n] == 0.0:
            continue
        k = minor + sign * n
        r = main if main_is_row else k
        c = k if main_is_row else main
        clear = goal[n] - at[n] * u[n]
        if on_ground and f[n] == f[n]:
            clear = min(clear, goal[n] - f[n])  # the surface at the target's own post
        answer = 0
        if clear >= 0.0:
            answer = 1
            if n_gaps > 0 and in_gap(gaps, n_gaps, t[n]):
                answer = 2
        state[r, c] = answer
        if want_clearance:
            if answer == 2:
                clearance[r, c] = np.nan
            elif clear >= BIG:
                clearance[r, c] = np.inf
            else:
                clearance[r, c] = clear


@inline
def add_cross_edges(
    ints, geo, own, before, here, j, lo, lo_prev, go_lo, go_hi, low, high, envs, which, n_env,
    env_low, seg,
):  # fmt: skip
    """Merge the edges between two lines; returns pieces (0: no room), envelope and least value."""
    curved = ints[DEGREE] > 1
    own_known = ints[OWN_KNOWN] != 0
    eps = geo[EPS]
    pt, pf, pu, pv, pa, pb = before[0], before[2], before[3], before[4], before[5], before[6]
    t, f, u, v, ea, eb = here[0], here[2], here[3], here[4], here[5], here[6]
    # Edges between the last line and this, even and odd rows apart: neighbours may
    # overlap where the map bends.
    bent = curved or j <= 2
    step = 2 if bent else 1
    for parity in range(step):
        n_seg = 0
        start = go_lo + ((go_lo + parity) & 1) if bent else go_lo
        for i in range(start, go_hi + 2, step):
            a = i - lo_prev
            b = i - lo
            t0 = max(min(t[b], pt[a]), low)
            t1 = min(max(t[b], pt[a]), high)
            both = f[b] + pf[a]
            if t1 <= t0 or not (both == both):
                continue
            if j == 1 and own_known and (i == 1 or i == 0):
                if i == 0 and geo[Y0] == 0.0:
                    continue  # the observer stands on it
                sa, sb = own_plane(own, False, geo[Y0] + i)
            elif j == 1 and pu[a] == 0.0 and pv[a] == 0.0:
                continue  # it starts at the observer
            else:
                if j > 2:
                    # under an edge of this line or of the last, all along?
                    m = b if t[b] <= pt[a] else b - 1
                    if pf[a] <= ea[m] * pu[a] + eb[m] * pv[a] and (
                        not curved or t[m] <= pt[a] <= t[m + 1]
                    ):
                        continue
                    m = a - 1 if t[b] <= pt[a] else a
                    if f[b] <= pa[m] * u[b] + pb[m] * v[b] and (
                        not curved or pt[m] <= t[b] <= pt[m + 1]
                    ):
                        continue
                det = pu[a] * v[b] - u[b] * pv[a]
                sa = (pf[a] * v[b] - f[b] * pv[a]) / det
                sb = (pu[a] * f[b] - u[b] * pf[a]) / det
                if not (sa - sa == 0.0):
                    continue  # seen end on
            q0, q1 = above(envs[which], n_env, sa, sb, t0, t1, eps)
            if q0 < q1:
                seg[0, n_seg] = t0
                seg[1, n_seg] = t1
                seg[2, n_seg] = sa
                seg[3, n_seg] = sb
                n_seg += 1
        if n_seg > 0:
            n_env, env_low = merge_edges(envs[which], n_env, seg, n_seg, eps, envs[1 - which])
            if n_env == 0:
                return 0, which, env_low
            which = 1 - which
    return n_env, which, env_low


@inline
def drop_arcs(env, n_env, eps, arcs, n_arcs):
    """Keep what still stands above the envelope; returns how many."""
    k = 0
    while k < n_arcs:
        t0, t1 = above(env, n_env, arcs[k, 2], arcs[k, 3], arcs[k, 0], arcs[k, 1], eps)
        if t0 < t1:
            arcs[k, 0] = t0
            arcs[k, 1] = t1
            k += 1
        else:
            n_arcs -= 1
            for m in range(16):
                arcs[k, m] = arcs[n_arcs, m]
    return n_arcs


@inline
def add_strip_arcs(
    ints, geo, own, before, here, j, lo, lo_prev, go_lo, go_hi, low, high, env, n_env, arcs,
    n_arcs, cell, ts, gs,
):  # fmt: skip
    """Add the cells of a strip that bulge above the envelope; -1 if there is no room."""
    curved = ints[DEGREE] > 1
    own_known = ints[OWN_KNOWN] != 0
    eps = geo[EPS]
    pt, pg, pf, pu, pv = before[0], before[1], before[2], before[3], before[4]
    t, g, f, u, v = here[0], here[1], here[2], here[3], here[4]
    for i in range(go_lo, go_hi + 1):
        a = i - lo_prev
        b = i - lo
        twist = f[b + 1] - f[b] - pf[a + 1] + pf[a]
        if not (twist < -FLAT or (twist > FLAT and curved)):
            continue  # nowhere concave along a sight line, or unknown
        is_own = j == 1 and i == 0
        if is_own and not own_known:
            continue
        ts[0] = pt[a]
        ts[1] = pt[a + 1]
        ts[2] = t[b]
        ts[3] = t[b + 1]
        t0 = max(min(min(ts[0], ts[1]), min(ts[2], ts[3])), low)
        t1 = min(max(max(ts[0], ts[1]), max(ts[2], ts[3])), high)
        if t1 <= t0 or (twist > 0.0 and t0 > 0.3):
            continue
        if j > 2 and climbs(
            pf[a], pf[a + 1], f[b], f[b + 1], min(pu[a], pu[a + 1]),
            max(u[b], u[b + 1]), t0, t1,
        ):  # fmt: skip
            continue
        load_corners(pu, pv, pf, a, u, v, f, b, cell, 0)
        gs[0] = pg[a]
        gs[1] = pg[a + 1]
        gs[2] = g[b]
        gs[3] = g[b + 1]
        if j > 2:
            highest = max(max(gs[0], gs[1]), max(gs[2], gs[3]))
            q0, q1 = above(env, n_env, highest, 0.0, t0, t1, eps)
            if q0 >= q1:
                continue
        if is_own:
            cell[0, 4] = -BIG
            ts[0] = low if geo[Y0] < 0.0 else t[b]
            ts[1] = high
        slack = 0.0
        if curved:  # a cell that is no parallelogram is convex only so far
            uneven = abs(u[b + 1] - u[b] - pu[a + 1] + pu[a])
            uneven += abs(v[b + 1] - v[b] - pv[a + 1] + pv[a])
            tall = max(max(abs(f[b]), abs(f[b + 1])), max(abs(pf[a]), abs(pf[a + 1])))
            slack = (8.0 * uneven * tall + 1e-6 * abs(twist)) / u[b]
        n_arcs = add_arcs(
            cell, is_own, ts, gs, own, env, n_env, low, high, slack, eps, arcs, n_arcs
        )
        if n_arcs < 0:
            return -1
    return n_arcs


@kernel
def sweep(z, ground, state, clearance, ints, geo, coef_u, coef_v, own, piece, work):
    """Answer every target of one wedge of an octant.

    Parameters
    ----------
    z : (rows, cols) float32
        Elevation of the surface [m], NaN where void.
    ground : (rows, cols) float32
        What targets stand on if ints[HAS_GROUND], else unused.
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
        Scratch space: lines (2, 7, w), post (7, w), env (2, 3, e), seg (4, w), arcs (a, 16),
        gaps (2, b), poly (2, n + 1), cell (1, 16), corner (3, 8).

    Returns
    -------
    int
        DONE, or FULL if some scratch array is too small; nothing it wrote is wrong then.
    """
    lines, post, envs, seg, arcs, gaps, poly, cell, corner = work
    degree = ints[DEGREE]
    curved = degree > 1
    own_known = ints[OWN_KNOWN] != 0
    want_clearance = ints[WANT_CLEARANCE] != 0
    on_ground = ints[HAS_GROUND] != 0
    main_is_row = ints[MAIN_IS_ROW] != 0
    sign = ints[SIGN_MINOR]
    eps = geo[EPS]
    target = geo[TARGET]
    low = piece[2]
    high = piece[3]
    width = lines.shape[2]
    rows, cols = z.shape
    n_minor = cols if main_is_row else rows

    ts = corner[0]
    gs = corner[1]
    floors = corner[2]
    for k in range(BLOCKS):
        floors[k] = -BIG
    heights, at, least, most, wants = post[0], post[1], post[2], post[3], post[4]

    # Posts farther than this outside the grid end the wedge. The map of posts means nothing there,
    # and where it turns back a search would not end.
    farthest_low = -ints[BASE_MINOR] - ints[MARGIN] - 8
    farthest_high = n_minor - ints[BASE_MINOR] + ints[MARGIN] + 8
    if sign < 0:
        farthest_low = ints[BASE_MINOR] - n_minor - ints[MARGIN] - 8
        farthest_high = ints[BASE_MINOR] + ints[MARGIN] + 8

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

    # line 0, at or just behind the observer
    lo_prev = -4
    n_prev = 11
    if n_prev > width:
        return FULL
    x = geo[X0] / geo[SCALE]
    if curved:
        line_coefficients(coef_u, degree, x, poly[0])
        line_coefficients(coef_v, degree, x, poly[1])
    before = lines[0]
    load_line(z, ints, geo, own, 0, lo_prev, n_prev, poly, heights, before)
    planes_prev = False
    void_prev = True
    stale = False
    stale_floors = False
    rest = 0
    top_prev = BIG
    first_prev = 0
    last_prev = 2
    first = 0
    last = 1

    for j in range(1, ints[LAST_LINE] + 1):
        u_line = geo[X0] + j
        if curved:
            x = u_line / geo[SCALE]
            line_coefficients(coef_u, degree, x, poly[0])
            line_coefficients(coef_v, degree, x, poly[1])
        # posts that straddle the wedge: t[first] <= low < ..., ... < high <= t[last]
        while first > farthest_low and post_t(geo, degree, poly, j, first) > low:
            first -= 1
        while first < farthest_high and post_t(geo, degree, poly, j, first + 1) <= low:
            first += 1
        if last <= first:
            last = first + 1
        while last <= farthest_high and post_t(geo, degree, poly, j, last) < high:
            last += 1
        while last - 1 > first and post_t(geo, degree, poly, j, last - 1) >= high:
            last -= 1
        lo = min(first, first_prev) - 3
        count = max(last, last_prev) + 4 - lo
        if count > width:
            return FULL
        main = ints[BASE_MAIN] + ints[SIGN_MAIN] * j
        minor = ints[BASE_MINOR] + sign * lo
        # outside the grid for good?
        beyond = minor + sign * (count - 1)
        if max(minor, beyond) < -ints[MARGIN] or min(minor, beyond) >= n_minor + ints[MARGIN]:
            return DONE

        before = lines[(j - 1) & 1]
        here = lines[j & 1]
        pt, pg, pf, pu, pv, pa, pb = (
            before[0], before[1], before[2], before[3], before[4], before[5], before[6],
        )  # fmt: skip
        t, g, f, u, v, ea, eb = here[0], here[1], here[2], here[3], here[4], here[5], here[6]
        load_line(z, ints, geo, own, j, lo, count, poly, heights, here)
        if j == 1:
            open_first_strip(geo, own_known, before, lo_prev, n_prev, here, lo, count)

        n_first = first - lo
        n_last = last - lo
        cell_lo = min(first, first_prev) - 1
        cell_hi = max(last, last_prev)
        shift = lo_prev - lo  # post a of the line before stands on the row of post a + shift
        top = greatest(g, cell_lo - lo, cell_hi + 2 - lo)
        unknown = 0
        for n in range(cell_lo - lo, cell_hi + 2 - lo):
            unknown |= f[n] != f[n]
        void = unknown != 0
        if void or void_prev:
            n_gaps = add_strip_gaps(
                pt, pf, t, f, shift, cell_lo - lo_prev, cell_hi - lo_prev, j, lo_prev, low, high,
                gaps, n_gaps,
            )  # fmt: skip
            if n_gaps < 0:
                return FULL

        # targets
        nearest = -BIG
        for n in (n_first, n_last):
            nearest = max(nearest, distance2(geo, u[n], v[n]))
        if nearest > geo[RANGE2]:
            for n in range(n_first, n_last + 1):
                nearest = min(nearest, distance2(geo, u[n], v[n]))
            if nearest > geo[RANGE2]:
                return DONE
        w_lo = n_first
        w_hi = n_last
        while w_lo <= w_hi and not owned(ints, geo, piece, j, lo + w_lo, t[w_lo]):
            w_lo += 1
        while w_hi >= w_lo and not owned(ints, geo, piece, j, lo + w_hi, t[w_hi]):
            w_hi -= 1
        # distance along a line has no greatest between its ends
        plain = ints[HAS_BEARINGS] == 0 and w_lo <= w_hi and (
            asked(ints, geo, u[w_lo], v[w_lo]) and asked(ints, geo, u[w_hi], v[w_hi])
        )
        goal = f
        goal_g = g
        top_goal = top
        if target != 0.0 or on_ground:
            goal = post[5]
            goal_g = post[6]
            if on_ground:
                fetch(ground, main_is_row, main, minor, sign, heights, count)
            flatten(heights, target, geo, u, v, goal, count)
            if on_ground and j == 1:
                stand_on_own_cell(z, ints, geo, f, heights, lo, count, goal)
            for n in range(count):
                goal_g[n] = goal[n] / u[n]
            top_goal = max(top, greatest(goal_g, w_lo, w_hi + 1))

        hidden = top_goal + 1e-12 < env_low and not want_clearance
        rises = max(top, top_prev) > env_low
        h_lo = n_first
        h_hi = n_last
        if not want_clearance and j > 2 and n_last - n_first >= 3 * BLOCKS and (
            rises or not hidden
        ):
            if rest > 0:
                rest -= 1
            else:
                if stale_floors:
                    block_floors(env, n_env, low, high, floors)
                    stale_floors = False
                h_lo, h_hi = loud_posts(
                    t, g, goal_g, pg, shift, n_prev, n_first, n_last, lo, u_line, geo[Y0], low,
                    high, floors, least, most,
                )  # fmt: skip
                hidden = hidden or h_lo > h_hi
                rises = rises and h_lo <= h_hi
                if h_lo <= n_first and h_hi >= n_last:
                    rest = 3  # nothing is quiet here, nor likely on the next lines
        if rises or not hidden:
            survey_line(env, n_env, h_lo, h_hi - h_lo, t, low, high, at, least, most)
        r_lo = h_lo
        if hidden:
            h_lo = w_hi + 1
        for n in range(w_lo, w_hi + 1):
            if h_lo <= n <= h_hi:
                continue
            if goal[n] == goal[n] and (plain or asked(ints, geo, u[n], v[n])):
                k = minor + sign * n
                if main_is_row:
                    state[main, k] = 0
                else:
                    state[k, main] = 0
        if not hidden:
            answer(
                state, clearance, ints, geo, own, before, here, goal, at, wants, j, lo, shift,
                max(w_lo, h_lo), min(w_hi, h_hi), plain, main, minor, arcs, n_arcs, gaps, n_gaps,
                cell,
            )  # fmt: skip

        # merge this strip
        planes = False
        if rises:
            go_lo = cell_lo if r_lo == n_first else lo + r_lo
            go_hi = cell_hi if h_hi == n_last else lo + h_hi
            if j > 2:
                while go_lo <= go_hi and not rising(
                    pg, go_lo - lo_prev, g, go_lo - lo, least, n_first, n_last
                ):
                    go_lo += 1
                while go_hi > go_lo and not rising(
                    pg, go_hi - lo_prev, g, go_hi - lo, least, n_first, n_last
                ):
                    go_hi -= 1
            if go_lo <= go_hi:
                if not planes_prev:
                    edge_planes(pu, pv, pf, pa, pb, n_prev)
                edge_planes(u, v, f, ea, eb, count)
                planes = True
                if j <= 2:  # close to the observer g of the posts is no bound
                    for n in range(n_first, n_last):
                        least[n] = -2.0 * BIG
                        most[n] = 2.0 * BIG
                        if g[n] == -BIG or g[n + 1] == -BIG:
                            least[n] = -2.0 * BIG
                    if j == 1 and own_known and 0 <= 0 - lo < count:
                        ea[0 - lo], eb[0 - lo] = own_plane(own, True, 0.0)
                spare = envs[1 - which]
                n_new, low_new, changed = merge_line(
                    env, n_env, n_first, n_last - n_first, t, g, ea, eb, least, most, high, eps,
                    spare,
                )  # fmt: skip
                if n_new == 0:
                    return FULL
                env_low = low_new
                if changed:
                    n_env = n_new
                    which = 1 - which
                    env = spare
                now = which
                n_env, which, env_low = add_cross_edges(
                    ints, geo, own, before, here, j, lo, lo_prev, go_lo, go_hi, low, high, envs,
                    which, n_env, env_low, seg,
                )  # fmt: skip
                if n_env == 0:
                    return FULL
                changed = changed or which != now
                env = envs[which]
                # bulges that are still above the envelope: looked after now and then, since one
                # kept too long costs time but no exactness
                stale = stale or changed
                if stale and ((j & 3) == 0 or n_arcs > 2 * (n_last - n_first)):
                    n_arcs = drop_arcs(env, n_env, eps, arcs, n_arcs)
                    stale = False
                stale_floors = stale_floors or changed
                n_arcs = add_strip_arcs(
                    ints, geo, own, before, here, j, lo, lo_prev, go_lo, go_hi, low, high, env,
                    n_env, arcs, n_arcs, cell, ts, gs,
                )  # fmt: skip
                if n_arcs < 0:
                    return FULL

        lo_prev = lo
        n_prev = count
        first_prev = first
        last_prev = last
        top_prev = top if j > 2 else BIG
        void_prev = void
        planes_prev = planes
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
def axis(z, ground, state, clearance, ints, geo, coef_u, own):
    """Answer the targets straight along the main axis, on the observer's own row or column.

    Only where the map leaves that row or column straight and the observer stands exactly on it:
    there the sight line runs along edges and meets posts alone. Parameters as for `sweep`.
    """
    main_is_row = ints[MAIN_IS_ROW]
    on_ground = ints[HAS_GROUND] != 0
    minor = ints[BASE_MINOR]
    horizon = -BIG
    broken = False
    for j in range(1, ints[LAST_LINE] + 1):
        main = ints[BASE_MAIN] + ints[SIGN_MAIN] * j
        r = main if main_is_row else minor
        c = minor if main_is_row else main
        u = geo[X0] + j
        if ints[DEGREE] > 1:
            x = u / geo[SCALE]
            u = 0.0
            for k in range(ints[DEGREE], -1, -1):
                u = u * x + coef_u[k, 0]
        if geo[G20] * u * u > geo[RANGE2]:
            return
        height = np.float64(z[r, c])
        foot = np.float64(ground[r, c]) if on_ground else height
        known = height == height
        broken = broken or not known
        drop = geo[D20] * u * u
        f = (height - geo[Z_EYE]) * (1.0 - height * geo[INV_R]) - drop
        inside = True
        if ints[HAS_BEARINGS]:
            past_from = -geo[B_FROM_V] >= -1e-12
            before_to = geo[B_TO_V] >= -1e-12
            inside = (past_from or before_to) if ints[WIDE_BEARINGS] else past_from and before_to
        if inside and foot == foot:
            top = foot + geo[TARGET]
            ft = (top - geo[Z_EYE]) * (1.0 - top * geo[INV_R]) - drop
            clear = ft - horizon * u
            if on_ground and known:
                clear = min(clear, ft - f)  # the surface at the target's own post
            answer = 0
            if clear >= 0.0:
                answer = 2 if broken else 1
            state[r, c] = answer
            if ints[WANT_CLEARANCE]:
                if answer == 2:
                    clearance[r, c] = np.nan
                elif clear >= BIG:
                    clearance[r, c] = np.inf
                else:
                    clearance[r, c] = clear
        if not known:
            continue
        if j == 1:
            horizon = own[O_F0] / u + own[O_FA] * (own[O_X1] / u)
        elif has_edge(z, r, c):
            horizon = max(horizon, f / u)
