"""Which files a result was made from, and whether they stayed the same meanwhile."""

from collections.abc import Iterable
from pathlib import Path
from typing import Any

from viewshed.errors import DataError
from viewshed.io._files import file_sha256


class Fingerprint:
    """Size and SHA-256 of files, taken before they are read.

    Parameters
    ----------
    files : iterable of pathlib.Path
        The files.
    mask : Fingerprint, optional
        That of the void mask, which was read when the terrain was opened.

    Attributes
    ----------
    entries : list of dict
        One a file: ``path`` (as given), ``size`` [bytes] and ``sha256``.
    mask_entries : list of dict
        The same of the files of the void mask.

    Raises
    ------
    DataError
        If a file cannot be read.
    """

    def __init__(self, files: Iterable[Path], mask: "Fingerprint | None" = None) -> None:
        self._mask = mask
        self.mask_entries = [] if mask is None else mask.entries
        self.entries: list[dict[str, Any]] = []
        self._states: list[tuple[int, ...]] = []
        for file in dict.fromkeys(files):
            state, digest = _taken(file)
            self._states.append(state)
            self.entries.append({"path": str(file), "size": state[1], "sha256": digest})

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
            msg = f"{file}: was replaced while it was read; start again"
            raise DataError(msg)
        if self._mask is not None:
            self._mask.confirm()


def _taken(file: Path) -> tuple[tuple[int, ...], str]:
    """Give the state of a file and its SHA-256, the state before the other."""
    try:
        return _state(file), file_sha256(file)
    except OSError as error:
        msg = f"{file}: cannot be read: {error.strerror or error}"
        raise DataError(msg) from error


def _state(file: Path) -> tuple[int, ...]:
    """Give numbers that differ once a file was written to or replaced."""
    status = file.stat()
    return status.st_ino, status.st_size, status.st_mtime_ns, status.st_ctime_ns
