"""Results whole or not at all.

The files of a run are made in a hidden folder inside the output folder and published at the end,
one rename each. ``record.json`` is removed first and renamed last, so a folder without a matching
record holds no whole result. Before anything is moved a journal says what will be, and what it
replaces is kept beside it; whoever comes next after a run was killed puts the old result back.
One run at a time works in a folder: a lock that dies with its process says which.
"""

import contextlib
import errno
import json
import os
import shutil
import socket
import uuid
from collections.abc import Iterator
from pathlib import Path
from typing import Any

from viewshed.constants import LAYERS
from viewshed.errors import OutputError
from viewshed.io._files import is_plain_name

try:
    import fcntl
except ImportError:  # pragma: no cover  (no such module on Windows)
    fcntl = None  # type: ignore[assignment]

__all__ = ["RECORD_FORMAT", "RECORD_NAME", "RESULT_NAMES", "Stage", "check_out_dir", "staged"]

RECORD_NAME = "record.json"
#: What a record says in its section ``format``.
RECORD_FORMAT = "viewshed record"
#: Endings of the polygons in every format, those of a shapefile first.
_POLYGONS = ("shp", "shx", "dbf", "prj", "cpg", "gpkg", "fgb", "parquet")
#: Files whose presence means that a folder holds results.
RESULT_NAMES = (
    RECORD_NAME,
    *(f"{layer.replace('-', '_')}.tif" for layer in LAYERS),
    *(f"visible.{ending}" for ending in _POLYGONS),
    "map.png",
    "summary.csv",
    "stac_item.json",
)

_PREFIX = ".viewshed-"
_LOCK = ".viewshed-lock"
_OWNER, _JOURNAL, _OLD = "owner", "journal", "old"
#: Answers of file systems that know no locks.
_NO_LOCKS = {errno.ENOLCK, errno.ENOTSUP, errno.ENOSYS, errno.EINVAL}

#: Hidden folders this process works in.
_active: set[str] = set()


class Stage:
    """A hidden folder in which the files of one result are made.

    Attributes
    ----------
    folder : pathlib.Path
        The hidden folder.
    published : list of pathlib.Path
        The files in their final places; empty until the ``with`` block has ended well.
    """

    def __init__(self, out_dir: Path, *, overwrite: bool) -> None:
        self.out_dir = out_dir
        self.overwrite = overwrite
        self.folder = out_dir / f"{_PREFIX}{os.getpid()}-{uuid.uuid4().hex[:12]}"
        self.published: list[Path] = []
        self._names: list[str] = []

    def path(self, name: str) -> Path:
        """Give the path at which to make a file that will be published as `name`.

        Raises
        ------
        ValueError
            If the name is not that of a visible file directly in the output folder.
        """
        if not is_plain_name(name):
            msg = f"{name!r} is not the plain name of a visible file"
            raise ValueError(msg)
        if name not in self._names:
            self._names.append(name)
        return self.folder / name

    @property
    def names(self) -> list[str]:
        """Names of the files in the order they are published, the record last."""
        return sorted(self._names, key=lambda name: (name == RECORD_NAME, name))


@contextlib.contextmanager
def staged(out_dir: str | os.PathLike[str], *, overwrite: bool = False) -> Iterator[Stage]:
    """Make the files of a result in a hidden folder and publish them together.

    Parameters
    ----------
    out_dir : path
        Folder the result belongs in; it and its parents are made if need be.
    overwrite : bool, optional
        Replace an earlier result: what its record lists is removed, so no stale layer stays.

    Yields
    ------
    Stage
        ``stage.path(name)`` says where to make each file.

    Raises
    ------
    OutputError
        If the folder holds results and `overwrite` is not set, another run works in it, or a file
        cannot be made or moved. What was there before is put back, nothing new is left.
    """
    folder = Path(out_dir)
    check_out_dir(folder, overwrite=overwrite)
    made: list[Path] = []
    done = False
    try:
        with _as_output_error(folder):
            made = _make_folders(folder)
        with locked(folder):
            _refuse_existing(folder, overwrite=overwrite, names=RESULT_NAMES)
            stage = Stage(folder, overwrite=overwrite)
            with opened(stage):
                with _without_hidden_folder(stage):
                    yield stage
                _publish(stage)
            done = True
    finally:
        if not done:
            for parent in reversed(made):
                with contextlib.suppress(OSError):
                    parent.rmdir()


