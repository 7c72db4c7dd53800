"""Sums by state and distance, against a walk over every cell."""

import numpy as np
import pytest

from tests.helpers import affine_map, bent_map
from viewshed.grid import CellAreas
from viewshed.tally import STATE_NAMES, band_edges, reached_window, runs_within, tally_up

RANGE = 900.0


def states(shape, seed=0, share=(0.4, 0.3, 0.1, 0.2)):
    rng = np.random.default_rng(seed)
    return rng.choice(np.array([0, 1, 2, 255], np.uint8), size=shape, p=share)


def areas_of(shape, terms=2, seed=1):
    """Cells whose areas differ by row and column."""
    rng = np.random.default_rng(seed)
    return CellAreas(
        rng.uniform(1.0, 2.0, (shape[0], terms)), rng.uniform(300.0, 400.0, (terms, shape[1])), 0.0
    )


def plain_sums(visible, post_map, areas, edges):
    """Cells and areas by band and state, and the farthest visible cell, one cell at a time."""
    counts, sums = (np.zeros((len(edges), 3), t) for t in (int, float))
    farthest = None
    for row, col in np.argwhere(visible < 3):
        east, north = post_map.en(float(row), float(col))
        distance = float(np.hypot(east, north))
        band = min(int(np.searchsorted(edges, distance)), len(edges) - 1)
        state = visible[row, col]
        counts[band, state] += 1
        sums[band, state] += float(areas.at(row, col))
        if state == 1 and (farthest is None or distance > farthest[2]):
            bearing = float(np.degrees(np.arctan2(east, north))) % 360.0
            farthest = (int(row), int(col), distance, bearing)
    return counts, sums, farthest


@pytest.mark.parametrize("shape", [(60, 61), (1, 50), (50, 1), (3, 3)])
@pytest.mark.parametrize("place", [(0.5, 0.5), (0.2, 0.9), (0.0, 0.0), (1.4, -0.3)])
@pytest.mark.parametrize("bend", [False, True])
def test_like_a_walk_over_every_cell(shape, place, bend):
    """Also from the corner, and with the observer outside the window."""
    row0, col0 = (part * (n - 1) for part, n in zip(place, shape, strict=True))
    post_map = bent_map(row0, col0, bend=1e-5) if bend else affine_map(row0, col0)
    visible, areas = states(shape), areas_of(shape)
    edges = band_edges(RANGE)
    counts, sums, farthest = plain_sums(visible, post_map, areas, edges)
    found = tally_up(visible, post_map, areas, RANGE)
    for n, name in enumerate(STATE_NAMES):
        assert found.counts[name] == counts[:, n].sum()
        assert found.areas_m2[name] == pytest.approx(sums[:, n].sum(), rel=1e-12)
        for band, row in zip(found.bands, sums, strict=True):
            assert band.areas_m2[name] == pytest.approx(row[n], rel=1e-12)
    assert found.farthest == pytest.approx(farthest) if farthest else found.farthest is None


def test_the_areas_are_those_of_the_mask():
    visible, areas = states((80, 70), 3), areas_of((80, 70))
    found = tally_up(visible, affine_map(40.0, 30.0), areas, 1500.0)
    for name, value in zip(STATE_NAMES, (0, 1, 2), strict=True):
        assert found.areas_m2[name] == pytest.approx(areas.total(visible == value), rel=1e-12)


def test_nothing_known_has_no_share():
    visible = np.full((9, 9), 255, np.uint8)
    found = tally_up(visible, affine_map(4.0, 4.0), areas_of((9, 9)), 200.0)
    assert (found.seen_share, found.farthest) == (None, None)
    assert all(band.seen_share is None for band in found.bands)


