"""Results whole or not at all, whatever happens on the way."""

import contextlib
import errno
import json
import os
import signal
import subprocess
import sys
import tempfile
import time
from pathlib import Path

import pytest

from tests.io.records import sections
from viewshed.errors import OutputError
from viewshed.io import _atomic
from viewshed.io._atomic import check_out_dir, staged
from viewshed.io._files import file_sha256, is_plain_name
from viewshed.io.record import build_record, matching, relative_path

ROOT = Path(__file__).parents[2]


def a_record(folder, names):
    """Give the record of files made in a folder."""
    outputs = {name: {"sha256": file_sha256(folder / name)} for name in names}
    return build_record(sections(outputs=outputs))


def fill(stage, files):
    for name, text in files.items():
        stage.path(name).write_text(text)
    record = a_record(stage.folder, files)
    stage.path("record.json").write_text(json.dumps(record))


def run(folder, files, *, overwrite=False):
    with staged(folder, overwrite=overwrite) as stage:
        fill(stage, files)
    return stage


def content(folder):
    """Give the visible files but the record."""
    hidden = ("record.json", ".viewshed-lock")
    return {p.name: p.read_text() for p in folder.iterdir() if p.name not in hidden}


OLD = {"visible.tif": "old", "clearance.tif": "old too", "places.gpkg": "old three"}
NEW = {"visible.tif": "new", "needed_height.tif": "new too"}


@pytest.mark.parametrize("name", ["out", "a b/ü/Ω out", "deep/er/still"])
def test_publish(tmp_path, name):
    out = tmp_path / name
    stage = run(out, OLD)
    assert content(out) == OLD
    assert [p.name for p in stage.published] == [
        "clearance.tif",
        "places.gpkg",
        "visible.tif",
        "record.json",
    ]
    assert matching(out)


