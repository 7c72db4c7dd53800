"""A record with every section, as small as the schema lets it be, for the tests."""

import copy
import hashlib

SHA = hashlib.sha256(b"").hexdigest()
COUNTS = {"visible": 7, "hidden": 3, "unresolved": 1, "nodata": 1}
AREAS = {"visible": 6300.5, "hidden": 2700.0, "unresolved": 900.0}
SECTOR = [350.0, 10.0]

_SECTIONS = {
    "version": "1.2",
    "question": "from 50 m above ground at 2 points to 1.7 m above ground everywhere, k = 0.13",
    "options": {
        "dem": ["dems/a.tif"],
        "crs": None,
        "height_unit": None,
        "void_height_m": None,
        "void_mask": None,
        "surface": None,
        "surface_crs": None,
        "surface_height_unit": None,
        "observers": [
            {
                "name": "Knoll",
                "x": 400_050.0,
                "y": 5_999_950.0,
                "crs": None,
                "eye_height_m": 50.0,
                "eye_elevation_m": None,
                "target_height_m": None,
                "range_m": 20_000.0,
                "sector_deg": SECTOR,
            },
            {
                "name": "Tårn 2",
                "x": 13.5,
                "y": 54.1,
                "crs": "EPSG:4326",
                "eye_height_m": None,
                "eye_elevation_m": 120.5,
                "target_height_m": 0.0,
                "range_m": None,
                "sector_deg": None,
            },
        ],
        "target_height_m": 1.7,
        "range_m": 30_000.0,
        "sector_deg": None,
        "refraction_k": 0.13,
        "refraction": {"k": 0.13, "origin": "survey"},
        "layers": ["visible", "clearance"],
        "each": False,
        "polygons": "none",
        "min_patch_m2": 0.0,
        "picture": True,
        "stac": False,
        "creation_options": {},
    },
    "grid": {"shape": [3, 4], "transform": [30.0, 0.0, 400_000.0, 0.0, -30.0, 6_000_000.0]},
    "crs": "EPSG:32633",
    "dem": [{"path": "dems/a.tif", "size": 12, "sha256": SHA}],
    "surface": None,
    "heights": {
        "metres_per_unit": 1.0,
        "unit_from": "assumed metres",
        "nodata": [None],
        "datum": "unstated",
        "void_height_m": None,
        "voids_set": 0,
        "overlap": None,
    },
    "observers": [
        {
            "name": "Knoll",
            "x": 400_050.0,
            "y": 5_999_950.0,
            "ground_m": 100.0,
            "eye_height_m": 50.0,
            "eye_elevation_m": None,
            "target_height_m": 1.7,
            "range_m": 20_000.0,
            "sector_deg": SECTOR,
            "counts": COUNTS,
            "areas_m2": AREAS,
            "seen_share": 0.636,
            "range_on_known_ground": 0.5,
            "farthest_visible": {"x": 1.0, "y": 2.0, "distance_m": 90.0, "bearing_deg": 45.0},
            "bands": [
                {
                    "from_m": 0.0,
                    "to_m": 1000.0,
                    "visible_m2": 6300.5,
                    "hidden_m2": 2700.0,
                    "unresolved_m2": 900.0,
                }
            ],
        }
    ],
    "refraction": {"k": 0.13, "K": 1.149, "m": 0.065, "origin": "survey"},
    "geometry": {"error_m": 0.0, "error_cells": 0.0, "degree": 1},
    "counts": COUNTS,
    "areas_m2": AREAS,
    "farthest_visible": None,
    "warnings": [],
    "outputs": {},
}


def sections(**changes):
    """Give the sections of a record; a change replaces one of them."""
    return copy.deepcopy({**_SECTIONS, **changes})


def surface(*paths):
    """Give a section ``surface``."""
    files = [{"path": path, "size": 9, "sha256": SHA} for path in paths]
    return {"method": "bilinear", "files": files, "median_over_ground_m": 3.5}
