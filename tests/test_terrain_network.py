"""The river network: completeness by hand, the order of its nodes, and what is refused."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from fluvinv.errors import InputError, SettingsError
from fluvinv.terrain import build_network, make_grid
from fluvinv.terrain.channels import auto_channel_area

CELL = 100.0
S = -1.0
N = np.nan


def grid_of(height, crs=32633, step=CELL, x0=0.0, y0=0.0):
    height = np.array(height, dtype=float)
    x, y = x0 + np.arange(height.shape[1]) * step, y0 - np.arange(height.shape[0]) * step
    return make_grid(height, x, y, crs)


def rough_island(n=40, seed=0, noise=40.0):
    rng = np.random.default_rng(seed)
    row, col = np.mgrid[:n, :n]
    away = np.hypot(row - (n - 1) / 2, col - (n - 1) / 2)
    return np.where(away < 0.45 * n, 5 + 20 * (0.45 * n - away) + rng.random((n, n)) * noise, -10.0)


def test_a_river_by_hand():
    # two sources join at 6 and run east into the sea between high banks
    grid = grid_of(
        [[99] * 7, [99, 9, 99, 99, 99, 99, S], [99, 99, 6, 4, 2, 1, S], [99, 8, 99, 99, 99, 99, S], [99] * 7],
        x0=1000.0,
        y0=500.0,
    )
    network, report = build_network(grid, channel_area=2.5 * CELL**2, incomplete="complete")
    assert network.cell.tolist()[:4] == [2 * 7 + 5, 2 * 7 + 4, 2 * 7 + 3, 2 * 7 + 2]
    assert network.receiver.tolist()[:4] == [-1, 0, 1, 2]
    sources = np.flatnonzero(network.receiver == 3)
    assert sorted(network.cell[sources].tolist()) == [1 * 7 + 1, 3 * 7 + 1]
    diagonal = CELL * np.sqrt(2)
    assert network.distance[:4].tolist() == [100, 200, 300, 400]
    assert network.distance[sources] == pytest.approx(400 + diagonal, rel=1e-12)
    assert network.edge_length[sources] == pytest.approx(diagonal, rel=1e-12)
    assert network.height[:4].tolist() == [1, 2, 4, 6]
    assert network.base_level[0] == 0
    assert (network.x[0], network.y[0]) == (1500.0, 300.0)
    assert (network.map_x[0], network.map_y[0]) == (1500.0, 300.0)
    assert (network.base_map_x[0], network.base_map_y[0]) == (1600.0, 300.0)
    assert network.strahler_order[:4].tolist() == [2, 2, 2, 2]
    assert network.strahler_order[sources].tolist() == [1, 1]
    assert network.river_id[:4].tolist() == [1, 1, 1, 1]
    assert sorted(network.river_id[sources].tolist()) == [1, 2]
    assert report.n_land == 32
    assert report.land_area == 32 * CELL**2


def rivers_between_banks():
    """Rivers 1 to 4 flow west into the sea between high banks; the tenths of their heights number them.

    River 1 is whole; 2 comes from the grid's edge; 3 from beside a void; 4 forks into a branch that starts
    beside a void (in the north) and one that does not.
    """
    height = np.full((21, 10), 500.0)
    height[[0, 4, 8, 12, 20]] = S
    height[:, 0] = S
    height[[*range(5), *range(8, 21)], 9] = S
    east = np.arange(10.0)
    height[2, 1:7] = east[1:7] + 0.1
    height[6, 1:10] = east[1:10] + 0.2
    height[10, 1:6] = east[1:6] + 0.3
    height[10, 7] = N
    height[16, 1:4] = east[1:4] + 0.4
    height[[15, 17], 4] = 4.4
    height[14, 5:7] = height[18, 5:7] = [5.4, 6.4]
    height[14, 8] = N
    return height


def river_of(network):
    """Number of the river between banks that each node belongs to; 0 on the banks."""
    tenths = np.round(network.height * 10) % 10
    return np.where(network.height < 100, tenths, 0).astype(int)


OPTIONS = {"nodata": "void", "channel_area": 2.5 * CELL**2, "base_level": 0.0}


def test_only_catchments_that_are_whole_are_used():
    network, report = build_network(grid_of(rivers_between_banks()), **OPTIONS)
    assert set(river_of(network)) == {1}
    assert set(np.flatnonzero(rivers_between_banks().ravel() == 1.1)) <= set(network.cell)
    assert report.dropped == report.not_usable
    assert min(report.dropped.values()) > 0
    assert report.share_affected == 0
    assert report.n_channel_cells == network.n_nodes + sum(report.dropped.values())


def test_incomplete_catchments_are_kept_and_counted_when_told():
    grid = grid_of(rivers_between_banks())
    used, dropped = build_network(grid, **OPTIONS)
    network, report = build_network(grid, incomplete="keep", **OPTIONS)
    assert set(river_of(network)) - {0} == {1, 2, 3, 4}
    assert network.n_nodes == report.n_channel_cells == dropped.n_channel_cells
    assert report.not_usable == dropped.dropped
    assert set(report.dropped.values()) == {0}
    assert report.share_affected == (network.n_nodes - used.n_nodes) / network.n_nodes
    row, col = np.divmod(network.cell[~np.isin(network.cell, used.cell)], grid.n_cols)
    assert report.not_usable["upstream_touches_edge"] == np.isin(row, [5, 6, 7]).sum() >= 7
    # of the fork, the southern branch is complete itself
    south = (row >= 17) | ((row == 16) & (col > 3))
    assert report.not_usable["downstream_incomplete"] == south.sum() >= 3
    assert "of the river nodes have catchments" in report.warnings[0]
    assert f"{report.share_affected:.0%}" in report.warnings[0]
    whole, report = build_network(grid, incomplete="complete", **OPTIONS)
    np.testing.assert_array_equal(whole.cell, network.cell)
    assert set(report.not_usable.values()) == {0}
    assert report.share_affected == 0
    assert report.warnings == []
    report = build_network(grid, nodata="sea", channel_area=OPTIONS["channel_area"])[1]
    assert "2 of 2 void cells were taken for sea" in report.warnings[0]


def test_an_outlet_inland_is_its_own_base():
    height = np.full((5, 8), 90.0)
    height[2] = np.arange(10.0, 18.0)
    network, _ = build_network(grid_of(height), channel_area=2.5 * CELL**2, incomplete="keep")
    assert network.cell[0] == 16
    assert (network.edge_length[0], network.distance[0], network.base_level[0]) == (0.0, 0.0, 10.0)
    assert (network.base_map_x[0], network.base_map_y[0]) == (network.map_x[0], network.map_y[0])
    assert network.relative_height[:3].tolist() == [0, 1, 2]
    assert network.distance[:3].tolist() == [0, 100, 200]


def check_order(network, grid):
    """Every promise of RiverNetwork, node by node and by brute force."""
    n = network.n_nodes
    receiver, edge, river = network.receiver, network.edge_length, network.river_id
    donors = [[] for _ in range(n)]
    farthest, sources, strahler = np.zeros(n), np.zeros(n), np.ones(n, dtype=int)
    for node in range(n - 1, -1, -1):
        up = donors[node]
        farthest[node] = max((edge[d] + farthest[d] for d in up), default=0.0)
        sources[node] = sum(sources[d] for d in up) if up else 1
        if up:
            orders = sorted(strahler[d] for d in up)
            strahler[node] = orders[-1] + (orders[-2:] == [orders[-1]] * 2)
            # main stem first: the branch with the farthest source directly follows
            assert edge[node + 1] + farthest[node + 1] == farthest[node]
            assert node + 1 in up
        assert receiver[node] < node
        if receiver[node] >= 0:
            donors[receiver[node]].append(node)
    for node in range(n):
        below = receiver[node]
        start = node if below < 0 else below
        assert node < start + network.subtree_size[start]
        assert network.subtree_size[node] == 1 + sum(network.subtree_size[d] for d in donors[node])
        continues = below >= 0 and below == node - 1
        assert river[node] == (river[node - 1] if continues else (river[node - 1] if node else 0) + 1)
        if below >= 0:
            assert network.basin_id[node] == network.basin_id[below]
            assert network.distance[node] == network.distance[below] + edge[node]
            assert network.area[below] > network.area[node]
            assert network.corrected_height[node] >= network.corrected_height[below]
        else:
            assert network.distance[node] == edge[node]
    np.testing.assert_array_equal(network.strahler_order, strahler)
    # Strahler 1957 (seen): order w needs at least 2^(w-1) first-order streams
    assert (sources >= 2.0 ** (strahler - 1)).all()
    assert network.n_rivers == sum(not up for up in donors)
    assert network.outlet.tolist() == np.flatnonzero(receiver < 0).tolist()
    assert network.basin_id[network.outlet].tolist() == list(range(1, network.n_basins + 1))
    assert (np.diff(network.area[network.outlet]) <= 0).all()
    assert np.unique(network.cell).size == n
    inner = receiver >= 0
    lengths = grid.step_lengths().between(network.cell[inner], network.cell[receiver[inner]], grid.n_cols)
    np.testing.assert_array_equal(edge[inner], lengths)
    np.testing.assert_array_equal(network.height, grid.height.ravel()[network.cell])
    np.testing.assert_array_equal(network.x, grid.x[network.cell % grid.n_cols])
    np.testing.assert_array_equal(network.y, grid.y[network.cell // grid.n_cols])


@given(
    seed=st.integers(0, 10**6),
    shape=st.tuples(st.integers(2, 16), st.integers(2, 16)),
    levels=st.sampled_from([2, 5, 1000]),
    threshold=st.sampled_from([0.5, 1.5, 4.5]),
    depressions=st.sampled_from(["carve", "fill"]),
)
@settings(max_examples=150, deadline=None)
def test_the_order_of_nodes_on_random_ground(seed, shape, levels, threshold, depressions):
    rng = np.random.default_rng(seed)
    height = rng.integers(0, levels, shape) * 1.0 + (rng.random(shape) if levels == 1000 else 0)
    height[rng.random(shape) < 0.05] = N
    height.flat[rng.integers(height.size)] = levels
    grid = grid_of(height)
    options = {"channel_area": threshold * CELL**2, "incomplete": "keep", "depressions": depressions}
    try:
        network, report = build_network(grid, base_level=0.0, **options)
        refused = ""
    except (InputError, SettingsError) as error:
        refused = str(error)
    if refused:
        assert "is above every basin" in refused
        return
    check_order(network, grid)
    assert (network.area >= threshold * CELL**2).all()
    if threshold < 1:
        assert network.n_nodes == report.n_land
        assert network.area[network.outlet].sum() == pytest.approx(report.n_land * CELL**2, rel=1e-12)
    inland = network.edge_length[network.outlet] == 0
    np.testing.assert_array_equal(network.base_level[~inland], 0.0)
    np.testing.assert_array_equal(network.base_level[inland], network.height[network.outlet[inland]])


@pytest.mark.parametrize(("crs", "step"), [(32633, 100.0), (4326, 1 / 1200)])
def test_an_island_as_a_whole(crs, step):
    grid = grid_of(rough_island(), crs, step, x0=10.0, y0=45.0)
    network, report = build_network(grid, channel_area="auto")
    check_order(network, grid)
    assert report.not_usable == {
        "upstream_touches_edge": 0,
        "upstream_touches_void": 0,
        "downstream_incomplete": 0,
    }
    land = grid.height > 0
    assert report.n_land == land.sum()
    assert report.sea.n_sea == (~land).sum()
    exact = (land.sum(axis=1) * grid.cell_area_by_row()).sum()
    assert report.land_area == pytest.approx(exact, rel=1e-12)
    assert 16 <= report.channel_area / (exact / land.sum()) < 17.6
    assert report.largest_basin == network.area.max()
    assert report.map_crs.is_projected


def test_the_order_of_the_rows_in_the_file_does_not_matter():
    height = rough_island(30, seed=5)
    x, y = np.arange(30) * CELL, -np.arange(30) * CELL
    north_up, _ = build_network(make_grid(height, x, y, 32633))
    south_up, _ = build_network(make_grid(height[::-1], x, y[::-1], 32633))
    np.testing.assert_array_equal(north_up.cell, south_up.cell)
    np.testing.assert_array_equal(north_up.y, south_up.y)


def test_turning_the_island_turns_the_rivers():
    height = rough_island(30, seed=6)
    x, y = np.arange(30) * CELL, -np.arange(30) * CELL
    one, _ = build_network(make_grid(height, x, y, 32633), depressions="fill")
    other, _ = build_network(make_grid(np.rot90(height), x, y, 32633), depressions="fill")
    assert one.n_nodes == other.n_nodes
    np.testing.assert_allclose(np.sort(one.distance), np.sort(other.distance), rtol=1e-12)
    np.testing.assert_allclose(one.area[one.outlet], other.area[other.outlet], rtol=1e-12)


def test_the_automatic_channel_area():
    assert auto_channel_area(np.full(100, 1000.0), 10.0) == 160.0
    assert auto_channel_area(np.full(100, 1000.0), 10.01) == 170.0
    areas = np.random.default_rng(0).permutation(np.arange(1.0, 50_001.0))
    chosen = auto_channel_area(areas, 1.0)
    assert chosen == 41_000.0  # the 10,000 largest start at 40,001
    assert auto_channel_area(np.r_[areas, 60_000.0], 1.0) == 41_000.0
    # 10,000 would be left at exactly 40,000, so it is not rounded down to it
    assert auto_channel_area(np.arange(1.0, 50_000.0), 1.0) == 40_000.0
    assert (np.arange(1.0, 50_000.0) >= 40_000.0).sum() == 10_000
    assert auto_channel_area(np.r_[np.full(20_000, 40_000.0), 1e6], 1.0) == 41_000.0


def test_no_sea_is_refused_with_counts_and_the_line_to_change():
    height = np.full((6, 7), 300.0) + np.arange(7)
    with pytest.raises(InputError) as caught:
        build_network(grid_of(height))
    message = str(caught.value)
    assert "none of its 42 land cells" in message
    assert "terrain.incomplete: keep" in message
    assert "terrain.incomplete: complete" in message
    assert "catchment.base_level_m" in message
    assert build_network(grid_of(height), incomplete="keep", channel_area=2e4)[0].n_nodes > 0


def test_a_channel_area_above_every_basin_is_refused_with_the_largest():
    grid = grid_of(rough_island())
    largest = build_network(grid)[1].largest_basin
    with pytest.raises(SettingsError) as caught:
        build_network(grid, channel_area=largest * 1.01)
    message = str(caught.value)
    assert message.startswith("terrain.channel_area_km2:")
    assert f"the largest drains {largest / 1e6:.6g} km2" in message
    assert build_network(grid, channel_area=largest)[0].n_basins == 1


def test_nothing_usable_is_refused_with_counts_by_reason():
    height = np.full((7, 9), 500.0)
    height[3, :8] = np.arange(8.0) + 1
    height[:, 0] = S
    with pytest.raises(InputError) as caught:
        build_network(grid_of(height), channel_area=6.5 * CELL**2)
    message = str(caught.value)
    assert "ground that touches the DEM's edge" in message
    assert "terrain.incomplete: keep" in message
    n = build_network(grid_of(height), channel_area=6.5 * CELL**2, incomplete="keep")[0].n_nodes
    assert f"none of its {n} channel cells" in message
    narrow = [[S, 9, 9, 9], [S, 5, 6, 7], [S, 9, 9, 9]]
    with pytest.raises(InputError, match="No basin of any size is complete"):
        build_network(grid_of(narrow), channel_area=1.5 * CELL**2)
    # where a smaller basin is complete the message says so
    grid = grid_of(rivers_between_banks())
    largest = build_network(grid, **OPTIONS)[1].largest_basin
    with pytest.raises(InputError, match=f"largest complete basin drains {largest / 1e6:.6g} km2"):
        build_network(grid, nodata="void", channel_area=largest * 1.01)
