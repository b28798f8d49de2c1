"""How a recovered history compares with a known one."""

from dataclasses import dataclass

import numpy as np
from scipy.interpolate import RegularGridInterpolator

from fluvinv.inversion.invert import Inversion


@dataclass(frozen=True, slots=True)
class Comparison:
    """Recovered against known rates at the well-sampled nodes (those that hold 90 % of all path time).

    Attributes
    ----------
    known : (n_ages, n_places) float array, m/yr
        The known history at the inversion's nodes, NaN outside its map.
    correlation : float or None
        None where either history does not vary.
    rmse : float, m/yr
    skill : float or None
        1 - mean squared error / variance of the known history.
    cover : float
        Share of nodes whose 95 % interval holds the known rate.
    n_nodes : int
    """

    known: np.ndarray
    correlation: float | None
    rmse: float
    skill: float | None
    cover: float
    n_nodes: int


def history_at_nodes(x, y, ages, rate, place_xy: np.ndarray, node_ages: np.ndarray) -> np.ndarray:
    """Interpolate a history (linear in space and age, constant beyond its oldest age) to nodes.

    Parameters
    ----------
    x : (n_cols,), y : (n_rows,) float arrays, m
        Map nodes; y from north to south.
    ages : (n,) float array, yr
    rate : (n, n_rows, n_cols) float array, m/yr
    place_xy : (n_places, 2) float array, m
        In the same CRS.
    node_ages : (n_ages,) float array, yr

    Returns
    -------
    (n_ages, n_places) float array, m/yr, NaN outside the map
    """
    if ages.size == 1:
        ages, rate = np.append(ages, ages[0] + 1.0), np.repeat(rate, 2, axis=0)
    look_up = RegularGridInterpolator((ages, y[::-1], x), rate[:, ::-1], bounds_error=False, fill_value=np.nan)
    clipped = np.clip(node_ages, ages[0], ages[-1])
    shape = (node_ages.size, place_xy.shape[0])
    points = np.empty((*shape, 3))
    points[..., 0] = clipped[:, None]
    points[..., 1] = place_xy[None, :, 1]
    points[..., 2] = place_xy[None, :, 0]
    return look_up(points.reshape(-1, 3)).reshape(shape)


def compare(result: Inversion, known: np.ndarray) -> Comparison | None:
    """Compare an inversion with a known history at its nodes; None where the two do not overlap."""
    judged = result.well_sampled & np.isfinite(known)
    if not judged.any():
        return None
    truth, rate = known[judged], result.rate[judged]
    error = rate - truth
    varies = np.ptp(truth) > 1e-9 * np.abs(truth).max() and np.ptp(rate) > 0
    return Comparison(
        known=known,
        correlation=float(np.corrcoef(truth, rate)[0, 1]) if varies else None,
        rmse=float(np.sqrt(np.mean(error**2))),
        skill=float(1 - np.mean(error**2) / np.var(truth)) if varies else None,
        cover=float(np.mean((result.low[judged] <= truth) & (truth <= result.high[judged]))),
        n_nodes=int(judged.sum()),
    )
