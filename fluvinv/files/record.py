"""The record of a run, `run.json`: what went in, what was chosen, what came out."""

import json
from importlib import resources
from pathlib import Path

import numpy as np
import pyproj

from fluvinv import __version__
from fluvinv.files.cautions import CAUTIONS
from fluvinv.inversion import Comparison, Inversion
from fluvinv.network import RiverNetwork
from fluvinv.terrain import TerrainReport
from fluvinv.units import m2_to_km2, m_per_yr_to_mm_per_yr, m_to_km, yr_to_myr


def schema() -> dict:
    """JSON schema of `run.json`."""
    return json.loads(resources.files("fluvinv.files").joinpath("run.schema.json").read_text(encoding="utf-8"))


def new_record(stage: str, fingerprint: str, settings: dict, inputs: list[dict]) -> dict:
    """A record in which everything that is not known yet is null."""
    return {
        "program": "fluvinv",
        "version": __version__,
        "stage": stage,
        "fingerprint": fingerprint,
        "settings": settings,
        "inputs": inputs,
        "network": None,
        "uplift_grid": None,
        "fit": None,
        "noise": None,
        "rivals": None,
        "damping": None,
        "spectra": None,
        "comparison": None,
        "verdict": [],
        "warnings": [],
        "cautions": list(CAUTIONS),
        "timings_s": {},
    }


def network_part(network: RiverNetwork, terrain: TerrainReport, map_crs: pyproj.CRS, tau: np.ndarray) -> dict:
    """What the terrain stage found."""
    return {
        "n_nodes": network.n_nodes,
        "n_rivers": network.n_rivers,
        "n_basins": network.n_basins,
        "dropped": dict(terrain.dropped),
        "channel_area_km2": m2_to_km2(terrain.channel_area),
        "land_km2": m2_to_km2(terrain.land_area),
        "network_km2": m2_to_km2(float(network.area[network.outlet].sum())),
        "longest_river_km": m_to_km(float(network.distance.max())),
        "longest_travel_time_myr": yr_to_myr(float(tau.max())),
        "map_crs": map_crs.to_string() if map_crs.to_authority() else map_crs.to_wkt(),
    }


def inversion_parts(result: Inversion, residual: np.ndarray, choose: str, ranges: tuple[float, float]) -> dict:
    """Parts of the record that the inversion fills.

    Parameters
    ----------
    result : Inversion
    residual : (n_nodes,) float array, m
    choose : str
        How the damping was chosen.
    ranges : (float, float), m and yr
        Ranges of the prior in space and time.
    """
    grid = result.grid
    return {
        "uplift_grid": {
            "spacing_km": m_to_km(grid.spacing),
            "step_myr": yr_to_myr(float(grid.ages[1])),
            "duration_myr": yr_to_myr(float(grid.ages[-1])),
            "n_places": grid.n_places,
            "n_ages": grid.n_ages,
            "resolved_share_of_well_sampled": float(result.resolved[result.well_sampled].mean()),
        },
        "fit": {
            "rms_m": float(np.sqrt(np.mean(residual**2))),
            "solved_rms_m": float(np.sqrt(np.mean((residual + result.fitted - result.solved) ** 2))),
            "held_out_rms_m": None,
            "reduced_chi_square": result.reduced_chi_square,
            "n_heights": result.n_rows,
            "n_unknowns": grid.n_unknowns,
            "effective_parameters": result.effective_parameters,
            "solver": result.method,
        },
        "noise": {
            "height_m": result.damping.height_sd,
            "walk_m_per_sqrt_km": None,
            "walk_gain_sqrt_km": None,
            "outlet_m": None,
        },
        "damping": {
            "choose": choose,
            "range_km": m_to_km(ranges[0]),
            "range_myr": yr_to_myr(ranges[1]),
            "spread_mm_per_yr": m_per_yr_to_mm_per_yr(result.damping.spread),
            "field_spread_mm_per_yr": m_per_yr_to_mm_per_yr(result.damping.field_spread),
            "background_mm_per_yr": m_per_yr_to_mm_per_yr(result.background),
            "log_evidence": result.log_evidence,
        },
    }


def comparison_part(comparison: Comparison, path: str) -> dict:
    """How the recovered history compares with a known one (from the file `path`, as its author wrote it)."""
    return {
        "path": path,
        "correlation": comparison.correlation,
        "rmse_mm_per_yr": m_per_yr_to_mm_per_yr(comparison.rmse),
        "skill": comparison.skill,
        "cover_of_95": comparison.cover,
        "n_nodes": comparison.n_nodes,
    }


def write_record(path: Path, record: dict) -> None:
    """Write the record as JSON; NaN or infinity in it is an error of the program."""
    path.write_text(json.dumps(record, indent=2, ensure_ascii=False, allow_nan=False) + "\n", encoding="utf-8")
