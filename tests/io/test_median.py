"""The median of numbers in parts is that of all of them."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from viewshed.io._median import median

FINITE = st.floats(-(2.0**99), 2.0**99, width=32)


@given(st.lists(FINITE, min_size=1, max_size=40), st.integers(1, 5))
def test_it_is_that_of_all(numbers, parts):
    whole = np.array(numbers, dtype=np.float32)
    found = median(lambda: iter(np.array_split(whole, parts)), whole.size)
    assert found == float(np.median(whole))


@pytest.mark.parametrize("count", [1, 2, 999, 1000])
def test_many_alike(count):
    whole = np.full(count, -2.5, np.float32)
    assert median(lambda: iter([whole]), count) == -2.5
