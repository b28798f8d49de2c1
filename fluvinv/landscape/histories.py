"""Known histories of rock uplift, as functions of place and age, and their samples on a grid."""

from collections.abc import Callable

import numpy as np

#: rate(x, y, age): eastings and northings (m, arrays of one shape) and an age (yr) to rates (m/yr, that shape)
Uplift = Callable[[np.ndarray, np.ndarray, float], np.ndarray]


def steady(rate: float = 1.5e-4) -> Uplift:
    """One rate everywhere and always.

    Parameters
    ----------
    rate : float, m/yr
        The rate.

    Returns
    -------
    Uplift
    """

    def uplift(x, y, _age):
        return np.full(np.broadcast(x, y).shape, rate)

    return uplift


def two_domes(
    fading_centre: tuple[float, float],
    growing_centre: tuple[float, float],
    *,
    radius_m: float,
    duration_yr: float,
    background: float = 1e-4,
    peak: float = 1.3e-4,
) -> Uplift:
    """Two broad Gaussian domes over a background: one dies away, the other comes up, each by half a cosine.

    Parameters
    ----------
    fading_centre, growing_centre : (float, float), m
        Eastings and northings of the domes' tops.
    radius_m : float, m
        Standard deviation of the domes in space.
    duration_yr : float, yr
        Age at which the first dome stands at its full rate and the second has not begun; older ages are
        like it. At present it is the other way round.
    background : float, m/yr
        Rate far from the domes.
    peak : float, m/yr
        Highest rate that a dome adds.

    Returns
    -------
    Uplift
    """

    def dome(x, y, centre):
        return np.exp(-((x - centre[0]) ** 2 + (y - centre[1]) ** 2) / (2.0 * radius_m**2))

    def uplift(x, y, age):
        faded = 0.5 + 0.5 * np.cos(np.pi * np.clip(age / duration_yr, 0.0, 1.0))
        domes = (1.0 - faded) * dome(x, y, fading_centre) + faded * dome(x, y, growing_centre)
        return background + peak * domes

    return uplift


def tilt_with_step(
    west_m: float,
    east_m: float,
    *,
    duration_yr: float,
    west_rate: float = 1e-4,
    east_rate: float = 3e-4,
    earlier_share: float = 0.5,
) -> Uplift:
    """A tilt from west to east that grows at once everywhere, 40 % of the duration ago.

    Parameters
    ----------
    west_m, east_m : float, m
        Eastings between which the rate changes linearly; it is constant beyond them.
    duration_yr : float, yr
        Length of the history.
    west_rate, east_rate : float, m/yr
        Rates since the step.
    earlier_share : float
        Rate before the step as a share of the rate since.

    Returns
    -------
    Uplift
    """

    def uplift(x, y, age):
        share = np.clip((x - west_m) / (east_m - west_m), 0.0, 1.0)
        rate = west_rate + (east_rate - west_rate) * share + np.zeros_like(y)
        return rate if age <= 0.4 * duration_yr else earlier_share * rate

    return uplift


def sample_history(uplift: Uplift, x_nodes: np.ndarray, y_nodes: np.ndarray, ages: np.ndarray) -> np.ndarray:
    """A history at the nodes of a map grid and a list of ages.

    Parameters
    ----------
    uplift : Uplift
        The history.
    x_nodes : (n_x,) float array, m
        Eastings of the map's columns.
    y_nodes : (n_y,) float array, m
        Northings of the map's rows, in the order wanted.
    ages : (n_ages,) float array, yr
        Ages before present.

    Returns
    -------
    (n_ages, n_y, n_x) float array, m/yr
    """
    x, y = np.meshgrid(np.asarray(x_nodes, dtype=float), np.asarray(y_nodes, dtype=float))
    return np.stack([uplift(x, y, age) for age in np.asarray(ages, dtype=float).tolist()])
