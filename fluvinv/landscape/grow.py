"""The landscape maker: an invented island rises, rivers cut it, divides move.

The model is dz/dt = U(x, y, age) - K A^m S, stream-power incision with slope exponent n = 1 (Howard & Kerby
1983), solved implicitly in time from the sea upward on the tree of steepest descent (Braun & Willett 2013,
Geomorphology 180-181, 170-179, both from memory). It shares no code with the drainage, the travel times or
the inversion that are tested against it.

Limits: one rock-uplift rate per cell, no sideways motion, no deposition (lakes are drained over their spill,
not filled with sediment), rain alike everywhere, the sea held at 0 m. The implicit upwind scheme spreads a
change of rate: what a cell tells is the history smoothed over a time whose variance is the sum over the river
below of crossing_time^2 + step * crossing_time, where crossing_time = L / (K A^m) of one edge. Its mean is
the travel time, exactly, so that a rate that is constant or changes linearly in time suffers nothing.
"""

from dataclasses import dataclass

import numpy as np
from scipy import ndimage

from fluvinv.errors import InputError, NumericalError, SettingsError
from fluvinv.landscape import _kernels as kernels
from fluvinv.landscape.histories import Uplift

#: Land lower than this after DEM noise is set to it, so that noise never makes sea of land (m).
LOWEST_LAND_M = 0.5
SEA_DEPTH_AT_COAST_M = 1.0
SEA_DEPTH_PER_CELL_M = 0.5


@dataclass(frozen=True, slots=True)
class Landscape:
    """A grown island: its heights and the drainage that made them. Rows run from north to south.

    Attributes
    ----------
    height : (n_rows, n_cols) float array, m
        Land above 0, DEM noise included; the sea below 0, deeper away from the coast.
    island : (n_rows, n_cols) bool array
        True on land.
    area_m2 : (n_rows, n_cols) float array, m2
        Upstream area of a land cell, itself included; on sea cells the land area that drains into them.
    receiver : (n_rows, n_cols) int array
        Flat index of the cell that a land cell drains to, land or sea; -1 on sea cells.
    edge_m : (n_rows, n_cols) float array, m
        Distance to the receiver; 0 on sea cells.
    travel_time_yr : (n_rows, n_cols) float array, yr
        Sum of edge_m / (K A^m) from the sea; 0 on sea cells. Drainage as in `receiver`.
    spread_yr : (n_rows, n_cols) float array, yr
        Standard deviation of the time over which the scheme smooths the history of a cell.
    cell_m : float, m
        Width of a cell.
    origin_m : (float, float), m
        Easting and northing of the lower left corner of the grid.
    """

    height: np.ndarray
    island: np.ndarray
    area_m2: np.ndarray
    receiver: np.ndarray
    edge_m: np.ndarray
    travel_time_yr: np.ndarray
    spread_yr: np.ndarray
    cell_m: float
    origin_m: tuple[float, float]

    @property
    def x(self) -> np.ndarray:
        """(n_cols,) float array, m: eastings of the cell centres."""
        return _centres(self.height.shape, self.cell_m, self.origin_m)[0]

    @property
    def y(self) -> np.ndarray:
        """(n_rows,) float array, m: northings of the cell centres, from north to south."""
        return _centres(self.height.shape, self.cell_m, self.origin_m)[1]


