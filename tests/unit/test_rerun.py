"""From a record back to the calls that made its result, and the check of its inputs."""

import hashlib
import inspect

import pytest

from tests.io.records import SECTOR, sections, surface
from viewshed import rerun as rerun_module
from viewshed.api import map_visibility
from viewshed.atmosphere import Refraction
from viewshed.errors import DataError, InputError, ViewshedWarning
from viewshed.io.elevation import open_terrain
from viewshed.io.record import build_record, write_record
from viewshed.io.surface import open_surface
from viewshed.places import Observer, Sector, Target
from viewshed.rerun import arguments, check_folder, check_inputs, rerun
from viewshed.result import MapResult


def options(**changes):
    return {**sections()["options"], **changes}


def a_record(**changes):
    return build_record(sections(**changes))


# --- arguments ----------------------------------------------------------------------------------


def test_every_value_of_the_record_comes_back(tmp_path):
    found = arguments(a_record(), tmp_path)
    assert found.terrain == {
        "paths": [f"{tmp_path}/dems/a.tif"],
        "crs": None,
        "height_unit": None,
        "void_height": None,
        "void_mask": None,
    }
    assert found.surface is None
    assert found.observers == [
        Observer(
            400_050.0, 5_999_950.0, 50.0, "Knoll", range_m=20_000.0, sector=Sector(*SECTOR)
        ),
        Observer(13.5, 54.1, None, "Tårn 2", "EPSG:4326", 120.5, target_height=0.0),
    ]
    assert found.map == {
        "target": Target(1.7),
        "range_m": 30_000.0,
        "refraction": Refraction(0.13, "survey"),
        "sector": None,
        "layers": ("visible", "clearance"),
        "each": False,
    }
    assert found.write == {
        "picture": True,
        "polygons": "none",
        "min_patch_m2": 0.0,
        "stac": False,
        "creation_options": {},
    }


def test_what_was_stated_of_the_grids_comes_back(tmp_path):
    stated = {
        "crs": "EPSG:32633",
        "height_unit": "ft",
        "void_height_m": 0.0,
        "void_mask": "../sea å.gpkg",
        "surface": ["../dsm/*.tif"],
        "surface_crs": "EPSG:32632",
        "surface_height_unit": "us-ft",
        "sector_deg": [10.0, 20.0],
    }
    record = a_record(options=options(**stated), surface=surface("../dsm/1.tif"))
    found = arguments(record, tmp_path / "out")
    assert found.terrain["crs"] == "EPSG:32633"
    assert found.terrain["height_unit"] == "ft"
    assert found.terrain["void_height"] == 0.0
    assert found.terrain["void_mask"] == f"{tmp_path}/sea å.gpkg"
    assert found.surface == {
        "paths": [f"{tmp_path}/dsm/*.tif"],
        "crs": "EPSG:32632",
        "height_unit": "us-ft",
    }
    assert found.map["sector"] == Sector(10.0, 20.0)


def test_what_was_to_be_written_comes_back(tmp_path):
    asked = {
        "picture": False,
        "polygons": "gpkg",
        "min_patch_m2": 5000.0,
        "stac": True,
        "creation_options": {"COMPRESS": "ZSTD"},
    }
    assert arguments(a_record(options=options(**asked)), tmp_path).write == asked


def test_arguments_are_those_of_the_calls(tmp_path):
    record = a_record(options=options(surface=["dsm.tif"]), surface=surface("dsm.tif"))
    found = arguments(record, tmp_path)
    for given, call in (
        (found.terrain, open_terrain),
        (found.surface, open_surface),
        (found.map, map_visibility),
        (found.write, MapResult.write),
    ):
        assert set(given) <= set(inspect.signature(call).parameters), call.__name__


def test_grids_that_were_moved(tmp_path):
    record = a_record(options=options(surface=["dsm.tif"]), surface=surface("dsm.tif"))
    found = arguments(record, tmp_path, dem=["there/b.tif", tmp_path], surface=["s.tif"])
    assert found.terrain["paths"] == ["there/b.tif", str(tmp_path)]
    assert found.surface["paths"] == ["s.tif"]


def test_a_surface_that_the_record_does_not_have(tmp_path):
    with pytest.raises(InputError, match=r"surface s\.tif: the record has none; leave --surface"):
        arguments(a_record(), tmp_path, surface=["s.tif"])


def test_the_folder_of_a_record_is_no_pattern(tmp_path):
    folder = tmp_path / "run [1]"
    folder.mkdir()
    (folder / "a[1].tif").write_text("")
    record = a_record(options=options(dem=["t?.tif", "a[1].tif", "a.tif"]))
    assert arguments(record, folder).terrain["paths"] == [
        f"{tmp_path}/run [[]1]/t?.tif",
        f"{folder}/a[1].tif",
        f"{folder}/a.tif",
    ]


# --- inputs -------------------------------------------------------------------------------------


def entry(path, content=b"heights"):
    return {"path": path, "size": len(content), "sha256": hashlib.sha256(content).hexdigest()}


