"""The benchmark: that it measures what it says, at sizes too small to mean anything."""

import dataclasses
import importlib
import itertools
import json
import os
from types import SimpleNamespace

import numpy as np
import pytest
import rasterio

SMALL = {
    "full": False,
    "walk_range": 20,
    "walk_step": 5,
    "ranges": (20, 30),
    "curve": (10, 40),
    "check_step": 5,
    "side": 80,
    "observers": 3,
    "observer_range": 20,
    "observer_side": 81,
    "rounds": 1,
    "starts": 1,
    "turns": 1,
}


@pytest.fixture
def bench(load_script):
    return load_script("bench")


@pytest.fixture
def part(bench):
    """Function that gives a module of the benchmark."""
    return importlib.import_module


@pytest.fixture
def sizes(part):
    return part("_bench_common").Sizes(**SMALL)


@pytest.fixture
def full(sizes):
    """The small sizes, but taken for those of which everything is asked."""
    return dataclasses.replace(sizes, full=True)


def scene(words, *, copies=20.0, growth=None, others=0.0):
    """What is found for one terrain."""
    points = [
        {"range": reach, "cells": 9, "ns": 0.3 * copies, "copy": 0.3, "copies": copies}
        for reach in ((20, 30) if growth is None else (10, 20, 30, 40))
    ]
    found = {"words": words, "eye": 2.0, "seen": 50.0, "points": points, "others": others}
    found |= {"clearance": 1.5, "gain": 1.9, "piece": 0.01}
    return found if growth is None else found | {"growth": growth}


@pytest.fixture
def found():
    """What is found of two terrains, the walker and help."""
    ways = {"outward": {"ns": 900.0, "busy": 850.0}, "inward": {"ns": 700.0, "busy": 650.0}}
    walker = {"range": 20, "walkers": ways, "ns": 10.0, "copy": 0.3, "ratio": 70.0, "others": 0.0}
    return {
        "start": {"took": {}, "help": 100.0, "import": 50.0, "others": 0.0},
        "walker": walker | {"curve": [{"range": 10, "ns": 300.0}, {"range": 20, "ns": 600.0}]},
        "scenes": {
            "sea": scene("flat sea", growth=1.05),
            "rough": scene("rough hills", copies=70.0, growth=1.2, others=0.4),
            "half": scene("half void"),
        },
    }


HOST = {
    "cpu": "a processor", "cores": 2, "python": "3", "numpy": "2", "numba": "0", "viewshed": "1",
    "load": 0.0,
}  # fmt: skip


def by_name(rows):
    return {row["what"]: row for row in rows}


def test_the_worst_terrain_counts(part, found, full):
    rows = by_name(part("_bench_asked").rows_of(found, full))
    row = rows["visible, 20 cells"]
    assert (row["worst"], row["got"], row["must"], row["aim"]) == ("rough hills", 70.0, 60, 25)
    assert rows["a cell at 40 cells"]["worst"] == "rough hills"
    assert rows["one thread"]["got"] == 1.9


def test_a_no_is_doubted_where_others_had_the_processors(part, found, full):
    rows = by_name(part("_bench_asked").rows_of(found, full))
    assert rows["visible, 20 cells"]["met"] == "NO?"
    assert rows["import viewshed"]["met"] == "NO"
    assert rows["viewshed --help"]["met"] == "yes"


def test_more_can_be_better(part, found, full):
    row = by_name(part("_bench_asked").rows_of(found, full))["visible, 20 cells, rough hills"]
    assert (row["met"], row["reached"]) == ("yes", "no")
    found["walker"]["ratio"] = 59.0
    row = by_name(part("_bench_asked").rows_of(found, full))["visible, 20 cells, rough hills"]
    assert row["met"] == "NO"
    assert row["texts"] == ("59 x", ">= 60 x", ">= 150 x")


def test_small_sizes_are_asked_nothing_that_depends_on_size(part, found, sizes):
    rows = by_name(part("_bench_asked").rows_of(found, sizes))
    assert rows["visible, 20 cells"]["met"] == ""
    assert rows["import viewshed"]["met"] == "NO"


