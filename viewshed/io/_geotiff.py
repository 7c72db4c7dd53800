"""Headers of GeoTIFFs that say the same as one that is known, but for where they lie.

Most of the time of opening a GeoTIFF goes into its CRS. In a folder of ten thousand tiles all say
the same of it, bit for bit; only their tie points differ. Such a tile gets the header of its twin,
moved. What cannot be told for sure is left to the raster library, and every tile is compared with
its header again when it is read.
"""

import os
import re
import struct
from pathlib import Path
from typing import NamedTuple

from affine import Affine

from viewshed.io._header import file_state
from viewshed.io.mosaic import Header

_START = 1 << 14
#: Bytes of one value, by the number of its type.
_SIZES = {1: 1, 2: 1, 3: 2, 4: 4, 5: 8, 6: 1, 7: 1, 8: 2, 9: 4, 10: 8, 11: 4, 12: 8, 13: 4, 16: 8,
          17: 8, 18: 8}  # fmt: skip
_SCALE, _TIE, _MATRIX, _METADATA = 33550, 33922, 34264, 42112
#: Tags that say where cells are in the file, and those for people.
_UNHEARD = {269, 270, 271, 272, 273, 279, 305, 306, 315, 316, 324, 325, 700, 33432}
#: Ends of names of files that change nothing in a GeoTIFF that says itself where it is.
_APART = (
    *(".tif", ".tiff", ".tfw", ".tifw", ".prj", ".ovr", ".md5", ".sha256", ".jpg", ".png"),
    *(".html", ".pdf", ".json", ".csv"),
)
_STATISTICS = re.compile(rb'<Item name="STATISTICS_[^>]*>[^<]*</Item>\s*')
#: Most directories of a file that are followed; each holds a coarser copy or a mask.
_MOST_DIRECTORIES = 64

Key = tuple[object, ...]


class _Parsed(NamedTuple):
    """What a GeoTIFF says, and the tie point: column, row, x and y."""

    key: Key
    tie: tuple[float, float, float, float]


class Twins:
    """Headers of GeoTIFFs by what they say.

    Files that have others beside them which may belong to them are left to the raster library.
    """

    def __init__(self) -> None:
        self._known: dict[Key, tuple[Header, float]] = {}
        self._pending: tuple[Path, _Parsed] | None = None
        self._beside: dict[str, set[str]] = {}

    def get(self, path: Path) -> Header | None:
        """Give the header of a GeoTIFF that has a known twin, else None."""
        self._pending = None
        if path.suffix.lower() not in {".tif", ".tiff"} or self._has_companions(path):
            return None
        state, parsed = file_state(path), _parse(path)
        if state is None or parsed is None:
            return None
        if parsed.key not in self._known:
            self._pending = path, parsed
            return None
        twin, shift = self._known[parsed.key]
        transform = _moved(twin.transform, parsed.tie, shift)
        own = {"path": path, "files": (path,), "states": (state,), "transform": transform}
        return Header(**(vars(twin) | own))

    def learn(self, header: Header) -> None:
        """Keep a header that the raster library gave, for the twins of its file."""
        if self._pending is None or self._pending[0] != header.path:
            return
        parsed = self._pending[1]
        for shift in (0.0, 0.5):
            fits = _moved(header.transform, parsed.tie, shift) == header.transform
            if fits and header.driver == "GTiff" and header.files == (header.path,):
                self._known[parsed.key] = header, shift

    def _has_companions(self, path: Path) -> bool:
        """Tell whether a file lies beside another that may belong to it."""
        folder, name = os.path.split(path)
        if folder not in self._beside:
            self._beside[folder] = _stems(folder or ".")
        stem = name.rpartition(".")[0].lower()
        return stem in self._beside[folder]


def _stems(folder: str) -> set[str]:
    """Give the beginnings of the names of files in a folder that may belong to a GeoTIFF."""
    try:
        names = [name.lower() for name in os.listdir(folder)]  # noqa: PTH208 - ten times faster
    except OSError:
        return set()
    return {
        name[:i]
        for name in names
        if not name.endswith(_APART)
        for i, letter in enumerate(name)
        if letter in "._"
    }


