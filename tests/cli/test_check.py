"""`viewshed check` from the command line to its table, JSON and picture."""

import json
import re
import shlex

import numpy as np
import pytest
import rasterio
from affine import Affine
from click.testing import CliRunner

from viewshed.cli.main import cli

SIZE = 60


def land():
    """A slope that rises out of a sea of voids."""
    heights = np.broadcast_to(np.arange(-20.0, 40.0, dtype=np.float32), (SIZE, SIZE)).copy()
    heights[heights < 0] = -9999
    return heights


def write_dem(path, heights=None, **profile):
    heights = land() if heights is None else heights
    facts = {
        "driver": "GTiff",
        "height": heights.shape[0],
        "width": heights.shape[1],
        "count": 1,
        "dtype": heights.dtype.name,
        "transform": Affine(30, 0, 500_000, 0, -30, 4_650_000),
        "crs": "EPSG:32632",
        "nodata": -9999,
        **profile,
    }
    with rasterio.open(path, "w", **facts) as file:
        file.write(heights, 1)
    return path


@pytest.fixture
def dem(tmp_path, monkeypatch):
    """A grid called dem.tif in the current folder."""
    monkeypatch.chdir(tmp_path)
    return write_dem(tmp_path / "dem.tif")


def call(*args):
    return CliRunner().invoke(cli, ["check", *(str(a) for a in args)], prog_name="viewshed")


def rows(text):
    """Labels and values of a table."""
    return dict(re.split(r"\s{2,}", line, maxsplit=1) for line in text.splitlines())


def help_examples():
    text = call("--help").stdout.replace("\\\n", " ")
    return re.findall(r"^ +viewshed (check .*)$", text, re.MULTILINE)


@pytest.mark.usefixtures("dem")
@pytest.mark.parametrize("number", range(3))
def test_examples_of_the_help_run(tmp_path, number):
    (tmp_path / "tiles").mkdir()
    write_dem(tmp_path / "tiles" / "only.tif")
    examples = help_examples()
    assert len(examples) == 3
    result = CliRunner().invoke(cli, shlex.split(examples[number]))
    assert result.exit_code == 0, result.output
    assert result.stdout
    assert (tmp_path / "dem.png").exists() == ("--picture" in examples[number])


def test_help_fits_and_teaches():
    text = call("--help").stdout
    assert max(map(len, text.splitlines())) <= 80
    for part in ("A worked example:", "Elevation grid:", "--void-mask FILE", "--void-height 0"):
        assert part in text
    assert "check " in CliRunner().invoke(cli, ["--help"]).stdout


def test_table_on_stdout(dem):
    result = call(dem.name)
    assert (result.exit_code, result.stderr) == (0, "")
    found = rows(result.stdout)
    assert found["Files"] == "1 file, GTiff, float32"
    assert found["Size"] == "60 rows x 60 columns, 0.0036 million cells"
    assert found["CRS"] == "WGS 84 / UTM zone 32N (EPSG:32632), in units of metre"
    assert found["Heights"] == "0.00 m to 39.00 m"
    assert found["Unit"] == "m, stated nowhere; datum unstated"
    assert found["Steps"] == "whole metres"
    assert found["Voids"] == "1200 cells, 33.3 %"
    assert "--void-height 0" in result.stdout
    assert [p.name for p in dem.parent.iterdir()] == ["dem.tif"]


def test_json_alone_on_stdout(dem):
    result = call(dem.name, "--json", "--picture", "look.png")
    assert (result.exit_code, result.stderr) == (0, "")
    told = json.loads(result.stdout)
    assert told["format"] == "viewshed check"
    assert told["files"]["given"] == ["dem.tif"]
    assert told["heights"]["step"] == {"size_m": 1.0, "name": "whole metres"}
    assert told["voids"]["likely_sea"] is True
    assert told["picture"] == "look.png"
    assert (dem.parent / "look.png").read_bytes().startswith(b"\x89PNG")


def test_same_grid_same_output(dem):
    assert call(dem, "--json").stdout == call(dem, "--json").stdout


