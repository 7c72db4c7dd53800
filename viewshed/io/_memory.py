"""How much memory there is, how much a run takes, and the refusal of one that takes more."""

import os
import re
from collections.abc import Iterator, Sequence
from math import isfinite, sqrt
from pathlib import Path

from viewshed.errors import InputError, MemoryLimitError

try:
    import resource
except ImportError:  # pragma: no cover  (no such module on Windows)
    resource = None  # type: ignore[assignment]

#: A cgroup limit at or above this many bytes means that there is no limit.
_NO_LIMIT = 1 << 60
#: What is assumed where nothing tells [bytes].
_FALLBACK = 2 << 30
#: Bytes a cell of the layers that gather several observers.
_GATHERED_BYTES = {"count": 2, "count-unresolved": 2, "who": 4}
#: What the process takes beside the arrays of the window [bytes]: libraries, page and writers.
LEAST = 750_000_000
#: What the windows of observers under way beside the first may take [bytes]: what the page and the
#: writers need later is free while observers look.
_MORE_WINDOWS = 300e6
#: Share of the memory that is free which a run takes if it is not told.
_SHARE = 0.9
#: Bytes of the units of a size of memory.
_UNITS = {
    "": 1, "B": 1, "KB": 10**3, "MB": 10**6, "GB": 10**9, "TB": 10**12,
    "K": 2**10, "M": 2**20, "G": 2**30, "T": 2**40,
    "KIB": 2**10, "MIB": 2**20, "GIB": 2**30, "TIB": 2**40,
}  # fmt: skip
_SIZE = re.compile(r"\s*(\d+(?:\.\d*)?|\.\d+)\s*([A-Za-z]*)\s*")


def available_memory(root: Path = Path("/")) -> int:
    """Say how much memory this process can still take without being killed or swapping.

    Parameters
    ----------
    root : pathlib.Path, optional
        Folder that holds ``proc`` and ``sys``; another one than ``/`` only in tests.

    Returns
    -------
    int
        The least [bytes] of what the system, every control group (version 1 and 2) above this
        process and the address-space limit of the process leave.

    Notes
    -----
    File pages that a control group can drop at once count as free.
    """
    found = [*_system(root), *_cgroups(root), *_address_space(root)]
    if not found:
        found = [*_sysconf()]
    return max(0, min(found, default=_FALLBACK))


def resident_memory(root: Path = Path("/")) -> tuple[int, int] | None:
    """Say how much memory this process takes now.

    Parameters
    ----------
    root : pathlib.Path, optional
        Folder that holds ``proc``.

    Returns
    -------
    tuple of int or None
        All of it, and what of it are pages of files [bytes]; None where the system does not tell.
    """
    numbers = _text(root / "proc/self/statm").split()
    if len(numbers) < 3 or not hasattr(os, "sysconf"):
        return None
    page = os.sysconf("SC_PAGE_SIZE")
    return int(numbers[1]) * page, int(numbers[2]) * page


def parse_size(text: str) -> int:
    """Read a size of memory such as ``2GiB``.

    Parameters
    ----------
    text : str
        A number and a unit: GB and MB of 1000s, GiB, G, MiB and M of 1024s, and so on; bytes when
        no unit is given.

    Returns
    -------
    int
        Size [bytes].

    Raises
    ------
    InputError
        If it is not understood.

    Examples
    --------
    >>> parse_size("2GiB"), parse_size("800 MB")
    (2147483648, 800000000)
    """
    match = _SIZE.fullmatch(text)
    unit = _UNITS.get(match[2].upper()) if match else None
    if match is None or unit is None:
        msg = f"memory {text!r} is not a size; give it like 2GiB or 800MB"
        raise InputError(msg)
    return int(float(match[1]) * unit)


def check_limit(memory: float) -> int:
    """Refuse a bound on memory that not even the process itself keeps.

    Parameters
    ----------
    memory : float
        The bound [bytes].

    Returns
    -------
    int
        The same.

    Raises
    ------
    InputError
        If it is too small.
    """
    if not memory >= LEAST:
        msg = (
            f"memory of {told_size(memory)} is too little: viewshed itself takes up to "
            f"{told_size(LEAST)}; give at least {LEAST // 10**6}MB"
        )
        raise InputError(msg)
    return int(min(memory, _NO_LIMIT))


def usable_memory() -> int:
    """Say how much memory the whole process may take if nobody says so [bytes]."""
    used, _ = resident_memory() or (0, 0)
    return used + int(_SHARE * available_memory())


def run_bytes(
    cells: float,
    layers: Sequence[str] = ("visible",),
    *,
    own_cells: float | None = None,
    surface: bool = False,
    kept_cells: float = 0.0,
    threads: int = 1,
) -> float:
    """Say how much memory a map takes.

    Parameters
    ----------
    cells : float
        Cells of the window that all ranges reach.
    layers : sequence of str, optional
        Layers that are asked for.
    own_cells : float, optional
        Of several observers, the cells of the largest window of one.
    surface : bool, optional
        Whether a surface is read beside the ground.
    kept_cells : float, optional
        Cells of the answers of single observers that are kept.
    threads : int, optional
        Threads that observers are looked after by.

    Returns
    -------
    float
        Memory [bytes]: that of the arrays of the window, and of the libraries, the page, the
        writers and the scratch arrays beside them.
    """
    heights, answer = _cell_bytes(layers, surface)
    gathered = sum(_GATHERED_BYTES.get(name, 0) for name in layers)
    whole = cells * (heights + answer + gathered) + kept_cells + LEAST
    if own_cells is None:
        return whole + (cells * answer if gathered else 0.0)
    at_once = windows_at_once(own_cells, threads, layers, surface=surface)
    return whole + at_once * own_cells * (heights + answer)


