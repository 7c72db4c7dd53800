"""The record of a run: everything needed to run it again and to know its files.

The record is JSON with sorted keys; its shape is the JSON Schema `record_schema.json` beside this
module. It holds no dates, no durations and no absolute paths. A folder whose record and files
agree holds a whole result.
"""

import glob
import json
import math
import os
import platform
import re
from collections.abc import Iterator, Mapping
from contextlib import suppress
from functools import cache
from importlib import metadata, resources
from pathlib import Path, PurePosixPath
from typing import Any

import rasterio

from viewshed import geodesy
from viewshed.constants import CAUTIONS
from viewshed.errors import DataError
from viewshed.io._atomic import RECORD_FORMAT, RECORD_NAME
from viewshed.io._files import file_sha256, has_wildcard, is_pattern, is_plain_name, write_text
from viewshed.io._schema import problem

try:
    from llvmlite.binding import get_host_cpu_name
except (ImportError, OSError):  # pragma: no cover  (numba brings it)
    get_host_cpu_name = None

#: Version of the shape of the record; a record without one is of version 1.
FORMAT_VERSION = 2
_LIBRARIES = (
    "affine", "geopandas", "llvmlite", "matplotlib", "numba", "numpy", "pillow", "pyogrio",
    "pyproj", "rasterio", "shapely",
)  # fmt: skip


def schema() -> dict[str, Any]:
    """Give the JSON Schema (2020-12) of the record, with a description of every section."""
    return dict(json.loads(_schema_text()))


@cache
def _schema_text() -> str:
    return (resources.files(__package__) / "record_schema.json").read_text(encoding="utf-8")


def library_versions() -> dict[str, str]:
    """Give the versions of the libraries that the results depend on.

    Returns
    -------
    dict of str to str
        Packages, and ``GDAL`` and ``PROJ`` as they read the rasters and measure the ground.
    """
    own = {"GDAL": str(rasterio.__gdal_version__), "PROJ": geodesy.proj_version()}
    return own | _package_versions()


@cache
def _package_versions() -> dict[str, str]:
    found = {}
    for name in _LIBRARIES:
        with suppress(metadata.PackageNotFoundError):
            found[name] = metadata.version(name)
    return found


def platform_facts() -> dict[str, str]:
    """Give machine, processor, Python and operating system, which may move a last bit.

    Returns
    -------
    dict of str to str
        ``machine``, ``processor`` (the one that the engine is compiled for), ``python`` and
        ``system``.
    """
    return {
        "machine": platform.machine() or "unknown",
        "processor": _processor(),
        "python": platform.python_version(),
        "system": platform.system() or "unknown",
    }


def _processor() -> str:
    """Give the name of the processor that numba compiles for."""
    stated = os.environ.get("NUMBA_CPU_NAME")
    if stated or get_host_cpu_name is None:
        return stated or platform.processor() or "unknown"
    return str(get_host_cpu_name())


def relative_path(path: str | os.PathLike[str], folder: str | os.PathLike[str]) -> str:
    """Give a path as seen from a folder, with forward slashes; only its name if that fails.

    Links on the way are followed, so that ``..`` leads where it should; the last name is kept.
    """
    given = Path(path)
    place = given.parent.resolve() / given.name
    try:
        return Path(os.path.relpath(place, Path(folder).resolve())).as_posix()
    except ValueError:
        return given.name


def relative_pattern(text: str, folder: str | os.PathLike[str]) -> str:
    """Give a path or pattern as seen from a folder; what is put before a pattern is no pattern."""
    path = Path(text)
    if not is_pattern(path):
        return relative_path(text, folder)
    first = next(i for i, part in enumerate(path.parts) if has_wildcard(part))
    start = relative_path(Path(*path.parts[:first]), folder)
    return PurePosixPath(glob.escape(start), *path.parts[first:]).as_posix()


def output_entry(path: str | os.PathLike[str], *, layer: str | None = None) -> dict[str, Any]:
    """Give what the section ``outputs`` says of a file that is no raster."""
    return {"sha256": file_sha256(path), "size": Path(path).stat().st_size, "layer": layer}


def build_record(
    sections: Mapping[str, Any], *, folder: str | os.PathLike[str] | None = None
) -> dict[str, Any]:
    """Put a record together from its sections.

    Parameters
    ----------
    sections : mapping
        The sections that `schema` describes. ``format``, ``format_version``, ``libraries``,
        ``platform`` and ``cautions`` are added where missing.
    folder : path, optional
        Folder the record will lie in; paths of input files become relative to it.

    Returns
    -------
    dict
        Plain JSON values: numpy numbers and arrays, tuples and paths are turned into them, a
        number that is not finite becomes None.

    Raises
    ------
    ValueError
        If a section is missing or not as the schema says: a mistake in the calling code.
    """
    filled = {
        "format": RECORD_FORMAT,
        "format_version": FORMAT_VERSION,
        "libraries": library_versions(),
        "platform": platform_facts(),
        "cautions": CAUTIONS,
        **sections,
    }
    record: dict[str, Any] = _plain(filled)
    wrong = _problem(record)
    if wrong:
        raise ValueError(wrong)
    if folder is not None:
        _make_relative(record, folder)
    return record


