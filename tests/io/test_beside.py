"""Files among others: whole or not at all, and what was there is spared or put back."""

import os
import subprocess
import sys
from pathlib import Path

import pytest

from viewshed.errors import OutputError
from viewshed.io import _atomic
from viewshed.io._beside import check_place, placed

ROOT = Path(__file__).parents[2]
NAMES = ["a.shp", "a.dbf"]
SIDE = ["a.qix"]


def fill(folder, text="new", names=NAMES):
    for name in names:
        (folder / name).write_text(text)


def texts(folder):
    return {p.name: p.read_text() for p in folder.iterdir()}


def test_new_files_stand_beside_others(tmp_path):
    fill(tmp_path, "other", ["b.txt"])
    with placed(tmp_path, NAMES, side=SIDE) as hidden:
        assert hidden.parent == tmp_path
        fill(hidden)
        assert not (tmp_path / "a.shp").exists()
    assert texts(tmp_path) == {"a.shp": "new", "a.dbf": "new", "b.txt": "other"}


@pytest.mark.parametrize("name", [*NAMES, *SIDE])
def test_what_is_there_is_spared(tmp_path, name):
    fill(tmp_path, "old", [name])
    with (
        pytest.raises(OutputError, match=f"{name}: exists; use --overwrite"),
        placed(tmp_path, NAMES, side=SIDE),
    ):
        pytest.fail("a folder to work in was given")
    assert texts(tmp_path) == {name: "old"}


def test_all_old_files_go_when_the_new_ones_come(tmp_path):
    fill(tmp_path, "old", [*NAMES, *SIDE, "a.qml"])
    with placed(tmp_path, NAMES, side=SIDE, overwrite=True) as hidden:
        fill(hidden)
    assert texts(tmp_path) == {"a.shp": "new", "a.dbf": "new", "a.qml": "old"}


def test_a_failure_leaves_the_old_files(tmp_path):
    fill(tmp_path, "old", [*NAMES, *SIDE])
    with (
        pytest.raises(OutputError, match="No such file"),
        placed(tmp_path, NAMES, side=SIDE, overwrite=True) as hidden,
    ):
        fill(hidden / "none")
    assert texts(tmp_path) == dict.fromkeys([*NAMES, *SIDE], "old")


def test_a_file_that_was_not_made_is_noticed(tmp_path):
    fill(tmp_path, "old")
    with (
        pytest.raises(OutputError, match=r"a\.dbf: was not made"),
        placed(tmp_path, NAMES, overwrite=True) as hidden,
    ):
        fill(hidden, names=["a.shp"])
    assert texts(tmp_path) == dict.fromkeys(NAMES, "old")


def test_a_failure_half_way_puts_everything_back(tmp_path, monkeypatch):
    fill(tmp_path, "old", [*NAMES, *SIDE])
    rename = Path.rename

    def fail_at_the_last(self, target):
        if self.read_text() == "new" and self.name == "a.shp":
            raise OSError(28, "No space left on device")
        return rename(self, target)

    monkeypatch.setattr(Path, "rename", fail_at_the_last)
    with (
        pytest.raises(OutputError, match="No space left"),
        placed(tmp_path, NAMES, side=SIDE, overwrite=True) as hidden,
    ):
        fill(hidden)
    assert texts(tmp_path) == dict.fromkeys([*NAMES, *SIDE], "old")


KILLED = """
import os, sys
from pathlib import Path
from tests.io.test_beside import NAMES, SIDE, fill
from viewshed.io._beside import placed
rename = Path.rename
def die(self, target):
    if self.name == "a.shp" and self.read_text() == "new":
        os._exit(9)
    return rename(self, target)
Path.rename = die
with placed(Path(sys.argv[1]), NAMES, side=SIDE, overwrite=True) as hidden:
    fill(hidden)
"""


def test_the_next_run_puts_back_what_a_killed_one_took(tmp_path):
    fill(tmp_path, "old", [*NAMES, *SIDE])
    done = subprocess.run([sys.executable, "-c", KILLED, str(tmp_path)], check=False, cwd=ROOT)
    assert done.returncode == 9
    assert not (tmp_path / "a.shp").exists()
    with placed(tmp_path, ["c.fgb"]) as hidden:
        fill(hidden, names=["c.fgb"])
    assert texts(tmp_path) == {**dict.fromkeys([*NAMES, *SIDE], "old"), "c.fgb": "new"}


def test_two_runs_do_not_meet(tmp_path):
    with placed(tmp_path, NAMES) as hidden:
        with (
            pytest.raises(OutputError, match="another run is writing into this folder"),
            placed(tmp_path, ["b.fgb"]),
        ):
            pytest.fail("a folder to work in was given")
        fill(hidden)


def test_a_folder_has_to_be_there(tmp_path):
    with pytest.raises(OutputError, match="none: is not a folder that exists; make it"):
        check_place(tmp_path / "none", NAMES)


def test_a_folder_has_to_be_writable(tmp_path, monkeypatch):
    monkeypatch.setattr(os, "access", lambda *_: False)
    with pytest.raises(OutputError, match="cannot be written into"):
        check_place(tmp_path, NAMES)


def test_files_of_a_recorded_result_are_not_replaced(tmp_path):
    record = f'{{"format": "{_atomic.RECORD_FORMAT}", "outputs": {{"a.shp": {{}}}}}}'
    (tmp_path / "record.json").write_text(record)
    fill(tmp_path, "old")
    with pytest.raises(OutputError, match=r"a\.shp: belongs to the result that record\.json"):
        check_place(tmp_path, NAMES, overwrite=True)
    check_place(tmp_path, ["b.shp"])


def test_a_record_of_something_else_is_nothing_to_us(tmp_path):
    (tmp_path / "record.json").write_text("[1]")
    check_place(tmp_path, NAMES)
