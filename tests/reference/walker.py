"""The plain walker: every sight line walked whole, one at a time.

It is the meaning of the result, spelled out. Nothing here is shared with the fast engine but the
elevations, the post coordinates and the constants.
"""

import itertools
import math

import numpy as np


class Walker:
    """Sight lines from one observer over one elevation array.

    Parameters
    ----------
    z : (rows, cols) float32
        Elevation of the ground, NaN where void.
    post_map : PostMap
        Post coordinates p, q (sight lines are straight in them) and the metres they stand for.
    surface, eye_height, target_height, k, range_m, sector
        As for `viewshed.visibility.compute`.
    without : set of str
        Bulges left out, to show that they matter: "own" in the observer's cell, "last" in the
        target's, "between" in the others.

    Attributes
    ----------
    margin : (rows, cols) float64
        Clearance also where the answer is unresolved, after `answer` [m].
    grazes : (rows, cols) bool
        Where the sight line passes a post by less than a float can tell, after `answer`.
    """

    def __init__(
        self,
        z,
        post_map,
        *,
        surface=None,
        eye_height,
        target_height=0.0,
        k=0.13,
        range_m=math.inf,
        sector=None,
        without=(),
    ):
        self.without = without
        self.foot = z.astype(np.float64)  # what targets stand on
        self.own_surface = surface is not None
        self.z = surface.astype(np.float64) if self.own_surface else self.foot  # what blocks
        self.row0, self.col0 = post_map.row0, post_map.col0
        self.target_height, self.range_m, self.sector = target_height, range_m, sector
        self.eye_height = eye_height
        self.k = k
        self.M, self.P = post_map.radius_meridian, post_map.radius_prime_vertical
        self.J = post_map.jacobian
        rows, cols = z.shape
        r, c = np.meshgrid(np.arange(rows), np.arange(cols), indexing="ij")
        if post_map.cp.shape[0] <= 2:
            self.p, self.q = c - self.col0, r - self.row0
        else:
            self.p, self.q = post_map.pq(r, c)
        # the observer goes with the cell that holds it
        corners = self.corner_weights()
        shift_p = sum(w * self.p[at] for at, w in corners)
        shift_q = sum(w * self.q[at] for at, w in corners)
        if post_map.cp.shape[0] > 2:
            self.p, self.q = self.p - shift_p, self.q - shift_q
        self.eye = sum(w * self.foot[at] for at, w in corners) + eye_height
        self.eye_over = eye_height  # over the surface
        if self.own_surface:
            self.eye_over = self.eye - sum(w * self.z[at] for at, w in corners)
        self.f = self.flat_height(self.z)
        for at in self.own_posts():  # sharp differences near the observer
            rise = sum(w * (self.z[at] - self.z[b]) for b, w in corners) - self.eye_over
            self.f[at] = rise * (1 - self.z[at] / self.bent_radius()) - self.drop()[at]
        # single numbers are taken from lists, where they are several times quicker to get
        self.listed = self.p.tolist(), self.q.tolist(), self.f.tolist()

    def corner_weights(self):
        r0, c0 = math.floor(self.row0), math.floor(self.col0)
        a, b = self.row0 - r0, self.col0 - c0
        found = []
        for r, wr in ((r0, 1 - a), (r0 + 1, a)):
            for c, wc in ((c0, 1 - b), (c0 + 1, b)):
                if wr * wc > 0:
                    found.append(((r, c), wr * wc))
        return found

    def own_posts(self):
        rows, cols = self.z.shape
        near_r = {math.floor(self.row0) + d for d in (-1, 0, 1)} | {math.ceil(self.row0) + 1}
        near_c = {math.floor(self.col0) + d for d in (-1, 0, 1)} | {math.ceil(self.col0) + 1}
        for r, c in itertools.product(near_r, near_c):
            touches = abs(r - self.row0) <= 1 and abs(c - self.col0) <= 1
            if touches and 0 <= r < rows and 0 <= c < cols:
                yield r, c

    def bent_radius(self):
        return math.sqrt(self.M * self.P) / (1 - self.k)

    def metres(self):
        east = self.J[0, 0] * self.p + self.J[0, 1] * self.q
        north = self.J[1, 0] * self.p + self.J[1, 1] * self.q
        return east, north

    def drop(self):
        east, north = self.metres()
        return (1 - self.k) / 2 * (north**2 / self.M + east**2 / self.P)

    def flat_height(self, z):
        return (z - self.eye) * (1 - z / self.bent_radius()) - self.drop()

    def answer(self):
        """State and clearance of every cell."""
        rows, cols = self.z.shape
        state = np.full((rows, cols), 255, np.uint8)
        clearance = np.full((rows, cols), np.nan)
        self.margin = np.full((rows, cols), np.nan)
        self.grazes = np.zeros((rows, cols), bool)
        east, north = self.metres()
        distance = np.hypot(east, north)
        bearing = np.degrees(np.arctan2(east, north))
        target = self.flat_height(self.foot + self.target_height)
        for r, c in itertools.product(range(rows), range(cols)):
            if np.isnan(self.foot[r, c]) or distance[r, c] > self.range_m * (1 + 1e-12):
                continue
            horizon, unknown, length = -math.inf, False, 1.0
            if (r, c) != (self.row0, self.col0):  # the own place lies in every sector
                if self.sector is not None and not self.sector.contains(bearing[r, c]):
                    continue
                horizon, unknown, length = self.walk(r, c)
            clear = target[r, c] - horizon * length
            if self.own_surface and not np.isnan(self.f[r, c]):
                clear = min(clear, target[r, c] - self.f[r, c])  # the surface at its own post
            if clear == math.inf:  # nothing stands between
                clear = self.eye_height + self.target_height
            self.margin[r, c] = clear
            if clear < 0:
                state[r, c] = 0
            else:
                state[r, c] = 2 if unknown else 1
            clearance[r, c] = clear if state[r, c] < 2 else math.nan
        return state, clearance

    def walk(self, rt, ct):
        """Horizon on the sight line to a post, whether it meets the unknown, and its length.

        The horizon is a slope: flat height over distance, both in the (p, q) plane.
        """
        length = math.hypot(self.p[rt, ct], self.q[rt, ct])
        ray = (self.p[rt, ct] / length, self.q[rt, ct] / length)
        points = self.crossings(rt, ct, ray, length)
        horizon, unknown = -math.inf, bool(np.isnan(self.f[rt, ct]))
        for distance, _, _, height, known in points:
            if known:
                horizon = max(horizon, height / distance)
            else:
                unknown = True
        # sections: from the observer, crossing to crossing, to the target
        observer = (0.0, self.row0, self.col0, None, True)
        goal = (length, float(rt), float(ct), self.f[rt, ct], True)
        stops = [observer, *points, goal]
        for start, end in itertools.pairwise(stops):
            peak, inside_unknown = self.section(start, end, ray)
            unknown = unknown or inside_unknown
            where = "own" if start is observer else "last" if end is goal else "between"
            if where not in self.without:
                horizon = max(horizon, peak)
        return horizon, unknown, length

    def crossings(self, rt, ct, ray, length):
        """Where the sight line crosses row and column lines strictly between its ends.

        Each is (distance, row, col, flat height, known), nearest first.
        """
        rows, cols = self.z.shape
        r_lo = max(0, min(rt, math.floor(self.row0)) - 3)
        r_hi = min(rows, max(rt, math.ceil(self.row0)) + 4)
        c_lo = max(0, min(ct, math.floor(self.col0)) - 3)
        c_hi = min(cols, max(ct, math.ceil(self.col0)) + 4)
        around = np.s_[r_lo:r_hi, c_lo:c_hi]
        side = ray[0] * self.q[around] - ray[1] * self.p[around]  # of the ray that each post is on
        straight = self.p[0, 0] == -self.col0 and self.q[0, 0] == -self.row0
        if straight:  # exact zeros for whole-number ratios
            dp, dq = self.p[rt, ct], self.q[rt, ct]
            side = np.where(dp * self.q[around] == dq * self.p[around], 0.0, side)
        self.grazes[rt, ct] = np.any((side != 0) & (np.abs(side) < 1e-13 * max(1.0, length)))
        p, q, f = self.listed
        found = {}
        on = np.argwhere(side == 0)
        for a, b in on:  # through a post
            r, c = r_lo + a, c_lo + b
            along = ray[0] * self.p[r, c] + ray[1] * self.q[r, c]
            found[(float(r), float(c))] = (*self.at_post(r, c), along)
        for axis in (0, 1):
            first = side[:-1] if axis == 0 else side[:, :-1]
            second = side[1:] if axis == 0 else side[:, 1:]
            for a, b in np.argwhere(first * second < 0).tolist():
                r, c = r_lo + a, c_lo + b
                r2, c2 = (r + 1, c) if axis == 0 else (r, c + 1)
                if (rt, ct) in ((r, c), (r2, c2)):
                    continue  # an edge of the target is met at its end alone
                if r <= self.row0 <= r2 and c <= self.col0 <= c2:
                    continue  # and one the observer stands on, where it stands
                s0, s1 = float(first[a, b]), float(second[a, b])
                f0, f1 = f[r][c], f[r2][c2]
                height = (f0 * s1 - f1 * s0) / (s1 - s0)
                # |A x B| / |s1 - s0| is the distance to the crossing of A B, sharp close by
                spanned = p[r][c] * q[r2][c2] - p[r2][c2] * q[r][c]
                distance = abs(spanned / (s1 - s0))
                part = s0 / (s0 - s1)
                where = (r + part, float(c)) if axis == 0 else (float(r), c + part)
                x, y = self.place(*where)
                if ray[0] * x + ray[1] * y < -1e-12:
                    continue  # behind the observer
                found[where] = (height, not math.isnan(height), distance)
        points = []
        for where, (height, known, distance) in found.items():
            between = 0 < distance < length * (1 - 1e-13)
            if between and where not in ((rt, ct), (self.row0, self.col0)):
                points.append((distance, *where, height, known))
        points.sort()
        return self.sharpen_first(points, ray)

    def at_post(self, r, c):
        """Flat height and knowledge of a post hit exactly; alone among voids it does not block."""
        rows, cols = self.z.shape
        known = not np.isnan(self.f[r, c])
        around = [(r - 1, c), (r + 1, c), (r, c - 1), (r, c + 1)]
        inside = [at for at in around if 0 <= at[0] < rows and 0 <= at[1] < cols]
        has_edge = not all(np.isnan(self.f[at]) for at in inside)
        return (self.f[r, c] if has_edge or not known else -math.inf), known

    def place(self, row, col):
        """p and q of a place on a grid line, straight between its two posts."""
        r, c = math.floor(row), math.floor(col)
        a, b = row - r, col - c
        r2, c2 = (r + 1 if a else r), (c + 1 if b else c)
        p, q, _ = self.listed
        x = p[r][c] + a * (p[r2][c] - p[r][c]) + b * (p[r][c2] - p[r][c])
        y = q[r][c] + a * (q[r2][c] - q[r][c]) + b * (q[r][c2] - q[r][c])
        return x, y

    def own_cell(self, r0, c0):
        """Bilinear differences, at the observer, of a cell that touches it."""
        rows, cols = self.z.shape
        if not (0 <= r0 < rows - 1 and 0 <= c0 < cols - 1):
            return None
        box = np.s_[r0 : r0 + 2, c0 : c0 + 2]
        if np.isnan(self.f[box]).any():
            return None
        a, b = self.row0 - r0, self.col0 - c0

        def differences(v):
            first, second = v[0, 0] * (1 - b) + v[0, 1] * b, v[1, 0] * (1 - b) + v[1, 1] * b
            at = first * (1 - a) + second * a
            by_col = (v[0, 1] - v[0, 0]) * (1 - a) + (v[1, 1] - v[1, 0]) * a
            by_row = (v[1, 0] - v[0, 0]) * (1 - b) + (v[1, 1] - v[0, 1]) * b
            return at, by_col, by_row, v[1, 1] - v[1, 0] - v[0, 1] + v[0, 0]

        return differences(self.f[box]), differences(self.p[box]), differences(self.q[box])

    def own_exit(self, ray, r0, c0):
        """Way out of the own cell: (distance, x, y), x and y as index offsets, and its f."""
        cell = self.own_cell(r0, c0)
        if cell is None:
            return None
        f, p, q = cell
        ends = []
        for x in (c0 - self.col0, c0 + 1 - self.col0):  # its column lines
            down = ray[0] * (q[2] + q[3] * x) - ray[1] * (p[2] + p[3] * x)
            if x == 0 or down == 0:
                continue
            ends.append((x, x * (ray[1] * p[1] - ray[0] * q[1]) / down))
        for y in (r0 - self.row0, r0 + 1 - self.row0):  # its row lines
            along = ray[1] * (p[1] + p[3] * y) - ray[0] * (q[1] + q[3] * y)
            if y == 0 or along == 0:
                continue
            ends.append((y * (ray[0] * q[2] - ray[1] * p[2]) / along, y))
        ways = []
        for x, y in ends:
            if abs(x + self.col0 - c0 - 0.5) > 0.5 + 1e-12:
                continue
            if abs(y + self.row0 - r0 - 0.5) > 0.5 + 1e-12:
                continue
            px = p[1] * x + p[2] * y + p[3] * x * y
            qx = q[1] * x + q[2] * y + q[3] * x * y
            distance = ray[0] * px + ray[1] * qx
            if distance > 0:
                ways.append((distance, x, y))
        if not ways:
            return None
        return min(ways, key=lambda way: way[0]), f

    def sharpen_first(self, points, ray):
        """Replace the first crossing by one worked from differences at the observer."""
        if not points:
            return points
        r0 = math.floor(min(self.row0, points[0][1]))
        c0 = math.floor(min(self.col0, points[0][2]))
        found = self.own_exit(ray, r0, c0)
        if found is None:
            return points
        (distance, x, y), f = found
        first = points[0]
        if abs(first[0] - distance) > 1e-6 or not first[4]:
            return points
        height = f[0] + f[1] * x + f[2] * y + f[3] * x * y
        return [(distance, first[1], first[2], height, True), *points[1:]]

    def section(self, start, end, ray):
        """Greatest slope strictly inside one cell, and whether the cell is unknown."""
        _, r1, c1, _, known1 = start
        _, r2, c2, _, known2 = end
        r, c = math.floor(min(r1, r2)), math.floor(min(c1, c2))
        if (r1 == r2 == math.floor(r1)) or (c1 == c2 == math.floor(c1)):
            # both ends on one grid line: along one of its edges, or past the border where it bends
            along_edge = max(r1, r2) <= r + 1 and max(c1, c2) <= c + 1
            along_edge = along_edge and min(r1, r2) >= r and min(c1, c2) >= c
            return -math.inf, not along_edge
        rows, cols = self.z.shape
        inside = 0 <= r < rows - 1 and 0 <= c < cols - 1
        f = self.listed[2]
        box = (*f[r][c : c + 2], *f[r + 1][c : c + 2]) if inside else (math.nan,)
        if any(map(math.isnan, box)):
            return -math.inf, True
        if start[0] == 0.0:
            return self.own_section(ray, r, c), False
        if not (known1 and known2):
            return -math.inf, False
        return self.peak(start, end, box), False

    @staticmethod
    def peak(start, end, box):
        """Greatest slope between two crossings, strictly inside their cell; -inf without one."""
        d1, r1, c1, f1, _ = start
        d2, r2, c2, f2, _ = end
        twist = box[3] - box[2] - box[1] + box[0]
        bulge = -twist * (r2 - r1) * (c2 - c1)  # f rises bulge * s * (1 - s) above its chord
        span = d2 - d1
        if bulge <= 0 or span <= 0:
            return -math.inf
        # the slope to the surface grows at the start and falls at the end, or has no top inside
        if (f2 - f1 + bulge) * d1 <= f1 * span or (f2 - f1 - bulge) * d2 >= f2 * span:
            return -math.inf
        turn = (d1 * f2 - d2 * f1) / bulge
        top = math.sqrt(d1 * d2 + span * turn)
        s = (d1 + turn) / (top + d1)
        return (f1 + s * (f2 - f1) + bulge * s * (1 - s)) / top

    def own_section(self, ray, r, c):
        """The first section, from the observer to the way out of its cell."""
        found = self.own_exit(ray, r, c)
        if found is None:
            return -math.inf
        (distance, x, y), f = found
        bulge = -f[3] * x * y
        if bulge <= 1e-11 or -f[0] >= bulge:  # less is rounding
            return -math.inf
        return (f[1] * x + f[2] * y - 2 * math.sqrt(max(0.0, -f[0] * bulge))) / distance


def walk_all(z, post_map, **scene):
    """State and clearance of every cell, by the plain walker."""
    return Walker(z, post_map, **scene).answer()
