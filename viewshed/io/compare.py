"""Two results of one question, file by file: same bytes, same values, or different."""

import json
from collections import Counter
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from pathlib import Path, PurePosixPath
from typing import Any

import geopandas
import numpy as np
import rasterio
import shapely
from rasterio.windows import Window

from viewshed.errors import DataError
from viewshed.io._files import file_sha256
from viewshed.io.raster import BLOCK, GDAL_ERRORS, gdal_env, gdal_message
from viewshed.io.stac import STAC_NAME

#: What is said of one file.
SAME_BYTES, SAME_VALUES, REDRAWN = "same-bytes", "same-values", "redrawn"
DIFFERENT, MISSING, NEW = "different", "missing", "new"
#: Words that make two results different.
WORSE = (DIFFERENT, MISSING)

_LAYERS = (".shp", ".gpkg", ".fgb", ".parquet")
#: Files beside a shapefile, which is read as a whole.
_BESIDE = (".shx", ".dbf", ".prj", ".cpg")


@dataclass(frozen=True)
class Comparison:
    """What became of one file of an earlier result.

    Attributes
    ----------
    name : str
        The file.
    word : str
        ``same-bytes``; ``same-values``: other bytes, same cells or polygons; ``redrawn``: a
        picture with other bytes, whose values are those of the rasters; ``different``;
        ``missing``: it was not made again; ``new``: the earlier result did not have it.
    told : str
        What differs; empty where nothing is to be said.
    """

    name: str
    word: str
    told: str = ""


def verdict(found: list[Comparison]) -> str:
    """Give the word for a result as a whole: same-bytes, same-values or different."""
    words = {one.word for one in found}
    if words & set(WORSE):
        return DIFFERENT
    return SAME_VALUES if words & {SAME_VALUES, REDRAWN} else SAME_BYTES


def compare_outputs(
    old: Mapping[str, Any], old_folder: Path, new: Mapping[str, Any], new_folder: Path
) -> list[Comparison]:
    """Compare the files that two records list.

    Parameters
    ----------
    old, new : mapping
        The records, as `viewshed.io.record.read_record` gives them.
    old_folder, new_folder : path
        Where they lie. The old files need not be there: without them nobody can say how much
        differs, only that something does.

    Returns
    -------
    list of Comparison
        One for each file, by name.

    Raises
    ------
    DataError
        If a file that is there cannot be read.
    """
    found = []
    for name in sorted({*old["outputs"], *new["outputs"]}):
        was, now = old["outputs"].get(name), new["outputs"].get(name)
        if now is None:
            found.append(Comparison(name, MISSING, "was not made again"))
        elif was is None:
            found.append(Comparison(name, NEW, "the earlier result did not have it"))
        else:
            found.append(_compare(name, was, now, (old_folder, new_folder)))
    return [_following(one, found) for one in found]


def _following(one: Comparison, found: list[Comparison]) -> Comparison:
    """Call an item different where it describes files that are."""
    others = [other.name for other in found if other.word in {DIFFERENT, MISSING}]
    if one.name != STAC_NAME or one.word != SAME_VALUES or not others:
        return one
    return Comparison(one.name, DIFFERENT, f"it describes {others[0]}, which is not the same")


def _compare(
    name: str, was: Mapping[str, Any], now: Mapping[str, Any], folders: tuple[Path, Path]
) -> Comparison:
    if was["sha256"] == now["sha256"]:
        return Comparison(name, SAME_BYTES)
    cells = was.get("pixel_sha256")
    if cells is not None and cells == now.get("pixel_sha256"):
        return Comparison(name, SAME_VALUES, "other bytes, the same cells")
    suffix = PurePosixPath(name).suffix
    if suffix == ".png":
        return Comparison(name, REDRAWN, "the picture has other bytes; its values are the rasters'")
    gone = _gone(folders[0] / name, was["sha256"])
    if gone:
        return Comparison(name, DIFFERENT, f"how much is not known: {gone}")
    read = _reader(name, suffix)
    told = read(folders[0] / name, folders[1] / name)
    if told is None:
        why = "the same item; its links lead from another folder" if name == STAC_NAME else ""
        return Comparison(name, SAME_VALUES, why or "other bytes, the same content")
    return Comparison(name, DIFFERENT, told)


def _gone(path: Path, sha256: str) -> str | None:
    """Say why an old file cannot be compared with, or give None."""
    try:
        if file_sha256(path) == sha256:
            return None
    except FileNotFoundError:
        return "the old file is no longer beside its record"
    except OSError as error:
        return f"the old file cannot be read: {error.strerror or error}"
    return "the old file is no longer the one of its record"


def _reader(name: str, suffix: str) -> Callable[[Path, Path], str | None]:
    if suffix == ".tif":
        return _cells
    if suffix in (*_LAYERS, *_BESIDE):
        return _features
    return _item if name == STAC_NAME else _lines


