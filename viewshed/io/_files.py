"""Single files: their SHA-256, names and patterns, texts written whole."""

import contextlib
import hashlib
import os
from pathlib import Path

from viewshed.errors import OutputError


def file_sha256(path: str | os.PathLike[str]) -> str:
    """Give the SHA-256 of a file, read piece by piece, as hexadecimal digits."""
    digest = hashlib.sha256()
    with Path(path).open("rb") as file:
        while piece := file.read(1 << 20):
            digest.update(piece)
    return digest.hexdigest()


def write_text(path: str | os.PathLike[str], text: str) -> str:
    """Write a text file in UTF-8 and read it back.

    Returns
    -------
    str
        Its SHA-256 as hexadecimal digits. Halves of characters become escapes of JSON.

    Raises
    ------
    OutputError
        If it cannot be written whole; nothing is left behind.
    """
    target, data = Path(path), text.encode("utf-8", "backslashreplace")
    try:
        target.write_bytes(data)
        if target.read_bytes() == data:
            return hashlib.sha256(data).hexdigest()
        reason = "it does not read back as it was written"
    except OSError as error:
        reason = error.strerror or str(error)
    with contextlib.suppress(OSError):
        target.unlink(missing_ok=True)
    msg = f"{target}: cannot be written: {reason}; free some space or choose another folder"
    raise OutputError(msg)


def is_plain_name(name: object) -> bool:
    """Tell whether a value is the name of a visible file, without any folder."""
    return (
        isinstance(name, str)
        and bool(name)
        and name == Path(name).name
        and not name.startswith(".")
        and not set("/\\\0") & set(name)
    )


def has_wildcard(text: str) -> bool:
    """Tell whether a text could stand for several names."""
    return bool(set("*?[") & set(text))


def is_pattern(path: str | os.PathLike[str], folder: str | os.PathLike[str] = "") -> bool:
    """Tell whether a path as seen from a folder is a pattern; what has just that name is none."""
    text = os.fspath(path)
    return has_wildcard(text) and not os.path.lexists(Path(folder, text))
