"""The demo's island. It is invented, and so is its name."""

from dataclasses import dataclass

import numpy as np

from fluvinv.landscape.grow import Landscape, grow_landscape
from fluvinv.landscape.histories import Uplift, sample_history, two_domes
from fluvinv.landscape.outline import island_mask
from fluvinv.units import km_to_m, myr_to_yr

DEMO_NAME = "Isle of Ondrimar"
ERODIBILITY = 1.8e-6
AREA_EXPONENT = 0.45
DURATION_YR = myr_to_yr(16.0)


@dataclass(frozen=True, slots=True)
class Demo:
    """The demo's island with everything that was put into it.

    Attributes
    ----------
    landscape : Landscape
        Heights and drainage.
    uplift : Uplift
        The true history.
    x_nodes : (n_x,) float array, m
        Eastings of the map nodes at which the history is sampled.
    y_nodes : (n_y,) float array, m
        Northings of the map nodes, from north to south.
    ages_yr : (n_ages,) float array, yr
        Ages of the samples, from the present back.
    rate : (n_ages, n_y, n_x) float array, m/yr
        The samples.
    erodibility : float, m^(1-2m)/yr
        K.
    area_exponent : float
        m.
    """

    landscape: Landscape
    uplift: Uplift
    x_nodes: np.ndarray
    y_nodes: np.ndarray
    ages_yr: np.ndarray
    rate: np.ndarray
    erodibility: float
    area_exponent: float


def demo_island(seed: int = 1) -> Demo:
    """Grow the demo's island: about 200 x 150 km at 1 km, two gentle domes of uplift, drainage free to move.

    Parameters
    ----------
    seed : int
        Seed of the outline, the first roughness and the DEM noise.

    Returns
    -------
    Demo
    """
    n_rows, n_cols, cell_m = 175, 230, km_to_m(1.0)
    left, bottom = km_to_m(400.0), km_to_m(5200.0)
    uplift = two_domes(
        (left + km_to_m(70.0), bottom + km_to_m(100.0)),
        (left + km_to_m(160.0), bottom + km_to_m(70.0)),
        radius_m=km_to_m(45.0),
        duration_yr=DURATION_YR,
    )
    landscape = grow_landscape(
        island_mask(n_rows, n_cols, seed),
        cell_m,
        uplift,
        erodibility=ERODIBILITY,
        area_exponent=AREA_EXPONENT,
        duration_yr=DURATION_YR,
        step_yr=myr_to_yr(0.1),
        n_substeps=2,
        seed=seed,
        spin_up_yr=myr_to_yr(50.0),
        noise_m=5.0,
        origin_m=(left, bottom),
    )
    x_nodes = left + km_to_m(np.arange(0.0, 231.0, 10.0))
    y_nodes = bottom + km_to_m(np.arange(180.0, -1.0, -10.0))
    ages = myr_to_yr(np.arange(0.0, 16.5, 1.0))
    return Demo(
        landscape=landscape,
        uplift=uplift,
        x_nodes=x_nodes,
        y_nodes=y_nodes,
        ages_yr=ages,
        rate=sample_history(uplift, x_nodes, y_nodes, ages),
        erodibility=ERODIBILITY,
        area_exponent=AREA_EXPONENT,
    )
