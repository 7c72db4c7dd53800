"""The page: right colours in right places, nothing cut off, same bytes each time."""

import struct
import zlib

import numpy as np
import pytest
from affine import Affine

from viewshed.constants import CAUTIONS
from viewshed.geodesy import crs_from_user, frame_of
from viewshed.grid import Grid, PostMap
from viewshed.io import _canvas, _ground, _page, _round, picture
from viewshed.io._steps import step_colours
from viewshed.places import Sector
from viewshed.postmap import fit_post_map

WORDS = picture.Words(
    question="from 20 m above ground at the observer to the ground everywhere, k = 0.13",
    refraction="k = 0.13 (K = 1.149)",
    dem_name="hills.tif",
    crs_name="invented, metres",
    summary=[("Visible", "12.3 km²"), ("Hidden", "45.6 km²")],
    made_with="viewshed 0",
)


def flat_map(row0, col0, jacobian):
    power = np.zeros((2, 2, 2))
    power[0, 1, 0] = power[1, 0, 1] = 1.0
    return PostMap(
        row0, col0, np.array(jacobian, float), 1.0, *power, 0.0, 0.0, 9.0, 47.0, 6.37e6, 6.39e6
    )


def scene(
    rows=120,
    cols=120,
    *,
    visible=None,
    elevation=None,
    jacobian=None,
    name="observer",
    range_m=5000.0,
    sector=None,
    **changes,
):
    """Flat ground in 100 m cells, observer in the middle, everything hidden unless said."""
    jacobian = [[100.0, 0.0], [0.0, -100.0]] if jacobian is None else jacobian
    (a, b), (d, e) = jacobian
    grid = Grid((rows, cols), Affine(a, b, 500_000.0, d, e, 4_600_000.0), "none needed")
    row0, col0 = (rows - 1) / 2, (cols - 1) / 2
    x, y = (float(v) for v in grid.xy(row0, col0))
    facts = {
        "elevation": np.zeros((rows, cols), np.float32) if elevation is None else elevation,
        "visible": np.zeros((rows, cols), np.uint8) if visible is None else visible,
        "grid": grid,
        "post_map": flat_map(row0, col0, jacobian),
        **changes,
    }
    facts.setdefault("observers", [picture.Marker(x, y, name, range_m, sector)])
    return picture.Scene(**facts)


def painted(drawn, view):
    """Colours from 0 to 1, and what was found."""
    rgb, found = _ground.paint(drawn, view)
    return rgb / 255, found


def colours_at(drawn, places, size=(400, 400)):
    """Colours of a scene at local places east, north [m]."""
    view = _ground.view_of(drawn, *size)
    rgb, found = painted(drawn, view)
    pixels = [view.place(east, north) for east, north in places]
    return np.array([rgb[int(y), int(x)] for x, y in pixels]), found, view


def is_plum(rgb):
    return np.abs(rgb / rgb.max() - np.array(_ground.PLUM) / max(_ground.PLUM)).max() < 0.05


def grey(rgb):
    return float(np.dot(rgb, [0.2126, 0.7152, 0.0722]))


def test_the_classes_tell_apart_in_colour_and_in_grey():
    visible = np.zeros((120, 120), np.uint8)
    visible[:60, 60:] = 1  # north-east
    visible[60:, :60] = 2  # south-west
    visible[60:, 60:] = 255  # south-east, void
    elevation = np.where(visible == 255, np.nan, 0).astype(np.float32)
    view = _ground.view_of(scene(), 400, 400)
    rgb, found = painted(scene(visible=visible, elevation=elevation), view)
    seen, hidden = rgb[100, 300], rgb[100, 100]
    unsure, void = rgb[250:350, 60:150].reshape(-1, 3), rgb[250:350, 250:340].reshape(-1, 3)
    assert is_plum(seen)
    assert np.ptp(hidden) < 0.05
    assert grey(hidden) - grey(seen) > 0.4
    assert np.ptp([grey(c) for c in unsure]) > 0.3  # stripes
    assert np.mean([c.min() for c in void]) > 0.9  # nearly white
    assert found >= {"unresolved", "void"}
    assert "mixed" not in found


