"""Run a map again from its record, and say whether the same comes out.

The record says everything that was asked; `arguments` turns it back into calls. Inputs are checked
against their SHA-256 before anything is computed.
"""

from __future__ import annotations

import glob
import os
import warnings
from dataclasses import dataclass
from pathlib import Path, PurePosixPath
from typing import TYPE_CHECKING, Any, NamedTuple

from viewshed.atmosphere import Refraction
from viewshed.errors import DataError, InputError, ViewshedWarning
from viewshed.io._files import file_sha256, is_pattern
from viewshed.notes import noted
from viewshed.places import Observer, Sector, Target

if TYPE_CHECKING:
    from collections.abc import Callable, Mapping, Sequence

    from viewshed.io.compare import Comparison

__all__ = ["Arguments", "Input", "Rerun", "arguments", "check_inputs", "rerun"]

PathLike = str | os.PathLike[str]


class Arguments(NamedTuple):
    """What a record says, as arguments of the calls that make its result.

    Attributes
    ----------
    terrain : dict
        For `viewshed.open_terrain`.
    surface : dict or None
        For `viewshed.io.surface.open_surface`, beside the terrain; None without a surface.
    observers : list of Observer
        The observers.
    map : dict
        For `viewshed.map_visibility`, beside terrain, observers and surface.
    write : dict
        For `MapResult.write`, beside the folder.
    """

    terrain: dict[str, Any]
    surface: dict[str, Any] | None
    observers: list[Observer]
    map: dict[str, Any]
    write: dict[str, Any]


@dataclass(frozen=True)
class Input:
    """A file that a result was made from.

    Attributes
    ----------
    path : pathlib.Path
        Where it is looked for.
    state : str
        ``same``, ``changed``, ``missing``, or ``new``: read now, though the record names it not.
    told : str
        What is wrong with it; empty where nothing is.
    """

    path: Path
    state: str
    told: str = ""


@dataclass(frozen=True)
class Rerun:
    """What came out of running a map again.

    Attributes
    ----------
    verdict : str
        ``same-bytes``, ``same-values`` or ``different``.
    outputs : list of Comparison
        What became of each file.
    inputs : list of Input
        What became of each input.
    changed : list of tuple
        What else changed: name, as it was, as it is.
    folder : pathlib.Path
        Where the new result is.
    """

    verdict: str
    outputs: list[Comparison]
    inputs: list[Input]
    changed: list[tuple[str, str, str]]
    folder: Path


def arguments(
    record: Mapping[str, Any],
    folder: PathLike,
    *,
    dem: Sequence[PathLike] = (),
    surface: Sequence[PathLike] = (),
    void_mask: PathLike | None = None,
) -> Arguments:
    """Turn a record back into the calls that make its result.

    Parameters
    ----------
    record : mapping
        The record, from `viewshed.io.record.read_record`.
    folder : path
        The folder it lies in, from which its paths lead.
    dem, surface : sequence of paths, optional
        Where elevation grid and surface are now, if not where the record says.
    void_mask : path, optional
        Where the mask of voids is now.

    Returns
    -------
    Arguments
        Arguments of every call.

    Raises
    ------
    InputError
        If a surface is named and the record has none, or a value of the record cannot be used.
    """
    options = record["options"]
    if surface and not options.get("surface"):
        msg = f"surface {os.fspath(surface[0])}: the record has none; leave --surface out"
        raise InputError(msg)
    mask = options.get("void_mask")
    if void_mask is not None and mask is None:
        msg = f"void mask {os.fspath(void_mask)}: the record has none; leave --void-mask out"
        raise InputError(msg)
    if mask is not None:
        mask = _places([mask], folder, () if void_mask is None else (void_mask,))[0]
    return Arguments(
        terrain={
            "paths": _places(options["dem"], folder, dem),
            "crs": options["crs"],
            "height_unit": options["height_unit"],
            "void_height": options.get("void_height_m"),
            "void_mask": mask,
        },
        surface=_surface(options, folder, surface),
        observers=[_observer(one) for one in options["observers"]],
        map={
            "target": Target(options["target_height_m"]),
            "range_m": options["range_m"],
            "refraction": Refraction(options["refraction"]["k"], options["refraction"]["origin"]),
            "sector": _sector(options["sector_deg"]),
            "layers": tuple(options["layers"]),
            "each": options.get("each", False),
        },
        write={
            "picture": options.get("picture", True),
            "polygons": options.get("polygons", "none"),
            "min_patch_m2": options.get("min_patch_m2", 0.0),
            "stac": options.get("stac", False),
            "creation_options": dict(options.get("creation_options", {})),
        },
    )


