"""`viewshed polygons` from a raster to files for a GIS."""

import re
import shlex
import sys

import numpy as np
import pyogrio
import pytest
import rasterio
from affine import Affine
from click.testing import CliRunner

from viewshed.cli import polygons as command
from viewshed.cli.main import cli
from viewshed.grid import Grid
from viewshed.io.polygons import FORMATS, STATES
from viewshed.io.raster import write_cog

TRANSFORM = Affine(100, 0, 500_000, 0, -100, 4_650_000)
#: 6 cells seen in one patch and 1 alone, 2 unresolved, 12 hidden, 4 without data.
VISIBLE = np.array(
    [[1, 1, 0, 0, 1], [1, 0, 0, 0, 0], [1, 0, 2, 0, 0], [1, 0, 2, 0, 0], [1, 255, 255, 255, 255]],
    np.uint8,
)


def write_map(path, visible=VISIBLE, layer="visible", crs="EPSG:32632", **tags):
    write_cog(
        path,
        visible,
        Grid(visible.shape, TRANSFORM, crs),
        nodata=255,
        description="visible (1), hidden (0), unresolved (2)",
        unit="",
        tags={"LAYER": layer, "REFRACTION_K": "0.25", **tags},
    )
    return path


@pytest.fixture
def tower(tmp_path):
    folder = tmp_path / "tower"
    folder.mkdir()
    write_map(folder / "visible.tif")
    return folder


def call(*args):
    words = ["polygons", *(str(a) for a in args)]
    return CliRunner().invoke(cli, words, prog_name="viewshed")


def failed(result, code=1):
    """Last line of a failed run."""
    assert (result.exit_code, result.stdout) == (code, ""), result.output
    (line,) = result.stderr.splitlines()
    assert line.startswith("Error: ")
    assert "unexpected" not in line
    return line


@pytest.mark.parametrize("fmt", FORMATS)
def test_a_run_tells_the_paths_and_the_table(tower, fmt):
    result = call(tower / "visible.tif", tower / f"seen.{fmt}")
    assert result.exit_code == 0, result.output
    paths = result.stdout.splitlines()
    assert paths[0] == str(tower / f"seen.{fmt}")
    assert sorted(paths) == sorted(str(p) for p in tower.iterdir() if p.stem == "seen")
    table = [line.split("  ", 1) for line in result.stderr.splitlines()]
    assert [label for label, _ in table] == ["Visible", "Unresolved", "Time taken"]
    values = [value.strip() for _, value in table]
    assert [re.sub(r"[\d,.]+ ", "", v, count=1) for v in values] == [
        "m2 in 2 patches",
        "m2 in 1 patch",
        "s",
    ]


def test_polygons_say_what_the_raster_says(tower):
    write_map(tower / "mast.tif", OBSERVER="Süd mast")
    for name, told in (("mast", "Süd mast"), ("visible", "visible")):
        assert call(tower / f"{name}.tif", tower / f"{name}.gpkg").exit_code == 0
        frame = pyogrio.read_dataframe(tower / f"{name}.gpkg")
        assert set(frame.observer) == {told}
        assert set(frame.refr_k) == {0.25}
        assert frame.earth_fac.tolist() == pytest.approx([4 / 3] * 3)
        assert frame.state.tolist() == ["visible", "visible", "unresolved"]
        assert frame.map_m2.tolist() == [60_000.0, 10_000.0, 20_000.0]
        assert frame.area_m2.tolist() == pytest.approx(frame.map_m2.tolist(), rel=1e-3)
        assert frame.crs.to_epsg() == 32632


def test_states_and_name_as_asked_for(tower):
    options = ["--states", "hidden, visible", "--observer", "Hill"]
    assert call(tower / "visible.tif", tower / "seen.fgb", *options).exit_code == 0
    frame = pyogrio.read_dataframe(tower / "seen.fgb")
    assert set(frame.state) == {"visible", "hidden"}
    assert set(frame.observer) == {"Hill"}


def test_specks_are_left_out_and_told(tower):
    result = call(tower / "visible.tif", tower / "seen.gpkg", "--min-patch", "2.5ha")
    assert result.exit_code == 0, result.output
    table = dict(line.split("  ", 1) for line in result.stderr.splitlines())
    assert re.fullmatch(r" *10,0\d\d m2 in 1 patch", table["Visible, left out"])
    assert re.fullmatch(r" *20,0\d\d m2 in 1 patch", table["Unresolved, left out"])
    assert len(pyogrio.read_dataframe(tower / "seen.gpkg")) == 1


def test_quiet_leaves_the_paths_only(tower):
    result = call(tower / "visible.tif", tower / "seen.gpkg", "-q")
    assert (result.stdout, result.stderr) == (f"{tower / 'seen.gpkg'}\n", "")


@pytest.mark.parametrize("fmt", FORMATS)
def test_nothing_seen_is_an_empty_layer(tower, fmt):
    write_map(tower / "none.tif", np.zeros((3, 4), np.uint8))
    result = call(tower / "none.tif", tower / f"none.{fmt}")
    assert result.exit_code == 0, result.output
    assert "0 m2 in 0 patches" in result.stderr


