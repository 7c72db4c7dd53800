"""Many observers on the command line: given one by one, read from a file, told in tables."""

import csv
import json

import numpy as np
import pytest
import rasterio
from click.testing import CliRunner

from tests.cli.test_map import CELL, NORTH, WEST, hills, write_dem
from viewshed.cli.main import cli


@pytest.fixture
def dem(tmp_path):
    return write_dem(tmp_path / "hills.tif")


def at(col, row):
    return f"{WEST + CELL * (col + 0.5)},{NORTH - CELL * (row + 0.5)}"


def call(dem, out, *args):
    words = ["map", dem, "--range", "600", "--picture", "none", "--out", out, *args]
    return CliRunner().invoke(cli, [str(w) for w in words], prog_name="viewshed")


def read(path):
    with rasterio.open(path) as file:
        return file.read(1), file.nodata


def test_observers_one_by_one_with_and_without_names(dem, tmp_path):
    out = tmp_path / "out"
    result = call(
        dem, out, "--observer", at(40, 40), "--observer", f"West hill={at(20, 40)}",
        "--layers", "count,count-unresolved,who", "--each",
    )  # fmt: skip
    assert result.exit_code == 0, result.output
    for name in ("visible_observer 1.tif", "visible_West hill.tif", "summary.csv"):
        assert (out / name).is_file()
    count, nodata = read(out / "count.tif")
    assert nodata == 65535
    assert {0, 1, 2} <= set(np.unique(count).tolist())
    who, _ = read(out / "who.tif")
    seen = count != 65535
    np.testing.assert_array_equal(((who & 1) + (who >> 1))[seen], count[seen])
    table = result.stderr.splitlines()
    heading = next(i for i, line in enumerate(table) if line.startswith("Observer  "))
    assert table[heading + 1].startswith("observer 1")
    assert table[heading + 2].startswith("West hill")
    with (out / "summary.csv").open(encoding="utf-8") as file:
        assert [row["observer"] for row in csv.DictReader(file)] == ["observer 1", "West hill"]


def test_a_file_of_observers_goes_before_the_options(dem, tmp_path):
    x, y = at(40, 40).split(",")
    sites = tmp_path / "sites.csv"
    sites.write_text(
        f"name,x,y,eye_height,range\nLow,{x},{y},,\nHigh,{x},{y},50 m,300\n", encoding="utf-8"
    )
    out = tmp_path / "out"
    result = call(dem, out, "--observers", sites, "--eye-height", "3m")
    assert result.exit_code == 0, result.output
    record = json.loads((out / "record.json").read_text(encoding="utf-8"))
    low, high = record["observers"]
    assert (low["eye_height_m"], low["range_m"]) == (3.0, 600.0)
    assert (high["eye_height_m"], high["range_m"]) == (50.0, 300.0)
    assert record["question"].startswith("from 3 to 50 m above ground at 2 points")


def test_both_ways_at_once(dem, tmp_path):
    x, y = at(40, 40).split(",")
    sites = tmp_path / "sites.csv"
    sites.write_text(f"name,x,y\nA,{x},{y}\n", encoding="utf-8")
    result = call(dem, tmp_path / "out", "--observer", f"B={at(20, 40)}", "--observers", sites)
    assert result.exit_code == 0, result.output
    record = json.loads((tmp_path / "out" / "record.json").read_text(encoding="utf-8"))
    assert [one["name"] for one in record["observers"]] == ["B", "A"]


def test_no_observer_is_a_wrong_call(dem, tmp_path):
    result = call(dem, tmp_path / "out")
    assert result.exit_code == 2
    assert "--observer X,Y or many with --observers FILE" in result.stderr
    assert not (tmp_path / "out").exists()


@pytest.mark.parametrize(
    ("text", "told"), [("=1,2", "no name before"), ("A=1", "'1'"), ("A=b,c", "'b,c'")]
)
def test_a_name_without_a_position_is_a_wrong_call(dem, tmp_path, text, told):
    result = call(dem, tmp_path / "out", "--observer", text)
    assert result.exit_code == 2
    assert told in result.stderr


