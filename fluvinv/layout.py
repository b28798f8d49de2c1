"""From settings and a network to the grid of unknowns and the numbers of the inversion."""

from dataclasses import dataclass

import numpy as np

from fluvinv.errors import SettingsError
from fluvinv.files.settings import Settings
from fluvinv.inversion import (
    InversionOptions,
    UpliftGrid,
    age_nodes,
    make_grid,
    nice_number,
    suggest_duration,
    suggest_ranges,
    suggest_spacing,
    suggest_step,
)  # fmt: skip
from fluvinv.network import RiverNetwork
from fluvinv.terrain import Grid
from fluvinv.units import km_to_m, m_to_km, mm_per_yr_to_m_per_yr, myr_to_yr, yr_to_myr

#: Travel times (yr) between which erodibility and area exponent make sense: a century, and the age of the Earth.
SHORTEST, LONGEST = 100.0, 4.5e9
#: More map nodes or ages than this and the prior's dense factors no longer fit.
MOST_PLACES, MOST_AGES = 8000, 2000
#: With fewer nodes to a range, halving spacing and step moves rates by more than half a standard deviation.
NODES_PER_RANGE = 6


@dataclass(frozen=True)
class Layout:
    """The unknowns and the numbers with which they are sought."""

    grid: UpliftGrid
    options: InversionOptions
    warnings: list[str]


def lay_out(settings: Settings, network: RiverNetwork, tau: np.ndarray, dem: Grid) -> Layout:
    """Choose what the settings leave to the program, and refuse what cannot work.

    Raises
    ------
    SettingsError
        If a spacing, step or duration does not go with the DEM or the rivers.
    """
    _check_clock(settings, float(tau.max()))
    inversion = settings.inversion
    damping = inversion.damping
    auto_space, auto_time = suggest_ranges(network, tau)
    range_space = auto_space if damping.range_km == "auto" else km_to_m(damping.range_km)
    range_time = auto_time if damping.range_myr == "auto" else myr_to_yr(damping.range_myr)
    spacing = _spacing(settings, network, dem, range_space)
    ages, warnings = _ages(settings, tau)
    grid = make_grid(network, spacing, ages)
    if grid.n_places > MOST_PLACES:
        raise SettingsError(
            f"uplift_grid.spacing_km: {m_to_km(spacing):g} km lays {grid.n_places:,} map nodes over the rivers, and at"
            f" most {MOST_PLACES:,} are solved for. Choose a wider spacing."
        )
    options = InversionOptions(
        range_space=range_space,
        range_time=range_time,
        choose=damping.choose,
        spread=None if damping.spread_mm_per_yr == "auto" else mm_per_yr_to_m_per_yr(damping.spread_mm_per_yr),
        height_sd=inversion.noise.height_m,
        allow_subsidence=inversion.allow_subsidence,
        seed=inversion.seed,
    )
    return Layout(grid, options, warnings + _coarse_warnings(grid, options) + _literature_warnings(settings))


def _check_clock(settings: Settings, longest: float) -> None:
    """Refuse an erodibility that goes with no rivers on Earth."""
    if SHORTEST <= longest <= LONGEST:
        return
    power = settings.stream_power
    key = "erodibility" if power.erodibility is not None else "reference_celerity_m_per_yr"
    raise SettingsError(
        f"stream_power.{key}: with area exponent {power.area_exponent:g} it gives the longest river a travel time of"
        f" {yr_to_myr(longest):.3g} Myr; expected {yr_to_myr(SHORTEST):g} to {yr_to_myr(LONGEST):g}. Choose a"
        f" {'larger' if longest > LONGEST else 'smaller'} {key} or another area exponent (K's unit depends on it)."
    )


