"""`viewshed map` from the command line to the files."""

import json

import numpy as np
import pytest
import rasterio
from affine import Affine
from click.testing import CliRunner

from viewshed.cli.main import cli

CELL, NORTH, WEST, SIZE = 30.0, 4_650_000.0, 500_000.0, 80
MIDDLE = f"{WEST + CELL * SIZE / 2},{NORTH - CELL * SIZE / 2}"


def hills():
    """Two ridges, the observer's place on level ground between them."""
    cols = np.arange(SIZE, dtype=np.float32)
    profile = 100 * np.exp(-(((cols - 20) / 4) ** 2)) + 60 * np.exp(-(((cols - 60) / 4) ** 2))
    return np.broadcast_to(profile, (SIZE, SIZE)).astype(np.float32)


def write_dem(path, heights=None, *, crs="EPSG:32632", **profile):
    heights = hills() if heights is None else heights
    facts = {
        "driver": "GTiff",
        "height": heights.shape[-2],
        "width": heights.shape[-1],
        "count": 1,
        "dtype": heights.dtype.name,
        "transform": Affine(CELL, 0, WEST, 0, -CELL, NORTH),
        "crs": crs,
        **profile,
    }
    with rasterio.open(path, "w", **facts) as file:
        for band in range(facts["count"]):
            file.write(heights, band + 1)
    return path


@pytest.fixture
def dem(tmp_path):
    return write_dem(tmp_path / "hills.tif")


def call(*args):
    return CliRunner().invoke(cli, ["map", *(str(a) for a in args)], prog_name="viewshed")


def test_a_run_tells_the_paths_and_the_table(dem, tmp_path):
    out = tmp_path / "out"
    layers = "clearance,visible,needed-height"
    options = ["--observer", MIDDLE, "--range", "1km", "--layers", layers, "--out", out]
    result = call(dem, *options)
    assert result.exit_code == 0, result.output
    paths = result.stdout.splitlines()
    names = [path.rpartition("/")[2] for path in paths]
    assert names[0] == "map.png"
    assert sorted(names) == sorted(
        [
            *("map.png", "visible.tif", "clearance.tif", "needed_height.tif"),
            *("summary.csv", "record.json"),
        ]
    )
    assert sorted(p.name for p in out.iterdir()) == sorted(names)
    for word in ("Visible", "Hidden", "k = 0.13 (K = 1.149)", "Time taken"):
        assert word in result.stderr
    record = json.loads((out / "record.json").read_text())
    assert record["refraction"]["k"] == 0.13
    with rasterio.open(out / "visible.tif") as file:
        visible = file.read(1)
    assert {0, 1} <= set(np.unique(visible).tolist()) <= {0, 1, 255}


def test_quiet_leaves_the_paths_only(dem, tmp_path):
    out = tmp_path / "out"
    options = ["--observer", MIDDLE, "--range", "500", "--picture", "none", "--out", out, "-q"]
    result = call(dem, *options)
    assert result.exit_code == 0, result.output
    assert result.stderr == ""
    assert len(result.stdout.splitlines()) == 3


def test_a_negative_longitude_is_an_option_value(tmp_path):
    path = tmp_path / "west.tif"
    write_dem(path, crs="EPSG:4326", transform=Affine(0.0003, 0, -71.51, 0, -0.0003, 42.11))
    options = ["--observer", "-71.5,42.1", "--range", "600m", "--out", tmp_path / "out"]
    result = call(path, *options)
    assert result.exit_code == 0, result.output


def test_what_looks_unusual_is_a_warning(dem, tmp_path):
    options = ["--observer", MIDDLE, "--range", "900km", "--refraction", "0.075"]
    result = call(dem, *options, "--out", tmp_path / "out")
    assert result.exit_code == 0, result.output
    warned = [line for line in result.stderr.splitlines() if line.startswith("Warning: ")]
    assert any("m=0.075" in line for line in warned)
    assert len(warned) >= 2  # the range reaches past the grid


def test_results_are_kept_without_overwrite(dem, tmp_path):
    options = ["--observer", MIDDLE, "--range", "500m", "--out", tmp_path / "out"]
    assert call(dem, *options).exit_code == 0
    before = (tmp_path / "out" / "record.json").read_bytes()
    refused = call(dem, *options, "--eye-height", "9")
    assert refused.exit_code == 1
    assert "--overwrite" in refused.stderr
    assert (tmp_path / "out" / "record.json").read_bytes() == before
    assert call(dem, *options, "--eye-height", "9", "--overwrite").exit_code == 0
    assert (tmp_path / "out" / "record.json").read_bytes() != before


@pytest.mark.parametrize(
    ("options", "words"),
    [
        (["--observer", "0,0"], ("0", "outside")),
        (["--observer", f"{WEST + 5},{NORTH - 5}"], ("rim",)),
        (["--observer", MIDDLE, "--eye-elevation", "-50"], ("-50", "below")),
    ],
)
def test_unusable_observers_leave_nothing_behind(dem, tmp_path, options, words):
    result = call(dem, *options, "--out", tmp_path / "out")
    assert (result.exit_code, result.stdout) == (1, "")
    line = result.stderr.splitlines()[-1]
    assert line.startswith("Error: ")
    for word in words:
        assert word in line
    assert not (tmp_path / "out").exists()


def bad_missing(path):
    return path


def bad_empty(path):
    path.write_bytes(b"")
    return path


def bad_text(path):
    path.write_text("no raster")
    return path


def bad_truncated(path):
    noise = np.random.default_rng(0).random((300, 300), dtype=np.float32)
    whole = write_dem(path, noise).read_bytes()
    path.write_bytes(whole[: len(whole) // 30])
    return path


def bad_bands(path):
    return write_dem(path, count=3)


def bad_voids(path):
    return write_dem(path, np.full((SIZE, SIZE), np.nan, np.float32))


def bad_infinite(path):
    return write_dem(path, np.full((SIZE, SIZE), np.inf, np.float32))


def bad_no_crs(path):
    return write_dem(path, crs=None)


def bad_feet(path):
    return write_dem(path, crs="EPSG:2263")


@pytest.mark.parametrize(
    ("make", "cure"),
    [
        (bad_missing, "bad.tif"),
        (bad_empty, "bad.tif"),
        (bad_text, "bad.tif"),
        (bad_truncated, "bad.tif"),
        (bad_bands, "3"),
        (bad_voids, "void"),
        (bad_infinite, "inf"),
        (bad_no_crs, "--crs"),
        (bad_feet, "--height-unit"),
    ],
)
def test_unusable_grids_leave_nothing_behind(tmp_path, make, cure):
    path = make(tmp_path / "bad.tif")
    result = call(path, "--observer", MIDDLE, "--range", "1km", "--out", tmp_path / "out")
    assert (result.exit_code, result.stdout) == (1, ""), result.output
    lines = [line for line in result.stderr.splitlines() if not line.startswith("Warning: ")]
    assert len(lines) == 1
    assert lines[0].startswith("Error: ")
    assert "unexpected" not in lines[0]
    assert cure in lines[0]
    assert not (tmp_path / "out").exists()


def test_an_output_path_that_is_a_file_is_refused_before_any_work(dem, tmp_path):
    taken = tmp_path / "taken"
    taken.write_text("mine")
    result = call(dem, "--observer", MIDDLE, "--out", taken)
    assert result.exit_code == 1
    assert "taken" in result.stderr
    assert taken.read_text() == "mine"
