"""Rasters for the tests, made on the spot."""

from pathlib import Path

import numpy as np
import pytest
import rasterio
from affine import Affine


@pytest.fixture
def make_dem(tmp_path):
    """Give a function that writes an elevation grid and returns its path."""

    def make(name="dem.tif", array=None, **options):
        heights = np.arange(12 * 10, dtype=np.float32).reshape(12, 10) if array is None else array
        transform = options.pop("transform", Affine(30, 0, 400_000, 0, -30, 6_000_000))
        unit, scale, offset = (options.pop(k, None) for k in ("unit", "scale", "offset"))
        mask = options.pop("mask", None)
        crs = options.pop("crs", "EPSG:32633")
        stack = heights if heights.ndim == 3 else heights[None]
        path = Path(tmp_path, name)
        with (
            rasterio.Env(GDAL_PAM_ENABLED="NO", GDAL_TIFF_INTERNAL_MASK="YES"),
            rasterio.open(
                path,
                "w",
                driver=options.pop("driver", "GTiff"),
                height=stack.shape[1],
                width=stack.shape[2],
                count=stack.shape[0],
                dtype=stack.dtype.name,
                crs=crs,
                transform=transform,
                **options,
            ) as file,
        ):
            file.write(stack)
            if unit is not None:
                file.set_band_unit(1, unit)
            if scale is not None:
                file.scales = (scale,)
            if offset is not None:
                file.offsets = (offset,)
            if mask is not None:
                file.write_mask(mask)
        return path

    return make


@pytest.fixture
def tiles(make_dem, tmp_path):
    """Folder of six tiles, 2 by 3, and their whole."""
    whole = np.random.default_rng(1).random((40, 60)).astype(np.float32)
    north_up = Affine(30, 0, 400_000, 0, -30, 6_000_000)
    folder = tmp_path / "tiles"
    folder.mkdir()
    for r in (0, 20):
        for c in (0, 20, 40):
            part = whole[r : r + 20, c : c + 20]
            place = north_up @ Affine.translation(c, r)
            make_dem(f"tiles/{r:02d}-{c:02d}.tif", part, transform=place)
    return folder, whole
