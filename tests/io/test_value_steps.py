"""Steps of the values of an elevation grid."""

import numpy as np
import pytest

from viewshed.io._value_steps import US_FOOT, StepFinder

NOISE = np.random.default_rng(0)


def found(heights, pieces=1):
    finder = StepFinder()
    heights = np.asarray(heights).astype(np.float32)
    for piece in np.array_split(heights, pieces):
        finder.add(piece)
    step = finder.found(float(heights.min()), float(heights.max()))
    return None if step is None else step.name


def whole(low, high, n=50_000):
    return NOISE.integers(low, high, n)


@pytest.mark.parametrize(
    ("heights", "name"),
    [
        (whole(-20, 900), "whole metres"),
        (whole(0, 400) * 5, "steps of 5 metres"),
        (whole(0, 9000) / 2, "halves of a metre"),
        (whole(0, 9000) / 8, "eighths of a metre"),
        (whole(0, 30_000) / 10, "tenths of a metre"),
        (whole(0, 90_000) / 100, "hundredths of a metre"),
        (whole(0, 5000) * 0.3048, "whole feet"),
        (whole(2000, 9000) * US_FOOT, "whole US survey feet"),
        (whole(0, 9000) * 0.03048, "tenths of a foot"),
        (whole(0, 300) * 3.048, "steps of 10 feet"),
        ((whole(0, 5000) * 0.3048).round(2), "whole feet, rounded to centimetres"),
        (NOISE.random(50_000) * 1000, None),
        (1500 + NOISE.random(50_000) * 1000, None),
    ],
)
@pytest.mark.parametrize("pieces", [1, 7])
def test_steps(heights, name, pieces):
    assert found(heights, pieces) == name


def test_one_height_off_the_steps_counts():
    heights = whole(0, 500).astype(np.float32)
    heights[31_415] += 0.25
    assert found(heights) == "quarters of a metre"


def test_steps_finer_than_a_float_tells_are_not_claimed():
    assert found(3000 + np.arange(60_000) / 1000) is None


def test_few_heights_show_no_large_step():
    assert found([100, 101, 102, 103]) == "whole metres"
    assert found([100, 100]) is None


def test_nothing_known_yet():
    finder = StepFinder()
    finder.add(np.empty(0, np.float32))
    assert len(finder.left) > 20
