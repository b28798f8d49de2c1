"""Compiled loops of the terrain stage."""

import heapq

import numpy as np
from numba import njit


@njit(cache=True)
def descend(filled, direction, land, n_rows, n_cols, east, south, diagonal, receiver, level):
    """Steepest descent on the filled surface; where it is level, the neighbour that the flood came from.

    Writes receivers of land cells (-1 at cells that the flood started from) and marks level cells with 1.
    """
    d_row = (0, 1, 1, 1, 0, -1, -1, -1)
    d_col = (1, 1, 0, -1, -1, -1, 0, 1)
    for row in range(n_rows):
        for col in range(n_cols):
            cell = row * n_cols + col
            if not land[cell]:
                continue
            steepest, best = 0.0, -1
            for k in range(8):
                r, c = row + d_row[k], col + d_col[k]
                if r < 0 or r >= n_rows or c < 0 or c >= n_cols:
                    continue
                # NaN (void, open sea) compares false
                drop = np.float64(filled[cell]) - np.float64(filled[r * n_cols + c])
                if drop > 0.0:
                    upper = min(row, r)
                    length = east[row] if r == row else (south[upper] if c == col else diagonal[upper])
                    if drop / length > steepest:
                        steepest, best = drop / length, r * n_cols + c
            if best < 0 and direction[cell] != 0:
                code, k = direction[cell], 0
                while code > 1:
                    code >>= 1
                    k += 1
                best = (row + d_row[k]) * n_cols + col + d_col[k]
                level[cell] = 1
            receiver[cell] = best


@njit(cache=True)
def relink_level(height, n_rows, n_cols, receiver, level):
    """Flood the level parts of the filled surface again from their spills, lowest ground first.

    Level cells (1) whose receiver is not level are spills and keep it; the others are linked to the cell that
    reached them first, and marked 2. Two level neighbours are of one level part, since otherwise the higher
    would fall to the lower. Ties of height go by age in the queue, so flats are crossed breadth first.
    """
    # an empty list of the right type: height, order of entry, cell
    queue = [(height[0], np.int32(0), np.int32(0)) for _ in range(0)]
    n_entries = 0
    for cell in range(receiver.size):
        if level[cell] != 0 and level[receiver[cell]] == 0:
            level[cell] = 2
            heapq.heappush(queue, (height[cell], np.int32(n_entries), np.int32(cell)))
            n_entries += 1
    while len(queue) > 0:
        cell = np.int64(heapq.heappop(queue)[2])
        row, col = cell // n_cols, cell % n_cols
        for r in range(max(row - 1, 0), min(row + 2, n_rows)):
            for c in range(max(col - 1, 0), min(col + 2, n_cols)):
                other = r * n_cols + c
                if level[other] == 1:
                    level[other] = 2
                    receiver[other] = cell
                    heapq.heappush(queue, (height[other], np.int32(n_entries), np.int32(other)))
                    n_entries += 1


@njit(cache=True)
def upstream_first(receiver, n_donors, order):
    """Write land cells so that each comes before its receiver; returns how many were reached.

    Receivers of -2 are no land. `n_donors` is zeroed scratch, uint8: a cell has at most 8 donors.
    """
    for cell in range(receiver.size):
        if receiver[cell] >= 0:
            n_donors[receiver[cell]] += 1
    n_found = 0
    for cell in range(receiver.size):
        if receiver[cell] == -2 or n_donors[cell] != 0:
            continue
        node = np.int64(cell)
        while True:
            order[n_found] = node
            n_found += 1
            n_donors[node] = 255  # written
            below = np.int64(receiver[node])
            if below < 0 or receiver[below] == -2:
                break
            n_donors[below] -= 1
            if n_donors[below] > 0:
                break
            node = below
    return n_found


