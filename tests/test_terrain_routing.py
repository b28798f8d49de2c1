"""Flow directions against hand-made cases, published ones and brute force."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp

from fluvinv.terrain import find_sea, make_grid
from fluvinv.terrain.completeness import drain
from fluvinv.terrain.routing import NO_RECEIVER, NOT_LAND, _flood_pyflwdir, route

CODES = {(0, 1): 1, (1, 1): 2, (1, 0): 4, (1, -1): 8, (0, -1): 16, (-1, -1): 32, (-1, 0): 64, (-1, 1): 128}
MODES = pytest.mark.parametrize("depressions", ["carve", "fill"])


def grid_of(height, cell=1.0):
    height = np.array(height, dtype=float)
    x, y = np.arange(height.shape[1]) * cell, -np.arange(height.shape[0]) * cell
    return make_grid(height, x, y, 32633)


def no_sea(grid):
    return np.zeros(grid.height.shape, dtype=bool)


def codes_of(receiver, shape):
    """Power-of-two codes of receivers; 0 where there is none."""
    code = np.zeros(shape, dtype=int)
    for cell in np.flatnonzero(receiver >= 0):
        step = tuple(np.subtract(divmod(int(receiver[cell]), shape[1]), divmod(int(cell), shape[1])).tolist())
        code.flat[cell] = CODES[step]
    return code


def minimax(height, outlets):
    """Least highest point of all ways out: relax until nothing changes."""
    z = np.where(np.isnan(height), np.inf, height)
    level = np.where(outlets, z, np.inf)
    while True:
        padded = np.pad(level, 1, constant_values=np.inf)
        n, m = z.shape
        lowest = np.min([padded[i : i + n, j : j + m] for i in range(3) for j in range(3)], axis=0)
        new = np.minimum(level, np.maximum(z, lowest))
        if np.array_equal(new, level):
            return level
        level = new


@MODES
@pytest.mark.parametrize(("south_east", "expected"), [(8.7, 1), (8.5, 2)])
def test_steepest_descent_weighs_the_drop_by_the_distance(depressions, south_east, expected):
    # Jenson & Domingue 1988 (seen): from 10 to E 9 falls 1, to SE 8.7 falls 0.919, to SE 8.5 falls 1.061
    grid = grid_of([[99, 99, 99, 99], [99, 10, 9, 8.99], [99, 99, south_east, 8], [99, 99, 8, 7]])
    assert codes_of(route(grid, no_sea(grid), -1.0, depressions), (4, 4))[1, 1] == expected


TEXTBOOK = [
    [78, 72, 69, 71, 58, 49],
    [74, 67, 56, 49, 46, 50],
    [69, 53, 44, 37, 38, 48],
    [64, 58, 55, 22, 31, 24],
    [68, 61, 47, 21, 16, 19],
    [74, 53, 34, 12, 11, 12],
]


@MODES
def test_the_textbook_grid(depressions):
    # widely reprinted teaching example of hydrology (memory, number recomputed); its outlet leaves southward
    grid = grid_of(TEXTBOOK)
    receiver = route(grid, no_sea(grid), 0.0, depressions)
    assert codes_of(receiver, (6, 6)).tolist() == [
        [2, 2, 2, 4, 4, 8],
        [2, 2, 2, 4, 4, 8],
        [1, 1, 2, 4, 8, 4],
        [128, 128, 1, 2, 4, 8],
        [2, 2, 1, 4, 4, 4],
        [1, 1, 1, 1, 0, 16],
    ]
    assert receiver[34] == NO_RECEIVER
    assert (drain(grid, no_sea(grid), receiver).area - 1).reshape(6, 6).tolist() == [
        [0, 0, 0, 0, 0, 0],
        [0, 1, 1, 2, 2, 0],
        [0, 3, 7, 5, 4, 0],
        [0, 0, 0, 20, 0, 1],
        [0, 0, 0, 1, 24, 0],
        [0, 2, 4, 7, 35, 1],
    ]


@given(height=hnp.arrays(np.float32, st.tuples(st.integers(2, 9), st.integers(2, 9)),
                         elements=st.floats(-3, 3000, width=32) | st.integers(-2, 5).map(float)))  # fmt: skip
@settings(max_examples=60, deadline=None)
def test_the_filled_surface_is_the_least_highest_point_of_all_ways_out(height):
    # unique answer (Barnes, Lehman & Mulla 2014, from memory; identity): exact equality
    outlets = np.zeros(height.shape, dtype=bool)
    outlets.flat[:: max(1, height.size // 3)] = True
    filled, _ = _flood_pyflwdir(height, np.flatnonzero(outlets))
    in_steps = np.round(height.astype(float) * 2**30) / 2**30  # of 1e-9 m, see the engine
    np.testing.assert_array_equal(filled, minimax(in_steps, outlets))


def random_case(seed, levels):
    """Random heights with many flats and lakes, some sea and some void."""
    rng = np.random.default_rng(seed)
    shape = tuple(rng.integers(2, 14, 2))
    height = rng.integers(0, levels, shape).astype(float)
    if levels > 100:
        height += rng.random(shape)
    height[rng.random(shape) < rng.choice([0, 0.05, 0.2])] = np.nan
    height.flat[0] = levels
    return grid_of(height, cell=10.0)


@MODES
@pytest.mark.parametrize("levels", [2, 4, 8, 1000])
def test_water_never_runs_in_a_circle_and_always_takes_the_steepest_fall(depressions, levels):
    for seed in range(150):
        grid = random_case(seed, levels)
        sea, _ = find_sea(grid, base_level=0.0)
        receiver = route(grid, sea, 0.0, depressions)
        land = (~sea & ~grid.void).ravel()
        np.testing.assert_array_equal(receiver != NOT_LAND, land)
        order = drain(grid, sea, receiver).order  # raises where there is a circle
        assert sorted(order.tolist()) == np.flatnonzero(land).tolist()
        check_links(grid, sea, receiver)


def check_links(grid, sea, receiver):
    """Every link follows the steepest fall of the filled surface or, where it is level, stays level."""
    n_rows, n_cols = grid.height.shape
    surface = np.where(sea, 0.0, np.where(grid.void, np.nan, grid.height.astype(float)))
    leaves = sea.copy()
    unknown = np.pad(grid.void & ~sea, 1, constant_values=True)
    for i in range(3):
        for j in range(3):
            leaves |= unknown[i : i + n_rows, j : j + n_cols] & ~grid.void
    filled = minimax(surface, leaves).ravel()
    steps = grid.step_lengths()
    for cell in np.flatnonzero(receiver != NOT_LAND):
        row, col = divmod(int(cell), n_cols)
        near = [
            r * n_cols + c
            for r in range(max(row - 1, 0), min(row + 2, n_rows))
            for c in range(max(col - 1, 0), min(col + 2, n_cols))
            if (r, c) != (row, col) and (sea[r, c] or not grid.void[r, c])
        ]
        near = np.array(near, dtype=int)
        fall = (filled[cell] - filled[near]) / steps.between(np.full(near.size, cell), near, n_cols)
        if receiver[cell] == NO_RECEIVER:
            assert leaves.flat[cell]
            assert near.size == 0 or fall.max() <= 0
        elif fall.max() > 0:
            assert fall[near == receiver[cell]][0] == fall.max()
        else:
            assert filled[receiver[cell]] == filled[cell]


@MODES
def test_water_is_conserved(depressions):
    grid = random_case(11, 1000)
    sea, _ = find_sea(grid)
    receiver = route(grid, sea, 0.0, depressions)
    area = drain(grid, sea, receiver).area / 100.0  # in cells
    land = np.flatnonzero(receiver != NOT_LAND)
    ends = [c for c in land if receiver[c] < 0 or receiver[receiver[c]] == NOT_LAND]
    assert area[ends].sum() == pytest.approx(land.size, rel=1e-12)
    path_lengths = 0
    for cell in land:
        while cell >= 0 and receiver[cell] != NOT_LAND:
            path_lengths += 1
            cell = receiver[cell]
    assert area[land].sum() == pytest.approx(path_lengths, rel=1e-12)


def flooded_valley():
    """A winding floor at 10 m between benches at 20 m, dammed at 30 m, then down to the sea in the east."""
    height = np.full((9, 24), 100.0)
    height[1:8, 1:20] = 20.0
    floor = [(4 + round(2 * np.sin(col / 2)), col) for col in range(2, 19)]
    for row, col in floor:
        height[row, col] = 10.0
    height[:, 19] = 100.0
    height[floor[-1][0], 19] = 30.0
    height[floor[-1][0], 20:23] = [8, 6, 4]
    height[:, 23] = -1.0
    return grid_of(height), floor


def test_carving_drains_a_lake_along_its_floor():
    grid, floor = flooded_valley()
    sea, _ = find_sea(grid)
    on_floor = {row * grid.n_cols + col for row, col in floor}

    def path(depressions):
        receiver = route(grid, sea, 0.0, depressions)
        cell, cells = floor[0][0] * grid.n_cols + floor[0][1], []
        while cell % grid.n_cols < 19:
            cells.append(int(cell))
            cell = receiver[cell]
        assert grid.height.flat[cell] == 30.0
        return cells

    assert set(path("carve")) <= on_floor
    assert len(path("carve")) >= len(floor) - 1
    assert not set(path("fill")) <= on_floor


def test_flow_paths_are_longer_than_the_line_they_follow():
    # a digital line at 22.5 degrees: 1.0824 times too long (Kulpa 1977; identity)
    n = 400
    line = [(1 + round(np.tan(np.pi / 8) * col), col) for col in range(n)]
    height = np.full((line[-1][0] + 2, n), 1e4)
    for row, col in line:
        height[row, col] = col + 1.0
    grid = grid_of(height, cell=90.0)
    receiver = route(grid, no_sea(grid), -1.0)
    steps, cell, length = grid.step_lengths(), line[-1][0] * n + n - 1, 0.0
    start = cell
    while receiver[cell] >= 0:
        length += steps.between(np.array([cell]), receiver[[cell]], n)[0]
        cell = receiver[cell]
    chord = 90.0 * np.hypot(*np.subtract(divmod(int(start), n), divmod(int(cell), n)))
    assert length / chord == pytest.approx(1.0824, abs=1e-3)


def test_a_fall_into_the_sea_is_measured_to_its_surface():
    # the sea's bottom is 900 m down in the east; its surface is nearer than the step to the west
    grid = grid_of([[9, 9, 9, -900], [9, 2, 5, -900], [9, 9, 9, -900], [9, 9, 9, -900]])
    sea, _ = find_sea(grid)
    assert codes_of(route(grid, sea, 0.0), (4, 4))[1, 2] == 1
    grid = grid_of([[9, 9, 9, 9, -900], [1, 1, 7, 9, -900], [9, 9, 9, 9, -900]])
    sea, _ = find_sea(grid)
    codes = codes_of(route(grid, sea, 0.0), (3, 5))
    assert codes[1, 3] == 1  # 9 m into the sea against 2 m to the west
    assert codes[1, 2] == 16
    grid = grid_of([[9, 9, 9, -900], [0.5, 0.5, 5, -900]])
    sea, _ = find_sea(grid, base_level=0.7)
    # 4.3 m to the sea's surface at 0.7 m on either side (0.5 m is sea as well): the first in the table, E
    assert codes_of(route(grid, sea, 0.7), (2, 4))[1, 2] == 1
