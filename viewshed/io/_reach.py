"""How far each observer looks, in the local plane of the map: places and outlines by geodesics."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from viewshed.geodesy import frame_of

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from viewshed.io.picture import Marker, Scene

    Floats = NDArray[np.floating[Any]]

#: Beyond this many observers no outlines are made: they would cost more than the map.
MOST_OUTLINES = 1000
#: Nearer than this to the middle of the plane a place is the middle [cells].
_MIDDLE = 1e-3


@dataclass(frozen=True)
class Reach:
    """Places of the observers and outlines of what each can reach.

    Attributes
    ----------
    places : numpy.ndarray, shape (observers, 2)
        East and north of each observer in the plane [m].
    outlines : tuple of numpy.ndarray, shape (2, points)
        East and north of the edge of range and sector of each; a sector's begins and ends at its
        observer [m]. Empty for more than a thousand observers.
    box : tuple of (west, east), (south, north)
        What holds places and outlines [m].
    """

    places: Floats
    outlines: tuple[Floats, ...]
    box: tuple[tuple[float, float], tuple[float, float]]


def reach_of(scene: Scene) -> Reach:
    """Find places and outlines of all observers of a scene."""
    few = len(scene.observers) <= MOST_OUTLINES
    places = _places(scene)
    outlines = []
    points = 721 if len(scene.observers) <= 20 else 181
    for marker, place in zip(scene.observers, places, strict=True) if few else ():
        start, width = (0.0, 360.0)
        if marker.sector is not None:
            start, width = marker.sector.from_deg, marker.sector.width_deg
        bearing = np.radians(start + np.linspace(0.0, width, points))
        rim = local(scene, marker, bearing, np.full(points, marker.range_m))
        if marker.sector is not None:
            rim = np.concatenate([place[:, None], rim, place[:, None]], axis=1)
        outlines.append(rim)
    ends = np.concatenate([places, *(rim.T for rim in outlines)])
    beyond = 0.0 if few else max(marker.range_m for marker in scene.observers)
    west, south = ends.min(axis=0) - beyond
    east, north = ends.max(axis=0) + beyond
    return Reach(places, tuple(outlines), ((west, east), (south, north)))


def _places(scene: Scene) -> Floats:
    x, y = (np.array([getattr(m, axis) for m in scene.observers]) for axis in "xy")
    if x.size == 1:
        return local(scene, scene.observers[0], np.zeros(1), np.zeros(1)).T
    frame = frame_of(scene.grid.crs_wkt)
    middle = scene.post_map
    length, angle = frame.inverse(middle.lon, middle.lat, *frame.lonlat(x, y))
    return np.stack([length * np.sin(angle), length * np.cos(angle)], axis=1)


def local(scene: Scene, marker: Marker, bearing: Floats, distance: Floats) -> Floats:
    """Give local coordinates of what lies at true bearings and distances from an observer.

    Parameters
    ----------
    scene : Scene
        Gives the plane.
    marker : Marker
        The observer.
    bearing, distance : numpy.ndarray, shape (points,)
        Bearing [rad] and geodesic distance [m] from the observer.

    Returns
    -------
    numpy.ndarray, shape (2, points)
        East and north in the plane [m].
    """
    middle, grid = scene.post_map, scene.grid
    row, col = grid.rowcol(marker.x, marker.y)
    if np.hypot(row - middle.row0, col - middle.col0) < _MIDDLE:
        return np.stack([distance * np.sin(bearing), distance * np.cos(bearing)])
    frame = frame_of(grid.crs_wkt)
    lon, lat = (float(v) for v in frame.lonlat(marker.x, marker.y))
    ends = frame.direct(lon, lat, bearing, distance)
    length, angle = frame.inverse(middle.lon, middle.lat, *ends)
    return np.stack([length * np.sin(angle), length * np.cos(angle)])


def joint_outline(outlines: tuple[Floats, ...]) -> list[Floats]:
    """Give the edges of what all observers together reach, each as east and north [m]."""
    import shapely

    shapes = [shapely.make_valid(shapely.Polygon(rim.T)) for rim in outlines]
    edge = shapely.boundary(shapely.unary_union(shapes))
    return [shapely.get_coordinates(line).T for line in shapely.get_parts(edge)]
