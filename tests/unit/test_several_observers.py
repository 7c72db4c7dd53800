"""Several observers in one map: each as if it were alone, then together by the rules."""

import csv
import io
import json
import logging
from dataclasses import replace

import numpy as np
import pytest
import rasterio

import viewshed
from tests.unit.test_api import LEFT, TOP, post, write_dem
from viewshed import api, looking
from viewshed.constants import MOST_OBSERVERS
from viewshed.io import _memory
from viewshed.placing import named
from viewshed.recording import bands_told, observer_table, summary_csv

EVERY_LAYER = ("visible", "clearance", "needed-height", "count", "count-unresolved", "who")


@pytest.fixture
def hills():
    y, x = np.mgrid[0:60, 0:80]
    z = (40 * np.sin(x / 7.0) * np.cos(y / 5.0) + 100).astype(np.float32)
    z[20:24, 50:55] = -9999
    return z


@pytest.fixture
def terrain(tmp_path, hills):
    return viewshed.open_terrain(write_dem(tmp_path / "hills.tif", hills, nodata=-9999))


@pytest.fixture
def three():
    """Three who ask different things."""
    return [
        viewshed.Observer(*post(30, 40), name="Knoll", eye_height=9),
        viewshed.Observer(*post(22.3, 60.6), name="Ridge", range_m=400, target_height=3),
        viewshed.Observer(*post(40, 20), name="Far", sector=viewshed.Sector(350, 100)),
    ]


def look(terrain, observers, **asked):
    return viewshed.map_visibility(terrain, observers, **{"range_m": 500.0, **asked})


def whole(terrain, result, layer="visible"):
    """A layer on the grid of the terrain."""
    array = result.arrays[layer]
    full = np.full(terrain.grid.shape, 255 if layer == "visible" else np.nan, array.dtype)
    row, col = (round(float(v)) for v in terrain.grid.rowcol(*result.grid.xy(0, 0)))
    full[row : row + array.shape[0], col : col + array.shape[1]] = array
    return full


def test_together_they_see_what_each_sees_alone(terrain, three):
    together = look(terrain, three, layers=EVERY_LAYER)
    alone = [whole(terrain, look(terrain, one)) for one in three]
    stack = np.stack(alone)
    count = (stack == 1).sum(axis=0)
    want = np.where(
        (stack == 255).all(axis=0),
        255,
        np.where(count > 0, 1, np.where((stack == 2).any(axis=0), 2, 0)),
    )
    found = whole(terrain, together)
    np.testing.assert_array_equal(found, want)
    assert {0, 1, 2, 255} == set(np.unique(found))
    inside = together.visible != 255
    np.testing.assert_array_equal(
        together.count[inside], _cut(terrain, together, count)[inside].astype(np.uint16)
    )
    assert (together.count[~inside] == 65535).all()
    for n, one in enumerate(alone):
        own = _cut(terrain, together, one)
        np.testing.assert_array_equal((together.who >> n) & 1, own == 1)
    unresolved = together.arrays["count-unresolved"]
    assert unresolved[inside].max() >= 1


def _cut(terrain, result, full):
    row, col = (round(float(v)) for v in terrain.grid.rowcol(*result.grid.xy(0, 0)))
    return full[row : row + result.grid.rows, col : col + result.grid.cols]


def test_clearance_is_the_greatest_and_needed_height_the_least(terrain, three):
    layers = ("clearance", "needed-height")
    together = look(terrain, three, layers=layers)
    singles = [look(terrain, one, layers=layers) for one in three]
    known = together.visible < 2
    for layer, best in (("clearance", np.fmax), ("needed-height", np.fmin)):
        want = best.reduce([whole(terrain, one, layer) for one in singles])
        np.testing.assert_array_equal(
            together.arrays[layer][known], _cut(terrain, together, want)[known]
        )
        assert np.isnan(together.arrays[layer][~known]).all()


def test_each_keeps_its_own_range_target_and_sector(terrain, three):
    together = look(terrain, three, each=True)
    for view, one in zip(together.views, three, strict=True):
        alone = look(terrain, one)
        np.testing.assert_array_equal(view.visible, alone.visible)
        assert view.tally.counts["visible"] == alone.counts["visible"]
        assert view.tally.areas_m2 == pytest.approx(alone.areas_m2, rel=1e-6, abs=0.06)
        far = together.farthest_of(view)
        assert far["distance_m"] == alone.farthest_visible["distance_m"]
        assert (far["x"], far["y"]) == (alone.farthest_visible["x"], alone.farthest_visible["y"])
    assert [view.placed.target_height for view in together.views] == [0, 3, 0]
    assert together.question == (
        "from 1.7 to 9 m above ground at 3 points to 0 to 3 m above ground everywhere within "
        "400 m to 500 m, each over its own bearings, k = 0.13 (K = 1.149)"
    )