def grow_landscape(
    island: np.ndarray,
    cell_m: float,
    uplift: Uplift,
    *,
    erodibility: float,
    area_exponent: float,
    duration_yr: float,
    step_yr: float = 5e4,
    seed: int = 0,
    free_drainage: bool = True,
    spin_up_yr: float = 2e7,
    n_substeps: int = 1,
    erodibility_factor: np.ndarray | None = None,
    roughness_m: float = 20.0,
    diffusivity_m2_per_yr: float = 0.0,
    noise_m: float = 0.0,
    origin_m: tuple[float, float] = (0.0, 0.0),
) -> Landscape:
    """Grow an island under a known history of uplift.

    A rough plain at the sea's level first rises for `spin_up_yr`. With free drainage it does so under the
    rate of the oldest age, uplift(x, y, duration_yr). Otherwise the spatial mean of that rate lays out the
    drainage, which is then frozen, and the land starts in equilibrium with the rate of the oldest age. Either
    way ages beyond `duration_yr` count with the oldest rate. The known history follows.

    Parameters
    ----------
    island : (n_rows, n_cols) bool array
        True on land; the outermost cells must be sea.
    cell_m : float, m
        Width of a cell.
    uplift : callable
        Rate in m/yr, not negative, for eastings and northings of the cells (m, 2-D) and an age (yr).
    erodibility : float, m^(1-2m)/yr
        K.
    area_exponent : float
        m.
    duration_yr : float, yr
        Length of the known history. It should exceed the longest travel time.
    step_yr : float, yr
        Time between two drawings of the drainage; the history is cut into the nearest whole number of them.
    seed : int
        Seed of the initial roughness and of the DEM noise.
    free_drainage : bool
        Draw directions and areas anew at every step; otherwise only while the land spins up.
    spin_up_yr : float, yr
        Length of the time before the known history; five longest travel times let the divides come to rest.
    n_substeps : int
        Solver steps for each drawing of the drainage.
    erodibility_factor : (n_rows, n_cols) float array, optional
        Factor on K, cell by cell.
    roughness_m : float, m
        Heights of the first plain are uniform random between 0 and this.
    diffusivity_m2_per_yr : float, m2/yr
        Linear hillslope diffusion, explicit, in as many parts of a step as stability asks for.
    noise_m : float, m
        Standard deviation of white noise added to the finished heights; land stays above 0.
    origin_m : (float, float), m
        Easting and northing of the lower left corner of the grid.

    Returns
    -------
    Landscape
        Its drainage is that of the last surface before noise, or the frozen one.

    Raises
    ------
    InputError
        The island touches the grid's edge or is empty, or the factors do not fit it.
    SettingsError
        A number outside its range.
    NumericalError
        The uplift function gives negative or non-finite rates, or rates of another shape.
    """
    island = _checked_island(island)
    positive = {"cell_m": cell_m, "erodibility": erodibility, "duration_yr": duration_yr, "step_yr": step_yr}
    _check_numbers(positive | {"n_substeps": n_substeps, "roughness_m": roughness_m}, above_zero=True)
    _check_numbers({"spin_up_yr": spin_up_yr, "noise_m": noise_m, "diffusivity_m2_per_yr": diffusivity_m2_per_yr})
    rng = np.random.default_rng(seed)
    ground = _Ground(island, cell_m, _checked_factor(erodibility_factor, island) * erodibility, area_exponent)
    ground.height[ground.is_land] = roughness_m * rng.uniform(size=np.count_nonzero(island))
    pace = _Pace(step_yr, n_substeps, diffusivity_m2_per_yr)
    rate = _rate_on_cells(uplift, island, cell_m, origin_m)
    oldest = rate(duration_yr)
    if free_drainage:
        _evolve(ground, lambda _age: oldest, spin_up_yr, pace, redraw=True)
    else:
        mean = np.full_like(oldest, oldest[ground.is_land].mean())
        _evolve(ground, lambda _age: mean, spin_up_yr, pace, redraw=True)
        ground.draw_drainage()
        ground.height[:] = ground.summed_upward(oldest * ground.crossing_time)
    _evolve(ground, rate, duration_yr, pace, redraw=free_drainage)
    if free_drainage:
        ground.draw_drainage()
    return _finished(ground, pace, noise_m, rng, origin_m)


class _Ground:
    """The surface while it grows, and its drainage; flat arrays in the order of the grid's rows."""

    def __init__(self, island, cell_m, erodibility, area_exponent):
        n_cols = island.shape[1]
        self.shape = island.shape
        self.cell_m = cell_m
        self.is_land = island.ravel()
        self.n_land = np.count_nonzero(island)
        self.height = np.zeros(island.size)
        self._erodibility = erodibility.ravel()
        self._area_exponent = area_exponent
        self._offset = np.array([1, -1, n_cols, -n_cols, n_cols + 1, n_cols - 1, -n_cols + 1, -n_cols - 1])
        self._reach = cell_m * np.array([1.0] * 4 + [np.sqrt(2.0)] * 4)

    def draw_drainage(self):
        """Directions of steepest descent over the filled surface, areas, and times to cross one edge."""
        n_cells = self.height.size
        self.order = np.empty(self.n_land, dtype=np.int64)
        level = np.zeros(n_cells)
        entry = np.full(n_cells, -1, dtype=np.int64)
        ticket = np.full(n_cells, -1, dtype=np.int64)
        heap = np.empty(n_cells, dtype=np.int64)
        kernels.flood(self.height, self.is_land, self._offset, heap, ticket, level, entry, self.order)
        self.receiver = np.full(n_cells, -1, dtype=np.int64)
        self.edge = np.zeros(n_cells)
        kernels.descend(level, entry, self.order, self._offset, self._reach, self.receiver, self.edge)
        self.area = np.where(self.is_land, self.cell_m**2, 0.0)
        kernels.gather(self.order, self.receiver, self.area)
        self.crossing_time = np.zeros(n_cells)
        land = self.is_land
        celerity = self._erodibility[land] * self.area[land] ** self._area_exponent
        self.crossing_time[land] = self.edge[land] / celerity

    def summed_upward(self, rise):
        """Sum of an amount per edge from the sea up to every land cell."""
        total = np.zeros(self.height.size)
        kernels.climb(self.order, self.receiver, rise, total)
        return total

    def advance(self, rate, step):
        """One solver step: uplift and incision together."""
        kernels.incise(self.order, self.receiver, self.crossing_time, rate * step, step, self.height)

    def diffuse(self, diffusivity, step):
        """Hillslope diffusion over one step, in parts that keep the explicit scheme monotone."""
        ratio = diffusivity * step / self.cell_m**2
        n_parts = int(np.ceil(4.0 * ratio))
        before = np.empty_like(self.height)
        for _ in range(n_parts):
            kernels.creep(self.order, self.shape[1], ratio / n_parts, self.height, before)