def test_what_the_system_does_not_tell_is_left_open(part, full):
    found = {"process": {"map": 1.5, "geographic": 1.0, "drawn": 2.0, "bytes": None, "others": 0}}
    row = by_name(part("_bench_asked").rows_of(found, full))["its memory a cell"]
    assert (row["got"], row["met"], row["texts"][0]) == (None, "", "-")


def test_every_figure_has_its_row(part, found, full):
    """The rows, and what is asked of each."""
    asked = [(row.what, row.must, row.aim) for row in part("_bench_asked").ASKED]
    assert len({what for what, *_ in asked}) == len(asked) == 17
    assert [(must, aim) for _, must, aim in asked] == [
        *[(60, 150), (60, 25), (60, 25), (2.5, 1.3), (1.15, 1.0), (1.8, 1.95), (1 / 64, None)],
        *[(2.0, 1.4), (1.5, 1.1), (10, 6), (2.5, 1.5), (1.15, 1.0)],
        *[(150, None), (40, None), (2.0, 1.3), (2.0, 1.3), (0, None)],
    ]


def test_printed_tables_name_all(part, found, full):
    text = "\n".join(part("_bench_table").printed(found, full, HOST))
    assert "visible, 20 cells: rough hills" in text
    assert "walker inward" in text
    assert "took up to 40 % of the processors" in text
    (line,) = [line for line in text.splitlines() if line.startswith("half void")]
    assert line.split()[-3:] == ["1.50", "1.90", "1/100"]


def test_the_longest_range_has_no_second_column(part, found, full):
    short = dataclasses.replace(full, curve=(30,))
    text = "\n".join(part("_bench_table").printed(found, short, HOST))
    (head,) = [line for line in text.splitlines() if line.startswith("terrain")]
    assert head.split("  ")[-6:] == ["ns 30", "copies", "growth", "clear", "gain", "piece"]


def test_readme_gets_the_tables_between_its_marks(part, found, full, tmp_path):
    table, path = part("_bench_table"), tmp_path / "README.md"
    path.write_text(f"before\n\n{table.BEGIN}\nold\n{table.END}\n\nafter\n", encoding="utf-8")
    table.write_readme(path, table.readme_lines(found, full, HOST))
    once = path.read_text(encoding="utf-8")
    assert once.startswith(f"before\n\n{table.BEGIN}\n")
    assert once.endswith(f"{table.END}\n\nafter\n")
    assert "old" not in once
    assert "| flat sea | 6.0 | 6.0 | 6.0 | 9.0 | 20 |" in once
    assert "| import viewshed | empty process | 50 ms | <= 40 ms |" in once
    table.write_readme(path, table.readme_lines(found, full, HOST))
    assert path.read_text(encoding="utf-8") == once


def test_readme_without_marks_is_left_alone(part, tmp_path):
    path = tmp_path / "README.md"
    path.write_text("nothing\n", encoding="utf-8")
    with pytest.raises(SystemExit, match=r"has no lines .* between which the tables go"):
        part("_bench_table").write_readme(path, ["new"])
    assert path.read_text(encoding="utf-8") == "nothing\n"


def test_picture_is_drawn_the_same_twice(part, found, tmp_path):
    plot = part("_bench_plot")
    assert list(plot.lines_of(found)) == [
        "flat sea", "rough hills", "copy of the grid", "walk of every line",
    ]  # fmt: skip
    for name in ("a.png", "b.png"):
        plot.draw(found, tmp_path / name)
    drawn = (tmp_path / "a.png").read_bytes()
    assert drawn[:4] == b"\x89PNG"
    assert drawn == (tmp_path / "b.png").read_bytes()


@pytest.mark.parametrize(
    ("places", "apart"),
    [
        ([0.1, 0.9, 0.5], [0.1, 0.9, 0.5]),
        ([0.5, 0.5], [0.45, 0.55]),
        ([0.5, 0.52, 0.9, 0.48], [0.5, 0.6, 0.9, 0.4]),
        ([0.3, 0.31, 0.42], [0.243, 0.343, 0.443]),
    ],
)
def test_labels_move_apart_and_keep_their_order(part, places, apart):
    assert part("_bench_plot").spread(places, 0.1) == pytest.approx(apart, abs=5e-4)


