"""The same map with all its arrays in memory and with all of them in scratch files."""

import errno
import os
from dataclasses import replace

import numpy as np
import pytest

import viewshed
from tests.unit.test_api import post, write_dem
from viewshed.constants import LAYERS
from viewshed.io import _memory, room
from viewshed.writing import draw_page

pytestmark = [
    pytest.mark.skipif(not room.can_map(), reason="arrays cannot be kept in files here"),
    pytest.mark.filterwarnings("ignore:the range:viewshed.ViewshedWarning"),
]


@pytest.fixture
def terrain(tmp_path):
    y, x = np.mgrid[0:60, 0:80]
    z = (40 * np.sin(x / 7.0) * np.cos(y / 5.0) + 100).astype(np.float32)
    z[20:24, 50:55] = -9999
    return viewshed.open_terrain(write_dem(tmp_path / "hills.tif", z, nodata=-9999))


@pytest.fixture
def surface(tmp_path, terrain):
    z = terrain.read(0, 0, 60, 80) + np.float32(1.0)
    return viewshed.open_surface(write_dem(tmp_path / "woods.tif", z), terrain)


@pytest.fixture
def tiny(monkeypatch):
    """A bound under which every array, however small, lies in a file."""
    monkeypatch.setattr(_memory, "LEAST", 0)
    monkeypatch.setattr(room, "_SMALL", 1)
    monkeypatch.setattr(room, "_WORTH", 0)
    return {"memory": 1}


def observers(count):
    """Give some who stand apart; not all of their ranges end on the grid."""
    places = [(30, 40), (22.3, 60.6), (40, 20)]
    return [viewshed.Observer(*post(*p), name=f"O{n}") for n, p in enumerate(places[:count])]


def arrays_of(result):
    found = {**result.arrays, "elevation": result.elevation}
    found |= {view.observer.name: view.visible for view in result.views if view.visible is not None}
    return found


@pytest.mark.parametrize("over", ["ground", "surface"])
@pytest.mark.parametrize("count", [1, 3])
def test_files_are_the_same_to_the_byte(terrain, surface, tiny, tmp_path, count, over):
    asked = {
        "range_m": 700.0,
        "layers": LAYERS,
        "each": True,
        "surface": surface if over == "surface" else None,
    }
    results = {
        "memory": viewshed.map_visibility(terrain, observers(count), **asked),
        "files": viewshed.map_visibility(terrain, observers(count), **asked, **tiny),
    }
    for array in arrays_of(results["files"]).values():
        owner = array
        while isinstance(owner, np.ndarray):
            owner = owner.base
        assert owner is not None, "this array is not in a file"
    assert {name: result.rest is not None for name, result in results.items()} == {
        "memory": False,
        "files": True,
    }
    written = {
        name: result.write(tmp_path / name, polygons="gpkg") for name, result in results.items()
    }
    for one, other in zip(*written.values(), strict=True):
        assert one.name == other.name
        assert one.read_bytes() == other.read_bytes(), one.name


def test_pages_are_given_back_between_pieces_of_what_comes_after(terrain, tiny, tmp_path):
    result = viewshed.map_visibility(terrain, observers(3), range_m=700, each=True, **tiny)
    rests = []
    result = replace(result, rest=lambda: rests.append(True))
    result.polygons()
    assert len(rests) == 3 * (1 + 3), "three times over the common answer and each of three more"
    rests.clear()
    draw_page(result, tmp_path / "map.png")
    assert rests


def test_scratch_files_are_where_they_were_asked_for(terrain, tiny, tmp_path):
    with pytest.raises(viewshed.OutputError, match=r"nowhere: has no room for a scratch file"):
        viewshed.map_visibility(
            terrain, observers(1), range_m=700, scratch=tmp_path / "nowhere", **tiny
        )


def test_a_full_disk_ends_the_run_in_one_line(terrain, tiny, tmp_path, monkeypatch):
    def full(*_):
        raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))

    monkeypatch.setattr(os, "posix_fallocate", full)
    with pytest.raises(viewshed.OutputError, match=r"No space left on device; free some space"):
        viewshed.map_visibility(terrain, observers(1), range_m=700, scratch=tmp_path, **tiny)


@pytest.mark.parametrize("memory", [10, 749_999_999, float("nan"), -1])
def test_too_little_memory_is_refused(terrain, memory):
    with pytest.raises(viewshed.InputError, match="give at least 750MB"):
        viewshed.map_visibility(terrain, observers(1), range_m=700, memory=memory)


def test_a_bound_that_is_kept_anyhow_changes_nothing(terrain):
    found = [
        viewshed.map_visibility(terrain, observers(1), range_m=700, memory=memory)
        for memory in (None, 750_000_000, float("inf"))
    ]
    for result in found[1:]:
        np.testing.assert_array_equal(result.visible, found[0].visible)


def test_where_nothing_can_be_mapped_a_large_run_is_refused(terrain, tiny, monkeypatch):
    monkeypatch.delattr(os, "posix_fallocate")
    with pytest.raises(viewshed.MemoryLimitError, match=r"range 700 m needs .* and there are"):
        viewshed.map_visibility(terrain, observers(1), range_m=700, **tiny)
