"""Outlines of invented islands."""

import numpy as np

from fluvinv.errors import SettingsError

SEA_RIM_CELLS = 3
SMALLEST_GRID_CELLS = 2 * SEA_RIM_CELLS + 5


def island_mask(n_rows: int, n_cols: int, seed: int) -> np.ndarray:
    """Outline of an invented island: a rounded box with a wobbly coast, in one piece.

    Parameters
    ----------
    n_rows, n_cols : int
        Size of the grid, at least 11 each.
    seed : int
        Seed of the wobbles.

    Returns
    -------
    (n_rows, n_cols) bool array
        True on land; at least three cells along every border are sea.

    Raises
    ------
    SettingsError
        The grid is too small for an island and its sea.
    """
    if min(n_rows, n_cols) < SMALLEST_GRID_CELLS:
        raise SettingsError(
            f"an island needs a grid of at least {SMALLEST_GRID_CELLS} x {SMALLEST_GRID_CELLS} cells, "
            f"found {n_rows} x {n_cols}"
        )
    rng = np.random.default_rng(seed)
    north = (np.arange(n_rows) + 0.5 - n_rows / 2) / (n_rows / 2 - SEA_RIM_CELLS)
    east = (np.arange(n_cols) + 0.5 - n_cols / 2) / (n_cols / 2 - SEA_RIM_CELLS)
    east, north = np.meshgrid(east, north)
    # A superellipse of power 3 lies between an ellipse and a box; it keeps the bays off the grid's edge.
    distance = (np.abs(east) ** 3 + np.abs(north) ** 3) ** (1 / 3)
    bearing = np.arctan2(north, east)
    coast = np.zeros_like(bearing)
    for wave in range(2, 14):
        coast += rng.normal() / wave**1.5 * np.cos(wave * bearing + rng.uniform(0.0, 2.0 * np.pi))
    # One radius for each bearing from the middle, so the island is in one piece; it only bites into the box.
    coast = 1.0 - 0.2 * (coast.max() - coast) / np.ptp(coast)
    return distance < coast
