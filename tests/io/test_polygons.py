"""Polygons of a map: they tile it, they are valid, and their areas are those of the cells."""

import itertools

import numpy as np
import pytest
import shapely
from affine import Affine
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra import numpy as arrays
from pyproj import CRS
from rasterio.features import rasterize

from viewshed.areas import cell_areas
from viewshed.errors import DataError, InputError
from viewshed.grid import CellAreas, Grid
from viewshed.io import _rings
from viewshed.io.polygons import STATES, polygonise

UTM = CRS.from_epsg(32633).to_wkt()
NORTH_UP = Affine(30, 0, 400_000, 0, -30, 6_000_000)
TRANSFORMS = {
    "north up": NORTH_UP,
    "south up": Affine(30, 0, 400_000, 0, 30, 6_000_000),
    "from the east": Affine(-30, 0, 400_000, 0, -30, 6_000_000),
    "turned": Affine(25, 10, 400_000.1, 12, -27, 6_000_000.7),
    "columns for rows": Affine(0, 30, 400_000, 30, 0, 6_000_000),
}
ALL = tuple(STATES)


def make(rows, transform=NORTH_UP, **options):
    """Polygons of an array, or of lines of text: v visible, h hidden, u unresolved, . no data."""
    visible, grid = scene(rows, transform)
    return polygonise(
        visible, grid, cell_areas(grid), **{"observer": "mast", "k": 0.13, "states": ALL} | options
    )


def scene(rows, transform=NORTH_UP, wkt=UTM):
    if isinstance(rows, str):
        values = {"v": 1, "h": 0, "u": 2, ".": 255}
        rows = [[values[letter] for letter in line] for line in rows.split()]
    visible = np.array(rows, np.uint8)
    return visible, Grid(visible.shape, transform, wkt)


def burnt(frame, grid):
    """Raster of the polygons: the state of the one that holds the centre of each cell."""
    shapes = [(g, STATES[s]) for g, s in zip(frame.geometry, frame.state, strict=True)]
    if not shapes:
        return np.full(grid.shape, 255, np.uint8)
    return rasterize(shapes, grid.shape, fill=255, transform=grid.transform, dtype="uint8")


def states_at_random(shape, seed=0, values=(0, 1, 2, 255)):
    return np.random.default_rng(seed).choice(np.array(values, np.uint8), shape)


CHECKERS = np.indices((17, 23)).sum(axis=0).astype(np.uint8) % 2
SCENES = {
    "noise": states_at_random((40, 50)),
    "two states": states_at_random((40, 50), values=(0, 1)),
    "checkers": CHECKERS,
    "checkers and voids": np.where(CHECKERS, 1, 255),
    "one row": states_at_random((1, 60)),
    "one column": states_at_random((60, 1)),
    "one cell": [[1]],
    "all visible": np.ones((9, 8)),
    "nothing known": np.full((9, 8), 255),
}


@pytest.mark.parametrize("transform", TRANSFORMS.values(), ids=TRANSFORMS)
@pytest.mark.parametrize("rows", SCENES.values(), ids=SCENES)
def test_polygons_tile_the_map(rows, transform):
    visible, grid = scene(rows, transform)
    frame = make(rows, transform).frame
    np.testing.assert_array_equal(burnt(frame, grid), visible)
    shapes = frame.geometry.to_numpy()
    assert np.all(shapely.is_valid(shapes))
    assert np.all(shapely.is_ccw(shapely.get_exterior_ring(shapes)))
    cell = abs(transform.determinant)
    known = np.count_nonzero(visible != 255) * cell
    assert np.sum(shapely.area(shapes)) == pytest.approx(known, rel=1e-9)
    assert shapely.union_all(shapes).area == pytest.approx(known, rel=1e-9)
    areas = cell_areas(grid)
    for state, value in STATES.items():
        mine = frame[frame.state == state]
        assert mine.area_m2.sum() == pytest.approx(areas.total(visible == value), rel=1e-9)
        assert mine.map_m2.sum() == pytest.approx(np.sum(visible == value) * cell, rel=1e-12)


