"""What a record says of a result, and the table of its observers."""

from __future__ import annotations

import csv
import io
from typing import TYPE_CHECKING, Any

from viewshed._version import __version__
from viewshed.tally import STATE_NAMES
from viewshed.wording import told_area, told_distance, told_length

if TYPE_CHECKING:
    from viewshed.result import MapResult, View

#: States in the order in which tables tell them.
_TOLD_STATES = ("visible", "hidden", "unresolved")


def record_of(result: MapResult) -> dict[str, Any]:
    """Give everything needed to run a map again, as plain JSON values.

    Outputs and the options of writing are added when the files are written.
    """
    from viewshed.io.record import build_record

    air, inputs = result.refraction, result.inputs
    worst = max((view.post_map for view in result.views), key=lambda p: p.error_cells)
    return build_record(
        {
            "version": __version__,
            "question": result.question,
            "options": _options(result),
            "crs": result.grid.crs_wkt,
            "grid": {"shape": result.grid.shape, "transform": tuple(result.grid.transform)[:6]},
            "dem": inputs.files[0],
            "surface": _surface(result),
            "heights": {
                "metres_per_unit": inputs.terrain.height_factor,
                "unit_from": inputs.terrain.height_unit_origin,
                "datum": inputs.terrain.datum,
                "void_height_m": inputs.terrain.stated.get("void_height_m"),
                **inputs.heights,
            },
            "observers": [_observer(result, view) for view in result.views],
            "refraction": {"k": air.k, "K": air.K, "m": air.m, "origin": air.origin},
            "geometry": {
                "error_m": worst.error_m,
                "error_cells": worst.error_cells,
                "degree": worst.degree,
                "radius_meridian_m": worst.radius_meridian,
                "radius_prime_vertical_m": worst.radius_prime_vertical,
            },
            "counts": result.counts,
            "areas_m2": result.areas_m2,
            "farthest_visible": result.farthest_visible,
            "warnings": list(result.warnings),
            "outputs": {},
        }
    )


def _options(result: MapResult) -> dict[str, Any]:
    question, surface = result.asked, result.inputs.surface
    return {
        "dem": list(result.terrain.given),
        **result.terrain.stated,
        "surface": None if surface is None else list(surface.given),
        "surface_crs": None if surface is None else surface.own.stated["crs"],
        "surface_height_unit": None if surface is None else surface.own.stated["height_unit"],
        "observers": [_asked(view) for view in result.views],
        "target_height_m": question.target.height,
        "range_m": question.range_m,
        "sector_deg": _bearings(question.sector),
        "refraction_k": question.refraction.k,
        "refraction": {"k": question.refraction.k, "origin": question.refraction.origin},
        "layers": list(question.layers),
        "each": question.each,
    }


def _asked(view: View) -> dict[str, Any]:
    one = view.observer
    return {
        "name": one.name,
        "x": one.x,
        "y": one.y,
        "crs": one.crs,
        "eye_height_m": one.eye_height,
        "eye_elevation_m": one.eye_elevation,
        "target_height_m": one.target_height,
        "range_m": one.range_m,
        "sector_deg": _bearings(one.sector),
    }


def _bearings(sector: Any) -> list[float] | None:
    return None if sector is None else [sector.from_deg, sector.to_deg]


def _surface(result: MapResult) -> dict[str, Any] | None:
    surface = result.inputs.surface
    if surface is None:
        return None
    return {
        "method": surface.method,
        "metres_per_unit": surface.own.height_factor,
        "unit_from": surface.own.height_unit_origin,
        "datum": surface.own.datum,
        "median_over_ground_m": result.inputs.median_over_ground,
        "files": result.inputs.files[1],
    }


