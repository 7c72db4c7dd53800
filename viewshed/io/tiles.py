"""Finding the rasters that a user means: files, folders of tiles and patterns."""

import glob
import os
import warnings
from collections.abc import Sequence
from pathlib import Path

from viewshed.errors import DataError, ViewshedWarning
from viewshed.io._files import is_pattern
from viewshed.io._geotiff import Twins
from viewshed.io._header import is_foreign, is_result, read_header
from viewshed.io._index import Index
from viewshed.io.mosaic import Header

PathLike = str | os.PathLike[str]

#: Last suffixes of files that lie beside rasters and are none, or only pictures of them.
_SIDE = {
    *("aux", "xml", "ovr", "msk", "rrd", "hdr", "prj", "wld", "clr", "stx", "vat", "idx"),
    *("txt", "md", "html", "htm", "pdf", "doc", "docx", "odt", "rtf", "log", "xls", "xlsx"),
    *("json", "geojson", "csv", "tsv", "kml", "kmz", "gml", "gfs", "yml", "yaml", "ini", "toml"),
    *("shp", "shx", "dbf", "cpg", "sbn", "sbx", "qix", "qmd", "qml", "qgz", "qgs", "sld", "lyr"),
    *("lyrx", "fgb", "parquet", "png", "jpg", "jpeg", "gif", "bmp", "webp", "svg", "md5", "sha256"),
    *("py", "sh", "bat", "ps1", "ipynb", "exe", "tmp", "part", "crdownload", "lock", "db"),
}
#: Last suffixes of files that are rasters if they are anything.
_RASTER = {
    *("tif", "tiff", "vrt", "asc", "hgt", "dt0", "dt1", "dt2", "img", "bil", "flt", "grd", "adf"),
    *("nc", "dem", "jp2", "sdat", "bt", "ter", "xyz", "gtx"),
}
#: Number of files from which on it pays to look for those that say the same.
_MANY = 50


def find(paths: Sequence[PathLike]) -> tuple[list[Path], set[str]]:
    """Find the files that paths, folders and patterns stand for.

    Parameters
    ----------
    paths : sequence of path
        Files, folders of tiles (what lies in their own folders is left out), and patterns with
        ``*``, ``?``, ``[...]`` or ``**``.

    Returns
    -------
    files : list of pathlib.Path
        Each file once, in the order given; those of a folder or pattern by name.
    found : set of str
        Those of them that were not named one by one and so need not be rasters.

    Raises
    ------
    DataError
        If a pattern matches nothing, or a folder holds no file that may be a raster.
    """
    files: dict[str, Path] = {}
    folders: dict[str, str] = {}
    found: set[str] = set()
    for given in paths:
        path = Path(given)
        if path.is_dir():
            members = _members(path)
            found.update(map(str, members))
        elif not is_pattern(path):
            members = [path]
        else:
            members = _matches(str(path))
            found.update(map(str, members))
        for member in members:
            folder, name = os.path.split(member)
            if folder not in folders:
                folders[folder] = os.path.abspath(folder)  # noqa: PTH100 - links stay links
            files.setdefault(f"{folders[folder]}/{name}", member)
    return list(files.values()), found


def _members(folder: Path) -> list[Path]:
    """List the files of a folder that may be rasters, by name."""
    try:
        with os.scandir(folder) as entries:
            names = sorted(entry.name for entry in entries if not entry.is_dir())
    except OSError as error:
        msg = f"{folder}: cannot be listed: {error.strerror or error}"
        raise DataError(msg) from error
    if "hdr.adf" in names:
        return [folder / "hdr.adf"]
    members = [folder / name for name in names if _may_be_raster(name)]
    if not members:
        msg = (
            f"{folder}: holds no elevation raster; name the folder that does, or a pattern like "
            f"{folder / '**' / '*.tif'}"
        )
        raise DataError(msg)
    return members


def _matches(pattern: str) -> list[Path]:
    names = glob.glob(pattern, recursive=True)  # noqa: PTH207 - a pattern may be absolute
    matches = [Path(name) for name in sorted(names)]
    members: list[Path] = []
    for path in matches:
        if not path.is_dir():
            members += [path] if _may_be_raster(path.name) else []
        elif "**" not in pattern:
            members += _members(path)
    if not members:
        told = "matches no raster" if matches else "matches no file"
        msg = f"{pattern}: {told}; check the pattern"
        raise DataError(msg)
    return members


def _may_be_raster(name: str) -> bool:
    suffix = name.rpartition(".")[2].lower() if "." in name else ""
    is_world = len(suffix) in {3, 4} and suffix.endswith("w") and suffix not in _RASTER
    return not name.startswith((".", "~")) and suffix not in _SIDE and not is_world


def read_headers(files: Sequence[Path], found: set[str], index: Index) -> list[Header]:
    """Read the headers of files, or take them from an index.

    Call it inside `reading_env`.

    Parameters
    ----------
    files : sequence of pathlib.Path
        The files, from `find`.
    found : set of str
        Those that need not be rasters: what no format knows and has no suffix of a raster is
        passed over, and so are results of viewshed, with a warning.
    index : Index
        Headers that are known already.

    Returns
    -------
    list of Header
        One a raster, in the order of the files. Virtual rasters that only repeat other files
        found are left out.

    Raises
    ------
    DataError
        If a raster cannot be used, or none is left.
    """
    headers: list[Header] = []
    results = []
    twins = Twins() if len(files) > _MANY else None
    for path in files:
        header = index.get(path)
        if header is None and twins is not None:
            header = twins.get(path)
        if header is None:
            try:
                header = read_header(path)
            except DataError:
                may_skip = str(path) in found
                if may_skip and path.suffix[1:].lower() not in _RASTER and is_foreign(path):
                    continue
                if may_skip and is_result(path):
                    results.append(path)
                    continue
                raise
            if twins is not None:
                twins.learn(header)
        headers.append(header)
    if results:
        more = f" and {len(results) - 1} more" if len(results) > 1 else ""
        msg = f"{results[0]}{more}: result of viewshed and no elevation; left out"
        warnings.warn(msg, ViewshedWarning, stacklevel=3)
    headers = _without_repeats(headers, found)
    if not headers:
        msg = f"{files[0]}: neither it nor any file beside it is an elevation raster; name one"
        raise DataError(msg)
    return headers


def _without_repeats(headers: list[Header], found: set[str]) -> list[Header]:
    """Leave out virtual rasters that were found beside all the files they are made of."""
    if not any(h.driver == "VRT" and str(h.path) in found for h in headers):
        return headers
    real = {os.path.realpath(h.path) for h in headers if h.driver != "VRT"}
    return [
        h
        for h in headers
        if not (
            h.driver == "VRT"
            and str(h.path) in found
            and h.pieces
            and all(os.path.realpath(piece.path) in real for piece in h.pieces)
        )
    ]