@contextlib.contextmanager
def _without_hidden_folder(stage: Stage) -> Iterator[None]:
    """Name files in messages where the user would look for them."""
    try:
        yield
    except OutputError as error:
        told = str(error).replace(str(stage.folder), str(stage.out_dir))
        raise OutputError(told) from error


def check_out_dir(
    out_dir: str | os.PathLike[str],
    overwrite: bool = False,
    *,
    names: tuple[str, ...] = RESULT_NAMES,
) -> None:
    """Refuse an output folder that cannot be used, before any work; make nothing.

    What a killed run left in the folder is swept.

    Parameters
    ----------
    out_dir : path
        Folder the result belongs in. It need not exist.
    overwrite : bool, optional
        Whether an earlier result may be replaced.
    names : tuple of str, optional
        Files whose presence means that there is an earlier result.

    Raises
    ------
    OutputError
        If the path is a file, the folder cannot be written into, another run works in it, it
        holds a result and `overwrite` is not set, or its record is not one of viewshed.
    """
    folder = Path(out_dir)
    with _as_output_error(folder):
        present = folder.is_dir()
        place = nearest_folder(folder)
    if not place.is_dir():
        msg = f"{place}: is not a folder; choose another one for the results"
        raise OutputError(msg)
    if not os.access(place, os.W_OK | os.X_OK):
        msg = f"{place}: is a folder that cannot be written into; choose another one"
        raise OutputError(msg)
    if present:
        with locked(folder):
            _refuse_existing(folder, overwrite=overwrite, names=names)


def nearest_folder(folder: str | os.PathLike[str]) -> Path:
    """Give a folder, or what exists of the way to it."""
    place = Path(folder)
    while not os.path.lexists(place) and place != place.parent:
        place = place.parent
    return place


def _refuse_existing(folder: Path, *, overwrite: bool, names: tuple[str, ...]) -> None:
    found = [name for name in names if os.path.lexists(folder / name)]
    if found and not overwrite:
        msg = f"{folder / found[0]}: exists; use --overwrite to replace the results in this folder"
        raise OutputError(msg)
    ours = set(listed(folder))
    for name in found:
        if name not in ours:
            msg = (
                f"{folder / name}: exists and no record of viewshed lists it; move it away or "
                "choose another folder"
            )
            raise OutputError(msg)


def listed(folder: Path) -> list[str]:
    """Give the files that the record in a folder lists, itself first."""
    path = folder / RECORD_NAME
    if not os.path.lexists(path):
        return []
    try:
        record: Any = json.loads(path.read_bytes())
    except (OSError, ValueError):
        record = None
    if not isinstance(record, dict) or record.get("format") != RECORD_FORMAT:
        msg = f"{path}: is not a record of viewshed; move it away or choose another folder"
        raise OutputError(msg)
    outputs = record.get("outputs")
    names = [name for name in outputs if is_plain_name(name)] if isinstance(outputs, dict) else []
    return [RECORD_NAME, *(name for name in names if name != RECORD_NAME)]


@contextlib.contextmanager
def _as_output_error(folder: Path) -> Iterator[None]:
    """Turn errors of the operating system into one line."""
    try:
        yield
    except OutputError:
        raise
    except OSError as error:
        where = error.filename if isinstance(error.filename, str) else folder
        reason = error.strerror or str(error)
        msg = f"{where}: cannot be written: {reason}; free some space or choose another folder"
        raise OutputError(msg) from error


def _make_folders(folder: Path) -> list[Path]:
    """Make a folder and its parents; give those that were not there, outermost first."""
    missing = [p for p in (folder, *folder.parents) if not p.exists()][::-1]
    folder.mkdir(parents=True, exist_ok=True)
    return missing


