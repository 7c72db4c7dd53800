"""Names on a map: beside their observers, else at the end of a line, never over each other."""

import numpy as np
import pytest

from viewshed.io._labels import Room, closest, place_names

RADIUS, POINT = 5.0, 2.0


def placed(places, half=(30.0, 8.0), frame=(0, 0, 600, 600)):
    """Names of one size for observers at places; also their room."""
    room = Room(*frame)
    for x, y in places:
        if room.holds(x, y, 0, 0):
            room.take(x, y, RADIUS, RADIUS)
    labels = place_names(room, places, [half] * len(places), radius=RADIUS, point=POINT)
    return {label.number: label for label in labels}, room


def clear(one, other):
    (x, y, dx, dy), (u, v, du, dv) = one, other
    return abs(x - u) >= dx + du or abs(y - v) >= dy + dv


def test_a_name_stands_to_the_right_where_it_can():
    labels, _ = placed([(300, 300)])
    assert labels[0].x - 30 > 300 + RADIUS
    assert (labels[0].y, labels[0].leader) == (300, None)


@pytest.mark.parametrize("corner", [(8, 8), (592, 8), (8, 592), (592, 592)])
def test_a_name_stays_inside_the_frame(corner):
    labels, room = placed([corner])
    assert room.holds(labels[0].x, labels[0].y, 30, 8)


def test_observers_outside_the_frame_have_no_name():
    assert list(placed([(-5, 300), (300, 300)])[0]) == [1]


def test_a_row_too_close_for_names_has_them_at_the_ends_of_lines():
    labels, room = placed([(200 + 14 * i, 300) for i in range(8)])
    assert sorted(labels) == list(range(8))
    assert sum(label.leader is not None for label in labels.values()) >= 4
    for label in labels.values():
        if label.leader is not None:
            assert np.hypot(label.leader[0] - 200 - 14 * label.number, label.leader[1] - 300) < 9
    assert len(room.lines) == sum(label.leader is not None for label in labels.values())


@pytest.mark.parametrize("number", [2, 12, 40, 100])
def test_nothing_covers_anything(number):
    rng = np.random.default_rng(number)
    places = [(float(x), float(y)) for x, y in rng.uniform(0, 600, (number, 2))]
    labels, _ = placed(places)
    marks = [(x, y, RADIUS, RADIUS) for x, y in places]
    names = [(label.x, label.y, 30, 8) for label in labels.values()]
    assert len(names) >= min(number, 20)
    for i, name in enumerate(names):
        assert all(clear(name, other) for other in [*names[:i], *marks])
    for label in labels.values():
        if label.leader is not None:
            along = np.linspace(0, 1, 200)[:, None]
            path = np.array(label.leader[:2]) * (1 - along) + np.array(label.leader[2:]) * along
            for box in [*names, *marks]:
                inside = np.abs(path - box[:2]) < np.array(box[2:]) - 1e-6
                assert not inside.all(axis=1).any()


def test_names_without_width_are_left_out():
    assert placed([(300, 300)], half=(0.0, 8.0))[0] == {}


def test_how_close_observers_stand():
    assert closest([(0, 0)]) == float("inf")
    assert closest([(0, 0), (3, 4)]) == 5.0
    assert closest([(0, 0), (10, 0), (20, 0), (500, 0)]) == 10.0
