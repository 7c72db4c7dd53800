"""From files to a result and back: the Python interface."""

import json
import math
import warnings

import numpy as np
import pytest
import rasterio
from affine import Affine

import viewshed
from viewshed import geodesy, wording
from viewshed.io.record import matching

CELL = 30.0
LEFT, TOP = 500_000.0, 5_000_000.0


def write_dem(path, z, *, crs="EPSG:32633", transform=None, nodata=None):
    transform = transform or Affine(CELL, 0, LEFT, 0, -CELL, TOP)
    with rasterio.open(
        path, "w", driver="GTiff", height=z.shape[0], width=z.shape[1], count=1,
        dtype=z.dtype.name, crs=crs, transform=transform, nodata=nodata,
    ) as file:  # fmt: skip
        file.write(z, 1)
    return path


def post(row, col):
    """Map coordinates of a cell centre."""
    return LEFT + (col + 0.5) * CELL, TOP - (row + 0.5) * CELL


@pytest.fixture
def hills():
    y, x = np.mgrid[0:60, 0:80]
    return (40 * np.sin(x / 7.0) * np.cos(y / 5.0) + 100).astype(np.float32)


@pytest.fixture
def terrain(tmp_path, hills):
    return viewshed.open_terrain(write_dem(tmp_path / "hills.tif", hills))


def test_a_result_is_cropped_to_the_range_and_keeps_the_cells(terrain, hills):
    x, y = post(30, 40)
    result = viewshed.map_visibility(terrain, viewshed.Observer(x, y), range_m=301.0)
    # a circle of ten cells and the cell in the middle
    assert result.visible.shape == result.grid.shape == (21, 21)
    row, col = (float(v) for v in result.grid.rowcol(x, y))
    assert (row, col) == (10.0, 10.0)
    np.testing.assert_array_equal(result.elevation, hills[20:41, 30:51])
    assert result.visible[10, 10] == 1
    assert result.visible[0, 0] == 255
    assert sum(result.counts.values()) == 21 * 21
    assert set(result.summary[0]) > {"Visible"}


def test_layers_agree_with_each_other(terrain):
    x, y = post(30.25, 40.5)
    result = viewshed.map_visibility(
        terrain, viewshed.Observer(x, y), target=2.0, range_m=800.0,
        layers=("needed-height", "clearance"),
    )  # fmt: skip
    assert result.layers == ("visible", "clearance", "needed-height")
    known = (result.visible == 1) | (result.visible == 0)
    assert np.isnan(result.clearance[~known]).all()
    np.testing.assert_array_equal(result.visible[known] == 1, result.clearance[known] >= 0)
    np.testing.assert_array_equal(
        result.needed_height[known],
        np.maximum(np.float32(0), np.float32(2) - result.clearance[known]),
    )


def test_farthest_visible_is_the_farthest(terrain):
    x, y = post(3, 5)
    with pytest.warns(viewshed.ViewshedWarning, match="past the elevation grid"):
        result = viewshed.map_visibility(terrain, viewshed.Observer(x, y, eye_height=20))
    rows, cols = np.nonzero(result.visible == 1)
    distances = np.hypot(*result.views[0].post_map.en(rows, cols))
    far = result.farthest_visible
    assert far["distance_m"] == pytest.approx(distances.max(), abs=0.01)
    assert math.hypot(far["x"] - x, far["y"] - y) == pytest.approx(distances.max(), rel=1e-3)
    assert "past the elevation grid" in result.record["warnings"][0]


def test_areas_are_those_of_the_cells(terrain):
    result = viewshed.map_visibility(terrain, viewshed.Observer(*post(30, 40)), range_m=600)
    cells = sum(result.counts[name] for name in ("visible", "hidden", "unresolved"))
    # UTM at its central meridian draws 0.9996 to 1: cells are larger than they look
    assert sum(result.areas_m2.values()) == pytest.approx(cells * (CELL / 0.9996) ** 2, rel=1e-5)


def test_the_position_may_be_given_in_another_crs(terrain):
    x, y = post(30, 40)
    lon, lat = _lonlat(x, y)
    one = viewshed.map_visibility(terrain, viewshed.Observer(x, y), range_m=600)
    two = viewshed.map_visibility(
        terrain, viewshed.Observer(lon, lat, crs="EPSG:4326"), range_m=600
    )
    assert two.views[0].position == pytest.approx(one.views[0].position, abs=1e-6)
    assert (one.visible != two.visible).mean() < 0.001


def _lonlat(x, y):
    given, asked = geodesy.crs_from_user("EPSG:32633"), geodesy.crs_from_user("EPSG:4326")
    return geodesy.transform_point(x, y, given, asked)


@pytest.mark.parametrize(
    ("where", "told"),
    [
        ((500_010.0, 4_999_500.0), "rim"),
        ((499_000.0, 4_999_500.0), "outside the elevation grid"),
        ((501_000.0, 5_000_100.0), "outside the elevation grid"),
    ],
)
def test_a_position_off_the_posts_is_told_apart(terrain, where, told):
    with pytest.raises(viewshed.InputError, match=told):
        viewshed.map_visibility(terrain, viewshed.Observer(*where), range_m=100)