def put(path, content=b"heights"):
    path.parent.mkdir(parents=True, exist_ok=True)
    path.write_bytes(content)


def states(record, folder, **moved):
    return [(one.path, one.state) for one in check_inputs(record, folder, **moved)]


def test_inputs_are_compared_by_content(tmp_path):
    names = ["../dems/same å.tif", "../dems/longer.tif", "../dems/other.tif", "../dems/gone.tif"]
    put(tmp_path / "dems/same å.tif")
    put(tmp_path / "dems/longer.tif", b"heights and more")
    put(tmp_path / "dems/other.tif", b"HEIGHTS")
    run = tmp_path / "run"
    run.mkdir()
    found = check_inputs(a_record(dem=[entry(name) for name in names]), run)
    assert [one.state for one in found] == ["same", "changed", "changed", "missing"]
    told = [one.told.removeprefix(f"{tmp_path}/dems/") for one in found]
    assert told == [
        "",
        "longer.tif: has changed since the record was made (16 bytes, were 7)",
        "other.tif: has changed since the record was made (same size)",
        "gone.tif: is missing; the record names it as an input",
    ]


def test_an_input_that_is_a_folder_now(tmp_path):
    (tmp_path / "a.tif").mkdir()
    size = (tmp_path / "a.tif").stat().st_size
    record = a_record(dem=[{**entry("a.tif"), "size": size}])
    (found,) = check_inputs(record, tmp_path)
    assert found.state == "missing"
    assert "a.tif: Is a directory" in found.told


def test_paths_lead_from_where_a_linked_folder_really_is(tmp_path):
    put(tmp_path / "deep/dems/a.tif")
    (tmp_path / "deep/run").mkdir()
    (tmp_path / "run").symlink_to(tmp_path / "deep/run")
    record = a_record(options=options(dem=["../dems/a.tif"]), dem=[entry("../dems/a.tif")])
    assert states(record, tmp_path / "run") == [(tmp_path / "deep/dems/a.tif", "same")]
    found = arguments(record, tmp_path / "run")
    assert found.terrain["paths"] == [f"{tmp_path}/deep/dems/a.tif"]


def test_surface_files_are_inputs_too(tmp_path):
    put(tmp_path / "dems/a.tif", b"")
    put(tmp_path / "dsm.tif", b"123456789")
    record = a_record(surface=surface("dsm.tif"), dem=[entry("dems/a.tif", b"")])
    assert [state for _, state in states(record, tmp_path)] == ["same", "changed"]


@pytest.mark.parametrize(
    ("named", "path", "moved", "place"),
    [
        ("../a.tif", "../a.tif", "new/b.tif", "new/b.tif"),
        ("../dems", "../dems/a.tif", "new", "new/a.tif"),
        ("../dems", "../dems/sub/a.tif", "new", "new/sub/a.tif"),
        (".", "a.tif", "new", "new/a.tif"),
        ("../dems/*.tif", "../dems/a.tif", "new/*.tif", "new/a.tif"),
        ("../a.bil", "../a.hdr", "new/a.bil", "new/a.hdr"),
        ("../all.vrt", "../tiles/a.tif", "new/all.vrt", "new/a.tif"),
    ],
)
def test_moved_inputs_are_found(tmp_path, monkeypatch, named, path, moved, place):
    monkeypatch.chdir(tmp_path)
    put(tmp_path / place)
    if not set("*?") & set(moved) and not (tmp_path / moved).exists():
        put(tmp_path / moved)
    record = a_record(options=options(dem=[named]), dem=[entry(path)])
    found = check_inputs(record, tmp_path / "run", dem=[moved])
    assert [(one.path.as_posix(), one.state) for one in found] == [(place, "same")]