def test_grid_void_all_over_is_told_not_refused(dem):
    write_dem(dem, np.full((SIZE, SIZE), -9999, np.float32))
    result = call(dem.name, "--json")
    assert result.exit_code == 0, result.output
    assert json.loads(result.stdout)["heights"]["highest_m"] is None


def test_options_of_the_grid(dem):
    write_dem(dem, crs=None)
    refused = call(dem.name)
    assert refused.exit_code == 1
    assert "state it with --crs" in refused.stderr
    stated = ["--crs", "EPSG:32632", "--height-unit", "ft", "--void-height", "3ft"]
    told = json.loads(call(dem.name, *stated, "--json").stdout)
    assert told["crs"]["code"] == "EPSG:32632"
    assert (told["heights"]["unit"], told["heights"]["unit_origin"]) == ("ft", "option")
    assert told["voids"]["cells"] == 0
    assert told["heights"]["step"]["name"] == "whole feet"


def test_void_mask(dem):
    geojson = {
        "type": "Polygon",
        "coordinates": [[[9.0, 41.9], [9.003, 41.9], [9.003, 42.1], [9.0, 42.1], [9.0, 41.9]]],
    }
    (dem.parent / "sea.geojson").write_text(json.dumps(geojson))
    options = ["--void-height", "0", "--void-mask", "sea.geojson"]
    told = json.loads(call(dem.name, *options, "--json").stdout)
    assert 0 < told["voids"]["cells"] < 1200


def test_quiet_and_verbose_tell_the_same_on_stdout(dem):
    plain = call(dem.name).stdout
    assert call(dem.name, "-q").stdout == plain
    assert call(dem.name, "-v").stdout == plain


def test_picture_is_kept_without_overwrite(dem):
    picture = dem.parent / "dem.png"
    picture.write_bytes(b"mine")
    refused = call(dem.name, "--picture", "dem.png")
    assert (refused.exit_code, refused.stdout) == (1, "")
    (line,) = refused.stderr.splitlines()
    assert line == "Error: dem.png: exists; use --overwrite to replace it"
    assert picture.read_bytes() == b"mine"
    assert call(dem.name, "--picture", "dem.png", "--overwrite").exit_code == 0
    assert picture.read_bytes() != b"mine"


def test_grid_itself_is_no_place_for_the_picture(dem):
    path = write_dem(dem.parent / "grid.png", land().clip(0).astype(np.uint8), nodata=None)
    before = path.read_bytes()
    refused = call(path.name, "--picture", path.name, "--overwrite")
    assert refused.exit_code == 1
    assert "grid.png: is a file of the elevation grid" in refused.stderr
    assert path.read_bytes() == before


@pytest.mark.parametrize(
    ("args", "words"),
    [
        ([], "DEM"),
        (["dem.tif", "--picture", "dem.jpg"], "'dem.jpg' would be a PNG; give a name"),
        (["dem.tif", "--picture", ""], "'' would be a PNG"),
        (["dem.tif", "--void-mask", "sea.gpkg"], "sea.gpkg says where, not what"),
        (["dem.tif", "--void-height", "low"], "'low'"),
        (["dem.tif", "--height-unit", "yd"], "'yd'"),
        (["dem.tif", "--crs", "mine"], "'mine'"),
    ],
)
@pytest.mark.usefixtures("dem")
def test_wrong_calls(args, words):
    result = call(*args)
    assert (result.exit_code, result.stdout) == (2, "")
    (line,) = result.stderr.splitlines()
    assert words in line
    assert line.endswith("(see viewshed check --help)")


@pytest.mark.parametrize(
    ("args", "words"),
    [
        (["gone.tif"], "gone.tif"),
        (["note.tif"], "note.tif"),
        (["dem.tif", "--picture", "gone/dem.png"], "gone: no such folder"),
        (["dem.tif", "--void-height", "0", "--void-mask", "gone.gpkg"], "gone.gpkg"),
    ],
)
def test_failed_runs_end_in_one_line(dem, args, words):
    (dem.parent / "note.tif").write_text("no raster")
    result = call(*args)
    assert (result.exit_code, result.stdout) == (1, "")
    (line,) = result.stderr.splitlines()
    assert line.startswith("Error: ")
    assert words in line
    assert "unexpected" not in line
