"""The record: what it must hold, and whether it agrees with the files."""

import json
from pathlib import Path

import numpy as np
import pytest

from viewshed.constants import CAUTIONS
from viewshed.errors import DataError, OutputError
from viewshed.io._atomic import file_sha256
from viewshed.io.record import (
    build_record,
    library_versions,
    matching,
    mismatches,
    read_record,
    relative_path,
    write_record,
)

SECTIONS = {
    "version": "1.2",
    "question": "from 50 m above ground at 1 point to 1.7 m above ground everywhere, k = 0.13",
    "options": {"range_m": 30000.0, "layers": ("visible",), "out": Path("a/b")},
    "crs": 'PROJCRS["ü"]',
    "grid": {"shape": (3, np.int64(4)), "transform": np.array([30.0, 0.0])},
    "dem": [{"path": "dem.tif", "size": 12, "sha256": "ab"}],
    "observer": {"x": np.float64(1.5), "eye_height_m": np.float32(1.5)},
    "refraction": {"k": 0.13},
    "geometry": {"error_m": 0.0},
    "counts": {"visible": np.uint32(7), "exact": np.bool_(True)},
    "areas_m2": {"visible": float("nan"), "hidden": np.inf},
    "farthest_visible": None,
    "warnings": [],
    "outputs": {},
}


def test_build():
    record = build_record(SECTIONS)
    assert record["format"] == "viewshed record"
    assert record["cautions"] == list(CAUTIONS)
    assert record["libraries"] == library_versions()
    assert {"numpy", "rasterio"} <= set(record["libraries"])
    assert record["grid"] == {"shape": [3, 4], "transform": [30.0, 0.0]}
    assert record["areas_m2"] == {"visible": None, "hidden": None}
    assert record["counts"] == {"visible": 7, "exact": True}
    assert record["options"]["out"] == "a/b"
    assert record["observer"]["eye_height_m"] == 1.5
    assert json.loads(json.dumps(record, allow_nan=False)) == record


@pytest.mark.parametrize("missing", ["question", "outputs", "dem", "version"])
def test_build_without_a_section(missing):
    with pytest.raises(ValueError, match=rf"section '{missing}' of the record is missing"):
        build_record({k: v for k, v in SECTIONS.items() if k != missing})


def test_build_refuses_what_is_no_json():
    with pytest.raises(ValueError, match="of type object cannot stand in a record"):
        build_record({**SECTIONS, "options": {"x": object()}})


def test_paths_are_relative_to_the_record(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    dem = [{"path": str(tmp_path / "dems" / "a.tif"), "size": 1, "sha256": "x"}]
    record = build_record({**SECTIONS, "dem": dem}, folder="out/run")
    assert record["dem"][0]["path"] == "../../dems/a.tif"
    assert dem[0]["path"].startswith("/")
    assert relative_path("a.tif", ".") == "a.tif"
    assert relative_path(tmp_path / "ü b.tif", tmp_path) == "ü b.tif"


def test_write_and_read(tmp_path):
    record, path = build_record(SECTIONS), tmp_path / "record.json"
    write_record(path, record)
    text = path.read_text(encoding="utf-8")
    assert text.endswith("}\n")
    assert text.startswith('{\n  "areas_m2"')
    assert 'PROJCRS[\\"ü\\"]' in text
    assert read_record(path) == read_record(tmp_path) == record
    write_record(path, dict(reversed(record.items())))
    assert path.read_text(encoding="utf-8") == text


def test_names_that_are_no_text(tmp_path):
    write_record(tmp_path / "record.json", {**build_record(SECTIONS), "crs": "b\udcff"})
    assert read_record(tmp_path)["crs"] == "b\udcff"


def test_write_fails(tmp_path):
    with pytest.raises(OutputError, match=r"^[^\n]*record\.json: the record cannot be written: No"):
        write_record(tmp_path / "no" / "record.json", {})


@pytest.mark.parametrize(
    ("text", "why"),
    [
        ("", "is not JSON"),
        ("\xff\xfe", "is not JSON"),
        ("[]", "is not a record of viewshed"),
        ('{"format": "x"}', "is not a record of viewshed"),
        ('{"format": "viewshed record"}', "section 'version' of the record is missing"),
    ],
)
def test_read_what_is_no_record(tmp_path, text, why):
    path = tmp_path / "record.json"
    path.write_bytes(text.encode("latin-1"))
    with pytest.raises(DataError, match=rf"^[^\n]*record\.json: [^\n]*{why}[^\n]*$"):
        read_record(path)
    assert not matching(tmp_path)


@pytest.mark.parametrize(
    ("outputs", "why"),
    [
        ({"../a.tif": {"sha256": ""}}, "not a file beside it"),
        ({"a.tif": 3}, "not a file beside it"),
        ({"a.tif": {}}, "no SHA-256 for 'a.tif'"),
    ],
)
def test_read_bad_outputs(tmp_path, outputs, why):
    record = {**build_record(SECTIONS), "outputs": outputs}
    write_record(tmp_path / "record.json", record)
    with pytest.raises(DataError, match=why):
        read_record(tmp_path)


def test_matching(tmp_path):
    assert not matching(tmp_path)
    assert "record cannot be read" in mismatches(tmp_path)[0]
    (tmp_path / "a.tif").write_text("a")
    (tmp_path / "b.png").write_text("b")
    outputs = {n: {"sha256": file_sha256(tmp_path / n)} for n in ("a.tif", "b.png")}
    write_record(tmp_path / "record.json", build_record({**SECTIONS, "outputs": outputs}))
    assert matching(tmp_path)
    assert mismatches(tmp_path) == []
    (tmp_path / "a.tif").write_text("A")
    (tmp_path / "b.png").unlink()
    assert not matching(str(tmp_path))
    assert mismatches(tmp_path) == [
        f"{tmp_path / 'a.tif'}: differs from the record",
        f"{tmp_path / 'b.png'}: is missing",
    ]
