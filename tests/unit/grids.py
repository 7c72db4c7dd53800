"""Grids of every kind on which positions and areas have to be right."""

from affine import Affine
from pyproj import CRS

from viewshed.grid import Grid

ROTATED_POLE = "+proj=ob_tran +o_proj=longlat +o_lat_p=40 +o_lon_p=0 +lon_0=10 +ellps=GRS80"


def make_grid(crs, centre, step, shape, turn=0.0):
    """Grid about a centre, steps (x, y) in CRS units."""
    transform = (
        Affine.translation(*centre)
        @ Affine.rotation(turn)
        @ Affine.scale(*step)
        @ Affine.translation(-shape[1] / 2, -shape[0] / 2)
    )
    return Grid(shape, transform, CRS.from_user_input(crs).to_wkt())


BIG = (4400, 4400)
#: name: (grid, range [m])
GRIDS = {
    "geographic at 65 N": (
        make_grid("EPSG:4326", (10, 65), (1 / 1500, -1 / 3600), (4400, 4000)),
        60e3,
    ),
    "geographic at 65 S": (
        make_grid("EPSG:4258", (10, -65), (1 / 1500, -1 / 3600), (4400, 4000)),
        60e3,
    ),
    "geographic at 85 N": (make_grid("EPSG:4326", (10, 85), (1 / 300, -1 / 3600), BIG), 60e3),
    "geographic over 180": (make_grid("EPSG:4326", (180, 52), (1 / 3600, -1 / 3600), BIG), 60e3),
    "geographic 0 to 360": (make_grid("EPSG:4326", (359, 52), (1 / 3600, -1 / 3600), BIG), 60e3),
    "geographic in grads": (make_grid("EPSG:4807", (0.5, 50), (3e-4, -3e-4), BIG), 60e3),
    "rotated pole": (make_grid(ROTATED_POLE, (3, 5), (3e-4, -3e-4), BIG), 60e3),
    "UTM": (make_grid("EPSG:32633", (5e5, 7.2e6), (30, -30), BIG), 60e3),
    "UTM off its axis": (make_grid("EPSG:32633", (8.3e5, 6.1e6), (30, -30), BIG), 60e3),
    "UTM turned": (make_grid("EPSG:32633", (4e5, 5e6), (30, -30), BIG, 33.0), 60e3),
    "UTM south-up": (make_grid("EPSG:32633", (4e5, 5e6), (30, 30), BIG), 60e3),
    "UTM 1 m": (make_grid("EPSG:32633", (4e5, 5e6), (1, -1), (12_000, 12_000)), 5e3),
    "UTM 200 km": (make_grid("EPSG:32633", (4e5, 5e6), (30, -30), (14_000, 14_000)), 200e3),
    "Web Mercator at 60 N": (make_grid("EPSG:3857", (2e6, 8.4e6), (60, -60), BIG), 60e3),
    "state plane in feet": (make_grid("EPSG:2263", (1e6, 2e5), (100, -100), BIG), 60e3),
    "conic equal area": (make_grid("EPSG:5070", (0, 2e6), (30, -30), BIG), 60e3),
    "polar at the pole": (make_grid("EPSG:3995", (1e3, 2e3), (30, -30), BIG), 60e3),
    "westing and southing": (make_grid("EPSG:2053", (1e4, 3e6), (30, -30), BIG), 60e3),
    "one row": (make_grid("EPSG:32633", (4e5, 5e6), (30, -30), (1, 2500)), 60e3),
    "one column": (make_grid("EPSG:4326", (10, 65), (1 / 1500, -1 / 3600), (2500, 1)), 60e3),
    "one cell": (make_grid("EPSG:4326", (10, 65), (1 / 1500, -1 / 3600), (1, 1)), 60e3),
}
