"""The river network: flat arrays that every later stage shares."""

from dataclasses import dataclass

import numpy as np


@dataclass(frozen=True, slots=True)
class RiverNetwork:
    """Channel nodes of one or more drainage basins as flat arrays.

    Nodes stand in depth-first, downstream-first order, main stem first. So every node comes after its
    receiver, every river is one contiguous run from its mouth to its farthest source, the nodes upstream of
    a node directly follow it (`subtree_size` of them, itself included), and every basin is one slice.

    Each node owns the edge that leads down to its receiver or, at an outlet, down to the base point. At an
    outlet inland (DEM edge, sink, lake) the base point is the node itself and the edge has no length.

    Attributes
    ----------
    receiver : (n_nodes,) int array
        Index of the next node downstream; -1 at an outlet.
    x, y : (n_nodes,) float arrays
        Coordinates in the DEM's CRS.
    map_x, map_y : (n_nodes,) float arrays, m
        Coordinates in the CRS of the uplift grid.
    edge_length : (n_nodes,) float array, m
        Length of the edge owned by the node; 0 only at outlets inland.
    distance : (n_nodes,) float array, m
        Distance from the base point along the river.
    height : (n_nodes,) float array, m
        Height as in the DEM.
    corrected_height : (n_nodes,) float array, m
        Height corrected to fall downstream.
    area : (n_nodes,) float array, m2
        Upstream area, the node's own cell included.
    cell : (n_nodes,) int array
        Flat index of the node's cell in the DEM (row * n_cols + column).
    basin_id, river_id : (n_nodes,) int arrays
        Numbers that start at 1; basins in descending order of area at the outlet.
    strahler_order : (n_nodes,) int array
        Strahler (1957) order.
    subtree_size : (n_nodes,) int array
        Number of nodes at or upstream of the node.
    outlet : (n_basins,) int array
        Node index of each basin's outlet, ascending.
    base_level : (n_basins,) float array, m
        Height of base level under each outlet.
    base_map_x, base_map_y : (n_basins,) float arrays, m
        The base point in the CRS of the uplift grid.
    """

    receiver: np.ndarray
    x: np.ndarray
    y: np.ndarray
    map_x: np.ndarray
    map_y: np.ndarray
    edge_length: np.ndarray
    distance: np.ndarray
    height: np.ndarray
    corrected_height: np.ndarray
    area: np.ndarray
    cell: np.ndarray
    basin_id: np.ndarray
    river_id: np.ndarray
    strahler_order: np.ndarray
    subtree_size: np.ndarray
    outlet: np.ndarray
    base_level: np.ndarray
    base_map_x: np.ndarray
    base_map_y: np.ndarray

    @property
    def n_nodes(self) -> int:
        """Number of channel nodes."""
        return self.receiver.size

    @property
    def n_basins(self) -> int:
        """Number of drainage basins."""
        return self.outlet.size

    @property
    def n_rivers(self) -> int:
        """Number of rivers, each from its mouth to its farthest source."""
        return int(self.river_id.max()) if self.river_id.size else 0

    @property
    def basin_index(self) -> np.ndarray:
        """(n_nodes,) int array: index of each node's basin into the per-basin arrays."""
        return np.repeat(np.arange(self.n_basins), self.subtree_size[self.outlet])

    @property
    def relative_height(self) -> np.ndarray:
        """(n_nodes,) float array, m: height above base level, y = z - b."""
        return self.height - self.base_level[self.basin_index]
