"""Points from a table of text: commas, semicolons or tabs between, decimals with point or comma."""

import csv
import io
import re
import warnings
from collections.abc import Iterator
from math import isfinite
from pathlib import Path

from viewshed import geodesy
from viewshed.constants import MOST_OBSERVERS
from viewshed.errors import DataError, ViewshedWarning
from viewshed.io._point_table import Column, PointTable, Row, clean, columns_of

#: Endings of the names of files that are read as tables of text.
TEXT_SUFFIXES = (".csv", ".txt", ".tsv")
_SEPARATORS = (";", "\t", ",")
#: A first line by which spreadsheets tell each other the separator.
_NAMED_SEPARATOR = re.compile(r"\Asep=.(?=[\r\n])", re.IGNORECASE)
_NUMBER = re.compile(r"[+-]?(?:\d+\.?\d*|\.\d+)(?:[eE][+-]?\d+)?", re.ASCII)
_DECIMAL = re.compile(r"[+-]?\d*([.,])\d+(?:[eE][+-]?\d+)?\s*[^\d.,]*", re.ASCII)
_LONLAT = "EPSG:4326"
_BOMS = {b"\xef\xbb\xbf": "utf-8-sig", b"\xff\xfe": "utf-16", b"\xfe\xff": "utf-16"}

Lines = list[tuple[int, list[str]]]


def read_text_points(path: Path, crs: str | None) -> PointTable:
    """Read a table of text.

    Parameters
    ----------
    path : pathlib.Path
        The file.
    crs : str, optional
        CRS of columns x and y, or of lon and lat where it is geographic.

    Returns
    -------
    PointTable
        Its points; columns lon and lat are in EPSG:4326 unless told otherwise.

    Raises
    ------
    DataError
        If the file cannot be read or is no such table; the message names the line.
    """
    header, lines = _split(path, _text(path))
    columns = columns_of(path, header)
    east, north = _pair(path, columns)
    if len(lines) > MOST_OBSERVERS:
        msg = f"{path}: holds {len(lines)} points; give at most {MOST_OBSERVERS} observers"
        raise DataError(msg)
    for number, cells in lines:
        if len(cells) > len(columns) and any(c for c in cells[len(columns) :]):
            msg = (
                f"{path}: line {number} has {len(cells)} cells for {len(columns)} columns; where "
                "decimals are written with commas, separate columns with semicolons"
            )
            raise DataError(msg)
        cells.extend([""] * (len(columns) - len(cells)))
    _settle_decimals(path, columns, lines)
    rows = [
        Row(
            f"line {number}",
            _coordinate(path, number, columns[east], cells[east]),
            _coordinate(path, number, columns[north], cells[north]),
            tuple(cells[: len(columns)]),
        )
        for number, cells in lines
    ]
    return PointTable(path, columns, rows, _crs(path, columns[east], crs))


def _text(path: Path) -> str:
    try:
        data = path.read_bytes()
    except OSError as error:
        msg = f"{path}: cannot be read: {error.strerror or error}"
        raise DataError(msg) from error
    encoding = next((name for bom, name in _BOMS.items() if data.startswith(bom)), "utf-8")
    if encoding != "utf-16" and b"\0" in data:
        msg = f"{path}: is not a table of text; save it as CSV in UTF-8"
        raise DataError(msg)
    try:
        return data.decode(encoding)
    except UnicodeDecodeError as error:
        line = data.count(b"\n", 0, error.start) + 1
        if encoding == "utf-8":
            with_accents = _western(data)
            if with_accents is not None:
                note = (
                    f"{path}: is not UTF-8 (line {line}) and was read as Windows-1252; check the "
                    "names, or save it as UTF-8"
                )
                warnings.warn(note, ViewshedWarning, stacklevel=4)
                return with_accents
        msg = f"{path}: line {line} holds bytes that are no letters; save the file as UTF-8"
        raise DataError(msg) from error


def _western(data: bytes) -> str | None:
    try:
        return data.decode("cp1252")
    except UnicodeDecodeError:
        return None


