"""What no program for this job can do without: the yardstick of the whole process.

    python _bench_plain.py DEM ANSWER OUT THREADS

Reads an elevation grid, hashes its file, and writes an answer of the same size (an array of bytes
kept by numpy) as a Cloud Optimized GeoTIFF with overviews.
"""

import hashlib
import sys
from pathlib import Path

import click  # noqa: F401 - loaded since the program loads it
import numba  # noqa: F401
import numpy as np
import pyproj  # noqa: F401
import rasterio


def main(dem, answer, out, threads):
    """Read, hash and write.

    Parameters
    ----------
    dem, answer, out : path
        Elevation grid, array of bytes of its shape, and the file to write.
    threads : int
        Threads for unpacking and for packing.
    """
    with rasterio.open(dem, num_threads=threads) as file:
        file.read(1)
        place = {"crs": file.crs, "transform": file.transform}
    with Path(dem).open("rb") as raw:
        hashlib.file_digest(raw, "sha256")
    seen = np.load(answer, mmap_mode="r")
    rows, cols = seen.shape
    shape = {"height": rows, "width": cols, "count": 1, "dtype": "uint8", "nodata": 255}
    packing = {"compress": "DEFLATE", "level": 6, "blocksize": 512, "num_threads": threads}
    more = {"overview_resampling": "nearest"}
    with rasterio.open(out, "w", driver="COG", **shape, **place, **packing, **more) as made:
        made.write(seen, 1)


if __name__ == "__main__":
    main(*sys.argv[1:4], int(sys.argv[4]))