@pytest.mark.parametrize(
    ("words", "names"),
    [
        (["--only", "half", "--only", "start"], ["start", "half"]),
        (["--only", "walker", "--only", "sea", "--only", "city"], ["walker", "sea", "city"]),
    ],
)
def test_what_is_named_is_measured_in_order(bench, words, names):
    assert bench.parse(words).names == names


def test_all_is_measured_where_nothing_is_named(bench):
    names = bench.parse([]).names
    assert names[:5] == ["start", "sample", "process", "observers", "walker"]
    assert names[5:] == bench.SCENE_NAMES == bench.parse(["--only", "scenes"]).names


@pytest.mark.parametrize("words", [["--quick"], ["--short"], ["--only", "sea"]])
def test_readme_needs_the_whole(bench, words, capsys):
    with pytest.raises(SystemExit):
        bench.parse(["--readme", *words])
    assert "--readme needs everything" in capsys.readouterr().err


def test_a_wrong_answer_ends_with_1(bench, monkeypatch, sizes, capsys):
    for unlike, code in ((0, 0), (2, 1)):
        entry = bench.agreement({"sea": (10, 0), "rough": (5, unlike)})
        monkeypatch.setattr(bench, "measure", lambda *_, entry=entry: {"agreement": entry})
        assert bench.main([], sizes) == code
        (line,) = [row for row in capsys.readouterr().out.splitlines() if "wrong" in row]
        assert line.split()[:4] == ["wrong", "answers", "of", "15"]


def test_readme_and_picture_are_written_at_the_end(
    bench, monkeypatch, found, full, tmp_path, capsys
):
    table = importlib.import_module("_bench_table")
    readme, picture = tmp_path / "README.md", tmp_path / "cost.png"
    readme.write_text(f"{table.BEGIN}\n{table.END}\n", encoding="utf-8")
    monkeypatch.setattr(bench, "README", readme)
    monkeypatch.setattr(bench, "PICTURE", picture)
    monkeypatch.setattr(bench, "GROUPS", list(found))
    monkeypatch.setattr(bench, "measure", lambda *_: found)
    assert bench.main(["--readme", "--json"], full) == 0
    told = tmp_path / "told.json"
    told.write_text(capsys.readouterr().out, encoding="utf-8")
    made = readme.read_bytes(), picture.read_bytes()
    assert b"| flat sea |" in made[0]
    readme.write_text(f"{table.BEGIN}\n{table.END}\n", encoding="utf-8")
    monkeypatch.setattr(bench, "measure", None)
    assert bench.main(["--readme", "--from", str(told)]) == 0
    assert (readme.read_bytes(), picture.read_bytes()) == made
    assert "| flat sea |" not in capsys.readouterr().out


@pytest.mark.parametrize(
    ("change", "group", "said"),
    [
        ({"full": False}, None, "is not of the full sizes"),
        ({"curve": (30,)}, None, "is not of the full sizes"),
        ({}, "walker", "lacks walker"),
    ],
)
def test_readme_takes_all_or_none(bench, monkeypatch, found, full, tmp_path, change, group, said):
    monkeypatch.setattr(bench, "GROUPS", list(found))
    monkeypatch.setattr(bench, "README", tmp_path / "README.md")
    found.pop(group, None)
    sizes = vars(dataclasses.replace(full, **change))
    told = {"machine": HOST, "sizes": sizes, "seconds": 1.0, "found": found}
    (tmp_path / "told.json").write_text(json.dumps(told), encoding="utf-8")
    with pytest.raises(SystemExit, match=f"told.json {said}, so README is left as it is"):
        bench.main(["--readme", "--from", str(tmp_path / "told.json")])