def test_relative_folder(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    run("out", OLD)
    run(".", {"visible.tif": "here"})
    assert matching("out")
    assert matching(".")


def test_files_not_asked_for_stay_behind(tmp_path):
    with staged(tmp_path / "out") as stage:
        fill(stage, {"visible.tif": "x"})
        (stage.folder / "visible.tif.aux.xml").write_text("rubbish")
    assert sorted(p.name for p in (tmp_path / "out").iterdir()) == ["record.json", "visible.tif"]


def test_existing_results_are_kept(tmp_path):
    run(tmp_path, OLD)
    for refuse in (check_out_dir, lambda out: run(out, NEW)):
        with pytest.raises(OutputError, match=r"record\.json: exists; use --overwrite"):
            refuse(tmp_path)
    assert content(tmp_path) == OLD
    assert matching(tmp_path)


@pytest.mark.parametrize("name", _atomic.RESULT_NAMES)
def test_a_lone_result_is_kept(tmp_path, name):
    (tmp_path / name).write_text("mine")
    with pytest.raises(OutputError, match="exists; use --overwrite"):
        check_out_dir(tmp_path)


def test_other_names_are_kept_too(tmp_path):
    (tmp_path / "extra.txt").write_text("mine")
    with pytest.raises(OutputError, match=r"extra\.txt: exists"):
        run(tmp_path, {"extra.txt": "new"})
    assert content(tmp_path) == {"extra.txt": "mine"}


def test_overwrite_leaves_no_stale_layer(tmp_path):
    run(tmp_path, OLD)
    (tmp_path / "notes.txt").write_text("mine")
    check_out_dir(tmp_path, overwrite=True)
    run(tmp_path, NEW, overwrite=True)
    assert content(tmp_path) == {**NEW, "notes.txt": "mine"}
    assert matching(tmp_path)


def test_overwrite_spares_what_no_record_lists(tmp_path):
    (tmp_path / "visible.tif").write_text("mine")
    for refuse in (check_out_dir, lambda out, *, overwrite: run(out, NEW, overwrite=overwrite)):
        with pytest.raises(OutputError, match=r"visible\.tif: exists and no record of viewshed"):
            refuse(tmp_path, overwrite=True)
    assert (tmp_path / "visible.tif").read_text() == "mine"


@pytest.mark.parametrize("text", ["{}", "[1]", "not json", '{"format": "another"}'])
def test_a_record_of_something_else_is_never_touched(tmp_path, text):
    (tmp_path / "record.json").write_text(text)
    for refuse in (check_out_dir, lambda out, *, overwrite: run(out, NEW, overwrite=overwrite)):
        with pytest.raises(OutputError, match=r"record\.json: is not a record of viewshed; move"):
            refuse(tmp_path, overwrite=True)
    assert (tmp_path / "record.json").read_text() == text


def test_a_record_cannot_reach_outside(tmp_path):
    out = tmp_path / "out"
    run(out, OLD)
    precious = tmp_path / "precious.txt"
    precious.write_text("mine")
    record = json.loads((out / "record.json").read_text())
    record["outputs"] |= {"../precious.txt": {}, str(precious): {}, ".hidden": {}, "..": {}}
    (out / "record.json").write_text(json.dumps(record))
    run(out, NEW, overwrite=True)
    assert precious.read_text() == "mine"


@pytest.mark.parametrize("name", ["", ".", "..", ".x", "a/b", "/a", "a\\b", "a\0b", None, 3])
def test_names_that_are_not_plain(name, tmp_path):
    assert not is_plain_name(name)
    with pytest.raises(ValueError, match="not the plain name"), staged(tmp_path / "o") as stage:
        stage.path(name)
    assert not (tmp_path / "o").exists()


# --- folders that cannot be used ----------------------------------------------------------------


@pytest.mark.parametrize("name", ["file", "file/out", "file/a/b"])
def test_a_file_in_the_way(tmp_path, name):
    (tmp_path / "file").write_text("mine")
    for refuse in (check_out_dir, lambda out: run(out, NEW)):
        with pytest.raises(OutputError, match=r"file: is not a folder; choose another"):
            refuse(tmp_path / name)
    assert (tmp_path / "file").read_text() == "mine"


def test_dangling_link(tmp_path):
    (tmp_path / "link").symlink_to(tmp_path / "nowhere")
    with pytest.raises(OutputError, match="link: is not a folder"):
        check_out_dir(tmp_path / "link")


def test_link_to_a_folder(tmp_path):
    (tmp_path / "real").mkdir()
    (tmp_path / "link").symlink_to(tmp_path / "real")
    run(tmp_path / "link", OLD)
    assert content(tmp_path / "real") == OLD


def test_folder_that_refuses_new_names():
    with pytest.raises(OutputError, match=r"^/proc[^\n]*(cannot be written)[^\n]*$"):
        run("/proc/viewshed", NEW)


@pytest.mark.skipif(not hasattr(os, "geteuid"), reason="no user ids here")
@pytest.mark.parametrize("name", [".", "sub/folder"])
def test_unwritable_folder(name):
    code = (
        "import os, sys\n"
        "if os.geteuid() == 0: os.setgid(65534); os.setuid(65534)\n"
        "from viewshed.io._atomic import check_out_dir, staged\n"
        "from viewshed.errors import OutputError\n"
        "def run(out):\n    with staged(out): pass\n"
        "for refuse in (check_out_dir, run):\n"
        "    try: refuse(sys.argv[1])\n"
        "    except OutputError as error: print(error)\n"
    )
    loaded = "import sys; sys.path.insert(0, sys.argv.pop()); import viewshed.io._atomic\n"
    with tempfile.TemporaryDirectory() as base:
        Path(base).chmod(0o755)
        out = Path(base, "locked")
        out.mkdir()
        out.chmod(0o555)
        done = subprocess.run(
            [sys.executable, "-c", loaded + code, str(out / name), str(ROOT)],
            capture_output=True,
            text=True,
            check=True,
        )
        assert not list(out.iterdir())
    lines = done.stdout.splitlines()
    assert len(lines) == 2
    assert all("locked: is a folder that cannot be written into" in line for line in lines)


def test_check_makes_nothing(tmp_path):
    check_out_dir(tmp_path / "a" / "b")
    check_out_dir(tmp_path)
    assert not list(tmp_path.iterdir())


def test_a_folder_where_a_file_belongs(tmp_path):
    (tmp_path / "visible.tif").mkdir()
    with pytest.raises(OutputError, match=r"visible\.tif: exists and no record"):
        run(tmp_path, NEW, overwrite=True)
    assert [p.name for p in tmp_path.iterdir()] == ["visible.tif"]


# --- failures on the way ------------------------------------------------------------------------


class Oops(BaseException):
    """Something no one expects."""


@pytest.mark.parametrize("error", [Oops, KeyboardInterrupt, ValueError])
@pytest.mark.parametrize("name", [".", "new/er"])
def test_an_error_leaves_nothing(tmp_path, error, name):
    with pytest.raises(error), staged(tmp_path / name) as stage:  # noqa: PT012
        fill(stage, NEW)
        raise error
    assert not list(tmp_path.iterdir())


def test_an_error_keeps_the_old_result(tmp_path):
    run(tmp_path, OLD)
    with pytest.raises(Oops), staged(tmp_path, overwrite=True) as stage:  # noqa: PT012
        fill(stage, NEW)
        raise Oops
    assert content(tmp_path) == OLD
    assert matching(tmp_path)


def test_a_file_that_was_not_made(tmp_path):
    with pytest.raises(OutputError, match=r"map\.png: was not made"), staged(tmp_path / "o") as st:
        st.path("map.png")
    assert not (tmp_path / "o").exists()


def test_an_error_of_the_system_is_one_line(tmp_path):
    with (
        pytest.raises(OutputError, match=r"^[^\n]*: cannot be written: No space left[^\n]*$"),
        staged(tmp_path / "o"),
    ):
        raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))
    assert not (tmp_path / "o").exists()


