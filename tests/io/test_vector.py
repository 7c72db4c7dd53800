"""Vector files: what they hold, the same bytes each time, whole or not there."""

import contextlib
import hashlib
import os
import sqlite3
import subprocess
import sys
from pathlib import Path

import geopandas
import numpy as np
import pyogrio
import pytest
import shapely
from affine import Affine
from pyproj import CRS

from tests.unit.grids import GRIDS, ROTATED_POLE
from viewshed.areas import cell_areas
from viewshed.errors import InputError, OutputError
from viewshed.grid import Grid
from viewshed.io import _shapefile, _vector
from viewshed.io.polygons import FORMATS, polygonise, write_polygons

ROOT = Path(__file__).parents[2]
UTM = CRS.from_epsg(32633).to_wkt()
NAME = "Süd–Turm 東"  # noqa: RUF001 - letters of many kinds

every_format = pytest.mark.parametrize("fmt", FORMATS)


def noise(grid, seed=0):
    values = np.array([0, 0, 0, 1, 1, 2, 255], np.uint8)  # large patches with holes
    return np.random.default_rng(seed).choice(values, grid.shape)


def make_frame(grid=None, observer=NAME, visible=None):
    if grid is None:
        grid = Grid((30, 40), Affine(30, 0, 400_000.1, 0, -30, 6_000_000), UTM)
    visible = noise(grid) if visible is None else visible
    states = ("visible", "unresolved", "hidden")
    return polygonise(
        visible, grid, cell_areas(grid), observer=observer, k=0.13, states=states
    ).frame


def read(path):
    if path.suffix == ".parquet":
        return geopandas.read_parquet(path)
    return pyogrio.read_dataframe(path)


@every_format
def test_round_trip(tmp_path, fmt):
    frame = make_frame()
    paths = write_polygons(tmp_path / "ein ü.b", frame, fmt)
    assert sorted(tmp_path.iterdir()) == sorted(paths)
    assert paths[0].name == f"ein ü.b.{fmt}"
    found = read(paths[0])
    assert list(found.columns) == list(frame.columns)
    assert found.crs.equals(frame.crs, ignore_axis_order=True) or fmt == "shp"
    if fmt == "fgb":  # in the order of its spatial index
        key = ["state", "area_m2", "first"]
        frame, found = (f.assign(first=f.geometry.normalize().to_wkb()) for f in (frame, found))
        frame, found = (f.sort_values(key, ignore_index=True) for f in (frame, found))
    for name in ("observer", "state"):
        assert found[name].tolist() == frame[name].tolist()
    for name in ("area_m2", "map_m2", "refr_k", "earth_fac"):
        np.testing.assert_allclose(found[name], frame[name], rtol=1e-14)
    same = shapely.equals_exact(found.geometry.normalize(), frame.geometry.normalize())
    assert np.all(same)
    assert np.all(found.is_valid)


@every_format
def test_an_answer_without_any_patch_is_a_layer_without_any_feature(tmp_path, fmt):
    empty = make_frame(visible=np.full((30, 40), 255, np.uint8))
    path, *_ = write_polygons(tmp_path / "none", empty, fmt)
    found = read(path)
    assert len(found) == 0
    assert list(found.columns) == list(empty.columns)
    assert [found[n].dtype.kind for n in ("area_m2", "map_m2", "refr_k")] == ["f"] * 3
    if fmt != "parquet":
        assert pyogrio.read_info(path)["geometry_type"] == "Polygon"
        assert pyogrio.list_layers(path)[0, 0] == "none"


def test_the_layer_of_a_geopackage_has_the_name_of_the_file(tmp_path):
    path, *_ = write_polygons(tmp_path / "seen.v2", make_frame(), "gpkg")
    assert pyogrio.list_layers(path).tolist() == [["seen.v2", "Polygon"]]


def test_a_shapefile_is_the_plain_set_of_files(tmp_path):
    frame = make_frame()
    paths = write_polygons(tmp_path / "seen", frame, "shp")
    assert [p.suffix for p in paths] == [".shp", ".shx", ".dbf", ".prj", ".cpg"]
    assert paths[4].read_text() == "UTF-8"
    assert CRS.from_user_input(paths[3].read_text()).to_epsg(min_confidence=20) == 32633
    shapes = shapely.from_wkb(pyogrio.raw.read(paths[0])[2])
    assert not np.any(shapely.is_ccw(shapely.get_exterior_ring(shapes)))
    holes = shapely.get_rings(shapes[shapely.get_num_interior_rings(shapes) > 0])
    assert np.sum(shapely.is_ccw(holes)) == np.sum(shapely.get_num_interior_rings(shapes)) > 0


def test_large_areas_keep_their_hundredths_in_a_shapefile(tmp_path):
    frame = make_frame()
    frame["area_m2"] = 1e12 + np.arange(len(frame)) / 100
    path, *_ = write_polygons(tmp_path / "seen", frame, "shp")
    np.testing.assert_allclose(read(path).area_m2, frame.area_m2, rtol=0, atol=0.001)


