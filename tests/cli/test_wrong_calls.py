"""What a wrong call ends in: exit code 2 and one line that echoes the value and names the cure."""

import os
import subprocess
import sys

import pytest
from click.testing import CliRunner

from viewshed.cli.main import cli

RIGHT = {"--observer": "1,2", "--out": "results"}


def run(*args):
    return CliRunner().invoke(cli, [str(a) for a in args], prog_name="viewshed")


def call(**changes):
    options = {**RIGHT, **{f"--{k.replace('_', '-')}": v for k, v in changes.items()}}
    return ["map", "dem.tif", *(part for pair in options.items() for part in pair)]


@pytest.mark.parametrize(
    ("changes", "words"),
    [
        ({"observer": "here"}, ("--observer", "'here'", "X,Y")),
        ({"out": ""}, ("--out", "no name")),
        ({"observer": "1"}, ("'1'", "X,Y")),
        ({"observer": "nan,2"}, ("'nan,2'", "X,Y")),
        ({"observer": "1,inf"}, ("'1,inf'", "X,Y")),
        ({"observer_crs": "EPSG:1"}, ("--observer-crs", "'EPSG:1'", "EPSG:32633")),
        ({"observer_crs": "EPSG:4978"}, ("EPSG:4978", "projected")),
        ({"crs": "mine"}, ("--crs", "'mine'", "EPSG:32633")),
        ({"range": "0"}, ("--range", "'0'", "more than 0")),
        ({"range": "-5km"}, ("'-5km'", "more than 0")),
        ({"range": "far"}, ("'far'", "30km")),
        ({"range": "5 parsecs"}, ("'5 parsecs'", "nmi")),
        ({"range": "nan"}, ("'nan'", "30km")),
        ({"range": "1e999"}, ("'1e999'", "30km")),
        ({"eye_height": "-1"}, ("--eye-height", "'-1'", "0 or more")),
        ({"eye_height": "tall"}, ("'tall'",)),
        ({"eye_height": "nan"}, ("'nan'",)),
        ({"eye_elevation": "nan"}, ("--eye-elevation", "'nan'")),
        ({"target_height": "-0.1m"}, ("--target-height", "'-0.1m'", "0 or more")),
        ({"sector": "north"}, ("--sector", "'north'", "FROM,TO")),
        ({"sector": "10,10"}, ("10,10", "0,360")),
        ({"sector": "0,900"}, ("900", "degrees")),
        ({"refraction": "1"}, ("--refraction", "k = 1", "K=4/3")),
        ({"refraction": "1.333"}, ("1.333", "K=1.333")),
        ({"refraction": "K=0.4"}, ("K=0.4", "0.5")),
        ({"refraction": "nan"}, ("'nan'", "survey")),
        ({"refraction": "thick"}, ("'thick'", "survey")),
        ({"layers": "visible,shade"}, ("--layers", "'shade'", "needed-height")),
        ({"layers": ""}, ("''", "needed-height")),
        ({"layers": "Clearance"}, ("'Clearance'", "clearance")),
        ({"picture": "gif"}, ("--picture", "'gif'", "'png'")),
        ({"height_unit": "yd"}, ("--height-unit", "'yd'", "'us-ft'")),
        ({"co": "fast"}, ("--co", "'fast'", "COMPRESS=")),
        ({"threads": "0"}, ("--threads", "0")),
        ({"memory": "abc"}, ("--memory", "'abc'", "2GiB")),
        ({"memory": "2 GiBs"}, ("'2 GiBs'", "800MB")),
        ({"memory": "-1GB"}, ("'-1GB'", "2GiB")),
        ({"memory": "10"}, ("--memory", "0.01 kB", "at least 750MB")),
        ({"memory": "749MB"}, ("749 MB", "at least 750MB")),
        ({"eye_height": "3", "eye_elevation": "120"}, ("3 m", "120 m", "one of them")),
        ({"speed": "1"}, ("--speed",)),
    ],
)
def test_wrong_values(changes, words):
    result = run(*call(**changes))
    assert result.exit_code == 2, result.output
    assert result.stdout == ""
    (line,) = result.stderr.splitlines()
    assert line.startswith("Error: ")
    assert line.endswith("(see viewshed map --help)")
    for word in words:
        assert word in line


@pytest.mark.parametrize(
    ("args", "words"),
    [
        (["map"], "DEM"),
        (["map", "dem.tif", "--out", "x"], "--observer"),
        (["map", "dem.tif", "--observer", "1,2"], "--out"),
        (["plan"], "'plan'"),
        (["--fast"], "--fast"),
    ],
)
def test_what_is_missing_or_unknown_is_told_in_one_line(args, words):
    result = run(*args)
    assert result.exit_code == 2
    (line,) = result.stderr.splitlines()
    assert words in line


def test_without_a_command_the_help_is_shown():
    result = run()
    assert result.exit_code == 2
    assert "Usage: viewshed" in result.output


@pytest.mark.parametrize("flag", ["--help", "-h"])
def test_help_teaches(flag):
    overview, details = run(flag), run("map", flag)
    assert overview.exit_code == details.exit_code == 0
    assert "viewshed map dem.tif --observer" in overview.stdout
    for part in (
        "A worked example:",
        "What the values mean:",
        "2 unresolved",
        "K=4/3",
        "--observer -68.85,42.0",
        "Who looks:",
        "Results:",
        "Not for",
        "[default: 30 km]",
    ):
        assert part in details.stdout
    assert max(map(len, details.stdout.splitlines())) <= 80


def test_version():
    from viewshed._version import __version__

    result = run("--version")
    assert (result.exit_code, result.stdout) == (0, f"viewshed {__version__}\n")


def test_help_loads_nothing_but_click():
    code = (
        "import sys; from viewshed.cli.main import main\n"
        "try: main(['map', '--help'])\n"
        "except SystemExit: pass\n"
        "heavy = {'numpy', 'numba', 'rasterio', 'pyproj', 'matplotlib', 'scipy', 'affine'}\n"
        "print('loaded', sorted(heavy & set(sys.modules)))"
    )
    path = {**os.environ, "PYTHONPATH": os.pathsep.join(sys.path)}
    done = subprocess.run(
        [sys.executable, "-c", code], capture_output=True, text=True, check=True, env=path
    )
    assert done.stdout.endswith("loaded []\n")
