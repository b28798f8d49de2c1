"""Small invented river networks for the tests, built without the terrain stage."""

import numpy as np

from fluvinv.network import RiverNetwork


def depth_first(receiver, length):
    """Order and receivers of a tree in depth-first order, branch with the farthest source first."""
    n = len(receiver)
    donors = [[] for _ in range(n)]
    roots = []
    for node, below in enumerate(receiver):
        (roots if below < 0 else donors[below]).append(node)
    reach = np.zeros(n)
    for node in sorted(range(n), key=lambda i: -_depth(receiver, i)):
        if receiver[node] >= 0:
            below = receiver[node]
            reach[below] = max(reach[below], reach[node] + length[node])
    order, stack = [], list(reversed(roots))
    while stack:
        node = stack.pop()
        order.append(node)
        stack.extend(sorted(donors[node], key=lambda i: reach[i] + length[i]))
    return np.array(order)


def _depth(receiver, node):
    depth = 0
    while receiver[node] >= 0:
        node = receiver[node]
        depth += 1
    return depth


def network_from_tree(receiver, x, y, base_x, base_y, area, height=None, base_level=0.0):
    """Network of a tree given by receivers (-1 at outlets), positions in m, base points and areas in m2."""
    receiver, x, y, area = (np.asarray(a) for a in (receiver, x, y, area))
    is_root = receiver < 0
    low_x = np.where(is_root, base_x, x[receiver])
    low_y = np.where(is_root, base_y, y[receiver])
    length = np.hypot(x - low_x, y - low_y)
    order = depth_first(receiver, length)
    rank = np.empty_like(order)
    rank[order] = np.arange(order.size)
    new_receiver = np.where(receiver[order] < 0, -1, rank[receiver[order]])
    n = order.size
    size = np.ones(n, dtype=int)
    distance = np.zeros(n)
    basin = np.zeros(n, dtype=int)
    river = np.zeros(n, dtype=int)
    for i in range(n - 1, -1, -1):
        if new_receiver[i] >= 0:
            size[new_receiver[i]] += size[i]
    n_rivers = n_basins = 0
    for i in range(n):
        below = new_receiver[i]
        distance[i] = length[order[i]] + (distance[below] if below >= 0 else 0.0)
        n_basins += below < 0
        basin[i] = n_basins
        n_rivers += below != i - 1 or below < 0
        river[i] = n_rivers
    outlet = np.flatnonzero(new_receiver < 0)
    z = np.zeros(n) if height is None else np.asarray(height)[order]
    return RiverNetwork(
        receiver=new_receiver.astype(np.int32), x=x[order].astype(float), y=y[order].astype(float),
        map_x=x[order].astype(float), map_y=y[order].astype(float), edge_length=length[order],
        distance=distance, height=z, corrected_height=z.copy(), area=area[order].astype(float),
        cell=np.arange(n), basin_id=basin, river_id=river, strahler_order=np.ones(n, dtype=int),
        subtree_size=size, outlet=outlet, base_level=np.full(outlet.size, float(base_level)),
        base_map_x=np.asarray(base_x)[order][outlet].astype(float),
        base_map_y=np.asarray(base_y)[order][outlet].astype(float),
    )  # fmt: skip


def random_network(n_nodes, seed, step=1000.0, n_roots=3, branching=0.15):
    """A random tree of D8-like steps with several outlets; areas fall upstream at random."""
    rng = np.random.default_rng(seed)
    receiver = np.full(n_nodes, -1)
    x, y = np.zeros(n_nodes), np.zeros(n_nodes)
    base_x, base_y = np.zeros(n_nodes), np.zeros(n_nodes)
    heading = np.zeros(n_nodes)
    tips = []
    for i in range(n_nodes):
        if i < n_roots:
            base_x[i], base_y[i] = rng.uniform(0, 40e3, 2)
            heading[i] = rng.uniform(0, 2 * np.pi)
            px, py = base_x[i], base_y[i]
        else:
            at = rng.integers(i) if rng.random() < branching else tips[rng.integers(len(tips))]
            receiver[i] = at
            heading[i] = heading[at] + rng.normal(0, 0.5)
            px, py = x[at], y[at]
            if at in tips:
                tips.remove(at)
        tips.append(i)
        x[i] = px + step * np.cos(heading[i]) * rng.uniform(0.5, 1.5)
        y[i] = py + step * np.sin(heading[i]) * rng.uniform(0.5, 1.5)
    area = np.full(n_nodes, 1e6)
    for i in range(n_nodes - 1, -1, -1):
        if receiver[i] >= 0:
            area[receiver[i]] += area[i] + rng.uniform(0, 1e6)
    return network_from_tree(receiver, x, y, base_x, base_y, area)


def chain_network(x, y, area=1e8, base=(0.0, 0.0)):
    """A single river through the given points, the first being the outlet."""
    n = len(x)
    receiver = np.arange(n) - 1
    base_x, base_y = np.full(n, base[0]), np.full(n, base[1])
    return network_from_tree(receiver, np.asarray(x, float), np.asarray(y, float), base_x, base_y, np.full(n, area))