@every_format
def test_degrees_have_no_area_in_the_plane(tmp_path, fmt):
    grid = Grid((4, 5), Affine(1e-3, 0, 10, 0, -1e-3, 52), CRS.from_epsg(4326).to_wkt())
    path, *_ = write_polygons(tmp_path / "seen", make_frame(grid), fmt)
    found = read(path)
    assert found.map_m2.isna().all()
    assert found.crs.to_epsg(min_confidence=20) == 4326


PLACES = {
    name: grid.window(100, 100, 5, 6)
    for name, (grid, _) in GRIDS.items()
    if min(grid.shape) > 200 and name != "rotated pole"
}


@every_format
@pytest.mark.parametrize("grid", PLACES.values(), ids=PLACES)
def test_polygons_keep_their_place_in_every_crs(tmp_path, fmt, grid):
    path, *_ = write_polygons(tmp_path / "seen", make_frame(grid), fmt)
    found = read(path).set_crs(None, allow_override=True)
    lost = make_frame(grid).set_crs(None, allow_override=True)
    assert np.array_equal(found.total_bounds, lost.total_bounds)


def test_a_crs_that_a_shapefile_cannot_tell_is_refused(tmp_path):
    grid = Grid((4, 5), Affine(1e-3, 0, 3, 0, -1e-3, 5), CRS.from_user_input(ROTATED_POLE).to_wkt())
    with pytest.raises(OutputError, match="cannot be kept in shp; choose gpkg"):
        write_polygons(tmp_path / "seen", make_frame(grid), "shp")
    assert not list(tmp_path.iterdir())
    write_polygons(tmp_path / "seen", make_frame(grid), "gpkg")


# --- the same bytes -------------------------------------------------------------------------------

WRITE = """
import sys
from tests.io.test_vector import FORMATS, make_frame, write_polygons
for fmt in FORMATS:
    write_polygons(sys.argv[1] + "/seen", make_frame(), fmt)
"""


def hashes(folder):
    return {p.name: hashlib.sha256(p.read_bytes()).hexdigest() for p in folder.iterdir()}


def test_another_process_at_another_time_gives_the_same_bytes(tmp_path):
    folders = [tmp_path / "one", tmp_path / "the other"]
    for folder, zone in zip(folders, ("Pacific/Kiritimati", "Pacific/Pago_Pago"), strict=True):
        folder.mkdir()  # the date there and here is never the same
        subprocess.run(
            [sys.executable, "-c", WRITE, str(folder)],
            check=True,
            cwd=ROOT,
            env={**os.environ, "TZ": zone, "PYTHONHASHSEED": str(len(zone))},
        )
    assert len(hashes(folders[0])) == 8
    assert hashes(folders[0]) == hashes(folders[1])


def test_dates_in_files_are_fixed(tmp_path):
    for fmt in ("gpkg", "shp"):
        write_polygons(tmp_path / "seen", make_frame(), fmt)
    assert (tmp_path / "seen.dbf").read_bytes()[1:4] == bytes([100, 1, 1])  # since 1900
    with contextlib.closing(sqlite3.connect(tmp_path / "seen.gpkg")) as base:
        dates = base.execute("select last_change from gpkg_contents").fetchall()
    assert dates == [("2000-01-01T00:00:00.000Z",)]


def test_the_date_of_others_is_left_alone(tmp_path):
    pyogrio.set_gdal_config_options({"OGR_CURRENT_DATE": "2011-11-11T11:11:11.000Z"})
    try:
        write_polygons(tmp_path / "seen", make_frame(), "gpkg")
        kept = pyogrio.get_gdal_config_option("OGR_CURRENT_DATE")
    finally:
        pyogrio.set_gdal_config_options({"OGR_CURRENT_DATE": None})
    assert kept == "2011-11-11T11:11:11.000Z"


# --- refusals and failures ------------------------------------------------------------------------


def test_unknown_formats_are_refused(tmp_path):
    with pytest.raises(InputError, match="format 'kml' is not known; choose from shp, gpkg"):
        write_polygons(tmp_path / "seen", make_frame(), "kml")


def test_parquet_without_pyarrow_is_refused(tmp_path, monkeypatch):
    monkeypatch.setitem(sys.modules, "pyarrow", None)
    with pytest.raises(OutputError, match="pip install pyarrow"):
        write_polygons(tmp_path / "seen", make_frame(), "parquet")
    assert not list(tmp_path.iterdir())


@pytest.mark.parametrize("name", ["seen.shp", "seen.dbf"])
def test_files_that_are_there_are_spared(tmp_path, name):
    (tmp_path / name).write_text("mine")
    with pytest.raises(OutputError, match=f"{name}: exists"):
        write_polygons(tmp_path / "seen", make_frame(), "shp")
    assert [p.read_text() for p in tmp_path.iterdir()] == ["mine"]