def test_several_moved_inputs_keep_their_order(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    put(tmp_path / "x/t.tif", b"one")
    put(tmp_path / "y/t.tif", b"two")
    record = a_record(
        options=options(dem=["a/t.tif", "b/t.tif"]),
        dem=[entry("a/t.tif", b"one"), entry("b/t.tif", b"two")],
    )
    assert [s for _, s in states(record, tmp_path, dem=["x/t.tif", "y/t.tif"])] == ["same"] * 2
    assert [s for _, s in states(record, tmp_path, dem=["y/t.tif", "x/t.tif"])] == ["changed"] * 2


def test_a_moved_input_that_is_not_there(tmp_path):
    record = a_record(dem=[entry("dems/a.tif")])
    found = check_inputs(record, tmp_path, dem=[tmp_path / "nowhere", tmp_path / "else"])
    assert [one.state for one in found] == ["missing"]


def masked_record():
    record = a_record(
        options=options(dem=["dems/sea.tif"], void_mask="sea.shp", void_height_m=0.0),
        dem=[entry("dems/sea.tif")],
    )
    record["heights"]["void_mask_files"] = [entry("sea.shp"), entry("sea.dbf")]
    return record


def placed(found, folder):
    return [(path.relative_to(folder).as_posix(), state) for path, state in found]


def test_a_mask_of_voids_stays_where_the_record_says(tmp_path):
    """Also where the grid, which has moved, has its name."""
    for name in ("new/sea.tif", "sea.shp", "sea.dbf"):
        put(tmp_path / name)
    found = states(masked_record(), tmp_path, dem=[tmp_path / "new/sea.tif"])
    assert placed(found, tmp_path) == [
        ("new/sea.tif", "same"), ("sea.shp", "same"), ("sea.dbf", "same"),
    ]  # fmt: skip


def test_a_mask_of_voids_that_has_moved(tmp_path):
    for name in ("dems/sea.tif", "there/sea.shp", "there/sea.dbf"):
        put(tmp_path / name)
    found = states(masked_record(), tmp_path, void_mask=tmp_path / "there/sea.shp")
    assert placed(found, tmp_path) == [
        ("dems/sea.tif", "same"), ("there/sea.shp", "same"), ("there/sea.dbf", "same"),
    ]  # fmt: skip
    asked = arguments(masked_record(), tmp_path, void_mask=tmp_path / "there/sea.shp")
    assert asked.terrain["void_mask"] == str(tmp_path / "there/sea.shp")
    with pytest.raises(InputError, match="the record has none; leave --void-mask out"):
        arguments(a_record(), tmp_path, void_mask="sea.shp")


# --- the run ------------------------------------------------------------------------------------


@pytest.mark.parametrize("out", [".", "../run", "../link"])
def test_the_folder_of_the_record_is_refused(tmp_path, monkeypatch, out):
    folder = tmp_path / "run"
    folder.mkdir()
    (tmp_path / "link").symlink_to(folder)
    monkeypatch.chdir(folder)
    for record in ("record.json", folder, "."):
        with pytest.raises(InputError, match="is the folder of the record itself; choose another"):
            check_folder(record, out)
    check_folder("record.json", "again")


@pytest.fixture
def recorded(tmp_path):
    """Give the path of a record whose input is at hand."""
    put(tmp_path / "dems/a.tif")
    (tmp_path / "run").mkdir()
    dem = [entry("../dems/a.tif")]
    path = tmp_path / "run/record.json"
    write_record(path, a_record(dem=dem, options=options(dem=["../dems/a.tif"])))
    return path


@pytest.fixture
def fake_run(monkeypatch):
    """Let a run write a record that a test may change; give the list of its calls."""
    calls, changed = [], {}

    def run(asked, out, **how):
        calls.append((asked, how))
        out.mkdir()
        record = {**sections(dem=[entry("../dems/a.tif")]), **changed}
        write_record(out / "record.json", build_record(record))

    monkeypatch.setattr(rerun_module, "_run", run)
    return calls, changed


def test_missing_inputs_are_named_before_anything_is_computed(recorded, tmp_path, fake_run):
    (tmp_path / "dems/a.tif").unlink()
    with (
        pytest.warns(ViewshedWarning, match=r"a\.tif: is missing; the record names it"),
        pytest.raises(DataError, match=r"^inputs are missing: a\.tif; put them back or say where"),
    ):
        rerun(recorded, tmp_path / "again")
    assert fake_run[0] == []
    assert not (tmp_path / "again").exists()


def test_changed_inputs_are_named_and_used(recorded, tmp_path, fake_run):
    put(tmp_path / "dems/a.tif", b"HEIGHTS")
    with pytest.warns(ViewshedWarning, match=r"a\.tif: has changed since the record was made"):
        found = rerun(recorded, tmp_path / "again", threads=1, memory=2e9)
    assert [one.state for one in found.inputs] == ["changed"]
    ((asked, how),) = fake_run[0]
    assert asked == arguments(a_record(options=options(dem=["../dems/a.tif"])), recorded.parent)
    run = {"threads": 1, "overwrite": False, "progress": None}
    assert how == {**run, "memory": 2e9, "scratch": tmp_path}


def test_inputs_that_were_not_there_before_are_named(recorded, tmp_path, fake_run):
    fake_run[1]["dem"] = [entry("../dems/a.tif"), entry("../dems/b.tif")]
    with pytest.warns(ViewshedWarning, match=r"b\.tif: was read now and the record does not name"):
        found = rerun(recorded, tmp_path / "again")
    assert [one.state for one in found.inputs] == ["same", "new"]
    assert found.inputs[1].path == tmp_path / "dems/b.tif"


def test_a_record_of_an_older_format(recorded, tmp_path):
    recorded.write_text('{"format": "viewshed record", "version": "0.1.0"}')
    with pytest.raises(DataError, match=r"record has format version 1, this viewshed reads 2; run"):
        rerun(recorded, tmp_path / "again")


def test_the_verdict_and_what_changed(recorded, tmp_path, fake_run):
    fake_run[1]["version"] = "9"
    fake_run[1]["outputs"] = {"more.csv": {"sha256": "0" * 64}}
    found = rerun(recorded.parent, tmp_path / "again")
    assert found.verdict == "same-bytes"
    assert [(one.name, one.word) for one in found.outputs] == [("more.csv", "new")]
    assert found.changed == [("viewshed", "1.2", "9")]
    assert found.folder == tmp_path / "again"
