"""Compiled loops of the stream-power stage."""

from numba import njit


@njit(cache=True)
def sum_upstream(receiver, increment, total):
    """Add increments along the tree, from the outlets up; receivers come before their donors."""
    for node in range(receiver.size):
        below = receiver[node]
        if below < 0:
            total[node] = increment[node]
        else:
            total[node] = total[below] + increment[node]
