"""The record: what it must hold, and whether it agrees with the files."""

import copy
import glob
import json
import os
import tomllib
from pathlib import Path

import numpy as np
import pytest
import rasterio
from jsonschema import Draft202012Validator

from tests.io.records import SHA, sections, surface
from viewshed import geodesy
from viewshed.constants import CAUTIONS
from viewshed.errors import DataError, OutputError
from viewshed.io import record as record_module
from viewshed.io._files import file_sha256
from viewshed.io._schema import problem
from viewshed.io.record import (
    build_record,
    library_versions,
    matching,
    mismatches,
    output_entry,
    platform_facts,
    read_record,
    relative_path,
    relative_pattern,
    schema,
    write_record,
)


def test_build():
    given = sections()
    given["grid"] = {"shape": (3, np.int64(4)), "transform": np.array(given["grid"]["transform"])}
    given["observers"][0]["ground_m"] = np.float32(1.5)
    given["counts"] = {**given["counts"], "visible": np.uint32(7)}
    given["surface"] = {**surface("dsm.tif"), "median_over_ground_m": np.nan}
    given["options"]["dem"] = (Path("a/b"),)
    record = build_record(given)
    assert record["format"] == "viewshed record"
    assert record["format_version"] == 2
    assert record["cautions"] == list(CAUTIONS)
    assert record["libraries"] == library_versions()
    assert record["platform"] == platform_facts()
    assert record["grid"] == sections()["grid"]
    assert record["observers"][0]["ground_m"] == 1.5
    assert record["counts"]["visible"] == 7
    assert record["surface"]["median_over_ground_m"] is None
    assert record["options"]["dem"] == ["a/b"]
    assert json.loads(json.dumps(record, allow_nan=False)) == record


@pytest.mark.parametrize("missing", ["question", "outputs", "dem", "version", "observers"])
def test_build_without_a_section(missing):
    with pytest.raises(ValueError, match=rf"^in the record '{missing}' is missing$"):
        build_record({k: v for k, v in sections().items() if k != missing})


def test_build_refuses_what_is_no_json():
    with pytest.raises(ValueError, match="of type object cannot stand in a record"):
        build_record(sections(options={"x": object()}))


# --- libraries and machine ----------------------------------------------------------------------


def test_versions_of_everything_the_numbers_come_from():
    found = library_versions()
    assert {
        "numpy", "numba", "rasterio", "geopandas", "pyogrio", "shapely", "matplotlib", "pillow",
        "pyproj",
    } <= set(found)  # fmt: skip
    assert found["GDAL"] == rasterio.__gdal_version__
    assert found["PROJ"] == geodesy.proj_version()
    assert all(version[0].isdigit() for version in found.values())


def test_the_processor_is_the_one_that_the_engine_is_compiled_for(monkeypatch):
    monkeypatch.delenv("NUMBA_CPU_NAME", raising=False)
    monkeypatch.setattr(record_module, "get_host_cpu_name", lambda: "znver9")
    assert platform_facts()["processor"] == "znver9"
    monkeypatch.setenv("NUMBA_CPU_NAME", "generic")
    assert platform_facts()["processor"] == "generic"


def test_a_processor_that_nobody_can_name(monkeypatch):
    monkeypatch.delenv("NUMBA_CPU_NAME", raising=False)
    monkeypatch.setattr(record_module, "get_host_cpu_name", None)
    monkeypatch.setattr("platform.processor", lambda: "")
    assert platform_facts()["processor"] == "unknown"


# --- paths --------------------------------------------------------------------------------------


def absolute(path, folder):
    return {**sections()["dem"][0], "path": str(folder / path)}


