"""First guesses for a settings file from a look at the DEM alone, each with its reason."""

import numpy as np

from fluvinv.inversion import suggest_spacing, suggest_step
from fluvinv.streampower.analytic import HackRiver
from fluvinv.terrain import Grid, find_sea
from fluvinv.units import m2_to_km2, m_per_yr_to_mm_per_yr, m_to_km, yr_to_myr

#: Typical rate for the first guess of erodibility: the mean of 218 m/Myr that Portenga & Bierman (2011) report
#: for the denudation of river basins.
TYPICAL_RATE = 2.18e-4
#: Hack's law, A = ka x^h, with the constants of Hack (1957) as Whipple & Tucker (1999) give them.
HACK_FACTOR, HACK_POWER = 6.69, 1.67
AREA_EXPONENT = 0.5


def first_guesses(grid: Grid, base_level: float = 0.0) -> dict[str, tuple[object, str]]:
    """Guess settings from a DEM's extent, cells, relief and sea.

    Parameters
    ----------
    grid : Grid
    base_level : float, m

    Returns
    -------
    dict
        Dotted key to value and reason.

    Raises
    ------
    InputError
        If the DEM holds no height or none above base level, see `find_sea`.
    """
    sea = find_sea(grid, base_level, "auto")
    land = ~grid.void & ~sea.sea & (grid.height > base_level)
    area_by_row = grid.cell_area_by_row()
    area = float((land.sum(axis=1) * area_by_row).sum())
    heights = grid.height[land]
    relief = float(np.quantile(heights, 0.99)) - (base_level if sea.sea.any() else float(heights.min()))
    relief = max(relief, 1.0)
    reach = 0.5 * np.sqrt(area)
    cell = np.sqrt(float(np.median(area_by_row)))
    head = max(0.02 * reach, cell)
    longest = relief / TYPICAL_RATE
    unit_river = HackRiver(reach, HACK_FACTOR, HACK_POWER, 1.0, AREA_EXPONENT)
    erodibility = float(f"{float(unit_river.travel_time(min(head, 0.5 * reach))) / longest:.2g}")
    spacing = suggest_spacing(area)
    if spacing < 1.5 * cell:
        spacing = float(f"{1.5 * cell:.2g}")
    guesses = {
        "stream_power.erodibility": (
            erodibility,
            f"a river {m_to_km(reach):.3g} km long under Hack's law, in balance with"
            f" {m_per_yr_to_mm_per_yr(TYPICAL_RATE):.3g} mm/yr (the mean of basins, Portenga & Bierman"
            f" 2011), would stand at the DEM's relief of {relief:,.0f} m;"
            " sets the clock, so calibrate it",
        ),
        "stream_power.area_exponent": (AREA_EXPONENT, "the middle of the usual 0.4 to 0.6"),
        "uplift_grid.spacing_km": (m_to_km(spacing), f"about 120 map nodes on {m2_to_km2(area):,.0f} km2 of land"),
        "uplift_grid.step_myr": (
            yr_to_myr(suggest_step(longest, 12)),
            f"a twelfth of the {yr_to_myr(longest):.3g} Myr that this erodibility gives the longest river",
        ),
    }
    if not sea.sea.any():
        guesses["terrain.incomplete"] = (
            "keep",
            "no sea was found, so every river is cut by the sheet's edge; complete if the DEM was cut along the divide",
        )
    return guesses
