"""Room for the arrays of a run: memory, and beyond that scratch files mapped into it.

A scratch file has no name and goes away with its arrays, however the process ends. The system
counts every mapped page that was touched as memory of the process until it is given back; a thread
gives them back whenever the process comes near its limit. They stay in the file, so every array
keeps what it holds and whoever works on it notices nothing.
"""

import contextlib
import errno
import mmap
import os
import tempfile
import threading
import time
import weakref
from collections.abc import Hashable, Iterator
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import DTypeLike, NDArray

from viewshed.errors import MemoryLimitError, OutputError
from viewshed.io._memory import resident_memory, told_size

__all__ = ["Room", "can_map"]

#: Arrays under this many bytes are never put into a file.
_SMALL = 1 << 20
#: Share of the memory for arrays that arrays in memory may take where some are in files.
_IN_MEMORY_SHARE = 0.5
#: Bytes under the limit at which mapped pages are given back, and the greatest share of the limit:
#: what is touched until that is done.
_SLACK, _SLACK_SHARE = 320 << 20, 1 / 6
#: Fewest mapped bytes that are worth giving back.
_WORTH = 32 << 20
#: How fast pages come in at most, about [bytes/s] (touching one brings its neighbours), and the
#: shortest and longest nap [s].
_PACE, _SHORTEST, _LONGEST = 5e10, 0.001, 0.05


def can_map() -> bool:
    """Tell whether this system can keep arrays in scratch files within a bound."""
    return (
        hasattr(os, "posix_fallocate")
        and hasattr(mmap, "MADV_DONTNEED")
        and resident_memory() is not None
    )


class Room:
    """Gives arrays, in memory while they fit and in scratch files beyond.

    Parameters
    ----------
    limit : int
        Bytes that the whole process may take.
    share : float
        Those of them that are left for arrays [bytes].
    need : float
        What the arrays of the run take together [bytes]. All are in memory if this fits.
    folder : path, optional
        Where scratch files are made. Default: the system's folder for temporary files.

    Attributes
    ----------
    is_mapped : bool
        Whether large arrays are in files.
    """

    def __init__(
        self,
        limit: int,
        share: float,
        need: float,
        folder: str | os.PathLike[str] | None = None,
    ) -> None:
        self._high_water = limit - min(_SLACK, int(limit * _SLACK_SHARE))
        self.is_mapped = need > share
        self.folder = Path(tempfile.gettempdir() if folder is None else folder)
        self._left = share * _IN_MEMORY_SHARE if self.is_mapped else float("inf")
        self._maps: list[weakref.ref[mmap.mmap]] = []
        self._lock = threading.Lock()
        self._keeper: threading.Thread | None = None
        self._turn = threading.Condition()
        self._place: Hashable = None
        self._working = 0

    def empty(self, shape: tuple[int, ...], dtype: DTypeLike) -> NDArray[Any]:
        """Give a new array whose cells hold anything.

        Parameters
        ----------
        shape : tuple of int
            Its shape.
        dtype : dtype
            Type of its cells.

        Returns
        -------
        numpy.ndarray
            The array, in C order.

        Raises
        ------
        OutputError
            If the disk has no room for its scratch file.
        MemoryLimitError
            If the process may not address it.
        """
        kind = np.dtype(dtype)
        size = int(np.prod(shape, dtype=np.int64)) * kind.itemsize
        if not self.is_mapped or size < _SMALL:
            return np.empty(shape, kind)
        with self._lock:
            fits = size <= self._left
            if fits:
                self._left -= size
        if fits:
            array = np.empty(shape, kind)
            weakref.finalize(array, self._give_back, size)
            return array
        mapped = self._mapped(size)
        return np.frombuffer(mapped, dtype=kind).reshape(shape)

    @contextlib.contextmanager
    def turn(self, place: Hashable) -> Iterator[None]:
        """Give a context for work on one part of large arrays, by any number of threads together.

        A part has pages of its own. Before work on another one begins, or where little memory is
        left, those who work are waited for and all pages are given back.

        Parameters
        ----------
        place : hashable
            Names the part.
        """
        if not self.is_mapped:
            yield
            return
        with self._turn:
            while self._working and (place != self._place or self._is_near_limit()):
                self._turn.wait()
            if place != self._place or self._is_near_limit():
                self.release()
            self._place = place
            self._working += 1
        try:
            yield
        finally:
            with self._turn:
                self._working -= 1
                self._turn.notify_all()

    def _is_near_limit(self) -> bool:
        resident, mapped = resident_memory() or (0, 0)
        return resident > self._high_water and mapped >= _WORTH

    def _give_back(self, size: int) -> None:
        """Count memory of an array that has gone away as free."""
        with self._lock:
            self._left += size

    def _mapped(self, size: int) -> mmap.mmap:
        """Map a new scratch file whose blocks are reserved, so that writing it cannot fail."""
        try:
            with tempfile.TemporaryFile(dir=self.folder) as file:
                os.posix_fallocate(file.fileno(), 0, size)
                mapped = mmap.mmap(file.fileno(), size)
            _in_small_pages(mapped)
        except OSError as error:
            if error.errno == errno.ENOMEM:
                msg = (
                    f"the system lets this process address no further {told_size(size)}; raise "
                    "that limit (ulimit -v) or narrow the range"
                )
                raise MemoryLimitError(msg) from error
            msg = (
                f"{self.folder}: has no room for a scratch file of {told_size(size)}: "
                f"{error.strerror or error}; free some space, give more memory or narrow the range"
            )
            raise OutputError(msg) from error
        with self._lock:
            self._maps.append(weakref.ref(mapped))
            if self._keeper is None:
                self._keeper = threading.Thread(target=self._keep, daemon=True)
                self._keeper.start()
        return mapped

    def _living(self) -> Iterator[mmap.mmap]:
        with self._lock:
            self._maps = [ref for ref in self._maps if ref() is not None]
            found = [ref() for ref in self._maps]
        return (one for one in found if one is not None)

    def release(self) -> None:
        """Give the pages of all mapped arrays that are in memory back; their cells stay."""
        for mapped in self._living():
            with contextlib.suppress(ValueError):  # closed meanwhile
                mapped.madvise(mmap.MADV_DONTNEED)

    def _keep(self) -> None:
        """Keep the process within its limit for as long as there are mapped arrays."""
        while True:
            with self._lock:
                if all(ref() is None for ref in self._maps):
                    self._maps, self._keeper = [], None
                    return
            resident, mapped = resident_memory() or (0, 0)
            spare = self._high_water - resident
            if spare < 0 and mapped >= _WORTH:
                self.release()
            time.sleep(min(_LONGEST, max(_SHORTEST, spare / _PACE)))


def _in_small_pages(mapped: mmap.mmap) -> None:
    """Ask that touching a cell brings few of its neighbours; else it can be megabytes of them."""
    mapped.madvise(mmap.MADV_RANDOM)
    with contextlib.suppress(OSError):  # a system that knows no large pages
        mapped.madvise(getattr(mmap, "MADV_NOHUGEPAGE", mmap.MADV_RANDOM))
