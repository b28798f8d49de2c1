"""Heights that fall downstream, with the least change."""

import numpy as np

from fluvinv.terrain import _kernels


def fall_downstream(receiver: np.ndarray, height: np.ndarray) -> np.ndarray:
    """Correct the heights of a river tree so that none lies below its receiver.

    The isotonic regression on the tree: of all heights that do not rise downstream, those with the least sum
    of squared changes. Blocks of nodes that violate the order are merged from the sources to the outlets,
    with a heap of the tributary blocks of every block, in O(n_nodes log n_nodes) (Pardalos & Xue 1999,
    Algorithmica 23, 211-222, from memory). Heights of reaches that fall already are returned bit by bit.

    Parameters
    ----------
    receiver : (n_nodes,) int array
        Index of the next node downstream, before the node itself; -1 at outlets.
    height : (n_nodes,) float array, m

    Returns
    -------
    (n_nodes,) float array, m
    """
    n_nodes = receiver.size
    mean = np.array(height, dtype=np.float64)
    links = np.full((3, n_nodes), -1, dtype=np.int32)
    _kernels.merge_blocks(receiver, mean, mean.copy(), np.ones(n_nodes, dtype=np.int32), links[0], links[1], links[2])
    return mean
