"""Compiled loops of the inversion: rows of the sensitivity matrix.

Positions are in grid units: u counts columns eastward and v counts rows southward from the north-west map
node, so that map lines are the whole numbers. A segment is the part of a path inside one map cell, from the
point where the path enters it (going upstream). Its moments M0 = integral of w dtau and
M1 = integral of w (tau - tau_in) dtau of the four bilinear weights w run from the entry up to a node.
"""

import numpy as np
from numba import njit

_GAUSS = 0.5 / np.sqrt(3.0)


@njit(cache=True)
def _add_moments(ua, va, ta, ub, vb, tb, row, col, tau_in, m0, m1):
    """Add the moments of the straight piece a-b to m0 and m1: two-point Gauss, exact for cubics."""
    half = 0.5 * (tb - ta)
    for side in (-1.0, 1.0):
        s = 0.5 + side * _GAUSS
        fu = min(max(ua + s * (ub - ua) - col, 0.0), 1.0)
        fv = min(max(va + s * (vb - va) - row, 0.0), 1.0)
        lever = ta + s * (tb - ta) - tau_in
        for corner in range(4):
            wu = fu if corner % 2 else 1.0 - fu
            wv = fv if corner // 2 else 1.0 - fv
            m0[corner] += half * wu * wv
            m1[corner] += half * wu * wv * lever


@njit(cache=True)
def _next_line(start, step, line):
    """Share of the edge at which it meets a map line; beyond 1 when it does not move across lines."""
    if step == 0.0:
        return 2.0
    return (line - start) / step


@njit(cache=True)
def _first_line(start, step):
    """The first map line met strictly after the start."""
    if step > 0.0:
        return np.floor(start) + 1.0
    return np.ceil(start) - 1.0


@njit(cache=True)
def _cut_edge(ua, va, ub, vb, cuts):
    """Write the shares (ending with 1) at which the edge a-b meets map lines; return how many there are.

    With an array of length 0 the cuts are counted only.
    """
    du = ub - ua
    dv = vb - va
    line_u = _first_line(ua, du)
    line_v = _first_line(va, dv)
    count = 0
    last = 0.0
    while True:
        su = _next_line(ua, du, line_u)
        sv = _next_line(va, dv, line_v)
        s = min(su, sv, 1.0)
        if s > last or s >= 1.0:
            if cuts.size > 0:
                cuts[count] = s
            count += 1
            last = s
        if s >= 1.0:
            return count
        if su <= s:
            line_u += 1.0 if du > 0 else -1.0
        if sv <= s:
            line_v += 1.0 if dv > 0 else -1.0


@njit(cache=True)
def _lower_end(node, receiver, u, v, tau, base_u, base_v):
    """Position and travel time of the lower end of a node's edge."""
    below = receiver[node]
    if below < 0:
        return base_u[node], base_v[node], 0.0
    return u[below], v[below], tau[below]


@njit(cache=True)
def cross_cells(receiver, u, v, base_u, base_v, n_rows, n_cols, touched):
    """Mark the map cells that edges cross; return the number of pieces of all edges and the most on one."""
    none = np.empty(0)
    total = 0
    most = 1
    for node in range(receiver.size):
        below = receiver[node]
        ua = u[below] if below >= 0 else base_u[node]
        va = v[below] if below >= 0 else base_v[node]
        count = _cut_edge(ua, va, u[node], v[node], none)
        total += count
        most = max(most, count)
        cuts = np.empty(count)
        _cut_edge(ua, va, u[node], v[node], cuts)
        last = 0.0
        for s in cuts:
            mid = 0.5 * (last + s)
            row = min(max(int(np.floor(va + mid * (v[node] - va))), 0), n_rows - 2)
            col = min(max(int(np.floor(ua + mid * (u[node] - ua))), 0), n_cols - 2)
            touched[row, col] = True
            last = s
    return total, most


@njit(cache=True)
def running_moments(
    receiver, u, v, tau, base_u, base_v, n_rows, n_cols, most,
    seg_row, seg_col, seg_in, seg_below, seg_m0, seg_m1, seg_rank, node_seg, node_m0, node_m1,
):  # fmt: skip
    """Follow every edge upstream and keep, for each node, the moments since it entered its map cell.

    A segment records its cell, its entry time, the segment below and that segment's moments up to here.
    Returns the number of segments.
    """
    cuts = np.empty(most)
    m0 = np.zeros(4)
    m1 = np.zeros(4)
    n_segments = 0
    for node in range(receiver.size):
        below = receiver[node]
        ua, va, ta = _lower_end(node, receiver, u, v, tau, base_u, base_v)
        du, dv, dt = u[node] - ua, v[node] - va, tau[node] - ta
        segment = -1
        m0[:] = 0.0
        m1[:] = 0.0
        if below >= 0:
            segment = node_seg[below]
            m0[:] = node_m0[below]
            m1[:] = node_m1[below]
        last = 0.0
        for piece in range(_cut_edge(ua, va, u[node], v[node], cuts)):
            s = cuts[piece]
            mid = 0.5 * (last + s)
            row = min(max(int(np.floor(va + mid * dv)), 0), n_rows - 2)
            col = min(max(int(np.floor(ua + mid * du)), 0), n_cols - 2)
            start = ta + last * dt
            if segment < 0 or row != seg_row[segment] or col != seg_col[segment]:
                seg_row[n_segments] = row
                seg_col[n_segments] = col
                seg_in[n_segments] = start
                seg_below[n_segments] = segment
                seg_m0[n_segments] = m0
                seg_m1[n_segments] = m1
                seg_rank[n_segments] = 1 if segment < 0 else seg_rank[segment] + 1
                segment = n_segments
                n_segments += 1
                m0[:] = 0.0
                m1[:] = 0.0
            end = tau[node] if s >= 1.0 else ta + s * dt
            _add_moments(
                ua + last * du, va + last * dv, start, ua + s * du, va + s * dv, end,
                row, col, seg_in[segment], m0, m1,
            )  # fmt: skip
            last = s
        node_seg[node] = segment
        node_m0[node] = m0
        node_m1[node] = m1
    return n_segments