def _observer(result: MapResult, view: View) -> dict[str, Any]:
    placed, tally = view.placed, view.tally
    cells = view.window[2] * view.window[3]
    return {
        "name": view.observer.name,
        "x": placed.x,
        "y": placed.y,
        "ground_m": view.ground,
        "eye_height_m": view.eye_height,
        "eye_elevation_m": view.observer.eye_elevation,
        "target_height_m": placed.target_height,
        "range_m": placed.range_m,
        "sector_deg": _bearings(placed.sector),
        "counts": {**tally.counts, "nodata": cells - sum(tally.counts.values())},
        "areas_m2": {name: round(tally.areas_m2[name], 1) for name in STATE_NAMES},
        "seen_share": _rounded(tally.seen_share),
        "range_on_known_ground": round(view.covered, 4),
        "farthest_visible": result.farthest_of(view),
        "bands": [
            {
                "from_m": band.from_m,
                "to_m": band.to_m,
                **{f"{name}_m2": round(band.areas_m2[name], 1) for name in _TOLD_STATES},
            }
            for band in tally.bands
        ],
    }


def _rounded(share: float | None) -> float | None:
    return None if share is None else round(share, 6)


# --- tables -------------------------------------------------------------------------------------


def observer_table(result: MapResult) -> list[tuple[str, ...]]:
    """Give the table of the observers: a heading, then one row each, in words."""
    rows: list[tuple[str, ...]] = [
        ("Observer", "Visible", "Unresolved", "Of its range seen", "Farthest visible")
    ]
    for view in result.views:
        tally, far = view.tally, view.tally.farthest
        small = sum(tally.areas_m2.values()) < 1e5
        share = tally.seen_share
        rows.append(
            (
                view.observer.name,
                told_area(tally.areas_m2["visible"], small=small),
                told_area(tally.areas_m2["unresolved"], small=small),
                "-" if share is None else f"{100 * share:.1f} %",
                "-" if far is None else f"{told_distance(far[2])} at {far[3]:.0f} degrees",
            )
        )
    return rows


def summary_csv(result: MapResult) -> str:
    """Give the table of the observers as CSV, with every number and the bands of distance.

    Bands are those of the farthest range; an observer has no value in a band it does not have.
    """
    edges = sorted({(b.from_m, b.to_m) for view in result.views for b in view.tally.bands})
    bands = [f"{low:g}_{high:g}m" for low, high in edges]
    text = io.StringIO()
    table = csv.writer(text, lineterminator="\n")
    table.writerow(
        [
            *("observer", "x", "y", "ground_m", "eye_height_m", "target_height_m", "range_m"),
            *("bearing_from", "bearing_to", "visible_m2", "hidden_m2", "unresolved_m2"),
            *("seen_share", "range_on_known_ground"),
            *("farthest_x", "farthest_y", "farthest_m", "farthest_bearing"),
            *(f"visible_m2_{band}" for band in bands),
            *(f"seen_share_{band}" for band in bands),
        ]
    )
    for view in result.views:
        record, far = _observer(result, view), result.farthest_of(view) or {}
        own = {(b.from_m, b.to_m): b for b in view.tally.bands}
        found = [own.get(edge) for edge in edges]
        table.writerow(
            [
                *(record[name] for name in ("name", "x", "y")),
                *(f"{record[name]:.10g}" for name in ("ground_m", "eye_height_m")),
                *(record[name] for name in ("target_height_m", "range_m")),
                *(record["sector_deg"] or ("", "")),
                *(record["areas_m2"][name] for name in _TOLD_STATES),
                _told(record["seen_share"]),
                record["range_on_known_ground"],
                *(far.get(name, "") for name in ("x", "y", "distance_m", "bearing_deg")),
                *("" if b is None else round(b.areas_m2["visible"], 1) for b in found),
                *("" if b is None else _told(_rounded(b.seen_share)) for b in found),
            ]
        )
    return text.getvalue()


def _told(value: float | None) -> float | str:
    return "" if value is None else value


def bands_told(view: View) -> list[tuple[str, str]]:
    """Tell what one observer sees by distance: rows of band and share."""
    rows = []
    for band in view.tally.bands:
        share = band.seen_share
        told = "no known ground" if share is None else f"{100 * share:.1f} % seen"
        rows.append((f"{told_length(band.from_m)} to {told_length(band.to_m)}", told))
    return rows
