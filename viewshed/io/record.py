"""The record of a run: everything needed to run it again and to know its files.

The record is JSON with sorted keys. It holds no durations and no absolute paths; dates only where
the caller puts them. A folder whose record and files agree holds a whole result.
"""

import json
import math
import os
from collections.abc import Mapping
from importlib import metadata
from pathlib import Path
from typing import Any

from viewshed.constants import CAUTIONS
from viewshed.errors import DataError, OutputError
from viewshed.io._atomic import RECORD_FORMAT, RECORD_NAME, file_sha256, is_plain_name

#: Sections that a record must hold, with their JSON type.
_SECTIONS: dict[str, type] = {
    "format": str,
    "version": str,
    "question": str,
    "options": dict,
    "crs": str,
    "grid": dict,
    "dem": list,
    "observer": dict,
    "refraction": dict,
    "geometry": dict,
    "counts": dict,
    "areas_m2": dict,
    "warnings": list,
    "outputs": dict,
    "libraries": dict,
    "cautions": list,
}
_LIBRARIES = ("affine", "numba", "numpy", "pyproj", "rasterio")


def library_versions() -> dict[str, str]:
    """Give the versions of the libraries that the numbers depend on, without importing them."""
    found = {}
    for name in _LIBRARIES:
        try:
            found[name] = metadata.version(name)
        except metadata.PackageNotFoundError:
            continue
    return found


def relative_path(path: str | os.PathLike[str], folder: str | os.PathLike[str]) -> str:
    """Give a path as seen from a folder, with forward slashes; only its name if that fails."""
    try:
        return Path(os.path.relpath(path, folder)).as_posix()
    except ValueError:
        return Path(path).name


def build_record(
    sections: Mapping[str, Any], *, folder: str | os.PathLike[str] | None = None
) -> dict[str, Any]:
    """Put a record together from its sections.

    Parameters
    ----------
    sections : mapping
        ``version``, ``question``, ``options``, ``crs`` (WKT), ``grid``, ``dem`` (list of ``path``,
        ``size`` [bytes], ``sha256``), ``observer``, ``refraction``, ``geometry``, ``counts``,
        ``areas_m2`` [m2], ``warnings``, ``outputs`` and whatever else belongs. ``format``,
        ``libraries`` and ``cautions`` are added where missing.
    folder : path, optional
        Folder the record will lie in; the paths of the elevation files become relative to it.

    Returns
    -------
    dict
        Plain JSON values: numpy numbers and arrays, tuples and paths are turned into them, a
        number that is not finite becomes None.

    Raises
    ------
    ValueError
        If a section is missing or of the wrong type: a mistake in the calling code.
    """
    filled = {
        "format": RECORD_FORMAT,
        "libraries": library_versions(),
        "cautions": CAUTIONS,
        **sections,
    }
    record: dict[str, Any] = _plain(filled)
    if folder is not None:
        for entry in record.get("dem", []):
            entry["path"] = relative_path(entry["path"], folder)
    problem = _problem(record)
    if problem:
        raise ValueError(problem)
    return record


def write_record(path: str | os.PathLike[str], record: Mapping[str, Any]) -> None:
    """Write a record as JSON and read it back.

    Raises
    ------
    OutputError
        If it cannot be written whole; nothing is left behind.
    """
    target = Path(path)
    text = json.dumps(_plain(record), indent=2, sort_keys=True, ensure_ascii=False) + "\n"
    data = text.encode("utf-8", "backslashreplace")
    try:
        target.write_bytes(data)
        if target.read_bytes() == data:
            return
        reason = "it does not read back as it was written"
    except OSError as error:
        reason = error.strerror or str(error)
    target.unlink(missing_ok=True)
    msg = f"{target}: the record cannot be written: {reason}; free some space or choose another"
    raise OutputError(msg)


def read_record(path: str | os.PathLike[str]) -> dict[str, Any]:
    """Read a record.

    Parameters
    ----------
    path : path
        The record, or the folder it lies in.

    Raises
    ------
    DataError
        If it is missing, is no record of viewshed, or lacks a section.
    """
    source = Path(path)
    if source.is_dir():
        source /= RECORD_NAME
    try:
        record = json.loads(source.read_bytes())
    except OSError as error:
        msg = f"{source}: the record cannot be read: {error.strerror or error}"
        raise DataError(msg) from error
    except ValueError as error:
        msg = f"{source}: is not JSON ({error}); run the map again"
        raise DataError(msg) from error
    problem = _problem(record)
    if problem:
        msg = f"{source}: {problem}; run the map again"
        raise DataError(msg)
    return dict(record)


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
    for name, kind in _SECTIONS.items():
        if not isinstance(record.get(name), kind):
            return f"the section {name!r} of the record is missing or not a {kind.__name__}"
    for name, entry in record["outputs"].items():
        if not is_plain_name(name) or not isinstance(entry, dict):
            return f"the record lists an output {name!r} that is not a file beside it"
        if not isinstance(entry.get("sha256"), str):
            return f"the record has no SHA-256 for {name!r}"
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
