"""What a virtual raster is put together from."""

from collections.abc import Iterator
from math import ceil, floor
from pathlib import Path
from xml.etree import ElementTree

from viewshed.errors import DataError
from viewshed.io.mosaic import Piece

_NAMES = ("SourceFilename", "SourceDataset")


def pieces(path: Path) -> tuple[Piece, ...]:
    """List the files that a virtual raster reads, those of virtual rasters within it as well.

    Parameters
    ----------
    path : pathlib.Path
        The virtual raster.

    Returns
    -------
    tuple of Piece
        The files and what they fill.

    Raises
    ------
    DataError
        If it cannot be read or a file that it names is missing.
    """
    return tuple(_pieces(path, {path}))


def _pieces(path: Path, seen: set[Path]) -> Iterator[Piece]:
    try:
        root = ElementTree.fromstring(path.read_bytes())
    except (OSError, ElementTree.ParseError) as error:
        msg = f"{path}: cannot be read as a virtual raster: {error}"
        raise DataError(msg) from error
    parents = {child: parent for parent in root.iter() for child in parent}
    folder = (path.resolve() if path.is_symlink() else path).parent
    for name in (element for tag in _NAMES for element in root.iter(tag)):
        source = _place(name, folder)
        if source is None or parents[name].tag == "Overview":
            continue
        if not source.exists():
            msg = f"{path}: its source {source} is missing; get it, or make {path.name} without it"
            raise DataError(msg)
        piece = Piece(source, *_target(parents[name]))
        yield piece
        if source.suffix.lower() == ".vrt" and source not in seen:
            seen.add(source)
            for inner in _pieces(source, seen):
                yield Piece(inner.path, piece.rows, piece.cols)


def _place(name: ElementTree.Element, folder: Path) -> Path | None:
    """Give the file that a source names or lies in, None if it is no plain file."""
    text = name.text or ""
    is_beside = name.get("relativeToVRT", name.get("relativetoVRT")) == "1"
    if text.startswith("/vsi"):
        return _archive(text)
    if not text:
        return None
    place = folder / text if is_beside else Path(text)
    is_plain = ":" not in text or Path(text).drive or place.exists()
    return place if is_plain else None


def _archive(text: str) -> Path | None:
    """Give the archive on this machine that a member is named in, None where there is none."""
    _, kind, *parts = text.split("/")
    if kind not in {"vsizip", "vsitar", "vsigzip"}:
        return None
    places = (Path("/".join(parts[:n])) for n in range(1, len(parts) + 1))
    return next((place for place in places if place.is_file()), None)


def _target(source: ElementTree.Element) -> tuple[tuple[int, int], tuple[int, int]] | tuple[()]:
    """Give the rows and columns that a source fills, nothing where it does not say."""
    box = source.find("DstRect")
    try:
        x, y, wide, high = (
            float((box if box is not None else source).attrib[key])
            for key in ("xOff", "yOff", "xSize", "ySize")
        )
    except (KeyError, ValueError):
        return ()
    return (floor(y), ceil(y + high)), (floor(x), ceil(x + wide))