def test_a_missing_file_of_observers_is_one_line(dem, tmp_path):
    result = call(dem, tmp_path / "out", "--observers", tmp_path / "none.csv")
    assert result.exit_code == 1
    assert result.stderr.count("\n") == 1
    assert "none.csv: no such file" in result.stderr


def test_many_observers_are_told_in_part(dem, tmp_path):
    lines = ["name,x,y"] + [f"P{n},{at(20 + n, 40)}" for n in range(25)]
    sites = tmp_path / "sites.csv"
    sites.write_text("\n".join(lines), encoding="utf-8")
    result = call(dem, tmp_path / "out", "--observers", sites, "--range", "200")
    assert result.exit_code == 0, result.output
    assert "P19" in result.stderr
    assert "P20" not in result.stderr
    assert "and 5 more in summary.csv" in result.stderr
    assert len((tmp_path / "out" / "summary.csv").read_text().splitlines()) == 26


def test_a_surface_hides_and_is_told(dem, tmp_path):
    woods = hills() + np.where(np.arange(80) % 10 == 5, 30, 0).astype(np.float32)[None, :]
    dsm = write_dem(tmp_path / "woods.tif", woods.astype(np.float32))
    bare, grown = tmp_path / "bare", tmp_path / "grown"
    assert call(dem, bare, "--observer", at(40, 40), "--eye-height", "4").exit_code == 0
    result = call(dem, grown, "--observer", at(40, 40), "--eye-height", "4", "--surface", dsm)
    assert result.exit_code == 0, result.output
    assert "Surface" in result.stderr
    one, two = read(bare / "visible.tif")[0], read(grown / "visible.tif")[0]
    assert np.all(two[one == 0] == 0)
    assert (two == 1).sum() < (one == 1).sum()
    record = json.loads((grown / "record.json").read_text(encoding="utf-8"))
    assert record["surface"]["method"] == "same grid"
    assert record["surface"]["median_over_ground_m"] == 0.0
    assert record["options"]["surface"] == ["../woods.tif"]
    assert "over the surface woods.tif" in record["question"]


def test_an_observer_under_trees_is_told_by_name(dem, tmp_path):
    dsm = write_dem(tmp_path / "woods.tif", hills() + np.float32(15))
    result = call(dem, tmp_path / "out", "--observer", f"Hide={at(40, 40)}", "--surface", dsm)
    assert result.exit_code == 1
    assert "'Hide'" in result.stderr
    assert "below the surface" in result.stderr
    assert not (tmp_path / "out").exists()


def test_a_mask_needs_a_height(dem, tmp_path):
    result = call(dem, tmp_path / "out", "--observer", at(40, 40), "--void-mask", "sea.gpkg")
    assert result.exit_code == 2
    assert "add --void-height, like 0" in result.stderr


@pytest.mark.parametrize(
    ("words", "told"),
    [
        (["--min-patch", "1ha"], "give --polygons too"),
        (["--surface-crs", "EPSG:4326"], "give --surface too"),
        (["--surface-height-unit", "ft"], "give --surface too"),
    ],
)
def test_options_that_say_nothing_alone_are_wrong_calls(dem, tmp_path, words, told):
    result = call(dem, tmp_path / "out", "--observer", at(40, 40), *words)
    assert result.exit_code == 2
    assert told in result.stderr


def test_polygons_that_are_left_out_are_told(tmp_path):
    rough = np.random.default_rng(5).random((80, 80), dtype=np.float32)
    dem = write_dem(tmp_path / "rough.tif", rough)
    asked = ["--observer", at(40, 40), "--polygons", "fgb"]
    some = call(dem, tmp_path / "some", *asked, "--min-patch", "4000m2")
    assert some.exit_code == 0, some.output
    assert "Polygons: visible, left out" in some.stderr
    none = call(dem, tmp_path / "none", *asked, "--min-patch", "50km2", "-q")
    assert none.exit_code == 0
    assert "Warning: every polygon is smaller than 5e+07 m2" in none.stderr