def test_an_observer_on_a_void_is_refused(tmp_path, hills):
    hills[30, 40] = -9999
    terrain = viewshed.open_terrain(write_dem(tmp_path / "v.tif", hills, nodata=-9999))
    for row, col in ((30, 40), (30.5, 40.5), (30, 39.75)):
        with pytest.raises(viewshed.InputError, match="void"):
            viewshed.map_visibility(terrain, viewshed.Observer(*post(row, col)), range_m=300)
    beside = viewshed.map_visibility(terrain, viewshed.Observer(*post(30, 39)), range_m=300)
    assert (beside.visible == 2).any()
    assert beside.counts["unresolved"] == (beside.visible == 2).sum()


def test_an_eye_under_ground_is_refused(terrain):
    observer = viewshed.Observer(*post(30, 40), eye_elevation=10.0)
    with pytest.raises(viewshed.InputError, match="below the ground"):
        viewshed.map_visibility(terrain, observer, range_m=300)


def test_an_absolute_eye_is_the_same_as_one_above_ground(terrain, hills):
    x, y = post(30, 40)
    above = viewshed.map_visibility(terrain, viewshed.Observer(x, y, eye_height=12), range_m=600)
    elevation = float(hills[30, 40]) + 12.0
    absolute = viewshed.map_visibility(
        terrain, viewshed.Observer(x, y, eye_elevation=elevation), range_m=600
    )
    np.testing.assert_array_equal(above.visible, absolute.visible)
    assert "elevation" in absolute.question


@pytest.mark.parametrize("range_m", [0.0, -5.0, math.nan, math.inf])
def test_a_range_without_sense_is_refused(terrain, range_m):
    with pytest.raises(viewshed.InputError, match="range"):
        viewshed.map_visibility(terrain, viewshed.Observer(*post(30, 40)), range_m=range_m)


def test_an_unknown_layer_is_refused(terrain):
    with pytest.raises(viewshed.InputError, match=r"'shadow'.*visible, clearance"):
        viewshed.map_visibility(
            terrain, viewshed.Observer(*post(30, 40)), range_m=300, layers=["shadow"]
        )


def test_a_window_that_does_not_fit_is_refused_before_it_is_read(terrain, monkeypatch):
    monkeypatch.setattr("viewshed.io._memory.usable_memory", lambda: 1000)
    monkeypatch.setattr(
        type(terrain), "load", lambda *_, **__: pytest.fail("read although it does not fit")
    )
    with pytest.raises(viewshed.MemoryLimitError, match=r"range 600 m needs .* there are"):
        viewshed.map_visibility(terrain, viewshed.Observer(*post(30, 40)), range_m=600)


def test_a_structure_entered_as_a_target_is_told(terrain):
    observer = viewshed.Observer(*post(30, 40))
    with pytest.warns(viewshed.ViewshedWarning, match="make its top the observer"):
        viewshed.map_visibility(terrain, observer, target=80.0, range_m=600)


def test_written_files_say_the_question_and_repeat_to_the_byte(terrain, tmp_path):
    observer = viewshed.Observer(*post(30, 40), name="Knoll")
    layers = ("visible", "clearance", "needed-height")
    folders = [tmp_path / "one", tmp_path / "two"]
    for folder in folders:
        result = viewshed.map_visibility(
            terrain, observer, range_m=600, refraction="K=4/3", layers=layers
        )
        paths = result.write(folder)
        assert [p.name for p in paths] == [
            "map.png", "clearance.tif", "needed_height.tif", "visible.tif", "summary.csv",
            "record.json",
        ]  # fmt: skip
        assert matching(folder)
    for path in paths:
        assert (folders[0] / path.name).read_bytes() == (folders[1] / path.name).read_bytes()
    with rasterio.open(folders[0] / "visible.tif") as file:
        np.testing.assert_array_equal(file.read(1), result.visible)
        assert file.nodata == 255
        assert file.tags()["VIEWSHED_QUESTION"] == result.question
        assert float(file.tags()["VIEWSHED_REFRACTION_K"]) == 0.25
        assert file.transform == result.grid.transform
    with rasterio.open(folders[0] / "clearance.tif") as file:
        np.testing.assert_array_equal(file.read(1), result.clearance)
        assert file.units == ("m",)
        assert math.isnan(file.nodata)
    record = json.loads((folders[0] / "record.json").read_text(encoding="utf-8"))
    assert record["refraction"]["K"] == pytest.approx(4 / 3)
    assert record["question"].startswith("from 1.7 m above ground at Knoll, ")
    assert set(record["outputs"]) == {p.name for p in paths} - {"record.json"}
    assert record["geometry"]["error_cells"] <= 0.01


def test_overwriting_leaves_no_stale_layer(terrain, tmp_path):
    observer = viewshed.Observer(*post(30, 40))
    many = viewshed.map_visibility(terrain, observer, range_m=300, layers=("clearance",))
    few = viewshed.map_visibility(terrain, observer, range_m=300)
    many.write(tmp_path / "out", picture=False)
    with pytest.raises(viewshed.OutputError, match="--overwrite"):
        few.write(tmp_path / "out", picture=False)
    few.write(tmp_path / "out", picture=False, overwrite=True)
    left = {p.name for p in (tmp_path / "out").iterdir() if not p.name.startswith(".")}
    assert left == {"visible.tif", "summary.csv", "record.json"}


