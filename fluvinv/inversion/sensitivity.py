"""The sensitivity matrix G: heights above base level as exact path integrals of the uplift rate."""

import numpy as np
from scipy import sparse

from fluvinv.inversion import _kernels
from fluvinv.inversion.uplift_grid import UpliftGrid, base_points
from fluvinv.network import RiverNetwork

#: Rows per compiled call; an interrupt is seen between calls only.
_ROWS_AT_ONCE = 20_000


class _Moments:
    """Segments of all paths and the running moments of every node (see `_kernels`)."""

    def __init__(self, network: RiverNetwork, tau: np.ndarray, grid: UpliftGrid):
        self.u, self.v = grid.in_grid_units(network.map_x, network.map_y)
        self.base_u, self.base_v = grid.in_grid_units(*base_points(network))
        n_rows, n_cols = grid.n_rows, grid.n_cols
        touched = np.zeros((n_rows - 1, n_cols - 1), dtype=bool)
        bound, most = _kernels.cross_cells(
            network.receiver, self.u, self.v, self.base_u, self.base_v, n_rows, n_cols, touched
        )
        n_nodes = network.n_nodes
        row, col, below, self.rank = (np.empty(bound, dtype=np.int32) for _ in range(4))
        tau_in = np.empty(bound)
        seg_m0, seg_m1 = np.empty((bound, 4)), np.empty((bound, 4))
        self.node_segment = np.empty(n_nodes, dtype=np.int32)
        node_m0, node_m1 = np.empty((n_nodes, 4)), np.empty((n_nodes, 4))
        n_segments = _kernels.running_moments(
            network.receiver, self.u, self.v, tau, self.base_u, self.base_v, n_rows, n_cols, most,
            row, col, tau_in, below, seg_m0, seg_m1, self.rank, self.node_segment, node_m0, node_m1,
        )  # fmt: skip
        kept = slice(0, n_segments)
        self.cells = (row[kept], col[kept], tau_in[kept])
        self.links = (below[kept], seg_m0[kept], seg_m1[kept])
        self.nodes = (self.node_segment, node_m0, node_m1)


def _depth(receiver: np.ndarray) -> np.ndarray:
    """Number of nodes downstream of each node."""
    depth = np.zeros(receiver.size, dtype=np.int32)
    _kernels.count_downstream(receiver, depth)
    return depth


def sensitivity(network: RiverNetwork, tau: np.ndarray, grid: UpliftGrid) -> sparse.csr_array:
    r"""Exact rows of G, so that heights above base level are y = G u.

    .. math:: y(x) = \int_0^{\tau(x)} U(r(\tau'), \tau(x) - \tau') \, d\tau'

    with r the point of the path at travel time tau' (Pritchard et al. 2009; Goren, Fox & Willett 2014). The
    rate is bilinear between map nodes and linear between ages, constant beyond the last age. On a piece of
    an edge inside one map cell and one age step the integrand is a cubic in tau', for which two-point Gauss
    is exact. Rows cost the map cells and age steps that a path crosses, not its river nodes.

    Parameters
    ----------
    network : RiverNetwork
        Depth-first, downstream-first.
    tau : (n_nodes,) float array, yr
        Travel time of each node, linear along edges.
    grid : UpliftGrid
        Covers all nodes and base points.

    Returns
    -------
    (n_nodes, n_unknowns) csr array, yr
        Non-negative; rows sum to tau.
    """
    moments = _Moments(network, tau, grid)
    depth = _depth(network.receiver)
    path = np.empty(int(depth.max()) + 1, dtype=np.int32)
    path_tau = np.empty(path.size)
    row_sum = np.zeros(grid.n_unknowns)
    breaks = np.searchsorted(grid.ages[1:], tau, side="left")
    bound = 8 * (moments.rank[moments.node_segment].astype(np.int64) + breaks)
    touched = np.empty(int(bound.max()), dtype=np.int32)
    # Room for the most that there can be. What is not written to is given back; it never took real memory.
    indices, data = np.empty(int(bound.sum()), dtype=np.int32), np.empty(int(bound.sum()))
    indptr = np.zeros(network.n_nodes + 1, dtype=np.int64)
    for first in range(0, network.n_nodes, _ROWS_AT_ONCE):
        stop = min(first + _ROWS_AT_ONCE, network.n_nodes)
        begin = indptr[first]
        _kernels.fill_rows(
            first, stop, depth, path, path_tau, network.receiver, moments.u, moments.v, tau,
            moments.base_u, moments.base_v, *moments.cells, *moments.links, *moments.nodes,
            grid.ages, grid.place, grid.n_places, row_sum, touched,
            indptr[first : stop + 1], indices[begin:], data[begin:],
        )  # fmt: skip
        indptr[first + 1 : stop + 1] += begin
    indices.resize(indptr[-1], refcheck=False)
    data.resize(indptr[-1], refcheck=False)
    if indptr[-1] < np.iinfo(np.int32).max:
        indptr = indptr.astype(np.int32)
    return sparse.csr_array((data, indices, indptr), shape=(network.n_nodes, grid.n_unknowns))
