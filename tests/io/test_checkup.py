"""What `viewshed check` finds out, and its picture."""

import os
import re

import numpy as np
import pytest
import rasterio
from affine import Affine

from viewshed.errors import DataError, OutputError
from viewshed.io import _survey
from viewshed.io._check_picture import DPI, STRIPE, VOID, draw_picture
from viewshed.io.checkup import check_up, told_share
from viewshed.io.elevation import open_terrain

BYTE = 255.0
SHAPE = (60, 80)
NORTH_UP = Affine(30, 0, 400_000, 0, -30, 6_000_000)


def island(shape=SHAPE):
    """A hill in the sea, which is void."""
    down, right = (np.linspace(-1, 1, n) for n in shape)
    height = 30.0 - 40.0 * np.hypot(down[:, None], right[None, :])
    return np.where(height > 0.0, height, np.nan).astype(np.float32)


def hills(shape=SHAPE):
    down, right = (np.linspace(0, 9, n) for n in shape)
    return (500 + 90 * np.sin(down)[:, None] * np.cos(right)[None, :]).astype(np.float32)


@pytest.fixture
def look(make_dem):
    """Give a function that makes a grid and checks it."""

    def check(array, options=None, **profile):
        path = make_dem(array=array, **profile)
        return check_up(lambda: open_terrain(path, **(options or {})))

    return check


# --- what is found ----------------------------------------------------------------------------


def test_facts(look):
    checkup = look(hills(), unit="m", crs="EPSG:32633+5773")
    told = checkup.as_json()
    assert told["grid"]["rows"], told["grid"]["columns"] == SHAPE
    assert told["files"]["drivers"] == ["GTiff"]
    assert told["files"]["types"] == ["float32"]
    assert told["files"]["tiles"] == 1
    assert told["crs"]["name"] == "WGS 84 / UTM zone 33N + EGM96 height"
    assert told["crs"]["unit"] == "metre"
    assert told["heights"]["unit"] == "m"
    assert told["heights"]["unit_origin"] == "band"
    assert told["heights"]["datum"] == "EGM96 height"
    assert told["heights"]["lowest_m"] == hills().min()
    assert told["heights"]["highest_m"] == hills().max()
    assert told["heights"]["step"] is None
    assert told["voids"] == {
        "cells": 0, "share": 0.0, "in_no_tile": 0,
        "rims": 0, "rims_near_zero": 0, "likely_sea": False,
    }  # fmt: skip
    west, south, east, north = told["grid"]["lonlat_bounds"]
    assert (west, north) == pytest.approx((13.469, 54.139), abs=1e-3)
    assert (east - west, north - south) == pytest.approx((0.0371, 0.0169), abs=2e-3)
    assert told["notes"] == told["warnings"] == []


def test_true_cell_size_of_degrees(look):
    transform = Affine(1 / 1200, 0, 10, 0, -1 / 1200, 60 + 30 / 1200)
    checkup = look(hills(), crs="EPSG:4326", transform=transform)
    # a degree at 60 degrees on WGS 84: 55 800 m of longitude, 111 412 m of latitude
    assert checkup.cell_m == pytest.approx((55_800 / 1200, 111_412 / 1200), rel=1e-4)
    assert ("CRS", "WGS 84 (EPSG:4326), in units of degree") in checkup.rows()


def test_true_cell_size_of_web_mercator(look):
    checkup = look(hills(), crs="EPSG:3857", transform=Affine(30, 0, 1e6, 0, -30, 8_399_737))
    assert checkup.cell_m == pytest.approx((15.0, 15.0), rel=0.01)


def test_sea_is_recognised(look):
    checkup = look(island())
    voids = int(np.isnan(island()).sum())
    assert checkup.voids == voids
    assert checkup.as_json()["voids"]["share"] == voids / island().size
    assert checkup.is_sea_likely
    (note,) = checkup.notes
    assert "likely sea; if they are, state it with --void-height 0" in note
    assert ("Voids", f"{voids} cells, {told_share(voids, island().size)}") in checkup.rows()


def test_voids_in_the_hills_are_no_sea(look):
    array = hills()
    array[20:30, 20:30] = np.nan
    checkup = look(array)
    assert (checkup.found.rims, checkup.found.rims_near_zero) == (40, 0)
    assert checkup.notes == []


def test_voids_that_are_stated_are_none(look):
    checkup = look(island(), {"void_height": 0.0})
    assert checkup.voids == 0
    assert checkup.notes == []


@pytest.mark.parametrize("cells", [1, 200, 1 << 22])
def test_strips_change_nothing(look, monkeypatch, cells):
    whole = look(island())
    monkeypatch.setattr(_survey, "_STRIP_CELLS", cells)
    parts = look(island())
    assert parts.as_json() == whole.as_json()
    for one, other in zip(parts.found.overview(), whole.found.overview(), strict=True):
        np.testing.assert_array_equal(one, other)


