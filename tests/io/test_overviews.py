"""Coarser copies of a raster: cell for cell what most cells say, or the nearest one."""

from collections import Counter
from math import ceil

import numpy as np
import pytest
import rasterio
from affine import Affine

from viewshed.errors import OutputError
from viewshed.grid import Grid
from viewshed.io import _overviews, raster
from viewshed.io._overviews import sizes
from viewshed.io.raster import write_cog

NODATA = 255


def states(shape, seed=0):
    rng = np.random.default_rng(seed)
    array = rng.choice(np.array([0, 1, 2, NODATA], np.uint8), shape, p=[0.4, 0.3, 0.15, 0.15])
    array[: shape[0] // 4] = NODATA
    array[-shape[0] // 4 :] = 1
    return array


def write(path, array, how, nodata, **options):
    grid = Grid(array.shape, Affine(30, 0, 4e5, 0, -30, 6e6), "EPSG:32633")
    said = {"description": "d", "unit": "", "tags": {}}
    return write_cog(
        path, array, grid, nodata=nodata, overview=how, creation_options=options, **said
    )


def copies(path):
    with rasterio.open(path) as file:
        levels = len(file.overviews(1))
    found = []
    for level in range(levels):
        with rasterio.open(path, overview_level=level) as file:
            found.append(file.read(1))
    return found


def span(n, ratio, size):
    """Give the finer rows or columns of a coarser one."""
    return slice(int(n * ratio + 1e-8), min(ceil((n + 1) * ratio - 1e-8), size))


def most_frequent(cells):
    """Give the value that is the first to be the most frequent."""
    seen, best = Counter(), NODATA
    for value in cells.ravel().tolist():
        if value != NODATA:
            seen[value] += 1
            if seen[value] > seen[best]:
                best = value
    return best


def coarser(finer, how):
    """Make the next coarser copy cell by cell."""
    rows, cols = finer.shape[0] // 2, finer.shape[1] // 2
    down, right = finer.shape[0] / rows, finer.shape[1] / cols
    made = np.empty((rows, cols), finer.dtype)
    for r in range(rows):
        for c in range(cols):
            if how == "nearest":
                made[r, c] = finer[int(0.5 + r * down), int(0.5 + c * right)]
            else:
                part = finer[span(r, down, finer.shape[0]), span(c, right, finer.shape[1])]
                made[r, c] = most_frequent(part)
    return made


@pytest.mark.parametrize("shape", [(256, 300), (257, 131), (301, 64), (129, 129)])
@pytest.mark.parametrize("how", ["mode", "nearest"])
@pytest.mark.parametrize("strip", [1, 1 << 20])
def test_copies_are_made_cell_by_cell(tmp_path, monkeypatch, shape, how, strip):
    monkeypatch.setattr(_overviews, "_STRIP_CELLS", strip)
    array = states(shape) if how == "mode" else np.random.default_rng(1).normal(size=shape)
    array = array if how == "mode" else array.astype(np.float32)
    write(tmp_path / "a.tif", array, how, NODATA if how == "mode" else np.nan, BLOCKSIZE="128")
    found = copies(tmp_path / "a.tif")
    assert [copy.shape for copy in found] == sizes(shape, 128)
    finer = array
    for copy in found:
        np.testing.assert_array_equal(copy, coarser(finer, how))
        finer = copy


def test_other_values_than_states(tmp_path):
    array = np.random.default_rng(2).integers(0, 250, (200, 200)).astype(np.uint8)
    array[:100] = np.where(array[:100] > 125, 77, 3)
    write(tmp_path / "a.tif", array, "mode", NODATA, BLOCKSIZE="128")
    np.testing.assert_array_equal(copies(tmp_path / "a.tif")[0], coarser(array, "mode"))


@pytest.mark.parametrize("shape", [(3, 4000), (100, 120), (1, 1)])
def test_narrow_and_small_rasters(tmp_path, shape):
    write(tmp_path / "a.tif", states(shape), "mode", NODATA, BLOCKSIZE="128")
    with rasterio.open(tmp_path / "a.tif") as file:
        np.testing.assert_array_equal(file.read(1), states(shape))
    assert [p.name for p in tmp_path.iterdir()] == ["a.tif"]


def test_names_that_mean_something_to_xml(tmp_path):
    path = tmp_path / "a & b <c> \u00fc.tif"
    write(path, states((200, 200)), "mode", NODATA, BLOCKSIZE="128")
    assert len(copies(path)) == 1


def test_a_copy_that_was_cut_short_is_found(tmp_path, monkeypatch):
    """A full disk can be silent."""
    copy = raster._copy

    def bad_copy(source, draft, made, options):
        with rasterio.open(f"{draft}-1.tif", "r+") as file:
            cells = file.read(1)
            cells[-1, -1] ^= 1
            file.write(cells, 1)
        copy(source, draft, made, options)

    monkeypatch.setattr(raster, "_copy", bad_copy)
    with pytest.raises(OutputError, match=r"a\.tif: a coarser copy does not read back"):
        write(tmp_path / "a.tif", states((200, 200)), "mode", NODATA, BLOCKSIZE="128")
    assert not list(tmp_path.iterdir())
