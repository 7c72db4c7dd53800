"""Room for arrays: memory while it lasts, then scratch files that leave nothing behind."""

import errno
import gc
import mmap
import os
import signal
import subprocess
import sys
import time
from pathlib import Path

import numpy as np
import pytest

from viewshed.errors import MemoryLimitError, OutputError
from viewshed.io import room as module
from viewshed.io._memory import resident_memory
from viewshed.io.room import Room, can_map

ROOT = Path(__file__).parents[2]
MB = 1 << 20

pytestmark = pytest.mark.skipif(not can_map(), reason="arrays cannot be kept in files here")


def mapped(array):
    """Tell whether an array lies in a file."""
    while isinstance(array, np.ndarray):
        array = array.base
    return array is not None


@pytest.fixture
def tight(tmp_path):
    """Room whose arrays of 1 MB and more are in files, but for 2 MB."""
    return Room(1, share=4 * MB, need=64 * MB, folder=tmp_path)


def test_what_fits_is_in_memory(tmp_path):
    room = Room(1 << 30, share=64 * MB, need=64 * MB, folder=tmp_path)
    assert not room.is_mapped
    assert not any(mapped(room.empty((32 * MB,), np.uint8)) for _ in range(2))


def test_what_does_not_fit_is_in_a_file(tight):
    array = tight.empty((3, MB), np.float32)
    assert mapped(array)
    assert array.shape == (3, MB)
    assert array.dtype == np.float32
    assert array.flags.c_contiguous
    assert array.flags.writeable


def test_small_arrays_are_never_in_files(tight):
    assert not any(mapped(tight.empty((1, 1), np.float32)) for _ in range(9))


def test_memory_of_an_array_that_has_gone_is_used_again(tight):
    first = tight.empty((2 * MB,), np.uint8)
    assert not mapped(first)
    assert mapped(tight.empty((2 * MB,), np.uint8))
    part = first[:5]
    del first
    assert mapped(tight.empty((2 * MB,), np.uint8)), "a part keeps the whole"
    del part
    assert not mapped(tight.empty((2 * MB,), np.uint8))


def test_cells_stay_when_pages_are_given_back(tight):
    array = tight.empty((8, MB), np.uint8)
    array[:] = np.arange(8, dtype=np.uint8)[:, None]
    tight.release()
    np.testing.assert_array_equal(array[:, ::4096], np.arange(8)[:, None] * np.ones((1, 256)))


def test_no_file_is_ever_seen(tight, tmp_path):
    array = tight.empty((4 * MB,), np.uint8)
    assert list(tmp_path.iterdir()) == []
    del array


def test_the_keeper_ends_with_the_arrays(tight):
    array = tight.empty((4 * MB,), np.uint8)
    keeper = tight._keeper
    assert keeper.is_alive()
    del array
    gc.collect()
    keeper.join(timeout=10)
    assert not keeper.is_alive()
    assert mapped(tight.empty((4 * MB,), np.uint8)), "and begins again"
    assert tight._keeper is not keeper


def test_the_process_stays_within_its_limit(tmp_path):
    code = """
import sys
from pathlib import Path
import numpy as np
from viewshed.io.room import Room
from viewshed.io._memory import resident_memory
limit = resident_memory()[0] + (256 << 20)
room = Room(limit, share=1, need=2, folder=sys.argv[1])
array = room.empty((1024, 1 << 20), np.uint8)
for row in range(1024):
    array[row] = row % 251
assert all((array[row] == row % 251).all() for row in range(1024))
status = Path("/proc/self/status").read_text()  # getrusage counts the memory of the parent too
print(int(status.split("VmHWM:")[1].split()[0]) * 1024 - limit)
"""
    done = subprocess.run(
        [sys.executable, "-c", code, tmp_path], cwd=ROOT, capture_output=True, text=True, check=True
    )
    assert int(done.stdout) <= 0


def test_a_killed_process_leaves_nothing(tmp_path):
    code = """
import os, signal, sys
import numpy as np
from viewshed.io.room import Room
array = Room(1, share=1, need=2, folder=sys.argv[1]).empty((4 << 20,), np.uint8)
array[:] = 1
os.kill(os.getpid(), signal.SIGKILL)
"""
    done = subprocess.run([sys.executable, "-c", code, tmp_path], cwd=ROOT, check=False)
    assert done.returncode == -signal.SIGKILL
    assert list(tmp_path.iterdir()) == []


def test_a_full_disk_is_one_line(tight, tmp_path, monkeypatch):
    def full(*_):
        raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))

    monkeypatch.setattr(os, "posix_fallocate", full)
    with pytest.raises(OutputError, match=r"no room for a scratch file of 8\.39 MB: No space left"):
        tight.empty((8 * MB,), np.uint8)
    assert list(tmp_path.iterdir()) == []


def test_a_folder_that_went_away_is_one_line(tmp_path):
    room = Room(1, share=1, need=2, folder=tmp_path / "gone")
    with pytest.raises(OutputError, match=r"gone: has no room .* No such file"):
        room.empty((MB,), np.uint8)


def test_too_little_address_space_is_one_line(tight, monkeypatch):
    def refused(*_):
        raise OSError(errno.ENOMEM, os.strerror(errno.ENOMEM))

    monkeypatch.setattr(mmap, "mmap", refused)
    with pytest.raises(MemoryLimitError, match=r"address no further 8\.39 MB; raise that limit"):
        tight.empty((8 * MB,), np.uint8)


@pytest.mark.parametrize("missing", [(os, "posix_fallocate"), (mmap, "MADV_DONTNEED")])
def test_systems_that_cannot(monkeypatch, missing):
    monkeypatch.delattr(*missing)
    assert not can_map()


def test_a_system_that_does_not_tell(monkeypatch):
    monkeypatch.setattr(module, "resident_memory", lambda: None)
    assert not can_map()


def test_pages_are_given_back_while_others_work(tight, monkeypatch):
    monkeypatch.setattr(module, "_WORTH", 0)
    before = resident_memory()[1]
    array = tight.empty((64, MB), np.uint8)
    array[:] = 7
    deadline = time.monotonic() + 20
    while resident_memory()[1] > before + 32 * MB:
        assert time.monotonic() < deadline, "pages of an array at rest were not given back"
        time.sleep(0.01)
    assert (array == 7).all()
