"""What one observer sees of a terrain, in arrays, words and files."""

from __future__ import annotations

import math
from dataclasses import dataclass, field
from functools import cached_property
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from viewshed import geodesy
from viewshed._version import __version__
from viewshed.areas import cell_areas
from viewshed.constants import HIDDEN, NODATA, UNRESOLVED, VISIBLE
from viewshed.errors import OutputError
from viewshed.visibility import ground_at

if TYPE_CHECKING:
    import os
    from collections.abc import Mapping, Sequence

    from numpy.typing import NDArray

    from viewshed.atmosphere import Refraction
    from viewshed.grid import Grid, PostMap
    from viewshed.io.elevation import Terrain
    from viewshed.places import Observer, Sector, Target

__all__ = ["MapResult", "told_length", "told_number"]

_BANDS = {
    "visible": ("visible (1), hidden (0), unresolved (2)", "", NODATA),
    "clearance": ("height of the target above the line of its horizon", "m", math.nan),
    "needed-height": ("least height above ground at which something is seen", "m", math.nan),
}


@dataclass(frozen=True)
class MapResult:
    """What one observer sees, on the elevation grid cropped to the range.

    Attributes
    ----------
    visible : (rows, cols) uint8
        1 visible, 0 hidden, 2 unresolved, 255 void or outside range, sector or grid.
    clearance, needed_height : (rows, cols) float32 or None
        Further layers [m] if asked for; NaN at 2 and 255.
    elevation : (rows, cols) float32
        The ground [m], NaN where void.
    grid : Grid
        Grid of all these arrays.
    post_map : PostMap
        True local coordinates of the posts.
    observer : Observer
        The observer, where it was put.
    warnings : tuple of str
        What the user should know.
    """

    visible: NDArray[np.uint8]
    clearance: NDArray[np.float32] | None
    needed_height: NDArray[np.float32] | None
    elevation: NDArray[np.float32]
    grid: Grid
    post_map: PostMap
    terrain: Terrain
    observer: Observer
    position: tuple[float, float]
    eye_height: float
    target: Target
    range_m: float
    refraction: Refraction
    sector: Sector | None
    layers: tuple[str, ...]
    warnings: tuple[str, ...] = field(default=())

    @property
    def question(self) -> str:
        """The question that the result answers, in words."""
        x, y = self.position
        name = "" if self.observer.name == "observer" else f"{self.observer.name}, "
        if self.observer.eye_elevation is None:
            eye = f"{self.eye_height:g} m above ground"
        else:
            eye = f"{self.observer.eye_elevation:g} m elevation"
        low = self.target.height == 0
        what = "the ground" if low else f"{self.target.height:g} m above ground"
        where = f"within {told_length(self.range_m)}"
        if self.sector is not None:
            where += f", bearings {self.sector.from_deg:g} to {self.sector.to_deg:g} degrees"
        return (
            f"from {eye} at {name}{told_number(x)}, {told_number(y)} to {what} everywhere {where}, "
            f"{self.refraction.describe()}"
        )

    @cached_property
    def counts(self) -> dict[str, int]:
        """Cells of each state."""
        found = np.zeros(256, dtype=np.int64)
        for first in range(0, self.visible.shape[0], 256):  # bincount widens what it is given
            found += np.bincount(self.visible[first : first + 256].ravel(), minlength=256)
        return {name: int(found[value]) for name, value in _STATES.items()}

    @cached_property
    def areas_m2(self) -> dict[str, float]:
        """True area of the cells of each state on the ellipsoid [m2]."""
        areas = cell_areas(self.grid)
        return {
            name: round(areas.total(self.visible == value), 1)
            for name, value in _STATES.items()
            if value != NODATA
        }

    @cached_property
    def farthest_visible(self) -> dict[str, float] | None:
        """The farthest visible cell: x, y, distance [m] and true bearing [degrees]."""
        best = None
        seen = self.visible == VISIBLE
        for row in np.flatnonzero(seen.any(axis=1)):
            # along a row distance has no greatest between its ends
            for col in {int(seen[row].argmax()), seen.shape[1] - 1 - int(seen[row, ::-1].argmax())}:
                east, north = (float(v) for v in self.post_map.en(float(row), float(col)))
                distance = math.hypot(east, north)
                if best is None or distance > best[0]:
                    best = (distance, math.degrees(math.atan2(east, north)) % 360.0, row, col)
        if best is None:
            return None
        x, y = (float(v) for v in self.grid.xy(best[2], best[3]))
        return {"x": x, "y": y, "distance_m": round(best[0], 2), "bearing_deg": round(best[1], 4)}

    @property
    def covered(self) -> float:
        """Share of range and sector that lies on known ground, so that it has an answer."""
        width = 360.0 if self.sector is None else self.sector.width_deg
        asked = math.pi * self.range_m**2 * width / 360.0
        return min(1.0, sum(self.areas_m2.values()) / asked)

    @cached_property
    def summary(self) -> list[tuple[str, str]]:
        """Short table of the result: rows of label and value."""
        total = sum(self.areas_m2.values())
        rows = []
        for name, area in self.areas_m2.items():
            share = f" ({100 * area / total:.1f} %)" if total else ""
            told = f"{area / 1e6:,.2f} km2" if total >= 1e5 else f"{area:,.0f} m2"
            rows.append((name.capitalize(), told + share))
        if self.covered < 0.99:
            rows.append(("Range on known ground", f"{100 * self.covered:.0f} % of it"))
        far = self.farthest_visible
        if far is not None:
            metres = far["distance_m"]
            distance = f"{metres / 1000:.1f} km" if metres >= 1000 else f"{metres:.0f} m"
            told = f"{distance} off at {far['bearing_deg']:.0f} degrees"
            rows.append(("Farthest visible", told))
        rows.append(("Refraction", self.refraction.describe()))
        rows.append(("Ground at the observer", f"{self._ground:.1f} m"))
        if self.terrain.height_unit_origin == "assumed metres":
            rows.append(("Heights", "in metres, as assumed"))
        error = self.post_map.error_m
        told = f"up to {error:.2g} m" if error >= 1e-3 else "under 1 mm"
        rows.append(("Map position error", told))
        return rows

    @cached_property
    def record(self) -> dict[str, Any]:
        """Everything needed to run it again, as plain JSON values (outputs when written)."""
        from viewshed.io.record import build_record

        return build_record(
            {
                "version": __version__,
                "question": self.question,
                "options": self._options(),
                "crs": self.grid.crs_wkt,
                "grid": {"shape": self.grid.shape, "transform": tuple(self.grid.transform)[:6]},
                "dem": self.terrain.fingerprints(),
                "heights": {
                    "metres_per_unit": self.terrain.height_factor,
                    "unit_from": self.terrain.height_unit_origin,
                    "nodata": self.terrain.nodata,
                },
                "observer": {
                    "name": self.observer.name,
                    "x": self.position[0],
                    "y": self.position[1],
                    "eye_height_m": self.eye_height,
                    "ground_m": self._ground,
                },
                "refraction": {
                    "k": self.refraction.k,
                    "K": self.refraction.K,
                    "m": self.refraction.m,
                    "origin": self.refraction.origin,
                },
                "geometry": {
                    "error_m": self.post_map.error_m,
                    "error_cells": self.post_map.error_cells,
                    "degree": self.post_map.degree,
                    "radius_meridian_m": self.post_map.radius_meridian,
                    "radius_prime_vertical_m": self.post_map.radius_prime_vertical,
                },
                "counts": self.counts,
                "areas_m2": self.areas_m2,
                "range_on_known_ground": round(self.covered, 4),
                "farthest_visible": self.farthest_visible,
                "warnings": list(self.warnings),
                "outputs": {},
            }
        )

    @property
    def _ground(self) -> float:
        return ground_at(self.elevation, self.post_map.row0, self.post_map.col0)

    def _options(self) -> dict[str, Any]:
        sector = self.sector
        return {
            "observer": [self.observer.x, self.observer.y],
            "observer_crs": self.observer.crs,
            "eye_height_m": self.observer.eye_height,
            "eye_elevation_m": self.observer.eye_elevation,
            "target_height_m": self.target.height,
            "range_m": self.range_m,
            "sector_deg": None if sector is None else [sector.from_deg, sector.to_deg],
            "refraction_k": self.refraction.k,
            "layers": list(self.layers),
            **self.terrain.stated,
        }

    def write(
        self,
        out_dir: str | os.PathLike[str],
        *,
        overwrite: bool = False,
        picture: bool = True,
        creation_options: Mapping[str, str] | None = None,
    ) -> list[Path]:
        """Write the layers, the page and the record into a folder, all or nothing.

        Parameters
        ----------
        out_dir : path
            Folder; made if it does not exist.
        overwrite : bool
            Whether an earlier result there is replaced.
        picture : bool
            Whether map.png is drawn.
        creation_options : mapping of str to str, optional
            Options of the COG driver, like ``{"COMPRESS": "ZSTD"}``.

        Returns
        -------
        list of Path
            What was written, the page first.

        Raises
        ------
        OutputError
            If something could not be written whole; the folder is as it was.
        """
        from viewshed.io._atomic import check_out_dir, file_sha256, staged
        from viewshed.io.raster import write_cog
        from viewshed.io.record import build_record, write_record

        check_out_dir(out_dir, overwrite)
        folder = Path(out_dir)
        self._spare_the_inputs(folder)
        outputs: dict[str, Any] = {}
        with staged(folder, overwrite=overwrite) as stage:
            for layer, array in self._arrays():
                name = f"{layer.replace('-', '_')}.tif"
                description, unit, nodata = _BANDS[layer]
                written = write_cog(
                    stage.path(name),
                    array,
                    self.grid,
                    nodata=nodata,
                    description=description,
                    unit=unit,
                    tags=self._tags(layer),
                    overview="mode" if layer == "visible" else "nearest",
                    creation_options=creation_options or {},
                )
                outputs[name] = {**written, "layer": layer}
            if picture:
                self._draw(stage.path("map.png"))
                outputs["map.png"] = {"sha256": file_sha256(stage.path("map.png")), "layer": None}
            options = {
                **self.record["options"],
                "picture": picture,
                "creation_options": dict(creation_options or {}),
            }
            record = build_record(
                {**self.record, "options": options, "outputs": outputs}, folder=folder.resolve()
            )
            write_record(stage.path("record.json"), record)
        names = sorted(outputs, key=lambda n: (n != "map.png", list(outputs).index(n)))
        return [folder / name for name in [*names, "record.json"]]

    def _spare_the_inputs(self, folder: Path) -> None:
        """Refuse to write over the elevation that was read."""
        from viewshed.io._atomic import RESULT_NAMES

        for path in self.terrain.paths:
            if path.resolve().parent == folder.resolve() and path.name in RESULT_NAMES:
                msg = f"{path}: is the elevation grid itself; choose another folder for the results"
                raise OutputError(msg)

    def _arrays(self) -> list[tuple[str, NDArray[Any]]]:
        arrays = {
            "visible": self.visible,
            "clearance": self.clearance,
            "needed-height": self.needed_height,
        }
        return [(name, arrays[name]) for name in self.layers if arrays[name] is not None]  # type: ignore[misc]

    def _tags(self, layer: str) -> dict[str, str]:
        return {
            "VERSION": __version__,
            "LAYER": layer,
            "QUESTION": self.question,
            "REFRACTION_K": repr(self.refraction.k),
            "EARTH_FACTOR": repr(self.refraction.K),
            "GEOMETRY_ERROR_M": f"{self.post_map.error_m:.3g}",
            "CAUTION": "A model of the terrain it was given. Not for navigation or flight safety.",
        }

    def _draw(self, path: Path) -> None:
        from viewshed.io.picture import Scene, Words, draw_map

        crs = geodesy.crs_from_user(self.grid.crs_wkt)
        unit = crs.axis_info[0].unit_name if crs.axis_info else ""
        name = "" if self.observer.name == "observer" else self.observer.name
        scene = Scene(
            elevation=self.elevation,
            visible=self.visible,
            grid=self.grid,
            post_map=self.post_map,
            observers=[(*self.position, name)],
            range_m=self.range_m,
            sector=self.sector,
        )
        words = Words(
            question=self.question,
            refraction=self.refraction.describe(),
            dem_name=_dem_name(self.terrain.paths),
            crs_name=f"{crs.name}, {unit}" if unit else crs.name,
            summary=self.summary,
            made_with=f"viewshed {__version__}",
        )
        draw_map(path, scene, words)


_STATES = {"visible": VISIBLE, "hidden": HIDDEN, "unresolved": UNRESOLVED, "nodata": NODATA}


def _dem_name(paths: Sequence[Path]) -> str:
    first = Path(paths[0]).name
    return first if len(paths) == 1 else f"{first} and {len(paths) - 1} more"


def told_length(metres: float) -> str:
    """Write a length with the unit that suits it."""
    return f"{metres / 1000.0:g} km" if metres >= 1000.0 else f"{metres:g} m"


def told_number(value: float) -> str:
    """Write a coordinate without needless digits."""
    return f"{value:.8f}".rstrip("0").rstrip(".") if abs(value) < 1000 else f"{value:.10g}"
