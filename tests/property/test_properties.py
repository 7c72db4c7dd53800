"""What has to hold for every scene, whatever the ground."""

import math
from dataclasses import dataclass

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st

from tests.helpers import (
    ROUNDING,
    SPHERE,
    Scene,
    affine_map,
    bent_map,
    city,
    fractal,
    noise,
    steps,
    with_voids,
)
from viewshed.visibility import compute

#: Closer to zero than this, a clearance may have either sign [m].
HAIR = 1e-3
QUARTERS = (0.0, 0.25, 0.5, 0.75)
JACOBIANS = (
    [[30.0, 0.0], [0.0, -30.0]],
    [[12.0, 0.0], [0.0, 40.0]],
    [[26.0, 15.0], [15.0, -26.0]],
)
GROUNDS = {
    "noise": lambda n, seed: noise(n, seed, height=3.0),
    "steps": steps,
    "city": lambda n, seed: city(n, seed, block=3, height=15.0),
    "hills": lambda n, seed: fractal(n, seed, relief=15.0),
}

common = settings(deadline=None, derandomize=True, max_examples=50)
eyes = st.sampled_from([0.0, 0.5, 1.7, 6.0, 40.0])
target_heights = st.sampled_from([0.0, 0.3, 2.0, 10.0])
refractions = st.sampled_from([-0.5, 0.0, 0.13, 0.25, 0.6])


@st.composite
def scenes(draw, voids=True, bent=True, on_post=False, square=False):
    """Small grids of every kind, with an observer on a post or a quarter cell off it."""
    rows = draw(st.integers(3, 16))
    cols = rows if square else draw(st.integers(3, 16))
    seed = draw(st.integers(0, 2**20))
    ground = GROUNDS[draw(st.sampled_from(sorted(GROUNDS)))]
    z = ground(max(rows, cols) + 1, seed)[:rows, :cols].copy()
    place = [draw(st.integers(0, size - 2)) for size in (rows, cols)]
    if not on_post:
        place = [at + draw(st.sampled_from(QUARTERS)) for at in place]
    if voids:
        z = with_voids(z, draw(st.sampled_from([0.0, 0.05, 0.3])), seed, keep=place)
    if bent and draw(st.booleans()):
        return Scene(z, bent_map(*map(float, place), bend=1e-4, seed=seed))
    jacobian = JACOBIANS[0] if square else draw(st.sampled_from(JACOBIANS))
    return Scene(z, affine_map(*map(float, place), jacobian=jacobian, sphere=True))


@dataclass(frozen=True)
class Answer:
    state: np.ndarray
    clearance: np.ndarray


def answer(scene, *, eye=1.7, target=0.0, k=0.13, **options):
    got = compute(
        scene.z,
        scene.post_map,
        eye_height=eye,
        target_height=target,
        refraction_k=k,
        clearance=True,
        **{"threads": 1, **options},
    )
    return Answer(got.visible, got.clearance.astype(np.float64))


def slack(scene, change=1.0, eye=40.0):
    """What the factor 1 - z / R' of the heights can take from a clearance [m].

    It lowers a post by (z - z_eye) z / R', which counts at the target in the ratio of the
    distances, here at most that of the grid's diagonal to the quarter cell the observer is off.
    """
    height = np.nanmax(np.abs(scene.z))
    ratio = math.hypot(*scene.z.shape) / 0.25
    return change * (2.0 * height + eye) * height / SPHERE * ratio


def assert_grows(less, more, room):
    """No clearance gets smaller, and nothing seen gets lost, but for the room given [m]."""
    known = (less.state <= 1) & (more.state <= 1)
    allowed = room + ROUNDING * np.abs(less.clearance[known])
    assert np.all(more.clearance[known] >= less.clearance[known] - allowed)
    seen = (less.state != 255) & (less.state != 0)
    lost = seen & (more.state == 0) & (more.clearance < -room)
    lost &= ~(less.clearance < room)
    assert not lost.any()
    np.testing.assert_array_equal(less.state == 255, more.state == 255)


@common
@given(scenes(on_post=True), eyes, target_heights, refractions, refractions)
def test_clearance_grows_with_k(scene, eye, target, one, other):
    """From a post. Between posts the drop is interpolated and not zero under the observer.

    There an eye on the ground stands up to cell^2 / 8 R' above the patch it stands on, some
    hundredths of a millimetre, and the tangent to a bulge in its own cell moves with the root.
    """
    low, high = sorted((one, other))
    less, more = (answer(scene, eye=eye, target=target, k=k) for k in (low, high))
    assert_grows(less, more, HAIR + slack(scene, high - low, eye))


