"""Single files: names, patterns and texts written whole."""

from pathlib import Path

import pytest

from viewshed.errors import OutputError
from viewshed.io._files import file_sha256, is_pattern, write_text


def test_write_text(tmp_path):
    path = tmp_path / "å table.csv"
    assert write_text(path, "å;1\n") == file_sha256(path)
    assert path.read_bytes() == "å;1\n".encode()
    with pytest.raises(OutputError, match=r"^[^\n]*a\.csv: cannot be written: No such file[^\n]*$"):
        write_text(tmp_path / "no/a.csv", "")


def test_a_text_that_does_not_read_back(tmp_path, monkeypatch):
    monkeypatch.setattr(Path, "read_bytes", lambda _: b"")
    with pytest.raises(OutputError, match=r"a\.csv: cannot be written: it does not read back"):
        write_text(tmp_path / "a.csv", "x")
    assert not list(tmp_path.iterdir())


@pytest.mark.parametrize("text", ["*.tif", "dems/t?.tif", "dems [1]/a.tif", "**/a.tif"])
def test_patterns(tmp_path, monkeypatch, text):
    monkeypatch.chdir(tmp_path)
    assert is_pattern(text)
    assert is_pattern(Path(text))
    assert not is_pattern(text.translate(dict.fromkeys(map(ord, "*?["), "x")))


def test_what_has_the_name_of_a_pattern_is_none(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    (tmp_path / "run [1]").mkdir()
    (tmp_path / "run [1]/a[1].tif").write_text("")
    (tmp_path / "lost[1].tif").symlink_to("nowhere")
    assert not is_pattern("run [1]")
    assert not is_pattern("lost[1].tif"), "a link that leads nowhere is missing, and no pattern"
    assert is_pattern("a[1].tif")
    assert not is_pattern("a[1].tif", "run [1]")
    assert not is_pattern("b.tif", "run [1]"), "the folder is no part of it"
