"""The pixels of a page: lines, discs, boxes and letters in their places, smoothed, in layers."""

from pathlib import Path

import matplotlib
import numpy as np
import pytest

from viewshed.io import _canvas
from viewshed.io._canvas import Canvas, Letters

BLACK = "#000000"


def ink(canvas):
    """How much of each pixel is black."""
    canvas.finish()
    return 1.0 - canvas.pixels[..., 0] / 255.0


def plain_line(starts, ends, radius, shape):
    """Share of each pixel within a radius of a line, pixel by pixel and segment by segment."""
    rows, cols = np.mgrid[: shape[0], : shape[1]] + 0.5
    found = np.zeros(shape)
    for (x1, y1), (x2, y2) in zip(starts, ends, strict=True):
        square = (x2 - x1) ** 2 + (y2 - y1) ** 2
        along = np.clip(((cols - x1) * (x2 - x1) + (rows - y1) * (y2 - y1)) / square, 0, 1)
        apart = np.hypot(cols - x1 - along * (x2 - x1), rows - y1 - along * (y2 - y1))
        found = np.maximum(found, np.clip(radius + 0.5 - apart, 0, 1))
    return found


def test_a_line_is_as_wide_as_asked_and_joined_without_seams():
    rng = np.random.default_rng(1)
    points = rng.uniform(-20, 140, (12, 2))
    for width in (1.0, 1.7, 5.0):
        canvas = Canvas(120, 90)
        canvas.line(*points.T, width=width, color=BLACK)
        expected = plain_line(points[:-1], points[1:], width / 2, (90, 120))
        np.testing.assert_allclose(ink(canvas), expected, atol=0.005)


def test_a_line_lets_through_what_is_under_it_and_stays_in_its_box():
    canvas = Canvas(60, 40)
    canvas.line([0, 60], [5, 35], width=6, color=BLACK, alpha=0.5, clip=(10, 0, 30, 40))
    found = ink(canvas)
    assert found.max() == pytest.approx(0.5, abs=0.005)
    columns = np.flatnonzero(found.any(axis=0))
    assert (columns[0], columns[-1]) == (10, 29)


def test_upright_and_level_lines_lie_on_whole_pixels():
    canvas = Canvas(30, 30)
    canvas.line([3.4, 20.2], [10.3, 10.3], width=1.9, color=BLACK)
    canvas.line([25.0, 25.0], [4.0, 9.0], width=0.4, color=BLACK)
    found = ink(canvas)
    assert set(np.unique(found)) == {0.0, 1.0}
    assert found[9:11, 3:20].all()
    assert found[4:9, 24].all()
    assert found.sum() == 2 * 17 + 5


def test_dashes_are_as_long_as_asked():
    canvas = Canvas(400, 20)
    canvas.line([0, 200, 400], [10, 10.01, 10], width=2, color=BLACK, dashes=(12.0, 8.0))
    row = ink(canvas)[9:11].mean(axis=0)
    assert row.sum() == pytest.approx(240, rel=0.06)
    starts = np.flatnonzero(np.diff(row > 0.4) & (row[1:] > 0.4)) + 1
    np.testing.assert_allclose(np.diff(starts), 20, atol=1.1)


def test_a_dash_that_is_shorter_than_the_line_is_wide_is_a_dot():
    canvas = Canvas(100, 20)
    canvas.line([0, 50, 100], [10, 10.01, 10], width=6, color=BLACK, dashes=(2.0, 18.0))
    assert ink(canvas)[7:13].max(axis=0).sum() == pytest.approx(5 * 6, rel=0.15)


def test_discs_are_round_and_of_their_size():
    canvas = Canvas(80, 40)
    canvas.discs([20.0, 60.5], [20.0, 19.5], 15.0, BLACK)
    found = ink(canvas)
    assert found.sum() == pytest.approx(2 * np.pi * 7.5**2, rel=0.01)
    rows, cols = np.mgrid[:40, :40] + 0.5
    assert np.average(cols, weights=found[:, :40]) == pytest.approx(20.0, abs=0.01)
    assert np.average(rows, weights=found[:, :40]) == pytest.approx(20.0, abs=0.01)


