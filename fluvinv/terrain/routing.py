"""Where the water of every cell goes: eight-direction routing over depressions that are filled or carved."""

import numpy as np
from pyflwdir.dem import fill_depressions

from fluvinv.terrain import _kernels
from fluvinv.terrain.grid import Grid
from fluvinv.terrain.sea import near, near_or_edge

#: Receiver of cells that are not land, and of land cells where the water leaves the grid or ends inland.
NOT_LAND = -2
NO_RECEIVER = -1


def route(grid: Grid, sea: np.ndarray, base_level: float = 0.0, depressions: str = "carve") -> np.ndarray:
    """Receiver of every land cell: the one neighbour that its water goes to.

    The water may leave to the sea, over the grid's edge and into void cells. Depressions are filled to their
    spill (for routing only), and every cell drains to the neighbour with the steepest fall of the filled
    surface per length of the step (O'Callaghan & Mark 1984; Jenson & Domingue 1988); among equal falls the
    first of E, SE, S, SW, W, NW, N, NE is taken. Where the filled surface is level, "fill" follows the order
    in which the flood from the outlets reached the cells. "carve" floods each level part again from its
    spill, lowest ground first by the heights as they are, so that water follows the valley floors.

    Parameters
    ----------
    grid : Grid
    sea : (n_rows, n_cols) bool array
    base_level : float, m
        Height of the sea's surface, whatever heights the DEM has there.
    depressions : {"carve", "fill"}

    Returns
    -------
    (n_rows * n_cols,) int32 array
        Flat index of the receiver, which may be a sea cell; NO_RECEIVER on land cells where the water leaves
        the grid or enters void; NOT_LAND on sea and void cells. Following receivers never leads in a circle:
        the filled surface falls along every link, or stays level and the order of the flood falls.
    """
    land = ~(sea | grid.void)
    surface = np.where(land, grid.height, np.float32(np.nan))
    unknown = grid.void & ~sea
    coast = sea & near(land)
    surface[coast] = np.float32(base_level)
    seeds = np.flatnonzero((land & near_or_edge(unknown)) | coast)
    filled, direction = _flood_pyflwdir(surface, seeds)
    steps = grid.step_lengths()
    receiver = np.full(land.size, NOT_LAND, dtype=np.int32)
    level = np.zeros(land.size, dtype=np.uint8)
    _kernels.descend(
        filled.ravel(), direction.ravel(), land.ravel(), grid.n_rows, grid.n_cols,
        steps.east, steps.south, steps.diagonal, receiver, level,
    )  # fmt: skip
    if depressions == "carve":
        _kernels.relink_level(surface.ravel(), grid.n_rows, grid.n_cols, receiver, level)
    return receiver


def _flood_pyflwdir(surface: np.ndarray, seeds: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Flood a surface from its seeds, lowest ground first, with pyflwdir.

    An engine takes a float32 surface, NaN outside, and the flat indices of the cells where water leaves. It
    returns the filled float32 surface (the least highest point of all ways out) and uint8 codes of the
    neighbour that each cell was flooded from: E 1, SE 2, S 4, SW 8, W 16, NW 32, N 64, NE 128; 0 none.
    """
    # pyflwdir adds a depth to each height. In single precision the sum misses the spill's height by a digit,
    # and a lake that is not level breaks the proof that water never runs in a circle. In double precision, and
    # with heights in multiples of 2^-30 m (which touches only those below 16 mm), the sum is exact.
    surface = np.rint(surface * np.float32(2**30)) * np.float32(2**-30)
    filled, direction = fill_depressions(surface.astype(np.float64), nodata=np.nan, idxs_pit=seeds)
    return filled.astype(np.float32), direction