def test_observers_far_apart_share_one_grid(terrain):
    corners = [viewshed.Observer(*post(10, 10)), viewshed.Observer(*post(50, 70))]
    result = look(terrain, corners, range_m=200, layers=("count",))
    assert result.visible.shape == (53, 73)
    assert result.count[result.visible != 255].max() == 1
    assert (result.visible[20:30, 30:40] == 255).all()
    assert [view.observer.name for view in result.views] == ["observer 1", "observer 2"]


def test_the_same_observer_twice_changes_only_the_count(terrain, three):
    once = look(terrain, three[0], layers=("count", "clearance"))
    same = [three[0], replace(three[0], name="Again")]
    twice = look(terrain, same, layers=("count", "clearance"))
    np.testing.assert_array_equal(once.visible, twice.visible)
    np.testing.assert_array_equal(once.clearance, twice.clearance)
    seen = once.visible == 1
    assert (once.count[seen] == 1).all()
    assert (twice.count[seen] == 2).all()


@pytest.mark.parametrize("room", [0.0, 1e9])
def test_threads_change_nothing(terrain, three, room, monkeypatch):
    """Neither with a thread an observer nor with all threads on one after the other."""
    monkeypatch.setattr(_memory, "_MORE_WINDOWS", room)
    one, many = (look(terrain, three, layers=EVERY_LAYER, each=True, threads=n) for n in (1, 3))
    for layer in EVERY_LAYER:
        assert one.arrays[layer].tobytes() == many.arrays[layer].tobytes()
    assert summary_csv(one) == summary_csv(many)
    for alone, beside in zip(one.views, many.views, strict=True):
        assert alone.observer == beside.observer
        assert alone.tally == beside.tally
        assert alone.visible.tobytes() == beside.visible.tobytes()


@pytest.mark.parametrize(("room", "most"), [(0.0, 1), (1e9, 3)])
def test_windows_under_way_are_bounded_by_their_size(terrain, three, room, most, monkeypatch):
    monkeypatch.setattr(_memory, "_MORE_WINDOWS", room)
    asked = []
    run_jobs = looking.run_jobs

    def told(jobs, **how):
        asked.append(how["at_once"])
        run_jobs(jobs, **how)

    monkeypatch.setattr(looking, "run_jobs", told)
    look(terrain, three, threads=3)
    assert asked == [most]


@pytest.mark.parametrize("threads", [1, 3])
def test_the_first_who_cannot_see_is_named(terrain, three, threads, monkeypatch):
    """Both are refused only when they look, and each may be the first to."""
    compute = looking.compute

    def refuse(*args, **asked):
        if asked["target_height"] == 7.0:
            msg = "too much is asked"
            raise viewshed.InputError(msg)
        return compute(*args, **asked)

    monkeypatch.setattr(looking, "compute", refuse)
    bad = [replace(one, name=f"Bad {one.name}", target_height=7.0) for one in three[1:]]
    with pytest.raises(viewshed.InputError, match=r"'Bad Ridge' at .*: too much is asked"):
        look(terrain, [three[0], *bad], threads=threads)


def test_nobody_looks_before_all_have_found_their_footing(terrain, three, monkeypatch):
    def never(*args, **asked):
        pytest.fail("looked")

    monkeypatch.setattr(looking, "compute", never)
    void = viewshed.Observer(*post(21, 52), name="Last")
    with pytest.raises(viewshed.InputError, match=r"'Last' at .* beside a void"):
        look(terrain, [*three, void])


def test_progress_runs_to_the_end(terrain, three):
    told = []
    look(terrain, three, progress=lambda done, total: told.append(done / total))
    assert told == sorted(told)
    assert told[-1] == pytest.approx(1.0)


def test_a_long_run_says_first_what_it_will_cost(terrain, three, monkeypatch, caplog):
    monkeypatch.setattr(api, "_LONG_RUN", 0.0)
    with caplog.at_level(logging.WARNING, "viewshed"):
        look(terrain, three, threads=1)
    assert "3 observers look at 4.1e+03 cells in all: about" in caplog.text


def test_the_bits_of_who_end_at_thirty_two(terrain):
    many = [viewshed.Observer(*post(30, 30 + n / 10)) for n in range(33)]
    with pytest.raises(viewshed.InputError, match="32 bits and there are 33 observers"):
        look(terrain, many, layers=("who",))
    result = look(terrain, many[:32], range_m=60, layers=("who", "count"))
    bits = sum((result.who >> n) & 1 for n in range(32))
    inside = result.visible != 255
    np.testing.assert_array_equal(bits[inside], result.count[inside])
    assert result.who.max() >> 31 == 1


def test_too_many_and_none_are_refused(terrain):
    with pytest.raises(viewshed.InputError, match="no observer"):
        look(terrain, [])
    with pytest.raises(viewshed.InputError, match="65535 observers are more than one map holds"):
        named([viewshed.Observer(0, 0)] * (MOST_OBSERVERS + 1))


def test_what_is_no_observer_and_names_given_twice_are_refused(terrain, three):
    for wrong in ([(1, 2)], (396500, 6223500), 7, ["A"]):
        with pytest.raises(viewshed.InputError, match=r"no observer; make it with viewshed\.Obs"):
            look(terrain, wrong)
    with pytest.raises(viewshed.InputError, match="two observers are called 'Far'"):
        look(terrain, [*three, replace(three[0], name="Far")])