def windows_at_once(
    own_cells: float, threads: int, layers: Sequence[str], *, surface: bool
) -> int:
    """Say how many observers may be under way together.

    Parameters
    ----------
    own_cells : float
        Cells of the largest window of one.
    threads : int
        Threads that look after them.
    layers : sequence of str
        Layers that are asked for.
    surface : bool
        Whether there is a surface beside the ground.

    Returns
    -------
    int
        One a thread, or fewer where their windows are large; at least 1.
    """
    window = own_cells * sum(_cell_bytes(layers, surface))
    return min(threads, 1 + int(_MORE_WINDOWS // window))


def _cell_bytes(layers: Sequence[str], surface: bool) -> tuple[int, int]:
    """Bytes a cell of the heights, and of what one observer sees."""
    clear = 4 * len({"clearance", "needed-height"} & set(layers))
    return 8 if surface else 4, 1 + clear


def check_memory(
    need_bytes: float, have_bytes: float, range_m: float, cure: str | None = None
) -> None:
    """Refuse a run that does not fit in memory.

    Parameters
    ----------
    need_bytes : float
        Memory that the run takes [bytes].
    have_bytes : float
        Memory that there is [bytes], as from `available_memory`.
    range_m : float
        Range of the run [m].
    cure : str, optional
        What to do instead of narrowing the range.

    Raises
    ------
    MemoryLimitError
        If the need is greater; it names both and the cure.
    """
    if need_bytes <= have_bytes:
        return
    fits = _round_down(range_m * sqrt(max(0.0, have_bytes) / need_bytes))
    if cure is None:
        cure = f"a range of {_length(fits)} would fit" if fits > 0 else "free some memory"
    msg = (
        f"range {_length(range_m)} needs {told_size(need_bytes)} of memory and there are "
        f"{told_size(max(0.0, have_bytes))}; {cure}"
    )
    raise MemoryLimitError(msg)


def _round_down(metres: float) -> float:
    """Round down to two digits, so that the range named surely fits [m]."""
    if not isfinite(metres) or metres < 1.0:
        return 0.0
    step = 10.0 ** (len(str(int(metres))) - 2)
    return int(metres / step) * step


def _length(metres: float) -> str:
    return f"{metres / 1000.0:g} km" if metres >= 1000.0 else f"{metres:g} m"


def told_size(count: float) -> str:
    """Give a number of bytes in words."""
    if count < 1e6:
        return f"{count / 1e3:.3g} kB"
    return f"{count / 1e9:.3g} GB" if count >= 1e9 else f"{count / 1e6:.3g} MB"


def _text(path: Path) -> str:
    try:
        return path.read_text(encoding="ascii", errors="replace")
    except OSError:
        return ""


def _fields(path: Path) -> dict[str, int]:
    """Read lines of ``name number``, with or without a colon and a unit."""
    pairs = (line.replace(":", " ").split() for line in _text(path).splitlines())
    return {p[0]: int(p[1]) for p in pairs if len(p) >= 2 and p[1].isdigit()}


def _number(path: Path) -> int | None:
    text = _text(path).strip()
    return int(text) if text.isdigit() else None


def _system(root: Path) -> Iterator[int]:
    info = _fields(root / "proc/meminfo")
    if "MemAvailable" in info:
        yield info["MemAvailable"] * 1024
    elif "MemFree" in info:
        yield (info["MemFree"] + info.get("Cached", 0) + info.get("Buffers", 0)) * 1024


def _address_space(root: Path) -> Iterator[int]:
    if resource is None:  # pragma: no cover
        return
    limit = resource.getrlimit(resource.RLIMIT_AS)[0]
    used = _fields(root / "proc/self/status").get("VmSize")
    if limit != resource.RLIM_INFINITY and used is not None:
        yield limit - used * 1024


def _sysconf() -> Iterator[int]:
    for name in ("SC_AVPHYS_PAGES", "SC_PHYS_PAGES"):
        if name in getattr(os, "sysconf_names", {}):
            yield os.sysconf(name) * os.sysconf("SC_PAGE_SIZE")


def _cgroups(root: Path) -> Iterator[int]:
    """Give the headroom of each control group from this process up to the top [bytes]."""
    mount = root / "sys/fs/cgroup"
    for line in _text(root / "proc/self/cgroup").splitlines():
        number, _, rest = line.partition(":")
        controllers, _, group = rest.partition(":")
        if number == "0" and not controllers:
            names = ("memory.max", "memory.current", "inactive_file")
            for top in (mount, mount / "unified"):
                yield from _headrooms(top, group, names)
        elif "memory" in controllers.split(","):
            names = ("memory.limit_in_bytes", "memory.usage_in_bytes", "total_inactive_file")
            yield from _headrooms(mount / "memory", group, names)


def _headrooms(top: Path, group: str, names: tuple[str, str, str]) -> Iterator[int]:
    limit_name, usage_name, cache_name = names
    parts = [p for p in group.split("/") if p and p != ".."]
    for depth in range(len(parts), -1, -1):
        folder = top.joinpath(*parts[:depth])
        limit = _number(folder / limit_name)
        usage = _number(folder / usage_name)
        if limit is None or usage is None or limit >= _NO_LIMIT:
            continue
        cache = _fields(folder / "memory.stat").get(cache_name, 0)
        yield limit - max(0, usage - cache)
