"""What counts as sea, land and void."""

import numpy as np
import pytest

from fluvinv.errors import InputError
from fluvinv.terrain import find_sea, make_grid

N = np.nan


def grid_of(height):
    height = np.array(height, dtype=float)
    x, y = np.arange(height.shape[1]) * 100.0, -np.arange(height.shape[0]) * 100.0
    return make_grid(height, x, y, 32633)


def test_low_ground_is_sea_only_where_it_reaches_the_edge():
    sea, report = find_sea(
        grid_of([[9, 9, 9, 9, 9], [9, -3, 9, 9, 9], [9, 9, 9, -1, 9], [9, 9, 9, 9, 0], [9, 9, 9, 9, 9]])
    )
    # (1, 1) is closed in; (2, 3) reaches the edge over a corner; base level itself is sea
    assert np.argwhere(sea).tolist() == [[2, 3], [3, 4]]
    assert (report.n_sea, report.n_void, report.void_taken_as, report.coast_median_m) == (2, 0, "none", None)


def test_base_level_moves_the_coast():
    height = np.tile(np.arange(6.0), (4, 1))
    for level in range(5):
        assert find_sea(grid_of(height), base_level=float(level))[1].n_sea == 4 * (level + 1)


def test_low_ground_beside_a_void_is_sea():
    height = np.full((5, 5), 50.0)
    height[2, 1], height[2, 2] = -1, N
    sea, report = find_sea(grid_of(height), nodata="void")
    assert np.argwhere(sea).tolist() == [[2, 1]]
    assert (report.n_sea, report.n_void, report.void_taken_as) == (1, 1, "void")
    assert find_sea(grid_of(height), nodata="sea")[1].void_taken_as == "sea"


def test_each_void_region_is_judged_on_its_own():
    height = np.full((9, 15), 500.0)
    height[:, 0] = -5
    height[3:5, 1] = N  # touches sea with values: sea
    height[1:8, 4:7] = 20.0
    height[3:6, 5] = N  # land around at 20 m, within 5 % of 1000 m: sea
    height[4, 10] = N  # land around at 500 m: void
    height[8, 14] = 1000.0
    sea, report = find_sea(grid_of(height))
    assert sea[3:5, 1].all()
    assert sea[3:6, 5].all()
    assert not sea[4, 10]
    assert report.void_taken_as == "mixed"
    assert (report.n_void, report.n_void_sea, report.n_void_regions, report.n_void_regions_sea) == (6, 5, 3, 2)
    assert report.coast_median_m == 20.0
    assert report.n_sea == 9 + 5


def test_the_limit_is_the_median_of_the_border_and_five_percent_of_the_relief():
    height = np.full((5, 5), 100.0)
    height[2, 2] = N
    height[0, 0] = 1000.0
    height[1, 1:4], height[2, 1], height[2, 3] = 10.0, 50.0, 51.0
    height[3, 1:4] = 400.0
    # sorted border: 10 10 10 50 51 400 400 400, median 50.5 against 50
    assert find_sea(grid_of(height))[1].void_taken_as == "void"
    height[2, 3] = 50.0
    sea, report = find_sea(grid_of(height))
    assert report.void_taken_as == "sea"
    assert report.coast_median_m == 50.0
    assert sea[2, 2]
    assert find_sea(grid_of(height + 100), base_level=100.0)[1].void_taken_as == "sea"


def test_nothing_but_void_or_sea_is_refused_with_counts():
    with pytest.raises(InputError, match="all 12 cells are void"):
        find_sea(grid_of(np.full((3, 4), N)))
    height = np.full((3, 4), -7.0)
    height[0, 0] = N
    with pytest.raises(InputError, match=r"none of its 11 cells .* above base level \(0 m; the highest is at -7 m\)"):
        find_sea(grid_of(height))