def _moved(transform: Affine, tie: tuple[float, float, float, float], shift: float) -> Affine:
    """Put a north-up grid at a tie point, as the raster library does to the last bit."""
    a, e = transform.a, transform.e
    x, y = tie[2] - tie[0] * a, tie[3] - tie[1] * e
    return Affine(a, 0.0, x - a * shift, 0.0, e, y - e * shift)


# --- the bytes ----------------------------------------------------------------------------------


class _Bytes:
    """An open file with its beginning in memory."""

    def __init__(self, handle: int) -> None:
        self._handle = handle
        self._start = os.read(handle, _START)
        self.order = {b"II": "<", b"MM": ">"}.get(self._start[:2], "")
        magic = self.unpack("H", 2)[0] if self.order else 0
        self.is_big = magic == 43
        self.is_tiff = magic in {42, 43}

    def read(self, offset: int, size: int) -> bytes:
        if offset + size <= len(self._start):
            return self._start[offset : offset + size]
        os.lseek(self._handle, offset, os.SEEK_SET)
        return os.read(self._handle, size)

    def unpack(self, form: str, offset: int) -> tuple[int, ...]:
        form = self.order + form
        return struct.unpack(form, self.read(offset, struct.calcsize(form)))


def _parse(path: Path) -> _Parsed | None:
    """Read what a GeoTIFF says; None where it is unlike most."""
    try:
        handle = os.open(path, os.O_RDONLY | getattr(os, "O_BINARY", 0))
        try:
            return _parsed(_Bytes(handle))
        finally:
            os.close(handle)
    except (OSError, struct.error, KeyError, OverflowError):
        return None


def _parsed(data: _Bytes) -> _Parsed | None:
    if not data.is_tiff:
        return None
    offset = data.unpack("Q", 8)[0] if data.is_big else data.unpack("I", 4)[0]
    said: list[object] = [data.order, data.is_big]
    ties: list[tuple[float, ...]] = []
    for number in range(_MOST_DIRECTORIES):
        entries, offset = _directory(data, offset)
        for tag, kind, count, place in entries:
            if tag in _UNHEARD:
                continue
            value = data.read(place, count * _SIZES[kind])
            if tag == _MATRIX:
                return None
            if tag == _TIE and number == 0:
                if kind != 12 or count != 6:
                    return None
                tie = struct.unpack(data.order + "6d", value)
                ties.append(tie)
                value = struct.pack("2d", tie[2], tie[5])
            elif tag == _METADATA:
                value = _STATISTICS.sub(b"", value)
                count = 0  # noqa: PLW2901 - its length is no news
            said.append((number, tag, kind, count, value))
        if offset == 0:
            break
    else:
        return None
    if len(ties) != 1 or not any(isinstance(s, tuple) and s[:2] == (0, _SCALE) for s in said):
        return None
    i, j, _, x, y, _ = ties[0]
    return _Parsed(tuple(said), (i, j, x, y))


def _directory(data: _Bytes, offset: int) -> tuple[list[tuple[int, int, int, int]], int]:
    """Read a directory: tag, type, number and place of each value, and where the next one is."""
    head, form, step = ("Q", "HHQ", 20) if data.is_big else ("H", "HHI", 12)
    count = data.unpack(head, offset)[0]
    first = offset + struct.calcsize("<" + head)
    word = "Q" if data.is_big else "I"
    entries = [_entry(data, first + n * step, form, word) for n in range(min(count, 4096))]
    return entries, data.unpack(word, first + count * step)[0]


def _entry(data: _Bytes, at: int, form: str, word: str) -> tuple[int, int, int, int]:
    tag, kind, count = data.unpack(form, at)
    place = at + struct.calcsize("<" + form)
    if count * _SIZES[kind] > struct.calcsize("<" + word):
        place = data.unpack(word, place)[0]
    return tag, kind, count, place