#: Renames when `NEW` replaces `OLD`: owner and journal, the old files out, the new ones in.
MOVES = 2 + len(OLD) + 1 + len(NEW) + 1


@pytest.mark.parametrize("step", range(MOVES + 1))
def test_a_failing_move_puts_the_old_result_back(tmp_path, monkeypatch, step):
    run(tmp_path, OLD)
    moves, rename = [], Path.rename

    def failing(self, target):
        moves.append(target)
        if len(moves) == step + 1:
            raise OSError(errno.EIO, "Input/output error", str(self))
        return rename(self, target)

    monkeypatch.setattr(Path, "rename", failing)
    expected, outcome = NEW, contextlib.nullcontext()
    if step < MOVES:
        expected, outcome = OLD, pytest.raises(OutputError, match="Input/output error")
    with outcome:
        run(tmp_path, NEW, overwrite=True)
    monkeypatch.undo()
    assert (len(moves) > step) == (step < MOVES)
    assert content(tmp_path) == expected
    assert matching(tmp_path)


#: Reads numbers of steps; for each it lets a run of its own be killed at that step.
KILLER = """
import os, signal, sys
from pathlib import Path
sys.path[:0] = [sys.argv[1], sys.argv[2]]
from test_atomic import NEW, run
from viewshed.io import _atomic
left = 0
def counted(work):
    def step(*args, **options):
        global left
        left -= 1
        if left == 0:
            os.kill(os.getpid(), signal.SIGKILL)
        return work(*args, **options)
    return step
for name in ("rename", "unlink", "mkdir", "write_text", "rmdir"):
    setattr(Path, name, counted(getattr(Path, name)))
_atomic._sync = counted(_atomic._sync)
os.unlink, os.rmdir = counted(os.unlink), counted(os.rmdir)
for line in sys.stdin:
    left = int(line)
    child = os.fork()
    if child == 0:
        run(sys.argv[3], NEW, overwrite=True)
        os._exit(0)
    print(os.waitpid(child, 0)[1], flush=True)
"""


@pytest.mark.parametrize("first", [False, True], ids=["old result", "empty folder"])
def test_killed_at_every_step(tmp_path, first):
    out, here, seen = tmp_path / "out", str(Path(__file__).parent), set()
    killer = subprocess.Popen(
        [sys.executable, "-c", KILLER, str(ROOT), here, str(out)],
        stdin=subprocess.PIPE,
        stdout=subprocess.PIPE,
        text=True,
    )
    for step in range(1, 100):
        if not first:
            run(out, OLD, overwrite=True)
        killer.stdin.write(f"{step}\n")
        killer.stdin.flush()
        status = int(killer.stdout.readline())
        if status == 0:
            break
        assert status == signal.SIGKILL
        if matching(out):
            shown = {p.name: p.read_text() for p in out.glob("[!.]*") if p.suffix != ".json"}
            assert shown in (OLD, NEW)
        check_out_dir(out, overwrite=True)
        if out.exists():
            found = content(out)
            assert found in (OLD, NEW) or (first and not found)
            assert matching(out) or not found
            seen.add(found.get("visible.tif", "nothing"))
            for file in out.iterdir():
                file.unlink()
    killer.communicate()
    assert step > 20
    assert seen == ({"nothing", "new"} if first else {"old", "new"})
    assert content(out) == NEW
    assert matching(out)


# --- several runs -------------------------------------------------------------------------------

