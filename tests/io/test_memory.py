"""How much memory there is, and what is refused."""

import resource
import subprocess
import sys
from pathlib import Path

import pytest

from viewshed.errors import InputError, MemoryLimitError
from viewshed.io._memory import (
    LEAST,
    available_memory,
    check_limit,
    check_memory,
    parse_size,
    resident_memory,
    run_bytes,
    usable_memory,
    windows_at_once,
)

GB = 10**9
MEMINFO = "MemTotal:       24683652 kB\nMemFree:  100 kB\nMemAvailable:   4000000 kB\n"


def put(root, files):
    for name, text in files.items():
        path = root / name
        path.parent.mkdir(parents=True, exist_ok=True)
        path.write_text(str(text))


def test_here():
    assert 10**7 < available_memory() < 10**14


def test_system(tmp_path):
    put(tmp_path, {"proc/meminfo": MEMINFO})
    assert available_memory(tmp_path) == 4_000_000 * 1024


def test_old_system(tmp_path):
    put(tmp_path, {"proc/meminfo": "MemFree: 100 kB\nBuffers: 20 kB\nCached: 3 kB\n"})
    assert available_memory(tmp_path) == 123 * 1024


def test_no_system(tmp_path):
    assert available_memory(tmp_path) > 0


def test_cgroup_2(tmp_path):
    put(
        tmp_path,
        {
            "proc/meminfo": MEMINFO,
            "proc/self/cgroup": "0::/user.slice/job\n",
            "sys/fs/cgroup/user.slice/job/memory.max": "max\n",
            "sys/fs/cgroup/user.slice/job/memory.current": 5 * GB,
            "sys/fs/cgroup/user.slice/memory.max": 2 * GB,
            "sys/fs/cgroup/user.slice/memory.current": GB,
            "sys/fs/cgroup/user.slice/memory.stat": "anon 5\ninactive_file 300000000\n",
        },
    )
    assert available_memory(tmp_path) == 1_300_000_000


@pytest.mark.parametrize("group", ["/docker/abc", "/", "/../.."])
def test_cgroup_1(tmp_path, group):
    put(
        tmp_path,
        {
            "proc/meminfo": MEMINFO,
            "proc/self/cgroup": f"9:name=systemd:/\n4:cpu,memory:{group}\n0::/\n",
            "sys/fs/cgroup/memory/memory.limit_in_bytes": 3 * GB,
            "sys/fs/cgroup/memory/memory.usage_in_bytes": GB,
            "sys/fs/cgroup/memory/memory.stat": "total_inactive_file 500000000\n",
        },
    )
    assert available_memory(tmp_path) == 2_500_000_000


def test_cgroup_without_limit(tmp_path):
    put(
        tmp_path,
        {
            "proc/meminfo": MEMINFO,
            "proc/self/cgroup": "4:memory:/\n",
            "sys/fs/cgroup/memory/memory.limit_in_bytes": 9223372036854771712,
            "sys/fs/cgroup/memory/memory.usage_in_bytes": GB,
        },
    )
    assert available_memory(tmp_path) == 4_000_000 * 1024


def test_more_used_than_allowed(tmp_path):
    put(
        tmp_path,
        {
            "proc/meminfo": MEMINFO,
            "proc/self/cgroup": "0::/\n",
            "sys/fs/cgroup/memory.max": GB,
            "sys/fs/cgroup/memory.current": 2 * GB,
        },
    )
    assert available_memory(tmp_path) == 0


def test_address_space():
    code = (
        "import resource; resource.setrlimit(resource.RLIMIT_AS, (10**9, 10**9))\n"
        "from viewshed.io._memory import available_memory; print(available_memory())\n"
    )
    root = Path(__file__).parents[2]
    done = subprocess.run([sys.executable, "-c", code], cwd=root, capture_output=True, check=True)
    assert 10**8 < int(done.stdout) < 10**9


def test_enough():
    check_memory(GB, GB, 30_000.0)


