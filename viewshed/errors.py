"""Errors and warnings. Every message is one line: it echoes the value and names the cure."""


class ViewshedError(Exception):
    """Root of every error that viewshed raises on purpose."""


class InputError(ViewshedError, ValueError):
    """A value given by the caller cannot be used."""


class DataError(ViewshedError):
    """An input file cannot be used."""


class AllVoidError(DataError):
    """No height is known in the whole of what was asked for."""


class OutputError(ViewshedError, OSError):
    """A result could not be written whole; nothing of it was left behind."""


class MemoryLimitError(ViewshedError, MemoryError):
    """A run needs more memory than there is; it was refused before it began."""


class ViewshedWarning(UserWarning):
    """Something the user should know about a result that was computed all the same."""