@pytest.mark.parametrize("name", ["sea", "half", "woods", "corner", "sector"])
def test_smaller_is_a_part_of_the_same_ground(part, name):
    (one,) = [scene for scene in part("_terrains").SCENES if scene.name == name]
    near, far = part("_bench_engine").runs_of(one, {60, 20})
    assert (near.z.shape, far.z.shape) == ((41, 41), (121, 121))
    row, col = (int(far.map.row0 - near.map.row0), int(far.map.col0 - near.map.col0))
    np.testing.assert_array_equal(near.z, far.z[row : row + 41, col : col + 41])
    if one.cover is not None:
        np.testing.assert_array_equal(near.surface, far.surface[row : row + 41, col : col + 41])
    assert near.cells < far.cells


def test_terrains_are_what_they_are_called(part):
    terrains = part("_terrains")
    made = {scene.name: scene.make(501) for scene in terrains.SCENES}
    assert all(z.dtype == np.float32 and z.shape == (501, 501) for z in made.values())
    known = {name: np.isfinite(z).mean() for name, z in made.items()}
    assert known.pop("voids") == pytest.approx(0.99, abs=0.003)
    assert known.pop("half") == pytest.approx(0.5, abs=0.2)
    assert set(known.values()) == {1.0}
    for name in ("smooth", "rough"):
        assert np.unravel_index(np.argmax(made[name]), (501, 501)) == (250, 250)
    np.testing.assert_array_equal(made["rough"], terrains.rough(501))
    rise = {name: np.abs(np.diff(made[name])).mean() for name in ("smooth", "rough")}
    assert rise["smooth"] < rise["rough"]


def test_largest_piece_is_a_share_of_all(part, monkeypatch):
    engine = part("_bench_engine")
    (sea,) = [scene for scene in part("_terrains").SCENES if scene.name == "sea"]
    (run,) = engine.runs_of(sea, {30})
    clock = itertools.chain([0.0, 3.0], itertools.count(10.0))  # one piece of 3 s, others of 1 s
    monkeypatch.setattr(engine, "time", SimpleNamespace(perf_counter=lambda: next(clock)))
    share = engine.largest_piece(run)
    pieces = 1 + (next(clock) - 10.0) / 2.0
    assert pieces >= 64
    assert share == pytest.approx(3 / (pieces + 2))


def test_a_terrain_is_measured_and_told_as_json(bench, sizes, capsys):
    assert bench.main(["--only", "half", "--json"], sizes) == 0
    told = json.loads(capsys.readouterr().out)
    half = told["found"]["scenes"]["half"]
    assert [point["range"] for point in half["points"]] == [20, 30]
    assert all(point["copies"] > 0 for point in half["points"])
    assert 0 < half["piece"] < 1
    assert told["sizes"]["ranges"] == [20, 30]
    assert "visible, 20 cells" in {row["what"] for row in told["rows"]}


def test_short_leaves_out_what_is_beyond(bench, monkeypatch, sizes, capsys):
    asked = []
    monkeypatch.setattr(bench, "measure", lambda names, sizes, folder: asked.append(sizes) or {})
    assert bench.main(["--short"], sizes) == 0
    assert (asked[0].ranges, asked[0].curve) == ((20, 30), (30,))
    assert "Took" in capsys.readouterr().out


@pytest.mark.slow
def test_walkers_agree(bench, sizes, tmp_path):
    found = bench.measure(["walker", "sea", "city", "between", "sector"], sizes, tmp_path)
    assert found["agreement"]["unlike"] == 0
    assert {name.split()[0] for name in found["agreement"]["checks"]} == {
        *("walker", "sea", "city", "between", "sector"),
    }
    assert [point["range"] for point in found["walker"]["curve"]] == [10, 20, 30, 40]
    assert [point["range"] for point in found["scenes"]["sea"]["points"]] == [10, 20, 30, 40]
    assert found["scenes"]["sea"]["growth"] > 0
    assert "growth" not in found["scenes"]["between"]


def test_a_wrong_walk_is_found(part, monkeypatch):
    engine = part("_bench_engine")
    (sea,) = [scene for scene in part("_terrains").SCENES if scene.name == "sea"]
    (run,) = engine.runs_of(sea, {20})
    rows = run.rows(5)
    answer = run.ask(clearance=True)
    state = answer.visible[rows]
    assert engine.unlike(answer, rows, state) == 0
    state[2, 20] ^= 1
    assert engine.unlike(answer, rows, state) == 1


