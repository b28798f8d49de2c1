"""Upstream areas, and which catchments the DEM holds as a whole."""

from dataclasses import dataclass

import numpy as np

from fluvinv.errors import NumericalError
from fluvinv.terrain import _kernels
from fluvinv.terrain.grid import Grid
from fluvinv.terrain.routing import NOT_LAND
from fluvinv.terrain.sea import near, near_or_edge

#: Bits of what cuts a catchment.
CUT_BY_EDGE = 1
CUT_BY_VOID = 2


@dataclass(frozen=True, slots=True)
class Drainage:
    """Upstream areas and completeness of every land cell.

    Attributes
    ----------
    order : (n_land,) int32 array
        Flat indices of the land cells, every cell before its receiver.
    area : (n_cells,) float array, m2
        Upstream area, the cell's own included; the cell's own on cells that are not land.
    cut : (n_cells,) uint8 array
        Bits CUT_BY_EDGE and CUT_BY_VOID: what cells upstream (or the cell itself) touch. 0: complete.
    basin_cut : (n_cells,) uint8 array
        `cut` of the outlet that the cell drains to. 0: usable, for whatever cuts a catchment somewhere also
        cuts it everywhere downstream, so complete all the way down means complete at the outlet.
    """

    order: np.ndarray
    area: np.ndarray
    cut: np.ndarray
    basin_cut: np.ndarray


def drain(grid: Grid, sea: np.ndarray, receiver: np.ndarray) -> Drainage:
    """Add up areas downstream and find out which catchments are complete.

    A cell is complete when nothing upstream of it touches the grid's edge or a void cell that is not sea; it
    is usable when it and every cell downstream of it are complete, because a wrong area anywhere on the way
    down spoils its travel time.

    Parameters
    ----------
    grid : Grid
    sea : (n_rows, n_cols) bool array
    receiver : (n_cells,) int32 array
        As `route` returns it.

    Returns
    -------
    Drainage

    Raises
    ------
    NumericalError
        If the receivers lead in a circle.
    """
    n_land = int(np.count_nonzero(receiver != NOT_LAND))
    order = np.empty(n_land, dtype=np.int32)
    n_found = _kernels.upstream_first(receiver, np.zeros(receiver.size, dtype=np.uint8), order)
    if n_found != n_land:
        raise NumericalError(f"flow directions lead in a circle at {n_land - n_found} of {n_land} land cells.")
    area = np.repeat(grid.cell_area_by_row(), grid.n_cols)
    cut = _own_cuts(grid, sea).ravel()
    _kernels.accumulate(order, receiver, area, cut)
    basin_cut = cut.copy()
    _kernels.take_from_outlet(order, receiver, basin_cut)
    return Drainage(order, area, cut, basin_cut)


def _own_cuts(grid: Grid, sea: np.ndarray) -> np.ndarray:
    """(n_rows, n_cols) uint8 array: what each cell itself touches."""
    cut = near_or_edge(np.zeros_like(sea)).astype(np.uint8) * np.uint8(CUT_BY_EDGE)
    cut[near(grid.void & ~sea)] |= CUT_BY_VOID
    return cut
