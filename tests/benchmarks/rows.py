"""Cost of the sensitivity rows against the number of river nodes, and against a plain walk down every path.

Run on demand: ``python tests/benchmarks/rows.py``. One invented island is drawn with finer and finer cells; map
spacing and age step stay, and channels begin at the same number of cells, so that the network keeps its shape.
Two things must hold: the log-log slope of time against nodes is at most 1.1, and the rows are at least ten
times faster than the plain walk where a path has 50 nodes or more for each map cell or age step it crosses.

The plain walk is compiled too. For every node it visits every edge down to the outlet and adds two-point Gauss
weights without splitting edges at map lines or age breaks: it is inexact, and as cheap as such a walk can be.
"""

import time
from dataclasses import dataclass

import numpy as np
from numba import njit
from pyproj import CRS
from scipy import ndimage, sparse

from fluvinv.inversion import UpliftGrid, age_nodes, make_grid, sensitivity
from fluvinv.inversion.uplift_grid import base_points
from fluvinv.landscape import island_mask
from fluvinv.network import RiverNetwork
from fluvinv.streampower import travel_time
from fluvinv.terrain import build_network
from fluvinv.terrain import make_grid as make_dem

WIDTH_M = 200e3
SPACING_M = 15e3
N_AGE_STEPS = 8
CHANNEL_CELLS = 8
ERODIBILITY, AREA_EXPONENT = 2e-6, 0.45
CELLS_ACROSS = (220, 390, 690, 1220, 2180)
MOST_SLOPE, LEAST_RATIO, DENSE_PATH = 1.1, 10.0, 50.0
#: The plain walk is timed on every k-th node, so that it visits about this many nodes.
MOST_VISITS = 1e8


def fractal(n_cells: int, seed: int = 3) -> np.ndarray:
    """Noise of octaves whose height falls with their width; finer grids only add finer octaves."""
    share = np.arange(n_cells) / (n_cells - 1)
    total = np.zeros((n_cells, n_cells))
    octave = 4
    while octave < n_cells:
        lattice = np.random.default_rng([seed, octave]).standard_normal((octave, octave))
        at = share * (octave - 1)
        total += ndimage.map_coordinates(lattice, np.meshgrid(at, at, indexing="ij"), order=1) / octave**0.8
        octave *= 2
    return total


def island(n_cells: int) -> RiverNetwork:
    """Rivers of the island on a grid of n_cells x n_cells."""
    cell = WIDTH_M / n_cells
    land = island_mask(n_cells, n_cells, 7)
    northward = np.arange(n_cells)[::-1, None] * cell  # a tilt makes rivers as long as the island
    height = 10.0 + 0.01 * northward + 400.0 * (fractal(n_cells) + 3.0)
    height = np.where(land, height, -10.0).astype(np.float32)
    x = (np.arange(n_cells) + 0.5) * cell
    dem = make_dem(height, x, x[::-1], CRS.from_epsg(32631))
    network, _ = build_network(dem, channel_area=CHANNEL_CELLS * cell**2)
    return network