# --- publishing and recovering ------------------------------------------------------------------


def _publish(stage: Stage) -> None:
    """Move the files to their places; if this stops half-way `_recover` undoes it."""
    out, names = stage.out_dir, stage.names
    _refuse_existing(out, overwrite=stage.overwrite, names=tuple(names))
    old = [name for name in [*listed(out), *names] if os.path.lexists(out / name)]
    move(stage, list(dict.fromkeys(old)))


def move(stage: Stage, old: list[str]) -> None:
    """Move what stands in the way aside and the files of a stage to their places.

    Raises
    ------
    OutputError
        If a file was not made, or a folder stands in the way.
    """
    out, names = stage.out_dir, stage.names
    for name in names:
        if not (stage.folder / name).is_file():
            msg = f"{out / name}: was not made; nothing of this result is kept"
            raise OutputError(msg)
        _sync(stage.folder / name)
    for name in old:
        if (out / name).is_dir() and not (out / name).is_symlink():
            msg = f"{out / name}: is a folder and stands where a result belongs; move it away"
            raise OutputError(msg)
    kept = stage.folder / _OLD
    kept.mkdir()
    _write_json(stage.folder / _JOURNAL, {n: _identity(stage.folder / n) for n in names})
    for name in old:
        (out / name).rename(kept / name)
        _sync(out)
    for name in names:
        (stage.folder / name).rename(out / name)
    _sync(out)
    (stage.folder / _JOURNAL).unlink()
    stage.published = [out / name for name in names]


def _recover(folder: Path) -> None:
    """Remove a hidden folder; first undo what it published if that is not whole."""
    out = folder.parent
    journal = _read_json(folder / _JOURNAL)
    if journal is not None:
        last = max(journal, key=lambda name: (name == RECORD_NAME, name), default="")
        if not _is_same(out / last, journal.get(last)):
            for name, identity in journal.items():
                if _is_same(out / name, identity):
                    (out / name).unlink()
            for old in sorted(folder.glob(f"{_OLD}/*"), key=lambda old: old.name == RECORD_NAME):
                if not os.path.lexists(out / old.name):
                    old.rename(out / old.name)
            _sync(out)
        (folder / _JOURNAL).unlink()
    shutil.rmtree(folder, ignore_errors=True)


def _identity(path: Path) -> list[int]:
    """Give numbers that a file keeps when it is renamed and shares with no other."""
    status = path.stat()
    return [status.st_ino, status.st_size, status.st_mtime_ns]


def _is_same(path: Path, identity: object) -> bool:
    try:
        return _identity(path) == identity
    except OSError:
        return False


def _write_json(path: Path, value: object) -> None:
    """Write a small file whole: a reader sees all of it or no file."""
    draft = path.with_name(path.name + ".new")
    draft.write_text(json.dumps(value), encoding="utf-8")
    _sync(draft)
    draft.rename(path)
    _sync(path.parent)


def _read_json(path: Path) -> dict[str, Any] | None:
    try:
        value = json.loads(path.read_bytes())
    except (OSError, ValueError):
        return None
    return value if isinstance(value, dict) else None


def _sync(path: Path) -> None:
    """Make sure that a file, or the names in a folder, are on the disk."""
    if os.name == "nt" and path.is_dir():  # pragma: no cover
        return
    handle = os.open(path, os.O_RDONLY)
    try:
        os.fsync(handle)
    except OSError as error:
        if error.errno not in {errno.EINVAL, errno.ENOTSUP}:
            raise
    finally:
        os.close(handle)


# --- who works in a folder ----------------------------------------------------------------------


@contextlib.contextmanager
def locked(folder: Path) -> Iterator[None]:
    """Hold the folder's lock and sweep what dead runs left.

    The lock goes away with the process that holds it, however it ends. Where the file system
    knows no locks, the owner files alone say who is there.
    """
    with _as_output_error(folder):
        handle = _take_lock(folder)
    try:
        with _as_output_error(folder):
            _sweep(folder)
        yield
    finally:
        with contextlib.suppress(OSError):
            (folder / _LOCK).unlink()
        os.close(handle)


