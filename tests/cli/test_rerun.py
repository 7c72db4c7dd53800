"""`viewshed rerun` from the command line: the same once more, or what is different."""

import json
import re
import shutil

import numpy as np
import pytest
import rasterio
from affine import Affine
from click.testing import CliRunner
from jsonschema import Draft202012Validator

from viewshed.cli.main import cli
from viewshed.cli.rerun import HELP
from viewshed.io._files import file_sha256
from viewshed.io.record import matching, read_record, schema

WEST, NORTH, CELL, SIZE = 500_000.0, 4_650_000.0, 30.0, 60
MIDDLE = f"{WEST + CELL * SIZE / 2 + 3},{NORTH - CELL * SIZE / 2 - 4}"


def write_dem(path, *, bump=0.0, **options):
    rows, cols = np.mgrid[0:SIZE, 0:SIZE]
    heights = (40 * np.sin(cols / 5.0) * np.cos(rows / 6.0) + 100).astype(np.float32)
    heights[20:23, 20:23] += bump
    path.parent.mkdir(parents=True, exist_ok=True)
    with rasterio.open(
        path, "w", driver="GTiff", height=SIZE, width=SIZE, count=1, dtype="float32",
        transform=Affine(CELL, 0, WEST, 0, -CELL, NORTH), crs="EPSG:32632", **options,
    ) as file:  # fmt: skip
        file.write(heights, 1)
    return path


def call(command, *args):
    words = [command, *(str(a) for a in args)]
    return CliRunner().invoke(cli, words, prog_name="viewshed")


def done(result, code=0):
    assert result.exit_code == code, result.output
    return result


@pytest.fixture(scope="module")
def made(tmp_path_factory):
    """Make a grid and a result once."""
    base = tmp_path_factory.mktemp("made")
    dem, out = write_dem(base / "dems/høyder 1.tif"), base / "tårn 2"
    layers = ["--layers", "visible,clearance", "--polygons", "gpkg", "--stac"]
    done(call("map", dem, "--observer", MIDDLE, "--range", "700", *layers, "--out", out, "-q"))
    return base


@pytest.fixture
def earlier(made, tmp_path):
    """Give the folder of a result, with its grid where the record says."""
    shutil.copytree(made, tmp_path, dirs_exist_ok=True)
    return tmp_path / "tårn 2"


def repack(folder, name, **options):
    """Write a raster of a result anew, with the same cells, and let its record know."""
    path = folder / name
    with rasterio.open(path) as file:
        profile, cells = {**file.profile, **options}, file.read()
    with rasterio.open(path, "w", **profile) as file:
        file.write(cells)
    record = json.loads((folder / "record.json").read_bytes())
    record["outputs"][name]["sha256"] = file_sha256(path)
    (folder / "record.json").write_text(json.dumps(record))


def words(result):
    return dict(reversed(line.split("\t")) for line in result.stdout.splitlines())


NAMES = ("clearance.tif", "map.png", "stac_item.json", "summary.csv", "visible.gpkg", "visible.tif")


def test_a_record_of_a_run_is_what_the_schema_says(earlier):
    record = read_record(earlier)
    Draft202012Validator(schema()).validate(record)
    text = (earlier / "record.json").read_text(encoding="utf-8")
    assert record["dem"][0]["path"] == "../dems/høyder 1.tif"
    assert str(earlier.parent) not in text
    assert set(record["outputs"]) == set(NAMES)
    for name, entry in record["outputs"].items():
        assert entry["size"] == (earlier / name).stat().st_size
    assert record["outputs"]["clearance.tif"]["nodata"] == "nan"
    item = json.loads((earlier / "stac_item.json").read_bytes())
    assert set(item["assets"]) == {*NAMES, "record.json"} - {"stac_item.json"}


def test_the_same_comes_out(earlier, tmp_path):
    out = tmp_path / "again"
    result = done(call("rerun", earlier / "record.json", "--out", out))
    assert words(result) == dict.fromkeys(NAMES, "same-bytes")
    assert [re.split(r"  +", line) for line in result.stderr.splitlines()] == [
        *([name, "same bytes"] for name in NAMES),
        ["Inputs", "1 same"],
        ["Changed since", "nothing that the record knows of"],
        ["Result", "same bytes"],
    ]
    assert matching(out)
    for name in NAMES:
        assert (out / name).read_bytes() == (earlier / name).read_bytes()