def test_degrees_on_a_grid_of_metres_are_recognised(terrain):
    lon, lat = 15.0155, 45.145
    with pytest.raises(viewshed.InputError, match="add --observer-crs EPSG:4326"):
        look(terrain, viewshed.Observer(lon, lat))
    look(terrain, viewshed.Observer(lon, lat, crs="EPSG:4326"))


def test_voids_that_are_stated_and_not_there_are_told(tmp_path):
    plain = write_dem(tmp_path / "plain.tif", np.ones((40, 40), np.float32))
    stated = viewshed.open_terrain(plain, void_height=0.0)
    with pytest.warns(viewshed.ViewshedWarning, match="stated to be 0 m and none was found"):
        look(stated, viewshed.Observer(*post(20, 20)))


def test_a_message_names_the_observer(terrain):
    good = viewshed.Observer(*post(30, 40), name="Good")
    bad = {
        "outside the elevation grid": viewshed.Observer(LEFT - 5000, TOP, name="Mast 3"),
        "swapped it lies inside": viewshed.Observer(*post(30, 40)[::-1], name="Mast 3"),
        "beside a void": viewshed.Observer(*post(21, 52), name="Mast 3"),
        "below the ground": viewshed.Observer(*post(30, 40), name="Mast 3", eye_elevation=3),
    }
    for told, observer in bad.items():
        with pytest.raises(viewshed.InputError, match=rf"'Mast 3'.*{told}"):
            look(terrain, [good, observer])


def test_memory_is_checked_for_all_of_them(terrain, three, monkeypatch):
    monkeypatch.setattr("viewshed.io._memory.usable_memory", lambda: 1000)
    with pytest.raises(viewshed.MemoryLimitError, match="map fewer or nearer observers"):
        look(terrain, three)


def test_the_table_has_a_row_for_each(terrain, three):
    result = look(terrain, three)
    rows = list(csv.DictReader(io.StringIO(summary_csv(result))))
    assert [row["observer"] for row in rows] == ["Knoll", "Ridge", "Far"]
    for row, view in zip(rows, result.views, strict=True):
        areas = view.tally.areas_m2
        assert float(row["visible_m2"]) == pytest.approx(areas["visible"], abs=0.06)
        share = areas["visible"] / sum(areas.values())
        assert float(row["seen_share"]) == pytest.approx(share, abs=1e-6)
        bands = [v for name, v in row.items() if name.startswith("visible_m2_") and v]
        assert sum(map(float, bands)) == pytest.approx(areas["visible"], abs=0.5)
        assert len(bands) == len(view.tally.bands)
    assert (rows[2]["bearing_from"], rows[2]["bearing_to"]) == ("350.0", "100.0")
    assert rows[1]["visible_m2_400_500m"] == ""
    told = observer_table(result)
    assert len({len(row) for row in told}) == 1
    assert [row[0] for row in told] == ["Observer", "Knoll", "Ridge", "Far"]
    assert len(bands_told(result.views[0])) == len(result.views[0].tally.bands)


def test_each_writes_a_raster_for_every_observer(terrain, three, tmp_path):
    result = look(terrain, three, each=True, layers=EVERY_LAYER)
    result.write(tmp_path / "out", picture=False)
    for view in result.views:
        with rasterio.open(tmp_path / "out" / f"visible_{view.observer.name}.tif") as file:
            np.testing.assert_array_equal(file.read(1), view.visible)
            assert file.tags()["VIEWSHED_OBSERVER"] == view.observer.name
            col, row = ~result.grid.transform @ (file.transform.c, file.transform.f)
            assert (round(row), round(col)) == view.window[:2]
    with rasterio.open(tmp_path / "out" / "who.tif") as file:
        np.testing.assert_array_equal(file.read(1), result.who)
        assert file.tags()["VIEWSHED_BITS"] == "1 Knoll; 2 Ridge; 3 Far"
    record = json.loads((tmp_path / "out" / "record.json").read_text(encoding="utf-8"))
    assert record["outputs"]["visible_Ridge.tif"]["observer"] == "Ridge"
    assert [one["name"] for one in record["observers"]] == ["Knoll", "Ridge", "Far"]
    asked = record["options"]["observers"]
    assert [one["range_m"] for one in asked] == [None, 400.0, None]
    assert asked[2]["sector_deg"] == [350.0, 100.0]
    assert record["options"]["each"] is True


def test_a_name_that_is_no_file_name_is_refused_only_where_it_names_files(terrain, tmp_path):
    odd = [viewshed.Observer(*post(30, 40), name="a/b"), viewshed.Observer(*post(30, 41))]
    look(terrain, odd, range_m=100).write(tmp_path / "one", picture=False)
    with pytest.raises(viewshed.InputError, match="'a/b'"):
        look(terrain, odd, range_m=100, each=True).write(tmp_path / "two", picture=False)
    assert not (tmp_path / "two").exists()
