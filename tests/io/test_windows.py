"""Windows of a terrain read as one."""

import warnings

import numpy as np
import pytest

from viewshed.errors import DataError, ViewshedWarning
from viewshed.io._windows import Windows, condensed
from viewshed.io.elevation import open_terrain

FEW = "a.tif: 3 cells of -9999 are not declared; declare them"
MORE = "a.tif: 40 cells of -9999 are not declared; declare them"


def test_counts_of_the_same_warning_are_summed():
    assert condensed([FEW, MORE, FEW]) == [FEW.replace("3", "46")]


def test_counts_are_left_out_where_windows_share_cells():
    assert condensed([FEW, MORE], counted=False) == [FEW.replace("3 cells", "cells")]


def test_other_files_and_values_are_told_apart():
    others = [FEW, FEW.replace("a.tif", "b2.tif"), FEW.replace("-9999", "-32768")]
    assert condensed(others + others) == [text.replace("3 cells", "6 cells") for text in others]


def test_only_the_first_of_many_alike_are_told():
    many = [f"n{i}.tif and n{i + 1}.tif overlap and differ by up to {i} m" for i in range(9)]
    told = condensed(["something else", *many])
    assert told[:3] == ["something else", *many[:2]]
    assert told[3:] == [f"{many[2]} (and 6 more warnings like it)"]


def test_a_window_may_be_void_all_over(make_dem):
    array = np.full((12, 10), np.nan, np.float32)
    array[8:] = 5
    windows = Windows(open_terrain(make_dem(array=array)))
    assert np.isnan(windows.read(0, 0, 8, 10)).all()
    assert (windows.read(8, 0, 4, 10) == 5).all()


def test_other_errors_stay(make_dem):
    path = make_dem()
    windows = Windows(open_terrain(path))
    path.unlink()
    with pytest.raises(DataError, match=r"dem.tif: no such file"):
        windows.read(0, 0, 12, 10)


def test_warnings_wait_until_they_are_asked_for(make_dem):
    array = np.zeros((12, 10), np.float32)
    array[:, 4] = -9999
    windows = Windows(open_terrain(make_dem(array=array)))
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        for row in range(0, 12, 4):
            windows.read(row, 0, 4, 10)
    with pytest.warns(ViewshedWarning, match="dem.tif: cells of -9999") as caught:
        windows.warn()
    assert len(caught) == 1
    assert "12 cells" in condensed(windows.met)[0]
