"""Tables: CSV files with units in the columns' names."""

from pathlib import Path

import numpy as np
import pandas as pd

from fluvinv.network import RiverNetwork

SPECTRA_COLUMNS = ("series", "wavelength_km", "power", "low", "high", "expected")


def profiles_table(
    network: RiverNetwork, chi: np.ndarray, tau: np.ndarray, fitted: np.ndarray | None = None
) -> pd.DataFrame:
    """One row per river node, downstream first.

    Parameters
    ----------
    network : RiverNetwork
    chi : (n_nodes,) float array, m
    tau : (n_nodes,) float array, yr
    fitted : (n_nodes,) float array, m, optional
        Fitted height, base level included.

    Returns
    -------
    pandas.DataFrame
        Columns that are not computed are empty.
    """
    empty = np.full(network.n_nodes, np.nan)
    return pd.DataFrame(
        {
            "node_id": np.arange(network.n_nodes),
            "receiver_id": network.receiver,
            "basin_id": network.basin_id,
            "river_id": network.river_id,
            "x": network.x,
            "y": network.y,
            "distance_m": network.distance,
            "elevation_m": network.height,
            "corrected_m": network.corrected_height,
            "area_m2": network.area,
            "chi_m": chi,
            "travel_time_yr": tau,
            "fitted_m": empty if fitted is None else fitted,
            "residual_m": empty if fitted is None else network.height - fitted,
            "held_out_residual_m": empty,
        }
    )


def write_profiles(path: Path, table: pd.DataFrame) -> None:
    """Write the table of river nodes."""
    table.to_csv(path, index=False, float_format="%.12g", lineterminator="\n")


def write_spectra(path: Path) -> None:
    """Write the table of spectra; it has no rows until spectra are computed."""
    pd.DataFrame(columns=SPECTRA_COLUMNS).to_csv(path, index=False, lineterminator="\n")