def test_observers_are_counted_both_ways(part, sizes, tmp_path):
    checks = {}
    found = part("_bench_observers").measure_observers(sizes, tmp_path, checks)
    asked, unlike = checks["observers"]
    assert unlike == 0
    assert asked > 1200
    assert found["ratio"] == pytest.approx(found["together"] / found["alone"])


@pytest.mark.skipif(not hasattr(os, "wait4"), reason="the system tells no memory of a process")
def test_memory_of_a_command_is_its_own(part):
    held = np.ones(40_000_000)  # 320 MB that the started process must not inherit
    empty = part("_bench_process").run_once(["-c", "pass"])
    large = part("_bench_process").run_once(["-c", "b = bytes(range(256)) * 400_000"])
    assert empty["peak"] + 80e6 < large["peak"] < 200e6 < held.nbytes
    assert 0 < empty["busy"] < empty["wall"] + 0.1


def test_a_command_that_fails_is_told(part):
    with pytest.raises(RuntimeError, match="ended with code 3: what a pity"):
        part("_bench_process").run_once(
            ["-c", "import sys; print('what a pity', file=sys.stderr); sys.exit(3)"]
        )


def test_grids_of_processes(part, tmp_path):
    process = part("_bench_process")
    read, heights = {}, []
    for name, geographic in (("utm", False), ("degrees", True)):
        path = tmp_path / f"{name}.tif"
        x, y = process.write_dem(path, 81, geographic=geographic)
        with rasterio.open(path) as file:
            heights.append(file.read(1))
            assert file.crs.is_geographic == geographic
            assert file.index(x, y) == (40, 40)
            read[name] = file.res
    np.testing.assert_array_equal(*heights)
    assert np.unravel_index(np.argmax(heights[0]), (81, 81)) == (40, 40)
    assert read["utm"] == (5.0, 5.0)
    width, height = read["degrees"]
    geod = pytest.importorskip("pyproj").Geod(ellps="WGS84")
    lon, lat = process.LON, process.LAT
    assert geod.inv(lon, lat, lon + width, lat)[2] == pytest.approx(5.0, rel=1e-3)
    assert geod.inv(lon, lat, lon, lat + height)[2] == pytest.approx(5.0, rel=1e-3)


def test_a_grid_that_is_there_is_kept(part, tmp_path):
    path = tmp_path / "utm.tif"
    path.write_bytes(b"made before")
    part("_bench_process").write_dem(path, 81)
    assert path.read_bytes() == b"made before"


def test_the_plain_run_writes_the_answer(part, root, tmp_path):
    process = part("_bench_process")
    process.write_dem(tmp_path / "dem.tif", 700)
    answer = (np.arange(700 * 700) % 3 == 0).astype(np.uint8).reshape(700, 700)
    np.save(tmp_path / "answer.npy", answer)
    words = [tmp_path / "dem.tif", tmp_path / "answer.npy", tmp_path / "out.tif", 2]
    process.run_once([root / "scripts" / "_bench_plain.py", *words])
    with rasterio.open(tmp_path / "out.tif") as file:
        np.testing.assert_array_equal(file.read(1), answer)
        assert file.overviews(1)
        assert file.tags(ns="IMAGE_STRUCTURE")["LAYOUT"] == "COG"


@pytest.mark.slow
def test_whole_processes(bench, sizes, tmp_path):
    found = bench.measure(["start", "process"], sizes, tmp_path)
    assert set(found["process"]["took"]) == {"plain", "map", "geographic", "small", "drawn"}
    assert all(found["process"][name] > 0 for name in ("map", "geographic", "drawn"))
    made = {path.parent.name for path in (tmp_path / "out").glob("*/record.json")}
    assert made == {"utm", "degrees", "small", "drawn"}
    assert (tmp_path / "out" / "drawn" / "map.png").is_file()
    assert not (tmp_path / "out" / "utm" / "map.png").exists()
    assert set(found["start"]["took"]) == {"pass", "help", "import"}
