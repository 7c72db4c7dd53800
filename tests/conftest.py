"""What all tests share."""

import importlib.util
import sys
from pathlib import Path

import pytest
from hypothesis import HealthCheck, settings

ROOT = Path(__file__).resolve().parent.parent

# The first example of a property may have to wait for a compiler.
settings.register_profile(
    "viewshed", deadline=None, print_blob=True, suppress_health_check=[HealthCheck.too_slow]
)
settings.load_profile("viewshed")


@pytest.fixture(scope="session")
def root():
    """Top folder of the project."""
    return ROOT


@pytest.fixture(scope="session")
def sample_dem(root):
    """Folder of the sample terrain."""
    return root / "sample_dem"


@pytest.fixture
def load_script(root, monkeypatch):
    """Function that loads a script of scripts/ as a fresh module."""

    def load(name):
        monkeypatch.syspath_prepend(root / "scripts")
        spec = importlib.util.spec_from_file_location(
            f"script_{name}", root / "scripts" / f"{name}.py"
        )
        module = importlib.util.module_from_spec(spec)
        spec.loader.exec_module(module)
        return module

    yield load
    sys.modules.pop("_environment", None)