def _make_relative(record: dict[str, Any], folder: str | os.PathLike[str]) -> None:
    """Write the paths of all inputs as seen from a folder, in the warnings too."""
    moved: dict[str, str] = {}
    for holder, key in _paths(record):
        path = holder[key]
        moved[path] = holder[key] = relative_pattern(path, folder)
    longest_first = sorted(moved, key=len, reverse=True)
    # as a word of its own: "dem.tif" does not stand in "old/dem.tif" or "dem.tif.aux.xml"
    one_of = "|".join(map(re.escape, longest_first))
    paths = re.compile(rf"(?<![\w./\\-])({one_of})(?![\w/\\-]|\.\w)")
    record["warnings"] = [
        paths.sub(lambda found: moved[found[1]], text) for text in record["warnings"]
    ]


def _paths(record: dict[str, Any]) -> Iterator[tuple[Any, Any]]:
    """Yield the object or list and the key under which each path of an input stands."""
    options, heights = record["options"], record["heights"]
    files = [*record["dem"], *(record["surface"] or {"files": []})["files"]]
    for entry in [*files, *heights.get("void_mask_files", [])]:
        yield entry, "path"
    for names in (options["dem"], options.get("surface") or []):
        yield from ((names, index) for index in range(len(names)))
    single = (options, "void_mask"), (options, "observers_file")
    pair = heights.get("overlap") or {}
    for holder, key in (*single, (pair, "first"), (pair, "second")):
        if holder.get(key):
            yield holder, key


def write_record(path: str | os.PathLike[str], record: Mapping[str, Any]) -> None:
    """Write a record as JSON and read it back.

    Raises
    ------
    OutputError
        If it cannot be written whole; nothing is left behind.
    """
    text = json.dumps(_plain(record), indent=2, sort_keys=True, ensure_ascii=False)
    write_text(path, text + "\n")


def read_record(path: str | os.PathLike[str]) -> dict[str, Any]:
    """Read a record.

    Parameters
    ----------
    path : path
        The record, or the folder it lies in.

    Raises
    ------
    DataError
        If it is missing, is no record of viewshed, has another format version, or a section is
        missing or not as the schema says. Keys that the schema does not name are let pass.
    """
    source = Path(path)
    if source.is_dir():
        source /= RECORD_NAME
    try:
        record = json.loads(source.read_bytes(), parse_constant=_refuse_constant)
    except OSError as error:
        msg = f"{source}: the record cannot be read: {error.strerror or error}"
        raise DataError(msg) from error
    except (ValueError, RecursionError) as error:
        msg = f"{source}: is not JSON ({error}); run the map again"
        raise DataError(msg) from error
    wrong = _problem(record)
    if wrong:
        msg = f"{source}: {wrong}; run the map again"
        raise DataError(msg)
    return dict(record)


def _refuse_constant(name: str) -> None:
    msg = f"{name} is no number"
    raise ValueError(msg)


def mismatches(out_dir: str | os.PathLike[str]) -> list[str]:
    """Say where a folder's record and files disagree; an empty list means a whole result.

    Every file that the record lists is read in full and its SHA-256 compared.
    """
    folder = Path(out_dir)
    try:
        outputs = read_record(folder / RECORD_NAME)["outputs"]
    except DataError as error:
        return [str(error)]
    found = []
    for name in sorted(outputs):
        file = folder / name
        if not file.is_file():
            found.append(f"{file}: is missing")
        elif file_sha256(file) != outputs[name]["sha256"]:
            found.append(f"{file}: differs from the record")
    return found


def matching(out_dir: str | os.PathLike[str]) -> bool:
    """Tell whether a folder holds a record and all its files as the record says."""
    return not mismatches(out_dir)


def _problem(record: object) -> str | None:
    """Say in words why this is no record, or give None."""
    if not isinstance(record, dict) or record.get("format") != RECORD_FORMAT:
        return "is not a record of viewshed"
    version = record.get("format_version", 1)
    if version != FORMAT_VERSION:
        return f"the record has format version {version!r}, this viewshed reads {FORMAT_VERSION}"
    wrong = problem(record, schema())
    if wrong:
        return f"in the record {wrong}"
    for name in record["outputs"]:
        if not is_plain_name(name):
            return f"the record lists an output {name!r} that is not a file beside it"
    return None


def _plain(value: Any) -> Any:
    """Turn a value into what JSON can hold."""
    if isinstance(value, Mapping):
        return {str(k): _plain(v) for k, v in value.items()}
    if hasattr(value, "tolist"):
        return _plain(value.tolist())
    if isinstance(value, list | tuple):
        return [_plain(v) for v in value]
    if isinstance(value, float):
        return float(value) if math.isfinite(value) else None
    if isinstance(value, os.PathLike):
        return Path(value).as_posix()
    if value is None or isinstance(value, str | int):
        return value
    msg = f"{value!r} of type {type(value).__name__} cannot stand in a record"
    raise ValueError(msg)