@njit(cache=True)
def accumulate(order, receiver, area, cut):
    """Add areas and join the bits of what cuts a catchment, downstream."""
    for cell in order:
        below = receiver[cell]
        if below >= 0 and receiver[below] != -2:
            area[below] += area[cell]
            cut[below] |= cut[cell]


@njit(cache=True)
def take_from_outlet(order, receiver, value):
    """Give every land cell the value of the outlet that it drains to."""
    for i in range(order.size - 1, -1, -1):
        below = receiver[order[i]]
        if below >= 0 and receiver[below] != -2:
            value[order[i]] = value[below]


@njit(cache=True)
def measure_tree(receiver, edge_length, reach, main, size, strahler, n_highest):
    """Distance to the farthest source, donor on the way there, number of nodes and Strahler order upstream.

    Nodes come before their receivers. `size` starts at 1, `main` at -1, the rest at 0.
    """
    for node in range(receiver.size):
        if main[node] < 0:
            strahler[node] = 1
        elif n_highest[node] > 1:
            strahler[node] += 1
        below = receiver[node]
        if below < 0:
            continue
        size[below] += size[node]
        length = reach[node] + edge_length[node]
        if main[below] < 0 or length > reach[below]:
            reach[below] = length
            main[below] = node
        if strahler[node] > strahler[below]:
            strahler[below] = strahler[node]
            n_highest[below] = 1
        elif strahler[node] == strahler[below]:
            n_highest[below] += 1


@njit(cache=True)
def place_depth_first(receiver, main, size, place, next_free):
    """Position of every node in depth-first order, main stem first.

    Nodes come before their receivers; the positions of outlets are given. `next_free` is scratch: the place
    for the next donor of a node that is not on the main stem.
    """
    for node in range(receiver.size - 1, -1, -1):
        below = receiver[node]
        if below >= 0:
            if node == main[below]:
                place[node] = place[below] + 1
            else:
                place[node] = next_free[below]
                next_free[below] += size[node]
        if main[node] >= 0:
            next_free[node] = place[node] + 1 + size[main[node]]


@njit(cache=True)
def sum_from_base(receiver, edge_length, distance):
    """Distance from the base point along the river; receivers come before their donors."""
    for node in range(receiver.size):
        below = receiver[node]
        distance[node] = edge_length[node] + (distance[below] if below >= 0 else 0.0)


@njit(cache=True)
def _meld(mean, left, right, a, b):
    """Join two skew heaps of blocks, lowest mean on top, and return the top (-1 for an empty heap)."""
    if a < 0 or b < 0:
        return max(a, b)
    if mean[b] < mean[a]:
        a, b = b, a
    top = a
    while True:
        # the old left child goes right, what is melded with the old right child goes left
        rest, right[a] = right[a], left[a]
        if rest < 0:
            left[a] = b
            return top
        if mean[b] < mean[rest]:
            rest, b = b, rest
        left[a] = rest
        a = rest


@njit(cache=True)
def merge_blocks(receiver, mean, total, count, tributaries, left, right):
    """Isotonic regression on a tree by merging blocks, sources first; receivers come before their donors.

    A block bears the index of its lowest node. `mean` and `total` start as the heights and `count` at 1;
    `tributaries` is the heap of the blocks that flow into a block, `left` and `right` its links, all -1.
    `mean` ends as the answer.
    """
    for node in range(receiver.size - 1, -1, -1):
        while tributaries[node] >= 0 and mean[tributaries[node]] < mean[node]:
            low = tributaries[node]
            others = _meld(mean, left, right, left[low], right[low])
            tributaries[node] = _meld(mean, left, right, others, tributaries[low])
            total[node] += total[low]
            count[node] += count[low]
            mean[node] = total[node] / count[node]
            count[low] = 0  # no longer a block of its own
        below = receiver[node]
        if below >= 0:
            tributaries[below] = _meld(mean, left, right, tributaries[below], node)
    for node in range(receiver.size):
        if count[node] == 0:
            mean[node] = mean[receiver[node]]
