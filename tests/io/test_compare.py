"""Two results of one question, file by file."""

import copy
import json

import geopandas
import numpy as np
import pytest
import rasterio
from affine import Affine
from shapely import box

from tests.io.records import sections
from viewshed.errors import DataError
from viewshed.io._files import file_sha256
from viewshed.io.compare import Comparison, changes, compare_outputs, verdict
from viewshed.io.raster import pixel_sha256
from viewshed.io.record import build_record
from viewshed.io.stac import STAC_NAME, write_stac


@pytest.fixture
def folders(tmp_path):
    """Give the folders of an old and a new result."""
    made = tmp_path / "old", tmp_path / "new å"
    for folder in made:
        folder.mkdir()
    return made


def raster(path, cells, *, unit="", transform=(30, 0, 0, 0, -30, 0), **options):
    with rasterio.open(
        path, "w", driver="GTiff", height=cells.shape[0], width=cells.shape[1], count=1,
        dtype=cells.dtype.name, crs="EPSG:32633", transform=Affine(*transform), **options,
    ) as file:  # fmt: skip
        file.write(cells, 1)
        file.set_band_unit(1, unit)


def compared(folders, *, pixels=True):
    """Compare what lies in two folders as if records listed it; give the only answer."""
    records = []
    for folder in folders:
        outputs = {}
        for path in folder.iterdir():
            outputs[path.name] = {"sha256": file_sha256(path)}
            if path.suffix == ".tif" and pixels:
                with rasterio.open(path) as file:
                    outputs[path.name]["pixel_sha256"] = pixel_sha256(file.read(1))
        records.append({"outputs": outputs})
    (found,) = compare_outputs(records[0], folders[0], records[1], folders[1])
    return found


def heights():
    return np.arange(600 * 5, dtype=np.float32).reshape(600, 5)


def test_same_bytes(folders):
    for folder in folders:
        raster(folder / "a.tif", heights())
    assert compared(folders) == Comparison("a.tif", "same-bytes")


def test_same_cells_in_other_bytes(folders):
    raster(folders[0] / "a.tif", heights())
    raster(folders[1] / "a.tif", heights(), compress="DEFLATE")
    assert compared(folders) == Comparison("a.tif", "same-values", "other bytes, the same cells")
    # a raster whose record holds no hash of its cells is read
    assert compared(folders, pixels=False).word == "same-values"


def test_cells_that_differ_are_counted_everywhere_in_the_file(folders):
    raster(folders[0] / "a.tif", heights(), unit="m")
    changed = heights()
    changed[0, 0] += 1.0
    changed[599, 4] -= 2.5
    raster(folders[1] / "a.tif", changed, unit="m")
    assert compared(folders) == Comparison(
        "a.tif", "different", "2 of 3,000 cells differ, by up to 2.5 m"
    )


def test_unknown_cells_are_equal_to_each_other_alone(folders):
    one, two = heights(), heights()
    one[:2] = np.nan
    two[:3] = np.nan
    raster(folders[0] / "a.tif", one, unit="m")
    raster(folders[1] / "a.tif", two, unit="m")
    assert compared(folders).told == "5 of 3,000 cells differ, by up to 0 m"


def test_states_have_no_size(folders):
    cells = np.zeros((3, 3), np.uint8)
    raster(folders[0] / "visible.tif", cells)
    cells[1, 1] = 255
    raster(folders[1] / "visible.tif", cells)
    assert compared(folders).told == "1 of 9 cells differ"


@pytest.mark.parametrize(
    ("cells", "transform"), [(heights()[:9], None), (heights(), (30, 0, 30, 0, -30, 0))]
)
def test_another_grid(folders, cells, transform):
    raster(folders[0] / "a.tif", heights())
    raster(folders[1] / "a.tif", cells, **({"transform": transform} if transform else {}))
    found = compared(folders, pixels=False)
    assert found.word == "different"
    assert found.told.startswith(f"the grid is another: {len(cells)} rows, 5 columns, was 600 rows")


