"""What an inversion costs: predicted memory and time."""

from dataclasses import dataclass

import numpy as np

from fluvinv.inversion.solve import DENSE_LIMIT
from fluvinv.inversion.uplift_grid import UpliftGrid

#: Seconds per unknown cubed (dense decomposition and errors) and per entry of a row, on two cores of about 2020.
_DENSE_SECONDS, _ENTRY_SECONDS = 1.1e-10, 8e-8


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


def predict_cost(tau: np.ndarray, distance: np.ndarray, grid: UpliftGrid) -> Cost:
    """Predict memory and time of an inversion before it is done.

    A row has four places for each map cell and two ages for each age step that its path crosses; a path
    crosses about 1.3 map cells per spacing of its length.

    Parameters
    ----------
    tau : (n_nodes,) float array, yr
    distance : (n_nodes,) float array, m
    grid : UpliftGrid
    """
    crossings = 1.3 * distance / grid.spacing + np.minimum(tau, grid.ages[-1]) / grid.ages[1] + 1
    entries = int(np.sum(np.minimum(4.5 * crossings, grid.n_unknowns)))
    n = grid.n_unknowns
    row_bytes = 24.0 * entries + 200.0 * tau.size
    if n <= DENSE_LIMIT:
        return Cost(
            entries, row_bytes + 8 * 5.0 * n**2, _ENTRY_SECONDS * entries + _DENSE_SECONDS * n**3 + 3.0, "dense"
        )
    rank = 800
    products = 4 * rank * (4e-10 * (2 * entries + n * grid.n_places) + 4e-10 * n * rank)
    return Cost(
        entries, row_bytes + 8.0 * (6 * rank * n + grid.n_places**2), _ENTRY_SECONDS * entries + products, "iterative"
    )