@njit(cache=True)
def walk_rows(nodes, receiver, u, v, tau, base_u, base_v, step, n_ages, place, n_places, indptr, indices, data):
    """Rows by walking every edge of every path; row sums are right, the share of each unknown is approximate."""
    row = np.zeros(n_places * n_ages)
    touched = np.empty(row.size, dtype=np.int32)
    gauss = 0.5 / np.sqrt(3.0)
    fill = 0
    for k in range(nodes.size):
        node = nodes[k]
        total = tau[node]
        count = 0
        i = node
        while i >= 0:
            below = receiver[i]
            ua, va, ta = (u[below], v[below], tau[below]) if below >= 0 else (base_u[i], base_v[i], 0.0)
            du, dv, dt = u[i] - ua, v[i] - va, tau[i] - ta
            for side in (-gauss, gauss):
                s = 0.5 + side
                at_u, at_v = ua + s * du, va + s * dv
                age = (total - ta - s * dt) / step
                a = min(int(age), n_ages - 2)
                c, r = int(at_u), int(at_v)
                fu, fv, fa = at_u - c, at_v - r, min(age - a, 1.0)
                for corner in range(4):
                    w = (fu if corner % 2 else 1.0 - fu) * (fv if corner // 2 else 1.0 - fv) * 0.5 * dt
                    column = a * n_places + place[r + corner // 2, c + corner % 2]
                    for part in range(2):
                        if row[column] == 0.0:
                            touched[count] = column
                            count += 1
                        row[column] += w * (fa if part else 1.0 - fa) + 1e-300
                        column += n_places
            i = below
        for j in range(count):
            indices[fill] = touched[j]
            data[fill] = row[touched[j]]
            row[touched[j]] = 0.0
            fill += 1
        indptr[k + 1] = fill
    return fill


def plain_walk(network: RiverNetwork, tau: np.ndarray, grid: UpliftGrid, nodes: np.ndarray, room: int):
    """Rows of some nodes by the plain walk, in arrays with `room` entries."""
    u, v = grid.in_grid_units(network.map_x, network.map_y)
    base_u, base_v = grid.in_grid_units(*base_points(network))
    indptr = np.zeros(nodes.size + 1, dtype=np.int64)
    indices, data = np.empty(room, dtype=np.int32), np.empty(room)
    filled = walk_rows(
        nodes, network.receiver, u, v, tau, base_u, base_v, grid.ages[1], grid.n_ages, grid.place, grid.n_places,
        indptr, indices, data,
    )  # fmt: skip
    return sparse.csr_array((data[:filled], indices[:filled], indptr), shape=(nodes.size, grid.n_unknowns))


def depth_of(receiver: np.ndarray) -> np.ndarray:
    """Edges from each node to its base point."""
    depth = np.ones(receiver.size, dtype=np.int64)
    for node, below in enumerate(receiver.tolist()):
        if below >= 0:
            depth[node] = depth[below] + 1
    return depth


def crossings(network: RiverNetwork, tau: np.ndarray, grid: UpliftGrid) -> np.ndarray:
    """Map cells and age steps that the path of each node runs through."""
    u, v = grid.in_grid_units(network.map_x, network.map_y)
    base_u, base_v = grid.in_grid_units(*base_points(network))
    inner = network.receiver >= 0
    below = network.receiver
    u0, v0 = np.where(inner, u[below], base_u), np.where(inner, v[below], base_v)
    lines = np.abs(np.floor(u) - np.floor(u0)) + np.abs(np.floor(v) - np.floor(v0))
    cells = np.zeros(network.n_nodes)
    for node, receiver in enumerate(below.tolist()):
        cells[node] = lines[node] + (cells[receiver] if receiver >= 0 else 1.0)
    return cells + np.minimum(np.floor(tau / grid.ages[1]), grid.n_ages - 1)


@dataclass(frozen=True)
class Line:
    """What was measured on one network."""

    n_nodes: int
    per_node: float
    entries: float
    nodes_per_crossing: float
    ratio: float


def best_time(work, repeats: int):
    """Least processor time of a few runs (s; all is single-threaded), and the result."""
    times = []
    result = None
    for _ in range(repeats):
        del result  # or the next run is charged for fresh memory beside it
        start = time.process_time()
        result = work()
        times.append(time.process_time() - start)
    return min(times), result


def measure(n_cells: int, ages: np.ndarray | None) -> tuple[Line, np.ndarray]:
    """Time the rows and the plain walk on one network."""
    network = island(n_cells)
    tau = travel_time(network, ERODIBILITY, AREA_EXPONENT)
    if ages is None:
        ages = age_nodes(tau.max() / N_AGE_STEPS, tau.max())
    grid = make_grid(network, SPACING_M, ages)
    depth = depth_of(network.receiver)
    step = max(1, int(depth.sum() / MOST_VISITS))
    nodes = np.arange(0, network.n_nodes, step)
    seconds, G = best_time(lambda: sensitivity(network, tau, grid), 5)
    room = int(1.5 * G[nodes].nnz) + 1000
    walked, plain = best_time(lambda: plain_walk(network, tau, grid, nodes, room), 2)
    np.testing.assert_allclose(G.sum(axis=1), tau, rtol=1e-12)
    np.testing.assert_allclose(plain.sum(axis=1), tau[nodes], rtol=1e-9)  # it does the same work
    per_node = seconds / network.n_nodes
    dense = depth.sum() / crossings(network, tau, grid).sum()
    return Line(network.n_nodes, per_node, G.nnz / network.n_nodes, dense, walked / nodes.size / per_node), ages


def main() -> None:
    """Print one line per network, then the slope and whether both demands hold."""
    _, ages = measure(CELLS_ACROSS[0], None)  # compiles, and sets the ages
    print("    nodes  seconds  us/node  entries/row  nodes/crossing  plain walk / rows")
    lines = []
    for n_cells in CELLS_ACROSS:
        line, _ = measure(n_cells, ages)
        lines.append(line)
        print(
            f"{line.n_nodes:9,} {line.per_node * line.n_nodes:8.3f} {line.per_node * 1e6:8.2f} {line.entries:12.1f}"
            f" {line.nodes_per_crossing:15.1f} {line.ratio:18.1f}"
        )
    n_nodes = np.array([line.n_nodes for line in lines])
    seconds = np.array([line.per_node for line in lines]) * n_nodes
    slope = np.polyfit(np.log(n_nodes), np.log(seconds), 1)[0]
    dense = [line.ratio for line in lines if line.nodes_per_crossing >= DENSE_PATH]
    print(f"log-log slope {slope:.3f} (at most {MOST_SLOPE})")
    print(f"least ratio at {DENSE_PATH:g} nodes per crossing or more: {min(dense, default=np.nan):.1f} (at least 10)")
    if not (slope <= MOST_SLOPE and dense and min(dense) >= LEAST_RATIO):
        raise SystemExit("the rows cost more than they may")


if __name__ == "__main__":
    main()
