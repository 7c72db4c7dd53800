"""The main job on arrays: refusals, values and what happens on the way."""

import math
import threading
import time

import numpy as np
import pytest

from tests.helpers import affine_map, bent_map, flat, fractal, noise, with_voids
from viewshed import visibility
from viewshed.errors import InputError, ViewshedError
from viewshed.kernels import sweep
from viewshed.places import Sector
from viewshed.visibility import compute, ground_at, usable_threads

HILLS = with_voids(fractal(60, 1, relief=150.0), 0.02, seed=3, keep=(30.3, 28.6))
PLACE = (30.3, 28.6)

# --- refusals -------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    "place", [(-0.01, 5.0), (5.0, -0.5), (9.2, 5.0), (5.0, 9.0 + 1e-9), (math.nan, 5.0), (1e9, 0.0)]
)
def test_observer_outside_the_outermost_posts(place):
    with pytest.raises(InputError, match=r"outside the outermost cell centres.*10 x 10.*move it"):
        compute(flat(10), affine_map(*place), eye_height=2.0)


@pytest.mark.parametrize("place", [(0.0, 0.0), (9.0, 9.0), (0.0, 4.5), (8.999, 9.0)])
def test_observer_on_the_outermost_posts(place):
    got = compute(flat(10), affine_map(*place), eye_height=2.0)
    assert np.all(got.visible == 1)


@pytest.mark.parametrize("place", [(4.0, 4.0), (4.5, 4.0), (3.2, 3.2), (4.0, 3.999)])
def test_observer_on_or_beside_a_void(place):
    z = flat(10)
    z[4, 4] = np.nan
    with pytest.raises(InputError, match=r"on or beside a void cell.*move it or fill the void"):
        compute(z, affine_map(*place), eye_height=2.0)


@pytest.mark.parametrize("place", [(4.0, 3.0), (3.0, 3.5), (5.0, 5.0)])
def test_observer_next_to_a_void_stands_on_known_ground(place):
    z = flat(10)
    z[4, 4] = np.nan
    assert compute(z, affine_map(*place), eye_height=2.0).eye_elevation == 2.0


def test_eye_below_ground():
    with pytest.raises(InputError, match=r"eye is 0\.5 m below the ground.*100\.00 m.*raise it"):
        compute(flat(10, 100.0), affine_map(5.0, 5.0), eye_height=-0.5)


@pytest.mark.parametrize(
    "heights",
    [
        {"eye_height": math.nan},
        {"eye_height": math.inf},
        {"eye_height": 1.0, "target_height": math.nan},
        {"eye_height": 1.0, "target_height": -math.inf},
    ],
)
def test_heights_that_are_no_numbers(heights):
    with pytest.raises(InputError, match="must be finite numbers"):
        compute(flat(10), affine_map(5.0, 5.0), **heights)


@pytest.mark.parametrize("threads", [0, -2])
def test_no_threads(threads):
    with pytest.raises(InputError, match=f"{threads} threads cannot do any work: ask for 1"):
        compute(flat(10), affine_map(5.0, 5.0), eye_height=1.0, threads=threads)


def test_threads_by_default():
    assert usable_threads(None) >= 1
    assert usable_threads(3) == 3


# --- values ---------------------------------------------------------------------------------------


def test_ground_is_bilinear():
    z = np.array([[10.0, 20.0], [30.0, 60.0]], np.float32)
    assert ground_at(z, 0.0, 0.0) == 10.0
    assert ground_at(z, 1.0, 1.0) == 60.0
    assert ground_at(z, 0.0, 0.25) == pytest.approx(12.5)
    assert ground_at(z, 0.5, 0.5) == pytest.approx(30.0)
    assert compute(z, affine_map(0.5, 0.5), eye_height=1.5).eye_elevation == pytest.approx(31.5)