def _split(path: Path, text: str) -> tuple[list[str], Lines]:
    """Cut a text into its header and its lines, with the separator under which x and y appear."""
    text = _NAMED_SEPARATOR.sub("", text)
    for separator in _SEPARATORS:
        _, header = next(_records(path, text, separator, strict=False), (0, []))
        meanings = {column.meaning for column in columns_of(path, header)}
        if {"x", "y"} <= meanings or {"lon", "lat"} <= meanings:
            return header, list(_records(path, text, separator))[1:]
    first = next((line for line in text.splitlines() if line.strip()), "")
    if not first:
        msg = f"{path}: is empty; write a line of column names, like x,y,name, and a line a point"
    elif any(c.isdigit() for c in first) and not any(c.isalpha() for c in first):
        msg = f"{path}: has no line of column names; begin it with one, like x,y,name"
    else:
        shown = first if len(first) <= 80 else first[:77] + "..."
        msg = (
            f"{path}: no columns x,y or lon,lat among {shown!r}; name them, and separate them by "
            "commas, semicolons or tabs"
        )
    raise DataError(msg)


def _records(
    path: Path, text: str, separator: str, *, strict: bool = True
) -> Iterator[tuple[int, list[str]]]:
    """Yield line number and cells of every line that is not blank."""
    lines = io.StringIO(text, newline="")
    reader = csv.reader(lines, delimiter=separator, skipinitialspace=True, strict=strict)
    while True:
        number = reader.line_num + 1
        try:
            cells = [clean(cell) for cell in next(reader)]
        except StopIteration:
            return
        except csv.Error as error:
            msg = f"{path}: line {number} cannot be taken apart ({error}); check its quotes"
            raise DataError(msg) from error
        if any(cells):
            yield number, cells


def _pair(path: Path, columns: tuple[Column, ...]) -> tuple[int, int]:
    meanings = [column.meaning for column in columns]
    pairs = [pair for pair in (("x", "y"), ("lon", "lat")) if set(pair) <= set(meanings)]
    if len(pairs) == 2:
        msg = f"{path}: has columns x,y and lon,lat; keep one pair"
        raise DataError(msg)
    return meanings.index(pairs[0][0]), meanings.index(pairs[0][1])


def _settle_decimals(path: Path, columns: tuple[Column, ...], lines: Lines) -> None:
    """Turn decimal commas into points, unless points are decimals too."""
    seen: dict[str, str] = {}
    commas = []
    for number, cells in lines:
        for i, column in enumerate(columns):
            found = column.meaning not in {"", "name"} and _DECIMAL.fullmatch(cells[i])
            if found:
                seen.setdefault(found[1], f"{cells[i]!r} in line {number}")
                if found[1] == ",":
                    commas.append((cells, i))
    if "," not in seen:
        return
    if "." in seen:
        msg = (
            f"{path}: decimals have a comma ({seen[',']}) and a point ({seen['.']}); use one of "
            "them, and nothing between thousands"
        )
        raise DataError(msg)
    note = f"{path}: commas within numbers were read as decimal commas, first {seen[',']}"
    warnings.warn(note, ViewshedWarning, stacklevel=4)
    for cells, i in commas:
        cells[i] = cells[i].replace(",", ".")


def _coordinate(path: Path, number: int, column: Column, cell: str) -> float:
    value = float(cell) if _NUMBER.fullmatch(cell) else float("nan")
    if isfinite(value):
        return value
    angle = " of degrees" if column.meaning in {"lon", "lat"} else ""
    what = f"{cell!r} is not a number{angle}" if cell else "is empty"
    msg = f"{path}: line {number}, {column.name}: {what}; give both coordinates as plain decimals"
    raise DataError(msg)


def _crs(path: Path, east: Column, crs: str | None) -> str | None:
    if east.meaning == "x" or crs is None:
        return crs if east.meaning == "x" else _LONLAT
    if geodesy.horizontal_unit_factor(geodesy.crs_from_user(crs)) is None:
        return crs
    note = f"{path}: columns lon,lat are degrees and were taken as {_LONLAT}, not as {crs}"
    warnings.warn(note, ViewshedWarning, stacklevel=4)
    return _LONLAT