def test_a_folder_that_was_moved_with_its_grid(earlier, tmp_path):
    (tmp_path / "elsewhere/deep").mkdir(parents=True)
    shutil.move(earlier, tmp_path / "elsewhere/deep" / earlier.name)
    shutil.move(tmp_path / "dems", tmp_path / "elsewhere/deep/dems")
    moved = tmp_path / "elsewhere/deep" / earlier.name
    result = done(call("rerun", moved, "--out", tmp_path / "again", "-q"))
    assert result.stderr == ""
    assert words(result) == {
        **dict.fromkeys(NAMES, "same-bytes"),
        "stac_item.json": "same-values",  # its links lead to the grid, which is elsewhere
    }


def test_a_grid_that_was_moved_alone(earlier, tmp_path):
    moved = tmp_path / "new place/renamed.tif"
    moved.parent.mkdir()
    shutil.move(tmp_path / "dems/høyder 1.tif", moved)
    lost = done(call("rerun", earlier, "--out", tmp_path / "again"), 1)
    first, last = lost.stderr.splitlines()
    assert first.endswith("høyder 1.tif: is missing; the record names it as an input")
    assert last.startswith("Error: inputs are missing: høyder 1.tif; put them back or say where")
    assert not (tmp_path / "again").exists()
    found = done(call("rerun", earlier, "--out", tmp_path / "again", "--dem", moved))
    assert "Warning" not in found.stderr
    assert words(found) == {
        **dict.fromkeys(NAMES, "same-bytes"),
        "map.png": "redrawn",  # the page names the grid, and so does the item
        "stac_item.json": "same-values",
    }


def test_other_bytes_with_the_same_cells(earlier, tmp_path):
    repack(earlier, "visible.tif", compress="lzw")
    result = done(call("rerun", earlier, "--out", tmp_path / "again"))
    assert words(result)["visible.tif"] == "same-values"
    assert words(result)["clearance.tif"] == "same-bytes"
    assert "visible.tif     same values: other bytes, the same cells" in result.stderr
    assert result.stderr.splitlines()[-1] == "Result          same values"


def test_a_changed_grid_is_named_and_used(earlier, tmp_path):
    write_dem(tmp_path / "dems/høyder 1.tif", bump=30.0)
    out = tmp_path / "again"
    result = done(call("rerun", earlier, "--out", out), 1)
    warned, *rows, last = result.stderr.splitlines()
    assert re.search(r"^Warning: .*høyder 1\.tif: has changed since the record was made", warned)
    for row in (
        r"visible\.tif +different: \d+ of [\d,]+ cells differ",
        r"clearance\.tif +different: .*, by up to [\d.]+ m",
        r"visible\.gpkg +different: \d+ of \d+ polygons differ",
        r"Inputs +1 changed",
    ):
        assert any(re.fullmatch(row, text) for text in rows), row
    assert last == f"The new result is kept in {out}."
    assert words(result)["visible.tif"] == "different"
    assert matching(out)


def test_json(earlier, tmp_path):
    record = json.loads((earlier / "record.json").read_bytes())
    record["libraries"]["numpy"] = "1.0"
    (earlier / "record.json").write_text(json.dumps(record))
    (earlier / "visible.tif").unlink()
    result = done(call("rerun", earlier, "--out", tmp_path / "again", "--json", "-q"))
    assert result.stderr == ""
    found = json.loads(result.stdout)
    assert found["verdict"] == "same-bytes"
    assert {one["name"]: one["word"] for one in found["outputs"]} == dict.fromkeys(
        NAMES, "same-bytes"
    )
    assert [one["state"] for one in found["inputs"]] == ["same"]
    assert found["changed"] == [
        {"what": "numpy", "was": "1.0", "is": read_record(tmp_path / "again")["libraries"]["numpy"]}
    ]


def test_several_observers_with_layers_of_their_own(tmp_path):
    dem, out = write_dem(tmp_path / "dem.tif"), tmp_path / "out"
    places = tmp_path / "places.csv"
    x, y = (float(v) for v in MIDDLE.split(","))
    places.write_text(
        "name,x,y,eye_height,range,bearing_from,bearing_to,target_height\n"
        f"Knoll,{x},{y},12,600,300,60,2\nHøy ås,{x + 200},{y},,,,,\n",
        encoding="utf-8",
    )
    asked = ["--layers", "visible,count,who,needed-height", "--each", "--refraction", "K=4/3"]
    asked += ["--observers", places, "--range", "500", "--co", "COMPRESS=LZW", "--picture", "none"]
    done(call("map", dem, *asked, "--out", out, "-q"))
    Draft202012Validator(schema()).validate(read_record(out))
    places.unlink()
    result = done(call("rerun", out, "--out", tmp_path / "again", "--threads", "1", "-q"))
    assert set(words(result).values()) == {"same-bytes"}
    assert {"visible_Knoll.tif", "visible_Høy ås.tif", "who.tif"} <= set(words(result))


