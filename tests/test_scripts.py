"""The two commands that start from nothing but a Python."""

import ast
import os
import re
import shutil
import subprocess
import sys
import tomllib

import pytest

BARE = ("_environment", "demo", "test")


@pytest.fixture
def environment(load_script, tmp_path, monkeypatch):
    """Module _environment, working in an empty folder with a maker that only counts."""
    module = load_script("_environment")
    made = []

    def make(folder, requirements, constraints, files):
        made.append((folder.name, list(requirements), list(constraints)))
        folder.mkdir()

    shutil.copy(module.ROOT / "pyproject.toml", tmp_path)
    monkeypatch.setattr(module, "ROOT", tmp_path)
    monkeypatch.setattr(module, "HOME", tmp_path / "envs")
    monkeypatch.setattr(module, "_make", make)
    module.made = made
    yield module
    let_go(module)


def let_go(module):
    """Release the environments a module holds, as the end of its process would."""
    while module._HELD:
        module._HELD.pop().close()


@pytest.fixture
def copied(root, tmp_path):
    """Copy of what the scripts need to begin."""
    shutil.copytree(
        root / "scripts", tmp_path / "scripts", ignore=shutil.ignore_patterns("__pycache__")
    )
    shutil.copy(root / "pyproject.toml", tmp_path)
    return tmp_path


def launch(folder, name, *words, **variables):
    return subprocess.run(
        [sys.executable, str(folder / "scripts" / f"{name}.py"), *words],
        capture_output=True,
        text=True,
        check=False,
        cwd=folder.anchor,
        env={**os.environ, "PYTHONDONTWRITEBYTECODE": "1", **variables},
    )


@pytest.mark.parametrize("name", BARE)
def test_standard_library_only(root, name):
    tree = ast.parse((root / "scripts" / f"{name}.py").read_text(encoding="utf-8"))
    for node in ast.walk(tree):
        if isinstance(node, ast.Import):
            modules = [alias.name for alias in node.names]
        elif isinstance(node, ast.ImportFrom):
            modules = [node.module]
        else:
            continue
        tops = {module.split(".")[0] for module in modules}
        assert tops <= {*sys.stdlib_module_names, "_environment"}


@pytest.mark.parametrize("name", BARE)
def test_old_python_can_read_them(root, name):
    source = (root / "scripts" / f"{name}.py").read_text(encoding="utf-8")
    ast.parse(source, feature_version=(3, 6))
    # not covered by feature_version
    assert "from __future__ import annotations" not in source


@pytest.mark.parametrize("name", BARE)
def test_no_host_is_named(root, name):
    source = (root / "scripts" / f"{name}.py").read_text(encoding="utf-8")
    assert not re.search(r"https?://|index-url", source)


def test_too_old_python_is_one_line(load_script, monkeypatch, capsys):
    module = load_script("_environment")
    monkeypatch.setattr(module, "NEEDED", (9, 1))
    with pytest.raises(SystemExit) as left:
        module.run(lambda: 0)
    assert left.value.code == 1
    said = capsys.readouterr().err
    assert said.count("\n") == 1
    assert "Python 9.1 or newer is needed" in said


def test_missing_ensurepip_is_one_line(copied):
    shadow = copied / "shadow"
    shadow.mkdir()
    (shadow / "ensurepip.py").write_text("raise ImportError\n", encoding="utf-8")
    for name in ("demo", "test"):
        done = launch(copied, name, PYTHONPATH=str(shadow))
        assert done.returncode == 1
        assert done.stderr.count("\n") == 1
        assert "ensurepip" in done.stderr
        assert "python3-venv" in done.stderr


def test_made_once_then_reused(environment):
    first = environment.prepare("run")
    second = environment.prepare("run")
    assert first == second
    assert len(environment.made) == 1


def test_half_built_is_made_again(environment):
    python = environment.prepare("run")
    shutil.rmtree(python.parent.parent)
    let_go(environment)
    environment.prepare("run")
    assert len(environment.made) == 2


def test_new_pyproject_makes_a_new_one_and_sweeps_the_old(environment, monkeypatch):
    old = environment.prepare("run").parent.parent
    other = environment.prepare("test").parent.parent
    with monkeypatch.context() as patch:
        patch.setattr(environment.sys, "version_info", (3, 99, 0))
        newer = environment.prepare("run").parent.parent
    let_go(environment)
    with (environment.ROOT / "pyproject.toml").open("a", encoding="utf-8") as file:
        file.write("\n# changed\n")
    new = environment.prepare("run").parent.parent
    assert new != old
    assert new.exists()
    assert other.exists()
    assert newer.exists()
    assert not old.exists()


