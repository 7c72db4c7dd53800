"""Observers, targets, sectors and the texts they come from."""

import numpy as np
import pytest

from viewshed.errors import InputError
from viewshed.places import (
    Observer,
    Sector,
    Target,
    parse_area,
    parse_length,
    parse_point,
    parse_sector,
)


def test_observer_stands_where_told_with_the_usual_eye():
    observer = Observer(12, 34.5)
    assert (observer.x, observer.y, observer.eye_height) == (12.0, 34.5, 1.7)
    assert (observer.name, observer.crs, observer.eye_elevation) == ("observer", None, None)


def test_observer_with_an_elevation_has_no_height():
    observer = Observer(1, 2, eye_elevation=-3)
    assert observer.eye_height is None
    assert observer.eye_elevation == -3.0


def test_observer_takes_what_is_the_run_s_unless_told():
    plain = Observer(1, 2)
    assert (plain.target_height, plain.range_m, plain.sector) == (None, None, None)
    own = Observer(1, 2, target_height=0, range_m="2e7", sector=Sector(350, 10))
    assert (own.target_height, own.range_m, own.sector) == (0.0, 2e7, Sector(350, 10))


@pytest.mark.parametrize(
    ("changes", "match"),
    [
        ({"x": float("nan")}, "observer x nan"),
        ({"y": float("inf")}, "observer y inf"),
        ({"x": "here"}, "observer x 'here'"),
        ({"eye_height": -0.1}, "eye height -0.1 m is below ground"),
        ({"eye_height": float("nan")}, "eye height nan"),
        ({"eye_elevation": float("nan")}, "eye elevation nan"),
        ({"eye_height": 1.7, "eye_elevation": 5.0}, "exclude each other"),
        ({"name": " "}, "name ' ' is empty"),
        ({"target_height": -2.0}, "target height -2 m is below ground"),
        ({"target_height": "tall"}, "target height 'tall' is not a finite number"),
        ({"range_m": 0.0}, "range 0 m: give a length above 0"),
        ({"range_m": -5.0}, "range -5 m: give a length above 0"),
        ({"range_m": 2.1e7}, r"range 2.1e\+07 m: .* up to 20000 km"),
        ({"range_m": float("nan")}, "range nan is not a finite number"),
        ({"sector": (350, 10)}, r"sector \(350, 10\) is no sector"),
    ],
)
def test_unusable_observers_are_refused(changes, match):
    with pytest.raises(InputError, match=match):
        Observer(**({"x": 0.0, "y": 0.0} | changes))


def test_target_is_the_ground_unless_told():
    assert Target().height == 0.0
    assert Target(2).height == 2.0


@pytest.mark.parametrize("height", [-1.0, float("nan"), float("inf"), None])
def test_unusable_targets_are_refused(height):
    with pytest.raises(InputError, match="target height"):
        Target(height)


@pytest.mark.parametrize(
    ("ends", "width", "inside", "outside"),
    [
        ((350, 10), 20, [350, 0, 10, 360, -5, 365], [349.9, 10.1, 180]),
        ((10, 350), 340, [10, 180, 350], [0, 355, 9]),
        ((-10, 10), 20, [350, 0, 10], [11, 349]),
        ((0, 360), 360, [0, 90, 359.9, 360], []),
        ((-180, 180), 360, [0, 90, 359.9, 180], []),
        ((0.1, 0.3), 0.2, [0.1, 0.2, 0.3, 360.3], [0.0, 0.4]),
    ],
)
def test_sectors_run_clockwise_and_wrap(ends, width, inside, outside):
    sector = Sector(*ends)
    assert sector.width_deg == pytest.approx(width)
    assert sector.contains(inside).all()
    assert not sector.contains(outside).any()


def test_no_bearing_is_in_no_sector():
    assert not Sector(0, 360).contains(np.nan)


@pytest.mark.parametrize(
    ("ends", "match"),
    [
        ((10, 10), "no width"),
        ((360, 0), "no width"),
        ((float("nan"), 0), "nan is not a finite number"),
        ((0, 361), "outside -360 to 360"),
    ],
)
def test_unusable_sectors_are_refused(ends, match):
    with pytest.raises(InputError, match=match):
        Sector(*ends)


@pytest.mark.parametrize(
    ("text", "metres"),
    [
        ("30km", 30_000.0),
        ("30 km", 30_000.0),
        ("1.7", 1.7),
        (" 5. m ", 5.0),
        (".5km", 500.0),
        ("1e3", 1000.0),
        ("1e3m", 1000.0),
        ("250cm", 2.5),
        ("6ft", 1.8288),
        ("3937us-ft", 1200.0),
        ("2mi", 3218.688),
        ("10nmi", 18_520.0),
        ("-2m", -2.0),
        (12, 12.0),
    ],
)
def test_lengths(text, metres):
    assert parse_length(text) == pytest.approx(metres, rel=1e-15)


@pytest.mark.parametrize(
    "text", ["", "km", "5 furlong", "5 KM", "nan", "inf", "nan m", "1e999", "1,5km", "5 k m", "0x5"]
)
def test_unusable_lengths_are_refused(text):
    with pytest.raises(InputError, match=r"length .* is not a number with a unit"):
        parse_length(text)


def test_points_and_sectors_from_text():
    assert parse_point(" 500000 , -7.25e6 ") == (500000.0, -7.25e6)
    assert parse_sector("350,10") == Sector(350.0, 10.0)


@pytest.mark.parametrize("text", ["", "5", "5;6", "5,6,7", "a,b", "nan,0", "5,1e999", "5 6"])
def test_unusable_pairs_are_refused(text):
    with pytest.raises(InputError, match="point"):
        parse_point(text)
    with pytest.raises(InputError, match="sector"):
        parse_sector(text)


@pytest.mark.parametrize(
    ("text", "square_metres"),
    [
        ("2ha", 20_000.0),
        ("0.5 km2", 500_000.0),
        ("900", 900.0),
        (" 1e3 m2 ", 1000.0),
        ("1acre", 4046.8564224),
        ("43560ft2", 4046.8564224),
        ("-1ha", -10_000.0),
        (12, 12.0),
    ],
)
def test_areas(text, square_metres):
    assert parse_area(text) == pytest.approx(square_metres, rel=1e-14)


@pytest.mark.parametrize("text", ["", "ha", "5 km", "5 HA", "nan", "1e999", "1,5ha", "2 h a"])
def test_unusable_areas_are_refused(text):
    with pytest.raises(InputError, match=r"area .* is not a number with a unit; .* like 2ha"):
        parse_area(text)
