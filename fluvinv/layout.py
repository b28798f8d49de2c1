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
    suggest_ranges,
    suggest_spacing,
    suggest_step,
)  # fmt: skip
from fluvinv.network import RiverNetwork
from fluvinv.terrain import Grid
from fluvinv.units import km_to_m, m_to_km, mm_per_yr_to_m_per_yr, myr_to_yr, yr_to_myr

#: More map nodes or ages than this and the prior's dense factors no longer fit.
MOST_PLACES, MOST_AGES = 8000, 2000


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
    spacing = _spacing(settings, network, dem)
    ages, warnings = _ages(settings, tau)
    grid = make_grid(network, spacing, ages)
    if grid.n_places > MOST_PLACES:
        raise SettingsError(
            f"uplift_grid.spacing_km: {m_to_km(spacing):g} km lays {grid.n_places:,} map nodes over the rivers, and at most"
            f" {MOST_PLACES:,} are solved for. Choose a wider spacing."
        )
    inversion = settings.inversion
    auto_space, auto_time = suggest_ranges(network, tau)
    damping = inversion.damping
    options = InversionOptions(
        range_space=auto_space if damping.range_km == "auto" else km_to_m(damping.range_km),
        range_time=auto_time if damping.range_myr == "auto" else myr_to_yr(damping.range_myr),
        choose=damping.choose,
        spread=None if damping.spread_mm_per_yr == "auto" else mm_per_yr_to_m_per_yr(damping.spread_mm_per_yr),
        height_sd=inversion.noise.height_m,
        allow_subsidence=inversion.allow_subsidence,
        seed=inversion.seed,
    )
    return Layout(grid, options, warnings + _literature_warnings(settings))


def _spacing(settings: Settings, network: RiverNetwork, dem: Grid) -> float:
    """Map spacing (m), checked against the cell size and the extent."""
    wanted = settings.uplift_grid.spacing_km
    cell = float(np.median(dem.step_lengths().south))
    extent = max(np.ptp(network.map_x), np.ptp(network.map_y), cell)
    if wanted == "auto":
        return min(max(suggest_spacing(float(network.area[network.outlet].sum())), cell), extent)
    spacing = km_to_m(wanted)
    if spacing < cell:
        raise SettingsError(
            f"uplift_grid.spacing_km: found {wanted:g} km, which is below the DEM's cell size of {m_to_km(cell):.3g} km."
            " Choose a spacing of several cells at least, or auto."
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
    duration = longest if wanted.duration_myr == "auto" else myr_to_yr(wanted.duration_myr)
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
    if not beyond:
        return ages, []
    return ages, [
        f"uplift_grid.duration_myr: {yr_to_myr(ages[-1]):.3g} Myr is shorter than the longest travel time of"
        f" {yr_to_myr(longest):.3g} Myr; {beyond:.0%} of the river nodes reach back further, and what they tell of"
        " older times counts with the oldest age."
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
