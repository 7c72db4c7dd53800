"""Coordinate systems, their units, and the ways between places."""

import numpy as np
import pytest

from tests.unit.grids import GRIDS, make_grid
from viewshed import geodesy
from viewshed.errors import InputError


@pytest.mark.parametrize("text", ["", "blah", "EPSG:123456789", None, "two\nlines " * 30])
def test_nonsense_is_no_crs(text):
    with pytest.raises(InputError, match="is not a coordinate reference system") as caught:
        geodesy.crs_from_user(text)
    assert "\n" not in str(caught.value)
    assert len(str(caught.value)) < 200


@pytest.mark.parametrize("text", ["EPSG:4978", "EPSG:5773", 'LOCAL_CS["site",UNIT["metre",1]]'])
def test_a_crs_without_places_on_the_ground_is_refused(text):
    with pytest.raises(InputError, match="projected or geographic"):
        geodesy.crs_from_user(text)


@pytest.mark.parametrize(
    ("text", "horizontal", "vertical"),
    [
        ("EPSG:32633", 1.0, None),
        ("EPSG:4326", None, None),
        ("EPSG:4979", None, 1.0),
        ("EPSG:2263", 1200 / 3937, None),
        ("EPSG:2263+6360", 1200 / 3937, 1200 / 3937),
        ("EPSG:2263+5703", 1200 / 3937, 1.0),
        ("EPSG:32633+8228", 1.0, 0.3048),
        ("EPSG:2222", 0.3048, None),
        ("+proj=utm +zone=33 +towgs84=1,2,3 +units=us-ft +type=crs", 1200 / 3937, None),
    ],
)
def test_units_of_length(text, horizontal, vertical):
    crs = geodesy.crs_from_user(text)
    found = geodesy.horizontal_unit_factor(crs), geodesy.vertical_unit_factor(crs)
    for value, expected in zip(found, (horizontal, vertical), strict=True):
        assert value == (None if expected is None else pytest.approx(expected, rel=1e-12))


def test_depths_are_refused():
    with pytest.raises(InputError, match="count downwards"):
        geodesy.vertical_unit_factor(geodesy.crs_from_user("EPSG:32633+5831"))


@pytest.mark.parametrize("text", ["EPSG:4326", "EPSG:4979", "EPSG:4326+5773", "OGC:CRS84"])
def test_x_is_longitude_whatever_the_axis_order(text):
    lon, lat = geodesy.lonlat(geodesy.crs_from_user(text), [10.0, 20.0], 50.0)
    assert lon.tolist() == [10.0, 20.0]
    assert lat.tolist() == [50.0, 50.0]


def test_lonlat_needs_no_datum_shift():
    tied = geodesy.crs_from_user("+proj=utm +zone=33 +ellps=bessel +towgs84=500,400,300 +type=crs")
    lon, lat = geodesy.lonlat(tied, 500000.0, 0.0)
    assert (float(lon), float(lat)) == pytest.approx((15.0, 0.0), abs=1e-9)
    assert geodesy.ellipsoid(tied)[0] == 6377397.155


def test_transform_point_keeps_x_first():
    wgs, utm = geodesy.crs_from_user("EPSG:4326"), geodesy.crs_from_user("EPSG:32633+5773")
    x, y = geodesy.transform_point(15.0, 0.0, wgs, utm)
    assert (x, y) == pytest.approx((500000.0, 0.0), abs=1e-6)
    assert geodesy.transform_point(x, y, utm, wgs) == pytest.approx((15.0, 0.0), abs=1e-9)
    with pytest.raises(InputError, match="has no place in"):
        geodesy.transform_point(0.0, 95.0, wgs, utm)


def test_there_and_back():
    crs = geodesy.crs_from_user("EPSG:4258")
    bearing = np.radians([0.0, 45.0, 179.0, -90.0])
    lon, lat = geodesy.direct(crs, 15.0, 60.0, bearing, 30e3)
    distance, back = geodesy.inverse(crs, 15.0, 60.0, lon, lat)
    assert np.allclose(distance, 30e3, rtol=0.0, atol=1e-6)
    assert np.allclose(back, bearing, rtol=0.0, atol=1e-9)


def test_positions_find_the_turn_of_the_grid():
    grid = make_grid("EPSG:4326", (190, 10), (0.1, -0.1), (100, 100))
    assert geodesy.post_position(grid, -170.05, 9.95) == pytest.approx((50.0, 49.0))
    assert geodesy.post_position(grid, 189.95, 9.95) == pytest.approx((50.0, 49.0))
    utm, _ = GRIDS["UTM"]
    assert geodesy.post_position(utm, *utm.xy(3.25, 9.0)) == pytest.approx((3.25, 9.0))