@pytest.mark.parametrize(
    "jacobian",
    [
        [[100.0, 0.0], [0.0, -100.0]],
        [[100.0, 0.0], [0.0, 100.0]],  # south up
        [[-80.0, 60.0], [60.0, 80.0]],  # turned and mirrored
        [[50.0, 0.0], [0.0, -140.0]],  # cells longer than wide
    ],
)
def test_things_are_drawn_where_they_are(jacobian):
    base = scene(jacobian=jacobian)
    east, north = base.post_map.en(*np.mgrid[:120, :120])
    near = np.hypot(east - 1500, north - 700) < 500
    drawn = scene(jacobian=jacobian, visible=near.astype(np.uint8))
    colours, _, view = colours_at(drawn, [(1500, 700), (-1500, 700), (1500, -700), (1500, 1500)])
    assert [bool(is_plum(c)) for c in colours] == [True, False, False, False]
    assert view.place(0.0, 100.0)[1] < view.place(0.0, 0.0)[1]


@pytest.mark.parametrize("n", [300, 1500, 4000])
@pytest.mark.parametrize("across", [False, True])
def test_a_strip_one_cell_wide_stays_on_the_page(n, across):
    cell = 12_000.0 / n
    visible = np.zeros((n, n), np.uint8)
    line = n // 3
    visible[(slice(None), line) if across else line] = 1
    drawn = scene(n, n, visible=visible, jacobian=[[cell, 0.0], [0.0, -cell]])
    view = _ground.view_of(drawn, 500, 500)
    rgb, found = painted(drawn, view)
    purple = rgb[..., 2] - rgb[..., 1] > 0.08
    along = purple.any(axis=1 if across else 0)
    middle = slice(len(along) // 4, 3 * len(along) // 4)
    assert along[middle].all()
    assert ("mixed" in found) == (n > 700)


def test_scattered_single_cells_do_not_look_solid():
    visible = np.zeros((4000, 4000), np.uint8)
    visible[::8, ::8] = 1
    drawn = scene(4000, 4000, visible=visible, jacobian=[[3.0, 0.0], [0.0, -3.0]])
    rgb, _ = painted(drawn, _ground.view_of(drawn, 500, 500))
    bare, _ = painted(scene(), _ground.view_of(scene(), 500, 500))
    part = grey(bare[200:300, 200:300].mean((0, 1))) - grey(rgb[200:300, 200:300].mean((0, 1)))
    assert 0.01 < part < 0.25


def test_shares_and_heights_of_blocks(monkeypatch):
    monkeypatch.setattr(_ground, "STRIP_CELLS", 50)
    rng = np.random.default_rng(5)
    visible = rng.choice(np.array([0, 1, 2, 255], np.uint8), (23, 31))
    elevation = rng.random((23, 31), dtype=np.float32)
    elevation[(visible == 255) & (rng.random((23, 31)) < 0.5)] = np.nan
    drawn = scene(23, 31, visible=visible, elevation=elevation)
    for by, bx in [(1, 1), (4, 3), (1, 5), (7, 1), (40, 40)]:
        whole = (0, 0, *visible.shape)
        shares, heights = _ground.blocks(_ground.Kinds(), drawn, whole, (by, bx))
        for i in range(shares.shape[0]):
            for j in range(shares.shape[1]):
                cut = np.s_[i * by : (i + 1) * by, j * bx : (j + 1) * bx]
                state, ground = visible[cut], elevation[cut]
                void = np.isnan(ground)
                counts = [(state == v).sum() for v in (1, 2, 0)]
                counts += [void.sum(), ((state == 255) & ~void).sum()]
                expected = [int(np.ceil(255 * c / state.size)) for c in counts]
                assert shares[i, j].tolist() == expected
                mean = np.nan if void.all() else ground[~void].mean()
                np.testing.assert_allclose(heights[i, j], mean, rtol=1e-5)


def test_light_comes_from_the_north_west_whatever_the_grid():
    for jacobian in ([[100.0, 0.0], [0.0, -100.0]], [[100.0, 0.0], [0.0, 100.0]]):
        east, north = scene(jacobian=jacobian).post_map.en(*np.mgrid[:120, :120])
        cone = (3000 - np.hypot(east, north)).astype(np.float32)
        drawn = scene(jacobian=jacobian, elevation=cone)
        colours, _, _ = colours_at(drawn, [(-1500, 1500), (1500, -1500)])
        assert grey(colours[0]) > grey(colours[1]) + 0.1


def test_curved_grid_places_are_found_again():
    post_map = flat_map(60, 50, [[100.0, 3.0], [-2.0, -100.0]])
    bent = np.zeros((3, 3, 2))
    bent[1, 0, 0] = bent[0, 1, 1] = 1.0
    bent[2, 0, 1], bent[1, 1, 0] = 4e-4, -3e-4
    fields = {**vars(post_map), "cp": bent[..., 0], "cq": bent[..., 1]}
    drawn = scene(post_map=PostMap(**fields))
    rows, cols = np.mgrid[0:120:7, 0:120:7].astype(float)
    found = _ground.index_of(drawn, *drawn.post_map.en(rows, cols))
    np.testing.assert_allclose(found[0], rows, atol=1e-3)
    np.testing.assert_allclose(found[1], cols, atol=1e-3)


def text_chunks(data):
    """Names of the chunks of a PNG file, whose checksums must hold."""
    names, at = [], 8
    while at < len(data):
        (size,) = struct.unpack(">I", data[at : at + 4])
        kind = data[at + 4 : at + 8]
        body = data[at + 8 : at + 8 + size]
        (check,) = struct.unpack(">I", data[at + 8 + size : at + 12 + size])
        assert zlib.crc32(kind + body) == check
        names.append(kind.decode())
        at += 12 + size
    return names


def test_same_input_same_bytes_and_no_date(tmp_path):
    rng = np.random.default_rng(1)
    drawn = scene(
        visible=rng.choice(np.array([0, 1, 2, 255], np.uint8), (120, 120)),
        elevation=rng.random((120, 120), dtype=np.float32),
        sector=Sector(350, 40),
    )
    paths = [tmp_path / "a.png", tmp_path / "b.png"]
    for path in paths:
        picture.draw_map(path, drawn, WORDS, dpi=80)
    first, second = (path.read_bytes() for path in paths)
    assert first == second
    assert set(text_chunks(first)) <= {"IHDR", "IDAT", "pHYs", "IEND"}


@pytest.fixture
def boxes(monkeypatch):
    """Boxes of all texts of the page that is drawn, in pixels from the top left; then its size."""
    kept = []
    write = _canvas.Canvas.text

    def and_look(canvas, x, y, text, *args, **style):
        box = write(canvas, x, y, text, *args, **style)
        kept.append((text, *box))
        return box

    compose = _page.Page.compose

    def and_measure(page, *args):
        compose(page, *args)
        kept.append((None, 0, 0, page.width, page.height))

    monkeypatch.setattr(_canvas.Canvas, "text", and_look)
    monkeypatch.setattr(_page.Page, "compose", and_measure)
    return kept


LONG = picture.Words(
    question="from 50 m above ground at eight turbines of the Upper Valley scheme, option B, "
    "to 1.7 m above ground everywhere, looking over bearings 350 to 10, k = 0.13 " * 2,
    refraction="k = 0.13 (K = 1.149)",
    dem_name="a_long_name_" * 20 + ".tif",
    crs_name="NAD83(2011) / Somewhere South (ftUS) + NAVD88 height (ftUS), US survey feet " * 3,
    summary=[("Farthest visible", "19.86 km at bearing 213.4 degrees, at 498120.0, 4633030.0")]
    + [(f"Row {i}", "value") for i in range(9)],
    cautions=CAUTIONS + CAUTIONS,
)


@pytest.mark.parametrize(
    ("changes", "words"),
    [
        ({}, WORDS),
        ({"sector": Sector(350, 40)}, WORDS),
        ({"sector": Sector(80, 81)}, WORDS),
        ({"sector": Sector(0, 360)}, WORDS),
        ({"sector": Sector(10, 200)}, LONG),
        ({"rows": 1}, WORDS),
        ({"cols": 1}, WORDS),
        ({"rows": 1, "cols": 1}, WORDS),
        ({"range_m": 400_000.0}, WORDS),
        ({"range_m": 30.0}, WORDS),
        ({}, LONG),
        ({"jacobian": [[60.0, 80.0], [80.0, -60.0]]}, LONG),
    ],
)
def test_no_text_is_cut_off_or_written_over_another(tmp_path, boxes, changes, words):
    drawn = scene(name="A lookout with quite a long name", **changes)
    picture.draw_map(tmp_path / "page.png", drawn, words, dpi=100)
    check_texts(boxes)


def check_texts(boxes):
    """Every text is on the page and clear of every other."""
    *texts, (_, _, _, width, height) = boxes
    assert len(texts) > 12
    for text, left, top, right, bottom in texts:
        assert left >= 0.02 * width, text
        assert right <= 0.98 * width, text
        assert top >= 0.01 * height, text
        assert bottom <= 0.99 * height, text
    for i, (text, left, top, right, bottom) in enumerate(texts):
        for other, left2, top2, right2, bottom2 in texts[:i]:
            apart = (
                right <= left2 + 1 or right2 <= left + 1 or bottom <= top2 + 2 or bottom2 <= top + 2
            )
            assert apart, (text, other)


def test_odd_characters_are_written_as_they_are_or_as_boxes(tmp_path, boxes):
    drawn = scene(name="Übersicht $x^2$ \t東")
    picture.draw_map(tmp_path / "page.png", drawn, WORDS, dpi=80)
    assert "Übersicht $x^2$  □" in [text for text, *_ in boxes]


def test_a_folder_that_is_not_there_is_an_os_error(tmp_path):
    with pytest.raises(OSError, match="nowhere"):
        picture.draw_map(tmp_path / "nowhere" / "map.png", scene(), WORDS, dpi=50)


@pytest.mark.parametrize(
    ("range_m", "rings"),
    [
        (30_000.0, [10_000.0, 20_000.0, 30_000.0]),
        (20_000.0, [5_000.0, 10_000.0, 15_000.0, 20_000.0]),
        (1_200.0, [500.0, 1_000.0, 1_200.0]),
        (5.0, [2.0, 4.0, 5.0]),
        (10_500.0, [5_000.0, 10_500.0]),
    ],
)
def test_rings_are_round_and_the_range_is_the_last(range_m, rings):
    assert _round.ring_distances(range_m) == rings


@pytest.mark.parametrize(("room", "length"), [(7_300.0, 5_000.0), (10.0, 10.0), (0.19, 0.1)])
def test_scale_bar_has_a_round_length(room, length):
    assert _round.round_down(room) == length


# --- several observers --------------------------------------------------------------------------


def real_scene(places, *, count=None, crs="EPSG:32633", cell=100.0, **changes):
    """Flat ground on a real grid of 120 by 120 cells, observers at rows and columns of it."""
    wkt = crs_from_user(crs).to_wkt()
    corner = (500_000.0, 4_600_000.0) if cell > 1 else (9.0, 47.0)
    grid = Grid((120, 120), Affine(cell, 0, corner[0], 0, -cell, corner[1]), wkt)
    markers = []
    for i, (row, col, *more) in enumerate(places):
        x, y = (float(v) for v in grid.xy(row, col))
        options = {"name": f"Site {i + 1}", "range_m": 3000.0} | (more[0] if more else {})
        markers.append(picture.Marker(x, y, **options))
    facts = {
        "elevation": np.zeros((120, 120), np.float32),
        "visible": np.zeros((120, 120), np.uint8),
        "grid": grid,
        "post_map": fit_post_map(grid, 59.5, 59.5, range_m=30_000.0),
        "observers": markers,
        "count": count,
        **changes,
    }
    return picture.Scene(**facts)


@pytest.mark.parametrize(("crs", "cell"), [("EPSG:32633", 100.0), ("EPSG:4326", 0.001)])
def test_each_range_is_a_true_circle_about_its_own_observer(crs, cell):
    sector = Sector(30, 120)
    drawn = real_scene([(20, 90), (100, 10, {"sector": sector})], crs=crs, cell=cell)
    frame, middle = frame_of(drawn.grid.crs_wkt), drawn.post_map
    for marker, rim in zip(drawn.observers, drawn.reach.outlines, strict=True):
        arc = rim if marker.sector is None else rim[:, 1:-1]
        bearing = np.arctan2(arc[0], arc[1])
        ends = frame.direct(middle.lon, middle.lat, bearing, np.hypot(*arc))
        start = frame.lonlat(marker.x, marker.y)
        distance, back = frame.inverse(*start, *ends)
        np.testing.assert_allclose(distance, 3000.0, atol=1e-3)
        if marker.sector is not None:
            np.testing.assert_allclose(np.degrees(back[[0, -1]]), [30, 120], atol=1e-3)
            np.testing.assert_array_equal(rim[:, 0], drawn.reach.places[1])
    near = drawn.post_map.en(20.0, 90.0)
    np.testing.assert_allclose(drawn.reach.places[0], near, atol=1.0)


def test_the_map_holds_all_ranges_within_the_grid():
    middle = _ground.view_of(real_scene([(60, 60)]), 400, 400)
    assert middle.width * middle.pixel == pytest.approx(6000, rel=0.1)
    apart = _ground.view_of(real_scene([(10, 60), (110, 60)]), 400, 400)
    assert apart.height * apart.pixel == pytest.approx(12_000, rel=0.1)
    assert apart.width * apart.pixel == pytest.approx(6000, rel=0.2)


def test_counts_are_drawn_in_the_colours_of_their_steps():
    count = np.zeros((120, 120), np.uint16)
    count[:, 60:] = np.repeat([1, 2, 3, 4, 6, 12], 20)[:, None]
    visible = (count > 0).astype(np.uint8)
    drawn = real_scene([(60, 60, {"range_m": 20_000.0})], count=count, visible=visible)
    assert drawn.steps == [(1, 1), (2, 2), (3, 3), (4, 5), (6, 8), (9, 12)]
    places = [(3000, 5000 - 2000 * i) for i in range(6)]
    colours, _, _ = colours_at(drawn, [*places, (-3000, 0)])
    np.testing.assert_allclose(colours[:6], step_colours(6), atol=0.02)
    greys = [grey(c) for c in colours]
    assert (np.diff(greys[:6]) < -0.05).all()
    assert greys[6] > greys[0] + 0.15  # hidden ground is lighter than any step


def test_steps_stay_apart_on_slopes():
    light = np.array([[0.3, 1.0]], np.float32)
    for steps in range(2, 7):
        ramp, found = _ground.ramp_of(steps), []
        for i in range(steps):
            shares = np.zeros((1, 2, steps + 4), np.uint8)
            shares[..., i] = 255
            rgb = _ground.colour(shares, light, ramp)
            found.append([grey(c) for c in rgb[0] / 255])
        dark, bright = np.array(found).T
        assert (dark[:-1] > bright[1:]).all()  # each step in shade over the next in light


def test_shares_of_steps_within_a_pixel_are_mixed():
    shares = np.array([[[128, 128, 0, 0, 0, 0]]], np.uint8)
    rgb = _ground.colour(shares, np.full((1, 1), 0.8, np.float32), _ground.ramp_of(2))
    np.testing.assert_allclose(rgb[0, 0] / 255, step_colours(2).mean(axis=0), atol=0.02)


def test_shares_of_blocks_with_a_count():
    rng = np.random.default_rng(6)
    count = rng.integers(0, 9, (23, 31)).astype(np.uint16)
    visible = np.where(count > 0, 1, rng.choice([0, 2, 255], count.shape)).astype(np.uint8)
    count[visible == 255] = 65535
    steps = [(1, 1), (2, 3), (4, 5), (6, 8)]
    drawn = scene(23, 31, visible=visible, count=count)
    shares, _ = _ground.blocks(_ground.Kinds(steps), drawn, (0, 0, 23, 31), (23, 31))
    counts = [((count >= a) & (count <= b)).sum() for a, b in steps]
    counts += [(visible == 2).sum(), (visible == 0).sum(), 0, (visible == 255).sum()]
    assert shares[0, 0].tolist() == [int(np.ceil(255 * c / count.size)) for c in counts]


ROW = [(60, 40 + 4 * i) for i in range(8)]


@pytest.mark.parametrize(
    "places",
    [
        [(30, 30), (90, 90)],
        [(30, 30, {"range_m": 2000.0}), (80, 90, {"sector": Sector(200, 20)}), (90, 20)],
        ROW,
        [(60, 60, {"name": "One"}), (60, 60, {"name": "Other"}), (60, 60, {"name": "Third"})],
        [(3 + 7 * (i // 10) * 2, 4 + 11 * (i % 10)) for i in range(60)],
    ],
)
@pytest.mark.parametrize("words", [WORDS, LONG])
def test_names_of_several_observers_cover_nothing(tmp_path, boxes, places, words):
    count = np.tile(np.arange(120, dtype=np.uint16), (120, 1))
    drawn = real_scene(places, count=count, visible=(count > 0).astype(np.uint8))
    picture.draw_map(tmp_path / "page.png", drawn, words, dpi=100)
    check_texts(boxes)
    texts = {text for text, *_ in boxes}
    if words is WORDS:
        assert {marker.name for marker in drawn.observers} <= texts
        assert f"{len(places)} observers" in texts
    assert {"seen by so many observers", "1\u201320", "101\u2013119"} <= texts


def test_ranges_that_differ_are_told(tmp_path, boxes):
    places = [(30, 30, {"range_m": 2000.0}), (80, 80, {"range_m": 4000.0})]
    picture.draw_map(tmp_path / "page.png", real_scene(places), WORDS, dpi=100)
    assert {"2 km", "4 km", "range, 2 km to 4 km"} <= {text for text, *_ in boxes}


def test_observers_that_have_no_name_show_their_number(tmp_path, boxes):
    places = [(30, 30, {"name": "observer 1"}), (80, 80, {"name": "observer 2nd"})]
    picture.draw_map(tmp_path / "page.png", real_scene(places), WORDS, dpi=100)
    texts = {text for text, *_ in boxes}
    assert {"1", "observer 2nd"} <= texts
    assert "observer 1" not in texts


@pytest.mark.parametrize(("number", "line"), [(300, 1), (1500, 0)])
def test_of_many_observers_there_are_marks_alone(tmp_path, boxes, number, line):
    rng = np.random.default_rng(2)
    places = [(float(r), float(c)) for r, c in rng.uniform(5, 115, (number, 2))]
    picture.draw_map(tmp_path / "page.png", real_scene(places), WORDS, dpi=100)
    texts = [text for text, *_ in boxes]
    assert f"{number} observers" in texts
    assert texts.count("edge of all ranges, 3 km each") == line
    assert not any(text and text.startswith("Site") for text in texts)


def test_names_without_room_are_left_out_and_the_key_says_so(tmp_path, boxes):
    places = [(60 + 0.1 * i, 60, {"name": f"A rather long name {i}"}) for i in range(90)]
    picture.draw_map(tmp_path / "page.png", real_scene(places), WORDS, dpi=100)
    check_texts(boxes)
    texts = [text for text, *_ in boxes]
    assert 5 < sum(text is not None and text.startswith("A rather") for text in texts) < 90
    assert "90 observers, not all named" in texts


def test_the_first_row_of_the_table_stands_out(tmp_path, boxes):
    picture.draw_map(tmp_path / "page.png", scene(), WORDS, dpi=100)
    height = {text: bottom - top for text, _, top, _, bottom in boxes}
    assert height["12.3 km²"] > 1.15 * height["45.6 km²"]


def test_several_observers_give_the_same_bytes(tmp_path):
    drawn = [real_scene(ROW, count=np.ones((120, 120), np.uint16)) for _ in range(2)]
    paths = [tmp_path / "a.png", tmp_path / "b.png"]
    for path, one in zip(paths, drawn, strict=True):
        picture.draw_map(path, one, WORDS, dpi=60)
    assert paths[0].read_bytes() == paths[1].read_bytes()


# --- how it is worked out -----------------------------------------------------------------------


def rough_scene(**changes):
    rng = np.random.default_rng(8)
    count = rng.integers(0, 9, (120, 120)).astype(np.uint16)
    visible = np.where(count > 0, 1, rng.choice([0, 2, 255], count.shape)).astype(np.uint8)
    elevation = (300 * rng.random((120, 120))).astype(np.float32)
    elevation[visible == 255] = np.where(rng.random((visible == 255).sum()) < 0.5, np.nan, 5)
    facts = {"count": count, "visible": visible, "elevation": elevation, **changes}
    return real_scene([(60, 60), (40, 70)], **facts)


def page_of(drawn, folder):
    picture.draw_map(folder / "page.png", drawn, WORDS, dpi=80)
    return (folder / "page.png").read_bytes()


def test_neither_threads_nor_strips_change_the_page(tmp_path, monkeypatch):
    expected = page_of(rough_scene(), tmp_path)
    monkeypatch.setattr(_ground, "STRIP_CELLS", 700)
    for threads in (1, 3):
        monkeypatch.setattr(_ground, "usable_threads", lambda _, n=threads: n)
        monkeypatch.setattr(_ground, "BAND", 16 * threads)
        assert page_of(rough_scene(), tmp_path) == expected


def test_arrays_may_lie_anywhere_and_stay_as_they_are(tmp_path):
    expected = page_of(rough_scene(), tmp_path)
    plain, moved = rough_scene(), {}
    for name in ("count", "visible", "elevation"):
        array = getattr(plain, name)
        wide = np.zeros((130, 140), array.dtype)
        wide[3:123, 7:127] = array
        moved[name] = wide[3:123, 7:127]
        moved[name].flags.writeable = False
    assert page_of(rough_scene(**moved), tmp_path) == expected


def test_the_caller_can_let_go_of_what_was_read_strip_by_strip(tmp_path, monkeypatch):
    monkeypatch.setattr(_ground, "STRIP_CELLS", 1200)
    calls = []
    page_of(rough_scene(rest=lambda: calls.append(1)), tmp_path)
    assert len(calls) > 1.25 * 120 * 120 / 1200  # for the counts, then for the blocks


def test_steps_come_from_the_counts_of_visible_cells_alone(monkeypatch):
    monkeypatch.setattr(_ground, "STRIP_CELLS", 500)
    drawn = rough_scene()
    drawn.count[drawn.visible != 1] = 65535
    expected = np.bincount(drawn.count[drawn.visible == 1], minlength=1 << 16)
    np.testing.assert_array_equal(_ground.counted(drawn), expected)
    assert drawn.steps[-1][1] == 8


def plain_light(height, jacobian):
    """Light of each block by the formula, block by block."""
    slopes = np.gradient(height.astype(float))
    inverse = np.linalg.inv(jacobian)
    east = slopes[1] * inverse[0, 0] + slopes[0] * inverse[1, 0]
    north = slopes[1] * inverse[0, 1] + slopes[0] * inverse[1, 1]
    known = np.isfinite(east + north)
    steep = np.percentile(np.hypot(east, north)[known], 92)
    factor = np.clip(0.75 / steep, 0.2, 8.0)
    high = np.radians(_ground.LIGHT_HEIGHT)
    total = np.zeros(height.shape)
    for azimuth, weight in _ground.LIGHTS:
        toward = np.sin(np.radians(azimuth)), np.cos(np.radians(azimuth))
        rise = factor * (east * toward[0] + north * toward[1])
        norm = np.sqrt(1 + factor**2 * (east**2 + north**2))
        total += weight * np.maximum((np.sin(high) - np.cos(high) * rise) / norm, 0)
    total[~known] = np.sin(high)
    return np.minimum(total * _ground.LIGHT_ON_FLAT / np.sin(high), 1)


def test_light_is_that_of_the_formula():
    rng = np.random.default_rng(9)
    height = (200 * rng.random((40, 50))).astype(np.float32)
    height[rng.random(height.shape) < 0.05] = np.nan
    jacobian = np.array([[90.0, 20.0], [15.0, -80.0]])
    light = _ground.light_on(height, jacobian)
    np.testing.assert_allclose(light, plain_light(height, jacobian), atol=1e-5)


@pytest.mark.parametrize("shape", [(1, 1), (1, 9), (9, 1)])
def test_a_single_row_or_column_has_light(shape):
    light = _ground.light_on(np.zeros(shape, np.float32), np.diag([50.0, -50.0]))
    np.testing.assert_allclose(light, _ground.LIGHT_ON_FLAT, atol=1e-6)