def test_one_in_use_is_not_swept(environment):
    old = environment.prepare("run").parent.parent
    with (environment.ROOT / "pyproject.toml").open("a", encoding="utf-8") as file:
        file.write("\n# changed\n")
    environment.prepare("run")
    assert old.exists()


def test_runs_at_once_make_it_once(copied):
    code = (
        "import sys, time; sys.path.insert(0, sys.argv[1])\n"
        "import _environment as e\n"
        "def make(folder, requirements, constraints, files):\n"
        "    folder.mkdir(); time.sleep(1); print('made')\n"
        "e._make = make\n"
        "e.prepare('run'); print('ready')\n"
    )
    words = [sys.executable, "-c", code, str(copied / "scripts")]
    runs = [
        subprocess.Popen(words, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True)
        for _ in range(3)
    ]
    said = "".join(run.communicate(timeout=60)[0] for run in runs)
    assert all(run.returncode == 0 for run in runs)
    assert said.count("made") == 1
    assert said.count("ready") == 3


@pytest.mark.slow
def test_no_network_names_what_is_missing(copied):
    offline = {"PIP_NO_INDEX": "1", "PIP_CONFIG_FILE": os.devnull, "PIP_FIND_LINKS": ""}
    for _ in range(2):  # the second run meets what the first left half built
        done = launch(copied, "demo", **offline)
        assert done.returncode == 1
        assert "Traceback" not in done.stderr
        last = done.stderr.splitlines()[-1]
        assert "could not fetch hatchling" in last
        assert "network" in last


def test_unwritable_folder_is_one_line(copied):
    (copied / ".venv-viewshed").write_text("in the way", encoding="utf-8")
    done = launch(copied, "demo")
    assert done.returncode == 1
    assert done.stderr.count("\n") == 1
    assert "cannot make an environment" in done.stderr


def test_lowest_pins_every_dependency(environment):
    pins = environment.lower_bounds()
    assert all(re.fullmatch(r"[a-z-]+==[\d.]+", pin) for pin in pins)
    assert {pin.split("==")[0] for pin in pins} >= {"numpy", "numba", "rasterio", "pyproj"}


def test_groups_are_resolved(environment):
    names = {re.split(r"[>=]", entry)[0] for entry in environment.group("dev")}
    assert {"pytest", "hypothesis", "ruff", "mypy"} <= names


def test_options_of_pytest_are_passed_on(load_script):
    script = load_script("test")
    options = script.parse(["--quick", "--", "-k", "grid"])
    name, words = script.steps(options)[-1]
    assert name == "tests"
    assert words == ["pytest", "-n", "2", "-m", "not slow", "-k", "grid"]
    assert [name for name, _ in script.steps(options)] == ["style", "types", "tests"]


def test_demo_table(load_script):
    rows = dict(
        load_script("demo").summary(
            {
                "areas_m2": {"visible": 1.5e9, "hidden": 2e6, "unresolved": 0.0, "nodata": 1.0},
                "farthest_visible": {
                    "x": 1.0,
                    "y": 2.0,
                    "distance_m": 29990.0,
                    "bearing_deg": 7.25,
                    "observer": "Mast",
                },
                "refraction": {"k": 0.13, "K": 1 / 0.87, "m": 0.065, "origin": "survey"},
            },
            4.25,
        )
    )
    assert rows["visible ground"] == "1,500.0 km2"
    assert rows["farthest visible point"] == "29.99 km from Mast, bearing 007.2"
    assert rows["refraction"] == "k = 0.13 (K = 1.149)"


def test_made_things_are_ignored(root):
    ignored = (root / ".gitignore").read_text(encoding="utf-8").splitlines()
    assert {"/.venv-viewshed/", "/demo_output/", "__pycache__/", "*.egg-info/"} <= set(ignored)


def test_ci_runs_the_same_command(root):
    run = root / ".ci" / "run"
    assert os.access(run, os.X_OK)
    assert "python3 scripts/test.py" in run.read_text(encoding="utf-8")


def test_package_is_described(root):
    project = tomllib.loads((root / "pyproject.toml").read_text(encoding="utf-8"))["project"]
    assert project["requires-python"] == ">=3.11"
    assert project["scripts"] == {"viewshed": "viewshed.cli.main:main"}
    assert "Apache License" in (root / "LICENSE").read_text(encoding="utf-8")