def test_boxes_are_filled_and_edged_along_whole_pixels():
    canvas = Canvas(30, 20)
    canvas.box((5.2, 4.4, 20.7, 10.1), fill="#ff0000", edge=BLACK, width=1.2)
    canvas.finish()
    assert canvas.pixels[5, 6].tolist() == [255, 0, 0]
    black = (canvas.pixels == 0).all(axis=2)
    assert black[4:11, [5, 21]].all()
    assert black[[4, 10], 5:22].all()
    assert black.sum() == 2 * 17 + 2 * 5


def test_a_polygon_is_filled_as_far_as_it_reaches_into_pixels():
    canvas = Canvas(30, 30)
    canvas.polygon([(4.5, 3.5), (24.5, 3.5), (4.5, 23.5)], BLACK)
    assert ink(canvas).sum() == pytest.approx(200, rel=0.02)


def test_what_lies_higher_covers_what_was_drawn_later():
    canvas = Canvas(10, 10)
    canvas.add(2, canvas.box, (0, 0, 10, 10), fill="#ff0000")
    canvas.add(1, canvas.box, (0, 0, 10, 10), fill="#00ff00")
    canvas.add(2, canvas.box, (5, 0, 10, 10), fill="#0000ff")
    canvas.finish()
    assert canvas.pixels[0, 0].tolist() == [255, 0, 0]
    assert canvas.pixels[0, 9].tolist() == [0, 0, 255]


@pytest.mark.parametrize("align", ["left", "center", "right"])
@pytest.mark.parametrize("style", [{}, {"middle": True}, {"upright": True}])
def test_letters_are_where_they_are_said_to_be(align, style):
    canvas = Canvas(300, 300)
    left, top, right, bottom = canvas.text(
        150.3, 140.6, "Hügel 12", Letters(21.3, BLACK), align=align, **style
    )
    rows, cols = np.nonzero(ink(canvas) > 0.1)
    assert left <= cols.min() <= left + 2
    assert right - 3 <= cols.max() < right
    assert top <= rows.min() <= top + 2
    assert bottom - 3 <= rows.max() < bottom
    if style.get("middle"):
        assert (top + bottom) / 2 == pytest.approx(140.6, abs=1)
    if style.get("upright"):
        assert bottom - top > 2 * (right - left)
        assert (right, (top + bottom) / 2) == (150, pytest.approx(140.6, abs=1))
    elif align == "center":
        assert (left + right) / 2 == pytest.approx(150.3, abs=1.5)


def test_a_halo_is_left_free_round_letters():
    canvas = Canvas(80, 40)
    canvas.box((0, 0, 80, 40), fill="#00ff00")
    canvas.text(10, 30, "map", Letters(20.0, BLACK, bold=True, halo=3.0))
    canvas.finish()
    white = (canvas.pixels == 255).all(axis=2)
    black = canvas.pixels.max(axis=2) < 20
    assert black.sum() > 100
    assert white.sum() > 150
    rows, cols = np.nonzero(black)
    for shift in (-2, 2):
        assert (canvas.pixels[rows + shift, cols][:, [0, 2]] < 20).all(axis=1).mean() < 1.0
        greens = canvas.pixels[rows, cols + shift].astype(int)
        assert not (greens[:, 1] - greens[:, 0] > 100).any()


def test_what_leaves_the_canvas_is_cut_off():
    canvas = Canvas(20, 10)
    canvas.text(-8, 6, "WWWWWW", Letters(12.0, BLACK, halo=2.0))
    canvas.discs([0.0, 20.0], [0.0, 10.0], 8.0, BLACK)
    canvas.box((-5, -5, 3, 30), fill=BLACK, edge=BLACK, width=3)
    canvas.line([-30, 50], [-30, 50], width=3, color=BLACK)
    assert ink(canvas)[:, :3].all()


def test_fonts_are_found_without_loading_what_they_come_with():
    expected = Path(matplotlib.get_data_path()) / "fonts" / "ttf"
    assert _canvas._font_folder() == expected


def test_fonts_that_are_packaged_elsewhere_are_asked_for(monkeypatch):
    monkeypatch.setattr(_canvas, "find_spec", lambda name: None)
    assert _canvas._font_folder() == Path(matplotlib.get_data_path()) / "fonts" / "ttf"


def test_letters_that_the_font_has_not_are_known():
    assert all(_canvas.has_letter(letter) for letter in "aZ 09é²Ωя\u2009\u2013\u2026\u2212\u25a1")
    assert not any(_canvas.has_letter(letter) for letter in "東山\ue000")