def test_paths_are_relative_to_the_record(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    given = sections(dem=[absolute("dems/a.tif", tmp_path), absolute("more/ü b.tif", tmp_path)])
    given["surface"] = surface(str(tmp_path / "dsm/höhe 1.tif"))
    given["options"] |= {
        "dem": [str(tmp_path / "dems"), "more/*.tif"],
        "surface": ["dsm"],
        "void_mask": str(tmp_path / "sea.gpkg"),
        "observers_file": "places.csv",
    }
    paths = {"first": str(tmp_path / "dems/a.tif"), "second": "more/ü b.tif"}
    given["heights"]["overlap"] = {**paths, "difference_m": 2.5}
    record = build_record(given, folder="out/run")
    assert [entry["path"] for entry in record["dem"]] == ["../../dems/a.tif", "../../more/ü b.tif"]
    assert record["surface"]["files"][0]["path"] == "../../dsm/höhe 1.tif"
    options = record["options"]
    assert options["dem"] == ["../../dems", "../../more/*.tif"]
    assert options["surface"] == ["../../dsm"]
    assert options["void_mask"] == "../../sea.gpkg"
    assert options["observers_file"] == "../../places.csv"
    paths = {"first": "../../dems/a.tif", "second": "../../more/ü b.tif"}
    assert record["heights"]["overlap"] == {**paths, "difference_m": 2.5}
    assert given["dem"][0]["path"].startswith(str(tmp_path))


def test_no_absolute_path_stays_in_a_warning(tmp_path):
    dem = [absolute("dems/a.tif", tmp_path), absolute("dems/a.tif.ovr", tmp_path)]
    warnings = [f"{entry['path']}: blocks are missing" for entry in dem]
    record = build_record(sections(dem=dem, warnings=warnings), folder=tmp_path / "out")
    assert record["warnings"] == [
        "../dems/a.tif: blocks are missing",
        "../dems/a.tif.ovr: blocks are missing",
    ]
    assert str(tmp_path) not in json.dumps(record)


def test_relative_path(tmp_path):
    assert relative_path("a.tif", ".") == "a.tif"
    assert relative_path("..", ".") == ".."
    assert relative_path(tmp_path / "ü b.tif", tmp_path) == "ü b.tif"
    assert relative_path(tmp_path / "dems", tmp_path / "dems") == "."


def test_relative_pattern(tmp_path, monkeypatch):
    (tmp_path / "a [1]" / "dems").mkdir(parents=True)
    monkeypatch.chdir(tmp_path / "a [1]")
    (Path("dems") / "t1.tif").write_text("")
    (Path("dems") / "[x].tif").write_text("")
    found = relative_pattern("dems/t?.tif", tmp_path / "out/run")
    assert found == "../../a [[]1]/dems/t?.tif"
    (tmp_path / "out/run").mkdir(parents=True)
    there = glob.glob(found, root_dir=tmp_path / "out/run")  # noqa: PTH207
    assert [Path(path).name for path in there] == ["t1.tif"]
    assert relative_pattern("*.tif", ".") == "*.tif"
    assert relative_pattern("dems/*/*.tif", "dems") == "*/*.tif"
    assert relative_pattern("dems/[x].tif", "dems") == "[x].tif"
    assert relative_pattern("dems/a.tif", tmp_path) == "a [1]/dems/a.tif"


def test_relative_paths_follow_links(tmp_path):
    (tmp_path / "real/deep").mkdir(parents=True)
    (tmp_path / "real/a.tif").write_text("heights")
    (tmp_path / "short").symlink_to(tmp_path / "real/deep")
    for folder in ("short", "real/deep"):
        found = relative_path(tmp_path / "real/a.tif", tmp_path / folder)
        assert found == "../a.tif"
        assert (tmp_path / folder / found).read_text() == "heights"


def test_a_path_on_another_drive_keeps_its_name(tmp_path, monkeypatch):
    def fail(*_):
        raise ValueError

    monkeypatch.setattr(os.path, "relpath", fail)
    assert relative_path(tmp_path / "a.tif", tmp_path) == "a.tif"


# --- the schema ---------------------------------------------------------------------------------


def test_the_schema_is_one_and_goes_with_the_package(root):
    Draft202012Validator.check_schema(schema())
    assert schema()["properties"]["format_version"] == {
        "description": schema()["properties"]["format_version"]["description"],
        "const": record_module.FORMAT_VERSION,
    }
    schema()["properties"].clear()
    assert schema()["properties"], "a caller cannot spoil it for the next"
    built = tomllib.loads((root / "pyproject.toml").read_text())["tool"]["hatch"]["build"]
    assert built["targets"]["wheel"] == {"packages": ["viewshed"]}, "which takes data files too"


def named(part, where="record"):
    """Yield the place and schema of everything that has a name in a record."""
    for name, inner in part.get("properties", {}).items():
        yield f"{where}.{name}", inner
        yield from named(inner, f"{where}.{name}")
    for key in ("items", "additionalProperties"):
        if isinstance(part.get(key), dict):
            yield from named(part[key], f"{where}[]")


def test_everything_in_the_schema_is_described():
    whole = schema()
    places = [*named(whole), *(pair for d in whole["$defs"].values() for pair in named(d))]
    assert len(places) > 80
    for where, inner in places:
        assert inner.get("description", "").endswith("."), where


def test_every_length_has_its_unit_in_the_name_and_the_description():
    for where, inner in named(schema()):
        if where.endswith("_m"):
            assert "[m]" in inner["description"], where
        if where.endswith("_m2"):
            assert "[m2]" in inner["description"], where


def wrong(record, place, value):
    """Give a copy of a record with another value at a place; a value of Ellipsis removes it."""
    changed = copy.deepcopy(record)
    *way, last = [int(key) if key.isdigit() else key for key in place.split(".")]
    holder = changed
    for key in way:
        holder = holder[key]
    if value is ...:
        del holder[last]
    else:
        holder[last] = value
    return changed


#: Place, what is put there (nothing: ...), and the words about it.
WRONG = [
    *((name, ..., f"'{name}' is missing") for name in schema()["required"][2:]),
    ("version", 3, "'version' should be a text and is 3"),
    ("question", "", "'question' should be a text that is not empty"),
    ("dem", [], r"'dem' should be a list of 1 or more and is \[\]"),
    ("dem", {}, "'dem' should be a list and is {}"),
    ("dem.0.size", -1, r"'dem\[0\].size' should be 0 or more and is -1"),
    ("dem.0.size", 1.5, "should be a whole number"),
    ("dem.0.size", True, "should be a whole number and is True"),
    ("dem.0.size", 1e400, "should be a whole number and is inf"),
    ("dem.0.sha256", "ab", r"'dem\[0\].sha256' should be a text like"),
    ("dem.0.path", ..., r"'dem\[0\].path' is missing"),
    ("options.range_m", "30km", "'options.range_m' should be a number and is '30km'"),
    ("options.range_m", 0, "'options.range_m' should be more than 0 and is 0"),
    ("options.range_m", False, "'options.range_m' should be a number and is False"),
    ("options.each", 1, "'options.each' should be true or false and is 1"),
    ("options.observers", [], r"'options.observers' should be a list of 1 or more"),
    ("options.observers.1.x", None, r"'options.observers\[1\].x' should be a number"),
    ("options.sector_deg", [1.0], r"'options.sector_deg' should be a list of 2 and is \[1.0\]"),
    ("options.sector_deg", ["N", "S"], r"'options.sector_deg\[0\]' should be a number"),
    ("options.polygons", "kml", "'options.polygons' should be one of 'none', 'shp'"),
    ("options.creation_options", {"LEVEL": 9}, "'options.creation_options.LEVEL' should be a text"),
    ("options.height_unit", "cm", "should be one of 'm', 'ft', 'us-ft', null and is 'cm'"),
    ("grid.shape", [3, 0], r"'grid.shape\[1\]' should be 1 or more and is 0"),
    ("grid.transform", [1.0] * 9, "'grid.transform' should be a list of 6"),
    ("surface", [], r"'surface' should be an object or null and is \[\]"),
    ("surface", {"method": "guess"}, "'surface.files' is missing"),
    ("observers.0.bands.0.to_m", "far", r"'observers\[0\].bands\[0\].to_m' should be a number"),
    ("observers.0.counts.visible", ..., r"'observers\[0\].counts.visible' is missing"),
    ("counts", {}, "'counts.visible' is missing"),
    ("areas_m2.hidden", -1.0, "'areas_m2.hidden' should be 0 or more"),
    ("farthest_visible", {"x": 1.0}, "'farthest_visible.y' is missing"),
    ("warnings", ["a", 1], r"'warnings\[1\]' should be a text and is 1"),
    ("platform.machine", None, "'platform.machine' should be a text and is None"),
    ("libraries.numpy", 2, "'libraries.numpy' should be a text and is 2"),
    ("outputs", {"a.tif": 3}, r"'outputs.a.tif' should be an object and is 3"),
    ("outputs", {"a.tif": {}}, "'outputs.a.tif.sha256' is missing"),
]


@pytest.mark.parametrize(("place", "value", "why"), WRONG, ids=[f"{p}-{v}" for p, v, _ in WRONG])
def test_a_wrong_record_is_refused(tmp_path, place, value, why):
    record = build_record(sections())
    assert Draft202012Validator(schema()).is_valid(record)
    bad = wrong(record, place, value)
    assert not Draft202012Validator(schema()).is_valid(bad)
    (tmp_path / "record.json").write_text(json.dumps(bad).replace("Infinity", "1e400"))
    told = rf"^[^\n]*record\.json: in the record [^\n]*{why}[^\n]*; run the map again$"
    with pytest.raises(DataError, match=told):
        read_record(tmp_path)


def test_reading_lets_pass_what_a_later_version_adds(tmp_path):
    record = build_record(sections())
    more = {**record, "weather": 1, "grid": {**record["grid"], "name": "x"}}
    (tmp_path / "record.json").write_text(json.dumps(more))
    assert read_record(tmp_path) == more
    assert not Draft202012Validator(schema()).is_valid(more), "which the schema itself does not"
    assert problem(more, schema()) is None


@pytest.mark.parametrize(("version", "told"), [(..., "1"), (1, "1"), (3, "3"), ("2", "'2'")])
def test_another_format_version(tmp_path, version, told):
    record = wrong(build_record(sections()), "format_version", version)
    (tmp_path / "record.json").write_text(json.dumps(record))
    with pytest.raises(DataError, match=rf"format version {told}, this viewshed reads 2"):
        read_record(tmp_path)
    assert not matching(tmp_path)


# --- files --------------------------------------------------------------------------------------


def test_write_and_read(tmp_path):
    record, path = build_record(sections(crs='PROJCRS["ü"]')), tmp_path / "record.json"
    write_record(path, record)
    text = path.read_text(encoding="utf-8")
    assert text.endswith("}\n")
    assert text.startswith('{\n  "areas_m2"')
    assert 'PROJCRS[\\"ü\\"]' in text
    assert read_record(path) == read_record(tmp_path) == record
    write_record(path, dict(reversed(record.items())))
    assert path.read_text(encoding="utf-8") == text


def test_names_that_are_no_text(tmp_path):
    write_record(tmp_path / "record.json", {**build_record(sections()), "crs": "b\udcff"})
    assert read_record(tmp_path)["crs"] == "b\udcff"


def test_write_fails(tmp_path):
    with pytest.raises(OutputError, match=r"^[^\n]*record\.json: cannot be written: No"):
        write_record(tmp_path / "no" / "record.json", {})


@pytest.mark.parametrize(
    ("text", "why"),
    [
        ("", "is not JSON"),
        ("\xff\xfe", "is not JSON"),
        ("[]", "is not a record of viewshed"),
        ('{"format": "x"}', "is not a record of viewshed"),
        ('{"format": "viewshed record"}', "has format version 1"),
        ('{"format": "viewshed record", "format_version": 2}', "'version' is missing"),
        ('{"format": "viewshed record", "k": NaN}', r"is not JSON \(NaN is no number\)"),
        ("[" * 100_000, "is not JSON"),
    ],
)
def test_read_what_is_no_record(tmp_path, text, why):
    path = tmp_path / "record.json"
    path.write_bytes(text.encode("latin-1"))
    with pytest.raises(DataError, match=rf"^[^\n]*record\.json: [^\n]*{why}[^\n]*$"):
        read_record(path)
    assert not matching(tmp_path)


@pytest.mark.parametrize("name", ["../a.tif", "/a.tif", ".hidden", "a/b.tif", ".."])
def test_read_outputs_that_lie_elsewhere(tmp_path, name):
    record = {**build_record(sections()), "outputs": {name: {"sha256": SHA}}}
    write_record(tmp_path / "record.json", record)
    with pytest.raises(DataError, match=r"lists an output '[^']+' that is not a file beside it"):
        read_record(tmp_path)


def test_output_entry(tmp_path):
    (tmp_path / "map.png").write_bytes(b"")
    assert output_entry(tmp_path / "map.png") == {"sha256": SHA, "size": 0, "layer": None}
    assert output_entry(tmp_path / "map.png", layer="visible")["layer"] == "visible"


def test_matching(tmp_path):
    assert not matching(tmp_path)
    assert "record cannot be read" in mismatches(tmp_path)[0]
    (tmp_path / "a.tif").write_text("a")
    (tmp_path / "b.png").write_text("b")
    outputs = {n: {"sha256": file_sha256(tmp_path / n)} for n in ("a.tif", "b.png")}
    write_record(tmp_path / "record.json", build_record(sections(outputs=outputs)))
    assert matching(tmp_path)
    assert mismatches(tmp_path) == []
    (tmp_path / "a.tif").write_text("A")
    (tmp_path / "b.png").unlink()
    assert not matching(str(tmp_path))
    assert mismatches(tmp_path) == [
        f"{tmp_path / 'a.tif'}: differs from the record",
        f"{tmp_path / 'b.png'}: is missing",
    ]


def test_paths_in_warnings_lead_from_the_record_however_they_were_typed(tmp_path, monkeypatch):
    """A path is replaced as a word of its own, and only once."""
    (tmp_path / "in").mkdir()
    (tmp_path / "out").mkdir()
    monkeypatch.chdir(tmp_path)
    for typed in ("in/a.tif", "./in/a.tif", str(tmp_path / "in/a.tif")):
        told = f"{typed}: 3 cells; see {typed}.aux.xml and old/{Path(typed).name}"
        dem = [{"path": typed, "size": 3, "sha256": SHA}]
        made = build_record(sections(dem=dem, warnings=[told]), folder=tmp_path / "out")
        (said,) = made["warnings"]
        assert said.startswith("../in/a.tif: 3 cells; see ")
        assert said.endswith(f"{typed}.aux.xml and old/a.tif")
