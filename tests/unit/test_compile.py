"""Kernels are compiled once, and the user is told."""

import json
import os
import subprocess
import sys

import numba
import pytest

from tests.helpers import affine_map, flat
from viewshed import _jit
from viewshed.errors import ViewshedWarning
from viewshed.visibility import compute

#: A kernel in a file of its own, and a program that runs it and tells where it came from.
KERNEL = """
from viewshed._jit import kernel

@kernel
def twice(x):
    return x * 2.0
"""
PROGRAM = """
import json, logging, sys
sys.path.insert(0, sys.argv[1])
logging.basicConfig(format="%(message)s")
from small import twice
from viewshed._jit import announce

announce(twice)
assert twice(4.0) == 8.0
announce(twice)
found = twice.stats
print(json.dumps([sum(found.cache_hits.values()), sum(found.cache_misses.values())]))
"""
#: The same of the engine's kernels, with several threads, from the cache of these tests.
ENGINE = """
import json
import numpy as np
from tests.helpers import affine_map, flat
from viewshed.kernels import sweep
from viewshed.visibility import compute

for threads in (1, 2):
    got = compute(flat(9), affine_map(4.0, 4.0), eye_height=2.0, clearance=True, threads=threads)
assert np.all(got.visible == 1)
print(json.dumps([sum(k.stats.cache_misses.values()) for k in (sweep.sweep, sweep.axis)]))
"""


def run(root, program, *args, **environment):
    """Run a program in a process of its own; give what it printed and said."""
    done = subprocess.run(
        [sys.executable, "-c", program, *map(str, args)],
        cwd=root,
        env=os.environ | {"PYTHONPATH": str(root), **environment},
        capture_output=True,
        text=True,
        timeout=600,
        check=True,
    )
    return json.loads(done.stdout), done.stderr


def test_a_kernel_is_compiled_once_and_that_is_said(root, tmp_path):
    (tmp_path / "small.py").write_text(KERNEL, encoding="utf-8")
    cache = {"NUMBA_CACHE_DIR": str(tmp_path / "cache")}
    hits_and_misses, said = run(root, PROGRAM, tmp_path, **cache)
    assert hits_and_misses == [0, 1]
    assert said.count("compiling the kernels") == 1
    stored = sorted(path.name for path in tmp_path.rglob("*.nb?"))
    hits_and_misses, said = run(root, PROGRAM, tmp_path, **cache)
    assert hits_and_misses == [1, 0]
    assert said == ""
    assert sorted(path.name for path in tmp_path.rglob("*.nb?")) == stored


@pytest.mark.slow
def test_another_process_does_not_compile_the_engine(root):
    compute(flat(9), affine_map(4.0, 4.0), eye_height=2.0)
    misses, said = run(root, ENGINE)
    assert misses == [0, 0]
    assert said == ""


def test_no_writable_cache_is_a_warning(monkeypatch):
    plain = numba.njit

    def refuse(*args, **options):
        if options.get("cache"):
            msg = "cannot cache function: no locator available"
            raise RuntimeError(msg)
        return plain(*args, **options)

    monkeypatch.setattr(numba, "njit", refuse)
    with pytest.warns(ViewshedWarning, match="set NUMBA_CACHE_DIR"):
        double = _jit.kernel(lambda x: 2 * x)
    assert double(4) == 8


def test_kernels_keep_strict_floating_point():
    """Otherwise serial, parallel and reference answers differ in their last bits."""
    assert _jit.OPTIONS["fastmath"] is False
    assert _jit.OPTIONS["nogil"] is True
