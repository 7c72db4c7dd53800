"""Rasters out: what is written, and that it is whole or not there."""

import _thread
import hashlib
import os
import subprocess
import sys
import threading
import time
import tracemalloc
from pathlib import Path

import numpy as np
import pytest
import rasterio
from affine import Affine
from rasterio.crs import CRS

from viewshed.errors import OutputError
from viewshed.grid import Grid
from viewshed.io import raster
from viewshed.io._voice import quiet_stderr
from viewshed.io.raster import pixel_sha256, write_cog

ROOT = Path(__file__).parents[2]
NORTH_UP = Affine(30, 0, 400_000, 0, -30, 6_000_000)
UTM = CRS.from_epsg(32633).to_wkt(version="WKT2_2019")
SAID = {"description": "what is seen", "unit": "1", "tags": {"VIEWSHED_K": "0.13"}}


def a_grid(shape, transform=NORTH_UP, wkt=UTM):
    return Grid(shape, transform, wkt)


def states(shape, seed=0):
    rng = np.random.default_rng(seed)
    coarse = rng.choice(np.array([0, 1, 2, 255], np.uint8), (shape[0] // 9 + 1, shape[1] // 9 + 1))
    return np.kron(coarse, np.ones((9, 9), np.uint8))[: shape[0], : shape[1]]


def metres(shape, seed=0):
    array = np.random.default_rng(seed).normal(0, 100, shape).astype(np.float32)
    array[: shape[0] // 3] = np.nan
    return array


@pytest.mark.parametrize("shape", [(1, 1), (1, 700), (700, 1), (513, 511), (1100, 1300)])
@pytest.mark.parametrize(("make", "nodata"), [(states, 255), (metres, np.nan)])
def test_round_trip(tmp_path, shape, make, nodata):
    array, path = make(shape), tmp_path / "ü b.tif"
    found = write_cog(path, array, a_grid(shape), nodata=nodata, **SAID)
    assert [p.name for p in tmp_path.iterdir()] == ["ü b.tif"]
    assert found["sha256"] == hashlib.sha256(path.read_bytes()).hexdigest()
    assert found["pixel_sha256"] == pixel_sha256(array)
    with rasterio.open(path) as file:
        np.testing.assert_array_equal(file.read(1), array)
        assert file.dtypes == (array.dtype.name,)
        assert file.transform == NORTH_UP
        assert file.crs == CRS.from_epsg(32633)
        assert np.array_equal(file.nodata, nodata, equal_nan=True)
        assert (file.descriptions, file.units) == (("what is seen",), ("1",))
        assert file.tags()["VIEWSHED_K"] == "0.13"
        assert file.tags(ns="IMAGE_STRUCTURE")["LAYOUT"] == "COG"
        assert file.tags(ns="IMAGE_STRUCTURE")["COMPRESSION"] == "DEFLATE"
        assert file.block_shapes == [(512, 512)]
        assert bool(file.overviews(1)) == (max(shape) > 512)


def test_bits_are_kept(tmp_path):
    array = np.array([[-0.0, 0.0, 1e-45, np.nan, -np.nan, np.finfo(np.float32).max]], np.float32)
    write_cog(tmp_path / "a.tif", array, a_grid(array.shape), nodata=np.nan, **SAID)
    with rasterio.open(tmp_path / "a.tif") as file:
        assert file.read(1).tobytes() == array.tobytes()


def test_views_and_byte_order(tmp_path):
    array = metres((300, 200))
    grid = a_grid((200, 300))
    one = write_cog(tmp_path / "a.tif", array.T, grid, nodata=np.nan, **SAID)
    two = write_cog(
        tmp_path / "b.tif", np.ascontiguousarray(array.T).astype(">f4"), grid, nodata=np.nan, **SAID
    )
    assert one == two


@pytest.mark.parametrize(
    "transform",
    [
        Affine(30, 0, 4e5, 0, 30, 6e6),
        Affine(-30, 0, 4e5, 0, -30, 6e6),
        Affine(25, 10, 4e5, 12, -27, 6e6),
        Affine(0, 30, 4e5, 30, 0, 6e6),
    ],
)
def test_any_transform(tmp_path, transform):
    array = states((600, 520))
    write_cog(tmp_path / "a.tif", array, a_grid(array.shape, transform), nodata=255, **SAID)
    with rasterio.open(tmp_path / "a.tif") as file:
        assert file.transform.almost_equals(transform, precision=1e-9)
        np.testing.assert_array_equal(file.read(1), array)


@pytest.mark.parametrize(
    ("crs", "transform"),
    [
        ("EPSG:4326", Affine(1 / 3600, 0, 10, 0, -1 / 3600, 60)),
        ("EPSG:2263", Affine(100, 0, 9e5, 0, -100, 2e5)),
        ("EPSG:3857", Affine(30, 0, 1e6, 0, -30, 8e6)),
        ("EPSG:26910+5703", NORTH_UP),
        ("EPSG:2263+6360", Affine(100, 0, 9e5, 0, -100, 2e5)),
        ("EPSG:4979", Affine(1 / 3600, 0, 10, 0, -1 / 3600, 60)),
        (
            "+proj=tmerc +lon_0=9.5 +lat_0=47 +k=0.9999 +ellps=bessel +units=m",
            Affine.scale(30, -30),
        ),
        (
            "+proj=tmerc +lon_0=9.5 +lat_0=47 +ellps=bessel +towgs84=600,20,400 +units=m",
            Affine(30, 0, 0, 0, -30, 9),
        ),
    ],
)
def test_any_crs(tmp_path, crs, transform):
    wkt = CRS.from_user_input(crs).to_wkt(version="WKT2_2019")
    array = metres((40, 30))
    grid = a_grid(array.shape, transform, wkt)
    said = {**SAID, "unit": "m"}
    write_cog(tmp_path / "a.tif", array, grid, nodata=np.nan, **said)
    with rasterio.open(tmp_path / "a.tif") as file:
        assert file.units == ("m",)
        assert file.crs
        assert "VERT" not in file.crs.to_wkt()
    assert not list(tmp_path.glob("*.xml"))


@pytest.mark.parametrize(("make", "nodata"), [(states, 255), (metres, np.nan)])
def test_same_bytes_with_any_number_of_threads(tmp_path, make, nodata, monkeypatch):
    array, hashes = make((2100, 2300)), set()
    for i, threads in enumerate(["1", "2", "3", "ALL_CPUS", "1"]):
        monkeypatch.setenv("GDAL_NUM_THREADS", threads)
        path = tmp_path / f"{i}.tif"
        found = write_cog(path, array, a_grid(array.shape), nodata=nodata, **SAID)
        hashes.add(found["sha256"])
    assert len(hashes) == 1


def test_pixel_hash_knows_type_and_shape():
    zeros = np.zeros((4, 6), np.float32)
    others = [zeros.reshape(6, 4), zeros.astype(np.uint32), np.zeros((4, 6), np.uint8)]
    assert pixel_sha256(zeros) not in {pixel_sha256(other) for other in others}
    assert pixel_sha256(zeros) == pixel_sha256(np.asfortranarray(zeros))
    assert pixel_sha256(zeros) != pixel_sha256(-zeros)


def test_overviews(tmp_path):
    array = np.zeros((1024, 1024), np.uint8)
    array[::2, ::2] = 1
    for how, value in [("nearest", {0, 1}), ("mode", {0})]:
        path = tmp_path / f"{how}.tif"
        write_cog(path, array, a_grid(array.shape), nodata=255, overview=how, **SAID)
        with rasterio.open(path, overview_level=0) as file:
            assert set(np.unique(file.read(1))) <= value


def test_states_have_colours_in_every_copy(tmp_path):
    array, path = states((1100, 900)), tmp_path / "v.tif"
    colours = {0: (226, 224, 220), 1: (107, 41, 135), 2: (240, 190, 90)}
    asked = {"nodata": 255, "colours": colours, "overview": "mode", **SAID}
    write_cog(path, array, a_grid(array.shape), **asked)
    for level in (None, 0):
        with rasterio.open(path, **({} if level is None else {"overview_level": level})) as file:
            found = file.colormap(1)
            assert {value: found[value][:3] for value in colours} == colours
            assert set(np.unique(file.read(1)).tolist()) == {0, 1, 2, 255}
            assert file.nodata == 255


def test_tags_get_the_prefix(tmp_path):
    array = states((9, 9))
    tags = {"k": "0,13 = ä\nsecond line", "VIEWSHED_A": '{"x": "<&>"}', "TIFFTAG_SOFTWARE": "s 1"}
    write_cog(
        tmp_path / "a.tif",
        array,
        a_grid(array.shape),
        nodata=255,
        description="d",
        unit="",
        tags=tags,
    )
    with rasterio.open(tmp_path / "a.tif") as file:
        found = file.tags()
    assert found["VIEWSHED_K"] == tags["k"]
    assert found["VIEWSHED_A"] == tags["VIEWSHED_A"]
    assert found["TIFFTAG_SOFTWARE"] == "s 1"


def test_wrong_shape(tmp_path):
    with pytest.raises(ValueError, match="does not fit the grid"):
        write_cog(tmp_path / "a.tif", states((3, 4)), a_grid((4, 3)), nodata=255, **SAID)


# --- failures -----------------------------------------------------------------------------------


def test_nodata_that_does_not_fit(tmp_path):
    with pytest.raises(ValueError, match="beyond the valid range"):
        write_cog(tmp_path / "a.tif", states((9, 9)), a_grid((9, 9)), nodata=-1, **SAID)
    assert not list(tmp_path.iterdir())


def test_missing_folder(tmp_path):
    with pytest.raises(OutputError, match=r"a\.tif: cannot be written"):
        write_cog(tmp_path / "no" / "a.tif", states((9, 9)), a_grid((9, 9)), nodata=255, **SAID)


@pytest.mark.parametrize("damage", ["cells", "end"])
def test_a_silent_failure_is_found(tmp_path, monkeypatch, damage):
    path = tmp_path / "a.tif"
    write_cog(path, states((9, 9)), a_grid((9, 9)), nodata=255, **SAID)
    before, copy = path.read_bytes(), raster._copy

    def bad_copy(source, draft, made, options):
        if damage == "cells":
            with rasterio.open(draft, "r+") as file:
                cells = file.read(1)
                cells[-1, -1] ^= 1
                file.write(cells, 1)
        copy(source, draft, made, options)
        if damage == "end":
            os.truncate(made, made.stat().st_size - 2000)

    monkeypatch.setattr(raster, "_copy", bad_copy)
    array = states((1500, 1500))
    with pytest.raises(OutputError, match=r"^[^\n]*a\.tif: [^\n]*$"):
        write_cog(path, array, a_grid(array.shape), nodata=255, **SAID)
    assert path.read_bytes() == before
    assert list(tmp_path.iterdir()) == [path]


DISK_FULL = """
import resource, sys
import numpy as np
from affine import Affine
from viewshed.errors import OutputError
from viewshed.grid import Grid
from viewshed.io import raster
out, dtype, limit, when = sys.argv[1], sys.argv[2], int(sys.argv[3]), sys.argv[4]
rng = np.random.default_rng(0)
array = rng.integers(0, 3, (1800, 1900)).astype(dtype)
if dtype == "float32":
    array += rng.random(array.shape, dtype=np.float32)
def fill(*args, **options):
    resource.setrlimit(resource.RLIMIT_FSIZE, (limit, resource.RLIM_INFINITY))
    return copy(*args, **options)
copy = raster._copy
if when == "copy":
    raster._copy = fill
else:
    resource.setrlimit(resource.RLIMIT_FSIZE, (limit, resource.RLIM_INFINITY))
grid = Grid(array.shape, Affine(30, 0, 4e5, 0, -30, 6e6), "EPSG:32633")
try:
    raster.write_cog(out, array, grid, nodata=None, description="d", unit="m", tags={})
except OutputError as error:
    print("refused:", error)
else:
    print("written")
"""


def write_with_limit(folder, dtype, limit, when, threads="1"):
    done = subprocess.run(
        [sys.executable, "-c", DISK_FULL, str(folder / "a.tif"), dtype, str(limit), when],
        cwd=ROOT,
        env={**os.environ, "GDAL_NUM_THREADS": threads},
        capture_output=True,
        text=True,
        check=True,
    )
    assert done.stderr == ""
    return done.stdout


@pytest.fixture(scope="module")
def whole_size(tmp_path_factory):
    """Size of the file that fits, by type of cells [bytes]."""
    sizes = {}
    for dtype in ("uint8", "float32"):
        folder = tmp_path_factory.mktemp("whole")
        assert write_with_limit(folder, dtype, 1 << 40, "draft") == "written\n"
        sizes[dtype] = (folder / "a.tif").stat().st_size
    return sizes


@pytest.mark.parametrize("threads", ["1", "2"])
@pytest.mark.parametrize("dtype", ["uint8", "float32"])
@pytest.mark.parametrize(
    ("when", "share"),
    [("draft", 0.0), ("draft", 0.5), ("copy", 0.02), ("copy", 0.5), ("copy", 0.9999)],
)
def test_full_disk(tmp_path, whole_size, threads, dtype, when, share):
    limit = int(whole_size[dtype] * share)
    said = write_with_limit(tmp_path, dtype, limit, when, threads)
    assert said.startswith("refused:")
    assert "a.tif: " in said
    assert said.count("\n") == 1
    assert not list(tmp_path.iterdir())


def test_ctrl_c_ends_a_long_copy_soon(tmp_path):
    array = metres((6000, 6000))
    timer = threading.Timer(0.6, _thread.interrupt_main)
    start = time.perf_counter()
    timer.start()
    with pytest.raises(KeyboardInterrupt):
        write_cog(tmp_path / "a.tif", array, a_grid(array.shape), nodata=np.nan, **SAID)
    assert time.perf_counter() - start < 4
    assert not list(tmp_path.glob(".*"))


def test_stderr_of_others_passes_on(capfd):
    with quiet_stderr():
        os.write(2, b"_tiffWriteProc: File too large.\nprogress 1\r")
        os.write(2, b"_tiff")
        os.write(2, b"SeekProc: bad\n_tin\nend")
    assert capfd.readouterr().err == "progress 1\r_tin\nend"


def test_quiet_stderr_does_not_wait_for_a_child(capfd):
    start = time.perf_counter()
    with quiet_stderr():
        child = subprocess.Popen([sys.executable, "-c", "import time; time.sleep(20)"])
    assert time.perf_counter() - start < 5
    child.kill()
    child.wait()
    assert capfd.readouterr().err == ""


def test_quiet_stderr_without_a_stream(tmp_path):
    code = (
        "import os; os.close(2)\n"
        "import sys; sys.path.insert(0, sys.argv[1])\n"
        "from viewshed.io._voice import quiet_stderr\n"
        "with quiet_stderr():\n    print('fine')\n"
    )
    done = subprocess.run(
        [sys.executable, "-c", code, str(ROOT)], stdout=subprocess.PIPE, check=True
    )
    assert done.stdout == b"fine\n"


def test_memory_is_bounded(tmp_path):
    array = np.zeros((4000, 4000), np.float32)
    tracemalloc.start()
    try:
        write_cog(tmp_path / "a.tif", array, a_grid(array.shape), nodata=np.nan, **SAID)
        peak = tracemalloc.get_traced_memory()[1]
    finally:
        tracemalloc.stop()
    assert peak < 40e6