def test_a_raster_that_cannot_be_read(folders):
    raster(folders[0] / "a.tif", heights())
    (folders[1] / "a.tif").write_text("no raster")
    with pytest.raises(DataError, match=r"new å/a\.tif: cannot be read: .*not recognized"):
        compare_outputs(
            {"outputs": {"a.tif": {"sha256": file_sha256(folders[0] / "a.tif")}}}, folders[0],
            {"outputs": {"a.tif": {"sha256": "x"}}}, folders[1],
        )  # fmt: skip


def test_without_the_old_files_the_records_alone_speak(folders):
    old = {"outputs": {"a.tif": {"sha256": "1", "pixel_sha256": "2"}, "b.csv": {"sha256": "3"}}}
    same = {"outputs": {"a.tif": {"sha256": "4", "pixel_sha256": "2"}, "b.csv": {"sha256": "3"}}}
    found = compare_outputs(old, folders[0], same, folders[1])
    assert [one.word for one in found] == ["same-values", "same-bytes"]
    other = copy.deepcopy(same)
    other["outputs"]["a.tif"]["pixel_sha256"] = "5"
    (found, _) = compare_outputs(old, folders[0], other, folders[1])
    assert found.word == "different"
    assert found.told == "how much is not known: the old file is no longer beside its record"


def test_an_old_file_that_was_tampered_with_is_not_compared(folders):
    (folders[0] / "b.csv").write_text("tampered")
    (folders[1] / "b.csv").write_text("new")
    (found,) = compare_outputs(
        {"outputs": {"b.csv": {"sha256": "1"}}}, folders[0],
        {"outputs": {"b.csv": {"sha256": "2"}}}, folders[1],
    )  # fmt: skip
    assert found.told.endswith("the old file is no longer the one of its record")


def test_an_old_file_that_is_a_folder_now(folders):
    (folders[0] / "b.csv").mkdir()
    (found,) = compare_outputs(
        {"outputs": {"b.csv": {"sha256": "1"}}}, folders[0],
        {"outputs": {"b.csv": {"sha256": "2"}}}, folders[1],
    )  # fmt: skip
    assert "the old file cannot be read: Is a directory" in found.told


def test_files_of_one_result_alone(folders):
    old, new = ({"outputs": {name: {"sha256": "1"}}} for name in ("count.tif", "summary.csv"))
    found = compare_outputs(old, folders[0], new, folders[1])
    assert found == [
        Comparison("count.tif", "missing", "was not made again"),
        Comparison("summary.csv", "new", "the earlier result did not have it"),
    ]


def test_a_picture_is_redrawn(folders):
    for n, folder in enumerate(folders):
        (folder / "map.png").write_bytes(bytes([n]))
    assert compared(folders).word == "redrawn"


def test_lines_of_a_table(folders):
    (folders[0] / "summary.csv").write_text("a\nb\nc\n")
    (folders[1] / "summary.csv").write_text("a\nB\nC\nd\n")
    assert compared(folders) == Comparison("summary.csv", "different", "3 lines differ")
    (folders[1] / "summary.csv").write_bytes(b"a\r\nb\r\nc\r\n")
    assert compared(folders).word == "same-values"


# --- polygons -----------------------------------------------------------------------------------


def patches(count=3, **columns):
    squares = [box(10.0 * n, 0.0, 10.0 * n + 5.0, 5.0) for n in range(count)]
    facts = {"observer": "Knoll", "area_m2": [25.0] * count, "map_m2": [None] * count, **columns}
    return geopandas.GeoDataFrame(facts, geometry=squares, crs="EPSG:32633")


def write(frame, folder, suffix):
    path = folder / f"visible{suffix}"
    if suffix == ".parquet":
        frame.to_parquet(path)
    else:
        frame.to_file(path, engine="pyogrio")


@pytest.mark.parametrize("suffix", [".gpkg", ".fgb", ".parquet"])
def test_polygons_in_another_order_are_the_same(folders, suffix):
    write(patches(), folders[0], suffix)
    turned = patches().iloc[::-1]
    turned.geometry = turned.geometry.reverse()
    write(turned, folders[1], suffix)
    found = compared(folders)
    assert found == Comparison(f"visible{suffix}", "same-values", "other bytes, the same content")