@pytest.mark.parametrize("target_height", [0.0, 2.0])
def test_needed_height_is_what_clearance_lacks(target_height):
    scene = {"eye_height": 3.0, "target_height": target_height}
    got = compute(HILLS, affine_map(*PLACE), clearance=True, needed_height=True, **scene)
    known = got.visible <= 1
    expected = np.maximum(np.float32(0.0), np.float32(target_height) - got.clearance)
    np.testing.assert_array_equal(got.needed_height, np.where(known, expected, np.float32(np.nan)))
    assert np.all((got.clearance >= 0.0)[known] == (got.visible == 1)[known])
    assert np.all(got.needed_height[got.visible == 1] <= target_height)
    assert np.all(got.needed_height[got.visible == 0] > target_height)


def test_a_target_of_the_needed_height_is_just_seen():
    scene = {"eye_height": 3.0}
    got = compute(HILLS, affine_map(*PLACE), needed_height=True, **scene)
    hidden = np.argwhere(got.visible == 0)[::40]
    assert len(hidden) > 10
    for r, c in hidden:
        height = float(got.needed_height[r, c])
        off = 0.001 + 1e-4 * height  # the factor 1 - z / R' of heights, far above this relief
        for sign, seen in ((-1, False), (1, True)):
            target = height + sign * off
            raised = compute(HILLS, affine_map(*PLACE), target_height=target, **scene)
            assert (raised.visible[r, c] != 0) == seen


def test_types_and_values():
    got = compute(HILLS, affine_map(*PLACE), eye_height=3.0, clearance=True, needed_height=True)
    assert got.visible.dtype == np.uint8
    assert got.clearance.dtype == got.needed_height.dtype == np.float32
    assert got.visible.shape == got.clearance.shape == got.needed_height.shape == HILLS.shape
    np.testing.assert_array_equal(got.visible == 255, np.isnan(HILLS))
    assert set(np.unique(got.visible)) == {0, 1, 2, 255}
    unknown = got.visible >= 2
    np.testing.assert_array_equal(np.isnan(got.clearance), unknown)
    np.testing.assert_array_equal(np.isnan(got.needed_height), unknown)
    assert not np.isinf(got.clearance).any()


@pytest.mark.parametrize("make", [affine_map, bent_map])
def test_the_own_cell(make):
    """The observer's own place is seen over its whole height, in whatever sector it looks."""
    for sector in (None, Sector(100.0, 101.0)):
        got = compute(
            noise(9, 2),
            make(4.0, 4.0),
            eye_height=1.5,
            target_height=2.0,
            sector=sector,
            clearance=True,
            needed_height=True,
        )
        assert got.visible[4, 4] == 1
        assert got.clearance[4, 4] == 3.5
        assert got.needed_height[4, 4] == 0.0


def test_only_layers_asked_for():
    got = compute(flat(5), affine_map(2.0, 2.0), eye_height=1.0)
    assert got.clearance is None
    assert got.needed_height is None


def test_nothing_in_sight():
    """A range shorter than the way to any post."""
    got = compute(flat(5), affine_map(2.5, 2.5), eye_height=1.0, range_m=1.0, clearance=True)
    assert np.all(got.visible == 255)
    assert np.all(np.isnan(got.clearance))


def test_arrays_of_other_kinds():
    """Other types, orders and read-only arrays give the answer of their heights as float32."""
    z = np.rint(fractal(30, 5)).astype(np.float32)
    plain = compute(z, affine_map(14.2, 15.0), eye_height=3.0).visible
    locked = z.copy()
    locked.setflags(write=False)
    wide = np.repeat(z, 2, axis=1)[:, ::2]
    for other in (z.astype(np.float64), z.astype(np.int16), np.asfortranarray(z), locked, wide):
        before = other.copy()
        got = compute(other, affine_map(14.2, 15.0), eye_height=3.0).visible
        np.testing.assert_array_equal(got, plain)
        np.testing.assert_array_equal(other, before)


# --- on the way -----------------------------------------------------------------------------------


