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

All three are merged line by line, so a target costs the same wherever it stands. A line is first
bounded in stretches: what is surely hidden and raises nothing is never worked out. Targets stand on
the surface `z` itself or, with HAS_GROUND, on a ground of their own, under the surface or over it.
"""

import numpy as np

from viewshed._jit import exact_max, inline, kernel

BIG = 1e300
#: A clearance this great says that nothing stands between; geo[SPARE] is written in its place.
NO_HORIZON = 1e200
#: A post this much under the horizon is hidden and raises nothing, whatever the rounding [m].
NEAR = 1e-7
#: Why a post is looked at: a cell or edge that it belongs to may rise above the horizon, its target
#: may, the cell between it and the next post may.
RISES, ASKS, BULGES = 1, 2, 4
#: Parts of a wedge that are looked at as a whole.
PARTS = 8
#: Posts in between that are looked at with those around them, since each run has a cost of its own.
QUIET_POSTS = 8
#: Posts that loops take at a time: a number known beforehand makes them whole vectors.
CHUNK = 16
#: Windows over which the greatest height is kept: of 2, 4, ... posts.
WINDOWS = 5
#: Lower than any post [m].
LOWEST = np.float32(-3e38)
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
SPARE = 18
N_FLOATS = 19
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
    """Write to `new` the upper envelope of `old` and of some edges of one line of posts.

    Edge n, first <= n < first + count, runs from post n to n + 1 and is unknown where plane_a[n] is
    NaN; least[n] and most[n] bound `old` between these posts, so that most edges are taken or left
    as a whole. Returns the number of pieces (0: `new` is too small), how many edges were taken as
    a whole, and whether the result differs.
    """
    room = new.shape[1] - 4
    if n_old > room:
        return 0, 0, False
    n = 0
    k = 0
    taken = 0
    changed = False
    last_a = BIG
    last_b = BIG
    start = max(t[first], old[0, 0])
    # what lies before the edges stays
    while k < n_old - 1 and old[0, k + 1] <= start:
        k += 1
    for n in range(k + 1):
        new[0, n] = old[0, n]
        new[1, n] = old[1, n]
        new[2, n] = old[2, n]
    n = k
    if old[0, k] < start:
        n += 1
        last_a = old[1, k]
        last_b = old[2, k]
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
                return 0, 0, False
            new[0, n] = start
            new[1, n] = sa
            new[2, n] = sb
            n += 1
            last_a = sa
            last_b = sb
            taken += 1
            changed = True
            while k < n_old - 1 and old[0, k + 1] <= stop:
                k += 1
            start = stop
            continue
        mixed = known and max(g0, g1) > least[i]
        while start < stop:
            if n > room:
                return 0, 0, False
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
                            start = cut
                        else:
                            a = sa
                            b = sb
                    else:
                        a = sa
                        b = sb
            if a != last_a or b != last_b:
                new[0, n] = start
                new[1, n] = a
                new[2, n] = b
                n += 1
                last_a = a
                last_b = b
            start = end
    # and so does what lies behind them
    if start < old[0, n_old]:
        while k < n_old - 1 and old[0, k + 1] <= start:
            k += 1
        if n + n_old - k > room:
            return 0, 0, False
        if old[1, k] != last_a or old[2, k] != last_b:
            new[0, n] = start
            new[1, n] = old[1, k]
            new[2, n] = old[2, k]
            n += 1
        for m in range(k + 1, n_old):
            new[0, n] = old[0, m]
            new[1, n] = old[1, m]
            new[2, n] = old[2, m]
            n += 1
    new[0, n] = old[0, n_old]
    return n, taken, changed


@inline
def merge_edges(old, n_old, seg, n_seg, eps, new):
    """Write to `new` the upper envelope of `old` and of the sorted, disjoint segments.

    seg[0], seg[1]: start and end; seg[2], seg[3]: the line A + B t. Returns the number of pieces
    (0: `new` is too small).
    """
    room = new.shape[1] - 4
    n = 0
    k = 0
    m = 0
    t = old[0, 0]
    end = old[0, n_old]
    last_a = BIG
    last_b = BIG
    while t < end:
        if n > room:
            return 0
        while k < n_old - 1 and old[0, k + 1] <= t:
            k += 1
        while m < n_seg and seg[1, m] <= t:
            m += 1
        stop = old[0, k + 1]
        a = old[1, k]
        b = old[2, k]
        if m < n_seg:
            if seg[0, m] > t:
                stop = min(stop, seg[0, m])
            else:
                stop = min(stop, seg[1, m])
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
        t = stop
    new[0, n] = end
    return n


@inline
def piece_at(env, n_env, t):
    """Give the number of the piece of the envelope at t, the right one of two that meet there."""
    lo = 0
    hi = n_env - 1
    while lo < hi:
        mid = (lo + hi + 1) >> 1
        if env[0, mid] <= t:
            lo = mid
        else:
            hi = mid - 1
    return lo


@inline
def above(env, n_env, a, b, t0, t1, eps):
    """Hull of the part of [t0, t1] where the line a + b t is more than eps above the envelope."""
    first = BIG
    last = -BIG
    k = piece_at(env, n_env, t0)
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
def post_uv(geo, degree, poly, j, i):
    """Coordinates u, v of post i of a line whose polynomial coefficients are in `poly`."""
    v = geo[Y0] + i
    u = geo[X0] + j
    if degree > 1:
        y = v / geo[SCALE]
        u = 0.0
        v = 0.0
        for k in range(degree, -1, -1):
            u = u * y + poly[0, k]
            v = v * y + poly[1, k]
    return u, v


@inline
def post_t(geo, degree, poly, j, i):
    """Direction t of post i of a line."""
    u, v = post_uv(geo, degree, poly, j, i)
    if u > 0.0:
        return v / u
    return BIG if v > 0.0 else -BIG


@inline
def fetch(z, main_is_row, main, minor, sign, raw, n):
    """Copy n elevations of one line, NaN outside the grid."""
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
        raw[m] = np.nan
    for m in range(stop, n):
        raw[m] = np.nan
    if main_is_row:
        if sign > 0:
            for m in range(start, stop):
                raw[m] = z[main, minor + m]
        else:
            for m in range(start, stop):
                raw[m] = z[main, minor - m]
    else:
        for m in range(start, stop):
            raw[m] = z[minor + sign * m, main]


@inline
def place(degree, y0, lo, u_line, scale, poly, u, v, first, last):
    """Fill the coordinates u, v of posts first .. last - 1 of a line whose post 0 is in row lo."""
    if degree <= 1:
        for m in range(first, last):
            u[m] = u_line
        for m in range(first, last):
            v[m] = y0 + (lo + m)
        return
    for m in range(first, last):
        u[m] = poly[0, degree]
    for m in range(first, last):
        v[m] = poly[1, degree]
    turn = 1.0 / scale  # a power of two: the product is exact
    for k in range(degree - 1, -1, -1):
        pu = poly[0, k]
        pv = poly[1, k]
        for m in range(first, last):
            u[m] = u[m] * ((y0 + (lo + m)) * turn) + pu
        for m in range(first, last):
            v[m] = v[m] * ((y0 + (lo + m)) * turn) + pv


@inline
def flatten(raw, raise_by, geo, u, v, f, first, last):
    """Flat heights of posts first .. last - 1 (of points `raise_by` above them)."""
    ze = geo[Z_EYE]
    inv_r = geo[INV_R]
    d20 = geo[D20]
    d11 = geo[D11]
    d02 = geo[D02]
    for m in range(first, last):
        h = np.float64(raw[m]) + raise_by
        drop = d20 * u[m] * u[m] + d11 * u[m] * v[m] + d02 * v[m] * v[m]
        f[m] = (h - ze) * (1.0 - h * inv_r) - drop


@inline
def directions(line, first, last):
    """Fill t = v / u and g = f / u of posts first .. last - 1, g = -BIG where unknown or behind."""
    t, g, f, u, v = line[0], line[1], line[2], line[3], line[4]
    for m in range(first, last):
        t[m] = v[m] / u[m] if u[m] > 0.0 else (BIG if v[m] > 0.0 else -BIG)
    for m in range(first, last):
        q = f[m] / u[m]
        g[m] = q if (u[m] > 0.0 and q == q) else -BIG


@inline
def edge_planes(line, span, first, last):
    """Planes f = A u + B v through the observer and posts n, n + 1 of a line, first <= n < last."""
    if span[2] <= first and last <= span[3]:
        return
    span[2] = first
    span[3] = last
    last = whole(first, last)
    f, u, v, plane_a, plane_b = line[2], line[3], line[4], line[5], line[6]
    for m in range(first, last):
        plane_a[m] = (f[m] * v[m + 1] - f[m + 1] * v[m]) / (u[m] * v[m + 1] - u[m + 1] * v[m])
    for m in range(first, last):
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
def survey_line(env, n_env, first, last, t, low, high, at, least, most):
    """Envelope at some posts of a line, and its least and greatest between neighbours."""
    k = piece_at(env, n_env, min(max(t[first], low), high))
    for n in range(first, last + 1):
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
        if n == last:
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
    step = (high - low) / PARTS
    for b in range(PARTS):
        t0 = low + step * b
        t1 = low + step * (b + 1) if b < PARTS - 1 else high
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


@exact_max
def windows(raw, n, highest):
    """Fill the greatest of 2, 4, 8, 16 and 32 numbers from each of n on, none of them NaN."""
    most = n + 2 * CHUNK
    wider = highest[0]
    for m in range(most):
        wider[m] = raw[m] if raw[m] > raw[m + 1] else raw[m + 1]
    reach = 2
    for k in range(1, WINDOWS):
        narrow = highest[k - 1]
        wider = highest[k]
        most -= reach
        for m in range(most):
            a = narrow[m]
            b = narrow[m + reach]
            wider[m] = a if a > b else b
        reach *= 2


@inline
def highest_of(highest, first, last):
    """Greatest of numbers first .. last, at least two, from their windows."""
    k = 0
    reach = 2
    while k < WINDOWS - 1 and 2 * reach <= last + 1 - first:
        k += 1
        reach *= 2
    top = highest[k, last + 1 - reach]
    for n in range(first, last + 1 - reach, reach):
        top = max(top, highest[k, n])
    return np.float64(top)


@inline
def unknown_posts(raw, first, last):
    """Count the posts first .. last - 1 that are void."""
    unknown = 0
    for m in range(first, last):
        unknown += raw[m] != raw[m]
    return unknown


@inline
def fill_voids(raw, n, clean):
    """Copy a line with something low in the place of what is not known."""
    for m in range(n):
        clean[m] = raw[m] if raw[m] == raw[m] else LOWEST


@inline
def part_ends(geo, degree, poly, j, lo, low, high, n_first, n_last, count, parts, ends):
    """Fill the first and last posts of each part of a wedge; False if the line is too uneven.

    With the posts of cells that may reach into the part: a cell reaches no farther than three
    posts along its line, also where the map bends.
    """
    u0, v0 = post_uv(geo, degree, poly, j, lo + n_first)
    u1, v1 = post_uv(geo, degree, poly, j, lo + n_last)
    ends[0, 0] = max(n_first - 3, 0)
    ends[parts - 1, 1] = min(n_last + 3, count - 1)
    least = min(u0, u1)
    if least <= 0.0 or abs(u1 - u0) > 0.05 * least:
        return False
    if parts > 1:
        t0 = v0 / u0
        rate = (n_last - n_first) / (v1 / u1 - t0)
        step = (high - low) / parts
        for b in range(1, parts):
            n = min(max(n_first + int((low + step * b - t0) * rate), n_first), n_last)
            ends[b - 1, 1] = min(n + 4, count - 1)
            ends[b, 0] = max(n - 3, 0)
    return True


@inline
def least_drops(geo, degree, poly, j, lo, count, parts, ends, drops, nears, fars):
    """Bound the drop by the curve of the Earth, and u, over each part of a line.

    The drop is a convex function of the place between the ends of a part, on a bent grid almost.
    Given out are the least drop and one over the least and the greatest u.
    """
    across = abs(geo[D11])
    if degree <= 1:
        u = geo[X0] + j
        for b in range(parts):
            va = geo[Y0] + (lo + ends[b, 0])
            vb = geo[Y0] + (lo + ends[b, 1])
            at_a = (geo[D11] * u + geo[D02] * va) * va
            at_b = (geo[D11] * u + geo[D02] * vb) * vb
            drop = geo[D20] * u * u + (at_a if at_a < at_b else at_b)
            drops[b] = drop - 0.25 * geo[D02] * (vb - va) * (vb - va)
            nears[b] = 1.0 / u
            fars[b] = 1.0 / u
        return
    bend_u = 0.0
    bend_v = 0.0
    y = max(abs(geo[Y0] + lo), abs(geo[Y0] + lo + count)) / geo[SCALE]
    power = 1.0
    for k in range(2, degree + 1):
        bend_u += abs(poly[0, k]) * (k * (k - 1)) * power
        bend_v += abs(poly[1, k]) * (k * (k - 1)) * power
        power *= y
    turn = 0.125 / (geo[SCALE] * geo[SCALE])
    for b in range(parts):
        ua, va = post_uv(geo, degree, poly, j, lo + ends[b, 0])
        ub, vb = post_uv(geo, degree, poly, j, lo + ends[b, 1])
        reach = ends[b, 1] - ends[b, 0]
        off_u = bend_u * turn * (reach * reach)
        off_v = bend_v * turn * (reach * reach)
        u_least = min(ua, ub) - off_u
        u_most = max(ua, ub) + off_u
        v_most = max(abs(va), abs(vb)) + off_v
        drop = min(
            geo[D20] * ua * ua + geo[D11] * ua * va + geo[D02] * va * va,
            geo[D20] * ub * ub + geo[D11] * ub * vb + geo[D02] * vb * vb,
        )
        du = ub - ua
        dv = vb - va
        drop -= 0.25 * (geo[D20] * du * du + across * abs(du * dv) + geo[D02] * dv * dv)
        drop -= (2.0 * geo[D20] * u_most + across * v_most) * off_u
        drop -= (2.0 * geo[D02] * v_most + across * u_most) * off_v
        drops[b] = drop
        nears[b] = 1.0 / u_least if u_least > 0.0 else BIG
        fars[b] = 1.0 / u_most


@inline
def ceilings(geo, raise_by, parts, ends, drops, nears, fars, highest, tops):
    """Bound g of the posts of a line, or of points `raise_by` above them, part by part."""
    for b in range(parts):
        h = highest_of(highest, ends[b, 0], ends[b, 1]) + raise_by
        f = (h - geo[Z_EYE]) * (1.0 - h * geo[INV_R]) - drops[b] + NEAR
        tops[b] = f * (fars[b] if f < 0.0 else nears[b])
    for b in range(parts, PARTS):
        tops[b] = tops[0]


@inline
def is_quiet(b, parts, tops, goal_tops, tops_prev, floors):
    """Whether a part of a line, and of the one before, is surely under the horizon."""
    top = max(max(tops[b], goal_tops[b]), tops_prev[b])
    bottom = floors[b]
    if parts == 1:
        for k in range(1, PARTS):
            top = max(top, tops_prev[k])
            bottom = min(bottom, floors[k])
    return top + 1e-12 < bottom


@inline
def examine(
    before, here, goal, curved, shift, e_lo, e_hi, w_lo, w_hi, h_lo, h_hi, at, least, peaks, lows,
    loud,
):  # fmt: skip
    """Mark cells e_lo .. e_hi - 1 of a strip that may rise above the envelope, and open targets.

    The envelope is known at posts h_lo .. h_hi. Seen from the observer, the cell between posts n
    and n + 1 reaches from n to n + 2 at most. Returns how many it marked.
    """
    pg, g, u = before[1], here[1], here[3]
    for n in range(e_lo - 1, h_lo):
        lows[n] = least[h_lo]
    for n in range(h_lo, h_hi):
        lows[n] = least[n]
    for n in range(h_hi, e_hi + 3):
        lows[n] = least[h_hi - 1]
    for n in range(e_lo, e_hi + 1):
        loud[n] = 0
        peaks[n] = g[n] if g[n] > pg[n - shift] else pg[n - shift]
    if curved:  # where the map bends a cell may lean both ways
        for n in range(e_lo - 1, e_hi + 1):
            lows[n] = lows[n] if lows[n] < lows[n + 1] else lows[n + 1]
        for n in range(e_hi, e_lo - 1, -1):
            lows[n] = lows[n] if lows[n] < lows[n - 1] else lows[n - 1]
    marked = 0
    for n in range(e_lo, e_hi):
        top = peaks[n] if peaks[n] > peaks[n + 1] else peaks[n + 1]
        bottom = lows[n] if lows[n] < lows[n + 1] else lows[n + 1]
        rises = 1 if top > bottom - 1e-12 else 0
        marked += rises
        loud[n] |= rises * (RISES | BULGES)
    if marked > 0:
        for n in range(e_hi, e_lo, -1):
            loud[n] |= loud[n - 1] & RISES
    for n in range(max(w_lo, h_lo), min(w_hi, h_hi) + 1):
        asks = ASKS if goal[n] - at[n] * u[n] > -NEAR else 0
        marked += asks
        loud[n] |= asks
    return marked


@inline
def clear_heights(
    env, n_env, geo, own, here, goal, u_line, lo, first, last, arcs, n_arcs, over
):
    """Fill the heights of targets first .. last of a line over envelope and bulging cells.

    Without dividing: a direction is compared as v with t u. Where it is that of a border between
    two pieces, give or take rounding, the higher one counts.
    """
    u, v = here[3], here[4]
    k = max(piece_at(env, n_env, v[first] / u[first]) - 1, 0)
    for n in range(first, last + 1):
        tie = 1e-12 * u[n]
        while k < n_env - 1 and env[0, k + 1] * u[n] <= v[n] + tie:
            k += 1
        horizon = env[1, k] * u[n] + env[2, k] * v[n]
        if k > 0 and env[0, k] * u[n] >= v[n] - tie:
            horizon = max(horizon, env[1, k - 1] * u[n] + env[2, k - 1] * v[n])
        over[n] = goal[n] - horizon
    for k in range(n_arcs):
        t0 = arcs[k, 0]
        t1 = arcs[k, 1]
        if t1 * u[first] < v[first] or t0 * u[last] > v[last]:
            continue
        n = min(max(int(t0 * u_line - geo[Y0]) + 1 - lo, first), last)
        while n > first and v[n - 1] >= t0 * u[n - 1]:
            n -= 1
        while n <= last and v[n] < t0 * u[n]:
            n += 1
        while n <= last and v[n] <= t1 * u[n]:
            if arcs[k, 2] * u[n] + arcs[k, 3] * v[n] > goal[n] - over[n]:
                over[n] = min(over[n], goal[n] - arc_value(arcs, k, own, v[n] / u[n]) * u[n])
            n += 1


@inline
def answer_hidden(
    state, clearance, ints, geo, here, sure, goal, over, w_lo, w_hi, plain, holes, main, minor
):
    """Answer the posts w_lo .. w_hi of a line as hidden; those that may be seen come after."""
    f, u, v = here[2], here[3], here[4]
    main_is_row = ints[MAIN_IS_ROW] != 0
    sign = ints[SIGN_MINOR]
    if plain and not holes:
        if main_is_row:
            first = minor + w_lo if sign > 0 else minor - w_hi
            for c in range(first, first + w_hi - w_lo + 1):
                state[main, c] = 0
        else:
            for n in range(w_lo, w_hi + 1):
                state[minor + sign * n, main] = 0
    else:
        for n in range(w_lo, w_hi + 1):
            if sure[n] == sure[n] and (plain or asked(ints, geo, u[n], v[n])):
                if main_is_row:
                    state[main, minor + sign * n] = 0
                else:
                    state[minor + sign * n, main] = 0
    if ints[WANT_CLEARANCE] != 0:
        on_ground = ints[HAS_GROUND] != 0
        if plain and not holes and main_is_row and sign > 0:
            for n in range(w_lo, w_hi + 1):
                clearance[main, minor + n] = over[n]
            return
        if plain and not holes:
            for n in range(w_lo, w_hi + 1):
                k = minor + sign * n
                clearance[main if main_is_row else k, k if main_is_row else main] = over[n]
            return
        for n in range(w_lo, w_hi + 1):
            if goal[n] == goal[n] and (plain or asked(ints, geo, u[n], v[n])):
                clear = over[n]
                if on_ground and f[n] == f[n]:
                    clear = min(clear, goal[n] - f[n])
                if main_is_row:
                    clearance[main, minor + sign * n] = clear
                else:
                    clearance[minor + sign * n, main] = clear


@inline
def overtops(pf, f, v, u, shift, n_low, n_high, n_first, n_last):
    """Whether a line of posts stands above the line before it everywhere, and no cell bulges.

    On an affine grid a sight line to post n crosses the line before between posts n - 1 and n, v /
    u of the way back from n; one through post n of the line before crosses this line between n and
    n + 1.
    """
    bad = 0
    spare = 1e-9 * u
    for n in range(n_first, n_last + 1):
        a = n - shift
        bad += f[n] * (u - 1.0) - (pf[a - 1] * v[n] + pf[a] * (u - v[n])) < spare
    for n in range(n_first - 1, n_last + 1):
        bad += (f[n] * (u - 1.0 - v[n]) + f[n + 1] * v[n]) - pf[n - shift] * u < spare
    if bad > 0:
        return False
    for n in range(n_low, n_high):
        a = n - shift
        bad += f[n + 1] - f[n] - pf[a + 1] + pf[a] < -FLAT
    if bad == 0:
        return True
    for n in range(n_low, n_high):
        a = n - shift
        if f[n + 1] - f[n] - pf[a + 1] + pf[a] < -FLAT and not climbs(
            pf[a], pf[a + 1], f[n], f[n + 1], u - 1.0, u, v[n] / u, v[n + 1] / (u - 1.0)
        ):
            return False
    return True


@inline
def answer_seen(
    state, clearance, ints, geo, pf, goal, u, v, u_line, shift, w_lo, w_hi, plain, main, minor, over
):
    """Answer posts w_lo .. w_hi of a line as seen, the line before being their horizon."""
    main_is_row = ints[MAIN_IS_ROW] != 0
    sign = ints[SIGN_MINOR]
    wants_clearance = ints[WANT_CLEARANCE] != 0
    if wants_clearance:
        for n in range(w_lo, w_hi + 1):
            a = n - shift
            over[n] = goal[n] - (pf[a - 1] * v[n] + pf[a] * (u_line - v[n])) / (u_line - 1.0)
    for n in range(w_lo, w_hi + 1):
        if plain or asked(ints, geo, u[n], v[n]):
            k = minor + sign * n
            r = main if main_is_row else k
            c = k if main_is_row else main
            state[r, c] = 1
            if wants_clearance:
                clearance[r, c] = over[n]


@inline
def line_as_horizon(line, first, last, low, high, env):
    """Write posts first .. last of a line as the envelope; returns the pieces (0: no room)."""
    t, plane_a, plane_b = line[0], line[5], line[6]
    if last - first > env.shape[1] - 4:
        return 0
    for n in range(first, last):
        env[0, n - first] = max(t[n], low)
        env[1, n - first] = plane_a[n]
        env[2, n - first] = plane_b[n]
    env[0, last - first] = high
    return last - first


@inline
def next_run(loud, n, n_low, n_high):
    """Find the next posts that are loud or near one, from n on: first and last."""
    while n <= n_high and loud[n] == 0:
        n += 1
    if n > n_high:
        return n, n - 1
    first = max(n - 1, n_low)
    last = n
    while n <= n_high and n <= last + QUIET_POSTS:
        if loud[n] != 0:
            last = n
        n += 1
    return first, min(last + 1, n_high)


@inline
def is_ahead(geo, degree, poly, j, i, t):
    """Whether post i of a line lies in direction t or beyond: v / u >= t, without dividing."""
    u, v = post_uv(geo, degree, poly, j, i)
    return v >= t * u if u > 0.0 else v > 0.0


@inline
def owned(ints, geo, degree, poly, piece, j, i):
    """Whether a post belongs to this wedge: each post of the grid belongs to exactly one."""
    if not is_ahead(geo, degree, poly, j, i, piece[0]):
        return False
    if is_ahead(geo, degree, poly, j, i, piece[1]):
        return False
    along = geo[X0] + j
    across = geo[Y0] + i
    if across < 0.0 or across > along:
        return False
    if across == along and ints[OWN_DIAGONAL] == 0:
        return False
    return across != 0.0 or ints[OWN_AXIS] != 0


@inline
def cuts(ints, geo, low, high):
    """Whether an edge of the sector runs through the directions low .. high."""
    if ints[HAS_BEARINGS] == 0:
        return False
    t_from = geo[B_FROM_V] / geo[B_FROM_U]
    t_to = geo[B_TO_V] / geo[B_TO_U]
    spare = 1e-6
    return low - spare <= t_from <= high + spare or low - spare <= t_to <= high + spare


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
def whole(first, last):
    """Last rounded up, so that a loop from first on takes whole vectors and no single posts."""
    return first + (last - first + CHUNK - 1) // CHUNK * CHUNK


@inline
def work_out(ints, geo, own, j, lo, poly, raw, line, span, first, last):
    """Fill t, g, f, u, v of posts first .. last - 1 of line j, unless they are there already."""
    if span[0] <= first and last <= span[1]:
        return
    span[0] = first
    span[1] = last
    span[2] = 0
    span[3] = 0
    last = whole(first, last)
    f, u, v = line[2], line[3], line[4]
    place(ints[DEGREE], geo[Y0], lo, geo[X0] + j, geo[SCALE], poly, u, v, first, last)
    flatten(raw, 0.0, geo, u, v, f, first, last)
    if j <= 1:  # the corners of the own cell, sharp however near the observer
        for i in range(2):
            if first <= i - lo < last:
                f[i - lo] = own[O_F + 2 * j + i]
                u[i - lo] = own[O_U + 2 * j + i]
                v[i - lo] = own[O_V + 2 * j + i]
    directions(line, first, last)


@inline
def stand_on_own_cell(z, ints, geo, f, raw, lo, n, goal):
    """Work targets at the corners of the own cell from the sharp f of the surface there.

    Else a target at the surface itself could lie a rounding error below it.
    """
    for i in range(2):
        m = i - lo
        if 0 <= m < n and f[m] == f[m]:
            main = ints[BASE_MAIN] + ints[SIGN_MAIN]
            minor = ints[BASE_MINOR] + ints[SIGN_MINOR] * i
            h = np.float64(z[main, minor] if ints[MAIN_IS_ROW] != 0 else z[minor, main])
            top = np.float64(raw[m]) + geo[TARGET]
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
    state, clearance, ints, geo, own, before, here, goal, at, wants, loud, j, lo, shift, w_lo, w_hi,
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
        if not want_clearance and not loud[n] & ASKS:
            continue
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
        if w_lo > w_hi or t1 < t[w_lo] or t0 > t[w_hi]:
            continue
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
            elif clear >= NO_HORIZON:
                clearance[r, c] = geo[SPARE]
            else:
                clearance[r, c] = clear


@inline
def add_cross_edges(
    ints, geo, own, before, here, j, lo, lo_prev, go_lo, go_hi, low, high, loud, envs, which, n_env,
    seg,
):  # fmt: skip
    """Merge the edges between two lines; returns pieces (0: no room) and which envelope."""
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
            if not loud[b] & RISES:
                continue
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
            n_env = merge_edges(envs[which], n_env, seg, n_seg, eps, envs[1 - which])
            if n_env == 0:
                return 0, which
            which = 1 - which
    return n_env, which


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
    ints, geo, own, before, here, j, lo, lo_prev, go_lo, go_hi, low, high, loud, env, n_env, arcs,
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
        if not loud[b] & BULGES:
            continue
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
        Scratch space: raws (5, w) float32, lines (2, 7, w), spans (2 + PARTS, 4) int64, ends
        (PARTS, 2) int64, post (8, w), loud (w,) uint8, env (2, 3, e), seg (4, w), arcs (a, 16),
        gaps (2, b), poly (4, n + 1), cell (1, 16), corner (2, 8), bounds (7, PARTS), highest
        (WINDOWS, w) float32.

    Returns
    -------
    int
        DONE, or FULL if some scratch array is too small; nothing it wrote is wrong then.
    """
    (
        raws, lines, spans, ends, post, loud, envs, seg, arcs, gaps, poly, cell, corner, bounds,
        highest,
    ) = work  # fmt: skip
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
    width = loud.shape[0] - 4 * CHUNK
    rows, cols = z.shape
    n_minor = cols if main_is_row else rows

    ts = corner[0]
    gs = corner[1]
    at, least, most, wants, over = post[0], post[1], post[2], post[3], post[4]
    peaks = post[6]
    lows = post[7]
    floors = bounds[0]
    for k in range(PARTS):
        floors[k] = -BIG

    # Posts farther than this outside the grid end the wedge. The map of posts means nothing there,
    # and where it turns back a search would not end.
    farthest_low = -ints[BASE_MINOR] - ints[MARGIN] - 8
    farthest_high = n_minor - ints[BASE_MINOR] + ints[MARGIN] + 8
    if sign < 0:
        farthest_low = ints[BASE_MINOR] - n_minor - ints[MARGIN] - 8
        farthest_high = ints[BASE_MINOR] + ints[MARGIN] + 8
    cut = cuts(ints, geo, low, high)

    which = 0
    envs[0, 0, 0] = low
    envs[0, 0, 1] = high
    envs[0, 1, 0] = -BIG
    envs[0, 2, 0] = 0.0
    n_env = 1
    n_arcs = 0
    n_gaps = 0

    # line 0, at or just behind the observer
    lo_prev = -4
    n_prev = 11
    if n_prev > width:
        return FULL
    if curved:
        line_coefficients(coef_u, degree, geo[X0] / geo[SCALE], poly[0])
        line_coefficients(coef_v, degree, geo[X0] / geo[SCALE], poly[1])
    minor = ints[BASE_MINOR] + sign * lo_prev
    fetch(z, main_is_row, ints[BASE_MAIN], minor, sign, raws[0], n_prev)
    spans[:] = 0
    work_out(ints, geo, own, 0, lo_prev, poly[0:2], raws[0], lines[0], spans[0], 0, n_prev)
    void_prev = True
    stale = False
    stale_floors = True
    is_line = False
    arcs_kept = 0
    first_prev = 0
    last_prev = 2
    first = 0
    last = 1

    for j in range(1, ints[LAST_LINE] + 1):
        now = j & 1
        then = 1 - now
        u_line = geo[X0] + j
        own_poly = poly[2 * now : 2 * now + 2]
        if curved:
            line_coefficients(coef_u, degree, u_line / geo[SCALE], own_poly[0])
            line_coefficients(coef_v, degree, u_line / geo[SCALE], own_poly[1])
        # posts that straddle the wedge: t[first] <= low < ..., ... < high <= t[last]
        while first > farthest_low and post_t(geo, degree, own_poly, j, first) > low:
            first -= 1
        while first < farthest_high and post_t(geo, degree, own_poly, j, first + 1) <= low:
            first += 1
        if last <= first:
            last = first + 1
        while last <= farthest_high and post_t(geo, degree, own_poly, j, last) < high:
            last += 1
        while last - 1 > first and post_t(geo, degree, own_poly, j, last - 1) >= high:
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

        before = lines[then]
        here = lines[now]
        t, g, f, u, v = here[0], here[1], here[2], here[3], here[4]
        raw = raws[now]
        fetch(z, main_is_row, main, minor, sign, raw, count)
        span = spans[now]
        span[:] = 0
        n_first = first - lo
        n_last = last - lo
        cell_lo = min(first, first_prev) - 1
        cell_hi = max(last, last_prev)
        n_low = cell_lo - lo
        n_high = cell_hi + 1 - lo
        shift = lo_prev - lo  # post a of the line before stands on the row of post a + shift
        ragged = unknown_posts(raw, 0, count) > 0
        void = ragged and unknown_posts(raw, n_low, n_high + 1) > 0
        near = j <= 2  # the sharp posts about the observer: everything is looked at
        blind = n_gaps == 1 and gaps[0, 0] <= low and gaps[1, 0] >= high
        opens = (void or void_prev) and not blind
        if near or opens:
            work_out(ints, geo, own, j, lo, own_poly, raw, here, span, 0, count)
            if j == 1:
                open_first_strip(geo, own_known, before, lo_prev, n_prev, here, lo, count)
        if opens:
            work_out(
                ints, geo, own, j - 1, lo_prev, poly[2 * then : 2 * then + 2], raws[then], before,
                spans[then], 0, n_prev,
            )  # fmt: skip
            n_gaps = add_strip_gaps(
                before[0], before[2], t, f, shift, cell_lo - lo_prev, cell_hi - lo_prev, j,
                lo_prev, low, high, gaps, n_gaps,
            )  # fmt: skip
            if n_gaps < 0:
                return FULL

        # targets
        ua, va = post_uv(geo, degree, own_poly, j, first)
        ub, vb = post_uv(geo, degree, own_poly, j, last)
        if max(distance2(geo, ua, va), distance2(geo, ub, vb)) > geo[RANGE2]:
            nearest = BIG
            for i in range(first, last + 1):
                ua, va = post_uv(geo, degree, own_poly, j, i)
                nearest = min(nearest, distance2(geo, ua, va))
            if nearest > geo[RANGE2]:
                return DONE
        w_lo = n_first
        w_hi = n_last
        while w_lo <= w_hi and not owned(ints, geo, degree, own_poly, piece, j, lo + w_lo):
            w_lo += 1
        while w_hi >= w_lo and not owned(ints, geo, degree, own_poly, piece, j, lo + w_hi):
            w_hi -= 1
        # distance along a line has no greatest between its ends
        ua, va = post_uv(geo, degree, own_poly, j, lo + w_lo)
        ub, vb = post_uv(geo, degree, own_poly, j, lo + w_hi)
        plain = (
            not cut and w_lo <= w_hi and asked(ints, geo, ua, va) and asked(ints, geo, ub, vb)
        )
        if span[1] < count and (not plain or want_clearance or is_line):
            place(degree, geo[Y0], lo, u_line, geo[SCALE], own_poly, u, v, 0, whole(0, count))
            if want_clearance or is_line:
                flatten(raw, 0.0, geo, u, v, f, 0, whole(0, count))
        goal = f
        goal_raw = raw
        other_goal = target != 0.0 or on_ground
        if other_goal:
            goal = post[5]
            if on_ground:
                goal_raw = raws[2]
                fetch(ground, main_is_row, main, minor, sign, goal_raw, count)
            if want_clearance:
                flatten(goal_raw, target, geo, u, v, goal, 0, whole(0, count))

        if is_line:
            # the horizon is the line before: does this one, all of it, take its place?
            if not (curved or void or opens or on_ground) and n_gaps == 0 and target >= 0.0 and (
                overtops(before[2], f, v, u_line, shift, n_low, n_high, n_first, n_last)
            ):
                answer_seen(
                    state, clearance, ints, geo, before[2], goal, u, v, u_line, shift, w_lo, w_hi,
                    plain, main, minor, over,
                )  # fmt: skip
                for b in range(PARTS):
                    bounds[1 + now, b] = BIG
                lo_prev = lo
                n_prev = count
                first_prev = first
                last_prev = last
                void_prev = void
                continue
            is_line = False
            work_out(
                ints, geo, own, j - 1, lo_prev, poly[2 * then : 2 * then + 2], raws[then], before,
                spans[then], 0, n_prev,
            )  # fmt: skip
            edge_planes(before, spans[then], 0, n_prev - 1)
            n_env = line_as_horizon(
                before, first_prev - lo_prev, last_prev - lo_prev, low, high, envs[which]
            )
            if n_env == 0:
                return FULL
            stale = True
            stale_floors = True

        # where may something be seen, or rise above the horizon?
        tops = bounds[1 + now]
        goal_tops = bounds[3]
        tops_prev = bounds[1 + then]
        for b in range(PARTS):
            goal_tops[b] = -BIG
        parts = PARTS if n_last - n_first >= 3 * PARTS else 1
        even = part_ends(
            geo, degree, own_poly, j, lo, low, high, n_first, n_last, count, parts, ends
        )
        if near or not even:
            parts = 1
            ends[0, 1] = min(n_last + 3, count - 1)
            for b in range(PARTS):
                tops[b] = BIG
        else:
            least_drops(
                geo, degree, own_poly, j, lo, count, parts, ends, bounds[4], bounds[5], bounds[6]
            )
            sure = raw
            if ragged:
                sure = raws[3]
                fill_voids(raw, whole(0, count), sure)
            windows(sure, whole(0, count), highest)
            ceilings(geo, 0.0, parts, ends, bounds[4], bounds[5], bounds[6], highest, tops)
            if on_ground:
                fill_voids(goal_raw, whole(0, count), raws[4])
                windows(raws[4], whole(0, count), highest)
            if other_goal:
                ceilings(
                    geo, target, parts, ends, bounds[4], bounds[5], bounds[6], highest, goal_tops
                )
            if stale_floors:
                block_floors(envs[which], n_env, low, high, floors)
                stale_floors = False
        ranges = 0
        b = 0
        while b < parts:
            if is_quiet(b, parts, tops, goal_tops, tops_prev, floors):
                b += 1
                continue
            e_lo = max(ends[b, 0], n_low)
            b += 1
            while b < parts and not is_quiet(b, parts, tops, goal_tops, tops_prev, floors):
                b += 1
            e_hi = min(ends[b - 1, 1], n_high)
            a_lo = max(e_lo - 3, 0)
            a_hi = min(e_hi + 4, count)
            work_out(ints, geo, own, j, lo, own_poly, raw, here, span, a_lo, a_hi)
            work_out(
                ints, geo, own, j - 1, lo_prev, poly[2 * then : 2 * then + 2], raws[then], before,
                spans[then], max(a_lo - shift, 0), min(a_hi - shift, n_prev),
            )  # fmt: skip
            if other_goal:
                flatten(goal_raw, target, geo, u, v, goal, a_lo, whole(a_lo, a_hi))
                if on_ground and j == 1:
                    stand_on_own_cell(z, ints, geo, f, goal_raw, lo, count, goal)
            h_lo = min(max(e_lo, n_first), n_last - 1)
            h_hi = max(min(e_hi, n_last), n_first + 1)
            survey_line(envs[which], n_env, h_lo, h_hi, t, low, high, at, least, most)
            ranges += 1
            spans[1 + ranges, 0] = e_lo
            spans[1 + ranges, 1] = e_hi
            spans[1 + ranges, 2] = h_lo
            spans[1 + ranges, 3] = h_hi

        # the rest is hidden
        if want_clearance and w_lo <= w_hi:
            clear_heights(
                envs[which], n_env, geo, own, here, goal, u_line, lo, w_lo, w_hi, arcs, n_arcs, over
            )
        answer_hidden(
            state, clearance, ints, geo, here, goal_raw, goal, over, w_lo, w_hi, plain,
            void or on_ground, main, minor,
        )  # fmt: skip
        for b in range(ranges):
            e_lo, e_hi, h_lo, h_hi = (
                spans[2 + b, 0], spans[2 + b, 1], spans[2 + b, 2], spans[2 + b, 3],
            )  # fmt: skip
            if near:
                for n in range(e_lo, e_hi + 1):
                    loud[n] = RISES | ASKS | BULGES
            elif examine(
                before, here, goal, curved, shift, e_lo, e_hi, w_lo, w_hi, h_lo, h_hi, at, least,
                peaks, lows, loud,
            ) == 0:  # fmt: skip
                spans[2 + b, 1] = e_lo - 1
                continue
            n = e_lo
            while n <= e_hi:
                run_lo, run_hi = next_run(loud, n, e_lo, e_hi)
                n = run_hi + 2
                if run_lo > run_hi:
                    break
                answer(
                    state, clearance, ints, geo, own, before, here, goal, at, wants, loud, j, lo,
                    shift, max(w_lo, run_lo), min(w_hi, run_hi), plain, main, minor, arcs, n_arcs,
                    gaps, n_gaps, cell,
                )  # fmt: skip
        # merge this strip
        for b in range(ranges):
            e_lo, e_hi, h_lo, h_hi = (
                spans[2 + b, 0], spans[2 + b, 1], spans[2 + b, 2], spans[2 + b, 3],
            )  # fmt: skip
            if near:  # close to the observer g of the posts is no bound
                for n in range(n_first, n_last):
                    least[n] = -2.0 * BIG
                    most[n] = 2.0 * BIG
            n = e_lo
            while n <= e_hi:
                run_lo, run_hi = next_run(loud, n, e_lo, e_hi)
                n = run_hi + 2
                if run_lo > run_hi:
                    break
                rises = 0
                for m in range(run_lo, run_hi + 1):
                    rises |= loud[m] & RISES
                if rises == 0:
                    continue
                r_lo = min(max(run_lo, h_lo), h_hi - 1)
                r_hi = max(min(run_hi, h_hi), h_lo + 1)
                go_lo = cell_lo if r_lo == n_first else lo + r_lo
                go_hi = cell_hi if r_hi == n_last else lo + r_hi
                a_lo = max(run_lo - 3, 0)
                a_hi = min(run_hi + 3, count - 1)
                edge_planes(here, span, a_lo, a_hi)
                edge_planes(
                    before, spans[then], max(a_lo - shift, 0), min(a_hi - shift, n_prev - 1)
                )
                if j == 1 and own_known and 0 <= 0 - lo < count:
                    here[5, 0 - lo], here[6, 0 - lo] = own_plane(own, True, 0.0)
                n_new, taken, changed = merge_line(
                    envs[which], n_env, r_lo, r_hi - r_lo, t, g, here[5], here[6], least, most,
                    high, eps, envs[1 - which],
                )  # fmt: skip
                if n_new == 0:
                    return FULL
                if changed:
                    n_env = n_new
                    which = 1 - which
                merged = which
                n_env, which = add_cross_edges(
                    ints, geo, own, before, here, j, lo, lo_prev, go_lo, go_hi, low, high, loud,
                    envs, which, n_env, seg,
                )  # fmt: skip
                if n_env == 0:
                    return FULL
                stale = stale or changed or which != merged
                stale_floors = stale_floors or changed or which != merged
                n_arcs = add_strip_arcs(
                    ints, geo, own, before, here, j, lo, lo_prev, go_lo, go_hi, low, high, loud,
                    envs[which], n_env, arcs, n_arcs, cell, ts, gs,
                )  # fmt: skip
                if n_arcs < 0:
                    return FULL
                is_line = (
                    taken == n_last - n_first and which == merged and n_arcs == 0
                    and not (curved or near or void)
                )  # fmt: skip
        # bulges that are still above the envelope: looked after now and then, since one kept too
        # long costs time but no exactness
        if stale and ((j & 7) == 0 or n_arcs > arcs_kept):
            n_arcs = drop_arcs(envs[which], n_env, eps, arcs, n_arcs)
            arcs_kept = 2 * n_arcs + 16
            stale = False

        lo_prev = lo
        n_prev = count
        first_prev = first
        last_prev = last
        void_prev = void
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
                elif clear >= NO_HORIZON:
                    clearance[r, c] = geo[SPARE]
                else:
                    clearance[r, c] = clear
        if not known:
            continue
        if j == 1:
            horizon = own[O_F0] / u + own[O_FA] * (own[O_X1] / u)
        elif has_edge(z, r, c):
            horizon = max(horizon, f / u)
