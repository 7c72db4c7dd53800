"""The README's commands and its Python run as they stand there, in order."""

import re
import shlex
import warnings

import pytest
from click.testing import CliRunner

from viewshed.cli.main import cli
from viewshed.cli.map import map_command
from viewshed.errors import ViewshedWarning


@pytest.fixture(scope="module")
def readme(root):
    return (root / "README.md").read_text(encoding="utf-8")


@pytest.fixture
def folder(root, tmp_path, monkeypatch):
    """An empty folder with the sample beside it."""
    (tmp_path / "sample_dem").symlink_to(root / "sample_dem")
    monkeypatch.chdir(tmp_path)
    return tmp_path


def commands(text):
    joined = re.sub(r"\\\n\s*", " ", text)
    return re.findall(r"^    (viewshed .*)$", joined, re.MULTILINE)


@pytest.mark.slow
def test_the_walk_runs(readme, folder):
    lines = commands(readme)
    assert [shlex.split(line)[1] for line in lines] == ["check", "map", "polygons", "rerun"]
    told = {}
    for line in lines:
        words = shlex.split(line)[1:]
        result = CliRunner().invoke(cli, words, prog_name="viewshed")
        assert result.exit_code == 0, result.output
        told[words[0]] = result
    shown = re.findall(r"^    ((?:Visible|Hidden|Unresolved|Observers) .*)$", readme, re.MULTILINE)
    assert shown == told["map"].stderr.splitlines()[-len(_from(told["map"])) :][: len(shown)]
    assert (folder / "turbines" / "seen.shp").is_file()
    assert "different" not in told["rerun"].stdout


def _from(result):
    """Lines from the first row of the table on."""
    lines = result.stderr.splitlines()
    first = next(n for n, line in enumerate(lines) if line.startswith("Visible"))
    return lines[first:]


@pytest.mark.slow
def test_the_python_runs(readme, folder):
    (code,) = re.findall(r"```python\n(.*?)```", readme, re.DOTALL)
    names = {}
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", ViewshedWarning)  # ranges reach past the sample
        exec(compile(code, "README.md", "exec"), names)
    assert (folder / "turbines" / "visible.gpkg").is_file()
    assert set(names["seen"].state) == {"visible"}
    assert names["seen"].area_m2.min() >= 5000


def test_every_option_of_map_is_told(readme):
    for option in map_command.params:
        for name in option.opts:
            if name.startswith("--"):
                short = {"--verbose": "`-v`", "--quiet": "`-q`"}.get(name, name)
                assert short in readme, name
