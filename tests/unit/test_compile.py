"""Kernels are compiled once, and the user is told."""

import json
import os
import subprocess
import sys

import numba
import pytest

from viewshed import _jit
from viewshed.errors import ViewshedWarning

#: Answers a small scene and prints how often each kernel came from the disk and was compiled.
PROGRAM = """
import json
import numpy as np
from tests.helpers import affine_map, flat
from viewshed.kernels import sweep
from viewshed.visibility import compute

for threads in (1, 2):
    got = compute(flat(9), affine_map(4.0, 4.0), eye_height=2.0, clearance=True, threads=threads)
assert np.all(got.visible == 1)
stats = {kernel.__name__: kernel.stats for kernel in (sweep.sweep, sweep.axis)}
print(json.dumps({
    name: [sum(found.cache_hits.values()), sum(found.cache_misses.values())]
    for name, found in stats.items()
}))
"""


def run(root, cache):
    """Run the program in a process of its own."""
    environment = os.environ | {"NUMBA_CACHE_DIR": str(cache), "PYTHONPATH": str(root)}
    done = subprocess.run(
        [sys.executable, "-c", PROGRAM],
        cwd=root,
        env=environment,
        capture_output=True,
        text=True,
        timeout=600,
        check=True,
    )
    return json.loads(done.stdout), done.stderr


@pytest.mark.slow
def test_a_second_process_does_not_compile(root, tmp_path):
    first, said = run(root, tmp_path)
    assert first == {"sweep": [0, 1], "axis": [0, 1]}
    assert said.count("compiling the kernels") == 1
    stored = sorted(path.name for path in tmp_path.rglob("*.nb?"))

    second, said = run(root, tmp_path)
    assert second == {"sweep": [1, 0], "axis": [1, 0]}
    assert said == ""
    assert sorted(path.name for path in tmp_path.rglob("*.nb?")) == stored


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
