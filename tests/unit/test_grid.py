"""Grid, post map and cell areas as containers of numbers."""

import numpy as np
import pytest
from affine import Affine

from viewshed.errors import InputError
from viewshed.grid import CellAreas, Grid, PostMap

TURNED = Affine.translation(500.0, 800.0) @ Affine.rotation(30.0) @ Affine.scale(2.0, -3.0)
TRANSFORMS = [
    Affine(30.0, 0.0, 5e5, 0.0, -30.0, 7e6),
    Affine(30.0, 0.0, 5e5, 0.0, 30.0, 7e6),
    Affine(-30.0, 0.0, 5e5, 0.0, -30.0, 7e6),
    Affine(1 / 3600, 0.0, -180.0, 0.0, -1 / 3600, 65.0),
    TURNED,
    Affine(0.0, 10.0, 5.0, -10.0, 0.0, 7.0),
]


def post_map(**changes):
    values = {
        "row0": 3.5,
        "col0": 7.25,
        "jacobian": [[30.0, 0.0], [0.0, -30.0]],
        "scale": 16.0,
        "cp": [[0.0, 0.0], [16.0, 0.0]],
        "cq": [[0.0, 16.0], [0.0, 0.0]],
        "error_m": 0.0,
        "error_cells": 0.0,
        "lon": 0.0,
        "lat": 0.0,
        "radius_meridian": 6.3e6,
        "radius_prime_vertical": 6.4e6,
    }
    return PostMap(**(values | changes))


def test_whole_numbers_are_cell_centres():
    grid = Grid((4, 5), Affine(10.0, 0.0, 100.0, 0.0, -10.0, 200.0), "")
    x, y = grid.xy(0, 0)
    assert (float(x), float(y)) == (105.0, 195.0)
    assert grid.bounds == (100.0, 160.0, 150.0, 200.0)
    assert (grid.rows, grid.cols) == (4, 5)


@pytest.mark.parametrize("transform", TRANSFORMS)
def test_rowcol_undoes_xy(transform):
    grid = Grid((400, 500), transform, "")
    rows, cols = np.meshgrid([-3.25, 0.0, 17.5, 399.0], [-0.5, 0.0, 123.456, 499.0])
    back = grid.rowcol(*grid.xy(rows, cols))
    assert np.allclose(back[0], rows, rtol=0.0, atol=1e-6)
    assert np.allclose(back[1], cols, rtol=0.0, atol=1e-6)


@pytest.mark.parametrize("transform", TRANSFORMS)
def test_window_keeps_places(transform):
    grid = Grid((40, 50), transform, "wkt")
    part = grid.window(7, 11, 5, 6)
    assert part.shape == (5, 6)
    assert part.crs_wkt == "wkt"
    assert np.allclose(part.xy(2, 3), grid.xy(9, 14), rtol=0.0, atol=1e-8)


def test_bounds_of_a_turned_grid_hold_all_corners():
    grid = Grid((4, 5), TURNED, "")
    left, bottom, right, top = grid.bounds
    x, y = grid.xy([-0.5, -0.5, 3.5, 3.5], [-0.5, 4.5, -0.5, 4.5])
    assert (left, bottom, right, top) == (x.min(), y.min(), x.max(), y.max())


@pytest.mark.parametrize("window", [(-1, 0, 2, 2), (0, 0, 5, 2), (0, 4, 1, 2), (0, 0, 0, 1)])
def test_window_outside_is_refused(window):
    with pytest.raises(InputError, match="is not inside the grid of 4 x 5"):
        Grid((4, 5), TURNED, "").window(*window)


@pytest.mark.parametrize("shape", [(0, 5), (5, -1), (5,)])
def test_empty_shape_is_refused(shape):
    with pytest.raises(InputError, match="grid shape"):
        Grid(shape, TURNED, "")


@pytest.mark.parametrize(
    "numbers",
    [
        (0.0, 0.0, 0.0, 0.0, -1.0, 0.0),
        (1.0, 2.0, 0.0, 2.0, 4.0, 0.0),
        (float("nan"), 0.0, 0.0, 0.0, -1.0, 0.0),
        (1.0, 0.0, float("inf"), 0.0, -1.0, 0.0),
    ],
)
def test_useless_transform_is_refused(numbers):
    with pytest.raises(InputError, match="transform"):
        Grid((4, 5), Affine(*numbers), "")


def test_grid_can_be_compared_and_hashed():
    assert len({Grid((4, 5), TURNED, ""), Grid((4, 5), TURNED, "")}) == 1


def test_linear_post_map_is_exact_to_the_last_bit():
    found = post_map(col0=1 / 3, row0=2 / 7)
    rows, cols = np.arange(9.0)[:, None], np.arange(13.0)[None, :]
    p, q = found.pq(rows, cols)
    assert np.array_equal(p, np.broadcast_to(cols - 1 / 3, (9, 13)))
    assert np.array_equal(q, np.broadcast_to(rows - 2 / 7, (9, 13)))
    assert found.degree == 1


def test_post_map_sums_its_powers():
    rng = np.random.default_rng(4)
    cp, cq = rng.normal(size=(2, 4, 4)) * (np.add.outer(np.arange(4), np.arange(4)) <= 3)
    jacobian = rng.normal(size=(2, 2))
    found = post_map(cp=cp, cq=cq, jacobian=jacobian)
    row, col = 5.0, -2.0
    x, y = (col - 7.25) / 16.0, (row - 3.5) / 16.0
    p, q = (sum(c[i, j] * x**i * y**j for i in range(4) for j in range(4)) for c in (cp, cq))
    assert np.allclose(found.pq(row, col), (p, q), rtol=1e-13)
    assert np.allclose(found.en(row, col), jacobian @ (p, q), rtol=1e-13)


def test_post_map_is_read_only():
    with pytest.raises(ValueError, match="read-only"):
        post_map().cp[0, 0] = 1.0


def test_areas_of_a_mask_are_the_sum_of_the_cells():
    rng = np.random.default_rng(2)
    areas = CellAreas(rng.uniform(1, 2, (700, 3)), rng.uniform(1, 2, (3, 90)), 0.0)
    mask = rng.random((700, 90)) < 0.3
    cells = areas.at(np.arange(700)[:, None], np.arange(90)[None, :])
    assert areas.shape == cells.shape == mask.shape
    assert areas.total(mask) == pytest.approx(cells[mask].sum(), rel=1e-13)
    assert areas.total(mask.astype(np.uint8) * 7) == areas.total(mask)
    assert areas.total(np.zeros_like(mask)) == 0.0


def test_areas_by_row_count_cells():
    areas = CellAreas(np.array([[2.0], [3.0]]), np.ones((1, 4)), 0.0)
    assert areas.total([[1, 0, 0, 1], [0, 1, 1, 1]]) == 2 * 2.0 + 3 * 3.0


def test_areas_refuse_a_mask_of_another_shape():
    with pytest.raises(InputError, match="does not fit"):
        CellAreas(np.ones((2, 1)), np.ones((1, 4)), 0.0).total(np.ones((4, 2)))