def _surface(
    options: Mapping[str, Any], folder: PathLike, moved: Sequence[PathLike]
) -> dict[str, Any] | None:
    if not options.get("surface"):
        return None
    return {
        "paths": _places(options["surface"], folder, moved),
        "crs": options.get("surface_crs"),
        "height_unit": options.get("surface_height_unit"),
    }


def _observer(given: Mapping[str, Any]) -> Observer:
    return Observer(
        given["x"],
        given["y"],
        name=given["name"],
        crs=given["crs"],
        eye_height=given["eye_height_m"],
        eye_elevation=given["eye_elevation_m"],
        target_height=given.get("target_height_m"),
        range_m=given.get("range_m"),
        sector=_sector(given.get("sector_deg")),
    )


def _sector(bearings: Sequence[float] | None) -> Sector | None:
    return None if bearings is None else Sector(*bearings)


def _places(named: Sequence[str], folder: PathLike, moved: Sequence[PathLike]) -> list[str]:
    """Give the paths and patterns that a record names, or where they are now."""
    if moved:
        return [os.fspath(path) for path in moved]
    return [_place(name, folder) for name in named]


def _place(name: str, folder: PathLike) -> str:
    """Give a path or pattern of a record as one that leads from anywhere."""
    start = os.fspath(Path(folder).resolve())
    path = _joined(start, name)
    return _joined(glob.escape(start), name) if is_pattern(name, start) else path


def _joined(start: str, name: str) -> str:
    return os.path.normpath(os.path.join(start, name))  # noqa: PTH118 - it may be a pattern


# --- inputs -------------------------------------------------------------------------------------


def check_inputs(
    record: Mapping[str, Any],
    folder: PathLike,
    *,
    dem: Sequence[PathLike] = (),
    surface: Sequence[PathLike] = (),
    void_mask: PathLike | None = None,
) -> list[Input]:
    """Compare every input that a record names with its size and SHA-256.

    Parameters
    ----------
    record : mapping
        The record.
    folder : path
        The folder it lies in.
    dem, surface : sequence of paths, optional
        Where elevation grid and surface are now, if not where the record says.
    void_mask : path, optional
        Where the mask of voids is now.

    Returns
    -------
    list of Input
        One for each file, in the order of the record.
    """
    options = record["options"]
    mask = options.get("void_mask")
    masks = () if void_mask is None else (void_mask,)
    return [
        _input(entry, _find(entry["path"], folder, named, moved))
        for entries, named, moved in (
            (record["dem"], options["dem"], dem),
            (_surface_files(record), options.get("surface") or [], surface),
            (record["heights"].get("void_mask_files", []), [mask] if mask else [], masks),
        )
        for entry in entries
    ]


def _surface_files(record: Mapping[str, Any]) -> list[dict[str, Any]]:
    return list(record["surface"]["files"]) if record["surface"] else []


def _find(path: str, folder: PathLike, named: Sequence[str], moved: Sequence[PathLike]) -> Path:
    """Say where an input should be; a moved one is found by its place in what was named."""
    if not moved:
        return Path(_joined(os.fspath(Path(folder).resolve()), path))
    if len(named) == len(moved):
        for old, new in zip(named, moved, strict=True):
            if path == old:
                return Path(new)
            if path.startswith(f"{old}/"):
                return Path(new, path.removeprefix(f"{old}/"))
    name = PurePosixPath(path).name
    return next((p for p in _beside(moved) if p.name == name), Path(moved[0]).parent / name)


def _beside(moved: Sequence[PathLike]) -> list[Path]:
    """Give the files in and beside what is named now."""
    found: list[Path] = []
    for given in moved:
        place = Path(given)
        if place.is_dir():
            found += sorted(place.iterdir())
        elif place.exists():
            found += [place, *sorted(place.parent.iterdir())]
        else:
            found += [Path(match) for match in sorted(glob.glob(os.fspath(given)))]  # noqa: PTH207
    return found


def _input(entry: Mapping[str, Any], path: Path) -> Input:
    try:
        size = path.stat().st_size
        same = size == entry["size"] and file_sha256(path) == entry["sha256"]
    except OSError as error:
        what = "is missing" if isinstance(error, FileNotFoundError) else error.strerror
        return Input(path, "missing", f"{path}: {what}; the record names it as an input")
    if same:
        return Input(path, "same")
    told = f"{size:,} bytes, were {entry['size']:,}" if size != entry["size"] else "same size"
    return Input(path, "changed", f"{path}: has changed since the record was made ({told})")