def test_overview_is_means_of_blocks(look, monkeypatch):
    monkeypatch.setattr(_survey, "_OVERVIEW", 25)
    found = look(island()).found
    heights, voids = found.overview()
    assert (found.by, found.bx) == (3, 4)
    blocks = island().reshape(20, 3, 20, 4)
    np.testing.assert_allclose(voids, np.isnan(blocks).mean(axis=(1, 3)))
    known = voids < 1
    means = np.nansum(blocks, axis=(1, 3))[known] / (12 * (1 - voids[known]))
    np.testing.assert_allclose(heights[known], means, rtol=1e-5)
    assert np.isnan(heights[~known]).all()


@pytest.mark.parametrize(
    ("change", "told"),
    [
        (lambda z: z.round(), "heights come in steps of 1 m"),
        (lambda z: z * 20, "no ground is as high as 11[0-9]{3} m; if the heights are feet"),
        (lambda z: z - 3000, "no dry ground is as low as -2590 m"),
    ],
)
def test_notes(look, change, told):
    (note,) = look(change(hills())).notes
    assert re.search(told, note), note


def test_feet(look):
    feet = np.round(hills() / 0.3048)
    checkup = look(feet, {"height_unit": "ft"})
    assert checkup.step.name == "whole feet"
    assert ("Unit", "ft, as stated by --height-unit; datum unstated") in checkup.rows()
    assert checkup.found.high == pytest.approx(hills().max(), abs=0.16)


def test_memory(look):
    memory = look(hills()).memory
    cells = SHAPE[0] * SHAPE[1]
    assert memory["whole_grid"]["visible"] == 750e6 + 5 * cells
    assert memory["whole_grid"]["all_layers"] == 750e6 + 30 * cells
    assert memory["default_range"] == memory["whole_grid"]  # the range reaches past the grid


def test_memory_of_a_range_inside_the_grid(look):
    transform = Affine(1000, 0, 400_000, 0, -1000, 6_000_000)
    checkup = look(hills(), transform=transform)
    assert 60 * 61 <= checkup.range_cells < 60 * 70 < checkup.cells
    assert checkup.memory["default_range"]["visible"] == 750e6 + 5 * checkup.range_cells


def test_grid_without_any_height(look):
    checkup = look(np.full(SHAPE, np.nan, np.float32))
    told = checkup.as_json()
    assert told["heights"]["lowest_m"] is told["heights"]["highest_m"] is None
    assert told["voids"]["share"] == 1.0
    assert not checkup.is_sea_likely
    rows = dict(checkup.rows())
    assert rows["Heights"] == "none is known"
    assert rows["Steps"] == "no heights"


def test_grid_that_is_nowhere(look, tmp_path):
    checkup = look(hills(), crs="EPSG:3035", transform=Affine(30, 0, 5e9, 0, -30, 5e9))
    told = checkup.as_json()
    assert told["cell_m"] == [None, None]
    assert told["grid"]["lonlat_bounds"] is None
    assert dict(checkup.rows())["Extent"] == "in no known place"
    draw_picture(tmp_path / "nowhere.png", checkup)


def test_level_grid(look):
    assert dict(look(np.full(SHAPE, 7, np.float32)).rows())["Steps"] == "all heights are the same"


def test_warnings_are_part_of_what_is_found(look, monkeypatch):
    array = hills()
    array[:, 3] = -9999
    monkeypatch.setattr(_survey, "_STRIP_CELLS", 400)
    checkup = look(array)
    (warned,) = checkup.warnings
    assert f"{SHAPE[0]} cells of -9999, not declared as nodata" in warned
    assert ("Warning", warned) in checkup.rows()


def test_folder_of_tiles(make_dem, tmp_path):
    (tmp_path / "tiles").mkdir()
    for name, col in (("tiles/a.tif", 0), ("tiles/b.tif", 160)):
        make_dem(name, hills(), transform=NORTH_UP @ Affine.translation(col, 0))
    checkup = check_up(lambda: open_terrain(tmp_path / "tiles"))
    assert checkup.as_json()["files"]["given"] == [str(tmp_path / "tiles")]
    assert checkup.terrain.grid.shape == (60, 240)
    assert checkup.voids == 60 * 80  # the tile between them is missing
    assert dict(checkup.rows())["Files"] == "2 tiles, GTiff, float32"


def test_progress_reaches_the_end(make_dem):
    told = []
    path = make_dem(array=hills())
    check_up(lambda: open_terrain(path), lambda done, total: told.append((done, total)))
    assert told[-1] == (60, 60)


