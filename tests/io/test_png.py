"""Pixels as PNG: every reader gets them back, and nothing else is in the file."""

import io

import numpy as np
import pytest
from PIL import Image

from viewshed.io import _png

SIZES = [(1, 1), (1, 7), (5, 1), (40, 30), (_png.STRIP_ROWS, 3), (2 * _png.STRIP_ROWS + 1, 5)]


@pytest.mark.parametrize("size", SIZES)
def test_pixels_come_back(size):
    rgb = np.random.default_rng(2).integers(0, 256, (*size, 3), dtype=np.uint8)
    image = Image.open(io.BytesIO(_png.png_of(rgb, 200)))
    assert image.mode == "RGB"
    np.testing.assert_array_equal(np.asarray(image), rgb)
    assert image.info["dpi"] == pytest.approx((200, 200), rel=1e-3)


def test_even_pixels_take_little_room():
    rgb = np.full((2000, 1500, 3), 255, np.uint8)
    assert len(_png.png_of(rgb, 200)) < 60_000