def test_an_option_of_the_format_is_passed_on_or_refused(terrain, tmp_path):
    result = viewshed.map_visibility(terrain, viewshed.Observer(*post(30, 40)), range_m=300)
    result.write(tmp_path / "z", picture=False, creation_options={"COMPRESS": "LZW"})
    with rasterio.open(tmp_path / "z" / "visible.tif") as file:
        assert file.profile["compress"] == "lzw"
    for option, told in (("SHAPE=ROUND", "'SHAPE' is unknown"), ("COMPRESS=BOGUS", "DEFLATE")):
        with pytest.raises(viewshed.InputError, match=told):
            result.write(
                tmp_path / "y", picture=False, creation_options=dict([option.split("=")])
            )
    assert not (tmp_path / "y").exists()


def test_the_elevation_is_never_written_over(tmp_path, hills):
    folder = tmp_path / "data"
    folder.mkdir()
    source = write_dem(folder / "visible.tif", hills)
    before = source.read_bytes()
    result = viewshed.map_visibility(
        viewshed.open_terrain(source), viewshed.Observer(*post(30, 40)), range_m=300
    )
    for overwrite in (False, True):
        with pytest.raises(viewshed.OutputError, match=r"visible\.tif"):
            result.write(folder, overwrite=overwrite, picture=False)
    assert source.read_bytes() == before


def test_a_range_that_reaches_no_cell_is_refused(terrain):
    with pytest.raises(viewshed.InputError, match=r"no known cell centre .* widen"):
        viewshed.map_visibility(terrain, viewshed.Observer(*post(30.5, 40.5)), range_m=5)


def test_a_range_may_be_a_text_and_has_an_end(terrain):
    observer = viewshed.Observer(*post(30, 40))
    assert viewshed.map_visibility(terrain, observer, range_m="0.3km").asked.range_m == 300.0
    with pytest.raises(viewshed.InputError, match="up to 20000 km"):
        viewshed.map_visibility(terrain, observer, range_m=1e12)


def test_the_page_says_how_much_of_the_range_is_known(terrain):
    whole = viewshed.map_visibility(terrain, viewshed.Observer(*post(30, 40)), range_m=600)
    assert whole.views[0].covered == pytest.approx(1.0, abs=0.01)
    assert "Range on known ground" not in dict(whole.summary)
    with pytest.warns(viewshed.ViewshedWarning, match="past"):
        part = viewshed.map_visibility(terrain, viewshed.Observer(*post(0, 40)), range_m=600)
    assert part.views[0].covered == pytest.approx(0.5, abs=0.05)
    assert dict(part.summary)["Range on known ground"].startswith("5")
    assert part.record["observers"][0]["range_on_known_ground"] == pytest.approx(0.5, abs=0.05)


def test_clearance_stays_fit_for_a_display(terrain):
    x, y = post(30.00002, 40)  # half a millimetre beside a row of posts
    result = viewshed.map_visibility(
        terrain, viewshed.Observer(x, y, eye_height=60), range_m=300, layers=("clearance",)
    )
    assert np.nanmax(result.clearance) == 10_000.0
    assert (result.clearance == 10_000.0).sum() < 10


def test_small_areas_and_lengths_are_told_in_metres(terrain):
    result = viewshed.map_visibility(terrain, viewshed.Observer(*post(30, 40)), range_m=100)
    told = dict(result.summary)
    assert " m2" in told["Visible"]
    assert told["Farthest visible"].split()[1] == "m"


def test_turned_and_south_up_grids_give_the_same_places(tmp_path, hills):
    x, y = post(30, 40)
    plain = viewshed.open_terrain(write_dem(tmp_path / "a.tif", hills))
    flipped = viewshed.open_terrain(
        write_dem(
            tmp_path / "b.tif",
            np.ascontiguousarray(hills[::-1]),
            transform=Affine(CELL, 0, LEFT, 0, CELL, TOP - CELL * hills.shape[0]),
        )
    )
    turned = viewshed.open_terrain(
        write_dem(
            tmp_path / "c.tif",
            np.ascontiguousarray(hills.T),
            transform=Affine(0, CELL, LEFT, -CELL, 0, TOP),
        )
    )
    one, two, three = (
        viewshed.map_visibility(t, viewshed.Observer(x, y), range_m=600)
        for t in (plain, flipped, turned)
    )
    assert (one.visible != two.visible[::-1]).sum() <= 1
    assert (one.visible != three.visible.T).sum() <= 1


def test_numbers_are_written_without_needless_digits():
    assert wording.told_number(410385.0) == "410385"
    assert wording.told_number(-84.2) == "-84.2"
    assert wording.told_number(0.0) == "0"


def test_nothing_warns_on_an_ordinary_run(terrain):
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        viewshed.map_visibility(terrain, viewshed.Observer(*post(30, 40)), range_m=300)