@dataclass(frozen=True, slots=True)
class _Pace:
    """How time is cut up, and what happens between two drawings of the drainage."""

    step: float
    n_substeps: int
    diffusivity: float


def _evolve(ground, rate, duration, pace, *, redraw):
    """Let the rate act from the age `duration` to the present. Rates are those at each solver step's end.

    A backward Euler step smooths with a kernel that starts at the end of the step; the rate there makes the
    mean delay of the scheme equal to the travel time, the rate at the middle would add half a step.
    """
    n_steps = max(1, round(duration / pace.step)) if duration > 0 else 0
    n_solver_steps = n_steps * pace.n_substeps
    for i in range(n_solver_steps):
        if redraw and i % pace.n_substeps == 0:
            ground.draw_drainage()
        substep = duration / n_solver_steps
        ground.advance(rate(duration * (1.0 - (i + 1) / n_solver_steps)), substep)
        if pace.diffusivity > 0:
            ground.diffuse(pace.diffusivity, substep)


def _finished(ground, pace, noise_m, rng, origin_m):
    """The grown surface as a Landscape, with its sea and its DEM noise."""
    land = ground.is_land
    height = ground.height.copy()
    if noise_m > 0:
        height[land] += noise_m * rng.standard_normal(ground.n_land)
        height[land] = np.maximum(height[land], LOWEST_LAND_M)
    if not np.isfinite(height).all():
        raise NumericalError("grow_landscape made heights that are not finite; check the uplift rates and K")
    offshore = ndimage.distance_transform_edt(~land.reshape(ground.shape)).ravel()
    sea = SEA_DEPTH_AT_COAST_M + SEA_DEPTH_PER_CELL_M * (offshore - 1.0)
    height[~land] = -sea[~land]
    crossing = ground.crossing_time
    variance = crossing**2 + crossing * pace.step / pace.n_substeps
    grids = {
        "height": height,
        "island": land,
        "area_m2": ground.area,
        "receiver": ground.receiver,
        "edge_m": ground.edge,
        "travel_time_yr": ground.summed_upward(crossing),
        "spread_yr": np.sqrt(ground.summed_upward(variance)),
    }
    grids = {name: values.reshape(ground.shape) for name, values in grids.items()}
    return Landscape(**grids, cell_m=ground.cell_m, origin_m=origin_m)


def _centres(shape, cell_m, origin_m):
    """Eastings and northings of the cell centres; northings fall with the row."""
    n_rows, n_cols = shape
    x = origin_m[0] + cell_m * (np.arange(n_cols) + 0.5)
    y = origin_m[1] + cell_m * (n_rows - np.arange(n_rows) - 0.5)
    return x, y


def _rate_on_cells(uplift, island, cell_m, origin_m):
    """The history as a function of age alone that gives flat, checked rates."""
    x, y = np.meshgrid(*_centres(island.shape, cell_m, origin_m))

    def rate(age):
        values = np.asarray(uplift(x, y, age), dtype=float)
        if values.shape != x.shape or not (np.isfinite(values).all() and values.min() >= 0):
            raise NumericalError(
                f"the uplift function must give finite rates >= 0 of shape {x.shape}; "
                f"at age {age:g} yr it gave shape {values.shape}, lowest value {values.min():g}"
            )
        return values.ravel()

    return rate


def _checked_island(island):
    island = np.asarray(island)
    if island.ndim != 2 or island.dtype != bool:
        raise InputError(f"island must be a 2-D bool array, got {island.ndim}-D {island.dtype}")
    if not island.any():
        raise InputError("island holds no land; at least one cell must be True")
    border = np.concatenate([island[0], island[-1], island[:, 0], island[:, -1]])
    if border.any():
        raise InputError(f"island has {border.sum()} land cells on the grid's edge; leave a rim of sea around it")
    return np.ascontiguousarray(island)


def _checked_factor(factor, island):
    if factor is None:
        return np.ones(island.shape)
    factor = np.asarray(factor, dtype=float)
    if factor.shape != island.shape or not (factor[island] > 0).all():
        raise InputError(f"erodibility_factor must be positive on land and of shape {island.shape}")
    return factor


def _check_numbers(values, *, above_zero=False):
    for name, value in values.items():
        if not np.isfinite(value) or value < 0 or (above_zero and value == 0):
            raise SettingsError(f"{name} is {value}; expected a number {'>' if above_zero else '>='} 0")