def test_broken_file(make_dem):
    path = make_dem(array=np.random.default_rng(0).random((300, 300), np.float32))
    path.write_bytes(path.read_bytes()[:20_000])
    with pytest.raises(DataError, match="truncated or damaged"):
        check_up(lambda: open_terrain(path))


@pytest.mark.parametrize(
    ("part", "whole", "told"),
    [(1, 3, "33.3 %"), (1, 10**6, "less than 0.01 %"), (99_999, 100_000, "more than 99.9 %"),
     (5, 5, "100 %")],
)  # fmt: skip
def test_shares(part, whole, told):
    assert told_share(part, whole) == told


# --- the picture ------------------------------------------------------------------------------


def pixels(path):
    with rasterio.open(path) as file:
        return np.moveaxis(file.read()[:3], 0, -1)


def is_colour(rgb, colour):
    return (np.abs(rgb / BYTE - np.array(colour)) < 0.01).all(axis=-1)


@pytest.mark.filterwarnings("ignore::rasterio.errors.NotGeoreferencedWarning")
def test_voids_stand_out(look, tmp_path):
    draw_picture(tmp_path / "sea.png", look(island()))
    rgb = pixels(tmp_path / "sea.png")
    assert is_colour(rgb, VOID).sum() > 20_000
    assert is_colour(rgb, STRIPE).sum() > 20_000
    draw_picture(tmp_path / "land.png", look(hills()))
    assert is_colour(pixels(tmp_path / "land.png"), VOID).sum() == 0
    assert rgb.shape[0] < 10 * DPI
    assert rgb.shape[1] < 11 * DPI


@pytest.mark.filterwarnings("ignore::rasterio.errors.NotGeoreferencedWarning")
def test_single_voids_are_not_lost_between_pixels(look, tmp_path):
    array = hills((1000, 1300))
    array[::200, ::100] = np.nan
    checkup = look(array)
    draw_picture(tmp_path / "specks.png", checkup)
    assert is_colour(pixels(tmp_path / "specks.png"), VOID).sum() >= checkup.voids


@pytest.mark.filterwarnings("ignore::rasterio.errors.NotGeoreferencedWarning")
@pytest.mark.parametrize(
    "transform",
    [
        NORTH_UP,
        Affine(30, 0, 4e5, 0, 30, 6e6),
        NORTH_UP @ Affine.rotation(30),
        NORTH_UP @ Affine.scale(1, 30),
        NORTH_UP @ Affine.scale(40, 1),
    ],
)
def test_any_grid_is_drawn(look, tmp_path, transform):
    draw_picture(tmp_path / "grid.png", look(island(), transform=transform))
    assert is_colour(pixels(tmp_path / "grid.png"), VOID).any()


@pytest.mark.parametrize("array", [np.full(SHAPE, 5.0), np.full(SHAPE, np.nan), np.ones((1, 1))])
def test_level_void_and_tiny_grids_are_drawn(look, tmp_path, array):
    draw_picture(tmp_path / "grid.png", look(array.astype(np.float32)))
    assert (tmp_path / "grid.png").stat().st_size > 1000


def test_same_grid_same_bytes(look, tmp_path):
    for name in ("one.png", "two.png"):
        draw_picture(tmp_path / name, look(island()))
    one = (tmp_path / "one.png").read_bytes()
    assert one == (tmp_path / "two.png").read_bytes()
    assert b"tIME" not in one


def test_existing_picture_is_kept(look, tmp_path):
    path = tmp_path / "mine.png"
    path.write_bytes(b"mine")
    with pytest.raises(OutputError, match=r"mine.png: exists; use --overwrite"):
        draw_picture(path, look(hills()))
    assert path.read_bytes() == b"mine"
    draw_picture(path, look(hills()), overwrite=True)
    assert path.read_bytes().startswith(b"\x89PNG")
    assert sorted(p.name for p in tmp_path.iterdir()) == ["dem.tif", "mine.png"]


@pytest.mark.parametrize(
    ("name", "told"), [("", "is a folder; give the name"), ("gone/a.png", "no such folder")]
)
def test_places_that_hold_no_picture(look, tmp_path, name, told):
    with pytest.raises(OutputError, match=told):
        draw_picture(tmp_path / name, look(hills()))


def test_full_disk_leaves_nothing_behind(look, tmp_path, monkeypatch):
    def full(_):
        raise OSError(28, "No space left on device")

    checkup = look(hills())
    monkeypatch.setattr(os, "fsync", full)
    with pytest.raises(OutputError, match=r"a.png: cannot be written: No space left on device"):
        draw_picture(tmp_path / "a.png", checkup)
    assert [p.name for p in tmp_path.iterdir()] == ["dem.tif"]