def _take_lock(folder: Path) -> int:
    path = folder / _LOCK
    while True:
        try:
            handle = os.open(path, os.O_RDWR | os.O_CREAT | os.O_CLOEXEC, 0o666)
        except FileNotFoundError:  # another run failed and took the folder it had made with it
            folder.mkdir(parents=True)
            continue
        try:
            if fcntl is None:  # pragma: no cover
                return handle
            fcntl.flock(handle, fcntl.LOCK_EX | fcntl.LOCK_NB)
            if _is_same_file(handle, path):
                return handle
        except BlockingIOError:
            os.close(handle)
            raise OutputError(_busy(folder)) from None
        except OSError as error:
            if error.errno in _NO_LOCKS:
                return handle
            os.close(handle)
            raise
        os.close(handle)


def _is_same_file(handle: int, path: Path) -> bool:
    """Tell whether an open file still is the one of that name: its last owner removes it."""
    try:
        return os.path.samestat(os.fstat(handle), path.stat())
    except OSError:
        return False


def _busy(folder: Path, who: str = "another run") -> str:
    return f"{folder}: {who} is writing into this folder; wait for it or choose another one"


@contextlib.contextmanager
def opened(stage: Stage) -> Iterator[None]:
    """Keep the hidden folder of a stage for as long as files are made; the folder is locked."""
    try:
        with _as_output_error(stage.out_dir):
            _open_stage(stage)
            yield
    finally:
        with _as_output_error(stage.out_dir):
            _recover(stage.folder)
        _active.discard(stage.folder.name)


def _open_stage(stage: Stage) -> None:
    _active.add(stage.folder.name)
    stage.folder.mkdir()
    _write_json(stage.folder / _OWNER, _owner(os.getpid()))
    _sweep(stage.out_dir, own=stage.folder.name)


def _owner(pid: int) -> dict[str, object]:
    return {"pid": pid, "start": _start(pid), "host": socket.gethostname(), "boot": _boot()}


def _start(pid: int) -> str:
    """Give the start time of a process in clock ticks, or nothing where that is not known."""
    try:
        text = Path(f"/proc/{pid}/stat").read_text(encoding="utf-8", errors="replace")
    except OSError:
        return ""
    fields = text.rpartition(")")[2].split()
    return "" if fields[0] in {"Z", "X"} else fields[19]


def _boot() -> str:
    try:
        return Path("/proc/sys/kernel/random/boot_id").read_text(encoding="ascii").strip()
    except OSError:
        return ""


def _sweep(folder: Path, *, own: str = "") -> None:
    """Remove the hidden folders of runs that have ended, and refuse to work beside a live one."""
    for entry in sorted(folder.glob(f"{_PREFIX}*-*")):
        if entry.name == own or entry.is_symlink() or not entry.is_dir():
            continue
        owner = _read_json(entry / _OWNER)
        if owner is None or not _is_elsewhere(owner):
            if _is_alive(owner, entry.name):
                who = f"another run (process {entry.name.split('-')[1]})"
                raise OutputError(_busy(folder, who))
            _recover(entry)


def _is_elsewhere(owner: dict[str, Any]) -> bool:
    """Tell whether a run belongs to another machine, whose processes cannot be asked."""
    return bool(owner.get("host") != socket.gethostname() and owner.get("boot") != _boot())


def _is_alive(owner: dict[str, Any] | None, name: str) -> bool:
    """Tell whether the run that made a hidden folder still runs on this machine."""
    pid = name.removeprefix(_PREFIX).split("-")[0]
    if owner is None or not pid.isdigit() or owner.get("boot") != _boot():
        return False
    if int(pid) == os.getpid():
        return name in _active
    if owner.get("start"):
        return bool(_start(int(pid)) == owner["start"])
    return _is_process(int(pid))  # pragma: no cover  (systems without /proc)


def _is_process(pid: int) -> bool:
    try:
        os.kill(pid, 0)
    except ProcessLookupError:
        return False
    except OSError:
        return True
    return True