@common
@given(scenes(), eyes, eyes, target_heights, refractions)
def test_clearance_grows_with_eye_height(scene, one, other, target, k):
    low, high = sorted((one, other))
    less, more = (answer(scene, eye=eye, target=target, k=k) for eye in (low, high))
    assert_grows(less, more, HAIR)


@common
@given(scenes(), eyes, target_heights, target_heights, refractions)
def test_clearance_grows_with_target_height(scene, eye, one, other, k):
    """By as much as the target, but for the curve."""
    low, high = sorted((one, other))
    less, more = (answer(scene, eye=eye, target=target, k=k) for target in (low, high))
    assert_grows(less, more, HAIR)
    known = (less.state <= 1) & (more.state <= 1)
    grown = (more.clearance - less.clearance)[known]
    np.testing.assert_allclose(grown, high - low, rtol=0, atol=HAIR)


def assert_alike(one, other, tolerance=HAIR, where=True):
    """Same answer, clearances near zero left out."""
    unsure = np.fmin(np.abs(one.clearance), np.abs(other.clearance)) < tolerance
    differs = (one.state != other.state) & ~unsure & where
    assert not differs.any()
    known = (one.state <= 1) & (other.state <= 1) & ~unsure & where
    np.testing.assert_allclose(
        one.clearance[known], other.clearance[known], rtol=2.0 * ROUNDING, atol=tolerance
    )


@common
@given(scenes(), eyes, target_heights)
def test_other_order_of_rows_and_columns(scene, eye, target):
    """The same ground on a mirrored or turned grid."""
    plain = answer(scene, eye=eye, target=target)
    mirrored = answer(scene.upside_down(), eye=eye, target=target)
    swapped = answer(scene.transposed(), eye=eye, target=target)
    turned = answer(scene.transposed().upside_down(), eye=eye, target=target)
    back = (
        lambda a: a[::-1],
        lambda a: a.T,
        lambda a: a[::-1].T,
    )
    for other, undo in zip((mirrored, swapped, turned), back, strict=True):
        assert_alike(plain, Answer(undo(other.state), undo(other.clearance)))


@common
@given(scenes(bent=False, square=True), eyes, target_heights)
def test_turned_and_mirrored_ground(scene, eye, target):
    """On a sphere and square cells, turning the ground itself turns the answer."""
    plain = answer(scene, eye=eye, target=target)
    last, m = len(scene.z) - 1, scene.post_map
    for turns in (1, 2, 3):
        place = (m.row0, m.col0)
        for _ in range(turns):
            place = (last - place[1], place[0])
        z = np.ascontiguousarray(np.rot90(scene.z, turns))
        other = answer(Scene(z, affine_map(*place, sphere=True)), eye=eye, target=target)
        assert_alike(
            plain, Answer(np.rot90(other.state, -turns), np.rot90(other.clearance, -turns))
        )
    mirrored = Scene(
        np.ascontiguousarray(scene.z[:, ::-1]), affine_map(m.row0, last - m.col0, sphere=True)
    )
    other = answer(mirrored, eye=eye, target=target)
    assert_alike(plain, Answer(other.state[:, ::-1], other.clearance[:, ::-1]))


@settings(common, max_examples=60)
@given(scenes(bent=False, on_post=True), eyes, target_heights, refractions, st.data())
def test_ends_see_each_other(scene, eye, target, k, data):
    """With the heights swapped too. Both on posts, one radius: the drop has the same form."""
    here = (int(scene.post_map.row0), int(scene.post_map.col0))
    posts = [tuple(map(int, at)) for at in np.argwhere(~np.isnan(scene.z)) if tuple(at) != here]
    there = data.draw(st.sampled_from(posts))
    jacobian = scene.post_map.jacobian
    back = Scene(scene.z, affine_map(*map(float, there), jacobian=jacobian, sphere=True))
    go = answer(scene, eye=eye, target=target, k=k)
    come = answer(back, eye=target, target=eye, k=k)
    clear = (go.clearance[there], come.clearance[here])
    if min(np.abs(np.nan_to_num(clear, nan=np.inf))) > HAIR + slack(scene):
        assert go.state[there] == come.state[here]


