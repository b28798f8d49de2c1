"""What is sea, what is land, and what is not known."""

from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from scipy import ndimage

from fluvinv.errors import InputError
from fluvinv.terrain.grid import Grid

#: A void region counts as sea when the land around it is this low, as a share of the DEM's relief.
COAST_SHARE_OF_RELIEF = 0.05

_EIGHT = np.ones((3, 3), dtype=bool)


@dataclass(frozen=True, slots=True)
class SeaReport:
    """What was taken for sea and why.

    Attributes
    ----------
    n_sea : int
        Sea cells, void ones included.
    n_void : int
        Cells without a value.
    n_void_sea : int
        Void cells that were taken for sea.
    n_void_regions : int
        Connected regions of void cells.
    n_void_regions_sea : int
        Those that were taken for sea.
    coast_median_m : float or None, m
        Median height of the land cells that border the largest void region; None where there are none.
    """

    n_sea: int
    n_void: int
    n_void_sea: int
    n_void_regions: int
    n_void_regions_sea: int
    coast_median_m: float | None

    @property
    def void_taken_as(self) -> str:
        """What the void cells were taken for: "none" (there are none), "sea", "void" or "mixed"."""
        if self.n_void == 0:
            return "none"
        if self.n_void_sea == self.n_void:
            return "sea"
        return "mixed" if self.n_void_sea else "void"


class Sea(NamedTuple):
    """The sea as a mask, (n_rows, n_cols) bool array, and the account of how it was found."""

    sea: np.ndarray
    report: SeaReport


def find_sea(grid: Grid, base_level: float = 0.0, nodata: str = "auto") -> Sea:
    """Find the sea: cells at or below base level that are connected to the grid's edge or to void cells.

    Cells are connected through their eight neighbours. Low ground that is closed in by land is land.

    Parameters
    ----------
    grid : Grid
    base_level : float, m
    nodata : {"auto", "sea", "void"}
        What void cells are. "auto" decides for each connected region: it is sea if it touches sea that has
        values, or if the median height of the land cells around it is at most 5 % of the DEM's relief above
        base level; otherwise it is void, that is, not known.

    Returns
    -------
    Sea

    Raises
    ------
    InputError
        If all cells are void or none lies above base level.
    """
    valued = ~grid.void
    if not valued.any():
        raise InputError(
            f"catchment.dem: all {grid.void.size} cells are void; expected heights. "
            "Check the file and its nodata value."
        )
    low = grid.height <= np.float32(base_level)
    low &= valued
    if np.array_equal(low, valued):
        raise InputError(
            f"catchment.dem: none of its {np.count_nonzero(valued)} cells with a value lies above base level "
            f"({base_level:g} m; the highest is at {grid.height[valued].max():g} m). "
            "Lower catchment.base_level_m, or check the unit and the sign of the heights."
        )
    sea = _connected_to_outside(low, grid.void)
    if not grid.void.any():
        return Sea(sea, SeaReport(int(np.count_nonzero(sea)), 0, 0, 0, 0, None))
    region, n_regions = ndimage.label(grid.void, structure=_EIGHT, output=np.int32)
    border_region, border_height = _land_borders(grid, region, sea)
    median = _median_by_region(border_region, border_height, n_regions)
    if nodata == "auto":
        relief = float(grid.height[valued].max()) - base_level
        is_sea = median <= base_level + COAST_SHARE_OF_RELIEF * relief
        is_sea[np.unique(region[near(sea) & grid.void])] = True
    else:
        is_sea = np.full(n_regions + 1, nodata == "sea")
    is_sea[0] = False
    cells_per_region = np.bincount(region.ravel(), minlength=n_regions + 1)
    sea |= is_sea[region]
    largest = 1 + int(np.argmax(cells_per_region[1:]))
    report = SeaReport(
        n_sea=int(np.count_nonzero(sea)),
        n_void=int(cells_per_region[1:].sum()),
        n_void_sea=int(cells_per_region[is_sea].sum()),
        n_void_regions=n_regions,
        n_void_regions_sea=int(np.count_nonzero(is_sea)),
        coast_median_m=None if np.isnan(median[largest]) else float(median[largest]),
    )
    return Sea(sea, report)


def near(mask: np.ndarray) -> np.ndarray:
    """(n_rows, n_cols) bool array: cells in the mask or next to it, corners included."""
    return ndimage.binary_dilation(mask, _EIGHT) if mask.any() else np.zeros_like(mask)


def near_or_edge(mask: np.ndarray) -> np.ndarray:
    """(n_rows, n_cols) bool array: cells in the mask, next to it or on the grid's edge."""
    found = near(mask)
    for edge in (found[0], found[-1], found[:, 0], found[:, -1]):
        edge[:] = True
    return found


def _connected_to_outside(low: np.ndarray, void: np.ndarray) -> np.ndarray:
    """Cells of the mask whose connected region reaches the grid's edge or a void cell."""
    if not low.any():
        return low
    label, n_labels = ndimage.label(low, structure=_EIGHT, output=np.int32)
    reaches = np.zeros(n_labels + 1, dtype=bool)
    reaches[label[near_or_edge(void)]] = True
    reaches[0] = False
    return reaches[label]


def _land_borders(grid: Grid, region: np.ndarray, sea: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Void region and height of every pair of a void region and a land cell that borders it."""
    row, col = np.nonzero(near(grid.void) & ~grid.void & ~sea)
    cell = row * grid.n_cols + col
    pairs = []
    for d_row, d_col in np.argwhere(_EIGHT) - 1:
        r, c = row + d_row, col + d_col
        inside = (r >= 0) & (r < grid.n_rows) & (c >= 0) & (c < grid.n_cols)
        found = region[r[inside], c[inside]]
        pairs.append(np.stack([found, cell[inside]])[:, found > 0])
    pairs = np.unique(np.concatenate(pairs, axis=1), axis=1)
    return pairs[0], grid.height.ravel()[pairs[1]]


def _median_by_region(region: np.ndarray, height: np.ndarray, n_regions: int) -> np.ndarray:
    """(n_regions + 1,) float array: median height of each region's border; NaN where it has none."""
    median = np.full(n_regions + 1, np.nan)
    order = np.lexsort((height, region))
    count = np.bincount(region, minlength=n_regions + 1)
    start = np.cumsum(count) - count
    has = count > 0
    lower, upper = (start + (count - 1) // 2)[has], (start + count // 2)[has]
    median[has] = (height[order[lower]].astype(np.float64) + height[order[upper]]) / 2
    return median
