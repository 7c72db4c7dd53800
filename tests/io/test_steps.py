"""Steps of a count: few, without gaps, telling much of the map apart."""

from itertools import pairwise

import numpy as np
import pytest

from viewshed.io._steps import step_colours, steps_of, told_step


def cells(**numbers):
    """Cells seen by each number of observers, given as n1=..., n2=..."""
    found = np.zeros(1 << 16, np.int64)
    for name, number in numbers.items():
        found[int(name[1:])] = number
    return found


def test_nothing_seen_has_no_steps():
    assert steps_of(cells(n0=500)) == []


@pytest.mark.parametrize("most", range(1, 7))
def test_few_numbers_are_steps_of_their_own(most):
    assert steps_of(cells(n0=3, **{f"n{most}": 1})) == [(i, i) for i in range(1, most + 1)]


def test_steps_grow_where_most_is_seen_by_few():
    falling = cells(**{f"n{i}": 10_000 // i**2 for i in range(1, 61)})
    assert [told_step(s) for s in steps_of(falling)] == [
        *("1", "2", "3\u20135", "6\u201311", "12\u201326", "27\u201360"),
    ]


def test_steps_are_equal_where_all_numbers_are_as_common():
    even = cells(**{f"n{i}": 10 for i in range(1, 61)})
    assert steps_of(even) == [(1 + 10 * i, 10 + 10 * i) for i in range(6)]


@pytest.mark.parametrize("most", [7, 8, 9, 13, 99, 100, 1234, 65_534])
@pytest.mark.parametrize("power", [0, 2])
def test_steps_hold_every_number_once(most, power):
    steps = steps_of(cells(**{f"n{i}": 1 + 10**6 // i**power for i in range(1, most + 1)}))
    assert 4 <= len(steps) <= 6
    assert steps[0][0] == 1
    assert steps[-1][1] == most
    for (_, end), (start, _) in pairwise(steps):
        assert start == end + 1


@pytest.mark.parametrize("steps", range(1, 7))
def test_colours_darken_in_even_strides_and_never_set_red_against_green(steps):
    colours = step_colours(steps)
    assert colours.shape == (steps, 3)
    linear = np.where(colours <= 0.04045, colours / 12.92, ((colours + 0.055) / 1.055) ** 2.4)
    lightness = 116 * np.cbrt(linear @ [0.2126, 0.7152, 0.0722]) - 16
    strides = -np.diff(lightness)
    assert (strides > 9).all()
    assert steps == 1 or np.ptp(strides) < 5
    assert (colours[:, 1] < colours[:, 2]).all()  # nowhere is there green
