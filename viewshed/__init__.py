"""What can be seen from where: exact visibility over real terrain, a curved Earth and real air.

>>> import viewshed
>>> terrain = viewshed.open_terrain("sample_dem/elevation.tif")
>>> lookout = viewshed.Observer(410385, 6204255, eye_height=1.7)
>>> result = viewshed.map_visibility(terrain, lookout, range_m=3000, refraction=0.13)
>>> result.visible.shape == result.grid.shape
True

Everything is loaded on first use, so importing the package costs nothing.
"""

from __future__ import annotations

from viewshed._version import __version__

#: Known to be true by checkers of types; `typing` would take longer to load than the rest.
TYPE_CHECKING = False
if TYPE_CHECKING:
    from typing import Any

    from viewshed.api import map_visibility
    from viewshed.atmosphere import Refraction, parse_refraction
    from viewshed.errors import (
        DataError,
        InputError,
        MemoryLimitError,
        OutputError,
        ViewshedError,
        ViewshedWarning,
    )
    from viewshed.grid import Grid
    from viewshed.io.elevation import Terrain, open_terrain
    from viewshed.io.features import read_observers
    from viewshed.io.polygons import Patches, polygonise
    from viewshed.io.record import read_record
    from viewshed.io.surface import Surface, open_surface
    from viewshed.places import Observer, Sector, Target
    from viewshed.result import MapResult

__all__ = [
    "DataError",
    "Grid",
    "InputError",
    "MapResult",
    "MemoryLimitError",
    "Observer",
    "OutputError",
    "Patches",
    "Refraction",
    "Sector",
    "Surface",
    "Target",
    "Terrain",
    "ViewshedError",
    "ViewshedWarning",
    "__version__",
    "map_visibility",
    "open_surface",
    "open_terrain",
    "parse_refraction",
    "polygonise",
    "read_observers",
    "read_record",
]

_HOME = {
    "DataError": "errors",
    "Grid": "grid",
    "InputError": "errors",
    "MapResult": "result",
    "MemoryLimitError": "errors",
    "Observer": "places",
    "OutputError": "errors",
    "Patches": "io.polygons",
    "Refraction": "atmosphere",
    "Sector": "places",
    "Surface": "io.surface",
    "Target": "places",
    "Terrain": "io.elevation",
    "ViewshedError": "errors",
    "ViewshedWarning": "errors",
    "map_visibility": "api",
    "open_surface": "io.surface",
    "open_terrain": "io.elevation",
    "parse_refraction": "atmosphere",
    "polygonise": "io.polygons",
    "read_observers": "io.features",
    "read_record": "io.record",
}


def __getattr__(name: str) -> Any:
    """Load a public name from its module on first use."""
    from importlib import import_module

    if name not in _HOME:
        msg = f"module 'viewshed' has no attribute {name!r}"
        raise AttributeError(msg)
    value = getattr(import_module(f"viewshed.{_HOME[name]}"), name)
    globals()[name] = value
    return value


def __dir__() -> list[str]:
    """Names a reader can complete."""
    return sorted(__all__)
