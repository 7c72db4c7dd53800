"""Names of observers as names of files, on every system that a result may be carried to."""

import unicodedata
from collections.abc import Iterable

from viewshed.errors import InputError

#: Longest name [bytes of UTF-8]; with what is put round it a file name stays under 255.
LONGEST = 150
#: Characters that separate folders or that Windows refuses.
_REFUSED = frozenset('/\\:*?"<>|')
#: Names that Windows takes for devices, whatever follows a dot.
_DEVICES = frozenset(
    ["con", "prn", "aux", "nul", "conin$", "conout$"]
    + [f"{port}{digit}" for port in ("com", "lpt") for digit in "0123456789¹²³"]
)
#: Control characters, halves of characters, and line ends.
_UNSEEN = frozenset(("Cc", "Cs", "Zl", "Zp"))


def file_name(name: str) -> str:
    """Check that the name of an observer can name a file.

    Parameters
    ----------
    name : str
        The name; a file is called after it, like ``visible_<name>.tif``.

    Returns
    -------
    str
        The name as it is.

    Raises
    ------
    InputError
        If it is empty, holds a folder separator, a control character or another character that
        some system refuses, begins with a dot, ends with a dot or a space, is the name of a
        device, or is longer than 150 bytes.

    Examples
    --------
    >>> file_name("Tårn 2")
    'Tårn 2'
    """
    trouble = _trouble(name)
    if trouble:
        shown = repr(name) if len(name) <= 60 else repr(name[:57] + "...")
        msg = f"observer {shown} cannot name a file: its name {trouble}; rename it"
        raise InputError(msg)
    return name


def file_names(names: Iterable[str]) -> list[str]:
    """Check that names of observers can name files side by side in one folder.

    Parameters
    ----------
    names : iterable of str
        The names.

    Returns
    -------
    list of str
        The names as they are.

    Raises
    ------
    InputError
        If one cannot name a file, or two differ by nothing, by case or by the way an accent is
        coded alone: many file systems take these for one name.
    """
    found: dict[str, str] = {}
    for name in names:
        key = _folded(file_name(name))
        if key in found:
            how = "is there twice" if name == found[key] else f"is also {found[key]!r}"
            msg = f"observer {name!r} {how} as the name of a file, whatever the case; rename one"
            raise InputError(msg)
        found[key] = name
    return list(found.values())


def _folded(name: str) -> str:
    """Give what names share that a file system may take for one."""
    return unicodedata.normalize("NFC", unicodedata.normalize("NFD", name).casefold())


def _trouble(name: str) -> str | None:
    """Say what is wrong with a name, None where nothing is."""
    strange = sorted(_REFUSED & set(name))
    unseen = next((c for c in name if unicodedata.category(c) in _UNSEEN), None)
    faults = {
        "is empty": not name,
        f"holds {strange[0] if strange else ''!r}": strange,
        f"holds the control character {unseen!r}": unseen,
        "begins with a dot": name.startswith("."),
        f"ends with {'a dot' if name.endswith('.') else 'a space'}": name.endswith((".", " ")),
        "is that of a device on Windows": name.partition(".")[0].rstrip().casefold() in _DEVICES,
        f"is longer than {LONGEST} bytes": len(name.encode("utf-8", "replace")) > LONGEST,
    }
    return next((words for words, is_so in faults.items() if is_so), None)