@njit(cache=True)
def _four(table, i):
    """Four numbers of a row as a tuple, which stays in registers."""
    return table[i, 0], table[i, 1], table[i, 2], table[i, 3]


@njit(cache=True)
def _moments_at(
    time, segment, depth, path, path_tau, receiver, u, v, tau, base_u, base_v,
    seg_row, seg_col, seg_in, node_seg, node_m0, node_m1, m0, m1,
):  # fmt: skip
    """Write the moments of a segment of the current path, from its entry up to a travel time inside it."""
    low = -1
    high = depth
    while high - low > 1:  # path_tau[low] <= time < path_tau[high]; -1 stands for the base point
        middle = (low + high) // 2
        if path_tau[middle] <= time:
            low = middle
        else:
            high = middle
    node = path[high]
    ua, va, ta = _lower_end(node, receiver, u, v, tau, base_u, base_v)
    below = receiver[node]
    start = seg_in[segment]
    if below >= 0 and node_seg[below] == segment:
        for corner in range(4):
            m0[corner] = node_m0[below, corner]
            m1[corner] = node_m1[below, corner]
        start = ta
    else:
        for corner in range(4):
            m0[corner] = 0.0
            m1[corner] = 0.0
    if time > start:
        span = tau[node] - ta
        sa = (start - ta) / span
        sb = (time - ta) / span
        du = u[node] - ua
        dv = v[node] - va
        _add_moments(
            ua + sa * du, va + sa * dv, start, ua + sb * du, va + sb * dv, time,
            seg_row[segment], seg_col[segment], seg_in[segment], m0, m1,
        )  # fmt: skip


@njit(cache=True)
def _share_out(d0, d1, lever, per_width, column, to_older, row_sum, touched, count):
    """Share a piece's moments at one place out to two ages; return the new length of the list of touched columns.

    The lever is the age at the segment's entry less the younger of the two ages.
    """
    d0 = max(d0, 0.0)  # rounding, where a piece has no length or runs along the cell's far side
    older = min(max((lever * d0 - d1) * per_width, 0.0), d0)
    row_sum[column] += d0 - older
    row_sum[column + to_older] += older
    touched[count] = column
    touched[count + 1] = column + to_older
    return count + 2


@njit(cache=True)
def _collect(row_sum, touched, count, fill, indices, data):
    """Move the touched columns of the dense row to the sparse one, leaving zeros behind."""
    for k in range(count):
        column = touched[k]
        indices[fill] = column
        data[fill] = row_sum[column]
        fill += row_sum[column] > 0.0  # a double finds the zero that was left behind
        row_sum[column] = 0.0
    return fill


@njit(cache=True)
def fill_rows(
    first, stop, depth_of, path, path_tau, receiver, u, v, tau, base_u, base_v,
    seg_row, seg_col, seg_in, seg_below, seg_m0, seg_m1, node_seg, node_m0, node_m1,
    ages, place, n_places, row_sum, touched, indptr, indices, data,
):  # fmt: skip
    """Write the rows of nodes first to stop - 1; path and path_tau carry on from the rows before.

    A row walks the segments of its path from the node down. Inside a segment, age breaks are found by
    bisection on the path, which a depth-first traversal keeps on a stack.
    """
    m0, m1 = np.empty(4), np.empty(4)
    last = ages.size - 1
    fill = 0
    for node in range(first, stop):
        depth = depth_of[node]
        path[depth] = node
        path_tau[depth] = tau[node]
        total = tau[node]
        count = 0
        age_index = 0
        segment = node_seg[node]
        upper0, upper1 = _four(node_m0, node), _four(node_m1, node)
        while segment >= 0:
            row, col, age_in = seg_row[segment], seg_col[segment], total - seg_in[segment]
            corners = place[row, col], place[row, col + 1], place[row + 1, col], place[row + 1, col + 1]
            cut = True
            while cut:
                cut = age_index < last and age_in > ages[age_index + 1]
                if cut:
                    _moments_at(
                        total - ages[age_index + 1], segment, depth, path, path_tau, receiver, u, v, tau,
                        base_u, base_v, seg_row, seg_col, seg_in, node_seg, node_m0, node_m1, m0, m1,
                    )  # fmt: skip
                else:
                    m0[:] = 0.0
                    m1[:] = 0.0
                to_older, per_width = 0, 0.0  # beyond the last age everything counts with it
                if age_index < last:
                    to_older, per_width = n_places, 1.0 / (ages[age_index + 1] - ages[age_index])
                lever = age_in - ages[age_index]
                column = age_index * n_places
                for corner in range(4):
                    count = _share_out(
                        upper0[corner] - m0[corner], upper1[corner] - m1[corner], lever, per_width,
                        column + corners[corner], to_older, row_sum, touched, count,
                    )  # fmt: skip
                if cut:
                    upper0, upper1 = (m0[0], m0[1], m0[2], m0[3]), (m1[0], m1[1], m1[2], m1[3])
                    age_index += 1
            upper0, upper1 = _four(seg_m0, segment), _four(seg_m1, segment)
            segment = seg_below[segment]
        fill = _collect(row_sum, touched, count, fill, indices, data)
        indptr[node - first + 1] = fill


@njit(cache=True)
def count_downstream(receiver, depth):
    """Number of nodes downstream of each node; receivers come before their donors."""
    for node in range(receiver.size):
        if receiver[node] >= 0:
            depth[node] = depth[receiver[node]] + 1
