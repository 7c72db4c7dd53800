"""Headers of tiles, kept in a file between runs.

An entry counts only while the tile and the files that belong to it have the size and the time that
they had, and a tile is compared with its header again when it is read.
"""

import hashlib
import json
import os
import uuid
import warnings
from collections.abc import Iterable
from math import isfinite
from pathlib import Path
from typing import Any

import rasterio
from affine import Affine

from viewshed._version import __version__
from viewshed.errors import OutputError, ViewshedWarning
from viewshed.io._header import file_state
from viewshed.io.mosaic import Header

_FORMAT = "viewshed index of tiles"
#: What stands between the head of an index, which tells whether the body is whole, and the body.
_BODY = ',"body":'


class _Names:
    """Names of files relative to the folder of an index, where that can be."""

    def __init__(self, index: Path | None) -> None:
        self._folder = os.path.abspath(index.parent if index else "")  # noqa: PTH100
        self._relative: dict[str, str] = {}

    def name(self, path: Path) -> str:
        parent, name = os.path.split(path)
        if parent not in self._relative:
            try:
                place = Path(os.path.relpath(parent or ".", self._folder))
            except ValueError:  # pragma: no cover  (another drive of Windows)
                place = Path(parent).absolute()
            self._relative[parent] = place.as_posix()
        return f"{self._relative[parent]}/{name}"

    def path(self, name: str) -> Path:
        return Path(os.path.normpath(os.path.join(self._folder, name)))  # noqa: PTH118


class _Siblings:
    """Files that share the beginning of their names with a tile, and so may belong to it."""

    def __init__(self) -> None:
        self._folders: dict[str, dict[str, list[str]]] = {}

    def of(self, path: Path) -> list[str]:
        """Give their names, those of folders listed once."""
        folder, name = os.path.split(path)
        if folder not in self._folders:
            self._folders[folder] = _by_stem(folder or ".")
        return [other for other in self._folders[folder].get(_stem(name), []) if other != name]


def _by_stem(folder: str) -> dict[str, list[str]]:
    found: dict[str, list[str]] = {}
    try:
        names = sorted(os.listdir(folder))  # noqa: PTH208 - ten times faster
    except OSError:
        return {}
    for name in names:
        found.setdefault(_stem(name), []).append(name)
    return found


def _stem(name: str) -> str:
    return name.partition(".")[0].lower()


class Index:
    """Headers of tiles from an index file.

    Parameters
    ----------
    path : path, optional
        The file; it need not exist. One that is damaged or no index is not used, with a warning.
    """

    def __init__(self, path: str | os.PathLike[str] | None = None) -> None:
        self._names = _Names(None if path is None else Path(path))
        self._siblings = _Siblings()
        self._entries: dict[str, Any] = {}
        self._wkts: list[str] = []
        if path is not None and os.path.lexists(path):
            self._load(Path(path))

    def _load(self, path: Path) -> None:
        try:
            body = _body(path)
            if body["made_by"] == _made_by():
                self._entries, self._wkts = body["tiles"], body["crs"]
        except (OSError, ValueError, KeyError, TypeError) as error:
            why = error.strerror if isinstance(error, OSError) else "no index, or damaged"
            msg = f"{path}: is not used as index of tiles ({why}); their headers are read instead"
            warnings.warn(msg, ViewshedWarning, stacklevel=5)

    def get(self, path: Path) -> Header | None:
        """Give the header of a tile, None if it is not known or may have changed."""
        if not self._entries:
            return None
        entry = self._entries.get(self._names.name(path))
        if entry is None:
            return None
        files = (path, *(self._names.path(name) for name in entry["beside"]))
        states = tuple(file_state(file) for file in files)
        if states != tuple(map(tuple, entry["states"])):
            return None
        if self._siblings.of(path) != entry["siblings"]:
            return None  # a file that came or went may say something of the tile
        nodata = entry["nodata"]
        return Header(
            path=path,
            driver=entry["driver"],
            shape=(entry["shape"][0], entry["shape"][1]),
            transform=Affine(*entry["transform"]),
            own_wkt=self._wkts[entry["crs"]],
            dtype=entry["dtype"],
            block=(entry["block"][0], entry["block"][1]),
            nodata=None if nodata is None else float(nodata),
            is_compressed=entry["is_compressed"],
            is_masked=entry["is_masked"],
            scale=entry["scale"],
            offset=entry["offset"],
            unit=entry["unit"],
            files=files,
            states=tuple((state[0], state[1]) for state in entry["states"]),
        )


def save(path: str | os.PathLike[str], headers: Iterable[Header]) -> None:
    """Write an index file, whole or not at all.

    Parameters
    ----------
    path : path
        The file; an index that is there is replaced. Tiles are named relative to its folder where
        that can be.
    headers : iterable of Header
        What to keep. Virtual rasters are left out: what they say depends on many files.

    Raises
    ------
    OutputError
        If the file cannot be written, or is there and no index.
    """
    final = Path(path)
    names, siblings = _Names(final), _Siblings()
    wkts: dict[str, int] = {}
    tiles = {}
    for header in headers:
        if not header.pieces:
            number = wkts.setdefault(header.own_wkt, len(wkts))
            entry = _entry(header, number, names)
            tiles[names.name(header.path)] = entry | {"siblings": siblings.of(header.path)}
    body = _text({"made_by": _made_by(), "crs": list(wkts), "tiles": tiles})
    head = _text({"format": _FORMAT, "sha256": hashlib.sha256(body.encode()).hexdigest()})
    _refuse_foreign(final)
    draft = final.with_name(f".{final.name}-{os.getpid()}-{uuid.uuid4().hex[:8]}")
    try:
        draft.write_text(f"{head[:-1]}{_BODY}{body}}}", encoding="utf-8")
        draft.replace(final)
    except OSError as error:
        msg = f"{final}: cannot be written: {error.strerror or error}; choose another place for it"
        raise OutputError(msg) from error
    finally:
        draft.unlink(missing_ok=True)


def _refuse_foreign(path: Path) -> None:
    if not os.path.lexists(path):
        return
    try:
        with path.open(encoding="utf-8") as file:
            is_ours = _FORMAT in file.read(4096)
    except (OSError, ValueError):
        is_ours = False
    if not is_ours:
        msg = f"{path}: exists and is no index of tiles; choose another name for the index"
        raise OutputError(msg)


def _body(path: Path) -> dict[str, Any]:
    """Read the body of an index; one that is not whole raises."""
    head, _, rest = path.read_bytes().partition(_BODY.encode())
    told, body = json.loads(head + b"}"), rest[:-1]
    if told != {"format": _FORMAT, "sha256": hashlib.sha256(body).hexdigest()}:
        raise ValueError
    found: dict[str, Any] = json.loads(body)
    return found


def _entry(header: Header, crs: int, names: _Names) -> dict[str, Any]:
    nodata = header.nodata
    return {
        "driver": header.driver,
        "shape": header.shape,
        "transform": tuple(header.transform)[:6],
        "crs": crs,
        "dtype": header.dtype,
        "block": header.block,
        "nodata": nodata if nodata is None or isfinite(nodata) else str(nodata),
        "is_compressed": header.is_compressed,
        "is_masked": header.is_masked,
        "scale": header.scale,
        "offset": header.offset,
        "unit": header.unit,
        "beside": [names.name(file) for file in header.files[1:]],
        "states": header.states,
    }


def _made_by() -> list[str]:
    """Name what a header depends on beside its file."""
    return [__version__, str(rasterio.__version__), str(rasterio.__gdal_version__)]


def _text(value: Any) -> str:
    return json.dumps(value, separators=(",", ":"), allow_nan=False)
