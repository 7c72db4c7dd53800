"""Answers of several observers together, against the rules written out cell by cell."""

import numpy as np
import pytest

from viewshed.combine import Combination
from viewshed.constants import LAYERS
from viewshed.visibility import Visibility

SHAPE = (23, 31)


def some_views(n, seed=0):
    """What `n` observers see, each of a window of its own: (row0, col0, answer)."""
    rng = np.random.default_rng(seed)
    found = []
    for _ in range(n):
        rows, cols = rng.integers(1, SHAPE[0] + 1), rng.integers(1, SHAPE[1] + 1)
        row0, col0 = rng.integers(0, SHAPE[0] - rows + 1), rng.integers(0, SHAPE[1] - cols + 1)
        states = np.array([0, 1, 2, 255], np.uint8)
        visible = rng.choice(states, size=(rows, cols), p=(0.5, 0.2, 0.1, 0.2))
        clear = np.abs(rng.normal(size=visible.shape)).astype(np.float32)
        clear = np.where(visible == 1, clear, np.where(visible == 0, -clear, np.nan))
        clear = clear.astype(np.float32)
        need = np.maximum(np.float32(0), np.float32(1.5) - clear)
        found.append((int(row0), int(col0), Visibility(visible, clear, need, 0.0)))
    return found


def words_on(views, row, col):
    """State, clearance, needed height and number of each observer that has a word on a cell."""
    for n, (row0, col0, seen) in enumerate(views):
        r, c = row - row0, col - col0
        inside = 0 <= r < seen.visible.shape[0] and 0 <= c < seen.visible.shape[1]
        if inside and seen.visible[r, c] != 255:
            yield n, seen.visible[r, c], seen.clearance[r, c], seen.needed_height[r, c]


def expected(views, row, col):
    words = list(words_on(views, row, col))
    if not words:
        return {"visible": 255, "count": 65535, "count-unresolved": 65535, "who": 0}
    states = [state for _, state, _, _ in words]
    found = {
        "visible": 1 if 1 in states else 2 if 2 in states else 0,
        "count": states.count(1),
        "count-unresolved": states.count(2),
        "who": sum(1 << n for n, state, _, _ in words if state == 1),
    }
    if found["visible"] != 2:
        found["clearance"] = max(clear for _, state, clear, _ in words if state != 2)
        found["needed-height"] = min(need for _, state, _, need in words if state != 2)
    return found


@pytest.mark.parametrize("n", [1, 2, 3, 12, 32])
def test_like_the_rules_cell_by_cell(n):
    views = some_views(n, seed=n)
    common = Combination(SHAPE, LAYERS)
    for number, (row0, col0, seen) in enumerate(views):
        common.add(seen, row0, col0, number)
    layers = common.layers()
    assert next(iter(layers)) == "visible"
    assert set(layers) == set(LAYERS)
    for at in np.ndindex(SHAPE):
        want = expected(views, *at)
        for name, array in layers.items():
            if name in want:
                assert array[at] == want[name], (at, name)
            else:
                assert np.isnan(array[at]), (at, name)


def test_only_the_layers_asked_for_are_kept():
    common = Combination(SHAPE, ("visible", "count"))
    for n, (row0, col0, seen) in enumerate(some_views(3)):
        common.add(Visibility(seen.visible, None, None, 0.0), row0, col0, n)
    layers = common.layers()
    assert [(name, array.dtype.name) for name, array in layers.items()] == [
        ("visible", "uint8"),
        ("count", "uint16"),
    ]


def test_the_order_of_coming_changes_nothing():
    """Not even the sign of a zero, which no layer keeps."""
    views = list(enumerate(some_views(6, seed=4)))
    for n, (_, _, seen) in views[1:3]:
        seen.clearance[seen.visible == 1] = -0.0 if n == 1 else 0.0
    found = []
    for order in (views, views[::-1]):
        common = Combination(SHAPE, LAYERS)
        for n, (row0, col0, seen) in order:
            common.add(seen, row0, col0, n)
        found.append(common.layers())
    for name in LAYERS:
        assert found[0][name].tobytes() == found[1][name].tobytes(), name
    clear = found[0]["clearance"]
    assert (clear == 0.0).any()
    assert not np.signbit(clear[clear == 0.0]).any()
