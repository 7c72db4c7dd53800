"""Elevation in the formats that people have, each read to the same heights."""

import shutil
import zipfile
from pathlib import Path

import numpy as np
import pytest
import rasterio
import rasterio.shutil
from affine import Affine

from viewshed.errors import DataError, ViewshedWarning
from viewshed.io.elevation import open_terrain

NORTH_UP = Affine(30, 0, 400_000, 0, -30, 6_000_000)
HEIGHTS = (np.arange(150 * 140).reshape(150, 140) % 997 + 3).astype(np.int16)

GEOTIFFS = {
    "striped": {},
    "tiled": {"tiled": True, "blockxsize": 64, "blockysize": 32},
    "deflate": {"compress": "deflate", "predictor": 2},
    "BigTIFF": {"bigtiff": "yes"},
    "big-endian": {"endianness": "big"},
}


@pytest.mark.parametrize("layout", GEOTIFFS)
def test_geotiff(make_dem, layout):
    path = make_dem(array=HEIGHTS, **GEOTIFFS[layout])
    assert path.read_bytes()[2] in ({43} if layout == "BigTIFF" else {42, 0})
    np.testing.assert_array_equal(open_terrain(path).read(0, 0, 150, 140), HEIGHTS)


@pytest.mark.parametrize("dtype", ["int16", "uint16", "int32", "uint32", "float32", "float64"])
def test_cells_of_any_type(make_dem, dtype):
    terrain = open_terrain(make_dem(array=HEIGHTS.astype(dtype)))
    assert terrain.tiles[0].dtype == dtype
    np.testing.assert_array_equal(terrain.read(0, 0, 150, 140), HEIGHTS)


@pytest.mark.parametrize("dtype", ["int16", "uint16", "int32"])
def test_scale_and_offset_of_the_band(make_dem, dtype):
    terrain = open_terrain(make_dem(array=HEIGHTS.astype(dtype), scale=0.25, offset=-100.0))
    np.testing.assert_array_equal(terrain.read(0, 0, 150, 140), HEIGHTS * 0.25 - 100.0)


@pytest.mark.parametrize(
    ("driver", "name"),
    [
        ("COG", "t.tif"),
        ("AAIGrid", "t.asc"),
        ("VRT", "t.vrt"),
        ("EHdr", "t.bil"),
        ("ENVI", "t.dat"),
        ("HFA", "t.img"),
        ("SAGA", "t.sdat"),
        ("RST", "t.rst"),
        ("GPKG", "t.gpkg"),
        ("netCDF", "t.nc"),
    ],
)
def test_other_formats(make_dem, tmp_path, driver, name):
    source, path = make_dem("source.tif", HEIGHTS), tmp_path / name
    with rasterio.Env(GDAL_PAM_ENABLED="NO"):
        rasterio.shutil.copy(source, path, driver=driver)
    np.testing.assert_array_equal(
        open_terrain(path, crs="EPSG:32633").read(0, 0, 150, 140), HEIGHTS
    )


def test_ascii_grid_as_people_write_it(tmp_path):
    path = tmp_path / "hills.asc"
    path.write_text(
        "NCOLS 3\nNROWS 2\nXLLCENTER 500015\nYLLCENTER 6000015\nCELLSIZE 30\nNODATA_VALUE -9999\n"
        "1 2.5 -9999\n4 5 6\n"
    )
    terrain = open_terrain(path, crs="EPSG:32633")
    np.testing.assert_array_equal(terrain.read(0, 0, 2, 3), [[1, 2.5, np.nan], [4, 5, 6]])
    assert terrain.grid.bounds == (500_000, 6_000_000, 500_090, 6_000_060)


