"""What comes before a run: first settings for a DEM, and a look at what a run would do."""

import os
from pathlib import Path

import numpy as np

from fluvinv.files import publish, rasters
from fluvinv.files.first_settings import first_settings_text
from fluvinv.files.settings_keys import naming_keys
from fluvinv.guesses import first_guesses
from fluvinv.inversion import nest_with_prior, predict_cost
from fluvinv.layout import lay_out
from fluvinv.pipeline import Outcome, Progress, draw_rivers, open_job, refuse_target, rivers_lines, target_folder
from fluvinv.report import summary
from fluvinv.units import m_to_km, yr_to_myr


def start(dem: Path, output: Path | None, overwrite: bool) -> Outcome:
    """Write a commented settings file, named after the DEM, into the output folder or the working folder.

    Raises
    ------
    InputError
        If the DEM cannot be used.
    OutputError
        If the file exists and is not to be replaced, or cannot be written.
    """
    with naming_keys({"catchment.dem": str(dem)}):
        grid = rasters.read_dem(dem)
        guesses = first_guesses(grid)
    folder = Path() if output is None else output
    target = folder / f"{dem.stem}.yml"
    written = os.path.relpath(dem.absolute(), folder.absolute())
    text = first_settings_text(written, dem.stem, guesses)
    publish.write_text(target, text, overwrite, [dem])
    n_rows, n_cols = grid.height.shape
    cell = m_to_km(float(np.median(grid.step_lengths().south)))
    lines = summary.entry(
        "DEM",
        [
            f"{n_rows:,} x {n_cols:,} cells of {cell:.3g} km, {grid.crs.name}; {int(grid.void.sum()):,} cells are void,"
            f" heights run from {np.nanmin(grid.height):,.0f} to {np.nanmax(grid.height):,.0f} m."
        ],
    )
    for key, (value, reason) in guesses.items():
        lines += summary.entry("Guess", [f"{key}: {value} ({reason})."])
    lines += summary.entry("Next", [f"read {target}, set the erodibility you believe in, then: fluvinv run {target}"])
    return Outcome(folder, lines, [])


def check(settings_path: Path, output: Path | None, overwrite: bool, progress: Progress) -> Outcome:
    """Tell what a run would do, and what it would cost; write nothing."""
    with open_job(settings_path, progress) as job:
        folder = target_folder(job.settings, output)
        if not refuse_target(job, settings_path, folder, overwrite, ("run",)):
            done = f"{folder} already holds the result of the same inputs and settings; a run would change nothing."
            return Outcome(folder, [done], [])
        rivers = draw_rivers(job)
        layout = lay_out(job.settings, rivers.network, rivers.tau, job.grid)
        job.step("", 1.0)
        grid, options = layout.grid, layout.options
        nested, prior = nest_with_prior(grid, options.range_space, options.range_time)
        solved, n_modes = nested.fine, prior.n_modes
        cost = predict_cost(rivers.tau, rivers.network.distance, solved, n_modes)
        n_rows, n_cols = job.grid.height.shape
        memory = (cost.memory + 60.0 * n_rows * n_cols) / 2**30
        seconds = cost.seconds + job.timings.get("drainage", 0.0) + 8.0
        lines = [
            *rivers_lines(job, rivers),
            *summary.entry(
                "Unknowns",
                [
                    f"{grid.n_unknowns:,}: {grid.n_places:,} map nodes {m_to_km(grid.spacing):g} km apart times"
                    f" {grid.n_ages} ages {yr_to_myr(grid.ages[1]):g} Myr apart, to {yr_to_myr(grid.ages[-1]):.3g} Ma;"
                    f" solved on a grid of {solved.n_unknowns:,} by {n_modes:,} modes of the prior; {cost.method}"
                    " solver."
                ],
            ),
            *summary.entry(
                "Prior",
                [
                    f"ranges {m_to_km(options.range_space):.3g} km and {yr_to_myr(options.range_time):.3g} Myr;"
                    f" damping by {options.choose}."
                ],
            ),
            *summary.entry(
                "Cost", [f"about {memory:.1f} GiB of memory and {seconds:,.0f} s (within a factor of two or three)."]
            ),
            *summary.entry("Would write", [str(folder)]),
        ]
        return Outcome(folder, lines, job.warnings + layout.warnings)
