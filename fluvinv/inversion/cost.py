"""What an inversion costs: predicted memory and time."""

from dataclasses import dataclass

import numpy as np

from fluvinv.inversion.solve import DENSE_LIMIT
from fluvinv.inversion.uplift_grid import UpliftGrid

#: Dense algebra and sparse products on two ordinary cores, in operations per second.
_DENSE_SPEED, _EIGEN_SPEED, _SPARSE_SPEED = 2e10, 1.2e10, 4e8


@dataclass(frozen=True, slots=True)
class Cost:
    """Predicted cost of an inversion.

    Attributes
    ----------
    entries : int
        Entries of the sensitivity matrix.
    memory : float, bytes
    seconds : float
        On an ordinary machine with two cores; within a factor of about two.
    method : str
        "dense" or "iterative".
    """

    entries: int
    memory: float
    seconds: float
    method: str


def predict_cost(tau: np.ndarray, distance: np.ndarray, grid: UpliftGrid, n_modes: int) -> Cost:
    """Predict memory and time of an inversion before it is done.

    A row has four places for each map cell and two ages for each age step that its path crosses; a path
    crosses about 1.3 map cells per spacing of its length.

    Parameters
    ----------
    tau : (n_nodes,) float array, yr
    distance : (n_nodes,) float array, m
    grid : UpliftGrid
    n_modes : int
        Modes of the prior on this grid.
    """
    n, k = grid.n_unknowns, n_modes
    crossings = 1.3 * distance / grid.spacing + np.minimum(tau, grid.ages[-1]) / grid.ages[1] + 1
    entries = int(np.sum(np.minimum(4.5 * crossings, n)))
    fields = 2.0 * n * k * (grid.n_places + grid.n_ages)
    shared = entries * 40 / _SPARSE_SPEED + 2 * fields / _DENSE_SPEED + 0.4 * entries * k / _SPARSE_SPEED
    memory = 30.0 * entries + 200.0 * tau.size + 8.0 * (3 * n * k + 3 * grid.n_places**2) + 4e8
    if k <= DENSE_LIMIT:
        seconds = shared + tau.size * k**2 / _DENSE_SPEED + 9.0 * k**3 / _EIGEN_SPEED / 10
        return Cost(entries, memory + 8.0 * 4 * k**2, seconds, "dense")
    rank = 800
    products = 4 * rank * (4 * entries / _SPARSE_SPEED + 4.0 * n * (grid.n_places + rank) / _DENSE_SPEED)
    return Cost(entries, memory, shared + products, "iterative")