def test_side_file_states_crs_and_nodata(make_dem):
    path = make_dem(array=HEIGHTS, crs=None)
    path.with_name("dem.tif.aux.xml").write_text(
        "<PAMDataset><SRS>EPSG:32633</SRS>"
        '<PAMRasterBand band="1"><NoDataValue>3</NoDataValue></PAMRasterBand></PAMDataset>'
    )
    terrain = open_terrain(path)
    assert "UTM zone 33N" in terrain.grid.crs_wkt
    assert np.isnan(terrain.read(0, 0, 1, 140)[0, 0])
    names = [Path(entry["path"]).name for entry in terrain.fingerprints()]
    assert names == ["dem.tif", "dem.tif.aux.xml"]


# --- tiles that are named by the degree and share their edge posts ------------------------------


def write_hgt(folder, lat, lon, heights):
    """Write an SRTM tile: big-endian whole metres, nothing else; its name says where."""
    name = f"{'N' if lat >= 0 else 'S'}{abs(lat):02d}{'E' if lon >= 0 else 'W'}{abs(lon):03d}.hgt"
    path = folder / name
    path.write_bytes(heights.astype(">i2").tobytes())
    return path


def write_dted(folder, lat, lon, heights):
    """Write a DTED tile with the library's own driver."""
    n = len(heights) - 1
    plain, path = folder / "plain.tif", folder / f"n{lat:02d}_e{lon:03d}.dt1"
    corner = Affine(1 / n, 0, lon - 0.5 / n, 0, -1 / n, lat + 1 + 0.5 / n)
    with rasterio.Env(GDAL_PAM_ENABLED="NO"):
        with rasterio.open(
            plain, "w", driver="GTiff", height=n + 1, width=n + 1, count=1, dtype="int16",
            crs="EPSG:4326", transform=corner,
        ) as file:  # fmt: skip
            file.write(heights, 1)
        rasterio.shutil.copy(plain, path, driver="DTED")
    plain.unlink()
    return path


WRITERS = {"hgt": (write_hgt, -32768), "dted": (write_dted, -32767)}