@pytest.fixture
def slow_pieces(monkeypatch):
    """Make every wedge take some milliseconds more."""
    sweep = visibility._sweep_piece

    def slowly(*args):
        time.sleep(0.005)
        sweep(*args)

    monkeypatch.setattr(visibility, "_sweep_piece", slowly)


@pytest.mark.usefixtures("slow_pieces")
@pytest.mark.parametrize("threads", [1, 2])
def test_progress(threads):
    calls = []
    compute(
        HILLS,
        affine_map(*PLACE),
        eye_height=3.0,
        threads=threads,
        progress=lambda done, total: calls.append((done, total)),
    )
    done, totals = zip(*calls, strict=True)
    assert len(set(totals)) == 1
    assert list(done) == sorted(done)
    assert 0 < done[-1] <= totals[0]


@pytest.mark.usefixtures("slow_pieces")
@pytest.mark.parametrize("threads", [1, 2])
def test_what_progress_raises_ends_the_run(threads):
    def stop(done, total):
        raise KeyboardInterrupt

    before = threading.active_count()
    with pytest.raises(KeyboardInterrupt):
        compute(HILLS, affine_map(*PLACE), eye_height=3.0, threads=threads, progress=stop)
    assert threading.active_count() == before


def test_what_a_wedge_raises_ends_the_run(monkeypatch):
    def fail(*args):
        msg = "no"
        raise MemoryError(msg)

    monkeypatch.setattr(visibility, "_sweep_piece", fail)
    for threads in (1, 2):
        with pytest.raises(MemoryError):
            compute(HILLS, affine_map(*PLACE), eye_height=3.0, threads=threads)


#: Posts that the scratch arrays are longer than the lines they hold.
SPARE = 4 * sweep.CHUNK


def tight_workers(names):
    """Make a stand-in for the scratch arrays in which some start out far too small."""

    class Tight(visibility._Workers):
        largest = 0

        def get(self, factor):
            type(self).largest = max(type(self).largest, factor)
            self._local.factor = 0
            arrays = super().get(1)
            loud, env, seg, arcs, gaps = arrays[5:10]
            if "lines" in names:
                loud = np.zeros(SPARE + factor, np.uint8)
            if "env" in names:
                env = np.zeros((2, 3, 5 + factor))
            if "arcs" in names:
                arcs = np.zeros((factor, 16))
            if "gaps" in names:
                gaps = np.zeros((2, factor))
            return (*arrays[:5], loud, env, seg, arcs, gaps, *arrays[10:])

    return Tight


@pytest.mark.parametrize("make", [affine_map, bent_map])
@pytest.mark.parametrize("names", [{"lines"}, {"env"}, {"arcs"}, {"gaps"}, {"env", "arcs", "gaps"}])
def test_scratch_arrays_grow(monkeypatch, names, make):
    """Wedges that do not fit are done again, and nothing of the first try stays."""
    z = with_voids(noise(60, 7), 0.05, seed=4, keep=PLACE)
    scene = {"eye_height": 3.0, "target_height": 1.0, "clearance": True}
    roomy = compute(z, make(*PLACE), **scene)
    tight = tight_workers(names)
    monkeypatch.setattr(visibility, "_Workers", tight)
    got = compute(z, make(*PLACE), **scene)
    assert tight.largest > 1
    assert got.visible.tobytes() == roomy.visible.tobytes()
    assert got.clearance.tobytes() == roomy.clearance.tobytes()


def test_scratch_arrays_that_never_fit(monkeypatch):
    class Never(visibility._Workers):
        def get(self, factor):
            arrays = super().get(1)
            return (*arrays[:5], np.zeros(SPARE + 4, np.uint8), *arrays[6:])

    monkeypatch.setattr(visibility, "_Workers", Never)
    with pytest.raises(ViewshedError, match="does not fit in memory: narrow the range"):
        compute(HILLS, affine_map(*PLACE), eye_height=3.0)