@common
@given(scenes(), eyes, target_heights, st.data())
def test_a_window_answers_like_the_whole(scene, eye, target, data):
    """Every sight line of an affine grid stays in the window, one of a bent grid a bit inside."""
    slices = []
    for at, size in zip((scene.post_map.row0, scene.post_map.col0), scene.z.shape, strict=True):
        first = data.draw(st.integers(0, math.floor(at)))
        stop = data.draw(st.integers(min(math.floor(at) + 2, size), size))
        slices.append(slice(first, stop))
    whole = answer(scene, eye=eye, target=target)
    part = answer(scene.window(*slices), eye=eye, target=target)
    inside = np.ones(part.state.shape, bool)
    if scene.post_map.degree > 1:
        inside[:] = False
        m = scene.post_map
        axes = zip(slices, (m.row0, m.col0), strict=True)
        if all(cut.start + 1 <= at <= cut.stop - 2 for cut, at in axes):
            inside[1:-1, 1:-1] = True
    cut = Answer(whole.state[tuple(slices)], whole.clearance[tuple(slices)])
    assert_alike(cut, part, tolerance=1e-6, where=inside)


@settings(common, max_examples=60)
@given(scenes(), eyes, target_heights, st.booleans())
def test_threads_give_the_same_bits(scene, eye, target, clearance):
    layers = [
        compute(
            scene.z,
            scene.post_map,
            eye_height=eye,
            target_height=target,
            clearance=clearance,
            needed_height=clearance,
            threads=threads,
        )
        for threads in (1, 2, 3)
    ]
    for other in layers[1:]:
        assert other.visible.tobytes() == layers[0].visible.tobytes()
        if clearance:
            assert other.clearance.tobytes() == layers[0].clearance.tobytes()
            assert other.needed_height.tobytes() == layers[0].needed_height.tobytes()


def test_threads_give_the_same_bits_on_a_larger_grid():
    """Where threads really run at once."""
    z = with_voids(fractal(400, 3), 0.001, keep=(150.5, 260.0))
    layers = [
        compute(z, bent_map(150.5, 260.0, bend=1e-6), eye_height=5.0, clearance=True, threads=n)
        for n in (1, 2, 3)
    ]
    for other in layers[1:]:
        assert other.visible.tobytes() == layers[0].visible.tobytes()
        assert other.clearance.tobytes() == layers[0].clearance.tobytes()


# --- a surface over the ground --------------------------------------------------------------------


def grown_over(scene, seed, height):
    """A surface over the ground, bare within a cell and a half of the observer."""
    place = (scene.post_map.row0, scene.post_map.col0)
    r, c = np.indices(scene.z.shape)
    far = (np.abs(r - place[0]) > 1.5) | (np.abs(c - place[1]) > 1.5)
    growth = np.random.default_rng(seed).random(scene.z.shape) * height * far
    return (scene.z + growth).astype(np.float32)


@common
@given(scenes(), eyes, target_heights, st.integers(0, 999))
def test_a_higher_surface_never_shows_more(scene, eye, target, seed):
    low, high = (grown_over(scene, seed, height) for height in (3.0, 12.0))
    more, less = (
        answer(scene, eye=eye, target=target, surface=surface) for surface in (low, high)
    )
    known = (less.state <= 1) & (more.state <= 1)
    assert np.all(more.clearance[known] >= less.clearance[known] - HAIR)
    assert not ((less.state == 1) & (more.state == 0) & (less.clearance > HAIR)).any()


@common
@given(scenes(), eyes, target_heights, st.integers(0, 999))
def test_a_surface_turns_with_the_grid(scene, eye, target, seed):
    surface = grown_over(scene, seed, 8.0)
    plain = answer(scene, eye=eye, target=target, surface=surface)
    swapped = answer(
        scene.transposed(), eye=eye, target=target, surface=np.ascontiguousarray(surface.T)
    )
    assert_alike(plain, Answer(swapped.state.T, swapped.clearance.T))


@common
@given(scenes(bent=False), eyes, st.integers(0, 999))
def test_needed_height_is_the_target_that_is_just_seen(scene, eye, seed):
    """Also over a surface: a target a hair taller than needed is seen, a hair lower is not."""
    surface = grown_over(scene, seed, 8.0)
    shared = {"eye_height": eye, "surface": surface, "threads": 1}
    asked = compute(scene.z, scene.post_map, needed_height=True, **shared)
    need = np.nan_to_num(asked.needed_height, nan=0.0)
    hidden = (asked.visible == 0) & (need > 1.0)
    for at in map(tuple, np.argwhere(hidden)[:3]):
        height = float(need[at])
        for change in (-0.05, 0.05):
            got = compute(scene.z, scene.post_map, target_height=height + change, **shared)
            assert (got.visible[at] == 0) == (change < 0)