@pytest.mark.parametrize(
    ("range_m", "width", "bands"),
    [
        (30e3, 5e3, 6),
        (45e3, 10e3, 5),
        (1.0, 0.2, 5),
        (600.0, 100.0, 6),
        (2e7, 5e6, 4),
        (7e3, 2e3, 4),
    ],
)
def test_bands_are_round_and_at_most_six(range_m, width, bands):
    edges = band_edges(range_m)
    assert len(edges) == bands
    assert edges[0] == pytest.approx(width)
    assert edges[-1] == range_m
    assert np.all(np.diff(edges) > 0)


def test_a_cell_on_an_edge_belongs_to_the_nearer_band():
    post_map = affine_map(0.0, 0.0, cell=100.0, sphere=True)
    visible = np.ones((1, 7), np.uint8)
    found = tally_up(visible, post_map, CellAreas(np.ones((1, 1)), np.ones((1, 7)), 0.0), 600.0)
    assert [band.areas_m2["visible"] for band in found.bands] == [2, 1, 1, 1, 1, 1]


def distances(post_map, shape):
    rows, cols = np.mgrid[: shape[0], : shape[1]].astype(float)
    return np.hypot(*post_map.en(rows, cols))


@pytest.mark.parametrize("shape", [(60, 61), (1, 50), (50, 1), (3, 3), (1, 1)])
@pytest.mark.parametrize("place", [(0.5, 0.5), (0.2, 0.9), (0.0, 0.0), (1.4, -0.3), (-0.5, 2.0)])
@pytest.mark.parametrize("bend", [False, True])
def test_what_lies_within_a_distance_is_a_run_of_each_row(shape, place, bend):
    row0, col0 = (part * (n - 1) for part, n in zip(place, shape, strict=True))
    post_map = bent_map(row0, col0, bend=1e-5) if bend else affine_map(row0, col0)
    away = distances(post_map, shape)
    radii = [1.0, 120.0, float(np.median(away)), 900.0, 5000.0]
    ends = runs_within(post_map, shape, radii)
    cols = np.arange(shape[1])
    for radius, (first, past) in zip(radii, ends, strict=True):
        inside = (cols >= first[:, np.newaxis]) & (cols < past[:, np.newaxis])
        np.testing.assert_array_equal(inside, away <= radius)


@pytest.mark.parametrize("range_m", [5.0, 60.0, 250.0, 900.0, 5000.0])
@pytest.mark.parametrize("place", [(20.4, 31.7), (0.0, 0.3), (39.0, 49.0)])
@pytest.mark.parametrize("bend", [False, True])
def test_the_window_in_range_holds_its_cells_and_the_observer(place, range_m, bend):
    shape = (40, 50)
    post_map = bent_map(*place, bend=1e-5) if bend else affine_map(*place)
    inside = distances(post_map, shape) <= range_m
    for whole in (np.floor, np.ceil):  # the posts about the observer stay in
        inside[tuple(int(whole(at)) for at in place)] = True
    rows, cols = np.flatnonzero(inside.any(axis=1)), np.flatnonzero(inside.any(axis=0))
    want = (rows[0], cols[0], rows[-1] + 1 - rows[0], cols[-1] + 1 - cols[0])
    assert reached_window(post_map, shape, range_m) == want


def test_long_and_short_runs_of_states_add_up_the_same():
    """Runs are summed as a whole; lengths about those that are looked at together."""
    lengths = [1, 2, 15, 16, 17, 31, 32, 33, 34, 49, 100, 1]
    row = np.repeat(np.resize(np.array([1, 0, 2, 255], np.uint8), len(lengths)), lengths)
    visible = np.stack([np.roll(row, n) for n in range(40)])
    post_map, areas = affine_map(20.0, 100.0), areas_of(visible.shape)
    edges = band_edges(RANGE)
    counts, sums, _ = plain_sums(visible, post_map, areas, edges)
    found = tally_up(visible, post_map, areas, RANGE)
    for n, name in enumerate(STATE_NAMES):
        assert found.counts[name] == counts[:, n].sum()
        for band, want in zip(found.bands, sums, strict=True):
            assert band.areas_m2[name] == pytest.approx(want[n], rel=1e-12)
