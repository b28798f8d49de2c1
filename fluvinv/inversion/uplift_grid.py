"""The unknowns: uplift rate on a regular map grid (bilinear) times ages (piecewise linear)."""

from dataclasses import dataclass

import numpy as np

from fluvinv.inversion import _kernels
from fluvinv.network import RiverNetwork

_NICE_STEPS = (1.0, 1.25, 1.5, 2.0, 2.5, 3.0, 4.0, 5.0, 6.0, 8.0, 10.0)


@dataclass(frozen=True, slots=True)
class UpliftGrid:
    """Map nodes and ages of the unknown uplift rate.

    The grid snaps to multiples of its spacing, so that grids of neighbouring catchments align. Only places
    (map nodes) at a corner of a map cell that some river crosses carry unknowns. Unknown number
    ``age_index * n_places + place_index`` belongs to one place at one age.

    Attributes
    ----------
    west, north : float, m
        Coordinates of the north-west map node in the map CRS.
    spacing : float, m
    n_rows, n_cols : int
        Map nodes from north to south and from west to east.
    ages : (n_ages,) float array, yr
        Ascending, the first is 0. Ages beyond the last count with the last.
    place : (n_rows, n_cols) int array
        Index of the place at each map node, -1 where there is none.
    """

    west: float
    north: float
    spacing: float
    n_rows: int
    n_cols: int
    ages: np.ndarray
    place: np.ndarray

    @property
    def n_ages(self) -> int:
        """Number of age nodes."""
        return self.ages.size

    @property
    def n_places(self) -> int:
        """Number of map nodes that carry unknowns."""
        return int(self.place.max()) + 1

    @property
    def n_unknowns(self) -> int:
        """Number of unknown rates."""
        return self.n_places * self.n_ages

    @property
    def x(self) -> np.ndarray:
        """(n_cols,) float array, m: map coordinates of the columns."""
        return self.west + self.spacing * np.arange(self.n_cols)

    @property
    def y(self) -> np.ndarray:
        """(n_rows,) float array, m: map coordinates of the rows, from north to south."""
        return self.north - self.spacing * np.arange(self.n_rows)

    @property
    def place_xy(self) -> np.ndarray:
        """(n_places, 2) float array, m: map coordinates of the places."""
        rows, cols = np.nonzero(self.place >= 0)
        return np.column_stack([self.x[cols], self.y[rows]])

    def in_grid_units(self, x, y):
        """Coordinates (m) as columns eastward and rows southward from the north-west map node."""
        return (np.asarray(x) - self.west) / self.spacing, (self.north - np.asarray(y)) / self.spacing

    def to_stack(self, values: np.ndarray) -> np.ndarray:
        """Lay values of all unknowns out as maps.

        Parameters
        ----------
        values : (n_unknowns,) or (n_ages, n_places) array

        Returns
        -------
        (n_ages, n_rows, n_cols) float array, NaN where there is no place
        """
        stack = np.full((self.n_ages, self.n_rows, self.n_cols), np.nan)
        stack[:, self.place >= 0] = np.asarray(values).reshape(self.n_ages, -1)
        return stack


def nice_number(value: float) -> float:
    """Largest of 1, 1.25, 1.5, 2, 2.5, 3, 4, 5, 6, 8 times a power of ten that does not exceed value."""
    power = 10.0 ** np.floor(np.log10(value))
    steps = [step * power for step in _NICE_STEPS if step * power <= value * (1 + 1e-9)]
    return float(steps[-1])


def age_nodes(step: float, duration: float) -> np.ndarray:
    """Ages 0, step, 2 step, ... up to the first that reaches the duration (yr)."""
    n_steps = max(1, int(np.ceil(duration / step - 1e-9)))
    return step * np.arange(n_steps + 1)


def base_points(network: RiverNetwork) -> tuple[np.ndarray, np.ndarray]:
    """Map coordinates (m) of the base point at each outlet node; zero elsewhere, where they mean nothing."""
    base_x = np.zeros(network.n_nodes)
    base_y = np.zeros(network.n_nodes)
    base_x[network.outlet] = network.base_map_x
    base_y[network.outlet] = network.base_map_y
    return base_x, base_y


def make_grid(network: RiverNetwork, spacing: float, ages: np.ndarray) -> UpliftGrid:
    """Lay a map grid over a river network and number the places that its rivers touch.

    Parameters
    ----------
    network : RiverNetwork
    spacing : float, m
    ages : (n_ages,) float array, yr
        Ascending from 0, at least two.

    Returns
    -------
    UpliftGrid
    """
    all_x = np.concatenate([network.map_x, network.base_map_x])
    all_y = np.concatenate([network.map_y, network.base_map_y])
    west, north = np.floor(all_x.min() / spacing), np.ceil(all_y.max() / spacing)
    n_cols = max(2, int(np.ceil(all_x.max() / spacing) - west) + 1)
    n_rows = max(2, int(north - np.floor(all_y.min() / spacing)) + 1)
    bare = UpliftGrid(
        west * spacing,
        north * spacing,
        float(spacing),
        n_rows,
        n_cols,
        np.asarray(ages, float),
        np.zeros((0, 0)),
    )
    u, v = bare.in_grid_units(network.map_x, network.map_y)
    base_u, base_v = bare.in_grid_units(*base_points(network))
    touched = np.zeros((n_rows - 1, n_cols - 1), dtype=bool)
    _kernels.cross_cells(network.receiver, u, v, base_u, base_v, n_rows, n_cols, touched)
    corner = np.zeros((n_rows, n_cols), dtype=bool)
    for rows in (slice(0, -1), slice(1, None)):
        for cols in (slice(0, -1), slice(1, None)):
            corner[rows, cols] |= touched
    place = np.full((n_rows, n_cols), -1, dtype=np.int32)
    place[corner] = np.arange(corner.sum(), dtype=np.int32)
    return UpliftGrid(bare.west, bare.north, bare.spacing, n_rows, n_cols, bare.ages, place)


def suggest_spacing(area: float, n_places: int = 120) -> float:
    """Map spacing (m) that lays about `n_places` map nodes over an area (m2)."""
    return nice_number(np.sqrt(area / n_places))


def suggest_step(longest: float, n_steps: int = 9) -> float:
    """Age step (yr) that divides the longest travel time (yr) into about `n_steps`."""
    return nice_number(longest / n_steps)


def suggest_duration(tau: np.ndarray) -> float:
    """Duration (yr) that 99 % of the travel times stay below.

    The few nodes beyond it are mostly headwaters that lost area to a moving divide: their travel times are
    too long, and ages of their own would be made of nothing else.
    """
    return float(np.quantile(tau, 0.99))


def suggest_ranges(network: RiverNetwork, tau: np.ndarray) -> tuple[float, float]:
    """Ranges of the prior in space (m) and time (yr) where the user states none.

    0.7 times the width of the drained area (its square root) and 0.7 times the longest travel time: histories
    that are smooth over a good part of what the rivers can see. This is a choice, not a finding.
    """
    area = float(network.area[network.outlet].sum())
    return 0.7 * np.sqrt(area), 0.7 * float(tau.max())
