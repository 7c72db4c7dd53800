"""Which files a result was made from, and whether they stayed the same meanwhile."""

import threading
from collections.abc import Callable, Iterable
from pathlib import Path
from typing import Any, TypeVar

from viewshed.errors import DataError
from viewshed.io._files import file_sha256

Answer = TypeVar("Answer")


class Fingerprint:
    """Size and SHA-256 of files, taken before or while they are read.

    Parameters
    ----------
    files : iterable of pathlib.Path
        The files.
    mask : Fingerprint, optional
        That of the void mask, which was read when the terrain was opened.
    meanwhile : bool, optional
        Whether a thread of its own takes the SHA-256, while the caller reads the files.

    Attributes
    ----------
    mask_entries : list of dict
        The same of the files of the void mask.

    Raises
    ------
    DataError
        If a file cannot be read.
    """

    def __init__(
        self,
        files: Iterable[Path],
        mask: "Fingerprint | None" = None,
        *,
        meanwhile: bool = False,
    ) -> None:
        self._mask = mask
        self.mask_entries = [] if mask is None else mask.entries
        self._files = list(dict.fromkeys(files))
        self._states: list[tuple[int, ...]] = []
        self._entries: list[dict[str, Any]] = []
        self._failed: DataError | None = None
        self._taker = threading.Thread(target=self._take, daemon=True)
        if meanwhile:
            self._states = [_asked(_state, file) for file in self._files]
            self._taker.start()
        else:
            self._taker.run()
            self._finished()

    def _take(self) -> None:
        """Hash the files; one that changed meanwhile may not be what was read."""
        try:
            for number, file in enumerate(self._files):
                if number == len(self._states):
                    self._states.append(_asked(_state, file))
                state = self._states[number]
                entry = {"path": str(file), "size": state[1], "sha256": _asked(file_sha256, file)}
                if _asked(_state, file) != state:
                    raise DataError(_replaced(file))
                self._entries.append(entry)
        except DataError as error:
            self._failed = error

    def _finished(self) -> None:
        """Wait until all files are hashed."""
        if self._taker.is_alive():
            self._taker.join()
        if self._failed is not None:
            raise self._failed

    @property
    def entries(self) -> list[dict[str, Any]]:
        """One dict a file: ``path`` (as given), ``size`` [bytes] and ``sha256``.

        Raises
        ------
        DataError
            If a file cannot be read or was replaced meanwhile.
        """
        self._finished()
        return self._entries

    def confirm(self) -> None:
        """Make sure that every file is still what it was.

        Files that were touched are read again; the others cost a question to the file system.

        Raises
        ------
        DataError
            If a file holds something else now, or is gone.
        """
        for entry, state in zip(self.entries, self._states, strict=True):
            file = Path(entry["path"])
            try:
                if _state(file) == state or file_sha256(file) == entry["sha256"]:
                    continue
            except OSError as error:
                msg = f"{file}: went away while it was read; get it back and start again"
                raise DataError(msg) from error
            raise DataError(_replaced(file))
        if self._mask is not None:
            self._mask.confirm()


def _replaced(file: Path) -> str:
    return f"{file}: was replaced while it was read; start again"


def _asked(what: Callable[[Path], Answer], file: Path) -> Answer:
    """Ask something of a file that has to be there."""
    try:
        return what(file)
    except OSError as error:
        msg = f"{file}: cannot be read: {error.strerror or error}"
        raise DataError(msg) from error


def _state(file: Path) -> tuple[int, ...]:
    """Give numbers that differ once a file was written to or replaced."""
    status = file.stat()
    return status.st_ino, status.st_size, status.st_mtime_ns, status.st_ctime_ns