SLOW = """
import sys, time
sys.path[:0] = [sys.argv[1], sys.argv[2]]
from test_atomic import NEW, fill
from viewshed.io._atomic import staged
with staged(sys.argv[3], overwrite=True) as stage:
    fill(stage, NEW)
    print("in", flush=True)
    time.sleep(60)
"""


@pytest.fixture
def other_run(tmp_path):
    """Start a run of another process that works in the folder."""
    here = str(Path(__file__).parent)
    child = subprocess.Popen(
        [sys.executable, "-c", SLOW, str(ROOT), here, str(tmp_path)],
        stdout=subprocess.PIPE,
    )
    assert child.stdout.readline() == b"in\n"
    yield child
    child.kill()
    child.wait()
    child.stdout.close()


def test_one_run_at_a_time(tmp_path, other_run):
    for refuse in (check_out_dir, lambda out: run(out, NEW)):
        with pytest.raises(OutputError, match=r"another run is writing into this folder; wait"):
            refuse(tmp_path)
    assert len(list(tmp_path.glob(".viewshed-*-*"))) == 1
    other_run.kill()
    other_run.wait()
    run(tmp_path, OLD)
    assert content(tmp_path) == OLD


def test_one_run_at_a_time_without_locks(tmp_path, other_run, monkeypatch):
    monkeypatch.setattr(_atomic, "fcntl", None)
    with pytest.raises(OutputError, match=rf"another run \(process {other_run.pid}\) is writing"):
        run(tmp_path, NEW)
    other_run.kill()
    other_run.wait()
    run(tmp_path, OLD)
    assert content(tmp_path) == OLD


def test_one_run_at_a_time_in_one_process(tmp_path):
    with staged(tmp_path) as stage:
        fill(stage, NEW)
        with pytest.raises(OutputError, match="is writing into this folder"):
            run(tmp_path, OLD, overwrite=True)
    assert content(tmp_path) == NEW


def test_many_runs_at_once(tmp_path):
    out, here = tmp_path / "out", str(Path(__file__).parent)
    code = (
        "import sys; sys.path[:0] = sys.argv[1:3]\n"
        "from test_atomic import run\n"
        "from viewshed.errors import OutputError\n"
        "for i in range(25):\n"
        "    files = {n: sys.argv[4] + str(i) for n in ('visible.tif', 'map.png')}\n"
        "    try: run(sys.argv[3], files, overwrite=True)\n"
        "    except OutputError as error: assert 'another' in str(error), error\n"
    )
    children = [
        subprocess.Popen([sys.executable, "-c", code, str(ROOT), here, str(out), name])
        for name in "abcd"
    ]
    assert [child.wait() for child in children] == [0, 0, 0, 0]
    assert matching(out)
    assert len(set(content(out).values())) == 1
    assert not list(out.glob(".*"))


def leftover(out, **changes):
    folder = out / ".viewshed-999999-abc"
    folder.mkdir(parents=True)
    (folder / "visible.tif").write_text("half")
    owner = {**_atomic._owner(os.getpid()), "pid": 999999, "start": "1", **changes}
    (folder / "owner").write_text(json.dumps(owner))
    return folder


@pytest.mark.parametrize("changes", [{}, {"boot": "earlier"}, {"host": "renamed"}])
def test_leftovers_are_swept(tmp_path, changes):
    leftover(tmp_path, **changes)
    (tmp_path / ".viewshed-999998-abc").mkdir()
    (tmp_path / ".viewshed-lock").touch()
    run(tmp_path, NEW)
    assert content(tmp_path) == NEW


def test_leftovers_of_another_machine_stay(tmp_path):
    folder = leftover(tmp_path, host="elsewhere", boot="elsewhere")
    run(tmp_path, NEW)
    assert folder.exists()
    assert matching(tmp_path)


def test_a_reused_process_number_is_not_the_owner(tmp_path):
    folder = tmp_path / f".viewshed-{os.getppid()}-abc"
    folder.mkdir()
    owner = {**_atomic._owner(os.getppid()), "start": "1"}
    (folder / "owner").write_text(json.dumps(owner))
    run(tmp_path, NEW)
    assert not folder.exists()


def test_a_live_owner_is_known_by_its_start(tmp_path):
    folder = tmp_path / f".viewshed-{os.getppid()}-abc"
    folder.mkdir()
    (folder / "owner").write_text(json.dumps(_atomic._owner(os.getppid())))
    with pytest.raises(OutputError, match=rf"another run \(process {os.getppid()}\)"):
        check_out_dir(tmp_path)
    assert folder.exists()