def test_a_surface_in_an_assumed_unit_is_told(dem, tmp_path):
    dsm = write_dem(tmp_path / "dsm.tif", hills() + np.float32(1))
    out = tmp_path / "out"
    result = call(dem, out, "--observer", at(40, 40), "--eye-height", "4", "--surface", dsm)
    assert "Surface heights" in result.stderr
    surface = json.loads((out / "record.json").read_text(encoding="utf-8"))["surface"]
    assert (surface["unit_from"], surface["metres_per_unit"]) == ("assumed metres", 1.0)


def test_names_without_letters_on_the_page_become_numbers(dem, tmp_path):
    words = ["--observer", f"Hut={at(40, 40)}", "--observer", f"\u5c55\u671b={at(20, 40)}"]
    result = call(dem, tmp_path / "out", *words, "--picture", "png")
    assert result.exit_code == 0, result.output
    assert "no letters for '\u5c55\u671b'" in result.stderr


def test_what_was_warned_of_on_opening_is_in_the_record(tmp_path):
    feet = write_dem(tmp_path / "hills.tif", crs="EPSG:32632+5703")
    x, y = at(40, 40).split(",")
    sites = tmp_path / "sites.csv"
    sites.write_text(f"x,y,colour\n{x},{y},red\n", encoding="utf-8")
    out = tmp_path / "out"
    result = call(feet, out, "--observers", sites, "--height-unit", "ft")
    assert result.exit_code == 0, result.output
    noted = json.loads((out / "record.json").read_text(encoding="utf-8"))["warnings"]
    for told in ("columns not used: colour", "taken as ft"):
        assert sum(told in note for note in noted) == 1
        assert result.stderr.count(told) == 1


def test_names_of_both_ways_are_each_their_own(dem, tmp_path):
    x, y = at(40, 40).split(",")
    sites = tmp_path / "sites.csv"
    sites.write_text(f"name,x,y\nA,{x},{y}\n", encoding="utf-8")
    result = call(dem, tmp_path / "out", "--observer", f"A={at(20, 40)}", "--observers", sites)
    assert result.exit_code == 1
    assert "two observers are called 'A'" in result.stderr
    assert not (tmp_path / "out").exists()


def test_a_name_that_is_no_file_name_is_refused_before_the_grid_is_read(tmp_path):
    words = ["--observer", f"a/b={at(20, 40)}", "--each"]
    result = call(tmp_path / "no such.tif", tmp_path / "out", *words)
    assert result.exit_code == 1
    assert "'a/b'" in result.stderr


def test_voids_that_are_stated_are_those_of_the_surface_too(tmp_path):
    """Sea that both grids deliver as nodata; a void of the surface alone stays one."""
    ground, cover = hills(), hills() + np.float32(1)
    ground[60:], cover[60:], cover[30, 50] = np.nan, np.nan, np.nan
    dem, dsm = write_dem(tmp_path / "dem.tif", ground), write_dem(tmp_path / "dsm.tif", cover)
    words = ["--observer", at(40, 40), "--eye-height", "80", "--surface", dsm, "--range", "1km"]
    assert call(dem, tmp_path / "void", *words).exit_code == 0
    assert call(dem, tmp_path / "sea", *words, "--void-height", "0").exit_code == 0
    void, sea = (read(tmp_path / name / "visible.tif")[0] for name in ("void", "sea"))
    assert void.shape == sea.shape
    assert (sea == 2).sum() < (void == 2).sum() + (void[47:] == 255).sum()
    row, col = 40 - 33, 40 - 33  # the observer is in the middle of the circle of 33 cells
    assert sea.shape == (67, 67)
    assert sea[60 - row :, col + 20].tolist().count(2) == 0
    assert sea[30 - row, 50 - col] == 2