@given(
    arrays.arrays(
        np.uint8,
        st.tuples(st.integers(1, 9), st.integers(1, 9)),
        elements=st.sampled_from([0, 1, 1, 2, 255]),
    ),
    st.sampled_from(list(TRANSFORMS)),
)
def test_any_small_map(visible, which):
    grid = Grid(visible.shape, TRANSFORMS[which], UTM)
    areas = cell_areas(grid)
    frame = polygonise(visible, grid, areas, observer="o", k=0.0, states=ALL).frame
    shapes = frame.geometry.to_numpy()
    np.testing.assert_array_equal(burnt(frame, grid), visible)
    assert np.all(shapely.is_valid(shapes))
    total = np.sum(shapely.area(shapes))
    assert shapely.union_all(shapes).area == pytest.approx(total, rel=1e-9)
    assert frame.area_m2.sum() == pytest.approx(areas.total(visible != 255), rel=1e-12)


def corners(polygon):
    """Corners of the rings of a polygon in cells: columns and rows from the top left."""
    return [
        [(int(x - 400_000) // 30, int(6_000_000 - y) // 30) for x, y in ring.coords[:-1]]
        for ring in (polygon.exterior, *polygon.interiors)
    ]


def test_rings_turn_at_every_corner_and_nowhere_else():
    frame = make("vvvv vhhv vvvv").frame
    (outer, hole), (inner,) = map(corners, frame.geometry)
    assert outer == [(0, 0), (0, 3), (4, 3), (4, 0)]
    assert sorted(hole) == sorted(inner) == [(1, 1), (1, 2), (3, 1), (3, 2)]


def test_cells_that_touch_at_a_corner_are_two_patches():
    frame = make("vh hv").frame
    assert list(frame.state) == ["visible", "visible", "hidden", "hidden"]
    assert all(len(polygon.interiors) == 0 for polygon in frame.geometry)


def test_a_hole_may_touch_the_outline_at_a_corner():
    (polygon,) = make("hvvv vhhv vvvv", states=("visible",)).frame.geometry
    outer, hole = corners(polygon)
    assert set(outer) & set(hole) == {(1, 1)}
    assert len(set(outer)) == len(outer) == 6
    assert polygon.is_valid


def test_holes_may_touch_each_other():
    (polygon,) = make("vvvv vhvv vvhv vvvv", states=("visible",)).frame.geometry
    assert len(polygon.interiors) == 2
    assert polygon.is_valid


def test_islands_in_holes_are_patches_of_their_own():
    rows = "vvvvvvv vhhhhhv vhvvvhv vhvhvhv vhvvvhv vhhhhhv vvvvvvv"
    frame = make(rows).frame
    assert [(s, len(g.interiors)) for s, g in zip(frame.state, frame.geometry, strict=True)] == [
        ("visible", 1),
        ("visible", 1),
        ("hidden", 1),
        ("hidden", 0),
    ]


def test_an_island_that_touches_the_ring_round_it_at_corners():
    frame = make("vvvvv vhhhv vhvhv vvhhv vvvvv").frame
    assert frame.state.tolist() == ["visible", "visible", "hidden"]
    assert shapely.is_valid(frame.geometry.to_numpy()).all()
    assert frame.area_m2.round(-1).tolist() == pytest.approx([17 * 900, 900, 7 * 900], rel=2e-3)


def test_shared_corners_are_equal_to_the_last_bit():
    transform = Affine(1 / 3, 1e-3, 400_000.1, 2e-3, -1 / 7, 6_000_000.7)
    visible, grid = scene(states_at_random((30, 30)), transform)
    frame = polygonise(visible, grid, cell_areas(grid), observer="o", k=0.13, states=ALL).frame
    found = np.unique(shapely.get_coordinates(frame.geometry.to_numpy()), axis=0)
    row, col = grid.rowcol(*found.T)
    x, y = grid.xy(np.round(row + 0.5) - 0.5, np.round(col + 0.5) - 0.5)
    np.testing.assert_array_equal(found, np.column_stack([x, y]))


def test_columns():
    frame = make("vvh uu. ...").frame
    assert list(frame.columns) == [
        "observer",
        "state",
        "area_m2",
        "map_m2",
        "refr_k",
        "earth_fac",
        "geometry",
    ]
    assert max(map(len, frame.columns)) <= 10
    assert frame.observer.tolist() == ["mast"] * 3
    assert frame.state.tolist() == ["visible", "unresolved", "hidden"]
    assert frame.map_m2.tolist() == [1800.0, 1800.0, 900.0]
    assert frame.refr_k.tolist() == [0.13] * 3
    assert frame.earth_fac.tolist() == pytest.approx([1 / 0.87] * 3)
    assert frame.crs == CRS.from_epsg(32633)


def test_larger_patches_come_first_and_equal_ones_by_row_whatever_the_states_asked_for():
    grid = Grid((3, 5), Affine(1e-3, 0, 10, 0, -1e-3, 0.0015), CRS.from_epsg(4326).to_wkt())
    visible, _ = scene("v.uvv ..... uu..v")  # rows 0 and 2 are equally far from the equator
    frame = polygonise(
        visible, grid, cell_areas(grid), observer="o", k=0.13, states=("unresolved", "visible")
    ).frame
    first = [tuple(g.exterior.coords[0]) for g in frame.geometry]
    row, col = (np.round(v + 0.5).astype(int) for v in grid.rowcol(*np.transpose(first)))
    assert frame.state.tolist() == ["visible"] * 3 + ["unresolved"] * 2
    assert list(zip(row, col, strict=True)) == [(0, 3), (0, 0), (2, 4), (2, 0), (0, 2)]


def test_areas_in_degrees_are_true_and_none_in_the_plane():
    visible, _ = scene("vv hv")
    grid = Grid((2, 2), Affine(0.5, 0, 10, 0, -0.5, 65), CRS.from_epsg(4326).to_wkt())
    areas = cell_areas(grid)
    frame = polygonise(visible, grid, areas, observer="o", k=0.13, states=ALL).frame
    assert frame.area_m2.tolist() == pytest.approx(
        [areas.total(visible == 1), areas.total(visible == 0)], rel=1e-14
    )
    assert frame.map_m2.isna().all()


def test_areas_in_feet_are_told_in_square_metres():
    visible, _ = scene("v")
    grid = Grid((1, 1), Affine(100, 0, 1e6, 0, -100, 2e5), CRS.from_epsg(2263).to_wkt())
    frame = polygonise(visible, grid, cell_areas(grid), observer="o", k=0.13).frame
    assert frame.map_m2.tolist() == pytest.approx([(100 * 1200 / 3937) ** 2], rel=1e-12)
    assert frame.area_m2.tolist() == pytest.approx(frame.map_m2.tolist(), rel=1e-3)


def test_single_cells_of_a_wide_grid_keep_their_area():
    grid = Grid((2, 10_000), Affine(30, 0, 300_000, 0, -30, 6_000_000), UTM)
    visible = np.full(grid.shape, 255, np.uint8)
    columns = np.array([0, 4999, 9999])
    visible[1, columns] = 1
    areas = cell_areas(grid)
    frame = polygonise(visible, grid, areas, observer="o", k=0.13).frame.sort_values("area_m2")
    np.testing.assert_allclose(frame.area_m2, np.sort(areas.at(1, columns)), rtol=1e-11)


def test_small_patches_are_left_out_and_told():
    rows = "vvv.v hhv.u ...uu"
    whole, patches = make(rows), make(rows, min_patch_m2=2000.0)
    assert patches.frame.state.tolist() == ["visible", "unresolved"]
    small = whole.frame[whole.frame.area_m2 < 2000.0]
    assert patches.dropped == len(small) == 2
    assert patches.dropped_m2 == pytest.approx(small.area_m2.sum(), rel=1e-14)
    assert {state: count for state, (count, _) in patches.left_out.items()} == {
        "visible": 1,
        "unresolved": 0,
        "hidden": 1,
    }
    assert whole.dropped == 0


def test_what_is_left_out_leaves_a_hole():
    (polygon,) = make("vvv vhv vvv", min_patch_m2=2000.0).frame.geometry
    assert len(polygon.interiors) == 1


def test_only_states_asked_for():
    patches = make("vhu", states=("hidden",))
    assert patches.frame.state.tolist() == ["hidden"]
    assert list(patches.left_out) == ["hidden"]


# --- strips of rows -------------------------------------------------------------------------------


def plain_patches(visible):
    """Cells of each patch, found by walking from cell to cell, in the order of first cells."""
    free = {(int(r), int(c)) for r, c in np.argwhere(visible != 255)}
    found = []
    while free:
        cells, edge = set(), [min(free)]
        while edge:
            r, c = edge.pop()
            if (r, c) in free and (not cells or visible[r, c] == visible[min(cells)]):
                free.remove((r, c))
                cells.add((r, c))
                edge += [(r + 1, c), (r - 1, c), (r, c + 1), (r, c - 1)]
        found.append(cells)
    return found


def plain_edges(cells):
    """Edges between cells of a patch and others, from corner to corner, the patch on the left."""
    edges = set()
    for r, c in cells:
        corners = [(r, c), (r + 1, c), (r + 1, c + 1), (r, c + 1)]  # down, right, up, left
        others = [(r, c - 1), (r + 1, c), (r, c + 1), (r - 1, c)]
        for i, other in enumerate(others):
            if other not in cells:
                edges.add((corners[i], corners[(i + 1) % 4]))
    return edges


def edges_of(polygon, grid):
    """Edges of cells that the rings of a polygon run along, from corner to corner."""
    edges = []
    for ring in (polygon.exterior, *polygon.interiors):
        row, col = (np.rint(v + 0.5).astype(int) for v in grid.rowcol(*np.array(ring.coords).T))
        corners = list(zip(row.tolist(), col.tolist(), strict=True))
        for (r, c), (to_r, to_c) in itertools.pairwise(corners):
            n = abs(to_r - r) + abs(to_c - c)
            steps = [(r + (to_r - r) * i // n, c + (to_c - c) * i // n) for i in range(n + 1)]
            edges += itertools.pairwise(steps)
    return edges


@given(
    arrays.arrays(
        np.uint8,
        st.tuples(st.integers(1, 9), st.integers(1, 9)),
        elements=st.sampled_from([0, 1, 1, 2, 255]),
    ),
    st.integers(1, 3),
    st.sampled_from([0.0, 1500.0]),
)
def test_strips_agree_with_a_plain_walk_from_cell_to_cell(visible, rows_a_strip, least):
    _, grid = scene(visible)
    areas = cell_areas(grid)
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(_rings, "_CELLS_A_CALL", rows_a_strip * grid.cols)
        patch.setattr(_rings, "_CORNERS_A_BATCH", 10)
        frame = make(visible, min_patch_m2=least).frame
    plain = {}
    for cells in plain_patches(visible):
        area = float(np.sum(areas.at(*np.transpose(list(cells)))))
        if area >= least:
            plain[frozenset(plain_edges(cells))] = visible[min(cells)], area
    found = {}
    for state, area, polygon in zip(frame.state, frame.area_m2, frame.geometry, strict=True):
        edges = edges_of(polygon, grid)
        assert len(set(edges)) == len(edges)
        found[frozenset(edges)] = STATES[state], area
    assert found.keys() == plain.keys()
    for edges, facts in found.items():
        assert facts == pytest.approx(plain[edges], rel=1e-12)
    order = [(list(STATES).index(s), -a) for s, a in zip(frame.state, frame.area_m2, strict=True)]
    assert order == sorted(order)
    assert np.all(shapely.is_valid(frame.geometry.to_numpy()))


SNAKES = np.array([[1, 1, 1, 1, 1], [0, 0, 0, 0, 1], [1, 1, 1, 0, 1], [1, 0, 0, 0, 1]] * 12)


@pytest.mark.parametrize("visible", [states_at_random((60, 40), values=(0, 0, 1)), SNAKES])
@pytest.mark.parametrize("least", [0.0, 5000.0])
@pytest.mark.parametrize("transform", [TRANSFORMS["turned"], TRANSFORMS["south up"]])
@pytest.mark.parametrize(
    ("name", "value"),
    [("_CELLS_A_CALL", 1), ("_CELLS_A_CALL", 120), ("_CORNERS_A_BATCH", 7), ("_MOST_NARROW", 9)],
)
def test_pieces_give_the_same_as_the_whole(monkeypatch, visible, least, transform, name, value):
    whole = make(visible, transform, min_patch_m2=least).frame
    monkeypatch.setattr(_rings, name, value)
    parts = make(visible, transform, min_patch_m2=least).frame
    assert parts.drop(columns="geometry").equals(whole.drop(columns="geometry"))
    assert shapely.to_wkb(parts.geometry.to_numpy()).tolist() == [
        *shapely.to_wkb(whole.geometry.to_numpy())
    ]


class Watched:
    """Rows that note what is asked of them, and change after some strips."""

    def __init__(self, visible, lasts=10**6):
        self.visible, self.lasts = visible, lasts
        self.shape, self.dtype, self.asked = visible.shape, visible.dtype, []

    def __getitem__(self, rows):
        self.asked.append(rows)
        return self.visible[rows] if len(self.asked) <= self.lasts else 1 - self.visible[rows]


def test_rows_are_asked_for_strip_by_strip_with_a_rest_after_each(monkeypatch):
    visible, grid = scene(states_at_random((7, 40)))
    monkeypatch.setattr(_rings, "_CELLS_A_CALL", 3 * 40)
    rows, rests = Watched(visible), []
    polygonise(
        rows, grid, cell_areas(grid), observer="o", k=0.13, rest=lambda: rests.append(len(rests))
    )
    assert rows.asked == [slice(0, 3), slice(3, 6), slice(6, 7)] * 3
    assert len(rests) == 9


def test_states_may_be_a_view_or_mapped_from_a_file(tmp_path):
    visible = states_at_random((30, 20))
    visible.tofile(tmp_path / "states")
    mapped = np.memmap(tmp_path / "states", np.uint8, "r", shape=visible.shape)
    want = make(visible).frame
    _, grid = scene(visible)
    for given_states in (mapped, np.asfortranarray(visible), np.repeat(visible, 2, 1)[:, ::2]):
        found = polygonise(
            given_states, grid, cell_areas(grid), observer="mast", k=0.13, states=ALL
        ).frame
        assert found.equals(want)


@pytest.mark.parametrize("lasts", [3, 4, 8])
def test_states_that_change_while_they_are_read_are_refused(monkeypatch, lasts):
    visible, grid = scene(states_at_random((6, 40), values=(0, 1)))
    monkeypatch.setattr(_rings, "_CELLS_A_CALL", 2 * 40)
    with pytest.raises(DataError, match=r"the states changed in row [024] or later .*; run again"):
        polygonise(Watched(visible, lasts), grid, cell_areas(grid), observer="o", k=0.13)


@pytest.mark.parametrize(
    ("changes", "match"),
    [
        ({"visible": np.zeros((2, 3), np.uint8)}, r"shape \(2, 3\) .* do not fit the grid"),
        ({"visible": np.zeros((2, 2), np.int16)}, "type int16 .* give uint8"),
        ({"areas": CellAreas(np.ones((3, 1)), np.ones((1, 2)), 0.0)}, r"areas of shape \(3, 2\)"),
        ({"states": ("seen",)}, "state 'seen' is not known; choose from visible, unresolved"),
        ({"min_patch_m2": -1.0}, "least area -1.0 of a patch is not usable; give 0 or more"),
        ({"min_patch_m2": float("nan")}, "least area nan"),
        ({"k": 1.5}, "k = 1.5 is refused"),
    ],
)
def test_unusable_values_are_refused(changes, match):
    visible, grid = scene("vh uv")
    values = {"visible": visible, "grid": grid, "areas": cell_areas(grid), "k": 0.13} | changes
    with pytest.raises(InputError, match=match):
        polygonise(**values, observer="o")
