"""The layers of the package: who may import what, and what stays out until it is needed."""

import ast
import json
import subprocess
import sys
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parent.parent
PACKAGE = ROOT / "viewshed"

#: Layer of every top-level module or folder of the package; a new one gets its line here.
LAYERS = {
    "_version": 0,
    "errors": 0,
    "constants": 0,
    "notes": 1,
    "_jit": 1,
    "crew": 1,
    "areas": 2,
    "extent": 2,
    "atmosphere": 2,
    "geodesy": 2,
    "grid": 2,
    "places": 2,
    "wording": 2,
    "postmap": 2,
    "kernels": 3,
    "wedges": 4,
    "visibility": 4,
    "combine": 4,
    "tally": 4,
    "placing": 4,
    "io": 5,
    "recording": 6,
    "result": 6,
    "writing": 6,
    "looking": 6,
    "api": 6,
    "rerun": 6,
    "cli": 7,
    "__init__": 8,
    "__main__": 8,
}
#: Libraries a layer may import, beside the standard one.
LIBRARIES = {
    0: {"numpy"},
    1: {"numba", "numpy"},
    2: {"numpy", "affine"},
    3: {"numpy", "numba"},
    4: {"numpy", "scipy"},
    5: {
        "numpy", "affine", "rasterio", "geopandas", "pandas", "pyogrio", "shapely", "matplotlib",
        "mpl_toolkits", "llvmlite", "PIL",
    },
    6: {"numpy", "affine"},
    7: {"click"},
    8: set(),
}  # fmt: skip
#: The only module that may import pyproj.
PROJ_MODULE = "geodesy"
#: Libraries that neither `import viewshed` nor `viewshed --help` may load.
HEAVY = ("numpy", "numba", "rasterio", "pyproj", "geopandas", "matplotlib", "shapely", "pyogrio")
TOP_LEVEL = {"README.md", "DEVELOPERS.md", "pyproject.toml", "LICENSE"}
TOP_FOLDERS = {"viewshed", "tests", "sample_dem", "scripts"}

MODULES = sorted(PACKAGE.rglob("*.py"))
IDS = [path.relative_to(PACKAGE).as_posix() for path in MODULES]
every_module = pytest.mark.parametrize("path", MODULES, ids=IDS)


def part_of(path):
    """Top-level name of a module in the package, the key of LAYERS."""
    first = path.relative_to(PACKAGE).parts[0]
    return first.removesuffix(".py")


def imports(path, tree):
    """Yield the absolute dotted names that a tree imports."""
    package = ["viewshed", *path.relative_to(PACKAGE).parts[:-1]]
    for node in ast.walk(tree):
        if isinstance(node, ast.Import):
            yield from (alias.name for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            stem = package[: len(package) - node.level + 1] if node.level else []
            base = ".".join([*stem, *([node.module] if node.module else [])])
            yield from (f"{base}.{alias.name}" for alias in node.names)


def parse(path):
    return ast.parse(path.read_text(encoding="utf-8"), filename=str(path))


def foreign(names):
    """Libraries among dotted names: neither the standard library nor the package itself."""
    tops = {name.split(".")[0] for name in names}
    return tops - set(sys.stdlib_module_names) - {"viewshed"}


@every_module
def test_every_module_has_a_layer(path):
    assert part_of(path) in LAYERS, f"give {part_of(path)} a layer in {Path(__file__).name}"


@every_module
def test_lower_layer_never_imports_higher(path):
    own = LAYERS[part_of(path)]
    for name in imports(path, parse(path)):
        parts = name.split(".")
        if parts[0] == "viewshed" and len(parts) > 1:
            other = parts[1] if parts[1] in LAYERS else "__init__"
            if own < LAYERS["__init__"]:
                assert LAYERS[other] <= own, f"{path.name} imports {name} from a higher layer"


@every_module
def test_libraries_stay_in_their_layer(path):
    part = part_of(path)
    allowed = LIBRARIES[LAYERS[part]] | ({"pyproj"} if part == PROJ_MODULE else set())
    extra = foreign(imports(path, parse(path))) - allowed
    assert not extra, f"{path.relative_to(ROOT)} may not import {', '.join(sorted(extra))}"


@every_module
def test_commands_import_only_click_at_the_top(path):
    if part_of(path) not in {"cli", "__init__"}:
        return
    top = ast.Module(body=[n for n in parse(path).body if not is_type_checking(n)], type_ignores=[])
    for node in ast.walk(top):
        if isinstance(node, ast.FunctionDef):
            node.body = []
    names = list(imports(path, top))
    assert foreign(names) <= {"click"}
    light = {"_version", "errors", "constants", "cli"}
    own = {name.split(".")[1] for name in names if name.startswith("viewshed.")}
    assert own <= light, f"import {', '.join(sorted(own - light))} inside the command"


def is_type_checking(node):
    return isinstance(node, ast.If) and "TYPE_CHECKING" in ast.dump(node.test)


@pytest.mark.parametrize(
    "words",
    [
        *([], ["--help"], ["--version"], ["map", "--help"], ["check", "--help"]),
        *(["polygons", "--help"], ["rerun", "--help"]),
    ],
)
def test_heavy_libraries_wait(words):
    call = f"""
from contextlib import suppress
from viewshed.cli.main import main
with suppress(SystemExit):
    main({words!r})
"""
    report = f"import json, sys; print(json.dumps([m for m in {HEAVY!r} if m in sys.modules]))"
    done = subprocess.run(
        [sys.executable, "-c", (call if words else "import viewshed\n") + report],
        capture_output=True,
        text=True,
        check=False,
        cwd=ROOT,
    )
    assert done.returncode == 0, done.stderr
    assert json.loads(done.stdout.splitlines()[-1]) == []


def test_top_level_holds_only_what_belongs_there():
    if not (ROOT / ".git").exists():  # a copy without history has nothing to compare
        return
    listed = subprocess.run(
        ["git", "ls-files", "--cached", "--others", "--exclude-standard"],
        capture_output=True,
        text=True,
        check=True,
        cwd=ROOT,
    ).stdout.splitlines()
    tops = {line.split("/")[0] for line in listed}
    strange = {top for top in tops - TOP_LEVEL - TOP_FOLDERS if not top.startswith(".")}
    assert not strange, f"does not belong at the top: {', '.join(sorted(strange))}"


def public(node, prefix=""):
    """Yield (name, node) of public classes, functions and methods; not what functions hide."""
    for child in node.body:
        if not isinstance(child, ast.FunctionDef | ast.AsyncFunctionDef | ast.ClassDef):
            continue
        if child.name.startswith("_"):
            continue
        yield prefix + child.name, child
        if isinstance(child, ast.ClassDef):
            yield from public(child, f"{prefix}{child.name}.")


@every_module
def test_public_things_have_docstrings(path):
    tree = parse(path)
    bare = [name for name, node in public(tree) if not ast.get_docstring(node)]
    assert ast.get_docstring(tree), f"{path.relative_to(ROOT)} has no docstring"
    assert not bare, f"{path.relative_to(ROOT)}: no docstring on {', '.join(bare)}"