def _spacing(settings: Settings, network: RiverNetwork, dem: Grid, range_space: float) -> float:
    """Map spacing (m), checked against the cell size and the extent."""
    wanted = settings.uplift_grid.spacing_km
    cell = float(np.median(dem.step_lengths().south))
    extent = max(np.ptp(network.map_x), np.ptp(network.map_y), cell)
    if wanted == "auto":
        fine_enough = nice_number(range_space / NODES_PER_RANGE)
        return min(max(min(suggest_spacing(float(network.area[network.outlet].sum())), fine_enough), cell), extent)
    spacing = km_to_m(wanted)
    if spacing < cell:
        raise SettingsError(
            f"uplift_grid.spacing_km: found {wanted:g} km, which is below the DEM's cell size of {m_to_km(cell):.3g}"
            " km. Choose a spacing of several cells at least, or auto."
        )
    if spacing > extent:
        raise SettingsError(
            f"uplift_grid.spacing_km: found {wanted:g} km, which is more than the extent of the rivers,"
            f" {m_to_km(extent):.3g} km. Choose a smaller spacing, or auto."
        )
    return spacing


def _ages(settings: Settings, tau: np.ndarray) -> tuple[np.ndarray, list[str]]:
    """Age nodes (yr) and what the user must know about them."""
    longest = float(tau.max())
    wanted = settings.uplift_grid
    duration = suggest_duration(tau) if wanted.duration_myr == "auto" else myr_to_yr(wanted.duration_myr)
    step = suggest_step(min(longest, duration)) if wanted.step_myr == "auto" else myr_to_yr(wanted.step_myr)
    if wanted.duration_myr != "auto" and step > duration * (1 + 1e-9):
        raise SettingsError(
            f"uplift_grid.step_myr: the age step of {yr_to_myr(step):g} Myr is longer than the duration of"
            f" {yr_to_myr(duration):g} Myr. Choose a shorter step, or auto."
        )
    if duration / step > MOST_AGES:
        raise SettingsError(
            f"uplift_grid.step_myr: {yr_to_myr(step):g} Myr makes {duration / step:,.0f} steps of a duration of"
            f" {yr_to_myr(duration):.3g} Myr, and at most {MOST_AGES:,} are solved for. Choose a longer step, or auto."
        )
    ages = age_nodes(step, duration)
    beyond = float(np.mean(tau > ages[-1] * (1 + 1e-9)))
    if wanted.duration_myr == "auto" or not beyond:
        return ages, []
    return ages, [
        f"uplift_grid.duration_myr: {yr_to_myr(ages[-1]):.3g} Myr is shorter than the longest travel time of"
        f" {yr_to_myr(longest):.3g} Myr; {beyond:.0%} of the river nodes reach back further, and what they tell of"
        " older times counts with the oldest age."
    ]


def _coarse_warnings(grid: UpliftGrid, options: InversionOptions) -> list[str]:
    """Grids on which the answer still depends on the grid."""
    nodes = options.range_space / grid.spacing, options.range_time / grid.ages[1]
    found = []
    if nodes[0] < NODES_PER_RANGE * (1 - 1e-9):
        found.append(
            f"the map spacing of {m_to_km(grid.spacing):g} km to the range of {m_to_km(options.range_space):.3g} km"
        )
    if nodes[1] < NODES_PER_RANGE * (1 - 1e-9):
        found.append(
            f"the age step of {yr_to_myr(grid.ages[1]):g} Myr to the range of {yr_to_myr(options.range_time):.3g} Myr"
        )
    return [
        f"{what} is wide: below {NODES_PER_RANGE} nodes to a range the answer depends on the grid." for what in found
    ]


def _literature_warnings(settings: Settings) -> list[str]:
    """Erodibilities outside the published range for the area exponent they were measured with."""
    power = settings.stream_power
    if abs(power.area_exponent - 0.4) < 1e-9 and not 1e-7 <= power.erodibility_si <= 1e-2:
        return [
            f"stream_power.erodibility: {power.erodibility_si:.3g} m^0.2/yr lies outside the 1e-7 to 1e-2 that Stock &"
            " Montgomery (1999) found from granite to mudstone at area exponent 0.4."
        ]
    return []
