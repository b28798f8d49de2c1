"""Compiled loops of the landscape maker.

Grids are flat and row-major, and their outermost cells are sea, so that a land cell always has eight
neighbours: `offset` holds the eight steps in flat index, `reach` their lengths in metres.
"""

from numba import njit


@njit(cache=True)
def _comes_first(level, ticket, a, b):
    return level[a] < level[b] or (level[a] == level[b] and ticket[a] < ticket[b])


@njit(cache=True)
def _push(heap, size, level, ticket, cell):
    child = size
    heap[child] = cell
    while child > 0:
        parent = (child - 1) // 2
        if not _comes_first(level, ticket, heap[child], heap[parent]):
            break
        heap[child], heap[parent] = heap[parent], heap[child]
        child = parent


@njit(cache=True)
def _pop(heap, size, level, ticket):
    first = heap[0]
    heap[0] = heap[size - 1]
    parent = 0
    while True:
        child = 2 * parent + 1
        if child >= size - 1:
            break
        if child + 1 < size - 1 and _comes_first(level, ticket, heap[child + 1], heap[child]):
            child += 1
        if not _comes_first(level, ticket, heap[child], heap[parent]):
            break
        heap[child], heap[parent] = heap[parent], heap[child]
        parent = child
    return first


@njit(cache=True)
def flood(height, is_land, offset, heap, ticket, level, entry, order):
    """Water level of every cell when the land is filled from the sea upward, lowest spill first.

    Fills `level` (the sea stands at 0), `entry` (the neighbour from which water reached a land cell, lower
    or level with it) and `order` (land cells, each after every cell it can drain to). `ticket` (all -1 on
    entry) becomes the turn in which a cell was reached; it breaks ties, first come, first served.
    """
    size = 0
    turn = 0
    for cell in range(height.size):
        if is_land[cell]:
            continue
        level[cell] = 0.0
        for step in offset:
            beside = cell + step
            if 0 <= beside < height.size and is_land[beside]:
                ticket[cell] = turn
                turn += 1
                _push(heap, size, level, ticket, cell)
                size += 1
                break
    n_done = 0
    while size > 0:
        cell = _pop(heap, size, level, ticket)
        size -= 1
        if is_land[cell]:
            order[n_done] = cell
            n_done += 1
        for step in offset:
            beside = cell + step
            if beside < 0 or beside >= height.size or not is_land[beside] or ticket[beside] >= 0:
                continue
            level[beside] = max(height[beside], level[cell])
            entry[beside] = cell
            ticket[beside] = turn
            turn += 1
            _push(heap, size, level, ticket, beside)
            size += 1


@njit(cache=True)
def descend(level, entry, order, offset, reach, receiver, edge):
    """Steepest of eight neighbours down the water level; over a lake, back the way the water came."""
    for cell in order:
        steepest = 0.0
        for k in range(8):
            slope = (level[cell] - level[cell + offset[k]]) / reach[k]
            if slope > steepest:
                steepest = slope
                receiver[cell] = cell + offset[k]
                edge[cell] = reach[k]
        if steepest == 0.0:
            receiver[cell] = entry[cell]
            for k in range(8):
                if cell + offset[k] == entry[cell]:
                    edge[cell] = reach[k]


@njit(cache=True)
def gather(order, receiver, amount):
    """Add to every cell, the sea's included, the amounts of all land cells that drain to it."""
    for i in range(order.size - 1, -1, -1):
        amount[receiver[order[i]]] += amount[order[i]]


@njit(cache=True)
def climb(order, receiver, rise, total):
    """Sum `rise` from the sea up to every land cell."""
    for cell in order:
        total[cell] = total[receiver[cell]] + rise[cell]


@njit(cache=True)
def incise(order, receiver, crossing_time, lift, step, height):
    """One implicit step of uplift and stream-power incision with n = 1, in place, from the sea upward.

    Solves h = z + lift - step (h - h_receiver) / crossing_time. A cell that is not higher than its receiver
    (a lake's floor) is lifted and not incised; nothing is ever deposited.
    """
    for cell in order:
        lifted = height[cell] + lift[cell]
        base = height[receiver[cell]]
        if lifted > base:
            ratio = step / crossing_time[cell]
            lifted = (lifted + ratio * base) / (1.0 + ratio)
        height[cell] = lifted


@njit(cache=True)
def creep(order, n_cols, ratio, height, before):
    """One explicit step of linear hillslope diffusion on the land; `before` is work space."""
    before[:] = height
    for cell in order:
        around = before[cell - 1] + before[cell + 1] + before[cell - n_cols] + before[cell + n_cols]
        height[cell] += ratio * (around - 4.0 * before[cell])