def test_a_zombie_is_dead(tmp_path):
    child = subprocess.Popen([sys.executable, "-c", ""])
    deadline = time.monotonic() + 20
    while _atomic._start(child.pid) and time.monotonic() < deadline:
        time.sleep(0.01)
    assert _atomic._start(child.pid) == ""
    assert _atomic._is_process(child.pid)
    child.wait()
    assert not _atomic._is_process(child.pid)
    assert _atomic._start(child.pid) == ""


RACER = """
import sys
sys.path[:0] = [sys.argv[1], sys.argv[2]]
from test_atomic import run
from viewshed.errors import OutputError
from viewshed.io._atomic import check_out_dir
out, name, overwrite = sys.argv[3], sys.argv[4], sys.argv[5] == "overwrite"
print("ready", flush=True)
sys.stdin.readline()
try:
    check_out_dir(out, overwrite)
    run(out, {"visible.tif": name, f"{name}.tif": name}, overwrite=overwrite)
except OutputError as error:
    print(error)
else:
    print("done")
"""


@pytest.mark.parametrize("how", ["keep", "overwrite"])
def test_runs_that_start_together_leave_one_whole_result(tmp_path, how):
    out, here = tmp_path / "new/ü out", str(Path(__file__).parent)
    racers = [
        subprocess.Popen(
            [sys.executable, "-c", RACER, str(ROOT), here, str(out), name, how],
            stdin=subprocess.PIPE,
            stdout=subprocess.PIPE,
            text=True,
        )
        for name in "abcd"
    ]
    for racer in racers:
        assert racer.stdout.readline() == "ready\n"
    for racer in racers:
        racer.stdin.write("go\n")
        racer.stdin.flush()
    told = [racer.communicate()[0].splitlines() for racer in racers]
    winners = [name for name, lines in zip("abcd", told, strict=True) if lines == ["done"]]
    assert len(winners) == 1 if how == "keep" else winners
    for lines in told:
        assert len(lines) == 1
        assert lines == ["done"] or "is writing into this folder" in lines[0] or (
            how == "keep" and "exists; use --overwrite" in lines[0]
        )  # fmt: skip
    last = (out / "visible.tif").read_text()
    assert last in winners
    assert content(out) == {"visible.tif": last, f"{last}.tif": last}
    assert matching(out)
    assert not list(out.glob(".viewshed*"))


def test_a_folder_that_a_failing_run_takes_away_is_made_again(tmp_path, monkeypatch):
    make = _atomic._make_folders

    def vanishing(folder):
        made = make(folder)
        folder.rmdir()
        return made

    monkeypatch.setattr(_atomic, "_make_folders", vanishing)
    run(tmp_path / "out", NEW)
    assert matching(tmp_path / "out")


# --- another disk -------------------------------------------------------------------------------


@pytest.fixture
def other_disk(tmp_path):
    """Give a folder on another file system than the one of temporary files."""
    memory = Path("/dev/shm")
    if not os.access(memory, os.W_OK) or memory.stat().st_dev == tmp_path.stat().st_dev:
        pytest.skip("there is no second file system to write to")
    with tempfile.TemporaryDirectory(dir=memory, prefix="viewshed ü ") as folder:
        yield Path(folder)


def test_a_folder_on_another_disk(tmp_path, other_disk, monkeypatch):
    monkeypatch.chdir(tmp_path)
    run(other_disk / "out", OLD)
    run(other_disk / "out", NEW, overwrite=True)
    assert content(other_disk / "out") == NEW
    assert matching(other_disk / "out")


def test_a_link_to_a_folder_on_another_disk(tmp_path, other_disk):
    (tmp_path / "link").symlink_to(other_disk)
    run(tmp_path / "link", OLD)
    with pytest.raises(Oops), staged(tmp_path / "link", overwrite=True) as stage:  # noqa: PT012
        fill(stage, NEW)
        raise Oops
    assert content(other_disk) == OLD
    assert matching(tmp_path / "link")


def test_a_record_on_another_disk_finds_its_inputs(tmp_path, other_disk):
    (tmp_path / "ü dem.tif").write_text("heights")
    found = relative_path(tmp_path / "ü dem.tif", other_disk / "out")
    (other_disk / "out").mkdir()
    assert (other_disk / "out" / found).read_text() == "heights"