@pytest.mark.parametrize(("state", "part"), [("hidden", ".shp"), ("visible", ".dbf")])
def test_a_shapefile_is_refused_before_it_passes_its_limit(tmp_path, monkeypatch, state, part):
    visible = np.zeros((30, 40), np.uint8)
    visible[1:-1:2, 1:-1:2] = 1  # many polygons of one cell, and one with as many holes
    frame = make_frame(visible=visible)
    frame = frame[frame.state == state]
    paths = write_polygons(tmp_path / "a", frame, "shp")
    made = next(p.stat().st_size for p in paths if p.suffix == part)
    # a table is made with fields of 80 letters, which are cut to the longest text in the end
    most = made if part == ".shp" else 33 + 6 * 32 + len(frame) * (1 + 2 * 80 + 4 * 24)
    assert most >= made
    monkeypatch.setattr(_shapefile, "LIMIT", most)
    write_polygons(tmp_path / "b", frame, "shp")
    monkeypatch.setattr(_shapefile, "LIMIT", most - 1)
    with pytest.raises(OutputError, match=r"c\.shp: .* GB do not fit.*; choose gpkg.*--min-patch"):
        write_polygons(tmp_path / "c", frame, "shp")
    assert not list(tmp_path.glob("c.*"))


def test_names_too_long_for_a_shapefile_are_refused(tmp_path):
    frame = make_frame(observer="ü" * 127 + "x")
    with pytest.raises(OutputError, match="observer takes 255 bytes and a shapefile holds 254"):
        write_polygons(tmp_path / "seen", frame, "shp")
    assert not list(tmp_path.iterdir())
    long = "ü" * 127
    path, *_ = write_polygons(tmp_path / "seen", make_frame(observer=long), "shp")
    assert set(read(path).observer) == {long}


def test_no_folder_is_one_line(tmp_path):
    with pytest.raises(OutputError, match=r"seen\.gpkg: cannot be written: No such file"):
        write_polygons(tmp_path / "none" / "seen", make_frame(), "gpkg")


def shorten(path):
    with path.open("r+b") as file:
        file.truncate(path.stat().st_size * 3 // 4)


def zero(path):
    """Lose a block in the middle, as a disk that is full can do without a word."""
    size = path.stat().st_size
    with path.open("r+b") as file:
        file.seek(size // 2)
        file.write(bytes(min(4096, size // 3)))


@pytest.mark.parametrize("harm", [shorten, zero])
@pytest.mark.parametrize("suffix", [".shp", ".shx", ".dbf", ".gpkg", ".fgb", ".parquet"])
def test_what_did_not_reach_the_disk_is_noticed(tmp_path, monkeypatch, suffix, harm):
    write = _vector._write

    def lose(path, *args):
        write(path, *args)
        harm(path.with_suffix(suffix))

    monkeypatch.setattr(_vector, "_write", lose)
    fmt = "shp" if suffix in {".shp", ".shx", ".dbf"} else suffix[1:]
    with pytest.raises(OutputError, match=f"seen.{fmt}: "):
        write_polygons(tmp_path / "seen", make_frame(), fmt)
    assert not list(tmp_path.iterdir())


FULL = """
import resource, sys
from tests.io.test_vector import make_frame, write_polygons
from viewshed.errors import OutputError
folder, fmt, limits = sys.argv[1], sys.argv[2], sys.argv[3:]
frame = make_frame()
if fmt == "parquet":
    import pyarrow.parquet
for limit in map(int, limits):
    resource.setrlimit(resource.RLIMIT_FSIZE, (limit, resource.RLIM_INFINITY))
    try:
        write_polygons(folder + "/seen", frame, fmt)
    except OutputError as error:
        print("refused:", error)
"""


@pytest.mark.skipif(os.name == "nt", reason="no limit on the size of a file")
@every_format
def test_full_disk(tmp_path, fmt):
    most = max(p.stat().st_size for p in write_polygons(tmp_path / "a", make_frame(), fmt))
    folder = tmp_path / "full"
    folder.mkdir()
    limits = [str(int(share * most)) for share in (0.0, 0.3, 0.9, 0.999)]
    done = subprocess.run(
        [sys.executable, "-c", FULL, str(folder), fmt, *limits],
        capture_output=True,
        text=True,
        check=True,
        cwd=ROOT,
    )
    assert done.stderr == ""
    lines = done.stdout.splitlines()
    assert len(lines) == len(limits)
    assert all(line.startswith(f"refused: {folder / 'seen'}.{fmt}: ") for line in lines)
    assert not list(folder.iterdir())


def test_a_geopackage_without_its_index_is_refused(tmp_path, monkeypatch):
    """The library leaves the index out when it finds no room for it, without a word."""
    write = pyogrio.raw.write

    def write_without(path, layer_options, **options):
        write(path, layer_options={"SPATIAL_INDEX": "NO"}, **options)

    monkeypatch.setattr(pyogrio.raw, "write", write_without)
    with pytest.raises(OutputError, match=r"seen\.gpkg: the spatial index .* disk may be full"):
        write_polygons(tmp_path / "seen", make_frame(), "gpkg")
    assert not list(tmp_path.iterdir())