def test_results_are_kept_without_overwrite(tower):
    call(tower / "visible.tif", tower / "seen.shp")
    (tower / "seen.qix").write_text("an index of the old shapes")
    before = {p.name: p.read_bytes() for p in tower.iterdir()}
    line = failed(call(tower / "visible.tif", tower / "seen.shp", "--states", "hidden"))
    assert "seen.shp: exists; use --overwrite" in line
    assert {p.name: p.read_bytes() for p in tower.iterdir()} == before
    again = call(tower / "visible.tif", tower / "seen.shp", "--states", "hidden", "--overwrite")
    assert again.exit_code == 0, again.output
    assert set(pyogrio.read_dataframe(tower / "seen.shp").state) == {"hidden"}
    assert sorted(p.name for p in tower.iterdir()) == sorted({*before} - {"seen.qix"})


def test_a_failure_leaves_what_was_there(tower, monkeypatch):
    call(tower / "visible.tif", tower / "seen.shp")
    before = {p.name: p.read_bytes() for p in tower.iterdir()}
    monkeypatch.setattr("viewshed.io._shapefile.LIMIT", 500)
    line = failed(call(tower / "visible.tif", tower / "seen.shp", "--overwrite"))
    assert str(tower / "seen.shp") in line
    assert "choose gpkg" in line
    assert {p.name: p.read_bytes() for p in tower.iterdir()} == before


def bad_missing(path):
    pass


def bad_text(path):
    path.write_text("no raster")


def bad_stranger(path):
    facts = {"driver": "GTiff", "height": 5, "width": 5, "count": 1, "dtype": "uint8"}
    with rasterio.open(path, "w", crs="EPSG:32632", transform=TRANSFORM, **facts) as file:
        file.write(VISIBLE, 1)


def bad_layer(path):
    write_map(path, VISIBLE.astype(np.float32), layer="clearance")


def bad_type(path):
    write_map(path, VISIBLE.astype(np.int16))


def bad_value(path):
    write_map(path, VISIBLE + np.uint8(3))


def bad_refraction(path):
    write_map(path, REFRACTION_K="thick")


def bad_truncated(path):
    noise = np.random.default_rng(0).integers(0, 3, (600, 600)).astype(np.uint8)
    write_map(path, noise)
    path.write_bytes(path.read_bytes()[:-20_000])


@pytest.mark.parametrize(
    ("make", "words"),
    [
        (bad_missing, "cannot be read: .*No such file"),
        (bad_text, "cannot be read"),
        (bad_stranger, "is not a visible layer of viewshed; give a visible.tif"),
        (bad_layer, "is not a visible layer of viewshed"),
        (bad_type, "lost its CRS or type"),
        (bad_value, "holds the value 3, which is no state"),
        (bad_refraction, "tells no usable refraction .'thick'"),
        (bad_truncated, "cannot be read"),
    ],
)
def test_unusable_rasters_leave_nothing_behind(tmp_path, make, words):
    make(tmp_path / "bad.tif")
    line = failed(call(tmp_path / "bad.tif", tmp_path / "seen.shp"))
    assert re.search(rf"bad\.tif: {words}", line)
    assert not [p for p in tmp_path.iterdir() if p.name != "bad.tif"]


@pytest.mark.parametrize(
    ("out", "options", "words"),
    [
        ("seen.kml", [], ("OUT", "'seen.kml'", ".shp, .gpkg, .fgb, .parquet")),
        ("seen", [], ("'seen'", ".shp, .gpkg")),
        ("", [], ("''", ".shp, .gpkg")),
        (".shp", [], ("'.shp'",)),
        ("seen.shp", ["--states", "seen"], ("--states", "'seen'", "visible, unresolved, hidden")),
        ("seen.shp", ["--min-patch", "5 km"], ("--min-patch", "'5 km'", "2ha")),
        ("seen.shp", ["--min-patch", "-1ha"], ("--min-patch", "'-1ha'", "0 or more")),
    ],
)
def test_wrong_values(out, options, words):
    line = failed(call("visible.tif", out, *options), code=2)
    assert line.endswith("(see viewshed polygons --help)")
    for word in words:
        assert word in line


def test_a_folder_that_is_not_there_is_told_before_any_work(tmp_path):
    line = failed(call(tmp_path / "none.tif", tmp_path / "none" / "seen.shp"))
    assert f"{tmp_path / 'none'}: is not a folder that exists" in line


def test_parquet_without_pyarrow_is_one_line(tower, monkeypatch):
    monkeypatch.setitem(sys.modules, "pyarrow", None)
    line = failed(call(tower / "visible.tif", tower / "seen.parquet"))
    assert "pip install pyarrow" in line


def test_the_example_of_the_help_works(tower, monkeypatch):
    shown = call("--help").stdout
    assert max(map(len, shown.splitlines())) <= 80
    example = re.search(r"A worked example:\n(.*?)\n  writes", shown, re.DOTALL)[1]
    words = shlex.split(example.replace("\\\n", " "))
    assert words[:2] == ["viewshed", "polygons"]
    monkeypatch.chdir(tower.parent)
    result = call(*words[2:])
    assert result.exit_code == 0, result.output
    assert result.stdout == "tower/seen.gpkg\n"
    assert set(pyogrio.read_dataframe(tower / "seen.gpkg").state) == {"visible"}


def test_help_names_what_there_is():
    assert [suffix[1:] for suffix in command.SUFFIXES] == list(FORMATS)
    assert tuple(STATES) == command.STATES
