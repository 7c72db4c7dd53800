"""Every example in the help of `viewshed map` runs as it stands there."""

import re
import shlex

import geopandas
import numpy as np
import pytest
import rasterio
from affine import Affine
from click.testing import CliRunner
from shapely.geometry import Point

from viewshed.cli.main import HELP as PROGRAM_HELP
from viewshed.cli.main import cli
from viewshed.cli.map import HELP as MAP_HELP

CELL, WEST, NORTH, SIZE = 100.0, 508_000.0, 4_654_000.0, 100


def examples(text):
    """Commands in a help text, lines that end with a backslash joined."""
    joined = re.sub(r"\\\n\s*", " ", text)
    return [line.strip() for line in joined.splitlines() if line.strip().startswith("viewshed ")]


EXAMPLES = [line for text in (PROGRAM_HELP, MAP_HELP) for line in examples(text)]


@pytest.fixture
def country(tmp_path, monkeypatch):
    """A folder with the files that the examples name."""
    y, x = np.mgrid[0:SIZE, 0:SIZE]
    ground = (60 * np.sin(x / 9.0) * np.cos(y / 7.0) + 100).astype(np.float32)
    place = {"crs": "EPSG:32619", "count": 1, "dtype": "float32", "driver": "GTiff"}

    def write(path, heights, col=0):
        transform = Affine(CELL, 0, WEST + CELL * col, 0, -CELL, NORTH)
        rows, cols = heights.shape
        with rasterio.open(
            path, "w", height=rows, width=cols, transform=transform, **place
        ) as file:
            file.write(heights, 1)

    write(tmp_path / "dem.tif", ground)
    write(tmp_path / "dsm.tif", ground + 10.0 * ((x // 5 + y // 5) % 2).astype(np.float32))
    (tmp_path / "tiles").mkdir()
    write(tmp_path / "tiles" / "west.tif", ground[:, :50])
    write(tmp_path / "tiles" / "east.tif", ground[:, 50:], 50)
    points = [Point(WEST + 2500 + 1200 * n, NORTH - 4500) for n in range(4)]
    frame = geopandas.GeoDataFrame(
        {"name": [f"T{n}" for n in range(4)], "range": ["3km"] * 4}, geometry=points, crs=32619
    )
    frame.to_file(tmp_path / "turbines.gpkg")
    monkeypatch.chdir(tmp_path)
    return tmp_path


def test_the_help_has_examples():
    assert len(EXAMPLES) == 7


@pytest.mark.parametrize("line", EXAMPLES, ids=[shlex.split(e)[-1] for e in EXAMPLES])
def test_an_example_runs(country, line):
    words = shlex.split(line.replace("tiles/*.tif", "tiles/west.tif tiles/east.tif"))
    result = CliRunner().invoke(cli, words[1:], prog_name="viewshed")
    assert result.exit_code == 0, result.stderr
    written = result.stdout.split()
    assert written
    assert all((country / path).is_file() for path in written)
    assert f"{words[-1]}/record.json" in written