def _new_inputs(checked: Sequence[Input], new: Mapping[str, Any], folder: Path) -> list[Input]:
    """Name what was read now and is none of the inputs that were checked."""
    known = {one.path.resolve() for one in checked}
    found = []
    masks = new["heights"].get("void_mask_files", [])
    for entry in [*new["dem"], *_surface_files(new), *masks]:
        path = Path(folder, entry["path"]).resolve()
        if path not in known:
            told = f"{path}: was read now and the record does not name it"
            found.append(Input(path, "new", told))
    return found


# --- the run ------------------------------------------------------------------------------------


def check_folder(record_path: PathLike, out_dir: PathLike) -> None:
    """Refuse the folder of the record itself for the new result.

    Raises
    ------
    InputError
        If it is that folder.
    """
    folder = _folder(record_path)
    if Path(out_dir).resolve() == folder.resolve():
        msg = f"{out_dir}: is the folder of the record itself; choose another one to compare with"
        raise InputError(msg)


def _folder(record_path: PathLike) -> Path:
    path = Path(record_path)
    return path if path.is_dir() else path.parent


def rerun(  # noqa: PLR0913 - where things are, and how it is run
    record_path: PathLike,
    out_dir: PathLike,
    *,
    dem: Sequence[PathLike] = (),
    surface: Sequence[PathLike] = (),
    void_mask: PathLike | None = None,
    memory: float | None = None,
    threads: int | None = None,
    overwrite: bool = False,
    progress: Callable[[float, float], None] | None = None,
) -> Rerun:
    """Run a map again from its record and compare what comes out with what did.

    An input that changed or was not there before is told by a warning; the run goes on.

    Parameters
    ----------
    record_path : path
        The record, or the folder it lies in.
    out_dir : path
        Folder for the new result, which is kept whatever comes out.
    dem, surface : sequence of paths, optional
        Where elevation grid and surface are now, if not where the record says.
    void_mask : path, optional
        Where the mask of voids is now.
    memory : float, optional
        What the whole process may take [bytes]; default: what is free, less a margin.
    threads : int, optional
        Threads to use.
    overwrite : bool, optional
        Whether an earlier result in `out_dir` is replaced.
    progress : callable, optional
        Called now and then with work done and work in all.

    Returns
    -------
    Rerun
        The verdict, file by file.

    Raises
    ------
    DataError
        If the record cannot be used, or an input is missing, which a warning names.
    InputError
        If `out_dir` is the folder of the record, or a value of the record cannot be used.
    OutputError
        If the new result cannot be written.
    """
    from viewshed.io._atomic import check_out_dir, nearest_folder
    from viewshed.io.compare import changes, compare_outputs, verdict
    from viewshed.io.record import read_record

    old, folder, out = read_record(record_path), _folder(record_path), Path(out_dir)
    check_folder(record_path, out)
    check_out_dir(out, overwrite)
    asked = arguments(old, folder, dem=dem, surface=surface, void_mask=void_mask)
    inputs = check_inputs(old, folder, dem=dem, surface=surface, void_mask=void_mask)
    _warn_of(inputs)
    missing = [one.path.name for one in inputs if one.state == "missing"]
    if missing:
        some = f"{missing[0]} and {len(missing) - 1} more" if len(missing) > 1 else missing[0]
        msg = (
            f"inputs are missing: {some}; put them back or say where they are (--dem, --surface, "
            "--void-mask)"
        )
        raise DataError(msg)
    how: dict[str, Any] = {"memory": memory, "threads": threads, "progress": progress}
    _run(asked, out, overwrite=overwrite, scratch=nearest_folder(out), **how)
    new = read_record(out)
    extra = _new_inputs(inputs, new, out)
    _warn_of(extra)
    found = compare_outputs(old, folder, new, out)
    return Rerun(verdict(found), found, [*inputs, *extra], changes(old, new), out)


def _warn_of(inputs: Sequence[Input]) -> None:
    for one in inputs:
        if one.told:
            warnings.warn(one.told, ViewshedWarning, stacklevel=3)


def _run(asked: Arguments, out: Path, *, overwrite: bool, **how: Any) -> None:
    """Make the calls."""
    from viewshed.api import map_visibility
    from viewshed.io.elevation import open_terrain

    with noted() as notes:
        terrain = open_terrain(**asked.terrain)
        surface = None
        if asked.surface is not None:
            from viewshed.io.surface import open_surface

            given = dict(asked.surface)
            surface = open_surface(given.pop("paths"), terrain, **given)
    made = {"surface": surface, "notes": notes, **asked.map, **how}
    result = map_visibility(terrain, asked.observers, **made)
    result.write(out, overwrite=overwrite, **asked.write)