def test_what_was_stated_of_a_grid_is_stated_again(tmp_path):
    dem = write_dem(tmp_path / "tiles/dem.tif", nodata=100.0)
    out = tmp_path / "out"
    stated = ["--void-height", "90", "--height-unit", "ft", "--range", "600", "--picture", "none"]
    where = ["--observer", MIDDLE, "--sector", "350,90", "--eye-elevation", "200"]
    done(call("map", dem.parent, *where, *stated, "--out", out, "-q"))
    record = read_record(out)
    assert record["options"]["dem"] == ["../tiles"]
    assert record["options"]["void_height_m"] == 90.0
    result = done(call("rerun", out, "--out", tmp_path / "again", "-q"))
    assert set(words(result).values()) == {"same-bytes"}


def test_a_surface_over_the_ground(tmp_path):
    dem, out = write_dem(tmp_path / "dem.tif"), tmp_path / "out"
    dsm = write_dem(tmp_path / "dsm å/dsm.tif", bump=15.0)
    asked = ["--surface", dsm, "--range", "600", "--picture", "none", "--stac"]
    done(call("map", dem, "--observer", MIDDLE, *asked, "--out", out, "-q"))
    record = read_record(out)
    Draft202012Validator(schema()).validate(record)
    assert record["surface"]["files"][0]["path"] == "../dsm å/dsm.tif"
    assert record["options"]["surface"] == ["../dsm å/dsm.tif"]
    moved = dsm.rename(tmp_path / "surface.tif")
    result = done(call("rerun", out, "--out", tmp_path / "again", "--surface", moved))
    assert words(result) == {  # tags and item name the surface
        "stac_item.json": "same-values",
        "summary.csv": "same-bytes",
        "visible.tif": "same-values",
    }
    assert re.search(r"^Inputs +2 same$", result.stderr, flags=re.MULTILINE)
    lost = done(call("rerun", out, "--out", tmp_path / "third"), 1)
    assert "dsm.tif: is missing; the record names it as an input" in lost.stderr


@pytest.mark.parametrize("record", ["record.json", "."])
def test_the_folder_of_the_record_is_a_wrong_call(earlier, monkeypatch, record):
    monkeypatch.chdir(earlier)
    before = sorted(p.read_bytes() for p in earlier.iterdir())
    result = done(call("rerun", record, "--out", earlier, "--overwrite"), 2)
    assert "'--out'" in result.stderr
    assert "is the folder of the record itself; choose another" in result.stderr
    assert sorted(p.read_bytes() for p in earlier.iterdir()) == before


def test_results_are_kept_without_overwrite(earlier, tmp_path):
    out = shutil.copytree(earlier, tmp_path / "again")
    (out / "visible.tif").write_text("precious")
    refused = done(call("rerun", earlier, "--out", out, "-q"), 1)
    assert "exists; use --overwrite" in refused.stderr
    assert (out / "visible.tif").read_text() == "precious"
    done(call("rerun", earlier, "--out", out, "-q", "--overwrite"))
    assert matching(out)


@pytest.mark.parametrize(
    ("text", "told"),
    [
        (None, "the record cannot be read: No such file"),
        ("no json", "is not JSON"),
        ('{"format": "viewshed record", "version": "0.1"}', "has format version 1, this viewshed"),
    ],
)
def test_records_that_cannot_be_used(tmp_path, text, told):
    path = tmp_path / "old/record.json"
    path.parent.mkdir()
    if text is not None:
        path.write_text(text)
    result = done(call("rerun", path, "--out", tmp_path / "again"), 1)
    (line,) = result.stderr.splitlines()
    assert line.startswith("Error: ")
    assert told in line


def test_a_surface_where_there_is_none(earlier, tmp_path):
    result = done(call("rerun", earlier, "--out", tmp_path / "again", "--surface", "s.tif"), 1)
    assert "the record has none; leave --surface out" in result.stderr


def test_the_example_of_the_help_works(earlier, tmp_path, monkeypatch):
    earlier.rename(tmp_path / "tower")
    monkeypatch.chdir(tmp_path)
    (example,) = re.findall(r"^  viewshed (rerun .*)$", HELP, flags=re.MULTILINE)
    result = done(call(*example.split()))
    assert words(result)["visible.tif"] == "same-bytes"
    for word in ("same-bytes", "same-values", "redrawn", "different", "missing", "new"):
        assert re.search(rf"^  {word} ", HELP, flags=re.MULTILINE)