@pytest.mark.parametrize(
    ("need", "have", "range_m", "said"),
    [
        (
            40 * GB,
            10 * GB,
            60_000,
            "range 60 km needs 40 GB of memory and there are 10 GB; a range",
        ),
        (40 * GB, 10 * GB, 60_000, "a range of 30 km would fit"),
        (2 * GB, GB, 100_000, "a range of 70 km would fit"),
        (2 * GB, 5e8, 1234, "there are 500 MB; a range of 610 m would fit"),
        (2 * GB, 900, 1234, "there are 0.9 kB; free some memory"),
        (2 * GB, -5, 1234, "there are 0 kB; free some memory"),
    ],
)
def test_too_much(need, have, range_m, said):
    with pytest.raises(MemoryLimitError, match=said):
        check_memory(need, have, range_m)


@pytest.mark.parametrize(
    ("text", "size"),
    [
        ("700000000", 700_000_000),
        ("800MB", 800_000_000),
        ("2GiB", 2 << 30),
        (" 1.5 gib ", 3 << 29),
        ("4G", 4 << 30),
        ("900M", 900 << 20),
        (".5TB", 500 * GB),
    ],
)
def test_sizes(text, size):
    assert parse_size(text) == size


@pytest.mark.parametrize("text", ["", "abc", "2 GiBs", "-1GB", "1e9", "GB", "2G 3"])
def test_what_is_no_size(text):
    with pytest.raises(InputError, match="give it like 2GiB or 800MB"):
        parse_size(text)


@pytest.mark.parametrize("memory", [0, -1, LEAST - 1, float("nan")])
def test_less_than_the_process_itself_takes(memory):
    with pytest.raises(InputError, match="give at least 750MB"):
        check_limit(memory)


def test_a_bound_may_be_any_number():
    assert check_limit(LEAST) == LEAST
    assert check_limit(float("inf")) > 1 << 50


def test_resident_memory(tmp_path):
    put(tmp_path, {"proc/self/statm": "2000 300 40 5 0 600 0\n"})
    page = resource.getpagesize()
    assert resident_memory(tmp_path) == (300 * page, 40 * page)
    put(tmp_path, {"proc/self/statm": ""})
    assert resident_memory(tmp_path) is None


def test_a_margin_is_left(monkeypatch):
    monkeypatch.setattr("viewshed.io._memory.available_memory", lambda: 10 * GB)
    monkeypatch.setattr("viewshed.io._memory.resident_memory", lambda: (GB, 0))
    assert usable_memory() == 10 * GB
    monkeypatch.setattr("viewshed.io._memory.resident_memory", lambda: None)
    assert usable_memory() == 9 * GB


@pytest.mark.parametrize(
    ("layers", "bytes_a_cell"),
    [
        (("visible",), 5),
        (("visible", "clearance"), 9),
        (("visible", "needed-height"), 9),
        (("visible", "clearance", "needed-height"), 13),
    ],
)
def test_bytes_of_a_run(layers, bytes_a_cell):
    assert run_bytes(GB, layers) == bytes_a_cell * GB + LEAST
    assert run_bytes(GB, layers, surface=True) == (bytes_a_cell + 4) * GB + LEAST


def test_an_answer_that_is_gathered_lies_beside_the_common_one():
    assert run_bytes(GB, ("visible", "count")) == (4 + 2 * 1 + 2) * GB + LEAST
    assert run_bytes(GB, ("visible", "clearance", "count")) == (4 + 2 * 5 + 2) * GB + LEAST


@pytest.mark.parametrize(
    ("own_cells", "at_once"),
    [(1e6, 4), (25e6, 3), (50e6, 2), (70e6, 1), (GB, 1)],
)
def test_bytes_of_several_observers(own_cells, at_once):
    layers = ("visible", "count")
    assert windows_at_once(own_cells, 4, layers, surface=False) == at_once
    common, own = (4 + 1 + 2) * GB, (4 + 1) * own_cells
    for threads in (1, 4):
        found = run_bytes(GB, layers, own_cells=own_cells, threads=threads, kept_cells=GB)
        assert found == common + min(threads, at_once) * own + GB + LEAST


def test_windows_are_counted_with_all_that_lies_in_them():
    layers = ("visible", "clearance", "needed-height")
    found = run_bytes(GB, layers, own_cells=GB, threads=2, surface=True)
    assert found == 2 * (8 + 1 + 8) * GB + LEAST
