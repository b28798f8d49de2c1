"""From cells to rivers: the channel threshold and the river network in depth-first order."""

import numpy as np
from pyproj import CRS

from fluvinv.network import RiverNetwork
from fluvinv.terrain import _kernels
from fluvinv.terrain.completeness import Drainage
from fluvinv.terrain.grid import Grid, choose_map_crs, to_map
from fluvinv.terrain.heights import fall_downstream
from fluvinv.terrain.routing import NOT_LAND

#: Channels start no higher than where this many cells of mean size drain.
LEAST_CELLS = 16
#: The automatic channel area leaves at most this many nodes.
MOST_NODES = 10_000


def auto_channel_area(area: np.ndarray, mean_cell_area: float) -> float:
    """Channel area that suits a DEM.

    Parameters
    ----------
    area : (n,) float array, m2
        Upstream areas of the cells that may become channels.
    mean_cell_area : float, m2

    Returns
    -------
    float, m2
        The larger of 16 mean cells and the area that leaves at most 10,000 channel nodes, rounded up to two
        significant digits.
    """
    least = LEAST_CELLS * mean_cell_area
    candidates = area[area >= least]
    if candidates.size <= MOST_NODES:
        return _round_up(least)
    beyond = candidates.size - MOST_NODES - 1
    largest_to_leave_out = float(np.partition(candidates, beyond)[beyond])
    return max(_round_up(least), _round_up(np.nextafter(largest_to_leave_out, np.inf)))


def _round_up(value: float) -> float:
    """The least number of two significant digits that is not below the value."""
    exponent = int(np.floor(np.log10(value))) - 1
    unit = 10.0**exponent
    steps = np.ceil(value / unit)
    return float(steps * unit if steps * unit >= value else (steps + 1) * unit)


def connect_channels(
    grid: Grid,
    receiver: np.ndarray,
    drainage: Drainage,
    is_channel: np.ndarray,
    base_level: float,
    projection: str = "auto",
) -> tuple[RiverNetwork, CRS]:
    """Make the river network of the channel cells.

    Parameters
    ----------
    grid : Grid
    receiver : (n_cells,) int32 array
        As `route` returns it.
    drainage : Drainage
    is_channel : (n_cells,) bool array
        Channel cells; whatever lies downstream of one on land is one as well.
    base_level : float, m
        Height of the sea.
    projection : str
        As in `choose_map_crs`.

    Returns
    -------
    network : RiverNetwork
    map_crs : pyproj.CRS
        CRS of its map coordinates.

    Notes
    -----
    At a junction the main stem is the branch with the farthest source along the river; of equal ones, the
    one that comes first in the order of the cells.
    """
    cell = drainage.order[is_channel[drainage.order]]
    below = receiver[cell]
    to_land = (below >= 0) & (receiver[below] != NOT_LAND)
    base_cell = np.where(below >= 0, below, cell)  # of outlets: the sea cell, or the outlet itself inland
    length = np.where(below >= 0, grid.step_lengths().between(cell, base_cell, grid.n_cols), 0.0)
    node_receiver = np.where(to_land, _index_of(cell, below), -1).astype(np.int32)

    order, size, strahler = _depth_first(node_receiver, length, drainage.area[cell])
    place = np.empty_like(order)
    place[order] = np.arange(order.size, dtype=order.dtype)
    cell, base_cell, length = cell[order], base_cell[order], length[order]
    node_receiver = np.where(to_land[order], place[node_receiver[order]], -1).astype(np.int32)

    outlet = np.flatnonzero(node_receiver < 0)
    base_cell = base_cell[outlet]
    height = grid.height.ravel()[cell].astype(np.float64)
    x, y = grid.x[cell % grid.n_cols], grid.y[cell // grid.n_cols]
    map_crs = choose_map_crs(grid.crs, x, y, projection)
    map_x, map_y = to_map(grid.crs, map_crs, x, y)
    base_map_x, base_map_y = to_map(
        grid.crs, map_crs, grid.x[base_cell % grid.n_cols], grid.y[base_cell // grid.n_cols]
    )
    distance = np.empty(cell.size)
    _kernels.sum_from_base(node_receiver, length, distance)
    starts_river = node_receiver != np.arange(cell.size) - 1
    starts_river[outlet] = True
    network = RiverNetwork(
        receiver=node_receiver,
        x=x,
        y=y,
        map_x=map_x,
        map_y=map_y,
        edge_length=length,
        distance=distance,
        height=height,
        corrected_height=fall_downstream(node_receiver, height),
        area=drainage.area[cell],
        cell=cell,
        basin_id=np.cumsum(node_receiver < 0, dtype=np.int32),
        river_id=np.cumsum(starts_river, dtype=np.int32),
        strahler_order=strahler[order],
        subtree_size=size[order],
        outlet=outlet.astype(np.int32),
        base_level=np.where(base_cell == cell[outlet], height[outlet], base_level),
        base_map_x=base_map_x,
        base_map_y=base_map_y,
    )
    return network, map_crs


def _index_of(cell: np.ndarray, wanted: np.ndarray) -> np.ndarray:
    """Indices of cells in an unsorted list without doubles; arbitrary for cells that are not in it."""
    by_cell = np.argsort(cell)
    found = np.searchsorted(cell, wanted, sorter=by_cell)
    return by_cell[np.minimum(found, cell.size - 1)]


def _depth_first(
    receiver: np.ndarray, length: np.ndarray, area: np.ndarray
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Depth-first order of nodes that come before their receivers, subtree sizes and Strahler orders."""
    n_nodes = receiver.size
    main = np.full(n_nodes, -1, dtype=np.int32)
    size = np.ones(n_nodes, dtype=np.int32)
    strahler, n_highest, place, next_free = (np.zeros(n_nodes, dtype=np.int32) for _ in range(4))
    _kernels.measure_tree(receiver, length, np.zeros(n_nodes), main, size, strahler, n_highest)
    outlet = np.flatnonzero(receiver < 0)
    outlet = outlet[np.argsort(-area[outlet], kind="stable")]
    place[outlet] = np.cumsum(size[outlet]) - size[outlet]
    _kernels.place_depth_first(receiver, main, size, place, next_free)
    order = np.empty(n_nodes, dtype=np.int32)
    order[place] = np.arange(n_nodes, dtype=np.int32)
    return order, size, strahler