def degree_tiles(folder, write, size=1201):
    """Four tiles of one degree cut from one landscape, so that neighbours share their edges."""
    n = size - 1
    rng = np.random.default_rng(4)
    coarse = rng.integers(0, 3000, (2 * n // 50 + 2, 2 * n // 50 + 2))
    whole = np.kron(coarse, np.ones((50, 50)))[: 2 * n + 1, : 2 * n + 1].astype(np.int16)
    for i in (0, 1):
        for j in (0, 1):
            write(folder, 46 - i, 7 + j, whole[i * n : i * n + size, j * n : j * n + size])
    return whole


@pytest.mark.parametrize("kind", WRITERS)
def test_degree_tiles_join_without_a_seam(tmp_path, kind):
    whole = degree_tiles(tmp_path, WRITERS[kind][0])
    terrain = open_terrain(tmp_path)
    assert terrain.grid.shape == (2401, 2401)
    half = 1 / 2400
    assert terrain.grid.bounds == pytest.approx((7 - half, 45 - half, 9 + half, 47 + half))
    reading = terrain.load(1100, 1100, 201, 201)
    np.testing.assert_array_equal(reading.elevation, whole[1100:1301, 1100:1301])
    assert reading.overlap[2] == 0.0
    assert terrain.height_unit_origin == "band"
    assert "EGM96" in terrain.datum


@pytest.mark.parametrize("kind", WRITERS)
def test_void_and_missing_degree_tile(tmp_path, kind):
    write, void = WRITERS[kind]
    heights = np.full((1201, 1201), 70, np.int16)
    heights[5, 6] = void
    write(tmp_path, 46, 7, heights)
    write(tmp_path, 46, 9, heights)
    terrain = open_terrain(tmp_path)
    assert terrain.grid.shape == (1201, 3601)
    read = terrain.read(0, 0, 1201, 3601)
    assert np.isnan(read[5, 6])
    assert np.isnan(read[:, 1201:2400]).all()
    assert np.isnan(read).sum() == 1199 * 1201 + 2


@pytest.mark.parametrize("first", [179, -180])
def test_degree_tiles_on_both_sides_of_180_degrees(tmp_path, first):
    for lon, height in ((179, 5), (-180, 6), (-178, 7)):
        write_hgt(tmp_path, -17, lon, np.full((1201, 1201), height, np.int16))
    order = sorted(tmp_path.iterdir(), key=lambda path: ("E179" in path.name) != (first == 179))
    terrain = open_terrain(order)
    assert terrain.grid.shape == (1201, 4801)
    with pytest.warns(ViewshedWarning, match="overlap and differ"):
        heights = terrain.read(0, 0, 1201, 4801)
    assert (heights[:, :1200] == 5).all()
    assert (heights[:, 1201:2401] == 6).all()
    assert np.isnan(heights[:, 2401:3600]).all()
    assert (heights[:, 3600:] == 7).all()


def test_tiles_round_the_world_stay_where_they_are(make_dem):
    step = Affine(1, 0, -180, 0, -1, 10)
    paths = [
        make_dem(f"{n}.tif", np.full((5, 90), n, np.float32), crs="EPSG:4326",
                 transform=step @ Affine.translation(90 * n, 0))
        for n in range(4)
    ]  # fmt: skip
    assert open_terrain(paths).grid.bounds == (-180, 5, 180, 10)
    assert open_terrain(paths[:3]).grid.bounds == (-180, 5, 90, 10)
    assert open_terrain(paths[::3]).grid.bounds == (-270, 5, -90, 10)
    assert open_terrain(paths[3::-3]).grid.bounds == (90, 5, 270, 10)


def test_hgt_of_one_second(tmp_path):
    heights = np.arange(3601 * 3601, dtype=np.int64).reshape(3601, 3601) % 4000
    path = write_hgt(tmp_path, -34, -71, heights)
    terrain = open_terrain(path)
    assert terrain.grid.shape == (3601, 3601)
    assert terrain.grid.xy(3600, 0)[0] == pytest.approx(-71)
    assert terrain.grid.xy(3600, 0)[1] == pytest.approx(-34)
    np.testing.assert_array_equal(terrain.read(3590, 0, 11, 9), heights[3590:, :9])


@pytest.mark.parametrize("kind", WRITERS)
@pytest.mark.parametrize("share", [0.3, 0.999])
def test_truncated_degree_tile(tmp_path, kind, share):
    path = WRITERS[kind][0](tmp_path, 46, 7, np.full((1201, 1201), 70, np.int16))
    with path.open("r+b") as file:
        file.truncate(int(path.stat().st_size * share))
    with pytest.raises(DataError, match=rf"^[^\n]*{path.name}: [^\n]*(truncated|damaged)[^\n]*$"):
        open_terrain(path).read(0, 0, 1201, 1201)


# --- virtual rasters ----------------------------------------------------------------------------


def vrt(sources, shape=(12, 20), nodata=None, dtype="Float32"):
    """Give the text of a virtual raster: sources are (name, column, row, columns, rows)."""
    declared = "" if nodata is None else f"<NoDataValue>{nodata}</NoDataValue>"
    parts = "".join(
        f'<SimpleSource><SourceFilename relativeToVRT="1">{name}</SourceFilename>'
        f'<SourceBand>1</SourceBand><SrcRect xOff="0" yOff="0" xSize="{w}" ySize="{h}"/>'
        f'<DstRect xOff="{c}" yOff="{r}" xSize="{w}" ySize="{h}"/></SimpleSource>'
        for name, c, r, w, h in sources
    )
    return (
        f'<VRTDataset rasterXSize="{shape[1]}" rasterYSize="{shape[0]}"><SRS>EPSG:32633</SRS>'
        "<GeoTransform>400000, 30, 0, 6000000, 0, -30</GeoTransform>"
        f'<VRTRasterBand dataType="{dtype}" band="1">{declared}{parts}</VRTRasterBand></VRTDataset>'
    )


def test_virtual_raster(make_dem, tmp_path):
    one, two = make_dem("a.tif"), make_dem("b.tif", np.full((12, 10), 7, np.float32))
    path = tmp_path / "both.vrt"
    path.write_text(vrt([("a.tif", 0, 0, 10, 12), ("b.tif", 10, 0, 10, 12)]))
    terrain = open_terrain(path)
    heights = terrain.read(0, 0, 12, 20)
    np.testing.assert_array_equal(heights[:, :10], np.arange(120).reshape(12, 10))
    np.testing.assert_array_equal(heights[:, 10:], 7)
    names = [Path(e["path"]) for e in terrain.fingerprint(0, 12, 12, 5).entries]
    assert names == [path, two]
    assert [Path(e["path"]) for e in terrain.fingerprints()] == [path, one, two]


def test_missing_source_of_a_virtual_raster(make_dem, tmp_path):
    make_dem("a.tif")
    path = tmp_path / "both.vrt"
    path.write_text(vrt([("a.tif", 0, 0, 10, 12), ("gone.tif", 10, 0, 10, 12)]))
    with pytest.raises(DataError, match=r"both\.vrt: its source .*gone\.tif is missing; get it"):
        open_terrain(path)
    outer = tmp_path / "outer.vrt"
    outer.write_text(vrt([("both.vrt", 0, 0, 20, 12)]))
    with pytest.raises(DataError, match=r"both\.vrt: its source .*gone\.tif is missing"):
        open_terrain(outer)


def test_gap_between_the_sources_of_a_virtual_raster(make_dem, tmp_path):
    make_dem("a.tif", np.full((12, 10), 5, np.float32))
    path = tmp_path / "gap.vrt"
    path.write_text(vrt([("a.tif", 8, 0, 10, 12)]))
    heights = open_terrain(path).read(2, 0, 10, 20)
    assert (heights[:, 8:18] == 5).all()
    assert np.isnan(heights[:, :8]).all()
    assert np.isnan(heights[:, 18:]).all()


def test_broken_source_of_a_virtual_raster(make_dem, tmp_path):
    source = make_dem("a.tif", np.random.default_rng(0).random((600, 700)).astype(np.float32))
    path = tmp_path / "one.vrt"
    path.write_text(vrt([("a.tif", 0, 0, 700, 600)], shape=(600, 700)))
    with source.open("r+b") as file:
        file.truncate(source.stat().st_size // 2)
    with pytest.raises(DataError, match=r"^[^\n]*one\.vrt: [^\n]*(truncated|damaged)[^\n]*$"):
        open_terrain(path).read(0, 0, 600, 700)


def test_virtual_raster_behind_a_link(make_dem, tmp_path):
    (tmp_path / "deep").mkdir()
    make_dem("deep/a.tif")
    (tmp_path / "deep" / "v.vrt").write_text(vrt([("a.tif", 0, 0, 10, 12)], shape=(12, 10)))
    link = tmp_path / "link.vrt"
    link.symlink_to(tmp_path / "deep" / "v.vrt")
    assert open_terrain(link).read(0, 0, 12, 10)[11, 9] == 119


def fingerprinted(path):
    """Names of the files, from the folder of the first, that a raster's heights depend on."""
    entries = open_terrain(path).fingerprint(0, 0, 12, 20).entries
    return [Path(entry["path"]).relative_to(path.parent).as_posix() for entry in entries]


def test_every_file_that_heights_depend_on_is_fingerprinted(make_dem, tmp_path):
    """One of the same name within, the header of bare cells, an archive."""
    heights = np.ones((12, 20), np.float32)
    tile = make_dem("tile.tif", heights)
    (tmp_path / "in").mkdir()
    shutil.copy(tile, tmp_path / "in" / "tile.tif")
    within, outer = tmp_path / "in" / "dem.vrt", tmp_path / "dem.vrt"
    within.write_text(vrt([("tile.tif", 0, 0, 20, 12)]), encoding="utf-8")
    outer.write_text(vrt([("in/dem.vrt", 0, 0, 20, 12)]), encoding="utf-8")
    assert fingerprinted(outer) == ["dem.vrt", "in/dem.vrt", "in/tile.tif"]

    rasterio.shutil.copy(tile, tmp_path / "bare.bil", driver="EHdr")
    bare = tmp_path / "of bare.vrt"
    bare.write_text(vrt([("bare.bil", 0, 0, 20, 12)]), encoding="utf-8")
    assert fingerprinted(bare) == ["of bare.vrt", "bare.bil", "bare.hdr"]

    with zipfile.ZipFile(tmp_path / "a.zip", "w") as archive:
        archive.write(tile, "tile.tif")
    packed = tmp_path / "of packed.vrt"
    packed.write_text(
        vrt([(f"/vsizip/{tmp_path}/a.zip/tile.tif", 0, 0, 20, 12)]).replace(
            'relativeToVRT="1"', 'relativeToVRT="0"'
        ),
        encoding="utf-8",
    )
    assert fingerprinted(packed) == ["of packed.vrt", "a.zip"]


def test_virtual_raster_that_is_no_xml(make_dem, tmp_path):
    path = tmp_path / "broken.vrt"
    path.write_text("<VRTDataset>")
    with pytest.raises(DataError, match=r"broken\.vrt: cannot be opened as a raster"):
        open_terrain(path)


def test_virtual_raster_beside_its_tiles_is_no_tile(make_dem, tmp_path):
    make_dem("a.tif")
    (tmp_path / "all.vrt").write_text(vrt([("a.tif", 0, 0, 10, 12)], shape=(12, 10)))
    terrain = open_terrain(tmp_path)
    assert [path.name for path in terrain.paths] == ["a.tif"]
    both = open_terrain([tmp_path / "all.vrt", tmp_path / "a.tif"])
    assert [path.name for path in both.paths] == ["all.vrt", "a.tif"]


def test_virtual_raster_of_files_elsewhere_is_a_tile(make_dem, tmp_path):
    (tmp_path / "far").mkdir()
    make_dem("far/a.tif")
    make_dem("b.tif", transform=NORTH_UP @ Affine.translation(10, 0))
    (tmp_path / "all.vrt").write_text(vrt([("far/a.tif", 0, 0, 10, 12)], shape=(12, 10)))
    assert [path.name for path in open_terrain(tmp_path).paths] == ["all.vrt", "b.tif"]


# --- odd names ----------------------------------------------------------------------------------


@pytest.mark.parametrize(
    "name",
    [
        *("a space.tif", "höhen 山.tif", "a#b%20c.tif", "what?.tif", "x[1].tif", "st*r.tif"),
        *("a'b&c.tif", "a:b.tif", "zip+file.tif", "-.tif", "a!b.tif", "GTIFF_DIR:2:a.tif"),
    ],
)
def test_names_with_spaces_and_signs(make_dem, tmp_path, name):
    folder = tmp_path / "größe und höhe (1)"
    folder.mkdir()
    path = folder / name
    shutil.move(make_dem(array=HEIGHTS), path)
    for given in (path, str(path), folder, f"{tmp_path}/gr*/*.tif"):
        terrain = open_terrain(given)
        assert terrain.paths == (path,)
        np.testing.assert_array_equal(terrain.read(3, 4, 50, 60), HEIGHTS[3:53, 4:64])


def test_undeclared_void_of_a_format_without_nodata(tmp_path):
    path = write_hgt(tmp_path, 46, 7, np.full((1201, 1201), 12, np.int16))
    with path.open("r+b") as file:
        file.write(np.array([-9999], ">i2").tobytes())
    with pytest.warns(ViewshedWarning, match=r"N46E007\.hgt: 1 cells? of -9999"):
        assert np.isnan(open_terrain(path).read(0, 0, 5, 5)[0, 0])