@pytest.mark.parametrize("suffix", [".gpkg", ".fgb", ".parquet"])
@pytest.mark.parametrize(
    ("other", "told"),
    [
        (lambda: patches(area_m2=[25.0, 25.0, 26.0]), "1 of 3 polygons differ"),
        (lambda: patches(4), "1 of 4 polygons differ"),
        (lambda: patches(observer="Hill"), "3 of 3 polygons differ"),
        (lambda: patches().rename(columns={"area_m2": "area"}), "3 of 3 polygons differ"),
        (lambda: patches().to_crs("EPSG:4326"), "3 of 3 polygons differ"),
    ],
    ids=["value", "more", "name", "column", "crs"],
)
def test_polygons_that_differ_are_counted(folders, suffix, other, told):
    write(patches(), folders[0], suffix)
    write(other(), folders[1], suffix)
    assert compared(folders) == Comparison(f"visible{suffix}", "different", told)


def test_files_of_a_shapefile_are_compared_as_a_whole(folders):
    write(patches(), folders[0], ".shp")
    write(patches().iloc[::-1], folders[1], ".shp")
    records = [
        {"outputs": {p.name: {"sha256": file_sha256(p)} for p in folder.iterdir()}}
        for folder in folders
    ]
    found = compare_outputs(records[0], folders[0], records[1], folders[1])
    assert {one.name[-3:]: one.word for one in found} == {
        "cpg": "same-bytes",
        "dbf": "same-bytes",
        "prj": "same-bytes",
        "shp": "same-values",
        "shx": "same-bytes",
    }


def test_polygons_that_cannot_be_read(folders):
    write(patches(), folders[0], ".gpkg")
    (folders[1] / "visible.gpkg").write_text("nothing")
    with pytest.raises(DataError, match=r"^[^\n]*visible\.gpkg: cannot be read: [^\n]*$"):
        compared(folders)


# --- the STAC item ------------------------------------------------------------------------------


def items(folders, **changes):
    record = build_record(sections())
    write_stac(folders[0] / STAC_NAME, record)
    write_stac(folders[1] / STAC_NAME, {**record, **changes}, name="another")
    return compared(folders)


def test_an_item_elsewhere_by_another_version_is_the_same(folders):
    moved = [{**sections()["dem"][0], "path": "../else/a.tif"}]
    assert items(folders, dem=moved, version="9", question="in other words").word == "same-values"


def test_an_item_of_another_place(folders):
    grid = {**sections()["grid"], "shape": [3, 5]}
    assert items(folders, grid=grid) == Comparison(
        STAC_NAME, "different", "other bbox, geometry, properties"
    )


def test_an_item_with_more_assets(folders):
    assert items(folders, outputs={"a.tif": {"sha256": "0" * 64}}).told == "other assets"


# --- the whole ----------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("words", "whole"),
    [
        (["same-bytes", "same-bytes"], "same-bytes"),
        (["same-bytes", "new"], "same-bytes"),
        (["same-bytes", "same-values"], "same-values"),
        (["same-bytes", "redrawn"], "same-values"),
        (["same-values", "different"], "different"),
        (["redrawn", "missing"], "different"),
    ],
)
def test_verdict(words, whole):
    assert verdict([Comparison("", word) for word in words]) == whole


def test_what_changed_since():
    old = build_record(sections())
    new = json.loads(json.dumps(old))
    assert changes(old, new) == []
    new["version"] = "1.3"
    new["platform"]["processor"] = "znver9"
    new["libraries"]["numpy"] = "9.0"
    new["libraries"]["brand-new"] = "0.1"
    del new["libraries"]["numba"]
    assert changes(old, new) == [
        ("viewshed", "1.2", "1.3"),
        ("processor", old["platform"]["processor"], "znver9"),
        ("numba", old["libraries"]["numba"], "none"),
        ("numpy", old["libraries"]["numpy"], "9.0"),
        ("brand-new", "none", "0.1"),
    ]
