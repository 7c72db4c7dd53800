"""Notes: warnings about a result, collected so that the result can say them itself."""

from __future__ import annotations

import warnings
from contextlib import contextmanager
from typing import TYPE_CHECKING

from viewshed.errors import ViewshedWarning

if TYPE_CHECKING:
    from collections.abc import Iterator


@contextmanager
def noted(*, told: bool = True) -> Iterator[list[str]]:
    """Collect the texts of our warnings; those of others pass on.

    Parameters
    ----------
    told : bool
        Whether ours pass on as well, after the block.

    Yields
    ------
    list of str
        Filled when the block ends, also by an error.
    """
    notes: list[str] = []
    caught: list[warnings.WarningMessage] = []
    try:
        with warnings.catch_warnings(record=True) as caught:
            warnings.simplefilter("always", ViewshedWarning)
            yield notes
    finally:
        for one in caught:
            ours = issubclass(one.category, ViewshedWarning)
            if ours:
                notes.append(str(one.message))
            if told or not ours:
                warnings.warn_explicit(one.message, one.category, one.filename, one.lineno)