# --- how two files differ; None where their values do not ---------------------------------------


def _cells(old: Path, new: Path) -> str | None:
    """Compare two rasters cell by cell."""
    try:
        with gdal_env(), rasterio.open(old) as was, rasterio.open(new) as now:
            if was.shape != now.shape or was.transform != now.transform:
                return (
                    f"the grid is another: {now.height} rows, {now.width} columns, "
                    f"was {was.height} rows, {was.width} columns"
                )
            unit = now.units[0] or ""
            count, largest = 0, 0.0
            for first in range(0, was.height, BLOCK):
                rows = min(BLOCK, was.height - first)
                window = Window(0, first, was.width, rows)
                one, two = (file.read(1, window=window) for file in (was, now))
                differ = (one != two) & ~(_unknown(one) & _unknown(two))
                count += int(differ.sum())
                gap = np.abs(one[differ].astype(np.float64) - two[differ].astype(np.float64))
                largest = max(largest, float(np.nanmax(gap, initial=0.0)))
    except GDAL_ERRORS as error:
        msg = f"{old} or {new}: cannot be read: {gdal_message(error)}"
        raise DataError(msg) from error
    if count == 0:
        return None
    told = f"{count:,} of {was.height * was.width:,} cells differ"
    return f"{told}, by up to {largest:.3g} {unit}" if unit else told


def _unknown(cells: Any) -> Any:
    return np.isnan(cells) if cells.dtype.kind == "f" else np.zeros(cells.shape, bool)


def _features(old: Path, new: Path) -> str | None:
    """Compare two layers of polygons, in whatever order they are."""
    was, now = (_rows(path) for path in (old, new))
    fewer, more = was - now, now - was
    count = max(fewer.total(), more.total())
    if count == 0:
        return None
    return f"{count:,} of {max(was.total(), now.total()):,} polygons differ"


def _rows(path: Path) -> "Counter[tuple[object, ...]]":
    main = path.with_suffix(".shp") if path.suffix in _BESIDE else path
    try:
        read = geopandas.read_parquet if main.suffix == ".parquet" else geopandas.read_file
        frame = read(main)
    except (OSError, RuntimeError, ValueError) as error:
        msg = f"{main}: cannot be read: {' '.join(str(error).split())}"
        raise DataError(msg) from error
    table = frame.drop(columns=frame.geometry.name)
    shapes = shapely.to_wkb(shapely.normalize(frame.geometry.array))
    columns = [(name, *(_plain(value) for value in table[name])) for name in sorted(table)]
    crs = None if frame.crs is None else frame.crs.to_wkt()
    heads = (crs, *(column[0] for column in columns))
    return Counter(
        (heads, shape, *(column[row + 1] for column in columns)) for row, shape in enumerate(shapes)
    )


def _plain(value: Any) -> object:
    """Give a value that equals itself, also where it is not a number."""
    return None if value is None or value != value else value  # noqa: PLR0124


def _item(old: Path, new: Path) -> str | None:
    """Compare two STAC items but for their words and what follows from place, program and bytes."""
    was, now = (_bare(json.loads(path.read_bytes())) for path in (old, new))
    names = sorted({*was, *now})
    differ = [name for name in names if was.get(name) != now.get(name)]
    return f"other {', '.join(differ)}" if differ else None


def _bare(item: dict[str, Any]) -> dict[str, Any]:
    words = ("title", "description", "processing:")
    facts = {k: v for k, v in item["properties"].items() if not k.startswith(words)}
    assets = {
        name: {k: v for k, v in asset.items() if not k.startswith("file:")}
        for name, asset in item["assets"].items()
    }
    kept = {k: v for k, v in item.items() if k not in {"id", "links"}}
    return {**kept, "properties": facts, "assets": assets}


def _lines(old: Path, new: Path) -> str | None:
    """Compare two texts line by line."""
    was, now = (Counter(path.read_bytes().splitlines()) for path in (old, new))
    count = max((was - now).total(), (now - was).total())
    return f"{count:,} lines differ" if count else None


# --- why ----------------------------------------------------------------------------------------


def changes(old: Mapping[str, Any], new: Mapping[str, Any]) -> list[tuple[str, str, str]]:
    """List what changed between two runs and may move a byte or a value.

    Parameters
    ----------
    old, new : mapping
        The records.

    Returns
    -------
    list of tuple
        What, as it was and as it is: viewshed, Python, processor, machine, system, libraries.
    """
    facts = [
        {"viewshed": record["version"], **record["platform"], **record["libraries"]}
        for record in (old, new)
    ]
    was, now = facts
    names = [*was, *(name for name in now if name not in was)]
    pairs = [(name, was.get(name, "none"), now.get(name, "none")) for name in names]
    return [pair for pair in pairs if pair[1] != pair[2]]
